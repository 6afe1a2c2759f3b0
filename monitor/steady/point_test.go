package steady

import (
	"math"
	"testing"
)

// GUM H.1, end gauge: the four main components in nm, with degrees of freedom.
// Published u_c 32 nm, ν 16, U99 93 nm, u(d) 9.7 nm, ν(d) 25.6; the digits beyond
// are from the data of H.1 computed with 30 digits.
func TestEndGauge(t *testing.T) {
	d, nuD := Combine(Part{5.8, 24}, Part{3.9, 5}, Part{6.7, 8})
	within(t, "u(d)", d, 9.68194, 5e-6)
	within(t, "ν(d)", nuD, 25.6, 0.2) // published from 9.7⁴
	const length, expansion = 50000623.0, 11.5e-6
	u, nu := Combine(
		Part{25, 18}, Part{d, nuD},
		Part{length * 0.1 * 1e-6 / math.Sqrt(3), 50},
		Part{length * expansion * 0.05 / math.Sqrt(3), 2},
	)
	within(t, "u_c", u, 31.66388, 5e-6)
	within(t, "ν", nu, 16.752, 5e-4)
	within(t, "k99", Expand(0.99, nu), 2.92, 0.005) // t99(16): ν is cut, not rounded
	within(t, "U99", Expand(0.99, nu)*u, 93, 1)     // published from u_c rounded to 32
}

// GUM H.2: five independent readings of voltage, current and phase. Mean and
// uncertainty as published; more digits recomputed from the data.
func TestRepeatedReadings(t *testing.T) {
	for _, tc := range []struct {
		name          string
		x             []float64
		mean, u, rel  float64
		printed, unit float64
	}{
		{"V", []float64{5.007, 4.994, 5.005, 4.990, 4.999}, 4.999, 0.0032093614, 1e-7, 0.0032, 1e-4},
		{"I", []float64{19.663, 19.639, 19.640, 19.685, 19.678}, 19.661, 0.0094710084, 1e-7, 0.0095, 1e-4},
		{"φ", []float64{1.0456, 1.0438, 1.0468, 1.0428, 1.0433}, 1.04446, 0.00075206383, 1e-7, 0.00075, 1e-5},
	} {
		mean, u, nu := Readings(tc.x)
		within(t, tc.name, mean, tc.mean, 1e-12*tc.mean)
		within(t, "u("+tc.name+")", u, tc.u, tc.rel*tc.u)
		within(t, "u("+tc.name+") as printed", u, tc.printed, tc.unit/2)
		if nu != 4 {
			t.Errorf("%s: ν %v", tc.name, nu)
		}
	}
	if m, u, nu := Readings([]float64{7}); m != 7 || !math.IsNaN(u) || nu != 0 {
		t.Errorf("one reading: %v %v %v", m, u, nu)
	}
	if m, u, _ := Readings(nil); !math.IsNaN(m) || !math.IsNaN(u) {
		t.Errorf("no reading: %v %v", m, u)
	}
}

func TestCombine(t *testing.T) {
	for _, tc := range []struct {
		name         string
		parts        []Part
		u, nu        float64
		uRel, nuRel  float64
		coverageFrom float64
	}{
		// Published ν 12.8; 12.79565 recomputed.
		{"0.57 (9) and 0.25 (∞)", []Part{{0.57, 9}, {0.25, 0}}, 0.6224146527, 12.79565, 1e-9, 1e-6, 12},
		// y = X1/X2·Y, published 0.00494 and 27.7 with rounding on the way; exact 0.0049318 and 27.513.
		{"a product", []Part{
			{0.6978 / 0.1823 * 0.00093, 9}, {0.1820 / 0.1823 / 0.1823 * 0.6978 * 0.00058, 19}, {0.1820 / 0.1823 * 0.0026, 19},
		}, 0.0049318, 27.513, 1e-5, 2e-5, 27},
		{"exactly known", []Part{{3, 0}, {4, math.Inf(1)}}, 5, math.Inf(1), 1e-15, 0, 1e6},
		{"nothing", nil, 0, 0, 0, 0, 1},
		{"one", []Part{{2, 7}}, 2, 7, 1e-15, 1e-15, 7},
		{"not stated", []Part{{2, 7}, {math.NaN(), 0}}, math.NaN(), math.NaN(), 0, 0, math.NaN()},
	} {
		u, nu := Combine(tc.parts...)
		if !(math.Abs(u-tc.u) <= tc.uRel*tc.u || math.IsNaN(u) && math.IsNaN(tc.u)) {
			t.Errorf("%s: u %v, want %v", tc.name, u, tc.u)
		}
		if !(nu == tc.nu || math.Abs(nu-tc.nu) <= tc.nuRel*tc.nu || math.IsNaN(nu) && math.IsNaN(tc.nu)) {
			t.Errorf("%s: ν %v, want %v", tc.name, nu, tc.nu)
		}
		if k, want := Expand(0.95, nu), Student(0.95, tc.coverageFrom); !(k == want || math.IsNaN(k) && math.IsNaN(want)) {
			t.Errorf("%s: k %v, want %v", tc.name, k, want)
		}
	}
}

// The interval of a test point with both kinds of error holds the truth in 95 % of
// 1000 points (three times the sampling error is 0.021), with k from ν and not 2.
func TestPointsHold(t *testing.T) {
	const points, systematic = 1000, 0.3
	w, sig := Seconds(30), seeded(67, 1, 2, level(900))
	var p Past
	hold := 0.0
	for range points {
		s := window(w, &p, sig)
		v := Reduce(&s, Part{U: systematic})
		truth := 900 + systematic*sig.r.NormFloat64()
		if math.Abs(v.Mean-truth) <= v.U95 {
			hold++
		}
		within(t, "U95", v.U95, v.K*math.Hypot(v.TypeA.U, systematic), 1e-12)
		if v.K < 1.96 || v.Nu < v.TypeA.Nu || v.N != s.N || v.SD != s.SD {
			t.Fatalf("%+v", v)
		}
	}
	within(t, "points that hold", hold/points, 0.955, 0.022)
}

func TestReduce(t *testing.T) {
	w := Seconds(30)
	var p Past
	s := window(w, &p, seeded(71, 0.2, 1, level(500)))
	if v := Reduce(&s, Part{U: math.NaN()}); !math.IsNaN(v.U95) || math.IsNaN(v.Mean) || math.IsNaN(v.TypeA.U) {
		t.Errorf("systematic part not stated: %+v", v)
	}
	// A large systematic part makes k that of the normal distribution.
	if v := Reduce(&s, Part{U: 50}); math.Abs(v.K-1.96) > 1e-3 || v.Nu > many {
		t.Errorf("k %v, ν %v", v.K, v.Nu)
	}
	if v := Reduce(&s, Part{U: 0}); v.K != Expand(0.95, s.Nu) {
		t.Errorf("k %v without a systematic part, want that of ν %v", v.K, s.Nu)
	}
	none := unknown()
	if v := Reduce(&none, Part{U: 1}); !math.IsNaN(v.U95) || !math.IsNaN(v.Mean) {
		t.Errorf("no data: %+v", v)
	}
}

func TestTake(t *testing.T) {
	d := &Detector{Quantities: []Criterion{{Window: Seconds(60), Relative: 0.01 / 60}, {Window: Seconds(30), Slope: 1}}, Dwell: second}
	var s State
	a, b := seeded(73, 0.3, 0.05, level(200)), seeded(79, 0.3, 0.5, level(700))
	for at := epoch; at <= epoch+90*second; at += scan {
		d.Step(&s, at, []float64{a.at(at), b.at(at)})
	}
	tp := s.Take(4, []Part{{U: 0.2}, {U: 1.5, Nu: 10}})
	if tp.Number != 4 || tp.From != epoch+30*second || tp.To != epoch+90*second || !tp.Found.Steady || len(tp.Values) != 2 {
		t.Fatalf("%+v", tp)
	}
	within(t, "first", tp.Values[0].Mean, 200, tp.Values[0].U95)
	within(t, "second", tp.Values[1].Mean, 700, tp.Values[1].U95)
	if tp.Values[1].TypeB != (Part{1.5, 10}) || !(tp.Values[1].K > 2.1) {
		t.Errorf("second: %+v", tp.Values[1])
	}
}
