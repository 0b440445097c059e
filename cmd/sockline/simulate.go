package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"os"
	"time"

	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
	"sockline/sensors/synthetic"
)

func simulateCommand() command {
	return command{
		name: "simulate", summary: "make the readings of a scene, as a capture or to the broker, always marked as an exercise",
		setup: func(fs *flag.FlagSet) action {
			var o simulateOptions
			cfg := configFlag(fs)
			fs.StringVar(&o.scene, "scene", "", "`NAME` of a built-in scene, or the path of a .scene file")
			fs.Uint64Var(&o.seed, "seed", 0, "`NUMBER` that draws the turbulence and the faults; that of the scene unless given")
			fs.StringVar(&o.out, "out", "", "capture `FILE` to write (.gz and .zst are compressed); the truth goes to FILE.truth.jsonl")
			fs.StringVar(&o.to, "to", "", "write \"broker\" to send the messages to the broker of the configuration, in real `time`")
			fs.BoolVar(&o.live, "exercise-on-live-broker", false, "send to a broker that is not on this machine: its daemons must know that this is an exercise")
			return func(ctx context.Context, p *program, _ []string) error {
				o.seeded = given(fs, "seed") // 0 is a seed like any other
				return simulate(ctx, p, *cfg, o)
			}
		},
	}
}

// simulateOptions is what the command line asked for.
type simulateOptions struct {
	scene, out, to string
	seed           uint64
	seeded, live   bool
}

// simulate plays a scene, into a file or to the broker.
func simulate(ctx context.Context, p *program, path string, o simulateOptions) error {
	switch {
	case o.scene == "":
		return usagef("--scene is missing: name the scene to play")
	case (o.out == "") == (o.to == ""):
		return usagef("give either --out FILE or --to broker")
	case o.to != "" && o.to != "broker":
		return usagef("--to %q: the only place to send to is \"broker\", that of the configuration", o.to)
	}
	cfg, err := loadConfig(path)
	if err != nil {
		return err
	}
	scene, err := loadScene(cfg, o.scene)
	if err != nil {
		return err
	}
	if o.seeded {
		scene.Seed = o.seed
	}
	specs, err := stationSpecs(cfg, scene.Start.Time())
	if err != nil {
		return err
	}
	if o.to != "" {
		return simulateToBroker(ctx, p, cfg, scene, specs, o.live)
	}
	return simulateToFile(ctx, p, cfg, scene, specs, o.out)
}

// simulateToFile writes the capture and the truth beside it. A half-written
// pair is taken away again: it would look like a whole one.
func simulateToFile(ctx context.Context, p *program, cfg *config.Config, scene *synthetic.Scene, specs []synthetic.StationSpec, out string) (err error) {
	w, err := feed.CreateCapture(out, cfg.Airfield.ID)
	if err != nil {
		return err
	}
	truth := out + ".truth.jsonl"
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(out))
		}
	}()
	last, messages, bar := scene.Start, 0, newProgress(p, "readings")
	err = scene.Generate(specs, func(m sensors.Message) error {
		last = m.Received
		messages++
		bar.at(func() float64 { return last.Sub(scene.Start).Seconds() / scene.Length.Seconds() })
		if err := ctx.Err(); err != nil {
			return err
		}
		return w.Write(m)
	})
	bar.end()
	// The end mark lets a replay close every step of the scene.
	end := max(last, scene.Start.Add(scene.Length)).CeilSecond().Add(cfg.Analysis.Lateness) + sensors.Second
	if err = errors.Join(err, w.Close(end)); err != nil {
		return fmt.Errorf("make the readings of scene %s: %w", scene.Name, err)
	}
	if err = writeTruth(ctx, p, truth, cfg, scene); err != nil {
		return err
	}
	fmt.Fprintf(p.stderr, "EXERCISE: %d messages of %v of scene %s in %s, the true wind changes in %s\n", messages, scene.Length, scene.Name, out, truth)
	return nil
}

// contactWait is how long a command waits for a broker that it wants to send
// to.
const contactWait = 10 * time.Second

// simulateToBroker plays the scene from now on, in real time.
func simulateToBroker(ctx context.Context, p *program, cfg *config.Config, scene *synthetic.Scene, specs []synthetic.StationSpec, live bool) error {
	if !onLoopback(cfg.Broker.Address) && !live {
		return usagef("the broker %s is not on this machine: synthetic wind there could be taken for real wind; "+
			"give --exercise-on-live-broker if everybody who listens knows of the exercise", cfg.Broker.Address)
	}
	// The publisher calls from its own goroutine and must not be held up.
	connected := make(chan struct{}, 1)
	pub, err := feed.NewPublisher(ctx, feed.PublisherOptions{
		Broker: brokerOf(cfg), ClientID: "sockline-simulate",
		OnConnect: func() {
			select {
			case connected <- struct{}{}:
			default:
			}
		},
	})
	if err != nil {
		return fmt.Errorf("connect to the broker: %w", err)
	}
	defer func() { pub.Close(); <-pub.Done() }()
	select {
	case <-connected:
	case <-time.After(contactWait):
		return noContact(cfg, pub.State())
	case <-ctx.Done():
		return nil
	}
	// The scene's own date would make every reading years old on arrival.
	scene.Start = sensors.At(p.now()).CeilSecond()
	fmt.Fprintf(p.stderr, "EXERCISE: scene %s goes to %s for %v; a daemon takes it only when started with --exercise\n", scene.Name, cfg.Broker.Address, scene.Length)
	sent, lost, bar := 0, 0, newProgress(p, "readings")
	err = scene.Generate(specs, func(m sensors.Message) error {
		bar.at(func() float64 { return m.Received.Sub(scene.Start).Seconds() / scene.Length.Seconds() })
		if !waitUntil(ctx, p.now, m.Received) {
			return context.Canceled
		}
		if err := pub.Publish(m.Topic, m.Payload, 0, false); err != nil {
			lost++ // like a mast whose message does not arrive: the scene goes on
			return nil
		}
		sent++
		return nil
	})
	bar.end()
	fmt.Fprintf(p.stderr, "EXERCISE: %d messages sent, %d could not be sent\n", sent, lost)
	if errors.Is(err, context.Canceled) {
		return nil // stopped by the operator
	}
	if err == nil && sent == 0 {
		return errors.New("nothing could be sent")
	}
	return err
}

// waitUntil waits for an instant; false if ctx ended first.
func waitUntil(ctx context.Context, now func() time.Time, at sensors.Instant) bool {
	wait := at.Time().Sub(now())
	if wait <= 0 {
		return ctx.Err() == nil
	}
	timer := time.NewTimer(wait)
	defer timer.Stop()
	select {
	case <-timer.C:
		return true
	case <-ctx.Done():
		return false
	}
}
