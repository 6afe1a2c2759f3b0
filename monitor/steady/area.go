package steady

import "math"

// Known is a value with its relative standard uncertainty.
type Known struct {
	Value float64
	U     float64 // relative
}

// Throat is what the effective throat area follows from.
type Throat struct {
	Flow        Known // kg/s at the throat, measured without the nozzle: bellmouth and fuel
	GasConstant float64
	Temperature Known // K, total
	Pressure    Known // Pa, total, absolute, station 8
	Parameter   Known // ideal flow parameter φ = W √(R T0)/(A p0); its U is what does not come from Pressure
	Discharge   Known
	// Exponent is ∂ln φ/∂ln p0: 0 when choked; (NPR/φ) dφ/dNPR below.
	Exponent float64
}

// EffectiveArea gives the throat area in m² that lets the independently measured
// flow pass, and its relative standard uncertainty:
//
//	A = W √(R T0)/(φ p0 Cd)
//	u² = u²(W) + ¼ u²(T0) + (1 + e)² u²(p0) + u²(φ) + u²(Cd),  e = ∂ln φ/∂ln p0
//
// [JCGM 100 eq. 12]. NaN unless every value is positive. Near NPR 1 the area is known
// badly: at NPR 1.01, 1 + e is about 49.
func EffectiveArea(t *Throat) (area, relative float64) {
	if !(t.Flow.Value > 0 && t.GasConstant > 0 && t.Temperature.Value > 0 &&
		t.Pressure.Value > 0 && t.Parameter.Value > 0 && t.Discharge.Value > 0) {
		return math.NaN(), math.NaN()
	}
	area = t.Flow.Value * math.Sqrt(t.GasConstant*t.Temperature.Value) /
		(t.Parameter.Value * t.Pressure.Value * t.Discharge.Value)
	p := (1 + t.Exponent) * t.Pressure.U
	square := t.Flow.U*t.Flow.U + t.Temperature.U*t.Temperature.U/4 + p*p +
		t.Parameter.U*t.Parameter.U + t.Discharge.U*t.Discharge.U
	return area, math.Sqrt(square)
}

// RunArea is the effective throat area of one run, as it is stored to be compared
// with other runs.
type RunArea struct {
	Run        string
	T          int64   // event time of the last steady value, ns
	Area       float64 // m², mean over the steady phases
	Random     float64 // relative standard uncertainty of what differs from run to run
	Systematic float64 // relative standard uncertainty of what all runs with these instruments share
	Steady     int64   // ns of steady time in it
}

// Drift gives the change of the effective area from one run to another as a
// fraction, with its 95 % uncertainty (k = 2). What both runs share cancels, so
// only the random parts count; after a change of instruments give all of it as random.
func (a *RunArea) Drift(later *RunArea) (change, u95 float64) {
	if !(a.Area > 0 && later.Area > 0) {
		return math.NaN(), math.NaN()
	}
	return later.Area/a.Area - 1, 2 * math.Hypot(a.Random, later.Random)
}
