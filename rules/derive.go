package rules

import (
	"fmt"
	"math"
	"slices"

	"throatwatch/monitor/unit"
)

// Derivation says how a derived name is made.
type Derivation uint8

// The derivations. All but DeriveSince look at a window that slides from scan to
// scan.
const (
	DeriveRate  Derivation = iota + 1 // slope of the line of least squares, per second
	DeriveMean                        // mean
	DeriveMax                         // highest
	DeriveMin                         // lowest
	DeriveStdev                       // standard deviation of the single value, n − 1
	DeriveSince                       // s for which a condition is true without a break; 0 while it is false
	DeriveCount                       // how often a condition became true
	numDerivations
)

var derivations = [numDerivations]string{"", "rate", "mean", "max", "min", "stdev", "since", "count"}

// String gives the word that rule files use.
func (d Derivation) String() string {
	if d >= numDerivations {
		return ""
	}
	return derivations[d]
}

// Derivations lists the words for the derivations.
func Derivations() []string { return derivations[1:] }

// ParseDerivation gives the derivation of a word, and whether there is one.
func ParseDerivation(word string) (Derivation, bool) {
	i := slices.Index(derivations[1:], word)
	return Derivation(i + 1), i >= 0
}

// Derived is a name that is made of others over time. Expressions remember
// nothing: what takes time is declared, so that its memory lies in State.
//
// It is unknown until its window is full of known values of scans that follow
// each other: an unknown input and a scan that is missing empty the window.
type Derived struct {
	Name   string
	Kind   Derivation
	Of     string // expression: a condition for since and count, a number otherwise
	Over   int64  // length of the window, ns
	Period int64  // between scans, ns
}

// Bounds of the memory that derived names may take.
const (
	longestWindow = 12_000  // scans: ten minutes at 20 per second
	allWindows    = 100_000 // scans, of all derived names
)

// scans gives how many values the window holds. A rate spans the window from its
// first scan to its last.
func (d *Derived) scans() int {
	if d.Period <= 0 || d.Kind == DeriveSince {
		return 0
	}
	n := (d.Over + d.Period/2) / d.Period
	if d.Kind == DeriveRate {
		n++
	}
	return int(min(n, math.MaxInt32))
}

// derived is a compiled derived name.
type derived struct {
	Derived
	compiled
	number numberFunc
	slot   int // where its value goes
}

// derive compiles derived names, each of which may build on those before it, and
// appends their names to the environment.
func (s *Set) derive(list []Derived, ix index) (faults []Fault) {
	total := 0
	for i := range list {
		d := derived{Derived: list[i], slot: len(s.names)}
		add := func(field string, offset int, message, hint string) {
			faults = append(faults, Fault{Rule: i, Derived: true, Field: field, Offset: offset, Message: message, Hint: hint})
		}
		_, taken := ix[d.Name]
		switch {
		case !ruleName.MatchString(d.Name):
			add("name", 0, fmt.Sprintf("name %q is not an identifier", d.Name), "begin with a letter; a-z, 0-9 and _ only")
		case taken:
			add("name", 0, fmt.Sprintf("name %q is taken", d.Name), "give it a name that no quantity and no other derived name has")
		case slices.Contains(words, d.Name) || slices.Contains([]string{"true", "false", "nil", "in", "abs", "min", "max", "known"}, d.Name):
			add("name", 0, fmt.Sprintf("name %q is a word of the language", d.Name), "give it another name")
		}
		n := d.scans()
		total += n
		switch {
		case d.Kind == DeriveSince && d.Over != 0:
			add("over", 0, "since has no window", "leave over away")
		case d.Kind == DeriveSince:
		case n < 2 || d.Kind == DeriveRate && n < 3:
			add("over", 0, "the window is shorter than two scans", fmt.Sprintf("a scan takes %g s", float64(d.Period)/1e9))
		case n > longestWindow:
			add("over", 0, "the window is too long", fmt.Sprintf("%d scans at most, here %g s", longestWindow, longestWindow*float64(d.Period)/1e9))
		case total > allWindows:
			add("over", 0, "all windows together are too long", fmt.Sprintf("%d scans at most", allWindows))
		}
		name, fault := d.compile(s.names, ix)
		if fault != nil {
			add(d.Kind.String(), fault.offset, fault.message, fault.hint)
		}
		if !taken {
			ix[d.Name] = len(s.names)
		}
		s.names = append(s.names, name)
		s.derived = append(s.derived, d)
	}
	return faults
}

// compile compiles what the name is made of, and gives the name itself.
func (d *derived) compile(names []Name, ix index) (Name, *exprFault) {
	name := Name{Name: d.Name, Type: Number}
	out, v, at, fault := compileValue(d.Of, names, ix)
	d.compiled = out
	if fault != nil {
		return name, fault
	}
	want := Number
	if d.Kind == DeriveSince || d.Kind == DeriveCount {
		want = Bool
	}
	switch {
	case v.typ != want:
		return name, &exprFault{at, fmt.Sprintf("%s takes %s, this is %s", d.Kind, want, v.typ), "since and count look at a condition, the others at a number"}
	case len(out.reads) == 0:
		return name, &exprFault{at, "this never changes", "name a quantity"}
	}
	d.truth, d.number = v.truth, v.number
	m := v.measure
	switch d.Kind {
	case DeriveMean, DeriveMax, DeriveMin:
		name.Unit, name.Dimension, name.Rate = m.name, m.dimension, m.rate
		if v.bounded {
			name.Low, name.High = v.low, v.high
		}
	case DeriveStdev:
		m = m.difference()
		name.Unit, name.Dimension, name.Rate = m.name, m.dimension, m.rate
	case DeriveRate:
		name.rateOf(m)
	case DeriveSince:
		name.Unit, name.Dimension = "s", unit.Time
	case DeriveCount:
		name.Dimension = unit.Ratio
	case numDerivations:
	}
	return name, nil
}

// rateOf makes the name a rate of what m measures.
func (n *Name) rateOf(m measure) {
	if m.plain() {
		return
	}
	n.Unit = m.name + "/s"
	switch m.name {
	case "":
		n.Unit = "1/s"
	case "s":
		n.Unit = ""
	case "m/s":
		n.Unit = "m/s²"
	}
	if n.Dimension, n.Rate = perSecond(m.dimension); m.rate {
		n.Dimension, n.Rate = unit.Invalid, false // a rate of a rate does not convert
	}
	if n.measure().plain() {
		n.Dimension, n.Rate = unit.Invalid, false
	}
}

// DerivedState is what a derived name remembers.
type DerivedState struct {
	Derived               // of what it is the state
	T           int64     // event time of the last scan, 0 = none
	Ring        []float64 // the values in the window
	Next        int       // place in Ring of the next value
	Fill        int       // how many there are since the last gap
	Base        float64   // subtracted from the values that are summed, for their digits
	Sum, Square float64   // Σ y, Σ y²
	Moment      float64   // Σ i y, i = 0 for the oldest
	Order       []int32   // of max and min: places of values that can become it, a ring
	Head, Len   int       // of Order
	Truth       Tri       // of the condition, at the last scan
	Began       int64     // event time since when it is true
}

// fitDerived makes the derived part of the state one of this set. What is derived
// in the same way under the same name goes on.
func (s *Set) fitDerived(st *State) {
	var states []DerivedState
	for i := range s.derived {
		d := &s.derived[i]
		at := slices.IndexFunc(st.Derived, func(old DerivedState) bool { return old.Derived == d.Derived })
		if at >= 0 {
			states = append(states, st.Derived[at])
			continue
		}
		one := DerivedState{Derived: d.Derived}
		if n := d.scans(); n > 0 {
			one.Ring = make([]float64, n)
		}
		if d.Kind == DeriveMax || d.Kind == DeriveMin {
			one.Order = make([]int32, len(one.Ring))
		}
		states = append(states, one)
	}
	st.Derived = states
}

// stepDerived carries every derived name on to the scan at t and puts its value
// into the frame.
func (s *Set) stepDerived(st *State, t int64, f *Frame) {
	for i := range s.derived {
		d := &s.derived[i]
		f.Numbers[d.slot] = d.step(&st.Derived[i], t, f)
	}
}

// step gives the value at t, NaN while it is not known.
func (d *derived) step(st *DerivedState, t int64, f *Frame) float64 {
	if t-st.T != d.Period {
		st.empty()
	}
	st.T = t
	if d.Kind == DeriveSince || d.Kind == DeriveCount {
		return d.condition(st, t, d.truth(f, 0))
	}
	x := d.number(f)
	if x-x != 0 {
		st.empty()
		return math.NaN()
	}
	switch d.Kind {
	case DeriveMax, DeriveMin:
		return st.extreme(x, d.Kind == DeriveMin)
	case DeriveRate, DeriveMean, DeriveStdev, DeriveSince, DeriveCount, numDerivations:
	}
	if !st.sum(x) {
		return math.NaN()
	}
	n := float64(len(st.Ring))
	switch d.Kind {
	case DeriveRate:
		return (st.Moment - (n-1)/2*st.Sum) / (n * (n*n - 1) / 12 * float64(d.Period) / 1e9)
	case DeriveStdev:
		return math.Sqrt(max(0, st.Square-st.Sum*st.Sum/n) / (n - 1))
	case DeriveMean, DeriveMax, DeriveMin, DeriveSince, DeriveCount, numDerivations:
	}
	return st.Base + st.Sum/n
}

// condition enters a truth value and gives the time since, or the count.
func (d *derived) condition(st *DerivedState, t int64, v Tri) float64 {
	before := st.Truth
	st.Truth = v
	switch {
	case v == Unknown:
		st.empty()
		return math.NaN()
	case d.Kind == DeriveSince && v == False:
		return 0
	case d.Kind == DeriveSince:
		if before != True {
			st.Began = t
		}
		return float64(t-st.Began) / 1e9
	}
	x := 0.0
	if v == True && before == False {
		x = 1
	}
	if !st.sum(x) {
		return math.NaN()
	}
	return math.Round(st.Base*float64(len(st.Ring)) + st.Sum)
}

// empty forgets the window.
func (st *DerivedState) empty() {
	st.Next, st.Fill, st.Head, st.Len = 0, 0, 0, 0
	st.Sum, st.Square, st.Moment = 0, 0, 0
	st.Truth, st.Began = Unknown, 0
}

// sum enters a value into the window and its sums, and tells whether the window
// is full. Once per window the sums are made anew, so that no rounding adds up.
func (st *DerivedState) sum(x float64) (full bool) {
	n := len(st.Ring)
	if st.Fill == 0 {
		st.Base = x
	}
	y := x - st.Base
	if st.Fill == n {
		old := st.Ring[st.Next] - st.Base
		st.Moment += float64(n-1)*y - (st.Sum - old)
		st.Sum += y - old
		st.Square += y*y - old*old
	} else {
		st.Moment += float64(st.Fill) * y
		st.Sum += y
		st.Square += y * y
	}
	st.put(x)
	if st.Next == 0 {
		st.again()
	}
	return st.Fill == n
}

// put enters a value into the ring.
func (st *DerivedState) put(x float64) {
	st.Ring[st.Next] = x
	if st.Next++; st.Next == len(st.Ring) {
		st.Next = 0
	}
	st.Fill = min(st.Fill+1, len(st.Ring))
}

// again sums a full ring whose oldest value is the first.
func (st *DerivedState) again() {
	st.Base += st.Sum / float64(len(st.Ring))
	st.Sum, st.Square, st.Moment = 0, 0, 0
	for i, x := range st.Ring {
		y := x - st.Base
		st.Sum += y
		st.Square += y * y
		st.Moment += float64(i) * y
	}
}

// extreme enters a value and gives the highest, or lowest, of a full window. Of
// the values in the window only those are candidates that no later one surpasses;
// Order has them from the best, which is the oldest, on.
func (st *DerivedState) extreme(x float64, lowest bool) float64 {
	n := len(st.Order)
	at := func(i int) int {
		if i += st.Head; i >= n {
			i -= n
		}
		return i
	}
	if st.Fill == n && int(st.Order[st.Head]) == st.Next { // the value that leaves
		st.Head = at(1)
		st.Len--
	}
	for st.Len > 0 {
		last := st.Ring[st.Order[at(st.Len-1)]]
		if lowest && last < x || !lowest && last > x {
			break
		}
		st.Len--
	}
	st.Order[at(st.Len)] = int32(st.Next) //nolint:gosec // below longestWindow
	st.Len++
	st.put(x)
	if st.Fill < n {
		return math.NaN()
	}
	return st.Ring[st.Order[st.Head]]
}

// Names gives the environment of the set, its derived names last. The frame of a
// step has one entry for each.
func (s *Set) Names() []Name { return s.names }

// DerivedReads lists the names that a derived name is made of.
func (s *Set) DerivedReads(i int) []string { return s.spell(s.derived[i].reads) }

// Unused lists, by index, the derived names that no rule, text or other derived
// name reads.
func (s *Set) Unused() []int {
	used := make([]bool, len(s.names))
	for i := range s.rules {
		for _, slot := range slices.Concat(s.rules[i].reads, s.rules[i].shows) {
			used[slot] = true
		}
		for _, part := range s.rules[i].text {
			if part.slot >= 0 {
				used[part.slot] = true
			}
		}
	}
	for i := range s.derived {
		for _, slot := range s.derived[i].reads {
			used[slot] = true
		}
	}
	var out []int
	for i := range s.derived {
		if !used[s.derived[i].slot] {
			out = append(out, i)
		}
	}
	return out
}
