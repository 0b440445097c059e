package hazard

import (
	"testing"

	"sockline/alerting"
	"sockline/sensors/quantity"
)

// What rests on one mast is large at most, in force and held; what does not, and
// what is less, stays what it is.
func TestRestrain(t *testing.T) {
	l := levels() // confidence 0.8
	for _, c := range []struct {
		level, hold         alerting.Level
		without             float64
		wantLevel, wantHold alerting.Level
	}{
		{alerting.BeyondMargin, alerting.BeyondMargin, 0, alerting.Large, alerting.Large},
		{alerting.BeyondMargin, alerting.BeyondMargin, 0.79, alerting.Large, alerting.Large},
		{alerting.BeyondMargin, alerting.BeyondMargin, 0.8, alerting.BeyondMargin, alerting.BeyondMargin},
		{alerting.Large, alerting.BeyondMargin, 0, alerting.Large, alerting.BeyondMargin},
		{alerting.Noticeable, alerting.Large, 0, alerting.Noticeable, alerting.Large},
		{alerting.NoLevel, alerting.NoLevel, 0, alerting.NoLevel, alerting.NoLevel},
	} {
		var a Assessment
		a.Loss.Level, a.Loss.HoldLevel = c.level, c.hold
		a.Gain.Level = alerting.Large
		l.Restrain(&a, c.without)
		if a.Loss.Level != c.wantLevel || a.Loss.HoldLevel != c.wantHold || a.Gain.Level != alerting.Large {
			t.Errorf("%+v: %s, held %s; gain %s", c, a.Loss.Level, a.Loss.HoldLevel, a.Gain.Level)
		}
	}
}

// Any loss that some levels could call beyond-margin may rest on one mast: no
// level that can be configured lies below leastBeyond.
func TestMayRest(t *testing.T) {
	for _, c := range []struct {
		kt   float64
		want bool
	}{{6.9, false}, {7.1, true}, {30, true}} {
		s := ramp(11, 10, c.kt*quantity.Knot/2000, func(int) bool { return true })
		exact(s)
		before := make([]float64, 11)
		for i := range before {
			before[i] = 2000 - 200*float64(i)
		}
		var a Assessment
		Judge(&a, s, View{Before: before}, levels())
		if got := MayRest(&a, s); got != c.want {
			t.Errorf("a fall of %g kt may rest on one mast: %v", c.kt, got)
		}
	}
	// A margin of 10 kt is the least; it merges with large changes above 7 kt.
	l := levels()
	l.Margin, l.Large = 10*quantity.Knot, 7.01*quantity.Knot
	if !l.Merged() || l.Beyond() < leastBeyond {
		t.Errorf("beyond-margin opens at %.2f m/s", l.Beyond())
	}
}
