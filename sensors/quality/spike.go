package quality

import (
	"math"
	"time"

	"sockline/sensors"
)

const (
	// spikeMemory is how many readings before a spike its measure is taken from.
	spikeMemory = 32
	spikeLeast  = 16
	// LongestSpike is how many readings in a row may be one spike. An onset waits for
	// so many readings at most before it is believed.
	LongestSpike = 2
	// LongestWait is how long a reading waits at most for what shows whether it is one.
	LongestWait = LongestSpike * spikeGap
	// spikeGap is how far apart readings may be that are compared: at longer
	// intervals one speed says little of the next, and every third would be a
	// spike.
	spikeGap = 2 * time.Second
	// spikeFactor is the limit of |x1-x0| + |x1-x2| in standard deviations
	// (I. Zahumensky, "Guidelines on Quality Control Procedures for Data from
	// Automatic Weather Stations", WMO CBS/CIMO 2004; from memory). Each of the
	// two must make up half of it here: the readings beside a spike would be
	// spikes too, else.
	spikeFactor = 4.0
	// spikeSteps is the same in root mean squares of what one reading differs from the
	// next: every 2 s in a drawn wind of 15 m/s one in 140 would be left out for standing
	// out by two deviations, in turbulence without a spike.
	spikeSteps = 2.75
	// spikeFloor is the least standard deviation that is reckoned with, m/s: in
	// light air a step of the resolution is no spike.
	spikeFloor = 0.7

	calmFor    = 120 * time.Second
	calmMost   = 300 * time.Second // then it begins anew
	calmSpread = 90.0              // degrees
)

// recent is the last usable readings but the spikes, the newest last, and those
// after them that stand out, of which the next one tells whether they are spikes.
type recent struct {
	speeds  [spikeMemory]float64
	n       int
	last    sensors.Instant // of the newest reading, whether it stands out or not
	waiting [LongestSpike]float64
	waits   int // how many stand out
}

// take takes in a usable reading and says whether the ones before it that stood
// out were spikes: one or two readings on one side of both their neighbours. An
// onset is none, because the wind stays. It also says whether the reading itself
// stands out: then it waits for the next.
func (s *recent) take(r sensors.Reading) (spikes, waits bool) {
	gap := r.Time.Sub(s.last)
	s.last = r.Time
	if gap > spikeGap || s.n < spikeLeast {
		s.release()
		if gap > stepGap {
			s.n = 0 // what it did a while ago is no measure any more
		}
		s.keep(r.Speed)
		return false, false
	}
	out := r.Speed - s.speeds[s.n-1]
	limit := s.limit()
	if s.waits > 0 {
		least, side := math.Inf(1), math.Copysign(1, s.waiting[0]-s.speeds[s.n-1])
		for _, v := range s.waiting[:s.waits] {
			least = math.Min(least, side*(v-r.Speed))
		}
		switch {
		case least > limit:
			spikes = true
			s.waits = 0
		case side*out > limit && s.waits < LongestSpike:
			// It stands out as they do, and tells nothing of them.
		default:
			s.release()
			s.keep(r.Speed)
			return false, false
		}
	}
	if math.Abs(out) <= limit {
		s.keep(r.Speed)
		return spikes, false
	}
	s.waiting[s.waits] = r.Speed
	s.waits++
	return spikes, true
}

// release takes what stood out for wind.
func (s *recent) release() {
	for _, v := range s.waiting[:s.waits] {
		s.keep(v)
	}
	s.waits = 0
}

func (s *recent) keep(speed float64) {
	if s.n == spikeMemory {
		copy(s.speeds[:], s.speeds[1:])
		s.n--
	}
	s.speeds[s.n] = speed
	s.n++
}

// limit is how far a reading must stand out, m/s: beyond what the readings kept deviate
// from their mean, and beyond what one differs from the next, whichever is more.
func (s *recent) limit() float64 {
	sum, squares, steps := 0.0, 0.0, 0.0
	k := float64(s.n)
	for _, v := range s.speeds[:s.n] {
		sum += v
	}
	mean := sum / k
	for i, v := range s.speeds[:s.n] {
		squares += float64((v - mean) * (v - mean))
		if i > 0 {
			step := v - s.speeds[i-1]
			steps += float64(step * step)
		}
	}
	deviation := math.Max(math.Sqrt(squares/k), spikeFloor)
	return math.Max(spikeFactor/2*deviation, spikeSteps*math.Sqrt(steps/(k-1)))
}

// calmRun is a run of readings without any speed.
type calmRun struct {
	length      int
	start, last sensors.Instant
	first       float64 // direction
	low, high   float64 // of the directions from the first, degrees
}

// turning says whether the speed has been nothing for calmFor while the
// direction went over a quarter of the horizon: a vane that blows about over a
// cup that does not (internal consistency of speed and direction, Zahumensky
// 2004; from memory). It may be right, in a calm, so it is only said.
func (c *calmRun) turning(r sensors.Reading) bool {
	switch gap := r.Time.Sub(c.last); {
	case r.Speed != 0:
		c.length = 0
		return false
	case c.length == 0 || gap < 0 || gap > runGap || r.Time.Sub(c.start) > calmMost:
		*c = calmRun{start: r.Time, first: r.From}
	}
	c.length++
	c.last = r.Time
	d := math.Mod(r.From-c.first+540, 360) - 180
	c.low, c.high = math.Min(c.low, d), math.Max(c.high, d)
	return c.length >= stuckReadings && r.Time.Sub(c.start) >= calmFor && c.high-c.low >= calmSpread
}
