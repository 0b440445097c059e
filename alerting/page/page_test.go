package page

import (
	"crypto/tls"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/http/httptest"
	"strings"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/testutil/promlint"
	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/page/access"
	"sockline/sensors"
)

// noon is the moment at which every test takes place.
var noon = time.Date(2026, 7, 1, 14, 15, 41, 0, time.UTC)

// events is a History in memory.
type events struct {
	asked EventQuery
	list  []Event
	known map[string][]json.RawMessage
	err   error
}

func (e *events) Events(q EventQuery) ([]Event, error) { e.asked = q; return e.list, e.err }

func (e *events) Event(id string) ([]json.RawMessage, error) {
	if e.err != nil {
		return nil, e.err
	}
	if issues, ok := e.known[id]; ok {
		return issues, nil
	}
	return nil, ErrNoEvent
}

// sample is a view with everything in it, made age before noon.
func sample(age time.Duration) *View {
	at := sensors.At(noon.Add(-age))
	return &View{
		Made: noon.Add(-age), At: at, ValidUntil: at + 5*sensors.Second,
		Condition: alerting.PartlyObserving,
		Remarks:   []string{"The history is not being recorded: the disk is full."},
		Ends: []End{
			{Runway: "07", Observed: true, Sentence: "From 240 degrees magnetic with 14 kt, gusting 21 kt; headwind 3 kt, crosswind 13 kt from the right."},
			{Runway: "25", Sentence: "Not observed."},
		},
		Paths: []Path{
			{"landing 07", alerting.Raised, "One alert is open.", []string{"5.0 to 4.0 km before the threshold"}, []byte(`{"runway":"07","state":"raised"}`)},
			{"take-off 07", alerting.BelowLimits, "Rises by about 6 kt, within limits.", []string{"4.0 to 5.0 km beyond the far end"}, []byte(`{"runway":"07","state":"below-limits"}`)},
			{"landing 25", alerting.NotObserved, "Two masts are silent.", []string{"5.0 to 0.6 km before the threshold"}, []byte(`{"runway":"25","state":"not-observed"}`)},
			{"take-off 25", alerting.BelowLimits, "Falls by about 4 kt, within limits.", nil, []byte(`{"runway":"25","state":"below-limits"}`)},
		},
		Alerts: []Alert{
			{"a1", alerting.HeadwindLoss, alerting.BeyondMargin, true, "The headwind falls by about 28 kt (22 to 34) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: more than the stall margin of the slowest aircraft here.", []byte(`{"id":"a1"}`)},
			{"a2", alerting.HeadwindGain, alerting.Noticeable, false, "The headwind rises by about 12 kt (9 to 15) after take-off from runway 25. Not observed now: last measured at 14:14:02 UTC.", []byte(`{"id":"a2"}`)},
		},
		Stations: []Station{
			{"touch07", "live", true, "0.4 s old", []byte(`{"id":"touch07"}`), nil},
			{"far07", "stale", false, "last heard 14:12:09 UTC", []byte(`{"id":"far07"}`), nil},
			{"final07", "live", true, "0.6 s old", []byte(`{"id":"final07"}`), nil},
		},
		StatusJSON: []byte(`{"condition":"partly-observing"}`),
	}
}

// serve makes a page over a view and a history.
func serve(t *testing.T, v *View, change func(*Options)) (*Page, *strings.Builder) {
	t.Helper()
	var log strings.Builder
	o := Options{
		Airfield: "Skerry Moor", Listen: "127.0.0.1:0", View: func() *View { return v }, Tape: NewTape("run-1"), History: &events{},
		Registry: prometheus.NewRegistry(), Now: func() time.Time { return noon }, Log: zerolog.New(&log),
	}
	if change != nil {
		change(&o)
	}
	p, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	return p, &log
}

func get(p *Page, target string) *http.Response {
	r := httptest.NewRequest(http.MethodGet, "http://127.0.0.1:7625"+target, nil)
	w := httptest.NewRecorder()
	p.ServeHTTP(w, r)
	return w.Result()
}

func text(t *testing.T, r *http.Response) string {
	t.Helper()
	b, err := io.ReadAll(r.Body)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// object reads an answer that must be a JSON object with the notice and the
// exercise flag in it.
func object(t *testing.T, r *http.Response) map[string]any {
	t.Helper()
	body := text(t, r)
	var m map[string]any
	if err := json.Unmarshal([]byte(body), &m); err != nil {
		t.Fatalf("not a JSON object: %v\n%s", err, body)
	}
	if m["notice"] != alerting.Notice {
		t.Errorf("the notice is missing in %s", body)
	}
	if _, ok := m["exercise"].(bool); !ok {
		t.Errorf("the exercise flag is missing in %s", body)
	}
	return m
}

func TestStations(t *testing.T) {
	p, _ := serve(t, sample(time.Second), nil)
	m := object(t, get(p, "/api/v1/stations"))
	for key, value := range map[string]string{
		"at": "2026-07-01T14:15:40Z", "valid_until": "2026-07-01T14:15:45Z",
		"stations": "[map[id:touch07] map[id:far07] map[id:final07]]", "exercise": "false",
	} {
		if got := fmt.Sprint(m[key]); got != value {
			t.Errorf("%s is %s, want %s", key, got, value)
		}
	}
	// What is too old is no information.
	p, _ = serve(t, sample(6*time.Second), nil)
	if r := get(p, "/api/v1/stations"); r.StatusCode != http.StatusServiceUnavailable {
		t.Errorf("an old view: answer %d", r.StatusCode)
	}
}

func TestNow(t *testing.T) {
	p, _ := serve(t, sample(time.Second), nil)
	r := get(p, "/api/v1/now")
	if r.StatusCode != http.StatusOK || r.Header.Get("Content-Type") != "application/json" {
		t.Fatalf("answer %d, %s", r.StatusCode, r.Header.Get("Content-Type"))
	}
	m := object(t, r)
	want := map[string]string{
		"at": "2026-07-01T14:15:40Z", "valid_until": "2026-07-01T14:15:45Z", "condition": "partly-observing",
		"status":   "map[condition:partly-observing]",
		"alerts":   "[map[id:a1] map[id:a2]]",
		"stations": "[map[id:touch07] map[id:far07] map[id:final07]]",
		"exercise": "false",
	}
	for key, value := range want {
		if got := fmt.Sprint(m[key]); got != value {
			t.Errorf("%s is %s, want %s", key, got, value)
		}
	}
	if n := len(m["paths"].([]any)); n != 4 {
		t.Errorf("%d paths, want 4", n)
	}
}

func TestEvents(t *testing.T) {
	at := func(s string) sensors.Instant {
		v, err := time.Parse(time.RFC3339, s)
		if err != nil {
			t.Fatal(err)
		}
		return sensors.At(v)
	}
	tests := []struct {
		query string
		want  EventQuery
		bad   string // phrase of the detail; empty if the query is good
	}{
		{"", EventQuery{Limit: 100}, ""},
		{"?limit=1000&open=true", EventQuery{Limit: 1000, Open: true}, ""},
		{"?from=2026-07-01T14:00:00Z&to=2026-07-01T16:00:00%2B01:00",
			EventQuery{From: at("2026-07-01T14:00:00Z"), To: at("2026-07-01T15:00:00Z"), Limit: 100}, ""},
		{"?limit=0", EventQuery{}, "from 1 to 1000"},
		{"?limit=1001", EventQuery{}, "from 1 to 1000"},
		{"?limit=ten", EventQuery{}, "whole number"},
		{"?limit=1&limit=2", EventQuery{}, "given 2 times"},
		{"?from=yesterday", EventQuery{}, "write it as 2026-07-01T14:00:00Z"},
		{"?from=2026-07-01T14:00:00Z&to=2026-07-01T14:00:00Z", EventQuery{}, "from must be before to"},
		{"?open=yes", EventQuery{}, "open=true"},
		{"?runway=07&operation=landing&kind=headwind-loss&cause=outflow&level=large", EventQuery{Limit: 100, Runway: "07", Operation: "landing",
			Kind: "headwind-loss", Cause: "outflow", Level: alerting.Large}, ""},
		{"?operation=approach", EventQuery{}, "choose landing, take-off"},
		{"?level=3", EventQuery{}, "choose noticeable"},
		{"?opened=true", EventQuery{}, `no parameter "opened"`},
		{"?a;b", EventQuery{}, "well formed"},
	}
	for _, tt := range tests {
		t.Run(tt.query, func(t *testing.T) {
			h := &events{list: []Event{{"e1", alerting.Large, []byte(`{"id":"e1"}`)}}}
			p, _ := serve(t, sample(0), func(o *Options) { o.History = h })
			r := get(p, "/api/v1/events"+tt.query)
			m := object(t, r)
			if tt.bad != "" {
				if r.StatusCode != 400 || !strings.Contains(fmt.Sprint(m["detail"]), tt.bad) {
					t.Errorf("answer %d, %v; want 400 with %q", r.StatusCode, m["detail"], tt.bad)
				}
				return
			}
			if r.StatusCode != 200 || h.asked != tt.want || fmt.Sprint(m["events"]) != "[map[id:e1]]" || fmt.Sprint(m["highest_level"]) != "map[e1:large]" {
				t.Errorf("answer %d, asked %+v, events %v; want 200, %+v", r.StatusCode, h.asked, m["events"], tt.want)
			}
		})
	}
}

func TestEventsOfAnEmptyHistory(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	if body := text(t, get(p, "/api/v1/events")); !strings.Contains(body, `"events":[]`) {
		t.Errorf("no events is %s, want an empty list", body)
	}
}

func TestEvent(t *testing.T) {
	id := "skerrymoor-20260701T141503Z-07-landing-headwind-loss"
	h := &events{known: map[string][]json.RawMessage{id: {json.RawMessage(`{"revision":1}`), json.RawMessage(`{"revision":2}`)}}}
	p, log := serve(t, sample(0), func(o *Options) { o.History = h })
	m := object(t, get(p, "/api/v1/events/"+id))
	if m["id"] != id || fmt.Sprint(m["issues"]) != "[map[revision:1] map[revision:2]]" {
		t.Errorf("event %v", m)
	}
	if r := get(p, "/api/v1/events/other"); r.StatusCode != 404 {
		t.Errorf("an unknown event answers %d, want 404", r.StatusCode)
	}
	h.err = errors.New("secret place on the disk")
	for _, address := range []string{"/api/v1/events/" + id, "/api/v1/events"} {
		r := get(p, address)
		if body := text(t, r); r.StatusCode != 500 || strings.Contains(body, "secret") {
			t.Errorf("%s of a broken history answers %d: %s", address, r.StatusCode, body)
		}
	}
	if n := strings.Count(log.String(), "secret place"); n != 2 {
		t.Errorf("the operator is told of %d errors, want 2", n)
	}
}

// TestProblems: every error is a problem object as RFC 9457 has it.
func TestProblems(t *testing.T) {
	tests := []struct {
		method, target, host string
		status               int
		kind                 string
	}{
		{"GET", "/nowhere", "127.0.0.1:7625", 404, "/problems/not-found"},
		{"GET", "/api/v1/events/x", "localhost", 404, "/problems/no-event"},
		{"GET", "/api/v1/events?x=1", "[::1]:7625", 400, "/problems/bad-query"},
		{"POST", "/api/v1/events", "127.0.0.1", 405, "/problems/no-such-deed"},
		{"DELETE", "/", "127.0.0.1", 405, "/problems/no-such-deed"},
		{"POST", "/api/v1/sheets", "127.0.0.1", 403, "/problems/read-only"},
		{"POST", "/login", "127.0.0.1", 403, "/problems/read-only"},
		{"GET", "/", "elsewhere.example", 421, "/problems/foreign-host"},
		{"GET", "/", "127.0.0.1.elsewhere.example:7625", 421, "/problems/foreign-host"},
		{"GET", "/", "10.0.0.1", 421, "/problems/foreign-host"},
	}
	for _, tt := range tests {
		t.Run(tt.method+" "+tt.target+" "+tt.host, func(t *testing.T) {
			p, _ := serve(t, sample(0), nil)
			r := httptest.NewRequest(tt.method, tt.target, nil)
			r.Host = tt.host
			w := httptest.NewRecorder()
			p.ServeHTTP(w, r)
			m := object(t, w.Result())
			if w.Code != tt.status || m["type"] != tt.kind || m["status"] != float64(tt.status) ||
				m["title"] == "" || m["detail"] == "" || w.Header().Get("Content-Type") != "application/problem+json" {
				t.Errorf("answer %d %v, want %d %s", w.Code, m, tt.status, tt.kind)
			}
		})
	}
}

func TestEveryAnswerIsGuarded(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	for _, address := range []string{"/", "/past", "/past/x", "/masts", "/basis", "/handover", "/api/v1/now", "/api/v1/stations", "/api/v1/events", "/api/v1/events/x", "/metrics", "/healthz", "/readyz", "/no"} {
		h := get(p, address).Header
		csp := h.Get("Content-Security-Policy")
		if !strings.HasPrefix(csp, "default-src 'none'; script-src 'self'; style-src 'self';") || strings.Contains(csp, "unsafe") ||
			h.Get("X-Content-Type-Options") != "nosniff" || h.Get("Cache-Control") != "no-store" {
			t.Errorf("%s is answered with %v", address, h)
		}
	}
}

func TestHealthAndReadiness(t *testing.T) {
	p, _ := serve(t, sample(0), func(o *Options) { o.Ready = func() []string { return []string{"no broker yet"} } })
	if r := get(p, "/healthz"); r.StatusCode != 200 {
		t.Errorf("healthz answers %d, want 200 while the process lives", r.StatusCode)
	}
	r := get(p, "/readyz")
	m := object(t, r)
	if r.StatusCode != 503 || m["ready"] != false || fmt.Sprint(m["reasons"]) != "[no broker yet]" {
		t.Errorf("readyz answers %d, %v", r.StatusCode, m)
	}
}

func TestMetrics(t *testing.T) {
	p, _ := serve(t, sample(0), func(o *Options) {
		c := prometheus.NewCounter(prometheus.CounterOpts{Name: "sockline_readings_total", Help: "Readings taken."})
		c.Add(3)
		o.Registry.MustRegister(c)
	})
	body := text(t, get(p, "/metrics"))
	if !strings.Contains(body, "\nsockline_readings_total 3\n") {
		t.Errorf("metrics:\n%s", body)
	}
	if problems, err := promlint.New(strings.NewReader(body)).Lint(); err != nil || len(problems) > 0 {
		t.Errorf("lint: %v, %v", problems, err)
	}
}

func TestWhereThePageMayBeServed(t *testing.T) {
	users := gateOf(t, map[string]access.Role{"keeper": access.Tower})
	nobody := gateOf(t, nil)
	for _, tt := range []struct {
		address string
		tls     bool
		gate    *access.Gate
		mend    string // phrase of the refusal; empty if it may be
	}{
		{"127.0.0.1:7625", false, nil, ""}, {"127.9.9.9:0", false, nil, ""}, {"[::1]:7625", false, nil, ""}, {"localhost:7625", false, users, ""},
		{":7625", false, nil, "not encrypted"}, {"0.0.0.0:7625", false, users, "name cert_file"}, {"[::]:7625", true, nil, "name a users_file"},
		{"10.1.2.3:7625", true, nobody, "add users"}, {"10.1.2.3:7625", true, users, ""}, {"tower.example:7625", false, users, "not encrypted"},
		{"127.0.0.1.example:7625", false, nil, "not encrypted"}, {"127.0.0.1", false, nil, "use 127.0.0.1:7625"}, {"", true, users, "use 127.0.0.1:7625"},
	} {
		t.Run(fmt.Sprint(tt.address, tt.tls, tt.gate != nil), func(t *testing.T) {
			o := Options{Gate: tt.gate, Now: func() time.Time { return noon }}
			if tt.tls {
				o.TLS = &tls.Config{}
			}
			err := o.checkListen(tt.address)
			if (err == nil) != (tt.mend == "") || err != nil && !strings.Contains(err.Error(), tt.mend) {
				t.Errorf("%v, want %q", err, tt.mend)
			}
			if _, err := New(Options{Listen: tt.address, Now: o.Now}); err == nil {
				t.Error("New accepts options without anything to serve")
			}
		})
	}
}
