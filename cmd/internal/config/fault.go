package config

import (
	"cmp"
	"fmt"
	"path/filepath"
	"slices"
	"strings"

	"github.com/agnivade/levenshtein"
)

// Fault is one thing that is wrong with a rig or rule file.
type Fault struct {
	File    string `json:"file"`
	Line    int    `json:"line"`   // from 1; 0 = the file as a whole
	Column  int    `json:"column"` // from 1, in characters
	Path    string `json:"path"`   // such as channels[3].range
	Message string `json:"message"`
	Hint    string `json:"hint"` // what to do
}

// String gives file:line:column: path: message; hint: what to do.
func (f Fault) String() string {
	var b strings.Builder
	b.WriteString(f.File)
	if f.Line > 0 {
		fmt.Fprintf(&b, ":%d:%d", f.Line, f.Column)
	}
	b.WriteString(": ")
	if f.Path != "" {
		b.WriteString(f.Path + ": ")
	}
	b.WriteString(f.Message)
	if f.Hint != "" {
		b.WriteString("; hint: " + f.Hint)
	}
	return b.String()
}

// tidy orders faults as a reader meets them and drops what a like: repeats. The
// file order is that of the bundle.
func tidy(faults []Fault, files []File) []Fault {
	order := make(map[string]int, len(files))
	for i, f := range files {
		order[f.Name] = i
	}
	slices.SortStableFunc(faults, func(a, b Fault) int {
		return cmp.Or(cmp.Compare(order[a.File], order[b.File]), cmp.Compare(a.Line, b.Line), cmp.Compare(a.Column, b.Column))
	})
	var out []Fault
	for _, f := range faults {
		same := func(g Fault) bool {
			return g.File == f.File && g.Line == f.Line && g.Column == f.Column && g.Message == f.Message
		}
		if f.Line == 0 || !slices.ContainsFunc(out[max(0, len(out)-32):], same) {
			out = append(out, f)
		}
	}
	return out
}

// place puts the folder of the rig file before the file names.
func place(faults []Fault, folder string) []Fault {
	for i := range faults {
		faults[i].File = filepath.Join(folder, filepath.FromSlash(faults[i].File))
	}
	return faults
}

// mostCompared bounds, in bytes, what is compared of a misspelt name.
const mostCompared = 64

// nearest gives the hint for a name that is none of names: the nearest in
// spelling, one that goes on where it stops before others, or the choice.
func nearest(name string, names []string) string {
	name = name[:min(len(name), mostCompared)]
	best, at := len(name)/2+2, ""
	for _, n := range names {
		d := levenshtein.ComputeDistance(strings.ToLower(name), strings.ToLower(n))
		if len(name) > 2 && strings.HasPrefix(n, name) {
			d = min(d, 1)
		}
		if d < best {
			best, at = d, n
		}
	}
	switch {
	case at != "":
		return fmt.Sprintf("is it %q?", at)
	case len(names) == 0:
		return "there is none to name"
	case len(names) <= 12:
		return "use one of " + strings.Join(names, ", ")
	}
	return fmt.Sprintf("use one of the %d that are there, such as %s", len(names), strings.Join(names[:6], ", "))
}
