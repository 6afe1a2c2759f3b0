// Package compare tells stored runs apart: the same records stepped twice, scan by scan,
// with the alarms that appear, vanish or move; different runs by time from a common
// moment, or by an operating parameter against a baseline with its scatter.
package compare

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/dashboard/points"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/rules/pipeline"
)

const second = int64(1e9)

// ErrOption is returned for a comparison that cannot be made of these runs.
var ErrOption = errors.New("compare")

// Run is a stored run that is compared.
type Run struct {
	File   *runfile.File
	Header runfile.Header
}

// By says what the runs are laid over each other by.
type By string

// The ways.
const (
	Auto          By = ""               // Records where both were stepped from the same, else Time
	Records       By = "records"        // scan time: the same records
	Time          By = "time"           // time from light-off, or from the start where one has none
	Mark          By = "mark"           // time from a mark
	NPR           By = "npr"            // operating parameter
	ReferredSpeed By = "referred_speed" // operating parameter
)

// ParseBy reads the name of a way; "" is Auto. The error is ErrOption.
func ParseBy(s string) (By, error) {
	switch b := By(s); b {
	case Auto, Records, Time, Mark, NPR, ReferredSpeed:
		return b, nil
	}
	return Auto, fmt.Errorf("%w: by %q: give time, mark, npr or referred_speed", ErrOption, s)
}

// Options say how runs are compared.
type Options struct {
	By     By
	Mark   string // text in the mark that is meant; "" = the first mark
	Within int64  // ns by which an alarm may move and is still taken for the same; 0 = 30 s
	All    bool   // by a parameter: all lit scans, not the steady ones only
}

// Difference says how a quantity of B differs from that of A, B − A over the scans that
// have both.
type Difference struct {
	Name    string        `json:"name"`
	Unit    string        `json:"unit"`
	Scans   int           `json:"scans"`
	Mean    points.Number `json:"mean"`
	RMS     points.Number `json:"rms"`
	Largest points.Number `json:"largest"` // by magnitude, with its sign
	AtS     points.Number `json:"at_s"`    // where that is, s of A
	A       points.Number `json:"a"`       // the values there
	B       points.Number `json:"b"`
	OnlyA   int           `json:"only_a"` // scans in which only A has a value
	OnlyB   int           `json:"only_b"`
}

// Alarm says how the raising of an alarm differs.
type Alarm struct {
	Change string         `json:"change"` // appears, vanishes, moves
	Rule   string         `json:"rule"`
	Title  string         `json:"title"`
	AtA    *points.Number `json:"a_s"` // when it was raised, s of its run; null where it was not
	AtB    *points.Number `json:"b_s"`
	Moved  *points.Number `json:"moved_s"`
}

// Scans is a comparison scan by scan.
type Scans struct {
	A           string       `json:"a"`
	B           string       `json:"b"`
	By          By           `json:"by"`
	Zero        string       `json:"zero"`     // what time counts from, in words
	ZeroA       float64      `json:"zero_a_s"` // where that is, s of A
	ZeroB       float64      `json:"zero_b_s"` // s of B
	Paired      int          `json:"paired"`
	OnlyA       int          `json:"only_a"` // scans without a counterpart
	OnlyB       int          `json:"only_b"`
	Same        bool         `json:"same"`        // the digests are equal
	Differences []Difference `json:"differences"` // of what differs, the largest relative to its size first
	Equal       []string     `json:"equal"`       // quantities that are the same to the bit in all scans
	Alarms      []Alarm      `json:"alarms"`
	AlarmsSame  int          `json:"alarms_same"` // raised at the same instant in both
	Traces      []Trace      `json:"-"`           // for plots
}

// Trace is a quantity of both runs over time, s from the zero.
type Trace struct {
	Name, Unit, Title string
	A, B              archive.Series
}

// SameRecords tells whether two runs were stepped from the same records.
func SameRecords(a, b *runfile.Header) bool {
	return a.Rig == b.Rig && a.Number == b.Number && (a.Reduction() != nil || b.Reduction() != nil || a.ID == b.ID) && kin(a, b)
}

// kin tells whether one of two runs comes of the other, or both of one: the id of a
// reduction is that of its parent and -r with a number.
func kin(a, b *runfile.Header) bool { return root(a) == root(b) }

func root(h *runfile.Header) string {
	id := h.ID
	if h.Reduction() == nil {
		return id
	}
	for {
		i := strings.LastIndex(id, "-r")
		if i < 0 || strings.Trim(id[i+2:], "0123456789") != "" {
			return id
		}
		id = id[:i]
	}
}

// table is some columns of a run.
type table struct {
	times []int64
	cols  map[string][]float64
	flags []byte
}

// read gives columns of the scans of a run.
func read(ctx context.Context, r *Run, codec *archive.Codec, names []string) (table, error) {
	t := table{cols: map[string][]float64{}}
	to := int64(math.MaxInt64)
	if r.Header.Ended != 0 {
		to = r.Header.Ended + 1
	}
	err := pipeline.Rows(ctx, r.File, codec, pipeline.ChunkPoints, append([]string{"flags"}, names...), r.Header.Started, to,
		func(c *archive.Chunk, first, last int) {
			before := len(t.times)
			t.times = append(t.times, c.Times[first:last]...)
			for i := range c.Columns {
				col := &c.Columns[i]
				switch {
				case col.Kind == archive.KindFloat:
					v := t.cols[col.Name]
					for len(v) < before {
						v = append(v, math.NaN())
					}
					t.cols[col.Name] = append(v, col.Float[first:last]...)
				case col.Name == "flags":
					t.flags = append(t.flags, col.Byte[first:last]...)
				}
			}
			for name, v := range t.cols {
				for len(v) < len(t.times) {
					v = append(v, math.NaN())
				}
				t.cols[name] = v
			}
		})
	if err != nil {
		return t, fmt.Errorf("compare %s: %w", r.Header.ID, err)
	}
	return t, nil
}

// pairs calls fn for the rows of two runs that belong together, tA = tB + shift to within
// half the shorter scan period of A, and gives how many have no counterpart.
func pairs(a, b []int64, shift int64, fn func(i, k int)) (paired, onlyA, onlyB int) {
	half := int64(math.MaxInt64)
	for i := 1; i < len(a); i++ {
		if d := a[i] - a[i-1]; d > 0 {
			half = min(half, d/2)
		}
	}
	k := 0
	for i, t := range a {
		for k < len(b) && b[k]+shift < t-half {
			k++
			onlyB++
		}
		if k < len(b) && b[k]+shift <= t+half {
			fn(i, k)
			k++
			paired++
		} else {
			onlyA++
		}
	}
	return paired, onlyA, onlyB + len(b) - k
}

// group is how many columns are read at a time, so that memory stays small.
const group = 8

// ByTime compares two runs scan by scan. The error is ErrOption, or that of a run file.
func ByTime(ctx context.Context, a, b *Run, o Options) (Scans, error) {
	s := Scans{
		A: a.Header.ID, B: b.Header.ID, By: o.By, Same: a.Header.Digest != "" && a.Header.Digest == b.Header.Digest,
		Differences: []Difference{}, Equal: []string{},
	}
	if s.By == Auto {
		s.By = Time
		if SameRecords(&a.Header, &b.Header) {
			s.By = Records
		}
	}
	codec := archive.NewCodec()
	zeroA, zeroB, err := s.zeros(ctx, a, b, codec, o)
	if err != nil {
		return s, err
	}
	s.ZeroA, s.ZeroB = float64(zeroA-a.Header.Started)/1e9, float64(zeroB-b.Header.Started)/1e9
	for from := monitor.Quantity(0); from < monitor.NumQuantities; from += group {
		if err := s.group(ctx, a, b, codec, from, min(from+group, monitor.NumQuantities), zeroA, zeroB); err != nil {
			return s, err
		}
	}
	slices.SortStableFunc(s.Differences, func(x, y Difference) int { return cmp.Compare(y.weight(), x.weight()) })
	return s, s.alarms(ctx, a, b, zeroA, zeroB, o)
}

// weight is the RMS relative to the values.
func (d *Difference) weight() float64 {
	size := math.Max(math.Abs(float64(d.A)), math.Abs(float64(d.B)))
	if d.Scans == 0 {
		return 0
	}
	return float64(d.RMS) / math.Max(size, 1e-300)
}

// zeros gives the times that the runs are laid over each other by.
func (s *Scans) zeros(ctx context.Context, a, b *Run, codec *archive.Codec, o Options) (zeroA, zeroB int64, err error) {
	switch s.By {
	case Records:
		s.Zero = "the same records: by the time of the scan"
		return a.Header.Started, a.Header.Started, nil
	case Mark:
		var found [2]int64
		for i, r := range []*Run{a, b} {
			if found[i], err = markOf(ctx, r, o.Mark); err != nil {
				return 0, 0, err
			}
		}
		s.Zero = "the mark"
		if o.Mark != "" {
			s.Zero = fmt.Sprintf("the mark %q", o.Mark)
		}
		return found[0], found[1], nil
	case Auto, Time, NPR, ReferredSpeed:
	}
	litA, okA, errA := lightOff(ctx, a, codec)
	litB, okB, errB := lightOff(ctx, b, codec)
	if err := errors.Join(errA, errB); err != nil {
		return 0, 0, err
	}
	if okA && okB {
		s.Zero = "light-off"
		return litA, litB, nil
	}
	s.Zero = "the start of the run"
	return a.Header.Started, b.Header.Started, nil
}

func markOf(ctx context.Context, r *Run, text string) (t int64, err error) {
	found := false
	err = r.File.Events(ctx, r.Header.Started, math.MaxInt64, func(e *runfile.Event) error {
		var m monitor.Mark
		if e.Kind != "mark" || found {
			return nil
		}
		if err := json.Unmarshal(e.JSON, &m); err != nil {
			return fmt.Errorf("mark %d.%d: %w", e.Epoch, e.N, err)
		}
		if strings.Contains(m.Text, text) {
			t, found = e.T, true
		}
		return nil
	})
	if err == nil && !found {
		err = fmt.Errorf("%w: run %s has no mark with %q in it", ErrOption, r.Header.ID, text)
	}
	return t, err
}

// lightOff gives the first scan with a flame.
func lightOff(ctx context.Context, r *Run, codec *archive.Codec) (t int64, ok bool, err error) {
	rows, err := read(ctx, r, codec, nil)
	for i, f := range rows.flags {
		if f&pipeline.FlagLit != 0 {
			return rows.times[i], true, err
		}
	}
	return 0, false, err
}

// traced are the quantities that are drawn.
var traced = []monitor.Quantity{monitor.ChokeMarginPercent, monitor.MassFlow, monitor.EGTIndicated, monitor.Speed}

func (s *Scans) group(ctx context.Context, a, b *Run, codec *archive.Codec, from, to monitor.Quantity, zeroA, zeroB int64) error {
	var names []string
	for q := from; q < to; q++ {
		names = append(names, q.Info().Name)
	}
	ta, err := read(ctx, a, codec, names)
	if err != nil {
		return err
	}
	tb, err := read(ctx, b, codec, names)
	if err != nil {
		return err
	}
	for q := from; q < to; q++ {
		info := q.Info()
		va, vb := ta.cols[info.Name], tb.cols[info.Name]
		if va == nil || vb == nil {
			continue
		}
		d := sums{at: -1}
		s.Paired, s.OnlyA, s.OnlyB = pairs(ta.times, tb.times, zeroA-zeroB, func(i, k int) { d.add(i, va[i], vb[k]) })
		if x, differs := d.result(info, &ta, a.Header.Started); differs {
			s.Differences = append(s.Differences, x)
		} else if d.n > 0 {
			s.Equal = append(s.Equal, info.Name)
		}
		if slices.Contains(traced, q) {
			s.Traces = append(s.Traces, Trace{info.Name, info.Unit, info.Title, thin(&ta, va, zeroA), thin(&tb, vb, zeroB)})
		}
	}
	return nil
}

// thin gives at most a thousand buckets of a column, times from zero on, without losing a
// spike.
func thin(t *table, v []float64, zero int64) archive.Series {
	if len(t.times) == 0 {
		return archive.Series{}
	}
	d := archive.NewDecimator(t.times[0], t.times[len(t.times)-1]+1, 1000)
	d.Add(t.times, v)
	s := d.Series()
	for i := range s.T {
		s.T[i] -= zero
	}
	return s
}

// sums gathers the differences of a quantity.
type sums struct {
	n, onlyA, onlyB int
	sum, square     float64
	largest, a, b   float64
	at              int // row of A of the largest, −1 = none
	moved           bool
}

func (d *sums) add(row int, a, b float64) {
	switch hasA, hasB := a == a, b == b; {
	case hasA && hasB:
		d.n++
		x := b - a
		d.sum += x
		d.square += x * x
		if d.at < 0 || math.Abs(x) > math.Abs(d.largest) {
			d.largest, d.a, d.b, d.at = x, a, b, row
		}
		d.moved = d.moved || x != 0
	case hasA:
		d.onlyA++
	case hasB:
		d.onlyB++
	}
}

func (d *sums) result(info monitor.Info, t *table, started int64) (Difference, bool) {
	x := Difference{Name: info.Name, Unit: info.Unit, Scans: d.n, OnlyA: d.onlyA, OnlyB: d.onlyB}
	n := float64(d.n) // 0 gives NaN below
	nan := points.Number(math.NaN())
	x.Mean, x.RMS = points.Number(d.sum/n), points.Number(math.Sqrt(d.square/n))
	x.Largest, x.AtS, x.A, x.B = nan, nan, nan, nan
	if d.at >= 0 {
		x.Largest, x.A, x.B = points.Number(d.largest), points.Number(d.a), points.Number(d.b)
		x.AtS = points.Number(float64(t.times[d.at]-started) / 1e9)
	}
	return x, d.moved || d.onlyA+d.onlyB > 0
}
