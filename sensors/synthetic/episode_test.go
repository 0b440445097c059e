package synthetic

import (
	"math"
	"reflect"
	"slices"
	"testing"

	"sockline/sensors/quantity"
)

func testLine() Line {
	x, y, _ := skerryMoor().Along("07", 4000, 0)
	return Line{X: x, Y: y, Bearing: skerryMoor().bearings["07"], Length: 5000}
}

func TestEpisodesRepeat(t *testing.T) {
	for _, kind := range EpisodeKinds() {
		a, b := DrawEpisode(5, kind, testLine()), DrawEpisode(5, kind, testLine())
		if !reflect.DeepEqual(a, b) {
			t.Errorf("%s: the same seed drew two episodes", kind)
		}
		if c := DrawEpisode(6, kind, testLine()); reflect.DeepEqual(a.From, c.From) {
			t.Errorf("%s: another seed drew the same episode", kind)
		}
	}
}

// Expected: the distributions that DrawEpisode states.
func TestEpisodeDistribution(t *testing.T) {
	const n = 2000
	var change, radius []float64
	for seed := range uint64(n) {
		s := DrawEpisode(seed, EpisodeOutflow, testLine())
		o := s.Outflows[0]
		change = append(change, 2*o.Strength)
		radius = append(radius, o.Radius)
		if o.Radius < 400 || o.Radius > 1600 || s.Speed < 0 || s.Speed > 15 ||
			math.Hypot(o.MotionX, o.MotionY) > 12.001 || o.Stretch < 1 || o.Stretch > 2 {
			t.Fatalf("seed %d is out of its bounds: %+v", seed, o)
		}
		if last := o.History.Starts + o.History.Grows + o.History.Holds + o.History.Fades; last > s.Length.Seconds() {
			t.Fatalf("seed %d ends at %g s, after its scene", seed, last)
		}
	}
	slices.Sort(change)
	slices.Sort(radius)
	// 22 m/s times the mean share of 0.725; the standard error of the median is
	// 1.25*0.42/sqrt(2000) = 1.2 %.
	near(t, "median change, m/s", change[n/2], 22*0.725, 0.8)
	near(t, "median radius, m", radius[n/2], 1000, 40)
}

func TestEpisodeFrontReplacesTheWind(t *testing.T) {
	s := DrawEpisode(9, EpisodeFront, testLine())
	f := &s.Fronts[0]
	f.Fades, f.Curve, s.Eddies.Deviation = 0, 0, 0
	w := s.Weather()
	far := quantity.FromDirection(20000, f.Toward) // 20 km behind the line
	u, v := w.Wind(f.X+far.East, f.Y+far.North, 10, f.Passes)
	behind := quantity.Vector{East: u, North: v}
	near(t, "wind behind", behind.Speed(), f.Speed/0.59, 1e-6)
	near(t, "its direction", behind.From(), quantity.NormalizeDegrees(f.Toward+180), 1e-6)
	u, v = w.Wind(f.X-far.East, f.Y-far.North, 10, f.Passes)
	near(t, "wind ahead", math.Hypot(u, v), s.Speed, 1e-6)
}
