package engine_test

import (
	"math"
	"slices"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/hazard"
	"sockline/alerting/vertical"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// steady gives every mast of an airfield the wind that a function has for it,
// once a second, and closes the steps.
func steady(t *testing.T, a *aerodrome, seconds int, wind func(id string, height float64, second int) (from, speed float64), see func(second int, r *engine.Result)) {
	t.Helper()
	e := a.engine(t)
	start := sensors.At(time.Date(2026, 7, 1, 1, 0, 0, 0, time.UTC)) // night
	for second := 1; second <= seconds; second++ {
		at := start + sensors.Instant(second)*sensors.Second
		for i, st := range a.cfg.Stations {
			from, speed := wind(st.ID, st.Height, second)
			if speed < 0 {
				continue // silent
			}
			// A little unrest, so that no mast passes for stuck.
			from += float64((second*(i+3))%7) - 3
			e.Offer(sensors.Reading{Station: i, Time: at, Arrival: at, From: quantity.NormalizeDegrees(from),
				Speed: max(speed+0.1*float64((second+i)%3-1), 0), Exercise: true})
		}
		see(second, e.Step(at))
	}
}

// Of a tower only the level nearest to 10 m takes part in the wind along the
// ground: a fresh wind at 40 m is no change of headwind, and the level does not
// count as a mast of the field. It is told as what it is.
func TestTowerCountsOnce(t *testing.T) {
	a := loadAerodrome(t, "brandersea", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
	upper := slices.IndexFunc(a.cfg.Stations, func(s sensors.Station) bool { return s.ID == "tower-40" })
	told, opened := map[alerting.Kind]int{}, 0
	var last []vertical.Shear
	steady(t, a, 400, func(_ string, height float64, _ int) (float64, float64) {
		if height > 30 {
			return 250, 12
		}
		return 240, 1
	}, func(second int, r *engine.Result) {
		if r.Snapshot.Mast(upper).State != averages.Live && second > 60 {
			t.Fatalf("the upper level is %v at %d s", r.Snapshot.Mast(upper).State, second)
		}
		for i := range r.Assessments {
			if slices.Contains(r.Assessments[i].Loss.Used, upper) || slices.Contains(r.Assessments[i].Missing, upper) {
				t.Fatalf("the upper level is used for the wind along the ground at %d s", second)
			}
		}
		for _, tr := range r.Transitions {
			told[tr.Alert.Kind]++
			if tr.Alert.Kind == alerting.VerticalShear && tr.Alert.Revision == 1 {
				opened++
				if tr.Alert.Level != alerting.Large || math.Abs(tr.Alert.Change-11) > 0.5 || !slices.Equal(tr.Alert.Used, []string{"tower-10", "tower-40"}) {
					t.Errorf("%+v", tr.Alert)
				}
			}
		}
		last = slices.Clone(r.Vertical)
	})
	if told[alerting.HeadwindLoss]+told[alerting.HeadwindGain]+told[alerting.WindShift] > 0 || opened == 0 {
		t.Errorf("alerts told: %v", told)
	}
	if len(last) != 1 || last[0].Class != vertical.Severe || last[0].Sign != vertical.NightInversion || !last[0].RateKnown || last[0].Place != "tower-10" {
		t.Errorf("the column: %+v", last)
	}
}

// When the lower level falls silent there is no column and no ground: the upper
// one does not stand in for it.
func TestTowerWithoutItsFoot(t *testing.T) {
	a := loadAerodrome(t, "brandersea", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
	lower := slices.IndexFunc(a.cfg.Stations, func(s sensors.Station) bool { return s.ID == "tower-10" })
	steady(t, a, 300, func(id string, height float64, second int) (float64, float64) {
		if id == "tower-10" && second > 200 {
			return 0, -1
		}
		return 240, 6 + height/20
	}, func(second int, r *engine.Result) {
		missing := slices.ContainsFunc(r.Assessments, func(as hazard.Assessment) bool { return slices.Contains(as.Missing, lower) })
		if second == 199 && (len(r.Vertical) != 1 || missing) || second == 300 && (len(r.Vertical) != 0 || !missing) {
			t.Errorf("at %d s: %d pairs of levels, missing %v", second, len(r.Vertical), missing)
		}
	})
}

// The limits of crosswind and tailwind: told for the runway ends whose mast
// measures more, and for no other.
func TestEndLimits(t *testing.T) {
	a := loadAerodrome(t, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)),
		`confidence        = 0.8 `, "crosswind_limit = \"20 kt\"\ntailwind_limit = \"10 kt\"\nconfidence = 0.8 ")
	open := map[string]bool{}
	steady(t, a, 300, func(id string, _ float64, second int) (float64, float64) {
		if second < 150 {
			return 340, 15 * quantity.Knot // across, below the limit
		}
		return 310, 24 * quantity.Knot // true bearing 064: 22 kt across from the left, 10 kt from behind
	}, func(_ int, r *engine.Result) {
		for _, tr := range r.Transitions {
			if k := tr.Alert.Kind; k == alerting.Crosswind || k == alerting.Tailwind {
				open[tr.Alert.Operation+" "+tr.Alert.Runway+" "+string(k)] = true
				if tr.Alert.Level != alerting.Noticeable || tr.Alert.Detail.Limit == 0 {
					t.Errorf("%+v", tr.Alert)
				}
			}
		}
	})
	bearing := a.cfg.Airfield.Paths[0].BearingTrue()
	w := quantity.FromDirection(24, 310)
	for key, want := range map[string]bool{
		"landing 07 crosswind": true, "take-off 07 crosswind": true, "landing 25 crosswind": true, "take-off 25 crosswind": true,
		"landing 07 tailwind": -w.Headwind(bearing) >= 10, "landing 25 tailwind": -w.Headwind(bearing+180) >= 10,
	} {
		if open[key] != want {
			t.Errorf("%s was told: %v, want %v (all: %v)", key, open[key], want, open)
		}
	}
}
