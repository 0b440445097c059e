package wording

import (
	"sockline/alerting/airfield"
	"sockline/alerting/shear"
)

// ProfileView is the headwind along a path at one step, ready to be drawn.
type ProfileView struct {
	Path   airfield.Path
	Points []shear.ProfilePoint
	// Ahead is what the greatest changes will be in a minute; nil where no
	// outflow of known motion is under way.
	Ahead *shear.Forecast
	// Crosswind is the greatest difference of crosswind between masts beside the
	// path, m/s.
	Crosswind float64
	Exercise  bool
}

// JSON is the profile as an object: metres before the threshold, in the order
// of flight, and knots.
func (v *ProfileView) JSON() []byte {
	var o object
	o.text("runway", v.Path.Runway())
	o.text("operation", v.Path.Operation())
	o.key("points")
	o.b = append(o.b, '[')
	for i, p := range v.Points {
		if i > 0 {
			o.b = append(o.b, ',')
		}
		var at object
		at.fixed("at_m", p.At, 0)
		if p.Observed {
			at.knots("headwind_kt", p.Headwind)
			at.knots("low_kt", p.Low)
			at.knots("high_kt", p.High)
		} else { // what is not observed has no numbers
			at.null("headwind_kt")
			at.null("low_kt")
			at.null("high_kt")
		}
		at.flag("observed", p.Observed)
		o.b = append(o.b, at.end()...)
	}
	o.b = append(o.b, ']')
	o.knots("crosswind_change_kt", v.Crosswind)
	if v.Ahead == nil {
		o.null("ahead")
	} else {
		var a object
		a.fixed("in_s", v.Ahead.Seconds, 0)
		a.raw("loss", aheadOf(v.Ahead.Loss, -1))
		a.raw("gain", aheadOf(v.Ahead.Gain, 1))
		o.raw("ahead", a.end())
	}
	o.flag("exercise", v.Exercise)
	return o.end()
}

// aheadOf is one side of a forecast: a loss (sign -1) negative, low <= change
// <= high.
func aheadOf(side [3]float64, sign float64) []byte {
	low, high := sign*side[0], sign*side[2]
	if sign < 0 {
		low, high = high, low
	}
	var o object
	o.knots("change_kt", sign*side[1])
	o.knots("low_kt", low)
	o.knots("high_kt", high)
	return o.end()
}
