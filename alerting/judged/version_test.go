package judged_test

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/alerting/hazard"
	"sockline/alerting/judged"
	"sockline/sensors"
)

// TestVersion1 holds that a file of version 1, kept as it was written, gives the
// alerts that it gave then, says what it lacks, and can be written on.
func TestVersion1(t *testing.T) {
	const day = "2026-07-01"
	old, err := os.ReadFile(filepath.Join("testdata", "version1", judged.FileOf(day)))
	if err != nil {
		t.Fatal(err)
	}
	want, err := os.ReadFile(filepath.Join("testdata", "version1", "lives.txt"))
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	path := filepath.Join(dir, judged.FileOf(day))
	if err := os.WriteFile(path, old, 0o600); err != nil {
		t.Fatal(err)
	}
	f := loadField(t)
	check := func(name string) (with, without int) {
		t.Helper()
		lives, _, _ := again(t, f, dir, day, f.levels())
		if d := difference(lives, strings.Split(strings.TrimSpace(string(want)), "\n")); d != "" {
			t.Errorf("%s: lives %s", name, d)
		}
		_, err := judged.ReadDay(dir, day, 0, 0, func(s *judged.Step) error {
			if s.Context.Without {
				with++
			} else {
				without++
			}
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
		return with, without
	}
	if with, without := check("as it was written"); with != 0 || without != 602 {
		t.Errorf("of version 1, %d steps tell the loss without the mast that stands alone, %d do not", with, without)
	}
	// The same day goes on with a later version of the program.
	e := f.engine(t, f.levels())
	c := f.context(e)
	w := judged.NewWriter(dir, c, func(err error) { t.Error(err) })
	looks := make([]judged.Look, len(c.Paths))
	for i := range looks {
		looks[i].Found = &hazard.Assessment{Path: i}
	}
	last := sensors.Instant(0)
	if _, err := judged.ReadDay(dir, day, 0, 0, func(s *judged.Step) error { last = s.At; return nil }); err != nil {
		t.Fatal(err)
	}
	for range 30 {
		last += sensors.Second
		w.Take(last, looks)
	}
	if err := w.Close(t.Context()); err != nil {
		t.Fatal(err)
	}
	if with, without := check("written on"); with != 30 || without != 602 {
		t.Errorf("written on: %d and %d steps", with, without)
	}
	both, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if first, _, _ := strings.Cut(string(both), "\n"); first != "sockline judged 2" {
		t.Errorf("its first line is %q, so that a program of version 1 takes it for its own", first)
	}
	if n := len(fmt.Sprintln("sockline judged 1")); string(both[n:len(old)]) != string(old[n:]) {
		t.Error("what was written by version 1 is changed")
	}
}
