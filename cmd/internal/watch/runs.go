package watch

import (
	"context"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"throatwatch/ingest/runfile"
)

// StoredRuns gives the runs of a catalogue.
type StoredRuns struct {
	Catalog *runfile.Catalog
	Store   *Store // that writes the runs; nil where no watch runs in this process
}

// List gives the runs that pass a filter, with header and size as they are now for
// a run that is on: the catalogue has its line from when it began.
func (r StoredRuns) List(ctx context.Context, filter runfile.Filter) ([]runfile.Run, error) {
	runs, err := r.Catalog.List(ctx, filter)
	if err != nil {
		return nil, err
	}
	for i := range runs {
		if runs[i].State != runfile.StateRunning {
			continue
		}
		if now, err := runfile.ReadRun(ctx, r.Catalog.Path(runs[i])); err == nil {
			runs[i] = now
		}
	}
	return runs, nil
}

// Open opens the file of a run for reading.
func (r StoredRuns) Open(ctx context.Context, id string) (*runfile.File, error) {
	run, err := r.Catalog.Get(ctx, id)
	if err != nil {
		return nil, fmt.Errorf("run %q: %w", id, fs.ErrNotExist)
	}
	path := r.Catalog.Path(run)
	if _, err := os.Stat(path); err != nil {
		return nil, fmt.Errorf("run %q: %w", id, err)
	}
	return runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
}

// Annotate changes what people say of a run: keep, tags, notes.
func (r StoredRuns) Annotate(ctx context.Context, id string, edit func(*runfile.Header)) (runfile.Run, error) {
	if r.Store != nil {
		return r.Store.Annotate(ctx, id, edit)
	}
	return r.Catalog.Annotate(ctx, id, edit)
}

// Remove deletes a run with its file; removed.jsonl says by whom and why. Errors:
// runfile.ErrUnknownRun, ErrKept, and dashboard.ErrRunning.
func (r StoredRuns) Remove(ctx context.Context, id, by, why string) error {
	if r.Store != nil {
		return r.Store.Remove(ctx, id, by, why)
	}
	run, err := r.Catalog.Get(ctx, id)
	if err != nil {
		return err
	}
	dir := filepath.Dir(filepath.Dir(r.Catalog.Path(run)))
	return remove(ctx, r.Catalog, dir, &run, by, why, time.Now())
}
