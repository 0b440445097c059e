package publish_test

import (
	"context"
	"encoding/json"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/publish"
	"sockline/sensors/feed"
	"sockline/sensors/feed/brokertest"
)

// quick is how much faster than the wall the sinks' clock runs here: what they
// do over 6 s takes 1.5 s. The sockets keep wall time.
const quick = 4

// daemon is a sink on its own connection to a real broker, with a status that
// is set as often as a daemon does.
type daemon struct {
	*publish.Sink
	stop func()
}

func start(t testing.TB, broker *brokertest.Broker, instance string) *daemon {
	t.Helper()
	const prefix = "sockline/skerrymoor"
	status := func(condition alerting.Condition, at time.Time) []byte {
		return fmt.Appendf(nil, `{"condition":%q,"instance":%q,"at":%q,"valid_until":%q}`, condition, instance,
			at.UTC().Format(time.RFC3339Nano), at.Add(5*time.Second).UTC().Format(time.RFC3339Nano))
	}
	begun := time.Now()
	now := func() time.Time { return begun.Add(quick * time.Since(begun)) }
	ctx, cancel := context.WithCancel(t.Context())
	var sink *publish.Sink
	ready := make(chan struct{})
	// The link outlives the sink, which says farewell over it.
	link, err := feed.NewPublisher(context.WithoutCancel(ctx), feed.PublisherOptions{
		Broker:    feed.Broker{URL: broker.URL()},
		ClientID:  "test-" + instance,
		Will:      &feed.Will{Topic: publish.StatusTopic(prefix), Payload: status(alerting.NoContact, now())},
		Log:       zerolog.Nop(),
		OnConnect: func() { <-ready; sink.OnConnect() },
	})
	if err != nil {
		t.Fatal(err)
	}
	ticker := time.NewTicker(publish.Tick / quick)
	sink, err = publish.New(link, publish.Options{
		Prefix: prefix, Instance: instance, Now: now, Tick: ticker.C, Log: zerolog.Nop(),
		NotObserved: func() []publish.Retained {
			return []publish.Retained{{Topic: publish.PathTopic("07", "landing"), Payload: []byte(`{"state":"not-observed"}`)}}
		},
		Farewell: func() []byte { return status(alerting.NoContact, now()) },
	})
	if err != nil {
		t.Fatal(err)
	}
	close(ready)
	link.WatchRetained(publish.StatusTopic(prefix), sink.ObserveStatus)

	ended := make(chan struct{})
	go func() { defer close(ended); sink.Run(ctx) }()
	steps := make(chan struct{})
	go func() { // the daemon's step, once a second of its clock
		defer close(steps)
		step := time.NewTicker(time.Second / quick)
		defer step.Stop()
		for {
			sink.SetStatus(alerting.Observing, status(alerting.Observing, now()))
			sink.SetPath("07", "landing", alerting.BelowLimits, fmt.Appendf(nil, `{"state":"below-limits","by":%q}`, instance))
			select {
			case <-ctx.Done():
				return
			case <-step.C:
			}
		}
	}()
	d := &daemon{Sink: sink}
	done := false
	d.stop = func() {
		if !done {
			done = true
			cancel()
			<-ended
			<-steps
			ticker.Stop()
			link.Close()
		}
	}
	t.Cleanup(d.stop)
	return d
}

// until waits for a condition that the other side brings about.
func until(t testing.TB, what string, limit time.Duration, ok func() bool) {
	t.Helper()
	deadline := time.NewTimer(limit)
	defer deadline.Stop()
	look := time.NewTicker(5 * time.Millisecond)
	defer look.Stop()
	for !ok() {
		select {
		case <-deadline.C:
			t.Fatalf("not within %v: %s", limit, what)
		case <-look.C:
		}
	}
}

// retained is what a client that comes new to the broker finds.
func retained(t testing.TB, broker *brokertest.Broker) map[string]string {
	t.Helper()
	s := subscribe(t, broker)
	found := map[string]string{}
	limit := time.After(2 * time.Second)
	for len(found) < 2 {
		select {
		case m := <-s.Messages():
			if m.Retained {
				found[strings.TrimPrefix(m.Topic, "sockline/skerrymoor/")] = string(m.Payload)
			}
		case <-limit:
			return found
		}
	}
	return found
}

func subscribe(t testing.TB, broker *brokertest.Broker) *feed.Subscriber {
	t.Helper()
	s, err := feed.Subscribe(t.Context(), feed.SubscribeOptions{
		Broker: feed.Broker{URL: broker.URL()}, ClientID: "reader", Topics: []string{"sockline/skerrymoor/#"},
		Clock: feed.NewClock(), Log: zerolog.Nop(),
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.Close)
	until(t, "the reader is subscribed", 10*time.Second, func() bool { return s.State().Subscribed })
	return s
}

func open(id string) publish.Issue {
	return publish.Issue{AlertID: id, Phase: publish.Opening, JSON: func(delayed bool) []byte {
		return fmt.Appendf(nil, `{"id":%q,"delayed":%v}`, id, delayed)
	}}
}

// alertsFrom collects the ids of alerts until all of want have come.
func alertsFrom(t testing.TB, s *feed.Subscriber, want ...string) {
	t.Helper()
	limit := time.After(15 * time.Second)
	for len(want) > 0 {
		select {
		case m := <-s.Messages():
			if !strings.HasSuffix(m.Topic, "/alert") {
				continue
			}
			var a struct{ ID string }
			if err := json.Unmarshal(m.Payload, &a); err != nil {
				t.Fatalf("alert %s: %v", m.Payload, err)
			}
			want = slices.DeleteFunc(want, func(id string) bool { return id == a.ID })
		case <-limit:
			t.Fatalf("alerts that never came: %v", want)
		}
	}
}

// TestRealBroker plays two daemons under one prefix on a real broker: the
// first speaks, the second is silent; the broker is killed and comes back; the
// first ends in order and the second takes over.
func TestRealBroker(t *testing.T) {
	broker := brokertest.Start(t)
	reader := subscribe(t, broker)
	mode := func(d *daemon, m publish.Mode) func() bool { return func() bool { return d.State().Mode == m } }

	first := start(t, broker, "first")
	until(t, "the first daemon publishes", 10*time.Second, mode(first, publish.Sending))
	second := start(t, broker, "second")
	until(t, "the second daemon is silent", 10*time.Second, mode(second, publish.Silent))

	if err := first.Issue(open("a1")); err != nil {
		t.Fatal(err)
	}
	alertsFrom(t, reader, "a1")

	broker.Kill() // and with it everything retained
	until(t, "the first daemon notices", 10*time.Second, mode(first, publish.Unconnected))
	// Twins find the same alert. Whichever of them speaks first after the outage
	// tells it; the other stays silent.
	for _, d := range []*daemon{first, second} {
		if err := d.Issue(open("a2")); err != nil {
			t.Fatal(err)
		}
	}
	broker.Run()
	// The reader may come back after the daemon, and then never sees it: what
	// counts is that the broker has acknowledged it.
	until(t, "the broker takes the alert of the outage", 15*time.Second, func() bool {
		return first.State().Issues == 2 || second.State().Issues >= 1
	})
	until(t, "exactly one speaks again", 15*time.Second, func() bool {
		modes := []publish.Mode{first.State().Mode, second.State().Mode}
		return slices.Contains(modes, publish.Sending) && slices.Contains(modes, publish.Silent)
	})
	found := retained(t, broker)
	if len(found) != 2 || !strings.Contains(found["status"], `"observing"`) || !strings.Contains(found["path/07/landing"], "below-limits") {
		t.Errorf("after the broker came back it holds %v", found)
	}

	speaker, other := first, second
	if mode(second, publish.Sending)() {
		speaker, other = second, first
	}
	speaker.stop()
	found = retained(t, broker)
	if !strings.Contains(found["status"], "no-contact") || !strings.Contains(found["path/07/landing"], "not-observed") {
		t.Errorf("after a stop in order the broker holds %v", found)
	}
	until(t, "the other daemon takes over", 15*time.Second, mode(other, publish.Sending))
}

// BenchmarkDelayToTheBroker measures the way of an alert from being handed over
// to a reader behind a real broker, beside the load of retained values.
func BenchmarkDelayToTheBroker(b *testing.B) {
	broker := brokertest.Start(b)
	reader := subscribe(b, broker)
	d := start(b, broker, "first")
	until(b, "the daemon publishes", 10*time.Second, func() bool { return d.State().Mode == publish.Sending })
	var delays []time.Duration
	for b.Loop() {
		id := fmt.Sprint("d", len(delays))
		begun := time.Now()
		if err := d.Issue(open(id)); err != nil {
			b.Fatal(err)
		}
		alertsFrom(b, reader, id)
		delays = append(delays, time.Since(begun))
	}
	slices.Sort(delays)
	b.ReportMetric(float64(delays[len(delays)/2].Microseconds()), "p50-us")
	b.ReportMetric(float64(delays[len(delays)*99/100].Microseconds()), "p99-us")
}

var _ publish.Broker = (*feed.Publisher)(nil)
