package rehearsal

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"

	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
)

// Where a rig file does not say, a small turbojet is supposed.
const (
	supposedMax   = 22000.0 // rpm at 100 %
	supposedIdle  = 0.43    // of 100 %
	supposedEGT   = 950.0   // K, steady at 100 %
	supposedChoke = 1.86    // p7/pb of a choked throat; hot combustion gas has 1.85 to 1.87
	topNPR        = 2.45    // p7/pb at 100 %
	gasFactor     = 0.97    // T7/EGT: the harness stands in the hotter part of the annulus
	heating       = 42.2e6  // J/kg, lower heating value of kerosene, 43.1 MJ/kg, at 98 % efficiency
)

// line is the engine's steady running line and its limits. Speeds are fractions
// of 100 %, temperatures K, and pressure ratios p7 over back pressure.
type line struct {
	max       float64 // rpm
	idle      float64
	choke     float64 // where the throat chokes
	armed     float64 // where choke is expected
	chokeNPR  float64
	rise      float64 // NPR at 100 % less 1
	exponent  float64
	egtMax    float64 // steady, at 100 %
	egtAccel  float64 // held by the acceleration control
	egtOver   float64 // of the rich acceleration
	allowance float64 // s that the limit below egtOver may be exceeded
	factor    float64 // T7/EGT
}

// newLine puts the running line where the rig's limits want it: choking at 95 % of
// the speed above which choke is armed, the hottest steady EGT 30 K below the
// lowest run limit, and nothing outside a probe's range.
func newLine(c *compute.Config) line {
	l := line{max: c.Phase.Max, rise: topNPR - 1, egtMax: supposedEGT, factor: gasFactor}
	if !(l.max > 0) {
		l.max = supposedMax
	}
	if l.idle = c.Phase.Idle / l.max; !(l.idle > 0.2 && l.idle < 0.7) {
		l.idle = supposedIdle
	}
	s := &c.Stations
	for _, i := range s.P7 {
		ch := &c.Channels[i]
		high := ch.High
		if ch.Reference == calib.Absolute {
			high -= weather
		}
		l.rise = min(l.rise, 0.9*high/weather)
	}
	l.chokeNPR = supposedChoke
	if c.Nozzle.ChokeNPR > 1 {
		l.chokeNPR = c.Nozzle.ChokeNPR
	}
	l.chokeNPR /= 1 - c.Nozzle.DuctLoss
	l.choke, l.armed = 0.84, 0.885
	if a := c.Nozzle.ArmedAboveRPM / l.max; a > l.idle && a < 0.95 {
		l.armed = a
		l.choke = 0.95 * a
	}
	l.exponent = 3
	if l.rise > l.chokeNPR-1 {
		l.exponent = clamp(math.Log((l.chokeNPR-1)/l.rise)/math.Log(l.choke), 2, 6)
	}
	if s.T7FromEGT > 0 {
		l.factor = s.T7FromEGT
	}

	limit, next := math.Inf(1), math.Inf(1)
	for _, b := range c.EGT.Bands {
		switch {
		case b.Kind != egt.KindRun:
		case b.Limit < limit:
			limit, next = b.Limit, limit
			l.allowance = float64(b.Allowance) / 1e9
		default:
			next = min(next, b.Limit)
		}
	}
	highest := math.Inf(1)
	for _, i := range s.EGT {
		highest = min(highest, c.Channels[i].High)
	}
	for _, i := range s.T7 {
		highest = min(highest, c.Channels[i].High/l.factor)
	}
	if math.IsInf(limit, 1) {
		limit = min(supposedEGT+30, highest-100)
		l.allowance = 5
	}
	l.allowance = min(l.allowance, 20)
	l.egtMax = limit - 30
	l.egtAccel = limit - 18
	l.egtOver = min(limit+min(18, 0.45*(next-limit)), highest-40)
	return l
}

// steadyEGT gives the indicated EGT, K, of steady running: flat from idle to half
// speed, then rising with power.
func (l *line) steadyEGT(n float64) float64 {
	x := (max(n, l.idle) - 0.5) / 0.5
	return l.egtMax * (0.77 + 0.23*x*x)
}

// steadyNPR gives p7/pb of steady running.
func (l *line) steadyNPR(n float64) float64 { return 1 + l.rise*math.Pow(n, l.exponent) }

// gain gives the acceleration, 1/s, that one kelvin of EGT above steady running
// makes: surplus turbine power over the rotor's inertia.
func (l *line) gain(n float64) float64 { return 2e-4 + 1.3e-3*n*n }

// running is 0 during a start and 1 from idle on.
func (l *line) running(n float64) float64 {
	x := clamp((n/l.idle-0.85)/0.13, 0, 1)
	return x * x * (3 - 2*x)
}

// state is the true state of engine and cell: what perfect instruments would read.
// Pressures are Pa absolute, temperatures K, flows kg/s, all else SI.
type state struct {
	n         float64 // rotor speed, fraction of 100 %
	npr       float64 // p7/pb
	barometer float64
	back      float64 // exit plane and cell
	inletP    float64
	inletT    float64
	ambient   float64
	humidity  float64 // relative
	p7, t7    float64
	p7Static  float64 // at the wall of station 7
	t7Static  float64
	egt       float64
	gasFlow   float64 // nozzle
	airFlow   float64 // bellmouth
	fuelFlow  float64
	far       float64 // fuel-air ratio, dry basis
	bleed     float64 // share of the air blown off
	bellmouth float64 // inlet total less bellmouth throat static
	thrust    float64
	power     float64 // 0 at rest, 1 at 100 %
	lit       bool
}

// plant is the engine in its cell: rotor, gas path and surroundings.
type plant struct {
	line
	state
	cfg    *compute.Config
	exit   *nozzle.Nozzle
	throat float64 // m², as configured
	fuel   gas.Fuel
	day    Day
	t      float64    // s since the first instant
	phase  [4]float64 // of the slow wander of weather and governor

	rate      float64 // dn/dt, 1/s
	demand    float64
	flame     float64 // 0 to 1
	fuelled   float64 // s with fuel on
	richness  float64 // 0 to 1
	rich      float64 // K, to which richness takes the EGT
	metal     float64 // K, hot parts that heat the gas of a dead engine
	wall      float64 // K, metal of the nozzle
	cell      float64 // Pa, depression
	cellTop   float64 // Pa, depression at 100 %
	gasTop    float64 // kg/s at 100 %
	thrustTop float64 // N at 100 %
}

const (
	day     = 285.0    // K, ambient
	weather = 100600.0 // Pa, barometer
	humid   = 0.58     // relative humidity
	// pickedUp is the part of the way to the temperature of the hot parts that the air
	// of an engine that lost its flame at speed comes.
	pickedUp = 0.25
)

func newPlant(c *compute.Config, d Day, rng *rand.Rand) (*plant, error) {
	d.settle()
	p := &plant{line: newLine(c), cfg: c, fuel: c.Fuel, day: d}
	if p.fuel == (gas.Fuel{}) {
		p.fuel = gas.Kerosene()
	}
	geometry := c.Nozzle.Config
	if position := c.Stations.ThroatArea; len(position) > 0 { // held in the middle of its range
		ch := &c.Channels[position[0]]
		geometry.ThroatArea = (ch.Low + ch.High) / 2
	}
	if !(geometry.ThroatArea > 0) {
		return nil, errors.New("rehearsal: the rig file gives no throat area: add nozzle.throat_area")
	}
	p.throat = geometry.ThroatArea
	geometry.ResolutionFloor = 0 // the smallest flow is a flow; telling it from none is the watcher's task
	var err error
	if p.exit, err = nozzle.New(geometry); err != nil {
		return nil, fmt.Errorf("rehearsal: %w", err)
	}
	for i := range p.phase {
		p.phase[i] = 2 * math.Pi * rng.Float64()
	}
	p.cellTop = 1.5 * c.Stations.Depression
	if p.cellTop == 0 && c.Stations.ExitPlane >= 0 {
		p.cellTop = 400
	}
	if d.Depression > 0 {
		p.cellTop = d.Depression
	}
	p.metal, p.wall = d.Ambient, d.Ambient
	p.surroundings()

	// The state at 100 % scales what grows with power.
	p.n, p.flame, p.lit = 1, 1, true
	p.egt = p.egtMax
	p.wall = p.egt * p.mixed(p.egt)
	p.gasTop = 1
	if err := p.gasPath(); err != nil {
		return nil, err
	}
	p.gasTop, p.thrustTop = p.gasFlow, p.thrust
	p.state = state{egt: d.Ambient}
	p.flame, p.wall = 0, d.Ambient
	p.surroundings()
	return p, p.gasPath()
}

// longest is the longest time step, s, that follows rotor and fuel control.
const longest = 0.02

// advance moves the plant on by dt seconds with the settings of a segment; part is
// how much of the segment is over, and from the demand before it.
func (p *plant) advance(dt float64, s *Segment, part, from float64) error {
	p.demand = s.Speed
	if s.Ramp {
		p.demand = from + (s.Speed-from)*part
	}
	n := math.Ceil(dt/longest - 1e-9)
	for range int(n) {
		p.step(dt/n, s)
	}
	p.surroundings()
	return p.gasPath()
}

// step moves rotor, flame and metal on by dt seconds.
func (p *plant) step(dt float64, s *Segment) {
	p.t += dt
	l := &p.line
	steady := l.steadyEGT(p.n)
	up := l.running(p.n)

	// Fuel lights above 8 % speed after the spray has found the igniter.
	if s.Fuel && !s.Quench && p.n > 0.08 {
		p.fuelled += dt
	} else {
		p.fuelled = 0
	}
	p.lit = p.fuelled > 0.4
	p.flame = lag(p.flame, mark(p.lit), dt, 0.4)
	p.richness = lag(p.richness, mark(s.EGT > 0), dt, 0.5)
	if s.EGT > 0 {
		p.rich = s.EGT
	}

	// Rotor: the governor asks for a rate, acceleration and deceleration controls
	// bound it by temperature, the fuel valve follows with a lag.
	var rate float64
	switch {
	case p.lit:
		wander := 2e-4*math.Sin(2.1*p.t+p.phase[0]) + 1e-4*math.Sin(4.7*p.t+p.phase[1])
		rate = (p.demand + wander - p.n) / 0.35
		accel := l.gain(p.n) * clamp(l.egtAccel-steady, 30, 130)
		accel = up*accel + (1-up)*0.06
		rate = clamp(rate, -l.gain(p.n)*150, accel)
	case s.Starter:
		rate = clamp((0.16-p.n)/0.8, -0.03, 0.07)
	default:
		rate = -(p.n/7 + 0.008) * mark(p.n > 0)
	}
	p.rate = lag(p.rate, rate, dt, 0.15)
	p.n += p.rate * dt
	if p.n <= 0 {
		p.n, p.rate = 0, max(0, p.rate)
	}

	// Indicated EGT without the thermocouples' lag: what the turbine needs, what
	// the acceleration takes, and what a start or too much fuel adds.
	hot := steady + up*clamp(p.rate/l.gain(p.n), -160, 140) + (1-up)*110
	hot += p.richness * max(0, p.rich-hot)
	if p.lit {
		p.metal = lag(p.metal, hot-150, dt, 8)
	} else {
		cooling := 30.0
		if p.n > 0.02 {
			cooling = 10
		}
		p.metal = lag(p.metal, p.ambient, dt, cooling)
	}
	metal := p.metal
	if s.Quench {
		metal = p.ambient + pickedUp*(p.metal-p.ambient)
	}
	p.egt = p.flame*hot + (1-p.flame)*metal

	p.bleed = lag(p.bleed, s.Bleed*l.bleedShare(p.n), dt, 0.1)
	p.cell = lag(p.cell, p.cellTop*square(p.gasFlow/p.gasTop), dt, 0.3)
	if m := p.cfg.Nozzle.MetalLag; m > 0 {
		p.wall = lag(p.wall, p.t7, dt, float64(m)/1e9)
	} else {
		p.wall = p.t7
	}
}

// bleedShare is the share of air that must be blown off to take the throat to 8 %
// below choking at speed n.
func (l *line) bleedShare(n float64) float64 {
	now := l.steadyNPR(n) - 1
	if now <= 0 {
		return 0
	}
	return clamp(1-math.Sqrt((0.92*l.chokeNPR-1)/now), 0, 0.35)
}

// surroundings sets weather and cell, which wander slowly.
func (p *plant) surroundings() {
	p.barometer = p.day.Barometer + 18*math.Sin(p.t/110+p.phase[0]) + 4*math.Sin(p.t/13+p.phase[1])
	p.ambient = p.day.Ambient + 0.4*math.Sin(p.t/170+p.phase[2])
	p.humidity = p.day.Humidity + 0.015*math.Sin(p.t/90+p.phase[3])
	p.inletT = p.ambient + 0.3*math.Sin(p.t/40+p.phase[1])
	p.back = p.barometer - p.cell
	p.inletP = p.barometer
	if p.cfg.Stations.InletP >= 0 {
		p.inletP -= 0.6*p.cell + 250*square(p.gasFlow/max(p.gasTop, 1e-9))
	}
}

// mixed gives T7 over EGT: the factor of the rig file in hot gas, and 1 in a cold engine,
// all of which has the temperature of its surroundings.
func (p *plant) mixed(egt float64) float64 {
	const hot = 150 // K above them
	return 1 - (1-p.factor)*clamp((egt-p.ambient)/hot, 0, 1)
}

// gasPath computes pressures, flows and thrust from speed, temperature and bleed.
// Air, fuel and nozzle flow close exactly: W8 = W2 (1 − blown off − bled) + Wf. What the
// rig file states as bled is taken off at all times.
func (p *plant) gasPath() error {
	c := p.cfg
	p.t7 = p.egt * p.mixed(p.egt)
	// Off the running line the throat passes W √T ∝ p7: the rise of pressure goes
	// with temperature and, while the compressor pumps the same air, with the
	// square of what is not blown off.
	rise := (p.steadyNPR(p.n) - 1) * p.egt / p.steadyEGT(p.n) * square(1-p.bleed)
	p.npr = 1 + rise
	p.p7 = p.back * p.npr
	p.power = clamp(rise/p.rise, 0, 1.3)

	war, err := gas.HumidityRatio(p.humidity, p.ambient, p.barometer)
	if err != nil {
		return fmt.Errorf("rehearsal: surroundings: %w", err)
	}
	far, mix, err := p.burn(war)
	if err != nil {
		return fmt.Errorf("rehearsal: exhaust gas: %w", err)
	}
	// The configured duct loss is a share of p7; a duct in which nothing flows loses
	// nothing.
	idle := 1 + c.Nozzle.DuctLoss*math.Exp(-rise/0.02)
	r, err := p.exit.Evaluate(&mix, nozzle.Inputs{
		TotalPressure: unit.Absolute(p.p7 * idle), BackPressure: unit.Absolute(p.back),
		TotalTemperature: p.t7, MetalTemperature: p.wall,
	})
	if err != nil {
		return fmt.Errorf("rehearsal: %w", err)
	}
	p.gasFlow = r.MassFlow
	p.static(&mix)
	p.far = far
	dry := p.gasFlow / (1 + far + war)
	p.fuelFlow = dry * far
	p.airFlow = dry * (1 + war) / (1 - p.bleed - c.Stations.BleedShare)
	p.thrust = 0.985*r.GrossThrust - 5*p.airFlow // cell drag, and the momentum of the air that drifts in at 5 m/s
	p.bellmouth = p.bellmouthDrop(war)
	return nil
}

// burn gives the fuel-air ratio, dry basis, that heats the air to T7, and the gas:
//
//	(1 + war) [h_air(T2) − h_air(T_ref)] + f q = (1 + war + f) [h(T7) − h(T_ref)]
func (p *plant) burn(war float64) (far float64, mix gas.Mixture, err error) {
	c := p.cfg
	products := func() (gas.Mixture, error) {
		if c.Gamma > 0 {
			return gas.Perfect(c.Gamma, c.GasR)
		}
		return gas.NewMixture(p.fuel, far, war)
	}
	air, err := products()
	if err != nil {
		return 0, air, err
	}
	const reference = 298.15
	q := heating
	if h := &c.Heat; h.HeatingValue > 0 {
		q = h.Efficiency * h.HeatingValue
	}
	in := (1 + war) * (air.H(p.inletT) - air.H(reference))
	mix = air
	for range 6 { // the gas depends on f a little
		h := mix.H(p.t7) - mix.H(reference)
		far = p.flame * max(0, ((1+war)*h-in)/(q-h))
		if mix, err = products(); err != nil {
			return 0, mix, err
		}
	}
	return far, mix, nil
}

// static finds the static state at the probes of station 7, by the area of the passage
// there, twice the throat where the rig file has none.
func (p *plant) static(g *gas.Mixture) {
	area := p.cfg.Recovery.Area
	if area == 0 {
		area = 2 * p.throat
	}
	h0, s0 := g.H(p.t7), g.S0(p.t7)
	pressure := func(t float64) float64 { return p.p7 * math.Exp((g.S0(t)-s0)/g.R()) }
	lo, hi := g.Critical(p.t7).Temperature, p.t7
	for range 50 {
		t := (lo + hi) / 2
		if area*pressure(t)/(g.R()*t)*math.Sqrt(2*(h0-g.H(t))) > p.gasFlow {
			lo = t
		} else {
			hi = t
		}
	}
	p.t7Static, p.p7Static = hi, pressure(hi)
}

// bellmouthDrop gives the pressure drop, Pa, by which the bellmouth shows the air
// flow: W = C A p √(2 (h0 − h))/(R T) with the isentropic static state p, T. A
// bellmouth that is too small shows its choked drop.
func (p *plant) bellmouthDrop(war float64) float64 {
	area := p.cfg.Bellmouth.Area * p.cfg.Bellmouth.Coefficient
	if !(area > 0) || p.airFlow <= 0 {
		return 0
	}
	air, err := gas.NewMixture(gas.Kerosene(), 0, war)
	if err != nil {
		return 0
	}
	h0, s0 := air.H(p.inletT), air.S0(p.inletT)
	static := func(t float64) float64 { return p.inletP * math.Exp((air.S0(t)-s0)/air.R()) }
	lo, hi := air.Critical(p.inletT).Temperature, p.inletT
	for range 50 {
		t := (lo + hi) / 2
		if area*static(t)/(air.R()*t)*math.Sqrt(2*(h0-air.H(t))) > p.airFlow {
			lo = t
		} else {
			hi = t
		}
	}
	return p.inletP - static(hi)
}

// lag moves x towards u as a first-order lag of time constant tau does in dt.
func lag(x, u, dt, tau float64) float64 { return x + (u-x)*-math.Expm1(-dt/tau) }

func clamp(x, lo, hi float64) float64 { return max(lo, min(hi, x)) }

func square(x float64) float64 { return x * x }

func mark(b bool) float64 {
	if b {
		return 1
	}
	return 0
}
