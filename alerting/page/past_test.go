package page

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"strings"
	"testing"

	"sockline/sensors"
)

// worked is a Review that answers with what it was asked for.
type worked struct {
	err   error // instead of an answer; after a first piece where late is set
	late  bool
	piece int // bytes
}

func (w *worked) say(out io.Writer, what, id string) error {
	if w.err != nil && !w.late {
		return w.err
	}
	if _, err := io.WriteString(out, what+" of "+id+strings.Repeat(".", w.piece)); err != nil {
		return err
	}
	return w.err
}

func (w *worked) Report(_ context.Context, out io.Writer, id string) error {
	return w.say(out, "report", id)
}
func (w *worked) CSV(_ context.Context, out io.Writer, id string) error {
	return w.say(out, "table", id)
}
func (w *worked) Bundle(_ context.Context, out io.Writer, id string) error {
	return w.say(out, "bundle", id)
}
func (w *worked) Playback(_ context.Context, id string) (json.RawMessage, error) {
	return fmt.Appendf(nil, `{"event":%q,"steps":[]}`, id), w.err
}
func (w *worked) Statistics(_ context.Context, from, to sensors.Instant) (json.RawMessage, error) {
	return fmt.Appendf(nil, `{"from":%d,"to":%d}`, from, to), w.err
}
func (w *worked) WhatIf(context.Context) (json.RawMessage, error) {
	return json.RawMessage(`{}`), w.err
}

func TestLists(t *testing.T) {
	g := guard(t)
	for path, key := range map[string]string{
		"pilot-reports": "pilot_reports", "sheets": "sheets", "holds": "holds", "notes": "notes", "acknowledgements": "acknowledgements",
		"shelvings": "shelvings", "runway-in-use": "runway_in_use", "accesses": "accesses",
	} {
		r := g.ask(request{method: "GET", path: "/api/v1/" + path + "?from=2026-07-01T14:00:00Z", name: "chief"})
		m := object(t, r)
		list, _ := m[key].([]any)
		if r.StatusCode != 200 || len(list) != 1 || fmt.Sprint(list[0]) != fmt.Sprintf("map[from:1.7829144e+12 kind:%s to:0]", path) {
			t.Errorf("%s: answer %d %v", path, r.StatusCode, m)
		}
		for _, query := range []string{"?from=x", "?limit=3", "?from=2026-07-01T14:00:00Z&to=2026-07-01T14:00:00Z", "?from=a&from=b", "?%zz"} {
			if r := g.ask(request{method: "GET", path: "/api/v1/" + path + query, name: "chief"}); r.StatusCode != 400 {
				t.Errorf("%s%s: answer %d", path, query, r.StatusCode)
			}
		}
	}
	// Who came in is for administrators, here as elsewhere.
	for name, want := range map[string]int{"": 401, "guest": 403, "safety": 403, "chief": 200} {
		if r := g.ask(request{method: "GET", path: "/api/v1/accesses", name: name}); r.StatusCode != want {
			t.Errorf("accesses for %q: answer %d, want %d", name, r.StatusCode, want)
		}
	}
	if m := object(t, g.ask(request{method: "GET", path: "/api/v1/events/e1/notes"})); fmt.Sprint(m["notes"]) != "[map[kind:note]]" {
		t.Errorf("about an event: %v", m)
	}
	if r := g.ask(request{method: "GET", path: "/api/v1/events/e2/notes"}); r.StatusCode != 404 {
		t.Errorf("about an unknown event: answer %d", r.StatusCode)
	}
	g.deeds.err = ErrNotKept
	if r := g.ask(request{method: "GET", path: "/api/v1/notes"}); r.StatusCode != 503 {
		t.Errorf("without a history: answer %d", r.StatusCode)
	}
	p, _ := serve(t, sample(0), nil)
	for _, path := range []string{"/api/v1/notes", "/api/v1/events/e1/notes"} {
		if r := get(p, path); r.StatusCode != 503 {
			t.Errorf("%s without anybody who keeps it: answer %d", path, r.StatusCode)
		}
	}
}

// working is guard with a Review.
func working(t *testing.T, w *worked) *guarded {
	t.Helper()
	g := guard(t)
	g.opts.Review = w
	return g
}

func TestDownloads(t *testing.T) {
	for path, want := range map[string]string{"report": "text/html; charset=utf-8", "csv": "text/csv; charset=utf-8", "bundle": "application/zip"} {
		g := working(t, &worked{})
		r := g.ask(request{method: "GET", path: "/api/v1/events/e%2f..%22/" + path, name: "safety"})
		if body := text(t, r); r.StatusCode != 200 || r.Header.Get("Content-Type") != want || !strings.HasSuffix(body, ` of e/.."`) ||
			!strings.HasPrefix(r.Header.Get("Content-Disposition"), `attachment; filename="e-----.`[:23]) || !strings.Contains(r.Header.Get("Content-Security-Policy"), "sandbox") {
			t.Errorf("%s: answer %d %v %q", path, r.StatusCode, r.Header, body)
		}
		for name, want := range map[string]int{"": 401, "guest": 403, "keeper": 403, "chief": 200} {
			if r := g.ask(request{method: "GET", path: "/api/v1/events/e1/" + path, name: name}); r.StatusCode != want {
				t.Errorf("%s for %q: answer %d, want %d", path, name, r.StatusCode, want)
			}
		}
	}
	// Where nobody can log in, this machine reads everything.
	p, _ := serve(t, sample(0), func(o *Options) { o.Review = &worked{piece: 3 * sendBuffer} })
	if r := get(p, "/api/v1/events/e1/csv"); r.StatusCode != 200 || len(text(t, r)) < 3*sendBuffer {
		t.Errorf("without users: answer %d", r.StatusCode)
	}
}

// TestWhatCannotBeWorkedOut: each reason has its answer, also when some of a
// file had been made; half a file is never taken for a whole one.
func TestWhatCannotBeWorkedOut(t *testing.T) {
	for _, tt := range []struct {
		err    error
		status int
	}{
		{ErrNoEvent, 404}, {fmt.Errorf("%w: no readings", ErrNothing), 404}, {ErrNotKept, 503}, {context.DeadlineExceeded, 503}, {errors.New("secret place"), 500},
	} {
		for _, late := range []bool{false, true} {
			g := working(t, &worked{err: tt.err, late: late})
			for _, path := range []string{"events/e1/report", "events/e1/csv", "events/e1/bundle", "events/e1/playback", "statistics", "what-if"} {
				r := g.ask(request{method: "GET", path: "/api/v1/" + path, name: "safety"})
				if m := object(t, r); r.StatusCode != tt.status || strings.Contains(fmt.Sprint(m), "secret") || r.Header.Get("Content-Disposition") != "" {
					t.Errorf("%s with %v: answer %d %v, want %d", path, tt.err, r.StatusCode, m, tt.status)
				}
			}
		}
	}
	g := working(t, &worked{err: errors.New("broken"), late: true, piece: 2 * sendBuffer})
	func() {
		defer func() {
			if recover() != http.ErrAbortHandler {
				t.Error("half a file looks like a whole one")
			}
		}()
		g.ask(request{method: "GET", path: "/api/v1/events/e1/csv", name: "safety"})
	}()
	p, _ := serve(t, sample(0), nil)
	if r := get(p, "/api/v1/statistics"); r.StatusCode != 503 {
		t.Errorf("without a review: answer %d", r.StatusCode)
	}
}

func TestStatisticsAndPlayback(t *testing.T) {
	g := working(t, &worked{})
	if body := text(t, g.ask(request{method: "GET", path: "/api/v1/statistics?from=1970-01-01T00:00:01Z&to=1970-01-01T00:00:02Z"})); body != "{\"from\":1000,\"to\":2000}\n" {
		t.Errorf("statistics: %s", body)
	}
	if r := g.ask(request{method: "GET", path: "/api/v1/statistics?form=x"}); r.StatusCode != 400 {
		t.Errorf("a misspelt query: answer %d", r.StatusCode)
	}
	if body := text(t, g.ask(request{method: "GET", path: "/api/v1/events/e1/playback"})); body != "{\"event\":\"e1\",\"steps\":[]}\n" {
		t.Errorf("playback: %s", body)
	}
}

func TestBasis(t *testing.T) {
	p, _ := serve(t, sample(0), func(o *Options) {
		o.Basis = func() Basis { return Basis{Version: "1.2.3", Configuration: "[airfield]", Method: []string{"m"}} }
	})
	m := object(t, get(p, "/api/v1/basis"))
	if m["version"] != "1.2.3" || m["configuration"] != "[airfield]" || fmt.Sprint(m["method"]) != "[m]" {
		t.Errorf("%v", m)
	}
	p, _ = serve(t, sample(0), nil)
	if r := get(p, "/api/v1/basis"); r.StatusCode != 503 {
		t.Errorf("without one: answer %d", r.StatusCode)
	}
}

func TestStationsWithWhatIsRemembered(t *testing.T) {
	v := sample(0)
	v.Stations[0].More = []byte(`"gaps":[],"rejected_payload":"<b>"`)
	p, _ := serve(t, v, nil)
	m := object(t, get(p, "/api/v1/stations"))
	first := m["stations"].([]any)[0].(map[string]any)
	if first["id"] != "touch07" || first["gaps_until"] != "2026-07-01T14:15:41Z" || first["rejected_payload"] != "<b>" || len(first["gaps"].([]any)) != 0 {
		t.Errorf("%v", first)
	}
	if now := text(t, get(p, "/api/v1/now")); strings.Contains(now, "rejected_payload") {
		t.Error("every step tells what only a technician asks for")
	}
}
