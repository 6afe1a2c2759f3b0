package uncertainty

import (
	"fmt"
	"math"

	"throatwatch/monitor/gas"
	"throatwatch/monitor/unit"
)

// Source gives standard normal random numbers, as *rand.Rand of math/rand/v2 does.
type Source interface{ NormFloat64() float64 }

// Draws bounds the number of draws of MonteCarlo: below, a bound of 95 % rests on too
// few draws outside [JCGM 101 7.2.2]; above, the memory for them, 72 bytes each, is
// better used.
const (
	FewestDraws = 10_000
	MostDraws   = 5_000_000
)

// Sample is what MonteCarlo finds of an output.
type Sample struct {
	Mean, Deviation float64 // estimate and standard uncertainty [JCGM 101 7.6]
	Low, High       float64 // probabilistically symmetric interval of 95 % [JCGM 101 7.7]
}

// Simulation is what MonteCarlo finds.
type Simulation struct {
	Outputs [NumOutputs]Sample
	// PChoked is the fraction of draws that choke; NaN under the same conditions as
	// Result.PChoked.
	PChoked float64
}

// MonteCarlo propagates distributions by random draws [JCGM 101]: every input normal about
// its value, cut off where it has no meaning (fuel-air and humidity ratio at 0, the first at
// stoichiometric). A draw evaluates the nozzle anew. It is for checks, and allocates.
func MonteCarlo(p *Point, u *Inputs, draws int, source Source) (Simulation, error) {
	var out Simulation
	if draws < FewestDraws || draws > MostDraws {
		return out, fmt.Errorf("uncertainty: %d draws: must be %d to %d", draws, FewestDraws, MostDraws)
	}
	var size [NumInputs]float64
	for i := range u {
		if size[i] = u[i].Total(); math.IsNaN(size[i]) {
			size[i] = 0
		}
	}
	var columns [NumOutputs][]float64
	for o := range columns {
		columns[o] = make([]float64, draws)
	}
	choked := 0
	for k := range draws {
		v, err := p.draw(&size, source)
		if err != nil {
			return out, err
		}
		for o := range columns {
			columns[o][k] = v[o]
		}
		if v[MarginPercent] >= 0 {
			choked++
		}
	}
	for o, column := range columns {
		out.Outputs[o] = sample(column)
		for i, part := range u {
			if needs[o][i] && math.IsNaN(part.Systematic+part.Random) {
				out.Outputs[o] = Sample{math.NaN(), math.NaN(), math.NaN(), math.NaN()}
			}
		}
	}
	out.PChoked = math.NaN()
	if p.Nozzle.ChokeCalibrated() || size[ChokeNPR] > 0 {
		out.PChoked = float64(choked) / float64(draws)
	}
	return out, nil
}

// draw evaluates the point once, every input off by its own random error.
func (p *Point) draw(size *[NumInputs]float64, source Source) ([NumOutputs]float64, error) {
	var e [NumInputs]float64
	for i, u := range size {
		if u > 0 {
			e[i] = u * source.NormFloat64()
		}
	}
	const least = 1 // Pa
	in := p.Inputs
	in.TotalPressure = max(least, in.TotalPressure+unit.Absolute(e[TotalPressure]+e[CommonPressure]))
	in.BackPressure = max(least, in.BackPressure+unit.Absolute(e[BackPressure]+e[CommonPressure]))
	in.TotalTemperature = min(max(50, in.TotalTemperature+e[TotalTemperature]), 6000)
	g := p.Gas
	if (size[FuelAirRatio] > 0 || size[HumidityRatio] > 0) && p.Fuel != (gas.Fuel{}) {
		f := min(max(0, p.FuelAirRatio+e[FuelAirRatio]), gas.StoichiometricRatio(p.Fuel)*(1-1e-15))
		m, err := gas.NewMixture(p.Fuel, f, min(max(0, p.HumidityRatio+e[HumidityRatio]), 0.5))
		if err != nil {
			return [NumOutputs]float64{}, err
		}
		g = &m
	}
	r, err := p.Nozzle.Evaluate(g, in)
	if err != nil {
		return [NumOutputs]float64{}, err
	}
	v := outputs(&r)
	coefficient := (1 + e[ThroatArea]) * (1 + e[Discharge])
	v[MassFlow] *= coefficient
	v[GrossThrust] *= coefficient * (1 + e[Thrust])
	v[ChokePoint] *= 1 + e[ChokeNPR]
	v[MarginPercent] = 100 * (v[NPR]/v[ChokePoint] - 1)
	return v, nil
}

// sample sums v up; it changes the order of v.
func sample(v []float64) Sample {
	n := float64(len(v))
	first := v[0] // differences from it lose fewer digits
	var sum, squares float64
	for _, x := range v {
		d := x - first
		sum += d
		squares += d * d
	}
	tail := int(0.025 * n)
	return Sample{
		Mean: first + sum/n, Deviation: math.Sqrt(max(0, (squares-sum*sum/n)/(n-1))),
		Low: place(v, tail), High: place(v, len(v)-1-tail),
	}
}

// place gives what sorting would put at k, and leaves the lesser below it and the
// greater above (C. A. R. Hoare, Comm. ACM 4, 1961, 321, algorithm 65).
func place(v []float64, k int) float64 {
	for low, high := 0, len(v)-1; low < high; {
		pivot, i, j := v[k], low, high
		for i <= j {
			for v[i] < pivot {
				i++
			}
			for v[j] > pivot {
				j--
			}
			if i <= j {
				v[i], v[j] = v[j], v[i]
				i++
				j--
			}
		}
		if j < k {
			low = i
		}
		if k < i {
			high = j
		}
	}
	return v[k]
}
