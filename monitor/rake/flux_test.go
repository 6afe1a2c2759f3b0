package rake

import (
	"bytes"
	"encoding/gob"
	"math"
	"math/rand/v2"
	"testing"

	"throatwatch/monitor"
)

// Weights end at area times mass flux. At one temperature and small Mach number that goes
// with √(p0 − ps), so that heads as 4 : 9 : 16 : 25 make weights as 2 : 3 : 4 : 5.
func TestWeigh(t *testing.T) {
	const ps = 200e3
	over := []float64{4, 9, 16, 25} // squares
	p0 := make([]float64, 4)
	for i, o := range over {
		p0[i] = ps + 300*o
	}
	var l Live
	settle := func(areas, temperature []float64) {
		for range 60 * 20 {
			if !l.Weigh(l.T+second/20, areas, p0, ps, temperature) {
				t.Fatal("no flow to weigh by")
			}
		}
	}
	settle(nil, nil)
	for i, w := range l.Weights {
		// √(2 ρ Δp) is 0.2 % off by the density at the highest head.
		within(t, "by flow", w, []float64{2, 3, 4, 5}[i]*4/14, 0.004)
	}
	l = Live{}
	settle([]float64{3, 2, 1.5, 1.2}, nil)
	for _, w := range l.Weights {
		within(t, "by area and flow", w, 7.7/4, 0.008)
	}
	// ρV goes with 1/√T0.
	l = Live{}
	settle(nil, []float64{400, 900, 1600, 2500})
	for _, w := range l.Weights {
		within(t, "by flow at unlike temperatures", w, 1, 0.004)
	}
}

// No flow to tell: the weights stay, from the areas on.
func TestWeighHolds(t *testing.T) {
	good := []float64{230e3, 235e3, 240e3}
	nan := math.NaN()
	for _, tt := range []struct {
		name        string
		pressure    []float64
		static      float64
		temperature []float64
	}{
		{"no wall static", good, nan, nil},
		{"a place without a probe", []float64{230e3, nan, 240e3}, 220e3, nil},
		{"no head at a place", []float64{230e3, 220.5e3, 240e3}, 220e3, nil},
		{"flow back", []float64{210e3, 215e3, 219e3}, 220e3, nil},
		{"a place without a temperature", good, 220e3, []float64{900, nan, 880}},
		{"static at zero", good, 0, nil},
	} {
		areas := []float64{1, 2, 1}
		var l Live
		if l.Weigh(second, areas, tt.pressure, tt.static, tt.temperature) || l.Weights[1] != 2 {
			t.Errorf("%s: weights %v", tt.name, l.Weights)
		}
		for i := range int64(200) {
			l.Weigh(2*second+i*scan, areas, good, 220e3, nil)
		}
		before := l.Weights[1]
		if l.Weigh(30*second, areas, tt.pressure, tt.static, tt.temperature) || l.Weights[1] != before || before == 2 {
			t.Errorf("%s: weight %v before, %v after", tt.name, before, l.Weights[1])
		}
	}
}

// With all probes read the mean is the plain one by the live weights; a probe that goes
// and comes makes no step; the pattern is that of the areas.
func TestReweigh(t *testing.T) {
	for _, areas := range [][]float64{nil, {1, 2, 3, 4, 4, 3, 2, 1}} {
		w := harness()
		w.Weights = areas
		g := newRig(21, w, 0.05)
		weights := []float64{3, 1, 2, 1.5, 1, 2, 0.5, 1}
		places := make([]float64, 8)
		mean := func(r Result) float64 {
			w.Places(&g.s, &r, g.value[:], g.quality[:], places)
			return r.Mean + w.Reweigh(&r, places, weights)
		}
		for range 120 * 20 {
			r := g.step(nil)
			within(t, "plain mean", mean(r), r.Mean-Mean(g.value[:], areas)+Mean(g.value[:], weights), 1e-9)
		}
		last := mean(g.step(nil))
		for n := range 40 * 20 {
			var change func([]float64, []monitor.Quality)
			if n < 20*20 {
				change = bad(0, monitor.QualityInvalidCode)
			}
			now := mean(g.step(change))
			within(t, "step", now, last, 0.15)
			last = now
		}
		within(t, "in the end", last, 900+Mean(pattern[:], weights), 0.1)
	}
	// Nothing stands anywhere.
	w := &Watch{Probes: 2, Least: 1}
	if d := w.Reweigh(&Result{Mean: math.NaN()}, []float64{math.NaN(), math.NaN()}, []float64{1, 2}); d != 0 {
		t.Errorf("moved by %v", d)
	}
}

// The weights are plain data and the noise of a scan moves them little: 0.15 kPa on a head
// of 15 kPa is 0.5 % of the flux, over 5 s at 20 scans/s 0.04 %.
func TestWeighIsSmooth(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 3))
	var l Live
	p := make([]float64, 4)
	square, n := 0.0, 0.0
	for i := range int64(200 * 20) {
		for k := range p {
			p[k] = 235e3 + 150*r.NormFloat64()
		}
		l.Weigh(i*scan, nil, p, 220e3, nil)
		if i > 40*20 {
			square += (l.Weights[0] - 1) * (l.Weights[0] - 1)
			n++
		}
	}
	if sd := math.Sqrt(square / n); !(sd < 0.0006) {
		t.Errorf("weights scatter by %.5f", sd)
	}
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(&l); err != nil {
		t.Fatal(err)
	}
	var other Live
	if err := gob.NewDecoder(&b).Decode(&other); err != nil {
		t.Fatal(err)
	}
	l.Weigh(l.T+scan, nil, p, 220e3, nil)
	other.Weigh(other.T+scan, nil, p, 220e3, nil)
	if l.Weights[2] != other.Weights[2] || l.T != other.T {
		t.Errorf("%+v, after restart %+v", l, other)
	}
}
