package hazard

import (
	"math"
	"testing"

	"sockline/alerting"
	"sockline/alerting/front"
	"sockline/alerting/vertical"
	"sockline/sensors/quantity"
)

func limits() Levels {
	return Levels{
		Hysteresis: 2 * quantity.Knot,
		Limits:     Limits{WindShift: 30, Vertical: vertical.Strong, Crosswind: 20 * quantity.Knot, Tailwind: 10 * quantity.Knot},
	}
}

func turned(by, before, after float64) front.Front {
	f := front.Front{Before: quantity.FromDirection(before, 200), After: quantity.FromDirection(after, 200+by), Confidence: 0.9}
	f.Change = quantity.Vector{East: f.After.East - f.Before.East, North: f.After.North - f.Before.North}
	f.Turn = front.Turned(f.Before, f.After)
	return f
}

func always(*front.Front) bool { return true }

// The turn and the speed of a marked discontinuity (ICAO Annex 3): 30 degrees
// or more, with 10 kt before or after it.
func TestJudgeShift(t *testing.T) {
	for _, c := range []struct {
		turn, before, after float64
		level, hold         alerting.Level
	}{
		{29, 8, 8, alerting.NoLevel, alerting.Noticeable}, {31, 8, 8, alerting.Noticeable, alerting.Noticeable},
		{-45, 3, 6, alerting.Noticeable, alerting.Noticeable}, {-55, 6, 3, alerting.Noticeable, alerting.Large},
		{61, 6, 6, alerting.Large, alerting.Large}, {90, 4, 4, alerting.NoLevel, alerting.NoLevel}, {15, 9, 9, alerting.NoLevel, alerting.NoLevel},
	} {
		var o Other
		f := turned(c.turn, c.before, c.after)
		JudgeShift(&o, []front.Front{turned(5, 9, 9), f}, always, limits())
		if !o.Seen || o.Level != c.level || o.HoldLevel != c.hold {
			t.Errorf("%+v: level %s, held %s", c, o.Level, o.HoldLevel)
		}
		if o.Level > alerting.NoLevel && (o.Median != f.Change.Speed() || o.Detail.Turn != f.Turn || o.Probability[o.Level] != 0.9) {
			t.Errorf("%+v: %+v", c, o)
		}
	}
	line := turned(40, 9, 9)
	line.Kind, line.Moving = front.GustFront, true
	var o Other
	if JudgeShift(&o, []front.Front{line}, always, limits()); o.Cause != alerting.GustFront || !o.Detail.Moving {
		t.Errorf("behind a line: %+v", o)
	}
	JudgeShift(&o, []front.Front{turned(90, 9, 9)}, func(*front.Front) bool { return false }, limits())
	if !o.Seen || !o.Over || o.Level != alerting.NoLevel {
		t.Errorf("a front that has not come here: %+v", o)
	}
	off := limits()
	off.Limits.WindShift = 0
	if JudgeShift(&o, []front.Front{turned(90, 9, 9)}, always, off); o.Level != alerting.NoLevel {
		t.Errorf("switched off: %+v", o)
	}
}

func TestJudgeVertical(t *testing.T) {
	low := vertical.Level{Mast: 2, ID: "a", Height: 10, Roughness: 0.03, Known: true, Wind: quantity.FromDirection(4, 240)}
	high := low
	high.Mast, high.ID, high.Height = 3, "b", 40
	shear := func(kt float64) []vertical.Shear { // kt per 100 ft
		high.Wind = quantity.FromDirection(4+kt*quantity.Knot*30/vertical.HundredFeet, 240)
		s := vertical.Between(low, high, false)
		s.Place = "a"
		return []vertical.Shear{s}
	}
	everywhere := func(*vertical.Shear) bool { return true }
	for _, c := range []struct {
		kt          float64
		level, hold alerting.Level
	}{
		{5, alerting.NoLevel, alerting.NoLevel}, {7, alerting.NoLevel, alerting.Noticeable}, {9, alerting.Noticeable, alerting.Noticeable},
		{11, alerting.Noticeable, alerting.Large}, {13, alerting.Large, alerting.Large},
	} {
		var o Other
		if k := JudgeVertical(&o, shear(c.kt), everywhere, limits()); k != 0 || o.Level != c.level || o.HoldLevel != c.hold {
			t.Errorf("%g kt per 100 ft: level %s, held %s", c.kt, o.Level, o.HoldLevel)
		}
		if o.Detail.Lower != 10 || o.Detail.Upper != 40 || o.Detail.Mast != "a" || math.Abs(o.Detail.Rate/quantity.Knot-c.kt) > 1e-9 {
			t.Errorf("%+v", o.Detail)
		}
	}
	// What has no class opens nothing, and what is not near is not seen.
	high.Height = 31
	var o Other
	if k := JudgeVertical(&o, shear(30), everywhere, limits()); k >= 0 || o.Seen {
		t.Errorf("21 m of difference: %+v", o)
	}
	high.Height = 40
	if k := JudgeVertical(&o, shear(30), func(*vertical.Shear) bool { return false }, limits()); k >= 0 || o.Seen {
		t.Errorf("another place: %+v", o)
	}
	off := limits()
	off.Limits.Vertical = vertical.Unclassed
	if JudgeVertical(&o, shear(30), everywhere, off); o.Level != alerting.NoLevel || !o.Seen {
		t.Errorf("switched off: %+v", o)
	}
}

// Worked by hand: wind 320 degrees 15 kt on a flight toward 360 has 11.491 kt of
// headwind and 9.642 kt of crosswind from the left.
func TestJudgeEnd(t *testing.T) {
	l := limits()
	l.Limits.Crosswind = 9.6 * quantity.Knot
	var cross, tail Other
	JudgeEnd(&cross, &tail, quantity.FromDirection(15*quantity.Knot, 320), 360, "touch", l)
	if math.Abs(cross.Median/quantity.Knot-9.642) > 5e-4 || !cross.Detail.FromLeft || cross.Level != alerting.Noticeable {
		t.Errorf("crosswind %+v", cross)
	}
	if tail.Median != 0 || tail.Level != alerting.NoLevel || tail.HoldLevel != alerting.NoLevel || !tail.Seen {
		t.Errorf("tailwind %+v", tail)
	}
	JudgeEnd(&cross, &tail, quantity.FromDirection(15*quantity.Knot, 320), 180, "touch", l)
	if math.Abs(tail.Median/quantity.Knot-11.491) > 5e-4 || tail.Level != alerting.Noticeable || cross.Detail.FromLeft {
		t.Errorf("the other way: %+v %+v", cross, tail)
	}
	// Two knots of hysteresis.
	JudgeEnd(&cross, &tail, quantity.FromDirection(8.5*quantity.Knot, 270), 90, "touch", l)
	if tail.Level != alerting.NoLevel || tail.HoldLevel != alerting.Noticeable {
		t.Errorf("8.5 kt against 10: %+v", tail)
	}
	l.Limits = Limits{}
	JudgeEnd(&cross, &tail, quantity.FromDirection(60*quantity.Knot, 270), 90, "touch", l)
	if tail.Level != alerting.NoLevel || tail.HoldLevel != alerting.NoLevel || cross.Level != alerting.NoLevel {
		t.Errorf("without limits: %+v %+v", cross, tail)
	}
}
