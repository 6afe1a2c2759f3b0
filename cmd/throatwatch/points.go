package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/url"
	"os"
	"path/filepath"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard/points"
	"throatwatch/ingest/runfile"
)

// pointsCommand prints the test points of a stored run.
func pointsCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("points RUN", "Reduce steady stretches of a stored run, stretches beside its marks, or given ones to one value per quantity,\n"+
		"with uncertainty and with what is doubtful. Times are s of the run, or as 2026-03-02T09:00:00Z.", stderr)
	data := fs.String("data", "data", "data folder")
	fs.String("at", "auto", "auto: where the engine was steady; marks: beside each mark; card: as taken by the test card")
	fs.StringArray("stretch", nil, "a stretch as 120s..180s instead; may be given more than once")
	fs.String("from", "", "look from here on (default: the start of the run)")
	fs.String("to", "", "look up to here (default: its end)")
	fs.String("least", "10s", "with --at auto, the shortest stretch")
	fs.String("before", "0s", "with --at marks, time before each mark")
	fs.String("after", "30s", "with --at marks, time after each mark")
	rig := fs.String("rig", "", "by another rig file: the records are stepped through it first, and nothing is stored (see reduce)")
	format := fs.String("format", "table", "table, csv or json")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 {
		_, _ = fmt.Fprintln(stderr, "throatwatch points: give one run; `throatwatch runs` lists them")
		return 2
	}
	var write func(*points.Table) error
	switch *format {
	case "table":
		write = func(t *points.Table) error { return t.WriteTable(stdout) }
	case "csv":
		write = func(t *points.Table) error { return t.WriteCSV(stdout) }
	case "json":
		write = func(t *points.Table) error { return printJSON(stdout, t) }
	default:
		_, _ = fmt.Fprintf(stderr, "throatwatch points: --format %q: give table, csv or json\n", *format)
		return 2
	}
	query := queryOf(fs, "at", "from", "to", "least", "before", "after")
	query["stretch"], _ = fs.GetStringArray("stretch") // it is one
	read := func(ctx context.Context, f *runfile.File, h *runfile.Header) (t points.Table, err error) {
		o, err := points.ParseOptions(query, h.Started)
		if err != nil {
			return t, err
		}
		return points.Read(ctx, f, h, watch.Parse, o)
	}
	var t points.Table
	var err error
	if *rig == "" {
		t, err = ofRun(ctx, *data, rest[0], read)
	} else {
		t, err = ofReduced(ctx, *data, *rig, rest[0], read)
	}
	if err == nil {
		err = write(&t)
	}
	if err == nil {
		return 0
	}
	_, _ = fmt.Fprintln(stderr, "throatwatch points:", err)
	if errors.Is(err, points.ErrOption) {
		return 2
	}
	return 1
}

// ofReduced reads something of a run that is stepped through another rig file for it.
func ofReduced[T any](ctx context.Context, dir, rig, id string, read func(context.Context, *runfile.File, *runfile.Header) (T, error)) (v T, err error) {
	o, err := reduceOptions(rig, watch.ReduceOptions{Run: id})
	if err != nil {
		return v, err
	}
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return v, err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	temp, err := os.MkdirTemp("", "throatwatch-")
	if err != nil {
		return v, err
	}
	defer func() { err = errors.Join(err, os.RemoveAll(temp)) }()
	path := filepath.Join(temp, "reduction.db")
	res, err := runs.ReduceTo(ctx, o, path)
	if err != nil {
		return v, err
	}
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return v, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	return read(ctx, f, &res.Run.Header)
}

// queryOf gives text flags as a query has them, so that command and interface read the
// same.
func queryOf(fs *pflag.FlagSet, names ...string) url.Values {
	q := url.Values{}
	for _, name := range names {
		q.Set(name, fs.Lookup(name).Value.String())
	}
	return q
}

func printJSON(w io.Writer, v any) error {
	text, err := json.MarshalIndent(v, "", "  ")
	if err == nil {
		_, err = fmt.Fprintf(w, "%s\n", text)
	}
	return err
}
