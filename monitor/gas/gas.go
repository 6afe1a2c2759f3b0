// Package gas gives the thermodynamic properties of the gas in an exhaust
// nozzle: dry air with water vapour and the products of complete lean
// combustion of a fuel CnHm, thermally perfect (cp depends on temperature,
// p = ρRT holds) and of frozen composition.
//
// Property data are the 9-coefficient polynomials of McBride, Zehe and Gordon,
// NASA/TP-2002-211556 (2002), for N2, O2, Ar, CO2 and H2O; dry air has Gordon's
// composition of 1982. Valid from 200 K to 1800 K: above, dissociation
// begins; at high pressure and low temperature air departs from a perfect gas.
// Warnings names both. A gas of constant γ (Perfect) goes through the same code.
//
// Temperatures are K, pressures Pa absolute, enthalpy J/kg, entropy J/(kg K).
// Nothing here allocates but errors.
package gas

import (
	"errors"
	"fmt"
	"math"
)

// Fuel is a hydrocarbon by the atoms of its molecule; only their ratio and the
// molar mass matter, so CH1.917 and C12H23 burn alike. The zero value is no fuel.
type Fuel struct {
	Carbon   float64 // atoms of carbon
	Hydrogen float64 // atoms of hydrogen
}

// Kerosene is C12H23, the usual stand-in for Jet-A (NASA thermo.inp).
func Kerosene() Fuel { return Fuel{Carbon: 12, Hydrogen: 23} }

// MolarMass gives kg/mol from C 12.0107 and H 1.00794 g/mol (IUPAC 1999).
func (f Fuel) MolarMass() float64 { return 12.0107e-3*f.Carbon + 1.00794e-3*f.Hydrogen }

// oxygen is the number of O2 molecules that burn one molecule of fuel.
func (f Fuel) oxygen() float64 { return f.Carbon + f.Hydrogen/4 }

func (f Fuel) valid() bool {
	return f.Carbon >= 0 && f.Hydrogen >= 0 && f.Carbon+f.Hydrogen > 0 && f.MolarMass() < math.Inf(1)
}

// airMass is the molar mass of dry air, kg/mol: 0.0289651159.
var airMass = mass(&dryAir)

func mass(x *[numSpecies]float64) float64 {
	var m float64
	for i := range x {
		m += x[i] * data[i].molarMass
	}
	return m
}

// StoichiometricRatio gives the fuel-air ratio, kg fuel per kg dry air, that
// uses up the oxygen of the air; 0.06816873 for C12H23. NaN if fuel is none.
func StoichiometricRatio(fuel Fuel) float64 {
	if !fuel.valid() {
		return math.NaN()
	}
	return dryAir[o2] / fuel.oxygen() * fuel.MolarMass() / airMass
}

// Reasons for which NewMixture and Perfect give no gas.
var (
	ErrFuel     = errors.New("fuel is no hydrocarbon")
	ErrFuelAir  = errors.New("fuel-air ratio outside 0 to stoichiometric")
	ErrHumidity = errors.New("humidity ratio outside 0 to 0.5")
	ErrPerfect  = errors.New("perfect gas needs 1 < γ ≤ 2 and R > 0")
)

// wettest bounds the humidity ratio: saturated air holds 0.5 at 79 °C, and a
// value in g/kg taken for kg/kg lies above.
const wettest = 0.5

// Mixture is a gas of fixed composition. It is plain data, about 300 bytes;
// its methods take a pointer only to spare the copy. The zero value is no gas:
// its methods give NaN or 0.
type Mixture struct {
	r       float64 // J/(kg K)
	ranges  [numRanges]poly
	perfect bool // constant γ: no temperature range
}

// NewMixture gives the gas of dry air with f kg of fuel, completely burnt, and
// war kg of water vapour, both per kg of dry air. Per mole of dry air, with
// φ = f Ma/Mf moles of fuel CnHm:
//
//	O2 = O2,air − φ (n + m/4)    CO2 = CO2,air + n φ    H2O = war Ma/Mw + φ m/2
//
// The combustion must be lean: f from 0 to StoichiometricRatio(fuel), else
// ErrFuelAir; war from 0 to 0.5, else ErrHumidity. A ratio per kg of humid air
// must be multiplied by 1 + war first.
func NewMixture(fuel Fuel, f, war float64) (m Mixture, err error) {
	if !(f >= 0 && war >= 0 && war <= wettest && fuel.valid()) || f*fuel.oxygen()*airMass > dryAir[o2]*fuel.MolarMass() {
		return m, refuse(fuel, f, war)
	}
	phi := f * airMass / fuel.MolarMass()
	water := war * airMass / data[h2o].molarMass
	moles := 1 + water + phi*fuel.Hydrogen/4 // per mole of dry air
	m.r = Universal * moles / ((1 + f + war) * airMass)
	m.mix(1/moles, -phi*fuel.oxygen()/moles, phi*fuel.Carbon/moles, (water+phi*fuel.Hydrogen/2)/moles)
	return m, nil
}

// refuse tells why NewMixture gives no gas.
func refuse(fuel Fuel, f, war float64) error {
	switch {
	case !fuel.valid():
		return fmt.Errorf("gas: C%gH%g: %w", fuel.Carbon, fuel.Hydrogen, ErrFuel)
	case !(war >= 0 && war <= wettest):
		return fmt.Errorf("gas: humidity ratio %g: %w: give kg water per kg dry air", war, ErrHumidity)
	}
	return fmt.Errorf("gas: fuel-air ratio %g: %w (%.5f): only complete lean combustion is modelled", f, ErrFuelAir, StoichiometricRatio(fuel))
}

// mix weighs coefficients once, so that a property costs one polynomial however
// many species there are: those of dry air, and of the moles that combustion and
// humidity change, per mole of mixture.
func (m *Mixture) mix(air, oxygen, carbonDioxide, water float64) {
	a, b, c, d := &joinedAir, &joined[o2], &joined[co2], &joined[h2o]
	for _, k := range [...]int{2, 7, 8} { // the others are 0
		m.ranges[cold][k] = air*a[cold][k] + oxygen*b[cold][k] + carbonDioxide*c[cold][k] + water*d[cold][k]
	}
	for k := range m.ranges[low] {
		m.ranges[low][k] = air*a[low][k] + oxygen*b[low][k] + carbonDioxide*c[low][k] + water*d[low][k]
		m.ranges[high][k] = air*a[high][k] + oxygen*b[high][k] + carbonDioxide*c[high][k] + water*d[high][k]
	}
}

// Perfect gives a calorically perfect gas: constant γ = cp/cv and gas constant
// r, J/(kg K). 1 < γ ≤ 2 and r > 0, else ErrPerfect. It is the limit in which
// the closed forms of NACA Report 1135 hold.
func Perfect(gamma, r float64) (Mixture, error) {
	if !(gamma > 1 && gamma <= 2 && r > 0 && r < math.Inf(1)) {
		return Mixture{}, fmt.Errorf("gas: γ %g, R %g J/(kg K): %w", gamma, r, ErrPerfect)
	}
	p := poly{2: gamma / (gamma - 1)}
	return Mixture{r: r, ranges: [numRanges]poly{p, p, p}, perfect: true}, nil
}

// at gives the coefficients for t.
func (m *Mixture) at(t float64) *poly {
	switch {
	case t > join:
		return &m.ranges[high]
	case t >= coldest:
		return &m.ranges[low]
	}
	return &m.ranges[cold]
}

// R gives the gas constant, J/(kg K).
func (m *Mixture) R() float64 { return m.r }

// Valid reports whether m is a gas, and not the zero value.
func (m *Mixture) Valid() bool { return m.r > 0 }

// Cp gives the heat capacity at constant pressure, J/(kg K), at t K.
func (m *Mixture) Cp(t float64) float64 { return m.r * m.at(t).cp(t) }

// Gamma gives γ = cp/(cp − R) at t K.
func (m *Mixture) Gamma(t float64) float64 {
	cp := m.at(t).cp(t)
	return cp / (cp - 1)
}

// H gives the enthalpy, J/kg, at t K, with the heats of formation: only
// differences between two temperatures of the same mixture mean something.
func (m *Mixture) H(t float64) float64 { return m.r * m.at(t).h(t, math.Log(t)) }

// S0 gives s°, J/(kg K): the entropy at t K and 1 bar, without the entropy of
// mixing, which a fixed composition does not change. An isentropic change has
// s°(T1) − s°(T2) = R ln(p1/p2).
func (m *Mixture) S0(t float64) float64 { return m.r * m.at(t).s(t, math.Log(t)) }

// SpeedOfSound gives a = √(γ R T), m/s, at t K, frozen composition.
func (m *Mixture) SpeedOfSound(t float64) float64 { return math.Sqrt(m.Gamma(t) * m.r * t) }

// Properties are those of one temperature, as the methods of Mixture give them one
// by one at a higher price.
type Properties struct {
	Cp    float64 // J/(kg K)
	H     float64 // J/kg
	S0    float64 // J/(kg K)
	Gamma float64
}

// At gives the properties at t K.
func (m *Mixture) At(t float64) Properties {
	p, lnT := m.at(t), math.Log(t)
	cp := p.cp(t)
	return Properties{Cp: m.r * cp, H: m.r * p.h(t, lnT), S0: m.r * p.s(t, lnT), Gamma: cp / (cp - 1)}
}

// solved bounds the last step of the solvers for T, relative to T: the step after
// it would be its square, below rounding.
const solved = 1e-9

// steps bounds the solvers' iterations. Newton needs 3 to 5 here; it cannot run
// away, because h and s° rise with T and cp changes by less than half.
const steps = 40

// TFromH gives the temperature, K, at which the enthalpy is h, J/kg; guess, K,
// is where to begin. NaN if h is below the enthalpy of 0 K.
func (m *Mixture) TFromH(h, guess float64) float64 {
	want := h / m.r
	t := guess
	if want <= m.ranges[cold][7] {
		return math.NaN()
	}
	for range steps {
		p := m.at(t)
		next := t - (p.h(t, math.Log(t))-want)/p.cp(t)
		if next <= 0 {
			next = t / 4
		}
		step := next - t
		t = next
		if math.Abs(step) <= solved*t {
			break
		}
	}
	return t
}

// TFromS0 gives the temperature, K, at which s° is s, J/(kg K); guess, K, is
// where to begin. It exists for every s.
func (m *Mixture) TFromS0(s, guess float64) float64 {
	want := s / m.r
	x := math.Log(guess)
	t := guess
	for range steps {
		// s° is nearly straight over ln T: its slope is cp, its bend T dcp/dT. A step
		// that takes the bend along leaves an error of its third power.
		p := m.at(t)
		cp := p.cp(t)
		step := (want - p.s(t, x)) / cp
		step -= step * step * t * p.cpSlope(t) / (2 * cp)
		x += step
		if math.Abs(step) <= 2e-2 {
			t *= 1 + step*(1+step/2*(1+step*(1.0/3)*(1+step/4*(1+step*(1.0/5)*(1+step*(1.0/6)))))) // e^step to 1e-15
		} else {
			t = math.Exp(x)
		}
		if math.Abs(step) <= 1e-5 {
			break
		}
	}
	return t
}

// CriticalState is the sonic state that a gas at rest reaches by isentropic
// expansion.
type CriticalState struct {
	Temperature   float64 // T*, K
	PressureRatio float64 // p*/p0; its inverse is the critical nozzle pressure ratio
	FluxFunction  float64 // C* = W √(R T0)/(A p0) of the choked ideal flow
	Velocity      float64 // a* = √(γ(T*) R T*), m/s
}

// Critical gives the sonic state for the total temperature t0, K:
//
//	h(t0) − h(T*) = γ(T*) R T*/2,   s°(t0) − s°(T*) = R ln(p0/p*),
//	C* = (p*/p0) √(γ(T*) T0/T*)
//
// For constant γ: T*/T0 = 2/(γ+1), p*/p0 = (2/(γ+1))^(γ/(γ−1)). Relative error
// below 1e-10.
func (m *Mixture) Critical(t0 float64) CriticalState {
	lnT0 := math.Log(t0)
	p := m.at(t0)
	h0, s0, cp := p.h(t0, lnT0), p.s(t0, lnT0), p.cp(t0)
	// With γ = cp/(cp − 1), cp over R, f(T) = h0 − h − γT/2 falls with T from
	// above 0 at T0/2 (γ < 3) to below 0 at T0; its derivative takes γ's own slope along.
	// The bracket decides when cp's jump at 1000 K, of 1e-8, leaves no exact root.
	t, lo, hi := 2*t0*(cp-1)/(2*cp-1), t0/2, t0
	lnT := math.Log(t)
	for range steps {
		p = m.at(t)
		cp = p.cp(t)
		cpSlope := p.cpSlope(t)
		gamma, gammaSlope := cp/(cp-1), -cpSlope/((cp-1)*(cp-1))
		f := h0 - p.h(t, lnT) - gamma*t/2
		if f > 0 {
			lo = t
		} else {
			hi = t
		}
		step := f / (cp + gamma/2 + t*gammaSlope/2)
		if x := step / t; math.Abs(x) <= 1e-5 {
			// s° and γ follow so small a step by their slopes; s° by its bend too.
			// What Newton leaves of T* is the square of the step.
			ratio := math.Exp(p.s(t, lnT) - s0 + x*(cp-x*(cp-t*cpSlope)/2))
			gamma += gammaSlope * step
			t += step
			return CriticalState{
				Temperature: t, PressureRatio: ratio,
				FluxFunction: ratio * math.Sqrt(gamma*t0/t), Velocity: math.Sqrt(gamma * m.r * t),
			}
		}
		next := t + step
		if !(next > lo && next < hi) {
			next = (lo + hi) / 2
		}
		lnT += math.Log1p((next - t) / t)
		t = next
	}
	return CriticalState{math.NaN(), math.NaN(), math.NaN(), math.NaN()}
}
