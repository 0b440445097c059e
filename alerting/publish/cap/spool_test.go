package cap

import (
	"bytes"
	"context"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"
)

// newSpool is a spool that is driven by hand: no goroutine, no clock.
func newSpool(tb testing.TB, dir string, maxFiles int) *Spool {
	tb.Helper()
	s, err := NewSpool(SpoolOptions{Directory: dir, Tick: make(chan time.Time), Log: zerolog.New(zerolog.NewTestWriter(tb)), MaxFiles: maxFiles})
	if err != nil {
		tb.Fatal(err)
	}
	return s
}

func message(i int) Message {
	return Message{ID: fmt.Sprintf("m-r%05d", i), AlertID: "m", XML: []byte(fmt.Sprintf("<a>%d</a>", i))}
}

func names(tb testing.TB, dir string) []string {
	tb.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		tb.Fatal(err)
	}
	var out []string
	for _, e := range entries {
		out = append(out, e.Name())
	}
	return out
}

func TestSpoolWritesWholeFiles(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "made", "spool")
	s := newSpool(t, dir, 0)
	for i := range 3 {
		s.Offer(message(i))
	}
	s.flush()
	if got := strings.Join(names(t, dir), " "); got != "m-r00000.xml m-r00001.xml m-r00002.xml" {
		t.Errorf("the spool holds %s", got)
	}
	b, err := os.ReadFile(filepath.Join(dir, "m-r00001.xml"))
	if err != nil || !bytes.Equal(b, message(1).XML) {
		t.Errorf("%s, %v", b, err)
	}
	if st := s.State(); st.Written != 3 || st.Waiting != 0 || st.Problem != "" {
		t.Errorf("%+v", st)
	}
}

// TestSpoolThatTakesNothing: full, or in the way of a file; told, kept, and
// written once that is mended.
func TestSpoolThatTakesNothing(t *testing.T) {
	for _, c := range []struct {
		name, says  string
		spoil, mend func(dir string) error
	}{
		{"full", "nobody takes them away",
			func(dir string) error {
				return errorsOf(os.MkdirAll(dir, 0o750), os.WriteFile(filepath.Join(dir, "old1.xml"), nil, 0o600), os.WriteFile(filepath.Join(dir, "old2.xml"), nil, 0o600))
			},
			func(dir string) error { return os.Remove(filepath.Join(dir, "old1.xml")) }},
		{"a file stands in its place", "not a directory",
			func(dir string) error { return os.WriteFile(dir, nil, 0o600) },
			func(dir string) error { return os.Remove(dir) }},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := filepath.Join(t.TempDir(), "spool")
			if err := c.spoil(dir); err != nil {
				t.Fatal(err)
			}
			s := newSpool(t, dir, 2)
			s.note(s.probe())
			if st := s.State(); !strings.Contains(st.Problem, c.says) {
				t.Errorf("at the start: %+v", st)
			}
			s.Offer(message(1))
			s.flush()
			if st := s.State(); !strings.Contains(st.Problem, c.says) || st.Waiting != 1 || st.Failed == 0 {
				t.Errorf("%+v", st)
			}
			if err := c.mend(dir); err != nil {
				t.Fatal(err)
			}
			s.flush()
			if st := s.State(); st.Problem != "" && c.name != "full" || st.Waiting != 0 || st.Written != 1 {
				t.Errorf("after the mend: %+v", st)
			}
		})
	}
}

func errorsOf(all ...error) error {
	for _, err := range all {
		if err != nil {
			return err
		}
	}
	return nil
}

// Of too many, updates go first.
func TestSpoolGivesUpUpdatesFirst(t *testing.T) {
	s := newSpool(t, filepath.Join(t.TempDir(), "spool"), 0)
	first := message(0)
	first.Opening = true
	s.Offer(first)
	for i := range maxWaiting + 5 {
		s.Offer(message(i + 1))
	}
	if st := s.State(); st.Lost != 6 || st.Waiting != maxWaiting || s.waiting[0].ID != first.ID {
		t.Errorf("%+v, first %s", st, s.waiting[0].ID)
	}
}

// What waits at the end is written.
func TestSpoolRuns(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "spool")
	s := newSpool(t, dir, 0)
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan struct{})
	go func() { defer close(done); s.Run(ctx) }()
	for i := range 20 {
		s.Offer(message(i))
	}
	cancel()
	<-done
	if n := len(names(t, dir)); n != 20 || s.State().Written != 20 {
		t.Errorf("%d files, %+v", n, s.State())
	}
}
