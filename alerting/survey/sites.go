package survey

import (
	"fmt"
	"math"
	"slices"

	"sockline/alerting/airfield"
)

// DesignOf works out the design of a network: next is how many sites to choose
// from the candidates, 0 for none.
func DesignOf(n *Network, candidates []Candidate, next int) (*Design, error) {
	if err := n.check(); err != nil {
		return nil, err
	}
	if next < 0 || next > MostSites {
		return nil, fmt.Errorf("%d next sites: choose from 1 to %d", next, MostSites)
	}
	p := newPlanning(n)
	masts, _ := n.standing()
	blank := newField(p.fields, p.mean, p.noise, p.targets, masts)
	full := blank.clone()
	for i := range masts {
		full.watch(i)
	}
	d := &Design{Network: n.Name, Mean: spreadKnots(full.mean())}
	variance := 0.0
	for _, f := range p.fields {
		variance += f.Deviation * f.Deviation
	}
	d.Prior = spreadKnots(math.Sqrt(variance))
	d.Paths = p.paths(full, masts)
	if err := d.worth(p, blank, full, masts); err != nil {
		return nil, err
	}
	if next > 0 {
		if err := d.choose(p, candidates, next); err != nil {
			return nil, err
		}
	}
	return d, nil
}

// paths is what is known along each ground.
func (p *planning) paths(f *field, masts []airfield.Point) []PathDesign {
	var out []PathDesign
	i := 0
	for k, g := range p.grounds {
		observed := airfield.Observed(g.p, masts, p.network.Settings.Reach, airfield.Beyond)
		complete, _ := airfield.Complete(observed, g.p.Needed())
		path := PathDesign{Name: g.p.Name(), Complete: complete, Observed: [][2]float64{}}
		for _, o := range observed {
			path.Observed = append(path.Observed, [2]float64{round(o.From, 1), round(o.To, 1)})
		}
		first := slices.IndexFunc(g.before, g.low)
		for j := range p.counts[k] {
			path.Before = append(path.Before, round(g.before[first+j], 1))
			path.Spread = append(path.Spread, spreadKnots(f.spread(i)))
			i++
		}
		out = append(out, path)
	}
	return out
}

// sight is how much ground is observed, m, and which paths wholly enough.
func (p *planning) sight(masts []airfield.Point) (length float64, complete []string) {
	for _, path := range p.network.Settings.Airfield.Paths {
		observed := airfield.Observed(path, masts, p.network.Settings.Reach, airfield.Beyond)
		if all, _ := airfield.Complete(observed, path.Needed()); all {
			complete = append(complete, path.Name())
		}
	}
	for _, g := range p.grounds {
		for _, o := range airfield.Observed(g.p, masts, p.network.Settings.Reach, airfield.Beyond) {
			length += o.Length()
		}
	}
	return length, complete
}

// worth takes each mast away in turn. The upper levels of a tower are not among
// them: of the wind along the ground they tell nothing.
func (d *Design) worth(p *planning, blank, full *field, masts []airfield.Point) error {
	length, complete := p.sight(masts)
	_, index := p.network.standing()
	for i, station := range index {
		m := p.network.Settings.Airfield.Masts[station]
		without := blank.clone()
		for j := range masts {
			if j != i {
				without.watch(j)
			}
		}
		bits, err := full.bits(without)
		if err != nil {
			return err
		}
		rest := slices.Delete(slices.Clone(masts), i, i+1)
		left, still := p.sight(rest)
		d.Masts = append(d.Masts, MastWorth{
			ID: m.ID, Bits: round(bits, 100), Mean: spreadKnots(without.mean()),
			Observed: round(length-left, 1), Blinds: missing(complete, still),
		})
	}
	return nil
}

// missing are the names of a that b does not hold; never nil.
func missing(a, b []string) []string {
	out := []string{}
	for _, name := range a {
		if !slices.Contains(b, name) {
			out = append(out, name)
		}
	}
	return out
}

// choose takes the best candidate, then the best beside it, and so on: greedy
// choice by expected information is never worse than 63 % of the best set of as
// many (G.L. Nemhauser, L.A. Wolsey, M.L. Fisher, "An analysis of approximations
// for maximizing submodular set functions", Math. Programming 14, 1978; for
// Gaussian fields A. Krause, A. Singh, C. Guestrin, J. Mach. Learn. Res. 9, 2008).
func (d *Design) choose(p *planning, candidates []Candidate, next int) error {
	if len(candidates) == 0 {
		return fmt.Errorf("no site is allowed: the area is empty; give a polygon with room in it, or a list of sites")
	}
	if len(candidates) > MostCandidates {
		return fmt.Errorf("%d sites are too many: give at most %d", len(candidates), MostCandidates)
	}
	a := p.network.Settings.Airfield
	masts, _ := p.network.standing()
	sites := slices.Clone(masts)
	for _, c := range candidates {
		sites = append(sites, c.Point)
	}
	f := newField(p.fields, p.mean, p.noise, p.targets, sites)
	for i := range masts {
		f.watch(i)
	}
	standing := slices.Clone(masts)
	length, complete := p.sight(standing)
	taken := make([]bool, len(candidates))
	for turn := range min(next, len(candidates)) {
		gains, err := f.gains(len(masts))
		if err != nil {
			return err
		}
		best := -1
		for k, g := range gains {
			if !taken[k] && (best < 0 || g > gains[best]) {
				best = k
			}
			if turn == 0 {
				d.Tried = append(d.Tried, TriedSite{X: math.Round(candidates[k].X), Y: math.Round(candidates[k].Y), Bits: roundTo(g)})
			}
		}
		taken[best] = true
		f.watch(len(masts) + best)
		standing = append(standing, candidates[best].Point)
		seen, whole := p.sight(standing)
		s := Site{
			Name: candidates[best].Name, X: math.Round(candidates[best].X), Y: math.Round(candidates[best].Y),
			Bits: roundTo(gains[best]), Mean: spreadKnots(f.mean()),
			Observed: math.Round(seen - length), Completes: missing(whole, complete),
		}
		lat, lon := a.LatLon(candidates[best].Point)
		s.Latitude, s.Longitude = math.Round(lat*1e6)/1e6, math.Round(lon*1e6)/1e6
		d.Sites = append(d.Sites, s)
		length, complete = seen, whole
	}
	return nil
}

func roundTo(bits float64) float64 { return round(bits, 100) }

// Area is where masts may stand: inside of polygons (in the plane, first point
// not repeated), on single places, or both.
type Area struct {
	Polygons [][]airfield.Point
	Sites    []Candidate
}

// gridSites is how many places are tried in the polygons, about.
const gridSites = 600

// Candidates lists the places of the area that are tried: its sites, and a
// square grid in its polygons. The error says why there is none.
func (a Area) Candidates(field *airfield.Airfield) ([]Candidate, error) {
	out := slices.Clone(a.Sites)
	size := 0.0
	for _, polygon := range a.Polygons {
		size += math.Abs(enclosed(polygon))
	}
	if len(a.Polygons) > 0 && size < 1 {
		return nil, fmt.Errorf("the allowed area is empty: its polygons enclose no ground")
	}
	step := max(math.Sqrt(size/gridSites), 25)
	for _, polygon := range a.Polygons {
		first := len(out)
		low, high := polygon[0], polygon[0]
		for _, p := range polygon {
			low.X, low.Y = min(low.X, p.X), min(low.Y, p.Y)
			high.X, high.Y = max(high.X, p.X), max(high.Y, p.Y)
		}
		for y := low.Y + step/2; y <= high.Y; y += step {
			for x := low.X + step/2; x <= high.X; x += step {
				if p := (airfield.Point{X: x, Y: y}); within(p, polygon) {
					out = append(out, Candidate{Point: p})
				}
			}
		}
		if len(out) == first { // narrower than the grid: its corners stand for it
			for _, p := range polygon {
				out = append(out, Candidate{Point: p})
			}
		}
	}
	if len(out) == 0 {
		return nil, fmt.Errorf("no site is allowed: the area is empty; give a polygon with room in it, or a list of sites")
	}
	near := slices.DeleteFunc(out, func(c Candidate) bool { return nearestPath(field, c.Point) > mostAway })
	if len(near) == 0 {
		return nil, fmt.Errorf("no allowed site lies within %.0f km of a path: are its coordinates latitude and longitude the right way round?", mostAway/1000)
	}
	return near, nil
}

// mostAway is how far from every path a site is worth trying, m.
const mostAway = 3000.0

// enclosed is the area of a polygon, m2, positive anticlockwise: the shoelace
// formula.
func enclosed(polygon []airfield.Point) (area float64) {
	for i, p := range polygon {
		q := polygon[(i+1)%len(polygon)]
		area += (p.X*q.Y - q.X*p.Y) / 2
	}
	return area
}

// within tells whether a point lies in a polygon: the parity of the edges that
// a ray to the east crosses.
func within(p airfield.Point, polygon []airfield.Point) bool {
	in := false
	for i, a := range polygon {
		b := polygon[(i+1)%len(polygon)]
		if (a.Y > p.Y) != (b.Y > p.Y) && p.X < a.X+(b.X-a.X)*(p.Y-a.Y)/(b.Y-a.Y) {
			in = !in
		}
	}
	return in
}

// hull is the convex hull of points, anticlockwise: R.A. Jarvis, "On the
// identification of the convex hull of a finite set of points in the plane",
// Information Processing Letters 2, 1973 (from memory).
func hull(points []airfield.Point) (out []airfield.Point) {
	first := 0
	for i, p := range points {
		if q := points[first]; p.X < q.X || p.X == q.X && p.Y < q.Y {
			first = i
		}
	}
	for at := first; len(out) <= len(points); {
		out = append(out, points[at])
		next := -1
		for i, p := range points {
			if p == points[at] {
				continue
			}
			if next < 0 {
				next = i
				continue
			}
			a, b := points[at], points[next]
			turn := (b.X-a.X)*(p.Y-a.Y) - (b.Y-a.Y)*(p.X-a.X)
			farther := math.Hypot(p.X-a.X, p.Y-a.Y) > math.Hypot(b.X-a.X, b.Y-a.Y)
			if turn < 0 || turn == 0 && farther {
				next = i
			}
		}
		if next < 0 || points[next] == points[first] {
			break
		}
		at = next
	}
	return out
}

// besideRunway is how near to a runway's centreline no mast may stand unless
// somebody says so, m: the width of an instrument runway strip to either side
// (ICAO Annex 14; from memory).
const besideRunway = 150.0

// Anywhere is the ground within reach of the paths that is not on a runway's
// strip: what is searched when nobody says where masts may stand.
func Anywhere(n *Network) []Candidate {
	var out []Candidate
	const step = 250.0
	for _, l := range lines(n.Settings.Airfield) {
		sin, cos := math.Sincos(l.Bearing * math.Pi / 180)
		for along := 0.0; along <= l.Length; along += step {
			for right := -n.Settings.Reach; right <= n.Settings.Reach; right += step {
				p := airfield.Point{X: l.X + along*sin + right*cos, Y: l.Y + along*cos - right*sin}
				if !onStrip(n.Settings.Airfield, p) {
					out = append(out, Candidate{Point: p})
				}
			}
		}
	}
	return out
}

func onStrip(a *airfield.Airfield, p airfield.Point) bool {
	for _, path := range a.Paths {
		s, lateral := path.Along(p.X, p.Y)
		if math.Abs(lateral) < besideRunway && s < 300 && s > -path.RunwayLength()-300 {
			return true
		}
	}
	return false
}
