package config

import (
	"flag"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

var update = flag.Bool("update", false, "write the golden files anew")

const badFiles = "../../../testdata/config/bad/"

// expectation is a fault that a file announces on the line where it must show.
type expectation struct {
	file string
	line int
	text string
}

// announced reads the notes "# FAULT: text | FAULT: text" of a file.
func announced(t *testing.T, name string) (out []expectation) {
	t.Helper()
	text, err := os.ReadFile(name)
	if err != nil {
		return nil // a file that a rig names in vain
	}
	for i, line := range strings.Split(string(text), "\n") {
		_, notes, ok := strings.Cut(line, "# FAULT:")
		if !ok {
			continue
		}
		for note := range strings.SplitSeq(notes, "| FAULT:") {
			out = append(out, expectation{filepath.Clean(name), i + 1, strings.TrimSpace(note)})
		}
	}
	return out
}

// Every fault is found, at its line, all at once, and no others. What must be
// found is written into the files beside the mistakes; the golden files hold the
// full wording and the columns for a person to read.
func TestFaults(t *testing.T) {
	names, err := filepath.Glob(badFiles + "*.yaml")
	if err != nil || len(names) < 10 {
		t.Fatalf("bad files: %v %v", names, err)
	}
	for _, name := range names {
		t.Run(filepath.Base(name), func(t *testing.T) {
			b, cfg, faults := Load(name)
			if len(faults) == 0 {
				t.Fatal("no fault found")
			}
			if cfg.Hash != "" {
				t.Error("a configuration in spite of faults")
			}
			var want []expectation
			for _, f := range b.Files {
				want = append(want, announced(t, badFiles+f.Name)...)
			}
			var got strings.Builder
			for _, f := range faults {
				got.WriteString(strings.TrimPrefix(filepath.ToSlash(f.String()), badFiles) + "\n")
				if f.Hint == "" {
					t.Errorf("%s: no hint", f)
				}
				i := slices.IndexFunc(want, func(e expectation) bool {
					return e.file == filepath.Clean(f.File) && e.line == f.Line && strings.Contains(f.Message, e.text)
				})
				if i >= 0 {
					want = slices.Delete(want, i, i+1)
				} else if len(announced(t, name)) > 0 {
					t.Errorf("not announced: %s", f)
				}
			}
			for _, e := range want {
				t.Errorf("%s:%d: not found: %s", e.file, e.line, e.text)
			}
			golden(t, strings.TrimSuffix(name, ".yaml")+".faults", got.String())
		})
	}
}

func golden(t *testing.T, name, got string) {
	t.Helper()
	if *update {
		if err := os.WriteFile(name, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	want, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) {
		t.Errorf("%s differs; run with -update and read the difference:\n%s", name, got)
	}
}
