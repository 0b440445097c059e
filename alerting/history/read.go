package history

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// readChunk is how many steps one read transaction fetches: a long one would
// hold up the growth of the file, and with it the Writer.
const readChunk = 300

// rawStep is a step as stored, copied out of its transaction.
type rawStep struct {
	key, value, late []byte
}

// Readings shows fn every stored step T with from <= T < to, in order of
// time. The slices of a step are fn's to keep. A damaged step or day is left
// out and the others still shown; the error returned at the end names it.
// An error of fn ends the walk and is returned as it is.
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

// readDay shows fn the steps of a day in [from, to) until fn says false. A
// step that is damaged comes as an error in its place.
func (s *Store) readDay(day string, from, to sensors.Instant, fn func(Step, error) bool) (err error) {
	f, err := s.shelf.acquire(dayName(day), dayLayout(), false)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, s.shelf.release(f)) }()
	tables := map[uint64][]string{}
	next, end := stepKey(from.CeilSecond()), stepKey(to.CeilSecond())
	for {
		var raw []rawStep
		err := f.view(func(tx *bolt.Tx) (err error) {
			raw, err = fetch(tx, next, end)
			if err == nil && len(tables) == 0 {
				tables, err = readTables(tx)
			}
			return err
		})
		if err != nil {
			return err
		}
		for _, r := range raw {
			st, err := decodeStep(r, tables)
			if errors.Is(err, errNewTable) { // a reload wrote one since
				if err = f.view(func(tx *bolt.Tx) (err error) { tables, err = readTables(tx); return err }); err == nil {
					st, err = decodeStep(r, tables)
				}
			}
			if !fn(st, err) {
				return nil
			}
		}
		if len(raw) < readChunk {
			return nil
		}
		next = append(bytes.Clone(raw[len(raw)-1].key), 0) // just past it
	}
}

func fetch(tx *bolt.Tx, from, end []byte) ([]rawStep, error) {
	var raw []rawStep
	c, late := tx.Bucket([]byte(bucketSteps)).Cursor(), tx.Bucket([]byte(bucketLate))
	for k, v := c.Seek(from); k != nil && bytes.Compare(k, end) < 0 && len(raw) < readChunk; k, v = c.Next() {
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
	c := cursor{b: body}
	ids, ok := tables[c.uvarint()]
	if !ok {
		return Step{}, fmt.Errorf("step %s %w", at, errNewTable)
	}
	late := c.uvarint()
	st := Step{At: at, Stations: ids, Readings: c.readings(at, nil)}
	if c.bad || len(c.b) != 0 {
		return Step{}, fmt.Errorf("step %s %w", at, errBlock)
	}
	if late > 0 {
		body, err := unseal(r.key, r.late)
		if err != nil {
			return Step{}, fmt.Errorf("late readings of step %s %w", at, err)
		}
		c := cursor{b: body}
		c.uvarint() // the same list of stations
		st.Late = c.late(at)
		if c.bad || len(c.b) != 0 || uint64(len(st.Late)) != late {
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
		f, err := s.shelf.acquire(dayName(days[i]), dayLayout(), false)
		if err != nil {
			if isDamage(err) || errors.Is(err, os.ErrNotExist) {
				continue
			}
			return 0, false, err
		}
		var key []byte
		err = f.view(func(tx *bolt.Tx) error {
			k, _ := tx.Bucket([]byte(bucketSteps)).Cursor().Last()
			key = bytes.Clone(k)
			return nil
		})
		if err = errors.Join(err, s.shelf.release(f)); err != nil {
			return 0, false, err
		}
		if len(key) == 8 {
			return keyStep(key), true, nil
		}
	}
	return 0, false, nil
}

// Journal shows fn the records from sequence from on, in order. The chain is
// not checked: Verify does that.
func (s *Store) Journal(from uint64, fn func(Record) error) error {
	return s.withJournal(func(j *file) error {
		return walk(j, from, func(key, value []byte) error {
			r, err := parseRecord(key, value)
			if err != nil {
				return err
			}
			return fn(r)
		})
	})
}

// Report is what Verify found.
type Report struct {
	Records uint64 // in the journal
	Head    string // hash of the last one, in hexadecimal
	Broken  uint64 // records that are missing or not as they were written
	First   uint64 // sequence of the first of them; 0 if none
	Index   bool   // the index of events agrees with the records
	Days    int
	Steps   uint64
	Faults  []string // damaged days and steps
}

// OK reports whether everything is as it was written.
func (r Report) OK() bool { return r.Broken == 0 && r.Index && len(r.Faults) == 0 }

// Verify reads the whole history: the structure of every file, each link of
// the chain, the checksum of each step. A last record that was cut off with
// its hash cannot be seen from inside; compare Records and Head with a note
// kept elsewhere.
func (s *Store) Verify() (Report, error) {
	var r Report
	err := s.withJournal(func(j *file) error {
		c, err := walkChain(j)
		if err != nil {
			return err
		}
		r.Records, r.Broken, r.First = c.head.seq, c.broken, c.first
		r.Head = fmt.Sprintf("%x", c.head.hash)
		return j.view(func(tx *bolt.Tx) error {
			// Records that came in since the walk are in the index already.
			r.Index = lastRecord(tx).seq != c.head.seq || sameIndex(tx, c.index)
			return nil
		})
	})
	if err != nil {
		return r, fmt.Errorf("verify the journal: %w", err)
	}
	days, err := s.days()
	if err != nil {
		return r, err
	}
	for _, day := range days {
		r.Days++
		err := s.readDay(day, math.MinInt64/2, math.MaxInt64/2, func(st Step, bad error) bool {
			switch {
			case bad != nil:
				r.Faults = append(r.Faults, fmt.Sprintf("%s: %v", dayName(day), bad))
			case dayOf(st.At) != day:
				r.Faults = append(r.Faults, fmt.Sprintf("%s: step %s is of another day", dayName(day), st.At))
			default:
				r.Steps++
			}
			return true
		})
		if err != nil && !errors.Is(err, os.ErrNotExist) {
			r.Faults = append(r.Faults, err.Error())
		}
	}
	return r, nil
}
