package history

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

func TestColumnRoundTrip(t *testing.T) {
	const seed = 29
	rng := rand.New(rand.NewPCG(seed, 0))
	var s scratch
	for round := range 1500 {
		n := 1 + rng.IntN(700)
		vs := make([]int64, n)
		walk, circle := rng.Int64N(3600), int64(0)
		way := rng.IntN(7)
		for i := range vs {
			switch way {
			case 0:
				vs[i] = int64(rng.Uint64()) // any 64 bits, so that differences overflow
			case 1:
				vs[i] = 77
			case 2:
				vs[i] = int64(i / 50)
			case 3:
				walk, circle = (walk+rng.Int64N(41)+3580)%3600, 3600
				vs[i] = walk
			case 4:
				walk += rng.Int64N(9) - 4
				vs[i] = walk
			case 5:
				vs[i] = rng.Int64N(1000)
			default:
				vs[i] = rng.Int64N(5)
				if rng.IntN(100) == 0 {
					vs[i] = int64(rng.Uint64()) >> rng.IntN(60)
				}
			}
		}
		b := append(appendColumn(nil, vs, circle), 0xA5)
		c := cursorAt(b)
		got := c.column(nil, n, circle, &s.rice)
		if c.Bad || !slices.Equal(got, vs) || len(c.Left) != 1 || c.Left[0] != 0xA5 {
			t.Fatalf("seed %d round %d way %d: %d numbers, bad %v, %d bytes left\n%v\n%v", seed, round, way, n, c.Bad, len(c.Left), vs, got)
		}
		for cut := range min(len(b)-1, 40) { // cut short it is either refused or short of nothing
			c := cursorAt(b[:cut])
			if got := c.column(nil, n, circle, &s.rice); !c.Bad && !slices.Equal(got, vs) {
				t.Fatalf("seed %d round %d: cut to %d bytes of %d and not refused", seed, round, cut, len(b))
			}
		}
	}
}

// stationReadings draws readings of one station: what instruments send, and
// now and then what none should.
func stationReadings(rng *rand.Rand, base sensors.Instant) []sensors.Reading {
	n, period := 1+rng.IntN(650), []int{1000, 250, 100, 1013}[rng.IntN(4)]
	units := []float64{1, quantity.Knot, quantity.KilometrePerHour}
	unit, decimals := units[rng.IntN(len(units))], []float64{1, 10, 100, 1000}[rng.IntN(4)]
	jitter, odd, gusts := rng.IntN(3)*40, rng.IntN(4) == 0, rng.IntN(2) == 0
	speed, from := rng.Int64N(200), rng.Int64N(3600)
	var rs []sensors.Reading
	for i := range n {
		if rng.IntN(200) == 0 {
			continue
		}
		at := base - 999 + sensors.Instant(i*period+rng.IntN(jitter+1))
		speed = max(0, speed+rng.Int64N(21)-10)
		from = (from + rng.Int64N(201) + 3500) % 3600
		r := sensors.Reading{Station: 3, Time: at, Arrival: at + sensors.Instant(20+rng.IntN(1+jitter)),
			Speed: float64(float64(speed)/decimals) * unit, From: float64(from) / 10}
		if gusts {
			r.HasGust, r.Gust = true, float64(float64(speed+rng.Int64N(30))/decimals)*unit
		}
		if odd && rng.IntN(20) == 0 {
			o := anyReading(rng, at)
			r.Speed, r.From, r.Gust, r.HasGust, r.Exercise, r.Retained = o.Speed, o.From, o.Gust, o.HasGust, o.Exercise, o.Retained
		}
		rs = append(rs, r)
	}
	if len(rs) == 0 {
		return []sensors.Reading{{Station: 3, Time: base, Arrival: base}}
	}
	return rs
}

func TestBlockRoundTrip(t *testing.T) {
	const seed = 31
	rng := rand.New(rand.NewPCG(seed, 0))
	var s scratch
	for round := range 500 {
		rs := stationReadings(rng, start)
		c := cursorAt(appendBlock(nil, start, rs))
		got := c.block(start, 3, nil, &s)
		if c.Bad || len(c.Left) != 0 || !slices.EqualFunc(got, rs, sameBits) {
			t.Fatalf("seed %d round %d: %d readings became %d, bad %v, %d bytes left", seed, round, len(rs), len(got), c.Bad, len(c.Left))
		}
	}
}

func FuzzBlock(f *testing.F) {
	rng := rand.New(rand.NewPCG(37, 0))
	for range 8 {
		f.Add(appendBlock(nil, start, stationReadings(rng, start)))
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		c, s := cursorAt(b), scratch{}
		rs := c.block(start, 3, nil, &s)
		if c.Bad {
			return
		}
		for _, r := range rs {
			if d := r.Time - start; d > 1<<50 || d < -1<<50 || r.Arrival-r.Time > 1<<50 || r.Arrival-r.Time < -1<<50 {
				return // not foldable: never written
			}
		}
		again := cursorAt(appendBlock(nil, start, rs))
		if got := again.block(start, 3, nil, &s); again.Bad || !slices.EqualFunc(got, rs, sameBits) {
			t.Fatalf("%d readings became %d", len(rs), len(got))
		}
	})
}

func FuzzFrame(f *testing.F) {
	late := map[int][]LateReading{2: {{Reading: readingsOf(start, 1)[0], Reason: "too-late"}}}
	f.Add((&frame{table: 1, seconds: []int{0, 1, 2, 7}, stations: []int{0, 3}, late: late}).encode(start))
	f.Fuzz(func(t *testing.T, b []byte) {
		fr, err := parseFrame(b, start)
		if err != nil {
			return
		}
		again, err := parseFrame(fr.encode(start), start)
		if err != nil || !slices.Equal(again.seconds, fr.seconds) || !slices.Equal(again.stations, fr.stations) || again.table != fr.table {
			t.Fatalf("%+v became %+v, %v", fr, again, err)
		}
	})
}

// minutes is a Store whose windows are a minute long.
func minutes(tb testing.TB, dir string, opts Options) *Store {
	s := mustOpen(tb, dir, opts)
	s.window = 60 * sensors.Second
	return s
}

// rowsLeft is how many rows of a day are not folded.
func rowsLeft(tb testing.TB, s *Store, day string) (rows, values int) {
	tb.Helper()
	f, err := s.shelf.acquire(dayName(day), dayLayout(), false)
	if err != nil {
		tb.Fatal(err)
	}
	err = f.view(func(tx *bolt.Tx) error {
		rows = count(tx.Bucket([]byte(bucketSteps)))
		if b := tx.Bucket([]byte(bucketBlocks)); b != nil {
			values = count(b)
		}
		return nil
	})
	if err != nil || s.shelf.release(f) != nil {
		tb.Fatal(err)
	}
	return rows, values
}

// oddSteps are steps over two midnights with all that the fold has to take:
// changing lists, missing seconds, silence, steps written again, late
// readings, and steps that blocks cannot give back.
func oddSteps(rng *rand.Rand, n int) []Step {
	lists := [][]string{stationIDs, stationIDs[:3], {"north", "mid", "far07"}, {}}
	list := lists[0]
	var steps []Step
	at := start
	for range n {
		at += sensors.Second
		if rng.IntN(60) == 0 {
			at += sensors.Instant(rng.IntN(200)) * sensors.Second
		}
		if rng.IntN(90) == 0 {
			list = lists[rng.IntN(len(lists))]
		}
		st := Step{At: at, Stations: list}
		if rng.IntN(20) > 0 && len(list) > 0 {
			st.Readings = readingsOf(at, len(list))
		}
		switch rng.IntN(50) {
		case 0: // out of order
			slices.Reverse(st.Readings)
		case 1: // of another second
			if len(st.Readings) > 0 {
				st.Readings[0].Time -= 5000
			}
		case 2:
			st.Readings = append(st.Readings, anyReading(rng, at))
		case 3, 4:
			for range 1 + rng.IntN(5) {
				st.Late = append(st.Late, LateReading{Reading: anyReading(rng, at), Reason: []string{"too-late", "future", ""}[rng.IntN(3)]})
			}
		}
		steps = append(steps, st)
		if rng.IntN(40) == 0 { // again, and differently
			again := steps[max(0, len(steps)-1-rng.IntN(300))]
			again.Readings = again.Readings[:len(again.Readings)/2]
			if len(again.Readings) == 0 {
				again.Readings = nil
			}
			steps = append(steps, again)
		}
	}
	return steps
}

// TestFoldGivesBackEveryStep writes odd steps with a Writer that stops now and
// then, and expects all that was written last, bit by bit, from any second on.
func TestFoldGivesBackEveryStep(t *testing.T) {
	const seed = 41
	rng := rand.New(rand.NewPCG(seed, 0))
	dir := t.TempDir()
	want := map[sensors.Instant]Step{}
	steps := oddSteps(rng, 2500)
	var s *Store
	for len(steps) > 0 {
		s = minutes(t, dir, Options{})
		w := &Writer{s: s}
		for range 1 + rng.IntN(12) { // rounds
			r := &round{}
			for range min(len(steps), 1+rng.IntN(100)) {
				st := steps[0]
				steps = steps[1:]
				want[st.At] = st
				it := &item{step: st.At, hasStep: true, stations: st.Stations, body: appendReadings(nil, st.At, st.Readings), lates: len(st.Late)}
				if len(st.Late) > 0 {
					it.late = appendLate(nil, st.At, st.Late)
				}
				r.items = append(r.items, it)
			}
			if err := w.commit(r); err != nil {
				t.Fatal(err)
			}
		}
		if rng.IntN(2) == 0 || len(steps) == 0 {
			w.foldRest() // as at midnight
		}
		w.closeDay()
		sameSteps(t, s, want, 0, 1<<50)
		for range 20 {
			from := start + sensors.Instant(rng.IntN(20000))*sensors.Second
			sameSteps(t, s, want, from, from+sensors.Instant(rng.IntN(300))*sensors.Second)
		}
		if len(steps) > 0 {
			if err := s.Close(); err != nil {
				t.Fatal(err)
			}
		}
	}
	defer s.Close()
	mustVerify(t, s)
	rows, values := 0, 0
	days, err := s.days()
	if err != nil {
		t.Fatal(err)
	}
	for _, day := range days {
		r, v := rowsLeft(t, s, day)
		rows, values = rows+r, values+v
	}
	if rows > len(want)/5 || values < 100 {
		t.Errorf("%d of %d steps are left as rows, %d values in blocks: the test folds little", rows, len(want), values)
	}
	last := slices.Max(slices.Collect(func(yield func(sensors.Instant) bool) {
		for at := range want {
			if !yield(at) {
				return
			}
		}
	}))
	if got, ok, err := s.LastStep(); got != last || !ok || err != nil {
		t.Errorf("last step %s, %v, %v; want %s", got, ok, err, last)
	}
	t.Logf("%d steps, %d left as rows, %d values", len(want), rows, values)
}

func sameSteps(t *testing.T, s *Store, want map[sensors.Instant]Step, from, to sensors.Instant) {
	t.Helper()
	n, before := 0, sensors.Instant(-1)
	err := s.Readings(from, to, func(st Step) error {
		if st.At <= before {
			return fmt.Errorf("step %s after %s", st.At, before)
		}
		before = st.At
		w, ok := want[st.At]
		if !ok || !sameStep(st, w) {
			return fmt.Errorf("step %s: is\n%+v\nwas\n%+v", st.At, st, w)
		}
		n++
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	all := 0
	for at := range want {
		if at >= from && at < to {
			all++
		}
	}
	if n != all {
		t.Fatalf("%d steps of %d in [%s, %s)", n, all, from, to)
	}
}

// TestFoldLetsRecordsPast: a commit that an alert waits for is not made longer
// by a fold, unless rows pile up.
func TestFoldLetsRecordsPast(t *testing.T) {
	s := minutes(t, t.TempDir(), Options{})
	defer s.Close()
	w := &Writer{s: s}
	defer w.closeDay()
	first := start + 60*sensors.Second // midnight
	for i := range 300 {
		step := first + sensors.Instant(i)*sensors.Second
		it := &item{step: step, hasStep: true, stations: stationIDs, body: appendReadings(nil, step, readingsOf(step, 2))}
		it.drafts = []draft{{kind: KindTable, at: step, payload: []byte("{}")}}
		r := &round{items: []*item{it}}
		if err := w.commit(r); err != nil {
			t.Fatal(err)
		}
		s.head = r.end
		rows, _ := rowsLeft(t, s, dayOf(step))
		if i < 180 && rows != i+1 || i == 180 && rows != 121 {
			t.Fatalf("after step %d there are %d rows", i, rows)
		}
	}
	step := first + 300*sensors.Second
	if err := w.commit(&round{items: []*item{{step: step, hasStep: true, stations: stationIDs, body: appendReadings(nil, step, nil)}}}); err != nil {
		t.Fatal(err)
	}
	if rows, _ := rowsLeft(t, s, dayOf(step)); rows != 1 {
		t.Errorf("%d rows after a commit that nobody waited for, want 1", rows)
	}
}

// TestDamagedBlock: what is damaged in a folded window is named, and costs its
// station or its window only.
func TestDamagedBlock(t *testing.T) {
	dir := t.TempDir()
	s := minutes(t, dir, Options{})
	defer s.Close()
	w := &Writer{s: s}
	first := start + 60*sensors.Second
	write := func(from, to int) {
		r := &round{}
		for i := from; i < to; i++ {
			b := batchOf(first + sensors.Instant(i)*sensors.Second)
			r.items = append(r.items, &item{step: b.Step, hasStep: true, stations: b.Stations, body: appendReadings(nil, b.Step, b.Readings)})
		}
		if err := w.commit(r); err != nil {
			t.Fatal(err)
		}
	}
	write(0, 241) // four windows and a row
	defer w.closeDay()
	flip := func(number int) {
		err := w.day.update(func(tx *bolt.Tx) error {
			b, key := tx.Bucket([]byte(bucketBlocks)), blockKey(first+60*sensors.Second, number)
			v := slices.Clone(b.Get(key))
			v[len(v)/2] ^= 4
			return b.Put(key, v)
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	read := func() (steps, readings int, err error) {
		err = s.Readings(0, 1<<50, func(st Step) error { steps++; readings += len(st.Readings); return nil })
		return steps, readings, err
	}
	const all = 241 * 4 * 8
	if steps, readings, err := read(); steps != 241 || readings != all || err != nil {
		t.Fatalf("before: %d steps, %d readings, %v", steps, readings, err)
	}
	flip(4) // "mid"
	if steps, readings, err := read(); steps != 241 || readings != all-240 || err == nil || !contains(err, "station mid from 2026-07-02T00:01:00", "checksum") {
		t.Errorf("a damaged block: %d steps, %d readings, %v", steps, readings, err)
	}
	flip(stationFrame)
	if steps, readings, err := read(); steps != 181 || readings != 181*32 || err == nil || !contains(err, "from 2026-07-02T00:01:00", "frame") {
		t.Errorf("a damaged frame: %d steps, %d readings, %v", steps, readings, err)
	}
	rep, err := s.Verify()
	if err != nil || rep.OK() || len(rep.Faults) != 1 || rep.Steps != 181 {
		t.Errorf("report %+v, %v", rep, err)
	}
	// A step of the damaged window that is written again stays a row: nothing
	// is written over what is damaged.
	write(70, 71)
	write(241, 300)
	if steps, _, err := read(); steps != 241 || err == nil {
		t.Errorf("after writing on: %d steps, %v", steps, err)
	}
}

func contains(err error, words ...string) bool {
	return !slices.ContainsFunc(words, func(w string) bool { return !strings.Contains(err.Error(), w) })
}
