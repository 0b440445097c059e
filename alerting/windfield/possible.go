package windfield

import "math"

// Outflow is one outflow as a draw or a part of the mixture has it.
type Outflow struct {
	X, Y     float64 // centre, m
	Radius   float64 // of the greatest wind along its strong axis, m
	Strength float64 // greatest wind today, m/s
	Spread   float64 // standard deviation of the strength before it is held positive; 0 in a draw
	Weight   float64 // posterior probability
	Twin     int     // -1: the first of two at once, 1: the second, which follows it; 0: alone

	form template
}

// Wind of the outflow at a place, m/s.
func (o *Outflow) Wind(x, y float64) (east, north float64) {
	east, north = o.form.wind(x, y)
	return float64(o.Strength * east), float64(o.Strength * north)
}

// Moved is the outflow with its centre elsewhere (by dx, dy, m) and another
// strength.
func (o *Outflow) Moved(dx, dy, strength float64) Outflow {
	m := *o
	m.X, m.Y, m.Strength = o.X+dx, o.Y+dy, strength
	m.form.x, m.form.y = m.X, m.Y
	return m
}

// Divergence of the outflow's wind at its centre, 1/s: twice the slope of the
// radial wind there, the mean of both axes.
func (o *Outflow) Divergence() float64 {
	const near = 1e-4
	slope := o.Strength * outflowShape(o.form.shape, near) / near / o.Radius
	if o.form.stretch > 1 {
		return slope * 2 // the linear map keeps the divergence
	}
	return 2 * slope
}

func (t template) outflow(strength, weight float64) Outflow {
	return Outflow{X: t.x, Y: t.y, Radius: t.radius, Strength: strength, Weight: weight, form: t}
}

// outflowsOf is the outflow of a part, or the two of a pair, with a strength;
// the second is nothing where there is but one.
func (e *Estimator) outflowsOf(pt part, strength, spread float64) (first, second Outflow) {
	if pt.class != derivedClass {
		first = e.outflows.templates[pt.pattern].outflow(strength, pt.weight)
		first.Spread = spread
		return first, Outflow{}
	}
	d := &e.derived[pt.pattern]
	first = d.form.outflow(strength, pt.weight)
	first.Spread = spread
	if d.ratio > 0 {
		second = d.twin.outflow(strength*d.ratio, pt.weight)
		first.Twin, second.Twin, second.Spread = -1, 1, spread*d.ratio
	}
	return first, second
}

// doubtful: below this share nobody asks where the outflow would be.
const doubtful = 0.3

// listOutflows fills the posterior's list of possible outflows from the parts.
func (e *Estimator) listOutflows() {
	p := &e.posterior
	p.Outflows = p.Outflows[:0]
	if p.OutflowShare < doubtful {
		return
	}
	for i := range len(e.parts) + len(e.children) {
		pt := e.possible(i)
		if kindOf(pt.class) != OutflowPattern || pt.weight < negligible {
			continue
		}
		spread := 1 / (pt.sharpness * math.Sqrt2)
		first, second := e.outflowsOf(pt, positiveMean(pt.now, spread), spread)
		p.Outflows = append(p.Outflows, first)
		if second.Twin != 0 {
			p.Outflows = append(p.Outflows, second)
		}
	}
}

// possible is part i of the mixture and the children beside it.
func (e *Estimator) possible(i int) part {
	if i < len(e.parts) {
		return e.parts[i]
	}
	return e.children[i-len(e.parts)]
}

// positiveMean is the mean of N(mean, sd) held above 0.
func positiveMean(mean, sd float64) float64 {
	z := mean / sd
	above := math.Erfc(-z/math.Sqrt2) / 2
	if above < 1e-9 {
		return 0
	}
	density := math.Exp(-float64(z*z)/2) / math.Sqrt(2*math.Pi)
	return math.Max(mean+float64(sd*density)/above, 0)
}

// Scores are three standard normal scores of draw d, in orders that have
// nothing to do with each other: for what is drawn beside the field.
func Scores(d int) (z [3]float64) {
	for k, step := range [...]int{53, 75, 91} { // odd, so each order holds every draw once
		u := float64((float64(reverseBits((step*d+29*k)%Draws)) + 0.5) / Draws)
		z[k] = math.Sqrt2 * math.Erfinv(float64(2*u)-1)
	}
	return z
}
