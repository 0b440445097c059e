package main

import (
	"context"
	"encoding/json"
	"errors"
	"math"
	"net"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/drift"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/publish"
	"sockline/alerting/wording"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/feed"
)

// booked is Skerry Moor with a book, a wrong clock that is corrected and a
// maintenance at touch25, and its files elsewhere.
func booked(tb testing.TB, replace ...string) string {
	tb.Helper()
	text, err := os.ReadFile(skerrymoor)
	if err != nil {
		tb.Fatal(err)
	}
	const topic = `topic    = "airfield/skerrymoor/station/touch25/wind"`
	if strings.Count(string(text), topic) != 1 {
		tb.Fatal("the airfield has changed")
	}
	keys := topic + `
clock = "correct"
book = { model = "Ardel 3", serial = "0417", calibrated = "2024-03-02", next_due = "2026-03-02" }
maintenance = [{ from = "2026-07-01T14:02:00Z", to = "2026-07-01T14:02:30Z", reason = "new bearings" }]`
	out := strings.NewReplacer(append([]string{topic, keys}, replace...)...).Replace(string(text))
	return writeFile(tb, "booked.toml", out)
}

func stationsOf(tb testing.TB, args ...string) stationList {
	tb.Helper()
	var l stationList
	if err := json.Unmarshal([]byte(succeed(tb, append([]string{"stations", "--output", "json"}, args...)...).stdout), &l); err != nil {
		tb.Fatal(err)
	}
	return l
}

func (l *stationList) named(tb testing.TB, id string) *stationHealth {
	tb.Helper()
	for i := range l.Stations {
		if l.Stations[i].ID == id {
			return &l.Stations[i]
		}
	}
	tb.Fatalf("%s is not listed", id)
	return nil
}

// The list from a history, with the configuration that is kept in it, and
// from the daemon that holds it.
func TestStations(t *testing.T) {
	dir, _ := recorded(t, skerrymoor, short)
	free, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	configuration := booked(t, "./sockline-data", dir, "127.0.0.1:7625", free.Addr().String(), "127.0.0.1:1883", "127.0.0.1:0")
	free.Close()

	l := stationsOf(t, "--config", configuration)
	if l.Running || len(l.Stations) != 8 || l.Notice != alerting.Notice || !l.Exercise {
		t.Errorf("running %v, %d stations, exercise %v, notice %q", l.Running, len(l.Stations), l.Exercise, l.Notice)
	}
	far := l.named(t, "far07")
	if far.State != "live" || far.Last == nil || far.Wind == nil || far.Wind.Two == nil || far.Wind.Two.SpeedMS < 1 ||
		far.Wind.Two.SpeedMS != far.Wind.Two.MeasuredMS || far.Clock.CorrectedS != 0 {
		t.Errorf("far07: %+v, wind %+v", far, far.Wind)
	}
	touch := l.named(t, "touch25")
	if touch.Book.Serial != "0417" || !touch.Book.Overdue || len(touch.Findings) == 0 {
		t.Errorf("touch25: %+v", touch)
	}
	text := succeed(t, "stations", "--config", configuration).stdout
	for _, want := range []string{"EXERCISE\nNo daemon answers.", "touch25\n  ", "Its calibration was due on 2026-03-02.",
		"book: model Ardel 3, serial number 0417, calibrated 2024-03-02, next due 2026-03-02", "wind of two minutes ", "\n" + alerting.Notice + "\n"} {
		if !strings.Contains(text, want) {
			t.Errorf("%q is missing in\n%s", want, text)
		}
	}

	cfg := mustLoad(t, configuration)
	d, err := newDaemon(cfg, daemonOptions{exercise: true, clock: feed.NewClock(), log: zerolog.Nop(), instance: "under-test"})
	if err != nil {
		t.Fatal(err)
	}
	stepped := make(chan struct{}, 1)
	d.opts.watch = func(*report) {
		select {
		case stepped <- struct{}{}:
		default:
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	<-stepped
	<-stepped // the first one is on the page now
	l = stationsOf(t, "--config", configuration)
	if h := l.named(t, "touch25"); !l.Running || h.State != "never-seen" || h.Book.Model != "Ardel 3" {
		t.Errorf("running %v, %+v", l.Running, h)
	}
	if o := call(t, "stations", "--history", dir); o.code != exitFailed || !strings.Contains(o.stderr, "give --config FILE") {
		t.Errorf("by the directory: exit %d, %s", o.code, o.stderr)
	}
	cancel()
	if err := <-ended; err != nil {
		t.Error(err)
	}
	// The daemon has journalled its configuration: the directory is enough now.
	if h := (func() *stationHealth { l := stationsOf(t, "--history", dir); return l.named(t, "touch25") })(); h.Book.Serial != "0417" {
		t.Errorf("%+v", h)
	}
}

// Before the daemon has ever run there is the book.
func TestStationsBeforeTheFirstRun(t *testing.T) {
	configuration := booked(t, "./sockline-data", filepath.Join(t.TempDir(), "none"))
	l := stationsOf(t, "--config", configuration)
	if h := l.named(t, "touch25"); h.State != "never-seen" || h.Book.Model != "Ardel 3" || h.Last != nil || h.Wind != nil {
		t.Errorf("%+v", h)
	}
	if o := call(t, "stations"); o.code != exitUsage {
		t.Errorf("without a source: exit %d, %s", o.code, o.stderr)
	}
}

// The life of a mast within a second of each change: the words, what serves
// ground, and that those who work on it see its ground as not observed.
func TestLifeOfAStation(t *testing.T) {
	cfg := mustLoad(t, booked(t, "./sockline-data", t.TempDir()))
	l, err := newLoop(cfg, false, zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	const touch25, silent = 1, 6 // far07 falls silent
	start := sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC))
	want := func(i, k int) string {
		switch {
		case i == 7:
			return "never-seen"
		case k < 12: // two thirds of the window of 18 s
			return "starting"
		case i == touch25 && k >= 120 && k < 150:
			return "under-maintenance"
		case i == touch25 && k >= 150 && k < 161:
			return "starting"
		case i == silent && k > 60:
			switch age := k - 60; {
			case age > 60:
				return "lost"
			case age > 3:
				return "stale"
			case age > 2:
				return "late"
			}
		}
		return "live"
	}
	l.engine.Due(start.Add(l.engine.Lateness()) + 1)
	for k := 1; k <= 200; k++ {
		at := start + sensors.Instant(k)*sensors.Second
		for i := range cfg.Stations {
			if i == 7 || i == silent && k > 60 {
				continue
			}
			l.engine.Offer(sensors.Reading{Station: i, Time: at, Arrival: at + 100, Speed: 5 + 0.1*float64(k%9), From: float64(230 + k%7)})
		}
		rep := l.reporter.of(l.engine, l.engine.Step(at))
		for i := range rep.Stations {
			h := &rep.Stations[i]
			if h.State != want(i, k) || h.Live && h.State != "live" && h.State != "late" || !h.Live && h.State == "live" {
				t.Fatalf("%d s: %s is %s, serves ground %v; want %s", k, h.ID, h.State, h.Live, want(i, k))
			}
		}
		h := &rep.Stations[touch25]
		if under := h.State == "under-maintenance"; under != (h.Maintenance != nil) || under != strings.Contains(h.sentence(), "It is under maintenance until 2026-07-01T14:02:30Z: new bearings.") {
			t.Fatalf("%d s: %s", k, h.sentence())
		}
		if h := &rep.Stations[silent]; k > 64 && h.Live {
			t.Fatalf("%d s: far07 has been silent for %d s and serves ground", k, k-60)
		}
		// Its ground is not observed while somebody works on it, and it is named.
		missing := 0
		for _, p := range rep.Paths {
			if slices.Contains(p.Assessment.Missing, touch25) {
				missing++
			}
		}
		if (missing > 0) != !h.Live {
			t.Fatalf("%d s: touch25 is %s and %d paths miss it", k, h.State, missing)
		}
	}
}

// What was learnt of the stations is journalled by the step that learns it,
// and a later start goes on with it.
func TestLearntTablesSurviveARestart(t *testing.T) {
	cfg := mustLoad(t, booked(t, "./sockline-data", t.TempDir()))
	dir := t.TempDir()
	store, err := history.Open(dir, history.Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	writer, err := store.Writer(history.WriterOptions{})
	if err != nil {
		t.Fatal(err)
	}
	// The first mast is turned by 12 degrees; touch25 is 5 s ahead.
	l, err := newLoop(cfg, false, zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	l.archive = &archive{store: store, writer: writer, waiting: map[issueKey]wording.Notice{}}
	l.metrics = newMetrics(cfg, sources{
		history: func() history.Health { return history.Health{} }, input: func() feed.LinkState { return feed.LinkState{} },
		dropped: func() (uint64, uint64) { return 0, 0 }, output: func() publish.State { return publish.State{} },
		open: func() int { return 0 }, offset: func() time.Duration { return 0 },
	})
	l.show = func(*report) {}
	start := sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC))
	if err := l.engine.SkipTo(start); err != nil {
		t.Fatal(err)
	}
	const hours = 1
	at := start
	for k := 1; k <= hours*3600; k++ {
		at = start + sensors.Instant(k)*sensors.Second
		for i := range cfg.Stations {
			from, ahead := float64(230+(k*7+i)%11), sensors.Instant(0)
			if i == 0 {
				from += 12
			}
			if i == 1 {
				ahead = 5 * sensors.Second
			}
			l.engine.Offer(sensors.Reading{Station: i, Time: at + ahead, Arrival: at + 100, Speed: 5 + 0.1*float64((k+3*i)%9), From: from})
		}
		if k%60 == 0 {
			l.step(at)
		} else { // learns the same and takes less time
			l.engine.Warm(at)
		}
	}
	if skew := l.engine.Clock(1); skew.Applied != 4900*time.Millisecond {
		t.Errorf("touch25: %+v", skew)
	}
	if err := errors.Join(writer.Close(t.Context()), store.Close()); err != nil {
		t.Fatal(err)
	}
	if store, err = history.ReadOnly(dir); err != nil {
		t.Fatal(err)
	}
	defer store.Close()
	next, err := newLoop(cfg, false, zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	if err := next.loadTables(store, at); err != nil {
		t.Fatal(err)
	}
	if got := next.engine.Clock(1).Applied; got != 4900*time.Millisecond {
		t.Errorf("after a start %v are taken off the times of touch25", got)
	}
	if f := next.engine.Neighbours(0); f.Hours != hours {
		t.Errorf("after a start the first mast has %+v", f)
	}
	// As of a moment before, nothing had been learnt.
	before, err := newLoop(cfg, false, zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	if err := before.loadTables(store, start); err != nil || before.engine.Clock(1).Applied != 0 || before.engine.Neighbours(0).Hours != 0 {
		t.Errorf("%v, %+v", err, before.engine.Neighbours(0))
	}
	if err := next.engine.LoadTable(engine.Table{Payload: []byte(`{"table":"unheard"}`)}); err == nil {
		t.Error("a table that nobody knows is taken")
	}
}

// What is found of a mast is said in whole sentences, with its interval.
func TestFindings(t *testing.T) {
	named := neighboursOf(drift.Finding{
		Hours: 24, Known: true, Turned: -14.2, TurnedLow: -16.1, TurnedHigh: -12.3, Ratio: 0.9, RatioLow: 0.88, RatioHigh: 0.92,
		Misaligned: true, Low: true, Blocked: true,
	})
	h := &stationHealth{State: averages.Live.String(), AgeS: pointer(1.2), Neighbours: named, Clock: clockObject{AheadS: pointer(-5.1), Off: true}}
	h.Findings = findings(h)
	want := "Live; its last reading is 1 s old. " +
		"Its clock is 5.1 s behind, or its messages take that long; it is not corrected. " +
		"Against its neighbours its directions are turned anticlockwise by 14 degrees (12 to 16): look at its alignment, and at what stands around it. " +
		"Against its neighbours it reads 10 % low (8 to 12): look at its bearings and for ice, and at what stands around it. " +
		"It stands still while the others blow: it is iced, blocked or broken."
	if got := h.sentence(); got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
	at := momentOf(0)
	h = &stationHealth{Neighbours: neighbourObject{Doubt: 0.97}, stroke: averages.Stroke{At: at, Turn: -62 * math.Pi / 180, Ratio: 1}}
	contradicted := "Its neighbours contradict it at the moment: the wind between the masts is worked out as if the odds that it is wrong were over 95 in 100."
	turned := "Within a second or two, at " + seconds(at) + ", its direction turned clockwise by about 62 degrees, as a vane does that slips: look at its clamp."
	if got := findings(h); !slices.Equal(got, []string{contradicted, turned}) {
		t.Errorf("got  %q\nwant %q", got, []string{contradicted, turned})
	}
	h.stroke = averages.Stroke{At: at, Ratio: 0.4}
	slowed := "Within a second or two, at " + seconds(at) + ", its speed fell to about 40 %, as of cups that are damaged or held: look at them."
	if got := findings(h); !slices.Equal(got, []string{contradicted, slowed}) {
		t.Errorf("got  %q\nwant %q", got, []string{contradicted, slowed})
	}
	h.Neighbours.Doubt = 0.2 // the neighbours did the same: it was the air
	if got := findings(h); len(got) != 0 {
		t.Errorf("of a stroke of the air it says %q", got)
	}
	if got := neighboursOf(drift.Finding{Hours: 3}); got.TurnedDeg != nil || got.SpeedRatio != nil || len(got.Named) != 0 {
		t.Errorf("%+v", got)
	}
}
