package decode

import (
	"bytes"

	"sockline/sensors/quantity"
)

// XDR, transducer measurements of NMEA 0183: any number of quadruples "type,
// value, unit, name". Angles (A, in D) and speeds (S) of one message are
// gathered until a wind is whole.

// The places of a value among the transducers of one quantity.
const (
	least = iota
	mean
	greatest
)

// transducers is what the XDR sentences of a message have said so far.
type transducers struct {
	angle, speed       [3]float64 // degrees; m/s
	hasAngle, hasSpeed [3]bool
}

// transducers decodes one XDR sentence, of which rest is what follows its
// address. A transducer that speaks a second time ends the wind before.
func (d *Decoder) transducers(line, rest []byte) (w wind, found bool) {
	if n := bytes.Count(rest, []byte(",")); n == 0 || n%4 != 0 {
		d.refuse(Malformed, "%s has %d fields; those of XDR come in fours", excerpt(line), n)
		return w, false
	}
	for len(rest) > 0 {
		var f [4][]byte
		for i := range f {
			rest = rest[1:] // the comma
			end := bytes.IndexByte(rest, ',')
			if end < 0 {
				end = len(rest)
			}
			f[i], rest = rest[:end], rest[end:]
		}
		before, ended := d.transducer(line, &f)
		if ended {
			// One reading a sentence; more would need a list, and no
			// instrument repeats a transducer in one sentence.
			w, found = before, true
		}
	}
	return w, found
}

// transducer takes one quadruple. ended tells that it begins a new wind, and
// before is the one that it ends.
func (d *Decoder) transducer(line []byte, f *[4][]byte) (before wind, ended bool) {
	place, ok := windPlace(f[3])
	if !ok || len(f[0]) != 1 {
		return before, false
	}
	x := &d.xdr
	var value float64
	switch {
	case f[0][0] == 'A' && string(f[2]) == "D":
		if value, ok = d.numeralIn(line, "angle", f[1]); !ok {
			return before, false
		}
		if value, ok = d.direction(value, 1); !ok {
			return before, false
		}
		if x.hasAngle[place] {
			before, ended = d.gathered()
		}
		x.angle[place], x.hasAngle[place] = value, true
	case f[0][0] == 'S' && len(f[2]) > 0: // without a unit it is a switch
		factor, known := mwvUnit(f[2])
		if !known {
			d.refuse(Units, "%s: unit %s; expected K (km/h), M (m/s), N (knots) or S (mph)", excerpt(line), excerpt(f[2]))
			return before, false
		}
		if value, ok = d.numeralIn(line, "speed", f[1]); !ok {
			return before, false
		}
		if value, ok = d.speed("speed", value, factor); !ok {
			return before, false
		}
		if x.hasSpeed[place] {
			before, ended = d.gathered()
		}
		x.speed[place], x.hasSpeed[place] = value, true
	}
	return before, ended
}

// windPlace tells whether the name of a transducer is one of a wind, and which
// of its values it has.
func windPlace(name []byte) (place int, ok bool) {
	if len(name) == 1 && '0' <= name[0] && name[0] <= '2' {
		return int(name[0] - '0'), true
	}
	if len(name) < 4 || !bytes.EqualFold(name[:4], []byte("WIND")) {
		return 0, false
	}
	if end := name[4:]; len(end) >= 4 && bytes.EqualFold(end[len(end)-4:], []byte("GUST")) {
		return greatest, true
	}
	return mean, true
}

// gathered makes a wind of what the transducers have said, and forgets it.
func (d *Decoder) gathered() (w wind, ok bool) {
	x := d.xdr
	d.xdr = transducers{}
	angle, hasAngle := middle(x.angle, x.hasAngle)
	speed, hasSpeed := middle(x.speed, x.hasSpeed)
	switch {
	case !hasAngle && !hasSpeed:
		return w, false
	case !hasAngle || !hasSpeed:
		d.refuse(Incomplete, "XDR gave a mean speed or a mean direction without the other")
		return w, false
	}
	w.direction, w.speed = quantity.NormalizeDegrees(angle), speed
	w.gust, w.hasGust = x.speed[greatest], x.hasSpeed[greatest] && x.hasSpeed[mean]
	return w, true
}

// middle is the mean of the three values, or the only one that there is.
func middle(value [3]float64, has [3]bool) (float64, bool) {
	if has[mean] {
		return value[mean], true
	}
	if has[least] != has[greatest] {
		if has[least] {
			return value[least], true
		}
		return value[greatest], true
	}
	return 0, false
}
