package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"sync"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/page"
	"sockline/alerting/wording"
)

// reopenEvery is how often a history that could not be opened is tried again.
const reopenEvery = 5 * time.Second

// archive is the history as the daemon uses it: it may fail to open, and is
// then tried again, while alerts go out unrecorded.
type archive struct {
	dir     string
	opts    history.Options
	log     zerolog.Logger
	release func(wording.Notice)        // marked as recorded or not; from one goroutine at a time
	opened  func()                      // called when it could be opened at last
	hatch   func(context.Context) error // closes the socket for commands

	mu      sync.Mutex
	store   *history.Store // nil while not open
	writer  *history.Writer
	waiting map[issueKey]wording.Notice // handed to the writer, not yet released
	why     string                      // why it is not open
	tries   uint64
	direct  uint64 // issues released without a writer
	closed  bool
}

// issueKey names one issue of an alert.
type issueKey struct {
	id       string
	revision int
}

func newArchive(dir string, opts history.Options, release func(wording.Notice)) *archive {
	return &archive{dir: dir, opts: opts, log: opts.Log, release: release, opened: func() {}, hatch: func(context.Context) error { return nil }, waiting: make(map[issueKey]wording.Notice)}
}

// open tries to open the history; its error is also kept for health.
func (a *archive) open() error {
	a.mu.Lock()
	opts := a.opts
	a.mu.Unlock()
	store, err := history.Open(a.dir, opts)
	var writer *history.Writer
	if err == nil {
		if writer, err = store.Writer(history.WriterOptions{Release: a.released}); err != nil {
			err = errors.Join(err, store.Close())
		}
	}
	a.mu.Lock()
	defer a.mu.Unlock()
	a.tries++
	if err != nil {
		if a.why == "" {
			a.log.Error().Err(err).Str("directory", a.dir).
				Msg("the history cannot be opened; alerts go out unrecorded, and it is tried again")
		}
		a.why = err.Error()
		return fmt.Errorf("open the history in %s: %w", a.dir, err)
	}
	if a.why != "" {
		a.log.Info().Str("directory", a.dir).Msg("the history is open now")
	}
	a.why, a.store, a.writer = "", store, writer
	return nil
}

// keepTrying opens the history as soon as that can be done.
func (a *archive) keepTrying(ctx context.Context) {
	tick := time.NewTicker(reopenEvery)
	defer tick.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
		if !a.isOpen() && a.open() == nil { // why not is kept for health
			a.opened()
		}
	}
}

func (a *archive) isOpen() bool {
	a.mu.Lock()
	defer a.mu.Unlock()
	return a.writer != nil
}

// submit hands a step over together with the notices of its issues, in the
// same order. It never waits for the disk.
func (a *archive) submit(b history.Batch, notices []wording.Notice) {
	a.mu.Lock()
	w := a.writer
	if w == nil {
		a.direct += uint64(len(notices))
	} else {
		for _, n := range notices {
			a.waiting[keyOf(n)] = n
		}
	}
	a.mu.Unlock()
	if w != nil {
		w.Submit(b)
		return
	}
	for _, n := range notices {
		a.release(n.WithRecorded(false))
	}
}

func keyOf(n wording.Notice) issueKey { return issueKey{n.ID(), n.Alert().Revision} }

// released is called by the writer when an issue is on disk, or has waited
// long enough.
func (a *archive) released(r history.Released) {
	key := issueKey{r.Issue.Alert.ID, r.Issue.Alert.Revision}
	a.mu.Lock()
	n, ok := a.waiting[key]
	delete(a.waiting, key)
	a.mu.Unlock()
	if ok {
		a.release(n.WithRecorded(r.Recorded))
	}
}

// record keeps an entry that belongs to no step, if there is a history.
func (a *archive) record(e history.Entry) {
	a.mu.Lock()
	w := a.writer
	a.mu.Unlock()
	if w != nil {
		w.Record(e)
	}
}

// recordDurably keeps an entry and waits for the disk. After an error of ctx it
// waits in memory; after any other it is not kept.
func (a *archive) recordDurably(ctx context.Context, e history.Entry) (uint64, error) {
	a.mu.Lock()
	w, why := a.writer, a.why
	a.mu.Unlock()
	if w == nil {
		return 0, fmt.Errorf("the history is not open: %s", why)
	}
	return w.RecordDurably(ctx, e)
}

// health is that of the store, or why there is none.
func (a *archive) health() history.Health {
	a.mu.Lock()
	defer a.mu.Unlock()
	if a.store == nil {
		return history.Health{Degraded: true, Reason: a.why, Unrecorded: a.direct, Failed: a.tries}
	}
	h := a.store.Health()
	h.Unrecorded += a.direct
	return h
}

// progress grows as long as the history is not stuck, even if it fails.
func (a *archive) progress() uint64 {
	h := a.health()
	return h.Commits + h.Failed
}

// close writes what waits. When ctx ends first, the files are left as they
// are: the next start finds them sound up to the last commit.
func (a *archive) close(ctx context.Context) error {
	a.mu.Lock()
	w, s := a.writer, a.store
	a.closed = true
	a.mu.Unlock()
	if w == nil {
		return nil
	}
	if err := w.Close(ctx); err != nil {
		return err
	}
	return s.Close()
}

// reading is the store to read from.
func (a *archive) reading() (*history.Store, error) {
	a.mu.Lock()
	defer a.mu.Unlock()
	switch {
	case a.closed:
		return nil, errors.New("the program is stopping")
	case a.store == nil:
		return nil, fmt.Errorf("the history is not open: %s", a.why)
	}
	return a.store, nil
}

// Events lists events for the page.
func (a *archive) Events(q page.EventQuery) ([]page.Event, error) {
	s, err := a.reading()
	if err != nil {
		return nil, err
	}
	f := history.Filter{From: q.From, To: q.To, Open: q.Open}
	if q.From == 0 && !selects(q) {
		f.Limit = q.Limit
	}
	// The store counts an event by when it was open, the page by when it
	// opened: the older ones are left out here.
	found, err := s.Events(f)
	if err != nil && len(found) == 0 {
		return nil, err
	}
	if err != nil { // some are damaged; the others can be shown
		a.log.Error().Err(err).Msg("some events cannot be read")
	}
	var out []page.Event
	for _, e := range found {
		if q.Limit > 0 && len(out) == q.Limit {
			break
		}
		if e.Opened < q.From || !fits(q, e.Object) {
			continue
		}
		highest := highestLevel(s, e)
		if highest < q.Level {
			continue
		}
		out = append(out, page.Event{ID: e.ID, Highest: highest, Object: e.Object})
	}
	return out, nil
}

// selects reports whether a query looks into the events.
func selects(q page.EventQuery) bool {
	return q.Runway != "" || q.Operation != "" || q.Kind != "" || q.Cause != "" || q.Level > alerting.NoLevel
}

// fits reports whether an alert object is one of those that are asked for.
func fits(q page.EventQuery, object []byte) bool {
	if q.Runway == "" && q.Operation == "" && q.Kind == "" && q.Cause == "" {
		return true
	}
	var said struct{ Runway, Operation, Kind, Cause string }
	if json.Unmarshal(object, &said) != nil {
		return false
	}
	same := func(want, is string) bool { return want == "" || want == is }
	return same(q.Runway, said.Runway) && same(q.Operation, said.Operation) && same(q.Kind, said.Kind) && same(q.Cause, said.Cause)
}

// highestLevel is the highest level that an event had: its newest object may
// tell of a lower one. What of it cannot be read is passed over.
func highestLevel(s *history.Store, e history.EventSummary) alerting.Level {
	objects := [][]byte{e.Object}
	if whole, err := s.Event(e.ID); err == nil {
		objects = whole.Objects
	}
	highest := alerting.NoLevel
	for _, o := range objects {
		// The keys of an object and their order are a contract, and reading all
		// of it would cost ten times as much.
		_, rest, _ := bytes.Cut(o, []byte(`"level":"`))
		word, _, _ := bytes.Cut(rest, []byte(`"`))
		if l, ok := alerting.LevelOf(string(word)); ok {
			highest = max(highest, l)
		}
	}
	return highest
}

// Event is every issue of one event for the page.
func (a *archive) Event(id string) ([]json.RawMessage, error) {
	s, err := a.reading()
	if err != nil {
		return nil, err
	}
	e, err := s.Event(id)
	if errors.Is(err, history.ErrNoEvent) {
		return nil, page.ErrNoEvent
	}
	if err != nil {
		return nil, err
	}
	out := make([]json.RawMessage, len(e.Objects))
	for i, o := range e.Objects {
		out[i] = o
	}
	return out, nil
}
