package main

import (
	"bytes"
	"context"
	"encoding/json"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
	"sockline/alerting/history/bundle"
	"sockline/sensors/feed"
)

// TestHistoryCommands does with a recorded history what a safety officer does:
// from the directory, and while a daemon holds it.
func TestHistoryCommands(t *testing.T) {
	dir, printed := recorded(t, skerrymoor, short)
	id := alertLines(t, printed)[0].ID
	free, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	configuration := withLines(t, "./sockline-data", dir, "127.0.0.1:7625", free.Addr().String(), "127.0.0.1:1883", "127.0.0.1:0")
	free.Close()
	h := &historyUser{dir: dir, id: id, printed: printed, where: []string{"--config", configuration}}
	t.Run("from the directory", h.look)
	d, err := newDaemon(mustLoad(t, configuration), daemonOptions{exercise: true, clock: feed.NewClock(), log: zerolog.Nop(), instance: "under-test"})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	<-d.listening
	t.Run("while the daemon runs", h.look)
	cancel()
	if err := <-ended; err != nil {
		t.Error(err)
	}
	// What was said through the daemon is there when it has gone.
	if notes := recordedAs(t, dir, history.KindNote); len(notes) != 2 || !strings.Contains(notes[1], `"who":"Io"`) {
		t.Errorf("notes %v", notes)
	}
	if _, err := os.Stat(filepath.Join(dir, hatchName)); !os.IsNotExist(err) {
		t.Errorf("the socket is left behind: %v", err)
	}
}

type historyUser struct {
	dir, id, printed string
	where            []string
}

func (h *historyUser) do(t *testing.T, words string, args ...string) outcome {
	t.Helper()
	return succeed(t, append(append(strings.Fields(words), args...), h.where...)...)
}

func (h *historyUser) look(t *testing.T) {
	h.note(t)
	h.verify(t)
	h.backup(t)
	h.export(t)
	h.evidence(t)
}

func (h *historyUser) note(t *testing.T) {
	o := h.do(t, "events note --output json --who Io", h.id, "the sock stood out straight")
	var n struct {
		Record      uint64
		Who, Notice string
	}
	if err := json.Unmarshal([]byte(o.stdout), &n); err != nil || n.Record == 0 || n.Who != "Io" || n.Notice != alerting.Notice {
		t.Errorf("%s, %v", o.stdout, err)
	}
}

func (h *historyUser) verify(t *testing.T) {
	var r history.Report
	if err := json.Unmarshal([]byte(h.do(t, "history verify --output json").stdout), &r); err != nil || !r.OK() || r.Steps < 300 || r.Notice != alerting.Notice {
		t.Errorf("%+v, %v", r, err)
	}
	text := h.do(t, "history verify").stdout
	if !strings.Contains(text, "Everything is as it was written.\n") || !strings.HasSuffix(text, alerting.Notice+"\n") {
		t.Errorf("as text: %s", text)
	}
	// A head that was noted before is passed; another one is not.
	noted := r.Head
	for head, want := range map[string]int{
		numbered(r.Records, noted):                         exitDone,
		numbered(r.Records+99, noted):                      exitFailed,
		numbered(r.Records-1, noted):                       exitFailed,
		numbered(r.Records, strings.Repeat("0", 64)):       exitFailed,
		numbered(r.Records, "1234"):                        exitUsage,
		strings.Repeat("0", 64):                            exitUsage,
		numbered(r.Records, strings.Repeat("z", 64)):       exitUsage,
		numbered(0, strings.Repeat("0", 64)):               exitUsage,
		"x" + numbered(r.Records, strings.Repeat("0", 64)): exitUsage,
	} {
		if o := call(t, append([]string{"history", "verify", "--head", head}, h.where...)...); o.code != want {
			t.Errorf("head %s: exit %d, want %d; %s", head, o.code, want, o.stderr)
		}
	}
}

func numbered(n uint64, hash string) string {
	return strings.TrimSpace(strings.Join([]string{jsonText(n), hash}, ":"))
}

func jsonText(v any) string {
	b, err := json.Marshal(v)
	if err != nil {
		return err.Error()
	}
	return string(b)
}

// backup copies, restores and replays: the drill.
func (h *historyUser) backup(t *testing.T) {
	out := filepath.Join(t.TempDir(), "copy")
	var res backup.Result
	if err := json.Unmarshal([]byte(h.do(t, "history backup --output json --out", out).stdout), &res); err != nil || !res.Report.OK() || res.Report.Steps < 300 {
		t.Errorf("%+v, %v", res, err)
	}
	succeed(t, "history", "verify", "--history", out)
	got := succeed(t, "replay", "--config", skerrymoor, "--history", out, "--to", "2026-07-01T14:10:00Z").stdout
	if got != h.printed {
		t.Errorf("the copy replays to\n%s\nwant\n%s", got, h.printed)
	}
	if o := call(t, append([]string{"history", "backup", "--out", out}, h.where...)...); o.code != exitFailed || !strings.Contains(o.stderr, "never replaces another") {
		t.Errorf("over the first one: exit %d, %s", o.code, o.stderr)
	}
}

func (h *historyUser) export(t *testing.T) {
	var first string
	for _, format := range []string{"csv", "jsonl", "parquet"} {
		out := filepath.Join(t.TempDir(), "table")
		o := h.do(t, "history export --from 2026-07-01T14:01:00Z --to 2026-07-01T14:02:00Z --format "+format+" --out", out)
		if !strings.Contains(o.stderr, "readings of 60 steps") {
			t.Errorf("%s: %s", format, o.stderr)
		}
		b, err := os.ReadFile(out)
		if err != nil || !bytes.Contains(b, []byte(alerting.Notice)) {
			t.Errorf("%s: %d bytes without the notice, %v", format, len(b), err)
		}
		if format == "csv" {
			first = string(b)
		}
	}
	if o := h.do(t, "history export --from 2026-07-01T14:01:00Z --to 2026-07-01T14:02:00Z --out -"); o.stdout != first {
		t.Errorf("on the standard output are %d bytes, %d in the file", len(o.stdout), len(first))
	}
}

func (h *historyUser) evidence(t *testing.T) {
	at := t.TempDir()
	one, two, red := filepath.Join(at, "1.zip"), filepath.Join(at, "2.zip"), filepath.Join(at, "3.zip")
	var sum bundle.Summary
	if err := json.Unmarshal([]byte(h.do(t, "events export --output json", h.id, "--bundle", one).stdout), &sum); err != nil || sum.Event != h.id || sum.People == 0 {
		t.Errorf("%+v, %v", sum, err)
	}
	h.do(t, "events export", h.id, "--bundle", two)
	h.do(t, "events export", h.id, "--redact-names", "--bundle", red)
	a, err := os.ReadFile(one)
	if err != nil {
		t.Fatal(err)
	}
	b, err := os.ReadFile(two)
	if err != nil || !bytes.Equal(a, b) {
		t.Errorf("the same export twice gives two files, %v", err)
	}
	for _, path := range []string{one, red} {
		text := succeed(t, "history", "verify", "--bundle", path, "--key", sum.Key).stdout
		if !strings.Contains(text, "signed by the key that was given") || !strings.HasSuffix(text, alerting.Notice+"\n") {
			t.Errorf("%s: %s", path, text)
		}
	}
	text, err := os.ReadFile(red)
	if err != nil || bytes.Contains(text, []byte(`"Io"`)) || !bytes.Contains(text, []byte("person 1")) {
		t.Errorf("the redacted archive has the name, %v", err)
	}
	a[len(a)/2] ^= 1
	bad := writeFile(t, "bad.zip", string(a))
	if o := call(t, "history", "verify", "--bundle", bad); o.code != exitFailed {
		t.Errorf("a changed archive: exit %d, %s", o.code, o.stderr)
	}
}

// TestHistoryBadInput: what cannot be done is told with its mend, and leaves
// nothing behind.
func TestHistoryBadInput(t *testing.T) {
	dir, printed := recorded(t, skerrymoor, short)
	id := alertLines(t, printed)[0].ID
	at := t.TempDir()
	there := filepath.Join(at, "there")
	if err := os.WriteFile(there, []byte("x"), 0o600); err != nil {
		t.Fatal(err)
	}
	empty, out := t.TempDir(), filepath.Join(at, "new")
	for _, row := range []struct {
		args []string
		code int
		want string
	}{
		{[]string{"history", "verify"}, exitUsage, "give either --config FILE or --history DIRECTORY"},
		{[]string{"history", "verify", "--history", empty}, exitFailed, "name the directory that holds journal.db"},
		{[]string{"history", "verify", "--history", filepath.Join(empty, "no")}, exitFailed, "name the directory that holds journal.db"},
		{[]string{"history", "verify", "--bundle", there}, exitFailed, "not an archive of an event"},
		{[]string{"history", "verify", "--bundle", out}, exitFailed, "no such file"},
		{[]string{"history", "verify", "--bundle", there, "--history", dir}, exitUsage, "stands alone"},
		{[]string{"history", "verify", "--bundle", there, "--key", "12"}, exitUsage, "64 hexadecimal digits"},
		{[]string{"history", "verify", "--history", dir, "--key", "12"}, exitUsage, "--key goes with --bundle"},
		{[]string{"history", "backup", "--history", dir}, exitUsage, "--out is missing"},
		{[]string{"history", "backup", "--history", dir, "--out", there}, exitFailed, "never replaces"},
		{[]string{"history", "backup", "--history", empty, "--out", out}, exitFailed, "name the directory"},
		{[]string{"history", "export", "--history", dir}, exitUsage, "--out is missing"},
		{[]string{"history", "export", "--history", dir, "--out", there}, exitFailed, "it is not replaced"},
		{[]string{"history", "export", "--history", dir, "--out", out, "--format", "xml"}, exitUsage, "choose csv, jsonl or parquet"},
		{[]string{"history", "export", "--history", dir, "--out", out, "--from", "2026-07-02T00:00:00Z", "--to", "2026-07-01T00:00:00Z"}, exitUsage, "--from must lie before --to"},
		{[]string{"history", "export", "--history", dir, "--out", filepath.Join(out, "no", "x")}, exitFailed, "no such file or directory"},
		{[]string{"history", "export", "--history", dir, "--out", "/dev/full"}, exitFailed, "it is not replaced"},
		{[]string{"events", "note", "--history", dir, id}, exitUsage, "put the text into quotes"},
		{[]string{"events", "note", "--history", dir, id, "  "}, exitUsage, "the note is empty"},
		{[]string{"events", "note", "--history", dir, id, "a\x1b[2J"}, exitUsage, "no text"},
		{[]string{"events", "note", "--history", dir, id, strings.Repeat("x", maxNote+1)}, exitUsage, "at most 4096"},
		{[]string{"events", "note", "--history", dir, "nobody", "text"}, exitFailed, "no such event"},
		{[]string{"events", "note", "--history", empty, id, "text"}, exitFailed, "name the directory"},
		{[]string{"events", "export", "--history", dir, id}, exitUsage, "--bundle is missing"},
		{[]string{"events", "export", "--history", dir, "nobody", "--bundle", out}, exitFailed, "no such event"},
		{[]string{"events", "export", "--history", dir, id, "--bundle", there}, exitFailed, "it is not replaced"},
	} {
		o := call(t, row.args...)
		if o.code != row.code || !strings.Contains(o.stderr, row.want) {
			t.Errorf("%v: exit %d, want %d, with %q: %s", row.args, o.code, row.code, row.want, o.stderr)
		}
	}
	for name, want := range map[string]int{at: 1, empty: 0} {
		if entries, _ := os.ReadDir(name); len(entries) != want {
			t.Errorf("left behind: %v", entries)
		}
	}
}

// TestExportOntoAFullDisk: a target that fills up leaves nothing behind.
func TestExportOntoAFullDisk(t *testing.T) {
	disk := tmpfs(t)
	// 16 KiB are left.
	if err := os.WriteFile(filepath.Join(disk, "filler"), make([]byte, 4<<20-16<<10), 0o600); err != nil {
		t.Fatal(err)
	}
	dir, printed := recorded(t, skerrymoor, short)
	id := alertLines(t, printed)[0].ID
	for _, args := range [][]string{
		{"history", "export", "--history", dir, "--out", filepath.Join(disk, "table")},
		{"history", "export", "--history", dir, "--format", "parquet", "--out", filepath.Join(disk, "table")},
		{"history", "backup", "--history", dir, "--out", filepath.Join(disk, "copy")},
		{"events", "export", "--history", dir, id, "--bundle", filepath.Join(disk, "event.zip")},
	} {
		o := call(t, args...)
		if o.code != exitFailed || !strings.Contains(o.stderr, "no space left") {
			t.Errorf("%v: exit %d, %s", args, o.code, o.stderr)
		}
		if entries, _ := os.ReadDir(disk); len(entries) != 1 {
			t.Errorf("%v: left behind %v", args, entries)
		}
	}
}
