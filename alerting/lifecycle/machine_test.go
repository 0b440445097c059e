package lifecycle

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// start is the first step of every play: 2026-07-01T14:15:03Z.
const start sensors.Instant = 1782915303000

// whole is the ground that the paths of the tests observe.
var whole = []airfield.Interval{{From: 4000, To: -1280}}

// skerry is one runway of 1280 m with the bearing 070: both thresholds at 640
// m from the reference point. The east and north of 640 m along 070 degrees
// are 640 sin 70 = 601.4 and 640 cos 70 = 218.9.
func skerry() Settings {
	return Settings{
		Airfield: "skerrymoor",
		Paths: []PathName{
			{Runway: "07", Operation: "landing", East: -601.4, North: -218.9, Bearing: 70},
			{Runway: "07", Operation: "take-off", East: -601.4, North: -218.9, Bearing: 70},
			{Runway: "25", Operation: "landing", East: 601.4, North: 218.9, Bearing: 250},
			{Runway: "25", Operation: "take-off", East: 601.4, North: 218.9, Bearing: 250},
		},
		StationIDs: []string{"far07", "final07", "touch07"},
	}
}

// change is a change of kt knots between 2900 and 1250 m that meets level,
// and hold under the hysteresis.
func change(kt float64, level, hold alerting.Level) hazard.Change {
	c := hazard.Change{
		Median: kt * quantity.Knot, Low: kt * 0.8 * quantity.Knot, High: kt * 1.2 * quantity.Knot,
		From: 2900, To: 1250, Level: level, HoldLevel: hold, Used: []int{0, 1, 2},
	}
	for l := alerting.Noticeable; l <= level; l++ {
		c.Probability[l] = 0.9
	}
	return c
}

// span is some steps with the same assessment of the landing path of 07.
type span struct {
	steps    int
	loss     hazard.Change
	observed []airfield.Interval
	missing  []int
}

func seen(steps int, loss hazard.Change) span {
	return span{steps: steps, loss: loss, observed: whole}
}

func blind(steps int) span { return span{steps: steps} }

func at(from, to float64, c hazard.Change) hazard.Change {
	c.From, c.To = from, to
	return c
}

func edge(c hazard.Change) hazard.Change {
	c.AtEdge = true
	return c
}

// play runs the spans through a machine, checks the invariants, and gives one
// line for each transition: seconds since start, revision, level, what stands
// out, and why.
func play(tb testing.TB, m *Machine, spans []span) []string {
	tb.Helper()
	var lines []string
	check := newInvariants(tb)
	T := start
	for _, sp := range spans {
		for range sp.steps {
			as := []hazard.Assessment{{Path: 0, Observed: sp.observed, Loss: sp.loss, Missing: sp.missing}}
			ts := m.Step(T, as, nil)
			check.step(T, ts)
			for _, t := range ts {
				lines = append(lines, line(t))
			}
			T = T.Add(time.Second)
		}
	}
	return lines
}

func line(t Transition) string {
	marks := ""
	if !t.Alert.Observed {
		marks = " unseen"
	}
	return fmt.Sprintf("%d r%d %d>%d %s%s: %s", t.At.Sub(start)/time.Second, t.Alert.Revision,
		t.From, t.Alert.Level, t.Alert.State, marks, t.Why)
}

func TestPlays(t *testing.T) {
	const none, one, two, three = alerting.NoLevel, alerting.Noticeable, alerting.Large, alerting.BeyondMargin
	for _, c := range []struct {
		name  string
		spans []span
		want  []string // every transition
		has   []string // or these among them, in this order
	}{
		{
			name:  "below every level nothing is issued",
			spans: []span{seen(600, change(9, none, one))},
			want:  nil,
		},
		{
			name:  "opens in the first step and is issued every 5 s",
			spans: []span{seen(11, change(12, one, one))},
			want: []string{
				"0 r1 0>1 open: level noticeable met with probability 0.90",
				"5 r2 1>1 open: 5 s after the last issue",
				"10 r3 1>1 open: trend steady",
			},
		},
		{
			name:  "worse is told at once",
			spans: []span{seen(2, change(12, one, one)), seen(1, change(17, two, two)), seen(1, change(28, three, three))},
			want: []string{
				"0 r1 0>1 open: level noticeable met with probability 0.90",
				"2 r2 1>2 open: level large met with probability 0.90",
				"3 r3 2>3 open: level beyond-margin met with probability 0.90",
			},
		},
		{
			name: "better is told only when the hold has passed, closing likewise",
			spans: []span{
				seen(1, change(28, three, three)), // last met at 0
				seen(20, change(17, two, two)),    // large last met at 20
				seen(10, change(9, none, one)),    // noticeable holds until 30
				seen(60, change(5, none, none)),   // steps 31 to 90
			},
			has: []string{
				"0 r1 0>3 open: level beyond-margin met with probability 0.90",
				"60 r16 3>2 open: level beyond-margin not met during the hold",
				"80 r20 2>1 open: level large not met during the hold",
				"90 r22 1>1 closed: closed: below-level",
			},
		},
		{
			name: "the hold starts anew whenever the hysteresis is met",
			spans: []span{
				seen(1, change(12, one, one)), seen(59, change(5, none, none)),
				seen(1, change(8.5, none, one)), seen(59, change(5, none, none)), seen(1, change(5, none, none)),
			},
			has: []string{"120 r27 1>1 closed: closed: below-level"},
		},
		{
			name:  "out of sight it stays open for ten minutes, then closes as not observed",
			spans: []span{seen(1, change(28, three, three)), blind(600), seen(1, change(3, none, none))},
			has: []string{
				"1 r2 3>3 open unseen: its ground is no longer observed",
				"6 r3 3>3 open unseen: 5 s after the last issue",
				"596 r121 3>3 open unseen: 5 s after the last issue",
				"600 r122 3>3 closed unseen: closed: not-observed",
			},
		},
		{
			name: "back in sight it goes on, and the hold counts from there",
			spans: []span{
				seen(1, change(12, one, one)), blind(120), seen(60, change(4, none, none)),
			},
			has: []string{
				"121 r26 1>1 open: its ground is observed again",
				"180 r38 1>1 closed: closed: below-level",
			},
		},
		{
			name: "only part of the path is out of sight: the part with the alert",
			spans: []span{
				seen(1, change(28, three, three)),
				{steps: 3, loss: at(1500, 200, change(12, one, one)), observed: []airfield.Interval{{From: 2000, To: -1280}}},
			},
			want: []string{
				"0 r1 0>3 open: level beyond-margin met with probability 0.90",
				"1 r2 3>3 open unseen: its ground is no longer observed",
			},
		},
		{
			name: "a change no smaller on other ground takes the place of one out of sight",
			spans: []span{
				seen(1, change(12, one, one)),
				{steps: 1, loss: at(1500, 200, change(16, two, two)), observed: []airfield.Interval{{From: 2000, To: -1280}}},
			},
			want: []string{
				"0 r1 0>1 open: level noticeable met with probability 0.90",
				"1 r2 1>2 open: level large met with probability 0.90",
			},
		},
		{
			name: "so does one of the same level",
			spans: []span{
				seen(1, change(12, one, one)),
				{steps: 1, loss: at(1500, 200, change(12, one, one)), observed: []airfield.Interval{{From: 2000, To: -1280}}},
			},
			want: []string{
				"0 r1 0>1 open: level noticeable met with probability 0.90",
				"1 r2 1>1 open: moved by 1400 m",
			},
		},
		{
			name: "the ground between the ends need not be observed",
			spans: []span{{steps: 4, loss: change(12, one, one),
				observed: []airfield.Interval{{From: 4000, To: 2500}, {From: 1300, To: -1280}}}},
			want: []string{"0 r1 0>1 open: level noticeable met with probability 0.90"},
		},
		{
			name: "2 kt and 200 m are told at once, less is not",
			spans: []span{
				seen(1, change(12, one, one)), seen(1, change(13.9, one, one)), seen(1, change(14.1, one, one)),
				seen(1, at(3090, 1250, change(14.1, one, one))), seen(1, at(3100, 1250, change(14.1, one, one))),
				seen(1, at(3100, 1050, change(14.1, one, one))),
			},
			want: []string{
				"0 r1 0>1 open: level noticeable met with probability 0.90",
				"2 r2 1>1 open: changed by 2.1 kt",
				"4 r3 1>1 open: moved by 200 m",
				"5 r4 1>1 open: moved by 200 m",
			},
		},
		{
			name: "edge and missing stations are told at once",
			spans: []span{
				seen(1, change(12, one, one)), seen(1, edge(change(12, one, one))), seen(1, change(12, one, one)),
				{steps: 2, loss: change(12, one, one), observed: whole, missing: []int{1}},
			},
			want: []string{
				"0 r1 0>1 open: level noticeable met with probability 0.90",
				"1 r2 1>1 open: reaches the end of the observed ground",
				"2 r3 1>1 open: ends within the observed ground",
				"3 r4 1>1 open: other stations are missing",
			},
		},
	} {
		t.Run(c.name, func(t *testing.T) {
			got := play(t, New(skerry()), c.spans)
			if c.has == nil {
				if !slices.Equal(got, c.want) {
					t.Errorf("got\n%s\nwant\n%s", strings.Join(got, "\n"), strings.Join(c.want, "\n"))
				}
				return
			}
			rest := got
			for _, want := range c.has {
				i := slices.Index(rest, want)
				if i < 0 {
					t.Fatalf("no %q after the ones before it in\n%s", want, strings.Join(got, "\n"))
				}
				rest = rest[i+1:]
			}
		})
	}
}

func TestAlertAtOpening(t *testing.T) {
	m := New(skerry())
	c := change(28, alerting.BeyondMargin, alerting.BeyondMargin)
	c.MaxSlope, c.MeanSlope, c.FBar = 0.013, 0.009, 0.05
	gain := change(12, alerting.Noticeable, alerting.Noticeable)
	ts := m.Step(start, []hazard.Assessment{{Path: 0, Observed: whole, Loss: c, Gain: gain, Exercise: true}}, nil)
	if len(ts) != 2 {
		t.Fatalf("%d transitions, want a loss and a gain", len(ts))
	}
	loss, rise := ts[0].Alert, ts[1].Alert
	if want := "skerrymoor-20260701T141503Z-07-landing-headwind-loss"; loss.ID != want {
		t.Errorf("id %s, want %s", loss.ID, want)
	}
	if want := "skerrymoor-20260701T141503Z"; loss.Occurrence != want || rise.Occurrence != want {
		t.Errorf("occurrences %s and %s, want %s", loss.Occurrence, rise.Occurrence, want)
	}
	if !(loss.ChangeLow < loss.Change && loss.Change < loss.ChangeHigh && loss.ChangeHigh < 0) {
		t.Errorf("a loss must be negative and in numerical order: %v %v %v", loss.ChangeLow, loss.Change, loss.ChangeHigh)
	}
	if !(0 < rise.ChangeLow && rise.ChangeLow < rise.Change && rise.Change < rise.ChangeHigh) {
		t.Errorf("a gain must be positive and in numerical order: %v %v %v", rise.ChangeLow, rise.Change, rise.ChangeHigh)
	}
	if loss.PeakChange != loss.Change || loss.PeakAt != start || loss.MeasuredAt != start {
		t.Errorf("peak %v at %v, measured %v", loss.PeakChange, loss.PeakAt, loss.MeasuredAt)
	}
	if !loss.Exercise || loss.Cause != alerting.Unresolved || loss.Trend != TrendUnknown {
		t.Errorf("exercise %v cause %q trend %q", loss.Exercise, loss.Cause, loss.Trend)
	}
	if !slices.Equal(loss.Used, []string{"far07", "final07", "touch07"}) || loss.Missing == nil {
		t.Errorf("used %v missing %v", loss.Used, loss.Missing)
	}
	if !m.Raised(0) || m.Raised(1) {
		t.Error("the landing path must be raised and no other")
	}
	if open := m.Open(nil); len(open) != 2 || open[0].ID != loss.ID || open[0].Revision != 1 {
		t.Errorf("open: %v", open)
	}
}

func TestPeakAndLastMeasuredValues(t *testing.T) {
	m := New(skerry())
	level := alerting.Noticeable
	spans := []span{seen(2, change(12, level, level)), seen(1, change(19, level, level)), seen(30, change(14, level, level)), blind(3)}
	play(t, m, spans)
	a := m.Open(nil)[0]
	if got, want := a.PeakChange/quantity.Knot, -19.0; magnitude(got-want) > 1e-9 {
		t.Errorf("peak %.1f kt, want %.1f", got, want)
	}
	if got := a.PeakAt.Sub(start); got != 2*time.Second {
		t.Errorf("peak after %v, want 2 s", got)
	}
	if a.Observed || magnitude(a.Change/quantity.Knot+14) > 1e-9 || a.MeasuredAt.Sub(start) != 32*time.Second {
		t.Errorf("out of sight: observed %v, change %.1f kt, measured after %v", a.Observed, a.Change/quantity.Knot, a.MeasuredAt.Sub(start))
	}
}

// Once a marked reading took part, the alert stays marked.
func TestExerciseStays(t *testing.T) {
	m := New(skerry())
	as := []hazard.Assessment{{Path: 0, Observed: whole, Loss: change(12, 1, 1)}}
	for s, want := range []bool{false, false, true, true} {
		as[0].Exercise = s == 2
		as[0].Loss.AtEdge = s%2 == 1 // so that every step is issued
		ts := m.Step(start.Add(time.Duration(s)*time.Second), as, nil)
		if len(ts) != 1 || ts[0].Alert.Exercise != want {
			t.Fatalf("step %d: %+v, want exercise %v", s, ts, want)
		}
	}
}

func TestIgnoresStepsThatGoBack(t *testing.T) {
	m := New(skerry())
	as := []hazard.Assessment{{Path: 0, Observed: whole, Loss: change(12, 1, 1)}}
	if n := len(m.Step(start, nil, nil)); n != 0 {
		t.Fatalf("%d transitions from nothing", n)
	}
	for _, T := range []sensors.Instant{start, start - sensors.Second} {
		if n := len(m.Step(T, as, nil)); n != 0 {
			t.Errorf("%d transitions at a step that is not after the last", n)
		}
	}
	if n := len(m.Step(start+sensors.Second, as, nil)); n != 1 {
		t.Errorf("%d transitions at the next step, want 1", n)
	}
}

func TestQuietStepsAllocateNothing(t *testing.T) {
	level := alerting.Noticeable
	quiet := hazard.Assessment{Path: 1, Observed: whole, Loss: change(5, 0, 0), Gain: change(3, 0, 0)}
	raised := hazard.Assessment{Path: 0, Observed: whole, Loss: change(12, level, level), Missing: []int{1}}
	m := New(skerry())
	as := []hazard.Assessment{raised, quiet}
	T, buffer := start, make([]Transition, 0, 8)
	issued := len(m.Step(T, as, buffer[:0]))
	if issued != 1 {
		t.Fatalf("%d transitions at opening", issued)
	}
	// Four steps after an issue nothing is due: 1..4 s. Each run is one step.
	got := testing.AllocsPerRun(3, func() {
		T += sensors.Second
		issued += len(m.Step(T, as, buffer[:0]))
	})
	if issued != 1 {
		t.Fatalf("the measured steps were not quiet: %d transitions", issued)
	}
	if got != 0 {
		t.Errorf("%v allocations in a quiet step with an open alert", got)
	}
}

func BenchmarkStep(b *testing.B) {
	level := alerting.Noticeable
	m := New(skerry())
	as := []hazard.Assessment{
		{Path: 0, Observed: whole, Loss: change(12, level, level)},
		{Path: 1, Observed: whole}, {Path: 2, Observed: whole}, {Path: 3, Observed: whole},
	}
	T, dst := start, make([]Transition, 0, 8)
	b.ReportAllocs()
	for b.Loop() {
		T += sensors.Second
		dst = m.Step(T, as, dst[:0])
	}
}
