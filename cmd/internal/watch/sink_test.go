package watch_test

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/influx"
	"throatwatch/monitor/influx/influxtest"
	"throatwatch/rules/pipeline"
)

// recorder plays a rehearsal into a data folder.
type recorder struct {
	t       *testing.T
	dir     string
	bundle  []byte
	cfg     pipeline.Config
	store   *watch.Store
	core    *watch.Core
	feed    *watch.Feed
	request int
}

func newRecorder(t *testing.T) *recorder {
	t.Helper()
	return newRecorderOf(t, "../../../testdata/rigs/example.yaml")
}

// newRecorderOf is newRecorder for a rig file.
func newRecorderOf(t *testing.T, rig string) *recorder {
	t.Helper()
	b, cfg, faults := config.Load(rig)
	if err := watch.Faults(faults); err != nil {
		t.Fatal(err)
	}
	r := &recorder{t: t, dir: t.TempDir(), bundle: b.Marshal(), cfg: cfg}
	r.open(time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano())
	t.Cleanup(r.close)
	return r
}

// open begins where the data folder ends, at host.
func (r *recorder) open(host int64) {
	r.t.Helper()
	var err error
	if r.store, err = watch.OpenStore(r.t.Context(), r.dir, runfile.Options{}, slog.New(slog.DiscardHandler)); err != nil {
		r.t.Fatal(err)
	}
	if r.core, err = r.store.Restore(r.t.Context(), pipeline.NewMachine(watch.Parse), "test", "test"); err != nil {
		r.t.Fatal(err)
	}
	r.core.ChunkFor = watch.SinkChunkFor
	r.feed = watch.NewFeed(r.core, r.store)
	r.must(r.feed.Begin(r.t.Context(), pipeline.Boot{Epoch: r.core.State.Epoch + 1}, r.bundle, host))
}

func (r *recorder) close() {
	if err := r.store.Close(context.Background()); err != nil {
		r.t.Error(err)
	}
}

func (r *recorder) must(err error) {
	r.t.Helper()
	if err != nil {
		r.t.Fatal(err)
	}
}

// quick gives the messages of a quick rehearsal that begins at host.
func (r *recorder) quick(host int64) (msgs []rehearsal.Message) {
	r.t.Helper()
	rig, err := rehearsal.New(r.cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Start: host})
	r.must(err)
	for more := true; more; {
		msgs, more = rig.Next(msgs)
	}
	return msgs
}

func (r *recorder) play(msgs []rehearsal.Message) {
	r.t.Helper()
	for _, m := range msgs {
		r.must(r.feed.Until(r.t.Context(), m.At+m.Delay))
		in := watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}
		r.must(r.feed.Take(r.t.Context(), in, m.At+m.Delay))
	}
	r.must(r.feed.End(r.t.Context()))
}

func (r *recorder) act(do, text string) {
	r.t.Helper()
	r.request++
	payload, err := json.Marshal(pipeline.Action{Do: do, Text: text, By: "T. Ester", RequestID: fmt.Sprint(r.request)})
	r.must(err)
	r.must(r.feed.Take(r.t.Context(), watch.Input{Kind: ingest.KindAction, Payload: payload}, r.core.State.Host))
	r.must(r.feed.End(r.t.Context()))
}

// rest lets host time pass without data, with commits.
func (r *recorder) rest(d time.Duration) {
	r.t.Helper()
	r.must(r.feed.Until(r.t.Context(), r.core.State.Host+int64(d)))
	r.must(r.feed.End(r.t.Context()))
}

// point is what the database should hold of one instant: numbers, texts, truths.
type point map[string]any

// stored gives what the files of the data folder hold, by measurement and time, by
// the reading methods that the sink does not use.
func (r *recorder) stored() (points map[string]map[int64]point, runs []runfile.Run) {
	r.t.Helper()
	ctx := r.t.Context()
	runs, err := r.store.Catalog().List(ctx, runfile.Filter{})
	r.must(err)
	points = map[string]map[int64]point{"operating_point": {}, "channel": {}, "alarm": {}, "mark": {}, "run": {}}
	live, _ := r.store.Current()
	paths, err := filepath.Glob(filepath.Join(r.dir, "runs", "*.db"))
	r.must(err)
	if !slices.Contains(paths, live.Path()) {
		paths = append(paths, live.Path())
	}
	for _, path := range paths {
		f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
		r.must(err)
		for kind, name := range map[string]string{pipeline.ChunkPoints: "operating_point", pipeline.ChunkChannels: "channel"} {
			r.must(f.Chunks(ctx, kind, math.MinInt64, math.MaxInt64, func(c *runfile.Chunk) error {
				var table archive.Chunk
				if err := archive.NewCodec().Decode(&table, c.Bytes, nil); err != nil {
					return err
				}
				for i, t := range table.Times {
					points[name][t] = expected(&table, i, t, runs)
				}
				return nil
			}))
		}
		r.must(f.Events(ctx, math.MinInt64, math.MaxInt64, func(e *runfile.Event) error {
			of, ok := points[e.Kind]
			if !ok {
				return nil
			}
			var p point
			if err := json.Unmarshal(e.JSON, &p); err != nil {
				return err
			}
			switch run, _ := p["run"].(map[string]any); e.Kind {
			case "run":
				p["run"], p["engine"], p["by"] = run["id"], run["engine"], run["by"]
			case "mark":
				p["run"] = runs[0].ID // this test has one, and marks only in it
			case "alarm":
				if id, _, _ := strings.Cut(p["id"].(string), "/"); id != "-" {
					p["run"] = id
				}
			}
			of[e.T/1000*1000+int64(e.N%1000)] = p
			return nil
		}))
		r.must(f.Close())
	}
	return points, runs
}

// expected translates a row of a chunk the long way round.
func expected(table *archive.Chunk, i int, t int64, runs []runfile.Run) point {
	p := point{}
	for _, col := range table.Columns {
		name, channel := strings.CutPrefix(col.Name, "channel.")
		switch {
		case channel || col.Kind == archive.KindFloat:
			if v := col.Float[i]; !math.IsNaN(v) {
				p[name] = v
			}
		case strings.HasPrefix(name, "quality."):
			p[name] = fmt.Sprint(monitor.Quality(col.Byte[i]))
		case name == "choke_state":
			p[name] = fmt.Sprint(monitor.ChokeState(col.Byte[i]))
		case name == "phase":
			p[name] = fmt.Sprint(monitor.Phase(col.Byte[i]))
		case strings.HasSuffix(name, "_from"):
			p[name] = fmt.Sprint(monitor.Source(col.Byte[i]))
		case name == "flags":
			p["choke_marginal"] = col.Byte[i]&1 != 0
			p["choke_armed"] = col.Byte[i]&2 != 0
			p["lit"] = col.Byte[i]&4 != 0
			p["steady"] = col.Byte[i]&8 != 0
		}
	}
	for _, run := range runs {
		if t > run.Started && (run.Ended == 0 || t <= run.Ended) {
			p["run"] = run.ID
		}
	}
	return p
}

// forgetful is a cursor store whose process is killed between a write and every
// third save.
type forgetful struct {
	watch.CursorFile
	saves int
}

func (f *forgetful) Save(c influx.Cursor) error {
	if f.saves++; f.saves%3 == 0 {
		return nil
	}
	return f.CursorFile.Save(c)
}

// TestSinkAgainstRealServer writes a whole rehearsed test into a real database
// while the database goes away and comes back, the sink is killed between write
// and save, and the daemon is restarted. In the end the database holds what the
// files hold: every point once, every value to the last bit.
func TestSinkAgainstRealServer(t *testing.T) {
	server := influxtest.Start(t, influxtest.Options{})
	server.Query("", "CREATE DATABASE hall")
	r := newRecorder(t)
	cursors := &forgetful{CursorFile: watch.CursorFile{Path: filepath.Join(r.dir, "cursor.json"), Target: "hall"}}
	var outcomes *watch.Outcomes
	var sink *influx.Sink
	restart := func() {
		if outcomes != nil {
			sink.Close()
			r.must(outcomes.Close())
		}
		outcomes = watch.NewOutcomes(r.store, slog.New(slog.DiscardHandler))
		var err error
		sink, err = influx.New(influx.Config{
			Target: influx.Target{URL: server.URL, Bucket: "hall/autogen"}, Rig: r.cfg.Rig.ID,
			Source: outcomes, Cursor: cursors, Rejected: filepath.Join(r.dir, "rejected.lp"), Lines: 170,
		})
		r.must(err)
	}
	drain := func() {
		for sink.Step(t.Context()) == 0 {
		}
	}
	restart()

	msgs := r.quick(r.core.State.Host + 1e9)
	const parts = 25
	down, failed := false, 0
	for i := range parts {
		switch i {
		case 8:
			server.Stop()
			down = true
		case 14:
			server.Start()
			down = false
		case 18: // the daemon starts again
			sink.Close()
			r.must(outcomes.Close())
			outcomes = nil
			r.close()
			r.open(r.core.State.Host + 1e9)
			restart()
		case 21: // the run ends, while the engine is still turning
			r.act(pipeline.DoMark, "first of one instant")
			r.act(pipeline.DoMark, "second of one instant")
			r.act(pipeline.DoRunEnd, "")
		}
		r.play(msgs[i*len(msgs)/parts : (i+1)*len(msgs)/parts])
		drain()
		switch st := sink.Status(); {
		case !down && st.State != influx.Working:
			t.Errorf("part %d: status %+v, want working", i, st)
		case down && st.State == influx.Waiting:
			failed++ // not when no chunk was closed yet
		}
		if i%4 == 3 {
			restart()
		}
	}
	r.rest(15 * time.Second)
	drain()
	if st := sink.Status(); st.State != influx.Working || st.Rejected+st.Expired+outcomes.Skipped() != 0 || failed < 3 {
		t.Errorf("status %+v, skipped %d, %d failures while the server was away", st, outcomes.Skipped(), failed)
	}

	points, runs := r.stored()
	if len(runs) != 1 || runs[0].State != runfile.StateEnded || len(points["operating_point"]) < 1000 || len(points["alarm"]) < 10 || len(points["mark"]) != 2 || len(points["run"]) != 2 {
		t.Fatalf("%d runs with %d points, %d alarms, %d marks, %d run events: not a whole test",
			len(runs), len(points["operating_point"]), len(points["alarm"]), len(points["mark"]), len(points["run"]))
	}
	for name, want := range points {
		compare(t, server, r.cfg.Rig.ID, name, want)
	}
	// The run's points are those of its digest, which begins after the one that started it.
	first, last := int64(0), int64(0)
	inRun := 0
	for at, p := range points["operating_point"] {
		if p["run"] == runs[0].ID {
			inRun++
			if first == 0 || at < first {
				first = at
			}
			last = max(last, at)
		}
	}
	if inRun == len(points["operating_point"]) || first <= runs[0].Started || last != runs[0].Ended {
		t.Errorf("points of the run from %d to %d, run from %d to %d", first, last, runs[0].Started, runs[0].Ended)
	}
	got := server.Query("hall", `SELECT count(choke_state) FROM operating_point WHERE run = '`+runs[0].ID+`'`)
	if n := got[0].Values[0][1]; n != json.Number(fmt.Sprint(inRun)) {
		t.Errorf("the database gives %v points for the run, want %d", n, inRun)
	}
}

// TestDatabaseAwayForAWholeRun: the site's database is away while a run with 20 000
// received values per second is recorded. Started again, it gets every point once,
// counted by its own queries, also from a sink that is killed on the way; nothing is
// set aside.
func TestDatabaseAwayForAWholeRun(t *testing.T) {
	channels, rate := 200, 100
	if testing.Short() {
		channels, rate = 50, 20
	}
	server := influxtest.Start(t, influxtest.Options{})
	server.Query("", "CREATE DATABASE hall")
	server.Stop()
	r := newRecorderOf(t, rigOf(t, channels))
	rig, err := rehearsal.New(r.cfg, rehearsal.Options{Seed: 5, Rate: float64(rate), Scenario: rehearsal.Quick, Start: r.core.State.Host + 1e9})
	r.must(err)
	cursors := &forgetful{CursorFile: watch.CursorFile{Path: filepath.Join(r.dir, "cursor.json"), Target: "hall"}}
	rejected := filepath.Join(r.dir, "rejected.lp")
	open := func() (*influx.Sink, *watch.Outcomes) {
		outcomes := newOutcomes(t, r.store)
		sink, err := influx.New(influx.Config{
			Target: influx.Target{URL: server.URL, Bucket: "hall/autogen"}, Rig: r.cfg.Rig.ID,
			Source: outcomes, Cursor: cursors, Rejected: rejected, Lines: 400,
		})
		r.must(err)
		t.Cleanup(sink.Close)
		return sink, outcomes
	}
	sink, _ := open()
	var msgs []rehearsal.Message
	for more := true; more; {
		if msgs, more = rig.Next(msgs[:0]); len(msgs) > 0 {
			for _, m := range msgs {
				r.must(r.feed.Until(t.Context(), m.At+m.Delay))
				r.must(r.feed.Take(t.Context(), watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay))
			}
		}
	}
	r.must(r.feed.End(t.Context()))
	r.act(pipeline.DoRunEnd, "")
	r.rest(15 * time.Second)
	for range 3 {
		if sink.Step(t.Context()) == 0 {
			t.Fatal("a step without a database says that it wrote")
		}
	}
	if st := sink.Status(); st.State != influx.Waiting || st.Written != 0 || st.Err == "" {
		t.Errorf("without a database: %+v", st)
	}
	if rows := float64(r.core.State.Align.Samples) / rig.Length().Seconds(); rows < 0.8*float64(channels*rate) {
		t.Errorf("%.0f values per second were received, some %d are due", rows, channels*rate)
	}

	server.Start()
	steps := 0
	for sink.Step(t.Context()) == 0 && steps < 3 { // then it is killed
		steps++
	}
	sink, outcomes := open()
	began := time.Now()
	for sink.Step(t.Context()) == 0 {
	}
	st := sink.Status()
	t.Logf("%d points in %v, after %d steps of the sink before", st.Written, time.Since(began).Round(time.Millisecond), steps)
	if steps != 3 || st.Written < 1000 {
		t.Errorf("%d points after %d steps of the sink before: it was not killed on the way", st.Written, steps)
	}
	if _, err := os.Stat(rejected); st.State != influx.Working || st.Rejected+st.Expired+outcomes.Skipped() != 0 || !errors.Is(err, os.ErrNotExist) {
		t.Errorf("%+v, %d records skipped, file of rejected lines: %v", st, outcomes.Skipped(), err)
	}
	points, _ := r.stored()
	for name, field := range map[string]string{"operating_point": "choke_state", "channel": fmt.Sprintf("quality.added_%d", channels-1), "alarm": "rule", "run": "event"} {
		got := server.Query("hall", fmt.Sprintf(`SELECT count(%q) FROM %q`, field, name))
		if len(got) != 1 || got[0].Values[0][1] != json.Number(fmt.Sprint(len(points[name]))) {
			t.Errorf("%s: the database counts %+v, the files hold %d", name, got, len(points[name]))
		}
	}
	if n := len(points["channel"]); n < 20*55 {
		t.Errorf("%d scans are stored, of a minute at 20 per second", n)
	}
}

// rigOf gives a rig file with so many channels.
func rigOf(t *testing.T, channels int) string {
	t.Helper()
	text, err := os.ReadFile("../../../testdata/rigs/example.yaml")
	if err != nil {
		t.Fatal(err)
	}
	b := bytes.NewBuffer(text)
	for i := bytes.Count(text, []byte("\n  - id:")) + bytes.Count(text, []byte("\n  - {id:")); i < channels; i++ {
		fmt.Fprintf(b, "  - {id: added_%d, like: p_compressor, title: \"Added channel %d\"}\n", i, i)
	}
	path := filepath.Join(t.TempDir(), "rig.yaml")
	if err := os.WriteFile(path, b.Bytes(), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// compare reads a measurement back and holds it against want.
func compare(t *testing.T, server *influxtest.Server, rig, name string, want map[int64]point) {
	t.Helper()
	got := server.Query("hall", `SELECT * FROM "`+name+`" WHERE rig = '`+rig+`'`)
	if len(got) != 1 || len(got[0].Values) != len(want) {
		t.Errorf("%s: %d series, want 1 with %d points", name, len(got), len(want))
		return
	}
	values, seen := 0, map[int64]bool{}
	for _, row := range got[0].Values {
		at, err := row[0].(json.Number).Int64()
		if err != nil {
			t.Fatal(err)
		}
		p, ok := want[at]
		if !ok || seen[at] {
			t.Errorf("%s: a point at %d that is not stored, or twice", name, at)
			continue
		}
		seen[at] = true
		for i, column := range got[0].Columns {
			if column == "time" || column == "rig" {
				continue
			}
			v := row[i]
			if n, ok := v.(json.Number); ok {
				if v, err = n.Float64(); err != nil {
					t.Fatal(err)
				}
			}
			if w := p[column]; v != w && (v != nil || w != "") { // an empty text is left out
				t.Errorf("%s at %d: %s is %v, want %v", name, at, column, v, w)
			}
			values++
		}
		for key := range p {
			if (name == "operating_point" || name == "channel") && !slices.Contains(got[0].Columns, key) {
				t.Errorf("%s: the database has no field %s", name, key)
			}
		}
	}
	t.Logf("%s: %d points, %d values compared", name, len(want), values)
}

// follow gives what is recorded after a cursor, in pieces of limit rows.
func follow(t *testing.T, o *watch.Outcomes, c influx.Cursor, limit int) (rows []string, end influx.Cursor) {
	t.Helper()
	for {
		got, next, err := o.Follow(t.Context(), c, limit)
		if err != nil {
			t.Fatal(err)
		}
		if len(got) > limit {
			t.Fatalf("%d rows, at most %d were asked for", len(got), limit)
		}
		for i := range got {
			rows = append(rows, fmt.Sprint(got[i]))
		}
		if c = next; len(got) == 0 {
			return rows, c
		}
	}
}

func newOutcomes(t *testing.T, s *watch.Store) *watch.Outcomes {
	t.Helper()
	o := watch.NewOutcomes(s, slog.New(slog.DiscardHandler))
	t.Cleanup(func() {
		if err := o.Close(); err != nil {
			t.Error(err)
		}
	})
	return o
}

// TestOutcomesAreTheSameHoweverTheyAreCut: the size of the pieces, the moment of
// reading and a restart at any cursor change nothing.
func TestOutcomesAreTheSameHoweverTheyAreCut(t *testing.T) {
	r := newRecorder(t)
	msgs := r.quick(r.core.State.Host + 1e9)
	along := newOutcomes(t, r.store)
	var live []string
	var c influx.Cursor
	const parts = 40
	for i := range parts {
		r.play(msgs[i*len(msgs)/parts : (i+1)*len(msgs)/parts])
		if i == 30 {
			r.act(pipeline.DoRunEnd, "")
		}
		rows, end := follow(t, along, c, 5000)
		live, c = append(live, rows...), end
	}
	r.rest(15 * time.Second)
	rows, _ := follow(t, along, c, 5000)
	live = append(live, rows...)

	whole, _ := follow(t, newOutcomes(t, r.store), influx.Cursor{}, 1_000_000)
	if len(whole) < 2000 || !slices.Equal(live, whole) {
		t.Fatalf("%d rows while it was recorded, %d afterwards: they differ", len(live), len(whole))
	}
	for _, limit := range []int{97, 1000} {
		var cut []string
		var c influx.Cursor
		for {
			// A fresh one each time, as after a restart.
			o := watch.NewOutcomes(r.store, slog.New(slog.DiscardHandler))
			got, next, err := o.Follow(t.Context(), c, limit)
			if err := errors.Join(err, o.Close()); err != nil {
				t.Fatal(err)
			}
			if o.Skipped() != 0 {
				t.Fatalf("%d records skipped after %+v", o.Skipped(), c)
			}
			for i := range got {
				cut = append(cut, fmt.Sprint(got[i]))
			}
			if c = next; len(got) == 0 {
				break
			}
		}
		if !slices.Equal(cut, whole) {
			t.Errorf("pieces of %d give %d rows, want the same %d", limit, len(cut), len(whole))
		}
	}
}

// TestOutcomesOutliveTheIdleFile: what a sink has not read when the idle file is
// removed at the begin of a run is read from the file it holds; after a restart it
// is gone, which is counted.
func TestOutcomesOutliveTheIdleFile(t *testing.T) {
	r := newRecorder(t)
	r.core.ChunkFor = 300e9 // half an hour passes: few checkpoints will do
	holder := newOutcomes(t, r.store)
	r.act(pipeline.DoMark, "A")
	rows, c, err := holder.Follow(t.Context(), influx.Cursor{}, 1)
	if err != nil || len(rows) != 1 {
		t.Fatalf("%v, %v, want one mark", rows, err)
	}
	for range 90 { // 15 min, in commits
		r.rest(10 * time.Second)
	}
	r.act(pipeline.DoMark, "B")
	for range 90 {
		r.rest(10 * time.Second)
	}
	old, idle := r.store.Current()
	path := old.Path()
	r.core.ChunkFor = watch.SinkChunkFor
	msgs := r.quick(r.core.State.Host + 1e9)
	r.play(msgs)
	if _, err := os.Stat(path); !idle || !errors.Is(err, os.ErrNotExist) {
		t.Fatalf("idle file %s is still there: %v", path, err)
	}
	all, end := follow(t, holder, c, 500)
	if len(all) < 1000 || !strings.Contains(all[0], "B") || holder.Skipped() != 0 {
		t.Errorf("%d rows from %.40q, %d records skipped, want all from mark B on", len(all), all[0], holder.Skipped())
	}
	fresh := newOutcomes(t, r.store)
	rest, endToo := follow(t, fresh, c, 500)
	if fresh.Skipped() == 0 || !slices.Equal(rest, all[1:]) || end.Seq != endToo.Seq {
		t.Errorf("after a restart %d rows, %d records skipped, want %d rows and some skipped", len(rest), fresh.Skipped(), len(all)-1)
	}
	// A run file that was read is left alone: nothing lies beside it.
	r.act(pipeline.DoRunEnd, "")
	if _, err := os.Stat(old.Path() + "-wal"); err == nil {
		t.Error("the log of the idle file is left over")
	}
	logs, err := filepath.Glob(filepath.Join(r.dir, "runs", "*-wal"))
	if err != nil || len(logs) != 0 {
		t.Errorf("beside the file of the ended run lies %v (%v)", logs, err)
	}
}

// TestOutcomesTellWhatWasPruned: the idle file forgets what is older than three
// hours, also under a sink that holds it open.
func TestOutcomesTellWhatWasPruned(t *testing.T) {
	r := newRecorder(t)
	r.core.ChunkFor = 300e9 // hours pass: few checkpoints will do
	o := newOutcomes(t, r.store)
	r.act(pipeline.DoMark, "A")
	_, c, err := o.Follow(t.Context(), influx.Cursor{}, 1)
	if err != nil {
		t.Fatal(err)
	}
	r.act(pipeline.DoMark, "B")
	f, _ := r.store.Current()
	marks := func() (n int) {
		r.must(f.Events(t.Context(), math.MinInt64, math.MaxInt64, func(e *runfile.Event) error {
			if e.Kind == "mark" {
				n++
			}
			return nil
		}))
		return n
	}
	for range 3*360 + 60 {
		r.must(r.feed.Take(t.Context(), watch.Input{Kind: ingest.KindTick}, r.core.State.Host+10e9))
	}
	for i := 0; marks() > 0; i++ { // pruning is done in the background
		if i == 1000 {
			t.Fatal("the marks of three hours ago are still there")
		}
		r.rest(10 * time.Second)
	}
	r.act(pipeline.DoMark, "C")
	rows, _ := follow(t, o, c, 100)
	if len(rows) != 1 || !strings.Contains(rows[0], "C") || o.Skipped() == 0 {
		t.Errorf("rows %v, %d records skipped, want mark C and some skipped", rows, o.Skipped())
	}
}

// TestOutcomesPassDamage: a damaged chunk costs its own rows and few others, and
// is counted.
func TestOutcomesPassDamage(t *testing.T) {
	r := newRecorder(t)
	r.play(r.quick(r.core.State.Host + 1e9))
	r.act(pipeline.DoRunEnd, "")
	whole, _ := follow(t, newOutcomes(t, r.store), influx.Cursor{}, 5000)
	paths, err := filepath.Glob(filepath.Join(r.dir, "runs", "*.db"))
	if err != nil || len(paths) != 1 {
		t.Fatalf("run files %v, %v", paths, err)
	}
	file, err := os.ReadFile(paths[0])
	r.must(err)
	at := bytes.Index(file[len(file)/2:], []byte("twa\x02")) // the head of a chunk, see archive
	if at < 0 {
		t.Fatal("no chunk found")
	}
	file[len(file)/2+at+20] ^= 0xff
	r.must(os.WriteFile(paths[0], file, 0o600))
	o := newOutcomes(t, r.store)
	rows, _ := follow(t, o, influx.Cursor{Seq: 1}, 5000)
	lost := len(whole) - len(rows)
	if o.Skipped() == 0 || o.Skipped() > 1000 || lost < 150 || lost > 1000 {
		t.Errorf("%d records skipped, %d of %d rows lost, want those of one chunk and little more", o.Skipped(), lost, len(whole))
	}
	t.Logf("%d records skipped, %d of %d rows lost", o.Skipped(), lost, len(whole))
}

// TestCursorAheadBeginsAnew: a cursor of another data folder must not silence the
// sink until the records have caught up with it.
func TestCursorAheadBeginsAnew(t *testing.T) {
	r := newRecorder(t)
	r.act(pipeline.DoMark, "A")
	rows, next, err := newOutcomes(t, r.store).Follow(t.Context(), influx.Cursor{Seq: 1 << 40, Row: 3}, 10)
	if err != nil || len(rows) != 1 || next.Seq != r.core.State.Seq {
		t.Errorf("%v, %+v, %v, want the one mark", rows, next, err)
	}
}

func TestCursorFile(t *testing.T) {
	f := watch.CursorFile{Path: filepath.Join(t.TempDir(), "cursor.json"), Target: "one"}
	want := influx.Cursor{Seq: 1 << 60, Row: 7, T: 1774747800123456789, Run: "cell_2-20260302T090000Z", Started: 5, Ended: 6}
	if c, err := f.Load(); err != nil || c != (influx.Cursor{}) {
		t.Errorf("without a file: %+v, %v", c, err)
	}
	if err := f.Save(want); err != nil {
		t.Fatal(err)
	}
	if c, err := f.Load(); err != nil || c != want {
		t.Errorf("%+v, %v, want %+v", c, err, want)
	}
	other := f
	other.Target = "two"
	if c, err := other.Load(); err != nil || c != (influx.Cursor{}) {
		t.Errorf("of another target: %+v, %v", c, err)
	}
	if err := os.WriteFile(f.Path, []byte("{"), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := f.Load(); err == nil || !strings.Contains(err.Error(), f.Path) {
		t.Errorf("damaged: error %v, want one that names the file", err)
	}
	f.Path = filepath.Join(f.Path, "no")
	if err := f.Save(want); err == nil {
		t.Error("saved where no file can be")
	}
}
