package pipeline

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"throatwatch/monitor/compute"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
	"throatwatch/rules/card"
)

const (
	// logKept is how many entries of the operator log the state holds, for those who
	// begin to look; all of them are in the run file.
	logKept = 50
	// swapsKept bounds the sensor swaps that the state holds: beyond it the oldest go.
	swapsKept = 200
	// mostText bounds each text of an action, bytes, and mostName a name.
	mostText, mostName = 2000, 80
)

// Errors of entries and swaps.
var (
	ErrInvalid   = errors.New("cannot be entered") // wrapped with what is wrong
	ErrNoChannel = errors.New("there is no such channel")
)

// Entry is a line of the operator log: what a person did, who and why. A refused
// action is no entry. Fields that an entry does not use are left out of its JSON.
type Entry struct {
	T         rules.Time    `json:"t"`    // host time: people act when they do, whether data comes or not
	What      string        `json:"what"` // the Do constant of the action
	Alarm     string        `json:"alarm,omitempty"`
	Rule      string        `json:"rule,omitempty"`
	Channel   string        `json:"channel,omitempty"`
	Name      string        `json:"name,omitempty"`
	Value     rules.Reading `json:"value,omitzero"` // in Unit, as it was entered
	Unit      string        `json:"unit,omitempty"`
	Text      string        `json:"text,omitempty"`
	Reason    string        `json:"reason,omitempty"`
	By        string        `json:"by"`
	Role      string        `json:"role"`
	ValidFrom rules.Time    `json:"valid_from,omitzero"`
	Serial    string        `json:"serial,omitempty"`

	Calibration string `json:"calibration,omitempty"` // of a new sensor, as a rig file states it
}

// Swap is a sensor that took the place of another on a channel.
type Swap struct {
	Channel   string
	Serial    string // of the new sensor
	ValidFrom int64  // event time from which its values count, ns UTC
	At        int64  // host time at which it was entered
	By        string
	Reason    string

	Calibration string // keys calibration, uncertainty and sensor, as in a rig file; "" = not stated
}

// log enters what was done into the operator log.
func (m *Machine) log(s *State, a *Action, e Entry) {
	e.T = rules.Time(s.Host)
	e.What, e.Reason, e.By, e.Role = strings.ReplaceAll(a.Do, "-", "_"), a.Reason, a.By, a.Role
	if len(s.Log) == logKept {
		s.Log = slices.Delete(s.Log, 0, 1)
	}
	s.Log = append(s.Log, e)
	m.emit(s, Outcome{Kind: OutcomeLog, T: int64(e.T), Entry: &e})
}

func invalid(format string, args ...any) error {
	return fmt.Errorf("%w: %s", ErrInvalid, fmt.Sprintf(format, args...))
}

// checkTexts refuses an action whose texts would not fit a log.
func (a *Action) checkTexts() error {
	for _, f := range []struct {
		name, text string
		most       int
	}{
		{"text", a.Text, mostText},
		{"reason", a.Reason, mostText},
		{"name", a.Name, mostName},
		{"serial", a.Serial, mostName},
		{"calibration", a.Calibration, mostText},
		{"by", a.By, mostName},
		{"approved by", a.ApprovedBy, mostName},
		{"request id", a.RequestID, mostName},
		{"card text", a.CardText, card.MostText},
		{"card hash", a.CardHash, mostName},
	} {
		if len(f.text) > f.most {
			return invalid("the %s has more than %d bytes", f.name, f.most)
		}
	}
	return nil
}

// enter does a manual entry: a reading that no channel has, or a remark.
func (m *Machine) enter(s *State, a *Action) error {
	name, unitName := strings.TrimSpace(a.Name), strings.TrimSpace(a.Unit)
	switch {
	case name == "":
		return invalid("an entry needs a name, such as oil level")
	case !a.Value.Known && strings.TrimSpace(a.Text) == "":
		return invalid("an entry needs a value or a text")
	case !a.Value.Known && unitName != "":
		return invalid("there is a unit and no value")
	}
	if unitName != "" {
		if _, err := unit.Parse(unitName); err != nil {
			return invalid("%v", err)
		}
	}
	m.log(s, a, Entry{Name: name, Value: a.Value, Unit: unitName, Text: a.Text})
	return nil
}

// swap notes that the sensor of a channel is another one. It changes no computation:
// the calibration of a run stays that of its configuration until it is reduced by that of
// the new sensor.
func (m *Machine) swap(s *State, t int64, a *Action) error {
	from := int64(a.ValidFrom)
	if from == 0 {
		from = t
	}
	since, of := s.Run.Started, "the run began"
	if !s.RunActive {
		since, of = s.Run.Ended, "the last run ended"
	}
	switch {
	case a.Role != "engineer" && a.Role != "facility":
		return fmt.Errorf("%w: a sensor swap is entered by an engineer", rules.ErrRefused)
	case !slices.ContainsFunc(m.prog.cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == a.Channel }):
		return fmt.Errorf("channel %q: %w", a.Channel, ErrNoChannel)
	case strings.TrimSpace(a.Serial) == "":
		return invalid("a swap needs the serial number of the new sensor")
	case strings.TrimSpace(a.Reason) == "":
		return invalid("a swap needs a reason")
	case from < since:
		return invalid("valid from %s, but %s at %s", stamp(from), of, stamp(since))
	case from > max(t, s.Host)+second: // the clock of a display may be a little ahead
		return invalid("valid from %s, which is yet to come: it is %s", stamp(from), stamp(max(t, s.Host)))
	}
	if len(s.Swaps) == swapsKept {
		s.Swaps = slices.Delete(s.Swaps, 0, 1)
	}
	s.Swaps = append(s.Swaps, Swap{Channel: a.Channel, Serial: a.Serial, ValidFrom: from, At: s.Host, By: a.By, Reason: a.Reason, Calibration: a.Calibration})
	m.log(s, a, Entry{Channel: a.Channel, Serial: a.Serial, ValidFrom: rules.Time(from), Text: a.Text, Calibration: a.Calibration})
	return nil
}

func stamp(ns int64) string { return time.Unix(0, ns).UTC().Format("2006-01-02 15:04:05 UTC") }
