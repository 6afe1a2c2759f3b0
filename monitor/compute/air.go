package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

// air gives the humid air at the inlet and notes its humidity.
func (c *Computer) air(scan *monitor.Scan, p *monitor.OperatingPoint) gas.Mixture {
	war, known := c.humidity(scan, p.V[monitor.Barometer])
	if !known {
		p.Warnings |= monitor.WarnAssumedHumidity
	}
	p.V[monitor.HumidityRatio] = war
	return c.mixture(0, war)
}

// humidity gives the humidity ratio at pressure p, 0 where it is not measured.
func (c *Computer) humidity(scan *monitor.Scan, p float64) (war float64, known bool) {
	st := &c.cfg.Stations
	h, t := c.channel(scan, st.Humidity), c.channel(scan, st.AmbientT)
	if !(p > 0) || h != h || !st.DewPoint && t != t {
		return 0, false
	}
	w, err := 0.0, error(nil)
	if st.DewPoint {
		w, err = gas.HumidityRatioFromDewPoint(h, p)
	} else {
		w, err = gas.HumidityRatio(h, t, p)
	}
	if err != nil {
		return 0, false
	}
	return w, true
}

// term is one independent error behind the metered flow: what it is of, its standard
// uncertainty, and what metered flow and the inputs of the nozzle's flow do per unit of it.
type term struct {
	name    string // of its line in a budget
	channel int    // -1 = what says what
	what    string
	u       uncertainty.Part
	flow    float64 // kg/s
	moves   [uncertainty.NumInputs]float64
}

// meter is the flow by the meters, kg/s: W2 + Wf + water − bleed, with the terms of its
// uncertainty, those of W2 first.
type meter struct {
	w2, water, bleed float64 // water and bleed are 0 in a rig without
	metered          float64 // the sum
	kept             float64 // part of W2 that a stated share of bleed leaves
	air              int     // terms of W2
	terms            []term
}

// spread is the root of the sum of squares of terms in the metered flow.
func spread(terms []term, of func(uncertainty.Part) float64) float64 {
	sum := 0.0
	for i := range terms {
		sum += square(terms[i].flow * of(terms[i].u))
	}
	return math.Sqrt(sum)
}

func systematicOf(p uncertainty.Part) float64 { return p.Systematic }

func randomOf(p uncertainty.Part) float64 { return p.Random }

// enter adds a term.
func (m *meter) enter(name string, channel int, what string, u uncertainty.Part, flow float64) *term {
	m.terms = append(m.terms, term{name: name, channel: channel, what: what, u: u, flow: flow})
	return &m.terms[len(m.terms)-1]
}

// The lines of the metered flow in a budget.
const (
	byAir   = "air flow"
	byFuel  = "fuel flow"
	byWater = "water flow"
	byBleed = "bleed flow"
)

// meterFlow computes the metered flow: that through the bellmouth, of the fuel, of the
// water that is injected, less the air that is bled overboard.
func (c *Computer) meterFlow(scan *monitor.Scan, p *monitor.OperatingPoint, air *gas.Mixture) {
	st, m := &c.cfg.Stations, &c.flow
	*m = meter{w2: math.NaN(), kept: 1 - st.BleedShare, terms: m.terms[:0]}
	p.V[monitor.FuelFlow] = c.channel(scan, st.FuelFlow)
	c.meterAir(scan, p, air)
	m.air = len(m.terms)
	if st.FuelFlow >= 0 {
		m.enter(byFuel, st.FuelFlow, "", c.part(scan, st.FuelFlow), 1)
	}
	if st.WaterFlow >= 0 {
		m.water = c.channel(scan, st.WaterFlow)
		p.V[monitor.WaterFlow] = m.water
		m.enter(byWater, st.WaterFlow, "", c.part(scan, st.WaterFlow), 1)
	}
	switch {
	case st.BleedFlow >= 0:
		m.bleed = c.channel(scan, st.BleedFlow)
		m.enter(byBleed, st.BleedFlow, "", c.part(scan, st.BleedFlow), -1)
	case st.BleedShare > 0:
		m.bleed = st.BleedShare * m.w2
		m.enter(byBleed, -1, "share of bleed", stated(st.BleedShareU95), -m.w2)
	default:
		return
	}
	p.V[monitor.BleedFlow] = m.bleed
}

// meterAir computes the flow through the bellmouth, W2, and its uncertainty: the
// meter's coefficient, its differential pressure by half the difference of the flow
// at dp ± u [JCGM 100 5.1.3 note 2], pressure and temperature at the inlet. A pressure
// that rake or back pressure refer to as well is one error of both flows.
func (c *Computer) meterAir(scan *monitor.Scan, p *monitor.OperatingPoint, air *gas.Mixture) {
	st, m := &c.cfg.Stations, &c.flow
	dp, t := c.channel(scan, st.Bellmouth), c.channel(scan, st.InletT)
	p0 := p.V[monitor.Barometer]
	if st.InletP >= 0 {
		p0 = c.channel(scan, st.InletP)
	}
	if c.bellmouth == nil || dp != dp || t != t || !(p0 > 0) {
		return
	}
	line, err := c.bellmouth.Line(air, nozzle.Inputs{TotalTemperature: t})
	if err != nil {
		return
	}
	at := func(dp float64) float64 {
		if !(dp > 0) {
			return 0
		}
		r, err := c.bellmouth.On(&line, unit.Absolute(p0), unit.Absolute(p0-dp))
		if err != nil {
			return math.NaN()
		}
		return r.MassFlow
	}
	m.w2 = at(dp)
	p.V[monitor.AirFlow] = m.w2
	d := c.part(scan, st.Bellmouth)
	step := d.Total()
	if !(step > 0) {
		step = 1e-3 * dp
	}
	slope := 0.0 // ∂W/∂dp
	if step > 0 {
		slope = (at(dp+step) - at(dp-step)) / (2 * step)
	}
	perPressure := (m.w2 - dp*slope) / p0 // ∂W/∂p0: W/p0 depends on dp/p0 alone
	m.enter(byAir, -1, "bellmouth", stated(c.cfg.Bellmouth.U95), m.kept*m.w2)
	m.enter(byAir, st.Bellmouth, "", d, m.kept*slope)
	m.enter(byAir, st.InletT, "", c.part(scan, st.InletT), -m.kept*m.w2/2/t)
	inlet := st.InletP
	if inlet < 0 {
		inlet = st.Barometer
	}
	rake, back := c.references(p)
	for i := inlet; i >= 0; i = c.port(i) {
		one := m.enter(byAir, i, "", c.part(scan, i), m.kept*perPressure)
		switch ahead, behind := c.refersTo(rake, i), c.refersTo(back, i); {
		case ahead && behind:
			one.moves[uncertainty.CommonPressure] = 1
		case ahead:
			one.moves[uncertainty.TotalPressure] = 1
		case behind:
			one.moves[uncertainty.BackPressure] = 1
		}
	}
}

// departs is the part of the flow by which the balance of a sound engine and sound
// meters may depart from its baseline beside the noise.
const departs = 0.005

// baseline is how the balance residual is learned and judged.
func baseline() *steady.Baseline {
	return &steady.Baseline{Memory: 600 * second, Learn: 60 * second, Smooth: 5 * second, Hold: 3 * second}
}

// balance compares the metered flow with that of the nozzle: the evidence that does not
// rest on the nozzle. What both are off by, as the barometer, counts once. The effective
// area is the area with which the nozzle would pass the metered flow, A8 W/W8 (see
// steady.EffectiveArea).
func (c *Computer) balance(s *State, p *monitor.OperatingPoint) {
	v := &p.V
	w := c.flow.w2 + v[monitor.FuelFlow] + c.flow.water - c.flow.bleed
	c.flow.metered = w
	v[monitor.IndependentFlow] = w
	v[monitor.IndependentFlowU95] = math.NaN()
	if w == w {
		v[monitor.IndependentFlowU95] = uncertainty.Coverage * spread(c.flow.terms, uncertainty.Part.Total)
	}
	w8 := v[monitor.MassFlow]
	v[monitor.FlowBalance] = w - w8
	moving := p.Choke == monitor.Choked || p.Choke == monitor.Unchoked
	if moving {
		v[monitor.IndependentFlowParameter] = w * math.Sqrt(v[monitor.GasConstant]*v[monitor.TotalTemperature]) / (v[monitor.ThroatArea] * v[monitor.TotalPressure])
	}
	c.balanced = c.last != 0 && w == w && moving
	if !c.balanced {
		c.judge(s, p, math.NaN(), math.NaN())
		return
	}
	balance, area := c.apart(w, w8, uncertainty.Part.Total)
	v[monitor.FlowBalanceU95] = uncertainty.Coverage * balance
	v[monitor.EffectiveArea] = v[monitor.ThroatArea] * w / w8
	v[monitor.EffectiveAreaU95] = v[monitor.EffectiveArea] * uncertainty.Coverage * area
	if p.Steady && p.Choke == monitor.Choked {
		_, systematic := c.apart(w, w8, systematicOf)
		s.Area.add(p.T, v[monitor.EffectiveArea], systematic)
	}
	random, _ := c.apart(w, w8, randomOf)
	c.judge(s, p, v[monitor.FlowBalance]/w8, math.Hypot(departs, uncertainty.Coverage*random/w8))
}

// apart gives the standard uncertainties of W − W8, kg/s, and of W/W8 for a fixed throat
// area, relative. With a of each term in W and b of the same in W8, and what is left in
// W8, an error that moves both flows counts once:
//
//	u²(W − W8) = Σ (a − b)² + rest²,  u²(W/W8) = Σ (a/W − b/W8)² + (rest/W8)²
func (c *Computer) apart(w, w8 float64, of func(uncertainty.Part) float64) (balance, area float64) {
	slopes := c.slopes()
	rests := c.rests(of)
	for k := range c.flow.terms {
		t := &c.flow.terms[k]
		through, u := t.through(&slopes), of(t.u)
		balance += square((t.flow - through) * u)
		area += square((t.flow/w - through/w8) * u)
	}
	for i, slope := range slopes {
		if slope == 0 {
			continue
		}
		rest := slope * slope * rests[i]
		balance += rest
		if uncertainty.Input(i) != uncertainty.ThroatArea {
			area += rest / (w8 * w8)
		}
	}
	return math.Sqrt(balance), math.Sqrt(area)
}

// rests gives the variance that each input of the nozzle's flow has beside the terms of
// the metered flow, in its unit squared.
func (c *Computer) rests(of func(uncertainty.Part) float64) (rests [uncertainty.NumInputs]float64) {
	for i := range rests {
		rests[i] = square(of(c.doubts[i]))
	}
	for k := range c.flow.terms {
		t := &c.flow.terms[k]
		for i, by := range t.moves {
			if by != 0 {
				rests[i] -= square(by * of(t.u))
			}
		}
	}
	for i, rest := range rests {
		if rest < 0 { // rounding
			rests[i] = 0
		}
	}
	return rests
}

// slopes gives ∂W8/∂x of the inputs of the nozzle's flow; 0 for one without uncertainty.
func (c *Computer) slopes() (slopes [uncertainty.NumInputs]float64) {
	e := &c.result.Outputs[uncertainty.MassFlow]
	for i, by := range e.Contribution {
		if by != 0 {
			slopes[i] = by / c.doubts[i].Total()
		}
	}
	return slopes
}

// through gives what W8 does per unit of the term, kg/s.
func (t *term) through(slopes *[uncertainty.NumInputs]float64) float64 {
	sum := 0.0
	for i, by := range t.moves {
		if by != 0 {
			sum += by * slopes[i]
		}
	}
	return sum
}

// judge holds the residual, as a part of W8, against the engine's baseline.
func (c *Computer) judge(s *State, p *monitor.OperatingPoint, residual, u95 float64) {
	if c.bellmouth == nil {
		return
	}
	d := baseline().Step(&s.Balance, p.T, residual, u95, p.Steady)
	p.V[monitor.FlowBalanceBaseline] = d.Baseline * p.V[monitor.MassFlow]
	if d.Flagged {
		p.Warnings |= monitor.WarnFlowBalance
	}
}
