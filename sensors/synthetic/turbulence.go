package synthetic

import (
	"math"
	"math/rand/v2"
)

// Turbulence of the surface layer after IEC 61400-1 edition 3, 6.3 and annex B
// (from memory): classes by their reference intensity.
const (
	TurbulenceNone = 0.0
	TurbulenceA    = 0.16
	TurbulenceB    = 0.14
	TurbulenceC    = 0.12
)

// turbulenceSigma is sigma1 = Iref (0.75 V + 5.6), m/s, for the wind V (m/s).
func turbulenceSigma(intensity, speed float64) float64 {
	return intensity * (0.75*speed + 5.6)
}

// turbulenceTime is the integral time T = L1/V, s, of the wind V (m/s) at
// height z (m): L1 = 8.1 Lambda1, Lambda1 = 0.7 z up to 60 m, then 42 m. Below
// 1 m/s it stays at that of 1 m/s.
func turbulenceTime(z, speed float64) float64 {
	return 8.1 * 0.7 * min(z, 60) / max(speed, 1)
}

// acrossShare is sigma2/sigma1 of the same standard.
const acrossShare = 0.8

// turbulence is the surface-layer turbulence of one mast: an autoregressive
// process of first order along and another across the wind. Between masts more
// than 100 m apart this part is uncorrelated (coherence 0.08 at 100 m, below
// 1e-5 at 500 m for 0.001 Hz by the standard's own model), hence one
// independent process per mast. The integral time of the along-wind part
// serves both: the standard's shorter one across would be the kinder choice.
type turbulence struct {
	along, across float64 // of unit variance
	started       bool
	rng           *rand.Rand
}

// next moves the process by dt seconds at height z in the wind (u, v), and
// gives the turbulent wind, m/s.
func (t *turbulence) next(intensity, z, dt, u, v float64) (du, dv float64) {
	if intensity <= 0 {
		return 0, 0
	}
	speed := math.Hypot(u, v)
	if !t.started {
		t.along, t.across, t.started = t.rng.NormFloat64(), t.rng.NormFloat64(), true
	} else {
		rho := math.Exp(-dt / turbulenceTime(z, speed))
		fresh := math.Sqrt(1 - rho*rho)
		t.along = rho*t.along + fresh*t.rng.NormFloat64()
		t.across = rho*t.across + fresh*t.rng.NormFloat64()
	}
	sigma := turbulenceSigma(intensity, speed)
	along, across := sigma*t.along, acrossShare*sigma*t.across
	eastward, northward := 1.0, 0.0
	if speed > 0 {
		eastward, northward = u/speed, v/speed
	}
	return along*eastward - across*northward, along*northward + across*eastward
}
