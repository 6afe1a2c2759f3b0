package export

import (
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// kind is what the cells of a column hold.
type kind uint8

const (
	number kind = iota // float64, NaN = missing
	text               // "" = missing
	whole              // int64, always there
	flag               // always there
)

// Names of the columns that every table begins with.
const (
	nameT  = "t"
	nameNS = "t_ns"
)

// column describes a column.
type column struct {
	name, unit, title string
	kind              kind
}

// vector holds the cells of a column: one of the slices, after its kind.
type vector struct {
	number []float64
	text   []string
	whole  []int64
	flag   []bool
}

// batch is some rows of a table, by column. Every vector has the length of t.
type batch struct {
	t       []int64
	columns []vector
}

func newBatch(columns int) *batch { return &batch{columns: make([]vector, columns)} }

// reset empties the batch and keeps its room.
func (b *batch) reset() {
	b.t = b.t[:0]
	for i := range b.columns {
		v := &b.columns[i]
		v.number, v.text, v.whole, v.flag = v.number[:0], v.text[:0], v.whole[:0], v.flag[:0]
	}
}

// crop keeps the rows at times from (inclusive) to (exclusive).
func (b *batch) crop(from, to int64) {
	inside := func(t int64) bool { return t >= from && t < to }
	n := 0
	for i, t := range b.t {
		if !inside(t) {
			continue
		}
		if n < i {
			b.t[n] = t
			for k := range b.columns {
				b.columns[k].move(n, i)
			}
		}
		n++
	}
	if n == len(b.t) {
		return
	}
	b.t = b.t[:n]
	for k := range b.columns {
		b.columns[k].cut(n)
	}
}

// move copies the cell i to n.
func (v *vector) move(n, i int) {
	switch {
	case v.number != nil:
		v.number[n] = v.number[i]
	case v.text != nil:
		v.text[n] = v.text[i]
	case v.whole != nil:
		v.whole[n] = v.whole[i]
	case v.flag != nil:
		v.flag[n] = v.flag[i]
	}
}

func (v *vector) cut(n int) {
	v.number, v.text = v.number[:min(n, len(v.number))], v.text[:min(n, len(v.text))]
	v.whole, v.flag = v.whole[:min(n, len(v.whole))], v.flag[:min(n, len(v.flag))]
}

// missing counts the cells without a value.
func (b *batch) missing(columns []column) (n int64) {
	for i := range columns {
		switch v := &b.columns[i]; columns[i].kind {
		case number:
			for _, x := range v.number {
				if x != x {
					n++
				}
			}
		case text:
			for _, x := range v.text {
				if x == "" {
					n++
				}
			}
		case whole, flag:
		}
	}
	return n
}

// allColumns gives the columns of the table.
func (e *Export) allColumns() []column {
	switch e.opt.What {
	case OperatingPoints:
		return pointColumns()
	case Scans:
		return e.scanColumns()
	case Samples:
		return sampleColumns
	case Events:
		return eventColumns
	case WhatInvalid, numWhats:
	}
	return nil
}

// pointColumns gives the columns of an operating point: states and flags behind
// the quantities.
func pointColumns() []column {
	var out []column
	for q := range monitor.NumQuantities {
		info := q.Info()
		out = append(out, column{info.Name, info.Unit, info.Title, number})
	}
	return append(
		out,
		column{"choke_state", "", "Choke state", text},
		column{"phase", "", "Engine phase", text},
		column{"back_pressure_from", "", "Source of the back pressure", text},
		column{"total_pressure_from", "", "Source of p7", text},
		column{"total_temperature_from", "", "Source of T7", text},
		column{"choke_marginal", "", "0.025 < P(choked) < 0.975", flag},
		column{"choke_armed", "", "Choke is expected", flag},
		column{"lit", "", "Flame", flag},
		column{"steady", "", "Steady phase, and nothing speaks against it", flag},
	)
}

// scanColumns gives two columns per channel of the configurations, in the order
// of the rig file.
func (e *Export) scanColumns() []column {
	var out []column
	known := map[string]bool{}
	for _, cfg := range slices.Backward(e.configs) {
		for k := range cfg.Compute.Channels {
			c := &cfg.Compute.Channels[k]
			if known[c.ID] {
				continue
			}
			known[c.ID] = true
			out = append(
				out,
				column{"channel." + c.ID, c.Unit.Dimension.SI().Name, c.Title, number},
				column{"quality." + c.ID, "", c.Title + ", quality", text},
			)
		}
	}
	return out
}

// stateName gives the name of a stored state.
func stateName(column string, v byte) string {
	switch column {
	case "choke_state":
		return monitor.ChokeState(v).String()
	case "phase":
		return monitor.Phase(v).String()
	case "back_pressure_from", "total_pressure_from", "total_temperature_from":
		return monitor.Source(v).String()
	}
	return monitor.Quality(v).String()
}

// flagBit gives the bit of the stored column "flags".
func flagBit(column string) byte {
	switch column {
	case "choke_marginal":
		return pipeline.FlagMarginal
	case "choke_armed":
		return pipeline.FlagArmed
	case "lit":
		return pipeline.FlagLit
	}
	return pipeline.FlagSteady
}

// resampler gathers rows in intervals. See the package comment.
type resampler struct {
	columns []column // of what it gives

	from       []column
	every      int64
	statistics []Statistic
	begin      int64 // of the interval that is open
	rows       int64 // in it; 0 = none is open
	gathered   []gathered
	out        *batch
}

// gathered is what an interval has of one column so far.
type gathered struct {
	sum, min, max, last float64
	n                   int64
	text                string
	flag                bool
}

// resampled is how many intervals go into one batch.
const resampled = 1024

func newResampler(from []column, every int64, statistics []Statistic) *resampler {
	r := &resampler{from: from, every: every, statistics: statistics, gathered: make([]gathered, len(from))}
	r.columns = append(r.columns, column{"rows", "", "Rows in the interval", whole})
	for _, c := range from {
		if c.kind != number {
			r.columns = append(r.columns, c)
			continue
		}
		for _, s := range statistics {
			r.columns = append(r.columns, column{c.name + "." + s.String(), c.unit, c.title + ", " + s.String(), number})
		}
	}
	r.out = newBatch(len(r.columns))
	return r
}

// add takes rows in and gives what is complete to put.
func (r *resampler) add(b *batch, put func(*batch) error) error {
	for i, t := range b.t {
		begin := t - floorMod(t, r.every)
		if r.rows > 0 && begin != r.begin {
			if err := r.end(put); err != nil {
				return err
			}
		}
		r.begin = begin
		r.rows++
		for k := range r.from {
			g, v := &r.gathered[k], &b.columns[k]
			switch r.from[k].kind {
			case number:
				g.add(v.number[i])
			case text:
				g.text = v.text[i]
			case flag:
				g.flag = v.flag[i]
			case whole: // no table that is resampled has one
			}
		}
	}
	return nil
}

func (g *gathered) add(x float64) {
	if x != x {
		return
	}
	if g.n == 0 {
		g.min, g.max = x, x
	}
	g.sum, g.min, g.max, g.last = g.sum+x, min(g.min, x), max(g.max, x), x
	g.n++
}

// end closes the open interval.
func (r *resampler) end(put func(*batch) error) error {
	r.out.t = append(r.out.t, r.begin)
	v := &r.out.columns[0]
	v.whole = append(v.whole, r.rows)
	k := 1
	for i := range r.from {
		g := &r.gathered[i]
		switch r.from[i].kind {
		case number:
			for _, s := range r.statistics {
				v := &r.out.columns[k]
				v.number = append(v.number, g.value(s))
				k++
			}
			*g = gathered{}
			continue
		case text:
			v := &r.out.columns[k]
			v.text = append(v.text, g.text)
		case flag:
			v := &r.out.columns[k]
			v.flag = append(v.flag, g.flag)
		case whole:
		}
		*g = gathered{}
		k++
	}
	r.rows = 0
	if len(r.out.t) < resampled {
		return nil
	}
	return r.flushOut(put)
}

func (g *gathered) value(s Statistic) float64 {
	if g.n == 0 {
		return math.NaN()
	}
	switch s {
	case Mean:
		return g.sum / float64(g.n)
	case Min:
		return g.min
	case Max:
		return g.max
	case Last, numStatistics:
	}
	return g.last
}

// flush gives what is left.
func (r *resampler) flush(put func(*batch) error) error {
	if r.rows > 0 {
		if err := r.end(put); err != nil {
			return err
		}
	}
	return r.flushOut(put)
}

func (r *resampler) flushOut(put func(*batch) error) error {
	err := put(r.out)
	r.out.reset()
	return err
}

// floorMod gives t mod every, never negative.
func floorMod(t, every int64) int64 {
	m := t % every
	if m < 0 {
		m += every
	}
	return m
}
