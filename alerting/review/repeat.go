package review

import (
	"bytes"
	"cmp"
	"fmt"
	"io"
	"slices"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
)

// Way is how a comparison came about.
type Way string

// The ways.
const (
	Repeated Way = "repeated" // the same configuration over the same readings
	Rejudged Way = "rejudged" // what was kept of each step, judged by other levels
	Analysed Way = "analysed" // the readings, by another configuration
	Mixed    Way = "mixed"    // some days rejudged, some analysed
)

// WhatIf is what another configuration would have told, or whether the same
// one tells the same again.
type WhatIf struct {
	Airfield   string      `json:"airfield"`
	From       time.Time   `json:"from"`
	To         time.Time   `json:"to"`
	Way        Way         `json:"way"`
	Changed    []string    `json:"changed"`   // what the other configuration changes, in words
	Software   string      `json:"software"`  // of this program
	Recorders  []string    `json:"recorders"` // the programs that recorded, where it was repeated
	Repeat     *Repetition `json:"repeat,omitempty"`
	Comparison Comparison  `json:"comparison"`
	Steps      int         `json:"steps"`
	Notes      []string    `json:"notes"`
	Notice     string      `json:"notice"`
}

// Repetition is what came of repeating the recorded alerts.
type Repetition struct {
	Exact  bool    `json:"exact"` // every issue is the same, byte for byte
	Alerts int     `json:"alerts"`
	Issues int     `json:"issues"`
	Differ []Drift `json:"differ"`
}

// Drift is an alert whose issues are not the same again.
type Drift struct {
	ID       string `json:"id"`
	Recorded int    `json:"recorded"` // issues
	Again    int    `json:"again"`
	At       string `json:"at"` // the first issue that differs: its revision and time
	What     string `json:"what"`
}

// Issues are the objects of alerts, in the order of their issue.
type Issues struct {
	byID     map[string][][]byte
	order    []string
	lives    *Lives
	count    int
	exercise bool
}

// NewIssues is empty.
func NewIssues() *Issues { return &Issues{byID: map[string][][]byte{}, lives: NewLives()} }

// Take adds an issue; object is kept.
func (is *Issues) Take(id string, object []byte, a *lifecycle.Alert) {
	if is.byID[id] == nil {
		is.order = append(is.order, id)
	}
	is.byID[id] = append(is.byID[id], bytes.TrimSpace(object))
	is.lives.Take(a)
	is.count++
	if is.count == 1 {
		o, err := readObject(object)
		is.exercise = err == nil && o.Exercise
	}
}

// Exercise tells whether what was told was marked as an exercise.
func (is *Issues) Exercise() bool { return is.exercise }

// Lives are the alerts.
func (is *Issues) Lives() []Life { return is.lives.List() }

// Repeat sets issues beside those that were recorded.
func Repeat(recorded, again *Issues) *Repetition {
	r := &Repetition{Alerts: len(recorded.order), Issues: recorded.count, Differ: []Drift{}}
	ids := append(slices.Clone(recorded.order), again.order...)
	slices.Sort(ids)
	for _, id := range slices.Compact(ids) {
		a, b := recorded.byID[id], again.byID[id]
		if d, ok := driftOf(id, a, b); ok {
			r.Differ = append(r.Differ, d)
		}
	}
	r.Exact = len(r.Differ) == 0
	return r
}

func driftOf(id string, a, b [][]byte) (d Drift, ok bool) {
	d = Drift{ID: id, Recorded: len(a), Again: len(b)}
	for i := range max(len(a), len(b)) {
		switch {
		case i >= len(a):
			d.What = "more issues follow"
		case i >= len(b):
			d.What = "no further issue"
		case bytes.Equal(a[i], b[i]):
			continue
		default:
			d.What = "other: " + strings.Join(fieldsThatDiffer(a[i], b[i]), ", ")
		}
		if len(a) == 0 {
			d.What = "was not recorded"
		}
		if len(b) == 0 {
			d.What = "does not come again"
		}
		at := append(slices.Clone(a), b...)[min(i, max(len(a)+len(b)-1, 0))]
		if i < len(b) && i >= len(a) {
			at = b[i]
		}
		if o, err := readObject(at); err == nil {
			d.At = fmt.Sprintf("issue %d of %s", o.Revision, o.Updated.UTC().Format(time.RFC3339))
		}
		return d, true
	}
	return d, false
}

// fieldsThatDiffer names the parts of two alert objects that are not the same.
func fieldsThatDiffer(a, b []byte) []string {
	x, y := fieldsOf(a), fieldsOf(b)
	var out []string
	for k, v := range x {
		if !bytes.Equal(v, y[k]) {
			out = append(out, k)
		}
	}
	for k := range y {
		if _, ok := x[k]; !ok {
			out = append(out, k)
		}
	}
	slices.Sort(out)
	return out
}

// WriteWhatIf prints a comparison for reading.
func WriteWhatIf(w io.Writer, r WhatIf) error {
	var b strings.Builder
	const layout = "2006-01-02 15:04"
	fmt.Fprintf(&b, "%s, %s to %s UTC\n\n", r.Airfield, r.From.UTC().Format(layout), r.To.UTC().Format(layout))
	if r.Repeat != nil {
		writeRepeat(&b, r)
	} else {
		fmt.Fprintf(&b, "What the other configuration changes: %s.\n", strings.Join(orNothing(r.Changed), "; "))
		fmt.Fprintln(&b, map[Way]string{
			Rejudged: "What was kept of each step was judged by it.",
			Analysed: "The readings were analysed anew by it.",
			Mixed:    "What was kept of each step was judged by it, and where that was not enough the readings were analysed anew.",
		}[r.Way])
	}
	c := r.Comparison
	fmt.Fprintf(&b, "\n%-12s %9s %9s\n", "alerts", "told", "other")
	for level, word := range [...]string{"all", "level 1", "level 2", "level 3"} {
		fmt.Fprintf(&b, "%-12s %9d %9d\n", word, c.Recorded[level], c.Other[level])
	}
	fmt.Fprintf(&b, "%-12s %9.0f %9.0f\n\n%d the same, %d change, %d appear, %d vanish.\n", "minutes open", c.OpenS[0]/60, c.OpenS[1]/60,
		c.Same, c.Changes, c.Appears, c.Vanishes)
	for _, p := range c.Pairs {
		if p.Verdict != Same {
			writePair(&b, p)
		}
	}
	for _, n := range r.Notes {
		fmt.Fprintf(&b, "\nnote: %s", n)
	}
	if len(r.Notes) > 0 {
		b.WriteByte('\n')
	}
	_, err := fmt.Fprintf(w, "%s\n%s\n", b.String(), alerting.Notice)
	return err
}

func orNothing(words []string) []string {
	if len(words) == 0 {
		return []string{"nothing that alerts depend on"}
	}
	return words
}

func writeRepeat(b *strings.Builder, r WhatIf) {
	same := len(r.Recorders) == 1 && r.Recorders[0] == r.Software
	switch {
	case r.Repeat.Issues == 0 && r.Repeat.Exact:
		fmt.Fprintln(b, "No alert was told in this time, and none comes of its readings again.")
	case r.Repeat.Exact:
		fmt.Fprintf(b, "All %d issues of %s come again, byte for byte.\n", r.Repeat.Issues, alertsInWords(r.Repeat.Alerts))
	default:
		fmt.Fprintf(b, "%d of %s do not come again as they were told:\n", len(r.Repeat.Differ), alertsInWords(max(r.Repeat.Alerts, len(r.Repeat.Differ))))
		for _, d := range r.Repeat.Differ {
			fmt.Fprintf(b, "  %s\n    %s: %s (%d issues, now %d)\n", d.ID, d.At, d.What, d.Recorded, d.Again)
		}
	}
	fmt.Fprintf(b, "Recorded by %s; ", cmp.Or(strings.Join(r.Recorders, " and "), "a program that left no name"))
	if same {
		fmt.Fprintln(b, "this is the same program.")
	} else {
		fmt.Fprintf(b, "this is %s.\n", r.Software)
	}
}

func writePair(b *strings.Builder, p Pair) {
	one := append(slices.Clone(p.Recorded), p.Other...)[0]
	change := map[string]string{string(alerting.HeadwindLoss): "fall", string(alerting.HeadwindGain): "rise"}[one.Kind]
	if change == "" {
		change = one.Kind
	}
	fmt.Fprintf(b, "\n%s  %s %s, %s of the headwind\n", p.Verdict, one.Operation, one.Runway, change)
	line := func(word string, l *Life) {
		until := "still open"
		if l.Closed != nil {
			until = l.Closed.UTC().Format("15:04:05")
		}
		fmt.Fprintf(b, "  %-6s %s to %s, %s, at its greatest %.0f kt\n", word, l.Opened.UTC().Format("2006-01-02 15:04:05"), until, l.Level, max(l.PeakKt, -l.PeakKt))
	}
	for i := range p.Recorded {
		line("told", &p.Recorded[i])
	}
	for i := range p.Other {
		line("other", &p.Other[i])
	}
	if len(p.What) > 0 {
		fmt.Fprintf(b, "  %s\n", strings.Join(p.What, "; "))
	}
}
