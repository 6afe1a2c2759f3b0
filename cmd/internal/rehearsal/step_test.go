package rehearsal_test

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math/rand/v2"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// epoch is the device time of the first pack: 2025-12-01 09:00 UTC.
const (
	epoch  = int64(1764579600e9)
	second = int64(time.Second)
)

// example reads the example rig, with its text changed by pairs of old and new.
func example(tb testing.TB, replace ...string) (bundle []byte, cfg pipeline.Config) {
	tb.Helper()
	b, _, faults := config.Load("../../../testdata/rigs/example.yaml")
	if len(faults) > 0 {
		tb.Fatal(faults[0])
	}
	for i := 0; i < len(replace); i += 2 {
		if !strings.Contains(b.Files[0].Text, replace[i]) {
			tb.Fatalf("the rig file has no %q", replace[i])
		}
		b.Files[0].Text = strings.Replace(b.Files[0].Text, replace[i], replace[i+1], 1)
	}
	bundle = b.Marshal()
	cfg, faults = config.Parse(bundle)
	if len(faults) > 0 {
		tb.Fatal(faults[0])
	}
	return bundle, cfg
}

func machine() *pipeline.Machine {
	return pipeline.NewMachine(func(bundle []byte) (pipeline.Config, error) {
		cfg, faults := config.Parse(bundle)
		if len(faults) > 0 {
			return cfg, errors.New(faults[0].String())
		}
		return cfg, nil
	})
}

// records gives the records of a rehearsal as the sequencer would number them: boot,
// configuration, a session, messages, and a tick after each 100 ms without another.
func records(tb testing.TB, bundle []byte, cfg pipeline.Config, o rehearsal.Options, faults ...string) []ingest.Record {
	tb.Helper()
	o.Start = epoch
	for _, text := range faults {
		f, err := rehearsal.ParseFault(text)
		if err != nil {
			tb.Fatal(err)
		}
		o.Faults = append(o.Faults, f)
	}
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		tb.Fatal(err)
	}
	var out []ingest.Record
	add := func(host int64, kind ingest.Kind, topic string, payload []byte) {
		for n := len(out); n > 0 && out[n-1].Host+second/10 < host; n = len(out) {
			out = append(out, ingest.Record{Seq: uint64(n) + 1, Host: out[n-1].Host + second/10, Kind: ingest.KindTick})
		}
		out = append(out, ingest.Record{Seq: uint64(len(out)) + 1, Host: host, Kind: kind, Topic: topic, Payload: payload})
	}
	add(epoch-second, ingest.KindBoot, "", []byte(`{"epoch":1}`))
	add(epoch-second, ingest.KindConfig, "", bundle)
	add(epoch-second/2, ingest.KindConnect, cfg.Align.Inputs[0].Filter, nil)
	var msgs []rehearsal.Message
	for more := true; more; {
		msgs, more = rig.Next(msgs[:0])
		for _, m := range msgs {
			add(m.At+m.Delay, ingest.KindMessage, m.Topic, m.Payload)
		}
	}
	add(out[len(out)-1].Host+second/5, ingest.KindTick, "", nil)
	return out
}

// stepper steps records and keeps what came of them, as text, which has every
// digit and no NaN that differs from itself.
type stepper struct {
	m      *pipeline.Machine
	s      *pipeline.State
	d      *pipeline.Digest
	outs   []string // nil = do not keep
	raised map[string]bool
	points int
	runs   []string
	each   func(o *pipeline.Outcome)
}

func newStepper() *stepper {
	return &stepper{m: machine(), s: &pipeline.State{}, d: pipeline.NewDigest(), raised: map[string]bool{}}
}

// text writes an outcome with all that it points to.
func text(o *pipeline.Outcome) string {
	v := reflect.ValueOf(*o)
	var b strings.Builder
	for i := range v.NumField() {
		f := v.Field(i)
		if f.Kind() == reflect.Pointer {
			if f.IsNil() {
				continue
			}
			f = f.Elem()
		}
		fmt.Fprintf(&b, " %s:%+v", v.Type().Field(i).Name, f.Interface())
	}
	return b.String()
}

func (st *stepper) step(rs ...ingest.Record) {
	for i := range rs {
		outs := st.m.Step(st.s, &rs[i])
		for k := range outs {
			o := &outs[k]
			st.d.Add(o)
			if st.outs != nil {
				st.outs = append(st.outs, text(o))
			}
			switch {
			case o.Kind == pipeline.OutcomePoint:
				st.points++
			case o.Kind == pipeline.OutcomeRun:
				st.runs = append(st.runs, o.Event)
			case o.Kind == pipeline.OutcomeAlarm && alarm.State(o.Alarm.State) == alarm.Unacknowledged:
				st.raised[o.Alarm.Rule] = true
			}
			if st.each != nil {
				st.each(o)
			}
		}
	}
}

func (st *stepper) encoded(tb testing.TB) []byte {
	tb.Helper()
	b, err := st.s.Encode(true)
	if err != nil {
		tb.Fatal(err)
	}
	return b
}

// everything is faults of every kind that a run survives, none over the start.
var everything = []string{
	"probe-open@22s:egt_3", "reorder@24s", "duplicate@26s", "not-a-number@28s:p_exit", "malformed@30s", "clock-skew@34s+4s",
	"publisher-silent@41s+3s", "burst@46s+2s", "wrong-unit@50s:t_oil_supply", "huge@52s", "truncated@54s",
}

// The same records give the same states, outcomes and digest.
func TestStepTwice(t *testing.T) {
	bundle, cfg := example(t)
	rs := records(t, bundle, cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Rate: 20}, everything...)
	a, b := newStepper(), newStepper()
	a.outs, b.outs = []string{}, []string{}
	a.step(rs...)
	b.step(rs...)
	if !bytes.Equal(a.encoded(t), b.encoded(t)) {
		t.Error("two states of the same records differ")
	}
	if !slices.Equal(a.outs, b.outs) {
		t.Error("two lists of outcomes of the same records differ")
	}
	if a.d.String() != b.d.String() || a.d.Count() < 1000 {
		t.Errorf("digests %s and %s of %d", a.d, b.d, a.d.Count())
	}
	if a.points < 1200 || !slices.Equal(a.runs, []string{"started"}) || len(a.raised) < 3 {
		t.Errorf("%d points, runs %v, alarms %v", a.points, a.runs, a.raised)
	}
	// Another seed gives another digest: it does cover what is measured.
	other := newStepper()
	other.step(records(t, bundle, cfg, rehearsal.Options{Seed: 4, Scenario: rehearsal.Quick, Rate: 20}, everything...)...)
	if other.d.String() == a.d.String() {
		t.Error("two different runs have one digest")
	}
}

// A state that was encoded and decoded at any record goes on as if it had not been:
// the same outcomes, the same state, the same digest.
func TestCut(t *testing.T) {
	bundle, cfg := example(t)
	rs := records(t, bundle, cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Rate: 20}, everything...)
	whole := newStepper()
	whole.outs = []string{}
	var counts []int // outcomes before each record
	for i := range rs {
		counts = append(counts, len(whole.outs))
		whole.step(rs[i])
	}
	want := whole.encoded(t)
	rng := rand.New(rand.NewPCG(1, 1))
	cuts := []int{0, 1, 2, 3, 4, len(rs) - 1}
	for range 10 {
		cuts = append(cuts, rng.IntN(len(rs)))
	}
	if testing.Short() {
		cuts = cuts[4:7]
	}
	for _, cut := range cuts {
		st := newStepper()
		st.step(rs[:cut]...)
		state, err := pipeline.Decode(st.encoded(t))
		if err != nil {
			t.Fatal(err)
		}
		kept, err := st.d.MarshalBinary()
		if err != nil {
			t.Fatal(err)
		}
		st = newStepper()
		st.outs, st.s = []string{}, state
		if err := st.d.UnmarshalBinary(kept); err != nil {
			t.Fatal(err)
		}
		if err := st.m.Restore(state); err != nil {
			t.Fatal(err)
		}
		st.step(rs[cut:]...)
		if rest := whole.outs[counts[cut]:]; !slices.Equal(st.outs, rest) {
			for i := range rest {
				if i >= len(st.outs) || st.outs[i] != rest[i] {
					t.Fatalf("cut before record %d: outcome %d of %d differs:\n%s\n%s", cut+1, i, len(rest), st.outs[min(i, len(st.outs)-1)], rest[i])
				}
			}
		}
		if !bytes.Equal(st.encoded(t), want) || st.d.String() != whole.d.String() || st.d.Count() != whole.d.Count() {
			t.Errorf("cut before record %d: state or digest differs at the end", cut+1)
		}
	}
}

// Messages that are broken, foreign, too large, of a wrong time, or copies, are
// counted by reason, and the run goes on: its points, its alarms and the other
// channels are there.
func TestStepFaults(t *testing.T) {
	bundle, cfg := example(t)
	o := rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Rate: 20}
	// lost counts the scans of the run in which a channel has no value. A chop is faster
	// than a rake probe may be, in one scan, without a fault too.
	lost := func(st *stepper) map[string]int {
		n := map[string]int{}
		st.each = func(o *pipeline.Outcome) {
			if o.Kind != pipeline.OutcomeChannels || o.T < epoch+24*second || o.T > epoch+60*second {
				return
			}
			for i, q := range o.Scan.Quality {
				if !q.Usable() {
					n[cfg.Compute.Channels[i].ID]++
				}
			}
		}
		return n
	}
	plain := newStepper()
	without := lost(plain)
	plain.step(records(t, bundle, cfg, o)...)
	for _, tt := range []struct {
		fault  string
		reason ingest.Reason // ReasonNone: none counts
		n      uint64        // how many, at 20 packs per second
		alarms []string      // beside those of the plain run
		points int           // that may be missing
	}{
		{"malformed@25s+2s", ingest.ReasonSyntax, 20, nil, 2},
		{"truncated@25s+2s", ingest.ReasonSyntax, 20, nil, 2},
		{"huge@25s+2s", ingest.ReasonTooLarge, 2, nil, 2},
		{"not-a-number@25s+2s:p_exit", ingest.ReasonNotFinite, 40, nil, 2},
		{"wrong-unit@25s+2s:p_exit", ingest.ReasonUnit, 40, nil, 2},
		{"clock-skew@25s+5s", ingest.ReasonFuture, 0, []string{"clock_skew"}, 2},
		{"clock-past@25s+8s", ingest.ReasonPast, 0, []string{"clock_skew"}, 2}, // from the time it is known on
		{"duplicate@25s+3s", ingest.ReasonDuplicate, 60, nil, 2},
		{"reorder@25s+3s", ingest.ReasonNone, 0, nil, 2},
		{"publisher-silent@40s+5s", ingest.ReasonNone, 0, []string{"source_lost"}, 2},
		{"barometer-loss@25s", ingest.ReasonNone, 0, []string{"choke_unknown"}, 2},
		{"probe-open@25s:egt_3", ingest.ReasonNone, 0, []string{"egt_probe_lost"}, 2},
		{"probe-open@25s:p7_3", ingest.ReasonNone, 0, []string{"rake_probe_lost"}, 2},
		{"probe-stuck@25s:p7_2", ingest.ReasonNone, 0, []string{"rake_probe_lost"}, 2},
	} {
		t.Run(tt.fault, func(t *testing.T) {
			st := newStepper()
			unusable := lost(st)
			rs := records(t, bundle, cfg, o, tt.fault)
			st.step(rs...)
			var counted uint64
			for reason, n := range st.s.Align.Counters {
				switch {
				case reason == int(tt.reason) && tt.reason != ingest.ReasonNone:
					counted = n
				case n > 0 && reason != int(ingest.ReasonLate):
					t.Errorf("%d of reason %v", n, ingest.Reason(reason))
				}
			}
			if tt.reason != ingest.ReasonNone && (counted == 0 || tt.n > 0 && counted != tt.n) {
				t.Errorf("%d of reason %v, want %d", counted, tt.reason, tt.n)
			}
			if st.points < plain.points-tt.points || st.points > plain.points+tt.points {
				t.Errorf("%d points, %d without the fault", st.points, plain.points)
			}
			for rule := range plain.raised {
				if !st.raised[rule] && rule != "unchoke" { // which is not seen without pressures
					t.Errorf("no alarm %s, which is raised without the fault", rule)
				}
			}
			for _, rule := range tt.alarms {
				if !st.raised[rule] {
					t.Errorf("no alarm %s", rule)
				}
			}
			// What is not struck has a value in every scan.
			_, struck, _ := strings.Cut(tt.fault, ":")
			for id, n := range unusable {
				switch {
				case id == struck, n <= without[id], strings.HasPrefix(tt.fault, "barometer-loss"), strings.HasPrefix(tt.fault, "publisher-silent"):
				case strings.HasPrefix(tt.fault, "clock-past") && n <= 4*20: // until the clock is known to be wrong
				default:
					t.Errorf("%s has no value in %d scans", id, n)
				}
			}
			if len(st.runs) != 1 || !st.s.RunActive {
				t.Errorf("runs %v", st.runs)
			}
		})
	}
}

// Another rig text with the engine off keeps what is known of the channels, and is
// computed with from then on. In the middle of a run it is refused, as one with a
// fault is, and nothing else happens.
func TestReload(t *testing.T) {
	off := []string{"off_after: 30 s", "off_after: 500 ms"}
	bundle, cfg := example(t, off...)
	changed, _ := example(t, append(off,
		"title: Alder Bank cell 2", "title: Alder Bank cell 2, new area",
		"throat_area: 0.0250 m2", "throat_area: 0.0260 m2",
		"  - id: t_cell\n    title: Cell air temperature\n    like: t_ambient\n", "", // every channel behind it moves up
	)...)
	rs := records(t, bundle, cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Rate: 20}, "probe-open@22s:egt_3")
	with := func(after int64, payload []byte) []ingest.Record {
		at := slices.IndexFunc(rs, func(r ingest.Record) bool { return r.Host > epoch+after })
		out := slices.Concat(rs[:at], []ingest.Record{{Host: rs[at-1].Host, Kind: ingest.KindConfig, Payload: payload}}, rs[at:])
		for i := range out {
			out[i].Seq = uint64(i) + 1
		}
		return out
	}
	plain, st := newStepper(), newStepper()
	plain.step(rs...)
	lost, config := 0, 0
	var area float64
	st.each = func(o *pipeline.Outcome) {
		switch {
		case o.Kind == pipeline.OutcomeConfig:
			config++
			if !o.OK {
				t.Errorf("the configuration is refused: %s", o.Text)
			}
		case config == 2 && o.Kind == pipeline.OutcomeChannels:
			for i, q := range o.Scan.Quality {
				if id := st.channel(i); !q.Usable() && id != "egt_3" && o.T < epoch+60*second {
					lost++
				}
			}
		case config == 2 && o.Kind == pipeline.OutcomePoint && o.Point.Choke == monitor.Choked:
			area = o.Point.V[monitor.ThroatArea]
		}
	}
	st.step(with(second+second/2, changed)...)
	if lost > 0 {
		t.Errorf("%d values are lost by the change", lost)
	}
	if config != 2 || !(area > 0.026) || st.points != plain.points || len(st.runs) != 1 {
		t.Errorf("%d configurations, area %g m², %d points of %d, runs %v", config, area, st.points, plain.points, st.runs)
	}
	if n := len(st.s.Align.Channels); n != len(cfg.Align.Channels)-1 || len(st.s.Compute.Channels) != n {
		t.Errorf("%d channels after one was taken out of %d", n, len(cfg.Align.Channels))
	}

	for _, tt := range []struct {
		name    string
		payload []byte
		why     string
	}{{"in the middle of a run", changed, "engine off"}, {"a text that is no rig file", []byte("rig: ["), "bundle"}} {
		other, refused := newStepper(), ""
		other.each = func(o *pipeline.Outcome) {
			if o.Kind == pipeline.OutcomeConfig && !o.OK {
				refused = o.Text
			}
		}
		other.step(with(44*second, tt.payload)...)
		if !strings.Contains(refused, tt.why) || other.points != plain.points || !reflect.DeepEqual(other.raised, plain.raised) {
			t.Errorf("%s: %q, %d points, alarms %v", tt.name, refused, other.points, other.raised)
		}
	}
}

func (st *stepper) channel(i int) string {
	cfg, _ := st.m.Config()
	return cfg.Compute.Channels[i].ID
}

// Without the configuration a step only numbers; the first configuration starts
// it all.
func TestNoConfigYet(t *testing.T) {
	bundle, cfg := example(t)
	rs := records(t, bundle, cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Rate: 20})
	action, _ := json.Marshal(pipeline.Action{Do: pipeline.DoMark, RequestID: "r1"})
	st := newStepper()
	var answer error
	st.each = func(o *pipeline.Outcome) {
		if o.Kind == pipeline.OutcomeAction {
			answer = o.Action.Err
		}
	}
	st.step(
		ingest.Record{Seq: 1, Host: epoch, Kind: ingest.KindBoot, Payload: []byte("{}")},
		ingest.Record{Seq: 2, Host: epoch, Kind: ingest.KindConfig, Payload: []byte("no rig file")},
		ingest.Record{Seq: 3, Host: epoch, Kind: ingest.KindMessage, Topic: rs[10].Topic, Payload: rs[10].Payload},
		ingest.Record{Seq: 4, Host: epoch, Kind: ingest.KindAction, Payload: action},
		ingest.Record{Seq: 5, Host: epoch + second, Kind: ingest.KindTick},
	)
	if st.points != 0 || !errors.Is(answer, pipeline.ErrNoConfig) || st.m.Alarms(st.s) != nil || st.m.Ledger(st.s) != nil {
		t.Errorf("%d points without a configuration, action: %v", st.points, answer)
	}
	st.step(ingest.Record{Seq: 6, Host: epoch + second, Kind: ingest.KindConfig, Payload: bundle})
	for i, r := range rs[4:200] {
		r.Seq, r.Host = uint64(i)+7, r.Host+2*second
		st.step(r)
	}
	if st.points == 0 {
		t.Error("no points after the configuration")
	}
}

// steady steps a rehearsal into a steady point and gives the records that follow
// in it: none changes an alarm.
func steady(tb testing.TB) (*stepper, []ingest.Record) {
	tb.Helper()
	bundle, cfg := example(tb)
	rs := records(tb, bundle, cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Full, Rate: 20})
	from := slices.IndexFunc(rs, func(r ingest.Record) bool { return r.Host > epoch+95*second })
	to := slices.IndexFunc(rs, func(r ingest.Record) bool { return r.Host > epoch+115*second })
	st := newStepper()
	st.step(rs[:from]...)
	return st, rs[from:to]
}

// A message with its scan, its point and its rules allocates nothing in the steady
// state.
func TestStepAllocations(t *testing.T) {
	st, rs := steady(t)
	k, alarms, points := 0, 0, 0
	half := len(rs) / 2
	n := testing.AllocsPerRun(1, func() { // once to warm up, once measured
		for range half {
			for _, o := range st.m.Step(st.s, &rs[k]) {
				if o.Kind == pipeline.OutcomeAlarm {
					alarms++
				}
				if o.Kind == pipeline.OutcomePoint {
					points++
				}
			}
			k++
		}
	})
	if points < 2*half-10 || alarms > 0 {
		t.Fatalf("%d points and %d alarms of %d records", points, alarms, 2*half)
	}
	if n != 0 {
		t.Errorf("%g allocations in %d messages", n, half)
	}
}

// A message a scan, 44 channels in one SenML pack, all rules.
func BenchmarkStep(b *testing.B) {
	bundle, cfg := example(b)
	for _, rate := range []float64{20, 50} {
		b.Run(fmt.Sprintf("%g packs/s", rate), func(b *testing.B) {
			rs := records(b, bundle, cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Full, Rate: rate})
			var messages, scans int
			var played int64
			st := newStepper()
			k := 0
			b.ReportAllocs()
			for b.Loop() {
				if k == len(rs) {
					st, k = newStepper(), 0
				}
				for _, o := range st.m.Step(st.s, &rs[k]) {
					if o.Kind == pipeline.OutcomePoint {
						scans++
					}
				}
				if k > 0 {
					played += rs[k].Host - rs[k-1].Host
				}
				messages++
				k++
			}
			b.ReportMetric(float64(messages)/b.Elapsed().Seconds(), "messages/s")
			b.ReportMetric(float64(scans)/b.Elapsed().Seconds(), "scans/s")
			b.ReportMetric(float64(played)/float64(b.Elapsed()), "×real-time")
		})
	}
}
