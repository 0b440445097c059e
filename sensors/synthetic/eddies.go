package synthetic

import (
	"math"
	"math/rand/v2"

	"sockline/sensors/quantity"
)

// Eddies are the boundary layer's own motions: a two-component random wind
// that neighbouring masts feel together and that looks like a small outflow.
// By day its standard deviation is about 0.6 w* (Panofsky et al. 1977, J. Appl.
// Meteor. 16, 1195; from memory), up to 1.5 m/s.
type Eddies struct {
	Deviation float64 // standard deviation of each component, m/s
	Length    float64 // L, m: 500 to 2000
	Time      float64 // T, s: 120 to 600
}

// eddyModes is the number of waves of each of the two parts. With 40 each, the
// correlation of one realisation scatters by about 0.1 about its closed form.
const eddyModes = 40

// eddyWave is one plane wave of the field.
type eddyWave struct {
	kx, ky float64 // wave vector, 1/m
	omega  float64 // own frequency, 1/s
	phase  float64
	u, v   float64 // amplitude, m/s
}

// eddyField is a sum of plane waves of a potential and a stream function, both
// with squared-exponential covariance of length L, sharing the variance
// equally, and dying in time as exp(-tau^2/2T^2), carried along by a constant
// wind. The covariance of either component, along or across the separation r:
//
//	s^2 (1 - r^2/(2 L^2)) exp(-r^2/(2 L^2)) exp(-tau^2/(2 T^2))
//
// where r is counted in the frame that moves with the wind. The two kinds of
// covariance, (1 - r^2/L^2) e and e, are those of Daley, "Atmospheric Data
// Analysis", 1991, ch. 5 (from memory); their mean is the expression above.
type eddyField struct {
	waves              []eddyWave
	carriedU, carriedV float64
}

// newEddyField draws the waves.
//
// The wind's spectrum of a squared-exponential potential is |k|^2
// exp(-k^2 L^2/2), so |k| L has density rho^3 exp(-rho^2/2)/2 and all waves
// have one amplitude. |k| and the direction are drawn in strata, so that each
// realisation has very nearly the variance asked for, in both components.
func newEddyField(e Eddies, carriedU, carriedV float64, rng *rand.Rand) *eddyField {
	f := &eddyField{carriedU: carriedU, carriedV: carriedV}
	if e.Deviation <= 0 {
		return f
	}
	amplitude := 2 * e.Deviation / math.Sqrt(2*eddyModes)
	for part := range 2 {
		order := rng.Perm(eddyModes)
		for i := range eddyModes {
			angle := math.Pi * 2 * (float64(i) + rng.Float64()) / eddyModes
			k := eddyRadius((float64(order[i])+rng.Float64())/eddyModes) / e.Length
			sin, cos := math.Sincos(angle)
			w := eddyWave{
				kx: k * cos, ky: k * sin,
				omega: rng.NormFloat64() / e.Time,
				phase: rng.Float64() * 2 * math.Pi,
			}
			if part == 0 { // potential: the wind blows along the wave vector
				w.u, w.v = amplitude*cos, amplitude*sin
			} else { // stream function: across it
				w.u, w.v = -amplitude*sin, amplitude*cos
			}
			f.waves = append(f.waves, w)
		}
	}
	return f
}

// Covariance is that of one component at two places dx, dy metres apart, tau
// seconds apart, in m2/s2: the closed form of eddyField. The places are counted
// in the frame that moves with the wind.
func (e Eddies) Covariance(dx, dy, tau float64) float64 {
	if e.Deviation <= 0 {
		return 0
	}
	h := (dx*dx + dy*dy) / (2 * e.Length * e.Length)
	return e.Deviation * e.Deviation * (1 - h) * math.Exp(-h-tau*tau/(2*e.Time*e.Time))
}

// eddyRadius inverts the distribution 1 - (1 + h) exp(-h), h = rho^2/2, of the
// relative wave number by bisection.
func eddyRadius(p float64) float64 {
	low, high := 0.0, 60.0
	for range 60 {
		h := (low + high) / 2
		if 1-(1+h)*math.Exp(-h) < p {
			low = h
		} else {
			high = h
		}
	}
	return math.Sqrt(low + high)
}

// wind is the eddies' wind at x, y (m) and t (s).
func (f *eddyField) wind(x, y, t float64) (u, v float64) {
	x -= f.carriedU * t
	y -= f.carriedV * t
	for i := range f.waves {
		w := &f.waves[i]
		c := math.Cos(w.kx*x + w.ky*y + w.omega*t + w.phase)
		u += w.u * c
		v += w.v * c
	}
	return u, v
}

// addAlong adds the eddies' wind at points on a straight line. From one point
// to the next the phase of a wave grows by a constant, so that its cosine
// follows by one rotation (the addition theorem) in place of a call.
func (f *eddyField) addAlong(dst []quantity.Vector, x, y, dx, dy, t float64) {
	x -= f.carriedU * t
	y -= f.carriedV * t
	for i := range f.waves {
		w := &f.waves[i]
		sin, cos := math.Sincos(w.kx*x + w.ky*y + w.omega*t + w.phase)
		stepSin, stepCos := math.Sincos(w.kx*dx + w.ky*dy)
		for j := range dst {
			dst[j].East += w.u * cos
			dst[j].North += w.v * cos
			cos, sin = cos*stepCos-sin*stepSin, sin*stepCos+cos*stepSin
		}
	}
}
