package watch

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"math"
	"os"
	"path/filepath"
	"sync"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
	"throatwatch/rules/pipeline"
)

const (
	// preRoll is the host time before a run that is copied into its file, ns.
	preRoll = int64(300e9)
	// idleKept is the host time that the idle file keeps, ns.
	idleKept = int64(3 * 3600e9)
)

// Store keeps the files of a data folder: one that is written to, either the
// idle file or that of the run, and the catalogue. Write and Restore belong to
// one goroutine.
type Store struct {
	dir     string
	opt     runfile.Options
	log     *slog.Logger
	codec   *archive.Codec
	catalog *runfile.Catalog
	making  *making
	wanted  *RunHeader     // of a run whose file could not be made yet
	alarms  int            // raised in the run that is on, as of the last batch
	over    bool           // the run of the file has ended, and no idle file could be begun yet
	work    sync.WaitGroup // folding, pruning and making files; Close waits for it
	stop    context.CancelFunc

	mu   sync.Mutex // protects file and idle against readers
	file *runfile.File
	idle bool
}

// making is a run file on its way.
type making struct {
	upto   uint64 // record of the idle file that it holds
	header *RunHeader
	file   *runfile.File
	err    error
	done   chan struct{}
}

// OpenStore opens the data folder and the file that was written to last. It
// removes what a crash left half made.
func OpenStore(ctx context.Context, dir string, opt runfile.Options, log *slog.Logger) (*Store, error) {
	runs := filepath.Join(dir, "runs")
	if err := os.MkdirAll(runs, 0o750); err != nil {
		return nil, fmt.Errorf("data folder: %w", err)
	}
	catalog, err := runfile.OpenCatalog(ctx, filepath.Join(dir, "catalog.db"), runs)
	if err != nil {
		return nil, fmt.Errorf("catalogue: %w", err)
	}
	s := &Store{dir: dir, opt: opt, log: log, codec: archive.NewCodec(), catalog: catalog}
	if err := s.openLast(ctx); err != nil {
		return nil, errors.Join(err, catalog.Close())
	}
	return s, nil
}

// Catalog gives the list of runs.
func (s *Store) Catalog() *runfile.Catalog { return s.catalog }

// idlePath names an idle file by the record it begins after.
func (s *Store) idlePath(after uint64) string {
	return filepath.Join(s.dir, fmt.Sprintf("idle-%d.db", after))
}

func (s *Store) runPath(id string) string { return filepath.Join(s.dir, "runs", id+".db") }

// openLast finds the file with the newest record: an idle file, or that of a
// run that was on.
func (s *Store) openLast(ctx context.Context) error {
	idles, err := filepath.Glob(filepath.Join(s.dir, "idle-*.db"))
	if err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	runs, err := filepath.Glob(filepath.Join(s.dir, "runs", "*.db"))
	if err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	var newest *runfile.File
	idle := false
	for _, path := range append(runs, idles...) { // runs first: of two equal ones the run's counts
		isIdle := filepath.Dir(path) == s.dir
		f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
		if err != nil {
			s.log.Error("a stored file cannot be read; it is left as it is", "file", path, "err", err)
			continue
		}
		if h, err := f.Header(ctx); err == nil && h.Origin != nil {
			_ = f.Close() // its records do not continue those of the folder
			continue
		}
		seq, _ := f.Durable()
		best := uint64(0)
		if newest != nil {
			best, _ = newest.Durable()
		}
		if newest == nil || seq > best {
			if newest != nil {
				_ = newest.Close()
			}
			newest, idle = f, isIdle
			continue
		}
		_ = f.Close()
	}
	if newest == nil {
		return s.newIdle(ctx, nil)
	}
	path := newest.Path()
	header, err := newest.Header(ctx)
	switch err = errors.Join(err, newest.Close()); {
	case errors.Is(err, runfile.ErrCorrupt):
		return s.setAside(ctx, path, err)
	case err != nil:
		return fmt.Errorf("data folder: %w", err)
	}
	if !idle && header.State != runfile.StateRunning {
		return s.afterRun(ctx, path)
	}
	f, err := runfile.Open(ctx, path, runfile.ReadWrite, s.opt)
	if errors.Is(err, runfile.ErrCorrupt) {
		return s.setAside(ctx, path, err)
	}
	if err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	s.use(ctx, f, idle)
	s.clean(idles, path)
	return nil
}

// setAside puts a damaged file out of the way under a name that ends in ".damaged",
// where people find what is left in it, and goes on in an idle file from its last checkpoint that can be read.
func (s *Store) setAside(ctx context.Context, path string, damage error) error {
	c := lastGood(ctx, path)
	aside := path + ".damaged"
	for _, companion := range []string{"", "-wal", "-shm"} {
		if err := os.Rename(path+companion, aside+companion); err != nil && !errors.Is(err, os.ErrNotExist) {
			return fmt.Errorf("data folder: %w", errors.Join(damage, err))
		}
	}
	s.log.Error("a damaged file is put aside; what it holds after its last good checkpoint is not gone on from", "file", aside, "err", damage)
	return s.newIdle(ctx, c)
}

// lastGood gives the newest checkpoint of a damaged file that can be read, nil when
// there is none.
func lastGood(ctx context.Context, path string) *runfile.Checkpoint {
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return nil
	}
	defer f.Close() //nolint:errcheck // it is only read
	for seq := uint64(math.MaxInt64); ; {
		c, err := f.LastCheckpoint(ctx, seq)
		if err == nil {
			return &c
		}
		damage, ok := errors.AsType[*runfile.CorruptError](err)
		if !ok || damage.Row > seq {
			return nil
		}
		if damage.Row == 0 { // the way to the newest is cut: go forward from the first
			var last *runfile.Checkpoint
			_ = f.Checkpoints(ctx, 0, seq, func(c *runfile.Checkpoint) error { // ends with the damage
				last = c
				return nil
			})
			return last
		}
		seq = damage.Row - 1
	}
}

// clean removes idle files that are no longer needed, all but path.
func (s *Store) clean(idles []string, path string) {
	for _, other := range idles {
		if other != path {
			if err := runfile.Remove(other); err != nil {
				s.log.Warn("an idle file that is no longer needed stays", "file", other, "err", err)
			}
		}
	}
}

// afterRun begins an idle file behind a run that has ended. Where recording went
// on in its file, because there could be no idle file, it still does.
func (s *Store) afterRun(ctx context.Context, path string) error {
	c, over, err := lastOf(ctx, path)
	if err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	if !over {
		return s.newIdle(ctx, &c)
	}
	f, err := runfile.Open(ctx, path, runfile.ReadWrite, s.opt)
	if err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	s.use(ctx, f, false)
	s.over = true
	return nil
}

// lastOf gives the last checkpoint of a file, and whether an idle file cannot begin
// with it: because there are records behind it, or because it is not a full one.
func lastOf(ctx context.Context, path string) (c runfile.Checkpoint, over bool, err error) {
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return c, false, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	seq, _ := f.Durable()
	c, err = f.LastCheckpoint(ctx, math.MaxInt64)
	return c, c.Seq != seq || !c.Full, err
}

// newIdle begins an idle file, after a checkpoint unless it is the very first.
func (s *Store) newIdle(ctx context.Context, c *runfile.Checkpoint) error {
	after := uint64(0)
	if c != nil {
		after = c.Seq
	}
	path := s.idlePath(after)
	if err := runfile.Remove(path); err != nil && !errors.Is(err, os.ErrNotExist) {
		return fmt.Errorf("idle file: %w", err)
	}
	f, err := runfile.Create(ctx, path, runfile.Header{ID: "idle", State: runfile.StateIdle}, s.opt)
	if err != nil {
		return fmt.Errorf("idle file: %w", err)
	}
	if c != nil {
		if err := f.Commit(ctx, runfile.Batch{Checkpoint: c}); err != nil {
			return errors.Join(fmt.Errorf("idle file: %w", err), f.Close(), runfile.Remove(path))
		}
	}
	s.use(ctx, f, true)
	return nil
}

// use makes f the file that is written to and folds its log in the background.
func (s *Store) use(ctx context.Context, f *runfile.File, idle bool) {
	if s.stop != nil {
		s.stop()
	}
	fold, stop := context.WithCancel(context.WithoutCancel(ctx))
	s.stop = stop
	s.work.Go(func() { f.Run(fold) })
	s.mu.Lock()
	s.file, s.idle = f, idle
	s.mu.Unlock()
}

// Current gives the file that is written to, for readers, and whether it is
// the idle file. It may be closed by the end of the run: then ask again.
func (s *Store) Current() (f *runfile.File, idle bool) {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.file, s.idle
}

// Restore gives a core that goes on where the stored records end: the state of
// the newest checkpoint, stepped over the records after it. A file that turns out
// to be damaged is put aside.
func (s *Store) Restore(ctx context.Context, m *pipeline.Machine, build, goarch string) (*Core, error) {
	core, err := s.restore(ctx, m, build, goarch)
	if errors.Is(err, runfile.ErrCorrupt) || errors.Is(err, runfile.ErrGap) {
		path := s.file.Path()
		s.over = false
		if closing := s.file.Close(); closing != nil {
			s.log.Debug("damaged file", "file", path, "err", closing)
		}
		if err := s.setAside(ctx, path, err); err != nil {
			return nil, err
		}
		core, err = s.restore(ctx, m, build, goarch)
	}
	if err != nil {
		return nil, fmt.Errorf("restore: %w", err)
	}
	if (s.idle || s.over) && core.State.RunActive {
		s.removeHalfMade(core.Header().ID)
		s.alarms = core.State.Run.Alarms
		s.begin(ctx, core.Header(), core.State.Host)
	}
	return core, nil
}

func (s *Store) restore(ctx context.Context, m *pipeline.Machine, build, goarch string) (*Core, error) {
	p, err := pipeline.OpenReplay(ctx, s.file, m, math.MaxInt64)
	if err != nil {
		return nil, err
	}
	core := NewCore(m, p, build, goarch)
	err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
		core.State = p.State
		core.again(r, outs)
		return nil
	})
	return core, err
}

func (s *Store) removeHalfMade(id string) {
	if err := runfile.Remove(s.runPath(id)); err != nil && !errors.Is(err, os.ErrNotExist) {
		s.log.Error("a half-made run file stays", "run", id, "err", err)
	}
}

// Write stores a batch. After an error nothing of it is stored, and it may be
// given again.
func (s *Store) Write(ctx context.Context, b *Batch) error {
	s.make(ctx, b)
	chunks, err := encodeColumns(s.codec, b.Columns)
	if err != nil {
		return err
	}
	batch := runfile.Batch{Records: b.Records, Chunks: chunks, Events: b.Events, Checkpoint: b.Checkpoint}
	ends := b.End != nil && !s.idle && !s.over
	switch {
	case ends:
		batch.Header = func(h *runfile.Header) {
			h.State, h.Ended, h.Digest, h.Alarms = b.End.State, b.End.Ended, b.End.Digest, b.End.Alarms
			h.Aborted, h.Life, h.NozzleLife = b.End.Aborted, b.End.Life, b.End.NozzleLife
		}
	case b.Alarms > 0 && !s.idle && !s.over:
		batch.Header = func(h *runfile.Header) { h.Alarms = b.Alarms }
	}
	if err := s.file.Commit(ctx, batch); err != nil {
		return fmt.Errorf("store: %w", err)
	}
	for _, a := range b.Amend {
		s.amend(ctx, a)
	}
	switch {
	case b.Begin != nil:
		s.alarms = b.Begin.Alarms
	case b.Alarms > 0:
		s.alarms = b.Alarms
	}
	full := b.Checkpoint != nil && b.Checkpoint.Full
	if ends || s.over && full {
		s.end(ctx, b.Checkpoint)
	}
	switch {
	case b.Begin != nil && (s.idle || s.over):
		_, host := s.file.Durable()
		s.begin(ctx, b.Begin, host)
	case s.idle && full:
		s.prune(ctx, b.Checkpoint.Host-idleKept)
	}
	return nil
}

// amend adds an event to the file of a run that has ended, in the background. The records
// and all that came of them stay as they are.
func (s *Store) amend(ctx context.Context, a Amendment) {
	path := s.runPath(a.Run)
	ctx = context.WithoutCancel(ctx)
	s.work.Go(func() {
		f, err := runfile.Open(ctx, path, runfile.ReadWrite, s.opt)
		if err == nil {
			err = errors.Join(f.Commit(ctx, runfile.Batch{Events: []runfile.Event{a.Event}}), f.Close())
		}
		if err != nil {
			s.log.Warn("a check after a run is not in the file of the run, only in that recorded into now", "file", path, "err", err)
		}
	})
}

// make goes on with the making of a run file, before the batch b is stored: it
// takes over one that is made, and tries again with each checkpoint to make one
// that could not be. The end of the run waits for its file.
func (s *Store) make(ctx context.Context, b *Batch) {
	if s.making == nil && s.wanted != nil && (b.Checkpoint != nil || b.End != nil) {
		_, host := s.file.Durable()
		s.begin(ctx, s.wanted, host)
	}
	if s.making == nil {
		return
	}
	select {
	case <-s.making.done:
		s.switchOver(ctx)
	default:
		if b.End != nil {
			s.Settle(ctx)
		}
	}
	if b.End != nil && s.wanted != nil {
		s.log.Error("the run has no file of its own; for some hours its records are in the file they were recorded into", "run", s.wanted.ID, "file", s.file.Path())
		s.wanted = nil
	}
}

func encodeColumns(codec *archive.Codec, columns []*pipeline.Columns) ([]runfile.Chunk, error) {
	var out []runfile.Chunk
	for _, c := range columns {
		chunks, err := c.Chunks(codec)
		if err != nil {
			return nil, fmt.Errorf("store: %w", err)
		}
		out = append(out, chunks...)
	}
	return out, nil
}

// before gives the newest full checkpoint at or before host, or else where the file
// begins: with a checkpoint, or with the zero one and the first record ever.
func before(ctx context.Context, f *runfile.File, host int64) (runfile.Checkpoint, error) {
	c, err := f.CheckpointAtHost(ctx, host, true)
	if errors.Is(err, runfile.ErrNoCheckpoint) {
		c, err = f.FirstCheckpoint(ctx)
	}
	if errors.Is(err, runfile.ErrNoCheckpoint) {
		return runfile.Checkpoint{}, nil
	}
	if err != nil || c.Host <= host {
		return c, err
	}
	earlier := errors.New("there is a record before it")
	err = f.Records(ctx, 0, c.Seq, func(*ingest.Record) error { return earlier })
	if errors.Is(err, earlier) {
		return runfile.Checkpoint{}, nil
	}
	return c, err
}

// begin makes the file of a run from the idle file, in the background: commits
// go on to the idle file meanwhile.
func (s *Store) begin(ctx context.Context, h *RunHeader, host int64) {
	f := s.file
	upto, _ := f.Durable()
	m := &making{upto: upto, header: h, done: make(chan struct{})}
	s.making, s.wanted = m, nil
	ctx = context.WithoutCancel(ctx)
	s.work.Go(func() {
		defer close(m.done)
		c, err := before(ctx, f, min(host, h.Started)-preRoll)
		if err != nil {
			m.err = err
			return
		}
		opt := s.opt
		opt.Seed = &runfile.Seed{From: f, After: c.Seq, Upto: upto}
		m.file, m.err = runfile.Create(ctx, s.runPath(h.ID), *h, opt)
	})
}

// Settle waits until a run file that is being made is written to.
func (s *Store) Settle(ctx context.Context) {
	if s.making != nil {
		<-s.making.done
		s.switchOver(ctx)
	}
}

// switchOver moves the writing to the run file that was made. If that fails, the
// run goes on in the idle file for now.
func (s *Store) switchOver(ctx context.Context) {
	m := s.making
	s.making = nil
	old, idle := s.file, s.idle
	upto, _ := old.Durable()
	if m.err == nil && m.upto < upto {
		m.err = m.file.CopyFrom(ctx, old, m.upto, upto)
	}
	if m.err == nil && s.alarms > m.header.Alarms { // raised while the file was being made
		m.err = m.file.UpdateHeader(ctx, func(h *runfile.Header) { h.Alarms = s.alarms })
	}
	if m.err != nil {
		s.log.Error("the run is recorded into the idle file for now: its own file could not be made", "err", m.err)
		s.wanted = m.header
		if m.file != nil {
			path := m.file.Path()
			s.log.Debug("half-made run file removed", "file", path, "err", errors.Join(m.file.Close(), runfile.Remove(path)))
		}
		return
	}
	s.use(ctx, m.file, false)
	s.over = false
	s.catalogue(ctx, m.file.Path())
	err := old.Close()
	if idle {
		err = errors.Join(err, runfile.Remove(old.Path()))
	} else {
		s.catalogue(ctx, old.Path())
	}
	if err != nil {
		s.log.Warn("the file recorded into before stays as it is", "file", old.Path(), "err", err)
	}
}

// end closes the file of a run and begins a new idle file. c is the checkpoint
// of the last record.
func (s *Store) end(ctx context.Context, c *runfile.Checkpoint) {
	old := s.file
	if err := s.newIdle(ctx, c); err != nil {
		s.log.Error("recording goes on in the file of the ended run for now", "err", err)
		s.over = true
		return
	}
	s.over = false
	path := old.Path()
	if err := old.Close(); err != nil {
		s.log.Error("closing the run file", "file", path, "err", err)
	}
	s.catalogue(ctx, path)
}

func (s *Store) catalogue(ctx context.Context, path string) {
	run, err := runfile.ReadRun(ctx, path)
	if err == nil {
		err = s.catalog.Upsert(ctx, run)
	}
	if err != nil {
		s.log.Warn("the catalogue lacks a run; it is rebuilt at the next start", "file", path, "err", err)
	}
}

func (s *Store) prune(ctx context.Context, before int64) {
	f := s.file
	s.work.Go(func() {
		if _, err := f.PruneBefore(context.WithoutCancel(ctx), before); err != nil {
			s.log.Warn("pruning the idle file", "err", err)
		}
	})
}

// Close waits for work in the background and closes the files.
func (s *Store) Close(ctx context.Context) error {
	s.Settle(ctx)
	if s.stop != nil {
		s.stop()
	}
	s.work.Wait()
	return errors.Join(s.file.Close(), s.catalog.Close())
}
