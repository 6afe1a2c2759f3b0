package bench

import (
	"context"
	"fmt"
	"math"
	"path/filepath"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// growthRate is the number of values per second of a channel that growth is measured with.
const growthRate = 20

// growth measures how the processor time of a value grows with the channels of a rig:
// a run of each size is stored and stepped again.
func growth(ctx context.Context, o *Options) ([]Figure, error) {
	sizes := []int{60, 250, 1000} // a rig file has 1000 at most
	if o.Quick {
		sizes = sizes[:2]
	}
	costs := make([]float64, len(sizes)) // ns per value
	out := make([]Figure, 0, len(sizes)+1)
	for i, n := range sizes {
		_, bundle, cfg, err := wideRig(o.Rig, o.Dir, n)
		if err != nil {
			return nil, err
		}
		run, values, err := rehearse(ctx, filepath.Join(o.Dir, fmt.Sprintf("growth-%d", n)), bundle, cfg, rehearsal.Quick, growthRate)
		if err != nil {
			return nil, err
		}
		if costs[i], err = stepping(ctx, run.path); err != nil {
			return nil, err
		}
		costs[i] /= values
		out = append(out, alone(fmt.Sprintf("replay of %d channels × %d/s, CPU ns per value", n, growthRate), costs[i], "reported", nil))
	}
	last := len(sizes) - 1
	decades := math.Log10(float64(sizes[last]) / float64(sizes[0]))
	return append(out, alone(fmt.Sprintf("cost of a value per decade of channels, %d to %d, times", sizes[0], sizes[last]),
		math.Pow(costs[last]/costs[0], 1/decades), "≤ 1.3", func(f *Figure) bool { return f.Ours <= 1.3 })), nil
}

// stepping gives the processor time of stepping a stored run again, ns.
func stepping(ctx context.Context, path string) (ns float64, err error) {
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return 0, err
	}
	defer f.Close() //nolint:errcheck // it was only read
	p, err := pipeline.OpenReplay(ctx, f, pipeline.NewMachine(watch.Parse), 0)
	if err != nil {
		return 0, err
	}
	began := used()
	err = p.Run(ctx, 0, func(*ingest.Record, []pipeline.Outcome) error { return nil })
	return float64(used() - began), err
}
