// Package uncertainty carries the uncertainty of the measured inputs through the
// nozzle to its outputs, first order after the GUM (JCGM 100:2008): which output is
// how sure, and which input is to blame.
//
// Inputs are standard uncertainties (k = 1), each in a systematic and a random part,
// and independent of each other. What two inputs share is an input of its own
// [JCGM 100 F.1.2.3]: the error of a barometer that a gauge channel and the back
// pressure both refer to is CommonPressure, and moves both by the same amount.
//
// The contribution of an input is half the difference of the output at x + u and at
// x − u [JCGM 100 5.1.3 note 2], so that a bend inside that span is averaged and
// not missed. It stays first order: where the span reaches the limit of no flow or
// Mach 1, take the result as an order of magnitude. Where no uncertainty was stated, give
// NaN: the outputs that need it become NaN, not small. Nothing allocates.
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

// The outputs.
const (
	NPR           Output = iota
	ChokePoint           // the choke npr used
	MarginPercent        // percent, absolute
	MassFlow             // kg/s
	GrossThrust          // N
	NumOutputs
)

var outputNames = [NumOutputs]string{"npr", "choke_npr", "choke_margin_percent", "mass_flow_kg_s", "gross_thrust_n"}

// String gives the key of the output.
func (o Output) String() string {
	if o < NumOutputs {
		return outputNames[o]
	}
	return "invalid"
}

// needs tells which inputs an output depends on; it is never written to.
var needs = [NumOutputs][NumInputs]bool{
	NPR:           {TotalPressure: true, BackPressure: true, CommonPressure: true},
	ChokePoint:    {TotalTemperature: true, FuelAirRatio: true, HumidityRatio: true, ChokeNPR: true},
	MarginPercent: {true, true, true, true, true, true, ChokeNPR: true},
	MassFlow:      {true, true, true, true, true, true, ThroatArea: true, Discharge: true},
	GrossThrust:   {true, true, true, true, true, true, ThroatArea: true, Discharge: true, Thrust: true},
}

// Part is the standard uncertainty of an input: what all samples of the
// averaging time share, and what differs from sample to sample (of the mean,
// if the input is a mean). NaN if not stated.
type Part struct {
	Systematic, Random float64
}

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
}

// Estimate is an output with its uncertainty.
type Estimate struct {
	Value        float64
	Systematic   float64            // standard uncertainty from the systematic parts
	Random       float64            // standard uncertainty from the random parts
	U95          float64            // 2 √(Systematic² + Random²)
	Contribution [NumInputs]float64 // c u of each input, signed, in the unit of the output
}

// Share gives the part of the variance, 0 to 1, that comes from an input; 0 if
// there is no variance.
func (e *Estimate) Share(i Input) float64 {
	if e.U95 == 0 {
		return 0
	}
	c := 2 * e.Contribution[i] / e.U95
	return c * c
}

// Result is every output with its uncertainty.
type Result struct {
	Outputs [NumOutputs]Estimate
	// PChoked is the probability that the flow is choked, Φ(margin/u(margin)). NaN
	// unless the uncertainty of the nozzle model is stated or the choke npr is calibrated:
	// without it, the measurement alone says nothing about the nozzle.
	PChoked float64
}

// coverage is k for 95 % with many degrees of freedom [JCGM 100 6.3.3].
const coverage = 2

// Evaluate propagates u through p. Flow and thrust are NaN with their uncertainty
// where the area is not known; without flow their uncertainty is NaN, for their
// value of 0 is a decision and no measurement. The error is that of
// nozzle.Evaluate.
func Evaluate(p *Point, u *Inputs) (Result, error) {
	base, err := p.Nozzle.Evaluate(p.Gas, p.Inputs)
	if err != nil {
		return Result{}, err
	}
	var r Result
	values := outputs(&base)
	for o, v := range values {
		r.Outputs[o].Value = v
	}
	for i := range NumInputs {
		total := math.Hypot(u[i].Systematic, u[i].Random)
		var change [NumOutputs]float64
		switch {
		case total == 0:
			continue
		case math.IsNaN(total):
			for o := range change {
				change[o] = math.NaN()
			}
		default:
			if change, err = p.contribution(i, total, &base, values); err != nil {
				return Result{}, err
			}
		}
		systematic, random := u[i].Systematic/total, u[i].Random/total
		for o := range r.Outputs {
			if !needs[o][i] {
				continue
			}
			e := &r.Outputs[o]
			e.Contribution[i] = change[o]
			e.Systematic += change[o] * change[o] * systematic * systematic
			e.Random += change[o] * change[o] * random * random
		}
	}
	for o := range r.Outputs {
		e := &r.Outputs[o]
		e.U95 = coverage * math.Sqrt(e.Systematic+e.Random)
		e.Systematic, e.Random = math.Sqrt(e.Systematic), math.Sqrt(e.Random)
	}
	if base.Regime == nozzle.NoFlow {
		for _, o := range [...]Output{MassFlow, GrossThrust} {
			r.Outputs[o] = Estimate{Value: r.Outputs[o].Value, Systematic: math.NaN(), Random: math.NaN(), U95: math.NaN()}
		}
	}
	r.PChoked = math.NaN()
	if base.ChokeCalibrated || u[ChokeNPR].Systematic > 0 || u[ChokeNPR].Random > 0 {
		m := r.Outputs[MarginPercent]
		r.PChoked = probability(m.Value, m.U95/coverage)
	}
	return r, nil
}

// probability gives Φ(x/u), the probability that a normal quantity of mean x is
// above 0; for u = 0 that is 0, ½ or 1.
func probability(x, u float64) float64 {
	if x == 0 && u == 0 {
		return 0.5
	}
	return math.Erfc(-x/u/math.Sqrt2) / 2
}

func outputs(r *nozzle.Result) [NumOutputs]float64 {
	return [NumOutputs]float64{NPR: r.NPR, ChokePoint: r.ChokeNPR, MarginPercent: r.MarginPercent, MassFlow: r.MassFlow, GrossThrust: r.GrossThrust}
}

// contribution gives c u of one input for every output.
func (p *Point) contribution(i Input, u float64, base *nozzle.Result, at [NumOutputs]float64) (change [NumOutputs]float64, err error) {
	// The outputs are proportional to a power of these, exactly.
	switch i {
	case ThroatArea, Discharge:
		change[MassFlow], change[GrossThrust] = u*at[MassFlow], u*at[GrossThrust]
		return change, nil
	case Thrust:
		change[GrossThrust] = u * at[GrossThrust]
		return change, nil
	case ChokeNPR:
		change[ChokePoint] = u * at[ChokePoint]
		change[MarginPercent] = -u * 100 * base.NPR / base.ChokeNPR
		return change, nil
	case FuelAirRatio, HumidityRatio:
		if p.Fuel == (gas.Fuel{}) {
			return change, nil
		}
	case TotalPressure, BackPressure, CommonPressure, TotalTemperature, NumInputs:
	}
	below, spanBelow, err := p.shifted(i, -u)
	if err != nil {
		return change, err
	}
	above, spanAbove, err := p.shifted(i, u)
	if err != nil {
		return change, err
	}
	low, high := outputs(&below), outputs(&above)
	scale := u / (spanAbove - spanBelow)
	for o := range change {
		change[o] = (high[o] - low[o]) * scale
	}
	return change, nil
}

// shifted evaluates the nozzle with one input off by d, or by as much of it
// as the range of the input allows, which it returns.
func (p *Point) shifted(i Input, d float64) (nozzle.Result, float64, error) {
	in, g := p.Inputs, p.Gas
	f, war := p.FuelAirRatio, p.HumidityRatio
	switch i {
	case TotalPressure:
		d = max(d, -float64(in.TotalPressure)/2)
		in.TotalPressure += unit.Absolute(d)
	case BackPressure:
		d = max(d, -float64(in.BackPressure)/2)
		in.BackPressure += unit.Absolute(d)
	case CommonPressure:
		d = max(d, -float64(min(in.TotalPressure, in.BackPressure))/2)
		in.TotalPressure += unit.Absolute(d)
		in.BackPressure += unit.Absolute(d)
	case TotalTemperature:
		d = max(d, -in.TotalTemperature/2)
		in.TotalTemperature += d
	case FuelAirRatio:
		shifted := min(max(f+d, 0), gas.StoichiometricRatio(p.Fuel))
		f, d = shifted, shifted-f
	case HumidityRatio:
		shifted := max(war+d, 0)
		war, d = shifted, shifted-war
	case ThroatArea, Discharge, Thrust, ChokeNPR, NumInputs:
	}
	if f != p.FuelAirRatio || war != p.HumidityRatio {
		m, err := gas.NewMixture(p.Fuel, f, war)
		if err != nil {
			return nozzle.Result{}, 0, err
		}
		r, err := p.Nozzle.Evaluate(&m, in)
		return r, d, err
	}
	r, err := p.Nozzle.Evaluate(g, in)
	return r, d, err
}
