package history

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"syscall"
)

// Space is how much of a file system there is, in bytes.
type Space struct {
	Free  uint64 // that this program may use
	Total uint64 // Free and what is used; 0: not known
}

// percent is the share that is free.
func (s Space) percent() float64 {
	if s.Total == 0 {
		return 100
	}
	return 100 * float64(s.Free) / float64(s.Total)
}

// The shares of the disk, in percent, at which it is called low and at which
// readings are given up so that events still find room; a point more ends it.
const (
	lowPercent  = 15
	stopPercent = 5
	backPercent = 1
)

// The reserve: a file that is deleted when the disk is full, for a journal of
// a year of alerts at 20 a day. On a small disk it is a sixteenth of it.
const (
	reserveName  = "reserve"
	reserveSize  = 16 << 20
	reserveShare = 16
	reserveChunk = 1 << 20 // how much of it is written a second: an alert must not wait for it
)

// After a disk turned out to be full although it tells of space (a quota),
// readings are tried again after so many rounds.
const fullRounds = 60

// A gap that goes on is journalled again after so many steps.
const gapSteps = 3600

// spaceGuard is what the committing goroutine knows of the disk.
type spaceGuard struct {
	low, stopped bool
	full         int // rounds for which readings are not tried, after the disk was full
	failed       bool
	reserve      int64 // size of the file, -1 before it was looked at
	looked       bool
	gap          Gap  // readings given up and not yet journalled
	said         bool // a gap was journalled since readings stopped
}

// watchSpace looks at the disk and, where it is nearly full, takes the
// readings out of a round that no record has been made of yet.
func (w *Writer) watchSpace(r *round) {
	if w.s.opts.Space == nil {
		return
	}
	g := &w.space
	space, err := w.s.opts.Space()
	if (err != nil) != g.failed {
		g.failed = err != nil
		w.s.opts.Log.Warn().Str("component", "history").Err(err).Msg("whether the free space of the disk can be told has changed")
	}
	if err == nil {
		percent := space.percent()
		g.low = percent < lowPercent || g.low && percent < lowPercent+backPercent
		g.stopped = percent < stopPercent || g.stopped && percent < stopPercent+backPercent
	}
	if g.full > 0 {
		g.full--
	}
	stopped := g.stopped || g.full > 0
	if err == nil && !stopped {
		w.keepReserve(space)
	}
	w.tellSpace(space, stopped)
	if r.values != nil { // its records stand: they must not change any more
		return
	}
	if stopped {
		g.giveUp(r, w.s)
	}
	if g.gap != (Gap{}) && (!stopped || !g.said || g.gap.Steps >= gapSteps) {
		r.items = append([]*item{gapItem(g.gap)}, r.items...)
		g.gap, g.said = Gap{}, stopped
	}
	if !stopped {
		g.said = false
	}
}

// giveUp takes the readings out of a round.
func (g *spaceGuard) giveUp(r *round, s *Store) {
	var lost Gap
	for _, it := range r.items {
		it.dropReadings(&lost)
	}
	if lost == (Gap{}) {
		return
	}
	lost.Why = "the disk was nearly full, and readings were not kept so that events find room"
	g.gap.merge(lost)
	s.setHealth(func(h *Health) {
		h.StepsDropped += lost.Steps
		h.ReadingsDropped += lost.Readings
	})
}

// tellSpace puts what is known into Health, and changes into the log.
func (w *Writer) tellSpace(space Space, stopped bool) {
	g := &w.space
	why := ""
	const mend = ": free some, or keep readings for a shorter time ([history] keep)"
	switch {
	case stopped && g.full > 0 && !g.stopped:
		why = "the disk of the history takes nothing more; readings are not kept, events are while the reserve lasts" + mend
	case stopped:
		why = fmt.Sprintf("%.1f %% of the disk of the history is free; readings are not kept below %d %%, events are"+mend, space.percent(), stopPercent)
	case g.low:
		why = fmt.Sprintf("%.1f %% of the disk of the history is free; below %d %% readings are not kept any more"+mend, space.percent(), stopPercent)
	}
	before := w.s.Health()
	w.s.setHealth(func(h *Health) {
		h.Space, h.SpaceLow, h.ReadingsStopped, h.Reserve = space, why, stopped, uint64(max(g.reserve, 0))
	})
	if (before.SpaceLow == "") != (why == "") || before.ReadingsStopped != stopped {
		if why == "" {
			why = "the disk of the history has room again"
		}
		w.s.opts.Log.Warn().Str("component", "history").Bool("readings_stopped", stopped).Msg(why)
	}
}

func (w *Writer) reservePath() string { return filepath.Join(w.s.dir, reserveName) }

// keepReserve lets the reserve grow to its size, a little each second and only
// while there is plenty. What it holds does not matter, and so it is never
// synced; but not zeros, which some file systems do not store.
func (w *Writer) keepReserve(space Space) {
	g := &w.space
	if !g.looked {
		g.looked = true
		if info, err := os.Stat(w.reservePath()); err == nil {
			g.reserve = info.Size()
		}
	}
	want := int64(min(reserveSize, space.Total/reserveShare))
	missing := min(want-g.reserve, reserveChunk)
	if missing <= 0 || space.Free < uint64(2*want) {
		return
	}
	f, err := os.OpenFile(w.reservePath(), os.O_CREATE|os.O_WRONLY|os.O_APPEND, 0o600)
	if err != nil {
		return // tried again with the next round; Health shows that it is small
	}
	b := make([]byte, missing)
	x := uint32(g.reserve) | 1
	for i := range b {
		x = x*1664525 + 1013904223 // Numerical Recipes, 2nd ed. 1992, sec. 7.1; from memory
		b[i] = byte(x >> 24)
	}
	n, _ := f.Write(b)
	_ = f.Close()
	g.reserve += int64(n)
}

// makeRoom deletes the reserve when the disk is full, and gives up readings
// for a while. It is true when a new try is worth it at once.
func (w *Writer) makeRoom(err error) bool {
	if w.s.opts.Space == nil || !errors.Is(err, syscall.ENOSPC) && !errors.Is(err, syscall.EDQUOT) {
		return false
	}
	first := w.space.full == 0
	w.space.full = fullRounds
	if err := os.Remove(w.reservePath()); err != nil {
		return first
	}
	w.space.reserve = 0
	w.s.opts.Log.Warn().Str("component", "history").Msg("the disk of the history is full: the reserve is given up for events")
	return true
}
