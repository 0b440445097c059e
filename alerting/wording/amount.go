package wording

import (
	"math"
	"strconv"
	"strings"

	"sockline/alerting/airfield"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// wholeKnots is the magnitude of a speed (m/s) in whole knots; false if it is
// not finite.
func wholeKnots(v float64) (int, bool) {
	kt := math.Round(math.Abs(v) / quantity.Knot)
	if math.IsNaN(kt) || kt > 1e6 {
		return 0, false
	}
	return int(kt), true
}

// knots is the magnitude of a speed in words, without its sign.
func knots(v float64) string {
	kt, ok := wholeKnots(v)
	switch {
	case !ok:
		return "an unknown amount"
	case kt == 0:
		return "less than 1 kt"
	}
	return strconv.Itoa(kt) + " kt"
}

// about is a magnitude that is an estimate: "about 28 kt", or "at least 28 kt"
// where the change may go on beyond the observed ground.
func about(v float64, atLeast bool) string {
	kt, ok := wholeKnots(v)
	switch {
	case !ok || kt == 0:
		return knots(v)
	case atLeast:
		return "at least " + knots(v)
	}
	return "about " + knots(v)
}

// estimate is a magnitude with its interval: "about 28 kt (22 to 34)".
func estimate(v, one, other float64, atLeast bool) string {
	low, okLow := wholeKnots(min(math.Abs(one), math.Abs(other)))
	high, okHigh := wholeKnots(max(math.Abs(one), math.Abs(other)))
	middle, ok := wholeKnots(v)
	switch {
	case !ok || !okLow || !okHigh || low == high:
		return about(v, atLeast)
	case middle == 0:
		return about(v, atLeast) + " (up to " + strconv.Itoa(high) + ")"
	}
	return about(v, atLeast) + " (" + strconv.Itoa(low) + " to " + strconv.Itoa(high) + ")"
}

// clock is the time of day in UTC.
func clock(t sensors.Instant) string { return t.Time().Format("15:04:05") + " UTC" }

// mark is a point of a path from which distances are told.
type mark struct {
	name           string // "the threshold"
	before, beyond string // how a distance on either side of it is told
	beyondIt       string // the same once it has been named
}

// The marks of the two operations: an approach is thought of from the
// threshold, a take-off from where it began to roll.
func markOf(operation string) mark {
	if operation == airfield.TakeOff {
		return mark{"the start of the roll", "before the start of the roll", "from the start of the roll", "from there"}
	}
	return mark{"the threshold", "before the threshold", "beyond the threshold", "beyond it"}
}

// stretch is the ground between from and to (m before the mark, in the
// direction of flight, so from >= to), in kilometres with one decimal.
func (m mark) stretch(from, to float64) string {
	if math.IsNaN(from+to) || math.IsInf(from+to, 0) {
		return "at an unknown place"
	}
	a, b := tenths(from), tenths(to)
	switch {
	case a == 0 && b == 0:
		return "at " + m.name
	case a == b && a > 0:
		return "near " + km(a) + " km " + m.before
	case a == b:
		return "near " + km(a) + " km " + m.beyond
	case b == 0:
		return "in the last " + km(a) + " km " + m.before
	case a == 0:
		return "in the first " + km(b) + " km " + m.beyond
	case a > 0 && b > 0:
		return "between " + km(a) + " and " + km(b) + " km " + m.before
	case a < 0 && b < 0:
		return "between " + km(a) + " and " + km(b) + " km " + m.beyond
	}
	return "from " + km(a) + " km " + m.before + " to " + km(b) + " km " + m.beyondIt
}

// tenths is a length (m) in whole tenths of a kilometre, halves to the even
// one as strconv would round them.
func tenths(x float64) int { return int(math.RoundToEven(x / 100)) }

// km is the magnitude of so many tenths of a kilometre.
func km(tenths int) string { return fixed(math.Abs(float64(tenths))/10, 1) }

// and joins names as a sentence does: "a", "a and b", "a, b and c".
func and(names []string) string {
	switch len(names) {
	case 0:
		return ""
	case 1:
		return names[0]
	}
	last := len(names) - 1
	return strings.Join(names[:last], ", ") + " and " + names[last]
}
