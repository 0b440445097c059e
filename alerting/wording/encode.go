package wording

import (
	"encoding/json"
	"math"
	"strconv"
	"strings"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// object writes a JSON object with its keys in the order of the calls. The
// objects of this package are a contract: encoding/json would neither fix the
// number of decimals nor refuse a value that JSON cannot hold.
type object struct{ b []byte }

func (o *object) key(k string) {
	if len(o.b) == 0 {
		o.b = append(o.b, '{')
	} else {
		o.b = append(o.b, ',')
	}
	o.b = append(o.b, '"')
	o.b = append(o.b, k...)
	o.b = append(o.b, '"', ':')
}

// end closes the object and gives its bytes.
func (o *object) end() []byte { return append(o.b, '}') }

func (o *object) raw(k string, v []byte) { o.key(k); o.b = append(o.b, v...) }
func (o *object) null(k string)          { o.raw(k, []byte("null")) }
func (o *object) text(k, v string)       { o.key(k); o.b = appendString(o.b, v) }
func (o *object) flag(k string, v bool)  { o.key(k); o.b = strconv.AppendBool(o.b, v) }
func (o *object) count(k string, v int)  { o.key(k); o.b = strconv.AppendInt(o.b, int64(v), 10) }

// fixed writes a number with so many decimals, null if it is not finite.
func (o *object) fixed(k string, v float64, decimals int) {
	o.key(k)
	o.b = appendFixed(o.b, v, decimals)
}

// knots writes a speed (m/s) in knots with one decimal.
func (o *object) knots(k string, v float64) { o.fixed(k, v/quantity.Knot, 1) }

// metres writes a length in whole metres, rounded to ten.
func (o *object) metres(k string, v float64) { o.fixed(k, roundTen(v), 0) }

// time writes an instant to the second (RFC 3339), null if it is zero.
func (o *object) time(k string, t sensors.Instant) {
	if t == 0 {
		o.null(k)
		return
	}
	o.text(k, t.Time().Format("2006-01-02T15:04:05Z"))
}

// list writes strings as an array; none as [].
func (o *object) list(k string, vs []string) {
	o.key(k)
	o.b = append(o.b, '[')
	for i, v := range vs {
		if i > 0 {
			o.b = append(o.b, ',')
		}
		o.b = appendString(o.b, v)
	}
	o.b = append(o.b, ']')
}

// appendString writes s as a JSON string. Nearly every string is plain ASCII
// and goes out as it is; the rest is encoding/json's.
func appendString(b []byte, s string) []byte {
	if plain(s) {
		b = append(b, '"')
		b = append(b, s...)
		return append(b, '"')
	}
	quoted, err := json.Marshal(s)
	if err != nil { // a string always has an encoding
		return append(b, `""`...)
	}
	return append(b, quoted...)
}

func plain(s string) bool {
	for i := range len(s) {
		switch c := s[i]; {
		case c < ' ', c > '~', c == '"', c == '\\', c == '<', c == '>', c == '&':
			return false
		}
	}
	return true
}

func appendFixed(b []byte, v float64, decimals int) []byte {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return append(b, "null"...)
	}
	return append(b, fixed(v, decimals)...)
}

// fixed is v with so many decimals; what rounds to zero has no sign.
func fixed(v float64, decimals int) string {
	s := strconv.FormatFloat(v, 'f', decimals, 64)
	if strings.HasPrefix(s, "-") && strings.Trim(s, "-0.") == "" {
		return s[1:]
	}
	return s
}

func roundTen(v float64) float64 { return float64(math.Round(v/10) * 10) }
