package nozzle

import (
	"encoding/csv"
	"os"
	"path/filepath"
	"strconv"
	"testing"
)

// vectors reads a file of testdata/vectors, whose first lines name its source,
// into one map per row; wants what is no number by text.
func vectors(t *testing.T, name string) []map[string]string {
	t.Helper()
	f, err := os.Open(filepath.Join("..", "..", "testdata", "vectors", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(f)
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out []map[string]string
	for _, row := range rows[1:] {
		v := map[string]string{}
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

func num(t *testing.T, v map[string]string, name string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(v[name], 64)
	if err != nil {
		t.Fatalf("column %q: %v", name, err)
	}
	return x
}

// worked gives the recomputed answers of one worked example.
func worked(t *testing.T, example string) map[string]float64 {
	t.Helper()
	out := map[string]float64{}
	for _, v := range vectors(t, "worked_examples.csv") {
		if v["case"] == example {
			out[v["quantity"]] = num(t, v, "value")
		}
	}
	if len(out) == 0 {
		t.Fatalf("no worked example %s", example)
	}
	return out
}
