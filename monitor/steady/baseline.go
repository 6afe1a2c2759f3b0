package steady

import "math"

// Baseline learns what a residual normally is: that of the flow balance, best as a
// part of the flow so that one baseline serves every speed. It learns in steady
// phases only and is frozen elsewhere, and while the residual departs from it.
type Baseline struct {
	Memory int64 // ns of steady time after which what was learned has faded to 1/e
	Learn  int64 // ns of steady time before it judges
	Smooth int64 // ns, over which a residual is averaged before it is judged
	Hold   int64 // ns for which it must depart to be flagged
}

// Learned is what a Baseline remembers. The zero value knows nothing. At the end of
// a run Mean, Scatter and Time go into the history of the engine.
type Learned struct {
	Mean   float64
	Square float64 // mean square about Mean, faded alike
	Time   int64   // ns of steady time learned
	T      int64   // event time of the last residual
	Seen   bool
	// Judgement.
	Now     float64 // residual averaged over Smooth
	Settled int64   // ns of steady time in Now
	Over    int64   // event time since when Now departs
	Departs bool
	Flagged bool
}

// Scatter gives the standard deviation of single residuals about the baseline.
func (l *Learned) Scatter() float64 { return math.Sqrt(l.Square) }

// Departure is the finding of a Baseline. What is not known is NaN.
type Departure struct {
	Baseline float64
	Scatter  float64
	By       float64 // smoothed residual − baseline; NaN outside steady phases
	Flagged  bool    // |By| above the uncertainty for Hold; stays until it is seen below 80 % of it
}

const (
	// step is the largest time in ns that one residual stands for.
	step = int64(1e9)
	// cleared is the part of the uncertainty below which a flag is taken back.
	cleared = 0.8
)

// Step enters a residual at event time t with its 95 % uncertainty; a NaN is
// passed over. With x the residual and w = Δt/memory, memory not longer than
// what was learned so far, mean += w (x − mean): the mean of all at first,
// exponentially weighted later. It judges against u95, which should leave out
// what all residuals of the engine share, since the baseline contains that.
func (b *Baseline) Step(l *Learned, t int64, residual, u95 float64, steady bool) Departure {
	if !steady {
		l.Settled, l.Departs, l.Seen = 0, false, false
		return b.finding(l, math.NaN())
	}
	if math.IsNaN(residual) || math.IsInf(residual, 0) {
		return b.finding(l, l.by(b))
	}
	dt := min(t-l.T, step)
	if !l.Seen {
		l.Seen, l.T, l.Now = true, t, residual
		return b.finding(l, l.by(b))
	}
	if dt <= 0 {
		return b.finding(l, l.by(b))
	}
	l.T = t
	l.Settled += dt
	l.Now += weight(dt, min(b.Smooth, l.Settled)) * (residual - l.Now)
	by := l.by(b)
	switch size := math.Abs(by); {
	case size > u95 && !l.Departs:
		l.Departs, l.Over = true, t
	case size <= u95 && !l.Flagged, size <= cleared*u95:
		l.Departs, l.Flagged = false, false
	}
	if l.Departs && t-l.Over >= b.Hold {
		l.Flagged = true
	}
	if l.Departs || l.Flagged || by != by && l.Time >= b.Learn && l.Time > 0 {
		return b.finding(l, by)
	}
	l.Time += dt
	w := weight(dt, min(b.Memory, l.Time))
	d := residual - l.Mean
	l.Mean += w * d
	l.Square += w * (d*(residual-l.Mean) - l.Square)
	return b.finding(l, by)
}

// by gives the departure, NaN until baseline and residual can be judged.
func (l *Learned) by(b *Baseline) float64 {
	if l.Time < b.Learn || l.Time == 0 || l.Settled < b.Smooth {
		return math.NaN()
	}
	return l.Now - l.Mean
}

func (b *Baseline) finding(l *Learned, by float64) Departure {
	d := Departure{Baseline: math.NaN(), Scatter: math.NaN(), By: by, Flagged: l.Flagged}
	if l.Time > 0 && l.Time >= b.Learn {
		d.Baseline, d.Scatter = l.Mean, l.Scatter()
	}
	return d
}

// weight is that of a value which stands for dt in an average over memory.
func weight(dt, memory int64) float64 {
	if memory <= dt {
		return 1
	}
	return float64(dt) / float64(memory)
}
