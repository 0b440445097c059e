package main

import (
	"context"
	"flag"
	"io"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
)

// The files that most tests use.
const (
	skerrymoor = "../../testdata/airfields/skerrymoor.toml"
	pellmark   = "../../testdata/airfields/pellmark.toml"
)

// outcome is what a run of the program leaves.
type outcome struct {
	code           int
	stdout, stderr string
}

// call runs the program on a fixed day.
func call(tb testing.TB, args ...string) outcome {
	tb.Helper()
	return callIn(tb, tb.Context(), strings.NewReader(""), args...)
}

func callIn(tb testing.TB, ctx context.Context, stdin io.Reader, args ...string) outcome {
	tb.Helper()
	var stdout, stderr console // as files are: safe for logs of several goroutines
	day := func() time.Time { return time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC) }
	p := program{stdin: stdin, stdout: &stdout, stderr: &stderr, now: day}
	code := p.run(ctx, args)
	return outcome{code, stdout.String(), stderr.String()}
}

// succeed runs the program and demands that it does what it was asked.
func succeed(tb testing.TB, args ...string) outcome {
	tb.Helper()
	o := call(tb, args...)
	if o.code != exitDone {
		tb.Fatalf("sockline %s: exit %d: %s", strings.Join(args, " "), o.code, o.stderr)
	}
	return o
}

// writeFile puts a file into the test's directory.
func writeFile(tb testing.TB, name, text string) string {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		tb.Fatal(err)
	}
	return path
}

// TestExit holds the exit codes, and that messages go to standard error.
func TestExit(t *testing.T) {
	bad := writeFile(t, "bad.toml", "[airfield]\nid = 7\n")
	for _, row := range []struct {
		name   string
		args   []string
		code   int
		stderr string // a part of it
		stdout string
	}{
		{"nothing", nil, exitUsage, "Usage: sockline COMMAND", ""},
		{"no such command", []string{"fly"}, exitUsage, `no command "fly"`, ""},
		{"half a command", []string{"events"}, exitUsage, `no command "events"`, ""},
		{"help", []string{"help"}, exitDone, "", "Usage: sockline COMMAND"},
		{"help of a command", []string{"help", "replay"}, exitDone, "", "--capture FILE"},
		{"help by flag", []string{"events", "list", "--help"}, exitDone, "", "Usage: sockline events list"},
		{"help of nothing", []string{"help", "fly"}, exitUsage, `no command "fly"`, ""},
		{"version", []string{"version"}, exitDone, "", "sockline dev, go"},
		{"version as JSON", []string{"version", "--output", "json"}, exitDone, "", `"version": "dev"`},
		{"version as a flag", []string{"--version"}, exitDone, "", "sockline dev"},
		{"unknown flag", []string{"version", "--fast"}, exitUsage, "-fast", ""},
		{"unknown output", []string{"version", "--output", "xml"}, exitUsage, "choose text or json", ""},
		{"stray operand", []string{"version", "now"}, exitUsage, `"now" stands where only flags`, ""},
		{"no configuration named", []string{"check"}, exitUsage, "--config is missing", ""},
		{"no such configuration", []string{"check", "--config", "none.toml"}, exitUsage, "none.toml", ""},
		{"bad configuration", []string{"check", "--config", bad}, exitUsage, "bad.toml:2:", ""},
		{"bad configuration elsewhere", []string{"replay", "--config", bad, "--capture", "x"}, exitUsage, "bad.toml:2:", ""},
		{"no scene", []string{"simulate", "--config", skerrymoor, "--out", "x"}, exitUsage, "--scene is missing", ""},
		{"unknown scene", []string{"simulate", "--config", skerrymoor, "--out", "x", "--scene", "snow"}, exitUsage, `no scene "snow"`, ""},
		{"scene nowhere", []string{"simulate", "--config", skerrymoor, "--scene", "quiet"}, exitUsage, "--out FILE or --to broker", ""},
		{"scene to elsewhere", []string{"simulate", "--config", skerrymoor, "--scene", "quiet", "--to", "tower"}, exitUsage, `"broker"`, ""},
		{"scene of another airfield", []string{"simulate", "--config", pellmark, "--out", "x", "--scene", "quiet"}, exitFailed, `plays on the airfield "skerrymoor"`, ""},
		{"record nowhere", []string{"record", "--config", skerrymoor}, exitUsage, "--out is missing", ""},
		{"replay nothing", []string{"replay", "--config", skerrymoor}, exitUsage, "--capture FILE or --history", ""},
		{"replay a missing file", []string{"replay", "--config", skerrymoor, "--capture", "none.jsonl"}, exitFailed, "none.jsonl", ""},
		{"replay backwards", []string{"replay", "--config", skerrymoor, "--capture", "x",
			"--from", "2026-07-01T15:00:00Z", "--to", "2026-07-01T14:00:00Z"}, exitUsage, "--from must lie before --to", ""},
		{"not a time", []string{"replay", "--from", "noon"}, exitUsage, "2026-07-01T14:00:00Z", ""},
		{"try nobody", []string{"try", "--config", skerrymoor, "--station", "far99", "--payload", "x"}, exitUsage, "there are touch07", ""},
		{"show what", []string{"events", "show", "--config", skerrymoor}, exitUsage, "one event", ""},
		{"events of nowhere", []string{"events", "list"}, exitUsage, "--config FILE or --history", ""},
		{"events of no history", []string{"events", "list", "--history", t.TempDir()}, exitFailed, "when it first runs", ""},
	} {
		t.Run(row.name, func(t *testing.T) {
			o := call(t, row.args...)
			if o.code != row.code {
				t.Errorf("exit %d, want %d", o.code, row.code)
			}
			if !strings.Contains(o.stderr, row.stderr) || (row.stderr == "" && o.stderr != "") {
				t.Errorf("standard error %q, want %q in it", o.stderr, row.stderr)
			}
			if !strings.Contains(o.stdout, row.stdout) || (row.stdout == "" && o.stdout != "") {
				t.Errorf("standard output %q, want %q in it", o.stdout, row.stdout)
			}
		})
	}
}

// TestUsageOfEveryCommand holds that each command and each of its flags is
// explained, in the order of the table and once.
func TestUsageOfEveryCommand(t *testing.T) {
	seen := map[string]bool{}
	for _, c := range commands() {
		if seen[c.name] || c.summary == "" || strings.HasSuffix(c.summary, ".") {
			t.Errorf("%q: named twice, without a summary, or with a full stop in it", c.name)
		}
		seen[c.name] = true
		if !strings.Contains(overview(), "  "+c.name+" ") {
			t.Errorf("%q is not in the overview", c.name)
		}
		text := usage(c)
		fs := newFlagSet(c)
		c.setup(fs)
		fs.VisitAll(func(f *flag.Flag) {
			if f.Usage == "" || !strings.Contains(text, "--"+f.Name) {
				t.Errorf("%s --%s is not explained", c.name, f.Name)
			}
		})
	}
	if !strings.HasSuffix(overview(), alerting.Notice+"\n") {
		t.Error("the overview does not end with the notice")
	}
}

// TestOperandsAndFlagsInAnyOrder holds what parse takes.
func TestOperandsAndFlagsInAnyOrder(t *testing.T) {
	for _, row := range []struct {
		args, operands, value string
	}{
		{"--name x one", "one", "x"},
		{"one --name x", "one", "x"},
		{"one --name x two", "one two", "x"},
		{"one -- --name", "one --name", ""},
		{"-- one", "one", ""},
		{"", "", ""},
	} {
		fs := flag.NewFlagSet("", flag.ContinueOnError)
		name := fs.String("name", "", "")
		got, err := parse(fs, strings.Fields(row.args))
		if err != nil || strings.Join(got, " ") != row.operands || *name != row.value {
			t.Errorf("%q: operands %q, name %q, error %v; want %q and %q", row.args, got, *name, err, row.operands, row.value)
		}
	}
}
