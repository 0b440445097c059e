package webhook

import (
	"bufio"
	"bytes"
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"
)

// childVariable holds the queue file of a process that is to be killed.
const childVariable = "SOCKLINE_TEST_QUEUE"

// child offers events for ever and says which are written down.
func child() int {
	r, err := New(Options{
		Name: "tower", Airfield: "skerrymoor", File: os.Getenv(childVariable), URL: "https://127.0.0.1:1/", Log: zerolog.Nop(),
		Now: start, Random: func() float64 { return 0 }, Tick: make(chan time.Time),
	})
	if err != nil {
		fmt.Println(err)
		return 1
	}
	r.openFile(start())
	r.pause = start().Add(time.Hour) // nothing is sent
	for i := 0; ; i++ {
		r.Offer(event(fmt.Sprint("a", i), 1, Opening, start()))
		r.Offer(event(fmt.Sprint("a", i), 2, Closing, start()))
		r.turn(context.Background())
		fmt.Println(i)
	}
}

// TestKill kills a process that writes, and finds everything that it said was
// written down.
func TestKill(t *testing.T) {
	for round := range 5 {
		path := filepath.Join(t.TempDir(), "queue")
		c := exec.Command(os.Args[0])
		c.Env = append(os.Environ(), childVariable+"="+path)
		out, err := c.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		said := 0
		lines := bufio.NewScanner(out)
		for lines.Scan() {
			if lines.Text() != fmt.Sprint(said) {
				t.Fatalf("the child says %q", lines.Text())
			}
			if said++; said == 20+30*round {
				break
			}
		}
		if err := c.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		for lines.Scan() { // what it had said before it died
			if lines.Text() == fmt.Sprint(said) {
				said++
			}
		}
		_ = c.Wait() // killed
		q, waiting, _, err := openFile(path)
		if err != nil {
			t.Fatal(err)
		}
		kept := map[string]bool{}
		for _, r := range waiting {
			kept[r.Event.ID] = true
		}
		for i := range min(said, defaultMaxAlerts) {
			if !kept[fmt.Sprintf("a%d/1", i)] || !kept[fmt.Sprintf("a%d/2", i)] {
				t.Fatalf("round %d: alert %d of %d is missing", round, i, said)
			}
		}
		_ = q.close()
	}
}

// filled is a file with ten events, of which the even ones are done with.
func filled(t *testing.T) []byte {
	t.Helper()
	path := filepath.Join(t.TempDir(), "queue")
	q, _, _, err := openFile(path)
	if err != nil {
		t.Fatal(err)
	}
	l := newLanes(100)
	for i := range 10 {
		if err := q.append(l.put(event(fmt.Sprint("a", i), 1, Opening, start()), start())); err != nil {
			t.Fatal(err)
		}
	}
	for i := 0; i < 10; i += 2 {
		if err := q.append([]record{{Done: uint64(i + 1)}}); err != nil {
			t.Fatal(err)
		}
	}
	if err := q.close(); err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return text
}

func reopened(t *testing.T, path string, text []byte) (ids []string, damage int64, err error) {
	t.Helper()
	if err := os.WriteFile(path, text, 0o600); err != nil {
		t.Fatal(err)
	}
	q, waiting, damage, err := openFile(path)
	if err != nil {
		return nil, 0, err
	}
	defer q.close()
	for _, r := range waiting {
		ids = append(ids, r.Event.ID)
	}
	// What is written after that can be read again.
	if err := q.append([]record{{Put: 1000, Event: &Event{ID: "new"}}}); err != nil {
		t.Fatal(err)
	}
	text, err = os.ReadFile(path)
	if records, good := scan(text); err != nil || good != int64(len(text)) || records[len(records)-1].Event.ID != "new" {
		t.Fatalf("%d of %d bytes are good after a new record", good, len(text))
	}
	return ids, damage, nil
}

// TestTornTail cuts the file at every seventh byte, which is every part of a
// record sooner or later.
func TestTornTail(t *testing.T) {
	text := filled(t)
	path := filepath.Join(t.TempDir(), "queue")
	if ids, damage, err := reopened(t, path, text); err != nil || damage != 0 || strings.Join(ids, " ") != "a1/1 a3/1 a5/1 a7/1 a9/1" {
		t.Fatalf("whole: %v, %d, %v", ids, damage, err)
	}
	whole, _ := scan(text)
	for cut := 0; cut < len(text); cut += 7 {
		ids, _, err := reopened(t, path, text[:cut])
		if err != nil {
			t.Fatalf("cut at %d: %v", cut, err)
		}
		records, _ := scan(text[:cut])
		puts, dones := 0, 0
		for _, r := range records {
			if r.Event != nil {
				puts++
			} else {
				dones++
			}
		}
		if len(ids) != puts-dones || len(records) > len(whole) {
			t.Fatalf("cut at %d: %d events, want %d less %d", cut, len(ids), puts, dones)
		}
	}
}

// TestFlippedBits: nothing that is read was not written.
func TestFlippedBits(t *testing.T) {
	text := filled(t)
	path := filepath.Join(t.TempDir(), "queue")
	r := rand.New(rand.NewPCG(11, 0))
	for range 300 {
		broken := bytes.Clone(text)
		at := r.IntN(len(broken))
		broken[at] ^= 1 << r.IntN(8)
		ids, damage, err := reopened(t, path, broken)
		if at < len(magic) {
			if err == nil {
				t.Errorf("byte %d: a file of no known version is used", at)
			}
			continue
		}
		if err != nil || damage == 0 {
			t.Errorf("byte %d: %v, %d bytes cut off", at, err, damage)
		}
		for _, id := range ids {
			if len(id) != 4 || id[0] != 'a' || id[2:] != "/1" {
				t.Errorf("byte %d: event %q", at, id)
			}
		}
	}
}

// TestOneProgramAFile: a second one goes on from memory and says so.
func TestOneProgramAFile(t *testing.T) {
	first := newRig(t, nil)
	second := newRig(t, func(o *Options) { o.File = first.opts.File })
	first.Offer(event("first", 1, Opening, start()))
	first.settle()
	second.Offer(event("second", 1, Opening, start()))
	second.pass(3*mendEvery, time.Second)
	if st := second.State(); !strings.Contains(st.Disk, "another sockline") {
		t.Errorf("%+v", st)
	}
	// It takes the file over when the first ends, with what the first left.
	first.end()
	second.pass(2*mendEvery, time.Second)
	if st := second.State(); st.Disk != "" || st.Waiting != 2 {
		t.Errorf("%+v", st)
	}
	second.end()
	second.open()
	if st := second.State(); st.Waiting != 2 {
		t.Errorf("after a restart: %+v", st)
	}
}

// TestFileOfAnotherVersion is told of and left alone.
func TestFileOfAnotherVersion(t *testing.T) {
	path := filepath.Join(t.TempDir(), "queue")
	const other = "sockline webhook queue 2\nwhatever"
	if err := os.WriteFile(path, []byte(other), 0o600); err != nil {
		t.Fatal(err)
	}
	r := newRig(t, func(o *Options) { o.File = path })
	r.Offer(event("a", 1, Opening, start()))
	r.pass(3*mendEvery, time.Second)
	text, err := os.ReadFile(path)
	if st := r.State(); err != nil || string(text) != other || !strings.Contains(st.Disk, "move it away") || st.Waiting != 1 {
		t.Errorf("%q, %v, %+v", text, err, st)
	}
}

// TestNobodyTakes: what is handed over while Run hangs is bounded, updates
// first.
func TestNobodyTakes(t *testing.T) {
	r := newRig(t, nil)
	for i := range 3 * maxIncoming {
		r.Offer(event("a", i, Update, start()))
	}
	if n := len(r.incoming); n != 1 || r.incoming[0].event.ID != fmt.Sprintf("a/%d", 3*maxIncoming-1) {
		t.Errorf("%d updates of one alert wait", n)
	}
	for i := range maxIncoming + 5 {
		r.Offer(event(fmt.Sprint("b", i), 1, Opening, start()))
	}
	r.report()
	if st := r.State(); len(r.incoming) != maxIncoming || st.Lost != 6 {
		t.Errorf("%d wait, %+v", len(r.incoming), st)
	}
}

// FuzzQueueFile: whatever a file holds, what is read of it is what a file of
// its good part holds, and can be written again.
func FuzzQueueFile(f *testing.F) {
	q := newLanes(10)
	b, _, err := frames(q.put(event("a", 1, Opening, start()), start()))
	if err != nil {
		f.Fatal(err)
	}
	f.Add(append([]byte(magic), b...))
	f.Add([]byte(magic))
	f.Add([]byte("sockline webhook"))
	f.Add(append([]byte(magic), 0xff, 0xff, 0xff, 0xff, 0, 0, 0, 0))
	f.Fuzz(func(t *testing.T, text []byte) {
		records, good := scan(text)
		if good > int64(len(text)) {
			t.Fatalf("%d of %d bytes are good", good, len(text))
		}
		again, same := scan(text[:good])
		if same != good || len(again) != len(records) {
			t.Fatalf("%d records of %d bytes, then %d of %d", len(records), good, len(again), same)
		}
		for _, r := range records {
			if !r.sound() {
				t.Errorf("%+v", r)
			}
			if _, _, err := frames([]record{r.record}); err != nil {
				t.Error(err)
			}
		}
	})
}

// TestFileIsTidied: it does not grow with what is done.
func TestFileIsTidied(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	r = newRig(t, to(s, nil))
	big := bytes.Repeat([]byte(" "), 100<<10)
	for i := range 40 {
		e := event(fmt.Sprint("a", i), 1, Closing, start())
		e.Data = append(e.Data, big...)
		r.Offer(e)
		r.settle()
	}
	info, err := os.Stat(r.opts.File)
	if err != nil || info.Size() > 2*tidyFrom || len(s.taken()) != 40 {
		t.Errorf("%d bytes, %d taken, %v", info.Size(), len(s.taken()), err)
	}
	if _, err := os.Stat(r.opts.File + ".new"); err == nil {
		t.Error("a new file is left beside the old one")
	}
}

// TestNoDisk: a directory that cannot be made. Events go out, it is told, and
// once it is mended what waits is on disk.
func TestNoDisk(t *testing.T) {
	r := &rig{}
	s := newStation(t, func() time.Time { return r.now() })
	dir := filepath.Join(t.TempDir(), "state")
	if err := os.WriteFile(dir, nil, 0o600); err != nil {
		t.Fatal(err)
	}
	r = newRig(t, to(s, func(o *Options) { o.File = filepath.Join(dir, "tower") }))
	if st := r.State(); !strings.Contains(st.Disk, "not a directory") {
		t.Errorf("%+v", st)
	}
	r.Offer(event("a", 1, Opening, start()))
	r.settle()
	if s.ids() != "a/1" {
		t.Errorf("taken %q", s.ids())
	}
	s.answer = func(string, int) (int, string) { return 503, "600" }
	r.Offer(event("a", 2, Closing, start()))
	r.settle()
	if err := os.Remove(dir); err != nil {
		t.Fatal(err)
	}
	r.pass(2*mendEvery, time.Second)
	if st := r.State(); st.Disk != "" || st.Waiting != 1 {
		t.Errorf("%+v", st)
	}
	r.end()
	r.open()
	if st := r.State(); st.Waiting != 1 || r.lanes.records()[0].Event.ID != "a/2" {
		t.Errorf("%+v", st)
	}
}

// TestDiskThatFails in the middle of work: the file is closed under it.
func TestDiskThatFails(t *testing.T) {
	r := newRig(t, nil)
	r.Offer(event("a", 1, Opening, start()))
	r.settle()
	_ = r.file.f.Close()
	r.Offer(event("b", 1, Opening, start()))
	r.settle()
	if st := r.State(); st.Disk == "" || st.Waiting != 2 {
		t.Errorf("%+v", st)
	}
	r.pass(2*mendEvery, time.Second)
	if st := r.State(); st.Disk != "" {
		t.Errorf("%+v", st)
	}
	r.end()
	r.open()
	if st := r.State(); st.Waiting != 2 {
		t.Errorf("after the restart: %+v", st)
	}
}
