package main

import (
	"bytes"
	"errors"
	"fmt"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// restoreLead is how long before the moment they are known for alerts are
// restored, so that one that was issued just before it is taken on from its
// own last issue: see lifecycle.Machine.Restore.
const restoreLead = 5 * time.Second

// history replays the readings of a history. A replay from the middle takes
// the alerts that were open two hours before it, and runs from there silently;
// the stages before the alerts have had two hours more by then.
func (r *replayer) history(dir string) error {
	store, err := openForReplay(dir)
	if err != nil {
		return err
	}
	return errors.Join(r.store(store), store.Close())
}

// store replays the readings of an open history.
func (r *replayer) store(store *history.Store) error {
	h := &historyReplay{replayer: r}
	h.use(r.cfg)
	begin, end := sensors.Instant(0), r.to
	if end == 0 {
		last, ok, err := store.LastStep()
		if err != nil {
			return fmt.Errorf("replay the history: %w", err)
		}
		if !ok {
			r.note("the history holds no readings")
			return nil
		}
		end = last + sensors.Second
	}
	switch {
	case r.from != 0 && r.cold:
		begin = r.from.Add(-engine.Memory)
	case r.from != 0:
		begin = r.from.Add(-2 * engine.Memory)
		h.asOf = r.from.Add(-engine.Memory)
		var err error
		if h.open, err = store.OpenAlerts(h.asOf); err != nil {
			return fmt.Errorf("find the alerts that were open at %s: %w", h.asOf, err)
		}
	}
	if r.past == nil {
		past, err := pastOf(store)
		if err != nil {
			return err
		}
		r.past = &past
	}
	h.starts = r.past.starts
	for _, t := range r.past.sitings {
		if err := h.engine.LoadSiting(t); err != nil {
			return fmt.Errorf("replay the history: %w", err)
		}
	}
	h.follow(r.past.configurations)
	r.share = func() float64 {
		return float64(r.engine.LastStep()-h.first) / float64(max(end-h.first, 1))
	}
	err := store.Readings(begin, end, h.stored)
	if err != nil && !errors.Is(err, errReplayed) {
		err = fmt.Errorf("replay the history: %w", err)
	}
	if h.gaps > 0 {
		r.note("%d steps are not in the history though the daemon ran: they count as without readings", h.gaps)
	}
	return err
}

func openForReplay(dir string) (*history.Store, error) {
	store, err := history.ReadOnly(dir)
	if errors.Is(err, history.ErrInUse) {
		return nil, fmt.Errorf("%w; to replay while the daemon runs, give a copy of the directory", err)
	}
	return store, err
}

// past is what the journal tells a replay. It is only read.
type past struct {
	starts         []sensors.Instant
	configurations []inForce
	sitings        []engine.Table // what was learnt of the sites of the masts
}

func pastOf(store *history.Store) (p past, err error) {
	if p.starts, err = startsOf(store); err == nil {
		p.configurations, err = configurationsOf(store)
	}
	if err == nil {
		err = store.Journal(1, func(rec history.Record) error {
			if rec.Kind == history.KindTable {
				p.sitings = append(p.sitings, engine.Table{At: rec.At, Payload: bytes.Clone(rec.Payload)})
			}
			return nil
		})
	}
	if err != nil {
		return p, fmt.Errorf("replay the history: %w", err)
	}
	return p, nil
}

// startsOf lists when the daemon was started, ascending.
func startsOf(store *history.Store) ([]sensors.Instant, error) {
	var starts []sensors.Instant
	err := store.Journal(1, func(rec history.Record) error {
		if rec.Kind == history.KindStart {
			starts = append(starts, rec.At)
		}
		return nil
	})
	return starts, err
}

// historyReplay is the state between the stored steps.
type historyReplay struct {
	*replayer
	ids    []string          // of the configured stations
	first  sensors.Instant   // the first step
	starts []sensors.Instant // of the daemon
	plan   []inForce         // configurations to come, in their order
	open   []lifecycle.Alert // to be restored
	asOf   sensors.Instant   // as they were then; 0 once done, or for nothing to restore
	gaps   int               // steps that are not stored though no start explains it
}

// stored takes the next stored step, and all steps without readings that lie
// between the one before and it.
func (h *historyReplay) stored(st history.Step) error {
	last := h.engine.LastStep()
	if last == 0 {
		last = st.At - sensors.Second
		if h.asOf != 0 { // the alerts to be restored may be older than the readings
			last = min(last, h.asOf.Add(-restoreLead)-sensors.Second)
		}
		h.first = last
		if _, err := h.turn(last + sensors.Second); err != nil {
			return err
		}
		if err := h.engine.SkipTo(last); err != nil {
			return err
		}
	}
	if asOf, ok := h.startIn(last, st.At); ok {
		if err := h.restart(asOf, st.At); err != nil {
			return err
		}
	} else if st.At > last+sensors.Second && last > h.first {
		h.gaps += int((st.At-last)/sensors.Second) - 1
	}
	if err := h.silence(st.At); err != nil {
		return err
	}
	if err := h.change(st.At); err != nil {
		return err
	}
	for _, reading := range st.For(h.ids) {
		h.engine.Stored(reading)
	}
	return h.next(st.At)
}

// silence closes the steps without readings before the step at.
func (h *historyReplay) silence(at sensors.Instant) error {
	for t := h.engine.LastStep() + sensors.Second; t < at; t = h.engine.LastStep() + sensors.Second {
		if err := h.leaveOut(t, at); err != nil {
			return err
		}
		if t = h.engine.LastStep() + sensors.Second; t >= at {
			return nil
		}
		if err := h.next(t); err != nil {
			return err
		}
	}
	return nil
}

// change puts in force what is due at the step t; what it closes is told with
// that step.
func (h *historyReplay) change(t sensors.Instant) error {
	closed, err := h.turn(t)
	h.held = append(h.held, closed...)
	return err
}

// next closes one step, and restores the alerts of the journal when it is time.
func (h *historyReplay) next(t sensors.Instant) error {
	if err := h.change(t); err != nil {
		return err
	}
	if h.asOf != 0 && t >= h.asOf.Add(-restoreLead) {
		h.engine.Restore(h.open, h.asOf)
		h.asOf, h.open = 0, nil
	}
	return h.step(t)
}

// startIn is the moment as of which the daemon took up its alerts when it was
// last started between two stored steps; false if it was not, or if it lost no
// step by it: then it goes on as if nothing had been.
func (h *historyReplay) startIn(last, at sensors.Instant) (asOf sensors.Instant, ok bool) {
	for _, s := range h.starts {
		if a := takenUp(s, h.engine.Lateness()); a > last && a < at {
			asOf, ok = a, true
		}
	}
	return asOf, ok
}

// takenUp is the last step that a daemon started at this stamp counts as past.
func takenUp(start sensors.Instant, lateness time.Duration) sensors.Instant {
	return start.Add(-lateness).FloorSecond() - sensors.Second
}

// restart goes through a time in which the daemon was down: nothing was
// issued, and at its start it took up the alerts as it had left them.
func (h *historyReplay) restart(asOf, at sensors.Instant) error {
	open := h.engine.Alerts(nil)
	if h.asOf != 0 && asOf > h.asOf { // they are older than the first reading
		open, h.open, h.asOf = h.open, nil, 0
	}
	h.muted = true
	err := h.silence(min(asOf+sensors.Second, at))
	h.muted = false
	if err != nil {
		return err
	}
	// The daemon took the alerts up by the configuration it was started with.
	// What that withdraws is among the closings of Restore.
	if _, err := h.turn(asOf + sensors.Second); err != nil {
		return err
	}
	return h.print(asOf, h.engine.Restore(open, asOf))
}
