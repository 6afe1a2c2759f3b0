package watch

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"path/filepath"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// Lives gives what each engine has been through that a data folder knows of: as of the
// newest checkpoint, which is a minute old at most, and for an engine that the watch
// no longer keeps as of the end of its last run.
func Lives(ctx context.Context, dir string, runs StoredRuns) ([]pipeline.Life, error) {
	state, err := newestState(ctx, dir)
	if err != nil {
		return nil, err
	}
	lives := []pipeline.Life{}
	for i := range state.Compute.Engine.Lives {
		lives = append(lives, pipeline.ViewLife(&state.Compute.Engine.Lives[i]))
	}
	list, err := runs.List(ctx, runfile.Filter{})
	if err != nil {
		return nil, err
	}
	slices.SortStableFunc(list, func(a, b runfile.Run) int { return cmp.Compare(b.Started, a.Started) })
	for i := range list {
		if list[i].Origin != nil || slices.ContainsFunc(lives, func(l pipeline.Life) bool { return l.Serial == list[i].EngineSerial }) {
			continue
		}
		life, ok, err := lifeOf(ctx, runs, &list[i])
		if err != nil {
			return nil, err
		}
		if ok {
			lives = append(lives, life)
		}
	}
	return lives, nil
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
func lifeOf(ctx context.Context, runs StoredRuns, r *runfile.Run) (life pipeline.Life, ok bool, err error) {
	f, err := runs.Open(ctx, r.ID)
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
