package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/uncertainty"
)

// coverage is k of the stated 95 % uncertainties, the same as of the results
// [JCGM 100 6.3.3].
const coverage = uncertainty.Coverage

// dryToWet is the standard uncertainty of a humidity ratio that is not measured: the
// truth lies between dry air and 0.027, saturated at 30 °C: 0.027/√12 [JCGM 100 4.3.7].
const dryToWet = 0.0077942

func unstated() uncertainty.Part { return uncertainty.Part{Systematic: math.NaN()} }

func scaled(p uncertainty.Part, by float64) uncertainty.Part {
	return uncertainty.Part{Systematic: p.Systematic * math.Abs(by), Random: p.Random * math.Abs(by)}
}

func add(a, b uncertainty.Part) uncertainty.Part {
	return uncertainty.Part{Systematic: math.Hypot(a.Systematic, b.Systematic), Random: math.Hypot(a.Random, b.Random)}
}

func systematic(u float64) uncertainty.Part { return uncertainty.Part{Systematic: u} }

// stated gives a 95 % uncertainty of the configuration as a standard one; 0 was not
// stated.
func stated(u95 float64) uncertainty.Part {
	if u95 <= 0 {
		return unstated()
	}
	return systematic(u95 / coverage)
}

// part gives the standard uncertainty of a channel at its value. Uncertainties
// are of the reading against its own reference: that of the port comes apart.
func (c *Computer) part(scan *monitor.Scan, i int) uncertainty.Part {
	if i < 0 {
		return unstated()
	}
	return c.partAt(scan, i, scan.Value[i])
}

// partAt gives the standard uncertainty that a channel has at a value.
func (c *Computer) partAt(scan *monitor.Scan, i int, v float64) uncertainty.Part {
	ch := &c.cfg.Channels[i]
	if !ch.Uncertainty.Stated {
		return unstated()
	}
	if ch.Reference == calib.Gauge {
		v -= scan.Value[ch.Port]
	}
	return uncertainty.Part{
		Systematic: ch.Uncertainty.U95(v, ch.Low, ch.High) / coverage,
		Random:     ch.Uncertainty.Random / coverage,
	}
}

// part is what a channel, or something else, adds to the variance of an input.
type part struct {
	input    uncertainty.Input
	channel  int // -1 = what says what
	what     string
	variance float64
}

// put adds an independent component to an input.
func (c *Computer) put(u *uncertainty.Inputs, in uncertainty.Input, channel int, what string, p uncertainty.Part) {
	u[in] = add(u[in], p)
	c.parts = append(c.parts, part{in, channel, what, square(p.Systematic) + square(p.Random)})
}

// groupPart gives the standard uncertainty of the mean of a group of probes. They are
// calibrated against one standard and read by one scanner, so their systematic errors
// are taken as one and the same, which does not average out. With a value for all,
// those that are lost count too.
func (c *Computer) groupPart(scan *monitor.Scan, g *group, all float64) uncertainty.Part {
	weights, common, random := 0.0, 0.0, 0.0
	for k, i := range g.channels {
		p, in := c.member(scan, i, all)
		if !in {
			continue
		}
		w := g.weight(k)
		weights += w
		common += w * p.Systematic
		random += square(w * p.Random)
	}
	if weights == 0 {
		return unstated()
	}
	return uncertainty.Part{Systematic: common / weights, Random: math.Sqrt(random) / weights}
}

// member gives the part of a channel of a group, at the value all if there is one.
func (c *Computer) member(scan *monitor.Scan, i int, all float64) (p uncertainty.Part, in bool) {
	if all == all {
		return c.partAt(scan, i, all), true
	}
	if !scan.Quality[i].Usable() {
		return p, false
	}
	return c.part(scan, i), true
}

// putGroup adds the mean of a group to an input, each channel with its share, and the
// sampling error of their places. scale is that of the mean in the input.
func (c *Computer) putGroup(scan *monitor.Scan, u *uncertainty.Inputs, in uncertainty.Input, g *group, scale, all float64) {
	mean := scaled(c.groupPart(scan, g, all), scale)
	u[in] = add(u[in], mean)
	weights := 0.0
	for k, i := range g.channels {
		if _, in := c.member(scan, i, all); in {
			weights += g.weight(k)
		}
	}
	for k, i := range g.channels {
		if p, ok := c.member(scan, i, all); ok {
			w := scale * g.weight(k) / weights
			c.parts = append(c.parts, part{in, i, "", w*p.Systematic*mean.Systematic + square(w*p.Random)})
		}
	}
	// One probe has no pattern: what it misses of the profile is in its own uncertainty.
	if len(g.channels) > 1 || g.watch.Sampling > 0 {
		c.put(u, in, -1, "sampling by the places of the probes", systematic(scale*g.sampling))
	}
}

// headKnown is how well the dynamic head at the wall taps follows its square law, as a
// part of it, standard.
const headKnown = 0.05

// putPressure adds what p7 rests on.
func (c *Computer) putPressure(s *State, scan *monitor.Scan, p *monitor.OperatingPoint, u *uncertainty.Inputs) {
	if !c.head.in {
		c.putGroup(scan, u, uncertainty.TotalPressure, &c.p7, 1, math.NaN())
		return
	}
	// The ratio was learned against the rake, with its errors.
	p7 := p.V[monitor.RakePressure]
	c.putGroup(scan, u, uncertainty.TotalPressure, &c.p7, 1, p7)
	n := float64(len(c.cfg.Stations.WallStatic))
	for _, i := range c.cfg.Stations.WallStatic {
		if scan.Quality[i].Usable() {
			c.put(u, uncertainty.TotalPressure, i, "", scaled(c.part(scan, i), p7/c.head.substitute/n))
		}
	}
	head := s.Head.Value * s.HeadNow
	c.put(u, uncertainty.TotalPressure, -1, "ratio of rake to wall static pressure",
		systematic(c.head.substitute*math.Hypot(headKnown*head, s.Head.Scale*s.HeadNow)))
}

// references gives the port of what p7 is taken from, and the channel of the back
// pressure; -1 for none.
func (c *Computer) references(p *monitor.OperatingPoint) (rake, back int) {
	st := &c.cfg.Stations
	rake, back = -1, st.ExitPlane
	if p.BackFrom != monitor.SourceExitPlane {
		back = st.Barometer
	}
	taps := st.P7
	if c.head.in {
		taps = st.WallStatic
	}
	if len(taps) > 0 {
		rake = c.port(taps[0])
	}
	return rake, back
}

// putPorts adds the back pressure, and what rake and back pressure are measured
// against. A port that both refer to is one error, not two.
func (c *Computer) putPorts(scan *monitor.Scan, p *monitor.OperatingPoint, u *uncertainty.Inputs) {
	if p.BackFrom != monitor.SourceExitPlane {
		c.put(u, uncertainty.BackPressure, -1, "cell depression", stated(c.cfg.Stations.DepressionU))
	}
	rake, back := c.references(p)
	for i := back; i >= 0; i = c.port(i) {
		in := uncertainty.BackPressure
		if c.refersTo(rake, i) {
			in = uncertainty.CommonPressure
		}
		c.put(u, in, i, "", c.part(scan, i))
	}
	for i := rake; i >= 0; i = c.port(i) {
		if !c.refersTo(back, i) {
			c.put(u, uncertainty.TotalPressure, i, "", c.part(scan, i))
		}
	}
}

// putTemperature adds what T7 rests on. still is the static temperature at the probes.
func (c *Computer) putTemperature(scan *monitor.Scan, p *monitor.OperatingPoint, u *uncertainty.Inputs, still float64) {
	st := &c.cfg.Stations
	const in = uncertainty.TotalTemperature
	//exhaustive:ignore
	switch p.TemperatureBy {
	case monitor.SourceRake:
		c.putGroup(scan, u, in, &c.t7, 1, math.NaN())
		if c.cfg.Recovery.Factor > 0 {
			c.put(u, in, -1, "recovery factor", scaled(stated(c.cfg.Recovery.U95), p.V[monitor.TotalTemperature]-still))
		}
	case monitor.SourceHeatBalance:
		c.put(u, in, -1, "heat balance", c.gas.part)
	default:
		c.putGroup(scan, u, in, &c.egt, st.T7FromEGT*c.gas.ratio, math.NaN())
		c.put(u, in, -1, "factor from EGT to T7", scaled(stated(st.T7FactorU95), p.V[monitor.EGTIndicated]))
	}
}

// putHumidity adds what the water in the gas rests on: humidity and injected water.
func (c *Computer) putHumidity(scan *monitor.Scan, p *monitor.OperatingPoint, u *uncertainty.Inputs) {
	st := &c.cfg.Stations
	const in = uncertainty.HumidityRatio
	injected, water := p.V[monitor.WaterAirRatio]-p.V[monitor.HumidityRatio], c.flow.water
	switch {
	case p.Warnings&monitor.WarnAssumedWater != 0:
		c.put(u, in, -1, "water flow not measured", unstated())
	case injected > 0:
		for k := range c.flow.terms {
			if t := &c.flow.terms[k]; t.name == byWater {
				t.moves[in] = injected / water
				c.put(u, in, st.WaterFlow, "", scaled(t.u, t.moves[in]))
			}
		}
	}
	if p.Warnings&monitor.WarnAssumedHumidity != 0 {
		c.put(u, in, -1, "humidity not measured", systematic(dryToWet))
		return
	}
	h, war := scan.Value[st.Humidity], p.V[monitor.HumidityRatio]
	slope := war / h
	if st.DewPoint {
		// ln psat over T is nearly straight within a kelvin.
		warmer, err := gas.HumidityRatioFromDewPoint(h+1, p.V[monitor.Barometer])
		if err != nil {
			warmer = math.NaN()
		}
		slope = warmer - war
	}
	if war > 0 {
		c.put(u, in, st.Humidity, "", scaled(c.part(scan, st.Humidity), slope))
	}
}

// uncertainties fills the inputs of the propagation for this scan, and what is behind
// them.
func (c *Computer) uncertainties(s *State, scan *monitor.Scan, p *monitor.OperatingPoint, still float64) (u uncertainty.Inputs) {
	st, n := &c.cfg.Stations, &c.cfg.Nozzle
	c.parts = c.parts[:0]
	c.putPressure(s, scan, p, &u)
	c.putPorts(scan, p, &u)
	c.putTemperature(scan, p, &u, still)
	f := p.V[monitor.FuelAirRatio]
	switch fuel := p.V[monitor.FuelFlow]; {
	case f == 0:
	case fuel > 0:
		for k := range c.flow.terms {
			if t := &c.flow.terms[k]; t.name == byFuel {
				t.moves[uncertainty.FuelAirRatio] = f / fuel
				c.put(&u, uncertainty.FuelAirRatio, st.FuelFlow, "", scaled(t.u, t.moves[uncertainty.FuelAirRatio]))
			}
		}
	default:
		c.put(&u, uncertainty.FuelAirRatio, -1, "fuel flow not measured", unstated())
	}
	c.putHumidity(scan, p, &u)
	c.put(&u, uncertainty.ThroatArea, -1, "throat area", stated(n.AreaU95))
	for _, i := range st.ThroatArea {
		if scan.Quality[i].Usable() {
			c.put(&u, uncertainty.ThroatArea, i, "", scaled(c.part(scan, i), 1/scan.Value[i]/float64(len(st.ThroatArea))))
		}
	}
	c.put(&u, uncertainty.Discharge, -1, "discharge coefficient", stated(n.DischargeU95))
	c.put(&u, uncertainty.Thrust, -1, "thrust coefficient", stated(n.ThrustU95))
	c.put(&u, uncertainty.ChokeNPR, -1, "choke npr", systematic(n.ChokeNPRU95/coverage))
	return u
}

// doubt carries the uncertainties through the nozzle into the operating point.
func (c *Computer) doubt(s *State, scan *monitor.Scan, p *monitor.OperatingPoint, g *gas.Mixture, line *nozzle.Line, in nozzle.Inputs, still float64) {
	c.doubts = c.uncertainties(s, scan, p, still)
	u := &c.doubts
	point := uncertainty.Point{
		Nozzle: c.nozzle, Inputs: in, Gas: g, Fuel: c.cfg.Fuel, Line: line,
		FuelAirRatio: p.V[monitor.FuelAirRatio], HumidityRatio: p.V[monitor.WaterAirRatio],
	}
	if c.cfg.Gamma > 0 {
		point.Fuel = gas.Fuel{}
	}
	var err error
	if c.result, err = uncertainty.Evaluate(&point, u); err != nil {
		return // a step out of the gas data: the value stands without an uncertainty
	}
	c.last, c.scan = p.T, p.Scan
	r, v := &c.result, &p.V
	v[monitor.NPRU95] = r.Outputs[uncertainty.NPR].U95
	v[monitor.ChokeMarginPercentU95] = r.Outputs[uncertainty.MarginPercent].U95
	v[monitor.MassFlowU95] = r.Outputs[uncertainty.MassFlow].U95
	v[monitor.GrossThrustU95] = r.Outputs[uncertainty.GrossThrust].U95
	for _, o := range [...]struct {
		from uncertainty.Output
		low  monitor.Quantity
	}{
		{uncertainty.MarginPercent, monitor.ChokeMarginPercentLow95},
		{uncertainty.ThroatMach, monitor.ThroatMachLow95},
		{uncertainty.ThroatPressure, monitor.ThroatPressureLow95},
		{uncertainty.ThroatTemperature, monitor.ThroatTemperatureLow95},
		{uncertainty.ExitVelocity, monitor.ExitVelocityLow95},
	} {
		v[o.low], v[o.low+1] = r.Outputs[o.from].Low, r.Outputs[o.from].High
	}
	v[monitor.PChoked] = r.PChoked
	p.ChokeMarginal = r.PChoked > 0.025 && r.PChoked < 0.975
}
