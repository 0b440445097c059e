package history

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// tenfold is a timer ten times as fast, for rounds of failure and recovery.
func tenfold(d time.Duration) <-chan time.Time { return time.After(d / 10) }

// patient is a timer for a machine that others load, too: alerts wait for the
// disk as long as the test does, all else goes fast.
func patient(d time.Duration) <-chan time.Time {
	if d == ReleaseWait {
		return nil
	}
	return time.After(d / 100)
}

// tally counts what was released.
type tally struct {
	mu                   sync.Mutex
	recorded, unrecorded []sensors.Instant
}

func (c *tally) take(r Released) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if r.Recorded {
		c.recorded = append(c.recorded, r.Step)
	} else {
		c.unrecorded = append(c.unrecorded, r.Step)
	}
}

func (c *tally) counts() (recorded, unrecorded int) {
	c.mu.Lock()
	defer c.mu.Unlock()
	return len(c.recorded), len(c.unrecorded)
}

// journalled is how often the issue of each step is in the journal.
func journalled(t *testing.T, s *Store) map[sensors.Instant]int {
	t.Helper()
	n := map[sensors.Instant]int{}
	err := s.Journal(0, func(r Record) error {
		if r.Kind == KindIssue {
			n[r.At]++
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return n
}

func TestDiskFull(t *testing.T) {
	dir := tmpfs(t)
	s := mustOpen(t, dir, Options{})
	var out tally
	w := mustWriter(t, s, WriterOptions{Release: out.take, After: tenfold})
	step, issues := start, 0
	submit := func() {
		step += sensors.Second
		w.Submit(Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, len(stationIDs)), Issues: []Issue{issueOf(step)}})
		issues++
	}
	ballast := filepath.Join(dir, "ballast")
	rounds := 5
	if os.Getenv("SOCKLINE_LONG") != "" {
		rounds = 10
	}
	for round := range rounds {
		fillDisk(t, ballast)
		eventually(t, "a degraded history on a full disk", func() bool { submit(); return s.Health().Degraded })
		for range 20 {
			submit()
		}
		eventually(t, "every alert released on a full disk", func() bool { r, u := out.counts(); return r+u == issues })
		h := s.Health()
		if !h.Degraded || !strings.Contains(h.Reason, "free space") || !errorNames(h.Reason, dir) {
			t.Fatalf("round %d: health on a full disk: %+v", round, h)
		}
		if err := os.Remove(ballast); err != nil {
			t.Fatal(err)
		}
		eventually(t, "recovery without a restart", func() bool { return !s.Health().Degraded })
		recorded, _ := out.counts()
		eventually(t, "an alert recorded after recovery", func() bool { submit(); r, _ := out.counts(); return r > recorded })
	}
	mustCloseWriter(t, w)
	h := s.Health()
	recorded, unrecorded := out.counts()
	if unrecorded < rounds || recorded < rounds || h.Failed < uint64(rounds) || h.Unrecorded != uint64(unrecorded) {
		t.Errorf("%d recorded, %d unrecorded in %d rounds: %+v", recorded, unrecorded, rounds, h)
	}
	// What waited in memory is on disk, each once, released recorded or not.
	in := journalled(t, s)
	steps := map[sensors.Instant]bool{}
	for _, st := range mustContent(t, s).Steps {
		steps[st.At] = true
	}
	for at := start + sensors.Second; at <= step; at += sensors.Second {
		if in[at] != 1 || !steps[at] {
			t.Errorf("step %s: %d issues in the journal, readings there: %v", at, in[at], steps[at])
		}
	}
	if r := mustVerify(t, s); len(h.Damage) > 0 || r.Records != uint64(issues) {
		t.Errorf("damage %v, report %+v", h.Damage, r)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	// A start on a full disk: what is there is read, and alerts go out.
	fillDisk(t, ballast)
	s = mustOpen(t, dir, Options{})
	defer s.Close()
	if open, err := s.OpenAlerts(step); err != nil || len(open) > 1 {
		t.Errorf("open alerts after a start on a full disk: %v, %v", open, err)
	}
	w = mustWriter(t, s, WriterOptions{Release: out.take, After: tenfold})
	for !s.Health().Degraded {
		submit()
		eventually(t, "an alert released after a start on a full disk", func() bool { r, u := out.counts(); return r+u == issues })
	}
	if err := os.Remove(ballast); err != nil {
		t.Fatal(err)
	}
	mustCloseWriter(t, w)
	t.Logf("%d rounds: %d recorded, %d unrecorded, %d failed commits", rounds, recorded, unrecorded, h.Failed)
}

func errorNames(reason, dir string) bool { return strings.Contains(reason, dir) }

// fillDisk writes until no page is left.
func fillDisk(t *testing.T, path string) {
	t.Helper()
	f, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	page := make([]byte, pageSize)
	for {
		if _, err := f.Write(page); errors.Is(err, syscall.ENOSPC) {
			return
		} else if err != nil {
			t.Fatal(err)
		}
	}
}

// TestStall holds the journal as a hanging disk would.
func TestStall(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	var out tally
	w := mustWriter(t, s, WriterOptions{Release: out.take})
	submit := func(n int) {
		step := start + sensors.Instant(n)*sensors.Second
		w.Submit(Batch{Step: step, Stations: stationIDs, Issues: []Issue{issueOf(step)}})
	}
	submit(0)
	eventually(t, "the first release", func() bool { r, _ := out.counts(); return r == 1 })
	hang, err := s.journal.db.Begin(true)
	if err != nil {
		t.Fatal(err)
	}
	submit(1)
	submit(2)
	eventually(t, "release without the disk", func() bool { _, u := out.counts(); return u == 2 })
	if h := s.Health(); !h.Degraded || h.Reason == "" || h.Unrecorded != 2 {
		t.Errorf("health during the stall: %+v", h)
	}
	if err := hang.Rollback(); err != nil {
		t.Fatal(err)
	}
	eventually(t, "recovery", func() bool { return !s.Health().Degraded })
	submit(3)
	mustCloseWriter(t, w)
	r, u := out.counts()
	if r != 2 || u != 2 {
		t.Errorf("%d recorded, %d not: an issue was released twice or never", r, u)
	}
	if in := journalled(t, s); len(in) != 4 {
		t.Errorf("journal has the issues %v, want all four", in)
	}
	mustVerify(t, s)
}

// TestCloseGivesUp ends a writer whose disk does not come back.
func TestCloseGivesUp(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	var out tally
	w := mustWriter(t, s, WriterOptions{Release: out.take, After: tenfold})
	hang, err := s.journal.db.Begin(true)
	if err != nil {
		t.Fatal(err)
	}
	w.Submit(Batch{Step: start, Issues: []Issue{issueOf(start)}})
	ctx, cancel := context.WithTimeout(context.Background(), 50*time.Millisecond)
	defer cancel()
	if err := w.Close(ctx); err == nil || !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("closing before the disk: %v", err)
	}
	if r, u := out.counts(); r != 0 || u != 1 {
		t.Errorf("%d recorded, %d not", r, u)
	}
	if err := hang.Rollback(); err != nil {
		t.Fatal(err)
	}
	<-w.done
}

// TestLiveFailure swaps the descriptor under an open file for one that cannot
// be written to, as a disk that went read-only.
func TestLiveFailure(t *testing.T) {
	for _, which := range []string{"journal", "readings"} {
		t.Run(which, func(t *testing.T) {
			s := mustOpen(t, t.TempDir(), Options{})
			defer s.Close()
			var out tally
			w := mustWriter(t, s, WriterOptions{Release: out.take, After: tenfold})
			const n = 12
			for i := range n {
				step := start + sensors.Instant(i)*sensors.Second
				if i == 4 || i == 8 {
					eventually(t, "a quiet writer", func() bool { r, u := out.counts(); return r+u == i && !s.Health().Degraded })
					name := journalName
					if which == "readings" {
						name = dayName(dayOf(step))
					}
					breakDescriptor(t, filepath.Join(s.dir, name))
				}
				w.Submit(Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, 2), Issues: []Issue{issueOf(step)}})
			}
			mustCloseWriter(t, w)
			h := s.Health()
			if h.Failed < 2 || len(h.Damage) > 0 {
				t.Errorf("health %+v", h)
			}
			in := journalled(t, s)
			for i := range n {
				if step := start + sensors.Instant(i)*sensors.Second; in[step] != 1 {
					t.Errorf("the issue of step %s is there %d times", step, in[step])
				}
			}
			if r := mustVerify(t, s); r.Steps != n {
				t.Errorf("report %+v", r)
			}
		})
	}
}

// breakDescriptor finds the one descriptor that is open on path and puts a
// read-only one in its place.
func breakDescriptor(t *testing.T, path string) {
	t.Helper()
	entries, err := os.ReadDir("/proc/self/fd")
	if err != nil {
		t.Skipf("no list of open files here: %v", err)
	}
	broken, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer broken.Close()
	for _, e := range entries {
		var fd int
		if _, err := fmt.Sscan(e.Name(), &fd); err != nil || fd == int(broken.Fd()) {
			continue
		}
		if target, err := os.Readlink("/proc/self/fd/" + e.Name()); err == nil && target == path {
			if err := duplicate(broken, fd); err != nil {
				t.Fatal(err)
			}
			return
		}
	}
	t.Fatalf("%s is not open", path)
}

// TestOverflow fills the queue while the disk hangs: readings give way, the
// gap is named, issues and entries stay.
func TestOverflow(t *testing.T) {
	var q queue
	body := make([]byte, maxWaitingBytes/100)
	issue := draft{kind: KindIssue}
	var lost Gap
	for i := range 150 {
		it := &item{step: start + sensors.Instant(i)*sensors.Second, hasStep: true, body: body, readings: 3}
		if i%10 == 0 {
			it.drafts = []draft{issue, {kind: KindConfiguration}}
		}
		lost.merge(q.push(it))
	}
	if lost.Steps != 50 || lost.Readings != 150 || lost.Records != 0 || lost.From != start || lost.To != start+49*sensors.Second || q.gap != lost {
		t.Errorf("lost %+v, noted %+v", lost, q.gap)
	}
	if q.bytes > maxWaitingBytes || q.issues != 15 || q.records != 30 || len(q.items) != 105 {
		t.Errorf("%d bytes, %d issues, %d records, %d items", q.bytes, q.issues, q.records, len(q.items))
	}
	items := q.pop(1000)
	if len(items) != 106 || items[0].drafts[0].kind != KindGap || !strings.Contains(string(items[0].drafts[0].payload), `"steps":50,`) {
		t.Errorf("%d items, the first %+v", len(items), items[0])
	}
	if q.bytes != 0 || q.issues != 0 || q.records != 0 || len(q.items) != 0 || q.gap != (Gap{}) {
		t.Errorf("an emptied queue holds %+v", q)
	}

	lost = Gap{}
	for i := range maxWaitingIssues + 7 {
		lost.merge(q.push(&item{step: start + sensors.Instant(i)*sensors.Second, drafts: []draft{issue, {kind: KindConfiguration}}, done: make(chan struct{})}))
	}
	if lost.Records != 7 || lost.Steps != 0 || q.issues != maxWaitingIssues || q.records != 2*maxWaitingIssues+7 || q.items[0].done != nil || q.items[7].done == nil {
		t.Errorf("lost %+v; %d issues and %d records left", lost, q.issues, q.records)
	}
}

// TestGapIsJournalled is the overflow with the real writer and a hung disk.
func TestGapIsJournalled(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{After: tenfold})
	w.Submit(batchOf(start))
	eventually(t, "the first commit", func() bool { return s.Health().Commits == 1 })
	hang, err := s.journal.db.Begin(true)
	if err != nil {
		t.Fatal(err)
	}
	w.Record(Entry{Kind: KindTable, At: start}) // the writer takes this and hangs
	eventually(t, "a hanging writer", func() bool { w.mu.Lock(); defer w.mu.Unlock(); return len(w.queue.items) == 0 })
	heavy := []LateReading{{Reason: strings.Repeat("x", maxWaitingBytes/10)}}
	for i := range 13 { // ten of them would just fit without their readings
		w.Submit(Batch{Step: start + sensors.Instant(i+1)*sensors.Second, Stations: stationIDs, Readings: readingsOf(start, 1), Late: heavy})
	}
	if h := s.Health(); !h.Degraded || h.StepsDropped != 4 || h.ReadingsDropped != 4*5 {
		t.Errorf("health %+v", h)
	}
	if err := hang.Rollback(); err != nil {
		t.Fatal(err)
	}
	mustCloseWriter(t, w)
	gaps := 0
	err = s.Journal(0, func(r Record) error {
		if r.Kind == KindGap {
			gaps++
			if !strings.Contains(string(r.Payload), `"steps":4,"readings":20,"records":0`) {
				t.Errorf("gap %s", r.Payload)
			}
		}
		return nil
	})
	if gaps != 1 || err != nil {
		t.Errorf("%d gaps, %v", gaps, err)
	}
	mustVerify(t, s)
}

// TestUnknownOutcome plays the commit whose error hid a success: the records
// are there when they are written again.
func TestUnknownOutcome(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := &Writer{s: s}
	payload, err := encodeIssue(issueOf(start))
	if err != nil {
		t.Fatal(err)
	}
	r := &round{items: []*item{{drafts: []draft{{kind: KindIssue, at: start, payload: payload}, {kind: KindStop, at: start}}}}}
	for _, row := range []struct {
		name   string
		before func() error
		want   int
	}{
		{"first", func() error { return nil }, 2},
		{"again, although it is there", func() error { return nil }, 2},
		{"again, after it is gone", func() error {
			return s.journal.update(func(tx *bolt.Tx) error {
				b := tx.Bucket([]byte(bucketRecords))
				return errors.Join(b.Delete(seqKey(1)), b.Delete(seqKey(2)))
			})
		}, 2},
	} {
		if err := row.before(); err != nil {
			t.Fatal(err)
		}
		s.journal.suspect = true // opened again, as after an error
		if err := w.writeJournal(r); err != nil {
			t.Fatal(err)
		}
		if rep := mustVerify(t, s); rep.Records != uint64(row.want) || r.end.seq != uint64(row.want) {
			t.Errorf("%s: %d records, end %d", row.name, rep.Records, r.end.seq)
		}
		if e, err := s.Event(issueOf(start).Alert.ID); err != nil || e.Issues != 1 {
			t.Errorf("%s: event %s with %d issues, %v", row.name, e.ID, e.Issues, err)
		}
	}
}
