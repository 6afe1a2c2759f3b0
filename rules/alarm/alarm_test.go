package alarm_test

import (
	"strings"
	"testing"

	"throatwatch/rules/alarm"
)

// transitions is written from the description of the states in ANSI/ISA-18.2
// and IEC 62682 (commonly published form; the texts are not quoted), one
// sentence each. "latching" or "plain" restricts a line. Whatever is not listed
// is refused.
const transitions = `
# The condition appears and goes.
normal raise unacknowledged
unacknowledged return returned_unacknowledged plain
acknowledged return normal plain
returned_unacknowledged raise unacknowledged
# A latching alarm waits for a reset after its condition has gone.
unacknowledged return latched_unacknowledged latching
acknowledged return latched_acknowledged latching
latched_unacknowledged raise unacknowledged
latched_acknowledged raise unacknowledged
latched_unacknowledged reset returned_unacknowledged
latched_acknowledged reset normal
# Acknowledging never clears what stands.
unacknowledged acknowledge acknowledged
returned_unacknowledged acknowledge normal
latched_unacknowledged acknowledge latched_acknowledged
# A worse condition asks again.
unacknowledged worsen unacknowledged
acknowledged worsen unacknowledged
# An operator may shelve whatever is not shelved or out of service.
normal shelve shelved
unacknowledged shelve shelved
acknowledged shelve shelved
returned_unacknowledged shelve shelved
latched_unacknowledged shelve shelved
latched_acknowledged shelve shelved
suppressed_by_design shelve shelved
shelved unshelve normal
shelved raise shelved
shelved return shelved
# Logic suppresses what is annunciated by the process, but no latched event.
normal suppress suppressed_by_design
unacknowledged suppress suppressed_by_design plain
acknowledged suppress suppressed_by_design plain
returned_unacknowledged suppress suppressed_by_design
suppressed_by_design unsuppress normal
suppressed_by_design raise suppressed_by_design
suppressed_by_design return suppressed_by_design
# Maintenance takes out of service from any state, and gives back.
normal out_of_service out_of_service
unacknowledged out_of_service out_of_service
acknowledged out_of_service out_of_service
returned_unacknowledged out_of_service out_of_service
latched_unacknowledged out_of_service out_of_service
latched_acknowledged out_of_service out_of_service
shelved out_of_service out_of_service
suppressed_by_design out_of_service out_of_service
out_of_service in_service normal
out_of_service raise out_of_service
out_of_service return out_of_service
`

type key struct {
	state, input string
	latching     bool
}

func wanted(t *testing.T) map[key]string {
	t.Helper()
	want := map[key]string{}
	for line := range strings.Lines(transitions) {
		f := strings.Fields(line)
		if len(f) == 0 || f[0] == "#" {
			continue
		}
		for _, latching := range []bool{false, true} {
			if len(f) == 4 && (f[3] == "latching") != latching {
				continue
			}
			k := key{f[0], f[1], latching}
			if _, twice := want[k]; twice {
				t.Fatalf("%v is there twice", k)
			}
			want[k] = f[2]
		}
	}
	return want
}

func TestEveryCell(t *testing.T) {
	want := wanted(t)
	cells := 0
	for _, latching := range []bool{false, true} {
		for s := range alarm.NumStates {
			for in := range alarm.NumInputs {
				cells++
				k := key{s.String(), in.String(), latching}
				next, ok := alarm.Next(s, in, latching)
				w, allowed := want[k]
				delete(want, k)
				switch {
				case ok != allowed:
					t.Errorf("%v: taken %v, want %v", k, ok, allowed)
				case ok && next.String() != w:
					t.Errorf("%v: %v, want %v", k, next, w)
				case !ok && next != s:
					t.Errorf("%v: refused, but gives %v", k, next)
				}
			}
		}
	}
	if cells != 2*9*11 {
		t.Errorf("%d cells, want %d", cells, 2*9*11)
	}
	for k := range want {
		t.Errorf("%v names no cell", k)
	}
}

func TestOutsideTheTable(t *testing.T) {
	if _, ok := alarm.Next(alarm.NumStates, alarm.Raise, false); ok {
		t.Error("a state that there is not takes an input")
	}
	if _, ok := alarm.Next(alarm.Normal, alarm.NumInputs, false); ok {
		t.Error("an input that there is not is taken")
	}
	if alarm.NumStates.String() != "invalid" || alarm.NumInputs.String() != "invalid" {
		t.Error("they have names")
	}
}

// TestReachable walks the table: every state can be reached and left again.
// Without latching the latched states cannot be reached, as it must be.
func TestReachable(t *testing.T) {
	for _, latching := range []bool{false, true} {
		reach := func(from alarm.State) map[alarm.State]bool {
			seen := map[alarm.State]bool{from: true}
			for todo := []alarm.State{from}; len(todo) > 0; todo = todo[1:] {
				for in := range alarm.NumInputs {
					if next, ok := alarm.Next(todo[0], in, latching); ok && !seen[next] {
						seen[next] = true
						todo = append(todo, next)
					}
				}
			}
			return seen
		}
		from := reach(alarm.Normal)
		for s := range alarm.NumStates {
			latched := s == alarm.LatchedUnacknowledged || s == alarm.LatchedAcknowledged
			if from[s] != (latching || !latched) {
				t.Errorf("latching %v: %v reached: %v", latching, s, from[s])
			}
			if !reach(s)[alarm.Normal] {
				t.Errorf("latching %v: %v is a dead end", latching, s)
			}
		}
	}
}

func TestKindsOfState(t *testing.T) {
	tests := []struct {
		s                       alarm.State
		standing, asking, aside bool
	}{ // which states an operator has to answer, by the letters of the standard
		{alarm.Normal, false, false, false},
		{alarm.Unacknowledged, true, true, false},
		{alarm.Acknowledged, true, false, false},
		{alarm.ReturnedUnacknowledged, true, true, false},
		{alarm.LatchedUnacknowledged, true, true, false},
		{alarm.LatchedAcknowledged, true, false, false},
		{alarm.Shelved, false, false, true},
		{alarm.SuppressedByDesign, false, false, true},
		{alarm.OutOfService, false, false, true},
	}
	for _, tt := range tests {
		if tt.s.Standing() != tt.standing || tt.s.Asking() != tt.asking || tt.s.Aside() != tt.aside {
			t.Errorf("%v: %v %v %v", tt.s, tt.s.Standing(), tt.s.Asking(), tt.s.Aside())
		}
	}
}
