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

// meter is the air flow at the inlet with its standard uncertainty, kg/s.
type meter struct {
	w2        float64
	part      uncertainty.Part // all but the barometer's
	barometer uncertainty.Part // what the barometer's adds, positive with it
	fuel      uncertainty.Part // of the fuel flow
}

// total gives the variance of the air flow.
func (m *meter) total() float64 {
	a, b := m.part.Total(), m.barometer.Total()
	return a*a + b*b
}

// meterAir computes the flow through the bellmouth, W2, and its uncertainty: the
// meter's coefficient, its differential pressure by half the difference of the flow
// at dp ± u [JCGM 100 5.1.3 note 2], pressure and temperature at the inlet.
func (c *Computer) meterAir(scan *monitor.Scan, p *monitor.OperatingPoint, air *gas.Mixture) {
	st := &c.cfg.Stations
	nan := math.NaN()
	c.flow = meter{w2: nan, part: uncertainty.Part{Systematic: nan}, fuel: c.part(scan, st.FuelFlow)}
	p.V[monitor.FuelFlow] = c.channel(scan, st.FuelFlow)
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
			return nan
		}
		return r.MassFlow
	}
	w2 := at(dp)
	if w2 != w2 {
		return
	}
	c.flow.w2 = w2
	p.V[monitor.AirFlow] = w2
	d := c.part(scan, st.Bellmouth)
	step := d.Total()
	if !(step > 0) {
		step = 1e-3 * dp
	}
	slope := 0.0 // ∂W/∂dp
	if step > 0 {
		slope = (at(dp+step) - at(dp-step)) / (2 * step)
	}
	perPressure := (w2 - dp*slope) / p0 // ∂W/∂p0: W/p0 depends on dp/p0 alone
	coefficient := stated(c.cfg.Bellmouth.U95)
	flow := scaled(coefficient, w2)
	flow = add(flow, scaled(d, slope))
	flow = add(flow, scaled(c.part(scan, st.InletT), w2/2/t))
	inlet := st.InletP
	if inlet < 0 {
		inlet = st.Barometer
	}
	for i := inlet; i >= 0; i = c.port(i) {
		if pressure := scaled(c.part(scan, i), perPressure); i == st.Barometer {
			c.flow.barometer = pressure
		} else {
			flow = add(flow, pressure)
		}
	}
	c.flow.part = flow
}

// departs is the part of the flow by which the balance of a sound engine and sound
// meters may depart from its baseline beside the noise.
const departs = 0.005

// baseline is how the balance residual is learned and judged.
func baseline() *steady.Baseline {
	return &steady.Baseline{Memory: 600 * second, Learn: 60 * second, Smooth: 5 * second, Hold: 3 * second}
}

// balance compares the flow from bellmouth and fuel with that of the nozzle: the
// evidence that does not rest on the nozzle. Both are off by the same error of the
// barometer, which counts once. The effective area is the area with which the nozzle
// would pass the independent flow, A8 W/W8 (see steady.EffectiveArea).
func (c *Computer) balance(s *State, p *monitor.OperatingPoint) {
	v := &p.V
	w := c.flow.w2 + v[monitor.FuelFlow]
	fuel := c.flow.fuel
	v[monitor.IndependentFlow] = w
	v[monitor.IndependentFlowU95] = uncertainty.Coverage * math.Sqrt(c.flow.total()+fuel.Total()*fuel.Total())
	w8 := v[monitor.MassFlow]
	v[monitor.FlowBalance] = w - w8
	moving := p.Choke == monitor.Choked || p.Choke == monitor.Unchoked
	if moving {
		v[monitor.IndependentFlowParameter] = w * math.Sqrt(v[monitor.GasConstant]*v[monitor.TotalTemperature]) / (v[monitor.ThroatArea] * v[monitor.TotalPressure])
	}
	if c.last == 0 || w != w || !moving {
		c.judge(s, p, math.NaN(), math.NaN())
		return
	}
	through := &c.result.Outputs[uncertainty.MassFlow]
	shared := through.Contribution[uncertainty.CommonPressure]
	area := through.Contribution[uncertainty.ThroatArea]
	own := square(through.Systematic) + square(through.Random) - square(shared)
	apart := square(c.flow.part.Total()) + square(fuel.Total())
	barometer := c.flow.barometer.Total()
	v[monitor.FlowBalanceU95] = uncertainty.Coverage * math.Sqrt(own+apart+square(barometer-shared))
	v[monitor.EffectiveArea] = v[monitor.ThroatArea] * w / w8
	v[monitor.EffectiveAreaU95] = v[monitor.EffectiveArea] * uncertainty.Coverage *
		math.Sqrt((own-square(area))/square(w8)+apart/square(w)+square(barometer/w-shared/w8))

	if p.Steady && p.Choke == monitor.Choked {
		common := math.Hypot(math.Hypot(c.flow.part.Systematic, c.flow.fuel.Systematic)/w, math.Sqrt(max(0, square(through.Systematic)-square(area)))/w8)
		s.Area.add(p.T, v[monitor.EffectiveArea], common)
	}
	random := math.Sqrt(square(through.Random) + square(c.flow.part.Random) + square(fuel.Random))
	c.judge(s, p, v[monitor.FlowBalance]/w8, math.Hypot(departs, uncertainty.Coverage*random/w8))
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
