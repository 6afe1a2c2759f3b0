package compute

import (
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/rake"
	"throatwatch/monitor/unit"
)

const (
	// findHold is how long a reading has to prove a failure, or to be clean again.
	findHold = second
	// restHold is how long the rotor has to be at rest before a zero is looked at, and
	// restMemory over how long it is averaged.
	restHold   = 5 * second
	restMemory = 2 * second
	// draught is by how much a pressure at rest may differ from the barometer in a cell
	// with doors and fans, Pa, beyond what its mates differ too. Common practice, no source.
	draught = 50.0
)

// Sensor is what is remembered to tell what is wrong with a channel. It is plain data.
type Sensor struct {
	Found   monitor.Finding // as shown
	Failed  monitor.Finding // by the quality of its readings
	Bad     rake.Hold
	Clean   rake.Hold
	Shifted monitor.Finding // at rest
	Zero    float64         // Pa, reading at rest against its port
	ZeroFor int64           // ns at rest in it
}

// zeroed lists the channels whose zero is looked at when the rotor is at rest: the
// pressures of stations, all but the barometer.
func zeroed(c *Config) []int {
	st := &c.Stations
	var out []int
	for _, i := range slices.Concat(st.P7, st.WallStatic, []int{st.ExitPlane, st.InletP, st.Bellmouth}) {
		if i >= 0 && i != st.Barometer && !slices.Contains(out, i) {
			out = append(out, i)
		}
	}
	return out
}

// failures tells of each channel what the quality of its readings proves. It comes
// before exclusions, which are no quality of a reading.
func (c *Computer) failures(s *State, scan *monitor.Scan) {
	if len(s.Sensors) != len(c.cfg.Channels) {
		s.Sensors = make([]Sensor, len(c.cfg.Channels))
	}
	for i := range s.Sensors {
		m := &s.Sensors[i]
		kind := c.failure(i, scan)
		if m.Bad.For(scan.T, kind != monitor.NoFinding, findHold) && m.Failed.Kind != kind {
			m.Failed = monitor.Finding{Kind: kind, Proven: true, Since: m.Bad.Since}
		}
		if m.Clean.For(scan.T, scan.Quality[i].Usable(), findHold) {
			m.Failed = monitor.Finding{}
		}
	}
}

// failure names what the reading of a channel proves in a scan.
func (c *Computer) failure(i int, scan *monitor.Scan) monitor.FindingKind {
	ch := &c.cfg.Channels[i]
	hot := ch.Unit.Dimension == unit.Temperature
	switch scan.Quality[i] {
	case monitor.QualityInvalidCode:
		if hot && ch.beyond(scan.Raw[i]) {
			return monitor.FindingOpen
		}
		return monitor.FindingCode
	case monitor.QualityOutOfRange:
		if hot {
			return monitor.FindingOpen // burn-out detection drives it to one end of the scale
		}
		return monitor.FindingRange
	case monitor.QualityRate:
		return monitor.FindingRate
	case monitor.QualityStuck:
		return monitor.FindingStuck
	case monitor.QualityMissing, monitor.QualityGood, monitor.QualityHeld, monitor.QualityStale, monitor.QualityNoReference, monitor.QualityExcluded, monitor.NumQualities:
	}
	return monitor.NoFinding
}

// openBelow is a temperature, K, that nothing on a rig has: burn-out detection that
// drives down the scale ends there. Type K ends at 3 K, −270 °C [IEC 60584-1].
const openBelow = 73.0

// beyond tells whether a code of a thermocouple's module is what an open one reads: a
// number beyond the range that a temperature can be. A module fault is sent as one that
// cannot, such as −9999.
func (ch *Channel) beyond(raw float64) bool {
	v := raw
	if n := len(ch.Polynomial); n > 0 {
		v = 0
		for _, a := range slices.Backward(ch.Polynomial) {
			v = v*raw + a
		}
	}
	k := ch.Unit.ToSI(v)
	return k > ch.High || k >= 0 && k < openBelow
}

// zeroes looks at the zeros of the pressures while the rotor is at rest: each against
// its port, less what all of them differ, which is the cell.
func (c *Computer) zeroes(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	if p.Phase != monitor.Off && p.Phase != monitor.Cooling || c.cfg.Stations.Speed < 0 {
		s.Rest = 0
		return
	}
	dt := int64(0)
	if s.RestT > 0 {
		dt = min(max(scan.T-s.RestT, 0), second)
	}
	s.RestT = scan.T
	if s.Rest += dt; s.Rest < restHold {
		for _, i := range c.zeroed {
			s.Sensors[i].ZeroFor = 0
		}
		return
	}
	n := 0
	for _, i := range c.zeroed {
		m := &s.Sensors[i]
		z, _ := c.zero(scan, i)
		if z != z {
			m.ZeroFor = 0
			continue
		}
		if m.ZeroFor == 0 {
			m.Zero = z
		}
		m.ZeroFor += max(dt, 1)
		m.Zero += -math.Expm1(-float64(dt)/float64(restMemory)) * (z - m.Zero)
		if c.cfg.Channels[i].Reference != calib.Differential {
			c.zeros[n] = m.Zero
			n++
		}
	}
	cell := 0.0
	if n >= 3 {
		slices.Sort(c.zeros[:n])
		cell = (c.zeros[(n-1)/2] + c.zeros[n/2]) / 2
	}
	for _, i := range c.zeroed {
		m := &s.Sensors[i]
		if m.ZeroFor < restMemory {
			continue
		}
		d := m.Zero
		if c.cfg.Channels[i].Reference != calib.Differential {
			d -= cell
		}
		_, u := c.zero(scan, i)
		switch {
		case math.Abs(d) > u+draught:
			if m.Shifted.Kind == monitor.NoFinding {
				m.Shifted = monitor.Finding{Kind: monitor.FindingZero, Proven: true, Since: scan.T}
			}
			m.Shifted.Size = d
		case math.Abs(d) < 0.8*(u+draught):
			m.Shifted = monitor.Finding{}
		}
	}
}

// zero gives what a pressure reads against its port and the 95 % uncertainty of that,
// Pa; NaN without a reading. Of a gauge channel the barometer's error is no part.
func (c *Computer) zero(scan *monitor.Scan, i int) (z, u95 float64) {
	ch := &c.cfg.Channels[i]
	if !scan.Quality[i].Usable() && scan.Quality[i] != monitor.QualityExcluded {
		return math.NaN(), 0
	}
	z = ch.reading(scan.Raw[i]) - ch.Zero.At(scan.T-max(scan.Age[i], 0))
	u95 = math.Hypot(ch.Uncertainty.U95(z, ch.Low, ch.High), ch.Uncertainty.Random)
	if ch.Reference == calib.Absolute {
		b := c.cfg.Stations.Barometer
		if b < 0 {
			return math.NaN(), 0
		}
		baro := &c.cfg.Channels[b]
		z -= scan.Value[b]
		u95 = math.Hypot(u95, baro.Uncertainty.U95(scan.Value[b], baro.Low, baro.High))
	}
	return z, u95
}

// reading gives the value of a raw reading, SI, without its reference.
func (ch *Channel) reading(raw float64) float64 {
	v, _ := ch.Convert(raw)
	return v
}

// findings puts together what was found of each channel: what its own readings prove
// first, then what its mates prove, then its zero at rest, then what is suspected.
func (c *Computer) findings(s *State, scan *monitor.Scan) {
	for i := range s.Sensors {
		m := &s.Sensors[i]
		m.Found = m.Failed
		if m.Found.Kind == monitor.NoFinding {
			m.Found = m.Shifted
		}
	}
	for _, g := range [...]struct {
		channels []int
		from     *Probes
	}{{c.p7.channels, &s.P7}, {c.t7.channels, &s.T7}, {c.egt.channels, &s.Harness}} {
		for k := range g.from.Suspects.Probes {
			m, found := &s.Sensors[g.channels[k]], &g.from.Suspects.Probes[k].Found
			if m.Failed.Kind == monitor.NoFinding && found.Kind != monitor.NoFinding && (found.Proven || m.Shifted.Kind == monitor.NoFinding) {
				m.Found = *found
			}
		}
	}
	for i := range s.Sensors {
		scan.Finding[i] = s.Sensors[i].Found
	}
}
