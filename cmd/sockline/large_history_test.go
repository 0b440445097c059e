package main

import (
	"context"
	"fmt"
	"io/fs"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/history"
	"sockline/sensors"
)

// TestStartWithLargeHistory: with a gigabyte of history the service manager
// hears READY within 2 s, the first step is told as soon as it can close, and a
// stop takes less than 5 s. Writing the history takes half a minute, and the
// race detector would distort the times, so this runs where it is asked for.
func TestStartWithLargeHistory(t *testing.T) {
	if os.Getenv("SOCKLINE_LARGE_HISTORY") == "" {
		t.Skip("SOCKLINE_LARGE_HISTORY is not set: deploy/check --long sets it")
	}
	dir := t.TempDir()
	cfg := mustLoad(t, site(t, "embedded://127.0.0.1:0", dir))
	cfg.Analysis.Lateness = time.Second // what a site has unless it says otherwise
	size := writeLargeHistory(t, dir, sensors.At(newHurry(1).base), 1e9)
	m, n := listenAsManager(t, "")
	begun := time.Now()
	d, err := newDaemon(cfg, daemonOptions{
		exercise: true, clock: newHurry(1).clock(t), notify: n, instance: "under-test", log: zerolog.Nop(),
	})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	until(t, "READY", func() bool { return m.count("READY=1") == 1 })
	ready := time.Since(begun)
	until(t, "the first step", func() bool { return d.board.view.Load() != nil })
	first := time.Since(begun)
	begun = time.Now()
	cancel()
	if err := <-ended; err != nil {
		t.Error(err)
	}
	stopped := time.Since(begun)
	t.Logf("with %.2f GB of history: READY after %v, the first step after %v, stopped after %v",
		float64(size)/1e9, ready.Round(time.Millisecond), first.Round(time.Millisecond), stopped.Round(time.Millisecond))
	// A step closes up to a second after it begins, and waits for its lateness.
	if ready > 2*time.Second || first > 4*time.Second || stopped > 5*time.Second {
		t.Error("at most 2 s, 4 s and 5 s")
	}
}

// writeLargeHistory writes the history of an airfield that once had forty
// masts, day by day up to end, until it holds so many bytes; the last two
// hours, which a start reads back, are those of Skerry Moor's eight.
func writeLargeHistory(t *testing.T, dir string, end sensors.Instant, bytes int64) (size int64) {
	t.Helper()
	store, err := history.Open(dir, history.Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	w, err := store.Writer(history.WriterOptions{})
	if err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(1, 2))
	write := func(from, to sensors.Instant, ids []string) {
		var readings []sensors.Reading
		// Gusts that last some ten seconds: a first-order autoregression.
		gust := make([]float64, len(ids))
		for step := from; step < to; step += sensors.Second {
			readings = readings[:0]
			for i := range ids {
				at := step - sensors.Instant(rng.IntN(1000))
				gust[i] = 0.9*gust[i] + 0.3*rng.NormFloat64() // m/s
				readings = append(readings, sensors.Reading{Station: i, Time: at, Arrival: at + sensors.Instant(5+rng.IntN(100)),
					Speed: math.Round(100*max(0, 6+gust[i])) / 100, From: float64(2350+rng.IntN(100)) / 10, Exercise: true})
			}
			b := history.Batch{Step: step, Stations: ids, Readings: readings}
			// A batch with an entry is written at once, with all before it.
			last := (step-from)/sensors.Second%600 == 599 || step+sensors.Second >= to
			if last {
				b.Entries = []history.Entry{{Kind: history.KindSoftware, At: step, Payload: []byte(version)}}
			}
			w.Submit(b)
			for last && store.Health().WaitingSteps > 0 {
				<-time.After(time.Millisecond) // for the disk
			}
		}
	}
	const day = 24 * 3600 * sensors.Second
	masts := make([]string, 40)
	for i := range masts {
		masts[i] = fmt.Sprintf("mast%02d", i)
	}
	begin := end - 2*3600*sensors.Second
	write(begin, end, stationNames(t))
	for n := sensors.Instant(2); size < bytes; n++ {
		size = 0
		err := filepath.WalkDir(dir, func(_ string, e fs.DirEntry, err error) error {
			if info, failed := e.Info(); err == nil && failed == nil && !e.IsDir() {
				size += info.Size()
			}
			return err
		})
		if err != nil {
			t.Fatal(err)
		}
		if size < bytes {
			write(begin-n*day, begin-(n-1)*day, masts)
		}
	}
	if err := w.Close(t.Context()); err != nil {
		t.Fatal(err)
	}
	if lost := store.Health().StepsDropped; lost > 0 {
		t.Fatalf("%d steps were not written", lost)
	}
	if err := store.Close(); err != nil {
		t.Fatal(err)
	}
	return size
}

// stationNames are the masts of Skerry Moor.
func stationNames(t *testing.T) (ids []string) {
	t.Helper()
	for _, s := range mustLoad(t, skerrymoor).Stations {
		ids = append(ids, s.ID)
	}
	return ids
}
