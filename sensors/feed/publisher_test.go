package feed

import (
	"strings"
	"testing"

	"sockline/sensors/feed/brokertest"
)

func TestWillIsPublishedOnACutConnectionOnly(t *testing.T) {
	b := brokertest.Start(t)
	relay := brokertest.StartRelay(t, b.Addr())
	states := make(chan LinkState, 100)
	in := subscribe(t, Broker{URL: b.URL()}, states, "a/status")
	awaitState(t, states, patience, "the subscription", isSubscribed)

	again := make(chan struct{}, 100)
	out, err := NewPublisher(t.Context(), PublisherOptions{
		Broker: Broker{URL: relay.URL()}, ClientID: "feed-test-out",
		Will:      &Will{Topic: "a/status", Payload: []byte("gone")},
		OnConnect: func() { again <- struct{}{} },
	})
	if err != nil {
		t.Fatal(err)
	}
	defer out.Close()
	await(t, again, patience, "the publisher to connect")
	mustPublish(t, out, "a/status", "here", 1, true)
	if m := await(t, in.Messages(), patience, "the status"); string(m.Payload) != "here" {
		t.Errorf("status %q", m.Payload)
	}
	relay.Cut()
	if m := await(t, in.Messages(), patience, "the will"); string(m.Payload) != "gone" {
		t.Errorf("after the cut the status is %q, want the will", m.Payload)
	}
	// The owner is told to send its retained state again.
	await(t, again, patience, "the publisher to connect again")
	mustPublish(t, out, "a/status", "here again", 1, true)
	if m := await(t, in.Messages(), patience, "the status"); string(m.Payload) != "here again" {
		t.Errorf("status %q", m.Payload)
	}
	out.Close()
	if err := out.Publish("a/status", []byte("x"), 1, true); err == nil {
		t.Error("publishing after Close gives no error")
	}
	// A goodbye leaves no will: the next message is one sent after it.
	other := publisher(t, Broker{URL: b.URL()}, nil)
	mustPublish(t, other, "a/status", "after the goodbye", 1, false)
	if m := await(t, in.Messages(), patience, "a message"); string(m.Payload) != "after the goodbye" {
		t.Errorf("after an orderly end came %q", m.Payload)
	}
}

func TestWatchRetained(t *testing.T) {
	b := brokertest.Start(t)
	first := publisher(t, Broker{URL: b.URL()}, nil)
	mustPublish(t, first, "p/status", "first", 1, true)

	relay := brokertest.StartRelay(t, b.Addr())
	second := publisher(t, Broker{URL: relay.URL()}, nil)
	seen := make(chan string, 100)
	second.WatchRetained("p/status", func(payload []byte) { seen <- string(payload) })
	second.WatchRetained("p/other", func([]byte) { t.Error("called for another topic") })
	if got := await(t, seen, patience, "the retained status"); got != "first" {
		t.Errorf("saw %q", got)
	}
	mustPublish(t, first, "p/status", "second", 1, true)
	for await(t, seen, patience, "the next status") != "second" {
		// Adding the second watch brings what is retained once more.
	}
	relay.Cut()
	if got := await(t, seen, patience, "the retained status after a reconnection"); got != "second" {
		t.Errorf("saw %q", got)
	}
	if n := second.MissedWatched(); n != 0 {
		t.Errorf("missed %d", n)
	}
}

func TestPublishWithoutABroker(t *testing.T) {
	p, err := NewPublisher(t.Context(), PublisherOptions{Broker: Broker{URL: "mqtt://127.0.0.1:1"}, ClientID: "x"})
	if err != nil {
		t.Fatal(err)
	}
	defer p.Close()
	if p := awaitProblem(t, p.State); !strings.Contains(p, "127.0.0.1:1") {
		t.Errorf("problem %q does not name the broker", p)
	}
	for qos := range byte(2) {
		if err := p.Publish("a", nil, qos, false); err == nil {
			t.Errorf("QoS %d: publishing without a broker gives no error", qos)
		}
	}
	if p.Connected() {
		t.Error("connected to nothing")
	}
	p.Close()
	await(t, p.Done(), patience, "the end")
}

func TestWatchThatIsTooSlow(t *testing.T) {
	b := brokertest.Start(t, "max_queued_messages 10000")
	watcher := publisher(t, Broker{URL: b.URL()}, nil)
	first, release := make(chan struct{}, watchQueue*2), make(chan struct{})
	watcher.WatchRetained("p/status", func([]byte) { first <- struct{}{}; <-release })
	out := publisher(t, Broker{URL: b.URL()}, nil)
	mustPublish(t, out, "p/status", "0", 1, true)
	await(t, first, patience, "the first call")
	// One message is in the function and watchQueue wait; three are too many.
	for range watchQueue + 3 {
		mustPublish(t, out, "p/status", "1", 1, false)
	}
	poll(t, "the rest to be counted", func() bool { return watcher.MissedWatched() == 3 })
	close(release)
	mustPublish(t, watcher, "p/other", "the connection is alive", 1, false)
}
