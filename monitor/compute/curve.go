package compute

import (
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
)

// curvePoints is the number of points of a curve.
const curvePoints = 151

// CurveGas is the gas that a curve is of.
type CurveGas struct {
	Temperature   float64 // K, total; 200 to 1800
	FuelAirRatio  float64 // dry basis
	HumidityRatio float64 // dry basis
}

// Curve is the throat plane of a nozzle: flow parameter W√(R T0)/(A p0), discharge
// coefficient included, against NPR.
type Curve struct {
	NPR           []float64
	FlowParameter []float64
	CriticalNPR   float64
	ChokeNPR      float64
}

// ThroatCurve evaluates the nozzle of a rig from NPR 1 to top, closer where the curve rises
// steeply. Errors are those of gas.NewMixture, gas.Perfect, nozzle.New and Evaluate.
func ThroatCurve(c *Config, of CurveGas, top float64) (out Curve, err error) {
	g, err := gas.NewMixture(c.Fuel, of.FuelAirRatio, of.HumidityRatio)
	if c.Gamma > 0 {
		g, err = gas.Perfect(c.Gamma, c.GasR)
	}
	if err != nil {
		return out, err
	}
	n, err := nozzle.New(c.Nozzle.Config)
	if err != nil {
		return out, err
	}
	const pb = 101325.0 // Pa; the curve does not depend on it
	for i := range curvePoints {
		x := float64(i) / (curvePoints - 1)
		npr := 1 + (top-1)*x*x
		res, err := n.Evaluate(&g, nozzle.Inputs{
			TotalPressure: unit.Absolute(npr * pb / (1 - c.Nozzle.DuctLoss)), BackPressure: pb,
			TotalTemperature: of.Temperature, MetalTemperature: of.Temperature,
		})
		if err != nil {
			return out, err
		}
		out.NPR = append(out.NPR, npr)
		out.FlowParameter = append(out.FlowParameter, res.Discharge*res.FlowParameter)
		out.CriticalNPR, out.ChokeNPR = res.CriticalNPR, res.ChokeNPR
	}
	return out, nil
}
