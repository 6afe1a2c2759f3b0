package watch

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"iter"
	"log/slog"
	"os"
	"strings"
	"time"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/influx"
	"throatwatch/rules/pipeline"
)

const (
	// SinkChunkFor is the host time that a chunk spans while a sink follows the
	// records, ns: its rows can be read when it closes.
	SinkChunkFor = int64(10e9)
)

// Outcomes gives what is recorded in a data folder to a sink: events before the rows
// of chunks of one record.
type Outcomes struct {
	follower[influx.Row]
	codec *archive.Codec
}

// NewOutcomes gives the recorded outcomes of a store.
func NewOutcomes(s *Store, log *slog.Logger) *Outcomes {
	o := &Outcomes{codec: archive.NewCodec()}
	o.follower = follower[influx.Row]{
		store: s, log: log, what: "the database", spans: map[string]records{}, between: o.between,
		ahead: func(uint64) influx.Cursor { return influx.Cursor{} },
	}
	return o
}

// table is an unpacked chunk and the record that it depends on.
type table struct {
	seq  uint64
	kind string
	archive.Chunk
}

var errEnough = errors.New("enough rows")

// between gives rows after the cursor, of records up to upto.
func (o *Outcomes) between(ctx context.Context, f *runfile.File, after influx.Cursor, upto uint64, limit int) (rows []influx.Row, next influx.Cursor, err error) {
	var tables []table
	var events []runfile.Event
	found := 0
	chunk := func(c *runfile.Chunk) error {
		if n := len(tables); found >= after.Row+limit && c.Seq > tables[n-1].seq {
			upto = tables[n-1].seq
			return errEnough
		}
		t := table{seq: c.Seq, kind: c.Kind}
		if err := o.codec.Decode(&t.Chunk, c.Bytes, nil); err != nil {
			return fmt.Errorf("chunk of record %d: %w", c.Seq, err)
		}
		tables, found = append(tables, t), found+c.Rows
		return nil
	}
	event := func(e *runfile.Event) error {
		if e.Kind == "alarm" || e.Kind == "mark" || e.Kind == "run" {
			events = append(events, *e)
		}
		return nil
	}
	err = f.Follow(ctx, after.Seq, upto, chunk, event)
	if errors.Is(err, errEnough) {
		err = f.Follow(ctx, after.Seq, upto, nil, event)
	}
	if err != nil {
		return nil, after, err
	}
	next = after
	next.Row = 0
	group := after.Seq // record of the last row
	for seq, row := range merge(&next, tables, events) {
		if seq > group {
			if group > next.Seq {
				next.Seq, next.Row = group, 0
			}
			group = seq
		}
		next.Row++
		if next.Seq == after.Seq && next.Row <= after.Row {
			continue
		}
		rows = append(rows, row)
		next.T = row.T
		if len(rows) == limit {
			return rows, next, nil
		}
	}
	next.Seq, next.Row = upto, 0
	return rows, next, nil
}

// merge gives the rows of tables and events in the order of their records, with
// the number of the record, and follows the run in c.
func merge(c *influx.Cursor, tables []table, events []runfile.Event) iter.Seq2[uint64, influx.Row] {
	return func(yield func(uint64, influx.Row) bool) {
		for len(tables) > 0 || len(events) > 0 {
			if len(tables) == 0 || len(events) > 0 && events[0].Seq <= tables[0].seq {
				if e := &events[0]; !yield(e.Seq, eventRow(c, e)) {
					return
				}
				events = events[1:]
				continue
			}
			t := &tables[0]
			for i := range t.Times {
				if !yield(t.seq, t.row(c, i)) {
					return
				}
			}
			tables = tables[1:]
		}
	}
}

// row gives a row of a chunk. Of a run are the rows after the one that started it,
// as in its digest.
func (t *table) row(c *influx.Cursor, i int) influx.Row {
	r := influx.Row{Measurement: "operating_point", T: t.Times[i], Fields: make([]influx.Field, 0, len(t.Columns)+3)}
	if t.kind == pipeline.ChunkChannels {
		r.Measurement = "channel"
	}
	add := func(f influx.Field) { r.Fields = append(r.Fields, f) }
	for k := range t.Columns {
		col := &t.Columns[k]
		if col.Kind == archive.KindFloat {
			add(influx.Float(strings.TrimPrefix(col.Name, "channel."), col.Float[i]))
			continue
		}
		switch v := col.Byte[i]; col.Name {
		case "choke_state":
			add(influx.Text(col.Name, monitor.ChokeState(v).String()))
		case "phase":
			add(influx.Text(col.Name, monitor.Phase(v).String()))
		case "back_pressure_from", "total_pressure_from", "total_temperature_from":
			add(influx.Text(col.Name, monitor.Source(v).String()))
		case "flags":
			add(influx.Bool("choke_marginal", v&pipeline.FlagMarginal != 0))
			add(influx.Bool("choke_armed", v&pipeline.FlagArmed != 0))
			add(influx.Bool("lit", v&pipeline.FlagLit != 0))
			add(influx.Bool("steady", v&pipeline.FlagSteady != 0))
		default:
			if t.kind == pipeline.ChunkChannels {
				add(influx.Text(col.Name, monitor.Quality(v).String()))
			}
		}
	}
	if c.Run != "" && r.T > c.Started && (c.Ended == 0 || r.T <= c.Ended) {
		add(influx.Text("run", c.Run))
	}
	return r
}

// eventRow gives the row of an event. Several events of one instant would replace
// each other in the database, which knows a point by its time: the last three
// digits of theirs, below a microsecond, are those of the outcome's number.
func eventRow(c *influx.Cursor, e *runfile.Event) influx.Row {
	r := influx.Row{Measurement: e.Kind, T: e.T - e.T%1000 + int64(e.N%1000)}
	text := func(key, v string) {
		if v != "" {
			r.Fields = append(r.Fields, influx.Text(key, v))
		}
	}
	var v struct {
		Event string      `json:"event"`
		Run   monitor.Run `json:"run"`

		Text string `json:"text"`
		By   string `json:"by"`

		ID             string   `json:"id"`
		Rule           string   `json:"rule"`
		Title          string   `json:"title"`
		Priority       string   `json:"priority"`
		State          string   `json:"state"`
		Raised         string   `json:"raised"`
		Revision       float64  `json:"revision"`
		Value          *float64 `json:"value"`
		Peak           *float64 `json:"peak"`
		Unit           string   `json:"unit"`
		AcknowledgedBy string   `json:"acknowledged_by"`
		AsideBy        string   `json:"aside_by"`
		Reason         string   `json:"reason"`
		Group          string   `json:"group"`
		Past           bool     `json:"past"`
		Unknown        bool     `json:"unknown"`
	}
	if err := json.Unmarshal(e.JSON, &v); err != nil {
		return r // of a later build: a row without fields is not written
	}
	switch e.Kind {
	case "alarm":
		text("id", v.ID)
		text("rule", v.Rule)
		text("title", v.Title)
		text("text", v.Text)
		text("priority", v.Priority)
		text("state", v.State)
		text("raised", v.Raised)
		text("unit", v.Unit)
		text("acknowledged_by", v.AcknowledgedBy)
		text("aside_by", v.AsideBy)
		text("reason", v.Reason)
		text("group", v.Group)
		if run, _, _ := strings.Cut(v.ID, "/"); run != "-" {
			text("run", run)
		}
		r.Fields = append(r.Fields, influx.Float("revision", v.Revision), influx.Bool("past", v.Past), influx.Bool("unknown", v.Unknown))
		if v.Value != nil {
			r.Fields = append(r.Fields, influx.Float("value", *v.Value))
		}
		if v.Peak != nil {
			r.Fields = append(r.Fields, influx.Float("peak", *v.Peak))
		}
	case "mark":
		text("text", v.Text)
		text("by", v.By)
		if c.Run != "" && e.T >= c.Started && (c.Ended == 0 || e.T <= c.Ended) {
			text("run", c.Run)
		}
	case "run":
		c.Run, c.Started, c.Ended = v.Run.ID, v.Run.Started, v.Run.Ended
		text("event", v.Event)
		text("run", v.Run.ID)
		text("engine", v.Run.Engine)
		text("by", v.Run.By)
	}
	return r
}

// CursorFile keeps the cursor of a sink in a small file. One of another target is
// not used: that database begins with everything stored.
type CursorFile struct {
	Path   string
	Target string
}

type cursorFile struct {
	Target string        `json:"target"`
	Cursor influx.Cursor `json:"cursor"`
}

// Load gives the cursor saved last for this target, or the zero Cursor.
func (f CursorFile) Load() (influx.Cursor, error) {
	b, err := os.ReadFile(f.Path)
	if errors.Is(err, fs.ErrNotExist) {
		return influx.Cursor{}, nil
	}
	var v cursorFile
	if err == nil {
		err = json.Unmarshal(b, &v)
	}
	if err != nil {
		return influx.Cursor{}, fmt.Errorf("cursor file %s: %w: remove it, and everything stored is written again", f.Path, err)
	}
	if v.Target != f.Target {
		return influx.Cursor{}, nil
	}
	return v.Cursor, nil
}

// Save replaces the file in one step.
func (f CursorFile) Save(c influx.Cursor) (err error) {
	b, err := json.Marshal(cursorFile{f.Target, c})
	if err != nil {
		return fmt.Errorf("cursor file: %w", err)
	}
	temp := f.Path + ".new"
	w, err := os.OpenFile(temp, os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o640)
	if err != nil {
		return fmt.Errorf("cursor file: %w", err)
	}
	_, err = w.Write(append(b, '\n'))
	if err = errors.Join(err, w.Sync(), w.Close()); err == nil {
		err = os.Rename(temp, f.Path)
	}
	if err != nil {
		return fmt.Errorf("cursor file: %w", err)
	}
	return nil
}

// RunSink steps a sink until ctx ends.
func RunSink(ctx context.Context, s *influx.Sink) {
	defer s.Close()
	for ctx.Err() == nil {
		select {
		case <-ctx.Done():
		case <-time.After(s.Step(ctx)):
		}
	}
}
