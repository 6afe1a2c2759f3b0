// Package nozzle computes the state and the flow of an exhaust nozzle from total
// pressure, total temperature and back pressure: is it choked, by what margin,
// what does it pass, what does it push.
//
// The flow is one-dimensional, steady, adiabatic and isentropic but for
// shocks; the gas is thermally perfect with frozen composition (package gas).
// What a real nozzle does otherwise stands in the tables of discharge and thrust
// coefficient. Of a convergent-divergent nozzle, boundary-layer loss of the
// diverging part and separation are not modelled, and a warning says so.
//
// Pressures are Pa absolute. Everything is a pure function of its arguments: the
// temperature of the metal, which lags the gas, and the hysteresis of the choke
// state are the caller's. Evaluate allocates nothing.
package nozzle

import (
	"errors"
	"math"

	"throatwatch/monitor/gas"
	"throatwatch/monitor/unit"
)

// Reasons for which Evaluate gives no result.
var (
	ErrInput = errors.New("nozzle: pressures must be above 0 and finite, total temperature from 50 K to 6000 K, and the gas a valid one")
	ErrArea  = errors.New("nozzle: throat area above the exit area of a convergent-divergent nozzle")
)

// Inputs is what is measured.
type Inputs struct {
	TotalPressure    unit.Absolute // p7, or p8 of a nozzle without DuctLoss
	BackPressure     unit.Absolute // pb: static, of the surroundings in the exit plane
	TotalTemperature float64       // T0, K: corrected, mass-averaged, not the indicated EGT
	MetalTemperature float64       // K, of the nozzle's wall; needed for a cold area that expands
	ThroatArea       float64       // A8, m², from a position channel, on the basis of the config; 0 = configured
}

// Regime says how the flow leaves.
type Regime uint8

// The regimes. A convergent nozzle knows the first three.
const (
	NoFlow        Regime = iota // npr − 1 below the resolution floor
	Subsonic                    // exit pressure is back pressure
	Choked                      // sonic exit
	ShockInside                 // normal shock in the diverging part, subsonic exit
	OverExpanded                // supersonic exit below back pressure, shocks outside
	Design                      // supersonic exit within 0.1 % of back pressure
	UnderExpanded               // supersonic exit above back pressure
	numRegimes
)

var regimeNames = [numRegimes]string{"no_flow", "subsonic", "choked", "shock_inside", "over_expanded", "design", "under_expanded"}

// String names the regime.
func (r Regime) String() string {
	if r < numRegimes {
		return regimeNames[r]
	}
	return "invalid"
}

// Warning is a set of doubts about a result, one bit each; those about the gas
// are in Result.GasWarnings.
type Warning uint8

// The doubts.
const (
	CoefficientRange Warning = 1 << iota // npr outside the discharge or thrust table: end value used
	PressureOrder                        // total pressure below back pressure beyond the resolution floor
	DiffuserLoss                         // convergent-divergent: loss and separation not modelled
	Separation                           // over-expanded: separation is likely
)

// Texts gives each doubt as a sentence for the operator.
func (w Warning) Texts() []string {
	var texts []string
	for bit, text := range []string{
		"nozzle pressure ratio outside the coefficient table: end value used",
		"total pressure is below back pressure: reversed flow, a wrong port or a zero error",
		"convergent-divergent nozzle: real diffuser loss and separation are not modelled",
		"over-expanded: a real flow may separate from the wall, thrust is then higher than computed",
	} {
		if w&(1<<bit) != 0 {
			texts = append(texts, text)
		}
	}
	return texts
}

// State is a static state of the flow.
type State struct {
	Mach        float64
	Pressure    float64 // Pa
	Temperature float64 // K
	Velocity    float64 // m/s
}

// Result is everything computed. Flow and thrust are NaN where the throat area is
// not known.
type Result struct {
	Regime Regime
	Choked bool // npr ≥ choke npr, without hysteresis; false if there is no flow
	Throat State
	Exit   State // Throat for a convergent nozzle
	// Expanded is the state after isentropic expansion to back pressure, supersonic
	// beyond the critical npr: where a subsonic flow is, and where full expansion leads.
	Expanded State
	NPR      float64 // p8/pb
	NPRRake  float64 // p7/pb

	CriticalNPR         float64 // one-dimensional, at which the throat becomes sonic
	ChokeNPR            float64 // CriticalNPR, or Config.ChokeNPR
	ChokeCalibrated     bool    // ChokeNPR is Config.ChokeNPR
	MarginPercent       float64 // 100 (npr/choke npr − 1)
	MarginPa            float64 // p8/choke npr − pb: p* − pb for a convergent nozzle without calibration
	CriticalPressure    float64 // p*, Pa
	CriticalTemperature float64 // T*, K
	CriticalVelocity    float64 // a*, m/s
	ShockAtExitNPR      float64 // second critical npr; NaN for a convergent nozzle
	DesignNPR           float64 // third critical npr; NaN for a convergent nozzle

	TotalPressure float64 // p8, Pa
	ThroatArea    float64 // A8 while running, m²
	Discharge     float64 // Cd
	Thrust        float64 // CT
	FlowParameter float64 // φ = W √(R T0)/(A8 p8) of the ideal flow
	MassFlow      float64 // W8 = Cd A8 φ p0/√(R T0), kg/s

	GrossThrust              float64 // N, on the basis of the config
	GrossThrustNozzleIdeal   float64 // N
	GrossThrustFullyExpanded float64 // N

	GammaTotal  float64 // γ(T0)
	GasConstant float64 // R, J/(kg K)

	Warnings    Warning
	GasWarnings gas.Warning
}

// WarningTexts gives every doubt as a sentence for the operator.
func (r *Result) WarningTexts() []string {
	return append(r.Warnings.Texts(), r.GasWarnings.Texts()...)
}

// Nozzle is a configured nozzle, read only once made; any number of goroutines may
// use it.
type Nozzle struct {
	config    Config
	discharge table
	thrust    table
}

// New checks c and prepares its tables; the error holds every fault of c.
func New(c Config) (*Nozzle, error) {
	if err := c.Validate(); err != nil {
		return nil, err
	}
	n := &Nozzle{config: c}
	var err error
	if n.discharge, err = newTable(c.Discharge); err != nil {
		return nil, err
	}
	if n.thrust, err = newTable(c.Thrust); err != nil {
		return nil, err
	}
	return n, nil
}

// Line is what a nozzle's flow depends on besides the pressures: gas, total
// temperature and areas, with the states that follow from them. Whoever evaluates
// several pressures at one of them spares their computation.
type Line struct {
	expansion    expansion
	throat, exit float64 // m²
}

// Line prepares the temperature and the areas of in; its pressures are not read. g must
// stay as it is for as long as the line is used. The error is ErrInput or ErrArea.
func (n *Nozzle) Line(g *gas.Mixture, in Inputs) (l Line, err error) {
	if !(in.TotalTemperature >= 50 && in.TotalTemperature <= 6000 && g.Valid()) {
		return l, ErrInput
	}
	l.throat, l.exit = n.areas(in)
	l.expansion = newExpansion(g, in.TotalTemperature)
	if n.config.Kind == ConvergentDivergent {
		ratio := l.exit / l.throat
		if !(ratio >= 1) {
			return l, ErrArea
		}
		l.expansion.diverge(ratio)
	}
	return l, nil
}

// Divergent reports whether the exit is larger than the throat.
func (l *Line) Divergent() bool { return l.expansion.divergent }

// Evaluate gives the flow for one instant. g and in are not kept. The error is
// ErrInput or ErrArea; a state outside the model's range is not an error but a
// warning.
func (n *Nozzle) Evaluate(g *gas.Mixture, in Inputs) (Result, error) {
	l, err := n.Line(g, in)
	if err != nil {
		return Result{}, err
	}
	return n.On(&l, in.TotalPressure, in.BackPressure)
}

// On gives the flow along a line of this nozzle at the pressures p7 and pb. The
// error is ErrInput.
func (n *Nozzle) On(l *Line, total, back unit.Absolute) (Result, error) {
	p7, pb := float64(total), float64(back)
	if !(p7 > 0 && pb > 0 && p7 < math.Inf(1) && pb < math.Inf(1)) {
		return Result{}, ErrInput
	}
	c, x, throat, exit := &n.config, &l.expansion, l.throat, l.exit
	g, t0 := x.g, x.t0
	p8 := p7 * (1 - c.DuctLoss)
	r := Result{
		NPR: p8 / pb, NPRRake: p7 / pb,
		CriticalNPR: x.first, ChokeNPR: x.first,
		CriticalPressure: p8 * x.critical.PressureRatio, CriticalTemperature: x.critical.Temperature, CriticalVelocity: x.critical.Velocity,
		ShockAtExitNPR: x.second, DesignNPR: x.third,
		TotalPressure: p8, ThroatArea: throat,
		GammaTotal: x.total.Gamma, GasConstant: g.R(),
	}
	if c.ChokeNPR > 0 {
		r.ChokeNPR, r.ChokeCalibrated = c.ChokeNPR, true
	}
	r.MarginPercent = 100 * (r.NPR/r.ChokeNPR - 1)
	r.MarginPa = p8/r.ChokeNPR - pb

	// The coefficients refer to the total pressure they were measured with: with
	// station 7 they hold the duct loss already.
	p0, npr := p8, r.NPR
	if c.CoefficientStation == 7 {
		p0, npr = p7, r.NPRRake
	}
	var inside, insideThrust bool
	r.Discharge, inside = n.discharge.at(npr)
	r.Thrust, insideThrust = n.thrust.at(npr)

	if !(r.NPR > 1 && r.NPR-1 >= c.ResolutionFloor) {
		if r.NPRRake < 1 && 1-r.NPRRake >= c.ResolutionFloor { // p8 has a duct loss even at rest
			r.Warnings |= PressureOrder
		}
		r.Throat = State{Pressure: pb, Temperature: t0}
		r.Exit, r.Expanded = r.Throat, r.Throat
		r.MassFlow = 0 * throat // NaN if the area is not known
		r.GrossThrust, r.GrossThrustNozzleIdeal, r.GrossThrustFullyExpanded = r.MassFlow, r.MassFlow, r.MassFlow
		r.GasWarnings = g.Warnings(t0, p8, t0)
		return r, nil
	}
	if !inside || !insideThrust {
		r.Warnings |= CoefficientRange
	}
	r.Choked = r.NPR >= r.ChokeNPR
	expanded := x.at(r.NPR)
	f := x.flow(r.NPR, expanded)
	r.Regime, r.FlowParameter = f.regime, f.throat.flux
	r.Expanded = expanded.state(g, p8)
	r.Expanded.Pressure = pb
	switch {
	case f.throat == expanded:
		r.Throat = r.Expanded
	case f.regime == Subsonic:
		r.Throat = f.throat.state(g, p8)
	default:
		r.Throat = State{Mach: 1, Pressure: r.CriticalPressure, Temperature: r.CriticalTemperature, Velocity: r.CriticalVelocity}
	}
	switch f.exit {
	case expanded:
		r.Exit = r.Expanded
	case f.throat:
		r.Exit = r.Throat
	default:
		r.Exit = f.exit.state(g, p8)
		if f.regime == ShockInside {
			r.Exit.Pressure = pb
		}
	}
	r.GasWarnings = g.Warnings(t0, p7, f.exit.t)
	if c.Kind == ConvergentDivergent {
		r.Warnings |= DiffuserLoss
		if f.regime == OverExpanded {
			r.Warnings |= Separation
		}
	}

	ideal := f
	if npr != r.NPR {
		expanded = x.at(npr)
		ideal = x.flow(npr, expanded)
	}
	root := math.Sqrt(g.R() * t0)
	r.MassFlow = r.Discharge * throat * ideal.throat.flux * p0 / root
	r.GrossThrustNozzleIdeal = r.Thrust * (r.MassFlow*ideal.exit.v + r.Discharge*exit*(ideal.exit.p*p0-pb))
	r.GrossThrustFullyExpanded = r.Thrust * r.MassFlow * expanded.v
	r.GrossThrust = r.GrossThrustNozzleIdeal
	if c.Basis == FullyExpanded {
		r.GrossThrust = r.GrossThrustFullyExpanded
	}
	return r, nil
}

// areas gives A8 and A9, m², while running; NaN where they are not known. A cold area
// grows with the square of the wall's linear expansion.
func (n *Nozzle) areas(in Inputs) (throat, exit float64) {
	c := &n.config
	throat = c.ThroatArea
	if in.ThroatArea != 0 {
		throat = in.ThroatArea
	}
	if !(throat > 0) {
		throat = math.NaN()
	}
	exit = throat
	if c.Kind == ConvergentDivergent {
		exit = c.ExitArea
	}
	if c.AreaBasis == AreaHot || c.ExpansionCoefficient == 0 {
		return throat, exit
	}
	if !(in.MetalTemperature > 0) {
		return math.NaN(), math.NaN()
	}
	growth := 1 + c.ExpansionCoefficient*(in.MetalTemperature-c.ReferenceTemperature)
	return throat * growth * growth, exit * growth * growth
}

// String names the kind.
func (k Kind) String() string {
	if k == ConvergentDivergent {
		return "convergent-divergent"
	}
	return "convergent"
}

// String names the basis.
func (b ThrustBasis) String() string {
	if b == FullyExpanded {
		return "fully-expanded"
	}
	return "nozzle-ideal"
}

// ChokeCalibrated reports whether the choke npr is that of a calibration.
func (n *Nozzle) ChokeCalibrated() bool { return n.config.ChokeNPR > 0 }
