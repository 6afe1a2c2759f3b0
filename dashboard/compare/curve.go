package compare

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"throatwatch/dashboard/points"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/steady"
	"throatwatch/rules/pipeline"
)

const (
	bins = 20 // of the baseline's range, at most
	// lag is the correlation time that scans are taken to have, s: n scans in a bin count
	// as their time over twice the lag.
	lag = 1.0
	// fewInBin is the number of scans below which a bin of the baseline says nothing.
	fewInBin = 10
)

// Bin is a part of a baseline curve.
type Bin struct {
	X        points.Number `json:"x"`        // mean over the baseline
	Baseline points.Number `json:"baseline"` // at X, on the line through the bin
	Scatter  points.Number `json:"scatter"`  // standard deviation of the scans about the line
	Scans    int           `json:"scans"`
	// Of the last run in this bin; null where it was not there.
	Value     *points.Number `json:"value"` // brought to X along the line
	Departure *points.Number `json:"departure"`
	U95       *points.Number `json:"departure_u95"`
	Beyond    bool           `json:"beyond"` // the departure is larger than its uncertainty
	ScansLast int            `json:"scans_last"`
}

// Curve is a quantity over an operating parameter.
type Curve struct {
	X     string `json:"x"`
	Y     string `json:"y"`
	UnitX string `json:"x_unit"`
	UnitY string `json:"y_unit"`
	Bins  []Bin  `json:"bins"`
}

// Of is what runs are told apart by as a whole.
type Of struct {
	Run       string        `json:"run"`
	Started   string        `json:"started"`
	Area      points.Number `json:"effective_area_m2"` // mean over its steady choked scans
	AreaU95   points.Number `json:"effective_area_m2_u95"`
	Drift     points.Number `json:"area_drift_percent"` // since the first of the runs that has one
	DriftU95  points.Number `json:"area_drift_percent_u95"`
	EGTMargin points.Number `json:"egt_margin_k"` // lowest run limit less the highest steady indicated EGT
}

// Parameters is a comparison by an operating parameter: the last run against the others.
type Parameters struct {
	Baseline []string `json:"baseline"`
	Last     string   `json:"last"`
	By       By       `json:"by"`
	Steady   bool     `json:"steady_only"`
	Curves   []Curve  `json:"curves"`
	Runs     []Of     `json:"runs"`
}

// axes gives what is laid over what.
func axes(by By) (x monitor.Quantity, y []monitor.Quantity) {
	if by == NPR {
		return monitor.NPR, []monitor.Quantity{monitor.IndependentFlowParameter, monitor.FlowParameter, monitor.MassFlow, monitor.EffectiveArea}
	}
	return monitor.ReferredSpeed, []monitor.Quantity{monitor.ReferredEGT, monitor.ReferredThrust, monitor.ReferredFlow, monitor.NPR}
}

// ByParameter compares the last of some runs with the ones before it: per bin of the
// operating parameter the baseline is the least-squares line through their scans. A
// departure is the mean distance of the last run's scans from it, with
//
//	U95 = 2 √(s²/n₁ + s²/n₂ + r²)
//
// s the scatter about the line, n the effective numbers of scans, r the standard deviation
// between the runs of the baseline, 0 for one. What all runs share, such as the systematic
// errors of the same instruments, cancels and is not in it. The error is ErrOption, or
// that of a run file.
func ByParameter(ctx context.Context, runs []Run, parse func([]byte) (pipeline.Config, error), o Options) (Parameters, error) {
	p := Parameters{By: o.By, Steady: !o.All, Curves: []Curve{}}
	if len(runs) < 2 || o.By != NPR && o.By != ReferredSpeed {
		return p, fmt.Errorf("%w: give two runs or more and an operating parameter", ErrOption)
	}
	last := len(runs) - 1
	p.Last = runs[last].Header.ID
	for i := range runs[:last] {
		p.Baseline = append(p.Baseline, runs[i].Header.ID)
	}
	codec := archive.NewCodec()
	x, ys := axes(o.By)
	names := []string{x.Info().Name}
	for _, y := range ys {
		names = append(names, y.Info().Name)
	}
	tables := make([]table, len(runs))
	for i := range runs {
		t, err := read(ctx, &runs[i], codec, names)
		if err != nil {
			return p, err
		}
		t.keep(o.All)
		tables[i] = t
	}
	for _, y := range ys {
		if c := curve(tables, x, y); len(c.Bins) > 0 {
			p.Curves = append(p.Curves, c)
		}
	}
	var err error
	p.Runs, err = drift(ctx, runs, codec, parse)
	return p, err
}

// keep leaves only the scans that count.
func (t *table) keep(all bool) {
	wanted := byte(pipeline.FlagSteady)
	if all {
		wanted = pipeline.FlagLit
	}
	for name, v := range t.cols {
		kept := v[:0]
		for i, value := range v {
			if t.flags[i]&wanted != 0 {
				kept = append(kept, value)
			}
		}
		t.cols[name] = kept
	}
}

// moments gathers the scans of a bin.
type moments struct{ n, x, y, xx, xy, yy float64 }

func (m *moments) add(x, y float64) {
	m.n++
	dx, dy := x-m.x, y-m.y
	m.x += dx / m.n
	m.y += dy / m.n
	m.xx += dx * (x - m.x)
	m.xy += dx * (y - m.y)
	m.yy += dy * (y - m.y)
}

// line gives the slope through the bin and the standard deviation about the line.
func (m *moments) line() (slope, scatter float64) {
	if m.xx > 1e-12*m.x*m.x {
		slope = m.xy / m.xx
	}
	rest := math.Max(m.yy-slope*m.xy, 0)
	return slope, math.Sqrt(rest / math.Max(m.n-2, 1))
}

func curve(tables []table, x, y monitor.Quantity) Curve {
	c := Curve{X: x.Info().Name, Y: y.Info().Name, UnitX: x.Info().Unit, UnitY: y.Info().Unit}
	low, high := math.Inf(1), math.Inf(-1)
	last := len(tables) - 1
	each := func(t *table, fn func(x, y float64)) {
		xs, ys := t.cols[c.X], t.cols[c.Y]
		for i := range min(len(xs), len(ys)) {
			if xs[i] == xs[i] && ys[i] == ys[i] {
				fn(xs[i], ys[i])
			}
		}
	}
	for i := range tables[:last] {
		each(&tables[i], func(x, _ float64) { low, high = math.Min(low, x), math.Max(high, x) })
	}
	if !(low <= high) {
		return c
	}
	width := math.Max((high-low)/bins, 1e-9*math.Max(math.Abs(high), 1))
	at := func(x float64) int { return int(math.Floor((x - low) / width)) }
	all := make([]moments, bins+1)
	own := make([][]moments, len(tables))
	for i := range tables {
		own[i] = make([]moments, bins+1)
		each(&tables[i], func(x, y float64) {
			k := at(x)
			if k < 0 || k > bins {
				return
			}
			own[i][k].add(x, y)
			if i < last {
				all[k].add(x, y)
			}
		})
	}
	for k := range all {
		if all[k].n < fewInBin {
			continue
		}
		c.Bins = append(c.Bins, bin(&all[k], own, k, tables))
	}
	return c
}

// bin makes a bin of the curve.
func bin(m *moments, own [][]moments, k int, tables []table) Bin {
	slope, scatter := m.line()
	b := Bin{X: points.Number(m.x), Baseline: points.Number(m.y), Scatter: points.Number(scatter), Scans: int(m.n)}
	last := len(own) - 1
	off := func(r *moments) float64 { return r.y - m.y - slope*(r.x-m.x) }
	var between moments
	for i := range own[:last] {
		if r := &own[i][k]; r.n >= fewInBin {
			between.add(0, off(r))
		}
	}
	r := &own[last][k]
	if b.ScansLast = int(r.n); r.n < fewInBin {
		return b
	}
	runs := 0.0
	if between.n > 1 {
		runs = between.yy / (between.n - 1)
	}
	s2 := scatter * scatter
	u95 := 2 * math.Sqrt(s2/tables[0].effective(m.n)+s2/tables[last].effective(r.n)+runs)
	departure := off(r)
	number := func(v float64) *points.Number { n := points.Number(v); return &n }
	b.Value, b.Departure, b.U95 = number(m.y+departure), number(departure), number(u95)
	b.Beyond = math.Abs(departure) > u95
	return b
}

// effective gives for how many independent scans n scans of a run count, 1 at least.
func (t *table) effective(n float64) float64 {
	if len(t.times) < 2 {
		return 1
	}
	period := float64(t.times[len(t.times)-1]-t.times[0]) / float64(len(t.times)-1) / 1e9
	return math.Max(n*math.Min(period/(2*lag), 1), 1)
}

// drift gives what runs are told apart by as a whole.
func drift(ctx context.Context, runs []Run, codec *archive.Codec, parse func([]byte) (pipeline.Config, error)) ([]Of, error) {
	nan := points.Number(math.NaN())
	var list []Of
	var first *steady.RunArea
	for i := range runs {
		r := &runs[i]
		of := Of{Run: r.Header.ID, Started: rfc3339(r.Header.Started), Area: nan, AreaU95: nan, Drift: nan, DriftU95: nan, EGTMargin: nan}
		area, err := areaOf(ctx, r)
		if err != nil {
			return nil, err
		}
		if area != nil {
			of.Area = points.Number(area.Area)
			of.AreaU95 = points.Number(2 * area.Area * math.Hypot(area.Random, area.Systematic))
			if first == nil {
				first = area
			} else {
				change, u95 := first.Drift(area)
				of.Drift, of.DriftU95 = points.Number(100*change), points.Number(100*u95)
			}
		}
		if of.EGTMargin, err = egtMargin(ctx, r, codec, parse); err != nil {
			return nil, err
		}
		list = append(list, of)
	}
	return list, nil
}

// areaOf gives the effective area that a run left behind when it ended, nil for none.
func areaOf(ctx context.Context, r *Run) (area *steady.RunArea, err error) {
	err = r.File.Events(ctx, r.Header.Started, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "reduction" {
			return nil
		}
		v := struct {
			Area       float64       `json:"effective_area_m2"`
			Random     points.Number `json:"random"`
			Systematic points.Number `json:"systematic"`
		}{}
		if err := json.Unmarshal(e.JSON, &v); err != nil {
			return fmt.Errorf("run %s: reduction: %w", r.Header.ID, err)
		}
		area = &steady.RunArea{Area: v.Area, Random: float64(v.Random), Systematic: float64(v.Systematic)}
		return nil
	})
	return area, err
}

// egtMargin gives the lowest run limit less the highest indicated EGT of the steady scans,
// K; NaN without either.
func egtMargin(ctx context.Context, r *Run, codec *archive.Codec, parse func([]byte) (pipeline.Config, error)) (points.Number, error) {
	nan := points.Number(math.NaN())
	c, err := r.File.LastCheckpoint(ctx, math.MaxInt64)
	if err != nil {
		return nan, err
	}
	state, err := pipeline.Decode(c.State)
	if err != nil {
		return nan, err
	}
	cfg, err := parse(state.Bundle)
	if err != nil {
		return nan, err
	}
	limits := []float64{}
	for _, b := range cfg.Compute.EGT.Bands {
		if b.Kind == egt.KindRun {
			limits = append(limits, b.Limit)
		}
	}
	name := monitor.EGTIndicated.Info().Name
	t, err := read(ctx, r, codec, []string{name})
	if err != nil {
		return nan, err
	}
	t.keep(false)
	hottest := math.Inf(-1)
	for _, v := range t.cols[name] {
		if v > hottest {
			hottest = v
		}
	}
	if len(limits) == 0 || math.IsInf(hottest, 0) {
		return nan, nil
	}
	return points.Number(slices.Min(limits) - hottest), nil
}
