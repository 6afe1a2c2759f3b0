package nozzle

import (
	"errors"
	"math"
	"strings"
	"testing"

	"throatwatch/monitor/gas"
	"throatwatch/monitor/unit"
)

func near(got, want, rel float64) bool { return math.Abs(got-want) <= rel*math.Abs(want) }

// check is one comparison; digits of an 8-digit source allow 6e-9 relative.
type check struct {
	what           string
	got, want, rel float64
}

func compare(t *testing.T, name string, checks []check) {
	t.Helper()
	for _, c := range checks {
		if !near(c.got, c.want, c.rel) {
			t.Errorf("%s: %s = %.12g, want %.12g", name, c.what, c.got, c.want)
		}
	}
}

func products(tb testing.TB, f float64) *gas.Mixture {
	tb.Helper()
	m, err := gas.NewMixture(gas.Kerosene(), f, 0)
	if err != nil {
		tb.Fatal(err)
	}
	return &m
}

func perfect(tb testing.TB, gamma, r float64) *gas.Mixture {
	tb.Helper()
	m, err := gas.Perfect(gamma, r)
	if err != nil {
		tb.Fatal(err)
	}
	return &m
}

func evaluate(tb testing.TB, c Config, g *gas.Mixture, p, t0, pb float64) Result {
	tb.Helper()
	n, err := New(c)
	if err != nil {
		tb.Fatal(err)
	}
	r, err := n.Evaluate(g, Inputs{TotalPressure: unit.Absolute(p), TotalTemperature: t0, BackPressure: unit.Absolute(pb), MetalTemperature: t0})
	if err != nil {
		tb.Fatal(err)
	}
	return r
}

// The rig nozzle of f 0.02, 900 K, 250 kPa, 101.325 kPa, 0.025 m², Cd 0.97, CT 1:
// own 30-digit computation.
func TestGrossThrustBases(t *testing.T) {
	c := Config{ThroatArea: 0.025, Discharge: []Point{{1, 0.97}}}
	r := evaluate(t, c, products(t, 0.02), 250e3, 900, 101325)
	compare(t, "rig nozzle", []check{
		{"W8", r.MassFlow, 8.03854960, 1e-9},
		{"p*", r.CriticalPressure, 134458.61, 4e-8},
		{"V", r.Exit.Velocity, 544.760, 1e-6},
		{"nozzle-ideal", r.GrossThrustNozzleIdeal, 5182.573, 1e-7},
		{"fully-expanded", r.GrossThrustFullyExpanded, 5193.230, 1e-7},
		{"default basis", r.GrossThrust, 5182.573, 1e-7},
	})
	c.Basis = FullyExpanded
	c.Thrust = []Point{{2, 0.98}}
	r = evaluate(t, c, products(t, 0.02), 250e3, 900, 101325)
	compare(t, "rig nozzle, CT 0.98", []check{{"fully-expanded", r.GrossThrust, 0.98 * 5193.230, 1e-7}})
}

// A shock put at a chosen place by the closed forms of NACA Report 1135 (eqs 80,
// 95, 99) must come back from its exit pressure.
func TestShockInsideAgainstClosedForm(t *testing.T) {
	const gamma, ratio = 1.4, 2.0
	area := func(m float64) float64 {
		return math.Pow(2/(gamma+1)*(1+(gamma-1)/2*m*m), (gamma+1)/(2*(gamma-1))) / m
	}
	for _, m1 := range []float64{1.1, 1.5, 1.9, 2.15} {
		m2 := math.Sqrt((1 + (gamma-1)/2*m1*m1) / (gamma*m1*m1 - (gamma-1)/2))
		loss := math.Pow((gamma+1)*m1*m1/((gamma-1)*m1*m1+2), gamma/(gamma-1)) * math.Pow((gamma+1)/(2*gamma*m1*m1-(gamma-1)), 1/(gamma-1))
		// Behind the shock the flow is isentropic with the area of its own sonic throat.
		exitArea := ratio / area(m1) * area(m2)
		lo, hi := 1e-3, 1.0
		for range 200 {
			if mid := (lo + hi) / 2; area(mid) > exitArea {
				lo = mid
			} else {
				hi = mid
			}
		}
		pe := loss * math.Pow(1+(gamma-1)/2*lo*lo, -gamma/(gamma-1))
		r := evaluate(t, Config{Kind: ConvergentDivergent, ThroatArea: 0.01, ExitArea: 0.01 * ratio}, perfect(t, gamma, 287), 3e5, 600, pe*3e5)
		if r.Regime != ShockInside || !r.Choked || !near(r.Exit.Mach, lo, 1e-9) {
			t.Errorf("shock at M %g: %s, exit M %.10g, want %.10g", m1, r.Regime, r.Exit.Mach, lo)
		}
	}
}

// What holds in every regime of every nozzle: the margin identity, one mass flow
// through throat and exit, energy, sonic throat when choked; and flow and thrust
// without a step at each critical pressure ratio (a shock keeps the stream thrust).
func TestIdentities(t *testing.T) {
	for _, c := range []Config{
		{ThroatArea: 0.025},
		{Kind: ConvergentDivergent, ThroatArea: 0.025, ExitArea: 0.025},
		{Kind: ConvergentDivergent, ThroatArea: 0.025, ExitArea: 0.0262},
		{Kind: ConvergentDivergent, ThroatArea: 0.025, ExitArea: 0.06},
	} {
		for _, g := range []*gas.Mixture{products(t, 0), products(t, 0.03), perfect(t, 1.33, 287)} {
			for _, t0 := range []float64{300, 1050, 1180} {
				const pb = 101325.0
				seen := map[Regime]bool{}
				for npr := 1.001; npr < 25; npr *= 1.013 {
					r := evaluate(t, c, g, npr*pb, t0, pb)
					seen[r.Regime] = true
					exit := c.ThroatArea
					if c.Kind == ConvergentDivergent {
						exit = c.ExitArea
					}
					through := func(s State, area float64) float64 {
						return s.Pressure / (g.R() * s.Temperature) * s.Velocity * area
					}
					checks := []check{
						{"margin in Pa", r.MarginPa, r.MarginPercent / 100 * pb, 1e-9},
						{"flow at the throat", through(r.Throat, c.ThroatArea), r.MassFlow, 1e-7},
						{"flow at the exit", through(r.Exit, exit), r.MassFlow, 1e-7},
						{"energy", r.Exit.Velocity * r.Exit.Velocity / 2, g.H(t0) - g.H(r.Exit.Temperature), 1e-7},
					}
					if c.Kind == Convergent {
						checks = append(checks, check{"margin by p*", r.MarginPercent / 100, (r.CriticalPressure - pb) / pb, 1e-9})
					}
					if r.Choked {
						checks = append(checks, check{"throat M", r.Throat.Mach, 1, 1e-9})
					}
					if math.Abs(r.MarginPercent) < 0.01 { // digits go where margin passes zero
						checks = checks[1:]
					}
					compare(t, r.Regime.String(), checks)
				}
				r := evaluate(t, c, g, 2*pb, t0, pb)
				if c.Kind == ConvergentDivergent {
					seen[evaluate(t, c, g, r.DesignNPR*pb, t0, pb).Regime] = true
				}
				if c.ExitArea > 0.05 && len(seen) != 5 {
					t.Errorf("a nozzle of ratio 2.4 up to NPR 25 shows only %v", seen)
				}
				for _, at := range []float64{r.CriticalNPR, r.ShockAtExitNPR, r.DesignNPR} {
					if math.IsNaN(at) {
						continue
					}
					below := evaluate(t, c, g, at*pb*(1-1e-9), t0, pb)
					above := evaluate(t, c, g, at*pb*(1+1e-9), t0, pb)
					compare(t, "across a critical NPR", []check{{"W", above.MassFlow, below.MassFlow, 1e-7}, {"F", above.GrossThrust, below.GrossThrust, 1e-6}})
				}
			}
		}
	}
}

// A convergent-divergent nozzle of ratio 1 is a convergent one, and one of a ratio next to
// 1 nearly so.
func TestRatioOneIsConvergent(t *testing.T) {
	for _, g := range []*gas.Mixture{products(t, 0), products(t, 0.02), perfect(t, 1.33, 287)} {
		for npr := 1.01; npr < 6; npr *= 1.03 {
			convergent := evaluate(t, Config{ThroatArea: 0.025}, g, npr*1e5, 900, 1e5)
			for _, c := range []struct{ wider, flow, mach float64 }{{0, 1e-12, 1e-7}, {1e-12, 1e-11, 1e-5}} {
				r := evaluate(t, Config{Kind: ConvergentDivergent, ThroatArea: 0.025, ExitArea: 0.025 * (1 + c.wider)}, g, npr*1e5, 900, 1e5)
				compare(t, "ratio 1", []check{
					{"critical NPR", r.CriticalNPR, convergent.CriticalNPR, c.mach},
					{"W", r.MassFlow, convergent.MassFlow, c.flow},
					{"F", r.GrossThrust, convergent.GrossThrust, c.mach},
					{"throat M", r.Throat.Mach, convergent.Throat.Mach, c.mach},
					{"exit M", r.Exit.Mach, convergent.Exit.Mach, c.mach},
				})
			}
		}
	}
}

// The margin is that of p* over back pressure, whatever the state: margin ≡ (p* − pb)/pb.
func TestMarginIdentity(t *testing.T) {
	for _, f := range []float64{0, 0.02, 0.05} {
		for t0 := 280.0; t0 < 1500; t0 += 61 {
			last := math.Inf(-1)
			for p := 60e3; p < 1e6; p *= 1.07 {
				r := evaluate(t, Config{}, products(t, f), p, t0, 97e3)
				if d := r.MarginPercent/100 - (r.CriticalPressure-97e3)/97e3; math.Abs(d) > 1e-12 {
					t.Fatalf("f %g %g K %g Pa: margin is off by %g", f, t0, p, d)
				}
				if d := r.MarginPa - (r.CriticalPressure - 97e3); math.Abs(d) > 1e-12*p {
					t.Fatalf("f %g %g K %g Pa: margin in Pa is off by %g", f, t0, p, d)
				}
				if r.MarginPercent <= last {
					t.Fatalf("f %g %g K %g Pa: margin does not rise with total pressure", f, t0, p)
				}
				last = r.MarginPercent
			}
		}
	}
}

// The ideal flow parameter rises to the critical ratio, passes it without a step or a
// corner, and is flat beyond; with Cd(NPR) the flow need not be flat.
func TestFlowParameter(t *testing.T) {
	for _, g := range []*gas.Mixture{products(t, 0), products(t, 0.03), perfect(t, 1.4, 287)} {
		for _, t0 := range []float64{300, 900, 1170} {
			at := func(npr float64) float64 { return evaluate(t, Config{}, g, npr*1e5, t0, 1e5).FlowParameter }
			critical := evaluate(t, Config{}, g, 2e5, t0, 1e5).CriticalNPR
			last := 0.0
			for npr := 1.001; npr < critical; npr += 0.003 {
				if at(npr) <= last {
					t.Fatalf("NPR %g: does not rise", npr)
				}
				last = at(npr)
			}
			sonic := at(critical * (1 + 1e-12))
			for _, beyond := range []float64{1.001, 1.1, 2, 10} {
				if at(critical*beyond) != sonic {
					t.Errorf("at %g of the critical NPR: %v, sonic %v", beyond, at(critical*beyond), sonic)
				}
			}
			for _, d := range []float64{1e-9, 1e-6, 1e-4} {
				// Quadratic before the critical ratio: φ/C* = 1 − κ (ln NPR/NPR*)², κ below 1.
				if fall := 1 - at(critical*(1-d))/sonic; fall > d*d+1e-10 || fall < -1e-10 {
					t.Errorf("%g below the critical NPR the parameter has fallen by %g", d, fall)
				}
			}
		}
	}
}

// For constant γ everything has a closed form (NACA Report 1135, eqs 43 to 45, 48, 50).
func TestPerfectGasLimit(t *testing.T) {
	const r, t0, pb, area = 287.0, 700.0, 1e5, 0.02
	for _, gamma := range []float64{1.1, 1.3, 1.33, 1.4, 5.0 / 3} {
		g := perfect(t, gamma, r)
		critical := math.Pow((gamma+1)/2, gamma/(gamma-1))
		for npr := 1.05; npr < 8; npr *= 1.05 {
			v := evaluate(t, Config{ThroatArea: area}, g, npr*pb, t0, pb)
			exit := min(npr, critical)
			mach := math.Sqrt(2 / (gamma - 1) * (math.Pow(exit, (gamma-1)/gamma) - 1))
			temp := t0 / (1 + (gamma-1)/2*mach*mach)
			velocity := mach * math.Sqrt(gamma*r*temp)
			p := npr * pb / exit
			flow := p / (r * temp) * velocity * area
			compare(t, "constant γ", []check{
				{"critical NPR", v.CriticalNPR, critical, 1e-12},
				{"T*", v.CriticalTemperature, 2 * t0 / (gamma + 1), 1e-12},
				{"p*", v.CriticalPressure, npr * pb / critical, 1e-12},
				{"M", v.Throat.Mach, mach, 1e-12},
				{"T", v.Throat.Temperature, temp, 1e-12},
				{"p", v.Throat.Pressure, p, 1e-12},
				{"V", v.Exit.Velocity, velocity, 1e-12},
				{"W", v.MassFlow, flow, 1e-12},
				{"F", v.GrossThrust, flow*velocity + (p-pb)*area, 1e-12},
			})
		}
	}
}

// With a divergent part of constant γ: area ratio (eq. 80) and normal shock (eq. 93) in
// closed form, from the Mach number of the exit.
func TestPerfectGasLimitDivergent(t *testing.T) {
	const gamma = 1.33
	g := perfect(t, gamma, 287)
	areaRatio := func(m float64) float64 {
		return math.Pow(2/(gamma+1)*(1+(gamma-1)/2*m*m), (gamma+1)/(2*(gamma-1))) / m
	}
	npr := func(m float64) float64 { return math.Pow(1+(gamma-1)/2*m*m, gamma/(gamma-1)) }
	for _, mach := range []float64{1.01, 1.1, 1.5, 2, 3} {
		r := evaluate(t, Config{Kind: ConvergentDivergent, ThroatArea: 0.02, ExitArea: 0.02 * areaRatio(mach)}, g, 3e5, 900, 1e4)
		shock := 1 + 2*gamma/(gamma+1)*(mach*mach-1)
		compare(t, "constant γ, divergent", []check{
			{"third", r.DesignNPR, npr(mach), 1e-11},
			{"second", r.ShockAtExitNPR, npr(mach) / shock, 1e-9},
			{"exit M", r.Exit.Mach, mach, 1e-10},
		})
		if m := evaluate(t, Config{Kind: ConvergentDivergent, ThroatArea: 0.02, ExitArea: 0.02 * areaRatio(1/mach)}, g, 3e5, 900, 1e4); !near(m.CriticalNPR, npr(1/mach), 1e-10) {
			t.Errorf("first for exit M %g: %v, want %v", 1/mach, m.CriticalNPR, npr(1/mach))
		}
	}
}

// Coefficients of station 7 refer to p7: the duct loss is in them, and does not
// count again; the choke margin sees p8 either way.
func TestCoefficientStation(t *testing.T) {
	g := products(t, 0.02)
	c := Config{ThroatArea: 0.025, DuctLoss: 0.02, Discharge: []Point{{1, 0.95}, {3, 0.95}}}
	at8 := evaluate(t, c, g, 250e3, 900, 101325)
	c.CoefficientStation = 7
	at7 := evaluate(t, c, g, 250e3, 900, 101325)
	none := evaluate(t, Config{ThroatArea: 0.025, Discharge: c.Discharge}, g, 250e3, 900, 101325)
	less := evaluate(t, Config{ThroatArea: 0.025, Discharge: c.Discharge}, g, 245e3, 900, 101325)
	compare(t, "station", []check{
		{"W at 7", at7.MassFlow, none.MassFlow, 1e-14},
		{"F at 7", at7.GrossThrust, none.GrossThrust, 1e-14},
		{"W at 8", at8.MassFlow, less.MassFlow, 1e-14},
		{"F at 8", at8.GrossThrust, less.GrossThrust, 1e-14},
		{"npr at 7", at7.NPR, less.NPR, 1e-15},
		{"npr at 8", at8.NPR, less.NPR, 1e-15},
		{"rake npr", at8.NPRRake, 250e3 / 101325.0, 1e-15},
		{"margin", at7.MarginPercent, less.MarginPercent, 1e-12},
	})
}

func TestChokeNPRCalibrated(t *testing.T) {
	c := Config{ThroatArea: 0.025, ChokeNPR: 2.5}
	r := evaluate(t, c, products(t, 0.02), 250e3, 900, 101325)
	if r.Choked || !r.ChokeCalibrated || r.ChokeNPR != 2.5 || !near(r.CriticalNPR, 1.859308187, 1e-8) {
		t.Errorf("choked %v, choke NPR %g, critical %g", r.Choked, r.ChokeNPR, r.CriticalNPR)
	}
	compare(t, "calibrated", []check{{"margin", r.MarginPercent, 100 * (250e3/101325.0/2.5 - 1), 1e-12}, {"margin in Pa", r.MarginPa, 250e3/2.5 - 101325, 1e-12}})
}

// A steel throat 600 K hotter than when measured: area · (1 + 1.2e-5 · 600)².
func TestColdArea(t *testing.T) {
	c := Config{ThroatArea: 0.025, AreaBasis: AreaCold, ExpansionCoefficient: 1.2e-5, ReferenceTemperature: 293.15}
	n, err := New(c)
	if err != nil {
		t.Fatal(err)
	}
	in := Inputs{TotalPressure: 250e3, BackPressure: 101325, TotalTemperature: 900, MetalTemperature: 893.15}
	hot, err := n.Evaluate(products(t, 0.02), in)
	if err != nil {
		t.Fatal(err)
	}
	compare(t, "cold area", []check{
		{"A8", hot.ThroatArea, 0.025 * 1.0072 * 1.0072, 1e-14},
		{"W", hot.MassFlow, 8.287165 * 1.0072 * 1.0072, 1e-7},
	})
	in.ThroatArea = 0.03
	if r, err := n.Evaluate(products(t, 0.02), in); err != nil || !near(r.ThroatArea, 0.03*1.0072*1.0072, 1e-14) {
		t.Errorf("area of the position channel: %v, %v", r.ThroatArea, err)
	}
	in.MetalTemperature = math.NaN()
	if r, err := n.Evaluate(products(t, 0.02), in); err != nil || !math.IsNaN(r.MassFlow) || !math.IsNaN(r.GrossThrust) || !r.Choked {
		t.Errorf("metal temperature not known: W %v, F %v, %v", r.MassFlow, r.GrossThrust, err)
	}
}

func TestUnknownArea(t *testing.T) {
	for _, p := range []float64{101325, 250e3} {
		r := evaluate(t, Config{}, products(t, 0.02), p, 900, 101325)
		if !math.IsNaN(r.MassFlow) || !math.IsNaN(r.GrossThrust) || !(r.FlowParameter >= 0) || !(r.CriticalNPR > 1) {
			t.Errorf("%g Pa: W %v, F %v, φ %v", p, r.MassFlow, r.GrossThrust, r.FlowParameter)
		}
	}
}

// A stopped engine with a zero error of 0.1 % shows no flow.
func TestNoFlow(t *testing.T) {
	c := Config{ThroatArea: 0.025, ResolutionFloor: 0.002}
	for _, tc := range []struct {
		p    float64
		flow bool
		warn Warning
	}{{101325 * 1.001, false, 0}, {101325 * 0.999, false, 0}, {101325, false, 0}, {101225, false, 0}, {90e3, false, PressureOrder}, {101600, true, 0}} {
		r := evaluate(t, c, products(t, 0), tc.p, 300, 101325)
		if (r.Regime != NoFlow) != tc.flow || (r.MassFlow > 0) != tc.flow || (r.GrossThrust > 0) != tc.flow || r.Choked || r.Warnings != tc.warn {
			t.Errorf("%g Pa: %s, W %v, warnings %q", tc.p, r.Regime, r.MassFlow, r.WarningTexts())
		}
	}
	c.ResolutionFloor = 0
	if r := evaluate(t, c, products(t, 0), 101325, 300, 101325); r.Regime != NoFlow || r.MassFlow != 0 {
		t.Errorf("equal pressures: %s, W %v", r.Regime, r.MassFlow)
	}
}

func TestTables(t *testing.T) {
	points := []Point{{1.2, 0.90}, {1.5, 0.94}, {1.9, 0.965}, {2.5, 0.97}, {3, 0.97}}
	c := Config{ThroatArea: 0.025, Discharge: points}
	for _, p := range points {
		r := evaluate(t, c, products(t, 0), p.NPR*1e5, 900, 1e5)
		if !near(r.Discharge, p.Value, 1e-12) || r.Warnings != 0 {
			t.Errorf("NPR %g: Cd %v, want %v; %q", p.NPR, r.Discharge, p.Value, r.WarningTexts())
		}
	}
	last := 0.0
	for npr := 1.2; npr <= 3; npr += 0.003 {
		r := evaluate(t, c, products(t, 0), npr*1e5, 900, 1e5)
		if r.Discharge < last-1e-15 {
			t.Fatalf("NPR %g: Cd falls from %v to %v between rising points", npr, last, r.Discharge)
		}
		last = r.Discharge
	}
	for npr, want := range map[float64]float64{1.1: 0.90, 4: 0.97} {
		r := evaluate(t, c, products(t, 0), npr*1e5, 900, 1e5)
		if r.Discharge != want || r.Warnings != CoefficientRange || len(r.WarningTexts()) != 1 {
			t.Errorf("NPR %g: Cd %v, warnings %q", npr, r.Discharge, r.WarningTexts())
		}
	}
	c.Discharge = points[:2]
	if r := evaluate(t, c, products(t, 0), 1.35e5, 900, 1e5); !near(r.Discharge, 0.92, 1e-12) {
		t.Errorf("two points: Cd %v, want the straight line's 0.92", r.Discharge)
	}
}

func TestConfigFaults(t *testing.T) {
	nan := math.NaN()
	bad := Config{
		Kind: 7, ThroatArea: -1, AreaBasis: AreaCold, ExpansionCoefficient: 1, DuctLoss: 1, CoefficientStation: 9, ChokeNPR: 0.9,
		Basis: 9, ResolutionFloor: -1, Discharge: []Point{{2, 0.9}, {2, nan}}, Thrust: []Point{{0.5, 1}},
	}
	err := bad.Validate()
	if err == nil {
		t.Fatal("no fault found")
	}
	for _, word := range []string{
		"kind", "throat area", "expansion coefficient", "reference temperature", "duct loss", "station", "choke npr", "thrust basis", "resolution floor",
		"discharge coefficient table, row 2: npr 2", "discharge coefficient table, row 2: NaN", "thrust coefficient table, row 1",
	} {
		if !strings.Contains(err.Error(), word) {
			t.Errorf("the faults do not name %q:\n%v", word, err)
		}
	}
	if _, err := New(bad); err == nil {
		t.Error("New takes a bad config")
	}
	for _, c := range []Config{{Kind: ConvergentDivergent, ThroatArea: 0.02}, {Kind: ConvergentDivergent, ThroatArea: 0.02, ExitArea: 0.01}, {Kind: ConvergentDivergent, ExitArea: nan}, {AreaBasis: 5}} {
		if c.Validate() == nil {
			t.Errorf("%+v passes", c)
		}
	}
	if err := (&Config{}).Validate(); err != nil {
		t.Errorf("the zero config: %v", err)
	}
}

func TestRefusals(t *testing.T) {
	n, err := New(Config{Kind: ConvergentDivergent, ThroatArea: 0.02, ExitArea: 0.03})
	if err != nil {
		t.Fatal(err)
	}
	good := Inputs{TotalPressure: 2e5, BackPressure: 1e5, TotalTemperature: 900}
	for _, change := range []func(*Inputs){
		func(in *Inputs) { in.TotalPressure = 0 },
		func(in *Inputs) { in.TotalPressure = unit.Absolute(math.NaN()) },
		func(in *Inputs) { in.BackPressure = -1 },
		func(in *Inputs) { in.BackPressure = unit.Absolute(math.Inf(1)) },
		func(in *Inputs) { in.TotalTemperature = 20 },
		func(in *Inputs) { in.TotalTemperature = math.NaN() },
	} {
		in := good
		change(&in)
		if _, err := n.Evaluate(products(t, 0), in); !errors.Is(err, ErrInput) {
			t.Errorf("%+v: %v", in, err)
		}
	}
	if _, err := n.Evaluate(&gas.Mixture{}, good); !errors.Is(err, ErrInput) {
		t.Errorf("no gas: %v", err)
	}
	good.ThroatArea = 0.04
	if _, err := n.Evaluate(products(t, 0), good); !errors.Is(err, ErrArea) {
		t.Errorf("throat above exit: %v", err)
	}
}

func TestWarnings(t *testing.T) {
	wide := Config{Kind: ConvergentDivergent, ThroatArea: 0.02, ExitArea: 0.05}
	r := evaluate(t, wide, products(t, 0), 6e5, 300, 1e5)
	if r.Regime != OverExpanded || r.Warnings != DiffuserLoss|Separation || r.GasWarnings != gas.BelowRange|gas.RealGas || len(r.WarningTexts()) != 4 {
		t.Errorf("%s: %q", r.Regime, r.WarningTexts())
	}
	if r := evaluate(t, Config{}, products(t, 0.02), 250e3, 900, 101325); len(r.WarningTexts()) != 0 {
		t.Errorf("an ordinary point warns: %q", r.WarningTexts())
	}
}

func TestNoAllocation(t *testing.T) {
	table := []Point{{1.2, 0.9}, {1.5, 0.94}, {2, 0.97}}
	for _, c := range []Config{{ThroatArea: 0.025, Discharge: table, Thrust: table}, {Kind: ConvergentDivergent, ThroatArea: 0.025, ExitArea: 0.03, Discharge: table}} {
		n, err := New(c)
		if err != nil {
			t.Fatal(err)
		}
		g, i := products(t, 0.02), 0
		if allocs := testing.AllocsPerRun(200, func() {
			i++
			if _, err := n.Evaluate(g, Inputs{TotalPressure: unit.Absolute(101e3 + 1e3*float64(i)), BackPressure: 101325, TotalTemperature: 900}); err != nil {
				t.Error(err)
			}
		}); allocs != 0 {
			t.Errorf("%s: %v allocations", c.Kind, allocs)
		}
	}
}

func BenchmarkEvaluate(b *testing.B) {
	table := []Point{{1.2, 0.9}, {1.5, 0.94}, {2, 0.97}, {3, 0.972}}
	for _, bench := range []struct {
		name   string
		config Config
		from   float64 // Pa
	}{
		{"unchoked", Config{ThroatArea: 0.025, Discharge: table, Thrust: table}, 110e3},
		{"choked", Config{ThroatArea: 0.025, Discharge: table, Thrust: table}, 250e3},
		{"convergent-divergent", Config{Kind: ConvergentDivergent, ThroatArea: 0.025, ExitArea: 0.03, Discharge: table}, 180e3},
	} {
		b.Run(bench.name, func(b *testing.B) {
			n, err := New(bench.config)
			if err != nil {
				b.Fatal(err)
			}
			g := products(b, 0.02)
			ins := make([]Inputs, 256)
			for i := range ins {
				ins[i] = Inputs{TotalPressure: unit.Absolute(bench.from + 200*float64(i)), BackPressure: 101325, TotalTemperature: 800 + float64(i)/2}
			}
			var sink float64
			i := 0
			b.ReportAllocs()
			for b.Loop() {
				i++
				r, err := n.Evaluate(g, ins[i%256])
				if err != nil {
					b.Fatal(err)
				}
				sink += r.MassFlow
			}
			if !(sink > 0) {
				b.Fatal(sink)
			}
		})
	}
}
