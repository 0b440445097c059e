package hazard

import (
	"math"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quality"
	"sockline/sensors/synthetic"
)

// The median microburst of J.W. Wilson et al., "Microburst wind structure and
// evaluation of Doppler radar for airport wind shear detection", J. Climate
// Appl. Meteor. 23, 1984: 22 m/s over 3.1 km. With the shape of Oseguera and
// Bowles 1988 its best kilometre loses 22.7 kt, which at 75 m/s is an F-factor
// of 0.089 (computed from the published equations, apart from this program). It
// must come out so from masts 1 km apart, as an outflow.
func TestMedianMicroburst(t *testing.T) {
	var masts []windfield.Mast
	var stations []sensors.Station
	var checkers []*quality.Checker
	for y := -1000.0; y <= 1000; y += 1000 {
		for x := -3000.0; x <= 3000; x += 1000 {
			masts = append(masts, windfield.Mast{X: x, Y: y})
			st := sensors.Station{Interval: time.Second, StaleAfter: 3 * time.Second}
			stations, checkers = append(stations, st), append(checkers, quality.NewChecker(st))
		}
	}
	var targets []windfield.Target
	var points []int
	var view View
	for x := -4000.0; x <= 4000; x += shear.Spacing {
		points = append(points, len(targets))
		targets = append(targets, windfield.Target{X: x, East: 1})
		view.Before = append(view.Before, -x)
	}
	layout := averages.NewLayout(18 * time.Second)
	recorder := averages.NewRecorder(stations, layout)
	field := windfield.New(masts, targets, layout, windfield.DefaultPrior())
	burst := synthetic.Outflow{
		Model: synthetic.ModelOsegueraBowles, Strength: 11, Radius: 1550, Stretch: 1,
		History: synthetic.History{Starts: 240, Grows: 60, Holds: 600, Fades: 60},
	}
	var p *windfield.Posterior
	const epoch = sensors.Instant(1_782_907_200_000)
	for k := 1; k <= 400; k++ {
		at := epoch + sensors.Instant(k)*sensors.Second
		for i, m := range masts {
			a, b := math.Sincos(float64(k)*0.71 + float64(i)*2.3) // turbulence that repeats
			u, v := burst.Wind(m.X, m.Y, 10, float64(k))
			u, v = u+0.5*a+0.3, v+0.5*b
			from := math.Mod(math.Atan2(-u, -v)*180/math.Pi+360, 360)
			if c := checkers[i].Check(sensors.Reading{Station: i, Time: at, Arrival: at, Speed: math.Hypot(u, v), From: from}); c.Usable() {
				recorder.Add(c)
			}
		}
		p = field.Step(recorder.Snapshot(at))
	}
	s := shear.NewStretch(points)
	for i := range s.Observed {
		s.Observed[i] = true
	}
	s.Measure(p)
	var a Assessment
	Judge(&a, s, view, Levels{
		Noticeable: 5.144444, Large: 7.716667, Margin: 10, MarginFBar: 0.1, FastestApproach: 75, Confidence: 0.8, Hysteresis: 1.03,
	})
	if a.Loss.FBar < 0.074 || a.Loss.FBar > 0.104 {
		t.Errorf("F-bar is %.3f, near 0.089 is true", a.Loss.FBar)
	}
	if a.Loss.Median < 19 || a.Loss.Median > 25 || a.Loss.Low > 22 || a.Loss.High < 22 {
		t.Errorf("the headwind falls by %.1f m/s (%.1f to %.1f), 22 is true", a.Loss.Median, a.Loss.Low, a.Loss.High)
	}
	if a.Loss.Cause != alerting.Outflow {
		t.Errorf("the cause is %s", a.Loss.Cause)
	}
}

// The part of sinking air at the height of the glide path: for dU/dx = 0.0206
// 1/s, 75 m/s and 150 m the published form gives 0.0824 (computed from the
// equation of Byrd, Proctor and Bowles 1990 apart from this program).
func TestVerticalFBar(t *testing.T) {
	v := View{Glide: math.Tan(3 * math.Pi / 180), Crossing: 15}
	middle := (150 - v.Crossing) / v.Glide
	got := verticalFBar(0.0206, v, Change{From: middle + 500, To: middle - 500}, Levels{FastestApproach: 75})
	if math.Abs(got-0.0824) > 1e-4 {
		t.Errorf("the vertical part is %.4f, want 0.0824", got)
	}
	if got := verticalFBar(0.02, View{}, Change{From: 500}, Levels{FastestApproach: 75}); got != 0 {
		t.Errorf("without a glide path it is %g", got)
	}
}
