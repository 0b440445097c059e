package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"time"

	"sockline/alerting/history"
	"sockline/alerting/history/bundle"
	"sockline/alerting/history/export"
	"sockline/alerting/page"
	"sockline/sensors"
)

// reviewer works out what the page is asked for about the past.
type reviewer struct {
	playbacks
}

func newReviewer(d *daemon) *reviewer {
	return &reviewer{playbacks{archive: d.archive, current: d.current}}
}

// Playback implements page.Review.
func (r *reviewer) Playback(ctx context.Context, event string) (json.RawMessage, error) {
	return r.of(ctx, event)
}

// Report implements page.Review: the report of an event, on one page.
func (r *reviewer) Report(_ context.Context, w io.Writer, id string) error {
	store, _, err := r.event(id)
	if err != nil {
		return err
	}
	e, err := gatherEvent(store, id, time.Now())
	if err != nil {
		return err
	}
	return e.WriteHTML(w)
}

// event finds an event that is kept.
func (r *reviewer) event(id string) (*history.Store, history.Event, error) {
	store, err := r.archive.reading()
	if err != nil {
		return nil, history.Event{}, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	e, err := store.Event(id)
	if errors.Is(err, history.ErrNoEvent) {
		err = page.ErrNoEvent
	}
	return store, e, err
}

// CSV implements page.Review: the readings from bundle.Around before the event
// to as much after it.
func (r *reviewer) CSV(ctx context.Context, w io.Writer, id string) error {
	store, e, err := r.event(id)
	if err != nil {
		return err
	}
	sink, err := export.New("csv", w)
	if err != nil {
		return err
	}
	sum, err := export.Readings(ctx, store, e.Opened.Add(-bundle.Around), e.Updated.Add(bundle.Around)+sensors.Second, sink, func(sensors.Instant) {})
	if err == nil && sum.Damage != nil {
		r.archive.log.Error().Err(sum.Damage).Str("event", id).Msg("readings round an event are left out of a download")
	}
	return err
}

// Bundle implements page.Review: the evidence of an event, signed.
func (r *reviewer) Bundle(ctx context.Context, w io.Writer, id string) error {
	store, _, err := r.event(id)
	if err != nil {
		return err
	}
	key, err := bundle.Key(r.current().History.Directory)
	if err != nil {
		return err
	}
	_, err = bundle.Write(ctx, w, store, id, bundle.Options{Software: softwareText(), Key: key})
	return err
}

// usualSummary is the period that is summed up where nobody says which.
const usualSummary = 30 * 24 * time.Hour

// longestSummary bounds the period: a longer one takes minutes of a core, and
// has a command of its own.
const longestSummary = 92 * 24 * time.Hour

// lastKept is the history and its last step.
func (r *reviewer) lastKept() (*history.Store, sensors.Instant, error) {
	store, err := r.archive.reading()
	if err != nil {
		return nil, 0, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	last, ok, err := store.LastStep()
	if err == nil && !ok {
		err = fmt.Errorf("%w: the history holds no readings", page.ErrNothing)
	}
	return store, last, err
}

// Statistics implements page.Review: the figures of a period.
func (r *reviewer) Statistics(ctx context.Context, from, to sensors.Instant) (json.RawMessage, error) {
	store, last, err := r.lastKept()
	if err != nil {
		return nil, err
	}
	if to == 0 {
		to = last + sensors.Second
	}
	if from == 0 {
		from = to.Add(-usualSummary)
	}
	if to.Sub(from) > longestSummary {
		return nil, page.Refusal{Field: "from", Why: "at most 92 days are summed up here; \"sockline history summary\" takes more"}
	}
	u, err := summarize(ctx, store, r.current().History.Directory, from, to, func(float64) {})
	if err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	return json.Marshal(u)
}

// WhatIf implements page.Review: the last month judged by the usual other
// levels.
func (r *reviewer) WhatIf(ctx context.Context) (json.RawMessage, error) {
	store, last, err := r.lastKept()
	if err != nil {
		return nil, err
	}
	return otherLevels(ctx, store, r.current(), last)
}
