package decode

import (
	"math"
	"math/bits"

	"sockline/sensors"
)

// SenML, RFC 8428 (C. Jennings, Z. Shelby, J. Arkko, A. Keranen, C.
// Bormann, "Sensor Measurement Lists (SenML)", 2018), section numbers from
// memory.
const (
	senMLVersion = 10 // section 4.4

	// relativeLimit: a time below 2^28 s counts from now (section 4.5.3). It
	// is 4 July 1978 as a Unix time, so no measurement is mistaken.
	relativeLimit = 1 << 28
)

// The fields of a record, section 4.
const (
	fieldBaseName = iota
	fieldBaseTime
	fieldBaseUnit
	fieldBaseValue
	fieldBaseSum
	fieldVersion
	fieldName
	fieldUnit
	fieldValue
	fieldString
	fieldBoolean
	fieldData
	fieldSum
	fieldTime
	fieldUpdate
	fieldCount

	valueFields = 1<<fieldValue | 1<<fieldString | 1<<fieldBoolean | 1<<fieldData
)

// fieldOf is the field that a key names, and the kind that its value must be.
func fieldOf(key []byte) (field int, want kind, ok bool) {
	switch string(key) {
	case "bn":
		return fieldBaseName, text, true
	case "bt":
		return fieldBaseTime, numeric, true
	case "bu":
		return fieldBaseUnit, text, true
	case "bv":
		return fieldBaseValue, numeric, true
	case "bs":
		return fieldBaseSum, numeric, true
	case "bver":
		return fieldVersion, numeric, true
	case "n":
		return fieldName, text, true
	case "u":
		return fieldUnit, text, true
	case "v":
		return fieldValue, numeric, true
	case "vs":
		return fieldString, text, true
	case "vb":
		return fieldBoolean, boolean, true
	case "vd":
		return fieldData, text, true
	case "s":
		return fieldSum, numeric, true
	case "t":
		return fieldTime, numeric, true
	case "ut":
		return fieldUpdate, numeric, true
	}
	return 0, absent, false
}

// pack is the state of a walk through a SenML pack: the base fields in force.
type pack struct {
	scan      scanner
	count     int // records begun
	name      []byte
	unit      []byte
	time      float64
	value     float64
	sum       float64
	version   float64
	fields    [fieldCount]token // of the record at hand, where present says so
	present   uint32            // bit set of fields
	unitSpace []byte            // room for an escaped unit
	record    record            // the one at hand, resolved
}

// record is a resolved record (section 4.6): the base fields are applied and
// gone. Its slices are good until the next one.
type record struct {
	name   []byte
	unit   []byte
	time   float64 // s, relative to now when below relativeLimit
	value  token   // numeric, boolean or text; absent if there is only a sum, or nothing
	sum    token
	update token
}

// senML decodes a pack in JSON or CBOR. The two differ in how the fields of a
// record are written; what the fields mean is the same.
func (d *Decoder) senML(dst []sensors.Reading, m sensors.Message, variationDeg float64) (readings []sensors.Reading, exercise bool) {
	d.groups = d.groups[:0]
	each := func(p *pack, r *record) {
		if d.collect(p, r, m.Received) {
			exercise = true
		}
	}
	// Two plain calls: through a function value each would be allocated.
	var ok bool
	if d.station.Format == sensors.FormatSenMLCBOR {
		ok = d.recordsCBOR(m.Payload, each)
	} else {
		ok = d.records(m.Payload, each)
	}
	if !ok {
		return dst, false
	}
	for i := range d.groups {
		if w, ok := d.joined(&d.groups[i]); ok {
			if r, ok := d.reading(w, m, variationDeg); ok {
				dst = append(dst, r)
			}
		}
	}
	return dst, exercise
}

// records walks a pack and hands out its resolved records. It returns false if
// the pack must be refused: one broken record spoils it, since what else it
// says cannot be known.
func (d *Decoder) records(payload []byte, each func(*pack, *record)) bool {
	p := &d.pack
	p.begin(payload)
	d.names = d.names[:0]
	if !p.scan.accept('[') {
		if p.scan.end() {
			d.refuse(Malformed, "the payload is empty; an array of SenML records is expected")
		} else if looksLikeCBOR(payload) {
			d.refuse(Malformed, "a SenML pack in JSON is expected and this looks like CBOR; the format would be \"senml+cbor\"")
		} else {
			d.refuse(Malformed, "a SenML pack is an array of records; it begins with %s", excerpt(payload[p.scan.pos:]))
		}
		return false
	}
	for more := !p.scan.accept(']'); more; {
		p.count++
		if !d.fields(p) || !d.record(p) {
			return false
		}
		each(p, &p.record)
		switch {
		case p.scan.accept(','):
		case p.scan.accept(']'):
			more = false
		default:
			d.notJSON(&p.scan)
			return false
		}
	}
	if !p.scan.end() {
		d.notJSON(&p.scan)
		return false
	}
	return true
}

// begin starts a walk with nothing in force.
func (p *pack) begin(data []byte) {
	p.scan = scanner{data: data}
	p.count = 0
	p.name, p.unit = p.name[:0], p.unit[:0]
	p.time, p.value, p.sum, p.version = 0, 0, 0, senMLVersion
}

// record resolves the record at hand into p.record. It returns false if the
// whole pack must be refused, which is then on record.
func (d *Decoder) record(p *pack) bool {
	if values := bits.OnesCount32(p.present & valueFields); values > 1 {
		d.refuse(Contradiction, "record %d has %d values; a record has one", p.count, values)
		return false
	}
	if p.has(fieldVersion) {
		version := p.fields[fieldVersion].number
		if version > senMLVersion || version < 1 || version != math.Trunc(version) {
			d.refuse(NotUnderstood, "record %d: version %v; versions 1 to %d are understood", p.count, version, senMLVersion)
			return false
		}
		if p.count > 1 && version != p.version {
			d.refuse(Contradiction, "record %d: version %v after version %v in one pack", p.count, version, p.version)
			return false
		}
		p.version = version
	}
	d.bases(p)
	return d.resolve(p)
}

// has reports whether the record at hand holds the field.
func (p *pack) has(field int) bool { return p.present&(1<<field) != 0 }

// fields scans the object of the record at hand.
func (d *Decoder) fields(p *pack) bool {
	p.present = 0
	if !p.scan.accept('{') {
		d.refuse(Malformed, "record %d is not an object: %s", p.count, excerpt(p.scan.data[p.scan.pos:]))
		return false
	}
	if p.scan.accept('}') {
		return true
	}
	for {
		key, ok := p.scan.key()
		if !ok {
			d.notJSON(&p.scan)
			return false
		}
		value, ok := p.scan.value(2)
		if !ok {
			d.notJSON(&p.scan)
			return false
		}
		var label []byte
		label, d.text = p.scan.raw(key, d.text)
		if field, want, known := fieldOf(label); known {
			if !d.field(p, label, field, want, value) {
				return false
			}
		} else if !d.mayPass(p, label) {
			return false
		}
		switch {
		case p.scan.accept('}'):
			return true
		case !p.scan.accept(','):
			d.notJSON(&p.scan)
			return false
		}
	}
}

// mayPass reports whether a field that is not known may be passed over; if not,
// that is on record.
func (d *Decoder) mayPass(p *pack, label []byte) bool {
	if len(label) == 0 || label[len(label)-1] != '_' {
		return true
	}
	// Section 4.4: such a field changes the meaning of the rest.
	d.refuse(NotUnderstood, "record %d: field %s must be understood and is not known", p.count, excerpt(label))
	return false
}

// field checks the kind of a field and keeps it. Where a key is repeated the
// last one counts.
func (d *Decoder) field(p *pack, label []byte, field int, want kind, value token) bool {
	switch {
	case value.kind != want:
		d.refuse(Malformed, "record %d: %s is %s; %s is expected", p.count, excerpt(label), value.kind, want)
		return false
	case math.IsNaN(value.number): // CBOR can say so
		d.refuse(NotFinite, "record %d: %s is NaN", p.count, excerpt(label))
		return false
	case want == numeric && math.IsInf(value.number, 0):
		d.refuse(NotFinite, "record %d: %s is too large a number", p.count, excerpt(label))
		return false
	}
	p.fields[field] = value
	p.present |= 1 << field
	return true
}

// bases takes the base fields of the record at hand into force.
func (d *Decoder) bases(p *pack) {
	var b []byte
	if p.has(fieldBaseName) {
		b, d.text = p.scan.raw(p.fields[fieldBaseName], d.text)
		p.name = append(p.name[:0], b...)
	}
	if p.has(fieldBaseUnit) {
		b, d.text = p.scan.raw(p.fields[fieldBaseUnit], d.text)
		p.unit = append(p.unit[:0], b...)
	}
	if p.has(fieldBaseTime) {
		p.time = p.fields[fieldBaseTime].number
	}
	if p.has(fieldBaseValue) {
		p.value = p.fields[fieldBaseValue].number
	}
	if p.has(fieldBaseSum) {
		p.sum = p.fields[fieldBaseSum].number
	}
}

// resolve applies the base fields. A record that holds base fields only comes
// out without a name.
func (d *Decoder) resolve(p *pack) bool {
	p.record = record{}
	r := &p.record
	if p.present&(valueFields|1<<fieldName|1<<fieldSum) == 0 {
		return true
	}
	start := len(d.names)
	d.names = append(d.names, p.name...)
	if p.has(fieldName) {
		var b []byte
		b, d.text = p.scan.raw(p.fields[fieldName], d.text)
		d.names = append(d.names, b...)
	}
	r.name = d.names[start:]
	if !validName(r.name) {
		d.refuse(Malformed, "record %d: %s is not a SenML name: letters, digits and - : . / _, a letter or digit first",
			p.count, excerpt(r.name))
		return false
	}
	r.unit = p.unit
	if p.has(fieldUnit) {
		r.unit, p.unitSpace = p.scan.raw(p.fields[fieldUnit], p.unitSpace)
	}
	r.time = p.time
	if p.has(fieldTime) {
		r.time += p.fields[fieldTime].number
	}
	switch {
	case p.has(fieldValue):
		r.value = p.fields[fieldValue]
		r.value.number += p.value
	case p.has(fieldString):
		r.value = p.fields[fieldString]
	case p.has(fieldBoolean):
		r.value = p.fields[fieldBoolean]
	case p.has(fieldData):
		r.value = p.fields[fieldData]
	}
	if p.has(fieldSum) {
		r.sum = p.fields[fieldSum]
		r.sum.number += p.sum
	}
	if p.has(fieldUpdate) {
		r.update = p.fields[fieldUpdate]
	}
	return true
}

// validName checks the characters of section 4.5.1. Square brackets are taken
// as well, since names are made from addresses of IPv6 hosts.
func validName(name []byte) bool {
	if len(name) == 0 || !isAlphanumeric(name[0]) {
		return false
	}
	for _, c := range name {
		switch {
		case isAlphanumeric(c):
		case c == '-', c == ':', c == '.', c == '/', c == '_', c == '[', c == ']':
		default:
			return false
		}
	}
	return true
}

func isAlphanumeric(c byte) bool {
	return isDigit(c) || 'a' <= c|0x20 && c|0x20 <= 'z'
}
