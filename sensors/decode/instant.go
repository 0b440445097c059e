package decode

import (
	"math"
	"time"

	"sockline/sensors"
)

// lastSecond is the end of the year 9999 as a Unix time.
const lastSecond = 253402300799

// instantOf is the instant of a SenML time in seconds. Fractions go to the
// nearest millisecond, because a decimal fraction of a second since 1970 lies
// a little beside its float64.
func instantOf(seconds float64, received sensors.Instant) (sensors.Instant, bool) {
	if !(math.Abs(seconds) <= lastSecond) {
		return 0, false
	}
	ms := sensors.Instant(math.Round(float64(seconds * 1000)))
	if seconds < relativeLimit {
		ms += received
	}
	return ms, ms >= 0
}

// unixInstant is the instant of a count of units since 1970, perSecond of them
// in a second.
func unixInstant(count, perSecond float64) (sensors.Instant, bool) {
	seconds := count / perSecond
	if !(0 <= seconds && seconds <= lastSecond) {
		return 0, false
	}
	return sensors.Instant(math.Round(count * (1000 / perSecond))), true
}

// rfc3339 reads a date-time of RFC 3339 section 5.6: "T" and "Z" of either
// case, or a space for the "T"; any fraction, cut to the millisecond; an
// offset is demanded, since local time is ambiguous twice a year. The leap
// second 60 is the first second of the next minute.
func rfc3339(b []byte) (sensors.Instant, bool) {
	if len(b) < len("2026-07-01T12:00:00Z") ||
		b[4] != '-' || b[7] != '-' || (b[10]|0x20 != 't' && b[10] != ' ') || b[13] != ':' || b[16] != ':' {
		return 0, false
	}
	ok := true
	field := func(from, to, least, most int) int {
		n := 0
		for _, c := range b[from:to] {
			if !isDigit(c) {
				ok = false
				return 0
			}
			n = n*10 + int(c-'0')
		}
		ok = ok && least <= n && n <= most
		return n
	}
	year, month, day := field(0, 4, 1970, 9999), field(5, 7, 1, 12), field(8, 10, 1, 31)
	hour, minute, second := field(11, 13, 0, 23), field(14, 16, 0, 59), field(17, 19, 0, 60)
	i, ms := 19, 0
	if b[i] == '.' {
		start := i + 1
		for i = start; i < len(b) && isDigit(b[i]); i++ {
			if i < start+3 {
				ms = ms*10 + int(b[i]-'0')
			}
		}
		if i == start {
			return 0, false
		}
		for n := i - start; n < 3; n++ {
			ms *= 10
		}
	}
	offset := 0
	switch rest := b[i:]; {
	case len(rest) == 1 && rest[0]|0x20 == 'z':
	case len(rest) == 6 && (rest[0] == '+' || rest[0] == '-') && rest[3] == ':':
		offset = 60*field(i+1, i+3, 0, 23) + field(i+4, i+6, 0, 59)
		if rest[0] == '-' {
			offset = -offset
		}
	default:
		return 0, false
	}
	date := time.Date(year, time.Month(month), day, hour, minute-offset, second, 0, time.UTC)
	// time.Date turns 31 April into 1 May; the days of the month are asked for
	// separately, because the offset may move the date for good reasons.
	if lastDay := time.Date(year, time.Month(month)+1, 0, 0, 0, 0, 0, time.UTC).Day(); !ok || day > lastDay {
		return 0, false
	}
	at := sensors.Instant(date.UnixMilli() + int64(ms))
	return at, at >= 0
}
