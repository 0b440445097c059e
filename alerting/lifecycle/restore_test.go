package lifecycle

import (
	"slices"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/sensors"
)

// openAlert is a level 1 loss on landing 07, as issued after so many steps.
func openAlert(tb testing.TB, steps int) Alert {
	tb.Helper()
	m := New(skerry())
	play(tb, m, []span{seen(steps, change(12, alerting.Noticeable, alerting.Noticeable))})
	return m.Open(nil)[0]
}

func TestRestore(t *testing.T) {
	a := openAlert(t, 41) // last issued at 40 s
	on := func(runway, operation string) Alert {
		b := a
		b.Runway, b.Operation = runway, operation
		return b
	}
	for _, c := range []struct {
		name    string
		alerts  []Alert
		after   time.Duration // from the last issue to the restart
		because []CloseReason
		open    int
	}{
		{"nine minutes down", []Alert{a}, 9 * time.Minute, nil, 1},
		{"ten minutes down", []Alert{a}, 10 * time.Minute, nil, 1},
		{"longer", []Alert{a}, 10*time.Minute + time.Second, []CloseReason{ExpiredWhileDown}, 0},
		{"a path that is gone", []Alert{on("16", "landing"), on("25", "take-off")}, time.Minute, []CloseReason{PathWithdrawn}, 1},
		{"two for one path and kind", []Alert{a, a}, time.Minute, []CloseReason{ExpiredWhileDown}, 1},
	} {
		t.Run(c.name, func(t *testing.T) {
			m := New(skerry())
			now := a.Updated.Add(c.after)
			var because []CloseReason
			for _, tr := range m.Restore(c.alerts, now, nil) {
				because = append(because, tr.Alert.Because)
				if tr.Alert.State != Closed || tr.Alert.Closed != now || tr.Alert.Revision != a.Revision+1 || tr.From != a.Level {
					t.Errorf("closing %+v", tr)
				}
			}
			if !slices.Equal(because, c.because) {
				t.Errorf("closed %v, want %v", because, c.because)
			}
			if open := m.Open(nil); len(open) != c.open || c.open > 0 && open[0].ID != a.ID {
				t.Errorf("%d open, want %d", len(open), c.open)
			}
		})
	}
}

// After a real interruption the hold counts from the restart, even where the
// level was last met long before, and the trend is unknown.
func TestHoldCountsFromTheRestart(t *testing.T) {
	a := openAlert(t, 41)
	m := New(skerry())
	now := a.Updated.Add(5 * time.Minute)
	m.Restore([]Alert{a}, now, nil)
	calm := []hazard.Assessment{{Path: 0, Observed: whole, Loss: change(4, 0, 0)}}
	for s := 1; s <= 60; s++ {
		ts := m.Step(now.Add(time.Duration(s)*time.Second), calm, nil)
		if s == 1 && (len(ts) != 1 || ts[0].Alert.ID != a.ID || ts[0].Alert.Revision != a.Revision+1 || ts[0].Alert.Trend != TrendUnknown) {
			t.Fatalf("first step after the restart: %+v", ts)
		}
		if open := m.Raised(0); open != (s < 60) {
			t.Fatalf("%d s after the restart: open %v", s, open)
		}
	}
}

// What a machine opened while it was warmed up gives way to what was told, and
// the steps up to asOf bring it up to date in silence.
func TestRestoreAfterWarmingUp(t *testing.T) {
	told := openAlert(t, 41) // last issued at 40 s
	level := alerting.Noticeable
	as := []hazard.Assessment{
		{Path: 0, Observed: whole, Loss: change(12, level, level)},
		{Path: 2, Observed: whole, Loss: change(12, level, level)},
	}
	m := New(skerry())
	asOf := told.Updated.Add(4 * time.Second)
	for T := told.Updated.Add(-20 * time.Second); T <= asOf.Add(-6*time.Second); T += sensors.Second {
		m.Step(T, as, nil)
	}
	if len(m.Open(nil)) != 2 {
		t.Fatal("warming up was meant to open alerts")
	}
	if closed := m.Restore([]Alert{told}, asOf, nil); len(closed) != 0 {
		t.Fatalf("closed %+v", closed)
	}
	as[0].Loss.Median *= 2 // would be told at once
	for T := asOf.Add(-5 * time.Second); T <= asOf; T += sensors.Second {
		if ts := m.Step(T, as, nil); len(ts) != 0 {
			t.Fatalf("issued at %v, up to %v: %+v", T, asOf, ts)
		}
	}
	if open := m.Open(nil); len(open) != 1 || open[0].ID != told.ID || open[0].Revision != told.Revision {
		t.Fatalf("open %+v", open)
	}
	ts := m.Step(asOf+sensors.Second, as, nil)
	if len(ts) != 2 || ts[0].Alert.ID != told.ID || ts[0].Alert.Revision != told.Revision+1 || ts[1].Alert.Revision != 1 {
		t.Errorf("after %v: %+v", asOf, ts)
	}
	if peak := ts[0].Alert.PeakAt; peak != told.Updated+sensors.Second {
		t.Errorf("the peak at %v was missed: %v", told.Updated+sensors.Second, peak)
	}
}

func TestRebase(t *testing.T) {
	level := alerting.Noticeable
	m := New(skerry())
	as := []hazard.Assessment{
		{Path: 0, Observed: whole, Loss: change(12, level, level)},
		{Path: 2, Observed: whole, Loss: change(12, level, level), Gain: change(11, level, level)},
	}
	opened := m.Step(start, as, nil)
	if len(opened) != 3 {
		t.Fatalf("%d alerts opened, want 3", len(opened))
	}
	next := skerry()
	next.Paths = next.Paths[2:] // 25 moves to the front, 07 is gone
	next.StationIDs = []string{"final07", "touch07", "far07"}
	closed := m.Rebase(next, start, nil)
	if len(closed) != 1 || closed[0].Alert.Because != PathWithdrawn || closed[0].Alert.ID != opened[0].Alert.ID || closed[0].Alert.Path != -1 {
		t.Fatalf("closed %+v", closed)
	}
	if !m.Raised(0) || m.Raised(1) {
		t.Error("the landing path of 25 must stay raised under its new index")
	}
	// The same masts under new indices are no news: nothing is issued.
	c := change(12, level, level)
	c.Used = []int{2, 0, 1}
	g := change(11, level, level)
	g.Used = c.Used
	as = []hazard.Assessment{{Path: 0, Observed: whole, Loss: c, Gain: g}}
	if ts := m.Step(start+sensors.Second, as, nil); len(ts) != 0 {
		t.Errorf("issued %+v", ts)
	}
	open := m.Open(nil)
	if len(open) != 2 || open[0].ID != opened[1].Alert.ID || open[1].ID != opened[2].Alert.ID || open[0].Path != 0 {
		t.Errorf("open %+v", open)
	}
}
