package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"io"
	"os"
	"os/exec"
	"slices"
	"strings"
	"testing"
)

const module = "throatwatch/"

// stage orders the top-level folders as data passes through them.
// A package may import its own stage or an earlier one, never a later one.
var stage = map[string]int{"ingest": 0, "monitor": 1, "rules": 2, "dashboard": 3, "cmd": 4}

// folders are all that may stand at the top beside dot-files.
var folders = []string{
	"cmd", "ingest", "monitor", "rules", "dashboard", "deploy", "testdata", "go.mod", "go.sum", "README.md", "DEVELOPERS.md",
}

// only names, for a top folder and a stage that imports it, the packages of that
// stage that may: of monitor only alignment knows how bytes came in, of rules
// only the pipeline.
var only = map[string]map[string][]string{
	"ingest": {"monitor": {"monitor/align"}, "rules": {"rules/pipeline"}},
}

// pure lists packages that compute and nothing else.
var pure = []string{
	"monitor", "monitor/unit", "monitor/gas", "monitor/nozzle", "monitor/uncertainty", "monitor/calib", "monitor/phase",
	"monitor/steady", "monitor/rake", "monitor/egt", "monitor/align", "monitor/compute", "monitor/check", "monitor/archive", "rules/alarm", "rules", "rules/figures", "rules/card",
}

var impure = []string{"net", "net/http", "os", "database/sql", "log", "log/slog", "math/rand", "math/rand/v2"}

type listed struct {
	ImportPath string
	Doc        string
	Imports    []string
}

func list(t *testing.T) []listed {
	t.Helper()
	out, err := exec.CommandContext(t.Context(), "go", "list", "-json=ImportPath,Doc,Imports", module+"...").Output()
	if err != nil {
		t.Fatal(err)
	}
	var pkgs []listed
	for dec := json.NewDecoder(bytes.NewReader(out)); ; {
		var p listed
		if err := dec.Decode(&p); errors.Is(err, io.EOF) {
			return pkgs
		} else if err != nil {
			t.Fatal(err)
		}
		pkgs = append(pkgs, p)
	}
}

func top(path string) string {
	first, _, _ := strings.Cut(path, "/")
	return first
}

// TestImportDirection keeps the data running one way.
func TestImportDirection(t *testing.T) {
	known := map[string]bool{}
	for _, p := range list(t) {
		from := strings.TrimPrefix(p.ImportPath, module)
		known[from] = true
		if p.Doc == "" {
			t.Errorf("%s has no package comment", from)
		}
		if _, ok := stage[top(from)]; !ok {
			t.Errorf("%s is in a top folder without a stage", from)
		}
		for _, imp := range p.Imports {
			if slices.Contains(pure, from) && slices.Contains(impure, imp) {
				t.Errorf("%s only computes, yet imports %s", from, imp)
			}
			to, ours := strings.CutPrefix(imp, module)
			if !ours {
				continue
			}
			if stage[top(to)] > stage[top(from)] {
				t.Errorf("%s imports %s: data flows the other way", from, to)
			}
			if allowed, ok := only[top(to)][top(from)]; ok && !slices.Contains(allowed, from) {
				t.Errorf("%s imports %s: of %s only %v may", from, to, top(from), allowed)
			}
		}
	}
	for _, p := range pure {
		if !known[p] {
			t.Errorf("%s is listed as pure and does not exist", p)
		}
	}
}

// TestTopLevel keeps the top level as agreed.
func TestTopLevel(t *testing.T) {
	entries, err := os.ReadDir("../..")
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		if !strings.HasPrefix(e.Name(), ".") && !slices.Contains(folders, e.Name()) && e.Name() != "data" {
			t.Errorf("%s stands at the top level and is not agreed", e.Name())
		}
	}
	for _, name := range folders {
		if !slices.ContainsFunc(entries, func(e os.DirEntry) bool { return e.Name() == name }) {
			t.Errorf("%s is missing at the top level", name)
		}
	}
}
