// Package mast takes the lines of an instrument that speaks NMEA 0183, on a
// serial line, over TCP or UDP or on a stream, and hands out its winds as SenML
// messages, stamped when the line ended, each at least once and in order. What
// cannot be sent waits in a queue on disk. Next: package feed, which carries
// the messages to a broker.
package mast

import (
	"context"
	"errors"
	"io"
	"time"

	"github.com/rs/zerolog"

	"sockline/sensors"
)

// The agent's own times.
const (
	paceBetween  = 50 * time.Millisecond // between messages while catching up
	retryAfter   = time.Second           // after a message that did not go out
	statusEvery  = time.Minute
	silentAfter  = 10 * time.Second // without a line
	reopenLeast  = time.Second      // until a source that failed is opened again
	reopenMost   = 10 * time.Second
	lineQueue    = 1024 // lines that may wait while the disk is slow
	readPiece    = 4096
	atLeastOnce  = 1 // the quality of service of everything that is sent
	lastAttempts = 3 * time.Second
)

// Out carries messages to a broker.
type Out interface {
	// Publish returns when the broker has the message; an error means that it
	// may or may not have it.
	Publish(topic string, payload []byte, qos byte, retained bool) error
	// Connected reports whether there is a connection now.
	Connected() bool
}

// Options is what an agent needs.
type Options struct {
	Station string
	Topic   string
	Source  Source
	Choose  Choose
	Queue   *Queue
	Now     func() sensors.Instant // arrival stamps; they never go back
	Since   sensors.Instant        // start of the session, as in Will
	Drain   time.Duration          // how long to go on sending when a source has ended that ends once
	Log     zerolog.Logger
}

// Agent is one instrument on its way to a broker.
type Agent struct {
	o         Options
	out       Out
	taker     *taker
	connected chan struct{}

	// Of the loop.
	busy     bool // a message is on its way
	birth    bool // the status is to be sent
	records  []Record
	stamp    sensors.Instant // of the last line
	last     sensors.Instant // time of the last reading
	state    string          // of the source
	lines    uint64
	refused  uint64
	diskBad  bool
	complain sensors.Instant // when a refused line was last logged
}

// New prepares an agent.
func New(o Options) (*Agent, error) {
	t, err := newTaker(o.Station, o.Choose)
	if err != nil {
		return nil, err
	}
	return &Agent{o: o, taker: t, connected: make(chan struct{}, 1), state: "opening"}, nil
}

// Connect tells the agent that there is a new connection. It never waits.
func (a *Agent) Connect() {
	select {
	case a.connected <- struct{}{}:
	default:
	}
}

// arrival is a line with its stamp, or news of the source.
type arrival struct {
	line  []byte
	at    sensors.Instant
	state string // when it changes
	long  uint64 // lines that were too long
	end   bool   // nothing more will come
}

// job is a message on its way out; next is what its success advances the queue
// to, 0 for a status.
type job struct {
	topic    string
	payload  []byte
	retained bool
	next     uint64
	err      error
}

// Run reads and sends until ctx ends, or a source that ends once has ended and
// everything has been sent or Drain is over. What waits stays in the queue.
func (a *Agent) Run(ctx context.Context, out Out) error {
	a.out = out
	inner, cancel := context.WithCancel(ctx)
	defer cancel()
	arrivals := make(chan arrival, lineQueue)
	go a.read(inner, arrivals)
	jobs, done := make(chan job), make(chan job, 1)
	defer close(jobs)
	go func() {
		for j := range jobs {
			j.err = out.Publish(j.topic, j.payload, atLeastOnce, j.retained)
			done <- j
		}
	}()
	tick := time.NewTicker(time.Second)
	defer tick.Stop()
	pace := time.NewTimer(0)
	defer pace.Stop()
	ready := false // the pace allows a message
	var over <-chan time.Time
	ended := false
	news := a.o.Now()
	for {
		if ready && !a.busy {
			if j, ok := a.next(); ok {
				a.busy = true
				jobs <- j
			} else if ended && a.o.Queue.Len() == 0 {
				break
			}
		}
		select {
		case <-ctx.Done():
			return a.stop(done)
		case <-over:
			return a.stop(done)
		case <-pace.C:
			ready = true
		case <-a.connected:
			a.birth = true
			ready = true
		case r := <-arrivals:
			a.arrive(r)
			if r.end {
				ended = true
				over = time.After(a.o.Drain)
			}
		case j := <-done:
			a.busy = false
			ready = false
			pace.Reset(a.sent(j))
			if a.o.Queue.Len() == 0 && j.err == nil {
				ready = true // the next reading need not wait
			}
		case <-tick.C:
			if now := a.o.Now(); now.Sub(news) >= statusEvery || a.quietened(now) {
				news, a.birth = now, true
			}
			if a.o.Queue.Len() > 0 {
				a.disk(a.o.Queue.Sync())
			}
		}
	}
	return a.stop(done)
}

// next is the message that should go out now.
func (a *Agent) next() (job, bool) {
	if !a.out.Connected() {
		return job{}, false
	}
	if a.birth {
		a.birth = false
		return job{topic: StatusTopic(a.o.Topic), payload: a.status(true), retained: true}, true
	}
	var err error
	var next uint64
	a.records, next, err = a.o.Queue.Peek(a.records[:0], maxPack)
	a.disk(err)
	n := alike(a.records)
	if n == 0 {
		if next > 0 {
			a.disk(a.o.Queue.Advance(next)) // nothing but damage
		}
		return job{}, false
	}
	// Damage among them is passed over with the last of them.
	if n < len(a.records) {
		a.records, next, err = a.o.Queue.Peek(a.records[:0], n)
		a.disk(err)
		a.records = a.records[:alike(a.records)]
	}
	return job{topic: a.o.Topic, payload: pack(a.o.Station, a.records), next: next}, true
}

// sent takes note of a message that went out or did not, and says how long to
// wait until the next.
func (a *Agent) sent(j job) time.Duration {
	if j.err != nil {
		a.birth = a.birth || j.next == 0
		a.o.Log.Debug().Err(j.err).Str("topic", j.topic).Msg("not sent; it stays in the queue")
		return retryAfter
	}
	if j.next > 0 {
		a.disk(a.o.Queue.Advance(j.next))
	}
	return paceBetween
}

// arrive takes a line, or news of the source.
func (a *Agent) arrive(r arrival) {
	a.refused += r.long
	if r.state != "" && r.state != a.state {
		a.state, a.birth = r.state, true
		a.o.Log.Info().Str("source", a.o.Source.String()).Str("state", r.state).Msg("source")
	}
	if r.line == nil {
		return
	}
	a.lines++
	a.stamp = r.at
	var err error
	a.records, err = a.taker.take(a.records[:0], r.line, r.at)
	if err != nil {
		a.refused++
		if a.complain == 0 || r.at.Sub(a.complain) >= statusEvery {
			a.complain = r.at
			a.o.Log.Warn().Err(err).Uint64("refused", a.refused).Msg("a line gave no wind")
		}
	}
	for _, rec := range a.records {
		// Lines that come in one piece have one stamp, but are not one
		// measurement, and only the time tells them apart.
		rec.Time = max(rec.Time, a.last+1)
		a.last = rec.Time
		a.disk(a.o.Queue.Append(rec))
	}
}

// quietened notes that the source has fallen silent, once.
func (a *Agent) quietened(now sensors.Instant) bool {
	if a.state != stateReading || now.Sub(a.stamp) < silentAfter {
		return false
	}
	a.state = stateSilent
	return true
}

// disk logs the first trouble with the queue, and its end.
func (a *Agent) disk(err error) {
	switch {
	case err != nil && !a.diskBad:
		a.diskBad = true
		a.o.Log.Error().Err(err).Msg("the queue is in trouble; readings are kept in memory as far as there is room")
	case err == nil && a.diskBad && len(a.o.Queue.memory) == 0:
		a.diskBad = false
		a.o.Log.Info().Msg("the queue is well again")
	}
}

func (a *Agent) status(online bool) []byte {
	return status{
		Online: online, Since: a.o.Since.String(), Station: a.o.Station, At: a.o.Now().String(),
		Source: a.o.Source.String(), State: a.state, Lines: a.lines, Refused: a.refused,
		Queued: a.o.Queue.Len(), Dropped: a.o.Queue.Dropped(),
	}.payload()
}

// stop waits for the message that is on its way and says goodbye.
func (a *Agent) stop(done <-chan job) error {
	if a.busy {
		select {
		case j := <-done:
			a.sent(j)
		case <-time.After(lastAttempts):
		}
	}
	a.state = "stopped"
	if !a.out.Connected() {
		return nil
	}
	return a.out.Publish(StatusTopic(a.o.Topic), a.status(false), atLeastOnce, true)
}

// The states of a source, besides the reason why it is closed.
const (
	stateReading = "reading"
	stateSilent  = "silent"
)

// read opens the source again and again and passes its lines on.
func (a *Agent) read(ctx context.Context, out chan<- arrival) {
	send := func(r arrival) bool {
		select {
		case out <- r:
			return true
		case <-ctx.Done():
			return false
		}
	}
	pause := reopenLeast
	for ctx.Err() == nil {
		stream, err := a.o.Source.open(ctx)
		if err == nil {
			var lines int
			lines, err = a.pump(ctx, stream, send)
			if lines > 0 {
				pause = reopenLeast
			}
		}
		if a.o.Source.once {
			send(arrival{state: "ended", end: true})
			return
		}
		if !send(arrival{state: "closed: " + err.Error()}) {
			return
		}
		timer := time.NewTimer(pause)
		select {
		case <-ctx.Done():
		case <-timer.C:
		}
		timer.Stop()
		pause = min(2*pause, reopenMost)
	}
}

// pump passes on the lines of one stream until it ends. The stamp of a line is
// that of the piece in which it ended.
func (a *Agent) pump(ctx context.Context, stream io.ReadCloser, send func(arrival) bool) (lines int, err error) {
	stop := context.AfterFunc(ctx, func() { _ = stream.Close() }) // so that Read returns
	defer func() {
		if stop() {
			err = errors.Join(err, stream.Close())
		}
	}()
	var s splitter
	piece := make([]byte, readPiece)
	for {
		n, err := stream.Read(piece)
		at := a.o.Now()
		ok := true
		long := s.tooLong
		s.feed(piece[:n], func(line []byte) {
			lines++
			ok = ok && send(arrival{line: append([]byte(nil), line...), at: at, state: stateReading})
		})
		if long = s.tooLong - long; long > 0 {
			ok = ok && send(arrival{long: long})
		}
		if err != nil {
			return lines, err
		}
		if n == 0 && ctx.Err() != nil || !ok {
			return lines, ctx.Err()
		}
	}
}
