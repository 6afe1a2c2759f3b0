package compute_test

import (
	"fmt"
	"maps"
	"math"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/internal/vectors"
	"throatwatch/monitor/nozzle"
)

// Gas constants of the gases in thermally_perfect_sub.csv, J/(kg K): 8.31446261815324
// over the molar mass of dry air (products.csv) and of the products per kg of dry
// air, (1/28.9651159 + nu f)/(1 + f) by products.csv.
func gasConstants(tb testing.TB) map[string]float64 {
	tb.Helper()
	r := map[string]float64{}
	for _, v := range vectors.Read(tb, "products.csv") {
		if v.Num(tb, "war") == 0 {
			r[fmt.Sprint(v.Num(tb, "f"))] = v.Num(tb, "R_J_kgK")
		}
	}
	return r
}

// An operating point from known station values agrees with the thermally perfect
// vectors (their source is in line 1 of the file). The fuel-air ratio is not
// given: it is closed from the fuel flow that goes with the flow of the vector.
func TestThermallyPerfect(t *testing.T) {
	constants := gasConstants(t)
	b := simple(t)
	b.Stations.EGT = []int{b.add("egt", "K", calib.ReferenceNone, -1)}
	b.Stations.FuelFlow = b.add("fuel_flow", "kg/s", calib.ReferenceNone, -1)
	b.Stations.Speed = b.add("speed", "rpm", calib.ReferenceNone, -1)
	b.Stations.Humidity = b.add("humidity", "1", calib.ReferenceNone, -1)
	b.Stations.AmbientT = b.add("t_ambient", "K", calib.ReferenceNone, -1)
	b.Stations.Barometer = b.add("p_baro", "Pa", calib.Absolute, -1)
	b.Stations.MinEGT = 1
	n := 0
	for _, v := range vectors.Read(t, "thermally_perfect_sub.csv") {
		f, t0, npr, phi := v.Num(t, "f"), v.Num(t, "T0_K"), v.Num(t, "npr"), v.Num(t, "flow")
		R, ok := constants[fmt.Sprint(f)]
		if !ok {
			continue
		}
		n++
		p0 := npr * pamb
		w8 := phi * area * p0 / math.Sqrt(R*t0)
		r := b.rig().set(map[string]float64{
			"p7": p0, "t7": t0, "p_exit": pamb, "egt": t0, "speed": 20000,
			"fuel_flow": w8 * f / (1 + f), // f = Wf/(W8 − Wf), dry air
			"humidity":  0, "t_ambient": 288.15, "p_baro": pamb,
		})
		p := r.steps(3)
		name := fmt.Sprintf("%s f %g, %g K, NPR %g", v["gas"], f, t0, npr)
		// The vectors have 10 digits; the fuel-air ratio, closed to 1e-8, moves the flow by
		// 1e-10; p = 1/NPR and the gas constant are given to 8 and 10 digits.
		compare(t, name, p, 3e-8, map[monitor.Quantity]float64{
			monitor.NPR: npr, monitor.NPRRake: npr, monitor.MassFlow: w8,
			monitor.ThroatMach: v.Num(t, "M_exit"), monitor.ThroatTemperature: v.Num(t, "Te_T0") * t0,
			monitor.ThroatPressure: v.Num(t, "pe_p0") * p0, monitor.ExitVelocity: v.Num(t, "V_RT0") * math.Sqrt(R*t0),
			monitor.GrossThrust: v.Num(t, "thrust") * area * pamb, monitor.FlowParameter: phi, monitor.GasConstant: R,
		})
		if got := p.V[monitor.FuelAirRatio]; math.Abs(got-f) > 1e-8 {
			t.Errorf("%s: fuel-air ratio %.12g", name, got)
		}
		want := monitor.Unchoked
		if v["choked"] == "1" {
			want = monitor.Choked
		}
		// Cold air at four bars is not quite ideal, which is said.
		if p.Choke != want || p.Warnings&^monitor.WarnRealGas != 0 || p.Cause.Kind != monitor.Available {
			t.Errorf("%s: %v, warnings %b, cause %v", name, p.Choke, p.Warnings, p.Cause.Kind)
		}
	}
	if n < 64 {
		t.Errorf("%d rows have a gas constant", n)
	}
}

// The critical state of the vectors in thermally_perfect.csv.
func TestCriticalState(t *testing.T) {
	b := simple(t)
	for _, v := range vectors.Read(t, "thermally_perfect.csv") {
		if v["gas"] != "dry_air" {
			continue
		}
		t0 := v.Num(t, "T0_K")
		p := b.rig().set(map[string]float64{"p7": 250e3, "t7": t0, "p_exit": pamb}).step()
		compare(t, fmt.Sprintf("air at %g K", t0), p, 3e-8, map[monitor.Quantity]float64{
			monitor.CriticalNPR: v.Num(t, "crit_npr"), monitor.ChokeNPR: v.Num(t, "crit_npr"),
			monitor.CriticalTemperature: v.Num(t, "Tstar_T0") * t0, monitor.CriticalPressure: v.Num(t, "pstar_p0") * 250e3,
			monitor.GammaTotal: v.Num(t, "gamma_T0"),
			// margin ≡ (p* − pb)/pb, in percent
			monitor.ChokeMarginPercent: 100 * (v.Num(t, "pstar_p0")*250e3/pamb - 1),
			monitor.ChokeMarginPa:      v.Num(t, "pstar_p0")*250e3 - pamb,
		})
	}
}

// Worked examples of textbooks with a perfect gas; their inputs and sources are
// W3 (Moran & Shapiro, ex. 9.14), W4 (Fox & McDonald, ex. 12.2) and W9 (own
// numbers, closed forms) of worked_examples.csv.
func TestWorkedExamples(t *testing.T) {
	w3, w4, w9a, w9b := worked(t, "W3_moran_9.14"), worked(t, "W4_fox_12.2"), worked(t, "W9a_unchoked"), worked(t, "W9b_choked")
	for _, tt := range []struct {
		name           string
		gamma, r       float64
		area, cd       float64
		p0, t0, pb     float64
		choked         bool
		want           map[monitor.Quantity]float64
		printed, digit float64 // flow as the book prints it, and half its last digit
	}{
		{"W3 at 500 kPa", 1.4, 8314.0 / 28.97, 0.001, 1, 1e6, 360, 500e3, true, map[monitor.Quantity]float64{
			monitor.ThroatMach: 1, monitor.ThroatPressure: w3["pb500_pe_Pa"], monitor.ThroatTemperature: w3["pb500_Te_K"],
			monitor.ExitVelocity: w3["pb500_Ve"], monitor.MassFlow: w3["pb500_mdot"],
		}, 2.13, 0.005},
		{"W3 at 784 kPa", 1.4, 8314.0 / 28.97, 0.001, 1, 1e6, 360, 784e3, false, map[monitor.Quantity]float64{
			monitor.ThroatMach: w3["pb784_M"], monitor.ThroatPressure: w3["pb784_pe_Pa"], monitor.ThroatTemperature: w3["pb784_Te_K"],
			monitor.ExitVelocity: w3["pb784_Ve"], monitor.MassFlow: w3["pb784_mdot"],
		}, 1.79, 0.005},
		{"W4", 1.4, 287, 0.001, 1, 1e6, 333, 591e3, false, map[monitor.Quantity]float64{
			monitor.ThroatMach: w4["M"], monitor.ThroatTemperature: w4["Te"], monitor.ExitVelocity: w4["Ve"], monitor.MassFlow: w4["m"],
		}, 2.20, 0.005},
		{"W9 a", 1.33, 287.05, 0.025, 0.97, 160e3, 850, pamb, false, map[monitor.Quantity]float64{
			monitor.NPR: w9a["npr"], monitor.CriticalNPR: w9a["npr_critical"], monitor.ChokeMarginPercent: 100 * w9a["choke_margin_npr_over_crit_minus_1"],
			monitor.ThroatMach: w9a["M_exit"], monitor.ThroatPressure: pamb, monitor.ThroatTemperature: w9a["T_exit_K"], monitor.ExitVelocity: w9a["V_exit"],
			monitor.MassFlow: w9a["mdot_Cd"], monitor.FlowParameter: 0.97 * w9a["flow_function_mdot_sqrt_RT0_over_Ap0"],
			monitor.GrossThrust: 0.97 * w9a["gross_thrust_ideal_N"],
		}, 5.178150, 5e-7},
		{"W9 b", 1.33, 287.05, 0.025, 0.97, 250e3, 950, pamb, true, map[monitor.Quantity]float64{
			monitor.NPR: w9b["npr"], monitor.CriticalNPR: w9b["npr_critical"], monitor.ChokeMarginPercent: 100 * w9b["choke_margin_npr_over_crit_minus_1"],
			monitor.ThroatMach: 1, monitor.ThroatPressure: w9b["p_exit_Pa"], monitor.ThroatTemperature: w9b["T_exit_K"], monitor.ExitVelocity: w9b["V_exit"],
			monitor.MassFlow: w9b["mdot_Cd"], monitor.FlowParameter: 0.97 * w9b["flow_function_mdot_sqrt_RT0_over_Ap0"],
			monitor.GrossThrust: 0.97 * w9b["gross_thrust_ideal_N"],
		}, 7.808837, 5e-7},
	} {
		b := simple(t)
		b.Gamma, b.GasR = tt.gamma, tt.r
		b.Nozzle.ThroatArea = tt.area
		b.Nozzle.Discharge = []nozzle.Point{{NPR: 1, Value: tt.cd}}
		p := b.rig().set(map[string]float64{"p7": tt.p0, "t7": tt.t0, "p_exit": tt.pb}).step()
		compare(t, tt.name, p, 1e-7, tt.want) // the file has 8 digits
		if math.Abs(p.V[monitor.MassFlow]-tt.printed) > tt.digit+1e-6 {
			t.Errorf("%s: flow %g kg/s, printed %g", tt.name, p.V[monitor.MassFlow], tt.printed)
		}
		if (p.Choke == monitor.Choked) != tt.choked {
			t.Errorf("%s: %v", tt.name, p.Choke)
		}
	}
}

// A gauge reading becomes absolute with the reference of the same scan, whatever
// the barometer does; without a usable reference it has none.
func TestReferenceOfTheInstant(t *testing.T) {
	r := full(t).rig().set(running())
	for k := range 200 {
		baro := 99800 + 40*float64(k)*math.Sin(float64(k)) // wilder than any weather
		r.set(map[string]float64{"p_baro": baro})
		p := r.step()
		want := baro + (130e3+130.4e3+129.8e3+130.2e3)/4
		if !near(p.V[monitor.RakePressure], want, 1e-15) || !near(p.V[monitor.BackPressure], baro-250, 1e-15) || p.V[monitor.Barometer] != baro {
			t.Fatalf("scan %d: rake %.3f, back pressure %.3f Pa at a barometer of %.3f Pa", k, p.V[monitor.RakePressure], p.V[monitor.BackPressure], baro)
		}
	}
	// A barometer that is held still counts; one that is stale does not.
	r.mark("p_baro", monitor.QualityHeld)
	if p := r.step(); math.IsNaN(p.V[monitor.RakePressure]) {
		t.Error("a held barometer is no reference")
	}
	r.mark("p_baro", monitor.QualityStale)
	p := r.step()
	for _, id := range []string{"p7_1", "p7_4", "p_exit", "p_inlet"} {
		if i := r.index(id); r.scan.Quality[i] != monitor.QualityNoReference || !math.IsNaN(r.scan.Value[i]) {
			t.Errorf("%s without its reference is %v, %g", id, r.scan.Quality[i], r.scan.Value[i])
		}
	}
	// Differential readings need none.
	if i := r.index("dp_bellmouth"); r.scan.Value[i] != 10.2e3 {
		t.Errorf("the bellmouth reads %g Pa", r.scan.Value[i])
	}
	if p.Choke != monitor.ChokeUnknown || p.Cause != (monitor.Cause{Kind: monitor.ChannelBad, Channel: int32(r.index("p_baro")), Quality: monitor.QualityStale}) {
		t.Errorf("without a barometer %v, %+v", p.Choke, p.Cause)
	}
	// Chains of references are followed in any order of the channels.
	b := newBuilder(t)
	st := &b.Stations
	st.P7 = []int{b.add("p7", "Pa", calib.Gauge, 1)}
	cell := b.add("p_cell", "Pa", calib.Gauge, 2)
	st.Barometer = b.add("p_baro", "Pa", calib.Absolute, -1)
	st.T7 = []int{b.add("t7", "K", calib.ReferenceNone, -1)}
	st.ExitPlane = cell
	p = b.rig().set(map[string]float64{"p7": 100e3, "p_cell": -500, "p_baro": 100e3, "t7": 800}).step()
	if p.V[monitor.RakePressure] != 199500 || p.V[monitor.BackPressure] != 99500 {
		t.Errorf("through the cell: rake %g Pa, back pressure %g Pa, want 199500 and 99500", p.V[monitor.RakePressure], p.V[monitor.BackPressure])
	}
}

// The back pressure comes from the exit plane; without it from the barometer less
// the entered depression, and the point says so.
func TestBackPressureFallsBack(t *testing.T) {
	r := full(t).rig().set(running())
	for _, tt := range []struct {
		q    monitor.Quality
		want float64
		from monitor.Source
	}{
		{monitor.QualityGood, 99800 - 250, monitor.SourceExitPlane},
		{monitor.QualityHeld, 99800 - 250, monitor.SourceExitPlane},
		{monitor.QualityStale, 99800 - 250, monitor.SourceBarometer},
		{monitor.QualityMissing, 99800 - 250, monitor.SourceBarometer},
		{monitor.QualityGood, 99800 - 250, monitor.SourceExitPlane},
	} {
		r.mark("p_exit", tt.q)
		if p := r.step(); p.V[monitor.BackPressure] != tt.want || p.BackFrom != tt.from || p.Choke != monitor.Choked || p.Cause.Kind != monitor.Available {
			t.Errorf("exit plane %v: %g Pa from %v, %v", tt.q, p.V[monitor.BackPressure], p.BackFrom, p.Choke)
		}
	}
	// Uncertainty: the exit plane's ±1 Pa and 0.5 Pa, or the depression's ±200 Pa.
	r.mark("p_exit", monitor.QualityGood)
	exact := r.step().V[monitor.ChokeMarginPercentU95]
	r.mark("p_exit", monitor.QualityStale)
	if wide := r.step().V[monitor.ChokeMarginPercentU95]; !(wide > exact) {
		t.Errorf("margin ±%g %% with the exit plane, ±%g %% without", exact, wide)
	}
	// A depression whose uncertainty is not stated leaves the value, without a U95.
	b := full(t)
	b.Stations.DepressionU = 0
	r = b.rig().set(running()).mark("p_exit", monitor.QualityStale)
	if p := r.step(); math.IsNaN(p.V[monitor.ChokeMarginPercent]) || !math.IsNaN(p.V[monitor.ChokeMarginPercentU95]) || !math.IsNaN(p.V[monitor.PChoked]) {
		t.Errorf("margin %g ± %g %%, P(choked) %g", p.V[monitor.ChokeMarginPercent], p.V[monitor.ChokeMarginPercentU95], p.V[monitor.PChoked])
	}
}

// Each input that is missing makes what depends on it unavailable, and the point
// names the channel and why.
func TestUnknownNamesItsCause(t *testing.T) {
	bad := func(id string, q monitor.Quality) func(*rig) monitor.Cause {
		return func(r *rig) monitor.Cause {
			r.mark(id, q)
			return monitor.Cause{Kind: monitor.ChannelBad, Channel: int32(r.index(id)), Quality: q}
		}
	}
	without := func(change func(*compute.Stations)) func(*builder) {
		return func(b *builder) { change(&b.Stations) }
	}
	for _, tt := range []struct {
		name   string
		change func(*builder)
		lose   func(*rig) monitor.Cause
	}{
		{"barometer and exit plane", nil, func(r *rig) monitor.Cause {
			r.mark("p_exit", monitor.QualityStale)
			return bad("p_baro", monitor.QualityStale)(r)
		}},
		{"two of four rake probes, three are due", nil, func(r *rig) monitor.Cause {
			r.mark("p7_3", monitor.QualityMissing)
			return bad("p7_2", monitor.QualityStale)(r)
		}},
		{"rake temperatures", nil, func(r *rig) monitor.Cause {
			r.mark("t7_4", monitor.QualityStale)
			r.mark("t7_3", monitor.QualityStale)
			return bad("t7_1", monitor.QualityStale)(r)
		}},
		{"a rake probe out of range", func(b *builder) { b.Stations.P7, b.Stations.MinP7 = b.Stations.P7[:1], 1; b.Channels[2].High = 1e5 }, func(r *rig) monitor.Cause {
			return monitor.Cause{Kind: monitor.ChannelBad, Channel: int32(r.index("p7_1")), Quality: monitor.QualityOutOfRange}
		}},
		{"exit plane of a rig without a barometer", func(b *builder) {
			b.Stations.Barometer = -1
			for i := range b.Channels {
				if b.Channels[i].Reference == calib.Gauge {
					b.Channels[i].Reference = calib.Absolute
				}
			}
		}, bad("p_exit", monitor.QualityStale)},
		{"temperature of a rig with none", without(func(s *compute.Stations) { s.T7 = nil }), func(*rig) monitor.Cause {
			return monitor.Cause{Kind: monitor.NotConfigured, Channel: -1}
		}},
		{"pressure of a rig with none", without(func(s *compute.Stations) { s.P7 = nil }), func(*rig) monitor.Cause {
			return monitor.Cause{Kind: monitor.NotConfigured, Channel: -1}
		}},
		{"EGT that the temperature is taken from", without(func(s *compute.Stations) {
			s.T7, s.T7FromEGT, s.EGT, s.EGTParallel, s.MinEGT = nil, 0.98, s.EGT[:1], true, 1
		}), bad("egt_1", monitor.QualityStale)},
		{"a temperature that no gas data reach", nil, func(r *rig) monitor.Cause {
			r.set(map[string]float64{"t7_1": 9000, "t7_2": 9000, "t7_3": 9000, "t7_4": 9000})
			return monitor.Cause{Kind: monitor.OutsideGasRange, Channel: -1}
		}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := full(t)
			if tt.change != nil {
				tt.change(b)
			}
			r := b.rig().set(running())
			want := tt.lose(r)
			p := r.steps(2)
			if p.Choke != monitor.ChokeUnknown || p.Cause != want {
				t.Errorf("%v, cause %+v; want unknown, %+v", p.Choke, p.Cause, want)
			}
			for _, q := range []monitor.Quantity{
				monitor.NPR, monitor.ChokeMarginPercent, monitor.ChokeMarginPercentU95, monitor.PChoked, monitor.MassFlow, monitor.GrossThrust,
				monitor.ThroatMach, monitor.ReferredFlow, monitor.FlowBalance,
			} {
				if _, ok := p.Get(q); ok {
					t.Errorf("%s = %g", q.Info().Name, p.V[q])
				}
			}
			// What does not depend on it is there all the same.
			if _, ok := p.Get(monitor.Speed); !ok {
				t.Error("the speed is lost too")
			}
		})
	}
	// Indicated EGT has a cause of its own, and does not touch the nozzle.
	r := full(t).rig().set(running()).mark("egt_2", monitor.QualityStale)
	if p := r.step(); math.IsNaN(p.V[monitor.EGTIndicated]) || p.EGTProbesUsed != 3 {
		t.Errorf("with three of four probes EGT is %g of %d", p.V[monitor.EGTIndicated], p.EGTProbesUsed)
	}
	r.mark("egt_3", monitor.QualityInvalidCode)
	p := r.step()
	if want := (monitor.Cause{Kind: monitor.ChannelBad, Channel: int32(r.index("egt_2")), Quality: monitor.QualityStale}); !math.IsNaN(p.V[monitor.EGTIndicated]) || p.EGTCause != want || p.Choke != monitor.Choked {
		t.Errorf("with two of four probes EGT is %g, %+v, %v", p.V[monitor.EGTIndicated], p.EGTCause, p.Choke)
	}
	b := full(t)
	b.Stations.EGT = nil
	if p := b.rig().set(running()).step(); p.EGTCause.Kind != monitor.NotConfigured {
		t.Errorf("without a harness the cause is %v", p.EGTCause.Kind)
	}
}

// At rest the rake's zero error must not show a flow.
func TestNoFlowAtRest(t *testing.T) {
	rest := running()
	maps.Copy(rest, map[string]float64{
		"p_exit": 0, "p7_1": 100, "p7_2": 60, "p7_3": 80, "p7_4": 40, "t7_1": 290, "t7_2": 290, "t7_3": 290, "t7_4": 290,
		"egt_1": 290, "egt_2": 290, "egt_3": 290, "egt_4": 290, "speed": 0, "fuel_flow": 0, "dp_bellmouth": 0, "p_inlet": 0,
	})
	b := full(t)
	b.Nozzle.DuctLoss = 0
	r := b.rig().set(rest)
	p := r.steps(3)
	if p.Choke != monitor.NoFlow || p.V[monitor.MassFlow] != 0 || p.V[monitor.GrossThrust] != 0 || p.V[monitor.ThroatMach] != 0 || p.Phase != monitor.Off {
		t.Errorf("at rest %v, %g kg/s, %g N, Mach %g, %v", p.Choke, p.V[monitor.MassFlow], p.V[monitor.GrossThrust], p.V[monitor.ThroatMach], p.Phase)
	}
	for _, q := range []monitor.Quantity{monitor.MassFlowU95, monitor.GrossThrustU95, monitor.IndependentFlowParameter} {
		if _, ok := p.Get(q); ok {
			t.Errorf("%s = %g without a flow", q.Info().Name, p.V[q])
		}
	}
	// 0.3 % above back pressure is a flow: NPR − 1 = 0.003 is the floor.
	r.set(map[string]float64{"p7_1": 301, "p7_2": 301, "p7_3": 301, "p7_4": 301})
	if p := r.step(); p.Choke != monitor.Unchoked || !(p.V[monitor.MassFlow] > 0) {
		t.Errorf("at NPR %g %v, %g kg/s", p.V[monitor.NPR], p.Choke, p.V[monitor.MassFlow])
	}
	r.set(map[string]float64{"p7_1": 299, "p7_2": 299, "p7_3": 299, "p7_4": 299})
	if p := r.step(); p.Choke != monitor.NoFlow {
		t.Errorf("at NPR %g %v", p.V[monitor.NPR], p.Choke)
	}
	// Below back pressure by more than the floor something is wired wrong.
	r.set(map[string]float64{"p7_1": -900, "p7_2": -900, "p7_3": -900, "p7_4": -900})
	if p := r.step(); p.Choke != monitor.NoFlow || p.Warnings&monitor.WarnPressureOrder == 0 {
		t.Errorf("reversed: %v, warnings %b", p.Choke, p.Warnings)
	}
}

// The choke state changes half the hysteresis beyond margin zero, both ways, and
// keeps what it was in between.
func TestChokeHysteresis(t *testing.T) {
	b := simple(t)
	b.Gamma, b.GasR = 1.4, 287
	b.Nozzle.Hysteresis = 0.5
	critical := math.Pow(1.2, 3.5) // NACA Report 1135, eq. 45 at M = 1
	at := func(r *rig, margin float64) monitor.ChokeState {
		return r.set(map[string]float64{"t7": 800, "p_exit": pamb, "p7": critical * pamb * (1 + margin/100)}).step().Choke
	}
	r := b.rig()
	for i, tt := range []struct {
		margin float64
		want   monitor.ChokeState
	}{
		{-20, monitor.Unchoked},
		{-0.01, monitor.Unchoked},
		{0.01, monitor.Unchoked},
		{0.2499, monitor.Unchoked},
		{0.2501, monitor.Choked},
		{0.01, monitor.Choked},
		{-0.2499, monitor.Choked},
		{-0.2501, monitor.Unchoked},
		{0.2499, monitor.Unchoked},
		{30, monitor.Choked},
	} {
		if got := at(r, tt.margin); got != tt.want {
			t.Errorf("step %d, margin %g %%: %v, want %v", i, tt.margin, got, tt.want)
		}
	}
	// Without a past the best estimate decides.
	for margin, want := range map[float64]monitor.ChokeState{0.01: monitor.Choked, -0.01: monitor.Unchoked} {
		if got := at(b.rig(), margin); got != want {
			t.Errorf("first scan, margin %g %%: %v, want %v", margin, got, want)
		}
	}
	// Nor has one that was not known.
	at(r, -20)
	r.mark("p7", monitor.QualityStale).step()
	if got := at(r, 0.01); got != monitor.Choked {
		t.Errorf("after a gap, margin 0.01 %%: %v", got)
	}
}

// A calibrated choke NPR is used in the place of the one-dimensional one, and
// said to be.
func TestCalibratedChoke(t *testing.T) {
	b := simple(t)
	b.Gamma, b.GasR = 1.4, 287
	b.Nozzle.ChokeNPR = 2.1
	p := b.rig().set(map[string]float64{"t7": 800, "p_exit": 100e3, "p7": 205e3}).step()
	if p.Choke != monitor.Unchoked || p.V[monitor.ChokeNPR] != 2.1 || !near(p.V[monitor.CriticalNPR], math.Pow(1.2, 3.5), 1e-9) || p.ChokeNPRFrom != monitor.SourceCalibration {
		t.Errorf("%v at choke NPR %g from %v, critical %g", p.Choke, p.V[monitor.ChokeNPR], p.ChokeNPRFrom, p.V[monitor.CriticalNPR])
	}
	if want := 100 * (2.05/2.1 - 1); !near(p.V[monitor.ChokeMarginPercent], want, 1e-12) {
		t.Errorf("margin %g %%, want %g", p.V[monitor.ChokeMarginPercent], want)
	}
}

// Choke is armed above a speed, with hysteresis, and only while lit.
func TestArmed(t *testing.T) {
	r := full(t).rig().set(running())
	speed := func(n float64) bool { return r.set(map[string]float64{"speed": n}).step().ChokeArmed }
	for i, tt := range []struct {
		rpm  float64
		want bool
	}{
		{9500, false},
		{19499, false},
		{19500, true},
		{19100, true},
		{19000, true}, // the hysteresis of 500 rpm
		{18999, false},
		{19499, false},
		{21000, true},
	} {
		if got := speed(tt.rpm); got != tt.want {
			t.Errorf("step %d, %g rpm: armed %v", i, tt.rpm, got)
		}
	}
	// A flame that is out disarms; a speed that is missing leaves it as it was.
	r.mark("speed", monitor.QualityStale)
	if !r.step().ChokeArmed {
		t.Error("a lost speed disarms")
	}
	r.set(map[string]float64{"speed": 21000, "egt_1": 400, "egt_2": 400, "egt_3": 400, "egt_4": 400})
	r.cfg.Phase.LitEGT = 0
	b := full(t)
	b.Phase.LitEGT = 500
	r2 := b.rig().set(running())
	r2.set(map[string]float64{"speed": 21000})
	if p := r2.steps(40); !p.ChokeArmed || !p.Lit {
		t.Fatalf("at 21000 rpm armed %v, lit %v", p.ChokeArmed, p.Lit)
	}
	r2.set(map[string]float64{"egt_1": 400, "egt_2": 400, "egt_3": 400, "egt_4": 400})
	if p := r2.step(); p.ChokeArmed || p.Lit {
		t.Errorf("without a flame armed %v, lit %v", p.ChokeArmed, p.Lit)
	}
	// Never by speed when the rig file gives none.
	b.Nozzle.ArmedAboveRPM = 0
	if b.rig().set(running()).step().ChokeArmed {
		t.Error("armed without a speed to arm at")
	}
}

// Indicated EGT carries the harness and its trim, and nothing of the nozzle's
// temperature; that one comes from the rake, and knows nothing of EGT.
func TestTwoTemperatures(t *testing.T) {
	b := full(t)
	b.Stations.EGTTrim = -12
	r := b.rig().set(running())
	p := r.steps(3)
	compare(t, "rake and harness", p, 1e-14, map[monitor.Quantity]float64{
		monitor.EGTIndicated:     (920+915+918+911)/4.0 - 12,
		monitor.TotalTemperature: (880 + 890 + 885 + 881) / 4.0,
		monitor.EGTSpread:        9, monitor.EGTHottest: 920, monitor.EGTColdest: 911,
	})
	if p.TemperatureBy != monitor.SourceRake {
		t.Errorf("temperature by %v", p.TemperatureBy)
	}
	flow := p.V[monitor.MassFlow]
	if p := r.set(map[string]float64{"egt_1": 990, "egt_4": 990}).step(); !near(p.V[monitor.MassFlow], flow, 1e-13) || p.V[monitor.TotalTemperature] != 884 {
		t.Errorf("another EGT moves the flow from %.15g to %.15g kg/s", flow, p.V[monitor.MassFlow])
	}
	if p := r.set(map[string]float64{"t7_1": 1000}).step(); p.V[monitor.EGTIndicated] != (990+915+918+990)/4.0-12 {
		t.Errorf("another rake temperature makes EGT %g", p.V[monitor.EGTIndicated])
	}
	// Without a rake the declared factor makes one from the other.
	b.Stations.T7, b.Stations.T7FromEGT, b.Stations.T7FactorU95 = nil, 0.98, 0.01
	if p := b.rig().set(running()).step(); !near(p.V[monitor.TotalTemperature], 0.98*904, 1e-14) || p.TemperatureBy != monitor.SourceEGTFactor {
		t.Errorf("temperature %g by %v, want 0.98 · 904 K", p.V[monitor.TotalTemperature], p.TemperatureBy)
	}
	// The limits act on indicated EGT: 990 K is not passed by a rake at 1000 K.
	r = full(t).rig().set(running()).set(map[string]float64{"t7_1": 1000, "t7_2": 1000, "t7_3": 1000, "t7_4": 1000})
	if r.steps(100); r.s.EGT.Bands[0].Over || r.s.EGT.Bands[0].Elapsed != 0 {
		t.Error("the rake temperature counts against the limit of indicated EGT")
	}
	r.set(map[string]float64{"egt_1": 1000, "egt_2": 1000, "egt_3": 1000, "egt_4": 1000})
	if r.steps(21); r.s.EGT.Bands[0].Elapsed != second {
		t.Errorf("after 20 scans above the limit %d ms have elapsed", r.s.EGT.Bands[0].Elapsed/1e6)
	}
}

// Fuel-air ratio and flow close: f = Wf (1 + WAR)/(W8 − Wf) holds to 1e-8 from
// the first lit scan, over all flows, fuels and humidities, and bit for bit no
// worse once settled.
func TestFuelAirClosure(t *testing.T) {
	for _, humidity := range []float64{0, 0.5, 1} {
		for _, ambient := range []float64{273.15, 303.15} {
			for _, gauge := range []float64{2e3, 30e3, 130e3, 250e3} {
				for _, fuel := range []float64{0.005, 0.03, 0.08, 0.14} {
					r := full(t).rig().set(running()).set(map[string]float64{
						"humidity": humidity, "t_ambient": ambient, "fuel_flow": fuel,
						"p7_1": gauge, "p7_2": gauge, "p7_3": gauge, "p7_4": gauge,
					})
					for k := range 3 {
						p := r.step()
						if p.Warnings&monitor.WarnOverStoichiometric != 0 {
							break
						}
						want := fuel * (1 + p.V[monitor.HumidityRatio]) / (p.V[monitor.MassFlow] - fuel)
						if d := p.V[monitor.FuelAirRatio] - want; !(math.Abs(d) < 1e-8) {
							t.Errorf("scan %d, %g kg/s of fuel, %g Pa, humidity %g: f is %.12g, the identity gives %.12g", k, fuel, gauge, humidity, p.V[monitor.FuelAirRatio], want)
						}
						if humidity > 0 && !(p.V[monitor.HumidityRatio] > 0.001) {
							t.Errorf("humidity ratio %g", p.V[monitor.HumidityRatio])
						}
					}
				}
			}
		}
	}
}

// The fuel-air ratio is zero until lit, frozen while the flow is too small to
// close it, and limited below stoichiometric; each is said.
func TestFuelAirLimits(t *testing.T) {
	r := full(t).rig().set(running())
	closed := r.steps(3).V[monitor.FuelAirRatio]
	if !(closed > 0.015 && closed < 0.025) {
		t.Fatalf("f is %g", closed)
	}
	low := map[string]float64{"p7_1": 1300, "p7_2": 1300, "p7_3": 1300, "p7_4": 1300, "p_exit": 0, "fuel_flow": 1.4} // W8 < Wf
	p := r.set(low).step()
	if p.V[monitor.FuelAirRatio] != closed || p.Warnings&monitor.WarnFuelFrozen == 0 {
		t.Errorf("f is %g with warnings %b, want %g frozen", p.V[monitor.FuelAirRatio], p.Warnings, closed)
	}
	// Too much fuel for the air: limited to 98 % of stoichiometric.
	p = r.set(running()).set(map[string]float64{"fuel_flow": 0.9}).steps(3)
	// C12H23 + 17.75 O2: molar mass of the fuel over that of the dry air with 17.75 O2.
	stoichiometric := 167.31102 / (17.75 / 0.209476 * 28.9651159)
	if f := p.V[monitor.FuelAirRatio]; !near(f, 0.98*stoichiometric, 2e-3) || p.Warnings&monitor.WarnOverStoichiometric == 0 {
		t.Errorf("f is %g with warnings %b, want 98 %% of %g", f, p.Warnings, stoichiometric)
	}
	// A meter that reads below zero burns nothing.
	if p := r.set(map[string]float64{"fuel_flow": -0.01}).steps(3); p.V[monitor.FuelAirRatio] != 0 {
		t.Errorf("with a negative fuel flow f is %g", p.V[monitor.FuelAirRatio])
	}
	// A meter that is lost leaves the last f, says so, and has no uncertainty.
	r.set(running()).steps(3)
	p = r.mark("fuel_flow", monitor.QualityStale).step()
	if !near(p.V[monitor.FuelAirRatio], closed, 1e-9) || p.Warnings&monitor.WarnAssumedFuel == 0 || !math.IsNaN(p.V[monitor.ChokeMarginPercentU95]) {
		t.Errorf("without the meter f is %g, warnings %b, margin ±%g", p.V[monitor.FuelAirRatio], p.Warnings, p.V[monitor.ChokeMarginPercentU95])
	}
	// Without a flame there is no fuel in the gas, whatever the meter says.
	cold := map[string]float64{"egt_1": 180, "egt_2": 180, "egt_3": 180, "egt_4": 180}
	if p := r.set(running()).set(cold).step(); p.V[monitor.FuelAirRatio] != 0 || p.Lit {
		t.Errorf("without a flame f is %g", p.V[monitor.FuelAirRatio])
	}
	// Humidity that is not measured is dry air, and said.
	p = r.set(running()).mark("humidity", monitor.QualityStale).step()
	if p.V[monitor.HumidityRatio] != 0 || p.Warnings&monitor.WarnAssumedHumidity == 0 {
		t.Errorf("without humidity the ratio is %g, warnings %b", p.V[monitor.HumidityRatio], p.Warnings)
	}
}

// The metal of a cold-measured nozzle follows the gas as dT/dt = (Tg − T)/τ: after
// a step of the gas T = Tg + (T0 − Tg) exp(−t/τ), and the area grows as
// (1 + α (T − Tref))².
func TestMetalLag(t *testing.T) {
	b := simple(t)
	n := &b.Nozzle
	n.AreaBasis, n.ReferenceTemperature, n.ExpansionCoefficient, n.MetalLag = nozzle.AreaCold, 293.15, 15e-6, 20*second
	r := b.rig().set(map[string]float64{"p7": 200e3, "p_exit": pamb, "t7": 300})
	r.steps(2)
	r.set(map[string]float64{"t7": 900})
	for k := 1; k <= 1200; k++ { // three time constants
		p := r.step()
		metal := 900 - 600*math.Exp(-float64(k)*0.05/20)
		grown := 1 + 15e-6*(metal-293.15)
		if !near(r.s.Metal, metal, 1e-12) || !near(p.V[monitor.ThroatArea], area*grown*grown, 1e-14) {
			t.Fatalf("after %g s the metal is at %.9g K, want %.9g; area %.9g m²", float64(k)*0.05, r.s.Metal, metal, p.V[monitor.ThroatArea])
		}
	}
	// A gap in the data is one long step, not a short one.
	before := r.s.Metal
	r.set(map[string]float64{"t7": 400})
	r.n += 399 // 20 s without a scan
	r.step()
	if want := 400 + (before-400)*math.Exp(-1); !near(r.s.Metal, want, 1e-12) {
		t.Errorf("after a gap of one time constant the metal is at %g K, want %g", r.s.Metal, want)
	}
	// Without a lag the metal is as hot as the gas.
	n.MetalLag = 0
	r = b.rig().set(map[string]float64{"p7": 200e3, "p_exit": pamb, "t7": 300})
	r.step()
	if r.set(map[string]float64{"t7": 900}).step(); r.s.Metal != 900 {
		t.Errorf("metal at %g K without a lag", r.s.Metal)
	}
}

// A value that moves faster than the channel can is left out, and stays out while
// it is held; the channel comes back when its value does, or when the time would
// have allowed the change.
func TestRate(t *testing.T) {
	b := simple(t)
	b.Channels[0].MaxRate = 400e3 // Pa/s: 20 kPa per scan
	readings := map[string]float64{"p7": 200e3, "p_exit": pamb, "t7": 800}
	q := func(r *rig, p float64) monitor.Quality {
		r.set(map[string]float64{"p7": p}).step()
		return r.scan.Quality[0]
	}
	r := b.rig().set(readings)
	for i, tt := range []struct {
		p    float64
		want monitor.Quality
	}{
		{200e3, monitor.QualityGood},
		{220e3, monitor.QualityGood}, // at the rate
		{199e3, monitor.QualityRate}, // 21 kPa down
		{220e3, monitor.QualityGood},
		{500e3, monitor.QualityRate},
		{500e3, monitor.QualityRate},
		{221e3, monitor.QualityGood},
	} {
		if got := q(r, tt.p); got != tt.want {
			t.Errorf("reading %d, %g Pa: %v, want %v", i, tt.p, got, tt.want)
		}
		if got := r.scan.Value[0]; (r.scan.Quality[0] == monitor.QualityGood) == math.IsNaN(got) {
			t.Errorf("reading %d: value %g of quality %v", i, got, r.scan.Quality[0])
		}
	}
	// A true step of 100 kPa is believed after 100/400 s: five scans.
	for k := 1; k <= 6; k++ {
		want := monitor.QualityRate
		if k >= 5 {
			want = monitor.QualityGood
		}
		if got := q(r, 321e3); got != want {
			t.Errorf("scan %d after a step: %v, want %v", k, got, want)
		}
	}
	// A channel of 10 readings per second: the spike is not used while it is held.
	r = b.rig().set(readings)
	r.step()
	r.set(map[string]float64{"p7": 600e3}).step()
	r.mark("p7", monitor.QualityHeld)
	r.age[0] = period
	if p := r.step(); r.scan.Quality[0] != monitor.QualityRate || !math.IsNaN(p.V[monitor.RakePressure]) {
		t.Errorf("a spike that is held is %v: rake %g Pa", r.scan.Quality[0], p.V[monitor.RakePressure])
	}
	r.set(map[string]float64{"p7": 200e3})
	if p := r.step(); p.V[monitor.RakePressure] != 200e3 {
		t.Errorf("after the spike the rake reads %g Pa", p.V[monitor.RakePressure])
	}
	// The rate is that of event time: 80 kPa in 0.2 s since the last sample.
	r.mark("p7", monitor.QualityHeld)
	for k := range int64(3) {
		r.age[0] = (k + 1) * period
		r.step()
	}
	if got := q(r, 280e3); got != monitor.QualityGood {
		t.Errorf("80 kPa in 0.2 s is %v", got)
	}
}

// A channel whose reading does not move by one bit for the stuck time is stuck,
// also while it is held, until it moves.
func TestStuck(t *testing.T) {
	b := simple(t)
	b.Channels[1].Stuck = 2 * second
	r := b.rig().set(map[string]float64{"p7": 200e3, "p_exit": pamb, "t7": 800})
	for k := range 45 {
		p := r.step()
		want := monitor.QualityGood
		if k >= 40 { // 2 s after the first
			want = monitor.QualityStuck
		}
		if r.scan.Quality[1] != want || (want == monitor.QualityGood) == math.IsNaN(p.V[monitor.NPR]) {
			t.Fatalf("scan %d: %v, NPR %g", k, r.scan.Quality[1], p.V[monitor.NPR])
		}
		if want == monitor.QualityStuck && p.Cause != (monitor.Cause{Kind: monitor.ChannelBad, Channel: 1, Quality: monitor.QualityStuck}) {
			t.Fatalf("cause %+v", p.Cause)
		}
	}
	r.mark("t7", monitor.QualityHeld)
	r.age[1] = period
	if r.step(); r.scan.Quality[1] != monitor.QualityStuck {
		t.Errorf("stuck and held is %v", r.scan.Quality[1])
	}
	r.set(map[string]float64{"t7": math.Nextafter(800, 900)})
	if r.step(); r.scan.Quality[1] != monitor.QualityGood {
		t.Errorf("after one bit of change %v", r.scan.Quality[1])
	}
	for k := range 100 { // noise is never stuck
		r.set(map[string]float64{"t7": 800 + float64(k%2)})
		if r.step(); r.scan.Quality[1] != monitor.QualityGood {
			t.Fatalf("a reading that moves is %v", r.scan.Quality[1])
		}
	}
}

// Bellmouth flow against the flow function of NACA Report 1135, Table I (γ = 1.4):
// W √(R T)/(A p) = C*/(A/A*), C* = √γ (2/(γ+1))^3.
func TestBellmouth(t *testing.T) {
	cstar := math.Sqrt(1.4) / (1.2 * 1.2 * 1.2)
	for _, v := range vectors.Read(t, "naca1135.csv") {
		m := v.Num(t, "M")
		if m == 0 || m >= 1 {
			continue
		}
		b := full(t)
		b.Gamma, b.GasR = 1.4, 287.05287
		r := b.rig().set(running())
		p0, t0 := 99800-300.0, 290.0
		r.set(map[string]float64{"dp_bellmouth": p0 * (1 - v.Num(t, "p_pt_exact"))})
		p := r.steps(2)
		want := 0.06 * 0.985 * p0 / math.Sqrt(287.05287*t0) * cstar / v.Num(t, "A_Astar_exact")
		compare(t, fmt.Sprintf("bellmouth at Mach %g", m), p, 2e-9, map[monitor.Quantity]float64{
			monitor.AirFlow: want, monitor.IndependentFlow: want + 0.14, monitor.FlowBalance: want + 0.14 - p.V[monitor.MassFlow],
		})
		// The independent point lies by W √(R T8)/(A8 p8).
		phi := (want + 0.14) * math.Sqrt(287.05287*884) / (area * p.V[monitor.TotalPressure])
		compare(t, "independent", p, 2e-9, map[monitor.Quantity]float64{monitor.IndependentFlowParameter: phi})
	}
	// Real air, dry: the flow of thermally_perfect_sub.csv at 300 K and NPR 1.05.
	for _, v := range vectors.Read(t, "thermally_perfect_sub.csv") {
		if v["gas"] != "dry_air" || v.Num(t, "T0_K") != 300 || v.Num(t, "npr") > 1.3 {
			continue
		}
		p0 := 99500.0
		r := full(t).rig().set(running()).set(map[string]float64{"humidity": 0, "t_inlet": 300, "dp_bellmouth": p0 * (1 - 1/v.Num(t, "npr"))})
		want := 0.06 * 0.985 * p0 / math.Sqrt(gasConstants(t)["0"]*300) * v.Num(t, "flow")
		compare(t, "bellmouth of dry air", r.step(), 2e-8, map[monitor.Quantity]float64{monitor.AirFlow: want})
	}
	// No pressure drop, no flow; without an inlet pressure the barometer is the total.
	r := full(t).rig().set(running()).set(map[string]float64{"dp_bellmouth": -5})
	if p := r.step(); p.V[monitor.AirFlow] != 0 || p.V[monitor.IndependentFlow] != 0.14 {
		t.Errorf("at −5 Pa air flow %g, with fuel %g", p.V[monitor.AirFlow], p.V[monitor.IndependentFlow])
	}
	for _, id := range []string{"dp_bellmouth", "t_inlet", "p_inlet"} {
		p := full(t).rig().set(running()).mark(id, monitor.QualityStale).step()
		if _, ok := p.Get(monitor.AirFlow); ok || math.IsNaN(p.V[monitor.MassFlow]) {
			t.Errorf("without %s air flow is %g, nozzle flow %g", id, p.V[monitor.AirFlow], p.V[monitor.MassFlow])
		}
	}
	p := full(t).rig().set(running()).mark("fuel_flow", monitor.QualityStale).step()
	if _, ok := p.Get(monitor.IndependentFlow); ok || math.IsNaN(p.V[monitor.AirFlow]) {
		t.Errorf("without the fuel meter the independent flow is %g", p.V[monitor.IndependentFlow])
	}
}

// Referred values by θ = Tt/288.15 K and δ = pt/101325 Pa: example W12 (NASA's
// definition of corrected flow).
func TestReferred(t *testing.T) {
	w12 := worked(t, "W12_corrected")
	r := full(t).rig().set(running()).set(map[string]float64{"p_baro": 98.3e3, "p_inlet": -300, "t_inlet": 303.15, "speed": 10000})
	p := r.steps(2)
	compare(t, "W12", p, 1e-7, map[monitor.Quantity]float64{
		monitor.ReferredSpeed:  w12["N_corrected_of_10000rpm"],
		monitor.ReferredFlow:   p.V[monitor.MassFlow] * w12["W_corrected"] / 23.5,
		monitor.ReferredThrust: p.V[monitor.GrossThrust] / w12["delta"],
		monitor.MeasuredThrust: 3900,
	})
	// The other rows of W12: θ, δ, and the largest flux of air at sea level, whatever the size.
	v := &p.V
	sonic := simple(t)
	sonic.Gamma, sonic.GasR, sonic.Nozzle.ThroatArea = 1.4, 287.05287, 1
	flux := sonic.rig().set(map[string]float64{"p7": 101325, "t7": 288.15, "p_exit": 20e3}).step().V[monitor.MassFlow]
	const pound, foot = 0.45359237, 0.3048 // kg and m, exact
	for name, got := range map[string]float64{
		"theta": square(v[monitor.Speed] / v[monitor.ReferredSpeed]), "delta": v[monitor.GrossThrust] / v[monitor.ReferredThrust],
		"choked_corrected_flux_kg_s_m2": flux, "same_lbm_s_ft2": flux / pound * foot * foot, "same_lbm_s_in2": flux / pound * foot * foot / 144,
	} {
		if !near(got, w12[name], 3e-8) {
			t.Errorf("W12 %s: %.9g, want %.9g", name, got, w12[name])
		}
	}
	// EGT/θ^x, by hand: θ 1.0520562 to the power 0.9 is 1.0467302; 916 K is the mean.
	b := full(t)
	b.Stations.EGTExponent = 0.9
	other := b.rig().set(running()).set(map[string]float64{"t_inlet": 303.15})
	compare(t, "EGT/θ^0.9", other.steps(2), 1e-6, map[monitor.Quantity]float64{monitor.ReferredEGT: 916 / 1.0467302})
	compare(t, "EGT/θ", p, 1e-9, map[monitor.Quantity]float64{monitor.ReferredEGT: 916 * 288.15 / 303.15})
	// At sea-level conditions of ISO 2533 they are the values themselves.
	r.set(map[string]float64{"p_baro": 101625, "t_inlet": 288.15})
	p = r.steps(2)
	compare(t, "ISO 2533", p, 1e-12, map[monitor.Quantity]float64{
		monitor.ReferredSpeed: 10000, monitor.ReferredFlow: p.V[monitor.MassFlow], monitor.ReferredThrust: p.V[monitor.GrossThrust],
	})
	if p := r.mark("t_inlet", monitor.QualityStale).step(); !math.IsNaN(p.V[monitor.ReferredSpeed]) || !math.IsNaN(p.V[monitor.ReferredFlow]) {
		t.Errorf("without an inlet temperature referred speed is %g", p.V[monitor.ReferredSpeed])
	}
}

// A configuration that cannot work is refused with every fault.
func TestNew(t *testing.T) {
	for _, tt := range []struct {
		name   string
		change func(*builder)
	}{
		{"a channel that refers to itself", func(b *builder) { b.Channels[1].Port = 1 }},
		{"two that refer to each other", func(b *builder) { b.Channels[1].Port, b.Channels[2].Port = 2, 1 }},
		{"a port that is none", func(b *builder) { b.Channels[2].Port = 99 }},
		{"a gauge without port", func(b *builder) { b.Channels[2].Port = -1 }},
		{"a nozzle that is none", func(b *builder) { b.Nozzle.ThroatArea = -1 }},
		{"a bellmouth that is none", func(b *builder) { b.Bellmouth.Coefficient = -1 }},
	} {
		b := full(t)
		tt.change(b)
		if _, err := compute.New(b.Config); err == nil {
			t.Errorf("%s is taken", tt.name)
		}
	}
}

// A changed configuration keeps the past of channels that are the same; one with
// another calibration begins anew, so that the correction is no impossible step.
func TestReset(t *testing.T) {
	b := simple(t)
	b.Channels[0].MaxRate = 1e3
	r := b.rig().set(map[string]float64{"p7": 200e3, "p_exit": pamb, "t7": 800})
	r.steps(3)
	from := b.Channels
	b2 := simple(t)
	b2.Channels[0].MaxRate = 1e3
	b2.Channels[0].Polynomial = []float64{5e3, 1} // a zero correction of 5 kPa
	r2 := b2.rig()
	r2.s = r.s
	r2.c.Reset(&r2.s, from)
	r2.n = r.n
	r2.set(map[string]float64{"p7": 200e3, "p_exit": pamb, "t7": 800})
	if p := r2.step(); p.V[monitor.RakePressure] != 205e3 {
		t.Errorf("after the correction the rake reads %g Pa, %v", p.V[monitor.RakePressure], r2.scan.Quality[0])
	}
	// The same calibration: the past counts, a step is one.
	r3 := simple(t)
	r3.Channels[0].MaxRate = 1e3
	r4 := r3.rig()
	r4.s, r4.n = r.s, r.n
	r4.c.Reset(&r4.s, from)
	r4.set(map[string]float64{"p7": 205e3, "p_exit": pamb, "t7": 800})
	if r4.step(); r4.scan.Quality[0] != monitor.QualityRate {
		t.Errorf("5 kPa in a scan are %v", r4.scan.Quality[0])
	}
}

// What is doubtful about a point is said, and nothing else is.
func TestWarnings(t *testing.T) {
	for _, tt := range []struct {
		name string
		set  map[string]float64
		want monitor.Warning
	}{
		{"an ordinary point", nil, 0},
		{"hotter than the gas data", map[string]float64{"t7_1": 1810, "t7_2": 1810, "t7_3": 1810, "t7_4": 1810}, monitor.WarnGasRange},
		{"an NPR above the coefficient tables", map[string]float64{"p7_1": 230e3, "p7_2": 230e3, "p7_3": 230e3, "p7_4": 230e3}, monitor.WarnCoefficientRange},
		{"and below", map[string]float64{"p7_1": 4e3, "p7_2": 4e3, "p7_3": 4e3, "p7_4": 4e3, "fuel_flow": 0.01}, monitor.WarnCoefficientRange},
		{"a relative humidity that cannot be", map[string]float64{"humidity": 1.2}, monitor.WarnAssumedHumidity},
	} {
		p := full(t).rig().set(running()).set(tt.set).steps(3)
		if p.Warnings != tt.want || math.IsNaN(p.V[monitor.MassFlow]) {
			t.Errorf("%s: warnings %b, want %b; flow %g", tt.name, p.Warnings, tt.want, p.V[monitor.MassFlow])
		}
	}
	// A gas of constants that are none evaluates to nothing, and says so.
	b := full(t)
	b.Gamma, b.GasR = 0.9, 287
	if p := b.rig().set(running()).step(); p.Cause.Kind != monitor.OutsideGasRange || p.Choke != monitor.ChokeUnknown {
		t.Errorf("gamma 0.9: %v, %v", p.Choke, p.Cause.Kind)
	}
}
