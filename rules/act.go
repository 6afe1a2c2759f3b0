package rules

import (
	"errors"
	"fmt"
	"strings"
	"time"

	"throatwatch/monitor"
	"throatwatch/rules/alarm"
)

// What an operator can do to an alarm: Action.Do. A dash may stand for the
// underscore.
const (
	DoAcknowledge  = "acknowledge"
	DoReset        = "reset"
	DoShelve       = "shelve"
	DoUnshelve     = "unshelve"
	DoOutOfService = "out_of_service"
	DoInService    = "in_service"
)

// MaxShelve is the longest time for which an alarm can be shelved, ns.
const MaxShelve = int64(time.Hour)

// Action is what an operator asks for.
type Action struct {
	Do       string
	Alarm    string // id of an alarm, or the name of a rule
	Revision uint64 // that the operator saw
	Reason   string
	By       string
	Role     string        // out of service and back is for an engineer
	For      int64         // of shelving, ns
	Phase    monitor.Phase // of the engine, unknown when it is not known now
	Host     int64         // host time, by which rules on the daemon go: scans may have stopped
}

// Errors of Act.
var (
	ErrNotFound = errors.New("there is no such alarm")
	ErrMovedOn  = errors.New("the alarm has changed since it was shown; look at it again")
	ErrRefused  = errors.New("refused") // wrapped with the reason
)

func refused(format string, args ...any) error {
	return fmt.Errorf("%w: %s", ErrRefused, fmt.Sprintf(format, args...))
}

// Act does what an operator asks for at event time t and gives the alarm as it
// is after that. The errors are ErrNotFound, ErrMovedOn when the revision is not
// that of the alarm, and ErrRefused with the reason; nothing has changed then.
//
// A condition that still stands when an alarm comes back from the shelf or into
// service is raised by the next step.
func (s *Set) Act(st *State, t int64, a Action) (Alarm, error) {
	i, err := s.find(st, a.Alarm)
	if err != nil {
		return Alarm{}, err
	}
	p, in := &s.rules[i], &st.Instances[i]
	if in.Revision != a.Revision {
		return Alarm{}, ErrMovedOn
	}
	input, err := p.input(&a)
	if err != nil {
		return Alarm{}, err
	}
	if !p.takes(in.State, input) {
		return Alarm{}, refused("an alarm that is %s takes no %s", strings.ReplaceAll(in.State.String(), "_", " "), input)
	}
	if p.domain == OfDaemon {
		t = max(t, a.Host)
	}
	s.move(st, i, input, t, "")
	switch input {
	case alarm.Acknowledge:
		in.AckBy, in.AckAt, in.Told = a.By, t, in.Peak // the operator saw it up to here
	case alarm.Shelve:
		in.AsideBy, in.Reason, in.Until = a.By, a.Reason, t+a.For
	case alarm.Remove:
		in.AsideBy, in.Reason, in.Until = a.By, a.Reason, 0
	case alarm.Raise, alarm.Return, alarm.Reset, alarm.Unshelve, alarm.Suppress, alarm.Unsuppress, alarm.Restore,
		alarm.Worsen, alarm.NumInputs:
	}
	return view(p, in), nil
}

// find gives the rule of an alarm id or of a rule name. An id of an earlier
// occurrence has moved on.
func (s *Set) find(st *State, id string) (int, error) {
	if len(st.Instances) != len(s.rules) {
		s.Fit(st)
	}
	name := id
	if parts := strings.Split(id, "/"); len(parts) >= 3 {
		name = parts[len(parts)-2]
	}
	for i := range st.Instances {
		switch in := &st.Instances[i]; {
		case in.Rule != name:
		case id == name || id == in.ID:
			return i, nil
		default:
			return 0, ErrMovedOn
		}
	}
	return 0, ErrNotFound
}

// input gives the input of an action after checking what it needs.
func (p *program) input(a *Action) (alarm.Input, error) {
	reason := strings.TrimSpace(a.Reason) != ""
	switch strings.ReplaceAll(a.Do, "-", "_") {
	case DoAcknowledge:
		return alarm.Acknowledge, nil
	case DoReset:
		return alarm.Reset, nil
	case DoUnshelve:
		return alarm.Unshelve, nil
	case DoShelve:
		switch {
		case p.Priority == Warning:
			return 0, refused("a warning cannot be shelved")
		case !reason:
			return 0, refused("shelving needs a reason")
		case a.For <= 0 || a.For > MaxShelve:
			return 0, refused("shelving needs a time of at most %v", time.Duration(MaxShelve))
		}
		return alarm.Shelve, nil
	case DoOutOfService, DoInService:
		switch {
		case a.Role != "engineer" && a.Role != "facility":
			return 0, refused("out of service and back is for an engineer")
		case !reason:
			return 0, refused("out of service and back needs a reason")
		case strings.ReplaceAll(a.Do, "-", "_") == DoInService:
			return alarm.Restore, nil
		case a.Phase == monitor.PhaseUnknown:
			return 0, refused("an alarm goes out of service only with the engine off, and its phase is not known")
		case a.Phase != monitor.Off:
			return 0, refused("an alarm goes out of service only with the engine off; its phase is %s", a.Phase)
		}
		return alarm.Remove, nil
	}
	return 0, refused("there is no action %q", a.Do)
}
