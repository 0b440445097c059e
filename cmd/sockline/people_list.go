package main

import (
	"encoding/json"
	"fmt"
	"iter"

	"sockline/alerting/history"
	"sockline/alerting/page"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// deedObject is what somebody did, as it is listed. Only what belongs to its
// kind is there.
type deedObject struct {
	Seq        uint64   `json:"seq"` // of its record in the journal
	Kind       string   `json:"kind"`
	At         string   `json:"at"`
	Who        string   `json:"who"`
	ID         string   `json:"id,omitempty"`
	Event      string   `json:"event,omitempty"`
	Occurrence string   `json:"occurrence,omitempty"`
	What       string   `json:"what,omitempty"`
	Text       string   `json:"text,omitempty"`
	Reason     string   `json:"reason,omitempty"`
	Until      string   `json:"until,omitempty"`
	From       string   `json:"from,omitempty"` // a time, or the address of an access
	To         string   `json:"to,omitempty"`
	Ended      *bool    `json:"ended,omitempty"`
	Why        string   `json:"why,omitempty"`
	Released   *bool    `json:"released,omitempty"`
	OK         *bool    `json:"ok,omitempty"`
	Runway     *string  `json:"runway,omitempty"`
	Operation  string   `json:"operation,omitempty"`
	Felt       string   `json:"felt,omitempty"`
	Entered    string   `json:"entered,omitempty"`   // when a report was written down; at is when it was felt
	AmountKt   *float64 `json:"amount_kt,omitempty"` // null or missing: unknown
	FromM      *float64 `json:"from_m,omitempty"`
	ToM        *float64 `json:"to_m,omitempty"`
	GoAround   *bool    `json:"go_around,omitempty"`
	Aircraft   string   `json:"aircraft,omitempty"`
}

// moments is a time as it is listed, empty for none.
func moments(t sensors.Instant) string {
	if t == 0 {
		return ""
	}
	return seconds(t)
}

// deedOf puts a record of what somebody did into its object.
func deedOf(r history.Record) (o deedObject, err error) {
	o = deedObject{Seq: r.Seq, Kind: r.Kind.String(), At: seconds(r.At)}
	switch r.Kind {
	case history.KindNote:
		n, fault := r.Note()
		o.Who, o.Event, o.Text, err = n.Who, n.Event, n.Text, fault
	case history.KindAcknowledge:
		a, fault := r.Acknowledgement()
		o.Kind, o.Who, o.Occurrence, err = "acknowledgement", a.Who, a.Occurrence, fault
	case history.KindShelve:
		s, fault := r.Shelving()
		o.Kind, o.Who, o.Occurrence, o.Reason, o.Until, o.Ended, o.Why, err = "shelving", s.Who, s.Occurrence, s.Reason, moments(s.Until), &s.Ended, s.Why, fault
	case history.KindPilotReport:
		p, fault := r.PilotReport()
		o.Who, o.ID, o.Event, o.Text, o.Runway, o.Operation, err = p.Who, p.ID, p.Event, p.Text, &p.Runway, p.Operation, fault
		o.Felt, o.Entered, o.FromM, o.ToM, o.GoAround, o.Aircraft = p.Felt, o.At, p.FromM, p.ToM, &p.GoAround, p.Aircraft
		o.At = seconds(p.At)
		if p.Amount != 0 {
			o.AmountKt = pointer(decimals(p.Amount/quantity.Knot, 1))
		}
	case history.KindHold:
		h, fault := r.Hold()
		o.Who, o.ID, o.Event, o.Reason, o.From, o.To, o.Released, err = h.Who, h.ID, h.Event, h.Reason, moments(h.From), moments(h.To), &h.Released, fault
	case history.KindAccess:
		a, fault := r.Access()
		o.Who, o.What, o.From, o.OK, err = a.Who, a.What, a.From, &a.OK, fault
	case history.KindRunwayInUse:
		u, fault := r.RunwayInUse()
		o.Who, o.Runway, err = u.Who, &u.Runway, fault
	case history.KindSheet:
		s, fault := r.Sheet()
		o.Who, o.What, o.Text, err = s.Who, s.What, s.Text, fault
	default:
		err = fmt.Errorf("journal record %d is a %s, which nobody did", r.Seq, r.Kind)
	}
	return o, err
}

// kindOf is how the journal calls a deed.
func kindOf(d page.Deed) (history.Kind, error) {
	kinds := map[page.Deed]history.Kind{
		page.Acknowledgements: history.KindAcknowledge, page.Shelvings: history.KindShelve, page.Notes: history.KindNote,
		page.PilotReports: history.KindPilotReport, page.Holds: history.KindHold, page.Sheets: history.KindSheet,
		page.RunwaysInUse: history.KindRunwayInUse, page.Accesses: history.KindAccess,
	}
	k, ok := kinds[d]
	if !ok {
		return 0, fmt.Errorf("nobody keeps %s", d)
	}
	return k, nil
}

// List implements page.People.
func (p *people) List(kind page.Deed, from, to sensors.Instant) ([]json.RawMessage, error) {
	k, err := kindOf(kind)
	if err != nil {
		return nil, err
	}
	store, err := p.archive.reading()
	if err != nil {
		return nil, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	return p.listed(store.People(from, to, k)), nil
}

// About implements page.People.
func (p *people) About(event string) ([]json.RawMessage, error) {
	occurrence, err := p.events(event)
	if err != nil {
		return nil, err
	}
	store, err := p.archive.reading()
	if err != nil {
		return nil, fmt.Errorf("%w: %w", page.ErrNotKept, err)
	}
	return p.listed(store.About(event, occurrence)), nil
}

// listed puts records into their objects. A damaged one is left out and logged;
// the others can be shown.
func (p *people) listed(records iter.Seq2[history.Record, error]) []json.RawMessage {
	out := []json.RawMessage{}
	for r, err := range records {
		var text []byte
		if err == nil {
			var o deedObject
			if o, err = deedOf(r); err == nil {
				text, err = json.Marshal(o)
			}
		}
		if err != nil {
			p.archive.log.Error().Err(err).Msg("a record of what somebody did cannot be read")
			continue
		}
		out = append(out, text)
	}
	return out
}
