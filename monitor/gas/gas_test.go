package gas

import (
	"errors"
	"math"
	"strconv"
	"testing"

	"throatwatch/monitor/internal/vectors"
)

func near(got, want, rel float64) bool { return math.Abs(got-want) <= rel*math.Abs(want) }

func mixture(tb testing.TB, f, war float64) *Mixture {
	tb.Helper()
	m, err := NewMixture(Kerosene(), f, war)
	if err != nil {
		tb.Fatal(err)
	}
	return &m
}

// composition gives the mole fractions of products by the balance of atoms.
func composition(fuel Fuel, f, war float64) [numSpecies]float64 {
	x := dryAir
	phi := f * airMass / fuel.MolarMass()
	x[o2] -= phi * (fuel.Carbon + fuel.Hydrogen/4)
	x[co2] += phi * fuel.Carbon
	x[h2o] += phi*fuel.Hydrogen/2 + war*airMass/data[h2o].molarMass
	var sum float64
	for _, n := range x {
		sum += n
	}
	for i := range x {
		x[i] /= sum
	}
	return x
}

func perfect(tb testing.TB, gamma float64) *Mixture {
	tb.Helper()
	m, err := Perfect(gamma, 287)
	if err != nil {
		tb.Fatal(err)
	}
	return &m
}

// The sonic state is the state of greatest flux, and satisfies its own
// definition, over the whole range and through the join at 1000 K.
func TestCriticalIdentities(t *testing.T) {
	for _, f := range []float64{0, 0.017, 0.04, StoichiometricRatio(Kerosene())} {
		for _, war := range []float64{0, 0.02} {
			m := mixture(t, f, war)
			var last float64
			for t0 := 210.0; t0 < 1800; t0 += 0.37 {
				c := m.Critical(t0)
				v := m.SpeedOfSound(c.Temperature)
				if energy := (m.H(t0) - m.H(c.Temperature)) * 2 / (v * v); !near(energy, 1, 1e-7) {
					t.Fatalf("f %g war %g T0 %g: 2(h0 − h*)/a*² = %v", f, war, t0, energy)
				}
				if entropy := (m.S0(t0) - m.S0(c.Temperature)) / m.R(); !near(math.Exp(-entropy), c.PressureRatio, 1e-13) {
					t.Fatalf("f %g war %g T0 %g: p*/p0 = %v", f, war, t0, c.PressureRatio)
				}
				flux := func(temp float64) float64 {
					v := math.Sqrt(2 * (m.H(t0) - m.H(temp)))
					return math.Exp((m.S0(temp)-m.S0(t0))/m.R()) * v / math.Sqrt(m.R()*t0) * t0 / temp
				}
				if !near(c.FluxFunction, flux(c.Temperature), 1e-8) {
					t.Fatalf("T0 %g: C* %v, flux there %v", t0, c.FluxFunction, flux(c.Temperature))
				}
				if flux(c.Temperature*1.001) >= c.FluxFunction || flux(c.Temperature*0.999) >= c.FluxFunction {
					t.Fatalf("T0 %g: flux is greater beside T*", t0)
				}
				if c.Temperature <= last {
					t.Fatalf("T0 %g: T* does not rise", t0)
				}
				last = c.Temperature
			}
		}
	}
}

// h = ∫cp dT and s° = ∫cp/T dT through every range and its ends, by Simpson's rule.
func TestEnthalpyAndEntropyAreIntegralsOfCp(t *testing.T) {
	for _, m := range []*Mixture{mixture(t, 0, 0), mixture(t, 0.03, 0.015), perfect(t, 1.33)} {
		for _, span := range [][2]float64{{120, 200}, {200, 1000}, {150, 300}, {900, 1100}, {999.9, 1000.1}, {1000, 2500}} {
			const n = 2000
			width := (span[1] - span[0]) / n
			var h, s float64
			for i := range n {
				a := span[0] + float64(i)*width
				b, c := a+width/2, a+width
				h += width / 6 * (m.Cp(a) + 4*m.Cp(b) + m.Cp(c))
				s += width / 6 * (m.Cp(a)/a + 4*m.Cp(b)/b + m.Cp(c)/c)
			}
			if got := m.H(span[1]) - m.H(span[0]); !near(got, h, 1e-8) {
				t.Errorf("%v K: Δh = %v, ∫cp dT = %v", span, got, h)
			}
			if got := m.S0(span[1]) - m.S0(span[0]); !near(got, s, 1e-8) {
				t.Errorf("%v K: Δs° = %v, ∫cp/T dT = %v", span, got, s)
			}
		}
		// cp itself has no corner to speak of where the ranges meet.
		for _, at := range []float64{coldest, join} {
			if below, above := m.Cp(math.Nextafter(at, 0)), m.Cp(math.Nextafter(at, 1e4)); !near(below, above, 1e-7) {
				t.Errorf("%g K: cp %v below, %v above", at, below, above)
			}
		}
	}
}

func TestSolversReturn(t *testing.T) {
	for _, m := range []*Mixture{mixture(t, 0, 0), mixture(t, 0.03, 0.015), perfect(t, 1.33)} {
		for want := 80.0; want < 2500; want *= 1.07 {
			for _, guess := range []float64{150, 900, 1000, 2400} {
				if got := m.TFromH(m.H(want), guess); !near(got, want, 1e-12) {
					t.Errorf("T from h: %v, want %v, from %v", got, want, guess)
				}
				if got := m.TFromS0(m.S0(want), guess); !near(got, want, 1e-12) {
					t.Errorf("T from s°: %v, want %v, from %v", got, want, guess)
				}
			}
		}
		if got := m.TFromH(m.H(1e-3)-10, 300); !math.IsNaN(got) {
			t.Errorf("an enthalpy below that of 0 K gives %v K", got)
		}
	}
}

func TestSpeedOfSound(t *testing.T) {
	m, err := Perfect(1.4, 287.05287)
	if err != nil {
		t.Fatal(err)
	}
	if a := m.SpeedOfSound(288.15); !near(a, 340.29399, 2e-8) {
		t.Errorf("a = %v m/s, want 340.29399 (ISO 2533 sea level)", a)
	}
}

func TestStoichiometricRatio(t *testing.T) {
	for _, tc := range []struct {
		fuel Fuel
		want float64
	}{{Kerosene(), 0.06816873}, {Fuel{1, 2}, 0.06762691}} { // computed by hand from the atoms, Gordon's air
		if got := StoichiometricRatio(tc.fuel); !near(got, tc.want, 1e-7) {
			t.Errorf("C%gH%g: %v, want %v", tc.fuel.Carbon, tc.fuel.Hydrogen, got, tc.want)
		}
	}
	x := composition(Kerosene(), StoichiometricRatio(Kerosene()), 0.01)
	if math.Abs(x[o2]) > 1e-15 {
		t.Errorf("stoichiometric products hold oxygen: %v", x[o2])
	}
	// Only the ratio of the atoms matters.
	a, errA := NewMixture(Fuel{12, 23}, 0.02, 0)
	b, errB := NewMixture(Fuel{1, 23.0 / 12}, 0.02, 0)
	if errA != nil || errB != nil || !near(a.Cp(900), b.Cp(900), 1e-14) {
		t.Errorf("cp of C12H23 products %v, of CH1.917 %v", a.Cp(900), b.Cp(900))
	}
}

func TestRefusals(t *testing.T) {
	nan := math.NaN()
	for _, tc := range []struct {
		name   string
		fuel   Fuel
		f, war float64
		want   error
	}{
		{"no fuel", Fuel{}, 0, 0, ErrFuel},
		{"fuel not a number", Fuel{nan, 1}, 0, 0, ErrFuel},
		{"negative f", Kerosene(), -1e-9, 0, ErrFuelAir},
		{"rich", Kerosene(), 0.0682, 0, ErrFuelAir},
		{"f not a number", Kerosene(), nan, 0, ErrFuelAir},
		{"negative humidity", Kerosene(), 0, -1e-9, ErrHumidity},
		{"humidity in g/kg", Kerosene(), 0, 6.3, ErrHumidity},
		{"humidity not a number", Kerosene(), 0, nan, ErrHumidity},
	} {
		if m, err := NewMixture(tc.fuel, tc.f, tc.war); !errors.Is(err, tc.want) || m.Valid() {
			t.Errorf("%s: %v, want %v", tc.name, err, tc.want)
		}
	}
	for _, tc := range [][2]float64{{1, 287}, {2.1, 287}, {nan, 287}, {1.4, 0}, {1.4, nan}, {1.4, math.Inf(1)}} {
		if _, err := Perfect(tc[0], tc[1]); !errors.Is(err, ErrPerfect) {
			t.Errorf("γ %g R %g: %v", tc[0], tc[1], err)
		}
	}
}

// The warning comes where the equation of state of Lemmon et al. (2000) says that
// the departure passes 0.1 %, and not where it is below 0.05 %.
func TestRealGasWarning(t *testing.T) {
	m := mixture(t, 0, 0)
	for _, v := range vectors.Read(t, "cstar_air_hot.csv") {
		t0, p0 := v.Num(t, "T0_K"), v.Num(t, "p0_Pa")
		departs := max(math.Abs(v.Num(t, "rel_c")), math.Abs(v.Num(t, "rel_p")))
		warned := m.Warnings(t0, p0, 0.85*t0)&RealGas != 0
		if departs > 1.05e-3 && !warned || departs < 5e-4 && warned {
			t.Errorf("%g K %g Pa: departure %g, warned %v", t0, p0, departs, warned)
		}
	}
}

func TestRangeWarnings(t *testing.T) {
	m := mixture(t, 0, 0)
	for _, tc := range []struct {
		t0, p0, temp float64
		want         Warning
	}{{300, 101325, 250, 0}, {220, 101325, 190, BelowRange}, {1900, 3e5, 1600, AboveRange}} {
		got := m.Warnings(tc.t0, tc.p0, tc.temp)
		if got != tc.want || (len(got.Texts()) > 0) != (tc.want != 0) {
			t.Errorf("%+v: %b %q", tc, got, got.Texts())
		}
	}
	if w := perfect(t, 1.4).Warnings(100, 1e7, 50); w != 0 {
		t.Errorf("constant γ warns: %b", w)
	}
}

func TestSaturationPressure(t *testing.T) {
	// Over ice: ASHRAE Fundamentals, table of moist air, to its printed digits.
	for tc, want := range map[float64]float64{-20: 103.24, -5: 401.74} {
		if got, err := SaturationPressure(tc + 273.15); err != nil || !near(got, want, 3e-4) {
			t.Errorf("%g °C: %v Pa, want %v: %v", tc, got, want, err)
		}
	}
	for _, temp := range []float64{173, 474, math.NaN()} {
		if _, err := SaturationPressure(temp); !errors.Is(err, ErrSaturation) {
			t.Errorf("%g K: %v", temp, err)
		}
	}
}

// Worked from Hyland-Wexler, enhancement factor 1, molar masses of NASA, 101325 Pa.
func TestHumidityRatio(t *testing.T) {
	for _, tc := range []struct{ tC, rh, want, r float64 }{
		{15, 0.6, 0.0063452246, 288.15098},
		{30, 0.6, 0.0160414111, 289.80549},
		{25, 1, 0.0200817592, 290.48563},
	} {
		got, err := HumidityRatio(tc.rh, tc.tC+273.15, 101325)
		if err != nil || !near(got, tc.want, 1e-7) {
			t.Errorf("%g °C %g: %v, want %v: %v", tc.tC, tc.rh, got, tc.want, err)
		}
		if r := mixture(t, 0, got).R(); !near(r, tc.r, 2e-8) {
			t.Errorf("%g °C %g: R = %v, want %v", tc.tC, tc.rh, r, tc.r)
		}
	}
	saturated, err := HumidityRatio(1, 298.15, 101325)
	if dew, errDew := HumidityRatioFromDewPoint(298.15, 101325); err != nil || errDew != nil || dew != saturated {
		t.Errorf("dew point %v, saturated %v: %v %v", dew, saturated, err, errDew)
	}
	if fog, err := HumidityRatio(1.04, 298.15, 101325); err != nil || fog != saturated {
		t.Errorf("fog %v, saturated %v: %v", fog, saturated, err)
	}
	for _, tc := range []struct {
		rh, temp, p float64
		want        error
	}{
		{60, 298.15, 101325, ErrRelativeHumidity},
		{math.NaN(), 298.15, 101325, ErrRelativeHumidity},
		{0.6, 500, 101325, ErrSaturation},
		{1, 374, 101325, ErrBoiling},
		{0.5, 298.15, math.NaN(), ErrBoiling},
	} {
		if _, err := HumidityRatio(tc.rh, tc.temp, tc.p); !errors.Is(err, tc.want) {
			t.Errorf("%+v: %v", tc, err)
		}
	}
}

func TestNoAllocation(t *testing.T) {
	fuel, i := Kerosene(), 0
	var sum float64
	if n := testing.AllocsPerRun(200, func() {
		i++
		m, err := NewMixture(fuel, 1e-4*float64(i), 0.01)
		if err != nil {
			t.Error(err)
		}
		sum += m.Critical(700+float64(i)).FluxFunction + m.TFromS0(m.S0(600), 700) + m.TFromH(m.H(600), 700)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
	if !(sum > 0) {
		t.Error(sum)
	}
}

func BenchmarkMixtureAndCritical(b *testing.B) {
	fuel := Kerosene()
	ratios := make([]float64, 64)
	for i := range ratios {
		ratios[i] = 0.01 + 2e-4*float64(i)
	}
	var sink float64
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		i++
		m, err := NewMixture(fuel, ratios[i%64], 0.006)
		if err != nil {
			b.Fatal(err)
		}
		sink += m.Critical(600 + float64(i%512)).FluxFunction
	}
	if sink == 0 {
		b.Fatal(strconv.Itoa(i))
	}
}
