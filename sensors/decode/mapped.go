package decode

import (
	"errors"
	"fmt"
	"strconv"
	"strings"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// The values that a field map places.
const (
	slotSpeed = iota
	slotDirection
	slotGust
	slotTime
	slotExercise
	slotSamples
	slotCount
)

// mapping is a field map made ready: a tree of the keys that lead to values.
type mapping struct {
	root      branch            // of a document, or of each of its samples
	outer     branch            // of a document that holds samples: the way to them
	names     [slotCount]string // as configured, for messages
	speed     float64           // unit of speed, m/s
	angle     float64           // unit of direction, degrees
	toward    bool
	timeScale float64 // units a second; 0 for RFC 3339
}

// branch is a place in the JSON document that leads to values or is one.
type branch struct {
	key      string
	index    int // the key as an array index, -1 if it is none
	slots    uint8
	children []branch
}

// compile checks a field map and makes its trees. With a topic for each
// quantity there need not be one.
func compile(fields *sensors.FieldMap, topics *sensors.FieldTopics) (mapping, error) {
	m := mapping{root: branch{index: -1}, outer: branch{index: -1}, speed: 1, angle: 1}
	if fields == nil && topics != nil {
		fields = &sensors.FieldMap{}
	}
	if fields == nil {
		return m, errors.New(`format "json" needs them: at least speed and direction`)
	}
	m.names = [slotCount]string{fields.Speed, fields.Direction, fields.Gust, fields.Time, fields.Exercise, fields.Samples}
	if m.names[slotExercise] == "" {
		m.names[slotExercise] = "exercise"
	}
	if err := m.plant(topics != nil); err != nil {
		return m, err
	}
	var ok bool
	if fields.SpeedUnit != "" {
		if m.speed, ok = quantity.SpeedUnit(fields.SpeedUnit); !ok {
			return m, fmt.Errorf("speed unit %q is not known; expected m/s, km/h, kt, kn, mph or ft/s", fields.SpeedUnit)
		}
	}
	if fields.DirectionUnit != "" {
		if m.angle, ok = quantity.AngleUnit(fields.DirectionUnit); !ok {
			return m, fmt.Errorf("direction unit %q is not known; expected deg or rad", fields.DirectionUnit)
		}
	}
	switch fields.TimeFormat {
	case "", "rfc3339":
	case "unix":
		m.timeScale = 1
	case "unix-ms":
		m.timeScale = 1e3
	case "unix-us":
		m.timeScale = 1e6
	default:
		return m, fmt.Errorf("time format %q is not known; expected rfc3339, unix, unix-ms or unix-us", fields.TimeFormat)
	}
	m.toward = fields.Toward
	return m, nil
}

// plant makes the trees of the names. Each quantity on a topic of its own need
// not have a name.
func (m *mapping) plant(apart bool) error {
	if m.names[slotSamples] != "" && (apart || m.names[slotTime] == "") {
		return errors.New("samples need a time each, and one topic for all")
	}
	for slot, name := range m.names {
		if name == "" {
			if (slot == slotSpeed || slot == slotDirection) && !apart {
				return fmt.Errorf("%s is missing; give its key or its JSON Pointer", slotName(slot))
			}
			continue
		}
		path, err := pointer(name)
		if err != nil {
			return fmt.Errorf("%s: %w", slotName(slot), err)
		}
		if len(path) >= MaxDepth {
			return fmt.Errorf("%s: %q is deeper than %d levels", slotName(slot), name, MaxDepth)
		}
		if slot != slotSamples {
			m.root.place(path, slot)
		}
		// The mark of an exercise may stand beside the samples as well as in them.
		if slot == slotSamples || slot == slotExercise {
			m.outer.place(path, slot)
		}
	}
	return nil
}

// slotName is the word for a slot in messages.
func slotName(slot int) string {
	return [slotCount]string{"speed", "direction", "gust", "time", "exercise", "samples"}[slot]
}

// pointer splits a name into the keys that lead to it: a JSON Pointer (RFC
// 6901) if it starts with "/", else one key of the top object.
func pointer(name string) ([]string, error) {
	if !strings.HasPrefix(name, "/") {
		return []string{name}, nil
	}
	path := strings.Split(name[1:], "/")
	for i, key := range path {
		plain := strings.ReplaceAll(strings.ReplaceAll(key, "~0", ""), "~1", "")
		if strings.Contains(plain, "~") {
			return nil, fmt.Errorf("%q is not a JSON Pointer; \"~\" is written \"~0\" and \"/\" inside a key \"~1\"", name)
		}
		path[i] = strings.ReplaceAll(strings.ReplaceAll(key, "~1", "/"), "~0", "~") // in this order, RFC 6901 section 4
	}
	return path, nil
}

// place grows the tree by one path.
func (b *branch) place(path []string, slot int) {
	if len(path) == 0 {
		b.slots |= 1 << slot
		return
	}
	for i := range b.children {
		if b.children[i].key == path[0] {
			b.children[i].place(path[1:], slot)
			return
		}
	}
	child := branch{key: path[0], index: arrayIndex(path[0])}
	child.place(path[1:], slot)
	b.children = append(b.children, child)
}

// arrayIndex is a key as an array index, without leading zeros (RFC 6901
// section 4), or -1.
func arrayIndex(key string) int {
	index, err := strconv.Atoi(key)
	if err != nil || index < 0 || strconv.Itoa(index) != key {
		return -1
	}
	return index
}

// found is what a walk through a document collects.
type found [slotCount]token

// forget empties the slots of a branch and of everything beneath it: a
// repeated key replaces its first value whole.
func (f *found) forget(b *branch) {
	for slot := range f {
		if b.slots&(1<<slot) != 0 {
			f[slot] = token{}
		}
	}
	for i := range b.children {
		f.forget(&b.children[i])
	}
}

// take walks the value that comes next, which lies at branch b, inside depth
// containers.
func (f *found) take(s *scanner, b *branch, depth int) bool {
	var t token
	ok := true
	if c := s.space(); len(b.children) > 0 && (c == '{' || c == '[') {
		t.kind = container
		ok = f.descend(s, b, depth+1)
	} else {
		start := int32(s.pos)
		if t, ok = s.value(depth); t.kind == container {
			t.start = start
		}
	}
	if !ok {
		return false
	}
	for slot := range f {
		if b.slots&(1<<slot) != 0 {
			f[slot] = t
		}
	}
	return true
}

// descend walks the object or array that comes next and takes what the
// children of b lead to.
func (f *found) descend(s *scanner, b *branch, depth int) bool {
	if depth > MaxDepth {
		s.deep = true
		return false
	}
	object := s.data[s.pos] == '{'
	s.pos++
	closing := byte(']')
	if object {
		closing = '}'
	}
	if s.accept(closing) {
		return true
	}
	for i := 0; ; i++ {
		var child *branch
		if object {
			key, ok := s.key()
			if !ok {
				return false
			}
			child = b.childAt(s, key)
		} else {
			child = b.childIndex(i)
		}
		ok := true
		if child != nil {
			f.forget(child)
			ok = f.take(s, child, depth)
		} else {
			_, ok = s.value(depth)
		}
		if !ok {
			return false
		}
		if s.accept(closing) {
			return true
		}
		if !s.accept(',') {
			return false
		}
	}
}

// childAt is the child that an object key leads to, or nil.
func (b *branch) childAt(s *scanner, key token) *branch {
	label := s.data[key.start:key.end]
	if key.escaped { // rare enough to allocate
		label = unescape(nil, label)
	}
	for i := range b.children {
		if b.children[i].key == string(label) {
			return &b.children[i]
		}
	}
	return nil
}

// childIndex is the child that an array index leads to, or nil.
func (b *branch) childIndex(index int) *branch {
	for i := range b.children {
		if b.children[i].index == index {
			return &b.children[i]
		}
	}
	return nil
}

// mapped decodes one JSON document.
func (d *Decoder) mapped(dst []sensors.Reading, m sensors.Message, variationDeg float64) (readings []sensors.Reading, exercise bool) {
	s := scanner{data: m.Payload}
	if c := s.space(); c != '{' && c != '[' {
		d.refuse(Malformed, "a JSON object is expected; the payload begins with %s", excerpt(s.data[s.pos:]))
		return dst, false
	}
	tree := &d.mapping.root
	if d.mapping.names[slotSamples] != "" {
		tree = &d.mapping.outer
	}
	var f found
	if !f.take(&s, tree, 0) || !s.end() {
		d.notJSON(&s)
		return dst, false
	}
	if tree == &d.mapping.outer {
		return d.samples(dst, &f, m, variationDeg)
	}
	if w, ok := d.placed(&s, &f, m.Received); ok {
		if r, ok := d.reading(w, m, variationDeg); ok {
			dst = append(dst, r)
		}
	}
	return dst, marks(f[slotExercise])
}

// marks reports whether the value at the place of the exercise mark marks.
// Whatever is not plainly false does, as in SenML.
func marks(t token) bool { return t.kind > null && !(t.kind == boolean && !t.truth) }

// samples decodes the array of samples that was found in a document. The whole
// document is known to be JSON: a second walk through the array cannot fail.
func (d *Decoder) samples(dst []sensors.Reading, f *found, m sensors.Message, variationDeg float64) (readings []sensors.Reading, exercise bool) {
	exercise = marks(f[slotExercise])
	list := f[slotSamples]
	switch {
	case list.kind <= null:
		d.refuse(NoValue, "it has no samples (%q)", d.mapping.names[slotSamples])
		return dst, exercise
	case list.kind != container || m.Payload[list.start] != '[':
		d.refuse(Malformed, "samples (%q) is no array", d.mapping.names[slotSamples])
		return dst, exercise
	}
	s := scanner{data: m.Payload, pos: int(list.start) + 1}
	if s.accept(']') {
		d.refuse(NoValue, "samples (%q) is empty", d.mapping.names[slotSamples])
		return dst, exercise
	}
	for n := 0; ; n++ {
		var one found
		if n == MaxReadings {
			d.refuse(TooLarge, "there are more than %d samples; the first are taken", MaxReadings)
			return dst, exercise
		}
		if !one.take(&s, &d.mapping.root, 0) {
			d.notJSON(&s)
			return dst, exercise
		}
		exercise = exercise || marks(one[slotExercise])
		if w, ok := d.placed(&s, &one, m.Received); ok {
			if r, ok := d.reading(w, m, variationDeg); ok {
				dst = append(dst, r)
			}
		}
		if !s.accept(',') {
			return dst, exercise
		}
	}
}

// placed makes a wind of what a document holds.
func (d *Decoder) placed(s *scanner, f *found, received sensors.Instant) (w wind, ok bool) {
	names := &d.mapping.names
	speed, direction := f[slotSpeed].kind, f[slotDirection].kind
	switch {
	case speed == absent && direction == absent:
		d.refuse(NoValue, "it has neither speed (%q) nor direction (%q)", names[slotSpeed], names[slotDirection])
		return w, false
	case speed == absent:
		d.refuse(Incomplete, "it has a direction but no speed (%q)", names[slotSpeed])
		return w, false
	case direction == absent:
		d.refuse(Incomplete, "it has a speed but no direction (%q)", names[slotDirection])
		return w, false
	}
	value, ok1 := d.slot(s, f, slotSpeed)
	angle, ok2 := d.slot(s, f, slotDirection)
	if !ok1 || !ok2 {
		return w, false
	}
	if w.at, ok = d.time(s, f[slotTime], received); !ok {
		return w, false
	}
	w.speed, ok1 = d.speed("speed", value, d.mapping.speed)
	w.direction, ok2 = d.direction(angle, d.mapping.angle)
	if d.mapping.toward {
		w.direction += 180
	}
	if f[slotGust].kind > null {
		if gust, ok := d.slot(s, f, slotGust); ok {
			w.gust, w.hasGust = d.speed("gust", gust, d.mapping.speed)
		}
	}
	return w, ok1 && ok2
}

// slot reads a number, or a number written as a string.
func (d *Decoder) slot(s *scanner, f *found, slot int) (float64, bool) {
	name := d.mapping.names[slot]
	switch t := f[slot]; t.kind {
	case numeric:
		return t.number, true
	case null:
		d.refuse(NoValue, "%s (%q) is null", slotName(slot), name)
	case text:
		var b []byte
		b, d.text = s.raw(t, d.text)
		value, reason := numeral(b)
		switch reason {
		case "":
			return value, true
		case NoValue:
			d.refuse(NoValue, "%s (%q) is empty", slotName(slot), name)
		default:
			d.refuse(reason, "%s (%q) is %s; a number is expected", slotName(slot), name, excerpt(b))
		}
	default:
		d.refuse(Malformed, "%s (%q) is %s; a number is expected", slotName(slot), name, t.kind)
	}
	return 0, false
}

// time is the time of the document, or received where it has none.
func (d *Decoder) time(s *scanner, t token, received sensors.Instant) (at sensors.Instant, ok bool) {
	name := d.mapping.names[slotTime]
	if t.kind == absent || t.kind == null {
		return received, true
	}
	if d.mapping.timeScale == 0 {
		if t.kind == text {
			var b []byte
			b, d.text = s.raw(t, d.text)
			if at, ok = rfc3339(b); !ok {
				d.refuse(BadTime, "time (%q) is %s; expected RFC 3339, such as \"2026-07-01T12:00:00Z\"", name, excerpt(b))
			}
			return at, ok
		}
		d.refuse(BadTime, "time (%q) is %s; expected an RFC 3339 string", name, t.kind)
		return 0, false
	}
	count := t.number
	if t.kind == text {
		var b []byte
		var reason Reason
		b, d.text = s.raw(t, d.text)
		if count, reason = numeral(b); reason != "" {
			d.refuse(BadTime, "time (%q) is %s; a count since 1970 is expected", name, excerpt(b))
			return 0, false
		}
	} else if t.kind != numeric {
		d.refuse(BadTime, "time (%q) is %s; a count since 1970 is expected", name, t.kind)
		return 0, false
	}
	if at, ok = unixInstant(count, d.mapping.timeScale); !ok {
		d.refuse(BadTime, "time (%q) is %v; it is not between 1970 and 9999, so the unit may be wrong", name, count)
	}
	return at, ok
}
