package rehearsal

import (
	"errors"
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"throatwatch/monitor/compute"
	"throatwatch/monitor/unit"
)

// FaultKind is something that goes wrong on a rig. The zero value is invalid.
type FaultKind uint8

// The kinds of fault.
const (
	faultNone FaultKind = iota
	ProbeOpen
	ProbeStuck
	ProbeDrift
	ProbeShort
	ProbeSlow
	ProbeOffset
	Noisy
	HotStreak
	PressureZeroShift
	PressureLeak
	PressureBlocked
	BarometerLoss
	BarometerUnit
	Dropouts
	NotANumber
	WrongUnit
	PublisherSilent
	ClockSkew
	ClockPast
	Duplicate
	Reorder
	Burst
	Malformed
	Truncated
	Huge
	numFaults
)

// faults describes the kinds; it is never written to. Lasting 0 is until the end.
var faults = [numFaults]struct {
	name    string
	text    string
	lasting time.Duration
	channel bool // strikes one channel; the others strike messages
}{
	ProbeOpen:         {"probe-open", "a thermocouple opens: its module sends the burn-out code, or full scale", 0, true},
	ProbeStuck:        {"probe-stuck", "a channel repeats its last value bit for bit", 0, true},
	ProbeDrift:        {"probe-drift", "a channel drifts up by 0.2 % of its range per second, at most 20 %", 0, true},
	ProbeShort:        {"probe-short", "a thermocouple shorts: it reads the temperature of its terminals", 0, true},
	ProbeSlow:         {"probe-slow", "a channel lags 12 times as much, at least 6 s: a broken contact", 0, true},
	ProbeOffset:       {"probe-offset", "a thermocouple reads 15 K too high: another wire, a wrong terminal", 0, true},
	Noisy:             {"noisy", "a channel scatters 6 times as much as it is stated to: a loose screen", 0, true},
	HotStreak:         {"hot-streak", "the gas at one EGT probe is truly 80 K hotter", 0, true},
	PressureZeroShift: {"pressure-zero-shift", "a pressure channel reads 1 % of its range too high from one sample to the next", 0, true},
	PressureLeak:      {"pressure-leak", "the line of a pressure channel leaks: it reads 85 % of what there is above the barometer", 0, true},
	PressureBlocked:   {"pressure-blocked", "the line of a pressure channel is blocked: it follows with 300 s", 0, true},
	BarometerLoss:     {"barometer-loss", "the barometer, or the named channel, is missing from the messages", 0, true},
	BarometerUnit:     {"barometer-unit", "the barometer, or the named channel, is sent in inches of mercury under its usual unit", 0, true},
	Dropouts:          {"dropouts", "every third sample of a channel is missing, at random", 0, true},
	NotANumber:        {"not-a-number", "a channel is sent as a number that is none (1e999, NaN)", 3 * time.Second, true},
	WrongUnit:         {"wrong-unit", "a channel is sent in a unit of another dimension", 3 * time.Second, true},
	PublisherSilent:   {"publisher-silent", "nothing is published", 5 * time.Second, false},
	ClockSkew:         {"clock-skew", "the device clock runs 30 s ahead", 5 * time.Second, false},
	ClockPast:         {"clock-past", "the device clock runs 10 min behind", 8 * time.Second, false},
	Duplicate:         {"duplicate", "every message comes again 0.3 s later", 3 * time.Second, false},
	Reorder:           {"reorder", "every third message is overtaken by those of the next 0.05 to 0.4 s", 3 * time.Second, false},
	Burst:             {"burst", "messages are held back and then all come at once", 3 * time.Second, false},
	Malformed:         {"malformed", "every second message has a byte that breaks it", 2 * time.Second, false},
	Truncated:         {"truncated", "every second message is cut off", 2 * time.Second, false},
	Huge:              {"huge", "messages of 400 kB come in between", 2 * time.Second, false},
}

// String gives the name of the kind.
func (k FaultKind) String() string {
	if k > faultNone && k < numFaults {
		return faults[k].name
	}
	return "invalid"
}

// Text says in a line what the fault does.
func (k FaultKind) Text() string {
	if k > faultNone && k < numFaults {
		return faults[k].text
	}
	return ""
}

// FaultKinds gives every kind.
func FaultKinds() []FaultKind {
	var kinds []FaultKind
	for k := faultNone + 1; k < numFaults; k++ {
		kinds = append(kinds, k)
	}
	return kinds
}

// Fault is a fault on request.
type Fault struct {
	Kind    FaultKind
	At      time.Duration // of the test
	For     time.Duration // 0 = as long as is usual for the kind: probes to the end, messages some seconds
	Size    float64       // times what is usual for drift, heat, shift, offset, scatter, leak and lag; 0 = 1
	Channel string        // 0 = a fitting one; for faults of messages, all
}

// ErrFault is wrapped by what is wrong with a fault on request.
var ErrFault = errors.New("fault is not understood")

// ParseFault reads "name@time", "name@time+duration", either with "*size" and ":channel"
// after it: probe-open@25s:egt_3, publisher-silent@40s+10s, hot-streak@30s*0.5:egt_2.
func ParseFault(s string) (Fault, error) {
	bad := func(what string) (Fault, error) {
		return Fault{}, fmt.Errorf("rehearsal: %q: %s; write name@time[+duration][*size][:channel], as in probe-open@25s:egt_3: %w", s, what, ErrFault)
	}
	name, rest, ok := strings.Cut(s, "@")
	if !ok {
		return bad("no time")
	}
	when, channel, _ := strings.Cut(rest, ":")
	when, size, sized := strings.Cut(when, "*")
	start, length, lasts := strings.Cut(when, "+")
	kind := faultNone
	for k := range numFaults {
		if k != faultNone && faults[k].name == name {
			kind = k
		}
	}
	if kind == faultNone {
		var names []string
		for _, k := range FaultKinds() {
			names = append(names, k.String())
		}
		return bad("no such fault; there are " + strings.Join(names, ", "))
	}
	f := Fault{Kind: kind, Channel: channel}
	var err error
	if f.At, err = time.ParseDuration(start); err != nil || f.At < 0 {
		return bad(fmt.Sprintf("%q is no time such as 25s", start))
	}
	if lasts {
		if f.For, err = time.ParseDuration(length); err != nil || f.For <= 0 {
			return bad(fmt.Sprintf("%q is no duration such as 10s", length))
		}
	}
	if sized {
		if f.Size, err = strconv.ParseFloat(size, 64); err != nil || !(f.Size > 0 && f.Size <= 100) {
			return bad(fmt.Sprintf("%q is no size between 0 and 100, 1 being the usual one", size))
		}
	}
	return f, nil
}

// active is a fault fitted to a rig.
type active struct {
	Fault
	channel int     // -1 = all
	frozen  float64 // raw value of a stuck channel
	begun   bool
	count   int // messages seen
}

// fit finds the channel of a fault.
func (f Fault) fit(c *compute.Config) (*active, error) {
	if f.Kind == faultNone || f.Kind >= numFaults {
		return nil, fmt.Errorf("rehearsal: fault %d: %w", f.Kind, ErrFault)
	}
	if f.For == 0 {
		f.For = faults[f.Kind].lasting
	}
	if f.Size == 0 {
		f.Size = 1
	}
	a := &active{Fault: f, channel: -1}
	if f.Channel != "" {
		a.channel = slices.IndexFunc(c.Channels, func(ch compute.Channel) bool { return ch.ID == f.Channel })
		if a.channel < 0 {
			return nil, fmt.Errorf("rehearsal: fault %s: the rig has no channel %q: %w", f.Kind, f.Channel, ErrFault)
		}
		return a, nil
	}
	if !faults[f.Kind].channel {
		return a, nil
	}
	st := &c.Stations
	var fitting []int
	//exhaustive:ignore
	switch f.Kind {
	case BarometerLoss, BarometerUnit:
		fitting = []int{st.Barometer}
	case PressureZeroShift, PressureLeak, PressureBlocked:
		fitting = append(slices.Clone(st.P7), st.ExitPlane, st.Barometer)
	case ProbeShort, ProbeOffset:
		fitting = slices.Concat(st.EGT, st.T7)
	default:
		fitting = slices.Concat(st.EGT, st.T7, st.P7)
	}
	i := slices.IndexFunc(fitting, func(i int) bool { return i >= 0 })
	if i < 0 {
		return nil, fmt.Errorf("rehearsal: fault %s: the rig has no channel that fits: name one: %w", f.Kind, ErrFault)
	}
	a.channel = fitting[i]
	return a, nil
}

// at tells whether the fault acts at a time since the first pack.
func (a *active) at(t time.Duration) bool {
	return t >= a.At && (a.For == 0 || t < a.At+a.For)
}

// StreakHeat is by how much the gas is hotter at a probe in a streak of size 1, K.
const StreakHeat = 80.0

// heat gives what the sensor of channel i feels on top, K.
func (r *Rig) heat(i int) float64 {
	var k float64
	for _, f := range r.faults {
		if f.Kind == HotStreak && f.channel == i && f.at(r.now) {
			k += StreakHeat * f.Size
		}
	}
	return k
}

// lags gives the time constant, s, with which channel i follows.
func (r *Rig) lags(i int) float64 {
	tau := r.sensors[i].tau
	for _, f := range r.faults {
		if f.channel != i || !f.at(r.now) {
			continue
		}
		//exhaustive:ignore
		switch f.Kind {
		case ProbeSlow:
			tau = max(tau, max(6, 12*tau)*f.Size)
		case PressureBlocked:
			tau = max(tau, 300*f.Size)
		}
	}
	return tau
}

// inchOfMercury in Pa, at 0 °C. (NIST SP 811, B.8.)
const inchOfMercury = 3386.389

// probeOffset is by how much a thermocouple is off, K.
const probeOffset = 15

// scatter gives how many times its usual noise channel i has.
func (r *Rig) scatter(i int) float64 {
	k := 1.0
	for _, f := range r.faults {
		if f.Kind == Noisy && f.channel == i && f.at(r.now) {
			k *= max(1, 6*f.Size)
		}
	}
	return k
}

// terminals is how much warmer than the surroundings the terminals of a thermocouple
// are, K.
const terminals = 5

// shift gives the error, SI, that faults add to channel i.
func (r *Rig) shift(i int) float64 {
	s := &r.sensors[i]
	span := s.spec.High - s.spec.Low
	var e float64
	for _, f := range r.faults {
		if f.channel != i || !f.at(r.now) {
			continue
		}
		//exhaustive:ignore
		switch f.Kind {
		case ProbeDrift:
			e += span * min(0.2, 0.002*f.Size*(r.now-f.At).Seconds())
		case PressureZeroShift:
			e += 0.01 * f.Size * span
		case ProbeOffset:
			e += probeOffset * f.Size
		case ProbeShort:
			e += r.plant.ambient + terminals - s.x
		case PressureLeak:
			above := s.x
			if s.absolute && s.port == nil {
				above -= r.plant.barometer
			}
			e -= min(1, 0.15*f.Size) * above
		}
	}
	return e
}

// replace gives the raw value that faults put in the place of raw, and whether the
// channel is sent at all.
func (r *Rig) replace(i int, raw float64) (float64, bool) {
	s := &r.sensors[i]
	sent := true
	for _, f := range r.faults {
		if f.channel != i || !f.at(r.now) {
			continue
		}
		//exhaustive:ignore
		switch f.Kind {
		case ProbeOpen:
			// Burn-out detection drives an open input beyond the top of the range.
			raw = s.reading(s.hi + max(8, 0.05*(s.hi-s.lo)))
			if len(s.spec.Codes) > 0 {
				raw = s.spec.Codes[0]
			}
		case ProbeStuck:
			if !f.begun {
				f.frozen, f.begun = raw, true
			}
			raw = f.frozen
		case BarometerLoss:
			sent = false
		case BarometerUnit:
			raw = s.sentIn().ToSI(raw) / inchOfMercury
		case Dropouts:
			sent = sent && r.gaps.Float64() >= 1.0/3
		}
	}
	return raw, sent
}

// foreign gives a unit of another dimension than u.
func foreign(u unit.Unit) string {
	if u.Dimension == unit.Voltage {
		return "kg/s"
	}
	return "V"
}
