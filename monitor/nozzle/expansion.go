package nozzle

import (
	"math"

	"throatwatch/monitor/gas"
)

// point is a state on the expansion line, without dimension where that is
// natural: p over the total pressure, flux W √(R T0)/(A p0).
type point struct {
	p, t, v, flux float64
}

func (q point) state(g *gas.Mixture, p0 float64) State {
	return State{Mach: q.v / g.SpeedOfSound(q.t), Pressure: q.p * p0, Temperature: q.t, Velocity: q.v}
}

// expansion is the line of isentropic states below one total temperature, with
// the pressure ratios p0/pb at which a nozzle changes its ways.
type expansion struct {
	g        *gas.Mixture
	t0       float64 // K
	h0, s0   float64 // at t0
	critical gas.CriticalState

	first  float64 // the throat becomes sonic
	second float64 // convergent-divergent: normal shock in the exit plane
	third  float64 // convergent-divergent: exit pressure is back pressure
	exit   point   // convergent-divergent: supersonic exit state
}

// at gives the state at the pressure p0/npr, npr ≥ 1.
func (x *expansion) at(npr float64) point {
	t := x.g.TFromS0(x.s0-x.g.R()*math.Log(npr), x.t0)
	return x.point(1/npr, t)
}

// from gives the state at the temperature t ≤ T0.
func (x *expansion) from(t float64) point {
	return x.point(math.Exp((x.g.S0(t)-x.s0)/x.g.R()), t)
}

// point fills in velocity from the energy, v²/2 = h0 − h, and flux.
func (x *expansion) point(p, t float64) point {
	v := x.velocity(t)
	return point{p: p, t: t, v: v, flux: p * v / math.Sqrt(x.g.R()*x.t0) * x.t0 / t}
}

func (x *expansion) velocity(t float64) float64 { return math.Sqrt(2 * max(0, x.h0-x.g.H(t))) }

// sonic gives the critical state.
func (x *expansion) sonic() point {
	c := x.critical
	return point{p: c.PressureRatio, t: c.Temperature, v: x.g.SpeedOfSound(c.Temperature), flux: c.FluxFunction}
}

// flow is what a nozzle does at one pressure ratio.
type flow struct {
	regime       Regime
	throat, exit point
}

// flow gives the flow at npr > 1. ratio is A9/A8 of a convergent-divergent
// nozzle that diverge has seen.
func (x *expansion) flow(npr, ratio float64) flow {
	if math.IsNaN(x.third) { // convergent
		if npr >= x.first {
			return flow{Choked, x.sonic(), x.sonic()}
		}
		exit := x.at(npr)
		return flow{Subsonic, exit, exit}
	}
	switch {
	case npr < x.first:
		exit := x.at(npr)
		// The throat passes the same flow through less area.
		throat := x.from(x.subsonic(exit.flux * ratio))
		return flow{Subsonic, throat, exit}
	case npr < x.second:
		return flow{ShockInside, x.sonic(), x.behindShock(npr, ratio)}
	case npr < x.third*(1-1e-3):
		return flow{OverExpanded, x.sonic(), x.exit}
	case npr <= x.third*(1+1e-3):
		return flow{Design, x.sonic(), x.exit}
	}
	return flow{UnderExpanded, x.sonic(), x.exit}
}

// diverge finds the three critical pressure ratios of the area ratio A9/A8 ≥ 1.
func (x *expansion) diverge(ratio float64) {
	flux := x.critical.FluxFunction / ratio
	x.first = 1 / x.from(x.subsonic(flux)).p
	x.exit = x.from(x.supersonic(flux))
	x.third = 1 / x.exit.p
	x.second = 1 / (x.exit.p * x.normalShock(x.exit))
}

// subsonic gives the temperature above T* at which the flux is as given.
func (x *expansion) subsonic(flux float64) float64 {
	return bisect(x.critical.Temperature, x.t0, func(t float64) bool { return x.from(t).flux > flux })
}

// supersonic gives the temperature below T* at which the flux is as given.
func (x *expansion) supersonic(flux float64) float64 {
	return bisect(1e-3*x.critical.Temperature, x.critical.Temperature, func(t float64) bool { return x.from(t).flux < flux })
}

// normalShock gives the pressure ratio p2/p1 over a normal shock in the state q
// (relations of mass, momentum and energy; h from the gas, so that γ changes over the
// shock). With r = v2/v1 = ρ1/ρ2:
//
//	p2/p1 = 1 + v1²/(R T1) (1 − r),  h2 = h1 + v1²/2 (1 − r²),  p2/p1 = T2/(T1 r)
//
// r = 1 is no shock; the other root has v2 below the speed of sound at T*.
func (x *expansion) normalShock(q point) float64 {
	h1 := x.g.H(q.t)
	pressure := func(r float64) float64 { return 1 + q.v*q.v/(x.g.R()*q.t)*(1-r) }
	sonic := x.g.SpeedOfSound(x.critical.Temperature)
	r := bisect(0.01, min(1, sonic/q.v), func(r float64) bool {
		t2 := x.g.TFromH(h1+q.v*q.v/2*(1-r*r), x.t0)
		return pressure(r) < t2/(q.t*r)
	})
	return pressure(r)
}

// behindShock gives the exit state at back pressure behind a shock inside. The
// flow is the choked one, W = C* p0 A8/√(R T0) = ρ9 v9 A9, the exit pressure is
// p0/npr and the total temperature unchanged, so v9/T9 follows without the shock's
// place. Its flux refers to the total pressure ahead of the shock.
func (x *expansion) behindShock(npr, ratio float64) point {
	want := x.critical.FluxFunction * npr / ratio
	root := math.Sqrt(x.g.R() * x.t0)
	t := bisect(x.critical.Temperature, x.t0, func(t float64) bool {
		return x.velocity(t)/root*x.t0/t > want
	})
	return x.point(1/npr, t)
}

// bisect gives the place between lo and hi where below, true at lo, turns false.
// It is used where two roots meet, at the throat, and Newton would be lost.
func bisect(lo, hi float64, below func(float64) bool) float64 {
	for range 60 {
		mid := lo + (hi-lo)/2
		if mid == lo || mid == hi {
			break
		}
		if below(mid) {
			lo = mid
		} else {
			hi = mid
		}
	}
	return lo + (hi-lo)/2
}
