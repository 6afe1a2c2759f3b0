package rules

import (
	"strconv"
	"time"

	"throatwatch/monitor"
	"throatwatch/rules/alarm"
)

// unknownAfter is how long a rule has to be unknown before that is shown, ns:
// longer than a scan that came late, short for a person who watches.
const unknownAfter = 2 * int64(time.Second)

// Reading is a number that may not be known.
type Reading = monitor.Reading

func reading(v float64) Reading { return monitor.ReadingOf(v) }

// State is all that judging rules remembers. It is plain data: it may be
// encoded, copied and compared.
type State struct {
	Instances []Instance // one per rule of the set
	Derived   []DerivedState
	Gone      []Alarm // alarms of rules that a reload took away, to be told by the next step
	Moved     bool    // an alarm moved since it was looked which is listed under which
}

// Instance is the alarm of one rule. Times are event times in ns UTC, 0 = none.
type Instance struct {
	Rule     string
	Priority Priority
	State    alarm.State

	Active  bool // the condition after its delays
	Pending bool // the condition differs from Active since Since
	Since   int64

	Unknown   bool // the condition is unknown for longer than 2 s
	InDoubt   bool // it is unknown since DoubtedAt
	DoubtedAt int64

	ID       string // of the present or last occurrence
	Raised   int64  // when it was raised first, since it was normal
	Changed  int64
	Revision uint64 // counts changes
	Text     string // as rendered when it was raised last
	FirstOut bool   // the first of its group: see mark
	Under    Ref    // the alarm that it is listed under: see head
	Value    Reading
	Peak     Reading // worst value since it was raised
	Told     Reading // worst value that was annunciated or acknowledged
	Worse    bool    // it has gone too far beyond Told since WorseAt
	WorseAt  int64

	AckBy   string
	AckAt   int64
	AsideBy string // who shelved it or took it out of service
	Reason  string
	Until   int64 // when shelving ends
}

// Fit makes the state one of this set. Instances are matched by the name of the
// rule. What stood by a rule that is gone is told as normal by the next step.
func (s *Set) Fit(st *State) {
	var instances []Instance
	if len(s.rules) > 0 {
		instances = make([]Instance, len(s.rules))
	}
	at := make(map[string]int, len(s.rules))
	for i := range s.rules {
		at[s.rules[i].Name] = i
		instances[i].Rule = s.rules[i].Name
	}
	for k := range st.Instances {
		old := &st.Instances[k]
		if i, ok := at[old.Rule]; ok {
			instances[i] = *old
		} else if old.State != alarm.Normal {
			gone := *old
			gone.State = alarm.Normal
			gone.Revision++
			gone.Reason = "the rule was taken out of the configuration"
			st.Gone = append(st.Gone, view(&program{Rule: Rule{Name: old.Rule, Title: old.Rule, Priority: old.Priority}}, &gone))
		}
	}
	for i := range instances {
		instances[i].Priority = s.rules[i].Priority
	}
	st.Instances, st.Moved = instances, true
	s.fitDerived(st)
}

// Step judges the rules of a domain on a frame at event time t (host time for
// OfDaemon), in ns UTC, in a run ("" or "-" when there is none) and a phase. It
// appends each alarm that changed, as it is after the change, to out. It
// allocates only when something changes. Of data it must be called once per scan:
// it carries the derived names on and puts them into the frame.
//
// A condition must be true for the on-delay before it raises and false for the
// off-delay before it returns. While it is unknown it does neither; the on-delay
// goes on, since the last that is known is true, the off-delay begins anew.
// Suppression follows the phase at once; an unknown phase suppresses nothing.
func (s *Set) Step(st *State, t int64, run string, phase monitor.Phase, d Domain, f *Frame, out []Alarm) []Alarm {
	if len(st.Instances) != len(s.rules) || len(st.Derived) != len(s.derived) {
		s.Fit(st)
	}
	first := len(out)
	if d == OfData {
		s.stepDerived(st, t, f)
	}
	for _, a := range st.Gone {
		a.Changed = Time(t)
		out = append(out, a)
	}
	st.Gone = nil
	for i := range s.rules {
		p := &s.rules[i]
		if p.domain != d {
			continue
		}
		in := &st.Instances[i]
		v := s.judge(st, i, f)
		in.condition(&p.Rule, v, t)
		if in.Active {
			in.watch(p, f)
		}
		worse := in.worsened(p, t)
		if in.doubt(v, t) && in.State != alarm.Normal {
			in.Revision++
			in.Changed = t
			out = append(out, view(p, in))
		}
		for {
			input, ok := p.due(in, t, phase, worse)
			if !ok {
				break
			}
			s.move(st, i, input, t, run)
			asks := input == alarm.Raise || input == alarm.Worsen
			if asks {
				in.annunciated(p, f, input, t)
				in.Text = s.render(p, f)
			}
			out = append(out, view(p, in))
			out[len(out)-1].Raise = asks
		}
	}
	if st.Moved {
		out = s.regroup(st, t, first, out)
	}
	return out
}

// condition follows the condition through its delays.
func (in *Instance) condition(r *Rule, v Tri, t int64) {
	switch {
	case v == Unknown:
		in.Pending = in.Pending && !in.Active
		return
	case v == TriOf(in.Active):
		in.Pending = false
		return
	case !in.Pending:
		in.Pending, in.Since = true, t
	}
	delay := r.OnDelay
	if in.Active {
		delay = r.OffDelay
	}
	if t-in.Since >= delay {
		in.Active, in.Pending = !in.Active, false
	}
}

// doubt notes how long the condition is unknown, and reports a change of Unknown.
func (in *Instance) doubt(v Tri, t int64) (changed bool) {
	before := in.Unknown
	switch {
	case v != Unknown:
		in.InDoubt, in.Unknown, in.DoubtedAt = false, false, 0
	case !in.InDoubt:
		in.InDoubt, in.DoubtedAt = true, t
	case t-in.DoubtedAt > unknownAfter:
		in.Unknown = true
	}
	return in.Unknown != before
}

// watch keeps the present and the worst value of what the rule compares.
func (in *Instance) watch(p *program, f *Frame) {
	if p.value == nil {
		return
	}
	in.Value = reading(p.value(f))
	if in.Value.Known && (!in.Peak.Known || p.beyond(in.Value, in.Peak) > 0) {
		in.Peak = in.Value
	}
}

// beyond gives how much worse a is than b.
func (p *program) beyond(a, b Reading) float64 {
	if p.falling {
		return b.V - a.V
	}
	return a.V - b.V
}

// worsened reports whether the value of an acknowledged alarm has been too far
// beyond what was annunciated, for as long as a raise takes. What was annunciated
// moves outward only, so that a value that swings asks no second time.
func (in *Instance) worsened(p *program, t int64) bool {
	if p.worsenBy == 0 || in.State != alarm.Acknowledged || !in.Active || !in.Value.Known || !in.Told.Known ||
		p.beyond(in.Value, in.Told) < p.worsenBy {
		in.Worse, in.WorseAt = false, 0
		return false
	}
	if !in.Worse {
		in.Worse, in.WorseAt = true, t
	}
	return t-in.WorseAt >= p.OnDelay
}

// due gives the next input that the condition, the phase or the time gives to an
// alarm.
func (p *program) due(in *Instance, t int64, phase monitor.Phase, worse bool) (alarm.Input, bool) {
	input := alarm.NumInputs
	suppressed := phase < monitor.NumPhases && p.suppress[phase]
	switch {
	case in.State == alarm.Shelved && (t >= in.Until || p.Priority == Warning):
		input = alarm.Unshelve
	case in.State == alarm.SuppressedByDesign && !suppressed:
		input = alarm.Unsuppress
	case in.State.Aside():
		return input, false
	case suppressed && p.takes(in.State, alarm.Suppress):
		input = alarm.Suppress
	case worse && in.State == alarm.Acknowledged:
		input = alarm.Worsen
	case in.Active && in.InDoubt && in.State == alarm.Normal:
		// It comes back from where it was put aside, and whether its condition still
		// stands is not known: that is shown as such, and is no reason to raise it.
		return input, false
	case in.Active:
		input = alarm.Raise
	default:
		input = alarm.Return
	}
	return input, p.takes(in.State, input)
}

func (p *program) takes(s alarm.State, in alarm.Input) bool {
	_, ok := alarm.Next(s, in, p.Latching)
	return ok
}

// move changes the state by an input that it takes.
func (s *Set) move(st *State, i int, input alarm.Input, t int64, run string) {
	p, in := &s.rules[i], &st.Instances[i]
	from := in.State
	in.State, _ = alarm.Next(from, input, p.Latching)
	in.Revision++
	in.Changed = t
	in.Priority = p.Priority
	st.Moved = true
	if from == alarm.Normal {
		// An occurrence begins. Its name is made of what a replay gives again.
		if run == "" {
			run = "-"
		}
		in.ID = run + "/" + p.Name + "/" + strconv.FormatInt(t, 10)
		in.Raised, in.Text = 0, ""
		in.AckBy, in.AckAt = "", 0
		if !in.Active {
			in.Value, in.Peak, in.Told = Reading{}, Reading{}, Reading{}
		}
	}
	if from.Aside() && !in.State.Aside() {
		in.AsideBy, in.Reason, in.Until = "", "", 0
	}
	if input == alarm.Raise {
		s.mark(st, i)
	}
}

// annunciated notes what a raise, or a worsening, shows.
func (in *Instance) annunciated(p *program, f *Frame, input alarm.Input, t int64) {
	if in.Raised == 0 {
		in.Raised = t
	}
	in.AckBy, in.AckAt = "", 0
	if input == alarm.Raise {
		in.Peak = Reading{}
		in.watch(p, f)
	}
	in.Told = in.Value
}

// Unknown counts the rules that are unknown for longer than 2 s and not put
// aside by design or by maintenance.
func (s *Set) Unknown(st *State) int {
	n := 0
	for i := range st.Instances {
		if st.Instances[i].unknown() {
			n++
		}
	}
	return n
}

// UnknownRules names the rules that Unknown counts.
func (s *Set) UnknownRules(st *State) []string {
	var out []string
	for i := range st.Instances {
		if st.Instances[i].unknown() {
			out = append(out, st.Instances[i].Rule)
		}
	}
	return out
}

func (in *Instance) unknown() bool {
	return in.Unknown && in.State != alarm.SuppressedByDesign && in.State != alarm.OutOfService
}

// Standing appends every alarm that is not normal to out, in the order of the
// rules.
func (s *Set) Standing(st *State, out []Alarm) []Alarm {
	for i := range st.Instances {
		if i < len(s.rules) && st.Instances[i].State != alarm.Normal {
			out = append(out, view(&s.rules[i], &st.Instances[i]))
		}
	}
	return out
}
