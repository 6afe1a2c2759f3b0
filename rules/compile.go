package rules

import (
	"fmt"
	"math"
	"regexp"
	"slices"
	"strings"

	"throatwatch/monitor"
)

// Domain says which rules a step judges.
type Domain uint8

// The domains.
const (
	OfData   Domain = iota // rules that read anything that a scan gives
	OfDaemon               // rules that read only how the daemon does: they must speak when no scan comes
)

// Set is a compiled set of rules. It is read-only: its state is in a State.
type Set struct {
	rules   []program // those that were written, then those that tell that one of them is unknown
	wrote   int       // how many were written
	derived []derived
	names   []Name // derived ones last
}

// program is one compiled rule.
type program struct {
	Rule
	compiled
	deadband float64    // in the unit of what is compared
	value    numberFunc // nil = it has none
	measure  measure    // of the value
	worsenBy float64    // in the unit of the value
	domain   Domain
	text     template
	unit     string
	suppress [monitor.NumPhases]bool
	shows    []int // slots that the value is made of, where it is written
	doubts   int   // the rule whose being unknown this one tells; -1 = an ordinary rule
}

var ruleName = regexp.MustCompile(`^[a-z][a-z0-9_]*$`)

// Compile compiles rules against the names of an environment, and against derived
// names, which are added to them. It gives every fault that it finds; with any,
// the set is nil.
func Compile(rules []Rule, names []Name, derived ...Derived) (*Set, []Fault) {
	set := &Set{rules: make([]program, len(rules)), wrote: len(rules), names: slices.Clone(names)}
	ix := indexOf(names)
	faults := set.derive(derived, ix)
	names = set.names
	seen := make(map[string]bool, len(rules))
	for i := range rules {
		r := &rules[i]
		add := func(field string, f *exprFault) {
			if f != nil {
				faults = append(faults, Fault{Rule: i, Field: field, Offset: f.offset, Message: f.message, Hint: f.hint})
			}
		}
		switch {
		case !ruleName.MatchString(r.Name):
			add("name", &exprFault{0, fmt.Sprintf("rule name %q is not an identifier", r.Name), "begin with a letter; a-z, 0-9 and _ only"})
		case seen[r.Name]:
			add("name", &exprFault{0, fmt.Sprintf("rule %q is there twice", r.Name), "give it another name"})
		}
		seen[r.Name] = true
		p := program{Rule: *r, deadband: r.Deadband, doubts: -1}
		var fault *exprFault
		p.compiled, fault = compileExpression(r.When, names, ix)
		add("when", fault)
		p.text, fault = parseTemplate(r.Text, names, ix)
		add("text", fault)
		for _, f := range p.checkPlain(fault == nil, names) {
			add(f.field, &f.exprFault)
		}
		add("unknown", p.checkDoubt(func(name string) bool {
			return slices.ContainsFunc(rules, func(other Rule) bool { return other.Name == name })
		}))
		add("value", p.compileValue(names, ix))
		add("worsen_by", p.checkWorsening())
		p.settle(names)
		set.rules[i] = p
	}
	if len(faults) > 0 {
		return nil, faults
	}
	for i := range rules {
		if rules[i].Unknown.Priority != 0 {
			set.rules = append(set.rules, set.rules[i].doubting(i, responseFor(rules, lostInstrumentation)))
		}
	}
	return set, nil
}

type fieldFault struct {
	field string
	exprFault
}

// checkPlain checks the fields that are no expressions.
func (p *program) checkPlain(compiles bool, names []Name) (faults []fieldFault) {
	add := func(field, message, hint string) {
		faults = append(faults, fieldFault{field, exprFault{0, message, hint}})
	}
	if p.Priority < Note || p.Priority > Warning {
		add("priority", "no priority", "use note, advisory, caution or warning")
	}
	if p.OnDelay < 0 {
		add("on_delay", "on-delay below zero", "use 0s or more")
	}
	if p.OffDelay < 0 {
		add("off_delay", "off-delay below zero", "use 0s or more")
	}
	switch {
	case !(p.Deadband >= 0) || math.IsInf(p.Deadband, 0):
		add("deadband", "deadband is not a number of zero or more", "give it in the unit of the quantity that is compared")
	case p.Deadband > 0 && compiles && p.truth != nil && !p.orders:
		add("deadband", "deadband without a comparison to which it applies", "compare with <, <=, > or >=, or drop it")
	case p.truth != nil && p.DeadbandUnit != "":
		if message, hint := p.convertDeadband(); message != "" {
			add("deadband", message, hint)
		}
	}
	for _, ph := range p.SuppressIn {
		if ph == monitor.PhaseUnknown || ph >= monitor.NumPhases {
			add("suppress_in", "an unknown phase suppresses nothing", "name a phase such as off or cranking")
		}
		for _, n := range p.need {
			if n.text != "" && n.text == ph.String() && names[n.slot].Name == "phase" {
				add("suppress_in", "suppressed in phase "+n.text+", the only one in which the rule can be true", "correct the expression or the list")
			}
		}
	}
	return faults
}

// convertDeadband converts the deadband to the unit of what is compared, which
// must be the same in every comparison.
func (p *program) convertDeadband() (message, hint string) {
	for _, m := range p.ordered {
		if m != p.ordered[0] || m.plain() {
			return "deadband with a unit, but not every comparison is in a unit of its own", "write it without unit: it is then in the unit of the quantity"
		}
	}
	if len(p.ordered) == 0 {
		return "", ""
	}
	m := p.ordered[0].difference()
	u, err := unitAs(p.DeadbandUnit, m.dimension, m.rate)
	if err != nil {
		return fmt.Sprintf("deadband %g %s, compared is %s", p.Deadband, p.DeadbandUnit, p.ordered[0]), "write " + m.wants()
	}
	p.deadband = round15(p.Deadband * u.Scale / m.scale)
	return "", ""
}

// compileValue compiles what the alarm shows as its value, and in which way that gets
// worse: as the condition becomes true by it; if that does not tell, as the rule says.
func (p *program) compileValue(names []Name, ix index) *exprFault {
	p.falling = p.falling || p.Downward && !p.orders
	if p.Value != "" {
		out, v, at, fault := compileValue(p.Value, names, ix)
		p.shows = out.reads
		switch {
		case fault != nil:
			return fault
		case v.typ != Number:
			return &exprFault{at, "the value is " + v.typ.String(), "name a number, such as egt_indicated_k"}
		}
		p.value, p.measure, p.unit = v.number, v.measure, v.measure.name
		if v.isName {
			p.unit = names[v.name].Unit
			p.falling = p.falling && (p.subject < 0 || p.subject == v.name) || p.Downward && p.subject != v.name
		}
		return nil
	}
	slot := p.subject
	for _, part := range p.text {
		if slot < 0 && part.slot >= 0 && part.typ == Number {
			slot = part.slot
		}
	}
	if slot >= 0 {
		p.value = func(f *Frame) float64 { return f.Numbers[slot] }
		p.measure, p.unit = names[slot].measure(), names[slot].Unit
	}
	return nil
}

// checkWorsening converts how far the value has to worsen to its unit.
func (p *program) checkWorsening() *exprFault {
	p.worsenBy = p.WorsenBy
	switch {
	case !(p.WorsenBy >= 0) || math.IsInf(p.WorsenBy, 0):
		return &exprFault{0, "worsen_by is not a number of zero or more", "give it in the unit of the value of the alarm"}
	case p.WorsenBy == 0 || p.truth == nil:
		return nil
	case p.value == nil:
		return &exprFault{0, "worsen_by without a value that can get worse", "compare a number, or give one by value:"}
	case p.WorsenUnit == "":
		return nil
	}
	m := p.measure.difference()
	u, err := unitAs(p.WorsenUnit, m.dimension, m.rate)
	if m.plain() || err != nil {
		hint := "write it without a unit"
		if !m.plain() {
			hint = "write " + m.wants()
		}
		return &exprFault{0, fmt.Sprintf("worsen_by %g %s, the value is %s", p.WorsenBy, p.WorsenUnit, p.measure), hint}
	}
	p.worsenBy = round15(p.WorsenBy * u.Scale / m.scale)
	return nil
}

// dimension names what the value of the alarm measures, "" when that does not convert.
func (p *program) dimension() string {
	if p.measure.plain() || p.measure.rate {
		return ""
	}
	return strings.ReplaceAll(p.measure.dimension.String(), " ", "_")
}

// settle derives what a step needs from the compiled parts.
func (p *program) settle(names []Name) {
	daemon := len(p.reads) > 0
	for _, slot := range p.reads {
		daemon = daemon && names[slot].Daemon
	}
	if daemon {
		p.domain = OfDaemon
	}
	for _, ph := range p.SuppressIn {
		if ph != monitor.PhaseUnknown && ph < monitor.NumPhases {
			p.suppress[ph] = true
		}
	}
}

// Len gives the number of rules that were written.
func (s *Set) Len() int { return s.wrote }

// Rule gives a rule of the set as its author wrote it.
func (s *Set) Rule(i int) Rule { return s.rules[i].Rule }

// Reads lists the names that the expression of a rule reads, in its order.
func (s *Set) Reads(i int) []string { return s.spell(s.rules[i].reads) }

func (s *Set) spell(slots []int) []string {
	out := make([]string, len(slots))
	for k, slot := range slots {
		out[k] = s.names[slot].Name
	}
	return out
}
