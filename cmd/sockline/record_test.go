package main

import (
	"bytes"
	"context"
	"encoding/json"
	"io"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"sockline/sensors/feed/brokertest"
)

// screen is an output that a test can watch while the program runs.
type screen struct {
	mu   sync.Mutex
	text bytes.Buffer
	news chan struct{} // one token: something was written
}

func newScreen() *screen { return &screen{news: make(chan struct{}, 1)} }

// Write adds to the screen.
func (s *screen) Write(b []byte) (int, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	select {
	case s.news <- struct{}{}:
	default:
	}
	return s.text.Write(b)
}

func (s *screen) String() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.text.String()
}

// await waits until the screen shows a text so many times.
func (s *screen) await(tb testing.TB, text string, times int) {
	tb.Helper()
	limit := time.After(30 * time.Second)
	for strings.Count(s.String(), text) < times {
		select {
		case <-s.news:
		case <-limit:
			tb.Fatalf("%q does not appear %d times in\n%s", text, times, s)
		}
	}
}

// background is a command that runs beside the test, by the real clock.
type background struct {
	stdout, stderr *screen
	stop           func() int // ends it as an operator would; the exit code
}

func start(tb testing.TB, args ...string) background {
	tb.Helper()
	ctx, cancel := context.WithCancel(context.WithoutCancel(tb.Context()))
	b := background{stdout: newScreen(), stderr: newScreen()}
	code := make(chan int, 1)
	go func() { code <- run(ctx, args, strings.NewReader(""), b.stdout, b.stderr) }()
	b.stop = sync.OnceValue(func() int {
		cancel()
		return <-code
	})
	tb.Cleanup(func() { b.stop() })
	return b
}

// awaitLines waits until a file that is being written has so many lines.
func awaitLines(tb testing.TB, path string, lines int) {
	tb.Helper()
	look := time.NewTicker(20 * time.Millisecond)
	defer look.Stop()
	limit := time.After(30 * time.Second)
	for {
		text, err := os.ReadFile(path)
		if err != nil {
			tb.Fatal(err)
		}
		if bytes.Count(text, []byte("\n")) >= lines {
			return
		}
		select {
		case <-look.C:
		case <-limit:
			tb.Fatalf("%s does not come to %d lines", path, lines)
		}
	}
}

// withLines is Skerry Moor with some texts of its configuration replaced.
func withLines(tb testing.TB, oldnew ...string) string {
	tb.Helper()
	source, err := os.ReadFile(skerrymoor)
	if err != nil {
		tb.Fatal(err)
	}
	return writeFile(tb, "site.toml", strings.NewReplacer(oldnew...).Replace(string(source)))
}

// TestRecordTryAndSimulateOverABroker plays three seconds of weather to a real
// broker: record writes every message, try shows those of one mast, and what
// was recorded can be replayed.
func TestRecordTryAndSimulateOverABroker(t *testing.T) {
	broker := brokertest.Start(t)
	configuration := withLines(t, "embedded://127.0.0.1:1883", broker.URL())
	scene := writeFile(t, "test.scene", strings.Replace(short, "length     5 min", "length     3 s", 1))
	capture := filepath.Join(t.TempDir(), "capture.jsonl")
	recording := start(t, "record", "--config", configuration, "--out", capture)
	trying := start(t, "try", "--config", configuration, "--station", "far07", "--for", "30s", "--output", "json")
	recording.stderr.await(t, "listening", 1)
	trying.stderr.await(t, "listening", 1)
	var out, messages console
	if code := run(t.Context(), []string{"simulate", "--config", configuration, "--scene", scene, "--to", "broker"}, nil, &out, &messages); code != exitDone {
		t.Fatalf("simulate: exit %d: %s", code, &messages)
	}
	if !strings.Contains(messages.String(), "EXERCISE: 24 messages sent, 0 could not be sent") {
		t.Errorf("simulate says %s", &messages)
	}
	trying.stdout.await(t, `"outcome":"reading"`, 3)
	if code := trying.stop(); code != exitDone {
		t.Errorf("try: exit %d: %s", code, trying.stderr)
	}
	var r trialResult
	if err := json.NewDecoder(strings.NewReader(trying.stdout.String())).Decode(&r); err != nil {
		t.Fatal(err)
	}
	if len(r.Readings) != 1 || !r.Readings[0].Exercise || !strings.Contains(r.Why, "only a daemon started with --exercise takes it") {
		t.Errorf("try shows %+v", r)
	}
	awaitLines(t, capture, 1+24) // the header, and 8 masts for 3 s
	if code := recording.stop(); code != exitDone || !strings.Contains(recording.stderr.String(), "24 messages in") {
		t.Errorf("record: exit %d: %s", code, recording.stderr)
	}
	if got, end := readCapture(t, capture); len(got) != 24 || end < got[23].Received {
		t.Errorf("%d messages, end %s", len(got), end)
	}
	o := call(t, "replay", "--config", configuration, "--capture", capture)
	// The last second is closed only if the recording went on until it was due.
	whole := strings.HasPrefix(o.stderr, "EXERCISE: 16 readings in") || strings.HasPrefix(o.stderr, "EXERCISE: 24 readings in")
	if o.code != exitDone || !whole || strings.Contains(o.stderr, "note:") {
		t.Errorf("replay: exit %d: %s", o.code, o.stderr)
	}
}

// TestNoContact holds what an operator is told where no broker is.
func TestNoContact(t *testing.T) {
	broker := brokertest.Start(t)
	configuration := withLines(t, "embedded://127.0.0.1:1883", broker.URL())
	broker.Kill()
	for name, args := range map[string][]string{
		"record": {"record", "--out", filepath.Join(t.TempDir(), "x.jsonl"), "--for", "100ms"},
		"try":    {"try", "--station", "far07", "--for", "100ms"},
	} {
		var stdout, stderr console
		code := run(t.Context(), append(args, "--config", configuration), strings.NewReader(""), &stdout, &stderr)
		if code != exitFailed || !strings.Contains(stderr.String(), "no contact") {
			t.Errorf("%s: exit %d: %s", name, code, &stderr)
		}
	}
}

// TestSilentStation holds that try tells a silent topic from a lost broker.
func TestSilentStation(t *testing.T) {
	configuration := withLines(t, "embedded://127.0.0.1:1883", brokertest.Start(t).URL())
	var stderr console
	code := run(t.Context(), []string{"try", "--config", configuration, "--station", "far07", "--for", "2s"}, nil, io.Discard, &stderr)
	if code != exitFailed || !strings.Contains(stderr.String(), "is this the topic it publishes on?") {
		t.Errorf("exit %d: %s", code, &stderr)
	}
}

// TestSimulateSparesLiveBrokers holds that synthetic wind goes to a broker
// elsewhere only by express wish. 192.0.2.1 is an address for documentation
// (RFC 5737): it is never asked.
func TestSimulateSparesLiveBrokers(t *testing.T) {
	configuration := withLines(t, "embedded://127.0.0.1:1883", "mqtt://192.0.2.1:1883")
	o := call(t, "simulate", "--config", configuration, "--scene", "quiet", "--to", "broker")
	if o.code != exitUsage || !strings.Contains(o.stderr, "--exercise-on-live-broker") {
		t.Errorf("exit %d: %s", o.code, o.stderr)
	}
	for address, want := range map[string]bool{
		"127.0.0.1:1883": true, "127.8.8.8:1": true, "[::1]:1883": true, "localhost:1883": true,
		"192.0.2.1:1883": false, "localhost.example:1883": false, "0.0.0.0:1883": false, "127.0.0.1": false, "": false,
	} {
		if got := onLoopback(address); got != want {
			t.Errorf("onLoopback(%q) is %v", address, got)
		}
	}
}
