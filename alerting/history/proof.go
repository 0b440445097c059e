package history

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"unicode/utf8"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// Digest is a SHA-256, in JSON as hexadecimal.
type Digest [sha256.Size]byte

// String is the digest in hexadecimal.
func (d Digest) String() string { return hex.EncodeToString(d[:]) }

// MarshalText is the digest in hexadecimal.
func (d Digest) MarshalText() ([]byte, error) { return []byte(d.String()), nil }

// UnmarshalText reads 64 hexadecimal digits.
func (d *Digest) UnmarshalText(text []byte) error {
	b, err := hex.DecodeString(string(text))
	if err != nil || len(b) != len(d) {
		return fmt.Errorf("%q is not a SHA-256 in hexadecimal", text)
	}
	copy(d[:], b)
	return nil
}

// Link is a record as an excerpt of the journal shows it: whole, or only what
// is needed to follow the chain past it.
type Link struct {
	Seq     uint64          `json:"seq"`
	Version uint8           `json:"version"`
	Kind    Kind            `json:"kind"`
	Word    string          `json:"kind_word"`
	At      sensors.Instant `json:"at_ms"`
	Digest  Digest          `json:"payload_sha256"`
	Hash    Digest          `json:"hash"`
	// The payload as the chain covers it: text where it is text, else bytes;
	// both nil when it is not shown.
	Text  *string `json:"payload,omitempty"`
	Bytes []byte  `json:"payload_base64,omitempty"`
	// Words open the commitments of the payload, in their order.
	Words []Word `json:"words,omitempty"`
}

// Word is what one commitment stands for. Without a salt it cannot be proved:
// Text is then what is shown instead, if anything.
type Word struct {
	Field    string `json:"field"`
	Salt     string `json:"salt,omitempty"` // hexadecimal
	Text     string `json:"text"`
	Withheld bool   `json:"withheld,omitempty"`
}

// Link is the record for an excerpt. Without show, the payload stays out where
// the chain can do without it.
func (r Record) Link(show bool) Link {
	l := Link{
		Seq: r.Seq, Version: r.version, Kind: r.Kind, Word: r.Kind.String(), At: r.At,
		Digest: sha256.Sum256(r.chained), Hash: r.Hash,
	}
	if !show && r.version != recordVersion1 {
		return l
	}
	if text := string(r.chained); utf8.ValidString(text) {
		l.Text = &text
	} else {
		l.Bytes = slices.Clone(r.chained)
	}
	openings, _ := openingsOf(r.openings) // parseRecord has looked at them
	fields, _ := fieldsOf(r.chained)
	for _, f := range fields {
		var c commitmentField
		if len(openings) > 0 && slices.Contains(r.Kind.committed(), f.name) && json.Unmarshal(f.raw, &c) == nil {
			l.Words = append(l.Words, Word{Field: f.name, Salt: hex.EncodeToString(openings[0].salt[:]), Text: openings[0].text})
			openings = openings[1:]
		}
	}
	return l
}

// Shown reports whether the link has its payload.
func (l Link) Shown() bool { return l.Text != nil || l.Bytes != nil }

func (l Link) chained() []byte {
	if l.Text != nil {
		return []byte(*l.Text)
	}
	return l.Bytes
}

// Check proves the link as the one after before: its payload, where it is
// shown, every word that has its salt, and the hash.
func (l Link) Check(before Digest) error {
	r := Record{Seq: l.Seq, Kind: l.Kind, At: l.At, version: l.Version, chained: l.chained(), Hash: l.Hash}
	rest := l.Digest[:]
	switch {
	case l.Version != recordVersion1 && l.Version != recordVersion2:
		return fmt.Errorf("record %d has the unknown version %d", l.Seq, l.Version)
	case l.Word != l.Kind.String():
		return fmt.Errorf("record %d calls itself %q and is a %s", l.Seq, l.Word, l.Kind)
	case l.Text != nil && l.Bytes != nil:
		return fmt.Errorf("record %d shows two payloads", l.Seq)
	case (l.Shown() || l.Version == recordVersion1) && sha256.Sum256(r.chained) != l.Digest:
		return fmt.Errorf("record %d: its payload is not the one that was written", l.Seq)
	}
	if l.Version == recordVersion1 {
		rest = r.chained
	}
	if link(before, l.Seq, r.header(), rest) != l.Hash {
		return fmt.Errorf("record %d does not follow from the one before it", l.Seq)
	}
	_, _, err := l.reveal()
	return err
}

// Payload is the payload with the words put in; whole is false when some are
// withheld.
func (l Link) Payload() (payload []byte, whole bool, err error) {
	if !l.Shown() {
		return nil, false, fmt.Errorf("record %d is not shown", l.Seq)
	}
	return l.reveal()
}

func (l Link) reveal() (payload []byte, whole bool, err error) {
	names, words, whole := l.Kind.committed(), l.Words, true
	fields, ok := fieldsOf(l.chained())
	if names == nil || !ok {
		if len(words) > 0 {
			return nil, false, fmt.Errorf("record %d has words that belong to nothing", l.Seq)
		}
		return l.chained(), true, nil
	}
	for i, f := range fields {
		var c commitmentField
		if !slices.Contains(names, f.name) || json.Unmarshal(f.raw, &c) != nil {
			continue
		}
		if len(words) == 0 || words[0].Field != f.name {
			return nil, false, fmt.Errorf("record %d: nothing stands for its %q", l.Seq, f.name)
		}
		if err := words[0].check(c.Commitment); err != nil {
			return nil, false, fmt.Errorf("record %d: %w", l.Seq, err)
		}
		whole = whole && !words[0].Withheld
		fields[i].raw = quoted(words[0].Text)
		words = words[1:]
	}
	if len(words) > 0 {
		return nil, false, fmt.Errorf("record %d has words that belong to nothing", l.Seq)
	}
	return objectOf(fields), whole, nil
}

func (w Word) check(commitment string) error {
	if w.Withheld {
		if w.Salt != "" {
			return fmt.Errorf("the words under %q are withheld and yet have a salt", w.Field)
		}
		return nil
	}
	o := opening{text: w.Text}
	salt, err := hex.DecodeString(w.Salt)
	if err != nil || copy(o.salt[:], salt) != saltSize || len(salt) != saltSize || o.commitment(w.Field) != commitment {
		return fmt.Errorf("the words under %q are not those that were written", w.Field)
	}
	return nil
}

// Head is where the chain stood at the end of a UTC day: later editing shows
// against a copy of it kept elsewhere.
type Head struct {
	Day  string `json:"day"` // 2006-01-02
	Seq  uint64 `json:"records"`
	Hash Digest `json:"sha256"`
}

// heads follows the ends of the days along the chain. A day ends with the
// first record whose time lies in a later one.
type heads struct {
	latest sensors.Instant // greatest time so far
	last   head
	done   []Head // of the days that have ended, ascending
}

func (h *heads) add(r Record) {
	if h.last.seq > 0 && dayOf(r.At) > dayOf(h.latest) {
		h.done = append(h.done, Head{Day: dayOf(h.latest), Seq: h.last.seq, Hash: h.last.hash})
	}
	h.latest = max(h.latest, r.At)
	h.last = head{seq: r.Seq, hash: r.Hash}
}

// end is where the chain stands.
func (h *heads) end() Head {
	if h.last.seq == 0 {
		return Head{}
	}
	return Head{Day: dayOf(h.latest), Seq: h.last.seq, Hash: h.last.hash}
}

// followHeads takes in records that are on disk now, and tells where the chain
// stood at the end of each day that has ended: a copy of that, kept elsewhere,
// shows later editing.
func (s *Store) followHeads(values [][]byte, first uint64) {
	told := len(s.ends.done)
	for i, value := range values {
		if r, err := parseRecord(seqKey(first+uint64(i)), value); err == nil {
			s.ends.add(r)
		}
	}
	for _, h := range s.ends.done[told:] {
		s.opts.Log.Info().Str("component", "history").Str("day", h.Day).Uint64("records", h.Seq).Str("sha256", h.Hash.String()).
			Msg("the journal at the end of a day; keep this line elsewhere")
	}
	s.tellHead()
}

// tellHead puts the newest end of a day into Health.
func (s *Store) tellHead() {
	if n := len(s.ends.done); n > 0 {
		s.setHealth(func(h *Health) { h.DayHead = s.ends.done[n-1] })
	}
}

// Excerpt is a stretch of the chain without holes.
type Excerpt struct {
	Before Digest // hash of the record before the first
	Heads  []Head // of the days that ended in it
	Links  int
	End    Head // where it stops
}

// Excerpt shows fn every record from sequence from to the first of the UTC day
// after that of record through, or to the end of the journal if there is none.
// A damaged record ends it with an error: it would prove nothing.
func (s *Store) Excerpt(from, through uint64, fn func(Record) error) (Excerpt, error) {
	var (
		x Excerpt
		h heads
	)
	err := s.withJournal(func(j *file) error {
		before := head{}
		if from > 1 {
			err := j.view(func(tx *bolt.Tx) error {
				r, err := getRecord(tx, from-1)
				before.hash = r.Hash
				return err
			})
			if err != nil {
				return err
			}
		}
		x.Before = before.hash
		return walk(j, from, func(key, value []byte) error {
			r, err := parseRecord(key, value)
			if err != nil {
				return err
			}
			if r.Seq != from+uint64(x.Links) || !r.follows(before.hash) {
				return damaged("the journal is damaged at record %d: what comes after it cannot be proved", from+uint64(x.Links))
			}
			days := len(h.done)
			h.add(r)
			before.hash = r.Hash
			x.Links++
			if err := fn(r); err != nil || len(h.done) == days || r.Seq <= through {
				return err
			}
			return errEnough // this record shows that the day has ended
		})
	})
	if errors.Is(err, errEnough) {
		err = nil
	}
	if err == nil && h.last.seq < through {
		err = fmt.Errorf("the journal ends with record %d, before record %d", h.last.seq, through)
	}
	x.Heads = h.done
	x.End = h.end()
	return x, err
}

// HeadsOf is where a chain of links stood at the end of each day that ended
// in it, and where it ends.
func HeadsOf(links []Link) (days []Head, end Head) {
	var h heads
	for _, l := range links {
		h.add(Record{Seq: l.Seq, At: l.At, Hash: l.Hash})
	}
	return h.done, h.end()
}
