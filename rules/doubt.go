package rules

import (
	"fmt"
	"strings"
)

// doubtSuffix makes the name of the alarm that tells that a rule cannot be judged.
const doubtSuffix = "_unknown"

// doubting gives the rule that is true while rule i cannot be judged and is not put
// aside. It is grouped under what took the inputs along.
func (p *program) doubting(i int, response string) program {
	return program{
		Rule: Rule{
			Name: p.Name + doubtSuffix, Priority: p.Unknown.Priority, OnDelay: p.Unknown.After, OffDelay: second,
			Group:    groupSources,
			Title:    p.Title + ": cannot be judged",
			Caution:  "While it is unknown this condition is not watched: its alarm would not be raised.",
			Response: response,
		},
		domain: p.domain, doubts: i,
	}
}

// checkDoubt checks what a rule says of its being unknown; taken reports whether a
// name belongs to a rule.
func (p *program) checkDoubt(taken func(name string) bool) *exprFault {
	switch d := p.Unknown; {
	case d == Doubt{}:
	case d.Priority < Note || d.Priority > Warning:
		return &exprFault{0, "no priority for the rule being unknown", "use note, advisory, caution or warning"}
	case d.After < 0:
		return &exprFault{0, "delay below zero for the rule being unknown", "use 0s or more"}
	case taken(p.Name + doubtSuffix):
		return &exprFault{0, fmt.Sprintf("its alarm would be named %s, which is another rule", p.Name+doubtSuffix), "rename one of the two"}
	}
	return nil
}

// judge gives the truth of rule i on a frame. That of a rule about another being
// unknown is always known; what is put aside is not missed.
func (s *Set) judge(st *State, i int, f *Frame) Tri {
	p, in := &s.rules[i], &st.Instances[i]
	if p.doubts >= 0 {
		other := &st.Instances[p.doubts]
		return TriOf(other.InDoubt && !other.State.Aside())
	}
	e := 0.0
	if in.Active {
		e = p.deadband
	}
	return p.truth(f, e)
}

// render gives the text of an alarm as it is raised.
func (s *Set) render(p *program, f *Frame) string {
	if p.doubts < 0 {
		return string(p.text.append(nil, f))
	}
	other := &s.rules[p.doubts]
	return other.Title + " cannot be judged: " + s.missing(other, f) +
		". Follow the facility's procedure for lost instrumentation." + notProtection
}

// missing names the first input of a rule that is not known.
func (s *Set) missing(p *program, f *Frame) string {
	for _, slot := range p.reads {
		n := &s.names[slot]
		if isKnown(n, f, slot) {
			continue
		}
		id, ok := strings.CutPrefix(n.Name, "channel.")
		if !ok {
			return n.Name + " is not known"
		}
		for k := range s.names {
			if s.names[k].Name == "quality."+id && f.Texts[k] != "" {
				return id + " is " + strings.ReplaceAll(f.Texts[k], "_", " ")
			}
		}
		return id + " has no value"
	}
	return "its expression has no value"
}

// isKnown reports whether a frame has the value of a name.
func isKnown(n *Name, f *Frame, slot int) bool {
	switch n.Type {
	case Number:
		return reading(f.Numbers[slot]).Known
	case Bool:
		return f.Bools[slot] != Unknown
	case Text:
		return textAt(f, slot) != ""
	}
	return false
}
