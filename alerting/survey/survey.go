// Package survey studies what a network of masts can see: an airfield with its
// masts and a seed come in, and what the engine makes of thousands of drawn
// episodes goes out (detection, delay, false openings, coverage, blind ground),
// beside what follows at once from the geometry (uncertainty along each path,
// what each mast is worth, where the next one should stand).
//
// The engine is the one that runs live. An episode depends on its number and
// the seed alone, so the result is the same for any number of workers, and a
// survey that was interrupted goes on where it stopped. Next: nothing; a
// command prints the report.
package survey

import (
	"errors"
	"fmt"
	"math"
	"time"

	"sockline/alerting/airfield"
	"sockline/alerting/engine"
	"sockline/sensors/synthetic"
)

// Network is an airfield with its masts: what is surveyed.
type Network struct {
	Name     string // for the report
	Settings engine.Settings
	Specs    []synthetic.StationSpec // in the order of Settings.Stations
}

// ReportingSeed is the first seed that results may be reported from, TuningSeed the
// first one after it of which that is not so: nothing was tuned on those between, all
// others are to tune on.
const (
	ReportingSeed = 5_000_000
	TuningSeed    = 6_000_000
)

// Plan is how large a survey is.
type Plan struct {
	Seed     uint64            `json:"seed"`
	Episodes int               `json:"episodes"`
	Profile  synthetic.Profile `json:"profile,omitempty"`
	Windy    bool              `json:"windy,omitempty"` // windy weather alone
	// GroundStep is the distance between the places on which an outflow is put
	// to look for blind ground, m; 0: none.
	GroundStep float64 `json:"ground_step_m"`

	brief time.Duration // cuts episodes short, in tests; 0: not
}

// MostEpisodes bounds a survey: a week on one core.
const MostEpisodes = 5_000_000

// leastMasts is how many masts a field of the wind needs before anything but
// "not observed" can be expected of it.
const leastMasts = 3

// tuning tells whether any episode is one to tune on.
func (p Plan) tuning() bool {
	return p.Seed < ReportingSeed || p.Seed > TuningSeed-uint64(p.Episodes)
}

// Check names what makes a survey of this network and plan senseless.
func (p Plan) Check(n *Network) error {
	if p.Episodes < 1 || p.Episodes > MostEpisodes {
		return fmt.Errorf("%d episodes: choose from 1 to %d", p.Episodes, MostEpisodes)
	}
	if p.Seed > math.MaxUint64-MostEpisodes {
		return fmt.Errorf("seed %d leaves no room for the episodes: choose one of at most %d", p.Seed, uint64(math.MaxUint64-MostEpisodes))
	}
	if p.GroundStep != 0 && !(p.GroundStep >= 100 && p.GroundStep <= 2000) {
		return fmt.Errorf("a step of %g m on the ground: choose from 100 to 2000 m, or 0 for no map of blind ground", p.GroundStep)
	}
	return n.check()
}

// standing are the masts that tell of the wind along the ground, and their
// indices: of a tower the upper levels are left out, as in the engine.
func (n *Network) standing() (points []airfield.Point, index []int) {
	aloft := n.Settings.Airfield.Aloft()
	for i, m := range n.Settings.Airfield.Masts {
		if !aloft[i] {
			points, index = append(points, m.Point), append(index, i)
		}
	}
	return points, index
}

// check names what is wrong with a network.
func (n *Network) check() error {
	a := n.Settings.Airfield
	masts, index := n.standing()
	if len(masts) < leastMasts {
		return fmt.Errorf("%s has %s: a survey needs at least %d to tell a change along the paths from one across them; add [[station]] tables",
			n.Name, countOf(len(masts), "mast", "masts"), leastMasts)
	}
	if spread := thickness(masts); spread < leastThickness {
		return fmt.Errorf("all masts of %s stand within %.0f m of one line: what comes from the side cannot be told from what comes along it; move a mast at least %.0f m off the line",
			n.Name, spread, leastThickness)
	}
	var far []error
	for i, m := range masts {
		if besideNothing(a, m, n.Settings.Reach) {
			far = append(far, fmt.Errorf("mast %s of %s stands %.1f km from the nearest path: it sees none of them (reach %.0f m); correct its position or take it out",
				a.Masts[index[i]].ID, n.Name, nearestPath(a, m)/1000, n.Settings.Reach))
		}
	}
	// A mast that serves as a neighbour only is sensible up to where it can
	// still be correlated with what the others see.
	if len(far) > 0 {
		return errors.Join(far...)
	}
	for _, g := range grounds(n) {
		if g.seen >= 2 {
			return nil
		}
	}
	return fmt.Errorf("no mast of %s stands within %.0f m of any path: nothing would ever be observed", n.Name, n.Settings.Reach)
}

// leastThickness is the least distance of the masts from their common line, m.
const leastThickness = 25.0

// outside is how far from every path a mast may stand, in reaches, before it
// is taken for a mistake.
const outside = 3

func besideNothing(a *airfield.Airfield, m airfield.Point, reach float64) bool {
	return nearestPath(a, m) > outside*reach
}

// nearestPath is the distance from a point to the nearest ground of a path, m.
func nearestPath(a *airfield.Airfield, m airfield.Point) float64 {
	best := math.Inf(1)
	for _, p := range a.Paths {
		s, lateral := p.Along(m.X, m.Y)
		e := p.Extent()
		beyond := max(s-e.From, e.To-s, 0)
		best = min(best, math.Hypot(beyond, lateral))
	}
	return best
}

// thickness is the greatest distance of a mast from the line that fits them
// best (the major axis of their scatter), m.
func thickness(points []airfield.Point) float64 {
	var x, y, xx, xy, yy float64
	n := float64(len(points))
	for _, p := range points {
		x, y = x+p.X/n, y+p.Y/n
	}
	for _, p := range points {
		xx, xy, yy = xx+(p.X-x)*(p.X-x), xy+(p.X-x)*(p.Y-y), yy+(p.Y-y)*(p.Y-y)
	}
	angle := math.Atan2(2*xy, xx-yy) / 2
	sin, cos := math.Sincos(angle)
	most := 0.0
	for _, p := range points {
		most = max(most, math.Abs((p.Y-y)*cos-(p.X-x)*sin))
	}
	return most
}

func countOf(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// study is what is drawn over this network's airfield.
func (n *Network) study(p Plan) synthetic.Study {
	s := synthetic.Study{Seed: p.Seed, Profile: p.Profile, Windy: p.Windy, Lines: lines(n.Settings.Airfield)}
	for _, st := range n.Settings.Stations {
		s.Masts = append(s.Masts, st.ID)
	}
	return s
}

// lines is the ground of each runway that its paths cover.
func lines(a *airfield.Airfield) []synthetic.Line {
	var out []synthetic.Line
	for i := range a.Runways {
		lead, span := runwaySpan(a, i)
		x, y := lead.At(span.From)
		east, north := lead.Direction()
		out = append(out, synthetic.Line{X: x, Y: y, Bearing: math.Atan2(east, north) * 180 / math.Pi, Length: span.Length()})
	}
	return out
}

// runwaySpan is the ground that the paths of a runway cover, in the distances
// of the landing on its first end.
func runwaySpan(a *airfield.Airfield, runway int) (lead airfield.Path, span airfield.Interval) {
	r := &a.Runways[runway]
	span = airfield.Interval{From: math.Inf(-1), To: math.Inf(1)}
	first := true
	for _, p := range a.Paths {
		if p.Runway() != r.Ends[0].Designator && p.Runway() != r.Ends[1].Designator {
			continue
		}
		if first {
			lead, first = p, false
		}
		i := inFrame(lead, p)
		span.From, span.To = max(span.From, i.From), min(span.To, i.To)
	}
	return lead, span
}

// inFrame is the extent of a path in the distances of another path of the same
// runway.
func inFrame(lead, p airfield.Path) airfield.Interval {
	e := p.Extent()
	a, _ := lead.Along(p.At(e.From))
	b, _ := lead.Along(p.At(e.To))
	return airfield.Interval{From: max(a, b), To: min(a, b)}
}

// Comparable tells whether two networks stand at the same runways, so that the
// same weather means the same to both.
func Comparable(a, b *Network) error {
	ra, rb := a.Settings.Airfield.Runways, b.Settings.Airfield.Runways
	differ := fmt.Errorf("%s and %s do not have the same runways and paths: only networks of masts at one airfield can be compared", a.Name, b.Name)
	if len(ra) != len(rb) {
		return differ
	}
	// One file may have another reference point: ends are compared on the globe.
	for i := range ra {
		for k := range ra[i].Ends {
			e, f := ra[i].Ends[k], rb[i].Ends[k]
			at := b.Settings.Airfield.Locate(a.Settings.Airfield.LatLon(e.Threshold))
			if math.Hypot(at.X-f.Threshold.X, at.Y-f.Threshold.Y) > 5 ||
				e.LandingLength != f.LandingLength || e.TakeoffLength != f.TakeoffLength {
				return differ
			}
		}
	}
	if oa, ob := a.Settings.Airfield, b.Settings.Airfield; math.Hypot(oa.Locate(ob.Latitude, ob.Longitude).X, oa.Locate(ob.Latitude, ob.Longitude).Y) > 5 {
		return fmt.Errorf("%s and %s have different reference points: the weather of the same seed would lie elsewhere; give both the same position", a.Name, b.Name)
	}
	return nil
}
