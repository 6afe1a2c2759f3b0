package calib_test

import (
	"math"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/unit"
)

func parse(tb testing.TB, name string) unit.Unit {
	tb.Helper()
	u, err := unit.Parse(name)
	if err != nil {
		tb.Fatal(err)
	}
	return u
}

// The expectations are worked out by hand from the definitions: value =
// Σ aᵢ rawⁱ in Unit, then Unit to SI by its definition (1 psi = 0.45359237 kg ·
// 9.80665 m/s² / (0.0254 m)² = 6894.757293168 Pa).
func TestConvert(t *testing.T) {
	ma, kpa, degc, degf, psi, kg := parse(t, "mA"), parse(t, "kPa"), parse(t, "degC"), parse(t, "degF"), parse(t, "psi"), parse(t, "kg/h")
	inf := math.Inf(1)
	loop := calib.Spec{Raw: ma, Unit: kpa, Polynomial: []float64{-200, 45}, Reference: calib.Gauge, Low: -20e3, High: 700e3}
	couple := calib.Spec{Raw: degc, Unit: degc, Low: degc.ToSI(-40), High: degc.ToSI(1100), Codes: []float64{1372, -9999}}
	bend := calib.Spec{Raw: ma, Unit: kg, Polynomial: []float64{1, -2, 0.5, 0.25}, Low: -1, High: 1}
	for _, tt := range []struct {
		name      string
		spec      *calib.Spec
		raw, want float64
		quality   monitor.Quality
	}{
		// 45 · 4 − 200 = −20 kPa: the low end of the range belongs to it.
		{"4 to 20 mA loop, 4 mA", &loop, 4, -20e3, monitor.QualityGood},
		{"12 mA: 45 · 12 − 200 = 340 kPa", &loop, 12, 340e3, monitor.QualityGood},
		{"20 mA: 700 kPa, the high end belongs to it", &loop, 20, 700e3, monitor.QualityGood},
		{"20.01 mA: 700.45 kPa", &loop, 20.01, 700.45e3, monitor.QualityOutOfRange},
		{"broken loop, 0 mA: −200 kPa", &loop, 0, -200e3, monitor.QualityOutOfRange},
		{"no polynomial: the unit alone", &couple, 600, 873.15, monitor.QualityGood},
		{"−40 degC = 233.15 K", &couple, -40, 233.15, monitor.QualityGood},
		{"below it", &couple, -40.01, 233.14, monitor.QualityOutOfRange},
		{"thermocouple open: a code, although out of range too", &couple, 1372, 0, monitor.QualityInvalidCode},
		{"module fault", &couple, -9999, 0, monitor.QualityInvalidCode},
		{"a degree beside a code is none", &couple, 1371, 1644.15, monitor.QualityOutOfRange},
		// 1 − 2·4 + 0.5·16 + 0.25·64 = 17 kg/h = 17/3600 kg/s.
		{"cubic", &bend, 4, 17.0 / 3600, monitor.QualityGood},
		{"cubic at 0: the constant", &bend, 0, 1.0 / 3600, monitor.QualityGood},
		{"14.5 psi", &calib.Spec{Unit: psi, High: 1e6}, 14.5, 99973.980750936, monitor.QualityGood},
		// 212 degF = 373.15 K, the definition of the scale.
		{"212 degF", &calib.Spec{Unit: degf, High: 1e4}, 212, 373.15, monitor.QualityGood},
		{"a constant polynomial", &calib.Spec{Unit: kpa, Polynomial: []float64{7}, High: 1e4}, 123, 7e3, monitor.QualityGood},
		{"infinity", &couple, inf, inf, monitor.QualityOutOfRange},
		{"minus infinity", &couple, -inf, -inf, monitor.QualityOutOfRange},
		{"range of nothing", &calib.Spec{Unit: kpa, Low: 1, High: -1}, 0, 0, monitor.QualityOutOfRange},
	} {
		got, q := tt.spec.Convert(tt.raw)
		if q != tt.quality || math.Abs(got-tt.want) > 1e-12*math.Abs(tt.want) {
			t.Errorf("%s: %.15g %v, want %.15g %v", tt.name, got, q, tt.want, tt.quality)
		}
	}
	// Not a number is in no range, whatever the range.
	for _, s := range []*calib.Spec{&loop, &couple, &bend, {Unit: kpa, Low: -inf, High: inf}} {
		if _, q := s.Convert(math.NaN()); q != monitor.QualityOutOfRange {
			t.Errorf("NaN is %v", q)
		}
	}
}

// Convert is linear where the polynomial is: a difference of two values is the
// difference of two raw values times slope and scale, whatever the offsets.
func TestConvertDifferences(t *testing.T) {
	s := calib.Spec{Unit: parse(t, "degF"), Polynomial: []float64{32, 1.8}, Low: math.Inf(-1), High: math.Inf(1)}
	for _, raw := range []float64{-40, 0, 37.5, 650} {
		a, _ := s.Convert(raw)
		b, _ := s.Convert(raw + 10)
		// degF = 32 + 1.8 degC, so 10 raw are 10 K.
		if math.Abs(b-a-10) > 1e-9 {
			t.Errorf("from %g: 10 raw are %g K, want 10 K", raw, b-a)
		}
	}
}

// U² = (full scale · range)² + (reading · value)² + fixed², by Pythagorean
// triples and quadruples, which need no rounding: 3² + 4² = 5², 2² + 3² + 6² = 7².
func TestU95(t *testing.T) {
	for _, tt := range []struct {
		name             string
		u                calib.Uncertainty
		value, low, high float64
		want             float64
	}{
		{"full scale alone: 0.25 % of 14 kPa", calib.Uncertainty{FullScale: 0.0025}, 3e3, -7e3, 7e3, 35},
		{"reading alone", calib.Uncertainty{Reading: 0.005}, 400, 0, 1000, 2},
		{"reading of a negative value", calib.Uncertainty{Reading: 0.005}, -400, -1000, 0, 2},
		{"fixed alone", calib.Uncertainty{Fixed: 30}, 101325, 85e3, 110e3, 30},
		{"full scale 30 and reading 40", calib.Uncertainty{FullScale: 0.003, Reading: 0.004}, 10e3, -1e3, 9e3, 50},
		{"2, 3 and 6", calib.Uncertainty{FullScale: 0.02, Reading: 0.03, Fixed: 6}, 100, 0, 100, 7},
		{"the random part is apart", calib.Uncertainty{Fixed: 3, Random: 1000}, 5, 0, 10, 3},
		{"nothing", calib.Uncertainty{}, 5, 0, 10, 0},
	} {
		if got := tt.u.U95(tt.value, tt.low, tt.high); math.Abs(got-tt.want) > 1e-12*tt.want {
			t.Errorf("%s: %.15g, want %.15g", tt.name, got, tt.want)
		}
	}
}

// No raw value, range or polynomial makes Convert give a usable value that is
// outside the range or no number.
func FuzzConvert(f *testing.F) {
	f.Add(12.0, -200.0, 45.0, 0.0, -20e3, 700e3)
	f.Add(math.Inf(1), 0.0, 1e300, 1e300, -1.0, 1.0)
	f.Add(math.NaN(), 0.0, 1.0, 0.0, math.Inf(-1), math.Inf(1))
	u := parse(f, "kPa")
	f.Fuzz(func(t *testing.T, raw, a, b, c, low, high float64) {
		s := calib.Spec{Unit: u, Polynomial: []float64{a, b, c}, Low: low, High: high, Codes: []float64{4}}
		v, q := s.Convert(raw)
		if q.Usable() && !(v >= low && v <= high) {
			t.Errorf("%g is %g, %v, outside %g to %g", raw, v, q, low, high)
		}
		if (raw == 4) != (q == monitor.QualityInvalidCode) {
			t.Errorf("%g is %v", raw, q)
		}
	})
}

var sink float64

func BenchmarkConvert(b *testing.B) {
	s := calib.Spec{Unit: parse(b, "kPa"), Polynomial: []float64{-103, 25.9, -0.0625, 0.0013}, High: 400e3, Codes: []float64{-9999}}
	var raws [64]float64
	for i := range raws {
		raws[i] = 4 + float64(i)/4
	}
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		v, _ := s.Convert(raws[i&63])
		sink += v
		i++
	}
}
