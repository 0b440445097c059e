package decode

import "unicode/utf8"

// kind is what a JSON value is.
type kind uint8

const (
	absent kind = iota
	null
	boolean
	numeric
	text
	octets // a byte string, in CBOR only
	container
)

// String names the kind for a Detail.
func (k kind) String() string {
	switch k {
	case null:
		return "null"
	case boolean:
		return "a boolean"
	case numeric:
		return "a number"
	case text:
		return "a string"
	case octets:
		return "a byte string"
	case container:
		return "an object or array"
	}
	return "absent"
}

// token is one value of JSON or CBOR. Of a container only the kind and the
// place are kept.
type token struct {
	kind       kind
	truth      bool  // of a boolean
	escaped    bool  // the text holds backslash escapes
	start, end int32 // of the text, without its quotes; start of a container; MaxPayload fits
	number     float64
}

// scanner walks JSON (RFC 8259) from front to back without copying. It is as
// strict as encoding/json, which is its oracle in the fuzz tests, and knows no
// more than the decoders need.
type scanner struct {
	data []byte
	pos  int
	deep bool // it gave up because of MaxDepth
}

// space skips white space and returns the byte after it, or 0 at the end.
func (s *scanner) space() byte {
	for s.pos < len(s.data) {
		switch c := s.data[s.pos]; c {
		case ' ', '\t', '\n', '\r':
			s.pos++
		default:
			return c
		}
	}
	return 0
}

// accept takes the byte c if it comes next after white space.
func (s *scanner) accept(c byte) bool {
	if s.pos < len(s.data) && s.data[s.pos] == c { // mostly there is no space
		s.pos++
		return true
	}
	return s.acceptAfterSpace(c)
}

func (s *scanner) acceptAfterSpace(c byte) bool {
	if s.space() != c || s.pos >= len(s.data) {
		return false
	}
	s.pos++
	return true
}

// end reports whether only white space is left.
func (s *scanner) end() bool {
	s.space()
	return s.pos == len(s.data)
}

// value reads the value that comes next; depth counts the containers around
// it. ok is false if it is not JSON.
func (s *scanner) value(depth int) (t token, ok bool) {
	switch c := s.space(); c {
	case '"':
		return s.string()
	case '{', '[':
		return token{kind: container}, s.skip(depth + 1)
	case 't':
		return token{kind: boolean, truth: true}, s.word("true")
	case 'f':
		return token{kind: boolean}, s.word("false")
	case 'n':
		return token{kind: null}, s.word("null")
	default:
		value, end, ok := number(s.data, s.pos, true)
		if !ok {
			return t, false
		}
		s.pos = end
		return token{kind: numeric, number: value}, true
	}
}

// word takes a literal name.
func (s *scanner) word(w string) bool {
	if len(s.data)-s.pos < len(w) || string(s.data[s.pos:s.pos+len(w)]) != w {
		return false
	}
	s.pos += len(w)
	return true
}

// string reads the string that comes next.
func (s *scanner) string() (t token, ok bool) {
	if !s.accept('"') {
		return t, false
	}
	data, i := s.data, s.pos
	t.kind, t.start = text, int32(i)
	for i < len(data) {
		c := data[i]
		if c == '"' {
			t.end = int32(i)
			s.pos = i + 1
			return t, true
		}
		if c < ' ' {
			break
		}
		if c != '\\' {
			i++
			continue
		}
		t.escaped = true
		s.pos = i
		if !s.escape() {
			return t, false
		}
		i = s.pos
	}
	s.pos = i
	return t, false
}

// escape steps over a backslash escape.
func (s *scanner) escape() bool {
	if s.pos+1 >= len(s.data) {
		return false
	}
	switch s.data[s.pos+1] {
	case '"', '\\', '/', 'b', 'f', 'n', 'r', 't':
		s.pos += 2
		return true
	case 'u':
		if _, ok := hex4(s.data[s.pos:]); ok {
			s.pos += 6
			return true
		}
	}
	return false
}

// key reads an object key and the colon after it.
func (s *scanner) key() (t token, ok bool) {
	if t, ok = s.string(); !ok {
		return t, false
	}
	return t, s.accept(':')
}

// skip steps over a container, the depth-th of those around it and itself.
func (s *scanner) skip(depth int) bool {
	if depth > MaxDepth {
		s.deep = true
		return false
	}
	open := s.data[s.pos]
	s.pos++
	closing := byte(']')
	if open == '{' {
		closing = '}'
	}
	if s.accept(closing) {
		return true
	}
	for {
		if open == '{' {
			if _, ok := s.key(); !ok {
				return false
			}
		}
		if _, ok := s.value(depth); !ok {
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

// raw is the text of t with its escapes, if it has any, resolved into scratch.
func (s *scanner) raw(t token, scratch []byte) (b, grown []byte) {
	if !t.escaped {
		return s.data[t.start:t.end], scratch
	}
	scratch = unescape(scratch[:0], s.data[t.start:t.end])
	return scratch, scratch
}

// unescape appends b, a JSON string that was already found well-formed, with
// its escapes resolved. Half a surrogate pair becomes U+FFFD.
func unescape(dst, b []byte) []byte {
	for i := 0; i < len(b); {
		if b[i] != '\\' {
			dst = append(dst, b[i])
			i++
			continue
		}
		switch c := b[i+1]; c {
		case 'b':
			dst = append(dst, '\b')
		case 'f':
			dst = append(dst, '\f')
		case 'n':
			dst = append(dst, '\n')
		case 'r':
			dst = append(dst, '\r')
		case 't':
			dst = append(dst, '\t')
		case 'u':
			r, _ := hex4(b[i:])
			i += 6
			if 0xD800 <= r && r < 0xDC00 { // first half of a pair
				if low, ok := hex4(b[i:]); ok && 0xDC00 <= low && low < 0xE000 {
					r = (r-0xD800)<<10 + (low - 0xDC00) + 0x10000
					i += 6
				}
			}
			dst = utf8.AppendRune(dst, r) // U+FFFD for a lone half
			continue
		default: // quote, backslash, slash
			dst = append(dst, c)
		}
		i += 2
	}
	return dst
}

// hex4 reads the escape "\uXXXX" that b begins with.
func hex4(b []byte) (r rune, ok bool) {
	if len(b) < 6 || b[0] != '\\' || b[1] != 'u' {
		return 0, false
	}
	for _, c := range b[2:6] {
		digit, ok := hexDigit(c)
		if !ok {
			return 0, false
		}
		r = r<<4 | rune(digit)
	}
	return r, true
}

// hexDigit is the value of a hexadecimal digit of either case.
func hexDigit(c byte) (byte, bool) {
	switch {
	case '0' <= c && c <= '9':
		return c - '0', true
	case 'A' <= c && c <= 'F':
		return c - 'A' + 10, true
	case 'a' <= c && c <= 'f':
		return c - 'a' + 10, true
	}
	return 0, false
}

// notJSON records where and why the scanner gave up.
func (d *Decoder) notJSON(s *scanner) {
	if s.deep {
		d.refuse(TooLarge, "nested deeper than %d levels at byte %d", MaxDepth, s.pos)
		return
	}
	if s.pos >= len(s.data) {
		d.refuse(Malformed, "the JSON breaks off at its end, byte %d", s.pos)
		return
	}
	d.refuse(Malformed, "not JSON at byte %d: %s", s.pos, excerpt(s.data[s.pos:]))
}
