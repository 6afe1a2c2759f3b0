package egt

import (
	"math"

	"throatwatch/monitor"
)

// What makes a start hang, not light, and a flame go out: the default rules alarm by
// the same. Common practice on small gas turbines, no source.
const (
	HungRate    = 50.0              // rpm/s: lit below idle and not faster …
	HungFor     = 5 * second        // … for this long is a hung start
	FuelOn      = 0.002             // kg/s: more is fuel
	NoLightFor  = 10 * second       // cranking with fuel for this long without a flame is no light
	FlameOutFor = 200 * millisecond // above idle without a flame for this long is a flame-out
)

const (
	millisecond = int64(1e6)
	second      = int64(1e9)
	minute      = 60 * second
)

// MaxEngines is the number of engines whose lives are kept. A further one takes the
// place of the one that was watched least lately; what that one had been through is in
// the files of its runs.
const MaxEngines = 32

// Life is what an engine has been through, as far as it was watched.
//
// A start is a light-off below idle after the rotor was at rest or running down; a
// flame that is lost and lit again while the rotor is kept turning up belongs to the
// same start. Cranking without a flame is none. A cycle ends with a shutdown after
// idle was reached: the rotor comes to rest, or is started again on its way down. A
// hot start is one that exceeded a start band. Hung starts, no lights and flame-outs
// count once for each start, crank or flame.
type Life struct {
	Serial     string
	Starts     uint64
	HotStarts  uint64
	HungStarts uint64
	NoLights   uint64
	FlameOuts  uint64
	Cycles     uint64
	Lit        int64 // ns with a flame
	Bands      []BandLife
	T          int64 // event time of the last scan
}

// BandLife is the part of a life above one band. A band is known by its name.
type BandLife struct {
	Name        string
	Time        int64   // ns above the limit
	Peak        float64 // K, highest value above the limit, 0 when there was none
	Excursions  uint64
	Exceedances uint64
}

// Events is a set of what happened to an engine in a scan.
type Events uint16

// The events.
const (
	EventRest Events = 1 << iota // the rotor came to rest after a rundown from idle: see Engine.Rundown
	EventCycle
	EventStart
	EventHotStart
	EventHungStart
	EventNoLight
	EventFlameOut
	EventIdle // a start reached idle
	NumEvents = 8
)

var eventNames = [NumEvents]string{
	"rest", "cycle", "start", "hot_start", "hung_start", "no_light", "flame_out", "idle",
}

// Each calls yield with the name of every event in the set.
func (e Events) Each(yield func(string) bool) {
	for i := range NumEvents {
		if e&(1<<i) != 0 && !yield(eventNames[i]) {
			return
		}
	}
}

// stage is how far an engine is between rest and rest.
type stage uint8

const (
	unseen   stage = iota // at rest or not, it was not seen
	resting               // at rest, running down after a start that failed, or cranked
	starting              // lit since it rested, idle not reached
	running               // idle was reached
)

// Timer tells how long a condition has been true.
type Timer struct {
	On    bool
	Since int64
}

// held tells whether the condition has been true for d at event time t.
func (m *Timer) held(t int64, condition bool, d int64) bool {
	if !condition {
		m.On = false
		return false
	}
	if !m.On {
		m.On, m.Since = true, t
	}
	return t-m.Since >= d
}

// hour is how many minutes starter duty looks back.
const hour = 60

// Engine is what watching an engine through starts and shutdowns remembers. It is
// plain data; the zero value has seen nothing.
type Engine struct {
	Lives   []Life
	Serial  string // that the following is about
	T       int64
	Seen    bool
	WasLit  bool
	Stage   stage
	Cut     bool   // while running down: the fuel or the flame was off
	Told    Events // what of this start, crank or flame was told already
	Hung    Timer
	NoLight Timer
	Out     Timer

	Crank   int64       // ns of cranking in one go
	Cranked [hour]int64 // ns of cranking by minute
	Minute  int64       // that Cranked was last entered in

	Before      monitor.Phase // of the last scan
	Down        bool          // running down from idle …
	DownSince   int64         // … since this event time
	Rundown     int64         // ns, of the last rundown that was seen whole
	HaveRundown bool

	After  bool    // the fuel is off after a run or a start
	Lowest float64 // K, lowest indicated EGT since then
	Have   bool    // Lowest holds
	Now    float64 // K, the last value
	Gap    bool    // there is no value now
}

// Scan is what an engine shows in a scan. NaN stands for what is not known.
type Scan struct {
	T         int64
	EGT       float64 // K, indicated
	SpeedRate float64 // rpm/s
	Fuel      float64 // kg/s
	Lit       bool
	LitKnown  bool
	Phase     monitor.Phase
}

// Watch enters a scan behind Step, which brought about ch and left the ledger s, and
// adds to ch what happened to the engine. It allocates for an engine that it sees for
// the first time only.
func (c *Config) Watch(e *Engine, s *State, ch *Changes, in *Scan) {
	if e.Serial != c.Serial {
		*e = Engine{Lives: e.Lives, Serial: c.Serial}
	}
	life := c.life(e, in.T)
	dt := int64(0)
	if e.Seen {
		dt = max(in.T-e.T, 0)
	}
	e.T, e.Seen, life.T = in.T, true, in.T
	if in.LitKnown && in.Lit && e.WasLit {
		life.Lit += dt
	}
	e.WasLit = in.LitKnown && in.Lit

	ch.Engine = e.start(life, in)
	for i := range c.Bands {
		c.band(life, e, ch, i, &s.Bands[i])
	}
	e.starter(in, min(dt, seenWithin))
	ch.Engine |= e.rundown(in)
	e.afterglow(in)
	ch.Moved = ch.Moved || ch.Engine != 0
}

// life gives the account of the engine, with the bands of c.
func (c *Config) life(e *Engine, t int64) *Life {
	at, oldest := -1, 0
	for i := range e.Lives {
		if e.Lives[i].Serial == c.Serial {
			at = i
		}
		if e.Lives[i].T < e.Lives[oldest].T {
			oldest = i
		}
	}
	switch {
	case at >= 0:
	case len(e.Lives) < MaxEngines:
		at = len(e.Lives)
		e.Lives = append(e.Lives, Life{Serial: c.Serial, T: t})
	default:
		at = oldest
		e.Lives[at] = Life{Serial: c.Serial, T: t}
	}
	life := &e.Lives[at]
	for i := range c.Bands {
		life.of(c.Bands[i].Name)
	}
	return life
}

// of gives the part of a band; one that is no longer configured keeps its own.
func (l *Life) of(band string) *BandLife {
	for i := range l.Bands {
		if l.Bands[i].Name == band {
			return &l.Bands[i]
		}
	}
	l.Bands = append(l.Bands, BandLife{Name: band})
	return &l.Bands[len(l.Bands)-1]
}

// band adds what the last step did to band i.
func (c *Config) band(life *Life, e *Engine, ch *Changes, i int, b *BandState) {
	l, bit := life.of(b.Name), uint32(1)<<i
	l.Time += b.Added
	if b.Over {
		l.Peak = max(l.Peak, b.Peak)
	}
	if ch.Began&bit != 0 {
		l.Excursions++
	}
	if ch.Exceeded&bit == 0 {
		return
	}
	l.Exceedances++
	if c.Bands[i].Kind == KindStart && e.Told&EventHotStart == 0 {
		e.Told |= EventHotStart
		life.HotStarts++
		ch.Engine |= EventHotStart
	}
}

// start follows the engine from rest to rest.
func (e *Engine) start(life *Life, in *Scan) (ev Events) {
	now := e.Stage
	down := in.Phase == monitor.Off || in.Phase == monitor.Cooling || in.Phase == monitor.Cranking || in.Phase == monitor.Lighting && e.Cut
	if now == running && down {
		now = resting
		life.Cycles++
		ev |= EventCycle
		e.Told = 0
	}
	switch in.Phase {
	case monitor.Off, monitor.Cooling:
		now, e.Told = resting, 0
	case monitor.Cranking:
		if now == unseen {
			now = resting
		}
	case monitor.Rundown:
		if now == starting {
			now = resting
		}
		e.Cut = e.Cut || in.LitKnown && !in.Lit || in.Fuel <= FuelOn
	case monitor.Lighting:
		if now != starting && now != running { // a speed that dips below idle with the flame on is no start
			now = starting
			life.Starts++
			ev |= EventStart
			e.Told &^= EventHungStart | EventHotStart
		}
	case monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		if now == resting { // lighting was not seen
			life.Starts++
			ev |= EventStart
		}
		if now == resting || now == starting {
			ev |= EventIdle
		}
		now, e.Cut = running, false
	case monitor.PhaseUnknown, monitor.NumPhases:
	}
	e.Stage = now

	fuelled := in.Fuel > FuelOn
	above := in.Phase == monitor.Accelerating || in.Phase == monitor.Steady || in.Phase == monitor.Decelerating
	if e.WasLit {
		e.Told &^= EventNoLight | EventFlameOut
	}
	for _, is := range [...]struct {
		event Events
		timer *Timer
		true  bool
		d     int64
		count *uint64
	}{
		{EventHungStart, &e.Hung, in.Phase == monitor.Lighting && (in.SpeedRate < HungRate || e.Hung.On && math.IsNaN(in.SpeedRate)), HungFor, &life.HungStarts},
		{EventNoLight, &e.NoLight, in.Phase == monitor.Cranking && (fuelled || e.NoLight.On && math.IsNaN(in.Fuel)), NoLightFor, &life.NoLights},
		{EventFlameOut, &e.Out, above && in.LitKnown && !in.Lit, FlameOutFor, &life.FlameOuts},
	} {
		if is.timer.held(in.T, is.true, is.d) && e.Told&is.event == 0 {
			e.Told |= is.event
			*is.count++
			ev |= is.event
		}
	}
	return ev
}

// starter adds to the duty of the starter. Where it cuts out is not known: it is
// taken to crank until idle is reached.
func (e *Engine) starter(in *Scan, dt int64) {
	now := in.T / minute
	if now-e.Minute >= hour {
		e.Cranked = [hour]int64{}
	} else {
		for m := e.Minute + 1; m <= now; m++ {
			e.Cranked[m%hour] = 0
		}
	}
	e.Minute = max(e.Minute, now)
	switch in.Phase {
	case monitor.Cranking, monitor.Lighting:
		e.Crank += dt
		e.Cranked[e.Minute%hour] += dt
	case monitor.PhaseUnknown:
	case monitor.Off, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating, monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		e.Crank = 0
	}
}

// StarterHour gives the time of cranking, ns, in this minute and the 59 before.
func (e *Engine) StarterHour() int64 {
	sum := int64(0)
	for _, d := range e.Cranked {
		sum += d
	}
	return sum
}

// rundown times the rotor from below idle to rest. Idle less twice its band, where
// the phase changes, is the same at every shutdown, so that times compare.
func (e *Engine) rundown(in *Scan) Events {
	before := e.Before
	e.Before = in.Phase
	switch in.Phase {
	case monitor.Rundown:
		switch before {
		case monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
			e.Down, e.DownSince = true, in.T
		case monitor.PhaseUnknown, monitor.Off, monitor.Cranking, monitor.Lighting, monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		}
	case monitor.Off, monitor.Cooling:
		if e.Down {
			e.Down = false
			e.Rundown, e.HaveRundown = in.T-e.DownSince, true
			return EventRest
		}
	case monitor.PhaseUnknown, monitor.Cranking, monitor.Lighting, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating, monitor.NumPhases:
		e.Down = false // not seen whole
	}
	return 0
}

// afterglow follows the indicated EGT once the fuel is off: it falls, and what it
// rises above its lowest is heat that soaks back, or a fire. Cranking without fuel
// belongs to it, as a rotor is cranked to cool an engine; cranking of which the fuel
// is not known may be a start.
func (e *Engine) afterglow(in *Scan) {
	switch in.Phase {
	case monitor.Rundown, monitor.Cooling, monitor.Off:
		e.After = !(in.Fuel > FuelOn)
	case monitor.Cranking:
		e.After = e.After && in.Fuel <= FuelOn
	case monitor.Lighting, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		e.After = false
	case monitor.PhaseUnknown, monitor.NumPhases:
	}
	e.Gap = math.IsNaN(in.EGT)
	switch {
	case !e.After:
		e.Have = false
	case !e.Gap:
		if !e.Have || in.EGT < e.Lowest {
			e.Lowest, e.Have = in.EGT, true
		}
		e.Now = in.EGT
	}
}

// Rise gives by how much the indicated EGT is above its lowest since the fuel is
// off, K; 0 while it is on, NaN without a value.
func (e *Engine) Rise() float64 {
	switch {
	case e.Gap:
		return math.NaN()
	case !e.Have:
		return 0
	}
	return e.Now - e.Lowest
}
