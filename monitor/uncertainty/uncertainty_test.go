package uncertainty

import (
	"errors"
	"math"
	"testing"

	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
)

func near(got, want, rel float64) bool { return math.Abs(got-want) <= rel*math.Abs(want) }

// point gives the rig nozzle of kerosene products, f 0.02: A 0.025 m², Cd 0.97.
func point(tb testing.TB, p, t0 float64, change func(*nozzle.Config)) *Point {
	tb.Helper()
	c := nozzle.Config{ThroatArea: 0.025, Discharge: []nozzle.Point{{NPR: 1, Value: 0.97}}}
	if change != nil {
		change(&c)
	}
	n, err := nozzle.New(c)
	if err != nil {
		tb.Fatal(err)
	}
	g, err := gas.NewMixture(gas.Kerosene(), 0.02, 0)
	if err != nil {
		tb.Fatal(err)
	}
	in := nozzle.Inputs{TotalPressure: unit.Absolute(p), BackPressure: 101325, TotalTemperature: t0, MetalTemperature: t0}
	return &Point{Nozzle: n, Inputs: in, Gas: &g, Fuel: gas.Kerosene(), FuelAirRatio: 0.02}
}

func evaluate(tb testing.TB, p *Point, u *Inputs) Result {
	tb.Helper()
	r, err := Evaluate(p, u)
	if err != nil {
		tb.Fatal(err)
	}
	return r
}

// Choked mass flow of kerosene products, 250 kPa, 900 K: budget computed with
// 30-digit arithmetic from analytic derivatives.
func TestChokedFlowBudget(t *testing.T) {
	u := Inputs{
		TotalPressure:    {Systematic: 250 / math.Sqrt(3)},
		TotalTemperature: {Systematic: 2.5074 / math.Sqrt(3)},
		FuelAirRatio:     {Random: 0.0004},
		ThroatArea:       {Systematic: 0.0005},
		Discharge:        {Systematic: 0.002 / 0.97},
	}
	r := evaluate(t, point(t, 250e3, 900, nil), &u)
	w := r.Outputs[MassFlow]
	for _, c := range []struct {
		what           string
		got, want, rel float64
	}{
		{"W8", w.Value, 8.03854960, 1e-9},
		{"U95", w.U95, Coverage * 0.01892611, 3e-6},
		{"upper bound", w.High, 8.03854960 + Coverage*0.01892611, 3e-6},
		{"lower bound", w.Low, 8.03854960 - Coverage*0.01892611, 3e-6},
		{"u_c", math.Hypot(w.Systematic, w.Random), 0.01892611, 3e-6},
		{"lower bound of 1e5 draws", w.Low, 8.001616, 1e-4}, // rectangular p0 and T0
		{"upper bound of 1e5 draws", w.High, 8.075750, 1e-4},
		{"relative sensitivity to T0", w.Contribution[TotalTemperature] / (2.5074 / math.Sqrt(3)) * 900 / w.Value, -0.52164206, 1e-5},
		{"relative sensitivity to f", w.Contribution[FuelAirRatio] / 0.0004 * 0.02 / w.Value, -0.00342181, 1e-4},
		{"part of Cd", w.Contribution[Discharge] / w.Value, 0.0020619, 1e-4},
		{"part of A", w.Contribution[ThroatArea] / w.Value, 0.0005, 1e-12},
		{"part of p0", w.Contribution[TotalPressure] / w.Value, 0.00057735, 1e-5},
		{"part of T0", math.Abs(w.Contribution[TotalTemperature]) / w.Value, 0.00083906, 1e-5},
		{"part of f", math.Abs(w.Contribution[FuelAirRatio]) / w.Value, 0.000068436, 1e-4},
		{"random part", w.Random / w.Value, 0.000068436, 1e-4},
		{"share of Cd", w.Share(Discharge), 0.0020619 * 0.0020619 / (0.0023544187 * 0.0023544187), 1e-4},
	} {
		if !near(c.got, c.want, c.rel) {
			t.Errorf("%s = %.10g, want %.10g", c.what, c.got, c.want)
		}
	}
	var shares float64
	for i := range NumInputs {
		shares += w.Share(i)
	}
	if !near(shares, 1, 1e-12) {
		t.Errorf("shares add up to %v", shares)
	}
	if !math.IsNaN(r.PChoked) {
		t.Errorf("P(choked) = %v without a stated nozzle model", r.PChoked)
	}
}

// A shared barometer enters once: the result is that of GUM eq. (13) with the
// correlation it makes, and smaller than that of two independent errors when it
// cancels.
func TestSharedBarometer(t *testing.T) {
	const own, back, shared = 120.0, 80.0, 200.0
	p := point(t, 150e3, 900, nil)
	one := func(i Input, u float64) float64 {
		in := Inputs{}
		in[i].Systematic = u
		return evaluate(t, p, &in).Outputs[NPR].Contribution[i] / u
	}
	cp, cb := one(TotalPressure, 1), one(BackPressure, 1)
	up, ub := math.Hypot(own, shared), math.Hypot(back, shared)
	r := shared * shared / (up * ub)
	want := math.Sqrt(cp*cp*up*up + cb*cb*ub*ub + 2*cp*cb*up*ub*r) // [JCGM 100 eq. 13]
	got := evaluate(t, p, &Inputs{TotalPressure: {Systematic: own}, BackPressure: {Systematic: back}, CommonPressure: {Systematic: shared}}).Outputs[NPR]
	if !near(got.U95, Coverage*want, 1e-5) {
		t.Errorf("u(npr) = %v, GUM (13) %v", got.U95/Coverage, want)
	}
	twice := evaluate(t, p, &Inputs{TotalPressure: {Systematic: up}, BackPressure: {Systematic: ub}}).Outputs[NPR]
	if !(got.U95 < twice.U95) {
		t.Errorf("one shared error %v, two errors %v", got.U95, twice.U95)
	}
}

// At NPR 1.01 one per mille of pressure is five per cent of flow.
func TestLowNPRIsTheTrap(t *testing.T) {
	p := point(t, 1.01*101325, 400, nil)
	w := evaluate(t, p, &Inputs{TotalPressure: {Random: 1}}).Outputs[MassFlow]
	if s := w.Contribution[TotalPressure] * 1.01 * 101325 / w.Value; math.Abs(s-49.5) > 1 {
		t.Errorf("sensitivity of flow to pressure %v, want about 49 (½ NPR/(NPR − 1) less the density term)", s)
	}
}

func TestProbabilityChoked(t *testing.T) {
	stated := &Inputs{TotalPressure: {Systematic: 500}, ChokeNPR: {Systematic: 0.005}}
	at := evaluate(t, point(t, 250e3, 900, nil), stated).Outputs[ChokePoint].Value
	for _, tc := range []struct {
		name      string
		npr       float64
		low, high float64
	}{{"at the choke point", at, 0.499, 0.501}, {"far above", 2 * at, 0.999999, 1}, {"far below", 0.6 * at, 0, 1e-6}} {
		if p := evaluate(t, point(t, tc.npr*101325, 900, nil), stated).PChoked; !(p >= tc.low && p <= tc.high) {
			t.Errorf("%s: P(choked) = %v", tc.name, p)
		}
	}
	calibrated := point(t, 250e3, 900, func(c *nozzle.Config) { c.ChokeNPR = 1.9 })
	if p := evaluate(t, calibrated, &Inputs{TotalPressure: {Systematic: 500}}).PChoked; !(p > 0.999) {
		t.Errorf("calibrated choke npr: P(choked) = %v", p)
	}
	if p := evaluate(t, calibrated, &Inputs{}).PChoked; p != 1 {
		t.Errorf("no uncertainty: P(choked) = %v", p)
	}
	if p := evaluate(t, calibrated, &Inputs{TotalPressure: {Systematic: math.NaN()}}).PChoked; !math.IsNaN(p) {
		t.Errorf("pressure uncertainty not stated: P(choked) = %v", p)
	}
}

// What was not stated makes NaN of what needs it, and of nothing else.
func TestNotStated(t *testing.T) {
	nan := math.NaN()
	for i := range NumInputs {
		u := Inputs{TotalPressure: {Systematic: 100}, TotalTemperature: {Systematic: 2}, ThroatArea: {Systematic: 0.001}, Thrust: {Systematic: 0.001}}
		u[i].Systematic = nan
		r := evaluate(t, point(t, 250e3, 900, nil), &u)
		for o := range NumOutputs {
			e := r.Outputs[o]
			if got := math.IsNaN(e.Low + e.High); got != needs[o][i] {
				t.Errorf("%s not stated: interval of %s is %v to %v", i, o, e.Low, e.High)
			}
			if got := math.IsNaN(e.U95); got != (needs[o][i] || o >= ThroatMach) {
				t.Errorf("%s not stated: U95 of %s is %v", i, o, e.U95)
			}
			if math.IsNaN(r.Outputs[o].Value) {
				t.Errorf("%s not stated: %s is lost", i, o)
			}
		}
	}
}

// needs says the truth: an output changes with the inputs it names and no others.
func TestNeeds(t *testing.T) {
	p := point(t, 150e3, 900, nil)
	p.HumidityRatio = 0.01
	g, err := gas.NewMixture(p.Fuel, p.FuelAirRatio, p.HumidityRatio)
	if err != nil {
		t.Fatal(err)
	}
	p.Gas = &g
	size := Inputs{{100, 0}, {100, 0}, {100, 0}, {5, 0}, {0.001, 0}, {0.001, 0}, {0.01, 0}, {0.01, 0}, {0.01, 0}, {0.01, 0}}
	for i := range NumInputs {
		var u Inputs
		u[i] = size[i]
		r := evaluate(t, p, &u)
		for o := range NumOutputs {
			// The throat of an unchoked convergent nozzle has the back pressure.
			exempt := o == ThroatPressure && i != BackPressure && i != CommonPressure
			if (r.Outputs[o].Contribution[i] != 0) != needs[o][i] && !exempt {
				t.Errorf("%s moves %s by %v, needs says %v", i, o, r.Outputs[o].Contribution[i], needs[o][i])
			}
		}
	}
}

func TestEdges(t *testing.T) {
	u := &Inputs{TotalPressure: {Systematic: 100}, FuelAirRatio: {Systematic: 0.001}, HumidityRatio: {Systematic: 0.001}}
	// f = 0 and dry air can only be off to one side.
	p := point(t, 250e3, 900, nil)
	air, err := gas.NewMixture(p.Fuel, 0, 0)
	if err != nil {
		t.Fatal(err)
	}
	p.Gas, p.FuelAirRatio = &air, 0
	if c := evaluate(t, p, u).Outputs[MassFlow].Contribution; c[FuelAirRatio] == 0 || c[HumidityRatio] == 0 {
		t.Errorf("contributions at f = 0: %v", c)
	}
	// A gas of constant γ does not depend on either.
	perfect, err := gas.Perfect(1.33, 287)
	if err != nil {
		t.Fatal(err)
	}
	p.Gas, p.Fuel = &perfect, gas.Fuel{}
	if e := evaluate(t, p, u).Outputs[MassFlow]; e.Contribution[FuelAirRatio] != 0 || !near(e.U95, Coverage*e.Contribution[TotalPressure], 1e-12) {
		t.Errorf("constant γ: %v", e)
	}
	// Without flow its uncertainty is not known.
	still := point(t, 101400, 300, func(c *nozzle.Config) { c.ResolutionFloor = 0.002 })
	if r := evaluate(t, still, u); r.Outputs[MassFlow].Value != 0 || !math.IsNaN(r.Outputs[MassFlow].U95) || !(r.Outputs[NPR].U95 > 0) {
		t.Errorf("no flow: %+v", r.Outputs[MassFlow])
	}
	for o := MassFlow; o < NumOutputs; o++ {
		if e := evaluate(t, still, u).Outputs[o]; !math.IsNaN(e.Low + e.High) {
			t.Errorf("no flow: %s from %v to %v", o, e.Low, e.High)
		}
	}
	// A pressure that may be next to nothing bounds no ratio.
	wide := evaluate(t, p, &Inputs{BackPressure: {Systematic: 60e3}, ChokeNPR: {Systematic: 0.01}}).Outputs
	if e := wide[NPR]; !math.IsNaN(e.High) || !(e.U95 > 0) {
		t.Errorf("u of back pressure 60 %%: %+v", e)
	}
	if e := wide[ChokePoint]; !near(e.High, e.Value*(1+0.01*Coverage), 1e-12) {
		t.Errorf("u of back pressure 60 %%: %+v", e)
	}
	// Nothing stated, nothing spread.
	for o, e := range evaluate(t, p, &Inputs{}).Outputs {
		if e.Low != e.Value || e.High != e.Value {
			t.Errorf("%s without uncertainty: %v from %v to %v", Output(o), e.Value, e.Low, e.High)
		}
	}
	// Without an area there is no flow, but a margin.
	unknown := point(t, 250e3, 900, func(c *nozzle.Config) { c.ThroatArea = 0 })
	if r := evaluate(t, unknown, u); !math.IsNaN(r.Outputs[MassFlow].U95) || !(r.Outputs[MarginPercent].U95 > 0) {
		t.Errorf("area not known: %+v", r.Outputs[MassFlow])
	}
	p.Inputs.BackPressure = 0
	if _, err := Evaluate(p, u); !errors.Is(err, nozzle.ErrInput) {
		t.Errorf("no back pressure: %v", err)
	}
}

func TestNoAllocation(t *testing.T) {
	for _, change := range []func(*nozzle.Config){nil, divergent} {
		p := point(t, 250e3, 900, change)
		u := fullInputs()
		if n := testing.AllocsPerRun(100, func() {
			p.Inputs.TotalPressure -= 1000
			if _, err := Evaluate(p, &u); err != nil {
				t.Error(err)
			}
		}); n != 0 {
			t.Errorf("%v allocations", n)
		}
	}
}

func divergent(c *nozzle.Config) { c.Kind, c.ExitArea = nozzle.ConvergentDivergent, 0.03 }

func fullInputs() (u Inputs) {
	for i, size := range [NumInputs]float64{200, 60, 100, 4, 5e-4, 1e-3, 1e-3, 2e-3, 1e-3, 4e-3} {
		u[i] = Part{Systematic: size, Random: size / 3}
	}
	return u
}

// BenchmarkEvaluate measures a full operating point with all its uncertainties, beside
// the sonic state alone by bisection as a page of code would do it.
func BenchmarkEvaluate(b *testing.B) {
	table := []nozzle.Point{{NPR: 1.2, Value: 0.9}, {NPR: 1.5, Value: 0.94}, {NPR: 2, Value: 0.97}, {NPR: 3, Value: 0.972}}
	tables := func(c *nozzle.Config) { c.Discharge, c.Thrust = table, table }
	for _, bench := range []struct {
		name       string
		from, step float64 // Pa
		change     func(*nozzle.Config)
	}{
		{"convergent", 150e3, 500, tables},
		{"at Mach 1", 188.2e3, 2, tables},
		{"divergent", 120e3, 1000, divergent},
	} {
		b.Run(bench.name, func(b *testing.B) {
			p := point(b, 250e3, 900, bench.change)
			u := fullInputs()
			var sink float64
			i := 0
			b.ReportAllocs()
			for b.Loop() {
				i++
				p.Inputs.TotalPressure = unit.Absolute(bench.from + bench.step*float64(i%256))
				r, err := Evaluate(p, &u)
				if err != nil {
					b.Fatal(err)
				}
				sink += r.Outputs[MassFlow].U95
			}
			if !(sink > 0) {
				b.Fatal(sink)
			}
		})
	}
	b.Run("bisection of the sonic state alone", func(b *testing.B) {
		p := point(b, 250e3, 900, nil)
		var sink float64
		i := 0
		for b.Loop() {
			i++
			sink += bisection(p.Gas, 700+float64(i%256))
		}
		if !(sink > 0) {
			b.Fatal(sink)
		}
	})
}

// bisection gives p*/p0 by halving T* to the last bit.
func bisection(g *gas.Mixture, t0 float64) float64 {
	h0 := g.H(t0)
	lo, hi := t0/2, t0
	for {
		t := lo + (hi-lo)/2
		if t == lo || t == hi {
			return math.Exp((g.S0(t) - g.S0(t0)) / g.R())
		}
		if a := g.SpeedOfSound(t); h0-g.H(t) > a*a/2 {
			lo = t
		} else {
			hi = t
		}
	}
}

// The bisection that the benchmark compares with agrees with Critical.
func TestBisection(t *testing.T) {
	g := point(t, 250e3, 900, nil).Gas
	for t0 := 300.0; t0 < 1700; t0 += 100 {
		if got, want := g.Critical(t0).PressureRatio, bisection(g, t0); !near(got, want, 1e-9) {
			t.Errorf("%g K: p*/p0 = %v, by bisection %v", t0, got, want)
		}
	}
}
