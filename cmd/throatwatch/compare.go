package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard/compare"
	"throatwatch/dashboard/plot"
)

// comparison is what the command prints and draws.
type comparison interface {
	WriteTable(w io.Writer) error
	Figures() []compare.Figure
}

// compareCommand tells stored runs apart.
func compareCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("compare A B …", "Tell stored runs apart. A run and its reduction, or two of them: scan by scan, with the alarms that appear,\n"+
		"vanish or move. Other runs: by time from light-off or a mark, or by an operating parameter, where the last\n"+
		"one is held against the scatter of all before it.", stderr)
	data := fs.String("data", "data", "data folder")
	byName := fs.String("by", "", "time, mark, npr or referred_speed (default: by the records where they are the same, else time)")
	var o compare.Options
	fs.StringVar(&o.Mark, "mark", "", "with --by mark, text in the mark (default: the first mark)")
	within := fs.Duration("within", 30*time.Second, "an alarm that moves further is another one")
	fs.BoolVar(&o.All, "all", false, "by a parameter: all scans with a flame, not the steady ones only")
	plots := fs.String("plots", "", "folder to write plots to, as SVG")
	asJSON := fs.Bool("json", false, "JSON")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	var err error
	if o.By, err = compare.ParseBy(*byName); err == nil {
		o.Within = int64(*within)
		if len(rest) < 2 {
			err = fmt.Errorf("%w: give two runs; `throatwatch runs` lists them", compare.ErrOption)
		}
	}
	var c comparison
	if err == nil {
		c, err = compareRuns(ctx, *data, rest, o)
	}
	if err == nil && *plots != "" {
		err = writePlots(*plots, c.Figures(), stderr)
	}
	if err == nil && *asJSON {
		err = printJSON(stdout, c)
	} else if err == nil {
		err = c.WriteTable(stdout)
	}
	if err == nil {
		return 0
	}
	_, _ = fmt.Fprintln(stderr, "throatwatch compare:", err)
	if errors.Is(err, compare.ErrOption) {
		return 2
	}
	return 1
}

func compareRuns(ctx context.Context, dir string, ids []string, o compare.Options) (c comparison, err error) {
	runs := make([]compare.Run, len(ids))
	for i, id := range ids {
		f, done, err := openRun(ctx, dir, id)
		if err != nil {
			return nil, err
		}
		defer done() //nolint:errcheck // it is only read
		h, err := f.Header(ctx)
		if err != nil {
			return nil, err
		}
		runs[i] = compare.Run{File: f, Header: h}
	}
	if o.By == compare.NPR || o.By == compare.ReferredSpeed {
		p, err := compare.ByParameter(ctx, runs, watch.Parse, o)
		return &p, err
	}
	if len(runs) > 2 {
		return nil, fmt.Errorf("%w: more than two runs are compared by npr or referred_speed", compare.ErrOption)
	}
	s, err := compare.ByTime(ctx, &runs[0], &runs[1], o)
	return &s, err
}

// writePlots writes a figure per file.
func writePlots(dir string, figures []compare.Figure, stderr io.Writer) error {
	if err := os.MkdirAll(dir, 0o750); err != nil {
		return fmt.Errorf("plots: %w", err)
	}
	for i := range figures {
		svg, err := figures[i].SVG()
		if errors.Is(err, plot.ErrNothing) {
			continue
		}
		if err != nil {
			return err
		}
		path := filepath.Join(dir, figures[i].Name+".svg")
		if err := os.WriteFile(path, svg, 0o600); err != nil {
			return fmt.Errorf("plots: %w", err)
		}
		_, _ = fmt.Fprintln(stderr, path)
	}
	return nil
}
