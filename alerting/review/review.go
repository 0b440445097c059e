// Package review looks back: the journal, the readings and what was judged
// come in, and out go lives of alerts set against those that other levels
// would have given, statistics, verification against what pilots reported, and
// the report of one event. It writes to whatever it is given and reads no
// clock.
//
// It is the end of the line: cmd prints what it makes, and the page shows it.
package review

import (
	"cmp"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// Life is one alert from its opening to its closing, as it is looked back at.
type Life struct {
	ID         string       `json:"id"`
	Occurrence string       `json:"occurrence"`
	Runway     string       `json:"runway"`
	Operation  string       `json:"operation"`
	Kind       string       `json:"kind"`
	Level      string       `json:"level"` // the highest it had
	Opened     time.Time    `json:"opened"`
	Closed     *time.Time   `json:"closed"` // nil while open
	Because    string       `json:"closed_because,omitempty"`
	PeakKt     float64      `json:"peak_kt"` // signed: a loss is negative
	PeakAt     time.Time    `json:"peak_at"`
	FromM      float64      `json:"from_m"` // of the greatest change
	ToM        float64      `json:"to_m"`
	Cause      string       `json:"cause"`
	Steps      []LevelSince `json:"levels"` // every level it had, in order
	Issues     int          `json:"issues"`
	Exercise   bool         `json:"exercise"`

	highest alerting.Level
	updated sensors.Instant
}

// LevelSince is when an alert took a level.
type LevelSince struct {
	Level string    `json:"level"`
	Since time.Time `json:"since"`
}

// Highest is the highest level it had.
func (l *Life) Highest() alerting.Level { return l.highest }

// end is when it closed, or was last issued.
func (l *Life) end() time.Time {
	if l.Closed != nil {
		return *l.Closed
	}
	return l.updated.Time()
}

// Lives gathers the issues of alerts, in their order, into lives.
type Lives struct {
	byID map[string]*Life
}

// NewLives is empty.
func NewLives() *Lives { return &Lives{byID: map[string]*Life{}} }

// Take adds an issue.
func (ls *Lives) Take(a *lifecycle.Alert) {
	l := ls.byID[a.ID]
	if l == nil {
		l = &Life{ID: a.ID, Occurrence: a.Occurrence, Runway: a.Runway, Operation: a.Operation, Kind: string(a.Kind), Opened: a.Opened.Time()}
		ls.byID[a.ID] = l
	}
	l.Issues++
	l.updated = a.Updated
	l.Exercise = l.Exercise || a.Exercise
	if a.Cause != "" && a.Cause != alerting.Unresolved || l.Cause == "" {
		l.Cause = string(a.Cause) // what was once told apart stays
	}
	if word := a.Level.String(); a.State == lifecycle.Open && (len(l.Steps) == 0 || l.Steps[len(l.Steps)-1].Level != word) {
		l.Steps = append(l.Steps, LevelSince{word, a.Updated.Time()})
	}
	if a.Level > l.highest {
		l.highest, l.Level = a.Level, a.Level.String()
	}
	// The place is that of the first issue that has the greatest change: later
	// ones tell where the change is by then.
	if a.PeakAt != 0 && !l.PeakAt.Equal(a.PeakAt.Time()) {
		l.PeakKt, l.PeakAt = tenthKt(a.PeakChange), a.PeakAt.Time()
		l.FromM, l.ToM = math.Round(a.From), math.Round(a.To)
	}
	if a.State == lifecycle.Closed {
		at := a.Closed.Time()
		l.Closed, l.Because = &at, string(a.Because)
	}
}

// List is every life, by opening and id.
func (ls *Lives) List() []Life {
	out := make([]Life, 0, len(ls.byID))
	for _, l := range ls.byID {
		out = append(out, *l)
	}
	slices.SortFunc(out, func(a, b Life) int {
		return cmp.Or(a.Opened.Compare(b.Opened), cmp.Compare(a.ID, b.ID))
	})
	return out
}

// OpenedIn are those that opened in [from, to); 0 is no limit.
func (ls *Lives) OpenedIn(from, to sensors.Instant) []Life {
	return slices.DeleteFunc(ls.List(), func(l Life) bool {
		at := sensors.At(l.Opened)
		return at < from || to != 0 && at >= to
	})
}

// Recorded are the alerts of a history that opened in [from, to). Issues that
// cannot be read are named in the error; the others are still returned.
func Recorded(s *history.Store, from, to sensors.Instant) ([]Life, error) {
	lives := NewLives()
	faults := 0
	var first error
	err := s.Journal(1, func(r history.Record) error {
		if r.Kind != history.KindIssue || r.At < from {
			return nil
		}
		is, err := r.Issue()
		if err != nil {
			if faults++; first == nil {
				first = err
			}
			return nil
		}
		lives.Take(&is.Alert)
		return nil
	})
	if err == nil && faults > 0 {
		err = fmt.Errorf("%d issues in the journal cannot be read, the first: %w", faults, first)
	}
	return lives.OpenedIn(from, to), err
}

// object is the part of an alert object that the reports read.
type object struct {
	ID, Occurrence, Runway, Operation, Kind, Level, State string
	Revision                                              int
	Opened, Updated                                       time.Time
	Closed                                                *time.Time
	ClosedBecause                                         *string `json:"closed_because"`
	ChangeKt                                              float64 `json:"change_kt"`
	LowKt                                                 float64 `json:"change_low_kt"`
	HighKt                                                float64 `json:"change_high_kt"`
	Probability                                           float64
	FromM                                                 float64 `json:"from_m"`
	ToM                                                   float64 `json:"to_m"`
	AtEdge                                                bool    `json:"at_edge"`
	Observed, Recorded, Exercise                          bool
	Cause, Trend, Text                                    string
	Peak                                                  struct {
		ChangeKt float64   `json:"change_kt"`
		At       time.Time `json:"at"`
	}
	Stations struct{ Used, Missing []string }
}

func readObject(b []byte) (o object, err error) {
	if err = json.Unmarshal(b, &o); err != nil {
		return o, fmt.Errorf("read an alert object: %w", err)
	}
	return o, nil
}

// fieldsOf takes an alert object apart.
func fieldsOf(b []byte) map[string]json.RawMessage {
	fields := map[string]json.RawMessage{}
	if err := json.Unmarshal(b, &fields); err != nil {
		fields["all of it"] = b
	}
	return fields
}
