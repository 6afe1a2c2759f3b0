package pipeline

import (
	"cmp"
	"encoding/json"
	"errors"
	"fmt"
	"strings"

	"throatwatch/monitor"
	"throatwatch/rules"
)

// Change is what a rig file says of its last change, for people.
type Change struct {
	Engineer string // who made it
	Approver string // who approved it, another person; "" = not approved
	Date     string // YYYY-MM-DD
	Note     string
}

// InForce says which configuration is in force, and which was refused last.
type InForce struct {
	Hash       string     `json:"hash"`
	By         string     `json:"by"`          // who made the change, "" = not stated
	ApprovedBy string     `json:"approved_by"` // "" = not approved
	Reason     string     `json:"reason"`
	Since      rules.Time `json:"since"`   // host time
	Refused    Refusal    `json:"refused"` // since then; null when there was none
}

// Refusal says why a configuration did not come into force. The zero value is none,
// null in JSON.
type Refusal struct {
	T   rules.Time `json:"t"`
	By  string     `json:"by"` // who asked for it; "" = the files were another at a start
	Why string     `json:"why"`
}

// MarshalJSON writes null for none.
func (r Refusal) MarshalJSON() ([]byte, error) {
	if r.T == 0 {
		return []byte("null"), nil
	}
	type plain Refusal
	return json.Marshal(plain(r))
}

// Errors of a change of configuration.
var (
	// ErrNotOff is returned when limits and rules would change under an engine that is
	// not known to be off.
	ErrNotOff = errors.New("limits and rules change only with the engine off")
	// ErrSamePerson is returned when who made a change would approve it too.
	ErrSamePerson = errors.New("a change is approved by another person than who made it")
)

// What became of a configuration: Outcome.Event.
const (
	ConfigChanged = "changed" // it is in force, in place of another one
	ConfigKept    = "kept"    // it was in force already
	ConfigRefused = "refused" // what was in force stays
)

// propose notes who brings the configuration of the next record.
func (s *State) propose(a *Action) error {
	if a.By != "" && strings.EqualFold(strings.TrimSpace(a.By), strings.TrimSpace(a.ApprovedBy)) {
		return fmt.Errorf("%q: %w", a.By, ErrSamePerson)
	}
	s.Proposed = *a
	return nil
}

// refuse notes that a configuration did not come into force: the old one stays.
func (m *Machine) refuse(s *State, by string, why error) {
	s.InForce.Refused = Refusal{T: rules.Time(s.Host), By: by, Why: why.Error()}
	inForce := s.InForce
	m.emit(s, Outcome{Kind: OutcomeConfig, T: s.Host, Event: ConfigRefused, Text: why.Error(), Err: why, Config: &inForce})
}

// enforce notes that a configuration is in force.
func (m *Machine) enforce(s *State, a *Action) {
	cfg, event := &m.prog.cfg, ConfigKept
	s.InForce.Refused = Refusal{}
	if s.InForce.Hash != cfg.Hash {
		event = ConfigChanged
		c := &cfg.Change
		s.InForce = InForce{
			Hash: cfg.Hash, By: cmp.Or(a.By, c.Engineer), ApprovedBy: cmp.Or(a.ApprovedBy, c.Approver),
			Reason: cmp.Or(a.Reason, c.Note), Since: rules.Time(s.Host),
		}
		if strings.EqualFold(s.InForce.By, s.InForce.ApprovedBy) {
			s.InForce.ApprovedBy = ""
		}
	}
	inForce := s.InForce
	m.emit(s, Outcome{Kind: OutcomeConfig, T: s.Host, Event: event, Text: cfg.Hash, OK: true, Config: &inForce})
}

// approval says who approved, in the middle of a sentence.
func approval(by string) string {
	if by == "" {
		return ", not approved"
	}
	return ", approved by " + by
}

// MayChange tells whether another configuration may come into force: nil, or an
// error that wraps ErrNotOff and says what speaks against it.
//
// The engine counts as off in phase off; while the phase is not known and no run is
// on, if it was off when it was known last, or never known. Without data for ten
// minutes and without a run nothing speaks against a change: the rig is switched
// off. host is the host time at which it would.
func (s *State) MayChange(host int64) error {
	ph := &s.Compute.Phase
	switch {
	case !s.RunActive && host-s.Align.MaxEvent >= abandoned:
		return nil
	case ph.LitKnown && ph.Lit:
		return fmt.Errorf("%w: it is lit", ErrNotOff)
	case ph.Phase == monitor.Off:
		return nil
	case ph.Phase != monitor.PhaseUnknown:
		return fmt.Errorf("%w: its phase is %s", ErrNotOff, ph.Phase)
	case s.RunActive:
		return fmt.Errorf("%w: a run is on, and the phase is not known", ErrNotOff)
	case ph.Known == monitor.Off || ph.Known == monitor.PhaseUnknown:
		return nil
	}
	return fmt.Errorf("%w: its phase was %s when it was known last", ErrNotOff, ph.Known)
}
