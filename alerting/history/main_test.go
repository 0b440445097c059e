package history

import (
	"context"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"os"
	"reflect"
	"strconv"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// start is the first step of most tests: 2026-07-01T23:59:00Z, so that a
// minute of steps crosses into another day.
const start sensors.Instant = 1782950340000

// TestMain lets the test binary be its own child: a writer to be killed, or
// to be run under a fault.
func TestMain(m *testing.M) {
	if dir := os.Getenv("HISTORY_TEST_CHILD"); dir != "" {
		steps, _ := strconv.Atoi(os.Getenv("HISTORY_TEST_STEPS"))
		if err := runChild(dir, steps); err != nil {
			fmt.Fprintln(os.Stderr, "child:", err)
			os.Exit(1)
		}
		os.Exit(0)
	}
	os.Exit(m.Run())
}

var stationIDs = []string{"far07", "final07", "touch07", "mid", "touch25", "final25", "far25", "north"}

// readingsOf makes the readings of a step from nothing but the step: n
// stations at 4 Hz, with decimals as instruments give them.
func readingsOf(step sensors.Instant, stations int) []sensors.Reading {
	rng := rand.New(rand.NewPCG(uint64(step), 7))
	rs := make([]sensors.Reading, 0, 4*stations)
	for q := range 4 {
		for s := range stations {
			at := step - sensors.Second + sensors.Instant(250*(q+1))
			rs = append(rs, sensors.Reading{
				Station: s, Time: at, Arrival: at + sensors.Instant(20+rng.IntN(180)),
				Speed: float64(rng.IntN(2500)) / 100, From: float64(rng.IntN(3600)) / 10,
			})
		}
	}
	return rs
}

// issueOf makes an issue of an alert that opens each 30 s and closes with its
// last second; the object carries id and revision.
func issueOf(step sensors.Instant) Issue {
	opened := step - step%(30*sensors.Second)
	a := lifecycle.Alert{
		ID:       fmt.Sprintf("skerrymoor-%s-07-landing-headwind-loss", opened.Time().Format("20060102T150405Z")),
		Revision: int((step-opened)/sensors.Second) + 1, Runway: "07", Operation: "landing", Kind: alerting.HeadwindLoss,
		Level: alerting.Large, State: lifecycle.Open, Opened: opened, Updated: step,
		Change: -8.1 - float64(step%7000)/3000, Observed: true, Trend: lifecycle.Steady, Used: []string{"far07", "final07"},
	}
	if step-opened == 29*sensors.Second {
		a.State, a.Closed, a.Because = lifecycle.Closed, step, lifecycle.BelowLevel
	}
	object, err := json.Marshal(map[string]any{"id": a.ID, "revision": a.Revision, "recorded": true, "notice": alerting.Notice})
	if err != nil {
		panic(err)
	}
	return Issue{Alert: a, Object: object}
}

func mustOpen(tb testing.TB, dir string, opts Options) *Store {
	tb.Helper()
	opts.Log = zerolog.New(zerolog.NewTestWriter(tb))
	s, err := Open(dir, opts)
	if err != nil {
		tb.Fatal(err)
	}
	return s
}

func mustWriter(tb testing.TB, s *Store, opts WriterOptions) *Writer {
	tb.Helper()
	w, err := s.Writer(opts)
	if err != nil {
		tb.Fatal(err)
	}
	return w
}

func mustCloseWriter(tb testing.TB, w *Writer) {
	tb.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), 30*time.Second)
	defer cancel()
	if err := w.Close(ctx); err != nil {
		tb.Fatal(err)
	}
}

// mustVerify is the self-check that ends each test that writes.
func mustVerify(tb testing.TB, s *Store) Report {
	tb.Helper()
	r, err := s.Verify()
	if err != nil {
		tb.Fatal(err)
	}
	if !r.OK() {
		tb.Fatalf("the history does not verify: %+v", r)
	}
	return r
}

// fill writes n steps from start with an issue at each third and closes.
func fill(tb testing.TB, dir string, n int) {
	tb.Helper()
	s := mustOpen(tb, dir, Options{})
	w := mustWriter(tb, s, WriterOptions{})
	w.Record(Entry{Kind: KindConfiguration, At: start, Payload: []byte("name = \"Skerry Moor\"\n")})
	for i := range n {
		w.Submit(batchOf(start + sensors.Instant(i)*sensors.Second))
	}
	mustCloseWriter(tb, w)
	if err := s.Close(); err != nil {
		tb.Fatal(err)
	}
}

func batchOf(step sensors.Instant) Batch {
	b := Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, len(stationIDs))}
	if step/sensors.Second%5 == 0 {
		late := b.Readings[0]
		late.Time -= 5 * sensors.Second
		b.Late = []LateReading{{Reading: late, Reason: "too-late"}}
	}
	if step/sensors.Second%3 == 2 {
		b.Issues = []Issue{issueOf(step)}
	}
	return b
}

// content is all that can be asked of a history, for comparing two.
type content struct {
	Steps  []Step
	Seqs   []Record
	Events []EventSummary
}

func contentOf(s *Store) (content, error) {
	var c content
	if err := s.Readings(0, 1<<50, func(st Step) error { c.Steps = append(c.Steps, st); return nil }); err != nil {
		return c, err
	}
	if err := s.Journal(0, func(r Record) error { c.Seqs = append(c.Seqs, r); return nil }); err != nil {
		return c, err
	}
	var err error
	c.Events, err = s.Events(Filter{})
	return c, err
}

func mustContent(tb testing.TB, s *Store) content {
	tb.Helper()
	c, err := contentOf(s)
	if err != nil {
		tb.Fatal(err)
	}
	return c
}

func sameContent(a, b content) bool { return reflect.DeepEqual(a, b) }

// eventually waits until ok says true; it fails the test after a time that no
// working machine needs.
func eventually(tb testing.TB, what string, ok func() bool) {
	tb.Helper()
	tick := time.NewTicker(2 * time.Millisecond)
	defer tick.Stop()
	limit := time.After(20 * time.Second)
	for !ok() {
		select {
		case <-tick.C:
		case <-limit:
			tb.Fatalf("not within 20 s: %s", what)
		}
	}
}
