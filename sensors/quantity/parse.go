package quantity

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// SpeedUnit is the size of a unit of speed in m/s, by the name that
// configuration and payloads give it: "m/s", "km/h", "kt" or "kn", "mph",
// "ft/s". SenML (RFC 8428, RFC 8798) spells the first two alike and has no
// knot, so both of the trade's spellings are taken. Names are exact: units are
// told apart by case elsewhere, and a guess at a unit is a guess at the wind.
func SpeedUnit(name string) (factor float64, ok bool) {
	switch name {
	case "m/s":
		return 1, true
	case "km/h":
		return KilometrePerHour, true
	case "kt", "kn":
		return Knot, true
	case "mph":
		return MilePerHour, true
	case "ft/s":
		return FootPerSecond, true
	}
	return 0, false
}

// AngleUnit is the size of a unit of angle in degrees: "deg" or "rad".
func AngleUnit(name string) (factor float64, ok bool) {
	switch name {
	case "deg":
		return 1, true
	case "rad":
		return 180 / math.Pi, true
	}
	return 0, false
}

// lengthUnit is the size of a unit of length in metres.
func lengthUnit(name string) (factor float64, ok bool) {
	switch name {
	case "m":
		return 1, true
	case "km":
		return 1000, true
	case "ft":
		return Foot, true
	case "NM":
		return NauticalMile, true
	}
	return 0, false
}

// durationUnit is the size of a unit of time in nanoseconds. A day is 24 h.
func durationUnit(name string) (factor float64, ok bool) {
	switch name {
	case "ms":
		return float64(time.Millisecond), true
	case "s":
		return float64(time.Second), true
	case "min":
		return float64(time.Minute), true
	case "h":
		return float64(time.Hour), true
	case "day", "days":
		return float64(24 * time.Hour), true
	}
	return 0, false
}

// ParseSpeed reads a speed such as "10 kt" and returns it in m/s. The error
// says what was expected.
func ParseSpeed(s string) (float64, error) {
	return parse(s, "a speed", `"10 kt"`, "m/s, km/h, kt, kn, mph or ft/s", SpeedUnit)
}

// ParseLength reads a length such as "5 km" and returns it in metres.
func ParseLength(s string) (float64, error) {
	return parse(s, "a length", `"500 m"`, "m, km, ft or NM", lengthUnit)
}

// ParseAngle reads an angle such as "3 deg" and returns it in degrees. It does
// not bring it into a circle: -6.1 stays -6.1.
func ParseAngle(s string) (float64, error) {
	return parse(s, "an angle", `"3 deg"`, "deg or rad", AngleUnit)
}

// ParseDuration reads a length of time such as "500 ms" or "400 days". It is
// never negative; more than about 290 years is refused, because a
// time.Duration cannot hold it.
func ParseDuration(s string) (time.Duration, error) {
	ns, err := parse(s, "a length of time", `"10 s"`, "ms, s, min, h or days", durationUnit)
	if err != nil {
		return 0, err
	}
	if ns < 0 {
		return 0, fmt.Errorf("%q is negative; a length of time such as \"10 s\" is expected", s)
	}
	if ns >= math.MaxInt64 {
		return 0, fmt.Errorf("%q is too long; at most 100000 days can be held", s)
	}
	return time.Duration(math.Round(ns)), nil
}

// parse splits s into a plain decimal number and a unit and multiplies them.
func parse(s, what, example, units string, unit func(string) (float64, bool)) (float64, error) {
	text := strings.TrimSpace(s)
	end := plainDecimal(text)
	if end == 0 {
		return 0, fmt.Errorf("%q is not %s; a plain decimal number and a unit are expected, such as %s", s, what, example)
	}
	name := strings.TrimLeft(text[end:], " ")
	if name == "" {
		return 0, fmt.Errorf("%q has no unit; %s such as %s is expected, in %s", s, what, example, units)
	}
	factor, ok := unit(name)
	if !ok {
		return 0, fmt.Errorf("%q: %q is not a unit of %s; expected %s", s, name, strings.TrimPrefix(strings.TrimPrefix(what, "a "), "an "), units)
	}
	number, err := strconv.ParseFloat(text[:end], 64)
	if err != nil {
		return 0, fmt.Errorf("%q is too large to be %s", s, what)
	}
	value := float64(number * factor)
	if math.IsInf(value, 0) {
		return 0, fmt.Errorf("%q is too large to be %s", s, what)
	}
	return value, nil
}

// plainDecimal is the length of the number that s begins with: a sign, digits,
// and a point with digits on both sides; 0 if there is none. Exponents,
// grouping, hexadecimal and words are left out because each of them has been
// somebody's typing error.
func plainDecimal(s string) int {
	i := 0
	if i < len(s) && (s[i] == '-' || s[i] == '+') {
		i++
	}
	whole := digits(s[i:])
	if whole == 0 {
		return 0
	}
	i += whole
	if i < len(s) && s[i] == '.' {
		part := digits(s[i+1:])
		if part == 0 {
			return 0
		}
		i += 1 + part
	}
	return i
}

// digits counts the decimal digits that s begins with.
func digits(s string) int {
	n := 0
	for n < len(s) && '0' <= s[n] && s[n] <= '9' {
		n++
	}
	return n
}

// Knots turns a speed in m/s into knots.
func Knots(ms float64) float64 { return ms / Knot }

// Feet turns a length in metres into feet.
func Feet(m float64) float64 { return m / Foot }
