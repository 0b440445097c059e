package history

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// put writes entries into the journal as the Writer does.
func put(tb testing.TB, s *Store, at sensors.Instant, payloads ...any) {
	tb.Helper()
	w := mustWriter(tb, s, WriterOptions{})
	for _, p := range payloads {
		e, err := EntryOf(at, p)
		if err != nil {
			tb.Fatal(err)
		}
		w.Record(e)
	}
	mustCloseWriter(tb, w)
}

// emptyDay makes a day's file without a step, as a copy of one that is made
// once.
func emptyDay(tb testing.TB, dir string, day sensors.Instant) string {
	tb.Helper()
	template := filepath.Join(dir, "template")
	if _, err := os.Stat(template); err != nil {
		if err := createFile(template, dayLayout(), func(string) {}); err != nil {
			tb.Fatal(err)
		}
	}
	name := dayName(dayOf(day))
	b, err := os.ReadFile(template)
	if err == nil {
		err = os.WriteFile(filepath.Join(dir, name), b, 0o600)
	}
	if err != nil {
		tb.Fatal(err)
	}
	return name
}

// TestHoldsOverTenYears lets ten years of days go by, one file each, with
// holds set and released on the way: nothing under a hold is deleted, ever,
// and everything else is, once its time is over.
func TestHoldsOverTenYears(t *testing.T) {
	const seed, day, days = 43, 86400 * sensors.Second, 3653
	const keep = 31
	rng := rand.New(rand.NewPCG(seed, 0))
	dir := t.TempDir()
	s := mustOpen(t, dir, Options{Keep: keep * 24 * time.Hour})
	defer s.Close()
	first := midnight(start)
	type held struct{ Hold }
	holds := map[string]held{}
	there := map[int]bool{}
	covered := func(d int) bool { // by the rule: from 2 h 10 min before it to 10 min after it
		from, to := first+sensors.Instant(d)*day, first+sensors.Instant(d+1)*day
		for _, h := range holds {
			if h.From.Add(-130*time.Minute) < to && h.To.Add(10*time.Minute) >= from {
				return true
			}
		}
		return false
	}
	everHeld := 0
	for d := range days {
		now := first + sensors.Instant(d)*day + 3600*sensors.Second
		emptyDay(t, dir, now)
		there[d] = true
		if rng.IntN(40) == 0 {
			back := now - sensors.Instant(rng.IntN((keep-2)*86400))*sensors.Second
			h := Hold{ID: fmt.Sprint("hold-", d), Who: "Io", Reason: "an occurrence", From: back, To: back + sensors.Instant(rng.IntN(3*86400))*sensors.Second}
			holds[h.ID] = held{h}
			put(t, s, now, h)
			everHeld++
		}
		for id := range holds {
			if len(holds) > 12 && rng.IntN(200) == 0 {
				h := holds[id].Hold
				h.Released = true
				delete(holds, id)
				put(t, s, now, h)
				break
			}
		}
		if d%97 == 0 { // a restart
			if err := s.Close(); err != nil {
				t.Fatal(err)
			}
			s = mustOpen(t, dir, Options{Keep: keep * 24 * time.Hour})
		}
		if rng.IntN(20) > 0 && d != days-1 {
			continue // the machine was off, or busy
		}
		gone, err := s.Prune(now)
		if err != nil {
			t.Fatal(err)
		}
		for k := range there {
			old, name := k+1+keep <= d, dayName(dayOf(first+sensors.Instant(k)*day))
			want := old && !covered(k)
			if got := slices.Contains(gone, name); got != want {
				t.Fatalf("seed %d, day %d: %s deleted %v, want %v", seed, d, name, got, want)
			}
			if want {
				delete(there, k)
			}
		}
	}
	files, err := filepath.Glob(filepath.Join(dir, "readings-*.db"))
	if err != nil || len(files) != len(there) || everHeld < 50 || len(there) < keep+10 {
		t.Errorf("%d files, %d expected; %d holds; %v", len(files), len(there), everHeld, err)
	}
	t.Logf("%d holds in %d days, %d files left", everHeld, days, len(files))
}

func TestHoldOfAnEvent(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 75) // events opened at 23:59:00, 23:59:30 and 00:00:00, the last still open
	s := mustOpen(t, dir, Options{Keep: 24 * time.Hour})
	defer s.Close()
	later := start.Add(30 * 24 * time.Hour)
	before := emptyDay(t, dir, start.Add(-24*time.Hour))
	put(t, s, start, Hold{ID: "a", Event: issueOf(start).Alert.ID})
	if gone, err := s.Prune(later); err != nil || !slices.Equal(gone, []string{before}) {
		// ten minutes after the closing at 23:59:29 are on 2 July
		t.Errorf("held by an event that closed at 23:59:29: %v deleted, %v", gone, err)
	}
	put(t, s, start, Hold{ID: "a", Released: true}, Hold{ID: "b", Event: issueOf(start + 60*sensors.Second).Alert.ID})
	emptyDay(t, dir, later.Add(-10*24*time.Hour))
	if gone, err := s.Prune(later); err != nil || len(gone) != 0 {
		t.Errorf("held by an event that is still open: %v deleted, %v", gone, err)
	}
	put(t, s, start, Hold{ID: "b", Released: true}, Hold{ID: "c", Event: "skerrymoor-none"})
	if gone, err := s.Prune(later); err == nil || len(gone) != 0 || !contains(err, "hold c", "release it") || s.Health().KeptBack != err.Error() {
		t.Errorf("held by an event that is not there: %v deleted, %v", gone, err)
	}
	put(t, s, start, Hold{ID: "c", Released: true})
	if gone, err := s.Prune(later); err != nil || len(gone) != 3 || s.Health().KeptBack != "" {
		t.Errorf("all released: %v deleted, %v", gone, err)
	}
}

// TestDoubtfulHoldsKeepEverything: as long as a hold may be unknown, nothing
// is deleted, and why is said.
func TestDoubtfulHoldsKeepEverything(t *testing.T) {
	later := start.Add(30 * 24 * time.Hour)
	for _, row := range []struct {
		name string
		harm func(t *testing.T, s *Store, dir string)
		word string // "" says that all are known
	}{
		{"none", func(*testing.T, *Store, string) {}, ""},
		{"an issue is damaged", change(3, func(v []byte) []byte { v[60] ^= 1; return v }), ""},
		{"a hold is damaged", change(9, func(v []byte) []byte { v[20] ^= 1; return v }), "record 9"},
		{"a hold that passes for something else", change(9, func(v []byte) []byte { v[1] = byte(KindTable); return v }), "record 9"},
		{"a record is missing", change(5, nil), "record 5"},
		{"a journal was set aside", func(t *testing.T, _ *Store, dir string) {
			if err := os.WriteFile(filepath.Join(dir, journalName+".damaged-20260701T000000Z"), nil, 0o600); err != nil {
				t.Fatal(err)
			}
		}, "set aside"},
	} {
		t.Run(row.name, func(t *testing.T) {
			dir := t.TempDir()
			fill(t, dir, 20)
			s := mustOpen(t, dir, Options{Keep: 24 * time.Hour})
			defer s.Close()
			free := emptyDay(t, dir, start.Add(-10*24*time.Hour))
			put(t, s, start, Hold{ID: "a", From: start, To: start + 1}, Hold{ID: "b", From: start, To: start + 1}, Note{Event: "x"})
			row.harm(t, s, dir)
			gone, err := s.Prune(later)
			if row.word == "" && (err != nil || !slices.Equal(gone, []string{free})) {
				t.Errorf("%v deleted, %v", gone, err)
			}
			if row.word != "" && (err == nil || len(gone) > 0 || !strings.Contains(err.Error(), row.word)) {
				t.Errorf("%v deleted, %v", gone, err)
			}
		})
	}
}

// change changes the stored record of a sequence, or takes it out.
func change(seq uint64, how func([]byte) []byte) func(*testing.T, *Store, string) {
	return func(t *testing.T, s *Store, _ string) {
		t.Helper()
		err := s.journal.update(func(tx *bolt.Tx) error {
			b := tx.Bucket([]byte(bucketRecords))
			v := slices.Clone(b.Get(seqKey(seq)))
			if v == nil {
				return errors.New("no such record")
			}
			if how == nil {
				return b.Delete(seqKey(seq))
			}
			return b.Put(seqKey(seq), how(v))
		})
		if err != nil {
			t.Fatal(err)
		}
	}
}
