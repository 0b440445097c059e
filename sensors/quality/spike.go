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
	// spikeFloor is the least standard deviation that is reckoned with, m/s: in
	// light air a step of the resolution is no spike.
	spikeFloor = 0.7

	calmFor    = 120 * time.Second
	calmMost   = 300 * time.Second // then it begins anew
	calmSpread = 90.0              // degrees
)

// recent is the last usable readings, the newest last.
type recent struct {
	speeds [spikeMemory]float64
	times  [spikeMemory]sensors.Instant
	n      int
}

// spike takes in a usable reading and says whether the one before it was a
// spike: a single reading that stands out on one side of both its neighbours.
// An onset is none, because the wind stays; that is why it takes the reading
// after it, and why nothing can be done about a spike but to say so.
func (s *recent) spike(r sensors.Reading) bool {
	found := false
	if s.n > spikeLeast {
		x1, x0 := s.speeds[s.n-1], s.speeds[s.n-2]
		before, after := x1-x0, x1-r.Speed
		near := r.Time.Sub(s.times[s.n-1]) <= spikeGap && s.times[s.n-1].Sub(s.times[s.n-2]) <= spikeGap
		found = near && before*after > 0 && math.Min(math.Abs(before), math.Abs(after)) > spikeFactor/2*s.deviation()
	}
	if s.n > 0 && r.Time.Sub(s.times[s.n-1]) > stepGap {
		s.n = 0 // what it did a while ago is no measure any more
	}
	if s.n == spikeMemory {
		copy(s.speeds[:], s.speeds[1:])
		copy(s.times[:], s.times[1:])
		s.n--
	}
	s.speeds[s.n], s.times[s.n] = r.Speed, r.Time
	s.n++
	return found
}

// deviation is the standard deviation of the readings before the newest, m/s,
// and no less than spikeFloor.
func (s *recent) deviation() float64 {
	sum, squares := 0.0, 0.0
	k := float64(s.n - 1)
	for _, v := range s.speeds[:s.n-1] {
		sum += v
	}
	mean := sum / k
	for _, v := range s.speeds[:s.n-1] {
		squares += float64((v - mean) * (v - mean))
	}
	return math.Max(math.Sqrt(squares/k), spikeFloor)
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
