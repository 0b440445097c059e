package judged

import (
	"encoding/binary"
	"errors"
	"math/bits"
)

// errBlock is a block that its checksum passes and that yet makes no sense.
var errBlock = errors.New("does not hold what its form promises")

// bitWriter appends bits, the highest of a byte first.
type bitWriter struct {
	b    []byte
	room uint // free bits of the last byte
}

func (w *bitWriter) put(v uint64, n uint) {
	for n > 0 {
		if w.room == 0 {
			w.b, w.room = append(w.b, 0), 8
		}
		take := min(n, w.room)
		part := byte(v >> (n - take) & (1<<take - 1))
		w.b[len(w.b)-1] |= part << (w.room - take)
		w.room -= take
		n -= take
	}
}

// mostOnes bounds the unary part of a Rice code; a value that needs more is
// written out after so many ones.
const mostOnes = 24

// rice writes v with so many low bits: R.F. Rice, "Some practical universal
// noiseless coding techniques", JPL Publication 79-22, 1979.
func (w *bitWriter) rice(v uint64, k uint) {
	q := v >> k
	if q >= mostOnes {
		w.put(1<<mostOnes-1, mostOnes)
		w.put(v, 32)
		return
	}
	w.put(1<<q-1, uint(q))
	w.put(0, 1)
	w.put(v, k)
}

// column appends values, each as the zigzag form of a signed number, with the
// number of low bits that makes it shortest: uvarint count, that number, bits.
func appendColumn(dst []byte, values []int32) []byte {
	dst = binary.AppendUvarint(dst, uint64(len(values)))
	if len(values) == 0 {
		return dst
	}
	best, length := uint(0), ^uint64(0)
	for k := uint(0); k < 16; k++ {
		sum := uint64(0)
		for _, v := range values {
			if q := zigzag(v) >> k; q < mostOnes {
				sum += q + 1 + uint64(k)
			} else {
				sum += mostOnes + 32
			}
		}
		if sum < length {
			best, length = k, sum
		}
	}
	if allZero(values) {
		return append(dst, emptyColumn)
	}
	w := bitWriter{b: append(dst, byte(best))}
	for _, v := range values {
		w.rice(zigzag(v), best)
	}
	return w.b
}

// emptyColumn stands for the low bits of a column of zeros only.
const emptyColumn = 255

func allZero(values []int32) bool {
	for _, v := range values {
		if v != 0 {
			return false
		}
	}
	return true
}

func zigzag(v int32) uint64 { return uint64(uint32(v<<1) ^ uint32(v>>31)) }

// reader takes a block apart. After the first fault everything is zero.
type reader struct {
	b   []byte
	bad bool
}

func (r *reader) uvarint() uint64 {
	v, n := binary.Uvarint(r.b)
	if n <= 0 {
		r.bad, r.b = true, nil
		return 0
	}
	r.b = r.b[n:]
	return v
}

func (r *reader) varint() int64 {
	v, n := binary.Varint(r.b)
	if n <= 0 {
		r.bad, r.b = true, nil
		return 0
	}
	r.b = r.b[n:]
	return v
}

// count is a number of things of which each takes at least one byte or is
// bounded by most.
func (r *reader) count(most int) int {
	n := r.uvarint()
	if n > uint64(most) {
		r.bad, r.b = true, nil
		return 0
	}
	return int(n)
}

func (r *reader) byte() byte {
	if len(r.b) == 0 {
		r.bad = true
		return 0
	}
	v := r.b[0]
	r.b = r.b[1:]
	return v
}

// column reads what appendColumn wrote into dst.
func (r *reader) column(dst []int32, most int) []int32 {
	n := r.count(most)
	dst = dst[:0]
	if n == 0 || r.bad {
		return dst
	}
	k := r.byte()
	if k == emptyColumn {
		for range n {
			dst = append(dst, 0)
		}
		return dst
	}
	if k >= 16 {
		r.bad = true
		return dst
	}
	in := bitReader{b: r.b}
	for range n {
		v := in.rice(uint(k))
		dst = append(dst, int32(v>>1)^-int32(v&1))
	}
	if in.bad {
		r.bad = true
		return dst[:0]
	}
	r.b = r.b[in.used():]
	return dst
}

// bitReader holds up to 64 bits ahead.
type bitReader struct {
	b    []byte
	at   int    // of the next byte to load
	hold uint64 // bits ahead, from the top
	n    uint   // how many
	bad  bool
}

func (r *bitReader) fill() {
	for r.n <= 56 && r.at < len(r.b) {
		r.hold |= uint64(r.b[r.at]) << (56 - r.n)
		r.at++
		r.n += 8
	}
}

func (r *bitReader) rice(k uint) uint32 {
	r.fill()
	q := uint(bits.LeadingZeros64(^r.hold))
	if q >= mostOnes {
		return uint32(r.take(mostOnes, 32))
	}
	return uint32(q)<<k | uint32(r.take(q+1, k))
}

// take skips some bits and gives the next ones.
func (r *bitReader) take(skip, n uint) uint64 {
	if r.n < skip+n {
		r.bad = true
		return 0
	}
	r.hold <<= skip
	v := uint64(0)
	if n > 0 {
		v = r.hold >> (64 - n)
	}
	r.hold <<= n
	r.n -= skip + n
	return v
}

// used is how many bytes have been begun.
func (r *bitReader) used() int { return r.at - int(r.n/8) }
