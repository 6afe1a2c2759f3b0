package phase

import (
	"math"
	"time"

	"throatwatch/monitor"
)

const (
	// settle is the memory of the speed filter, ns. Its lag on a ramp in rate is
	// twice that, its noise in rate 0.3 per second of the noise in speed at 20
	// scans/s.
	settle = 0.5 * float64(time.Second)

	// forget is the gap in speed after which the filter begins anew, ns.
	forget = 2 * int64(time.Second)

	// restBelow is the part of Turning below which a rotor is at rest again.
	restBelow = 0.8

	// litMargin is how far below LitEGT an established flame is called lost, K.
	litMargin = 10
)

// State is what has to be remembered from scan to scan. It is plain data and
// may be encoded and copied as such. The zero value has seen nothing.
type State struct {
	Phase    monitor.Phase // as last returned
	Lit      bool          // a flame, by indicated EGT
	LitKnown bool          // false until Lit says something
	// Speed filter.
	T       int64   // event time of the last good speed, ns UTC
	Since   int64   // event time of the first good speed after a gap
	N       float64 // filtered speed, rpm
	NRate   float64 // its rate, rpm/s
	HaveN   bool
	Settled bool // NRate can be used
	// Where the rotor is, with hysteresis.
	Known   monitor.Phase // last phase that was known
	Turning bool
	AtSpeed bool  // at or above idle
	Quiet   int64 // event time since when |rate| is not above MoveRate
	IsQuiet bool
	Cool    int64 // event time since when the engine is at rest and cool
	IsCool  bool
	// Flame.
	Base        float64 // K, lowest EGT since the rotor began to turn, before light-off
	HaveBase    bool
	Established bool // EGT was above LitEGT since light-off
}

// Rate gives the rate of rotor speed in rpm/s, NaN while it is not known: in the
// first second and a half, and while there is no speed.
func (s *State) Rate() float64 {
	if !s.Settled {
		return math.NaN()
	}
	return s.NRate
}

// Step enters one scan at event time t in ns: rotor speed in rpm and indicated
// EGT in K, NaN when missing. It gives the phase.
//
//	at rest      cooling until EGT is below CoolEGT for OffAfter, then off
//	below idle   on the way up cranking, with a flame lighting; on the way down rundown
//	near idle    idle
//	above        accelerating or decelerating while |dN/dt| > MoveRate, steady
//	             once it was not for SteadyAfter
//
// Without a speed the phase is unknown. A flame is taken from EGT above LitEGT
// or LitRise above the lowest EGT of cranking; without EGT the last finding
// stands while the rotor turns. The rate is that of a fading-memory filter of
// first degree (least squares with weights exp(−age/0.5 s)) on event time.
func (c *Config) Step(s *State, t int64, speed, egt float64) monitor.Phase {
	if math.IsNaN(speed) {
		s.HaveN, s.Settled, s.IsQuiet, s.IsCool = false, false, false, false
		c.flame(s, egt)
		s.Phase = monitor.PhaseUnknown
		return s.Phase
	}
	s.filter(t, speed)
	switch {
	case speed > c.Turning && !s.Turning:
		s.Turning, s.HaveBase, s.IsCool = true, false, false
	case speed < restBelow*c.Turning:
		s.Turning = false
	}
	switch {
	case speed >= c.Idle-c.IdleBand:
		s.AtSpeed = true
	case speed < c.Idle-2*c.IdleBand:
		s.AtSpeed = false
	}
	c.flame(s, egt)
	if quiet := s.Settled && math.Abs(s.NRate) <= c.MoveRate; !quiet {
		s.IsQuiet = false
	} else if !s.IsQuiet {
		s.IsQuiet, s.Quiet = true, t
	}
	switch {
	case !s.Turning:
		s.Phase = c.atRest(s, t, egt)
	case !s.AtSpeed:
		s.Phase = c.belowIdle(s)
	default:
		s.Phase = c.atSpeed(s, t)
	}
	if s.Phase != monitor.PhaseUnknown {
		s.Known = s.Phase
	}
	return s.Phase
}

// filter carries speed and rate on to t. With θ = exp(−Δt/τ) and the residual r
// of the prediction, N += (1 − θ²) r and dN/dt += (1 − θ)² r/Δt.
func (s *State) filter(t int64, speed float64) {
	dt := t - s.T
	switch {
	case !s.HaveN || dt > forget:
		s.N, s.NRate, s.Since, s.HaveN, s.Settled = speed, 0, t, true, false
	case dt <= 0:
		return
	default:
		theta := math.Exp(-float64(dt) / settle)
		seconds := float64(dt) / float64(time.Second)
		predicted := s.N + s.NRate*seconds
		r := speed - predicted
		s.N = predicted + (1-theta*theta)*r
		s.NRate += (1 - theta) * (1 - theta) * r / seconds
		s.Settled = float64(t-s.Since) >= 3*settle
	}
	s.T = t
}

// flame keeps Lit. A rotor at rest has no flame; heat that soaks back after a
// shutdown is none.
func (c *Config) flame(s *State, egt float64) {
	if s.HaveN && !s.Turning {
		s.Lit, s.LitKnown, s.Established, s.HaveBase = false, true, false, false
		return
	}
	if math.IsNaN(egt) {
		return
	}
	s.LitKnown = true
	if s.AtSpeed {
		s.HaveBase = false
	} else if !s.Lit && s.HaveN && (!s.HaveBase || egt < s.Base) {
		s.Base, s.HaveBase = egt, true
	}
	if !s.Lit && s.Known == monitor.Rundown && s.NRate <= 0 {
		return // heat soaks back into the harness while the rotor runs down
	}
	on := c.LitEGT
	if s.HaveBase && c.LitRise > 0 {
		// A start with a hot tail pipe shows a flame by a rise only.
		on = s.Base + c.LitRise
		if s.Base < c.LitEGT {
			on = min(on, c.LitEGT)
		}
	}
	switch {
	case !s.Lit:
		s.Lit, s.Established = egt > on, egt > on && egt > c.LitEGT
	case s.Established:
		s.Lit = egt >= c.LitEGT-litMargin
		s.Established = s.Lit
	default:
		s.Established = egt > c.LitEGT
		s.Lit = egt >= on-c.LitRise/2
	}
}

// atRest tells off from cooling. Without a history a cool engine is off.
func (c *Config) atRest(s *State, t int64, egt float64) monitor.Phase {
	switch {
	case math.IsNaN(egt):
		s.IsCool = false
		if s.Known == monitor.Off || s.Known == monitor.PhaseUnknown {
			return s.Known
		}
		return monitor.Cooling
	case egt >= c.CoolEGT:
		s.IsCool = false
		if s.Known == monitor.Off && egt < c.CoolEGT+litMargin {
			return monitor.Off
		}
		return monitor.Cooling
	case !s.IsCool:
		s.IsCool, s.Cool = true, t
	}
	if s.Known == monitor.Off || s.Known == monitor.PhaseUnknown || t-s.Cool >= c.OffAfter {
		return monitor.Off
	}
	return monitor.Cooling
}

// belowIdle tells a start from a rundown: by where the rotor comes from, and by
// a rate that is beyond MoveRate.
func (c *Config) belowIdle(s *State) monitor.Phase {
	up := monitor.Cranking
	if s.Lit {
		up = monitor.Lighting
	}
	rising := s.Settled && s.NRate > c.MoveRate
	falling := s.Settled && s.NRate < -c.MoveRate
	switch s.Known {
	case monitor.Off, monitor.Cooling:
		return up
	case monitor.Cranking, monitor.Lighting:
		if falling {
			return monitor.Rundown
		}
		return up
	case monitor.PhaseUnknown:
		switch {
		case falling:
			return monitor.Rundown
		case !s.Settled:
			return monitor.PhaseUnknown
		}
		return up
	case monitor.Rundown, monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating, monitor.NumPhases:
		if s.Known == monitor.Rundown && rising {
			return up
		}
	}
	return monitor.Rundown
}

// atSpeed tells idle, moving and steady apart. What is neither idle nor known by
// a rate is unknown.
func (c *Config) atSpeed(s *State, t int64) monitor.Phase {
	band := c.IdleBand
	if s.Known == monitor.Idle {
		band *= 1.5
	}
	offIdle := math.Abs(s.N - c.Idle)
	moving := !s.IsQuiet
	switch s.Known {
	case monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		if offIdle <= band && !moving {
			return monitor.Idle
		}
	case monitor.PhaseUnknown, monitor.Off, monitor.Cranking, monitor.Lighting, monitor.Idle, monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		// Idle is reached at its first scan, however fast.
		if offIdle <= band || s.N < c.Idle {
			return monitor.Idle
		}
	}
	switch {
	case !s.Settled:
		return monitor.PhaseUnknown
	case moving && s.NRate > 0:
		return monitor.Accelerating
	case moving:
		return monitor.Decelerating
	case s.Known == monitor.Idle, s.Known == monitor.Steady, t-s.Quiet >= c.SteadyAfter:
		return monitor.Steady
	case s.Known == monitor.Accelerating, s.Known == monitor.Decelerating:
		return s.Known
	}
	return monitor.PhaseUnknown
}
