package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"sync"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/page"
	"sockline/alerting/shear"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

const (
	// playedAround is how much is shown before an event and after it.
	playedAround = 5 * time.Minute
	// playedAtMost is how much is shown of one event.
	playedAtMost = time.Hour
	// playedLead is how long the analysis runs before what is shown: what its
	// averages and its weights remember, not all of engine.Memory.
	playedLead = 20 * time.Minute
)

// playbacks shows events second by second, from the readings that are kept.
type playbacks struct {
	archive *archive
	current func() *config.Config

	mu   sync.Mutex // of the newest one: people look at the same
	id   string
	text json.RawMessage
}

// playedStep is one second of a playback.
type playedStep struct {
	At       string            `json:"at"`
	Stations []playedStation   `json:"stations"`
	Profiles []json.RawMessage `json:"profiles"`
	Paths    []json.RawMessage `json:"paths"`
}

// playedStation is a mast in one second: what it read last, if that is recent.
type playedStation struct {
	ID      string   `json:"id"`
	State   string   `json:"state"`
	Live    bool     `json:"live"`
	SpeedKt *float64 `json:"speed_kt"`
	From    *float64 `json:"from_true_deg"`
}

// of gives the playback of an event as an object.
func (p *playbacks) of(ctx context.Context, id string) (json.RawMessage, error) {
	store, err := p.archive.reading()
	if err != nil {
		return nil, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	e, err := store.Event(id)
	if errors.Is(err, history.ErrNoEvent) {
		return nil, page.ErrNoEvent
	}
	if err != nil {
		return nil, err
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.id == id && p.text != nil {
		return p.text, nil
	}
	text, err := p.play(ctx, store, &e)
	if err == nil && e.Closed != 0 { // one that is open goes on
		p.id, p.text = id, text
	}
	return text, err
}

// play runs the analysis once more over the readings round an event.
func (p *playbacks) play(ctx context.Context, store *history.Store, e *history.Event) (json.RawMessage, error) {
	var said struct {
		Runway, Operation string
		Exercise          bool
	}
	if err := json.Unmarshal(e.Object, &said); err != nil {
		return nil, fmt.Errorf("read the recorded alert %s: %w", e.ID, err)
	}
	from, to := e.Opened.Add(-playedAround), e.Updated.Add(playedAround)
	if to.Sub(from) > playedAtMost {
		to = from.Add(playedAtMost)
	}
	cfg, err := p.inForceAt(store, e.Opened)
	if err != nil {
		return nil, err
	}
	eng, err := engine.New(engineSettings(cfg, said.Exercise))
	if err != nil {
		return nil, fmt.Errorf("prepare the engine: %w", err)
	}
	path := -1
	for i, q := range cfg.Airfield.Paths {
		if q.Runway() == said.Runway && q.Operation() == said.Operation {
			path = i
		}
	}
	run := &player{exercise: said.Exercise, cfg: cfg, engine: eng, path: path, from: from, newest: make([]sensors.Reading, len(cfg.Stations))}
	for _, s := range cfg.Stations {
		run.ids = append(run.ids, s.ID)
	}
	begin := from.Add(-playedLead)
	// What is damaged is left out and shows as silence.
	_ = store.Readings(begin, to, func(st history.Step) error {
		if err := ctx.Err(); err != nil {
			return err
		}
		run.stored(st)
		return nil
	})
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	if run.played == 0 {
		return nil, fmt.Errorf("%w: no readings are kept of this time", page.ErrNothing)
	}
	return run.object(e.ID, to)
}

// inForceAt is the configuration that judged a step, or the current one where
// the journal has none.
func (p *playbacks) inForceAt(store *history.Store, at sensors.Instant) (*config.Config, error) {
	all, err := configurationsOf(store)
	if err != nil {
		return nil, fmt.Errorf("look for the configuration of that time: %w", err)
	}
	var found *inForce
	for i := range all {
		if all[i].from <= at {
			found = &all[i]
		}
	}
	if found == nil || found.hash == p.current().Hash {
		return p.current(), nil
	}
	cfg, err := found.parse()
	if err != nil {
		return nil, fmt.Errorf("%w: the configuration of that time is not understood any more", page.ErrNothing)
	}
	return cfg, nil
}

// player is a playback that is being worked out.
type player struct {
	exercise bool // the event was one
	cfg      *config.Config
	ids      []string
	engine   *engine.Engine
	path     int // of the event; -1 if it is not there any more
	from     sensors.Instant
	newest   []sensors.Reading // by station
	points   []shear.ProfilePoint
	steps    []playedStep
	played   int // stored steps among those shown
}

// stored takes the next stored step, and the seconds without readings before it.
func (p *player) stored(st history.Step) {
	if p.engine.LastStep() == 0 {
		_ = p.engine.SkipTo(st.At - sensors.Second) // nothing waits and nothing is closed: it cannot fail
	}
	for t := p.engine.LastStep() + sensors.Second; t < st.At; t += sensors.Second {
		p.step(t)
	}
	for _, r := range st.For(p.ids) {
		p.engine.Stored(r)
		p.newest[r.Station] = r
	}
	if st.At >= p.from {
		p.played++
	}
	p.step(st.At)
}

// step closes one second.
func (p *player) step(t sensors.Instant) {
	if t < p.from {
		p.engine.Warm(t)
		return
	}
	res := p.engine.Step(t)
	out := playedStep{At: seconds(t), Stations: []playedStation{}, Profiles: []json.RawMessage{}, Paths: []json.RawMessage{}}
	for i := range p.cfg.Stations {
		m := res.Snapshot.Mast(i)
		s := playedStation{ID: p.ids[i], State: stateWord(m), Live: m.State == averages.Live}
		if r := &p.newest[i]; r.Time != 0 && t.Sub(r.Time) < p.cfg.Stations[i].StaleAfter {
			s.SpeedKt, s.From = pointer(decimals(r.Speed/quantity.Knot, 1)), pointer(degrees(r.From))
		}
		out.Stations = append(out.Stations, s)
	}
	if p.path >= 0 {
		q := p.cfg.Airfield.Paths[p.path]
		p.points = p.engine.Profile(p.path, p.points[:0])
		profile := wording.ProfileView{Path: q, Points: p.points, Exercise: p.exercise}
		out.Profiles = append(out.Profiles, profile.JSON())
		view := wording.PathView{Path: q, Assessment: res.Assessments[p.path], At: t, ValidUntil: t.Add(validFor), Exercise: p.exercise}
		view.State = wording.StateOf(len(p.engine.Alerts(nil)) > 0, &view.Assessment)
		out.Paths = append(out.Paths, view.JSON())
	}
	p.steps = append(p.steps, out)
}

// object is the whole playback.
func (p *player) object(id string, to sensors.Instant) (json.RawMessage, error) {
	var variation *float64
	if v, err := p.cfg.Airfield.Variation(p.from.Time()); err == nil {
		variation = &v
	}
	text, err := json.Marshal(struct {
		Event    string          `json:"event"`
		From     string          `json:"from"`
		To       string          `json:"to"`
		Steps    []playedStep    `json:"steps"`
		Layout   json.RawMessage `json:"layout"`
		Exercise bool            `json:"exercise"`
		Notice   string          `json:"notice"`
	}{id, seconds(p.from), seconds(to), p.steps, newLayout(p.cfg.Airfield, p.cfg.Analysis.Reach, variation).json, p.exercise, alerting.Notice})
	if err != nil {
		return nil, fmt.Errorf("write the playback: %w", err)
	}
	return text, nil
}
