package history

import (
	"errors"
	"fmt"
	"math"
	"os"
	"slices"
	"strings"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// Report is what Verify found.
type Report struct {
	Records  uint64   `json:"records"`        // in the journal
	Head     string   `json:"head"`           // hash of the last one, in hexadecimal
	Broken   uint64   `json:"broken"`         // records that are missing or not as they were written
	First    uint64   `json:"first_broken"`   // sequence of the first of them; 0 if none
	Named    []uint64 `json:"broken_records"` // their sequences, at most the first thousand
	Index    bool     `json:"index"`          // the index agrees with the records
	Heads    []Head   `json:"heads"`          // where the chain stood at the end of each day
	Days     int      `json:"days"`           // files of readings
	Steps    uint64   `json:"steps"`          // that can be read
	Faults   []string `json:"faults"`         // everything that is damaged, by its name
	SetAside []string `json:"set_aside"`      // damaged files that were put aside before
	Notice   string   `json:"notice"`         // filled in by who shows it
}

// OK reports whether everything is as it was written.
func (r Report) OK() bool { return r.Broken == 0 && r.Index && len(r.Faults) == 0 }

// Verify reads the whole history: the structure of every file, each link of
// the chain, every commitment, the checksum of each step. A last record that
// was cut off with its hash cannot be seen from inside: see VerifyAgainst.
func (s *Store) Verify() (Report, error) { return s.VerifyAgainst(Head{}) }

// VerifyAgainst also looks whether the chain once stood at a head that was
// noted elsewhere; the zero Head is none. Whoever cuts records off, or writes
// them all anew, cannot make it pass there.
func (s *Store) VerifyAgainst(known Head) (Report, error) {
	r := Report{Index: true}
	err := s.withJournal(func(j *file) error { return r.journal(j, known) })
	switch {
	case isDamage(err):
		r.Index = false
		r.Faults = append(r.Faults, fmt.Sprintf("%s: %v", journalName, err))
	case err != nil:
		return r, fmt.Errorf("verify the journal: %w", err)
	}
	days, err := s.days()
	if err != nil {
		return r, err
	}
	for _, day := range days {
		r.day(s, day)
	}
	if r.SetAside, err = s.setAside(); err != nil {
		return r, err
	}
	return r, nil
}

func (r *Report) journal(j *file, known Head) error {
	c, err := walkChainPast(j, known)
	if err != nil {
		return err
	}
	r.Records, r.Broken, r.First, r.Named = c.head.seq, c.broken, c.first, c.named
	r.Head, r.Heads = fmt.Sprintf("%x", c.head.hash), c.days.done
	for _, seq := range c.named {
		r.Faults = append(r.Faults, fmt.Sprintf("%s: record %d is missing, not as it was written, or cannot be proved because the one before it is missing", journalName, seq))
	}
	switch {
	case known.Seq == 0 || c.passed:
	case known.Seq > c.head.seq:
		r.Faults = append(r.Faults, fmt.Sprintf("%s: it ends with record %d; it held %d once: the last ones were cut off", journalName, c.head.seq, known.Seq))
	default:
		r.Faults = append(r.Faults, fmt.Sprintf("%s: record %d is not the one whose hash was noted: what is up to it was written anew", journalName, known.Seq))
	}
	err = j.view(func(tx *bolt.Tx) error {
		// Records that came in since the walk are in the index already.
		r.Index = lastRecord(tx).seq != c.head.seq || sameIndex(tx, c.index)
		return nil
	})
	if !r.Index {
		r.Faults = append(r.Faults, journalName+": the index does not agree with the records; the next start of the daemon makes it anew")
	}
	return err
}

func (r *Report) day(s *Store, day string) {
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

// setAside names the files that were found damaged and put aside.
func (s *Store) setAside() (names []string, err error) {
	entries, err := os.ReadDir(s.dir)
	if err != nil {
		return nil, fmt.Errorf("list the history: %w", err)
	}
	for _, e := range entries {
		if strings.Contains(e.Name(), ".damaged-") {
			names = append(names, e.Name())
		}
	}
	slices.Sort(names)
	return names, nil
}

// Span is the first and the last stored step; 0 and 0 if there is none.
func (s *Store) Span() (first, last sensors.Instant, err error) {
	err = s.Readings(math.MinInt64/2, math.MaxInt64/2, func(st Step) error {
		first = st.At
		return errEnough
	})
	if err != nil && !errors.Is(err, errEnough) {
		return 0, 0, err
	}
	last, _, err = s.LastStep()
	return first, last, err
}
