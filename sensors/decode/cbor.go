package decode

import (
	"encoding/binary"
	"errors"
	"math"
	"strconv"
	"unicode/utf8"

	"github.com/fxamacker/cbor/v2"
)

// SenML CBOR, RFC 8428 section 6 (from memory): the labels are integers, base
// fields negative; strings have a definite length; numbers are integers,
// floats of any width or decimal fractions (tag 4); extensions use text labels.

// The major types and a few values of CBOR, RFC 8949 section 3 (C. Bormann, P.
// Hoffman, "Concise Binary Object Representation (CBOR)", 2020; from memory).
const (
	majorUnsigned = iota
	majorNegative
	majorBytes
	majorText
	majorArray
	majorMap
	majorTag
	majorOther

	stopCode   = 0xff // ends what has no length
	tagDecimal = 4    // [exponent, mantissa], base ten
	tagSelf    = 55799
)

// newCBOR is the check for well-formedness. What nests deeper than MaxDepth is
// not walked into at all.
func newCBOR() (cbor.DecMode, error) {
	return cbor.DecOptions{MaxNestedLevels: MaxDepth}.DecMode()
}

// looksLikeCBOR tells a pack in CBOR, an array of maps, from text.
func looksLikeCBOR(payload []byte) bool {
	return len(payload) > 1 && payload[0]>>5 == majorArray && payload[1]>>5 == majorMap
}

// fieldOfNumber is the field that an integer label names, and the kind that
// its value must be (RFC 8428, table 4).
func fieldOfNumber(label float64) (field int, want kind, ok bool) {
	switch label {
	case -1:
		return fieldVersion, numeric, true
	case -2:
		return fieldBaseName, text, true
	case -3:
		return fieldBaseTime, numeric, true
	case -4:
		return fieldBaseUnit, text, true
	case -5:
		return fieldBaseValue, numeric, true
	case -6:
		return fieldBaseSum, numeric, true
	case 0:
		return fieldName, text, true
	case 1:
		return fieldUnit, text, true
	case 2:
		return fieldValue, numeric, true
	case 3:
		return fieldString, text, true
	case 4:
		return fieldBoolean, boolean, true
	case 5:
		return fieldSum, numeric, true
	case 6:
		return fieldTime, numeric, true
	case 7:
		return fieldUpdate, numeric, true
	case 8:
		return fieldData, octets, true
	}
	return 0, absent, false
}

// recordsCBOR walks a pack and hands out its resolved records, like records.
func (d *Decoder) recordsCBOR(payload []byte, each func(*pack, *record)) bool {
	p := &d.pack
	p.begin(payload)
	d.names = d.names[:0]
	if !d.wellFormed(payload) {
		return false
	}
	s := &p.scan
	major, count, endless := s.head()
	if major == majorTag && count == tagSelf { // "self-described CBOR", which says nothing more
		major, count, endless = s.head()
	}
	if major != majorArray {
		d.refuse(Malformed, "a SenML pack is an array of records; this is CBOR of another kind")
		return false
	}
	for ; count > 0 || endless; count-- {
		if endless && s.stop() {
			break
		}
		p.count++
		if !d.fieldsCBOR(p) || !d.record(p) {
			return false
		}
		each(p, &p.record)
	}
	return true
}

// wellFormed reports whether the whole payload is one item of CBOR; if not,
// that is on record. The walk after it relies on that for every length.
func (d *Decoder) wellFormed(payload []byte) bool {
	err := d.cbor.Wellformed(payload)
	var deep *cbor.MaxNestedLevelError
	switch {
	case err == nil:
		return true
	case errors.As(err, &deep):
		d.refuse(TooLarge, "nested deeper than %d levels", MaxDepth)
	case len(payload) == 0:
		d.refuse(Malformed, "the payload is empty; an array of SenML records in CBOR is expected")
	case payload[0] == '[' || payload[0] == '{':
		d.refuse(Malformed, "CBOR is expected and this looks like JSON, %s; the format would be \"senml+json\"", excerpt(payload))
	default:
		d.refuse(Malformed, "not CBOR: %v", err)
	}
	return false
}

// fieldsCBOR reads the map of the record at hand.
func (d *Decoder) fieldsCBOR(p *pack) bool {
	p.present = 0
	s := &p.scan
	major, count, endless := s.head()
	if major != majorMap {
		d.refuse(Malformed, "record %d is not a map", p.count)
		return false
	}
	for ; count > 0 || endless; count-- {
		if endless && s.stop() {
			break
		}
		key, keyOK := s.item()
		value, valueOK := s.item()
		if !keyOK || !valueOK {
			d.refuse(Malformed, "record %d: a string in it has no definite length or is not UTF-8", p.count)
			return false
		}
		var label []byte
		var field int
		var want kind
		var known bool
		switch key.kind {
		case numeric:
			field, want, known = fieldOfNumber(key.number)
			label = strconv.AppendFloat(d.text[:0], key.number, 'f', -1, 64)
			d.text = label
		case text: // extensions, and what was turned from JSON word by word
			label = s.data[key.start:key.end]
			if field, want, known = fieldOf(label); known && field == fieldData {
				want = octets
			}
		}
		if known {
			if !d.field(p, label, field, want, value) {
				return false
			}
		} else if !d.mayPass(p, label) {
			return false
		}
	}
	return true
}

// The scanner's CBOR side. The payload is known to be well-formed, so that
// every length fits.

// head reads the head of the item that comes next: its major type and its
// argument, which is endless where the stop code ends the item.
func (s *scanner) head() (major byte, argument uint64, endless bool) {
	first := s.data[s.pos]
	s.pos++
	major = first >> 5
	switch low := first & 0x1f; low {
	case 24:
		argument = uint64(s.data[s.pos])
		s.pos++
	case 25:
		argument = uint64(binary.BigEndian.Uint16(s.data[s.pos:]))
		s.pos += 2
	case 26:
		argument = uint64(binary.BigEndian.Uint32(s.data[s.pos:]))
		s.pos += 4
	case 27:
		argument = binary.BigEndian.Uint64(s.data[s.pos:])
		s.pos += 8
	case 31:
		return major, 0, true
	default:
		argument = uint64(low)
	}
	return major, argument, false
}

// stop takes the stop code if it comes next.
func (s *scanner) stop() bool {
	if s.data[s.pos] != stopCode {
		return false
	}
	s.pos++
	return true
}

// item reads the item that comes next. ok is false if a string in it is not as
// RFC 8428 demands.
func (s *scanner) item() (t token, ok bool) {
	first := s.data[s.pos]
	major, argument, endless := s.head()
	switch major {
	case majorUnsigned:
		return token{kind: numeric, number: float64(argument)}, true
	case majorNegative:
		return token{kind: numeric, number: -1 - float64(argument)}, true
	case majorBytes, majorText:
		if endless {
			return t, false
		}
		t.kind = octets
		if major == majorText {
			t.kind = text
		}
		t.start = int32(s.pos)
		s.pos += int(argument)
		t.end = int32(s.pos)
		return t, major == majorBytes || utf8.Valid(s.data[t.start:t.end])
	case majorArray:
		return token{kind: container}, s.items(argument, endless)
	case majorMap:
		return token{kind: container}, s.items(2*argument, endless)
	case majorTag:
		if argument == tagDecimal {
			return s.decimal()
		}
		_, ok = s.item()
		return token{kind: container}, ok // a tag changes what its content means
	}
	return simple(first, argument), true
}

// items steps over the items of a container.
func (s *scanner) items(count uint64, endless bool) bool {
	for ; count > 0 || endless; count-- {
		if endless && s.stop() {
			return true
		}
		if _, ok := s.item(); !ok {
			return false
		}
	}
	return true
}

// simple is the value of an item of major type 7.
func simple(first byte, argument uint64) token {
	switch first & 0x1f {
	case 20, 21:
		return token{kind: boolean, truth: first&1 == 1}
	case 22, 23: // null and undefined
		return token{kind: null}
	case 25:
		return token{kind: numeric, number: half(uint16(argument))}
	case 26:
		return token{kind: numeric, number: float64(math.Float32frombits(uint32(argument)))}
	case 27:
		return token{kind: numeric, number: math.Float64frombits(argument)}
	}
	return token{kind: container} // a simple value that nobody has defined
}

// half is a float of 16 bits (IEEE 754 binary16; RFC 8949 appendix D).
func half(bits uint16) float64 {
	exponent, mantissa := int(bits>>10&0x1f), float64(bits&0x3ff)
	var value float64
	switch {
	case exponent == 0:
		value = math.Ldexp(mantissa, -24)
	case exponent < 31:
		value = math.Ldexp(mantissa+1024, exponent-25)
	case mantissa == 0:
		value = math.Inf(1)
	default:
		return math.NaN()
	}
	if bits&0x8000 != 0 {
		return -value
	}
	return value
}

// decimal reads the content of tag 4, an array of exponent and mantissa. The
// nearest float64 comes out, as from the same number in JSON.
func (s *scanner) decimal() (t token, ok bool) {
	start := s.pos
	if major, count, endless := s.head(); major == majorArray && count == 2 && !endless {
		major, size, _ := s.head()
		if major <= majorNegative && size < 400 { // beyond, it is zero or infinite
			if mantissa, base, _ := s.head(); mantissa <= majorNegative {
				text := make([]byte, 0, 32)
				if mantissa == majorNegative {
					if base == math.MaxUint64 {
						return token{kind: container}, true // -2^64 has no place in base+1
					}
					text, base = append(text, '-'), base+1
				}
				text = append(strconv.AppendUint(text, base, 10), 'e')
				exponent := int64(size)
				if major == majorNegative {
					exponent = -1 - exponent
				}
				text = strconv.AppendInt(text, exponent, 10)
				number, _ := strconv.ParseFloat(string(text), 64) // ±Inf when out of range, refused later
				return token{kind: numeric, number: number}, true
			}
		}
	}
	s.pos = start
	_, ok = s.item()
	return token{kind: container}, ok
}
