package gas

import (
	"math"
	"slices"
	"testing"

	"throatwatch/monitor/internal/vectors"
)

// index gives the species of the data files that mixtures are made of.
func index() map[string]int {
	return map[string]int{"N2": n2, "O2": o2, "Ar": argon, "CO2": co2, "H2O": h2o}
}

// TestDifferences compares with every published value; with -v it prints the table of
// largest differences.
func TestDifferences(t *testing.T) {
	vectors.Run(t, []vectors.Source{
		vectors.From("NASA/TP-2002-211556", "coefficients, molar masses", "copied digit for digit", compareCoefficients),
		vectors.From("CODATA, NIST-JANAF", "heat of formation, s°, cp, h of the species", "JANAF of 1985 has another cp of H2O at 1000 K", compareSpecies),
		vectors.From("NASA pseudo-species Air", "cp, h, s° of dry air 300–1800 K", "a fit of its own for the mixture", compareAirFit),
		vectors.From("balance of atoms, NASA data", "mole fractions, M, R, cp, γ of products", "digits of the file", compareProducts),
		vectors.From("Walsh & Fletcher F3.23, F3.24", "cp of dry air and products", "an independent fit, 0.1 % at 300 K", compareWalshFletcher),
		vectors.From("Keenan & Kaye air table (A-17)", "h, s°, cp", "data of 1948; cp above 1000 K by Kyle 1984, stated error 1 %", compareAirTable),
		vectors.From("30-digit critical states", "γ, T*/T0, p*/p0, C*", "jump of the fits at 1000 K", compareCritical),
		vectors.From("30-digit states, air of 1976", "γ, T*/T0, p*/p0, C*", "composition: 25 ppm less argon", compareAirOf1976),
		vectors.From("closed forms, constant γ", "T*/T0, p*/p0, C*", "digits printed", comparePerfect),
		vectors.From("Lemmon 2000, air at 1 kPa", "C*, T*/T0, p*/p0", "an independent heat capacity of air", compareThinAir),
		vectors.From("Lemmon 2000, air to 10 MPa", "C* less its real-gas part", "real gas: third and higher virial coefficients", compareRealAir),
		vectors.From("Lemmon 2000, hot air to 1 MPa", "C*, T*/T0, p*/p0, 300–1300 K", "real gas: second virial coefficient", compareHotAir),
		vectors.From("Span 2000 and REFPROP fit, N2", "C* less its real-gas part", "real gas, fit 1.2e-4", compareNitrogen),
		vectors.From("Cantera 3.2.0, NASA TM-4513", "M, cp, γ, h, s°, T*/T0, p*/p0, C*", "older 7-coefficient fits", compareCantera),
		vectors.From("Hyland & Wexler 1983", "saturation pressure", "digits printed", compareSaturation),
		vectors.From("ASHRAE, IF97, CIPM-2007", "saturation pressure 0–100 °C", "other formulations", compareOtherSaturation),
		vectors.From("WMO-No. 8", "saturation pressure 0–50 °C", "a Magnus form for weather", compareMagnus),
	})
}

func compareCoefficients(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "nasa9.csv") {
		i, ours := index()[v["species"]]
		if !ours {
			continue
		}
		p := data[i].low
		if v.Num(t, "t_min_K") == join {
			p = data[i].high
		}
		for k, name := range []string{"a1", "a2", "a3", "a4", "a5", "a6", "a7", "b1", "b2"} {
			c.Within(t, v["species"]+" "+name, p[k], v.Num(t, name), 0)
		}
		c.Relative(t, v["species"]+" molar mass", data[i].molarMass*1000, v.Num(t, "molar_mass_g_mol"), 1e-15)
		if v.Num(t, "t_min_K") == coldest {
			// [the header of the file: R of the fits]
			c.Within(t, v["species"]+" Hf", 8.314510*data[i].low.h(298.15, math.Log(298.15)), v.Num(t, "hf298_J_mol"), 0.01)
		}
	}
}

// compareSpecies takes R = 8.314510, which the fits were made with.
func compareSpecies(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	const r = 8.314510
	for _, v := range vectors.Read(t, "nasa9_check.csv") {
		i, ours := index()[v["species"]]
		if !ours {
			continue
		}
		d := data[i]
		lnRoom, lnJoin := math.Log(298.15), math.Log(join)
		jump := func(high, low float64) float64 { return high - low }
		for _, x := range []struct {
			column    string
			got       float64
			tolerance float64
		}{
			{"cp_R_298.15", d.low.cp(298.15), 1e-8}, // printed
			{"hf298_tab", r * d.low.h(298.15, lnRoom), 0.01},
			{"s298_J_molK", r * d.low.s(298.15, lnRoom), 1e-4},
			{"s298_std", r * d.low.s(298.15, lnRoom), 0.01}, // CODATA's own u is 0.002 to 0.04
			{"cp298_J_molK", r * d.low.cp(298.15), 1e-4},
			{"cp298_std", r * d.low.cp(298.15), 1e-3},
			{"cp1000_J_molK", r * d.low.cp(join), 1e-4},
			{"cp1000_std", r * d.low.cp(join), 0.03}, // JANAF 1985 differs for H2O by 0.023
			{"dh1000_298_kJ_mol", r * (d.low.h(join, lnJoin) - d.low.h(298.15, lnRoom)) / 1000, 1e-4},
			{"dh1000_std", r * (d.low.h(join, lnJoin) - d.low.h(298.15, lnRoom)) / 1000, 5e-3},
			{"s1000_J_molK", r * d.low.s(join, lnJoin), 1e-4},
			{"s1000_std", r * d.low.s(join, lnJoin), 0.01},
		} {
			c.Within(t, v["species"]+" "+x.column, x.got, v.Num(t, x.column), x.tolerance)
		}
		// The jumps that join3 takes away, by rounding of the coefficients.
		for column, got := range map[string]float64{
			"jump_cp_R": jump(d.high.cp(join), d.low.cp(join)),
			"jump_H_RT": jump(d.high.h(join, lnJoin), d.low.h(join, lnJoin)) / join,
			"jump_S_R":  jump(d.high.s(join, lnJoin), d.low.s(join, lnJoin)),
		} {
			if want := v.Num(t, column); math.Abs(got-want) > 1e-10 {
				t.Errorf("%s: %s = %v, want %v", v["species"], column, got, want)
			}
		}
	}
}

func compareAirFit(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	var fit [2]poly
	for _, v := range vectors.Read(t, "nasa9.csv") {
		if v["species"] != "Air" {
			continue
		}
		p := &fit[0]
		if v.Num(t, "t_min_K") == join {
			p = &fit[1]
		}
		for k, name := range []string{"a1", "a2", "a3", "a4", "a5", "a6", "a7", "b1", "b2"} {
			p[k] = v.Num(t, name)
		}
	}
	m := mixture(t, 0, 0)
	for temp := 300.0; temp <= 1800; temp += 50 {
		p := &fit[0]
		if temp > join {
			p = &fit[1]
		}
		c.Relative(t, "cp", m.Cp(temp)/m.R(), p.cp(temp), 5e-9)
		if temp > 300 {
			ln, ln300 := math.Log(temp), math.Log(300)
			c.Relative(t, "h − h(300)", (m.H(temp)-m.H(300))/m.R(), p.h(temp, ln)-fit[0].h(300, ln300), 2e-8)
			c.Relative(t, "s° − s°(300)", (m.S0(temp)-m.S0(300))/m.R(), p.s(temp, ln)-fit[0].s(300, ln300), 2e-8)
		}
	}
}

func compareProducts(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "products.csv") {
		f, war, temp := v.Num(t, "f"), v.Num(t, "war"), v.Num(t, "T_K")
		x := composition(Kerosene(), f, war)
		m := mixture(t, f, war)
		for i, name := range []string{"x_N2", "x_O2", "x_Ar", "x_CO2", "x_H2O"} {
			c.Within(t, name, x[i], v.Num(t, name), 1e-9) // printed
		}
		c.Relative(t, "M", mass(&x)*1000, v.Num(t, "M_g_mol"), 1e-8)
		c.Relative(t, "R", m.R(), v.Num(t, "R_J_kgK"), 2e-8)
		c.Relative(t, "cp", m.Cp(temp)/1000, v.Num(t, "cp"), 5e-8)
		c.Relative(t, "γ", m.Gamma(temp), v.Num(t, "gamma"), 4e-9)
		// The mixture is the species weighed by these fractions.
		var cp float64
		for i := range x {
			p := &data[i].low
			if temp > join {
				p = &data[i].high
			}
			cp += x[i] * p.cp(temp)
		}
		if !near(m.Cp(temp), m.R()*cp, 1e-14) {
			t.Errorf("f %g war %g %g K: cp = %v, of the species %v", f, war, temp, m.Cp(temp), m.R()*cp)
		}
	}
}

func compareWalshFletcher(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "products.csv") {
		if v["wf_cp"] == "" { // dry cases only
			continue
		}
		tolerance := 4e-4
		if v["T_K"] == "300" {
			tolerance = 1e-3
		}
		c.Relative(t, "f "+v["f"]+" "+v["T_K"]+" K", mixture(t, v.Num(t, "f"), v.Num(t, "war")).Cp(v.Num(t, "T_K"))/1000, v.Num(t, "wf_cp"), tolerance)
	}
}

// compareAirTable compares differences from 300 K, because reference states differ.
func compareAirTable(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	m := mixture(t, 0, 0)
	rows := vectors.Read(t, "gas_tables.csv")
	var at300 vectors.Row
	for _, v := range rows {
		if v["T_K"] == "300" {
			at300 = v
		}
	}
	for _, v := range rows {
		temp := v.Num(t, "T_K")
		if temp != 300 {
			want := v.Num(t, "tab_h") - at300.Num(t, "tab_h")
			c.Within(t, "h at "+v["T_K"]+" K", (m.H(temp)-m.H(300))/1000, want, 0.02+1e-3*math.Abs(want))
			want = v.Num(t, "tab_u") - at300.Num(t, "tab_u")
			c.Within(t, "u at "+v["T_K"]+" K", (m.H(temp)-m.H(300)-m.R()*(temp-300))/1000, want, 0.02+1e-3*math.Abs(want))
			want = v.Num(t, "tab_s0") - at300.Num(t, "tab_s0")
			c.Within(t, "s° at "+v["T_K"]+" K", (m.S0(temp)-m.S0(300))/1000, want, 2e-4+1e-3*math.Abs(want))
			c.Relative(t, "pr at "+v["T_K"]+" K", math.Exp((m.S0(temp)-m.S0(300))/m.R()), v.Num(t, "tab_pr")/at300.Num(t, "tab_pr"), 1.1e-3)
		}
		if v["tab_cp"] != "" {
			tolerance := 1e-3 // NBS Circular 564
			if temp > 1000 {
				tolerance = 1e-2 // Kyle 1984, stated error
			}
			c.Relative(t, "cp at "+v["T_K"]+" K", m.Cp(temp)/1000, v.Num(t, "tab_cp"), tolerance)
			c.Within(t, "γ at "+v["T_K"]+" K", m.Gamma(temp), v.Num(t, "tab_gamma"), 2e-3)
		}
	}
}

func compareCritical(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	// The file is exact to 1e-10 on data with a jump at 1000 K, which moves the rows at
	// 1100 K by 5e-9.
	compareStates(t, c, false, 1e-8)
}

func compareAirOf1976(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	compareStates(t, c, true, 5e-6)
}

func compareStates(t *testing.T, c *vectors.Comparison, of1976 bool, tolerance float64) {
	t.Helper()
	for _, v := range vectors.Read(t, "thermally_perfect.csv") {
		if (v["gas"] == "dry_air_ussa76") != of1976 {
			continue
		}
		t0, name := v.Num(t, "T0_K"), "f "+v["f"]+" "+v["T0_K"]+" K "
		m := mixture(t, v.Num(t, "f"), 0)
		s := m.Critical(t0)
		c.Relative(t, name+"γ(T0)", m.Gamma(t0), v.Num(t, "gamma_T0"), tolerance)
		c.Relative(t, name+"γ*", m.Gamma(s.Temperature), v.Num(t, "gamma_star"), tolerance)
		c.Relative(t, name+"T*/T0", s.Temperature/t0, v.Num(t, "Tstar_T0"), tolerance)
		c.Relative(t, name+"p*/p0", s.PressureRatio, v.Num(t, "pstar_p0"), tolerance)
		c.Relative(t, name+"critical NPR", 1/s.PressureRatio, v.Num(t, "crit_npr"), tolerance)
		c.Relative(t, name+"C*", s.FluxFunction, v.Num(t, "c_star"), tolerance)
	}
}

func comparePerfect(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "critical_ratios.csv") {
		s := perfect(t, v.Num(t, "gamma")).Critical(288.15)
		c.Relative(t, "T*/T0", s.Temperature/288.15, v.Num(t, "Tstar_T0"), 1e-9)
		c.Relative(t, "p*/p0", s.PressureRatio, v.Num(t, "pstar_p0"), 1e-9)
		c.Relative(t, "critical NPR", 1/s.PressureRatio, v.Num(t, "npr_crit"), 1e-9)
		c.Relative(t, "ρ*/ρ0", s.PressureRatio*288.15/s.Temperature, v.Num(t, "rhostar_rho0"), 1e-9)
		c.Relative(t, "C*", s.FluxFunction, v.Num(t, "c_star_ideal"), 1e-9)
	}
}

// compareThinAir: at 1 kPa air is perfect within 1e-5, and only heat capacities differ.
func compareThinAir(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	m := mixture(t, 0, 0)
	for _, v := range vectors.Read(t, "iso9300.csv") {
		if v["gas"] != "dry_air" || v.Num(t, "p0_Pa") > 1000 {
			continue
		}
		s := m.Critical(v.Num(t, "T0_K"))
		c.Relative(t, "C* "+v["T0_K"]+" K", s.FluxFunction, v.Num(t, "c_star"), 2.5e-5)
		c.Relative(t, "T*/T0 "+v["T0_K"]+" K", s.Temperature/v.Num(t, "T0_K"), v.Num(t, "Tstar_T0"), 3e-5)
		c.Relative(t, "p*/p0 "+v["T0_K"]+" K", s.PressureRatio, v.Num(t, "pstar_p0"), 3e-5)
	}
}

// virial is a second virial coefficient over R, B/R in K/Pa, as a cubic in 1/T.
type virial [4]float64

// at gives B/R and T d(B/R)/dT.
func (b *virial) at(t float64) (v, slope float64) {
	for k, a := range b {
		x := a * math.Pow(t, -float64(k))
		v += x
		slope -= float64(k) * x
	}
	return v, slope
}

// virialOf takes B from the compressibility at rest, Z0 = 1 + B p0/(R T0), at 0.1 MPa and
// four temperatures of the file.
func virialOf(t *testing.T, gas string, temperatures ...string) (b virial) {
	t.Helper()
	var system [4][5]float64
	at := 0
	for _, v := range vectors.Read(t, "iso9300.csv") {
		if v["gas"] != gas || v["p0_Pa"] != "100000" || !slices.Contains(temperatures, v["T0_K"]) {
			continue
		}
		t0 := v.Num(t, "T0_K")
		for k := range 4 {
			system[at][k] = math.Pow(t0, -float64(k))
		}
		system[at][4] = (v.Num(t, "Z0") - 1) * t0 / v.Num(t, "p0_Pa")
		at++
	}
	if at != 4 {
		t.Fatalf("%d temperatures of %s", at, gas)
	}
	for i := range 4 { // Gauss and Jordan
		for r := range 4 {
			if r != i {
				q := system[r][i] / system[i][i]
				for k := i; k < 5; k++ {
					system[r][k] -= q * system[i][k]
				}
			}
		}
	}
	for i := range b {
		b[i] = system[i][4] / system[i][i]
	}
	return b
}

// realPart gives what B does to C*, relative, to first order in pressure. The flux
// is greatest at the throat, so that only its change at the same p/p0 counts. With s = s° − R
// ln p − p B', h = h° + p (B − T B'), the same entropy gives the change of T, energy that of V:
//
//	cp δT/T = p* B'* − p0 B'0
//	V δV = p0 (B0 − T0 B'0) − cp δT − p* (B* − T* B'*)
//	δ ln C* = δV/V − δT/T − B* p*/(R T*)
func realPart(m *Mixture, b *virial, t0, p0 float64) float64 {
	s := m.Critical(t0)
	t, p := s.Temperature, s.PressureRatio*p0
	b0, slope0 := b.at(t0)
	b1, slope1 := b.at(t)
	cp := m.Cp(t) / m.R()
	dT := (p*slope1/t - p0*slope0/t0) / cp // over T; all over R
	dV := (p0*(b0-slope0) - cp*t*dT - p*(b1-slope1)) * m.R() / (s.Velocity * s.Velocity)
	return dV - dT - b1*p/t
}

// compareRealAir shows where the difference between a real and a perfect gas comes from:
// the second virial coefficient explains it, but for a part that goes with p², 0.4 % at
// 10 MPa.
func compareRealAir(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	m, b := mixture(t, 0, 0), virialOf(t, "dry_air", "250", "293.15", "350", "400")
	for _, v := range vectors.Read(t, "iso9300.csv") {
		if v["gas"] != "dry_air" || v.Num(t, "p0_Pa") == 1000 {
			continue
		}
		t0, p0 := v.Num(t, "T0_K"), v.Num(t, "p0_Pa")
		part := realPart(m, &b, t0, p0)
		name := v["T0_K"] + " K " + v["p0_Pa"] + " Pa"
		c.Within(t, name, m.Critical(t0).FluxFunction*(1+part), v.Num(t, "c_star"), v.Num(t, "c_star")*(2.5e-5+0.01*math.Abs(part)+4e-17*p0*p0))
		// The bound that is stated: 7.1e-4 per 0.1 MPa at 250 K, falling with temperature.
		if d := v.Num(t, "c_star")/m.Critical(t0).FluxFunction - 1; d > 7.5e-9*p0*math.Pow(250/t0, 3.5)+3e-5 {
			t.Errorf("%s: real gas %g above perfect", name, d)
		}
	}
}

func compareNitrogen(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	m := &Mixture{r: Universal / data[n2].molarMass, ranges: joined[n2]}
	b := virialOf(t, "nitrogen", "250", "273.15", "293.15", "320")
	for _, v := range vectors.Read(t, "iso9300.csv") {
		if v["gas"] != "nitrogen" {
			continue
		}
		t0, p0 := v.Num(t, "T0_K"), v.Num(t, "p0_Pa")
		part := realPart(m, &b, t0, p0)
		got, name := m.Critical(t0).FluxFunction*(1+part), v["T0_K"]+" K "+v["p0_Pa"]+" Pa"
		c.Relative(t, name, got, v.Num(t, "c_star"), 3e-5+0.01*math.Abs(part)+4e-17*p0*p0)
		c.Relative(t, name+" REFPROP fit", got, v.Num(t, "c_star_glen_n2"), 1.5e-4+0.01*math.Abs(part)+4e-17*p0*p0)
	}
}

func compareHotAir(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	m := mixture(t, 0, 0)
	for _, v := range vectors.Read(t, "cstar_air_hot.csv") {
		t0, p0 := v.Num(t, "T0_K"), v.Num(t, "p0_Pa")
		s, name := m.Critical(t0), v["T0_K"]+" K "+v["p0_Pa"]+" Pa "
		// A departure in proportion to pressure, 4e-3 per MPa at 300 K and 1.6e-3 above 500 K.
		tolerance := 4e-5 + 1.8e-9*p0
		if t0 < 500 {
			tolerance = 4e-5 + 4e-9*p0
		}
		c.Relative(t, name+"C*", s.FluxFunction, v.Num(t, "c_star_eos"), tolerance)
		c.Relative(t, name+"T*/T0", s.Temperature/t0, v.Num(t, "Tstar_T0_eos"), tolerance)
		c.Relative(t, name+"p*/p0", s.PressureRatio, v.Num(t, "pstar_p0_eos"), tolerance)
		c.Relative(t, name+"C* of the file", s.FluxFunction, v.Num(t, "c_star_nasa9"), 1e-8)
	}
}

func compareCantera(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "cantera.csv") {
		t0, name := v.Num(t, "T0_K"), "f "+v["f"]+" war "+v["war"]+" "+v["T0_K"]+" K "
		m := mixture(t, v.Num(t, "f"), v.Num(t, "war"))
		s := m.Critical(t0)
		c.Relative(t, name+"M", Universal/m.R()*1000, v.Num(t, "M_g_mol"), 2e-5) // atomic weights of 2005 there
		c.Relative(t, name+"cp", m.Cp(t0), v.Num(t, "cp_J_kgK"), 3e-3)           // fits of 1993: up to 0.3 % at 1300 K
		c.Relative(t, name+"γ", m.Gamma(t0), v.Num(t, "gamma"), 1e-3)
		if t0 > 300 {
			c.Relative(t, name+"h", m.H(t0)-m.H(300), v.Num(t, "h_minus_h300_J_kg"), 1e-3)
			c.Relative(t, name+"s°", m.S0(t0)-m.S0(300), v.Num(t, "s_minus_s300_J_kgK"), 1e-3)
		}
		c.Relative(t, name+"T*/T0", s.Temperature/t0, v.Num(t, "Tstar_T0"), 6e-4)
		c.Relative(t, name+"p*/p0", s.PressureRatio, v.Num(t, "pstar_p0"), 5e-4)
		c.Relative(t, name+"C*", s.FluxFunction, v.Num(t, "c_star"), 4e-4)
	}
}

func saturation(t *testing.T, v vectors.Row) float64 {
	t.Helper()
	p, err := SaturationPressure(v.Num(t, "t_C") + 273.15)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func compareSaturation(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "psat.csv") {
		c.Relative(t, v["t_C"]+" °C", saturation(t, v), v.Num(t, "hyland_wexler"), 1e-7)
	}
}

func compareOtherSaturation(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "psat.csv") {
		got, name := saturation(t, v), v["t_C"]+" °C "
		if v["ashrae"] != "" {
			c.Relative(t, name+"ASHRAE", got, v.Num(t, "ashrae"), 3e-4)
		}
		c.Relative(t, name+"IF97", got, v.Num(t, "if97"), 3e-4)
		if v.Num(t, "t_C") <= 100 { // CIPM is for metrology rooms
			c.Relative(t, name+"CIPM", got, v.Num(t, "cipm2007"), 4e-4)
		}
	}
}

func compareMagnus(t *testing.T, c *vectors.Comparison) {
	t.Helper()
	for _, v := range vectors.Read(t, "psat.csv") {
		if v.Num(t, "t_C") <= 50 {
			c.Relative(t, v["t_C"]+" °C", saturation(t, v), v.Num(t, "wmo"), 3.5e-3)
		}
	}
}
