package published_test

import (
	"bytes"
	"encoding/csv"
	"os"
	"path/filepath"
	"strconv"
	"testing"
)

// table is a file of testdata/published: columns by name, as printed.
type table struct {
	t    testing.TB
	name string
	head []string
	rows [][]string
}

func readTable(t testing.TB, name string) table {
	t.Helper()
	content, err := os.ReadFile(filepath.Join("..", "..", "testdata", "published", name))
	if err != nil {
		t.Fatal(err)
	}
	r := csv.NewReader(bytes.NewReader(content))
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil || len(rows) < 2 {
		t.Fatalf("%s has %d lines: %v", name, len(rows), err)
	}
	return table{t: t, name: name, head: rows[0], rows: rows[1:]}
}

// text returns a column as it is printed.
func (tb table) text(column string) []string {
	tb.t.Helper()
	for i, name := range tb.head {
		if name != column {
			continue
		}
		var all []string
		for _, row := range tb.rows {
			all = append(all, row[i])
		}
		return all
	}
	tb.t.Fatalf("%s has no column %s among %v", tb.name, column, tb.head)
	return nil
}

// column returns a column of numbers; an empty cell is 0.
func (tb table) column(name string) []float64 {
	tb.t.Helper()
	var all []float64
	for i, cell := range tb.text(name) {
		if cell == "" {
			all = append(all, 0)
			continue
		}
		x, err := strconv.ParseFloat(cell, 64)
		if err != nil {
			tb.t.Fatalf("%s, row %d: %v", tb.name, i+1, err)
		}
		all = append(all, x)
	}
	return all
}
