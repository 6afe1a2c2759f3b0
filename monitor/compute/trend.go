package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/steady"
)

// steadiness prepares the detector of the configuration.
func (c *Computer) steadiness() {
	q := &c.cfg.Steady
	if q.Window.Width <= 0 {
		return
	}
	watch := func(what monitor.Quantity, slope, relative float64) {
		c.watched = append(c.watched, what)
		c.detector.Quantities = append(c.detector.Quantities, steady.Criterion{Window: q.Window, Slope: slope, Relative: relative})
	}
	watch(monitor.RakePressure, 0, q.Pressure)
	watch(monitor.TotalTemperature, q.Temperature, 0)
	if c.cfg.Stations.Speed >= 0 {
		watch(monitor.Speed, 0, q.Speed)
	}
	c.detector.Dwell = q.Dwell
	c.steady = make([]float64, len(c.watched))
}

// steadyNow judges whether the engine is steady: in a steady phase or at idle, and
// nothing speaks against it. Without rotor speed there is no phase to ask.
func (c *Computer) steadyNow(s *State, p *monitor.OperatingPoint) {
	if len(c.watched) == 0 {
		p.NotSteady = monitor.ReasonNotConfigured
		return
	}
	for i, q := range c.watched {
		c.steady[i] = p.V[q]
	}
	r := c.detector.Step(&s.Steady, p.T, c.steady)
	switch {
	case !r.Steady:
		p.NotSteady = monitor.ReasonFilling + monitor.Reason(r.Why-steady.Filling)
	case c.cfg.Stations.Speed >= 0 && p.Phase != monitor.Steady && p.Phase != monitor.Idle:
		p.NotSteady = monitor.ReasonPhase
	default:
		p.Steady = true
	}
}

// Unsteady gives the first quantity that is not steady by its window as of the last scan,
// and its slope per second; NumQuantities where none is to blame.
func (c *Computer) Unsteady(s *State) (q monitor.Quantity, slope float64) {
	i := s.Steady.Result.Quantity
	if len(s.Steady.Stats) == 0 || i < 0 || i >= len(c.watched) {
		return monitor.NumQuantities, math.NaN()
	}
	return c.watched[i], s.Steady.Stats[i].Slope
}

// Trend is what is remembered of a quantity that may reach a limit. It is plain data.
type Trend struct {
	Past  steady.Past
	Ahead steady.Ahead // from At
	At    int64        // event time of the end of the window
	Limit float64      // that it is about
}

// forecast says when choke would be lost and the next EGT limit reached if the trend
// of a steady phase went on. It is a note, not an alarm. Its window begins with the
// phase.
func (c *Computer) forecast(s *State, p *monitor.OperatingPoint) {
	v := &p.V
	p.NoChokeLoss, p.NoEGTLimit = monitor.ReasonNotConfigured, monitor.ReasonNotConfigured
	if len(c.watched) == 0 {
		return
	}
	on := p.Phase == monitor.Steady || c.cfg.Stations.Speed < 0 && p.Steady
	set := func(a steady.Ahead, seconds monitor.Quantity) (why monitor.Reason) {
		if a.Why != steady.Given {
			return monitor.ReasonNotSteady + monitor.Reason(a.Why-steady.NotSteady)
		}
		v[seconds], v[seconds+1], v[seconds+2] = a.Seconds, a.Low95, a.High95
		return monitor.NoReason
	}
	loss := c.follow(&s.ToChokeLoss, p.T, v[monitor.ChokeMarginPercent], steady.Limit{Falling: true}, on)
	p.NoChokeLoss = set(loss, monitor.ChokeLossIn)
	if len(c.cfg.Stations.EGT) == 0 {
		return
	}
	now := v[monitor.EGTIndicated]
	limit := math.Inf(1)
	for i := range c.cfg.EGT.Bands {
		if b := &c.cfg.EGT.Bands[i]; b.Kind == egt.KindRun && b.Limit > now {
			limit = min(limit, b.Limit)
		}
	}
	if math.IsInf(limit, 1) {
		p.NoEGTLimit = monitor.ReasonNoLimit
		limit = math.NaN()
	}
	reach := c.follow(&s.ToEGTLimit, p.T, now, steady.Limit{Value: limit}, on)
	if limit == limit {
		p.NoEGTLimit = set(reach, monitor.EGTLimitIn)
	}
}

// follow enters a value, and gives the forecast as seen from t. It is made anew
// whenever a bin closes.
func (c *Computer) follow(tr *Trend, t int64, v float64, l steady.Limit, on bool) steady.Ahead {
	w := c.cfg.Steady.Window
	if !on {
		if tr.Past.Seen {
			tr.Past.Clear()
		}
		tr.Ahead, tr.At = steady.Ahead{Why: steady.NotSteady}, t
		return tr.Ahead
	}
	if tr.At == 0 || tr.Ahead.Why == steady.NotSteady {
		tr.Ahead, tr.At = steady.Ahead{Why: steady.NotEnough}, t
	}
	if closed := w.Add(&tr.Past, t, v); closed || l.Value != tr.Limit {
		stats := w.Stats(&tr.Past)
		tr.Ahead, tr.At, tr.Limit = l.Forecast(w, &stats, true), stats.To, l.Value
	}
	a, since := tr.Ahead, float64(t-tr.At)/1e9
	if a.Why == steady.Given {
		a.Seconds, a.Low95, a.High95 = max(a.Seconds-since, 0), max(a.Low95-since, 0), max(a.High95-since, 0)
	}
	return a
}

// block is the steady time of which a mean is taken as independent of the next.
const block = 10 * second

// Area gathers the effective throat area of a run over its steady choked scans. It is
// plain data; the zero value has gathered nothing.
type Area struct {
	T          int64 // event time of the last scan in it
	Steady     int64 // ns
	N          int
	Mean       float64 // m²
	Systematic float64 // relative standard uncertainty, of the last scan
	// The block that is being filled, and the blocks before.
	InBlock   int64
	BlockN    int
	BlockMean float64
	Blocks    int
	Middle    float64 // mean of the blocks' means
	Square    float64 // sum of squares of the blocks' means about Middle
}

func (a *Area) add(t int64, area, systematic float64) {
	dt := min(t-a.T, bridgeGap)
	if a.T == 0 {
		dt = 0
	}
	a.T = t
	a.Steady += max(dt, 0)
	a.N++
	a.Mean += (area - a.Mean) / float64(a.N)
	a.Systematic = systematic
	a.BlockN++
	a.BlockMean += (area - a.BlockMean) / float64(a.BlockN)
	if a.InBlock += max(dt, 0); a.InBlock < block {
		return
	}
	a.Blocks++
	d := a.BlockMean - a.Middle
	a.Middle += d / float64(a.Blocks)
	a.Square += d * (a.BlockMean - a.Middle)
	a.InBlock, a.BlockN, a.BlockMean = 0, 0, 0
}

// Of gives the area of the run, for its record; ok is false when there was none. Its
// random part is that of the mean of blocks of 10 s: NaN for fewer than two.
func (a *Area) Of(run string) (r steady.RunArea, ok bool) {
	r = steady.RunArea{Run: run, T: a.T, Area: a.Mean, Systematic: a.Systematic, Steady: a.Steady, Random: math.NaN()}
	if n := float64(a.Blocks); n >= 2 {
		r.Random = math.Sqrt(a.Square/(n-1)/n) / a.Mean
	}
	return r, a.N > 0
}
