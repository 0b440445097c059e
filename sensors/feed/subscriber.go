package feed

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"sync"
	"sync/atomic"

	mqtt "github.com/eclipse/paho.mqtt.golang"
	"github.com/rs/zerolog"

	"sockline/sensors"
)

const (
	// DefaultQueue is the number of messages that may wait for the consumer:
	// over 3 min of 40 masts at 8 Hz.
	DefaultQueue = 65536
	// MaxPayload is the greatest payload taken, in bytes. A wind message has a
	// few hundred; the bound keeps a full queue within memory.
	MaxPayload = 64 << 10
)

// SubscribeOptions says what to receive and from where.
type SubscribeOptions struct {
	Broker   Broker
	ClientID string   // a name; the host and a random part are added
	Topics   []string // topic filters
	Queue    int      // messages that may wait; DefaultQueue if 0
	Clock    Stamper  // stamps the messages; a *Clock but for demonstrations
	Log      zerolog.Logger
	// OnState is called at each change of state, from one goroutine; it must
	// not call Close. May be nil.
	OnState func(connected, subscribed bool)
}

// Stamper gives the arrival stamp of a message. Stamps never go back. It is
// called for one message at a time, and must not wait for anything.
type Stamper interface {
	Stamp(topic string, payload []byte) sensors.Instant
}

// Subscriber is one connection on which messages come in. It never gives up:
// whatever happens to the broker, it connects and subscribes again.
type Subscriber struct {
	session *session
	clock   Stamper
	// order is held from the stamp to the queue, so that the queue is in the
	// order of the stamps whoever puts something into it.
	order    sync.Mutex
	queue    chan sensors.Message
	received atomic.Uint64
	dropped  atomic.Uint64
	oversize atomic.Uint64
}

// Subscribe starts a Subscriber, which lives until ctx ends or Close. It
// returns at once, with an error only for options that can never work; a
// broker that is not there yet is waited for.
func Subscribe(ctx context.Context, o SubscribeOptions) (*Subscriber, error) {
	switch {
	case len(o.Topics) == 0:
		return nil, errors.New("subscribe: there are no topics: name at least one")
	case o.Clock == nil:
		return nil, errors.New("subscribe: there is no clock to stamp messages with")
	case o.Queue < 0:
		return nil, fmt.Errorf("subscribe: a queue of %d messages: give 1 or more, or 0 for %d", o.Queue, DefaultQueue)
	case o.Queue == 0:
		o.Queue = DefaultQueue
	}
	s := &Subscriber{clock: o.Clock, queue: make(chan sensors.Message, o.Queue)}
	var err error
	s.session, err = openSession(ctx, sessionOptions{
		broker: o.Broker, name: o.ClientID, topics: o.Topics, log: o.Log, handler: s.take,
		onState: func(l LinkState) {
			if o.OnState != nil {
				o.OnState(l.Connected, l.Subscribed)
			}
		},
	})
	if err != nil {
		return nil, fmt.Errorf("subscribe: %w", err)
	}
	return s, nil
}

// take is the client's callback. It must never wait: a client whose callback
// blocks stops answering pings and is thrown out.
func (s *Subscriber) take(m mqtt.Message) {
	s.received.Add(1)
	payload := m.Payload()
	if len(payload) > MaxPayload {
		s.oversize.Add(1)
		return
	}
	if !s.put(sensors.Message{Topic: m.Topic(), Payload: bytes.Clone(payload), Retained: m.Retained()}) {
		s.dropped.Add(1)
	}
}

// put stamps a message and queues it; false if the queue is full.
func (s *Subscriber) put(m sensors.Message) bool {
	s.order.Lock()
	defer s.order.Unlock()
	m.Received = s.clock.Stamp(m.Topic, m.Payload)
	select {
	case s.queue <- m:
		return true
	default:
		return false
	}
}

// SetTopics puts other topic filters in the place of those subscribed to. It
// returns at once; State tells when all are granted. The queue and its order
// stay; messages of a topic that was given up may still come for a moment.
func (s *Subscriber) SetTopics(topics []string) error {
	if len(topics) == 0 {
		return errors.New("change the subscription: there are no topics: name at least one")
	}
	s.session.follow(topics)
	return nil
}

// Tick queues an empty message (no topic, no payload) with the stamp of this
// moment: whoever takes it from the queue has seen everything that arrived
// before. It never waits; with a full queue there is no need of it, because
// the messages ahead carry the time.
func (s *Subscriber) Tick() { s.put(sensors.Message{}) }

// Messages is the queue, in the order of the stamps. It is never closed; Done
// tells the end.
func (s *Subscriber) Messages() <-chan sensors.Message { return s.queue }

// Done is closed when the subscriber has ended.
func (s *Subscriber) Done() <-chan struct{} { return s.session.ended }

// State is the present state of the connection; its problem, if any, names
// what was refused or what failed.
func (s *Subscriber) State() LinkState { return s.session.get() }

// Received counts all messages that arrived, those dropped included.
func (s *Subscriber) Received() uint64 { return s.received.Load() }

// Dropped counts the messages lost because the queue was full.
func (s *Subscriber) Dropped() uint64 { return s.dropped.Load() }

// Oversize counts the messages refused for a payload above MaxPayload.
func (s *Subscriber) Oversize() uint64 { return s.oversize.Load() }

// Close ends the connection in order. It may be called more than once.
func (s *Subscriber) Close() { s.session.close() }
