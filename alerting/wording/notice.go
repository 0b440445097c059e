// Package wording puts what is known into words and objects: a Transition
// becomes a Notice, an Assessment a path object, and each has its sentence.
// All of them carry the sentence that says what the product is not; none can
// be made without it. Units leave SI here. Next: history, publish, page.
package wording

import (
	"math"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// exercisePrefix begins every text that rests on synthetic or recorded data.
const exercisePrefix = "EXERCISE: "

// Context is what the words depend on besides the alert.
type Context struct {
	Airfield string // its id
	Exercise bool   // demo, simulate, replay
	// Margin is the loss of headwind (m/s) at which the third level opens;
	// 0 if it is not known. MarginIsStall says that it is the stall margin of
	// the slowest declared aircraft rather than a configured change.
	Margin        float64
	MarginIsStall bool
	// Merged is the loss (m/s) from which on the third level is issued where it
	// lies so close above the second that the two are one; 0 where they are not.
	Merged float64
}

// Notice is one issue of an alert, ready to be told: the alert, its sentence,
// and the sentence that goes with everything. It is made by Of only.
type Notice struct {
	alert    lifecycle.Alert
	airfield string
	text     string
	recorded bool
	exercise bool
	delayed  bool
}

// Of puts a transition into words. The notice is not yet marked as recorded.
func Of(t lifecycle.Transition, c Context) Notice {
	n := Notice{
		alert:    t.Alert,
		airfield: c.Airfield,
		exercise: c.Exercise || t.Alert.Exercise,
	}
	n.text = sentence(&t.Alert, c)
	if n.exercise {
		n.text = exercisePrefix + n.text
	}
	return n
}

// WithRecorded is the notice marked with whether the history holds it.
func (n Notice) WithRecorded(recorded bool) Notice { n.recorded = recorded; return n }

// WithDelayed is the notice marked as told late.
func (n Notice) WithDelayed() Notice { n.delayed = true; return n }

// Alert is the alert as issued. Its lists must not be changed.
func (n Notice) Alert() lifecycle.Alert { return n.alert }

// ID is the id of the alert.
func (n Notice) ID() string { return n.alert.ID }

// Opening reports whether this is the first issue of the alert.
func (n Notice) Opening() bool { return n.alert.Revision == 1 }

// Closing reports whether this is the last issue of the alert.
func (n Notice) Closing() bool { return n.alert.State == lifecycle.Closed }

// Exercise reports whether the alert rests on synthetic or recorded data.
func (n Notice) Exercise() bool { return n.exercise }

// Recorded reports whether the history held the issue when it was told.
func (n Notice) Recorded() bool { return n.recorded }

// Text is the alert as sentences, without the notice that surfaces show beside
// or below it once for all.
func (n Notice) Text() string { return n.text }

// FullText is the alert as sentences, ended by the notice.
func (n Notice) FullText() string { return n.text + " " + alerting.Notice }

// JSON is the alert object of the outside face: these keys in this order,
// speeds in knots with one decimal, lengths in metres rounded to ten, times
// in whole seconds.
func (n Notice) JSON() []byte {
	a := &n.alert
	var o object
	o.text("id", a.ID)
	o.text("occurrence", a.Occurrence)
	o.count("revision", a.Revision)
	o.text("airfield", n.airfield)
	o.text("runway", a.Runway)
	o.text("operation", a.Operation)
	o.text("kind", string(a.Kind))
	o.text("level", a.Level.String())
	o.text("state", string(a.State))
	o.time("opened", a.Opened)
	o.time("updated", a.Updated)
	o.time("closed", a.Closed)
	if a.Because == "" {
		o.null("closed_because")
	} else {
		o.text("closed_because", string(a.Because))
	}
	o.knots("change_kt", a.Change)
	o.knots("change_low_kt", a.ChangeLow)
	o.knots("change_high_kt", a.ChangeHigh)
	o.fixed("probability", a.Probability, 2)
	o.metres("from_m", a.From)
	o.metres("to_m", a.To)
	// From the rounded ends: a reader who subtracts gets the same.
	o.metres("over_m", math.Abs(roundTen(a.From)-roundTen(a.To)))
	o.flag("at_edge", a.AtEdge)
	o.flag("observed", a.Observed)
	o.fixed("shear_kt_per_1000ft", a.MaxSlope/quantity.KnotPer1000Foot, 1)
	o.fixed("mean_slope_kt_per_1000ft", a.MeanSlope/quantity.KnotPer1000Foot, 1)
	o.fixed("fbar", a.FBar, 3)
	if a.FBarVertical > 0 {
		o.fixed("fbar_vertical_estimate", a.FBarVertical, 3)
	}
	o.text("cause", string(a.Cause))
	o.text("trend", string(a.Trend))
	o.raw("peak", peak(a.PeakChange, a.PeakAt))
	if !alongPath(a.Kind) {
		o.raw("detail", detail(a.Kind, &a.Detail))
	}
	o.raw("stations", stations(a.Used, a.Missing))
	if len(a.Fewer) > 0 {
		o.raw("one_fewer", oneFewer(a))
	}
	o.text("text", n.text)
	o.flag("recorded", n.recorded)
	o.flag("exercise", n.exercise)
	if n.delayed {
		o.flag("delayed", true)
	}
	o.text("notice", alerting.Notice)
	return o.end()
}

func peak(change float64, at sensors.Instant) []byte {
	var o object
	o.knots("change_kt", change)
	o.time("at", at)
	return o.end()
}

func stations(used, missing []string) []byte {
	var o object
	o.list("used", used)
	o.list("missing", missing)
	return o.end()
}

// oneFewer is the range of the change with any one mast left out, and the mast
// whose absence would change it most.
func oneFewer(a *lifecycle.Alert) []byte {
	low, high, weakest := math.Inf(1), math.Inf(-1), a.Fewer[0]
	for _, f := range a.Fewer {
		low, high = math.Min(low, f.Change), math.Max(high, f.Change)
		if math.Abs(f.Change-a.Change) > math.Abs(weakest.Change-a.Change) {
			weakest = f
		}
	}
	var o object
	o.knots("low_kt", low)
	o.knots("high_kt", high)
	o.text("rests_most_on", weakest.Station)
	o.count("masts", len(a.Fewer))
	return o.end()
}
