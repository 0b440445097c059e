package webhook

import (
	"crypto/tls"
	"crypto/x509"
	"encoding/json"
	"fmt"
	"io"
	"log"
	"math/rand/v2"
	"net"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/rs/zerolog"
	"go.uber.org/goleak"

	"sockline/sensors"
)

func TestMain(m *testing.M) {
	if os.Getenv(childVariable) != "" {
		os.Exit(child())
	}
	goleak.VerifyTestMain(m)
}

func start() time.Time { return time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC) }

// got is one request as the receiver saw it.
type got struct {
	header http.Header
	body   []byte
	at     time.Time // by the fake clock
	id     string
	answer int
}

// station is a real HTTP receiver whose answers a test decides.
type station struct {
	*httptest.Server
	mu     sync.Mutex
	seen   []got
	answer func(id string, n int) (code int, retryAfter string) // n: tries of this id so far
	tries  map[string]int
	now    func() time.Time
}

func newStation(tb testing.TB, now func() time.Time) *station {
	tb.Helper()
	s := &station{tries: map[string]int{}, now: now}
	s.Server = httptest.NewUnstartedServer(s)
	s.Config.ErrorLog = log.New(io.Discard, "", 0) // handshakes fail on purpose
	s.StartTLS()
	tb.Cleanup(s.Close)
	return s
}

func (s *station) ServeHTTP(w http.ResponseWriter, q *http.Request) {
	body, err := io.ReadAll(q.Body)
	if err != nil {
		w.WriteHeader(http.StatusBadRequest)
		return
	}
	s.mu.Lock()
	id := q.Header.Get(HeaderEvent)
	code, after := http.StatusNoContent, ""
	if s.answer != nil {
		code, after = s.answer(id, s.tries[id])
	}
	s.tries[id]++
	s.seen = append(s.seen, got{q.Header.Clone(), body, s.now(), id, code})
	s.mu.Unlock()
	if after != "" {
		w.Header().Set("Retry-After", after)
	}
	if code >= 300 && code < 400 {
		w.Header().Set("Location", "/elsewhere")
	}
	w.WriteHeader(code)
}

// taken is what was answered with a success, in order.
func (s *station) taken() (all []got) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, g := range s.seen {
		if g.answer < 300 {
			all = append(all, g)
		}
	}
	return all
}

func (s *station) count() int {
	s.mu.Lock()
	defer s.mu.Unlock()
	return len(s.seen)
}

func (s *station) ids() string {
	var ids []string
	for _, g := range s.taken() {
		ids = append(ids, g.id)
	}
	return strings.Join(ids, " ")
}

// trusting trusts the station's own certificate.
func (s *station) trusting() *tls.Config {
	pool := x509.NewCertPool()
	pool.AddCert(s.Certificate())
	return &tls.Config{RootCAs: pool}
}

// rig drives a receiver by hand: no goroutine of its own, a clock that moves
// when the test says so, and a real way to a real server.
type rig struct {
	*Receiver
	tb   testing.TB
	opts Options
	time time.Time
	mu   sync.Mutex
}

func (r *rig) now() time.Time {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.time
}

func newRig(tb testing.TB, edit func(o *Options)) *rig {
	tb.Helper()
	r := &rig{tb: tb, time: start()}
	random := rand.New(rand.NewPCG(3, 0))
	r.opts = Options{
		Name: "tower", Airfield: "skerrymoor", File: filepath.Join(tb.TempDir(), "queues", "tower"), URL: "https://127.0.0.1:1/",
		Now: r.now, Random: random.Float64, Tick: make(chan time.Time), Log: zerolog.New(zerolog.NewTestWriter(tb)).Level(zerolog.ErrorLevel),
		Timeout: 5 * time.Second,
	}
	if edit != nil {
		edit(&r.opts)
	}
	r.open()
	tb.Cleanup(func() { r.end() })
	return r
}

// to makes a rig that tells a station.
func to(s *station, more func(o *Options)) func(o *Options) {
	return func(o *Options) {
		o.URL, o.TLS = s.URL+"/hook", s.trusting()
		if more != nil {
			more(o)
		}
	}
}

func (r *rig) open() {
	r.tb.Helper()
	w, err := New(r.opts)
	if err != nil {
		r.tb.Fatal(err)
	}
	r.Receiver = w
	w.openFile(r.now())
	w.report()
}

// end closes what a kill would close.
func (r *rig) end() {
	r.client.CloseIdleConnections()
	if r.file != nil {
		_ = r.file.f.Close()
		r.file = nil
	}
}

// settle does everything that is due now, to the end of every request.
func (r *rig) settle() {
	r.turn(r.tb.Context())
	for r.flying > 0 {
		r.finish(<-r.results)
		r.turn(r.tb.Context())
	}
}

// pass lets time go by in steps.
func (r *rig) pass(d, step time.Duration) {
	for end := r.now().Add(d); r.now().Before(end); {
		r.mu.Lock()
		r.time = r.time.Add(step)
		r.mu.Unlock()
		r.settle()
	}
}

// event is one of an alert, with an object that says what it is.
func event(alert string, revision int, p Phase, at time.Time) Event {
	return Event{
		ID: eventID(alert, revision), Alert: alert, Phase: p, Time: sensors.At(at),
		Data: fmt.Appendf(nil, `{"id":%q,"revision":%d,"notice":"n"}`, alert, revision),
	}
}

func mustParse(tb testing.TB, b []byte) map[string]any {
	tb.Helper()
	var m map[string]any
	if err := json.Unmarshal(b, &m); err != nil {
		tb.Fatalf("%v in %s", err, b)
	}
	return m
}

// freeAddress is an address on which nobody listens.
func freeAddress(tb testing.TB) string {
	tb.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		tb.Fatal(err)
	}
	defer l.Close()
	return l.Addr().String()
}
