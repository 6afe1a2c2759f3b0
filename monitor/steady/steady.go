// Package steady holds the statistics of time: what the recent past of a
// quantity says about its mean, its trend and itself.
//
// Noise on an engine is correlated, so the number of values says little: at a
// correlation time of 1 s and 20 scans/s one value in forty is new. Everything
// here rests on the effective sample size, from the autocorrelation that is
// measured in the same window. Window and Stats give mean, slope and their
// standard uncertainties; Detector judges steadiness; Limit.Forecast says when a
// trend reaches a limit; Reduce makes a test point; Baseline learns what a
// balance residual normally is, and EffectiveArea what throat it implies.
//
// Time is event time in ns. What is remembered is plain data with exported
// fields, made to be stored and copied; it allocates once, when first used.
// Values that were held, missing or bad enter as NaN and are left out: a held
// value is no observation, and a gap is a gap.
package steady

import "math"

// MaxBins is the largest number of bins of a Window.
const MaxBins = 240

// Window says how long and how finely the past of a quantity is kept. Samples are
// gathered in bins of event time, so that memory and work do not grow with the
// scan rate. A bin should be shorter than the correlation time of the noise and
// not shorter than the period of the samples; 120 bins are a good number.
type Window struct {
	Width int64 // ns, of a bin; > 0
	Bins  int   // 8 … MaxBins; what is outside is taken as the nearest
}

// Seconds gives a Window of that length in 120 bins.
func Seconds(s float64) Window {
	return Window{Width: int64(s / 120 * 1e9), Bins: 120}
}

// Span gives the length of the window in ns.
func (w Window) Span() int64 { return w.Width * int64(w.bins()) }

func (w Window) bins() int { return min(max(w.Bins, minBins), MaxBins) }

// Bin is what is kept of the samples of one bin.
type Bin struct {
	K    int64   // number of the bin, event time / Width
	N    int32   // samples
	Mean float64 // of the samples
	SS   float64 // sum of squares of the samples about Mean
}

// Past is what is remembered of one quantity. The zero value has seen nothing.
type Past struct {
	Ring  []Bin // bin K is at K modulo len; one more than Window.Bins, for the open one
	First int64 // number of the first bin that ever had a sample
	Open  int64 // number of the bin that is being filled
	Seen  bool
}

// Add enters one sample and reports whether it closed a bin, which is when Stats
// has something new to say. NaN and infinite values are no samples, nor are those
// older than the window.
func (w Window) Add(p *Past, t int64, v float64) (closed bool) {
	if math.IsNaN(v) || math.IsInf(v, 0) || w.Width <= 0 {
		return false
	}
	if n := w.bins() + 1; len(p.Ring) != n {
		*p = Past{Ring: make([]Bin, n)}
	}
	k := t / w.Width
	switch {
	case !p.Seen:
		p.Seen, p.First, p.Open = true, k, k
	case k > p.Open:
		p.Open, closed = k, true
	case k <= p.Open-int64(len(p.Ring)):
		return false
	}
	b := &p.Ring[int(k%int64(len(p.Ring)))]
	if b.K != k || b.N == 0 {
		*b = Bin{K: k}
	}
	b.N++
	d := v - b.Mean
	b.Mean += d / float64(b.N)
	b.SS += d * (v - b.Mean)
	return closed
}

// Clear forgets everything but keeps the memory.
func (p *Past) Clear() {
	clear(p.Ring)
	p.Seen, p.First, p.Open = false, 0, 0
}
