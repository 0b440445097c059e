package page

import (
	"encoding/json"
	"fmt"
	"net/http"
	"sync"
	"time"

	"sockline/alerting"
)

const (
	utcSeconds = "2006-01-02 15:04:05 UTC"
	// madeLayout tells the wall time at which a view was made.
	madeLayout = "2006-01-02T15:04:05.000Z"
)

// marks stand in every object that is made here.
type marks struct {
	Exercise bool   `json:"exercise"`
	Notice   string `json:"notice"`
}

func (p *Page) marks() marks { return marks{p.exercise(p.opts.View()), alerting.Notice} }

// nowObject is the whole view.
type nowObject struct {
	Seq         uint64            `json:"seq"`
	Made        string            `json:"made"`
	At          string            `json:"at"`
	ValidUntil  string            `json:"valid_until"`
	Condition   string            `json:"condition"`
	Status      json.RawMessage   `json:"status"`
	AgeS        *float64          `json:"age_s"`
	MastsOut    []string          `json:"masts_out"`
	RunwayInUse string            `json:"runway_in_use"`
	Shelved     int               `json:"shelved"`
	Occurrences []Occurrence      `json:"occurrences"`
	Ends        []json.RawMessage `json:"ends"`
	Paths       []json.RawMessage `json:"paths"`
	Alerts      []json.RawMessage `json:"alerts"`
	Profiles    []json.RawMessage `json:"profiles"`
	Outflows    []json.RawMessage `json:"outflows"`
	Fronts      []json.RawMessage `json:"fronts"`
	Vertical    []json.RawMessage `json:"vertical"`
	Stations    []json.RawMessage `json:"stations"`
	LayoutID    string            `json:"layout_id"`
	marks
}

// bodyCache keeps the newest view as it is sent: many ask for the same one.
type bodyCache struct {
	mu   sync.Mutex
	view *View
	body []byte
}

// nowBody is a view as JSON, on one line. It is worked out once for each view,
// whoever asks.
func (p *Page) nowBody(v *View) ([]byte, error) {
	p.body.mu.Lock()
	defer p.body.mu.Unlock()
	if p.body.view == v {
		return p.body.body, nil
	}
	body, err := json.Marshal(p.nowObject(v))
	if err != nil {
		return nil, fmt.Errorf("write the view as JSON: %w", err)
	}
	p.body.view, p.body.body = v, body
	return body, nil
}

func (p *Page) nowObject(v *View) nowObject {
	o := nowObject{
		Seq:         v.Seq,
		Made:        v.Made.UTC().Format(madeLayout),
		At:          v.At.Time().Format(time.RFC3339),
		ValidUntil:  v.ValidUntil.Time().Format(time.RFC3339),
		Condition:   string(v.Condition),
		Status:      v.StatusJSON,
		AgeS:        v.AgeS,
		MastsOut:    listed(v.MastsOut),
		RunwayInUse: v.RunwayInUse,
		Occurrences: listed(v.Occurrences),
		Profiles:    listed(v.Profiles),
		Outflows:    listed(v.Outflows),
		Fronts:      listed(v.Fronts),
		Vertical:    listed(v.Vertical),
		LayoutID:    v.LayoutID,
		marks:       marks{p.exercise(v), alerting.Notice},
	}
	for _, x := range v.Occurrences {
		if x.ShelvedUntil != nil {
			o.Shelved++
		}
	}
	o.Ends = ready(v.Ends, func(x End) []byte { return x.JSON })
	o.Paths = ready(v.Paths, func(x Path) []byte { return x.JSON })
	o.Alerts = ready(v.Alerts, func(x Alert) []byte { return x.JSON })
	o.Stations = ready(v.Stations, func(x Station) []byte { return x.JSON })
	return o
}

// listed is a list that is empty rather than null.
func listed[T any](list []T) []T {
	if list == nil {
		return []T{}
	}
	return list
}

// ready collects ready-made objects; those that are missing are null.
func ready[T any](list []T, of func(T) []byte) []json.RawMessage {
	out := make([]json.RawMessage, 0, len(list))
	for _, x := range list {
		out = append(out, of(x))
	}
	return out
}

// now answers with the whole view.
func (p *Page) now(w http.ResponseWriter, _ *http.Request) {
	v := p.currentOrProblem(w)
	if v == nil {
		return
	}
	body, err := p.nowBody(v)
	if err != nil {
		p.internal(w, "write the view", err)
		return
	}
	p.write(w, http.StatusOK, "application/json", body)
}

// layout answers with runways, paths and masts to scale. It does not go out of
// date with the weather, so it is told whatever the age of the view.
func (p *Page) layout(w http.ResponseWriter, _ *http.Request) {
	v := p.opts.View()
	if v == nil || v.LayoutJSON == nil {
		p.problem(w, http.StatusServiceUnavailable, "no-information", "There is no layout yet.",
			"Nothing has been worked out since the start.")
		return
	}
	p.json(w, http.StatusOK, "application/json", struct {
		ID     string          `json:"layout_id"`
		Layout json.RawMessage `json:"layout"`
		marks
	}{v.LayoutID, v.LayoutJSON, p.marks()})
}
