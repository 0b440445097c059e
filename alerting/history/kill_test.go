package history

import (
	"bufio"
	"context"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/sensors"
)

// childStations is the load of the child: 20 masts at 4 Hz a step.
const childStations = 20

func childIDs() []string {
	ids := make([]string, childStations)
	for i := range ids {
		ids[i] = fmt.Sprintf("mast%02d", i)
	}
	return ids
}

// runChild writes steps as fast as 1000 a second and prints "recorded STEP" or
// "unrecorded STEP" for each issue released. With steps 0 it goes on until it
// is killed.
func runChild(dir string, steps int) error {
	s, err := Open(dir, Options{Log: zerolog.Nop()})
	for try := 0; err != nil && try < 3; try++ { // as the daemon does
		s, err = Open(dir, Options{Log: zerolog.Nop()})
	}
	if err != nil {
		return err
	}
	if h := s.Health(); len(h.Damage) > 0 && os.Getenv("HISTORY_TEST_DAMAGED") == "" {
		return fmt.Errorf("damage at the start: %s", h.Damage)
	}
	if window, err := strconv.Atoi(os.Getenv("HISTORY_TEST_WINDOW")); err == nil {
		s.window = sensors.Instant(window) * sensors.Second
	}
	next, ok, err := s.LastStep()
	if err != nil {
		return err
	}
	if !ok {
		next = start
	}
	w, err := s.Writer(WriterOptions{
		Release: func(r Released) {
			word := "unrecorded"
			if r.Recorded {
				word = "recorded"
			}
			fmt.Println(word, int64(r.Step))
		},
		// Steps come 1000 times as fast as in life; so do the commits.
		After: func(d time.Duration) <-chan time.Time {
			switch d {
			case ReleaseWait: // stays: it is held against the disk
			case CommitEvery:
				d = time.Millisecond
			default: // between attempts
				d /= 10
			}
			return time.After(d)
		},
	})
	if err != nil {
		return err
	}
	fmt.Println("ready")
	ids, tick := childIDs(), time.NewTicker(time.Millisecond)
	for i := 0; steps == 0 || i < steps; i++ {
		next += sensors.Second
		b := Batch{Step: next, Stations: ids, Readings: readingsOf(next, childStations)}
		if next/sensors.Second%3 == 0 {
			b.Issues = []Issue{issueOf(next)}
		}
		w.Submit(b)
		<-tick.C
	}
	ctx, cancel := context.WithTimeout(context.Background(), 20*time.Second)
	defer cancel()
	if err := w.Close(ctx); err != nil {
		return err
	}
	fmt.Println("failed", s.Health().Failed)
	return s.Close()
}

// child is this test binary as a writer on dir.
func child(dir string, steps int, wrapper ...string) *exec.Cmd {
	args := append(wrapper, os.Args[0], "-test.run=^$")
	cmd := exec.Command(args[0], args[1:]...)
	cmd.Env = append(os.Environ(), "HISTORY_TEST_CHILD="+dir, "HISTORY_TEST_STEPS="+strconv.Itoa(steps),
		"GORACE=atexit_sleep_ms=0") // else the race detector sleeps a second at the end
	cmd.Stderr = os.Stderr
	return cmd
}

// ledger is what the child said it released as recorded, over all cycles.
type ledger struct {
	recorded   map[sensors.Instant]bool
	unrecorded int
	failed     int
	checked    sensors.Instant // the steps before it were found whole
	ready      chan struct{}   // closed at the first line
}

// read takes in the lines of one child until it ends. A last line that was cut
// off by the kill counts for nothing.
func (l *ledger) read(r io.Reader) error {
	ready := l.ready
	lines := bufio.NewReader(r)
	for {
		line, err := lines.ReadString('\n')
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return err
		}
		word, number, _ := strings.Cut(strings.TrimSpace(line), " ")
		n, _ := strconv.ParseInt(number, 10, 64)
		switch word {
		case "ready":
			close(ready)
		case "recorded":
			l.recorded[sensors.Instant(n)] = true
		case "unrecorded":
			l.unrecorded++
		case "failed":
			l.failed = int(n)
		}
	}
}

// check opens what the child left, which checks the chain, and looks for
// everything it promised: each recorded issue once, and every reading of every
// step up to it. all begins again with the first step and verifies the rest.
func (l *ledger) check(t *testing.T, dir string, all bool) {
	t.Helper()
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	if h := s.Health(); len(h.Damage) > 0 {
		t.Fatalf("damage after a kill: %v", h.Damage)
	}
	if all {
		mustVerify(t, s)
		l.checked = start + sensors.Second
	}
	issues := map[sensors.Instant]int{}
	err := s.Journal(0, func(r Record) error {
		if r.Kind == KindIssue {
			issues[r.At]++
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	newest := sensors.Instant(0)
	for step := range l.recorded {
		if issues[step] == 0 {
			t.Errorf("the issue of step %s was released as recorded and is missing", step)
		}
		newest = max(newest, step)
	}
	for step, n := range issues {
		if n > 1 {
			t.Errorf("the issue of step %s is there %d times", step, n)
		}
	}
	want := l.checked
	err = s.Readings(want, 1<<50, func(st Step) error {
		if st.At != want {
			t.Errorf("step %s follows where %s should", st.At, want)
		}
		want = st.At + sensors.Second
		readings := readingsOf(st.At, childStations)
		if len(st.Readings) != len(readings) {
			t.Errorf("step %s has %d readings of %d", st.At, len(st.Readings), len(readings))
			return nil
		}
		for i, r := range readings {
			if !sameReading(r, st.Readings[i]) {
				t.Errorf("step %s: reading %d differs", st.At, i)
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	l.checked = want
	if newest >= want {
		t.Errorf("issues are recorded up to %s, readings only before %s", newest, want)
	}
}

func TestKill(t *testing.T) {
	cycles := 50
	if os.Getenv("SOCKLINE_LONG") != "" {
		cycles = 1000
	}
	const seed = 3
	rng := rand.New(rand.NewPCG(seed, 0))
	dir := t.TempDir()
	l := &ledger{recorded: map[sensors.Instant]bool{}}
	// A slow machine gets little done before it is killed: it is killed oftener.
	wanted, cycle := 2*cycles, 0
	for ; cycle < cycles || len(l.recorded) < wanted && cycle < 5*cycles; cycle++ {
		l.ready = make(chan struct{})
		cmd := child(dir, 0)
		cmd.Env = append(cmd.Env, "HISTORY_TEST_WINDOW=20") // folds come with every commit
		out, err := cmd.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		ended := make(chan error, 1)
		go func() { ended <- l.read(out) }()
		select {
		case <-l.ready:
		case err := <-ended:
			t.Fatalf("cycle %d: the child ended by itself: %v", cycle, err)
		}
		<-time.After(5*time.Millisecond + time.Duration(rng.IntN(75))*time.Millisecond)
		if err := cmd.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		if err := <-ended; err != nil {
			t.Fatal(err)
		}
		_ = cmd.Wait() // "signal: killed"
		l.check(t, dir, cycle%10 == 0)
		if t.Failed() {
			t.Fatalf("seed %d, cycle %d", seed, cycle)
		}
	}
	l.check(t, dir, true)
	if len(l.recorded) < wanted {
		t.Errorf("only %d issues were recorded in %d cycles: the test shows little", len(l.recorded), cycle)
	}
	t.Logf("%d cycles, %d issues recorded, %d released unrecorded", cycle, len(l.recorded), l.unrecorded)
}

// TestFailingSync makes the n-th call that reaches the disk fail, n = 1, 2, 3
// and on. It needs strace and the right to trace.
func TestFailingSync(t *testing.T) {
	strace, err := exec.LookPath("strace")
	if err != nil {
		t.Skip("strace is not installed")
	}
	if out, err := exec.Command(strace, "-o", os.DevNull, "true").CombinedOutput(); err != nil {
		t.Skipf("no right to trace: %s", out)
	}
	last := 4
	if os.Getenv("SOCKLINE_LONG") != "" {
		last = 40
	}
	for _, row := range []struct {
		call    string
		begin   func(t *testing.T, dir string) // what the child finds
		commits bool                           // the failure must hit a commit
	}{
		// Counted from the first call after opening, which writes nothing.
		{"fdatasync", fillChild, true},
		{"pwrite64", fillChild, true},
		// The first initialisation, and the growth of files.
		{"pwrite64", nil, false},
		{"fsync", nil, false},
		{"ftruncate", nil, false},
		{"linkat", nil, false},
		{"renameat", cutJournal, false},
	} {
		hits := 0
		for n := 1; n <= last; n++ {
			dir := t.TempDir()
			if row.begin != nil {
				row.begin(t, dir)
			}
			l := &ledger{recorded: map[sensors.Instant]bool{}, ready: make(chan struct{})}
			cmd := child(dir, 12, strace, "-f", "-qq", "-o", os.DevNull, "-e", "trace="+row.call,
				"-e", fmt.Sprintf("inject=%s:error=EIO:when=%d", row.call, n))
			cmd.Env = append(cmd.Env, "GOMAXPROCS=1", "HISTORY_TEST_WINDOW=4") // strace counts by thread
			if row.call == "renameat" {
				cmd.Env = append(cmd.Env, "HISTORY_TEST_DAMAGED=1")
			}
			out, err := cmd.StdoutPipe()
			if err != nil {
				t.Fatal(err)
			}
			if err := cmd.Start(); err != nil {
				t.Fatal(err)
			}
			if err := l.read(out); err != nil {
				t.Fatal(err)
			}
			if err := cmd.Wait(); err != nil {
				t.Fatalf("%s number %d fails: %v", row.call, n, err)
			}
			hits += l.failed
			if got := len(l.recorded) + l.unrecorded; got != 4 {
				t.Errorf("%s number %d fails: %d issues released of 4", row.call, n, got)
			}
			l.check(t, dir, true)
		}
		if hits == 0 && row.commits {
			t.Errorf("no failing %s reached a commit: the test shows nothing", row.call)
		}
		t.Logf("%s: %d failed commits in %d runs", row.call, hits, last)
	}
}

// cutJournal leaves a journal that the child must set aside.
func cutJournal(t *testing.T, dir string) {
	t.Helper()
	fillChild(t, dir)
	if err := os.Truncate(filepath.Join(dir, journalName), pageSize); err != nil {
		t.Fatal(err)
	}
}

// fillChild makes the files with the first step, so that nothing of their
// creation is hit.
func fillChild(t *testing.T, dir string) {
	t.Helper()
	s := mustOpen(t, dir, Options{})
	w := mustWriter(t, s, WriterOptions{})
	step := start + sensors.Second
	w.Submit(Batch{Step: step, Stations: childIDs(), Readings: readingsOf(step, childStations)})
	mustCloseWriter(t, w)
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}
