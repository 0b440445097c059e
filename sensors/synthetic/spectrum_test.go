package synthetic

import (
	"fmt"
	"math"
	"testing"
)

// periodogram is the mean one-sided spectral density of many series at some
// frequencies: 2 dt/n |sum x exp(-i w t)|^2.
type periodogram struct {
	omega []float64 // rad a sample
	sum   []float64
	n     int
}

func (p *periodogram) add(x []float64, dt float64) {
	for k, w := range p.omega {
		re, im := 0.0, 0.0
		for i, v := range x {
			sin, cos := math.Sincos(w * float64(i))
			re, im = re+v*cos, im+v*sin
		}
		p.sum[k] += 2 * dt / float64(len(x)) * (re*re + im*im)
	}
	p.n++
}

func newPeriodogram(omega ...float64) *periodogram {
	return &periodogram{omega: omega, sum: make([]float64, len(omega))}
}

// Expected: the spectral density of a first-order autoregressive series of one
// sample a second, S(f) = 2 s2 (1-r2)/(1 + r2 - 2 r cos w), which for low
// frequencies is 4 s2 T (G.M. Jenkins, D.G. Watts, "Spectral Analysis", 1968;
// from memory). IEC class B at 10 m and 10 m/s: s 1.834 m/s, T 5.67 s.
func TestTurbulenceSpectrum(t *testing.T) {
	const series, length = 600, 1200
	period := newPeriodogram(2*math.Pi*6/length, 2*math.Pi*24/length, 2*math.Pi*60/length, 2*math.Pi*120/length, 2*math.Pi*360/length)
	for seed := range uint64(series) {
		air := turbulence{rng: stream(seed, "spectrum")}
		x := make([]float64, length)
		for i := range x {
			x[i], _ = air.next(TurbulenceB, 10, 1, 10, 0)
		}
		period.add(x, 1)
	}
	const sigma, rho = 1.834, 0.83831
	for k, w := range period.omega {
		got := period.sum[k] / float64(period.n)
		want := 2 * sigma * sigma * (1 - rho*rho) / (1 + rho*rho - 2*rho*math.Cos(w))
		// Each value is chi-squared with two degrees of freedom: standard error
		// 1/sqrt(600) = 4 %; leakage adds a little.
		if math.Abs(got/want-1) > 0.16 {
			t.Errorf("at %.4f Hz: %.2f m2/s2/Hz, want %.2f", w/(2*math.Pi), got, want)
		}
	}
	low := 2 * sigma * sigma * (1 - rho*rho) / (1 + rho*rho - 2*rho*math.Cos(0.001))
	near(t, "its low end over 4 s2 T", low/(4*sigma*sigma*5.67), 1, 0.01)
}

// Expected: the density along a straight line through the eddies, that is the
// Fourier transform of s2 (1 - r2/2L2) exp(-r2/2L2):
// S(k) = s2 L sqrt(2/pi) (1 + k2 L2)/2 exp(-k2 L2/2), one-sided, per rad/m, of
// either component.
func TestEddySpectrum(t *testing.T) {
	const series, points, step, length, deviation = 200, 300, 150.0, 900.0, 1.2
	var waves []float64
	for _, kl := range []float64{0.5, 1, 1.5, 2, 2.5} {
		waves = append(waves, kl/length*step)
	}
	period := [2]*periodogram{newPeriodogram(waves...), newPeriodogram(waves...)}
	for seed := range uint64(series) {
		f := newEddyField(Eddies{Deviation: deviation, Length: length, Time: 300}, 0, 0, stream(seed, "spectrum"))
		var x [2][points]float64
		for i := range points {
			x[0][i], x[1][i] = f.wind(float64(i)*step, 0, 0)
		}
		period[0].add(x[0][:], step)
		period[1].add(x[1][:], step)
	}
	for component, p := range period {
		for k, w := range waves {
			kl := w / step * length
			want := deviation * deviation * length * math.Sqrt(2/math.Pi) * (1 + kl*kl) / 2 * math.Exp(-kl*kl/2)
			got := p.sum[k] / float64(p.n) / (2 * math.Pi) // per rad/m
			// Four standard errors of 1/sqrt(200).
			if math.Abs(got/want-1) > 0.28 {
				t.Errorf("component %d at kL = %.1f: %.1f, want %.1f", component, kl, got, want)
			}
		}
	}
}

// Covariance is what TestEddyCovariance holds realisations to.
func TestEddyCovarianceForm(t *testing.T) {
	e := Eddies{Deviation: 1.2, Length: 900, Time: 240}
	for _, row := range []struct{ dx, dy, tau, want float64 }{
		{0, 0, 0, 1.44}, {900, 0, 0, 1.44 * 0.5 * math.Exp(-0.5)}, {0, 900, 0, 1.44 * 0.5 * math.Exp(-0.5)},
		{0, 0, 240, 1.44 * math.Exp(-0.5)}, {900 * math.Sqrt2, 0, 0, 0},
	} {
		near(t, fmt.Sprint(row), e.Covariance(row.dx, row.dy, row.tau), row.want, 1e-12)
	}
	if c := (Eddies{}).Covariance(0, 0, 0); c != 0 {
		t.Errorf("no eddies have the variance %g", c)
	}
}
