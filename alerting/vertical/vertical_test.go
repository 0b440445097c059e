package vertical

import (
	"math"
	"testing"
	"time"

	"sockline/sensors/correction"
	"sockline/sensors/quantity"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s is %.6g, want %.6g within %g", what, got, want, tolerance)
	}
}

func level(height, from, kt float64) Level {
	return Level{Height: height, Roughness: 0.03, Wind: quantity.FromDirection(kt*quantity.Knot, from), Known: true}
}

// What may be said depends on the levels: a difference always, a figure per 100
// ft from 20 m of difference with the lower at 10 m, a class from 25 m.
func TestWhatMayBeSaid(t *testing.T) {
	for _, c := range []struct {
		low, high float64
		rate      bool
		class     Class
	}{
		{2, 10, false, Unclassed}, {9, 40, false, Unclassed}, {10, 29, false, Unclassed},
		{10, 30, true, Unclassed}, {10, 34.9, true, Unclassed}, {10, 35, true, Moderate}, {10, 40, true, Moderate},
	} {
		apart := (c.high - c.low) / HundredFeet
		s := Between(level(c.low, 240, 10), level(c.high, 240, 10+7*apart), false) // 7 kt per 100 ft
		if s.RateKnown != c.rate || s.Class != c.class {
			t.Errorf("%g and %g m: rate %v, class %q", c.low, c.high, s.RateKnown, s.Class)
		}
		near(t, "difference", s.Difference, 7*apart*quantity.Knot, 1e-9)
		if c.rate {
			near(t, "rate", s.Rate, 7*quantity.Knot, 1e-9)
		}
	}
}

// The interim criteria of ICAO's Fifth Air Navigation Conference, 1967 (from
// memory): light 0 to 4, moderate 5 to 8, strong 9 to 12, severe above 12 kt per
// 100 ft.
func TestClasses(t *testing.T) {
	want := []Class{Light, Light, Light, Light, Light, Moderate, Moderate, Moderate, Moderate, Strong, Strong, Strong, Strong, Severe, Severe}
	for kt, class := range want {
		if got := ClassOf(float64(kt) * quantity.Knot); got != class {
			t.Errorf("%d kt per 100 ft is %s, want %s", kt, got, class)
		}
	}
	for _, c := range []Class{Moderate, Strong, Severe} {
		if ClassOf(c.Least()+1e-9) != c || ClassOf(c.Least()-1e-9) != c-1 {
			t.Errorf("the least of %s is %.2f m/s", c, c.Least())
		}
	}
}

// The difference is that of the vectors: a wind that turns with height shears
// although its speed is the same.
func TestVectorDifference(t *testing.T) {
	near(t, "a turn of 60 degrees", Between(level(10, 240, 10), level(40, 300, 10), false).Difference, 10*quantity.Knot, 1e-9)
	near(t, "opposed winds", Between(level(10, 90, 8), level(40, 270, 12), false).Difference, 20*quantity.Knot, 1e-9)
}

// The neutral profile: 1.0964 from 6 to 10 m over z0 = 0.03 m (worked apart),
// and the classes' own slope: 10 kt at 10 m are 12.39 at 40 m.
func TestNeutral(t *testing.T) {
	near(t, "6 to 10 m", correction.LogLaw(6, 10, 0.03), 1.09641, 5e-6)
	near(t, "3 to 10 m", correction.LogLaw(3, 10, 0.03), 1.26144, 5e-6)
	s := Between(level(10, 240, 10), level(40, 240, 12), false)
	near(t, "neutral difference", s.Neutral/quantity.Knot, 10*(math.Log(40/0.03)/math.Log(10/0.03)-1), 1e-9)
	near(t, "the same in kt", s.Neutral/quantity.Knot, 2.386, 5e-4)
}

func TestSigns(t *testing.T) {
	if s := Between(level(10, 240, 1), level(40, 250, 16), true); s.Sign != NightInversion {
		t.Errorf("still air under 16 kt at night: %q", s.Sign)
	}
	if s := Between(level(10, 240, 1), level(40, 250, 16), false); s.Sign != StillBelow {
		t.Errorf("the same by day: %q", s.Sign)
	}
	if s := Between(level(10, 240, 6), level(40, 250, 16), true); s.Sign != NoSign {
		t.Errorf("6 kt below: %q", s.Sign)
	}
	column := []Level{level(10, 240, 8), level(40, 245, 22), level(80, 250, 14)}
	all := Append(nil, 3, column, true)
	if len(all) != 3 || all[2].Sign != Jet || all[2].LowerM != 10 || all[2].UpperM != 80 || all[0].Column != 3 {
		t.Errorf("a nose at 40 m: %+v", all)
	}
	column[1].Known = false // what is not measured is not told
	if all := Append(nil, 0, column, true); len(all) != 1 || all[0].LowerM != 10 || all[0].UpperM != 80 || all[0].Sign == Jet {
		t.Errorf("without the middle level: %+v", all)
	}
	column[0].Known = false
	if all := Append(nil, 0, column, true); len(all) != 0 {
		t.Errorf("one level alone: %+v", all)
	}
}

// At the equator on an equinox the sun rises at 6 and sets at 18 of solar time;
// at 54 N and 20 W (20 min past 1 behind UTC) midsummer's night is short (sunset
// near 20:21 solar, from the sunset equation cos H = -tan(lat) tan(dec)).
func TestNight(t *testing.T) {
	at := func(text string) time.Time {
		v, err := time.Parse(time.RFC3339, text)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	for _, c := range []struct {
		at       string
		lat, lon float64
		night    bool
	}{
		{"2026-03-21T05:30:00Z", 0, 0, true}, {"2026-03-21T06:30:00Z", 0, 0, false},
		{"2026-03-21T17:30:00Z", 0, 0, false}, {"2026-03-21T18:30:00Z", 0, 0, true},
		{"2026-06-21T21:10:00Z", 54, -20, false}, {"2026-06-21T22:10:00Z", 54, -20, true},
		{"2026-12-21T12:00:00Z", 54, -20, false}, {"2026-12-21T17:30:00Z", 54, -20, true},
		{"2026-06-21T00:00:00Z", 75, 0, false}, {"2026-12-21T12:00:00Z", 75, 0, true},
	} {
		if got := Night(at(c.at), c.lat, c.lon); got != c.night {
			t.Errorf("%s at %g, %g: night is %v", c.at, c.lat, c.lon, got)
		}
	}
}

func TestAppendAllocatesNothing(t *testing.T) {
	column := []Level{level(10, 240, 8), level(40, 245, 22), level(80, 250, 14)}
	dst := make([]Shear, 0, 8)
	if n := testing.AllocsPerRun(10, func() { dst = Append(dst[:0], 0, column, true) }); n > 0 {
		t.Errorf("%.0f allocations", n)
	}
}
