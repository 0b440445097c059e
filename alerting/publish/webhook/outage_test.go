package webhook

import (
	"fmt"
	"net"
	"net/http/httptest"
	"strings"
	"testing"
	"time"
)

// TestReceiverAwayForADay: alerts open, change and close for 24 hours while
// nobody answers, with a restart of the program in the middle. Then the
// receiver is back and has every opening and closing at least once, in the
// order of each alert, all marked as delayed.
func TestReceiverAwayForADay(t *testing.T) {
	address := freeAddress(t)
	r := &rig{}
	s := &station{tries: map[string]int{}, now: func() time.Time { return r.now() }}
	s.Server = httptest.NewUnstartedServer(s)
	sample := httptest.NewTLSServer(nil) // the same certificate, for the trust
	defer sample.Close()
	trust := (&station{Server: sample}).trusting()
	r = newRig(t, func(o *Options) {
		o.URL, o.TLS = "https://"+address+"/", trust
		o.Log = o.Log.Level(8) // a day of failures is not worth reading
	})
	const alerts = 240 // one every six minutes, each open for five
	for i := range alerts {
		id := fmt.Sprintf("alert%03d", i)
		r.Offer(event(id, 1, Opening, r.now()))
		r.pass(time.Minute, 30*time.Second)
		for k := range 4 {
			r.Offer(event(id, 2+k, Update, r.now()))
			r.pass(time.Minute, 30*time.Second)
		}
		r.Offer(event(id, 9, Closing, r.now()))
		r.pass(time.Minute, 30*time.Second)
		if i == alerts/2 {
			r.end()
			r.open()
		}
	}
	st := r.State()
	if d := r.now().Sub(start()); d < 24*time.Hour || st.Waiting != 3*alerts || st.Problem == "" || st.Repeated < 300 {
		t.Fatalf("after %v: %+v", d, st)
	}
	l, err := net.Listen("tcp", address)
	if err != nil {
		t.Fatal(err)
	}
	s.Listener.Close()
	s.Listener = l
	s.StartTLS()
	defer s.Close()
	back := r.now()
	// While it is away it is asked every 30 s, give or take half of that.
	r.pass(time.Minute, time.Second)
	if st := r.State(); st.Waiting != 0 || st.Expired+st.Lost+st.Refused != 0 || st.Problem != "" {
		t.Fatalf("a minute after the return: %+v", st)
	}
	seen := map[string]string{}
	for _, g := range s.taken() {
		alert, revision, _ := strings.Cut(g.id, "/")
		seen[alert] += revision
		o := mustParse(t, g.body)
		late := o["delayed"] == true && o["data"].(map[string]any)["delayed"] == true && g.header.Get(HeaderDelayed) == "true"
		if !late && !(alert == fmt.Sprintf("alert%03d", alerts-1)) {
			t.Errorf("%s is not marked as delayed", g.id)
		}
		if g.at.Sub(back) > time.Minute {
			t.Errorf("%s arrives %v after the return", g.id, g.at.Sub(back))
		}
	}
	for i := range alerts {
		if got := seen[fmt.Sprintf("alert%03d", i)]; got != "159" { // opening, newest update, closing
			t.Errorf("alert %d: revisions %s in this order, want 1, 5, 9", i, got)
		}
	}
}

// TestExpiry: what is older than the bound is given up, counted, and never
// sent; what is younger is.
func TestExpiry(t *testing.T) {
	r := newRig(t, nil)
	r.Offer(event("old", 1, Opening, r.now()))
	r.settle()
	r.pass(time.Hour, time.Hour)
	r.Offer(event("old", 2, Closing, r.now()))
	r.settle()
	r.pass(ExpireAfter-30*time.Minute, 30*time.Minute)
	if st := r.State(); st.Expired != 1 || st.Waiting != 1 {
		t.Errorf("%+v", st)
	}
	r.pass(time.Hour, time.Hour)
	if st := r.State(); st.Expired != 2 || st.Waiting != 0 || len(r.lanes.order) != 0 {
		t.Errorf("%+v", st)
	}
	r.end()
	r.open()
	if st := r.State(); st.Waiting != 0 {
		t.Errorf("after a restart: %+v", st)
	}
}

// TestPauses grow, stay in their bounds, and are spread.
func TestPauses(t *testing.T) {
	r := newRig(t, nil)
	for _, c := range []struct {
		failures int
		longest  time.Duration
		want     time.Duration
	}{
		{1, longestPause, time.Second}, {2, longestPause, 2 * time.Second}, {4, longestPause, 8 * time.Second},
		{7, longestPause, time.Minute}, {10000, longestPause, time.Minute}, {6, longestProbe, 30 * time.Second},
	} {
		if got := pauseAfter(c.failures, c.longest); got != c.want {
			t.Errorf("after %d: %v, want %v", c.failures, got, c.want)
		}
	}
	low, high := time.Hour, time.Duration(0)
	for range 1000 {
		p := r.spread(10 * time.Second)
		low, high = min(low, p), max(high, p)
	}
	if low < 5*time.Second || high > 15*time.Second || high-low < 9*time.Second {
		t.Errorf("spread from %v to %v", low, high)
	}
}
