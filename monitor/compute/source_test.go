package compute_test

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

// lit lets the engine of full run until it is in a steady phase.
func (r *rig) lit(n int) *rig {
	r.tb.Helper()
	r.set(running()).steps(n)
	if r.p.Phase != monitor.Steady || !r.p.Lit {
		r.tb.Fatalf("phase %v, lit %v after %d scans", r.p.Phase, r.p.Lit, n)
	}
	return r
}

// 95 kPa gauge against a barometer of 100 kPa, 0.1 kPa standard uncertainty each: by
// hand u(NPR) = √(0.001² + (0.1 (1 − 1.95)/100)²) = 0.0013793.
func TestNPRByHand(t *testing.T) {
	b := newBuilder(t)
	st := &b.Stations
	st.Barometer = b.add("p_baro", "Pa", calib.Absolute, -1)
	st.P7 = []int{b.add("p7", "Pa", calib.Gauge, st.Barometer)}
	st.T7 = []int{b.add("t7", "K", calib.ReferenceNone, -1)}
	st.DepressionU = 1e-9
	for i := range b.Channels[:2] {
		b.Channels[i].Uncertainty = calib.Uncertainty{Fixed: 100 * uncertainty.Coverage, Stated: true}
	}
	p := b.rig().set(map[string]float64{"p_baro": 100e3, "p7": 95e3, "t7": 900}).steps(2)
	if u := p.V[monitor.NPRU95] / uncertainty.Coverage; !near(p.V[monitor.NPR], 1.95, 1e-12) || !near(u, 0.0013793, 2e-5) {
		t.Errorf("NPR %.9g, u %.9g, want 1.95 and 0.0013793", p.V[monitor.NPR], u)
	}
}

// station7 gives the static state of w kg/s through area by bisection.
func station7(g *gas.Mixture, t0, p0, w, area float64) (static, pressure float64) {
	at := func(t float64) float64 { return p0 * math.Exp((g.S0(t)-g.S0(t0))/g.R()) }
	lo, hi := g.Critical(t0).Temperature, t0
	for range 80 {
		t := (lo + hi) / 2
		if area*at(t)/(g.R()*t)*math.Sqrt(2*(g.H(t0)-g.H(t))) > w {
			lo = t
		} else {
			hi = t
		}
	}
	return hi, at(hi)
}

// The probes are given what they would read in the gas that is computed from them: the
// total temperature that it began with must come out, with fuel-air ratio and flow
// closed. Indicated EGT is left alone.
func TestRecovery(t *testing.T) {
	for _, passage := range []float64{0.035, 0.055, 0.2} {
		for _, t0 := range []float64{700, 900, 1100} {
			b := full(t)
			b.Recovery = compute.Recovery{Factor: 0.9, Area: passage, U95: 0.02}
			r := b.rig().lit(120)
			read := t0 - 5
			for range 60 { // the readings that belong to t0
				r.set(map[string]float64{"t7_1": read, "t7_2": read, "t7_3": read, "t7_4": read})
				p := r.step()
				g, err := gas.NewMixture(b.Fuel, p.V[monitor.FuelAirRatio], p.V[monitor.HumidityRatio])
				if err != nil {
					t.Fatal(err)
				}
				still, _ := station7(&g, t0, p.V[monitor.RakePressure], p.V[monitor.MassFlow], passage)
				read = still + 0.9*(t0-still)
			}
			p := &r.p
			if !near(p.V[monitor.TotalTemperature], t0, 1e-8) || !(t0-read > 0.02) {
				t.Errorf("%g m², %g K: read %.6f, T7 %.9f", passage, t0, read, p.V[monitor.TotalTemperature])
			}
			if w := p.V[monitor.MassFlow]; !near(p.V[monitor.FuelAirRatio], 0.14*(1+p.V[monitor.HumidityRatio])/(w-0.14), 1e-7) {
				t.Errorf("%g m², %g K: fuel-air ratio %.9g does not close", passage, t0, p.V[monitor.FuelAirRatio])
			}
			if p.V[monitor.EGTIndicated] != (920.0+915+918+911)/4 {
				t.Errorf("indicated EGT %v is corrected", p.V[monitor.EGTIndicated])
			}
		}
	}
}

// bare is full without probes at station 7, with a heat balance.
func bare(tb testing.TB) *builder {
	tb.Helper()
	b := full(tb)
	b.Stations.T7, b.Stations.MinT7 = nil, 0
	b.Heat = compute.HeatBalance{Efficiency: 0.995, HeatingValue: 43.1e6, U95: 0.01}
	return b
}

// W2 [h_air(T2) − h_air(298.15 K)] + Wf η LHV = (W2 + Wf) [h(T7) − h(298.15 K)], term by
// term; its uncertainty is that of the terms, each moved by its own.
func TestHeatBalance(t *testing.T) {
	r := bare(t).rig().lit(100)
	p := r.step()
	if p.TemperatureBy != monitor.SourceHeatBalance || p.Warnings&monitor.WarnGasBridged != 0 || p.Choke != monitor.Choked {
		t.Fatalf("T7 from %v, %v, %v", p.TemperatureBy, p.Warnings, p.Choke)
	}
	const fuel, t2, zero = 0.14, 290.0, 298.15
	w2, war := p.V[monitor.AirFlow], p.V[monitor.HumidityRatio]
	air, err := gas.NewMixture(gas.Kerosene(), 0, war)
	if err != nil {
		t.Fatal(err)
	}
	products, err := gas.NewMixture(gas.Kerosene(), fuel*(1+war)/w2, war)
	if err != nil {
		t.Fatal(err)
	}
	in := w2*(air.H(t2)-air.H(zero)) + fuel*0.995*43.1e6
	out := (w2 + fuel) * (products.H(p.V[monitor.TotalTemperature]) - products.H(zero))
	if !near(in, out, 1e-12) || !(p.V[monitor.TotalTemperature] > 700) {
		t.Errorf("in %.12g W, out %.12g W at %g K", in, out, p.V[monitor.TotalTemperature])
	}

	// The uncertainty, by what T7 does when a term is off by its own.
	moved := func(id string, by float64) float64 {
		up, down := bare(t).rig().lit(100), bare(t).rig().lit(100)
		up.set(map[string]float64{id: running()[id] + by})
		down.set(map[string]float64{id: running()[id] - by})
		return (up.steps(2).V[monitor.TotalTemperature] - down.steps(2).V[monitor.TotalTemperature]) / 2
	}
	const u = 1.118034 / uncertainty.Coverage // of every channel: fixed 1, random 0.5
	temperature := p.V[monitor.TotalTemperature]
	meter := bare(t)
	meter.Bellmouth.Coefficient *= 1.001
	byMeter := (meter.rig().lit(100).step().V[monitor.TotalTemperature] - temperature) / 0.001 * 0.004 / uncertainty.Coverage
	value := bare(t)
	value.Heat.Efficiency *= 1.001
	warmer := *value.rig().lit(100).step()
	byValue := (warmer.V[monitor.TotalTemperature] - temperature) / 0.001 * 0.01 / uncertainty.Coverage
	slope := (warmer.V[monitor.MassFlow] - p.V[monitor.MassFlow]) / (warmer.V[monitor.TotalTemperature] - temperature)
	want := 0.0
	for _, d := range []float64{
		moved("dp_bellmouth", 10) / 10 * u, moved("p_inlet", 10) / 10 * u, moved("p_baro", 10) / 10 * u, moved("t_inlet", 0.1) / 0.1 * u,
		moved("fuel_flow", 1e-4) / 1e-4 * 1e-4 * u, byMeter, byValue,
	} {
		want = math.Hypot(want, d)
	}
	b := bare(t)
	fuelFlow := slices.IndexFunc(b.Channels, func(c compute.Channel) bool { return c.ID == "fuel_flow" })
	b.Channels[fuelFlow].Uncertainty = calib.Uncertainty{Fixed: 1e-4, Random: 0.5e-4, Stated: true}
	r = b.rig().lit(100)
	r.step()
	// The composition is held, which leaves 2 % of what fuel and air contribute.
	if got := contribution(t, r, monitor.MassFlow, uncertainty.TotalTemperature) / slope; !near(got, want, 0.03) {
		t.Errorf("u(T7) %.4f K, want %.4f", got, want)
	}

	// Without a flame it does not hold, and a rig without another source knows no T7.
	cold := bare(t).rig().set(running()).set(map[string]float64{"egt_1": 150, "egt_2": 150, "egt_3": 150, "egt_4": 150})
	if p := cold.steps(100); p.Lit || p.TemperatureBy != monitor.SourceNone || p.Choke != monitor.ChokeUnknown || p.Cause.Kind != monitor.EngineNotLit {
		t.Errorf("without a flame: T7 from %v, %v, %v", p.TemperatureBy, p.Choke, p.Cause)
	}
	if p := bare(t).rig().lit(100).mark("fuel_flow", monitor.QualityStale).step(); p.Choke != monitor.ChokeUnknown || p.Cause.Quality != monitor.QualityStale {
		t.Errorf("without fuel flow: %v, %+v", p.Choke, p.Cause)
	}
}

// contribution gives c u of an input from the budget.
func contribution(tb testing.TB, r *rig, q monitor.Quantity, in uncertainty.Input) float64 {
	tb.Helper()
	b, ok := r.c.Budget()
	if !ok {
		tb.Fatal("no budget")
	}
	for _, o := range b.Outputs {
		for _, i := range o.Inputs {
			if o.Quantity == q && i.Name == in.String() {
				return i.Contribution
			}
		}
	}
	tb.Fatalf("%s has no part in %s", in, q.Info().Name)
	return 0
}

// The sources of T7 follow each other without a step: noise of 0.5 K per probe, and no
// jump of the mean beyond four times what it has of that.
func TestTemperatureFallsBack(t *testing.T) {
	b := full(t)
	b.Heat = compute.HeatBalance{Efficiency: 0.97, HeatingValue: 43.1e6, U95: 0.01} // off from the rake, which must not matter
	b.Stations.T7FromEGT, b.Stations.T7FactorU95 = 0.9, 0.02
	r := b.rig().lit(100)
	random := rand.New(rand.NewPCG(7, 7))
	noisy := func() {
		for _, id := range []string{"t7_1", "t7_2", "t7_3", "t7_4", "egt_1", "egt_2", "egt_3", "egt_4"} {
			r.set(map[string]float64{id: running()[id] + 0.5*random.NormFloat64()})
		}
	}
	for range 40 * 20 {
		noisy()
		r.step()
	}
	before := r.p.V[monitor.TotalTemperature]
	if r.p.TemperatureBy != monitor.SourceRake {
		t.Fatal(r.p.TemperatureBy)
	}
	for _, step := range []struct {
		lost []string
		from monitor.Source
	}{{[]string{"t7_1", "t7_3"}, monitor.SourceHeatBalance}, {[]string{"t7_1", "t7_3", "fuel_flow"}, monitor.SourceEGTFactor}} {
		noisy()
		for _, id := range step.lost {
			r.mark(id, monitor.QualityStale)
		}
		for range 20 {
			p := r.step()
			if d := p.V[monitor.TotalTemperature] - before; p.TemperatureBy != step.from || math.Abs(d) > 4*0.5/math.Sqrt(4)*math.Sqrt2 || p.Warnings&monitor.WarnGasBridged == 0 {
				t.Fatalf("T7 from %v steps by %g K", p.TemperatureBy, d)
			}
		}
	}
}

// tapped is full with a wall tap, and what it reads: the static pressure of the very
// flow through a passage of 0.055 m².
func tapped(tb testing.TB) (b *builder, read func(r *rig)) {
	tb.Helper()
	b = full(tb)
	b.Stations.WallStatic = []int{b.add("p7_wall", "Pa", calib.Gauge, b.Stations.Barometer)}
	b.Channels[b.Stations.WallStatic[0]].Uncertainty = calib.Uncertainty{Fixed: 1, Random: 0.5, Stated: true}
	n, err := nozzle.New(b.Nozzle.Config)
	if err != nil {
		tb.Fatal(err)
	}
	return b, func(r *rig) {
		v := &r.p.V
		g, err := gas.NewMixture(b.Fuel, v[monitor.FuelAirRatio], v[monitor.HumidityRatio])
		if err != nil {
			tb.Fatal(err)
		}
		p7 := truth(r)
		baro := r.raw[r.index("p_baro")]
		pb := baro + r.raw[r.index("p_exit")]
		out, err := n.Evaluate(&g, nozzle.Inputs{TotalPressure: unit.Absolute(p7), BackPressure: unit.Absolute(pb), TotalTemperature: v[monitor.TotalTemperature]})
		if err != nil {
			tb.Fatal(err)
		}
		_, ps := station7(&g, v[monitor.TotalTemperature], p7, out.MassFlow, 0.055)
		r.set(map[string]float64{"p7_wall": ps - baro})
	}
}

// truth is the mean of the rake as it would read.
func truth(r *rig) float64 {
	sum := 0.0
	for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
		sum += r.raw[r.index(id)]
	}
	return sum/4 + r.raw[r.index("p_baro")]
}

// A rake that is lost is replaced without a step, with its source named and more
// uncertainty; at another pressure ratio the learned head still holds.
func TestWallStatic(t *testing.T) {
	b, read := tapped(t)
	b.Stations.P7Watch.Sampling = 0
	r := b.rig().lit(100)
	random := rand.New(rand.NewPCG(3, 3))
	const noise = 20.0 // Pa
	for range 40 * 20 {
		for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
			r.set(map[string]float64{id: running()[id] + noise*random.NormFloat64()})
		}
		read(r)
		r.step()
	}
	good := r.p
	if good.PressureBy != monitor.SourceRake || good.Warnings&monitor.WarnPressureBridged != 0 {
		t.Fatalf("p7 from %v", good.PressureBy)
	}
	r.mark("p7_2", monitor.QualityOutOfRange).mark("p7_3", monitor.QualityStale)
	p := r.step()
	if p.PressureBy != monitor.SourceWallStatic || p.Warnings&monitor.WarnPressureBridged == 0 || p.Choke != monitor.Choked || p.Cause.Kind != monitor.Available {
		t.Fatalf("p7 from %v, %v, %+v", p.PressureBy, p.Choke, p.Cause)
	}
	if d := p.V[monitor.RakePressure] - good.V[monitor.RakePressure]; math.Abs(d) > 4*noise/math.Sqrt(4) {
		t.Errorf("p7 steps by %g Pa", d)
	}
	if !(p.V[monitor.NPRU95] > 1.1*good.V[monitor.NPRU95]) {
		t.Errorf("NPR ± %g with the rake, ± %g without", good.V[monitor.NPRU95], p.V[monitor.NPRU95])
	}
	for _, gauge := range []float64{10e3, 40e3, 90e3, 160e3} {
		for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
			r.set(map[string]float64{id: gauge}) // two of them stay marked below
		}
		r.mark("p7_2", monitor.QualityOutOfRange).mark("p7_3", monitor.QualityStale)
		for range 5 {
			read(r)
			r.step()
		}
		off := r.p.V[monitor.RakePressure] - truth(r)
		if r.p.PressureBy != monitor.SourceWallStatic || math.Abs(off)/r.p.V[monitor.BackPressure] > r.p.V[monitor.NPRU95] {
			t.Errorf("%g Pa gauge: p7 off by %g Pa, NPR ± %g", gauge, off, r.p.V[monitor.NPRU95])
		}
	}
	// The rake comes back; what was out by proof, some seconds later.
	r.set(running()).steps(20)
	if p := r.steps(40 * 20); p.PressureBy != monitor.SourceRake || p.RakeProbesUsed != 4 {
		t.Errorf("p7 from %v with %d probes", p.PressureBy, p.RakeProbesUsed)
	}
	// Before anything was learned there is no substitute.
	b, read = tapped(t)
	r = b.rig().set(running())
	r.step()
	read(r)
	r.mark("p7_2", monitor.QualityStale).mark("p7_3", monitor.QualityStale)
	if p := r.step(); p.Choke != monitor.ChokeUnknown || p.PressureBy != monitor.SourceNone || p.Cause.Kind != monitor.ChannelBad {
		t.Errorf("not learned: %v from %v, %+v", p.Choke, p.PressureBy, p.Cause)
	}
}

// Reheat that is lit, or may be, and an area that is not known make the throat
// unknown, and say so.
func TestReheatAndArea(t *testing.T) {
	build := func() *builder {
		b := full(t)
		b.Stations.Reheat = []int{b.add("reheat", "1", calib.ReferenceNone, -1)}
		b.Nozzle.ThroatArea = 0
		b.Stations.ThroatArea = []int{b.add("a8", "m2", calib.ReferenceNone, -1)}
		b.Channels[b.Stations.ThroatArea[0]].Uncertainty = calib.Uncertainty{Fixed: 5e-5, Stated: true}
		return b
	}
	r := build().rig().set(map[string]float64{"reheat": 0, "a8": 0.025}).lit(100)
	fixed := full(t).rig().lit(100)
	if !near(r.p.V[monitor.MassFlow], fixed.p.V[monitor.MassFlow], 1e-12) || r.p.V[monitor.ThroatArea] != 0.025 {
		t.Errorf("W8 %g through %g m² by position, %g by entry", r.p.V[monitor.MassFlow], r.p.V[monitor.ThroatArea], fixed.p.V[monitor.MassFlow])
	}
	// 0.2 % stated and 0.05/25 = 0.2 % by position, together.
	want := math.Hypot(0.002, 0.002) / uncertainty.Coverage * r.p.V[monitor.MassFlow]
	if got := contribution(t, r, monitor.MassFlow, uncertainty.ThroatArea); !near(got, want, 1e-9) {
		t.Errorf("area contributes %g kg/s, want %g", got, want)
	}
	if p := r.set(map[string]float64{"a8": 0.03}).step(); !near(p.V[monitor.MassFlow], 1.2*fixed.p.V[monitor.MassFlow], 2e-3) {
		t.Errorf("W8 %g through 0.03 m²", p.V[monitor.MassFlow])
	}
	for _, tt := range []struct {
		name string
		do   func()
		kind monitor.CauseKind
		id   string
	}{
		{"lit", func() { r.set(map[string]float64{"reheat": 1}) }, monitor.ReheatLit, ""},
		{"flag lost", func() { r.mark("reheat", monitor.QualityStale) }, monitor.ChannelBad, "reheat"},
		{"position lost", func() { r.mark("a8", monitor.QualityStuck) }, monitor.ChannelBad, "a8"},
	} {
		r.set(map[string]float64{"reheat": 0, "a8": 0.025})
		if p := r.step(); p.Choke != monitor.Choked {
			t.Fatalf("%s: before it %v", tt.name, p.Choke)
		}
		tt.do()
		p := r.step()
		if p.Choke != monitor.ChokeUnknown || p.Cause.Kind != tt.kind || tt.id != "" && int(p.Cause.Channel) != r.index(tt.id) {
			t.Errorf("%s: %v, %+v", tt.name, p.Choke, p.Cause)
		}
		if v := p.V[monitor.MassFlow]; !math.IsNaN(v) || math.IsNaN(p.V[monitor.RakePressure]) {
			t.Errorf("%s: W8 %g, p7 %g", tt.name, v, p.V[monitor.RakePressure])
		}
	}
	b := full(t)
	b.Nozzle.ThroatArea = 0
	if p := b.rig().set(running()).step(); p.Choke != monitor.ChokeUnknown || p.Cause.Kind != monitor.AreaUnknown {
		t.Errorf("no area: %v, %+v", p.Choke, p.Cause)
	}
}

// A dew point says what relative humidity and temperature say.
func TestDewPoint(t *testing.T) {
	for _, dew := range []float64{258, 273.15, 281, 288.9} {
		at, err := gas.SaturationPressure(289)
		if err != nil {
			t.Fatal(err)
		}
		over, err := gas.SaturationPressure(dew)
		if err != nil {
			t.Fatal(err)
		}
		relative := full(t).rig().set(running()).set(map[string]float64{"humidity": over / at}).step()
		b := full(t)
		b.Stations.Humidity, b.Stations.DewPoint = b.add("t_dew", "K", calib.ReferenceNone, -1), true
		b.Channels[b.Stations.Humidity].Uncertainty = calib.Uncertainty{Fixed: 0.4, Stated: true}
		r := b.rig().set(running()).set(map[string]float64{"t_dew": dew})
		p := r.step()
		if !near(p.V[monitor.HumidityRatio], relative.V[monitor.HumidityRatio], 1e-12) || p.Warnings&monitor.WarnAssumedHumidity != 0 {
			t.Errorf("dew point %g K: %.9g, want %.9g", dew, p.V[monitor.HumidityRatio], relative.V[monitor.HumidityRatio])
		}
		if r.mark("t_dew", monitor.QualityStale).step(); r.p.V[monitor.HumidityRatio] != 0 || r.p.Warnings&monitor.WarnAssumedHumidity == 0 {
			t.Errorf("lost: %g", r.p.V[monitor.HumidityRatio])
		}
	}
}

// Weather stays within 5 % of the standard atmosphere; kPa for hPa, or a value reduced
// to sea level on a mountain, does not.
func TestBarometerPlausible(t *testing.T) {
	b := full(t)
	b.Stations.StationPressure = 84556 // 1500 m, ISO 2533 table 1
	r := b.rig().set(running())
	for _, tt := range []struct {
		pa   float64
		warn bool
	}{{84556, false}, {80000, false}, {89000, false}, {79400, true}, {89700, true}, {101325, true}, {8455.6, true}} {
		r.set(map[string]float64{"p_baro": tt.pa})
		if got := r.step().Warnings&monitor.WarnBarometer != 0; got != tt.warn {
			t.Errorf("%g Pa: warns %v", tt.pa, got)
		}
	}
	r.mark("p_baro", monitor.QualityStale)
	if r.step().Warnings&monitor.WarnBarometer != 0 {
		t.Error("warns of a barometer that is not there")
	}
}
