// Package compute turns a scan into an operating point: calibration, references,
// station values, gas, nozzle, uncertainty, EGT ledger and phase, flow closure and
// trends.
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
	"throatwatch/monitor/rake"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/uncertainty"
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
	Engine   egt.Engine
	F        float64 // fuel-air ratio last closed
	Water    float64 // injected, per kg of dry air, as last closed
	Rise     float64 // T0 − what the probes of station 7 read, K, as last closed
	Metal    float64 // temperature of the nozzle's metal, K
	MetalT   int64   // event time of Metal, 0 = not known
	Choke    monitor.ChokeState
	Armed    bool

	Sensors []Sensor // by channel
	Rest    int64    // ns for which the rotor has been at rest …
	RestT   int64    // … as of this event time

	P7, T7, Harness Probes
	Head            Bridge  // (p7/ps − 1)/(W8 √(R T0)/p7)², 1/m⁴: dynamic head at the wall taps
	HeadNow         float64 // (W8 √(R T0)/p7)², as last computed, m⁴
	HeatRatio       Bridge  // T7 of the rake over that of the heat balance
	EGTRatio        Bridge  // T7 of the rake over that of the EGT
	Steady          steady.State
	ToChokeLoss     Trend
	ToEGTLimit      Trend
	Balance         steady.Learned // of flow balance over W8
	Area            Area           // of the run
}

// Computer applies a configuration. It belongs to one goroutine.
type Computer struct {
	cfg       Config
	order     []int // channels, each after its reference port
	nozzle    *nozzle.Nozzle
	bellmouth *nozzle.Nozzle
	richest   float64 // largest fuel-air ratio used
	p7        group
	t7        group
	egt       group
	detector  steady.Detector
	watched   []monitor.Quantity // by the detector
	steady    []float64          // their values
	usable    []bool
	zeroed    []int     // channels whose zero is looked at
	zeros     []float64 // of them
	swapped   []swapped
	learns    bool  // patterns and ratios, in this scan
	flow      meter // of this scan
	balanced  bool  // it has a flow balance
	head      bridged
	gas       source             // of T7, of this scan
	doubts    uncertainty.Inputs // of result
	result    uncertainty.Result // of this scan
	parts     []part             // behind the inputs of result
	last      int64              // event time of result, 0 = there is none
	scan      uint64             // its number
}

// New checks a configuration and prepares it. The error holds every fault.
func New(cfg Config) (*Computer, error) {
	c := &Computer{cfg: cfg, richest: leanest * gas.StoichiometricRatio(cfg.Fuel)}
	c.swaps()
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
	st := &c.cfg.Stations
	for _, g := range []struct {
		to    *group
		name  string
		watch rake.Watch
		list  []int
		least int
	}{{&c.p7, "p7", st.P7Watch, st.P7, st.MinP7}, {&c.t7, "t7", st.T7Watch, st.T7, st.MinT7}, {&c.egt, "egt", st.EGTWatch, st.EGT, st.MinEGT}} {
		if *g.to, err = newGroup(g.watch, g.list, g.least); err != nil {
			faults = append(faults, fmt.Errorf("%s: %w", g.name, err))
		}
	}
	if st.P7Flux && len(st.WallStatic) == 0 || st.T7Flux && (len(st.WallStatic) == 0 || len(st.T7) != len(st.P7)) {
		faults = append(faults, errors.New("mass-flux weights: want a wall static pressure, and of each probe of t7 one of p7"))
	}
	c.egt.watch.KeepHot = true
	if st.EGTWatch.Return == 0 {
		c.egt.watch.Return = backHarness
	}
	c.usable = make([]bool, len(st.EGT))
	c.zeroed = zeroed(&c.cfg)
	c.zeros = make([]float64, len(c.zeroed))
	c.p7.sense = sense(&c.cfg, &st.P7Watch, st.P7, true)
	c.t7.sense = sense(&c.cfg, &st.T7Watch, st.T7, false)
	c.egt.sense = sense(&c.cfg, &st.EGTWatch, st.EGT, false)
	for _, g := range []*group{&c.p7, &c.t7, &c.egt} {
		g.watch.Agree = g.sense.Limit
	}
	c.parts = make([]part, 0, 16+2*len(cfg.Channels))
	c.flow.terms = make([]term, 0, 8+len(cfg.Channels))
	c.steadiness()
	if err = c.detector.Check(); err != nil {
		faults = append(faults, err)
	}
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
// as before keep their past. What was learned belongs to the old one and is forgotten.
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
	s.P7, s.T7, s.Harness = Probes{}, Probes{}, Probes{}
	s.Sensors, s.Rest = nil, 0
	s.Head, s.HeatRatio, s.EGTRatio = Bridge{}, Bridge{}, Bridge{}
	s.Steady, s.Balance, s.Area = steady.State{}, steady.Learned{}, Area{}
	s.ToChokeLoss, s.ToEGTLimit = Trend{}, Trend{}
	s.Rise, s.HeadNow, s.Water = 0, 0, 0
}

// sameValues tells whether two channels give the same value for the same raw one:
// after a correction the past would make the new values look like a jump.
func sameValues(a, b *Channel) bool {
	return a.ID == b.ID && a.Raw == b.Raw && a.Unit == b.Unit && slices.Equal(a.Polynomial, b.Polynomial) &&
		slices.EqualFunc(a.Swaps, b.Swaps, func(x, y Swap) bool { return x.From == y.From && slices.Equal(x.Polynomial, y.Polynomial) })
}

// Step computes the operating point of a scan and completes the scan: values
// and final qualities. It reports what changed in the EGT ledger.
func (c *Computer) Step(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) egt.Changes {
	c.calibrate(s, scan)
	return c.compute(s, scan, p)
}

// compute is Step for a scan that has its values.
func (c *Computer) compute(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) egt.Changes {
	p.Reset()
	p.T, p.Scan = scan.T, scan.N
	c.last, c.balanced = 0, false
	c.failures(s, scan)

	// Patterns and ratios are learned while the engine is steady, as of the scan before.
	c.learns = s.Phase.Phase == monitor.Steady || c.cfg.Stations.Speed < 0 && s.Steady.Result.Steady
	c.harness(s, scan, p)
	c.speed(s, scan, p)
	ledger := c.ledger(s, scan, p)
	c.pressures(s, scan, p)
	air := c.air(scan, p)
	c.meterFlow(scan, p, &air)
	c.gasTemperature(s, scan, p, &air)
	c.throat(s, scan, p)
	c.steadyNow(s, p)
	c.balance(s, p)
	c.forecast(s, p)
	c.referred(scan, p)
	c.zeroes(s, scan, p)
	c.findings(s, scan)
	return ledger
}

// calibrate fills values and qualities of the scan.
func (c *Computer) calibrate(s *State, scan *monitor.Scan) {
	c.fitSensors(s, scan)
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
		if ch.Zero.Stated() {
			v -= ch.Zero.At(scan.T - max(scan.Age[i], 0))
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
	if s.Armed {
		p.ArmedBy = monitor.BySpeed
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
	v[monitor.ReferredEGT] = v[monitor.EGTIndicated] / math.Pow(theta, st.EGTExponent)
	v[monitor.ReferredSpeed] = v[monitor.Speed] / math.Sqrt(theta)
	v[monitor.ReferredFlow] = v[monitor.MassFlow] * math.Sqrt(theta) / delta
	v[monitor.ReferredThrust] = v[monitor.GrossThrust] / delta
}
