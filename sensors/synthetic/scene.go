package synthetic

import (
	"math"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// Scene is the weather over an airfield and the state of its masts for a
// while: what Parse reads from a scene file and DrawEpisode draws.
type Scene struct {
	Name     string
	Title    string
	Airfield string
	Start    sensors.Instant // of event time, a whole second
	Length   time.Duration   // whole seconds
	Seed     uint64

	From, Speed float64 // mean wind at 10 m: where it comes from (degrees true), m/s
	Roughness   float64 // length for the mean wind's log profile, m; 0 means 0.03 (open ground)
	Veers       []Veer
	Aloft       Aloft
	Rises       []Rise
	Fronts      []Front
	Outflows    []Outflow
	Eddies      Eddies
	Turbulence  float64 // reference intensity: TurbulenceNone, A, B, C

	Masts        Instrument // how every mast measures and sends
	Faults       []Fault
	Outages      []Span // the broker takes no message
	Expectations []Expectation
}

// Span is a stretch of the scene in seconds from its start, the end excluded.
type Span struct{ From, To float64 }

// Holds says whether t lies in the span.
func (s Span) Holds(t float64) bool { return s.From <= t && t < s.To }

// Seconds is the length of the scene in whole seconds.
func (s *Scene) Seconds() int { return int(s.Length / time.Second) }

// Weather makes the scene's wind ready for use.
func (s *Scene) Weather() *Weather {
	mean := quantity.FromDirection(s.Speed, s.From)
	w := &Weather{scene: s, roughness: s.Roughness, mean: mean}
	if w.roughness == 0 {
		w.roughness = 0.03 // open ground of the Davenport-Wieringa classes
	}
	w.eddies = newEddyField(s.Eddies, mean.East, mean.North, stream(s.Seed, "eddies"))
	return w
}

// Field is a wind that can be asked for anywhere: m/s toward east and north at
// x, y metres east and north, z metres above the ground, t seconds after the
// start.
type Field interface {
	Wind(x, y, z, t float64) (u, v float64)
}

// Weather is the true wind of a scene: everything but the surface-layer
// turbulence. It is safe for concurrent use.
type Weather struct {
	scene     *Scene
	roughness float64
	mean      quantity.Vector
	eddies    *eddyField
}

var _ Field = (*Weather)(nil)

// Wind is the true wind. The mean wind, rises and fronts follow a logarithmic
// profile, outflows that of their model, eddies are the same at all heights
// of a mast.
func (w *Weather) Wind(x, y, z, t float64) (u, v float64) {
	u, v = w.withoutEddies(x, y, z, t)
	du, dv := w.eddies.wind(x, y, t)
	return u + du, v + dv
}

// WindAlong fills dst with the true wind at points on a straight line: from x,
// y on, each dx, dy metres farther. It is Wind to within rounding, several
// times as fast, for studies that need the truth along whole paths.
func (w *Weather) WindAlong(dst []quantity.Vector, x, y, dx, dy, z, t float64) {
	for i := range dst {
		u, v := w.withoutEddies(x+float64(i)*dx, y+float64(i)*dy, z, t)
		dst[i] = quantity.Vector{East: u, North: v}
	}
	w.eddies.addAlong(dst, x, y, dx, dy, t)
}

// withoutEddies is the part of the wind that a scene writes down.
func (w *Weather) withoutEddies(x, y, z, t float64) (u, v float64) {
	mean := w.mean
	if len(w.scene.Veers) > 0 {
		from := w.scene.From
		for _, veer := range w.scene.Veers {
			from += veer.At(t)
		}
		mean = quantity.FromDirection(w.scene.Speed, from)
	}
	u, v = mean.East, mean.North
	for i := range w.scene.Rises {
		du, dv := w.scene.Rises[i].At(x, y, t)
		u, v = u+du, v+dv
	}
	for i := range w.scene.Fronts {
		du, dv := w.scene.Fronts[i].Wind(x, y, t)
		u, v = u+du, v+dv
	}
	if z != referenceHeight {
		factor := math.Log(max(z, 1)/w.roughness) / math.Log(referenceHeight/w.roughness)
		u, v = u*factor, v*factor
	}
	u, v = w.scene.Aloft.over(u, v, z, t)
	for i := range w.scene.Outflows {
		du, dv := w.scene.Outflows[i].Wind(x, y, z, t)
		u, v = u+du, v+dv
	}
	return u, v
}
