package history

import (
	"bytes"
	"crypto/sha256"
	"encoding/binary"
	"encoding/json"
	"fmt"

	"sockline/sensors"
)

// Record is one record of the journal.
type Record struct {
	Seq     uint64 // from 1, without holes
	Kind    Kind
	At      sensors.Instant
	Payload []byte
	Hash    [sha256.Size]byte // of the record before and this one

	version  byte
	chained  []byte // the payload as the hash covers it: commitments instead of names and words
	openings []byte // what the commitments stand for
}

// Issue is what a record of KindIssue holds.
func (r Record) Issue() (Issue, error) {
	if r.Kind != KindIssue {
		return Issue{}, fmt.Errorf("journal record %d is a %s, not an issue", r.Seq, r.Kind)
	}
	p, err := parseIssue(r.Payload)
	if err != nil {
		return Issue{}, fmt.Errorf("journal record %d: %w", r.Seq, err)
	}
	is := Issue{Object: bytes.Clone(p.object)}
	if err := json.Unmarshal(p.alert, &is.Alert); err != nil {
		return Issue{}, fmt.Errorf("journal record %d: its alert: %w", r.Seq, err)
	}
	return is, nil
}

// The versions are the first byte of each record. Those of version 1 are
// still read; only version 2 is written.
const (
	recordVersion1 = 1
	recordVersion2 = 2
	recordHeader   = 10 // version, kind, time
)

// head is the end of the chain: the last sequence and its hash.
type head struct {
	seq  uint64
	hash [sha256.Size]byte
}

// next is the record that follows the head, as it is stored.
func (h head) next(d draft) (value []byte, after head) {
	value = make([]byte, 0, recordHeader+len(d.payload)+len(d.openings)+sha256.Size+binary.MaxVarintLen64)
	value = append(value, recordVersion2, byte(d.kind))
	value = binary.BigEndian.AppendUint64(value, uint64(d.at))
	after = head{seq: h.seq + 1, hash: link(h.hash, h.seq+1, value, digest(d.payload))}
	value = appendString(value, d.payload)
	value = append(value, d.openings...)
	return append(value, after.hash[:]...), after
}

func digest(payload []byte) []byte {
	sum := sha256.Sum256(payload)
	return sum[:]
}

// link is SHA-256 of the hash before, the sequence (8 bytes, big endian), the
// header and the rest: the digest of the payload, in version 1 the payload.
// With the digest the chain can be followed past a record that is not shown.
func link(before [sha256.Size]byte, seq uint64, header, rest []byte) (out [sha256.Size]byte) {
	h := sha256.New()
	h.Write(before[:])
	h.Write(seqKey(seq))
	h.Write(header)
	h.Write(rest)
	h.Sum(out[:0])
	return out
}

// header is what the link covers besides the payload.
func (r Record) header() []byte {
	return binary.BigEndian.AppendUint64([]byte{r.version, byte(r.Kind)}, uint64(r.At))
}

// follows reports whether the record's hash is that of its content after the
// hash before.
func (r Record) follows(before [sha256.Size]byte) bool { return r.hashAfter(before) == r.Hash }

// hashAfter is the hash that the record's content has after the hash before.
func (r Record) hashAfter(before [sha256.Size]byte) [sha256.Size]byte {
	rest := r.chained
	if r.version == recordVersion2 {
		rest = digest(r.chained)
	}
	return link(before, r.Seq, r.header(), rest)
}

// clone is the record with memory of its own.
func (r Record) clone() Record {
	r.Payload, r.chained, r.openings = bytes.Clone(r.Payload), bytes.Clone(r.chained), bytes.Clone(r.openings)
	return r
}

func seqKey(seq uint64) []byte { return binary.BigEndian.AppendUint64(nil, seq) }

// parseRecord reads a stored record. Nothing is copied but what had to be put
// together. With an error, Seq and Hash are still right where they could be
// read.
func parseRecord(key, value []byte) (Record, error) {
	if len(key) != 8 {
		return Record{}, damaged("a journal record has a key of %d bytes", len(key))
	}
	r := Record{Seq: binary.BigEndian.Uint64(key)}
	if len(value) < recordHeader+sha256.Size {
		return r, damaged("journal record %d is too short", r.Seq)
	}
	r.version, r.Kind = value[0], Kind(value[1])
	if r.version != recordVersion1 && r.version != recordVersion2 {
		return r, damaged("journal record %d has the unknown version %d", r.Seq, r.version)
	}
	end := len(value) - sha256.Size
	r.At = sensors.Instant(binary.BigEndian.Uint64(value[2:]))
	copy(r.Hash[:], value[end:])
	r.chained = value[recordHeader:end]
	if r.version == recordVersion2 {
		c := cursorAt(r.chained)
		n := c.Uvarint()
		// Only the shortest form of the length: no other bytes may say the same.
		if c.Bad || n > uint64(len(c.Left)) || len(r.chained)-len(c.Left) != len(binary.AppendUvarint(nil, n)) {
			return r, damaged("journal record %d is longer than its value", r.Seq)
		}
		r.chained, r.openings = c.Left[:n], c.Left[n:]
	}
	var err error
	if r.Payload, err = reveal(r.Kind, r.chained, r.openings); err != nil {
		return r, fmt.Errorf("journal record %d: %w", r.Seq, err)
	}
	return r, nil
}
