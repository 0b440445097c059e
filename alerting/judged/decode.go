package judged

import (
	"sockline/alerting/packed"
	"sockline/alerting/windfield"
	"sockline/sensors"
)

const draws = windfield.Draws

// The bounds of what a block may hold, so that a damaged one asks for no
// memory. They lie far above what the configuration takes.
const (
	mostPaths      = 64
	mostStations   = 1024
	mostThresholds = 256
)

// decodeBlock reads a block that was written in this context.
func decodeBlock(c *Context, body []byte) (*block, error) {
	r := reader{Reader: packed.Reader{Left: body}}
	b := &block{context: c, start: sensors.Instant(r.Varint())}
	b.rows = make([]row, r.Count(BlockSteps))
	paths, thresholds := len(c.Paths), len(c.Thresholds)
	if r.Bad || paths > mostPaths || thresholds > mostThresholds || len(c.Owners) != paths {
		return nil, errBlock
	}
	r.grounds(b, paths)
	r.runs(b, func(n int, v uint64) { b.rows[n].offset = n + int(v) })
	r.runs(b, func(n int, v uint64) { b.rows[n].ground = int(v) })
	r.runs(b, func(n int, v uint64) { b.rows[n].exercise = v == 1 })
	stretches, _ := c.stretches()
	each := c.sides() * stretches
	sides := make([]side, each*len(b.rows)) // one piece of memory for all
	places := make([]place, 2*paths*len(b.rows))
	for n := range b.rows {
		b.rows[n].sides = sides[n*each : (n+1)*each]
		b.rows[n].places = places[n*2*paths : (n+1)*2*paths]
		if b.rows[n].ground >= len(b.grounds) || b.rows[n].offset >= BlockSteps {
			return nil, errBlock
		}
	}
	for i := range each {
		r.side(b, i, thresholds)
	}
	for i := range 2 * paths {
		r.places(b, i)
	}
	r.steeps(b, paths, thresholds)
	if r.Bad || len(r.Left) != 0 {
		return nil, errBlock
	}
	return b, nil
}

// runs reads what appendRuns wrote.
func (r *reader) runs(b *block, set func(n int, v uint64)) {
	n := 0
	for range r.Count(BlockSteps) {
		length, v := r.Uvarint(), r.Uvarint()
		if length > uint64(len(b.rows)-n) || v > BlockSteps {
			r.Bad = true
			return
		}
		for range length {
			set(n, v)
			n++
		}
	}
	r.Bad = r.Bad || n != len(b.rows)
}

func (r *reader) ints(most int) []int {
	var out []int
	for range r.Count(most) {
		out = append(out, r.Count(most))
	}
	return out
}

func (r *reader) grounds(b *block, paths int) {
	for range r.Count(BlockSteps) {
		g := ground{used: r.ints(mostStations), paths: make([]pathGround, paths)}
		for i := range g.paths {
			p := &g.paths[i]
			p.complete, p.missing = r.Byte() == 1, r.ints(mostStations)
			for range r.Count(mostStations) {
				p.observed = append(p.observed, [2]int32{int32(r.Varint()), int32(r.Varint())})
			}
		}
		if r.Bad {
			return
		}
		b.grounds = append(b.grounds, g)
	}
}

// side reads what appendSide wrote.
func (r *reader) side(b *block, i, thresholds int) {
	fullSteps := 0
	r.runs(b, func(n int, v uint64) {
		r.Bad = r.Bad || v > uint64(full)
		b.rows[n].sides[i].state = uint8(v)
		if v == uint64(full) {
			fullSteps++
		}
	})
	var levels [points][]int32
	for p := range levels {
		levels[p] = r.column(BlockSteps)
		r.Bad = r.Bad || len(levels[p]) != fullSteps
	}
	starts, ends := r.column(BlockSteps), r.column(BlockSteps)
	counts := r.column(BlockSteps * thresholds)
	if r.Bad || len(starts) != fullSteps || len(ends) != fullSteps {
		r.Bad = true
		return
	}
	memory := make([]uint8, fullSteps*thresholds)
	last := make([]uint8, thresholds)
	for k := range last {
		last[k] = leastCount - 1
	}
	all, some, step := int32(0), int32(0), 0
	var at [points]int32
	for n := range b.rows {
		s := &b.rows[n].sides[i]
		if s.state != full {
			continue
		}
		for p := range at {
			at[p] += levels[p][step]
			s.points[p] = uint16(at[p])
		}
		all, some = all+starts[step], some+ends[step]
		if all < 0 || all > some || int(some) > thresholds || int(some-all) > len(counts) {
			r.Bad = true
			return
		}
		s.counts = memory[step*thresholds : (step+1)*thresholds]
		for k := range s.counts {
			switch {
			case k < int(all):
				s.counts[k] = draws
			case k < int(some):
				s.counts[k] = uint8(int32(last[k]) + counts[0])
				counts = counts[1:]
			default:
				s.counts[k] = leastCount - 1
			}
		}
		last = s.counts
		step++
	}
	r.Bad = r.Bad || len(counts) != 0
}

func (r *reader) places(b *block, i int) {
	at, p := 0, place{}
	for k := range r.Count(BlockSteps) {
		head := r.Uvarint()
		next := at + int(min(head>>1, BlockSteps))
		if r.Bad || next >= len(b.rows) || k == 0 && next != 0 {
			r.Bad = true
			return
		}
		for ; k > 0 && at < next; at++ {
			b.rows[at].places[i] = p
		}
		at = next
		p = place{from: p.from + int32(r.Varint()), to: p.to + int32(r.Varint()), edge: head&1 == 1}
	}
	for ; at < len(b.rows); at++ {
		b.rows[at].places[i] = p
	}
}

func (r *reader) steeps(b *block, paths, thresholds int) {
	for range r.Count(BlockSteps * mostPaths) {
		s := steep{row: r.Count(BlockSteps), path: r.Count(mostPaths)}
		if r.Bad || s.row >= len(b.rows) || s.path >= paths || len(r.Left) < 2*thresholds {
			r.Bad = true
			return
		}
		s.open, s.close = r.Left[:thresholds:thresholds], r.Left[thresholds:2*thresholds:2*thresholds]
		r.Left = r.Left[2*thresholds:]
		b.steeps = append(b.steeps, s)
	}
}
