package packed

import (
	"encoding/binary"
	"math/bits"
)

// Reader takes bytes apart. The first thing that does not fit makes it Bad and
// everything after it a zero.
type Reader struct {
	Left []byte // not yet read
	Bad  bool
}

// fail marks the reader as bad.
func (r *Reader) fail() { r.Bad, r.Left = true, nil }

// skip passes over the n bytes of a number; none or fewer: there was no number.
func (r *Reader) skip(n int) {
	if n <= 0 {
		r.fail()
		return
	}
	r.Left = r.Left[n:]
}

// Uvarint reads what binary.AppendUvarint wrote.
func (r *Reader) Uvarint() uint64 {
	v, n := binary.Uvarint(r.Left)
	if r.skip(n); r.Bad {
		return 0
	}
	return v
}

// Varint reads what binary.AppendVarint wrote.
func (r *Reader) Varint() int64 {
	v, n := binary.Varint(r.Left)
	if r.skip(n); r.Bad {
		return 0
	}
	return v
}

// Count reads a number of things, of which there are at most so many.
func (r *Reader) Count(most int) int {
	n := r.Uvarint()
	if n > uint64(most) {
		r.fail()
		return 0
	}
	return int(n)
}

// Byte reads one byte.
func (r *Reader) Byte() byte {
	if b := r.Bytes(1); b != nil {
		return b[0]
	}
	return 0
}

// Bytes reads the next n bytes, not copied; nil if there are fewer.
func (r *Reader) Bytes(n uint64) []byte {
	if n > uint64(len(r.Left)) {
		r.fail()
		return nil
	}
	v := r.Left[:n]
	r.Left = r.Left[n:]
	return v
}

// Rice reads n numbers of this code and appends them to dst.
func (r *Reader) Rice(dst []uint64, n int, code Rice) []uint64 {
	var (
		b    = r.Left
		k    = code.Low
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
		case q < farOnes && q+1+k <= have:
			acc <<= q + 1
			dst = append(dst, uint64(q)<<k|acc>>(64-k))
			acc <<= k
			have -= q + 1 + k
		case q >= farOnes && have >= farOnes:
			acc <<= farOnes
			have -= farOnes
			var u uint64
			for range code.Far / 8 {
				if have < 8 {
					if at == len(b) {
						r.fail()
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
			r.fail()
			return dst
		}
	}
	r.Left = b[at-have/8:]
	return dst
}
