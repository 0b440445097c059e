package config

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

func TestCredentialsDirectory(t *testing.T) {
	dir := t.TempDir()
	if err := os.WriteFile(filepath.Join(dir, "broker-password"), []byte("moor\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile("../testdata/airfields/skerrymoor.toml")
	if err != nil {
		t.Fatal(err)
	}
	const plain = `url = "embedded://127.0.0.1:1883"`
	if !strings.Contains(string(text), plain) {
		t.Fatalf("skerrymoor.toml does not hold %s", plain)
	}
	for _, row := range []struct {
		name, path, variable string
		fault                string // a part of the message; empty where it is well
	}{
		{"as a service", "${CREDENTIALS_DIRECTORY}/broker-password", dir, ""},
		{"by hand", "${CREDENTIALS_DIRECTORY}/broker-password", "", "LoadCredential=broker-password:PATH"},
		{"no absolute directory", "${CREDENTIALS_DIRECTORY}/broker-password", "here", "is not set"},
		{"no such credential", "${CREDENTIALS_DIRECTORY}/other", dir, "cannot be read"},
		{"out of the directory", "${CREDENTIALS_DIRECTORY}/../broker-password", dir, "only variable"},
		{"another variable", "${HOME}/broker-password", dir, "only variable"},
		{"in the middle", dir + "/${CREDENTIALS_DIRECTORY}/broker-password", dir, "cannot be read"},
		{"without braces", "$CREDENTIALS_DIRECTORY/broker-password", dir, "cannot be read"},
		{"no file", "${CREDENTIALS_DIRECTORY}", dir, "only variable"},
		{"a plain path", filepath.Join(dir, "broker-password"), "", ""},
	} {
		t.Run(row.name, func(t *testing.T) {
			t.Setenv(CredentialsVariable, row.variable)
			source := strings.Replace(string(text), plain,
				"url = \"mqtts://broker.example:8883\"\nusername = \"sockline\"\npassword_file = \""+row.path+"\"", 1)
			cfg, problems := Parse("site.toml", []byte(source))
			if row.fault != "" {
				if len(problems) != 1 || !strings.Contains(problems.Error(), row.fault) || problems[0].Line == 0 {
					t.Fatalf("not one problem with %q and its place: %v", row.fault, problems)
				}
				return
			}
			if len(problems) > 0 || cfg.Broker.Password != "moor" {
				t.Errorf("the password is not read: %v", problems)
			}
		})
	}
}
