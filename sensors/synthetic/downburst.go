package synthetic

import "math"

// Constants of the published downburst profiles. They follow from the models'
// own formulas; the digits were computed as roots of those formulas.
const (
	// obPeakSquare is q = (rm/R)^2 at the greatest outflow of the model of
	// Oseguera and Bowles: the root of exp(q) = 1 + 2q.
	obPeakSquare = 1.2564312086261697
	// obPeakHeight is zm/z* = ln(12.5) * 0.08/0.92, with eps = 0.08 z*.
	obPeakHeight = 0.21962857776593528
	// obPeakSpeed is um/(lambda R) at that radius and height.
	obPeakSpeed = 0.23567448397046759
	// obLayer is eps/z*, the depth of the ground layer over the outflow's.
	obLayer = 0.08

	// Vertical constants of Vicroy's model, from memory.
	vicroyC1 = -0.15
	vicroyC2 = -3.2175
)

// OsegueraBowles is the axisymmetric stagnation-flow downburst of R. M.
// Oseguera and R. L. Bowles, "A Simple, Analytic 3-Dimensional Downburst Model
// Based on Boundary Layer Stagnation Flow", NASA TM-100632, 1988. The formulas
// are from memory; that they conserve mass is tested.
type OsegueraBowles struct {
	Max    float64 // greatest outflow um, m/s, found at 1.1209 Radius and Height
	Radius float64 // of the downdraught shaft R, m
	Height float64 // of the greatest outflow zm, m
}

// Wind gives the wind (m/s, w upward) at x, y metres from the centre and z
// metres above the ground:
//
//	u = (lambda x/2)(R^2/r^2)(1 - exp(-r^2/R^2))(exp(-z/z*) - exp(-z/eps))
//	w = -lambda exp(-r^2/R^2)(eps(exp(-z/eps)-1) - z*(exp(-z/z*)-1))
//
// It holds for z >= 0 and stops being physical above about 2 z*, where w
// tends to a constant.
func (m OsegueraBowles) Wind(x, y, z float64) (u, v, w float64) {
	scale := m.Height / obPeakHeight
	eps := obLayer * scale
	lambda := m.Max / (obPeakSpeed * m.Radius)
	q := (x*x + y*y) / (m.Radius * m.Radius)
	a := lambda / 2 * oneMinusExpOver(q) * (math.Exp(-z/scale) - math.Exp(-z/eps))
	w = -lambda * math.Exp(-q) * (eps*math.Expm1(-z/eps) - scale*math.Expm1(-z/scale))
	return a * x, a * y, w
}

// oneMinusExpOver is (1 - exp(-q))/q, 1 at q = 0.
func oneMinusExpOver(q float64) float64 {
	if q == 0 {
		return 1
	}
	return -math.Expm1(-q) / q
}

// Vicroy is the axisymmetric microburst of D. D. Vicroy, "A Simple,
// Analytical, Axisymmetric Microburst Model for Downdraft Estimation", NASA
// TM-104053, 1991. The formulas are from memory; mass conservation is tested.
// Its wind dies much faster outside the ring than that of OsegueraBowles.
type Vicroy struct {
	Max    float64 // greatest outflow um, m/s, at Radius and Height
	Radius float64 // of the greatest outflow rm, m
	Height float64 // of the greatest outflow zm, m
	Shape  float64 // alpha: 1 broad, 2 usual, 3 and more sharp
}

// Wind gives the wind (m/s, w upward) at x, y metres from the centre and z
// metres above the ground, with T = (r/rm)^(2 alpha):
//
//	u = (lambda x/2)(exp(c1 z/zm) - exp(c2 z/zm)) exp((2 - T)/(2 alpha))
//	w = -lambda (zm/c1 (exp(c1 z/zm)-1) - zm/c2 (exp(c2 z/zm)-1))(1 - T/2) exp((2 - T)/(2 alpha))
func (m Vicroy) Wind(x, y, z float64) (u, v, w float64) {
	t := math.Pow((x*x+y*y)/(m.Radius*m.Radius), m.Shape)
	e := math.Exp((2 - t) / (2 * m.Shape))
	h := z / m.Height
	lambda := 2 * m.Max / (m.Radius * (math.Exp(vicroyC1) - math.Exp(vicroyC2)) * math.Exp(1/(2*m.Shape)))
	a := lambda / 2 * (math.Exp(vicroyC1*h) - math.Exp(vicroyC2*h)) * e
	w = -lambda * m.Height * (math.Expm1(vicroyC1*h)/vicroyC1 - math.Expm1(vicroyC2*h)/vicroyC2) * (1 - t/2) * e
	return a * x, a * y, w
}

// HolmesOliver is the travelling, decaying downburst of J. D. Holmes and S. E.
// Oliver, "An empirical model of a downburst", Engineering Structures 22
// (2000) 1167-1172; the formulas are from memory. It has no height and no
// vertical wind and does not conserve mass.
type HolmesOliver struct {
	Max              float64 // greatest radial wind, m/s, at Radius
	Radius           float64 // m
	Length           float64 // radial length scale beyond Radius, m; about half of Radius
	MotionX, MotionY float64 // translation, m/s; it moves the centre and is part of the wind
	Decay            float64 // time constant after the peak at t = 0, s
}

// Wind gives the wind (m/s) at x, y metres from where the centre was at t = 0,
// t seconds after the peak (t >= 0):
//
//	Vr = Vmax r/rmax                         up to rmax
//	Vr = Vmax exp(-((r - rmax)/Rr)^2)        beyond
//	(u, v) = Vr exp(-t/T) r^ + Vt
func (m HolmesOliver) Wind(x, y, t float64) (u, v float64) {
	x -= m.MotionX * t
	y -= m.MotionY * t
	r := math.Hypot(x, y)
	a := m.Max / m.Radius
	if r > m.Radius {
		d := (r - m.Radius) / m.Length
		a = m.Max * math.Exp(-d*d) / r
	}
	a *= math.Exp(-t / m.Decay)
	return a*x + m.MotionX, a*y + m.MotionY
}

// woodProfile is the height profile U/Um of a wall jet after Wood, Kwok, Motteram
// and Fletcher, "Physical and numerical modelling of thunderstorm downbursts",
// J. Wind Eng. Ind. Aerodyn. 89 (2001) 535-552, from memory:
// 1.55 (z/d)^(1/6)(1 - erf(0.7 z/d)), with d where U falls to half its maximum.
func woodProfile(zOverD float64) float64 {
	return 1.55 * math.Pow(zOverD, 1.0/6) * math.Erfc(0.7*zOverD)
}
