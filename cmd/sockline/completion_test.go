package main

import (
	"bytes"
	"context"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/testdata/scenes"
)

// shell is the path of a shell; the test is skipped where there is none.
func shell(t *testing.T, name string) string {
	t.Helper()
	path, err := exec.LookPath(name)
	if err != nil {
		t.Skipf("%s is not here: its completion is not tried", name)
	}
	return path
}

// script runs a program on a text within a generous time, without the files
// that a person starts a shell with.
func script(t *testing.T, dir, program string, args ...string) string {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), patience)
	defer cancel()
	c := exec.CommandContext(ctx, program, args...)
	c.Dir, c.Env = dir, append(os.Environ(), "HOME="+dir, "XDG_CONFIG_HOME="+dir, "XDG_DATA_HOME="+dir, "TERM=dumb", "LC_ALL=C.UTF-8")
	var stdout, stderr bytes.Buffer
	c.Stdout, c.Stderr = &stdout, &stderr
	if err := c.Run(); err != nil {
		t.Fatalf("%s: %v\n%s\n%s", filepath.Base(program), err, &stdout, &stderr)
	}
	if stderr.Len() > 0 {
		t.Errorf("%s complains: %s", filepath.Base(program), &stderr)
	}
	return stdout.String()
}

// completions are what is offered after some words; the last one is begun and
// may be empty. A few offers are enough: all others come from the same table.
var completions = [...]struct {
	words []string
	has   []string
	hasNo []string
}{
	{[]string{"si"}, []string{"simulate"}, []string{"run"}},
	{[]string{""}, []string{"run", "events", "help", "completion", "man", "version"}, []string{"list", "--config"}},
	{[]string{"events", ""}, []string{"list", "show"}, []string{"run", "--config"}},
	{[]string{"help", "rep"}, []string{"replay"}, []string{"run"}},
	{[]string{"run", "--"}, []string{"--config", "--capture", "--exercise"}, []string{"--scene"}},
	{[]string{"events", "list", "--o"}, []string{"--open", "--output"}, []string{"--config"}},
	{[]string{"check", "--output", ""}, []string{"text", "json"}, []string{"--config"}},
	{[]string{"simulate", "--scene", "gust"}, []string{"gust-front", "gusty"}, []string{"quiet"}},
	{[]string{"run", "--config", "inv"}, []string{"invented.toml"}, []string{"--exercise", "run"}},
	{[]string{"replay", "--history", "inv"}, []string{"invented.d/"}, []string{"invented.toml"}},
	{[]string{"completion", "z"}, []string{"zsh"}, []string{"bash"}},
}

// place is a directory with one file and one directory to complete.
func place(t *testing.T) string {
	t.Helper()
	dir := t.TempDir()
	if err := os.WriteFile(filepath.Join(dir, "invented.toml"), nil, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.Mkdir(filepath.Join(dir, "invented.d"), 0o700); err != nil {
		t.Fatal(err)
	}
	return dir
}

// offered checks what a shell offered.
func offered(t *testing.T, words []string, got, has, hasNo []string) {
	t.Helper()
	for _, w := range has {
		if !slices.Contains(got, w) && !slices.Contains(got, strings.TrimSuffix(w, "/")) {
			t.Errorf("after %q %q is missing: %q", words, w, got)
		}
	}
	for _, w := range hasNo {
		if slices.Contains(got, w) {
			t.Errorf("after %q %q has no place: %q", words, w, got)
		}
	}
}

func TestBashCompletion(t *testing.T) {
	bash, dir := shell(t, "bash"), place(t)
	file := writeFile(t, "sockline.bash", succeed(t, "completion", "bash").stdout)
	for _, row := range completions {
		var line strings.Builder
		line.WriteString("set -u; source " + file + "; COMP_WORDS=(sockline")
		for _, w := range row.words {
			line.WriteString(" '" + w + "'")
		}
		line.WriteString("); COMP_CWORD=$((${#COMP_WORDS[@]} - 1)); complete -p sockline >/dev/null; _sockline; printf '%s\\n' \"${COMPREPLY[@]}\"")
		offered(t, row.words, strings.Fields(script(t, dir, bash, "--norc", "--noprofile", "-c", line.String())), row.has, row.hasNo)
	}
	// bash itself takes --flag=value apart.
	split := "source " + file + "; COMP_WORDS=(sockline check --output =); COMP_CWORD=3; _sockline; echo ${COMPREPLY[@]}"
	if got := strings.Fields(script(t, dir, bash, "--norc", "-c", split)); !slices.Equal(got, []string{"text", "json"}) {
		t.Errorf("after --output= bash offers %q", got)
	}
}

func TestFishCompletion(t *testing.T) {
	fish, dir := shell(t, "fish"), place(t)
	file := writeFile(t, "sockline.fish", succeed(t, "completion", "fish").stdout)
	for _, row := range completions {
		line := "source " + file + "; complete -C '" + strings.Join(append([]string{"sockline"}, row.words...), " ") + "'"
		var got []string
		for l := range strings.Lines(script(t, dir, fish, "--no-config", "-c", line)) {
			word, _, _ := strings.Cut(strings.TrimSuffix(l, "\n"), "\t")
			got = append(got, word)
		}
		offered(t, row.words, got, row.has, row.hasNo)
	}
}

// zsh completes on a terminal only; this program gives it one of its own and
// reads from it until what is awaited has come.
const zshTerminal = `
zmodload zsh/zpty
zpty shell zsh -f -i
zpty -w shell "PS1=; unsetopt zle_bracketed_paste; autoload -Uz compinit; compinit -u -D; setopt list_ambiguous; LISTMAX=0; source $1; echo is''-ready"
zpty -r -m shell seen '*is-ready*'
zpty -w -n shell "$2"$'\t'
zpty -r -m shell seen "*$3*"
print -r -- "$seen"
zpty -d shell
`

func TestZshCompletion(t *testing.T) {
	zsh, dir := shell(t, "zsh"), place(t)
	file := writeFile(t, "_sockline", succeed(t, "completion", "zsh").stdout)
	script(t, dir, zsh, "-f", "-n", file) // syntax
	for _, row := range []struct{ typed, becomes string }{
		{"sockline simu", "sockline simulate "},
		{"sockline events sh", "sockline events show "},
		{"sockline help repl", "sockline help replay "},
		{"sockline run --ex", "sockline run --exercise "},
		{"sockline events list --op", "sockline events list --open "},
		{"sockline check --output j", "sockline check --output json "},
		{"sockline simulate --scene slow", "sockline simulate --scene slow-veer "},
		{"sockline run --config inv", "invented"},
		{"sockline completion z", "sockline completion zsh "},
	} {
		t.Run(row.typed, func(t *testing.T) {
			t.Parallel()
			// A completion that does not come is found by the deadline of script.
			if out := script(t, dir, zsh, "-f", "-c", zshTerminal, "zsh", file, row.typed, row.becomes); !strings.Contains(out, strings.TrimPrefix(row.becomes, row.typed)) {
				t.Errorf("zsh shows %q", out)
			}
		})
	}
}

// Every command and flag is in all three, and nothing is offered that is
// refused.
func TestCompletionsAreWhole(t *testing.T) {
	for _, sh := range shells() {
		text := succeed(t, "completion", sh).stdout
		for _, c := range commands() {
			for _, w := range strings.Fields(c.name) {
				if !strings.Contains(text, w) {
					t.Errorf("%s does not know %s", sh, c.name)
				}
			}
			for _, o := range options(c) {
				if !strings.Contains(text, "--"+o.name) && !strings.Contains(text, "-l "+o.name) {
					t.Errorf("%s does not know --%s of %s", sh, o.name, c.name)
				}
			}
		}
		for _, name := range scenes.Names() {
			if !strings.Contains(text, name) {
				t.Errorf("%s does not know the scene %s", sh, name)
			}
		}
	}
	for _, c := range commands() {
		for _, o := range options(c) {
			if o.kind != oneOfWords {
				continue
			}
			for _, w := range o.words {
				fs := newFlagSet(c)
				c.setup(fs)
				if err := fs.Set(o.name, w); err != nil {
					t.Errorf("%s --%s %s is offered and refused: %v", c.name, o.name, w, err)
				}
			}
		}
	}
	for _, args := range [][]string{{"completion"}, {"completion", "tcl"}, {"completion", "bash", "zsh"}} {
		if o := call(t, args...); o.code != exitUsage || o.stdout != "" || !strings.Contains(o.stderr, "bash, zsh, fish") {
			t.Errorf("%q: %+v", args, o)
		}
	}
}

func TestManualPages(t *testing.T) {
	t.Setenv("SOURCE_DATE_EPOCH", "1782907200") // 2026-07-01T12:00:00Z
	dir := filepath.Join(t.TempDir(), "man1")
	succeed(t, "man", "--out", dir)
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	if len(entries) != len(commands())+1 {
		t.Errorf("%d pages for %d commands", len(entries), len(commands()))
	}
	for _, c := range commands() {
		text, err := os.ReadFile(filepath.Join(dir, pageName(c)+".1"))
		if err != nil {
			t.Fatal(err)
		}
		if one := succeed(t, append([]string{"man"}, strings.Fields(c.name)...)...).stdout; one != string(text) {
			t.Errorf("the page of %s differs between screen and file", c.name)
		}
		if !strings.HasPrefix(string(text), `.TH "`+roffText(pageName(c))+`" 1 2026-07-01 `) {
			t.Errorf("the page of %s begins with %.60q", c.name, text)
		}
		for _, o := range options(c) {
			if !strings.Contains(string(text), `"\-\-`+roffText(o.name)+`"`) {
				t.Errorf("the page of %s does not name --%s", c.name, o.name)
			}
		}
	}
	again := filepath.Join(t.TempDir(), "man1")
	succeed(t, "man", "--out", again)
	for _, e := range entries {
		first, _ := os.ReadFile(filepath.Join(dir, e.Name()))
		second, _ := os.ReadFile(filepath.Join(again, e.Name()))
		if len(first) == 0 || !bytes.Equal(first, second) {
			t.Errorf("%s differs from one time to the next", e.Name())
		}
	}
	t.Run("mandoc", func(t *testing.T) {
		mandoc := shell(t, "mandoc")
		ctx, cancel := context.WithTimeout(t.Context(), patience)
		defer cancel()
		args := []string{"-T", "lint", "-W", "warning"}
		for _, e := range entries {
			args = append(args, filepath.Join(dir, e.Name()))
		}
		if out, err := exec.CommandContext(ctx, mandoc, args...).CombinedOutput(); err != nil || len(out) > 0 {
			t.Errorf("mandoc: %v\n%s", err, out)
		}
	})
	t.Run("man", func(t *testing.T) {
		man := shell(t, "man")
		if _, err := exec.LookPath("groff"); err != nil {
			t.Skip("groff is not here: man cannot set a page")
		}
		out := script(t, dir, man, "-P", "cat", "-l", filepath.Join(dir, "sockline-replay.1"))
		flat := strings.Join(strings.Fields(out), " ")
		for _, w := range []string{"--capture FILE", "sockline replay", "never a reason to continue", "${CREDENTIALS_DIRECTORY}/"} {
			if !strings.Contains(flat, w) {
				t.Errorf("man does not show %q:\n%s", w, out)
			}
		}
	})
}

func TestManualDate(t *testing.T) {
	now := func() time.Time { return time.Date(2026, 7, 1, 23, 0, 0, 0, time.FixedZone("", -2*3600)) }
	for _, row := range []struct{ epoch, want, fault string }{
		{"0", "1970-01-01", ""},
		{"1782907200", "2026-07-01", ""}, // date -u -d @1782907200
		{"", "2026-07-02", ""},           // a test is built without the state of its source
		{"tomorrow", "", "seconds since 1970"},
		{"-1", "", "seconds since 1970"},
	} {
		got, err := manualDate(now, func(string) string { return row.epoch })
		if got != row.want || (err == nil) != (row.fault == "") || err != nil && !strings.Contains(err.Error(), row.fault) {
			t.Errorf("%q gives %q, %v", row.epoch, got, err)
		}
	}
	for _, args := range [][]string{{"man", "fly"}, {"man", "--out", t.TempDir(), "run"}} {
		if o := call(t, args...); o.code != exitUsage {
			t.Errorf("%q: %+v", args, o)
		}
	}
}

func TestRoffText(t *testing.T) {
	for _, row := range []struct{ text, want string }{
		{"plain words", "plain words"},
		{".gz and .zst", `\&.gz and .zst`},
		{"'quoted'", `\&'quoted'`},
		{"--out", `\-\-out`},
		{`a\b`, `a\eb`},
	} {
		if got := roffText(row.text); got != row.want {
			t.Errorf("%q becomes %q, not %q", row.text, got, row.want)
		}
	}
}
