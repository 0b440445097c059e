package judged

import (
	"encoding/binary"
	"slices"

	"sockline/sensors"
)

// encode writes a block down. Columns follow one another in a fixed order, so
// that what is alike stands together: see format.md.
func (b *block) encode() []byte {
	out := binary.AppendVarint(nil, int64(b.start))
	out = binary.AppendUvarint(out, uint64(len(b.rows)))
	out = b.appendGrounds(out)
	out = b.appendRuns(out, func(r *row) uint64 { return uint64(r.offset) - uint64(indexOf(b, r)) })
	out = b.appendRuns(out, func(r *row) uint64 { return uint64(r.ground) })
	out = b.appendRuns(out, func(r *row) uint64 {
		if r.exercise {
			return 1
		}
		return 0
	})
	if len(b.rows) == 0 {
		return out
	}
	for i := range b.rows[0].sides {
		out = b.appendSide(out, i)
	}
	for i := range b.rows[0].places {
		out = b.appendPlaces(out, i)
	}
	return b.appendSteeps(out)
}

// indexOf is the index of a row of the block; rows are walked in order, so it
// is found from its offset.
func indexOf(b *block, r *row) int {
	i, _ := slices.BinarySearchFunc(b.rows, r.offset, func(x row, offset int) int { return x.offset - offset })
	return i
}

// appendRuns writes one value a row as (length, value) pairs.
func (b *block) appendRuns(out []byte, value func(*row) uint64) []byte {
	var runs []uint64
	for i := range b.rows {
		v := value(&b.rows[i])
		if n := len(runs); n > 0 && runs[n-1] == v {
			runs[n-2]++
		} else {
			runs = append(runs, 1, v)
		}
	}
	out = binary.AppendUvarint(out, uint64(len(runs)/2))
	for _, v := range runs {
		out = binary.AppendUvarint(out, v)
	}
	return out
}

func (b *block) appendGrounds(out []byte) []byte {
	out = binary.AppendUvarint(out, uint64(len(b.grounds)))
	for _, g := range b.grounds {
		out = appendInts(out, g.used)
		for _, p := range g.paths {
			complete := byte(0)
			if p.complete {
				complete = 1
			}
			out = append(out, complete)
			out = appendInts(out, p.missing)
			out = binary.AppendUvarint(out, uint64(len(p.observed)))
			for _, o := range p.observed {
				out = binary.AppendVarint(out, int64(o[0]))
				out = binary.AppendVarint(out, int64(o[1]))
			}
		}
	}
	return out
}

func appendInts(out []byte, values []int) []byte {
	out = binary.AppendUvarint(out, uint64(len(values)))
	for _, v := range values {
		out = binary.AppendUvarint(out, uint64(v))
	}
	return out
}

// appendSide writes the distribution of one side of one stretch: its state by
// runs, then for the full steps the five points, the span of the counts, and
// the counts that are neither all draws nor too few, each as the difference to
// the full step before.
func (b *block) appendSide(out []byte, i int) []byte {
	out = b.appendRuns(out, func(r *row) uint64 { return uint64(r.sides[i].state) })
	var (
		levels [points][]int32
		spans  [2][]int32
		counts []int32
		last   side
	)
	last.counts = make([]uint8, len(b.context.Thresholds))
	for n := range last.counts {
		last.counts[n] = leastCount - 1
	}
	lastAll, lastSome := 0, 0
	for n := range b.rows {
		s := &b.rows[n].sides[i]
		if s.state != full {
			continue
		}
		for p := range levels {
			levels[p] = append(levels[p], int32(s.points[p])-int32(last.points[p]))
		}
		all, some := span(s.counts)
		spans[0] = append(spans[0], int32(all-lastAll))
		spans[1] = append(spans[1], int32(some-lastSome))
		lastAll, lastSome = all, some
		for k := all; k < some; k++ {
			counts = append(counts, int32(s.counts[k])-int32(last.counts[k]))
		}
		last.points, last.counts = s.points, s.counts
	}
	for p := range levels {
		out = appendColumn(out, levels[p])
	}
	out = appendColumn(out, spans[0])
	out = appendColumn(out, spans[1])
	return appendColumn(out, counts)
}

// span is how many thresholds all draws reach, and how many at least half of
// them.
func span(counts []uint8) (all, some int) {
	for some < len(counts) && counts[some] >= leastCount {
		if counts[some] == draws {
			all = some + 1
		}
		some++
	}
	return all, some
}

// appendPlaces writes where the change of one path and side lies, by runs.
func (b *block) appendPlaces(out []byte, i int) []byte {
	var starts []int
	for n := range b.rows {
		if n == 0 || b.rows[n].places[i] != b.rows[n-1].places[i] {
			starts = append(starts, n)
		}
	}
	out = binary.AppendUvarint(out, uint64(len(starts)))
	before, last := 0, place{}
	for _, n := range starts {
		p := b.rows[n].places[i]
		edge := uint64(0)
		if p.edge {
			edge = 1
		}
		out = binary.AppendUvarint(out, uint64(n-before)<<1|edge)
		out = binary.AppendVarint(out, int64(p.from-last.from))
		out = binary.AppendVarint(out, int64(p.to-last.to))
		before, last = n, p
	}
	return out
}

func (b *block) appendSteeps(out []byte) []byte {
	out = binary.AppendUvarint(out, uint64(len(b.steeps)))
	for _, s := range b.steeps {
		out = binary.AppendUvarint(out, uint64(s.row))
		out = binary.AppendUvarint(out, uint64(s.path))
		out = append(append(out, s.open...), s.close...)
	}
	return out
}

// at is the time of a row.
func (b *block) at(n int) sensors.Instant {
	return b.start + sensors.Instant(b.rows[n].offset)*sensors.Second
}
