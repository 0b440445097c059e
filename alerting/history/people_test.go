package history

import (
	"bytes"
	"compress/gzip"
	"context"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"testing"
	"time"

	"go.uber.org/goleak"

	"sockline/sensors"
)

// peopleEntries is one entry of each kind, about the event that start opened.
func peopleEntries(tb testing.TB, at sensors.Instant) (all []Entry, want []any) {
	tb.Helper()
	from, to := 2900.0, 1250.0
	event := issueOf(start).Alert.ID
	want = []any{
		Note{Event: event, Who: "i.falk", Text: "The sock \"stood\" still\nfor a while — é"},
		Acknowledgement{Occurrence: "skerrymoor-20260701T235900Z", Who: "i.falk"},
		Shelving{Occurrence: "skerrymoor-20260701T235900Z", Who: "i.falk", Reason: "mowing at mid", Until: at + 60*sensors.Second},
		Shelving{Occurrence: "skerrymoor-20260701T235900Z", Who: "", Ended: true, Why: "time"},
		PilotReport{ID: "p1", Who: "i.falk", At: at, Runway: "07", Operation: "landing", Felt: "loss", Amount: 9.25, FromM: &from, ToM: &to,
			GoAround: true, Aircraft: "a light single", Text: "sank", Event: event},
		Hold{ID: "h1", Who: "o.berg", Reason: "a go-around", From: at, To: at + 60*sensors.Second, Event: event},
		Access{Who: "o.berg", What: "log-in", From: "127.0.0.1", OK: true},
		RunwayInUse{Who: "i.falk", Runway: "07"},
		Sheet{What: "daily", Who: "i.falk", Text: "all masts move"},
	}
	for i, p := range want {
		e, err := EntryOf(at+sensors.Instant(i)*sensors.Second, p)
		if err != nil {
			tb.Fatal(err)
		}
		all = append(all, e)
	}
	return all, want
}

func payloadOf(r Record) (any, error) {
	switch r.Kind {
	case KindNote:
		return r.Note()
	case KindAcknowledge:
		return r.Acknowledgement()
	case KindShelve:
		return r.Shelving()
	case KindPilotReport:
		return r.PilotReport()
	case KindHold:
		return r.Hold()
	case KindAccess:
		return r.Access()
	case KindRunwayInUse:
		return r.RunwayInUse()
	case KindSheet:
		return r.Sheet()
	}
	return nil, fmt.Errorf("%s is no kind of people", r.Kind)
}

func TestPeopleRoundTrip(t *testing.T) {
	defer goleak.VerifyNone(t)
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{})
	entries, want := peopleEntries(t, start)
	w.Submit(batchOf(start + 2*sensors.Second)) // with an issue: a record between
	for i, e := range entries {
		seq, err := w.RecordDurably(t.Context(), e)
		if err != nil || seq != uint64(i)+2 {
			t.Fatalf("recorded as %d, %v", seq, err)
		}
	}
	mustCloseWriter(t, w)
	i := 0
	for r, err := range s.People(0, 0) {
		if err != nil {
			t.Fatal(err)
		}
		got, err := payloadOf(r)
		if err != nil || !reflect.DeepEqual(got, want[i]) || r.At != entries[i].At || r.Seq != uint64(i)+2 || !bytes.Equal(r.Payload, entries[i].Payload) {
			t.Errorf("%d: %+v, %v; want %+v", i, got, err, want[i])
		}
		i++
	}
	if i != len(want) {
		t.Errorf("%d records of %d", i, len(want))
	}
	kinds := func(seq func(func(Record, error) bool)) (out []Kind) {
		for r, err := range seq {
			if err != nil {
				t.Fatal(err)
			}
			out = append(out, r.Kind)
		}
		return out
	}
	event := issueOf(start).Alert.ID
	for _, row := range []struct {
		name string
		got  []Kind
		want []Kind
	}{
		{"a kind", kinds(s.People(0, 0, KindHold, KindNote)), []Kind{KindNote, KindHold}},
		{"a time", kinds(s.People(start+sensors.Second, start+3*sensors.Second)), []Kind{KindAcknowledge, KindShelve}},
		{"an event", kinds(s.About(event)), []Kind{KindNote, KindPilotReport, KindHold}},
		{"event and occurrence", kinds(s.About(event, "skerrymoor-20260701T235900Z")), []Kind{KindNote, KindAcknowledge, KindShelve, KindShelve, KindPilotReport, KindHold}},
		{"the beginning of a name", kinds(s.About(event[:len(event)-1])), nil},
		{"nothing", kinds(s.About("")), nil},
	} {
		if !reflect.DeepEqual(row.got, row.want) {
			t.Errorf("%s: %v, want %v", row.name, row.got, row.want)
		}
	}
	mustVerify(t, s)
}

// TestNamesStandOutsideTheChain: the chain covers commitments only, and the
// same words never give the same one twice.
func TestNamesStandOutsideTheChain(t *testing.T) {
	entries, _ := peopleEntries(t, start)
	for _, e := range entries {
		a, b := draftOf(e), draftOf(e)
		for _, word := range []string{"i.falk", "o.berg", "sank", "mowing", "127.0.0.1", "light"} {
			if bytes.Contains(a.payload, []byte(word)) {
				t.Errorf("%s: %q stands in %s", e.Kind, word, a.payload)
			}
		}
		if bytes.Equal(a.payload, b.payload) {
			t.Errorf("%s: the commitments of two drafts are the same", e.Kind)
		}
		got, err := reveal(e.Kind, a.payload, a.openings)
		if err != nil || !bytes.Equal(got, e.Payload) {
			t.Errorf("%s: revealed as %s, %v; want %s", e.Kind, got, err, e.Payload)
		}
	}
	// What is not as it should be is kept all the same.
	for _, payload := range []string{``, `null`, `[1]`, `{}`, `{"who":7,"text":null}`, `{"who":{"commitment":"00"},"text":"x"}`, `{"who":"a","who":"b"}`, `{"who":"a"} `, `{"who":"a`} {
		d := draftOf(Entry{Kind: KindNote, At: start, Payload: []byte(payload)})
		if _, err := reveal(KindNote, d.payload, d.openings); err != nil {
			t.Errorf("%s: %v", payload, err)
		}
	}
}

// TestEditsOfPeopleAreFound changes the records of people at random: each
// change of any byte is named, at its record.
func TestEditsOfPeopleAreFound(t *testing.T) {
	entries, _ := peopleEntries(t, start)
	var values [][]byte
	h := head{}
	for _, e := range entries {
		var v []byte
		v, h = h.next(draftOf(e))
		values = append(values, v)
	}
	rng := rand.New(rand.NewPCG(5, 0))
	for range 3000 {
		k := rng.IntN(len(values))
		bad := edited(rng, values[k])
		c := newChain()
		for i, v := range values {
			if i == k {
				v = bad
			}
			c.check(seqKey(uint64(i)+1), v)
		}
		if c.first != uint64(k)+1 {
			t.Fatalf("record %d edited from % x to % x: the chain names %d", k+1, values[k], bad, c.first)
		}
	}
}

// edited is b with one random edit: a bit, a byte, a byte more or less, a cut,
// or two parts exchanged.
func edited(rng *rand.Rand, b []byte) []byte {
	for {
		out, i := bytes.Clone(b), rng.IntN(len(b))
		switch rng.IntN(5) {
		case 0:
			out[i] ^= 1 << rng.IntN(8)
		case 1:
			out[i] = byte(rng.IntN(256))
		case 2:
			out = append(out[:i], append([]byte{byte(rng.IntN(256))}, out[i:]...)...)
		case 3:
			out = append(out[:i], out[min(len(out), i+1+rng.IntN(4)):]...)
		case 4:
			j := rng.IntN(len(b))
			out[i], out[j] = out[j], out[i]
		}
		if !bytes.Equal(out, b) {
			return out
		}
	}
}

func TestRecordDurablyGivesUp(t *testing.T) {
	defer goleak.VerifyNone(t)
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{})
	entries, _ := peopleEntries(t, start)
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	// Either it was quick enough, or the end of the wait is told.
	if _, err := w.RecordDurably(ctx, entries[0]); err != nil && !errors.Is(err, context.Canceled) {
		t.Error(err)
	}
	mustCloseWriter(t, w)
	if _, err := w.RecordDurably(t.Context(), entries[0]); err == nil {
		t.Error("a closed history recorded")
	}
	n := 0
	for _, err := range s.People(0, 0) {
		if err != nil {
			t.Fatal(err)
		}
		n++
	}
	if n != 1 {
		t.Errorf("%d records, want the one that waited", n)
	}
}

// gunzip writes the content of a fixture.
func gunzip(tb testing.TB, from, to string) {
	tb.Helper()
	f, err := os.Open(from)
	if err != nil {
		tb.Fatal(err)
	}
	defer f.Close()
	z, err := gzip.NewReader(f)
	if err != nil {
		tb.Fatal(err)
	}
	b, err := io.ReadAll(z)
	if err != nil {
		tb.Fatal(err)
	}
	if err := os.WriteFile(to, b, 0o600); err != nil {
		tb.Fatal(err)
	}
}

// TestJournalOfVersion1 opens a history that the first version wrote: it is
// read as it is, and goes on in the same chain once there is a writer.
func TestJournalOfVersion1(t *testing.T) {
	dir := t.TempDir()
	gunzip(t, "testdata/journal-1.db.gz", filepath.Join(dir, journalName))
	gunzip(t, "testdata/readings-1-2026-07-01.db.gz", filepath.Join(dir, "readings-2026-07-01.db"))
	ro, err := ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	if r := mustVerify(t, ro); r.Records != 21 || r.Steps != 60 {
		t.Errorf("report %+v", r)
	}
	for r, err := range ro.People(0, 0) {
		t.Errorf("%+v %v", r, err)
	}
	before := mustContent(t, ro)
	if err := ro.Close(); err != nil {
		t.Fatal(err)
	}
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{})
	entries, _ := peopleEntries(t, start)
	ctx, cancel := context.WithTimeout(t.Context(), 20*time.Second)
	defer cancel()
	if seq, err := w.RecordDurably(ctx, entries[0]); err != nil || seq != 22 {
		t.Fatalf("recorded as %d, %v", seq, err)
	}
	mustCloseWriter(t, w)
	if r := mustVerify(t, s); r.Records != 22 {
		t.Errorf("report %+v", r)
	}
	after := mustContent(t, s)
	after.Seqs = after.Seqs[:21]
	if !sameContent(before, after) {
		t.Error("what the first version wrote has changed")
	}
	if h := s.Health(); len(h.Damage) > 0 {
		t.Errorf("damage %v", h.Damage)
	}
}
