// Package points gives the test points of a stored run: stretches of it reduced to one
// value per quantity with Type A, Type B and combined uncertainty, and what is doubtful
// about each.
//
// Stretches are found where the engine was steady, lie beside marks, or are given. What a
// stretch is reduced to is said at pipeline.ReduceStretch.
package points

import (
	"bytes"
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/steady"
	"throatwatch/rules/pipeline"
)

const (
	second = int64(1e9)
	// bridged is the length of an interruption of the steady state that does not end a
	// stretch, ns.
	bridged = second
	// fewEffective is the effective sample size below which a mean is called doubtful:
	// with fewer, its Type A uncertainty is itself known to worse than a quarter
	// [JCGM 100 table E.1].
	fewEffective = 10
	// most bounds the points of a run.
	most = 500
)

// ErrOption is returned for options that ask for nothing that there is.
var ErrOption = errors.New("stretches")

// Stretch is a part of a run.
type Stretch struct {
	From, To int64  // event time, ns UTC: from inclusive, to exclusive
	Name     string // text of the mark, name of the point of a test card; "" for none
	Number   int    // of the point of a test card; 0 = it is counted in the run
	Status   string // of the point of a test card, in words; "" for none
	doubts   []string
}

// Options say which stretches become points. The zero value finds steady stretches of 10 s
// or more in the whole run.
type Options struct {
	From, To      int64     // event time, ns UTC, in which steady stretches and marks are looked for; 0 = no end
	Least         int64     // ns, the shortest steady stretch; 0 = 10 s
	Marks         bool      // a point per mark instead
	Before, After int64     // ns of the run that belong to a mark; both 0 = the 30 s after it
	Card          bool      // a point per one that was taken by a test card
	Given         []Stretch // these instead of all others
}

// Value is one quantity of a point. Numbers are null in JSON where there are none.
type Value struct {
	Quantity monitor.Quantity `json:"-"`
	Name     string           `json:"name"`
	Unit     string           `json:"unit"`
	Value    Number           `json:"value"`
	TypeA    Number           `json:"type_a"` // standard uncertainty of the mean by its scatter
	TypeB    Number           `json:"type_b"` // standard uncertainty by the systematic errors of the channels
	U95      Number           `json:"u95"`    // both combined, 95 %
	K        Number           `json:"coverage_factor"`
	NEff     Number           `json:"effective_samples"`
	SD       Number           `json:"standard_deviation"` // of the scans
}

// Number is a float that JSON has as null when it is not available.
type Number float64

// MarshalJSON writes null for NaN and infinity.
func (n Number) MarshalJSON() ([]byte, error) {
	if v := float64(n); math.IsNaN(v) || math.IsInf(v, 0) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(n))
}

// UnmarshalJSON takes null for NaN.
func (n *Number) UnmarshalJSON(b []byte) error {
	if bytes.Equal(b, []byte("null")) {
		*n = Number(math.NaN())
		return nil
	}
	return json.Unmarshal(b, (*float64)(n))
}

// Point is a test point.
type Point struct {
	Number int // of a test card, or counted in the run
	Stretch
	Scans  int
	Steady float64 // part of the scans that were steady
	Values []Value // of those quantities that there are, in the order of Quantities
	Doubts []string
}

// Get gives the value of a quantity, and whether the point has it.
func (p *Point) Get(q monitor.Quantity) (Value, bool) {
	for i := range p.Values {
		if p.Values[i].Quantity == q {
			return p.Values[i], true
		}
	}
	return Value{}, false
}

// Table holds the points of a run.
type Table struct {
	Run     string
	Started int64          // ns UTC
	Zone    *time.Location // of the facility
	How     string         // how the stretches were chosen, a sentence
	Points  []Point
	Left    []string // stretches that could not be reduced, and why
}

// Quantities are those of a point, in the order of the tables.
func Quantities() []monitor.Quantity { return pipeline.PointQuantities() }

// Read gives the test points of a run. Parse gives the configuration of a stored bundle.
// The error is ErrOption, or that of the run file.
func Read(ctx context.Context, f *runfile.File, h *runfile.Header, parse func([]byte) (pipeline.Config, error), o Options) (Table, error) {
	r := reader{f: f, h: h, parse: parse, codec: archive.NewCodec()}
	t := Table{Run: h.ID, Started: h.Started, Points: []Point{}}
	if o.To == 0 {
		o.To = math.MaxInt64
	}
	o.From = max(o.From, h.Started)
	if h.Ended != 0 {
		o.To = min(o.To, h.Ended+1)
	}
	stretches, how, err := r.stretches(ctx, o)
	if err != nil {
		return t, fmt.Errorf("test points of %s: %w", h.ID, err)
	}
	t.How, t.Zone = how, time.UTC
	if cfg, err := r.config(ctx, math.MaxInt64); err == nil {
		t.Zone = cfg.Rig.Zone()
	}
	for _, s := range stretches {
		p, err := r.point(ctx, s)
		switch {
		case errors.Is(err, pipeline.ErrTooFew):
			t.Left = append(t.Left, fmt.Sprintf("%s to %s of the run: too few scans to reduce", t.clock(s.From), t.clock(s.To)))
		case err != nil:
			return t, fmt.Errorf("test points of %s: %w", h.ID, err)
		default:
			p.Number = cmp.Or(s.Number, len(t.Points)+1)
			t.Points = append(t.Points, p)
		}
	}
	return t, nil
}

// clock gives a time as seconds of the run.
func (t *Table) clock(at int64) string { return fmt.Sprintf("%.1f s", float64(at-t.Started)/1e9) }

// reader reads one run.
type reader struct {
	f     *runfile.File
	h     *runfile.Header
	parse func([]byte) (pipeline.Config, error)
	codec *archive.Codec

	bundle []byte // that cfg was made of
	cfg    pipeline.Config
}

func (r *reader) stretches(ctx context.Context, o Options) ([]Stretch, string, error) {
	switch {
	case len(o.Given) > 0:
		if len(o.Given) > most {
			return nil, "", fmt.Errorf("%d of them, %d at most: %w", len(o.Given), most, ErrOption)
		}
		return o.Given, "The stretches were given.", nil
	case o.Card:
		list, err := r.card(ctx, o)
		return list, "The points that were taken by the test card, rejected ones too, under their numbers.", err
	case o.Marks:
		if o.Before == 0 && o.After == 0 {
			o.After = 30 * second
		}
		if o.Before < 0 || o.After < 0 {
			return nil, "", fmt.Errorf("before and after a mark are not negative: %w", ErrOption)
		}
		list, err := r.marks(ctx, o)
		how := fmt.Sprintf("A stretch per mark: from %g s before to %g s after it.", float64(o.Before)/1e9, float64(o.After)/1e9)
		return list, how, err
	}
	if o.Least == 0 {
		o.Least = 10 * second
	}
	list, err := r.steady(ctx, o)
	how := fmt.Sprintf("Stretches of %g s or more in which every scan was steady, as the rig file asks for it; "+
		"what interrupts it for up to %g s does not end one.", float64(o.Least)/1e9, float64(bridged)/1e9)
	return list, how, err
}

func (r *reader) marks(ctx context.Context, o Options) (list []Stretch, err error) {
	err = r.f.Events(ctx, o.From, o.To, func(e *runfile.Event) error {
		if e.Kind != "mark" || len(list) >= most {
			return nil
		}
		var m monitor.Mark
		if err := json.Unmarshal(e.JSON, &m); err != nil {
			return fmt.Errorf("mark %d.%d: %w", e.Epoch, e.N, err)
		}
		list = append(list, Stretch{From: e.T - o.Before, To: e.T + o.After, Name: m.Text})
		return nil
	})
	return list, err
}

// steady finds the stretches in which the detector of the step was content.
func (r *reader) steady(ctx context.Context, o Options) (list []Stretch, err error) {
	var open Stretch
	last := int64(math.MinInt64 / 2)
	end := func() {
		if open.To-open.From >= o.Least && len(list) < most {
			list = append(list, open)
		}
		open = Stretch{}
	}
	err = pipeline.Rows(ctx, r.f, r.codec, pipeline.ChunkPoints, []string{"flags"}, o.From, o.To, func(c *archive.Chunk, first, after int) {
		i := slices.IndexFunc(c.Columns, func(c archive.Column) bool { return c.Name == "flags" })
		if i < 0 {
			return
		}
		for k := first; k < after; k++ {
			if c.Columns[i].Byte[k]&pipeline.FlagSteady == 0 {
				continue
			}
			t := c.Times[k]
			if t-last > bridged {
				end()
				open.From = t
			}
			last, open.To = t, t+1
		}
	})
	end()
	return list, err
}

// config gives the configuration that was in force at t.
func (r *reader) config(ctx context.Context, t int64) (*pipeline.Config, error) {
	c, err := r.f.CheckpointAtHost(ctx, t, false)
	if errors.Is(err, runfile.ErrNoCheckpoint) {
		c, err = r.f.FirstCheckpoint(ctx)
	}
	if err != nil {
		return nil, err
	}
	state, err := pipeline.Decode(c.State)
	if err != nil {
		return nil, err
	}
	if len(state.Bundle) == 0 { // it began with this run
		if c, err = r.f.LastCheckpoint(ctx, math.MaxInt64); err != nil {
			return nil, err
		}
		if state, err = pipeline.Decode(c.State); err != nil {
			return nil, err
		}
	}
	if !bytes.Equal(r.bundle, state.Bundle) {
		if r.cfg, err = r.parse(state.Bundle); err != nil {
			return nil, err
		}
		r.bundle = state.Bundle
	}
	return &r.cfg, nil
}

func (r *reader) point(ctx context.Context, s Stretch) (Point, error) {
	p := Point{Stretch: s}
	cfg, err := r.config(ctx, s.To)
	if err != nil {
		return p, err
	}
	tp, err := pipeline.ReduceStretch(ctx, r.f, r.codec, cfg, s.From, s.To)
	if err != nil {
		return p, err
	}
	p.Scans, p.Steady = tp.Scans, tp.Steady
	for _, q := range Quantities() {
		if v := &tp.Values[q]; v.N > 0 {
			p.Values = append(p.Values, view(q, v))
		}
	}
	p.Doubts = append(slices.Clone(s.doubts), doubts(&p, &tp, cfg)...)
	more, err := r.channels(ctx, s, cfg)
	if err != nil {
		return p, err
	}
	p.Doubts = append(p.Doubts, more...)
	more, err = r.swaps(ctx, s, cfg)
	p.Doubts = append(p.Doubts, more...)
	return p, err
}

func view(q monitor.Quantity, v *steady.Value) Value {
	info := q.Info()
	return Value{
		Quantity: q, Name: info.Name, Unit: info.Unit, Value: Number(v.Mean), TypeA: Number(v.TypeA.U), TypeB: Number(v.TypeB.U),
		U95: Number(v.U95), K: Number(v.K), NEff: Number(v.NEff), SD: Number(v.SD),
	}
}

// doubts says what is doubtful by the values.
func doubts(p *Point, tp *pipeline.TestPoint, cfg *pipeline.Config) []string {
	list := []string{}
	add := func(format string, args ...any) { list = append(list, fmt.Sprintf(format, args...)) }
	if p.Steady < 1 {
		add("steady in %s of the scans", percent(p.Steady))
	}
	if whole := (p.To - p.From) / cfg.Align.Period; int64(p.Scans) < whole*99/100 {
		add("%s of the scans are missing", percent(1-float64(p.Scans)/float64(whole)))
	}
	var few []string
	for _, v := range p.Values {
		if v.SD > 0 && float64(v.NEff) < fewEffective {
			few = append(few, fmt.Sprintf("%s %.1f", v.Name, float64(v.NEff)))
		}
	}
	if n := len(few); n > 3 {
		few = append(few[:3], fmt.Sprintf("%d more", n-3))
	}
	if len(few) > 0 {
		add("fewer than %d effective samples: %s", fewEffective, strings.Join(few, ", "))
	}
	for _, q := range []monitor.Quantity{monitor.NPR, monitor.MassFlow} {
		if v, ok := p.Get(q); ok && math.IsNaN(float64(v.U95)) {
			add("no uncertainty of %s: that of a channel or of the nozzle is not stated", v.Name)
		}
	}
	var expired []string
	for _, i := range cfg.OnFile() {
		if ch := &cfg.Compute.Channels[i]; cfg.Compute.InUse(i) && ch.RecordAt(p.From).State(p.From) == calib.Expired {
			expired = append(expired, fmt.Sprintf("%s on %s", ch.ID, ch.RecordAt(p.From).Due))
		}
	}
	if len(expired) > 0 {
		add("calibration expired without a waiver: %s", strings.Join(expired, ", "))
	}
	if v, ok := p.Get(monitor.ChokeMarginPercent); ok && math.Abs(float64(v.Value)) < float64(v.U95) {
		add("choked or not is within the uncertainty of the margin")
	}
	tp.Mean.Warnings.Each(func(text string) bool {
		add("%s", text)
		return true
	})
	return list
}

// percent writes a part so that what is not all or nothing never looks so.
func percent(part float64) string {
	switch {
	case part < 1 && part > 0.99:
		return fmt.Sprintf("%.1f %%", math.Min(100*part, 99.9))
	case part < 0.01:
		return fmt.Sprintf("%.2g %%", 100*part)
	}
	return fmt.Sprintf("%.0f %%", 100*part)
}

// channels says which channels could not be used, in which part of the scans and mostly
// why.
func (r *reader) channels(ctx context.Context, s Stretch, cfg *pipeline.Config) ([]string, error) {
	counts := make([][monitor.NumQualities]int, len(cfg.Compute.Channels))
	all := 0
	err := pipeline.Rows(ctx, r.f, r.codec, pipeline.ChunkChannels, nil, s.From, s.To, func(c *archive.Chunk, first, last int) {
		all += last - first
		for i := range cfg.Compute.Channels {
			k := slices.IndexFunc(c.Columns, func(col archive.Column) bool { return col.Name == "quality."+cfg.Compute.Channels[i].ID })
			if k < 0 {
				continue
			}
			for _, q := range c.Columns[k].Byte[first:last] {
				if int(q) < len(counts[i]) {
					counts[i][q]++
				}
			}
		}
	})
	var list []string
	for i := range counts {
		lost, why := 0, monitor.QualityMissing
		for q, n := range counts[i] {
			if q := monitor.Quality(q); !q.Usable() {
				lost += n
				if n > counts[i][why] {
					why = q
				}
			}
		}
		if lost > 0 {
			list = append(list, fmt.Sprintf("%s not used in %s of the scans: %s",
				cfg.Compute.Channels[i].ID, percent(float64(lost)/float64(all)), strings.ReplaceAll(why.String(), "_", " ")))
		}
	}
	return list, err
}

// swaps says which sensors are others than those that the run began with: the
// calibration is that of the configuration, until the run is reduced by another.
func (r *reader) swaps(ctx context.Context, s Stretch, cfg *pipeline.Config) (list []string, err error) {
	err = r.f.Events(ctx, r.h.Started, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "log" {
			return nil
		}
		var entry pipeline.Entry
		if err := json.Unmarshal(e.JSON, &entry); err != nil {
			return fmt.Errorf("entry %d.%d: %w", e.Epoch, e.N, err)
		}
		if entry.What == pipeline.DoSwap && int64(entry.ValidFrom) < s.To {
			which := "that of the rig file"
			if i := slices.IndexFunc(cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == entry.Channel }); i >= 0 &&
				cfg.Compute.Channels[i].RecordAt(s.From).Serial == entry.Serial {
				which = "its own"
			}
			list = append(list, fmt.Sprintf("%s has the sensor %s since %.1f s of the run: the calibration is %s",
				entry.Channel, entry.Serial, float64(int64(entry.ValidFrom)-r.h.Started)/1e9, which))
		}
		return nil
	})
	return list, err
}
