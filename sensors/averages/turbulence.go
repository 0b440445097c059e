package averages

import (
	"math"

	"sockline/sensors"
)

// Turbulence is what the wind does about its slow course at one mast, as a
// first-order autoregressive process: variance of one horizontal component and
// integral time. The mean of it over w seconds has the variance
// MeanVariance(w).
type Turbulence struct {
	Variance float64 // m2/s2, mean of the two components
	Time     float64 // s
	Speed    float64 // mean wind it was measured in, m/s
	Seconds  int     // seconds of data it rests on; 0: not measured yet
}

// In is the turbulence to expect when the wind has risen to speed (m/s) since
// it was measured: the deviation grows as 0.75 V + 5.6 (IEC 61400-1 ed. 3,
// normal turbulence model; from memory). It never shrinks: air that has just
// calmed may still be restless.
func (t Turbulence) In(speed float64) Turbulence {
	if speed > t.Speed {
		growth := (float64(0.75*speed) + 5.6) / (float64(0.75*t.Speed) + 5.6)
		t.Variance *= growth * growth
	}
	return t
}

// MeanVariance is the variance in m2/s2 of a mean over w seconds:
// sigma2 (2/a)(1 - (1 - exp(-a))/a) with a = w/T, the variance of the mean of
// an exponentially correlated signal (G.I. Taylor, "Diffusion by continuous
// movements", Proc. London Math. Soc. 20, 1921; from memory).
func (t Turbulence) MeanVariance(w float64) float64 {
	a := w / t.Time
	return t.Variance * (2 / a) * (1 - (1-math.Exp(-a))/a)
}

// Covariance of the means of blocks b and c of one component, m2/s2, when the
// turbulence is t. For two stretches of w1 and w2 seconds that are g seconds
// apart, exponential correlation integrates to
// sigma2 T2/(w1 w2) exp(-g/T) (1 - exp(-w1/T)) (1 - exp(-w2/T)).
func (l Layout) Covariance(t Turbulence, b, c int) float64 {
	if b == c {
		return t.MeanVariance(float64(l.Seconds[b]))
	}
	if b > c {
		b, c = c, b
	}
	gap := 0
	for i := b + 1; i < c; i++ {
		gap += l.Seconds[i]
	}
	w1, w2 := float64(l.Seconds[b])/t.Time, float64(l.Seconds[c])/t.Time
	return t.Variance / float64(w1*w2) * math.Exp(-float64(gap)/t.Time) * (1 - math.Exp(-w1)) * (1 - math.Exp(-w2))
}

const (
	turbulenceSpan  = 600 // s of data before the blocks
	turbulenceLeast = 180 // s of data below which nothing is said
	detrendHalf     = 30  // s on either side of the running mean that is removed
	lagShort        = 2   // s; lag 0 would include the instrument's white noise
	lagLong         = 6   // s
)

// Bounds of the integral time in seconds. At 10 m height L1 is about 57 m
// (IEC 61400-1, from memory), so T runs from 3 s in a gale to 20 s in light air.
const (
	leastTime = 2.0
	mostTime  = 20.0
)

// estimateTurbulence works on the ten minutes before the blocks in use, so
// that an onset does not make the filter distrust the mast that sees it. The
// slow course (a centred one-minute mean) is taken out first: it is signal.
// Taking it out lowers every autocovariance by about the variance of a
// one-minute mean, which is put back.
func (m *mast) estimateTurbulence(t sensors.Instant, layout Layout) Turbulence {
	if m.interval > 1 {
		return m.coarseTurbulence(t, layout)
	}
	end := t - sensors.Instant(layout.Total())*sensors.Second
	const n = turbulenceSpan
	var east, north [n]float64 // oldest first
	var have [n]bool
	count := 0
	speed := 0.0
	for k := range n {
		second := end - sensors.Instant(n-1-k)*sensors.Second
		v, ok := m.wind(second)
		if !ok {
			continue
		}
		east[k], north[k] = v.East, v.North
		have[k] = true
		b := m.at(second)
		speed += b.speed / float64(b.n)
		count++
	}
	if count < turbulenceLeast {
		return Turbulence{}
	}
	ce := detrendedCovariances(&east, &have)
	cn := detrendedCovariances(&north, &have)
	short := (ce[0] + cn[0]) / 2
	long := (ce[1] + cn[1]) / 2
	t0 := Turbulence{Variance: 1e-4, Time: 5}
	if short > 1e-4 {
		t0 = solveTurbulence(short, long)
	}
	t0.Speed, t0.Seconds = speed/float64(count), count
	return t0
}

// solveTurbulence finds variance and time from the autocovariances at the two
// lags: C(k) = sigma2 exp(-k/T) - V, where V is the variance of the removed
// one-minute mean, itself a function of sigma2 and T. Three rounds settle it.
func solveTurbulence(short, long float64) Turbulence {
	turb := Turbulence{Variance: short, Time: 5}
	lost := 0.0
	for range 4 {
		s, l := short+lost, math.Max(long+lost, 1e-6)
		ratio := math.Max(s/l, 1.01)
		turb.Time = min(max((lagLong-lagShort)/math.Log(ratio), leastTime), mostTime)
		turb.Variance = s * math.Exp(lagShort/turb.Time)
		lost = turb.MeanVariance(2*detrendHalf + 1)
	}
	return turb
}

// detrendedCovariances are the autocovariances at lagShort and lagLong of x
// less its centred running mean.
func detrendedCovariances(x *[turbulenceSpan]float64, have *[turbulenceSpan]bool) [2]float64 {
	const n = turbulenceSpan
	var residual [n]float64
	var sum float64
	var cnt int
	lo, hi := 0, 0 // the running mean covers [lo, hi)
	for k := range n {
		for hi < n && hi <= k+detrendHalf {
			if have[hi] {
				sum += x[hi]
				cnt++
			}
			hi++
		}
		for lo < k-detrendHalf {
			if have[lo] {
				sum -= x[lo]
				cnt--
			}
			lo++
		}
		if have[k] {
			residual[k] = x[k] - sum/float64(cnt)
		}
	}
	var out [2]float64
	for j, lag := range [2]int{lagShort, lagLong} {
		c, pairs := 0.0, 0
		// The first and last half minute have a lopsided running mean.
		for k := detrendHalf; k+lag < n-detrendHalf; k++ {
			if have[k] && have[k+lag] {
				c += float64(residual[k] * residual[k+lag])
				pairs++
			}
		}
		if pairs > 0 {
			out[j] = c / float64(pairs)
		}
	}
	return out
}

// coarseTurbulence serves instruments that report less than once a second: too
// sparse for short lags, so the variance follows from successive differences
// with the time T that the mean speed implies. What is dt seconds apart is still
// correlated: half the mean square of the differences is sigma2 (1 - exp(-dt/T)).
func (m *mast) coarseTurbulence(t sensors.Instant, layout Layout) Turbulence {
	end := t - sensors.Instant(layout.Total())*sensors.Second
	var sum, speed float64
	var pairs, n int
	var apart [coarseGap + 1]int // pairs by their distance, s
	var before sample
	for k := turbulenceSpan - 1; k >= 0; k-- {
		second := end - sensors.Instant(k)*sensors.Second
		v, ok := m.wind(second)
		if !ok {
			continue
		}
		b := m.at(second)
		speed += b.speed / float64(b.n)
		if n++; n > 1 && second-before.second <= coarseGap*sensors.Second {
			apart[(second-before.second)/sensors.Second]++
			de, dn := v.East-before.v.East, v.North-before.v.North
			sum += float64((float64(de*de) + float64(dn*dn)) / 2)
			pairs++
		}
		before = sample{second, v}
	}
	if n*m.interval < turbulenceLeast || pairs < 10 {
		return Turbulence{}
	}
	time := ExpectedTime(speed / float64(n))
	fresh := 0.0
	for dt, count := range apart {
		fresh += float64(float64(count) * -math.Expm1(-float64(dt)/time))
	}
	return Turbulence{
		Variance: math.Max(sum/(2*fresh), 1e-4),
		Time:     time,
		Speed:    speed / float64(n),
		Seconds:  n * m.interval,
	}
}

// coarseGap is the longest distance of two readings that are compared, s.
const coarseGap = 30

// ExpectedTime is the integral time in seconds to expect at 10 m in a wind of
// speed m/s: T = L1/V with L1 = 8.1 x 0.7 z = 56.7 m (IEC 61400-1 ed. 3, annex
// B; from memory).
func ExpectedTime(speed float64) float64 {
	return min(max(56.7/math.Max(speed, 0.1), leastTime), mostTime)
}

// Expected is the turbulence to reckon with before any has been measured, on
// the cautious side: sigma1 = Iref (0.75 V + 5.6) with Iref = 0.16 (IEC 61400-1
// ed. 3, class A, the 90 % point; from memory).
func Expected(speed float64) Turbulence {
	sigma := 0.16 * (float64(0.75*speed) + 5.6)
	return Turbulence{Variance: sigma * sigma, Time: ExpectedTime(speed), Speed: speed}
}
