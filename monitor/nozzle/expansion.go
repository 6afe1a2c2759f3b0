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
	total    gas.Properties
	critical gas.CriticalState

	divergent bool
	ratio     float64 // A9/A8 if divergent
	first     float64 // the throat becomes sonic
	second    float64 // divergent: normal shock in the exit plane
	third     float64 // divergent: exit pressure is back pressure
	exit      point   // divergent: supersonic exit state
}

func newExpansion(g *gas.Mixture, t0 float64) expansion {
	c := g.Critical(t0)
	return expansion{g: g, t0: t0, total: g.At(t0), critical: c, ratio: 1, first: 1 / c.PressureRatio, second: math.NaN(), third: math.NaN()}
}

// at gives the state at the pressure p0/npr, npr ≥ 1.
func (x *expansion) at(npr float64) point {
	// Where cp is that of T0 all the way, T0 npr^(−R/cp) is the temperature.
	log := x.g.R() * math.Log(npr)
	t := x.g.TFromS0(x.total.S0-log, x.t0*math.Exp(-log/x.total.Cp))
	return x.point(1/npr, t, x.g.H(t))
}

// from gives the state at the temperature t ≤ T0.
func (x *expansion) from(t float64) point {
	q := x.g.At(t)
	return x.point(math.Exp((q.S0-x.total.S0)/x.g.R()), t, q.H)
}

// point fills in velocity from the energy, v²/2 = h0 − h, and flux.
func (x *expansion) point(p, t, h float64) point {
	v := math.Sqrt(2 * max(0, x.total.H-h))
	return point{p: p, t: t, v: v, flux: p * v / math.Sqrt(x.g.R()*x.t0) * x.t0 / t}
}

// sonic gives the critical state.
func (x *expansion) sonic() point {
	c := &x.critical
	return point{p: c.PressureRatio, t: c.Temperature, v: c.Velocity, flux: c.FluxFunction}
}

// flow is what a nozzle does at one pressure ratio.
type flow struct {
	regime       Regime
	throat, exit point
}

// flow gives the flow at npr > 1; expanded is the state at npr.
func (x *expansion) flow(npr float64, expanded point) flow {
	switch {
	case !x.divergent && npr >= x.first:
		return flow{Choked, x.sonic(), x.sonic()}
	case !x.divergent:
		return flow{Subsonic, expanded, expanded}
	case npr < x.first:
		// The throat passes the same flow through less area.
		return flow{Subsonic, x.from(x.atFlux(expanded.flux*x.ratio, +1)), expanded}
	case npr < x.second:
		return flow{ShockInside, x.sonic(), x.behindShock(npr)}
	case npr < x.third*(1-1e-3):
		return flow{OverExpanded, x.sonic(), x.exit}
	case npr <= x.third*(1+1e-3):
		return flow{Design, x.sonic(), x.exit}
	}
	return flow{UnderExpanded, x.sonic(), x.exit}
}

// diverge finds the three critical pressure ratios of the area ratio A9/A8 ≥ 1. A
// nozzle of ratio 1 is a convergent one, whose three coincide.
func (x *expansion) diverge(ratio float64) {
	if ratio == 1 {
		x.second, x.third = x.first, x.first
		return
	}
	x.divergent, x.ratio = true, ratio
	flux := x.critical.FluxFunction / ratio
	x.first = 1 / x.from(x.atFlux(flux, +1)).p
	x.exit = x.from(x.atFlux(flux, -1))
	x.third = 1 / x.exit.p
	x.second = 1 / (x.exit.p * x.normalShock(x.exit))
}

// atFlux gives the temperature above (side +1) or below (side −1) T* at which the
// flux is as given. ln(C*/flux) has a minimum of 0 at T*, so that its root G is nearly
// straight over T there, and Newton's method is at home:
//
//	G = √ln(C*/flux),  d ln flux/dT = (cp − 1)/T − cp/2(h0 − h),  all over R
func (x *expansion) atFlux(flux, side float64) float64 {
	c := &x.critical
	want := math.Sqrt(max(0, math.Log(c.FluxFunction/flux)))
	cp := x.g.Cp(c.Temperature) / x.g.R()
	lo, hi := c.Temperature, x.t0
	guess := min(lo*(1+want/math.Sqrt((cp-1)*(2*cp-1)/2)), hi-(hi-lo)/4*flux*flux/(c.FluxFunction*c.FluxFunction))
	if side < 0 {
		lo, hi = 1e-3*c.Temperature, c.Temperature
		guess = max(hi*(1-want/math.Sqrt((cp-1)*(2*cp-1)/2)), hi/3)
	}
	return root(lo, hi, guess, func(t float64) (float64, float64) {
		q := x.g.At(t)
		r := x.g.R()
		fall := (x.total.H - q.H) / r
		log := (q.S0-x.total.S0)/r + math.Log(2*fall*x.t0)/2 - math.Log(t*c.FluxFunction)
		g := math.Sqrt(max(0, -log))
		slope := ((q.Cp/r-1)/t - q.Cp/r/(2*fall)) / (2 * g)
		return side * (want - g), side * slope
	})
}

// normalShock gives the pressure ratio p2/p1 over a normal shock in the
// supersonic state q. Mass, momentum and energy, h from the gas so that γ changes over
// the shock, leave one equation for T2, between T* and T0:
//
//	R T1/v1 + v1 = R T2/v2 + v2,  v2²/2 = h0 − h(T2),  p2/p1 = T2 v1/(T1 v2)
func (x *expansion) normalShock(q point) float64 {
	r := x.g.R()
	stream := r*q.t/q.v + q.v
	c := &x.critical
	// Prandtl: v1 v2 = a*², exact for constant γ; then T2 from the energy.
	v2 := c.Velocity * c.Velocity / q.v
	guess := x.t0 - (x.t0-c.Temperature)*v2*v2/(c.Velocity*c.Velocity)
	t := root(c.Temperature, x.t0, guess, func(t float64) (float64, float64) {
		s := x.g.At(t)
		v := math.Sqrt(2 * max(0, x.total.H-s.H))
		return stream - r*t/v - v, (s.Cp*(1-r*t/(v*v)) - r) / v
	})
	return t / q.t * q.v / x.velocity(t)
}

func (x *expansion) velocity(t float64) float64 { return math.Sqrt(2 * max(0, x.total.H-x.g.H(t))) }

// behindShock gives the exit state at back pressure behind a shock inside. The
// flow is the choked one, W = C* p0 A8/√(R T0) = ρ9 v9 A9, the exit pressure is
// p0/npr and the total temperature unchanged, so v9/T9 follows without the shock's
// place. Its flux refers to the total pressure ahead of the shock.
func (x *expansion) behindShock(npr float64) point {
	want := x.critical.FluxFunction * npr / x.ratio * math.Sqrt(x.g.R()/x.t0) // v/T
	b := x.total.Cp / (want * want)                                           // constant cp: T² = 2 b (T0 − T)
	guess := math.Sqrt(b*b+2*b*x.t0) - b
	t := root(x.critical.Temperature, x.t0, guess, func(t float64) (float64, float64) {
		s := x.g.At(t)
		v := math.Sqrt(2 * max(0, x.total.H-s.H))
		return v/t - want, -(s.Cp/v + v/t) / t
	})
	return x.point(1/npr, t, x.g.H(t))
}

// root gives the place between lo and hi at which f, above 0 at lo and below 0 at
// hi, is 0: by Newton's method from guess, f giving its slope as well, and by halving
// the bracket where a step would leave it.
func root(lo, hi, guess float64, f func(float64) (value, slope float64)) float64 {
	t := guess
	if !(t > lo && t < hi) {
		t = lo + (hi-lo)/2
	}
	for range 100 {
		v, slope := f(t)
		if v > 0 {
			lo = t
		} else {
			hi = t
		}
		next := t - v/slope
		if math.Abs(next-t) <= 1e-8*t { // the next step would be its square
			return min(max(next, lo), hi)
		}
		if !(next > lo && next < hi) {
			next = lo + (hi-lo)/2
		}
		t = next
	}
	return t
}
