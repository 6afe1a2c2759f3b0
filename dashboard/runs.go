package dashboard

import (
	"bufio"
	"cmp"
	"compress/gzip"
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"net/http"
	"net/url"
	"slices"
	"strconv"
	"strings"

	"throatwatch/dashboard/export"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/compute"
	"throatwatch/rules/pipeline"
)

const (
	maxNames  = 64
	maxPoints = 5000
	maxFind   = 200 // bytes of a text that is searched for
	// early is the host time before the start of a stretch at which its replay
	// begins, ns: a device clock may be ahead of ours by less.
	early = int64(10e9)
)

// storedRun is a run as the list shows it.
type storedRun struct {
	ID        string   `json:"id"`
	Number    uint64   `json:"number"`
	Rig       string   `json:"rig"`
	Engine    string   `json:"engine"`
	Title     string   `json:"title"`
	By        string   `json:"by"`
	Started   string   `json:"started"`
	Ended     *string  `json:"ended"`
	DurationS *float64 `json:"duration_s"` // null while it goes on
	State     string   `json:"state"`
	Keep      bool     `json:"keep"`
	Notes     string   `json:"notes"`
	Tags      []string `json:"tags"`
	SizeBytes int64    `json:"size_bytes"`
	Alarms    int      `json:"alarms"`
	Config    string   `json:"config_hash"`
	Build     string   `json:"build"`
	Digest    string   `json:"digest"`

	Parent       *string `json:"parent"` // of a reduction; else null
	ParentDigest *string `json:"parent_digest"`
	ReducedBy    *string `json:"reduced_by"`

	identityJSON
}

func viewRun(r *runfile.Run) storedRun {
	v := storedRun{
		ID: r.ID, Number: r.Number, Rig: r.Rig, Engine: strings.TrimSpace(r.Engine + " " + r.EngineSerial), Title: r.Title, By: r.Operator,
		Started: rfc3339(r.Started), Ended: optional(r.Ended), State: r.State, Keep: r.Keep, Notes: r.Notes,
		Tags: append([]string{}, r.Tags...), SizeBytes: r.Size, Alarms: r.Alarms, Config: r.ConfigHash, Build: r.Build, Digest: r.Digest,
		identityJSON: identityJSON{r.Designation, r.Test, r.Purpose, r.EngineBuild, r.NozzleSerial, r.FuelBatch, r.Aborted},
	}
	if r.State == runfile.StateRunning {
		v.State = "active"
	}
	if o := r.Reduction(); o != nil {
		v.Parent, v.ParentDigest, v.ReducedBy = &o.Parent, &o.ParentDigest, &o.By
	}
	if r.Ended != 0 {
		d := seconds(r.Ended - r.Started)
		v.DurationS = &d
	}
	return v
}

func (s *Server) runs(w http.ResponseWriter, r *http.Request) error {
	q := r.URL.Query()
	find := q.Get("find")
	if len(find) > maxFind {
		return badRequest("find: more than %d bytes", maxFind)
	}
	runs, err := s.cfg.Runs.List(r.Context(), runfile.Filter{Text: find, Tag: q.Get("tag")})
	if err != nil {
		return fmt.Errorf("runs: %w", err)
	}
	slices.SortStableFunc(runs, func(a, b runfile.Run) int { return cmp.Compare(b.Started, a.Started) })
	runs = runfile.Families(runs)
	list := make([]storedRun, len(runs))
	for i := range runs {
		list[i] = viewRun(&runs[i])
	}
	return reply(w, http.StatusOK, list)
}

// open opens the run of the path and gives its line of the list.
func (s *Server) open(ctx context.Context, id string) (*runfile.File, *runfile.Run, error) {
	runs, err := s.cfg.Runs.List(ctx, runfile.Filter{})
	if err != nil {
		return nil, nil, fmt.Errorf("runs: %w", err)
	}
	i := slices.IndexFunc(runs, func(r runfile.Run) bool { return r.ID == id })
	if i < 0 { // an id becomes a path only if the catalogue has it
		return nil, nil, notFound("no run %q is stored; GET /api/runs lists them", id)
	}
	f, err := s.cfg.Runs.Open(ctx, id)
	if errors.Is(err, fs.ErrNotExist) || errors.Is(err, runfile.ErrNotRunFile) {
		return nil, nil, notFound("the file of run %q is gone", id)
	}
	if err != nil {
		return nil, nil, fmt.Errorf("run %s: %w", id, err)
	}
	return f, &runs[i], nil
}

func (s *Server) run(w http.ResponseWriter, r *http.Request) error {
	f, line, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	return reply(w, http.StatusOK, viewRun(line))
}

// stretch reads from and to of a query; see export.Stretch.
func stretch(q url.Values, started int64) (from, to int64, err error) {
	if from, to, err = export.Stretch(q.Get("from"), q.Get("to"), started); err != nil {
		return 0, 0, badRequest("%v", err)
	}
	return from, to, nil
}

// errEnough ends a replay early.
var errEnough = errors.New("the stretch is complete")

// messages answers with the frames of a stretch of a stored run, made by stepping
// the records again: a hello, and the outcomes from the first operating point at
// or after from to the one before the first at or after to. So stretches that
// follow each other join without loss or overlap.
func (s *Server) messages(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	from, to, err := stretch(r.URL.Query(), run.Started)
	if err != nil {
		return err
	}
	if kinds := r.URL.Query().Get("kinds"); kinds != "" {
		return s.events(w, r, f, from, to, strings.Split(kinds, ","))
	}
	seq, err := f.SeqAtHost(r.Context(), from-early)
	if err != nil {
		return fmt.Errorf("messages: %w", err)
	}
	m := pipeline.NewMachine(s.cfg.Parse)
	replay, err := pipeline.OpenReplay(r.Context(), f, m, seq)
	if err != nil {
		return fmt.Errorf("messages: %w", err)
	}
	out, done := stream(w, r)
	defer done()
	var buf []byte
	began := false
	err = replay.Run(r.Context(), 0, func(_ *ingest.Record, outs []pipeline.Outcome) error {
		cfg, ok := m.Config()
		if !ok {
			return nil
		}
		for i := range outs {
			o := &outs[i]
			isPoint := o.Kind == pipeline.OutcomePoint
			if isPoint && o.T >= to {
				return errEnough
			}
			buf = buf[:0]
			if !began {
				if !isPoint || o.T < from {
					continue
				}
				began = true
				// What else came about in this step is in this hello already, and
				// is told again by its frames: they all say what is, not what changed.
				buf = append(appendHello(buf, m, replay.State, place{o.N - 1, o.T - cfg.Align.Period}, s.cfg.Build), '\n')
			}
			if buf, ok = appendStored(buf, o, &cfg); !ok {
				continue
			}
			buf = append(buf, '\n')
			if o.Kind == pipeline.OutcomeConfig && o.OK { // other channels from here on
				buf = append(appendHello(buf, m, replay.State, place{o.N, o.T}, s.cfg.Build), '\n')
			}
			if _, err := out.Write(buf); err != nil {
				return err
			}
		}
		return nil
	})
	s.broken(out, r, err)
	return nil
}

// appendStored writes the frame of an outcome as a viewer with all channels gets it.
func appendStored(dst []byte, o *pipeline.Outcome, cfg *pipeline.Config) ([]byte, bool) {
	if o.Kind == pipeline.OutcomeChannels {
		return appendChannels(dst, o, cfg, indices(cfg, nil)), true
	}
	dst, _, ok := appendFrame(dst, o, cfg)
	return dst, ok
}

// events answers with the stored frames of some kinds, by event time.
func (s *Server) events(w http.ResponseWriter, r *http.Request, f *runfile.File, from, to int64, kinds []string) error {
	for _, k := range kinds {
		if k != "alarm" && k != "mark" && k != "log" { // an event's JSON is the member of its frame for these
			return badRequest("kinds %q: give some of alarm, mark, log, or none for every frame", k)
		}
	}
	out, done := stream(w, r)
	defer done()
	var buf []byte
	err := f.Events(r.Context(), from, to, func(e *runfile.Event) error {
		if !slices.Contains(kinds, e.Kind) {
			return nil
		}
		buf = open(buf[:0], e.Kind, &pipeline.Outcome{Epoch: e.Epoch, N: e.N, T: e.T})
		key := e.Kind
		if key == "log" {
			key = "entry"
		}
		buf = append(append(name(buf, key), e.JSON...), '}', '\n')
		_, err := out.Write(buf)
		return err
	})
	s.broken(out, r, err)
	return nil
}

// broken ends a stream with an error frame when err is not nil: the answer has
// begun, so its status cannot tell any more.
func (s *Server) broken(out io.Writer, r *http.Request, err error) {
	if err == nil || errors.Is(err, errEnough) || r.Context().Err() != nil {
		return
	}
	s.cfg.Log.Error("stream", "path", r.URL.Path, "err", err)
	_, _ = out.Write(append(text([]byte(`{"kind":"error"`), "detail", err.Error()), '}', '\n'))
}

// stream begins an NDJSON answer, packed if the client takes it.
func stream(w http.ResponseWriter, r *http.Request) (out io.Writer, done func()) {
	w.Header().Set("Content-Type", "application/x-ndjson")
	w.Header().Set("Cache-Control", "no-store")
	if !strings.Contains(r.Header.Get("Accept-Encoding"), "gzip") {
		b := bufio.NewWriterSize(w, 64<<10)
		return b, func() { _ = b.Flush() }
	}
	w.Header().Set("Content-Encoding", "gzip")
	z, err := gzip.NewWriterLevel(w, gzip.BestSpeed)
	if err != nil {
		panic("dashboard: gzip level: " + err.Error())
	}
	b := bufio.NewWriterSize(z, 64<<10)
	return b, func() {
		_ = b.Flush()
		_ = z.Close()
	}
}

// nullable is a float64 that is null in JSON when it is NaN.
type nullable float64

// MarshalJSON writes null for NaN.
func (v nullable) MarshalJSON() ([]byte, error) { return float(nil, float64(v)), nil }

func nullables(v []float64) []nullable {
	out := make([]nullable, len(v))
	for i := range v {
		out[i] = nullable(v[i])
	}
	return out
}

// seriesJSON is one name of a series answer: numbers, or transitions of a state.
type seriesJSON struct {
	Unit  string     `json:"unit"`
	T     []float64  `json:"t"` // seconds of the run
	Min   []nullable `json:"min,omitempty"`
	Max   []nullable `json:"max,omitempty"`
	Last  []nullable `json:"last,omitempty"`
	N     []int      `json:"n,omitempty"`
	State []string   `json:"state,omitempty"`
	Cause *string    `json:"cause"` // why there is nothing
}

// plot gathers one name.
type plot struct {
	name  string
	kind  string // of chunk
	unit  string
	state func(byte) string // nil for numbers
	dec   *archive.Decimator
	out   seriesJSON
	last  int // state of the newest row, -1 before the first
}

// newPlot tells from a name where its column is.
func newPlot(name string, cfg *pipeline.Config, from, to int64, points int) (*plot, error) {
	p := &plot{name: name, kind: pipeline.ChunkPoints, last: -1, dec: archive.NewDecimator(from, to, points)}
	if q, ok := monitor.ParseQuantity(name); ok {
		p.unit = q.Info().Unit
		return p, nil
	}
	switch name {
	case "choke_state":
		p.state = func(b byte) string { return monitor.ChokeState(b).String() }
		return p, nil
	case "phase":
		p.state = func(b byte) string { return monitor.Phase(b).String() }
		return p, nil
	case "back_pressure_from", "total_pressure_from", "total_temperature_from":
		p.state = func(b byte) string { return monitor.Source(b).String() }
		return p, nil
	}
	group, id, _ := strings.Cut(name, ".")
	i := slices.IndexFunc(cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == id })
	if i < 0 || group != "channel" && group != "quality" {
		return nil, badRequest("name %q: give a quantity, choke_state, phase, back_pressure_from, total_pressure_from, total_temperature_from, channel.<id> or quality.<id>", name)
	}
	p.kind = pipeline.ChunkChannels
	if group == "channel" {
		p.unit = cfg.Compute.Channels[i].Unit.Dimension.SI().Name
	} else {
		p.state = func(b byte) string { return monitor.Quality(b).String() }
	}
	return p, nil
}

// take adds the rows of a chunk.
func (p *plot) take(c *archive.Chunk, from, to, started int64) {
	i := slices.IndexFunc(c.Columns, func(col archive.Column) bool { return col.Name == p.name })
	if i < 0 {
		return
	}
	if p.state == nil {
		p.dec.Add(c.Times, c.Columns[i].Float)
		return
	}
	for k, b := range c.Columns[i].Byte {
		if t := c.Times[k]; t >= from && t < to && int(b) != p.last {
			p.last = int(b)
			p.out.T, p.out.State = append(p.out.T, seconds(t-started)), append(p.out.State, p.state(b))
		}
	}
}

func (p *plot) result(started int64) *seriesJSON {
	out := &p.out
	out.Unit = p.unit
	if out.T == nil {
		out.T = []float64{}
	}
	values := len(out.State)
	if p.state == nil {
		s := p.dec.Series()
		for i, t := range s.T {
			out.T = append(out.T, seconds(t-started))
			values += s.N[i]
		}
		out.Min, out.Max, out.Last, out.N = nullables(s.Min), nullables(s.Max), nullables(s.Last), s.N
	}
	why := "its value is not available anywhere in this stretch"
	if len(out.T) == 0 {
		why = "no rows of it are stored in this stretch"
	}
	if values == 0 {
		out.Cause = &why
	}
	return out
}

// answerJSON is the answer to a query for series.
type answerJSON struct {
	Through string                 `json:"through"` // epoch.n of the newest outcome that may be in it
	Series  map[string]*seriesJSON `json:"series"`
}

// seriesQuery reads names and points of a query.
func seriesQuery(q url.Values) (names []string, points int, err error) {
	points = 1000
	if text := q.Get("points"); text != "" {
		if points, err = strconv.Atoi(text); err != nil || points < 1 || points > maxPoints {
			return nil, 0, badRequest("points %q: give a number from 1 to %d", text, maxPoints)
		}
	}
	names = strings.Split(q.Get("names"), ",")
	if names[0] == "" || len(names) > maxNames {
		return nil, 0, badRequest("names: give 1 to %d names, separated by commas", maxNames)
	}
	slices.Sort(names)
	return slices.Compact(names), points, nil
}

// series answers with columns of a stored run, thinned without losing a spike.
func (s *Server) series(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	from, to, err := stretch(r.URL.Query(), run.Started)
	if err != nil {
		return err
	}
	names, points, err := seriesQuery(r.URL.Query())
	if err != nil {
		return err
	}
	state, cfg, err := s.newestState(r.Context(), f)
	if err != nil {
		return err
	}
	to = max(min(to, state.Align.Next), from+1) // no row is behind the newest scan
	plots := make([]*plot, len(names))
	for i, name := range names {
		if plots[i], err = newPlot(name, cfg, from, to, points); err != nil {
			return err
		}
	}
	if err := gather(r.Context(), f, plots, from, to, run.Started); err != nil {
		return fmt.Errorf("series: %w", err)
	}
	out := answerJSON{Through: fmt.Sprintf("%d.%d", state.Epoch, state.N), Series: make(map[string]*seriesJSON, len(plots))}
	for _, p := range plots {
		out.Series[p.name] = p.result(run.Started)
	}
	return reply(w, http.StatusOK, out)
}

// gather reads the chunks that the plots need.
func gather(ctx context.Context, f *runfile.File, plots []*plot, from, to, started int64) error {
	codec := archive.NewCodec()
	var rows archive.Chunk
	for _, kind := range []string{pipeline.ChunkPoints, pipeline.ChunkChannels} {
		var columns []string
		for _, p := range plots {
			if p.kind == kind {
				columns = append(columns, p.name)
			}
		}
		if len(columns) == 0 {
			continue
		}
		if err := f.Chunks(ctx, kind, from, to, func(c *runfile.Chunk) error {
			if err := codec.Decode(&rows, c.Bytes, columns); err != nil {
				return err
			}
			for _, p := range plots {
				p.take(&rows, from, to, started)
			}
			return nil
		}); err != nil {
			return err
		}
	}
	return nil
}

// newestState gives the state of the newest checkpoint, up to which the chunks
// reach, and its configuration.
func (s *Server) newestState(ctx context.Context, f *runfile.File) (*pipeline.State, *pipeline.Config, error) {
	c, err := f.LastCheckpoint(ctx, math.MaxInt64)
	if errors.Is(err, runfile.ErrNoCheckpoint) {
		return nil, nil, &problem{http.StatusConflict, "the run has no stored series yet: the first is closed after a minute"}
	}
	if err != nil {
		return nil, nil, fmt.Errorf("series: %w", err)
	}
	state, err := pipeline.Decode(c.State)
	if err != nil {
		return nil, nil, fmt.Errorf("series: %w", err)
	}
	cfg, err := s.cfg.Parse(state.Bundle)
	if err != nil {
		return nil, nil, fmt.Errorf("series: %w", err)
	}
	return state, &cfg, nil
}
