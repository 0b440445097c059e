package wording

import (
	"math"
	"strconv"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/lifecycle"
)

// words are the forms in which a kind of change is told.
type words struct{ now, then, noun string }

func wordsOf(k alerting.Kind) words {
	if k == alerting.HeadwindGain {
		return words{"rises", "rose", "rise"}
	}
	return words{"falls", "fell", "fall"}
}

// sentence is the alert in plain words, the wind first. It says what was
// measured, where and when, and never what to do.
func sentence(a *lifecycle.Alert, c Context) string {
	if a.State == lifecycle.Closed {
		return closingSentence(a)
	}
	if !alongPath(a.Kind) {
		return otherSentence(a)
	}
	w, m := wordsOf(a.Kind), markOf(a.Operation)
	amount := estimate(a.Change, a.ChangeLow, a.ChangeHigh, a.AtEdge)
	where := flight(a) + ", " + m.stretch(a.From, a.To) + ", at mast height"
	if !a.Observed {
		return "The headwind " + w.then + " by " + amount + " " + where +
			". Not observed now: last measured at " + clock(a.MeasuredAt) + ". " +
			levelSentence(a, c) + missing(a.Missing)
	}
	s := "The headwind " + w.now + " by " + amount + " " + where + trend(a.Trend)
	if a.AtEdge {
		s += " It reaches the end of the observed ground and may go on beyond it."
	}
	return s + " " + levelSentence(a, c) + missing(a.Missing)
}

// flight is the part of a flight that the change concerns. A landing path
// includes the roll: once both ends lie beyond the threshold it is no longer
// the way down.
func flight(a *lifecycle.Alert) string {
	switch {
	case a.Operation == airfield.TakeOff:
		return "on take-off from runway " + a.Runway
	case a.From < 0:
		return "on landing along runway " + a.Runway
	}
	return "on the way down to runway " + a.Runway
}

func trend(t lifecycle.Trend) string {
	switch t {
	case lifecycle.Growing, lifecycle.Steady, lifecycle.Fading:
		return "; " + string(t) + "."
	}
	return "; trend not yet known."
}

func missing(masts []string) string {
	if len(masts) == 0 {
		return ""
	}
	return " No readings from " + and(masts) + "."
}

// levelSentence says which level of three the alert has and what that is.
func levelSentence(a *lifecycle.Alert, c Context) string {
	s := "Level " + strconv.Itoa(int(a.Level)) + " of 3"
	if held := a.Memory.Held[a.Level&3]; a.Observed && held != 0 && held < a.Updated {
		s += ", kept although less is measured now"
	}
	return s + ": " + meaning(a, c) + "."
}

// meaning is what the level stands for. The third level opens by the loss or
// by its steepness: the greatest change so far tells which.
func meaning(a *lifecycle.Alert, c Context) string {
	switch a.Level {
	case alerting.Noticeable:
		return "a noticeable change"
	case alerting.Large:
		return "a large change"
	case alerting.BeyondMargin:
		byLoss := math.Abs(a.PeakChange) >= c.Margin
		switch {
		case a.Kind != alerting.HeadwindLoss || c.Margin <= 0 || byLoss && !c.MarginIsStall:
			return "more than the margin set for the aircraft here"
		case byLoss:
			return "more than the stall margin of the slowest aircraft here"
		case c.Merged > 0 && math.Abs(a.PeakChange) >= c.Merged && c.MarginIsStall:
			return "close to the stall margin of the slowest aircraft here"
		case c.Merged > 0 && math.Abs(a.PeakChange) >= c.Merged:
			return "close to the margin set for the aircraft here"
		}
		return "steeper over 1 km than the limit set for the fastest aircraft here"
	}
	return "not known"
}

// closingSentence tells how an alert ended. Only below-level rests on a
// measurement, and even that says nothing of the wind between the masts; the
// others say outright that the end was not seen.
func closingSentence(a *lifecycle.Alert) string {
	if !alongPath(a.Kind) {
		return otherClosing(a)
	}
	w, m := wordsOf(a.Kind), markOf(a.Operation)
	change := "the " + w.noun + " of the headwind " + flight(a)
	last := estimate(a.Change, a.ChangeLow, a.ChangeHigh, a.AtEdge)
	unseen := " This alert, open since " + clock(a.Opened) + ", is closed without knowing whether the change has passed."
	switch a.Because {
	case lifecycle.BelowLevel:
		return upper(change) + " no longer reaches level 1 of 3 where it is measured: now " + last +
			". At its greatest it was " + about(a.PeakChange, false) + ", at " + clock(a.PeakAt) +
			". This alert, open since " + clock(a.Opened) +
			", is closed; between the masts and above them the wind may still change."
	case lifecycle.NotObserved:
		return "Not observed since " + clock(a.MeasuredAt) + ": " + change + ", then " + last + " " +
			m.stretch(a.From, a.To) + "." + unseen
	case lifecycle.PathWithdrawn:
		return upper(operationOn(a.Operation, a.Runway)) + " is no longer judged since the configuration changed; the " +
			w.noun + " of the headwind there was last measured at " + clock(a.MeasuredAt) + " as " + last + "." + unseen
	case lifecycle.ExpiredWhileDown:
		return "Nothing was judged while this program did not run; " + change +
			" was last measured at " + clock(a.MeasuredAt) + " as " + last + "." + unseen
	}
	return upper(change) + " was last measured at " + clock(a.MeasuredAt) + " as " + last + "." + unseen
}

// operationOn names a path: "landing on runway 07".
func operationOn(operation, runway string) string {
	if operation == airfield.TakeOff {
		return "take-off from runway " + runway
	}
	return airfield.Landing + " on runway " + runway
}

// upper begins a sentence; its first letter is ASCII.
func upper(s string) string {
	if s != "" && s[0] >= 'a' && s[0] <= 'z' {
		return string(s[0]-'a'+'A') + s[1:]
	}
	return s
}
