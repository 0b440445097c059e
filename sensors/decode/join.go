package decode

import (
	"bytes"
	"time"

	"sockline/sensors"
)

// JoinWithin is how far apart the arrival stamps of a speed and a direction
// may lie that come on topics of their own and belong together. A mast that
// sends twice a second cannot have its values mixed up by it, and the parts of
// one measurement leave a mast within a few milliseconds.
const JoinWithin = 500 * time.Millisecond

// piece is one quantity that waits for the others of its measurement.
type piece struct {
	held     bool
	value    float64         // m/s or degrees
	at       sensors.Instant // its own time, else its arrival
	own      bool            // it has a time of its own
	stamp    sensors.Instant // arrival
	exercise bool
	retained bool
}

// joiner puts quantities together that come on topics of their own. It is a
// pure function of the messages and their stamps, and holds three values at
// most.
type joiner struct {
	pieces [3]piece // by slot: speed, direction, gust
	gust   bool     // there is a topic for it
}

func newJoiner(topics *sensors.FieldTopics) joiner {
	return joiner{gust: topics != nil && topics.Gust != ""}
}

// pair reports whether a speed and a direction are waiting together.
func (j *joiner) pair() bool { return j.pieces[slotSpeed].held && j.pieces[slotDirection].held }

// at is when the pair that waits was measured: a time of its own beats one of
// arrival, and the earlier arrival is nearer to the measurement.
func (j *joiner) at() sensors.Instant {
	speed, direction := j.pieces[slotSpeed], j.pieces[slotDirection]
	switch {
	case speed.own:
		return speed.at
	case direction.own:
		return direction.at
	}
	return min(speed.at, direction.at)
}

// earliest is the first stamp of what is held; false if nothing is.
func (j *joiner) earliest() (stamp sensors.Instant, ok bool) {
	for _, p := range j.pieces {
		if p.held && (!ok || p.stamp < stamp) {
			stamp, ok = p.stamp, true
		}
	}
	return stamp, ok
}

// part decodes a message of one quantity.
func (d *Decoder) part(dst []sensors.Reading, m sensors.Message, variationDeg float64) []sensors.Reading {
	if first, ok := d.joiner.earliest(); ok && m.Received.Sub(first) > JoinWithin {
		dst = d.release(dst, variationDeg)
	}
	slot := slotSpeed
	switch topics := d.station.Topics; m.Topic {
	case topics.Speed:
	case topics.Direction:
		slot = slotDirection
	case topics.Gust:
		slot = slotGust
	default:
		d.refuse(Malformed, "the topic %q is none of this station's", m.Topic)
		return dst
	}
	p, ok := d.piece(slot, m)
	if !ok {
		return dst
	}
	if d.joiner.pieces[slot].held || !d.fits(p) {
		dst = d.release(dst, variationDeg)
	}
	d.joiner.pieces[slot] = p
	if d.joiner.pair() && (d.joiner.pieces[slotGust].held || !d.joiner.gust) {
		dst = d.release(dst, variationDeg)
	}
	return dst
}

// fits reports whether p may be of the measurement that waits: where both say
// when they were measured, they must agree on it.
func (d *Decoder) fits(p piece) bool {
	for _, other := range d.joiner.pieces {
		if other.held && other.own && p.own && max(p.at-other.at, other.at-p.at) > sensors.Instant(JoinWithin.Milliseconds()) {
			return false
		}
	}
	return true
}

// release makes a reading of what waits, or refuses it, and forgets it.
func (d *Decoder) release(dst []sensors.Reading, variationDeg float64) []sensors.Reading {
	j := &d.joiner
	speed, direction, gust := j.pieces[slotSpeed], j.pieces[slotDirection], j.pieces[slotGust]
	w := wind{at: j.at(), speed: speed.value, direction: direction.value}
	j.pieces = [3]piece{}
	switch {
	case !speed.held && !direction.held:
		return dst // a gust alone is no wind, and its loss no loss
	case !direction.held:
		d.refuse(Incomplete, "no direction came within %v of the speed of %s", JoinWithin, speed.stamp)
		return dst
	case !speed.held:
		d.refuse(Incomplete, "no speed came within %v of the direction of %s", JoinWithin, direction.stamp)
		return dst
	}
	m := sensors.Message{Received: max(speed.stamp, direction.stamp), Retained: speed.retained || direction.retained}
	if gust.held {
		w.gust, w.hasGust = gust.value, true
		m.Received = max(m.Received, gust.stamp)
		m.Retained = m.Retained || gust.retained
	}
	if r, ok := d.reading(w, m, variationDeg); ok {
		r.Exercise = speed.exercise || direction.exercise || gust.exercise
		dst = append(dst, r)
	}
	return dst
}

// Release gives out the reading that waits for its gust and was measured at or
// before t: the step that it belongs to is about to close. The error is as of
// Decode. It does nothing for a station with one topic.
func (d *Decoder) Release(dst []sensors.Reading, t sensors.Instant, variationDeg float64) ([]sensors.Reading, error) {
	if !d.joiner.pair() || d.joiner.at() > t {
		return dst, nil
	}
	d.faults = nil
	dst = d.release(dst, variationDeg)
	if len(d.faults) == 0 {
		return dst, nil
	}
	return dst, d.faults
}

// Waiting names the quantities that wait for the others of their measurement,
// for display; empty if none does.
func (d *Decoder) Waiting() (names []string) {
	for slot, p := range d.joiner.pieces {
		if p.held {
			names = append(names, slotName(slot))
		}
	}
	return names
}

// piece decodes the payload of one quantity: a document with a pointer into
// it, or a plain number, with or without quotes.
func (d *Decoder) piece(slot int, m sensors.Message) (p piece, ok bool) {
	p = piece{held: true, at: m.Received, stamp: m.Received, retained: m.Retained}
	var value float64
	if d.mapping.names[slot] == "" {
		value, ok = d.plain(slot, m.Payload)
	} else {
		value, ok = d.placedPiece(slot, m, &p)
	}
	if !ok {
		return p, false
	}
	if slot == slotDirection {
		p.value, ok = d.direction(value, d.mapping.angle)
		if d.mapping.toward {
			p.value += 180
		}
		return p, ok
	}
	p.value, ok = d.speed(slotName(slot), value, d.mapping.speed)
	return p, ok
}

// placedPiece reads a quantity, its time and its mark out of a document.
func (d *Decoder) placedPiece(slot int, m sensors.Message, p *piece) (value float64, ok bool) {
	s := scanner{data: m.Payload}
	var f found
	if !f.take(&s, &d.mapping.root, 0) || !s.end() {
		d.notJSON(&s)
		return 0, false
	}
	if f[slot].kind == absent {
		d.refuse(NoValue, "it has no %s (%q)", slotName(slot), d.mapping.names[slot])
		return 0, false
	}
	if value, ok = d.slot(&s, &f, slot); !ok {
		return 0, false
	}
	p.own = f[slotTime].kind > null
	p.exercise = marks(f[slotExercise])
	p.at, ok = d.time(&s, f[slotTime], m.Received)
	return value, ok
}

// plain reads a payload that is a number and nothing else.
func (d *Decoder) plain(slot int, payload []byte) (float64, bool) {
	b := bytes.TrimSpace(payload)
	if n := len(b); n >= 2 && b[0] == '"' && b[n-1] == '"' {
		b = b[1 : n-1]
	}
	value, reason := numeral(b)
	switch {
	case reason == "":
		return value, true
	case reason == NoValue || string(b) == "null":
		d.refuse(NoValue, "the %s is empty", slotName(slot))
	default:
		d.refuse(reason, "the %s is %s; a number and nothing else is expected, or a field map that says where it is", slotName(slot), excerpt(b))
	}
	return 0, false
}
