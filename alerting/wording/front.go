package wording

import (
	"fmt"
	"math"
	"strings"

	"sockline/alerting"
	"sockline/alerting/front"
	"sockline/alerting/vertical"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// FrontView is a front at one step, ready to be told.
type FrontView struct {
	Front     front.Front
	At        sensors.Instant
	Variation float64 // magnetic, degrees, east positive
	Exercise  bool
}

// lineBeyond is how far a line is drawn beyond the outermost places, m.
const lineBeyond = 1000.0

// ends are two points of the line, east and north, m: across all places.
func (v *FrontView) ends() (x0, y0, x1, y1 float64) {
	f := &v.Front
	sin, cos := math.Sincos(f.Toward * (math.Pi / 180))
	low, high := 0.0, 0.0
	for _, a := range f.Arrivals {
		along := float64((a.X-f.X)*cos) - float64((a.Y-f.Y)*sin) // to the right of its motion
		low, high = min(low, along), max(high, along)
	}
	low, high = low-lineBeyond, high+lineBeyond
	return f.X + float64(low*cos), f.Y - float64(low*sin), f.X + float64(high*cos), f.Y - float64(high*sin)
}

// JSON is the front object: speeds in knots, lengths in metres, directions of
// motion in degrees true. What has no line that moves has null for all that
// belongs to one.
func (v *FrontView) JSON() []byte {
	f := &v.Front
	var o object
	o.text("kind", string(f.Kind))
	o.time("first", f.First)
	o.fixed("confidence", f.Confidence, 2)
	if f.Moving {
		x0, y0, x1, y1 := v.ends()
		o.raw("line", pointsOf([][2]float64{{x0, y0}, {x1, y1}}))
		o.metres("band_m", f.Band)
		o.fixed("toward_true_deg", f.Toward, 0)
		o.knots("speed_kt", f.Speed)
		o.knots("speed_low_kt", f.SpeedLow)
		o.knots("speed_high_kt", f.SpeedHigh)
	} else {
		o.raw("line", []byte("[]"))
		for _, k := range []string{"band_m", "toward_true_deg", "speed_kt", "speed_low_kt", "speed_high_kt"} {
			o.null(k)
		}
	}
	o.optionalKnots("apparent_kt", f.Moving && f.Aligned && f.Apparent > 0, f.Apparent)
	o.knots("change_kt", f.Change.Speed())
	o.fixed("turn_deg", f.Turn, 0)
	o.raw("arrivals", arrivalsOf(f.Arrivals))
	o.text("text", v.Text())
	o.flag("exercise", v.Exercise)
	o.text("notice", alerting.Notice)
	return o.end()
}

func pointsOf(ps [][2]float64) []byte {
	b := []byte{'['}
	for i, p := range ps {
		if i > 0 {
			b = append(b, ',')
		}
		b = append(b, '[')
		b = appendFixed(b, p[0], 0)
		b = append(b, ',')
		b = appendFixed(b, p[1], 0)
		b = append(b, ']')
	}
	return append(b, ']')
}

func arrivalsOf(as []front.Arrival) []byte {
	b := []byte{'['}
	for i := range as {
		a := &as[i]
		if i > 0 {
			b = append(b, ',')
		}
		var o object
		o.text("place", a.Place)
		o.fixed("east_m", a.X, 0)
		o.fixed("north_m", a.Y, 0)
		o.time("at", a.At)
		o.time("earliest", a.Earliest)
		o.time("latest", a.Latest)
		o.flag("arrived", a.Arrived)
		o.time("predicted", a.Predicted)
		b = append(b, o.end()...)
	}
	return append(b, ']')
}

// Text is the front in sentences: where it goes, what it brings, when it
// comes.
func (v *FrontView) Text() string {
	f := &v.Front
	var s string
	if f.Moving {
		s = v.motion() + " Behind it the wind changes by about " + knots(f.Change.Speed()) + v.turn() + "."
		s += v.arrivals()
	} else {
		s = "The wind has turned by " + degrees(f.Turn) + " at the masts together within the last quarter of an hour: " +
			windFrom(f.Before, v.Variation) + " before, " + windFrom(f.After, v.Variation) + " now, at mast height."
	}
	if v.Exercise {
		s = exercisePrefix + s
	}
	return s
}

func (v *FrontView) motion() string {
	f := &v.Front
	what := "A gust front"
	if f.Kind == front.WindShift {
		what = "A slow wind shift"
	}
	s := what + " moves toward " + magneticWords(f.Toward, v.Variation) + " with " +
		estimate(f.Speed, f.SpeedLow, f.SpeedHigh, false) + ", at mast height."
	if f.Aligned {
		s += " The masts that it has reached stand in a line: measured is only"
		if f.Apparent > 0 {
			s += " its speed along that line, " + knots(f.Apparent) + ";"
		} else {
			s += " that it reached them together;"
		}
		s += " the rest is what such a change of wind makes likely."
	}
	return s
}

func (v *FrontView) turn() string {
	f := &v.Front
	if math.Abs(f.Turn) < 5 {
		return ""
	}
	return ", turning by " + degrees(f.Turn) + ", to " + windFrom(f.After, v.Variation)
}

// arrivals names the places ahead with their times, and the masts that have
// been reached.
func (v *FrontView) arrivals() string {
	var ahead, reached []string
	for i := range v.Front.Arrivals {
		a := &v.Front.Arrivals[i]
		switch {
		case a.Arrived && a.Mast >= 0:
			reached = append(reached, a.Place)
		case !a.Arrived && a.Mast < 0:
			ahead = append(ahead, fmt.Sprintf("%s about %s (%s to %s)", ofRunway(a.Place), clock(a.At),
				a.Earliest.Time().Format("15:04:05"), a.Latest.Time().Format("15:04:05")))
		}
	}
	s := ""
	if len(ahead) > 0 {
		s += " It reaches " + strings.Join(ahead, ", ") + "."
	}
	if len(reached) > 0 {
		s += " It has reached " + and(reached) + "."
	}
	return s
}

// ofRunway is a threshold's name in a sentence: "threshold 07" is the threshold
// of runway 07.
func ofRunway(place string) string {
	if designator, ok := strings.CutPrefix(place, "threshold "); ok {
		return "the threshold of runway " + designator
	}
	return place
}

// VerticalView is what two levels of a column of air show, ready to be told.
type VerticalView struct {
	Shear     vertical.Shear
	Variation float64 // magnetic, degrees, east positive
	Exercise  bool
}

// JSON is the object of two levels: the difference as measured, and what is
// made of it where the levels allow that, null elsewhere.
func (v *VerticalView) JSON() []byte {
	s := &v.Shear
	var o object
	o.text("place", s.Place)
	o.fixed("lower_m", s.LowerM, 0)
	o.fixed("upper_m", s.UpperM, 0)
	o.knots("difference_kt", s.Difference)
	o.optionalKnots("per_100ft_kt", s.RateKnown, s.Rate)
	o.optionalText("class", s.Class.String())
	o.knots("neutral_kt", s.Neutral)
	o.optionalText("sign", string(s.Sign))
	o.fixed("below_speed_kt", s.Below.Speed()/quantity.Knot, 1)
	o.fixed("above_speed_kt", s.Above.Speed()/quantity.Knot, 1)
	o.text("text", v.Text())
	o.flag("exercise", v.Exercise)
	o.text("notice", alerting.Notice)
	return o.end()
}

// Text is what two levels show in sentences.
func (v *VerticalView) Text() string {
	s := shearWords(&v.Shear, v.Variation)
	if v.Exercise {
		s = exercisePrefix + s
	}
	return s
}
