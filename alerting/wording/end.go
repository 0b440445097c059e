package wording

import (
	"fmt"
	"math"
	"strings"

	"sockline/alerting"
	"sockline/sensors/quantity"
)

// calmBelow is the mean speed (m/s) under which wind has no direction worth
// telling (ICAO Annex 3: below 0.5 m/s or 1 kt is calm).
const calmBelow = 0.5

// EndWind is the wind at a runway end as its mast measures it, in SI units
// and true degrees.
type EndWind struct {
	Runway    string
	Observed  bool
	Reason    string  // why it is not observed
	Mean      float64 // m/s
	From      float64 // degrees true
	Gust      float64 // m/s, meaningful only if HasGust
	HasGust   bool
	Spread    float64 // between the extremes of the direction, degrees, meaningful only if HasSpread
	HasSpread bool
	Variable  bool    // the direction is told as variable (ICAO Annex 3)
	Headwind  float64 // m/s, a tailwind negative
	Crosswind float64 // m/s, from the right positive
	Variation float64 // magnetic variation, degrees, east positive
	Exercise  bool
}

// EndText is the wind at a runway end as a sentence: whole knots, degrees
// magnetic to the nearest ten, north as 360.
func EndText(e EndWind) string {
	s := "Wind at runway " + e.Runway + ": " + e.words() + "."
	if e.Exercise {
		s = exercisePrefix + s
	}
	return s
}

// known reports whether there is a wind to tell.
func (e *EndWind) known() bool { return e.Observed && !math.IsNaN(e.Mean+e.From) }

// JSON is the wind at a runway end as an object, with the figures that the
// sentence has: whole knots, degrees magnetic to the nearest ten. What is not
// observed is null. A tailwind is a headwind below zero; crosswind_from is null
// where the crosswind rounds to nothing.
func (e *EndWind) JSON() []byte {
	var o object
	o.text("runway", e.Runway)
	o.flag("observed", e.known())
	o.text("sentence", EndText(*e))
	o.flag("exercise", e.Exercise)
	o.text("notice", alerting.Notice)
	if !e.known() {
		for _, k := range []string{"from_magnetic_deg", "from_spread_deg", "speed_kt", "gust_kt", "headwind_kt", "crosswind_kt", "crosswind_from"} {
			o.null(k)
		}
		o.flag("variable", false)
		return o.end()
	}
	if e.Mean < calmBelow { // from nowhere, as in the sentence
		o.null("from_magnetic_deg")
	} else {
		o.fixed("from_magnetic_deg", magneticTen(e.From, e.Variation), 0)
	}
	optional := func(k string, there bool, v float64) {
		if !there {
			o.null(k)
			return
		}
		o.fixed(k, v, 0)
	}
	optional("from_spread_deg", e.HasSpread, e.Spread)
	o.fixed("speed_kt", e.Mean/quantity.Knot, 0)
	optional("gust_kt", e.HasGust, e.Gust/quantity.Knot)
	o.fixed("headwind_kt", e.Headwind/quantity.Knot, 0)
	o.fixed("crosswind_kt", math.Abs(e.Crosswind)/quantity.Knot, 0)
	switch kt, ok := wholeKnots(e.Crosswind); {
	case !ok || kt == 0:
		o.null("crosswind_from")
	case e.Crosswind < 0:
		o.text("crosswind_from", "left")
	default:
		o.text("crosswind_from", "right")
	}
	o.flag("variable", e.Variable)
	return o.end()
}

func (e *EndWind) words() string {
	if !e.known() {
		if e.Reason == "" {
			return "not observed"
		}
		return "not observed, because " + strings.TrimSuffix(e.Reason, ".")
	}
	gust := ""
	if e.HasGust {
		gust = ", gusts to " + knots(e.Gust)
	}
	if e.Mean < calmBelow {
		return "calm, the mean under 1 kt" + gust
	}
	along, across := "headwind ", " from the right"
	if e.Headwind < 0 {
		along = "tailwind "
	}
	if e.Crosswind < 0 {
		across = " from the left"
	}
	if kt, ok := wholeKnots(e.Crosswind); !ok || kt == 0 {
		across = ""
	}
	return fmt.Sprintf("from %03.0f degrees magnetic at %s%s; %s%s, crosswind %s%s",
		magneticTen(e.From, e.Variation), knots(e.Mean), gust,
		along, knots(e.Headwind), knots(e.Crosswind), across)
}

// magneticTen is a direction in degrees magnetic, to the nearest ten, in
// (0, 360]: an easterly variation is subtracted.
func magneticTen(from, variation float64) float64 {
	ten := math.Round(quantity.NormalizeDegrees(from-variation)/10) * 10
	if ten == 0 {
		return 360
	}
	return ten
}
