// Package compute turns a scan into an operating point: calibration, references,
// station values, gas, nozzle, uncertainty, EGT ledger and phase, in that order.
//
// What a scan's computation takes from earlier scans is in State. A Computer
// holds what follows from the configuration, and buffers; it allocates nothing
// per scan and reads no clock.
package compute

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/phase"
	"throatwatch/monitor/unit"
)

const (
	// closures is how often fuel-air ratio and flow are solved for each other. One
	// round reduces the error of f to 0.4 % of it, so four leave 1e-9.
	closures = 4
	// leanest keeps a measured fuel-air ratio a little below stoichiometric, where
	// the lean products end.
	leanest = 0.98
	// freezeBelow is the air flow, kg/s, under which a fuel-air ratio is not
	// closed: a small flow makes it as wild as the zero errors are.
	freezeBelow = 0.05
	// The sea-level reference of ISO 2533.
	referenceT = 288.15
	referenceP = 101325.0
)

// ChannelState is what is remembered of a channel.
type ChannelState struct {
	Last      float64 // value of the last scan with samples, before its reference
	LastT     int64   // its event time
	Same      float64 // raw value that has not changed …
	SameSince int64   // … since this event time
	Seen      bool
	Judged    monitor.Quality // what judge found of the last scan with samples
}

// State is all that computation remembers. It is plain data.
type State struct {
	Channels []ChannelState
	Phase    phase.State
	EGT      egt.State
	F        float64 // fuel-air ratio last closed
	Metal    float64 // temperature of the nozzle's metal, K
	MetalT   int64   // event time of Metal, 0 = not known
	Choke    monitor.ChokeState
	Armed    bool
}

// Computer applies a configuration. It belongs to one goroutine.
type Computer struct {
	cfg       Config
	order     []int // channels, each after its reference port
	nozzle    *nozzle.Nozzle
	bellmouth *nozzle.Nozzle
	richest   float64 // largest fuel-air ratio used
	values    []float64
	usable    []bool
}

// New checks a configuration and prepares it. The error holds every fault.
func New(cfg Config) (*Computer, error) {
	c := &Computer{cfg: cfg, richest: leanest * gas.StoichiometricRatio(cfg.Fuel)}
	var faults []error
	var err error
	if c.order, err = order(cfg.Channels); err != nil {
		faults = append(faults, err)
	}
	if c.nozzle, err = nozzle.New(cfg.Nozzle.Config); err != nil {
		faults = append(faults, err)
	}
	if b := cfg.Bellmouth; b.Area > 0 {
		c.bellmouth, err = nozzle.New(nozzle.Config{ThroatArea: b.Area, Discharge: []nozzle.Point{{NPR: 1, Value: b.Coefficient}}})
		if err != nil {
			faults = append(faults, fmt.Errorf("bellmouth: %w", err))
		}
	}
	n := max(len(cfg.Stations.P7), len(cfg.Stations.T7), len(cfg.Stations.EGT))
	c.values, c.usable = make([]float64, n), make([]bool, n)
	return c, errors.Join(faults...)
}

// order sorts channels so that each comes after its reference port.
func order(channels []Channel) ([]int, error) {
	done := make([]bool, len(channels))
	var out []int
	for len(out) < len(channels) {
		before := len(out)
		for i := range channels {
			port := channels[i].Port
			ready := channels[i].Reference != calib.Gauge || port >= 0 && port < len(channels) && done[port]
			if !done[i] && ready {
				done[i] = true
				out = append(out, i)
			}
		}
		if len(out) == before {
			for i := range channels {
				if !done[i] {
					return out, fmt.Errorf("channel %q: its reference port is missing or refers back to it", channels[i].ID)
				}
			}
		}
	}
	return out, nil
}

// Reset fits the state to the configuration; channels that have the same values
// as before keep their past.
func (c *Computer) Reset(s *State, from []Channel) {
	old := s.Channels
	s.Channels = make([]ChannelState, len(c.cfg.Channels))
	for i := range c.cfg.Channels {
		for j := range min(len(from), len(old)) {
			if sameValues(&from[j], &c.cfg.Channels[i]) {
				s.Channels[i] = old[j]
			}
		}
	}
	c.cfg.EGT.Fit(&s.EGT)
}

// sameValues tells whether two channels give the same value for the same raw one:
// after a correction the past would make the new values look like a jump.
func sameValues(a, b *Channel) bool {
	return a.ID == b.ID && a.Raw == b.Raw && a.Unit == b.Unit && slices.Equal(a.Polynomial, b.Polynomial)
}

// Step computes the operating point of a scan and completes the scan: values
// and final qualities. It reports whether the EGT ledger changed.
func (c *Computer) Step(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) (ledger bool) {
	p.Reset()
	p.T, p.Scan = scan.T, scan.N
	c.calibrate(s, scan)

	c.temperatures(scan, p)
	c.speed(s, scan, p)
	ledger = c.cfg.EGT.Step(&s.EGT, p.T, p.V[monitor.EGTIndicated], p.Lit, p.Phase)
	c.pressures(scan, p)
	air := c.air(scan, p)
	c.throat(s, scan, p)
	c.independent(scan, p, air)
	c.referred(scan, p)
	return ledger
}

// calibrate fills values and qualities of the scan.
func (c *Computer) calibrate(s *State, scan *monitor.Scan) {
	for _, i := range c.order {
		ch, cs := &c.cfg.Channels[i], &s.Channels[i]
		scan.Value[i] = math.NaN()
		if !scan.Quality[i].Usable() {
			continue
		}
		v, q := ch.Convert(scan.Raw[i])
		if q == monitor.QualityGood {
			q = cs.judge(ch, scan.T-max(scan.Age[i], 0), scan.Raw[i], v, scan.Quality[i])
		}
		if q == monitor.QualityGood && ch.Reference == calib.Gauge {
			ref := scan.Value[ch.Port]
			if scan.Quality[ch.Port].Usable() {
				v = float64(unit.Gauge(v).Absolute(unit.Absolute(ref)))
			} else {
				q = monitor.QualityNoReference
			}
		}
		if q != monitor.QualityGood {
			scan.Quality[i] = q
			continue
		}
		scan.Value[i] = v
	}
}

// judge tells what only the course of a channel shows: an impossible rate, or
// a reading that does not move at all. What is held is as it was judged.
func (s *ChannelState) judge(ch *Channel, t int64, raw, v float64, now monitor.Quality) monitor.Quality {
	if now != monitor.QualityGood {
		if s.Judged == monitor.QualityMissing {
			return monitor.QualityGood
		}
		return s.Judged
	}
	if !s.Seen || raw != s.Same {
		s.Same, s.SameSince = raw, t
	}
	q := monitor.QualityGood
	if dt := float64(t-s.LastT) / 1e9; ch.MaxRate > 0 && s.Seen && dt > 0 && math.Abs(v-s.Last) > ch.MaxRate*dt {
		q = monitor.QualityRate
	} else {
		s.Last, s.LastT, s.Seen = v, t, true
	}
	if ch.Stuck > 0 && t-s.SameSince >= ch.Stuck {
		q = monitor.QualityStuck
	}
	s.Judged = q
	return q
}

// channel gives the value of a channel by index, NaN when the rig has none or
// it is not usable.
func (c *Computer) channel(scan *monitor.Scan, i int) float64 {
	if i < 0 {
		return math.NaN()
	}
	return scan.Value[i]
}

// probes copies the values of a group of channels into the buffers.
func (c *Computer) probes(scan *monitor.Scan, group []int) ([]float64, []bool) {
	v, u := c.values[:len(group)], c.usable[:len(group)]
	for k, i := range group {
		v[k], u[k] = scan.Value[i], scan.Quality[i].Usable()
	}
	return v, u
}

// mean gives the mean of the usable channels of a group, NaN when they are
// fewer than least, with the number used.
func (c *Computer) mean(scan *monitor.Scan, group []int, least int) (mean float64, used int) {
	sum := 0.0
	for _, i := range group {
		if scan.Quality[i].Usable() {
			sum += scan.Value[i]
			used++
		}
	}
	if used == 0 || used < least {
		return math.NaN(), used
	}
	return sum / float64(used), used
}

func (c *Computer) temperatures(scan *monitor.Scan, p *monitor.OperatingPoint) {
	st := &c.cfg.Stations
	v, u := c.probes(scan, st.EGT)
	mean, spread, hottest, coldest, used := egt.Indicated(v, u, st.EGTParallel, st.EGTTrim)
	p.EGTProbesUsed = int16(used)
	if used < st.MinEGT || used == 0 {
		mean = math.NaN()
		p.EGTCause = blame(scan, st.EGT)
	}
	p.V[monitor.EGTIndicated], p.V[monitor.EGTSpread] = mean, spread
	p.V[monitor.EGTHottest], p.V[monitor.EGTColdest] = hottest, coldest
	switch {
	case len(st.T7) > 0:
		p.V[monitor.TotalTemperature], _ = c.mean(scan, st.T7, st.MinT7)
		p.TemperatureBy = monitor.SourceRake
	case st.T7FromEGT > 0:
		p.V[monitor.TotalTemperature] = st.T7FromEGT * mean
		p.TemperatureBy = monitor.SourceEGTFactor
	}
}

func (c *Computer) speed(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	n := 60 * c.channel(scan, c.cfg.Stations.Speed)
	p.V[monitor.Speed] = n
	p.Phase = c.cfg.Phase.Step(&s.Phase, p.T, n, p.V[monitor.EGTIndicated])
	p.V[monitor.SpeedRate] = s.Phase.Rate()
	p.Lit, p.LitKnown = s.Phase.Lit, s.Phase.LitKnown
	switch a := c.cfg.Nozzle.ArmedAboveRPM; {
	case a <= 0 || n < a-c.cfg.Nozzle.ArmedHysterRPM || p.LitKnown && !p.Lit:
		s.Armed = false
	case n >= a:
		s.Armed = true
	}
	p.ChokeArmed = s.Armed
}

func (c *Computer) pressures(scan *monitor.Scan, p *monitor.OperatingPoint) {
	st := &c.cfg.Stations
	p7, used := c.mean(scan, st.P7, st.MinP7)
	p.RakeProbesUsed = int16(used)
	p.V[monitor.RakePressure] = p7
	if math.IsNaN(p7) {
		p.Cause = blame(scan, st.P7)
	}
	baro := c.channel(scan, st.Barometer)
	p.V[monitor.Barometer] = baro
	switch pb := c.channel(scan, st.ExitPlane); {
	case pb == pb:
		p.V[monitor.BackPressure], p.BackFrom = pb, monitor.SourceExitPlane
	case baro == baro:
		p.V[monitor.BackPressure], p.BackFrom = baro-st.Depression, monitor.SourceBarometer
	case st.Barometer >= 0: // also what is gauge against it is lost
		p.Cause = blame(scan, []int{st.Barometer})
	default:
		p.Cause = blame(scan, []int{st.ExitPlane})
	}
}

// blame names the first channel of a group that is not usable as the cause. -1
// stands for a channel that the rig has not.
func blame(scan *monitor.Scan, group []int) monitor.Cause {
	kind := monitor.NotConfigured
	for _, i := range group {
		if i < 0 {
			continue
		}
		if q := scan.Quality[i]; !q.Usable() {
			return monitor.Cause{Kind: monitor.ChannelBad, Channel: int32(i), Quality: q}
		}
		kind = monitor.NotEnoughProbes
	}
	return monitor.Cause{Kind: kind, Channel: -1}
}

// air gives the humid air at the inlet and notes its humidity.
func (c *Computer) air(scan *monitor.Scan, p *monitor.OperatingPoint) gas.Mixture {
	war := 0.0
	rh, t, baro := c.channel(scan, c.cfg.Stations.Humidity), c.channel(scan, c.cfg.Stations.AmbientT), p.V[monitor.Barometer]
	p.Warnings |= monitor.WarnAssumedHumidity
	if rh == rh && t == t && baro == baro {
		if w, err := gas.HumidityRatio(rh, t, baro); err == nil {
			war = w
			p.Warnings &^= monitor.WarnAssumedHumidity
		}
	}
	p.V[monitor.HumidityRatio] = war
	return c.mixture(0, war)
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

// throat computes nozzle and choke state, closing the fuel-air ratio with the
// flow: f = Wf (1 + WAR)/(W8 − Wf), per kg of dry air.
func (c *Computer) throat(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	t7, p7, pb := p.V[monitor.TotalTemperature], p.V[monitor.RakePressure], p.V[monitor.BackPressure]
	fuel := c.channel(scan, c.cfg.Stations.FuelFlow)
	p.V[monitor.FuelFlow] = fuel
	if t7 != t7 || p7 != p7 || pb != pb {
		if t7 != t7 && p.Cause.Kind == monitor.Available {
			p.Cause = blame(scan, c.cfg.Stations.T7)
			if len(c.cfg.Stations.T7) == 0 && c.cfg.Stations.T7FromEGT > 0 {
				p.Cause = p.EGTCause
			}
		}
		s.Choke = monitor.ChokeUnknown
		return
	}
	c.metal(s, p.T, t7)
	war := p.V[monitor.HumidityRatio]
	in := nozzle.Inputs{
		TotalPressure: unit.Absolute(p7), BackPressure: unit.Absolute(pb),
		TotalTemperature: t7, MetalTemperature: s.Metal,
	}
	f, rounds := 0.0, 1
	switch {
	case !p.Lit:
		s.F = 0
	case fuel != fuel:
		f = s.F
		p.Warnings |= monitor.WarnAssumedFuel
	default:
		f, rounds = s.F, closures
	}
	var r nozzle.Result
	var g gas.Mixture
	for i := range rounds {
		g = c.mixture(f, war)
		var err error
		if r, err = c.nozzle.Evaluate(&g, in); err != nil {
			p.Cause = monitor.Cause{Kind: monitor.OutsideGasRange, Channel: -1}
			s.Choke = monitor.ChokeUnknown
			return
		}
		if i == rounds-1 {
			break
		}
		air := r.MassFlow - fuel
		if !(air > freezeBelow) {
			p.Warnings |= monitor.WarnFuelFrozen
			break
		}
		f = max(fuel*(1+war)/air, 0)
		if f > c.richest {
			f = c.richest
			p.Warnings |= monitor.WarnOverStoichiometric
		}
	}
	s.F = f
	p.V[monitor.FuelAirRatio] = f
	c.take(p, &r)
	c.doubt(scan, p, &g, in)
	c.choke(s, p, &r)
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

// independent computes the flow from bellmouth and fuel: the evidence that does
// not rest on the nozzle.
func (c *Computer) independent(scan *monitor.Scan, p *monitor.OperatingPoint, air gas.Mixture) {
	st := &c.cfg.Stations
	dp, t := c.channel(scan, st.Bellmouth), c.channel(scan, st.InletT)
	p0 := p.V[monitor.Barometer]
	if st.InletP >= 0 {
		p0 = c.channel(scan, st.InletP)
	}
	if c.bellmouth == nil || dp != dp || t != t || p0 != p0 {
		return
	}
	w2 := 0.0
	in := nozzle.Inputs{TotalPressure: unit.Absolute(p0), BackPressure: unit.Absolute(p0 - dp), TotalTemperature: t}
	if dp > 0 {
		r, err := c.bellmouth.Evaluate(&air, in)
		if err != nil {
			return
		}
		w2 = r.MassFlow
	}
	v := &p.V
	v[monitor.IndependentFlowU95] = c.independentU95(scan, &air, in, w2)
	v[monitor.AirFlow] = w2
	w := w2 + v[monitor.FuelFlow]
	if w != w {
		return
	}
	v[monitor.IndependentFlow] = w
	v[monitor.FlowBalance] = w - v[monitor.MassFlow]
	if p.Choke == monitor.Choked || p.Choke == monitor.Unchoked {
		v[monitor.IndependentFlowParameter] = w * math.Sqrt(v[monitor.GasConstant]*v[monitor.TotalTemperature]) / (v[monitor.ThroatArea] * v[monitor.TotalPressure])
	}
}

// referred computes referred values by station-2 totals: θ = T2/288.15 K,
// δ = p2/101325 Pa (ISO 2533 sea level).
func (c *Computer) referred(scan *monitor.Scan, p *monitor.OperatingPoint) {
	st := &c.cfg.Stations
	v := &p.V
	if st.Thrust >= 0 {
		v[monitor.MeasuredThrust] = c.channel(scan, st.Thrust)
	}
	p2 := v[monitor.Barometer]
	if st.InletP >= 0 {
		p2 = c.channel(scan, st.InletP)
	}
	theta, delta := c.channel(scan, st.InletT)/referenceT, p2/referenceP
	if !(theta > 0 && delta > 0) {
		return
	}
	v[monitor.ReferredSpeed] = v[monitor.Speed] / math.Sqrt(theta)
	v[monitor.ReferredFlow] = v[monitor.MassFlow] * math.Sqrt(theta) / delta
	v[monitor.ReferredThrust] = v[monitor.GrossThrust] / delta
}
