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
	w := steady.Window{Width: max(span/reduceBins, cfg.Align.Period)}
	if span <= 0 || span/max(w.Width, 1) < leastBins {
		return TestPoint{}, fmt.Errorf("reduce %d ns: %w", span, ErrTooFew)
	}
	w.Bins = int((span + w.Width - 1) / w.Width)
	tp := TestPoint{From: from, To: to, Values: make([]steady.Value, monitor.NumQuantities)}
	pasts := make([]steady.Past, monitor.NumQuantities)
	shift := w.Width - from // the stretch begins with the second bin
	err := Rows(ctx, f, codec, ChunkPoints, nil, from, to, func(c *archive.Chunk, first, last int) {
		tp.Scans += last - first
		for i := range c.Columns {
			col := &c.Columns[i]
			if q, ok := monitor.ParseQuantity(col.Name); ok && col.Kind == archive.KindFloat {
				for k := first; k < last; k++ {
					w.Add(&pasts[q], c.Times[k]+shift, col.Float[k])
				}
			} else if col.Name == "flags" {
				for k := first; k < last; k++ {
					tp.Steady += float64(col.Byte[k] & FlagSteady / FlagSteady)
				}
			}
		}
	})
	if err != nil {
		return tp, fmt.Errorf("reduce: %w", err)
	}
	if tp.Scans < leastBins {
		return tp, fmt.Errorf("reduce: %d scans: %w", tp.Scans, ErrTooFew)
	}
	tp.Steady /= float64(tp.Scans)
	comp, err := compute.New(cfg.Compute)
	if err != nil {
		return tp, fmt.Errorf("reduce: %w", err)
	}
	scan, err := meanScan(ctx, f, codec, cfg, from, to)
	if err != nil {
		return tp, fmt.Errorf("reduce: %w", err)
	}
	var systematic compute.Systematic
	tp.Mean, systematic = comp.OfMean(scan)
	for q := range tp.Values {
		w.Add(&pasts[q], int64(w.Bins+1)*w.Width, 0) // closes the last bin
		stats := w.Stats(&pasts[q])
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

// meanScan gives the means of the channels over a stretch.
func meanScan(ctx context.Context, f *runfile.File, codec *archive.Codec, cfg *Config, from, to int64) (*monitor.Scan, error) {
	channels := cfg.Compute.Channels
	scan := monitor.NewScan(len(channels))
	scan.T, scan.N = to-cfg.Align.Period, 1
	all := 0
	used := make([]int, len(channels))
	err := Rows(ctx, f, codec, ChunkChannels, nil, from, to, func(c *archive.Chunk, first, last int) {
		all += last - first
		for i := range c.Columns {
			id, ok := strings.CutPrefix(c.Columns[i].Name, "channel.")
			ch := slices.IndexFunc(channels, func(c compute.Channel) bool { return c.ID == id })
			if !ok || ch < 0 || c.Columns[i].Kind != archive.KindFloat {
				continue
			}
			for _, v := range c.Columns[i].Float[first:last] {
				if !math.IsNaN(v) {
					used[ch]++
					scan.Value[ch] += (v - scan.Value[ch]) / float64(used[ch])
				}
			}
		}
	})
	for i := range channels {
		scan.Quality[i] = monitor.QualityGood
		if float64(used[i]) < heldShare*float64(all) || all == 0 {
			scan.Value[i], scan.Quality[i] = math.NaN(), monitor.QualityMissing
		}
	}
	return scan, err
}
