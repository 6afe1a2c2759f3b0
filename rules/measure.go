package rules

import (
	"errors"
	"fmt"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/expr-lang/expr/ast"

	"throatwatch/monitor/unit"
)

// measure says what a number measures. The zero value is a plain number: one
// that is written without a unit, or that arithmetic with such a one has made.
type measure struct {
	dimension unit.Dimension
	rate      bool    // per second
	scale     float64 // SI value of 1
	name      string  // of its unit
}

func (m measure) plain() bool { return m.dimension == unit.Invalid }

// same tells whether two numbers measure the same, in whatever unit.
func (m measure) same(o measure) bool { return m.dimension == o.dimension && m.rate == o.rate }

// String names what is measured, as messages use it.
func (m measure) String() string {
	switch {
	case m.plain():
		return "a plain number"
	case m.rate:
		return "a rate of " + m.dimension.String()
	}
	return "a " + m.dimension.String()
}

// difference gives what a difference of two such values measures.
func (m measure) difference() measure {
	if m.dimension == unit.Temperature {
		m.dimension = unit.TemperatureDifference
	}
	return m
}

// perSecond gives what the rate of a dimension measures: velocity for length, and
// the like.
func perSecond(d unit.Dimension) (of unit.Dimension, rate bool) {
	if d == unit.Temperature {
		return unit.TemperatureDifference, true
	}
	own := map[unit.Dimension]unit.Dimension{unit.Length: unit.Velocity, unit.Velocity: unit.Acceleration, unit.Time: unit.Ratio}
	if of, ok := own[d]; ok {
		return of, false
	}
	return d, d != unit.Invalid
}

// measure gives what the values of a name measure.
func (n *Name) measure() measure {
	u, err := unitAs(n.Unit, n.Dimension, n.Rate)
	if err != nil {
		return measure{} // a unit without conversions, such as J/(kg K)
	}
	return measure{n.Dimension, n.Rate, u.Scale, n.Unit}
}

// parseRate reads a unit per time, such as K/s or kPa/min.
func parseRate(name string) (unit.Unit, bool) {
	cut := strings.LastIndexByte(name, '/')
	if cut < 1 {
		return unit.Unit{}, false
	}
	per, err := unit.ParseAs(name[cut+1:], unit.Time)
	if err != nil {
		return unit.Unit{}, false
	}
	u, err := unit.Parse(name[:cut])
	if err != nil {
		return unit.Unit{}, false
	}
	u = u.Difference()
	u.Name, u.Scale = name, u.Scale/per.Scale
	return u, true
}

// parseWritten reads the unit of a number in an expression.
func parseWritten(name string) (u unit.Unit, rate, ok bool) {
	if u, err := unit.Parse(name); err == nil {
		return u, false, true
	}
	if u, ok = parseRate(name); !ok {
		return u, false, false
	}
	u.Dimension, rate = perSecond(u.Dimension)
	return u, rate, true
}

// unitAs gives the unit of that name for what is measured.
func unitAs(name string, d unit.Dimension, rate bool) (unit.Unit, error) {
	if !rate {
		return unit.ParseAs(name, d)
	}
	if u, ok := parseRate(name); ok && u.Dimension == d {
		return u, nil
	}
	return unit.Unit{}, &unit.NameError{Name: name, Want: d, Hint: "write a unit of " + d.String() + " per time, as in K/s, kPa/s or rpm/s"}
}

// written is the unit that stands behind a number in an expression.
type written struct {
	unit.Unit
	rate bool
}

var (
	numberText = regexp.MustCompile(`^(?:[0-9][0-9_]*(?:\.[0-9_]+)?|\.[0-9][0-9_]*)(?:[eE][-+]?[0-9]+)?`)
	unitText   = regexp.MustCompile(`^[ \t]*([\pL%°µμ℃℉][\pL0-9²³_]*(?:/[\pL][\pL0-9²³_]*)*)`)
	wordText   = regexp.MustCompile(`^[\pL_$][\pL0-9_$]*(?:\.[\pL0-9_$]+)*`)
)

// words are those of the language that may follow a number.
var words = []string{"and", "or", "not", "contains", "matches", "startsWith", "endsWith", "let", "if", "else"}

// takeUnits finds the units behind numbers, as in egt_indicated_k > 700 degC, and
// blanks them out, which leaves every other character where it was. The units are
// given by the character at which their number begins.
func takeUnits(src string) (plain string, units map[int]written, fault *exprFault) {
	units = make(map[int]written)
	var out strings.Builder
	chars := 0
	for rest := src; rest != ""; {
		_, n := utf8.DecodeRuneInString(rest)
		switch {
		case strings.IndexByte("\"'`", rest[0]) >= 0:
			n = quotedLen(rest)
		case wordText.MatchString(rest):
			n = len(wordText.FindString(rest))
		case numberText.MatchString(rest):
			n = len(numberText.FindString(rest))
			u, length, wrong := unitBehind(rest[n:])
			if wrong != nil {
				wrong.offset += len(src) - len(rest) + n
				return "", nil, wrong
			}
			if length > 0 {
				units[chars] = u
			}
			blanks := utf8.RuneCountInString(rest[n : n+length])
			out.WriteString(rest[:n])
			out.WriteString(strings.Repeat(" ", blanks))
			chars += n + blanks
			rest = rest[n+length:]
			continue
		}
		out.WriteString(rest[:n])
		chars += utf8.RuneCountInString(rest[:n])
		rest = rest[n:]
	}
	return out.String(), units, nil
}

// quotedLen gives the length of the text in quotes that s begins with; all of s
// when it does not end.
func quotedLen(s string) int {
	for i := 1; i < len(s); i++ {
		switch {
		case s[i] == '\\' && s[0] != '`':
			i++
		case s[i] == s[0]:
			return i + 1
		}
	}
	return len(s)
}

// unitBehind reads the unit that a text begins with, after blanks; length is 0
// when there is none. Of a/b the longest part that is a unit counts.
func unitBehind(s string) (u written, length int, fault *exprFault) {
	m := unitText.FindStringSubmatchIndex(s)
	if m == nil {
		return u, 0, nil
	}
	name := s[m[2]:m[3]]
	for part := name; ; {
		if of, rate, ok := parseWritten(part); ok {
			return written{Unit: of, rate: rate}, m[2] + len(part), nil
		}
		cut := strings.LastIndexByte(part, '/')
		if cut < 0 {
			break
		}
		part = part[:cut]
	}
	if slices.Contains(words, name) {
		return u, 0, nil
	}
	hint := "use a unit such as degC, kPa, kg/s or K/s"
	_, err := unit.Parse(name)
	if wrong, ok := errors.AsType[*unit.NameError](err); ok {
		hint = wrong.Hint
	}
	return u, 0, &exprFault{m[2], fmt.Sprintf("unknown unit %q", name), hint}
}

// as gives a written value in the unit of m, which must measure the same; a
// temperature counts as a difference where one is wanted.
func (w *written) as(m measure, v float64) (float64, bool) {
	si := w.ToSI(v)
	switch {
	case w.Dimension == m.dimension && w.rate == m.rate:
	case w.Dimension == unit.Temperature && m.dimension == unit.TemperatureDifference && !m.rate && !w.rate:
		si = v * w.Scale
	default:
		return 0, false
	}
	return round15(si / m.scale), true
}

// round15 rounds to 15 digits: 700 degC is 973.15 K, not 973.1499999999999.
func round15(v float64) float64 {
	r, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 15, 64), 64)
	if err != nil {
		return v
	}
	return r
}

// measure gives what the written unit measures.
func (w *written) measure() measure {
	return measure{w.Dimension, w.rate, w.Scale, w.Name}
}

// A number with a unit is converted when it meets what it is compared with or
// added to. A plain number is in the unit of the quantity that it meets, and
// takes the unit away: of p / 1000 nobody can tell whether it is in Pa or kPa.

// become converts a number with a written unit to the unit of m.
func (v *value) become(m measure) bool {
	n, ok := v.written.as(m, v.n)
	if !ok {
		return false
	}
	v.set(n)
	v.written, v.measure = nil, m
	return true
}

// set makes the value a number that is written down.
func (v *value) set(n float64) {
	v.typ, v.fixed, v.n = Number, true, n
	v.number = func(*Frame) float64 { return n }
	v.bounded, v.low, v.high = true, n, n
}

// operand is a number with the place at which it is written.
type operand struct {
	*value
	at ast.Node
}

// meet converts two numbers to the same unit, and gives what they measure.
func (c *compiler) meet(l, r operand) (measure, *exprFault) {
	if l.written != nil && r.written != nil {
		l.become(l.written.measure())
	}
	if l.written != nil {
		l, r = r, l
	}
	if r.written != nil { // l is what it meets
		w := r.written
		switch {
		case l.measure.plain():
			_, fault := c.fault(r.at, "a number without a unit takes the unit away from what it is combined with: give every number its unit, or none",
				"%s meets a plain number", w.of(r.n))
			return measure{}, fault
		case !r.become(l.measure):
			_, fault := c.fault(r.at, "write "+l.measure.wants(), "%s is %s, compared is %s", w.of(r.n), w.measure(), l.measure)
			return measure{}, fault
		}
		return l.measure, nil
	}
	switch {
	case l.measure.plain() || r.measure.plain():
		return measure{}, nil
	case !l.measure.same(r.measure):
		_, fault := c.fault(r.at, "compare like with like", "%s and %s are not the same", l.measure, r.measure)
		return measure{}, fault
	case l.measure.scale != r.measure.scale:
		_, fault := c.fault(r.at, "compare each with a number that has a unit", "one side is in %s, the other in %s", l.measure.unit(), r.measure.unit())
		return measure{}, fault
	}
	return l.measure, nil
}

// of writes a number with its unit.
func (w *written) of(v float64) string { return fmt.Sprintf("%g %s", v, w.Name) }

// wants names a unit in which such a value can be written.
func (m measure) wants() string {
	example := m.unit()
	if m.dimension == unit.TemperatureDifference && !m.rate {
		example = "K; it is a difference of temperatures"
	}
	return "a unit of " + m.dimension.String() + ", such as " + example
}

func (m measure) unit() string {
	if m.name == "" {
		return "plain numbers"
	}
	return m.name
}

// isTemperature tells that a number is, or is written as, a temperature that is no
// difference.
func (v *value) isTemperature() bool {
	if v.written != nil {
		return v.written.Dimension == unit.Temperature && !v.written.rate
	}
	return v.measure.dimension == unit.Temperature && !v.measure.rate
}

// offset makes d a difference in the unit of the temperature t, and gives what both
// together measure.
func (t operand) offset(d operand) measure {
	if t.written != nil {
		t.become(t.written.measure())
	}
	if d.written != nil {
		d.become(t.measure.difference())
	}
	return t.measure
}

// sum compiles + and −. A temperature plus or less a difference is a
// temperature; less another temperature it is a difference. What is written in K
// beside a temperature is a difference, what is written in °C a temperature.
func (c *compiler) sum(op string, l, r operand) (value, *exprFault) {
	var m measure
	var fault *exprFault
	difference := func(o operand) bool {
		return o.measure.dimension == unit.TemperatureDifference && !o.measure.rate || o.isTemperature() && o.written != nil && o.written.Offset == 0
	}
	switch lt, rt := l.isTemperature(), r.isTemperature(); {
	case l.written != nil && r.written != nil && (lt || rt):
		return c.fault(l.at, "write the result", "a sum of two written temperatures")
	case lt && difference(r):
		m = l.offset(r)
	case rt && op == "+" && difference(l):
		m = r.offset(l)
	case lt && rt && op == "+" && (l.written != nil || r.written != nil):
		return c.fault(l.at, "a difference of temperatures is written in K", "a sum of two temperatures")
	case lt && rt:
		if m, fault = c.meet(l, r); op == "+" {
			m = measure{}
		}
		m = m.difference()
	default:
		both := l.written != nil && r.written != nil
		if m, fault = c.meet(l, r); both && fault == nil {
			v := fixedNumber(l.n - r.n)
			if op == "+" {
				v = fixedNumber(l.n + r.n)
			}
			v.written = &written{unit.Unit{Name: m.name, Dimension: m.dimension, Scale: m.scale}, m.rate}
			return v, nil
		}
	}
	if fault != nil {
		return value{}, fault
	}
	v := arithmetic(op, l.number, r.number)
	v.measure = m
	if v.bounded = l.bounded && r.bounded; v.bounded {
		if v.low, v.high = l.low+r.low, l.high+r.high; op == "-" {
			v.low, v.high = l.low-r.high, l.high-r.low
		}
	}
	return v, nil
}

// product compiles * and /. A quotient of two values of the same is a ratio; a
// ratio leaves the other side its unit.
func (c *compiler) product(op string, l, r operand) (value, *exprFault) {
	ratio := measure{dimension: unit.Ratio, scale: 1}
	if l.written != nil || r.written != nil {
		switch {
		case l.written != nil && r.fixed && r.written == nil && !l.isTemperature():
			v := fixedNumber(l.n * r.n)
			if op == "/" {
				v = fixedNumber(l.n / r.n)
			}
			v.written = l.written
			return v, nil
		case op == "*" && r.written != nil && l.fixed && l.written == nil && !r.isTemperature():
			v := fixedNumber(l.n * r.n)
			v.written = r.written
			return v, nil
		case op == "*":
			return c.fault(l.at, "compare with a plain number, in SI", "a product with a number that has a unit")
		}
	}
	v := arithmetic(op, l.number, r.number)
	plainRatio := func(m measure) bool { return m.dimension == unit.Ratio && !m.rate && m.scale == 1 }
	switch {
	case op == "/" && (l.written != nil || r.written != nil):
		if _, fault := c.meet(l, r); fault != nil {
			return value{}, fault
		}
		v = arithmetic(op, l.number, r.number)
		v.measure = ratio
	case plainRatio(r.measure):
		v.measure = l.measure
	case op == "*" && plainRatio(l.measure):
		v.measure = r.measure
	case op == "/" && !l.measure.plain() && l.measure.same(r.measure) && l.measure.scale == r.measure.scale:
		v.measure = ratio
	}
	return v, nil
}

// reach refuses a comparison of two numbers that never come near each other, such
// as a channel and a limit outside its range: it would be silent for ever.
func (c *compiler) reach(l, r operand) *exprFault {
	if !l.bounded || !r.bounded || l.fixed && r.fixed || l.high >= r.low && r.high >= l.low {
		return nil
	}
	if l.fixed {
		l, r = r, l
	}
	if !r.fixed {
		_, fault := c.fault(r.at, "look at the ranges of the channels", "the two sides never come near each other")
		return fault
	}
	what, name := "the other side", ""
	if l.isName {
		what, name = c.names[l.name].Name, c.names[l.name].Unit
	}
	hint := fmt.Sprintf("it lies between %.6g and %s", l.low, strings.TrimSpace(fmt.Sprintf("%.6g %s", l.high, name)))
	if l.measure.dimension == unit.Pressure {
		hint += " absolute"
	}
	_, fault := c.fault(r.at, hint+"; a number can carry its unit, as in 30 kPa or 700 degC",
		"%s never comes to %s", what, strings.TrimSpace(fmt.Sprintf("%g %s", r.n, name)))
	return fault
}

// needs gives what a comparison of a name with something written down needs.
func needs(op string, l, r *value) []need {
	flip := map[string]string{"<": ">", "<=": ">=", ">": "<", ">=": "<=", "==": "=="}
	if l.fixed {
		l, r, op = r, l, flip[op]
	}
	if !l.isName || !r.fixed {
		return nil
	}
	n := need{slot: l.name, text: r.s, low: math.Inf(-1), high: math.Inf(1), open: len(op) == 1}
	switch op {
	case "<", "<=":
		n.high = r.n
	case ">", ">=":
		n.low = r.n
	case "==":
		n.low, n.high = r.n, r.n
	default:
		return nil
	}
	return []need{n}
}

// takes tells whether a number between the ends, or at one, is allowed.
func (n *need) takes(v float64) bool { return !n.open || n.low < v && v < n.high }

// contradiction refuses an and whose sides can never be true together.
func (c *compiler) contradiction(at ast.Node, l, r []need) *exprFault {
	for _, a := range l {
		for _, b := range r {
			if a.slot != b.slot {
				continue
			}
			low, high := max(a.low, b.low), min(a.high, b.high)
			if a.text == b.text && (low < high || low == high && a.takes(low) && b.takes(low)) {
				continue
			}
			_, fault := c.fault(at, "join what is meant by or, or correct a limit", "both sides of and can never be true together: of %s each wants something else", c.names[a.slot].Name)
			return fault
		}
	}
	return nil
}
