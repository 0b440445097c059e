// Package storebench sets the history beside two other ways to keep readings,
// on the same wind in one run: one key a reading in bbolt, and a table in
// SQLite. Wind goes in; bytes a reading, writing and scanning rates come out.
// It is a module of its own, so that nobody else needs SQLite.
//
//	go test -run Compare -v .        (SOCKLINE_LONG=1: 10 million readings)
package storebench

import (
	"context"
	"database/sql"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"
	"time"

	"github.com/rs/zerolog"
	bolt "go.etcd.io/bbolt"
	_ "modernc.org/sqlite"

	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	stations             = 20
	first                = sensors.Instant(1782864000000) // 2026-07-01T00:00:00Z
	atOnce               = 600                            // steps a transaction
	speedScale, dirScale = 10, 1                          // tenths of a knot, whole degrees
)

// wind is an AR(1) series a station: tau 20 s, 2.5 kt, 12 degrees, 1 Hz, one
// second in 2000 lost.
type wind struct {
	rng         *rand.Rand
	speed, from [stations]float64
}

func (w *wind) step(at sensors.Instant) (rs []sensors.Reading) {
	phi := math.Exp(-1.0 / 20)
	innovation := math.Sqrt(1 - phi*phi)
	for s := range stations {
		w.speed[s] = phi*w.speed[s] + innovation*w.rng.NormFloat64()
		w.from[s] = phi*w.from[s] + innovation*w.rng.NormFloat64()
		if w.rng.Float64() < 0.0005 {
			continue
		}
		tenths := math.Round(speedScale * max(0, 14+2.5*w.speed[s]))
		degrees := math.Mod(math.Round(250+12*w.from[s])+720, 360)
		rs = append(rs, sensors.Reading{Station: s, Time: at, Arrival: at, Speed: float64(tenths/speedScale) * quantity.Knot, From: degrees})
	}
	return rs
}

// store is one way to keep readings.
type store interface {
	write(steps []history.Batch) error
	settle() error // all is on disk
	scan() (n int, sum float64, err error)
	size() (int64, error)
}

func TestCompare(t *testing.T) {
	steps := 7200
	if os.Getenv("SOCKLINE_LONG") != "" {
		steps = 500000
	}
	sums := map[string]float64{}
	for _, row := range []struct {
		name string
		make func(dir string) (store, error)
		part int // of the steps: the slow ones get fewer
	}{
		{"history", newHistory, 1},
		{"bbolt, one key a reading", newKeys, 1},
		{"SQLite, WAL, index", newTable, 5},
	} {
		s, err := row.make(t.TempDir())
		if err != nil {
			t.Fatal(err)
		}
		w, n := &wind{rng: rand.New(rand.NewPCG(5, 5))}, 0
		var busy time.Duration
		for at := 1; at <= steps/row.part; {
			var batches []history.Batch
			for range atOnce {
				step := first + sensors.Instant(at)*sensors.Second
				rs := w.step(step)
				n += len(rs)
				batches = append(batches, history.Batch{Step: step, Stations: ids(), Readings: rs})
				at++
			}
			begin := time.Now()
			if err := s.write(batches); err != nil {
				t.Fatal(err)
			}
			busy += time.Since(begin)
		}
		begin := time.Now()
		if err := s.settle(); err != nil {
			t.Fatal(err)
		}
		busy += time.Since(begin)
		size, err := s.size()
		if err != nil {
			t.Fatal(err)
		}
		scans, best, sum := 0, time.Duration(math.MaxInt64), 0.0
		for range 3 {
			begin := time.Now()
			if scans, sum, err = s.scan(); err != nil || scans != n {
				t.Fatalf("%s: %d readings of %d, %v", row.name, scans, n, err)
			}
			best = min(best, time.Since(begin))
		}
		if row.part == 1 {
			sums[row.name] = sum
		}
		t.Logf("%-26s %9d readings: %6.2f bytes each, written %7.0f k/s, scanned %6.2f M/s",
			row.name, n, float64(size)/float64(n), float64(n)/busy.Seconds()/1e3, float64(n)/best.Seconds()/1e6)
	}
	if a, b := sums["history"], sums["bbolt, one key a reading"]; math.Abs(a-b) > 1e-9*math.Abs(a) {
		t.Errorf("the sums of the speeds differ: %v and %v", a, b)
	}
}

func ids() []string {
	out := make([]string, stations)
	for i := range out {
		out[i] = fmt.Sprintf("mast%02d", i)
	}
	return out
}

func sizeOf(pattern string) (sum int64, err error) {
	names, err := filepath.Glob(pattern)
	for _, name := range names {
		info, err := os.Stat(name)
		if err != nil {
			return 0, err
		}
		sum += info.Size()
	}
	return sum, err
}

// kept is the history as the daemon uses it, without waiting for the seconds.
type kept struct {
	dir string
	s   *history.Store
	w   *history.Writer
	end sensors.Instant
}

func newHistory(dir string) (store, error) {
	s, err := history.Open(dir, history.Options{Log: zerolog.Nop()})
	if err != nil {
		return nil, err
	}
	now := make(chan time.Time)
	close(now)
	w, err := s.Writer(history.WriterOptions{After: func(d time.Duration) <-chan time.Time {
		if d == history.CommitEvery {
			return now
		}
		return time.After(d)
	}})
	return &kept{dir: dir, s: s, w: w}, err
}

func (k *kept) write(steps []history.Batch) error {
	for _, b := range steps {
		k.w.Submit(b)
		k.end = b.Step
	}
	tick := time.NewTicker(time.Millisecond)
	defer tick.Stop()
	limit := time.After(time.Minute)
	for k.s.Health().WaitingSteps > 2000 {
		select {
		case <-tick.C:
		case <-limit:
			return fmt.Errorf("the history does not keep up: %+v", k.s.Health())
		}
	}
	return nil
}

func (k *kept) settle() error {
	ctx, cancel := context.WithTimeout(context.Background(), time.Minute)
	defer cancel()
	return k.w.Close(ctx)
}

func (k *kept) scan() (n int, sum float64, err error) {
	err = k.s.Readings(first, k.end+sensors.Second, func(st history.Step) error {
		for i := range st.Readings {
			sum += st.Readings[i].Speed
		}
		n += len(st.Readings)
		return nil
	})
	return n, sum, err
}

func (k *kept) size() (int64, error) { return sizeOf(filepath.Join(k.dir, "readings-*.db")) }

// keys is bbolt with a key for each reading, time first, full pages.
type keys struct {
	path string
	db   *bolt.DB
}

func newKeys(dir string) (store, error) {
	k := &keys{path: filepath.Join(dir, "keys.db")}
	db, err := bolt.Open(k.path, 0o600, nil)
	if err != nil {
		return nil, err
	}
	db.AllocSize = 1 << 20
	k.db = db
	return k, db.Update(func(tx *bolt.Tx) error { _, err := tx.CreateBucket([]byte("r")); return err })
}

func (k *keys) write(steps []history.Batch) error {
	return k.db.Update(func(tx *bolt.Tx) error {
		b := tx.Bucket([]byte("r"))
		b.FillPercent = 1
		for _, st := range steps {
			for _, r := range st.Readings {
				key := binary.BigEndian.AppendUint16(binary.BigEndian.AppendUint64(nil, uint64(r.Time)), uint16(r.Station))
				value := binary.LittleEndian.AppendUint16(nil, uint16(math.Round(r.Speed/quantity.Knot*speedScale)))
				if err := b.Put(key, binary.LittleEndian.AppendUint16(value, uint16(r.From*dirScale))); err != nil {
					return err
				}
			}
		}
		return nil
	})
}

func (k *keys) settle() error { return nil }

func (k *keys) scan() (n int, sum float64, err error) {
	err = k.db.View(func(tx *bolt.Tx) error {
		c := tx.Bucket([]byte("r")).Cursor()
		for key, v := c.First(); key != nil; key, v = c.Next() {
			sum += float64(float64(binary.LittleEndian.Uint16(v))/speedScale) * quantity.Knot
			n++
		}
		return nil
	})
	return n, sum, err
}

func (k *keys) size() (int64, error) { return sizeOf(k.path) }

// table is SQLite with a row for each reading and an index over time.
type sqlTable struct {
	path string
	db   *sql.DB
}

func newTable(dir string) (store, error) {
	s := &sqlTable{path: filepath.Join(dir, "table.sqlite")}
	db, err := sql.Open("sqlite", s.path+"?_pragma=journal_mode(WAL)&_pragma=synchronous(FULL)")
	if err != nil {
		return nil, err
	}
	s.db = db
	for _, text := range []string{"CREATE TABLE r (at INTEGER, station INTEGER, speed INTEGER, direction INTEGER)", "CREATE INDEX i ON r (at, station)"} {
		if _, err := db.Exec(text); err != nil {
			return nil, err
		}
	}
	return s, nil
}

func (s *sqlTable) write(steps []history.Batch) error {
	tx, err := s.db.Begin()
	if err != nil {
		return err
	}
	put, err := tx.Prepare("INSERT INTO r VALUES (?, ?, ?, ?)")
	if err != nil {
		return err
	}
	for _, st := range steps {
		for _, r := range st.Readings {
			if _, err := put.Exec(int64(r.Time), r.Station, int(math.Round(r.Speed/quantity.Knot*speedScale)), int(r.From)); err != nil {
				return err
			}
		}
	}
	return tx.Commit()
}

func (s *sqlTable) settle() error {
	_, err := s.db.Exec("PRAGMA wal_checkpoint(TRUNCATE)")
	return err
}

func (s *sqlTable) scan() (n int, sum float64, err error) {
	rows, err := s.db.Query("SELECT at, station, speed, direction FROM r ORDER BY at, station")
	if err != nil {
		return 0, 0, err
	}
	defer rows.Close()
	for rows.Next() {
		var at int64
		var station, speed, direction int
		if err := rows.Scan(&at, &station, &speed, &direction); err != nil {
			return 0, 0, err
		}
		sum += float64(float64(speed)/speedScale) * quantity.Knot
		n++
	}
	return n, sum, rows.Err()
}

func (s *sqlTable) size() (int64, error) { return sizeOf(s.path + "*") }
