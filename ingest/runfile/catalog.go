package runfile

import (
	"cmp"
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
)

const (
	catalogID      = 0x74776374 // "twct"
	catalogVersion = 1
)

const catalogSchema = `
CREATE TABLE runs (
	id TEXT PRIMARY KEY, file TEXT NOT NULL, size INTEGER NOT NULL,
	rig TEXT NOT NULL, engine TEXT NOT NULL, engine_serial TEXT NOT NULL,
	started INTEGER NOT NULL, ended INTEGER NOT NULL, state TEXT NOT NULL, keep INTEGER NOT NULL,
	alarms INTEGER NOT NULL, header TEXT NOT NULL);
CREATE INDEX runs_started ON runs (started);`

var (
	// ErrUnknownRun is returned when the catalogue has no run of that id.
	ErrUnknownRun = errors.New("unknown run")
	// ErrKept is returned by Delete for a run that is marked to be kept.
	ErrKept = errors.New("run is marked keep: take the mark away first")
)

// Catalog lists the run files of one folder. It only repeats what their headers
// say, so it may be lost at any time.
type Catalog struct {
	db  *sql.DB
	dir string
}

// Run is a line of the catalogue.
type Run struct {
	Header
	File string `json:"file"` // name in the folder of runs
	Size int64  `json:"size"` // bytes on the disk, log included
}

// OpenCatalog opens the catalogue at path over the folder of runs dir. A
// catalogue that is missing, damaged or of another version is made anew from
// the run files; files that could not be read then are found by Rebuild.
// ErrNotRunFile is returned for a database that is none of ours.
func OpenCatalog(ctx context.Context, path, dir string) (*Catalog, error) {
	c, err := openCatalog(ctx, path, dir)
	if errors.Is(err, ErrCorrupt) || errors.Is(err, ErrVersion) {
		if err = unlink(path); err == nil {
			c, err = openCatalog(ctx, path, dir)
		}
	}
	if err != nil {
		return nil, fmt.Errorf("open catalogue %q: %w", path, err)
	}
	return c, nil
}

func openCatalog(ctx context.Context, path, dir string) (*Catalog, error) {
	db, err := connect(path, "rwc", 1, "synchronous(NORMAL)")
	if err != nil {
		return nil, err
	}
	c := &Catalog{db: db, dir: dir}
	var pages int // none: just made, or its making was interrupted
	if err = db.QueryRowContext(ctx, "PRAGMA page_count").Scan(&pages); err == nil {
		if pages == 0 {
			_, err = c.rebuild(ctx)
		} else {
			err = identify(ctx, db, catalogID, catalogVersion)
		}
	}
	if err == nil {
		// Only now: it changes the file, which must be ours.
		_, err = db.ExecContext(ctx, "PRAGMA journal_mode=WAL")
	}
	if err != nil {
		return nil, errors.Join(mapError("catalogue", err), db.Close())
	}
	return c, nil
}

// Close closes the catalogue.
func (c *Catalog) Close() error { return c.db.Close() }

// Rebuild fills the catalogue anew from the headers of the run files (*.db) in
// the folder. Files that cannot be read, or that repeat the id of another, are
// left out and reported one by one in faults; they hinder nothing else.
func (c *Catalog) Rebuild(ctx context.Context) (faults []error, err error) {
	faults, err = c.rebuild(ctx)
	if err != nil {
		return faults, fmt.Errorf("rebuild catalogue: %w", mapError("catalogue", err))
	}
	return faults, nil
}

func (c *Catalog) rebuild(ctx context.Context) (faults []error, err error) {
	paths, err := filepath.Glob(filepath.Join(escapeGlob(c.dir), "*.db"))
	if err != nil {
		return nil, err
	}
	runs := make([]Run, 0, len(paths))
	files := map[string]string{} // by id
	for _, path := range paths {
		r, err := ReadRun(ctx, path)
		if errors.Is(err, context.Canceled) || errors.Is(err, context.DeadlineExceeded) {
			return faults, err
		}
		if other := files[r.ID]; err == nil && other != "" {
			err = fmt.Errorf("run file %q: id %q is that of %q", path, r.ID, other)
		}
		if err != nil {
			faults = append(faults, err)
			continue
		}
		files[r.ID] = r.File
		runs = append(runs, r)
	}
	tx, err := c.db.BeginTx(ctx, nil)
	if err != nil {
		return faults, err
	}
	defer tx.Rollback() //nolint:errcheck // after a commit it has nothing to undo
	identity := fmt.Sprintf("DROP TABLE IF EXISTS runs; PRAGMA application_id=%d; PRAGMA user_version=%d;", catalogID, catalogVersion)
	if _, err := tx.ExecContext(ctx, identity+catalogSchema); err != nil {
		return faults, err
	}
	for i := range runs {
		if err := upsert(ctx, tx, &runs[i]); err != nil {
			return faults, err
		}
	}
	return faults, tx.Commit()
}

// escapeGlob keeps the signs of a folder's name from being taken for a pattern.
func escapeGlob(dir string) string {
	if filepath.Separator == '\\' {
		return dir // Windows has no escape, and no such names
	}
	return strings.NewReplacer(`\`, `\\`, `*`, `\*`, `?`, `\?`, `[`, `\[`).Replace(dir)
}

// ReadRun makes the catalogue's line for the run file at path.
func ReadRun(ctx context.Context, path string) (Run, error) {
	f, err := Open(ctx, path, ReadOnly, Options{})
	if err != nil {
		return Run{}, err
	}
	h, err := f.Header(ctx)
	if err := errors.Join(err, f.Close()); err != nil {
		return Run{}, err
	}
	r := Run{Header: h, File: filepath.Base(path)}
	for _, suffix := range []string{"", "-wal"} {
		info, err := os.Stat(path + suffix)
		switch {
		case err == nil:
			r.Size += info.Size()
		case suffix == "" || !errors.Is(err, fs.ErrNotExist):
			return Run{}, err
		}
	}
	return r, nil
}

// Upsert stores or replaces the line of a run.
func (c *Catalog) Upsert(ctx context.Context, r Run) error {
	if r.ID == "" || r.File == "" || r.File != filepath.Base(r.File) {
		return fmt.Errorf("catalogue: run %q in file %q: an id and a bare file name are needed", r.ID, r.File)
	}
	tx, err := c.db.BeginTx(ctx, nil)
	if err == nil {
		defer tx.Rollback() //nolint:errcheck // after a commit it has nothing to undo
		if err = upsert(ctx, tx, &r); err == nil {
			err = tx.Commit()
		}
	}
	if err != nil {
		return fmt.Errorf("catalogue: run %q: %w", r.ID, mapError("catalogue", err))
	}
	return nil
}

func upsert(ctx context.Context, tx *sql.Tx, r *Run) error {
	header, err := encodeHeader(r.Header)
	if err != nil {
		return err
	}
	_, err = tx.ExecContext(ctx, `INSERT OR REPLACE INTO runs
		(id, file, size, rig, engine, engine_serial, started, ended, state, keep, alarms, header) VALUES (?,?,?,?,?,?,?,?,?,?,?,?)`,
		r.ID, r.File, r.Size, r.Rig, r.Engine, r.EngineSerial, r.Started, r.Ended, r.State, r.Keep, r.Alarms, string(header))
	return err
}

// Filter narrows a list of runs; a zero field does not narrow.
type Filter struct {
	Rig, Engine, EngineSerial, State string
	Tag                              string
	Text                             string // somewhere in the header, case aside
	From, To                         int64  // started at or after From and before To, ns UTC
	Limit                            int    // at most so many, the newest
}

// Families gives the runs in the same order, but that the reductions of a run that is
// among them come right behind it, the first first.
func Families(runs []Run) []Run {
	children := map[string][]Run{}
	known := map[string]bool{}
	for i := range runs {
		known[runs[i].ID] = true
	}
	var heads []Run
	for i := range runs {
		if o := runs[i].Reduction(); o != nil && known[o.Parent] && o.Parent != runs[i].ID {
			children[o.Parent] = append(children[o.Parent], runs[i])
		} else {
			heads = append(heads, runs[i])
		}
	}
	out := make([]Run, 0, len(runs))
	var add func(family []Run)
	add = func(family []Run) {
		for i := range family {
			out = append(out, family[i])
			below := children[family[i].ID]
			slices.SortStableFunc(below, func(a, b Run) int {
				return cmp.Or(cmp.Compare(len(a.ID), len(b.ID)), cmp.Compare(a.ID, b.ID)) // r2 before r10
			})
			add(below)
		}
	}
	add(heads)
	return out
}

// List gives the runs that pass the filter, the newest first.
func (c *Catalog) List(ctx context.Context, filter Filter) ([]Run, error) {
	if filter.To == 0 {
		filter.To = math.MaxInt64
	}
	if filter.Limit == 0 {
		filter.Limit = -1 // none, to SQLite
	}
	return c.list(ctx, `WHERE (?1='' OR rig=?1) AND (?2='' OR engine=?2) AND (?3='' OR engine_serial=?3) AND (?4='' OR state=?4)
		AND (?5='' OR EXISTS (SELECT 1 FROM json_each(header, '$.tags') WHERE value=?5))
		AND (?6='' OR instr(lower(header), lower(?6))>0) AND started>=?7 AND started<?8
		ORDER BY started DESC, id LIMIT ?9`,
		filter.Rig, filter.Engine, filter.EngineSerial, filter.State, filter.Tag, filter.Text, filter.From, filter.To, filter.Limit)
}

// Get gives one run, or ErrUnknownRun.
func (c *Catalog) Get(ctx context.Context, id string) (Run, error) {
	runs, err := c.list(ctx, "WHERE id=?", id)
	if err == nil && len(runs) == 0 {
		err = fmt.Errorf("run %q: %w", id, ErrUnknownRun)
	}
	if err != nil {
		return Run{}, err
	}
	return runs[0], nil
}

func (c *Catalog) list(ctx context.Context, where string, args ...any) ([]Run, error) {
	wrap := func(err error) error { return fmt.Errorf("catalogue: list: %w", mapError("catalogue", err)) }
	rows, err := c.db.QueryContext(ctx, "SELECT file, size, header FROM runs "+where, args...)
	if err != nil {
		return nil, wrap(err)
	}
	defer rows.Close() //nolint:errcheck // rows.Err tells
	var runs []Run
	for rows.Next() {
		var r Run
		var header []byte
		if err := rows.Scan(&r.File, &r.Size, &header); err != nil {
			return nil, wrap(err)
		}
		if err := json.Unmarshal(header, &r.Header); err != nil {
			return nil, wrap(&CorruptError{Table: "catalogue", Err: err})
		}
		runs = append(runs, r)
	}
	if err := rows.Err(); err != nil {
		return nil, wrap(err)
	}
	return runs, nil
}

// Path gives the path of a run's file.
func (c *Catalog) Path(r Run) string { return filepath.Join(c.dir, r.File) }

// Retention says which runs are kept; a zero field removes none.
type Retention struct {
	Age   int64 // ns: a run that ended longer ago is removed
	Bytes int64 // of all run files together: the runs that ended first go until the rest fits
}

// Expired gives the runs that r removes at now, ns UTC, those that ended first
// first: never one that is marked keep or has not ended. What is kept or running
// counts toward the bytes.
func (c *Catalog) Expired(ctx context.Context, r Retention, now int64) ([]Run, error) {
	runs, err := c.list(ctx, "ORDER BY ended, id")
	if err != nil {
		return nil, err
	}
	var total int64
	for i := range runs {
		total += runs[i].Size
	}
	var out []Run
	for i := range runs {
		run := &runs[i]
		old := r.Age > 0 && now-run.Ended > r.Age
		if run.Keep || run.State != StateEnded || !old && (r.Bytes <= 0 || total <= r.Bytes) {
			continue
		}
		total -= run.Size
		out = append(out, *run)
	}
	return out, nil
}

// Annotate changes what people say of a run, in its file and in the catalogue. The
// file must not be open for writing elsewhere. Errors: ErrUnknownRun, those of Open.
func (c *Catalog) Annotate(ctx context.Context, id string, edit func(*Header)) (run Run, err error) {
	if run, err = c.Get(ctx, id); err != nil {
		return Run{}, err
	}
	path := c.Path(run)
	f, err := Open(ctx, path, ReadWrite, Options{})
	if err != nil {
		return Run{}, err
	}
	if err := errors.Join(f.UpdateHeader(ctx, edit), f.Close()); err != nil {
		return Run{}, err
	}
	if run, err = ReadRun(ctx, path); err != nil {
		return Run{}, err
	}
	return run, c.Upsert(ctx, run)
}

// Delete unlinks a run's file with what belongs to it, and its line. The file
// must not be open here. The file's own header decides whether it is kept
// (ErrKept), as the catalogue may be behind; a file that cannot be read any more
// is judged by the catalogue. Errors: ErrUnknownRun, ErrKept.
func (c *Catalog) Delete(ctx context.Context, id string) error {
	r, err := c.Get(ctx, id)
	if err != nil {
		return err
	}
	keep := r.Keep
	if now, err := ReadRun(ctx, c.Path(r)); err == nil {
		keep = now.Keep
	}
	if keep {
		return fmt.Errorf("delete run %q: %w", id, ErrKept)
	}
	if err := Remove(c.Path(r)); err != nil {
		return fmt.Errorf("delete run %q: %w", id, err)
	}
	if _, err := c.db.ExecContext(ctx, "DELETE FROM runs WHERE id=?", id); err != nil {
		return fmt.Errorf("delete run %q: %w", id, mapError("catalogue", err))
	}
	return nil
}
