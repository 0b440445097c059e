package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"time"

	"sockline/alerting/attention"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/alerting/page"
	"sockline/sensors"
)

// recordWithin is how long somebody who did something waits for the disk. What
// is done about an alert is in force at once, recorded or not.
const recordWithin = time.Second

// people does what the page lets people do: it changes what is shown, and keeps
// in the journal who did it.
type people struct {
	board   *board
	archive *archive
	now     func() sensors.Instant // event time, which the page shows
	runways func() []string        // designators
	events  func(id string) (occurrence string, err error)
}

func newPeople(d *daemon) *people {
	p := &people{board: d.board, archive: d.archive, now: d.moment, events: d.occurrenceOfEvent}
	p.runways = func() (all []string) {
		for _, r := range d.current().Airfield.Runways {
			all = append(all, r.Ends[0].Designator, r.Ends[1].Designator)
		}
		return all
	}
	return p
}

// moment is the time that the page shows: that of the last step, or of the host
// before there is one.
func (d *daemon) moment() sensors.Instant {
	if v := d.board.view.Load(); v != nil {
		return v.At
	}
	return eventNow()
}

// occurrenceOfEvent finds the occurrence of an event that is kept.
func (d *daemon) occurrenceOfEvent(id string) (string, error) {
	store, err := d.archive.reading()
	if err != nil {
		return "", fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	e, err := store.Event(id)
	if errors.Is(err, history.ErrNoEvent) {
		return "", page.ErrNoEvent
	}
	if err != nil {
		return "", err
	}
	var said struct{ Occurrence string }
	if err := json.Unmarshal(e.Object, &said); err != nil {
		return "", fmt.Errorf("read the recorded alert %s: %w", id, err)
	}
	return said.Occurrence, nil
}

// keep puts something into the journal and waits a little for the disk. Without
// an error it is on disk, or waits for it in memory.
func (p *people) keep(ctx context.Context, at sensors.Instant, payload any) (page.Done, error) {
	e, err := history.EntryOf(at, payload)
	if err != nil {
		return page.Done{}, err
	}
	ctx, cancel := context.WithTimeout(context.WithoutCancel(ctx), recordWithin)
	defer cancel()
	_, err = p.archive.recordDurably(ctx, e)
	done := page.Done{At: at, Recorded: err == nil}
	if err != nil && !errors.Is(err, context.DeadlineExceeded) {
		return done, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	return done, nil
}

// done does something about an alert: at once, and whether or not the journal
// takes it. Nobody has to listen to a sound because a disk is full.
func (p *people) done(ctx context.Context, at sensors.Instant, payload any, do func(*attention.Watch) error) (page.Done, error) {
	if err := p.board.act(do); err != nil {
		return page.Done{}, err
	}
	done, err := p.keep(ctx, at, payload)
	if errors.Is(err, page.ErrNotKept) {
		err = nil // it says that it is not recorded
	}
	return done, err
}

// Acknowledge implements page.People.
func (p *people) Acknowledge(ctx context.Context, who, occurrence string) (page.Done, error) {
	at := p.now()
	return p.done(ctx, at, history.Acknowledgement{Occurrence: occurrence, Who: who}, func(w *attention.Watch) error {
		return w.Acknowledge(occurrence, who, at)
	})
}

// AcknowledgeEvent implements page.People.
func (p *people) AcknowledgeEvent(ctx context.Context, who, event string) (page.Done, error) {
	if v := p.board.view.Load(); v != nil {
		for _, o := range v.Occurrences {
			if slices.Contains(o.Alerts, event) {
				return p.Acknowledge(ctx, who, o.ID)
			}
		}
	}
	occurrence, err := p.events(event)
	if err != nil {
		return page.Done{}, err
	}
	return p.Acknowledge(ctx, who, occurrence)
}

// Shelve implements page.People.
func (p *people) Shelve(ctx context.Context, who, occurrence, reason string, until sensors.Instant) (page.Done, error) {
	at := p.now()
	if until == 0 {
		until = at.Add(attention.UsualShelving)
	}
	s := history.Shelving{Occurrence: occurrence, Who: who, Reason: reason, Until: until}
	return p.done(ctx, at, s, func(w *attention.Watch) error { return w.Shelve(occurrence, who, reason, until, at) })
}

// byHand is why a shelving ended that somebody lifted.
const byHand = "hand"

// Unshelve implements page.People.
func (p *people) Unshelve(ctx context.Context, who, occurrence string) (page.Done, error) {
	s := history.Shelving{Occurrence: occurrence, Who: who, Ended: true, Why: byHand}
	return p.done(ctx, p.now(), s, func(w *attention.Watch) error { return w.Unshelve(occurrence) })
}

// lifted keeps the shelvings that ended by themselves.
func (p *people) lifted(at sensors.Instant, all []attention.Lifted) {
	for _, l := range all {
		s := history.Shelving{
			Occurrence: l.Occurrence, Who: l.Shelving.Who, Reason: l.Shelving.Reason, Until: l.Shelving.Until, Ended: true, Why: l.Why,
		}
		if e, err := history.EntryOf(at, s); err == nil { // texts and times always have a JSON form
			p.archive.record(e)
		}
	}
}

// UseRunway implements page.People.
func (p *people) UseRunway(ctx context.Context, who, runway string) (page.Done, error) {
	if err := p.known("runway", runway, true); err != nil {
		return page.Done{}, err
	}
	return p.done(ctx, p.now(), history.RunwayInUse{Who: who, Runway: runway}, func(w *attention.Watch) error {
		w.UseRunway(runway)
		return nil
	})
}

// known refuses a runway that is not there.
func (p *people) known(field, runway string, none bool) error {
	all := p.runways()
	if runway == "" && none || slices.Contains(all, runway) {
		return nil
	}
	return page.Refusal{Field: field, Why: fmt.Sprintf("there is no runway %.10q; there are %v", runway, all)}
}

// Note implements page.People.
func (p *people) Note(ctx context.Context, who, event, text string) (page.Done, error) {
	if _, err := p.events(event); err != nil {
		return page.Done{}, err
	}
	return p.keep(ctx, p.now(), history.Note{Event: event, Who: who, Text: text})
}

// Report implements page.People.
func (p *people) Report(ctx context.Context, who string, r page.PilotReport) (page.Done, error) {
	now := p.now()
	if err := p.known("runway", r.Runway, false); err != nil {
		return page.Done{}, err
	}
	if r.At > now.Add(time.Minute) {
		return page.Done{}, page.Refusal{Field: "at", Why: "that is yet to come; it is " + seconds(now)}
	}
	if r.Event != "" {
		if _, err := p.events(r.Event); err != nil {
			return page.Done{}, err
		}
	}
	id, err := newName("report")
	if err != nil {
		return page.Done{}, err
	}
	done, err := p.keep(ctx, now, history.PilotReport{
		ID: id, Who: who, At: r.At, Runway: r.Runway, Operation: r.Operation, Felt: r.Felt, Amount: r.Amount,
		FromM: r.FromM, ToM: r.ToM, GoAround: r.GoAround, Aircraft: r.Aircraft, Text: r.Text, Event: r.Event,
	})
	done.ID = id
	return done, err
}

// Hold implements page.People.
func (p *people) Hold(ctx context.Context, who string, h page.Hold) (page.Done, error) {
	if h.Event != "" {
		if _, err := p.events(h.Event); err != nil {
			return page.Done{}, err
		}
	}
	id, err := newName("hold")
	if err != nil {
		return page.Done{}, err
	}
	done, err := p.keep(ctx, p.now(), history.Hold{ID: id, Who: who, Reason: h.Reason, From: h.From, To: h.To, Event: h.Event})
	done.ID = id
	return done, err
}

// ReleaseHold implements page.People.
func (p *people) ReleaseHold(ctx context.Context, who, id, reason string) (page.Done, error) {
	store, err := p.archive.reading()
	if err != nil {
		return page.Done{}, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	var held history.Hold
	for rec, err := range store.People(0, 0, history.KindHold) {
		if err != nil {
			continue // a damaged one is told by verify
		}
		if h, err := rec.Hold(); err == nil && h.ID == id {
			held = h
		}
	}
	switch {
	case held.ID == "":
		return page.Done{}, page.ErrNoHold
	case held.Released:
		return page.Done{}, page.Refusal{Field: "id", Why: "this hold is released already"}
	}
	held.Who, held.Reason, held.Released = who, reason, true
	done, err := p.keep(ctx, p.now(), held)
	done.ID = id
	return done, err
}

// Sign implements page.People.
func (p *people) Sign(ctx context.Context, who, what, text string) (page.Done, error) {
	return p.keep(ctx, p.now(), history.Sheet{What: what, Who: who, Text: text})
}

// Audit implements page.People.
func (p *people) Audit(a page.Access) {
	if e, err := history.EntryOf(p.now(), history.Access{Who: a.Who, What: a.What, From: a.From, OK: a.OK}); err == nil {
		p.archive.record(e)
	}
}

// watched is an issue of an alert as attention takes it.
func watched(a lifecycle.Alert, sentence string) attention.Alert {
	return attention.Alert{
		ID: a.ID, Occurrence: a.Occurrence, Runway: a.Runway, Kind: a.Kind, Level: a.Level, Change: a.Change,
		Open: a.State == lifecycle.Open, Opened: a.Opened, At: a.Updated, Trend: string(a.Trend), Sentence: sentence,
	}
}

var _ page.People = (*people)(nil)
