package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

// heatZero is the temperature, K, from which a heating value counts enthalpies.
const heatZero = 298.15

// source is where T7 of a scan comes from.
type source struct {
	read float64 // as measured, K
	part uncertainty.Part
	bridge
}

// bridge says how a substitute of T7 was led over.
type bridge struct {
	in    bool
	ratio float64
}

// gasTemperature finds T7: from the probes at station 7, else from the heat balance,
// else from the indicated EGT. A substitute is led over by its ratio to the probes.
func (c *Computer) gasTemperature(s *State, scan *monitor.Scan, p *monitor.OperatingPoint, air *gas.Mixture) {
	st := &c.cfg.Stations
	c.t7.step(&s.T7, scan, c.learns, c.surroundings(scan))
	if st.T7Flux {
		c.weighByFlow(&s.T7, &c.t7, p, c.t7.places)
	}
	c.gas = source{read: c.t7.now.Mean, bridge: bridge{ratio: 1}}
	balance, part := c.heat(scan, p, air)
	egt := math.NaN()
	if st.T7FromEGT > 0 {
		egt = st.T7FromEGT * p.V[monitor.EGTIndicated]
	}
	if c.gas.read == c.gas.read {
		p.TemperatureBy = monitor.SourceRake
		if npr := p.V[monitor.RakePressure] / p.V[monitor.BackPressure]; c.learns && npr == npr {
			s.HeatRatio.learn(p.T, (c.gas.read+s.Rise)/balance, npr)
			s.EGTRatio.learn(p.T, (c.gas.read+s.Rise)/egt, npr)
		}
	} else {
		from := monitor.SourceNone
		b := &s.HeatRatio
		switch {
		case balance == balance:
			c.gas.read, c.gas.part, from = balance, part, monitor.SourceHeatBalance
		case egt == egt:
			c.gas.read, from, b = egt, monitor.SourceEGTFactor, &s.EGTRatio
			c.gas.part = c.egtPart(scan, p)
		}
		if from != monitor.SourceNone && len(st.T7) > 0 {
			c.gas.in = true
			p.Warnings |= monitor.WarnGasBridged
			if b.Known() {
				c.gas.ratio = b.Value
				c.gas.read *= b.Value
			}
		}
		p.TemperatureBy = from
	}
	if p.TemperatureBy != monitor.SourceHeatBalance {
		for k := range c.flow.terms {
			c.flow.terms[k].moves[uncertainty.TotalTemperature] = 0
		}
	}
	p.V[monitor.TotalTemperature] = c.gas.read
}

// latent is the heat of evaporation of water at 25 °C, J/kg (IAPWS-95, 2441.7 kJ/kg).
const latent = 2.4417e6

// heat gives T7 by the heat balance, with its standard uncertainty in K. With q = η
// LHV, h the gains of enthalpy, hw that of steam, and the composition otherwise held,
//
//	(W2 + Wf + Ww − Wb) cp7 dT7 = (h2 − h7) dW2 + (q − h7) dWf − (L + hw) dWw + (h7 − hb) dWb
//	                              + Wf dq + W2 cp2 dT2 − Wb cpb dTb
//
// NaN where an input is missing, and without a flame, when it does not hold. If T7 is
// taken from it, the metered flow is in the flow of the nozzle too: the terms say how.
func (c *Computer) heat(scan *monitor.Scan, p *monitor.OperatingPoint, air *gas.Mixture) (t7 float64, u uncertainty.Part) {
	h := &c.cfg.Heat
	nan := math.NaN()
	m, fuel, t2, tb := &c.flow, p.V[monitor.FuelFlow], c.channel(scan, c.cfg.Stations.InletT), heatZero
	if m.bleed != 0 {
		tb = c.channel(scan, c.cfg.Stations.BleedT)
	}
	core := m.w2 - m.bleed
	if h.HeatingValue <= 0 || !p.Lit || !(core > freezeBelow && fuel >= 0 && m.water >= 0) || t2 != t2 || tb != tb {
		return nan, u
	}
	q := h.Efficiency * h.HeatingValue
	war := p.V[monitor.HumidityRatio]
	dry := core / (1 + war)
	f, ratio := min(fuel/dry, c.richest), war+m.water/dry
	g := c.mixture(f, ratio)
	if !g.Valid() || !air.Valid() {
		return nan, u
	}
	h2, hb := air.H(t2)-air.H(heatZero), air.H(tb)-air.H(heatZero)
	w := core + fuel + m.water
	h7 := (m.w2*h2 + fuel*q - m.water*latent - m.bleed*hb) / w
	t7 = g.TFromH(g.H(heatZero)+h7, 900)
	if !(t7 > 0) {
		return nan, u
	}
	per := 1 / (w * g.Cp(t7)) // K per W
	for k := range m.terms {
		t := &m.terms[k]
		by := &t.moves[uncertainty.TotalTemperature]
		switch t.name {
		case byAir:
			*by = (h2 - h7 + (1-m.kept)*(h7-hb)) * per * t.flow / m.kept
			if t.channel == c.cfg.Stations.InletT {
				*by += m.w2 * air.Cp(t2) * per
			}
		case byFuel:
			*by = (q - h7) * per * t.flow
		case byWater:
			const more = 1e-3 // water per kg of dry air: what it takes at T7 is no small difference to the gas
			moister := c.mixture(f, ratio+more)
			steam := ((1+f+ratio+more)*(moister.H(t7)-moister.H(heatZero)) - (1+f+ratio)*h7) / more
			*by = -(latent + steam) * per * t.flow
		case byBleed:
			*by = (hb - h7) * per * t.flow
		}
		u = add(u, scaled(t.u, *by))
	}
	u = add(u, scaled(stated(h.U95), fuel*q*per))
	if m.bleed != 0 {
		u = add(u, scaled(c.part(scan, c.cfg.Stations.BleedT), m.bleed*air.Cp(tb)*per))
	}
	return t7, u
}

// egtPart is the standard uncertainty of T7 from the indicated EGT.
func (c *Computer) egtPart(scan *monitor.Scan, p *monitor.OperatingPoint) uncertainty.Part {
	st := &c.cfg.Stations
	u := scaled(c.groupPart(scan, &c.egt, math.NaN()), st.T7FromEGT)
	return add(u, scaled(stated(st.T7FactorU95), p.V[monitor.EGTIndicated]))
}

// static gives the static temperature where w kg/s pass through area m² at total
// temperature t0 and total pressure p0; guess is where to begin. Subsonic:
//
//	V = w R T/(A p),  p = p0 exp((s°(T) − s°(T0))/R),  h(T) = h(T0) − V²/2
//
// The slope of the first over V is M², which makes it Newton's method.
func static(g *gas.Mixture, t0, p0, w, area, guess float64) float64 {
	total := g.At(t0)
	t := guess
	v := math.Sqrt(2 * max(total.H-g.H(t), 0))
	for range 8 {
		q := g.At(t)
		next := w * g.R() * t / (area * p0 * math.Exp((q.S0-total.S0)/g.R()))
		m2 := v * v / (q.Gamma * g.R() * t)
		step := (next - v) / (1 - min(m2, 0.75))
		v += step
		t += (total.H - v*v/2 - q.H) / q.Cp
		if math.Abs(step) <= 1e-7*v {
			break
		}
	}
	return t
}

// burns tells whether the reheat is lit or may be.
func (c *Computer) burns(scan *monitor.Scan) (monitor.Cause, bool) {
	for _, i := range c.cfg.Stations.Reheat {
		switch {
		case !scan.Quality[i].Usable():
			return blame(scan, []int{i}), true
		case scan.Value[i] > 0.5:
			return monitor.Cause{Kind: monitor.ReheatLit, Channel: -1}, true
		}
	}
	return monitor.Cause{}, false
}

// missing names what the throat cannot be computed without.
func (c *Computer) missing(scan *monitor.Scan, p *monitor.OperatingPoint) (cause monitor.Cause, missing bool) {
	st := &c.cfg.Stations
	v := &p.V
	if cause, lit := c.burns(scan); lit {
		return cause, true
	}
	if v[monitor.BackPressure] != v[monitor.BackPressure] || v[monitor.RakePressure] != v[monitor.RakePressure] && !c.head.in {
		return p.Cause, true
	}
	if v[monitor.TotalTemperature] != v[monitor.TotalTemperature] {
		switch {
		case len(st.T7) > 0:
			return blame(scan, st.T7), true
		case st.T7FromEGT > 0:
			return p.EGTCause, true
		case c.cfg.Heat.HeatingValue > 0 && !p.Lit:
			return monitor.Cause{Kind: monitor.EngineNotLit, Channel: -1}, true
		case c.cfg.Heat.HeatingValue > 0:
			return blame(scan, []int{st.FuelFlow, st.Bellmouth, st.InletT, st.WaterFlow, st.BleedFlow, st.BleedT}), true
		}
		return monitor.Cause{Kind: monitor.NotConfigured, Channel: -1}, true
	}
	if len(st.ThroatArea) > 0 && !(mean(scan, st.ThroatArea) > 0) {
		return blame(scan, st.ThroatArea), true
	}
	return monitor.Cause{}, false
}

// headNow gives p7 over wall static pressure by the dynamic head that was learned.
func (c *Computer) headNow(s *State) float64 { return 1 + s.Head.Value*s.HeadNow }

// leastHead is the smallest p7/ps − 1 from which the dynamic head is learned: below,
// the errors of two pressures are most of it.
const leastHead = 0.005

// learnHead learns what the wall taps read against the rake. The dynamic head goes
// with the square of the flow capacity W √(R T0)/p7 up to compressibility, 5 % of the
// head at Mach 0.3; k therefore holds at other throats and pressure ratios too.
func (c *Computer) learnHead(s *State, p *monitor.OperatingPoint, r *nozzle.Result) {
	p7 := p.V[monitor.RakePressure]
	s.HeadNow = square(r.MassFlow) * r.GasConstant * p.V[monitor.TotalTemperature] / (p7 * p7)
	if head := p7/c.head.substitute - 1; c.learns && head > leastHead && s.HeadNow > 0 {
		s.Head.learn(p.T, head/s.HeadNow, r.NPR)
	}
}

// closed is how far another round may change fuel-air ratio, and temperature and
// pressure relative to themselves.
const closed = 1e-10

// throat computes nozzle and choke state, and solves with them for what depends on the
// flow: the fuel-air ratio, f = Wf (1 + WAR)/(W8 − Wf − Ww) per kg of dry air, and
// that of the injected water Ww alike; the recovery of the probes, T0 = T_r +
// (1 − r)(T0 − T); the dynamic head at the wall taps, p7 = ps (1 + k W8² R T0/p7²), where
// they stand in for the rake. Bleed leaves ahead of all that.
func (c *Computer) throat(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	st, v := &c.cfg.Stations, &p.V
	fail := func(cause monitor.Cause) {
		p.Cause = cause
		s.Choke = monitor.ChokeUnknown
	}
	if cause, missing := c.missing(scan, p); missing {
		fail(cause)
		return
	}
	recovery := &c.cfg.Recovery
	recovers := recovery.Factor > 0 && p.TemperatureBy == monitor.SourceRake
	if !recovers {
		s.Rise = 0
	}
	read := v[monitor.TotalTemperature]
	in := nozzle.Inputs{
		TotalPressure: unit.Absolute(v[monitor.RakePressure]), BackPressure: unit.Absolute(v[monitor.BackPressure]),
		TotalTemperature: read + s.Rise, ThroatArea: 0,
	}
	if c.head.in {
		in.TotalPressure = unit.Absolute(c.head.substitute * c.headNow(s))
	}
	if len(st.ThroatArea) > 0 {
		in.ThroatArea = mean(scan, st.ThroatArea)
	}
	c.metal(s, p.T, in.TotalTemperature)
	in.MetalTemperature = s.Metal

	war, fuel, water := v[monitor.HumidityRatio], v[monitor.FuelFlow], c.flow.water
	f, burns := s.F, p.Lit && fuel == fuel
	switch {
	case !p.Lit:
		f = 0
	case !burns:
		p.Warnings |= monitor.WarnAssumedFuel
	}
	injected, wets := s.Water, water > 0
	switch {
	case water != water:
		p.Warnings |= monitor.WarnAssumedWater
	case !wets:
		injected = 0
	}
	closing := burns || wets
	var r nozzle.Result
	var g gas.Mixture
	var line nozzle.Line
	still := in.TotalTemperature // static, at the probes
	for round := range closures {
		g = c.mixture(f, war+injected)
		var err error
		if line, err = c.nozzle.Line(&g, in); err == nil {
			r, err = c.nozzle.On(&line, in.TotalPressure, in.BackPressure)
		}
		if err != nil {
			fail(monitor.Cause{Kind: monitor.OutsideGasRange, Channel: -1})
			return
		}
		nextF, nextWater, next, moved := f, injected, in, 0.0
		if closing {
			// What is not metered is in the flow with its ratio.
			dry := r.MassFlow / (1 + f + war + injected)
			air := r.MassFlow - f*dry - injected*dry
			if burns {
				air += f*dry - fuel
			}
			if wets {
				air += injected*dry - water
			}
			if !(air > freezeBelow) {
				if burns {
					p.Warnings |= monitor.WarnFuelFrozen
				}
				closing = false
			}
			if closing && burns {
				nextF = max(fuel*(1+war)/air, 0)
				p.Warnings &^= monitor.WarnOverStoichiometric
				if nextF > c.richest {
					nextF = c.richest
					p.Warnings |= monitor.WarnOverStoichiometric
				}
				moved = math.Abs(nextF - f)
			}
			if closing && wets {
				nextWater = water * (1 + war) / air
				moved = max(moved, math.Abs(nextWater-injected))
			}
		}
		p7, t0 := float64(in.TotalPressure), in.TotalTemperature
		if recovers && r.MassFlow >= 0 {
			still = static(&g, t0, p7, r.MassFlow, recovery.Area, min(still, t0))
			s.Rise = (1 - recovery.Factor) * (t0 - still)
			next.TotalTemperature = read + s.Rise
			moved = max(moved, math.Abs(next.TotalTemperature/t0-1))
		}
		if c.head.in && r.MassFlow >= 0 {
			s.HeadNow = square(r.MassFlow) * r.GasConstant * t0 / (p7 * p7)
			next.TotalPressure = unit.Absolute(c.head.substitute * c.headNow(s))
			moved = max(moved, math.Abs(float64(next.TotalPressure)/p7-1))
		}
		if moved <= closed || round == closures-1 {
			break
		}
		f, injected, in = nextF, nextWater, next
	}
	if !c.head.in && r.MassFlow >= 0 {
		c.learnHead(s, p, &r)
	}
	s.F, s.Water = f, injected
	v[monitor.WaterAirRatio] = war + injected
	v[monitor.FuelAirRatio], v[monitor.TotalTemperature], v[monitor.RakePressure] = f, in.TotalTemperature, float64(in.TotalPressure)
	c.take(p, &r)
	if r.ThroatArea != r.ThroatArea {
		fail(monitor.Cause{Kind: monitor.AreaUnknown, Channel: -1})
	} else {
		c.choke(s, p, &r)
	}
	c.doubt(s, scan, p, &g, &line, in, still)
}

// mixture gives the gas of the configuration; a composition that the gas data
// do not cover gives the zero mixture, with which nothing evaluates.
func (c *Computer) mixture(f, war float64) gas.Mixture {
	if c.cfg.Gamma > 0 {
		g, err := gas.Perfect(c.cfg.Gamma, c.cfg.GasR)
		if err != nil {
			return gas.Mixture{}
		}
		return g
	}
	g, err := gas.NewMixture(c.cfg.Fuel, f, war)
	if err != nil {
		return gas.Mixture{}
	}
	return g
}

// metal lets the metal of the nozzle follow the gas: dT/dt = (Tg − T)/τ.
func (c *Computer) metal(s *State, t int64, gasT float64) {
	dt := t - s.MetalT
	switch {
	case s.MetalT == 0 || c.cfg.Nozzle.MetalLag <= 0:
		s.Metal = gasT
	case dt > 0:
		s.Metal += (gasT - s.Metal) * -math.Expm1(-float64(dt)/float64(c.cfg.Nozzle.MetalLag))
	}
	s.MetalT = t
}

// take copies a nozzle result into the operating point.
func (c *Computer) take(p *monitor.OperatingPoint, r *nozzle.Result) {
	v := &p.V
	v[monitor.NPR], v[monitor.NPRRake] = r.NPR, r.NPRRake
	v[monitor.CriticalNPR], v[monitor.ChokeNPR] = r.CriticalNPR, r.ChokeNPR
	v[monitor.ChokeMarginPercent], v[monitor.ChokeMarginPa] = r.MarginPercent, r.MarginPa
	v[monitor.ThroatMach], v[monitor.ThroatPressure], v[monitor.ThroatTemperature] = r.Throat.Mach, r.Throat.Pressure, r.Throat.Temperature
	v[monitor.CriticalPressure], v[monitor.CriticalTemperature] = r.CriticalPressure, r.CriticalTemperature
	v[monitor.MassFlow], v[monitor.ExitVelocity], v[monitor.GrossThrust] = r.MassFlow, r.Exit.Velocity, r.GrossThrust
	v[monitor.GammaTotal], v[monitor.GasConstant] = r.GammaTotal, r.GasConstant
	v[monitor.FlowParameter] = r.Discharge * r.FlowParameter
	v[monitor.TotalPressure], v[monitor.ThroatArea] = r.TotalPressure, r.ThroatArea
	v[monitor.DischargeCoefficient], v[monitor.ThrustCoefficient] = r.Discharge, r.Thrust
	p.ChokeNPRFrom = monitor.SourceOneDimensional
	if r.ChokeCalibrated {
		p.ChokeNPRFrom = monitor.SourceCalibration
	}
	if r.Warnings&nozzle.CoefficientRange != 0 {
		p.Warnings |= monitor.WarnCoefficientRange
	}
	if r.Warnings&nozzle.PressureOrder != 0 {
		p.Warnings |= monitor.WarnPressureOrder
	}
	if r.GasWarnings&gas.RealGas != 0 {
		p.Warnings |= monitor.WarnRealGas
	}
	if r.GasWarnings&(gas.BelowRange|gas.AboveRange) != 0 {
		p.Warnings |= monitor.WarnGasRange
	}
}

// choke judges the choke state with hysteresis around margin zero.
func (c *Computer) choke(s *State, p *monitor.OperatingPoint, r *nozzle.Result) {
	half := c.cfg.Nozzle.Hysteresis / 2
	switch m := r.MarginPercent; {
	case r.Regime == nozzle.NoFlow:
		s.Choke = monitor.NoFlow
	case m > half:
		s.Choke = monitor.Choked
	case m < -half:
		s.Choke = monitor.Unchoked
	case s.Choke != monitor.Choked && s.Choke != monitor.Unchoked:
		s.Choke = monitor.Unchoked
		if r.Choked {
			s.Choke = monitor.Choked
		}
	}
	p.Choke = s.Choke
}

func square(x float64) float64 { return x * x }
