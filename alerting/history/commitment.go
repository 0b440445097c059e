package history

import (
	"bytes"
	"crypto/rand"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"slices"
)

// What people are called and what they wrote stands in the chain as a
// commitment only: the digest of a random salt and the words. The words lie
// beside it in the record and open it. So an excerpt can leave words out, or
// give other ones, and the chain still proves every record; and whoever has
// the excerpt cannot find a name by trying names.

// saltSize makes a search for the words behind a digest hopeless.
const saltSize = 16

// commitmentPrefix keeps these digests apart from all others.
const commitmentPrefix = "sockline commitment 1\x00"

// opening is what a commitment stands for.
type opening struct {
	salt [saltSize]byte
	text string
}

// commitment is SHA-256 of the prefix, the field's name, a zero byte, the salt
// and the text, in hexadecimal.
func (o opening) commitment(field string) string {
	h := sha256.New()
	h.Write([]byte(commitmentPrefix + field + "\x00"))
	h.Write(o.salt[:])
	h.Write([]byte(o.text))
	return hex.EncodeToString(h.Sum(nil))
}

// committed names the fields of a kind that are words of or about people.
func (k Kind) committed() []string {
	switch k {
	case KindNote, KindSheet:
		return []string{"who", "text"}
	case KindAcknowledge, KindRunwayInUse:
		return []string{"who"}
	case KindShelve, KindHold:
		return []string{"who", "reason"}
	case KindPilotReport:
		return []string{"who", "aircraft", "text"}
	case KindAccess:
		return []string{"who", "what", "from"}
	}
	return nil
}

// field is a member of a JSON object.
type field struct {
	name string
	raw  json.RawMessage
}

// fieldsOf takes a JSON object apart, in its order; false if it is none.
func fieldsOf(object []byte) ([]field, bool) {
	d := json.NewDecoder(bytes.NewReader(object))
	if t, err := d.Token(); err != nil || t != json.Delim('{') {
		return nil, false
	}
	var out []field
	for d.More() {
		name, err := d.Token()
		if err != nil {
			return nil, false
		}
		f := field{name: name.(string)} // in an object the decoder gives nothing else here
		if err := d.Decode(&f.raw); err != nil {
			return nil, false
		}
		out = append(out, f)
	}
	if _, err := d.Token(); err != nil || d.InputOffset() != int64(len(object)) {
		return nil, false
	}
	return out, true
}

func objectOf(fields []field) []byte {
	var b bytes.Buffer
	for i, f := range fields {
		b.WriteByte("{,"[min(i, 1)])
		b.Write(quoted(f.name))
		b.WriteByte(':')
		b.Write(f.raw)
	}
	if len(fields) == 0 {
		b.WriteByte('{')
	}
	b.WriteByte('}')
	return b.Bytes()
}

func quoted(s string) []byte {
	text, err := json.Marshal(s)
	if err != nil { // a string always has a JSON form
		return []byte(`""`)
	}
	return text
}

// commitmentField is how a commitment stands in a payload.
type commitmentField struct {
	Commitment string `json:"commitment"`
}

// draftOf is the draft of an entry: its words are replaced by commitments.
func draftOf(e Entry) draft {
	d := draft{kind: e.Kind, at: e.At, payload: e.Payload}
	names := e.Kind.committed()
	if names == nil {
		return d
	}
	fields, ok := fieldsOf(e.Payload)
	if !ok {
		return d // nothing is lost; it stands in the chain as it is
	}
	for i, f := range fields {
		if !slices.Contains(names, f.name) {
			continue
		}
		var o opening
		if json.Unmarshal(f.raw, &o.text) != nil {
			o.text = string(f.raw) // no string: its JSON text is kept
		}
		_, _ = rand.Read(o.salt[:]) // never fails, by its own promise
		fields[i].raw = append(append([]byte(`{"commitment":"`), o.commitment(f.name)...), `"}`...)
		d.openings = append(d.openings, o.salt[:]...)
		d.openings = appendString(d.openings, o.text)
	}
	d.payload = objectOf(fields)
	return d
}

// openingsOf reads stored openings; false if they are not what was written.
func openingsOf(b []byte) ([]opening, bool) {
	c := cursorAt(b)
	var all []opening
	var again []byte
	for len(c.Left) > 0 && !c.Bad {
		var o opening
		copy(o.salt[:], c.Bytes(saltSize))
		o.text = string(c.Bytes(c.Uvarint()))
		all = append(all, o)
		again = appendString(append(again, o.salt[:]...), o.text)
	}
	return all, !c.Bad && bytes.Equal(again, b)
}

// reveal puts the words back into a payload. Every commitment must have its
// opening, and every opening its commitment.
func reveal(kind Kind, chained, stored []byte) ([]byte, error) {
	names := kind.committed()
	if names == nil && len(stored) == 0 {
		return chained, nil
	}
	openings, ok := openingsOf(stored)
	fields, isObject := fieldsOf(chained)
	if !ok || !isObject && len(openings) > 0 {
		return nil, damaged("the words of people in it are not as they were written")
	}
	if !isObject {
		return chained, nil
	}
	for i, f := range fields {
		var c commitmentField
		if !slices.Contains(names, f.name) || json.Unmarshal(f.raw, &c) != nil {
			continue
		}
		if len(openings) == 0 || openings[0].commitment(f.name) != c.Commitment {
			return nil, damaged("the words under %q are not as they were written", f.name)
		}
		fields[i].raw = quoted(openings[0].text)
		openings = openings[1:]
	}
	if len(openings) > 0 {
		return nil, damaged("it has words that belong to nothing")
	}
	return objectOf(fields), nil
}
