package egt

import (
	"math"
	"slices"

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

// MaxEngines is the number of engines whose lives are kept, and of nozzles. A further one
// takes the place of the one that was watched least lately; what that one had been through
// is in the files of its runs.
const MaxEngines = 32

// Life is what an engine, or a nozzle on whichever engine, has been through, as far as it
// was watched.
//
// A start is a light-off below idle after the rotor was at rest or running down; a
// flame that is lost and lit again while the rotor is kept turning up belongs to the
// same start. Cranking without a flame is none. A cycle ends with a shutdown after
// idle was reached: the rotor comes to rest, or is started again on its way down. A
// hot start is one that exceeded a start band. Hung starts, no lights and flame-outs
// count once for each start, crank or flame. A start is aborted that is given up before
// idle: a light-off, or fuel without one for NoLightFor, and the rotor runs down or rests.
type Life struct {
	Serial     string
	Starts     uint64
	HotStarts  uint64
	HungStarts uint64
	NoLights   uint64
	Aborted    uint64
	FlameOuts  uint64
	Cycles     uint64
	Lit        int64 // ns with a flame
	Choked     int64 // ns with the throat choked
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
	EventAborted
	NumEvents = 9
)

var eventNames = [NumEvents]string{
	"rest", "cycle", "start", "hot_start", "hung_start", "no_light", "flame_out", "idle", "aborted_start",
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
	Nozzles []Life
	Serial  string // that the following is about
	T       int64
	Seen    bool
	WasLit  bool
	Stage   stage
	Cut     bool   // while running down: the fuel or the flame was off
	Tried   bool   // a start was tried that has neither reached idle nor been given up
	Told    Events // what of this start, crank or flame was told already
	Hung    Timer
	NoLight Timer
	Out     Timer

	Crank   int64       // ns of cranking in one go
	Cranked [hour]int64 // ns of cranking by minute
	Minute  int64       // that Cranked was last entered in

	Cranking bool
	Engaged  [hour]uint8 // starter engagements by minute

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

	Fired   bool  // there was a flame that no shutdown has followed
	FuelOff int64 // event time of the last shutdown; 0 = not seen, or idle was reached since
	Rest    int64 // event time at which the rotor first rested since; 0 = not yet
}

// Scan is what an engine shows in a scan. NaN stands for what is not known.
type Scan struct {
	T         int64
	EGT       float64 // K, indicated
	SpeedRate float64 // rpm/s
	Fuel      float64 // kg/s
	Lit       bool
	LitKnown  bool
	Choked    bool // since the scan before
	Phase     monitor.Phase
}

// Watch enters a scan behind Step, which brought about ch and left the ledger s, and
// adds to ch what happened to the engine. It allocates for an engine that it sees for
// the first time only.
func (c *Config) Watch(e *Engine, s *State, ch *Changes, in *Scan) {
	if e.Serial != c.Serial {
		*e = Engine{Lives: e.Lives, Nozzles: e.Nozzles, Serial: c.Serial}
	}
	dt := int64(0)
	if e.Seen {
		dt = max(in.T-e.T, 0)
	}
	burnt, choked := int64(0), int64(0)
	if in.LitKnown && in.Lit && e.WasLit {
		burnt = dt
	}
	if in.Choked {
		choked = min(dt, seenWithin)
	}
	e.T, e.Seen = in.T, true
	e.WasLit = in.LitKnown && in.Lit

	ch.Engine = e.start(in)
	for i := range c.Bands {
		if ch.Exceeded&(uint32(1)<<i) != 0 && c.Bands[i].Kind == KindStart && e.Told&EventHotStart == 0 {
			e.Told |= EventHotStart
			ch.Engine |= EventHotStart
		}
	}
	e.starter(in, min(dt, seenWithin))
	ch.Engine |= e.rundown(in)
	e.afterglow(in)
	e.coolDown(in)
	ch.Moved = ch.Moved || ch.Engine != 0

	c.enter(account(&e.Lives, c.Serial, in.T), s, ch, burnt, choked)
	if c.Nozzle != "" {
		c.enter(account(&e.Nozzles, c.Nozzle, in.T), s, ch, burnt, choked)
	}
}

// Watched tells whether a serial number is among lives.
func Watched(lives []Life, serial string) bool {
	return slices.ContainsFunc(lives, func(l Life) bool { return l.Serial == serial })
}

// account gives the life of a serial number at event time t.
func account(lives *[]Life, serial string, t int64) *Life {
	at, oldest := -1, 0
	for i := range *lives {
		if (*lives)[i].Serial == serial {
			at = i
		}
		if (*lives)[i].T < (*lives)[oldest].T {
			oldest = i
		}
	}
	switch {
	case at >= 0:
	case len(*lives) < MaxEngines:
		at = len(*lives)
		*lives = append(*lives, Life{Serial: serial})
	default:
		at = oldest
		(*lives)[at] = Life{Serial: serial}
	}
	life := &(*lives)[at]
	life.T = t
	return life
}

// enter adds what a scan brought to a life.
func (c *Config) enter(l *Life, s *State, ch *Changes, burnt, choked int64) {
	l.Lit += burnt
	l.Choked += choked
	for _, one := range [...]struct {
		event Events
		count *uint64
	}{
		{EventStart, &l.Starts},
		{EventHotStart, &l.HotStarts},
		{EventHungStart, &l.HungStarts},
		{EventNoLight, &l.NoLights},
		{EventAborted, &l.Aborted},
		{EventFlameOut, &l.FlameOuts},
		{EventCycle, &l.Cycles},
	} {
		if ch.Engine&one.event != 0 {
			*one.count++
		}
	}
	for i := range c.Bands {
		b, bit := &s.Bands[i], uint32(1)<<i
		of := l.of(c.Bands[i].Name)
		of.Time += b.Added
		if b.Over {
			of.Peak = max(of.Peak, b.Peak)
		}
		if ch.Began&bit != 0 {
			of.Excursions++
		}
		if ch.Exceeded&bit != 0 {
			of.Exceedances++
		}
	}
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

// start follows the engine from rest to rest.
func (e *Engine) start(in *Scan) (ev Events) {
	now := e.Stage
	down := in.Phase == monitor.Off || in.Phase == monitor.Cooling || in.Phase == monitor.Cranking || in.Phase == monitor.Lighting && e.Cut
	if now == running && down {
		now = resting
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
			ev |= EventStart
			e.Told &^= EventHungStart | EventHotStart
		}
	case monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		if now == resting { // lighting was not seen
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
	}{
		{EventHungStart, &e.Hung, in.Phase == monitor.Lighting && (in.SpeedRate < HungRate || e.Hung.On && math.IsNaN(in.SpeedRate)), HungFor},
		{EventNoLight, &e.NoLight, in.Phase == monitor.Cranking && (fuelled || e.NoLight.On && math.IsNaN(in.Fuel)), NoLightFor},
		{EventFlameOut, &e.Out, above && in.LitKnown && !in.Lit, FlameOutFor},
	} {
		if is.timer.held(in.T, is.true, is.d) && e.Told&is.event == 0 {
			e.Told |= is.event
			ev |= is.event
		}
	}
	switch in.Phase {
	case monitor.Off, monitor.Cooling, monitor.Rundown:
		if e.Tried {
			ev |= EventAborted
		}
		e.Tried = false
	case monitor.PhaseUnknown, monitor.Cranking, monitor.Lighting, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating, monitor.NumPhases:
		e.Tried = (e.Tried || ev&(EventStart|EventNoLight) != 0) && e.Stage != running
	}
	return ev
}

// starter adds to the duty of the starter. Where it cuts out is not known: it is
// taken to crank until idle is reached.
func (e *Engine) starter(in *Scan, dt int64) {
	now := in.T / minute
	if now-e.Minute >= hour {
		e.Cranked, e.Engaged = [hour]int64{}, [hour]uint8{}
	} else {
		for m := e.Minute + 1; m <= now; m++ {
			e.Cranked[m%hour], e.Engaged[m%hour] = 0, 0
		}
	}
	e.Minute = max(e.Minute, now)
	switch in.Phase {
	case monitor.Cranking, monitor.Lighting:
		if n := &e.Engaged[e.Minute%hour]; !e.Cranking && e.Stage != running && *n < math.MaxUint8 {
			*n++
		}
		e.Cranking = true
		e.Crank += dt
		e.Cranked[e.Minute%hour] += dt
	case monitor.PhaseUnknown:
	case monitor.Off, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating, monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		e.Crank, e.Cranking = 0, false
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

// StarterStarts gives how often the starter was engaged in this minute and the 59 before.
func (e *Engine) StarterStarts() int {
	sum := 0
	for _, n := range e.Engaged {
		sum += int(n)
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

// coolDown follows how far the last shutdown lies back: the fuel that goes off behind a
// flame, and the rotor that first comes to rest after it. It goes on while the engine is
// cranked or lit again, until idle is reached.
func (e *Engine) coolDown(in *Scan) {
	e.Fired = e.Fired || e.WasLit
	switch in.Phase {
	case monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		e.FuelOff, e.Rest = 0, 0
	case monitor.Off, monitor.Cooling, monitor.Rundown:
		if e.Fired && e.After {
			e.Fired, e.FuelOff, e.Rest = false, in.T, 0
		}
		if e.FuelOff != 0 && e.Rest == 0 && in.Phase != monitor.Rundown {
			e.Rest = in.T
		}
	case monitor.PhaseUnknown, monitor.Cranking, monitor.Lighting, monitor.NumPhases:
	}
}

// SinceFuelOff gives the time since the fuel went off after a flame, s; NaN without a
// shutdown, and once idle is reached again.
func (e *Engine) SinceFuelOff() float64 { return e.since(e.FuelOff) }

// SinceRest gives the time since the rotor first came to rest after a shutdown, s; NaN as
// for SinceFuelOff, and while it has not.
func (e *Engine) SinceRest() float64 { return e.since(e.Rest) }

func (e *Engine) since(t int64) float64 {
	if t == 0 {
		return math.NaN()
	}
	return float64(e.T-t) / 1e9
}

// CoolDownLeft gives what is left of the cool-down that l asks for, s; 0 when it is over,
// NaN where none is asked for and without a shutdown.
func (e *Engine) CoolDownLeft(l *Limits) float64 {
	if e.FuelOff == 0 || l.CoolFuelOff == 0 && l.CoolRest == 0 {
		return math.NaN()
	}
	left := l.CoolFuelOff - (e.T - e.FuelOff)
	if rest := e.Rest; rest == 0 {
		left = max(left, l.CoolRest)
	} else {
		left = max(left, l.CoolRest-(e.T-rest))
	}
	return float64(max(left, 0)) / 1e9
}
