package wording

import (
	"math"
	"strconv"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/outflow"
)

// OutflowView is an outflow at one step, ready to be told.
type OutflowView struct {
	Outflow  outflow.Outflow
	Airfield *airfield.Airfield
	Exercise bool
}

// The shares of probability that the two contours of a centre hold, and the
// corners of each.
const (
	innerShare = 0.50
	outerShare = 0.95
	corners    = 32
)

// JSON is the outflow as an object: places in metres east and north of the
// reference point, speeds in knots, directions in degrees true.
func (v *OutflowView) JSON() []byte {
	w := &v.Outflow
	var o object
	o.fixed("probability", w.Probability, 2)
	var c object
	c.fixed("east_m", w.X, 0)
	c.fixed("north_m", w.Y, 0)
	o.raw("centre", c.end())
	o.raw("inner", pointsOf(w.Contour(innerShare, corners, nil)))
	o.raw("outer", pointsOf(w.Contour(outerShare, corners, nil)))
	o.metres("radius_m", w.Radius)
	o.metres("radius_low_m", w.RadiusLow)
	o.metres("radius_high_m", w.RadiusHigh)
	o.knots("differential_kt", w.Difference())
	o.knots("low_kt", 2*w.StrengthLow)
	o.knots("high_kt", 2*w.StrengthHigh)
	o.metres("over_m", 2*w.Radius)
	o.fixed("divergence_per_s", w.Divergence, 4)
	o.text("extent", string(w.Extent()))
	o.raw("motion", motion(w.Motion))
	o.text("trend", string(trendOf(w.Trend)))
	o.key("reaches")
	o.b = append(o.b, '[')
	for i, r := range w.Reaches {
		if i > 0 {
			o.b = append(o.b, ',')
		}
		p := v.Airfield.Paths[r.Path]
		var at object
		at.text("runway", p.Runway())
		at.text("operation", p.Operation())
		at.fixed("in_s", r.Seconds, 0)
		o.b = append(o.b, at.end()...)
	}
	o.b = append(o.b, ']')
	o.text("text", v.Text())
	o.flag("exercise", v.Exercise)
	o.text("notice", alerting.Notice)
	return o.end()
}

func motion(m outflow.Motion) []byte {
	var o object
	o.flag("known", m.Known)
	if m.Known {
		o.fixed("toward_true_deg", bearing(m.East, m.North), 0)
		o.knots("speed_kt", math.Hypot(m.East, m.North))
		o.fixed("east_ms", m.East, 1)
		o.fixed("north_ms", m.North, 1)
	} else {
		o.null("toward_true_deg")
		o.null("speed_kt")
		o.null("east_ms")
		o.null("north_ms")
	}
	o.knots("spread_kt", m.Spread)
	return o.end()
}

func trendOf(t outflow.Trend) string {
	switch t {
	case outflow.Growing:
		return "growing"
	case outflow.Steady:
		return "steady"
	case outflow.Fading:
		return "fading"
	}
	return "unknown"
}

// bearing is where a vector points, degrees true in [0, 360).
func bearing(east, north float64) float64 {
	return math.Mod(float64(math.Atan2(east, north)*(180/math.Pi))+360, 360)
}

// compass names a direction by the nearest of eight points.
func compass(deg float64) string {
	points := [...]string{"north", "northeast", "east", "southeast", "south", "southwest", "west", "northwest"}
	return points[int(math.Mod(deg, 360)/45+0.5)%len(points)]
}

// Text is the outflow as sentences: where it is, how strong, how it moves, and
// which paths it lies on or comes to.
func (v *OutflowView) Text() string {
	o := &v.Outflow
	s := "An outflow of air"
	if o.Extent() == outflow.Microburst {
		s = "A microburst"
	}
	s += " is centred " + v.place() + ": the wind changes by " +
		estimate(o.Difference(), 2*o.StrengthLow, 2*o.StrengthHigh, false) +
		" from one side to the other, over about " + km(tenths(2*o.Radius)) + " km, at mast height"
	switch {
	case o.Motion.Known && math.Hypot(o.Motion.East, o.Motion.North) < slow:
		s += "; it hardly moves"
	case o.Motion.Known:
		s += "; it moves towards the " + compass(bearing(o.Motion.East, o.Motion.North)) + " at " +
			about(math.Hypot(o.Motion.East, o.Motion.North), false)
	default:
		s += "; its motion is not yet known"
	}
	if o.Trend != outflow.TrendUnknown {
		s += " and is " + trendOf(o.Trend)
	}
	s += "." + v.reaches()
	if v.Exercise {
		s = exercisePrefix + s
	}
	return s
}

// slow is a speed that is told as no motion, m/s.
const slow = 1.5

// place is the centre by the nearest threshold.
func (v *OutflowView) place() string {
	o := &v.Outflow
	name, near, x, y := "", math.Inf(1), 0.0, 0.0
	for _, r := range v.Airfield.Runways {
		for _, e := range r.Ends {
			if d := o.Gap(e.Threshold.X, e.Threshold.Y); d < near {
				name, near, x, y = e.Designator, d, o.X-e.Threshold.X, o.Y-e.Threshold.Y
			}
		}
	}
	if tenths(near) == 0 {
		return "over the threshold of runway " + name
	}
	return "about " + km(tenths(near)) + " km " + compass(bearing(x, y)) + " of the threshold of runway " + name
}

// reaches names the paths that the ring of greatest wind lies on, and those
// that it comes to.
func (v *OutflowView) reaches() string {
	var on, later []string
	for _, r := range v.Outflow.Reaches {
		p := v.Airfield.Paths[r.Path]
		name := operationOn(p.Operation(), p.Runway())
		if r.Seconds == 0 {
			on = append(on, name)
		} else {
			later = append(later, name+" in about "+strconv.Itoa(int(math.Round(r.Seconds/10)*10))+" s")
		}
	}
	s := ""
	if len(on) > 0 {
		s += " It lies on " + and(on) + "."
	}
	if len(later) > 0 {
		s += " It reaches " + and(later) + "."
	}
	return s
}
