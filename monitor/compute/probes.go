package compute

import (
	"errors"
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/rake"
)

const second = int64(1e9)

// group is a group of probes with its watch and buffers.
type group struct {
	channels []int
	watch    rake.Watch
	sense    rake.Sense
	values   []float64
	quality  []monitor.Quality
	now      rake.Result // of this scan
	sampling float64     // standard uncertainty by the places of the probes, as last known
	places   []float64   // what stands at the place of each probe in this scan
	weights  []float64   // as they follow the flow; nil = those of the watch
}

// Probes is what is remembered of a group. It is plain data.
type Probes struct {
	rake.State
	Sampling float64 // standard uncertainty by the places of the probes, as last known
	Sampled  bool
	Flow     rake.Live // weights by mass flux
	Suspects rake.Suspects
}

// back is the time without fault, ns, after which a probe counts again. It is short, since
// a probe that comes and goes leaves no step once its pattern is known, and a module that
// stumbles takes all its probes along: nobody should be blind for long after it.
const back = 5 * second

// backHarness is that of an EGT harness, on which limits are watched.
const backHarness = 2 * second

// newGroup prepares a group. What the watch leaves at zero becomes: proof held 1 s,
// departure held 3 s, taken back after 5 s, learned in 30 s, adapting over 300 s.
func newGroup(w rake.Watch, channels []int, least int) (group, error) {
	w.Probes, w.Least = len(channels), max(least, 1)
	for _, d := range []struct {
		to    *int64
		value int64
	}{{&w.ProofHold, second}, {&w.DepartureHold, 3 * second}, {&w.Return, back}, {&w.Learn, 30 * second}, {&w.Memory, 300 * second}} {
		if *d.to == 0 {
			*d.to = d.value
		}
	}
	g := group{channels: channels, watch: w, values: make([]float64, len(channels)), quality: make([]monitor.Quality, len(channels)), places: make([]float64, len(channels))}
	g.now.Mean = math.NaN()
	if len(channels) == 0 {
		return g, nil
	}
	return g, w.Check()
}

// sense gives how it is told what is wrong with the probes of a group. Where no
// departure is stated it is 40 K, four times what the pattern of an annulus changes from
// idle to full power, or 2 % of the range. (Common practice, no source.)
func sense(c *Config, w *rake.Watch, channels []int, pressure bool) rake.Sense {
	out := rake.Sense{Pressure: pressure, Limit: w.Departure}
	switch {
	case out.Limit > 0 || len(channels) == 0:
	case pressure:
		out.Limit = 0.02 * (c.Channels[channels[0]].High - c.Channels[channels[0]].Low)
	default:
		out.Limit = 40
	}
	return out
}

// step enters a scan and marks the probes that are out in it. base is what rake.Sense
// asks for.
func (g *group) step(s *Probes, scan *monitor.Scan, learn bool, base float64) {
	if len(g.channels) == 0 {
		return
	}
	for k, i := range g.channels {
		g.values[k], g.quality[k] = scan.Value[i], scan.Quality[i]
	}
	g.now = g.watch.Step(&s.State, scan.T, g.values, g.quality, learn && !g.sense.Departs(&s.Suspects, &s.State))
	g.sense.Step(&s.Suspects, &g.watch, &s.State, scan.T, g.values, g.quality, base)
	g.watch.Places(&s.State, &g.now, g.values, g.quality, g.places)
	g.weights = nil
	if u := g.now.Sampling; u == u {
		s.Sampling, s.Sampled = u, true
	}
	g.sampling = math.NaN()
	if s.Sampled {
		g.sampling = s.Sampling
	}
	for k, i := range g.channels {
		if g.out(k) && scan.Quality[i].Usable() {
			scan.Quality[i], scan.Value[i] = monitor.QualityExcluded, math.NaN()
		}
	}
}

// ErrNoProbe says that a channel is in no group of probes.
var ErrNoProbe = errors.New("it is no probe of a rake or of the EGT harness")

// Readmit takes a probe back that is excluded, as a person asks: see rake.State.Readmit. The
// errors are ErrNoProbe, rake.ErrNotOut and rake.ErrProven; nothing has changed then.
func (c *Computer) Readmit(s *State, channel int) error {
	err := ErrNoProbe
	for _, g := range []struct {
		channels []int
		probes   *Probes
	}{{c.p7.channels, &s.P7}, {c.t7.channels, &s.T7}, {c.egt.channels, &s.Harness}} {
		k := slices.Index(g.channels, channel)
		switch {
		case k < 0:
			continue
		case k >= len(g.probes.Probes): // no scan yet
			err = rake.ErrNotOut
		default:
			if err = g.probes.Readmit(k); err == nil && k < len(g.probes.Suspects.Probes) {
				g.probes.Suspects.Probes[k] = rake.Suspect{}
			}
		}
		if err == nil {
			return nil
		}
	}
	return err
}

func (g *group) out(k int) bool { return g.now.Out&(1<<k) != 0 }

// weighByFlow moves the mean to the weights of the mass flux: as of this scan if rake
// and wall tell it, else as it was. It reports which.
func (c *Computer) weighByFlow(s *Probes, g *group, p *monitor.OperatingPoint, temperature []float64) {
	live := s.Flow.Weigh(p.T, g.watch.Weights, c.p7.places, c.head.substitute, temperature)
	// At rest there is nothing to weigh by, and nothing amiss.
	if !live && !(c.p7.now.Mean < (1+leastFlow)*p.V[monitor.BackPressure]) {
		p.Warnings |= monitor.WarnWeightsHeld
	}
	g.weights = s.Flow.Weights
	g.now.Mean += g.watch.Reweigh(&g.now, g.places, g.weights)
}

// leastFlow is the NPR − 1 below which no flow is looked for in a rake.
const leastFlow = 0.05

// weight gives the weight of probe k in the mean.
func (g *group) weight(k int) float64 {
	if g.weights != nil {
		return g.weights[k]
	}
	if g.watch.Weights == nil {
		return 1
	}
	return g.watch.Weights[k]
}

// mean gives the plain mean of the usable channels, NaN when there is none.
func mean(scan *monitor.Scan, channels []int) float64 {
	sum, n := 0.0, 0.0
	for _, i := range channels {
		if scan.Quality[i].Usable() {
			sum += scan.Value[i]
			n++
		}
	}
	return sum / n
}

// harness makes the indicated EGT. A probe that reads hot without proof of failure
// counts: a real hot streak is never voted away.
func (c *Computer) harness(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	st := &c.cfg.Stations
	g := &c.egt
	g.step(&s.Harness, scan, c.learns, c.surroundings(scan))
	for k, i := range g.channels {
		c.usable[k] = scan.Quality[i].Usable()
	}
	_, spread, hottest, coldest, _ := egt.Indicated(g.values, c.usable, st.EGTParallel, st.EGTTrim)
	p.EGTProbesUsed = int16(g.now.Used)
	p.V[monitor.EGTIndicated] = g.now.Mean + st.EGTTrim
	p.V[monitor.EGTSpread] = spread
	p.V[monitor.EGTHottest], p.V[monitor.EGTColdest] = hottest, coldest
	if math.IsNaN(g.now.Mean) {
		p.EGTCause = blame(scan, st.EGT)
	}
}

// surroundings gives the temperature of the terminals of thermocouples, about, K.
func (c *Computer) surroundings(scan *monitor.Scan) float64 {
	if t := c.channel(scan, c.cfg.Stations.AmbientT); t == t {
		return t
	}
	return c.channel(scan, c.cfg.Stations.InletT)
}

// pressures finds p7, barometer and back pressure.
func (c *Computer) pressures(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	st := &c.cfg.Stations
	v := &p.V
	base := c.channel(scan, st.Barometer)
	if base != base {
		base = c.channel(scan, st.ExitPlane)
	}
	c.p7.step(&s.P7, scan, c.learns, base)
	p.RakeProbesUsed = int16(c.p7.now.Used)
	v[monitor.RakePressure], p.PressureBy = c.p7.now.Mean, monitor.SourceRake
	c.head = bridged{substitute: mean(scan, st.WallStatic)}
	if math.IsNaN(c.p7.now.Mean) {
		p.PressureBy = monitor.SourceNone
		if c.head.substitute > 0 && s.Head.Known() {
			// Its dynamic head is found with the flow.
			c.head.in = true
			p.PressureBy = monitor.SourceWallStatic
			p.Warnings |= monitor.WarnPressureBridged
		} else {
			p.Cause = blame(scan, st.P7)
		}
	}
	baro := c.channel(scan, st.Barometer)
	v[monitor.Barometer] = baro
	if st.StationPressure > 0 && math.Abs(baro/st.StationPressure-1) > implausible {
		p.Warnings |= monitor.WarnBarometer
	}
	switch pb := c.channel(scan, st.ExitPlane); {
	case pb == pb:
		v[monitor.BackPressure], p.BackFrom = pb, monitor.SourceExitPlane
	case baro == baro:
		v[monitor.BackPressure], p.BackFrom = baro-st.Depression, monitor.SourceBarometer
	case st.Barometer >= 0: // also what is gauge against it is lost
		p.Cause = blame(scan, []int{st.Barometer})
	default:
		p.Cause = blame(scan, []int{st.ExitPlane})
	}
	if st.P7Flux {
		c.weighByFlow(&s.P7, &c.p7, p, nil)
		v[monitor.RakePressure] = c.p7.now.Mean
	}
}

// implausible is the part by which a station pressure differs at most from that of
// the standard atmosphere: records at sea level are 870 and 1084 hPa, weather away
// from the eye of a storm stays within 5 %.
const implausible = 0.06

// Bridge learns what a main source reads against a substitute, while both are good
// and the engine runs at about the same pressure ratio, so that the substitute takes
// over without a step. It is plain data; the zero value knows nothing.
type Bridge struct {
	Value float64
	Scale float64 // mean deviation of single values from Value
	NPR   float64 // at which it was learned last
	Time  int64   // ns of good time in it
	T     int64   // event time of the last scan in it
}

const (
	bridgeKnown  = 3 * second  // of good time
	bridgeMemory = 20 * second // over which it adapts
	bridgeNear   = 0.02        // relative change of NPR that is "the same"
	bridgeGap    = second      // the most that a scan counts
)

// Known tells whether enough was learned.
func (b *Bridge) Known() bool { return b.Time >= bridgeKnown }

// learn enters a value at event time t.
func (b *Bridge) learn(t int64, v, npr float64) {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return
	}
	dt := min(t-b.T, bridgeGap)
	if b.T == 0 {
		b.Value, b.NPR, b.T = v, npr, t
		return
	}
	if dt <= 0 {
		return
	}
	b.T = t
	// A pressure ratio that moves is followed, and nothing learned: lines and probes lag.
	near := math.Abs(npr-b.NPR) <= bridgeNear*b.NPR
	b.NPR += min(float64(dt)/float64(second), 1) * (npr - b.NPR)
	if !near {
		return
	}
	b.Time = min(b.Time+dt, bridgeMemory)
	w := float64(dt) / float64(max(b.Time, dt))
	d := v - b.Value
	b.Value += w * d
	b.Scale += w * (math.Abs(d) - b.Scale)
}

// bridged is a substitute in a scan.
type bridged struct {
	substitute float64 // its reading, NaN when there is none
	in         bool    // it stands in
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
