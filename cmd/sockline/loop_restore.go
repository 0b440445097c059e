package main

import (
	"bytes"
	"errors"
	"fmt"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// aheadAtMost is how far the stored steps may lie ahead of the clock and still
// be taken as those of the moment before: a restart within the same second.
// Farther ahead, the host clock has been set back.
const aheadAtMost = 10 * time.Second

// restore brings the engine to where the last run left it: it reads back two
// hours, closes their steps silently, and takes up the alerts that were open.
// What cannot go on is closed with the first step. Without a history, the
// engine begins with nothing. An error means that something could not be read;
// the rest has been taken up.
func (l *loop) restore(store *history.Store, now sensors.Instant) error {
	last := now.Add(-l.engine.Lateness()).FloorSecond() - sensors.Second
	stored, ok, err := store.LastStep()
	if err != nil {
		return fmt.Errorf("find the last stored step: %w", err)
	}
	if !ok {
		return nil
	}
	switch ahead := stored.Sub(last); {
	case ahead > aheadAtMost:
		l.log.Error().Stringer("stored", stored).Stringer("now", now).
			Msg("the history lies ahead of the clock; what it holds of the time to come will be replaced")
	case ahead > 0:
		// These steps are done: doing them again without their readings would
		// replace what is stored.
		last = stored
	}
	open, faults := store.OpenAlerts(max(last, stored))
	faults = errors.Join(faults, l.loadTables(store, last))
	since, fault := l.standing(store, last)
	faults = errors.Join(faults, fault)
	open, foreign := l.divide(open, last)
	// After a gap the alerts are taken up at its end; without one a few steps
	// before, so that the steps since their last issue bring them up to date:
	// see lifecycle.Machine.Restore.
	at := last
	if stored >= last {
		at = last.Add(-restoreLead)
	}
	var closed []lifecycle.Transition
	pending := true
	next := sensors.Instant(0)
	step := func(t sensors.Instant) {
		next = t + sensors.Second
		if t <= at {
			l.engine.Warm(t)
			return
		}
		if pending {
			closed, pending = l.engine.Restore(open, last), false
		}
		l.engine.Step(t)
	}
	err = store.Readings(last.Add(-engine.Memory), last+sensors.Second, func(st history.Step) error {
		for next != 0 && next < st.At {
			step(next)
		}
		for _, r := range st.For(l.ids) {
			// Synthetic wind of an exercise must not carry over into real work,
			// nor the reverse.
			if r.Exercise == l.exercise && st.At >= since[r.Station] {
				l.engine.Stored(r)
			}
		}
		step(st.At)
		return nil
	})
	if next == 0 {
		next = last
	}
	for next <= last {
		step(next)
	}
	if pending {
		closed = l.engine.Restore(open, last)
	}
	l.held = append(foreign, closed...)
	return errors.Join(faults, err)
}

// standing is, for each station, the step from which on it has been the mast
// that it is now: what it sent before, from another place or by other rules,
// is not read back. last is the last step that was judged.
func (l *loop) standing(store *history.Store, last sensors.Instant) ([]sensors.Instant, error) {
	since := make([]sensors.Instant, len(l.ids))
	all, err := configurationsOf(store)
	if err != nil {
		return since, fmt.Errorf("look for earlier configurations: %w", err)
	}
	changed := make([]bool, len(l.ids))
	after := last + sensors.Second
	for _, c := range slices.Backward(all) {
		if c.hash != l.cfg.Hash {
			before, err := c.parse()
			if err != nil { // of another version: whatever stands there is taken for the same
				return since, fmt.Errorf("compare the masts with those of %s: %w", c.from, err)
			}
			for i, id := range l.ids {
				at := slices.IndexFunc(before.Stations, func(s sensors.Station) bool { return s.ID == id })
				if !changed[i] && (at < 0 || !engine.SameMast(before.Stations[at], l.cfg.Stations[i])) {
					changed[i], since[i] = true, after
				}
			}
		}
		if after = c.from; after <= last.Add(-engine.Memory) {
			break
		}
	}
	return since, nil
}

// loadTables takes up what earlier runs learnt of the stations up to a step.
// All of the journal is looked through: a clock that is corrected may have been
// so for months.
func (l *loop) loadTables(store *history.Store, last sensors.Instant) error {
	var faults []error
	err := store.Journal(1, func(rec history.Record) error {
		if rec.Kind == history.KindTable && rec.At <= last {
			if err := l.engine.LoadTable(engine.Table{At: rec.At, Payload: bytes.Clone(rec.Payload)}); err != nil {
				faults = append(faults, err)
			}
		}
		return nil
	})
	return errors.Join(append(faults, err)...)
}

// divide keeps the alerts of this sort of work, exercise or not, and closes
// the others: they cannot go on.
func (l *loop) divide(open []lifecycle.Alert, at sensors.Instant) (own []lifecycle.Alert, closed []lifecycle.Transition) {
	for _, a := range open {
		if a.Exercise == l.exercise {
			own = append(own, a)
			continue
		}
		a.State, a.Closed, a.Because = lifecycle.Closed, at, lifecycle.ExpiredWhileDown
		a.Trend, a.Updated = lifecycle.TrendUnknown, at
		a.Revision++
		closed = append(closed, lifecycle.Transition{At: at, Alert: a, From: a.Level, Why: "closed: the daemon no longer does this exercise"})
	}
	return own, closed
}

// toLevel is the level an issue leads to: none once it is closed.
func toLevel(a *lifecycle.Alert) alerting.Level {
	if a.State == lifecycle.Closed {
		return alerting.NoLevel
	}
	return a.Level
}
