package history

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"

	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

func TestWriteAndReadBack(t *testing.T) {
	defer goleak.VerifyNone(t)
	dir := t.TempDir()
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	var released []Released
	// The wait for the disk has no end here: what a busy disk does is the
	// matter of other tests.
	patient := func(d time.Duration) <-chan time.Time {
		if d == ReleaseWait {
			return nil
		}
		return time.After(d)
	}
	w := mustWriter(t, s, WriterOptions{After: patient, Release: func(r Released) { released = append(released, r) }})
	w.Record(Entry{Kind: KindStart, At: start})
	const n = 90 // crosses midnight
	for i := range n {
		w.Submit(batchOf(start + sensors.Instant(i)*sensors.Second))
	}
	mustCloseWriter(t, w)

	i := 0
	err := s.Readings(start, start+n*sensors.Second, func(st Step) error {
		want := batchOf(start + sensors.Instant(i)*sensors.Second)
		if st.At != want.Step || !reflect.DeepEqual(st.Readings, want.Readings) || !reflect.DeepEqual(st.Late, want.Late) || !reflect.DeepEqual(st.Stations, stationIDs) {
			t.Fatalf("step %s differs:\n%+v\nwant %+v", want.Step, st, want)
		}
		i++
		return nil
	})
	if err != nil || i != n {
		t.Fatalf("%d steps of %d read back, %v", i, n, err)
	}
	if days, _ := s.days(); !reflect.DeepEqual(days, []string{"2026-07-01", "2026-07-02"}) {
		t.Errorf("days %v", days)
	}
	if last, ok, err := s.LastStep(); last != start+(n-1)*sensors.Second || !ok || err != nil {
		t.Errorf("last step %s %v %v", last, ok, err)
	}
	if len(released) != n/3 {
		t.Fatalf("%d issues released, want %d", len(released), n/3)
	}
	for k, r := range released {
		want := start + sensors.Instant(3*k)*sensors.Second
		for want/sensors.Second%3 != 2 {
			want += sensors.Second
		}
		if r.Step != want || !r.Recorded || !reflect.DeepEqual(r.Issue, issueOf(want)) {
			t.Fatalf("released %d: step %s recorded %v, want %s", k, r.Step, r.Recorded, want)
		}
	}
	if h := s.Health(); h.Degraded || h.Steps != n || h.Records != n/3+1 || h.LastStep != start+(n-1)*sensors.Second || len(h.Damage) != 0 {
		t.Errorf("health %+v", h)
	}
	if r := mustVerify(t, s); r.Records != n/3+1 || r.Steps != n || r.Days != 2 {
		t.Errorf("report %+v", r)
	}
}

func TestReadingsRange(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 700) // more than two read chunks
	s := mustOpen(t, dir, Options{})
	defer s.Close()
	stop := errors.New("enough")
	for _, row := range []struct {
		name     string
		from, to sensors.Instant
		limit    int
		want     int
	}{
		{"all", 0, 1 << 50, 0, 700},
		{"half open", start, start + sensors.Second, 0, 1},
		{"nothing before", start - 100*sensors.Second, start, 0, 0},
		{"across midnight", start + 50*sensors.Second, start + 70*sensors.Second, 0, 20},
		{"a fraction rounds up", start + 1, start + 1001, 0, 1},
		{"the reader stops", 0, 1 << 50, 5, 5},
	} {
		n := 0
		err := s.Readings(row.from, row.to, func(Step) error {
			if n++; n == row.limit {
				return stop
			}
			return nil
		})
		if n != row.want || (row.limit > 0) != errors.Is(err, stop) || row.limit == 0 && err != nil {
			t.Errorf("%s: %d steps, want %d; %v", row.name, n, row.want, err)
		}
	}
}

func TestStationListChanges(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{})
	lists := [][]string{{"far07", "mid"}, {"mid"}, {"far07", "mid"}, {}}
	for i, ids := range lists {
		w.Submit(Batch{Step: start + sensors.Instant(i)*sensors.Second, Stations: ids})
	}
	mustCloseWriter(t, w)
	c := mustContent(t, s)
	for i, st := range c.Steps {
		if len(st.Stations) != len(lists[i]) || len(lists[i]) > 0 && !reflect.DeepEqual(st.Stations, lists[i]) {
			t.Errorf("step %d has stations %v, want %v", i, st.Stations, lists[i])
		}
	}
	if len(c.Steps) != len(lists) {
		t.Errorf("%d steps", len(c.Steps))
	}
	mustVerify(t, s)
}

func TestSubmitAgainReplaces(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{})
	step := start + 15*sensors.Second // with a late reading
	w.Submit(batchOf(step))
	w.Submit(Batch{Step: step, Stations: stationIDs[:1], Readings: readingsOf(step, 1)})
	mustCloseWriter(t, w)
	c := mustContent(t, s)
	if len(c.Steps) != 1 || len(c.Steps[0].Readings) != 4 || c.Steps[0].Late != nil {
		t.Errorf("steps %+v", c.Steps)
	}
}

func TestEvents(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 75) // events opened at 23:59:00, 23:59:30, 00:00:00; the last is open
	for _, mode := range []string{"daemon", "read only"} {
		t.Run(mode, func(t *testing.T) {
			var s *Store
			if mode == "daemon" {
				s = mustOpen(t, dir, Options{})
			} else {
				var err error
				if s, err = ReadOnly(dir); err != nil {
					t.Fatal(err)
				}
			}
			defer s.Close()
			checkEvents(t, s)
			mustVerify(t, s)
		})
	}
}

func checkEvents(t *testing.T, s *Store) {
	const s30 = 30 * sensors.Second
	for _, row := range []struct {
		name string
		f    Filter
		want []sensors.Instant // opened
	}{
		{"all, newest first", Filter{}, []sensors.Instant{start + 2*s30, start + s30, start}},
		{"limit", Filter{Limit: 2}, []sensors.Instant{start + 2*s30, start + s30}},
		{"open", Filter{Open: true}, []sensors.Instant{start + 2*s30}},
		{"opened before", Filter{To: start + s30}, []sensors.Instant{start}},
		{"still open at", Filter{From: start + 50*sensors.Second}, []sensors.Instant{start + 2*s30, start + s30}},
		{"between", Filter{From: start + 40*sensors.Second, To: start + 45*sensors.Second}, []sensors.Instant{start + s30}},
	} {
		got, err := s.Events(row.f)
		var opened []sensors.Instant
		for _, e := range got {
			opened = append(opened, e.Opened)
		}
		if err != nil || !reflect.DeepEqual(opened, row.want) {
			t.Errorf("%s: %v, want %v; %v", row.name, opened, row.want, err)
		}
	}
	id := issueOf(start).Alert.ID
	e, err := s.Event(id)
	if err != nil || e.Issues != 10 || len(e.Objects) != 10 || e.Closed != start+29*sensors.Second || string(e.Object) != string(issueOf(start+29*sensors.Second).Object) {
		t.Errorf("event %s with %d issues, closed %s, %v", e.ID, e.Issues, e.Closed, err)
	}
	if string(e.Objects[0]) != string(issueOf(start+2*sensors.Second).Object) {
		t.Errorf("first issue %s", e.Objects[0])
	}
	if _, err := s.Event("skerrymoor-none"); !errors.Is(err, ErrNoEvent) {
		t.Errorf("unknown event: %v", err)
	}
	for _, row := range []struct {
		name string
		asOf sensors.Instant
		want []lifecycle.Alert
	}{
		{"before the first issue", start + sensors.Second, nil},
		{"at the first issue", start + 2*sensors.Second, []lifecycle.Alert{issueOf(start + 2*sensors.Second).Alert}},
		{"between issues", start + 13*sensors.Second, []lifecycle.Alert{issueOf(start + 11*sensors.Second).Alert}},
		{"just before closing", start + 28*sensors.Second, []lifecycle.Alert{issueOf(start + 26*sensors.Second).Alert}},
		{"at closing", start + 29*sensors.Second, nil},
		{"now", 1 << 50, []lifecycle.Alert{issueOf(start + 74*sensors.Second).Alert}},
	} {
		got, err := s.OpenAlerts(row.asOf)
		if err != nil || !reflect.DeepEqual(got, row.want) {
			t.Errorf("open alerts %s: %+v, want %+v; %v", row.name, got, row.want, err)
		}
	}
}

func TestJournalKinds(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{})
	w.Record(Entry{Kind: KindStart, At: start, Payload: []byte(`{"version":"1"}`)})
	b := batchOf(start + 2*sensors.Second)
	b.Entries = []Entry{{Kind: KindConfiguration, At: b.Step, Payload: []byte("name = \"Skerry Moor\"\n")}}
	w.Submit(b)
	w.Record(Entry{Kind: KindStop, At: start + 3*sensors.Second})
	mustCloseWriter(t, w)
	var kinds []string
	err := s.Journal(1, func(r Record) error {
		kinds = append(kinds, r.Kind.String())
		if r.Kind == KindIssue {
			is, err := r.Issue()
			if err != nil || !reflect.DeepEqual(is, b.Issues[0]) {
				t.Errorf("issue %+v, %v", is, err)
			}
		} else if _, err := r.Issue(); err == nil {
			t.Errorf("a %s passes for an issue", r.Kind)
		}
		return nil
	})
	if want := []string{"start", "configuration", "issue", "stop"}; err != nil || !reflect.DeepEqual(kinds, want) {
		t.Errorf("kinds %v, want %v; %v", kinds, want, err)
	}
}

// TestReadWhileWriting asks everything at once while steps come in and files
// are opened again as after failures; the race detector looks on.
func TestReadWhileWriting(t *testing.T) {
	s := mustOpen(t, t.TempDir(), Options{Keep: time.Hour})
	defer s.Close()
	w := mustWriter(t, s, WriterOptions{After: patient})
	if _, err := s.Writer(WriterOptions{}); err == nil {
		t.Error("a second writer")
	}
	stop := make(chan struct{})
	var readers sync.WaitGroup
	for _, ask := range []func() error{
		func() error { return s.Readings(0, 1<<50, func(Step) error { return nil }) },
		func() error { return s.Journal(1, func(Record) error { return nil }) },
		func() error { _, err := s.Events(Filter{Limit: 5}); return err },
		func() error { _, err := s.OpenAlerts(1 << 50); return err },
		func() error { _, err := s.Prune(start); return err },
		func() error { _, _, err := s.LastStep(); return err },
		func() error {
			if r, err := s.Verify(); err != nil || !r.OK() {
				return fmt.Errorf("%+v, %w", r, err)
			}
			return nil
		},
	} {
		readers.Go(func() {
			for {
				if err := ask(); err != nil {
					t.Error(err)
					return
				}
				select {
				case <-stop:
					return
				default:
				}
			}
		})
	}
	for i := range 150 { // crosses midnight
		w.Submit(batchOf(start + sensors.Instant(i)*sensors.Second))
		if i%50 == 0 {
			if err := s.journal.reopen(); err != nil {
				t.Error(err)
			}
		}
		eventually(t, "a short queue", func() bool { return s.Health().Commits > uint64(i/10) })
	}
	mustCloseWriter(t, w)
	close(stop)
	readers.Wait()
	if c := mustContent(t, s); len(c.Steps) != 150 || s.Health().Degraded {
		t.Errorf("%d steps, health %+v", len(c.Steps), s.Health())
	}
}

func TestPrune(t *testing.T) {
	dir := t.TempDir()
	fill(t, dir, 90)
	aside := filepath.Join(dir, "readings-2026-06-30.db.damaged-20260630T101112Z")
	if err := os.WriteFile(aside, []byte("x"), 0o600); err != nil {
		t.Fatal(err)
	}
	s := mustOpen(t, dir, Options{Keep: 24 * time.Hour})
	defer s.Close()
	midnight := start + 60*sensors.Second
	for _, row := range []struct {
		name string
		now  sensors.Instant
		want []string
	}{
		{"30 June ended a day less a millisecond ago", midnight - 1, nil},
		{"30 June ended a day ago", midnight, []string{filepath.Base(aside)}},
		{"again", midnight, nil},
		{"1 July ended a day less a millisecond ago", midnight.Add(24*time.Hour) - 1, nil},
		{"1 July ended a day ago", midnight.Add(24 * time.Hour), []string{"readings-2026-07-01.db"}},
	} {
		if got, err := s.Prune(row.now); err != nil || !reflect.DeepEqual(got, row.want) {
			t.Errorf("%s: %v, want %v; %v", row.name, got, row.want, err)
		}
	}
	if c := mustContent(t, s); len(c.Steps) != 30 || c.Steps[0].At != midnight || len(c.Events) != 3 {
		t.Errorf("%d steps and %d events left", len(c.Steps), len(c.Events))
	}
	mustVerify(t, s)
}

func TestInUse(t *testing.T) {
	dir := t.TempDir()
	s := mustOpen(t, dir, Options{})
	if _, err := Open(dir, Options{LockWait: time.Millisecond}); !errors.Is(err, ErrInUse) {
		t.Errorf("second daemon: %v", err)
	}
	if _, err := ReadOnly(dir); !errors.Is(err, ErrInUse) || !strings.Contains(err.Error(), "HTTP") {
		t.Errorf("reading beside a daemon: %v", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	// A reader holds nothing between its calls: a daemon may start.
	r, err := ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	s = mustOpen(t, dir, Options{LockWait: time.Millisecond})
	if _, err := r.Events(Filter{}); !errors.Is(err, ErrInUse) {
		t.Errorf("reader once the daemon runs: %v", err)
	}
	if _, err := r.Writer(WriterOptions{}); err == nil {
		t.Error("a reader gets a writer")
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := ReadOnly(t.TempDir()); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("an empty directory: %v", err)
	}
}
