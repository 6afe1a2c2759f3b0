// Package vectors compares computed values with published ones in tests: it reads the
// files of testdata/vectors, each with its source in line 1, and tells the largest
// difference to each source as a row of a table.
package vectors

import (
	"bytes"
	"encoding/csv"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// Row is a line of a file by its column names.
type Row map[string]string

// Read reads a file of testdata/vectors from a test of a package two folders below the
// top; the first line must be a comment that names the source.
func Read(tb testing.TB, name string) []Row {
	tb.Helper()
	text, err := os.ReadFile(filepath.Join("..", "..", "testdata", "vectors", name))
	if err != nil {
		tb.Fatal(err)
	}
	if !bytes.HasPrefix(text, []byte("# ")) {
		tb.Fatalf("%s does not begin with its source", name)
	}
	r := csv.NewReader(bytes.NewReader(text))
	r.Comment = '#'
	lines, err := r.ReadAll()
	if err != nil {
		tb.Fatalf("%s: %v", name, err)
	}
	if len(lines) < 2 {
		tb.Fatalf("%s has no rows", name)
	}
	rows := make([]Row, len(lines)-1)
	for i, line := range lines[1:] {
		rows[i] = Row{}
		for k, column := range lines[0] {
			rows[i][column] = line[k]
		}
	}
	return rows
}

// Num gives a number, or quotient as 4/3.
func (r Row) Num(tb testing.TB, column string) float64 {
	tb.Helper()
	text, ok := r[column]
	if !ok {
		tb.Fatalf("no column %q", column)
	}
	over, under, quotient := strings.Cut(text, "/")
	x, err := strconv.ParseFloat(over, 64)
	if err == nil && quotient {
		var d float64
		d, err = strconv.ParseFloat(under, 64)
		x /= d
	}
	if err != nil {
		tb.Fatalf("column %q: %v", column, err)
	}
	return x
}

// Source is one source of values and how they are compared.
type Source struct {
	name, what, why string
	compare         func(t *testing.T, c *Comparison)
}

// From makes a Source: its name as a table shows it, which quantities are compared, and
// what differs, for which the tolerance is.
func From(name, what, why string, compare func(t *testing.T, c *Comparison)) Source {
	return Source{name, what, why, compare}
}

// Comparison gathers the differences to one source.
type Comparison struct {
	values  int
	largest float64 // relative
	where   string
}

// Relative compares within a relative tolerance.
func (c *Comparison) Relative(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	c.Within(t, what, got, want, tolerance*math.Abs(want))
}

// Within compares within an absolute tolerance. A want of 0 has no relative difference
// to tell of.
func (c *Comparison) Within(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	c.values++
	if want != 0 {
		if d := math.Abs(got/want - 1); !(d <= c.largest) {
			c.largest, c.where = d, what
		}
	}
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.12g, want %.12g within %.2g", what, got, want, tolerance)
	}
}

// Run compares every source in a subtest, and logs the table of largest differences.
func Run(t *testing.T, sources []Source) {
	t.Helper()
	table := []string{"| source | compared | values | largest relative difference | at | what differs |", "|---|---|---|---|---|---|"}
	for _, s := range sources {
		t.Run(s.name, func(t *testing.T) {
			var c Comparison
			s.compare(t, &c)
			if c.values == 0 {
				t.Error("nothing is compared")
			}
			table = append(table, fmt.Sprintf("| %s | %s | %d | %.1e | %s | %s |", s.name, s.what, c.values, c.largest, c.where, s.why))
		})
	}
	t.Log("\n" + strings.Join(table, "\n"))
}
