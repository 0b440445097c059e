package feed

import (
	"bytes"
	"context"
	"fmt"
	"sync"
	"sync/atomic"
	"time"

	mqtt "github.com/eclipse/paho.mqtt.golang"
	"github.com/rs/zerolog"

	"sockline/sensors"
)

// publishTimeout bounds one Publish, from the call to the broker's
// acknowledgement.
const publishTimeout = 3 * time.Second

// watchQueue is the number of watched messages that may wait for their
// functions.
const watchQueue = 256

// Will is the message that the broker sends, retained, in our name when our
// connection ends without a goodbye.
type Will struct {
	Topic   string
	Payload []byte
}

// PublisherOptions says where to send, and what to leave behind.
type PublisherOptions struct {
	Broker   Broker
	ClientID string // a name; the host and a random part are added
	Will     *Will  // nil for none
	Log      zerolog.Logger
	// OnConnect is called after each connection, the first included, from the
	// session's goroutine, which it holds up: it should only tell the owner's
	// own goroutine to send its retained state again. May be nil.
	OnConnect func()
	// OnState is called at each change of state. May be nil.
	OnState func(connected bool)
}

// Publisher is one connection on which messages go out. It keeps no queue:
// what cannot be sent is returned as an error, and the owner decides.
type Publisher struct {
	session *session
	watched chan sensors.Message
	missed  atomic.Uint64

	mu      sync.Mutex
	watches []watch
}

type watch struct {
	topic string
	fn    func(payload []byte)
}

// NewPublisher starts a Publisher, which lives until ctx ends or Close. It
// returns at once, with an error only for options that can never work; a
// broker that is not there yet is waited for.
func NewPublisher(ctx context.Context, o PublisherOptions) (*Publisher, error) {
	p := &Publisher{watched: make(chan sensors.Message, watchQueue)}
	var err error
	p.session, err = openSession(ctx, sessionOptions{
		broker: o.Broker, name: o.ClientID, will: o.Will, log: o.Log, handler: p.take, onConnect: o.OnConnect,
		onState: func(l LinkState) {
			if o.OnState != nil {
				o.OnState(l.Connected)
			}
		},
	})
	if err != nil {
		return nil, fmt.Errorf("open the connection for publishing: %w", err)
	}
	go p.deliver()
	return p, nil
}

// Publish sends one message and waits, 3 s at most, until it is with the
// broker (QoS 1) or handed to the connection (QoS 0). An error means that it
// may or may not have arrived. At QoS 1 the client itself sends again, after a
// reconnection, what was under way when a connection broke: a receiver may see
// a message twice. The payload is copied.
func (p *Publisher) Publish(topic string, payload []byte, qos byte, retained bool) error {
	// Without a connection the client would keep the message and send it at
	// the next one, however old it is by then.
	if !p.Connected() {
		return fmt.Errorf("publish to %s: %w", topic, errNotConnected)
	}
	start := time.Now()
	token := p.session.client.Publish(topic, qos, retained, bytes.Clone(payload))
	if !token.WaitTimeout(publishTimeout - time.Since(start)) {
		return fmt.Errorf("publish to %s: no acknowledgement within %v", topic, publishTimeout)
	}
	if err := token.Error(); err != nil {
		return fmt.Errorf("publish to %s: %w", topic, err)
	}
	// At QoS 0 the client reports success for what it threw away because the
	// connection broke meanwhile.
	if qos == 0 && !p.Connected() {
		return fmt.Errorf("publish to %s: %w", topic, errNotConnected)
	}
	return nil
}

// Connected reports whether there is a connection now.
func (p *Publisher) Connected() bool { return p.session.client.IsConnectionOpen() }

// State is the present state of the connection; Subscribed is about watches.
func (p *Publisher) State() LinkState { return p.session.get() }

// WatchRetained listens to topic on the publisher's own connection: fn gets
// the retained message, if there is one, and each later message, our own
// included, one at a time. fn runs on a goroutine of the Publisher and may
// publish. The watch holds over reconnections, after which the retained
// message comes again.
func (p *Publisher) WatchRetained(topic string, fn func(payload []byte)) {
	p.mu.Lock()
	p.watches = append(p.watches, watch{topic, fn})
	p.mu.Unlock()
	p.session.watch(topic)
}

// MissedWatched counts the watched messages lost because the functions were
// too slow for them.
func (p *Publisher) MissedWatched() uint64 { return p.missed.Load() }

// take is the client's callback; like the Subscriber's, it never waits.
func (p *Publisher) take(m mqtt.Message) {
	select {
	case p.watched <- sensors.Message{Topic: m.Topic(), Payload: bytes.Clone(m.Payload())}:
	default:
		p.missed.Add(1)
	}
}

// deliver hands watched messages to their functions until the session ends.
func (p *Publisher) deliver() {
	for {
		select {
		case <-p.session.ended:
			return
		case m := <-p.watched:
			p.mu.Lock()
			watches := p.watches[:len(p.watches):len(p.watches)]
			p.mu.Unlock()
			for _, w := range watches {
				if w.topic == m.Topic {
					w.fn(m.Payload)
				}
			}
		}
	}
}

// Done is closed when the publisher has ended.
func (p *Publisher) Done() <-chan struct{} { return p.session.ended }

// Close ends the connection in order, so that the broker does not send the
// will. It may be called more than once.
func (p *Publisher) Close() { p.session.close() }
