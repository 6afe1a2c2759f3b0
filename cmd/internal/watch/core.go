// Package watch runs the record–step–commit loop: it numbers what comes in,
// steps it, shows the outcomes at once and stores the records, and only then
// lets the broker forget them.
//
//	inputs ─▶ Core.Take ─▶ outcomes shown
//	              │ batch
//	              ▼
//	          Store.Write ─▶ acknowledgements, recorded outcomes
//
// Core and Store know no goroutine and no clock, so that a rehearsal can be put
// into a run file without waiting and a test can crash between any two of their
// calls. Loop drives them live.
package watch

import (
	"encoding/json"
	"fmt"
	"math"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/check"
	"throatwatch/monitor/steady"
	"throatwatch/rules/pipeline"
)

const (
	// chunkFor is the host time that the rows of a chunk span at most, ns, unless
	// Core.ChunkFor says otherwise.
	chunkFor = int64(60e9)
	// fullEvery is the host time between full checkpoints of the idle file, ns: a
	// run begins with one, so this and preRoll bound what it copies.
	fullEvery = int64(300e9)
)

// Input is something that happened and becomes a record.
type Input struct {
	Kind    ingest.Kind
	Flags   ingest.Flags
	Topic   string
	Payload []byte
}

// Batch is what one commit stores.
type Batch struct {
	Records    []ingest.Record
	Events     []runfile.Event
	Columns    []*pipeline.Columns // to be encoded as chunks
	Checkpoint *runfile.Checkpoint
	Begin      *RunHeader // after this batch the records go to a run file
	End        *RunHeader // with this batch the run file ends, before another begins
	Alarms     int        // raised in the run that is on, for the header; 0 = none since the batch before
	First      int64      // host time of the first record
	Amend      []Amendment
}

// Amendment is an event that belongs to a run that has ended: it goes into the file of that
// as well.
type Amendment struct {
	Run   string
	Event runfile.Event
}

// Core numbers and steps records and gathers them into batches. It belongs to
// one goroutine.
type Core struct {
	Machine  *pipeline.Machine
	State    *pipeline.State
	Digest   *pipeline.Digest // of the run that is on
	ChunkFor int64            // host time that the rows of a chunk span at most, ns; NewCore sets a minute

	build, goarch string
	batch         *Batch
	columns       *pipeline.Columns
	opened        int64 // host time since when columns gather, 0 = none yet
	full          int64 // host time of the last full checkpoint
}

// NewCore gives a core that goes on where p is.
func NewCore(m *pipeline.Machine, p *pipeline.Replay, build, goarch string) *Core {
	return &Core{
		Machine: m, State: p.State, Digest: p.Digest, ChunkFor: chunkFor,
		build: build, goarch: goarch, batch: &Batch{},
	}
}

// Take numbers an input, steps it and adds the record to the batch. host is ns
// UTC and must not fall. What it gives is valid until the next call.
func (c *Core) Take(in Input, host int64) []pipeline.Outcome {
	r := ingest.Record{
		Seq: c.State.Seq + 1, Host: max(host, c.State.Host), Kind: in.Kind, Flags: in.Flags, Topic: in.Topic, Payload: in.Payload,
	}
	outs := c.Machine.Step(c.State, &r)
	for i := range outs {
		c.Digest.Add(&outs[i])
	}
	c.stepped(&r, outs)
	return outs
}

// stepped adds a record to the batch, with what came of it.
func (c *Core) stepped(r *ingest.Record, outs []pipeline.Outcome) {
	if c.opened == 0 {
		c.opened = r.Host
	}
	if len(c.batch.Records) == 0 {
		c.batch.First = r.Host
	}
	c.batch.Records = append(c.batch.Records, *r)
	c.keep(outs)
}

// again takes the outcomes of a record that is stored already, after a restart:
// its rows are in no chunk yet, its events are stored.
func (c *Core) again(r *ingest.Record, outs []pipeline.Outcome) {
	if c.opened == 0 || r.Kind == ingest.KindGap {
		c.columns, c.opened = nil, r.Host
	}
	c.keep(outs)
	c.batch = &Batch{}
}

// keep takes what is stored of the outcomes: rows, events, runs.
func (c *Core) keep(outs []pipeline.Outcome) {
	for i := range outs {
		o := &outs[i]
		switch o.Kind {
		case pipeline.OutcomePoint:
			if c.columns == nil {
				cfg, _ := c.Machine.Config()
				c.columns = pipeline.NewColumns(&cfg)
			}
			c.columns.Add(o)
		case pipeline.OutcomeAlarm:
			c.event(o, "alarm", o.Alarm)
			if o.Alarm.Raise && c.State.RunActive {
				c.batch.Alarms = c.State.Run.Alarms
			}
		case pipeline.OutcomeMark:
			c.event(o, "mark", o.Mark)
		case pipeline.OutcomeLog:
			c.event(o, "log", o.Entry)
		case pipeline.OutcomeCard:
			if o.Event != "" {
				c.event(o, "card", o.Card.Stored())
			}
		case pipeline.OutcomeCardPoint:
			c.event(o, "card_point", o.Taken)
		case pipeline.OutcomeRun:
			c.event(o, "run", struct {
				Event string `json:"event"`
				Run   any    `json:"run"`
			}{o.Event, o.Run})
			switch {
			case o.Event == "started":
				c.batch.Begin = c.Header()
			case c.batch.Begin != nil: // it began among records that were dropped: nothing of it is stored
				c.batch.Begin = nil
			default:
				h := c.Header()
				h.Ended, h.State, h.Alarms = o.Run.Ended, runfile.StateEnded, o.Run.Alarms
				h.Life, h.NozzleLife = c.lives(h)
				c.batch.End = h
			}
		case pipeline.OutcomeConfig:
			c.event(o, "config", struct {
				OK     bool              `json:"ok"`
				Text   string            `json:"text"`
				Config *pipeline.InForce `json:"config"`
			}{o.OK, o.Text, o.Config})
			if o.OK && c.columns != nil {
				c.seal() // other channels from here on
			}
		case pipeline.OutcomeQuarantine:
			c.event(o, "quarantine", o.Text)
		case pipeline.OutcomeReduction:
			c.event(o, "reduction", reduction(o.Area))
		case pipeline.OutcomeExceedance:
			c.event(o, "exceedance", o.Exceedance)
		case pipeline.OutcomeEngine:
			c.event(o, "engine", o.Engine)
		case pipeline.OutcomeLife:
			c.event(o, "life", o.Life)
		case pipeline.OutcomeChecks:
			c.event(o, "checks", o.Check)
			if o.Check.Phase == check.After && o.Check.State == check.Done && !c.State.RunActive {
				c.batch.Amend = append(c.batch.Amend, Amendment{o.Check.Run, c.batch.Events[len(c.batch.Events)-1]})
			}
		case pipeline.OutcomeChannels, pipeline.OutcomeLedger, pipeline.OutcomeStatus, pipeline.OutcomeAction:
		}
	}
}

// Reduction is what a run leaves behind of the effective throat area: mean over
// its steady choked scans, and relative standard uncertainties of what differs from run
// to run and of what all runs with these instruments share; null if not known.
type Reduction struct {
	Run        string   `json:"run"`
	Area       float64  `json:"effective_area_m2"`
	Random     *float64 `json:"random"`
	Systematic *float64 `json:"systematic"`
	Steady     float64  `json:"steady_s"`
}

// RunArea gives the area back; NaN for what is not known.
func (r *Reduction) RunArea() *steady.RunArea {
	of := func(v *float64) float64 {
		if v == nil {
			return math.NaN()
		}
		return *v
	}
	return &steady.RunArea{
		Run: r.Run, Area: r.Area, Random: of(r.Random), Systematic: of(r.Systematic), Steady: int64(r.Steady * 1e9),
	}
}

func reduction(a *steady.RunArea) Reduction {
	known := func(v float64) *float64 {
		if math.IsNaN(v) {
			return nil
		}
		return &v
	}
	return Reduction{a.Run, a.Area, known(a.Random), known(a.Systematic), float64(a.Steady) / 1e9}
}

func (c *Core) event(o *pipeline.Outcome, kind string, v any) {
	text, err := json.Marshal(v)
	if err != nil {
		panic(fmt.Sprintf("watch: %s outcome does not encode: %v", kind, err))
	}
	c.batch.Events = append(c.batch.Events, runfile.Event{Epoch: o.Epoch, N: o.N, T: o.T, Kind: kind, JSON: text})
}

// RunHeader is what a run file's header says of its run.
type RunHeader = runfile.Header

// Header gives the header of the run that is on.
func (c *Core) Header() *RunHeader {
	cfg, _ := c.Machine.Config()
	run := &c.State.Run
	return &RunHeader{
		ID: run.ID, Number: run.Number, Rig: run.Rig, Engine: cfg.Rig.EngineModel, EngineSerial: cfg.Rig.EngineSerial, Title: cfg.Rig.Title,
		Operator: run.By, Build: c.build, GOARCH: c.goarch, ConfigHash: cfg.Hash, TimeZone: cfg.Rig.TimeZone, Started: run.Started,
		State: runfile.StateRunning, Alarms: run.Alarms,
		Identity: runfile.Identity{
			Designation: run.Designation, Series: run.Series, InSeries: run.InSeries, Test: run.Test, Purpose: run.Purpose,
			EngineBuild: run.EngineBuild, NozzleSerial: run.NozzleSerial, NozzleMeasured: cfg.Rig.NozzleMeasured, FuelBatch: run.FuelBatch, Aborted: run.Aborted,
		},
	}
}

// lives gives what the engine and the nozzle of a run have been through so far.
func (c *Core) lives(h *RunHeader) (engine, nozzle json.RawMessage) {
	text := func(v any) json.RawMessage {
		b, err := json.Marshal(v)
		if err != nil {
			panic(fmt.Sprintf("watch: a life does not encode: %v", err))
		}
		return b
	}
	if l, ok := c.State.Life(h.EngineSerial); ok {
		engine = text(l)
	}
	if l, ok := c.State.NozzleLife(h.NozzleSerial); ok {
		nozzle = text(l)
	}
	return engine, nozzle
}

// Cut gives the batch gathered so far, or nil when there is none, and begins a
// new one. A batch that begins or ends a run must be cut before the next record:
// Due says so. A chunk is closed when it is ChunkFor old, and with it goes a
// checkpoint: so also when a configuration has closed one, as after each boot.
// What a restart steps again stays short, however often there is one.
func (c *Core) Cut() (*Batch, error) {
	b := c.batch
	if len(b.Records) == 0 {
		return nil, nil //nolint:nilnil // nothing to store is no error
	}
	now := c.State.Host
	if now-c.opened >= c.ChunkFor || b.End != nil || len(b.Columns) > 0 {
		full := b.End != nil || !c.State.RunActive && now-c.full >= fullEvery
		if err := c.checkpoint(full); err != nil {
			return nil, err
		}
	}
	if b.End != nil { // after a gap it is the digest of what is stored behind it
		b.End.Digest = c.Digest.String()
	}
	c.batch = &Batch{}
	return b, nil
}

// Due tells that the batch must be cut before the next record.
func (c *Core) Due() bool { return c.batch.Begin != nil || c.batch.End != nil }

// Drop forgets the batch: its records were stepped and will not be stored. That a
// run began or ended is kept, for the batch behind the gap.
func (c *Core) Drop() int {
	n := len(c.batch.Records)
	c.batch = &Batch{Begin: c.batch.Begin, End: c.batch.End}
	c.columns, c.opened = nil, 0
	return n
}

// Gap begins anew after records that were not stored: a gap record with a full
// checkpoint, and a digest of its own from here on.
func (c *Core) Gap(missing uint64, host int64) ([]pipeline.Outcome, error) {
	text, err := json.Marshal(struct {
		Missing uint64 `json:"missing"`
	}{missing})
	if err != nil {
		return nil, fmt.Errorf("watch: gap: %w", err)
	}
	c.columns, c.opened = nil, 0
	outs := c.Take(Input{Kind: ingest.KindGap, Payload: text}, host)
	c.Digest.Reset()
	return outs, c.checkpoint(true)
}

// checkpoint closes the chunk and puts the state into the batch.
func (c *Core) checkpoint(full bool) error {
	c.seal()
	state, err := c.State.Encode(full)
	if err != nil {
		return fmt.Errorf("watch: checkpoint at record %d: %w", c.State.Seq, err)
	}
	digest, err := c.Digest.MarshalBinary()
	if err != nil {
		return fmt.Errorf("watch: checkpoint at record %d: %w", c.State.Seq, err)
	}
	c.batch.Checkpoint = &runfile.Checkpoint{Seq: c.State.Seq, Host: c.State.Host, State: state, Digest: digest, Full: full}
	if full {
		c.full = c.State.Host
	}
	return nil
}

// seal moves the rows gathered so far into the batch.
func (c *Core) seal() {
	if c.columns != nil && c.columns.Rows() > 0 {
		c.batch.Columns = append(c.batch.Columns, c.columns)
	}
	c.columns, c.opened = nil, c.State.Host
}
