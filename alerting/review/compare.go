package review

import (
	"fmt"
	"math"
	"time"

	"sockline/alerting"
)

// The verdicts of a comparison.
const (
	Same     = "same"
	Changes  = "changes"
	Appears  = "appears"
	Vanishes = "vanishes"
)

// Pair is what became of an alert, or of several that belong together, under
// other rules.
type Pair struct {
	Verdict  string   `json:"verdict"`
	Recorded []Life   `json:"recorded"` // as they were told
	Other    []Life   `json:"other"`    // as they would have been
	What     []string `json:"what"`     // in which way they differ, in words
}

// Comparison is a set of alerts beside another.
type Comparison struct {
	Same     int        `json:"same"`
	Changes  int        `json:"changes"`
	Appears  int        `json:"appears"`
	Vanishes int        `json:"vanishes"`
	Recorded [4]int     `json:"recorded_by_level"` // alerts by their highest level; [0] is all
	Other    [4]int     `json:"other_by_level"`
	OpenS    [2]float64 `json:"open_s"` // seconds that alerts were open: recorded, other
	Pairs    []Pair     `json:"pairs"`
}

// Compare sets alerts as they were told beside those that other rules give.
// Alerts of one path and kind belong together when they were open at the same
// time; several may then have become one.
func Compare(recorded, other []Life) Comparison {
	var c Comparison
	for _, group := range components(recorded, other) {
		p := judgePair(group.recorded, group.other)
		switch p.Verdict {
		case Same:
			c.Same++
		case Changes:
			c.Changes++
		case Appears:
			c.Appears++
		case Vanishes:
			c.Vanishes++
		}
		c.Pairs = append(c.Pairs, p)
	}
	count := func(lives []Life, by *[4]int, open *float64) {
		for i := range lives {
			by[0]++
			if lives[i].highest > alerting.NoLevel && lives[i].highest <= alerting.BeyondMargin {
				by[lives[i].highest]++
			}
			*open += lives[i].end().Sub(lives[i].Opened).Seconds()
		}
	}
	count(recorded, &c.Recorded, &c.OpenS[0])
	count(other, &c.Other, &c.OpenS[1])
	return c
}

// component is a set of alerts of one path and kind, each open at the same time
// as another of it.
type component struct {
	recorded, other []Life
	key             string
	until           time.Time
}

// components joins both lists, in order of the openings.
func components(recorded, other []Life) []component {
	var out []component
	last := map[string]int{} // by path and kind: the newest component
	i, j := 0, 0
	for i < len(recorded) || j < len(other) {
		fromOther := i == len(recorded) || j < len(other) && other[j].Opened.Before(recorded[i].Opened)
		var l Life
		if fromOther {
			l = other[j]
			j++
		} else {
			l = recorded[i]
			i++
		}
		key := l.Runway + " " + l.Operation + " " + l.Kind
		n, ok := last[key]
		// Alerts of one side never overlap: to touch the component is to be
		// open together with one of the other side.
		if !ok || l.Opened.After(out[n].until) {
			n = len(out)
			last[key] = n
			out = append(out, component{key: key})
		}
		g := &out[n]
		if fromOther {
			g.other = append(g.other, l)
		} else {
			g.recorded = append(g.recorded, l)
		}
		if end := l.end(); end.After(g.until) {
			g.until = end
		}
	}
	return out
}

func judgePair(recorded, other []Life) Pair {
	p := Pair{Recorded: recorded, Other: other}
	switch {
	case len(other) == 0:
		p.Verdict = Vanishes
	case len(recorded) == 0:
		p.Verdict = Appears
	case len(recorded) != len(other):
		p.Verdict = Changes
		p.What = []string{fmt.Sprintf("%s instead of %s", alertsInWords(len(other)), alertsInWords(len(recorded)))}
	default:
		for i := range recorded {
			p.What = append(p.What, differences(&recorded[i], &other[i])...)
		}
		p.Verdict = Same
		if len(p.What) > 0 {
			p.Verdict = Changes
		}
	}
	if p.What == nil {
		p.What = []string{}
	}
	if p.Recorded == nil {
		p.Recorded = []Life{}
	}
	if p.Other == nil {
		p.Other = []Life{}
	}
	return p
}

func alertsInWords(n int) string {
	if n == 1 {
		return "1 alert"
	}
	return fmt.Sprintf("%d alerts", n)
}

// differences between two lives, in words, as far as they concern when an
// alert was raised and at which level. Figures are left out: what is kept of a
// step is rounded.
func differences(a, b *Life) []string {
	var out []string
	shift := func(what string, from, to time.Time) {
		d := to.Sub(from)
		switch {
		case d > 0:
			out = append(out, fmt.Sprintf("%s %v later", what, d))
		case d < 0:
			out = append(out, fmt.Sprintf("%s %v earlier", what, -d))
		}
	}
	shift("opens", a.Opened, b.Opened)
	switch {
	case a.Closed == nil && b.Closed == nil:
	case a.Closed == nil || b.Closed == nil:
		out = append(out, map[bool]string{true: "is still open", false: "closes"}[b.Closed == nil])
	default:
		shift("closes", *a.Closed, *b.Closed)
		if a.Because != b.Because {
			out = append(out, fmt.Sprintf("closes as %s instead of %s", b.Because, a.Because))
		}
	}
	if a.highest != b.highest {
		out = append(out, fmt.Sprintf("reaches %s instead of %s", b.Level, a.Level))
	} else if len(out) == 0 && !sameSteps(a.Steps, b.Steps) {
		out = append(out, "changes its level at other times")
	}
	return out
}

func sameSteps(a, b []LevelSince) bool {
	if len(a) != len(b) {
		return false
	}
	for i := range a {
		if a[i].Level != b[i].Level || math.Abs(a[i].Since.Sub(b[i].Since).Seconds()) >= 1 {
			return false
		}
	}
	return true
}
