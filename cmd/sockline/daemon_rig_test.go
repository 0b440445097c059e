package main

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
	"sockline/sensors/synthetic"
)

// patience bounds every wait of these tests that has no limit to prove.
const patience = 30 * time.Second

// steady is an outflow that grows within a minute and then stays.
const steady = `
title      An outflow that stays
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     6 h
seed       5
wind       080 deg 7 kt
turbulence B
outflow    at 2000 m before 07 offset 350 m  strength 21 kt radius 900 m  starts 14 s grows 40 s holds 5 h fades 70 s
`

// hurry is a clock that runs faster than the wall: event time from base on,
// factor seconds in one of the wall since begun.
type hurry struct {
	begun  time.Time
	base   time.Time
	factor float64
}

func newHurry(factor float64) hurry {
	return hurry{begun: time.Now(), base: time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC), factor: factor}
}

func (h hurry) since() time.Duration { return time.Duration(float64(time.Since(h.begun)) * h.factor) }
func (h hurry) now() time.Time       { return h.base.Add(h.since()) }

func (h hurry) clock(tb testing.TB) *feed.Clock {
	tb.Helper()
	c, err := feed.NewClockOver(h.now, h.since, 1)
	if err != nil {
		tb.Fatal(err)
	}
	return c
}

// site writes a configuration of Skerry Moor for a broker: the page on a free
// port, the history in dir. The lateness of 5 s leaves the way over the broker
// time when event time runs fast.
func site(tb testing.TB, broker, dir string) string {
	tb.Helper()
	text, err := os.ReadFile(skerrymoor)
	if err != nil {
		tb.Fatal(err)
	}
	r := strings.NewReplacer("embedded://127.0.0.1:1883", broker, "./sockline-data", dir, "127.0.0.1:7625", "127.0.0.1:0")
	return writeFile(tb, "site.toml", r.Replace(string(text))+"\n[analysis]\nlateness = \"5 s\"\n")
}

func mustLoad(tb testing.TB, path string) *config.Config {
	tb.Helper()
	cfg, err := config.Load(path)
	if err != nil {
		tb.Fatal(err)
	}
	return cfg
}

// started is a daemon that runs, and how to stop it.
type started struct {
	*daemon
	stop func() error
}

// startDaemon runs a daemon for exercises under a hurried clock. It stops with
// the test at the latest.
func startDaemon(tb testing.TB, cfg *config.Config, clock arrivalClock, capture string) started {
	tb.Helper()
	d, err := newDaemon(cfg, daemonOptions{
		exercise: true, clock: clock, capture: capture, instance: "under-test", listen: time.Millisecond,
		log: zerolog.New(zerolog.NewTestWriter(tb)).Level(zerolog.InfoLevel),
	})
	if err != nil {
		tb.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.WithoutCancel(tb.Context()))
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	stop := sync.OnceValue(func() error {
		cancel()
		return <-ended
	})
	tb.Cleanup(func() {
		if err := stop(); err != nil {
			tb.Errorf("stop the daemon: %v", err)
		}
	})
	return started{d, stop}
}

// blow publishes a scene in the time of a clock until the test ends. What
// cannot be sent is lost, as on a real mast.
func blow(tb testing.TB, cfg *config.Config, text, broker string, h hurry) {
	tb.Helper()
	tb.Cleanup(newBlower(tb, cfg, text, broker, h))
}

// newBlower is blow until it is told to stop.
func newBlower(tb testing.TB, cfg *config.Config, text, broker string, h hurry) (stop func()) {
	tb.Helper()
	scene := sceneAt(tb, cfg, text, sensors.At(h.now()).FloorSecond())
	specs, err := stationSpecs(cfg, scene.Start.Time())
	if err != nil {
		tb.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.WithoutCancel(tb.Context()))
	link, err := feed.NewPublisher(ctx, feed.PublisherOptions{
		Broker: feed.Broker{URL: broker}, ClientID: "masts", Log: zerolog.Nop(),
	})
	if err != nil {
		tb.Fatal(err)
	}
	done := make(chan struct{})
	go func() {
		defer close(done)
		defer link.Close()
		_ = scene.Generate(specs, func(m sensors.Message) error { // ends with ctx only
			wait := time.NewTimer(time.Duration(float64(m.Received.Sub(sensors.At(h.now()))) / h.factor))
			defer wait.Stop()
			select {
			case <-ctx.Done():
				return ctx.Err()
			case <-wait.C:
			}
			_ = link.Publish(m.Topic, m.Payload, 0, false)
			return nil
		})
	}()
	return func() { cancel(); <-done }
}

func sceneAt(tb testing.TB, cfg *config.Config, text string, start sensors.Instant) *synthetic.Scene {
	tb.Helper()
	scene, err := loadScene(cfg, writeFile(tb, "test.scene", text))
	if err != nil {
		tb.Fatal(err)
	}
	scene.Start = start
	return scene
}

// listened is everything that a client below the exercise prefix has heard.
type listened struct {
	sub *feed.Subscriber

	mu     sync.Mutex
	alerts []string          // objects, in order
	last   map[string]string // newest payload of each other topic
}

// listenTo collects until the test ends.
func listenTo(tb testing.TB, broker string) *listened {
	tb.Helper()
	s, err := feed.Subscribe(context.WithoutCancel(tb.Context()), feed.SubscribeOptions{
		Broker: feed.Broker{URL: broker}, ClientID: "tower", Topics: []string{"sockline-exercise/skerrymoor/#"},
		Clock: feed.NewClock(), Log: zerolog.Nop(),
	})
	if err != nil {
		tb.Fatal(err)
	}
	l := &listened{sub: s, last: make(map[string]string)}
	done := make(chan struct{})
	go func() {
		defer close(done)
		for {
			select {
			case m := <-s.Messages():
				l.take(strings.TrimPrefix(m.Topic, "sockline-exercise/skerrymoor/"), string(m.Payload))
			case <-s.Done():
				return
			}
		}
	}()
	tb.Cleanup(func() { s.Close(); <-done })
	until(tb, "the listener to be subscribed", func() bool { return s.State().Subscribed })
	return l
}

func (l *listened) take(topic, payload string) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if topic == "alert" {
		l.alerts = append(l.alerts, payload)
	} else {
		l.last[topic] = payload
	}
}

// heard is the alerts so far; count is how many.
func (l *listened) heard() []string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return append([]string(nil), l.alerts...)
}

func (l *listened) count() int { return len(l.heard()) }

func (l *listened) topic(name string) string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.last[name]
}

// awaitAlert waits for an alert, after the first n, that fits.
func (l *listened) awaitAlert(tb testing.TB, what string, n int, fits func(alertLine) bool) alertLine {
	tb.Helper()
	var found alertLine
	until(tb, what, func() bool {
		all := l.heard()
		for ; n < len(all); n++ {
			if err := json.Unmarshal([]byte(all[n]), &found); err != nil {
				tb.Fatalf("alert %s: %v", all[n], err)
			}
			if fits(found) {
				return true
			}
		}
		return false
	})
	return found
}

// until waits for something that the other side brings about.
func until(tb testing.TB, what string, ok func() bool) {
	tb.Helper()
	deadline := time.NewTimer(patience)
	defer deadline.Stop()
	look := time.NewTicker(5 * time.Millisecond)
	defer look.Stop()
	for !ok() {
		select {
		case <-deadline.C:
			tb.Fatalf("waited %v for %s", patience, what)
		case <-look.C:
		}
	}
}

// get asks the page of a daemon.
func (s started) get(tb testing.TB, path string) (code int, body string) {
	tb.Helper()
	return fetch(tb, s.pageURL()+path)
}

func fetch(tb testing.TB, url string) (code int, body string) {
	tb.Helper()
	client := http.Client{Timeout: 5 * time.Second, Transport: &http.Transport{DisableKeepAlives: true}}
	answer, err := client.Get(url)
	if err != nil {
		tb.Fatal(err)
	}
	defer answer.Body.Close()
	b, err := io.ReadAll(answer.Body)
	if err != nil {
		tb.Fatal(err)
	}
	return answer.StatusCode, string(b)
}

// landingLoss picks the alert that the steady scene is about.
func landingLoss(a alertLine) bool {
	return a.Runway == "07" && a.Operation == "landing" && a.Kind == "headwind-loss"
}

func captureName(tb testing.TB) string { return filepath.Join(tb.TempDir(), "daemon.jsonl") }

func (a alertLine) String() string {
	return fmt.Sprintf("%s revision %d %s", a.ID, a.Revision, a.State)
}
