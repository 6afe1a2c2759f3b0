package steady

import "math"

const (
	// minBins is the smallest number of bins from which an autocorrelation is measured.
	minBins = 8
	// windowing is the lag, in correlation times, beyond which the autocorrelation
	// is taken as noise.
	windowing = 4
	// fitted is the number of parameters of a parabola.
	fitted = 3
)

// Stats is what the closed bins of a window say. Units are those of the quantity,
// slopes per second. With fewer than 8 bins that have samples all but From, To,
// N, Bins and Coverage are NaN.
type Stats struct {
	From, To int64   // event time that the bins cover, ns; To is the end of the last closed bin
	N        int     // samples
	Bins     int     // bins with samples
	Coverage float64 // part of the whole window that has samples
	Full     bool    // the first sample ever is older than the window

	Mean float64 // of the samples
	SD   float64 // standard deviation of the samples about Mean
	U    float64 // Type A standard uncertainty of Mean: SD/√NEff

	Slope   float64 // least squares through the bin means
	SlopeU  float64 // its standard uncertainty
	Centre  float64 // seconds from the centre of the fit to To
	Level   float64 // the fitted line at its centre: mean of the bin means
	LevelU  float64 // standard uncertainty of Level by the noise
	Earlier Half    // first half of the window
	Later   Half    // second half

	Noise           float64 // standard deviation of the samples about the parabola
	CorrelationTime float64 // s, integral of the autocorrelation of the noise over lags ≥ 0
	NEff            float64 // effective sample size, ≤ N
	Nu              float64 // effective degrees of freedom of U, SlopeU and LevelU
	Resolved        bool    // the autocorrelation died out within a third of the window
}

// Half is the line through half a window, NaN with fewer than 4 bins.
type Half struct {
	Slope  float64
	SlopeU float64 // standard uncertainty
	Level  float64 // at the centre of the fit
	Centre float64 // s, from there to the end of the window
}

// Stats evaluates the closed bins of the window.
//
// Autocovariances c_k are those of the bin means about a parabola, so that a bent
// trend is not taken for noise, divided by the number of bins n; empty bins contribute
// nothing (amplitude-modulated series: Parzen, Sankhyā A 25, 1963). What the fit of three
// parameters takes away from each of them, 3τσ²/n, is put back. With τ = 1 + 2 Σ c_k/c_0, summed up to the first lag
// beyond 4 correlation times (automatic windowing: Madras and Sokal, J. Stat. Phys.
// 50, 1988; bias and error: Wolff, Comput. Phys. Commun. 156, 2004; both from memory),
//
//	u²(mean) = σ² τ/n   u²(slope) = σ² τ/Σ(t − t̄)²   NEff = noise²/u²(mean)   ν = n/(2M + 1)
//
// M being the last lag: the error of the sum, relative variance 2(2M+1)/n, stands in
// ν, as JCGM 100 G.3 has it. τ is not taken below 1, nor NEff above N. A process
// that is correlated by 1/e in T seconds has CorrelationTime T and NEff = span/2T.
func (w Window) Stats(p *Past) Stats {
	var y [MaxBins]float64
	var have [MaxBins]bool
	size := w.bins()
	s := unknown()
	if !p.Seen || len(p.Ring) != size+1 {
		return s
	}
	first := p.Open - int64(size)
	s.From, s.To = max(first, p.First)*w.Width, p.Open*w.Width
	s.Full = p.First <= first

	// Mean and scatter of the samples. Means are summed about one of them, so that
	// a small scatter on a large value keeps its digits.
	var base, sum float64
	for i := range size {
		k := first + int64(i)
		if k < 0 {
			continue
		}
		b := &p.Ring[int(k%int64(size+1))]
		if b.K != k || b.N == 0 {
			continue
		}
		if s.Bins == 0 {
			base = b.Mean
		}
		have[i], y[i] = true, b.Mean-base
		s.Bins++
		s.N += int(b.N)
		sum += float64(b.N) * y[i]
	}
	s.Coverage = float64(s.Bins) / float64(size)
	if s.Bins < minBins {
		return s
	}
	mean := sum / float64(s.N)
	var within, between float64
	for i := range size {
		if have[i] {
			b := &p.Ring[int((first+int64(i))%int64(size+1))]
			within += b.SS
			between += float64(b.N) * (y[i] - mean) * (y[i] - mean)
		}
	}
	s.Mean = base + mean
	s.SD = math.Sqrt((within + between) / float64(s.N-1))

	// The line, in units of a bin, and what remains about the parabola.
	seconds := float64(w.Width) / 1e9
	whole := fit(y[:size], have[:size])
	half := size / 2
	earlier, later := fit(y[:half], have[:half]), fit(y[half:size], have[half:size])
	s.Slope, s.Level = whole.slope/seconds, base+whole.y
	s.Centre = (float64(size) - 0.5 - whole.x) * seconds
	residual := 0.0
	for i := range size {
		if have[i] {
			b := &p.Ring[int((first+int64(i))%int64(size+1))]
			y[i] -= whole.at(float64(i))
			residual += float64(b.N) * y[i] * y[i]
		}
	}
	variance, tau, lag, resolved := correlation(y[:size], have[:size], s.Bins)
	s.Resolved = resolved
	n := float64(s.Bins)
	s.Nu = max(n/float64(2*lag+1), 1)
	long := variance * tau
	s.LevelU = math.Sqrt(long / n)
	s.SlopeU = math.Sqrt(long/whole.xx) / seconds
	later.x += float64(half)
	for _, h := range [...]struct {
		curve
		*Half
	}{{earlier, &s.Earlier}, {later, &s.Later}} {
		*h.Half = Half{
			Slope: h.slope / seconds, SlopeU: math.Sqrt(long/h.xx) / seconds,
			Level: base + h.y, Centre: (float64(size) - 0.5 - h.x) * seconds,
		}
	}

	// The fit has taken 3 effective values from the noise.
	s.NEff = float64(s.N)
	noise := (within + residual) / float64(s.N-1)
	if long > 0 {
		noise *= 1 / (1 - min(fitted*tau/n, 0.9))
		s.NEff = min(noise*n/long, s.NEff)
	}
	s.Noise = math.Sqrt(noise)
	s.U = s.SD / math.Sqrt(s.NEff)
	s.CorrelationTime = n * seconds / (2 * s.NEff)
	return s
}

func unknown() Stats {
	nan := math.NaN()
	h := Half{Slope: nan, SlopeU: nan, Level: nan, Centre: nan}
	return Stats{
		Mean: nan, SD: nan, U: nan, Slope: nan, SlopeU: nan, Centre: nan, Level: nan, LevelU: nan, Earlier: h, Later: h,
		Noise: nan, CorrelationTime: nan, NEff: nan, Nu: nan,
	}
}

// curve is a line through (x, y), and the parabola bend·((i−x)² − skew·(i−x) − flat)
// that is to be added for the best parabola; the three are orthogonal.
type curve struct {
	x, y, slope      float64
	xx               float64 // Σ (x − x̄)²
	bend, skew, flat float64
}

func (c *curve) at(i float64) float64 {
	d := i - c.x
	return c.y + c.slope*d + c.bend*(d*d-c.skew*d-c.flat)
}

// fit draws the least-squares line and parabola through the values that are there,
// NaN for fewer than four. x counts from 0.
func fit(y []float64, have []bool) curve {
	var n, sx, sy float64
	for i, ok := range have {
		if ok {
			n++
			sx += float64(i)
			sy += y[i]
		}
	}
	if n < 4 {
		nan := math.NaN()
		return curve{x: nan, y: nan, slope: nan, xx: nan}
	}
	c := curve{x: sx / n, y: sy / n}
	var xy, xxx float64
	for i, ok := range have {
		if ok {
			d := float64(i) - c.x
			c.xx += d * d
			xxx += d * d * d
			xy += d * (y[i] - c.y)
		}
	}
	c.slope, c.skew, c.flat = xy/c.xx, xxx/c.xx, c.xx/n
	var zz, zy float64
	for i, ok := range have {
		if ok {
			d := float64(i) - c.x
			z := d*d - c.skew*d - c.flat
			zz += z * z
			zy += z * (y[i] - c.y)
		}
	}
	c.bend = zy / zz
	return c
}

// correlation gives the variance of n residuals r, the factor τ by which their
// correlation multiplies the variance of their mean, and the last lag used.
func correlation(r []float64, have []bool, n int) (variance, tau float64, lag int, resolved bool) {
	count := float64(n)
	for _, v := range r {
		variance += v * v // 0 where there is none
	}
	variance /= count
	if variance == 0 {
		return 0, 1, 0, true
	}
	var c, pairs [MaxBins / 3]float64
	longest := n / 3
	for k := 1; k <= longest; k++ {
		var products, both float64
		for i := k; i < len(r); i++ {
			if have[i] && have[i-k] {
				products += r[i] * r[i-k]
				both++
			}
		}
		c[k-1], pairs[k-1] = products/count/variance, both/count
	}
	tau = 1
	for range 4 { // the correction depends on τ; it converges by 2M/n per round
		bias := min(fitted*tau/count, 0.5)
		sum := 1.0
		resolved = false
		for lag = 1; lag <= longest; lag++ {
			sum += 2 * (c[lag-1] + bias*pairs[lag-1]) / (1 + bias)
			if float64(lag) >= windowing*max(sum, 1)/2 {
				resolved = true
				break
			}
		}
		lag = min(lag, longest)
		tau = max(sum, 1)
	}
	return variance / (1 - min(fitted*tau/count, 0.9)), tau, lag, resolved
}
