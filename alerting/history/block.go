package history

import (
	"encoding/binary"
	"errors"
	"hash/crc32"
	"math"
	"slices"

	"sockline/alerting/packed"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// errBlock is a value that is not what was written; the caller adds the place.
var errBlock = errors.New("does not match its checksum or its format")

// blockVersion is the first byte of each sealed value.
const blockVersion = 1

// The bits of a run head; the three lowest groups hold a form each.
const (
	headFromShift = 3
	headGustShift = 6
	headHasGust   = 1 << 9
	headGustValue = 1 << 10 // a gust value follows
	headExercise  = 1 << 11
	headRetained  = 1 << 12
	headNext      = 1 << 13 // the station is that of the reading before, plus one
	headKnown     = 1<<14 - 1
)

// form says how a float64 is stored. Instruments report a few decimals of
// some unit, so nearly every value is a small whole number times a scale; one
// that is not is stored raw. A form is used only if it gives back every bit.
type form uint16

const (
	formOne form = iota
	formTenth
	formHundredth
	formThousandth
	formTenthKnot
	formHundredthKnot
	formTenthKmh
	formRaw
)

// value is the float64 that n stands for. The operations are those of the
// decoders (a decimal, then one multiplication), so that their results match.
func (f form) value(n int64) float64 {
	v := float64(n)
	switch f {
	case formTenth:
		return v / 10
	case formHundredth:
		return v / 100
	case formThousandth:
		return v / 1000
	case formTenthKnot:
		return float64(v/10) * quantity.Knot
	case formHundredthKnot:
		return float64(v/100) * quantity.Knot
	case formTenthKmh:
		return float64(v/10) * quantity.KilometrePerHour
	}
	return v
}

// count is the whole number nearest to v in this form, and whether it is v
// exactly, bit for bit.
func (f form) count(v float64) (int64, bool) {
	scaled := v
	switch f {
	case formTenth:
		scaled = v * 10
	case formHundredth:
		scaled = v * 100
	case formThousandth:
		scaled = v * 1000
	case formTenthKnot:
		scaled = v / quantity.Knot * 10
	case formHundredthKnot:
		scaled = v / quantity.Knot * 100
	case formTenthKmh:
		scaled = v / quantity.KilometrePerHour * 10
	}
	// Past 2^31 a raw value is as short; the comparison also refuses NaN.
	if !(math.Abs(scaled) < 1<<31) {
		return 0, false
	}
	n := int64(math.Round(scaled))
	return n, math.Float64bits(f.value(n)) == math.Float64bits(v)
}

// choose picks the form for v: prefer if it is exact, so that a block keeps
// one head for all its readings, else the first exact one.
func choose(v float64, prefer form) (form, int64) {
	if prefer != formRaw {
		if n, ok := prefer.count(v); ok {
			return prefer, n
		}
	}
	for f := formOne; f < formRaw; f++ {
		if n, ok := f.count(v); ok {
			return f, n
		}
	}
	return formRaw, 0
}

func appendValue(dst []byte, f form, n int64, v float64) []byte {
	if f == formRaw {
		return binary.LittleEndian.AppendUint64(dst, math.Float64bits(v))
	}
	return binary.AppendVarint(dst, n)
}

// appendReadings appends the readings of a step in their order: a count, then
// runs of readings that share a head.
func appendReadings(dst []byte, step sensors.Instant, rs []sensors.Reading) []byte {
	dst = binary.AppendUvarint(dst, uint64(len(rs)))
	var (
		speedForm, fromForm, gustForm = formHundredth, formTenth, formHundredth
		station                       = -1
		run                           []byte // bodies of the open run
		head, length                  = uint16(0), uint64(0)
		flush                         = func() {
			if length > 0 {
				dst = binary.AppendUvarint(dst, length)
				dst = binary.LittleEndian.AppendUint16(dst, head)
				dst = append(dst, run...)
			}
			run, length = run[:0], 0
		}
		speed, from, gust int64
	)
	for _, r := range rs {
		speedForm, speed = choose(r.Speed, speedForm)
		fromForm, from = choose(r.From, fromForm)
		h := uint16(speedForm) | uint16(fromForm)<<headFromShift
		if math.Float64bits(r.Gust) != 0 {
			gustForm, gust = choose(r.Gust, gustForm)
			h |= headGustValue | uint16(gustForm)<<headGustShift
		}
		h = setBit(h, headHasGust, r.HasGust)
		h = setBit(h, headExercise, r.Exercise)
		h = setBit(h, headRetained, r.Retained)
		h = setBit(h, headNext, r.Station == station+1)
		if h != head {
			flush()
			head = h
		}
		if h&headNext == 0 {
			run = binary.AppendVarint(run, int64(r.Station))
		}
		run = binary.AppendVarint(run, int64(step-r.Time))
		run = binary.AppendVarint(run, int64(r.Arrival-r.Time))
		run = appendValue(run, speedForm, speed, r.Speed)
		run = appendValue(run, fromForm, from, r.From)
		if h&headGustValue != 0 {
			run = appendValue(run, gustForm, gust, r.Gust)
		}
		station = r.Station
		length++
	}
	flush()
	return dst
}

func setBit(h, bit uint16, on bool) uint16 {
	if on {
		return h | bit
	}
	return h
}

// cursor reads a sealed value; what does not fit makes it bad.
type cursor struct{ packed.Reader }

func cursorAt(b []byte) cursor { return cursor{packed.Reader{Left: b}} }

func (c *cursor) value(f form) float64 {
	if f == formRaw {
		if b := c.Bytes(8); b != nil {
			return math.Float64frombits(binary.LittleEndian.Uint64(b))
		}
		return 0
	}
	return f.value(c.Varint())
}

// readings appends to dst what appendReadings wrote.
func (c *cursor) readings(step sensors.Instant, dst []sensors.Reading) []sensors.Reading {
	n := c.Uvarint()
	if n > uint64(len(c.Left)) { // a reading takes more than a byte: refuse before allocating
		c.Bad = true
		return dst
	}
	dst = slices.Grow(dst, int(n))
	station := -1
	for n > 0 && !c.Bad {
		length := c.Uvarint()
		headBytes := c.Bytes(2)
		if c.Bad || length == 0 || length > n {
			c.Bad = true
			return dst
		}
		head := binary.LittleEndian.Uint16(headBytes)
		if head&^uint16(headKnown) != 0 {
			c.Bad = true
			return dst
		}
		n -= length
		for ; length > 0 && !c.Bad; length-- {
			if head&headNext != 0 {
				station++
			} else {
				station = int(c.Varint())
			}
			r := sensors.Reading{
				Station:  station,
				Time:     step - sensors.Instant(c.Varint()),
				HasGust:  head&headHasGust != 0,
				Exercise: head&headExercise != 0,
				Retained: head&headRetained != 0,
			}
			r.Arrival = r.Time + sensors.Instant(c.Varint())
			r.Speed = c.value(form(head & 7))
			r.From = c.value(form(head >> headFromShift & 7))
			if head&headGustValue != 0 {
				r.Gust = c.value(form(head >> headGustShift & 7))
			}
			dst = append(dst, r)
		}
	}
	return dst
}

// appendLate appends readings that were turned away, then their reasons.
func appendLate(dst []byte, step sensors.Instant, late []LateReading) []byte {
	rs := make([]sensors.Reading, len(late))
	for i, l := range late {
		rs[i] = l.Reading
	}
	dst = appendReadings(dst, step, rs)
	for _, l := range late {
		dst = appendString(dst, l.Reason)
	}
	return dst
}

func (c *cursor) late(step sensors.Instant) []LateReading {
	rs := c.readings(step, nil)
	late := make([]LateReading, len(rs))
	for i, r := range rs {
		late[i] = LateReading{Reading: r, Reason: string(c.Bytes(c.Uvarint()))}
	}
	return late
}

func appendString[T string | []byte](dst []byte, s T) []byte {
	dst = binary.AppendUvarint(dst, uint64(len(s)))
	return append(dst, s...)
}

// seal frames a body for storing under key: version, body, CRC-32C of key,
// version and body. The checksum covers the key so that a value cannot pass
// under another one.
func seal(key, body []byte) []byte {
	out := make([]byte, 0, 1+len(body)+4)
	out = append(out, blockVersion)
	out = append(out, body...)
	return binary.BigEndian.AppendUint32(out, checksum(key, out))
}

// unseal gives the body of a sealed value, not copied.
func unseal(key, value []byte) ([]byte, error) {
	if len(value) < 5 || value[0] != blockVersion {
		return nil, errBlock
	}
	body, sum := value[:len(value)-4], value[len(value)-4:]
	if checksum(key, body) != binary.BigEndian.Uint32(sum) {
		return nil, errBlock
	}
	return body[1:], nil
}

// checksum is CRC-32C (Castagnoli), which finds every error of up to 32
// neighbouring bits.
func checksum(key, b []byte) uint32 {
	table := crc32.MakeTable(crc32.Castagnoli) // built once by the library
	return crc32.Update(crc32.Update(0, table, key), table, b)
}

// instantKey orders instants as bytes: big endian, the sign bit turned over.
func instantKey(i sensors.Instant) []byte {
	return binary.BigEndian.AppendUint64(nil, uint64(i)^(1<<63))
}

func keyInstant(b []byte) sensors.Instant {
	return sensors.Instant(binary.BigEndian.Uint64(b) ^ (1 << 63))
}

// stepKey is the key of a step: its second since the epoch, big endian.
func stepKey(step sensors.Instant) []byte {
	return binary.BigEndian.AppendUint64(nil, uint64(step/sensors.Second)^(1<<63))
}

func keyStep(b []byte) sensors.Instant {
	return sensors.Instant(binary.BigEndian.Uint64(b)^(1<<63)) * sensors.Second
}
