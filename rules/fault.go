package rules

import (
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"

	"github.com/agnivade/levenshtein"
)

// Fault is one thing that is wrong with a rule or a derived name.
type Fault struct {
	Rule    int    // index of the rule, or of the derived name
	Derived bool   // it is a derived name
	Field   string // as rule files name it: name, when, priority, text …
	Offset  int    // byte in the text of the field at which it shows
	Message string
	Hint    string // what to do
}

// Position gives line and column, both from 1 and the column in characters, of a
// byte of text.
func Position(text string, offset int) (line, column int) {
	before := text[:min(max(offset, 0), len(text))]
	start := strings.LastIndexByte(before, '\n') + 1
	return strings.Count(before, "\n") + 1, utf8.RuneCountInString(before[start:]) + 1
}

// mostCompared bounds, in bytes, what is compared of a misspelt name.
const mostCompared = 64

// nearest gives a hint with the names that are spelt most like name.
func nearest(name string, names []string) string {
	type near struct {
		name string
		d    int
	}
	var all []near
	name = name[:min(len(name), mostCompared)]
	for _, n := range names {
		d := levenshtein.ComputeDistance(name, n)
		if tail := n[strings.LastIndexByte(n, '.')+1:]; tail != n {
			d = min(d, levenshtein.ComputeDistance(name, tail)+1) // the id of a channel without channel. before it
		}
		if d <= max(2, len(name)/3) || len(name) > 3 && strings.Contains(n, name) {
			all = append(all, near{n, d})
		}
	}
	slices.SortStableFunc(all, func(a, b near) int { return a.d - b.d })
	if len(all) == 0 {
		if len(names) <= 12 {
			return "use one of " + strings.Join(names, ", ")
		}
		return "names are the quantities, such as choke_margin_percent, and channel.<id>, quality.<id>, usable.<id>, egt.<band>.over"
	}
	var out []string
	for _, n := range all[:min(3, len(all))] {
		out = append(out, n.name)
	}
	return fmt.Sprintf("is it %s?", strings.Join(out, ", "))
}
