package windfield

import "math"

// covariance is the prior covariance of two wind vectors of one ambient
// field: the sum of an irrotational and a non-divergent part with
// squared-exponential potentials of one length,
//
//	K_irr = S e [[1-dx2/L2, -dxdy/L2], [-dxdy/L2, 1-dy2/L2]]
//	K_nd  = S e [[1-dy2/L2,  dxdy/L2], [ dxdy/L2, 1-dx2/L2]]
//
// with e = exp(-r2/(2 L2)) and S the variance of one component of the part
// (M. Scheuerer, M. Schlather, "Covariance models for divergence-free and
// curl-free random vector fields", Stochastic Models 28(3), 2012; the
// squared-exponential case written out in R. Berlinghieri et al., "Gaussian
// processes at the Helm(holtz)", ICML 2023).
//
// dx, dy in m; the result in m2/s2: east-east, east-north, north-north.
func covariance(f Field, dx, dy float64) (ee, en, nn float64) {
	l2 := float64(f.Length * f.Length)
	e := math.Exp(-(float64(dx*dx) + float64(dy*dy)) / (2 * l2))
	s := float64(f.Deviation * f.Deviation)
	irr := float64(s * f.Irrotational * e)
	nd := float64(s * (1 - f.Irrotational) * e)
	xx := float64(dx*dx) / l2
	yy := float64(dy*dy) / l2
	xy := float64(dx*dy) / l2
	ee = float64(irr*(1-xx)) + float64(nd*(1-yy))
	nn = float64(irr*(1-yy)) + float64(nd*(1-xx))
	en = float64((nd - irr) * xy)
	return ee, en, nn
}

// Field is one ambient state of the air: a random wind field around the common
// mean.
type Field struct {
	Deviation    float64 // standard deviation of one component, m/s
	Length       float64 // of the squared-exponential potentials, m
	Irrotational float64 // share of the variance that has a potential, 0 to 1
	Time         float64 // how long a mast sees the same air: correlation exp(-dt/Time), s
}

// outflowShape is the radial wind of an outflow at mast height, as a fraction
// of its greatest, at q = r / (radius of the greatest wind).
//
// broad: R.M. Oseguera, R.L. Bowles, "A simple, analytic 3-dimensional downburst
// model based on boundary layer stagnation flow", NASA TM-100632, 1988 (from
// memory): u ~ (1 - exp(-(r/R)^2)) / r with R = radius / 1.1209.
// compact: D.D. Vicroy, "A simple, analytical, axisymmetric microburst model for
// downdraft estimation", NASA TM-104053, 1991 (from memory), shape a = 2:
// u ~ r exp((2 - (r/rm)^4)/4), here normalised to 1 at rm.
func outflowShape(shape shape, q float64) float64 {
	if q < 1e-9 {
		return 0
	}
	if shape == broad {
		const peak = 1.120906                             // rm / R, root of exp(q2) = 1 + 2 q2
		top := (1 - math.Exp(-float64(peak*peak))) / peak // greatest of (1-exp(-x2))/x
		x := q * peak
		return (1 - math.Exp(-float64(x*x))) / x / top
	}
	q2 := float64(q * q)
	return q * math.Exp((1-float64(q2*q2))/4)
}

type shape uint8

const (
	broad shape = iota
	compact
)

// template is one outflow of unit strength: its wind at a place is wind.
type template struct {
	x, y   float64 // centre, m
	radius float64 // of the greatest wind, m
	shape  shape
	// stretch above 1 makes it an ellipse: across its strong axis, a unit vector,
	// both radius and strength are smaller by it. The map is linear, so that
	// divergence stays one.
	stretch     float64
	east, north float64
}

// wind of the template at a place, for a greatest wind of 1 m/s.
func (t template) wind(x, y float64) (east, north float64) {
	dx, dy := x-t.x, y-t.y
	if t.stretch > 1 {
		return t.stretched(dx, dy)
	}
	r := math.Hypot(dx, dy)
	if r < 1e-6 {
		return 0, 0
	}
	g := outflowShape(t.shape, r/t.radius) / r
	return g * dx, g * dy
}

// stretched is the wind of an ellipse: in its axes, with the shorter one
// stretched, it is round.
func (t template) stretched(dx, dy float64) (east, north float64) {
	along := float64(dx*t.east) + float64(dy*t.north)
	across := (float64(dx*t.north) - float64(dy*t.east)) * t.stretch
	r := math.Hypot(along, across)
	if r < 1e-6 {
		return 0, 0
	}
	g := outflowShape(t.shape, r/t.radius) / r
	along *= g
	across *= g / t.stretch
	return float64(along*t.east) + float64(across*t.north), float64(along*t.north) - float64(across*t.east)
}
