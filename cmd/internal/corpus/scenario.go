package corpus

import (
	"math/rand/v2"
	"slices"
	"time"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// begin is the device time at which every run begins: 2026-03-02 09:00 UTC.
const begin = int64(1772442000e9)

// run is a run as it will be played.
type run struct {
	kind     string
	seed     uint64
	calm     bool
	plan     []rehearsal.Segment
	day      rehearsal.Day
	noise    float64
	error    float64
	faults   []rehearsal.Fault
	changes  []rehearsal.Change
	health   []health
	restarts []restart
}

// skewed tells whether a clock is surely, and possibly, known to be wrong at a time
// since the begin. A clock that lags is told from a backlog within seconds only.
func (r *run) skewed(t int64) (out [2]bool) {
	for _, f := range r.faults {
		from, to := int64(f.At), int64(f.At+f.For)
		//exhaustive:ignore
		switch f.Kind {
		case rehearsal.ClockSkew:
			out[0] = out[0] || t > from+second/5 && t < to && !r.away(t)
			out[1] = out[1] || t >= from && t < to+3*second
		case rehearsal.ClockPast, rehearsal.Burst, rehearsal.PublisherSilent:
			out[1] = out[1] || t >= from && t < to+10*second
		}
	}
	return out
}

// away tells whether the daemon is down at a time since the begin, or has not caught up:
// what the broker kept has no time of arrival.
func (r *run) away(t int64) bool {
	for _, d := range r.restarts {
		if t >= d.at && t <= d.at+d.down+catchesUp {
			return true
		}
	}
	return false
}

// jumpShows is how long it may take to tell a clock that jumped back, ns: a channel is
// held for as long.
const jumpShows = second / 4

// astray tells whether what is sent at a time since the begin may find no place in
// event time: with a clock that has just jumped back, or while the daemon was away if a
// clock was wrong then, or until it had caught up. What the broker kept has no time of
// arrival, late samples of a clock that is right again look like those of one that is
// wrong still, and until the backlog is through a clock that lags looks like more of it.
func (r *run) astray(t int64) bool {
	for _, f := range r.faults {
		from, to := int64(f.At), int64(f.At+f.For)
		if f.Kind == rehearsal.ClockPast && t >= from && t < from+jumpShows {
			return true
		}
		if f.Kind != rehearsal.ClockPast && f.Kind != rehearsal.ClockSkew {
			continue
		}
		for _, d := range r.restarts {
			if end := d.at + d.down + catchesUp; t >= d.at && t <= end && from <= end && to >= d.at {
				return true
			}
		}
	}
	return false
}

// calmFor is the length of a calm run, s.
const calmFor = 1800

// writer writes a run.
type writer struct {
	*rand.Rand
	run
	cfg  *pipeline.Config
	at   float64 // s since the begin
	idle float64 // fractions of 100 %
	arm  float64
}

// kinds are the kinds of run with events, and how many of each make the corpus: enough
// for 300 events of every rule that warns.
var kinds = []struct {
	name  string
	runs  int
	write func(*writer)
}{
	{"over-temperature", 220, (*writer).overTemperature},
	{"starts", 360, (*writer).starts},
	{"choke", 60, (*writer).choke},
	{"channels", 90, (*writer).channels},
	{"lost", 120, (*writer).lost},
	{"flame-out", 60, (*writer).flameOut},
	{"streaks", 60, (*writer).streaks},
}

// newRun writes run number n of a kind; its seed and n alone say what happens.
func newRun(cfg *pipeline.Config, seed uint64, kind, n int) *run {
	w := &writer{cfg: cfg, Rand: rand.New(rand.NewPCG(seed, uint64(kind)<<32|uint64(n)))}
	w.seed = w.Uint64()
	ph := &cfg.Compute.Phase
	w.idle, w.arm = ph.Idle/ph.Max, cfg.Compute.Nozzle.ArmedAboveRPM/ph.Max
	w.day = rehearsal.Day{Ambient: w.in(262, 312), Barometer: w.in(95e3, 104e3), Humidity: w.in(0.1, 0.95), Depression: w.in(50, 800)}
	w.noise, w.error = w.in(0.5, 1.5), w.in(0.5, 2)
	if kind < 0 {
		w.kind, w.calm = "calm", true
		w.quiet(calmFor)
	} else {
		w.kind = kinds[kind].name
		kinds[kind].write(w)
	}
	return &w.run
}

// in draws from a range.
func (w *writer) in(lo, hi float64) float64 { return lo + (hi-lo)*w.Float64() }

// chance is true in one of n.
func (w *writer) chance(n int) bool { return w.IntN(n) == 0 }

func (w *writer) add(s rehearsal.Segment) {
	w.plan = append(w.plan, s)
	w.at += s.Seconds
}

// hold runs at a speed.
func (w *writer) hold(seconds, speed float64) {
	w.add(rehearsal.Segment{Name: "hold", Seconds: seconds, Speed: speed, Fuel: true})
}

// start takes a rotor at rest to idle.
func (w *writer) start() {
	w.add(rehearsal.Segment{Name: "off", Seconds: w.in(1, 3)})
	w.add(rehearsal.Segment{Name: "crank", Seconds: 2.5, Starter: true})
	w.add(rehearsal.Segment{Name: "light-off", Seconds: 9, Speed: w.idle, Starter: true, Fuel: true})
	w.hold(w.in(3, 6), w.idle)
}

// stop takes a running rotor to rest, from idle.
func (w *writer) stop() {
	w.hold(w.in(8, 12), w.idle)
	w.add(rehearsal.Segment{Name: "shutdown", Seconds: w.in(28, 35)})
}

// fire lets the harness get hot again in the shutdown that follows, as fuel that burns
// on does.
func (w *writer) fire() {
	after, seconds, ramp, to := w.in(8, 14), w.in(6, 14), w.in(1, 4), w.in(500, 900)
	for _, i := range w.cfg.Compute.Stations.EGT {
		w.change(w.id(i), after, seconds, ramp, to)
	}
}

// fault adds a fault from now + after for some seconds.
func (w *writer) fault(k rehearsal.FaultKind, channel string, after, seconds float64) {
	w.faults = append(w.faults, rehearsal.Fault{Kind: k, Channel: channel, At: at(w.at + after), For: at(seconds)})
}

// change adds a real change of a channel, which comes and goes within ramp.
func (w *writer) change(channel string, after, seconds, ramp, to float64) {
	w.changes = append(w.changes, rehearsal.Change{Channel: channel, At: at(w.at + after), For: at(seconds), Ramp: at(min(ramp, 0.49*seconds)), To: to})
}

func at(s float64) time.Duration { return time.Duration(s * 1e9) }

// id gives the id of a channel.
func (w *writer) id(i int) string { return w.cfg.Compute.Channels[i].ID }

// one draws one of a list.
func one[T any](w *writer, list []T) T { return list[w.IntN(len(list))] }

// sensorFault lets one probe of a harness or rake go wrong for a while.
func (w *writer) sensorFault(after, seconds float64) {
	st := &w.cfg.Compute.Stations
	switch w.IntN(4) {
	case 0, 1:
		k := one(w, []rehearsal.FaultKind{
			rehearsal.ProbeOpen, rehearsal.ProbeStuck, rehearsal.ProbeShort, rehearsal.ProbeSlow,
			rehearsal.HotStreak, rehearsal.ProbeDrift, rehearsal.Dropouts, rehearsal.NotANumber, rehearsal.BarometerLoss,
		})
		w.fault(k, w.id(one(w, st.EGT)), after, seconds)
	case 2:
		k := one(w, []rehearsal.FaultKind{
			rehearsal.ProbeOpen, rehearsal.ProbeStuck, rehearsal.PressureLeak, rehearsal.PressureBlocked,
			rehearsal.PressureZeroShift, rehearsal.Dropouts, rehearsal.BarometerLoss,
		})
		w.fault(k, w.id(one(w, st.P7)), after, seconds)
	case 3:
		k := one(w, []rehearsal.FaultKind{rehearsal.ProbeOpen, rehearsal.ProbeStuck, rehearsal.ProbeShort, rehearsal.ProbeSlow, rehearsal.Dropouts})
		w.fault(k, w.id(one(w, st.T7)), after, seconds)
	}
}

// linkFault lets something go wrong on the way for a moment.
func (w *writer) linkFault(after float64) {
	switch w.IntN(9) {
	case 0:
		w.fault(rehearsal.Duplicate, "", after, w.in(1, 5))
	case 1:
		w.fault(rehearsal.Reorder, "", after, w.in(1, 5))
	case 2:
		w.fault(rehearsal.Malformed, "", after, w.in(0.5, 3))
	case 3:
		w.fault(rehearsal.Truncated, "", after, w.in(0.5, 3))
	case 4:
		w.fault(rehearsal.Huge, "", after, w.in(0.5, 3))
	case 5:
		w.fault(rehearsal.PublisherSilent, "", after, w.in(0.1, 0.6))
	case 6:
		w.fault(rehearsal.Burst, "", after, w.in(0.1, 0.6))
	case 7:
		w.fault(rehearsal.ClockSkew, "", after, w.in(0.5, 10))
	case 8:
		w.fault(rehearsal.ClockPast, "", after, w.in(0.5, 10))
	}
}

// restart lets the daemon die for a moment.
func (w *writer) restart(after float64) {
	w.restarts = append(w.restarts, restart{int64((w.at + after) * 1e9), int64(w.in(0.2, 4) * 1e9)})
}

// runLimits gives the lowest and the highest limit of the run bands, K.
func (w *writer) runLimits() (low, high float64) {
	var limits []float64
	for _, b := range w.cfg.Compute.EGT.Bands {
		if b.Kind == egt.KindRun {
			limits = append(limits, b.Limit)
		}
	}
	return slices.Min(limits), slices.Max(limits)
}

// overTemperature is bumps of the EGT around the limits of the run bands, from too
// short and too low to long and high; in half of the runs with a probe at fault.
func (w *writer) overTemperature() {
	low, high := w.runLimits()
	w.start()
	top := w.in(0.9, 0.95)
	w.hold(8, top)
	for range 7 {
		rich := rehearsal.Segment{Name: "rich", Speed: top, Fuel: true}
		if w.chance(2) {
			rich.EGT, rich.Seconds = low+w.in(-4, min(30, high-low)), w.in(3, 12)
		} else {
			rich.EGT, rich.Seconds = high+w.in(-4, 25), w.in(2, 6)
		}
		if w.chance(4) {
			w.sensorFault(w.in(-6, rich.Seconds), w.in(5, 20))
		}
		if w.chance(8) {
			w.linkFault(w.in(-1, rich.Seconds))
		}
		if w.chance(12) {
			w.restart(w.in(0, rich.Seconds))
		}
		w.add(rich)
		w.hold(w.in(8, 14), top)
	}
	w.stop()
}

// starts are starts that go well, hot, hung, or without light.
func (w *writer) starts() {
	start := 0.0
	for _, b := range w.cfg.Compute.EGT.Bands {
		if b.Kind == egt.KindStart {
			start = b.Limit
		}
	}
	for range 5 {
		w.add(rehearsal.Segment{Name: "off", Seconds: w.in(2, 5)})
		crank := 2.5
		if w.chance(5) { // dry
			crank = w.in(25, 36)
		}
		w.add(rehearsal.Segment{Name: "crank", Seconds: crank, Starter: true})
		light := rehearsal.Segment{Name: "light-off", Seconds: 9, Speed: w.idle, Starter: true, Fuel: true}
		switch w.IntN(5) {
		case 0, 1: // hot, and the rotor does not come up while it is
			light.EGT, light.Seconds, light.Speed = start+w.in(-4, 40), w.in(5, 10), w.in(0.28, 0.34)
		case 2: // hung
			light.Seconds, light.Speed = w.in(8, 20), w.in(0.24, 0.34)
		case 3:
			light.Seconds, light.Quench = w.in(6, 20), true
			w.change(w.id(w.cfg.Compute.Stations.FuelFlow), 0, light.Seconds, 0.3, w.in(0.0012, 0.012))
		}
		w.add(light)
		if w.chance(2) && !light.Quench {
			w.hold(w.in(5, 10), w.idle)
			w.fire()
			w.add(rehearsal.Segment{Name: "shutdown", Seconds: w.in(28, 35)})
		} else {
			w.add(rehearsal.Segment{Name: "abort", Seconds: w.in(20, 30)})
		}
	}
}

// choke is the bleed opened by more or less, and points near the limit.
func (w *writer) choke() {
	w.start()
	speed := w.in(w.arm+0.005, 0.94)
	w.hold(9, speed)
	for range 9 {
		bleed := rehearsal.Segment{Name: "bleed", Seconds: w.in(0.2, 4), Speed: speed, Fuel: true, Bleed: w.in(0.3, 1.1)}
		if w.chance(4) {
			w.sensorFault(w.in(-4, 1), w.in(5, 20))
		}
		if w.chance(8) {
			w.linkFault(w.in(-1, bleed.Seconds))
		}
		w.add(bleed)
		if w.chance(4) {
			speed = w.in(w.arm+0.005, 0.94)
		}
		w.hold(w.in(5, 10), speed)
	}
	w.stop()
}

// channels are channels that come to their limits for a while, and beyond.
func (w *writer) channels() {
	tr := newTruth(w.cfg, begin, nil, nil)
	w.start()
	speed := w.in(w.idle+0.05, 0.93)
	w.hold(9, speed)
	for _, r := range w.cfg.Rules {
		l, ok := tr.limits[r.Name]
		if !ok {
			continue
		}
		ch := &w.cfg.Compute.Channels[l.channel]
		u := tr.u95(l.channel, l.value)
		n := 3
		if r.Priority == rules.Warning {
			n = 10
		}
		for range n {
			ramp := w.in(0.3, 1)
			if ch.MaxRate > 0 {
				ramp = max(ramp, (ch.High-ch.Low)/ch.MaxRate)
			}
			seconds := 2*ramp + w.in(0.5, 3)*float64(r.OnDelay)/1e9
			if ch.Unit.Dimension == unit.Temperature { // they lag
				seconds += w.in(40, 100)
			}
			beyond := one(w, []float64{-3, -1.5, 0, 1.5, 3, 6, 10})
			w.change(ch.ID, 1, seconds, ramp, l.value+l.sign*u*beyond)
			if w.chance(10) {
				w.linkFault(w.in(1, 1+seconds))
			}
			w.hold(seconds+w.in(5, 8), speed)
		}
	}
	w.stop()
}

// lost is what is no longer measured: probes, the barometer, the publisher, and
// parts of the daemon.
func (w *writer) lost() {
	st := &w.cfg.Compute.Stations
	w.start()
	speed := w.in(w.arm+0.005, 0.94)
	w.hold(9, speed)
	for range 10 {
		seconds := w.in(0.3, 6)
		switch w.IntN(5) {
		case 0: // some of the harness: enough are left, or not
			k := one(w, []rehearsal.FaultKind{rehearsal.ProbeOpen, rehearsal.BarometerLoss, rehearsal.NotANumber})
			n := w.IntN(len(st.EGT))
			for _, i := range w.Perm(len(st.EGT))[:n+1] {
				w.fault(k, w.id(st.EGT[i]), 1, seconds)
			}
		case 1:
			w.fault(rehearsal.PublisherSilent, "", 1, seconds)
		case 2:
			if seconds = w.in(4, 14); w.chance(2) {
				w.fault(rehearsal.BarometerLoss, w.id(st.Barometer), 1, seconds)
			} else {
				w.fault(rehearsal.NotANumber, w.id(st.Barometer), 1, seconds)
			}
		default:
			for _, part := range [...]string{pipeline.PartInputPath, pipeline.PartRecording} {
				from := w.at + w.in(0.5, 1.5)
				w.health = append(w.health, health{part, span{int64(from * 1e9), int64((from + w.in(0.02, 1.5)) * 1e9)}})
				w.hold(seconds+4, speed)
			}
		}
		w.hold(seconds+w.in(24, 28), speed)
	}
	w.stop()
}

// flameOut is flames that are lost at speed for longer or shorter.
func (w *writer) flameOut() {
	w.start()
	for range 6 {
		speed := w.in(0.8, 0.95)
		w.hold(12, speed)
		w.add(rehearsal.Segment{Name: "quench", Seconds: w.in(0.3, 6), Speed: speed, Fuel: true, Quench: true})
		w.hold(6, speed)
		w.hold(8, w.idle+0.1)
	}
	w.stop()
}

// streaks are burners that streak: the gas at one probe is truly hotter, once the
// pattern of the harness is known.
func (w *writer) streaks() {
	w.start()
	speed := w.in(w.idle+0.1, 0.9)
	w.hold(w.in(130, 150), speed)
	for range 6 {
		seconds := w.in(3, 25)
		w.fault(rehearsal.HotStreak, w.id(one(w, w.cfg.Compute.Stations.EGT)), 1, seconds)
		w.faults[len(w.faults)-1].Size = w.in(0.2, 2)
		w.hold(seconds+w.in(25, 35), speed)
	}
	w.stop()
}

// quiet is a day's work within limits: points, throttle steps, drifts, starts and
// stops, and all that goes wrong without a reason for a warning or caution.
func (w *writer) quiet(seconds float64) {
	low, _ := w.runLimits()
	tr := newTruth(w.cfg, begin, nil, nil)
	w.start()
	speed := w.idle
	for w.at < seconds {
		length := w.in(10, 90)
		if w.chance(3) {
			w.sensorFault(w.in(0, 10), w.in(2, 60))
		}
		if w.chance(4) {
			w.linkFault(w.in(0, length))
		}
		if w.chance(10) {
			w.restart(w.in(0, length))
		}
		switch w.IntN(10) {
		case 0:
			w.hold(length, w.idle)
		case 1: // hot, but within the lowest limit less its uncertainty
			w.hold(10, 0.94)
			w.add(rehearsal.Segment{Name: "hot", Seconds: length, Speed: 0.94, Fuel: true, EGT: low - w.in(2.5, 6)})
		case 2: // a channel comes near its limit
			w.near(tr, length)
			w.hold(length, speed)
		case 3:
			w.stop()
			w.start()
			speed = w.idle
		case 4: // slowly
			speed = w.in(w.idle, 0.95)
			w.add(rehearsal.Segment{Name: "ramp", Seconds: length, Speed: speed, Fuel: true, Ramp: true})
		default:
			speed = w.in(w.idle, 0.95)
			w.hold(length, speed)
		}
	}
	w.stop()
}

// near takes a channel near one of its limits for a while.
func (w *writer) near(tr *truth, seconds float64) {
	var names []string
	for _, r := range w.cfg.Rules {
		if _, ok := tr.limits[r.Name]; ok {
			names = append(names, r.Name)
		}
	}
	if len(names) == 0 {
		return
	}
	l := tr.limits[one(w, names)]
	ch := &w.cfg.Compute.Channels[l.channel]
	if l.channel == w.cfg.Compute.Stations.Speed {
		return // the rest of the engine would not agree with it
	}
	w.change(ch.ID, 0, seconds, 0.4*seconds, l.value-l.sign*1.3*tr.u95(l.channel, l.value))
}
