// Package alarm is the state table of an alarm after ANSI/ISA-18.2 and
// IEC 62682: which state follows from which input. It knows no rules, no times
// and no people; what is refused here is refused everywhere.
//
// Shelved, suppressed by design and out of service hold whatever the process
// does: Raise and Return leave them as they are, and they end in Normal, from
// where an alarm whose condition stands is raised anew. A latching alarm that
// has been raised cannot be suppressed by design: it stands until it is reset.
package alarm

// State is the state of an alarm.
type State uint8

// The states, with the letters that the standard's diagram gives them.
const (
	Normal                 State = iota // A: condition absent, nothing to acknowledge
	Unacknowledged                      // B: condition present, not acknowledged
	Acknowledged                        // C: condition present, acknowledged
	ReturnedUnacknowledged              // D: condition gone, not acknowledged
	LatchedUnacknowledged               // E: condition gone, not acknowledged, to be reset
	LatchedAcknowledged                 // F: condition gone, acknowledged, to be reset
	Shelved                             // G: put aside by an operator for a time
	SuppressedByDesign                  // H: put aside by logic
	OutOfService                        // I: put aside for maintenance
	NumStates
)

var names = [NumStates]string{
	"normal", "unacknowledged", "acknowledged", "returned_unacknowledged", "latched_unacknowledged",
	"latched_acknowledged", "shelved", "suppressed_by_design", "out_of_service",
}

// String gives the name used in JSON and on the page.
func (s State) String() string {
	if s < NumStates {
		return names[s]
	}
	return "invalid"
}

// Standing reports whether the alarm asks for attention or was asked about: B to F.
func (s State) Standing() bool { return s >= Unacknowledged && s <= LatchedAcknowledged }

// Asking reports whether the alarm waits for an acknowledgement: B, D, E.
func (s State) Asking() bool {
	return s == Unacknowledged || s == ReturnedUnacknowledged || s == LatchedUnacknowledged
}

// Aside reports whether the alarm is put aside: G, H, I.
func (s State) Aside() bool { return s >= Shelved && s < NumStates }

// Input is what happens to an alarm.
type Input uint8

// The inputs.
const (
	Raise       Input = iota // the condition is present
	Return                   // the condition is gone
	Acknowledge              // an operator has seen it
	Reset                    // an operator unlatches it
	Shelve                   // an operator puts it aside
	Unshelve                 // … and takes it back, or the time is up
	Suppress                 // the phase puts it aside
	Unsuppress               // … and takes it back
	Remove                   // it is taken out of service
	Restore                  // … and put back
	Worsen                   // the condition became worse: ask again
	NumInputs
)

// String names the input.
func (i Input) String() string {
	inputs := [NumInputs]string{
		"raise", "return", "acknowledge", "reset", "shelve", "unshelve", "suppress", "unsuppress",
		"out_of_service", "in_service", "worsen",
	}
	if i < NumInputs {
		return inputs[i]
	}
	return "invalid"
}

// Short names for the table.
const (
	a = Normal
	b = Unacknowledged
	c = Acknowledged
	d = ReturnedUnacknowledged
	e = LatchedUnacknowledged
	f = LatchedAcknowledged
	g = Shelved
	h = SuppressedByDesign
	i = OutOfService
	x = NumStates // refused
)

// table gives the state after an input, for alarms that do not latch.
var table = [NumStates][NumInputs]State{
	//  raise return ack reset shelve unshelve suppress unsuppress remove restore worsen
	a: {b, x, x, x, g, x, h, x, i, x, x},
	b: {x, d, c, x, g, x, h, x, i, x, b},
	c: {x, a, x, x, g, x, h, x, i, x, b},
	d: {b, x, a, x, g, x, h, x, i, x, x},
	e: {b, x, f, d, g, x, x, x, i, x, x},
	f: {b, x, x, a, g, x, x, x, i, x, x},
	g: {g, g, x, x, x, a, x, x, i, x, x},
	h: {h, h, x, x, g, x, x, a, i, x, x},
	i: {i, i, x, x, x, x, x, x, x, a, x},
}

// Next gives the state that follows from s by in, and whether the input is taken
// in that state. A latching alarm returns to a latched state.
func Next(s State, in Input, latching bool) (next State, ok bool) {
	if s >= NumStates || in >= NumInputs {
		return s, false
	}
	next = table[s][in]
	if latching {
		switch {
		case s == b && in == Return:
			next = e
		case s == c && in == Return:
			next = f
		case (s == b || s == c) && in == Suppress:
			next = x
		}
	}
	if next == x {
		return s, false
	}
	return next, true
}
