package steady

import (
	"math"
	"math/rand/v2"
	"testing"
)

// detector asks for less than 0.25 %/min of one quantity in 60 s.
func detector() *Detector {
	return &Detector{Quantities: []Criterion{{Window: Seconds(60), Relative: 0.0025 / 60}}, Dwell: 10 * second}
}

// percent rises from 100 by a number of percent per minute.
func percent(perMinute float64) func(float64) float64 {
	return func(t float64) float64 { return 100 * (1 + perMinute/100*t/60) }
}

// findings counts what the windows of a signal are found to be.
func findings(c *Criterion, sig *signal, windows int) (share [Dwell]float64) {
	var p Past
	for range windows {
		s := window(c.Window, &p, sig)
		share[c.judge(&p, &s, false)]++
	}
	for i := range share {
		share[i] /= float64(windows)
	}
	return share
}

// What is promised: 60 s windows of noise correlated over 1 s. Steady ones are
// accepted; a drift of 0.5 %/min is refused in 95 %.
func TestWindows(t *testing.T) {
	const windows = 500
	swing := func(t float64) float64 { return 100 + 0.3*math.Sin(2*math.Pi*t/20) }
	step := func(t float64) float64 {
		if t < 30 {
			return 100
		}
		return 100.2
	}
	bump := func(t float64) float64 { return 100 + 0.4*math.Exp(-(t-30)*(t-30)/50) }
	for _, tc := range []struct {
		name        string
		sd, lag     float64 // percent, s
		f           func(float64) float64
		least, most float64 // share of windows found steady
	}{
		{"steady, 0.05 %", 0.05, 1, level(100), 0.96, 1},
		{"steady, 0.1 %", 0.1, 1, level(100), 0.95, 1},
		{"steady, fast noise of 0.2 %", 0.2, 0.1, level(100), 0.95, 1},
		{"drift of 0.5 %/min in 0.05 %", 0.05, 1, percent(0.5), 0, 0.01},
		{"drift of 0.5 %/min in 0.1 %", 0.1, 1, percent(0.5), 0, 0.01},
		{"drift of −0.5 %/min in 0.1 %", 0.1, 1, percent(-0.5), 0, 0.01},
		{"drift of 0.5 %/min in 0.15 %", 0.15, 1, percent(0.5), 0, 0.05},
		{"drift of 0.5 %/min in 0.2 %", 0.2, 1, percent(0.5), 0, 0.05},
		{"drift of 0.5 %/min in 0.3 %", 0.3, 1, percent(0.5), 0, 0.05},
		{"drift of 0.5 %/min in fast noise", 0.2, 0.1, percent(0.5), 0, 0.01},
		{"a swing of 20 s", 0.05, 1, swing, 0, 0.05},
		{"a step of 0.2 %", 0.05, 1, step, 0, 0.05},
		{"a bump that comes back", 0.05, 1, bump, 0, 0.05},
		// Too much noise for this window: not known to be steady, and that is said.
		{"steady, 1 %", 1, 1, level(100), 0, 0.05},
	} {
		c := detector().Quantities[0]
		got := findings(&c, seeded(23, tc.lag, tc.sd, tc.f), windows)
		if got[IsSteady] < tc.least || got[IsSteady] > tc.most {
			t.Errorf("%s: %.1f %% of windows steady, want %g to %g; %v", tc.name, 100*got[IsSteady], 100*tc.least, 100*tc.most, got)
		}
	}
}

// run gives the share of time for which an hour is steady, and how often that ends.
func run(d *Detector, sig *signal, seconds int64) (share float64, ends int) {
	var s State
	was := false
	var n float64
	for t := epoch; t < epoch+seconds*second; t += scan {
		v := [1]float64{sig.at(t)}
		r := d.Step(&s, t, v[:])
		if was && !r.Steady {
			ends++
		}
		if was = r.Steady; was && t >= epoch+80*second {
			n++
		}
	}
	return n / float64((seconds-80)*20), ends
}

func TestHours(t *testing.T) {
	d := detector()
	share, ends := run(d, seeded(29, 1, 0.08, level(100)), 2*3600)
	if share < 0.97 || ends > 5 {
		t.Errorf("steady for %.1f %% of 2 h, ended %d times", 100*share, ends)
	}
	if share, _ = run(d, seeded(31, 1, 0.08, percent(0.5)), 1800); share > 0.001 {
		t.Errorf("drifting, yet steady for %.2f %% of the time", 100*share)
	}
}

func TestCourse(t *testing.T) {
	d := &Detector{Quantities: []Criterion{
		{Window: Seconds(30), Slope: 0.05}, {Window: Window{Width: second / 2, Bins: 40}, Relative: 0.01 / 60},
	}, Dwell: 5 * second}
	var s State
	a, b := seeded(37, 0.2, 0.05, level(900)), seeded(41, 0.2, 0.5, level(20000))
	at := epoch
	// until runs seconds and gives the last finding and when Steady changed.
	until := func(seconds int64, change func(v []float64, dt float64)) (Result, float64) {
		begin := at
		changed := math.NaN()
		was := s.Result.Steady
		var r Result
		for end := at + seconds*second; at < end; at += scan {
			v := []float64{a.at(at), b.at(at)}
			if change != nil {
				change(v, float64(at-begin)/1e9)
			}
			r = d.Step(&s, at, v)
			if r.Steady != was {
				was, changed = r.Steady, float64(at-begin)/1e9
			}
		}
		return r, changed
	}
	if r, _ := until(20, nil); r.Steady || r.Why != Filling || r.Quantity != 0 {
		t.Errorf("after 20 s: %+v", r)
	}
	if r, _ := until(12, nil); r.Steady || r.Why != Dwell || r.Quantity != -1 {
		t.Errorf("after 32 s: %+v", r)
	}
	if r, when := until(10, nil); !r.Steady || r.Why != IsSteady || r.Quantity != -1 || !(math.Abs(when-3) < 0.6) {
		t.Errorf("after 42 s: %+v, changed at %v, want 35 s", r, when)
	}
	// A change of power: 20 K in 2 s.
	if r, when := until(10, func(v []float64, dt float64) { v[0] += 10 * min(dt, 2) }); r.Steady || r.Quantity != 0 || !(when < 2) {
		t.Errorf("change from steady: %+v at %v", r, when)
	}
	if r, _ := until(80, func(v []float64, _ float64) { v[0] += 20 }); !r.Steady {
		t.Errorf("after it: %+v", r)
	}
	// The other quantity is lost: steadiness goes with it, after a fifth of its window.
	if r, when := until(8, func(v []float64, _ float64) { v[0], v[1] = v[0]+20, math.NaN() }); r.Steady || r.Why != Gaps || r.Quantity != 1 || !(when < 5) {
		t.Errorf("lost: %+v at %v", r, when)
	}
	if r, _ := until(60, func(v []float64, _ float64) { v[0] += 20 }); !r.Steady {
		t.Errorf("back: %+v", r)
	}
}

// P(η) against critical values for independent normal data, 1 % and 5 %: Buishand,
// J. Hydrology 58 (1982) 11, table 1 (from memory, two decimals).
func TestVonNeumannCriticalValues(t *testing.T) {
	for _, tc := range []struct {
		n         int
		one, five float64
	}{{20, 1.04, 1.30}, {30, 1.20, 1.42}, {40, 1.29, 1.49}, {50, 1.36, 1.54}, {70, 1.45, 1.61}, {100, 1.54, 1.67}} {
		// Half a unit of the last decimal of the ratio is up to 8 % of the probability.
		within(t, "1 % point", smallRatio(tc.one, float64(tc.n)), 0.01, 0.0008)
		within(t, "5 % point", smallRatio(tc.five, float64(tc.n)), 0.05, 0.003)
	}
}

// The share of independent normal samples that fall below P is P: 40 000 samples,
// four times their sampling error and 0.001 for the beta form.
func TestVonNeumannIsUniform(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for _, n := range []int{8, 20, 60} {
		const samples = 40_000
		x := make([]float64, n)
		limits := [...]float64{0.001, 0.01, 0.05, 0.5}
		var below [len(limits)]float64
		for range samples {
			for i := range x {
				x[i] = 250e3 + 100*r.NormFloat64()
			}
			_, p := VonNeumann(x)
			for i, l := range limits {
				if p < l {
					below[i]++
				}
			}
		}
		for i, l := range limits {
			within(t, "share", below[i]/samples, l, 4*math.Sqrt(l*(1-l)/samples)+0.001*min(1, 50*l))
		}
	}
}

func TestVonNeumannEdges(t *testing.T) {
	for _, tc := range []struct {
		name   string
		x      []float64
		eta, p float64
	}{
		{"too few", []float64{1, 2, 3}, math.NaN(), math.NaN()},
		{"constant", []float64{5, 5, 5, 5, 5}, 2, 0.5},
		// By hand: 4 steps of 1, squares 4+1+0+1+4.
		{"a line", []float64{1, 2, 3, 4, 5}, 0.4, 0.006},
		// Steps of 2, squares of 1 about the mean 0.
		{"to and fro", []float64{1, -1, 1, -1, 1, -1}, 20.0 / 6, 0.99},
	} {
		eta, p := VonNeumann(tc.x)
		if !(eta == tc.eta || math.Abs(eta-tc.eta) < 1e-12 || math.IsNaN(tc.eta) && math.IsNaN(eta)) {
			t.Errorf("%s: ratio %v, want %v", tc.name, eta, tc.eta)
		}
		if !(math.Abs(p-tc.p) < 0.01 || math.IsNaN(tc.p) && math.IsNaN(p)) {
			t.Errorf("%s: probability %v, want about %v", tc.name, p, tc.p)
		}
	}
}

func TestCheck(t *testing.T) {
	if err := detector().Check(); err != nil {
		t.Error(err)
	}
	for name, change := range map[string]func(*Criterion){
		"no width":       func(c *Criterion) { c.Window.Width = 0 },
		"too few bins":   func(c *Criterion) { c.Window.Bins = 4 },
		"too many bins":  func(c *Criterion) { c.Window.Bins = MaxBins + 1 },
		"no slope":       func(c *Criterion) { c.Relative = 0 },
		"negative slope": func(c *Criterion) { c.Slope = -1 },
		"noise":          func(c *Criterion) { c.Noise = math.NaN() },
	} {
		d := detector()
		change(&d.Quantities[0])
		if d.Check() == nil {
			t.Errorf("%s: accepted", name)
		}
		// What Check refuses must still not panic.
		var s State
		for at := epoch; at < epoch+70*second; at += scan {
			d.Step(&s, at, []float64{100})
		}
	}
	// Before anything is known, nothing looks like a value.
	var s State
	d := detector()
	d.Step(&s, epoch, []float64{100})
	if v := Reduce(&s.Stats[0], Part{}); !math.IsNaN(v.Mean) || !math.IsNaN(v.U95) {
		t.Errorf("after one scan: %+v", v)
	}
}

func TestCodes(t *testing.T) {
	seen := map[string]bool{}
	for w := IsSteady; w <= Dwell+1; w++ {
		text, err := w.MarshalText()
		if err != nil || seen[string(text)] || (string(text) == "invalid") != (w > Dwell) {
			t.Errorf("%d: %q %v", w, text, err)
		}
		seen[string(text)] = true
	}
	for n := Given; n <= TooFarAhead+1; n++ {
		text, err := n.MarshalText()
		if err != nil || seen[string(text)] && n <= TooFarAhead || (string(text) == "invalid") != (n > TooFarAhead) {
			t.Errorf("%d: %q %v", n, text, err)
		}
		seen[string(text)] = true
	}
}
