package main

import (
	"encoding/json"
	"errors"
	"fmt"

	"sockline/alerting/attention"
	"sockline/alerting/history"
	"sockline/sensors"
)

// errFar ends a walk through the journal that has seen enough.
var errFar = errors.New("far enough")

// takeUp brings the occurrences back to where an earlier run left them: what
// was issued and done is gone through once more, in the order of the journal.
// An error means that something could not be read; the rest is taken up.
func (p *people) takeUp(store *history.Store, now sensors.Instant, exercise bool) error {
	since := now.Add(-attention.Remembered)
	open, faults := store.OpenAlerts(now)
	for _, a := range open {
		since = min(since, a.Opened)
	}
	first, err := sequenceAt(store, since)
	if err != nil {
		return errors.Join(faults, fmt.Errorf("look for what people did: %w", err))
	}
	runway, err := lastRunway(store)
	faults = errors.Join(faults, err)
	err = p.board.act(func(w *attention.Watch) error {
		w.UseRunway(runway)
		return store.Journal(first, func(rec history.Record) error {
			if err := again(w, rec, exercise); err != nil {
				faults = errors.Join(faults, err)
			}
			return nil
		})
	})
	// A runway that is not there any more must not keep the others silent.
	if p.known("runway", runway, true) != nil {
		faults = errors.Join(faults, p.board.act(func(w *attention.Watch) error { w.UseRunway(""); return nil }))
	}
	return errors.Join(faults, err)
}

// again does once more what a record tells of. What could be done then can be
// done now; what cannot has been undone by what followed.
func again(w *attention.Watch, rec history.Record, exercise bool) error {
	switch rec.Kind {
	case history.KindIssue:
		is, err := rec.Issue()
		if err != nil || is.Alert.Exercise != exercise {
			return err
		}
		var said struct{ Text string }
		if err := json.Unmarshal(is.Object, &said); err != nil {
			return fmt.Errorf("journal record %d: its object: %w", rec.Seq, err)
		}
		w.Step(is.Alert.Updated)
		w.Issue(watched(is.Alert, said.Text))
	case history.KindAcknowledge:
		a, err := rec.Acknowledgement()
		if err != nil {
			return err
		}
		_ = w.Acknowledge(a.Occurrence, a.Who, rec.At)
	case history.KindShelve:
		s, err := rec.Shelving()
		switch {
		case err != nil:
			return err
		case s.Ended:
			_ = w.Unshelve(s.Occurrence)
		default:
			_ = w.Shelve(s.Occurrence, s.Who, s.Reason, s.Until, rec.At)
		}
	}
	return nil
}

// sequenceAt is the sequence of the first record at or after a moment, or one a
// little before it: records of one moment come in no strict order.
func sequenceAt(store *history.Store, t sensors.Instant) (uint64, error) {
	// at tells whether the record n is there, and before t.
	before := func(n uint64) (found, earlier bool, err error) {
		err = store.Journal(n, func(rec history.Record) error {
			found, earlier = true, rec.At < t
			return errFar
		})
		if errors.Is(err, errFar) {
			err = nil
		}
		return found, earlier, err
	}
	low, high := uint64(0), uint64(1) // low lies before t, high does not or is not there
	for {
		found, earlier, err := before(high)
		if err != nil {
			return 0, err
		}
		if !found || !earlier {
			break
		}
		low, high = high, 2*high
	}
	for high-low > 1 {
		middle := low + (high-low)/2
		found, earlier, err := before(middle)
		if err != nil {
			return 0, err
		}
		if found && earlier {
			low = middle
		} else {
			high = middle
		}
	}
	const slack = 100
	return max(high, slack+1) - slack, nil
}

// lastRunway is the runway in use that was set last.
func lastRunway(store *history.Store) (string, error) {
	runway := ""
	var faults []error
	for rec, err := range store.People(0, 0, history.KindRunwayInUse) {
		if err == nil {
			var u history.RunwayInUse
			if u, err = rec.RunwayInUse(); err == nil {
				runway = u.Runway
			}
		}
		if err != nil {
			faults = append(faults, err)
		}
	}
	return runway, errors.Join(faults...)
}
