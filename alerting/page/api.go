package page

import (
	"encoding/json"
	"errors"
	"fmt"
	"net"
	"net/http"
	"net/url"
	"slices"
	"strconv"
	"strings"
	"time"

	"github.com/prometheus/client_golang/prometheus/promhttp"

	"sockline/alerting"
	"sockline/sensors"
)

// routes is every address there is.
func (p *Page) routes() *http.ServeMux {
	mux := http.NewServeMux()
	p.frontRoutes(mux)
	mux.HandleFunc("GET /api/v1/now", p.now)
	mux.HandleFunc("GET /api/v1/stream", p.stream)
	mux.HandleFunc("GET /api/v1/layout", p.layout)
	mux.HandleFunc("GET /api/v1/stations", p.stations)
	mux.HandleFunc("GET /api/v1/openapi.json", p.description)
	mux.HandleFunc("GET /api/v1/basis", p.basis)
	p.pastRoutes(mux)
	mux.Handle("GET /metrics", promhttp.HandlerFor(p.opts.Registry, promhttp.HandlerOpts{}))
	mux.HandleFunc("GET /healthz", p.health)
	mux.HandleFunc("GET /readyz", p.ready)
	mux.HandleFunc("GET /api/v1/visitor", p.visitorObject)
	mux.HandleFunc("GET /login", p.logInForm)
	mux.HandleFunc("POST /login", p.logIn)
	mux.HandleFunc("POST /logout", p.logOut)
	p.actRoutes(mux)
	mux.HandleFunc("/", p.otherwise)
	return mux
}

// ServeHTTP sets what every answer carries, and refuses what no address takes.
func (p *Page) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	h := w.Header()
	h.Set("Content-Security-Policy", contentSecurityPolicy)
	h.Set("X-Content-Type-Options", "nosniff")
	h.Set("Referrer-Policy", "no-referrer")
	h.Set("Cross-Origin-Resource-Policy", "same-origin")
	h.Set("Cache-Control", "no-store")
	// A foreign web site may have its own name resolve to this machine, and
	// then read what a browser here is given. The name gives it away.
	host := r.Host
	if name, _, err := net.SplitHostPort(host); err == nil {
		host = name
	}
	if n := len(host); n > 1 && host[0] == '[' && host[n-1] == ']' {
		host = host[1 : n-1]
	}
	// Over TLS a certificate keeps others from using our name.
	if p.opts.TLS == nil && !loopback(host) {
		p.problem(w, http.StatusMisdirectedRequest, "foreign-host", "This program does not serve that name.",
			"Ask for 127.0.0.1 or localhost; a reverse proxy must send one of these as Host.")
		return
	}
	if r.Method != http.MethodGet && r.Method != http.MethodHead && p.foreign.Check(r) != nil {
		p.problem(w, http.StatusForbidden, "foreign-page", "The request comes from a page of somebody else.",
			"Use the page that this program serves.")
		return
	}
	if p.mayRead(w, r) {
		p.mux.ServeHTTP(w, r)
	}
}

// otherwise answers what no address takes: what is not there, and methods that
// an address does not know.
func (p *Page) otherwise(w http.ResponseWriter, r *http.Request) {
	if r.Method == http.MethodGet || r.Method == http.MethodHead {
		p.problem(w, http.StatusNotFound, "not-found", "There is nothing at this address.",
			"/api/v1/openapi.json describes every address there is.")
		return
	}
	w.Header().Set("Allow", "GET, HEAD")
	p.problem(w, http.StatusMethodNotAllowed, "no-such-deed", "Nothing can be done at this address in this way.",
		"/api/v1/openapi.json describes what can be done, and where.")
}

// current is the view if it may still be shown, else nil and why not.
func (p *Page) current() (v *View, why string) {
	v = p.opts.View()
	if v == nil {
		return nil, "Nothing has been worked out since the start."
	}
	// Age counts both ways: a clock that was set back must not keep an old
	// view alive.
	if age := p.opts.Now().Sub(v.Made); age > MaxAge || age < -MaxAge {
		return nil, fmt.Sprintf("The last step worked out was that of %s.", v.At.Time().Format(utcSeconds))
	}
	return v, ""
}

// currentOrProblem is current; where there is no view it has answered why.
func (p *Page) currentOrProblem(w http.ResponseWriter) *View {
	v, why := p.current()
	if v == nil {
		p.problem(w, http.StatusServiceUnavailable, "no-information", "There is no information now.",
			why+" Read every path as not observed.")
	}
	return v
}

// stations answers with the health and the book of every mast.
func (p *Page) stations(w http.ResponseWriter, _ *http.Request) {
	v := p.currentOrProblem(w)
	if v == nil {
		return
	}
	type body struct {
		At         string            `json:"at"`
		ValidUntil string            `json:"valid_until"`
		Stations   []json.RawMessage `json:"stations"`
		Exercise   bool              `json:"exercise"`
		Notice     string            `json:"notice"`
	}
	b := body{
		At: v.At.Time().Format(time.RFC3339), ValidUntil: v.ValidUntil.Time().Format(time.RFC3339),
		Stations: make([]json.RawMessage, 0, len(v.Stations)), Exercise: p.exercise(v), Notice: alerting.Notice,
	}
	for _, x := range v.Stations {
		b.Stations = append(b.Stations, x.whole(b.At))
	}
	p.json(w, http.StatusOK, "application/json", b)
}

// whole is the health of a mast with what is remembered of it, up to a time.
func (s *Station) whole(until string) json.RawMessage {
	if n := len(s.JSON); len(s.More) > 0 && n > 2 {
		return slices.Concat(s.JSON[:n-1], []byte(`,"gaps_until":"`+until+`",`), s.More, []byte("}"))
	}
	return s.JSON
}

// exercise reports whether what is shown is an exercise: the whole program, or
// this view.
func (p *Page) exercise(v *View) bool { return p.opts.Exercise || (v != nil && v.Exercise) }

// The bounds of a list of events.
const (
	defaultEvents = 100
	maxEvents     = 1000
)

func (p *Page) events(w http.ResponseWriter, r *http.Request) {
	q, err := eventQuery(r.URL.RawQuery)
	if err != nil {
		p.problem(w, http.StatusBadRequest, "bad-query", "The query cannot be understood.", err.Error())
		return
	}
	events, err := p.opts.History.Events(q)
	if err != nil {
		p.internal(w, "list events", err)
		return
	}
	highest := make(map[string]string, len(events))
	for _, e := range events {
		highest[e.ID] = e.Highest.String()
	}
	p.json(w, http.StatusOK, "application/json", struct {
		Events  []json.RawMessage `json:"events"`
		Highest map[string]string `json:"highest_level"` // that each had, by id
		marks
	}{ready(events, func(e Event) []byte { return e.Object }), highest, p.marks()})
}

// eventQuery reads a query strictly: a misspelt name must not look like an
// answer to what was asked.
func eventQuery(raw string) (EventQuery, error) {
	q := EventQuery{Limit: defaultEvents}
	values, err := url.ParseQuery(raw)
	if err != nil {
		return q, fmt.Errorf("the query is not well formed: %w", err)
	}
	for name, given := range values {
		if len(given) != 1 {
			return q, fmt.Errorf("%s is given %d times; give it once", name, len(given))
		}
		value := given[0]
		switch name {
		case "from", "to":
			at, err := time.Parse(time.RFC3339, value)
			if err != nil {
				return q, fmt.Errorf("%s=%q is not a time; write it as 2026-07-01T14:00:00Z", name, value)
			}
			if name == "from" {
				q.From = sensors.At(at)
			} else {
				q.To = sensors.At(at)
			}
		case "limit":
			q.Limit, err = strconv.Atoi(value)
			if err != nil || q.Limit < 1 || q.Limit > maxEvents {
				return q, fmt.Errorf("limit=%q is not a whole number from 1 to %d", value, maxEvents)
			}
		case "open":
			if value != "true" {
				return q, fmt.Errorf("open=%q: write open=true for the open ones, or leave it out", value)
			}
			q.Open = true
		case "runway":
			q.Runway = value
		case "operation", "kind", "cause":
			if !slices.Contains(choices(name), value) {
				return q, fmt.Errorf("%s=%q: choose %s", name, value, strings.Join(choices(name), ", "))
			}
			*map[string]*string{"operation": &q.Operation, "kind": &q.Kind, "cause": &q.Cause}[name] = value
		case "level":
			level, ok := alerting.LevelOf(value)
			if !ok {
				return q, fmt.Errorf("level=%q: choose noticeable, large or beyond-margin; higher ones count, too", value)
			}
			q.Level = level
		default:
			return q, fmt.Errorf("there is no parameter %q; there are from, to, limit, open, runway, operation, kind, level and cause", name)
		}
	}
	if q.From != 0 && q.To != 0 && q.From >= q.To {
		return q, errors.New("from must be before to")
	}
	return q, nil
}

// choices are the words that a parameter takes.
func choices(name string) []string {
	switch name {
	case "operation":
		return []string{"landing", "take-off"}
	case "kind":
		return []string{"headwind-loss", "headwind-gain", "wind-shift", "vertical-shear", "crosswind", "tailwind"}
	}
	return []string{"outflow", "gust-front", "unresolved"}
}

func (p *Page) event(w http.ResponseWriter, r *http.Request) {
	id := r.PathValue("id")
	issues, err := p.opts.History.Event(id)
	switch {
	case errors.Is(err, ErrNoEvent):
		p.problem(w, http.StatusNotFound, "no-event", "There is no event with this id.",
			"/api/v1/events lists the events that are kept.")
		return
	case err != nil:
		p.internal(w, "read an event", err)
		return
	}
	p.json(w, http.StatusOK, "application/json", struct {
		ID       string            `json:"id"`
		Issues   []json.RawMessage `json:"issues"`
		Exercise bool              `json:"exercise"`
		Notice   string            `json:"notice"`
	}{id, issues, p.exercise(p.opts.View()), alerting.Notice})
}

// health says that the process answers. A mast that is down is no reason to
// restart the program, so it does not show here.
func (p *Page) health(w http.ResponseWriter, _ *http.Request) {
	p.json(w, http.StatusOK, "application/json", p.readiness(nil))
}

type readiness struct {
	Ready    bool     `json:"ready"`
	Reasons  []string `json:"reasons"`
	Exercise bool     `json:"exercise"`
	Notice   string   `json:"notice"`
}

func (p *Page) readiness(reasons []string) readiness {
	if reasons == nil {
		reasons = []string{} // an empty list, not null
	}
	return readiness{len(reasons) == 0, reasons, p.exercise(p.opts.View()), alerting.Notice}
}

// ready says whether the program does its work, and why not.
func (p *Page) ready(w http.ResponseWriter, _ *http.Request) {
	reasons := append([]string(nil), p.opts.Ready()...)
	if v, why := p.current(); v == nil {
		reasons = append(reasons, why)
	}
	status := http.StatusOK
	if len(reasons) > 0 {
		status = http.StatusServiceUnavailable
	}
	p.json(w, status, "application/json", p.readiness(reasons))
}

// problem answers with an error as RFC 9457 has it. The type is a relative
// reference: the product has no place on the network of its own.
func (p *Page) problem(w http.ResponseWriter, status int, code, title, detail string) {
	p.json(w, status, "application/problem+json", struct {
		Type     string `json:"type"`
		Title    string `json:"title"`
		Status   int    `json:"status"`
		Detail   string `json:"detail"`
		Exercise bool   `json:"exercise"`
		Notice   string `json:"notice"`
	}{"/problems/" + code, title, status, detail, p.exercise(p.opts.View()), alerting.Notice})
}

// internal logs what went wrong here and tells the caller no more than that:
// the details are for the operator.
func (p *Page) internal(w http.ResponseWriter, attempt string, err error) {
	p.opts.Log.Error().Err(err).Str("attempt", attempt).Msg("the page could not answer")
	p.problem(w, http.StatusInternalServerError, "internal", "The program could not answer.",
		"The reason is in its log.")
}

func (p *Page) json(w http.ResponseWriter, status int, contentType string, body any) {
	data, err := json.Marshal(body)
	if err != nil {
		// Only a part that is not JSON, given to us as ready-made, comes here.
		p.opts.Log.Error().Err(err).Msg("the page could not write its answer")
		status, data = http.StatusInternalServerError, []byte(`{"type":"/problems/internal","status":500}`)
		contentType = "application/problem+json"
	}
	p.write(w, status, contentType, data)
}

// write sends an answer that is ready. The data is not changed: others may be
// sent the same.
func (p *Page) write(w http.ResponseWriter, status int, contentType string, data []byte) {
	w.Header().Set("Content-Type", contentType)
	w.WriteHeader(status)
	// An error here is a client that has gone; there is nobody left to tell.
	_, _ = w.Write(data)
	_, _ = w.Write([]byte{'\n'})
}
