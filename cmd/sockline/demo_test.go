package main

import (
	"context"
	"io"
	"net"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/sensors"
	"sockline/sensors/feed"
	"sockline/sensors/feed/brokertest"
)

const demoGolden = "testdata/demo.txt"

// TestDemoStory plays the whole demo at its greatest speed and holds its text
// to the golden one. It goes through a broker, two connections, the history on
// disk and the page, and yet is the same on every machine.
func TestDemoStory(t *testing.T) {
	kept := filepath.Join(t.TempDir(), "history")
	var stdout, stderr console
	p := program{stdin: strings.NewReader(""), stdout: &stdout, stderr: &stderr, now: time.Now}
	if code := p.run(t.Context(), []string{"demo", "--speed", "60", "--history", kept}); code != exitDone {
		t.Fatalf("exit %d: %s", code, stderr.String())
	}
	got := stdout.String()
	if *rewrite {
		if err := os.WriteFile(demoGolden, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(demoGolden)
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) {
		t.Errorf("the story differs from %s (-rewrite writes it anew): %s", demoGolden, firstDifference(got, string(want)))
	}
	if !strings.Contains(stderr.String(), "http://127.0.0.1:") {
		t.Errorf("the page's address is not shown: %s", stderr.String())
	}
	checkStory(t, got)
	// A slow step would have shown as readings that came too late.
	for _, o := range journalled(t, kept) {
		if !strings.Contains(o, `"missing":[]`) {
			t.Errorf("a mast was missing in %s", o)
		}
	}
}

// checkStory holds what the demo promises, whatever the golden text says: the
// first alert within a minute of the story, every passage marked, the notice
// with every alert.
func checkStory(t *testing.T, story string) {
	t.Helper()
	words := strings.Join(strings.Fields(story), " ")
	_, after, found := strings.Cut(words, "Level ")
	if !found || !strings.Contains(after, "Level 3 of 3") {
		t.Error("no alert of level 3 opens")
	}
	alert := strings.Index(story, "The headwind falls by")
	if alert < 0 || strings.LastIndex(story[:alert], "14:01:0") >= 0 {
		t.Error("no loss is told within the first minute")
	}
	for _, line := range strings.Split(story, "\n") {
		if len(line) > 8 && line[2] == ':' && line[5] == ':' && !strings.HasPrefix(line[8:], "  EXERCISE: ") {
			t.Errorf("a passage is not marked as an exercise: %s", line)
		}
		if len(line) > storyWidth {
			t.Errorf("a line is longer than %d: %s", storyWidth, line)
		}
	}
	if !strings.HasSuffix(words, alerting.Notice) {
		t.Error("the story does not end with the notice")
	}
}

// TestDemoEndsEarly stops the demo by --for and from outside: a summary, exit
// 0, nothing left behind. The usual port of the page is taken meanwhile.
func TestDemoEndsEarly(t *testing.T) {
	if l, err := net.Listen("tcp", "127.0.0.1:7625"); err == nil {
		defer l.Close()
	} // else something else has taken it, which is as good
	temp := t.TempDir()
	t.Setenv("TMPDIR", temp)
	for _, how := range []string{"--for", "signal"} {
		ctx, cancel := context.WithCancel(t.Context())
		args := []string{"demo", "--speed", "60", "--for", "2s"}
		if how == "signal" {
			args = args[:3]
			time.AfterFunc(2*time.Second, cancel)
		}
		o := callIn(t, ctx, strings.NewReader(""), args...)
		cancel()
		if o.code != exitDone || !strings.Contains(o.stdout, "EXERCISE ended after ") || !strings.Contains(o.stdout, "Alerts that opened: ") {
			t.Errorf("%s: exit %d\n%s%s", how, o.code, o.stdout, o.stderr)
		}
		if strings.Contains(o.stderr, "127.0.0.1:7625/") {
			t.Errorf("%s: the page claims a port that is taken: %s", how, o.stderr)
		}
	}
	if left, err := os.ReadDir(temp); err != nil || len(left) > 0 {
		t.Errorf("left behind: %v %v", left, err)
	}
}

func TestDemoUsage(t *testing.T) {
	for _, args := range [][]string{{"--speed", "0.5"}, {"--speed", "61"}, {"--speed", "NaN"}, {"--for", "-1s"}} {
		if o := call(t, append([]string{"demo"}, args...)...); o.code != exitUsage || o.stdout != "" {
			t.Errorf("demo %v: exit %d, %s", args, o.code, o.stdout)
		}
	}
}

// TestSteppedClock: what comes before the end of second T is stamped T + 100
// ms, the end itself just after the lateness, and no stamp goes back.
func TestSteppedClock(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC))
	c := &steppedClock{control: "end", lateness: time.Second, second: start}
	for i, row := range []struct {
		topic, payload string
		want           sensors.Instant // ms after the start
	}{
		{"", "", 0},
		{"wind", "x", 1100},
		{"wind", "x", 1100},
		{"end", "2026-07-01T14:00:01Z", 2001},
		{"", "", 2001},
		{"wind", "x", 2100},
		{"end", "2026-07-01T14:00:02Z", 3001},
		{"end", "2026-07-01T14:00:01Z", 3001}, // a repetition
		{"end", "rubbish", 3001},
		{"wind", "x", 3100},
	} {
		if got := c.Stamp(row.topic, []byte(row.payload)) - start; got != row.want {
			t.Errorf("row %d: stamp of %q %q is +%d ms, want +%d", i, row.topic, row.payload, got, row.want)
		}
	}
}

func TestWrap(t *testing.T) {
	for _, row := range []struct{ lead, text, want string }{
		{"12:00  ", "one two three four", "12:00  one two\n       three\n       four\n"},
		{"", "exactly sixteen.", "exactly sixteen.\n"},
		{"", "a-word-longer-than-the-width and more", "a-word-longer-than-the-width\nand more\n"},
		{"x ", "", "x \n"},
	} {
		if got := wrap(row.lead, row.text, 16); got != row.want {
			t.Errorf("wrap(%q, %q) = %q, want %q", row.lead, row.text, got, row.want)
		}
	}
}

// TestDemoPace holds the generator's waiting: not before the wall clock, and
// not more than two seconds ahead of the evaluation.
func TestDemoPace(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		closed := make(chan sensors.Instant, 1)
		w := &demoWeather{closed: closed}
		begun := time.Now()
		go func() {
			time.Sleep(7 * time.Second) // in the bubble's own time
			latest(closed, 3000)
			latest(closed, 5000)
		}()
		if err := w.awaitStep(t.Context(), 5000); err != nil {
			t.Fatal(err)
		}
		if took := time.Since(begun); took != 7*time.Second {
			t.Errorf("waited %v for a step that closes after 7 s", took)
		}
		ctx, cancel := context.WithTimeout(t.Context(), time.Second)
		defer cancel()
		if err := w.awaitStep(ctx, 6000); err == nil {
			t.Error("a step that never closes is not waited for")
		}
	})
}

// TestDemoOverCuts breaks the connection of the generator off again and again:
// everything gets there, in its order but for copies, and the end of a second
// that was lost is said again.
func TestDemoOverCuts(t *testing.T) {
	broker := brokertest.Start(t)
	relay := brokertest.StartRelay(t, strings.TrimPrefix(broker.URL(), "mqtt://"))
	link, err := feed.NewPublisher(t.Context(), feed.PublisherOptions{Broker: feed.Broker{URL: relay.URL()}, ClientID: "weather", Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	defer link.Close()
	hears, err := feed.Subscribe(t.Context(), feed.SubscribeOptions{
		Broker: feed.Broker{URL: broker.URL()}, ClientID: "daemon", Topics: []string{"weather", "end"}, Clock: feed.NewClock(), Log: zerolog.Nop(),
	})
	if err != nil {
		t.Fatal(err)
	}
	defer hears.Close()
	closed := make(chan sensors.Instant, 1)
	w := &demoWeather{link: link, control: "end", closed: closed, heard: func() bool { return hears.State().Subscribed }}
	const messages = 40
	for i := range messages {
		if i%16 == 4 {
			relay.Cut() // before the connection is up the first time, too
		}
		if err := w.publish(t.Context(), "weather", []byte(strconv.Itoa(i))); err != nil {
			t.Fatal(err)
		}
	}
	next := 0
	for next < messages {
		select {
		case m := <-hears.Messages():
			if n, err := strconv.Atoi(string(m.Payload)); m.Topic == "weather" && (err != nil || n > next) {
				t.Fatalf("after %d comes %s", next-1, m.Payload)
			} else if n == next {
				next++
			}
		case <-time.NewTimer(patience).C:
			t.Fatalf("%d of %d came", next, messages)
		}
	}
	w.marker = []byte("14:00")
	go func() {
		for m := range hears.Messages() {
			if m.Topic == "end" {
				latest(closed, 1000)
				return
			}
		}
	}()
	if err := w.awaitStep(t.Context(), 1000); err != nil {
		t.Fatal(err)
	}
}

// failing is a terminal that has gone.
type failing struct{}

func (failing) Write([]byte) (int, error) { return 0, io.ErrClosedPipe }

func TestStoryThatCannotBeTold(t *testing.T) {
	s := &story{out: failing{}}
	s.print("a")
	s.print("b")
	if s.err == nil {
		t.Error("a failure to write is lost")
	}
}
