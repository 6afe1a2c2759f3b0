package main

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"strings"
	"time"
	_ "time/tzdata" // zones of a column map, on machines without them

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/recording"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/align"
	"throatwatch/rules/pipeline"
)

const (
	// importPause is the host time without a row for which ticks are stepped, ns; a
	// longer one is passed over, as no scan is made of it.
	importPause = int64(180e9)
	// importTail is the host time, ns, behind the last row within which its scans are
	// closed, however the rig file has them wait.
	importTail = int64(75e9)
)

// imported is the result of an import as --json prints it.
type imported struct {
	Run    string         `json:"run"`
	File   string         `json:"file"` // of the run
	Origin runfile.Origin `json:"origin"`
	recording.Counts
	Scans  uint64 `json:"scans"`
	Alarms int    `json:"alarms"`
	Digest string `json:"digest"`
}

// importCommand makes a run of a recording of another data system. It gives 0 when
// the run is stored, also if some cells were bad; 1 when not, 2 when called wrongly.
func importCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := newFlags("import FILE.csv|FILE.parquet --map MAP.yaml --rig RIG.yaml", "Step a recording of another data system through the monitor, as if its values came in now, into a run file.\n"+
		"The map says what the columns are; testdata/recordings/example-map.yaml explains it.", stderr)
	mapFile := flags.String("map", "", "map of the columns")
	rig := flags.String("rig", "", "rig file")
	data := flags.String("data", "data", "data folder; a watch may be recording there")
	asJSON := flags.Bool("json", false, "progress and result as JSON, an object per line")
	rest, code := parseArgs(flags, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 || *mapFile == "" || *rig == "" {
		_, _ = fmt.Fprintln(stderr, "throatwatch import: give one recording, --map MAP.yaml and --rig RIG.yaml")
		return 2
	}
	res, err := importRecording(ctx, rest[0], *mapFile, *rig, *data, newProgress(stderr, *asJSON), newLog(stderr, false))
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch import:", err)
		return 1
	}
	if *asJSON {
		if err := json.NewEncoder(stdout).Encode(res); err != nil {
			_, _ = fmt.Fprintln(stderr, "throatwatch import:", err)
			return 1
		}
		return 0
	}
	_, _ = fmt.Fprintf(stdout, "%s: run %s of %d rows with %d values, %d scans, %d alarms\n", res.File, res.Run, res.Rows, res.Values, res.Scans, res.Alarms)
	c := &res.Counts
	for _, n := range []struct {
		n    uint64
		what string
	}{
		{c.LeftOut, "rows left out, as the map says"},
		{c.BadTimes, "rows without a time that can be read"},
		{c.BadLines, "lines that cannot be taken apart"},
		{c.BadCells, "cells that are no value of a channel"},
		{c.OutOfOrder, "rows before the row above them"},
		{c.Late, "of these too late to be sorted"},
	} {
		if n.n > 0 {
			_, _ = fmt.Fprintf(stdout, "  %d %s\n", n.n, n.what)
		}
	}
	for _, f := range c.Faults {
		_, _ = fmt.Fprintf(stdout, "  %s\n", f)
	}
	return 0
}

// importRecording makes the run in a folder of its own inside the data folder and
// moves it to the others when it is whole. So a watch that is recording there is
// not disturbed, and an import that is called off leaves nothing.
func importRecording(ctx context.Context, path, mapFile, rig, data string, progress *progress, log *slog.Logger) (res imported, err error) {
	bundle, cfg, faults := config.Load(rig)
	if err := watch.Faults(faults); err != nil {
		return res, fmt.Errorf("the configuration has faults:\n%w", err)
	}
	m, hash, faults := config.LoadMap(mapFile, &cfg, func(form recording.Form) ([]string, error) { return recording.Header(path, form) })
	if err := watch.Faults(faults); err != nil {
		return res, fmt.Errorf("the map has faults:\n%w", err)
	}
	sum, err := fileSum(path)
	if err != nil {
		return res, err
	}
	if err := os.MkdirAll(filepath.Join(data, "runs"), 0o750); err != nil {
		return res, fmt.Errorf("data folder: %w", err)
	}
	temp, err := os.MkdirTemp(data, "import-")
	if err != nil {
		return res, fmt.Errorf("data folder: %w", err)
	}
	defer func() { err = errors.Join(err, os.RemoveAll(temp)) }()

	in := importer{cfg: &cfg, data: data, progress: progress}
	if err := in.route(&m); err != nil {
		return res, err
	}
	reader, err := recording.Open(path, &m)
	if err != nil {
		return res, err
	}
	err = in.step(ctx, reader, bundle, temp, log)
	progress.end()
	if err = errors.Join(err, reader.Close()); err != nil {
		return res, err
	}
	res.Counts = reader.Counts()
	res.Origin = runfile.Origin{
		Kind: runfile.OriginImport, File: filepath.Base(path), SHA256: sum, MapSHA256: hash, Rows: res.Rows, Bad: res.Bad(),
	}
	res.Run, res.Scans = in.run, in.scans
	return res, in.store(ctx, temp, &res)
}

// fileSum gives the SHA-256 of a file in hex.
func fileSum(path string) (string, error) {
	f, err := os.Open(path)
	if err != nil {
		return "", fmt.Errorf("recording: %w", err)
	}
	defer f.Close() //nolint:errcheck // it is only read
	h := sha256.New()
	if _, err := io.Copy(h, f); err != nil {
		return "", fmt.Errorf("recording %s: %w", path, err)
	}
	return hex.EncodeToString(h.Sum(nil)), nil
}

// importer turns rows into messages and steps them.
type importer struct {
	cfg      *pipeline.Config
	data     string
	progress *progress
	routes   []route // one per topic
	at       []int   // route of a channel, −1 for none
	run      string
	scans    uint64
}

// route is a topic with what goes out there at one instant.
type route struct {
	topic    string
	format   decode.Format
	readings []decode.Reading
}

// route finds for every channel of the map a topic that the rig takes it from: its
// own one, or else that of the input whose messages keep most, line protocol first,
// which has the time to the nanosecond; SenML has it to the microsecond.
func (in *importer) route(m *recording.Map) error {
	needed := map[int]bool{}
	for i := range m.Columns {
		needed[m.Columns[i].Channel] = true
	}
	if m.Long != nil {
		for _, c := range m.Long.Names { // the order leaves no trace
			needed[c.Channel] = true
		}
	}
	for _, c := range m.Constants {
		needed[c.Channel] = true
	}
	var none []string
	for i := range in.cfg.Align.Channels {
		in.at = append(in.at, -1)
		if needed[i] && !in.find(i) {
			none = append(none, in.cfg.Align.Channels[i].ID)
		}
	}
	if len(none) > 0 {
		return fmt.Errorf("no input of the rig file brings the channels %s: add one of format lines or senml to inputs", strings.Join(none, ", "))
	}
	return nil
}

// find finds the route of a channel.
func (in *importer) find(ch int) bool {
	c := &in.cfg.Align.Channels[ch]
	inputs := in.cfg.Align.Inputs
	for _, format := range []decode.Format{decode.Lines, decode.SenMLJSON, decode.SenMLCBOR, decode.Value} {
		for i := range inputs {
			if inputs[i].Format != format || format == decode.Lines && strings.HasPrefix(c.Name, "#") { // a comment there
				continue
			}
			topic := c.Topic
			if topic == "" {
				topic = concrete(inputs[i].Filter, c.Name)
			}
			if first := firstInput(inputs, topic); first != i || format == decode.Value && c.Topic == "" && topic[strings.LastIndexByte(topic, '/')+1:] != c.Name {
				continue
			}
			for k := range in.routes {
				if in.routes[k].topic == topic && format != decode.Value {
					in.at[ch] = k
					return true
				}
			}
			in.at[ch] = len(in.routes)
			in.routes = append(in.routes, route{topic: topic, format: format})
			return true
		}
	}
	return false
}

// concrete gives a topic that a filter takes [MQTT-4.7.1]: name in the place of a
// wildcard at its end, "import" for the others. Line protocol and SenML do not ask
// for the name there, but it does no harm.
func concrete(filter, name string) string {
	levels := strings.Split(filter, "/")
	for i, l := range levels {
		switch {
		case l != "+" && l != "#":
		case i == len(levels)-1:
			levels[i] = name
		default:
			levels[i] = "import"
		}
	}
	return strings.Join(levels, "/")
}

// firstInput gives the input that takes a topic, −1 for none.
func firstInput(inputs []align.Input, topic string) int {
	for i := range inputs {
		if align.Match(inputs[i].Filter, topic) {
			return i
		}
	}
	return -1
}

// payload gives the message of a route at t.
func (r *route) payload(t int64) ([]byte, error) {
	switch r.format {
	case decode.Lines:
		return decode.AppendLines(nil, t, r.readings)
	case decode.SenMLJSON:
		return decode.AppendSenMLJSON(nil, "", t, r.readings), nil
	case decode.SenMLCBOR:
		return decode.AppendSenMLCBOR(nil, "", t, r.readings), nil
	case decode.Value, decode.FormatInvalid:
	}
	b := append([]byte(`{"t":"`), time.Unix(0, t).UTC().Format(time.RFC3339Nano)...)
	b = strconv.AppendFloat(append(b, `","v":`...), r.readings[0].Value, 'g', -1, 64)
	return append(b, '}'), nil
}

// step steps the rows into a run file below temp: one run from the first row to the
// last, whatever the engine does in it.
func (in *importer) step(ctx context.Context, reader *recording.Reader, bundle config.Bundle, temp string, log *slog.Logger) (err error) {
	row, err := reader.Next()
	if errors.Is(err, io.EOF) {
		c := reader.Counts()
		return fmt.Errorf("the recording has no value that can be used, in %d rows: %s", c.Rows, strings.Join(c.Faults, "; "))
	}
	if err != nil {
		return err
	}
	store, err := watch.OpenStore(ctx, temp, runfile.Options{}, log)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, store.Close(ctx)) }()
	core, err := store.Restore(ctx, pipeline.NewMachine(watch.Parse), watch.Build(), runtime.GOARCH)
	if err != nil {
		return err
	}
	feed := watch.NewFeed(core, store)
	host := row.T
	if err := feed.Begin(ctx, pipeline.Boot{Epoch: 1, Build: watch.Build(), GOARCH: runtime.GOARCH, Imported: true}, bundle.Marshal(), host); err != nil {
		return err
	}
	act := func(do string) error {
		text, err := json.Marshal(pipeline.Action{Do: do, By: "import", Role: "engineer", RequestID: do})
		if err != nil {
			return err
		}
		return feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: text}, host)
	}
	for ; err == nil; row, err = reader.Next() {
		host = max(host, row.T) // a late row comes now
		if err := feed.Until(ctx, min(host, core.State.Host+importPause)); err != nil {
			return err
		}
		if err := in.take(ctx, feed, row, host); err != nil {
			return err
		}
		if in.run == "" {
			if err := act(pipeline.DoRunStart); err != nil {
				return err
			}
			if in.run = core.State.Run.ID; !core.State.RunActive {
				return errors.New("the run does not begin")
			}
			if _, err := os.Lstat(in.path()); err == nil {
				return fmt.Errorf("%s is there already: the recording was imported before, or a run began in the same second", in.path())
			}
		}
		in.progress.show(reader.Part(), int64(reader.Counts().Rows), "rows")
		if err := ctx.Err(); err != nil {
			return err
		}
	}
	if !errors.Is(err, io.EOF) {
		return err
	}
	// The scans of the last rows wait for what may still come. Beyond them every channel
	// would be stale, which is no alarm of the engine's.
	for newest := host; core.State.Align.Next <= newest && host < newest+importTail; {
		host += int64(100e6)
		if err := feed.Until(ctx, host); err != nil {
			return err
		}
		if err := feed.Take(ctx, watch.Input{Kind: ingest.KindTick}, host); err != nil {
			return err
		}
	}
	if err := act(pipeline.DoRunEnd); err != nil {
		return err
	}
	in.scans = core.State.Align.N
	return feed.End(ctx)
}

// path is where the run will lie.
func (in *importer) path() string { return filepath.Join(in.data, "runs", in.run+".db") }

// take steps the messages of a row.
func (in *importer) take(ctx context.Context, feed *watch.Feed, row *recording.Row, host int64) error {
	for i := range in.routes {
		in.routes[i].readings = in.routes[i].readings[:0]
	}
	for _, v := range row.Values {
		c := &in.cfg.Align.Channels[v.Channel]
		r := &in.routes[in.at[v.Channel]]
		r.readings = append(r.readings, decode.Reading{Name: c.Name, Value: v.Raw})
	}
	for i := range in.routes {
		r := &in.routes[i]
		for len(r.readings) > 0 {
			part := *r
			if r.format == decode.Value { // one value a message
				part.readings = r.readings[:1]
			} else if len(r.readings) > mostReadings {
				part.readings = r.readings[:mostReadings]
			}
			payload, err := part.payload(row.T)
			if err != nil {
				return err
			}
			r.readings = r.readings[len(part.readings):]
			message := watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: r.topic, Payload: payload}
			if err := feed.Take(ctx, message, host); err != nil {
				return err
			}
		}
	}
	return nil
}

// mostReadings bounds the readings of a message, below the limits of the decoder.
const mostReadings = 1000

// store completes the header of the run and moves it to the others.
func (in *importer) store(ctx context.Context, temp string, res *imported) error {
	made := filepath.Join(temp, "runs", in.run+".db")
	f, err := runfile.Open(ctx, made, runfile.ReadWrite, runfile.Options{})
	if err != nil {
		return err
	}
	origin := res.Origin
	err = f.UpdateHeader(ctx, func(h *runfile.Header) {
		h.Origin = &origin
		h.Notes = fmt.Sprintf("imported from %s, SHA-256 %s: %d rows, %d bad times, cells and lines", origin.File, origin.SHA256, origin.Rows, origin.Bad)
		h.Tags = append(h.Tags, "imported")
		res.Digest, res.Alarms = h.Digest, h.Alarms
	})
	if err := errors.Join(err, f.Close()); err != nil {
		return err
	}
	res.File = in.path()
	if err := os.Rename(made, res.File); err != nil {
		return fmt.Errorf("data folder: %w", err)
	}
	catalog, err := runfile.OpenCatalog(ctx, filepath.Join(in.data, "catalog.db"), filepath.Join(in.data, "runs"))
	if err != nil {
		return err
	}
	run, err := runfile.ReadRun(ctx, res.File)
	if err == nil {
		err = catalog.Upsert(ctx, run)
	}
	return errors.Join(err, catalog.Close())
}
