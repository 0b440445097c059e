package engine_test

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
	"sockline/testdata/scenes"
)

// racedScenes are played with the race detector, too, which makes them ten times
// slower.
var racedScenes = [...]string{"outflow-one-mast", "mast-dies", "demo"}

// Every scene is sent through the whole chain, as the masts would send it, and
// must lead to what it says. The rules of recorder hold at each step besides.
func TestScenes(t *testing.T) {
	names := scenes.Names()
	if len(names) < 10 {
		t.Fatalf("there are %d scenes, at least 10 were kept", len(names))
	}
	for _, name := range names {
		t.Run(name, func(t *testing.T) {
			if racing && !slices.Contains(racedScenes[:], name) {
				t.Skip("one goroutine plays a scene: a few of them show the race detector all that there is")
			}
			t.Parallel()
			a, s := keptScene(t, name)
			e := a.engine(t)
			r := newRecorder(t, a, e)
			play(e, a.messages(t, s), s.Start, s.Start.Add(s.Length), r.see)
			if len(r.moments) < s.Seconds() {
				t.Fatalf("%d steps were closed, the scene has %d seconds", len(r.moments), s.Seconds())
			}
			for _, x := range s.Expectations {
				if fault := r.judge(s, x); fault != "" {
					t.Errorf("%s.scene:%d: %s\n%s", name, x.Line, fault, r.story(s, x))
				}
			}
		})
	}
}

// judge is what is wrong with an expectation, empty if it holds.
func (r *recorder) judge(s *synthetic.Scene, x synthetic.Expectation) string {
	switch x.Kind {
	case synthetic.ExpectAlert:
		return r.judgeAlert(s, x)
	case synthetic.ExpectNoAlert:
		return r.each(s, x, func(m *moment, path int) string {
			for _, a := range m.paths[path].alerts {
				if fits(x, a) {
					return fmt.Sprintf("there is an alert: %s", brief(a))
				}
			}
			return ""
		})
	case synthetic.ExpectClosed:
		return r.judgeClosed(s, x)
	case synthetic.ExpectUnseen:
		return r.each(s, x, func(m *moment, path int) string {
			for _, a := range m.paths[path].alerts {
				if fits(x, a) && !a.Observed {
					return ""
				}
			}
			return fmt.Sprintf("no %s is open and marked as not observed", x.AlertKind)
		})
	case synthetic.ExpectState:
		return r.each(s, x, func(m *moment, path int) string {
			if got := m.paths[path].state; string(got) != x.State {
				return fmt.Sprintf("the path is %s, not %s", got, x.State)
			}
			return ""
		})
	case synthetic.ExpectUnobserved:
		return r.each(s, x, func(m *moment, path int) string {
			for _, gap := range m.paths[path].unobserved {
				if gap.From >= x.FromM && gap.To <= x.ToM {
					return ""
				}
			}
			return fmt.Sprintf("%.0f to %.0f m is not within the ground that is not observed: %v", x.FromM, x.ToM, m.paths[path].unobserved)
		})
	case synthetic.ExpectMissing:
		return r.each(s, x, func(m *moment, path int) string {
			if !slices.Contains(m.paths[path].missing, x.Mast) {
				return fmt.Sprintf("%s is not among the missing %v", x.Mast, m.paths[path].missing)
			}
			return ""
		})
	}
	return fmt.Sprintf("this test does not know the expectation %q", x.Kind)
}

// paths are the ones that an expectation speaks of: its own, or all.
func (r *recorder) paths(x synthetic.Expectation) []int {
	var found []int
	for i, p := range r.a.cfg.Airfield.Paths {
		if (x.Runway == "" || p.Runway() == x.Runway) && (x.Operation == "" || p.Operation() == x.Operation) {
			found = append(found, i)
		}
	}
	return found
}

// seconds after the start of the scene.
func seconds(s *synthetic.Scene, at sensors.Instant) float64 { return at.Sub(s.Start).Seconds() }

// each asks for every moment of the span and every path; the first answer that
// is not empty is the fault. A span without a moment is a fault itself.
func (r *recorder) each(s *synthetic.Scene, x synthetic.Expectation, ask func(m *moment, path int) string) string {
	asked := 0
	for i := range r.moments {
		m := &r.moments[i]
		if !x.Span.Holds(seconds(s, m.at)) {
			continue
		}
		for _, path := range r.paths(x) {
			asked++
			if answer := ask(m, path); answer != "" {
				return fmt.Sprintf("%s at %.0f s: %s", r.a.cfg.Airfield.Paths[path].Name(), seconds(s, m.at), answer)
			}
		}
	}
	if asked == 0 {
		return "its time or its path is not in the scene"
	}
	return ""
}

// judgeAlert: at some moment of the span.
func (r *recorder) judgeAlert(s *synthetic.Scene, x synthetic.Expectation) string {
	largest := 0.0
	for i := range r.moments {
		m := &r.moments[i]
		if !x.Span.Holds(seconds(s, m.at)) {
			continue
		}
		for _, path := range r.paths(x) {
			for _, a := range m.paths[path].alerts {
				if fits(x, a) {
					return ""
				}
			}
			c := m.paths[path].loss
			if x.AlertKind == string(alerting.HeadwindGain) {
				c = m.paths[path].gain
			}
			largest = max(largest, c.Median)
		}
	}
	return fmt.Sprintf("no %s of level %s or more is open on %s %s in time; the greatest median of the change was %.1f kt",
		x.AlertKind, x.Level, x.Operation, x.Runway, quantity.Knots(largest))
}

// judgeClosed: an alert that was open closes in the span.
func (r *recorder) judgeClosed(s *synthetic.Scene, x synthetic.Expectation) string {
	reasons := []string{}
	for i := range r.moments {
		m := &r.moments[i]
		if !x.Span.Holds(seconds(s, m.at)) {
			continue
		}
		for _, tr := range m.issues {
			a := tr.Alert
			if a.State != lifecycle.Closed || !fits(x, a) || a.Runway != x.Runway || a.Operation != x.Operation {
				continue
			}
			if x.Because == "" || string(a.Because) == x.Because {
				return ""
			}
			reasons = append(reasons, string(a.Because))
		}
	}
	return fmt.Sprintf("no %s on %s %s closes in time; closings for other reasons: %v", x.AlertKind, x.Operation, x.Runway, reasons)
}

// fits tells whether an alert is of the kind and level that are spoken of.
func fits(x synthetic.Expectation, a lifecycle.Alert) bool {
	level, _ := alerting.LevelOf(x.Level)
	return (x.AlertKind == "" || string(a.Kind) == x.AlertKind) && a.Level >= level
}

func brief(a lifecycle.Alert) string {
	return fmt.Sprintf("%s level %s, %.1f kt (%.1f to %.1f) from %.0f to %.0f m, probability %.2f, since %s", a.Kind, a.Level,
		quantity.Knots(a.Change), quantity.Knots(a.ChangeLow), quantity.Knots(a.ChangeHigh), a.From, a.To, a.Probability,
		a.Opened.Time().Format(time.TimeOnly))
}

// story is what happened on the landing paths and the path that is spoken of,
// for the reader of a failure: openings, levels and closings.
func (r *recorder) story(s *synthetic.Scene, x synthetic.Expectation) string {
	var b strings.Builder
	for i := range r.moments {
		for _, tr := range r.moments[i].issues {
			told := tr.Alert.Operation == airfield.Landing || tr.Alert.Operation == x.Operation && tr.Alert.Runway == x.Runway
			if told && (tr.Alert.Level != tr.From || tr.Alert.State == lifecycle.Closed) {
				fmt.Fprintf(&b, "\t%4.0f s  %s %s: %s; %s %s\n", seconds(s, tr.At), tr.Alert.Operation, tr.Alert.Runway,
					brief(tr.Alert), tr.Why, tr.Alert.Because)
			}
		}
	}
	if b.Len() == 0 {
		return "\tno alert in the whole scene"
	}
	return b.String()
}

// The judge itself must be able to say no: a quiet scene does not hold what an
// outflow would bring.
func TestJudgeSaysNo(t *testing.T) {
	a, s := keptScene(t, "quiet")
	s.Length = 3 * time.Minute
	e := a.engine(t)
	r := newRecorder(t, a, e)
	play(e, a.messages(t, s), s.Start, s.Start.Add(s.Length), r.see)
	whole := synthetic.Span{From: 0, To: math.Inf(1)}
	tests := []synthetic.Expectation{
		{Kind: synthetic.ExpectAlert, AlertKind: "headwind-loss", Operation: "landing", Runway: "07", Span: whole},
		{Kind: synthetic.ExpectClosed, AlertKind: "headwind-loss", Operation: "landing", Runway: "07", Span: whole},
		{Kind: synthetic.ExpectUnseen, AlertKind: "headwind-loss", Operation: "landing", Runway: "07", Span: whole},
		{Kind: synthetic.ExpectState, State: "raised", Operation: "landing", Runway: "07", Span: whole},
		{Kind: synthetic.ExpectState, State: "not-observed", Operation: "landing", Runway: "07", Span: synthetic.Span{From: 60, To: 90}},
		{Kind: synthetic.ExpectUnobserved, FromM: 3000, ToM: 2000, Operation: "landing", Runway: "07", Span: synthetic.Span{From: 60, To: 90}},
		{Kind: synthetic.ExpectMissing, Mast: "far07", Operation: "landing", Runway: "07", Span: synthetic.Span{From: 60, To: 90}},
		{Kind: synthetic.ExpectNoAlert, Operation: "landing", Runway: "07", Span: synthetic.Span{From: 500, To: 600}},
		{Kind: "something else", Span: whole},
	}
	for _, x := range tests {
		if r.judge(s, x) == "" {
			t.Errorf("%+v is said to hold in a quiet scene", x)
		}
	}
}
