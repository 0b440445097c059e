package synthetic

import (
	"fmt"
	"math"
	"testing"
)

// Expected: IEC 61400-1 class B at 10 m and 10 m/s gives sigma1 = 1.834 m/s
// and T = 56.7/10 = 5.67 s, so a correlation of 0.83831 over one second; the
// share across is 0.8.
func TestTurbulenceStatistics(t *testing.T) {
	near(t, "sigma1", turbulenceSigma(TurbulenceB, 10), 1.834, 1e-9)
	near(t, "T", turbulenceTime(10, 10), 5.67, 1e-9)
	near(t, "T at 0.2 m/s", turbulenceTime(10, 0.2), 56.7, 1e-9)

	const n = 200000
	air := turbulence{rng: stream(3, "test")}
	var along, across, lagged, last float64
	for range n {
		u, v := air.next(TurbulenceB, 10, 1, 6, 8)
		a, c := 0.6*u+0.8*v, 0.6*v-0.8*u
		along += a * a
		across += c * c
		lagged += a * last
		last = a
	}
	// Standard error of a variance of n values with T = 5.67 s: sqrt(2*5.67/n) = 0.8 %.
	near(t, "sd along", math.Sqrt(along/n), 1.834, 0.03)
	near(t, "sd across", math.Sqrt(across/n), 0.8*1.834, 0.025)
	near(t, "correlation over 1 s", lagged/along, 0.83831, 0.01)
}

func TestTurbulenceNone(t *testing.T) {
	air := turbulence{rng: stream(3, "test")}
	if u, v := air.next(TurbulenceNone, 10, 1, 6, 8); u != 0 || v != 0 {
		t.Errorf("without turbulence there is (%g, %g)", u, v)
	}
}

// The covariance of the eddies against the closed form that newEddyField
// states, as a mean over many realisations.
func TestEddyCovariance(t *testing.T) {
	const (
		realisations = 4000
		deviation    = 1.2
		length       = 900.0
		coherence    = 240.0
	)
	lags := []struct{ r, tau float64 }{{0, 0}, {300, 0}, {900, 0}, {1800, 0}, {0, 120}, {0, 400}, {600, 120}}
	along := make([]float64, len(lags))
	across := make([]float64, len(lags))
	mixed := make([]float64, len(lags))
	for seed := range uint64(realisations) {
		rng := stream(seed, "eddies")
		f := newEddyField(Eddies{Deviation: deviation, Length: length, Time: coherence}, 6, -3, rng)
		x, y := rng.Float64()*5000, rng.Float64()*5000
		angle := rng.Float64() * 2 * math.Pi
		sin, cos := math.Sincos(angle)
		u0, v0 := f.wind(x, y, 100)
		for i, lag := range lags {
			// in the frame that moves with the wind
			u, v := f.wind(x+lag.r*cos+6*lag.tau, y+lag.r*sin-3*lag.tau, 100+lag.tau)
			along[i] += (u0*cos + v0*sin) * (u*cos + v*sin)
			across[i] += (v0*cos - u0*sin) * (v*cos - u*sin)
			mixed[i] += (u0*cos + v0*sin) * (v*cos - u*sin)
		}
	}
	for i, lag := range lags {
		h := lag.r * lag.r / (2 * length * length)
		want := deviation * deviation * (1 - h) * math.Exp(-h) *
			math.Exp(-lag.tau*lag.tau/(2*coherence*coherence))
		// Four standard errors of a product of two normal variables:
		// 4 s^2 sqrt(2/4000) = 0.13 at zero lag, 0.09 at far lags.
		name := fmt.Sprintf("r=%g tau=%g", lag.r, lag.tau)
		near(t, "along "+name, along[i]/realisations, want, 0.13)
		near(t, "across "+name, across[i]/realisations, want, 0.13)
		near(t, "mixed "+name, mixed[i]/realisations, 0, 0.1)
	}
}

// One realisation has the standard deviation asked for: the strata see to it.
func TestEddyDeviationOfOneRealisation(t *testing.T) {
	for seed := range uint64(4) {
		f := newEddyField(Eddies{Deviation: 1, Length: 500, Time: 200}, 0, 0, stream(seed, "eddies"))
		var u2, v2 float64
		n := 0
		for x := 0.0; x < 40000; x += 700 {
			for y := 0.0; y < 40000; y += 700 {
				u, v := f.wind(x, y, 0)
				u2 += u * u
				v2 += v * v
				n++
			}
		}
		near(t, "sd east", math.Sqrt(u2/float64(n)), 1, 0.08)
		near(t, "sd north", math.Sqrt(v2/float64(n)), 1, 0.08)
	}
}

// div and rot of the parts: the potential part has no rotation, the stream
// function no divergence.
func TestEddyParts(t *testing.T) {
	f := newEddyField(Eddies{Deviation: 1, Length: 700, Time: 200}, 0, 0, stream(1, "eddies"))
	potential := &eddyField{waves: f.waves[:eddyModes]}
	streaming := &eddyField{waves: f.waves[eddyModes:]}
	const h = 0.1
	gradient := func(f *eddyField) (div, rot float64) {
		u1, v1 := f.wind(100+h, 50, 0)
		u0, v0 := f.wind(100-h, 50, 0)
		u3, v3 := f.wind(100, 50+h, 0)
		u2, v2 := f.wind(100, 50-h, 0)
		return (u1 - u0 + v3 - v2) / (2 * h), (v1 - v0 - u3 + u2) / (2 * h)
	}
	div, rot := gradient(potential)
	near(t, "rotation of the potential part", rot, 0, 1e-9)
	if math.Abs(div) < 1e-6 {
		t.Error("the potential part has no divergence")
	}
	div, rot = gradient(streaming)
	near(t, "divergence of the stream function's part", div, 0, 1e-9)
	if math.Abs(rot) < 1e-6 {
		t.Error("the stream function's part has no rotation")
	}
}
