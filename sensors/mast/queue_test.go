package mast

import (
	"bytes"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"sockline/sensors"
)

const noon sensors.Instant = 1782907200_000 // 2026-07-01T12:00:00Z

func rec(i int) Record {
	return Record{Time: noon + sensors.Instant(i)*sensors.Second, Speed: float64(i), From: 240, Gust: float64(2 * i), HasGust: i%2 == 1, Exercise: i%7 == 3}
}

func open(tb testing.TB, dir string, bound int64) *Queue {
	tb.Helper()
	q, err := OpenQueue(dir, bound)
	if err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(func() { _ = q.Close() }) // a second time for most
	return q
}

func fill(tb testing.TB, q *Queue, from, to int) {
	tb.Helper()
	for i := from; i < to; i++ {
		if err := q.Append(rec(i)); err != nil {
			tb.Fatal(err)
		}
	}
}

// take peeks and advances, n at a time, until nothing is left, and returns the
// numbers of what came.
func take(tb testing.TB, q *Queue, n int) (got []int) {
	tb.Helper()
	for q.Len() > 0 {
		records, next, err := q.Peek(nil, n)
		if err != nil {
			tb.Fatal(err)
		}
		for _, r := range records {
			i := int(r.Time-noon) / 1000
			if r != rec(i) {
				tb.Fatalf("record %d came out as %+v", i, r)
			}
			got = append(got, i)
		}
		if err := q.Advance(next); err != nil {
			tb.Fatal(err)
		}
	}
	return got
}

// inOrder checks that got is every number from first to last.
func inOrder(tb testing.TB, got []int, first, last int) {
	tb.Helper()
	if len(got) != last-first+1 {
		tb.Fatalf("%d records, want %d to %d", len(got), first, last)
	}
	for k, i := range got {
		if i != first+k {
			tb.Fatalf("record %d is number %d, want %d", k, i, first+k)
		}
	}
}

func TestQueueKeepsOrder(t *testing.T) {
	dir := t.TempDir()
	q := open(t, dir, LeastQueue)
	fill(t, q, 0, 2000)
	if q.Len() != 2000 {
		t.Fatalf("%d wait, want 2000", q.Len())
	}
	inOrder(t, take(t, q, 77), 0, 1999)
	fill(t, q, 2000, 2010)
	records, next, err := q.Peek(nil, 4)
	if err != nil || len(records) != 4 {
		t.Fatal(records, err)
	}
	if err := q.Advance(next); err != nil {
		t.Fatal(err)
	}
	if err := q.Close(); err != nil {
		t.Fatal(err)
	}
	q = open(t, dir, LeastQueue)
	fill(t, q, 2010, 2012)
	inOrder(t, take(t, q, 100), 2004, 2011)
	if q.Dropped() != 0 || q.Damaged() != 0 {
		t.Errorf("%d dropped, %d damaged", q.Dropped(), q.Damaged())
	}
}

// A full queue drops the oldest, counts them, and stays within its bound.
func TestQueueBound(t *testing.T) {
	dir := t.TempDir()
	q := open(t, dir, LeastQueue)
	const n = 20000 // 800 kB
	for i := range n {
		fill(t, q, i, i+1)
		if i%1000 == 0 && size(t, dir) > LeastQueue+1024 {
			t.Fatalf("%d bytes after %d records", size(t, dir), i)
		}
	}
	kept := q.Len()
	if most := LeastQueue / recordSize; kept > most || kept < most*9/10 || q.Dropped() != uint64(n-kept) {
		t.Errorf("%d kept and %d dropped, want nearly %d kept", kept, q.Dropped(), most)
	}
	inOrder(t, take(t, q, 1000), n-kept, n-1)
	if s := size(t, dir); s > LeastQueue/8 {
		t.Errorf("%d bytes are left when everything has been sent", s)
	}
}

func size(tb testing.TB, dir string) (sum int64) {
	tb.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		tb.Fatal(err)
	}
	for _, e := range entries {
		if info, err := e.Info(); err == nil {
			sum += info.Size()
		}
	}
	return sum
}

// What was peeked and is dropped before it has been sent is not sent back to.
func TestQueueDropsWhatIsOnItsWay(t *testing.T) {
	q := open(t, t.TempDir(), LeastQueue)
	fill(t, q, 0, 10)
	_, next, err := q.Peek(nil, 10)
	if err != nil {
		t.Fatal(err)
	}
	fill(t, q, 10, 20000)
	before := q.Len()
	if err := q.Advance(next); err != nil || q.Len() != before {
		t.Errorf("%v; %d wait, want %d", err, q.Len(), before)
	}
}

func lastSegment(tb testing.TB, dir string) string {
	tb.Helper()
	names, err := filepath.Glob(filepath.Join(dir, "*"+segmentEnding))
	if err != nil || len(names) == 0 {
		tb.Fatal(names, err)
	}
	return names[len(names)-1]
}

// The file is cut at every byte of its end: what was whole is there, and the
// queue goes on.
func TestQueueTornTail(t *testing.T) {
	dir := t.TempDir()
	q := open(t, dir, LeastQueue)
	fill(t, q, 0, 5)
	if err := q.Close(); err != nil {
		t.Fatal(err)
	}
	whole, err := os.ReadFile(lastSegment(t, dir))
	if err != nil {
		t.Fatal(err)
	}
	for cut := 0; cut <= len(whole); cut++ {
		torn := t.TempDir()
		if err := os.WriteFile(filepath.Join(torn, filepath.Base(lastSegment(t, dir))), whole[:cut], 0o600); err != nil {
			t.Fatal(err)
		}
		q := open(t, torn, LeastQueue)
		want := max(cut/recordSize-1, 0)
		fill(t, q, want, want+3)
		inOrder(t, take(t, q, 2), 0, want+2)
		if err := q.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// Each bit of a record turned over: that record is missing and counted, the
// others are there.
func TestQueueDamage(t *testing.T) {
	dir := t.TempDir()
	q := open(t, dir, LeastQueue)
	fill(t, q, 0, 5)
	if err := q.Close(); err != nil {
		t.Fatal(err)
	}
	name := lastSegment(t, dir)
	whole, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	for bit := range 8 * recordSize {
		spoilt := bytes.Clone(whole)
		spoilt[3*recordSize+bit/8] ^= 1 << (bit % 8)
		other := t.TempDir()
		if err := os.WriteFile(filepath.Join(other, filepath.Base(name)), spoilt, 0o600); err != nil {
			t.Fatal(err)
		}
		q := open(t, other, LeastQueue)
		var got []int
		for q.Len() > 0 {
			records, next, err := q.Peek(nil, 2)
			if err != nil {
				t.Fatal(err)
			}
			for _, r := range records {
				got = append(got, int(r.Time-noon)/1000)
			}
			if err := q.Advance(next); err != nil {
				t.Fatal(err)
			}
		}
		if len(got) != 4 || got[1] != 1 || got[2] != 3 || q.Damaged() != 1 {
			t.Fatalf("bit %d: %v, %d damaged", bit, got, q.Damaged())
		}
		if err := q.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// A position that cannot be read makes readings go out twice, not get lost.
func TestQueueWithoutPosition(t *testing.T) {
	dir := t.TempDir()
	q := open(t, dir, LeastQueue)
	fill(t, q, 0, 5)
	_, next, err := q.Peek(nil, 3)
	if err != nil {
		t.Fatal(err)
	}
	if err := q.Advance(next); err != nil {
		t.Fatal(err)
	}
	if err := q.Close(); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "position"), []byte("torn"), 0o600); err != nil {
		t.Fatal(err)
	}
	inOrder(t, take(t, open(t, dir, LeastQueue), 10), 0, 4)
}

func TestQueueHasOneOwner(t *testing.T) {
	dir := t.TempDir()
	open(t, dir, LeastQueue)
	if _, err := OpenQueue(dir, LeastQueue); err == nil || !strings.Contains(err.Error(), "another agent") {
		t.Errorf("a second owner: %v", err)
	}
	if _, err := OpenQueue(t.TempDir(), 100); err == nil {
		t.Error("a bound of 100 bytes is accepted")
	}
}

// Without a disk the readings wait in memory, in order, the oldest dropped and
// counted; when the disk is back they go to it.
func TestQueueWithoutDisk(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "q")
	q := open(t, dir, LeastQueue)
	fill(t, q, 0, 3)
	away := dir + "-away"
	if err := os.Rename(dir, away); err != nil {
		t.Fatal(err)
	}
	_ = q.tail.Close() // the next write fails, and there is nowhere to begin a segment
	q.tail = nil
	for i := 3; i < 10; i++ {
		if err := q.Append(rec(i)); err == nil {
			t.Fatal("there is no disk, and no error")
		}
	}
	if q.Len() != 10 {
		t.Errorf("%d wait, want 10", q.Len())
	}
	if err := os.Rename(away, dir); err != nil {
		t.Fatal(err)
	}
	fill(t, q, 10, 12)
	if len(q.memory) != 0 {
		t.Errorf("%d are still in memory", len(q.memory))
	}
	inOrder(t, take(t, q, 5), 0, 11)
}

func TestQueueMemoryIsBounded(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "q")
	q := open(t, dir, LeastQueue)
	if err := os.Rename(dir, dir+"-away"); err != nil {
		t.Fatal(err)
	}
	for i := range memoryRecords + 10 {
		if q.Append(rec(i)) == nil {
			t.Fatal("there is no disk, and no error")
		}
	}
	if q.Len() != memoryRecords || q.Dropped() != 10 {
		t.Errorf("%d wait, %d dropped", q.Len(), q.Dropped())
	}
	records, next, err := q.Peek(nil, 2)
	if err != nil || len(records) != 2 || records[0] != rec(10) {
		t.Fatal(records, err)
	}
	if err := os.Rename(dir+"-away", dir); err != nil {
		t.Fatal(err)
	}
	if err := q.Advance(next); err != nil {
		t.Fatal(err)
	}
	fill(t, q, memoryRecords+10, memoryRecords+11)
	inOrder(t, take(t, q, 500), 12, memoryRecords+10)
}

// killedEnv makes this test binary the program that TestQueueKilled kills.
const killedEnv = "SOCKLINE_TEST_MAST_QUEUE"

func TestMain(m *testing.M) {
	if dir := os.Getenv(killedEnv); dir != "" {
		q, err := OpenQueue(dir, 1<<20)
		if err != nil {
			os.Exit(1)
		}
		for i := 0; ; i++ {
			if q.Append(rec(i%20000)) != nil {
				os.Exit(1)
			}
			if _, err := os.Stdout.Write([]byte{'.'}); err != nil { // one dot a record that is in
				os.Exit(1)
			}
		}
	}
	os.Exit(m.Run())
}

// Killed at any moment, the queue has every record that was put into it.
func TestQueueKilled(t *testing.T) {
	for range 5 {
		dir := t.TempDir()
		c := exec.Command(os.Args[0])
		c.Env = append(os.Environ(), killedEnv+"="+dir)
		out, err := c.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		in := 0
		b := make([]byte, 512)
		for in < 3000 {
			n, err := out.Read(b)
			if err != nil {
				t.Fatal(err)
			}
			in += n
		}
		if err := c.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		for { // what it wrote before the end
			n, err := out.Read(b)
			in += n
			if err != nil {
				break
			}
		}
		_ = c.Wait() // killed, as was asked for
		q := open(t, dir, 1<<20)
		got := take(t, q, 1000)
		// The one that was under way may be there or not.
		if len(got) != in && len(got) != in+1 {
			t.Errorf("%d records, %d were put in", len(got), in)
		}
		inOrder(t, got, 0, len(got)-1)
	}
}

// Whatever lies in the directory, the queue opens or says why, and works.
func FuzzQueue(f *testing.F) {
	var whole bytes.Buffer
	whole.WriteString(segmentHeader)
	for i := range 3 {
		var b [recordSize]byte
		encodeRecord(&b, rec(i))
		whole.Write(b[:])
	}
	f.Add(whole.Bytes(), []byte{}, uint64(0))
	f.Add(whole.Bytes()[:100], []byte("\x02\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00"), uint64(1))
	f.Add([]byte("garbage"), []byte("x"), uint64(1<<63))
	f.Fuzz(func(t *testing.T, segment, position []byte, first uint64) {
		dir := t.TempDir()
		q0 := Queue{dir: dir}
		if err := os.WriteFile(q0.path(first), segment, 0o600); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, "position"), position, 0o600); err != nil {
			t.Fatal(err)
		}
		q := open(t, dir, LeastQueue)
		old := q.Len()
		fill(t, q, 100, 103)
		records, next, err := q.Peek(nil, old+10)
		if err != nil {
			t.Fatal(err)
		}
		if n := len(records); n < 3 || records[n-3] != rec(100) || records[n-1] != rec(102) {
			t.Fatalf("%d records, of which the last are not those that were put in", n)
		}
		if err := q.Advance(next); err != nil || q.Len() != 0 {
			t.Fatalf("%d wait, %v", q.Len(), err)
		}
		if err := q.Close(); err != nil {
			t.Fatal(err)
		}
	})
}
