package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"

	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/runfile"
)

// withRuns does something to the stored runs of a data folder that no watch writes to.
func withRuns(ctx context.Context, dir string, do func(watch.StoredRuns) error) (err error) {
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	unlock, err := watch.Lock(dir)
	if err != nil {
		return fmt.Errorf("%w; while a watch runs, use its page", err)
	}
	defer unlock()
	return do(runs)
}

func noteCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("note RUN", "Change what is noted about a stored run.", stderr)
	data := fs.String("data", "data", "data folder")
	keep := fs.Bool("keep", false, "retention never removes it; --keep=false takes the mark away")
	text := fs.String("text", "", "notes, instead of those that are there")
	tags := fs.StringArray("tag", nil, "a tag, beside those that are there; may be given more than once")
	untag := fs.StringArray("untag", nil, "a tag that is taken away")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 || fs.NFlag() == 0 {
		_, _ = fmt.Fprintln(stderr, "throatwatch note: give one run and what to change; `throatwatch runs` lists them")
		return 2
	}
	err := withRuns(ctx, *data, func(runs watch.StoredRuns) error {
		run, err := runs.Annotate(ctx, rest[0], func(h *runfile.Header) {
			if fs.Changed("keep") {
				h.Keep = *keep
			}
			if fs.Changed("text") {
				h.Notes = *text
			}
			h.Tags = slices.Compact(slices.Sorted(slices.Values(append(h.Tags, *tags...))))
			h.Tags = slices.DeleteFunc(h.Tags, func(t string) bool { return slices.Contains(*untag, t) })
		})
		if err == nil {
			_, _ = fmt.Fprintf(stdout, "%s: keep %v, tags [%s], notes %q\n", run.ID, run.Keep, strings.Join(run.Tags, " "), run.Notes)
		}
		return err
	})
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch note:", err)
		return 1
	}
	return 0
}

func deleteCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("delete RUN", "Delete a stored run with its file. The data folder's removed.jsonl says by whom and why.", stderr)
	data := fs.String("data", "data", "data folder")
	number := fs.Uint64("number", 0, "number of the run, to confirm")
	by := fs.String("by", "", "who deletes it")
	reason := fs.String("reason", "", "why")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 || *by == "" || *reason == "" {
		_, _ = fmt.Fprintln(stderr, "throatwatch delete: give one run, its --number, --by and --reason")
		return 2
	}
	err := withRuns(ctx, *data, func(runs watch.StoredRuns) error {
		run, err := runs.Catalog.Get(ctx, rest[0])
		if err != nil {
			return fmt.Errorf("%w: `throatwatch runs --data %s` lists the runs", err, *data)
		}
		if run.Number != *number {
			return fmt.Errorf("run %s has the number %d: give it by --number to confirm", run.ID, run.Number)
		}
		if run.State == runfile.StateRunning {
			return fmt.Errorf("run %s has not ended: a watch goes on with it at its next start", run.ID)
		}
		return runs.Remove(ctx, run.ID, *by, *reason)
	})
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch delete:", err)
		return 1
	}
	_, _ = fmt.Fprintf(stdout, "%s is deleted\n", rest[0])
	return 0
}
