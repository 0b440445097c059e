package wording

import (
	"encoding/json"
	"math"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// The times of the example of the outside face.
var (
	opened = sensors.At(time.Date(2026, 7, 1, 14, 15, 3, 0, time.UTC))
	peaked = sensors.At(time.Date(2026, 7, 1, 14, 15, 41, 0, time.UTC))
)

// stall is the context of Skerry Moor: 23 % of 75 kt is 17.3 kt.
var stall = Context{Airfield: "skerrymoor", Margin: 17.3 * quantity.Knot, MarginIsStall: true}

// example is the alert that the outside face is explained with.
func example() lifecycle.Alert {
	a := lifecycle.Alert{
		ID:         "skerrymoor-20260701T141503Z-07-landing-headwind-loss",
		Occurrence: "skerrymoor-20260701T141503Z", Revision: 9,
		Runway: "07", Operation: "landing", Kind: alerting.HeadwindLoss, Level: alerting.BeyondMargin,
		State: lifecycle.Open, Opened: opened, Updated: peaked,
		Change: -28.1 * quantity.Knot, ChangeLow: -34 * quantity.Knot, ChangeHigh: -22.3 * quantity.Knot,
		Probability: 0.97, From: 2900, To: 1250, Observed: true, MeasuredAt: peaked,
		MaxSlope: 7.9 * quantity.KnotPer1000Foot, MeanSlope: 5.2 * quantity.KnotPer1000Foot, FBar: 0.047,
		Cause: "outflow", Trend: lifecycle.Growing, PeakChange: -28.1 * quantity.Knot, PeakAt: peaked,
		Used: []string{"far07", "final07", "touch07"}, Missing: []string{},
	}
	for l := range a.Memory.Held {
		a.Memory.Held[l] = peaked
	}
	return a
}

// exampleJSON is the object of the outside face, key by key.
const exampleJSON = `{"id":"skerrymoor-20260701T141503Z-07-landing-headwind-loss","occurrence":"skerrymoor-20260701T141503Z","revision":9,` +
	`"airfield":"skerrymoor","runway":"07","operation":"landing","kind":"headwind-loss","level":"beyond-margin","state":"open",` +
	`"opened":"2026-07-01T14:15:03Z","updated":"2026-07-01T14:15:41Z","closed":null,"closed_because":null,` +
	`"change_kt":-28.1,"change_low_kt":-34.0,"change_high_kt":-22.3,"probability":0.97,` +
	`"from_m":2900,"to_m":1250,"over_m":1650,"at_edge":false,"observed":true,` +
	`"shear_kt_per_1000ft":7.9,"mean_slope_kt_per_1000ft":5.2,"fbar":0.047,` +
	`"cause":"outflow","trend":"growing","peak":{"change_kt":-28.1,"at":"2026-07-01T14:15:41Z"},` +
	`"stations":{"used":["far07","final07","touch07"],"missing":[]},` +
	`"text":"The headwind falls by about 28 kt (22 to 34) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: more than the stall margin of the slowest aircraft here.",` +
	`"recorded":true,"exercise":false,`

func TestExampleObject(t *testing.T) {
	n := Of(lifecycle.Transition{At: peaked, Alert: example()}, stall).WithRecorded(true)
	want := exampleJSON + `"notice":` + string(appendString(nil, alerting.Notice)) + `}`
	if got := string(n.JSON()); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	late := exampleJSON + `"delayed":true,"notice":` + string(appendString(nil, alerting.Notice)) + `}`
	if got := string(n.WithDelayed().JSON()); got != late {
		t.Errorf("delayed: got\n%s\nwant\n%s", got, late)
	}
	if got := string(n.JSON()); got != want {
		t.Error("marking a copy as delayed changed the notice")
	}
}

// Even a Notice that was not made by Of cannot leave without the sentence.
func TestNoNoticeWithoutTheSentence(t *testing.T) {
	var object map[string]any
	if err := json.Unmarshal(Notice{}.JSON(), &object); err != nil {
		t.Fatal(err)
	}
	if object["notice"] != alerting.Notice {
		t.Errorf("notice %q", object["notice"])
	}
	if !strings.HasSuffix(Notice{}.FullText(), alerting.Notice) {
		t.Error("the full text does not end with the notice")
	}
}

func TestAlertSentences(t *testing.T) {
	with := func(edit func(a *lifecycle.Alert)) lifecycle.Alert {
		a := example()
		edit(&a)
		return a
	}
	close := func(because lifecycle.CloseReason) func(a *lifecycle.Alert) {
		return func(a *lifecycle.Alert) {
			a.State, a.Because, a.Closed = lifecycle.Closed, because, a.Updated
		}
	}
	const kt = quantity.Knot
	for _, c := range []struct {
		name    string
		alert   lifecycle.Alert
		context Context
		want    string
	}{
		{
			"take-off, second level, steady, without two masts",
			with(func(a *lifecycle.Alert) {
				a.Runway, a.Operation, a.Level, a.Trend = "25", "take-off", alerting.Large, lifecycle.Steady
				a.From, a.To, a.Missing = -1600, -2450, []string{"far07", "final07"}
			}), stall,
			"The headwind falls by about 28 kt (22 to 34) on take-off from runway 25, between 1.6 and 2.4 km from the start of the roll, at mast height; steady. Level 2 of 3: a large change. No readings from far07 and final07.",
		},
		{
			"a rise, first level, trend not known",
			with(func(a *lifecycle.Alert) {
				a.Kind, a.Level, a.Trend = alerting.HeadwindGain, alerting.Noticeable, lifecycle.TrendUnknown
				a.Change, a.ChangeLow, a.ChangeHigh = 12.4*kt, 9.6*kt, 15.2*kt
				a.PeakChange = a.Change
			}), stall,
			"The headwind rises by about 12 kt (10 to 15) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; trend not yet known. Level 1 of 3: a noticeable change.",
		},
		{
			"at the edge of the observed ground",
			with(func(a *lifecycle.Alert) { a.AtEdge, a.From = true, 4010 }), stall,
			"The headwind falls by at least 28 kt (22 to 34) on the way down to runway 07, between 4.0 and 1.2 km before the threshold, at mast height; growing. It reaches the end of the observed ground and may go on beyond it. Level 3 of 3: more than the stall margin of the slowest aircraft here.",
		},
		{
			"not observed now",
			with(func(a *lifecycle.Alert) {
				a.Observed, a.Trend, a.Updated = false, lifecycle.TrendUnknown, peaked+60*sensors.Second
			}), stall,
			"The headwind fell by about 28 kt (22 to 34) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height. Not observed now: last measured at 14:15:41 UTC. Level 3 of 3: more than the stall margin of the slowest aircraft here.",
		},
		{
			"a rise not observed now",
			with(func(a *lifecycle.Alert) {
				a.Kind, a.Level, a.Observed = alerting.HeadwindGain, alerting.Large, false
				a.Change, a.ChangeLow, a.ChangeHigh = 16*kt, 14*kt, 18*kt
			}), stall,
			"The headwind rose by about 16 kt (14 to 18) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height. Not observed now: last measured at 14:15:41 UTC. Level 2 of 3: a large change.",
		},
		{
			"the level is held while less is measured",
			with(func(a *lifecycle.Alert) {
				a.Memory.Held[alerting.BeyondMargin] = peaked - 20*sensors.Second
				a.Change, a.ChangeLow, a.ChangeHigh, a.Trend = -9*kt, -12*kt, -6*kt, lifecycle.Fading
			}), stall,
			"The headwind falls by about 9 kt (6 to 12) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; fading. Level 3 of 3, kept although less is measured now: more than the stall margin of the slowest aircraft here.",
		},
		{
			"almost nothing left",
			with(func(a *lifecycle.Alert) {
				a.Level, a.Memory.Held[alerting.Noticeable] = alerting.Noticeable, opened
				a.Change, a.ChangeLow, a.ChangeHigh, a.Trend = -0.4*kt, -3*kt, 0, lifecycle.Steady
			}), stall,
			"The headwind falls by less than 1 kt (up to 3) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; steady. Level 1 of 3, kept although less is measured now: a noticeable change.",
		},
		{
			"third level by steepness: the loss is under the margin",
			with(func(a *lifecycle.Alert) {
				a.Change, a.ChangeLow, a.ChangeHigh, a.PeakChange = -16*kt, -19*kt, -13*kt, -16*kt
			}), stall,
			"The headwind falls by about 16 kt (13 to 19) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: steeper over 1 km than the limit set for the fastest aircraft here.",
		},
		{
			"third level issued together with the second",
			with(func(a *lifecycle.Alert) {
				a.Change, a.ChangeLow, a.ChangeHigh, a.PeakChange = -16*kt, -19*kt, -13*kt, -16*kt
			}), Context{Airfield: "skerrymoor", Margin: 17.3 * kt, MarginIsStall: true, Merged: 15 * kt},
			"The headwind falls by about 16 kt (13 to 19) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: close to the stall margin of the slowest aircraft here.",
		},
		{
			"third level issued together with the second, a configured margin",
			with(func(a *lifecycle.Alert) {
				a.Change, a.ChangeLow, a.ChangeHigh, a.PeakChange = -16*kt, -19*kt, -13*kt, -16*kt
			}), Context{Airfield: "skerrymoor", Margin: 17 * kt, Merged: 15 * kt},
			"The headwind falls by about 16 kt (13 to 19) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: close to the margin set for the aircraft here.",
		},
		{
			"third level by a configured margin",
			example(), Context{Airfield: "skerrymoor", Margin: 20 * kt},
			"The headwind falls by about 28 kt (22 to 34) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: more than the margin set for the aircraft here.",
		},
		{
			"along the runway, an exercise",
			with(func(a *lifecycle.Alert) { a.From, a.To, a.Exercise = -180, -920, true }), stall,
			"EXERCISE: The headwind falls by about 28 kt (22 to 34) on landing along runway 07, between 0.2 and 0.9 km beyond the threshold, at mast height; growing. Level 3 of 3: more than the stall margin of the slowest aircraft here.",
		},
		{
			"across the threshold, an exercise by context",
			with(func(a *lifecycle.Alert) { a.From, a.To = 410, -640 }),
			Context{Airfield: "skerrymoor", Margin: 17.3 * kt, MarginIsStall: true, Exercise: true},
			"EXERCISE: The headwind falls by about 28 kt (22 to 34) on the way down to runway 07, from 0.4 km before the threshold to 0.6 km beyond it, at mast height; growing. Level 3 of 3: more than the stall margin of the slowest aircraft here.",
		},
		{
			"closed below the level",
			with(func(a *lifecycle.Alert) {
				close(lifecycle.BelowLevel)(a)
				a.Change, a.ChangeLow, a.ChangeHigh = -5*kt, -8*kt, -3*kt
			}), stall,
			"The fall of the headwind on the way down to runway 07 no longer reaches level 1 of 3 where it is measured: now about 5 kt (3 to 8). At its greatest it was about 28 kt, at 14:15:41 UTC. This alert, open since 14:15:03 UTC, is closed; between the masts and above them the wind may still change.",
		},
		{
			"closed out of sight",
			with(close(lifecycle.NotObserved)), stall,
			"Not observed since 14:15:41 UTC: the fall of the headwind on the way down to runway 07, then about 28 kt (22 to 34) between 2.9 and 1.2 km before the threshold. This alert, open since 14:15:03 UTC, is closed without knowing whether the change has passed.",
		},
		{
			"closed with its path",
			with(func(a *lifecycle.Alert) {
				close(lifecycle.PathWithdrawn)(a)
				a.Runway, a.Operation = "25", "take-off"
			}), stall,
			"Take-off from runway 25 is no longer judged since the configuration changed; the fall of the headwind there was last measured at 14:15:41 UTC as about 28 kt (22 to 34). This alert, open since 14:15:03 UTC, is closed without knowing whether the change has passed.",
		},
		{
			"expired",
			with(close(lifecycle.ExpiredWhileDown)), stall,
			"Nothing was judged while this program did not run; the fall of the headwind on the way down to runway 07 was last measured at 14:15:41 UTC as about 28 kt (22 to 34). This alert, open since 14:15:03 UTC, is closed without knowing whether the change has passed.",
		},
	} {
		t.Run(c.name, func(t *testing.T) {
			n := Of(lifecycle.Transition{At: c.alert.Updated, Alert: c.alert}, c.context)
			if n.Text() != c.want {
				t.Errorf("got\n%s\nwant\n%s", n.Text(), c.want)
			}
			lexical(t, n.Text())
		})
	}
}

func TestStretches(t *testing.T) {
	for _, c := range []struct {
		operation string
		from, to  float64
		want      string
	}{
		{"landing", 2900, 1240, "between 2.9 and 1.2 km before the threshold"},
		{"landing", 410, -640, "from 0.4 km before the threshold to 0.6 km beyond it"},
		{"landing", 1230, 20, "in the last 1.2 km before the threshold"},
		{"landing", 0, -640, "in the first 0.6 km beyond the threshold"},
		{"landing", -40, -640, "in the first 0.6 km beyond the threshold"},
		{"landing", -180, -920, "between 0.2 and 0.9 km beyond the threshold"},
		{"landing", 1230, 1210, "near 1.2 km before the threshold"},
		{"landing", -1210, -1230, "near 1.2 km beyond the threshold"},
		{"landing", 30, -30, "at the threshold"},
		{"take-off", 0, -800, "in the first 0.8 km from the start of the roll"},
		{"take-off", -800, -2400, "between 0.8 and 2.4 km from the start of the roll"},
		{"take-off", 30, -30, "at the start of the roll"},
	} {
		if got := markOf(c.operation).stretch(c.from, c.to); got != c.want {
			t.Errorf("%s %v to %v: %q, want %q", c.operation, c.from, c.to, got, c.want)
		}
	}
}

func TestFixed(t *testing.T) {
	for _, c := range []struct {
		v        float64
		decimals int
		want     string
	}{
		{-0.04, 1, "0.0"}, {-0.06, 1, "-0.1"}, {math.Copysign(0, -1), 0, "0"}, {-4, 0, "-4"}, {-0.0004, 3, "0.000"}, {10, 1, "10.0"},
	} {
		if got := fixed(c.v, c.decimals); got != c.want {
			t.Errorf("fixed(%v, %d) = %s, want %s", c.v, c.decimals, got, c.want)
		}
	}
}
