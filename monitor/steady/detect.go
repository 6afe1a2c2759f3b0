package steady

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mathext"
)

const (
	// enter and leave are the probabilities under which a ratio of variances
	// speaks against becoming steady and against staying so.
	enter, leave = 0.01, 0.0001
	// slack is by how much what is asked is eased for a quantity that is steady.
	slack = 1.25
	// resolution is the largest standard uncertainty of a slope, in slope limits: a
	// trend of twice the limit then looks like less than the limit in 5 % of windows.
	resolution = 1 / 1.645
	// fewest is the smallest number of decimated values for a ratio of variances.
	fewest = 8
	// coverage is the least part of the window that must have samples.
	coverage = 0.8
	// spacing is the distance of decimated values in correlation times.
	spacing = 3
)

// VonNeumann gives the ratio of the mean square successive difference to the
// variance,
//
//	η = Σ (x_i+1 − x_i)² / Σ (x_i − x̄)²
//
// and the probability that n independent normal values have so small a one. η is
// about 2 for a steady process and falls with any trend, step or slow swing.
// P(η) is taken as a symmetric beta distribution on (0, 4) with the exact variance
// 4 (n − 2)/(n² − 1): within 0.003 of the truth for n ≥ 8. For n < 4 both are NaN;
// equal values give 2 and ½.
//
// Source: von Neumann, Ann. Math. Stat. 12 (1941) 367; the moments: Young,
// Biometrika 32 (1941) 293. The filtered form of the same ratio for process
// plants is Cao and Rhinehart, J. Process Control 5 (1995) 363, who also ask for
// decimation of correlated data. All from memory.
func VonNeumann(x []float64) (eta, probability float64) {
	n := float64(len(x))
	if n < 4 {
		return math.NaN(), math.NaN()
	}
	var mean, square, successive float64
	for _, v := range x {
		mean += v / n
	}
	for i, v := range x {
		square += (v - mean) * (v - mean)
		if i > 0 {
			successive += (v - x[i-1]) * (v - x[i-1])
		}
	}
	if successive == 0 {
		return 2, 0.5
	}
	eta = successive / square
	return eta, smallRatio(eta, n)
}

// smallRatio gives P(η) for n values.
func smallRatio(eta, n float64) float64 {
	shape := ((n*n-1)/(n-2) - 1) / 2
	return mathext.RegIncBeta(shape, shape, min(eta/4, 1))
}

// Why says what speaks against a steady state.
type Why uint8

// The reasons, in the order in which they are looked for.
const (
	IsSteady   Why = iota // nothing
	Filling               // the window is not full yet
	Gaps                  // too many bins without a sample
	Correlated            // too few independent values: the noise is slower than the window allows
	Trend                 // the slope is beyond its limit
	Scatter               // the noise hides a slope of the size of the limit
	Swing                 // the ratio of variances: a swing, a step or a bent trend
	Dwell                 // passes, but not yet long enough
)

// String gives the reason as code.
func (w Why) String() string {
	names := [...]string{"steady", "filling", "gaps", "correlated", "trend", "scatter", "swing", "dwell"}
	if int(w) < len(names) {
		return names[w]
	}
	return "invalid"
}

// MarshalText writes the code.
func (w Why) MarshalText() ([]byte, error) { return []byte(w.String()), nil }

// Criterion is what is asked of one quantity. The slope may be the larger of the
// two limits.
type Criterion struct {
	Window   Window
	Slope    float64 // unit of the quantity per second
	Relative float64 // fraction of the mean per second; 0.25 %/min is 0.0025/60
	Noise    float64 // s, the longest correlation time that is still noise; 0 = 1 s
}

// Detector judges whether an engine is steady: every quantity has to be, for Dwell.
type Detector struct {
	Quantities []Criterion
	Dwell      int64 // ns
}

// Check tells what is wrong with a Detector.
func (d *Detector) Check() error {
	var faults []error
	for i, c := range d.Quantities {
		if c.Window.Width <= 0 || c.Window.Bins < minBins || c.Window.Bins > MaxBins {
			faults = append(faults, fmt.Errorf("steady: quantity %d: window of %d bins of %d ns, want %d to %d of more than 0", i+1, c.Window.Bins, c.Window.Width, minBins, MaxBins))
		}
		if !(c.Slope >= 0 && c.Relative >= 0 && c.Slope+c.Relative > 0) {
			faults = append(faults, fmt.Errorf("steady: quantity %d: no slope limit", i+1))
		}
		if !(c.Noise >= 0) {
			faults = append(faults, fmt.Errorf("steady: quantity %d: noise of %v s", i+1, c.Noise))
		}
	}
	return errors.Join(faults...)
}

// State is what a Detector remembers. The zero value has seen nothing.
type State struct {
	Past   []Past
	Stats  []Stats // of the windows as last evaluated
	Why    []Why   // of each quantity by itself
	Result Result
	Passed int64 // event time since when nothing speaks against it
	Passes bool
}

// Result is the finding for all quantities.
type Result struct {
	Steady   bool
	Why      Why
	Quantity int   // the first one that is not steady, −1 for none
	Since    int64 // event time since when Steady is as it is
}

// Step enters one scan at event time t in ns: one value per quantity, NaN where it
// is missing, bad or held. A quantity is judged as often as it closes a bin:
//
//  1. the window is full and has samples in 80 % of its bins
//  2. the autocorrelation has died out within the window
//  3. |slope| ≤ limit
//  4. u(slope) ≤ limit/1.645, so that twice the limit is found in 95 % of windows
//  5. P(η) ≥ 1 % for bin means decimated to 3 correlation times (as measured, but
//     not above Noise), see VonNeumann; or they scatter by less than a trend at
//     its limit would, limit·span/√12, so that a quiet quantity is not refused for
//     a movement that does not matter
//
// Once steady, 1.25 times the limits and P(η) ≥ 0.01 % are asked and 2. no more, so
// that the state does not flutter. No sample for a fifth of the window ends it.
func (d *Detector) Step(s *State, t int64, values []float64) Result {
	if n := len(d.Quantities); len(s.Past) != n {
		*s = State{Past: make([]Past, n), Stats: make([]Stats, n), Why: make([]Why, n), Result: Result{Quantity: -1, Since: t}}
		for i := range s.Why {
			s.Why[i], s.Stats[i] = Filling, unknown()
		}
	}
	found, quantity := IsSteady, -1
	for i := range d.Quantities {
		c, p := &d.Quantities[i], &s.Past[i]
		if c.Window.Add(p, t, values[i]) {
			s.Stats[i] = c.Window.Stats(p)
			s.Why[i] = c.judge(p, &s.Stats[i], s.Result.Steady)
		} else if p.Seen && t/c.Window.Width-p.Open > int64(c.Window.bins())/5 {
			s.Why[i] = Gaps // no bin closes while nothing comes
		}
		if found == IsSteady && s.Why[i] != IsSteady {
			found, quantity = s.Why[i], i
		}
	}
	if found != IsSteady || len(d.Quantities) == 0 {
		s.Passes = false
	} else if !s.Passes {
		s.Passes, s.Passed = true, t
	}
	if s.Passes && t-s.Passed < d.Dwell && !s.Result.Steady {
		found = Dwell
	}
	if steady := s.Passes && found == IsSteady; steady != s.Result.Steady {
		s.Result.Steady, s.Result.Since = steady, t
	}
	s.Result.Why, s.Result.Quantity = found, quantity
	return s.Result
}

// judge looks for what speaks against one quantity.
func (c *Criterion) judge(p *Past, s *Stats, steady bool) Why {
	ease, least := 1.0, enter
	if steady {
		ease, least = slack, leave
	}
	limit := ease * max(c.Slope, c.Relative*math.Abs(s.Mean))
	switch {
	case !s.Full:
		return Filling
	case s.Coverage < coverage/ease:
		return Gaps
	case !s.Resolved && !steady:
		return Correlated
	case !(math.Abs(s.Slope) <= limit):
		return Trend
	case !(s.SlopeU <= ease*resolution*limit):
		return Scatter
	}
	x, n := c.decimated(p, s.CorrelationTime)
	if n < fewest && !steady {
		return Correlated
	}
	span := float64(c.Window.Span()) / 1e9
	if _, chance := VonNeumann(x[:n]); chance < least && deviation(x[:n]) > limit*span/math.Sqrt(12) {
		return Swing
	}
	return IsSteady
}

// deviation gives the standard deviation of at least two values.
func deviation(x []float64) float64 {
	_, u, _ := Readings(x)
	return u * math.Sqrt(float64(len(x)))
}

// decimated takes closed bins with three correlation times between them, the newest
// first.
func (c *Criterion) decimated(p *Past, correlation float64) (x [MaxBins]float64, n int) {
	noise := c.Noise
	if noise <= 0 {
		noise = 1
	}
	stride := 1 + int64(math.Ceil(spacing*min(correlation, noise)*1e9/float64(c.Window.Width)))
	for k := p.Open - 1; k >= max(p.Open-int64(c.Window.bins()), 0); k -= stride {
		if b := &p.Ring[int(k%int64(len(p.Ring)))]; b.K == k && b.N > 0 {
			x[n] = b.Mean
			n++
		}
	}
	return x, n
}
