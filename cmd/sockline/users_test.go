package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/alerting/page/access"
)

func TestUsers(t *testing.T) {
	path := filepath.Join(t.TempDir(), "users")
	run := func(input string, args ...string) (code int, stdout, stderr string) {
		var out, errs strings.Builder
		p := &program{stdin: strings.NewReader(input), stdout: &out, stderr: &errs}
		code = p.run(t.Context(), append([]string{"users"}, append(args, "--file", path)...))
		return code, out.String(), errs.String()
	}
	if code, out, _ := run("", "list", "--output", "json"); code != exitDone || !strings.HasPrefix(out, `{"users":[],"notice":"`) {
		t.Errorf("without a file: %d %s", code, out)
	}
	for _, tt := range []struct {
		input string
		args  []string
		code  int
		told  string
	}{
		{"gannet over the moor\n", []string{"add", "keeper", "--role", "tower"}, exitDone, "may log in as tower"},
		{"gannet over the moor", []string{"add", "--role", "officer", "safety"}, exitDone, "may log in as officer"},
		{"short\n", []string{"add", "guest", "--role", "viewer"}, exitFailed, "at least 12"},
		{"", []string{"add", "guest", "--role", "viewer"}, exitUsage, "standard input"},
		{"gannet over the moor\n", []string{"add", "guest", "--role", "chief"}, exitUsage, "choose viewer, tower"},
		{"gannet over the moor\n", []string{"add", "Guest Room", "--role", "viewer"}, exitUsage, "does not do"},
		{"gannet over the moor\n", []string{"add", "--role", "viewer"}, exitUsage, "name one user"},
		{"", []string{"remove", "nobody"}, exitFailed, "users list"},
		{"another password of mine\n", []string{"add", "keeper", "--role", "viewer"}, exitDone, "as viewer"},
		{"", []string{"remove", "safety"}, exitDone, "removed"},
	} {
		code, _, told := run(tt.input, tt.args...)
		if code != tt.code || !strings.Contains(told, tt.told) {
			t.Errorf("%v: exit code %d, %q; want %d, %q", tt.args, code, told, tt.code, tt.told)
		}
	}
	users, err := access.Read(path)
	if err != nil || len(users) != 1 || users[0].Name != "keeper" || users[0].Role != access.Viewer {
		t.Errorf("left are %v, %v", users, err)
	}
	code, out, _ := run("", "list")
	if code != exitDone || out != "viewer         keeper\n\n"+alerting.Notice+"\n" {
		t.Errorf("list: %d %q", code, out)
	}
	text, err := os.ReadFile(path)
	if err != nil || strings.Contains(string(text), "password") && strings.Contains(string(text), "mine") {
		t.Errorf("the file: %s, %v", text, err)
	}
	var errs strings.Builder
	p := &program{stdin: strings.NewReader(""), stdout: &errs, stderr: &errs}
	if code := p.run(t.Context(), []string{"users", "list"}); code != exitUsage || !strings.Contains(errs.String(), "--config FILE or --file FILE") {
		t.Errorf("without a place: %d %s", code, errs.String())
	}
	errs.Reset()
	if code := p.run(t.Context(), []string{"users", "list", "--config", skerrymoor}); code != exitFailed || !strings.Contains(errs.String(), "names no users_file") {
		t.Errorf("a configuration without users: %d %s", code, errs.String())
	}
}
