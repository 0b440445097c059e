// Package vertical takes the two-minute winds of anemometers at several heights
// of one column of air and tells how the wind changes with height: the
// difference as measured, what it is per 100 ft and of which class where the
// levels allow that, what a plain neutral wind would show, and the marks of a
// night inversion and of a low-level jet. Next: hazard, by way of engine.
package vertical

import (
	"math"
	"time"

	"sockline/sensors/correction"
	"sockline/sensors/quantity"
)

// Mean is the stretch whose winds are compared: two minutes, as ICAO Annex 3
// has them told.
const Mean = 2 * time.Minute

// The rules of what may be said of two levels, m. A difference over a few
// metres must not be blown up to a hundred feet, and the classes were made for
// layers of about 30 m.
const (
	leastRate  = 20.0 // between the levels, for a figure per 100 ft
	leastFoot  = 10.0 // of the lower one, for the same
	leastClass = 25.0 // between the levels, for a class
)

// HundredFeet in m.
const HundredFeet = 100 * quantity.Foot

// Class is the class of a vertical shear. The zero Class is none.
type Class int

// The classes of the Fifth Air Navigation Conference of ICAO, 1967 (interim
// criteria, from memory): 0 to 4 kt per 100 ft light, 5 to 8 moderate, 9 to 12
// strong, above 12 severe.
const (
	Unclassed Class = iota
	Light
	Moderate
	Strong
	Severe
)

// String is the word of the class; empty where there is none.
func (c Class) String() string {
	switch c {
	case Light:
		return "light"
	case Moderate:
		return "moderate"
	case Strong:
		return "strong"
	case Severe:
		return "severe"
	}
	return ""
}

// ClassOf is the class of a shear of rate m/s per 100 ft, in whole knots as the
// criteria are written.
func ClassOf(rate float64) Class {
	switch kt := math.Round(rate / quantity.Knot); {
	case kt >= 13:
		return Severe
	case kt >= 9:
		return Strong
	case kt >= 5:
		return Moderate
	}
	return Light
}

// Least is the smallest shear of a class, m/s per 100 ft.
func (c Class) Least() float64 {
	switch c {
	case Moderate:
		return 4.5 * quantity.Knot
	case Strong:
		return 8.5 * quantity.Knot
	case Severe:
		return 12.5 * quantity.Knot
	}
	return 0
}

// Sign is something that a column shows besides its shear.
type Sign string

// The signs. NightInversion: hardly any wind below and a fresh one above while
// the sun is down; the cold air at the ground has parted from the flow over it.
// StillBelow is the same by day. Jet: a middle level has a stronger wind than
// those above and below it.
const (
	NoSign         Sign = ""
	NightInversion Sign = "night-inversion"
	StillBelow     Sign = "still-below"
	Jet            Sign = "low-level-jet"
)

// The bounds of the signs, m/s.
const (
	stillBelow = 1.5 // hardly any wind: below 3 kt (ICAO Annex 3)
	freshAbove = 5.0
	// jetExcess is how much stronger a jet is than the wind above it: 2 m/s
	// (E.L. Andreas, K.J. Claffey, A.P. Makshtas, "Low-level atmospheric jets and
	// inversions over the western Weddell Sea", Boundary-Layer Meteorol. 97,
	// 2000; from memory).
	jetExcess = 2.0
)

// Level is one height of a column: its wind as measured, over Mean.
type Level struct {
	Mast      int
	ID        string
	Height    float64 // m above the ground
	Roughness float64 // length of the ground about the mast, m
	Wind      quantity.Vector
	Known     bool
}

// Shear is what two levels of a column show. Winds and differences in m/s,
// heights in m.
type Shear struct {
	Column       int // its number
	Lower, Upper int // masts
	Place        string
	X, Y         float64 // of the lower mast, m
	LowerM       float64
	UpperM       float64
	Below, Above quantity.Vector
	Difference   float64 // of the vectors
	RateKnown    bool
	Rate         float64 // m/s per 100 ft; with RateKnown only
	Class        Class   // none where the levels do not allow it
	Neutral      float64 // what a neutral wind with the one below would differ by
	Sign         Sign
}

// Between compares a level with a higher one. night says that the sun is down.
func Between(low, high Level, night bool) Shear {
	s := Shear{
		Lower: low.Mast, Upper: high.Mast, LowerM: low.Height, UpperM: high.Height,
		Below: low.Wind, Above: high.Wind,
		Difference: math.Hypot(high.Wind.East-low.Wind.East, high.Wind.North-low.Wind.North),
		Neutral:    low.Wind.Speed() * (correction.LogLaw(low.Height, high.Height, low.Roughness) - 1),
	}
	apart := high.Height - low.Height
	if apart >= leastRate && low.Height >= leastFoot {
		s.RateKnown, s.Rate = true, s.Difference*HundredFeet/apart
		if apart >= leastClass {
			s.Class = ClassOf(s.Rate)
		}
	}
	if low.Wind.Speed() < stillBelow && high.Wind.Speed() >= freshAbove {
		if s.Sign = StillBelow; night {
			s.Sign = NightInversion
		}
	}
	return s
}

// Append appends what the known levels of a column (lowest first) show: each
// with the next one above it, and the lowest with the highest where there are
// others between. It allocates only when dst is too small.
func Append(dst []Shear, column int, levels []Level, night bool) []Shear {
	first, last, before, n := -1, -1, -1, 0
	begin := len(dst)
	for i := range levels {
		if !levels[i].Known {
			continue
		}
		if before >= 0 {
			dst = append(dst, Between(levels[before], levels[i], night))
		}
		if first < 0 {
			first = i
		}
		before, last = i, i
		n++
	}
	if n > 2 {
		whole := Between(levels[first], levels[last], night)
		if jet(levels, first, last) {
			whole.Sign = Jet
		}
		dst = append(dst, whole)
	}
	for i := begin; i < len(dst); i++ {
		dst[i].Column = column
	}
	return dst
}

// jet tells whether a level between the first and the last has a wind that
// exceeds both by jetExcess.
func jet(levels []Level, first, last int) bool {
	ends := max(levels[first].Wind.Speed(), levels[last].Wind.Speed())
	for i := first + 1; i < last; i++ {
		if levels[i].Known && levels[i].Wind.Speed() >= ends+jetExcess {
			return true
		}
	}
	return false
}

// Night tells whether the sun is down at a place (degrees, north and east
// positive): its centre lies more than 0.83 degrees below the horizon. The
// declination is 23.45 sin(360 (284 + n)/365) degrees on the day n of the year
// (P.I. Cooper, "The absorption of radiation in solar stills", Solar Energy 12,
// 1969; from memory), the hour angle that of mean solar time: good to a quarter
// of an hour.
func Night(t time.Time, latitude, longitude float64) bool {
	const degree = math.Pi / 180
	t = t.UTC()
	declination := 23.45 * degree * math.Sin(2*math.Pi*float64(284+t.YearDay())/365)
	hours := float64(t.Hour()) + float64(t.Minute())/60 + longitude/15
	hour := (hours - 12) * 15 * degree
	sine := float64(math.Sin(latitude*degree)*math.Sin(declination)) +
		float64(math.Cos(latitude*degree)*math.Cos(declination)*math.Cos(hour))
	return sine < math.Sin(-0.83*degree)
}
