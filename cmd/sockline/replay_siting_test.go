package main

import (
	"bytes"
	"fmt"
	"strings"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/config"
	"sockline/sensors"
)

// overMidnight has an alert open while what is removed of the sites changes. The
// wind before it is steady enough to learn from.
const overMidnight = `
airfield   skerrymoor
start      2026-07-10T23:39:00Z
length     25 min
seed       8
wind       240 deg 14 kt
turbulence C
outflow    at 800 m before 07 strength 26 kt radius 900 m starts 19 min grows 1 min holds 3 min fades 1 min
`

// sitingUntil are the tables of four days, the last of which makes what is
// learnt of a mast enough: the day after, touch25 is turned back by about 9
// degrees and its wind raised by a seventh.
func sitingUntil(last time.Time) (tables []engine.Table) {
	for day := range 4 {
		for hour := 1; hour <= 16; hour++ {
			at := sensors.At(last.AddDate(0, 0, day-3).Add(time.Duration(hour) * time.Hour))
			tables = append(tables, engine.Table{At: at, Payload: fmt.Appendf(nil,
				`{"table":"siting","data":{"hour_ms":%d,"masts":{"touch25":{"8":{"n":6,"turned_deg":60,"log_ratio":-0.9}}}}}`, int64(at))})
		}
	}
	return tables
}

// recordedSiting runs overMidnight into a new history in which tables of
// earlier days stand; with a restart at the moment up, 0 for none.
func recordedSiting(tb testing.TB, cfg *config.Config, messages []sensors.Message, end, up sensors.Instant) (dir, printed string) {
	tb.Helper()
	dir = tb.TempDir()
	r := newRecorder(tb, cfg, dir)
	for _, table := range sitingUntil(time.Date(2026, 7, 10, 0, 0, 0, 0, time.UTC)) {
		r.writer.Record(history.Entry{Kind: history.KindTable, At: table.At, Payload: table.Payload})
		if err := r.engine.LoadTable(table); err != nil {
			tb.Fatal(err)
		}
	}
	for _, m := range messages {
		if up != 0 && m.Received >= up {
			r.restart(dir, up)
			up = 0
		}
		r.receive(m)
	}
	r.play(nil, end)
	return dir, r.printed.String()
}

// TestReplayHistoryWithSiting holds that a history in which siting is removed,
// and what is removed changes at a UTC hour under an open alert, gives again byte
// for byte what was issued: whole, from its midst, and over a restart.
func TestReplayHistoryWithSiting(t *testing.T) {
	if racing {
		t.Skip(checkedApart)
	}
	source := only(t, "touch07", "touch25", "final07", "far07")
	on := writeFile(t, "on.toml", source+"\n[analysis]\nsiting = \"remove\"\n")
	cfg := mustLoad(t, on)
	if !cfg.Analysis.RemoveSiting {
		t.Fatal("siting is not removed")
	}
	off := writeFile(t, "off.toml", source)
	messages, end := messagesOf(t, on, overMidnight)
	midnight := time.Date(2026, 7, 11, 0, 0, 0, 0, time.UTC)
	dir, printed := recordedSiting(t, cfg, messages, end, 0)

	// What the test is about: an alert is open over midnight, the hour before it
	// taught something, and what is removed changes what is told.
	if before, after := between(t, printed, midnight.Add(-30*time.Second), midnight), between(t, printed, midnight, midnight.Add(time.Minute)); !strings.Contains(before, `"state":"open"`) || !strings.Contains(after, `"state":"open"`) {
		t.Error("no alert is open over midnight")
	}
	if !learntAt(t, dir, sensors.At(midnight)) {
		t.Error("the hour before midnight taught nothing of the sites")
	}
	_, unlike := recordedSiting(t, mustLoad(t, off), messages, end, 0)
	if between(t, unlike, time.Time{}, midnight) != between(t, printed, time.Time{}, midnight) {
		t.Error("before midnight something is removed already")
	}
	if unlike == printed {
		t.Error("what is removed makes no difference")
	}

	again := func(name, dir, want string, args ...string) {
		t.Helper()
		o := succeed(t, append([]string{"replay", "--config", on, "--history", dir}, args...)...)
		if o.stdout != want || want == "" {
			t.Errorf("%s: %s", name, firstDifference(o.stdout, want))
		}
		if strings.Contains(o.stderr, "note:") {
			t.Errorf("%s: %s", name, o.stderr)
		}
	}
	again("whole", dir, printed)
	from := midnight.Add(20 * time.Second)
	again("from after midnight", dir, between(t, printed, from, midnight.Add(time.Hour)), "--from", from.Format(time.RFC3339))
	// A daemon that starts anew after midnight reads back what was before it.
	up := sensors.At(midnight.Add(40*time.Second + 300*time.Millisecond))
	dir, printed = recordedSiting(t, cfg, messages, end, up)
	again("over a restart", dir, printed)
}

// learntAt tells whether the journal holds a table of the sites of that step.
func learntAt(tb testing.TB, dir string, at sensors.Instant) (found bool) {
	tb.Helper()
	store, err := history.ReadOnly(dir)
	if err != nil {
		tb.Fatal(err)
	}
	defer store.Close()
	if err := store.Journal(1, func(rec history.Record) error {
		found = found || rec.Kind == history.KindTable && rec.At == at && bytes.Contains(rec.Payload, []byte(`"siting"`))
		return nil
	}); err != nil {
		tb.Fatal(err)
	}
	return found
}
