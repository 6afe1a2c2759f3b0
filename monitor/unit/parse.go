package unit

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"github.com/agnivade/levenshtein"
)

// NameError is returned for a unit that is not known, or that measures
// something else than is wanted.
type NameError struct {
	Name string    // as given
	Want Dimension // what was wanted; Invalid if anything would do
	Got  Dimension // what Name measures; Invalid if Name is not known
	Hint string    // what to do
}

// Error says what is wrong and what to do.
func (e *NameError) Error() string {
	switch {
	case e.Got != Invalid:
		return fmt.Sprintf("unit %q measures %s, wanted is %s: %s", e.Name, e.Got, e.Want, e.Hint)
	case e.Name == "":
		return fmt.Sprintf("unit missing: %s", e.Hint)
	}
	return fmt.Sprintf("unknown unit %q: %s", e.Name, e.Hint)
}

// ValueError is returned for a text that is not a number with a unit.
type ValueError struct {
	Text string // as given
	Hint string // what is wrong and what to do
}

// Error says what is wrong and what to do.
func (e *ValueError) Error() string { return fmt.Sprintf("value %q: %s", e.Text, e.Hint) }

// Parse gives the unit of that name. K, degC, degF and degR are temperatures
// here; ParseAs gives them as differences. The error is a *NameError.
func Parse(name string) (Unit, error) {
	if u, ok := byName[name]; ok {
		return u, nil
	}
	return Unit{}, &NameError{Name: name, Hint: hint(name, Invalid)}
}

// ParseAs gives the unit of that name measuring d, so that "degC" is without
// offset if d is TemperatureDifference. The error is a *NameError.
func ParseAs(name string, d Dimension) (Unit, error) {
	u, ok := byName[name]
	switch {
	case !ok:
		return Unit{}, &NameError{Name: name, Want: d, Hint: hint(name, d)}
	case d == TemperatureDifference && u.Dimension == Temperature:
		return u.Difference(), nil
	case u.Dimension == d:
		return u, nil
	case name == "":
		return Unit{}, &NameError{Want: d, Hint: hint(name, d)}
	}
	return Unit{}, &NameError{Name: name, Want: d, Got: u.Dimension, Hint: "use " + list(d)}
}

// Lookup is Parse for a name in a message: it allocates nothing and keeps
// nothing of name.
func Lookup(name []byte) (Unit, bool) {
	u, ok := byName[string(name)]
	return u, ok
}

// ParseValue reads a number and its unit, with or without a space between:
// "36.3psi", "620 degC", "0.05m2", "2%". A number alone has the unit "1". The
// number is decimal, with a point and an optional exponent, and finite.
// It gives the SI value and the unit as written. The error is a *ValueError or wraps
// a *NameError.
func ParseValue(text string) (float64, Unit, error) {
	v, name, err := split(text)
	if err != nil {
		return 0, Unit{}, err
	}
	u, err := Parse(name)
	if err != nil {
		return 0, Unit{}, fmt.Errorf("value %q: %w", text, err)
	}
	return u.ToSI(v), u, nil
}

// ParseValueAs is ParseValue for a value that must measure d.
func ParseValueAs(text string, d Dimension) (float64, Unit, error) {
	v, name, err := split(text)
	if err != nil {
		return 0, Unit{}, err
	}
	u, err := ParseAs(name, d)
	if err != nil {
		return 0, Unit{}, fmt.Errorf("value %q: %w", text, err)
	}
	return u.ToSI(v), u, nil
}

// split parts a text into its number and the name after it.
func split(text string) (v float64, name string, err error) {
	s := strings.TrimSpace(text)
	n := numberLen(s)
	if n == 0 {
		return 0, "", &ValueError{Text: text, Hint: "begin with a number, then its unit, as in 250kPa"}
	}
	name = strings.TrimSpace(s[n:])
	if strings.HasPrefix(name, ",") {
		return 0, "", &ValueError{Text: text, Hint: "write the decimal sign as a point, without a separator of thousands"}
	}
	v, err = strconv.ParseFloat(s[:n], 64)
	if err != nil || math.IsInf(v, 0) {
		return 0, "", &ValueError{Text: text, Hint: "the number is too large"}
	}
	return v, name, nil
}

// numberLen gives the length of the decimal number that s begins with, 0 if
// there is none. The e of an exponent counts only with digits behind it.
func numberLen(s string) int {
	digits := func(i int) int {
		for i < len(s) && '0' <= s[i] && s[i] <= '9' {
			i++
		}
		return i
	}
	sign := func(i int) int {
		if i < len(s) && (s[i] == '+' || s[i] == '-') {
			return i + 1
		}
		return i
	}
	begin := sign(0)
	end := digits(begin)
	found := end - begin
	if end < len(s) && s[end] == '.' {
		fraction := digits(end + 1)
		found += fraction - end - 1
		end = fraction
	}
	if found == 0 {
		return 0
	}
	if end < len(s) && (s[end] == 'e' || s[end] == 'E') {
		first := sign(end + 1)
		if last := digits(first); last > first {
			end = last
		}
	}
	return end
}

// hint says what to write instead of a name that is not known.
func hint(name string, want Dimension) string {
	if base, kind, ok := pressureKind(name); ok {
		return fmt.Sprintf("absolute, gauge and differential are no units; write %q and state %q with the channel", base, kind)
	}
	if want != Invalid {
		return "use " + list(want)
	}
	// Without a wanted dimension, the units of those that are nearest in spelling.
	const mostCompared = 64
	name = name[:min(len(name), mostCompared)]
	best, near := math.MaxInt, []string(nil)
	for _, r := range table {
		for _, n := range append([]string{r.Name}, r.also...) {
			if n == "" {
				continue
			}
			switch d := levenshtein.ComputeDistance(strings.ToLower(name), strings.ToLower(n)); {
			case d < best:
				best, near = d, []string{n}
			case d == best && len(near) < 6:
				near = append(near, n)
			}
		}
	}
	if best <= max(1, len(name)/2) {
		return "is it " + strings.Join(near, ", ") + "? names are case sensitive"
	}
	return "use an SI unit or a usual unit of the trade, such as kPa, psi, degC, kg/s, rpm, m2, lbf"
}

// pressureKind takes psia, psig, psid, bara, barg, kPa(a) and the like apart.
func pressureKind(name string) (base, kind string, ok bool) {
	s := strings.TrimRight(name, ")")
	if s == "" {
		return "", "", false
	}
	kinds := map[byte]string{'a': "absolute", 'g': "gauge", 'd': "differential", 'A': "absolute", 'G': "gauge", 'D': "differential"}
	kind, ok = kinds[s[len(s)-1]]
	base = strings.TrimRight(s[:len(s)-1], "( ")
	return base, kind, ok && byName[base].Dimension == Pressure
}

// list gives the names of the units of a dimension, for a hint.
func list(d Dimension) string {
	from := d
	if d == TemperatureDifference {
		from = Temperature
	}
	var names []string
	for _, r := range table {
		if r.Dimension == from {
			names = append(names, r.Name)
		}
	}
	return strings.Join(names, ", ")
}
