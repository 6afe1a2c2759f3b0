package pipeline

import (
	"crypto/sha256"
	"encoding"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"hash"
	"math"

	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/monitor/check"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/steady"
	"throatwatch/rules"
	"throatwatch/rules/card"
)

// OutcomeKind tells what an outcome is.
type OutcomeKind uint8

// The kinds of outcome.
const (
	OutcomePoint      OutcomeKind = iota + 1 // Point: an operating point
	OutcomeChannels                          // Scan: the channels it was computed from
	OutcomeAlarm                             // Alarm: an alarm changed
	OutcomeLedger                            // Ledger: an allowance moved
	OutcomeStatus                            // Status: each second of host time
	OutcomeMark                              // Mark
	OutcomeRun                               // Run, Event: a run started or ended
	OutcomeConfig                            // Event, Config, Text: a configuration came into force, or why it did not
	OutcomeQuarantine                        // Text: why a message was not used
	OutcomeAction                            // Action: what became of an operator's action
	OutcomeReduction                         // Area: what a run that ends says of the engine
	OutcomeExceedance                        // Exceedance: an excursion above an EGT band
	OutcomeEngine                            // Engine: a start, a shutdown or what went wrong with one
	OutcomeLife                              // Life: of the engine, when a run ends
	OutcomeLog                               // Entry: of the operator log
	OutcomeChecks                            // Check: one of the data system began or ended, or counts for the run that starts
	OutcomeCard                              // Card, Event: the test card and how the engine stands to it
	OutcomeCardPoint                         // Taken: a point of a test card was taken, accepted or rejected
)

// Outcome is one result of a step. What it points to belongs to the machine and
// is valid until the next step.
type Outcome struct {
	Kind   OutcomeKind
	N      uint64 // counts outcomes, over restarts too
	Epoch  uint64
	T      int64 // event time, ns UTC; host time where there is no other
	Past   bool  // more than 5 s behind host time when it came about
	Point  *monitor.OperatingPoint
	Scan   *monitor.Scan
	Alarm  *rules.Alarm
	Ledger []Allowance
	Status *Status
	Mark   *monitor.Mark
	Run    *monitor.Run
	Event  string // of a run: "started" or "ended"; of a configuration: one of the Config constants
	Text   string
	OK     bool // of a configuration: it is in force
	Config *InForce
	Err    error // why a configuration was refused
	Action *ActionResult
	Area   *steady.RunArea

	Exceedance *Exceedance
	Engine     *EngineEvent
	Life       *Life
	Entry      *Entry
	Check      *check.Result
	Card       *card.State
	Taken      *card.Taken
}

// Allowance is a line of the EGT ledger: a band and how much of it is used up.
type Allowance struct {
	egt.Band
	egt.BandState
}

// ActionResult says what became of an operator's action.
type ActionResult struct {
	RequestID string
	Err       error // nil when done; else rules.ErrNotFound, rules.ErrMovedOn or a refusal
}

// Health tells which parts of the daemon work. A part is believed to work until
// a health record says otherwise.
type Health struct {
	NotRecordingSince int64 // host time, 0 = recording
	InputPathDeaf     bool
	ClockStepped      int64 // sum of wall-clock steps since boot, ns
	Webhook           Part
	Database          Part
	Disk              Part
}

// Part tells how a part stands that takes what is recorded, for others or for good.
type Part struct {
	Since  int64   // host time since when it does not work, ns UTC; 0 = it works
	Why    string  // it does not
	Behind float64 // of a webhook: transitions that wait; of a database: s; of a disk: free GB (10⁹ bytes); 0 = not known
}

func (p *Part) change(h *HealthChange, host int64) {
	if h.OK {
		*p = Part{}
		return
	}
	if p.Since == 0 {
		p.Since = host
	}
	p.Why, p.Behind = h.Why, h.Behind
}

// behind gives what a rule reads: 0 while the part works, NaN where it is not known.
func (p *Part) behind() float64 {
	if p.Since != 0 && p.Behind == 0 {
		return math.NaN()
	}
	return p.Behind
}

// Status is the state of the data path, each second of host time.
type Status struct {
	Host       int64
	DataAge    int64 // host − newest believed event time, ns; -1 without data
	CatchingUp bool
	Health     Health
	Sources    []SourceStatus
	Sessions   []SessionStatus
	Messages   uint64
	Samples    uint64
	Scans      uint64
	Skipped    uint64
	Counters   [ingest.NumReasons]uint64
	RunActive  bool
	Unknown    int // rules that are unknown now
	Lost       int // sources that fell silent
	Skew       int64
}

// SourceStatus is a source as the status shows it.
type SourceStatus struct {
	Topic    string
	Age      int64 // ns of host time since its newest message
	Messages uint64
	Skew     int64
	Alive    bool
	Skewed   bool
}

// SessionStatus is a broker session as the status shows it.
type SessionStatus struct {
	Filter    string
	Connected bool
}

// Digest is the SHA-256 over the operating points, alarm transitions and points of
// test cards of a run, from the outcome that starts it to the one that ends it. It covers every
// bit of them, so two runs of the computation with equal digests computed the
// same.
type Digest struct {
	h      hash.Hash
	buf    []byte
	n      uint64 // outcomes covered
	active bool   // a run is on
}

// NewDigest gives the digest of no run.
func NewDigest() *Digest { return &Digest{h: sha256.New()} }

// Add takes an outcome in. The start of a run begins the digest anew; kinds that
// it does not cover, and outcomes outside of a run, are left out.
func (d *Digest) Add(o *Outcome) {
	if o.Kind == OutcomeRun {
		d.active = o.Event == "started"
		if d.active {
			d.Reset()
		}
		return
	}
	if !d.active || o.Kind != OutcomePoint && o.Kind != OutcomeAlarm && o.Kind != OutcomeCardPoint {
		return
	}
	b := append(d.buf[:0], byte(o.Kind))
	b = binary.LittleEndian.AppendUint64(b, o.Epoch)
	b = binary.LittleEndian.AppendUint64(b, o.N)
	b = binary.LittleEndian.AppendUint64(b, uint64(o.T))
	if o.Kind == OutcomePoint {
		p := o.Point
		for _, v := range p.V {
			b = binary.LittleEndian.AppendUint64(b, math.Float64bits(v))
		}
		b = append(b, byte(p.Choke), byte(p.Phase), byte(p.BackFrom), byte(p.TemperatureBy), byte(p.ChokeNPRFrom),
			byte(p.PressureBy), flag(p.ChokeMarginal), flag(p.ChokeArmed), flag(p.Lit), flag(p.LitKnown),
			flag(p.Steady), byte(p.NotSteady), byte(p.NoChokeLoss), byte(p.NoEGTLimit))
		b = binary.LittleEndian.AppendUint32(b, uint32(p.Warnings))
		b = binary.LittleEndian.AppendUint16(b, uint16(p.EGTProbesUsed))
		b = binary.LittleEndian.AppendUint16(b, uint16(p.RakeProbesUsed))
		if by := p.ArmedBy; by != monitor.ByNobody && (by != monitor.BySpeed || !p.ChokeArmed) { // else it follows: a run without a card keeps its digest
			b = append(b, byte(by))
		}
		for _, c := range [...]monitor.Cause{p.Cause, p.EGTCause} {
			b = append(b, byte(c.Kind), byte(c.Quality))
			b = binary.LittleEndian.AppendUint32(b, uint32(c.Channel))
		}
	} else if o.Taken != nil {
		b = appendJSON(b, o.Taken)
	} else {
		b = appendJSON(b, o.Alarm)
	}
	d.buf = b
	d.n++
	_, _ = d.h.Write(b)
}

// appendJSON appends an outcome that is covered as JSON.
func appendJSON(b []byte, v any) []byte {
	text, err := json.Marshal(v)
	if err != nil {
		panic(fmt.Sprintf("pipeline: %T does not encode: %v", v, err))
	}
	return append(b, text...)
}

// Reset begins anew within the run: after records that were not stored there is
// a digest for what follows.
func (d *Digest) Reset() {
	d.h.Reset()
	d.n = 0
}

// Count gives the number of outcomes covered.
func (d *Digest) Count() uint64 { return d.n }

func flag(b bool) byte {
	if b {
		return 1
	}
	return 0
}

// String gives the digest so far in hex.
func (d *Digest) String() string { return hex.EncodeToString(d.h.Sum(nil)) }

// MarshalBinary keeps the state of the digest, so that a restart goes on with it.
func (d *Digest) MarshalBinary() ([]byte, error) {
	b, err := d.h.(encoding.BinaryMarshaler).MarshalBinary()
	if err != nil {
		return nil, fmt.Errorf("pipeline: digest: %w", err)
	}
	return append(binary.LittleEndian.AppendUint64(b, d.n), flag(d.active)), nil
}

// UnmarshalBinary goes on from a kept state.
func (d *Digest) UnmarshalBinary(b []byte) error {
	const tail = 9
	if len(b) < tail {
		return fmt.Errorf("pipeline: digest state of %d bytes is cut", len(b))
	}
	h, rest := b[:len(b)-tail], b[len(b)-tail:]
	d.h = sha256.New()
	if err := d.h.(encoding.BinaryUnmarshaler).UnmarshalBinary(h); err != nil {
		return fmt.Errorf("pipeline: digest state: %w", err)
	}
	d.n, d.active = binary.LittleEndian.Uint64(rest), rest[8] == 1
	return nil
}
