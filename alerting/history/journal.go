package history

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"

	bolt "go.etcd.io/bbolt"

	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// Kind is what a journal record is about. The numbers are on disk: never
// change one.
type Kind uint8

// The kinds of record.
const (
	KindIssue         Kind = 1 // an issue of an alert
	KindConfiguration Kind = 2 // a configuration that takes effect, as its file has it
	KindSoftware      Kind = 3 // the version of the program
	KindStart         Kind = 4 // the daemon begins
	KindStop          Kind = 5 // the daemon ends in order
	KindGap           Kind = 6 // something was not kept: a Gap as JSON
	KindDamage        Kind = 7 // a file was found damaged: text
	KindTable         Kind = 8 // a learnt table that takes effect

	// What people did and said; people.go has the payloads.
	KindNote        Kind = 9
	KindAcknowledge Kind = 10
	KindShelve      Kind = 11
	KindPilotReport Kind = 12
	KindHold        Kind = 13
	KindAccess      Kind = 14
	KindRunwayInUse Kind = 15
	KindSheet       Kind = 16 // a daily check or a hand-over, signed
)

// String is the kind's word.
func (k Kind) String() string {
	words := [...]string{
		KindIssue: "issue", KindConfiguration: "configuration", KindSoftware: "software", KindStart: "start", KindStop: "stop",
		KindGap: "gap", KindDamage: "damage", KindTable: "table", KindNote: "note", KindAcknowledge: "acknowledge",
		KindShelve: "shelve", KindPilotReport: "pilot-report", KindHold: "hold", KindAccess: "access",
		KindRunwayInUse: "runway-in-use", KindSheet: "sheet",
	}
	if k == 0 || int(k) >= len(words) {
		return fmt.Sprintf("kind %d", uint8(k))
	}
	return words[k]
}

// Entry is something for the journal that is not an issue of an alert.
type Entry struct {
	Kind    Kind
	At      sensors.Instant
	Payload []byte // not changed after it is handed over
}

// Gap is the payload of a KindGap record: what of these steps was given up.
// The steps are as first and last dropped; others between them may be there.
type Gap struct {
	From     sensors.Instant `json:"from_ms"`
	To       sensors.Instant `json:"to_ms"`
	Steps    uint64          `json:"steps"`
	Readings uint64          `json:"readings"`
	Records  uint64          `json:"records"`
	Why      string          `json:"why"`
}

// issuePayload is the payload of an issue: what the index needs stands before
// the two JSON texts, so that the index is rebuilt without parsing them.
type issuePayload struct {
	id             string
	opened, closed sensors.Instant // closed is 0 while open
	object, alert  []byte
}

func (p issuePayload) encode() []byte {
	b := make([]byte, 0, len(p.id)+len(p.object)+len(p.alert)+32)
	b = appendString(b, p.id)
	b = binary.AppendVarint(b, int64(p.opened))
	b = binary.AppendVarint(b, int64(p.closed))
	b = appendString(b, p.object)
	return appendString(b, p.alert)
}

func parseIssue(b []byte) (issuePayload, error) {
	c := cursorAt(b)
	p := issuePayload{
		id:     string(c.Bytes(c.Uvarint())),
		opened: sensors.Instant(c.Varint()),
		closed: sensors.Instant(c.Varint()),
		object: c.Bytes(c.Uvarint()),
		alert:  c.Bytes(c.Uvarint()),
	}
	if c.Bad || len(c.Left) != 0 {
		return p, damaged("its content is not an issue of an alert")
	}
	return p, nil
}

// encodeIssue is the payload for an issue.
func encodeIssue(is Issue) ([]byte, error) {
	alert, err := json.Marshal(is.Alert)
	if err != nil {
		return nil, fmt.Errorf("write alert %s as JSON: %w", is.Alert.ID, err)
	}
	closed := sensors.Instant(0)
	if is.Alert.State == lifecycle.Closed {
		closed = is.Alert.Closed
	}
	p := issuePayload{id: is.Alert.ID, opened: is.Alert.Opened, closed: closed, object: is.Object, alert: alert}
	return p.encode(), nil
}

// eventRow is what the index holds of an event. The index is derived: it can
// be made again from the records.
type eventRow struct {
	closed sensors.Instant // 0 while open
	last   sensors.Instant // of the newest issue
	seqs   []uint64        // of its issues, ascending
}

func (r eventRow) encode() []byte {
	b := binary.AppendVarint(nil, int64(r.closed))
	b = binary.AppendVarint(b, int64(r.last))
	b = binary.AppendUvarint(b, uint64(len(r.seqs)))
	before := uint64(0)
	for _, s := range r.seqs {
		b = binary.AppendUvarint(b, s-before)
		before = s
	}
	return b
}

func parseEventRow(b []byte) (eventRow, error) {
	c := cursorAt(b)
	r := eventRow{closed: sensors.Instant(c.Varint()), last: sensors.Instant(c.Varint())}
	n := c.Uvarint()
	if c.Bad || n > uint64(len(c.Left)) {
		return r, errBlock
	}
	r.seqs = make([]uint64, 0, n)
	before := uint64(0)
	for range n {
		before += c.Uvarint()
		r.seqs = append(r.seqs, before)
	}
	if c.Bad || len(c.Left) != 0 {
		return r, errBlock
	}
	return r, nil
}

// add takes in an issue; one that is already there changes nothing, so that a
// record may be written twice.
func (r *eventRow) add(seq uint64, at sensors.Instant, p issuePayload) {
	if n := len(r.seqs); n > 0 && r.seqs[n-1] >= seq {
		return
	}
	r.seqs = append(r.seqs, seq)
	r.last, r.closed = at, p.closed
}

func eventKey(p issuePayload) []byte { return append(instantKey(p.opened), p.id...) }

// putRecord writes a record under its sequence and brings the index up to it.
func putRecord(tx *bolt.Tx, seq uint64, value []byte) error {
	records := tx.Bucket([]byte(bucketRecords))
	records.FillPercent = 1 // keys only ever rise
	key := seqKey(seq)
	if err := records.Put(key, value); err != nil {
		return err
	}
	r, err := parseRecord(key, value)
	switch {
	case err != nil:
		return err
	case r.Kind.byPeople():
		return putPeople(tx.Bucket([]byte(bucketPeople)), r)
	case r.Kind != KindIssue:
		return nil
	}
	p, err := parseIssue(r.Payload)
	if err != nil {
		return err
	}
	events, ids := tx.Bucket([]byte(bucketEvents)), tx.Bucket([]byte(bucketIDs))
	at := eventKey(p)
	var row eventRow
	if stored := events.Get(at); stored != nil {
		// A row that went bad since the start must not stop the recording: it
		// begins anew here, and the next opening rebuilds the whole index.
		if body, err := unseal(at, stored); err == nil {
			if row, err = parseEventRow(body); err != nil {
				row = eventRow{}
			}
		}
	}
	row.add(seq, r.At, p)
	if err := events.Put(at, seal(at, row.encode())); err != nil {
		return err
	}
	id := []byte(p.id)
	return ids.Put(id, seal(id, instantKey(p.opened)))
}

// lastRecord is the end of the stored chain.
func lastRecord(tx *bolt.Tx) head {
	c := tx.Bucket([]byte(bucketRecords)).Cursor()
	for key, value := c.Last(); key != nil; key, value = c.Prev() {
		if len(key) == 8 { // any other is damage: the chain goes on without it
			r, _ := parseRecord(key, value) // a broken one has a zero hash, as in chain.check
			return head{seq: r.Seq, hash: r.Hash}
		}
	}
	return head{}
}

// chain walks the records in order and finds where the chain is broken.
type chain struct {
	head   head
	first  uint64 // first broken sequence, 0 if none
	broken uint64
	named  []uint64 // the first of the broken sequences, up to mostNamed
	days   heads
	known  Head // the chain is looked at where it should have stood like this
	passed bool // and it did
	index  index
}

// mostNamed bounds how many broken records are named one by one.
const mostNamed = 1000

// index is what the journal's index must hold: made from the records.
type index struct {
	events map[string]eventRow // by event key
	people map[string]Kind     // by people key
}

func newChain() *chain {
	return &chain{index: index{events: map[string]eventRow{}, people: map[string]Kind{}}}
}

func (c *chain) fault(seq uint64) {
	if c.first == 0 {
		c.first = seq
	}
	if c.broken++; len(c.named) < mostNamed {
		c.named = append(c.named, seq)
	}
}

// missing names the records from one sequence to before another.
func (c *chain) missing(from, to uint64) {
	for seq := from; seq < to && len(c.named) < mostNamed; seq++ {
		c.fault(seq)
		from++
	}
	if from < to { // more than are named
		c.broken += to - from
	}
}

// add takes in what a sound record adds to the index.
func (x index) add(r Record) {
	if r.Kind.byPeople() {
		for _, key := range peopleKeys(r) {
			x.people[string(key)] = r.Kind
		}
	}
	if r.Kind != KindIssue {
		return
	}
	if p, err := parseIssue(r.Payload); err == nil {
		at := string(eventKey(p))
		row := x.events[at]
		row.add(r.Seq, r.At, p)
		x.events[at] = row
	}
}

// check takes in the next record as stored.
func (c *chain) check(key, value []byte) {
	r, err := parseRecord(key, value)
	want := c.head.seq + 1
	switch {
	case len(key) == 8 && r.Seq != want:
		c.missing(want, r.Seq)
		c.fault(r.Seq) // nothing proves the one after a gap
	case err != nil:
		c.fault(want)
	case !r.follows(c.head.hash):
		c.fault(r.Seq)
	default:
		c.index.add(r)
	}
	if len(key) == 8 {
		// Go on from the stored hash, so that one broken record breaks no
		// other except where its own stored hash is what was changed.
		c.head = head{seq: r.Seq, hash: r.Hash}
		c.passed = c.passed || r.Seq == c.known.Seq && r.Hash == c.known.Hash
		if err == nil {
			c.days.add(r)
		}
	}
}

// walk shows fn every record from the sequence from on, in short
// transactions; key and value are copies.
func walk(f *file, from uint64, fn func(key, value []byte) error) error {
	const chunk = 512
	type pair struct{ key, value []byte }
	next := seqKey(from)
	for {
		var pairs []pair
		err := f.view(func(tx *bolt.Tx) error {
			c := tx.Bucket([]byte(bucketRecords)).Cursor()
			for k, v := c.Seek(next); k != nil && len(pairs) < chunk; k, v = c.Next() {
				pairs = append(pairs, pair{bytes.Clone(k), bytes.Clone(v)})
			}
			return nil
		})
		if err != nil {
			return err
		}
		for _, p := range pairs {
			if err := fn(p.key, p.value); err != nil {
				return err
			}
		}
		if len(pairs) < chunk {
			return nil
		}
		next = append(bytes.Clone(pairs[chunk-1].key), 0) // just past it
	}
}

// walkChain checks the whole chain.
func walkChain(f *file) (*chain, error) { return walkChainPast(f, Head{}) }

func walkChainPast(f *file, known Head) (*chain, error) {
	c := newChain()
	c.known = known
	err := walk(f, 0, func(key, value []byte) error {
		c.check(key, value)
		return nil
	})
	return c, err
}
