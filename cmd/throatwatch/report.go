package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
)

// reportCommand writes the report of a stored run.
func reportCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := newFlags("report RUN", "Write the report of a stored run: one HTML file that needs nothing beside it and prints on A4.\n"+
		"A run that is on gives an interim report, up to what is stored.", stderr)
	data := flags.String("data", "data", "data folder")
	out := flags.String("out", "", "file to write (default: RUN-report.html here)")
	replace := flags.Bool("replace", false, "replace the file if it is there")
	asJSON := flags.Bool("json", false, "progress and result as JSON, an object per line")
	rest, code := parseArgs(flags, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 {
		_, _ = fmt.Fprintln(stderr, "throatwatch report: give one run; `throatwatch runs` lists them")
		return 2
	}
	path := *out
	if path == "" {
		path = rest[0] + "-report.html"
	}
	size, err := reportRun(ctx, *data, rest[0], path, *replace, newProgress(stderr, *asJSON))
	switch {
	case errors.Is(err, fs.ErrExist):
		err = fmt.Errorf("%w: give another --out, or --replace", err)
	case err == nil && *asJSON:
		err = json.NewEncoder(stdout).Encode(reported{path, size})
	case err == nil:
		_, _ = fmt.Fprintf(stdout, "%s: %.2f MB; open it in a browser, print it from there\n", path, float64(size)/1e6)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch report:", err)
		return 1
	}
	return 0
}

// reported is the result of a report as --json prints it.
type reported struct {
	File  string `json:"file"`
	Bytes int64  `json:"bytes"`
}

// reportRun writes the report under another name and gives it its own when it is whole.
func reportRun(ctx context.Context, dir, id, path string, replace bool, bar *progress) (size int64, err error) {
	if _, err := os.Lstat(path); err == nil && !replace {
		return 0, fmt.Errorf("%s: %w", path, fs.ErrExist)
	}
	f, done, err := openRun(ctx, dir, id)
	if err != nil {
		return 0, err
	}
	defer func() { err = errors.Join(err, done()) }()
	h, err := f.Header(ctx)
	if err != nil {
		return 0, err
	}
	temp, err := os.CreateTemp(filepath.Dir(path), ".report-*")
	if err != nil {
		return 0, err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, temp.Close(), os.Remove(temp.Name()))
		}
	}()
	err = dashboard.WriteReport(ctx, temp, f, &h, dashboard.ReportOptions{
		Parse: watch.Parse, Build: watch.Build(), At: time.Now().UnixNano(),
		Progress: func(part float64) { bar.show(part, int64(100*part), "percent") },
	})
	bar.end()
	if err != nil {
		return 0, err
	}
	info, err := temp.Stat()
	if err != nil {
		return 0, err
	}
	if err := temp.Chmod(0o640); err != nil {
		return 0, err
	}
	if err := temp.Sync(); err != nil {
		return 0, err
	}
	if err := os.Rename(temp.Name(), path); err != nil {
		return 0, err
	}
	return info.Size(), temp.Close()
}
