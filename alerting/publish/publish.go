// Package publish takes issued notices and the retained values of status,
// paths and stations, and brings them to an MQTT broker without ever making
// the caller wait. It is the last stage on the way out; beside it stands page.
//
// What it promises:
//
//   - The opening and the closing of an alert are kept until the broker has
//     them; of the updates between them only the newest is kept. What goes out
//     more than LateAfter after it was handed over is marked as delayed.
//   - Of a retained topic only the latest value is kept. The sink never
//     refreshes a value by itself: when the caller falls silent, what is on
//     the broker runs out by its own valid_until.
//   - One daemon speaks under a prefix. After connecting, the sink listens for
//     the status of another instance and stays silent while there is one.
//   - At the start and at the end of speaking every path is set to not
//     observed.
package publish

import (
	"errors"
	"fmt"
	"strings"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
)

// Broker is the outgoing connection, as much of it as the sink needs. Publish
// returns nil once the broker has taken the message (QoS 1: acknowledged it)
// and must return within a few seconds in any case.
type Broker interface {
	Publish(topic string, payload []byte, qos byte, retained bool) error
	Connected() bool
}

// The figures of the sink, all in wall time.
const (
	// LateAfter is the age from which an issue is sent as delayed.
	LateAfter = 5 * time.Second
	// ListenFor is how long a new connection listens for another instance:
	// three of its statuses.
	ListenFor = 6 * time.Second
	// StatusEvery is the spacing of the status.
	StatusEvery = 2 * time.Second
	// ValueEvery is the spacing of paths and stations; at least every two
	// seconds is promised.
	ValueEvery = time.Second
	// HeartbeatEvery is the spacing of the heartbeat: its absence over two of
	// them is worth an alarm.
	HeartbeatEvery = time.Minute
	// Tick is the spacing of Options.Tick that these figures are made for.
	Tick = 250 * time.Millisecond

	// aliveFor is how long one status speaks for its instance: the validity of
	// everything retained.
	aliveFor = 5 * time.Second
	// resumeWithin is the longest gap in our own status after which we go on
	// without listening again: another instance takes over only after aliveFor.
	resumeWithin = aliveFor - time.Second
	// farewellWithin bounds the sending after Run was told to stop.
	farewellWithin = 2 * time.Second
	// otherTold is how long a closed alert waits for us to take over from a
	// silent-making instance; by then that instance has told it.
	otherTold = 60 * time.Second
	// defaultMaxAlerts bounds the queue. An alert lasts at least its hold of a
	// minute, so this is days of a busy airfield without a broker.
	defaultMaxAlerts = 4096

	qosValue byte = 0 // retained values: the next one repairs a loss
	qosAlert byte = 1 // issues of an alert, and the last word on each path
)

// Phase is where in its life an alert stands at an issue.
type Phase int

// The phases.
const (
	Opening Phase = iota
	Update
	Closing
	phases
)

// Issue is one issue of an alert on its way out.
type Issue struct {
	AlertID string
	Phase   Phase
	// Topic is the level below the prefix that it goes to; empty for that of
	// the alert objects. Each topic has its own order and its own newest update.
	Topic    string
	Exercise bool
	// JSON is the alert object; with delayed it says so. It is called on the
	// sink's goroutine when the issue is sent, perhaps more than once.
	JSON func(delayed bool) []byte
}

// Retained is one retained topic below the prefix and its payload.
type Retained struct {
	Topic   string
	Payload []byte
}

// Options says how a Sink works. All fields but MaxAlerts are required.
type Options struct {
	Prefix   string // of all topics, no slash at its end: see Prefix
	Instance string // what our own status carries as instance
	Exercise bool   // exercise output: only under an exercise prefix
	// NotObserved gives every path topic as it reads when nothing is known.
	// Farewell gives the status of a daemon that stops. Both are called on the
	// sink's goroutine.
	NotObserved func() []Retained
	Farewell    func() []byte
	Now         func() time.Time // wall time
	Tick        <-chan time.Time // every Tick or so
	Log         zerolog.Logger
	MaxAlerts   int // alerts kept at most; 0 for the default
	// Listen is how long a new connection listens for another instance; 0 for
	// ListenFor. Only a program that owns its broker may make it shorter.
	Listen time.Duration
}

// exerciseRoot is the first level of every exercise topic.
const exerciseRoot = "sockline-exercise"

// Prefix is the prefix of the topics of an airfield: configured, or
// sockline/<airfield> when that is empty. An exercise never uses either, but
// always sockline-exercise/<airfield>.
func Prefix(configured, airfield string, exercise bool) string {
	switch {
	case exercise:
		return exerciseRoot + "/" + airfield
	case configured != "":
		return configured
	}
	return "sockline/" + airfield
}

// StatusTopic is the topic of the status under a prefix. The last will of the
// connection belongs to it.
func StatusTopic(prefix string) string { return prefix + "/status" }

// PathTopic is the topic of a path, below the prefix.
func PathTopic(runway, operation string) string { return "path/" + runway + "/" + operation }

// StationTopic is the topic of a station, below the prefix.
func StationTopic(id string) string { return "station/" + id }

const (
	statusTopic    = "status"
	alertTopic     = "alert"
	heartbeatTopic = "heartbeat"
)

// errExercise keeps exercise output away from live receivers whatever went
// wrong before it.
var errExercise = errors.New("an exercise alert was kept from a live topic")

func (o *Options) check() error {
	under := o.Prefix == exerciseRoot || strings.HasPrefix(o.Prefix, exerciseRoot+"/")
	switch {
	case o.Prefix == "" || strings.ContainsAny(o.Prefix, "+#\x00") ||
		strings.HasPrefix(o.Prefix, "/") || strings.HasSuffix(o.Prefix, "/"):
		return fmt.Errorf("topic prefix %q: use levels such as sockline/<airfield>, without wildcards "+
			"and without a slash at either end", o.Prefix)
	case o.Exercise && !under:
		return fmt.Errorf("topic prefix %q: an exercise is published under %s/<airfield> only", o.Prefix, exerciseRoot)
	case !o.Exercise && under:
		return fmt.Errorf("topic prefix %q: %s is for exercises; choose another prefix", o.Prefix, exerciseRoot)
	case o.Instance == "":
		return errors.New("publishing needs the name of this instance")
	case o.NotObserved == nil || o.Farewell == nil || o.Now == nil || o.Tick == nil:
		return errors.New("publishing needs NotObserved, Farewell, Now and Tick")
	}
	return nil
}

// SetStatus keeps payload as the status to send next. A changed condition goes
// out at once, else every StatusEvery.
func (s *Sink) SetStatus(condition alerting.Condition, payload []byte) {
	s.retain(statusTopic, string(condition), StatusEvery, payload)
}

// SetPath keeps payload as what to send next of a path. A changed state goes
// out at once, else every ValueEvery.
func (s *Sink) SetPath(runway, operation string, state alerting.PathState, payload []byte) {
	s.retain(PathTopic(runway, operation), string(state), ValueEvery, payload)
}

// WithdrawPath takes a path from the broker that is no longer configured: what
// is retained of it becomes payload, which says that it is not observed, and is
// then cleared.
func (s *Sink) WithdrawPath(runway, operation string, payload []byte) {
	s.withdraw(PathTopic(runway, operation), payload)
}

// WithdrawStation clears what the broker retains of a station that is no
// longer configured.
func (s *Sink) WithdrawStation(id string) { s.withdraw(StationTopic(id), nil) }

func (s *Sink) withdraw(topic string, payload []byte) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.shelf.withdraw(topic, payload) {
		s.nudge()
	}
}

// SetHeartbeat keeps payload as the heartbeat to send next, every
// HeartbeatEvery. It is not retained: what counts is that it comes, and an old
// one must not look like a new one to who has just subscribed.
func (s *Sink) SetHeartbeat(payload []byte) {
	s.retain(heartbeatTopic, "", HeartbeatEvery, payload)
}

// SetStation keeps payload as the health of a station to send next. A changed
// state goes out at once, else every ValueEvery.
func (s *Sink) SetStation(id, state string, payload []byte) {
	s.retain(StationTopic(id), state, ValueEvery, payload)
}
