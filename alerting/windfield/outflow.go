package windfield

import (
	"math"
)

// outflowBank is every outflow that is tried: centres on a square grid around
// the masts, each with a few radii and both radial shapes. The strengths A are
// those of the blocks, C_bc = s2 exp(-|age_b - age_c| / OutflowTime): an
// outflow grows and fades within minutes.
type outflowBank struct {
	templates []template
	masts     int
	targets   int
	atMast    []float64 // [template][mast][east, north]: unit wind at each mast
	atTarget  []float64 // [template][target]: unit headwind at each target
	c         [6]float64
	q         [dims]float64
	rest      float64
}

func newOutflowBank(masts []Mast, targets []Target, ages [blocks]float64, p Prior) *outflowBank {
	b := &outflowBank{masts: len(masts), targets: len(targets)}
	b.templates = outflowTemplates(masts, p)
	b.atMast = make([]float64, len(b.templates)*2*len(masts))
	b.atTarget = make([]float64, len(b.templates)*len(targets))
	for j, t := range b.templates {
		for i, s := range masts {
			east, north := t.wind(s.X, s.Y)
			b.atMast[(j*len(masts)+i)*2] = east
			b.atMast[(j*len(masts)+i)*2+1] = north
		}
		for i, g := range targets {
			east, north := t.wind(g.X, g.Y)
			b.atTarget[j*len(targets)+i] = g.Headwind(east, north)
		}
	}
	b.c, b.q, b.rest = strengthPrior(p.OutflowStrength, p.OutflowTime, ages)
	return b
}

// strengthPrior is C of the blocks' strengths, today's regression q on them,
// and what they leave open of today's variance.
func strengthPrior(scale, time float64, ages [blocks]float64) (c [6]float64, q [dims]float64, rest float64) {
	s2 := float64(scale * scale)
	cov := func(dt float64) float64 { return s2 * math.Exp(-math.Abs(dt)/time) }
	k := 0
	var toNow [dims]float64
	for b := range blocks {
		toNow[b] = cov(ages[b])
		for d := b; d < blocks; d++ {
			c[k] = cov(ages[b] - ages[d])
			k++
		}
	}
	inv, _ := invert3(c)
	q = mul3(inv, toNow)
	rest = s2
	for b := range blocks {
		rest -= float64(q[b] * toNow[b])
	}
	return c, q, rest
}

func outflowTemplates(masts []Mast, p Prior) []template {
	var list []template
	minX, minY, maxX, maxY := bounds(masts)
	m := p.OutflowMargin
	// The grid is anchored on whole multiples of the spacing, so that adding a
	// mast adds centres and moves none.
	first := func(v float64) float64 { return math.Ceil((v-m)/p.OutflowSpacing) * p.OutflowSpacing }
	for y := first(minY); y <= maxY+m; y += p.OutflowSpacing {
		for x := first(minX); x <= maxX+m; x += p.OutflowSpacing {
			if !near(masts, x, y, m) {
				continue
			}
			for _, radius := range p.OutflowRadii {
				for _, s := range []shape{broad, compact} {
					list = append(list, template{x: x, y: y, radius: radius, shape: s})
				}
			}
		}
	}
	return list
}

func bounds(masts []Mast) (minX, minY, maxX, maxY float64) {
	minX, minY = math.Inf(1), math.Inf(1)
	maxX, maxY = math.Inf(-1), math.Inf(-1)
	for _, s := range masts {
		minX, maxX = math.Min(minX, s.X), math.Max(maxX, s.X)
		minY, maxY = math.Min(minY, s.Y), math.Max(maxY, s.Y)
	}
	return minX, minY, maxX, maxY
}

func near(masts []Mast, x, y, reach float64) bool {
	for _, s := range masts {
		if math.Hypot(x-s.X, y-s.Y) <= reach {
			return true
		}
	}
	return false
}

// atLive is the unit winds at the live masts only: [template][live][2].
func (b *outflowBank) atLive(live []int) []float64 {
	nl := len(live)
	out := make([]float64, len(b.templates)*2*nl)
	for j := range b.templates {
		for i, m := range live {
			src, dst := (j*b.masts+m)*2, (j*nl+i)*2
			out[dst], out[dst+1] = b.atMast[src], b.atMast[src+1]
		}
	}
	return out
}

func (b *outflowBank) count() int { return len(b.templates) }

func (b *outflowBank) prior(int) ([6]float64, [dims]float64, float64) { return b.c, b.q, b.rest }

// project: the wind of each strength stands in its own block only.
func (b *outflowBank) project(en *entry, w, out []float64) {
	n, width := len(b.templates), 2*len(en.live)
	columnsOf(out, n, en.outflowColumns, w[:blocks*width], n, blocks)
}

func (b *outflowBank) gram(en *entry, s *state, m []float64) {
	n, width := len(b.templates), 2*len(en.live)
	const pairs = 6 // of blocks
	times, sums, weights := make([]float64, pairs*n), make([]float64, pairs*n), make([]float64, pairs*width)
	for i := range width {
		k := 0
		for r := range blocks {
			for c := r; c < blocks; c++ {
				copy(weights[k*width:(k+1)*width], s.inverse[(c*width+i)*en.n+r*width:])
				k++
			}
		}
		columnsOf(times, n, en.outflowColumns, weights, n, pairs)
		for k := range pairs {
			addProducts(sums[k*n:(k+1)*n], times[k*n:(k+1)*n], en.outflowColumns[i*n:(i+1)*n])
		}
	}
	for k := range pairs {
		for j, v := range sums[k*n : (k+1)*n] {
			m[j*6+k] = v
		}
	}
}

func (b *outflowBank) column(en *entry, j, d int, dst []float64) {
	w := 2 * len(en.live)
	clear(dst)
	copy(dst[d*w:(d+1)*w], en.outflows[j*w:(j+1)*w])
}

func (b *outflowBank) now(j, d int, dst []float64) {
	for t, v := range b.atTarget[j*b.targets : (j+1)*b.targets] {
		dst[t] = float64(b.q[d] * v)
	}
}

func (b *outflowBank) innovation(j int, dst []float64) {
	copy(dst, b.atTarget[j*b.targets:(j+1)*b.targets])
}
