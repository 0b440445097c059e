package main

import (
	"context"
	"crypto/rand"
	"encoding/hex"
	"errors"
	"fmt"
	"net"
	"os"
	"strings"
	"sync/atomic"
	"syscall"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/history"
	"sockline/alerting/publish"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
)

const (
	// tickEvery is the spacing of the clock ticks: a step closes at most so
	// long after its lateness has passed when no message comes.
	tickEvery = 20 * time.Millisecond
	// stopWithin bounds an orderly stop.
	stopWithin = 5 * time.Second
	// pruneEvery is how often old days of readings are looked for.
	pruneEvery = time.Hour
)

// arrivalClock is a clock of arrival stamps that knows how far the host clock
// is off.
type arrivalClock interface {
	feed.Stamper
	Offset() time.Duration
}

// daemonOptions is what a daemon is given besides its configuration.
type daemonOptions struct {
	exercise bool
	capture  string // file for the messages; empty for none
	clock    arrivalClock
	log      zerolog.Logger
	lines    *logQueue // that log writes to; nil for none
	notify   *notifier
	instance string        // what it calls itself; empty: made up
	listen   time.Duration // for another instance, 0 for the usual
	// stepped says that time comes with the messages: there are no ticks, and
	// control is the topic that the clock takes it from.
	stepped bool
	control string
	// watch is called by the loop with each step; nil for nobody.
	watch func(*report)
	// anyPort serves the page on another port when the configured one is taken.
	anyPort bool
}

// daemon is everything that runs. Two of them fit into one process.
type daemon struct {
	cfg      atomic.Pointer[config.Config] // in force; changed by the loop alone
	opts     daemonOptions
	log      zerolog.Logger
	instance string

	listener net.Listener
	embedded *feed.EmbeddedBroker // nil for an outside broker
	broker   feed.Broker
	archive  *archive
	board    *board
	people   *people
	started  time.Time
	inForce  atomic.Int64 // the first step under the configuration, an Instant; 0 before it is known
	metrics  *metrics
	loop     *loop
	output   *outward
	tell     *teller
	input    atomic.Pointer[feed.Subscriber]
	teardown teardown

	pruning    chan struct{}          // holds one while old readings are being deleted
	subscribed atomic.Bool            // it was, once
	offsetTold bool                   // the clock's offset is in the log
	refused    atomic.Pointer[string] // why the last changed configuration is not in force; nil if it is
	listening  chan struct{}          // closed at the first subscription
}

// newDaemon makes a daemon and takes the addresses it listens on. It must be
// run, or closed.
func newDaemon(cfg *config.Config, o daemonOptions) (*daemon, error) {
	d := &daemon{opts: o, log: o.log, instance: o.instance, started: time.Now(), listening: make(chan struct{}), pruning: make(chan struct{}, 1)}
	d.cfg.Store(cfg)
	if d.opts.notify == nil {
		d.opts.notify = &notifier{}
	}
	err := d.prepare()
	if err != nil {
		return nil, errors.Join(err, d.close())
	}
	return d, nil
}

func (d *daemon) prepare() (err error) {
	if d.instance == "" {
		if d.instance, err = newInstance(); err != nil {
			return err
		}
	}
	d.board = newBoard(d.instance)
	cfg := d.current()
	if d.loop, err = newLoop(cfg, d.opts.exercise, d.log); err != nil {
		return err
	}
	if err = d.listen(); err != nil {
		return err
	}
	if err = d.reachBroker(); err != nil {
		return err
	}
	d.archive = newArchive(cfg.History.Directory, history.Options{
		Keep: cfg.History.Keep, Log: d.log,
		Space: func() (history.Space, error) { return history.DiskSpace(cfg.History.Directory) },
	}, d.release)
	d.people = newPeople(d)
	d.board.lifted = d.people.lifted
	if d.output, err = newOutward(d); err != nil {
		return err
	}
	if d.tell, err = newTeller(d); err != nil {
		return err
	}
	d.metrics = newMetrics(cfg, sources{
		history: d.archive.health, input: d.inputState, dropped: d.droppedMessages,
		output: d.output.sink.State, open: d.board.openCount, offset: d.opts.clock.Offset,
	})
	d.tell.measure(d.metrics.registry)
	d.opts.lines.measure(d.metrics.registry)
	d.loop.archive, d.loop.metrics, d.loop.show, d.loop.control = d.archive, d.metrics, d.show, d.opts.control
	d.loop.changed = d.follow
	d.keepJudgements()
	return d.openCapture()
}

// current is the configuration in force.
func (d *daemon) current() *config.Config { return d.cfg.Load() }

// newInstance is a name that no other run has: host and chance.
func newInstance() (string, error) {
	host, err := os.Hostname()
	if err != nil {
		host = "host" // chance alone keeps it apart
	}
	host, _, _ = strings.Cut(host, ".")
	var salt [4]byte
	if _, err := rand.Read(salt[:]); err != nil {
		return "", fmt.Errorf("make up a name for this instance: %w", err)
	}
	return host + "-" + hex.EncodeToString(salt[:]), nil
}

// listen takes the page's address.
func (d *daemon) listen() error {
	address := d.current().Page.Listen
	l, err := net.Listen("tcp", address)
	if errors.Is(err, syscall.EADDRINUSE) && d.opts.anyPort {
		l, err = net.Listen("tcp", "127.0.0.1:0")
	}
	if err != nil {
		return fmt.Errorf("serve the page on %s: %w: end what listens there, or set listen in [page]", address, err)
	}
	d.listener = l
	// Serve closes it, too; closing again does no harm.
	d.teardown.add("listening for the page", func(context.Context) error { _ = l.Close(); return nil })
	return nil
}

// reachBroker says where the broker is, and starts the built-in one.
func (d *daemon) reachBroker() error {
	d.broker = brokerOf(d.current())
	if !d.current().Broker.Embedded {
		return nil
	}
	b, err := feed.StartBroker(d.current().Broker.Address, feed.BrokerOptions{Log: d.log})
	if err != nil {
		return err
	}
	d.embedded = b
	d.broker = feed.Broker{URL: b.URL()}
	d.teardown.add("the built-in broker", func(ctx context.Context) error {
		var err error
		return errors.Join(within(ctx, func() { err = b.Close() }), err)
	})
	d.log.Warn().Str("address", b.Addr()).Msg("the broker is built in, for trial only: nobody is told when this program stops")
	return nil
}

func (d *daemon) openCapture() error {
	if d.opts.capture == "" {
		return nil
	}
	c, err := startCapture(d.opts.capture, d.current().Airfield.ID, d.log)
	if err != nil {
		return err
	}
	d.loop.capture = c
	// The end mark says that everything up to the last stamp is in it; the loop
	// has ended by then.
	d.teardown.add("the capture", func(ctx context.Context) error { return c.close(ctx, d.loop.last) })
	return nil
}

// Run does the work until ctx is done, and stops in order within stopWithin.
func (d *daemon) Run(ctx context.Context) error {
	err := d.start(context.WithoutCancel(ctx))
	if err == nil {
		d.keepHouse(ctx)
		d.opts.notify.say("STOPPING=1", "STATUS=stopping")
	}
	return errors.Join(err, d.close())
}

// close stops what runs, the last started first.
func (d *daemon) close() error {
	ctx, cancel := context.WithTimeout(context.Background(), stopWithin)
	defer cancel()
	return d.teardown.run(ctx)
}

// start brings everything up, sinks first, so that nothing is worked out
// before it can be told.
func (d *daemon) start(ctx context.Context) error {
	if err := d.output.start(ctx, d); err != nil {
		return err
	}
	d.tell.start(ctx, d)
	if err := d.servePage(ctx); err != nil {
		return err
	}
	d.openHistory(ctx)
	d.teardown.add("deleting old readings", func(ctx context.Context) error {
		select {
		case d.pruning <- struct{}{}:
			return nil
		case <-ctx.Done():
			return context.Cause(ctx)
		}
	})
	return d.startLoop(ctx)
}

// openHistory opens the history and takes up where the last run left off.
// Whatever fails here shows in the status and stops nothing.
func (d *daemon) openHistory(ctx context.Context) {
	now := d.opts.clock.Stamp("", nil)
	if d.archive.open() == nil {
		d.openHatch()
		if store, err := d.archive.reading(); err == nil {
			if err := errors.Join(d.loop.restore(store, now), d.tell.takeUp(store), d.people.takeUp(store, now, d.opts.exercise)); err != nil {
				d.log.Error().Err(err).Msg("part of the history cannot be read back; the rest is taken up")
			}
		}
		for _, a := range d.loop.engine.Alerts(nil) {
			// It was told before, by the run that recorded it.
			d.board.release(wording.Of(transitionOf(a), d.loop.words).WithRecorded(true))
		}
	}
	d.archive.record(history.Entry{Kind: history.KindSoftware, At: now, Payload: []byte(softwareText())})
	// With the first step that it judges: what an earlier run judged later than
	// this start would count from is done.
	first := max(d.loop.engine.LastStep(), takenUp(now, d.loop.engine.Lateness())) + sensors.Second
	d.inForce.Store(int64(first))
	d.archive.record(history.Entry{Kind: history.KindConfiguration, At: first, Payload: d.current().Source})
	d.archive.record(history.Entry{Kind: history.KindStart, At: now, Payload: []byte(d.instance)})
	d.archive.opened = d.recordLate
	ctx, cancel := context.WithCancel(ctx)
	done := make(chan struct{})
	go func() {
		defer close(done)
		d.archive.keepTrying(ctx)
	}()
	d.teardown.add("the history", func(stop context.Context) error {
		cancel()
		err := errors.Join(ended(stop, done), d.archive.hatch(stop))
		d.archive.record(history.Entry{Kind: history.KindStop, At: d.loop.last, Payload: []byte(d.instance)})
		return errors.Join(err, d.archive.close(stop))
	})
}

// startLoop subscribes and begins to evaluate.
func (d *daemon) startLoop(ctx context.Context) error {
	s, err := feed.Subscribe(ctx, feed.SubscribeOptions{
		Broker: d.broker, ClientID: d.clientID("in"), Topics: d.topics(), Clock: d.opts.clock, Log: d.log,
		OnState: func(_, subscribed bool) {
			if subscribed && !d.subscribed.Swap(true) {
				close(d.listening)
				d.opts.notify.say("READY=1", "STATUS=observing "+d.current().Airfield.Name)
			}
		},
	})
	if err != nil {
		return err
	}
	d.input.Store(s)
	d.loop.messages = s.Messages()
	stop, done := make(chan struct{}), make(chan struct{})
	go func() {
		defer close(done)
		d.loop.run(stop)
	}()
	d.teardown.add("the evaluation", func(ctx context.Context) error {
		s.Tick() // closes what is due now
		close(stop)
		return d.endLoop(ctx, done)
	})
	d.teardown.add("the subscription", func(ctx context.Context) error { return within(ctx, s.Close) })
	return nil
}

// endLoop waits for the evaluation to take what is left in its queue, but no
// longer than leaves time for what was decided to get to the disk and out. When
// it returns without an error nothing uses what the loop owns any more.
func (d *daemon) endLoop(ctx context.Context, done <-chan struct{}) error {
	half, cancel := context.WithTimeout(ctx, stopWithin/2)
	defer cancel()
	if ended(half, done) == nil {
		return nil
	}
	close(d.loop.abandon)
	if err := ended(ctx, done); err != nil {
		return err
	}
	d.log.Warn().Int("messages", len(d.loop.messages)).Msg("not all messages that had come were evaluated before the stop")
	return nil
}

// clientID is the name of one of the two connections.
func (d *daemon) clientID(direction string) string {
	name := d.current().Broker.ClientID
	if name == "" {
		name = "sockline"
	}
	return name + "-" + direction
}

// inputState is the state of the connection on which readings come.
func (d *daemon) inputState() feed.LinkState {
	if s := d.input.Load(); s != nil {
		return s.State()
	}
	return feed.LinkState{}
}

func (d *daemon) droppedMessages() (full, oversize uint64) {
	if s := d.input.Load(); s != nil {
		return s.Dropped(), s.Oversize()
	}
	return 0, 0
}

// release passes an issue on: to the broker and the page.
func (d *daemon) release(n wording.Notice) {
	if err := d.output.sink.Issue(publish.Of(n)); err != nil {
		d.log.Error().Err(err).Msg("an alert is not published")
	}
	d.tell.release(n)
	d.board.release(n)
}

// notReady is why the program does not do its work yet, or any more.
func (d *daemon) notReady() []string {
	var why []string
	if s := d.inputState(); !s.Subscribed {
		text := "The readings are not subscribed."
		if s.Problem != nil {
			text = "The readings are not subscribed: " + s.Problem.Error() + "."
		}
		why = append(why, text)
	}
	if !d.archive.isOpen() {
		why = append(why, "The history is not open: "+d.archive.health().Reason+".")
	}
	return why
}

// keepHouse gives the clock ticks and looks after everything that is done by
// the hour or the second, until ctx is done.
func (d *daemon) keepHouse(ctx context.Context) {
	ticks := time.NewTicker(tickEvery)
	defer ticks.Stop()
	dog := watchdog{every: d.opts.notify.every, last: time.Now()}
	var second, prune time.Time
	for {
		select {
		case <-ctx.Done():
			return
		case now := <-ticks.C:
			if !d.opts.stepped {
				d.input.Load().Tick()
			}
			if now.Sub(second) < time.Second {
				continue
			}
			second = now
			d.lookAtClock()
			if d.loop.capture != nil {
				d.loop.capture.sync()
			}
			if dog.due(now, d.loop.steps.Load(), d.archive.progress()) {
				d.opts.notify.say("WATCHDOG=1")
			}
			if now.Sub(prune) >= pruneEvery {
				prune = now
				d.pruneAside()
			}
		}
	}
}

// lookAtClock logs once when the host clock has been stepped, and once when it
// agrees again.
func (d *daemon) lookAtClock() {
	off := d.opts.clock.Offset()
	far := off.Abs() > feed.OffsetLimit
	switch {
	case far && !d.offsetTold:
		d.log.Error().Dur("offset_ms", off).Msg("the host clock was stepped; readings are still stamped by the time since the start. Restart the program once the host clock is right")
	case !far && d.offsetTold:
		d.log.Info().Dur("offset_ms", off).Msg("the host clock agrees with the arrival clock again")
	}
	d.offsetTold = far
}

// pruneAside deletes old readings beside everything else: the ticks must not
// wait for a disk.
func (d *daemon) pruneAside() {
	select {
	case d.pruning <- struct{}{}:
		go func() {
			d.prune()
			<-d.pruning
		}()
	default: // the last round still goes on
	}
}

// prune deletes readings that are older than the configuration keeps them.
func (d *daemon) prune() {
	v := d.board.view.Load()
	store, err := d.archive.reading()
	if v == nil || err != nil {
		return
	}
	if holds, err := store.Holds(v.At); err == nil { // else Prune says why not
		d.pruneJudgements(v.At, holds)
	}
	gone, err := store.Prune(v.At)
	if err != nil {
		d.log.Error().Err(err).Msg("old readings are not all deleted")
	}
	for _, name := range gone {
		d.log.Info().Str("file", name).Msg("readings older than the time of keeping are deleted")
	}
}

// softwareText is what the journal keeps of the program.
func softwareText() string {
	b := currentBuild()
	return strings.TrimSpace(b.Version + " " + b.Go + " " + b.Platform + " " + b.Revision)
}

// eventNow is a moment of the wall clock as an instant.
func eventNow() sensors.Instant { return sensors.At(time.Now()) }
