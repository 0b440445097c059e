package feed

import (
	"testing"

	"sockline/sensors/feed/brokertest"
)

// TestSetTopics changes the topics of a subscription that is under way: what
// stays loses nothing and does not hear its retained message again, what is new
// comes, what is gone does not, and all of it holds over a new connection.
func TestSetTopics(t *testing.T) {
	b := brokertest.Start(t)
	out := publisher(t, Broker{URL: b.URL()}, nil)
	mustPublish(t, out, "a/stays", "retained", 1, true)
	states := make(chan LinkState, 100)
	in := subscribe(t, Broker{URL: b.URL()}, states, "a/stays", "a/gone")
	awaitState(t, states, patience, "the subscription", isSubscribed)
	expect := func(topic, payload string) {
		t.Helper()
		if m := await(t, in.Messages(), patience, "a message on "+topic); m.Topic != topic || string(m.Payload) != payload {
			t.Errorf("got %s %q, want %s %q", m.Topic, m.Payload, topic, payload)
		}
	}
	expect("a/stays", "retained")
	mustPublish(t, out, "a/gone", "1", 1, false)
	expect("a/gone", "1")
	if err := in.SetTopics(nil); err == nil {
		t.Error("a subscription to nothing is taken")
	}
	if err := in.SetTopics([]string{"a/new", "a/stays"}); err != nil {
		t.Fatal(err)
	}
	// The state does not change, so the subscription is known by its effect: a
	// message that comes proves that it was there before the unsubscribing, and
	// one that no more comes that both are done.
	poll(t, "the new topic to be heard and the old one to be silent", func() bool {
		mustPublish(t, out, "a/new", "probe", 1, false)
		mustPublish(t, out, "a/gone", "probe", 1, false)
		mustPublish(t, out, "a/stays", "end", 1, false)
		heard := map[string]bool{}
		for {
			m := await(t, in.Messages(), patience, "the end of a probe")
			heard[m.Topic] = true
			if m.Topic == "a/stays" {
				if string(m.Payload) != "end" {
					t.Errorf("a topic that stays repeats %q", m.Payload)
				}
				return heard["a/new"] && !heard["a/gone"]
			}
		}
	})
	b.Kill()
	awaitState(t, states, patience, "the loss", isLost)
	b.Run()
	awaitState(t, states, patience, "the subscription", isSubscribed)
	again := publisher(t, Broker{URL: b.URL()}, nil)
	mustPublish(t, again, "a/gone", "2", 1, false)
	mustPublish(t, again, "a/new", "2", 1, false)
	mustPublish(t, again, "a/stays", "2", 1, false)
	// The broker may have kept the retained message over its end or not.
	m := await(t, in.Messages(), patience, "a message")
	if m.Retained {
		m = await(t, in.Messages(), patience, "a message")
	}
	if m.Topic != "a/new" || string(m.Payload) != "2" {
		t.Errorf("after a new connection: %s %q", m.Topic, m.Payload)
	}
	expect("a/stays", "2")
}
