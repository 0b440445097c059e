package survey

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/mat"

	"sockline/alerting/airfield"
	"sockline/alerting/windfield"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// Design is what follows from where the masts stand, at once and without a
// single episode: how well the headwind is known along each path, what each
// mast is worth, where the next ones should stand. It rests on the same prior
// of the wind as the engine, taken as one Gaussian field; in the disturbed air
// that it supposes, only its comparisons count.
type Design struct {
	Network string       `json:"network"`
	Prior   float64      `json:"prior_sd_kt"` // of the headwind without any mast, its mean known
	Mean    float64      `json:"mean_sd_kt"`  // root mean square over all points below
	Paths   []PathDesign `json:"paths"`
	Masts   []MastWorth  `json:"masts"`
	Sites   []Site       `json:"next_sites,omitempty"`
	Tried   []TriedSite  `json:"tried_sites,omitempty"` // of the first of them
}

// PathDesign is what is known along one ground.
type PathDesign struct {
	Name     string       `json:"path"`
	Before   []float64    `json:"before_m"` // m before the threshold
	Spread   []float64    `json:"sd_kt"`    // posterior standard deviation of the headwind
	Observed [][2]float64 `json:"observed"` // m before the threshold, from far to near
	Complete bool         `json:"needed_observed"`
}

// MastWorth is what is lost when one mast fails.
type MastWorth struct {
	ID       string   `json:"id"`
	Bits     float64  `json:"lost_bits"`  // information on the headwind along the paths
	Mean     float64  `json:"mean_sd_kt"` // without it
	Observed float64  `json:"lost_observed_m"`
	Blinds   []string `json:"paths_no_longer_observed"`
}

// Site is a place for one more mast.
type Site struct {
	Name      string   `json:"name,omitempty"`
	Latitude  float64  `json:"latitude"`
	Longitude float64  `json:"longitude"`
	X         float64  `json:"east_m"`
	Y         float64  `json:"north_m"`
	Bits      float64  `json:"gained_bits"`
	Mean      float64  `json:"mean_sd_kt"` // with it and those before it
	Observed  float64  `json:"gained_observed_m"`
	Completes []string `json:"paths_then_observed"`
}

// TriedSite is what one place would have gained as the first.
type TriedSite struct {
	X    float64 `json:"east_m"`
	Y    float64 `json:"north_m"`
	Bits float64 `json:"bits"`
}

// Candidate is an allowed place for a mast, in the airfield's plane.
type Candidate struct {
	airfield.Point
	Name string
}

const (
	// planningWind is the wind whose turbulence the masts are thought to stand
	// in, m/s.
	planningWind = 8.0
	// resolution is how exactly the headwind is asked for, m/s: information is
	// counted down to it.
	resolution = 0.5
	// flownHigh: farther than this from the runway an aircraft is so high that
	// the wind at a mast says little of it, m. A 3 degree path is there 170 m up.
	flownHigh = 3000.0
	// MostSites is how many sites are chosen at most.
	MostSites = 6
	// MostCandidates bounds the places that are tried.
	MostCandidates = 2000
)

// field is the joint covariance of the headwind at all targets and of both
// components at some sites.
type field struct {
	targets, sites int
	noise          float64 // error variance of a mast's mean, m2/s2
	c              *mat.SymDense
}

// target is a point at which the headwind matters.
type target struct{ x, y, east, north float64 }

// newField builds the prior.
func newField(fields []windfield.Field, mean, noise float64, targets []target, sites []airfield.Point) *field {
	f := &field{targets: len(targets), sites: len(sites), noise: noise}
	n := len(targets) + 2*len(sites)
	f.c = mat.NewSymDense(n, nil)
	cov := func(dx, dy float64) (ee, en, nn float64) {
		ee, nn = mean*mean, mean*mean
		for _, k := range fields {
			a, b, c := k.Covariance(dx, dy)
			ee, en, nn = ee+a, en+b, nn+c
		}
		return ee, en, nn
	}
	for i, a := range targets {
		for j := i; j < len(targets); j++ {
			b := targets[j]
			ee, en, nn := cov(a.x-b.x, a.y-b.y)
			f.c.SetSym(i, j, a.east*b.east*ee+a.north*b.north*nn+(a.east*b.north+a.north*b.east)*en)
		}
		for j, s := range sites {
			ee, en, nn := cov(a.x-s.X, a.y-s.Y)
			f.c.SetSym(i, f.at(j), -(a.east*ee + a.north*en))
			f.c.SetSym(i, f.at(j)+1, -(a.east*en + a.north*nn))
		}
	}
	for i, a := range sites {
		for j := i; j < len(sites); j++ {
			ee, en, nn := cov(a.X-sites[j].X, a.Y-sites[j].Y)
			f.c.SetSym(f.at(i), f.at(j), ee)
			f.c.SetSym(f.at(i)+1, f.at(j)+1, nn)
			f.c.SetSym(f.at(i), f.at(j)+1, en)
			if i != j {
				f.c.SetSym(f.at(i)+1, f.at(j), en)
			}
		}
	}
	return f
}

func (f *field) at(site int) int { return f.targets + 2*site }

// clone is a field that can be conditioned apart.
func (f *field) clone() *field {
	g := *f
	g.c = mat.NewSymDense(f.c.SymmetricDim(), nil)
	g.c.CopySym(f.c)
	return &g
}

// watch conditions everything on a mast at a site: the covariance falls by
// C_s (C_ss + R)^-1 C_s', one component after the other.
func (f *field) watch(site int) {
	n := f.c.SymmetricDim()
	column := make([]float64, n)
	for d := range 2 {
		s := f.at(site) + d
		for i := range n {
			column[i] = f.c.At(i, s)
		}
		f.c.SymRankOne(f.c, -1/(column[s]+f.noise), mat.NewVecDense(n, column))
	}
}

// spread is the standard deviation of the headwind at a target, m/s.
func (f *field) spread(i int) float64 { return math.Sqrt(max(f.c.At(i, i), 0)) }

// mean is its root mean square over all targets, m/s.
func (f *field) mean() float64 {
	sum := 0.0
	for i := range f.targets {
		sum += max(f.c.At(i, i), 0)
	}
	return math.Sqrt(sum / float64(f.targets))
}

// factor is the Cholesky factor of the targets' covariance to within the
// resolution.
func (f *field) factor() (*mat.Cholesky, error) {
	k := mat.NewSymDense(f.targets, nil)
	for i := range f.targets {
		for j := i; j < f.targets; j++ {
			k.SetSym(i, j, f.c.At(i, j))
		}
		k.SetSym(i, i, f.c.At(i, i)+resolution*resolution)
	}
	var chol mat.Cholesky
	if !chol.Factorize(k) {
		return nil, fmt.Errorf("the covariance of the headwind along the paths cannot be factorised")
	}
	return &chol, nil
}

// bits is how much more is known of the headwind here than in a field that
// watches less: half the difference of the log determinants.
func (f *field) bits(less *field) (float64, error) {
	a, err := f.factor()
	if err != nil {
		return 0, err
	}
	b, err := less.factor()
	if err != nil {
		return 0, err
	}
	return (b.LogDet() - a.LogDet()) / (2 * math.Ln2), nil
}

// gains is what a mast at each of the sites from first on would add, in bits:
// with B the covariance of the targets and the site and S that of the site's
// means, log det (A - B S^-1 B') = log det A + log det (I - S^-1 B' A^-1 B).
func (f *field) gains(first int) ([]float64, error) {
	a, err := f.factor()
	if err != nil {
		return nil, err
	}
	out := make([]float64, f.sites-first)
	b := mat.NewDense(f.targets, 2, nil)
	var x mat.Dense
	for k := range out {
		s := f.at(first + k)
		for i := range f.targets {
			b.Set(i, 0, f.c.At(i, s))
			b.Set(i, 1, f.c.At(i, s+1))
		}
		if err := a.SolveTo(&x, b); err != nil {
			return nil, fmt.Errorf("the gain of a site: %w", err)
		}
		q := [3]float64{dotColumns(b, &x, 0, 0), dotColumns(b, &x, 0, 1), dotColumns(b, &x, 1, 1)}
		ss := [3]float64{f.c.At(s, s) + f.noise, f.c.At(s, s+1), f.c.At(s+1, s+1) + f.noise}
		left := (ss[0]-q[0])*(ss[2]-q[2]) - (ss[1]-q[1])*(ss[1]-q[1])
		out[k] = -math.Log(left/(ss[0]*ss[2]-ss[1]*ss[1])) / (2 * math.Ln2)
	}
	return out, nil
}

func dotColumns(a, b *mat.Dense, i, j int) float64 {
	ra, rb := a.RawMatrix(), b.RawMatrix()
	return blas64.Dot(blas64.Vector{N: ra.Rows, Inc: ra.Stride, Data: ra.Data[i:]},
		blas64.Vector{N: rb.Rows, Inc: rb.Stride, Data: rb.Data[j:]})
}

// planning is what the design of a network rests on.
type planning struct {
	network *Network
	grounds []*ground
	targets []target
	counts  []int // of each ground, how many of its points are targets
	fields  []windfield.Field
	mean    float64
	noise   float64
}

func newPlanning(n *Network) *planning {
	p := &planning{network: n, grounds: grounds(n), fields: n.Settings.Prior.Planning(), mean: n.Settings.Prior.MeanDeviation}
	for _, g := range p.grounds {
		count := 0
		east, north := g.p.Direction()
		for _, b := range g.before {
			if !g.low(b) {
				continue
			}
			x, y := g.p.At(b)
			p.targets = append(p.targets, target{x, y, east, north})
			count++
		}
		p.counts = append(p.counts, count)
	}
	air := averages.Expected(planningWind)
	instrument := n.Settings.Prior.Instrument
	p.noise = air.MeanVariance(n.Settings.Window.Seconds()) + instrument*instrument
	return p
}

// low tells whether a point lies on or near enough to the runway.
func (g *ground) low(before float64) bool {
	return before <= flownHigh && before >= -g.p.RunwayLength()-flownHigh
}

// knots of a standard deviation, as it is reported.
func spreadKnots(ms float64) float64 { return round(quantity.Knots(ms), 100) }
