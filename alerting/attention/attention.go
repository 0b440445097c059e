// Package attention takes the issues of alerts, and what people do about them,
// and says what is to be looked at and what is to be heard: the state of each
// occurrence, who acknowledged it, until when it is shelved, and its sound. It
// decides nothing about alerts, and hides none. It reads no clock and takes no
// lock; the same calls give the same state, which is how it is restored after a
// restart. Next: page.
package attention

import (
	"cmp"
	"errors"
	"math"
	"slices"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/sensors"
)

const (
	// LongestShelving is how far away the end of a shelving may lie.
	LongestShelving = 8 * time.Hour
	// UsualShelving is how long a shelving lasts where nobody says so.
	UsualShelving = 15 * time.Minute
	// Remembered is how long an occurrence that ended before anybody
	// acknowledged it stays on show.
	Remembered = 12 * time.Hour
	// mostEnded bounds those: the oldest are forgotten first.
	mostEnded = 100
)

// State of an occurrence.
type State string

// The states of an occurrence. One that ended after it was acknowledged is
// not on show any more.
const (
	RaisedUnseen State = "raised-unseen"
	RaisedSeen   State = "raised-seen"
	Shelved      State = "shelved"
	EndedUnseen  State = "ended-unseen"
)

// Sound is what is heard of an occurrence.
type Sound string

// The sounds.
const (
	Silent Sound = "none"
	First  Sound = "first"
	Second Sound = "second" // of the third level
)

// Alert is an issue of an alert, as much of it as matters here.
type Alert struct {
	ID, Occurrence string
	Runway         string
	Kind           alerting.Kind
	Level          alerting.Level
	Change         float64 // m/s
	Open           bool
	Opened         sensors.Instant
	At             sensors.Instant // of this issue
	Trend          string
	Sentence       string
}

// Occurrence is what is on show of one occurrence.
type Occurrence struct {
	ID     string
	State  State
	Level  alerting.Level // the highest that is open; of one that ended, that it had
	Since  sensors.Instant
	Ended  sensors.Instant // 0 while an alert of it is open
	Alerts []Alert         // the open ones first, the worst of them first
	Sound  Sound

	Acknowledged Act // zero: it is not
	Shelving     Shelving
}

// Act is who did something, and when.
type Act struct {
	Who string
	At  sensors.Instant
}

// Shelving is a sound kept silent for a reason and a time. The zero Shelving
// is none.
type Shelving struct {
	Act
	Reason string
	Until  sensors.Instant
}

// Why a shelving ended, other than by hand.
const (
	ByTime       = "time"
	ByEscalation = "escalation"
	ByEnd        = "ended"
)

// Lifted is a shelving that ended by itself.
type Lifted struct {
	Occurrence string
	Shelving   Shelving
	Why        string
}

// What cannot be done, for the caller to say so.
var (
	ErrNoOccurrence = errors.New("there is no such occurrence on show")
	ErrNotOpen      = errors.New("no alert of this occurrence is open")
	ErrNotShelved   = errors.New("this occurrence is not shelved")
	ErrNoReason     = errors.New("a shelving needs a reason")
	ErrBadEnd       = errors.New("a shelving ends later than now and within 8 h")
)

// Watch holds the occurrences on show. Not safe for concurrent use.
type Watch struct {
	occurrences map[string]*occurrence
	runway      string // in use; empty: none is set
}

// occurrence is one occurrence from its first alert on.
type occurrence struct {
	id     string
	alerts map[string]Alert // the newest issue of each
	since  sensors.Instant
	ended  sensors.Instant
	peak   alerting.Level

	seen     Act
	shelving Shelving
}

// New is a watch with nothing on show.
func New() *Watch { return &Watch{occurrences: make(map[string]*occurrence)} }

// Issue takes an issue of an alert. A level that rises undoes what somebody
// acknowledged or shelved: what becomes worse is to be looked at again. Levels
// fall only after a hold, so that this does not chatter.
func (w *Watch) Issue(a Alert) (lifted []Lifted) {
	o := w.occurrences[a.Occurrence]
	if o == nil {
		if !a.Open {
			return nil // it ended after it was acknowledged
		}
		o = &occurrence{id: a.Occurrence, alerts: make(map[string]Alert), since: a.Opened}
		w.occurrences[a.Occurrence] = o
	}
	if before, known := o.alerts[a.ID]; known && a.At < before.At {
		return nil
	}
	former := o.level()
	o.alerts[a.ID] = a
	o.since = min(o.since, a.Opened)
	level := o.level()
	o.peak = max(o.peak, level)
	if level == alerting.NoLevel {
		return w.end(o, a.At)
	}
	o.ended = 0
	if level > former {
		o.seen = Act{}
		if o.shelved() {
			lifted = o.lift(ByEscalation)
		}
	}
	return lifted
}

// end takes an occurrence off the show, or keeps it where nobody has looked at
// it. Who shelved it has.
func (w *Watch) end(o *occurrence, at sensors.Instant) (lifted []Lifted) {
	known := o.seen != (Act{}) || o.shelved()
	if o.shelved() {
		lifted = o.lift(ByEnd)
	}
	if known {
		delete(w.occurrences, o.id)
		return lifted
	}
	if o.ended == 0 {
		o.ended = at
	}
	w.forgetMost()
	return lifted
}

// forgetMost drops the oldest of too many that ended unseen.
func (w *Watch) forgetMost() {
	var ended []*occurrence
	for _, o := range w.occurrences {
		if o.ended != 0 {
			ended = append(ended, o)
		}
	}
	if len(ended) <= mostEnded {
		return
	}
	slices.SortFunc(ended, func(a, b *occurrence) int {
		return cmp.Or(cmp.Compare(a.ended, b.ended), strings.Compare(a.id, b.id))
	})
	for _, o := range ended[:len(ended)-mostEnded] {
		delete(w.occurrences, o.id)
	}
}

// Step lets time pass: shelvings end, and what ended long ago is forgotten.
func (w *Watch) Step(now sensors.Instant) (lifted []Lifted) {
	for id, o := range w.occurrences {
		switch {
		case o.shelved() && now >= o.shelving.Until:
			lifted = append(lifted, o.lift(ByTime)...)
		case o.ended != 0 && now.Sub(o.ended) >= Remembered:
			delete(w.occurrences, id)
		}
	}
	slices.SortFunc(lifted, func(a, b Lifted) int { return strings.Compare(a.Occurrence, b.Occurrence) })
	return lifted
}

// Acknowledge notes that somebody has looked at an occurrence. A second time
// changes nothing; the first one counts.
func (w *Watch) Acknowledge(id, who string, at sensors.Instant) error {
	o := w.occurrences[id]
	switch {
	case o == nil:
		return ErrNoOccurrence
	case o.ended != 0:
		delete(w.occurrences, id)
	case o.seen == (Act{}):
		o.seen = Act{who, at}
	}
	return nil
}

// Shelve keeps an occurrence silent until a time, or until it gets worse. It
// stays on show. One that is shelved already gets the new end and reason.
func (w *Watch) Shelve(id, who, reason string, until, at sensors.Instant) error {
	o := w.occurrences[id]
	switch {
	case o == nil:
		return ErrNoOccurrence
	case o.ended != 0:
		return ErrNotOpen
	case strings.TrimSpace(reason) == "":
		return ErrNoReason
	case until <= at || until.Sub(at) > LongestShelving:
		return ErrBadEnd
	}
	o.shelving = Shelving{Act{who, at}, reason, until}
	return nil
}

// Unshelve ends a shelving by hand.
func (w *Watch) Unshelve(id string) error {
	o := w.occurrences[id]
	switch {
	case o == nil:
		return ErrNoOccurrence
	case !o.shelved():
		return ErrNotShelved
	}
	o.shelving = Shelving{}
	return nil
}

// UseRunway says which runway is in use; empty for none in particular.
func (w *Watch) UseRunway(designator string) { w.runway = designator }

// RunwayInUse is the designator that was set; empty for none.
func (w *Watch) RunwayInUse() string { return w.runway }

// Occurrences is everything on show: what is open before what has ended, then
// the highest level, then the largest change.
func (w *Watch) Occurrences() []Occurrence {
	out := make([]Occurrence, 0, len(w.occurrences))
	for _, o := range w.occurrences {
		out = append(out, w.show(o))
	}
	slices.SortFunc(out, func(a, b Occurrence) int {
		return cmp.Or(
			compareFlags(a.Ended == 0, b.Ended == 0),
			worst(a.Alerts[0], b.Alerts[0]),
			strings.Compare(a.ID, b.ID),
		)
	})
	return out
}

func (w *Watch) show(o *occurrence) Occurrence {
	out := Occurrence{
		ID: o.id, State: RaisedUnseen, Level: o.level(), Since: o.since, Ended: o.ended, Sound: w.sound(o),
		Acknowledged: o.seen, Shelving: o.shelving,
	}
	switch {
	case o.ended != 0:
		out.State, out.Level = EndedUnseen, o.peak
	case o.shelved():
		out.State = Shelved
	case o.seen != (Act{}):
		out.State = RaisedSeen
	}
	for _, a := range o.alerts {
		out.Alerts = append(out.Alerts, a)
	}
	slices.SortFunc(out.Alerts, worst)
	return out
}

// sound is what is heard of an occurrence. Alerts of runways that are not in
// use are heard at the third level only.
func (w *Watch) sound(o *occurrence) Sound {
	if o.ended != 0 || o.shelved() || o.seen != (Act{}) {
		return Silent
	}
	heard := alerting.NoLevel
	for _, a := range o.alerts {
		if a.Open && (w.runway == "" || a.Runway == w.runway || a.Level == alerting.BeyondMargin) {
			heard = max(heard, a.Level)
		}
	}
	switch heard {
	case alerting.NoLevel:
		return Silent
	case alerting.BeyondMargin:
		return Second
	}
	return First
}

// level is the highest that is open.
func (o *occurrence) level() alerting.Level {
	level := alerting.NoLevel
	for _, a := range o.alerts {
		if a.Open {
			level = max(level, a.Level)
		}
	}
	return level
}

func (o *occurrence) shelved() bool { return o.shelving != Shelving{} }

func (o *occurrence) lift(why string) []Lifted {
	s := o.shelving
	o.shelving = Shelving{}
	return []Lifted{{o.id, s, why}}
}

// worst orders alerts: open ones first, then by level, a loss before a gain,
// then by size.
func worst(a, b Alert) int {
	return cmp.Or(
		compareFlags(a.Open, b.Open),
		cmp.Compare(b.Level, a.Level),
		compareFlags(a.Kind == alerting.HeadwindLoss, b.Kind == alerting.HeadwindLoss),
		cmp.Compare(math.Abs(b.Change), math.Abs(a.Change)),
		strings.Compare(a.ID, b.ID),
	)
}

// compareFlags puts what is set first.
func compareFlags(a, b bool) int {
	switch {
	case a == b:
		return 0
	case a:
		return -1
	}
	return 1
}
