// Package uncertainty carries the uncertainty of the measured inputs through the
// nozzle to its outputs after the GUM (JCGM 100:2008): which output is how sure,
// and which input is to blame.
//
// Inputs are standard uncertainties (k = 1) of normal quantities, each in a
// systematic and a random part, and independent of each other. What two inputs share is
// an input of its own [JCGM 100 F.1.2.3]: the error of a barometer that a gauge channel
// and the back pressure both refer to is CommonPressure, and moves both by the same
// amount. Where no uncertainty was stated, give NaN: the outputs that need it become NaN,
// not small.
//
// First order fails in one direction only, along NPR: near no flow, where flow goes with
// the root of NPR − 1, and at Mach 1, where states stop changing. So that direction is
// not differentiated but mapped by quantiles:
//
//   - NPR is a ratio of two normal quantities, whose quantiles have a closed form (Fieller).
//   - Each output is evaluated at the 2.5 % and 97.5 % quantile of NPR, at the same total
//     pressure. What remains is linear: the part of the total pressure that does not
//     come with NPR, temperature, composition, area and coefficients. Each side of an
//     interval is the root of the sum of squares of the mapped distance and of the linear parts.
//   - In a convergent nozzle the throat state is the lesser or greater of two smooth
//     states, that of full expansion and the sonic one. Each is near normal, so the
//     quantiles of the throat state are those of the lesser or greater of two correlated
//     normal quantities, right through Mach 1. In a convergent-divergent nozzle the
//     composition shifts the first critical ratio instead; within an interval that
//     reaches across it, its ends are good to a tenth of its width.
//
// MonteCarlo is the check after JCGM 101:2008. Evaluate allocates nothing.
package uncertainty

import (
	"math"

	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
)

// Input is a quantity whose uncertainty is stated.
type Input uint8

// The inputs, with the unit of their standard uncertainty.
const (
	TotalPressure    Input = iota // Pa, of nozzle.Inputs.TotalPressure alone
	BackPressure                  // Pa, of back pressure alone
	CommonPressure                // Pa, shared by both
	TotalTemperature              // K
	FuelAirRatio                  // kg/kg, absolute
	HumidityRatio                 // kg/kg, absolute
	ThroatArea                    // relative
	Discharge                     // relative
	Thrust                        // relative
	ChokeNPR                      // relative: nozzle model, or calibration of the choke npr; 0 = not stated
	NumInputs
)

var inputNames = [NumInputs]string{
	"total pressure", "back pressure", "common pressure", "total temperature", "fuel-air ratio", "humidity ratio",
	"throat area", "discharge coefficient", "thrust coefficient", "choke npr",
}

// String names the input for a budget table.
func (i Input) String() string {
	if i < NumInputs {
		return inputNames[i]
	}
	return "invalid"
}

// Output is a computed quantity.
type Output uint8

// The outputs. The last four are monotone in NPR: they have an interval and no U95.
const (
	NPR           Output = iota
	ChokePoint           // the choke npr used
	MarginPercent        // percent, absolute
	MassFlow             // kg/s
	GrossThrust          // N
	ThroatMach
	ThroatPressure    // Pa
	ThroatTemperature // K
	ExitVelocity      // m/s
	NumOutputs
)

var outputNames = [NumOutputs]string{
	"npr", "choke_npr", "choke_margin_percent", "mass_flow_kg_s", "gross_thrust_n",
	"throat_mach", "throat_pressure_pa", "throat_temperature_k", "exit_velocity_m_s",
}

// String gives the key of the output.
func (o Output) String() string {
	if o < NumOutputs {
		return outputNames[o]
	}
	return "invalid"
}

// needs tells which inputs an output depends on; it is never written to.
var needs = [NumOutputs][NumInputs]bool{
	NPR:               {TotalPressure: true, BackPressure: true, CommonPressure: true},
	ChokePoint:        {TotalTemperature: true, FuelAirRatio: true, HumidityRatio: true, ChokeNPR: true},
	MarginPercent:     {true, true, true, true, true, true, ChokeNPR: true},
	MassFlow:          {true, true, true, true, true, true, ThroatArea: true, Discharge: true},
	GrossThrust:       {true, true, true, true, true, true, ThroatArea: true, Discharge: true, Thrust: true},
	ThroatMach:        {true, true, true, true, true, true},
	ThroatPressure:    {true, true, true, true, true, true},
	ThroatTemperature: {true, true, true, true, true, true},
	ExitVelocity:      {true, true, true, true, true, true},
}

// Part is the standard uncertainty of an input: what all samples of the
// averaging time share, and what differs from sample to sample (of the mean,
// if the input is a mean). NaN if not stated.
type Part struct {
	Systematic, Random float64
}

// Total is the root of the sum of both squares.
func (p Part) Total() float64 { return math.Sqrt(p.Systematic*p.Systematic + p.Random*p.Random) }

// Inputs gives the uncertainty of every input.
type Inputs [NumInputs]Part

// Point is the operating point that the uncertainties belong to.
type Point struct {
	Nozzle        *nozzle.Nozzle
	Inputs        nozzle.Inputs
	Gas           *gas.Mixture
	Fuel          gas.Fuel // the fuel that Gas is made of; the zero value for a gas that does not depend on f and humidity
	FuelAirRatio  float64
	HumidityRatio float64
	Line          *nozzle.Line // of Nozzle, Gas and Inputs where it is at hand; nil = made here
}

// Estimate is an output with its uncertainty.
type Estimate struct {
	Value      float64
	Low, High  float64 // bounds of the interval that holds 95 %, 2.5 % outside on either side
	Systematic float64 // standard uncertainty from the systematic parts
	Random     float64 // standard uncertainty from the random parts
	U95        float64 // Coverage √(Systematic² + Random²); NaN for what has an interval only

	// Contribution is c u of each input, signed, in the unit of the output; their squares
	// add up to the variance. Along NPR, c is the mean slope between the quantiles. Of a
	// throat state, it is that of the branch, subsonic or sonic, which Value lies on.
	Contribution [NumInputs]float64
}

// Share gives the part of the variance, 0 to 1, that comes from an input; 0 if
// there is no variance. A channel that is one of several behind an input has of its
// share the part of its own variance in that of the input.
func (e *Estimate) Share(i Input) float64 {
	variance := e.Systematic*e.Systematic + e.Random*e.Random
	if variance == 0 {
		return 0
	}
	return e.Contribution[i] * e.Contribution[i] / variance
}

// Result is every output with its uncertainty.
type Result struct {
	Outputs [NumOutputs]Estimate
	// PChoked is the probability that the flow is choked, Φ(margin/u(margin)). NaN
	// unless the uncertainty of the nozzle model is stated or the choke npr is calibrated:
	// without it, the measurement alone says nothing about the nozzle.
	PChoked float64
}

// Coverage is k of a normal quantity for 95 % [JCGM 100 table G.1], so that U95 and
// the mapped intervals say the same. The customary k = 2 covers 95.45 %.
const Coverage = 1.959963984540054

// thermal counts the inputs on which pressures and gas depend: all before ThroatArea.
const thermal = int(ThroatArea)

// effects is what each thermal input does to one quantity: c u, in its unit.
type effects [thermal]float64

func (a *effects) dot(b *effects) float64 {
	var sum float64
	for i := range a {
		sum += a[i] * b[i]
	}
	return sum
}

// propagation is the state of one Evaluate.
type propagation struct {
	base nozzle.Result
	// At the same total pressure, with back pressure for the quantiles of NPR.
	low, high nozzle.Result
	logLow    float64 // ln of those quantiles over NPR
	logHigh   float64
	total     effects // of ln p7
	npr       effects // of ln NPR
	// follow is how much of ln NPR the total pressure goes along with, cov/var; what is
	// left of it is independent of NPR.
	follow   float64
	residual float64 // variance of that rest
	bounded  bool    // the quantiles of NPR exist
	extent   float64 // distance of the quantiles over that of low and high, at most 1

	change [thermal]nozzle.Result // base, with one of temperature and composition off
	factor [thermal]float64       // u over how far off
}

// Evaluate propagates u through p. Flow and thrust are NaN with their uncertainty
// where the area is not known; without flow their uncertainty, and that of the throat
// state, is NaN, for no flow is a decision and no measurement. So are the bounds where
// the uncertainty of a pressure exceeds half of it. The error is that of nozzle.Evaluate.
func Evaluate(p *Point, u *Inputs) (r Result, err error) {
	var size [NumInputs]float64
	for i := range u {
		if size[i] = u[i].Total(); math.IsNaN(size[i]) {
			size[i] = 0 // what needs it is struck out at the end
		}
	}
	var s propagation
	line := p.Line
	if line == nil {
		own, err := p.Nozzle.Line(p.Gas, p.Inputs)
		if err != nil {
			return r, err
		}
		line = &own
	}
	if err := s.pressures(p, line, &size); err != nil {
		return r, err
	}
	if err := s.gas(p, &size); err != nil {
		return r, err
	}
	s.scaled(&r, &size)
	if s.base.Regime != nozzle.NoFlow {
		if line.Divergent() {
			s.divergent(&r)
		} else {
			s.convergent(&r)
		}
	}
	for o := range r.Outputs {
		r.Outputs[o].finish(Output(o), u, &size, s.bounded, s.base.Regime == nozzle.NoFlow)
	}
	s.values(&r)
	r.PChoked = math.NaN()
	if s.base.ChokeCalibrated || size[ChokeNPR] > 0 {
		m := r.Outputs[MarginPercent]
		r.PChoked = probability(m.Value, m.U95/Coverage)
	}
	return r, nil
}

// finish sums the contributions up, and strikes out what cannot be stated.
func (e *Estimate) finish(o Output, u *Inputs, size *[NumInputs]float64, bounded, noFlow bool) {
	unknown := noFlow && o >= MassFlow
	var systematic, random float64
	for i, c := range e.Contribution {
		if !needs[o][i] {
			continue
		}
		if math.IsNaN(u[i].Systematic + u[i].Random) {
			e.Contribution[i] = math.NaN()
			unknown = true
			continue
		}
		if size[i] > 0 {
			c /= size[i]
			systematic += c * c * u[i].Systematic * u[i].Systematic
			random += c * c * u[i].Random * u[i].Random
		}
	}
	e.Systematic, e.Random = math.Sqrt(systematic), math.Sqrt(random)
	if unknown {
		e.Systematic, e.Random = math.NaN(), math.NaN()
	}
	e.U95 = Coverage * math.Sqrt(e.Systematic*e.Systematic+e.Random*e.Random)
	if unknown || (!bounded && o != ChokePoint) {
		e.Low, e.High = math.NaN(), math.NaN()
	}
	if o >= ThroatMach {
		e.U95 = math.NaN()
	}
}

func (s *propagation) values(r *Result) {
	for o, v := range outputs(&s.base) {
		r.Outputs[o].Value = v
	}
}

func outputs(r *nozzle.Result) [NumOutputs]float64 {
	return [NumOutputs]float64{
		r.NPR, r.ChokeNPR, r.MarginPercent, r.MassFlow, r.GrossThrust,
		r.Throat.Mach, r.Throat.Pressure, r.Throat.Temperature, r.Exit.Velocity,
	}
}

// probability gives Φ(x/u), the probability that a normal quantity of mean x is
// above 0; for u = 0 that is 0, ½ or 1.
func probability(x, u float64) float64 {
	if x == 0 && u == 0 {
		return 0.5
	}
	return normal(x / u)
}

// pressures evaluates the point, and at the quantiles of NPR.
func (s *propagation) pressures(p *Point, line *nozzle.Line, size *[NumInputs]float64) (err error) {
	p7, pb := p.Inputs.TotalPressure, p.Inputs.BackPressure
	if s.base, err = p.Nozzle.On(line, p7, pb); err != nil {
		return err
	}
	back := effects{BackPressure: size[BackPressure] / float64(pb), CommonPressure: size[CommonPressure] / float64(pb)}
	s.total = effects{TotalPressure: size[TotalPressure] / float64(p7), CommonPressure: size[CommonPressure] / float64(p7)}
	for i := range s.npr {
		s.npr[i] = s.total[i] - back[i]
	}
	variance := s.npr.dot(&s.npr)
	s.residual = s.total.dot(&s.total)
	if variance > 0 {
		s.follow = s.total.dot(&s.npr) / variance
		s.residual = max(0, s.residual-s.follow*s.follow*variance)
	}
	// A quantile q of NPR, over NPR, has p7 − q pb (both relative) at ±k of its own standard
	// deviation: (1 − q)² = k² (var p7 − 2 q cov + q² var pb) (Fieller).
	const k2 = Coverage * Coverage
	a, b, c := 1-k2*back.dot(&back), 1-k2*s.total.dot(&back), 1-k2*s.total.dot(&s.total)
	root := math.Sqrt(max(0, b*b-a*c))
	low, high := c/(b+root), (b+root)/a
	s.bounded = a > 0 && b > 0 && c > 0
	// Where the pressures have next to no uncertainty, the slope is still wanted.
	const least = 1e-5
	switch {
	case !s.bounded:
		s.extent, low, high = 0, 1-least, 1+least
	case high-low < 2*least:
		s.extent, low, high = (high-low)/(2*least), 1-least, 1+least
	default:
		s.extent = 1
	}
	s.logLow, s.logHigh = math.Log(low), math.Log(high)
	if s.low, err = p.Nozzle.On(line, p7, pb/unit.Absolute(low)); err != nil {
		return err
	}
	s.high, err = p.Nozzle.On(line, p7, pb/unit.Absolute(high))
	return err
}

// gas evaluates the point with temperature and composition off by a step.
func (s *propagation) gas(p *Point, size *[NumInputs]float64) error {
	const relative, absolute = 1e-5, 1e-5 // differences lose 1e-6 to rounding and as much to the bend
	for i := TotalTemperature; i <= HumidityRatio; i++ {
		if size[i] == 0 || (i != TotalTemperature && p.Fuel == (gas.Fuel{})) {
			s.change[i] = s.base
			continue
		}
		in, g, f, war, step := p.Inputs, p.Gas, p.FuelAirRatio, p.HumidityRatio, absolute
		var off gas.Mixture
		// A step leads away from the far end of the input's range.
		var err error
		if i == TotalTemperature {
			step = relative * in.TotalTemperature
			if in.TotalTemperature > 1000 {
				step = -step
			}
			in.TotalTemperature += step
		} else {
			x, half := &f, gas.StoichiometricRatio(p.Fuel)/2
			if i == HumidityRatio {
				x, half = &war, 0.25
			}
			if *x > half {
				step = -step
			}
			*x += step
			if off, err = gas.NewMixture(p.Fuel, f, war); err != nil {
				return err
			}
			g = &off
		}
		s.factor[i] = size[i] / step
		if s.change[i], err = p.Nozzle.Evaluate(g, in); err != nil {
			return err
		}
	}
	return nil
}

// scaled fills in npr, choke npr, margin, flow and thrust.
func (s *propagation) scaled(r *Result, size *[NumInputs]float64) {
	base := &s.base
	npr, choke, margin := &r.Outputs[NPR], &r.Outputs[ChokePoint], &r.Outputs[MarginPercent]
	flow, thrust := &r.Outputs[MassFlow], &r.Outputs[GrossThrust]
	span := s.logHigh - s.logLow
	flowSlope, thrustSlope := (s.high.MassFlow-s.low.MassFlow)/span, (s.high.GrossThrust-s.low.GrossThrust)/span
	quotient := 100 * base.NPR / base.ChokeNPR
	for i := range thermal {
		change, factor := &s.change[i], s.factor[i]
		npr.Contribution[i] = base.NPR * s.npr[i]
		if factor != 0 {
			choke.Contribution[i] = (change.ChokeNPR - base.ChokeNPR) * factor
			flow.Contribution[i] = (change.MassFlow - base.MassFlow) * factor
			thrust.Contribution[i] = (change.GrossThrust - base.GrossThrust) * factor
		}
		margin.Contribution[i] = quotient * (s.npr[i] - choke.Contribution[i]/base.ChokeNPR)
		flow.Contribution[i] += flowSlope*s.npr[i] + base.MassFlow*s.total[i]
		thrust.Contribution[i] += thrustSlope*s.npr[i] + base.GrossThrust*s.total[i]
	}
	choke.Contribution[ChokeNPR] = base.ChokeNPR * size[ChokeNPR]
	margin.Contribution[ChokeNPR] = -quotient * size[ChokeNPR]
	for _, i := range [...]Input{ThroatArea, Discharge} {
		flow.Contribution[i] = base.MassFlow * size[i]
		thrust.Contribution[i] = base.GrossThrust * size[i]
	}
	thrust.Contribution[Thrust] = base.GrossThrust * size[Thrust]

	s.bound(npr, base.NPR, base.NPR*math.Exp(s.logLow)-base.NPR, base.NPR*math.Exp(s.logHigh)-base.NPR, 0)
	s.bound(choke, base.ChokeNPR, 0, 0, 0)
	s.bound(margin, base.MarginPercent, quotient*(math.Exp(s.logLow)-1), quotient*(math.Exp(s.logHigh)-1), 0)
	s.bound(flow, base.MassFlow, s.low.MassFlow-base.MassFlow, s.high.MassFlow-base.MassFlow, base.MassFlow)
	s.bound(thrust, base.GrossThrust, s.low.GrossThrust-base.GrossThrust, s.high.GrossThrust-base.GrossThrust, base.GrossThrust)
}

// bound gives e its interval about v from the distances at the quantiles of NPR, at the
// same total pressure; scale is how the output goes with ln p7 at the same NPR. All
// other contributions are taken as linear.
func (s *propagation) bound(e *Estimate, v, atLow, atHigh, scale float64) {
	atLow = s.extent * (atLow + scale*s.follow*s.logLow)
	atHigh = s.extent * (atHigh + scale*s.follow*s.logHigh)
	linear := scale * scale * s.residual
	for i, c := range e.Contribution {
		if i > int(CommonPressure) {
			linear += c * c
		}
	}
	linear *= Coverage * Coverage
	below, above := min(atLow, atHigh, 0), max(atLow, atHigh, 0)
	e.Low, e.High = v-math.Sqrt(below*below+linear), v+math.Sqrt(above*above+linear)
}

// states are the outputs from ThroatMach on, in their order.
type states [NumOutputs - ThroatMach]float64

const pressure = ThroatPressure - ThroatMach // index of states

func full(r *nozzle.Result) states {
	return states{r.Expanded.Mach, r.Expanded.Pressure, r.Expanded.Temperature, r.Expanded.Velocity}
}

func sonic(r *nozzle.Result) states {
	return states{1, r.CriticalPressure, r.CriticalTemperature, r.CriticalVelocity}
}

func actual(r *nozzle.Result) states {
	return states{r.Throat.Mach, r.Throat.Pressure, r.Throat.Temperature, r.Exit.Velocity}
}

// convergent fills in the throat state: where npr passes the critical one, from the
// state of full expansion to the sonic state. Pressure and temperature are the greater
// of both, Mach number and velocity the lesser.
func (s *propagation) convergent(r *Result) {
	expanded, low, high, critical := full(&s.base), full(&s.low), full(&s.high), sonic(&s.base)
	for k := range expanded {
		subsonic, choked := branch{mean: expanded[k]}, branch{mean: critical[k]}
		slope := 0.0 // the back pressure is as it is
		if k != int(pressure) {
			slope = (high[k] - low[k]) / (s.logHigh - s.logLow)
			subsonic.atLow, subsonic.atHigh = s.extent*(low[k]-expanded[k]), s.extent*(high[k]-expanded[k])
		}
		for i := range thermal {
			if k == int(pressure) {
				subsonic.effects[i] = expanded[k] * (s.total[i] - s.npr[i]) // the back pressure
				choked.effects[i] = critical[k] * s.total[i]
			} else {
				subsonic.effects[i] = slope * s.npr[i]
			}
			if s.factor[i] != 0 {
				subsonic.effects[i] += (full(&s.change[i])[k] - expanded[k]) * s.factor[i]
				choked.effects[i] += (sonic(&s.change[i])[k] - critical[k]) * s.factor[i]
			}
		}
		e := &r.Outputs[int(ThroatMach)+k]
		if s.base.Regime == nozzle.Choked {
			copy(e.Contribution[:], choked.effects[:])
		} else {
			copy(e.Contribution[:], subsonic.effects[:])
		}
		subsonic.spread()
		choked.spread()
		if o := Output(k) + ThroatMach; o == ThroatPressure || o == ThroatTemperature {
			e.Low, e.High = greatest(&subsonic, &choked)
		} else {
			subsonic.turn()
			choked.turn()
			low, high := greatest(&subsonic, &choked)
			e.Low, e.High = -high, -low
		}
	}
}

// divergent fills in the throat state and the exit velocity of a
// convergent-divergent nozzle. Their map over NPR is taken over ln(npr/critical npr),
// which temperature and composition move as NPR does, and scaled by the sonic state.
func (s *propagation) divergent(r *Result) {
	v, low, high, critical := actual(&s.base), actual(&s.low), actual(&s.high), sonic(&s.base)
	for k := range v {
		e := &r.Outputs[int(ThroatMach)+k]
		slope, scale := (high[k]-low[k])/(s.logHigh-s.logLow), 0.0
		if k == int(pressure) {
			scale = v[k]
		}
		for i := range thermal {
			e.Contribution[i] = slope*s.npr[i] + scale*s.total[i]
			if s.factor[i] != 0 {
				change := &s.change[i]
				e.Contribution[i] += (v[k]*(sonic(change)[k]/critical[k]-1) - slope*math.Log(change.CriticalNPR/s.base.CriticalNPR)) * s.factor[i]
			}
		}
		s.bound(e, v[k], low[k]-v[k], high[k]-v[k], scale)
		if k == 0 {
			e.Low, e.High = min(e.Low, 1), min(e.High, 1)
		}
	}
}
