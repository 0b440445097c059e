package feed

import (
	"io"
	"strings"
	"sync/atomic"
	"testing"

	"github.com/rs/zerolog"
)

func TestEmbeddedBroker(t *testing.T) {
	var heard, loud atomic.Int64
	log := zerolog.New(io.Discard).Hook(zerolog.HookFunc(func(_ *zerolog.Event, level zerolog.Level, _ string) {
		heard.Add(1)
		if level > zerolog.DebugLevel {
			loud.Add(1)
		}
	}))
	b, err := StartBroker("127.0.0.1:0", BrokerOptions{Log: log})
	if err != nil {
		t.Fatal(err)
	}
	defer b.Close()
	if err := b.Publish("a/retained", []byte("kept"), 1, true); err != nil {
		t.Fatal(err)
	}
	states := make(chan LinkState, 100)
	in := subscribe(t, Broker{URL: b.URL()}, states, "a/#")
	awaitState(t, states, patience, "the subscription", isSubscribed)
	if m := await(t, in.Messages(), patience, "the retained message"); string(m.Payload) != "kept" || !m.Retained {
		t.Errorf("got %+v", m)
	}
	for qos := range byte(2) {
		if err := b.Publish("a/inside", []byte("1"), qos, false); err != nil {
			t.Fatal(err)
		}
		if m := await(t, in.Messages(), patience, "a message from inside"); m.Topic != "a/inside" {
			t.Errorf("got %+v", m)
		}
	}
	out := publisher(t, Broker{URL: b.URL()}, &Will{Topic: "a/will", Payload: []byte("gone")})
	mustPublish(t, out, "a/outside", "2", 1, false)
	if m := await(t, in.Messages(), patience, "a message from a client"); m.Topic != "a/outside" || string(m.Payload) != "2" {
		t.Errorf("got %+v", m)
	}
	if err := b.Close(); err != nil {
		t.Error(err)
	}
	awaitState(t, states, patience, "the loss to be noticed", isLost)
	if err := b.Close(); err != nil {
		t.Error(err)
	}
	if heard.Load() == 0 || loud.Load() > 0 {
		t.Errorf("the broker logged %d lines, %d of them above debug level", heard.Load(), loud.Load())
	}
}

func TestEmbeddedBrokerStaysOnLoopback(t *testing.T) {
	for _, addr := range []string{"0.0.0.0:0", "[::]:0", "192.0.2.1:0", "example.invalid:0"} {
		b, err := StartBroker(addr, BrokerOptions{})
		if err == nil {
			b.Close()
			t.Errorf("%s: started", addr)
		} else if !strings.Contains(err.Error(), "use 127.0.0.1:0") {
			t.Errorf("%s: error %q does not name the mend", addr, err)
		}
	}
	for _, addr := range []string{"127.0.0.1", "", "127.0.0.1:99999"} {
		if b, err := StartBroker(addr, BrokerOptions{}); err == nil {
			b.Close()
			t.Errorf("%q: started", addr)
		}
	}
	for _, addr := range []string{":0", "localhost:0", "127.0.0.1:0"} {
		b, err := StartBroker(addr, BrokerOptions{})
		if err != nil {
			t.Errorf("%s: %v", addr, err)
			continue
		}
		if !strings.HasPrefix(b.Addr(), "127.0.0.1:") {
			t.Errorf("%s: listens on %s", addr, b.Addr())
		}
		if err := b.Close(); err != nil {
			t.Error(err)
		}
	}
	first, err := StartBroker("127.0.0.1:0", BrokerOptions{})
	if err != nil {
		t.Fatal(err)
	}
	defer first.Close()
	if second, err := StartBroker(first.Addr(), BrokerOptions{}); err == nil {
		second.Close()
		t.Error("two brokers on one port")
	} else if !strings.Contains(err.Error(), "another port") {
		t.Errorf("error %q does not name the mend", err)
	}
}
