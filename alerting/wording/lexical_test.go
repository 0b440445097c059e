package wording

import (
	"regexp"
	"strings"
	"testing"

	"sockline/alerting"
)

// forbidden are the words that no text may use: they say or imply that a path
// is free of shear, give advice, or are the names of warnings that others are
// licensed to issue. "calm" is a measurement and only ever begins one.
const forbidden = " clear clears cleared safe safely safety normal normally all ok okay good fine quiet free " +
	"warning warnings warn caution advisory alarm danger hazard should must avoid recommend recommended continue divert windshear "

// forbiddenWord is the first of them in the text.
func forbiddenWord(text string) string {
	for word := range strings.FieldsFuncSeq(strings.ToLower(text), func(r rune) bool { return r < 'a' || r > 'z' }) {
		if strings.Contains(forbidden, " "+word+" ") {
			return word
		}
	}
	return ""
}

// signed is a number with a sign.
var signed = regexp.MustCompile(`(^|[^0-9A-Za-z])[-+\x{2212}][0-9]`)

// lexical checks one text.
func lexical(tb testing.TB, text string) {
	tb.Helper()
	if w := forbiddenWord(text); w != "" {
		tb.Errorf("%q in: %s", w, text)
	}
	if strings.Count(strings.ToLower(text), "calm") != strings.Count(text, ": calm, the mean under 1 kt") {
		tb.Errorf("calm that was not observed in: %s", text)
	}
	// The cheap look comes first: the expression is slow under -race.
	if strings.ContainsAny(text, "-+\u2212") && signed.MatchString(text) {
		tb.Errorf("a sign in: %s", text)
	}
	for _, odd := range []string{"NaN", "Inf", "  ", "..", " .", " ,", ",,", "%!", "()"} {
		if strings.Contains(text, odd) {
			tb.Errorf("%q in: %s", odd, text)
		}
	}
	if !strings.HasSuffix(text, ".") {
		tb.Errorf("no full stop: %s", text)
	}
}

// The check must be able to fail.
func TestLexicalCheckFindsWhatItForbids(t *testing.T) {
	for _, bad := range []string{"Runway 07 is clear.", "All normal.", "no windshear.", "falls by -5 kt.", "You should wait."} {
		if forbiddenWord(bad) == "" && !signed.MatchString(bad) {
			t.Errorf("nothing found in %q", bad)
		}
	}
	for _, word := range []string{"take-off", "mid-north", "20260701T141503Z-07"} {
		if signed.MatchString(word) {
			t.Errorf("a sign in %q", word)
		}
	}
	if !strings.Contains(alerting.Notice, "No alert does not mean no windshear.") {
		t.Error("the notice has lost the sentence that the check relies on")
	}
}
