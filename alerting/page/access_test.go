package page

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"maps"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"

	"sockline/alerting/attention"
	"sockline/alerting/page/access"
	"sockline/sensors"
)

const password = "gannet over the moor"

// gateOf is a gate for some users with the password above.
func gateOf(t *testing.T, roles map[string]access.Role) *access.Gate {
	t.Helper()
	var users []access.User
	for _, name := range slices.Sorted(maps.Keys(roles)) {
		u, err := access.New(name, roles[name], password)
		if err != nil {
			t.Fatal(err)
		}
		users = append(users, u)
	}
	path := filepath.Join(t.TempDir(), "users")
	if err := access.Write(path, users); err != nil {
		t.Fatal(err)
	}
	g, err := access.NewGate(path)
	if err != nil {
		t.Fatal(err)
	}
	return g
}

// deeds is a People that notes what it is asked for.
type deeds struct {
	did     []string
	audited []Access
	err     error
}

func (d *deeds) do(format string, args ...any) (Done, error) {
	if d.err != nil {
		return Done{}, d.err
	}
	d.did = append(d.did, fmt.Sprintf(format, args...))
	return Done{ID: "made-1", At: sensors.At(noon), Recorded: true}, nil
}

func (d *deeds) Acknowledge(_ context.Context, who, id string) (Done, error) {
	return d.do("%s acknowledges %s", who, id)
}
func (d *deeds) AcknowledgeEvent(_ context.Context, who, id string) (Done, error) {
	return d.do("%s acknowledges the event %s", who, id)
}
func (d *deeds) Shelve(_ context.Context, who, id, reason string, until sensors.Instant) (Done, error) {
	return d.do("%s shelves %s until %d: %s", who, id, until, reason)
}
func (d *deeds) Unshelve(_ context.Context, who, id string) (Done, error) {
	return d.do("%s unshelves %s", who, id)
}
func (d *deeds) UseRunway(_ context.Context, who, runway string) (Done, error) {
	return d.do("%s uses %s", who, runway)
}
func (d *deeds) Note(_ context.Context, who, event, text string) (Done, error) {
	return d.do("%s notes of %s: %s", who, event, text)
}
func (d *deeds) Report(_ context.Context, who string, r PilotReport) (Done, error) {
	return d.do("%s reports %s %s %s %.1f", who, r.Operation, r.Runway, r.Felt, r.Amount)
}
func (d *deeds) Hold(_ context.Context, who string, h Hold) (Done, error) {
	return d.do("%s holds %s%d-%d: %s", who, h.Event, h.From, h.To, h.Reason)
}
func (d *deeds) ReleaseHold(_ context.Context, who, id, reason string) (Done, error) {
	return d.do("%s releases %s: %s", who, id, reason)
}
func (d *deeds) Sign(_ context.Context, who, what, text string) (Done, error) {
	return d.do("%s signs %s: %s", who, what, text)
}
func (d *deeds) List(kind Deed, from, to sensors.Instant) ([]json.RawMessage, error) {
	return []json.RawMessage{fmt.Appendf(nil, `{"kind":%q,"from":%d,"to":%d}`, kind, from, to)}, d.err
}
func (d *deeds) About(event string) ([]json.RawMessage, error) {
	if event != "e1" {
		return nil, ErrNoEvent
	}
	return []json.RawMessage{json.RawMessage(`{"kind":"note"}`)}, nil
}
func (d *deeds) Audit(a Access) { d.audited = append(d.audited, a) }

// guarded is a page with users, and a session for each of them.
type guarded struct {
	*Page
	deeds    *deeds
	sessions map[string]access.Visitor
	keys     map[string]string
}

// userRoles are the users of these tests.
func userRoles() map[string]access.Role {
	return map[string]access.Role{"guest": access.Viewer, "keeper": access.Tower, "safety": access.Officer, "chief": access.Administrator}
}

// loggedIn is a gate with a session for each user.
type loggedIn struct {
	gate     *access.Gate
	sessions map[string]access.Visitor
	keys     map[string]string
}

// shared is one for all tests that neither log in nor out: passwords are made
// to be slow.
var shared = sync.OnceValue(func() *loggedIn {
	dir, err := os.MkdirTemp("", "users")
	if err != nil {
		panic(err)
	}
	defer os.RemoveAll(dir)
	l, err := logEverybodyIn(filepath.Join(dir, "users"))
	if err != nil {
		panic(err)
	}
	return l
})

func logEverybodyIn(path string) (*loggedIn, error) {
	var users []access.User
	for name, role := range userRoles() {
		u, err := access.New(name, role, password)
		if err != nil {
			return nil, err
		}
		users = append(users, u)
	}
	if err := access.Write(path, users); err != nil {
		return nil, err
	}
	gate, err := access.NewGate(path)
	if err != nil {
		return nil, err
	}
	l := &loggedIn{gate, map[string]access.Visitor{}, map[string]string{}}
	for name := range userRoles() {
		if l.keys[name], l.sessions[name], err = gate.LogIn(context.Background(), name, password, "192.0.2.1", noon); err != nil {
			return nil, err
		}
	}
	return l, nil
}

func guard(t *testing.T) *guarded {
	t.Helper()
	return guardWith(t, shared())
}

func guardWith(t *testing.T, l *loggedIn) *guarded {
	t.Helper()
	g := &guarded{deeds: &deeds{}, sessions: l.sessions, keys: l.keys}
	g.Page, _ = serve(t, sample(0), func(o *Options) { o.Gate, o.People = l.gate, g.deeds })
	return g
}

// guardAlone is guard for a test that logs in.
func guardAlone(t *testing.T) *guarded {
	t.Helper()
	l, err := logEverybodyIn(filepath.Join(t.TempDir(), "users"))
	if err != nil {
		t.Fatal(err)
	}
	return guardWith(t, l)
}

// request is one request in a matrix.
type request struct {
	method, path, body, name string
	header                   map[string]string
	from                     string // address; this machine if empty
}

func (g *guarded) ask(q request) *http.Response {
	r := httptest.NewRequest(q.method, "http://127.0.0.1:7625"+q.path, strings.NewReader(q.body))
	r.RemoteAddr = "127.0.0.1:40000"
	if q.from != "" {
		r.RemoteAddr = q.from + ":40000"
	}
	if q.name != "" {
		r.AddCookie(&http.Cookie{Name: cookiePlain, Value: g.keys[q.name]})
		r.Header.Set(tokenHeader, g.sessions[q.name].Token)
	}
	if q.body != "" {
		r.Header.Set("Content-Type", "application/json")
	}
	for k, v := range q.header {
		r.Header.Set(k, v)
		if v == "" {
			r.Header.Del(k)
		}
	}
	w := httptest.NewRecorder()
	g.ServeHTTP(w, r)
	return w.Result()
}

// everyDeed is what can be done, with the least role that may.
func everyDeed() map[string]struct {
	body string
	role access.Role
	did  string
} {
	type deed = struct {
		body string
		role access.Role
		did  string
	}
	return map[string]deed{
		"/api/v1/occurrences/o1/acknowledge": {`{}`, access.Tower, "acknowledges o1"},
		"/api/v1/events/e1/acknowledge":      {`{}`, access.Tower, "acknowledges the event e1"},
		"/api/v1/occurrences/o1/shelve":      {`{"reason":"mowing"}`, access.Tower, "shelves o1 until 0: mowing"},
		"/api/v1/occurrences/o1/unshelve":    {`{}`, access.Tower, "unshelves o1"},
		"/api/v1/runway-in-use":              {`{"runway":"07"}`, access.Tower, "uses 07"},
		"/api/v1/pilot-reports": {`{"at":"2026-07-01T14:00:00Z","runway":"07","operation":"landing","felt":"loss","amount_kt":20}`,
			access.Tower, "reports landing 07 loss 10.3"},
		"/api/v1/sheets":          {`{"what":"daily","text":"all masts move"}`, access.Tower, "signs daily: all masts move"},
		"/api/v1/events/e1/notes": {`{"text":"seen from the tower"}`, access.Officer, "notes of e1: seen from the tower"},
		"/api/v1/holds":           {`{"reason":"inquiry","event":"e1"}`, access.Officer, "holds e10-0: inquiry"},
		"/api/v1/holds/h1/release": {`{"reason":"inquiry closed"}`, access.Officer,
			"releases h1: inquiry closed"},
	}
}

// TestWhoMayDoWhat: everybody may do what their role does, once, under their
// own name, and nothing else; nobody who is not logged in may do anything.
func TestWhoMayDoWhat(t *testing.T) {
	g := guardAlone(t)
	for path, d := range everyDeed() {
		for name, v := range g.sessions {
			g.deeds.did = nil
			r := g.ask(request{method: "POST", path: path, body: d.body, name: name})
			m := object(t, r)
			if may := v.Role >= d.role; may {
				if r.StatusCode != 200 || len(g.deeds.did) != 1 || g.deeds.did[0] != name+" "+d.did || m["recorded"] != true {
					t.Errorf("%s by a %s: answer %d %v, done %v", path, v.Role, r.StatusCode, m, g.deeds.did)
				}
			} else if r.StatusCode != 403 || m["type"] != "/problems/role" || len(g.deeds.did) != 0 {
				t.Errorf("%s by a %s: answer %d %v, done %v", path, v.Role, r.StatusCode, m, g.deeds.did)
			}
		}
	}
	if len(g.deeds.audited) == 0 || g.deeds.audited[0].OK || len(g.deeds.audited) > 10 {
		t.Errorf("%d refusals are kept: %v", len(g.deeds.audited), g.deeds.audited)
	}
}

// TestWhatIsRefused is the negative matrix: for each deed, every way in which a
// request lacks something, and none of it is done.
func TestWhatIsRefused(t *testing.T) {
	g := guard(t)
	for path, d := range everyDeed() {
		good := request{method: "POST", path: path, body: d.body, name: "chief"}
		for _, tt := range []struct {
			what   string
			change func(*request)
			status int
			kind   string
		}{
			{"nobody", func(r *request) { r.name = "" }, 401, "log-in-needed"},
			{"a made-up session", func(r *request) {
				r.name, r.header = "", map[string]string{"Cookie": "sockline=" + strings.Repeat("A", 43), tokenHeader: strings.Repeat("A", 43)}
			}, 401, "log-in-needed"},
			{"the cookie of encryption", func(r *request) {
				r.name, r.header = "", map[string]string{"Cookie": cookieTLS + "=" + g.keys["chief"], tokenHeader: g.sessions["chief"].Token}
			}, 401, "log-in-needed"},
			{"no token", func(r *request) { r.header = map[string]string{tokenHeader: ""} }, 403, "no-token"},
			{"a wrong token", func(r *request) { r.header = map[string]string{tokenHeader: strings.Repeat("A", 43)} }, 403, "no-token"},
			{"the token of another", func(r *request) { r.header = map[string]string{tokenHeader: g.sessions["guest"].Token} }, 403, "no-token"},
			{"a foreign page", func(r *request) { r.header = map[string]string{"Sec-Fetch-Site": "cross-site"} }, 403, "foreign-page"},
			{"a page beside", func(r *request) { r.header = map[string]string{"Sec-Fetch-Site": "same-site"} }, 403, "foreign-page"},
			{"a foreign origin", func(r *request) { r.header = map[string]string{"Origin": "https://elsewhere.example"} }, 403, "foreign-page"},
			{"a form", func(r *request) {
				r.header = map[string]string{"Content-Type": "application/x-www-form-urlencoded"}
			}, 400, "bad-body"},
			{"plain text", func(r *request) { r.header = map[string]string{"Content-Type": "text/plain"} }, 400, "bad-body"},
			{"no object", func(r *request) { r.body = `[]` }, 400, "bad-body"},
			{"half an object", func(r *request) { r.body = r.body[:len(r.body)-1] + " " }, 400, "bad-body"},
			{"an unknown key", func(r *request) { r.body = `{"zzz":1}` }, 400, "bad-body"},
			{"two objects", func(r *request) { r.body += "{}" }, 400, "bad-body"},
			{"too much", func(r *request) { r.body = strings.Repeat(" ", maxBody+10) + r.body }, 400, "bad-body"},
		} {
			q := good
			tt.change(&q)
			r := g.ask(q)
			if m := object(t, r); r.StatusCode != tt.status || m["type"] != "/problems/"+tt.kind {
				t.Errorf("%s with %s: answer %d %v, want %d %s", path, tt.what, r.StatusCode, m, tt.status, tt.kind)
			}
		}
		for _, method := range []string{"PUT", "DELETE", "PATCH", "GET"} {
			q := good
			q.method = method
			if r := g.ask(q); method != "GET" && r.StatusCode != 405 {
				t.Errorf("%s %s: answer %d", method, path, r.StatusCode)
			}
		}
	}
	if len(g.deeds.did) != 0 {
		t.Errorf("it was done: %v", g.deeds.did)
	}
}

// TestBadValues: what a deed cannot take is named with its field.
func TestBadValues(t *testing.T) {
	g := guard(t)
	report := `{"at":"2026-07-01T14:00:00Z","runway":"07","operation":"landing","felt":"loss"}`
	change := func(old, new string) string { return strings.Replace(report, old, new, 1) }
	for _, tt := range []struct{ path, body, field string }{
		{"/api/v1/occurrences/o1/shelve", `{"reason":" "}`, "reason"},
		{"/api/v1/occurrences/o1/shelve", `{"reason":"` + strings.Repeat("é", 201) + `"}`, "reason"},
		{"/api/v1/occurrences/o1/shelve", `{"reason":"r","until":"soon"}`, "until"},
		{"/api/v1/occurrences/o1/shelve", `{"reason":"r\u0000"}`, "reason"},
		{"/api/v1/runway-in-use", `{}`, "runway"},
		{"/api/v1/sheets", `{"what":"weekly"}`, "what"},
		{"/api/v1/sheets", `{"what":"daily","text":"` + strings.Repeat("x", maxText+1) + `"}`, "text"},
		{"/api/v1/events/e1/notes", `{"text":"\n\t"}`, "text"},
		{"/api/v1/holds", `{"reason":"r"}`, "from"},
		{"/api/v1/holds", `{"reason":"r","from":"2026-07-01T14:00:00Z"}`, "to"},
		{"/api/v1/holds", `{"reason":"r","from":"2026-07-01T14:00:00Z","to":"2026-07-01T14:00:00Z"}`, "to"},
		{"/api/v1/holds", `{"reason":"r","event":"e1","to":"2026-07-01T14:00:00Z"}`, "to"},
		{"/api/v1/pilot-reports", change(`"2026-07-01T14:00:00Z"`, `""`), "at"},
		{"/api/v1/pilot-reports", change(`"2026-07-01T14:00:00Z"`, `"9999-07-01T14:00:00Z"`), "at"},
		{"/api/v1/pilot-reports", change(`landing`, `approach`), "operation"},
		{"/api/v1/pilot-reports", change(`loss`, `shear`), "felt"},
		{"/api/v1/pilot-reports", change(`"felt"`, `"amount_kt":-3,"felt"`), "amount_kt"},
		{"/api/v1/pilot-reports", change(`"felt":"loss"`, `"amount_kt":3,"felt":"none"`), "amount_kt"},
		{"/api/v1/pilot-reports", change(`"felt"`, `"amount_kt":151,"felt"`), "amount_kt"},
		{"/api/v1/pilot-reports", change(`"felt"`, `"from_m":1e9,"felt"`), "from_m"},
		{"/api/v1/pilot-reports", change(`"felt"`, `"from_m":100,"to_m":200,"felt"`), "to_m"},
	} {
		r := g.ask(request{method: "POST", path: tt.path, body: tt.body, name: "chief"})
		m := object(t, r)
		if r.StatusCode != 422 || !strings.HasPrefix(fmt.Sprint(m["detail"]), tt.field+": ") {
			t.Errorf("%s %.80s: answer %d %v, want 422 about %s", tt.path, tt.body, r.StatusCode, m, tt.field)
		}
	}
	if len(g.deeds.did) != 0 {
		t.Errorf("it was done: %v", g.deeds.did)
	}
}

// TestWhyNot: each reason for which a deed is not done has its answer.
func TestWhyNot(t *testing.T) {
	g := guard(t)
	for _, tt := range []struct {
		err    error
		status int
	}{
		{attention.ErrNoOccurrence, 404}, {ErrNoEvent, 404}, {ErrNoHold, 404}, {attention.ErrNotOpen, 409}, {attention.ErrNotShelved, 409},
		{attention.ErrBadEnd, 422}, {attention.ErrNoReason, 422}, {Refusal{"x", "y"}, 422},
		{fmt.Errorf("%w: %w", ErrNotKept, errors.New("secret place")), 503}, {errors.New("secret place"), 500},
	} {
		g.deeds.err = tt.err
		r := g.ask(request{method: "POST", path: "/api/v1/occurrences/o1/acknowledge", body: "{}", name: "keeper"})
		if m := object(t, r); r.StatusCode != tt.status || strings.Contains(fmt.Sprint(m), "secret") {
			t.Errorf("%v: answer %d %v, want %d", tt.err, r.StatusCode, m, tt.status)
		}
	}
}

// TestWhoMayRead: from another machine nobody reads without a session, but what
// it takes to get one; a proxy does not make another machine this one.
func TestWhoMayRead(t *testing.T) {
	g := guard(t)
	for _, path := range []string{"/", "/api/v1/now", "/api/v1/stream", "/api/v1/layout", "/api/v1/stations", "/api/v1/events", "/api/v1/events/x",
		"/metrics", "/nowhere", "/api/v1/openapi.json"} {
		for _, q := range []request{
			{method: "GET", path: path, from: "192.0.2.7"},
			{method: "HEAD", path: path, from: "192.0.2.7"},
			{method: "GET", path: path, header: map[string]string{"X-Forwarded-For": "192.0.2.7"}},
			{method: "GET", path: path, header: map[string]string{"Forwarded": "for=192.0.2.7"}},
			{method: "GET", path: path, from: "192.0.2.7", header: map[string]string{"Cookie": "sockline=x"}},
		} {
			if r := g.ask(q); r.StatusCode != 401 || r.Header.Get("WWW-Authenticate") == "" {
				t.Errorf("%v: answer %d", q, r.StatusCode)
			}
		}
	}
	r := g.ask(request{method: "GET", path: "/", from: "192.0.2.7", header: map[string]string{"Accept": "text/html,*/*"}})
	if r.StatusCode != 303 || r.Header.Get("Location") != "/login?next=%2F" {
		t.Errorf("a browser: answer %d to %s", r.StatusCode, r.Header.Get("Location"))
	}
	for _, path := range []string{"/login", "/healthz", "/readyz"} {
		if r := g.ask(request{method: "GET", path: path, from: "192.0.2.7"}); r.StatusCode != 200 {
			t.Errorf("%s: answer %d", path, r.StatusCode)
		}
	}
	for _, path := range []string{"/", "/api/v1/now", "/metrics"} {
		for _, q := range []request{{method: "GET", path: path}, {method: "GET", path: path, from: "192.0.2.7", name: "guest"}} {
			if r := g.ask(q); r.StatusCode != 200 {
				t.Errorf("%v: answer %d", q, r.StatusCode)
			}
		}
	}
}

// TestSecretsStayInside: no key, token, password or hash is in an answer or in
// the log, but the token in the page of its own session.
func TestSecretsStayInside(t *testing.T) {
	g := guard(t)
	var all strings.Builder
	for _, path := range []string{"/", "/api/v1/now", "/api/v1/events", "/metrics", "/login", "/nowhere"} {
		body, err := io.ReadAll(g.ask(request{method: "GET", path: path, name: "guest"}).Body)
		if err != nil {
			t.Fatal(err)
		}
		all.Write(body)
	}
	for name, key := range g.keys {
		if strings.Contains(all.String(), key) || name != "guest" && strings.Contains(all.String(), g.sessions[name].Token) {
			t.Errorf("the session of %s is told", name)
		}
	}
	if strings.Contains(all.String(), "argon2id") {
		t.Error("a hash is told")
	}
}
