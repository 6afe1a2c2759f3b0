package watch

import (
	"bufio"
	"bytes"
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// Past gives what the runs of the folder know, those that were removed too, and the state
// lacks: after it was lost, run numbers go on and lives add up. It goes into the boot record.
func (s *Store) Past(ctx context.Context, st *pipeline.State) (pipeline.Past, error) {
	runs, err := pastRuns(ctx, s.catalog, s.dir)
	if err != nil {
		return pipeline.Past{}, err
	}
	var past pipeline.Past
	for i := range runs {
		r := &runs[i]
		past.Runs = max(past.Runs, r.Number)
		if r.Series != "" {
			k := slices.IndexFunc(past.Series, func(o pipeline.Series) bool { return o.Of == r.Series })
			if k < 0 {
				k = len(past.Series)
				past.Series = append(past.Series, pipeline.Series{Of: r.Series})
			}
			past.Series[k].Last = max(past.Series[k].Last, r.InSeries)
		}
		life, ok := engineOf(r)
		if _, known := st.Life(r.EngineSerial); !ok && !known && r.EngineSerial != "" {
			if life, ok, err = lifeOf(ctx, StoredRuns{Catalog: s.catalog}, r); err != nil { // it must not keep the watch from starting
				s.log.Warn("what an engine had been through is not read from its run", "run", r.ID, "engine", r.EngineSerial, "err", err)
			}
		}
		if ok && !slices.ContainsFunc(past.Engines, func(l pipeline.Life) bool { return l.Serial == life.Serial }) {
			past.Engines = append(past.Engines, life)
		}
		if life, ok := nozzleOf(r); ok && !slices.ContainsFunc(past.Nozzles, func(l pipeline.NozzleLife) bool { return l.Serial == life.Serial }) {
			past.Nozzles = append(past.Nozzles, life)
		}
	}
	return st.Lacks(past), nil
}

// engineOf gives the life of the engine as a run left it behind.
func engineOf(h *runfile.Header) (l pipeline.Life, ok bool) {
	return l, len(h.Life) > 0 && json.Unmarshal(h.Life, &l) == nil
}

// nozzleOf gives the life of the nozzle as a run left it behind.
func nozzleOf(h *runfile.Header) (l pipeline.NozzleLife, ok bool) {
	return l, len(h.NozzleLife) > 0 && json.Unmarshal(h.NozzleLife, &l) == nil
}

// pastRuns gives what is known of all runs that a watch recorded, the newest first, and
// those that were removed.
func pastRuns(ctx context.Context, c *runfile.Catalog, dir string) ([]runfile.Header, error) {
	list, err := c.List(ctx, runfile.Filter{})
	if err != nil {
		return nil, err
	}
	var out []runfile.Header
	for i := range list {
		if list[i].Origin == nil {
			out = append(out, list[i].Header)
		}
	}
	text, err := os.ReadFile(filepath.Join(dir, removedName))
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("data folder: %w", err)
	}
	lines := bufio.NewScanner(bytes.NewReader(text))
	lines.Buffer(nil, len(text)+1)
	for lines.Scan() {
		var gone Removal
		// A line that was cut off when the machine stopped says nothing.
		if json.Unmarshal(lines.Bytes(), &gone) == nil && !gone.Derived {
			out = append(out, runfile.Header{
				ID: gone.Run, Number: gone.Number, EngineSerial: gone.EngineSerial, Started: gone.StartedNS,
				Identity: gone.Identity, Life: gone.Life, NozzleLife: gone.NozzleLife,
			})
		}
	}
	slices.SortStableFunc(out, func(a, b runfile.Header) int { return cmp.Compare(b.Started, a.Started) })
	return out, nil
}
