package main

import (
	"errors"
	"fmt"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/decode"
)

// loop owns the engine. It takes messages and clock ticks in the order of
// their stamps, closes the steps that are due before each, and hands what a
// step found to the history and to whoever shows it. It waits for nothing but
// its queue.
type loop struct {
	cfg      *config.Config
	engine   *engine.Engine
	words    wording.Context
	ids      []string // of the stations
	reporter *reporter
	exercise bool
	control  string // a topic that carries time and no wind; empty for none
	log      zerolog.Logger
	patience *throttle

	messages <-chan sensors.Message
	archive  *archive
	metrics  *metrics
	judged   *judgements // nil for none
	capture  *capturer   // nil for none
	show     func(*report)
	changes  chan change
	changed  func(before, now *config.Config)
	abandon  chan struct{} // closed: leave the queue as it is

	held    []lifecycle.Transition // of the start or a change, to go out with the next step
	entries []history.Entry        // for the journal, with the next step
	last    sensors.Instant        // stamp of the last message or tick
	steps   atomic.Uint64
}

func newLoop(cfg *config.Config, exercise bool, log zerolog.Logger) (*loop, error) {
	e, err := engine.New(engineSettings(cfg, exercise))
	if err != nil {
		return nil, fmt.Errorf("prepare the engine: %w", err)
	}
	l := &loop{
		cfg: cfg, engine: e, words: wordingContext(cfg, exercise), reporter: newReporter(cfg, exercise),
		exercise: exercise, log: log, patience: newThrottle(time.Minute),
		changes: make(chan change), abandon: make(chan struct{}),
	}
	for _, s := range cfg.Stations {
		l.ids = append(l.ids, s.ID)
	}
	return l, nil
}

// run takes from the queue until stop is closed, and then what is left in it,
// unless abandon is closed, too.
func (l *loop) run(stop <-chan struct{}) {
	for {
		select {
		case m := <-l.messages:
			l.take(m)
		case c := <-l.open():
			l.put(c)
		case <-stop:
			for {
				select {
				case <-l.abandon:
					return
				case m := <-l.messages:
					l.take(m)
				default:
					return
				}
			}
		}
	}
}

func (l *loop) abandoned() bool {
	select {
	case <-l.abandon:
		return true
	default:
		return false
	}
}

// take closes the steps that are due before a message, then receives it.
func (l *loop) take(m sensors.Message) {
	for {
		t, due := l.engine.Due(m.Received)
		if !due {
			break
		}
		if l.abandoned() { // many may be due
			return
		}
		l.step(t)
	}
	l.last = m.Received
	if m.Topic == "" || m.Topic == l.control {
		return
	}
	if l.capture != nil {
		l.capture.take(m)
	}
	station, _, err := l.engine.Receive(m)
	if err != nil && station >= 0 {
		l.reporter.memories[station].reject(m.Received, m.Payload, err)
	}
	if err != nil && worthLogging(err) {
		l.complain(station, m, err)
	}
}

// worthLogging leaves out payloads in which an instrument says that it has
// nothing to say.
func worthLogging(err error) bool {
	var all decode.Rejections
	return !errors.As(err, &all) || all.Refused()
}

// complain logs what is wrong with messages, once a minute for each station:
// the counters have the rest.
func (l *loop) complain(station int, m sensors.Message, err error) {
	name := "" // all foreign topics are one cause
	if station >= 0 {
		name = l.ids[station]
	}
	if more, ok := l.patience.allow(name, m.Received); ok {
		l.log.Warn().Str("station", name).Str("topic", m.Topic).Err(err).Uint64("more_since", more).
			Msg("a message gave no reading, or not all it holds")
	}
}

// step closes a step and hands out what it found.
func (l *loop) step(t sensors.Instant) {
	begun := time.Now()
	res := l.engine.Step(t)
	took := time.Since(begun)
	l.judged.keep(t, l.engine, res)
	transitions := res.Transitions
	if len(l.held) > 0 {
		transitions = append(l.held, transitions...)
		l.held = nil
	}
	batch := history.Batch{Step: t, Stations: l.ids, Readings: res.Readings, Entries: l.entries}
	l.entries = nil
	for _, r := range res.Refused {
		batch.Late = append(batch.Late, history.LateReading{Reading: r.Reading, Reason: string(r.Reason)})
	}
	for _, table := range res.Tables {
		batch.Entries = append(batch.Entries, history.Entry{Kind: history.KindTable, At: table.At, Payload: table.Payload})
	}
	rep := l.reporter.of(l.engine, res)
	for _, tr := range transitions {
		n := wording.Of(tr, l.words)
		rep.Notices = append(rep.Notices, n)
		batch.Issues = append(batch.Issues, history.Issue{Alert: tr.Alert, Object: n.WithRecorded(true).JSON()})
		l.logTransition(tr)
	}
	l.archive.submit(batch, rep.Notices)
	l.metrics.step(rep, l.engine.Counts(), transitions, took)
	l.show(rep)
	l.steps.Add(1)
}

// logTransition is one line for each issue; those that only bring an open
// alert up to date are for debugging.
func (l *loop) logTransition(tr lifecycle.Transition) {
	a := &tr.Alert
	line := l.log.Debug()
	if tr.From != a.Level || a.State == lifecycle.Closed {
		line = l.log.Info()
	}
	line.Str("path", a.Operation+" "+a.Runway).Str("kind", string(a.Kind)).
		Stringer("from", tr.From).Stringer("to", toLevel(a)).Str("why", tr.Why).
		Str("alert", a.ID).Int("revision", a.Revision).Bool("exercise", l.exercise || a.Exercise).Msg("alert")
}

// throttle lets one line a key through in a while.
type throttle struct {
	every time.Duration
	last  map[string]sensors.Instant
	more  map[string]uint64
}

func newThrottle(every time.Duration) *throttle {
	return &throttle{every: every, last: make(map[string]sensors.Instant), more: make(map[string]uint64)}
}

// allow reports whether a line may go out at a moment, and how many were held
// back since the last one.
func (t *throttle) allow(key string, at sensors.Instant) (heldBack uint64, ok bool) {
	if last, seen := t.last[key]; seen && at.Sub(last) < t.every {
		t.more[key]++
		return 0, false
	}
	heldBack = t.more[key]
	t.last[key], t.more[key] = at, 0
	return heldBack, true
}
