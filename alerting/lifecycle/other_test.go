package lifecycle

import (
	"math"
	"slices"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/sensors/quantity"
)

// other is a measured crosswind of kt knots.
func other(kt float64, level, hold alerting.Level) hazard.Other {
	o := hazard.Other{Seen: true, Detail: hazard.Detail{Limit: 20 * quantity.Knot, Mast: "touch07"}}
	o.Change = change(kt, level, hold)
	o.Low, o.High, o.From, o.To, o.Used = o.Median, o.Median, 0, 0, []int{2}
	return o
}

// The other kinds live as a loss does: at once on the way up, after the hold on
// the way down; they need no observed ground, only what measures them.
func TestOtherKinds(t *testing.T) {
	const no, first = alerting.NoLevel, alerting.Noticeable
	for _, c := range []struct {
		name  string
		spans []struct {
			steps int
			o     hazard.Other
		}
		want []string // transitions other than those for the lapse of five seconds
	}{
		{"above its limit, then below the hysteresis", []struct {
			steps int
			o     hazard.Other
		}{{3, other(21, first, first)}, {30, other(19, no, first)}, {70, other(12, no, no)}}, []string{
			"0 r1 0>1 open: level noticeable met with probability 0.90",
			"3 r2 1>1 open: changed by 2.0 kt", "33 r9 1>1 open: changed by 7.0 kt",
			"92 r22 1>1 closed: closed: below-level",
		}},
		{"its mast falls silent", []struct {
			steps int
			o     hazard.Other
		}{{2, other(25, first, first)}, {700, hazard.Other{}}}, []string{
			"0 r1 0>1 open: level noticeable met with probability 0.90",
			"2 r2 1>1 open unseen: its ground is no longer observed",
			"601 r122 1>1 closed unseen: closed: not-observed",
		}},
	} {
		t.Run(c.name, func(t *testing.T) {
			m := New(skerry())
			check := newInvariants(t)
			T := start
			var got []string
			for _, sp := range c.spans {
				for range sp.steps {
					ts := m.Step(T, []hazard.Assessment{{Path: 0, Cross: sp.o}}, nil)
					check.step(T, ts)
					for _, tr := range ts {
						if tr.Why != "5 s after the last issue" && tr.Why != "trend steady" && tr.Why != "trend fading" && tr.Why != "trend unknown" {
							got = append(got, line(tr))
						}
						if tr.Alert.Kind != alerting.Crosswind || tr.Alert.Change < 0 || tr.Alert.Detail.Mast != "touch07" ||
							!slices.Equal(tr.Alert.Used, []string{"touch07"}) {
							t.Errorf("%+v", tr.Alert)
						}
					}
					T = T.Add(time.Second)
				}
			}
			if len(got) != len(c.want) {
				t.Fatalf("got %q", got)
			}
			for i := range got {
				if got[i] != c.want[i] {
					t.Errorf("%d: %q, want %q", i, got[i], c.want[i])
				}
			}
		})
	}
}

// When a front has gone by there is nothing to measure: the last turn stands
// until the alert closes.
func TestShiftKeepsItsLastTurn(t *testing.T) {
	m := New(skerry())
	shift := other(18, alerting.Large, alerting.Large)
	shift.Detail = hazard.Detail{Turn: 75}
	T := start
	var last Alert
	for i := range 120 {
		o := shift
		if i >= 10 {
			o = hazard.Other{Seen: true, Over: true}
		}
		for _, tr := range m.Step(T, []hazard.Assessment{{Path: 0, Observed: whole, Shift: o}}, nil) {
			last = tr.Alert
		}
		T = T.Add(time.Second)
	}
	if last.State != Closed || last.Because != BelowLevel || last.Detail.Turn != 75 || math.Abs(last.Change-18*quantity.Knot) > 1e-9 || last.Kind != alerting.WindShift {
		t.Errorf("%+v", last)
	}
	if last.Closed.Sub(start) != (9+60)*time.Second {
		t.Errorf("closed after %v", last.Closed.Sub(start))
	}
}

// All kinds may be open on one path at once, each under its own id, in one
// occurrence; a restart takes each up again.
func TestKindsBesideEachOther(t *testing.T) {
	m := New(skerry())
	as := []hazard.Assessment{{Path: 0, Observed: whole, Loss: at(500, -200, change(20, alerting.Large, alerting.Large)),
		Gain:  at(500, -200, change(12, alerting.Noticeable, alerting.Noticeable)),
		Shift: other(15, alerting.Noticeable, alerting.Noticeable), Vertical: other(16, alerting.Noticeable, alerting.Noticeable),
		Cross: other(25, alerting.Noticeable, alerting.Noticeable), Tail: other(12, alerting.Noticeable, alerting.Noticeable)}}
	ts := m.Step(start, as, nil)
	ids := map[string]bool{}
	for i, tr := range ts {
		ids[tr.Alert.ID] = true
		if tr.Alert.Kind != alerting.Kinds()[i] || tr.Alert.Occurrence != ts[0].Alert.Occurrence {
			t.Errorf("%d: %s in %s", i, tr.Alert.ID, tr.Alert.Occurrence)
		}
	}
	if len(ids) != len(alerting.Kinds()) {
		t.Fatalf("%d alerts: %v", len(ids), ids)
	}
	again := New(skerry())
	if closed := again.Restore(m.Open(nil), start.Add(time.Second), nil); len(closed) > 0 {
		t.Errorf("not restored: %+v", closed)
	}
	if open := again.Open(nil); len(open) != len(ids) {
		t.Errorf("%d are open again", len(open))
	}
}
