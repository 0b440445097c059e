package main

import (
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/feed"
)

// writeCapture puts messages into a capture; a zero end leaves its mark out.
func writeCapture(tb testing.TB, messages []sensors.Message, end sensors.Instant) string {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), "capture.jsonl")
	w, err := feed.CreateCapture(path, "skerrymoor")
	if err != nil {
		tb.Fatal(err)
	}
	for _, m := range messages {
		if err := w.Write(m); err != nil {
			tb.Fatal(err)
		}
	}
	if err := w.Close(end); err != nil {
		tb.Fatal(err)
	}
	return path
}

// replayed is what a replay of a capture over Skerry Moor prints.
func replayed(tb testing.TB, capture string, args ...string) outcome {
	tb.Helper()
	return succeed(tb, append([]string{"replay", "--config", skerrymoor, "--capture", capture}, args...)...)
}

// alertLine is what the tests need of an alert object.
type alertLine struct {
	ID, Runway, Operation, Kind, Level, State, Text, Notice string
	Revision                                                int
	Updated                                                 time.Time
	ClosedBecause                                           string `json:"closed_because"`
	Exercise, Recorded, Observed                            bool
}

func alertLines(tb testing.TB, text string) []alertLine {
	tb.Helper()
	var lines []alertLine
	for line := range strings.Lines(text) {
		var a alertLine
		if err := json.Unmarshal([]byte(line), &a); err != nil {
			tb.Fatalf("%v in %s", err, line)
		}
		lines = append(lines, a)
	}
	return lines
}

// TestReplayFindsTheOutflow holds the main job: a capture of an outflow on the
// landing path of 07 gives the alert there, in time, to its end.
func TestReplayFindsTheOutflow(t *testing.T) {
	o := replayed(t, simulated(t, short))
	var level3, closed time.Time
	for _, a := range alertLines(t, o.stdout) {
		if !a.Exercise || !a.Recorded || a.Notice == "" || !strings.HasPrefix(a.Text, "EXERCISE: ") {
			t.Fatalf("not marked as an exercise, or without the notice: %+v", a)
		}
		if a.Runway != "07" || a.Operation != "landing" || a.Kind != "headwind-loss" {
			continue
		}
		if level3.IsZero() && a.Level == "beyond-margin" {
			level3 = a.Updated
		}
		if a.State == "closed" && a.ClosedBecause == "below-level" {
			closed = a.Updated
		}
	}
	// The outflow grows from 14:01:00 to 14:01:20 and is gone at 14:02:30; the
	// window is 18 s, the hold 60 s.
	start := time.Date(2026, 7, 1, 14, 1, 0, 0, time.UTC)
	if d := level3.Sub(start); d < 0 || d > time.Minute {
		t.Errorf("level 3 opens at %v, the outflow starts at %v", level3, start)
	}
	if d := closed.Sub(start); d < 2*time.Minute || d > 4*time.Minute {
		t.Errorf("it closes at %v", closed)
	}
	if !strings.HasPrefix(o.stderr, "EXERCISE: 2400 readings in 30") {
		t.Errorf("the summary is %q", o.stderr)
	}
}

// TestReplayIsTheSame runs one capture many times: on one processor and on
// two, as it is, and with copies of messages and another order of arrival
// within the lateness. The bytes are the same.
func TestReplayIsTheSame(t *testing.T) {
	capture := simulated(t, strings.Replace(short, "length     5 min", "length     130 s", 1))
	messages, end := readCapture(t, capture)
	want := replayed(t, capture).stdout
	if want == "" {
		t.Fatal("no alert: there is nothing to compare")
	}
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	runs := 20
	if racing {
		runs = 4
	}
	for run := range runs {
		runtime.GOMAXPROCS(1 + run%2)
		path := capture
		if run >= 2 {
			path = writeCapture(t, disturbed(messages, uint64(run)), end)
		}
		if got := replayed(t, path).stdout; got != want {
			t.Fatalf("run %d (seed %d) differs:\n%s", run, run, firstDifference(got, want))
		}
	}
}

// disturbed is the messages arriving at other moments, in another order, some
// of them twice: each still within the lateness (1 s) of its step.
func disturbed(messages []sensors.Message, seed uint64) []sensors.Message {
	rng := rand.New(rand.NewPCG(seed, 1))
	var out []sensors.Message
	for _, m := range messages {
		// Measured on the whole second, it arrived within a fifth of one.
		measured := m.Received.FloorSecond()
		for copies := 1 + rng.IntN(5)/4; copies > 0; copies-- {
			m.Received = measured + sensors.Instant(rng.IntN(1001))
			out = append(out, m)
		}
	}
	rng.Shuffle(len(out), func(i, j int) { out[i], out[j] = out[j], out[i] })
	slices.SortStableFunc(out, func(a, b sensors.Message) int { return int(a.Received - b.Received) })
	return out
}

// firstDifference is the first line in which two texts differ.
func firstDifference(got, want string) string {
	g, w := strings.Split(got, "\n"), strings.Split(want, "\n")
	for i := range min(len(g), len(w)) {
		if g[i] != w[i] {
			return fmt.Sprintf("line %d is\n%s\nwant\n%s", i+1, g[i], w[i])
		}
	}
	return fmt.Sprintf("%d lines, want %d", len(g), len(w))
}

// between is the lines of a replay whose step lies in [from, to).
func between(tb testing.TB, text string, from, to time.Time) string {
	tb.Helper()
	var b strings.Builder
	for line := range strings.Lines(text) {
		if at := alertLines(tb, line)[0].Updated; !at.Before(from) && at.Before(to) {
			b.WriteString(line)
		}
	}
	return b.String()
}

// TestReplayFromTheMiddle holds that a part of a capture gives what the whole
// of it gives at these times.
func TestReplayFromTheMiddle(t *testing.T) {
	if racing {
		t.Skip(checkedApart)
	}
	capture := simulated(t, short)
	whole := replayed(t, capture).stdout
	start := time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC)
	for _, row := range []struct{ from, to int }{ // s from the start; 0 for no limit
		{from: 95}, {from: 150}, {to: 130}, {from: 100, to: 101}, {from: 1, to: 400},
	} {
		from, to, args := start, start.Add(time.Hour), []string(nil)
		if row.from > 0 {
			from = start.Add(time.Duration(row.from) * time.Second)
			args = append(args, "--from", from.Format(time.RFC3339))
		}
		if row.to > 0 {
			to = start.Add(time.Duration(row.to) * time.Second)
			args = append(args, "--to", to.Format(time.RFC3339))
		}
		got, want := replayed(t, capture, args...).stdout, between(t, whole, from, to)
		if got != want {
			t.Errorf("%v: %s", args, firstDifference(got, want))
		}
		if want == "" && row.from != 100 {
			t.Errorf("%v: there is nothing to compare", args)
		}
	}
}

// TestReplayOverSilence joins two captures with nine hours of silence between
// them, of which six are left out: the second part gives what it gives alone,
// and nothing but closings happens between the two.
func TestReplayOverSilence(t *testing.T) {
	if racing {
		t.Skip(checkedApart)
	}
	first, _ := readCapture(t, simulated(t, strings.Replace(short, "length     5 min", "length     100 s", 1)))
	secondPath := simulated(t, strings.Replace(short, "T14:", "T23:", 1))
	second, end := readCapture(t, secondPath)
	joined := replayed(t, writeCapture(t, append(slices.Clone(first), second...), end))
	head := replayed(t, writeCapture(t, first, 0)).stdout
	tail := replayed(t, secondPath).stdout
	if head == "" || tail == "" || !strings.HasPrefix(joined.stdout, head) || !strings.HasSuffix(joined.stdout, tail) {
		t.Fatalf("the parts do not stand in the whole: %s", firstDifference(joined.stdout, head))
	}
	middle := alertLines(t, joined.stdout[len(head):len(joined.stdout)-len(tail)])
	closed := 0
	for _, a := range middle {
		if a.State == "closed" {
			closed++
			if a.ClosedBecause != "not-observed" {
				t.Errorf("closed in the silence as %q", a.ClosedBecause)
			}
		}
	}
	if closed == 0 {
		t.Error("the alerts that were open at the beginning of the silence never close")
	}
	var readings, steps int
	if _, err := fmt.Sscanf(joined.stderr, "EXERCISE: %d readings in %d steps", &readings, &steps); err != nil {
		t.Fatal(err)
	}
	// 100 s, three hours and five minutes, and the seconds around them.
	if steps > 100+3*3600+300+10 {
		t.Errorf("%d steps: the silence was not left out", steps)
	}
}

// TestReplayEnd holds which steps are closed after the last message: up to the
// end mark, else the last that readings can belong to.
func TestReplayEnd(t *testing.T) {
	messages, _ := readCapture(t, simulated(t, short))
	messages = messages[:800] // 100 s: in the midst of the outflow
	last := messages[len(messages)-1].Received
	final := func(end sensors.Instant) time.Time {
		lines := alertLines(t, replayed(t, writeCapture(t, messages, end)).stdout)
		if len(lines) == 0 {
			t.Fatal("no alert: there is nothing to see the end by")
		}
		return lines[len(lines)-1].Updated
	}
	// The last step is the one that the last message belongs to; open alerts
	// are issued every 5 s at least.
	if got := last.CeilSecond().Sub(sensors.At(final(0))); got < 0 || got > 5*time.Second {
		t.Errorf("without an end mark the last issue is %v before the last step", got)
	}
	// Eleven minutes on, what was open has closed, out of sight for ten.
	if got := final(last.Add(11 * time.Minute)).Sub(last.Time()); got < 9*time.Minute || got > 11*time.Minute {
		t.Errorf("with an end mark 11 min later the last issue is %v after the last message", got)
	}
}

// TestReplayNamesWhatWasOfNoUse holds the summary of late, foreign and broken
// messages.
func TestReplayNamesWhatWasOfNoUse(t *testing.T) {
	messages, end := readCapture(t, simulated(t, short))
	want := replayed(t, writeCapture(t, messages, end)).stdout
	far07 := "airfield/skerrymoor/station/far07/wind"
	stamp := messages[1000].Received
	odd := []sensors.Message{
		{Topic: "airfield/elsewhere/wind", Payload: []byte("x"), Received: stamp},
		{Topic: far07, Payload: []byte("{"), Received: stamp},
		{Topic: messages[8].Topic, Payload: messages[8].Payload, Received: stamp},
		{Topic: messages[1000].Topic, Payload: messages[1000].Payload, Received: stamp},
		{Topic: messages[1000].Topic, Payload: messages[1000].Payload, Received: stamp, Retained: true},
	}
	o := replayed(t, writeCapture(t, slices.Insert(messages, 1001, odd...), end))
	if o.stdout != want {
		t.Errorf("they changed the alerts: %s", firstDifference(o.stdout, want))
	}
	for _, part := range []string{"1 messages on topics of no configured station", "station far07: 1 malformed", " 1 late", " 1 copies", " 1 retained"} {
		if !strings.Contains(o.stderr, part) {
			t.Errorf("%q is missing in\n%s", part, o.stderr)
		}
	}
	only := call(t, "replay", "--config", skerrymoor, "--capture", writeCapture(t, odd[:1], 0))
	if only.code != exitFailed || !strings.Contains(only.stderr, "is this the right configuration?") {
		t.Errorf("with foreign messages only: exit %d, %s", only.code, only.stderr)
	}
	if o := replayed(t, writeCapture(t, nil, 0)); o.stdout != "" {
		t.Errorf("of nothing comes %q", o.stdout)
	}
}

// BenchmarkReplay measures the replay of eight masts at 1 Hz on one core.
func BenchmarkReplay(b *testing.B) {
	capture := simulated(b, strings.Replace(short, "length     5 min", "length     10 min", 1))
	messages, _ := readCapture(b, capture)
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	for b.Loop() {
		replayed(b, capture)
	}
	seconds := b.Elapsed().Seconds() / float64(b.N)
	b.ReportMetric(float64(len(messages))/seconds, "readings/s")
	b.ReportMetric(600/seconds, "x-real-time")
}
