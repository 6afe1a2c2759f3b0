package export

import (
	"context"
	"encoding/json"
	"errors"
	"math"
	"slices"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/align"
	"throatwatch/monitor/archive"
	"throatwatch/rules/pipeline"
)

const (
	// rowsAtOnce is how many rows of samples or events go into one batch.
	rowsAtOnce = 4096
	// early is the host time before the start of a stretch at which its samples
	// are looked for, ns: a device clock may be ahead of ours by less.
	early = int64(10e9)
)

// stored gives the rows of stored chunks, and those of records behind the newest
// checkpoint by computing them again.
func (e *Export) stored(ctx context.Context, chunk string, fn func(*batch) error) error {
	newest, err := e.file.LastCheckpoint(ctx, math.MaxInt64)
	if err != nil && !errors.Is(err, runfile.ErrNoCheckpoint) {
		return err
	}
	rows := newRows(e.columns)
	codec := archive.NewCodec()
	var unpacked archive.Chunk
	take := func(c *runfile.Chunk) error {
		if c.Seq > newest.Seq { // closed meanwhile: its rows are computed again below
			return nil
		}
		if err := codec.Decode(&unpacked, c.Bytes, rows.names); err != nil {
			return err
		}
		return fn(rows.of(&unpacked))
	}
	if err := e.file.Chunks(ctx, chunk, e.opt.From, e.opt.To, take); err != nil {
		return err
	}
	return e.tail(ctx, newest.Seq, chunk, func(c *runfile.Chunk) error {
		if err := codec.Decode(&unpacked, c.Bytes, rows.names); err != nil {
			return err
		}
		return fn(rows.of(&unpacked))
	})
}

// tail steps the records after a checkpoint and gives their rows as the chunks
// that will hold them.
func (e *Export) tail(ctx context.Context, after uint64, chunk string, fn func(*runfile.Chunk) error) error {
	last, _ := e.file.Durable()
	if last <= after {
		return nil
	}
	m := pipeline.NewMachine(e.parse)
	p, err := pipeline.OpenReplay(ctx, e.file, m, after)
	if err != nil {
		return err
	}
	codec := archive.NewCodec()
	var columns *pipeline.Columns
	give := func() error {
		if columns == nil || columns.Rows() == 0 {
			return nil
		}
		chunks, err := columns.Chunks(codec)
		if err != nil {
			return err
		}
		columns = nil
		for i := range chunks {
			if chunks[i].Kind == chunk {
				return fn(&chunks[i])
			}
		}
		return nil
	}
	const most = 1200 // rows: a minute at 20 scans/s
	err = p.Run(ctx, last, func(_ *ingest.Record, outs []pipeline.Outcome) error {
		for i := range outs {
			o := &outs[i]
			switch {
			case o.Kind == pipeline.OutcomeConfig && o.OK: // other channels from here on
				if err := give(); err != nil {
					return err
				}
			case o.Kind == pipeline.OutcomePoint:
				if columns == nil {
					cfg, _ := m.Config()
					columns = pipeline.NewColumns(&cfg)
				}
				if columns.Add(o); columns.Rows() < most {
					continue
				}
				if err := give(); err != nil {
					return err
				}
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	return give()
}

// rows makes batches of unpacked chunks.
type rows struct {
	columns []column
	names   []string // of the stored columns that are needed
	batch   *batch
}

func newRows(columns []column) *rows {
	r := &rows{columns: columns, batch: newBatch(len(columns)), names: []string{}}
	for i := range columns {
		name := columns[i].stored()
		if !slices.Contains(r.names, name) {
			r.names = append(r.names, name)
		}
	}
	return r
}

// stored gives the name of the stored column that a column is read from.
func (c *column) stored() string {
	if c.kind == flag {
		return "flags"
	}
	return c.name
}

// of gives the rows of a chunk. A column that it does not have is missing: it is
// of another configuration or build.
func (r *rows) of(c *archive.Chunk) *batch {
	b := r.batch
	b.reset()
	b.t = append(b.t, c.Times...)
	for i := range r.columns {
		col, v := &r.columns[i], &b.columns[i]
		k := slices.IndexFunc(c.Columns, func(s archive.Column) bool { return s.Name == col.stored() })
		switch {
		case col.kind == number && k < 0:
			for range c.Times {
				v.number = append(v.number, math.NaN())
			}
		case col.kind == number:
			v.number = append(v.number, c.Columns[k].Float...)
		case k < 0 && col.kind == text:
			v.text = append(v.text, make([]string, len(c.Times))...)
		case k < 0:
			v.flag = append(v.flag, make([]bool, len(c.Times))...)
		case col.kind == flag:
			bit := flagBit(col.name)
			for _, s := range c.Columns[k].Byte {
				v.flag = append(v.flag, s&bit != 0)
			}
		default:
			for _, s := range c.Columns[k].Byte {
				v.text = append(v.text, stateName(col.name, s))
			}
		}
	}
	return b
}

// sampleColumns are those of the table of samples.
var sampleColumns = []column{
	{"channel", "", "Channel; missing where the rig file names none", text},
	{"value", "", "Value in the unit beside it: the raw unit of the channel", number},
	{"unit", "", "Unit of value", text},
	{"si", "", "Value calibrated, SI, without its reference port", number},
	{"quality", "", "By range and invalid codes alone", text},
	{"note", "", "Why it was not used; missing where it was", text},
	{"clock", "", "Whose time t is: sender or receipt", text},
	{"delay_s", "s", "Host time of receipt less t", number},
	{"record", "", "Number of the record", whole},
	{"topic", "", "Topic of the message", text},
	{"name", "", "Name in the message", text},
}

// filler appends rows to a batch by the names of columns, of which only some are
// wanted.
type filler struct {
	at    map[string]int // by name; a name that is not wanted is missing
	batch *batch
}

func newFiller(columns []column) *filler {
	f := &filler{at: make(map[string]int, len(columns)), batch: newBatch(len(columns))}
	for i := range columns {
		f.at[columns[i].name] = i
	}
	return f
}

func (f *filler) number(name string, v float64) {
	if i, ok := f.at[name]; ok {
		f.batch.columns[i].number = append(f.batch.columns[i].number, v)
	}
}

func (f *filler) text(name, v string) {
	if i, ok := f.at[name]; ok {
		f.batch.columns[i].text = append(f.batch.columns[i].text, v)
	}
}

func (f *filler) whole(name string, v int64) {
	if i, ok := f.at[name]; ok {
		f.batch.columns[i].whole = append(f.batch.columns[i].whole, v)
	}
}

// full gives the batch to fn when it has enough rows, or in any case at the end.
func (f *filler) full(end bool, fn func(*batch) error) error {
	if len(f.batch.t) < rowsAtOnce && !end {
		return nil
	}
	err := fn(f.batch)
	f.batch.reset()
	return err
}

// samples gives a row per value of every stored message.
func (e *Export) samples(ctx context.Context, fn func(*batch) error) error {
	first, err := e.file.SeqAtHost(ctx, max(e.opt.From, early)-early)
	if err != nil {
		return err
	}
	s := sampler{filler: newFiller(e.columns)}
	switch c, err := e.file.LastCheckpoint(ctx, first); {
	case errors.Is(err, runfile.ErrNoCheckpoint):
		first = 0 // the configuration is found on the way
	case err != nil:
		return err
	default:
		state, err := pipeline.Decode(c.State)
		if err != nil {
			return err
		}
		if err := s.configure(e.parse, state.Bundle); err != nil {
			return err
		}
	}
	refused, err := e.refused(ctx)
	if err != nil {
		return err
	}
	err = e.file.Records(ctx, first, 0, func(r *ingest.Record) error {
		switch r.Kind {
		case ingest.KindConfig:
			if slices.Contains(refused, r.Host) {
				return nil
			}
			_ = s.configure(e.parse, r.Payload) // one with faults changed nothing
		case ingest.KindMessage:
			s.message(r)
			return s.full(false, fn)
		case ingest.KindInvalid, ingest.KindBoot, ingest.KindTick, ingest.KindAction, ingest.KindConnect,
			ingest.KindDisconnect, ingest.KindClock, ingest.KindHealth, ingest.KindGap:
		}
		return nil
	})
	if err != nil {
		return err
	}
	return s.full(true, fn)
}

// refused gives the host times of configurations that did not come into force.
func (e *Export) refused(ctx context.Context) (at []int64, err error) {
	err = e.file.Events(ctx, math.MinInt64, math.MaxInt64, func(ev *runfile.Event) error {
		var config struct {
			OK bool `json:"ok"`
		}
		if ev.Kind == "config" && json.Unmarshal(ev.JSON, &config) == nil && !config.OK {
			at = append(at, ev.T)
		}
		return nil
	})
	return at, err
}

// sampler makes rows of messages.
type sampler struct {
	*filler
	cfg     *pipeline.Config
	aligner *align.Aligner
	window  pipeline.Window
}

func (s *sampler) configure(parse func([]byte) (pipeline.Config, error), bundle []byte) error {
	if len(bundle) == 0 {
		return nil
	}
	cfg, err := parse(bundle)
	if err != nil {
		return err
	}
	s.cfg, s.aligner = &cfg, align.New(cfg.Align)
	return nil
}

func (s *sampler) message(r *ingest.Record) {
	seen := s.window.Push(r)
	if s.aligner == nil {
		return
	}
	s.aligner.Read(r, seen, func(sm *ingest.Sample, ch int, raw float64, why ingest.Reason) {
		t, clock := sm.Time, "sender"
		if t == ingest.NoTime {
			t, clock = r.Host, "receipt"
		}
		channel, unit, quality, si := "", string(sm.Unit), "", math.NaN()
		if ch >= 0 {
			c := &s.cfg.Compute.Channels[ch]
			channel = c.ID
			if why != ingest.ReasonUnit && why != ingest.ReasonNotFinite {
				unit = c.Raw.Name
				v, q := c.Convert(raw)
				quality = q.String()
				if q.Usable() {
					si = v - c.Zero.At(t)
				}
			}
		}
		note := ""
		if why != ingest.ReasonNone {
			note = why.String()
		}
		s.batch.t = append(s.batch.t, t)
		s.text("channel", channel)
		s.number("value", raw)
		s.text("unit", unit)
		s.number("si", si)
		s.text("quality", quality)
		s.text("note", note)
		s.text("clock", clock)
		s.number("delay_s", float64(r.Host-t)/1e9)
		s.whole("record", int64(r.Seq))
		s.text("topic", r.Topic)
		s.text("name", string(sm.Name))
	})
}

// eventColumns are those of the table of events. What an event does not have is
// missing.
var eventColumns = []column{
	{"kind", "", "alarm, mark, run, config, quarantine, reduction …", text},
	{"event", "", "Of a run: started or ended", text},
	{"run", "", "Run", text},
	{"id", "", "Alarm", text},
	{"rule", "", "Rule of the alarm", text},
	{"title", "", "Title of the alarm", text},
	{"text", "", "Text", text},
	{"priority", "", "Priority of the alarm", text},
	{"state", "", "State of the alarm", text},
	{"value", "", "Value of the alarm, in the unit beside it", number},
	{"peak", "", "Its worst value since the raise", number},
	{"unit", "", "Unit of value and peak", text},
	{"by", "", "Person", text},
	{"reason", "", "Reason given", text},
	{"epoch", "", "Number of the daemon's life", whole},
	{"n", "", "Number of the outcome", whole},
	{"json", "", "The whole event as it was sent", text},
}

// event is what is taken out of the JSON of an event.
type event struct {
	Event    string          `json:"event"`
	Run      json.RawMessage `json:"run"`
	ID       string          `json:"id"`
	Rule     string          `json:"rule"`
	Title    string          `json:"title"`
	Text     string          `json:"text"`
	Priority string          `json:"priority"`
	State    string          `json:"state"`
	Value    *float64        `json:"value"`
	Peak     *float64        `json:"peak"`
	Unit     string          `json:"unit"`
	By       string          `json:"by"`
	AckBy    string          `json:"acknowledged_by"`
	AsideBy  string          `json:"aside_by"`
	Reason   string          `json:"reason"`
}

// run gives the id of the run, which is an object or a name.
func (v *event) run() string {
	var o struct {
		ID string `json:"id"`
	}
	var id string
	if json.Unmarshal(v.Run, &o) != nil {
		_ = json.Unmarshal(v.Run, &id) // of a later build: it stays in the column json
	}
	return o.ID + id
}

func (e *Export) events(ctx context.Context, fn func(*batch) error) error {
	f := newFiller(e.columns)
	known := func(v *float64) float64 {
		if v == nil {
			return math.NaN()
		}
		return *v
	}
	err := e.file.Events(ctx, e.opt.From, e.opt.To, func(ev *runfile.Event) error {
		var v event
		if json.Unmarshal(ev.JSON, &v) != nil {
			v = event{}
			_ = json.Unmarshal(ev.JSON, &v.Text) // some are a text alone
		}
		by := v.By
		for _, other := range []string{v.AckBy, v.AsideBy} {
			if by == "" {
				by = other
			}
		}
		f.batch.t = append(f.batch.t, ev.T)
		f.text("kind", ev.Kind)
		f.text("event", v.Event)
		f.text("run", v.run())
		f.text("id", v.ID)
		f.text("rule", v.Rule)
		f.text("title", v.Title)
		f.text("text", v.Text)
		f.text("priority", v.Priority)
		f.text("state", v.State)
		f.number("value", known(v.Value))
		f.number("peak", known(v.Peak))
		f.text("unit", v.Unit)
		f.text("by", by)
		f.text("reason", v.Reason)
		f.whole("epoch", int64(ev.Epoch))
		f.whole("n", int64(ev.N))
		f.text("json", string(ev.JSON))
		return f.full(false, fn)
	})
	if err != nil {
		return err
	}
	return f.full(true, fn)
}
