package history

import (
	"bytes"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"sockline/sensors"
)

// longJournal writes records of very different lengths, from a few bytes to
// several pages, in many commits, and returns the file and what it holds.
func longJournal(tb testing.TB, dir string) (file []byte, records []Record) {
	tb.Helper()
	s := mustOpen(tb, dir, Options{})
	w := mustWriter(tb, s, WriterOptions{})
	rng := rand.New(rand.NewPCG(6, 6))
	for i := range 240 {
		e := Entry{Kind: KindConfiguration, At: start + sensors.Instant(i)*sensors.Second, Payload: bytes.Repeat([]byte{'a' + byte(i%26)}, rng.IntN(900))}
		switch i % 40 {
		case 7:
			e.Payload = bytes.Repeat([]byte("long "), 4000)
		case 11:
			e, _ = EntryOf(e.At, Note{Event: "e", Who: "Io", Text: strings.Repeat("n", i)})
		}
		if i%12 == 0 {
			if _, err := w.RecordDurably(tb.Context(), e); err != nil {
				tb.Fatal(err)
			}
			continue
		}
		w.Record(e)
	}
	mustCloseWriter(tb, w)
	records = mustContent(tb, s).Seqs
	if err := s.Close(); err != nil {
		tb.Fatal(err)
	}
	file, err := os.ReadFile(filepath.Join(dir, journalName))
	if err != nil {
		tb.Fatal(err)
	}
	return file, records
}

// TestSalvage damages the structure of journals at random, so that they cannot
// be opened: every record of which a copy lies on pages that were not touched
// is in the new journal as it was, and nothing is in it that was not written.
func TestSalvage(t *testing.T) {
	rounds := 30
	if os.Getenv("SOCKLINE_LONG") != "" {
		rounds = 1000
	}
	file, records := longJournal(t, t.TempDir())
	rng := rand.New(rand.NewPCG(60, 1))
	aside := 0
	for round := range rounds {
		bad, touched := wounded(rng, file)
		dir := t.TempDir()
		if err := os.WriteFile(filepath.Join(dir, journalName), bad, 0o600); err != nil {
			t.Fatal(err)
		}
		s, err := Open(dir, Options{})
		if err != nil {
			t.Fatalf("round %d: %v", round, err)
		}
		damage := strings.Join(s.Health().Damage, "\n")
		if !strings.Contains(damage, "is set aside as") {
			if err := s.Close(); err != nil {
				t.Fatal(err)
			}
			continue // it opened in spite of it: other tests look at that
		}
		aside++
		report, err := s.Verify()
		if err != nil {
			t.Fatal(err)
		}
		got := map[uint64]Record{}
		_ = s.Journal(1, func(r Record) error { got[r.Seq] = r; return nil })
		for seq, r := range got {
			if slices.Contains(report.Named, seq) {
				continue
			}
			if seq > uint64(len(records)) || !bytes.Equal(r.Payload, records[seq-1].Payload) || r.Hash != records[seq-1].Hash {
				t.Fatalf("round %d: record %d was never written like that", round, seq)
			}
		}
		for i, r := range records {
			if _, there := got[r.Seq]; !there && whole(file, r, touched) && provable(file, records, i, touched) {
				t.Fatalf("round %d: record %d is lost although its pages were not touched (%v)\n%s", round, r.Seq, touched, damage)
			}
		}
		if len(got) > 0 && !strings.Contains(damage, "intact records of journal.db.damaged-") {
			t.Fatalf("round %d: %d records taken over and not told: %s", round, len(got), damage)
		}
		goesOn(t, s, got)
	}
	if aside < rounds/3 {
		t.Errorf("only %d of %d journals were damaged so that they were set aside", aside, rounds)
	}
}

// wounded is a copy of the file with a few pages damaged, in one of several
// ways, and which.
func wounded(rng *rand.Rand, file []byte) (bad []byte, touched []int) {
	bad = bytes.Clone(file)
	pages := len(file) / pageSize
	for range 1 + rng.IntN(3) {
		id := rng.IntN(pages)
		if rng.IntN(3) == 0 {
			id = rng.IntN(2) // a head
		}
		page := bad[id*pageSize : (id+1)*pageSize]
		switch rng.IntN(4) {
		case 0:
			clear(page)
		case 1:
			for i := range page {
				page[i] = byte(rng.IntN(256))
			}
		case 2: // in the header of the page
			page[rng.IntN(pageHeader)] ^= 1 << rng.IntN(8)
		case 3:
			page[pageHeader+rng.IntN(200)] ^= 1 << rng.IntN(8)
		}
		touched = append(touched, id)
	}
	return bad, touched
}

// whole reports whether a copy of the record lies on pages that were not
// touched: found by its bytes, not by the structure of the file.
func whole(file []byte, r Record, touched []int) bool {
	value := slices.Concat(seqKey(r.Seq), r.header(), appendString(nil, r.chained), r.openings, r.Hash[:])
	for at := 0; ; {
		i := bytes.Index(file[at:], value)
		if i < 0 {
			return false
		}
		from := (at + i) / pageSize
		to := (at + i + len(value) - 1) / pageSize
		// A long record begins on a page of its own with its entry; others
		// share a page, which runs on when the last of them is long.
		for first := from; first >= max(from-8, 0); first-- {
			if !slices.ContainsFunc(touched, func(id int) bool { return id >= first && id <= to }) && startsRun(file, first, to) {
				return true
			}
		}
		at += i + 1
	}
}

// startsRun reports whether the page first, with what follows it, reaches to.
func startsRun(file []byte, first, to int) bool {
	b := file[first*pageSize:]
	return b[8] == pageLeaf && b[0] == byte(first) && first+int(b[12]) >= to
}

// provable reports whether the record before or after is there, too: a record
// between two that are lost may be anything.
func provable(file []byte, records []Record, i int, touched []int) bool {
	return i == 0 || whole(file, records[i-1], touched) || i+1 < len(records) && whole(file, records[i+1], touched)
}

// goesOn writes to what was salvaged and looks that only the loss is named.
func goesOn(t *testing.T, s *Store, got map[uint64]Record) {
	t.Helper()
	w := mustWriter(t, s, WriterOptions{})
	if _, err := w.RecordDurably(t.Context(), Entry{Kind: KindStart, At: start}); err != nil {
		t.Fatal(err)
	}
	mustCloseWriter(t, w)
	r, err := s.Verify()
	if err != nil || len(r.SetAside) != 1 || !r.Index {
		t.Fatalf("%+v, %v", r, err)
	}
	last := uint64(0)
	for seq := range got {
		last = max(last, seq)
	}
	if missing := last - uint64(len(got)); r.Broken < missing || r.Broken > 2*missing {
		t.Fatalf("%d records are missing, %d are named", missing, r.Broken)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

// TestSalvageAfterAKill: when the start that set the journal aside was cut
// off, the next one takes the records over.
func TestSalvageAfterAKill(t *testing.T) {
	dir := t.TempDir()
	_, records := longJournal(t, dir)
	old := filepath.Join(dir, journalName)
	if err := os.Rename(old, old+".damaged-20260701T000000Z"); err != nil {
		t.Fatal(err)
	}
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	if r := mustVerify(t, s); r.Records != uint64(len(records)) {
		t.Errorf("%d records of %d", r.Records, len(records))
	}
}

// TestVerifyADamagedJournal: what cannot be opened is named, the readings are
// still there, and nothing is changed by looking.
func TestVerifyADamagedJournal(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 30)
	path := filepath.Join(dir, journalName)
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	clear(b[:2*pageSize])
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	ro, err := ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer ro.Close()
	r, err := ro.Verify()
	if err != nil || r.OK() || r.Steps != 30 || !strings.Contains(strings.Join(r.Faults, "\n"), "both heads are damaged") {
		t.Errorf("%+v, %v", r, err)
	}
	if _, err := ro.Events(Filter{}); err == nil {
		t.Error("events without a journal")
	}
	if entries, _ := os.ReadDir(dir); len(entries) != 2 {
		t.Errorf("%v", entries)
	}
}
