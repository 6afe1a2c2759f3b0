package watch

import (
	"context"
	"fmt"
	"io/fs"
	"os"

	"throatwatch/ingest/runfile"
)

// StoredRuns gives the runs of a catalogue.
type StoredRuns struct {
	Catalog *runfile.Catalog
}

// List gives all runs, with header and size as they are now for a run that is
// on: the catalogue has its line from when it began.
func (r StoredRuns) List(ctx context.Context) ([]runfile.Run, error) {
	runs, err := r.Catalog.List(ctx, runfile.Filter{})
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
