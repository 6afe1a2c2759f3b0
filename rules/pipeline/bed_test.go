package pipeline

import (
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/align"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/phase"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
)

const (
	period = second / 20
	ms     = second / 1000
	// epoch is 2025-12-01 09:00 UTC.
	epoch = int64(1764579600e9)
	topic = "rigs/x/senml"
)

// rig is a small rig: pressure, temperature, EGT, speed, back pressure, and a
// channel that only a rule watches.
func rig(tb testing.TB) Config {
	tb.Helper()
	cfg := Config{
		Rig:  RigInfo{ID: "x", EngineModel: "Merle 5", EngineSerial: "ML5-0042"},
		Hash: "one",
		Align: align.Config{
			Period: period, Lateness: 120 * ms, MaxFuture: 2 * second, MaxPast: 5 * second, Backlog: 65 * second,
			Inputs: []align.Input{{Filter: topic, Format: decode.SenMLJSON}, {Filter: "rigs/x/channels/+", Format: decode.Value}},
		},
		Run: RunConfig{EndAfter: 5 * second},
	}
	st := compute.Stations{
		Barometer: -1, InletT: -1, InletP: -1, Humidity: -1, AmbientT: -1, FuelFlow: -1, Bellmouth: -1, Thrust: -1, WaterFlow: -1, BleedFlow: -1, BleedT: -1, MinEGT: 1,
	}
	add := func(id, name string) int {
		u, err := unit.Parse(name)
		if err != nil {
			tb.Fatal(err)
		}
		cfg.Align.Channels = append(cfg.Align.Channels, align.Channel{ID: id, Name: id, Raw: u, Hold: 250 * ms})
		cfg.Compute.Channels = append(cfg.Compute.Channels, compute.Channel{ID: id, Spec: calib.Spec{Raw: u, Unit: u, Port: -1, Low: -1e9, High: 1e9}})
		return len(cfg.Compute.Channels) - 1
	}
	st.P7 = []int{add("p7", "Pa")}
	st.T7 = []int{add("t7", "K")}
	st.EGT = []int{add("egt", "K")}
	st.ExitPlane = add("p_exit", "Pa")
	st.Speed = add("speed", "rpm")
	add("p_oil", "kPa")
	cfg.Compute.Stations = st
	cfg.Compute.Fuel = gas.Kerosene()
	cfg.Compute.Nozzle = compute.Nozzle{Config: nozzle.Config{ThroatArea: 0.025, ResolutionFloor: 0.003}, Hysteresis: 0.5, ArmedAboveRPM: 19500, ArmedHysterRPM: 500}
	cfg.Compute.EGT.Bands = []egt.Band{{Name: "run_max", Kind: egt.KindRun, Limit: 990, Allowance: second, Deadband: 5, Rearm: 2 * second}}
	cfg.Compute.Phase = phase.Config{
		Turning: 300, Idle: 9500, IdleBand: 500, Max: 22000, LitEGT: 500, LitRise: 60, MoveRate: 150, SteadyAfter: 3 * second, CoolEGT: 390, OffAfter: 2 * second,
	}
	rule := func(name, when string, p rules.Priority) rules.Rule {
		return rules.Rule{Name: name, When: when, Priority: p, Title: name, Text: name, Caution: "watch it", Response: "the facility's procedure"}
	}
	low := rule("oil_low", "channel.p_oil < 30000", rules.Caution)
	low.OnDelay = 200 * ms
	over := rule("over_speed", "speed_rpm > 22600", rules.Warning)
	over.Latching = true
	cfg.Rules = []rules.Rule{
		low, over,
		rule("source_lost", "sources_lost > 0", rules.Caution),
		rule("not_recording", "not health.recording", rules.Warning),
		rule("deaf", "not health.input_path", rules.Warning),
		rule("clock", "not health.clock", rules.Advisory),
		rule("exceeded", "egt.run_max.exceeded", rules.Warning),
	}
	return cfg
}

// parser knows the bundles "rig one" and "rig two": the second has another title,
// a new channel before the others and one rule less.
func parser(tb testing.TB) func([]byte) (Config, error) {
	tb.Helper()
	return func(bundle []byte) (Config, error) {
		cfg := rig(tb)
		switch string(bundle) {
		case "rig one":
			return cfg, nil
		case "rig two":
			cfg.Hash, cfg.Rig.Title = "two", "changed"
			cfg.Rules = cfg.Rules[:3]
			return cfg, nil
		case "rig with a bad rule":
			cfg.Rules[0].When = "nrp > 1"
			return cfg, nil
		case "rig with a bad nozzle":
			cfg.Compute.Nozzle.ThroatArea = -1
			return cfg, nil
		}
		return Config{}, errors.New("no such bundle")
	}
}

// bed steps records one by one.
type bed struct {
	tb      testing.TB
	m       *Machine
	s       *State
	r       ingest.Record
	outs    []Outcome // of the last record, with what they point to
	records []ingest.Record
	all     []Outcome // alarms, runs, marks, actions, configurations, quarantines
}

func newBed(tb testing.TB) *bed {
	tb.Helper()
	b := &bed{tb: tb, m: NewMachine(parser(tb)), s: &State{}, r: ingest.Record{Host: epoch - second}}
	b.record(ingest.KindBoot, `{"epoch":1}`)
	b.record(ingest.KindConfig, "rig one")
	return b
}

func (b *bed) step() []Outcome {
	b.r.Seq++
	b.records = append(b.records, b.r)
	b.outs = b.m.Step(b.s, &b.r)
	for _, o := range b.outs {
		switch o.Kind {
		case OutcomeAlarm, OutcomeRun, OutcomeMark, OutcomeAction, OutcomeConfig, OutcomeQuarantine,
			OutcomeExceedance, OutcomeEngine, OutcomeLife, OutcomeLog, OutcomeChecks, OutcomeCardPoint:
			b.all = append(b.all, o)
		case OutcomePoint, OutcomeChannels, OutcomeLedger, OutcomeStatus, OutcomeReduction, OutcomeCard:
		}
	}
	return b.outs
}

func (b *bed) record(kind ingest.Kind, payload string) []Outcome {
	b.r.Kind, b.r.Topic, b.r.Flags, b.r.Payload = kind, "", 0, []byte(payload)
	return b.step()
}

func (b *bed) message(topic string, payload []byte) []Outcome {
	b.r.Kind, b.r.Topic, b.r.Flags, b.r.Payload = ingest.KindMessage, topic, 0, payload
	return b.step()
}

// engine is what the channels read.
type engine struct{ p7, t7, egt, exit, speed, oil float64 }

var (
	atRest  = engine{101330, 290, 290, 101325, 0, 0}
	turning = engine{101400, 290, 290, 101300, 2000, 150}
	idling  = engine{115e3, 850, 880, 101e3, 9500, 300}
	running = engine{230e3, 880, 910, 101e3, 21000, 400}
)

func (e *engine) pack(t int64) []byte {
	return decode.AppendSenMLJSON(nil, "", t, []decode.Reading{
		{Name: "p7", Value: e.p7},
		{Name: "t7", Value: e.t7},
		{Name: "egt", Value: e.egt},
		{Name: "p_exit", Value: e.exit},
		{Name: "speed", Value: e.speed},
		{Name: "p_oil", Value: e.oil},
	})
}

// play lets the engine be so for d, a pack each 50 ms, 3 ms after its samples.
func (b *bed) play(e engine, d int64) {
	for end := b.r.Host + d; b.r.Host < end; {
		at := (b.r.Host/period + 1) * period
		b.r.Host = at + 3*ms
		b.message(topic, e.pack(at))
	}
}

// wait lets host time pass by ticks.
func (b *bed) wait(d int64) {
	for end := b.r.Host + d; b.r.Host < end; {
		b.r.Host += 100 * ms
		b.record(ingest.KindTick, "")
	}
}

// act is an operator's action; it gives what became of it.
func (b *bed) act(a Action) error {
	b.tb.Helper()
	payload, err := json.Marshal(a)
	if err != nil {
		b.tb.Fatal(err)
	}
	for _, o := range b.record(ingest.KindAction, string(payload)) {
		if o.Kind == OutcomeAction {
			if o.Action.RequestID != a.RequestID {
				b.tb.Errorf("answer to request %q, want %q", o.Action.RequestID, a.RequestID)
			}
			return o.Action.Err
		}
	}
	b.tb.Errorf("action %s has no answer", a.Do)
	return nil
}

// alarm gives the alarm of a rule as it stands; ok is false while it is normal.
func (b *bed) alarm(rule string) (a rules.Alarm, ok bool) {
	for _, a := range b.m.Alarms(b.s) {
		if a.Rule == rule {
			return a, true
		}
	}
	return a, false
}

// told gives what was told of a kind since the last call, in a few words.
func (b *bed) told(kind OutcomeKind) string {
	var words []string
	rest := b.all[:0:0]
	for _, o := range b.all {
		if o.Kind != kind {
			rest = append(rest, o)
			continue
		}
		switch kind {
		case OutcomeAlarm:
			words = append(words, o.Alarm.Rule+" "+o.Alarm.State.String())
		case OutcomeRun:
			words = append(words, o.Event+" by "+o.Run.By)
		case OutcomeMark:
			words = append(words, o.Mark.Text)
		case OutcomeConfig, OutcomeQuarantine:
			words = append(words, o.Text)
		case OutcomeEngine:
			words = append(words, o.Engine.Event)
		case OutcomeExceedance:
			word := o.Exceedance.Band + " on"
			if o.Exceedance.Ended != 0 {
				word = o.Exceedance.Band + " ended"
			}
			if o.Exceedance.Exceeded {
				word += " exceeded"
			}
			words = append(words, word)
		case OutcomeLife:
			words = append(words, fmt.Sprintf("%s: %d starts, %d cycles", o.Life.Serial, o.Life.Starts, o.Life.Cycles))
		case OutcomeChecks:
			words = append(words, o.Check.Phase+" "+o.Check.State)
		case OutcomeLog:
			words = append(words, o.Entry.What+" by "+o.Entry.By)
		case OutcomeCardPoint:
			words = append(words, fmt.Sprintf("%d %s", o.Taken.Number, o.Taken.Status))
		case OutcomePoint, OutcomeChannels, OutcomeLedger, OutcomeStatus, OutcomeAction, OutcomeReduction, OutcomeCard:
		}
	}
	b.all = rest
	return strings.Join(words, ", ")
}

// point gives the newest operating point of the last record.
func (b *bed) point() *monitor.OperatingPoint {
	b.tb.Helper()
	for _, o := range slices.Backward(b.outs) {
		if o.Kind == OutcomePoint {
			return o.Point
		}
	}
	b.tb.Fatal("the last record made no operating point")
	return nil
}

func (b *bed) expect(kind OutcomeKind, want string) {
	b.tb.Helper()
	if got := b.told(kind); got != want {
		b.tb.Errorf("told %q, want %q", got, want)
	}
}
