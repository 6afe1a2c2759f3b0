package report

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/rules/pipeline"
)

const (
	buckets    = 450 // of a line across the page: more would not be seen
	mostDots   = 300 // of the throat plane
	mostSteady = 24  // of them with their uncertainty
	mostTurns  = 300 // changes of choke state, and of phase
	mostOut    = 400 // stretches in which channels could not be used
	mostGaps   = 100
)

// line is a column that is drawn.
type line int

// The lines.
const (
	lineNPR line = iota
	lineChokeNPR
	lineMargin
	lineMarginLow
	lineMarginHigh
	lineEGT
	lineHottest
	lineColdest
	lineSpeed
	lineFlow
	lineFlowLow
	lineFlowHigh
	lineMetered
	lineMeteredLow
	lineMeteredHigh
	numLines
)

// stretch is a time in which something was so; To is exclusive, ns UTC.
type stretch struct{ From, To int64 }

func (s stretch) seconds() float64 { return float64(s.To-s.From) / 1e9 }

// turn is a change of choke state or phase.
type turn struct {
	t    int64
	text string
}

// dot is a point of the throat plane; u is the 95 % uncertainty of flow.
type dot struct{ npr, flow, u float64 }

// dots keeps some of many, evenly: when it is full every other one goes.
type dots struct {
	most, stride, seen int
	kept               []dot
}

func (d *dots) add(p dot) {
	d.stride = max(d.stride, 1)
	if d.seen%d.stride == 0 {
		d.kept = append(d.kept, p)
		if len(d.kept) > d.most {
			half := d.kept[:0]
			for i := 0; i < len(d.kept); i += 2 {
				half = append(half, d.kept[i])
			}
			d.kept, d.stride = half, 2*d.stride
		}
	}
	d.seen++
}

// mean is a running mean.
type mean struct{ sum, n float64 }

func (m *mean) add(v float64) {
	if !math.IsNaN(v) {
		m.sum, m.n = m.sum+v, m.n+1
	}
}

func (m *mean) value() float64 { return m.sum / m.n }

// gasMeans are the means of temperature, fuel-air and humidity ratio.
type gasMeans [3]mean

// lowest is the worst margin at which choke was expected.
type lowest struct {
	v, low, high float64
	t            int64
}

// out is a stretch in which a channel could not be used.
type out struct {
	stretch
	quality monitor.Quality
}

// channelUse says how a channel did.
type channelUse struct {
	id      string
	scans   int
	by      [monitor.NumQualities]int
	out     []out
	dropped int // stretches beyond mostOut
	now     monitor.Quality
	since   int64
}

// scans is what the chunks of a run say.
type scans struct {
	from, to int64 // of the run; to is exclusive
	period   int64
	rows     int
	lines    [numLines]*archive.Decimator
	first    int64 // event time of the first row
	last     int64

	inChoke, marginal, lit, armedOpen int // rows; armedOpen: not choked while choke was expected
	worst                             lowest
	chokedIn                          []stretch
	choke, phases                     []turn
	dropped                           int // turns that are not listed
	all, steady                       dots
	gas, litGas                       gasMeans // while choked, and while lit
	gaps                              []stretch
	moreGaps                          int
	channels                          []channelUse
}

// gatherer reads the chunks of a run into a scans.
type gatherer struct {
	*scans
	rows  archive.Chunk
	choke monitor.ChokeState
	phase monitor.Phase
	begun bool
}

// gather reads the operating points and the qualities of the channels of a run. Memory
// does not depend on its length. Tell is told the time of each chunk.
func gather(ctx context.Context, f *runfile.File, from, to, period int64, tell func(t int64)) (*scans, error) {
	s := &scans{from: from, to: to, period: period, worst: lowest{v: math.Inf(1)}}
	s.all.most, s.steady.most = mostDots, mostSteady
	for i := range s.lines {
		s.lines[i] = archive.NewDecimator(from, to, buckets)
	}
	g := gatherer{scans: s}
	codec := archive.NewCodec()
	err := f.Chunks(ctx, pipeline.ChunkPoints, from, to, func(c *runfile.Chunk) error {
		if err := codec.Decode(&g.rows, c.Bytes, pointColumns()); err != nil {
			return err
		}
		g.points()
		tell(c.LastT)
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("operating points: %w", err)
	}
	g.endOfChoke()
	err = f.Chunks(ctx, pipeline.ChunkChannels, from, to, func(c *runfile.Chunk) error {
		head, err := archive.ReadHead(c.Bytes)
		if err != nil {
			return err
		}
		var names []string
		for i := range head.Columns {
			if strings.HasPrefix(head.Columns[i].Name, "quality.") {
				names = append(names, head.Columns[i].Name)
			}
		}
		if err := codec.Decode(&g.rows, c.Bytes, names); err != nil {
			return err
		}
		g.qualities()
		tell(c.LastT)
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("channels: %w", err)
	}
	for i := range s.channels {
		s.channels[i].change(s.last+period, monitor.QualityGood)
	}
	if s.gas[0].n == 0 {
		s.gas = s.litGas
	}
	return s, nil
}

// drawn are the quantities that are drawn as they are.
func drawn() map[line]monitor.Quantity {
	return map[line]monitor.Quantity{
		lineNPR: monitor.NPR, lineChokeNPR: monitor.ChokeNPR,
		lineMargin: monitor.ChokeMarginPercent, lineMarginLow: monitor.ChokeMarginPercentLow95, lineMarginHigh: monitor.ChokeMarginPercentHigh95,
		lineEGT: monitor.EGTIndicated, lineHottest: monitor.EGTHottest, lineColdest: monitor.EGTColdest, lineSpeed: monitor.Speed,
		lineFlow: monitor.MassFlow, lineMetered: monitor.IndependentFlow,
	}
}

// others are the quantities that are read beside those.
var others = []monitor.Quantity{
	monitor.MassFlowU95, monitor.IndependentFlowU95, monitor.IndependentFlowParameter, monitor.TotalTemperature, monitor.FuelAirRatio, monitor.HumidityRatio,
}

func pointColumns() []string {
	names := []string{"choke_state", "phase", "flags"}
	for _, q := range drawn() {
		names = append(names, q.Info().Name)
	}
	for _, q := range others {
		names = append(names, q.Info().Name)
	}
	slices.Sort(names)
	return names
}

// column gives the values of a quantity in the rows; all missing if it was not stored.
func (g *gatherer) column(q monitor.Quantity) []float64 {
	name := q.Info().Name
	for i := range g.rows.Columns {
		if g.rows.Columns[i].Name == name {
			return g.rows.Columns[i].Float
		}
	}
	missing := make([]float64, len(g.rows.Times))
	for i := range missing {
		missing[i] = math.NaN()
	}
	return missing
}

func (g *gatherer) state(name string) []byte {
	for i := range g.rows.Columns {
		if g.rows.Columns[i].Name == name {
			return g.rows.Columns[i].Byte
		}
	}
	return make([]byte, len(g.rows.Times))
}

// points takes the rows of a chunk of operating points.
func (g *gatherer) points() {
	times := g.rows.Times
	for l, q := range drawn() {
		g.lines[l].Add(times, g.column(q))
	}
	flow, metered := g.column(monitor.MassFlow), g.column(monitor.IndependentFlow)
	flowU, meteredU := g.column(monitor.MassFlowU95), g.column(monitor.IndependentFlowU95)
	edge := make([]float64, len(times))
	for _, e := range []struct {
		l    line
		v, u []float64
		sign float64
	}{{lineFlowLow, flow, flowU, -1}, {lineFlowHigh, flow, flowU, 1}, {lineMeteredLow, metered, meteredU, -1}, {lineMeteredHigh, metered, meteredU, 1}} {
		for i := range edge {
			edge[i] = e.v[i] + e.sign*e.u[i]
		}
		g.lines[e.l].Add(times, edge)
	}
	npr, parameter := g.column(monitor.NPR), g.column(monitor.IndependentFlowParameter)
	margin, low, high := g.column(monitor.ChokeMarginPercent), g.column(monitor.ChokeMarginPercentLow95), g.column(monitor.ChokeMarginPercentHigh95)
	gas := [3][]float64{g.column(monitor.TotalTemperature), g.column(monitor.FuelAirRatio), g.column(monitor.HumidityRatio)}
	states, phases, flags := g.state("choke_state"), g.state("phase"), g.state("flags")
	for i, t := range times {
		if t < g.from || t >= g.to {
			continue
		}
		g.row(t)
		choke, phase, flag := monitor.ChokeState(states[i]), monitor.Phase(phases[i]), flags[i]
		g.turns(t, choke, phase)
		if choke == monitor.Choked {
			g.inChoke++
		}
		for bit, n := range map[byte]*int{pipeline.FlagMarginal: &g.marginal, pipeline.FlagLit: &g.lit} {
			if flag&bit != 0 {
				*n++
			}
		}
		if flag&pipeline.FlagArmed != 0 {
			if choke != monitor.Choked {
				g.armedOpen++
			}
			if margin[i] < g.worst.v {
				g.worst = lowest{margin[i], low[i], high[i], t}
			}
		}
		for k := range gas {
			if choke == monitor.Choked {
				g.scans.gas[k].add(gas[k][i])
			}
			if flag&pipeline.FlagLit != 0 {
				g.litGas[k].add(gas[k][i])
			}
		}
		if !math.IsNaN(npr[i]) && !math.IsNaN(parameter[i]) {
			if flag&pipeline.FlagSteady != 0 {
				g.steady.add(dot{npr[i], parameter[i], parameter[i] * meteredU[i] / metered[i]})
			} else {
				g.all.add(dot{npr[i], parameter[i], math.NaN()})
			}
		}
	}
}

// row counts a row and notes where rows are missing before it.
func (g *gatherer) row(t int64) {
	if g.scans.rows == 0 {
		g.first = t
	} else if t-g.last > g.period*3/2 {
		if len(g.gaps) < mostGaps {
			g.gaps = append(g.gaps, stretch{g.last + g.period, t})
		} else {
			g.moreGaps++
		}
	}
	g.scans.rows++
	g.last = t
}

// turns notes changes of choke state and phase.
func (g *gatherer) turns(t int64, choke monitor.ChokeState, phase monitor.Phase) {
	note := func(list *[]turn, text string) {
		if len(*list) < mostTurns {
			*list = append(*list, turn{t, text})
		} else {
			g.dropped++
		}
	}
	if !g.begun || choke != g.choke {
		g.endOfChoke()
		if choke == monitor.Choked {
			g.chokedIn = append(g.chokedIn, stretch{t, t})
		}
		if g.begun {
			note(&g.scans.choke, chokeText(choke))
		}
		g.choke = choke
	}
	if !g.begun || phase != g.phase {
		if g.begun {
			note(&g.phases, "Phase "+phase.String())
		}
		g.phase = phase
	}
	g.begun = true
}

// endOfChoke closes the stretch of choke that is on; those beyond the bound are shaded
// with the one before.
func (g *gatherer) endOfChoke() {
	n := len(g.chokedIn)
	if n == 0 || g.choke != monitor.Choked {
		return
	}
	g.chokedIn[n-1].To = g.last + g.period
	if n > mostTurns {
		g.chokedIn[n-2].To = g.chokedIn[n-1].To
		g.chokedIn = g.chokedIn[:n-1]
	}
}

func chokeText(c monitor.ChokeState) string {
	switch c {
	case monitor.Choked:
		return "Throat choked"
	case monitor.Unchoked:
		return "Throat unchoked"
	case monitor.NoFlow:
		return "No flow"
	case monitor.ChokeUnknown:
	}
	return "Choke state unknown"
}

// qualities takes the rows of a chunk of channels.
func (g *gatherer) qualities() {
	for i := range g.rows.Columns {
		id := strings.TrimPrefix(g.rows.Columns[i].Name, "quality.")
		k := slices.IndexFunc(g.channels, func(c channelUse) bool { return c.id == id })
		if k < 0 {
			k = len(g.channels)
			g.channels = append(g.channels, channelUse{id: id, now: monitor.QualityGood})
		}
		ch := &g.channels[k]
		for n, b := range g.rows.Columns[i].Byte {
			t, q := g.rows.Times[n], monitor.Quality(b)
			if t < g.from || t >= g.to || q >= monitor.NumQualities {
				continue
			}
			ch.scans++
			ch.by[q]++
			if q.Usable() {
				q = monitor.QualityGood
			}
			ch.change(t, q)
		}
	}
}

// change notes that from t on the channel has another quality.
func (c *channelUse) change(t int64, q monitor.Quality) {
	if q == c.now {
		return
	}
	if c.now != monitor.QualityGood {
		if len(c.out) < mostOut {
			c.out = append(c.out, out{stretch{c.since, t}, c.now})
		} else {
			c.dropped++
		}
	}
	c.now, c.since = q, t
}

// usable is the part of the scans in which the channel could be used, 0 to 1.
func (c *channelUse) usable() float64 {
	return float64(c.by[monitor.QualityGood]+c.by[monitor.QualityHeld]) / float64(max(c.scans, 1))
}

// longest gives the stretches in which channels could not be used, the longest n of
// them by their begin, and how many there are beside.
func (s *scans) longest(n int) (list []namedOut, more int) {
	for i := range s.channels {
		c := &s.channels[i]
		for _, o := range c.out {
			list = append(list, namedOut{c.id, o})
		}
		more += c.dropped
	}
	slices.SortStableFunc(list, func(a, b namedOut) int { return cmp.Compare(b.To-b.From, a.To-a.From) })
	if len(list) > n {
		more += len(list) - n
		list = list[:n]
	}
	slices.SortStableFunc(list, func(a, b namedOut) int { return cmp.Compare(a.From, b.From) })
	return list, more
}

// namedOut is a stretch in which a channel could not be used.
type namedOut struct {
	id string
	out
}
