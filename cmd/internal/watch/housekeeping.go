package watch

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"time"

	"throatwatch/dashboard"
	"throatwatch/ingest/runfile"
)

// housekeepEvery is how often runs beyond retention are looked for.
const housekeepEvery = 10 * time.Minute

// Removal is a line of removed.jsonl in the data folder: a run that was removed.
type Removal struct {
	At           string `json:"at"` // RFC 3339, UTC
	Run          string `json:"run"`
	Number       uint64 `json:"number"`
	Rig          string `json:"rig"`
	EngineSerial string `json:"engine_serial"`
	Started      string `json:"started"`
	Bytes        int64  `json:"bytes"`
	Digest       string `json:"digest"`
	By           string `json:"by"`
	Why          string `json:"why"`

	// So that run numbers and lives outlast the runs.
	Derived   bool  `json:"derived,omitempty"` // no watch recorded it: it has an origin
	StartedNS int64 `json:"started_ns,omitempty"`
	runfile.Identity
	Life       json.RawMessage `json:"life,omitempty"`
	NozzleLife json.RawMessage `json:"nozzle_life,omitempty"`
}

// removedName is the file of removals in a data folder.
const removedName = "removed.jsonl"

// Retain removes the runs beyond r every ten minutes until ctx ends. Each removal is
// logged and stands in removed.jsonl; a run that cannot be removed is logged and tried again.
func (s *Store) Retain(ctx context.Context, r runfile.Retention) {
	if r == (runfile.Retention{}) {
		return
	}
	tick := time.NewTicker(housekeepEvery)
	defer tick.Stop()
	for {
		if err := s.retain(ctx, r, time.Now()); err != nil && ctx.Err() == nil {
			s.log.Error("retention", "err", err)
		}
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
	}
}

func (s *Store) retain(ctx context.Context, r runfile.Retention, now time.Time) error {
	runs, err := s.catalog.Expired(ctx, r, now.UnixNano())
	if err != nil {
		return err
	}
	for i := range runs {
		err = errors.Join(err, s.remove(ctx, &runs[i], "throatwatch", "retention", now))
	}
	return err
}

// Remove deletes a stored run with its file. Errors: runfile.ErrUnknownRun, ErrKept,
// and dashboard.ErrRunning.
func (s *Store) Remove(ctx context.Context, id, by, why string) error {
	run, err := s.catalog.Get(ctx, id)
	if err != nil {
		return err
	}
	return s.remove(ctx, &run, by, why, time.Now())
}

func (s *Store) remove(ctx context.Context, run *runfile.Run, by, why string, now time.Time) error {
	if s.writing(run) != nil {
		return fmt.Errorf("run %q: %w", run.ID, dashboard.ErrRunning)
	}
	return remove(ctx, s.catalog, s.dir, run, by, why, now)
}

// remove deletes a run and leaves a line about it. The line comes first: nothing
// goes silently, also where the process dies in between.
func remove(ctx context.Context, c *runfile.Catalog, dir string, run *runfile.Run, by, why string, now time.Time) (err error) {
	if run.Keep {
		return fmt.Errorf("run %q: %w", run.ID, runfile.ErrKept)
	}
	line, err := json.Marshal(Removal{
		At: now.UTC().Format(time.RFC3339Nano), Run: run.ID, Number: run.Number, Rig: run.Rig, EngineSerial: run.EngineSerial,
		Started: time.Unix(0, run.Started).UTC().Format(time.RFC3339Nano), Bytes: run.Size, Digest: run.Digest, By: by, Why: why,
		Derived: run.Origin != nil, StartedNS: run.Started, Identity: run.Identity, Life: run.Life, NozzleLife: run.NozzleLife,
	})
	if err != nil {
		return fmt.Errorf("remove run %q: %w", run.ID, err)
	}
	f, err := os.OpenFile(filepath.Join(dir, removedName), os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o600)
	if err != nil {
		return fmt.Errorf("remove run %q: %w", run.ID, err)
	}
	_, err = f.Write(append(line, '\n'))
	if err := errors.Join(err, f.Sync(), f.Close()); err != nil {
		return fmt.Errorf("remove run %q: %w", run.ID, err)
	}
	return c.Delete(ctx, run.ID)
}

// Annotate changes what people say of a run: keep, tags, notes.
func (s *Store) Annotate(ctx context.Context, id string, edit func(*runfile.Header)) (runfile.Run, error) {
	run, err := s.catalog.Get(ctx, id)
	if err != nil {
		return runfile.Run{}, err
	}
	f := s.writing(&run)
	if f == nil {
		return s.catalog.Annotate(ctx, id, edit)
	}
	if err := f.UpdateHeader(ctx, edit); err != nil {
		return runfile.Run{}, err
	}
	if run, err = runfile.ReadRun(ctx, f.Path()); err != nil {
		return runfile.Run{}, err
	}
	return run, s.catalog.Upsert(ctx, run)
}

// writing gives the file of a run if it is the one that is written to.
func (s *Store) writing(run *runfile.Run) *runfile.File {
	if f, _ := s.Current(); f != nil && f.Path() == s.catalog.Path(*run) {
		return f
	}
	return nil
}
