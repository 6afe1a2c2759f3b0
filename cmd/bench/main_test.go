package main

import (
	"bytes"
	"encoding/json"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

const rig = "../../testdata/rigs/example.yaml"

func TestUsage(t *testing.T) {
	for _, tt := range []struct {
		args []string
		code int
		want string
	}{
		{[]string{"example.yaml"}, 2, "no arguments"},
		{[]string{"part", "publish"}, 1, "not called by bench"},
		{[]string{"--only", "none", "--rig", rig}, 1, "no figures"},
		{[]string{"--only", "rules", "--rig", "none.yaml"}, 1, "none.yaml"},
	} {
		var out, errs bytes.Buffer
		if code := command(t.Context(), tt.args, &out, &errs); code != tt.code || !strings.Contains(errs.String(), tt.want) {
			t.Errorf("%v: exit %d, %q; want %d, %q", tt.args, code, errs.String(), tt.code, tt.want)
		}
	}
}

// What is written has the keys that readers of bench.json rely on, and a figure that
// no machine can change: the rules allocate nothing.
func TestFigures(t *testing.T) {
	file := filepath.Join(t.TempDir(), "bench.json")
	var out, errs bytes.Buffer
	if code := command(t.Context(), []string{"--quick", "--only", "rules", "--rig", rig, "--out", file}, &out, &errs); code != 0 {
		t.Fatalf("exit %d: %s", code, errs.String())
	}
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	var figures []map[string]any
	if err := json.Unmarshal(text, &figures); err != nil {
		t.Fatal(err)
	}
	if len(figures) != 2 {
		t.Fatalf("%d figures of the rules, want 2", len(figures))
	}
	keys := []string{"beside", "figure", "met", "ours", "ratio", "target"}
	for _, f := range figures {
		var got []string
		for k := range f {
			got = append(got, k)
		}
		slices.Sort(got)
		if !slices.Equal(got, keys) {
			t.Errorf("keys %v, want %v", got, keys)
		}
		if !strings.Contains(out.String(), f["figure"].(string)) {
			t.Errorf("%q is not in the table", f["figure"])
		}
	}
	if f := figures[1]; f["ours"] != 0.0 || f["beside"] != nil || f["met"] != true {
		t.Errorf("allocations: %v", f)
	}
}
