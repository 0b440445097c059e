package hazard

import (
	"math"

	"sockline/alerting"
	"sockline/alerting/front"
	"sockline/alerting/vertical"
	"sockline/sensors/quantity"
)

// Limits is what an operator has decided of the wind besides the change of the
// headwind along a path.
type Limits struct {
	WindShift float64        // turn from which on a wind shift is told, degrees; 0: none is
	Vertical  vertical.Class // class from which on a vertical shear is told; none: none is
	Crosswind float64        // m/s over two minutes; 0: none
	Tailwind  float64        // the same
}

// Detail is what an alert tells besides the size of its change. What a kind has
// no use for is zero. Speeds in m/s, angles in degrees, heights in m.
type Detail struct {
	// Of a wind shift: Turn clockwise positive, winds ahead and behind. Moving
	// says that it comes with a line that passes.
	Turn          float64         `json:",omitzero"`
	Before, After quantity.Vector `json:",omitzero"`
	Moving        bool            `json:",omitzero"`

	// Of a vertical shear, with Before below and After above; Rate per 100 ft,
	// where RateKnown.
	Lower, Upper  float64       `json:",omitzero"`
	RateKnown     bool          `json:",omitzero"`
	Rate, Neutral float64       `json:",omitzero"`
	Class         string        `json:",omitzero"`
	Sign          vertical.Sign `json:",omitzero"`

	// Of a crosswind or tailwind: the limit that it exceeds.
	Limit    float64 `json:",omitzero"`
	FromLeft bool    `json:",omitzero"`

	Mast      string  `json:",omitzero"` // that measures it, where it is one
	Variation float64 `json:",omitzero"` // magnetic, of the day, east positive
}

// Other is what one step says of one path besides loss and gain. Its size is
// measured, not estimated: Low and High are the same as Median.
type Other struct {
	Seen bool // what measures it reports; without it nothing else is meant
	// Over says that there is nothing left to measure, such as when a front has
	// gone by: its last values stand.
	Over bool
	Change
	Detail Detail
}

// set gives a measured size and the levels that it meets and holds.
func (o *Other) set(size float64, level, hold alerting.Level, probability float64) {
	o.Seen, o.Over = true, false
	o.Median, o.Low, o.High = size, size, size
	o.Level, o.HoldLevel = level, hold
	o.Probability, o.CloseProbability = [4]float64{}, [4]float64{}
	for l := alerting.Noticeable; l <= level; l++ {
		o.Probability[l] = probability
	}
	for l := alerting.Noticeable; l <= hold; l++ {
		o.CloseProbability[l] = probability
	}
}

// The rules of a wind shift. The speed is that of a marked discontinuity (ICAO
// Annex 3: 30 degrees or more with 5 m/s before or after it). From a turn of 60
// degrees on it is a large one, as for a special report (ICAO Annex 3; from
// memory).
const (
	shiftSpeed = 5.0  // m/s
	largeShift = 60.0 // degrees
	shiftHolds = 10.0 // degrees below its level
)

// JudgeShift judges the fronts whose change has come to a path; reached picks
// them. The one that turns the wind most counts.
func JudgeShift(o *Other, fronts []front.Front, reached func(*front.Front) bool, l Levels) {
	detail := Detail{Variation: o.Detail.Variation}
	best := -1
	for i := range fronts {
		f := &fronts[i]
		if !reached(f) || max(f.Before.Speed(), f.After.Speed()) < shiftSpeed {
			continue
		}
		if best < 0 || math.Abs(f.Turn) > math.Abs(fronts[best].Turn) {
			best = i
		}
	}
	if best < 0 || l.Limits.WindShift <= 0 {
		o.set(0, alerting.NoLevel, alerting.NoLevel, 0)
		o.Over = true
		return
	}
	f := &fronts[best]
	levelOf := func(slack float64) alerting.Level {
		switch turn := math.Abs(f.Turn) + slack; {
		case turn >= max(largeShift, l.Limits.WindShift):
			return alerting.Large
		case turn >= l.Limits.WindShift:
			return alerting.Noticeable
		}
		return alerting.NoLevel
	}
	o.set(f.Change.Speed(), levelOf(0), levelOf(shiftHolds), f.Confidence)
	if o.Cause = alerting.Unresolved; f.Moving && f.Kind == front.GustFront {
		o.Cause = alerting.GustFront
	}
	detail.Turn, detail.Before, detail.After, detail.Moving = f.Turn, f.Before, f.After, f.Moving
	o.Detail = detail
}

// JudgeVertical judges the shears of the columns of air beside a path; near
// picks them. Of two the stronger counts. Only what has a class can open an
// alert, strong and above unless configured otherwise; severe is a large one. It
// gives the one that counts, -1 if none.
func JudgeVertical(o *Other, shears []vertical.Shear, near func(*vertical.Shear) bool, l Levels) (best int) {
	detail := Detail{Variation: o.Detail.Variation}
	best = -1
	o.Seen = false
	for i := range shears {
		s := &shears[i]
		if s.Class == vertical.Unclassed || !near(s) {
			continue
		}
		if best < 0 || s.Rate > shears[best].Rate {
			best = i
		}
	}
	if best < 0 {
		return best
	}
	s := &shears[best]
	levelOf := func(rate float64) alerting.Level {
		switch {
		case l.Limits.Vertical == vertical.Unclassed:
			return alerting.NoLevel
		case rate >= max(vertical.Severe.Least(), l.Limits.Vertical.Least()):
			return alerting.Large
		case rate >= l.Limits.Vertical.Least():
			return alerting.Noticeable
		}
		return alerting.NoLevel
	}
	o.set(s.Difference, levelOf(s.Rate), levelOf(s.Rate+l.Hysteresis), 1)
	detail.Before, detail.After, detail.Lower, detail.Upper = s.Below, s.Above, s.LowerM, s.UpperM
	detail.RateKnown, detail.Rate, detail.Class, detail.Neutral, detail.Sign = s.RateKnown, s.Rate, s.Class.String(), s.Neutral, s.Sign
	detail.Mast = s.Place
	o.Detail = detail
	return best
}

// JudgeEnd judges the two-minute wind at a runway end, whose direction of
// flight is bearing (degrees true), against the limits of crosswind and
// tailwind. A limit that is not set has nothing to tell.
func JudgeEnd(cross, tail *Other, wind quantity.Vector, bearing float64, mast string, l Levels) {
	side := wind.CrosswindFromRight(bearing)
	against := func(o *Other, size, limit float64) {
		level, hold := alerting.NoLevel, alerting.NoLevel
		if limit > 0 && size >= limit {
			level = alerting.Noticeable
		}
		if limit > 0 && size >= limit-l.Hysteresis {
			hold = alerting.Noticeable
		}
		o.set(max(size, 0), level, hold, 1)
		o.Detail = Detail{Limit: limit, Mast: mast, After: wind, Variation: o.Detail.Variation}
	}
	against(cross, math.Abs(side), l.Limits.Crosswind)
	cross.Detail.FromLeft = side < 0
	against(tail, -wind.Headwind(bearing), l.Limits.Tailwind)
}
