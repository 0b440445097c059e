package wording

import (
	"fmt"
	"math"
	"strconv"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/vertical"
	"sockline/sensors/quantity"
)

// alongPath tells whether a kind is a change of the headwind along a path.
func alongPath(k alerting.Kind) bool {
	return k == alerting.HeadwindLoss || k == alerting.HeadwindGain
}

// otherSentence is an open alert of the kinds besides loss and gain.
func otherSentence(a *lifecycle.Alert) string {
	s := otherMeasured(a)
	if !a.Observed {
		s += " Not observed now: last measured at " + clock(a.MeasuredAt) + "."
	}
	return s + " " + otherLevel(a) + missing(a.Missing)
}

// otherMeasured says what was measured, where and how it goes on.
func otherMeasured(a *lifecycle.Alert) string {
	d := &a.Detail
	switch a.Kind {
	case alerting.WindShift:
		return shiftWords(a)
	case alerting.VerticalShear:
		return verticalAlert(a)
	case alerting.Crosswind:
		side := "right"
		if d.FromLeft {
			side = "left"
		}
		return "The crosswind for " + operationOn(a.Operation, a.Runway) + " is " + knots(a.Change) + " from the " + side +
			", a mean of two minutes at the mast " + named(d.Mast) + trend(a.Trend)
	case alerting.Tailwind:
		return "The tailwind for " + operationOn(a.Operation, a.Runway) + " is " + knots(a.Change) +
			", a mean of two minutes at the mast " + named(d.Mast) + trend(a.Trend)
	}
	return "The wind for " + operationOn(a.Operation, a.Runway) + " changes by " + knots(a.Change) + trend(a.Trend)
}

func named(mast string) string {
	if mast == "" {
		return "of the runway end"
	}
	return mast
}

// shiftWords: the turn first, then the winds before and behind.
func shiftWords(a *lifecycle.Alert) string {
	d := &a.Detail
	how := ", in the course of minutes, at the masts together"
	if d.Moving {
		how = ", behind a line that passes over the masts"
	}
	return "The wind along the path of " + operationOn(a.Operation, a.Runway) + " turns by " + degrees(d.Turn) + how +
		": " + windFrom(d.Before, d.Variation) + " before it, " + windFrom(d.After, d.Variation) + " after it, at mast height."
}

// verticalAlert: the difference as measured first; what is made of it after.
func verticalAlert(a *lifecycle.Alert) string {
	d := &a.Detail
	s := vertical.Shear{
		Place: d.Mast, LowerM: d.Lower, UpperM: d.Upper, Below: d.Before, Above: d.After, Difference: math.Abs(a.Change),
		RateKnown: d.RateKnown, Rate: d.Rate, Neutral: d.Neutral, Sign: d.Sign,
	}
	if d.RateKnown {
		s.Class = vertical.ClassOf(d.Rate)
	}
	return shearWords(&s, d.Variation) + " This concerns " + operationOn(a.Operation, a.Runway) + ", " +
		markOf(a.Operation).stretch(a.From, a.To) + "."
}

// shearWords is a vertical shear in sentences.
func shearWords(s *vertical.Shear, variation float64) string {
	text := "The wind at " + named(s.Place) + " differs by " + knots(s.Difference) + " between " + metres(s.LowerM) + " and " + metres(s.UpperM) +
		" m above the ground: " + windFrom(s.Below, variation) + " below, " + windFrom(s.Above, variation) + " above."
	switch {
	case s.RateKnown && s.Class != vertical.Unclassed:
		text += " That is " + knots(s.Rate) + " per 100 ft, " + s.Class.String() + " by the classes of ICAO for 100 ft."
	case s.RateKnown:
		text += " That is " + knots(s.Rate) + " per 100 ft."
	}
	text += " A neutral wind would differ by " + knots(s.Neutral) + "."
	switch s.Sign {
	case vertical.NightInversion:
		text += " The air below lies nearly still under a fresh wind, at night: the mark of an inversion."
	case vertical.StillBelow:
		text += " The air below lies nearly still under a fresh wind."
	case vertical.Jet:
		text += " A level between them has a stronger wind than both: the mark of a low-level jet."
	}
	return text
}

// metres is a height in whole metres.
func metres(m float64) string {
	if math.IsNaN(m) || math.Abs(m) > 1e6 {
		return "an unknown number of"
	}
	return strconv.Itoa(int(math.Round(m)))
}

// degrees is a turn in words, to the nearest five.
func degrees(turn float64) string {
	five := math.Round(math.Abs(turn)/5) * 5
	switch {
	case math.IsNaN(five) || five > 180:
		return "an unknown angle"
	case five == 0:
		return "less than 5 degrees"
	case five == 180:
		return "about 180 degrees"
	case turn < 0:
		return fmt.Sprintf("about %.0f degrees anticlockwise", five)
	}
	return fmt.Sprintf("about %.0f degrees clockwise", five)
}

// windFrom is a wind in words: degrees magnetic and knots.
func windFrom(v quantity.Vector, variation float64) string {
	speed := v.Speed()
	if kt, ok := wholeKnots(speed); !ok || kt == 0 {
		return knots(speed)
	}
	return knots(speed) + " from " + magneticWords(v.From(), variation)
}

// magneticWords is a direction in degrees magnetic.
func magneticWords(deg, variation float64) string {
	m := magneticTen(deg, variation)
	if math.IsNaN(m) || math.IsInf(m, 0) {
		return "an unknown direction"
	}
	return fmt.Sprintf("%03.0f degrees magnetic", m)
}

// otherLevel says which level of three the alert has and what that is.
func otherLevel(a *lifecycle.Alert) string {
	s := "Level " + strconv.Itoa(int(a.Level)) + " of 3"
	if held := a.Memory.Held[a.Level&3]; a.Observed && held != 0 && held < a.Updated {
		s += ", kept although less is measured now"
	}
	what := "a noticeable change"
	switch {
	case !limited(a.Kind) && a.Level == alerting.Large:
		what = "a large change"
	case !limited(a.Kind) && a.Level == alerting.BeyondMargin:
		what = "more than the margin set for the aircraft here"
	case limited(a.Kind) && a.Detail.Limit > 0:
		what = "more than the limit set here, " + knots(a.Detail.Limit)
	case limited(a.Kind):
		what = "more than the limit set here"
	}
	return s + ": " + what + "."
}

func limited(k alerting.Kind) bool { return k == alerting.Crosswind || k == alerting.Tailwind }

// otherNoun is a kind as the subject of a closing sentence.
func otherNoun(a *lifecycle.Alert) string {
	on := operationOn(a.Operation, a.Runway)
	switch a.Kind {
	case alerting.WindShift:
		return "the turn of the wind along the path of " + on
	case alerting.VerticalShear:
		return "the difference of the wind with height beside " + on
	case alerting.Crosswind:
		return "the crosswind for " + on
	case alerting.Tailwind:
		return "the tailwind for " + on
	}
	return "the change of the wind for " + on
}

// otherClosing tells how an alert of the kinds besides loss and gain ended.
func otherClosing(a *lifecycle.Alert) string {
	what, last := otherNoun(a), knots(a.Change)
	greatest := "At its greatest it was " + knots(a.PeakChange) + ", at " + clock(a.PeakAt) + "."
	if a.Kind == alerting.WindShift {
		last = "a change of " + last
		greatest = "The wind had changed by " + knots(a.PeakChange) + ", at " + clock(a.PeakAt) + "."
	}
	unseen := " This alert, open since " + clock(a.Opened) + ", is closed without knowing whether the change has passed."
	switch a.Because {
	case lifecycle.BelowLevel:
		s := upper(what) + " no longer reaches level 1 of 3 where it is measured"
		if a.Kind != alerting.WindShift {
			s += ": now " + last
		}
		return s + ". " + greatest + " This alert, open since " + clock(a.Opened) +
			", is closed; between the masts and above them the wind may still change."
	case lifecycle.NotObserved:
		return "Not observed since " + clock(a.MeasuredAt) + ": " + what + ", then " + last + "." + unseen
	case lifecycle.PathWithdrawn:
		return upper(operationOn(a.Operation, a.Runway)) + " is no longer judged since the configuration changed; " +
			what + " was last measured at " + clock(a.MeasuredAt) + " as " + last + "." + unseen
	case lifecycle.ExpiredWhileDown:
		return "Nothing was judged while this program did not run; " + what +
			" was last measured at " + clock(a.MeasuredAt) + " as " + last + "." + unseen
	}
	return upper(what) + " was last measured at " + clock(a.MeasuredAt) + " as " + last + "." + unseen
}

// detail is what an alert object has besides, for the kinds that are no change
// of headwind: angles in degrees, speeds in knots, heights in metres.
func detail(k alerting.Kind, d *hazard.Detail) []byte {
	var o object
	wind := func(key string, v quantity.Vector) {
		var w object
		if kt, ok := wholeKnots(v.Speed()); !ok || kt == 0 {
			w.null("from_magnetic_deg")
		} else {
			w.fixed("from_magnetic_deg", magneticTen(v.From(), d.Variation), 0)
		}
		w.knots("speed_kt", v.Speed())
		o.raw(key, w.end())
	}
	switch k {
	case alerting.WindShift:
		o.fixed("turn_deg", d.Turn, 0)
		o.flag("moving", d.Moving)
		wind("before", d.Before)
		wind("after", d.After)
	case alerting.VerticalShear:
		o.fixed("lower_m", d.Lower, 0)
		o.fixed("upper_m", d.Upper, 0)
		o.optionalKnots("per_100ft_kt", d.RateKnown, d.Rate)
		o.optionalText("class", d.Class)
		o.knots("neutral_kt", d.Neutral)
		o.optionalText("sign", string(d.Sign))
		o.text("place", d.Mast)
		wind("below", d.Before)
		wind("above", d.After)
	default:
		o.knots("limit_kt", d.Limit)
		o.text("mast", d.Mast)
		if k == alerting.Crosswind {
			side := "right"
			if d.FromLeft {
				side = "left"
			}
			o.text("from", side)
		}
		wind("wind", d.After)
	}
	return o.end()
}

// optionalKnots is a speed, or null where there is none.
func (o *object) optionalKnots(k string, there bool, v float64) {
	if !there {
		o.null(k)
		return
	}
	o.knots(k, v)
}

// optionalText is a word, or null where there is none.
func (o *object) optionalText(k, v string) {
	if v == "" {
		o.null(k)
		return
	}
	o.text(k, v)
}
