package history

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"github.com/rs/zerolog"
	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// oneHertz makes a step of n masts at 1 Hz: hundredths of m/s, tenths of a
// degree, times and delays to the millisecond, without any likeness between
// neighbours.
func oneHertz(step sensors.Instant, n int, rs []sensors.Reading) []sensors.Reading {
	rng := rand.New(rand.NewPCG(uint64(step), 1))
	rs = rs[:0]
	for s := range n {
		at := step - sensors.Instant(rng.IntN(1000))
		rs = append(rs, sensors.Reading{Station: s, Time: at, Arrival: at + sensors.Instant(5+rng.IntN(100)),
			Speed: float64(500+rng.IntN(900)) / 100, From: float64(2300+rng.IntN(400)) / 10})
	}
	return rs
}

func benchIDs(n int) []string {
	ids := make([]string, n)
	for i := range ids {
		ids[i] = fmt.Sprintf("mast%02d", i)
	}
	return ids
}

// BenchmarkAppend writes steps in transactions as large as a backlog gives.
func BenchmarkAppend(b *testing.B) {
	for _, stations := range []int{8, 20, 40} {
		b.Run(fmt.Sprintf("stations=%d", stations), func(b *testing.B) {
			dir := b.TempDir()
			s, err := Open(dir, Options{Log: zerolog.Nop()})
			if err != nil {
				b.Fatal(err)
			}
			defer s.Close()
			w := &Writer{s: s}
			defer w.closeDay()
			ids := benchIDs(stations)
			var rs []sensors.Reading
			const perRound = 300
			n := 0
			for b.Loop() {
				r := &round{}
				for i := range perRound {
					step := start + sensors.Instant(60+n*perRound+i)*sensors.Second
					rs = oneHertz(step, stations, rs)
					r.items = append(r.items, &item{step: step, hasStep: true, stations: ids, readings: len(rs), body: appendReadings(nil, step, rs)})
				}
				if err := w.commit(r); err != nil {
					b.Fatal(err)
				}
				n++
			}
			readings := float64(n * perRound * stations)
			b.ReportMetric(readings/b.Elapsed().Seconds(), "readings/s")
			var used int64
			days, _ := filepath.Glob(filepath.Join(dir, "readings-*.db"))
			for _, day := range days {
				info, err := os.Stat(day)
				if err != nil {
					b.Fatal(err)
				}
				used += info.Size()
			}
			b.ReportMetric(float64(used)/readings, "B/reading")
		})
	}
}

// BenchmarkScan reads two hours of 20 masts back: folded as they lie after
// ten minutes, as rows, and, for the share of the codec, the blocks alone from
// memory. The wind is that of TestDensity.
func BenchmarkScan(b *testing.B) {
	const stations, steps = 20, 7200
	for _, folded := range []bool{true, false} {
		s, err := Open(b.TempDir(), Options{Log: zerolog.Nop()})
		if err != nil {
			b.Fatal(err)
		}
		defer s.Close()
		w, wind, r, all := &Writer{s: s}, typicalWind(stations), &round{}, 0
		for i := range steps {
			step := start + sensors.Instant(61+i)*sensors.Second
			rs := wind.step(step, nil)
			all += len(rs)
			r.items = append(r.items, &item{step: step, hasStep: true, stations: benchIDs(stations), body: appendReadings(nil, step, rs)})
		}
		if err := w.commit(r); err != nil {
			b.Fatal(err)
		}
		name := "rows"
		if folded {
			name = "folded"
			w.foldRest()
		}
		w.closeDay()
		b.Run(name, func(b *testing.B) {
			for b.Loop() {
				n := 0
				err := s.Readings(0, 1<<50, func(st Step) error { n += len(st.Readings); return nil })
				if err != nil || n != all {
					b.Fatal(n, err)
				}
			}
			b.ReportMetric(float64(all)*float64(b.N)/b.Elapsed().Seconds(), "readings/s")
		})
		if folded {
			b.Run("codec-alone", func(b *testing.B) { benchBlocks(b, s, all) })
		}
	}
}

// benchBlocks decodes the blocks of the second day without asking the disk.
func benchBlocks(b *testing.B, s *Store, all int) {
	f, err := s.shelf.acquire(dayName(dayOf(start+120*sensors.Second)), dayLayout(), false)
	if err != nil {
		b.Fatal(err)
	}
	var windows []rawWindow
	err = f.view(func(tx *bolt.Tx) error {
		windows, _ = storedWindows(tx, midnight(start+120*sensors.Second), start+86400*sensors.Second)
		return nil
	})
	if err = errors.Join(err, s.shelf.release(f)); err != nil {
		b.Fatal(err)
	}
	var (
		sc scratch
		rs []sensors.Reading
	)
	for b.Loop() {
		n := 0
		for _, w := range windows {
			for _, k := range w.blocks {
				body, err := unseal(k.key, k.value)
				if err != nil {
					b.Fatal(err)
				}
				c := cursorAt(body)
				rs = c.block(w.base, 1, rs[:0], &sc)
				n += len(rs)
			}
		}
		if n != all {
			b.Fatal(n, all)
		}
	}
	b.ReportMetric(float64(all)*float64(b.N)/b.Elapsed().Seconds(), "readings/s")
}

// BenchmarkFold is what a window of ten minutes of 20 masts costs the
// committing goroutine, checks included.
func BenchmarkFold(b *testing.B) {
	wind, steps := typicalWind(20), []Step{}
	for i := range 600 {
		at := midnight(start) + sensors.Instant(i)*sensors.Second
		steps = append(steps, Step{At: at, Stations: benchIDs(20), Readings: wind.step(at, nil)})
	}
	for b.Loop() {
		if !givesBack(encodeWindow(1, steps), steps, benchIDs(20)) {
			b.Fatal("not as it was")
		}
	}
	b.ReportMetric(float64(600*20)*float64(b.N)/b.Elapsed().Seconds(), "readings/s")
}

// BenchmarkIssue is the time from Submit to the release as recorded.
func BenchmarkIssue(b *testing.B) {
	s, err := Open(b.TempDir(), Options{Log: zerolog.Nop()})
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	out := make(chan Released, 1)
	w, err := s.Writer(WriterOptions{Release: func(r Released) { out <- r }})
	if err != nil {
		b.Fatal(err)
	}
	defer mustCloseWriter(b, w)
	recorded, n := 0, 0
	step := start
	for b.Loop() {
		step += sensors.Second
		w.Submit(Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, 8), Issues: []Issue{issueOf(step)}})
		if r := <-out; r.Recorded {
			recorded++
		}
		n++
	}
	b.ReportMetric(float64(recorded)/float64(n), "recorded")
}

// BenchmarkSubmit is what the engine pays for a step of 20 masts at 4 Hz.
func BenchmarkSubmit(b *testing.B) {
	rs := readingsOf(start, 20)
	for b.Loop() {
		appendReadings(nil, start, rs)
	}
}

// BenchmarkOpen opens a journal of 20 000 issues, and so walks its chain.
func BenchmarkOpen(b *testing.B) {
	dir := b.TempDir()
	s, err := Open(dir, Options{Log: zerolog.Nop()})
	if err != nil {
		b.Fatal(err)
	}
	w := &Writer{s: s}
	for chunk := range 20 {
		r := &round{}
		for i := range 1000 {
			step := start + sensors.Instant(chunk*1000+i)*sensors.Second
			payload, err := encodeIssue(issueOf(step))
			if err != nil {
				b.Fatal(err)
			}
			r.items = append(r.items, &item{drafts: []draft{{kind: KindIssue, at: step, payload: payload}}})
		}
		if err := w.commit(r); err != nil {
			b.Fatal(err)
		}
		s.head = r.end
	}
	info, err := os.Stat(filepath.Join(dir, journalName))
	if err != nil {
		b.Fatal(err)
	}
	if err := s.Close(); err != nil {
		b.Fatal(err)
	}
	b.SetBytes(info.Size())
	for b.Loop() {
		s, err := Open(dir, Options{Log: zerolog.Nop()})
		if err != nil {
			b.Fatal(err)
		}
		if err := s.Close(); err != nil {
			b.Fatal(err)
		}
	}
}
