package history

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"sync"
	"syscall"
	"time"

	bolt "go.etcd.io/bbolt"
)

// After a failure the first try comes soon, later ones spare the disk.
const (
	firstRetry = 250 * time.Millisecond
	lastRetry  = 2 * time.Second
)

// WriterOptions are the settings of a Writer.
type WriterOptions struct {
	// Release passes an issue on. It is called from one goroutine, in the
	// order of submission, and must not wait for anything.
	Release func(Released)
	// After is the timer, time.After if nil.
	After func(time.Duration) <-chan time.Time
}

// Writer adds to a Store. It has two goroutines: one waits for the disk, the
// other for the first, but never longer than ReleaseWait.
type Writer struct {
	s    *Store
	opts WriterOptions

	mu      sync.Mutex // guards these three; never held while waiting for the disk
	queue   queue      // not yet taken up by a commit
	out     []outgoing // not yet released
	closing bool

	wake, wakeOut  chan struct{} // one token: look again
	stop           chan struct{} // closed: give up what is not written
	done, released chan struct{} // closed: that goroutine has ended

	// Owned by the committing goroutine.
	day      *file  // open file of readings, nil if none
	dayName  string // of day
	table    table
	folding  folding
	space    spaceGuard
	quiet    bool // this round holds no records
	reported int  // of Health.Damage, already journalled
}

// Writer starts the one writer of the store. It must be closed before the
// store is.
func (s *Store) Writer(opts WriterOptions) (*Writer, error) {
	if s.readOnly {
		return nil, errors.New("write to the history: it is open for reading only")
	}
	if !s.writing.CompareAndSwap(false, true) {
		return nil, errors.New("write to the history: it has a writer already")
	}
	if opts.After == nil {
		opts.After = time.After
	}
	if opts.Release == nil {
		opts.Release = func(Released) {}
	}
	w := &Writer{
		s: s, opts: opts,
		wake: make(chan struct{}, 1), wakeOut: make(chan struct{}, 1),
		stop: make(chan struct{}), done: make(chan struct{}), released: make(chan struct{}),
	}
	go w.run()
	go w.release()
	return w, nil
}

// Submit hands over a step. It never waits and keeps nothing of the batch but
// its issues. Without issues or entries, steps are written once a second.
func (w *Writer) Submit(b Batch) {
	it := &item{step: b.Step.CeilSecond(), hasStep: true, stations: b.Stations, readings: len(b.Readings) + len(b.Late)}
	it.body = appendReadings(nil, it.step, b.Readings)
	if len(b.Late) > 0 {
		it.late, it.lates = appendLate(nil, it.step, b.Late), len(b.Late)
	}
	for _, e := range b.Entries {
		it.drafts = append(it.drafts, draftOf(e))
	}
	o := outgoing{item: it, issues: b.Issues}
	for _, is := range b.Issues {
		payload, err := encodeIssue(is)
		if err != nil {
			w.s.opts.Log.Error().Str("component", "history").Str("alert", is.Alert.ID).Err(err).Msg("an issue of an alert cannot be recorded")
			w.s.setHealth(func(h *Health) { h.RecordsDropped++ })
		} else {
			it.drafts = append(it.drafts, draft{kind: KindIssue, at: it.step, payload: payload})
		}
		o.encoded = append(o.encoded, err == nil)
	}
	w.push(it, o)
}

// Record hands over an entry that belongs to no step. It never waits.
func (w *Writer) Record(e Entry) {
	w.push(&item{drafts: []draft{draftOf(e)}}, outgoing{})
}

func (w *Writer) push(it *item, o outgoing) {
	if it.done == nil {
		it.done = make(chan struct{})
	}
	if len(o.issues) > 0 {
		o.deadline = w.opts.After(ReleaseWait)
	}
	w.mu.Lock()
	lost := w.queue.push(it)
	if len(o.issues) > 0 {
		w.out = append(w.out, o)
	}
	steps, records := len(w.queue.items), w.queue.records
	w.mu.Unlock()
	w.s.setHealth(func(h *Health) {
		h.WaitingSteps, h.WaitingRecords = steps, records
		h.StepsDropped += lost.Steps
		h.ReadingsDropped += lost.Readings
		h.RecordsDropped += lost.Records
		if lost != (Gap{}) && !h.Degraded {
			h.Degraded, h.Reason = true, lost.Why
		}
	})
	signal(w.wake)
	if len(o.issues) > 0 {
		signal(w.wakeOut)
	}
}

func signal(c chan struct{}) {
	select {
	case c <- struct{}{}:
	default: // the token is there already
	}
}

// Close writes what is waiting and ends the writer. When ctx ends first, what
// is not on disk is given up and the error says so; a commit that hangs in
// the disk is then left hanging, and the store must not be closed.
func (w *Writer) Close(ctx context.Context) error {
	w.mu.Lock()
	w.closing = true
	w.mu.Unlock()
	signal(w.wake)
	signal(w.wakeOut)
	var err error
	select {
	case <-w.done:
	case <-ctx.Done():
		close(w.stop)
		w.mu.Lock()
		err = fmt.Errorf("close the history: %d steps and %d records are not on disk: %w", len(w.queue.items), w.queue.records, ctx.Err())
		w.mu.Unlock()
	}
	<-w.released // at most ReleaseWait away
	return err
}

// release passes issues on in order: with their commit, or without it at the
// deadline.
func (w *Writer) release() {
	defer close(w.released)
	for {
		w.mu.Lock()
		batch, closing := w.out, w.closing
		w.out = nil
		w.mu.Unlock()
		if len(batch) == 0 {
			if closing {
				return
			}
			<-w.wakeOut
			continue
		}
		for _, o := range batch {
			recorded := w.await(o)
			for i, is := range o.issues {
				w.opts.Release(Released{Step: o.item.step, Issue: is, Recorded: recorded && o.encoded[i]})
			}
		}
	}
}

// await reports whether the item is on disk before the deadline.
func (w *Writer) await(o outgoing) bool {
	w.mu.Lock()
	done := o.item.done // nil once dropped
	w.mu.Unlock()
	select {
	case <-done:
		return true
	case <-o.deadline:
	}
	select {
	case <-done: // both at once: it is recorded
		return true
	default:
	}
	w.s.setHealth(func(h *Health) {
		h.Unrecorded += uint64(len(o.issues))
		if !h.Degraded {
			h.Degraded = true
			h.Reason = fmt.Sprintf("the disk has not taken an alert within %s; alerts go out unrecorded until it does: check the disk and what else uses it", ReleaseWait)
		}
	})
	return false
}

// run takes what is queued and commits it, in order, until closed.
func (w *Writer) run() {
	defer close(w.done)
	defer w.s.writing.Store(false)
	defer w.closeDay()
	now := make(chan time.Time)
	close(now)
	for pace := (<-chan time.Time)(now); ; pace = w.opts.After(CommitEvery) {
		items := w.take(pace)
		if items == nil {
			return
		}
		r := &round{items: items}
		for wait := firstRetry; ; wait = min(2*wait, lastRetry) {
			w.watchSpace(r)
			err := w.commit(r)
			if err == nil {
				break
			}
			w.failed(err)
			if w.makeRoom(err) {
				continue // at once: there is room again
			}
			select {
			case <-w.opts.After(wait):
			case <-w.stop:
				return
			}
		}
		w.succeeded(r)
	}
}

// take waits for something to write: a record at once, readings once pace has
// passed. nil says that the writer is closed.
func (w *Writer) take(pace <-chan time.Time) []*item {
	paced := false
	for {
		w.mu.Lock()
		if len(w.queue.items) > 0 && (paced || w.closing || w.queue.records > 0) {
			items := w.queue.pop(maxItemsATime)
			w.mu.Unlock()
			return w.noteDamage(items)
		}
		closing := w.closing
		w.mu.Unlock()
		if closing {
			return nil
		}
		select {
		case <-w.wake:
		case <-pace:
			paced, pace = true, nil
		case <-w.stop:
			return nil
		}
	}
}

// noteDamage puts what was found damaged since the last round in front.
func (w *Writer) noteDamage(items []*item) []*item {
	damage := w.s.Health().Damage
	if len(damage) == w.reported {
		return items
	}
	note := &item{}
	for _, what := range damage[w.reported:] {
		note.drafts = append(note.drafts, draft{kind: KindDamage, at: lastAt(items), payload: []byte(what)})
	}
	w.reported = len(damage)
	return append([]*item{note}, items...)
}

// commit writes the readings, day by day, then the records: no record is on
// disk without the readings up to its step.
func (w *Writer) commit(r *round) error {
	var (
		day  []*item
		name string
	)
	w.quiet = !slices.ContainsFunc(r.items, func(it *item) bool { return len(it.drafts) > 0 })
	for _, it := range r.items {
		if !it.hasStep {
			continue
		}
		if n := dayName(dayOf(it.step)); n != name {
			if err := w.writeDay(name, day); err != nil {
				return err
			}
			day, name = day[:0], n
		}
		day = append(day, it)
	}
	if err := w.writeDay(name, day); err != nil {
		return err
	}
	return w.writeJournal(r)
}

func (w *Writer) writeJournal(r *round) error {
	if r.values == nil {
		r.build(w.s.head)
	}
	if len(r.values) == 0 {
		return nil
	}
	if slices.ContainsFunc(r.items, (*item).holds) {
		w.s.retention.Lock() // not while old readings are being deleted
		defer w.s.retention.Unlock()
	}
	return w.s.journal.update(func(tx *bolt.Tx) error {
		// After a failure the records may be there or not, and the file may
		// have been found damaged and begun anew.
		if stored := lastRecord(tx); stored != r.start && stored != r.end {
			r.build(stored)
		}
		for i, value := range r.values {
			if err := putRecord(tx, r.start.seq+1+uint64(i), value); err != nil {
				return err
			}
		}
		return nil
	})
}

// failed notes a commit whose outcome is unknown. What it held stays in memory
// and is written again.
func (w *Writer) failed(err error) {
	w.s.setHealth(func(h *Health) {
		if h.Failed++; !h.Degraded {
			w.s.opts.Log.Error().Str("component", "history").Err(err).Msg("the history is degraded: " + mend(err))
		}
		h.Degraded = true
		h.Reason = fmt.Sprintf("%v: %s", err, mend(err))
	})
}

// mend says what helps against a failure to write.
func mend(err error) string {
	const after = "; recording goes on by itself, what waits in memory is then written"
	switch {
	case errors.Is(err, syscall.ENOSPC), errors.Is(err, syscall.EDQUOT), errors.Is(err, syscall.EFBIG):
		return "free space for it" + after
	case errors.Is(err, syscall.EACCES), errors.Is(err, syscall.EPERM), errors.Is(err, syscall.EROFS):
		return "give the daemon write access to it" + after
	case errors.Is(err, ErrInUse):
		return "end the other process" + after
	}
	return "check the disk" + after
}

// succeeded takes up the new end of the chain and lets the issues go.
func (w *Writer) succeeded(r *round) {
	if len(r.values) > 0 {
		w.s.head = r.end
		w.s.followHeads(r.values, r.start.seq+1)
	}
	w.mu.Lock()
	steps, records := len(w.queue.items), w.queue.records
	w.mu.Unlock()
	w.s.setHealth(func(h *Health) {
		h.Commits++
		h.Records += uint64(len(r.values))
		for _, it := range r.items {
			if it.hasStep {
				h.Steps++
				h.Readings += uint64(it.readings)
				h.LastStep = max(h.LastStep, it.step)
			}
		}
		h.WaitingSteps, h.WaitingRecords = steps, records
		if h.Degraded && steps == 0 {
			h.Degraded, h.Reason = false, ""
			w.s.opts.Log.Info().Str("component", "history").Msg("the history records again")
		}
	})
	for _, it := range r.items {
		if it.done != nil {
			close(it.done)
		}
	}
}
