package runfile

import (
	"context"
	"database/sql"
	"errors"
	"fmt"

	"throatwatch/ingest"
)

// CopyFrom stores, in one transaction, what src holds after the record after
// and up to the record upto: records, chunks, events and checkpoints. Into an
// empty file it first puts src's full checkpoint of the record after, from which
// work can go on (after 0: src's very beginning, without one); otherwise after
// must be the last durable record here, and the copy continues.
//
// So a run begins without holding up the recording: a seeded Create while the
// commits still go to the old file, then a CopyFrom of the little that came
// meanwhile, then the commits go to the new one. Errors: ErrOrder,
// ErrNoCheckpoint, and of src ErrGap and ErrCorrupt; nothing is stored then.
func (f *File) CopyFrom(ctx context.Context, src *File, after, upto uint64) error {
	err := f.transact(ctx, "copy", func(tx *sql.Tx, t *tail) error {
		if end, _ := src.Durable(); src == f || upto > end || after > upto {
			return fmt.Errorf("records %d to %d of a file that ends at %d: %w", after+1, upto, end, ErrOrder)
		}
		if t.seq == 0 && after != 0 {
			c, err := src.LastCheckpoint(ctx, after)
			if err != nil {
				return err
			}
			if c.Seq != after || !c.Full {
				return fmt.Errorf("full, of record %d: %w", after, ErrNoCheckpoint)
			}
			if err := f.addCheckpoint(ctx, tx, &c); err != nil {
				return err
			}
			t.seq, t.host = c.Seq, c.Host
		}
		if t.seq != after {
			return fmt.Errorf("records from %d after record %d: %w", after+1, t.seq, ErrOrder)
		}
		if t.small != 0 {
			if err := f.seal(ctx, tx, t); err != nil {
				return err
			}
		}
		c := copier{f: f, tx: tx, t: t, upto: upto}
		if err := src.blobs(ctx, after+1, upto, func(b *blob) error { return c.blob(ctx, src, b) }); err != nil {
			return err
		}
		if err := c.flush(ctx); err != nil {
			return err
		}
		if t.seq != upto {
			return fmt.Errorf("source ends at record %d instead of %d: %w", t.seq, upto, ErrGap)
		}
		return errors.Join(
			src.Checkpoints(ctx, after, upto, func(c *Checkpoint) error { return f.addCheckpoint(ctx, tx, c) }),
			src.Follow(ctx, after, upto,
				func(c *Chunk) error { return addChunk(ctx, tx, *c) },
				func(e *Event) error { return addEvent(ctx, tx, *e) }),
		)
	})
	if err == nil {
		f.due(foldBytes)
	}
	return err
}

// Snapshot makes a file at path of all that src held when it was opened, or for a
// file that is written to here, holds now: a run that is on can be copied while it
// is recorded, by any process. It reads in short transactions as every reader, so
// the recording is never held up; the copy is consistent because what is stored up
// to a record never changes. The state of a run that is on becomes
// StateInterrupted: nobody writes to the copy. It gives the number and host time
// (ns UTC) of the last record in it. Errors: fs.ErrExist, and those of CopyFrom.
func Snapshot(ctx context.Context, src *File, path string) (seq uint64, host int64, err error) {
	h, err := src.Header(ctx)
	if err != nil {
		return 0, 0, err
	}
	if h.State == StateRunning {
		h.State = StateInterrupted
	}
	seq, host = src.Durable()
	f, err := Create(ctx, path, h, Options{Seed: &Seed{From: src, Upto: seq}})
	if err != nil {
		return 0, 0, err
	}
	return seq, host, f.Close()
}

// copier takes over blobs: packed ones as they are, small ones and those cut by
// the range packed together.
type copier struct {
	f     *File
	tx    *sql.Tx
	t     *tail
	upto  uint64
	loose []ingest.Record // not yet stored; t counts them already
	bytes int             // of loose, about
}

func (c *copier) blob(ctx context.Context, src *File, b *blob) error {
	next := c.t.seq + 1
	if b.first == next && b.last <= c.upto && b.codec == codecZstd && b.sum == b.checksum() {
		if err := c.flush(ctx); err != nil {
			return err
		}
		c.t.seq, c.t.host = b.last, b.lastHost
		return c.f.insertBlob(ctx, c.tx, b)
	}
	records, _, err := src.decode(nil, b, nil)
	if err != nil {
		return err
	}
	for _, r := range records {
		if r.Seq <= c.t.seq || r.Seq > c.upto {
			continue
		}
		if next = c.t.seq + 1; r.Seq != next && next != 1 && r.Kind != ingest.KindGap {
			return &GapError{Missing: next, Next: r.Seq}
		}
		c.t.seq, c.t.host = r.Seq, r.Host
		c.loose = append(c.loose, r)
		c.bytes += weight(&r)
	}
	if c.bytes < sealBytes {
		return nil
	}
	return c.flush(ctx)
}

func (c *copier) flush(ctx context.Context) error {
	for part := range pieces(c.loose, sealBytes) {
		if _, err := c.f.addBlob(ctx, c.tx, part, codecZstd); err != nil {
			return err
		}
	}
	c.loose, c.bytes = c.loose[:0], 0
	return nil
}
