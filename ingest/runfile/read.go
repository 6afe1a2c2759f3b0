package runfile

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"math"
	"slices"

	"modernc.org/sqlite"

	"throatwatch/ingest"
)

// blob is one row of the table records.
type blob struct {
	first, last         uint64
	firstHost, lastHost int64
	codec, bytes        int
	sum                 int64
	data                []byte
}

const blobColumns = "first_seq, last_seq, first_host, last_host, codec, bytes, sum, data"

func (b *blob) scan(rows *sql.Rows) error {
	return rows.Scan(&b.first, &b.last, &b.firstHost, &b.lastHost, &b.codec, &b.bytes, &b.sum, &b.data)
}

func (b *blob) checksum() int64 {
	return checksum(b.data, "", int64(b.first), int64(b.last), b.firstHost, b.lastHost, int64(b.codec), int64(b.bytes))
}

// decode appends the records of a blob to dst. They alias room, which it unpacks
// into and gives back, grown where that was needed, or else b.data.
func (f *File) decode(dst []ingest.Record, b *blob, room []byte) ([]ingest.Record, []byte, error) {
	bad := func(err error) error { return &CorruptError{Table: "records", Row: b.first, Err: err} }
	if b.sum != b.checksum() {
		return dst, room, bad(errChecksum)
	}
	raw := b.data
	if b.codec == codecZstd {
		var err error
		if room, err = f.dec.DecodeAll(b.data, slices.Grow(room[:0], b.bytes)); err != nil {
			return dst, room, bad(err)
		}
		raw = room
	}
	n := len(dst)
	dst, err := ingest.DecodeRecords(dst, b.first, raw)
	if err != nil {
		return dst[:n], room, bad(err)
	}
	if got := uint64(len(dst) - n); got != b.last-b.first+1 {
		return dst[:n], room, bad(fmt.Errorf("%d records instead of %d to %d", got, b.first, b.last))
	}
	return dst, room, nil
}

// pager reads rows of one table in short transactions, each ended by size.
type pager[T any] struct {
	table string
	query string                           // ordered, and ending in LIMIT 256 (pageRows)
	args  func(last *T) []any              // where to go on; last is nil at first
	scan  func(*sql.Rows, *T) (int, error) // gives the size in bytes

	damaged func(error) // if set, a damaged row is told to it and passed over
}

// each calls fn for every row, outside of the transaction that read it. A
// damaged database gives the rows before the damage, and then the error. An
// error of fn is returned as it is.
func (p pager[T]) each(ctx context.Context, f *File, fn func(*T) error) error {
	var last *T
	for {
		page, more, err := p.read(ctx, f.read, last)
		for i := range page {
			if err := fn(&page[i]); err != nil {
				return err
			}
		}
		if err != nil {
			return f.fault("read", p.table, err)
		}
		if !more {
			return nil
		}
		last = &page[len(page)-1]
	}
}

func (p pager[T]) read(ctx context.Context, db *sql.DB, last *T) (page []T, more bool, err error) {
	rows, err := db.QueryContext(ctx, p.query, p.args(last)...)
	if err != nil {
		return nil, false, err
	}
	defer rows.Close() //nolint:errcheck // rows.Err tells
	size := 0
	for rows.Next() {
		var row T
		n, err := p.scan(rows, &row)
		if err != nil {
			err = scanError(p.table, err)
			if p.damaged == nil || !errors.Is(err, ErrCorrupt) {
				return page, false, err
			}
			p.damaged(err)
			continue
		}
		page = append(page, row)
		if size += n; size >= pageBytes || len(page) == pageRows {
			return page, true, nil
		}
	}
	return page, false, rows.Err()
}

// scanError makes damage of a value that is not of its column's type.
func scanError(table string, err error) error {
	var known *CorruptError
	var said *sqlite.Error
	if errors.As(err, &known) || errors.As(err, &said) {
		return err
	}
	return &CorruptError{Table: table, Err: err}
}

// limit is a number as SQLite knows it.
func limit(seq uint64) int64 { return int64(min(seq, math.MaxInt64)) }

// blobs calls fn for the blobs that hold records from … to. Between two pages
// the writer may pack blobs again, so each page begins with the blob that holds
// the next record, wherever it lies by then: fn may see records twice.
func (f *File) blobs(ctx context.Context, from, to uint64, fn func(*blob) error) error {
	return f.blobPages(from, to).each(ctx, f, fn)
}

func (f *File) blobPages(from, to uint64) pager[blob] {
	return pager[blob]{
		table: "records",
		query: "SELECT " + blobColumns + ` FROM records
			WHERE first_seq >= coalesce((SELECT max(first_seq) FROM records WHERE first_seq <= ?1), 0)
			AND last_seq >= ?1 AND first_seq <= ?2 ORDER BY first_seq LIMIT 256`,
		args: func(last *blob) []any {
			if last != nil {
				from = last.last + 1
			}
			return []any{limit(from), limit(to)}
		},
		scan: func(rows *sql.Rows, b *blob) (int, error) {
			err := b.scan(rows)
			return len(b.data), err
		},
	}
}

// Records calls fn for each record from … to, both inclusive, in order. from 0
// is where the file begins, to 0 is where it ends when the reading gets there.
// The record is only valid until fn returns; an error of fn ends the reading and
// is returned as it is. The first missing record gives ErrGap, unless the record
// after the hole is a gap record; damage gives ErrCorrupt; both come after all
// records before them were delivered.
func (f *File) Records(ctx context.Context, from, to uint64, fn func(*ingest.Record) error) error {
	if to == 0 {
		to = math.MaxInt64
	}
	want := from
	var records []ingest.Record
	var room []byte
	return f.blobs(ctx, from, to, func(b *blob) (err error) {
		if records, room, err = f.decode(records[:0], b, room); err != nil {
			return f.fault("read", "records", err)
		}
		for i := range records {
			r := &records[i]
			if r.Seq < want || r.Seq > to {
				continue
			}
			if want != 0 && r.Seq != want && r.Kind != ingest.KindGap {
				return f.fault("read", "records", &GapError{Missing: want, Next: r.Seq})
			}
			want = r.Seq + 1
			if err := fn(r); err != nil {
				return err
			}
		}
		return nil
	})
}

// SeqAtHost gives the last record whose host time is at or before host (ns UTC);
// 0 when there is none.
func (f *File) SeqAtHost(ctx context.Context, host int64) (uint64, error) {
	seq, err := f.seqAtHost(ctx, host)
	if err != nil {
		return 0, f.fault("record at host time", "records", err)
	}
	return seq, nil
}

func (f *File) seqAtHost(ctx context.Context, host int64) (uint64, error) {
	tx, err := f.read.BeginTx(ctx, &sql.TxOptions{ReadOnly: true})
	if err != nil {
		return 0, err
	}
	defer tx.Rollback() //nolint:errcheck // it only read
	const holding = " FROM records WHERE first_seq<=? ORDER BY first_seq DESC LIMIT 1"
	// The blob holding record lo began at or before host, that of hi after it.
	var lo, hi uint64
	if err := tx.QueryRowContext(ctx, "SELECT coalesce(min(first_seq), 0), coalesce(max(first_seq), 0)+1 FROM records").Scan(&lo, &hi); err != nil || lo == 0 {
		return 0, err
	}
	begins := func(seq uint64) (t int64, err error) {
		err = tx.QueryRowContext(ctx, "SELECT first_host"+holding, int64(seq)).Scan(&t)
		return t, err
	}
	if t, err := begins(lo); err != nil || t > host {
		return 0, err
	}
	for hi-lo > 1 {
		mid := lo + (hi-lo)/2
		t, err := begins(mid)
		if err != nil {
			return 0, err
		}
		if t <= host {
			lo = mid
		} else {
			hi = mid
		}
	}
	rows, err := tx.QueryContext(ctx, "SELECT "+blobColumns+holding, int64(lo))
	if err != nil {
		return 0, err
	}
	defer rows.Close() //nolint:errcheck // rows.Err tells
	if !rows.Next() {
		return 0, rows.Err()
	}
	var b blob
	if err := b.scan(rows); err != nil {
		return 0, err
	}
	if b.lastHost <= host {
		return b.last, nil
	}
	records, _, err := f.decode(nil, &b, nil)
	if err != nil {
		return 0, err
	}
	seq := uint64(0)
	for i := range records {
		if records[i].Host <= host {
			seq = records[i].Seq
		}
	}
	return seq, nil
}

const checkpointColumns = "seq, host, full, digest, sum, state"

func (f *File) scanCheckpoint(scan func(...any) error) (c Checkpoint, err error) {
	var full, sum int64
	var packed []byte
	if err := scan(&c.Seq, &c.Host, &full, &c.Digest, &sum, &packed); err != nil {
		return c, err
	}
	c.Full = full == 1
	if sum != checksum(packed, string(c.Digest), int64(c.Seq), c.Host, full) {
		return c, &CorruptError{Table: "checkpoints", Row: c.Seq, Err: errChecksum}
	}
	if c.State, err = f.dec.DecodeAll(packed, nil); err != nil {
		return c, &CorruptError{Table: "checkpoints", Row: c.Seq, Err: err}
	}
	return c, nil
}

// LastCheckpoint gives the newest checkpoint at or before the record seq, or
// ErrNoCheckpoint. After ErrCorrupt the caller may ask for the one before
// CorruptError.Row.
func (f *File) LastCheckpoint(ctx context.Context, seq uint64) (Checkpoint, error) {
	return f.oneCheckpoint(ctx, "WHERE seq<=? ORDER BY seq DESC", limit(seq))
}

// FirstCheckpoint gives the oldest checkpoint, or ErrNoCheckpoint.
func (f *File) FirstCheckpoint(ctx context.Context) (Checkpoint, error) {
	return f.oneCheckpoint(ctx, "ORDER BY seq")
}

// CheckpointAtHost gives the newest checkpoint at or before the host time (ns
// UTC), or ErrNoCheckpoint; full says that only a full one will do.
func (f *File) CheckpointAtHost(ctx context.Context, host int64, full bool) (Checkpoint, error) {
	return f.oneCheckpoint(ctx, "WHERE host<=? AND full>=? ORDER BY seq DESC", host, full)
}

func (f *File) oneCheckpoint(ctx context.Context, which string, args ...any) (Checkpoint, error) {
	row := f.read.QueryRowContext(ctx, "SELECT "+checkpointColumns+" FROM checkpoints "+which+" LIMIT 1", args...)
	c, err := f.scanCheckpoint(row.Scan)
	if errors.Is(err, sql.ErrNoRows) {
		err = ErrNoCheckpoint
	}
	if err != nil {
		return Checkpoint{}, f.fault("checkpoint", "checkpoints", err)
	}
	return c, nil
}

// Checkpoints calls fn for each checkpoint after the record after and up to the
// record upto, in order. An error of fn ends the reading and is returned as it is.
func (f *File) Checkpoints(ctx context.Context, after, upto uint64, fn func(*Checkpoint) error) error {
	return f.checkpoints(after, upto).each(ctx, f, fn)
}

func (f *File) checkpoints(after, upto uint64) pager[Checkpoint] {
	return pager[Checkpoint]{
		table: "checkpoints",
		query: "SELECT " + checkpointColumns + " FROM checkpoints WHERE seq>? AND seq<=? ORDER BY seq LIMIT 256",
		args: func(last *Checkpoint) []any {
			if last != nil {
				after = last.Seq
			}
			return []any{limit(after), limit(upto)}
		},
		scan: func(rows *sql.Rows, c *Checkpoint) (n int, err error) {
			*c, err = f.scanCheckpoint(rows.Scan)
			return len(c.State), err
		},
	}
}

// row is a chunk or an event with its rowid.
type row[T any] struct {
	id int64
	v  T
}

const (
	chunkColumns = "id, kind, seq, first_t, last_t, rows, sum, data"
	eventColumns = "id, epoch, n, seq, t, kind, sum, json"
)

func scanChunk(rows *sql.Rows, r *row[Chunk]) (int, error) {
	var sum int64
	c := &r.v
	if err := rows.Scan(&r.id, &c.Kind, &c.Seq, &c.FirstT, &c.LastT, &c.Rows, &sum, &c.Bytes); err != nil {
		return 0, err
	}
	if sum != c.checksum() {
		return 0, &CorruptError{Table: "chunks", Row: uint64(r.id), Err: errChecksum}
	}
	return len(c.Bytes), nil
}

func scanEvent(rows *sql.Rows, r *row[Event]) (int, error) {
	var sum int64
	e := &r.v
	if err := rows.Scan(&r.id, &e.Epoch, &e.N, &e.Seq, &e.T, &e.Kind, &sum, &e.JSON); err != nil {
		return 0, err
	}
	if sum != e.checksum() {
		return 0, &CorruptError{Table: "events", Row: uint64(r.id), Err: errChecksum}
	}
	return len(e.JSON), nil
}

// Chunks calls fn for each chunk of a kind that touches the event times from
// (inclusive) to to (exclusive), ns UTC, ordered by first time. An error of fn
// ends the reading and is returned as it is; damage gives ErrCorrupt.
func (f *File) Chunks(ctx context.Context, kind string, from, to int64, fn func(*Chunk) error) error {
	return pager[row[Chunk]]{
		table: "chunks",
		query: "SELECT " + chunkColumns + ` FROM chunks
			WHERE kind=? AND first_t<? AND last_t>=? AND (first_t, id)>(?,?) ORDER BY first_t, id LIMIT 256`,
		args: func(last *row[Chunk]) []any {
			if last == nil {
				return []any{kind, to, from, int64(math.MinInt64), int64(math.MinInt64)}
			}
			return []any{kind, to, from, last.v.FirstT, last.id}
		},
		scan: scanChunk,
	}.each(ctx, f, func(r *row[Chunk]) error { return fn(&r.v) })
}

// Events calls fn for each event at event times from (inclusive) to to
// (exclusive), ns UTC, ordered by time and then as they were committed. An error
// of fn ends the reading and is returned as it is; damage gives ErrCorrupt.
func (f *File) Events(ctx context.Context, from, to int64, fn func(*Event) error) error {
	return pager[row[Event]]{
		table: "events",
		query: "SELECT " + eventColumns + " FROM events WHERE t>=? AND t<? AND (t, id)>(?,?) ORDER BY t, id LIMIT 256",
		args: func(last *row[Event]) []any {
			if last == nil {
				return []any{from, to, int64(math.MinInt64), int64(math.MinInt64)}
			}
			return []any{from, to, last.v.T, last.id}
		},
		scan: scanEvent,
	}.each(ctx, f, func(r *row[Event]) error { return fn(&r.v) })
}

// Follow calls chunk and event for what was committed after the record after
// and up to the record upto, each in the order of the commits: this is how a
// sink goes on from the seq it has stored. Without chunk none are read. An error of
// either ends the reading and is returned as it is; damage gives ErrCorrupt.
func (f *File) Follow(ctx context.Context, after, upto uint64, chunk func(*Chunk) error, event func(*Event) error) error {
	if chunk != nil {
		if err := f.chunksBySeq(after, upto).each(ctx, f, func(r *row[Chunk]) error { return chunk(&r.v) }); err != nil {
			return err
		}
	}
	return f.eventsBySeq(after, upto).each(ctx, f, func(r *row[Event]) error { return event(&r.v) })
}

// The order of rowids is that of the commits, and so that of seq.
func (f *File) chunksBySeq(after, upto uint64) pager[row[Chunk]] {
	return pager[row[Chunk]]{
		table: "chunks",
		query: "SELECT " + chunkColumns + " FROM chunks WHERE seq>? AND seq<=? AND id>? ORDER BY id LIMIT 256",
		args:  func(last *row[Chunk]) []any { return []any{limit(after), limit(upto), lastID(last)} },
		scan:  scanChunk,
	}
}

func (f *File) eventsBySeq(after, upto uint64) pager[row[Event]] {
	return pager[row[Event]]{
		table: "events",
		query: "SELECT " + eventColumns + " FROM events WHERE seq>? AND seq<=? AND id>? ORDER BY id LIMIT 256",
		args:  func(last *row[Event]) []any { return []any{limit(after), limit(upto), lastID(last)} },
		scan:  scanEvent,
	}
}

func lastID[T any](r *row[T]) int64 {
	if r == nil {
		return math.MinInt64
	}
	return r.id
}
