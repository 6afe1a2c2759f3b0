package watch

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"path/filepath"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// Lived is what engines and nozzles have been through.
type Lived struct {
	Engines []pipeline.Life
	Nozzles []pipeline.NozzleLife
}

// Lives gives what each engine and nozzle has been through that a data folder knows of: as
// of the newest checkpoint, which is a minute old at most, and for one that the watch no
// longer keeps as of the end of its last run, which may have been removed since.
func Lives(ctx context.Context, dir string, runs StoredRuns) (Lived, error) {
	out := Lived{Engines: []pipeline.Life{}, Nozzles: []pipeline.NozzleLife{}}
	state, err := newestState(ctx, dir)
	if err != nil {
		return out, err
	}
	e := &state.Compute.Engine
	for i := range e.Lives {
		out.Engines = append(out.Engines, pipeline.ViewLife(&e.Lives[i]))
	}
	for i := range e.Nozzles {
		out.Nozzles = append(out.Nozzles, pipeline.ViewNozzle(&e.Nozzles[i]))
	}
	list, err := pastRuns(ctx, runs.Catalog, dir)
	if err != nil {
		return out, err
	}
	for i := range list {
		h := &list[i]
		if life, ok := nozzleOf(h); ok && !slices.ContainsFunc(out.Nozzles, func(l pipeline.NozzleLife) bool { return l.Serial == life.Serial }) {
			out.Nozzles = append(out.Nozzles, life)
		}
		if slices.ContainsFunc(out.Engines, func(l pipeline.Life) bool { return l.Serial == h.EngineSerial }) {
			continue
		}
		life, ok := engineOf(h)
		if !ok { // an earlier build wrote it beside the header
			if life, ok, err = lifeOf(ctx, runs, h); err != nil {
				return out, err
			}
		}
		if ok {
			out.Engines = append(out.Engines, life)
		}
	}
	return out, nil
}

// newestState gives the newest checkpoint of the files of a folder; a state that has
// seen nothing when there is none.
func newestState(ctx context.Context, dir string) (*pipeline.State, error) {
	var paths []string
	for _, pattern := range []string{filepath.Join(dir, "idle-*.db"), filepath.Join(dir, "runs", "*.db")} {
		found, err := filepath.Glob(pattern)
		if err != nil {
			return nil, fmt.Errorf("data folder: %w", err)
		}
		paths = append(paths, found...)
	}
	var newest runfile.Checkpoint
	for _, path := range paths {
		c, err := lastCheckpoint(ctx, path)
		switch {
		case errors.Is(err, runfile.ErrNoCheckpoint):
		case err != nil:
			return nil, fmt.Errorf("data folder: %w", err)
		case c.Seq >= newest.Seq:
			newest = c
		}
	}
	if newest.State == nil {
		return &pipeline.State{}, nil
	}
	return pipeline.Decode(newest.State)
}

// lastCheckpoint gives the newest checkpoint of a file that a watch recorded.
func lastCheckpoint(ctx context.Context, path string) (runfile.Checkpoint, error) {
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return runfile.Checkpoint{}, err
	}
	defer f.Close() //nolint:errcheck // it is only read
	h, err := f.Header(ctx)
	if err != nil {
		return runfile.Checkpoint{}, err
	}
	if h.Origin != nil { // its records do not continue those of the folder
		return runfile.Checkpoint{}, runfile.ErrNoCheckpoint
	}
	return f.LastCheckpoint(ctx, math.MaxInt64)
}

// lifeOf gives the life that a run left behind when it ended.
func lifeOf(ctx context.Context, runs StoredRuns, r *runfile.Header) (life pipeline.Life, ok bool, err error) {
	f, err := runs.Open(ctx, r.ID)
	if errors.Is(err, fs.ErrNotExist) {
		return life, false, nil // removed
	}
	if err != nil {
		return life, false, err
	}
	defer f.Close() //nolint:errcheck // it is only read
	err = f.Events(ctx, r.Started, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "life" {
			return nil
		}
		ok = true
		if err := json.Unmarshal(e.JSON, &life); err != nil {
			return fmt.Errorf("run %s: life: %w", r.ID, err)
		}
		return nil
	})
	return life, ok, err
}
