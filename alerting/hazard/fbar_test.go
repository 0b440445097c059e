package hazard

import (
	"math"
	"testing"

	"sockline/alerting"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/sensors/quantity"
)

// The loss over 1 km in knots, and the slope in kt per 1000 ft, at which the
// horizontal part of the F-factor averages to each value, by ground speed in
// knots: F_h = V_g (H_in - H_out) / (g L), after R.L. Bowles, "Reducing
// windshear risk through airborne systems technology", 17th ICAS Congress,
// 1990 (from memory); the numbers were worked out apart from this program.
func TestLossOfFBarTable(t *testing.T) {
	fbars := []float64{0.085, 0.105, 0.130}
	tests := []struct {
		speed       float64
		loss, slope [3]float64
	}{
		{70, [3]float64{45.0, 55.6, 68.8}, [3]float64{13.71, 16.94, 20.98}},
		{90, [3]float64{35.0, 43.2, 53.5}, [3]float64{10.67, 13.18, 16.31}},
		{100, [3]float64{31.5, 38.9, 48.2}, [3]float64{9.60, 11.86, 14.68}},
		{120, [3]float64{26.2, 32.4, 40.1}, [3]float64{8.00, 9.88, 12.24}},
		{140, [3]float64{22.5, 27.8, 34.4}, [3]float64{6.86, 8.47, 10.49}},
		{160, [3]float64{19.7, 24.3, 30.1}, [3]float64{6.00, 7.41, 9.18}},
	}
	for _, test := range tests {
		for i, fbar := range fbars {
			loss := LossOfFBar(fbar, test.speed*quantity.Knot)
			if got := quantity.Knots(loss); math.Abs(got-test.loss[i]) > 0.051 {
				t.Errorf("F-bar %g at %g kt: a loss of %.2f kt, want %g", fbar, test.speed, got, test.loss[i])
			}
			slope := loss / 1000 / quantity.KnotPer1000Foot
			if math.Abs(slope-test.slope[i]) > 0.0051 {
				t.Errorf("F-bar %g at %g kt: %.3f kt per 1000 ft, want %g", fbar, test.speed, slope, test.slope[i])
			}
		}
	}
	// Twenty knots of headwind turning to twenty of tailwind within 1 km, flown
	// at 75 m/s over the ground: 0.1574, from the same source.
	if loss := LossOfFBar(0.1574, 75); math.Abs(quantity.Knots(loss)-40) > 0.02 {
		t.Errorf("F-bar 0.1574 at 75 m/s is a loss of %.3f kt, want 40", quantity.Knots(loss))
	}
}

// NTSB/AAR-95/03 gives a wind shear of 61 kt over 15 s for the accident of 2
// July 1994; its mean F is 61 kt / (15 s g) = 0.213. At a ground speed of 140
// kt the 15 s are 1080 m, so the loss over 1 km at that slope must come to the
// same F-bar, and back.
func TestReportedAccident(t *testing.T) {
	const change, duration = 61 * quantity.Knot, 15.0
	want := change / (duration * quantity.StandardGravity)
	if math.Abs(want-0.213) > 0.0005 {
		t.Fatalf("61 kt over 15 s gives F = %.4f, the report's figures give 0.213", want)
	}
	for _, ground := range []float64{120 * quantity.Knot, 140 * quantity.Knot, 160 * quantity.Knot} {
		perMetre := change / (duration * ground)
		if got := LossOfFBar(want, ground); math.Abs(got-perMetre*1000) > 1e-9 {
			t.Errorf("at %.0f kt: a loss of %.3f m/s over 1 km has F-bar %.4f, the accident lost %.3f",
				quantity.Knots(ground), got, want, perMetre*1000)
		}
	}
}

// ramp is a stretch of n points on which the headwind falls by slope (m/s per
// m) from mean+fall/2 on, the same in every draw: what Judge is given when the
// wind is known exactly.
func ramp(n int, first, slope float64, seen func(i int) bool) *shear.Stretch {
	points := make([]int, n)
	s := shear.NewStretch(points)
	for i := range n {
		s.Mean[i] = first - slope*shear.Spacing*float64(i)
		s.Observed[i] = seen(i)
	}
	return s
}

// exact measures the stretch under a posterior that knows its mean profile for
// certain.
func exact(s *shear.Stretch) {
	n := len(s.Mean)
	p := &windfield.Posterior{Mean: s.Mean}
	for range windfield.Draws {
		p.Draws = append(p.Draws, s.Mean...)
	}
	for i := range n {
		s.Points[i] = i
	}
	s.Measure(p)
}

func levels() Levels {
	return Levels{
		Noticeable: 10 * quantity.Knot, Large: 15 * quantity.Knot, Margin: 25 * quantity.Knot,
		MarginFBar: 0.10, FastestApproach: 120 * quantity.Knot, Confidence: 0.8, Hysteresis: 2 * quantity.Knot,
	}
}

// A known profile gives its own numbers: change, place, slopes and F-bar, seen
// from either end of the runway.
func TestJudgeKnownProfile(t *testing.T) {
	const (
		n     = 11 // 2 km
		slope = 12 * quantity.Knot / 2000
		first = 10 * quantity.Knot // falls to -2 kt
	)
	whole := func(int) bool { return true }
	before, reverse := make([]float64, n), make([]float64, n)
	for i := range n {
		before[i] = 2000 - shear.Spacing*float64(i)
		reverse[i] = -before[i] - 1000 // from the other threshold, 1000 m on
	}
	s := ramp(n, first, slope, whole)
	exact(s)

	var a Assessment
	Judge(&a, s, View{Before: before}, levels())
	near := func(what string, got, want, within float64) {
		t.Helper()
		if math.Abs(got-want) > within {
			t.Errorf("%s: %g, want %g", what, got, want)
		}
	}
	near("median", quantity.Knots(a.Loss.Median), 12, 1e-9)
	near("from", a.Loss.From, 2000, 1e-9)
	near("to", a.Loss.To, 0, 1e-9)
	near("mean slope", a.Loss.MeanSlope, slope, 1e-12)
	near("greatest slope", a.Loss.MaxSlope, slope, 1e-12)
	// Over the ground of the loss the headwind is 4 kt in the mean, so 116 kt
	// are flown over the ground: F-bar = V_g dH / (g L).
	near("F-bar", a.Loss.FBar, 116*quantity.Knot*6*quantity.Knot/(quantity.StandardGravity*1000), 1e-9)
	if a.Loss.Level != alerting.Noticeable || a.Loss.HoldLevel != alerting.Noticeable {
		t.Errorf("12 kt is level %s, held %s; want noticeable", a.Loss.Level, a.Loss.HoldLevel)
	}
	if !a.Loss.AtEdge {
		t.Error("the change runs from end to end of the observed ground and is not said to be at its edge")
	}
	if a.Gain.Level != alerting.NoLevel || a.Gain.Median != 0 {
		t.Errorf("a steady fall has a gain of %g m/s at level %s", a.Gain.Median, a.Gain.Level)
	}

	// The other way round the same air is met in the other order with the other
	// sign: the same loss, its place counted from the other threshold.
	var back Assessment
	Judge(&back, s, View{Before: reverse, Reversed: true}, levels())
	near("reversed from", back.Loss.From, -1000, 1e-9)
	near("reversed to", back.Loss.To, -3000, 1e-9)
	near("reversed median", back.Loss.Median, a.Loss.Median, 0)
	near("reversed F-bar", back.Loss.FBar, 124*quantity.Knot*6*quantity.Knot/(quantity.StandardGravity*1000), 1e-9)
}

// An end next to ground that is not observed is an edge, an end within is not.
func TestAtEdge(t *testing.T) {
	tests := []struct {
		name       string
		unobserved []int
		profile    []float64 // headwind, m/s
		want       bool
	}{
		{"change within", nil, []float64{5, 5, 5, 0, 0, 0}, false},
		{"change at the first point", nil, []float64{9, 5, 5, 5, 5, 5}, true},
		{"change at the last point", nil, []float64{5, 5, 5, 5, 5, 0}, true},
		{"next to a gap", []int{1}, []float64{5, 5, 6, 0, 1, 1}, true},
		{"beside the gap of another stretch", []int{0}, []float64{5, 5, 6, 0, 1, 1}, false},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			s := ramp(len(test.profile), 0, 0, func(int) bool { return true })
			before := make([]float64, len(test.profile))
			for i, v := range test.profile {
				s.Mean[i] = v
				before[i] = 3000 - shear.Spacing*float64(i)
			}
			for _, i := range test.unobserved {
				s.Observed[i] = false
			}
			exact(s)
			var a Assessment
			Judge(&a, s, View{Before: before}, levels())
			if a.Loss.AtEdge != test.want {
				t.Errorf("from %g to %g m: at the edge %v, want %v", a.Loss.From, a.Loss.To, a.Loss.AtEdge, test.want)
			}
		})
	}
}

// Levels open at their confidence, hold under the hysteresis, and merge where
// they lie too close to tell apart.
func TestLevels(t *testing.T) {
	tests := []struct {
		name   string
		change float64 // kt in so many of the draws
		share  float64
		margin float64 // kt
		level  alerting.Level
		hold   alerting.Level
		merged bool
	}{
		{"under the first", 9.9, 1, 25, alerting.NoLevel, alerting.Noticeable, false},
		{"under the first by more than the hysteresis", 7.9, 1, 25, alerting.NoLevel, alerting.NoLevel, false},
		{"the first", 10.1, 1, 25, alerting.Noticeable, alerting.Noticeable, false},
		{"the first, too seldom", 10.1, 0.79, 25, alerting.NoLevel, alerting.NoLevel, false},
		{"the first, just often enough", 10.1, 0.81, 25, alerting.Noticeable, alerting.Noticeable, false},
		{"the second", 15.1, 1, 25, alerting.Large, alerting.Large, false},
		{"the second, held from the third", 23.5, 1, 25, alerting.Large, alerting.BeyondMargin, false},
		{"the third", 25.1, 1, 25, alerting.BeyondMargin, alerting.BeyondMargin, false},
		{"second and third within 3 kt: the higher", 15.1, 1, 17.25, alerting.BeyondMargin, alerting.BeyondMargin, true},
		{"second and third 3 kt apart: not merged", 15.1, 1, 18, alerting.Large, alerting.Large, false},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			l := levels()
			l.Margin = test.margin * quantity.Knot
			if l.Merged() != test.merged {
				t.Fatalf("merged: %v, want %v", l.Merged(), test.merged)
			}
			const n = 5
			s := measured(n, test.change*quantity.Knot, test.share)
			var a Assessment
			Judge(&a, s, View{Before: []float64{800, 600, 400, 200, 0}}, l)
			if a.Loss.Level != test.level || a.Loss.HoldLevel != test.hold {
				t.Errorf("level %s, held %s; want %s, %s", a.Loss.Level, a.Loss.HoldLevel, test.level, test.hold)
			}
		})
	}
}
