// Package export writes what a run file holds into files that other programs
// open: Parquet, CSV after RFC 4180, InfluxDB line protocol.
//
// # Tables
//
//	operating points  a row per scan: every quantity in SI by its key, the states by name, flags
//	scans             a row per scan: channel.<id> calibrated, in SI, absolute for gauge pressures,
//	                  missing where it cannot be used, and quality.<id> that says why
//	samples           a row per value of every stored message, as its sender sent it and in the order
//	                  it was received; see below
//	events            a row per change of an alarm, mark, begin and end of a run, configuration
//
// Every table begins with t, UTC, and t_ns, ns since 1970-01-01T00:00:00Z. Names
// of columns are those of the interface; units stand in the header of a CSV file
// and in the metadata of a Parquet file, never in cells. What is missing is null
// in Parquet, an empty cell in CSV, and left out of a line.
//
// Rows of scans and operating points are those that were stored; those that a
// run which is on, or was cut off, has in no chunk yet are computed again from
// its records. So an export reaches up to the last durable record.
//
// A sample has the time of its sender, or that of its receipt where it carries
// none (column clock says which); value is in the raw unit of its channel, si is
// calibrated but without a reference port, quality judges it by range and invalid
// codes alone, and note says why it was not used: duplicate, retained,
// unknown_channel, unit and so on. What came too late for its scan is known only
// to the computation and is not noted.
//
// # Resampling
//
// With Every, rows are gathered in intervals [k·Every, (k+1)·Every) since 1970 in
// UTC; a row is stamped with the beginning of its interval and counts its rows.
// Numbers give the statistics asked for, over the values that are not missing;
// states, qualities and flags give their last value. Samples and events are not
// resampled.
//
// # Promises
//
// Memory does not depend on the length of the run: rows go from the file in
// pages of a minute into row groups of a bounded number of cells. A file is
// written under another name, read again and compared by its counts, and only
// then gets its name: there is never half a file of that name.
package export

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"time"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// What says which table is written. The zero value is invalid.
type What uint8

// The tables.
const (
	WhatInvalid What = iota
	OperatingPoints
	Scans
	Samples
	Events
	numWhats
)

var whatNames = [numWhats]string{"", "operating-points", "scans", "samples", "events"}

// String gives the name as flags and queries write it.
func (w What) String() string { return whatNames[w] }

// ParseWhat is the inverse of String. The error wraps ErrOption.
func ParseWhat(s string) (What, error) {
	if i := slices.Index(whatNames[1:], s); i >= 0 {
		return What(i + 1), nil
	}
	return WhatInvalid, option("what %q: give one of %s", s, strings.Join(whatNames[1:], ", "))
}

// Format is the form of the file. The zero value is invalid.
type Format uint8

// The forms.
const (
	FormatInvalid Format = iota
	Parquet
	CSV
	Lines // InfluxDB line protocol, times in ns
	numFormats
)

var formats = [numFormats]struct{ name, extension, media string }{
	{},
	{"parquet", ".parquet", "application/vnd.apache.parquet"},
	{"csv", ".csv", "text/csv; charset=utf-8; header=present"},
	{"lines", ".lines", "text/plain; charset=utf-8"},
}

// String gives the name as flags and queries write it.
func (f Format) String() string { return formats[f].name }

// Extension gives the usual end of a file's name.
func (f Format) Extension() string { return formats[f].extension }

// MediaType gives the media type for HTTP.
func (f Format) MediaType() string { return formats[f].media }

// ParseFormat is the inverse of String. The error wraps ErrOption.
func ParseFormat(s string) (Format, error) {
	for f := Parquet; f < numFormats; f++ {
		if formats[f].name == s {
			return f, nil
		}
	}
	return FormatInvalid, option("format %q: give one of parquet, csv, lines", s)
}

// Statistic is what an interval gives of its numbers.
type Statistic uint8

// The statistics.
const (
	Mean Statistic = iota
	Min
	Max
	Last
	numStatistics
)

var statisticNames = [numStatistics]string{"mean", "min", "max", "last"}

// String gives the name, which ends the names of columns: npr.mean.
func (s Statistic) String() string { return statisticNames[s] }

// ParseStatistics reads names separated by commas; "" gives mean, min and max.
// The error wraps ErrOption.
func ParseStatistics(s string) ([]Statistic, error) {
	if s == "" {
		return []Statistic{Mean, Min, Max}, nil
	}
	var out []Statistic
	for name := range strings.SplitSeq(s, ",") {
		i := slices.Index(statisticNames[:], strings.TrimSpace(name))
		if i < 0 || slices.Contains(out, Statistic(i)) {
			return nil, option("statistics %q: give some of mean, min, max, last, each once", s)
		}
		out = append(out, Statistic(i))
	}
	return out, nil
}

// ParseEvery reads the interval of resampling, as 1s or 250ms; "" gives 0, every
// row. The error wraps ErrOption.
func ParseEvery(s string) (int64, error) {
	if s == "" {
		return 0, nil
	}
	every, err := time.ParseDuration(s)
	if err != nil || every.Nanoseconds() < leastEvery {
		return 0, option("every %q: give a time of 1ms or more, as 1s or 250ms", s)
	}
	return every.Nanoseconds(), nil
}

// ErrOption is what an error is that the caller's options brought about.
var ErrOption = errors.New("option")

// optionError says what is wrong with the options. It is an ErrOption.
type optionError struct{ text string }

func (e *optionError) Error() string { return e.text }

// Is makes it an ErrOption.
func (e *optionError) Is(target error) bool { return target == ErrOption }

func option(format string, args ...any) error { return &optionError{fmt.Sprintf(format, args...)} }

// Options say what is exported.
type Options struct {
	What       What
	Format     Format
	Columns    []string    // by name; none = all. t and t_ns always come
	From, To   int64       // event time, ns UTC: from inclusive, to exclusive; see Stretch
	Every      int64       // ns; 0 = every row
	Statistics []Statistic // with Every; none = mean, min, max
	Progress   func(Progress)
}

// Progress tells how far an export is.
type Progress struct {
	Rows int64   // read so far
	Part float64 // of the time span, 0 to 1
}

// Summary tells what was written.
type Summary struct {
	Rows        int64
	Columns     int
	First, Last int64 // t of the first and last row, ns UTC; 0 without rows
	Missing     int64 // cells without a value
}

// Stretch reads the ends of a stretch: seconds after started, before it if
// negative, or RFC 3339. From defaults to started, to to the end of time. The
// error wraps ErrOption.
func Stretch(fromText, toText string, started int64) (from, to int64, err error) {
	from, to = started, math.MaxInt64
	for _, p := range []struct {
		name, text string
		dst        *int64
	}{{"from", fromText, &from}, {"to", toText, &to}} {
		if p.text == "" {
			continue
		}
		if t, err := time.Parse(time.RFC3339Nano, p.text); err == nil && t.Year() >= 1970 && t.Year() < 2262 {
			*p.dst = t.UnixNano()
			continue
		}
		sec, err := strconv.ParseFloat(p.text, 64)
		if err != nil || !(math.Abs(sec) < 1e8) {
			return 0, 0, option("%s %q: give seconds of the run, or a time as in 2026-03-02T09:00:00Z", p.name, p.text)
		}
		*p.dst = started + int64(math.Round(sec*1e9))
	}
	if to <= from {
		return 0, 0, option("from must be before to")
	}
	return from, to, nil
}

// leastEvery is the shortest interval of resampling, ns.
const leastEvery = int64(1e6)

// Export is a prepared export of one run.
type Export struct {
	file    *runfile.File
	parse   func(bundle []byte) (pipeline.Config, error)
	opt     Options
	header  runfile.Header
	configs []*pipeline.Config // in force first and last
	columns []column           // of the source, as selected
	newest  int64              // host time of the last durable record, ns UTC
}

// New prepares an export. Parse gives the configuration of a stored bundle. An
// error that is ErrOption says what to ask for instead.
func New(ctx context.Context, f *runfile.File, parse func(bundle []byte) (pipeline.Config, error), o Options) (*Export, error) {
	header, err := f.Header(ctx)
	if err != nil {
		return nil, fmt.Errorf("export: %w", err)
	}
	e := &Export{file: f, parse: parse, opt: o, header: header}
	_, e.newest = f.Durable()
	switch {
	case o.What == WhatInvalid || o.What >= numWhats:
		return nil, option("what: give one of %s", strings.Join(whatNames[1:], ", "))
	case o.Format == FormatInvalid || o.Format >= numFormats:
		return nil, option("format: give one of parquet, csv, lines")
	case o.To <= o.From:
		return nil, option("from must be before to")
	case o.Every == 0:
	case o.What == Samples || o.What == Events:
		return nil, option("%s are not resampled: take scans or operating-points", o.What)
	case o.Every < leastEvery:
		return nil, option("every: give 1ms or more")
	}
	if o.Every > 0 && len(o.Statistics) == 0 {
		e.opt.Statistics = []Statistic{Mean, Min, Max}
	}
	if err := e.readConfigs(ctx); err != nil {
		return nil, fmt.Errorf("export: %w", err)
	}
	return e, e.selectColumns()
}

// readConfigs finds the configurations in force at the beginning and at the end
// of the file.
func (e *Export) readConfigs(ctx context.Context) error {
	var bundles [][]byte
	take := func(c runfile.Checkpoint, err error) error {
		if errors.Is(err, runfile.ErrNoCheckpoint) {
			return nil
		}
		if err != nil {
			return err
		}
		state, err := pipeline.Decode(c.State)
		if err == nil && len(state.Bundle) > 0 {
			bundles = append(bundles, state.Bundle)
		}
		return err
	}
	if err := take(e.file.FirstCheckpoint(ctx)); err != nil {
		return err
	}
	if err := take(e.file.LastCheckpoint(ctx, math.MaxInt64)); err != nil {
		return err
	}
	if len(bundles) == 0 { // no chunk is closed yet: the records are few
		err := e.file.Records(ctx, 0, 0, func(r *ingest.Record) error {
			if r.Kind == ingest.KindConfig {
				bundles = append(bundles, slices.Clone(r.Payload))
			}
			return nil
		})
		if err != nil {
			return err
		}
	}
	for i, b := range bundles {
		if i > 0 && slices.Equal(b, bundles[i-1]) {
			continue
		}
		cfg, err := e.parse(b)
		if err != nil {
			return err
		}
		e.configs = append(e.configs, &cfg)
	}
	if len(e.configs) == 0 {
		return errors.New("no configuration is stored yet: nothing was computed")
	}
	return nil
}

// selectColumns makes the list of columns that were asked for.
func (e *Export) selectColumns() error {
	all := e.allColumns()
	if len(e.opt.Columns) == 0 {
		e.columns = all
		return nil
	}
	for _, name := range e.opt.Columns {
		name = strings.TrimSpace(name)
		if name == nameT || name == nameNS {
			continue
		}
		i := slices.IndexFunc(all, func(c column) bool { return c.name == name })
		if i < 0 {
			return option("columns: %s have no %q: they have %s", e.opt.What, name, listed(all))
		}
		if slices.ContainsFunc(e.columns, func(c column) bool { return c.name == name }) {
			return option("columns: %q is there twice", name)
		}
		e.columns = append(e.columns, all[i])
	}
	return nil
}

// listed gives the names of columns for a message.
func listed(all []column) string {
	const most = 200
	names := make([]string, len(all))
	for i := range all {
		names[i] = all[i].name
	}
	if len(names) > most {
		names = append(names[:most], "…")
	}
	return strings.Join(names, ", ")
}

// Name gives a name for the file.
func (e *Export) Name() string {
	return e.header.ID + "-" + e.opt.What.String() + e.opt.Format.Extension()
}

// source calls fn with the rows of the table, in batches of bounded size. A batch
// is valid until fn returns.
func (e *Export) source(ctx context.Context, fn func(*batch) error) error {
	switch e.opt.What {
	case Samples:
		return e.samples(ctx, fn)
	case Events:
		return e.events(ctx, fn)
	case OperatingPoints:
		return e.stored(ctx, pipeline.ChunkPoints, fn)
	case Scans:
		return e.stored(ctx, pipeline.ChunkChannels, fn)
	case WhatInvalid, numWhats:
	}
	return option("what: none is given")
}

// sink takes the rows of a table into one form.
type sink interface {
	write(*batch) error
	// close writes the end of the file; the writer below stays open.
	close() error
}

// Write writes the table to w. What was written when it gives an error is no
// whole file.
func (e *Export) Write(ctx context.Context, w io.Writer) (Summary, error) {
	columns, sampler := e.columns, (*resampler)(nil)
	if e.opt.Every > 0 {
		sampler = newResampler(e.columns, e.opt.Every, e.opt.Statistics)
		columns = sampler.columns
	}
	out, err := e.sink(w, columns)
	if err != nil {
		return Summary{}, fmt.Errorf("export: %w", err)
	}
	sum := Summary{Columns: len(columns) + 2}
	put := func(b *batch) error {
		if len(b.t) == 0 {
			return nil
		}
		if sum.Rows == 0 {
			sum.First = b.t[0]
		}
		sum.Rows, sum.Last = sum.Rows+int64(len(b.t)), b.t[len(b.t)-1]
		sum.Missing += b.missing(columns)
		return out.write(b)
	}
	read := int64(0)
	err = e.source(ctx, func(b *batch) error {
		if err := ctx.Err(); err != nil {
			return err
		}
		b.crop(e.opt.From, e.opt.To)
		read += int64(len(b.t))
		if e.opt.Progress != nil && len(b.t) > 0 {
			e.opt.Progress(Progress{Rows: read, Part: e.part(b.t[len(b.t)-1])})
		}
		if sampler != nil {
			return sampler.add(b, put)
		}
		return put(b)
	})
	if err == nil && sampler != nil {
		err = sampler.flush(put)
	}
	if err == nil {
		err = out.close()
	}
	if err != nil {
		return sum, fmt.Errorf("export: %w", err)
	}
	return sum, nil
}

// part tells how much of the time span lies before t.
func (e *Export) part(t int64) float64 {
	from, to := e.opt.From, min(e.opt.To, e.newest)
	if to <= from {
		return 1
	}
	return min(max(float64(t-from)/float64(to-from), 0), 1)
}

// sink gives the writer of a form.
func (e *Export) sink(w io.Writer, columns []column) (sink, error) {
	switch e.opt.Format {
	case Parquet:
		return newParquet(w, columns, e.metadata(columns)), nil
	case CSV:
		return newCSV(w, columns)
	case Lines:
		return newLines(w, columns, e.opt.What, &e.header), nil
	case FormatInvalid, numFormats:
	}
	return nil, option("format: none is given")
}

// pair is an entry of the metadata.
type pair struct{ key, value string }

// metadata tells where the rows come from and what their columns are.
func (e *Export) metadata(columns []column) []pair {
	cfg, h := e.configs[len(e.configs)-1], &e.header
	type described struct {
		Name  string `json:"name"`
		Unit  string `json:"unit"`
		Title string `json:"title"`
	}
	list := []described{{nameT, "", "event time, UTC"}, {nameNS, "ns", "event time, ns since 1970-01-01T00:00:00Z"}}
	units := map[string]string{nameNS: "ns"}
	for i := range columns {
		c := &columns[i]
		list = append(list, described{c.name, c.unit, c.title})
		if c.unit != "" {
			units[c.name] = c.unit
		}
	}
	text := func(v any) string {
		b, err := json.Marshal(v)
		if err != nil {
			panic("export: metadata: " + err.Error()) // strings encode
		}
		return string(b)
	}
	every, statistics := "", make([]string, len(e.opt.Statistics))
	if e.opt.Every > 0 {
		every = time.Duration(e.opt.Every).String()
		for i, s := range e.opt.Statistics {
			statistics[i] = s.String()
		}
	}
	out := []pair{
		{"table", e.opt.What.String()},
		{"columns", text(list)},
		{"units", text(units)},
		{"rig", cfg.Rig.ID},
		{"rig_title", cfg.Rig.Title},
		{"engine_model", cfg.Rig.EngineModel},
		{"engine_serial", cfg.Rig.EngineSerial},
		{"engine_build", cfg.Rig.EngineBuild},
		{"limits_version", cfg.Rig.LimitsVersion},
		{"run", h.ID},
		{"run_number", strconv.FormatUint(h.Number, 10)},
		{"designation", h.Designation},
		{"test", h.Test},
		{"purpose", h.Purpose},
		{"nozzle_serial", h.NozzleSerial},
		{"nozzle_measured_on", h.NozzleMeasured},
		{"fuel_batch", h.FuelBatch},
		{"started", stamp(h.Started)},
		{"ended", stamp(h.Ended)},
		{"scan_period_ns", strconv.FormatInt(cfg.Align.Period, 10)},
		{"config_hash", h.ConfigHash},
		{"digest_sha256", h.Digest},
		{"build", h.Build},
		{"from", stamp(e.opt.From)},
		{"to", stamp(e.opt.To)},
		{"every", every},
		{"statistics", strings.Join(statistics, ",")},
		{"caution", "Made from a watch that commands nothing. The facility's own safety procedures come first."},
	}
	return slices.DeleteFunc(out, func(p pair) bool { return p.value == "" })
}

// stamp gives a time for people; "" for none.
func stamp(t int64) string {
	if t == 0 || t == math.MaxInt64 {
		return ""
	}
	return time.Unix(0, t).UTC().Format(time.RFC3339Nano)
}

// WriteFile writes the table to a file. It is written as path + ".part", put on
// the disk, read again by an independent count of rows and missing cells, and
// renamed. fs.ErrExist is returned if there is a file of that name and replace
// does not allow to replace it.
func (e *Export) WriteFile(ctx context.Context, path string, replace bool) (sum Summary, err error) {
	if _, err := os.Lstat(path); err == nil && !replace {
		return sum, fmt.Errorf("export: %s: %w", path, os.ErrExist)
	}
	temp := path + ".part"
	f, err := os.OpenFile(temp, os.O_CREATE|os.O_TRUNC|os.O_RDWR, 0o640)
	if err != nil {
		return sum, fmt.Errorf("export: %w", err)
	}
	sum, err = e.Write(ctx, f)
	if err == nil {
		err = f.Sync()
	}
	if err == nil {
		err = e.check(f, sum)
	}
	if err = errors.Join(err, f.Close()); err != nil {
		return sum, errors.Join(err, os.Remove(temp))
	}
	if err := os.Rename(temp, path); err != nil {
		return sum, fmt.Errorf("export: %w", errors.Join(err, os.Remove(temp)))
	}
	dir, err := os.Open(filepath.Dir(path))
	if err != nil {
		return sum, fmt.Errorf("export: %w", err)
	}
	if err := errors.Join(dir.Sync(), dir.Close()); err != nil {
		return sum, fmt.Errorf("export: %w", err)
	}
	return sum, nil
}

// check reads a written file again.
func (e *Export) check(f *os.File, sum Summary) error {
	var rows, missing int64
	var err error
	switch e.opt.Format {
	case Parquet:
		rows, missing, err = countParquet(f)
	case CSV:
		rows, missing, err = countCSV(f)
	case Lines:
		rows, err = countLines(f)
		missing = sum.Missing // a line does not tell what it lacks
	case FormatInvalid, numFormats:
	}
	switch {
	case err != nil:
		return fmt.Errorf("export: reading %s again: %w", f.Name(), err)
	case rows != sum.Rows || missing != sum.Missing:
		return fmt.Errorf("export: reading %s again: %d rows with %d missing cells, written were %d with %d", f.Name(), rows, missing, sum.Rows, sum.Missing)
	}
	return nil
}
