package rules

import (
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"

	"throatwatch/monitor/unit"
)

// template is a text with places for values.
type template []part

// part is a piece of fixed text, or the place of a name.
type part struct {
	fixed  string
	slot   int // -1 for fixed text
	typ    Type
	digits int       // behind the point; -1 = as many as the value needs, six at most in all
	from   unit.Unit // of the value
	to     unit.Unit // of the text
	after  string    // unit behind the number, with its space
}

// parseTemplate reads a text with places:
//
//	{name}               the value as it is
//	{name:unit.digits}   converted, with so many digits behind the point, and the unit
//	{name:.digits}       in its own unit
//
// Braces have no other use.
func parseTemplate(src string, names []Name, ix index) (template, *exprFault) {
	var t template
	rest, at := src, 0
	for {
		open := strings.IndexAny(rest, "{}")
		if open < 0 {
			if rest != "" {
				t = append(t, part{fixed: rest, slot: -1})
			}
			return t, nil
		}
		if open > 0 {
			t = append(t, part{fixed: rest[:open], slot: -1})
		}
		end := strings.IndexAny(rest[open+1:], "{}")
		if rest[open] == '}' || end < 0 || rest[open+1+end] == '{' {
			return nil, &exprFault{at + open, "brace without its partner", "a place is written {name:unit.digits}"}
		}
		p, fault := parsePlace(rest[open+1:open+1+end], names, ix)
		if fault != nil {
			fault.offset += at + open + 1
			return nil, fault
		}
		t = append(t, p)
		rest, at = rest[open+2+end:], at+open+2+end
	}
}

// parsePlace reads what stands between the braces.
func parsePlace(src string, names []Name, ix index) (part, *exprFault) {
	name, format, formatted := strings.Cut(src, ":")
	slot, ok := ix[name]
	if !ok {
		all := make([]string, len(names))
		for i := range names {
			all[i] = names[i].Name
		}
		return part{}, &exprFault{0, fmt.Sprintf("unknown name %q", name), nearest(name, all)}
	}
	n := &names[slot]
	p := part{slot: slot, typ: n.Type, digits: -1}
	at := len(name) + 1
	if formatted && n.Type != Number {
		return part{}, &exprFault{at, name + " is " + n.Type.String() + " and has no unit", "write {" + name + "}"}
	}
	if n.Type != Number {
		return p, nil
	}
	unitName := n.Unit
	if formatted {
		dot := strings.LastIndexByte(format, '.')
		if dot < 0 || len(format) != dot+2 || format[dot+1] < '0' || format[dot+1] > '9' {
			return part{}, &exprFault{at, fmt.Sprintf("format %q without a number of digits", format), "write unit.digits, as in degC.0 or .1"}
		}
		p.digits = int(format[dot+1] - '0')
		if dot > 0 {
			unitName = format[:dot]
		}
	}
	p.after = behind(unitName)
	if unitName == n.Unit {
		p.from, p.to = unit.Unit{Scale: 1}, unit.Unit{Scale: 1}
		return p, nil
	}
	if n.Dimension == unit.Invalid {
		in := n.Unit
		if in == "" {
			in = "no unit"
		}
		return part{}, &exprFault{at, fmt.Sprintf("%s is in %s, which does not convert", name, in), "write {" + name + ":.1}"}
	}
	var err error
	p.to, err = unitAs(unitName, n.Dimension, n.Rate)
	p.from, _ = unitAs(n.Unit, n.Dimension, n.Rate)
	if err != nil {
		return part{}, &exprFault{at, err.Error(), "write unit.digits, as in degC.0 or .1"}
	}
	return p, nil
}

// behind gives a unit as it stands behind a number in a text.
func behind(unitName string) string {
	switch unitName {
	case "", "1":
		return ""
	case "degC", "degF", "degR":
		return " °" + unitName[3:]
	}
	return " " + unitName
}

// append renders the text.
func (t template) append(b []byte, f *Frame) []byte {
	for i := range t {
		p := &t[i]
		switch {
		case p.slot < 0:
			b = append(b, p.fixed...)
		case p.typ == Number:
			b = p.appendNumber(b, f.Numbers[p.slot])
		case p.typ == Bool:
			b = append(b, [...]string{"no", "unknown", "yes"}[f.Bools[p.slot]+1]...)
		case textAt(f, p.slot) == "":
			b = append(b, "unknown"...)
		default:
			b = append(b, strings.ReplaceAll(f.Texts[p.slot], "_", " ")...)
		}
	}
	return b
}

func (p *part) appendNumber(b []byte, v float64) []byte {
	if v-v != 0 {
		return append(b, "(unknown)"...)
	}
	v = p.to.FromSI(p.from.ToSI(v))
	start := len(b)
	if p.digits < 0 {
		b = strconv.AppendFloat(b, v, 'g', 6, 64)
	} else {
		b = strconv.AppendFloat(b, v, 'f', p.digits, 64)
	}
	if v < 0 && math.Abs(v) < 1 && strings.Trim(string(b[start:]), "-0.") == "" {
		b = append(b[:start], b[start+1:]...) // no minus before a zero
	}
	return append(b, p.after...)
}

// TextError is returned for a text that an alarm may not show.
type TextError struct {
	Offset int    // byte at which the words begin
	Words  string // as written
	Why    string
	Hint   string
}

// Error says what is wrong and what to do.
func (e *TextError) Error() string { return fmt.Sprintf("%q %s; %s", e.Words, e.Why, e.Hint) }

// Words that no alarm may say. An order is a verb with an object within four
// words; "shutdown" as a noun and "safety" are no orders and no promises.
var (
	orders = regexp.MustCompile(`(?i)\b(?:` +
		`(?:re-?duce|retard|close|open|advance|cut|move|pull|push|set|increase|decrease|lower|raise|chop|slam|ease|bring|throttle|shut|stop|kill|turn|trim|hold|add|abort|restart|relight)` +
		`(?:\s+\S+){0,4}?\s+(?:throttles?|fuel|power|thrust|pla|levers?|valves?|engine|starter|ignition|bleeds?|speed|rpm|back|down|off|nozzle)` +
		`|throttle\s+(?:up|down|back|to)|shut(?:\s+it)?\s+down|abort)\b`)
	promises = regexp.MustCompile(`(?i)\b(?:safe|safely|ok|okay|ready|cleared?\s+(?:to|for)|cleared|harmless|guaranteed?|no\s+danger|all\s+clear)\b`)
)

// CheckText refuses a text that orders an action on the engine or promises
// safety: this program only watches, and what to do is for the facility's
// procedure to say. The error is a *TextError.
func CheckText(text string) error {
	if at := orders.FindStringIndex(text); at != nil {
		return &TextError{
			Offset: at[0], Words: text[at[0]:at[1]], Why: "orders an action on the engine",
			Hint: "name the situation and the facility's procedure instead",
		}
	}
	if at := promises.FindStringIndex(text); at != nil {
		return &TextError{
			Offset: at[0], Words: text[at[0]:at[1]], Why: "promises safety",
			Hint: "say what was measured instead",
		}
	}
	return nil
}
