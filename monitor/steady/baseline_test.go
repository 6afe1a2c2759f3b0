package steady

import (
	"math"
	"testing"
)

func watchBalance() *Baseline {
	return &Baseline{Memory: 600 * second, Learn: 60 * second, Smooth: 5 * second, Hold: 3 * second}
}

// learn runs seconds of a residual and reports the last finding and when it was flagged.
func learn(b *Baseline, l *Learned, at *int64, seconds int64, steady bool, sig *signal, offset float64) (d Departure, flagged float64) {
	flagged = math.NaN()
	begin := *at
	for end := *at + seconds*second; *at < end; *at += scan {
		d = b.Step(l, *at, sig.at(*at)+offset, 0.006, steady)
		if d.Flagged && math.IsNaN(flagged) {
			flagged = float64(*at-begin) / 1e9
		}
	}
	return d, flagged
}

func TestBaseline(t *testing.T) {
	b := watchBalance()
	var l Learned
	at := epoch
	sig := seeded(83, 1, 0.002, level(0.012))
	d, _ := learn(b, &l, &at, 30, true, sig, 0)
	if !math.IsNaN(d.Baseline) || !math.IsNaN(d.By) || d.Flagged {
		t.Errorf("after 30 s: %+v", d)
	}
	d, flagged := learn(b, &l, &at, 600, true, sig, 0)
	// 600 s at 1 s lag are 300 values: 0.002/√300 three times; scatter 3/√(2·300).
	within(t, "baseline", d.Baseline, 0.012, 3*0.002/math.Sqrt(300))
	within(t, "scatter", d.Scatter, 0.002, 0.002*3/math.Sqrt(600))
	if !math.IsNaN(flagged) || math.Abs(d.By) > 0.004 {
		t.Errorf("clean: flagged at %v, departure %v", flagged, d.By)
	}
	// Frozen while not steady, however far the residual is.
	before := l.Mean
	d, flagged = learn(b, &l, &at, 100, false, sig, 0.3)
	if l.Mean != before || !math.IsNaN(d.By) || !math.IsNaN(flagged) || d.Baseline != before {
		t.Errorf("not steady: %+v, baseline %v before", d, before)
	}
	// Steady again: first the average settles, no flag from what was before.
	d, flagged = learn(b, &l, &at, 60, true, sig, 0)
	if !math.IsNaN(flagged) || math.Abs(d.By) > 0.006 {
		t.Errorf("steady again: flagged at %v, %+v", flagged, d)
	}
	// A leak of 1.5 %: flagged, and not learned.
	before = l.Mean
	d, flagged = learn(b, &l, &at, 1200, true, sig, 0.015)
	if !(flagged > 3 && flagged < 10) || !d.Flagged {
		t.Errorf("leak flagged at %v", flagged)
	}
	within(t, "departure", d.By, 0.015, 0.004)
	within(t, "baseline after the leak", l.Mean, before, 0.0005)
	// It stays flagged through a phase that is not steady, until it is seen gone.
	d, _ = learn(b, &l, &at, 20, false, sig, 0)
	if !d.Flagged {
		t.Error("flag lost in an unsteady phase")
	}
	if d, _ = learn(b, &l, &at, 3, true, sig, 0); !d.Flagged {
		t.Error("flag lost before the residual was judged")
	}
	if d, _ = learn(b, &l, &at, 60, true, sig, 0); d.Flagged {
		t.Error("flag stays")
	}
}

func TestBaselineForgets(t *testing.T) {
	// A change that is within the uncertainty is followed: to 1 − 1/e in one memory.
	b := watchBalance()
	b.Memory, b.Learn = 100*second, 100*second
	var l Learned
	at := epoch
	sig := seeded(89, 1, 0, level(0.01))
	learn(b, &l, &at, 201, true, sig, 0)
	within(t, "learned", l.Mean, 0.01, 1e-12)
	learn(b, &l, &at, 100, true, sig, 0.004)
	within(t, "after one memory", l.Mean, 0.01+0.004*(1-1/math.E), 1e-5)
}

func TestBaselineOddInputs(t *testing.T) {
	b := watchBalance()
	var l Learned
	at := epoch
	sig := seeded(97, 1, 0.002, level(0))
	learn(b, &l, &at, 100, true, sig, 0)
	was := l
	for _, x := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
		b.Step(&l, at, x, 0.006, true)
	}
	b.Step(&l, l.T, 5, 0.006, true)
	b.Step(&l, l.T-second, 5, 0.006, true)
	if l != was {
		t.Errorf("changed by what is no residual: %+v, was %+v", l, was)
	}
	// After a gap one residual stands for a second at most.
	time := l.Time
	b.Step(&l, at+3600*second, 0, 0.006, true)
	if l.Time-time != second {
		t.Errorf("an hour's gap counts %v ns", l.Time-time)
	}
	// Without an uncertainty nothing is judged, but learned.
	if d := b.Step(&l, l.T+scan, 0, math.NaN(), true); d.Flagged || math.IsNaN(d.By) {
		t.Errorf("no uncertainty: %+v", d)
	}
}

func TestEffectiveArea(t *testing.T) {
	// Kerosene products, f 0.02, 900 K, 250 kPa, Cd 0.97, A 0.025 m²: 8.03854960 kg/s,
	// computed with 30-digit arithmetic. φ follows from it by its definition, so the
	// area closes to its digits, and with 1 % more flow it is 1 % larger.
	const r = 287.06
	phi := 8.03854960 / 0.97 * math.Sqrt(r*900) / (0.025 * 250e3)
	th := Throat{
		Flow: Known{8.03854960, 0.004}, GasConstant: r, Temperature: Known{900, 0.002}, Pressure: Known{250e3, 0.001},
		Parameter: Known{phi, 0.0005}, Discharge: Known{0.97, 0.002},
	}
	area, u := EffectiveArea(&th)
	within(t, "area", area, 0.025, 1e-12)
	// By hand: 16 + 1 + 1 + 0.25 + 4 = 22.25 (1e-6).
	within(t, "u", u, math.Sqrt(22.25e-6), 1e-12)
	th.Flow.Value *= 1.01
	more, _ := EffectiveArea(&th)
	within(t, "area with 1 % more flow", more, 0.02525, 1e-12)
	// NPR 1.01: 49 times the pressure.
	th.Exponent = 48
	_, u = EffectiveArea(&th)
	within(t, "u near NPR 1", u, math.Sqrt(16e-6+1e-6+0.25e-6+4e-6+49*49*1e-6), 1e-12)
	for _, change := range []func(*Throat){
		func(t *Throat) { t.Flow.Value = 0 },
		func(t *Throat) { t.Pressure.Value = math.NaN() },
		func(t *Throat) { t.Parameter.Value = 0 },
		func(t *Throat) { t.GasConstant = -1 },
	} {
		bad := th
		change(&bad)
		if a, u := EffectiveArea(&bad); !math.IsNaN(a) || !math.IsNaN(u) {
			t.Errorf("%+v: %v ± %v", bad, a, u)
		}
	}
}

func TestDrift(t *testing.T) {
	a := RunArea{Run: "first", Area: 0.025, Random: 0.003, Systematic: 0.01}
	b := RunArea{Run: "last", Area: 0.02525, Random: 0.004, Systematic: 0.01}
	change, u := a.Drift(&b)
	within(t, "change", change, 0.01, 1e-12)
	within(t, "u95", u, 0.01, 1e-12) // 2·√(9 + 16)·0.001
	if c, u := a.Drift(&RunArea{}); !math.IsNaN(c) || !math.IsNaN(u) {
		t.Errorf("no area: %v ± %v", c, u)
	}
}
