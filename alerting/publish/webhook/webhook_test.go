package webhook

import (
	"context"
	"crypto/hmac"
	"crypto/sha256"
	"crypto/tls"
	"encoding/hex"
	"fmt"
	"net/http"
	"net/http/httptest"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors"
)

// TestEnvelope sends a real notice and reads it as CloudEvents 1.0 has it.
func TestEnvelope(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	r = newRig(t, to(s, func(o *Options) { o.Secret = []byte("a secret of sixteen or more") }))
	a := lifecycle.Alert{
		ID: "skerrymoor-20260701T120000Z-07-landing-headwind-loss", Revision: 1, Runway: "07", Operation: "landing",
		Kind: alerting.HeadwindLoss, Level: alerting.Large, State: lifecycle.Open, Opened: sensors.At(start()), Updated: sensors.At(start()), Observed: true,
	}
	n := wording.Of(lifecycle.Transition{At: a.Updated, Alert: a}, wording.Context{Airfield: "skerrymoor"}).WithRecorded(true)
	r.Offer(Of(n))
	r.settle()
	if s.count() != 1 {
		t.Fatalf("%d requests: %+v", s.count(), r.State())
	}
	g := s.taken()[0]
	if ct := g.header.Get("Content-Type"); ct != "application/cloudevents+json; charset=utf-8" {
		t.Errorf("content type %s", ct)
	}
	// The required attributes, and those that say what the data is.
	o := mustParse(t, g.body)
	for k, want := range map[string]any{
		"specversion": "1.0", "id": a.ID + "/1", "source": "/sockline/skerrymoor", "type": "sockline.alert.opened", "subject": a.ID,
		"time": "2026-07-01T12:00:00Z", "datacontenttype": "application/json", "exercise": false, "delayed": nil,
	} {
		if o[k] != want {
			t.Errorf("%s is %v, want %v", k, o[k], want)
		}
	}
	data, _ := o["data"].(map[string]any)
	if data["notice"] != alerting.Notice || data["id"] != a.ID || data["recorded"] != true {
		t.Errorf("data %v", data)
	}
	// The seal, worked out apart from Seal.
	m := hmac.New(sha256.New, []byte("a secret of sixteen or more"))
	fmt.Fprintf(m, "2026-07-01T12:00:00Z\n%s", g.body)
	if seal := g.header.Get("Sockline-Seal"); seal != hex.EncodeToString(m.Sum(nil)) || g.header.Get("Sockline-Sent") != "2026-07-01T12:00:00Z" {
		t.Errorf("seal %q of %s", seal, g.header.Get("Sockline-Sent"))
	}
}

// TestSealValue checks the digest with test case 2 of RFC 4231 section 4.3, and
// that time and body are kept apart.
func TestSealValue(t *testing.T) {
	m := hmac.New(sha256.New, []byte("Jefe"))
	m.Write([]byte("what do ya want for nothing?"))
	if got := hex.EncodeToString(m.Sum(nil)); got != "5bdcc146bf60754e6a042426089575c75a003f089d2739839dec58b964ec3843" {
		t.Fatalf("this machine's HMAC gives %s", got)
	}
	if got, want := Seal([]byte("k"), "t", []byte("b")), Seal([]byte("k"), "tb", nil); got == want {
		t.Error("time and body run into each other")
	}
}

func TestAnswers(t *testing.T) {
	for _, c := range []struct {
		code  int
		after string
		again time.Duration // when it is tried again at the latest; 0: never
		least time.Duration // and not before
	}{
		{200, "", 0, 0}, {204, "", 0, 0},
		{301, "", 0, 0}, {307, "", 0, 0}, {308, "", 0, 0},
		{400, "", 0, 0}, {401, "", 0, 0}, {403, "", 0, 0}, {404, "", 0, 0}, {410, "", 0, 0}, {413, "", 0, 0}, {422, "", 0, 0},
		{408, "", 2 * time.Second, 0}, {429, "", 2 * time.Second, 0}, {500, "", 2 * time.Second, 0}, {502, "", 2 * time.Second, 0},
		{503, "", 2 * time.Second, 0}, {504, "", 2 * time.Second, 0},
		{429, "120", 121 * time.Second, 120 * time.Second},
		{503, "Wed, 01 Jul 2026 12:05:01 GMT", 302 * time.Second, 298 * time.Second},
		{429, "100000", 601 * time.Second, 598 * time.Second}, // bounded to ten minutes
		{429, "soon", 2 * time.Second, 0}, {429, "-5", 2 * time.Second, 0},
	} {
		t.Run(fmt.Sprint(c.code, c.after), func(t *testing.T) {
			r := &rig{}
			s := newStation(t, func() time.Time { return r.now() })
			s.answer = func(_ string, n int) (int, string) {
				if n == 0 {
					return c.code, c.after
				}
				return 200, ""
			}
			r = newRig(t, to(s, nil))
			r.Offer(event("a", 1, Opening, start()))
			r.settle()
			if c.again == 0 {
				r.pass(15*time.Minute, time.Second)
				if s.count() != 1 || r.State().Waiting != 0 {
					t.Errorf("%d requests, %+v", s.count(), r.State())
				}
				if st := r.State(); (st.Refused == 1) != (c.code >= 300) || (st.Problem != "") != (c.code >= 300) {
					t.Errorf("%+v", st)
				}
				return
			}
			if !strings.Contains(r.State().Problem, fmt.Sprint(c.code)) {
				t.Errorf("problem %q", r.State().Problem)
			}
			r.pass(c.again, 500*time.Millisecond)
			all := s.taken()
			if len(all) != 1 || s.count() != 2 || all[0].at.Sub(start()) < c.least {
				t.Errorf("%d requests, taken %d", s.count(), len(all))
			}
			if st := r.State(); st.Delivered != 1 || st.Repeated != 1 || st.Problem != "" || st.Waiting != 0 {
				t.Errorf("%+v", st)
			}
		})
	}
}

// TestRedirectIsNotFollowed: what is told is for one receiver.
func TestRedirectIsNotFollowed(t *testing.T) {
	r := &rig{}
	other := newStation(t, func() time.Time { return r.now() })
	s := httptest.NewTLSServer(http.RedirectHandler(other.URL, http.StatusTemporaryRedirect))
	defer s.Close()
	r = newRig(t, func(o *Options) {
		o.URL, o.TLS = s.URL, other.trusting()
		o.TLS.RootCAs.AddCert(s.Certificate())
	})
	r.Offer(event("a", 1, Opening, start()))
	r.settle()
	if st := r.State(); other.count() != 0 || st.Refused != 1 || !strings.Contains(st.Problem, "redirect") {
		t.Errorf("%d, %+v", other.count(), st)
	}
}

// TestWhoIsTrusted: nothing is told to a server whose certificate does not
// hold, and it is told once that is mended.
func TestWhoIsTrusted(t *testing.T) {
	for name, spoil := range map[string]func(s *station, c *tls.Config) string{
		"an authority that nobody knows": func(s *station, c *tls.Config) string { c.RootCAs = nil; return s.URL },
		"another name":                   func(s *station, c *tls.Config) string { c.ServerName = "tower.example.net"; return s.URL },
		"out of date": func(s *station, c *tls.Config) string {
			c.Time = func() time.Time { return s.Certificate().NotAfter.Add(time.Hour) }
			return s.URL
		},
		"not TLS at all": func(s *station, _ *tls.Config) string { return s.URL },
	} {
		t.Run(name, func(t *testing.T) {
			r := &rig{}
			s := newStation(t, func() time.Time { return r.now() })
			if name == "not TLS at all" {
				plain := httptest.NewServer(s)
				defer plain.Close()
				r = newRig(t, func(o *Options) { o.URL = strings.Replace(plain.URL, "http:", "https:", 1) })
			} else {
				c := s.trusting()
				url := spoil(s, c)
				r = newRig(t, func(o *Options) { o.URL, o.TLS = url, c })
			}
			r.Offer(event("a", 1, Opening, start()))
			r.settle()
			r.pass(time.Minute, time.Second)
			if st := r.State(); s.count() != 0 || st.Waiting != 1 || st.Problem == "" || st.Repeated == 0 {
				t.Errorf("%d requests, %+v", s.count(), st)
			}
			t.Log(r.State().Problem)
		})
	}
}

// TestNobodyWaitsForAnother: one alert is answered 503 for ever; the others
// arrive at once, and that one keeps its order.
func TestNobodyWaitsForAnother(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	healed := false
	s.answer = func(id string, _ int) (int, string) {
		if strings.HasPrefix(id, "stuck") && !healed {
			return 503, ""
		}
		return 200, ""
	}
	r = newRig(t, to(s, nil))
	for i := range 5 {
		r.Offer(event(fmt.Sprint("stuck", i), 1, Opening, start()))
	}
	r.settle()
	for i := range 20 {
		at := r.now()
		r.Offer(event(fmt.Sprint("free", i), 1, Opening, at))
		r.settle()
		all := s.taken()
		if len(all) != i+1 || !all[i].at.Equal(at) {
			t.Fatalf("alert %d waits: %d taken", i, len(all))
		}
		r.pass(10*time.Second, 5*time.Second)
	}
	r.Offer(event("stuck0", 9, Closing, r.now()))
	r.settle()
	s.mu.Lock()
	healed = true
	s.mu.Unlock()
	r.pass(2*time.Minute, time.Second)
	var order []string
	for _, g := range s.taken() {
		if strings.HasPrefix(g.id, "stuck0/") {
			order = append(order, g.id)
		}
	}
	if got := strings.Join(order, " "); got != "stuck0/1 stuck0/9" || r.State().Waiting != 0 {
		t.Errorf("taken %s, %+v", got, r.State())
	}
}

// TestHangingAnswer: while requests hang, an alert that is told for the first
// time still has a way out.
func TestHangingAnswer(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	hold := make(chan struct{})
	hanging := httptest.NewTLSServer(http.HandlerFunc(func(w http.ResponseWriter, q *http.Request) {
		if strings.HasPrefix(q.Header.Get(HeaderEvent), "stuck") {
			<-hold
		}
		s.ServeHTTP(w, q)
	}))
	defer hanging.Close()
	defer close(hold)
	r = newRig(t, func(o *Options) {
		o.URL, o.TLS, o.Timeout = hanging.URL, s.trusting(), 200*time.Millisecond
		o.TLS.RootCAs.AddCert(hanging.Certificate())
	})
	for i := range 6 {
		r.Offer(event(fmt.Sprint("stuck", i), 1, Opening, start()))
	}
	r.settle() // each has failed once by its timeout
	if st := r.State(); st.Waiting != 6 || !strings.Contains(st.Problem, "deadline exceeded") && !strings.Contains(st.Problem, "timeout") {
		t.Fatalf("%+v", st)
	}
	r.mu.Lock()
	r.time = r.time.Add(time.Minute)
	r.mu.Unlock()
	r.turn(t.Context()) // three repeats are under way and hang
	if r.flying != slots-1 {
		t.Fatalf("%d requests are under way, want %d", r.flying, slots-1)
	}
	r.Offer(event("free", 1, Opening, r.now()))
	r.turn(t.Context())
	for r.flying > 0 {
		r.finish(<-r.results)
	}
	if s.ids() != "free/1" {
		t.Errorf("taken %q", s.ids())
	}
}

// TestUpdatesReplaceEachOther while they wait; opening and closing stay.
func TestUpdatesReplaceEachOther(t *testing.T) {
	r := newRig(t, nil)
	r.Offer(event("a", 1, Opening, start()))
	for i := 2; i < 50; i++ {
		r.Offer(event("a", i, Update, start()))
	}
	r.Offer(event("a", 50, Closing, start()))
	r.settle()
	if st := r.State(); st.Waiting != 3 {
		t.Errorf("%+v", st)
	}
	if got := r.lanes.records(); got[0].Event.ID != "a/1" || got[1].Event.ID != "a/49" || got[2].Event.ID != "a/50" {
		t.Errorf("%v", got)
	}
}

func TestTooManyAlerts(t *testing.T) {
	r := newRig(t, func(o *Options) { o.MaxAlerts = 3 })
	r.Offer(event("open", 1, Opening, start()))
	for i := range 6 {
		id := fmt.Sprint("gone", i)
		r.Offer(event(id, 1, Opening, start()))
		r.Offer(event(id, 2, Closing, start()))
	}
	r.settle()
	if st := r.State(); st.Lost != 8 || st.Waiting != 5 || r.lanes.alerts["open"] == nil {
		t.Errorf("%+v", st)
	}
}

// TestExercises reach only those who ask for them, whichever says so: the
// event, the daemon, or a file of an earlier run.
func TestExercises(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	for _, c := range []struct {
		asks, drill, event, reaches bool
		source                      string
	}{
		{false, false, true, false, ""}, {false, true, true, false, ""}, {false, true, false, false, ""},
		{true, false, true, true, "/sockline-exercise/skerrymoor"}, {true, true, true, true, "/sockline-exercise/skerrymoor"},
		{true, false, false, true, "/sockline/skerrymoor"}, {false, false, false, true, "/sockline/skerrymoor"},
	} {
		before := s.count()
		r = newRig(t, to(s, func(o *Options) { o.Exercise, o.Drill = c.asks, c.drill }))
		e := event("a", 1, Opening, start())
		e.Exercise = c.event
		r.Offer(e)
		r.Beat(Heartbeat("i", e))
		r.settle()
		n := s.count() - before
		if (n == 2) != c.reaches || n == 1 || (r.State().Withheld == 1) == c.reaches {
			t.Errorf("%+v: %d requests, %+v", c, n, r.State())
		}
		if c.reaches {
			if o := mustParse(t, s.taken()[before].body); o["source"] != c.source || o["exercise"] != (c.event || c.drill) {
				t.Errorf("%+v: %v", c, o)
			}
		}
	}
	// Kept by a run that was allowed to, found by one that is not.
	r = newRig(t, func(o *Options) { o.Exercise = true })
	e := event("a", 1, Opening, start())
	e.Exercise = true
	r.Offer(e)
	r.settle()
	r.end()
	before := s.count()
	to(s, nil)(&r.opts)
	r.opts.Exercise = false
	r.open()
	r.settle()
	if s.count() != before || r.State().Waiting != 0 {
		t.Errorf("an exercise of an earlier run is told: %+v", r.State())
	}
}

// TestHeartbeat is tried once, newest only, and is not on disk.
func TestHeartbeat(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	s.answer = func(_ string, _ int) (int, string) { return 500, "" }
	r = newRig(t, to(s, nil))
	beat := func() Event {
		return Heartbeat("host-1", Event{Time: sensors.At(r.now()), Data: []byte(`{"condition":"observing"}`)})
	}
	r.Beat(beat())
	r.Beat(beat())
	r.settle()
	r.pass(30*time.Second, time.Second)
	if s.count() != 1 || r.State().Waiting != 0 {
		t.Errorf("%d requests, %+v", s.count(), r.State())
	}
	s.mu.Lock()
	s.answer = nil
	s.mu.Unlock()
	r.Beat(beat())
	r.settle()
	all := s.taken()
	if len(all) != 1 || r.State().Problem != "" {
		t.Fatalf("%d taken, %+v", len(all), r.State())
	}
	o := mustParse(t, all[0].body)
	if o["type"] != "sockline.heartbeat" || o["id"] != "heartbeat/host-1/1782907230" || o["data"].(map[string]any)["condition"] != "observing" {
		t.Errorf("%v", o)
	}
	if len(r.lanes.records()) != 0 || r.file.live != 0 {
		t.Error("a heartbeat is on disk")
	}
}

// TestCAPBody: a CAP message goes out as it is; a heartbeat stays JSON.
func TestCAPBody(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	r = newRig(t, to(s, func(o *Options) { o.Format = CAP }))
	e := event("a", 1, Opening, start())
	e.Data = []byte("<alert/>")
	r.Offer(e)
	r.settle()
	g := s.taken()[0]
	if string(g.body) != "<alert/>" || g.header.Get("Content-Type") != "application/cap+xml; charset=utf-8" {
		t.Errorf("%s as %s", g.body, g.header.Get("Content-Type"))
	}
	r.Offer(Event{ID: "b", Alert: "b", Data: []byte("<alert/>")})
	r.settle()
	r.Beat(Heartbeat("i", Event{Data: []byte("{}")}))
	r.settle()
	if ct := s.taken()[2].header.Get("Content-Type"); !strings.Contains(ct, "cloudevents") {
		t.Error(ct)
	}
}

// TestOptions that can never work.
func TestOptions(t *testing.T) {
	good := newRig(t, nil).opts
	for name, spoil := range map[string]func(o *Options){
		"no address": func(o *Options) { o.URL = "" }, "another scheme": func(o *Options) { o.URL = "ftp://a" },
		"no name": func(o *Options) { o.Name = "" }, "no file": func(o *Options) { o.File = "" }, "no clock": func(o *Options) { o.Now = nil },
	} {
		o := good
		o.File = filepath.Join(t.TempDir(), "q")
		spoil(&o)
		if _, err := New(o); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
}

// TestRun lets it run as the daemon does, and stops it with events under way.
func TestRun(t *testing.T) {
	r := &rig{time: start()}
	s := newStation(t, func() time.Time { return r.now() })
	ticks := time.NewTicker(5 * time.Millisecond)
	defer ticks.Stop()
	r2 := newRig(t, to(s, func(o *Options) { o.Now, o.Tick, o.Random = time.Now, ticks.C, func() float64 { return 0 } }))
	r2.end() // Run opens it again
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan struct{})
	go func() { defer close(done); r2.Run(ctx) }()
	for i := range 100 {
		r2.Offer(event(fmt.Sprint("a", i), 1, Opening, start()))
	}
	cancel()
	<-done
	r2.file = nil
	if n := len(s.taken()); n != 100 || r2.State().Waiting != 0 {
		t.Errorf("%d taken, %+v", n, r2.State())
	}
}
