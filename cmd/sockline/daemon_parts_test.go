package main

import (
	"context"
	"errors"
	"fmt"
	"math"
	"net"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus/testutil/promlint"
	"github.com/rs/zerolog"
	"go.uber.org/goleak"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/alerting/publish"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
)

// TestTeardown: the last started stops first, every step is tried, and all
// errors are told with the name of what failed.
func TestTeardown(t *testing.T) {
	var order []string
	var td teardown
	for _, name := range []string{"broker", "history", "loop"} {
		td.add(name, func(context.Context) error {
			order = append(order, name)
			if name != "history" {
				return errors.New(name + " is stuck")
			}
			return nil
		})
	}
	err := td.run(t.Context())
	if got := strings.Join(order, " "); got != "loop history broker" {
		t.Errorf("stopped in the order %s", got)
	}
	if want := "stop loop: loop is stuck\nstop broker: broker is stuck"; err == nil || err.Error() != want {
		t.Errorf("error %v, want %s", err, want)
	}
	if err := td.run(t.Context()); err != nil || len(order) != 3 {
		t.Errorf("a second time does something: %v %v", order, err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), time.Millisecond)
	defer cancel()
	hold := make(chan struct{})
	defer close(hold)
	if err := within(ctx, func() { <-hold }); !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("a step that hangs gives %v", err)
	}
}

// TestNotifier listens where a service manager would.
func TestNotifier(t *testing.T) {
	path := filepath.Join(t.TempDir(), "notify")
	socket, err := net.ListenUnixgram("unixgram", &net.UnixAddr{Name: path, Net: "unixgram"})
	if err != nil {
		t.Fatal(err)
	}
	defer socket.Close()
	env := map[string]string{"NOTIFY_SOCKET": path, "WATCHDOG_USEC": "10000000"}
	n, err := newNotifier(func(k string) string { return env[k] })
	if err != nil {
		t.Fatal(err)
	}
	defer n.close()
	n.say("READY=1", "STATUS=observing")
	b := make([]byte, 100)
	k, err := socket.Read(b)
	if err != nil || string(b[:k]) != "READY=1\nSTATUS=observing" {
		t.Errorf("the manager heard %q, %v", b[:k], err)
	}
	if n.every != 5*time.Second { // half of WATCHDOG_USEC: sd_watchdog_enabled(3)
		t.Errorf("the watchdog is fed every %v", n.every)
	}
	env["WATCHDOG_PID"] = "1" // another process
	if n, err := newNotifier(func(k string) string { return env[k] }); err != nil || n.every != 0 {
		t.Errorf("another's watchdog is fed every %v, %v", n.every, err)
	}
	env["NOTIFY_SOCKET"] = path + "-not-there"
	if _, err := newNotifier(func(k string) string { return env[k] }); err == nil {
		t.Error("a socket that is not there is no error")
	}
	silent, err := newNotifier(func(string) string { return "" })
	if err != nil {
		t.Fatal(err)
	}
	silent.say("READY=1")
	silent.close()
}

func TestWatchdog(t *testing.T) {
	start := time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC)
	w := watchdog{every: 4 * time.Second, last: start}
	for i, row := range []struct {
		after          time.Duration
		steps, history uint64
		want           bool
	}{
		{1 * time.Second, 1, 1, false}, // too early
		{2 * time.Second, 1, 1, true},
		{5 * time.Second, 1, 2, false}, // the evaluation hangs
		{6 * time.Second, 2, 1, false}, // the history hangs
		{7 * time.Second, 2, 2, true},
		{8 * time.Second, 3, 3, false},
	} {
		if got := w.due(start.Add(row.after), row.steps, row.history); got != row.want {
			t.Errorf("row %d: due is %v", i, got)
		}
	}
	if (&watchdog{}).due(start, 1, 1) {
		t.Error("a watchdog that nobody asked for is fed")
	}
}

func TestThrottle(t *testing.T) {
	th := newThrottle(time.Minute)
	for i, row := range []struct {
		key  string
		at   sensors.Instant
		held uint64
		ok   bool
	}{
		{"a", 0, 0, true}, {"a", 1000, 0, false}, {"b", 1000, 0, true}, {"a", 59_999, 0, false},
		{"a", 60_000, 2, true}, {"a", 120_000, 0, true},
	} {
		if held, ok := th.allow(row.key, row.at); held != row.held || ok != row.ok {
			t.Errorf("row %d: %d %v", i, held, ok)
		}
	}
}

// TestMetricsOfTwentyMasts: fewer than 500 series, all there from the start,
// nothing that the linter would change.
func TestMetricsOfTwentyMasts(t *testing.T) {
	cfg := mustLoad(t, skerrymoor)
	for i := len(cfg.Stations); i < 20; i++ {
		s := cfg.Stations[0]
		s.ID = fmt.Sprint("mast-", i)
		cfg.Stations = append(cfg.Stations, s)
	}
	m := newMetrics(cfg, sources{
		history: func() history.Health { return history.Health{} }, input: func() feed.LinkState { return feed.LinkState{} },
		dropped: func() (uint64, uint64) { return 0, 0 }, output: func() publish.State { return publish.State{} },
		open: func() int { return 0 }, offset: func() time.Duration { return 0 },
	})
	families, err := m.registry.Gather()
	if err != nil {
		t.Fatal(err)
	}
	n := 0
	for _, f := range families {
		for _, s := range f.GetMetric() {
			n++
			if h := s.GetHistogram(); h != nil {
				n += len(h.GetBucket()) + 2 // the buckets, +Inf, the sum and the count
			}
		}
	}
	if n >= 500 {
		t.Errorf("%d series", n)
	}
	if problems, err := promlint.NewWithMetricFamilies(families).Lint(); err != nil || len(problems) > 0 {
		t.Errorf("lint: %v %v", problems, err)
	}
	t.Logf("%d series for %d masts", n, len(cfg.Stations))
}

// TestBoard: the page shows what was released, the worst first, and never
// changes a view that is up.
func TestBoard(t *testing.T) {
	b := newBoard("run-1")
	b.release(noticeOf("early", alerting.HeadwindLoss, alerting.Large, -9, 1))
	if b.view.Load() != nil {
		t.Error("there is a view before the first step")
	}
	cfg := mustLoad(t, skerrymoor)
	rep := &report{At: 1000, Condition: alerting.Blind}
	b.show(viewOf(rep, &wording.Status{Airfield: cfg.Airfield.ID, Condition: rep.Condition}, time.Time{}))
	before := b.view.Load()
	b.release(noticeOf("gain", alerting.HeadwindGain, alerting.Large, 12, 1))
	b.release(noticeOf("loss", alerting.HeadwindLoss, alerting.Large, -8, 1))
	b.release(noticeOf("worst", alerting.HeadwindLoss, alerting.BeyondMargin, -14, 1))
	var order []string
	for _, a := range b.view.Load().Alerts {
		order = append(order, a.ID)
	}
	if got := strings.Join(order, " "); got != "worst early loss gain" {
		t.Errorf("order %s", got)
	}
	if len(before.Alerts) != 1 {
		t.Errorf("a view that was up has changed: %d alerts", len(before.Alerts))
	}
	closed := lifecycle.Alert{ID: "worst", Revision: 2, State: lifecycle.Closed, Kind: alerting.HeadwindLoss, Because: lifecycle.BelowLevel}
	b.release(wording.Of(lifecycle.Transition{Alert: closed}, wording.Context{}))
	if got := len(b.view.Load().Alerts); got != 3 || b.openCount() != 3 {
		t.Errorf("%d alerts are up after one of 4 closed", got)
	}
}

func noticeOf(id string, kind alerting.Kind, level alerting.Level, change float64, revision int) wording.Notice {
	return wording.Of(lifecycle.Transition{Alert: lifecycle.Alert{
		ID: id, Revision: revision, Kind: kind, Level: level, Change: change, State: lifecycle.Open, Observed: true,
		Runway: "07", Operation: "landing",
	}}, wording.Context{})
}

// TestRestoreKeepsExercisesApart: what an exercise left in the history neither
// feeds nor raises anything when real work begins in the same directory; its
// open alert is closed.
func TestRestoreKeepsExercisesApart(t *testing.T) {
	dir := t.TempDir()
	cfg := mustLoad(t, skerrymoor)
	scene := sceneAt(t, cfg, steady, sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC)))
	scene.Length = 2 * time.Minute
	now, open := exerciseInto(t, cfg, dir, scene.Start, func(l *loop) error {
		specs, err := stationSpecs(cfg, scene.Start.Time())
		if err != nil {
			return err
		}
		return scene.Generate(specs, func(m sensors.Message) error { l.take(m); return nil })
	})
	if open == 0 {
		t.Fatal("the exercise leaves no alert open")
	}
	for _, exercise := range []bool{true, false} {
		store, err := history.Open(dir, history.Options{})
		if err != nil {
			t.Fatal(err)
		}
		l := mustLoop(t, cfg, exercise)
		if err := l.restore(store, now); err != nil {
			t.Fatal(err)
		}
		alerts, closed := len(l.engine.Alerts(nil)), len(l.held)
		if exercise && (alerts != open || closed != 0) {
			t.Errorf("an exercise goes on with %d of %d alerts, %d closed", alerts, open, closed)
		}
		if !exercise && (alerts != 0 || closed != open) {
			t.Errorf("real work begins with %d alerts of an exercise, %d of %d closed", alerts, closed, open)
		}
		if l.engine.Step(l.engine.LastStep()+sensors.Second).Snapshot.Mast(0).Last != 0 != exercise {
			t.Errorf("exercise %v: the readings of the exercise are taken up wrongly", exercise)
		}
		if err := store.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// TestRestoreIsExact ends a run in the middle of an event and takes it up in
// the next second: together both issue what one run would have issued.
func TestRestoreIsExact(t *testing.T) {
	cfg := mustLoad(t, skerrymoor)
	scene := sceneAt(t, cfg, steady, sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC)))
	scene.Length = 4 * time.Minute
	specs, err := stationSpecs(cfg, scene.Start.Time())
	if err != nil {
		t.Fatal(err)
	}
	var messages []sensors.Message
	if err := scene.Generate(specs, func(m sensors.Message) error { messages = append(messages, m); return nil }); err != nil {
		t.Fatal(err)
	}
	// Both break between two seconds, so that no reading is lost in memory but
	// those that wait for their step; these come again.
	cut := slices.IndexFunc(messages, func(m sensors.Message) bool { return m.Received >= scene.Start.Add(100*time.Second) })
	whole, parts := t.TempDir(), t.TempDir()
	feedTo := func(dir string, from, to int) {
		exerciseInto(t, cfg, dir, messages[from].Received, func(l *loop) error {
			for _, m := range messages[from:to] {
				l.take(m)
			}
			return nil
		})
	}
	feedTo(whole, 0, len(messages))
	feedTo(parts, 0, cut)
	again := cut
	for again > 0 && messages[again-1].Received > messages[cut].Received.Add(-2*time.Second) {
		again--
	}
	feedTo(parts, again, len(messages))
	a, b := journalled(t, whole), journalled(t, parts)
	if !slices.Equal(a, b) {
		t.Errorf("two runs issued something else than one: %s", firstDifference(strings.Join(b, "\n"), strings.Join(a, "\n")))
	}
	if len(a) < 10 {
		t.Errorf("only %d issues to compare", len(a))
	}
}

// TestAbandonedQueue: an evaluation that is behind, and is told to leave it at
// that, does so at once, whether steps or messages wait; and it does not say
// that it took what it left.
func TestAbandonedQueue(t *testing.T) {
	l := mustLoop(t, loadSkerryMoor(t), true)
	stepped := 0
	l.show = func(*report) {
		if stepped++; stepped == 3 {
			close(l.abandon)
		}
	}
	l.archive = newArchive(t.TempDir(), history.Options{}, func(wording.Notice) {})
	l.metrics = newMetrics(l.cfg, sources{})
	const day = 86400 * sensors.Second
	queue := make(chan sensors.Message, 100)
	for i := range sensors.Instant(cap(queue)) {
		queue <- sensors.Message{Received: 1_000_000*sensors.Second + i*day} // each makes a day of steps due
	}
	l.messages = queue
	stop, done := make(chan struct{}), make(chan struct{})
	close(stop)
	go func() { defer close(done); l.run(stop) }()
	select {
	case <-done:
	case <-time.NewTimer(patience).C:
		t.Fatal("it goes on")
	}
	if stepped != 3 || len(queue) < 90 {
		t.Errorf("%d steps; %d messages are left of %d", stepped, len(queue), cap(queue))
	}
	if want := 1_000_000 * sensors.Second; l.last != want {
		t.Errorf("the last message taken is of %v, not %v", l.last, want)
	}
}

func mustLoop(tb testing.TB, cfg *config.Config, exercise bool) *loop {
	tb.Helper()
	l, err := newLoop(cfg, exercise, zerolog.Nop())
	if err != nil {
		tb.Fatal(err)
	}
	return l
}

// exerciseInto runs a loop as the daemon does, from the history in dir, and
// tells when it ended and how many alerts it left open.
func exerciseInto(tb testing.TB, cfg *config.Config, dir string, now sensors.Instant, work func(*loop) error) (sensors.Instant, int) {
	tb.Helper()
	l := mustLoop(tb, cfg, true)
	l.archive = newArchive(dir, history.Options{}, func(wording.Notice) {})
	if err := l.archive.open(); err != nil {
		tb.Fatal(err)
	}
	store, err := l.archive.reading()
	if err != nil {
		tb.Fatal(err)
	}
	if err := l.restore(store, now); err != nil {
		tb.Fatal(err)
	}
	l.metrics = newMetrics(cfg, sources{})
	l.show = func(*report) {}
	if err := work(l); err != nil {
		tb.Fatal(err)
	}
	if err := l.archive.close(tb.Context()); err != nil {
		tb.Fatal(err)
	}
	return l.last, len(l.engine.Alerts(nil))
}

// TestDaemonLeavesNothing: after Run, nothing of a daemon goes on, and a start
// that fails half way leaves nothing either.
func TestDaemonLeavesNothing(t *testing.T) {
	leaks := goleak.IgnoreCurrent()
	cfg := mustLoad(t, site(t, "embedded://127.0.0.1:1883", filepath.Join(t.TempDir(), "history")))
	cfg.Broker.Address = "127.0.0.1:0"
	d := startDaemon(t, cfg, newHurry(20).clock(t), "")
	until(t, "a step", func() bool { return d.board.view.Load() != nil })
	if err := d.stop(); err != nil {
		t.Fatal(err)
	}
	taken := d.listener.Addr().String()
	again, err := net.Listen("tcp", taken)
	if err != nil {
		t.Fatalf("the page's address is still taken: %v", err)
	}
	defer again.Close()
	cfg.Page.Listen = taken
	if _, err := newDaemon(cfg, daemonOptions{exercise: true, clock: newHurry(1).clock(t), log: zerolog.Nop()}); err == nil || !strings.Contains(err.Error(), "set listen in [page]") {
		t.Errorf("a page whose address is taken: %v", err)
	}
	cfg.Page.Listen = "127.0.0.1:0"
	cfg.Broker.Address = taken
	if _, err := newDaemon(cfg, daemonOptions{exercise: true, clock: newHurry(1).clock(t), log: zerolog.Nop()}); err == nil || !strings.Contains(err.Error(), "choose another port") {
		t.Errorf("a built-in broker whose address is taken: %v", err)
	}
	goleak.VerifyNone(t, leaks)
}

// TestClockOffsetIsTold: a host clock that was stepped shows in the status,
// and once in the log.
func TestClockOffsetIsTold(t *testing.T) {
	cfg := mustLoad(t, site(t, "embedded://127.0.0.1:1883", filepath.Join(t.TempDir(), "history")))
	cfg.Broker.Address = "127.0.0.1:0"
	h := newHurry(20)
	step := make(chan struct{})
	wall := func() time.Time {
		select {
		case <-step:
			return h.now().Add(time.Hour)
		default:
			return h.now()
		}
	}
	clock, err := feed.NewClockOver(wall, h.since, 1)
	if err != nil {
		t.Fatal(err)
	}
	d := startDaemon(t, cfg, clock, "")
	status := func() string {
		if v := d.board.view.Load(); v != nil {
			return string(v.StatusJSON)
		}
		return ""
	}
	until(t, "a status", func() bool { return strings.Contains(status(), `"clock_offset_s":0.0`) })
	before := d.board.view.Load().At
	close(step)
	until(t, "the offset in the status", func() bool { return strings.Contains(status(), "The host clock is off") })
	if moved := d.board.view.Load().At.Sub(before); math.Abs(moved.Hours()) > 0.5 {
		t.Errorf("the step of the host clock moved event time by %v", moved)
	}
}
