package synthetic

import (
	"fmt"
	"math"
	"math/rand/v2"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// EpisodeKind is a sort of weather to draw episodes of.
type EpisodeKind string

// The kinds of episode.
const (
	EpisodeQuiet      EpisodeKind = "quiet"      // light wind, little turbulence
	EpisodeGusty      EpisodeKind = "gusty"      // 8 to 15 m/s, the same everywhere
	EpisodeConvective EpisodeKind = "convective" // eddies of 0.6 to 1.5 m/s
	EpisodeOutflow    EpisodeKind = "outflow"    // one outflow near the line
	EpisodeFront      EpisodeKind = "gust-front" // one gust front over it
)

// EpisodeKinds lists the kinds.
func EpisodeKinds() []EpisodeKind {
	return []EpisodeKind{EpisodeQuiet, EpisodeGusty, EpisodeConvective, EpisodeOutflow, EpisodeFront}
}

// Line is the ground that episodes are drawn about: Length metres from X, Y
// (metres east and north) along Bearing (degrees true).
type Line struct{ X, Y, Bearing, Length float64 }

// at is the place along metres from its begin and right metres beside it.
func (l Line) at(along, right float64) (x, y float64) {
	sin, cos := math.Sincos(l.Bearing * (math.Pi / 180))
	return l.X + along*sin + right*cos, l.Y + along*cos - right*sin
}

// The distributions of outflows. Wilson et al. 1984 (J. Climate Appl. Meteor.
// 23, 898-915): median of the greatest speed difference 22 m/s, over 3.1 km on
// average, about 75 m up, reached a median 5 min after the first divergence at
// the surface. A mast at 10 m sees between 0.55 (deep smooth ground layer) and
// 0.9 (wall jet) of it, so the median change at mast height is about 16 m/s.
// The scatter of 0.4 in the logarithm is a choice, as is the radius: smaller
// than half of 3.1 km, because small outflows are the harder ones to see.
const (
	differenceAloft = 22.0 // m/s, median
	mastShareLow    = 0.55
	mastShareHigh   = 0.90
	radiusMedian    = 1000.0 // m
	radiusLow       = 400.0
	radiusHigh      = 1600.0
	logScatter      = 0.4
)

// The distribution of gust fronts. Mahoney 1988 (MWR 116, 1474-1492): mean
// speed 8.6 m/s, which is 0.59 of the greatest wind behind the line.
const (
	frontSpeed = 8.6 // m/s
	frontShare = 0.59
)

// episodeStart is the event time at which every episode starts: noon of a
// summer day, 2026-07-01T12:00:00Z.
const episodeStart sensors.Instant = 1782907200 * sensors.Second

// episodeLength leaves room for the longest growth, plateau and fading.
const episodeLength = 25 * time.Minute

// DrawEpisode draws an episode of a kind about a line. The same seed, kind and
// line give the same episode. All have surface-layer turbulence of class A, B
// or C. Drawn uniformly unless said otherwise:
//
//	mean wind   0 to 15 m/s from anywhere (quiet 0 to 5, gusty 8 to 15)
//	eddies      sd 0 to 1.5 m/s (quiet 0 to 0.3, gusty 0 to 0.5, convective 0.6
//	            to 1.5), length 500 to 2000 m, time 2 to 10 min
//	outflow     40 % Oseguera-Bowles, 40 % Vicroy, 20 % Holmes-Oliver; twice the
//	            strength is log-normal about 22 m/s (10 to 60) times 0.55 to 0.9;
//	            radius log-normal about 1000 m (400 to 1600); stretch 1 to 2,
//	            any axis; growth log-normal about 5 min (2 to 8), plateau 1 to 5
//	            min, fading 2 to 8 min; moves with 0.5 to 1 of the mean wind and
//	            2 m/s of its own in each component (at most 12 m/s); half of them spread
//	            by up to 1.5 m/s. At its peak it stands anywhere along the
//	            line, beside it by a normal 0.7 radii
//	gust front  speed log-normal about 8.6 m/s (4 to 16), any direction; behind
//	            it the wind blows with it at speed/0.59; width 50 to 400 m; half
//	            are curved by 4 to 20 km, half fade in 5 to 20 min; passes a point
//	            of the line after 5 to 10 min
func DrawEpisode(seed uint64, kind EpisodeKind, line Line) *Scene {
	rng := stream(seed, "episode/"+string(kind))
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	s := &Scene{
		Name: fmt.Sprintf("%s-%d", kind, seed), Title: "A drawn episode: " + string(kind),
		Start: episodeStart, Length: episodeLength, Seed: seed,
		From: between(0, 360), Masts: DefaultInstrument(),
		Turbulence: [...]float64{TurbulenceA, TurbulenceB, TurbulenceC}[rng.IntN(3)],
	}
	s.Eddies.Length, s.Eddies.Time = between(500, 2000), between(120, 600)
	switch kind {
	case EpisodeQuiet:
		s.Speed, s.Eddies.Deviation = between(0, 5), between(0, 0.3)
	case EpisodeGusty:
		s.Speed, s.Eddies.Deviation = between(8, 15), between(0, 0.5)
	case EpisodeConvective:
		s.Speed, s.Eddies.Deviation = between(0, 15), between(0.6, 1.5)
	default:
		s.Speed, s.Eddies.Deviation = between(0, 15), between(0, 1.5)
	}
	switch kind {
	case EpisodeOutflow:
		s.Outflows = []Outflow{drawOutflow(rng, s, line)}
	case EpisodeFront:
		s.Fronts = []Front{drawFront(rng, s, line)}
	}
	return s
}

// logNormal draws about a median, within bounds.
func logNormal(rng *rand.Rand, median, low, high float64) float64 {
	return min(max(median*math.Exp(logScatter*rng.NormFloat64()), low), high)
}

func drawOutflow(rng *rand.Rand, s *Scene, line Line) Outflow {
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	models := [...]Model{
		ModelOsegueraBowles, ModelOsegueraBowles, ModelVicroy, ModelVicroy, ModelHolmesOliver,
	}
	o := Outflow{
		Model:    models[rng.IntN(len(models))],
		Strength: logNormal(rng, differenceAloft, 10, 60) / 2 * between(mastShareLow, mastShareHigh),
		Radius:   logNormal(rng, radiusMedian, radiusLow, radiusHigh),
		Stretch:  between(1, 2),
		Axis:     between(0, 360),
		History: History{
			Starts: between(120, 240), Grows: logNormal(rng, 300, 120, 480),
			Holds: between(60, 300), Fades: between(120, 480),
		},
	}
	mean := quantity.FromDirection(s.Speed, s.From)
	share := between(0.5, 1)
	o.MotionX, o.MotionY = share*mean.East+2*rng.NormFloat64(), share*mean.North+2*rng.NormFloat64()
	if speed := math.Hypot(o.MotionX, o.MotionY); speed > 12 {
		o.MotionX, o.MotionY = o.MotionX*12/speed, o.MotionY*12/speed
	}
	if spread := between(-1.5, 1.5); spread > 0 {
		o.Spread = spread
	}
	// Placed where it stands at its peak, then moved back to its start.
	x, y := line.at(between(0, line.Length), 0.7*o.Radius*rng.NormFloat64())
	o.X, o.Y = x-o.MotionX*o.History.Grows, y-o.MotionY*o.History.Grows
	return o
}

func drawFront(rng *rand.Rand, s *Scene, line Line) Front {
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	f := Front{
		Passes: between(300, 600), Toward: between(0, 360),
		Speed: logNormal(rng, frontSpeed, 4, 16), Width: between(50, 400),
	}
	f.X, f.Y = line.at(between(0, line.Length), 0)
	mean := quantity.FromDirection(s.Speed, s.From)
	behind := quantity.FromDirection(f.Speed/frontShare, f.Toward+180)
	f.Step = quantity.Vector{East: behind.East - mean.East, North: behind.North - mean.North}
	if rng.IntN(2) == 0 {
		f.Curve = between(4e3, 20e3)
	}
	if rng.IntN(2) == 0 {
		f.Fades = between(300, 1200)
	}
	return f
}
