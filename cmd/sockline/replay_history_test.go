package main

import (
	"strings"
	"testing"
	"time"

	"sockline/sensors"
)

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

// TestReplayHistory holds that a history gives again, byte for byte, what was
// issued when it was written: as a whole, and from moments in its midst, one
// of which has an alert open two hours before it.
func TestReplayHistory(t *testing.T) {
	if racing {
		t.Skip(checkedApart)
	}
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
	messages, end := messagesOf(t, skerrymoor, scene)
	cfg := loadSkerryMoor(t)
	start := sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC))
	for _, row := range []struct {
		name     string
		down, up time.Duration // since the start of the scene
		end      time.Duration // the same way: of the first alert, or of both
		because  string        // of a closing that must be there
	}{
		{"within a second", 120200 * time.Millisecond, 120700 * time.Millisecond, 5 * time.Minute, "below-level"},
		{"3 s", 120200 * time.Millisecond, 123400 * time.Millisecond, 5 * time.Minute, "below-level"},
		{"20 s", 120200 * time.Millisecond, 140700 * time.Millisecond, 16 * time.Minute, "below-level"},
		{"11 min", 120200 * time.Millisecond, 790 * time.Second, 16 * time.Minute, "expired-while-down"},
	} {
		t.Run(row.name, func(t *testing.T) {
			if racing && row.name != "3 s" {
				t.Skip(checkedApart)
			}
			dir := t.TempDir()
			r := newRecorder(t, cfg, dir)
			down, up, restarted := start.Add(row.down), start.Add(row.up), false
			for _, m := range messages {
				if m.Received >= up && !restarted {
					r.restart(dir, up)
					restarted = true
				}
				if (m.Received < down || restarted) && m.Received < start.Add(row.end) {
					r.receive(m)
				}
			}
			r.play(nil, min(end, start.Add(row.end)))
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
