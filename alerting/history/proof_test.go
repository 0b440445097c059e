package history

import (
	"errors"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

const day = 86400 * sensors.Second

// days writes a note at each of some moments; it returns where the chain
// stood after each.
func days(tb testing.TB, dir string, at ...sensors.Instant) (s *Store, after []Digest) {
	tb.Helper()
	s = mustOpen(tb, dir, Options{})
	w := mustWriter(tb, s, WriterOptions{})
	for _, t := range at {
		e, err := EntryOf(t, Note{Event: "e", Who: "Io", Text: "n"})
		if err != nil {
			tb.Fatal(err)
		}
		if _, err := w.RecordDurably(tb.Context(), e); err != nil {
			tb.Fatal(err)
		}
		after = append(after, s.head.hash)
	}
	mustCloseWriter(tb, w)
	return s, after
}

// TestDayHeads: a day ends with the first record of a later one, whatever the
// times in between; the newest end is in Health, and after a restart, too.
func TestDayHeads(t *testing.T) {
	dir := t.TempDir()
	s, after := days(t, dir, start, start+30*sensors.Second, start+day, start+10, start+day+5, start+4*day)
	want := []Head{{"2026-07-01", 2, after[1]}, {"2026-07-02", 5, after[4]}}
	if r := mustVerify(t, s); !reflect.DeepEqual(r.Heads, want) {
		t.Errorf("heads %+v, want %+v", r.Heads, want)
	}
	if h := s.Health().DayHead; h != want[1] {
		t.Errorf("health has %+v", h)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	again, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer again.Close()
	if h := again.Health().DayHead; h != want[1] {
		t.Errorf("after a restart health has %+v", h)
	}
	for _, row := range []struct {
		known Head
		want  string
	}{
		{want[0], ""}, {want[1], ""}, {Head{Seq: 6, Hash: after[5]}, ""},
		{Head{Seq: 7, Hash: after[5]}, "the last ones were cut off"},
		{Head{Seq: 5, Hash: after[3]}, "written anew"},
	} {
		r, err := again.VerifyAgainst(row.known)
		if err != nil || (row.want == "") != r.OK() || !strings.Contains(strings.Join(r.Faults, "\n"), row.want) {
			t.Errorf("%+v: %v, %v", row.known, r.Faults, err)
		}
	}
}

// TestExcerpt takes stretches out of a chain and follows them.
func TestExcerpt(t *testing.T) {
	s, after := days(t, t.TempDir(), start, start+30*sensors.Second, start+day, start+day+5, start+4*day, start+4*day+1)
	defer s.Close()
	for _, row := range []struct {
		from, through uint64
		links         int
		heads         int
	}{
		{1, 1, 3, 1}, {2, 2, 2, 1}, {1, 3, 5, 2}, {3, 4, 3, 1}, {5, 5, 2, 0}, {6, 6, 1, 0},
	} {
		var links []Link
		x, err := s.Excerpt(row.from, row.through, func(r Record) error {
			links = append(links, r.Link(r.Seq == row.through))
			return nil
		})
		if err != nil || len(links) != row.links || x.Links != row.links || len(x.Heads) != row.heads {
			t.Errorf("%d to %d: %d links, %+v, %v", row.from, row.through, len(links), x, err)
			continue
		}
		before := x.Before
		for _, l := range links {
			if err := l.Check(before); err != nil {
				t.Error(err)
			}
			before = l.Hash
		}
		if before != after[links[len(links)-1].Seq-1] || x.End.Hash != before {
			t.Errorf("%d to %d: ends with %s", row.from, row.through, before)
		}
	}
	if _, err := s.Excerpt(1, 7, func(Record) error { return nil }); err == nil || !strings.Contains(err.Error(), "ends with record 6") {
		t.Errorf("past the end: %v", err)
	}
	if _, err := s.Excerpt(8, 9, func(Record) error { return nil }); err == nil {
		t.Error("from past the end")
	}
}

// TestEveryEditIsNamed changes stored values at random, those of the journal
// and those of the readings: each change is in the report, and nothing else
// than what was changed is lost.
func TestEveryEditIsNamed(t *testing.T) {
	n := 100
	if os.Getenv("SOCKLINE_LONG") != "" {
		n = 10000
	}
	dir := t.TempDir()
	fill(t, dir, 90)
	s, _ := days(t, dir, start, start+day)
	before := mustContent(t, s)
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(46, 1))
	for i := range n {
		name, bucket := journalName, bucketRecords
		if i%4 == 3 {
			name, bucket = "readings-2026-07-01.db", bucketBlocks
		}
		key, old := changeOne(t, rng, filepath.Join(dir, name), bucket)
		ro, err := ReadOnly(dir)
		if err != nil {
			t.Fatal(err)
		}
		r, err := ro.Verify()
		if err != nil || r.OK() || len(r.Faults) == 0 {
			t.Fatalf("edit %d of %s is not found: %+v, %v", i, name, r, err)
		}
		if bucket == bucketRecords {
			lost := len(before.Seqs)
			err := ro.Journal(1, func(Record) error { lost--; return nil })
			if lost > 1 || lost == 1 && err == nil {
				t.Fatalf("edit %d costs %d records, %v", i, lost, err)
			}
			if r.Broken > 2 || r.First == 0 { // its own stored hash is that of the next one's chain
				t.Fatalf("edit %d breaks %d records: %v", i, r.Broken, r.Faults)
			}
		} else {
			lost := len(before.Steps)
			err := ro.Readings(0, 1<<50, func(Step) error { lost--; return nil })
			if lost > 60 || err == nil { // the minute before midnight is one window
				t.Fatalf("edit %d costs %d steps, %v", i, lost, err)
			}
		}
		if err := ro.Close(); err != nil {
			t.Fatal(err)
		}
		putOne(t, filepath.Join(dir, name), bucket, key, old)
	}
	ro, err := ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer ro.Close()
	if !sameContent(before, mustContent(t, ro)) {
		t.Error("something was lost for good")
	}
}

// changeOne edits one value of a bucket at random.
func changeOne(tb testing.TB, rng *rand.Rand, path, bucket string) (key, old []byte) {
	tb.Helper()
	err := edit(path, func(tx *bolt.Tx) error {
		b := tx.Bucket([]byte(bucket))
		var keys [][]byte
		err := b.ForEach(func(k, _ []byte) error { keys = append(keys, append([]byte(nil), k...)); return nil })
		if err != nil || len(keys) == 0 {
			return errors.Join(err, errors.New("nothing to change"))
		}
		key = keys[rng.IntN(len(keys))]
		old = append([]byte(nil), b.Get(key)...)
		return b.Put(key, edited(rng, old))
	})
	if err != nil {
		tb.Fatal(err)
	}
	return key, old
}

func putOne(tb testing.TB, path, bucket string, key, value []byte) {
	tb.Helper()
	if err := edit(path, func(tx *bolt.Tx) error { return tx.Bucket([]byte(bucket)).Put(key, value) }); err != nil {
		tb.Fatal(err)
	}
}

func edit(path string, fn func(*bolt.Tx) error) error {
	db, err := bolt.Open(path, 0o600, &bolt.Options{NoSync: true})
	if err != nil {
		return err
	}
	return errors.Join(db.Update(fn), db.Close())
}
