package compute_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/uncertainty"
)

// wet is full with injected water and metered bleed.
func wet(tb testing.TB) *builder {
	tb.Helper()
	b := full(tb)
	for _, to := range []struct {
		i  *int
		id string
	}{{&b.Stations.WaterFlow, "water_flow"}, {&b.Stations.BleedFlow, "bleed_flow"}} {
		*to.i = b.add(to.id, "kg/s", calib.ReferenceNone, -1)
		b.Channels[*to.i].Uncertainty = calib.Uncertainty{Fixed: 1e-3, Stated: true}
	}
	return b
}

// flows is what wet reads beside running.
func flows(water, bleed float64) map[string]float64 {
	out := running()
	out["water_flow"], out["bleed_flow"] = water, bleed
	return out
}

// A mass balance by hand: a perfect gas of γ 1.4 and R 287.05287 J/(kg K) through a choked
// nozzle without losses, A 0.025 m², p8 229.9 kPa, T8 900 K. C* = √1.4 (2/2.4)³ = 0.684731456:
// W8 = 0.684731456 · 0.025 · 229.9e3/√(287.05287 · 900) = 7.7427766 kg/s. In: air 8 kg/s (by
// a bellmouth of the same gas), fuel 0.14, water 0.25; out: bleed 0.3.
// W = 8 + 0.14 + 0.25 − 0.3 = 8.09, balance 0.3472234 kg/s, area 0.025 · 8.09/7.7427766 =
// 0.0261211 m². Per kg of dry air, humidity ratio 0: 7.7427766 − 0.14 − 0.25 = 7.3527766 kg/s
// carry fuel 0.0190404 and water 0.0340007.
func TestMassBalanceByHand(t *testing.T) {
	b := wet(t)
	b.Gamma, b.GasR = 1.4, 287.05287
	b.Nozzle.DuctLoss, b.Nozzle.Discharge = 0, nil
	b.Stations.Humidity = -1
	b.Bellmouth.Coefficient = 1
	// The bellmouth at Mach 0.5 passes C*/1.33984 A p/√(R T): the area for 8 kg/s, by A/A* of
	// NACA Report 1135; p/pt = 0.843019.
	const p0, t0 = 99500.0, 290.0
	b.Bellmouth.Area = 8 * 1.33984375 / 0.684731456 * math.Sqrt(287.05287*t0) / p0
	r := b.rig().set(flows(0.25, 0.3))
	r.set(map[string]float64{"dp_bellmouth": p0 * (1 - 0.84301918), "t_inlet": t0})
	for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
		r.set(map[string]float64{id: 229.9e3 - 99800})
	}
	for _, id := range []string{"t7_1", "t7_2", "t7_3", "t7_4"} {
		r.set(map[string]float64{id: 900})
	}
	compare(t, "by hand", r.steps(100), 2e-6, map[monitor.Quantity]float64{
		monitor.AirFlow: 8, monitor.MassFlow: 7.7427766, monitor.IndependentFlow: 8.09,
		monitor.WaterFlow: 0.25, monitor.BleedFlow: 0.3,
		monitor.EffectiveArea: 0.0261211, monitor.FuelAirRatio: 0.0190404, monitor.WaterAirRatio: 0.0340007,
	})
	if d := r.p.V[monitor.FlowBalance]; math.Abs(d-0.3472234) > 2e-5 {
		t.Errorf("balance %.7f kg/s, want 0.3472234", d)
	}
}

// What goes in comes out, whatever the flows: dry air with its fuel and water is W8, and
// the gas is that of NewMixture at these ratios. Bleed is in the balance only, and so is
// the water of a rig that burns none.
func TestMassCloses(t *testing.T) {
	random := rand.New(rand.NewPCG(5, 5))
	for range 60 {
		water, bleed, fuel := 0.6*random.Float64(), 0.5*random.Float64(), 0.05+0.15*random.Float64()
		b := wet(t)
		r := b.rig().set(flows(water, bleed)).set(map[string]float64{"fuel_flow": fuel, "humidity": random.Float64()})
		v := r.steps(100).V
		war, f, w8 := v[monitor.HumidityRatio], v[monitor.FuelAirRatio], v[monitor.MassFlow]
		dry := w8 / (1 + f + v[monitor.WaterAirRatio])
		if !near(dry*f, fuel, 1e-8) || !near(dry*(v[monitor.WaterAirRatio]-war), water, 1e-7) {
			t.Fatalf("%g kg/s of fuel close to %g, %g of water to %g", fuel, dry*f, water, dry*(v[monitor.WaterAirRatio]-war))
		}
		g, err := gas.NewMixture(b.Fuel, f, v[monitor.WaterAirRatio])
		if err != nil {
			t.Fatal(err)
		}
		if !near(v[monitor.GasConstant], g.R(), 1e-12) || !near(v[monitor.CriticalNPR], 1/g.Critical(v[monitor.TotalTemperature]).PressureRatio, 1e-12) {
			t.Fatalf("R %g, want %g", v[monitor.GasConstant], g.R())
		}
		if want := v[monitor.AirFlow] + fuel + water - bleed - w8; math.Abs(v[monitor.FlowBalance]-want) > 1e-12 {
			t.Fatalf("balance %g, want %g", v[monitor.FlowBalance], want)
		}
		without := wet(t).rig().set(flows(water, 0)).set(map[string]float64{"fuel_flow": fuel, "humidity": r.scan.Value[r.index("humidity")]}).steps(100).V
		if without[monitor.MassFlow] != w8 || !near(without[monitor.IndependentFlow]-v[monitor.IndependentFlow], bleed, 1e-9) {
			t.Fatalf("bleed of %g kg/s: W8 %g and %g", bleed, w8, without[monitor.MassFlow])
		}
	}
}

// A stated share of bleed is a bleed of that flow.
func TestBleedShare(t *testing.T) {
	b := full(t)
	b.Stations.BleedShare, b.Stations.BleedShareU95 = 0.03, 0.01
	v := b.rig().set(running()).steps(100).V
	if w2 := v[monitor.AirFlow]; !near(v[monitor.BleedFlow], 0.03*w2, 1e-15) || !near(v[monitor.IndependentFlow], 0.97*w2+0.14, 1e-14) {
		t.Errorf("bleed %g of %g kg/s", v[monitor.BleedFlow], w2)
	}
	plain := full(t).rig().set(running()).steps(100).V
	air := (square(plain[monitor.IndependentFlowU95]) - square(math.Hypot(1, 0.5))) * square(0.97) // fuel ± 1, random 0.5
	want := math.Sqrt(air + square(0.01*v[monitor.AirFlow]) + square(math.Hypot(1, 0.5)))
	if got := v[monitor.IndependentFlowU95]; !near(got, want, 1e-9) {
		t.Errorf("U95 %g, want %g", got, want)
	}
}

func square(x float64) float64 { return x * x }

// Each error that is in both flows is one: moved by its uncertainty, balance and effective
// area move by what it contributes to their uncertainty. With T7 by the heat balance the
// meters are in W8 by that too.
func TestSharedErrorsCountOnce(t *testing.T) {
	for _, tt := range []struct {
		id      string
		u       float64
		balance bool // T7 by the heat balance
		// What the linear propagation leaves out: the composition of the heat balance is held.
		tolerance float64
	}{
		{"p_baro", 300, false, 0.06}, // of a difference that is a tenth of what it does to either flow
		{"fuel_flow", 0.01, false, 0.02},
		{"water_flow", 0.01, false, 0.03},
		{"bleed_flow", 0.01, false, 0.001},
		{"p_inlet", 50, false, 0.02},
		{"dp_bellmouth", 50, false, 0.01},
		{"t_inlet", 1, false, 0.01},
		{"fuel_flow", 0.003, true, 0.08},
		{"water_flow", 0.01, true, 0.15}, // of a difference of two that are four times as large
		{"bleed_flow", 0.03, true, 0.08},
		{"dp_bellmouth", 100, true, 0.08},
		{"t_inlet", 1, true, 0.03},
	} {
		at := func(by, u float64) *monitor.OperatingPoint {
			b := wet(t)
			if tt.balance {
				b.Stations.T7, b.Stations.MinT7 = nil, 0
				b.Heat = compute.HeatBalance{Efficiency: 0.995, HeatingValue: 43.1e6, U95: 1e-12}
				b.Stations.BleedT = b.add("t_bleed", "K", calib.ReferenceNone, -1)
			}
			only(b, tt.id, calib.Uncertainty{Fixed: u})
			b.Bellmouth.U95 = 1e-12
			b.Stations.P7Watch.Sampling, b.Stations.T7Watch.Sampling = 1e-12, 1e-12
			readings := flows(0.2, 0.25)
			if tt.balance {
				readings["t_bleed"] = 480
			}
			readings[tt.id] += by
			return b.rig().set(readings).steps(100)
		}
		still := at(0, tt.u)
		up, down := at(tt.u/2, tt.u), at(-tt.u/2, tt.u)
		for _, q := range []monitor.Quantity{monitor.FlowBalance, monitor.EffectiveArea} {
			moved := up.V[q] - down.V[q]
			if got := still.V[q+1]; !near(got, math.Abs(moved), tt.tolerance) {
				t.Errorf("%s ± %g, heat balance %v: %s ± %g, moves by %g", tt.id, tt.u, tt.balance, q.Info().Name, got, moved)
			}
		}
	}
}

// The budget of the balance tells every meter and input, and its shares make one.
func TestBudgetOfBalance(t *testing.T) {
	r := wet(t).rig().set(flows(0.2, 0.25))
	r.steps(100)
	budget, ok := r.c.Budget()
	if !ok || len(budget.Outputs) != 4 {
		t.Fatalf("%+v", budget)
	}
	o := &budget.Outputs[3]
	if o.Quantity != monitor.FlowBalance || o.Value != r.p.V[monitor.FlowBalance] || o.U95 != r.p.V[monitor.FlowBalanceU95] {
		t.Errorf("%s %g ± %g", o.Quantity.Info().Name, o.Value, o.U95)
	}
	sum, parts := 0.0, 0.0
	lines := map[string]compute.BudgetInput{}
	for _, in := range o.Inputs {
		lines[in.Name] = in
		sum += in.Share
		for _, p := range in.Parts {
			parts += p.Share
			if p.Channel == r.cfg.Stations.Barometer && in.Name != "air flow" {
				t.Errorf("the barometer is told with %s as well", in.Name)
			}
		}
	}
	if math.Abs(sum-1) > 1e-9 || math.Abs(parts-1) > 1e-9 {
		t.Errorf("shares make %.12g, parts %.12g", sum, parts)
	}
	const u = 1e-3 / uncertainty.Coverage
	if b := lines["bleed flow"]; !near(b.Contribution, -u, 1e-9) || len(b.Parts) != 1 || b.Parts[0].Channel != r.cfg.Stations.BleedFlow {
		t.Errorf("bleed: %+v", b)
	}
	// Water in the gas makes W8 less: ∂ ln W8/∂ ratio is about −0.3, so that the balance rises
	// by more than the water itself.
	if w := lines["water flow"]; !(w.Contribution > 1.15*u && w.Contribution < 1.5*u) {
		t.Errorf("water: %g of %g kg/s", w.Contribution, u)
	}
	if a := lines["discharge coefficient"]; !near(a.Contribution, -0.003/uncertainty.Coverage*r.p.V[monitor.MassFlow], 1e-6) {
		t.Errorf("discharge coefficient: %g", a.Contribution)
	}
}

// A water meter that is lost: the ratio is held, which makes no step, but nothing is sure
// that rests on it; without a bleed there is no balance. Water that is off is none, and
// in a flow too small to close, the ratio is held.
func TestWaterLost(t *testing.T) {
	r := wet(t).rig().set(flows(0.3, 0.1))
	before := *r.steps(100)
	if !(before.V[monitor.WaterAirRatio] > before.V[monitor.HumidityRatio]+0.04) || math.IsNaN(before.V[monitor.MassFlowU95]) {
		t.Fatalf("ratio %g", before.V[monitor.WaterAirRatio])
	}
	p := r.mark("water_flow", monitor.QualityStale).step()
	if p.V[monitor.MassFlow] != before.V[monitor.MassFlow] || p.Warnings&monitor.WarnAssumedWater == 0 {
		t.Errorf("W8 %g, before %g, %v", p.V[monitor.MassFlow], before.V[monitor.MassFlow], p.Warnings)
	}
	if _, ok := p.Get(monitor.MassFlowU95); ok {
		t.Errorf("W8 ± %g", p.V[monitor.MassFlowU95])
	}
	if _, ok := p.Get(monitor.IndependentFlow); ok || !math.IsNaN(p.V[monitor.FlowBalance]) || !math.IsNaN(p.V[monitor.IndependentFlowU95]) {
		t.Errorf("metered flow %g without the water", p.V[monitor.IndependentFlow])
	}
	if p := r.set(flows(0, 0.1)).step(); p.V[monitor.WaterAirRatio] != p.V[monitor.HumidityRatio] || p.Warnings&monitor.WarnAssumedWater != 0 {
		t.Errorf("water off: ratio %g, %v", p.V[monitor.WaterAirRatio], p.Warnings)
	}
	if p := r.set(flows(0.3, 0.1)).mark("bleed_flow", monitor.QualityStuck).steps(3); !math.IsNaN(p.V[monitor.FlowBalance]) || math.IsNaN(p.V[monitor.MassFlowU95]) {
		t.Errorf("bleed lost: balance %g, W8 ± %g", p.V[monitor.FlowBalance], p.V[monitor.MassFlowU95])
	}
	ratio := r.p.V[monitor.WaterAirRatio]
	rest := flows(0.3, 0.1)
	for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
		rest[id] = -250
	}
	if p := r.set(rest).step(); p.V[monitor.WaterAirRatio] != ratio || p.Choke != monitor.NoFlow {
		t.Errorf("at rest: ratio %g, before %g, %v", p.V[monitor.WaterAirRatio], ratio, p.Choke)
	}
}

// The heat balance with water and bleed, term by term: W2 h2 + Wf η LHV = W8 h7 + Ww L + Wb hb.
func TestHeatBalanceOfWaterAndBleed(t *testing.T) {
	b := wet(t)
	b.Stations.T7, b.Stations.MinT7 = nil, 0
	b.Heat = compute.HeatBalance{Efficiency: 0.995, HeatingValue: 43.1e6, U95: 0.01}
	b.Stations.BleedT = b.add("t_bleed", "K", calib.ReferenceNone, -1)
	readings := flows(0.2, 0.25)
	readings["t_bleed"] = 480
	r := b.rig().set(readings)
	p := r.steps(100)
	if p.TemperatureBy != monitor.SourceHeatBalance {
		t.Fatal(p.TemperatureBy)
	}
	const fuel, water, bleed, zero = 0.14, 0.2, 0.25, 298.15
	w2, war := p.V[monitor.AirFlow], p.V[monitor.HumidityRatio]
	dry := (w2 - bleed) / (1 + war)
	air, err := gas.NewMixture(gas.Kerosene(), 0, war)
	if err != nil {
		t.Fatal(err)
	}
	products, err := gas.NewMixture(gas.Kerosene(), fuel/dry, war+water/dry)
	if err != nil {
		t.Fatal(err)
	}
	in := w2*(air.H(290)-air.H(zero)) + fuel*0.995*43.1e6
	// The latent heat of water at 25 °C: 2441.7 kJ/kg (IAPWS-95).
	out := (w2+fuel+water-bleed)*(products.H(p.V[monitor.TotalTemperature])-products.H(zero)) + water*2441.7e3 + bleed*(air.H(480)-air.H(zero))
	if !near(in, out, 1e-12) {
		t.Errorf("in %.12g W, out %.12g W at %g K", in, out, p.V[monitor.TotalTemperature])
	}
	dryT := bare(t).rig().set(running()).steps(100).V[monitor.TotalTemperature]
	if !(p.V[monitor.TotalTemperature] < dryT-50) {
		t.Errorf("T7 %g K with water and bleed, %g without", p.V[monitor.TotalTemperature], dryT)
	}
	if p := r.mark("t_bleed", monitor.QualityStale).step(); p.Choke != monitor.ChokeUnknown || int(p.Cause.Channel) != r.index("t_bleed") {
		t.Errorf("without the temperature of the bleed: %v, %+v", p.Choke, p.Cause)
	}
}
