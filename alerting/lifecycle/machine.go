package lifecycle

import (
	"fmt"
	"slices"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	// defaultHold is how long a level must stay unmet before it is given up,
	// in event time.
	defaultHold = 60 * time.Second
	// issueEvery is the longest event time between two issues of an alert.
	issueEvery = 5 * time.Second
	// unobservedLimit is how long an alert stays open on ground that is no
	// longer observed; also how old an alert may be to be restored.
	unobservedLimit = 10 * time.Minute

	// issueChange (m/s) and issuePlace (m) are the moves since the last issue
	// that are told at once.
	issueChange = 2 * quantity.Knot
	issuePlace  = 200

	// placeSlack (m) is how far an end of an alert's ground may lie outside
	// the observed ground and still count as seen: rounding, not distance.
	placeSlack = 1
)

// kinds are the kinds of alert of a path, in the order in which they are
// judged and issued.
var kinds = [...]alerting.Kind{
	alerting.HeadwindLoss, alerting.HeadwindGain,
	alerting.WindShift, alerting.VerticalShear, alerting.Crosswind, alerting.Tailwind,
}

// PathName is what the life of an alert needs of a path: its names, and where
// it lies, so that alerts on different paths can be compared by place.
type PathName struct {
	Runway, Operation string
	East, North       float64 // its threshold, m from the reference point
	Bearing           float64 // direction of flight, degrees true
}

// Settings of a Machine.
type Settings struct {
	Airfield   string
	Paths      []PathName    // in the airfield's order
	StationIDs []string      // in the configured order
	Hold       time.Duration // event time before a level is given up; 60 s if 0
}

// Machine holds the open alerts of an airfield: at most one per path and kind.
// It reads no clock; the same assessments give the same transitions.
type Machine struct {
	settings Settings
	slots    []slot // by path, then kind
	last     sensors.Instant
	asOf     sensors.Instant // nothing is issued up to here (Restore)
	recent   []opening
	found    []int // by path: where its assessment is in the step at hand, -1 without
}

// slot is one path and kind, with or without an open alert.
type slot struct {
	open   bool
	alert  Alert // as of the last step, except Used and Missing: those of the last issue
	issued Alert // as of the last issue

	used, missing             []int // stations, as of the last step
	issuedUsed, issuedMissing []int // the same at the last issue
}

// New is a machine without open alerts.
func New(settings Settings) *Machine {
	settings.Paths = slices.Clone(settings.Paths)
	settings.StationIDs = slices.Clone(settings.StationIDs)
	if settings.Hold <= 0 {
		settings.Hold = defaultHold
	}
	return &Machine{
		settings: settings,
		slots:    make([]slot, len(settings.Paths)*len(kinds)),
		found:    make([]int, len(settings.Paths)),
	}
}

// Step judges the assessments of the step T and appends the transitions they
// cause to dst, in the order of the paths, loss before gain. A path without an
// assessment counts as not observed. A step that is not after the one before
// it is ignored. It allocates only when something is issued.
func (m *Machine) Step(T sensors.Instant, as []hazard.Assessment, dst []Transition) []Transition {
	if T <= m.last {
		return dst
	}
	m.last = T
	for p := range m.found {
		m.found[p] = -1
	}
	for i := range as {
		if p := as[i].Path; p >= 0 && p < len(m.found) {
			m.found[p] = i
		}
	}
	for p := range m.found {
		var a *hazard.Assessment
		if m.found[p] >= 0 {
			a = &as[m.found[p]]
		}
		for k := range kinds {
			dst = m.advance(T, p, k, a, dst)
		}
	}
	return dst
}

// advance takes one path and kind through the step T.
func (m *Machine) advance(T sensors.Instant, path, kind int, a *hazard.Assessment, dst []Transition) []Transition {
	s := &m.slots[path*len(kinds)+kind]
	c, o := sizeOf(a, kinds[kind])
	if !s.open {
		if c != nil && c.Level > alerting.NoLevel && T > m.asOf {
			dst = m.begin(T, path, kind, a, c, o, dst)
		}
		return dst
	}
	if T <= s.alert.Updated { // restored with a later state than this step's
		return dst
	}
	if a != nil {
		s.missing = append(s.missing[:0], a.Missing...)
		s.alert.Exercise = s.alert.Exercise || a.Exercise
	}
	// Once the ground of the alert is out of sight, only a change on other
	// ground that is no smaller may take its place. Anything less would hide
	// the larger one that may still be there.
	var because CloseReason
	if c != nil && (o != nil || s.overObserved(a.Observed) || c.Level >= s.alert.Level) {
		because = s.measure(T, c, o, m.settings.Hold)
		m.fewer(T, &s.alert, c)
	} else {
		because = s.loseSight(T)
	}
	switch {
	case T <= m.asOf:
		return dst
	case because != "":
		return m.end(T, s, because, dst)
	}
	if why := s.worthTelling(T); why != "" {
		dst = m.issue(T, s, why, dst)
	}
	return dst
}

// sizeOf is what an assessment says of a kind; nil where it is not seen. The
// second is nil for loss and gain.
func sizeOf(a *hazard.Assessment, k alerting.Kind) (*hazard.Change, *hazard.Other) {
	if a == nil {
		return nil, nil
	}
	if o := a.Other(k); o != nil {
		if !o.Seen {
			return nil, nil
		}
		return &o.Change, o
	}
	switch {
	case len(a.Observed) == 0:
		return nil, nil
	case k == alerting.HeadwindGain:
		return &a.Gain, nil
	}
	return &a.Loss, nil
}

// overObserved reports whether both ends of the alert's ground are observed.
// The ground between need not be, as for the pair that opened it.
func (s *slot) overObserved(observed []airfield.Interval) bool {
	return within(observed, s.alert.From) && within(observed, s.alert.To)
}

func within(observed []airfield.Interval, x float64) bool {
	for _, o := range observed {
		if x <= o.From+placeSlack && x >= o.To-placeSlack {
			return true
		}
	}
	return false
}

// begin opens an alert.
func (m *Machine) begin(T sensors.Instant, path, kind int, a *hazard.Assessment, c *hazard.Change, o *hazard.Other, dst []Transition) []Transition {
	name := m.settings.Paths[path]
	s := &m.slots[path*len(kinds)+kind]
	occurrence := m.occurrence(T, m.place(path, c.From, c.To))
	s.open = true
	s.issued = Alert{}
	s.alert = Alert{
		ID: strings.Join([]string{m.settings.Airfield, T.Time().Format(idTime),
			name.Runway, name.Operation, string(kinds[kind])}, "-"),
		Occurrence: occurrence,
		Path:       path, Runway: name.Runway, Operation: name.Operation,
		Kind: kinds[kind], Level: c.Level, State: Open, Opened: T,
		Probability: c.Probability[c.Level], Cause: alerting.Unresolved, Trend: TrendUnknown,
		Exercise: a.Exercise,
	}
	s.missing = append(s.missing[:0], a.Missing...)
	s.take(T, c, o)
	m.fewer(T, &s.alert, c)
	why := fmt.Sprintf("level %s met with probability %.2f", c.Level, s.alert.Probability)
	return m.issue(T, s, why, dst)
}

// take copies what the step measured into the alert, and notes which levels
// it met.
func (s *slot) take(T sensors.Instant, c *hazard.Change, o *hazard.Other) {
	a := &s.alert
	if o != nil {
		if o.Over { // what was measured last stands
			a.Observed, a.MeasuredAt = true, T
			return
		}
		a.Detail = o.Detail
	}
	a.Change, a.ChangeLow, a.ChangeHigh = c.Median, c.Low, c.High
	if a.Kind == alerting.HeadwindLoss {
		a.Change, a.ChangeLow, a.ChangeHigh = -c.Median, -c.High, -c.Low
	}
	a.From, a.To, a.AtEdge = c.From, c.To, c.AtEdge
	a.MaxSlope, a.MeanSlope, a.FBar, a.FBarVertical = c.MaxSlope, c.MeanSlope, c.FBar, c.FBarVertical
	if c.Cause != "" && c.Cause != alerting.Unresolved { // once known, it stays until another is known
		a.Cause = c.Cause
	}
	a.Observed, a.MeasuredAt = true, T
	if a.PeakAt == 0 || c.Median > magnitude(a.PeakChange) {
		a.PeakChange, a.PeakAt = a.Change, T
	}
	s.used = append(s.used[:0], c.Used...)
	for l := alerting.Noticeable; l <= max(c.Level, c.HoldLevel); l++ {
		a.Memory.Held[l] = T
	}
}

// fewerFor is how long it counts what the change was without a mast.
const fewerFor = 2 * time.Minute

// fewer notes what the change would be without a mast. The list of an issued
// alert belongs to whoever was given it: a new one is made at each note.
func (m *Machine) fewer(T sensors.Instant, a *Alert, c *hazard.Change) {
	if !c.Fewer.Known || c.Fewer.Mast >= len(m.settings.StationIDs) {
		if len(a.Fewer) > 0 && T.Sub(a.Fewer[0].At) >= fewerFor { // the oldest comes first
			a.Fewer = slices.Clone(a.Fewer[1:])
		}
		return
	}
	next := make([]Fewer, 0, len(a.Fewer)+1)
	station := m.settings.StationIDs[c.Fewer.Mast]
	for _, f := range a.Fewer {
		if f.Station != station && T.Sub(f.At) < fewerFor {
			next = append(next, f)
		}
	}
	change := c.Fewer.Median
	if a.Kind == alerting.HeadwindLoss {
		change = -change
	}
	a.Fewer = append(next, Fewer{Station: station, At: T, Change: change})
}

// measure takes a step in which the change was measured: levels, trend, and
// whether it is over.
func (s *slot) measure(T sensors.Instant, c *hazard.Change, o *hazard.Other, hold time.Duration) CloseReason {
	a := &s.alert
	if T.Sub(a.MeasuredAt) != time.Second { // a gap is no trend
		a.Memory.Trend = TrendMemory{}
		a.Trend = TrendUnknown
	}
	if (o == nil || !o.Over) && a.Memory.Trend.add(c.Median) {
		a.Trend = a.Memory.Trend.judge(a.Trend)
	}
	s.take(T, c, o)
	held := &a.Memory.Held
	if T.Sub(held[alerting.Noticeable]) >= hold {
		a.Probability = c.Probability[a.Level]
		return BelowLevel
	}
	if c.Level > a.Level {
		a.Level = c.Level // worse is told at once
	}
	for a.Level > alerting.Noticeable && T.Sub(held[a.Level]) >= hold {
		a.Level--
	}
	a.Probability = c.Probability[a.Level]
	return ""
}

// loseSight takes a step in which the ground of the alert was not observed.
// Nothing counts as lower while nothing is seen: the hold starts anew.
func (s *slot) loseSight(T sensors.Instant) CloseReason {
	a := &s.alert
	a.Observed, a.Trend, a.Memory.Trend = false, TrendUnknown, TrendMemory{}
	for l := alerting.Noticeable; l <= a.Level; l++ {
		a.Memory.Held[l] = T
	}
	if T.Sub(a.MeasuredAt) >= unobservedLimit {
		return NotObserved
	}
	return ""
}

func magnitude(v float64) float64 { return max(v, -v) }

// Open is every open alert as last issued, in the order of the paths.
func (m *Machine) Open(dst []Alert) []Alert {
	for i := range m.slots {
		if m.slots[i].open {
			dst = append(dst, m.slots[i].issued)
		}
	}
	return dst
}

// Raised reports whether an alert is open on the path.
func (m *Machine) Raised(path int) bool {
	for k := range kinds {
		if m.slots[path*len(kinds)+k].open {
			return true
		}
	}
	return false
}

// NamesOf is what a machine needs of these paths.
func NamesOf(paths []airfield.Path) []PathName {
	names := make([]PathName, len(paths))
	for i, p := range paths {
		east, north := p.At(0)
		names[i] = PathName{Runway: p.Runway(), Operation: p.Operation(), East: east, North: north, Bearing: p.BearingTrue()}
	}
	return names
}
