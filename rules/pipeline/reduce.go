package pipeline

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/steady"
)

// ErrTooFew is that of a stretch that has too few scans to reduce.
var ErrTooFew = errors.New("too few scans to reduce")

// TestPoint is a stretch of a run reduced to one value per quantity.
type TestPoint struct {
	From, To int64 // event time, ns UTC: from inclusive, to exclusive
	Scans    int
	Steady   float64 // part of the scans that were steady, 0 to 1
	// Values is by monitor.Quantity: means with Type A uncertainty by the effective sample
	// size, Type B by the channels' systematic uncertainties at their means, and both
	// combined [JCGM 100 4.2, 4.3, 5.1.2]. NaN where there is none.
	Values []steady.Value
	// Mean is computed from the means of the channels. It differs from Values by what is
	// not linear in the scatter.
	Mean monitor.OperatingPoint
}

const (
	// reduceBins is the number of bins that a stretch is cut into at most.
	reduceBins = 120
	// leastBins is the number of scans, and of bins, below which nothing is said.
	leastBins = 8
	// heldShare is the part of the scans in which a channel has to be usable for its
	// mean to count.
	heldShare = 0.5
)

// ReduceStretch reduces the scans of a stored run from (inclusive) to to (exclusive), ns
// UTC, by the configuration that they were computed with. The error is ErrTooFew or that
// of the run file.
func ReduceStretch(ctx context.Context, f *runfile.File, codec *archive.Codec, cfg *Config, from, to int64) (TestPoint, error) {
	span := to - from
	if span <= 0 || span/max(windowOf(span, cfg.Align.Period).Width, 1) < leastBins {
		return TestPoint{}, fmt.Errorf("reduce %d ns: %w", span, ErrTooFew)
	}
	g := newGathering(cfg, from, to)
	tp := TestPoint{From: from, To: to}
	err := Rows(ctx, f, codec, ChunkPoints, nil, from, to, func(c *archive.Chunk, first, last int) {
		g.Scans += last - first
		for i := range c.Columns {
			col := &c.Columns[i]
			if q, ok := monitor.ParseQuantity(col.Name); ok && col.Kind == archive.KindFloat {
				for k := first; k < last; k++ {
					g.value(q, c.Times[k], col.Float[k])
				}
			} else if col.Name == "flags" {
				for k := first; k < last; k++ {
					g.Steady += int(col.Byte[k] & FlagSteady / FlagSteady)
				}
			}
		}
	})
	if err != nil {
		return tp, fmt.Errorf("reduce: %w", err)
	}
	err = Rows(ctx, f, codec, ChunkChannels, nil, from, to, func(c *archive.Chunk, first, last int) {
		g.Rows += last - first
		for i := range c.Columns {
			id, ok := strings.CutPrefix(c.Columns[i].Name, "channel.")
			ch := slices.IndexFunc(cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == id })
			if !ok || ch < 0 || c.Columns[i].Kind != archive.KindFloat {
				continue
			}
			for _, v := range c.Columns[i].Float[first:last] {
				g.channel(ch, v)
			}
		}
	})
	if err != nil {
		return tp, fmt.Errorf("reduce: %w", err)
	}
	return g.reduce(cfg)
}

// gathering is a stretch of scans on its way to a test point. It is plain data of a size
// that does not depend on the number of scans.
type gathering struct {
	From, To int64
	Window   steady.Window
	Pasts    []steady.Past // by quantity
	Mean     []float64     // by channel …
	Used     []int         // … of so many scans
	Scans    int
	Steady   int // scans that were steady
	Rows     int // scans of the channels
}

// windowOf gives bins for a stretch of a length, ns.
func windowOf(span, period int64) steady.Window {
	w := steady.Window{Width: max(span/reduceBins, period)}
	w.Bins = int((span + w.Width - 1) / w.Width)
	return w
}

// newGathering begins a stretch.
func newGathering(cfg *Config, from, to int64) gathering {
	n := len(cfg.Compute.Channels)
	return gathering{
		From: from, To: to, Window: windowOf(to-from, cfg.Align.Period),
		Pasts: make([]steady.Past, monitor.NumQuantities), Mean: make([]float64, n), Used: make([]int, n),
	}
}

// add enters a scan with its operating point.
func (g *gathering) add(scan *monitor.Scan, p *monitor.OperatingPoint) {
	for q := range p.V {
		g.value(monitor.Quantity(q), scan.T, p.V[q])
	}
	for i := range min(len(g.Mean), len(scan.Value)) {
		g.channel(i, scan.Value[i])
	}
	g.Scans++
	g.Rows++
	if p.Steady {
		g.Steady++
	}
}

func (g *gathering) value(q monitor.Quantity, t int64, v float64) {
	g.Window.Add(&g.Pasts[q], t+g.Window.Width-g.From, v) // the stretch begins with the second bin
}

func (g *gathering) channel(i int, v float64) {
	if !math.IsNaN(v) {
		g.Used[i]++
		g.Mean[i] += (v - g.Mean[i]) / float64(g.Used[i])
	}
}

// reduce gives the test point. The error is ErrTooFew, or that of a configuration that
// cannot be computed by.
func (g *gathering) reduce(cfg *Config) (TestPoint, error) {
	tp := TestPoint{From: g.From, To: g.To, Scans: g.Scans, Values: make([]steady.Value, monitor.NumQuantities)}
	if g.Scans < leastBins {
		return tp, fmt.Errorf("reduce: %d scans: %w", g.Scans, ErrTooFew)
	}
	tp.Steady = float64(g.Steady) / float64(g.Scans)
	comp, err := compute.New(cfg.Compute)
	if err != nil {
		return tp, fmt.Errorf("reduce: %w", err)
	}
	var systematic compute.Systematic
	tp.Mean, systematic = comp.OfMean(g.meanScan(cfg))
	for q := range tp.Values {
		g.Window.Add(&g.Pasts[q], int64(g.Window.Bins+1)*g.Window.Width, 0) // closes the last bin
		stats := g.Window.Stats(&g.Pasts[q])
		tp.Values[q] = steady.Reduce(&stats, steady.Part{U: systematic[q]})
	}
	return tp, nil
}

// Rows calls fn for the chunks of a kind that have rows of a stretch, from (inclusive)
// to to (exclusive), ns UTC, and tells which; c is valid until fn returns. Columns names
// those that are read, nil for all. Errors are those of the run file and of the codec.
func Rows(
	ctx context.Context, f *runfile.File, codec *archive.Codec, kind string, columns []string, from, to int64,
	fn func(c *archive.Chunk, first, last int),
) error {
	var c archive.Chunk
	return f.Chunks(ctx, kind, from, to, func(stored *runfile.Chunk) error {
		if err := codec.Decode(&c, stored.Bytes, columns); err != nil {
			return err
		}
		first, _ := slices.BinarySearch(c.Times, from)
		last, _ := slices.BinarySearch(c.Times, to)
		fn(&c, first, last)
		return nil
	})
}

// meanScan gives the means of the channels over the stretch.
func (g *gathering) meanScan(cfg *Config) *monitor.Scan {
	scan := monitor.NewScan(len(g.Mean))
	scan.T, scan.N = g.To-cfg.Align.Period, 1
	copy(scan.Value, g.Mean)
	for i := range g.Mean {
		scan.Quality[i] = monitor.QualityGood
		if float64(g.Used[i]) < heldShare*float64(g.Rows) || g.Rows == 0 {
			scan.Value[i], scan.Quality[i] = math.NaN(), monitor.QualityMissing
		}
	}
	return scan
}
