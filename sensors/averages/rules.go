package averages

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// The rules of ICAO Annex 3 (appendix 3, 4.1 and attachment C; those of the
// calm and of 3 kt from memory). Speeds in m/s, angles in degrees.
const (
	// gustExcess: a gust is told when it exceeds the mean by 5 m/s (10 kt).
	gustExcess = 5.0
	// variableSpread: from here on the direction varies, and both extremes are
	// told, unless the wind is light or comes from half the horizon.
	variableSpread = 60.0
	wholeSpread    = 180.0
	lightBelow     = 1.5 // 3 kt
	// A marked discontinuity is a turn of 30 degrees with 5 m/s (10 kt) before
	// or after it, or a change of the speed of 5 m/s, that lasts two minutes.
	markedTurn  = 30.0
	markedSpeed = 5.0
)

// The rules of the Federal Meteorological Handbook No. 1, chapter 5 (from
// memory). The sustained wind is a mean over 2 min.
const (
	shiftTurn    = 45.0               // degrees
	shiftWithin  = 900                // s, less than 15 min
	shiftSpeed   = 10 * quantity.Knot // throughout
	shiftGrain   = 10                 // s between the means that are compared
	squallRise   = 16 * quantity.Knot
	squallSpeed  = 22 * quantity.Knot // reached, and held for a minute
	squallSpan   = 60                 // s
	squallWithin = 30                 // s that the rise itself may take: it is sudden
)

// VariationKind says how a varying direction is to be told.
type VariationKind uint8

// The ways of telling a direction.
const (
	Steadily VariationKind = iota // by its mean alone
	Between                       // by its mean and both extremes
	Variable                      // as variable, without a mean
)

// Variation of the direction.
type Variation struct {
	Kind     VariationKind
	From, To float64 // extremes, clockwise, degrees true
	Spread   float64 // from one to the other, degrees
}

// VariationRule is how ICAO Annex 3 has a direction told that varies over
// spread degrees around a mean wind of speed m/s.
func VariationRule(spread, speed float64) VariationKind {
	switch {
	case spread < variableSpread:
		return Steadily
	case spread >= wholeSpread || speed < lightBelow:
		return Variable
	}
	return Between
}

// variation is that of the 3 s vector means of the newest length seconds.
func (s *series) variation(length int, speed float64) Variation {
	directions := make([]float64, 0, length)
	s.running(length, func(_ int, v quantity.Vector, _ float64) {
		if v.Speed() >= calmBelow {
			directions = append(directions, v.From())
		}
	})
	var v Variation
	v.From, v.To, v.Spread = arc(directions)
	v.Kind = VariationRule(v.Spread, speed)
	return v
}

// Change is a change of the wind that a rule names.
type Change struct {
	At     sensors.Instant // the last second before it
	Before quantity.Vector // m/s
	After  quantity.Vector
	Turn   float64 // degrees, positive where the wind veers
	Rise   float64 // of the scalar speed, m/s, negative where it falls
}

// MarkedRule says whether ICAO Annex 3 calls a change a marked discontinuity:
// turned by turn degrees, from a speed of before m/s to one of after m/s.
func MarkedRule(turned, before, after float64) bool {
	return math.Abs(after-before) >= markedSpeed ||
		(math.Abs(turned) >= markedTurn && math.Max(before, after) >= markedSpeed)
}

// discontinuity is the newest marked one of the last ten minutes, and how many
// seconds have passed since. Abrupt and lasting mean here that the two minutes
// right before and right after it differ by that much. Where that holds for
// several moments on end, it is the one with the greatest change of the vector.
func (s *series) discontinuity() (found Change, age int, ok bool) {
	best := 0.0
	for k := localSpan; k < reportSpan; k++ {
		c, marked := s.compare(k, localSpan, k-localSpan, localSpan)
		if !marked || !MarkedRule(c.Turn, c.speedBefore, c.speedAfter) {
			if ok {
				break // older ones do not matter any more
			}
			continue
		}
		if size := math.Hypot(c.After.East-c.Before.East, c.After.North-c.Before.North); size > best {
			best, found, age, ok = size, c.Change, k, true
		}
	}
	return found, age, ok
}

// comparison is a change with its scalar speeds.
type comparison struct {
	Change
	speedBefore, speedAfter float64
}

// compare is the change between two stretches, each given by the age at which
// it begins to be newest, and its length; false if one is not there. A turn
// from or to a calm is none.
func (s *series) compare(before, beforeLength, after, afterLength int) (c comparison, ok bool) {
	var there bool
	if c.Before, c.speedBefore, there = s.mean(before, beforeLength); !there {
		return c, false
	}
	if c.After, c.speedAfter, there = s.mean(after, afterLength); !there {
		return c, false
	}
	c.At = s.instant(before)
	c.Rise = c.speedAfter - c.speedBefore
	if c.Before.Speed() >= calmBelow && c.After.Speed() >= calmBelow {
		c.Turn = turn(c.Before.From(), c.After.From())
	}
	return c, true
}

// shiftMeans is how many two-minute means a wind shift is looked for in.
const shiftMeans = shiftWithin / shiftGrain

// shift is the greatest wind shift after FMH-1: the direction of the two-minute
// mean changes by 45 degrees or more in less than 15 minutes, with 10 kt or
// more throughout. Nil if there is none.
func (s *series) shift() *Change {
	var from [shiftMeans]float64
	var strong [shiftMeans]bool
	for i := range shiftMeans {
		v, speed, ok := s.mean(i*shiftGrain, localSpan)
		strong[i] = ok && speed >= shiftSpeed
		if strong[i] {
			from[i] = v.From()
		}
	}
	best, begin, end := 0.0, 0, 0
	for e := range shiftMeans {
		for b := e + 1; strong[e] && b < shiftMeans && strong[b]; b++ {
			if d := math.Abs(turn(from[b], from[e])); d >= shiftTurn && d > best {
				best, begin, end = d, b, e
			}
		}
	}
	if best == 0 {
		return nil
	}
	c, _ := s.compare(begin*shiftGrain, localSpan, end*shiftGrain, localSpan)
	return c.Change.orNil()
}

// squall is the greatest one of the last ten minutes after FMH-1: within half a
// minute the one-minute mean rises by 16 kt or more, to 22 kt or more. Nil if
// there is none.
func (s *series) squall() *Change {
	best, before, after := 0.0, 0, 0
	for age := squallSpan; age+squallSpan <= reportSpan; age++ {
		_, low, ok := s.mean(age, squallSpan)
		for gap := 0; ok && gap <= min(squallWithin, age-squallSpan); gap += shiftGrain {
			_, high, there := s.mean(age-squallSpan-gap, squallSpan)
			if rise := high - low; there && rise >= squallRise && high >= squallSpeed && rise > best {
				best, before, after = rise, age, age-squallSpan-gap
			}
		}
	}
	if best == 0 {
		return nil
	}
	c, _ := s.compare(before, squallSpan, after, squallSpan)
	return c.Change.orNil()
}

// orNil is a copy of the change, nil if there is none.
func (c Change) orNil() *Change {
	if c == (Change{}) {
		return nil
	}
	return &c
}
