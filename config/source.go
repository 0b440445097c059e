package config

import (
	"sort"
	"strconv"
	"strings"
	"unicode/utf8"
)

// The TOML library tells where the syntax breaks, but not where a sound key
// stands. So the text is read a second time, for positions alone.

// source is a text with the places of its keys and values.
type source struct {
	text   string
	starts []int          // byte offset of each line
	keys   map[string]int // byte offset of each key or table header, by path
	values map[string]int // byte offset of each value, by path
}

// place is a line and a column, both from 1; the column counts characters.
type place struct{ line, column int }

// newSource indexes a text that the TOML library has accepted.
func newSource(text string) *source {
	s := lines(text)
	(&scanner{source: s, tables: make(map[string]int)}).document()
	return s
}

// lines is a source that knows its lines only.
func lines(text string) *source {
	s := &source{text: text, starts: []int{0}, keys: make(map[string]int), values: make(map[string]int)}
	for i := range len(text) {
		if text[i] == '\n' {
			s.starts = append(s.starts, i+1)
		}
	}
	return s
}

// at is the place of a byte offset.
func (s *source) at(offset int) place {
	offset = min(max(offset, 0), len(s.text))
	line := sort.SearchInts(s.starts, offset+1) // the number of lines begun
	return place{line, utf8.RuneCountInString(s.text[s.starts[line-1]:offset]) + 1}
}

// value is the place of the value at path, or of the nearest thing that
// stands in the text: its key, its table, the table around it, the last line.
func (s *source) value(path string) place {
	if o, ok := s.values[path]; ok {
		return s.at(o)
	}
	return s.key(path)
}

// key is the place of the key at path, or of the nearest thing around it.
func (s *source) key(path string) place {
	for path != "" {
		if o, ok := s.keys[path]; ok {
			return s.at(o)
		}
		if o, ok := s.values[path]; ok { // an element of a list has no key
			return s.at(o)
		}
		path = path[:max(strings.LastIndexByte(path, '.'), 0)]
	}
	return s.at(len(strings.TrimRight(s.text, " \t\r\n")))
}

// join is the path of key below path.
func join(path, key string) string {
	if path == "" {
		return key
	}
	return path + "." + key
}

// maxNesting bounds the depth of lists and inline tables that get places.
const maxNesting = 32

// scanner walks through TOML that is known to be sound and notes where things
// stand. On anything unexpected it moves on by a byte: it always ends, at
// worst with fewer places.
type scanner struct {
	*source
	i       int
	current string         // path of the table that the cursor is in
	tables  map[string]int // elements so far of each array of tables, by path
}

func (s *scanner) peek() byte {
	if s.i < len(s.text) {
		return s.text[s.i]
	}
	return 0
}

// skip passes over blanks, and over line ends and comments too if asked.
func (s *scanner) skip(newlines bool) {
	for s.i < len(s.text) {
		switch c := s.text[s.i]; {
		case c == ' ' || c == '\t':
			s.i++
		case newlines && (c == '\n' || c == '\r'):
			s.i++
		case newlines && c == '#':
			s.skipLine()
		default:
			return
		}
	}
}

func (s *scanner) skipLine() {
	if n := strings.IndexByte(s.text[s.i:], '\n'); n >= 0 {
		s.i += n
	} else {
		s.i = len(s.text)
	}
}

// document reads headers and key-value lines to the end.
func (s *scanner) document() {
	for {
		s.skip(true)
		if s.i >= len(s.text) {
			return
		}
		start := s.i
		if s.peek() == '[' {
			s.header()
		} else {
			s.pair(s.current, 0)
		}
		s.skipLine() // a comment may follow
		if s.i == start {
			s.i++
		}
	}
}

// header reads [table] or [[array of tables]].
func (s *scanner) header() {
	start := s.i
	s.i++
	list := s.peek() == '['
	if list {
		s.i++
	}
	parts := s.dotted()
	path := ""
	for k, part := range parts {
		path = join(path, part)
		note(s.keys, path, start)
		if list && k == len(parts)-1 {
			s.tables[path]++
		}
		// Inside an array of tables a header speaks of its last element.
		if n := s.tables[path]; n > 0 {
			path = join(path, strconv.Itoa(n-1))
			note(s.keys, path, start)
		}
	}
	s.current = path
}

// pair reads key = value inside the table at path.
func (s *scanner) pair(path string, depth int) {
	start := s.i
	for _, part := range s.dotted() {
		path = join(path, part)
		note(s.keys, path, start)
	}
	s.skip(false)
	if s.peek() != '=' {
		return
	}
	s.i++
	s.skip(false)
	s.readValue(path, depth)
}

// note keeps the first place of a path.
func note(m map[string]int, path string, offset int) {
	if _, ok := m[path]; !ok {
		m[path] = offset
	}
}

// dotted reads a key such as a."b c".d.
func (s *scanner) dotted() []string {
	var parts []string
	for {
		s.skip(false)
		switch s.peek() {
		case '"', '\'':
			parts = append(parts, s.quoted())
		default:
			start := s.i
			for s.i < len(s.text) && isBare(s.text[s.i]) {
				s.i++
			}
			parts = append(parts, s.text[start:s.i])
		}
		s.skip(false)
		if s.peek() != '.' {
			return parts
		}
		s.i++
	}
}

func isBare(c byte) bool {
	return c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' || c >= '0' && c <= '9' || c == '_' || c == '-' || c >= 0x80
}

// quoted reads a string of any of the four kinds and returns what it means,
// as far as a key needs it.
func (s *scanner) quoted() string {
	quote := s.text[s.i : s.i+1]
	if triple := strings.Repeat(quote, 3); strings.HasPrefix(s.text[s.i:], triple) {
		s.i += 3
		s.passString(triple, quote == `"`)
		for s.peek() == quote[0] { // up to two quotes may stand before the closing three
			s.i++
		}
		return ""
	}
	start := s.i
	s.i++
	s.passString(quote, quote == `"`)
	raw := s.text[start:s.i]
	if quote == `"` {
		if meaning, err := strconv.Unquote(raw); err == nil {
			return meaning
		}
	}
	return strings.Trim(raw, quote)
}

// passString moves behind the closing mark.
func (s *scanner) passString(mark string, escapes bool) {
	for s.i < len(s.text) {
		if escapes && s.text[s.i] == '\\' {
			s.i += 2
			continue
		}
		if strings.HasPrefix(s.text[s.i:], mark) {
			s.i += len(mark)
			return
		}
		s.i++
	}
	s.i = min(s.i, len(s.text))
}

// readValue moves behind a value and notes where it, its elements and the
// keys within it stand.
func (s *scanner) readValue(path string, depth int) {
	note(s.values, path, s.i)
	if depth > maxNesting {
		s.skipLine()
		return
	}
	switch s.peek() {
	case '"', '\'':
		s.quoted()
	case '[':
		s.i++
		for k := 0; s.nextElement(']'); k++ {
			start := s.i
			if s.readValue(join(path, strconv.Itoa(k)), depth+1); s.i == start {
				return
			}
		}
	case '{':
		s.i++
		for s.nextElement('}') {
			start := s.i
			if s.pair(path, depth+1); s.i == start {
				return
			}
		}
	default:
		for s.i < len(s.text) && !strings.ContainsRune(",]}#\r\n", rune(s.text[s.i])) {
			s.i++
		}
	}
}

// nextElement moves to the next element of a list or inline table; false
// behind its end.
func (s *scanner) nextElement(end byte) bool {
	s.skip(true)
	for s.peek() == ',' {
		s.i++
		s.skip(true)
	}
	if s.i < len(s.text) && s.peek() == end {
		s.i++
		return false
	}
	return s.i < len(s.text)
}
