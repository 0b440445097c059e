package survey

import (
	"math"

	"sockline/alerting"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// Place is one outflow put on one place of the ground. Blind ground is where
// one of a given strength can cross a path and open nothing.
type Place struct {
	Index    int     `json:"i"`
	X        float64 `json:"east_m"`
	Y        float64 `json:"north_m"`
	Strength float64 `json:"strength_kt"` // change from side to side at mast height
	Radius   float64 `json:"radius_m"`
	Whole    float64 `json:"whole_kt"`    // greatest true change on any whole path
	Observed float64 `json:"observed_kt"` // on observed ground
	Found    bool    `json:"found"`       // level 2 or more opened on any path
}

// Seen tells how a place went.
type Seen string

// What became of an outflow on a place.
const (
	Harmless Seen = "too weak on every path"      // its change stays below the level on all paths
	SeenWell Seen = "seen"                        // an alert opened
	Unseen   Seen = "unseen"                      // large on observed ground, and nothing opened
	Outside  Seen = "outside of what is observed" // large only where the paths say "not observed"
)

// Seen of this place, for a large change of so many knots.
func (p *Place) Seen(large float64) Seen {
	switch {
	case p.Found:
		return SeenWell
	case p.Observed >= large:
		return Unseen
	case p.Whole >= large:
		return Outside
	}
	return Harmless
}

// What is put on the ground: strengths that make a large change and half as
// much again as that, on a small and a usual radius. The shape is that whose
// wind dies fastest outside of its ring.
const (
	groundModel  = synthetic.ModelVicroy
	groundAside  = 1500.0 // how far beside a path places are tried, m
	groundSmall  = 700.0  // m
	groundUsual  = 1200.0
	groundWeak   = 20.0 // kt from side to side
	groundStrong = 30.0
)

// places lists what is put where.
func (n *Network) places(p Plan) []Place {
	if p.GroundStep == 0 {
		return nil
	}
	var all []Place
	for _, l := range lines(n.Settings.Airfield) {
		sin, cos := math.Sincos(l.Bearing * math.Pi / 180)
		aside := math.Floor(groundAside/p.GroundStep) * p.GroundStep
		for along := 0.0; along <= l.Length; along += p.GroundStep {
			for right := -aside; right <= aside+1e-6; right += p.GroundStep {
				x, y := l.X+along*sin+right*cos, l.Y+along*cos-right*sin
				for _, strength := range []float64{groundWeak, groundStrong} {
					for _, radius := range []float64{groundSmall, groundUsual} {
						all = append(all, Place{Index: p.Episodes + len(all), X: math.Round(x), Y: math.Round(y), Strength: strength, Radius: radius})
					}
				}
			}
		}
	}
	return all
}

// put plays an outflow on a place.
func (p *player) put(place Place, seed uint64) (Place, error) {
	scene := synthetic.Still(seed+uint64(place.Index), groundModel, place.X, place.Y,
		place.Strength/2*quantity.Knot, place.Radius)
	run, err := p.begin(scene)
	if err != nil {
		return place, err
	}
	for {
		found, second, more := run.next()
		if !more {
			break
		}
		for i := range found.Transitions {
			place.Found = place.Found || found.Transitions[i].Alert.Level >= alerting.Large
		}
		// At full strength the truth stands still.
		if second == scene.Seconds() {
			for _, g := range p.grounds {
				c := g.look(run.sampler.Weather(), float64(second))
				place.Whole = max(place.Whole, quantity.Knots(max(c.lossAll, c.gainAll)))
				place.Observed = max(place.Observed, quantity.Knots(max(c.loss, c.gain)))
			}
		}
	}
	place.Whole, place.Observed = round(place.Whole, 10), round(place.Observed, 10)
	return place, nil
}
