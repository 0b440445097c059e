package history

import (
	"encoding/binary"
	"math"
	"math/bits"
	"slices"

	"sockline/sensors"
)

// Readings of one station over some minutes are stored column by column: the
// difference from one reading to the next has a small entropy, and Rice's code
// of it comes within a few percent of that (R. F. Rice, Some Practical
// Universal Noiseless Coding Techniques, JPL Publication 79-22, 1979; from
// memory). The parameter k is the best for each column of each block.

// The ways to store a column of whole numbers; bits 5-7 of its head.
const (
	columnConstant = iota // sv: all are this number
	columnRuns            // runs of equal numbers: uv length, sv number, until all are there
	columnPlain           // sv least number; Rice's code of each above it
	columnDelta           // sv first number; Rice's code of the zigzag of each difference
	columnWrapped         // as columnDelta on a circle of a known circumference
)

// riceEscape is the length of the unary part that says that the number follows
// as it is, so that one far value costs 11 bytes and not a page.
const riceEscape = 24

// maxColumn is how many readings a block may claim to have: more than a
// station can send at 1 kHz. It bounds what a constant column makes of 2 bytes.
const maxColumn = 1 << 20

func zigzag(v int64) uint64   { return uint64(v<<1) ^ uint64(v>>63) }
func unzigzag(u uint64) int64 { return int64(u>>1) ^ -int64(u&1) }

// riceBits is how many bits Rice's code of the numbers takes.
func riceBits(us []uint64, k int) (n uint64) {
	for _, u := range us {
		if q := u >> k; q < riceEscape {
			n += q + 1 + uint64(k)
		} else {
			n += riceEscape + 64
		}
	}
	return n
}

// bestRice finds the k with the shortest code.
func bestRice(us []uint64) (k int, size uint64) {
	var all uint64
	for _, u := range us {
		all |= u
	}
	size = math.MaxUint64
	for c := range min(bits.Len64(all), 31) + 1 {
		if n := riceBits(us, c); n < size {
			k, size = c, n
		}
	}
	return k, size
}

// appendRice appends Rice's code of the numbers, the highest bit first, filled
// up to whole bytes with zeros.
func appendRice(dst []byte, us []uint64, k int) []byte {
	var (
		acc  uint64 // the lowest n bits wait
		n    int
		push = func(v uint64, width int) { // width <= 32
			acc, n = acc<<width|v, n+width
			for n >= 8 {
				n -= 8
				dst = append(dst, byte(acc>>n))
			}
		}
	)
	for _, u := range us {
		if q := u >> k; q < riceEscape {
			push(1<<(q+1)-2, int(q)+1)
			push(u&(1<<k-1), k)
			continue
		}
		push(1<<riceEscape-1, riceEscape)
		push(u>>32, 32)
		push(u&math.MaxUint32, 32)
	}
	if n > 0 {
		push(0, 8-n)
	}
	return dst
}

// rice reads n numbers of Rice's code into dst.
func (c *cursor) rice(dst []uint64, n, k int) []uint64 {
	var (
		b    = c.b
		at   = 0
		acc  uint64 // the highest have bits are the next ones
		have = 0
	)
	for range n {
		if have <= 56 {
			if at+8 <= len(b) {
				// The bits below the highest have are the true ones, too: to
				// put them there once more changes nothing.
				acc |= binary.BigEndian.Uint64(b[at:]) >> have
				whole := (64 - have) / 8
				at, have = at+whole, have+8*whole
			}
			for have <= 56 && at < len(b) {
				acc |= uint64(b[at]) << (56 - have)
				at, have = at+1, have+8
			}
		}
		q := bits.LeadingZeros64(^acc)
		switch {
		case q < riceEscape && q+1+k <= have:
			acc <<= q + 1
			dst = append(dst, uint64(q)<<k|acc>>(64-k))
			acc <<= k
			have -= q + 1 + k
		case q >= riceEscape && have >= riceEscape:
			acc <<= riceEscape
			have -= riceEscape
			var u uint64
			for range 8 {
				if have < 8 {
					if at == len(b) {
						c.bad, c.b = true, nil
						return dst
					}
					acc |= uint64(b[at]) << (56 - have)
					at++
					have += 8
				}
				u = u<<8 | acc>>56
				acc <<= 8
				have -= 8
			}
			dst = append(dst, u)
		default:
			c.bad, c.b = true, nil
			return dst
		}
	}
	c.b = b[at-have/8:]
	return dst
}

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
		delta[i] = zigzag(vs[i+1] - vs[i])
	}
	way := columnPlain
	k, size := bestRice(plain)
	if kd, n := bestRice(delta); n < size {
		way, k, size = columnDelta, kd, n
	}
	if circumference > 0 {
		wrapped := make([]uint64, len(delta))
		for i := range wrapped {
			wrapped[i] = zigzag(wrap(vs[i+1]-vs[i], circumference))
		}
		if kw, n := bestRice(wrapped); n < size {
			way, k, size, delta = columnWrapped, kw, n, wrapped
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
	head(way, k)
	if way == columnPlain {
		return appendRice(binary.AppendVarint(dst, least), plain, k)
	}
	return appendRice(binary.AppendVarint(dst, vs[0]), delta, k)
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
	b := c.bytes(1)
	if c.bad {
		return dst
	}
	way, k := int(b[0]>>5), int(b[0]&31)
	dst = slices.Grow(dst, n)
	switch way {
	case columnConstant:
		v := c.varint()
		for range n {
			dst = append(dst, v)
		}
	case columnRuns:
		for n > 0 {
			length, v := c.uvarint(), c.varint()
			if c.bad || length == 0 || length > uint64(n) {
				c.bad = true
				return dst
			}
			for range length {
				dst = append(dst, v)
			}
			n -= int(length)
		}
	case columnPlain:
		least := c.varint()
		*scratch = c.rice((*scratch)[:0], n, k)
		for _, u := range *scratch {
			dst = append(dst, least+int64(u))
		}
	case columnDelta:
		v := c.varint()
		*scratch = c.rice((*scratch)[:0], n-1, k)
		dst = append(dst, v)
		for _, u := range *scratch {
			v += unzigzag(u)
			dst = append(dst, v)
		}
	case columnWrapped:
		v := c.varint()
		*scratch = c.rice((*scratch)[:0], n-1, k)
		dst = append(dst, v)
		for _, u := range *scratch {
			v += unzigzag(u)
			if v >= circumference {
				v -= circumference
			} else if v < 0 {
				v += circumference
			}
			dst = append(dst, v)
		}
	default:
		c.bad = true
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
	b := c.bytes(1)
	if c.bad {
		return
	}
	if b[0]&^(valueExceptions|7) != 0 {
		c.bad = true
		return
	}
	f := form(b[0] & 7)
	if f == formRaw {
		raw := c.bytes(8 * uint64(n))
		for i := 0; i < n && !c.bad; i++ {
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
		for k := c.uvarint(); k > 0 && !c.bad; k-- {
			at += c.uvarint()
			raw := c.bytes(8)
			if c.bad || at >= uint64(n) {
				c.bad = true
				return
			}
			exceptions = append(exceptions, exception{int(at), math.Float64frombits(binary.LittleEndian.Uint64(raw))})
		}
	}
	s.ints = c.column(s.ints[:0], n, f.circumference(), &s.rice)
	if c.bad {
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
