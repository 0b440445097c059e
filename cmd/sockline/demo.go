package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"os"
	"time"

	"github.com/rs/zerolog"

	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
	"sockline/sensors/synthetic"
	"sockline/testdata/airfields"
)

// The airfield and the weather of the demo.
const (
	demoAirfield = "skerrymoor"
	demoScene    = "demo"
)

// aheadOfStep is how many seconds of event time the demo's weather may run
// ahead of the last evaluated step.
const aheadOfStep = 2 * sensors.Second

// demoOptions says how the demo goes.
type demoOptions struct {
	length  time.Duration // wall time; 0: to the end of the story
	speed   float64       // seconds of the story in one of the wall
	history string        // directory to keep; empty: one that goes with the demo
}

func demoCommand() command {
	return command{
		name: "demo", summary: "play a lively quarter of an hour of synthetic weather through the whole program",
		setup: func(fs *flag.FlagSet) action {
			var o demoOptions
			fs.DurationVar(&o.length, "for", 0, "stop after this `DURATION` of the wall clock (default: when the story ends)")
			fs.Float64Var(&o.speed, "speed", 1, "`N` seconds of the story in one of the wall clock, 1 to 60")
			fs.StringVar(&o.history, "history", "", "keep the history in this `DIR`, else it goes when the demo ends")
			return func(ctx context.Context, p *program, _ []string) error {
				if !(o.speed >= 1 && o.speed <= 60) {
					return usagef("--speed %g: give a factor from 1 to 60", o.speed)
				}
				if o.length < 0 {
					return usagef("--for %v: give a time such as 90s", o.length)
				}
				return demo(ctx, p, o)
			}
		},
	}
}

// demo runs the daemon on its own broker and lets a generator publish the
// scene to it over a connection of its own. Time comes with the weather: the
// end of each second is a message, and a step closes when that has arrived. So
// a slow machine runs slower, and sees no less.
func demo(ctx context.Context, p *program, o demoOptions) (err error) {
	directory := o.history
	if directory == "" {
		if directory, err = os.MkdirTemp("", "sockline-demo-"); err != nil {
			return fmt.Errorf("make a directory for the history of the demo: %w", err)
		}
		defer func() { err = errors.Join(err, os.RemoveAll(directory)) }()
	}
	cfg, scene, err := demoSetup(directory)
	if err != nil {
		return err
	}
	specs, err := stationSpecs(cfg, scene.Start.Time())
	if err != nil {
		return err
	}
	control := "sockline-exercise/" + cfg.Airfield.ID + "/demo/second"
	out := newStory(p.stdout, cfg, scene)
	closed := make(chan sensors.Instant, 1)
	d, err := newDaemon(cfg, daemonOptions{
		exercise: true, stepped: true, control: control, anyPort: true,
		clock: &steppedClock{control: control, lateness: cfg.Analysis.Lateness, second: scene.Start},
		log:   zerolog.New(p.stderr).Level(zerolog.WarnLevel).With().Timestamp().Logger(),
		watch: func(rep *report) { out.step(rep); latest(closed, rep.At) },
	})
	if err != nil {
		return err
	}
	fmt.Fprintf(p.stderr, "The page of the demo is at %s\nThe broker of the demo is at %s, its topics below %s\n",
		d.pageURL(), d.broker.URL, d.prefix())
	out.begin()
	if o.length > 0 {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeout(ctx, o.length)
		defer cancel()
	}
	run, stop := context.WithCancel(ctx)
	defer stop()
	ended := make(chan error, 1)
	go func() { ended <- d.Run(run) }()
	weather := &demoWeather{daemon: d, scene: scene, specs: specs, control: control, speed: o.speed, closed: closed,
		heard: func() bool { return d.inputState().Subscribed }}
	failed := weather.play(run)
	stop()
	err = errors.Join(failed, <-ended)
	out.end()
	return errors.Join(err, out.err)
}

// demoSetup is the configuration and the scene of the demo. The daemon listens
// on free ports, but for the page, which tries the usual one first.
func demoSetup(directory string) (*config.Config, *synthetic.Scene, error) {
	source, err := airfields.Source(demoAirfield)
	if err != nil {
		return nil, nil, err
	}
	cfg, problems := config.Parse(demoAirfield+".toml", source)
	if len(problems) > 0 {
		return nil, nil, problems
	}
	cfg.Broker = config.Broker{URL: "embedded://127.0.0.1:0", Embedded: true, Address: "127.0.0.1:0"}
	cfg.History.Directory = directory
	scene, err := loadScene(cfg, demoScene)
	return cfg, scene, err
}

// latest puts a value into a channel of one, in the place of an older one.
func latest(c chan sensors.Instant, at sensors.Instant) {
	select {
	case <-c:
	default:
	}
	c <- at // only the loop puts anything in
}

// steppedClock is an arrival clock that the weather moves: the messages of the
// second up to T are stamped T + 100 ms, and the message that ends that second
// is stamped just after its lateness, so that the step T closes with it.
type steppedClock struct {
	control  string // the topic of the ends of seconds
	lateness time.Duration
	second   sensors.Instant // the last one that ended, or the start
	last     sensors.Instant
}

// Stamp gives the stamp of a message. It is called for one at a time.
func (c *steppedClock) Stamp(topic string, payload []byte) sensors.Instant {
	at := c.last
	switch topic {
	case "": // nothing came: time stands still
		at = max(at, c.second)
	case c.control:
		if t, err := time.Parse(time.RFC3339, string(payload)); err == nil {
			c.second = max(c.second, sensors.At(t).FloorSecond())
			at = c.second.Add(c.lateness) + 1
		}
	default:
		at = c.second + sensors.Second + sensors.Second/10
	}
	c.last = max(c.last, at)
	return c.last
}

// Offset is nothing: this clock is no image of the host clock.
func (c *steppedClock) Offset() time.Duration { return 0 }

// demoWeather publishes the scene, second by second.
type demoWeather struct {
	daemon  *daemon
	scene   *synthetic.Scene
	specs   []synthetic.StationSpec
	control string
	speed   float64
	closed  <-chan sensors.Instant // the last closed step

	link   *feed.Publisher
	heard  func() bool // whether the daemon hears what is published
	begun  time.Time
	step   sensors.Instant
	marker []byte // the end of a second that was said last
}

// How often a message that could not be sent is tried again, and the end of a
// second said again that no step follows: a process that was stopped for some
// seconds, as a laptop is that sleeps, has lost its connections and what was on
// them, and they come again by themselves.
const (
	publishAgain = 50 * time.Millisecond
	markAgain    = 2 * time.Second
)

// play publishes until the scene or ctx ends; the end of ctx is no error.
func (w *demoWeather) play(ctx context.Context) (err error) {
	defer func() {
		if ctx.Err() != nil {
			err = nil
		}
	}()
	if err := w.connect(ctx); err != nil {
		return err
	}
	defer w.link.Close()
	w.begun, w.step = time.Now(), w.scene.Start
	second := w.scene.Start + sensors.Second
	err = w.scene.Generate(w.specs, func(m sensors.Message) error {
		for ; second < m.Received.FloorSecond(); second += sensors.Second {
			if err := w.endSecond(ctx, second); err != nil {
				return err
			}
		}
		return w.publish(ctx, m.Topic, m.Payload)
	})
	for end := w.scene.Start.Add(w.scene.Length); err == nil && second <= end; second += sensors.Second {
		err = w.endSecond(ctx, second)
	}
	if err == nil {
		err = w.awaitStep(ctx, second-sensors.Second)
	}
	return err
}

// connect opens the generator's own connection, once the daemon listens.
func (w *demoWeather) connect(ctx context.Context) error {
	connected := make(chan struct{}, 1)
	link, err := feed.NewPublisher(context.WithoutCancel(ctx), feed.PublisherOptions{
		Broker: w.daemon.broker, ClientID: "sockline-demo", Log: w.daemon.log,
		OnConnect: func() {
			select {
			case connected <- struct{}{}:
			default:
			}
		},
	})
	if err != nil {
		return err
	}
	w.link = link
	select {
	case <-ctx.Done():
	case <-connected:
		select {
		case <-ctx.Done():
		case <-w.daemon.listening:
			return nil
		}
	}
	link.Close()
	return ctx.Err()
}

// publish sends one message and waits for the broker to take it, so that the
// order on the way is that of the calls. What cannot be sent now is sent later:
// a second is not over before its end is said, so that the story runs late, and
// misses nothing.
func (w *demoWeather) publish(ctx context.Context, topic string, payload []byte) error {
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		if w.heard() && w.link.Publish(topic, payload, 1, false) == nil {
			return nil
		}
		again := time.NewTimer(publishAgain)
		select {
		case <-ctx.Done():
		case <-again.C:
		}
		again.Stop()
	}
}

// endSecond says that everything up to t has been sent, then waits until the
// wall clock gets there, and until the daemon is not too far behind.
func (w *demoWeather) endSecond(ctx context.Context, t sensors.Instant) error {
	w.marker = t.Time().AppendFormat(nil, time.RFC3339)
	if err := w.publish(ctx, w.control, w.marker); err != nil {
		return err
	}
	since := time.Duration(float64(t.Sub(w.scene.Start)) / w.speed)
	timer := time.NewTimer(time.Until(w.begun.Add(since)))
	defer timer.Stop()
	select {
	case <-ctx.Done():
		return ctx.Err()
	case <-timer.C:
	}
	return w.awaitStep(ctx, t+sensors.Second-aheadOfStep)
}

// awaitStep waits until the step t has closed.
func (w *demoWeather) awaitStep(ctx context.Context, t sensors.Instant) error {
	again := time.NewTicker(markAgain)
	defer again.Stop()
	for w.step < t {
		select {
		case <-ctx.Done():
			return ctx.Err()
		case w.step = <-w.closed:
		case <-again.C:
			if w.marker == nil {
				continue
			}
			if err := w.publish(ctx, w.control, w.marker); err != nil {
				return err
			}
		}
	}
	return nil
}
