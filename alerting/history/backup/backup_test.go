package backup

import (
	"archive/tar"
	"bytes"
	"context"
	"errors"
	"io"
	"os"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/sensors"
)

const begin sensors.Instant = 1782950340000 // 2026-07-01T23:59:00Z

// fill writes steps begin+from to begin+to seconds, with a note each ten.
func fill(tb testing.TB, w *history.Writer, from, to int) {
	tb.Helper()
	for i := from; i < to; i++ {
		at := begin + sensors.Instant(i)*sensors.Second
		b := history.Batch{Step: at, Stations: []string{"far07", "mid"}}
		for k := range b.Stations {
			b.Readings = append(b.Readings, sensors.Reading{Station: k, Time: at - 100, Arrival: at, Speed: float64(i%50) / 5, From: float64(i % 360)})
		}
		if i%10 == 0 {
			e, err := history.EntryOf(at, history.Note{Event: "e", Who: "Io", Text: "n"})
			if err != nil {
				tb.Fatal(err)
			}
			b.Entries = []history.Entry{e}
		}
		w.Submit(b)
	}
}

func opened(tb testing.TB, dir string) (*history.Store, *history.Writer) {
	tb.Helper()
	s, err := history.Open(dir, history.Options{})
	if err != nil {
		tb.Fatal(err)
	}
	w, err := s.Writer(history.WriterOptions{})
	if err != nil {
		tb.Fatal(err)
	}
	return s, w
}

func closed(tb testing.TB, s *history.Store, w *history.Writer) {
	tb.Helper()
	if err := errors.Join(w.Close(context.Background()), s.Close()); err != nil {
		tb.Fatal(err)
	}
}

func copied(tb testing.TB, s *history.Store, out string) Result {
	tb.Helper()
	r, w := io.Pipe()
	go func() { w.CloseWithError(Stream(tb.Context(), s, Span{}, w)) }()
	res, err := Receive(r, out, func(int) {})
	if err != nil {
		tb.Fatal(err)
	}
	return res
}

// content is everything that can be read from a history.
func content(tb testing.TB, dir string) (steps []history.Step, records []history.Record) {
	tb.Helper()
	s, err := history.ReadOnly(dir)
	if err != nil {
		tb.Fatal(err)
	}
	defer s.Close()
	err = errors.Join(
		s.Readings(0, 1<<50, func(st history.Step) error { steps = append(steps, st); return nil }),
		s.Journal(1, func(r history.Record) error { records = append(records, r); return nil }))
	if err != nil {
		tb.Fatal(err)
	}
	return steps, records
}

// TestLiveCopy copies a history while it is written to: the copy verifies, has
// no record without the readings up to it, and every copy is a beginning of
// what is there in the end.
func TestLiveCopy(t *testing.T) {
	dir := t.TempDir()
	s, w := opened(t, dir)
	fill(t, w, 0, 200)
	writing := make(chan struct{})
	go func() {
		defer close(writing)
		fill(t, w, 200, 3000)
	}()
	var copies []string
	for i := range 5 {
		out := filepath.Join(t.TempDir(), "copy")
		if res := copied(t, s, out); !res.Report.OK() || res.Damage != "" {
			t.Errorf("copy %d: %+v", i, res)
		}
		copies = append(copies, out)
	}
	<-writing
	closed(t, s, w)
	steps, records := content(t, dir)
	for i, out := range copies {
		st, rec := content(t, out)
		if len(st) > len(steps) || len(st) > 0 && !reflect.DeepEqual(st, steps[:len(st)]) || len(rec) > 0 && !reflect.DeepEqual(rec, records[:len(rec)]) {
			t.Errorf("copy %d is no beginning of what is there: %d of %d steps, %d of %d records", i, len(st), len(steps), len(rec), len(records))
		}
		if len(rec) > 0 && rec[len(rec)-1].At > st[len(st)-1].At {
			t.Errorf("copy %d has a record of %s and readings up to %s", i, rec[len(rec)-1].At, st[len(st)-1].At)
		}
	}
	if entries, _ := os.ReadDir(dir); len(entries) != 3 {
		t.Errorf("left in the directory: %v", entries)
	}
}

// TestRestore puts a copy in the place of what was lost, and goes on.
func TestRestore(t *testing.T) {
	dir := t.TempDir()
	s, w := opened(t, dir)
	fill(t, w, 0, 100)
	closed(t, s, w)
	if err := os.WriteFile(filepath.Join(dir, "signing.key"), []byte("secret"), 0o600); err != nil {
		t.Fatal(err)
	}
	ro, err := history.ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	out := filepath.Join(t.TempDir(), "copy.tar")
	res := copied(t, ro, out)
	if err := ro.Close(); err != nil {
		t.Fatal(err)
	}
	steps, records := content(t, dir)
	again := t.TempDir()
	names := untar(t, out, again)
	if _, there := names["signing.key"]; there || names[noticeName] != alerting.Notice+"\n" || len(names) != len(res.Files)+1 {
		t.Errorf("the copy holds %d files: %+v", len(names), res.Files)
	}
	for _, f := range res.Files {
		if sum, err := sumOf(filepath.Join(again, f.Name)); err != nil || sum != f.SHA256 || !strings.Contains(names[sumsName], sum+"  "+f.Name+"\n") {
			t.Errorf("%+v: %s, %v", f, sum, err)
		}
	}
	st, rec := content(t, again)
	if !reflect.DeepEqual(st, steps) || !reflect.DeepEqual(rec, records) {
		t.Error("what was restored is not what was there")
	}
	s, w = opened(t, again)
	fill(t, w, 100, 110)
	closed(t, s, w)
	if st, rec := content(t, again); len(st) != 110 || len(rec) != 11 {
		t.Errorf("it goes on with %d steps and %d records", len(st), len(rec))
	}
}

func untar(tb testing.TB, path, dir string) map[string]string {
	tb.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		tb.Fatal(err)
	}
	out := map[string]string{}
	for t := tar.NewReader(bytes.NewReader(b)); ; {
		h, err := t.Next()
		if errors.Is(err, io.EOF) {
			return out
		}
		if err != nil {
			tb.Fatal(err)
		}
		text, err := io.ReadAll(t)
		if err == nil {
			err = os.WriteFile(filepath.Join(dir, h.Name), text, 0o600)
		}
		if err != nil {
			tb.Fatal(err)
		}
		out[h.Name] = string(text)
	}
}

// TestSpan copies some of the days.
func TestSpan(t *testing.T) {
	dir := t.TempDir()
	s, w := opened(t, dir)
	fill(t, w, 0, 120) // over midnight
	defer closed(t, s, w)
	// A record is on disk after everything before it.
	if _, err := w.RecordDurably(t.Context(), history.Entry{Kind: history.KindStop, At: begin}); err != nil {
		t.Fatal(err)
	}
	day := func(text string) sensors.Instant {
		at, err := time.Parse(time.RFC3339, text)
		if err != nil {
			t.Fatal(err)
		}
		return sensors.At(at)
	}
	for _, row := range []struct {
		span Span
		days []string
	}{
		{Span{}, []string{"readings-2026-07-01.db", "readings-2026-07-02.db"}},
		{Span{To: day("2026-07-01T23:59:59Z")}, []string{"readings-2026-07-01.db"}},
		{Span{From: day("2026-07-02T00:00:00Z")}, []string{"readings-2026-07-02.db"}},
		{Span{From: day("2026-07-01T12:00:00Z"), To: day("2026-07-02T12:00:00Z")}, []string{"readings-2026-07-01.db", "readings-2026-07-02.db"}},
		{Nothing(), nil},
	} {
		var b bytes.Buffer
		if err := Stream(t.Context(), s, row.span, &b); err != nil {
			t.Fatal(err)
		}
		at := t.TempDir()
		if err := Unpack(&b, at); err != nil {
			t.Fatal(err)
		}
		entries, _ := os.ReadDir(at)
		var names []string
		for _, e := range entries {
			if e.Name() != "journal.db" {
				names = append(names, e.Name())
			}
		}
		if len(entries) != len(row.days)+1 || !slices.Equal(names, row.days) {
			t.Errorf("%+v: %v, want %v", row.span, names, row.days)
		}
	}
}

// TestUnfit: whatever goes wrong is told, and leaves nothing behind.
func TestUnfit(t *testing.T) {
	dir := t.TempDir()
	s, w := opened(t, dir)
	fill(t, w, 0, 50)
	closed(t, s, w)
	ro, err := history.ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer ro.Close()
	var stream bytes.Buffer
	if err := Stream(t.Context(), ro, Span{}, &stream); err != nil {
		t.Fatal(err)
	}
	whole := stream.Bytes()
	evil := func(name string) []byte {
		var b bytes.Buffer
		tw := tar.NewWriter(&b)
		_ = tw.WriteHeader(header(name, 1))
		_, _ = tw.Write([]byte("x"))
		_ = tw.Close()
		return b.Bytes()
	}
	for _, row := range []struct {
		name   string
		stream []byte
		out    string
		want   string
	}{
		{"cut in a file", whole[:len(whole)/2], "copy", "the stream is cut off"},
		{"cut at the end", whole[:len(whole)-2048], "copy", "the stream is cut off"},
		{"nothing", nil, "copy", "the stream is cut off"},
		{"a way out", evil("../x"), "copy", "no file of a history"},
		{"a hidden file", evil(".x"), "copy", "no file of a history"},
		{"it exists", whole, "there", "a copy never replaces another"},
		{"no such place", whole, "no/copy", "no such file or directory"},
	} {
		at := t.TempDir()
		if err := os.Mkdir(filepath.Join(at, "there"), 0o700); err != nil {
			t.Fatal(err)
		}
		_, err := Receive(bytes.NewReader(row.stream), filepath.Join(at, row.out), func(int) {})
		if err == nil || !strings.Contains(err.Error(), row.want) {
			t.Errorf("%s: %v", row.name, err)
		}
		if entries, _ := os.ReadDir(at); len(entries) != 1 {
			t.Errorf("%s: left behind %v", row.name, entries)
		}
	}
}

// TestDamagedOriginal: damage is copied with the rest, and told.
func TestDamagedOriginal(t *testing.T) {
	dir := t.TempDir()
	s, w := opened(t, dir)
	fill(t, w, 0, 100)
	closed(t, s, w)
	day := filepath.Join(dir, "readings-2026-07-01.db")
	b, err := os.ReadFile(day)
	if err != nil {
		t.Fatal(err)
	}
	for i := range 8192 {
		b[i] = 0
	}
	if err := os.WriteFile(day, b, 0o600); err != nil {
		t.Fatal(err)
	}
	ro, err := history.ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer ro.Close()
	out := filepath.Join(t.TempDir(), "copy")
	if res := copied(t, ro, out); res.Damage == "" || res.Report.OK() {
		t.Errorf("%+v", res)
	}
	if got, err := os.ReadFile(filepath.Join(out, "readings-2026-07-01.db")); err != nil || !bytes.Equal(got, b) {
		t.Errorf("the damaged file is not in the copy: %v", err)
	}
}
