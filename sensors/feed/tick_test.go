package feed

import (
	"testing"

	"sockline/sensors"
	"sockline/sensors/feed/brokertest"
)

// TestTicksKeepTheOrderOfStamps floods a subscriber with messages while ticks
// come from several goroutines: the queue is in the order of the stamps, and a
// full queue takes neither, without anyone waiting.
func TestTicksKeepTheOrderOfStamps(t *testing.T) {
	broker := brokertest.Start(t)
	s := subscribe(t, Broker{URL: broker.URL()}, nil, "ticks/#")
	poll(t, "the subscription", func() bool { return s.State().Subscribed })
	p := publisher(t, Broker{URL: broker.URL()}, nil)
	const messages, tickers, ticks = 500, 4, 500
	done := make(chan struct{})
	for range tickers {
		go func() {
			for range ticks {
				s.Tick()
			}
			done <- struct{}{}
		}()
	}
	for i := range messages {
		if err := p.Publish("ticks/a", []byte{byte(i)}, 0, false); err != nil {
			t.Fatal(err)
		}
	}
	for range tickers {
		<-done
	}
	var last sensors.Instant
	empty, full := 0, 0
	for empty+full < messages+tickers*ticks {
		m := await(t, s.Messages(), patience, "a message or a tick")
		if m.Received < last {
			t.Fatalf("stamp %v after %v", m.Received, last)
		}
		if last = m.Received; m.Topic == "" {
			empty++
		} else {
			full++
		}
	}
	if empty != tickers*ticks || full != messages {
		t.Errorf("%d ticks and %d messages came out, want %d and %d", empty, full, tickers*ticks, messages)
	}
	for range DefaultQueue + 10 { // more than there is room for
		s.Tick()
	}
	if got := len(s.Messages()); got != DefaultQueue {
		t.Errorf("the full queue holds %d, want %d", got, DefaultQueue)
	}
	if s.Dropped() != 0 {
		t.Errorf("%d skipped ticks count as lost messages", s.Dropped())
	}
}
