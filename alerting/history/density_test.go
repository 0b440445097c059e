package history

import (
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"github.com/rs/zerolog"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// walk1 is the wind that ceilings of codecs are measured with: an AR(1) series
// a station for speed and direction, at 1 Hz on whole seconds, speeds in
// tenths of a knot, directions in whole degrees.
type walk1 struct {
	tau, sdSpeed, sdFrom float64
	lost                 float64
	speed, from          []float64
	rng                  *rand.Rand
}

func typicalWind(stations int) *walk1 {
	return &walk1{tau: 20, sdSpeed: 2.5, sdFrom: 12, lost: 0.0005, speed: make([]float64, stations), from: make([]float64, stations),
		rng: rand.New(rand.NewPCG(5, 5))}
}

func (w *walk1) step(at sensors.Instant, rs []sensors.Reading) []sensors.Reading {
	rs = rs[:0]
	phi := math.Exp(-1 / w.tau)
	innovation := math.Sqrt(1 - phi*phi)
	for s := range w.speed {
		w.speed[s] = phi*w.speed[s] + innovation*w.rng.NormFloat64()
		w.from[s] = phi*w.from[s] + innovation*w.rng.NormFloat64()
		if w.rng.Float64() < w.lost {
			continue
		}
		tenths := math.Round(10 * max(0, 14+w.sdSpeed*w.speed[s]))
		degrees := math.Mod(math.Round(250+w.sdFrom*w.from[s])+720, 360)
		rs = append(rs, sensors.Reading{Station: s, Time: at, Arrival: at, Speed: float64(tenths/10) * quantity.Knot, From: degrees})
	}
	return rs
}

// entropyOf is the entropy in bytes a reading of the first differences of
// speed, direction and time, each on its own: the limit for coding them so.
type entropyOf struct {
	counts [3]map[int64]int
	before map[int][3]int64
	n      int
}

func (e *entropyOf) add(r sensors.Reading) {
	now := [3]int64{int64(math.Round(r.Speed / quantity.Knot * 10)), int64(r.From), int64(r.Time)}
	if old, ok := e.before[r.Station]; ok {
		for i := range now {
			e.counts[i][now[i]-old[i]]++
		}
		e.n++
	}
	e.before[r.Station] = now
}

func (e *entropyOf) bytes() (sum float64) {
	for _, c := range e.counts {
		for _, n := range c {
			p := float64(n) / float64(e.n)
			sum -= p * math.Log2(p)
		}
	}
	return sum / 8
}

// TestDensity measures the files of days of 20 stations against the entropy of
// the differences: all that is on disk counts, free pages too.
func TestDensity(t *testing.T) {
	rows := []struct {
		window sensors.Instant
		limit  float64
	}{{600 * sensors.Second, 1.4}, {60 * sensors.Second, 1.8}}
	days := 1
	if raceEnabled {
		rows = rows[:1] // slow, and no goroutines to watch
	} else if os.Getenv("SOCKLINE_LONG") != "" {
		days = 6 // 10 million readings
	}
	for _, row := range rows {
		bytes, entropy, n := density(t, days, row.window)
		t.Logf("windows of %d s: %d readings, %.3f bytes a reading, entropy %.3f: %.2f times", row.window/sensors.Second, n, bytes, entropy, bytes/entropy)
		if bytes > row.limit*entropy {
			t.Errorf("windows of %d s: %.3f bytes a reading are more than %.1f times the entropy of %.3f", row.window/sensors.Second, bytes, row.limit, entropy)
		}
	}
}

func density(t *testing.T, days int, window sensors.Instant) (bytes, entropy float64, n int) {
	const stations = 20
	dir := t.TempDir()
	s, err := Open(dir, Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	s.window = window
	w, ids, wind := &Writer{s: s}, benchIDs(stations), typicalWind(stations)
	e := &entropyOf{before: map[int][3]int64{}, counts: [3]map[int64]int{{}, {}, {}}}
	first := midnight(start)
	var rs []sensors.Reading
	for at := sensors.Instant(1); at <= sensors.Instant(days)*86400; {
		r := &round{}
		for range 60 { // as after a minute of waiting: more rows a commit than in life, fewer commits
			step := first + at*sensors.Second
			rs = wind.step(step, rs)
			for _, x := range rs {
				e.add(x)
			}
			n += len(rs)
			r.items = append(r.items, &item{step: step, hasStep: true, stations: ids, readings: len(rs), body: appendReadings(nil, step, rs)})
			at++
		}
		if w.day != nil {
			w.day.db.NoSync = true // the same bytes, sooner
		}
		if err := w.commit(r); err != nil {
			t.Fatal(err)
		}
	}
	w.foldRest()
	w.closeDay()
	var used int64
	names, _ := filepath.Glob(filepath.Join(dir, "readings-*.db"))
	for _, name := range names {
		info, err := os.Stat(name)
		if err != nil {
			t.Fatal(err)
		}
		used += info.Size()
	}
	return float64(used) / float64(n), e.bytes(), n
}
