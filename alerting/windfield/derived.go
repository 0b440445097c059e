package windfield

import (
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
)

// The bank holds round outflows of moderate size, one at a time. Real ones are
// up to twice as strong along one axis (Wilson et al. 1984), some are larger,
// and some come in lines (M.R. Hjelmfelt, "Structure and life cycle of
// microburst outflows observed in Colorado", J. Appl. Meteor. 27, 1988). A bank
// of all of those would be ten times as large and nearly always idle. So when a
// step holds an outflow possible, the likeliest templates of the bank are taken
// as parents of further ones: stretched along four axes, enlarged, and joined
// by a second outflow elsewhere. They tell better where an outflow is, how large
// it is and whether there are two. They stay out of the mixture that the headwind
// is drawn from: in drawn episodes they made no loss found sooner or oftener, and
// twice as many false openings beside gust fronts.

const (
	parents = 3
	axes    = 4
	// stretchOf is the middle of the published range of 1 to 2, a little up:
	// what is nearly round the round ones explain.
	stretchOf = 1.6
	// enlarge makes the greatest radius of the bank an outflow of 4.5 km from
	// peak to peak: the published bound of a microburst is 4 km.
	enlarge  = 1.6
	partners = 2
	// How likely the children of a place are, as shares of its round outflows: one
	// in four is stretched enough to matter (a mild stretch passes for a disturbed
	// field over a round outflow), and one in sixteen has a second beside it. The
	// ratio of a pair is fitted, not averaged over, and pays for that with one half.
	axisShare  = 0.25 / axes
	largeShare = 0.12
	pairShare  = 0.06 * 0.5
	// A partner lies farther away than one radius of the other, and near
	// enough to be of the same storm, m.
	nearestPartner  = 1200
	farthestPartner = 6500
	// leastRatio is the least share of the stronger's strength the weaker has,
	// and leastTwin (m/s) the least strength that counts as a second outflow.
	leastRatio = 0.25
	leastTwin  = 1.5
	// worthDeriving is the share of outflows from which children are tried.
	worthDeriving = 0.3
	mostDerived   = parents*(axes+1) + partners
)

// derived is an outflow made for the step at hand, on one state of the air.
type derived struct {
	form, twin template
	ratio      float64   // strength of the twin over that of form; 0: there is none
	unit       []float64 // unit wind at the live masts: [live][east, north]
	precision  [6]float64
	b          [dims]float64
}

// newDerived sizes the scratch of the children once.
func (e *Estimator) newDerived() {
	states := len(e.prior.Disturbed)
	e.derived = make([]derived, states*mostDerived)
	for i := range e.derived {
		e.derived[i] = derived{unit: make([]float64, 2*len(e.masts))}
	}
	e.derived = e.derived[:0]
	e.children = make([]part, 0, states*mostDerived)
}

// derive appends the children of the likeliest templates, best, on state k. b of the outflows is that of k, w is K^-1 y.
func (e *Estimator) derive(en *entry, k int, best [parents]int, share, top float64) {
	s := en.states[k]
	scale := math.Log(share/float64(e.outflows.count())) + (e.stateLog[k] - top)
	largest := e.prior.OutflowRadii[len(e.prior.OutflowRadii)-1]
	for _, j := range best {
		if j < 0 {
			break
		}
		parent := e.outflows.templates[j]
		scale := scale + e.trail.odds[j]
		for a := range axes {
			// None is narrower than the narrowest of the bank: a single mast could
			// hold it.
			if parent.radius < stretchOf*e.prior.OutflowRadii[0] {
				break
			}
			t := parent
			t.stretch = stretchOf
			t.north, t.east = math.Cos(math.Pi*float64(a)/axes), math.Sin(math.Pi*float64(a)/axes)
			e.child(en, s, k, t, template{}, 0, scale+math.Log(axisShare))
		}
		if parent.radius == largest {
			t := parent
			t.radius *= enlarge
			e.child(en, s, k, t, template{}, 0, scale+math.Log(largeShare))
		}
	}
	if best[0] >= 0 {
		for _, m := range e.partnersOf(en, k, best[0]) {
			if m.j < 0 {
				break
			}
			first, second := e.outflows.templates[best[0]], e.outflows.templates[m.j]
			ratio := m.ratio
			if ratio > 1 { // the prior of the strength is that of the stronger
				first, second, ratio = second, first, 1/ratio
			}
			e.child(en, s, k, first, second, ratio, scale+e.trail.odds[best[0]]+math.Log(pairShare/float64(e.outflows.count())))
		}
	}
}

// likeliest are the templates with the greatest evidence, best first, -1 where
// there are fewer. Ties go to the first.
func (e *Estimator) likeliest() (best [parents]int) {
	for i := range best {
		best[i] = -1
	}
	for j, l := range e.evidence[:e.outflows.count()] {
		for i := range best {
			if best[i] < 0 || l > e.evidence[best[i]] {
				copy(best[i+1:], best[i:parents-1])
				best[i] = j
				break
			}
		}
	}
	return best
}

// child adds one outflow beside the mixture.
func (e *Estimator) child(en *entry, s *state, k int, form, twin template, ratio, scale float64) {
	n := len(e.derived)
	e.derived = e.derived[:n+1]
	d := &e.derived[n]
	d.form, d.twin, d.ratio = form, twin, ratio
	width := 2 * len(en.live)
	d.unit = d.unit[:width]
	for i, m := range en.live {
		d.unit[2*i], d.unit[2*i+1] = d.wind(e.masts[m].X, e.masts[m].Y)
	}
	var m [6]float64
	row := e.column[:width]
	at := 0
	for r := range blocks {
		d.b[r] = blas64.Dot(vec(d.unit), vec(e.w[r*width:(r+1)*width]))
		for c := r; c < blocks; c++ {
			sub := blas64.General{Rows: width, Cols: width, Stride: en.n, Data: s.inverse[r*width*en.n+c*width:]}
			blas64.Gemv(blas.NoTrans, 1, sub, vec(d.unit), 0, vec(row))
			m[at] = blas64.Dot(vec(row), vec(d.unit))
			at++
		}
	}
	inv, logDetC := invert3(e.outflows.c)
	var sum [6]float64
	for i := range sum {
		sum[i] = inv[i] + m[i]
	}
	var logDet float64
	d.precision, logDet = invert3(sum)
	mean, today := mul3(d.precision, d.b), mul3(d.precision, e.outflows.q)
	evidence, now, v := 0.0, 0.0, e.outflows.rest
	for i := range dims {
		evidence += float64(float64(d.b[i]*mean[i]) / 2)
		now += float64(e.outflows.q[i] * mean[i])
		v += float64(e.outflows.q[i] * today[i])
	}
	sharpness := 1 / math.Sqrt(2*v)
	weight := math.Exp(evidence-float64((logDet+logDetC)/2)+scale) * math.Erfc(-now*sharpness)
	e.children = append(e.children, part{state: int16(k), class: derivedClass, pattern: int32(n), weight: weight, now: now, sharpness: sharpness})
}

// wind of unit strength at a place.
func (d *derived) wind(x, y float64) (east, north float64) {
	east, north = d.form.wind(x, y)
	if d.ratio > 0 {
		e, n := d.twin.wind(x, y)
		east += float64(d.ratio * e)
		north += float64(d.ratio * n)
	}
	return east, north
}
