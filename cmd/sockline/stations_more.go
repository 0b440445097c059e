package main

import (
	"encoding/json"
	"strconv"
	"strings"
	"unicode"
	"unicode/utf8"

	"sockline/sensors"
)

const (
	// maxGaps is how many gaps of a mast are remembered, the newest.
	maxGaps = 100
	// maxShown is how much of a payload is shown, in bytes.
	maxShown = 256
)

// rejection is the last payload of a mast that was not taken.
type rejection struct {
	at      sensors.Instant
	payload []byte // its first maxShown bytes
	cut     bool   // there was more
	why     string
}

// gap is a time in which a mast served no ground. To is 0 while it lasts.
type gap struct{ from, to sensors.Instant }

// mastMemory is what is remembered of a mast for a technician. Owned by the
// loop.
type mastMemory struct {
	since sensors.Instant // what is known begins here
	gaps  []gap
	last  rejection

	text    []byte // all of it as JSON, without the braces
	changed bool
}

// gapObject is a gap as it is told.
type gapObject struct {
	From string  `json:"from"`
	To   *string `json:"to"` // null while it lasts
}

// step takes what a step found of the mast.
func (m *mastMemory) step(at sensors.Instant, live bool) {
	if m.since == 0 {
		m.since, m.changed = at, true
	}
	n := len(m.gaps)
	open := n > 0 && m.gaps[n-1].to == 0
	switch {
	case !live && !open:
		m.gaps = append(m.gaps, gap{from: at})
		if len(m.gaps) > maxGaps {
			m.gaps = m.gaps[len(m.gaps)-maxGaps:]
			m.since = m.gaps[0].from // of what came before some is forgotten
		}
	case live && open:
		m.gaps[n-1].to = at
	default:
		return
	}
	m.changed = true
}

// reject takes a payload that gave no reading, or not all it holds.
func (m *mastMemory) reject(at sensors.Instant, payload []byte, err error) {
	m.last = rejection{at, append(m.last.payload[:0], payload[:min(len(payload), maxShown)]...), len(payload) > maxShown, err.Error()}
	m.changed = true
}

// object is all that is remembered, as members of a JSON object. It is a new
// text at each change.
func (m *mastMemory) object() []byte {
	if !m.changed {
		return m.text
	}
	m.changed = false
	o := struct {
		Gaps     []gapObject `json:"gaps"`
		GapsFrom string      `json:"gaps_from"`
		At       *string     `json:"rejected_at"` // null where nothing was rejected
		Why      *string     `json:"rejected_why"`
		Payload  *string     `json:"rejected_payload"`
	}{Gaps: []gapObject{}, GapsFrom: seconds(m.since)}
	for _, g := range m.gaps {
		told := gapObject{From: seconds(g.from)}
		if g.to != 0 {
			told.To = pointer(seconds(g.to))
		}
		o.Gaps = append(o.Gaps, told)
	}
	if r := &m.last; r.at != 0 {
		o.At, o.Why, o.Payload = pointer(seconds(r.at)), &r.why, pointer(shownPayload(r.payload, r.cut))
	}
	text, err := json.Marshal(o)
	if err != nil { // texts always have a JSON form
		return nil
	}
	m.text = text[1 : len(text)-1]
	return m.text
}

// shownPayload is the beginning of a payload as a line of text that anybody may
// look at: what is not a printing character is told by its code.
func shownPayload(payload []byte, cut bool) string {
	var b strings.Builder
	for rest := payload; len(rest) > 0; {
		r, size := utf8.DecodeRune(rest)
		switch {
		case r == utf8.RuneError && size <= 1:
			b.WriteString(`\x`)
			b.WriteString(strconv.FormatUint(uint64(rest[0])|0x100, 16)[1:])
		case r == '\\':
			b.WriteString(`\\`)
		case unicode.IsPrint(r) && r <= unicode.MaxLatin1:
			b.WriteRune(r)
		default:
			// Letters that run the other way, or join what stands beside them,
			// would make one payload look like another.
			quoted := strconv.QuoteRuneToASCII(r)
			b.WriteString(quoted[1 : len(quoted)-1])
		}
		rest = rest[size:]
	}
	if cut {
		b.WriteString(" …")
	}
	return b.String()
}

// remember is what is remembered of the masts by a loop, by the id of each, so
// that a reload loses none of it.
func (r *reporter) remember(before *reporter) {
	for i := range r.memories {
		for j := range before.memories {
			if r.cfg.Stations[i].ID == before.cfg.Stations[j].ID {
				r.memories[i] = before.memories[j]
			}
		}
	}
}
