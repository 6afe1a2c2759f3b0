package card

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"throatwatch/monitor"
	"throatwatch/rules"
)

// forgiven is for how long a target may be left, or a channel not good, without ending
// the soak, ns: a single noisy scan is no departure.
const forgiven = int64(1e9)

// What speaks against stabilised: Now.Why, in the order in which it is looked for.
const (
	Stabilised = ""         // nothing
	NoData     = "no_data"  // no scan since the point is current
	OffTarget  = "target"   // Quantity is not where the card wants it
	BadChannel = "channel"  // what Channel names must be good and is not
	Soaking    = "soak"     // SoakLeft
	Unsteady   = "unsteady" // Steady says why, of Quantity
)

// Now is how the engine stands to the current point, as of a scan.
type Now struct {
	T             rules.Time    `json:"t"`
	Targets       []TargetNow   `json:"targets"` // in the order of those of the point
	Held          rules.Time    `json:"held_since"`
	SoakLeft      float64       `json:"soak_left_s"`
	Stabilised    bool          `json:"stabilised"`
	Why           string        `json:"why"`
	Quantity      string        `json:"quantity"`
	Channel       string        `json:"channel"`
	Steady        string        `json:"steady_reason"`
	Slope         rules.Reading `json:"slope"` // of Quantity per second, where it is not steady
	Averaging     bool          `json:"averaging"`
	AveragingLeft float64       `json:"averaging_left_s"`
	Armed         bool          `json:"armed"` // the card arms choke
}

// TargetNow is how far a quantity is from its target: Off is value − target, or value −
// bound where there is only one.
type TargetNow struct {
	Value  rules.Reading `json:"value"`
	Off    rules.Reading `json:"off"`
	OffTol rules.Reading `json:"off_tolerances"` // Off in tolerances, where there is one
	Inside bool          `json:"inside"`
}

// Input is a scan as a card sees it.
type Input struct {
	Scan  *monitor.Scan
	Point *monitor.OperatingPoint
	// Of an engine that is not steady by its window: which quantity is not, and its slope
	// per second; NaN where it is not known.
	Unsteady monitor.Quantity
	Slope    float64
	Run      bool // a run is on: without one nothing is taken by itself
}

// Change is what a scan brought about.
type Change uint8

// The changes.
const (
	Began    Change = 1 << iota // averaging
	Broke                       // averaging ended without a point: what was asked for was lost
	Complete                    // the time of averaging is over, before this scan: State.Complete is due
)

// Step follows the card through a scan. It allocates nothing, unless a doubt arises.
//
// The soak runs while every target is held and what must be good is; both may be lost for
// up to 1 s. Stabilised is an engine that is steady, as the rig file asks for it, when the
// soak is over. A point that is taken automatically is broken off when that ends, and
// begins anew; one that a person takes goes on, with a doubt.
func (p *Plan) Step(s *State, in *Input) Change {
	if s.At < 0 || s.At >= len(p.points) {
		return 0
	}
	pt, d, now, t := &s.Points[s.At], &p.points[s.At], &s.Now, in.Scan.T
	now.T = rules.Time(t)
	off := d.measure(pt, now, in)
	bad := d.lacking(pt, in)
	p.arm(s, in)

	switch lost := off >= 0 || bad >= 0; {
	case !lost:
		s.OutAt = 0
		if now.Held == 0 {
			now.Held = rules.Time(t)
		}
	case s.OutAt == 0:
		s.OutAt = t
	}
	if s.OutAt != 0 && (t-s.OutAt > forgiven || now.Held == 0) {
		now.Held = 0
	}
	now.why(pt, in, off, bad)
	return s.average(now, t, in)
}

// measure fills the distances and gives the first target that is left, −1 for none.
func (d *planned) measure(pt *Point, now *Now, in *Input) int {
	first := -1
	for i := range d.targets {
		src, tg := &d.targets[i], &pt.Targets[i]
		v := in.Point.V[src.quantity]
		if src.channel >= 0 {
			v = in.Scan.Value[src.channel]
		}
		n := TargetNow{Value: monitor.ReadingOf(v)}
		if n.Value.Known {
			n.Inside = (!tg.Low.Known || v >= tg.Low.V) && (!tg.High.Known || v <= tg.High.V)
			switch {
			case tg.Value.Known:
				n.Off, n.OffTol = monitor.ReadingOf(v-tg.Value.V), monitor.ReadingOf((v-tg.Value.V)/tg.Tolerance.V)
			case !tg.High.Known || tg.Low.Known && math.Abs(v-tg.Low.V) <= math.Abs(v-tg.High.V):
				n.Off = monitor.ReadingOf(v - tg.Low.V)
			default:
				n.Off = monitor.ReadingOf(v - tg.High.V)
			}
		}
		now.Targets[i] = n
		if !n.Inside && first < 0 {
			first = i
		}
	}
	return first
}

// lacking gives the first thing that must be good and is not, −1 for none.
func (d *planned) lacking(pt *Point, in *Input) int {
	for i, channels := range d.needs {
		good := 0
		for _, c := range channels {
			if in.Scan.Quality[c].Usable() {
				good++
			}
		}
		if good < pt.Needs[i].Least {
			return i
		}
	}
	return -1
}

// arm tells whether what the point expects of the throat holds: from when the engine has
// come to it, which is when everything that is set is at its target, or the throat is
// choked; no longer once the engine is at idle or stopped. Until then the throat of the
// point before would be an alarm.
func (p *Plan) arm(s *State, in *Input) {
	pt, d := &s.Points[s.At], &p.points[s.At]
	switch in.Point.Phase {
	case monitor.PhaseUnknown, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		set := false
		there := true
		for i := range d.targets {
			if d.targets[i].setting {
				set = true
				there = there && s.Now.Targets[i].Inside
			}
		}
		if pt.Choke == Armed && (set && there || in.Point.Choke == monitor.Choked) {
			s.Reached = true
		}
	case monitor.Off, monitor.Cranking, monitor.Lighting, monitor.Idle, monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		s.Reached = false
	}
	if in.Point.LitKnown && !in.Point.Lit {
		s.Reached = false
	}
	s.Now.Armed = s.Reached && pt.Choke == Armed
}

// Choke gives what the card says of the throat: Armed, Disarmed, or "" where it leaves
// that to the speed rule.
func (s *State) Choke() string {
	pt := s.Current()
	switch {
	case pt == nil || s.Unfit != "":
		return ""
	case pt.Choke == Disarmed:
		return Disarmed
	case s.Now.Armed:
		return Armed
	}
	return ""
}

// why finds what speaks against stabilised.
func (n *Now) why(pt *Point, in *Input, off, bad int) {
	n.Quantity, n.Channel, n.Steady, n.Slope, n.SoakLeft = "", "", "", rules.Reading{}, pt.Soak
	if n.Held != 0 {
		n.SoakLeft = max(0, pt.Soak-float64(in.Scan.T-int64(n.Held))/1e9)
	}
	switch {
	case n.Held == 0 && off >= 0:
		n.Why, n.Quantity = OffTarget, pt.Targets[off].Quantity
	case n.Held == 0 && bad >= 0:
		n.Why, n.Channel = BadChannel, pt.Needs[bad].Name
	case n.SoakLeft > 0:
		n.Why = Soaking
	case in.Point.NotSteady != monitor.NoReason && in.Point.NotSteady != monitor.ReasonNotConfigured:
		n.Why, n.Steady = Unsteady, in.Point.NotSteady.String()
		if in.Point.NotSteady != monitor.ReasonPhase && in.Unsteady < monitor.NumQuantities {
			n.Quantity, n.Slope = in.Unsteady.Info().Name, monitor.ReadingOf(in.Slope)
		}
	default:
		n.Why = Stabilised
	}
	n.Stabilised = n.Why == Stabilised
}

// average begins, goes on with and ends averaging.
func (s *State) average(now *Now, t int64, in *Input) (changed Change) {
	a := &s.Average
	switch {
	case a.On && !now.Stabilised && a.Auto && t < a.To:
		s.Break()
		return Broke
	case a.On && !now.Stabilised && t < a.To && len(a.Doubts) == 0:
		a.Doubts = append(a.Doubts, "stabilised no longer while it was averaged: "+s.Hindrance())
	case !a.On && now.Stabilised && s.Points[s.At].Auto && in.Run:
		s.begin(t, "", true, nil)
		changed = Began
	}
	now.Averaging = a.On
	now.AveragingLeft = 0
	if a.On {
		now.AveragingLeft = max(0, float64(a.To-max(t, a.From))/1e9)
		if t >= a.To {
			changed |= Complete
		}
	}
	return changed
}

// Averages tells whether a scan at event time t, in ns, belongs to what is averaged.
func (s *State) Averages(t int64) bool {
	return s.Average.On && t >= s.Average.From && t < s.Average.To
}

// Hindrance says in words what speaks against taking the current point, "" for nothing.
func (s *State) Hindrance() string {
	pt := s.Current()
	if pt == nil {
		return ErrDone.Error()
	}
	n := &s.Now
	switch n.Why {
	case NoData:
		return "no scan since the point is current"
	case OffTarget:
		for i := range pt.Targets {
			if tg := &pt.Targets[i]; tg.Quantity == n.Quantity {
				return fmt.Sprintf("%s is not at %s: %s", title(tg), tg.Text, n.Targets[i].words(tg))
			}
		}
	case BadChannel:
		return n.Channel + " is not good"
	case Soaking:
		return fmt.Sprintf("%.1f s of the soak are left", n.SoakLeft)
	case Unsteady:
		of := ""
		if n.Quantity != "" {
			of = " of " + n.Quantity
		}
		return "the engine is not steady: " + strings.ReplaceAll(n.Steady, "_", " ") + of
	}
	return ""
}

func title(t *Target) string {
	if t.Title != "" {
		return t.Title
	}
	return t.Quantity
}

// words says how far a value is off.
func (n *TargetNow) words(tg *Target) string {
	if !n.Value.Known {
		return "not known"
	}
	unit := ""
	if tg.Unit != "" {
		unit = " " + tg.Unit
	}
	return fmt.Sprintf("%s%s, off by %s%s", figures(n.Value.V), unit, figures(n.Off.V), unit)
}

// figures writes a number with four figures, and all those before the point.
func figures(v float64) string {
	after := 0
	if a := math.Abs(v); a > 0 && a < 1000 {
		after = min(3-int(math.Floor(math.Log10(a))), 9)
	}
	text := strconv.FormatFloat(v, 'f', after, 64)
	if strings.Contains(text, ".") {
		text = strings.TrimRight(strings.TrimRight(text, "0"), ".")
	}
	return text
}
