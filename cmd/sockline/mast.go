package main

import (
	"context"
	"flag"
	"fmt"
	"os"
	"slices"
	"strconv"
	"strings"
	"time"

	"github.com/rs/zerolog"

	"sockline/config"
	"sockline/sensors/feed"
	"sockline/sensors/mast"
)

// mastDrain is how long the agent goes on sending when standard input has
// ended. What is left then waits in the queue for the next run.
const mastDrain = 10 * time.Second

// mastFlags are what the agent is told.
type mastFlags struct {
	source, station, topic, queue, sentence, queueSize string
	broker                                             feed.Broker
}

func mastCommand() command {
	return command{
		name: "mast", summary: "read an instrument that speaks NMEA 0183 and publish its wind, with a queue on disk",
		setup: func(fs *flag.FlagSet) action {
			f := &mastFlags{}
			fs.StringVar(&f.source, "source", "", "`SOURCE` of the lines: "+mast.Forms)
			fs.StringVar(&f.station, "station", "", "`ID` of the station, as in the configuration of the daemon")
			fs.StringVar(&f.topic, "topic", "", "`TOPIC` to publish to, as in the configuration of the daemon; format senml+json")
			fs.StringVar(&f.queue, "queue", "", "`DIR` of the readings that wait while the broker is away")
			fs.StringVar(&f.queueSize, "queue-size", "16MiB", "`SIZE` of the queue, such as 512KiB or 16MiB; beyond it the oldest readings go")
			fs.StringVar(&f.sentence, "sentence", string(mast.Automatic), "`KIND` of sentence to take: auto, MWV, MWD, MDA or XDR")
			fs.StringVar(&f.broker.URL, "broker", "", "`URL` of the broker, such as mqtts://host:8883")
			fs.StringVar(&f.broker.Username, "username", "", "`NAME` to log in with")
			fs.StringVar(&f.broker.PasswordFile, "password-file", "", "`FILE` whose first line is the password; "+config.PasswordVariable+" takes its place")
			fs.StringVar(&f.broker.CAFile, "ca-file", "", "`FILE` of the broker's authority, PEM")
			fs.StringVar(&f.broker.CertFile, "cert-file", "", "`FILE` of the client's certificate, PEM")
			fs.StringVar(&f.broker.KeyFile, "key-file", "", "`FILE` of its key, PEM")
			return func(ctx context.Context, p *program, _ []string) error { return runMast(ctx, p, f) }
		},
	}
}

// runMast runs the agent until it is stopped or standard input has ended.
func runMast(ctx context.Context, p *program, f *mastFlags) error {
	if err := f.check(); err != nil {
		return err
	}
	source, err := mast.ParseSource(f.source, p.stdin)
	if err != nil {
		return usagef("--source: %v", err)
	}
	size, err := byteSize(f.queueSize)
	if err != nil || size < mast.LeastQueue {
		return usagef("--queue-size %q: write a size such as 16MiB, at least %dKiB", f.queueSize, mast.LeastQueue>>10)
	}
	queue, err := mast.OpenQueue(f.queue, size)
	if err != nil {
		return err
	}
	defer queue.Close()
	// A mast that nobody looks at measures on, like the daemon.
	lines := newLogQueue(p.stderr)
	defer lines.flush(logPatience)
	log := zerolog.New(zerolog.ConsoleWriter{Out: lines, NoColor: true, TimeFormat: time.RFC3339}).With().Timestamp().Str("station", f.station).Logger()
	clock := feed.NewClock()
	since := clock.Now()
	agent, err := mast.New(mast.Options{
		Station: f.station, Topic: f.topic, Source: source, Choose: mast.Choose(f.sentence), Queue: queue,
		Now: clock.Now, Since: since, Drain: mastDrain, Log: log,
	})
	if err != nil {
		return err
	}
	f.broker.Password = os.Getenv(config.PasswordVariable)
	// The connection outlives ctx, so that the goodbye goes out.
	out, err := feed.NewPublisher(context.WithoutCancel(ctx), feed.PublisherOptions{
		Broker: f.broker, ClientID: "sockline-mast-" + f.station, Log: log, OnConnect: agent.Connect,
		Will: &feed.Will{Topic: mast.StatusTopic(f.topic), Payload: mast.Will(f.station, since)},
	})
	if err != nil {
		return err
	}
	defer out.Close()
	if n := queue.Len(); n > 0 {
		log.Info().Int("readings", n).Msg("readings of an earlier run wait in the queue")
	}
	if err := agent.Run(ctx, out); err != nil {
		log.Warn().Err(err).Msg("the goodbye did not go out")
	}
	if n := queue.Len(); n > 0 {
		fmt.Fprintf(p.stderr, "%d readings stay in the queue %s for the next run\n", n, f.queue)
	}
	return nil
}

// check finds what is missing or cannot be.
func (f *mastFlags) check() error {
	for _, required := range []struct{ name, value, what string }{
		{"source", f.source, "where the lines come from: " + mast.Forms},
		{"station", f.station, "the id of the station"},
		{"topic", f.topic, "the topic of the station"},
		{"broker", f.broker.URL, "the broker, such as mqtts://host:8883"},
		{"queue", f.queue, "a directory for the readings that wait"},
	} {
		if required.value == "" {
			return usagef("--%s is missing: name %s", required.name, required.what)
		}
	}
	if strings.Trim(f.station, "abcdefghijklmnopqrstuvwxyz0123456789-") != "" {
		return usagef("--station %q: an id is a-z, 0-9 and '-'", f.station)
	}
	if strings.ContainsAny(f.topic, "+#\x00") || strings.HasPrefix(f.topic, "$") {
		return usagef("--topic %q: a topic has no wildcards and no $ at its beginning", f.topic)
	}
	if f.topic == mast.StatusTopic(f.topic) {
		return usagef("--topic %q: the agent tells about itself there; let the wind have another last level, such as wind", f.topic)
	}
	if !slices.Contains(mast.Kinds(), mast.Choose(f.sentence)) {
		return usagef("--sentence %q: choose auto, MWV, MWD, MDA or XDR", f.sentence)
	}
	return nil
}

// byteSize reads a size in bytes, KiB, MiB or GiB.
func byteSize(text string) (int64, error) {
	number, shift := text, 0
	for unit, s := range map[string]int{"KiB": 10, "MiB": 20, "GiB": 30} {
		if before, ok := strings.CutSuffix(text, unit); ok {
			number, shift = before, s
		}
	}
	n, err := strconv.ParseInt(number, 10, 64)
	if err != nil || n < 0 || n > 1<<20 && shift > 0 {
		return 0, fmt.Errorf("%q is not a size", text)
	}
	return n << shift, nil
}
