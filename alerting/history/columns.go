package history

import (
	"encoding/binary"
	"math"
	"slices"

	"sockline/alerting/packed"
	"sockline/sensors"
)

// Readings of one station over some minutes are stored column by column: the
// difference from one reading to the next has a small entropy, and Rice's code
// of it (see packed.Rice) comes within a few percent of that. Its number of
// low bits is the best for each column of each block.

// The ways to store a column of whole numbers; bits 5-7 of its head.
const (
	columnConstant = iota // sv: all are this number
	columnRuns            // runs of equal numbers: uv length, sv number, until all are there
	columnPlain           // sv least number; Rice's code of each above it
	columnDelta           // sv first number; Rice's code of the zigzag of each difference
	columnWrapped         // as columnDelta on a circle of a known circumference
)

// What the head of a column and its numbers leave room for.
const (
	mostLow  = 31 // low bits of a code
	farWidth = 64 // bits of a number that the code is not good for
)

// maxColumn is how many readings a block may claim to have: more than a
// station can send at 1 kHz. It bounds what a constant column makes of 2 bytes.
const maxColumn = 1 << 20

// appendColumn appends numbers in the shortest of the ways. A circumference
// other than 0 says that they are places on a circle, each less than it.
func appendColumn(dst []byte, vs []int64, circumference int64) []byte {
	if len(vs) == 0 {
		return dst
	}
	head := func(way, k int) { dst = append(dst, byte(way<<5|k)) }
	least, runs := slices.Min(vs), 1
	for i := range vs[1:] {
		if vs[i+1] != vs[i] {
			runs++
		}
	}
	if runs == 1 {
		head(columnConstant, 0)
		return binary.AppendVarint(dst, vs[0])
	}
	plain, delta := make([]uint64, len(vs)), make([]uint64, len(vs)-1)
	for i, v := range vs {
		plain[i] = uint64(v - least) // exact even where the difference overflows: modulo 2^64 both ways
	}
	for i := range delta {
		delta[i] = packed.Zigzag(vs[i+1] - vs[i])
	}
	way := columnPlain
	code, size := packed.Shortest(plain, mostLow, farWidth)
	if cd, n := packed.Shortest(delta, mostLow, farWidth); n < size {
		way, code, size = columnDelta, cd, n
	}
	if circumference > 0 {
		wrapped := make([]uint64, len(delta))
		for i := range wrapped {
			wrapped[i] = packed.Zigzag(wrap(vs[i+1]-vs[i], circumference))
		}
		if cw, n := packed.Shortest(wrapped, mostLow, farWidth); n < size {
			way, code, size, delta = columnWrapped, cw, n, wrapped
		}
	}
	if uint64(runs) < size/16 { // a run takes two bytes or more: only worth a try if they are few
		var b []byte
		for i := 0; i < len(vs); {
			j := i
			for j < len(vs) && vs[j] == vs[i] {
				j++
			}
			b = binary.AppendVarint(binary.AppendUvarint(b, uint64(j-i)), vs[i])
			i = j
		}
		if uint64(len(b)) <= size/8 {
			head(columnRuns, 0)
			return append(dst, b...)
		}
	}
	head(way, code.Low)
	if way == columnPlain {
		return code.Append(binary.AppendVarint(dst, least), plain)
	}
	return code.Append(binary.AppendVarint(dst, vs[0]), delta)
}

// wrap is the difference d on a circle, in [-c/2, c/2].
func wrap(d, c int64) int64 {
	switch {
	case d > c/2:
		return d - c
	case d < -c/2:
		return d + c
	}
	return d
}

// column appends the n numbers that appendColumn wrote to dst; scratch may be
// overwritten.
func (c *cursor) column(dst []int64, n int, circumference int64, scratch *[]uint64) []int64 {
	if n == 0 {
		return dst
	}
	b := c.Bytes(1)
	if c.Bad {
		return dst
	}
	way, code := int(b[0]>>5), packed.Rice{Low: int(b[0] & mostLow), Far: farWidth}
	dst = slices.Grow(dst, n)
	switch way {
	case columnConstant:
		v := c.Varint()
		for range n {
			dst = append(dst, v)
		}
	case columnRuns:
		for n > 0 {
			length, v := c.Uvarint(), c.Varint()
			if c.Bad || length == 0 || length > uint64(n) {
				c.Bad = true
				return dst
			}
			for range length {
				dst = append(dst, v)
			}
			n -= int(length)
		}
	case columnPlain:
		least := c.Varint()
		*scratch = c.Rice((*scratch)[:0], n, code)
		for _, u := range *scratch {
			dst = append(dst, least+int64(u))
		}
	case columnDelta:
		v := c.Varint()
		*scratch = c.Rice((*scratch)[:0], n-1, code)
		dst = append(dst, v)
		for _, u := range *scratch {
			v += packed.Unzigzag(u)
			dst = append(dst, v)
		}
	case columnWrapped:
		v := c.Varint()
		*scratch = c.Rice((*scratch)[:0], n-1, code)
		dst = append(dst, v)
		for _, u := range *scratch {
			v += packed.Unzigzag(u)
			if v >= circumference {
				v -= circumference
			} else if v < 0 {
				v += circumference
			}
			dst = append(dst, v)
		}
	default:
		c.Bad = true
	}
	return dst
}

// circumference is how many steps of the form go round the compass; 0 where
// that is no whole number.
func (f form) circumference() int64 {
	switch f {
	case formOne:
		return 360
	case formTenth:
		return 3600
	case formHundredth:
		return 36000
	case formThousandth:
		return 360000
	}
	return 0
}

// valueExceptions marks a column of values of which some follow as they are.
const valueExceptions = 1 << 3

// formOf picks the form that is exact for most of the values, the coarsest of
// these, and gives the numbers; what is not exact has the number before it.
func formOf(vs []float64) (best form, ns []int64, exceptions int) {
	best, exceptions = formRaw, len(vs)
	for f := formOne; f < formRaw; f++ {
		wrong := 0
		for _, v := range vs {
			if _, ok := f.count(v); !ok {
				wrong++
				if wrong >= exceptions {
					break
				}
			}
		}
		if wrong < exceptions {
			best, exceptions = f, wrong
		}
		if exceptions == 0 {
			break
		}
	}
	if best == formRaw || exceptions > len(vs)/2 {
		return formRaw, nil, 0
	}
	ns = make([]int64, 0, len(vs))
	last := int64(0)
	for _, v := range vs {
		if n, ok := best.count(v); ok {
			last = n
		}
		ns = append(ns, last)
	}
	return best, ns, exceptions
}

// appendValues appends a column of values; round says that they are
// directions.
func appendValues(dst []byte, vs []float64, round bool) []byte {
	f, ns, exceptions := formOf(vs)
	if f == formRaw {
		dst = append(dst, byte(formRaw))
		for _, v := range vs {
			dst = binary.LittleEndian.AppendUint64(dst, math.Float64bits(v))
		}
		return dst
	}
	head := byte(f)
	if exceptions > 0 {
		head |= valueExceptions
	}
	dst = append(dst, head)
	if exceptions > 0 {
		dst = binary.AppendUvarint(dst, uint64(exceptions))
		before := 0
		for i, v := range vs {
			if _, ok := f.count(v); !ok {
				dst = binary.AppendUvarint(dst, uint64(i-before))
				dst = binary.LittleEndian.AppendUint64(dst, math.Float64bits(v))
				before = i
			}
		}
	}
	circle := int64(0)
	if round {
		circle = f.circumference()
		for _, n := range ns {
			if n < 0 || n >= circle {
				circle = 0
				break
			}
		}
	}
	return appendColumn(dst, ns, circle)
}

// values calls put with each of the n values that appendValues wrote.
func (c *cursor) values(n int, s *scratch, put func(i int, v float64)) {
	b := c.Bytes(1)
	if c.Bad {
		return
	}
	if b[0]&^(valueExceptions|7) != 0 {
		c.Bad = true
		return
	}
	f := form(b[0] & 7)
	if f == formRaw {
		raw := c.Bytes(8 * uint64(n))
		for i := 0; i < n && !c.Bad; i++ {
			put(i, math.Float64frombits(binary.LittleEndian.Uint64(raw[8*i:])))
		}
		return
	}
	type exception struct {
		at int
		v  float64
	}
	var exceptions []exception
	if b[0]&valueExceptions != 0 {
		at := uint64(0)
		for k := c.Uvarint(); k > 0 && !c.Bad; k-- {
			at += c.Uvarint()
			raw := c.Bytes(8)
			if c.Bad || at >= uint64(n) {
				c.Bad = true
				return
			}
			exceptions = append(exceptions, exception{int(at), math.Float64frombits(binary.LittleEndian.Uint64(raw))})
		}
	}
	s.ints = c.column(s.ints[:0], n, f.circumference(), &s.rice)
	if c.Bad {
		return
	}
	for i, k := range s.ints {
		put(i, f.value(k))
	}
	for _, e := range exceptions {
		put(e.at, e.v)
	}
}

// scratch is what decoding one block after the other needs again.
type scratch struct {
	ints, more []int64
	rice       []uint64
	readings   []sensors.Reading // of a window, station by station
}
