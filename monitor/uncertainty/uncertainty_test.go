package uncertainty

import (
	"errors"
	"math"
	"math/rand/v2"
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
		{"U95", w.U95, 0.0378522, 3e-6},
		{"u_c", math.Hypot(w.Systematic, w.Random), 0.01892611, 3e-6},
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

// JCGM 101 Monte Carlo of the same point and of an unchoked one, with a shared
// barometer, 2e5 seeded draws: the standard deviation agrees within its own
// sampling error, 0.16 %, taken three times, and the bend of the unchoked point.
func TestAgainstMonteCarlo(t *testing.T) {
	for _, tc := range []struct {
		name string
		p    float64
		rel  float64
	}{{"choked", 250e3, 0.005}, {"unchoked", 150e3, 0.01}, {"near choke", 189e3, 0.05}} {
		u := Inputs{
			TotalPressure: {Systematic: 200, Random: 150}, BackPressure: {Systematic: 60}, CommonPressure: {Systematic: 100},
			TotalTemperature: {Systematic: 4, Random: 2}, FuelAirRatio: {Systematic: 0.0005}, HumidityRatio: {},
			ThroatArea: {Systematic: 0.001}, Discharge: {Systematic: 0.002}, Thrust: {Systematic: 0.001}, ChokeNPR: {Systematic: 0.004},
		}
		p := point(t, tc.p, 900, nil)
		r := evaluate(t, p, &u)
		rnd := rand.New(rand.NewPCG(1, 1))
		draw := func(i Input) float64 {
			return rnd.NormFloat64()*u[i].Systematic + rnd.NormFloat64()*u[i].Random
		}
		const draws = 200_000
		var sum, squares [NumOutputs]float64
		choked := 0.0
		for range draws {
			in := p.Inputs
			common := draw(CommonPressure)
			in.TotalPressure += unit.Absolute(draw(TotalPressure) + common)
			in.BackPressure += unit.Absolute(draw(BackPressure) + common)
			in.TotalTemperature += draw(TotalTemperature)
			g, err := gas.NewMixture(gas.Kerosene(), 0.02+draw(FuelAirRatio), 0)
			if err != nil {
				t.Fatal(err)
			}
			o, err := p.Nozzle.Evaluate(&g, in)
			if err != nil {
				t.Fatal(err)
			}
			area, choke := (1+draw(ThroatArea))*(1+draw(Discharge)), 1+draw(ChokeNPR)
			v := outputs(&o)
			v[MassFlow] *= area
			v[GrossThrust] *= area * (1 + draw(Thrust))
			v[ChokePoint] *= choke
			v[MarginPercent] = 100 * (v[NPR]/v[ChokePoint] - 1)
			if v[MarginPercent] >= 0 {
				choked++
			}
			for k := range v {
				d := v[k] - r.Outputs[k].Value
				sum[k] += d
				squares[k] += d * d
			}
		}
		for k := range r.Outputs {
			mean := sum[k] / draws
			sd := math.Sqrt(squares[k]/draws - mean*mean)
			if e := r.Outputs[k]; !near(e.U95, 2*sd, tc.rel) {
				t.Errorf("%s: %s U95 = %v, Monte Carlo %v", tc.name, Output(k), e.U95, 2*sd)
			}
		}
		if math.Abs(r.PChoked-choked/draws) > 0.005 {
			t.Errorf("%s: P(choked) = %v, Monte Carlo %v", tc.name, r.PChoked, choked/draws)
		}
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
	if !near(got.U95, 2*want, 1e-5) {
		t.Errorf("u(npr) = %v, GUM (13) %v", got.U95/2, want)
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
			if got := math.IsNaN(r.Outputs[o].U95); got != needs[o][i] {
				t.Errorf("%s not stated: U95 of %s is %v", i, o, r.Outputs[o].U95)
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
		base, err := p.Nozzle.Evaluate(p.Gas, p.Inputs)
		if err != nil {
			t.Fatal(err)
		}
		change, err := p.contribution(i, size[i].Systematic, &base, outputs(&base))
		if err != nil {
			t.Fatal(err)
		}
		for o := range NumOutputs {
			if (change[o] != 0) != needs[o][i] {
				t.Errorf("%s moves %s by %v, needs says %v", i, o, change[o], needs[o][i])
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
	if e := evaluate(t, p, u).Outputs[MassFlow]; e.Contribution[FuelAirRatio] != 0 || !near(e.U95, 2*e.Contribution[TotalPressure], 1e-12) {
		t.Errorf("constant γ: %v", e)
	}
	// Without flow its uncertainty is not known.
	still := point(t, 101400, 300, func(c *nozzle.Config) { c.ResolutionFloor = 0.002 })
	if r := evaluate(t, still, u); r.Outputs[MassFlow].Value != 0 || !math.IsNaN(r.Outputs[MassFlow].U95) || !(r.Outputs[NPR].U95 > 0) {
		t.Errorf("no flow: %+v", r.Outputs[MassFlow])
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
	p := point(t, 250e3, 900, nil)
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

func fullInputs() (u Inputs) {
	for i, size := range [NumInputs]float64{200, 60, 100, 4, 5e-4, 1e-3, 1e-3, 2e-3, 1e-3, 4e-3} {
		u[i] = Part{Systematic: size, Random: size / 3}
	}
	return u
}

func BenchmarkEvaluate(b *testing.B) {
	p := point(b, 250e3, 900, nil)
	u := fullInputs()
	var sink float64
	i := 0
	b.ReportAllocs()
	for b.Loop() {
		i++
		p.Inputs.TotalPressure = unit.Absolute(150e3 + 500*float64(i%256))
		r, err := Evaluate(p, &u)
		if err != nil {
			b.Fatal(err)
		}
		sink += r.Outputs[MassFlow].U95
	}
	if !(sink > 0) {
		b.Fatal(sink)
	}
}
