package config

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

const reloadFile = "../testdata/airfields/skerrymoor.toml"

func skerryText(t *testing.T) string {
	t.Helper()
	text, err := os.ReadFile(reloadFile)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// TestReloadable holds what may change while the program runs, and that what
// may not is named with its line.
func TestReloadable(t *testing.T) {
	text := skerryText(t)
	before, problems := Parse(reloadFile, []byte(text))
	if len(problems) > 0 {
		t.Fatal(problems)
	}
	for _, row := range []struct{ name, old, new, want string }{
		{"the same", "", "", ""},
		{"a level", `large_change      = "15 kt"`, `large_change      = "16 kt"`, ""},
		{"the name", `"Skerry Moor"`, `"Skerry Moor North"`, ""},
		{"a mast", "54.003174, -19.993126", "54.003184, -19.993126", ""},
		{"how long readings are kept", `"400 days"`, `"300 days"`, ""},
		{"the broker", "embedded://127.0.0.1:1883", "mqtt://127.0.0.1:1884", `:30:7: broker.url: the connection to the broker stands while the program runs (got "mqtt://127.0.0.1:1884"); restart the program`},
		{"who is told", "[page]", "[[webhook]]\nurl = \"https://tower.example/\"\n[page]", `:111:1: webhook: those who are told`},
		{"the page", "127.0.0.1:7625", "127.0.0.1:7626", `:112:10: page.listen: `},
		{"the history", "./sockline-data", "./elsewhere", `:108:13: history.directory: `},
		{"the id", `id        = "skerrymoor"`, `id        = "skerryvale"`, `:5:13: airfield.id: `},
		{"the prefix", "[history]", "[mqtt]\nprefix = \"a/b\"\n[history]", `:108:10: mqtt.prefix: `},
	} {
		t.Run(row.name, func(t *testing.T) {
			next, problems := Parse(reloadFile, []byte(strings.ReplaceAll(text, row.old, row.new)))
			if len(problems) > 0 {
				t.Fatal(problems)
			}
			got := before.Reloadable(next)
			switch {
			case row.want == "" && len(got) > 0:
				t.Errorf("refused: %v", got)
			case row.want != "" && (len(got) != 1 || !strings.HasPrefix(got[0].Error(), reloadFile+row.want)):
				t.Errorf("got  %v\nwant one that begins with %s%s", got, reloadFile, row.want)
			}
		})
	}
}

// TestReloadableNamesNoSecret: a password that has changed is named, and not
// told.
func TestReloadableNamesNoSecret(t *testing.T) {
	dir := t.TempDir()
	secret := filepath.Join(dir, "secret")
	text := strings.Replace(skerryText(t), `url = "embedded://127.0.0.1:1883"`, "url = \"mqtt://127.0.0.1:1883\"\nusername = \"tower\"\npassword_file = \"secret\"", 1)
	load := func(password string) *Config {
		t.Helper()
		if err := os.WriteFile(secret, []byte(password), 0o600); err != nil {
			t.Fatal(err)
		}
		cfg, problems := Parse(filepath.Join(dir, "x.toml"), []byte(text))
		if len(problems) > 0 {
			t.Fatal(problems)
		}
		return cfg
	}
	before, after := load("gannet"), load("fulmar")
	got := before.Reloadable(after)
	if len(got) != 1 || got[0].Key != "broker.password_file" || got[0].Line != 32 {
		t.Fatalf("got %v", got)
	}
	for _, word := range []string{"gannet", "fulmar"} {
		if strings.Contains(got.Error(), word) {
			t.Errorf("the password is told: %v", got)
		}
	}

	// What was recorded under it can be gone through on a machine without the
	// file, while anything else that is wrong still counts.
	if err := os.Remove(secret); err != nil {
		t.Fatal(err)
	}
	if _, problems := Parse(filepath.Join(dir, "x.toml"), []byte(text)); len(problems) != 1 {
		t.Errorf("without the file: %v", problems)
	}
	cfg, problems := ParseRecorded(filepath.Join(dir, "x.toml"), []byte(text))
	if len(problems) > 0 || len(cfg.Stations) != 8 || cfg.Hash != before.Hash {
		t.Errorf("recorded: %v, %+v", problems, cfg)
	}
	bad := strings.Replace(text, `noticeable_change = "10 kt"`, `noticeable_change = "300 kt"`, 1)
	if _, problems := ParseRecorded(filepath.Join(dir, "x.toml"), []byte(bad)); len(problems) != 1 || problems[0].Key != "alerts.noticeable_change" {
		t.Errorf("a level of 300 kt: %v", problems)
	}
}
