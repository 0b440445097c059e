package averages

import (
	"math"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// The stretches that people's averages run over, in seconds.
const (
	gustSpan   = 3
	shortSpan  = 10
	localSpan  = 120 // local reports and displays (ICAO Annex 3)
	reportSpan = 600 // routine reports; variation and gusts (ICAO Annex 3)
)

// Wind is the wind of one mast as people read it, up to one step, corrected as
// configured. It is worked out on request: the analysis does not need it.
type Wind struct {
	At sensors.Instant

	Instant Mean // of 3 s
	Short   Mean // of 10 s
	Two     Mean // of 2 min
	Ten     Mean // of 10 min

	// Period is the last ten minutes, or what followed a marked discontinuity
	// if there was one: what variation and gusts are told of.
	Period        Mean
	Discontinuity *Change
	Variation     Variation
	Gusting       bool // the gust of the period exceeds the two-minute mean enough to be told

	Shift  *Change // wind shift of the last quarter of an hour, nil if none
	Squall *Change // of the last ten minutes, nil if none

	// Intensity is the standard deviation of the speed over its mean, GustFactor
	// the greatest 3 s mean over the mean, both of ten minutes; 0 below
	// leastTurbulent or without the ten minutes.
	Intensity, GustFactor float64
	Dissipation           Dissipation
}

// leastTurbulent is the mean speed in m/s below which ratios to it mean
// nothing.
const leastTurbulent = 2.0

// Wind is the wind of a station at step t; false unless two thirds of the last
// two minutes hold data.
func (r *Recorder) Wind(station int, t sensors.Instant) (Wind, bool) {
	s := &r.series
	s.fill(&r.masts[station], t)
	w := Wind{At: t, Instant: s.over(gustSpan), Short: s.over(shortSpan), Two: s.over(localSpan), Ten: s.over(reportSpan)}
	w.Period = w.Ten
	period := reportSpan
	if c, age, ok := s.discontinuity(); ok {
		w.Discontinuity = &Change{}
		*w.Discontinuity = c
		period = age
		w.Period = s.over(age)
	} else if !w.Ten.Present {
		// In its first minutes a mast tells of what it has.
		w.Period = w.Two
		period = localSpan
	}
	w.Variation = s.variation(period, w.Period.Speed)
	w.Gusting = w.Period.Gusts && w.Period.Gust-w.Two.Speed >= gustExcess
	w.Shift, w.Squall = s.shift(), s.squall()
	if w.Ten.Present && w.Ten.Speed >= leastTurbulent {
		w.Intensity = w.Ten.SpeedDeviation / w.Ten.Speed
		w.GustFactor = w.Ten.Gust / w.Ten.Speed
		w.Dissipation = s.dissipation(w.Ten)
	}
	return w, w.Two.Present
}

// TenMinutes is the vector mean and the scalar mean of the last ten minutes of
// a station; false unless two thirds of them hold data.
func (r *Recorder) TenMinutes(station int, t sensors.Instant) (v quantity.Vector, speed float64, ok bool) {
	return r.Mean(station, reportSpan*time.Second, t)
}

// Measured is the vector mean over a stretch up to t as it was measured at the
// height of the mast, without what correction makes of it; false unless two
// thirds of the stretch hold data.
func (r *Recorder) Measured(station int, over time.Duration, t sensors.Instant) (v quantity.Vector, ok bool) {
	v, speed, ok := r.Mean(station, over, t)
	if !ok || speed <= 0 {
		return v, ok
	}
	m := &r.masts[station]
	raw, n := 0.0, 0
	for age := range int(over / time.Second) {
		if b := m.at(t - sensors.Instant(age)*sensors.Second); b != nil {
			raw += b.raw / float64(b.n)
			n++
		}
	}
	// All readings of a direction are corrected by one factor.
	by := raw / float64(n) / speed
	return quantity.Vector{East: v.East * by, North: v.North * by}, true
}

// Mean is the vector mean and the scalar mean of a station over a stretch up
// to t, as corrected; false unless two thirds of it hold data.
func (r *Recorder) Mean(station int, over time.Duration, t sensors.Instant) (v quantity.Vector, speed float64, ok bool) {
	m := &r.masts[station]
	n := 0
	span := min(int(over/time.Second), memory)
	for age := range span {
		b := m.at(t - sensors.Instant(age)*sensors.Second)
		if b == nil {
			continue
		}
		v.East += b.east / float64(b.n)
		v.North += b.north / float64(b.n)
		speed += b.speed / float64(b.n)
		n++
	}
	if n == 0 || 3*n < 2*max(span/m.interval, 1) {
		return quantity.Vector{}, 0, false
	}
	k := float64(n)
	return quantity.Vector{East: v.East / k, North: v.North / k}, speed / k, true
}

// Dissipation is the turbulence of one mast as an eddy dissipation rate. It is
// measured at mast height, close to the ground, where it is large: in a
// neutral wind of 10 m/s over grass it is twice what it is 90 m higher up. It
// must not be given a class that was made for aircraft.
type Dissipation struct {
	Rate    float64 // the cube root of the dissipation, m^(2/3)/s
	Present bool
}

const (
	// structureConstant is C2 in D(r) = C2 (eps r)^(2/3) for the component
	// along the wind: 4.018 times the one-dimensional spectral constant 0.52
	// (A.S. Monin, A.M. Yaglom, Statistical Fluid Mechanics, volume 2, 1975; from
	// memory).
	structureConstant = 4.0184 * 0.52
	structureLags     = 5 // s, the longest; farther on the eddies feel the ground
	structurePairs    = 200
)

// RateOf is the cube root of the dissipation in m^(2/3)/s for a structure
// function d in m2/s2 of the component along the wind at a lag in s, in a mean
// wind of speed m/s: sqrt(d / (C2 (speed lag)^(2/3))), where the lag stands
// for a distance (G.I. Taylor, "The spectrum of turbulence", Proc. R. Soc.
// Lond. A 164, 1938).
func RateOf(d, lag, speed float64) float64 {
	return math.Sqrt(d / (structureConstant * math.Pow(speed*lag, 2.0/3)))
}

// dissipation fits D(lag) = A lag^(2/3) + N to the lags of 1 to 5 s, where N
// is twice the variance of white noise, such as that of rounding. Noise below
// zero is the instrument's own slowness: then there is no N.
func (s *series) dissipation(ten Mean) Dissipation {
	if s.interval > 1 {
		return Dissipation{}
	}
	strength := ten.Vector.Speed()
	if strength < leastTurbulent {
		return Dissipation{}
	}
	e, n := ten.Vector.East/strength, ten.Vector.North/strength
	var x, d [structureLags]float64
	for lag := 1; lag <= structureLags; lag++ {
		sum, pairs := 0.0, 0
		for age := 0; age+lag < reportSpan; age++ {
			a, b := &s.seconds[age], &s.seconds[age+lag]
			if a.have && b.have {
				du := float64((a.v.East-b.v.East)*e) + float64((a.v.North-b.v.North)*n)
				sum += float64(du * du)
				pairs++
			}
		}
		if pairs < structurePairs {
			return Dissipation{}
		}
		x[lag-1], d[lag-1] = math.Pow(float64(lag), 2.0/3), sum/float64(pairs)
	}
	a := slopeWithNoise(x[:], d[:])
	return Dissipation{Rate: math.Sqrt(a / (structureConstant * math.Pow(strength, 2.0/3))), Present: true}
}

// slopeWithNoise fits d = a x + n by least squares with a and n not below 0.
func slopeWithNoise(x, d []float64) (a float64) {
	var sx, sd, sxx, sxd float64
	for i := range x {
		sx += x[i]
		sd += d[i]
		sxx += float64(x[i] * x[i])
		sxd += float64(x[i] * d[i])
	}
	k := float64(len(x))
	a = (float64(k*sxd) - float64(sx*sd)) / (float64(k*sxx) - float64(sx*sx))
	if n := (sd - float64(a*sx)) / k; n < 0 {
		a = sxd / sxx
	}
	return math.Max(a, 0)
}
