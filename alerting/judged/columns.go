package judged

import (
	"encoding/binary"
	"errors"

	"sockline/alerting/packed"
)

// errBlock is a block that its checksum passes and that yet makes no sense.
var errBlock = errors.New("does not hold what its form promises")

// The bounds of the code of a column.
const (
	mostLow  = 15
	farWidth = 32
)

// emptyColumn stands for the low bits of a column of zeros only.
const emptyColumn = 255

// appendColumn appends values, each as the zigzag form of a signed number, with the
// number of low bits that makes it shortest: uvarint count, that number, bits.
func appendColumn(dst []byte, values []int32) []byte {
	dst = binary.AppendUvarint(dst, uint64(len(values)))
	if len(values) == 0 {
		return dst
	}
	numbers, all := make([]uint64, len(values)), uint64(0)
	for i, v := range values {
		numbers[i] = packed.Zigzag(int64(v))
		all |= numbers[i]
	}
	if all == 0 {
		return append(dst, emptyColumn)
	}
	code, _ := packed.Shortest(numbers, mostLow, farWidth)
	return code.Append(append(dst, byte(code.Low)), numbers)
}

// reader takes a block apart. After the first fault everything is zero.
type reader struct {
	packed.Reader
	numbers []uint64 // of the column before, to be used again
}

// column reads what appendColumn wrote, at most so many values.
func (r *reader) column(most int) []int32 {
	n := r.Count(most)
	if n == 0 || r.Bad {
		return nil
	}
	low := r.Byte()
	if low == emptyColumn {
		return make([]int32, n)
	}
	if low > mostLow {
		r.Bad = true
		return nil
	}
	r.numbers = r.Rice(r.numbers[:0], n, packed.Rice{Low: int(low), Far: farWidth})
	if r.Bad {
		return nil
	}
	values := make([]int32, n)
	for i, u := range r.numbers {
		values[i] = int32(packed.Unzigzag(u))
	}
	return values
}
