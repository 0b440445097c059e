package history

import (
	"encoding/binary"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"sockline/sensors"
)

// places is where the values of a file stand: by bucket-independent key, the
// pages of each copy.
type places map[string][][2]int

// placesOf finds every value that verifies and the pages that it needs.
func placesOf(t *testing.T, path string) places {
	t.Helper()
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	out := places{}
	entries(data, func(key, value []byte) {
		name := string(key)
		if body, err := unseal(key, value); err != nil {
			if _, err := parseRecord(key, value); err != nil {
				return
			}
		} else if len(key) == 8 && rowOf(key, body) == bucketLate {
			name = "late" + name
		}
		from := cap(data) - cap(key) // both reach to the end of the same array
		end := cap(data) - cap(value) + len(value) - 1
		out[name] = append(out[name], [2]int{from / pageSize, end / pageSize})
	})
	return out
}

// lost reports whether a copy of a value is touched when one page, or all from
// it on, go bad; pages that are free again hold copies, too.
func (p places) lost(key []byte, page int, cut bool) bool {
	return slices.ContainsFunc(p[string(key)], func(at [2]int) bool {
		return at[1] >= page && (cut || at[0] <= page)
	})
}

// foldedHistory writes n steps in windows of a minute, with commits as in life.
func foldedHistory(t *testing.T, dir string, n int) {
	t.Helper()
	s := minutes(t, dir, Options{})
	w := &Writer{s: s}
	for i := range n {
		b := batchOf(start + sensors.Instant(i)*sensors.Second)
		it := &item{step: b.Step, hasStep: true, stations: b.Stations, body: appendReadings(nil, b.Step, b.Readings), lates: len(b.Late)}
		if len(b.Late) > 0 {
			it.late = appendLate(nil, b.Step, b.Late)
		}
		for _, is := range b.Issues {
			payload, err := encodeIssue(is)
			if err != nil {
				t.Fatal(err)
			}
			it.drafts = append(it.drafts, draft{kind: KindIssue, at: it.step, payload: payload})
		}
		r := &round{items: []*item{it}}
		if err := w.commit(r); err != nil {
			t.Fatal(err)
		}
		s.head = r.end
	}
	w.closeDay()
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

// TestIntactValuesSurvive harms copies of a history in one place, or cuts them
// off: each opens and says so, gives back everything whose own pages were not
// harmed, and nothing that was never written.
func TestIntactValuesSurvive(t *testing.T) {
	harms := 100
	if os.Getenv("SOCKLINE_LONG") != "" {
		harms = 1000
	}
	const seed, steps = 53, 260
	rng := rand.New(rand.NewPCG(seed, 0))
	dir, work := t.TempDir(), filepath.Join(t.TempDir(), "w")
	foldedHistory(t, dir, steps)
	day1, day2 := dayName("2026-07-01"), dayName("2026-07-02")
	names := []string{journalName, day2, day2, day1}
	where := map[string]places{}
	for _, name := range names {
		where[name] = placesOf(t, filepath.Join(dir, name))
	}
	recovered, anew, meta := 0, 0, 0
	for i := range harms {
		copyDir(t, dir, work)
		name := names[i%len(names)]
		path := filepath.Join(work, name)
		used := usedBytes(t, path)
		at, cut := rng.Int64N(used), rng.IntN(4) == 0
		what := fmt.Sprintf("seed %d, harm %d: %s, byte %d, cut off %v", seed, i, name, at, cut)
		if cut {
			if err := os.Truncate(path, at); err != nil {
				t.Fatal(err)
			}
		} else if rng.IntN(2) == 0 {
			flipBit(t, path, at, rng.IntN(8))
		} else { // a whole sector of something else
			junk := make([]byte, sector)
			for k := range junk {
				junk[k] = byte(rng.Uint32())
			}
			writeAt(t, path, at/sector*sector, junk)
		}
		page := int(at / pageSize)
		if page < 2 && !cut {
			meta++ // one of the two heads: the state before the last commit is in force
			continue
		}
		s, err := Open(work, Options{Log: zerolog.Nop()})
		if err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		missing := survivors(t, s, what, where, name, page, cut)
		rep, err := s.Verify()
		if missing > 0 && err == nil && rep.OK() && len(s.Health().Damage) == 0 {
			t.Errorf("%s: %d values are gone and not a word", what, missing)
		}
		for _, d := range s.Health().Damage {
			if strings.Contains(d, "begun anew") {
				anew++
			}
		}
		if missing == 0 {
			recovered++
		}
		if err := s.Close(); err != nil {
			t.Fatal(err)
		}
		if t.Failed() {
			return
		}
	}
	if anew < harms/10 {
		t.Errorf("only %d of %d harms led to a new file: the test shows little", anew, harms)
	}
	t.Logf("%d harms: %d files begun anew from what was intact, %d without any loss, %d of a head left out", harms, anew, recovered, meta)
}

// survivors checks what is left and counts what is not.
func survivors(t *testing.T, s *Store, what string, where map[string]places, name string, page int, cut bool) (missing int) {
	t.Helper()
	got := map[sensors.Instant]Step{}
	named := s.Readings(0, 1<<50, func(st Step) error { got[st.At] = st; return nil })
	lost := func(file string, key []byte) bool { return file == name && where[file].lost(key, page, cut) }
	for i := range 260 {
		b := batchOf(start + sensors.Instant(i)*sensors.Second)
		want := Step{At: b.Step, Stations: b.Stations, Readings: b.Readings, Late: b.Late}
		file := dayName(dayOf(b.Step))
		window := midnight(b.Step) + (b.Step-midnight(b.Step))/60000*60000
		row := stepKey(b.Step)
		gone := lost(file, binary.BigEndian.AppendUint32(nil, 1)) // the list of stations
		if where[file][string(blockKey(window, stationFrame))] == nil {
			gone = gone || lost(file, row) || lost(file, append([]byte("late"), row...))
		} else {
			for n := range len(stationIDs) + 1 {
				gone = gone || lost(file, blockKey(window, n))
			}
		}
		st, there := got[b.Step]
		switch {
		case there && sameStep(st, want):
		case !gone:
			t.Errorf("%s: step %s was not harmed, and is there %v with %d readings of %d; %v; %q", what, b.Step, there, len(st.Readings), len(want.Readings), named, s.Health().Damage)
			return missing
		default:
			missing++
		}
		for _, r := range st.Readings {
			if !slices.ContainsFunc(want.Readings, func(w sensors.Reading) bool { return sameBits(w, r) }) {
				t.Errorf("%s: step %s holds a reading that was never written", what, b.Step)
			}
		}
	}
	return missing + recordsLeft(t, s, what, lost)
}

// recordsLeft: a record survives that is not harmed itself, nor are both its
// neighbours, which prove it.
func recordsLeft(t *testing.T, s *Store, what string, lost func(string, []byte) bool) (missing int) {
	t.Helper()
	there := map[uint64]bool{}
	_ = s.Journal(0, func(r Record) error { there[r.Seq] = true; return nil })
	const total uint64 = 86 // each third of 260 steps
	for seq := uint64(1); seq <= total; seq++ {
		gone := lost(journalName, seqKey(seq)) ||
			seq > 1 && lost(journalName, seqKey(seq-1)) && (seq == total || lost(journalName, seqKey(seq+1)))
		if !there[seq] && !gone {
			t.Errorf("%s: record %d was not harmed and is not there", what, seq)
		}
		if !there[seq] {
			missing++
		}
	}
	return missing
}

func writeAt(t *testing.T, path string, at int64, b []byte) {
	t.Helper()
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	if _, err := f.WriteAt(b, at); err != nil {
		t.Fatal(err)
	}
}
