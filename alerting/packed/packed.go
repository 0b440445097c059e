// Package packed turns whole numbers into few bytes and back: what goes in are
// numbers that are small most of the time, such as the differences of readings
// that follow one another, what comes out is bytes for a file. Decoding trusts
// nothing: bytes that make no sense make a Reader bad, and cost no memory that
// the caller did not allow for. What the bytes mean, and the checksum over
// them, is for the packages that keep files: alerting/history and
// alerting/judged.
package packed

import (
	"math"
	"math/bits"
)

// Zigzag maps a signed number to one that is small if its size is: 0, -1, 1,
// -2 become 0, 1, 2, 3.
func Zigzag(v int64) uint64 { return uint64(v<<1) ^ uint64(v>>63) }

// Unzigzag is the inverse of Zigzag.
func Unzigzag(u uint64) int64 { return int64(u>>1) ^ -int64(u&1) }

// Rice is a code for whole numbers of which small ones are the likelier: the
// high part as so many ones and a zero, then the low bits as they are. For
// numbers that fall off as a geometric distribution does, that comes within a
// few percent of their entropy (R. F. Rice, Some Practical Universal Noiseless
// Coding Techniques, JPL Publication 79-22, 1979; from memory).
type Rice struct {
	Low int // how many low bits are written as they are, 0 to 31
	Far int // 32 or 64: the width of a number whose high part is too long
}

// farOnes is the length of the unary part that says that the number follows
// as it is, so that one far value costs a few bytes and not a page.
const farOnes = 24

// size is how many bits the numbers take.
func (c Rice) size(us []uint64) (n uint64) {
	for _, u := range us {
		if q := u >> c.Low; q < farOnes {
			n += q + 1 + uint64(c.Low)
		} else {
			n += farOnes + uint64(c.Far)
		}
	}
	return n
}

// Shortest finds the code of at most so many low bits that makes the numbers
// shortest, of several the one with the fewest, and how many bits they take.
func Shortest(us []uint64, low, far int) (best Rice, size uint64) {
	var all uint64
	for _, u := range us {
		all |= u
	}
	size = math.MaxUint64
	// More low bits than the longest number has only add zeros to each.
	for k := range min(bits.Len64(all), low) + 1 {
		c := Rice{Low: k, Far: far}
		if n := c.size(us); n < size {
			best, size = c, n
		}
	}
	return best, size
}

// Append appends the code of the numbers, the highest bit first, filled up to
// whole bytes with zeros. No number may be wider than Far.
func (c Rice) Append(dst []byte, us []uint64) []byte {
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
		if q := u >> c.Low; q < farOnes {
			push(1<<(q+1)-2, int(q)+1)
			push(u&(1<<c.Low-1), c.Low)
			continue
		}
		push(1<<farOnes-1, farOnes)
		if c.Far == 64 {
			push(u>>32, 32)
		}
		push(u&math.MaxUint32, 32)
	}
	if n > 0 {
		push(0, 8-n)
	}
	return dst
}
