package runfile

import (
	"context"
	"database/sql"
	"fmt"
	"iter"
	"math"

	"throatwatch/ingest"
)

// Codecs of a blob of records.
const (
	codecPlain = iota // as committed
	codecZstd         // packed again
)

// Chunk is a block of columns computed from the records.
type Chunk struct {
	Kind          string
	FirstT, LastT int64  // event times, ns UTC, both inclusive
	Rows          int    // rows in it
	Seq           uint64 // the last record it depends on; set by Commit
	Bytes         []byte
}

// Checkpoint is the state after the record Seq.
type Checkpoint struct {
	Seq    uint64
	Host   int64  // ns UTC, of that record
	State  []byte // opaque; compressed in the file
	Digest []byte // opaque, small
	// Full says that the state stands alone: work can go on from it without any
	// record before it. Only such a one can begin a file or survive as the oldest.
	Full bool
}

// Event is one outcome that is kept by itself: a transition of an alarm, a mark.
type Event struct {
	Epoch, N uint64 // outcome counter; the pair is unique in a file
	T        int64  // event time, ns UTC
	Kind     string
	Seq      uint64 // the last record it depends on; set by Commit
	JSON     []byte
}

// Batch is what one transaction stores. The zero value of each field is left out.
type Batch struct {
	// Records follow the last durable one without a hole; only a gap record
	// (ingest.KindGap) may leave one before itself. Into an empty file the first
	// may have any number.
	Records []ingest.Record
	// Chunks and events depend on a record: an empty file takes none.
	Chunks []Chunk
	Events []Event
	// Checkpoint is the state after the last record of the batch; a batch must
	// end where a checkpoint is taken.
	Checkpoint *Checkpoint
	Header     func(*Header)     // changes the header
	Meta       map[string][]byte // the owner's values
}

// Commit stores the batch in one transaction that is durable when Commit
// returns nil. After an error nothing of it is stored, but for one case that no
// disk can rule out: an error of the final sync leaves it open. Durable is true
// to the file again after the next commit; until then it is what was known.
// Nothing in the batch is kept. Errors: ErrReadOnly, ErrOrder, ErrFull.
func (f *File) Commit(ctx context.Context, b Batch) error {
	size := 0
	err := f.transact(ctx, "commit", func(tx *sql.Tx, t *tail) error {
		packed, err := f.addRecords(ctx, tx, t, b.Records)
		if err != nil {
			return err
		}
		size = packed + t.bytes
		if c := b.Checkpoint; c != nil && t.seq == 0 {
			t.seq, t.host = c.Seq, c.Host // an empty file may begin with a checkpoint
		}
		if t.seq == 0 && len(b.Chunks)+len(b.Events) > 0 {
			return fmt.Errorf("chunks or events before the first record: %w", ErrOrder)
		}
		for _, c := range b.Chunks {
			c.Seq = t.seq
			if err := addChunk(ctx, tx, c); err != nil {
				return err
			}
			size += len(c.Bytes)
		}
		for _, e := range b.Events {
			e.Seq = t.seq
			if err := addEvent(ctx, tx, e); err != nil {
				return err
			}
		}
		if c := b.Checkpoint; c != nil {
			if c.Seq != t.seq {
				return fmt.Errorf("checkpoint %d after record %d: %w", c.Seq, t.seq, ErrOrder)
			}
			if err := f.addCheckpoint(ctx, tx, c); err != nil {
				return err
			}
			size += len(c.State)
		}
		if t.small != 0 && (b.Checkpoint != nil || t.bytes >= sealBytes) {
			if err := f.seal(ctx, tx, t); err != nil {
				return err
			}
		}
		if b.Header != nil {
			if err := updateHeader(ctx, tx, b.Header); err != nil {
				return err
			}
		}
		return putAll(ctx, tx, b.Meta)
	})
	if err == nil {
		f.due(size)
	}
	return err
}

// transact runs fn in one write transaction. It owns the writing connection
// meanwhile, and with it scratch and tail; fn changes its copy of the tail,
// which becomes the file's when the transaction is committed.
func (f *File) transact(ctx context.Context, op string, fn func(*sql.Tx, *tail) error) error {
	if f.write == nil {
		return f.fault(op, "file", ErrReadOnly)
	}
	conn, err := f.write.Conn(ctx)
	if err != nil {
		return f.fault(op, "file", err)
	}
	defer conn.Close() //nolint:errcheck // gives it back to the pool of one
	if err := f.transactOn(ctx, conn, fn); err != nil {
		f.stale = true
		return f.fault(op, "file", err)
	}
	f.stale = false
	return nil
}

func (f *File) transactOn(ctx context.Context, conn *sql.Conn, fn func(*sql.Tx, *tail) error) error {
	tx, err := conn.BeginTx(ctx, nil)
	if err != nil {
		return err
	}
	defer tx.Rollback() //nolint:errcheck // after a commit it has nothing to undo
	t := f.end
	if f.stale {
		if t, err = loadTail(ctx, tx); err != nil {
			return err
		}
	}
	if err := fn(tx, &t); err != nil {
		return err
	}
	if f.opt.BeforeCommit != nil {
		if err := f.opt.BeforeCommit(ctx); err != nil {
			return err
		}
	}
	if err := tx.Commit(); err != nil {
		return err
	}
	f.mu.Lock()
	f.end = t
	f.mu.Unlock()
	return nil
}

// loadTail reads the end of the file. The small records are at most those since
// the last packing, so the walk back is short.
func loadTail(ctx context.Context, q querier) (t tail, err error) {
	rows, err := q.QueryContext(ctx, "SELECT first_seq, last_seq, last_host, codec, bytes FROM records ORDER BY first_seq DESC")
	if err != nil {
		return t, err
	}
	defer rows.Close() //nolint:errcheck // rows.Err tells
	for rows.Next() {
		var first, last uint64
		var host int64
		var codec, size int
		if err := rows.Scan(&first, &last, &host, &codec, &size); err != nil {
			return t, scanError("records", err)
		}
		if t.seq == 0 {
			t.seq, t.host = last, host
		}
		if codec != codecPlain {
			break
		}
		t.small = first
		t.bytes += size
	}
	if err := rows.Err(); err != nil {
		return t, err
	}
	if err := rows.Close(); err != nil {
		return t, err
	}
	if t.seq != 0 {
		return t, nil
	}
	err = q.QueryRowContext(ctx, "SELECT coalesce(max(seq), 0), coalesce(max(host), 0) FROM checkpoints").Scan(&t.seq, &t.host)
	return t, err
}

// addRecords checks and stores records: few as they are, many packed. So a disk that is
// slow, before which records gather, gets the fewer bytes. It gives how many bytes
// were packed into the file.
func (f *File) addRecords(ctx context.Context, tx *sql.Tx, t *tail, records []ingest.Record) (packed int, err error) {
	seq, host := t.seq, t.host
	for i := range records {
		r := &records[i]
		follows := r.Seq == seq+1 || seq == 0 || r.Kind == ingest.KindGap && r.Seq > seq
		if !follows || r.Seq == 0 || r.Seq > math.MaxInt64 || r.Host < host && seq != 0 || r.Kind == ingest.KindInvalid {
			return 0, fmt.Errorf("record %d (kind %d, host %d) after record %d (host %d): %w", r.Seq, r.Kind, r.Host, seq, host, ErrOrder)
		}
		seq, host = r.Seq, r.Host
	}
	for part, size := range pieces(records, sealBytes) {
		codec := codecPlain
		if size >= packBytes { // large enough by itself: nothing is gained by writing it twice
			codec = codecZstd
			if t.small != 0 {
				if err := f.seal(ctx, tx, t); err != nil {
					return 0, err
				}
			}
		}
		n, err := f.addBlob(ctx, tx, part, codec)
		if err != nil {
			return 0, err
		}
		if codec == codecZstd {
			packed += len(f.packed)
			continue
		}
		if t.small == 0 {
			t.small = part[0].Seq
		}
		t.bytes += n
	}
	t.seq, t.host = seq, host
	return packed, nil
}

// pieces cuts records where numbers jump and where a piece has come to limit bytes; with
// each it gives about how many it has.
func pieces(records []ingest.Record, limit int) iter.Seq2[[]ingest.Record, int] {
	return func(yield func([]ingest.Record, int) bool) {
		start, size := 0, 0
		for i := range records {
			if i > start && (size >= limit || records[i].Seq != records[i-1].Seq+1) {
				if !yield(records[start:i], size) {
					return
				}
				start, size = i, 0
			}
			size += weight(&records[i])
		}
		if start < len(records) {
			yield(records[start:], size)
		}
	}
}

// weight is about the encoded size of a record, in bytes.
func weight(r *ingest.Record) int { return 8 + len(r.Payload) + len(r.Topic)/8 }

// addBlob stores consecutive records as one row and gives their encoded size.
func (f *File) addBlob(ctx context.Context, tx *sql.Tx, records []ingest.Record, codec int) (int, error) {
	f.raw = ingest.AppendRecords(f.raw[:0], records)
	first, last := &records[0], &records[len(records)-1]
	b := blob{
		first: first.Seq, last: last.Seq, firstHost: first.Host, lastHost: last.Host,
		codec: codec, bytes: len(f.raw), data: f.raw,
	}
	if codec == codecZstd {
		f.packed = f.enc.EncodeAll(f.raw, f.packed[:0])
		b.data = f.packed
	}
	b.sum = b.checksum()
	return b.bytes, f.insertBlob(ctx, tx, &b)
}

func (f *File) insertBlob(ctx context.Context, tx *sql.Tx, b *blob) error {
	_, err := tx.StmtContext(ctx, f.add).ExecContext(ctx, //nolint:sqlclosecheck // the transaction closes its statements
		int64(b.first), int64(b.last), b.firstHost, b.lastHost, b.codec, b.bytes, b.sum, b.data)
	return err
}

// seal packs the small blobs at the end of the file into few large ones. One
// that is damaged is not touched, so that the damage stays visible, and its
// neighbours stay as they are.
func (f *File) seal(ctx context.Context, tx *sql.Tx, t *tail) error {
	first, total := t.small, t.bytes
	t.small, t.bytes = 0, 0
	rows, err := tx.QueryContext(ctx, "SELECT "+blobColumns+" FROM records WHERE first_seq>=? ORDER BY first_seq", int64(first))
	if err != nil {
		return err
	}
	defer rows.Close() //nolint:errcheck // rows.Err tells
	var records []ingest.Record
	for rows.Next() {
		var b blob
		if err := b.scan(rows); err != nil {
			return err
		}
		if records, _, err = f.decode(records, &b, nil); err != nil {
			return nil //nolint:nilerr // reading will report it; recording goes on
		}
	}
	if err := rows.Err(); err != nil {
		return err
	}
	if err := rows.Close(); err != nil {
		return err
	}
	if _, err := tx.ExecContext(ctx, "DELETE FROM records WHERE first_seq>=?", int64(first)); err != nil {
		return err
	}
	for part := range pieces(records, total/max(1, total/sealBytes)+1) {
		if _, err := f.addBlob(ctx, tx, part, codecZstd); err != nil {
			return err
		}
	}
	return nil
}

func (c *Chunk) checksum() int64 {
	return checksum(c.Bytes, c.Kind, int64(c.Seq), c.FirstT, c.LastT, int64(c.Rows))
}

func addChunk(ctx context.Context, tx *sql.Tx, c Chunk) error {
	_, err := tx.ExecContext(ctx, "INSERT INTO chunks (kind, seq, first_t, last_t, rows, sum, data) VALUES (?,?,?,?,?,?,?)",
		c.Kind, int64(c.Seq), c.FirstT, c.LastT, c.Rows, c.checksum(), notNil(c.Bytes))
	return err
}

func (e *Event) checksum() int64 {
	return checksum(e.JSON, e.Kind, int64(e.Epoch), int64(e.N), int64(e.Seq), e.T)
}

func addEvent(ctx context.Context, tx *sql.Tx, e Event) error {
	_, err := tx.ExecContext(ctx, "INSERT INTO events (epoch, n, seq, t, kind, sum, json) VALUES (?,?,?,?,?,?,?)",
		int64(e.Epoch), int64(e.N), int64(e.Seq), e.T, e.Kind, e.checksum(), notNil(e.JSON))
	if err != nil {
		return fmt.Errorf("event %d.%d: %w", e.Epoch, e.N, err)
	}
	return nil
}

func (f *File) addCheckpoint(ctx context.Context, tx *sql.Tx, c *Checkpoint) error {
	full := int64(0)
	if c.Full {
		full = 1
	}
	f.packed = f.enc.EncodeAll(c.State, f.packed[:0])
	sum := checksum(f.packed, string(c.Digest), int64(c.Seq), c.Host, full)
	// A second checkpoint of the same record (at an orderly stop) replaces the first.
	_, err := tx.ExecContext(ctx, "INSERT OR REPLACE INTO checkpoints (seq, host, full, digest, sum, state) VALUES (?,?,?,?,?,?)",
		int64(c.Seq), c.Host, full, notNil(c.Digest), sum, notNil(f.packed))
	return err
}

// notNil keeps an empty value from being stored as NULL.
func notNil(b []byte) []byte {
	if b == nil {
		return []byte{}
	}
	return b
}
