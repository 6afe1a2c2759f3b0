// Package pipeline steps records through alignment, computation and rules: one
// function of state, record and configuration, run live before a record is
// stored and again over stored records, with the same outcomes bit for bit.
package pipeline

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"reflect"
	"slices"
	"strconv"
	"strings"
	"time"

	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/monitor/align"
	"throatwatch/monitor/check"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
	"throatwatch/rules/card"
)

const (
	second = int64(time.Second)
	// past is how far behind host time a transition is listed as past.
	past = 5 * second
	// hostJudge is the period in which rules on the daemon itself are judged.
	hostJudge = 100 * int64(time.Millisecond)
	// silent is the host time after which a source counts as lost.
	silent = 2 * second
	// phaseHeld is how long the last known phase goes on suppressing rules: when a
	// publisher is switched off, speed goes stale a little before other channels,
	// which must not raise what was suppressed.
	phaseHeld = 2 * second
	// abandoned is the event time without a known phase after which a run ends:
	// the data system was switched off.
	abandoned = 600 * second
	// forgotten is the host time after which a silent source is no longer listed.
	forgotten = 3600 * second
	// scansKept is how many scan buffers are kept from step to step: a backlog that
	// closes thousands in one step must not hold their memory for ever.
	scansKept = 64
)

// Boot is the payload of a boot record.
type Boot struct {
	Epoch  uint64 `json:"epoch"`
	Build  string `json:"build"`
	GOARCH string `json:"goarch"`

	Imported bool `json:"imported,omitempty"` // the records are made of a recording of another data system
	Past     Past `json:"past,omitzero"`
}

// HealthChange is the payload of a health record.
type HealthChange struct {
	Part   string  `json:"part"` // one of the Part constants
	OK     bool    `json:"ok"`
	Why    string  `json:"why"`
	Behind float64 `json:"behind,omitempty"` // as in Part
}

// The parts of the daemon that a health record is about.
const (
	PartRecording = "recording"
	PartInputPath = "input_path"
	PartWebhook   = "webhook"
	PartDatabase  = "database"
	PartDisk      = "disk" // fails when it will soon be full
)

// ClockStep is the payload of a clock record.
type ClockStep struct {
	By int64 `json:"by_ns"`
}

// Action is the payload of an action record: what an operator did.
type Action struct {
	Do       string  `json:"do"` // one of the Do constants
	Alarm    string  `json:"alarm,omitempty"`
	Revision uint64  `json:"revision,omitempty"`
	Reason   string  `json:"reason,omitempty"`
	Text     string  `json:"text,omitempty"`
	Seconds  float64 `json:"seconds,omitempty"`
	Channel  string  `json:"channel,omitempty"`
	Serial   string  `json:"serial,omitempty"` // of a new sensor
	// Of a new sensor: keys calibration, uncertainty and sensor, as in a rig file; "" = as before.
	Calibration string `json:"calibration,omitempty"`

	ValidFrom rules.Time    `json:"valid_from,omitzero"`
	Name      string        `json:"name,omitempty"` // of an entry
	Value     rules.Reading `json:"value,omitzero"`
	Unit      string        `json:"unit,omitempty"`
	By        string        `json:"by"`
	Role      string        `json:"role"`
	RequestID string        `json:"request_id"`

	ApprovedBy string `json:"approved_by,omitempty"` // of a configuration

	Check    CheckRequest `json:"check,omitzero"`
	Card     *card.Card   `json:"card,omitempty"` // a test card, as its text was read
	CardText string       `json:"card_text,omitempty"`
	CardHash string       `json:"card_hash,omitempty"` // hex SHA-256 of CardText
	Point    int          `json:"point,omitempty"`     // of the card, counted from 1
	Number   uint64       `json:"number,omitempty"`    // of a point that was taken
}

// What an operator can do. The alarm actions are those of package rules.
const (
	DoMark     = "mark"
	DoRunStart = "run_start"
	DoRunEnd   = "run_end"
	DoEntry    = "entry"   // a reading or a remark, by hand
	DoSwap     = "swap"    // another sensor is on a channel
	DoReadmit  = "readmit" // takes an excluded probe back
	DoCheck    = "check"   // of the data system, before or after a run
	// DoConfig tells who brings the configuration of the next record; DoConfigRefused
	// that one was refused before it came to that, and by Text why.
	DoConfig        = "config"
	DoConfigRefused = "config_refused"
	// On the test card.
	DoCardLoad  = "card_load"
	DoTake      = "take" // the current point
	DoAccept    = "accept"
	DoReject    = "reject"
	DoSkip      = "skip" // the current point
	DoGoToPoint = "go_to_point"
)

// Reply says what became of an action.
type Reply struct {
	Epoch, N uint64 // the outcome that it brought about
	Err      error
}

// Errors of actions.
var (
	ErrNoRun     = errors.New("no run is on")
	ErrRunActive = errors.New("a run is on already")
	ErrUnknown   = errors.New("no such action")
	ErrNoData    = errors.New("no scan yet: there is no event time to put it at")
	ErrNoConfig  = errors.New("no configuration is in force yet")
)

// Machine steps records. It belongs to one goroutine.
type Machine struct {
	parse  func(bundle []byte) (Config, error)
	prog   *program
	bundle []byte // that prog was made of
	outs   []Outcome
	alarm  []rules.Alarm
	card   cardPlan
}

// program is a compiled configuration with its buffers.
type program struct {
	cfg     Config
	align   *align.Aligner
	compute *compute.Computer
	rules   *rules.Set
	frame   frame
	scans   []*computed   // buffers: a step may close several scans
	used    int           // of scans, by this step
	ledgers [][]Allowance // buffers
	listed  int           // of ledgers, by this step
	status  Status
	limits  check.Limits // of checks
}

// computed holds a scan with its operating point.
type computed struct {
	scan  *monitor.Scan
	point monitor.OperatingPoint
}

// NewMachine gives a machine that understands configurations by parse, which
// must be a function of the bundle alone.
func NewMachine(parse func(bundle []byte) (Config, error)) *Machine {
	return &Machine{parse: parse}
}

// Restore prepares the machine for a state that was decoded.
func (m *Machine) Restore(s *State) error {
	m.card = cardPlan{}
	if len(s.Bundle) == 0 {
		m.prog = nil
		return nil
	}
	return m.load(s.Bundle)
}

// Config gives the configuration in force; ok is false before the first.
func (m *Machine) Config() (cfg Config, ok bool) {
	if m.prog == nil {
		return Config{}, false
	}
	return m.prog.cfg, true
}

// load makes the program of a bundle, unless it is loaded already: a program has
// no memory, so one serves every state.
func (m *Machine) load(bundle []byte) error {
	if m.prog != nil && bytes.Equal(bundle, m.bundle) {
		return nil
	}
	cfg, err := m.parse(bundle)
	if err != nil {
		return err
	}
	for i := range cfg.Align.Channels {
		cfg.Align.Channels[i].Raw = cfg.Compute.Channels[i].Raw
	}
	cfg.Compute.EGT.Serial, cfg.Compute.EGT.Nozzle = cfg.Rig.EngineSerial, cfg.Rig.NozzleSerial
	comp, err := compute.New(cfg.Compute)
	if err != nil {
		return fmt.Errorf("pipeline: %w", err)
	}
	names := Names(&cfg)
	set, faults := rules.Compile(cfg.Rules, names, cfg.Derived...)
	if len(faults) > 0 {
		name := ""
		if f := faults[0]; f.Derived {
			name = cfg.Derived[f.Rule].Name
		} else {
			name = cfg.Rules[f.Rule].Name
		}
		return fmt.Errorf("pipeline: rule %q: %s", name, faults[0].Message)
	}
	m.bundle = bytes.Clone(bundle)
	m.prog = &program{
		cfg: cfg, align: align.New(cfg.Align), compute: comp, rules: set, frame: newFrame(&cfg, names, set.Names()),
		limits: cfg.Checks.WithDefaults(),
	}
	return nil
}

// Step steps one record: record numbers must follow each other without a hole,
// except over a gap record. What it gives is valid until the next step.
func (m *Machine) Step(s *State, r *ingest.Record) []Outcome {
	clear(m.outs)
	m.outs, m.alarm = m.outs[:0], m.alarm[:0]
	if r.Seq != s.Seq+1 && s.Seq != 0 && r.Kind != ingest.KindGap {
		panic(fmt.Sprintf("pipeline: record %d follows record %d", r.Seq, s.Seq))
	}
	before := s.Host
	s.Seq, s.Host = r.Seq, r.Host
	switch r.Kind {
	case ingest.KindBoot:
		m.boot(s, r, before)
	case ingest.KindConfig:
		m.config(s, r)
	case ingest.KindMessage:
		m.message(s, r)
	case ingest.KindAction:
		m.act(s, r)
	case ingest.KindConnect, ingest.KindDisconnect:
		if m.prog != nil {
			m.prog.align.Connect(&s.Align, r.Topic, r.Kind == ingest.KindConnect, r.Host)
		}
	case ingest.KindHealth:
		m.health(s, r)
	case ingest.KindClock:
		var c ClockStep
		if json.Unmarshal(r.Payload, &c) == nil {
			s.Health.ClockStepped += c.By
		}
	case ingest.KindTick, ingest.KindGap, ingest.KindInvalid:
	}
	if m.prog == nil {
		return m.outs
	}
	p := m.prog
	if len(p.scans) > scansKept {
		clear(p.scans[scansKept:])
		p.scans = p.scans[:scansKept]
	}
	for p.used, p.listed = 0, 0; ; p.used++ {
		if p.used == len(p.scans) {
			p.scans = append(p.scans, &computed{scan: monitor.NewScan(len(p.cfg.Align.Channels))})
		}
		c := p.scans[p.used]
		if !p.align.Scan(&s.Align, r.Host, c.scan) {
			break
		}
		m.scan(s, c.scan, &c.point)
	}
	m.overdue(s)
	if r.Host-s.HostJudge >= hostJudge {
		s.HostJudge = r.Host
		m.judgeSelf(s)
	}
	if now := r.Host / second; now > s.Second {
		s.Second = now
		m.status(s)
	}
	return m.outs
}

// emit numbers an outcome and appends it.
func (m *Machine) emit(s *State, o Outcome) {
	s.N++
	o.N, o.Epoch = s.N, s.Epoch
	o.Past = s.Host-o.T > past
	m.outs = append(m.outs, o)
}

// boot begins a life of the process; before is the host time of the last record of the
// life before.
func (m *Machine) boot(s *State, r *ingest.Record, before int64) {
	var b Boot
	ok := json.Unmarshal(r.Payload, &b) == nil
	if ok && b.Epoch > s.Epoch {
		s.Epoch = b.Epoch
	} else {
		s.Epoch++
	}
	if ok {
		s.Imported = b.Imported
		s.remember(b.Past)
	}
	s.Health, s.Left, s.Booted = Health{}, before, r.Host
	s.Proposed = Action{}
	if m.prog != nil {
		m.prog.align.Boot(&s.Align, r.Host)
	}
}

// config takes the configuration of a record into force, unless it is faulty or the
// engine is not known to be off: the old one stays then.
func (m *Machine) config(s *State, r *ingest.Record) {
	by := s.Proposed
	s.Proposed = Action{}
	old, bundle := m.prog, m.bundle
	err := m.load(r.Payload)
	if err == nil && old != nil && old.cfg.Hash != m.prog.cfg.Hash {
		if err = s.MayChange(r.Host); err != nil {
			m.prog, m.bundle = old, bundle
		}
	}
	if err != nil {
		m.refuse(s, by.By, err)
		return
	}
	p := m.prog
	if old == nil || old.cfg.Hash != p.cfg.Hash {
		m.breakOff(s, r.Host, "limits and rules were changed")
		m.fit(s, old)
	}
	if old == nil {
		p.align.Boot(&s.Align, r.Host)
		s.Armed = true
	}
	s.Bundle = append(s.Bundle[:0], r.Payload...)
	m.enforce(s, &by)
	if by.Do == DoConfig {
		m.log(s, &by, Entry{T: rules.Time(r.Host), Text: "files " + p.cfg.Hash + approval(s.InForce.ApprovedBy)})
	}
}

// fit makes the state one of the program in force, which takes the place of old.
func (m *Machine) fit(s *State, old *program) {
	var from []align.Channel
	var fromComp []compute.Channel
	if old != nil {
		from, fromComp = old.cfg.Align.Channels, old.cfg.Compute.Channels
	}
	m.prog.align.Reset(&s.Align, from)
	m.prog.compute.Reset(&s.Compute, fromComp)
	m.prog.rules.Fit(&s.Rules)
	s.Checks.Gather = check.Gather{} // of the old channels
	s.Card.Break()                   // what was averaged is not that of these channels
	s.Gathering = gathering{}
}

// replace puts a configuration in the place of the one in force as if it had been there,
// with no outcome of it.
func (m *Machine) replace(s *State, bundle []byte) error {
	old := m.prog
	if err := m.load(bundle); err != nil {
		return err
	}
	if old == nil || old.cfg.Hash != m.prog.cfg.Hash && !sameButSwaps(&old.cfg, &m.prog.cfg) {
		m.fit(s, old)
	}
	s.Bundle = append(s.Bundle[:0], bundle...)
	return nil
}

// sameButSwaps tells whether two configurations differ in swaps of sensors at most: what was
// learned by one holds for the other.
func sameButSwaps(a, b *Config) bool {
	without := func(c *Config) Config {
		out := *c
		out.Hash = ""
		out.Compute.Channels = slices.Clone(c.Compute.Channels)
		for i := range out.Compute.Channels {
			out.Compute.Channels[i].Swaps = nil
		}
		return out
	}
	return reflect.DeepEqual(without(a), without(b))
}

func (m *Machine) message(s *State, r *ingest.Record) {
	seen := s.window.Push(r)
	if m.prog == nil {
		return
	}
	res := m.prog.align.Message(&s.Align, r, seen)
	if res != nil && res.Refused && res.Fault != nil {
		m.emit(s, Outcome{Kind: OutcomeQuarantine, T: r.Host, Text: r.Topic + ": " + res.Fault.Error()})
	}
}

func (m *Machine) health(s *State, r *ingest.Record) {
	var h HealthChange
	if json.Unmarshal(r.Payload, &h) != nil {
		return
	}
	switch {
	case h.Part == PartInputPath:
		s.Health.InputPathDeaf = !h.OK
	case h.Part == PartRecording && h.OK:
		s.Health.NotRecordingSince = 0
	case h.Part == PartRecording && s.Health.NotRecordingSince == 0:
		s.Health.NotRecordingSince = r.Host
	case h.Part == PartWebhook:
		s.Health.Webhook.change(&h, r.Host)
	case h.Part == PartDatabase:
		s.Health.Database.change(&h, r.Host)
	case h.Part == PartDisk:
		s.Health.Disk.change(&h, r.Host)
	}
}

// scan computes and judges one scan.
func (m *Machine) scan(s *State, scan *monitor.Scan, point *monitor.OperatingPoint) {
	p := m.prog
	changes := p.compute.Step(&s.Compute, scan, point)
	taking := m.followCard(s, scan, point)
	m.emit(s, Outcome{Kind: OutcomePoint, T: scan.T, Point: point, Scan: scan})
	m.emit(s, Outcome{Kind: OutcomeChannels, T: scan.T, Point: point, Scan: scan})
	m.runs(s, point)
	m.gather(s, scan)
	m.account(s, &changes, point)
	m.tellCard(s, scan, point, taking)
	if changes.Moved || scan.N%uint64(max(1, second/p.cfg.Align.Period)) == 0 {
		m.ledger(s, scan.T)
	}
	p.frame.fill(s, scan, point)
	phase := point.Phase
	if phase == monitor.PhaseUnknown && scan.T-s.KnownAt <= phaseHeld {
		phase = s.Compute.Phase.Known
	}
	m.judge(s, scan.T, phase, rules.OfData)
}

// judgeSelf judges the rules on the daemon itself, by host time: they must speak
// when no scan comes.
func (m *Machine) judgeSelf(s *State) {
	m.prog.frame.fillHealth(s)
	m.judge(s, s.Host, monitor.PhaseUnknown, rules.OfDaemon)
}

func (m *Machine) judge(s *State, t int64, phase monitor.Phase, d rules.Domain) {
	run := "-"
	if s.RunActive {
		run = s.Run.ID
	}
	first := len(m.alarm)
	m.alarm = m.prog.rules.Step(&s.Rules, t, run, phase, d, &m.prog.frame.Frame, m.alarm)
	m.alarms(s, t, first)
}

// alarms emits the alarms from index first on.
func (m *Machine) alarms(s *State, t int64, first int) {
	for i := first; i < len(m.alarm); i++ {
		m.alarm[i].Past = s.Host-t > past
		if m.alarm[i].Raise && s.RunActive {
			s.Run.Alarms++
		}
		alarm := m.alarm[i]
		m.emit(s, Outcome{Kind: OutcomeAlarm, T: t, Alarm: &alarm})
	}
}

// runs begins and ends runs by what the engine does.
func (m *Machine) runs(s *State, p *monitor.OperatingPoint) {
	switch p.Phase {
	case monitor.Cranking, monitor.Lighting, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		s.OffSince = 0
		if !s.RunActive && s.Armed {
			m.startRun(s, p.T, "engine")
		}
	case monitor.Off:
		if s.OffSince == 0 {
			s.OffSince = p.T
		}
		s.Armed = true
		if s.RunActive && s.Run.By == "engine" && p.T-s.OffSince >= m.prog.cfg.Run.EndAfter {
			m.endRun(s, p.T)
		}
	case monitor.PhaseUnknown:
		if s.RunActive && s.Run.By == "engine" && p.T-s.KnownAt >= abandoned {
			m.endRun(s, p.T)
		}
		return
	case monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		s.OffSince = 0
	}
	s.KnownAt = p.T
}

func (m *Machine) startRun(s *State, t int64, by string) {
	rig := &m.prog.cfg.Rig
	id := rig.ID + "-" + time.Unix(0, t).UTC().Format("20060102T150405Z")
	s.Runs++
	if s.Run.Started/second == t/second { // another in the same second
		id += "-" + strconv.FormatUint(s.Runs, 10)
	}
	s.RunActive = true
	s.Run = monitor.Run{
		ID:     id,
		Number: s.Runs, Rig: rig.ID, Engine: rig.EngineModel + " " + rig.EngineSerial, Started: t, By: by,
	}
	s.identify(&m.prog.cfg, &s.Run)
	s.Trial = Trial{}
	s.Compute.EGT.Reset()
	s.Compute.Area = compute.Area{}
	run := s.Run
	m.emit(s, Outcome{Kind: OutcomeRun, T: t, Run: &run, Event: "started"})
	m.checked(s, t)
	if s.Card.On() {
		m.emitCard(s, t, CardStands)
	}
}

func (m *Machine) endRun(s *State, t int64) {
	if area, ok := s.Compute.Area.Of(s.Run.ID); ok {
		m.emit(s, Outcome{Kind: OutcomeReduction, T: t, Area: &area})
	}
	m.settle(s, t)
	m.breakCard(s, t)
	s.RunActive = false
	s.Run.Ended, s.Run.Aborted = t, s.Trial.aborted()
	run := s.Run
	m.emit(s, Outcome{Kind: OutcomeRun, T: t, Run: &run, Event: "ended"})
}

func (m *Machine) ledger(s *State, t int64) {
	p := m.prog
	if p.listed == len(p.ledgers) {
		p.ledgers = append(p.ledgers, make([]Allowance, len(p.cfg.Compute.EGT.Bands)))
	}
	ledger := p.ledgers[p.listed]
	p.listed++
	for i := range ledger {
		ledger[i] = Allowance{Band: p.cfg.Compute.EGT.Bands[i], BandState: s.Compute.EGT.Bands[i]}
	}
	m.emit(s, Outcome{Kind: OutcomeLedger, T: t, Ledger: ledger})
}

func (m *Machine) status(s *State) {
	m.fillStatus(s, &m.prog.status)
	m.emit(s, Outcome{Kind: OutcomeStatus, T: s.Host, Status: &m.prog.status})
}

// act does what an operator asked for, once per request.
func (m *Machine) act(s *State, r *ingest.Record) {
	var a Action
	err := json.Unmarshal(r.Payload, &a)
	res := &ActionResult{RequestID: a.RequestID}
	switch {
	case err != nil:
		res.Err = fmt.Errorf("action: %w", err)
	case m.prog == nil:
		res.Err = fmt.Errorf("%s: %w", a.Do, ErrNoConfig)
	case a.RequestID == "" || !slices.Contains(s.Done, a.RequestID):
		res.Err = m.do(s, &a)
		if res.Err == nil && a.RequestID != "" {
			if len(s.Done) == requestsKept {
				s.Done = slices.Delete(s.Done, 0, 1)
			}
			s.Done = append(s.Done, a.RequestID)
		}
	}
	m.emit(s, Outcome{Kind: OutcomeAction, T: r.Host, Action: res})
}

func (m *Machine) do(s *State, a *Action) error {
	t := s.Align.Next - m.prog.cfg.Align.Period
	if s.Align.Next == 0 {
		t = s.Host
	}
	if err := a.checkTexts(); err != nil {
		return fmt.Errorf("%s: %w", a.Do, err)
	}
	if isCardAction(a.Do) {
		if err := m.cardAction(s, t, a); err != nil {
			return fmt.Errorf("%s: %w", strings.ReplaceAll(a.Do, "_", " "), err)
		}
		return nil
	}
	switch a.Do {
	case DoConfig:
		return s.propose(a)
	case DoConfigRefused:
		m.refuse(s, a.By, errors.New(a.Text))
	case DoMark:
		m.emit(s, Outcome{Kind: OutcomeMark, T: t, Mark: &monitor.Mark{T: t, Text: a.Text, By: a.By}})
		m.log(s, a, Entry{Text: a.Text})
	case DoEntry:
		if err := m.enter(s, a); err != nil {
			return fmt.Errorf("entry %q: %w", a.Name, err)
		}
	case DoSwap:
		if err := m.swap(s, t, a); err != nil {
			return fmt.Errorf("sensor swap: %w", err)
		}
	case DoRunStart:
		if s.RunActive {
			return fmt.Errorf("start a run: %w: %s", ErrRunActive, s.Run.ID)
		}
		if s.Align.Next == 0 {
			return fmt.Errorf("start a run: %w", ErrNoData)
		}
		m.startRun(s, t, a.By)
	case DoRunEnd:
		if !s.RunActive {
			return fmt.Errorf("end the run: %w", ErrNoRun)
		}
		s.Armed = false
		m.endRun(s, t)
	case DoCheck:
		if err := m.check(s, t, a); err != nil {
			return fmt.Errorf("check: %w", err)
		}
	case DoReadmit:
		if err := m.readmit(s, a); err != nil {
			return fmt.Errorf("take %s back: %w", a.Channel, err)
		}
	default:
		alarm, err := m.prog.rules.Act(&s.Rules, t, rules.Action{
			Do: a.Do, Alarm: a.Alarm, Revision: a.Revision, Reason: a.Reason, By: a.By, Role: a.Role,
			For: int64(a.Seconds * 1e9), Phase: s.Compute.Phase.Phase, Host: s.Host,
		})
		if err != nil {
			return fmt.Errorf("%s %s: %w", a.Do, a.Alarm, err)
		}
		first := len(m.alarm)
		m.alarm = append(m.alarm, alarm)
		m.alarms(s, int64(alarm.Changed), first)
		text := alarm.Title
		if alarm.Until != 0 {
			text += ", for " + time.Duration(alarm.Until-alarm.Changed).String()
		}
		m.log(s, a, Entry{Alarm: alarm.ID, Rule: alarm.Rule, Text: text})
	}
	return nil
}

// Status gives the state of the data path as of the last record.
func (m *Machine) Status(s *State) Status {
	var st Status
	if m.prog != nil {
		m.fillStatus(s, &st)
	}
	return st
}

// Alarms gives every alarm that is not normal, by rule.
func (m *Machine) Alarms(s *State) []rules.Alarm {
	if m.prog == nil {
		return nil
	}
	return m.prog.rules.Standing(&s.Rules, nil)
}

// Ledger gives the EGT ledger as of the last record.
func (m *Machine) Ledger(s *State) []Allowance {
	if m.prog == nil {
		return nil
	}
	out := make([]Allowance, 0, len(s.Compute.EGT.Bands))
	for i, b := range s.Compute.EGT.Bands {
		out = append(out, Allowance{Band: m.prog.cfg.Compute.EGT.Bands[i], BandState: b})
	}
	return out
}

// Budget gives the uncertainty budget of the last scan; ok is false if that has none.
func (m *Machine) Budget() (b compute.Budget, ok bool) {
	if m.prog == nil {
		return b, false
	}
	return m.prog.compute.Budget()
}

func (m *Machine) fillStatus(s *State, st *Status) {
	a := &s.Align
	*st = Status{
		Host: s.Host, DataAge: -1, CatchingUp: a.CatchingUp(s.Host), Health: s.Health,
		Sources: st.Sources[:0], Sessions: st.Sessions[:0],
		Messages: a.Messages, Samples: a.Samples, Scans: a.N, Skipped: a.Skipped, Counters: a.Counters,
		RunActive: s.RunActive, Unknown: m.prog.rules.Unknown(&s.Rules),
	}
	if a.MaxEvent != 0 {
		st.DataAge = max(s.Host-a.MaxEvent, 0)
	}
	for i := range a.Sources {
		src := &a.Sources[i]
		if s.Host-src.Host > forgotten {
			continue
		}
		ss := SourceStatus{
			Topic: src.Topic, Age: s.Host - src.Host, Messages: src.Messages, Skew: src.Skew,
			Skewed: src.Skewed, Alive: s.silence(src) <= silent,
		}
		if src.Skewed {
			st.Skew = ss.Skew
		}
		if !ss.Alive {
			st.Lost++
		}
		st.Sources = append(st.Sources, ss)
	}
	for _, se := range a.Sessions {
		st.Sessions = append(st.Sessions, SessionStatus(se))
	}
}
