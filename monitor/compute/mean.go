package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/uncertainty"
)

// Systematic is the systematic standard uncertainty of each quantity, NaN where it is
// not known: of what has an interval only, of ratios and states, and where something
// that it needs is not stated.
type Systematic [monitor.NumQuantities]float64

// OfMean computes the operating point of a scan that is the mean of many: its values
// and qualities are final, and no history goes into it. What differs from scan to scan
// is no part of the uncertainty of a mean: that is seen in the scans.
func (c *Computer) OfMean(scan *monitor.Scan) (p monitor.OperatingPoint, u Systematic) {
	var s State
	c.Reset(&s, nil)
	c.fitSensors(&s, scan)
	c.compute(&s, scan, &p)
	for q := range u {
		u[q] = math.NaN()
	}
	st := &c.cfg.Stations
	for _, direct := range [...]struct {
		q     monitor.Quantity
		index int
		scale float64
	}{
		{monitor.Barometer, st.Barometer, 1},
		{monitor.Speed, st.Speed, 60},
		{monitor.FuelFlow, st.FuelFlow, 1},
		{monitor.WaterFlow, st.WaterFlow, 1},
		{monitor.MeasuredThrust, st.Thrust, 1},
	} {
		u[direct.q] = direct.scale * c.part(scan, direct.index).Systematic
	}
	u[monitor.EGTIndicated] = c.groupPart(scan, &c.egt, math.NaN()).Systematic
	if !math.IsNaN(p.V[monitor.AirFlow]) {
		u[monitor.AirFlow] = spread(c.flow.terms[:c.flow.air], systematicOf) / c.flow.kept
	}
	if !math.IsNaN(p.V[monitor.IndependentFlow]) {
		u[monitor.IndependentFlow] = spread(c.flow.terms, systematicOf)
	}
	inlet := c.inletParts(scan, &p)
	u[monitor.ReferredSpeed] = inlet.of(&p, monitor.ReferredSpeed, u[monitor.Speed]/p.V[monitor.Speed], -0.5, 0)
	u[monitor.ReferredEGT] = inlet.of(&p, monitor.ReferredEGT, u[monitor.EGTIndicated]/p.V[monitor.EGTIndicated], -st.EGTExponent, 0)
	if c.last == 0 {
		return p, u
	}
	in, out := &c.doubts, &c.result.Outputs
	u[monitor.RakePressure] = math.Hypot(in[uncertainty.TotalPressure].Systematic, in[uncertainty.CommonPressure].Systematic)
	u[monitor.BackPressure] = math.Hypot(in[uncertainty.BackPressure].Systematic, in[uncertainty.CommonPressure].Systematic)
	u[monitor.TotalTemperature] = in[uncertainty.TotalTemperature].Systematic
	u[monitor.FuelAirRatio] = in[uncertainty.FuelAirRatio].Systematic
	u[monitor.HumidityRatio] = in[uncertainty.HumidityRatio].Systematic
	u[monitor.NPR] = out[uncertainty.NPR].Systematic
	u[monitor.ChokeNPR] = out[uncertainty.ChokePoint].Systematic
	u[monitor.ChokeMarginPercent] = out[uncertainty.MarginPercent].Systematic
	u[monitor.MassFlow] = out[uncertainty.MassFlow].Systematic
	u[monitor.GrossThrust] = out[uncertainty.GrossThrust].Systematic
	u[monitor.ReferredFlow] = inlet.of(&p, monitor.ReferredFlow, u[monitor.MassFlow]/p.V[monitor.MassFlow], 0.5, -1)
	u[monitor.ReferredThrust] = inlet.of(&p, monitor.ReferredThrust, u[monitor.GrossThrust]/p.V[monitor.GrossThrust], 0, -1)
	if c.balanced {
		balance, area := c.apart(p.V[monitor.IndependentFlow], p.V[monitor.MassFlow], systematicOf)
		u[monitor.FlowBalance], u[monitor.EffectiveArea] = balance, p.V[monitor.EffectiveArea]*area
	}
	return p, u
}

// inlet holds the relative systematic standard uncertainties of the totals at station 2.
type inlet struct{ temperature, pressure float64 }

func (c *Computer) inletParts(scan *monitor.Scan, p *monitor.OperatingPoint) inlet {
	st := &c.cfg.Stations
	i, p2 := st.Barometer, p.V[monitor.Barometer]
	if st.InletP >= 0 {
		i, p2 = st.InletP, c.channel(scan, st.InletP)
	}
	return inlet{c.part(scan, st.InletT).Systematic / c.channel(scan, st.InletT), c.part(scan, i).Systematic / p2}
}

// of gives the systematic standard uncertainty of a referred value X θ^a δ^b from that of
// X, relative: u² = u²(X) + a² u²(T2) + b² u²(p2) [JCGM 100 eq. 12]. That X rests on the
// same barometer as δ is not used: flow and thrust rise with it as δ does, so that the
// whole is somewhat less sure than it could be.
func (n inlet) of(p *monitor.OperatingPoint, q monitor.Quantity, x, a, b float64) float64 {
	square := x * x
	if a != 0 {
		square += a * a * n.temperature * n.temperature
	}
	if b != 0 {
		square += b * b * n.pressure * n.pressure
	}
	return math.Abs(p.V[q]) * math.Sqrt(square)
}
