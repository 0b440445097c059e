package synthetic

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"

	"sockline/sensors/quantity"
)

// line is the rest of a statement while it is read. The first fault stays and
// empties the line, so that readers need not look at it after each word.
type line struct {
	number   int
	words    []string
	geometry Geometry
	err      error
}

func (l *line) fail(format string, args ...any) {
	if l.err == nil {
		l.err = fmt.Errorf(format, args...)
	}
	l.words = nil
}

// word takes the next word, which is a what.
func (l *line) word(what string) string {
	if len(l.words) == 0 {
		l.fail("%s is expected at the end", what)
		return ""
	}
	w := l.words[0]
	l.words = l.words[1:]
	return w
}

// accept takes the next word if it is w.
func (l *line) accept(w string) bool {
	if len(l.words) == 0 || l.words[0] != w {
		return false
	}
	l.words = l.words[1:]
	return true
}

// literal takes the word w, which must come now.
func (l *line) literal(w string) {
	if got := l.word(strconv.Quote(w)); l.err == nil && got != w {
		l.fail("%q stands where %q is expected", got, w)
	}
}

// oneOf takes a word out of a closed list.
func (l *line) oneOf(what string, list ...string) string {
	w := l.word(what)
	for _, known := range list {
		if w == known {
			return w
		}
	}
	l.fail("%q is not %s; expected %s", w, what, strings.Join(list, ", "))
	return ""
}

// quantity takes a number and a unit.
func (l *line) quantity(what string) string {
	number := l.word(what)
	return number + " " + l.word("the unit of "+what)
}

// within refuses a value out of bounds.
func (l *line) within(what string, value, low, high float64, unit string) float64 {
	if l.err == nil && !(value >= low && value <= high) {
		l.fail("%s of %g %s is out of bounds; expected %g to %g %s", what, value, unit, low, high, unit)
	}
	return value
}

func (l *line) speed(what string, low, high float64) float64 {
	value, err := quantity.ParseSpeed(l.quantity(what))
	if err != nil {
		l.fail("%w", err)
	}
	return l.within(what, value, low, high, "m/s")
}

func (l *line) length(what string, low, high float64) float64 {
	value, err := quantity.ParseLength(l.quantity(what))
	if err != nil {
		l.fail("%w", err)
	}
	return l.within(what, value, low, high, "m")
}

func (l *line) angle(what string, low, high float64) float64 {
	value, err := quantity.ParseAngle(l.quantity(what))
	if err != nil {
		l.fail("%w", err)
	}
	return l.within(what, value, low, high, "deg")
}

// direction takes a bearing in degrees true, in [0, 360).
func (l *line) direction() float64 {
	return quantity.NormalizeDegrees(l.angle("a direction", 0, 360))
}

func (l *line) duration() time.Duration {
	value, err := quantity.ParseDuration(l.quantity("a length of time"))
	if err != nil {
		l.fail("%w", err)
	}
	return value
}

// seconds takes a time since the start of the scene, or a length of time.
func (l *line) seconds() float64 {
	return l.within("a time", l.duration().Seconds(), 0, maxSceneLength.Seconds(), "s")
}

// decimal takes a plain decimal number.
func (l *line) decimal(what string, low, high float64) float64 {
	text := l.word(what)
	value, err := strconv.ParseFloat(text, 64)
	if err != nil || math.IsNaN(value) {
		l.fail("%q is not %s; a number is expected", text, what)
	}
	return l.within(what, value, low, high, "")
}

// percent takes "5 %" as 0.05.
func (l *line) percent(what string, high float64) float64 {
	value := l.decimal(what, 0, high)
	l.literal("%")
	return value / 100
}

func (l *line) span(from, to float64) Span {
	if l.err == nil && from >= to {
		l.fail("it ends at %g s, not after its begin at %g s", to, from)
	}
	return Span{From: from, To: to}
}

// place takes a PLACE.
func (l *line) place() (x, y float64) {
	if l.accept("mast") {
		return l.station()
	}
	distance := l.length("a distance", -50e3, 50e3)
	switch side := l.oneOf("a side", "before", "beyond", "east"); side {
	case "east":
		north := l.length("a distance", -50e3, 50e3)
		l.literal("north")
		return distance, north
	case "beyond":
		distance = -distance
	}
	runway := l.word("the designator of a runway end")
	offset := 0.0
	if l.accept("offset") {
		offset = l.length("the offset", -50e3, 50e3)
	}
	if l.err != nil {
		return 0, 0
	}
	x, y, err := l.geometry.Along(runway, distance, offset)
	if err != nil {
		l.fail("the place %g m before %s: %w", distance, runway, err)
	}
	return x, y
}

// station takes the id of a mast of the airfield and gives its place.
func (l *line) station() (x, y float64) {
	id := l.word("the id of a mast")
	if l.err != nil {
		return 0, 0
	}
	x, y, ok := l.geometry.Station(id)
	if !ok {
		l.fail("there is no mast %q on this airfield", id)
	}
	return x, y
}

// options reads the rest of the line as options in any order, each once, and
// refuses to go without the needed ones.
func (l *line) options(read map[string]func(), needed ...string) {
	seen := map[string]bool{}
	for len(l.words) > 0 {
		name := l.word("an option")
		reader, known := read[name]
		switch {
		case !known:
			l.fail("%q is not expected here", name)
		case seen[name]:
			l.fail("%q stands twice", name)
		default:
			seen[name] = true
			reader()
		}
	}
	for _, name := range needed {
		if l.err == nil && !seen[name] {
			l.fail("%q is missing", name)
		}
	}
}
