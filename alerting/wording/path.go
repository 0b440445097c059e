package wording

import (
	"strconv"
	"strings"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/sensors"
)

// PathView is a path at one step, ready to be told.
type PathView struct {
	Path           airfield.Path
	State          alerting.PathState
	Assessment     hazard.Assessment // its Observed empty where nothing is known
	Alerts         []string          // ids of the alerts open on it
	At, ValidUntil sensors.Instant
	Exercise       bool
}

// StateOf is what can be said of a path as a whole: an open alert comes
// first, then ground that is not observed.
func StateOf(raised bool, a *hazard.Assessment) alerting.PathState {
	switch {
	case raised:
		return alerting.Raised
	case !a.Complete || len(a.Observed) == 0:
		return alerting.NotObserved
	}
	return alerting.BelowLimits
}

// reason is why part of the path is not observed; never empty when the state
// says so.
func (v *PathView) reason() string {
	switch {
	case v.Assessment.Reason != "":
		return strings.TrimSuffix(v.Assessment.Reason, ".")
	case v.State == alerting.NotObserved && len(v.Assessment.Observed) == 0:
		return "no part of it is observed"
	case v.State == alerting.NotObserved:
		return "part of the ground that matters is not observed"
	}
	return ""
}

func (v *PathView) exercise() bool { return v.Exercise || v.Assessment.Exercise }

// JSON is the path object of the outside face: speeds in knots with one
// decimal, a loss negative and low <= change <= high; lengths in metres
// before the threshold, rounded to ten. headwind_change is null when nothing
// of the path is observed.
func (v *PathView) JSON() []byte {
	var o object
	o.text("runway", v.Path.Runway())
	o.text("operation", v.Path.Operation())
	o.text("state", string(v.State))
	o.text("reason", v.reason())
	o.raw("observed", intervals(v.Assessment.Observed))
	if len(v.Assessment.Observed) == 0 {
		o.null("headwind_change")
	} else {
		var c object
		c.raw("loss", change(&v.Assessment.Loss, -1))
		c.raw("gain", change(&v.Assessment.Gain, 1))
		o.raw("headwind_change", c.end())
	}
	o.list("alerts", v.Alerts)
	o.time("at", v.At)
	o.time("valid_until", v.ValidUntil)
	o.flag("exercise", v.exercise())
	o.text("notice", alerting.Notice)
	return o.end()
}

func intervals(is []airfield.Interval) []byte {
	b := []byte{'['}
	for n, i := range is {
		if n > 0 {
			b = append(b, ',')
		}
		b = append(b, '[')
		b = appendFixed(b, roundTen(i.From), 0)
		b = append(b, ',')
		b = appendFixed(b, roundTen(i.To), 0)
		b = append(b, ']')
	}
	return append(b, ']')
}

// change is the greatest change of one sign (-1 loss, 1 gain).
func change(c *hazard.Change, sign float64) []byte {
	low, high := sign*c.Low, sign*c.High
	if sign < 0 {
		low, high = high, low
	}
	var p object
	for l := alerting.Noticeable; l <= alerting.BeyondMargin; l++ {
		p.fixed(l.String(), c.Probability[l], 2)
	}
	var o object
	o.knots("change_kt", sign*c.Median)
	o.knots("low_kt", low)
	o.knots("high_kt", high)
	o.raw("probability", p.end())
	o.metres("from_m", c.From)
	o.metres("to_m", c.To)
	return o.end()
}

// Text is the path as sentences: what state it is in, what is measured on it,
// and which of its ground is not observed.
func (v *PathView) Text() string {
	a := &v.Assessment
	var s string
	switch v.State {
	case alerting.Raised:
		s = raisedBy(len(v.Alerts))
	case alerting.BelowLimits:
		s = "below the limits where it is observed"
	default:
		s = "not observed, because " + v.reason()
	}
	s = upper(operationOn(v.Path.Operation(), v.Path.Runway())) + ": " + s + "."
	if len(a.Observed) > 0 {
		s += " The greatest fall of the headwind on the observed ground is " + about(a.Loss.Median, a.Loss.AtEdge) +
			", the greatest rise " + about(a.Gain.Median, a.Gain.AtEdge) + "."
	}
	s += v.gaps()
	if v.exercise() {
		s = exercisePrefix + s
	}
	return s
}

func raisedBy(alerts int) string {
	if alerts < 2 {
		return "an alert is open"
	}
	return strconv.Itoa(alerts) + " alerts are open"
}

// gaps tells the ground that is not observed.
func (v *PathView) gaps() string {
	if len(v.Assessment.Observed) == 0 {
		if v.State == alerting.NotObserved && v.Assessment.Reason == "" {
			return "" // the reason has said it
		}
		return " No ground of it is observed."
	}
	m := markOf(v.Path.Operation())
	var places []string
	for _, g := range airfield.Unobserved(v.Path, v.Assessment.Observed) {
		if g.Length() >= worthSaying {
			places = append(places, m.stretch(g.From, g.To))
		}
	}
	if len(places) == 0 {
		return ""
	}
	return " Not observed: " + strings.Join(places, "; ") + "."
}

// worthSaying is the shortest gap (m) that the sentence names: half of its
// last digit. The object names every interval.
const worthSaying = 50
