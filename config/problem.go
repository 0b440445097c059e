package config

import (
	"fmt"
	"slices"
	"strings"
	"unicode"
	"unicode/utf8"
)

// Problem is one thing that is wrong with a configuration, where it stands,
// and how to mend it.
type Problem struct {
	File    string
	Line    int    // from 1; 0 when the file as a whole is meant
	Column  int    // in characters, from 1
	Key     string // dotted, as "station.2.height"; empty for the text itself
	Value   string // as it stands in the file; empty if there is none
	Message string
	Mend    string
}

// Error is `file:line:col: key: message (got "value"); mend`.
func (p Problem) Error() string {
	var b strings.Builder
	b.WriteString(p.File)
	if p.Line > 0 {
		fmt.Fprintf(&b, ":%d:%d", p.Line, p.Column)
	}
	b.WriteString(": ")
	if p.Key != "" {
		b.WriteString(p.Key + ": ")
	}
	b.WriteString(p.Message)
	if p.Value != "" {
		fmt.Fprintf(&b, " (got %q)", p.Value)
	}
	if p.Mend != "" {
		b.WriteString("; " + p.Mend)
	}
	return b.String()
}

// under reports whether the problem is one of a section.
func (p Problem) under(section string) bool {
	return p.Key == section || strings.HasPrefix(p.Key, section+".")
}

// Problems is everything that is wrong with a configuration, in the order of
// the file.
type Problems []Problem

// Error prints one problem a line.
func (ps Problems) Error() string {
	lines := make([]string, len(ps))
	for i, p := range ps {
		lines[i] = p.Error()
	}
	return strings.Join(lines, "\n")
}

// sort brings problems into the order of the file.
func (ps Problems) sort() {
	slices.SortStableFunc(ps, func(a, b Problem) int {
		if a.Line != b.Line {
			return a.Line - b.Line
		}
		return a.Column - b.Column
	})
}

// maxShown is how many characters of a value a problem quotes.
const maxShown = 60

// shown is a value cut to a length that fits a line, without what would
// break the line or steer a terminal.
func shown(s string) string {
	s = strings.Map(func(r rune) rune {
		if unicode.IsPrint(r) {
			return r
		}
		return '\uFFFD'
	}, s)
	if utf8.RuneCountInString(s) <= maxShown {
		return s
	}
	return string([]rune(s)[:maxShown]) + "..."
}

// nearest is the known word closest to word, empty if none is close: at most
// one letter in three may differ (edit distance of Levenshtein 1966).
func nearest(word string, known []string) string {
	best, least := "", len(word)/3+2
	for _, k := range known {
		if d := editDistance(word, k); d < least {
			best, least = k, d
		}
	}
	return best
}

// editDistance is the least number of letters to insert, delete or replace
// to turn a into b.
func editDistance(a, b string) int {
	if len(a) > 64 || len(b) > 64 { // no key of ours is so long
		return max(len(a), len(b))
	}
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := 1; i <= len(a); i++ {
		diagonal := row[0]
		row[0] = i
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			diagonal, row[j] = row[j], min(diagonal+cost, row[j]+1, row[j-1]+1)
		}
	}
	return row[len(b)]
}
