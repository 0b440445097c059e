package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"time"

	"github.com/rs/zerolog"

	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
)

func recordCommand() command {
	return command{
		name: "record", summary: "write what the broker delivers on the topics of the stations into a capture",
		setup: func(fs *flag.FlagSet) action {
			cfg := configFlag(fs)
			out := fs.String("out", "", "capture `FILE` to write (.gz and .zst are compressed)")
			length := fs.Duration("for", 0, "how `LONG` to record, such as 10m; until stopped unless given")
			return func(ctx context.Context, p *program, _ []string) error {
				if *out == "" {
					return usagef("--out is missing: name the capture to write")
				}
				if *length < 0 {
					return usagef("--for %v: a length of time is positive", *length)
				}
				c, err := loadConfig(*cfg)
				if err != nil {
					return err
				}
				return record(ctx, p, c, *out, *length)
			}
		},
	}
}

// listener is a subscription to stations for a while.
type listener struct {
	sub    *feed.Subscriber
	clock  *feed.Clock
	states chan feed.LinkState // changes of the connection; some may be missed
}

// listen subscribes to topics of the configured broker.
func listen(ctx context.Context, cfg *config.Config, name string, topics []string) (*listener, error) {
	l := &listener{clock: feed.NewClock(), states: make(chan feed.LinkState, 1)}
	var err error
	l.sub, err = feed.Subscribe(ctx, feed.SubscribeOptions{
		Broker: brokerOf(cfg), ClientID: name, Topics: topics, Clock: l.clock, Log: zerolog.Nop(),
		OnState: func(connected, subscribed bool) {
			select {
			case l.states <- feed.LinkState{Connected: connected, Subscribed: subscribed}:
			default:
			}
		},
	})
	if err != nil {
		return nil, fmt.Errorf("connect to the broker: %w", err)
	}
	return l, nil
}

// close ends the subscription. Messages that wait in the queue stay there.
func (l *listener) close() {
	l.sub.Close()
	<-l.sub.Done()
}

// topicsOf is the topics of the stations, in their order.
func topicsOf(stations []sensors.Station) []string {
	topics := make([]string, 0, len(stations))
	for _, s := range stations {
		topics = append(topics, s.AllTopics()...)
	}
	return topics
}

// record writes a raw capture: every message as it came and as it was stamped,
// whether or not anything can be made of it.
func record(ctx context.Context, p *program, cfg *config.Config, out string, length time.Duration) (err error) {
	w, err := feed.CreateCapture(out, cfg.Airfield.ID)
	if err != nil {
		return err
	}
	var end sensors.Instant
	defer func() { err = errors.Join(err, w.Close(end)) }()
	// The subscription outlives ctx, so that its end is in order.
	l, err := listen(context.WithoutCancel(ctx), cfg, "sockline-record", topicsOf(cfg.Stations))
	if err != nil {
		return err
	}
	messages, subscribed, err := recordUntil(ctx, p, cfg, l, w, length)
	l.close()
	// What was stamped before the end belongs into the file.
	for len(l.sub.Messages()) > 0 && err == nil {
		messages++
		err = w.Write(<-l.sub.Messages())
	}
	if err != nil {
		return err
	}
	fmt.Fprintf(p.stderr, "%d messages in %s\n", messages, out)
	if dropped := l.sub.Dropped() + l.sub.Oversize(); dropped > 0 {
		// Without the end mark: not everything up to now is there.
		return fmt.Errorf("%d messages were lost: the disk was too slow for them, or they were too long", dropped)
	}
	if !subscribed {
		return noContact(cfg, l.sub.State())
	}
	end = l.clock.Now()
	return nil
}

// recordUntil writes messages until the time is over or the operator stops.
func recordUntil(ctx context.Context, p *program, cfg *config.Config, l *listener, w *feed.CaptureWriter, length time.Duration) (messages int, subscribed bool, err error) {
	flush := time.NewTicker(time.Second)
	defer flush.Stop()
	var over <-chan time.Time
	if length > 0 {
		timer := time.NewTimer(length)
		defer timer.Stop()
		over = timer.C
	}
	for {
		select {
		case m := <-l.sub.Messages():
			messages++
			if err := w.Write(m); err != nil {
				return messages, subscribed, err
			}
		case s := <-l.states:
			subscribed = subscribed || s.Subscribed
			fmt.Fprintf(p.stderr, "broker %s: %s\n", cfg.Broker.Address, linkWords(s))
		case <-flush.C:
			if err := w.Flush(); err != nil {
				return messages, subscribed, err
			}
		case <-over:
			return messages, subscribed || l.sub.State().Subscribed, nil
		case <-ctx.Done():
			return messages, subscribed || l.sub.State().Subscribed, nil
		}
	}
}

// noContact is the error of a command that could not listen or send.
func noContact(cfg *config.Config, s feed.LinkState) error {
	err := fmt.Errorf("broker %s: %s", cfg.Broker.Address, linkWords(s))
	if s.Problem != nil {
		err = fmt.Errorf("%w: %w", err, s.Problem)
	}
	if cfg.Broker.Embedded {
		err = fmt.Errorf("%w (the built-in broker listens only while \"sockline run\" does)", err)
	}
	return err
}

// linkWords is the state of a connection in words.
func linkWords(s feed.LinkState) string {
	switch {
	case s.Subscribed:
		return "listening"
	case s.Connected:
		return "connected, but not every topic is granted yet"
	}
	return "no contact"
}
