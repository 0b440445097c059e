package lifecycle

import (
	"bytes"
	"encoding/json"
	"math/rand/v2"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/sensors"
)

// invariants watches the transitions of a machine from its first step on.
type invariants struct {
	tb     testing.TB
	last   sensors.Instant
	open   map[string]Alert // by runway, operation and kind
	opened map[string]bool  // every id ever seen
	closed int
}

func newInvariants(tb testing.TB) *invariants {
	return &invariants{tb: tb, open: map[string]Alert{}, opened: map[string]bool{}}
}

// step checks the transitions of one step.
func (v *invariants) step(T sensors.Instant, ts []Transition) {
	v.tb.Helper()
	for _, t := range ts {
		v.transition(T, t)
	}
	v.last = T
}

func (v *invariants) transition(T sensors.Instant, t Transition) {
	v.tb.Helper()
	a := t.Alert
	key := a.Runway + " " + a.Operation + " " + string(a.Kind)
	was, isOpen := v.open[key]
	fail := func(what string) { v.tb.Fatalf("%s at %v: %+v after %+v", what, T, t, was) }
	if t.At != T || a.Updated != T || T <= v.last {
		fail("time of issue")
	}
	if isOpen {
		switch {
		case was.ID != a.ID:
			fail("a second alert for a path and kind")
		case a.Revision != was.Revision+1:
			fail("revision")
		case t.From != was.Level:
			fail("level before")
		case a.Updated <= was.Updated, a.MeasuredAt < was.MeasuredAt, a.PeakAt < was.PeakAt:
			fail("time runs backwards")
		case magnitude(a.PeakChange) < magnitude(was.PeakChange):
			fail("peak shrinks")
		case T.Sub(was.Updated) > issueEvery:
			fail("more than 5 s without an issue")
		}
	} else if a.Revision != 1 || a.State != Open || a.Opened != T || t.From != alerting.NoLevel || v.opened[a.ID] {
		fail("opening")
	}
	v.opened[a.ID] = true
	if a.Level < alerting.Noticeable || a.Level > alerting.BeyondMargin || a.ChangeLow > a.Change || a.Change > a.ChangeHigh {
		fail("level or interval")
	}
	if (a.State == Closed) != (a.Closed == T) || (a.State == Closed) != (a.Because != "") {
		fail("state")
	}
	if !a.Observed && a.Trend != TrendUnknown {
		fail("trend of what is not observed")
	}
	v.open[key] = a
	if a.State == Closed {
		delete(v.open, key)
		v.closed++
	}
}

// walk is a random but plausible course of assessments of the four paths.
type walk struct {
	rng       *rand.Rand
	loss, kin [4]float64 // kt
	place     [4]float64 // m
	lost      [4]int     // steps for which ground is lost yet
	part      [4]bool    // only part of it
	missing   []int
}

func newWalk(seed uint64) *walk {
	return &walk{rng: rand.New(rand.NewPCG(seed, 1))}
}

func (w *walk) next() []hazard.Assessment {
	as := make([]hazard.Assessment, 0, 4)
	if w.rng.IntN(200) == 0 {
		w.missing = nil
		if w.rng.IntN(2) == 0 {
			w.missing = []int{w.rng.IntN(3)}
		}
	}
	for p := range 4 {
		// Mean-reverting with kicks: about one kick in ten minutes.
		w.loss[p] += -0.02*w.loss[p] + 0.5*w.rng.NormFloat64()
		w.kin[p] += -0.02*w.kin[p] + 0.4*w.rng.NormFloat64()
		if w.rng.IntN(600) == 0 {
			w.loss[p] += 10 + 20*w.rng.Float64()
		}
		w.place[p] += 20 * w.rng.NormFloat64()
		if w.lost[p]--; w.lost[p] < 0 && w.rng.IntN(1500) == 0 {
			w.lost[p] = w.rng.IntN(900)
			w.part[p] = w.rng.IntN(2) == 0
		}
		if w.rng.IntN(2000) == 0 {
			continue // a path without an assessment
		}
		a := hazard.Assessment{Path: p, Observed: whole, Missing: w.missing}
		a.Loss = level(max(0, w.loss[p]), 3)
		a.Gain = level(max(0, w.kin[p]), 2)
		from := max(-500, min(3500, 2000+w.place[p]))
		if w.lost[p] > 0 {
			a.Observed = nil
			if w.part[p] {
				a.Observed = []airfield.Interval{{From: 1500, To: -1280}}
				from = min(from, 1400)
			}
		}
		a.Loss.From, a.Loss.To = from, from-600
		a.Gain.From, a.Gain.To = from-600, from-1000
		as = append(as, a)
	}
	return as
}

// level is a change of kt with levels at 10, 15 and 20 kt and 2 kt hysteresis.
func level(kt float64, highest alerting.Level) hazard.Change {
	thresholds := [4]float64{0, 10, 15, 20}
	var met, held alerting.Level
	for l := alerting.Noticeable; l <= highest; l++ {
		if kt >= thresholds[l] {
			met = l
		}
		if kt >= thresholds[l]-2 {
			held = l
		}
	}
	return change(kt, met, held)
}

func TestRandomWalks(t *testing.T) {
	for _, seed := range []uint64{1, 2} {
		m, w, check := New(skerry()), newWalk(seed), newInvariants(t)
		var dst []Transition
		T := start
		for range 100_000 {
			T += sensors.Second
			as := w.next()
			dst = m.Step(T, as, dst[:0])
			check.step(T, dst)
			// A level met now is the level issued now, at the latest.
			for _, a := range as {
				if len(a.Observed) == 0 || a.Loss.Level == alerting.NoLevel {
					continue
				}
				p := m.settings.Paths[a.Path]
				open, ok := check.open[p.Runway+" "+p.Operation+" headwind-loss"]
				if !ok || open.Level < a.Loss.Level {
					t.Fatalf("seed %d at %v: level %s met, issued %+v", seed, T, a.Loss.Level, open)
				}
			}
			if T%(10*sensors.Second) != 0 {
				continue
			}
			for i, open := range m.Open(nil) {
				if check.open[open.Runway+" "+open.Operation+" "+string(open.Kind)].Revision != open.Revision {
					t.Fatalf("seed %d at %v: Open()[%d] is not the last issue", seed, T, i)
				}
			}
		}
		if check.closed < 100 {
			t.Errorf("seed %d: only %d alerts closed: the walk tests little", seed, check.closed)
		}
		t.Logf("seed %d: %d alerts closed", seed, check.closed)
	}
}

// TestReadBackGoesOnExactly cuts walks at random steps: a machine that gets
// only the alerts as last issued, through JSON, and the steps since, must go
// on with the same transitions to the last bit.
func TestReadBackGoesOnExactly(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	carried := 0
	for range 40 {
		w, m := newWalk(rng.Uint64()), New(skerry())
		cut := 900 + rng.IntN(900)
		T := start
		var steps [][]hazard.Assessment
		for range cut {
			T += sensors.Second
			as := w.next()
			steps = append(steps, as)
			m.Step(T, as, nil)
		}
		var alerts []Alert
		for _, a := range m.Open(nil) {
			alerts = append(alerts, throughJSON(t, a))
		}
		carried += len(alerts)
		other := New(skerry())
		if closed := other.Restore(alerts, T, nil); len(closed) != 0 {
			t.Fatalf("restore closed %v", closed)
		}
		const back = 8 // more than the longest time between two issues
		for i, as := range steps[cut-back:] {
			if ts := other.Step(T-sensors.Instant(back-1-i)*sensors.Second, as, nil); len(ts) != 0 {
				t.Fatalf("issued before the cut: %v", ts)
			}
		}
		for range 900 {
			T += sensors.Second
			as := w.next()
			want, got := encode(t, m.Step(T, as, nil)), encode(t, other.Step(T, as, nil))
			if !bytes.Equal(want, got) {
				t.Fatalf("cut after %d steps, at %v:\nwant %s\ngot  %s", cut, T, want, got)
			}
		}
	}
	if carried < 20 {
		t.Errorf("only %d alerts were carried over a cut", carried)
	}
}

func throughJSON(tb testing.TB, a Alert) Alert {
	tb.Helper()
	var back Alert
	if err := json.Unmarshal(encode(tb, a), &back); err != nil {
		tb.Fatal(err)
	}
	return back
}

func encode(tb testing.TB, v any) []byte {
	tb.Helper()
	b, err := json.Marshal(v)
	if err != nil {
		tb.Fatal(err)
	}
	return b
}

func TestSameInputSameOutput(t *testing.T) {
	var first []byte
	for run := range 3 {
		m, w := New(skerry()), newWalk(5)
		var all []Transition
		for T := start; T < start.Add(time.Hour); T += sensors.Second {
			all = m.Step(T, w.next(), all)
		}
		b := encode(t, all)
		if run == 0 {
			first = b
		}
		if !bytes.Equal(first, b) {
			t.Fatal("two runs differ")
		}
	}
}
