// Package check judges the data system of a rig while its engine is at rest, before a run
// and after it: zeros of pressures, thermocouples against each other, channels that are
// silent, stuck or noisy, clocks, broker, disk, limits, and what people have ticked by hand.
//
// Gather collects scans for a window; Judge makes a Result of them and of what the daemon
// knows besides. A result says how many of its items passed and why the others did not. It
// is about the data system only, and is no clearance for anything.
//
// Everything is plain data and event time; nothing here reads a clock or a file. Values are
// SI, uncertainties and limits at 95 %.
package check

import (
	"cmp"
	"errors"
	"fmt"

	"throatwatch/monitor"
)

// The phases of a check.
const (
	Before = "before" // a run
	After  = "after"  // a run
)

// What the operator says of the engine.
const (
	Cold = "cold" // it has stood for so long that all of it has the temperature of its surroundings
	Warm = "warm"
)

// The states of a check.
const (
	Running   = "running" // scans are gathered
	Done      = "done"
	BrokenOff = "broken_off"
)

// The kinds of item, in the order in which a result lists them.
const (
	KindSignal        = "signal"
	KindZero          = "zero"
	KindShift         = "shift"
	KindTemperature   = "temperature"
	KindCalibration   = "calibration"
	KindClock         = "clock"
	KindBroker        = "broker"
	KindInputPath     = "input_path"
	KindSources       = "sources"
	KindRecording     = "recording"
	KindDisk          = "disk"
	KindConfiguration = "configuration"
	KindTick          = "tick"
)

// Tick is something that a person does and says so: no channel shows it.
type Tick struct {
	ID    string `json:"id"`
	Title string `json:"title"`
}

// DefaultTicks gives what is ticked by hand before a run of any rig. The protection that
// is meant is the facility's own, which works without this program.
func DefaultTicks() []Tick {
	return []Tick{
		{"alarm_sound", "Alarm sound heard at the console"},
		{"overtemperature_protection", "Independent over-temperature protection tested"},
		{"overspeed_protection", "Independent over-speed protection tested"},
		{"fire_system", "Fire detection and extinguishing tested"},
		{"limits_version", "Limits in force compared with the engine's limits document"},
	}
}

// Ticked says who has done a tick.
type Ticked struct {
	ID string `json:"id"`
	By string `json:"by"`
}

// Limits say what is asked. What is zero gets the value of Defaults.
type Limits struct {
	Window int64 // ns of scans that are gathered

	// Usable is the least part of the scans in which a channel has a usable value.
	Usable float64
	// Noise is how many times the random uncertainty that is stated for it a channel may
	// scatter. The scatter of 30 effective values is known to 13 % (1/√2ν), so that twice as
	// much is no chance.
	Noise float64
	// Draught is by how much the pressure at a tap may truly differ from that at its
	// reference in a cell at rest, Pa at 95 %: doors, fans, wind. Common practice, no source.
	Draught float64
	// Drift is by how much the zero of a pressure may move from before a run to after it, as
	// a part of its range, at 95 %; 0 = none is stated.
	Drift float64
	// Cold and Warm are by how much the places of thermocouples of one group may truly differ
	// in temperature, K at 95 %. After a night at rest a nozzle is even to some 3 K; after a
	// run its upper half stays tens of kelvins hotter for an hour. Common practice, no source.
	Cold, Warm float64
	// Skew is the difference of a publisher's clock and the host's, ns.
	Skew int64
	// Planned is the length of a run for which the disk has to last where the operator states
	// none, ns.
	Planned int64
	// Valid is how long after a check before a run, in event time, a run may begin that it
	// counts for, ns.
	Valid int64

	NotZero []int  // channels that are under pressure with the engine at rest
	Ticks   []Tick // beside the default ones
}

// Defaults gives the limits of a rig that states none.
func Defaults() Limits {
	const second = int64(1e9)
	return Limits{
		Window: 10 * second, Usable: 0.9, Noise: 2, Draught: 50, Cold: 3, Warm: 40,
		Skew: second / 2, Planned: 2 * 3600 * second, Valid: 12 * 3600 * second,
	}
}

// WithDefaults gives the limits with what is zero as Defaults has it.
func (l Limits) WithDefaults() Limits {
	d := Defaults()
	l.Window, l.Skew = cmp.Or(l.Window, d.Window), cmp.Or(l.Skew, d.Skew)
	l.Planned, l.Valid = cmp.Or(l.Planned, d.Planned), cmp.Or(l.Valid, d.Valid)
	l.Usable, l.Noise, l.Draught = cmp.Or(l.Usable, d.Usable), cmp.Or(l.Noise, d.Noise), cmp.Or(l.Draught, d.Draught)
	l.Cold, l.Warm = cmp.Or(l.Cold, d.Cold), cmp.Or(l.Warm, d.Warm)
	return l
}

// Item is one thing that was checked.
type Item struct {
	ID      string          `json:"id"` // kind, or kind.what
	Kind    string          `json:"kind"`
	Channel string          `json:"channel"` // "" where it is about none
	Title   string          `json:"title"`
	Passed  bool            `json:"passed"`
	Text    string          `json:"text"`  // what was found; of an item that did not pass, the reason
	Value   monitor.Reading `json:"value"` // what was found, in Unit
	Limit   monitor.Reading `json:"limit"` // of its size
	U95     monitor.Reading `json:"u95"`   // of the value itself; the limit has the instrument's in it
	Unit    string          `json:"unit"`  // SI
	By      string          `json:"by"`    // of a tick
}

// Request is what is asked for when a check begins.
type Request struct {
	Phase   string // Before or After
	Warmth  string // Cold or Warm
	Ticks   []Ticked
	Planned int64 // ns, length of the run; 0 = not stated
	By      string
	Note    string
}

// ErrRequest is wrapped by what is wrong with a request.
var ErrRequest = errors.New("the check is not understood")

// Check tells what is wrong with a request, for a rig with these limits.
func (r *Request) Check(l *Limits) error {
	switch {
	case r.Phase != Before && r.Phase != After:
		return fmt.Errorf("%w: phase %q: give before or after", ErrRequest, r.Phase)
	case r.Warmth != Cold && r.Warmth != Warm:
		return fmt.Errorf("%w: warmth %q: say whether the engine is cold or warm", ErrRequest, r.Warmth)
	case r.Planned < 0:
		return fmt.Errorf("%w: planned for less than nothing", ErrRequest)
	}
	for _, t := range r.Ticks {
		if _, ok := l.tick(t.ID); !ok {
			return fmt.Errorf("%w: there is no tick %q", ErrRequest, t.ID)
		}
	}
	return nil
}

// AllTicks gives what is ticked by hand before a run.
func (l *Limits) AllTicks() []Tick { return append(DefaultTicks(), l.Ticks...) }

func (l *Limits) tick(id string) (Tick, bool) {
	for _, t := range l.AllTicks() {
		if t.ID == id {
			return t, true
		}
	}
	return Tick{}, false
}

// Result is a check, from its begin on. It is plain data.
type Result struct {
	Phase   string          `json:"phase"`
	State   string          `json:"state"` // "" = there was no check
	Why     string          `json:"why"`   // it was broken off
	Run     string          `json:"run"`   // that it belongs to; "" = none has begun yet
	Began   monitor.Time    `json:"began"` // event time of the first and the last scan
	Ended   monitor.Time    `json:"ended"`
	Warmth  string          `json:"warmth"`
	By      string          `json:"by"`
	Note    string          `json:"note"`
	Planned monitor.Reading `json:"planned_s"`
	Passed  int             `json:"passed"`
	Of      int             `json:"of"`
	Summary string          `json:"summary"` // "" until it is done

	ConfigHash    string `json:"config_hash"`
	LimitsVersion string `json:"limits_version"`
	Items         []Item `json:"items"`
}

// Begin gives the result of a check that has begun.
func (r *Request) Begin(t int64, hash, limits string) Result {
	return Result{
		Phase: r.Phase, State: Running, Began: monitor.Time(t), Warmth: r.Warmth, By: r.By, Note: r.Note,
		Planned:    monitor.Reading{V: float64(r.Planned) / 1e9, Known: r.Planned > 0},
		ConfigHash: hash, LimitsVersion: limits, Items: []Item{},
	}
}

// finish counts the items and puts the result into words.
func (r *Result) finish(t int64) {
	r.State, r.Ended, r.Of = Done, monitor.Time(t), len(r.Items)
	for i := range r.Items {
		if r.Items[i].Passed {
			r.Passed++
		}
	}
	r.Summary = fmt.Sprintf("Data-system checks passed %d of %d. Not a clearance to start.", r.Passed, r.Of)
}

// Break ends a check before its time.
func (r *Result) Break(t int64, why string) {
	r.State, r.Ended, r.Why = BrokenOff, monitor.Time(t), why
}

// Zeros gives the zeros that a check has found.
func (r *Result) Zeros() []Item {
	var out []Item
	for i := range r.Items {
		if it := &r.Items[i]; it.Kind == KindZero && it.Value.Known {
			out = append(out, *it)
		}
	}
	return out
}
