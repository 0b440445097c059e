package config

import (
	"fmt"
	"strings"
	"testing"
)

// Places in texts that TOML allows but few people write. The mark ^ stands
// before the value of the key, ~ before the key itself.
func TestPlaces(t *testing.T) {
	for name, c := range map[string]struct{ path, text string }{
		"plain":             {"a", "x = 1\n~a = ^2"},
		"in a table":        {"t.a", "a = 1\n[t]\n ~a\t=\t^'x'"},
		"dotted":            {"t.u.a", "t.x = 1\n~t.u.a = ^2"},
		"quoted":            {"t.a b", "[ t ] # [x]\n~\"a b\" = ^2"},
		"escaped quote":     {"b", `a = "\"b = 1"` + "\n~b = ^2"},
		"literal backslash": {"b", `a = '\'` + "\n~b = ^2"},
		"multi-line":        {"b", "a = \"\"\"\nb = 1\n\\\"\"\"\\\"\"\"\" # \"\n~b = ^2"},
		"four quotes":       {"b", "a = '''x''''\n~b = ^2"},
		"list over lines":   {"b", "a = [ 1, # ]\n 2,\n 'b = 1' ]\n~b = ^2"},
		"second table":      {"t.1.a", "[[t]]\na = 1\n[[t]]\n~a = ^2"},
		"sub-table":         {"t.1.u.a", "[[t]]\n[t.u]\na = 1\n[[t]]\n[t.u]\n~a = ^2"},
		"lists in lists":    {"t.1.u.1.a", "[[t]]\n[[t.u]]\na = 0\n[[t]]\n[[t.u]]\na = 1\n[[t.u]]\n~a = ^2"},
		"inline table":      {"t.b", "t = { a = [1, {c = 2}], ~b = ^2 }"},
		"inline list":       {"t.1.a", "t = [ { a = 1 }, { ~a = ^2 } ]"},
		"characters":        {"t.b", "t = { a = \"äöü→\", ~b = ^2 }"},
		"date":              {"b", "a = 2026-07-01T12:00:00Z # x\n~b = ^07:00:00"},
	} {
		mark := func(m, other string) string {
			before, _, _ := strings.Cut(strings.ReplaceAll(c.text, other, ""), m)
			line := before[strings.LastIndexByte(before, '\n')+1:]
			return fmt.Sprint(strings.Count(before, "\n")+1, len([]rune(line))+1)
		}
		src := newSource(strings.NewReplacer("^", "", "~", "").Replace(c.text))
		k, v := src.key(c.path), src.value(c.path)
		if got, want := fmt.Sprint(k.line, k.column), mark("~", "^"); got != want {
			t.Errorf("%s: key at %s, want %s", name, got, want)
		}
		if got, want := fmt.Sprint(v.line, v.column), mark("^", "~"); got != want {
			t.Errorf("%s: value at %s, want %s", name, got, want)
		}
	}
}

func TestNearest(t *testing.T) {
	known := []string{"approach_speed", "fastest_approach_speed", "hold", "id"}
	for word, want := range map[string]string{
		"aproach_speed": "approach_speed", "approachspeed": "approach_speed", "hld": "hold", "holds": "hold", "if": "id",
		"colour": "", "": "", strings.Repeat("hold", 100): "",
	} {
		if got := nearest(word, known); got != want {
			t.Errorf("%q: %q, want %q", word, got, want)
		}
	}
}
