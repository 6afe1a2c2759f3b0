package rehearsal

import (
	"bytes"
	"context"
	"errors"
	"maps"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/align"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/unit"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// epoch is the device time of the first pack in these tests: 2025-12-01 09:00 UTC.
const epoch = int64(1764579600e9)

func load(tb testing.TB, rig string) pipeline.Config {
	tb.Helper()
	_, cfg, faults := config.Load("../../../testdata/rigs/" + rig + ".yaml")
	for _, f := range faults {
		tb.Error(f)
	}
	if len(faults) > 0 {
		tb.FailNow()
	}
	return cfg
}

func play(tb testing.TB, cfg pipeline.Config, o Options) []Message {
	tb.Helper()
	o.Start = epoch
	r, err := New(cfg, o)
	if err != nil {
		tb.Fatal(err)
	}
	var msgs []Message
	for more := true; more; {
		msgs, more = r.Next(msgs)
	}
	return msgs
}

func faulty(tb testing.TB, texts ...string) []Fault {
	tb.Helper()
	var list []Fault
	for _, s := range texts {
		f, err := ParseFault(s)
		if err != nil {
			tb.Fatal(err)
		}
		list = append(list, f)
	}
	return list
}

func same(a, b Message) bool {
	return a.At == b.At && a.Delay == b.Delay && a.Topic == b.Topic && bytes.Equal(a.Payload, b.Payload)
}

// The seed is the only source of chance.
func TestSameSeedSameBytes(t *testing.T) {
	for _, rig := range []string{"example", "minimal"} {
		cfg := load(t, rig)
		o := Options{Seed: 7, Scenario: Quick, Rate: 20, Faults: faulty(t, "malformed@20s", "reorder@30s", "burst@40s")}
		a, b := play(t, cfg, o), play(t, cfg, o)
		if !slices.EqualFunc(a, b, same) {
			t.Errorf("%s: two rehearsals with one seed differ", rig)
		}
		o.Seed = 8
		if slices.EqualFunc(a, play(t, cfg, o), same) {
			t.Errorf("%s: another seed gives the same rehearsal", rig)
		}
	}
}

// A fast rehearsal takes less device time; the engine goes through the same.
func TestSpeed(t *testing.T) {
	cfg := load(t, "example")
	msgs := play(t, cfg, Options{Scenario: Quick, Speed: 10})
	r, err := New(cfg, Options{Scenario: Quick, Speed: 10})
	if err != nil {
		t.Fatal(err)
	}
	// A tenth of the length of the quick test, at 50 packs per second of it.
	if want := total(r.plan) / 10; r.Length() != want || len(msgs) != int(math.Ceil(50*want.Seconds())) || msgs[len(msgs)-1].At-epoch > int64(want) {
		t.Errorf("%d messages in %v, want a tenth of %v", len(msgs), r.Length(), total(r.plan))
	}
}

// What the watch sees of a rehearsal is what was played.
func TestWatched(t *testing.T) {
	cfg := load(t, "example")
	for _, scenario := range []Scenario{Quick, Full} {
		if testing.Short() && scenario != Quick {
			continue
		}
		t.Run(scenario.String(), func(t *testing.T) {
			r, err := New(cfg, Options{Seed: 1, Scenario: scenario, Rate: 20, Start: epoch})
			if err != nil {
				t.Fatal(err)
			}
			limit, allowance := math.Inf(1), int64(0)
			for _, b := range cfg.Compute.EGT.Bands {
				if b.Kind == egt.KindRun && b.Limit < limit {
					limit, allowance = b.Limit, b.Allowance
				}
			}
			var (
				seen          = map[string]map[monitor.ChokeState]time.Duration{}
				unchokedArmed time.Duration // the longest in one go
				unchokedNow   time.Duration
				over, longest time.Duration // indicated EGT above limit in one go
				overElsewhere time.Duration
				balance       = map[int][]float64{} // by segment
				phases        = map[monitor.Phase]bool{}
				points        int
			)
			for i, s := range r.plan {
				if s.Name == "idle" || s.Name == "steady" || strings.HasPrefix(s.Name, "point") {
					balance[i] = nil
				}
			}
			period := time.Duration(cfg.Align.Period)
			watch(t, r, cfg, func(p *monitor.OperatingPoint) {
				points++
				segment := r.Status().Segment
				if seen[segment] == nil {
					seen[segment] = map[monitor.ChokeState]time.Duration{}
				}
				seen[segment][p.Choke] += period
				phases[p.Phase] = true
				unchokedNow += period
				if !p.ChokeArmed || p.Choke != monitor.Unchoked {
					unchokedNow = 0
				}
				unchokedArmed = max(unchokedArmed, unchokedNow)
				if p.V[monitor.EGTIndicated] > limit {
					over += period
					if segment != "rich acceleration" && over == period {
						overElsewhere += period
					}
				} else {
					over = 0
				}
				longest = max(longest, over)
				// The second half of a segment at one speed is steady, thermocouples too.
				_, level := balance[r.at]
				if s := &r.plan[r.at]; level && r.now-r.begun > seconds(s.Seconds/2) {
					balance[r.at] = append(balance[r.at], p.V[monitor.FlowBalance]/p.V[monitor.MassFlow])
				}
			})
			if wantPoints := int(r.Length() / period); points < wantPoints-5 {
				t.Errorf("%d operating points of %d", points, wantPoints)
			}
			// Air and fuel against the nozzle's own flow: 1 % is what the stated
			// uncertainties of this rig add up to at idle, where the nozzle's flow is five
			// times as sensitive to pressure as choked.
			for i, b := range balance {
				var mean float64
				for _, v := range b {
					mean += v / float64(len(b))
				}
				if len(b) < 20 || !(math.Abs(mean) < 0.01) {
					t.Errorf("%s: flow balance %.2f %% of %d points", r.plan[i].Name, 100*mean, len(b))
				}
			}
			for segment, want := range map[string]monitor.ChokeState{
				"off": monitor.NoFlow, "idle": monitor.Unchoked, "recovery": monitor.Choked, "rich acceleration": monitor.Choked,
			} {
				var all time.Duration
				for _, d := range seen[segment] {
					all += d
				}
				if got := seen[segment][want]; all == 0 || float64(got) < 0.8*float64(all) {
					t.Errorf("%s: %v of %v %v", segment, got, all, want)
				}
			}
			if unchokedArmed < 2*time.Second || unchokedArmed > 6*time.Second {
				t.Errorf("unchoked while armed for %v, want the length of the chop", unchokedArmed)
			}
			if over := longest - time.Duration(allowance); over < 500*time.Millisecond || over > 4*time.Second {
				t.Errorf("indicated EGT above %g K for %v, allowance %v", limit, longest, time.Duration(allowance))
			}
			if overElsewhere > 0 {
				t.Errorf("indicated EGT passes its limit outside the rich acceleration")
			}
			for _, p := range []monitor.Phase{monitor.Off, monitor.Cranking, monitor.Lighting, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating, monitor.Rundown} {
				if !phases[p] {
					t.Errorf("phase %v was not seen", p)
				}
			}
		})
	}
}

// The alarms of a rehearsal without faults are the two that it is meant to raise:
// choke is lost while armed, and an EGT allowance is used up and exceeded.
func TestAlarms(t *testing.T) {
	bundle, cfg, _ := config.Load("../../../testdata/rigs/example.yaml")
	m := pipeline.NewMachine(func(b []byte) (pipeline.Config, error) {
		cfg, faults := config.Parse(b)
		if len(faults) > 0 {
			return cfg, errors.New(faults[0].String())
		}
		return cfg, nil
	})
	r, err := New(cfg, Options{Seed: 2, Scenario: Quick, Rate: 20, Start: epoch})
	if err != nil {
		t.Fatal(err)
	}
	var (
		s      pipeline.State
		record = ingest.Record{Host: epoch - 1e9}
		raised = map[string]bool{}
	)
	step := func(kind ingest.Kind, topic string, payload []byte) {
		record.Seq++
		record.Kind, record.Topic, record.Payload = kind, topic, payload
		for _, o := range m.Step(&s, &record) {
			if o.Kind == pipeline.OutcomeAlarm && alarm.State(o.Alarm.State) == alarm.Unacknowledged {
				raised[o.Alarm.Rule] = true
			}
		}
	}
	step(ingest.KindBoot, "", []byte("{}"))
	step(ingest.KindConfig, "", bundle.Marshal())
	var msgs []Message
	for more := true; more; {
		msgs, more = r.Next(msgs[:0])
		for _, x := range msgs {
			record.Host = x.At + x.Delay
			step(ingest.KindMessage, x.Topic, x.Payload)
		}
	}
	want := map[string]bool{"unchoke": true, "egt_run_max_over": true, "egt_run_max_exceeded": true}
	if !maps.Equal(raised, want) {
		t.Errorf("alarms %v, want %v", raised, want)
	}
}

// watch plays r through alignment and computation.
func watch(t *testing.T, r *Rig, cfg pipeline.Config, each func(*monitor.OperatingPoint)) {
	t.Helper()
	a, as := align.New(cfg.Align), align.State{}
	a.Reset(&as, nil)
	c, err := compute.New(cfg.Compute)
	if err != nil {
		t.Fatal(err)
	}
	var cs compute.State
	c.Reset(&cs, nil)
	scan := monitor.NewScan(len(cfg.Align.Channels))
	var p monitor.OperatingPoint
	var msgs []Message
	for more := true; more; {
		msgs, more = r.Next(msgs[:0])
		for _, m := range msgs {
			record := ingest.Record{Host: m.At + m.Delay, Kind: ingest.KindMessage, Topic: m.Topic, Payload: m.Payload}
			if res := a.Message(&as, &record, false); res == nil || res.Faults.Total() > 0 {
				t.Fatalf("message at %v is not understood: %s", r.Status().Elapsed, m.Payload)
			}
			for a.Scan(&as, record.Host, scan) {
				c.Step(&cs, scan, &p)
				each(&p)
			}
		}
	}
	if n := as.Counters[ingest.ReasonUnknownChannel] + as.Counters[ingest.ReasonUnit] + as.Counters[ingest.ReasonLate]; n > 0 {
		t.Errorf("%d samples of unknown channel, unit or time", n)
	}
}

// Mass is conserved in the plant to rounding: W8 = W2 (1 − blown off − bled) + Wf.
func TestFlowCloses(t *testing.T) {
	cfg := load(t, "example")
	r, err := New(cfg, Options{Scenario: Full, Rate: 20})
	if err != nil {
		t.Fatal(err)
	}
	for more := true; more; {
		_, more = r.Next(nil)
		p := r.plant
		if sum := p.airFlow*(1-p.bleed-cfg.Compute.Stations.BleedShare) + p.fuelFlow; math.Abs(sum-p.gasFlow) > 1e-12*(1+p.gasFlow) {
			t.Fatalf("%v: air and fuel %.15g, nozzle %.15g kg/s", r.now, sum, p.gasFlow)
		}
		for _, v := range []float64{p.n, p.npr, p.egt, p.t7, p.gasFlow, p.bellmouth, p.thrust, p.cell} {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				t.Fatalf("%v: %+v", r.now, p.state)
			}
		}
	}
}

// At station 7 the gas that moves is the gas that flows, and what the sensors read there
// follows from its static state; the fuel is that of the heat balance.
func TestStation7(t *testing.T) {
	cfg := load(t, "example")
	r, err := New(cfg, Options{Scenario: Quick, Rate: 20})
	if err != nil {
		t.Fatal(err)
	}
	c := &cfg.Compute
	checked := 0
	for more := true; more; {
		_, more = r.Next(nil)
		p := r.plant
		if !(p.flame > 0.999 && p.npr > 1.2 && p.bleed < 1e-6) {
			continue
		}
		war, err := gas.HumidityRatio(p.humidity, p.ambient, p.barometer)
		if err != nil {
			t.Fatal(err)
		}
		core := p.airFlow * (1 - c.Stations.BleedShare)
		g, err := gas.NewMixture(c.Fuel, p.fuelFlow*(1+war)/core, war)
		if err != nil {
			t.Fatal(err)
		}
		air, err := gas.NewMixture(c.Fuel, 0, war)
		if err != nil {
			t.Fatal(err)
		}
		v := math.Sqrt(2 * (g.H(p.t7) - g.H(p.t7Static)))
		flow := c.Recovery.Area * p.p7Static / (g.R() * p.t7Static) * v
		isentropic := g.S0(p.t7) - g.S0(p.t7Static) - g.R()*math.Log(p.p7/p.p7Static)
		const zero = 298.15
		in := core*(air.H(p.inletT)-air.H(zero)) + p.fuelFlow*c.Heat.Efficiency*c.Heat.HeatingValue
		out := (core + p.fuelFlow) * (g.H(p.t7) - g.H(zero))
		if math.Abs(flow/p.gasFlow-1) > 1e-6 || math.Abs(isentropic) > 1e-6*g.R() || math.Abs(in/out-1) > 2e-3 {
			t.Fatalf("%v: flow %.9g of %.9g kg/s, %g J/(kg K), heat in %.9g, out %.9g W", r.now, flow, p.gasFlow, isentropic, in, out)
		}
		if read := p.t7Static + c.Recovery.Factor*(p.t7-p.t7Static); !(read < p.t7 && read > p.t7-3) {
			t.Fatalf("%v: probes read %g K of %g", r.now, read, p.t7)
		}
		checked++
	}
	if checked < 300 {
		t.Errorf("%d instants checked", checked)
	}
}

// A rig of every other source is played and watched to agreement: T7 from the heat
// balance, dew point, position, reheat, wall taps.
func TestOtherSources(t *testing.T) {
	b, cfg, faults := config.Load("../../../testdata/config/good/sources.yaml")
	if len(faults) > 0 {
		t.Fatal(b.Files[0].Name, faults)
	}
	r, err := New(cfg, Options{Seed: 4, Scenario: Quick, Start: epoch})
	if err != nil {
		t.Fatal(err)
	}
	choked, closed, scans := 0, 0, 0
	watch(t, r, cfg, func(p *monitor.OperatingPoint) {
		scans++
		if p.Warnings&monitor.WarnAssumedHumidity != 0 && scans > 40 {
			t.Fatalf("scan %d: %x", scans, p.Warnings)
		}
		if p.Choke != monitor.Choked || p.Phase != monitor.Steady {
			return
		}
		choked++
		plant := r.plant
		off := func(q monitor.Quantity, want float64) float64 { return math.Abs(p.V[q]/want - 1) }
		if p.TemperatureBy == monitor.SourceHeatBalance && off(monitor.TotalTemperature, plant.t7) < 0.02 &&
			off(monitor.MassFlow, plant.gasFlow) < 0.02 && off(monitor.ThroatArea, plant.throat) < 0.01 {
			closed++
		}
	})
	if choked < 60 || closed < choked*9/10 {
		t.Errorf("%d scans, %d steady and choked, of which %d agree with the plant", scans, choked, closed)
	}
}

// Without faults every reading is a whole number of ADC steps, inside the range of
// its channel, and in every format.
func TestReadings(t *testing.T) {
	for name, cfg := range map[string]pipeline.Config{
		"example": load(t, "example"), "minimal": load(t, "minimal"), "invented": invented(t),
	} {
		t.Run(name, func(t *testing.T) {
			seen := make([]int, len(cfg.Compute.Channels))
			var r *Rig
			r, err := New(cfg, Options{Seed: 3, Scenario: Quick, Start: epoch})
			if err != nil {
				t.Fatal(err)
			}
			d := decode.New(decode.Limits{})
			var msgs []Message
			for more := true; more; {
				msgs, more = r.Next(msgs[:0])
				for _, m := range msgs {
					g := r.groups[slices.IndexFunc(r.groups, func(g group) bool { return g.topic == m.Topic })]
					res := d.Decode(g.format, m.Topic, m.Payload, m.At)
					if res.Faults.Total() > 0 || !res.DeviceTime {
						t.Fatalf("%q: %v", m.Payload, res.Fault)
					}
					for _, s := range res.Samples {
						k := slices.Index(g.names, string(s.Name))
						if g.format == decode.Value {
							k = 0
						}
						if k < 0 {
							t.Fatalf("name %q is not of %q", s.Name, m.Topic)
						}
						i := g.channels[k]
						seen[i]++
						ch := &cfg.Compute.Channels[i]
						if v, q := ch.Convert(s.Value); q != monitor.QualityGood {
							t.Fatalf("%s: raw %g is %g: %v", ch.ID, s.Value, v, q)
						}
						if code := s.Value / r.sensors[i].step; math.Abs(code-math.Round(code)) > 1e-6 {
							t.Fatalf("%s: raw %g is no whole number of steps of %g", ch.ID, s.Value, r.sensors[i].step)
						}
						if s.Time != m.At {
							t.Fatalf("%s: device time %d, want %d", ch.ID, s.Time, m.At)
						}
					}
				}
			}
			for i, n := range seen {
				if n < int(5*r.Length().Seconds())-1 {
					t.Errorf("%s: %d readings", cfg.Compute.Channels[i].ID, n)
				}
			}
		})
	}
}

// invented is a rig without a file: every dimension, reference and format, and a
// curved calibration.
func invented(tb testing.TB) pipeline.Config {
	tb.Helper()
	var cfg pipeline.Config
	cfg.Rig.ID = "bench_9"
	cfg.Align.Period = 50e6
	cfg.Align.Inputs = []align.Input{
		{Filter: "site/lines/+", Format: decode.Lines}, {Filter: "site/cbor", Format: decode.SenMLCBOR}, {Filter: "site/value/#", Format: decode.Value},
	}
	add := func(id, topic, u string, reference calib.Reference, lo, hi float64, polynomial ...float64) int {
		un, err := unit.Parse(u)
		if err != nil {
			tb.Fatal(err)
		}
		raw := un
		if len(polynomial) > 0 {
			if raw, err = unit.Parse("mA"); err != nil {
				tb.Fatal(err)
			}
		}
		cfg.Align.Channels = append(cfg.Align.Channels, align.Channel{ID: id, Topic: topic, Name: id, Raw: raw, Hold: 250e6})
		cfg.Compute.Channels = append(cfg.Compute.Channels, compute.Channel{ID: id, Spec: calib.Spec{
			Raw: raw, Unit: un, Polynomial: polynomial, Reference: reference, Port: -1, Low: lo, High: hi,
		}})
		return len(cfg.Align.Channels) - 1
	}
	st := compute.Stations{Barometer: -1, ExitPlane: -1, InletT: -1, InletP: -1, Humidity: -1, AmbientT: -1, Speed: -1, FuelFlow: -1, Bellmouth: -1, Thrust: -1, WaterFlow: -1, BleedFlow: -1, BleedT: -1}
	// 4–20 mA with a bend: 0 to 400 kPa over 4 to 20 mA, and 1 % of it in the middle.
	st.P7 = []int{add("p7", "", "kPa", calib.Gauge, -20e3, 400e3, -103, 25.9, -0.0625, 0.0013)}
	st.EGT = []int{add("egt", "", "degF", calib.ReferenceNone, 250, 1400)}
	st.EGTParallel, st.T7FromEGT = true, 0.98
	st.Barometer = add("baro", "", "inHg", calib.Absolute, 85e3, 110e3)
	cfg.Compute.Channels[st.P7[0]].Port = st.Barometer
	for i, c := range []struct {
		unit      string
		reference calib.Reference
		lo, hi    float64
	}{
		{"psi", calib.Absolute, 0, 1e6},
		{"hPa", calib.Absolute, 85e3, 110e3},
		{"kPa", calib.Gauge, -5e3, 5e3},
		{"bar", calib.Gauge, 0, 7e5},
		{"Pa", calib.Differential, -500, 500},
		{"inH2O", calib.Differential, 0, 2500},
		{"degC", calib.ReferenceNone, 233.15, 333.15},
		{"K", calib.ReferenceNone, 200, 900},
		{"mm/s", calib.ReferenceNone, 0, 0.05},
		{"g", calib.ReferenceNone, -100, 100},
		{"um", calib.ReferenceNone, 0, 2e-4},
		{"rpm", calib.ReferenceNone, 0, 500},
		{"Hz", calib.ReferenceNone, 0, 100},
		{"lb/s", calib.ReferenceNone, 0, 20},
		{"kg/h", calib.ReferenceNone, 0, 0.1},
		{"l/h", calib.ReferenceNone, 0, 2e-4},
		{"lbf", calib.ReferenceNone, 0, 1e4},
		{"%", calib.ReferenceNone, 0, 1},
		{"V", calib.ReferenceNone, 20, 32},
		{"mA", calib.ReferenceNone, 0.004, 0.02},
		{"kg/l", calib.ReferenceNone, 700, 900},
		{"MJ/kg", calib.ReferenceNone, 42e6, 44e6},
		{"m2", calib.ReferenceNone, 0.001, 0.01},
		{"deg", calib.ReferenceNone, -1, 1},
	} {
		topic := []string{"", "site/lines/a", "site/cbor"}[i%3]
		add("x"+string(rune('a'+i)), topic, c.unit, c.reference, c.lo, c.hi)
	}
	add("alone", "site/value/alone", "degC", calib.ReferenceNone, 233.15, 400)
	cfg.Compute.Stations = st
	cfg.Compute.Nozzle.ThroatArea = 0.01
	return cfg
}

// Calibration of the inverse is the identity on the range.
func TestInverse(t *testing.T) {
	k, _ := unit.Parse("kPa")
	c, _ := unit.Parse("degC")
	for _, tt := range []struct {
		name string
		spec calib.Spec
	}{
		{"none", calib.Spec{Unit: k, Low: -1e3, High: 5e3}},
		{"line, falling", calib.Spec{Unit: k, Polynomial: []float64{10, -0.25}, Low: -1e3, High: 5e3}},
		{"bend", calib.Spec{Unit: k, Polynomial: []float64{-103, 25.9, -0.0625, 0.0013}, Low: 0, High: 400e3}},
		{"zero is a code", calib.Spec{Unit: k, Polynomial: []float64{-1, 2, 0.1}, Codes: []float64{0}, Low: -2e3, High: 9e3}},
		// Type K, 0 to 500 °C, inverse coefficients of NIST monograph 175, mV.
		{"type K", calib.Spec{Unit: c, Polynomial: []float64{0, 2.508355e1, 7.860106e-2, -2.503131e-1, 8.315270e-2, -1.228034e-2, 9.804036e-4, -4.413030e-5, 1.057734e-6, -1.052755e-8}, Low: 274, High: 770}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			inv, err := newInverse(&tt.spec)
			if err != nil {
				t.Fatal(err)
			}
			for i := range 101 {
				want := tt.spec.Low + (tt.spec.High-tt.spec.Low)*float64(i)/100
				got := tt.spec.Unit.ToSI(inv.raw(want))
				if len(tt.spec.Polynomial) > 0 {
					got = calibrated(&tt.spec, inv.raw(want))
				}
				if math.Abs(got-want) > 1e-9*math.Abs(tt.spec.High) {
					t.Errorf("%g comes back as %g", want, got)
				}
			}
		})
	}
	for _, bad := range []calib.Spec{
		{Unit: k, Polynomial: []float64{3}, High: 1},
		{Unit: k, Polynomial: []float64{0, 0, 1}, Low: -5e3, High: 5e3}, // a parabola has no negative values
	} {
		if _, err := newInverse(&bad); err == nil {
			t.Errorf("polynomial %v for %g to %g Pa gives no error", bad.Polynomial, bad.Low, bad.High)
		}
	}
}

func TestNewErrors(t *testing.T) {
	good := func() pipeline.Config { return invented(t) }
	for _, tt := range []struct {
		name   string
		change func(*pipeline.Config, *Options)
		want   string
	}{
		{"rate", func(_ *pipeline.Config, o *Options) { o.Rate = 5000 }, "packs per second"},
		{"speed", func(_ *pipeline.Config, o *Options) { o.Speed = -1 }, "speed -1"},
		{"scenario", func(_ *pipeline.Config, o *Options) { o.Scenario = 9 }, "scenario 9"},
		{"no channels", func(c *pipeline.Config, _ *Options) { c.Align.Channels, c.Compute.Channels = nil, nil }, "no channels"},
		{"no area", func(c *pipeline.Config, _ *Options) { c.Compute.Nozzle.ThroatArea = 0 }, "throat area"},
		{"no range", func(c *pipeline.Config, _ *Options) { c.Compute.Channels[4].High = c.Compute.Channels[4].Low }, `"xb" has no range`},
		{"no channel of a fault", func(_ *pipeline.Config, o *Options) { o.Faults = faulty(t, "probe-open@1s:egt_99") }, `no channel "egt_99"`},
		{"no barometer", func(c *pipeline.Config, o *Options) {
			c.Compute.Stations.Barometer = -1
			o.Faults = faulty(t, "barometer-loss@1s")
		}, "name one"},
		{"no unit", func(_ *pipeline.Config, o *Options) { o.Faults = faulty(t, "wrong-unit@1s:xb") }, "names no unit"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			cfg, o := good(), Options{}
			tt.change(&cfg, &o)
			if _, err := New(cfg, o); err == nil || !strings.Contains(err.Error(), tt.want) {
				t.Errorf("error %v, want one about %q", err, tt.want)
			}
		})
	}
}

// Run keeps the order, paces at least once per instant and stops with the first
// error.
func TestRun(t *testing.T) {
	cfg := load(t, "example")
	r, err := New(cfg, Options{Scenario: Quick, Start: epoch, Faults: faulty(t, "publisher-silent@5s+3s")})
	if err != nil {
		t.Fatal(err)
	}
	var paced, published int
	last := int64(0)
	pace := func(_ context.Context, due int64) error {
		if due < last {
			t.Fatalf("due %d after %d", due, last)
		}
		last = due
		paced++
		return nil
	}
	if err := Run(t.Context(), r, pace, func(context.Context, Message) error { published++; return nil }); err != nil {
		t.Fatal(err)
	}
	if n := int(r.Length().Seconds() * 50); paced < n || published != n-150 {
		t.Errorf("%d paced, %d published of %d instants with 150 silent ones", paced, published, n)
	}
	full := errors.New("queue full")
	r, _ = New(cfg, Options{Start: last})
	if err := Run(t.Context(), r, pace, func(context.Context, Message) error { return full }); !errors.Is(err, full) {
		t.Errorf("error %v, want that of the publisher", err)
	}
}

func BenchmarkNext(b *testing.B) {
	for _, rig := range []string{"example", "minimal"} {
		b.Run(rig, func(b *testing.B) {
			cfg := load(b, rig)
			b.ReportAllocs()
			var r *Rig
			var msgs []Message
			var size, count, values int
			more := false
			for b.Loop() {
				if !more {
					r, _ = New(cfg, Options{Seed: uint64(count), Scenario: Quick})
				}
				msgs, more = r.Next(msgs[:0])
				for _, m := range msgs {
					size += len(m.Payload)
					count++
				}
				values += len(r.readings)
			}
			b.ReportMetric(float64(count)/b.Elapsed().Seconds(), "messages/s")
			b.ReportMetric(float64(values)/b.Elapsed().Seconds(), "values/s")
			b.ReportMetric(float64(size)/float64(max(count, 1)), "B/message")
		})
	}
}

// A rest stands before the test and after it; nothing turns in it.
func TestRest(t *testing.T) {
	cfg := load(t, "example")
	const rest = 20 * time.Second
	plain, err := New(cfg, Options{Scenario: Quick, Rate: 2})
	if err != nil {
		t.Fatal(err)
	}
	r, err := New(cfg, Options{Scenario: Quick, Rate: 2, Rest: rest})
	if err != nil {
		t.Fatal(err)
	}
	if got, want := r.Length(), plain.Length()+2*rest; got != want {
		t.Errorf("length %v, want %v", got, want)
	}
	var msgs []Message
	for more := true; more; {
		msgs, more = r.Next(msgs[:0])
		if st := r.Status(); (st.Elapsed < rest || st.Elapsed > st.Total-2*time.Second) && st.Speed > 50 {
			t.Fatalf("after %v it turns at %g rpm", st.Elapsed, st.Speed)
		}
	}
	for _, bad := range []time.Duration{-time.Second, 2 * time.Hour} {
		if _, err := New(cfg, Options{Scenario: Quick, Rest: bad}); err == nil {
			t.Errorf("a rest of %v is taken", bad)
		}
	}
}
