package runfile

import (
	"context"
	"errors"
	"fmt"
	"math"

	"throatwatch/ingest"
)

// Counts is what a file was found to hold, damaged rows left out.
type Counts struct {
	Records     uint64 `json:"records"`
	Checkpoints int    `json:"checkpoints"`
	Chunks      int    `json:"chunks"`
	Events      int    `json:"events"`
}

// errHostFell is the fault of a record that is older than the one before it.
var errHostFell = errors.New("host time is before that of the record before")

// Check reads the whole file and calls found with each fault: of the structure of
// the database, the header, the checksum of every row, and the numbers and host
// times of the records. Damage of a row hides nothing behind it; damage of the
// database's structure may hide the rest of a table, which is a fault too. Chunk,
// if it is set, is called with every chunk that is whole, so that its owner can
// judge what is in it. An error is given only when ctx ends or chunk gives one.
//
// While it reads, the log of a file that is being recorded into grows.
func (f *File) Check(ctx context.Context, found func(error), chunk func(*Chunk) error) (n Counts, err error) {
	var stop error // of chunk
	tell := func(err error) {
		if err != nil && ctx.Err() == nil && stop == nil {
			found(err)
		}
	}
	damaged := func(err error) { tell(f.fault("read", "", err)) }
	f.integrity(ctx, tell)
	if _, err := f.Header(ctx); err != nil {
		tell(err)
	}
	f.checkRecords(ctx, &n, tell)

	last := int64(0) // row of the table that is read
	behind := func(err error) {
		if err != nil {
			tell(fmt.Errorf("behind row %d: %w", last, err))
		}
		last = 0
	}
	checkpoints := f.checkpoints(0, math.MaxInt64)
	checkpoints.damaged = damaged
	behind(checkpoints.each(ctx, f, func(c *Checkpoint) error {
		last = int64(c.Seq)
		n.Checkpoints++
		return nil
	}))
	chunks := f.chunksBySeq(0, math.MaxInt64)
	chunks.damaged = damaged
	err = chunks.each(ctx, f, func(r *row[Chunk]) error {
		last = r.id
		n.Chunks++
		if chunk != nil {
			stop = chunk(&r.v)
		}
		return stop
	})
	if stop != nil {
		return n, stop
	}
	behind(err)
	events := f.eventsBySeq(0, math.MaxInt64)
	events.damaged = damaged
	behind(events.each(ctx, f, func(r *row[Event]) error {
		last = r.id
		n.Events++
		return nil
	}))
	return n, ctx.Err()
}

// Verify is Check with all faults joined, and ctx's error; nil when there is none.
func (f *File) Verify(ctx context.Context) error {
	var faults []error
	_, err := f.Check(ctx, func(err error) { faults = append(faults, err) }, nil)
	return errors.Join(append(faults, err)...)
}

// checkRecords reads all records. Where they are damaged or missing it goes on
// with the next blob.
func (f *File) checkRecords(ctx context.Context, n *Counts, tell func(error)) {
	want, host := uint64(0), int64(math.MinInt64)
	var records []ingest.Record
	var room []byte
	blobs := f.blobPages(0, math.MaxInt64)
	blobs.damaged = func(err error) { tell(f.fault("read", "records", err)) }
	err := blobs.each(ctx, f, func(b *blob) error {
		var err error
		if records, room, err = f.decode(records[:0], b, room); err != nil {
			tell(f.fault("read", "records", err))
			if b.last >= b.first && b.first >= want {
				want = b.last + 1 // the hole is the damaged blob, which is told
			}
			return nil
		}
		for i := range records {
			r := &records[i]
			if r.Seq < want {
				continue // packed again between two pages
			}
			if want != 0 && r.Seq != want && r.Kind != ingest.KindGap {
				tell(f.fault("read", "records", &GapError{Missing: want, Next: r.Seq}))
			}
			if r.Host < host {
				tell(f.fault("read", "records", &CorruptError{Table: "records", Row: b.first, Err: fmt.Errorf("record %d: %w", r.Seq, errHostFell)}))
			}
			want, host = r.Seq+1, r.Host
			n.Records++
		}
		return nil
	})
	if err != nil {
		tell(fmt.Errorf("behind record %d: %w", max(want, 1)-1, err))
	}
}

// integrity tells what SQLite finds wrong with the structure.
func (f *File) integrity(ctx context.Context, tell func(error)) {
	const most = 20 // messages: one torn page gives hundreds
	rows, err := f.read.QueryContext(ctx, fmt.Sprintf("PRAGMA integrity_check(%d)", most))
	if err != nil {
		tell(f.fault("verify", "file", err))
		return
	}
	defer rows.Close() //nolint:errcheck // rows.Err tells
	for rows.Next() {
		var said string
		if err := rows.Scan(&said); err != nil {
			tell(f.fault("verify", "file", err))
			return
		}
		if said != "ok" {
			tell(f.fault("verify", "file", &CorruptError{Table: "file", Err: errors.New(said)}))
		}
	}
	if err := rows.Err(); err != nil {
		tell(f.fault("verify", "file", err))
	}
}
