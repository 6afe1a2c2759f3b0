package steady

import (
	"math"
	"testing"
)

// outcomes gives how often a limit is forecast or not and why, and how often the
// interval of those given holds the truth.
func outcomes(w Window, sig *signal, l Limit, truth float64, windows int) (share [TooFarAhead + 1]float64, holds float64) {
	var p Past
	for range windows {
		s := window(w, &p, sig)
		a := l.Forecast(w, &s, true)
		share[a.Why] += 1 / float64(windows)
		if a.Why == Given && a.Low95 <= truth && truth <= a.High95 {
			holds++
		}
	}
	return share, holds / (share[Given] * float64(windows))
}

// A steady process in noise correlated over 1 s: at most 5 % of windows forecast a
// limit, wherever it is and on either side. (By Fieller's g < 1 it is 2.5 %.)
func TestFalseForecasts(t *testing.T) {
	for _, tc := range []struct {
		span, lag float64
		windows   int
	}{{60, 1, 2000}, {60, 0.1, 500}, {60, 2, 1000}, {300, 1, 400}} {
		w, sig := Seconds(tc.span), seeded(43, tc.lag, 1, level(1000))
		away := [...]float64{0.5, 1, 2, 4, -1} // deviations
		var given [len(away)]float64
		var p Past
		for range tc.windows {
			s := window(w, &p, sig)
			for i, a := range away {
				if (Limit{Value: 1000 + a, Falling: a < 0}).Forecast(w, &s, true).Why == Given {
					given[i] += 1 / float64(tc.windows)
				}
			}
		}
		for i, a := range away {
			if given[i] > 0.05 {
				t.Errorf("window %g s, lag %g s, limit %g deviations away: %.1f %% false", tc.span, tc.lag, a, 100*given[i])
			}
		}
	}
}

// The same in a watch of 2 h that forecasts at every bin while the engine is steady.
func TestFalseForecastsInAWatch(t *testing.T) {
	d := detector()
	var s State
	sig := seeded(47, 1, 0.1, level(100))
	var given, all float64
	for at := epoch; at < epoch+2*3600*second; at += scan {
		v := [1]float64{sig.at(at)}
		r := d.Step(&s, at, v[:])
		if at%(second/2) != 0 || !r.Steady {
			continue
		}
		all++
		if a := (Limit{Value: 100.15}).Forecast(d.Quantities[0].Window, &s.Stats[0], r.Steady); a.Why == Given {
			given++
		}
	}
	if !(given/all <= 0.05) || all < 10_000 {
		t.Errorf("%.1f %% of %v false", 100*given/all, all)
	}
}

// Trends in noise of 1 with a lag of 1 s, 30 per window. The truth is in the
// interval in 95 % of cases less three times the sampling error, and less what the
// parabola costs. A line looks as if it levelled in 16 % of windows; the nearer the
// limit, the fewer of them stay without a forecast.
func TestTrends(t *testing.T) {
	const rise = 30.0
	for _, span := range []float64{60, 300} {
		w := Seconds(span)
		for _, tc := range []struct {
			name           string
			f              func(x float64) float64 // of windows
			limit          float64
			falling        bool
			truth          float64 // windows from the end
			want           NoForecast
			least, holding float64
		}{
			{"a line", func(x float64) float64 { return rise * x }, 1.5 * rise, false, 0.5, Given, 0.94, 0.92},
			{"a line that falls", func(x float64) float64 { return -rise * x }, -2 * rise, true, 1, Given, 0.88, 0.92},
			{"gathering pace", func(x float64) float64 { return rise * x * x }, 1.5 * rise, false, math.Sqrt(1.5) - 1, Given, 0.98, 0.88},
			{"away from the limit", func(x float64) float64 { return -rise * x }, 10, false, 0, NoTrend, 0.98, 0},
			{"beyond twice the window", func(x float64) float64 { return rise * x }, 3.4 * rise, false, 0, TooFarAhead, 0.8, 0},
			{"past the limit", func(x float64) float64 { return rise * x }, 0.9 * rise, false, 0, PastLimit, 0.98, 0},
		} {
			share, holds := outcomes(w, seeded(53, 1, 1, func(t float64) float64 { return tc.f(t / span) }), Limit{tc.limit, tc.falling}, tc.truth*span, int(24_000/span))
			if share[tc.want] < tc.least || tc.want == Given && holds < tc.holding {
				t.Errorf("%g s, %s: %v, %.3f of the intervals hold", span, tc.name, share, holds)
			}
		}
	}
}

// A trend that levels off short of the limit is not forecast to reach it, though
// the line through the window is.
func TestLevelling(t *testing.T) {
	for _, span := range []float64{60, 300} {
		for _, constant := range []float64{0.3, 0.5, 1} { // in windows
			f := func(t float64) float64 { return 30 * -math.Expm1(-t/span/constant) }
			w := Seconds(span)
			share, _ := outcomes(w, seeded(59, 1, 1, f), Limit{Value: 30 * 1.2}, 0, int(24_000/span))
			if share[Given] > 0.05 {
				t.Errorf("%g s, time constant %g windows: %.1f %% forecast", span, constant, 100*share[Given])
			}
			if constant == 0.5 && share[Levelling] < 0.5 {
				t.Errorf("%g s: not found to level: %v", span, share)
			}
		}
	}
}

func TestNoForecast(t *testing.T) {
	w := Seconds(60)
	var p Past
	l := Limit{Value: 105}
	s := window(w, &p, seeded(61, 0.5, 0.1, func(t float64) float64 { return 100 + 4*t/60 }))
	if a := l.Forecast(w, &s, true); a.Why != Given || !(a.Low95 < a.Seconds && a.Seconds < a.High95) || math.Abs(a.Seconds-15) > 2 {
		t.Errorf("a trend of 4 in 60 s, 1 to go: %+v, want 15 s", a)
	}
	if a := l.Forecast(w, &s, false); a.Why != NotSteady || !math.IsNaN(a.Seconds) {
		t.Errorf("not steady: %+v", a)
	}
	short := s
	short.Full = false
	if a := l.Forecast(w, &short, true); a.Why != NotEnough {
		t.Errorf("short: %+v", a)
	}
	none := unknown()
	if a := l.Forecast(w, &none, true); a.Why != NotEnough {
		t.Errorf("nothing: %+v", a)
	}
}
