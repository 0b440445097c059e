package history

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"runtime/debug"
	"strings"
	"sync"
	"time"

	bolt "go.etcd.io/bbolt"
)

// The buckets. A file that lacks one of its own is damaged.
const (
	bucketAbout    = "about"
	bucketRecords  = "records"
	bucketEvents   = "events"
	bucketIDs      = "ids"
	bucketPeople   = "people"
	bucketSteps    = "steps"
	bucketLate     = "late"
	bucketStations = "stations"
	bucketBlocks   = "blocks"
)

// ErrInUse is a history directory that another process holds open.
var ErrInUse = errors.New("the history is in use by another process: " +
	"stop the daemon, or ask it through its HTTP address instead of its directory")

// errClosed is a file between closing and opening after a failed write.
var errClosed = errors.New("the file is being opened again after a failed write")

// layout is what tells the two sorts of file apart.
type layout struct {
	format  string // content of about/format
	buckets []string
	older   map[string][]string // formats of earlier versions that are read, each with its buckets
	// salvage fills a new file with what an old, damaged one still holds.
	salvage func(path string, db *bolt.DB, report func(string)) error
	alloc   int // the file grows in steps of so many bytes
	mapped  int // address space to begin with, so that growth rarely waits for a reader
}

func journalLayout() layout {
	return layout{
		format:  "sockline journal 2",
		buckets: []string{bucketRecords, bucketEvents, bucketIDs, bucketPeople},
		salvage: salvageNewest,
		older:   map[string][]string{"sockline journal 1": {bucketRecords, bucketEvents, bucketIDs}},
		alloc:   64 << 10,
		mapped:  16 << 20,
	}
}

func dayLayout() layout {
	return layout{
		format:  "sockline readings 2",
		buckets: []string{bucketSteps, bucketLate, bucketStations, bucketBlocks},
		salvage: salvageReadings,
		older:   map[string][]string{"sockline readings 1": {bucketSteps, bucketLate, bucketStations}},
		alloc:   16 << 10, // small against the day of a few stations
		mapped:  32 << 20,
	}
}

// file is one open database file. Only one goroutine
// at a time calls update: Open, then the Writer.
type file struct {
	path     string
	layout   layout
	readOnly bool
	lockWait time.Duration
	report   func(what string) // damage found

	mu      sync.RWMutex // db is replaced by reopen
	db      *bolt.DB
	suspect bool // the last update failed; only the Writer uses it
	refs    int  // guarded by the shelf
}

// open opens the file, which must exist unless create is set. A damaged file
// is set aside under a dated name, and a new one begun with what it still
// holds, an empty one only where create is set; read-only, it is left alone
// and the error says so.
func (f *file) open(create bool) error {
	var damage error
	for range 3 {
		if _, err := os.Lstat(f.path); errors.Is(err, os.ErrNotExist) {
			switch {
			case f.readOnly, !create && damage == nil:
				return fmt.Errorf("open %s: %w", f.path, os.ErrNotExist)
			case !create && !readingsAside(f.path):
				return damage
			}
			if err := createFile(f.path, f.layout, f.report); err != nil {
				return err
			}
		}
		db, err := f.openBolt()
		if err == nil {
			f.db = db
			return nil
		}
		if !isDamage(err) || f.readOnly {
			return err
		}
		damage = err
		// Set aside by openBolt: the next round begins a new file.
	}
	return fmt.Errorf("open %s: damaged again each time it is begun anew; check the disk: %w", f.path, damage)
}

func (f *file) openBolt() (*bolt.DB, error) {
	opts := &bolt.Options{
		Timeout:         max(f.lockWait, 100*time.Millisecond),
		FreelistType:    bolt.FreelistMapType,
		NoStatistics:    true,
		PageSize:        pageSize,
		InitialMmapSize: f.layout.mapped,
		ReadOnly:        f.readOnly,
		// The hook runs before the library maps the file. It takes the lock
		// itself, because a file that somebody else is writing to must be
		// neither inspected nor set aside; the library's own lock on the same
		// descriptor then succeeds at once.
		OpenFile: f.openLocked,
	}
	var db *bolt.DB
	err := guard(func() (err error) {
		db, err = bolt.Open(f.path, 0o640, opts)
		return err
	})
	if err == nil {
		db.AllocSize = f.layout.alloc
		if err = guard(func() error { return db.View(f.layout.check) }); err != nil {
			if isDamage(err) && !f.readOnly {
				f.setAside(err)
			}
			_ = db.Close()
		}
	}
	if err != nil {
		return nil, fmt.Errorf("open %s: %w", f.path, err)
	}
	return db, nil
}

func (f *file) openLocked(path string, flag int, perm os.FileMode) (*os.File, error) {
	osFile, err := os.OpenFile(path, flag&^os.O_CREATE, perm)
	if err != nil {
		return nil, err
	}
	err = f.lockAndInspect(osFile)
	if err != nil {
		_ = osFile.Close()
		return nil, err
	}
	return osFile, nil
}

func (f *file) lockAndInspect(osFile *os.File) error {
	const pause = 50 * time.Millisecond
	for waited := time.Duration(0); ; waited += pause {
		taken, err := lockFile(osFile, f.readOnly)
		if err != nil {
			return fmt.Errorf("lock: %w", err)
		}
		if taken {
			break
		}
		if waited >= f.lockWait {
			return ErrInUse
		}
		<-time.After(pause)
	}
	opened, err := osFile.Stat()
	if err != nil {
		return err
	}
	// While this one waited, the holder may have set the file aside.
	if named, err := os.Stat(f.path); err != nil || !os.SameFile(opened, named) {
		return ErrInUse
	}
	notes, err := inspect(osFile, opened.Size())
	if err != nil {
		if isDamage(err) && !f.readOnly {
			f.setAside(err)
		}
		return err
	}
	for _, note := range notes {
		f.report(fmt.Sprintf("%s: %s", f.path, note))
	}
	return nil
}

// setAside renames the damaged file while its lock is held. The name carries
// the time of the last write to it.
func (f *file) setAside(why error) {
	stamp := "unknown"
	if info, err := os.Stat(f.path); err == nil {
		stamp = info.ModTime().UTC().Format("20060102T150405Z")
	}
	for i := 1; ; i++ {
		name := fmt.Sprintf("%s.damaged-%s", f.path, stamp)
		if i > 1 {
			name = fmt.Sprintf("%s-%d", name, i)
		}
		if _, err := os.Lstat(name); err == nil {
			continue
		}
		if err := os.Rename(f.path, name); err != nil {
			f.report(fmt.Sprintf("%s is damaged (%v) and could not be set aside: %v", f.path, why, err))
			return
		}
		f.report(fmt.Sprintf("%s was damaged (%v) and is set aside as %s", f.path, why, filepath.Base(name)))
		_ = syncDir(filepath.Dir(f.path))
		return
	}
}

// check finds out whether the file is of this sort and complete.
func (l layout) check(tx *bolt.Tx) error {
	about := tx.Bucket([]byte(bucketAbout))
	if about == nil {
		return damaged("the bucket %q is missing", bucketAbout)
	}
	key := []byte("format")
	format, err := unseal(key, about.Get(key))
	if err != nil {
		return damaged("its format line %v", err)
	}
	buckets, known := l.older[string(format)]
	if string(format) == l.format {
		buckets, known = l.buckets, true
	}
	if !known {
		return fmt.Errorf("it holds %q, this version reads %q: use the version that wrote it", format, l.format)
	}
	for _, name := range buckets {
		if tx.Bucket([]byte(name)) == nil {
			return damaged("the bucket %q is missing", name)
		}
	}
	return nil
}

// markFormat says what format a file has.
func markFormat(tx *bolt.Tx, l layout) error {
	key := []byte("format")
	return tx.Bucket([]byte(bucketAbout)).Put(key, seal(key, []byte(l.format)))
}

// createFile makes an empty file under a temporary name and gives it its own
// only when it is whole and on disk: power lost while a database is being
// initialised leaves one that cannot be opened.
func createFile(path string, l layout, report func(string)) error {
	tmp, err := os.CreateTemp(filepath.Dir(path), filepath.Base(path)+".*.new")
	if err != nil {
		return fmt.Errorf("create %s: %w", path, err)
	}
	name := tmp.Name()
	defer os.Remove(name) // after the link, the temporary name is one too many
	if err := tmp.Close(); err != nil {
		return fmt.Errorf("create %s: %w", path, err)
	}
	db, err := bolt.Open(name, 0o640, &bolt.Options{
		Timeout: time.Second, FreelistType: bolt.FreelistMapType, NoStatistics: true, PageSize: pageSize,
	})
	if err != nil {
		return fmt.Errorf("create %s: %w", path, err)
	}
	err = db.Update(func(tx *bolt.Tx) error {
		if _, err := tx.CreateBucket([]byte(bucketAbout)); err != nil {
			return err
		}
		if err := markFormat(tx, l); err != nil {
			return err
		}
		for _, name := range l.buckets {
			if _, err := tx.CreateBucket([]byte(name)); err != nil {
				return err
			}
		}
		return nil
	})
	if err == nil && l.salvage != nil {
		err = l.salvage(path, db, report)
	}
	if err = errors.Join(err, db.Close(), syncPath(name)); err != nil {
		return fmt.Errorf("create %s: %w", path, err)
	}
	// A link, not a rename: should two processes get here at once, the second
	// must not replace a file that the first has already locked.
	if err = os.Link(name, path); err != nil && !errors.Is(err, os.ErrExist) {
		err = os.Rename(name, path) // a file system without links
	}
	if err != nil && !errors.Is(err, os.ErrExist) {
		return fmt.Errorf("create %s: %w", path, err)
	}
	return syncDir(filepath.Dir(path))
}

// removeLeftovers deletes temporary files of a start that was cut off.
func removeLeftovers(dir string) {
	entries, err := os.ReadDir(dir)
	if err != nil {
		return
	}
	for _, e := range entries {
		if strings.HasSuffix(e.Name(), ".new") && strings.Contains(e.Name(), ".db.") {
			_ = os.Remove(filepath.Join(dir, e.Name()))
		}
	}
}

// view runs fn in a short read transaction. fn must copy what it keeps: the
// bytes it is shown are gone with the transaction.
func (f *file) view(fn func(*bolt.Tx) error) error {
	f.mu.RLock()
	defer f.mu.RUnlock()
	if f.db == nil {
		return fmt.Errorf("read %s: %w", f.path, errClosed)
	}
	if err := guard(func() error { return f.db.View(fn) }); err != nil {
		return fmt.Errorf("read %s: %w", f.path, err)
	}
	return nil
}

// update runs fn in a write transaction and commits it. After an error the
// outcome is unknown: the transaction may be in force. The caller then writes
// the same keys once more; the next update opens the file again before that.
func (f *file) update(fn func(*bolt.Tx) error) error {
	if f.suspect {
		if err := f.reopen(); err != nil {
			return err
		}
		f.suspect = false
	}
	f.mu.RLock()
	defer f.mu.RUnlock()
	if err := guard(func() error { return f.db.Update(fn) }); err != nil {
		f.suspect = true
		return fmt.Errorf("write %s: %w", f.path, err)
	}
	return nil
}

// reopen closes the file and opens it from the disk again.
//
// A write that failed may yet be visible (bbolt syncs the data, then the head;
// only the second of the two failed). Writing the same keys again is then
// enough to make them durable: the data was synced before the head was
// written, and the new commit writes and syncs the other head. If the first
// sync failed, the old state is in force and everything is written again.
func (f *file) reopen() error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.db != nil {
		db := f.db
		f.db = nil
		if err := guard(db.Close); err != nil {
			return fmt.Errorf("close %s: %w", f.path, err)
		}
	}
	return f.open(true)
}

func (f *file) close() error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.db == nil {
		return nil
	}
	db := f.db
	f.db = nil
	if err := guard(db.Close); err != nil {
		return fmt.Errorf("close %s: %w", f.path, err)
	}
	return nil
}

// guard turns a panic of the library, or a fault while reading the mapped
// file (a disk that dies, a file cut short by hand), into an error.
func guard(fn func() error) (err error) {
	old := debug.SetPanicOnFault(true)
	defer debug.SetPanicOnFault(old)
	defer func() {
		if p := recover(); p != nil {
			err = damaged("reading it failed: %v", p)
		}
	}()
	return fn()
}
