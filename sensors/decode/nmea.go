package decode

import (
	"bytes"
	"math"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// exerciseAddress is the address of sockline's own proprietary sentence, made
// by the rule of NMEA 0183 for such: "P", a maker's mnemonic, a type.
const exerciseAddress = "PSKLX"

// A sentence that gives its speed in knots and in m/s is refused when the two
// differ by more than both of these: one decimal of either unit is 0.05, and
// a gust that hits between two roundings is within a tenth.
const (
	speedsDiffer      = 0.3 // m/s
	speedsDifferShare = 0.1
)

// maxFields is the address and the twenty fields of MDA.
const maxFields = 21

// nmea decodes the sentences of a message.
func (d *Decoder) nmea(dst []sensors.Reading, m sensors.Message, variationDeg float64) (readings []sensors.Reading, exercise bool) {
	rest := m.Payload
	lines := 0
	d.xdr = transducers{}
	add := func(w wind) {
		w.at = m.Received // no sentence has a time of its own
		if len(dst) == MaxReadings {
			d.refuse(TooLarge, "more than %d winds in one message; the first are taken", MaxReadings)
		} else if r, ok := d.reading(w, m, variationDeg); ok {
			dst = append(dst, r)
		}
	}
	for len(rest) > 0 {
		end := 0
		for end < len(rest) && rest[end] != '\r' && rest[end] != '\n' {
			end++
		}
		line := bytes.TrimSpace(rest[:end])
		rest = rest[min(end+1, len(rest)):]
		if len(line) == 0 {
			continue
		}
		lines++
		w, found, marked := d.sentence(line)
		if marked {
			exercise = true
		}
		if found {
			add(w)
		}
	}
	if w, found := d.gathered(); found {
		add(w)
	}
	if lines == 0 {
		d.refuse(Malformed, "the payload is empty; NMEA 0183 sentences are expected")
	}
	return dst, exercise
}

// sentence decodes one line. found tells whether it holds a wind, exercise
// whether it marks its message as synthetic.
func (d *Decoder) sentence(line []byte) (w wind, found, exercise bool) {
	if line[0] != '$' && line[0] != '!' {
		d.refuse(Malformed, "%s is not a sentence; it must begin with \"$\"", excerpt(line))
		return w, false, false
	}
	// A marker that arrives damaged still marks: else the damage would turn an
	// exercise into live wind.
	marker := bytes.HasPrefix(line[1:], []byte(exerciseAddress))
	body, ok := d.checked(line)
	if !ok {
		return w, false, marker
	}
	if len(body) >= 5 && string(body[2:5]) == "XDR" && body[0] != 'P' {
		w, found = d.transducers(line, body[5:])
		return w, found, false
	}
	var fields [maxFields][]byte
	n := split(body, &fields)
	address := fields[0]
	switch {
	case marker:
		if n == 2 && len(fields[1]) == 1 && (fields[1][0] == '0' || fields[1][0] == '1') {
			return w, false, fields[1][0] == '1'
		}
		d.refuse(Malformed, "%s; expected \"$%s,1\" or \"$%s,0\" and a checksum", excerpt(line), exerciseAddress, exerciseAddress)
		return w, false, true
	case len(address) != 5 || address[0] == 'P':
		return w, false, false // another maker's proprietary sentence, or a query
	case string(address[2:]) == "MWV":
		w, found = d.mwv(line, fields[1:], n-1)
	case string(address[2:]) == "MWD":
		w, found = d.mwd(line, fields[1:], n-1)
	case string(address[2:]) == "MDA":
		w, found = d.mda(line, fields[1:], n-1)
	}
	return w, found, false
}

// checked verifies the checksum, the exclusive or of all bytes between the
// first and "*", and returns those bytes. It is demanded: on a serial line a
// lost byte makes another wind.
func (d *Decoder) checked(line []byte) (body []byte, ok bool) {
	star := len(line) - 3
	if star < 1 || line[star] != '*' {
		d.refuse(Checksum, "%s does not end with \"*\" and a checksum of two digits", excerpt(line))
		return nil, false
	}
	body = line[1:star]
	var sum byte
	for _, c := range body {
		sum ^= c
	}
	high, ok1 := hexDigit(line[star+1])
	low, ok2 := hexDigit(line[star+2])
	if !ok1 || !ok2 || sum != high<<4|low {
		d.refuse(Checksum, "%s: its checksum should be %02X", excerpt(line), sum)
		return nil, false
	}
	return body, true
}

// split cuts body at its commas. It returns the number of fields, of which
// those beyond the array are only counted.
func split(body []byte, fields *[maxFields][]byte) int {
	n, start := 0, 0
	for i := 0; i <= len(body); i++ {
		if i == len(body) || body[i] == ',' {
			if n < len(fields) {
				fields[n] = body[start:i]
			}
			n++
			start = i + 1
		}
	}
	return n
}

// mwv decodes "angle, R or T, speed, K or M or N or S, A or V". On a fixed
// mast the relative and the theoretical wind are the same: both angles count
// from the zero of the instrument.
func (d *Decoder) mwv(line []byte, f [][]byte, n int) (w wind, ok bool) {
	if n != 5 {
		d.refuse(Malformed, "%s has %d fields; MWV has 5", excerpt(line), n)
		return w, false
	}
	switch string(f[4]) {
	case "A":
	case "V":
		d.refuse(NotValid, "%s: the instrument says that its wind is not valid", excerpt(line))
		return w, false
	default:
		d.refuse(Malformed, "%s: status %s; expected A or V", excerpt(line), excerpt(f[4]))
		return w, false
	}
	if ref := string(f[1]); ref != "R" && ref != "T" {
		d.refuse(Malformed, "%s: reference %s; expected R or T", excerpt(line), excerpt(f[1]))
		return w, false
	}
	angle, ok1 := d.numeralIn(line, "angle", f[0])
	if !ok1 {
		return w, false
	}
	speed, ok2 := d.numeralIn(line, "speed", f[2])
	if !ok2 {
		return w, false
	}
	factor, known := mwvUnit(f[3])
	if !known {
		d.refuse(Units, "%s: unit %s; expected K (km/h), M (m/s), N (knots) or S (mph)", excerpt(line), excerpt(f[3]))
		return w, false
	}
	w.direction, ok1 = d.direction(angle, 1)
	w.speed, ok2 = d.speed("speed", speed, factor)
	return w, ok1 && ok2
}

// mwvUnit is the size in m/s of the unit that a letter of MWV stands for.
func mwvUnit(letter []byte) (factor float64, ok bool) {
	switch string(letter) {
	case "K":
		return quantity.KilometrePerHour, true
	case "M":
		return 1, true
	case "N":
		return quantity.Knot, true
	case "S":
		return quantity.MilePerHour, true
	}
	return 0, false
}

// mwd decodes "direction, T, direction, M, speed, N, speed, M": the direction
// from true and from magnetic north, the speed in knots and in m/s. Either of
// each pair may be empty; true north and m/s are preferred, since they need no
// conversion.
func (d *Decoder) mwd(line []byte, f [][]byte, n int) (w wind, ok bool) {
	if n != 8 {
		d.refuse(Malformed, "%s has %d fields; MWD has 8", excerpt(line), n)
		return w, false
	}
	return d.vane(line, f)
}

// mda decodes the wind of a meteorological composite: its last eight fields
// are those of MWD. The pressures, temperatures and humidity before them are
// passed over.
func (d *Decoder) mda(line []byte, f [][]byte, n int) (w wind, ok bool) {
	if n != 20 {
		d.refuse(Malformed, "%s has %d fields; MDA has 20", excerpt(line), n)
		return w, false
	}
	return d.vane(line, f[12:])
}

// vane decodes the eight fields that MWD and MDA share.
func (d *Decoder) vane(line []byte, f [][]byte) (w wind, ok bool) {
	var value [4]float64
	var has [4]bool
	for i, letter := range [4]byte{'T', 'M', 'N', 'M'} {
		number, unit := f[2*i], f[2*i+1]
		if len(number) == 0 {
			continue
		}
		if len(unit) != 1 || unit[0] != letter {
			d.refuse(Units, "%s: %s after %s; expected %c", excerpt(line), excerpt(unit), excerpt(number), letter)
			return w, false
		}
		if value[i], ok = d.numeralIn(line, "number", number); !ok {
			return w, false
		}
		has[i] = true
	}
	if !(has[0] || has[1]) || !(has[2] || has[3]) {
		d.refuse(NoValue, "%s has no direction or no speed", excerpt(line))
		return w, false
	}
	kt, ms := value[2]*quantity.Knot, value[3]
	if has[2] && has[3] {
		apart := math.Abs(kt - ms)
		if apart > speedsDiffer && apart > speedsDifferShare*math.Max(math.Abs(kt), math.Abs(ms)) {
			d.refuse(Contradiction, "%s: its knots are %.1f m/s and its m/s %.1f", excerpt(line), kt, ms)
			return w, false
		}
	}
	angle := value[0]
	w.north = sensors.NorthTrue
	if !has[0] {
		angle, w.north = value[1], sensors.NorthMagnetic
	}
	speed, factor := value[3], 1.0
	if !has[3] {
		speed, factor = value[2], quantity.Knot
	}
	var ok1, ok2 bool
	w.direction, ok1 = d.direction(angle, 1)
	w.speed, ok2 = d.speed("speed", speed, factor)
	return w, ok1 && ok2
}

// numeralIn reads the number in a field of a sentence. An empty one is no value, never calm.
func (d *Decoder) numeralIn(line []byte, what string, b []byte) (float64, bool) {
	value, reason := numeral(b)
	switch reason {
	case "":
		return value, true
	case NoValue:
		d.refuse(NoValue, "%s: its %s is empty", excerpt(line), what)
	default:
		d.refuse(reason, "%s: its %s is %s; a decimal number is expected", excerpt(line), what, excerpt(b))
	}
	return 0, false
}
