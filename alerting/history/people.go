package history

import (
	"bytes"
	"context"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"iter"
	"slices"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// Note is what somebody wrote about an event.
type Note struct {
	Event string `json:"event"`
	Who   string `json:"who"`
	Text  string `json:"text"`
}

// Acknowledgement says that somebody has seen what is raised.
type Acknowledgement struct {
	Occurrence string `json:"occurrence"`
	Who        string `json:"who"`
}

// Shelving silences an occurrence until a time, or ends that.
type Shelving struct {
	Occurrence string          `json:"occurrence"`
	Who        string          `json:"who"`
	Reason     string          `json:"reason"`
	Until      sensors.Instant `json:"until_ms"`
	Ended      bool            `json:"ended"`
	Why        string          `json:"why"` // of the end: by hand, by escalation or by time
}

// PilotReport is what a crew felt on a path.
type PilotReport struct {
	ID        string          `json:"id"`
	Who       string          `json:"who"` // who wrote it down
	At        sensors.Instant `json:"at_ms"`
	Runway    string          `json:"runway"`
	Operation string          `json:"operation"` // landing, take-off
	Felt      string          `json:"felt"`      // loss, gain, none
	Amount    float64         `json:"amount_ms"` // m/s, 0 unknown
	FromM     *float64        `json:"from_m"`    // metres before the threshold; nil unknown
	ToM       *float64        `json:"to_m"`
	GoAround  bool            `json:"go_around"`
	Aircraft  string          `json:"aircraft"`
	Text      string          `json:"text"`
	Event     string          `json:"event"` // empty: not told
}

// Hold keeps the readings of [From, To], or those round an event, from being
// deleted, until it is released.
type Hold struct {
	ID       string          `json:"id"`
	Who      string          `json:"who"`
	Reason   string          `json:"reason"`
	From     sensors.Instant `json:"from_ms"`
	To       sensors.Instant `json:"to_ms"`
	Event    string          `json:"event"` // empty: a period only
	Released bool            `json:"released"`
}

// Access is a log-in, a refused one, a change of users or the use of a role.
type Access struct {
	Who  string `json:"who"`
	What string `json:"what"`
	From string `json:"from"` // address
	OK   bool   `json:"ok"`
}

// RunwayInUse is the runway that somebody set; empty: none.
type RunwayInUse struct {
	Who    string `json:"who"`
	Runway string `json:"runway"`
}

// Sheet is a signed daily check or hand-over.
type Sheet struct {
	What string `json:"what"` // daily, handover
	Who  string `json:"who"`
	Text string `json:"text"`
}

// EntryOf makes the journal entry of one of the types above.
func EntryOf(at sensors.Instant, payload any) (Entry, error) {
	e := Entry{At: at}
	switch payload.(type) {
	case Note:
		e.Kind = KindNote
	case Acknowledgement:
		e.Kind = KindAcknowledge
	case Shelving:
		e.Kind = KindShelve
	case PilotReport:
		e.Kind = KindPilotReport
	case Hold:
		e.Kind = KindHold
	case Access:
		e.Kind = KindAccess
	case RunwayInUse:
		e.Kind = KindRunwayInUse
	case Sheet:
		e.Kind = KindSheet
	default:
		return Entry{}, fmt.Errorf("a %T has no place in the journal", payload)
	}
	text, err := json.Marshal(payload)
	if err != nil {
		return Entry{}, fmt.Errorf("write a %s for the journal: %w", e.Kind, err)
	}
	e.Payload = text
	return e, nil
}

func decodeAs[T any](r Record, kind Kind) (v T, err error) {
	if r.Kind != kind {
		return v, fmt.Errorf("journal record %d is a %s, not a %s", r.Seq, r.Kind, kind)
	}
	if err := json.Unmarshal(r.Payload, &v); err != nil {
		return v, fmt.Errorf("journal record %d, a %s: %w", r.Seq, kind, err)
	}
	return v, nil
}

// Note is what a record of KindNote holds.
func (r Record) Note() (Note, error) { return decodeAs[Note](r, KindNote) }

// Acknowledgement is what a record of KindAcknowledge holds.
func (r Record) Acknowledgement() (Acknowledgement, error) {
	return decodeAs[Acknowledgement](r, KindAcknowledge)
}

// Shelving is what a record of KindShelve holds.
func (r Record) Shelving() (Shelving, error) { return decodeAs[Shelving](r, KindShelve) }

// PilotReport is what a record of KindPilotReport holds.
func (r Record) PilotReport() (PilotReport, error) {
	return decodeAs[PilotReport](r, KindPilotReport)
}

// Hold is what a record of KindHold holds.
func (r Record) Hold() (Hold, error) { return decodeAs[Hold](r, KindHold) }

// Access is what a record of KindAccess holds.
func (r Record) Access() (Access, error) { return decodeAs[Access](r, KindAccess) }

// RunwayInUse is what a record of KindRunwayInUse holds.
func (r Record) RunwayInUse() (RunwayInUse, error) {
	return decodeAs[RunwayInUse](r, KindRunwayInUse)
}

// Sheet is what a record of KindSheet holds.
func (r Record) Sheet() (Sheet, error) { return decodeAs[Sheet](r, KindSheet) }

// Gap is what a record of KindGap holds.
func (r Record) Gap() (Gap, error) { return decodeAs[Gap](r, KindGap) }

// byPeople reports whether records of this kind are in the index of people.
func (k Kind) byPeople() bool { return k >= KindNote && k <= KindSheet }

// The first byte of a key of the index of people.
const (
	byTime    = 't' // instant key, sequence
	bySubject = 's' // event or occurrence, zero byte, sequence
)

// maxSubject bounds the names that are indexed: the library takes no longer
// keys than 32768 bytes, and no id has a hundred.
const maxSubject = 1024

// peopleKeys are the keys under which a record of people is found.
func peopleKeys(r Record) [][]byte {
	keys := [][]byte{append(append([]byte{byTime}, instantKey(r.At)...), seqKey(r.Seq)...)}
	for _, s := range subjects(r) {
		keys = append(keys, append(subjectPrefix(s), seqKey(r.Seq)...))
	}
	return keys
}

func subjectPrefix(s string) []byte { return append(append([]byte{bySubject}, s...), 0) }

// subjects are the events and occurrences that a record of people is about.
func subjects(r Record) (out []string) {
	var about struct{ Event, Occurrence string }
	if json.Unmarshal(r.chained, &about) != nil {
		return nil
	}
	for _, s := range []string{about.Event, about.Occurrence} {
		if s != "" && len(s) <= maxSubject && !slices.Contains(out, s) {
			out = append(out, s)
		}
	}
	return out
}

func putPeople(b *bolt.Bucket, r Record) error {
	for _, key := range peopleKeys(r) {
		if err := b.Put(key, seal(key, []byte{byte(r.Kind)})); err != nil {
			return err
		}
	}
	return nil
}

// errBusy is a record that was not taken.
var errBusy = errors.New("the disk has not taken what was handed to it before; try again when the history is no longer degraded")

// maxWaitingEntries bounds what people may have waiting for the disk.
const maxWaitingEntries = 4096

// RecordDurably hands over an entry and waits until it is on disk; seq is its
// place in the journal. After an error that wraps ctx's the entry still waits
// in memory and is written as soon as the disk takes it. For handlers of
// requests, never for the loop.
func (w *Writer) RecordDurably(ctx context.Context, e Entry) (seq uint64, err error) {
	it := &item{drafts: []draft{draftOf(e)}, done: make(chan struct{})}
	w.mu.Lock()
	closing, busy := w.closing, w.queue.records-w.queue.issues >= maxWaitingEntries
	w.mu.Unlock()
	switch {
	case closing:
		return 0, fmt.Errorf("record a %s: the history is closing", e.Kind)
	case busy:
		return 0, fmt.Errorf("record a %s: %w", e.Kind, errBusy)
	}
	w.push(it, outgoing{})
	select {
	case <-it.done:
		return it.first, nil
	case <-ctx.Done():
		return 0, fmt.Errorf("record a %s: it is not on disk yet, but waits in memory: %w", e.Kind, ctx.Err())
	case <-w.done:
	}
	select {
	case <-it.done:
		return it.first, nil
	default:
		return 0, fmt.Errorf("record a %s: the history closed before it was on disk", e.Kind)
	}
}

// People shows the records of what people did in [from, to), in the order of
// time, of the given kinds or of all. A damaged one comes as an error in its
// place; the walk goes on behind it. 0 for to is no limit.
func (s *Store) People(from, to sensors.Instant, kinds ...Kind) iter.Seq2[Record, error] {
	low := append([]byte{byTime}, instantKey(from)...)
	high := []byte{byTime + 1}
	if to != 0 {
		high = append([]byte{byTime}, instantKey(to)...)
	}
	return func(yield func(Record, error) bool) {
		s.indexed(low, high, kinds, func(Record) bool { return true }, yield)
	}
}

// About shows the records of what people did that name one of these events
// and occurrences, in the order of the journal. Damage as in People.
func (s *Store) About(subject ...string) iter.Seq2[Record, error] {
	return func(yield func(Record, error) bool) {
		var all []Record
		for _, id := range subject {
			prefix := subjectPrefix(id)
			high := append(bytes.Clone(prefix[:len(prefix)-1]), 1)
			same := func(r Record) bool { return slices.Contains(subjects(r), id) }
			ok := true
			s.indexed(prefix, high, nil, same, func(r Record, err error) bool {
				if err != nil {
					ok = yield(r, err)
				} else {
					all = append(all, r)
				}
				return ok
			})
			if !ok {
				return
			}
		}
		slices.SortFunc(all, func(a, b Record) int { return int(int64(a.Seq) - int64(b.Seq)) })
		all = slices.CompactFunc(all, func(a, b Record) bool { return a.Seq == b.Seq })
		for _, r := range all {
			if !yield(r, nil) {
				return
			}
		}
	}
}

// indexed shows the records whose key in the index of people lies in
// [low, high), in short transactions.
func (s *Store) indexed(low, high []byte, kinds []Kind, keep func(Record) bool, yield func(Record, error) bool) {
	err := s.withJournal(func(j *file) error {
		for next := low; next != nil; {
			var found []Record
			var faults []error
			err := j.view(func(tx *bolt.Tx) error {
				found, faults, next = indexChunk(tx, next, high, kinds)
				return nil
			})
			if err != nil {
				return err
			}
			for i, r := range found {
				if faults[i] == nil && !keep(r) {
					continue
				}
				if !yield(r, faults[i]) {
					return errEnough
				}
			}
		}
		return nil
	})
	if err != nil && !errors.Is(err, errEnough) {
		yield(Record{}, err)
	}
}

// errEnough ends a walk whose reader has seen enough.
var errEnough = errors.New("enough")

// indexChunk reads up to readChunk records from next on, each with its fault,
// and where to go on; nil at the end.
func indexChunk(tx *bolt.Tx, next, high []byte, kinds []Kind) (found []Record, faults []error, after []byte) {
	people := tx.Bucket([]byte(bucketPeople))
	if people == nil { // of an earlier format: nobody had a word in it
		return nil, nil, nil
	}
	c := people.Cursor()
	for k, v := c.Seek(next); k != nil && bytes.Compare(k, high) < 0; k, v = c.Next() {
		if len(found) == readChunk {
			return found, faults, bytes.Clone(k)
		}
		body, err := unseal(k, v)
		if err != nil || len(body) != 1 || len(k) < 9 {
			found, faults = append(found, Record{}), append(faults, fmt.Errorf("an index entry of the journal %w", errBlock))
			continue
		}
		if len(kinds) > 0 && !slices.Contains(kinds, Kind(body[0])) {
			continue
		}
		r, err := getRecord(tx, binary.BigEndian.Uint64(k[len(k)-8:]))
		found, faults = append(found, r), append(faults, err)
	}
	return found, faults, nil
}
