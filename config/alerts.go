package config

import (
	"fmt"
	"math"

	"sockline/alerting/airfield"
	"sockline/alerting/vertical"
	"sockline/sensors/quantity"
)

// stallMargin is the part of an approach speed that lies above the stall:
// V_REF = 1.3 V_S0 (EASA CS-23), so 1 - 1/1.3 = 23 %.
const stallMargin = 1 - 1/1.3

// leastMargin is the smallest change that the highest level is derived as.
const leastMargin = 15 * quantity.Knot

// alerts are the levels and what surrounds them.
func (t *table) alerts() Alerts {
	a := t.table("alerts", true)
	var s Alerts
	var slow, fast, noticeable, large, margin, hysteresis bool // which keys are sound
	// The bounds keep out what can only be a slip of the keyboard: no aircraft
	// lands at 20 kt, and a level of 300 kt would never open.
	s.ApproachSpeed, slow = a.quantity("approach_speed", speed(), bounds{"30 kt", "200 kt"}, "")
	s.FastestApproachSpeed, fast = a.quantity("fastest_approach_speed", speed(), bounds{"30 kt", "250 kt"}, "")
	s.Noticeable, noticeable = a.quantity("noticeable_change", speed(), bounds{"5 kt", "40 kt"}, "10 kt")
	s.Large, large = a.quantity("large_change", speed(), bounds{"6 kt", "60 kt"}, "15 kt")
	s.StallMargin = float64(stallMargin * s.ApproachSpeed)
	if _, s.MarginDerived = a.values["margin_change"]; s.MarginDerived {
		s.Margin, margin = a.quantity("margin_change", speed(), bounds{"10 kt", "80 kt"}, "15 kt")
	} else {
		a.asked = append(a.asked, "margin_change")
		s.Margin, margin = max(s.StallMargin, leastMargin), slow
	}
	s.MarginDerived = !s.MarginDerived
	// 65 kt gives 15 kt but for rounding.
	s.MarginRaisedUp = slow && s.StallMargin < leastMargin-1e-9
	s.MarginFBar, _ = a.quantity("margin_fbar", bare(), bounds{"0.03", "0.5"}, "0.10")
	s.Confidence, _ = a.quantity("confidence", bare(), bounds{"0.5", "0.99"}, "0.8")
	s.Hysteresis, hysteresis = a.quantity("hysteresis", speed(), bounds{"0 kt", "10 kt"}, "2 kt")
	s.Hold, _ = a.duration("hold", bounds{"5 s", "10 min"}, "60 s")
	a.others(&s)

	// What follows compares keys, so it needs both sides to be sound.
	if slow && fast && s.FastestApproachSpeed < s.ApproachSpeed {
		a.blame(a.key("fastest_approach_speed"), knots(s.FastestApproachSpeed), "exchange the two speeds",
			"the fastest aircraft is slower than the slowest, %s", knots(s.ApproachSpeed))
	}
	if noticeable && large && s.Noticeable >= s.Large {
		a.blame(a.key("large_change"), knots(s.Large), "raise large_change or lower noticeable_change",
			"large_change must lie above noticeable_change, %s", knots(s.Noticeable))
	}
	// A derived margin of exactly large_change may lie a rounding below it.
	if large && margin && s.Margin < s.Large-1e-9 {
		key, mend := a.key("margin_change"), "raise margin_change or lower large_change"
		if s.MarginDerived {
			key, mend = a.key("large_change"), "lower large_change, or write margin_change out"
		}
		a.blame(key, "", mend, "level 3 would open before level 2: margin_change is %s, large_change %s", knots(s.Margin), knots(s.Large))
	}
	if noticeable && hysteresis && s.Hysteresis >= s.Noticeable {
		a.blame(a.key("hysteresis"), knots(s.Hysteresis), "lower it; 2 kt is the default",
			"an alert could not close: hysteresis must lie below noticeable_change, %s", knots(s.Noticeable))
	}
	if !a.absent {
		a.done()
	}
	return s
}

// others are the limits of what is no change of headwind. Those of the wind at
// a runway end are off unless they are given: they hang on the aircraft.
func (t *table) others(s *Alerts) {
	s.WindShift, _ = t.quantity("wind_shift", angle(), bounds{"10 deg", "180 deg"}, "30 deg")
	word, _ := t.oneOf("vertical_shear", "strong", "moderate", "strong", "severe", "off")
	for _, c := range []vertical.Class{vertical.Moderate, vertical.Strong, vertical.Severe} {
		if c.String() == word {
			s.VerticalShear = c
		}
	}
	optional := func(name string, b bounds) float64 {
		if _, ok := t.values[name]; !ok {
			t.asked = append(t.asked, name)
			return 0
		}
		v, _ := t.quantity(name, speed(), b, b.low)
		return v
	}
	s.CrosswindLimit = optional("crosswind_limit", bounds{"5 kt", "60 kt"})
	s.TailwindLimit = optional("tailwind_limit", bounds{"3 kt", "40 kt"})
}

// knots is a speed as an operator writes it.
func knots(ms float64) string {
	return fmt.Sprintf("%g kt", math.Round(quantity.Knots(ms)*10)/10)
}

// defaultWindow was chosen on synthetic episodes: from 30 s down to 18 s the
// delay of the alerts falls by about ten seconds and the false ones do not
// become more; below it they do.
const defaultWindow = "18 s"

// analysis says how readings become steps.
func (t *table) analysis() Analysis {
	a := t.table("analysis", false)
	var s Analysis
	s.Window, _ = a.duration("window", bounds{"6 s", "2 min"}, defaultWindow)
	s.Lateness, _ = a.duration("lateness", bounds{"0 s", "10 s"}, "1 s")
	siting, _ := a.oneOf("siting", "learn", "learn", "remove")
	s.RemoveSiting = siting == "remove"
	s.Reach, _ = a.quantity("reach", length(), bounds{"100 m", "3 km"}, fmt.Sprintf("%g m", airfield.Reach))
	a.done()
	return s
}
