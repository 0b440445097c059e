// Package outflow takes the outflows that the wind field holds possible and
// gives what people ask of one: where it is, how large and how strong, how it
// moves and grows, and when it reaches a path. Each figure comes with its
// spread. Next: hazard, wording.
package outflow

import (
	"math"

	"sockline/alerting/windfield"
	"sockline/sensors"
)

// Outflow is what is known of one outflow at a step. Places in m of the local
// plane, speeds in m/s at mast height.
type Outflow struct {
	Probability float64 // that an outflow is under way, and that it is this one
	X, Y        float64 // centre: the posterior mean
	Spread      [3]float64
	// Radius of the greatest wind, with its 5 and 95 % points, m.
	Radius, RadiusLow, RadiusHigh float64
	// Strength is the greatest wind, with its 5 and 95 % points. From one side
	// to the other the wind changes by twice that over twice the radius.
	Strength, StrengthLow, StrengthHigh float64
	Divergence                          float64 // at the centre, 1/s
	Motion                              Motion
	Trend                               Trend
	Growth, GrowthSpread                float64 // of the strength, m/s per s, and its standard deviation
	Reaches                             []Reach // paths that it lies on or comes to, in the airfield's order
}

// Motion of the centre.
type Motion struct {
	Known       bool // the spread is small enough to be told
	East, North float64
	Spread      float64 // standard deviation of a component
}

// Trend of the strength.
type Trend uint8

// The trends.
const (
	TrendUnknown Trend = iota
	Steady
	Growing
	Fading
)

// Reach is when an outflow's ring of greatest wind comes to a path.
type Reach struct {
	Path    int     // index into the airfield's paths
	Seconds float64 // from now; 0: it lies on it
}

// Difference is the change of wind from one side to the other, m/s.
func (o *Outflow) Difference() float64 { return 2 * o.Strength }

// Gap is how far a place is from the centre, m.
func (o *Outflow) Gap(x, y float64) float64 { return math.Hypot(x-o.X, y-o.Y) }

// Extent names an outflow by its size and strength.
type Extent string

// The extents. Microburst: T.T. Fujita, "The Downburst", SMRP 210, 1985, at
// most 4 km across; J.W. Wilson et al., "Microburst wind structure and
// evaluation of Doppler radar for airport wind shear detection", J. Climate
// Appl. Meteor. 23, 1984: a difference of at least 10 m/s between peaks at most
// 4 km apart.
const (
	Microburst    Extent = "microburst"
	LargerOutflow Extent = "larger outflow"
	WeakOutflow   Extent = "weak outflow"
)

const (
	microburstAcross     = 4000.0 // m
	microburstDifference = 10.0   // m/s
)

// Extent of the outflow.
func (o *Outflow) Extent() Extent {
	switch {
	case 2*o.Radius > microburstAcross:
		return LargerOutflow
	case o.Difference() < microburstDifference:
		return WeakOutflow
	}
	return Microburst
}

// likely is the probability from which an outflow is told.
const likely = 0.5

// gridSpread is the variance of a place of which only the nearest point of a
// square grid is known, m2 for a spacing of 1 m.
const gridSpread = 1.0 / 12

// Contour appends the ellipse that holds the centre with a probability, as
// corners east and north, anticlockwise and not repeated. The centre is taken
// for normally distributed: the squared radius of the ellipse is the point of
// the chi-square law with two degrees, -2 ln(1-p).
func (o *Outflow) Contour(p float64, corners int, dst [][2]float64) [][2]float64 {
	xx, xy, yy := o.Spread[0], o.Spread[1], o.Spread[2]
	size := math.Sqrt(-2 * math.Log(1-p))
	// Cholesky factor of the covariance.
	a := math.Sqrt(xx)
	b := xy / a
	c := math.Sqrt(math.Max(yy-float64(b*b), 0))
	for k := range corners {
		sin, cos := math.Sincos(2 * math.Pi * float64(k) / float64(corners))
		dst = append(dst, [2]float64{o.X + float64(size*a*cos), o.Y + float64(size*(float64(b*cos)+float64(c*sin)))})
	}
	return dst
}

// estimate sums up the parts that belong to one outflow: total is the weight
// of all parts. spacing is that of the grid of centres, m.
func estimate(parts []windfield.Outflow, total, spacing float64) Outflow {
	var o Outflow
	sum := 0.0
	for _, p := range parts {
		sum += p.Weight
		o.X += float64(p.Weight * p.X)
		o.Y += float64(p.Weight * p.Y)
		o.Radius += float64(p.Weight * p.Radius)
		o.Strength += float64(p.Weight * p.Strength)
		o.Divergence += float64(p.Weight * p.Divergence())
	}
	o.Probability = sum / total
	o.X, o.Y, o.Radius, o.Strength, o.Divergence = o.X/sum, o.Y/sum, o.Radius/sum, o.Strength/sum, o.Divergence/sum
	var radius, strength float64
	for _, p := range parts {
		dx, dy := p.X-o.X, p.Y-o.Y
		o.Spread[0] += float64(p.Weight * dx * dx)
		o.Spread[1] += float64(p.Weight * dx * dy)
		o.Spread[2] += float64(p.Weight * dy * dy)
		radius += float64(p.Weight * (p.Radius - o.Radius) * (p.Radius - o.Radius))
		strength += float64(p.Weight * (float64((p.Strength-o.Strength)*(p.Strength-o.Strength)) + float64(p.Spread*p.Spread)))
	}
	grid := float64(gridSpread * spacing * spacing)
	for k := range o.Spread {
		o.Spread[k] /= sum
	}
	o.Spread[0] += grid
	o.Spread[2] += grid
	const z = 1.6449 // 95 % point of the normal law
	// The radii tried lie about half a radius apart.
	sd := math.Sqrt(radius/sum + float64(gridSpread*o.Radius*o.Radius/4))
	o.RadiusLow, o.RadiusHigh = math.Max(o.Radius-float64(z*sd), 0), o.Radius+float64(z*sd)
	sd = math.Sqrt(strength / sum)
	o.StrengthLow, o.StrengthHigh = math.Max(o.Strength-float64(z*sd), 0), o.Strength+float64(z*sd)
	return o
}

// Path is the ground of a path: a line, m.
type Path struct{ FromX, FromY, ToX, ToY float64 }

// Tracker follows outflows over the last minutes. What it holds is finite and
// lies on a fixed UTC grid, so that it is the same in every replay. Not safe for
// concurrent use.
type Tracker struct {
	paths   []Path
	spacing float64
	tracks  [most]track
	found   []Outflow
	parts   [most][]windfield.Outflow
	reaches [most][]Reach
}

// most is how many outflows are told apart.
const most = 2

// NewTracker is a tracker for the airfield's paths; spacing is that of the
// centres tried, m.
func NewTracker(paths []Path, spacing float64) *Tracker {
	return &Tracker{paths: paths, spacing: spacing, found: make([]Outflow, 0, most)}
}

// Step gives the outflows of step t, the likeliest first; none when an outflow
// is less likely than not. The result is overwritten by the next step. A nil
// posterior is a step that saw nothing.
func (tr *Tracker) Step(t sensors.Instant, p *windfield.Posterior) []Outflow {
	tr.found = tr.found[:0]
	if p == nil || p.OutflowShare < likely {
		return tr.found
	}
	n := tr.split(p)
	total := 0.0
	for _, o := range p.Outflows {
		if o.Twin <= 0 {
			total += o.Weight
		}
	}
	for k := range n {
		if len(tr.parts[k]) == 0 {
			continue
		}
		o := estimate(tr.parts[k], total/p.OutflowShare, tr.spacing)
		if o.Probability < likely {
			continue
		}
		tr.found = append(tr.found, o)
	}
	tr.match()
	for k := range tr.found {
		o := &tr.found[k]
		tr.tracks[k].remember(t, o)
		tr.tracks[k].follow(t, o)
		tr.reaches[k] = reaches(tr.paths, o, tr.reaches[k][:0])
		o.Reaches = tr.reaches[k]
	}
	return tr.found
}

// split puts the possible outflows into the one or two that there are. A second
// is told only when pairs hold most of the weight: the seeds are then the two
// of the likeliest pair, and each part goes to the nearer.
func (tr *Tracker) split(p *windfield.Posterior) int {
	for k := range tr.parts {
		tr.parts[k] = tr.parts[k][:0]
	}
	single, paired, best := 0.0, 0.0, -1
	for i, o := range p.Outflows {
		switch {
		case o.Twin == 0:
			single += o.Weight
		case o.Twin < 0: // the first of a pair; its twin follows
			paired += o.Weight
			if best < 0 || o.Weight > p.Outflows[best].Weight {
				best = i
			}
		}
	}
	if best < 0 || paired < single {
		for _, o := range p.Outflows {
			if o.Twin <= 0 {
				tr.parts[0] = append(tr.parts[0], o)
			}
		}
		return 1
	}
	a, b := p.Outflows[best], p.Outflows[best+1]
	for _, o := range p.Outflows {
		k := 0
		if math.Hypot(o.X-b.X, o.Y-b.Y) < math.Hypot(o.X-a.X, o.Y-a.Y) {
			k = 1
		}
		tr.parts[k] = append(tr.parts[k], o)
	}
	return 2
}

// match keeps each outflow on the track it had: with two, the pairing that
// moves less.
func (tr *Tracker) match() {
	if len(tr.found) != 2 {
		return
	}
	straight := tr.tracks[0].gap(&tr.found[0]) + tr.tracks[1].gap(&tr.found[1])
	crossed := tr.tracks[1].gap(&tr.found[0]) + tr.tracks[0].gap(&tr.found[1])
	if crossed < straight {
		tr.found[0], tr.found[1] = tr.found[1], tr.found[0]
	}
}

// TakeOver goes on with the tracks of another tracker, whose masts or paths
// were others.
func (tr *Tracker) TakeOver(before *Tracker) { tr.tracks = before.tracks }
