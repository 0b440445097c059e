package main

import (
	"context"
	"crypto/tls"
	"crypto/x509"
	"encoding/json"
	"errors"
	"fmt"
	mathrand "math/rand/v2"
	"path/filepath"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/history"
	"sockline/alerting/publish"
	"sockline/alerting/publish/cap"
	"sockline/alerting/publish/webhook"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
)

// spoolEvery is how often a spool that took nothing is tried again.
const spoolEvery = time.Second

// teller is everybody who is told of alerts besides the page and the readers
// of alert objects on the broker: webhooks, readers of standard alert
// messages, and those who listen for the heartbeat.
type teller struct {
	log      zerolog.Logger
	exercise bool
	instance string
	composer *cap.Composer // nil where nobody is told standard messages
	topic    string        // of them, below the prefix; empty for none
	sink     *publish.Sink
	spool    *cap.Spool // nil for none
	hooks    []hook
	tickers  []*time.Ticker
	beat     sensors.Instant // of the last heartbeat to webhooks; the loop's
}

// hook is one webhook.
type hook struct {
	*webhook.Receiver
	format    webhook.Format
	heartbeat bool
}

// newTeller prepares what the configuration names; nothing is opened before
// start.
func newTeller(d *daemon) (*teller, error) {
	cfg := d.current()
	t := &teller{log: d.log, exercise: d.opts.exercise, instance: d.instance, topic: cfg.CAP.Topic, sink: d.output.sink}
	var err error
	if cfg.CAP.Sender != "" {
		t.composer, err = cap.New(cap.Options{Sender: cfg.CAP.Sender, Airfield: cfg.Airfield, Exercise: t.exercise})
		if err != nil {
			return nil, err
		}
	}
	if cfg.CAP.Spool != "" {
		dir := cfg.CAP.Spool
		if t.exercise { // a reader of the spool must not meet a drill
			dir = filepath.Join(dir, "exercise")
		}
		if t.spool, err = cap.NewSpool(cap.SpoolOptions{Directory: dir, Tick: t.ticks(spoolEvery), Log: d.log}); err != nil {
			return nil, err
		}
	}
	for _, w := range cfg.Webhooks {
		c, err := trust(w)
		if err != nil {
			return nil, err
		}
		r, err := webhook.New(webhook.Options{
			Name: w.Name, URL: w.URL, Format: w.Format, Airfield: cfg.Airfield.ID, Secret: []byte(w.Secret.Reveal()), TLS: c,
			Timeout: w.Timeout, Exercise: w.Exercise, Drill: t.exercise, File: cfg.Queue(w),
			Now: time.Now, Random: mathrand.Float64, Tick: t.ticks(webhook.Tick), Log: d.log,
		})
		if err != nil {
			return nil, fmt.Errorf("webhook %s: %w", w.Name, err)
		}
		t.hooks = append(t.hooks, hook{r, w.Format, w.Heartbeat})
	}
	return t, nil
}

// trust says which authorities a webhook believes.
func trust(w config.Webhook) (*tls.Config, error) {
	c := &tls.Config{MinVersion: tls.VersionTLS12}
	if w.Authorities != nil {
		c.RootCAs = x509.NewCertPool()
		if !c.RootCAs.AppendCertsFromPEM(w.Authorities) {
			return nil, fmt.Errorf("webhook %s: there is no certificate in %s", w.Name, w.CAFile)
		}
	}
	return c, nil
}

// ticks is a ticker that ends with the teller.
func (t *teller) ticks(every time.Duration) <-chan time.Time {
	k := time.NewTicker(every)
	t.tickers = append(t.tickers, k)
	return k.C
}

// start lets everything run until it is stopped.
func (t *teller) start(ctx context.Context, d *daemon) {
	run := func(what string, f func(context.Context)) {
		ctx, cancel := context.WithCancel(ctx)
		done := make(chan struct{})
		go func() {
			defer close(done)
			f(ctx)
		}()
		d.teardown.add(what, func(stop context.Context) error {
			cancel()
			return ended(stop, done)
		})
	}
	d.teardown.add("the ticks of those who are told", func(context.Context) error {
		for _, k := range t.tickers {
			k.Stop()
		}
		return nil
	})
	if t.spool != nil {
		run("the spool", t.spool.Run)
	}
	for _, h := range t.hooks {
		run("the webhook "+h.State().Name, h.Run)
	}
}

// release passes an issue on. It is called from one goroutine at a time, in
// the order of the issues, and waits for nothing.
func (t *teller) release(n wording.Notice) {
	for _, h := range t.hooks {
		if h.format != webhook.CAP {
			h.Offer(webhook.Of(n))
		}
	}
	if t.composer == nil {
		return
	}
	m, ok := t.composer.Of(n)
	if !ok {
		return
	}
	for _, h := range t.hooks {
		if h.format == webhook.CAP {
			h.Offer(webhook.Event{ID: m.ID, Alert: m.AlertID, Phase: phaseOf(m), Exercise: m.Exercise, Time: m.Sent, Data: m.XML})
		}
	}
	if t.topic != "" {
		i := publish.Issue{AlertID: m.AlertID, Topic: t.topic, Phase: publish.Phase(phaseOf(m)), Exercise: m.Exercise, JSON: func(bool) []byte { return m.XML }}
		if err := t.sink.Issue(i); err != nil {
			t.log.Error().Err(err).Msg("a standard alert message is not published")
		}
	}
	if t.spool != nil {
		if m.Exercise && !t.exercise { // readings of an exercise are refused long before this
			t.log.Error().Str("alert", m.AlertID).Msg("an exercise message was kept from the live spool")
			return
		}
		t.spool.Offer(m)
	}
}

// phaseOf is where in the life of its alert a message stands. The phases of
// publish and webhook are in the same order.
func phaseOf(m cap.Message) webhook.Phase {
	switch {
	case m.Closing:
		return webhook.Closing
	case m.Opening:
		return webhook.Opening
	}
	return webhook.Update
}

// step tells that the program lives and evaluates. Called by the loop with
// each step, so that a loop that hangs falls silent here, too.
func (t *teller) step(s *wording.Status) {
	beat := *s
	// It holds until two of them are missing.
	beat.ValidUntil = s.At.Add(2 * publish.HeartbeatEvery)
	object := beat.JSON()
	t.sink.SetHeartbeat(object)
	if t.beat != 0 && s.At.Sub(t.beat) < publish.HeartbeatEvery {
		return
	}
	t.beat = s.At
	for _, h := range t.hooks {
		if h.heartbeat {
			h.Beat(webhook.Heartbeat(t.instance, webhook.Event{Exercise: t.exercise, Time: s.At, Data: object}))
		}
	}
}

// follow takes another geometry of the airfield.
func (t *teller) follow(cfg *config.Config) {
	if t.composer != nil {
		t.composer.SetAirfield(cfg.Airfield)
	}
}

// lastWords is how long before the end of the last run what was recorded may
// not have reached the queues of the webhooks.
const lastWords = time.Minute

// takeUp hands over once more what opened and closed in the last moments of
// the last run: a kill may have come between the history and the queues. A
// receiver knows it by its id if it has it already.
func (t *teller) takeUp(store *history.Store) error {
	last, ok, err := store.LastStep()
	if len(t.hooks) == 0 || err != nil || !ok {
		return err
	}
	since := last.Add(-lastWords)
	events, err := store.Events(history.Filter{From: since})
	for _, s := range events {
		if s.Opened < since && (s.Closed == 0 || s.Closed < since) {
			continue
		}
		e, fault := store.Event(s.ID)
		if fault != nil || len(e.Objects) == 0 {
			err = errors.Join(err, fault)
			continue
		}
		if s.Opened >= since {
			err = errors.Join(err, t.again(s.ID, webhook.Opening, s.Opened, e.Objects[0]))
		}
		if s.Closed >= since {
			err = errors.Join(err, t.again(s.ID, webhook.Closing, s.Closed, e.Objects[len(e.Objects)-1]))
		}
	}
	return err
}

// again hands a recorded object over to those who take objects. Standard
// messages end by themselves when nothing follows them.
func (t *teller) again(id string, p webhook.Phase, at sensors.Instant, object []byte) error {
	var said struct {
		Revision int  `json:"revision"`
		Exercise bool `json:"exercise"`
	}
	if err := json.Unmarshal(object, &said); err != nil {
		return fmt.Errorf("read the recorded alert %s: %w", id, err)
	}
	for _, h := range t.hooks {
		if h.format != webhook.CAP {
			h.Offer(webhook.Recorded(id, said.Revision, p, said.Exercise, at, object))
		}
	}
	return nil
}

// remarks is what is wrong with telling, in sentences.
func (t *teller) remarks() []string {
	var all []string
	say := func(format string, args ...any) { all = append(all, fmt.Sprintf(format, args...)) }
	for _, h := range t.hooks {
		s := h.State()
		if s.Problem != "" {
			say("The webhook %s does not take what is sent: %s. Waiting: %d.", s.Name, s.Problem, s.Waiting)
		}
		if s.Disk != "" {
			say("What waits for the webhook %s is in memory only: %s.", s.Name, s.Disk)
		}
		if n := s.Expired + s.Lost; n > 0 {
			say("The webhook %s was never told of %d events.", s.Name, n)
		}
	}
	if t.spool != nil {
		s := t.spool.State()
		if s.Problem != "" {
			say("Standard alert messages are not written: %s. Waiting: %d.", s.Problem, s.Waiting)
		}
		if s.Lost > 0 {
			say("%d standard alert messages were never written.", s.Lost)
		}
	}
	return all
}
