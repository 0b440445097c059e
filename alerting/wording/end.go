package wording

import (
	"fmt"
	"math"
	"strings"

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

func (e *EndWind) words() string {
	if !e.Observed || math.IsNaN(e.Mean+e.From) {
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
