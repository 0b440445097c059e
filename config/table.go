package config

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"sockline/sensors/quantity"
)

// reader gathers the problems of one configuration.
type reader struct {
	file     string
	dir      string // that relative paths start from
	src      *source
	problems Problems
}

// blame adds a problem with the value at path.
func (r *reader) blame(path, value, mend, format string, args ...any) {
	r.add(r.src.value(path), path, value, mend, format, args...)
}

func (r *reader) add(at place, path, value, mend, format string, args ...any) {
	r.problems = append(r.problems, Problem{
		File: r.file, Line: at.line, Column: at.column, Key: shown(path), Value: shown(value),
		Message: fmt.Sprintf(format, args...), Mend: mend,
	})
}

// table reads one TOML table strictly: every key is asked for by name, and
// done reports the rest.
type table struct {
	*reader
	path   string
	values map[string]any
	asked  []string
	absent bool // the table is not in the file: do not report each key of it
}

func (t *table) key(name string) string { return join(t.path, name) }

// take is the value of a key; false if it is not there.
func (t *table) take(name string) (any, bool) {
	t.asked = append(t.asked, name)
	v, ok := t.values[name]
	return v, ok
}

// missing reports a required key that is not there.
func (t *table) missing(name, example string) {
	if t.absent {
		return
	}
	t.add(t.src.key(t.path), t.key(name), "", "add "+name+" = "+example, "this key is required")
}

// mistyped reports a value of the wrong type.
func (t *table) mistyped(name, want string, v any) {
	t.blame(t.key(name), render(v), "write "+want, "%s is not what belongs here", typeName(v))
}

// done reports every key that nobody asked for.
func (t *table) done() {
	var unknown []string
	for name := range t.values {
		if !slices.Contains(t.asked, name) {
			unknown = append(unknown, name)
		}
	}
	slices.Sort(unknown)
	for _, name := range unknown {
		path := t.key(name)
		message, mend := "there is no such key here", "known keys: "+strings.Join(t.asked, ", ")
		if near := nearest(name, t.asked); near != "" {
			mend = "did you mean " + near + "?"
		}
		t.add(t.src.key(path), path, "", mend, "%s", message)
	}
}

// withoutIndices is "station.height" for "station.2.height".
func withoutIndices(path string) string {
	parts := slices.DeleteFunc(strings.Split(path, "."), func(p string) bool {
		_, err := strconv.Atoi(p)
		return err == nil
	})
	return strings.Join(parts, ".")
}

// table is the table of a key. When it is not there, an empty one is given,
// and the problem is reported if it is required.
func (t *table) table(name string, required bool) *table {
	sub := &table{reader: t.reader, path: t.key(name)}
	v, ok := t.take(name)
	if !ok {
		sub.absent = true
		if required {
			t.add(t.src.key(sub.path), sub.path, "", "add a ["+sub.path+"] table", "this table is required")
		}
		return sub
	}
	m, ok := v.(map[string]any)
	if !ok {
		t.mistyped(name, "a table: ["+name+"]", v)
		sub.absent = true
		return sub
	}
	sub.values = m
	return sub
}

// tables are the tables of an array of tables.
func (t *table) tables(name string) []*table {
	v, ok := t.take(name)
	if !ok {
		return nil
	}
	var maps []map[string]any
	switch v := v.(type) {
	case []map[string]any:
		maps = v
	case []any: // an inline list
		for _, e := range v {
			if m, ok := e.(map[string]any); ok {
				maps = append(maps, m)
			}
		}
		if len(maps) != len(v) {
			t.mistyped(name, "tables: [["+withoutIndices(t.key(name))+"]]", v)
			return nil
		}
	default:
		t.mistyped(name, "with double brackets: [["+withoutIndices(t.key(name))+"]]", v)
		return nil
	}
	subs := make([]*table, len(maps))
	for i, m := range maps {
		subs[i] = &table{reader: t.reader, path: join(t.key(name), strconv.Itoa(i)), values: m}
	}
	return subs
}

// text is a string; fallback where the key is not there. An empty fallback
// with an example makes the key required.
func (t *table) text(name, fallback, example string) (string, bool) {
	v, ok := t.take(name)
	if !ok {
		if fallback == "" && example != "" {
			t.missing(name, example)
			return "", false
		}
		return fallback, true
	}
	s, ok := v.(string)
	if !ok {
		t.mistyped(name, "text in quotes", v)
		return "", false
	}
	if i := strings.IndexFunc(s, func(r rune) bool { return r < ' ' || r == 0x7f }); i >= 0 {
		t.blame(t.key(name), s, "take it out", "control characters have no place here")
		return "", false
	}
	if example != "" && strings.TrimSpace(s) == "" {
		t.blame(t.key(name), "", "write something like "+example, "this text is empty")
		return "", false
	}
	return s, true
}

// oneOf is a string out of a few.
func (t *table) oneOf(name, fallback string, words ...string) (string, bool) {
	s, ok := t.text(name, fallback, strconv.Quote(words[0]))
	if ok && !slices.Contains(words, s) {
		t.blame(t.key(name), s, "write one of: "+strings.Join(words, ", "), "this word is not known here")
		return "", false
	}
	return s, ok
}

// truth is true or false; false where the key is not there.
func (t *table) truth(name string) bool {
	v, ok := t.take(name)
	if !ok {
		return false
	}
	b, ok := v.(bool)
	if !ok {
		t.mistyped(name, "true or false, without quotes", v)
	}
	return b
}

// measure is a kind of quantity: how a string of it is read, into which SI
// unit.
type measure struct {
	noun  string
	unit  string
	parse func(string) (float64, error)
}

func speed() measure  { return measure{"a speed", "m/s", quantity.ParseSpeed} }
func length() measure { return measure{"a length", "m", quantity.ParseLength} }
func angle() measure  { return measure{"an angle", "deg", quantity.ParseAngle} }
func span() measure {
	return measure{"a length of time", "s", func(s string) (float64, error) {
		d, err := quantity.ParseDuration(s)
		return d.Seconds(), err
	}}
}

// bare is a number without a unit; a string is not accepted for it.
func bare() measure { return measure{noun: "a number"} }

// bounds are the least and the greatest value that a key may have, as one
// would write them.
type bounds struct{ low, high string }

// quantity is a quantity in SI units within bounds: a string with a unit or a
// plain number. Where the key is not there it is the fallback, and an empty
// fallback makes the key required.
func (t *table) quantity(name string, m measure, b bounds, fallback string) (float64, bool) {
	v, ok := t.take(name)
	if !ok {
		if fallback == "" {
			t.missing(name, m.example(b))
			return 0, false
		}
		return m.must(fallback), true
	}
	var si float64
	switch v := v.(type) {
	case string:
		if m.parse == nil {
			t.mistyped(name, "a number without quotes, such as "+b.low, v)
			return 0, false
		}
		var err error
		if si, err = m.parse(v); err != nil {
			t.blame(t.key(name), v, "write "+m.noun+" such as "+m.example(b), "%v", err)
			return 0, false
		}
	case int64:
		si = float64(v)
	case float64:
		si = v
	default:
		t.mistyped(name, m.noun+" such as "+m.example(b), v)
		return 0, false
	}
	// The comparison is written so that nan fails it.
	if !(si >= m.must(b.low) && si <= m.must(b.high)) {
		t.blame(t.key(name), render(v), "write a value in this range", "%s from %s to %s belongs here", m.noun, b.low, b.high)
		return 0, false
	}
	return si, true
}

// duration is a quantity of time in whole milliseconds.
func (t *table) duration(name string, b bounds, fallback string) (time.Duration, bool) {
	s, ok := t.quantity(name, span(), b, fallback)
	return time.Duration(math.Round(s*1000)) * time.Millisecond, ok
}

func (m measure) example(b bounds) string {
	if m.parse == nil {
		return b.low
	}
	return strconv.Quote(b.low)
}

// must reads a bound or a default of this program; a test reads each of them.
func (m measure) must(s string) float64 {
	parse := m.parse
	if parse == nil {
		parse = func(s string) (float64, error) { return strconv.ParseFloat(s, 64) }
	}
	v, err := parse(s)
	if err != nil {
		panic("config: a default of the program: " + err.Error())
	}
	return v
}

// position is a list of latitude and longitude in degrees; their range is a
// matter of the airfield.
func (t *table) position(name string) (lat, lon float64, ok bool) {
	v, ok := t.take(name)
	if !ok {
		t.missing(name, "[latitude, longitude]")
		return 0, 0, false
	}
	list, ok := v.([]any)
	if !ok || len(list) != 2 {
		t.mistyped(name, "[latitude, longitude] in degrees", v)
		return 0, 0, false
	}
	var pair [2]float64
	for i, e := range list {
		switch e := e.(type) {
		case float64:
			pair[i] = e
		case int64:
			pair[i] = float64(e)
		default:
			t.blame(join(t.key(name), strconv.Itoa(i)), render(e), "write [latitude, longitude] in degrees, such as [54.0, -20.0]",
				"%s is not a number of degrees", typeName(e))
			return 0, 0, false
		}
	}
	return pair[0], pair[1], true
}

// typeName is what a value is, in words.
func typeName(v any) string {
	switch v.(type) {
	case string:
		return "text"
	case int64, float64:
		return "a number"
	case bool:
		return "true or false"
	case []any, []map[string]any:
		return "a list"
	case map[string]any:
		return "a table"
	case time.Time:
		return "a date"
	}
	return "this"
}

// render is a value as a problem quotes it.
func render(v any) string {
	switch v := v.(type) {
	case string:
		return v
	case float64:
		return strconv.FormatFloat(v, 'g', -1, 64)
	case []any:
		parts := make([]string, len(v))
		for i, e := range v {
			parts[i] = render(e)
		}
		return "[" + strings.Join(parts, ", ") + "]"
	case map[string]any:
		return "a table"
	case []map[string]any:
		return "a list of tables"
	}
	return fmt.Sprint(v)
}
