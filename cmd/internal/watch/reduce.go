package watch

import (
	"bytes"
	"cmp"
	"context"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"slices"

	"throatwatch/cmd/internal/config"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
	"throatwatch/rules/pipeline"
)

// reduceCommit is the host time between the commits of a reduction, ns.
const reduceCommit = int64(10e9)

// ErrNoRunInIt is returned where another configuration lets no run begin in the records.
var ErrNoRunInIt = errors.New("with this configuration no run begins in the records")

// ReduceOptions say how a stored run is stepped through another configuration.
type ReduceOptions struct {
	Run      string
	Bundle   []byte // marshalled; nil = that of the run, where Zero is given
	Config   pipeline.Config
	Zero     string // which zeros of its checks are subtracted, one of the Zero constants; "" = none
	By, Note string
	Progress func(part float64, records int64) // may be nil
}

// Reduced is what came of it.
type Reduced struct {
	Run    runfile.Run // the child
	Parent runfile.Header
	Same   bool            // the digest is that of the parent
	Swaps  []pipeline.Swap // sensors that were exchanged during the run
	Config pipeline.Config // that it was stepped through
	Zeros  []config.Zero   // that were subtracted
}

// Reduce steps the records of a stored run through another configuration, which takes the
// place of those that were recorded with them, and stores the result as a run of its own
// beside it: parent-r1 and so on. Nothing that is stored changes. With the configuration
// that the run was recorded with, the child has its digest.
//
// A file that begins within the watch, as most do, begins with what the recorded
// configuration had learned before: what another one keeps of it is as at any change of
// configuration. The five minutes before a run serve to settle.
func (r StoredRuns) Reduce(ctx context.Context, o ReduceOptions) (res Reduced, err error) {
	line, err := r.Catalog.Get(ctx, o.Run)
	if err != nil {
		return res, err
	}
	folder := filepath.Dir(r.Catalog.Path(line))
	temp, err := os.MkdirTemp(filepath.Dir(folder), "reduction-")
	if err != nil {
		return res, fmt.Errorf("reduce %s: %w", o.Run, err)
	}
	defer func() { err = errors.Join(err, os.RemoveAll(temp)) }()
	path := filepath.Join(temp, "child.db")
	if res, err = r.ReduceTo(ctx, o, path); err != nil {
		return res, err
	}
	if res.Run, err = r.adopt(ctx, o, path, folder, res.Run.Header); err != nil {
		return res, fmt.Errorf("reduce %s: %w", o.Run, err)
	}
	return res, nil
}

// Swaps gives the sensors that were exchanged up to the end of a run and whose calibration
// was entered, of which the files do not know that it was recorded with: they were in force
// before. An entry for the same channel and time supersedes the one before it. bundle is
// those files.
func (r StoredRuns) Swaps(ctx context.Context, id string) (swaps []config.Swapped, bundle []byte, err error) {
	f, err := r.Open(ctx, id)
	if err != nil {
		return nil, nil, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	h, err := f.Header(ctx)
	if err != nil {
		return nil, nil, err
	}
	c, err := f.LastCheckpoint(ctx, math.MaxInt64)
	if err != nil {
		return nil, nil, fmt.Errorf("swaps of %s: %w", id, err)
	}
	state, err := pipeline.Decode(c.State)
	if err != nil {
		return nil, nil, fmt.Errorf("swaps of %s: %w", id, err)
	}
	for i := range state.Swaps {
		s := &state.Swaps[i]
		if s.Calibration == "" || s.At < int64(state.InForce.Since) || h.Ended != 0 && s.ValidFrom > h.Ended {
			continue
		}
		swaps = slices.DeleteFunc(swaps, func(o config.Swapped) bool { return o.Channel == s.Channel && o.ValidFrom == s.ValidFrom })
		swaps = append(swaps, config.Swapped{Channel: s.Channel, Serial: s.Serial, ValidFrom: s.ValidFrom, Calibration: s.Calibration})
	}
	slices.SortStableFunc(swaps, func(a, b config.Swapped) int { return cmp.Compare(a.ValidFrom, b.ValidFrom) })
	return swaps, state.Bundle, nil
}

// ReduceTo is Reduce into a file of its own, which becomes no stored run and whose run has
// the id of its parent. There must be nothing at path.
func (r StoredRuns) ReduceTo(ctx context.Context, o ReduceOptions, path string) (res Reduced, err error) {
	f, err := r.Open(ctx, o.Run)
	if err != nil {
		return res, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	if res.Parent, err = f.Header(ctx); err != nil {
		return res, err
	}
	if res.Parent.State == runfile.StateRunning {
		return res, fmt.Errorf("reduce %s: it is being recorded: wait for its end", o.Run)
	}
	if o.Zero != "" {
		if o, res.Zeros, err = zeroed(ctx, f, &res.Parent, o); err != nil {
			return res, fmt.Errorf("reduce %s: %w", o.Run, err)
		}
	}
	if o.Config.Rig.ID != res.Parent.Rig {
		return res, fmt.Errorf("reduce %s: it is of rig %q, the configuration of rig %q", o.Run, res.Parent.Rig, o.Config.Rig.ID)
	}
	h, swaps, err := reduceTo(ctx, f, &res.Parent, o, path)
	if err != nil {
		return res, fmt.Errorf("reduce %s: %w", o.Run, err)
	}
	h.ID = res.Parent.ID
	res.Run.Header, res.Swaps, res.Config, res.Same = h, swaps, o.Config, h.Digest == res.Parent.Digest
	return res, nil
}

// adopt gives the finished file its name among the runs.
func (r StoredRuns) adopt(ctx context.Context, o ReduceOptions, path, folder string, h runfile.Header) (runfile.Run, error) {
	for n := 1; ; n++ {
		id := fmt.Sprintf("%s-r%d", o.Run, n)
		name := filepath.Join(folder, id+".db")
		if _, err := os.Lstat(name); err == nil {
			continue
		}
		h.ID = id
		f, err := runfile.Open(ctx, path, runfile.ReadWrite, runfile.Options{})
		if err != nil {
			return runfile.Run{}, err
		}
		err = f.UpdateHeader(ctx, func(stored *runfile.Header) { *stored = h })
		if err := errors.Join(err, f.Close()); err != nil {
			return runfile.Run{}, err
		}
		err = os.Link(path, name) // never over another
		if errors.Is(err, fs.ErrExist) {
			continue
		}
		if err != nil {
			return runfile.Run{}, err
		}
		run, err := runfile.ReadRun(ctx, name)
		if err != nil {
			return run, err
		}
		return run, r.Catalog.Upsert(ctx, run)
	}
}

// reduceTo makes the file of the child at path and gives its header, still without an id.
func reduceTo(ctx context.Context, f *runfile.File, parent *runfile.Header, o ReduceOptions, path string) (h runfile.Header, swaps []pipeline.Swap, err error) {
	p, err := pipeline.OpenReplay(ctx, f, pipeline.NewMachine(Parse), 0)
	if err != nil {
		return h, nil, err
	}
	if o.Config.Hash != parent.ConfigHash {
		if err := p.Reconfigure(o.Bundle); err != nil {
			return h, nil, err
		}
	}
	child, err := runfile.Create(ctx, path, runfile.Header{ID: "reduction", Rig: parent.Rig, State: runfile.StateInterrupted}, runfile.Options{})
	if err != nil {
		return h, nil, err
	}
	w := reducer{file: child, core: NewCore(p.Machine, p, Build(), runtime.GOARCH), codec: archive.NewCodec()}
	defer func() { err = errors.Join(err, child.Close()) }()
	if err := w.begin(ctx); err != nil {
		return h, nil, err
	}
	first := p.State.Seq
	last, _ := f.Durable()
	err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
		w.core.State = p.State // a gap puts another in its place
		if o.Progress != nil {
			o.Progress(float64(r.Seq-first)/float64(max(last-first, 1)), int64(r.Seq-first))
		}
		return w.take(ctx, r, outs)
	})
	if err != nil {
		return h, nil, err
	}
	found, err := w.end(ctx)
	if err != nil {
		return h, nil, err
	}
	if err := copyAmended(ctx, f, child, parent); err != nil {
		return h, nil, err
	}
	h = *found
	h.Origin = &runfile.Origin{Kind: runfile.OriginReduction, Parent: parent.ID, ParentDigest: parent.Digest, Stepped: found.ID, By: o.By, Zero: o.Zero}
	h.Number, h.Operator, h.Notes = parent.Number, parent.Operator, o.Note
	aborted := h.Aborted
	h.Identity = parent.Identity // it is the same run, seen otherwise
	h.Aborted = aborted
	return h, p.State.Swaps, nil
}

// reducer writes the file of a child.
type reducer struct {
	file  *runfile.File
	core  *Core
	codec *archive.Codec
	next  int64           // host time of the next commit
	on    *runfile.Header // the run that is on
	found *runfile.Header // the longest that has ended
}

// begin stores where the records begin.
func (w *reducer) begin(ctx context.Context) error {
	s := w.core.State
	if s.Seq == 0 {
		return nil
	}
	if err := w.core.checkpoint(true); err != nil {
		return err
	}
	c := w.core.batch.Checkpoint
	w.core.batch = &Batch{}
	return w.file.Commit(ctx, runfile.Batch{Checkpoint: c})
}

// take stores a record with what came of it.
func (w *reducer) take(ctx context.Context, r *ingest.Record, outs []pipeline.Outcome) error {
	own := *r
	own.Payload = bytes.Clone(r.Payload)
	if r.Kind == ingest.KindGap {
		w.core.columns, w.core.opened = nil, 0
	}
	w.core.stepped(&own, outs)
	if r.Kind == ingest.KindGap {
		if err := w.core.checkpoint(true); err != nil {
			return err
		}
	}
	if !w.core.Due() && r.Kind != ingest.KindGap && r.Host < w.next {
		return nil
	}
	w.next = r.Host + reduceCommit
	return w.cut(ctx)
}

func (w *reducer) cut(ctx context.Context) error {
	b, err := w.core.Cut()
	if err != nil || b == nil {
		return err
	}
	if b.Begin != nil {
		w.on = b.Begin
	}
	if b.End != nil {
		w.keep(b.End)
		w.on = nil
	}
	chunks, err := encodeColumns(w.codec, b.Columns)
	if err != nil {
		return err
	}
	return w.file.Commit(ctx, runfile.Batch{Records: b.Records, Chunks: chunks, Events: b.Events, Checkpoint: b.Checkpoint})
}

// keep takes a run for the one of the file if it is the longest.
func (w *reducer) keep(h *runfile.Header) {
	if w.found == nil || h.Ended-h.Started > w.found.Ended-w.found.Started {
		w.found = h
	}
}

// end stores the rest and gives the header of the run: one that does not end in the
// records counts if there is no other.
func (w *reducer) end(ctx context.Context) (*runfile.Header, error) {
	if len(w.core.batch.Records) > 0 {
		if err := w.core.checkpoint(true); err != nil {
			return nil, err
		}
	}
	if err := w.cut(ctx); err != nil {
		return nil, err
	}
	switch {
	case w.found != nil:
		return w.found, nil
	case w.core.State.RunActive:
		h := w.core.Header()
		h.State, h.Digest = runfile.StateInterrupted, w.core.Digest.String()
		return h, nil
	}
	return nil, ErrNoRunInIt
}
