package page

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/page/access"
	"sockline/sensors"
)

// Review is what is worked out from the history when somebody asks: reports,
// exports and figures. Its methods are called from many goroutines, though not
// more than one at a time. They return ErrNoEvent for an id that is not known,
// and ErrNothing where there is nothing to tell.
type Review interface {
	Report(ctx context.Context, w io.Writer, event string) error // HTML
	CSV(ctx context.Context, w io.Writer, event string) error
	Bundle(ctx context.Context, w io.Writer, event string) error // a ZIP archive
	// Playback is the wind of every second round an event, as an object with
	// steps and a layout.
	Playback(ctx context.Context, event string) (json.RawMessage, error)
	// Statistics of [from, to); a zero end is open.
	Statistics(ctx context.Context, from, to sensors.Instant) (json.RawMessage, error)
	WhatIf(ctx context.Context) (json.RawMessage, error)
}

// ErrNothing is what Review returns where there is nothing to tell; its text
// says why.
var ErrNothing = errors.New("there is nothing to tell")

// pastRoutes is every address that looks back.
func (p *Page) pastRoutes(mux *http.ServeMux) {
	mux.HandleFunc("GET /api/v1/events", p.events)
	mux.HandleFunc("GET /api/v1/events/{id}", p.event)
	mux.HandleFunc("GET /api/v1/events/{id}/notes", p.about)
	for path, list := range map[string]struct {
		kind Deed
		key  string
		role access.Role
	}{
		"/api/v1/pilot-reports":    {PilotReports, "pilot_reports", access.Viewer},
		"/api/v1/sheets":           {Sheets, "sheets", access.Viewer},
		"/api/v1/holds":            {Holds, "holds", access.Viewer},
		"/api/v1/notes":            {Notes, "notes", access.Viewer},
		"/api/v1/acknowledgements": {Acknowledgements, "acknowledgements", access.Viewer},
		"/api/v1/shelvings":        {Shelvings, "shelvings", access.Viewer},
		"/api/v1/runway-in-use":    {RunwaysInUse, "runway_in_use", access.Viewer},
		"/api/v1/accesses":         {Accesses, "accesses", access.Administrator},
	} {
		mux.HandleFunc("GET "+path, p.list(list.kind, list.key, list.role))
	}
	mux.HandleFunc("GET /api/v1/occurrences", p.occurrences)
	mux.HandleFunc("GET /api/v1/events/{id}/playback", p.worked(func(ctx context.Context, r *http.Request) (json.RawMessage, error) {
		return p.opts.Review.Playback(ctx, r.PathValue("id"))
	}))
	mux.HandleFunc("GET /api/v1/statistics", p.worked(func(ctx context.Context, r *http.Request) (json.RawMessage, error) {
		from, to, err := spanQuery(r.URL.RawQuery)
		if err != nil {
			return nil, badQuery{err}
		}
		return p.opts.Review.Statistics(ctx, from, to)
	}))
	mux.HandleFunc("GET /api/v1/what-if", p.worked(func(ctx context.Context, _ *http.Request) (json.RawMessage, error) {
		return p.opts.Review.WhatIf(ctx)
	}))
	mux.HandleFunc("GET /api/v1/events/{id}/report", p.download("text/html; charset=utf-8", "html", func(ctx context.Context, w io.Writer, id string) error {
		return p.opts.Review.Report(ctx, w, id)
	}))
	mux.HandleFunc("GET /api/v1/events/{id}/csv", p.download("text/csv; charset=utf-8", "csv", func(ctx context.Context, w io.Writer, id string) error {
		return p.opts.Review.CSV(ctx, w, id)
	}))
	mux.HandleFunc("GET /api/v1/events/{id}/bundle", p.download("application/zip", "zip", func(ctx context.Context, w io.Writer, id string) error {
		return p.opts.Review.Bundle(ctx, w, id)
	}))
}

// badQuery is a query that cannot be understood.
type badQuery struct{ error }

// spanQuery reads from and to, and nothing else.
func spanQuery(raw string) (from, to sensors.Instant, err error) {
	values, err := url.ParseQuery(raw)
	if err != nil {
		return 0, 0, fmt.Errorf("the query is not well formed: %w", err)
	}
	for name, given := range values {
		if name != "from" && name != "to" {
			return 0, 0, fmt.Errorf("there is no parameter %q; there are from and to", name)
		}
		if len(given) != 1 {
			return 0, 0, fmt.Errorf("%s is given %d times; give it once", name, len(given))
		}
		at, err := time.Parse(time.RFC3339, given[0])
		if err != nil {
			return 0, 0, fmt.Errorf("%s=%q is not a time; write it as 2026-07-01T14:00:00Z", name, given[0])
		}
		if name == "from" {
			from = sensors.At(at)
		} else {
			to = sensors.At(at)
		}
	}
	if from != 0 && to != 0 && from >= to {
		return 0, 0, errors.New("from must be before to")
	}
	return from, to, nil
}

// list makes the handler of a list of what people did. What only some may see
// is for them alone; where nobody can log in, that is nobody.
func (p *Page) list(kind Deed, key string, role access.Role) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		if role > access.Viewer && !p.isAtLeast(w, r, role) {
			return
		}
		from, to, err := spanQuery(r.URL.RawQuery)
		if err != nil {
			p.problem(w, http.StatusBadRequest, "bad-query", "The query cannot be understood.", err.Error())
			return
		}
		if p.opts.People == nil {
			p.refuseToRead(w, ErrNotKept)
			return
		}
		list, err := p.opts.People.List(kind, from, to)
		if err != nil {
			p.refuseToRead(w, err)
			return
		}
		p.listed(w, key, list)
	}
}

// about answers with what people did about an event.
func (p *Page) about(w http.ResponseWriter, r *http.Request) {
	if p.opts.People == nil {
		p.refuseToRead(w, ErrNotKept)
		return
	}
	list, err := p.opts.People.About(r.PathValue("id"))
	if err != nil {
		p.refuseToRead(w, err)
		return
	}
	p.listed(w, "notes", list)
}

// listed answers with a list under its name.
func (p *Page) listed(w http.ResponseWriter, key string, list []json.RawMessage) {
	p.json(w, http.StatusOK, "application/json", map[string]any{
		key: listed(list), "exercise": p.exercise(p.opts.View()), "notice": alerting.Notice,
	})
}

// refuseToRead answers with why a list cannot be given.
func (p *Page) refuseToRead(w http.ResponseWriter, err error) {
	if errors.Is(err, ErrNotKept) {
		p.problem(w, http.StatusServiceUnavailable, "not-kept", "The history cannot be read now.", "The status says why.")
		return
	}
	p.refuse(w, err)
}

// occurrences answers with those on show.
func (p *Page) occurrences(w http.ResponseWriter, _ *http.Request) {
	v := p.currentOrProblem(w)
	if v == nil {
		return
	}
	p.json(w, http.StatusOK, "application/json", struct {
		Occurrences []Occurrence `json:"occurrences"`
		marks
	}{listed(v.Occurrences), marks{p.exercise(v), alerting.Notice}})
}

// isAtLeast tells whether whoever asks has a role; else it has answered. Where
// there are no users, nobody has one.
func (p *Page) isAtLeast(w http.ResponseWriter, r *http.Request, role access.Role) bool {
	v := p.who(r)
	switch {
	case v.Role >= role:
		return true
	case v.Role == access.Nobody:
		p.logInNeeded(w)
	default:
		p.problem(w, http.StatusForbidden, "role", "Your role does not show that.",
			"You are logged in as "+v.Role.String()+"; this needs "+role.String()+".")
	}
	return false
}

// atWork takes the one place there is for what costs a core for seconds; else
// it has answered.
func (p *Page) atWork(w http.ResponseWriter, r *http.Request) (done func(), ok bool) {
	if p.opts.Review == nil {
		p.problem(w, http.StatusServiceUnavailable, "not-there", "This is not available here.", "This program runs without what works it out.")
		return nil, false
	}
	wait := time.NewTimer(workWait)
	defer wait.Stop()
	select {
	case p.work <- struct{}{}:
		return func() { <-p.work }, true
	case <-wait.C:
		w.Header().Set("Retry-After", "10")
		p.problem(w, http.StatusServiceUnavailable, "busy", "Somebody else is being answered.", "One such question is worked out at a time; ask again.")
	case <-r.Context().Done():
	case <-p.ending:
	}
	return nil, false
}

const (
	// workWait is how long somebody waits for the place.
	workWait = 10 * time.Second
	// workWithin bounds what is worked out for somebody.
	workWithin = 2 * time.Minute
)

// bounded ends with the request, with the server, and after workWithin.
func (p *Page) bounded(r *http.Request) (context.Context, context.CancelFunc) {
	ctx, cancel := context.WithTimeout(r.Context(), workWithin)
	go func() {
		select {
		case <-p.ending:
			cancel()
		case <-ctx.Done():
		}
	}()
	return ctx, cancel
}

// worked makes the handler of an object that takes a while.
func (p *Page) worked(do func(ctx context.Context, r *http.Request) (json.RawMessage, error)) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		done, ok := p.atWork(w, r)
		if !ok {
			return
		}
		defer done()
		newReader(w, r) // the limits of an ordinary request are too short
		ctx, cancel := p.bounded(r)
		defer cancel()
		object, err := do(ctx, r)
		if err != nil {
			p.notWorked(w, err)
			return
		}
		p.write(w, http.StatusOK, "application/json", object)
	}
}

// notWorked answers with why there is nothing to give.
func (p *Page) notWorked(w http.ResponseWriter, err error) {
	var query badQuery
	switch {
	case errors.As(err, &query):
		p.problem(w, http.StatusBadRequest, "bad-query", "The query cannot be understood.", query.Error())
	case errors.Is(err, ErrNothing):
		p.problem(w, http.StatusNotFound, "nothing", "There is nothing to tell.", sentenceOf(err))
	case errors.Is(err, context.DeadlineExceeded), errors.Is(err, context.Canceled):
		p.problem(w, http.StatusServiceUnavailable, "too-long", "It took too long.", "Ask for a shorter time.")
	default:
		p.refuseToRead(w, err)
	}
}

// download makes the handler of a file, which is sent as it is made. Where
// there are users, exports are for officers.
func (p *Page) download(contentType, suffix string, do func(ctx context.Context, w io.Writer, id string) error) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		if p.opts.Gate != nil && !p.isAtLeast(w, r, access.Officer) {
			return
		}
		done, ok := p.atWork(w, r)
		if !ok {
			return
		}
		defer done()
		ctx, cancel := p.bounded(r)
		defer cancel()
		id := r.PathValue("id")
		out := &file{to: newReader(w, r)}
		out.begin = func() {
			h := w.Header()
			h.Set("Content-Type", contentType)
			h.Set("Content-Disposition", `attachment; filename="`+safeName(id)+"."+suffix+`"`)
			h.Set("Content-Security-Policy", "default-src 'none'; style-src 'unsafe-inline'; img-src data:; sandbox")
		}
		err := do(ctx, out, id)
		if err == nil {
			err = out.flush()
		}
		switch {
		case err != nil && !out.begun:
			p.notWorked(w, err)
		case err != nil:
			// Half a file must not look like a whole one.
			p.opts.Log.Error().Err(err).Str("event", id).Msg("a download was broken off")
			panic(http.ErrAbortHandler)
		}
	}
}

// file is a download on its way. Until its first piece goes out, the answer may
// still become a problem.
type file struct {
	to    *reader
	begin func()
	begun bool
}

// Write sends a piece; somebody who does not read is cut.
func (f *file) Write(b []byte) (int, error) {
	f.to.buf.Write(b)
	if f.to.buf.Len() < sendBuffer {
		return len(b), nil
	}
	return len(b), f.flush()
}

func (f *file) flush() error {
	if !f.begun {
		f.begun = true
		f.begin()
	}
	if !f.to.send() {
		return errors.New("the reader has gone")
	}
	return nil
}

// safeName is an id as the name of a file.
func safeName(id string) string {
	name := strings.Map(func(r rune) rune {
		if r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || r == '-' || r == '_' {
			return r
		}
		return '-'
	}, id)
	return name[:min(len(name), 120)]
}
