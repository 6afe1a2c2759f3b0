package bench

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net/url"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"time"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/compress/zstd"
	_ "modernc.org/sqlite" // what stands beside the run file is written by the same driver

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
	"throatwatch/rules/pipeline"
)

// rate is the number of packs per second of each channel that is measured.
const rate = 100

// stored measures what a run file takes and how fast it is written and replayed.
func stored(ctx context.Context, o *Options) ([]Figure, error) {
	_, bundle, cfg, err := wideRig(o.Rig, o.Dir, wanted)
	if err != nil {
		return nil, err
	}
	scenario := rehearsal.Full
	if o.Quick {
		scenario = rehearsal.Quick
	}
	run, values, err := rehearse(ctx, filepath.Join(o.Dir, "stored"), bundle, cfg, scenario, rate)
	if err != nil {
		return nil, err
	}
	f, err := runfile.Open(ctx, run.path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return nil, err
	}
	defer f.Close() //nolint:errcheck // it was only read
	out, err := sizes(ctx, f, run, values)
	if err != nil {
		return nil, err
	}
	wrote, err := writing(ctx, o, f)
	if err != nil {
		return nil, err
	}
	again, err := replayed(ctx, o, f, run)
	return append(append([]Figure{wrote}, out...), again...), err
}

// recorded is a stored run and how it came about.
type recorded struct {
	path   string
	size   int64
	digest string
}

// rehearse puts a rehearsed test into a data folder and counts the values received.
func rehearse(ctx context.Context, dir string, bundle config.Bundle, cfg pipeline.Config, scenario rehearsal.Scenario, perSecond float64) (r recorded, values float64, err error) {
	store, err := watch.OpenStore(ctx, dir, runfile.Options{}, slog.New(slog.DiscardHandler))
	if err != nil {
		return r, 0, err
	}
	closed := false
	defer func() {
		if !closed {
			err = errors.Join(err, store.Close(ctx))
		}
	}()
	core, err := store.Restore(ctx, pipeline.NewMachine(watch.Parse), watch.Build(), runtime.GOARCH)
	if err != nil {
		return r, 0, err
	}
	rig, err := rehearsal.New(cfg, rehearsal.Options{Seed: 1, Scenario: scenario, Rate: perSecond, Start: start})
	if err != nil {
		return r, 0, err
	}
	feed := watch.NewFeed(core, store)
	if err := feed.Begin(ctx, pipeline.Boot{Epoch: 1, Build: watch.Build(), GOARCH: runtime.GOARCH}, bundle.Marshal(), start); err != nil {
		return r, 0, err
	}
	err = rehearsal.Run(ctx, rig, feed.Until, func(ctx context.Context, m rehearsal.Message) error {
		return feed.Take(ctx, watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
	})
	if err := errors.Join(err, feed.End(ctx)); err != nil {
		return r, 0, err
	}
	closed = true
	if err := store.Close(ctx); err != nil {
		return r, 0, err
	}
	catalogue, err := runfile.OpenCatalog(ctx, filepath.Join(dir, "catalog.db"), filepath.Join(dir, "runs"))
	if err != nil {
		return r, 0, err
	}
	defer func() { err = errors.Join(err, catalogue.Close()) }()
	runs, err := catalogue.List(ctx, runfile.Filter{})
	if err != nil {
		return r, 0, err
	}
	if len(runs) != 1 {
		return r, 0, fmt.Errorf("%d runs of one rehearsal", len(runs))
	}
	r = recorded{path: catalogue.Path(runs[0]), digest: runs[0].Digest}
	if r.digest == "" {
		r.digest = core.Digest.String()
	}
	info, err := os.Stat(r.path)
	if err != nil {
		return r, 0, err
	}
	r.size = info.Size()
	return r, rig.Length().Seconds() * perSecond * float64(len(cfg.Compute.Channels)), nil
}

// sizes compares the chunks with the same columns as Parquet, and the whole file with
// the values received.
func sizes(ctx context.Context, f *runfile.File, run recorded, values float64) ([]Figure, error) {
	codec := archive.NewCodec()
	var out []Figure
	for _, kind := range []struct {
		kind, name string
		limit      float64
	}{{pipeline.ChunkChannels, "channel", 1}, {pipeline.ChunkPoints, "derived", 1.3}} {
		var parts []archive.Chunk
		n := 0
		err := f.Chunks(ctx, kind.kind, 0, 1<<62, func(c *runfile.Chunk) error {
			var part archive.Chunk
			n += len(c.Bytes)
			if err := codec.Decode(&part, c.Bytes, nil); err != nil {
				return err
			}
			parts = append(parts, part)
			return nil
		})
		if err != nil {
			return nil, err
		}
		wide, err := parquetSize(parts)
		if err != nil {
			return nil, err
		}
		rows := 0
		for i := range parts {
			rows += len(parts[i].Times)
		}
		cells := float64(rows * len(parts[0].Columns))
		out = append(out, compared(kind.name+" chunks beside wide zstd Parquet of the same columns, B per cell",
			[]pair{{float64(n) / cells, float64(wide) / cells}}, fmt.Sprintf("≤ %g ×", kind.limit),
			func(f *Figure) bool { return *f.Ratio <= kind.limit }))
	}
	return append(out, alone(fmt.Sprintf("whole run file at %d values/s, B per received value", wanted*rate), float64(run.size)/values, "≤ 8",
		func(f *Figure) bool { return f.Ours <= 8 })), nil
}

// counter counts what is written to it.
type counter int64

// Write counts.
func (c *counter) Write(p []byte) (int, error) {
	*c += counter(len(p))
	return len(p), nil
}

// parquetSize writes the parts, which have the same columns, as one wide table of one
// row group: a column of times, one of doubles or small integers for each.
func parquetSize(parts []archive.Chunk) (int64, error) {
	group := parquet.Group{"\x00t": parquet.Encoded(parquet.Int(64), &parquet.DeltaBinaryPacked)} // before all names
	order := make([]int, len(parts[0].Columns))
	for i, c := range parts[0].Columns {
		order[i] = i
		if c.Kind == archive.KindFloat {
			group[c.Name] = parquet.Leaf(parquet.DoubleType)
		} else {
			group[c.Name] = parquet.Encoded(parquet.Int(32), &parquet.RLEDictionary)
		}
	}
	slices.SortFunc(order, func(a, b int) int { // as a group has them
		if parts[0].Columns[a].Name < parts[0].Columns[b].Name {
			return -1
		}
		return 1
	})
	var n counter
	w := parquet.NewGenericWriter[any](io.Writer(&n), parquet.NewSchema("rows", group), parquet.Compression(&zstd.Codec{Level: zstd.SpeedDefault}))
	out := w.ColumnWriters()
	var row []parquet.Value
	put := func(k int) error {
		_, err := out[k].WriteRowValues(row)
		row = row[:0]
		return err
	}
	for p := range parts {
		for _, t := range parts[p].Times {
			row = append(row, parquet.Int64Value(t).Level(0, 0, 0))
		}
		if err := put(0); err != nil {
			return 0, err
		}
		for k, i := range order {
			c := &parts[p].Columns[i]
			for _, v := range c.Float {
				row = append(row, parquet.DoubleValue(v).Level(0, 0, k+1))
			}
			for _, v := range c.Byte {
				row = append(row, parquet.Int32Value(int32(v)).Level(0, 0, k+1))
			}
			if err := put(k + 1); err != nil {
				return 0, err
			}
		}
	}
	err := w.Close()
	return int64(n), err
}

// batches reads a stored run as commits of one second each.
func batches(ctx context.Context, f *runfile.File) (list []runfile.Batch, err error) {
	var ends []runfile.Checkpoint
	if err := f.Checkpoints(ctx, 0, 1<<62, func(c *runfile.Checkpoint) error {
		k := *c
		k.State, k.Digest = slices.Clone(c.State), slices.Clone(c.Digest)
		ends = append(ends, k)
		return nil
	}); err != nil {
		return nil, err
	}
	var b runfile.Batch
	cut := func() {
		if len(b.Records) > 0 {
			list = append(list, b)
			b = runfile.Batch{}
		}
	}
	if err := f.Records(ctx, 0, 0, func(r *ingest.Record) error {
		k := *r
		k.Payload = slices.Clone(r.Payload)
		if len(b.Records) > 0 && k.Host-b.Records[0].Host >= second {
			cut()
		}
		b.Records = append(b.Records, k)
		for len(ends) > 0 && ends[0].Seq < k.Seq {
			ends = ends[1:]
		}
		if len(ends) > 0 && ends[0].Seq == k.Seq {
			b.Checkpoint = &ends[0]
			ends = ends[1:]
			cut()
		}
		return nil
	}); err != nil {
		return nil, err
	}
	cut()
	for _, kind := range []string{pipeline.ChunkPoints, pipeline.ChunkChannels} {
		if err := f.Chunks(ctx, kind, 0, 1<<62, func(c *runfile.Chunk) error {
			k := *c
			k.Bytes = slices.Clone(c.Bytes)
			for i := range list {
				if last := len(list[i].Records) - 1; list[i].Records[last].Seq >= c.Seq {
					list[i].Chunks = append(list[i].Chunks, k)
					return nil
				}
			}
			return nil
		}); err != nil {
			return nil, err
		}
	}
	return list, nil
}

// writing measures the commits of a run, a second in each, beside the same blobs in a
// bare table of the same settings.
func writing(ctx context.Context, o *Options, f *runfile.File) (Figure, error) {
	list, err := batches(ctx, f)
	if err != nil {
		return Figure{}, err
	}
	if len(list) > 180 {
		list = list[:180]
	}
	values := 0.0
	for i := range list {
		for k := range list[i].Records {
			if list[i].Records[k].Kind == ingest.KindMessage {
				values++
			}
		}
	}
	values *= wanted / packs(list)
	n := 0
	name := func() string {
		n++
		return filepath.Join(o.Dir, fmt.Sprintf("write-%d.db", n))
	}
	ours := func() (float64, error) {
		out, err := runfile.Create(ctx, name(), runfile.Header{ID: "bench", State: runfile.StateRunning}, runfile.Options{})
		if err != nil {
			return 0, err
		}
		began := time.Now()
		for i := range list {
			if err := out.Commit(ctx, list[i]); err != nil {
				return 0, errors.Join(err, out.Close())
			}
		}
		took := time.Since(began)
		return values / took.Seconds(), errors.Join(out.Close(), runfile.Remove(out.Path()))
	}
	beside := func() (float64, error) { return bareTable(ctx, name(), list, values) }
	pairs, err := alternate(o.pairs(), ours, beside)
	if err != nil {
		return Figure{}, err
	}
	return compared("records, chunks and checkpoints written, beside the same blobs in bare SQLite, values/s", pairs, "≥ 0.5",
		func(f *Figure) bool { return *f.Ratio >= 0.5 }), nil
}

// packs gives the messages that bring one value of each channel.
func packs(list []runfile.Batch) float64 {
	topics := map[string]bool{}
	for i := range list {
		for k := range list[i].Records {
			if r := &list[i].Records[k]; r.Kind == ingest.KindMessage {
				topics[r.Topic] = true
			}
		}
	}
	return float64(len(topics))
}

// bareTable writes the blobs of the batches, a transaction each.
func bareTable(ctx context.Context, path string, list []runfile.Batch, values float64) (perSecond float64, err error) {
	blobs := make([][][]byte, len(list))
	for i := range list {
		blobs[i] = append(blobs[i], ingest.AppendRecords(nil, list[i].Records))
		for k := range list[i].Chunks {
			blobs[i] = append(blobs[i], list[i].Chunks[k].Bytes)
		}
		if c := list[i].Checkpoint; c != nil {
			blobs[i] = append(blobs[i], c.State)
		}
	}
	name := url.URL{Scheme: "file", OmitHost: true, Path: path, RawQuery: "_pragma=page_size(16384)&_pragma=journal_mode(WAL)&_pragma=synchronous(FULL)"}
	db, err := sql.Open("sqlite", name.String())
	if err != nil {
		return 0, err
	}
	defer func() { err = errors.Join(err, db.Close(), os.Remove(path)) }()
	db.SetMaxOpenConns(1)
	if _, err := db.ExecContext(ctx, "CREATE TABLE t (id INTEGER PRIMARY KEY, data BLOB)"); err != nil {
		return 0, err
	}
	began := time.Now()
	for i := range blobs {
		tx, err := db.BeginTx(ctx, nil)
		if err != nil {
			return 0, err
		}
		for _, b := range blobs[i] {
			if _, err := tx.ExecContext(ctx, "INSERT INTO t (data) VALUES (?)", b); err != nil {
				return 0, errors.Join(err, tx.Rollback())
			}
		}
		if err := tx.Commit(); err != nil {
			return 0, err
		}
	}
	return values / time.Since(began).Seconds(), nil
}

// replayed measures the replay of the run on one core.
func replayed(ctx context.Context, o *Options, f *runfile.File, run recorded) ([]Figure, error) {
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	same := 1.0
	one := func() (float64, error) {
		m := pipeline.NewMachine(watch.Parse)
		p, err := pipeline.OpenReplay(ctx, f, m, 0)
		if err != nil {
			return 0, err
		}
		began, scans, digest := used(), 0, ""
		err = p.Run(ctx, 0, func(_ *ingest.Record, outs []pipeline.Outcome) error {
			for i := range outs {
				if o := &outs[i]; o.Kind == pipeline.OutcomePoint {
					scans++
				} else if o.Kind == pipeline.OutcomeRun && o.Event == "ended" {
					digest = p.Digest.String()
				}
			}
			return nil
		})
		if err != nil {
			return 0, err
		}
		took := used() - began
		if digest == "" { // the short test stops before the run ends
			digest = p.Digest.String()
		}
		if digest != run.digest {
			same = 0
		}
		cfg, _ := m.Config()
		return float64(scans) * float64(cfg.Align.Period) / float64(took), nil
	}
	var list []pair
	for range o.pairs() {
		v, err := one()
		if err != nil {
			return nil, err
		}
		list = append(list, pair{ours: v})
	}
	return []Figure{
		alone(fmt.Sprintf("replay, %d channels × %d/s, 20 scans/s, one core, s per CPU s", wanted, rate), median(list, ours), "≥ 600, wanted 1000",
			func(f *Figure) bool { return f.Ours >= 600 }),
		alone("its digest is that of the live run", same, "1", func(f *Figure) bool { return f.Ours == 1 }),
	}, nil
}
