package windfield

import (
	"gonum.org/v1/gonum/blas/blas64"
)

// draw fills the posterior: each draw takes the part that its place in the
// cumulative weights falls on, that part's mean, and a stored draw of its
// error.
func (e *Estimator) draw(en *entry) {
	nt := len(e.targets)
	p := &e.posterior
	clear(p.Mean)
	cum, i := e.parts[0].weight, 0
	current, solved := -1, int16(-1)
	var st strength
	var below float64 // how likely the strength is below zero; -1: not yet asked
	for d := range Draws {
		u := (float64(d) + 0.5) / Draws
		for u > cum && i < len(e.parts)-1 {
			i++
			cum += e.parts[i].weight
		}
		pt := e.parts[i]
		s := en.states[pt.state]
		if i != current {
			if solved != pt.state {
				solved = pt.state
				e.addGain(en, s)
				e.use(s)
				columns(e.plain, s.gain, e.y)
			}
			st = e.shape(en, s, pt)
			below = -1
			current = i
		}
		row := p.Draws[d*nt : (d+1)*nt]
		z := e.draws(s)[e.order[d]*nt : (e.order[d]+1)*nt]
		excess := 0.0
		switch {
		case pt.class < 0 || pt.class == faultClass: // nothing depends on the strength
		case st.now > certain*st.spread: // positive without being held so
			excess = st.spread * e.scores[d]
		default:
			if below < 0 {
				below = belowZero(st.now, st.spread)
			}
			excess = positiveNormal(st.now, st.spread, below, e.levels[d]) - st.now
		}
		p.Kinds[d] = kindOf(pt.class)
		p.Over[d] = Outflow{}
		if p.Kinds[d] == OutflowPattern {
			p.Over[d] = e.outflows.templates[pt.pattern].outflow(st.now+excess, pt.weight)
		}
		drawn(row, p.Mean, e.base, e.slope, z, excess)
	}
	for t := range p.Mean {
		p.Mean[t] /= Draws
	}
}

// certain: a strength so many deviations above zero is positive in all but one
// of 30,000 cases.
const certain = 4

// shape fills base (posterior mean headwind) and slope (what one more m/s of
// the pattern's strength adds) for a part, and gives that strength. w and plain
// are those of the part's state.
func (e *Estimator) shape(en *entry, s *state, pt part) strength {
	nt := len(e.targets)
	if pt.class < 0 {
		copy(e.base, e.plain)
		clear(e.slope)
		return strength{}
	}
	var b [dims]float64
	for d := range dims {
		e.classes[pt.class].column(en, int(pt.pattern), d, e.column[:en.n])
		b[d] = blas64.Dot(vec(e.column[:en.n]), vec(e.w))
	}
	st := e.strengthOf(s, int(pt.class), int(pt.pattern), b)
	if pt.class == faultClass {
		if struck, ok := e.strokeError(en, int(pt.pattern)); ok {
			m := e.anyError().information(s.patterns[faultClass], int(pt.pattern))
			mean, _ := struck.posterior(m, [2]float64{b[0], b[1]})
			st.mean = [dims]float64{mean[0], mean[1], 0}
		}
	}
	line := e.line(en, s, int(pt.class), int(pt.pattern))
	l0, l1, l2, innovation := line[:nt], line[nt:2*nt], line[2*nt:3*nt], line[3*nt:4*nt]
	base, slope, plain := e.base[:nt], e.slope[:nt], e.plain[:nt]
	for t, u := range innovation {
		base[t] = plain[t] + float64(st.mean[0]*l0[t]) + float64(st.mean[1]*l1[t]) + float64(st.mean[2]*l2[t])
		slope[t] = float64(st.open*u) + float64(st.share[0]*l0[t]) + float64(st.share[1]*l1[t]) + float64(st.share[2]*l2[t])
	}
	return st
}
