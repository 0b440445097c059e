// Package engine is the whole chain from a message to the transitions of the
// alerts as one deterministic object: decode, quality, averages, windfield,
// shear, hazard, lifecycle. Live, replay and study run the same engine; it
// reads no clock, starts no goroutine and waits for nothing. Next: wording,
// history, publish, page.
//
// A step T (a UTC second) uses exactly the readings with T-1 s < event time
// <= T that arrived no later than T + lateness, in the order of event time,
// station and content, without copies. What is kept is finite: nothing depends
// on readings older than two hours, except open alerts.
package engine

import (
	"fmt"
	"slices"
	"time"

	"sockline/alerting/airfield"
	"sockline/alerting/front"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/outflow"
	"sockline/alerting/vertical"
	"sockline/alerting/windfield"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/decode"
	"sockline/sensors/quality"
)

// Memory is how far back a start reads before its first step counts: nothing
// in the engine remembers more.
const Memory = 2 * time.Hour

// Settings of an engine. Lengths in m, speeds in m/s.
type Settings struct {
	Airfield *airfield.Airfield
	Stations []sensors.Station // in the order of the airfield's masts
	Levels   hazard.Levels
	Window   time.Duration // of the station wind
	// Siting removes what the places of the masts do to their winds, where enough
	// is learnt; without it that is learnt only.
	Siting   bool
	Lateness time.Duration // how long after its end a step waits for readings
	Reach    float64       // how far from a mast ground counts as observed, m
	Hold     time.Duration // how long a level must be left before it counts as over
	// Exercise accepts readings that mark themselves as synthetic and marks
	// everything that comes out.
	Exercise bool
	Prior    windfield.Prior
}

// Engine holds the state of the chain. Not safe for concurrent use.
type Engine struct {
	settings  Settings
	byTopic   map[string]int
	decoders  []*decode.Decoder
	joining   []int // stations with a topic for each quantity
	checkers  []*quality.Checker
	recorder  *averages.Recorder
	field     *windfield.Estimator
	outflows  *outflow.Tracker
	posterior *windfield.Posterior // of the last step; nil when it saw nothing
	ahead     forecaster
	lone      lone
	ground    *ground
	fronts    *front.Tracker
	others    others
	machine   *lifecycle.Machine
	counts    Counts
	learner

	allowances []allowance // of messages and readings, by station

	pending      []sensors.Reading // readings of steps that have not closed
	late         []Refused         // since the last step
	lateOut      []Refused         // given out with the last step
	step         []sensors.Reading
	scratch      []sensors.Reading
	last         sensors.Instant // the last closed step; 0 before the first
	day          sensors.Instant // UTC day of variation
	variationDeg float64

	assessments []hazard.Assessment
	transitions []lifecycle.Transition
	result      Result
}

// Refused is a reading that was decoded but will never be evaluated.
type Refused struct {
	Reading sensors.Reading
	Reason  quality.Reason
}

// Result is what one step found. It is overwritten by the next step.
type Result struct {
	At           sensors.Instant
	Readings     []sensors.Reading // used by this step, in order, as decoded
	Refused      []Refused         // since the step before
	Snapshot     *averages.Snapshot
	Assessments  []hazard.Assessment // one for each path, in order
	Transitions  []lifecycle.Transition
	Fronts       []front.Front     // that pass or have lately passed, the first first
	Vertical     []vertical.Shear  // of the columns of air that report, in the airfield's order
	Tables       []Table           // learnt since the step before, for the journal
	OutflowShare float64           // posterior probability that an outflow is under way; 0 when blind
	Outflows     []outflow.Outflow // those that are likelier than not, with place and motion
	// Doubt is the posterior probability, by station, that a mast is wrong: its
	// neighbours contradict it. nil when blind.
	Doubt []float64
}

// New prepares an engine.
func New(s Settings) (*Engine, error) {
	e := &Engine{settings: s, byTopic: make(map[string]int, len(s.Stations))}
	ids := make([]string, len(s.Stations))
	for i, st := range s.Stations {
		d, err := decode.New(st, i)
		if err != nil {
			return nil, fmt.Errorf("station %s: %w", st.ID, err)
		}
		e.decoders = append(e.decoders, d)
		e.checkers = append(e.checkers, quality.NewChecker(st))
		for _, topic := range st.AllTopics() {
			e.byTopic[topic] = i
		}
		if st.Topics != nil {
			e.joining = append(e.joining, i)
		}
		ids[i] = st.ID
	}
	for _, d := range e.decoders {
		d.Beware(ids)
	}
	e.allowances = newAllowances(s.Stations)
	e.learner = newLearner(s.Stations, ids, s.Airfield.Aloft())
	layout := averages.NewLayout(s.Window)
	e.recorder = averages.NewRecorder(s.Stations, layout)
	e.ground = newGround(s.Airfield, s.Reach)
	masts := make([]windfield.Mast, len(s.Airfield.Masts))
	for i, m := range s.Airfield.Masts {
		masts[i] = windfield.Mast{X: m.X, Y: m.Y, Aloft: e.ground.aloft[i]}
	}
	e.fronts = newFronts(s.Airfield, e.ground.aloft, layout)
	e.others = newOthers(s, e.ground)
	e.field = windfield.New(masts, e.ground.targets, layout, s.Prior)
	e.outflows = outflow.NewTracker(e.ground.lines(), s.Prior.OutflowSpacing)
	e.machine = lifecycle.New(lifecycle.Settings{
		Airfield: s.Airfield.ID, Paths: pathNames(s.Airfield), StationIDs: ids, Hold: s.Hold,
	})
	e.counts = newCounts(len(s.Stations))
	e.assessments = make([]hazard.Assessment, len(s.Airfield.Paths))
	return e, nil
}

func pathNames(a *airfield.Airfield) []lifecycle.PathName {
	names := make([]lifecycle.PathName, len(a.Paths))
	for i, p := range a.Paths {
		x, y := p.At(0)
		names[i] = lifecycle.PathName{
			Runway: p.Runway(), Operation: p.Operation(), East: x, North: y, Bearing: p.BearingTrue(),
		}
	}
	return names
}

// Alerts appends the open alerts to dst, for display.
func (e *Engine) Alerts(dst []lifecycle.Alert) []lifecycle.Alert { return e.machine.Open(dst) }

// Restore takes up the alerts that were open when the last run ended; see
// lifecycle.Machine.Restore. Readings of the two hours before now have been
// given to the engine first.
func (e *Engine) Restore(open []lifecycle.Alert, now sensors.Instant) []lifecycle.Transition {
	return e.machine.Restore(open, now, nil)
}

// Counts is what came in and what was wrong with it, by station.
func (e *Engine) Counts() *Counts { return &e.counts }

// LastStep is the last closed step, 0 before the first.
func (e *Engine) LastStep() sensors.Instant { return e.last }

// Lateness is how long after its end a step waits for readings.
func (e *Engine) Lateness() time.Duration { return e.settings.Lateness }

// Due is the next step that can be closed when everything that arrived before
// now has been received; false if there is none. The first step is the one
// that closes next after the first instant given.
func (e *Engine) Due(now sensors.Instant) (sensors.Instant, bool) {
	if e.last == 0 {
		e.last = now.Add(-e.settings.Lateness).FloorSecond() - sensors.Second
	}
	next := e.last + sensors.Second
	return next, next.Add(e.settings.Lateness) < now
}

// Receive decodes a message and keeps its readings for their steps. Messages
// come in the order of their arrival stamps, and every step due before a
// message's stamp has been closed before it. It tells which station the message
// belongs to (-1: none) and how many readings were kept; the error is what was
// wrong with it, already counted.
func (e *Engine) Receive(m sensors.Message) (station, kept int, err error) {
	station, ok := e.byTopic[m.Topic]
	if !ok {
		e.counts.Unknown++
		return -1, 0, fmt.Errorf("topic %q belongs to no configured station", m.Topic)
	}
	e.counts.Messages[station]++
	if err = e.allowances[station].message(m.Received); err != nil {
		e.counts.rejected(station, err)
		return station, 0, err
	}
	e.scratch, err = e.decoders[station].Decode(e.scratch[:0], m, e.variation(m.Received))
	if err != nil {
		e.counts.rejected(station, err)
	}
	for i, r := range e.scratch {
		if !e.allowances[station].reading() {
			flood := tooManyReadings(len(e.scratch) - i)
			e.counts.rejected(station, flood)
			return station, kept, flood
		}
		if e.Offer(r) {
			kept++
		}
	}
	return station, kept, err
}

// Offer keeps a decoded reading for its step, or refuses it; it tells which.
// What is known to be wrong with the station's clock is taken out of its time;
// the journal holds what that was.
func (e *Engine) Offer(r sensors.Reading) bool {
	r = e.clocks.Take(r)
	if reason, ok := quality.Arrival(r, e.settings.Lateness, e.settings.Exercise); !ok {
		e.counts.refused(r.Station, reason)
		e.late = append(e.late, Refused{Reading: r, Reason: reason})
		return false
	}
	e.pending = append(e.pending, r)
	return true
}

// Stored takes a reading back from the history: it was accepted when it
// arrived.
func (e *Engine) Stored(r sensors.Reading) { e.pending = append(e.pending, r) }

// variation of the airfield on the UTC day of t; 0 where the magnetic model
// does not reach, which check and the status report.
func (e *Engine) variation(t sensors.Instant) float64 {
	const aDay = sensors.Instant(24 * 3600 * 1000)
	if day := t - t%aDay; day != e.day {
		e.day = day
		v, err := e.settings.Airfield.Variation(t.Time())
		if err != nil {
			v = 0
		}
		e.variationDeg = v
	}
	return e.variationDeg
}

// Step closes the step T, which must follow the last one.
func (e *Engine) Step(t sensors.Instant) *Result {
	e.last = t
	e.release(t)
	e.take(t)
	e.evaluateReadings()
	e.learn(t, e.recorder)
	if e.settings.Siting {
		e.removeSiting(t, e.recorder)
	}
	snapshot := e.recorder.Snapshot(t)
	e.result.Fronts = e.fronts.Step(snapshot)
	e.assess(snapshot)
	e.assessOthers(snapshot)
	e.transitions = e.machine.Step(t, e.assessments, e.transitions[:0])
	e.result.At = t
	e.result.Readings = e.step
	e.late, e.lateOut = e.lateOut[:0], e.late
	e.result.Refused = e.lateOut
	e.result.Snapshot = snapshot
	e.result.Assessments = e.assessments
	e.result.Transitions = e.transitions
	e.tables, e.tablesOut = e.tablesOut[:0], e.tables
	e.result.Tables = e.tablesOut
	return &e.result
}

// Warm closes the step T like Step, except that no path is judged and no alert
// moves: for the steps before a Restore, which would throw their alerts away.
// What later steps find is the same, in less than half the time.
func (e *Engine) Warm(t sensors.Instant) {
	e.last = t
	e.release(t)
	e.take(t)
	e.evaluateReadings()
	e.learn(t, e.recorder)
	if e.settings.Siting {
		e.removeSiting(t, e.recorder)
	}
	s := e.recorder.Snapshot(t)
	e.ground.update(s)
	e.fronts.Step(s)
	e.outflows.Step(t, e.field.Step(s))
}

// take moves the readings of step t out of pending, in order and without
// copies. Readings of earlier steps cannot be there.
func (e *Engine) take(t sensors.Instant) {
	e.step = e.step[:0]
	rest := e.pending[:0]
	for _, r := range e.pending {
		if r.Time <= t {
			e.step = append(e.step, r)
		} else {
			rest = append(rest, r)
		}
	}
	e.pending = rest
	slices.SortFunc(e.step, inOrder)
	e.step = slices.CompactFunc(e.step, func(a, b sensors.Reading) bool {
		same := quality.Same(a, b)
		if same {
			e.counts.Copies[b.Station]++
		}
		return same
	})
}

// inOrder is the order of quality.Less.
func inOrder(a, b sensors.Reading) int {
	switch {
	case quality.Less(a, b):
		return -1
	case quality.Less(b, a):
		return 1
	}
	return 0
}

func (e *Engine) evaluateReadings() {
	for _, r := range e.step {
		c := e.checkers[r.Station].Check(r)
		e.counts.checked(r.Station, c)
		e.recorder.Add(c)
	}
}

// Wind is the wind of a station as people read it, up to the last step. No
// step works it out: it is for whoever asks between two.
func (e *Engine) Wind(station int) (averages.Wind, bool) {
	return e.recorder.Wind(station, e.last)
}
