package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"math"
	"net/http"
	"net/http/httptest"
	"net/url"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"syscall"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/dashboard/export"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// options say which run is made.
type options struct {
	rig      string
	channels int
	rate     float64 // values of each channel per second
	length   time.Duration
	dir      string // data folder; "" = a temporary one
}

// measure makes the run and gives its figures.
func measure(ctx context.Context, o options, tell func(string)) (list []figure, err error) {
	if o.dir == "" {
		if o.dir, err = os.MkdirTemp("", "storage-figures-"); err != nil {
			return nil, err
		}
		defer func() { err = errors.Join(err, os.RemoveAll(o.dir)) }()
	}
	runsList := filepath.Join(o.dir, "catalog.db")
	_, err = os.Stat(runsList)
	fresh := err != nil
	if fresh {
		tell(fmt.Sprintf("recording %v of %d channels at %g/s", o.length, o.channels, o.rate))
		if err := record(ctx, o); err != nil {
			return nil, err
		}
	}
	catalog, err := runfile.OpenCatalog(ctx, runsList, filepath.Join(o.dir, "runs"))
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, catalog.Close()) }()
	runs := watch.StoredRuns{Catalog: catalog}
	all, err := runs.List(ctx, runfile.Filter{})
	if err != nil {
		return nil, err
	}
	if len(all) != 1 {
		return nil, fmt.Errorf("%d runs were recorded, one is due", len(all))
	}
	run := &all[0]
	f, err := runs.Open(ctx, run.ID)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()

	tell("replaying")
	again, err := replay(ctx, f)
	if err != nil {
		return nil, err
	}
	if fresh && again.digest != run.Digest { // an earlier one may be of another build
		return nil, fmt.Errorf("the replay gives the digest %.12s, the recording gave %.12s", again.digest, run.Digest)
	}
	length := float64(run.Ended-run.Started) / 1e9
	list = []figure{
		{name: "length of the run", value: length, unit: "s"},
		{name: "values received", value: again.values, unit: ""},
		{name: "run file", value: float64(run.Size) / 1e6, unit: "MB"},
		{name: "run file per value received", value: float64(run.Size) / again.values, unit: "B", most: 8},
	}
	for _, part := range []struct {
		name, kind string
		what       export.What
		most       float64
	}{
		{"channel chunks", pipeline.ChunkChannels, export.Scans, 1.0},
		{"derived chunks", pipeline.ChunkPoints, export.OperatingPoints, 1.3},
	} {
		tell("comparing " + part.name + " with Parquet")
		chunks, err := perRow(ctx, f, part.kind)
		if err != nil {
			return nil, err
		}
		parquet, err := parquetPerRow(ctx, f, part.what)
		if err != nil {
			return nil, err
		}
		list = append(list,
			figure{name: part.name, value: chunks, unit: "B per scan"},
			figure{name: "… against zstd Parquet of the same", value: chunks / parquet, unit: "×", most: part.most})
	}
	list = append(list, figure{name: "replay", value: length / again.took, unit: "× real time on one core", least: 600, timed: true})
	tell("asking the server of the page")
	answers, err := answers(ctx, runs, run)
	return append(list, answers...), err
}

// cpu gives the processor time that this process has taken, s.
func cpu() (float64, error) {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		return 0, fmt.Errorf("processor time: %w", err)
	}
	return time.Duration(u.Utime.Nano() + u.Stime.Nano()).Seconds(), nil
}

// rigWith gives a rig file with as many channels as are asked for, in dir.
func rigWith(o options) (path string, err error) {
	text, err := os.ReadFile(o.rig)
	if err != nil {
		return "", err
	}
	_, cfg, faults := config.Load(o.rig)
	if err := watch.Faults(faults); err != nil {
		return "", err
	}
	like := []string{"p_compressor", "t_compressor", "p7_1", "t7_1", "p_fuel"} // with steps of a converter and without
	b := strings.Builder{}
	b.Write(text)
	for i := len(cfg.Compute.Channels); i < o.channels; i++ {
		fmt.Fprintf(&b, "  - {id: added_%d, like: %s, title: \"Added channel %d\"}\n", i, like[i%len(like)], i)
	}
	path = filepath.Join(o.dir, "rig.yaml")
	return path, os.WriteFile(path, []byte(b.String()), 0o600)
}

// plan is a test of a length: up and down through the points of a running line, over
// and over, with a start before and a shutdown after.
func plan(length time.Duration) []rehearsal.Segment {
	running := func(seconds, speed float64) rehearsal.Segment {
		return rehearsal.Segment{Name: "point", Seconds: seconds, Speed: speed, Fuel: true}
	}
	out := []rehearsal.Segment{
		{Name: "off", Seconds: 3},
		{Name: "crank", Seconds: 2.5, Starter: true},
		{Name: "light-off", Seconds: 7, Speed: 0.45, Starter: true, Fuel: true},
		running(12.5, 0.45),
	}
	const shutdown = 25
	left := length.Seconds() - 25 - shutdown
	speeds := []float64{0.7, 0.8, 0.9, 0.95, 1, 0.95, 0.85, 0.45}
	for i := 0; left > 0; i++ {
		stay := min(left, 60)
		out = append(out, running(stay, speeds[i%len(speeds)]))
		left -= stay
	}
	return append(out, rehearsal.Segment{Name: "shutdown", Seconds: shutdown})
}

// record plays the test into the data folder.
func record(ctx context.Context, o options) (err error) {
	if err := os.MkdirAll(o.dir, 0o750); err != nil {
		return err
	}
	path, err := rigWith(o)
	if err != nil {
		return err
	}
	bundle, cfg, faults := config.Load(path)
	if err := watch.Faults(faults); err != nil {
		return err
	}
	start := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()
	rig, err := rehearsal.New(cfg, rehearsal.Options{Seed: 1, Rate: o.rate, Start: start, Plan: plan(o.length)})
	if err != nil {
		return err
	}
	store, err := watch.OpenStore(ctx, o.dir, runfile.Options{}, slog.New(slog.DiscardHandler))
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, store.Close(ctx)) }()
	core, err := store.Restore(ctx, pipeline.NewMachine(watch.Parse), watch.Build(), runtime.GOARCH)
	if err != nil {
		return err
	}
	feed := watch.NewFeed(core, store)
	boot := pipeline.Boot{Epoch: core.State.Epoch + 1, Build: watch.Build(), GOARCH: runtime.GOARCH}
	if err := feed.Begin(ctx, boot, bundle.Marshal(), start); err != nil {
		return err
	}
	err = rehearsal.Run(ctx, rig,
		func(ctx context.Context, due int64) error { return feed.Until(ctx, due) },
		func(ctx context.Context, m rehearsal.Message) error {
			return feed.Take(ctx, watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
		})
	if err != nil {
		return err
	}
	end, err := json.Marshal(pipeline.Action{Do: pipeline.DoRunEnd, By: "storage-figures", RequestID: "end"})
	if err != nil {
		return err
	}
	if err := feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: end}, core.State.Host); err != nil {
		return err
	}
	return feed.End(ctx)
}

// replayed is what stepping a run again took.
type replayed struct {
	values float64 // received
	took   float64 // processor time, s
	digest string
}

// replay steps a run again, on one core.
func replay(ctx context.Context, f *runfile.File) (out replayed, err error) {
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	m := pipeline.NewMachine(watch.Parse)
	p, err := pipeline.OpenReplay(ctx, f, m, 0)
	if err != nil {
		return out, err
	}
	before := p.State.Align.Samples
	began, err := cpu()
	if err != nil {
		return out, err
	}
	err = p.Run(ctx, 0, func(_ *ingest.Record, outs []pipeline.Outcome) error {
		for i := range outs {
			if outs[i].Kind == pipeline.OutcomeRun && outs[i].Event != "started" {
				out.digest = p.Digest.String()
			}
		}
		return nil
	})
	if err != nil {
		return out, err
	}
	ended, err := cpu()
	if err != nil {
		return out, err
	}
	out.values, out.took = float64(p.State.Align.Samples-before), ended-began
	return out, nil
}

// perRow gives the bytes of the chunks of a kind per row.
func perRow(ctx context.Context, f *runfile.File, kind string) (float64, error) {
	bytes, rows := 0, 0
	err := f.Chunks(ctx, kind, math.MinInt64, math.MaxInt64, func(c *runfile.Chunk) error {
		bytes, rows = bytes+len(c.Bytes), rows+c.Rows
		return nil
	})
	if err == nil && rows == 0 {
		err = fmt.Errorf("no chunk %s is stored", kind)
	}
	return float64(bytes) / float64(rows), err
}

// parquetPerRow gives the bytes of a wide Parquet file under zstd per row.
func parquetPerRow(ctx context.Context, f *runfile.File, what export.What) (float64, error) {
	e, err := export.New(ctx, f, watch.Parse, export.Options{What: what, Format: export.Parquet, From: math.MinInt64, To: math.MaxInt64})
	if err != nil {
		return 0, err
	}
	var size counter
	sum, err := e.Write(ctx, &size)
	if err == nil && sum.Rows == 0 {
		err = errors.New("the export has no rows")
	}
	return float64(size) / float64(sum.Rows), err
}

// counter counts what is written to it.
type counter int64

func (c *counter) Write(b []byte) (int, error) {
	*c += counter(len(b))
	return len(b), nil
}

// answers measures what the page asks for when a run is opened, scrubbed and plotted.
func answers(ctx context.Context, runs watch.StoredRuns, run *runfile.Run) (list []figure, err error) {
	server := dashboard.NewServer(dashboard.Config{Runs: runs, Parse: watch.Parse, Log: slog.New(slog.DiscardHandler)}, dashboard.NewHub(watch.Build()))
	length := float64(run.Ended-run.Started) / 1e9
	series := func(from, to float64) string {
		return "/series?" + url.Values{
			"names":  {"npr,choke_margin_percent,mass_flow_kg_s,egt_indicated_k,channel.speed,channel.p7_1"},
			"points": {"2000"}, "from": {fmt.Sprint(from)}, "to": {fmt.Sprint(to)},
		}.Encode()
	}
	for _, ask := range []struct{ name, path string }{
		{"open: the run", ""},
		{"open: its alarms and marks", fmt.Sprintf("/messages?kinds=alarm,mark,log&from=0&to=%g", length)},
		{"plot: six lines over the whole run", series(0, length)},
		{"plot: a tenth of it", series(0.45*length, 0.55*length)},
		{"plot: one minute", series(length/2, length/2+60)},
		{"scrub: frames of 10 s at the beginning", "/messages?from=10&to=20"},
		{"scrub: … in the middle", fmt.Sprintf("/messages?from=%g&to=%g", length/2, length/2+10)},
		{"scrub: … near the end", fmt.Sprintf("/messages?from=%g&to=%g", length-12, length-2)},
	} {
		req := httptest.NewRequestWithContext(ctx, http.MethodGet, "/api/runs/"+run.ID+ask.path, http.NoBody)
		res := httptest.NewRecorder()
		began := time.Now()
		server.ServeHTTP(res, req)
		took := time.Since(began)
		if body, _ := io.ReadAll(res.Body); res.Code != http.StatusOK || len(body) < 100 {
			return nil, fmt.Errorf("%s: status %d: %.200s", ask.name, res.Code, body)
		}
		list = append(list, figure{name: ask.name, value: float64(took.Microseconds()) / 1e3, unit: "ms", most: 1000, timed: true})
	}
	return list, nil
}
