package main

import (
	"context"
	"errors"
	"strings"
	"sync/atomic"
	"time"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/publish"
	"sockline/alerting/wording"
	"sockline/sensors/feed"
)

// outward is the way out over MQTT: the sink, and the connection below it.
// The connection carries the last will, so it is not the one on which
// readings come in.
type outward struct {
	sink  *publish.Sink
	link  atomic.Pointer[feed.Publisher] // nil until started
	ticks *time.Ticker
}

// errNotStarted is returned by an outward that has no connection yet.
var errNotStarted = errors.New("the connection for publishing is not open")

// Publish sends one message.
func (o *outward) Publish(topic string, payload []byte, qos byte, retained bool) error {
	p := o.link.Load()
	if p == nil {
		return errNotStarted
	}
	return p.Publish(topic, payload, qos, retained)
}

// Connected reports whether there is a connection now.
func (o *outward) Connected() bool {
	p := o.link.Load()
	return p != nil && p.Connected()
}

func (d *daemon) prefix() string {
	return publish.Prefix(d.current().MQTT.Prefix, d.current().Airfield.ID, d.opts.exercise)
}

func newOutward(d *daemon) (*outward, error) {
	o := &outward{ticks: time.NewTicker(publish.Tick)}
	var err error
	o.sink, err = publish.New(o, publish.Options{
		Prefix: d.prefix(), Instance: d.instance, Exercise: d.opts.exercise,
		NotObserved: d.nothingObserved, Farewell: func() []byte { return d.noContact("Stopped in order.") },
		Now: time.Now, Tick: o.ticks.C, Log: d.log, Listen: d.opts.listen,
	})
	if err != nil {
		o.ticks.Stop()
	}
	return o, err
}

// start connects and lets the sink run until it is stopped.
func (o *outward) start(ctx context.Context, d *daemon) error {
	status := publish.StatusTopic(d.prefix())
	p, err := feed.NewPublisher(ctx, feed.PublisherOptions{
		Broker: d.broker, ClientID: d.clientID("out"), Log: d.log, OnConnect: o.sink.OnConnect,
		Will: &feed.Will{Topic: status, Payload: d.noContact("The program or its connection ended without a goodbye.")},
	})
	if err != nil {
		return err
	}
	o.link.Store(p)
	d.teardown.add("the connection for publishing", func(ctx context.Context) error { return within(ctx, p.Close) })
	p.WatchRetained(status, o.sink.ObserveStatus)
	ctx, cancel := context.WithCancel(ctx)
	done := make(chan struct{})
	go func() {
		defer close(done)
		o.sink.Run(ctx)
	}()
	d.teardown.add("publishing", func(stop context.Context) error {
		cancel()
		defer o.ticks.Stop()
		return ended(stop, done)
	})
	return nil
}

// nothingObserved is every path as it reads while nothing is known.
func (d *daemon) nothingObserved() []publish.Retained {
	now := eventNow()
	var all []publish.Retained
	for i, p := range d.current().Airfield.Paths {
		v := wording.PathView{
			Path: p, State: alerting.NotObserved, Exercise: d.opts.exercise,
			Assessment: hazard.Assessment{Path: i, Reason: "the program has just started or has ended"},
			At:         now, ValidUntil: now.Add(validFor),
		}
		all = append(all, publish.Retained{Topic: publish.PathTopic(p.Runway(), p.Operation()), Payload: v.JSON()})
	}
	return all
}

// noContact is the status of a daemon that is gone.
func (d *daemon) noContact(why string) []byte {
	now := eventNow()
	s := wording.Status{
		Airfield: d.current().Airfield.ID, Instance: d.instance, Version: version, Condition: alerting.NoContact,
		At: now, ValidUntil: now.Add(validFor), Total: len(d.current().Stations), Remarks: []string{why}, Exercise: d.opts.exercise,
	}
	return s.JSON()
}

// show tells a step: to the page, the broker and whoever watches. Called by
// the loop.
func (d *daemon) show(rep *report) {
	status := d.status(rep)
	d.tell.step(status)
	v := viewOf(rep, status, time.Now())
	v.Airfield = d.current().Airfield.Name
	d.board.show(v)
	sink := d.output.sink
	for i := range rep.Paths {
		p := &rep.Paths[i]
		sink.SetPath(p.Path.Runway(), p.Path.Operation(), p.State, v.Paths[i].JSON)
	}
	for _, s := range v.Stations {
		sink.SetStation(s.ID, s.State, s.JSON)
	}
	sink.SetStatus(rep.Condition, v.StatusJSON)
	if d.opts.watch != nil {
		d.opts.watch(rep)
	}
}

// status is the daemon as a whole at a step.
func (d *daemon) status(rep *report) *wording.Status {
	in, h, off := d.inputState(), d.archive.health(), d.opts.clock.Offset()
	s := &wording.Status{
		Airfield: d.current().Airfield.ID, Instance: d.instance, Version: version, Condition: rep.Condition,
		At: rep.At, ValidUntil: rep.At.Add(validFor), Live: rep.Live, Total: len(rep.Stations),
		Connected: in.Connected, Subscribed: in.Subscribed, ClockOffset: off.Seconds(),
		Exercise: d.opts.exercise,
	}
	if h.Degraded {
		s.Degraded = h.Reason
	}
	if h.DayHead.Day != "" {
		s.DayHead = wording.DayHead{Day: h.DayHead.Day, Records: h.DayHead.Seq, SHA256: h.DayHead.Hash.String()}
	}
	remark := func(text string) { s.Remarks = append(s.Remarks, text) }
	if d.embedded != nil {
		remark(wording.EmbeddedBroker)
	}
	if in.Problem != nil {
		remark("Readings do not come in: " + in.Problem.Error() + ".")
	}
	if o := d.output.sink.State(); o.Mode == publish.Silent {
		remark("Another instance, " + o.Other + ", publishes under this prefix; this one stays silent.")
	}
	if off.Abs() > feed.OffsetLimit {
		remark("The host clock is off from the clock of the readings by " + off.Round(100*time.Millisecond).String() + ".")
	}
	if c := d.loop.capture; c != nil && c.problem() != "" {
		remark("The capture is broken off: " + c.problem() + ".")
	}
	for i := range rep.Stations {
		if m := rep.Stations[i].Maintenance; m != nil {
			remark("The mast " + rep.Stations[i].ID + " is under maintenance until " + m.To + ": " + strings.TrimSuffix(m.Reason, ".") + ".")
		}
	}
	if shared := rep.SharedClock; shared != 0 {
		remark("The clocks of the stations agree, and differ from that of this host by " + shared.Abs().String() + "; that is taken out.")
	}
	if r := d.refused.Load(); r != nil {
		remark(strings.ToUpper((*r)[:1]) + (*r)[1:] + ".")
	}
	s.Remarks = append(s.Remarks, d.tell.remarks()...)
	for _, why := range []string{h.SpaceLow, h.KeptBack} {
		if why != "" {
			remark(strings.ToUpper(why[:1]) + why[1:] + ".")
		}
	}
	if len(h.Damage) > 0 {
		remark("Parts of the history were found damaged; the log says which.")
	}
	return s
}

// transitionOf is an alert that is taken up again as it was last issued.
func transitionOf(a lifecycle.Alert) lifecycle.Transition {
	return lifecycle.Transition{At: a.Updated, Alert: a, From: a.Level, Why: "taken up again"}
}

var _ publish.Broker = (*outward)(nil)
