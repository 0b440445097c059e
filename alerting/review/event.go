package review

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	// around is how much before the opening and after the closing is shown.
	around = 10 * time.Minute
	// mostOpen is how much of an alert that stays open for long is shown.
	mostOpen = 2 * time.Hour
	// mostColumns bounds the moments at which a profile is drawn.
	mostColumns = 180
	// windSpan is what the wind of a mast is averaged over in the report.
	windSpan = 10 * time.Second
)

// EventOptions say which event is reported and by what it was judged.
type EventOptions struct {
	ID       string
	Settings engine.Settings // by the configuration in force at the opening
	Config   string          // its SHA-256
	Software string          // of this program
	Made     time.Time
}

// Event is everything about one alert, ready to be written.
type Event struct {
	ID, Occurrence, Airfield, Path string
	Kind, Level                    string
	Exercise                       bool
	Opened                         time.Time
	Closed                         *time.Time
	Worst                          object // the issue of the greatest change at the highest level
	WorstAt                        time.Time
	Lead                           []string // what happened, in plain words
	Others                         []object // of the same occurrence, their newest issue
	Timeline                       []Line
	Seen                           []string // who saw it when
	Unseen                         []string // what was not observed
	Masts                          []MastWind
	Profile                        Profile
	Config, Software               string
	Recorders                      []string // versions that recorded
	Made                           time.Time
	Notice                         string

	from, to sensors.Instant
	field    *airfield.Airfield
	path     int
	observed []airfield.Interval // at the worst moment
}

// Line is one thing that happened.
type Line struct {
	At   time.Time
	Who  string // empty: the program
	What string
}

// MastWind is the wind of one mast over the event, as means of ten seconds.
type MastWind struct {
	ID       string
	At       []float64 // seconds since the beginning of the report
	Speed    []float64 // kt
	From     []float64 // degrees true
	Worst    quantity.Vector
	HasWorst bool
}

// Profile is the headwind along the path, at moments of the event.
type Profile struct {
	Before   []float64   // m before the threshold, in the order of the flight
	At       []float64   // seconds since the beginning of the report
	Headwind [][]float64 // kt, by moment and point; NaN where it was not observed
}

// GatherEvent collects what is known of an event. What could not be read is
// told in it; ErrNoEvent if there is no such event.
func GatherEvent(s *history.Store, o EventOptions) (*Event, error) {
	stored, err := s.Event(o.ID)
	if err != nil {
		return nil, err
	}
	e := &Event{ID: o.ID, Config: o.Config, Software: o.Software, Made: o.Made.UTC(), Notice: alerting.Notice, field: o.Settings.Airfield}
	var issues []object
	for _, b := range stored.Objects {
		issue, err := readObject(b)
		if err != nil {
			e.unseen("an issue of the alert cannot be read: %v", err)
			continue
		}
		issues = append(issues, issue)
	}
	if len(issues) == 0 {
		return nil, fmt.Errorf("event %q: none of its issues can be read", o.ID)
	}
	e.outline(issues)
	e.timeline(issues)
	if err := e.people(s); err != nil {
		e.unseen("part of what people did cannot be read: %v", err)
	}
	if err := e.journal(s); err != nil {
		e.unseen("part of the journal cannot be read: %v", err)
	}
	if err := e.others(s); err != nil {
		e.unseen("other alerts of the occurrence cannot all be read: %v", err)
	}
	if err := e.play(s, o.Settings); err != nil {
		return nil, fmt.Errorf("go through the readings of event %q: %w", o.ID, err)
	}
	slices.SortStableFunc(e.Timeline, func(a, b Line) int { return a.At.Compare(b.At) })
	e.tell(issues)
	return e, nil
}

func (e *Event) unseen(format string, args ...any) {
	e.Unseen = append(e.Unseen, fmt.Sprintf(format, args...))
}

// outline takes what stands in the issues.
func (e *Event) outline(issues []object) {
	first, last := issues[0], issues[len(issues)-1]
	e.Occurrence, e.Path, e.Kind = first.Occurrence, first.Operation+" "+first.Runway, first.Kind
	e.Airfield = e.field.Name
	e.Opened, e.Closed = first.Opened.UTC(), last.Closed
	e.Worst = first
	rank := func(o object) alerting.Level { l, _ := alerting.LevelOf(o.Level); return l }
	for _, o := range issues {
		e.Exercise = e.Exercise || o.Exercise
		if o.State != "closed" && o.Observed && (rank(o) > rank(e.Worst) || rank(o) == rank(e.Worst) && math.Abs(o.ChangeKt) > math.Abs(e.Worst.ChangeKt)) {
			e.Worst = o
		}
	}
	e.Level = e.Worst.Level
	e.WorstAt = e.Worst.Updated.UTC()
	end := last.Updated
	if e.Closed != nil {
		end = *e.Closed
	}
	if end.Sub(e.Opened) > mostOpen {
		e.unseen("the alert was open for %v; the charts show the first %v of it", end.Sub(e.Opened).Round(time.Minute), mostOpen)
		end = e.Opened.Add(mostOpen)
	}
	e.from, e.to = sensors.At(e.Opened.Add(-around)), sensors.At(end.Add(around))
	e.path = slices.IndexFunc(e.field.Paths, func(p airfield.Path) bool { return p.Runway() == first.Runway && p.Operation() == first.Operation })
}

// timeline lists the issues that say something new.
func (e *Event) timeline(issues []object) {
	unrecorded := 0
	for i, o := range issues {
		if !o.Recorded {
			unrecorded++
		}
		say := func(format string, args ...any) {
			e.Timeline = append(e.Timeline, Line{At: o.Updated.UTC(), What: fmt.Sprintf(format, args...)})
		}
		if i == 0 {
			say("opened at level %s: %s", o.Level, o.Text)
			continue
		}
		was := issues[i-1]
		switch {
		case o.State == "closed":
			why := "no reason was recorded"
			if o.ClosedBecause != nil {
				why = *o.ClosedBecause
			}
			say("closed (%s): %s", why, o.Text)
		case o.Level != was.Level:
			say("level %s instead of %s: about %.0f kt", o.Level, was.Level, math.Abs(o.ChangeKt))
		case o.Observed != was.Observed && !o.Observed:
			say("its ground is no longer observed")
		case o.Observed != was.Observed:
			say("its ground is observed again")
		case o.Trend != was.Trend:
			say("trend %s: about %.0f kt (%.0f to %.0f), %.0f to %.0f m before the threshold", o.Trend, math.Abs(o.ChangeKt),
				min(math.Abs(o.LowKt), math.Abs(o.HighKt)), max(math.Abs(o.LowKt), math.Abs(o.HighKt)), o.FromM, o.ToM)
		case o.Cause != was.Cause:
			say("cause %s", o.Cause)
		case o.AtEdge != was.AtEdge && o.AtEdge:
			say("it reaches the end of the observed ground")
		case !slices.Equal(o.Stations.Missing, was.Stations.Missing):
			say("masts missing: %s", cmp.Or(joined(o.Stations.Missing), "none"))
		}
	}
	if unrecorded > 0 {
		e.unseen("%d of %d issues went out before they were on disk", unrecorded, len(issues))
	}
}

// people adds what was done about the event, and by whom.
func (e *Event) people(s *history.Store) error {
	var faults []error
	named := map[uint64]bool{}
	for rec, err := range s.About(e.ID, e.Occurrence) {
		if err != nil {
			faults = append(faults, err)
			continue
		}
		named[rec.Seq] = true
		faults = append(faults, e.did(rec))
	}
	// What names no event but fell into its time.
	for rec, err := range s.People(e.from, e.to+1, history.KindPilotReport, history.KindRunwayInUse, history.KindAccess, history.KindSheet) {
		if err != nil {
			faults = append(faults, err)
		} else if !named[rec.Seq] {
			faults = append(faults, e.did(rec))
		}
	}
	return errors.Join(faults...)
}

// did adds a record of what somebody did.
func (e *Event) did(rec history.Record) error {
	at := rec.At.Time()
	add := func(who, format string, args ...any) {
		e.Timeline = append(e.Timeline, Line{At: at, Who: who, What: fmt.Sprintf(format, args...)})
	}
	switch rec.Kind {
	case history.KindAcknowledge:
		a, err := rec.Acknowledgement()
		add(a.Who, "acknowledged")
		e.Seen = append(e.Seen, fmt.Sprintf("%s acknowledged at %s, %.0f s after the opening.", cmp.Or(a.Who, "somebody"), clock(at), at.Sub(e.Opened).Seconds()))
		return err
	case history.KindNote:
		n, err := rec.Note()
		add(n.Who, "note: %s", n.Text)
		return err
	case history.KindShelve:
		h, err := rec.Shelving()
		if h.Ended {
			add(h.Who, "no longer put aside (%s)", h.Why)
		} else {
			add(h.Who, "put aside until %s: %s", clock(h.Until.Time()), h.Reason)
		}
		return err
	case history.KindPilotReport:
		p, err := rec.PilotReport()
		add(p.Who, "pilot report for %s %s at %s: %s", p.Operation, p.Runway, clock(p.At.Time()), reportWords(p))
		return err
	case history.KindRunwayInUse:
		r, err := rec.RunwayInUse()
		add(r.Who, "runway in use: %s", cmp.Or(r.Runway, "none set"))
		return err
	case history.KindAccess:
		a, err := rec.Access()
		outcome := "refused"
		if a.OK {
			outcome = "let in"
		}
		add(a.Who, "%s (%s)", a.What, outcome)
		return err
	case history.KindSheet:
		sh, err := rec.Sheet()
		add(sh.Who, "signed the %s sheet", sh.What)
		return err
	case history.KindHold:
		h, err := rec.Hold()
		add(h.Who, "readings held: %s", h.Reason)
		return err
	}
	return nil
}

// reportWords is what a crew felt, in words.
func reportWords(p history.PilotReport) string {
	var s string
	switch p.Felt {
	case FeltLoss:
		s = "the headwind fell"
	case FeltGain:
		s = "the headwind rose"
	default:
		s = "no change felt"
	}
	if p.Amount > 0 {
		s += fmt.Sprintf(" by about %.0f kt", p.Amount/quantity.Knot)
	}
	if p.FromM != nil {
		s += fmt.Sprintf(", %.0f m before the threshold", *p.FromM)
	}
	if p.GoAround {
		s += "; went around"
	}
	if p.Aircraft != "" {
		s += " (" + p.Aircraft + ")"
	}
	if p.Text != "" {
		s += ": " + p.Text
	}
	return s
}

// journal adds what the program itself noted in that time, and who recorded.
func (e *Event) journal(s *history.Store) error {
	version := ""
	return s.Journal(1, func(rec history.Record) error {
		if rec.Kind == history.KindSoftware {
			if rec.At <= e.from { // the last one before counts
				e.Recorders = e.Recorders[:0]
			}
			if version = string(rec.Payload); rec.At <= e.to && !slices.Contains(e.Recorders, version) {
				e.Recorders = append(e.Recorders, version)
			}
		}
		if rec.At < e.from || rec.At > e.to {
			return nil
		}
		add := func(what string) { e.Timeline = append(e.Timeline, Line{At: rec.At.Time(), What: what}) }
		switch rec.Kind {
		case history.KindStart:
			add("the program was started")
		case history.KindStop:
			add("the program was stopped")
		case history.KindConfiguration:
			add("a configuration took effect")
		case history.KindDamage:
			add("damage was found: " + string(rec.Payload))
		case history.KindGap:
			if g, err := rec.Gap(); err == nil {
				e.unseen("%d steps from %s to %s were not kept: %s", g.Steps, clock(g.From.Time()), clock(g.To.Time()), g.Why)
			}
		}
		return nil
	})
}

// others finds the other alerts of the occurrence.
func (e *Event) others(s *history.Store) error {
	found, err := s.Events(history.Filter{From: sensors.At(e.Opened.Add(-time.Hour)), To: e.to})
	for _, f := range found {
		o, bad := readObject(f.Object)
		if bad == nil && o.Occurrence == e.Occurrence && o.ID != e.ID {
			e.Others = append(e.Others, o)
		}
	}
	slices.SortFunc(e.Others, func(a, b object) int { return cmp.Or(a.Opened.Compare(b.Opened), cmp.Compare(a.ID, b.ID)) })
	return err
}

func clock(t time.Time) string { return t.UTC().Format("15:04:05") }

func joined(ids []string) string {
	s := ""
	for i, id := range ids {
		if i > 0 {
			s += ", "
		}
		s += id
	}
	return s
}
