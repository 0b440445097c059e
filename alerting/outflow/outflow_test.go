package outflow

import (
	"math"
	"testing"
	"time"

	"sockline/alerting/windfield"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quality"
	"sockline/sensors/synthetic"
)

// epoch is a whole UTC minute.
const epoch = sensors.Instant(1_782_907_200_000)

// site is a lattice of masts, 1 km apart, that report every second.
type site struct {
	t        *testing.T
	masts    []windfield.Mast
	stations []sensors.Station
	checkers []*quality.Checker
	recorder *averages.Recorder
	field    *windfield.Estimator
	tracker  *Tracker
	k        int
}

func newSite(t *testing.T) *site {
	s := &site{t: t}
	for y := -1500.0; y <= 1500; y += 1000 {
		for x := -2000.0; x <= 2000; x += 1000 {
			s.masts = append(s.masts, windfield.Mast{X: x, Y: y})
			st := sensors.Station{Interval: time.Second, StaleAfter: 3 * time.Second}
			s.stations = append(s.stations, st)
			s.checkers = append(s.checkers, quality.NewChecker(st))
		}
	}
	layout := averages.NewLayout(18 * time.Second)
	s.recorder = averages.NewRecorder(s.stations, layout)
	var targets []windfield.Target
	for x := -4000.0; x <= 4000; x += 200 {
		targets = append(targets, windfield.Target{X: x, East: 1})
	}
	prior := windfield.DefaultPrior()
	s.field = windfield.New(s.masts, targets, layout, prior)
	s.tracker = NewTracker([]Path{{FromX: -4000, ToX: 4000}, {FromX: 3000, FromY: -4000, ToX: 3000, ToY: 4000}}, prior.OutflowSpacing)
	return s
}

// run lets so many seconds pass in a wind of 4 m/s from the west with
// turbulence and these outflows, and gives what is told at the end.
func (s *site) run(seconds int, outflows ...synthetic.Outflow) []Outflow {
	s.t.Helper()
	var found []Outflow
	for range seconds {
		s.k++
		at := epoch + sensors.Instant(s.k)*sensors.Second
		for i, m := range s.masts {
			// Turbulence that repeats: it needs no generator and is the same on
			// every machine.
			a, b := math.Sincos(float64(s.k)*0.71 + float64(i)*2.3)
			u, v := 4+0.6*a, 0.5*b
			for k := range outflows {
				e, n := outflows[k].Wind(m.X, m.Y, 10, float64(s.k))
				u, v = u+e, v+n
			}
			from := math.Mod(math.Atan2(-u, -v)*180/math.Pi+360, 360)
			c := s.checkers[i].Check(sensors.Reading{Station: i, Time: at, Arrival: at, Speed: math.Hypot(u, v), From: from})
			if c.Usable() {
				s.recorder.Add(c)
			}
		}
		found = s.tracker.Step(at, s.field.Step(s.recorder.Snapshot(at)))
	}
	return found
}

// steady is an outflow of the published shape that stands from second 300 on.
func steady(model synthetic.Model, x, y, strength, radius float64) synthetic.Outflow {
	return synthetic.Outflow{
		Model: model, X: x, Y: y, Strength: strength, Radius: radius, Stretch: 1,
		History: synthetic.History{Starts: 300, Grows: 60, Holds: 3600, Fades: 60},
	}
}

// The median microburst of Wilson et al. 1984 (J. Climate Appl. Meteor. 23,
// 898-915), 22 m/s over 3.1 km in the shape of Oseguera and Bowles 1988: its
// place, size, strength and divergence come out. 0.0249 1/s at the centre is
// twice the centre slope of that model for a greatest wind of 11 m/s at 1550 m.
func TestMedianMicroburst(t *testing.T) {
	s := newSite(t)
	if found := s.run(300); len(found) != 0 {
		t.Fatalf("in steady wind there is %+v", found[0])
	}
	found := s.run(180, steady(synthetic.ModelOsegueraBowles, 400, 200, 11, 1550))
	if len(found) != 1 {
		t.Fatalf("%d outflows are told, one is there", len(found))
	}
	o := &found[0]
	if o.Gap(400, 200) > 250 || o.Probability < 0.95 {
		t.Errorf("centred at %.0f, %.0f with probability %.2f", o.X, o.Y, o.Probability)
	}
	if d := o.Difference(); d < 19 || d > 25 || 2*o.StrengthLow > 22 || 2*o.StrengthHigh < 22 {
		t.Errorf("the wind changes by %.1f m/s (%.1f to %.1f), 22 is true", d, 2*o.StrengthLow, 2*o.StrengthHigh)
	}
	if o.RadiusLow > 1550 || o.RadiusHigh < 1550 || o.Extent() != Microburst {
		t.Errorf("radius %.0f m (%.0f to %.0f), a %s", o.Radius, o.RadiusLow, o.RadiusHigh, o.Extent())
	}
	if o.Divergence < 0.018 || o.Divergence > 0.032 {
		t.Errorf("divergence %.4f 1/s, 0.0249 is true", o.Divergence)
	}
	if len(o.Reaches) != 1 || o.Reaches[0] != (Reach{Path: 0}) {
		t.Errorf("it lies on the first path alone, told is %+v", o.Reaches)
	}
}

// Motion, growth and arrival follow the outflow; how well, TestMotionOverSeeds
// measures.
func TestMotion(t *testing.T) {
	s := newSite(t)
	s.run(300)
	o := steady(synthetic.ModelVicroy, -1200, 100, 12, 900)
	o.MotionX = 8
	o.History.Grows = 150
	found := s.run(130, o)
	if len(found) != 1 {
		t.Fatalf("%d outflows are told", len(found))
	}
	if found[0].Trend != Growing {
		t.Errorf("it grows by %.3f (%.3f) m/s a second, told is %d", found[0].Growth, found[0].GrowthSpread, found[0].Trend)
	}
	found = s.run(90, o)
	if len(found) != 1 {
		t.Fatalf("%d outflows are told", len(found))
	}
	f := &found[0]
	if !f.Motion.Known || math.Hypot(f.Motion.East-8, f.Motion.North) > 4 {
		t.Errorf("it moves with 8 m/s to the east, told is %+v", f.Motion)
	}
	// Its ring of 900 m meets the second path, 3 km east, when the centre is
	// 2.1 km east: 412.5 s after its start, 192.5 s from now.
	if len(f.Reaches) != 2 || f.Reaches[1].Path != 1 || math.Abs(f.Reaches[1].Seconds-192.5) > 90 {
		t.Errorf("told is %+v; the second path is reached in 192 s", f.Reaches)
	}
	// Once it is gone nothing is told.
	if found = s.run(200); len(found) != 0 {
		t.Errorf("after its end there is %+v", found[0])
	}
}

// Lines of microbursts exist (Hjelmfelt 1988, J. Appl. Meteor. 27, 900-927): two
// at once are told apart.
func TestTwoAtOnce(t *testing.T) {
	s := newSite(t)
	s.run(300)
	a, b := steady(synthetic.ModelVicroy, -1300, 0, 11, 800), steady(synthetic.ModelVicroy, 1300, 300, 9, 800)
	found := s.run(150, a, b)
	if len(found) != 2 {
		t.Fatalf("%d outflows are told, two are there", len(found))
	}
	for _, want := range []synthetic.Outflow{a, b} {
		near := math.Min(found[0].Gap(want.X, want.Y), found[1].Gap(want.X, want.Y))
		if near > 400 {
			t.Errorf("the one at %.0f, %.0f is missed by %.0f m", want.X, want.Y, near)
		}
	}
}

// An outflow wider than 4 km from peak to peak is no microburst (Fujita 1985).
func TestExtent(t *testing.T) {
	for _, row := range []struct {
		radius, strength float64
		want             Extent
	}{
		{1550, 11, Microburst}, {2000, 11, Microburst}, {2001, 11, LargerOutflow},
		{1550, 4.99, WeakOutflow}, {1550, 5, Microburst}, {2500, 4, LargerOutflow},
	} {
		o := Outflow{Radius: row.radius, Strength: row.strength}
		if got := o.Extent(); got != row.want {
			t.Errorf("radius %.0f m, %.2f m/s: %s, want %s", row.radius, row.strength, got, row.want)
		}
	}
}

// A contour of a normal centre holds its share of it: the radius of the circle
// for sd 1 is sqrt(-2 ln(1-p)), 1.1774 for one half (the circular error
// probable of handbooks) and 2.4477 for 95 %.
func TestContour(t *testing.T) {
	o := Outflow{X: 10, Y: -5, Spread: [3]float64{1, 0, 1}}
	for p, want := range map[float64]float64{0.5: 1.1774, 0.95: 2.4477} {
		for _, c := range o.Contour(p, 8, nil) {
			if r := math.Hypot(c[0]-10, c[1]+5); math.Abs(r-want) > 1e-4 {
				t.Errorf("%.2f: a corner at %.4f, want %.4f", p, r, want)
			}
		}
	}
}
