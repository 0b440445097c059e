package main

import (
	"encoding/json"
	"errors"
	"strings"
	"testing"
	"unicode"
)

func TestMastMemory(t *testing.T) {
	var m mastMemory
	read := func() (o struct {
		Gaps     []gapObject
		GapsFrom string  `json:"gaps_from"`
		At       *string `json:"rejected_at"`
		Why      *string `json:"rejected_why"`
		Payload  *string `json:"rejected_payload"`
	}) {
		t.Helper()
		if err := json.Unmarshal([]byte("{"+string(m.object())+"}"), &o); err != nil {
			t.Fatalf("%v\n%s", err, m.object())
		}
		return o
	}
	for s, live := range []bool{true, true, false, false, true, false} {
		m.step(momentOf(s), live)
	}
	o := read()
	if o.GapsFrom != seconds(momentOf(0)) || len(o.Gaps) != 2 || o.Gaps[0].From != seconds(momentOf(2)) || *o.Gaps[0].To != seconds(momentOf(4)) || o.Gaps[1].To != nil || o.At != nil {
		t.Errorf("%+v", o)
	}
	before := &m.text[0]
	m.step(momentOf(6), false)
	if m.object(); &m.text[0] != before {
		t.Error("a step that changes nothing makes a new text")
	}
	for s := range 3 * maxGaps {
		m.step(momentOf(10+2*s), true)
		m.step(momentOf(11+2*s), false)
	}
	if o = read(); len(o.Gaps) != maxGaps || o.GapsFrom != o.Gaps[0].From {
		t.Errorf("%d gaps from %s on", len(o.Gaps), o.GapsFrom)
	}
	m.reject(momentOf(9), []byte(strings.Repeat("x", 5000)), errors.New("no speed"))
	if o = read(); *o.Why != "no speed" || len(*o.Payload) != maxShown+len(" …") {
		t.Errorf("%s: %d", *o.Why, len(*o.Payload))
	}
}

// TestShownPayload: whatever a mast sends, what is shown is one line of plain
// characters from which the bytes can be told.
func TestShownPayload(t *testing.T) {
	for payload, want := range map[string]string{
		`{"v":1}`: `{"v":1}`, "a\nb\x00\x1b[31m": `a\nb\x00\x1b[31m`, "\xff\xfe": `\xff\xfe`, "é": "é",
		"\u202egnp.exe": `\u202egnp.exe`, `\n`: `\\n`, "\U0001F300": `\U0001f300`, "'": "'",
	} {
		got := shownPayload([]byte(payload), false)
		if got != want {
			t.Errorf("%q is shown as %q, want %q", payload, got, want)
		}
		if strings.ContainsFunc(got, unicode.IsControl) {
			t.Errorf("%q is shown with a control character", payload)
		}
	}
}
