package publish

import (
	"context"
	"fmt"
	"sync"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"
)

// Mode is what the sink is doing.
type Mode string

// The modes.
const (
	Unconnected Mode = "unconnected" // no broker
	Listening   Mode = "listening"   // connected, waiting whether another instance lives
	Silent      Mode = "silent"      // another instance speaks under this prefix
	Sending     Mode = "sending"
	Stopped     Mode = "stopped"
)

// State is what the sink can say of itself.
type State struct {
	Mode    Mode
	Other   string // the instance that speaks in our place, when Silent
	Waiting int    // issues not yet sent
	Issues  uint64 // issues sent
	Delayed uint64 // of these, sent as delayed
	Values  uint64 // retained values sent
	Failed  uint64 // sendings that the broker did not take
	Lost    uint64 // issues given up because the queue was full
	Refused uint64 // exercise issues kept from a live prefix
}

// Sink brings issues and retained values to the broker. Its setters may be
// called from any goroutine and never wait for the broker.
type Sink struct {
	broker Broker
	opts   Options
	log    zerolog.Logger
	wake   chan struct{}
	state  atomic.Pointer[State]

	// mu guards what the setters share with Run. It is never held while the
	// broker is spoken to: a setter waits for a map access at most.
	mu        sync.Mutex
	queue     *queue
	shelf     *shelf
	others    *others
	connected bool // a new session was reported and not yet taken note of
	refused   uint64

	// The rest belongs to Run.
	mode       Mode
	listenEnd  time.Time
	lastStatus time.Time // when the broker last took our status
	failing    bool
	told       State
}

// New makes a sink that sends to broker once Run runs.
func New(broker Broker, opts Options) (*Sink, error) {
	if err := opts.check(); err != nil {
		return nil, err
	}
	if opts.MaxAlerts <= 0 {
		opts.MaxAlerts = defaultMaxAlerts
	}
	if opts.Listen <= 0 {
		opts.Listen = ListenFor
	}
	s := &Sink{
		broker: broker,
		opts:   opts,
		log:    opts.Log,
		wake:   make(chan struct{}, 1),
		queue:  newQueue(opts.MaxAlerts),
		shelf:  newShelf(),
		others: newOthers(opts.Instance),
		mode:   Unconnected,
	}
	s.state.Store(&State{Mode: Unconnected})
	return s, nil
}

// State is what the sink last said of itself.
func (s *Sink) State() State { return *s.state.Load() }

// Issue hands an issue over. The only error is that of an exercise alert under
// a live prefix, which is never sent.
func (s *Sink) Issue(i Issue) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if i.Exercise && !s.opts.Exercise {
		s.refused++
		return fmt.Errorf("publish alert %s: %w", i.AlertID, errExercise)
	}
	s.queue.put(i, s.opts.Now())
	s.nudge()
	return nil
}

func (s *Sink) retain(topic, state string, every time.Duration, payload []byte) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.shelf.set(topic, state, every, payload) {
		s.nudge()
	}
}

// OnConnect tells the sink that the connection is new. Run sees a connection
// come and go by itself; this catches one that was lost and found between two
// looks.
func (s *Sink) OnConnect() {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.connected = true
	s.nudge()
}

// ObserveStatus takes every payload seen on our status topic, our own ones
// included. It may be called from an MQTT callback.
func (s *Sink) ObserveStatus(payload []byte) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.others.observe(payload, s.opts.Now()) == heardSilence {
		// A will that came late has taken the place of the living status.
		s.shelf.repeat(statusTopic)
		s.nudge()
	}
}

// nudge wakes Run; one nudge stands for many.
func (s *Sink) nudge() {
	select {
	case s.wake <- struct{}{}:
	default:
	}
}

// Run sends until ctx is done, then says farewell and returns; the connection
// must live until then. Run is to be called once.
func (s *Sink) Run(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			s.farewell()
			return
		case <-s.opts.Tick:
			s.turn(ctx)
		case <-s.wake:
			// While the broker refuses what we send, only the tick tries
			// again: a caller must not set the pace of retries.
			if !s.failing {
				s.turn(ctx)
			}
		}
	}
}

// turn does what there is to do at this moment.
func (s *Sink) turn(ctx context.Context) {
	defer s.report()
	now := s.opts.Now()
	if !s.look(now) {
		return
	}
	s.drain(func() bool { return ctx.Err() != nil })
}

// look decides which mode we are in, and reports whether we may send.
func (s *Sink) look(now time.Time) bool {
	s.mu.Lock()
	fresh := s.connected
	s.connected = false
	other := s.others.alive(now)
	if fresh {
		s.shelf.again()
	}
	s.mu.Unlock()

	if !s.broker.Connected() {
		s.enter(Unconnected, "")
		return false
	}
	if s.mode == Unconnected || fresh {
		s.beginSession(now)
	}
	switch s.mode {
	case Listening, Silent:
		if other != "" {
			s.enter(Silent, other)
			s.mu.Lock()
			s.queue.forgetToldByOther(now.Add(-otherTold))
			s.mu.Unlock()
			return false
		}
		if now.Before(s.listenEnd) {
			return false
		}
		return s.begin()
	case Sending:
		// Two that began in the same seconds, or on two sides of a broken
		// bridge: the greater name gives way, so exactly one remains.
		if other != "" && other < s.opts.Instance {
			s.enter(Silent, other)
			return false
		}
	}
	return true
}

// beginSession starts a new connection: everything is to be told again. If
// our last status is still valid nobody can have taken our place, and alerts
// need not wait.
func (s *Sink) beginSession(now time.Time) {
	s.mu.Lock()
	s.shelf.again()
	s.mu.Unlock()
	if !s.lastStatus.IsZero() && now.Sub(s.lastStatus) < resumeWithin {
		s.enter(Sending, "")
		return
	}
	s.listenEnd = now.Add(s.opts.Listen)
	s.enter(Listening, "")
}

// begin starts to speak. What is retained may be of an earlier life, so every
// path is first set to not observed.
func (s *Sink) begin() bool {
	for _, r := range s.opts.NotObserved() {
		if !s.send(r.Topic, r.Payload, qosAlert, true) {
			return false // still listening; tried again at the next tick
		}
	}
	s.mu.Lock()
	s.shelf.again()
	s.mu.Unlock()
	s.enter(Sending, "")
	return true
}

// drain sends what waits, alerts first: after each retained value it looks
// for an alert again, so that an alert never waits for more than one value.
func (s *Sink) drain(stop func() bool) {
	for !stop() {
		now := s.opts.Now()
		s.mu.Lock()
		issue := s.queue.next()
		topic, v, due := s.shelf.next(now)
		s.mu.Unlock()
		switch {
		case issue != nil:
			if !s.sendIssue(issue, now) {
				return
			}
		case due:
			if !s.send(topic, v.payload, v.qos(), topic != heartbeatTopic) {
				return
			}
			s.told.Values++
			if topic == statusTopic {
				s.lastStatus = s.opts.Now()
			}
			s.mu.Lock()
			s.shelf.sent(topic, v, now)
			s.mu.Unlock()
		default:
			return
		}
	}
}

func (s *Sink) sendIssue(w *queued, now time.Time) bool {
	delayed := now.Sub(w.handed) > LateAfter
	topic := w.issue.Topic
	if topic == "" {
		topic = alertTopic
	}
	if !s.send(topic, w.issue.JSON(delayed), qosAlert, false) {
		return false
	}
	s.told.Issues++
	if delayed {
		s.told.Delayed++
	}
	s.mu.Lock()
	s.queue.sent(w)
	s.mu.Unlock()
	return true
}

// send publishes below the prefix and notes whether the broker takes what we
// send; a change of that is one line in the log.
func (s *Sink) send(topic string, payload []byte, qos byte, retained bool) bool {
	err := s.broker.Publish(s.opts.Prefix+"/"+topic, payload, qos, retained)
	if err != nil {
		s.told.Failed++
		if !s.failing {
			s.log.Error().Err(err).Str("topic", s.opts.Prefix+"/"+topic).
				Msg("the broker does not take what is published; trying again")
		}
	} else if s.failing {
		s.log.Info().Uint64("failed", s.told.Failed).Msg("the broker takes what is published again")
	}
	s.failing = err != nil
	return err == nil
}

// enter changes the mode and logs the change.
func (s *Sink) enter(m Mode, other string) {
	if m == s.mode && other == s.told.Other {
		return
	}
	s.mode, s.told.Other = m, other
	line := s.log.Info()
	if m == Silent {
		s.lastStatus = time.Time{} // our place is taken: no resuming without listening
		line = s.log.Warn().Str("other", other)
	}
	line.Str("mode", string(m)).Str("prefix", s.opts.Prefix).Msg(m.meaning())
}

// meaning says in words what a mode means for the receivers.
func (m Mode) meaning() string {
	switch m {
	case Unconnected:
		return "no connection to the broker; alerts wait"
	case Listening:
		return "connected; listening whether another instance publishes under this prefix"
	case Silent:
		return "another instance publishes under this prefix; this one stays silent. " +
			"Stop one of them, or give them different prefixes"
	case Sending:
		return "publishing"
	case Stopped:
		return "publishing has ended"
	}
	return string(m)
}

// report makes the state visible.
func (s *Sink) report() {
	s.mu.Lock()
	lost := s.queue.lost
	s.told.Waiting = s.queue.waiting()
	s.told.Refused = s.refused
	s.mu.Unlock()
	if lost > s.told.Lost {
		s.log.Error().Uint64("lost", lost).Msg("too many alerts wait for the broker; the oldest closed ones were given up")
	}
	s.told.Lost = lost
	s.told.Mode = s.mode
	now := s.told
	s.state.Store(&now)
}

// farewell sends what still waits, sets every path to not observed and leaves
// the last status. A sink that was not sending leaves the topics alone: they
// are another's.
func (s *Sink) farewell() {
	defer s.report()
	if s.mode == Sending && s.broker.Connected() {
		end := s.opts.Now().Add(farewellWithin)
		s.drain(func() bool { return s.opts.Now().After(end) })
		ok := !s.failing
		for _, r := range s.opts.NotObserved() {
			ok = ok && s.send(r.Topic, r.Payload, qosAlert, true)
		}
		if ok {
			s.send(statusTopic, s.opts.Farewell(), qosAlert, true)
		}
	}
	s.mu.Lock()
	waiting := s.queue.waiting()
	s.mu.Unlock()
	if waiting > 0 {
		s.log.Warn().Int("waiting", waiting).Msg("stopped before every issue of an alert was published")
	}
	s.enter(Stopped, "")
}
