package gas

import (
	"bufio"
	"encoding/csv"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// vector is one line of a file of published values.
type vector map[string]string

func (v vector) num(t *testing.T, name string) float64 {
	t.Helper()
	num, den, quotient := strings.Cut(v[name], "/")
	x, err := strconv.ParseFloat(num, 64)
	if err != nil {
		t.Fatalf("column %q: %v", name, err)
	}
	if quotient {
		d, err := strconv.ParseFloat(den, 64)
		if err != nil {
			t.Fatalf("column %q: %v", name, err)
		}
		x /= d
	}
	return x
}

// vectors reads a file of testdata/vectors, whose first lines name its source.
func vectors(t *testing.T, name string) []vector {
	t.Helper()
	f, err := os.Open(filepath.Join("..", "..", "testdata", "vectors", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(bufio.NewReader(f))
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out []vector
	for _, row := range rows[1:] {
		v := vector{}
		for i, name := range rows[0] {
			v[name] = row[i]
		}
		out = append(out, v)
	}
	if len(out) == 0 {
		t.Fatalf("%s has no rows", name)
	}
	return out
}
