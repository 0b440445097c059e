package feed

import (
	"context"
	"errors"
	"fmt"
	"net"
	"net/url"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	mqtt "github.com/eclipse/paho.mqtt.golang"
	"github.com/rs/zerolog"
)

const (
	// clientPause is the client's own pause between attempts. It sleeps through
	// it, deaf to Close, so the real pause is ours (retryPause), in dial. Left
	// alone it would double up to 10 min.
	clientPause = 10 * time.Millisecond
	// subscribeTimeout bounds the wait for the broker's answer, whose token
	// never completes when the connection dies at the wrong moment.
	subscribeTimeout = 3 * time.Second
	// resubscribePause is the time until a refused subscription is asked for
	// again: an access list may be mended while we run.
	resubscribePause = 5 * time.Second
	// quiesce is how long an orderly goodbye may take, in ms.
	quiesce = 250
	// subscribeQoS is the highest quality of service accepted; the publisher
	// chooses below it. Level 2 buys nothing for wind.
	subscribeQoS byte = 1
	// refused is the return code of a refused subscription, MQTT 3.1.1
	// section 3.9.3 (from memory).
	refused byte = 0x80
)

// LinkState is the state of a connection to a broker.
type LinkState struct {
	Connected  bool
	Subscribed bool  // every topic is granted; true for a connection without topics
	Problem    error // why not, nil if all is well or nothing is known yet
}

// errNotConnected is returned for what needs a connection when there is none.
var errNotConnected = errors.New("not connected to the broker")

// session is one MQTT client for its whole life: it connects, stays connected,
// and keeps its subscriptions. All that the client's callbacks do is wake one
// goroutine, supervise, which looks at the client and acts; so states are
// reported in order, although the client starts a goroutine for each callback.
type session struct {
	client    mqtt.Client
	log       zerolog.Logger
	onState   func(LinkState)
	onConnect func()

	cancel context.CancelFunc
	ended  chan struct{}
	wake   chan struct{}
	// generation counts the connections made, so that a loss and a new
	// connection between two looks is not taken for the old connection.
	generation atomic.Uint64

	mu     sync.Mutex
	topics []string
	state  LinkState
	why    error // why there was no connection, the last time there was none
	told   bool  // the present outage has been logged
}

type sessionOptions struct {
	broker    Broker
	name      string // of the client; host and a random part are added
	topics    []string
	will      *Will
	handler   func(mqtt.Message)
	log       zerolog.Logger
	onState   func(LinkState)
	onConnect func()
}

// openSession checks the options and starts connecting. It returns before
// there is a connection; the first one is retried like any other. The session
// ends with ctx or close.
func openSession(ctx context.Context, o sessionOptions) (*session, error) {
	end, err := o.broker.resolve()
	if err != nil {
		return nil, err
	}
	id, err := uniqueID(o.name)
	if err != nil {
		return nil, err
	}
	ctx, cancel := context.WithCancel(ctx)
	s := &session{
		log:     o.log.With().Str("broker", end.url.Host).Str("client", id).Logger(),
		onState: o.onState, onConnect: o.onConnect,
		cancel: cancel, ended: make(chan struct{}), wake: make(chan struct{}, 1),
		topics: slices.Clone(o.topics),
	}
	c := mqtt.NewClientOptions()
	c.AddBroker(end.url.String()).SetClientID(id).SetUsername(end.username).SetPassword(end.password)
	c.SetProtocolVersion(4) // else each failed attempt is followed by one with MQTT 3.1
	c.SetCleanSession(true).SetAutoReconnect(true).SetResumeSubs(false)
	c.SetConnectRetry(true).SetConnectRetryInterval(clientPause).SetMaxReconnectInterval(clientPause)
	c.SetKeepAlive(keepAlive).SetPingTimeout(pingTimeout)
	// The client counts our pause as time to connect; link has the real bound.
	c.SetConnectTimeout(retryPause + dialTimeout + handshakeTimeout).SetWriteTimeout(writeTimeout)
	attempts := &pace{}
	unacked := newUnacked()
	c.SetStore(unacked)
	// The default handler takes everything: routes could miss what a broker
	// sends between connect and subscribe.
	c.SetDefaultPublishHandler(func(_ mqtt.Client, m mqtt.Message) { o.handler(m) })
	c.SetCustomOpenConnectionFn(func(*url.URL, mqtt.ClientOptions) (net.Conn, error) {
		if err := attempts.wait(ctx); err != nil {
			return nil, err
		}
		unacked.newConnection()
		return end.dial(ctx)
	})
	c.SetOnConnectHandler(func(mqtt.Client) { s.generation.Add(1); s.rouse() })
	c.SetConnectionLostHandler(func(_ mqtt.Client, err error) { s.lost(err) })
	c.SetConnectionNotificationHandler(func(_ mqtt.Client, n mqtt.ConnectionNotification) {
		if failed, ok := n.(mqtt.ConnectionNotificationFailed); ok && ctx.Err() == nil {
			s.unreachable(failed.Reason)
		}
	})
	if o.will != nil {
		c.SetBinaryWill(o.will.Topic, o.will.Payload, 1, true)
	}
	s.client = mqtt.NewClient(c)
	s.client.Connect() // its token says nothing that the callbacks do not
	go s.supervise(ctx)
	return s, nil
}

// supervise is the session's own goroutine.
func (s *session) supervise(ctx context.Context) {
	defer close(s.ended)
	defer s.client.Disconnect(quiesce)
	var (
		announced uint64   // generation for which onConnect was called
		served    uint64   // generation that holds the subscriptions...
		granted   []string // ...to these topics
		tried     uint64   // generation on which subscriptions were asked for...
		asked     []string // ...for these topics
	)
	for {
		var again <-chan time.Time
		generation, topics := s.generation.Load(), s.wanted()
		switch {
		case generation == 0 || !s.client.IsConnectionOpen():
			s.note(LinkState{})
		case generation != served || !slices.Equal(topics, granted):
			if generation != announced {
				s.note(LinkState{Connected: true})
			}
			if generation != tried {
				tried, granted, asked = generation, nil, nil // a new connection holds none
			}
			var err error
			asked, err = s.change(granted, asked, topics)
			if err == nil {
				served, granted = generation, topics
			} else {
				again = time.After(resubscribePause)
			}
			s.note(LinkState{Connected: true, Subscribed: err == nil, Problem: err})
			// After subscribing, so that what the owner sends in answer finds
			// its own watch in place; also when refused, because sending may
			// be allowed where reading is not.
			if generation != announced {
				announced = generation
				if s.onConnect != nil {
					s.onConnect()
				}
			}
		}
		select {
		case <-ctx.Done():
			return
		case <-s.wake:
		case <-again:
		}
	}
}

// change brings the subscriptions to the topics that are wanted: what is
// granted is not asked for again, because the broker would repeat its retained
// message; what was asked for and is wanted no more is given up. It returns
// what is still asked for.
func (s *session) change(granted, asked, wanted []string) (rest []string, err error) {
	var fresh, gone []string
	for _, t := range wanted {
		if !slices.Contains(granted, t) {
			fresh = append(fresh, t)
		}
	}
	for _, t := range asked {
		if !slices.Contains(wanted, t) {
			gone = append(gone, t)
		}
	}
	err = s.subscribe(fresh)
	if len(gone) == 0 {
		return wanted, err
	}
	token := s.client.Unsubscribe(gone...)
	ended := errors.New("no answer within " + subscribeTimeout.String())
	if token.WaitTimeout(subscribeTimeout) {
		ended = token.Error()
	}
	if ended != nil {
		return slices.Concat(wanted, gone), errors.Join(err, fmt.Errorf("end the subscription to %s: %w", strings.Join(gone, ", "), ended))
	}
	return wanted, err
}

// subscribe asks for all topics and reads the broker's answer for each.
func (s *session) subscribe(topics []string) error {
	if len(topics) == 0 {
		return nil
	}
	filters := make(map[string]byte, len(topics))
	for _, t := range topics {
		filters[t] = subscribeQoS
	}
	token := s.client.SubscribeMultiple(filters, nil)
	if !token.WaitTimeout(subscribeTimeout) {
		return fmt.Errorf("subscribe to %s: no answer within %v", strings.Join(topics, ", "), subscribeTimeout)
	}
	if err := token.Error(); err != nil {
		return fmt.Errorf("subscribe to %s: %w", strings.Join(topics, ", "), err)
	}
	answer, ok := token.(*mqtt.SubscribeToken)
	if !ok {
		return fmt.Errorf("subscribe to %s: the client gave no answer to read", strings.Join(topics, ", "))
	}
	codes := answer.Result()
	var denied []string
	for _, t := range topics {
		if code, ok := codes[t]; !ok || code == refused {
			denied = append(denied, t)
		}
	}
	if len(denied) > 0 {
		return fmt.Errorf("the broker refuses the subscription to %s: let this user read it in the broker's access list", strings.Join(denied, ", "))
	}
	return nil
}

// watch adds a topic to the subscriptions.
func (s *session) watch(topic string) {
	s.mu.Lock()
	if !slices.Contains(s.topics, topic) {
		// A new slice: supervise compares the old one with it.
		s.topics = append(slices.Clone(s.topics), topic)
	}
	s.mu.Unlock()
	s.rouse()
}

// follow puts other topics in the place of those subscribed to.
func (s *session) follow(topics []string) {
	s.mu.Lock()
	s.topics = slices.Clone(topics)
	s.mu.Unlock()
	s.rouse()
}

func (s *session) wanted() []string {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.topics
}

func (s *session) get() LinkState {
	s.mu.Lock()
	defer s.mu.Unlock()
	state := s.state
	if !state.Connected {
		state.Problem = s.why
	}
	return state
}

// lost and unreachable note why there is no connection; supervise then sees
// that there is none. The client may call lost late, when there is a new
// connection already: that is why the reason does not go into the state.
func (s *session) lost(err error) {
	s.mu.Lock()
	s.why = fmt.Errorf("the connection to the broker was lost: %w", err)
	s.told = true
	s.mu.Unlock()
	s.log.Warn().Err(err).Msg("connection to the broker lost")
	s.rouse()
}

func (s *session) unreachable(err error) {
	s.mu.Lock()
	s.why = fmt.Errorf("no connection to the broker: %w", err)
	told := s.told
	s.told = true
	s.mu.Unlock()
	if !told { // one line an outage, not one an attempt
		s.log.Warn().Err(err).Stringer("retry", retryPause).Msg("no connection to the broker")
	}
	s.rouse()
}

// note stores a state and reports it if it differs. Called by supervise only.
func (s *session) note(next LinkState) {
	s.mu.Lock()
	last := s.state
	s.state = next
	if next.Connected {
		s.told = false
	}
	s.mu.Unlock()
	if last.Connected == next.Connected && last.Subscribed == next.Subscribed && text(last.Problem) == text(next.Problem) {
		return
	}
	switch {
	case next.Connected && next.Problem != nil:
		s.log.Error().Err(next.Problem).Msg("connected to the broker but not subscribed")
	case next.Subscribed:
		s.log.Info().Int("topics", len(s.wanted())).Msg("connected to the broker")
	}
	if s.onState != nil {
		s.onState(next)
	}
}

func text(err error) string {
	if err == nil {
		return ""
	}
	return err.Error()
}

// rouse wakes supervise; a wake that is already waiting is enough.
func (s *session) rouse() {
	select {
	case s.wake <- struct{}{}:
	default:
	}
}

// close says goodbye to the broker and returns when the session has ended.
func (s *session) close() {
	s.cancel()
	<-s.ended
}
