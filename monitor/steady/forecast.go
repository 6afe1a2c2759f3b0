package steady

import "math"

// horizon is how far a forecast reaches, in windows.
const horizon = 2

// Limit is a value that a quantity should not pass.
type Limit struct {
	Value   float64
	Falling bool // the quantity passes it from above, as a margin does
}

// NoForecast says why there is no forecast.
type NoForecast uint8

// The reasons, in the order in which they are looked for.
const (
	Given       NoForecast = iota // there is one
	NotSteady                     // not in a steady phase
	NotEnough                     // the window is not full, has gaps, or its noise is too slow for it
	PastLimit                     // the quantity is beyond the limit
	NoTrend                       // no trend toward the limit with 95 % confidence
	Levelling                     // the trend slows down and ends before the limit
	TooFarAhead                   // later than twice the window
)

// String gives the reason as code.
func (n NoForecast) String() string {
	names := [...]string{"given", "not_steady", "not_enough", "past_limit", "no_trend", "levelling", "too_far_ahead"}
	if int(n) < len(names) {
		return names[n]
	}
	return "invalid"
}

// MarshalText writes the code.
func (n NoForecast) MarshalText() ([]byte, error) { return []byte(n.String()), nil }

// Ahead is a forecast: a note, not an alarm. Without one the times are NaN.
type Ahead struct {
	Why     NoForecast
	Seconds float64 // from the end of the window until the trend reaches the limit
	Low95   float64 // 95 % interval of Seconds, ≥ 0
	High95  float64
}

// Forecast says when the straight trend of a window reaches the limit. steady is
// whether the engine is in a steady phase; elsewhere there is no forecast.
//
// With level y at the centre of the window, slope b, and t = t_95(ν), the time is
// x = (limit − y)/b. Level and slope are not correlated there, and the interval is
// Fieller's (J. R. Stat. Soc. B 16, 1954; from memory) with g = t² u²(b)/b²:
//
//	[x ± t/|b| √(u²(y)(1 − g) + x² u²(b))]/(1 − g)
//
// It is finite only for g < 1, which is the test for a trend: without one, there
// is a forecast toward a given limit in 2.5 % of windows.
//
// The halves of the window are compared. Where the later one is flatter by more
// than the standard uncertainty of the difference, the trend is taken to fade from
// half to half by the ratio q of the slopes, and what it has left to go is
// b_later·T/2·q/(1 − q); a limit that is farther than that less its standard
// uncertainty is not forecast. Where the slopes differ with 95 % confidence, the
// later half alone is used, and for a trend that gathers pace Low95 is that of the
// parabola whose bend is the largest within that confidence.
func (l Limit) Forecast(w Window, s *Stats, steady bool) Ahead {
	span := float64(w.Span()) / 1e9
	sign := 1.0
	if l.Falling {
		sign = -1
	}
	// From here on the quantity rises toward a limit that is ahead.
	slope, slopeU := sign*s.Slope, s.SlopeU
	ahead := sign*(l.Value-s.Level) - slope*s.Centre // from the end of the line
	t := 0.0
	if steady && s.Full && s.Resolved && s.Coverage >= coverage {
		t = Student(0.95, s.Nu)
	}
	switch {
	case !steady:
		return none(NotSteady)
	case !(t > 0):
		return none(NotEnough)
	case !(ahead > 0):
		return none(PastLimit)
	case !(slope > t*slopeU):
		return none(NoTrend)
	}
	level, levelU, centre := sign*s.Level, s.LevelU, s.Centre
	earlier, later := sign*s.Earlier.Slope, sign*s.Later.Slope
	differ := math.Hypot(s.Earlier.SlopeU, s.Later.SlopeU)
	// From the end of the parabola that has these slopes in its halves.
	left := sign*(l.Value-s.Later.Level) - later*s.Later.Centre - (later-earlier)*span/24
	if d := earlier - later; d > differ {
		fade := later * later / d * span / 2
		fadeU := math.Hypot(later*(earlier+d)*s.Later.SlopeU, later*later*s.Earlier.SlopeU) / (d * d) * span / 2
		if !(later > 0) || fade-fadeU < left {
			return none(Levelling)
		}
	}
	if math.Abs(earlier-later) > t*differ {
		slope, slopeU = later, s.Later.SlopeU
		level, levelU, centre = sign*s.Later.Level, levelU*math.Sqrt2, s.Later.Centre
		if !(slope > t*slopeU) {
			return none(NoTrend)
		}
	}
	x := (sign*l.Value - level) / slope
	g := t * slopeU / slope
	g *= g
	half := t / slope * math.Sqrt(levelU*levelU*(1-g)+x*x*slopeU*slopeU)
	a := Ahead{Seconds: x - centre, Low95: (x-half)/(1-g) - centre, High95: (x+half)/(1-g) - centre}
	if later-earlier > t*differ {
		bend := (later - earlier + t*differ) / (span / 2)
		end, soonest := later+bend*s.Later.Centre, max(left-t*math.Hypot(levelU, slopeU*centre), 0)
		a.Low95 = min(a.Low95, 2*soonest/(end+math.Sqrt(end*end+2*bend*soonest)))
	}
	a.Seconds, a.Low95 = max(a.Seconds, 0), max(a.Low95, 0)
	if a.Seconds > horizon*span {
		return none(TooFarAhead)
	}
	return a
}

func none(why NoForecast) Ahead {
	nan := math.NaN()
	return Ahead{Why: why, Seconds: nan, Low95: nan, High95: nan}
}
