package main

import (
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"os/signal"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/history"
	"sockline/config"
	"sockline/sensors/feed"
	"sockline/sensors/feed/brokertest"
)

// childDaemon is the environment variable that makes this test binary a
// daemon: "<configuration> <begun, ns> <base, ns> <factor>".
const childDaemon = "SOCKLINE_TEST_DAEMON"

// childCommand is the one that makes it the program: its words.
const childCommand = "SOCKLINE_TEST_COMMAND"

func TestMain(m *testing.M) {
	if words := os.Getenv(childCommand); words != "" {
		ctx, stop := signal.NotifyContext(context.Background(), syscall.SIGTERM)
		code := run(ctx, strings.Fields(words), os.Stdin, os.Stdout, os.Stderr)
		stop()
		os.Exit(code)
	}
	if spec := os.Getenv(childDaemon); spec != "" {
		if err := serveAsChild(spec); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		os.Exit(0)
	}
	os.Exit(m.Run())
}

func serveAsChild(spec string) error {
	var (
		path        string
		begun, base int64
		h           hurry
	)
	if _, err := fmt.Sscan(spec, &path, &begun, &base, &h.factor); err != nil {
		return err
	}
	h.begun, h.base = time.Unix(0, begun), time.Unix(0, base)
	cfg, err := config.Load(path)
	if err != nil {
		return err
	}
	clock, err := feed.NewClockOver(h.now, h.since, 1)
	if err != nil {
		return err
	}
	d, err := newDaemon(cfg, daemonOptions{
		exercise: true, clock: clock, instance: "under-test", listen: time.Millisecond,
		log: zerolog.New(os.Stderr).Level(zerolog.WarnLevel),
	})
	if err != nil {
		return err
	}
	ctx, stop := signal.NotifyContext(context.Background(), syscall.SIGTERM)
	defer stop()
	return d.Run(ctx)
}

func childSpec(path string, h hurry) string {
	return fmt.Sprint(path, " ", h.begun.UnixNano(), " ", h.base.UnixNano(), " ", h.factor)
}

// startChild runs a daemon in a process of its own.
func startChild(tb testing.TB, path string, h hurry) *exec.Cmd {
	tb.Helper()
	self, err := os.Executable()
	if err != nil {
		tb.Fatal(err)
	}
	c := exec.Command(self)
	c.Env = append(os.Environ(), childDaemon+"="+childSpec(path, h))
	var said strings.Builder
	c.Stderr = &said
	if err := c.Start(); err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(func() {
		if tb.Failed() && said.Len() > 0 {
			tb.Logf("a daemon said:\n%s", said.String())
		}
	})
	return c
}

// TestKill kills the daemon without warning, again and again, while readings
// stream in and alerts go out, and starts it again. What the broker was told
// as recorded is in the history, byte for byte; the alert keeps its id; the
// history is sound.
func TestKill(t *testing.T) {
	cycles := 50
	switch {
	case os.Getenv("SOCKLINE_LONG") != "":
		cycles = 200
	case testing.Short():
		cycles = 5
	}
	const seed = 3
	random := rand.New(rand.NewPCG(seed, seed))
	broker := brokertest.Start(t)
	dir := filepath.Join(t.TempDir(), "history")
	path := site(t, broker.URL(), dir)
	heard := listenTo(t, broker.URL())
	h := newHurry(10)
	h.begun = h.begun.Round(0) // as the children count it
	blow(t, mustLoad(t, path), steady, broker.URL(), h)
	// Killed before its first alert, a daemon has nothing to lose: so each one
	// lives until it has told one, and then for as long as chance will have it.
	// The kills tear such gaps into the readings that the ground is mostly out
	// of sight; every tenth daemon lives until it sees it again.
	for cycle := range cycles {
		before := heard.count()
		child := startChild(t, path, h)
		heard.awaitAlert(t, "an alert of this daemon", before, func(a alertLine) bool { return cycle%10 != 9 || landingLoss(a) && a.Observed })
		alive := time.NewTimer(time.Duration(random.IntN(400)) * time.Millisecond)
		<-alive.C
		if err := child.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		_ = child.Wait() // it says that it was killed
	}
	checkAfterKills(t, dir, heard.heard())
}

func checkAfterKills(t *testing.T, dir string, told []string) {
	t.Helper()
	s, err := history.ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	if r, err := s.Verify(); err != nil || !r.OK() {
		t.Errorf("the history is not sound: %+v %v", r, err)
	}
	kept := journalled(t, dir)
	slices.Sort(kept)
	missing, recorded, observed := 0, 0, 0
	ids := map[string]int{}
	for i, a := range alertLines(t, strings.Join(told, "\n")) {
		if landingLoss(a) {
			ids[a.ID]++
		}
		if !a.Recorded {
			continue
		}
		recorded++
		if a.Observed {
			observed++
		}
		object := strings.Replace(told[i], `"delayed":true,`, "", 1)
		if _, found := slices.BinarySearch(kept, object); !found {
			missing++
			t.Errorf("told as recorded, and not in the history: %s", told[i])
		}
	}
	if recorded == 0 || len(ids) != 1 {
		t.Errorf("%d recorded alerts were told; the loss on landing 07 had %d ids, want 1: %v", recorded, len(ids), ids)
	}
	t.Logf("%d told, %d of them recorded, %d measured, %d missing; %d in the history", len(told), recorded, observed, missing, len(kept))
}

// BenchmarkDelay measures the way of an alert from the end of its step's
// lateness to a client of the broker, in real time, over half a minute.
func BenchmarkDelay(b *testing.B) {
	broker := brokertest.Start(b)
	path := site(b, broker.URL(), filepath.Join(b.TempDir(), "history"))
	cfg := mustLoad(b, path)
	cfg.Analysis.Lateness = time.Second
	heard := listenTo(b, broker.URL())
	warm := newHurry(5)
	warmUp := startDaemon(b, cfg, warm.clock(b), "")
	scene := newBlower(b, cfg, steady, broker.URL(), warm)
	heard.awaitAlert(b, "an alert", 0, func(a alertLine) bool { return landingLoss(a) && a.Level == "beyond-margin" })
	scene()
	if err := warmUp.stop(); err != nil {
		b.Fatal(err)
	}
	// The same story goes on at the speed of the wall: the history carries the
	// open alert over.
	h := hurry{begun: time.Now(), base: warm.now(), factor: 1}
	startDaemon(b, cfg, h.clock(b), "")
	blow(b, cfg, steady, broker.URL(), h)
	var delays []time.Duration
	for b.Loop() {
		delays = append(delays, delaysOver(heard, h, cfg.Analysis.Lateness, 60*time.Second)...)
	}
	slices.Sort(delays)
	if len(delays) == 0 {
		b.Fatal("no alert came")
	}
	b.ReportMetric(0, "ns/op")
	b.ReportMetric(float64(len(delays)), "alerts")
	b.ReportMetric(float64(delays[len(delays)/2].Milliseconds()), "p50-ms")
	b.ReportMetric(float64(delays[len(delays)*99/100].Milliseconds()), "p99-ms")
}

// delaysOver notes how late each alert is, for a while.
func delaysOver(heard *listened, h hurry, lateness, length time.Duration) []time.Duration {
	var delays []time.Duration
	end := time.NewTimer(length)
	defer end.Stop()
	look := time.NewTicker(time.Millisecond)
	defer look.Stop()
	for n := heard.count(); ; {
		select {
		case <-end.C:
			return delays
		case <-look.C:
		}
		now := h.now()
		for _, text := range heard.heard()[n:] {
			n++
			_, rest, _ := strings.Cut(text, `"updated":"`)
			if at, err := time.Parse(time.RFC3339, rest[:20]); err == nil {
				delays = append(delays, now.Sub(at.Add(lateness)))
			}
		}
	}
}

// BenchmarkIdleMemory builds the program, runs it with eight masts and the
// built-in broker, and reads how much memory it holds.
func BenchmarkIdleMemory(b *testing.B) {
	binary := filepath.Join(b.TempDir(), "sockline")
	if out, err := exec.Command("go", "build", "-o", binary, ".").CombinedOutput(); err != nil {
		b.Fatalf("%v: %s", err, out)
	}
	broker := brokertest.Start(b)
	path := site(b, broker.URL(), filepath.Join(b.TempDir(), "history"))
	heard := listenTo(b, broker.URL())
	c := exec.Command(binary, "run", "--exercise", "--config", path)
	if err := c.Start(); err != nil {
		b.Fatal(err)
	}
	defer func() {
		_ = c.Process.Signal(syscall.SIGTERM)
		_ = c.Wait()
	}()
	until(b, "the daemon to publish", func() bool { return heard.topic("status") != "" })
	for b.Loop() {
		text, err := os.ReadFile(fmt.Sprintf("/proc/%d/status", c.Process.Pid))
		if err != nil {
			b.Fatal(err)
		}
		_, rest, _ := strings.Cut(string(text), "VmRSS:")
		kib, err := strconv.Atoi(strings.Fields(rest)[0])
		if err != nil {
			b.Fatal(err)
		}
		b.ReportMetric(float64(kib)/1024, "MiB-RSS")
	}
}
