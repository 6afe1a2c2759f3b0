package watch

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"log/slog"
	"math"
	"path/filepath"
	"sync/atomic"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/influx"
)

const (
	// farBehind is how many records Outcomes may be behind before it looks whether
	// the idle file still has what comes next.
	farBehind = 1000
	// damageStep is how many records are passed over at a time where a file is damaged.
	damageStep = 500
)

// follower gives what is recorded in a data folder to a sink, file after file, as
// items of type T. It belongs to one goroutine but for Skipped, and must be closed
// before its Store.
//
// The file of a run that is on is read through the Store's own handle, so that it
// stands alone as soon as the Store has closed it. An idle file is held open by a
// handle of its own, so that what is not yet read outlives its removal.
type follower[T any] struct {
	store   *Store
	log     *slog.Logger
	what    string             // the sink, in the log
	path    string             // of the file that is followed; "" = to be chosen
	held    *runfile.File      // that file, if it is an idle file
	spans   map[string]records // of the files that will not change
	skipped atomic.Uint64

	// between gives items after a cursor, of records up to upto, and ahead where to go
	// on when the data folder ends before the cursor.
	between func(ctx context.Context, f *runfile.File, after influx.Cursor, upto uint64, limit int) ([]T, influx.Cursor, error)
	ahead   func(newest uint64) influx.Cursor
}

// records is what a file holds: the records after after, up to upto.
type records struct{ after, upto uint64 }

// Skipped counts records whose outcomes were not given because they are gone or
// damaged.
func (o *follower[T]) Skipped() uint64 { return o.skipped.Load() }

// Close lets go of the file that is held.
func (o *follower[T]) Close() error {
	f := o.held
	o.path, o.held = "", nil
	if f == nil {
		return nil
	}
	return f.Close()
}

// Follow gives what was recorded after a cursor, at most limit of it, in the order of
// the records that it depends on, and the cursor behind it; nothing when there is
// nothing more.
func (o *follower[T]) Follow(ctx context.Context, after influx.Cursor, limit int) (rows []T, next influx.Cursor, err error) {
	for {
		live, _ := o.store.Current()
		newest, host := live.Durable()
		if after.Seq > newest {
			o.log.Warn(o.what+" is ahead of the data folder, which was put back: it goes on elsewhere", "cursor", after.Seq, "newest", newest)
			after = o.ahead(newest)
		}
		if o.path == "" {
			if err := o.choose(ctx, &after, live.Path()); err != nil {
				return nil, after, err
			}
		}
		if o.path != "" {
			err = o.with(ctx, func(f *runfile.File) error {
				rows, next, err = o.read(ctx, f, after, limit)
				return err
			})
			if err != nil {
				err = errors.Join(err, o.Close())
				if now, _ := o.store.Current(); now != live {
					err = nil // the writing moved on meanwhile: the next call finds where
				}
				return nil, after, err
			}
		}
		switch {
		case len(rows) > 0:
			return rows, next, nil
		case o.path != "" && next.Seq > after.Seq:
			after = next // records without outcomes
		case o.path != "" && o.path != live.Path():
			if err := o.Close(); err != nil { // read to its end, which it had before it was read
				return nil, after, err
			}
		default:
			after.T = max(after.T, host)
			return nil, after, nil
		}
	}
}

// with calls fn with the file that is followed.
func (o *follower[T]) with(ctx context.Context, fn func(*runfile.File) error) error {
	live, idle := o.store.Current()
	switch {
	case o.path == live.Path() && !idle:
		return fn(live)
	case o.held != nil:
		return fn(o.held)
	}
	f, err := runfile.Open(ctx, o.path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return fmt.Errorf("recorded outcomes: %w", err)
	}
	if filepath.Dir(o.path) == o.store.dir {
		o.held = f
		return fn(f)
	}
	return errors.Join(fn(f), f.Close())
}

// choose finds the file that goes on from the cursor: one that holds the next
// record and reaches furthest, or else the nearest one behind a hole. It finds
// none when there is nothing newer.
func (o *follower[T]) choose(ctx context.Context, c *influx.Cursor, live string) error {
	var best records
	for _, pattern := range []string{filepath.Join("runs", "*.db"), "idle-*.db"} {
		paths, err := filepath.Glob(filepath.Join(o.store.dir, pattern))
		if err != nil {
			return fmt.Errorf("recorded outcomes: %w", err)
		}
		for _, path := range paths {
			r, err := o.span(ctx, path, live)
			if err != nil {
				return err
			}
			if r.upto <= c.Seq {
				continue
			}
			r.after = max(r.after, c.Seq) // all that begin before are equal
			if o.path == "" || r.after < best.after || r.after == best.after && r.upto > best.upto {
				o.path, best = path, r
			}
		}
	}
	if o.path != "" && best.after > c.Seq {
		o.skip(c, best.after, "they were removed before it got them")
	}
	return nil
}

// span gives the records of a file; none if it cannot be read.
func (o *follower[T]) span(ctx context.Context, path, live string) (r records, err error) {
	if r, ok := o.spans[path]; ok {
		return r, nil
	}
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err == nil {
		defer f.Close() //nolint:errcheck // it is only read
		r.after, err = beforeFirst(ctx, f)
	}
	if err == nil {
		r.upto, err = f.SeqAtHost(ctx, math.MaxInt64)
	}
	var h runfile.Header
	if err == nil {
		h, err = f.Header(ctx)
	}
	if h.Origin != nil { // not recorded here: its records do not continue those of the folder
		r = records{}
	}
	switch {
	case ctx.Err() != nil:
		return records{}, ctx.Err()
	case errors.Is(err, fs.ErrNotExist):
		return records{}, nil
	case err != nil:
		o.log.Error("a stored file cannot be read; "+o.what+" will lack it", "file", path, "err", err)
		r = records{}
	}
	if err != nil || path != live && h.State != runfile.StateRunning {
		o.spans[path] = r
	}
	return r, nil
}

// beforeFirst gives the number before the first record of a file.
func beforeFirst(ctx context.Context, f *runfile.File) (seq uint64, err error) {
	found := errors.New("found")
	err = f.Records(ctx, 0, 0, func(r *ingest.Record) error {
		seq = r.Seq - 1
		return found
	})
	if errors.Is(err, found) {
		err = nil
	}
	return seq, err
}

// skip moves the cursor over records whose outcomes cannot be given.
func (o *follower[T]) skip(c *influx.Cursor, to uint64, why string) {
	if *c != (influx.Cursor{}) { // what was there before the first sink is not missed
		o.skipped.Add(to - c.Seq)
		o.log.Error(o.what+" will lack outcomes: "+why, "after_record", c.Seq, "up_to", to)
	}
	*c = influx.Cursor{Seq: to, T: c.T}
}

// read gives the next rows of a file. Where it is damaged it gives what can be
// read around the damage.
func (o *follower[T]) read(ctx context.Context, f *runfile.File, after influx.Cursor, limit int) ([]T, influx.Cursor, error) {
	upto, err := f.SeqAtHost(ctx, math.MaxInt64)
	if err != nil || upto <= after.Seq {
		return nil, after, err
	}
	if f == o.held && upto-after.Seq > farBehind {
		first, err := beforeFirst(ctx, f)
		if err != nil {
			return nil, after, err
		}
		if first > after.Seq {
			o.skip(&after, first, "they were removed before it got them")
		}
	}
	rows, next, err := o.between(ctx, f, after, upto, limit)
	if !damaged(err) {
		return rows, next, err
	}
	upto = min(upto, after.Seq+damageStep)
	rows, next, err = o.between(ctx, f, after, upto, limit)
	if damaged(err) {
		o.skip(&after, upto, err.Error())
		return nil, after, nil
	}
	return rows, next, err
}

func damaged(err error) bool {
	return errors.Is(err, runfile.ErrCorrupt) || errors.Is(err, archive.ErrCorrupt) || errors.Is(err, archive.ErrVersion)
}
