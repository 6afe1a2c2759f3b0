package rules

import (
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"
)

// Fault is one thing that is wrong with a rule.
type Fault struct {
	Rule    int    // index of the rule
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

// nearest gives a hint with the names that are spelt most like name.
func nearest(name string, names []string) string {
	type near struct {
		name string
		d    int
	}
	var all []near
	for _, n := range names {
		d := distance(name, n)
		if tail := n[strings.LastIndexByte(n, '.')+1:]; tail != n {
			d = min(d, distance(name, tail)+1) // the id of a channel without channel. before it
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

// distance is the number of bytes to change, add or drop to get from a to b.
func distance(a, b string) int {
	if len(a) > 64 || len(b) > 64 {
		return max(len(a), len(b))
	}
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := range len(a) {
		diagonal := row[0]
		row[0] = i + 1
		for j := range len(b) {
			change := diagonal
			if a[i] != b[j] {
				change++
			}
			diagonal = row[j+1]
			row[j+1] = min(change, row[j]+1, row[j+1]+1)
		}
	}
	return row[len(b)]
}
