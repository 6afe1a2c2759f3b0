package calib

import (
	"math"
	"testing"

	"throatwatch/monitor/uncertainty"
)

// Every row of the tolerances of IEC 60584-1:2013 (until then IEC 60584-2:1982 with
// amendment 1:1989; from memory, type K and N of class 1 also as makers of thermocouples
// print them), at the ends of each part and where the form changes. Exact but for rounding.
func TestTolerance(t *testing.T) {
	nan := math.NaN()
	for _, tt := range []struct {
		name  string
		types string
		class int
		at    map[float64]float64 // °C: ± °C
	}{
		{"T, class 1: 0.5, 0.004 |t| above 125", "T", 1, map[float64]float64{-41: nan, -40: 0.5, 0: 0.5, 125: 0.5, 200: 0.8, 350: 1.4, 351: nan}},
		{"E, class 1: 1.5, 0.004 |t| above 375", "E", 1, map[float64]float64{-41: nan, -40: 1.5, 375: 1.5, 500: 2, 800: 3.2, 801: nan}},
		{"J, class 1: 1.5, 0.004 |t| above 375", "J", 1, map[float64]float64{-41: nan, -40: 1.5, 375: 1.5, 600: 2.4, 750: 3, 751: nan}},
		{"K and N, class 1: 1.5, 0.004 |t| above 375", "KN", 1, map[float64]float64{-41: nan, -40: 1.5, 20: 1.5, 375: 1.5, 750: 3, 1000: 4, 1001: nan}},
		{"R and S, class 1: 1, 1 + 0.003 (t − 1100) above 1100", "RS", 1, map[float64]float64{-1: nan, 0: 1, 1100: 1, 1300: 1.6, 1600: 2.5, 1601: nan}},
		{"B has no class 1", "B", 1, map[float64]float64{600: nan, 1000: nan}},
		{"T, class 2: 1, 0.0075 |t| above 133", "T", 2, map[float64]float64{-41: nan, -40: 1, 133: 1, 200: 1.5, 350: 2.625, 351: nan}},
		{"E, class 2: 2.5, 0.0075 |t| above 333", "E", 2, map[float64]float64{-41: nan, -40: 2.5, 333: 2.5, 600: 4.5, 900: 6.75, 901: nan}},
		{"J, class 2: 2.5, 0.0075 |t| above 333", "J", 2, map[float64]float64{-41: nan, -40: 2.5, 333: 2.5, 600: 4.5, 750: 5.625, 751: nan}},
		{"K and N, class 2: 2.5, 0.0075 |t| above 333", "KN", 2, map[float64]float64{-41: nan, -40: 2.5, 333: 2.5, 800: 6, 1200: 9, 1201: nan}},
		{"R and S, class 2: 1.5, 0.0025 |t| above 600", "RS", 2, map[float64]float64{-1: nan, 0: 1.5, 600: 1.5, 1000: 2.5, 1600: 4, 1601: nan}},
		{"B, class 2: 0.0025 |t| from 600", "B", 2, map[float64]float64{599: nan, 600: 1.5, 1000: 2.5, 1700: 4.25, 1701: nan}},
		{"T, class 3: 1, 0.015 |t| below −67", "T", 3, map[float64]float64{-201: nan, -200: 3, -100: 1.5, -60: 1, 40: 1, 41: nan}},
		{"E, K and N, class 3: 2.5, 0.015 |t| below −167", "EKN", 3, map[float64]float64{-201: nan, -200: 3, -180: 2.7, -160: 2.5, 40: 2.5, 41: nan}},
		{"B, class 3: 4, 0.005 |t| above 800", "B", 3, map[float64]float64{599: nan, 600: 4, 800: 4, 1000: 5, 1700: 8.5, 1701: nan}},
		{"J, R and S have no class 3", "JRS", 3, map[float64]float64{-100: nan, 20: nan}},
		{"no fourth class, no type X", "K", 4, map[float64]float64{20: nan}},
		{"no type X", "X", 1, map[float64]float64{20: nan}},
	} {
		for _, kind := range []byte(tt.types) {
			c := Thermocouple{Type: kind, Class: tt.class}
			for celsiusAt, want := range tt.at {
				got := c.Tolerance(celsiusAt + celsius)
				if !(math.Abs(got-want) <= 1e-11) && !(math.IsNaN(got) && math.IsNaN(want)) {
					t.Errorf("%s: type %c at %g °C: %.12g, want %g", tt.name, kind, celsiusAt, got, want)
				}
			}
		}
	}
}

// The tolerance is a rectangular half-width, a/√3 standard [JCGM 100 4.3.7], and comes to
// what else is stated as a root of the sum of squares.
func TestThermocoupleU95(t *testing.T) {
	u := Uncertainty{Stated: true, Thermocouple: Thermocouple{'K', 1}, Fixed: 2}
	const t750 = 1023.15 // 750 °C, ± 3 °C
	want := math.Hypot(2, uncertainty.Coverage*3/math.Sqrt(3))
	if got := u.U95(t750, 0, 1500); math.Abs(got-want) > 1e-9 {
		t.Errorf("U95 %.9g, want %.9g", got, want)
	}
	if got := u.U95(1300, 0, 1500); !math.IsNaN(got) {
		t.Errorf("U95 %g where the class has no tolerance", got)
	}
	if !u.Thermocouple.Defined() || (Thermocouple{'B', 1}).Defined() {
		t.Error("classes")
	}
}
