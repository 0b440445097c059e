package history

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"slices"
	"sort"

	bolt "go.etcd.io/bbolt"

	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// ErrNoEvent is an event id that the history does not know.
var ErrNoEvent = errors.New("no such event in the history")

// Filter selects events.
type Filter struct {
	From  sensors.Instant // still open at or after; 0 is no limit
	To    sensors.Instant // opened before; 0 is no limit
	Open  bool            // only those that are open
	Limit int             // at most so many, the newest; 0 is no limit
}

// EventSummary is an event as its newest issue has it.
type EventSummary struct {
	ID      string
	Opened  sensors.Instant
	Updated sensors.Instant // of the newest issue
	Closed  sensors.Instant // 0 while open
	Issues  int
	Object  []byte // the newest alert object, JSON
}

// Event is an event with all its issues, oldest first.
type Event struct {
	EventSummary
	Objects [][]byte // every alert object in order, JSON
}

// keyedRow is an index entry with its key taken apart.
type keyedRow struct {
	id     string
	opened sensors.Instant
	eventRow
}

// rows reads the index entries that keep wants, newest first.
func rows(tx *bolt.Tx, to sensors.Instant, keep func(keyedRow) bool) ([]keyedRow, error) {
	var (
		out    []keyedRow
		faults []error
		c      = tx.Bucket([]byte(bucketEvents)).Cursor()
		k, v   []byte
	)
	if to == 0 {
		k, v = c.Last()
	} else if k, _ = c.Seek(instantKey(to)); k == nil {
		k, v = c.Last()
	} else {
		k, v = c.Prev()
	}
	for ; k != nil; k, v = c.Prev() {
		row, err := parseKeyedRow(k, v)
		if err != nil {
			faults = append(faults, err)
			continue
		}
		if keep(row) {
			out = append(out, row)
		}
	}
	return out, errors.Join(faults...)
}

func parseKeyedRow(k, v []byte) (keyedRow, error) {
	body, err := unseal(k, v)
	if err != nil || len(k) < 8 {
		return keyedRow{}, fmt.Errorf("an index entry of the journal %w", errBlock)
	}
	row, err := parseEventRow(body)
	if err != nil || len(row.seqs) == 0 {
		return keyedRow{}, fmt.Errorf("an index entry of the journal %w", errBlock)
	}
	return keyedRow{id: string(k[8:]), opened: keyInstant(k), eventRow: row}, nil
}

// getRecord reads one record and checks it against the hash before it. The
// payload is a copy.
func getRecord(tx *bolt.Tx, seq uint64) (Record, error) {
	records := tx.Bucket([]byte(bucketRecords))
	value := records.Get(seqKey(seq))
	r, err := parseRecord(seqKey(seq), value)
	if err != nil {
		return r, fmt.Errorf("journal record %d: %w", seq, err)
	}
	var before head
	if seq > 1 {
		prev, err := parseRecord(seqKey(seq-1), records.Get(seqKey(seq-1)))
		if err != nil {
			return r, fmt.Errorf("journal record %d: %w", seq-1, err)
		}
		before.hash = prev.Hash
	}
	if !r.follows(before.hash) {
		return r, damaged("journal record %d does not match its hash", seq)
	}
	return r.clone(), nil
}

func summarize(tx *bolt.Tx, row keyedRow) (EventSummary, error) {
	r, err := getRecord(tx, row.seqs[len(row.seqs)-1])
	if err != nil {
		return EventSummary{}, err
	}
	p, err := parseIssue(r.Payload)
	if err != nil {
		return EventSummary{}, err
	}
	return EventSummary{ID: row.id, Opened: row.opened, Updated: row.last, Closed: row.closed, Issues: len(row.seqs), Object: p.object}, nil
}

// Events lists the events that the filter selects, newest first. A damaged
// one is left out and named in the error; the others are still returned.
func (s *Store) Events(f Filter) ([]EventSummary, error) {
	var out []EventSummary
	err := s.withJournal(func(j *file) error {
		return j.view(func(tx *bolt.Tx) error {
			selected, err := rows(tx, f.To, func(r keyedRow) bool {
				return (r.closed == 0 || (!f.Open && r.closed >= f.From))
			})
			faults := []error{err}
			for _, row := range selected {
				if f.Limit > 0 && len(out) == f.Limit {
					break
				}
				e, err := summarize(tx, row)
				if err != nil {
					faults = append(faults, fmt.Errorf("event %s: %w", row.id, err))
					continue
				}
				out = append(out, e)
			}
			return errors.Join(faults...)
		})
	})
	return out, err
}

// Event gives one event with all its issues. ErrNoEvent if there is none.
func (s *Store) Event(id string) (Event, error) {
	var e Event
	err := s.withJournal(func(j *file) error {
		return j.view(func(tx *bolt.Tx) error {
			row, err := lookUp(tx, id)
			if err != nil {
				return err
			}
			if e.EventSummary, err = summarize(tx, row); err != nil {
				return err
			}
			for _, seq := range row.seqs {
				r, err := getRecord(tx, seq)
				if err != nil {
					return err
				}
				p, err := parseIssue(r.Payload)
				if err != nil {
					return err
				}
				e.Objects = append(e.Objects, p.object)
			}
			return nil
		})
	})
	if err != nil {
		return e, fmt.Errorf("event %q: %w", id, err)
	}
	return e, nil
}

func lookUp(tx *bolt.Tx, id string) (keyedRow, error) {
	stored := tx.Bucket([]byte(bucketIDs)).Get([]byte(id))
	if stored == nil {
		return keyedRow{}, ErrNoEvent
	}
	opened, err := unseal([]byte(id), stored)
	if err != nil {
		return keyedRow{}, fmt.Errorf("its index entry %w", err)
	}
	key := append(bytes.Clone(opened), id...)
	return parseKeyedRow(key, tx.Bucket([]byte(bucketEvents)).Get(key))
}

// OpenAlerts gives the alerts that were open at asOf (an issue at asOf
// included), each as its last issue up to then has it, ordered by opening and
// id. A damaged one is left out and named in the error.
func (s *Store) OpenAlerts(asOf sensors.Instant) ([]lifecycle.Alert, error) {
	var out []lifecycle.Alert
	err := s.withJournal(func(j *file) error {
		return j.view(func(tx *bolt.Tx) error {
			open, err := rows(tx, asOf+1, func(r keyedRow) bool { return r.closed == 0 || r.closed > asOf })
			faults := []error{err}
			for _, row := range slices.Backward(open) {
				is, err := lastIssue(tx, row, asOf)
				if err != nil {
					faults = append(faults, fmt.Errorf("event %s: %w", row.id, err))
					continue
				}
				if is.Alert.ID != "" && is.Alert.State == lifecycle.Open {
					out = append(out, is.Alert)
				}
			}
			return errors.Join(faults...)
		})
	})
	return out, err
}

// lastIssue is the newest issue of the event at or before asOf; the zero Issue
// if there is none.
func lastIssue(tx *bolt.Tx, row keyedRow, asOf sensors.Instant) (Issue, error) {
	records := tx.Bucket([]byte(bucketRecords))
	// Issues of one alert rise in time with their sequence.
	n := sort.Search(len(row.seqs), func(i int) bool {
		v := records.Get(seqKey(row.seqs[i]))
		return len(v) >= recordHeader && sensors.Instant(binary.BigEndian.Uint64(v[2:])) > asOf
	})
	if n == 0 {
		return Issue{}, nil
	}
	r, err := getRecord(tx, row.seqs[n-1])
	if err != nil {
		return Issue{}, err
	}
	return r.Issue()
}
