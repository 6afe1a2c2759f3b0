package rules

import (
	"bytes"
	"fmt"

	"throatwatch/monitor"
	"throatwatch/rules/alarm"
)

// Alarm is an alarm as it is shown, sent and stored.
type Alarm struct {
	ID             string     `json:"id"` // run/rule/event time of its begin in ns
	Rule           string     `json:"rule"`
	Title          string     `json:"title"`
	Text           string     `json:"text"` // as rendered when it was raised; the title before
	Priority       Priority   `json:"priority"`
	State          AlarmState `json:"state"`
	Raised         Time       `json:"raised"` // null when it was put aside without being raised
	Changed        Time       `json:"changed"`
	Revision       uint64     `json:"revision"`
	Caution        string     `json:"caution"`
	Response       string     `json:"response"`
	Value          Reading    `json:"value"` // of what the rule compares first, at the change
	Peak           Reading    `json:"peak"`  // its worst since the raise
	Unit           string     `json:"unit"`
	Dimension      string     `json:"dimension"` // of the value: pressure, temperature_difference …; "" when it is not known
	AcknowledgedBy string     `json:"acknowledged_by"`
	AcknowledgedAt Time       `json:"acknowledged_at"`
	AsideBy        string     `json:"aside_by"` // who shelved it or took it out of service
	Reason         string     `json:"reason"`
	Until          Time       `json:"until"`
	Past           bool       `json:"past"` // came about well behind host time: no sound
	FirstOut       bool       `json:"first_out"`
	Group          string     `json:"group"`
	Under          Ref        `json:"under"`   // the standing alarm of the group that it is listed under
	Unknown        bool       `json:"unknown"` // the condition cannot be judged now
	Raise          bool       `json:"-"`       // this change asks for attention: a raise, the first or another, or a worsening
}

// view shows an instance.
func view(p *program, in *Instance) Alarm {
	text := in.Text
	if text == "" {
		text = p.Title
	}
	return Alarm{
		ID: in.ID, Rule: p.Name, Title: p.Title, Text: text, Priority: p.Priority, State: AlarmState(in.State),
		Raised: Time(in.Raised), Changed: Time(in.Changed), Revision: in.Revision,
		Caution: p.Caution, Response: p.Response, Value: in.Value, Peak: in.Peak, Unit: p.unit, Dimension: p.dimension(),
		AcknowledgedBy: in.AckBy, AcknowledgedAt: Time(in.AckAt), AsideBy: in.AsideBy,
		Reason: in.Reason, Until: Time(in.Until), FirstOut: in.FirstOut, Group: p.Group, Under: in.Under, Unknown: in.Unknown,
	}
}

// Time is an event time in ns UTC; 0 is none.
type Time = monitor.Time

// AlarmState is a state of package alarm that knows its JSON name.
type AlarmState alarm.State

// String gives the name of the state.
func (s AlarmState) String() string { return alarm.State(s).String() }

// MarshalText writes the name.
func (s AlarmState) MarshalText() ([]byte, error) { return []byte(s.String()), nil }

// UnmarshalText reads the name.
func (s *AlarmState) UnmarshalText(b []byte) error {
	for v := range alarm.NumStates {
		if v.String() == string(b) {
			*s = AlarmState(v)
			return nil
		}
	}
	return fmt.Errorf("alarm state %q: there is none of that name", b)
}

var priorities = [...]string{Note: "note", Advisory: "advisory", Caution: "caution", Warning: "warning"}

// String gives the name used in JSON, in rule files and on the page.
func (p Priority) String() string {
	if p < Note || p > Warning {
		return "invalid"
	}
	return priorities[p]
}

// ParsePriority gives the priority of a name, and whether there is one.
func ParsePriority(s string) (Priority, bool) {
	for p := Note; p <= Warning; p++ {
		if priorities[p] == s {
			return p, true
		}
	}
	return 0, false
}

// MarshalText writes the name.
func (p Priority) MarshalText() ([]byte, error) { return []byte(p.String()), nil }

// UnmarshalText reads the name.
func (p *Priority) UnmarshalText(b []byte) error {
	v, ok := ParsePriority(string(bytes.TrimSpace(b)))
	if !ok {
		return fmt.Errorf("priority %q: use note, advisory, caution or warning", b)
	}
	*p = v
	return nil
}
