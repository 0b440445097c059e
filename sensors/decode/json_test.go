package decode

import (
	"encoding/json"
	"strings"
	"testing"
)

func TestScannerIsAsStrictAsTheStandardLibrary(t *testing.T) {
	for _, document := range []string{
		`{}`, `[]`, ` [ ] `, `{"a":1}`, `{"a":[1,{"b":null}],"c":true,"d":false}`, "\t{\r\n}\n", `[1,2]`, `[[]]`,
		`["\"\\\/\b\f\n\r\t\u00e9\uD83D\uDE00"]`, `["\ud800"]`, `["\udc00x"]`, `["\ud800\u0041"]`, `["é"]`, "[\"\xff\"]",
		`[-0,0.5,1e5,1E-5,-1.25e+10]`,
		``, `{`, `[`, `{"a"}`, `{"a":}`, `{"a":1,}`, `[1,]`, `[,1]`, `{1:2}`, `{"a":1 "b":2}`, `[1 2]`, `[1}`, `{"a":1]`,
		`[tru]`, `[trueish]`, `[nul]`, `[fals]`, `[t`, `[True]`, `["a]`, `["\x"]`, `["\u12"]`, `["\u12g4"]`, `["\`, `["\u`, "[\"\n\"]", "[\"\x00\"]",
		`[01]`, `[1.]`, `[.5]`, `[+1]`, `[1e]`, `[-]`, `[--1]`, `[NaN]`, `[Infinity]`, `[0x1]`, `[1_0]`, "[1\x00]", "[\x0b1]",
		`{"a":1}}`, `[] []`, `['a']`, `{a:1}`, `[/*x*/1]`, "\ufeff[]",
	} {
		s := scanner{data: []byte(document)}
		_, ok := s.value(0)
		if got, want := ok && s.end(), json.Valid([]byte(document)); got != want {
			t.Errorf("%q is JSON: %v, want %v", document, got, want)
		}
	}
}

func TestUnescape(t *testing.T) {
	for _, text := range []string{
		`plain`, `\"\\\/\b\f\n\r\t`, `\u0041\u00e9\u20ac`, `\uD83D\uDE00`, `\ud83d\ude00!`, `\ud800`, `\udc00`, `\ud800\u0041`, `\ud800\ud800\udc00`, `a\u005Fb`,
	} {
		quoted := []byte(`"` + text + `"`)
		var want string
		if err := json.Unmarshal(quoted, &want); err != nil {
			t.Fatal(err)
		}
		s := scanner{data: quoted}
		token, ok := s.string()
		if !ok {
			t.Errorf("%s is refused", text)
			continue
		}
		if got, _ := s.raw(token, nil); string(got) != want {
			t.Errorf("%s = %q, want %q", text, got, want)
		}
	}
}

func TestScannerDepth(t *testing.T) {
	for _, row := range []struct {
		levels int
		ok     bool
	}{{1, true}, {MaxDepth, true}, {MaxDepth + 1, false}, {20000, false}} {
		s := scanner{data: []byte(strings.Repeat("[", row.levels) + strings.Repeat("]", row.levels))}
		if _, ok := s.value(0); ok != row.ok || s.deep == row.ok {
			t.Errorf("%d levels: %v, deep %v; want %v", row.levels, ok, s.deep, row.ok)
		}
	}
}
