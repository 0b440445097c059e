package feed

import (
	"fmt"
	"sync"
	"time"

	"sockline/sensors"
)

// OffsetLimit is the difference between the arrival clock and the host clock
// from which on the operator is to be told.
const OffsetLimit = 500 * time.Millisecond

const (
	// slewDivisor sets the rate at which the arrival clock is drawn to the
	// host clock: 1 ms a second. Slow enough that no duration between two
	// stamps is wrong by more than 0.1 %, fast enough for any quartz.
	slewDivisor = 1000
	// slewGrain is the least time between two corrections. Without it the
	// integer division by slewDivisor would round each of many close calls
	// down to nothing, and a busy feed would never be drawn in.
	slewGrain = time.Millisecond

	minSpeed, maxSpeed = 1, 60
)

// Clock gives arrival stamps: whole milliseconds that never go back, whatever
// the host clock does. A stamp is the wall time at the start plus the
// monotonic time since, drawn toward the host clock by at most 1 ms a second.
// A Clock is safe for concurrent use.
type Clock struct {
	wall      func() time.Time
	monotonic func() time.Duration
	speed     float64

	mu     sync.Mutex
	origin time.Time     // wall time at the start
	begin  time.Duration // monotonic time at the start
	slewed time.Duration // monotonic time of the last correction
	slew   time.Duration // sum of the corrections
	last   sensors.Instant
}

// NewClock is an arrival clock over the clocks of the host.
func NewClock() *Clock {
	start := time.Now()
	return newClock(time.Now, func() time.Duration { return time.Since(start) }, 1)
}

// NewClockOver is an arrival clock over the two given clocks: wall is the time
// of day, which may be stepped; monotonic is the time since any fixed moment,
// which may not. Stamps run speed times as fast as monotonic; an error is
// returned unless speed is 1 to 60.
func NewClockOver(wall func() time.Time, monotonic func() time.Duration, speed float64) (*Clock, error) {
	if !(speed >= minSpeed && speed <= maxSpeed) {
		return nil, fmt.Errorf("make the arrival clock: speed %g: give a factor from %d to %d", speed, minSpeed, maxSpeed)
	}
	return newClock(wall, monotonic, speed), nil
}

func newClock(wall func() time.Time, monotonic func() time.Duration, speed float64) *Clock {
	begin := monotonic()
	// Round(0) strips the monotonic part, so that differences between wall
	// times show the steps of the host clock instead of hiding them.
	return &Clock{wall: wall, monotonic: monotonic, speed: speed,
		origin: wall().Round(0), begin: begin, slewed: begin}
}

// Now is the arrival stamp of this moment. No stamp is less than an earlier one.
func (c *Clock) Now() sensors.Instant {
	c.mu.Lock()
	defer c.mu.Unlock()
	elapsed := c.elapsed()
	if c.speed != 1 {
		elapsed = time.Duration(float64(elapsed) * c.speed)
	}
	if now := sensors.At(c.origin.Add(elapsed)); now > c.last || c.last == 0 {
		c.last = now
	}
	return c.last
}

// Stamp is Now, whatever the message.
func (c *Clock) Stamp(string, []byte) sensors.Instant { return c.Now() }

// Offset is how far the host clock is ahead of the arrival clock (negative:
// behind), speed aside. A magnitude above OffsetLimit means that the host
// clock was stepped, or that the host was suspended.
func (c *Clock) Offset() time.Duration {
	c.mu.Lock()
	defer c.mu.Unlock()
	elapsed := c.elapsed()
	return c.wall().Round(0).Sub(c.origin.Add(elapsed))
}

// elapsed is the corrected time since the start; it also takes the correction
// that is due.
func (c *Clock) elapsed() time.Duration {
	now := c.monotonic()
	if since := now - c.slewed; since >= slewGrain {
		c.slewed = now
		most := since / slewDivisor
		// Sub saturates at about 292 years, so even a host clock in another
		// century only asks for the greatest correction.
		want := c.wall().Round(0).Sub(c.origin.Add(now - c.begin + c.slew))
		c.slew += min(max(want, -most), most)
	}
	return now - c.begin + c.slew
}
