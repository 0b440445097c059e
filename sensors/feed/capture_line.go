package feed

import (
	"bytes"
	"encoding/base64"
	"encoding/json"
	"errors"
	"fmt"
	"time"
	"unicode/utf8"

	"sockline/sensors"
)

// lineKind is what a line of a capture is.
type lineKind int

const (
	lineUnknown lineKind = iota
	lineHeader
	lineMessage
	lineEnd
)

// lineParser parses one line of a capture. The results are valid until the
// line is overwritten. The fast path reads what messages look like in
// practice, keys in any order and with any spacing, and gives up on everything
// else; encoding/json then decides. Whatever the fast path accepts means the
// same to encoding/json, which a fuzz test holds it to.
type lineParser struct {
	received sensors.Instant
	topic    []byte
	payload  []byte
	retained bool
	airfield string
	end      sensors.Instant

	scratch []byte // unescaped topic
	date    [10]byte
	day     int64 // ms since the epoch at the start of date
}

// parse parses a line without surrounding space. The payload is appended to
// dst and left in p.payload.
func (p *lineParser) parse(line, dst []byte) (lineKind, error) {
	if p.fast(line, dst) {
		return lineMessage, nil
	}
	return p.slow(line, dst)
}

// The keys of a message line, as bits.
const (
	keyReceived = 1 << iota
	keyTopic
	keyPayload
	keyRetained
)

// fast reads a message line and reports whether it could.
func (p *lineParser) fast(line, dst []byte) bool {
	p.retained = false
	i := skipSpace(line, 0)
	if i >= len(line) || line[i] != '{' {
		return false
	}
	seen := 0
	for {
		key, next, ok := plainString(line, skipSpace(line, i+1))
		if !ok {
			return false
		}
		i = skipSpace(line, next)
		if i >= len(line) || line[i] != ':' {
			return false
		}
		var bit int
		if bit, i = p.value(key, line, skipSpace(line, i+1), dst); bit == 0 || seen&bit != 0 {
			return false // unknown, not plain, or given twice
		}
		seen |= bit
		i = skipSpace(line, i)
		if i >= len(line) {
			return false
		}
		if line[i] == ',' {
			continue
		}
		const needed = keyReceived | keyTopic | keyPayload
		return line[i] == '}' && skipSpace(line, i+1) == len(line) && seen&needed == needed
	}
}

// value reads the value of key at i. It returns the key's bit, 0 if it could
// not, and where the value ends.
func (p *lineParser) value(key, line []byte, i int, dst []byte) (bit, next int) {
	switch string(key) { // does not allocate
	case "received":
		text, next, ok := plainString(line, i)
		if ok && p.instant(text) {
			return keyReceived, next
		}
	case "topic":
		text, next, ok := plainString(line, i)
		if !ok {
			text, next, ok = unescape(line, i, p.scratch[:0])
			p.scratch = text
		}
		if p.topic = text; ok {
			return keyTopic, next
		}
	case "payload":
		text, next, ok := unescape(line, i, dst)
		if p.payload = text; ok {
			return keyPayload, next
		}
	case "payload_b64":
		if text, next, ok := plainString(line, i); ok {
			var err error
			if p.payload, err = base64.StdEncoding.AppendDecode(dst, text); err == nil {
				return keyPayload, next
			}
		}
	case "retained":
		if rest := line[i:]; bytes.HasPrefix(rest, []byte("true")) {
			p.retained = true
			return keyRetained, i + len("true")
		} else if bytes.HasPrefix(rest, []byte("false")) {
			return keyRetained, i + len("false")
		}
	}
	return 0, i
}

func skipSpace(b []byte, i int) int {
	for i < len(b) && (b[i] == ' ' || b[i] == '\t') {
		i++
	}
	return i
}

// plainString reads a JSON string at i that has neither escapes nor control
// characters, nor anything but ASCII.
func plainString(b []byte, i int) (s []byte, next int, ok bool) {
	if i >= len(b) || b[i] != '"' {
		return nil, i, false
	}
	for j := i + 1; j < len(b); j++ {
		switch c := b[j]; {
		case c == '"':
			return b[i+1 : j], j + 1, true
		case c == '\\' || c < ' ' || c >= utf8.RuneSelf:
			return nil, i, false
		}
	}
	return nil, i, false
}

// unescape reads a JSON string at i and appends what it means to dst. It gives
// up on surrogate pairs and on anything that is not valid.
func unescape(b []byte, i int, dst []byte) (s []byte, next int, ok bool) {
	if i >= len(b) || b[i] != '"' {
		return dst, i, false
	}
	ascii := byte(0)
	for start := i + 1; ; {
		j := start
		for j < len(b) && b[j] != '"' && b[j] != '\\' && b[j] >= ' ' {
			ascii |= b[j]
			j++
		}
		if j >= len(b) || b[j] < ' ' {
			return dst, i, false
		}
		dst = append(dst, b[start:j]...)
		if b[j] == '"' {
			return dst, j + 1, ascii < utf8.RuneSelf || utf8.Valid(b[i:j])
		}
		if j+1 >= len(b) {
			return dst, i, false
		}
		start = j + 2
		switch c := b[j+1]; c {
		case '"', '\\', '/':
			dst = append(dst, c)
		case 'n':
			dst = append(dst, '\n')
		case 'r':
			dst = append(dst, '\r')
		case 't':
			dst = append(dst, '\t')
		case 'b':
			dst = append(dst, '\b')
		case 'f':
			dst = append(dst, '\f')
		case 'u':
			r, good := hexRune(b[start:])
			if !good {
				return dst, i, false
			}
			dst = utf8.AppendRune(dst, r)
			start += 4
		default:
			return dst, i, false
		}
	}
}

// hexRune reads four hexadecimal digits that are not half of a surrogate pair.
func hexRune(b []byte) (rune, bool) {
	if len(b) < 4 {
		return 0, false
	}
	var r rune
	for _, c := range b[:4] {
		r <<= 4
		switch {
		case c >= '0' && c <= '9':
			r |= rune(c - '0')
		case c|0x20 >= 'a' && c|0x20 <= 'f':
			r |= rune(c|0x20-'a') + 10
		default:
			return 0, false
		}
	}
	return r, utf8.ValidRune(r)
}

// instant reads an RFC 3339 time in UTC, written with Z, into p.received, cut
// to the millisecond. It keeps the day, which is nearly always that of the
// line before.
func (p *lineParser) instant(b []byte) bool {
	const shape = "2006-01-02T15:04:05"
	if len(b) < len(shape)+1 || b[len(b)-1] != 'Z' || b[10] != 'T' || b[13] != ':' || b[16] != ':' {
		return false
	}
	if [10]byte(b[:10]) != p.date {
		day, err := time.Parse(time.DateOnly, string(b[:10]))
		if err != nil {
			return false
		}
		p.date, p.day = [10]byte(b[:10]), day.UnixMilli()
	}
	hour, ok1 := twoDigits(b[11:])
	minute, ok2 := twoDigits(b[14:])
	second, ok3 := twoDigits(b[17:])
	if !ok1 || !ok2 || !ok3 || hour > 23 || minute > 59 || second > 59 {
		return false
	}
	ms := int64(0)
	if fraction := b[len(shape) : len(b)-1]; len(fraction) > 0 {
		if len(fraction) < 2 || len(fraction) > 10 || fraction[0] != '.' {
			return false
		}
		scale := int64(100)
		for _, c := range fraction[1:] {
			if c < '0' || c > '9' {
				return false
			}
			ms += int64(c-'0') * scale
			scale /= 10
		}
	}
	p.received = sensors.Instant(p.day + (hour*3600+minute*60+second)*1000 + ms)
	return true
}

func twoDigits(b []byte) (int64, bool) {
	tens, ones := b[0]-'0', b[1]-'0'
	return int64(tens)*10 + int64(ones), tens <= 9 && ones <= 9
}

// slow reads any line with encoding/json.
func (p *lineParser) slow(line, dst []byte) (lineKind, error) {
	if !utf8.Valid(line) {
		return lineUnknown, errors.New("it is not UTF-8: write such a payload as payload_b64")
	}
	var v struct {
		Capture    *int    `json:"capture"`
		Airfield   string  `json:"airfield"`
		Received   *string `json:"received"`
		Topic      *string `json:"topic"`
		Payload    *string `json:"payload"`
		PayloadB64 *string `json:"payload_b64"`
		Retained   bool    `json:"retained"`
		End        *string `json:"end"`
	}
	if err := json.Unmarshal(line, &v); err != nil {
		return lineUnknown, fmt.Errorf("%w: a capture holds one JSON object a line", err)
	}
	switch {
	case v.Capture != nil:
		if *v.Capture != captureVersion {
			return lineUnknown, fmt.Errorf("the capture has version %d: this program reads version %d", *v.Capture, captureVersion)
		}
		p.airfield = v.Airfield
		return lineHeader, nil
	case v.End != nil && v.Received == nil:
		end, err := parseInstant("end", *v.End)
		p.end = end
		return lineEnd, err
	case v.Received == nil:
		return lineUnknown, errors.New(`"received" is missing: give the time of arrival, such as "2026-07-01T12:00:00.120Z"`)
	case v.Topic == nil:
		return lineUnknown, errors.New(`"topic" is missing: give the topic of the message`)
	case (v.Payload == nil) == (v.PayloadB64 == nil):
		return lineUnknown, errors.New(`give the payload once, either as "payload" or as "payload_b64"`)
	}
	received, err := parseInstant("received", *v.Received)
	if err != nil {
		return lineUnknown, err
	}
	p.received, p.topic, p.retained = received, append(p.scratch[:0], *v.Topic...), v.Retained
	p.scratch = p.topic
	if v.Payload != nil {
		p.payload = append(dst, *v.Payload...)
		return lineMessage, nil
	}
	if p.payload, err = base64.StdEncoding.AppendDecode(dst, []byte(*v.PayloadB64)); err != nil {
		return lineUnknown, fmt.Errorf(`"payload_b64": %w: write it in the standard alphabet with padding (RFC 4648 section 4)`, err)
	}
	return lineMessage, nil
}

// parseInstant reads an RFC 3339 time with any offset, cut to the millisecond.
func parseInstant(key, s string) (sensors.Instant, error) {
	t, err := time.Parse(time.RFC3339Nano, s)
	if err != nil {
		return 0, fmt.Errorf("%q is %q: write it as 2026-07-01T12:00:00.120Z", key, s)
	}
	return sensors.At(t), nil
}
