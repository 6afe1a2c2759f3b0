package rules

import (
	"encoding/json"
	"fmt"
	"slices"
	"time"
)

// Ref is the id of another alarm; "" is none, and null as JSON.
type Ref string

// MarshalJSON writes the id or null.
func (r Ref) MarshalJSON() ([]byte, error) {
	if r == "" {
		return []byte("null"), nil
	}
	return json.Marshal(string(r))
}

// UnmarshalJSON reads an id or null.
func (r *Ref) UnmarshalJSON(b []byte) error {
	var id *string
	if err := json.Unmarshal(b, &id); err != nil {
		return fmt.Errorf("id of an alarm: %w", err)
	}
	*r = ""
	if id != nil {
		*r = Ref(*id)
	}
	return nil
}

// mark notes on a raise of alarm i whether it is the first of its group: none of
// its priority or a higher one stands. The mark stays, also while the alarm itself
// is normal, until the next raise in a group that was normal altogether.
func (s *Set) mark(st *State, i int) {
	r, in := &s.rules[i], &st.Instances[i]
	alone, first := true, true
	for k := range s.rules {
		if k != i && r.Group != "" && s.rules[k].Group == r.Group && st.Instances[k].State.Standing() {
			alone = false
			first = first && s.rules[k].Priority < r.Priority
		}
	}
	if alone && r.Group != "" {
		for k := range s.rules {
			if s.rules[k].Group == r.Group {
				st.Instances[k].FirstOut = false
			}
		}
	}
	in.FirstOut = in.FirstOut || first
}

// lateCause is how much later than its consequences a cause may be raised, ns: a
// silent source is told after what became stale by it.
const lateCause = 10 * int64(time.Second)

// head gives the alarm that alarm i is listed under: of those of its group that
// stand and were not raised long after it the most urgent, among equals the
// first-out, then the earliest. It is none for that alarm itself; and a warning
// stands for itself always.
func (s *Set) head(st *State, i int) Ref {
	group := s.rules[i].Group
	if group == "" || s.rules[i].Priority == Warning || !st.Instances[i].State.Standing() {
		return ""
	}
	best := i
	for k := range s.rules {
		other := &st.Instances[k]
		if s.rules[k].Group == group && other.State.Standing() && other.Raised-st.Instances[i].Raised <= lateCause && s.before(st, k, best) {
			best = k
		}
	}
	if best == i {
		return ""
	}
	return Ref(st.Instances[best].ID)
}

func (s *Set) before(st *State, a, b int) bool {
	x, y := &st.Instances[a], &st.Instances[b]
	switch p, q := s.rules[a].Priority, s.rules[b].Priority; {
	case p != q:
		return p > q
	case x.FirstOut != y.FirstOut:
		return x.FirstOut
	case x.Raised != y.Raised:
		return x.Raised < y.Raised
	}
	return a < b
}

// regroup brings up to date which alarm each is listed under, after something
// moved. An alarm of this step, told in out from index first on, is told so;
// another is told anew.
func (s *Set) regroup(st *State, t int64, first int, out []Alarm) []Alarm {
	st.Moved = false
	for i := range s.rules {
		in := &st.Instances[i]
		under := s.head(st, i)
		if under == in.Under {
			continue
		}
		in.Under = under
		told := false
		for k := range slices.Backward(out[first:]) {
			if a := &out[first+k]; a.Rule == in.Rule {
				a.Under, told = under, true
				break
			}
		}
		if !told {
			in.Revision++
			in.Changed = t
			out = append(out, view(&s.rules[i], in))
		}
	}
	return out
}
