// Package outside carries the reference tables that tests hold the program
// against: numbers that nobody here wrote, each with its origin in the lines
// that begin with "#". LICENCES.txt has the notices.
package outside

import (
	"embed"
	"encoding/csv"
	"strconv"
	"testing"
)

//go:embed *.csv *.json
var files embed.FS

// Read is a file as it stands.
func Read(t testing.TB, name string) []byte {
	t.Helper()
	b, err := files.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// Rows is the rows of a table, by the names of its columns.
func Rows(t testing.TB, name string) []map[string]string {
	t.Helper()
	f, err := files.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	defer func() { _ = f.Close() }() // only read from
	r := csv.NewReader(f)
	r.Comment = '#'
	r.TrimLeadingSpace = true
	lines, err := r.ReadAll()
	if err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	var rows []map[string]string
	for _, line := range lines[1:] {
		row := make(map[string]string, len(line))
		for i, column := range lines[0] {
			row[column] = line[i]
		}
		rows = append(rows, row)
	}
	return rows
}

// Number is the number in a cell.
func Number(t testing.TB, cell string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(cell, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}
