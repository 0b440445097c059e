package page

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"mime"
	"net/http"
	"strings"
	"time"
	"unicode/utf8"

	"sockline/alerting/attention"
	"sockline/alerting/page/access"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// Bounds of what people send.
const (
	maxBody   = 64 << 10
	maxText   = 4000 // characters
	maxReason = 200
	maxWord   = 80
	mostKnots = 150 // that a crew can have felt
	farthestM = 30_000
)

// actRoutes is every address at which something can be done.
func (p *Page) actRoutes(mux *http.ServeMux) {
	mux.HandleFunc("POST /api/v1/occurrences/{id}/acknowledge", act(p, access.Tower, func(r *http.Request, who string, _ struct{}) (Done, error) {
		return p.opts.People.Acknowledge(r.Context(), who, r.PathValue("id"))
	}))
	mux.HandleFunc("POST /api/v1/events/{id}/acknowledge", act(p, access.Tower, func(r *http.Request, who string, _ struct{}) (Done, error) {
		return p.opts.People.AcknowledgeEvent(r.Context(), who, r.PathValue("id"))
	}))
	mux.HandleFunc("POST /api/v1/occurrences/{id}/shelve", act(p, access.Tower, p.shelve))
	mux.HandleFunc("POST /api/v1/occurrences/{id}/unshelve", act(p, access.Tower, func(r *http.Request, who string, _ struct{}) (Done, error) {
		return p.opts.People.Unshelve(r.Context(), who, r.PathValue("id"))
	}))
	mux.HandleFunc("POST /api/v1/runway-in-use", act(p, access.Tower, func(r *http.Request, who string, b struct {
		Runway *string `json:"runway"`
	}) (Done, error) {
		if b.Runway == nil {
			return Done{}, Refusal{"runway", `give a designator, or "" for none in particular`}
		}
		return p.opts.People.UseRunway(r.Context(), who, *b.Runway)
	}))
	mux.HandleFunc("POST /api/v1/pilot-reports", act(p, access.Tower, p.report))
	mux.HandleFunc("POST /api/v1/sheets", act(p, access.Tower, p.sign))
	mux.HandleFunc("POST /api/v1/events/{id}/notes", act(p, access.Officer, func(r *http.Request, who string, b struct {
		Text string `json:"text"`
	}) (Done, error) {
		if err := words("text", b.Text, maxText, true); err != nil {
			return Done{}, err
		}
		return p.opts.People.Note(r.Context(), who, r.PathValue("id"), b.Text)
	}))
	mux.HandleFunc("POST /api/v1/holds", act(p, access.Officer, p.hold))
	mux.HandleFunc("POST /api/v1/holds/{id}/release", act(p, access.Officer, func(r *http.Request, who string, b struct {
		Reason string `json:"reason"`
	}) (Done, error) {
		if err := words("reason", b.Reason, maxReason, true); err != nil {
			return Done{}, err
		}
		return p.opts.People.ReleaseHold(r.Context(), who, r.PathValue("id"), b.Reason)
	}))
}

func (p *Page) shelve(r *http.Request, who string, b struct {
	Reason string `json:"reason"`
	Until  string `json:"until"`
}) (Done, error) {
	if err := words("reason", b.Reason, maxReason, true); err != nil {
		return Done{}, err
	}
	until, err := instant("until", b.Until, true)
	if err != nil {
		return Done{}, err
	}
	return p.opts.People.Shelve(r.Context(), who, r.PathValue("id"), b.Reason, until)
}

func (p *Page) report(r *http.Request, who string, b struct {
	At        string   `json:"at"`
	Runway    string   `json:"runway"`
	Operation string   `json:"operation"`
	Felt      string   `json:"felt"`
	AmountKt  float64  `json:"amount_kt"`
	FromM     *float64 `json:"from_m"`
	ToM       *float64 `json:"to_m"`
	GoAround  bool     `json:"go_around"`
	Aircraft  string   `json:"aircraft"`
	Text      string   `json:"text"`
	Event     string   `json:"event"`
}) (Done, error) {
	at, err := instant("at", b.At, false)
	if err := errors.Join(err, words("aircraft", b.Aircraft, maxWord, false), words("text", b.Text, maxText, false)); err != nil {
		return Done{}, err
	}
	if b.Operation != "landing" && b.Operation != "take-off" {
		return Done{}, Refusal{"operation", "choose landing or take-off"}
	}
	if b.Felt != "loss" && b.Felt != "gain" && b.Felt != "none" {
		return Done{}, Refusal{"felt", "choose loss, gain or none"}
	}
	if b.AmountKt < 0 || b.AmountKt > mostKnots || b.Felt == "none" && b.AmountKt != 0 {
		return Done{}, Refusal{"amount_kt", fmt.Sprintf("give 0 to %d, without a sign; 0 is unknown, or none felt", mostKnots)}
	}
	for name, m := range map[string]*float64{"from_m": b.FromM, "to_m": b.ToM} {
		if m != nil && math.Abs(*m) > farthestM {
			return Done{}, Refusal{name, fmt.Sprintf("give metres before the threshold, at most %d", farthestM)}
		}
	}
	if b.FromM != nil && b.ToM != nil && *b.FromM < *b.ToM {
		return Done{}, Refusal{"to_m", "metres before the threshold fall in the direction of flight: to_m is not above from_m"}
	}
	return p.opts.People.Report(r.Context(), who, PilotReport{
		At: at, Runway: b.Runway, Operation: b.Operation, Felt: b.Felt, Amount: b.AmountKt * quantity.Knot, FromM: b.FromM, ToM: b.ToM,
		GoAround: b.GoAround, Aircraft: b.Aircraft, Text: b.Text, Event: b.Event,
	})
}

func (p *Page) sign(r *http.Request, who string, b struct {
	What string `json:"what"`
	Text string `json:"text"`
}) (Done, error) {
	if b.What != "daily" && b.What != "handover" {
		return Done{}, Refusal{"what", "choose daily or handover"}
	}
	if err := words("text", b.Text, maxText, false); err != nil {
		return Done{}, err
	}
	return p.opts.People.Sign(r.Context(), who, b.What, b.Text)
}

func (p *Page) hold(r *http.Request, who string, b struct {
	Reason string `json:"reason"`
	From   string `json:"from"`
	To     string `json:"to"`
	Event  string `json:"event"`
}) (Done, error) {
	if err := words("reason", b.Reason, maxReason, true); err != nil {
		return Done{}, err
	}
	spanned := b.Event == "" // an event has its own time
	from, err1 := instant("from", b.From, !spanned)
	to, err2 := instant("to", b.To, !spanned)
	if err := errors.Join(err1, err2); err != nil {
		return Done{}, err
	}
	if to != 0 && to <= from || (from == 0) != (to == 0) {
		return Done{}, Refusal{"to", "give from and to, and to after from"}
	}
	return p.opts.People.Hold(r.Context(), who, Hold{Reason: b.Reason, From: from, To: to, Event: b.Event})
}

// words checks a text of people: some characters, and not too many.
func words(field, text string, most int, needed bool) error {
	switch n := utf8.RuneCountInString(text); {
	case needed && strings.TrimSpace(text) == "":
		return Refusal{field, "write something"}
	case n > most:
		return Refusal{field, fmt.Sprintf("%d characters are too many; at most %d", n, most)}
	case strings.ContainsRune(text, 0):
		return Refusal{field, "it holds a character that is none"}
	}
	return nil
}

// instant reads a time of people; empty is 0 where it may be.
func instant(field, text string, optional bool) (sensors.Instant, error) {
	if text == "" && optional {
		return 0, nil
	}
	at, err := time.Parse(time.RFC3339, text)
	if err != nil || at.Year() < 1970 || at.Year() > 9998 {
		return 0, Refusal{field, "write a time as 2026-07-01T14:00:00Z"}
	}
	return sensors.At(at), nil
}

// act makes the handler of something that can be done: it looks who asks and
// whether they may, reads what they sent, strictly, and answers with what
// became of it.
func act[B any](p *Page, role access.Role, do func(r *http.Request, who string, body B) (Done, error)) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		v, ok := p.allowed(w, r, role)
		if !ok {
			return
		}
		var body B
		if why := strict(r, &body); why != "" {
			p.problem(w, http.StatusBadRequest, "bad-body", "What was sent cannot be understood.", why)
			return
		}
		done, err := do(r, v.Name, body)
		if err != nil {
			p.refuse(w, err)
			return
		}
		p.json(w, http.StatusOK, "application/json", struct {
			ID       string `json:"id"`
			At       string `json:"at"`
			Recorded bool   `json:"recorded"`
			marks
		}{done.ID, done.At.Time().Format(time.RFC3339), done.Recorded, p.marks()})
	}
}

// strict reads a body of JSON and nothing else. It says in a sentence what is
// wrong with it, or nothing.
func strict(r *http.Request, body any) (why string) {
	if kind, _, err := mime.ParseMediaType(r.Header.Get("Content-Type")); err != nil || kind != "application/json" {
		return "Send a JSON object with Content-Type: application/json."
	}
	d := json.NewDecoder(io.LimitReader(r.Body, maxBody+1))
	d.DisallowUnknownFields()
	err := d.Decode(body)
	var extra json.RawMessage
	switch {
	case d.InputOffset() > maxBody:
		return fmt.Sprintf("It is longer than %d bytes.", maxBody)
	case err != nil:
		return fmt.Sprintf("It is not the JSON object that is expected here: %s.", strings.TrimPrefix(err.Error(), "json: "))
	case !errors.Is(d.Decode(&extra), io.EOF):
		return "Something follows the JSON object."
	}
	return ""
}

// refuse answers with why something was not done.
func (p *Page) refuse(w http.ResponseWriter, err error) {
	var value Refusal
	switch {
	case errors.As(err, &value):
		p.problem(w, http.StatusUnprocessableEntity, "bad-value", "A value does not do.", value.Error())
	case errors.Is(err, ErrNoEvent):
		p.problem(w, http.StatusNotFound, "no-event", "There is no event with this id.", "/api/v1/events lists the events that are kept.")
	case errors.Is(err, ErrNoHold):
		p.problem(w, http.StatusNotFound, "no-hold", "There is no hold with this id.", "/api/v1/holds lists them.")
	case errors.Is(err, attention.ErrNoOccurrence):
		p.problem(w, http.StatusNotFound, "no-occurrence", "There is no such occurrence on show.",
			"It has ended, or never was; /api/v1/now lists those on show.")
	case errors.Is(err, attention.ErrNotOpen), errors.Is(err, attention.ErrNotShelved):
		p.problem(w, http.StatusConflict, "not-so", "That cannot be done now.", sentenceOf(err))
	case errors.Is(err, attention.ErrBadEnd), errors.Is(err, attention.ErrNoReason):
		p.problem(w, http.StatusUnprocessableEntity, "bad-value", "A value does not do.", sentenceOf(err))
	case errors.Is(err, ErrNotKept):
		p.problem(w, http.StatusServiceUnavailable, "not-kept", "It cannot be kept, and was not done.",
			"The history does not take it: the status says why. Try again when it does.")
	default:
		p.internal(w, "do what was asked for", err)
	}
}

// sentenceOf is an error as a sentence.
func sentenceOf(err error) string {
	s := err.Error()
	return strings.ToUpper(s[:1]) + s[1:] + "."
}
