package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
)

// small is three masts along one runway: little to compute, so that hours can
// be replayed. Skerry Moor's geometry, with the other masts left out.
func small(tb testing.TB) string {
	tb.Helper()
	return writeFile(tb, "small.toml", only(tb, "touch07", "touch25", "final07"))
}

// only is Skerry Moor's configuration with these masts.
func only(tb testing.TB, masts ...string) string {
	tb.Helper()
	source, err := os.ReadFile(skerrymoor)
	if err != nil {
		tb.Fatal(err)
	}
	parts := strings.Split(string(source), "[[station]]")
	kept := parts[:1]
	for _, part := range parts[1:] {
		station, rest, _ := strings.Cut(part, "[alerts]")
		for _, id := range masts {
			if strings.Contains(station, `"`+id+`"`) {
				kept = append(kept, station)
			}
		}
		if rest != "" {
			kept[len(kept)-1] += "[alerts]" + rest
		}
	}
	return strings.Join(kept, "[[station]]")
}

// hours has an alert open two hours before another one: just where the silent
// part of a replay of the second begins. The broker is lost in between, which
// spares the test most of its time.
const hours = `
airfield   skerrymoor
start      2026-07-01T12:00:00Z
length     133 min
seed       21
wind       240 deg 6 kt
turbulence C
eddies     0.4 m/s length 1000 m time 300 s
outflow    at 1000 m before 07 strength 26 kt radius 900 m starts 6 min grows 2 min holds 3 min fades 1 min
outflow    at 800 m before 07 strength 26 kt radius 900 m starts 127 min grows 1 min holds 4 min fades 1 min
mast final07 dies from 9 min until 12 min
broker     lost from 14 min to 122 min
`

// recorder does what the daemon does with the history: each step with its
// readings, those that came late, and the issues.
type recorder struct {
	tb      testing.TB
	cfg     *config.Config
	engine  *engine.Engine
	store   *history.Store
	writer  *history.Writer
	ids     []string
	held    []lifecycle.Transition // of a start, to go out with the first step
	printed strings.Builder        // every issue
}

func newRecorder(tb testing.TB, cfg *config.Config, dir string) *recorder {
	tb.Helper()
	r := &recorder{tb: tb, cfg: cfg}
	var err error
	if r.engine, err = engine.New(engineSettings(cfg, true)); err != nil {
		tb.Fatal(err)
	}
	if r.store, err = history.Open(dir, history.Options{}); err != nil {
		tb.Fatal(err)
	}
	if r.writer, err = r.store.Writer(history.WriterOptions{}); err != nil {
		tb.Fatal(err)
	}
	for _, s := range cfg.Stations {
		r.ids = append(r.ids, s.ID)
	}
	return r
}

// receive takes a message, after the steps that are due before it.
func (r *recorder) receive(m sensors.Message) {
	r.closeDue(m.Received)
	if _, _, err := r.engine.Receive(m); err != nil {
		r.tb.Fatal(err)
	}
}

func (r *recorder) closeDue(stamp sensors.Instant) {
	for t, due := r.engine.Due(stamp); due; t, due = r.engine.Due(stamp) {
		r.submit(t, r.engine.Step(t))
	}
}

// submit hands a step to the history.
func (r *recorder) submit(t sensors.Instant, result *engine.Result) {
	b := history.Batch{Step: t, Stations: r.ids, Readings: result.Readings}
	for _, table := range result.Tables {
		b.Entries = append(b.Entries, history.Entry{Kind: history.KindTable, At: table.At, Payload: table.Payload})
	}
	for _, late := range result.Refused {
		b.Late = append(b.Late, history.LateReading{Reading: late.Reading, Reason: string(late.Reason)})
	}
	transitions := append(r.held, result.Transitions...)
	r.held = nil
	for _, tr := range transitions {
		object := wording.Of(tr, wordingContext(r.cfg, true)).WithRecorded(true).JSON()
		r.printed.Write(append(object, '\n'))
		b.Issues = append(b.Issues, history.Issue{Alert: tr.Alert, Object: object})
	}
	r.writer.Submit(b)
}

func (r *recorder) close() {
	if err := r.writer.Close(r.tb.Context()); err != nil {
		r.tb.Fatal(err)
	}
	if err := r.store.Close(); err != nil {
		r.tb.Fatal(err)
	}
}

// restart is what a new daemon does at a moment, in the place of one that has
// ended.
func (r *recorder) restart(dir string, now sensors.Instant) {
	r.tb.Helper()
	r.close()
	next := newRecorder(r.tb, r.cfg, dir)
	l, err := newLoop(r.cfg, true, zerolog.Nop())
	if err != nil {
		r.tb.Fatal(err)
	}
	if err := l.restore(next.store, now); err != nil {
		r.tb.Fatal(err)
	}
	next.engine, next.held = l.engine, l.held
	next.writer.Record(history.Entry{Kind: history.KindStart, At: now})
	r.engine, r.store, r.writer, r.held = next.engine, next.store, next.writer, next.held
}

// recorded runs a scene into a new history; it gives the directory and every
// issue.
func recorded(tb testing.TB, configuration, scene string) (dir, printed string) {
	tb.Helper()
	cfg, err := config.Load(configuration)
	if err != nil {
		tb.Fatal(err)
	}
	capture := filepath.Join(tb.TempDir(), "capture.jsonl")
	succeed(tb, "simulate", "--config", configuration, "--scene", writeFile(tb, "test.scene", scene), "--out", capture)
	messages, end := readCapture(tb, capture)
	dir = tb.TempDir()
	r := newRecorder(tb, cfg, dir)
	for _, m := range messages {
		r.receive(m)
	}
	r.closeDue(end)
	r.close()
	return dir, r.printed.String()
}

// TestReplayHistory holds that a history gives again, byte for byte, what was
// issued when it was written: as a whole, and from moments in its midst, one
// of which has an alert open two hours before it.
func TestReplayHistory(t *testing.T) {
	configuration := small(t)
	dir, printed := recorded(t, configuration, hours)
	start := time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC)
	for _, row := range []struct{ from, to time.Duration }{
		{0, 15 * time.Minute},
		{8*time.Minute + 30*time.Second, 12 * time.Minute}, // in the midst of an alert
		{2*time.Hour + 9*time.Minute + 33*time.Second, 0},  // two hours after one was open
	} {
		args := []string{"replay", "--config", configuration, "--history", dir}
		from, to := start, start.Add(24*time.Hour)
		if row.from > 0 {
			from = start.Add(row.from)
			args = append(args, "--from", from.Format(time.RFC3339))
		}
		if row.to > 0 {
			to = start.Add(row.to)
			args = append(args, "--to", to.Format(time.RFC3339))
		}
		o := succeed(t, args...)
		want := between(t, printed, from, to)
		if want == "" {
			t.Fatalf("%v: there is nothing to compare", args)
		}
		if o.stdout != want {
			t.Errorf("%v: %s", args, firstDifference(o.stdout, want))
		}
		if strings.Contains(o.stderr, "note:") {
			t.Errorf("%v: %s", args, o.stderr)
		}
	}
	// The third row is about an alert that was open two hours before it.
	before := between(t, printed, start.Add(9*time.Minute+27*time.Second), start.Add(9*time.Minute+33*time.Second))
	if !strings.Contains(before, `"state":"open"`) {
		t.Error("no alert was open at 12:09:33: the test does not show what it should")
	}
}

// TestReplayHistoryOverRestarts holds that the replay of a history in which
// the daemon was down for a while gives what it issued before and after: alerts
// that went on, and alerts that were too old to.
func TestReplayHistoryOverRestarts(t *testing.T) {
	const scene = `
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     16 min
seed       11
wind       240 deg 6 kt
turbulence C
outflow    at 2000 m before 07 strength 26 kt radius 900 m starts 60 s grows 20 s holds 70 s fades 20 s
outflow    at 2000 m before 07 strength 26 kt radius 900 m starts 860 s grows 20 s holds 50 s fades 20 s
`
	capture := simulated(t, scene)
	messages, end := readCapture(t, capture)
	cfg := loadSkerryMoor(t)
	start := sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC))
	for _, row := range []struct {
		name     string
		down, up time.Duration // since the start of the scene
		because  string        // of a closing that must be there
	}{
		{"within a second", 120200 * time.Millisecond, 120700 * time.Millisecond, "below-level"},
		{"3 s", 120200 * time.Millisecond, 123400 * time.Millisecond, "below-level"},
		{"20 s", 120200 * time.Millisecond, 140700 * time.Millisecond, "below-level"},
		{"11 min", 120200 * time.Millisecond, 790 * time.Second, "expired-while-down"},
	} {
		t.Run(row.name, func(t *testing.T) {
			dir := t.TempDir()
			r := newRecorder(t, cfg, dir)
			down, up, restarted := start.Add(row.down), start.Add(row.up), false
			for _, m := range messages {
				if m.Received >= up && !restarted {
					r.restart(dir, up)
					restarted = true
				}
				if m.Received < down || restarted {
					r.receive(m)
				}
			}
			r.closeDue(end)
			r.close()
			printed := r.printed.String()
			if !strings.Contains(printed, `"closed_because":"`+row.because+`"`) {
				t.Errorf("nothing closed as %s: the test does not show what it should", row.because)
			}
			o := succeed(t, "replay", "--config", skerrymoor, "--history", dir)
			if o.stdout != printed {
				t.Error(firstDifference(o.stdout, printed))
			}
			if strings.Contains(o.stderr, "note:") {
				t.Error(o.stderr)
			}
		})
	}
}

// TestReplayHistoryInUse holds what an operator is told whose daemon runs.
func TestReplayHistoryInUse(t *testing.T) {
	dir := t.TempDir()
	r := newRecorder(t, loadSkerryMoor(t), dir)
	defer r.close()
	o := call(t, "replay", "--config", skerrymoor, "--history", dir)
	if o.code != exitFailed || !strings.Contains(o.stderr, "give a copy of the directory") {
		t.Errorf("exit %d, %s", o.code, o.stderr)
	}
}

// TestReplayEmptyHistory holds that a history without readings is no error.
func TestReplayEmptyHistory(t *testing.T) {
	dir := t.TempDir()
	newRecorder(t, loadSkerryMoor(t), dir).close()
	o := succeed(t, "replay", "--config", skerrymoor, "--history", dir)
	if o.stdout != "" || !strings.Contains(o.stderr, "holds no readings") {
		t.Errorf("got %q and %q", o.stdout, o.stderr)
	}
}
