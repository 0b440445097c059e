package page

import (
	"bufio"
	"context"
	"fmt"
	"io"
	"math/rand/v2"
	"net"
	"net/http"
	"os"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"
)

// patience bounds every wait of these tests that has no limit to prove.
const patience = 30 * time.Second

// moving is a view that can be changed, and the page over it on a socket.
type moving struct {
	*Page
	view atomic.Pointer[View]
	tape *Tape
	addr string
}

// serveMoving serves until the test ends.
func serveMoving(t *testing.T, change func(*Options)) *moving {
	t.Helper()
	m := &moving{tape: NewTape("run-1")}
	m.turn(sample(0))
	m.Page, _ = serve(t, nil, func(o *Options) {
		o.View, o.Tape = m.view.Load, m.tape
		if change != nil {
			change(o)
		}
	})
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	m.addr = l.Addr().String()
	ctx, cancel := context.WithCancel(context.WithoutCancel(t.Context()))
	ended := make(chan error, 1)
	go func() { ended <- m.Serve(ctx, l) }()
	t.Cleanup(func() {
		cancel()
		if err := <-ended; err != nil {
			t.Errorf("serve: %v", err)
		}
	})
	return m
}

// turn puts up another view.
func (m *moving) turn(v *View) {
	m.view.Store(v)
	m.tape.Turn()
}

// sent is one event as it was received.
type sent struct{ name, id, data string }

// listen opens a stream after an id and calls fn with every whole event, until
// fn says no or the connection ends. limit cuts it after so many bytes; 0: not.
func (m *moving) listen(ctx context.Context, after string, limit int64, fn func(sent) bool) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	r, err := http.NewRequestWithContext(ctx, http.MethodGet, "http://"+m.addr+"/api/v1/stream", nil)
	if err != nil {
		return err
	}
	if after != "" {
		r.Header.Set("Last-Event-ID", after)
	}
	client := &http.Client{Transport: &http.Transport{DisableKeepAlives: true}}
	w, err := client.Do(r)
	if err != nil {
		return err
	}
	defer w.Body.Close()
	if w.StatusCode != 200 || w.Header.Get("Content-Type") != "text/event-stream" {
		return fmt.Errorf("answer %d %s", w.StatusCode, w.Header.Get("Content-Type"))
	}
	body := io.Reader(w.Body)
	if limit > 0 {
		body = io.LimitReader(body, limit)
	}
	lines := bufio.NewReaderSize(body, 64<<10)
	var e sent
	for {
		line, err := lines.ReadString('\n')
		if err != nil { // what is not ended by an empty line is no event
			return nil
		}
		switch field, value, _ := strings.Cut(strings.TrimSuffix(line, "\n"), ": "); field {
		case "event":
			e.name = value
		case "id":
			e.id = value
		case "data":
			e.data = value
		case "":
			if value == "" && line == "\n" {
				if e.name != "" && !fn(e) {
					return nil
				}
				e = sent{}
			} else if strings.HasPrefix(line, ": ") && !fn(sent{name: "comment", data: value}) {
				return nil
			}
		}
	}
}

// TestStreamOverCuts: whatever moment a stream is cut at, a reader that comes
// back with the last id it had gets every issue once and in order.
func TestStreamOverCuts(t *testing.T) {
	cuts := 100
	if os.Getenv("SOCKLINE_LONG") != "" {
		cuts = 1000
	}
	m := serveMoving(t, nil)
	ctx, cancel := context.WithTimeout(t.Context(), 10*patience)
	defer cancel()
	stop := make(chan struct{})
	var writer sync.WaitGroup
	var written int
	writer.Go(func() {
		for tick := time.NewTicker(500 * time.Microsecond); ; written++ {
			select {
			case <-stop:
				tick.Stop()
				return
			case <-tick.C:
			}
			m.tape.Issue(fmt.Appendf(nil, `{"n":%d,"text":%q}`, written+1, strings.Repeat("x", written%400)))
			if written%10 == 0 {
				v := *m.view.Load()
				v.Seq++
				m.turn(&v)
			}
		}
	})
	random := rand.New(rand.NewPCG(7, 625))
	last, got, views := m.tape.id(0), 0, 0
	take := func(e sent) bool {
		switch e.name {
		case "alert":
			got++
			if want := fmt.Sprintf(`{"n":%d,`, got); !strings.HasPrefix(e.data, want) {
				t.Fatalf("issue %d is %.40s", got, e.data)
			}
		case "now":
			views++
		case "resync":
			t.Fatal("a resync, although everything is kept")
		default:
			return true
		}
		last = e.id
		return true
	}
	for range cuts {
		if err := m.listen(ctx, last, 200+random.Int64N(12000), take); err != nil {
			t.Fatal(err)
		}
	}
	close(stop)
	writer.Wait()
	err := m.listen(ctx, last, 0, func(e sent) bool { return take(e) && got < written })
	if err != nil || got != written || views == 0 {
		t.Errorf("%d issues of %d arrived, with %d views: %v", got, written, views, err)
	}
	t.Logf("%d cuts, %d issues, %d views", cuts, got, views)
}

func TestStreamResync(t *testing.T) {
	m := serveMoving(t, nil)
	for n := range tapeLength + 10 {
		m.tape.Issue(fmt.Appendf(nil, `{"n":%d}`, n+1))
	}
	for _, tt := range []struct {
		name, after string
		want        string // of the first event
	}{
		{"from now on", "", "now"},
		{"everything had", m.tape.id(tapeLength + 10), "now"},
		{"the oldest kept", m.tape.id(10), "alert"},
		{"no longer kept", m.tape.id(9), "resync"},
		{"another run", "run-2-4000", "resync"},
		{"yet to come", m.tape.id(tapeLength + 11), "resync"},
		{"not an id", "x", "resync"},
		{"not a number", "run-1--3", "resync"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			var names []string
			err := m.listen(t.Context(), tt.after, 0, func(e sent) bool {
				names = append(names, e.name)
				if e.name != "comment" && !strings.HasPrefix(e.id, "run-1-") {
					t.Errorf("the event %s has the id %q", e.name, e.id)
				}
				return e.name != "now"
			})
			if err != nil || len(names) == 0 || names[0] != tt.want || names[len(names)-1] != "now" {
				t.Errorf("events %v, %v; want %s first and now at the end", names, err, tt.want)
			}
		})
	}
}

// TestStreamBeats: a stream that has nothing to tell is not silent, and one
// whose view is too old tells none.
func TestStreamBeats(t *testing.T) {
	m := serveMoving(t, nil)
	m.turn(sample(MaxAge + time.Second))
	begun := time.Now()
	err := m.listen(t.Context(), "", 0, func(e sent) bool {
		if e.name != "comment" {
			t.Errorf("an event %s of an old view", e.name)
		}
		return false
	})
	if took := time.Since(begun); err != nil || took > 2*time.Second {
		t.Errorf("the first sign of life came after %s, %v; want 2 s at most", took, err)
	}
}

// TestNowOnTheStream: the event is the very body of the address.
func TestNowOnTheStream(t *testing.T) {
	m := serveMoving(t, nil)
	want := strings.TrimSuffix(text(t, get(m.Page, "/api/v1/now")), "\n")
	err := m.listen(t.Context(), "", 0, func(e sent) bool {
		if e.name != "now" || e.data != want {
			t.Errorf("event %s:\n%s\nwant\n%s", e.name, e.data, want)
		}
		return false
	})
	if err != nil {
		t.Error(err)
	}
}

// TestStuckReadersAreCut: of 200 streams 50 never read. They are cut within
// 15 s, the others miss nothing, and those who write wait for nobody.
func TestStuckReadersAreCut(t *testing.T) {
	t.Parallel()
	m := serveMoving(t, nil)
	const readers, stuck = 150, 50
	var cut sync.WaitGroup
	begun := time.Now()
	var latest atomic.Int64 // cut, after begun
	for range stuck {
		c, err := net.Dial("tcp", m.addr)
		if err != nil {
			t.Fatal(err)
		}
		defer c.Close()
		if err := c.(*net.TCPConn).SetReadBuffer(4096); err != nil {
			t.Fatal(err)
		}
		if _, err := io.WriteString(c, "GET /api/v1/stream HTTP/1.1\r\nHost: 127.0.0.1\r\n\r\n"); err != nil {
			t.Fatal(err)
		}
		cut.Go(func() {
			// A byte now and then shows whether the other side has closed;
			// it is nothing that the server waits for.
			for tick := time.NewTicker(200 * time.Millisecond); ; <-tick.C {
				if _, err := c.Write([]byte("\r\n")); err != nil {
					latest.Store(max(latest.Load(), int64(time.Since(begun))))
					return
				}
				if time.Since(begun) > patience {
					t.Error("a stuck reader is still there")
					return
				}
			}
		})
	}
	ctx, cancel := context.WithTimeout(t.Context(), 2*patience)
	defer cancel()
	const issues = 120
	var all sync.WaitGroup
	var whole, connected atomic.Int32
	for range readers {
		all.Go(func() {
			n := 0
			err := m.listen(ctx, m.tape.id(0), 0, func(e sent) bool {
				if e.name == "now" && n == 0 {
					connected.Add(1)
				}
				if e.name == "alert" {
					n++
				}
				return n < issues
			})
			if err == nil && n == issues {
				whole.Add(1)
			}
		})
	}
	var slowest time.Duration
	tick := time.NewTicker(100 * time.Millisecond)
	defer tick.Stop()
	for n := range issues {
		<-tick.C
		v := sample(0)
		v.Seq = uint64(n + 1)
		for i := range 20 { // as large as that of a large field
			v.Stations = append(v.Stations, Station{ID: fmt.Sprint("m", i), JSON: fmt.Appendf(nil, `{"id":"m%d","x":%q}`, i, strings.Repeat("y", 1500))})
		}
		from := time.Now()
		m.turn(v)
		m.tape.Issue(fmt.Appendf(nil, `{"n":%d}`, n+1))
		slowest = max(slowest, time.Since(from))
	}
	all.Wait()
	cut.Wait()
	if n := whole.Load(); n != readers {
		t.Errorf("%d of %d readers had every issue", n, readers)
	}
	if d := time.Duration(latest.Load()); d > 15*time.Second {
		t.Errorf("the last stuck reader was cut after %s, want 15 s at most", d)
	}
	// Far below what a stuck reader takes; a busy machine alone costs some.
	if slowest > time.Second {
		t.Errorf("a writer waited %s", slowest)
	}
	t.Logf("stuck readers cut after %s at the latest; writers waited %s at most", time.Duration(latest.Load()), slowest)
}

func TestTooManyStreams(t *testing.T) {
	m := serveMoving(t, nil)
	for range maxStreams {
		m.streams <- struct{}{}
	}
	r := get(m.Page, "/api/v1/stream")
	if o := object(t, r); r.StatusCode != http.StatusServiceUnavailable || o["type"] != "/problems/too-many-streams" {
		t.Errorf("answer %d %v", r.StatusCode, o)
	}
}

func TestLayout(t *testing.T) {
	v := sample(time.Hour) // old, and as true as ever
	v.LayoutID, v.LayoutJSON = "a1", []byte(`{"runways":[]}`)
	p, _ := serve(t, v, nil)
	m := object(t, get(p, "/api/v1/layout"))
	if m["layout_id"] != "a1" || fmt.Sprint(m["layout"]) != "map[runways:[]]" {
		t.Errorf("layout %v", m)
	}
	p, _ = serve(t, nil, nil)
	if r := get(p, "/api/v1/layout"); r.StatusCode != http.StatusServiceUnavailable {
		t.Errorf("without a view: answer %d", r.StatusCode)
	}
}

func TestNowTellsEverything(t *testing.T) {
	v := sample(time.Second)
	age, by, until := 1.25, "A. Keeper", "2026-07-01T14:30:00Z"
	v.Seq, v.AgeS, v.MastsOut, v.RunwayInUse, v.LayoutID = 9, &age, []string{"far07"}, "07", "a1"
	v.Occurrences = []Occurrence{{ID: "o1", AcknowledgedBy: &by}, {ID: "o2", ShelvedUntil: &until}}
	p, _ := serve(t, v, nil)
	m := object(t, get(p, "/api/v1/now"))
	for key, want := range map[string]string{
		"seq": "9", "made": "2026-07-01T14:15:40.000Z", "age_s": "1.25", "masts_out": "[far07]", "runway_in_use": "07",
		"shelved": "1", "layout_id": "a1", "profiles": "[]", "outflows": "[]", "fronts": "[]", "vertical": "[]",
	} {
		if got := fmt.Sprint(m[key]); got != want {
			t.Errorf("%s is %s, want %s", key, got, want)
		}
	}
	if n := len(m["occurrences"].([]any)); n != 2 {
		t.Errorf("%d occurrences", n)
	}
}
