package history

import (
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"

	"sockline/sensors"
)

// fakeDisk tells of as much space as a test says.
type fakeDisk struct {
	mu      sync.Mutex
	percent float64
	err     error
}

func (d *fakeDisk) set(percent float64, err error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.percent, d.err = percent, err
}

const fakeTotal = 100 << 30

func (d *fakeDisk) space() (Space, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	return Space{Free: uint64(d.percent / 100 * fakeTotal), Total: fakeTotal}, d.err
}

// gapsOf are the gaps in the journal.
func gapsOf(t *testing.T, s *Store) (all Gap, n int) {
	t.Helper()
	err := s.Journal(0, func(r Record) error {
		if r.Kind != KindGap {
			return nil
		}
		var g Gap
		n++
		err := json.Unmarshal(r.Payload, &g)
		all.merge(g)
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return all, n
}

// TestNearlyFullDisk takes the disk through all shares: it is called low,
// readings stop, alerts go on as recorded, and all comes back by itself.
func TestNearlyFullDisk(t *testing.T) {
	disk := &fakeDisk{percent: 50}
	s := mustOpen(t, t.TempDir(), Options{Space: disk.space})
	defer s.Close()
	var out tally
	w := mustWriter(t, s, WriterOptions{Release: out.take, After: patient})
	step, kept, given := start, 0, 0
	for _, row := range []struct {
		percent      float64
		err          error
		low, stopped bool
		word         string
	}{
		{50, nil, false, false, ""},
		{15.1, nil, false, false, ""},
		{14.9, nil, true, false, "14.9 %"},
		{15.5, nil, true, false, "15.5 %"}, // a point more ends it
		{16.5, nil, false, false, ""},
		{5.1, nil, true, false, "below 5 %"},
		{4.9, nil, true, true, "4.9 %"},
		{0.1, nil, true, true, "are not kept"},
		{5.9, nil, true, true, "5.9 %"},
		{5.9, errors.New("no answer"), true, true, ""}, // stays as it was
		{6.1, nil, true, false, "6.1 %"},
		{40, nil, false, false, ""},
	} {
		disk.set(row.percent, row.err)
		for range 3 {
			step += sensors.Second
			w.Submit(Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, 2), Issues: []Issue{issueOf(step)}})
			eventually(t, "a release", func() bool { r, u := out.counts(); return r+u == int(step-start)/1000 })
			if row.stopped {
				given++
			} else {
				kept++
			}
		}
		h := s.Health()
		if (h.SpaceLow != "") != row.low || h.ReadingsStopped != row.stopped || !strings.Contains(h.SpaceLow, row.word) || h.Degraded {
			t.Errorf("%v %% free: %+v", row.percent, h)
		}
	}
	mustCloseWriter(t, w)
	recorded, unrecorded := out.counts()
	h := s.Health()
	gap, gaps := gapsOf(t, s)
	if unrecorded != 0 || recorded != kept+given || h.Steps != uint64(kept) || h.StepsDropped != uint64(given) || h.ReadingsDropped != uint64(8*given) {
		t.Errorf("%d recorded, %d not; %d steps kept; %+v", recorded, unrecorded, kept, h)
	}
	if gap.Steps != uint64(given) || gap.Readings != uint64(8*given) || !strings.Contains(gap.Why, "nearly full") || gaps != 2 {
		t.Errorf("%d gaps, together %+v", gaps, gap)
	}
	if r := mustVerify(t, s); r.Steps != uint64(kept) {
		t.Errorf("report %+v", r)
	}
}

func TestReserveGrowsAndStays(t *testing.T) {
	dir := t.TempDir()
	disk := &fakeDisk{percent: 50}
	for range 2 { // the second start finds it whole
		s := mustOpen(t, dir, Options{Space: disk.space})
		w := &Writer{s: s}
		for i := range 20 {
			before := s.Health().Reserve
			w.watchSpace(&round{})
			if after := s.Health().Reserve; after > before+reserveChunk && i > 0 {
				t.Errorf("it grew from %d to %d at once", before, after)
			}
		}
		info, err := os.Stat(filepath.Join(dir, reserveName))
		if err != nil || info.Size() != reserveSize || s.Health().Reserve != reserveSize {
			t.Errorf("%v, %+v, %+v", err, info, s.Health())
		}
		if err := s.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// TestFullDiskWithReserve fills a small disk and frees it again: every alert
// is recorded, readings are given up and named, and come back.
func TestFullDiskWithReserve(t *testing.T) {
	dir := tmpfs(t)
	s := mustOpen(t, dir, Options{Space: func() (Space, error) { return DiskSpace(dir) }})
	defer s.Close()
	var out tally
	w := mustWriter(t, s, WriterOptions{Release: out.take, After: patient})
	step, issues := start, 0
	submit := func() {
		step += sensors.Second
		w.Submit(Batch{Step: step, Stations: stationIDs, Readings: readingsOf(step, len(stationIDs)), Issues: []Issue{issueOf(step)}})
		issues++
		eventually(t, "a release", func() bool { r, u := out.counts(); return r+u == issues })
	}
	const whole = (4 << 20) / reserveShare
	ballast := filepath.Join(dir, "ballast")
	for round := range 10 {
		eventually(t, "a whole reserve", func() bool { submit(); return s.Health().Reserve == whole && !s.Health().ReadingsStopped })
		fillDisk(t, ballast)
		for range 30 {
			submit()
		}
		if h := s.Health(); !h.ReadingsStopped || h.SpaceLow == "" {
			t.Fatalf("round %d: a full disk is not noticed: %+v", round, h)
		}
		if err := os.Remove(ballast); err != nil {
			t.Fatal(err)
		}
		// After a disk that was full, readings are tried again after a minute.
		eventually(t, "readings again", func() bool { submit(); return !s.Health().ReadingsStopped })
	}
	mustCloseWriter(t, w)
	recorded, unrecorded := out.counts()
	if unrecorded > 0 || recorded != issues || len(journalled(t, s)) != issues {
		t.Errorf("%d recorded, %d not, %d in the journal", recorded, unrecorded, len(journalled(t, s)))
	}
	h, r := s.Health(), mustVerify(t, s)
	gap, _ := gapsOf(t, s)
	if h.StepsDropped == 0 || gap.Steps != h.StepsDropped || r.Steps+gap.Steps != uint64(issues) {
		t.Errorf("%d steps there, %d in gaps, %d handed over: %+v", r.Steps, gap.Steps, issues, h)
	}
	t.Logf("%d alerts, all recorded; %d steps of readings kept, %d given up; %d failed commits", issues, r.Steps, gap.Steps, h.Failed)
}

func TestDiskSpace(t *testing.T) {
	dir := tmpfs(t)
	before, err := DiskSpace(dir)
	if err != nil || before.Total != 4<<20 || before.Free > before.Total || before.percent() < 90 {
		t.Errorf("an empty disk of 4 MiB: %+v, %v", before, err)
	}
	fillDisk(t, filepath.Join(dir, "ballast"))
	if after, err := DiskSpace(dir); err != nil || after.Free != 0 || after.Total != 4<<20 || after.percent() != 0 {
		t.Errorf("a full disk of 4 MiB: %+v, %v", after, err)
	}
	if _, err := DiskSpace(filepath.Join(dir, "none")); err == nil {
		t.Error("a directory that is not there has free space")
	}
	if p := (Space{}).percent(); p != 100 {
		t.Errorf("an unknown disk is %v %% free", p)
	}
}
