package history

import (
	"errors"
	"fmt"
	"math"
	"os"

	bolt "go.etcd.io/bbolt"
)

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
