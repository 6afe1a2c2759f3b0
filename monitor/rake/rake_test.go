package rake

import (
	"math"
	"math/rand/v2"
	"testing"
)

func within(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance || math.IsNaN(got) && math.IsNaN(want)) {
		t.Errorf("%s = %v, want %v ± %v", what, got, want, tolerance)
	}
}

func TestMean(t *testing.T) {
	nan := math.NaN()
	// By hand.
	for _, tc := range []struct {
		name            string
		values, weights []float64
		want            float64
	}{
		{"equal", []float64{900, 910, 920}, nil, 910},
		{"area weights", []float64{900, 910, 920}, []float64{1, 2, 5}, 915},
		{"one missing", []float64{900, nan, 920}, []float64{1, 2, 3}, 915},
		{"none", []float64{nan, nan}, nil, nan},
		{"no probe", nil, nil, nan},
	} {
		within(t, tc.name, Mean(tc.values, tc.weights), tc.want, 1e-12*900)
	}
}

func TestMassFlux(t *testing.T) {
	// NACA Report 1135 table I, γ 1.4: at M 0.5 p/pt 0.8430 and A/A* 1.340 (to be
	// divided into the sonic 0.684731 p0/√(R T0)), at M 1 p/pt 0.5283.
	const r, t0, p0 = 287.05, 300.0, 200e3
	unit := p0 / math.Sqrt(r*t0)
	within(t, "M 0.5", MassFlux(p0, 0.8430*p0, t0, 1.4, r)/unit, 0.684731/1.340, 5e-4)
	within(t, "M 1", MassFlux(p0, 0.5283*p0, t0, 1.4, r)/unit, 0.684731, 1e-5)
	if v := MassFlux(1e5, 1.001e5, 300, 1.4, r); v != 0 {
		t.Errorf("flow back: %v", v)
	}
	// Identity: for a small pressure difference ρV = √(2 ρ Δp).
	within(t, "incompressible", MassFlux(100_010, 100_000, 300, 1.4, r), math.Sqrt(2*10*100_000/(r*300)), 1e-4)
	// As weight: 0.05 off in γ changes the ratio between a fast and a slow place little.
	ratio := func(g float64) float64 {
		return MassFlux(250e3, 220e3, 900, g, 287) / MassFlux(240e3, 220e3, 880, g, 287)
	}
	within(t, "ratio at another γ", ratio(1.38)/ratio(1.33), 1, 0.001)
}

func TestThompson(t *testing.T) {
	// ASME PTC 19.1 table of modified τ at 5 % (from memory; n = 4 by the formula).
	for n, want := range map[float64]float64{3: 1.150, 4: 1.425, 5: 1.572, 6: 1.656, 7: 1.711, 8: 1.749, 9: 1.777, 10: 1.798, 20: 1.885} {
		within(t, "τ", thompson(n), want, 0.0015)
	}
	nan := math.NaN()
	for _, tc := range []struct {
		name   string
		values []float64
		want   int
	}{
		{"one far off", []float64{901, 899, 900, 940, 902, 898}, 3},
		{"and below", []float64{850, 899, 900, 901, 902, 898}, 0},
		{"a missing one", []float64{901, nan, 900, 940, 902, 898}, 3},
		{"none", []float64{901, 899, 900, 902, 898}, -1},
		{"too few", []float64{1, 100, nan}, -1},
		{"equal", []float64{5, 5, 5, 5}, -1},
		{"nothing", nil, -1},
	} {
		if got := Thompson(tc.values); got != tc.want {
			t.Errorf("%s: %d, want %d", tc.name, got, tc.want)
		}
	}
}

// Why Thompson's test is no live test: of eight healthy probes it names one in a
// good part of scans.
func TestThompsonNamesHealthyProbes(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	named, v := 0.0, make([]float64, 8)
	const scans = 20_000
	for range scans {
		for i := range v {
			v[i] = 900 + r.NormFloat64()
		}
		if Thompson(v) >= 0 {
			named++
		}
	}
	if share := named / scans; share < 0.15 || share > 0.5 {
		t.Errorf("named one in %.1f %% of scans", 100*share)
	}
}
