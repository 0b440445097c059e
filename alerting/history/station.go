package history

import (
	"encoding/binary"
	"math"
	"slices"

	"sockline/sensors"
)

// The bits of the column of flags.
const (
	flagHasGust = 1 << iota
	flagGustValue
	flagExercise
	flagRetained
)

// The ways to store times, and a bit that stands with them.
const (
	timesDifferences = 0 // the first, then a column of the differences
	timesGrid        = 1 // the first, the period, a column of slots passed, a column of what is off the grid
	blockFlags       = 2 // a column of flags follows the delays; without it all flags are zero
)

// appendBlock appends the readings of one station, in their order, as columns.
// base is the step that the block begins with.
func appendBlock(dst []byte, base sensors.Instant, rs []sensors.Reading) []byte {
	dst = binary.AppendUvarint(dst, uint64(len(rs)))
	n := len(rs)
	times, delays, flags := make([]int64, n), make([]int64, n), make([]int64, n)
	speeds, froms := make([]float64, n), make([]float64, n)
	var gusts []float64
	for i, r := range rs {
		times[i] = int64(base - r.Time)
		delays[i] = int64(r.Arrival - r.Time)
		speeds[i], froms[i] = r.Speed, r.From
		if r.HasGust {
			flags[i] |= flagHasGust
		}
		if r.Exercise {
			flags[i] |= flagExercise
		}
		if r.Retained {
			flags[i] |= flagRetained
		}
		if math.Float64bits(r.Gust) != 0 {
			flags[i] |= flagGustValue
			gusts = append(gusts, r.Gust)
		}
	}
	at := len(dst)
	dst = appendTimes(dst, times)
	dst = appendColumn(dst, delays, 0)
	if slices.Max(flags) > 0 {
		dst[at] |= blockFlags
		dst = appendColumn(dst, flags, 0)
	}
	dst = appendValues(dst, speeds, false)
	dst = appendValues(dst, froms, true)
	if len(gusts) > 0 {
		dst = appendValues(dst, gusts, false)
	}
	return dst
}

func appendTimes(dst []byte, ts []int64) []byte {
	diffs := make([]int64, len(ts)-1)
	for i := range diffs {
		diffs[i] = ts[i] - ts[i+1] // times run on while their distance to base falls
	}
	plain := binary.AppendVarint([]byte{timesDifferences}, ts[0])
	plain = appendColumn(plain, diffs, 0)
	if len(ts) < 3 || len(plain) < 12 {
		return append(dst, plain...)
	}
	sorted := slices.Clone(diffs)
	slices.Sort(sorted)
	period := sorted[len(sorted)/2]
	if period <= 0 {
		return append(dst, plain...)
	}
	slots, off := make([]int64, len(diffs)), make([]int64, len(diffs))
	slot := int64(0)
	for i := range diffs {
		place := ts[0] - ts[i+1] // since the first
		at := int64(math.Floor(float64(place)/float64(period) + 0.5))
		slots[i], off[i] = at-slot, place-at*period
		slot = at
	}
	grid := binary.AppendVarint([]byte{timesGrid}, ts[0])
	grid = binary.AppendUvarint(grid, uint64(period))
	grid = appendColumn(appendColumn(grid, slots, 0), off, 0)
	if len(grid) < len(plain) {
		return append(dst, grid...)
	}
	return append(dst, plain...)
}

// times reads n times into s.more, as what they are before base, and says
// whether a column of flags is there.
func (c *cursor) times(n int, s *scratch) (flags bool) {
	way := c.Bytes(1)
	first := c.Varint()
	if c.Bad {
		return false
	}
	s.more = append(s.more[:0], first)
	switch way[0] &^ blockFlags {
	case timesDifferences:
		s.ints = c.column(s.ints[:0], n-1, 0, &s.rice)
		for _, d := range s.ints {
			first -= d
			s.more = append(s.more, first)
		}
	case timesGrid:
		period, slot := int64(c.Uvarint()), int64(0)
		s.ints = c.column(s.ints[:0], n-1, 0, &s.rice)
		for _, d := range s.ints {
			slot += d
			s.more = append(s.more, first-slot*period)
		}
		s.ints = c.column(s.ints[:0], n-1, 0, &s.rice)
		for i, off := range s.ints {
			if i+1 < len(s.more) {
				s.more[i+1] -= off
			}
		}
	default:
		c.Bad = true
	}
	if len(s.more) != n {
		c.Bad = true
	}
	return way[0]&blockFlags != 0
}

// block appends to dst the readings that appendBlock wrote, under the number
// of their station.
func (c *cursor) block(base sensors.Instant, station int, dst []sensors.Reading, s *scratch) []sensors.Reading {
	count := c.Uvarint()
	if c.Bad || count == 0 || count > maxColumn {
		c.Bad = true
		return dst
	}
	n, from := int(count), len(dst)
	flags := c.times(n, s)
	if c.Bad {
		return dst
	}
	dst = slices.Grow(dst, n)[:from+n]
	rs := dst[from:]
	for i, t := range s.more {
		at := base - sensors.Instant(t)
		rs[i] = sensors.Reading{Station: station, Time: at, Arrival: at}
	}
	s.ints = c.column(s.ints[:0], n, 0, &s.rice)
	if c.Bad || len(s.ints) != n {
		c.Bad = true
		return dst[:from]
	}
	for i, d := range s.ints {
		rs[i].Arrival += sensors.Instant(d)
	}
	var gusts []int
	if flags {
		gusts = c.flags(rs, s)
	}
	c.values(n, s, func(i int, v float64) { rs[i].Speed = v })
	c.values(n, s, func(i int, v float64) { rs[i].From = v })
	if len(gusts) > 0 {
		c.values(len(gusts), s, func(i int, v float64) { rs[gusts[i]].Gust = v })
	}
	if c.Bad {
		return dst[:from]
	}
	return dst
}

// flags reads the column of flags and gives the readings that have a gust.
func (c *cursor) flags(rs []sensors.Reading, s *scratch) (gusts []int) {
	s.more = c.column(s.more[:0], len(rs), 0, &s.rice)
	if c.Bad || len(s.more) != len(rs) {
		c.Bad = true
		return nil
	}
	for i, f := range s.more {
		rs[i].HasGust, rs[i].Exercise, rs[i].Retained = f&flagHasGust != 0, f&flagExercise != 0, f&flagRetained != 0
		if f&flagGustValue != 0 {
			gusts = append(gusts, i)
		}
	}
	return gusts
}
