package compute_test

import (
	"bytes"
	"encoding/gob"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/uncertainty"
)

// watched is full with a window of 20 s.
func watched(tb testing.TB) *builder {
	tb.Helper()
	b := full(tb)
	b.Steady = compute.Steadiness{
		Window: steady.Window{Width: second / 2, Bins: 40}, Dwell: 3 * second,
		Pressure: 0.0025 / 60, Temperature: 6.0 / 60, Speed: 0.0025 / 60,
	}
	b.Bellmouth.Area = 0.0497 // with which running() nearly closes
	for id, u := range map[string]calib.Uncertainty{
		"fuel_flow": {Fixed: 1e-3, Random: 2e-4}, "dp_bellmouth": {Fixed: 15, Random: 20}, "humidity": {Fixed: 0.02},
	} {
		u.Stated = true
		b.Channels[slices.IndexFunc(b.Channels, func(c compute.Channel) bool { return c.ID == id })].Uncertainty = u
	}
	return b
}

// noisy steps n scans of a choked point; change may alter readings of a scan.
func (r *rig) noisy(random *rand.Rand, n int, change func(k int, readings map[string]float64)) {
	noise := map[string]float64{"p7": 40, "t7": 0.4, "eg": 0.4, "dp": 10, "fu": 1e-4, "sp": 3, "p_": 2}
	for k := range n {
		readings := running()
		ids := make([]string, 0, len(readings))
		for id := range readings {
			ids = append(ids, id)
		}
		slices.Sort(ids)
		for _, id := range ids {
			readings[id] += noise[id[:2]] * random.NormFloat64()
		}
		if change != nil {
			change(k, readings)
		}
		r.set(readings)
		r.step()
	}
}

// The effective area is that of steady.EffectiveArea, and its uncertainty too where
// nothing is shared; the balance is the difference of two flows with theirs.
func TestEffectiveArea(t *testing.T) {
	b := full(t)
	for i := range b.Channels {
		if i == b.Stations.Barometer || i == b.Stations.FuelFlow {
			b.Channels[i].Uncertainty.Fixed, b.Channels[i].Uncertainty.Random = 1e-9, 0 // what is shared
		}
	}
	r := b.rig().lit(100)
	p := r.step()
	v := &p.V
	budget, ok := r.c.Budget()
	if !ok {
		t.Fatal("no budget")
	}
	flow := budget.Outputs[1]
	square := 0.0
	for _, in := range flow.Inputs {
		if in.Name != uncertainty.ThroatArea.String() {
			square += in.Contribution * in.Contribution
		}
	}
	w, w8 := v[monitor.IndependentFlow], v[monitor.MassFlow]
	area, relative := steady.EffectiveArea(&steady.Throat{
		Flow:        steady.Known{Value: w, U: v[monitor.IndependentFlowU95] / uncertainty.Coverage / w},
		GasConstant: v[monitor.GasConstant], Temperature: steady.Known{Value: v[monitor.TotalTemperature]},
		Pressure:  steady.Known{Value: v[monitor.TotalPressure]},
		Parameter: steady.Known{Value: v[monitor.FlowParameter] / v[monitor.DischargeCoefficient], U: math.Sqrt(square) / w8},
		Discharge: steady.Known{Value: v[monitor.DischargeCoefficient]},
	})
	compare(t, "choked", p, 1e-6, map[monitor.Quantity]float64{
		monitor.EffectiveArea: area, monitor.EffectiveAreaU95: uncertainty.Coverage * area * relative,
		monitor.FlowBalance:    w - w8,
		monitor.FlowBalanceU95: math.Hypot(v[monitor.IndependentFlowU95], v[monitor.MassFlowU95]),
	})
}

// One barometer is in both flows: moved by its uncertainty, the residual moves by what
// it contributes to the uncertainty of the residual.
func TestBalanceSharesTheBarometer(t *testing.T) {
	at := func(baro float64, u calib.Uncertainty) *monitor.OperatingPoint {
		b := only(full(t), "p_baro", u)
		b.Stations.P7Watch.Sampling, b.Stations.T7Watch.Sampling = 1e-12, 1e-12
		return b.rig().set(running()).set(map[string]float64{"p_baro": baro}).steps(100)
	}
	const u = 300.0
	without := at(99800, calib.Uncertainty{Fixed: 1e-6}).V[monitor.FlowBalanceU95]
	with := at(99800, calib.Uncertainty{Fixed: u}).V[monitor.FlowBalanceU95]
	moved := at(99800+u, calib.Uncertainty{Fixed: u}).V[monitor.FlowBalance] - at(99800, calib.Uncertainty{Fixed: u}).V[monitor.FlowBalance]
	if got := math.Sqrt(with*with - without*without); !near(got, math.Abs(moved), 0.02) {
		t.Errorf("the barometer contributes %g kg/s, the residual moves by %g", got, moved)
	}
	apart := math.Hypot(at(99800, calib.Uncertainty{Fixed: u}).V[monitor.IndependentFlowU95], at(99800, calib.Uncertainty{Fixed: u}).V[monitor.MassFlowU95])
	if with >= apart {
		t.Errorf("balance ± %g, as if there were two barometers: ± %g", with, apart)
	}
}

// The baseline is the residual of the engine itself, learned while steady; a leak of 2 %
// after the bellmouth departs from it, and is said. What the run leaves behind is the
// mean effective area of its steady choked scans.
func TestBaselineAndRun(t *testing.T) {
	r := watched(t).rig().lit(100)
	random := rand.New(rand.NewPCG(5, 5))
	r.noisy(random, 30*20, nil)
	if !r.p.Steady || r.p.NotSteady != monitor.NoReason {
		t.Fatalf("steady %v, %v", r.p.Steady, r.p.NotSteady)
	}
	var sum, n float64
	r.noisy(random, 90*20, func(int, map[string]float64) {
		if r.p.Steady {
			sum += r.p.V[monitor.FlowBalance] / r.p.V[monitor.MassFlow]
			n++
		}
	})
	p := &r.p
	baseline := p.V[monitor.FlowBalanceBaseline] / p.V[monitor.MassFlow]
	if math.Abs(baseline-sum/n) > 5e-4 || p.Warnings&monitor.WarnFlowBalance != 0 {
		t.Errorf("baseline %.5f of the flow, mean residual %.5f, warns %v", baseline, sum/n, p.Warnings&monitor.WarnFlowBalance != 0)
	}
	area, ok := r.s.Area.Of("x-1")
	if !ok || area.Run != "x-1" || !near(area.Area, p.V[monitor.ThroatArea]*(1+baseline), 1e-3) || area.Steady < 80*second ||
		!(area.Random > 1e-6 && area.Random < 1e-3) || !(area.Systematic > area.Random && area.Systematic < 0.01) {
		t.Errorf("%+v, %v", area, ok)
	}
	warned := 0
	r.noisy(random, 40*20, func(_ int, readings map[string]float64) {
		readings["dp_bellmouth"] *= 1.04
		if r.p.Warnings&monitor.WarnFlowBalance != 0 {
			warned++
		}
	})
	if warned < 10*20 || math.Abs(r.p.V[monitor.FlowBalanceBaseline]/r.p.V[monitor.MassFlow]-baseline) > 3e-3 {
		t.Errorf("a leak of 2 %%: warned in %d scans, baseline %.5f after %.5f", warned, r.p.V[monitor.FlowBalanceBaseline]/r.p.V[monitor.MassFlow], baseline)
	}
	var none compute.Area
	if _, ok := none.Of("x"); ok {
		t.Error("an area of nothing")
	}
}

// An EGT that rises by 6 K/min reaches its limit when it says, with the limit of the
// lowest band above it; a margin that falls is forecast to the loss of choke.
func TestForecast(t *testing.T) {
	b := watched(t)
	b.EGT.Bands[0].Limit = 920 // mean of running 916
	r := b.rig().lit(100)
	random := rand.New(rand.NewPCG(9, 9))
	seconds := func(k int) float64 { return float64(k) / 20 }
	hold, given := 0, 0
	r.noisy(random, 40*20, func(k int, readings map[string]float64) {
		for _, id := range []string{"egt_1", "egt_2", "egt_3", "egt_4"} {
			readings[id] += 0.1 * seconds(k)
		}
		if v := &r.p.V; r.p.NoEGTLimit == monitor.NoReason && k > 0 {
			given++
			left := (920-916)/0.1 - seconds(k-1)
			if v[monitor.EGTLimitInLow95] <= left && left <= v[monitor.EGTLimitInHigh95] && v[monitor.EGTLimitIn] > 0 {
				hold++
			}
		}
	})
	if given < 100 || float64(hold) < 0.8*float64(given) {
		t.Errorf("EGT: %d forecasts, %d hold the truth", given, hold)
	}
	if r.p.NoChokeLoss != monitor.ReasonNoTrend || !math.IsNaN(r.p.V[monitor.ChokeLossIn]) {
		t.Errorf("choke: %v, %g s", r.p.NoChokeLoss, r.p.V[monitor.ChokeLossIn])
	}

	// Rake pressure falls by 1 kPa/s from a margin of about 22 %: past zero in some 40 s.
	r = watched(t).rig().lit(100)
	var at, margin []float64
	r.noisy(random, 60*20, func(k int, readings map[string]float64) {
		for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
			readings[id] -= 1000 * seconds(k)
		}
		at, margin = append(at, r.p.V[monitor.ChokeLossIn]), append(margin, r.p.V[monitor.ChokeMarginPercent])
	})
	lost := slices.IndexFunc(margin, func(m float64) bool { return m < 0 })
	checked := 0
	for k, s := range at[:lost] {
		if !math.IsNaN(s) {
			checked++
			if left := float64(lost-k) / 20; math.Abs(s-left) > 1+0.15*left {
				t.Fatalf("%g s before the loss of choke the forecast is %g s", left, s)
			}
		}
	}
	if checked < 100 || r.p.NoChokeLoss != monitor.ReasonPastLimit {
		t.Errorf("%d forecasts; after the loss %v", checked, r.p.NoChokeLoss)
	}
}

// Why there is no steady state or no forecast is said.
func TestReasons(t *testing.T) {
	if p := full(t).rig().lit(100).step(); p.NotSteady != monitor.ReasonNotConfigured || p.NoChokeLoss != monitor.ReasonNotConfigured || p.NoEGTLimit != monitor.ReasonNotConfigured {
		t.Errorf("nothing asked: %v %v %v", p.NotSteady, p.NoChokeLoss, p.NoEGTLimit)
	}
	r := watched(t).rig().lit(100)
	if p := &r.p; p.NotSteady != monitor.ReasonFilling || p.NoChokeLoss != monitor.ReasonNotEnough || p.Steady {
		t.Errorf("at first: %v %v", p.NotSteady, p.NoChokeLoss)
	}
	random := rand.New(rand.NewPCG(2, 2))
	r.noisy(random, 40*20, nil)
	if p := &r.p; !p.Steady || p.NoChokeLoss != monitor.ReasonNoTrend && p.NoChokeLoss != monitor.NoReason {
		t.Errorf("after 40 s: %v %v", p.NotSteady, p.NoChokeLoss)
	}
	// The rotor moves: the phase ends at once, the window with it.
	r.noisy(random, 40, func(k int, readings map[string]float64) { readings["speed"] += 15 * float64(k) })
	if p := &r.p; p.Steady || p.NotSteady == monitor.NoReason || p.NoEGTLimit != monitor.ReasonNotSteady {
		t.Errorf("accelerating: %v, %v, %v", p.Phase, p.NotSteady, p.NoEGTLimit)
	}
	// No band above.
	b := watched(t)
	b.EGT.Bands[0].Limit = 700
	if p := b.rig().lit(100).step(); p.NoEGTLimit != monitor.ReasonNoLimit {
		t.Errorf("above all limits: %v", p.NoEGTLimit)
	}
	// The codes are those of package steady, in their order.
	for w := steady.Filling; w <= steady.Dwell; w++ {
		if got := (monitor.ReasonFilling + monitor.Reason(w-steady.Filling)).String(); got != w.String() {
			t.Errorf("%v is called %q", w, got)
		}
	}
	for w := steady.NotSteady; w <= steady.TooFarAhead; w++ {
		if got := (monitor.ReasonNotSteady + monitor.Reason(w-steady.NotSteady)).String(); got != w.String() {
			t.Errorf("%v is called %q", w, got)
		}
	}
}

// Without rotor speed there is no phase; the window alone tells what is steady.
func TestSteadyWithoutSpeed(t *testing.T) {
	b := watched(t)
	b.Stations.Speed = -1
	r := b.rig().set(running())
	random := rand.New(rand.NewPCG(4, 4))
	r.noisy(random, 60*20, nil)
	if p := &r.p; !p.Steady || p.Phase != monitor.PhaseUnknown || p.NoChokeLoss == monitor.ReasonNotSteady {
		t.Errorf("%v, %v, %v", p.Steady, p.NotSteady, p.NoChokeLoss)
	}
}

// The shares of a budget make one, those behind an input make its share; what is not
// stated comes first, and then no share is known.
func TestBudget(t *testing.T) {
	b, read := tapped(t)
	b.Stations.P7Watch.Sampling, b.Stations.T7Watch.Sampling = 0, 0
	b.Recovery = compute.Recovery{Factor: 0.95, Area: 0.055, U95: 0.05}
	r := b.rig()
	if _, ok := r.c.Budget(); ok {
		t.Error("a budget before the first scan")
	}
	r.lit(100)
	for range 40 * 20 {
		read(r)
		r.step()
	}
	check := func(name string, want map[string]bool) {
		t.Helper()
		budget, ok := r.c.Budget()
		if !ok || budget.T != r.p.T || budget.Scan != r.p.Scan || len(budget.Outputs) != 4 {
			t.Fatalf("%s: %+v, %v", name, budget, ok)
		}
		for i, u := range []monitor.Quantity{monitor.ChokeMarginPercentU95, monitor.MassFlowU95, monitor.GrossThrustU95, monitor.FlowBalanceU95} {
			o := &budget.Outputs[i]
			if o.U95 != r.p.V[u] || o.Value != r.p.V[o.Quantity] {
				t.Errorf("%s: %s %g ± %g", name, o.Quantity.Info().Name, o.Value, o.U95)
			}
			all, last := 0.0, math.Inf(1)
			for _, in := range o.Inputs {
				parts := 0.0
				for _, part := range in.Parts {
					parts += part.Share
					what := part.What
					if part.Channel >= 0 {
						what = r.cfg.Channels[part.Channel].ID
					}
					delete(want, what)
				}
				if math.Abs(parts-in.Share) > 1e-9 || in.Share > last {
					t.Errorf("%s: %s: %v has %g of which %g are told", name, o.Quantity.Info().Name, in.Name, in.Share, parts)
				}
				all += in.Share
				last = in.Share
			}
			if math.Abs(all-1) > 1e-9 {
				t.Errorf("%s: the shares of %s make %g", name, o.Quantity.Info().Name, all)
			}
		}
		for what := range want {
			t.Errorf("%s: nothing is said of %q", name, what)
		}
	}
	check("all there", map[string]bool{
		"p7_1": true, "p7_4": true, "p_baro": true, "p_exit": true, "t7_2": true, "fuel_flow": true, "humidity": true,
		"sampling by the places of the probes": true, "recovery factor": true, "throat area": true, "discharge coefficient": true,
		"thrust coefficient": true, "choke npr": true,
	})
	r.mark("p7_1", monitor.QualityStale).mark("p7_2", monitor.QualityStale).mark("p_exit", monitor.QualityStale).step()
	check("rake and exit plane lost", map[string]bool{"p7_wall": true, "ratio of rake to wall static pressure": true, "cell depression": true})

	b = full(t)
	b.Nozzle.DischargeU95 = 0
	r = b.rig().lit(100)
	budget, _ := r.c.Budget()
	if o := &budget.Outputs[1]; o.Inputs[0].Name != uncertainty.Discharge.String() || !math.IsNaN(o.Inputs[0].Contribution) || !math.IsNaN(o.Inputs[1].Share) || !math.IsNaN(o.U95) {
		t.Errorf("not stated: %+v", budget.Outputs[1].Inputs[0])
	}
	if o := &budget.Outputs[0]; math.IsNaN(o.U95) {
		t.Error("the margin does not need the discharge coefficient")
	}
	if r.mark("p_baro", monitor.QualityStale).step(); r.p.Choke != monitor.ChokeUnknown {
		t.Fatal(r.p.Choke)
	}
	if _, ok := r.c.Budget(); ok {
		t.Error("a budget of a scan without one")
	}
}

// The point of the mean of channels is that of a scan of them; its systematic
// uncertainty is what the scan's would be without random parts.
func TestOfMean(t *testing.T) {
	b := full(t)
	for i := range b.Channels {
		b.Channels[i].Uncertainty.Random = 0
	}
	r := b.rig().lit(100)
	p, u := r.c.OfMean(r.scan)
	for _, tt := range []struct{ q, u95 monitor.Quantity }{
		{monitor.NPR, monitor.NPRU95},
		{monitor.ChokeMarginPercent, monitor.ChokeMarginPercentU95},
		{monitor.MassFlow, monitor.MassFlowU95},
		{monitor.GrossThrust, monitor.GrossThrustU95},
		{monitor.IndependentFlow, monitor.IndependentFlowU95},
	} {
		if !near(p.V[tt.q], r.p.V[tt.q], 1e-7) || !near(u[tt.q]*uncertainty.Coverage, r.p.V[tt.u95], 1e-6) {
			t.Errorf("%s %.9g ± %.6g, of a scan %.9g ± %.6g", tt.q.Info().Name, p.V[tt.q], u[tt.q]*uncertainty.Coverage, r.p.V[tt.q], r.p.V[tt.u95])
		}
	}
	// Of channels: fixed 1 each. p7 and pb have that of the barometer too.
	for q, want := range map[monitor.Quantity]float64{
		monitor.Barometer: 1, monitor.RakePressure: math.Sqrt2, monitor.BackPressure: math.Sqrt2, monitor.TotalTemperature: 1,
		monitor.EGTIndicated: 1, monitor.FuelFlow: 1, monitor.Speed: 60, monitor.MeasuredThrust: 1,
	} {
		if !near(u[q]*uncertainty.Coverage, want, 1e-9) {
			t.Errorf("%s ± %g, want %g", q.Info().Name, u[q]*uncertainty.Coverage, want)
		}
	}
	for _, q := range []monitor.Quantity{monitor.ThroatMach, monitor.NPRU95, monitor.PChoked} {
		if !math.IsNaN(u[q]) {
			t.Errorf("%s ± %g", q.Info().Name, u[q])
		}
	}
	// By hand: X θ^a δ^b with T2 and p2 of 1 K and 1 Pa each, EGT over θ itself.
	unit := 1 / uncertainty.Coverage
	relative := func(q monitor.Quantity) float64 { return u[q] / p.V[q] }
	root := p.V[monitor.Speed] / p.V[monitor.ReferredSpeed] // √θ
	t2 := unit / (288.15 * root * root)
	p2 := unit / (101325 * p.V[monitor.GrossThrust] / p.V[monitor.ReferredThrust])
	for _, tt := range []struct {
		q, of monitor.Quantity
		a, b  float64
	}{
		{monitor.ReferredFlow, monitor.MassFlow, 0.5, 1},
		{monitor.ReferredSpeed, monitor.Speed, 0.5, 0},
		{monitor.ReferredThrust, monitor.GrossThrust, 0, 1},
		{monitor.ReferredEGT, monitor.EGTIndicated, 1, 0},
	} {
		want := math.Hypot(relative(tt.of), math.Hypot(tt.a*t2, tt.b*p2))
		if !near(relative(tt.q), want, 1e-9) {
			t.Errorf("%s ± %g relative, want %g", tt.q.Info().Name, relative(tt.q), want)
		}
	}
}

// everything is the example with every source and statistic.
func everything(tb testing.TB) *builder {
	tb.Helper()
	b := example(tb)
	st := &b.Stations
	st.WallStatic = []int{b.add("p7_wall", "Pa", calib.Gauge, st.Barometer)}
	st.P7Watch.Sampling, st.T7Watch.Sampling = 0, 0
	st.P7Watch.Departure, st.T7Watch.Departure = 2000, 40
	st.T7FromEGT, st.T7FactorU95 = 0.97, 0.02
	b.Recovery = compute.Recovery{Factor: 0.95, Area: 0.055, U95: 0.02}
	b.Heat = compute.HeatBalance{Efficiency: 0.995, HeatingValue: 43.1e6, U95: 0.015}
	b.Steady = watched(tb).Steady
	b.Channels[st.WallStatic[0]].Uncertainty = calib.Uncertainty{Fixed: 1, Random: 0.5, Stated: true}
	return b
}

// A state that was stored and read back goes on to the same bits.
func TestStateIsPlain(t *testing.T) {
	r := everything(t).rig()
	scans := r.scans(64)
	for i := range 90 * 20 {
		r.take(scans[i&63])
	}
	var stored bytes.Buffer
	if err := gob.NewEncoder(&stored).Encode(&r.s); err != nil {
		t.Fatal(err)
	}
	again := everything(t).rig()
	again.s, again.n = compute.State{}, r.n
	if err := gob.NewDecoder(&stored).Decode(&again.s); err != nil {
		t.Fatal(err)
	}
	for i := range 60 * 20 {
		s := scans[(i*7)&63]
		if i > 20*20 { // then the rake is lost, and after it T7
			s.Quality[r.index("p7_1")], s.Quality[r.index("p7_2")] = monitor.QualityStuck, monitor.QualityStuck
		}
		if i > 40*20 {
			s.Quality[r.index("t7_1")], s.Quality[r.index("t7_2")] = monitor.QualityStale, monitor.QualityStale
		}
		r.take(s)
		again.take(s)
		for q, v := range r.p.V {
			if math.Float64bits(v) != math.Float64bits(again.p.V[q]) {
				t.Fatalf("scan %d: %s is %v and %v", i, monitor.Quantity(q).Info().Name, v, again.p.V[q])
			}
		}
		a, b := r.p, again.p
		a.V, b.V = [monitor.NumQuantities]float64{}, [monitor.NumQuantities]float64{}
		if a != b {
			t.Fatalf("scan %d: %+v and %+v", i, a, b)
		}
	}
	if r.p.PressureBy != monitor.SourceWallStatic || r.p.TemperatureBy != monitor.SourceHeatBalance {
		t.Errorf("at the end p7 from %v, T7 from %v", r.p.PressureBy, r.p.TemperatureBy)
	}
}

func TestEverythingAllocatesNothing(t *testing.T) {
	r := everything(t).rig()
	scans := r.scans(64)
	i := 0
	step := func() { r.take(scans[i&63]); i++ }
	for range 60 * 20 {
		step()
	}
	if n := testing.AllocsPerRun(400, step); n != 0 {
		t.Errorf("%g allocations per scan", n)
	}
	for _, ids := range [][]string{{"p7_1", "p7_2"}, {"t7_1", "t7_2"}, {"fuel_flow"}} {
		for _, s := range scans {
			for _, id := range ids {
				s.Quality[r.index(id)] = monitor.QualityStale
			}
		}
		if n := testing.AllocsPerRun(100, step); n != 0 {
			t.Errorf("%g allocations per scan without %v", n, ids)
		}
	}
}

func BenchmarkEverything(b *testing.B) {
	r := everything(b).rig()
	scans := r.scans(64)
	b.ReportAllocs()
	i := 0
	sink := 0.0
	for b.Loop() {
		r.take(scans[i&63])
		sink += r.p.V[monitor.ChokeMarginPercentU95]
		i++
	}
	if math.IsNaN(sink) {
		b.Fatal("no margin")
	}
}
