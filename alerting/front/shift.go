package front

import (
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// A slow turn of the wind: that of a cold front without an edge, of a sea
// breeze or of the day. It is looked for in the mean of all masts, of two
// minutes, against what it was up to a quarter of an hour ago.
const (
	turnMean    = 120.0 // s
	turnSpan    = 900.0 // s; a wind shift takes less than 15 min (FMH-1, chapter 5)
	turnTicks   = 256   // kept
	turnLeast   = 30.0  // degrees (ICAO Annex 3, marked discontinuity)
	turnHolds   = 20.0  // degrees, while one is told
	turnSpeed   = 5.0   // m/s before or after (ICAO Annex 3: 10 kt)
	turnLight   = 2.5   // m/s at both ends, or the direction means little
	turnExplain = 15.0  // degrees that a line must turn the wind to be taken for it
)

// turnTick is the mean of the masts in one tick.
type turnTick struct {
	at  sensors.Instant
	sum quantity.Vector
	n   int
}

// turning is the memory of the mean wind.
type turning struct {
	ticks [turnTicks]turnTick
	front Front
	told  bool
}

func newTurning() *turning { return &turning{} }

// take keeps the mean over the masts of the tick that ends at now.
func (d *turning) take(t *Tracker, now sensors.Instant) {
	k := &d.ticks[(now/t.clock.width)%turnTicks]
	*k = turnTick{at: now}
	for i := range t.watches {
		if m := t.watches[i].at(t.clock, now, 0); m != nil && !t.masts[i].Aloft {
			k.sum.East += m.v.East
			k.sum.North += m.v.North
			k.n++
		}
	}
	d.judge(t, now)
}

// mean is the mean wind over n ticks, the newest of which ended n0 ticks ago.
func (d *turning) mean(c clockwork, now sensors.Instant, n0, n int) (v quantity.Vector, ok bool) {
	got := 0.0
	for i := n0; i < n0+n; i++ {
		e := now - sensors.Instant(i)*c.width
		k := &d.ticks[(e/c.width)%turnTicks]
		if k.at != e || k.n == 0 {
			continue
		}
		v.East += k.sum.East / float64(k.n)
		v.North += k.sum.North / float64(k.n)
		got++
	}
	if 2*int(got) < n || got == 0 {
		return quantity.Vector{}, false
	}
	return scaled(v, 1/got), true
}

// judge looks for the greatest turn at now.
func (d *turning) judge(t *Tracker, now sensors.Instant) {
	c := t.clock
	n := c.count(turnMean)
	least := turnLeast
	if d.told {
		least = turnHolds
	}
	was, first := d.told, d.front.First
	d.told = false
	after, ok := d.mean(c, now, 0, n)
	if !ok || after.Speed() < turnLight {
		return
	}
	best := least
	for back := n; back <= c.count(turnSpan) && back+n <= turnTicks; back += max(n/2, 1) {
		before, ok := d.mean(c, now, back, n)
		if !ok || before.Speed() < turnLight || max(before.Speed(), after.Speed()) < turnSpeed {
			continue
		}
		turn := Turned(before, after)
		if size := max(turn, -turn); size >= best {
			best = size
			d.told = true
			d.front = Front{
				Kind: WindShift, First: now, Confidence: 1, Before: before, After: after, Turn: turn,
				Change: quantity.Vector{East: after.East - before.East, North: after.North - before.North},
				Lasts:  float64(back * c.w),
			}
		}
	}
	if was && d.told {
		d.front.First = first
	}
}

// now is the slow turn as it stands; false if there is none, or if a line that
// passes the masts is what turns the wind.
func (d *turning) now(lines []Front) (Front, bool) {
	if !d.told {
		return Front{}, false
	}
	for i := range lines {
		if turn := lines[i].Turn; max(turn, -turn) >= turnExplain {
			return Front{}, false
		}
	}
	return d.front, true
}
