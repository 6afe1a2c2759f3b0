// Package influx writes recorded outcomes to a site's time-series database over
// the InfluxDB 2 write API. It is the only home of that client.
//
// # Promises
//
// A Sink follows what is recorded by a cursor that it moves, and stores, only when
// the database has taken the rows before it. An outage of the database therefore
// loses nothing while the records are kept, a restart resumes, and rows that were
// under way when something broke are written again: a row is known by measurement,
// rig and time, so the second copy replaces the first. The sink holds one batch of
// rows and nothing else; while the database does not answer, the rest waits where
// it is recorded.
//
// Lines that the database refuses for what is in them are found by halving the
// batch and kept in a file of line protocol that can be written again by hand once
// the cause is gone. When that file is full the sink waits: nothing is dropped.
// Only what is older than the bucket keeps is let go, and counted: the database
// would not hold it.
//
// # Data model
//
// The one tag is rig, so the number of series is bounded; the run is a field.
//
//	operating_point  a float field per quantity in SI by its key (npr, mass_flow_kg_s …),
//	                 strings choke_state, phase, back_pressure_from,
//	                 total_pressure_from, total_temperature_from, run,
//	                 booleans choke_marginal, choke_armed, lit, steady
//	channel          a float field per channel by its id, in SI, absolute for gauge
//	                 pressures; a string field quality.<id>; run
//	alarm            one point per change of an alarm
//	mark, run        one point per mark, per begin and end of a run
//
// Numbers are floats, always: a field that is once an integer and once a float is
// refused by the database. What is not available is left out, never a NaN.
//
// # Servers
//
// The same write API is spoken by InfluxDB 1.8, where the bucket is
// database/retention-policy, the organisation is empty and the token is
// user:password. Tests run against a real 1.8 server. No test has run against a
// server of version 2 or 3, which are not to be had as a Go program: their answers
// are played by a stand-in with the documented status codes and bodies.
package influx

import (
	"context"
	"errors"
	"fmt"
	"math"
	"net/url"
	"strings"
	"time"

	"github.com/influxdata/influxdb-client-go/v2/api/write"
)

// Cursor says how far the recorded outcomes are in the database. The zero value is
// the beginning.
type Cursor struct {
	Seq uint64 `json:"seq"` // everything recorded up to this record
	Row int    `json:"row"` // and so many rows after it
	T   int64  `json:"t"`   // event time of the last row, or host time without a newer one; ns UTC

	// The run that the source knows of at this place; times in ns UTC, Ended is 0
	// while it goes on.
	Run     string `json:"run,omitempty"`
	Started int64  `json:"started,omitempty"`
	Ended   int64  `json:"ended,omitempty"`
}

// Source gives recorded outcomes. Follow gives at most limit rows after a cursor,
// in an order that never changes, and the cursor behind them; no rows when there
// is nothing more.
type Source interface {
	Follow(ctx context.Context, after Cursor, limit int) (rows []Row, next Cursor, err error)
}

// CursorStore keeps the cursor over a restart. Load gives the zero Cursor when
// none was saved.
type CursorStore interface {
	Load() (Cursor, error)
	Save(c Cursor) error
}

// Row is one point of the database.
type Row struct {
	Measurement string
	T           int64 // ns UTC
	Fields      []Field
}

// Field is a value of a row: make it by Float, Text or Bool.
type Field struct {
	Key   string
	value any
}

// Float gives a field with a number in SI. NaN and infinities are left out of what
// is written.
func Float(key string, v float64) Field { return Field{key, v} }

// Text gives a field with a text.
func Text(key, v string) Field { return Field{key, v} }

// Bool gives a field that is true or false.
func Bool(key string, v bool) Field { return Field{key, v} }

// line gives the row in line protocol without the end of line, or "" when no field
// is left.
func (r *Row) line(rig string) string {
	p := write.NewPointWithMeasurement(r.Measurement).AddTag("rig", rig).SetTime(time.Unix(0, r.T).UTC())
	for _, f := range r.Fields {
		if v, ok := f.value.(float64); ok && (math.IsNaN(v) || math.IsInf(v, 0)) {
			continue
		}
		p.AddField(f.Key, f.value)
	}
	if len(p.FieldList()) == 0 {
		return ""
	}
	return strings.TrimSuffix(write.PointToLineProtocol(p, time.Nanosecond), "\n")
}

// Target is where the rows go.
type Target struct {
	URL    string // http://host:port or https://host:port, with a path if need be
	Org    string // empty for InfluxDB 1.8
	Bucket string // database/retention-policy for InfluxDB 1.8
	Token  string `json:"-"` // user:password for InfluxDB 1.8
}

// String names the target without its token.
func (t Target) String() string { return fmt.Sprintf("%s org %q bucket %q", t.URL, t.Org, t.Bucket) }

// GoString is String: a token must not get into a log by any verb.
func (t Target) GoString() string { return t.String() }

// check refuses what cannot be a target.
func (t Target) check() error {
	u, err := url.Parse(t.URL)
	switch {
	case err != nil:
		return errors.New("the address does not parse: give http://host:port") // the error would show what is in it
	case u.User != nil:
		return errors.New("the address has a user in it, which would get into logs: put the token into a file")
	case u.Scheme != "http" && u.Scheme != "https" || u.Host == "" || u.RawQuery != "" || u.Fragment != "":
		return fmt.Errorf("address %q: give http://host:port or https://host:port", t.URL)
	case t.Bucket == "":
		return errors.New("the bucket is missing: for InfluxDB 1.8 give database/retention-policy")
	}
	return nil
}
