package history

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// unpack copies the kept files of a version into a directory.
func unpack(t *testing.T, version, dir string) {
	t.Helper()
	names, err := filepath.Glob(filepath.Join("testdata", version, "*.gz"))
	if err != nil || len(names) == 0 {
		t.Fatalf("no files of %s: %v", version, err)
	}
	for _, name := range names {
		gunzip(t, name, filepath.Join(dir, strings.TrimSuffix(filepath.Base(name), ".gz")))
	}
}

// keptSteps is what the kept files hold: of version 1 in rows, of version 2 in
// windows of a minute.
func keptSteps(n int) map[sensors.Instant]Step {
	want := map[sensors.Instant]Step{}
	for i := range n {
		b := batchOf(start + sensors.Instant(i)*sensors.Second)
		want[b.Step] = Step{At: b.Step, Stations: b.Stations, Readings: b.Readings, Late: b.Late}
	}
	return want
}

// TestKeptFiles: files that earlier versions wrote open, give all of it back,
// and are written on.
func TestKeptFiles(t *testing.T) {
	for _, row := range []struct {
		version string
		steps   int
	}{{"v1", 90}, {"v2", 300}} {
		t.Run(row.version, func(t *testing.T) {
			dir := t.TempDir()
			unpack(t, row.version, dir)
			ro, err := ReadOnly(dir)
			if err != nil {
				t.Fatal(err)
			}
			want := keptSteps(row.steps)
			sameSteps(t, ro, want, 0, 1<<50)
			mustVerify(t, ro)
			s := minutes(t, dir, Options{})
			defer s.Close()
			if d := s.Health().Damage; len(d) > 0 {
				t.Errorf("damage %q", d)
			}
			events, err := s.Events(Filter{})
			if err != nil || len(events) != row.steps/30 {
				t.Errorf("%d events, %v", len(events), err)
			}
			w := mustWriter(t, s, WriterOptions{After: tenfold})
			for i := range 200 {
				b := batchOf(start + sensors.Instant(row.steps+i)*sensors.Second)
				b.Issues = nil
				want[b.Step] = Step{At: b.Step, Stations: b.Stations, Readings: b.Readings, Late: b.Late}
				w.Submit(b)
			}
			mustCloseWriter(t, w)
			sameSteps(t, s, want, 0, 1<<50)
			mustVerify(t, s)
			if rows, _ := rowsLeft(t, s, "2026-07-02"); rows > 120 {
				t.Errorf("%d rows are left: what was written on is not folded", rows)
			}
		})
	}
}

// TestMakeKeptFiles writes the files of this version anew where it is told to,
// for a version that is to be kept.
func TestMakeKeptFiles(t *testing.T) {
	dir := os.Getenv("SOCKLINE_KEEP_FILES")
	if dir == "" {
		t.Skip("SOCKLINE_KEEP_FILES names no directory for the files of this version")
	}
	s := minutes(t, dir, Options{})
	w := mustWriter(t, s, WriterOptions{After: tenfold})
	w.Record(Entry{Kind: KindConfiguration, At: start, Payload: []byte("name = \"Skerry Moor\"\n")})
	for i := range 300 {
		w.Submit(batchOf(start + sensors.Instant(i)*sensors.Second))
		eventually(t, "a written step", func() bool { return s.Health().Steps == uint64(i+1) })
	}
	mustCloseWriter(t, w)
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

// TestNewerReadingsAreRefused: nothing is read from, written to or set aside
// of a file that a later version wrote; alerts go on.
func TestNewerReadingsAreRefused(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 3)
	s := mustOpen(t, dir, Options{})
	f, err := s.shelf.acquire(dayName(dayOf(start)), dayLayout(), false)
	if err != nil {
		t.Fatal(err)
	}
	err = f.update(func(tx *bolt.Tx) error { return markFormat(tx, layout{format: "sockline readings 9"}) })
	if err = errors.Join(err, s.shelf.release(f)); err != nil {
		t.Fatal(err)
	}
	read := s.Readings(0, 1<<50, func(Step) error { return nil })
	for what, err := range map[string]error{"reading": read, "closing": s.Close()} {
		if what == "closing" && err != nil || what == "reading" && (err == nil || isDamage(err) || !contains(err, `"sockline readings 9"`, "use the version that wrote it")) {
			t.Errorf("%s a file of a later version: %v", what, err)
		}
	}
	if _, err := os.Stat(filepath.Join(dir, dayName(dayOf(start)))); err != nil {
		t.Error(err)
	}
}
