package rake

import (
	"math"

	"throatwatch/monitor"
)

// What tells a probe that lies from gas that is not what it was. Numbers are common
// practice without a source; rehearsals with and without faults hold them.
const (
	// A shorted thermocouple reads its cold junction to within nearTerminals, or to within
	// nearRoom of room where nothing measures that, is still, and its mates are hotter by
	// apart.
	nearTerminals = 25.0   // K
	nearRoom      = 40.0   // K
	room          = 293.15 // K
	apart         = 150.0  // K
	still         = 2.5    // K, from its mean over restless

	restless   = int64(300e6)
	proofHold  = int64(1e9)
	leftHold   = int64(500e6)
	lagHold    = int64(2e9)
	departHold = int64(3e9)
	clearHold  = int64(5e9)
	forget     = int64(2e9) // a gap after which all that is compared begins anew

	follows = 0.1        // part of the square of a departure that may remain when it is explained
	decays  = 0.85       // part of its largest departure that a slow probe, being hot, must have come down to
	outside = 0.25       // part of the limit by which a lag cannot leave where its mates have been
	inStep  = 0.125      // part of the limit within which a probe is with its mates
	respond = 0.75       // part of the limit that a slow probe must have been behind by
	gradual = int64(4e9) // a departure that takes longer from a quarter of the limit to all of it is a drift
	variety = 0.3        // part of the highest pressure by which it has to vary to tell shift and leak apart

	blocked = int64(30e9)  // a lag of a pressure line beyond it is a blocked line
	dead    = int64(200e9) // beyond it a probe does not respond at all
)

// lags are the time constants that a slow probe is held against, ns. Healthy
// thermocouples differ from their mates by less than a third of the first.
var lags = [...]int64{3e9, 6e9, 12e9, 25e9, 50e9, 100e9, 250e9}

// Sense is how it is told what is wrong with the probes of a group. A slow probe follows
// the level of its mates behind a lag: it never leaves the range that they have gone
// through, and comes closer in time. As long as a thermocouple that is hotter than its
// mates does not come closer, it may be the gas, and that is never voted away; it is dead
// only if its reading does not change at all. A shift of zero is the same at every pressure, a
// leak takes the same part of it. A drift grows slowly. What is hot or cold of a sudden
// may be the gas.
type Sense struct {
	Pressure bool    // total pressures; else thermocouples
	Limit    float64 // departure from its own pattern that is told, K or Pa

	parts parts // of the last scan, which most often are those of the next
}

// parts are the parts of the way that first-order lags go in dt.
type parts struct {
	dt            int64
	quick, smooth float64
	lags          [len(lags)]float64
}

// of gives the parts for dt.
func (p *parts) of(dt int64) *parts {
	if p.dt != dt || dt == 0 {
		*p = parts{dt: dt, quick: part(dt, restless), smooth: part(dt, smooth)}
		for k, tau := range lags {
			p.lags[k] = part(dt, tau)
		}
	}
	return p
}

// Hold is since when a condition is true.
type Hold struct {
	On    bool
	Since int64
}

// For tells whether the condition has been true for d at event time t.
func (h *Hold) For(t int64, condition bool, d int64) bool {
	if !condition {
		h.On = false
		return false
	}
	if !h.On {
		h.On, h.Since = true, t
	}
	return t-h.Since >= d
}

// Suspect is what is remembered to tell what is wrong with a probe.
type Suspect struct {
	Found  monitor.Finding
	Known  bool    // the following holds
	Usual  bool    // its pattern is known and that of gas like this
	Value  float64 // filtered over restless
	Depart float64 // reading − pattern − level of the group, filtered over smooth
	// What it would read behind each of the lags, having been right when it was last in
	// step with its mates, and since then ∫ (reading − that)² dt; first without a lag.
	Lagged [len(lags)]float64
	Behind [len(lags) + 1]float64 // K² s or Pa² s
	From   float64                // level of the group then
	Moved  float64                // farthest that the group has gone from there
	Most   float64                // largest departure since then
	Low    float64                // lowest and highest level of the group since then
	High   float64
	Left   bool // it has left that range: no lag explains it

	Leaves Hold // it is outside of the range

	Last    float64
	Changed int64 // when the reading was another one before
	Still   bool  // what was found is of a reading that did not change

	Short, Slow, Early, Beyond, Clear Hold   // Early: Depart is beyond a quarter of the limit
	Past                              Models // since Early
}

// Models is what is needed to hold a departure e at a gauge pressure g against two
// models, e = a and e = b·g.
type Models struct {
	N, E, EE, GG, EG float64
	Low, High        float64 // of g
}

func (m *Models) add(e, g float64) {
	if m.N == 0 {
		m.Low, m.High = g, g
	}
	m.Low, m.High = min(m.Low, g), max(m.High, g)
	m.N++
	m.E += e
	m.EE += e * e
	m.GG += g * g
	m.EG += e * g
}

// Suspects is what telling remembers of a group. It is plain data; the zero value has
// seen nothing.
type Suspects struct {
	Probes []Suspect
	T      int64
	Seen   bool
	Lagged float64 // level of the group behind the third of the lags
}

// Departs tells whether a probe in the mean departs from its pattern, or may be about to:
// it must not be learned then. What a slow probe reads in steady running is right.
func (c *Sense) Departs(f *Suspects, s *State) bool {
	for i := range f.Probes {
		p := &f.Probes[i]
		told := p.Found.Kind != monitor.NoFinding && p.Found.Kind != monitor.FindingSlow
		if (told || p.Usual && math.Abs(p.Depart) > c.Limit/2) && i < len(s.Probes) && s.Probes[i].Out == In {
			return true
		}
	}
	return false
}

// Step tells of each probe what is wrong with it, behind a Watch.Step with the same
// values and qualities, and notes in s what is proven. base is the temperature of the
// cold junctions, K, or the pressure that gauge pressures are against, Pa; NaN when it
// is not known. With fewer than three probes in the mean nothing can be told.
func (c *Sense) Step(f *Suspects, w *Watch, s *State, t int64, values []float64, quality []monitor.Quality, base float64) {
	if len(f.Probes) != w.Probes {
		*f = Suspects{Probes: make([]Suspect, w.Probes)}
	}
	level, plain, n := w.level(s, values, quality)
	dt := max(t-f.T, 0)
	switch {
	case n < voters:
		f.Seen = false
	case !f.Seen || dt > forget:
		f.T, f.Seen, f.Lagged, dt = t, true, level, 0
		for i := range f.Probes {
			f.Probes[i].Known = false
		}
	default:
		f.T = t
	}
	if f.Seen {
		c.all(f, w, s, t, dt, level, plain-base, values, quality, base)
	}
	s.Proven = 0
	for i := range f.Probes {
		// A slow probe is right in steady running; the rest is left out by its departure.
		if kind := f.Probes[i].Found.Kind; kind == monitor.FindingShort || kind.Dead() {
			s.Proven |= 1 << i
		}
	}
}

// level gives the median of what the probes in the mean read, less their patterns and
// as it is.
func (w *Watch) level(s *State, values []float64, quality []monitor.Quality) (level, plain float64, n int) {
	known := s.known(w)
	var less, of [MaxProbes]float64
	for i := range s.Probes {
		p := &s.Probes[i]
		if p.Out == In && quality[i].Usable() && (!known || p.Learned >= w.Learn) {
			less[n], of[n] = values[i]-p.Offset, values[i]
			n++
		}
	}
	if n == 0 {
		return math.NaN(), math.NaN(), 0
	}
	return median(less[:n]), median(of[:n]), n
}

// all judges every probe that is read. gauge is by how much the group is above base.
func (c *Sense) all(f *Suspects, w *Watch, s *State, t, dt int64, level, gauge float64, values []float64, quality []monitor.Quality, base float64) {
	by := c.parts.of(dt)
	f.Lagged += by.lags[2] * (level - f.Lagged)
	for i := range f.Probes {
		p, of := &f.Probes[i], &s.Probes[i]
		if !quality[i].Usable() {
			p.Known = false
			continue
		}
		// A pattern is one of hot gas: cold metal has another.
		p.Usual = of.Learned > 0 && of.Learned >= w.Learn && (c.Pressure || !(gauge < apart))
		c.enter(p, t, values[i], values[i]-of.Offset, level, by)
		if !c.short(p, t, values[i], level, base) && !c.slow(p, f, t, level) {
			c.depart(p, t, values[i]-base, gauge)
		}
	}
}

// part is the part of the way that a first-order lag of tau goes in dt.
func part(dt, tau int64) float64 { return -math.Expm1(-float64(dt) / float64(tau)) }

// enter takes a reading v of a probe in; y is v less its pattern.
func (c *Sense) enter(p *Suspect, t int64, v, y, level float64, by *parts) {
	if !p.Known || v != p.Last {
		p.Last, p.Changed = v, t
	}
	if !p.Known {
		p.Known, p.Value, p.Depart = true, v, y-level
		p.sync(y, level)
		return
	}
	p.Value += by.quick * (v - p.Value)
	p.Depart += by.smooth * (y - level - p.Depart)
	if with := inStep * c.Limit; math.Abs(p.Depart) < with && math.Abs(y-level) < with {
		p.sync(y, level)
		return
	}
	p.Moved, p.Most = max(p.Moved, math.Abs(level-p.From)), max(p.Most, math.Abs(p.Depart))
	p.Low, p.High = min(p.Low, level), max(p.High, level)
	beyond := outside * c.Limit
	if p.Leaves.For(t, y < p.Low-beyond || y > p.High+beyond, leftHold) {
		p.Left = true
	}
	seconds := float64(by.dt) / 1e9
	p.Behind[0] += seconds * (y - level) * (y - level)
	for k := range lags {
		p.Lagged[k] += by.lags[k] * (level - p.Lagged[k])
		d := y - p.Lagged[k]
		p.Behind[k+1] += seconds * d * d
	}
}

// sync begins anew with a probe that is in step.
func (p *Suspect) sync(y, level float64) {
	p.From, p.Moved, p.Most, p.Low, p.High = level, 0, 0, level, level
	p.Left, p.Leaves = false, Hold{}
	for k := range p.Lagged {
		p.Lagged[k] = y
	}
	p.Behind = [len(lags) + 1]float64{}
}

// short tells a thermocouple that is shorted; it stays so until it is seen to be warm.
func (c *Sense) short(p *Suspect, t int64, v, level, base float64) bool {
	if c.Pressure {
		return false
	}
	near := nearTerminals
	if math.IsNaN(base) {
		base, near = room, nearRoom
	}
	if p.Found.Kind == monitor.FindingShort {
		p.clear(t, math.Abs(v-base) > 2*near, proofHold)
		return true
	}
	if p.Short.For(t, math.Abs(v-base) < near && math.Abs(v-p.Value) < still && level-v > apart, proofHold) {
		p.find(monitor.FindingShort, true, p.Short.Since, v-level)
	}
	return p.Short.On
}

// slow tells a probe that follows its mates behind a lag; it stays so until they move
// and it is in step. One that did not change at all stays so until it does and is in step.
func (c *Sense) slow(p *Suspect, f *Suspects, t int64, level float64) bool {
	switch kind := p.Found.Kind; {
	case p.Still && (kind == monitor.FindingSlow || kind.Dead()):
		p.clear(t, t-p.Changed < proofHold && p.Behind[0] == 0, clearHold)
		return true
	case kind == monitor.FindingSlow || kind.Dead():
		p.clear(t, math.Abs(level-f.Lagged) > c.Limit && p.Behind[0] == 0, lagHold)
		return true
	case kind == monitor.FindingZero || kind == monitor.FindingLeak:
		return false
	}
	best := 1
	for k := 2; k < len(p.Behind); k++ {
		if p.Behind[k] < p.Behind[best] {
			best = k
		}
	}
	tau := lags[best-1]
	enough := p.Moved > c.Limit && p.Most > respond*c.Limit && p.Behind[0] > c.Limit*c.Limit && !p.Left
	still := t-p.Changed >= lagHold
	if !c.Pressure && p.Depart > 0 {
		enough = enough && (still || tau <= dead && p.Depart < decays*p.Most)
	}
	if !p.Slow.For(t, enough && p.Behind[best] < follows*p.Behind[0], lagHold) {
		return false
	}
	kind := monitor.FindingSlow
	switch {
	case c.Pressure && tau > blocked:
		kind = monitor.FindingBlocked
	case tau > dead:
		kind = monitor.FindingStuck
	}
	p.find(kind, true, p.Slow.Since, float64(tau)/1e9)
	p.Still = still
	return true
}

// depart tells a departure from the pattern that is beyond the limit for three seconds.
// v is what a pressure probe reads above its port. How a departure goes with pressure is
// held against the mates as they are: a leak that was there when the pattern was learned
// is in the pattern.
func (c *Sense) depart(p *Suspect, t int64, v, gauge float64) {
	size := math.Abs(p.Depart)
	if p.Early.For(t, p.Usual && size > c.Limit/4, 0); !p.Early.On && p.Found.Kind == monitor.NoFinding {
		p.Past = Models{}
	} else if c.Pressure && !math.IsNaN(v-gauge) {
		p.Past.add(v-gauge, gauge)
	}
	beyond := p.Beyond.For(t, p.Usual && size > c.Limit, departHold)
	switch {
	case p.Found.Kind != monitor.NoFinding:
		c.again(p, t, v, gauge)
	case !beyond || p.Slow.On:
	case p.Beyond.Since-p.Early.Since > gradual:
		p.find(monitor.FindingDrift, false, p.Early.Since, p.Depart)
	case c.Pressure:
		p.find(monitor.FindingDeparts, false, p.Beyond.Since, p.Depart)
	case p.Depart > 0:
		p.find(monitor.FindingHot, false, p.Beyond.Since, p.Depart)
	default:
		p.find(monitor.FindingCold, false, p.Beyond.Since, p.Depart)
	}
}

// again holds a departure that was told against what has come since.
func (c *Sense) again(p *Suspect, t int64, v, gauge float64) {
	gone := math.Abs(p.Depart) < c.Limit/2
	if p.Found.Kind == monitor.FindingLeak {
		// At a low pressure nothing is seen of a leak.
		due := p.Found.Size * gauge
		gone = due > c.Limit && math.Abs(v-gauge) < due/3
	} else {
		p.Found.Size = p.Depart
	}
	if p.Found.Kind == monitor.FindingDeparts {
		if kind, size := c.tell(&p.Past); kind != monitor.NoFinding {
			p.find(kind, true, p.Found.Since, size)
			return
		}
	}
	p.clear(t, gone, clearHold)
}

// tell gives the finding of which the model leaves less than a tenth of what the other
// leaves of the squares, with its size; none while neither does or pressure has not
// varied enough to know.
func (c *Sense) tell(m *Models) (kind monitor.FindingKind, size float64) {
	if m.N == 0 || m.High-m.Low < variety*m.High || !(m.GG > 0) {
		return monitor.NoFinding, 0
	}
	a, b := m.E/m.N, m.EG/m.GG
	shift, leak := m.EE-m.N*a*a, m.EE-b*m.EG
	switch {
	case shift < follows*leak && math.Abs(a) > c.Limit/2:
		return monitor.FindingZero, a
	case leak < follows*shift && -b*m.High > c.Limit/2:
		return monitor.FindingLeak, -b
	}
	return monitor.NoFinding, 0
}

func (p *Suspect) find(kind monitor.FindingKind, proven bool, since int64, size float64) {
	p.Found, p.Clear = monitor.Finding{Kind: kind, Proven: proven, Since: since, Size: size}, Hold{}
}

// clear takes a finding back once nothing has spoken for it for d.
func (p *Suspect) clear(t int64, gone bool, d int64) {
	if p.Clear.For(t, gone, d) {
		p.Found, p.Clear, p.Past = monitor.Finding{}, Hold{}, Models{}
	}
}
