package runfile

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
)

// States of a run, as they stand in its header.
const (
	StateIdle        = "idle"        // the file that is kept between runs
	StateRunning     = "running"     // being recorded, or the process died
	StateEnded       = "ended"       // ended by engine state or by hand
	StateInterrupted = "interrupted" // found running at start, and not taken up again
)

// Header is what is known of a run as a whole. Its strings are free text for
// this package.
type Header struct {
	ID           string   `json:"id"`
	Number       uint64   `json:"number,omitempty"` // of the run, counted since the first
	Rig          string   `json:"rig"`
	Engine       string   `json:"engine,omitempty"`
	EngineSerial string   `json:"engine_serial,omitempty"`
	Title        string   `json:"title,omitempty"`
	Operator     string   `json:"operator,omitempty"`
	Build        string   `json:"build,omitempty"`  // build id of the last writer
	GOARCH       string   `json:"goarch,omitempty"` // of the last writer
	ConfigHash   string   `json:"config_hash,omitempty"`
	TimeZone     string   `json:"time_zone,omitempty"` // of the facility, "" = UTC
	Started      int64    `json:"started"`             // ns UTC
	Ended        int64    `json:"ended,omitempty"`     // ns UTC, 0 while it goes on
	State        string   `json:"state"`
	Keep         bool     `json:"keep,omitempty"` // never to be removed by retention
	Tags         []string `json:"tags,omitempty"`
	Notes        string   `json:"notes,omitempty"`
	Digest       string   `json:"digest,omitempty"` // over the recorded outcomes, hexadecimal
	Alarms       int      `json:"alarms,omitempty"` // number raised
	Origin       *Origin  `json:"origin,omitempty"` // nil for a run that a watch recorded

	Identity

	// What the engine and the nozzle have been through when the run ended, in the form of
	// whoever writes it; empty before, and where it is not known.
	Life       json.RawMessage `json:"life,omitempty"`
	NozzleLife json.RawMessage `json:"nozzle_life,omitempty"`
}

// Identity says of what a run is a run, as people number and file it.
type Identity struct {
	Designation    string `json:"designation,omitempty"` // number by the scheme of the rig file
	Series         string `json:"series,omitempty"`      // of Designation: the same with a place for the number
	InSeries       uint64 `json:"in_series,omitempty"`   // the number, from 1; never given twice
	Test           string `json:"test,omitempty"`
	Purpose        string `json:"purpose,omitempty"`
	EngineBuild    string `json:"engine_build,omitempty"` // build standard
	NozzleSerial   string `json:"nozzle_serial,omitempty"`
	NozzleMeasured string `json:"nozzle_measured_on,omitempty"` // date of its throat area
	FuelBatch      string `json:"fuel_batch,omitempty"`
	Aborted        bool   `json:"aborted,omitempty"` // it ended, and its start had not reached idle
}

// Kinds of an Origin.
const (
	OriginImport    = "import"    // a recording of another data system
	OriginReduction = "reduction" // a stored run, stepped through another configuration
)

// Origin says what a run was made from that no watch recorded. Its record numbers
// are its own and do not continue those of the data folder. Fields of the other kind are
// zero.
type Origin struct {
	Kind      string `json:"kind"`
	File      string `json:"file,omitempty"`       // name of the recording
	SHA256    string `json:"sha256,omitempty"`     // of its bytes, hexadecimal
	MapSHA256 string `json:"map_sha256,omitempty"` // of the text of the column map, hexadecimal
	Rows      uint64 `json:"rows,omitempty"`       // read
	Bad       uint64 `json:"bad,omitempty"`        // times, cells and lines that could not be used

	Parent       string `json:"parent,omitempty"`        // id of the run that was reduced
	ParentDigest string `json:"parent_digest,omitempty"` // its digest then
	Stepped      string `json:"stepped,omitempty"`       // id that the records themselves give the run
	By           string `json:"by,omitempty"`            // who reduced it
	Zero         string `json:"zero,omitempty"`          // which zeros of the checks were subtracted: before, after or interpolated
}

// Reduction gives the origin of a run that is the reduction of another, nil for any other
// run.
func (h *Header) Reduction() *Origin {
	if h.Origin == nil || h.Origin.Kind != OriginReduction {
		return nil
	}
	return h.Origin
}

// Stepped gives the id that a run has in the outcomes of its records: its own, but for a
// reduction.
func (h *Header) Stepped() string {
	if o := h.Reduction(); o != nil {
		return o.Stepped
	}
	return h.ID
}

// headerKey is where the header lies in the table meta; the owner's keys are
// stored with keyPrefix, so that none can be taken for it.
const (
	headerKey = "header"
	keyPrefix = "x-"
)

func encodeHeader(h Header) ([]byte, error) {
	b, err := json.Marshal(h)
	if err != nil {
		return nil, fmt.Errorf("header: %w", err)
	}
	return b, nil
}

// querier is what reading needs of a database, a connection or a transaction.
type querier interface {
	QueryContext(ctx context.Context, query string, args ...any) (*sql.Rows, error)
	QueryRowContext(ctx context.Context, query string, args ...any) *sql.Row
}

func getMeta(ctx context.Context, q querier, key string) ([]byte, error) {
	var b []byte
	err := q.QueryRowContext(ctx, "SELECT value FROM meta WHERE key=?", key).Scan(&b)
	if errors.Is(err, sql.ErrNoRows) {
		return nil, nil
	}
	return b, err
}

func putMeta(ctx context.Context, tx *sql.Tx, key string, value []byte) error {
	if value == nil {
		value = []byte{}
	}
	_, err := tx.ExecContext(ctx, "INSERT INTO meta (key, value) VALUES (?,?) ON CONFLICT (key) DO UPDATE SET value=excluded.value", key, value)
	return err
}

func getHeader(ctx context.Context, q querier) (h Header, err error) {
	b, err := getMeta(ctx, q, headerKey)
	if err != nil {
		return h, err
	}
	if err := json.Unmarshal(b, &h); err != nil {
		return h, &CorruptError{Table: "meta", Err: fmt.Errorf("header: %w", err)}
	}
	return h, nil
}

// Header reads the header.
func (f *File) Header(ctx context.Context) (Header, error) {
	h, err := getHeader(ctx, f.read)
	if err != nil {
		return h, f.fault("header", "meta", err)
	}
	return h, nil
}

// UpdateHeader changes the header in a transaction of its own: edit gets the
// stored one, so that a note written by one person and an end written by the
// daemon do not undo each other.
func (f *File) UpdateHeader(ctx context.Context, edit func(*Header)) error {
	return f.transact(ctx, "update header", func(tx *sql.Tx, _ *tail) error {
		return updateHeader(ctx, tx, edit)
	})
}

func updateHeader(ctx context.Context, tx *sql.Tx, edit func(*Header)) error {
	h, err := getHeader(ctx, tx)
	if err != nil {
		return err
	}
	edit(&h)
	b, err := encodeHeader(h)
	if err != nil {
		return err
	}
	return putMeta(ctx, tx, headerKey, b)
}

// Meta reads a value that SetMeta or a batch has stored; nil when there is none.
func (f *File) Meta(ctx context.Context, key string) ([]byte, error) {
	b, err := getMeta(ctx, f.read, keyPrefix+key)
	if err != nil {
		return nil, f.fault("meta "+key, "meta", err)
	}
	return b, nil
}

// SetMeta stores values under the owner's own keys (a sink's cursor, say).
func (f *File) SetMeta(ctx context.Context, values map[string][]byte) error {
	return f.transact(ctx, "set meta", func(tx *sql.Tx, _ *tail) error {
		return putAll(ctx, tx, values)
	})
}

func putAll(ctx context.Context, tx *sql.Tx, values map[string][]byte) error {
	for key, value := range values { // the order leaves no trace in the table
		if err := putMeta(ctx, tx, keyPrefix+key, value); err != nil {
			return err
		}
	}
	return nil
}

// fault wraps an error with operation and file.
func (f *File) fault(op, table string, err error) error {
	return fmt.Errorf("run file %q: %s: %w", f.path, op, mapError(table, err))
}
