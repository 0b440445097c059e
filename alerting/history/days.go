package history

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"time"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// readChunk is how many rows one read transaction fetches: a long one would
// hold up the growth of the file, and with it the Writer.
const readChunk = 300

// rawStep is a step as stored, copied out of its transaction.
type rawStep struct {
	key, value, late []byte
}

// Readings shows fn every stored step T with from <= T < to, in order of
// time. The slices of a step are fn's to keep. A damaged step or day is left
// out, as are the readings of a station whose block is damaged; all else is
// still shown, and the error returned at the end names what is not. An error
// of fn ends the walk and is returned as it is.
func (s *Store) Readings(from, to sensors.Instant, fn func(Step) error) error {
	days, err := s.days()
	if err != nil {
		return err
	}
	var faults []error
	for _, day := range days {
		if day < dayOf(from) || day > dayOf(to) {
			continue
		}
		var stop error
		err := s.readDay(day, from, to, func(st Step, bad error) bool {
			if bad != nil {
				faults = append(faults, fmt.Errorf("%s: %w", dayName(day), bad))
				return true
			}
			stop = fn(st)
			return stop == nil
		})
		if stop != nil {
			return stop
		}
		// A day that Prune deleted since the listing is no fault.
		if err != nil && !errors.Is(err, os.ErrNotExist) {
			faults = append(faults, err)
		}
	}
	return errors.Join(faults...)
}

// Days lists the UTC days of which readings are kept, ascending: 2006-01-02.
func (s *Store) Days() ([]string, error) { return s.days() }

// readDay shows fn the steps of a day in [from, to) until fn says false. A
// step that is damaged comes as an error in its place.
func (s *Store) readDay(day string, from, to sensors.Instant, fn func(Step, error) bool) (err error) {
	f, err := s.shelf.acquire(dayName(day), dayLayout(), false)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, s.shelf.release(f)) }()
	start, err := time.Parse(dayLayoutGo, day)
	if err != nil {
		return fmt.Errorf("the name of %s: %w", f.path, err)
	}
	r := dayReader{f: f, day: sensors.At(start), from: from.CeilSecond(), to: to.CeilSecond(), fn: fn}
	r.row, r.end = stepKey(r.from), stepKey(r.to)
	for !r.done {
		var p part
		err := f.view(func(tx *bolt.Tx) (err error) {
			if r.tables == nil {
				if r.tables, err = readTables(tx); err != nil {
					return err
				}
			}
			p, err = r.take(tx)
			return err
		})
		if err != nil {
			return err
		}
		if !r.show(p) {
			return nil
		}
	}
	return nil
}

// dayReader walks the rows and the windows of a file side by side.
type dayReader struct {
	f        *file
	day      sensors.Instant // its midnight
	from, to sensors.Instant
	fn       func(Step, error) bool
	tables   map[uint64][]string
	row, end []byte // key of the next row, and of the first one that is not wanted
	window   []byte // where the next frame is sought; nil before the first
	done     bool
	scratch  scratch
}

// part is what one transaction gives: rows, then a window with the rows in it.
type part struct {
	before []rawStep
	window *rawWindow
	within []rawStep // these count where the window has the step, too
}

// take copies the next part out of a transaction.
func (r *dayReader) take(tx *bolt.Tx) (p part, err error) {
	w, key := r.seek(tx)
	upTo := r.end
	if w != nil && w.base < r.to {
		if k := stepKey(w.base); bytes.Compare(k, upTo) < 0 {
			upTo = k
		}
	} else {
		w = nil
	}
	if bytes.Compare(r.row, upTo) < 0 {
		if p.before, err = fetch(tx, r.row, upTo, readChunk); err != nil {
			return p, err
		}
		if len(p.before) == readChunk {
			r.row = append(bytes.Clone(p.before[readChunk-1].key), 0) // just past it
			return p, nil
		}
		r.row = upTo
	}
	if w == nil {
		r.done = true
		return p, nil
	}
	p.window, r.window = w, key
	if w.frame == nil {
		return p, nil
	}
	past := stepKey(w.base + sensors.Instant(w.frame.last()+1)*sensors.Second)
	if bytes.Compare(past, r.end) > 0 {
		past = r.end
	}
	if bytes.Compare(r.row, past) < 0 {
		p.within, err = fetch(tx, r.row, past, math.MaxInt)
		r.row = past
	}
	return p, err
}

// seek gives the next window, nil if there is none, and where to go on after
// it. The first is the one that from lies in.
func (r *dayReader) seek(tx *bolt.Tx) (*rawWindow, []byte) {
	b := tx.Bucket([]byte(bucketBlocks))
	if b == nil { // a file of version 1
		return nil, nil
	}
	c := b.Cursor()
	at := r.window
	if at == nil {
		at = blockKey(r.day, 0)
		if r.from >= r.day+86400*sensors.Second {
			return nil, nil
		}
		if r.from > r.day {
			at = before(c, r.from)
		}
	}
	for k, v := c.Seek(at); k != nil; k, v = c.Seek(nextBase(k)) {
		if len(k) != 5 {
			continue // is named by the check of the whole file
		}
		second, number := keyBlock(k)
		base := r.day + sensors.Instant(second)*sensors.Second
		if number != stationFrame { // blocks without their frame
			w := copyWindow(c, base, k, nil)
			return &w, nextBase(k)
		}
		w := copyWindow(c, base, k, v)
		if w.frame == nil && base+foldWindow > r.from || w.frame != nil && base+sensors.Instant(w.frame.last())*sensors.Second >= r.from {
			return &w, nextBase(k)
		}
	}
	return nil, nil
}

// before is the key of the window that begins last before the instant, or of
// the first that does not.
func before(c *bolt.Cursor, at sensors.Instant) []byte {
	key := blockKey(at, 0)
	k, _ := c.Seek(key)
	switch {
	case k == nil:
		k, _ = c.Last()
	case bytes.Equal(k, key):
		return key
	default:
		k, _ = c.Prev()
	}
	if len(k) != 5 {
		return key
	}
	return []byte{k[0], k[1], k[2], 0, 0}
}

// show passes a part on, in the order of time. It is false when fn has enough.
func (r *dayReader) show(p part) bool {
	for _, row := range p.before {
		if !r.fn(r.decode(row)) {
			return false
		}
	}
	if p.window == nil {
		return true
	}
	var steps []Step
	err := fmt.Errorf("the readings of some minutes from %s: their frame %w", p.window.base, errBlock)
	if f := p.window.frame; f != nil {
		ids, ok := r.tables[f.table]
		if !ok {
			if err = r.f.view(func(tx *bolt.Tx) (err error) { r.tables, err = readTables(tx); return err }); err == nil {
				ids, ok = r.tables[f.table]
			}
		}
		if err = fmt.Errorf("the readings of some minutes from %s: the frame %w", p.window.base, errNewTable); ok {
			steps, err = decodeWindow(*p.window, ids, &r.scratch)
		}
	}
	if err != nil && !r.fn(Step{}, err) {
		return false
	}
	rows := p.within
	for _, st := range steps {
		for len(rows) > 0 && keyStep(rows[0].key) < st.At {
			if !r.fn(r.decode(rows[0])) {
				return false
			}
			rows = rows[1:]
		}
		if len(rows) > 0 && keyStep(rows[0].key) == st.At || st.At < r.from || st.At >= r.to {
			continue // written again since it was folded, or not asked for
		}
		if !r.fn(st, nil) {
			return false
		}
	}
	for _, row := range rows {
		if !r.fn(r.decode(row)) {
			return false
		}
	}
	return true
}

// decode reads a row; the lists of stations are read again when it refers to
// one that a reload has written since.
func (r *dayReader) decode(row rawStep) (Step, error) {
	st, err := decodeStep(row, r.tables)
	if errors.Is(err, errNewTable) {
		if err = r.f.view(func(tx *bolt.Tx) (err error) { r.tables, err = readTables(tx); return err }); err == nil {
			st, err = decodeStep(row, r.tables)
		}
	}
	return st, err
}

// fetch copies at most limit rows of [from, end).
func fetch(tx *bolt.Tx, from, end []byte, limit int) ([]rawStep, error) {
	var raw []rawStep
	c, late := tx.Bucket([]byte(bucketSteps)).Cursor(), tx.Bucket([]byte(bucketLate))
	for k, v := c.Seek(from); k != nil && bytes.Compare(k, end) < 0 && len(raw) < limit; k, v = c.Next() {
		if len(k) != 8 {
			return nil, damaged("a step has a key of %d bytes", len(k))
		}
		raw = append(raw, rawStep{key: bytes.Clone(k), value: bytes.Clone(v), late: bytes.Clone(late.Get(k))})
	}
	return raw, nil
}

// readTables reads the lists of stations of a day. A damaged one is left out:
// the steps that need it then say so.
func readTables(tx *bolt.Tx) (map[uint64][]string, error) {
	tables := map[uint64][]string{}
	err := tx.Bucket([]byte(bucketStations)).ForEach(func(k, v []byte) error {
		body, err := unseal(k, v)
		if err != nil || len(k) != 4 {
			return nil
		}
		var ids []string
		if err := json.Unmarshal(body, &ids); err != nil {
			return nil
		}
		tables[uint64(binary.BigEndian.Uint32(k))] = ids
		return nil
	})
	return tables, err
}

var errNewTable = errors.New("refers to an unknown list of stations")

func decodeStep(r rawStep, tables map[uint64][]string) (Step, error) {
	at := keyStep(r.key)
	body, err := unseal(r.key, r.value)
	if err != nil {
		return Step{}, fmt.Errorf("step %s %w", at, err)
	}
	c := cursorAt(body)
	ids, ok := tables[c.Uvarint()]
	if !ok {
		return Step{}, fmt.Errorf("step %s %w", at, errNewTable)
	}
	late := c.Uvarint()
	st := Step{At: at, Stations: ids, Readings: c.readings(at, nil)}
	if c.Bad || len(c.Left) != 0 {
		return Step{}, fmt.Errorf("step %s %w", at, errBlock)
	}
	if late > 0 {
		body, err := unseal(r.key, r.late)
		if err != nil {
			return Step{}, fmt.Errorf("late readings of step %s %w", at, err)
		}
		c := cursorAt(body)
		c.Uvarint() // the same list of stations
		st.Late = c.late(at)
		if c.Bad || len(c.Left) != 0 || uint64(len(st.Late)) != late {
			return Step{}, fmt.Errorf("late readings of step %s %w", at, errBlock)
		}
	}
	return st, nil
}

// LastStep is the newest stored step; false if there is none.
func (s *Store) LastStep() (sensors.Instant, bool, error) {
	days, err := s.days()
	if err != nil {
		return 0, false, err
	}
	for i := len(days) - 1; i >= 0; i-- {
		start, err := time.Parse(dayLayoutGo, days[i])
		if err != nil {
			continue
		}
		f, err := s.shelf.acquire(dayName(days[i]), dayLayout(), false)
		if err != nil {
			if isDamage(err) || errors.Is(err, os.ErrNotExist) {
				continue
			}
			return 0, false, err
		}
		var (
			last sensors.Instant
			ok   bool
		)
		err = f.view(func(tx *bolt.Tx) error {
			last, ok = lastOf(tx, sensors.At(start))
			return nil
		})
		if err = errors.Join(err, s.shelf.release(f)); err != nil {
			return 0, false, err
		}
		if ok {
			return last, true, nil
		}
	}
	return 0, false, nil
}

// lastOf is the newest step of a file, as a row or in a window.
func lastOf(tx *bolt.Tx, day sensors.Instant) (last sensors.Instant, ok bool) {
	if k, _ := tx.Bucket([]byte(bucketSteps)).Cursor().Last(); len(k) == 8 {
		last, ok = keyStep(k), true
	}
	b := tx.Bucket([]byte(bucketBlocks))
	if b == nil {
		return last, ok
	}
	c := b.Cursor()
	for k, _ := c.Last(); len(k) == 5; k, _ = c.Prev() {
		if k, v := c.Seek([]byte{k[0], k[1], k[2], 0, 0}); len(k) == 5 {
			second, _ := keyBlock(k)
			w := copyWindow(c, day+sensors.Instant(second)*sensors.Second, k, v)
			if w.frame != nil {
				if at := w.base + sensors.Instant(w.frame.last())*sensors.Second; !ok || at > last {
					last, ok = at, true
				}
				return last, ok
			}
		}
		c.Seek(k[:3]) // a damaged frame: the one before it
	}
	return last, ok
}
