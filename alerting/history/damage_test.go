package history

import (
	"errors"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/rs/zerolog"
	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// TestChainFindsEveryByte flips each byte of some records and looks where the
// chain says that it breaks.
func TestChainFindsEveryByte(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 20)
	db, err := bolt.Open(filepath.Join(dir, journalName), 0o600, &bolt.Options{NoSync: true})
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	f := &file{path: db.Path(), db: db}
	put := func(seq uint64, v []byte) {
		t.Helper()
		err := db.Update(func(tx *bolt.Tx) error { return tx.Bucket([]byte(bucketRecords)).Put(seqKey(seq), v) })
		if err != nil {
			t.Fatal(err)
		}
	}
	check := func() *chain {
		t.Helper()
		c, err := walkChain(f)
		if err != nil {
			t.Fatal(err)
		}
		return c
	}
	if c := check(); c.first != 0 || c.head.seq != 7 {
		t.Fatalf("before any change: first broken %d of %d", c.first, c.head.seq)
	}
	rng := rand.New(rand.NewPCG(17, 0))
	for _, seq := range []uint64{1, 3, 7} { // the first, one between, the last
		var value []byte
		err := db.View(func(tx *bolt.Tx) error {
			value = append([]byte(nil), tx.Bucket([]byte(bucketRecords)).Get(seqKey(seq))...)
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
		for i := range value {
			bad := append([]byte(nil), value...)
			bad[i] ^= byte(1 + rng.IntN(255))
			put(seq, bad)
			if c := check(); c.first != seq {
				t.Fatalf("byte %d of record %d changed: the chain names %d", i, seq, c.first)
			}
		}
		put(seq, value)
	}
	// A record taken out, and two exchanged.
	err = db.Update(func(tx *bolt.Tx) error { return tx.Bucket([]byte(bucketRecords)).Delete(seqKey(4)) })
	if err != nil {
		t.Fatal(err)
	}
	if c := check(); c.first != 4 {
		t.Errorf("record 4 taken out: the chain names %d", c.first)
	}
}

// TestBrokenChainGoesOn: one record that is not as it was written is named,
// and costs no other.
func TestBrokenChainGoesOn(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 20)
	s := mustOpen(t, dir, Options{})
	err := s.journal.update(func(tx *bolt.Tx) error {
		b := tx.Bucket([]byte(bucketRecords))
		v := append([]byte(nil), b.Get(seqKey(3))...)
		v[40] ^= 1
		return b.Put(seqKey(3), v)
	})
	if err = errors.Join(err, s.Close()); err != nil {
		t.Fatal(err)
	}
	s = mustOpen(t, dir, Options{})
	defer s.Close()
	if d := s.Health().Damage; len(d) != 2 || !strings.Contains(d[0], "record 3") || !strings.Contains(d[1], "rebuilt") {
		t.Errorf("damage %q", d)
	}
	w := mustWriter(t, s, WriterOptions{})
	w.Submit(batchOf(start + 20*sensors.Second))
	mustCloseWriter(t, w)
	r, err := s.Verify()
	if err != nil || r.First != 3 || r.Broken != 1 || !r.Index || r.Records != 10 { // 7, two notes of damage, one issue
		t.Errorf("report %+v, %v", r, err)
	}
	if e, err := s.Event(issueOf(start).Alert.ID); err != nil || e.Issues != 6 { // 7 issues but the broken one
		t.Errorf("event %s with %d issues, %v", e.ID, e.Issues, err)
	}
}

// copyDir copies the plain files of a directory.
func copyDir(tb testing.TB, from, to string) {
	tb.Helper()
	entries, err := os.ReadDir(from)
	if err != nil {
		tb.Fatal(err)
	}
	if err := os.RemoveAll(to); err != nil {
		tb.Fatal(err)
	}
	if err := os.MkdirAll(to, 0o700); err != nil {
		tb.Fatal(err)
	}
	for _, e := range entries {
		b, err := os.ReadFile(filepath.Join(from, e.Name()))
		if err == nil {
			err = os.WriteFile(filepath.Join(to, e.Name()), b, 0o600)
		}
		if err != nil {
			tb.Fatal(err)
		}
	}
}

// usedBytes is how much of a database file its newest head calls in use.
func usedBytes(tb testing.TB, path string) int64 {
	tb.Helper()
	f, err := os.Open(path)
	if err != nil {
		tb.Fatal(err)
	}
	defer f.Close()
	in := &inspector{f: f}
	if _, err := in.readMeta(); err != nil {
		tb.Fatal(err)
	}
	return int64(in.meta.pages) * pageSize
}

// opensOrSays opens a damaged copy. It must open; what it then gives must be
// what was written, or it must say that something is damaged; and it must
// record on.
func opensOrSays(t *testing.T, dir, what string, want content, write bool) (said bool) {
	t.Helper()
	s, err := Open(dir, Options{Log: zerolog.Nop()})
	if err != nil {
		t.Fatalf("%s: %v", what, err)
	}
	defer s.Close()
	got, readErr := contentOf(s)
	report, err := s.Verify()
	said = readErr != nil || err != nil || !report.OK() || len(s.Health().Damage) > 0
	if !said && !sameContent(got, want) {
		t.Fatalf("%s: other content and not a word", what)
	}
	if write {
		var out tally
		w := mustWriter(t, s, WriterOptions{Release: out.take})
		step := start + 40*sensors.Second
		w.Submit(Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, 1), Issues: []Issue{issueOf(step)}})
		eventually(t, what+": a release", func() bool { r, u := out.counts(); return r+u == 1 })
		mustCloseWriter(t, w)
		if last, ok, err := s.LastStep(); last != step || !ok || err != nil {
			t.Fatalf("%s: last step %s, %v, after writing", what, last, err)
		}
	}
	return said
}

func TestFlippedBits(t *testing.T) {
	flips := 200
	if os.Getenv("SOCKLINE_LONG") != "" {
		flips = 4000
	}
	const seed = 23
	rng := rand.New(rand.NewPCG(seed, 0))
	dir, work := t.TempDir(), filepath.Join(t.TempDir(), "w")
	fill(t, dir, 30)
	s := mustOpen(t, dir, Options{})
	want := mustContent(t, s)
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	said := 0
	for i := range flips {
		copyDir(t, dir, work)
		name := []string{journalName, dayName(dayOf(start))}[i%2]
		path := filepath.Join(work, name)
		at, bit := rng.Int64N(usedBytes(t, path)), rng.IntN(8)
		flipBit(t, path, at, bit)
		what := name + ": bit " + strconv.Itoa(bit) + " of byte " + strconv.FormatInt(at, 10)
		if opensOrSays(t, work, what, want, i%10 == 0) {
			said++
		}
	}
	if said < flips/10 {
		t.Errorf("only %d of %d flips were noticed: the test hits nothing", said, flips)
	}
	t.Logf("%d flips, %d named, the others harmless", flips, said)
}

func flipBit(t *testing.T, path string, at int64, bit int) {
	t.Helper()
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	b := make([]byte, 1)
	if _, err := f.ReadAt(b, at); err != nil {
		t.Fatal(err)
	}
	b[0] ^= 1 << bit
	if _, err := f.WriteAt(b, at); err != nil {
		t.Fatal(err)
	}
}

func TestCutShort(t *testing.T) {
	dir, work := t.TempDir(), filepath.Join(t.TempDir(), "w")
	fill(t, dir, 30)
	s := mustOpen(t, dir, Options{})
	want := mustContent(t, s)
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{journalName, dayName(dayOf(start))} {
		used := usedBytes(t, filepath.Join(dir, name))
		for size := int64(0); size <= used; size += pageSize {
			copyDir(t, dir, work)
			if err := os.Truncate(filepath.Join(work, name), size); err != nil {
				t.Fatal(err)
			}
			what := name + " cut to " + strconv.FormatInt(size, 10)
			said := opensOrSays(t, work, what, want, true)
			if size < used && !said {
				t.Errorf("%s bytes of %d: not a word", what, used)
			}
			aside, err := filepath.Glob(filepath.Join(work, name+".damaged-*"))
			if err != nil || size < used && len(aside) != 1 {
				t.Errorf("%s: set aside as %v, %v", what, aside, err)
			}
		}
	}
}

func TestDamageIsJournalledAndReported(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 30)
	if err := os.Truncate(filepath.Join(dir, journalName), 0); err != nil {
		t.Fatal(err)
	}
	ro, err := ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := ro.Events(Filter{}); err == nil || !isDamage(err) {
		t.Errorf("reading only: %v", err)
	}
	if _, err := os.Stat(filepath.Join(dir, journalName)); err != nil {
		t.Errorf("a reader moved the file: %v", err)
	}
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	if d := s.Health().Damage; len(d) != 1 || !strings.Contains(d[0], "set aside as journal.db.damaged-") {
		t.Errorf("damage %q", d)
	}
	w := mustWriter(t, s, WriterOptions{})
	w.Submit(batchOf(start + 32*sensors.Second))
	mustCloseWriter(t, w)
	c := mustContent(t, s)
	if len(c.Seqs) != 2 || c.Seqs[0].Kind != KindDamage || !strings.Contains(string(c.Seqs[0].Payload), "set aside") || len(c.Steps) != 31 {
		t.Errorf("%d steps, journal %+v", len(c.Steps), c.Seqs)
	}
	mustVerify(t, s)
}

func TestMissingJournalIsNoticed(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 3)
	if err := os.Remove(filepath.Join(dir, journalName)); err != nil {
		t.Fatal(err)
	}
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	if d := s.Health().Damage; len(d) != 1 || !strings.Contains(d[0], "was missing") {
		t.Errorf("damage %q", d)
	}
}

func TestNewerFormatIsRefused(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 3)
	s := mustOpen(t, dir, Options{})
	err := s.journal.update(func(tx *bolt.Tx) error {
		key := []byte("format")
		return tx.Bucket([]byte(bucketAbout)).Put(key, seal(key, []byte("sockline journal 9")))
	})
	if err = errors.Join(err, s.Close()); err != nil {
		t.Fatal(err)
	}
	if _, err := Open(dir, Options{}); err == nil || isDamage(err) || !strings.Contains(err.Error(), `"sockline journal 9"`) {
		t.Errorf("a journal of a later version: %v", err)
	}
}

func TestLeftoversAreRemoved(t *testing.T) {
	dir := t.TempDir()
	left := filepath.Join(dir, "readings-2026-07-01.db.123.new")
	if err := os.WriteFile(left, []byte("half"), 0o600); err != nil {
		t.Fatal(err)
	}
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	entries, err := os.ReadDir(dir)
	if err != nil || len(entries) != 1 || entries[0].Name() != journalName {
		t.Errorf("left in the directory: %v, %v", entries, err)
	}
}
