// Package runfile keeps one run of one rig in one SQLite file: the records in
// the order they were stepped, the checkpoints of the state, the column chunks
// and the events computed from them. It is the only package that speaks SQL.
// What the bytes mean belongs to others; of the records it knows only number
// and host time.
//
// # Promises
//
// A commit is one transaction and is on the disk when Commit returns (WAL,
// synchronous FULL), so a killed process loses nothing that was committed and
// a reader never sees half a commit. Records have no holes but those that a
// gap record names. Every stored blob carries an xxHash64 checksum over itself
// and its row; a damaged one is reported with its row and is never returned.
// A file that was closed is one single file without companions: it may be
// copied, mailed or unlinked as it is. While it is open, or after a crash,
// "-wal" and "-shm" beside it belong to it.
//
// # Who may do what
//
// One process opens a file for writing. Inside it every method may be called
// from any goroutine: writers take turns on the one writing connection and wait
// for it as long as their context allows. Readers, in this and in other
// processes, never hold up a writer. They read in short transactions bounded by
// size (4 MiB or 256 rows) and call back outside of them, so a slow callback
// pins no log. Four read at once, further ones wait for their turn.
//
// # Format
//
// Records lie as they were committed until about 1 MiB has come together or a
// checkpoint comes; then they are packed again into blobs of about 1 MiB under
// zstd in the same transaction. Those of a commit of 256 KiB and more are packed at
// once, after what lies there still. A checkpoint therefore always lies on a blob
// boundary. The rowid of a blob is its first record number, so no index is kept
// beside it; a host time is found by bisection, as host time never falls.
// Times are integers in ns UTC. Rows of chunks, events and checkpoints carry
// the number of the last record that they depend on (seq).
package runfile

import (
	"context"
	"database/sql"
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"sync"

	"github.com/cespare/xxhash/v2"
	"github.com/klauspost/compress/zstd"
	"modernc.org/sqlite"
	sqlite3 "modernc.org/sqlite/lib"
)

// Identity of the format, kept in the file's header (PRAGMA application_id and
// user_version), so that a foreign database or a later format is refused.
const (
	applicationID = 0x74777266 // "twrf"
	formatVersion = 1
	pageSize      = 1 << 14 // bytes: blobs of 3 to 100 kB cost least in pages of this size
)

// Bounds of what is read or packed at a time.
const (
	sealBytes   = 1 << 20 // small records are packed when this much has come together
	packBytes   = 1 << 18 // records that come together in one commit are packed at once from this size on
	pageBytes   = 4 << 20 // one read transaction ends after this much …
	pageRows    = 256     // … or this many rows
	readers     = 4       // read transactions at once
	writerCache = 16384   // KiB of page cache: packing 2 MiB must not spill
)

const schema = `
CREATE TABLE meta (key TEXT PRIMARY KEY, value BLOB NOT NULL) WITHOUT ROWID;
CREATE TABLE records (
	first_seq INTEGER PRIMARY KEY, last_seq INTEGER NOT NULL,
	first_host INTEGER NOT NULL, last_host INTEGER NOT NULL,
	codec INTEGER NOT NULL, bytes INTEGER NOT NULL, sum INTEGER NOT NULL, data BLOB NOT NULL);
CREATE TABLE checkpoints (
	seq INTEGER PRIMARY KEY, host INTEGER NOT NULL, full INTEGER NOT NULL,
	digest BLOB NOT NULL, sum INTEGER NOT NULL, state BLOB NOT NULL);
CREATE TABLE chunks (
	id INTEGER PRIMARY KEY, kind TEXT NOT NULL, seq INTEGER NOT NULL,
	first_t INTEGER NOT NULL, last_t INTEGER NOT NULL, rows INTEGER NOT NULL, sum INTEGER NOT NULL, data BLOB NOT NULL);
CREATE INDEX chunks_time ON chunks (kind, first_t, last_t);
CREATE TABLE events (
	id INTEGER PRIMARY KEY, epoch INTEGER NOT NULL, n INTEGER NOT NULL, seq INTEGER NOT NULL,
	t INTEGER NOT NULL, kind TEXT NOT NULL, sum INTEGER NOT NULL, json BLOB NOT NULL, UNIQUE (epoch, n));
CREATE INDEX events_time ON events (t);`

var (
	// ErrNotRunFile is returned when a file is not one of ours, or was never finished.
	ErrNotRunFile = errors.New("not a run file")
	// ErrVersion is returned when a file has a format that this build does not know.
	ErrVersion = errors.New("format of another version")
	// ErrReadOnly is returned by every method that writes on a file opened for reading.
	ErrReadOnly = errors.New("opened read only")
	// ErrFull is returned when the disk, or the file's quota, is full.
	ErrFull = errors.New("disk full: free space or move the data folder")
	// ErrCorrupt is returned when stored bytes are damaged; *CorruptError says where.
	ErrCorrupt = errors.New("damaged")
	// ErrGap is returned when a record is missing; *GapError names it.
	ErrGap = errors.New("record missing")
	// ErrOrder is returned by Commit and CopyFrom when what they were given does
	// not follow what the file holds. Nothing is stored.
	ErrOrder = errors.New("out of order")
	// ErrNoCheckpoint is returned when no checkpoint fits the question.
	ErrNoCheckpoint = errors.New("no checkpoint")
)

// CorruptError says which row is damaged. It is an ErrCorrupt.
type CorruptError struct {
	Table string
	Row   uint64 // rowid; 0 when the damage is in the file's own structure
	Err   error
}

func (e *CorruptError) Error() string {
	if e.Row == 0 {
		return fmt.Sprintf("%s: damaged: %v", e.Table, e.Err)
	}
	return fmt.Sprintf("%s row %d: damaged: %v", e.Table, e.Row, e.Err)
}

// Unwrap gives ErrCorrupt and the cause.
func (e *CorruptError) Unwrap() []error { return []error{ErrCorrupt, e.Err} }

// GapError names a hole in the records that no gap record explains. It is an ErrGap.
type GapError struct {
	Missing uint64 // the first missing record
	Next    uint64 // the record that was found instead
}

func (e *GapError) Error() string {
	return fmt.Sprintf("record %d missing: next stored is %d", e.Missing, e.Next)
}

// Unwrap gives ErrGap.
func (e *GapError) Unwrap() error { return ErrGap }

var errChecksum = errors.New("checksum does not match")

// Mode says what an opened file is for.
type Mode uint8

// The modes of Open. ReadOnly never changes the file.
const (
	ReadOnly Mode = iota
	ReadWrite
)

// Options change how a file is opened; the zero value is what the daemon uses.
type Options struct {
	// BeforeCommit, if set, is called inside every write transaction just before
	// it is committed. It exists so that tests can stall a commit or, by an
	// error, make it fail like a broken disk.
	BeforeCommit func(context.Context) error
	// Seed, if set, makes Create copy a part of another file before the new file
	// gets its name.
	Seed *Seed
}

// Seed is the part of another file with which a new one begins: see CopyFrom.
type Seed struct {
	From        *File
	After, Upto uint64
}

// tail is the end of the file, known by the writer without asking the database.
type tail struct {
	seq   uint64 // the last durable record; 0 when there is none
	host  int64  // its host time, ns UTC
	small uint64 // first record that is not yet packed; 0 when there is none
	bytes int    // of the records from small on, as encoded
}

// File is an open run file.
type File struct {
	path string
	opt  Options

	write *sql.DB   // one connection; nil when read only. Holding it is the right to write.
	fold  *sql.DB   // one connection for moving the log into the file; nil when read only
	read  *sql.DB   // up to four, read only
	add   *sql.Stmt // inserts a blob of records

	dec *zstd.Decoder
	enc *zstd.Encoder

	// Scratch of whoever holds the writing connection.
	raw, packed []byte
	stale       bool // the last write failed: read the tail again before the next

	mu      sync.Mutex // protects end and the fields of the log below
	end     tail
	pending int   // bytes committed since the log was last folded
	frames  int   // pages in the log when it was last folded
	foldErr error // of the last fold

	wake chan struct{} // one slot: full means a fold is due already
}

// Create makes a new run file at path and opens it for writing. The file is
// built under another name in the same folder, path + ".new", and renamed when
// it is complete with header and seed, so a half-made file is never taken for
// a run: what an interrupted Create left is overwritten by the next. It returns
// fs.ErrExist if there is a file at path.
func Create(ctx context.Context, path string, h Header, opt Options) (*File, error) {
	f, err := create(ctx, path, h, opt)
	if err != nil {
		return nil, fmt.Errorf("create run file %q: %w", path, mapError("file", err))
	}
	return f, nil
}

func create(ctx context.Context, path string, h Header, opt Options) (*File, error) {
	// One process owns the folder, so nobody takes the name between here and the rename.
	if _, err := os.Lstat(path); !errors.Is(err, fs.ErrNotExist) {
		if err == nil {
			err = fs.ErrExist
		}
		return nil, err
	}
	// A log that outlived its file would be replayed over the new one.
	temp := path + ".new"
	if err := errors.Join(unlink(temp), unlink(path)); err != nil {
		return nil, err
	}
	if err := build(ctx, temp, h, opt); err != nil {
		return nil, errors.Join(err, unlink(temp))
	}
	if err := os.Rename(temp, path); err != nil {
		return nil, err
	}
	if err := syncDir(filepath.Dir(path)); err != nil {
		return nil, err
	}
	return Open(ctx, path, ReadWrite, opt)
}

// build writes a complete file at path, with a rollback journal, and closes it.
func build(ctx context.Context, path string, h Header, opt Options) (err error) {
	db, err := connect(path, "rwc", 1, "synchronous(FULL)")
	if err != nil {
		return err
	}
	f, err := newFile(path, opt)
	if err != nil {
		return errors.Join(err, db.Close())
	}
	f.write = db
	defer func() { err = errors.Join(err, f.closeAll()) }()
	head, err := encodeHeader(h)
	if err != nil {
		return err
	}
	// In this order: the second pragma already writes the first page.
	if _, err := db.ExecContext(ctx, fmt.Sprintf("PRAGMA page_size=%d; PRAGMA auto_vacuum=INCREMENTAL", pageSize)); err != nil {
		return err
	}
	tx, err := db.BeginTx(ctx, nil)
	if err != nil {
		return err
	}
	defer tx.Rollback() //nolint:errcheck // after a commit it has nothing to undo
	identity := fmt.Sprintf("PRAGMA application_id=%d; PRAGMA user_version=%d;", applicationID, formatVersion)
	if _, err := tx.ExecContext(ctx, identity+schema); err != nil {
		return err
	}
	if err := putMeta(ctx, tx, headerKey, head); err != nil {
		return err
	}
	if err := tx.Commit(); err != nil {
		return err
	}
	if opt.Seed == nil {
		return nil
	}
	if err := f.prepare(ctx); err != nil {
		return err
	}
	return f.CopyFrom(ctx, opt.Seed.From, opt.Seed.After, opt.Seed.Upto)
}

// Open opens the run file at path. It returns fs.ErrNotExist, ErrNotRunFile,
// ErrVersion or ErrCorrupt. A file whose end was cut off opens ReadOnly, so that
// what is left of it can be read; the methods then return ErrCorrupt after what
// they could read.
func Open(ctx context.Context, path string, mode Mode, opt Options) (*File, error) {
	f, err := open(ctx, path, mode, opt)
	if err != nil {
		return nil, fmt.Errorf("open run file %q: %w", path, mapError("file", err))
	}
	return f, nil
}

func open(ctx context.Context, path string, mode Mode, opt Options) (*File, error) {
	if _, err := os.Stat(path); err != nil {
		return nil, err
	}
	f, err := newFile(path, opt)
	if err != nil {
		return nil, err
	}
	if err := f.connectAll(ctx, mode); err != nil {
		return nil, errors.Join(err, f.closeAll())
	}
	return f, nil
}

// rollBack undoes the change of a file that was cut off while it went over to the log
// or left it: that is done by a rollback journal, which a reader may not touch.
func rollBack(ctx context.Context, path string) error {
	db, err := connect(path, "rw", 1)
	if err != nil {
		return err
	}
	var tables int // any reading does it
	err = db.QueryRowContext(ctx, "SELECT count(*) FROM sqlite_schema").Scan(&tables)
	return errors.Join(err, db.Close())
}

func newFile(path string, opt Options) (*File, error) {
	dec, err := zstd.NewReader(nil, zstd.WithDecoderConcurrency(1), zstd.WithDecoderMaxMemory(1<<30))
	if err != nil {
		return nil, err
	}
	enc, err := zstd.NewWriter(nil, zstd.WithEncoderConcurrency(1), zstd.WithEncoderLevel(zstd.SpeedFastest))
	if err != nil {
		return nil, err
	}
	return &File{path: path, opt: opt, dec: dec, enc: enc, wake: make(chan struct{}, 1)}, nil
}

// connectAll opens the connections. The reading one comes first: nothing may be
// changed in a file that turns out not to be ours.
func (f *File) connectAll(ctx context.Context, mode Mode) (err error) {
	if f.read, err = connect(f.path, "ro", readers); err != nil {
		return err
	}
	err = identify(ctx, f.read, applicationID, formatVersion)
	if code(err) == sqlite3.SQLITE_READONLY_ROLLBACK {
		if err = rollBack(ctx, f.path); err == nil {
			err = identify(ctx, f.read, applicationID, formatVersion)
		}
	}
	if mode == ReadOnly {
		if isDamage(err) {
			// SQLite refuses a file that is shorter than its header says, unless
			// told that the caller repairs it by hand. Here nothing can be written.
			err = f.read.Close()
			f.read = nil
			if err != nil {
				return err
			}
			if f.read, err = connect(f.path, "ro", readers, "writable_schema(1)"); err != nil {
				return err
			}
			err = identify(ctx, f.read, applicationID, formatVersion)
		}
		if err != nil {
			return err
		}
		f.end, err = loadTail(ctx, f.read)
		if errors.Is(mapError("records", err), ErrCorrupt) {
			return nil // the reading methods will say so, after what they can read
		}
		return err
	}
	if err != nil {
		return err
	}
	pragmas := []string{"journal_mode(WAL)", "synchronous(FULL)", "wal_autocheckpoint(0)"}
	if f.write, err = connect(f.path, "rw", 1, append(pragmas, fmt.Sprintf("cache_size(-%d)", writerCache))...); err != nil {
		return err
	}
	var journal string
	if err := f.write.QueryRowContext(ctx, "PRAGMA journal_mode").Scan(&journal); err != nil {
		return err
	}
	if journal != "wal" {
		return fmt.Errorf("journal mode is %q: another process holds the file, or its disk has no shared memory", journal)
	}
	// While a fold waits for readers it may hold the writer up: it does not wait long.
	if f.fold, err = connect(f.path, "rw", 1, "busy_timeout(100)", "synchronous(FULL)", "wal_autocheckpoint(0)"); err != nil {
		return err
	}
	if f.end, err = loadTail(ctx, f.write); err != nil {
		return err
	}
	return f.prepare(ctx)
}

func (f *File) prepare(ctx context.Context) (err error) {
	f.add, err = f.write.PrepareContext(ctx, `INSERT INTO records
		(first_seq, last_seq, first_host, last_host, codec, bytes, sum, data) VALUES (?,?,?,?,?,?,?,?)`)
	return err
}

// Close folds the log into the file and closes it. Afterwards, if nobody else
// has it open, the file stands alone.
func (f *File) Close() error {
	if err := f.closeAll(); err != nil {
		return fmt.Errorf("close run file %q: %w", f.path, err)
	}
	return nil
}

func (f *File) closeAll() error {
	var errs []error
	closeDB := func(db *sql.DB) {
		if db != nil {
			errs = append(errs, db.Close())
		}
	}
	closeDB(f.read)
	closeDB(f.fold)
	if f.add != nil {
		errs = append(errs, f.add.Close())
	}
	if f.write != nil {
		// Leaving WAL needs the file for itself. If another process still reads it,
		// the file stays as it is: whole, but with its log beside it.
		_, _ = f.write.ExecContext(context.Background(), "PRAGMA busy_timeout=100; PRAGMA journal_mode=DELETE;")
	}
	closeDB(f.write)
	f.dec.Close()
	return errors.Join(errs...)
}

// Path gives the path the file was opened by.
func (f *File) Path() string { return f.path }

// Durable gives number and host time (ns UTC) of the last record that is on the
// disk, counting the records before a checkpoint with which the file begins;
// 0, 0 for an empty file. On a file opened ReadOnly it is the state at Open.
func (f *File) Durable() (seq uint64, host int64) {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.end.seq, f.end.host
}

// Remove unlinks the run file at path and what belongs to it. A file that does
// not exist is no error. It must not be open.
func Remove(path string) error {
	if err := unlink(path); err != nil {
		return fmt.Errorf("remove run file: %w", err)
	}
	return nil
}

// unlink removes a database, first itself, so that no half of it is ever listed.
func unlink(path string) error {
	for _, suffix := range []string{"", "-wal", "-shm", "-journal"} {
		if err := os.Remove(path + suffix); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return err
		}
	}
	return nil
}

func syncDir(dir string) error {
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}

// connect makes a pool of up to n connections to the database at path; mode is
// SQLite's ro, rw or rwc. Pragmas go into the name because that is the only way
// to reach every connection of a pool.
func connect(path, mode string, n int, pragmas ...string) (*sql.DB, error) {
	abs, err := filepath.Abs(path)
	if err != nil {
		return nil, err
	}
	abs = filepath.ToSlash(abs)
	if !strings.HasPrefix(abs, "/") {
		abs = "/" + abs // C:/… on Windows
	}
	q := url.Values{"mode": {mode}, "_txlock": {"immediate"}, "_pragma": {"busy_timeout(5000)"}}
	for _, p := range pragmas {
		if strings.HasPrefix(p, "busy_timeout") {
			q.Set("_pragma", p)
			continue
		}
		q.Add("_pragma", p)
	}
	name := url.URL{Scheme: "file", OmitHost: true, Path: abs, RawQuery: q.Encode()}
	db, err := sql.Open("sqlite", name.String())
	if err != nil {
		return nil, err
	}
	db.SetMaxOpenConns(n)
	db.SetMaxIdleConns(n)
	return db, nil
}

// identify checks the identity of the database.
func identify(ctx context.Context, db *sql.DB, application, version int) error {
	var app, v int
	if err := db.QueryRowContext(ctx, "SELECT application_id, user_version FROM pragma_application_id, pragma_user_version").Scan(&app, &v); err != nil {
		return err
	}
	switch {
	case app != application:
		return fmt.Errorf("application id %#x: %w", app, ErrNotRunFile)
	case v != version:
		return fmt.Errorf("format %d, this build reads %d: %w", v, version, ErrVersion)
	}
	return nil
}

// code gives SQLite's extended result code; 0 when the error is not its own.
func code(err error) int {
	if e, ok := errors.AsType[*sqlite.Error](err); ok {
		return e.Code()
	}
	return 0
}

// isDamage tells whether SQLite found a file that is no database, broken or cut.
func isDamage(err error) bool {
	c := code(err)
	return c&0xff == sqlite3.SQLITE_CORRUPT || c&0xff == sqlite3.SQLITE_NOTADB || c == sqlite3.SQLITE_IOERR_SHORT_READ
}

// mapError turns what SQLite says into the errors a caller decides on.
func mapError(table string, err error) error {
	switch {
	case errors.Is(err, ErrCorrupt), errors.Is(err, ErrFull):
		return err
	case isDamage(err):
		return &CorruptError{Table: table, Err: err}
	case code(err)&0xff == sqlite3.SQLITE_FULL:
		return fmt.Errorf("%w: %w", ErrFull, err)
	}
	return err
}

// checksum is xxHash64 over the numbers, the text and the data of a row.
func checksum(data []byte, text string, numbers ...int64) int64 {
	var d xxhash.Digest
	d.Reset()
	var b [8]byte
	for _, n := range numbers {
		binary.LittleEndian.PutUint64(b[:], uint64(n))
		_, _ = d.Write(b[:]) // never fails
	}
	_, _ = d.WriteString(text)
	_, _ = d.Write(data)
	return int64(d.Sum64())
}
