package decode

import (
	"bytes"
	"strconv"
)

// number reads the decimal number at data[pos:]: a sign, digits, a fraction,
// an exponent. It returns the nearest float64 and where the number ends; ok is
// false if there is none. A value beyond float64 comes out infinite.
//
// Strict is the grammar of RFC 8259 section 6. Otherwise a plus sign, leading
// zeros and a point at either end are taken as well, since instruments write
// them ("017", "02.91", ".5"), and an exponent is not.
func number(data []byte, pos int, strict bool) (value float64, end int, ok bool) {
	i := pos
	negative := false
	if i < len(data) && (data[i] == '-' || (data[i] == '+' && !strict)) {
		negative = data[i] == '-'
		i++
	}
	var mantissa uint64
	whole := i
	for ; i < len(data) && isDigit(data[i]); i++ {
		mantissa = mantissa*10 + uint64(data[i]-'0') // may wrap; then unused
	}
	count := i - whole
	if strict && (count == 0 || (count > 1 && data[whole] == '0')) {
		return 0, pos, false
	}
	scale := 0
	if i < len(data) && data[i] == '.' {
		i++
		part := i
		for ; i < len(data) && isDigit(data[i]); i++ {
			mantissa = mantissa*10 + uint64(data[i]-'0')
		}
		scale = part - i
		count -= scale
		if strict && scale == 0 {
			return 0, pos, false
		}
	}
	if count == 0 {
		return 0, pos, false
	}
	exact := count <= 19 // so that mantissa has not wrapped
	if strict && i < len(data) && (data[i] == 'e' || data[i] == 'E') {
		i++
		if i < len(data) && (data[i] == '-' || data[i] == '+') {
			i++
		}
		power := i
		for i < len(data) && isDigit(data[i]) {
			i++
		}
		if i == power {
			return 0, pos, false
		}
		exact = false
	}
	// Fast path of W.D. Clinger, "How to read floating point numbers
	// accurately", PLDI 1990 (from memory): a whole number below 2^53 and a
	// power of ten up to 10^22 are both exact, so one division rounds once.
	if exact && mantissa < 1<<53 && scale >= -22 {
		power := 1.0
		for ; scale < 0; scale++ {
			power *= 10
		}
		value = float64(mantissa) / power
		if negative {
			value = -value
		}
		return value, i, true
	}
	value, _ = strconv.ParseFloat(string(data[pos:i]), 64) // ±Inf when out of range
	return value, i, true
}

// numeral reads text that should be a number and nothing else. The reason is
// empty when it is one.
func numeral(b []byte) (float64, Reason) {
	b = bytes.TrimSpace(b)
	if len(b) == 0 {
		return 0, NoValue
	}
	if value, end, ok := number(b, 0, false); ok && end == len(b) {
		return value, ""
	}
	word := bytes.TrimLeft(b, "+-")
	if bytes.EqualFold(word, []byte("nan")) || bytes.EqualFold(word, []byte("inf")) || bytes.EqualFold(word, []byte("infinity")) {
		return 0, NotFinite
	}
	return 0, Malformed
}

func isDigit(c byte) bool { return '0' <= c && c <= '9' }
