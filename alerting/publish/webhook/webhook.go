// Package webhook takes issued alerts as events and brings each to one HTTP
// receiver: as CloudEvents 1.0 in structured JSON, or as CAP messages made
// elsewhere. It stands beside publish and page; its next stage is the
// receiver.
//
// What it promises:
//
//   - Opening and closing of every alert reach the receiver at least once, in
//     the order of the alert, or are counted as expired, refused or lost. Of
//     the updates between them only the newest is kept. A repeat has the same
//     event id.
//   - What waits lies in a file and outlives a kill. When the file cannot be
//     written, events go on from memory, and State says so.
//   - No alert waits for another, and no receiver for another: each has its
//     own Receiver with its own goroutine.
//   - Exercises reach a receiver only if it asks for them.
package webhook

import (
	"context"
	"crypto/tls"
	"errors"
	"net/http"
	"net/url"
	"sync"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/wording"
	"sockline/sensors"
)

// The figures of a receiver.
const (
	// LateAfter is the age from which an event is sent as delayed.
	LateAfter = 5 * time.Second
	// Tick is the spacing of Options.Tick that these figures are made for.
	Tick = 250 * time.Millisecond
	// DefaultTimeout bounds one request, from the dial to the answer.
	DefaultTimeout = 10 * time.Second
	// ExpireAfter is the age at which an event is given up: an alert of three
	// days ago is history, and the history has it.
	ExpireAfter = 72 * time.Hour

	defaultMaxAlerts = 1024
	// maxIncoming bounds what Run has not taken yet, for a disk that hangs.
	maxIncoming = 4096
	// slots is how many requests are under way at once, of which one is kept
	// for what is sent for the first time.
	slots = 4
	// firstPause and longestPause bound the time between two tries of one
	// event; longestProbe bounds it while the receiver cannot be reached, so
	// that it hears of what is open within that after its return.
	firstPause   = time.Second
	longestPause = time.Minute
	longestProbe = 30 * time.Second
	// longestWish bounds what a receiver may ask for with Retry-After.
	longestWish = 10 * time.Minute
	// mendEvery is how often a queue file that failed is tried again.
	mendEvery = 5 * time.Second
	// farewellWithin bounds the sending after Run was told to stop.
	farewellWithin = 2 * time.Second
)

// Format is what a body looks like.
type Format string

// The formats.
const (
	CloudEvents Format = "cloudevents"
	CAP         Format = "cap"
)

// Phase is where in its life an alert stands at an event.
type Phase int

// The phases.
const (
	Opening Phase = iota
	Update
	Closing
	phases
)

// Event is one thing to tell.
type Event struct {
	ID       string          `json:"id"` // the same at each repeat
	Alert    string          `json:"alert"`
	Phase    Phase           `json:"phase"`
	Exercise bool            `json:"exercise"`
	Time     sensors.Instant `json:"time"` // of what it tells
	Data     []byte          `json:"data"` // a JSON object, or a CAP message
}

// Of is the event of a notice, with the alert object as its data.
func Of(n wording.Notice) Event {
	a := n.Alert()
	e := Event{ID: eventID(a.ID, a.Revision), Alert: a.ID, Phase: Update, Exercise: n.Exercise(), Time: a.Updated, Data: n.JSON()}
	switch {
	case n.Closing(): // even if it is the first we hear of the alert
		e.Phase = Closing
	case n.Opening():
		e.Phase = Opening
	}
	return e
}

// Recorded is the event of an alert object that was kept: the same as Of made
// of its notice.
func Recorded(alert string, revision int, p Phase, exercise bool, at sensors.Instant, object []byte) Event {
	return Event{ID: eventID(alert, revision), Alert: alert, Phase: p, Exercise: exercise, Time: at, Data: object}
}

// Options says who is told, and how. URL, Name, Airfield, Now, Random and
// Tick are required.
type Options struct {
	Name     string // of the receiver: in logs, metrics and the name of its file
	URL      string
	Format   Format
	Airfield string // its id
	Secret   []byte // of the seal; empty for none
	TLS      *tls.Config
	Timeout  time.Duration // of one request; 0 for the default
	Exercise bool          // tell exercises, too
	Drill    bool          // the whole daemon is an exercise
	File     string        // of the queue; its directory is made when it is not there

	Now    func() time.Time // wall time
	Random func() float64   // [0, 1), for the jitter of the pauses
	Tick   <-chan time.Time // every Tick or so
	Log    zerolog.Logger

	MaxAlerts int // that may wait; 0 for the default
}

// State is what a receiver can say of itself.
type State struct {
	Name      string
	Waiting   int       // events not yet delivered
	Oldest    time.Time // when the oldest of them was handed over; zero if none
	Delivered uint64    // events
	Repeated  uint64    // tries beyond the first of an event
	Refused   uint64    // events that the receiver did not want (4xx, a redirect)
	Expired   uint64    // events given up for their age
	Lost      uint64    // events given up because too many waited
	Withheld  uint64    // exercises kept from a receiver that did not ask for them
	Problem   string    // why the last try failed; empty after a success
	Disk      string    // why the queue is in memory only; empty while it is on disk
}

// Receiver tells one receiver. Its setters may be called from any goroutine
// and never wait.
type Receiver struct {
	opts   Options
	log    zerolog.Logger
	client *http.Client
	wake   chan struct{}
	state  atomic.Pointer[State]

	mu       sync.Mutex
	incoming []handed
	beat     *handed
	withheld uint64
	overrun  uint64 // given up because Run took none

	// The rest belongs to Run.
	results chan result
	lanes   *lanes
	file    *file
	loaded  bool      // what an earlier run left was read
	mend    time.Time // not before
	flying  int
	down    bool
	downs   int // failures to reach the receiver, in a row
	pause   time.Time
	told    State
	leaving bool // requests are being broken off: their failures say nothing
}

// handed is an event with the time it was handed over.
type handed struct {
	event Event
	at    time.Time
}

// New makes a receiver. It touches no file and no network before Run.
func New(o Options) (*Receiver, error) {
	u, err := url.Parse(o.URL)
	switch {
	case err != nil || u.Host == "" || u.Scheme != "https" && u.Scheme != "http":
		return nil, errors.New("a webhook needs the address of its receiver: https://host/path")
	case o.Name == "" || o.File == "" || o.Airfield == "" || o.Now == nil || o.Random == nil || o.Tick == nil:
		return nil, errors.New("a webhook needs Name, File, Airfield, Now, Random and Tick")
	}
	if o.Timeout <= 0 {
		o.Timeout = DefaultTimeout
	}
	if o.MaxAlerts <= 0 {
		o.MaxAlerts = defaultMaxAlerts
	}
	if o.Format == "" {
		o.Format = CloudEvents
	}
	r := &Receiver{
		opts: o, log: o.Log.With().Str("webhook", o.Name).Logger(), client: newClient(o.TLS, o.Timeout),
		wake: make(chan struct{}, 1), results: make(chan result, slots+1), lanes: newLanes(o.MaxAlerts),
	}
	r.told.Name = o.Name
	r.report()
	return r, nil
}

// newClient verifies who answers, follows no redirect, since what is told is
// for one receiver, and uses no proxy that the environment happens to name.
func newClient(c *tls.Config, timeout time.Duration) *http.Client {
	if c == nil {
		c = &tls.Config{}
	}
	c = c.Clone()
	c.MinVersion = tls.VersionTLS12
	return &http.Client{
		Timeout:       timeout,
		CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse },
		Transport: &http.Transport{
			TLSClientConfig: c, ForceAttemptHTTP2: true, MaxIdleConnsPerHost: slots, IdleConnTimeout: time.Minute,
			ResponseHeaderTimeout: timeout, TLSHandshakeTimeout: timeout, MaxResponseHeaderBytes: 64 << 10,
		},
	}
}

// State is what the receiver last said of itself.
func (r *Receiver) State() State { return *r.state.Load() }

// Offer hands an event over.
func (r *Receiver) Offer(e Event) {
	r.mu.Lock()
	defer r.mu.Unlock()
	if r.withholds(e) {
		r.withheld++
		return
	}
	h := handed{e, r.opts.Now()}
	for i := len(r.incoming) - 1; i >= 0 && e.Phase == Update; i-- {
		if old := &r.incoming[i]; old.event.Alert == e.Alert && old.event.Phase == Update {
			*old = h // nobody took it yet, and it has grown old
			return
		}
	}
	if len(r.incoming) >= maxIncoming {
		r.overrun++
		return
	}
	r.incoming = append(r.incoming, h)
	r.nudge()
}

// Beat hands a heartbeat over. It takes the place of one that was not sent
// yet, is tried once, and is not kept on disk: an old one is worth nothing.
func (r *Receiver) Beat(e Event) {
	r.mu.Lock()
	defer r.mu.Unlock()
	if r.withholds(e) {
		return
	}
	r.beat = &handed{e, r.opts.Now()}
	r.nudge()
}

func (r *Receiver) withholds(e Event) bool { return (e.Exercise || r.opts.Drill) && !r.opts.Exercise }

// nudge wakes Run; one nudge stands for many.
func (r *Receiver) nudge() {
	select {
	case r.wake <- struct{}{}:
	default:
	}
}

// Run reads what the file still holds and delivers until ctx is done. What is
// then new is tried once more, and the rest stays in the file. A file that
// cannot be used stops nothing: State says so. Run is to be called once.
func (r *Receiver) Run(ctx context.Context) {
	r.openFile(r.opts.Now())
	r.report()
	sending, cancel := context.WithCancel(context.WithoutCancel(ctx))
	defer cancel()
	for {
		select {
		case <-ctx.Done():
			r.farewell(sending, cancel)
			return
		case res := <-r.results:
			r.finish(res)
			r.turn(sending)
		case <-r.wake:
			r.turn(sending)
		case <-r.opts.Tick:
			r.turn(sending)
		}
	}
}

// farewell tries what has not been tried yet and waits for what is under way.
func (r *Receiver) farewell(ctx context.Context, cancel func()) {
	r.turn(ctx)
	end := time.NewTimer(farewellWithin)
	defer end.Stop()
	for r.flying > 0 {
		select {
		case <-end.C:
			cancel()
			r.leaving = true
			end.Reset(farewellWithin) // they end now; never twice
		case res := <-r.results:
			r.finish(res)
			if ctx.Err() == nil && r.lanes.fresh(r.opts.Now()) {
				r.turn(ctx)
			}
		}
	}
	if r.told.Waiting > 0 {
		r.log.Warn().Int("waiting", r.told.Waiting).Msg("stopped before every event was delivered; the rest is kept for the next start")
	}
	r.client.CloseIdleConnections()
	if r.file != nil {
		if err := r.file.close(); err != nil {
			r.log.Error().Err(err).Msg("the queue of a webhook is not closed in order")
		}
	}
	r.report()
}
