package publish

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
)

// message is one message as the fake broker took it.
type message struct {
	after    time.Duration // since the fake was made
	topic    string
	payload  string
	qos      byte
	retained bool
}

// fakeBroker takes messages, or refuses them, or takes its time.
type fakeBroker struct {
	mu    sync.Mutex
	start time.Time
	down  bool
	err   error
	delay time.Duration
	got   []message
}

func (b *fakeBroker) Connected() bool {
	b.mu.Lock()
	defer b.mu.Unlock()
	return !b.down
}

func (b *fakeBroker) Publish(topic string, payload []byte, qos byte, retained bool) error {
	b.mu.Lock()
	delay := b.delay
	b.mu.Unlock()
	time.Sleep(delay) // virtual: every test here runs in a bubble
	b.mu.Lock()
	defer b.mu.Unlock()
	if b.down {
		return errors.New("no connection")
	}
	if b.err != nil {
		return b.err
	}
	b.got = append(b.got, message{time.Since(b.start), topic, string(payload), qos, retained})
	return nil
}

func (b *fakeBroker) set(f func(*fakeBroker)) {
	b.mu.Lock()
	defer b.mu.Unlock()
	f(b)
}

// under lists the payloads that arrived on the topics with a suffix.
func (b *fakeBroker) under(suffix string) []message {
	b.mu.Lock()
	defer b.mu.Unlock()
	var out []message
	for _, m := range b.got {
		if strings.HasSuffix(m.topic, suffix) {
			out = append(out, m)
		}
	}
	return out
}

func payloads(ms []message) string {
	var out []string
	for _, m := range ms {
		out = append(out, m.payload)
	}
	return strings.Join(out, " ")
}

// rig is a running sink in a bubble of virtual time.
type rig struct {
	*Sink
	broker *fakeBroker
	log    *strings.Builder
	stop   func() // ends Run and waits for it
}

func newRig(t *testing.T, change func(*Options)) *rig {
	t.Helper()
	r := &rig{broker: &fakeBroker{start: time.Now()}, log: &strings.Builder{}}
	ticker := time.NewTicker(Tick)
	opts := Options{
		Prefix:      "sockline/skerrymoor",
		Instance:    "m",
		NotObserved: func() []Retained { return []Retained{{PathTopic("07", "landing"), []byte("unknown")}} },
		Farewell:    func() []byte { return []byte("farewell") },
		Now:         time.Now,
		Tick:        ticker.C,
		Log:         zerolog.New(zerolog.SyncWriter(r.log)),
	}
	if change != nil {
		change(&opts)
	}
	sink, err := New(r.broker, opts)
	if err != nil {
		t.Fatal(err)
	}
	r.Sink = sink
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan struct{})
	go func() { defer close(done); sink.Run(ctx) }()
	var once sync.Once
	r.stop = func() { once.Do(func() { cancel(); <-done; ticker.Stop() }) }
	t.Cleanup(r.stop)
	return r
}

// pass lets virtual time pass and everything settle.
func pass(d time.Duration) { time.Sleep(d); synctest.Wait() }

// live is pass with a status each second, as the daemon sets it.
func live(r *rig, d time.Duration) {
	for ; d > 0; d -= time.Second {
		r.SetStatus(alerting.Observing, []byte("s"))
		pass(min(d, time.Second))
	}
}

func issue(id string, phase Phase, body string) Issue {
	return Issue{AlertID: id, Phase: phase, JSON: func(delayed bool) []byte {
		if delayed {
			return []byte(body + "(delayed)")
		}
		return []byte(body)
	}}
}

// status is a status payload as another instance would publish it at this
// moment of virtual time, with its clock off by skew.
func status(instance string, skew time.Duration) []byte {
	at := time.Now().Add(skew).UTC()
	return fmt.Appendf(nil, `{"condition":"observing","instance":%q,"at":%q,"valid_until":%q}`,
		instance, at.Format(time.RFC3339Nano), at.Add(aliveFor).Format(time.RFC3339Nano))
}

func must(t *testing.T, err error) {
	t.Helper()
	if err != nil {
		t.Fatal(err)
	}
}
