package pipeline

import (
	"errors"
	"fmt"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/check"
)

// checkLate is for how long after its window a check waits for scans, ns of host time:
// where none come it is judged without.
const checkLate = 5 * second

// Errors of a check.
var (
	// ErrNotAtRest is returned for a check of an engine that is not known to be at rest.
	ErrNotAtRest = errors.New("the data system is checked with the engine at rest")
	// ErrChecking is returned while another check gathers.
	ErrChecking = errors.New("a check is under way")
)

// CheckRequest is what an operator says when a check of the data system begins.
type CheckRequest struct {
	Phase   string         `json:"phase"`  // check.Before or check.After
	Warmth  string         `json:"warmth"` // check.Cold or check.Warm
	Ticks   []check.Ticked `json:"ticks,omitempty"`
	Planned float64        `json:"planned_s,omitempty"` // length of the run; 0 = not stated
	Free    float64        `json:"free,omitempty"`      // bytes on the disk of the data folder, from who takes the request; 0 = not known
}

// Checks is what the state holds of checks: one that gathers, and the last before and after
// a run. It is plain data.
type Checks struct {
	Running check.Result // its State is "" while none is under way
	Request check.Request
	Gather  check.Gather
	Free    float64 // bytes on the disk, as the request says
	Host    int64   // host time at which it began
	Before  check.Result
	After   check.Result
}

// atRest tells that the engine is at rest: nil, or an error that wraps ErrNotAtRest and says
// what speaks against it. On a rig without a rotor speed the phase is never known: only a
// flame speaks against it.
func (m *Machine) atRest(s *State) error {
	ph := &s.Compute.Phase
	switch {
	case ph.LitKnown && ph.Lit:
		return fmt.Errorf("%w: it is lit", ErrNotAtRest)
	case m.prog.cfg.Compute.Stations.Speed < 0, ph.Phase == monitor.Off, ph.Phase == monitor.Cooling:
		return nil
	case ph.Phase == monitor.PhaseUnknown:
		return fmt.Errorf("%w: its phase is not known, for the rotor speed is not: look at channel %q", ErrNotAtRest,
			m.prog.cfg.Compute.Channels[m.prog.cfg.Compute.Stations.Speed].ID)
	}
	return fmt.Errorf("%w: its phase is %s", ErrNotAtRest, ph.Phase)
}

// check begins a check of the data system.
func (m *Machine) check(s *State, t int64, a *Action) error {
	c, cfg := &s.Checks, &m.prog.cfg
	q := check.Request{
		Phase: a.Check.Phase, Warmth: a.Check.Warmth, Ticks: a.Check.Ticks, Planned: int64(a.Check.Planned * 1e9), By: a.By, Note: a.Text,
	}
	if err := q.Check(&m.prog.limits); err != nil {
		return fmt.Errorf("%w: %w", ErrInvalid, err)
	}
	for _, tick := range q.Ticks {
		if len(tick.By) > mostName {
			return invalid("the name of who ticked %s has more than %d bytes", tick.ID, mostName)
		}
	}
	switch {
	case c.Running.State != "":
		return fmt.Errorf("%w, since %s", ErrChecking, stamp(int64(c.Running.Began)))
	case q.Phase == check.After && s.Run.ID == "":
		return fmt.Errorf("check after a run: %w: there was none yet", ErrNoRun)
	}
	if err := m.atRest(s); err != nil {
		return err
	}
	c.Running = q.Begin(t, cfg.Hash, cfg.Rig.LimitsVersion)
	c.Request, c.Gather, c.Free, c.Host = q, check.Gather{}, a.Check.Free, s.Host
	if q.Phase == check.After || s.RunActive {
		c.Running.Run = s.Run.ID
	}
	m.log(s, a, Entry{Text: strings.Join(append([]string{q.Phase + " the run, " + q.Warmth}, notes(q.Note)...), "; ")})
	m.tellCheck(s, t, &c.Running)
	return nil
}

func notes(note string) []string {
	if note == "" {
		return nil
	}
	return []string{note}
}

func (m *Machine) tellCheck(s *State, t int64, r *check.Result) {
	out := *r
	m.emit(s, Outcome{Kind: OutcomeChecks, T: t, Check: &out})
}

// gather gives a scan to the check that is under way.
func (m *Machine) gather(s *State, scan *monitor.Scan) {
	c := &s.Checks
	if c.Running.State == "" {
		return
	}
	// That the speed is lost meanwhile is a finding, and no sign that the rotor turns.
	if err := m.atRest(s); err != nil && s.Compute.Phase.Phase != monitor.PhaseUnknown {
		m.breakOff(s, scan.T, err.Error())
		return
	}
	c.Gather.Add(&m.prog.limits, &m.prog.cfg.Compute, m.prog.cfg.Align.Period, scan)
	if c.Gather.Full(&m.prog.limits) {
		m.judgeCheck(s, scan.T)
	}
}

// overdue judges a check for which scans do not come, by what came.
func (m *Machine) overdue(s *State) {
	if c := &s.Checks; c.Running.State != "" && s.Host-c.Host > m.prog.limits.Window+checkLate {
		m.judgeCheck(s, max(c.Gather.To, int64(c.Running.Began)))
	}
}

// breakOff ends the check that is under way, if one is, without a result.
func (m *Machine) breakOff(s *State, t int64, why string) {
	c := &s.Checks
	if c.Running.State == "" {
		return
	}
	c.Running.Break(t, why)
	m.tellCheck(s, t, &c.Running)
	c.Running, c.Request, c.Gather = check.Result{}, check.Request{}, check.Gather{}
}

// judgeCheck ends the check that is under way with a result.
func (m *Machine) judgeCheck(s *State, t int64) {
	c, cfg := &s.Checks, &m.prog.cfg
	b := check.Bench{Compute: &cfg.Compute, Period: cfg.Align.Period, Around: m.aroundCheck(s)}
	if c.Before.Run == s.Run.ID && c.Before.State == check.Done {
		b.Earlier = &c.Before
		for i := range s.Swaps {
			if w := &s.Swaps[i]; w.ValidFrom > int64(c.Before.Began) {
				b.Swapped = append(b.Swapped, w.Channel)
			}
		}
	}
	check.Judge(&c.Running, &m.prog.limits, &c.Request, &c.Gather, &b, t)
	m.tellCheck(s, t, &c.Running)
	if c.Running.Phase == check.Before {
		c.Before = c.Running
	} else {
		c.After = c.Running
	}
	c.Running, c.Request, c.Gather = check.Result{}, check.Request{}, check.Gather{}
}

// aroundCheck gives what the daemon knows of itself.
func (m *Machine) aroundCheck(s *State) check.Around {
	st := m.Status(s)
	a := check.Around{
		Deaf: st.Health.InputPathDeaf, Recording: st.Health.NotRecordingSince == 0, Free: s.Checks.Free,
		Hash: s.InForce.Hash, Version: m.prog.cfg.Rig.LimitsVersion, Approved: s.InForce.ApprovedBy, Refused: s.InForce.Refused.Why,
	}
	for _, src := range st.Sources {
		a.Sources = append(a.Sources, check.Source{Topic: src.Topic, Alive: src.Alive, Skew: src.Skew, Skewed: src.Skewed})
	}
	for _, se := range st.Sessions {
		a.Sessions = append(a.Sessions, check.Session(se))
	}
	return a
}

// checked tells at the start of a run which check before it counts for it, if one does.
func (m *Machine) checked(s *State, t int64) {
	b := &s.Checks.Before
	if b.State != check.Done || t-int64(b.Ended) > m.prog.limits.Valid {
		return
	}
	b.Run = s.Run.ID
	m.tellCheck(s, t, b)
}

// ChecksView is how the checks of a rig stand, as they are shown.
type ChecksView struct {
	Before  *check.Result `json:"before"`  // null when there was none
	After   *check.Result `json:"after"`   // null when there was none
	Running *check.Result `json:"running"` // null while none is under way
	Window  float64       `json:"window_s"`
	Ticks   []check.Tick  `json:"ticks"` // what is ticked by hand before a run
}

// Checks gives how the checks stand as of the last record.
func (m *Machine) Checks(s *State) ChecksView {
	v := ChecksView{Ticks: []check.Tick{}}
	if m.prog != nil {
		v.Window, v.Ticks = float64(m.prog.limits.Window)/1e9, m.prog.limits.AllTicks()
	}
	for _, p := range []struct {
		from *check.Result
		to   **check.Result
	}{{&s.Checks.Before, &v.Before}, {&s.Checks.After, &v.After}, {&s.Checks.Running, &v.Running}} {
		if p.from.State != "" {
			out := *p.from
			*p.to = &out
		}
	}
	return v
}
