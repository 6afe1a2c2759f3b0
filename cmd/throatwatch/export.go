package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard/export"
	"throatwatch/ingest/runfile"
)

// openRun opens a stored run for reading; done closes what was opened.
func openRun(ctx context.Context, dir, id string) (f *runfile.File, done func() error, err error) {
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return nil, nil, err
	}
	f, err = runs.Open(ctx, id)
	if err != nil {
		if errors.Is(err, fs.ErrNotExist) {
			err = fmt.Errorf("%w: `throatwatch runs --data %s` lists the runs", err, dir)
		}
		return nil, nil, errors.Join(err, runs.Catalog.Close())
	}
	return f, func() error { return errors.Join(f.Close(), runs.Catalog.Close()) }, nil
}

// exportFlags are the flags of export as they were given.
type exportFlags struct {
	data, what, format, out, from, to, every, statistics string
	columns                                              []string
	replace, asJSON                                      bool
}

// exportCommand writes a table of a stored run to a file. It gives 0 when the file
// is there and was read again, 1 when not, 2 when called wrongly.
func exportCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := newFlags("export RUN", "Write a table of a stored run to a file that other programs open. Times are UTC, values SI.\n"+
		"What came before the run began is reached by a negative --from.", stderr)
	var f exportFlags
	flags.StringVar(&f.data, "data", "data", "data folder")
	flags.StringVar(&f.what, "what", export.OperatingPoints.String(), "table: operating-points, scans (channels, calibrated), samples (as received), events")
	flags.StringVar(&f.format, "format", "", "parquet, csv or lines, the InfluxDB line protocol (default: by the end of --out)")
	flags.StringVar(&f.out, "out", "", "file to write (default: RUN-TABLE.FORMAT here)")
	flags.StringSliceVar(&f.columns, "columns", nil, "only these columns, as a,b (default: all; t and t_ns always come)")
	flags.StringVar(&f.from, "from", "", "first time: seconds of the run, or as 2026-03-02T09:00:00Z (default: its start)")
	flags.StringVar(&f.to, "to", "", "time before which it ends (default: the end)")
	flags.StringVar(&f.every, "every", "", "a row per interval instead of one per scan, as 1s or 250ms")
	flags.StringVar(&f.statistics, "statistics", "mean,min,max", "with --every, of each number: some of mean,min,max,last; states give their last")
	flags.BoolVar(&f.replace, "replace", false, "replace the file if it is there")
	flags.BoolVar(&f.asJSON, "json", false, "progress and result as JSON, an object per line")
	rest, code := parseArgs(flags, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 {
		_, _ = fmt.Fprintln(stderr, "throatwatch export: give one run; `throatwatch runs` lists them")
		return 2
	}
	if f.every == "" && flags.Changed("statistics") {
		_, _ = fmt.Fprintln(stderr, "throatwatch export: --statistics is for --every: add it")
		return 2
	}
	err := exportRun(ctx, rest[0], f, stdout, stderr)
	switch {
	case err == nil:
		return 0
	case errors.Is(err, fs.ErrExist):
		err = fmt.Errorf("%w: give another --out, or --replace", err)
	}
	_, _ = fmt.Fprintln(stderr, "throatwatch export:", err)
	if errors.Is(err, export.ErrOption) {
		return 2
	}
	return 1
}

// exported is the result of an export as --json prints it.
type exported struct {
	File    string  `json:"file"`
	Table   string  `json:"table"`
	Format  string  `json:"format"`
	Rows    int64   `json:"rows"`
	Columns int     `json:"columns"`
	Missing int64   `json:"missing_cells"`
	First   *string `json:"first"`
	Last    *string `json:"last"`
	Bytes   int64   `json:"bytes"`
}

// formatOf reads the format, or tells it from the end of a file's name.
func formatOf(name, out string) (export.Format, error) {
	if name == "" {
		for _, f := range []export.Format{export.Parquet, export.CSV, export.Lines} {
			if strings.HasSuffix(out, f.Extension()) {
				return f, nil
			}
		}
	}
	return export.ParseFormat(name)
}

func exportRun(ctx context.Context, id string, f exportFlags, stdout, stderr io.Writer) (err error) {
	o := export.Options{Columns: f.columns}
	if o.What, err = export.ParseWhat(f.what); err != nil {
		return err
	}
	if o.Format, err = formatOf(f.format, f.out); err != nil {
		return err
	}
	if o.Every, err = export.ParseEvery(f.every); err != nil {
		return err
	}
	if o.Statistics, err = export.ParseStatistics(f.statistics); err != nil {
		return err
	}
	run, done, err := openRun(ctx, f.data, id)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, done()) }()
	header, err := run.Header(ctx)
	if err != nil {
		return err
	}
	if o.From, o.To, err = export.Stretch(f.from, f.to, header.Started); err != nil {
		return err
	}
	progress := newProgress(stderr, f.asJSON)
	o.Progress = func(p export.Progress) { progress.show(p.Part, p.Rows, "rows") }
	e, err := export.New(ctx, run, watch.Parse, o)
	if err != nil {
		return err
	}
	path := f.out
	if path == "" {
		path = e.Name()
	}
	sum, err := e.WriteFile(ctx, path, f.replace)
	progress.end()
	if err != nil {
		return err
	}
	info, err := os.Stat(path)
	if err != nil {
		return err
	}
	if f.asJSON {
		return json.NewEncoder(stdout).Encode(exported{
			path, o.What.String(), o.Format.String(), sum.Rows, sum.Columns, sum.Missing, utc(sum.First), utc(sum.Last), info.Size(),
		})
	}
	_, _ = fmt.Fprintf(stdout, "%s: %d rows of %d columns, %.1f MB, read again\n", path, sum.Rows, sum.Columns, float64(info.Size())/1e6)
	return nil
}

// utc gives a time as RFC 3339; nil for none.
func utc(t int64) *string {
	if t == 0 {
		return nil
	}
	text := time.Unix(0, t).UTC().Format(time.RFC3339Nano)
	return &text
}

// progress tells how far long work is: a bar on a terminal, with JSON an object per
// second, else nothing.
type progress struct {
	w        io.Writer
	terminal bool
	asJSON   bool
	next     time.Time
	shown    bool
}

func newProgress(w io.Writer, asJSON bool) *progress {
	p := &progress{w: w, asJSON: asJSON}
	if f, ok := w.(*os.File); ok {
		info, err := f.Stat()
		p.terminal = err == nil && info.Mode()&os.ModeCharDevice != 0
	}
	return p
}

// show tells the part that is done, 0 to 1, and a count of what.
func (p *progress) show(part float64, n int64, what string) {
	if !p.terminal && !p.asJSON {
		return
	}
	now := time.Now()
	if now.Before(p.next) {
		return
	}
	p.shown = true
	if p.asJSON {
		p.next = now.Add(time.Second)
		_, _ = fmt.Fprintf(p.w, "{\"part\":%.4f,%q:%d}\n", part, what, n)
		return
	}
	p.next = now.Add(100 * time.Millisecond)
	const width = 40
	full := int(part * width)
	_, _ = fmt.Fprintf(p.w, "\r[%s%s] %3.0f %%  %d %s\x1b[K", strings.Repeat("#", full), strings.Repeat(".", width-full), 100*part, n, what)
}

// end leaves the bar.
func (p *progress) end() {
	if p.terminal && p.shown {
		_, _ = fmt.Fprint(p.w, "\r\x1b[K")
	}
}
