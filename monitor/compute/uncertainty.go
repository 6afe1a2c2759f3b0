package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

// coverage is k of the stated 95 % uncertainties, the same as of the results
// [JCGM 100 6.3.3].
const coverage = uncertainty.Coverage

// part gives the standard uncertainty of a channel at its value. Uncertainties
// are of the reading against its own reference: that of the port comes apart.
func (c *Computer) part(scan *monitor.Scan, i int) uncertainty.Part {
	if i < 0 {
		return uncertainty.Part{Systematic: math.NaN()}
	}
	ch := &c.cfg.Channels[i]
	if !ch.Uncertainty.Stated {
		return uncertainty.Part{Systematic: math.NaN()}
	}
	v := scan.Value[i]
	if ch.Reference == calib.Gauge {
		v -= scan.Value[ch.Port]
	}
	return uncertainty.Part{
		Systematic: ch.Uncertainty.U95(v, ch.Low, ch.High) / coverage,
		Random:     ch.Uncertainty.Random / coverage,
	}
}

// meanPart gives the standard uncertainty of the mean of a group. Probes of a
// group are calibrated against one standard and read by one scanner, so their
// systematic errors are taken as one and the same, which does not average out.
func (c *Computer) meanPart(scan *monitor.Scan, group []int) uncertainty.Part {
	n, systematic, random := 0.0, 0.0, 0.0
	for _, i := range group {
		if !scan.Quality[i].Usable() {
			continue
		}
		p := c.part(scan, i)
		n++
		systematic += p.Systematic
		random += p.Random * p.Random
	}
	if n == 0 {
		return uncertainty.Part{Systematic: math.NaN()}
	}
	return uncertainty.Part{Systematic: systematic / n, Random: math.Sqrt(random) / n}
}

// relative gives a stated relative 95 % uncertainty as a standard one; 0 was not
// stated.
func relative(u95 float64) uncertainty.Part {
	if u95 <= 0 {
		return uncertainty.Part{Systematic: math.NaN()}
	}
	return uncertainty.Part{Systematic: u95 / coverage}
}

// uncertainties fills the inputs of the propagation for this scan.
func (c *Computer) uncertainties(scan *monitor.Scan, p *monitor.OperatingPoint) (u uncertainty.Inputs) {
	st, n := &c.cfg.Stations, &c.cfg.Nozzle
	u[uncertainty.TotalPressure] = c.meanPart(scan, st.P7)
	back := st.ExitPlane
	if p.BackFrom != monitor.SourceExitPlane {
		back = st.Barometer
		depression := st.DepressionU / coverage
		if depression == 0 {
			depression = math.NaN() // a depression that was entered without saying how well it is known
		}
		u[uncertainty.BackPressure] = uncertainty.Part{Systematic: depression}
	}
	// A port that both sides refer to is one error, not two.
	rake := c.port(st.P7[0])
	for i := back; i >= 0; i = c.port(i) {
		in := uncertainty.BackPressure
		if c.refersTo(rake, i) {
			in = uncertainty.CommonPressure
		}
		u[in] = add(u[in], c.part(scan, i))
	}
	for i := rake; i >= 0; i = c.port(i) {
		if !c.refersTo(back, i) {
			u[uncertainty.TotalPressure] = add(u[uncertainty.TotalPressure], c.part(scan, i))
		}
	}
	u[uncertainty.TotalTemperature] = c.temperaturePart(scan, p)
	f := p.V[monitor.FuelAirRatio]
	switch fuel := p.V[monitor.FuelFlow]; {
	case f == 0:
	case fuel > 0:
		wf := c.part(scan, st.FuelFlow)
		u[uncertainty.FuelAirRatio] = uncertainty.Part{Systematic: f / fuel * wf.Systematic, Random: f / fuel * wf.Random}
	default:
		u[uncertainty.FuelAirRatio] = uncertainty.Part{Systematic: math.NaN()}
	}
	if p.Warnings&monitor.WarnAssumedHumidity != 0 {
		// Dry air was assumed: the truth lies between dry and a saturated 30 °C.
		u[uncertainty.HumidityRatio] = uncertainty.Part{Systematic: 0.027 / math.Sqrt(12)}
	} else if rh := scan.Value[st.Humidity]; rh > 0 {
		h := c.part(scan, st.Humidity)
		w := p.V[monitor.HumidityRatio] / rh
		u[uncertainty.HumidityRatio] = uncertainty.Part{Systematic: w * h.Systematic, Random: w * h.Random}
	}
	u[uncertainty.ThroatArea] = relative(n.AreaU95)
	u[uncertainty.Discharge] = relative(n.DischargeU95)
	u[uncertainty.Thrust] = relative(n.ThrustU95)
	u[uncertainty.ChokeNPR] = uncertainty.Part{Systematic: n.ChokeNPRU95 / coverage}
	return u
}

// temperaturePart is the standard uncertainty of the nozzle gas temperature.
func (c *Computer) temperaturePart(scan *monitor.Scan, p *monitor.OperatingPoint) uncertainty.Part {
	st := &c.cfg.Stations
	if p.TemperatureBy == monitor.SourceRake {
		return c.meanPart(scan, st.T7)
	}
	egt := c.meanPart(scan, st.EGT)
	factor := st.T7FactorU95 / coverage * p.V[monitor.EGTIndicated]
	if factor == 0 {
		factor = math.NaN()
	}
	return uncertainty.Part{Systematic: math.Hypot(st.T7FromEGT*egt.Systematic, factor), Random: st.T7FromEGT * egt.Random}
}

func add(a, b uncertainty.Part) uncertainty.Part {
	return uncertainty.Part{Systematic: math.Hypot(a.Systematic, b.Systematic), Random: math.Hypot(a.Random, b.Random)}
}

// port gives the channel that channel i is gauge against, -1 for none. The probes
// of a rake share theirs.
func (c *Computer) port(i int) int {
	if c.cfg.Channels[i].Reference != calib.Gauge {
		return -1
	}
	return c.cfg.Channels[i].Port
}

// refersTo tells whether channel i is port, or gauge against it, if need be over
// other ports.
func (c *Computer) refersTo(i, port int) bool {
	for i >= 0 && i != port {
		i = c.port(i)
	}
	return i == port
}

// doubt carries the uncertainties through the nozzle into the operating point.
func (c *Computer) doubt(scan *monitor.Scan, p *monitor.OperatingPoint, g *gas.Mixture, in nozzle.Inputs) {
	u := c.uncertainties(scan, p)
	point := uncertainty.Point{
		Nozzle: c.nozzle, Inputs: in, Gas: g, Fuel: c.cfg.Fuel,
		FuelAirRatio: p.V[monitor.FuelAirRatio], HumidityRatio: p.V[monitor.HumidityRatio],
	}
	if c.cfg.Gamma > 0 {
		point.Fuel = gas.Fuel{}
	}
	r, err := uncertainty.Evaluate(&point, &u)
	if err != nil {
		return // a step out of the gas data: the value stands without an uncertainty
	}
	v := &p.V
	v[monitor.NPRU95] = r.Outputs[uncertainty.NPR].U95
	margin := r.Outputs[uncertainty.MarginPercent]
	v[monitor.ChokeMarginPercentU95] = margin.U95
	v[monitor.ChokeMarginPercentLow95], v[monitor.ChokeMarginPercentHigh95] = margin.Low, margin.High
	v[monitor.MassFlowU95] = r.Outputs[uncertainty.MassFlow].U95
	v[monitor.GrossThrustU95] = r.Outputs[uncertainty.GrossThrust].U95
	v[monitor.PChoked] = r.PChoked
	p.ChokeMarginal = r.PChoked > 0.025 && r.PChoked < 0.975
}

// independentU95 gives the 95 % uncertainty of air plus fuel flow: the meter's
// coefficient, its differential pressure by half the difference of the flow at
// dp ± u [JCGM 100 5.1.3 note 2], inlet pressure and temperature, and the fuel
// flow.
func (c *Computer) independentU95(scan *monitor.Scan, air *gas.Mixture, in nozzle.Inputs, w2 float64) float64 {
	st := &c.cfg.Stations
	total := func(i int) float64 {
		p := c.part(scan, i)
		return coverage * math.Hypot(p.Systematic, p.Random)
	}
	if c.cfg.Bellmouth.U95 <= 0 {
		return math.NaN()
	}
	p0, dp := float64(in.TotalPressure), float64(in.TotalPressure-in.BackPressure)
	u := total(st.Bellmouth)
	high := in
	high.BackPressure = unit.Absolute(p0 - dp - u)
	low := in
	low.BackPressure = unit.Absolute(p0 - max(dp-u, 0))
	h, errHigh := c.bellmouth.Evaluate(air, high)
	l, errLow := c.bellmouth.Evaluate(air, low)
	if errHigh != nil || errLow != nil {
		return math.NaN()
	}
	inlet, pressure := st.InletP, 0.0
	if inlet < 0 {
		inlet = st.Barometer
	}
	for i := inlet; i >= 0; i = c.port(i) {
		pressure = math.Hypot(pressure, total(i))
	}
	sum := 0.0
	for _, part := range [...]float64{
		c.cfg.Bellmouth.U95 * w2, (h.MassFlow - l.MassFlow) / 2, w2 / 2 * pressure / p0,
		w2 / 2 * total(st.InletT) / in.TotalTemperature, total(st.FuelFlow),
	} {
		sum += part * part
	}
	return math.Sqrt(sum)
}
