package history

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"
	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

const (
	journalName = "journal.db"
	dayPrefix   = "readings-"
	daySuffix   = ".db"
	dayLayoutGo = "2006-01-02"
)

// Options are the settings of a Store.
type Options struct {
	// Keep is how long readings are kept: Prune deletes the days that are
	// older. 0 keeps them for good. The journal is always kept.
	Keep time.Duration
	// LockWait is how long Open waits for another process to let go of a
	// file. 0 is 1 s.
	LockWait time.Duration
	// Space tells how much of the disk is free, DiskSpace in life. With nil
	// the disk is not watched.
	Space func() (Space, error)
	Log   zerolog.Logger
}

// Store is a history directory. Its methods may be called from any goroutine.
type Store struct {
	dir      string
	opts     Options
	keep     atomic.Int64 // Options.Keep, until Retain
	readOnly bool
	window   sensors.Instant // of folding; less than foldWindow in tests only
	shelf    shelf
	journal  *file // held open; nil when read-only
	head     head  // end of the chain; after Open only the Writer touches it
	ends     heads // of the days; likewise
	writing  atomic.Bool

	retention sync.Mutex // held while holds are read and what they do not cover is deleted

	healthMu sync.Mutex // writers of health
	health   atomic.Pointer[Health]
}

// Open opens the history in dir for the daemon and creates what is missing.
// ErrInUse says that another process has it. A damaged file is set aside under
// a dated name and begun anew; Health().Damage says so.
func Open(dir string, opts Options) (*Store, error) {
	if err := os.MkdirAll(dir, 0o750); err != nil {
		return nil, fmt.Errorf("create the history directory: %w", err)
	}
	s := newStore(dir, opts, false)
	_, statErr := os.Lstat(filepath.Join(dir, journalName))
	j, err := s.shelf.acquire(journalName, journalLayout(), true)
	if err != nil {
		return nil, fmt.Errorf("open the history: %w", err)
	}
	s.journal = j
	removeLeftovers(dir) // only now: the lock says that nobody else is at work
	if days, err := s.days(); err == nil && len(days) > 0 && errors.Is(statErr, os.ErrNotExist) {
		s.reportDamage(journalName + " was missing although readings are kept: a new one is begun")
	}
	if err := s.checkJournal(); err != nil {
		return nil, errors.Join(err, s.Close())
	}
	if last, ok, err := s.LastStep(); err == nil && ok {
		s.setHealth(func(h *Health) { h.LastStep = last })
	}
	return s, nil
}

// ReadOnly opens the history in dir for reading while no daemon runs. It
// holds a file only while it reads from it. With a damaged journal it opens,
// too: what asks for records then fails, Verify says why, and the readings are
// there.
func ReadOnly(dir string) (*Store, error) {
	s := newStore(dir, Options{}, true)
	j, err := s.acquireJournal()
	if isDamage(err) {
		return s, nil
	}
	if err != nil {
		return nil, fmt.Errorf("open the history: %w", err)
	}
	return s, s.shelf.release(j)
}

func newStore(dir string, opts Options, readOnly bool) *Store {
	if opts.LockWait <= 0 {
		opts.LockWait = time.Second
	}
	s := &Store{dir: dir, opts: opts, readOnly: readOnly, window: foldWindow}
	s.keep.Store(int64(opts.Keep))
	s.health.Store(&Health{})
	s.shelf = shelf{dir: dir, readOnly: readOnly, lockWait: opts.LockWait, report: s.reportDamage, open: map[string]*file{}}
	return s
}

// Close closes the files. The Writer must have been closed before.
func (s *Store) Close() error {
	if s.journal == nil {
		return nil
	}
	j := s.journal
	s.journal = nil
	return s.shelf.release(j)
}

// Health is the state of the history now.
func (s *Store) Health() Health { return *s.health.Load() }

func (s *Store) setHealth(change func(*Health)) {
	s.healthMu.Lock()
	defer s.healthMu.Unlock()
	h := *s.health.Load()
	change(&h)
	s.health.Store(&h)
}

func (s *Store) reportDamage(what string) {
	s.opts.Log.Error().Str("component", "history").Msg(what)
	s.setHealth(func(h *Health) {
		// A copy: earlier values of Health share the old array.
		h.Damage = append(slices.Clone(h.Damage), what)
	})
}

// checkJournal walks the chain, takes up its end and mends the index.
func (s *Store) checkJournal() error {
	c, err := walkChain(s.journal)
	if err != nil {
		return err
	}
	if c.first != 0 {
		s.reportDamage(fmt.Sprintf("%s: the chain is broken at record %d (%d broken in all); what is written goes on after the last record",
			journalName, c.first, c.broken))
	}
	s.head, s.ends = c.head, c.days
	s.tellHead()
	if err := s.upgradeJournal(); err != nil {
		return err
	}
	same := false
	err = s.journal.view(func(tx *bolt.Tx) error {
		same = sameIndex(tx, c.index)
		return nil
	})
	if err != nil || same {
		return err
	}
	s.reportDamage(journalName + ": the index of events did not match the records and is rebuilt")
	return s.journal.update(func(tx *bolt.Tx) error { return rebuildIndex(tx, c.index) })
}

// acquireJournal gives the journal for reading; release it afterwards.
func (s *Store) acquireJournal() (*file, error) {
	return s.shelf.acquire(journalName, journalLayout(), false)
}

func (s *Store) withJournal(fn func(*file) error) error {
	j, err := s.acquireJournal()
	if err != nil {
		return err
	}
	return errors.Join(fn(j), s.shelf.release(j))
}

// dayOf names the UTC day of a step: 2006-01-02.
func dayOf(step sensors.Instant) string { return step.Time().Format(dayLayoutGo) }

func dayName(day string) string { return dayPrefix + day + daySuffix }

// days lists the days that have a file of readings, ascending.
func (s *Store) days() ([]string, error) {
	entries, err := os.ReadDir(s.dir)
	if err != nil {
		return nil, fmt.Errorf("list the history: %w", err)
	}
	var days []string
	for _, e := range entries { // sorted by name, and so by day
		day, ok := strings.CutPrefix(e.Name(), dayPrefix)
		if day, ok2 := strings.CutSuffix(day, daySuffix); ok && ok2 {
			if _, err := time.Parse(dayLayoutGo, day); err == nil {
				days = append(days, day)
			}
		}
	}
	return days, nil
}

// shelf holds the open files. A file is opened once a process, whoever asks,
// because the lock on it would keep out a second opening.
type shelf struct {
	dir      string
	readOnly bool
	lockWait time.Duration
	report   func(string)

	mu   sync.Mutex
	open map[string]*file
}

func (s *shelf) acquire(name string, l layout, create bool) (*file, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if f := s.open[name]; f != nil {
		f.refs++
		return f, nil
	}
	f := &file{path: filepath.Join(s.dir, name), layout: l, readOnly: s.readOnly, lockWait: s.lockWait, report: s.report, refs: 1}
	if err := f.open(create); err != nil {
		return nil, err
	}
	s.open[name] = f
	return f, nil
}

func (s *shelf) release(f *file) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if f.refs--; f.refs > 0 {
		return nil
	}
	delete(s.open, filepath.Base(f.path))
	return f.close()
}

func (s *shelf) inUse(name string) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.open[name] != nil
}
