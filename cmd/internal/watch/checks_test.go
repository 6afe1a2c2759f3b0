package watch_test

import (
	"bytes"
	"encoding/json"
	"errors"
	"log/slog"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

// doing is an action at a time of the test.
type doing struct {
	at time.Duration
	do pipeline.Action
}

// dayRig loads the example rig, with fewer scans and a run that ends soon after the engine
// is at rest, so that a day is short.
func dayRig(t *testing.T) (config.Bundle, pipeline.Config) {
	t.Helper()
	text, err := os.ReadFile(exampleRig)
	if err != nil {
		t.Fatal(err)
	}
	for _, edit := range [][2]string{{"rate: 20/s", "rate: 10/s"}, {"off_after: 30 s", "off_after: 3 s"}, {"end_after: 120 s", "end_after: 3 s"}} {
		if bytes.Count(text, []byte(edit[0])) != 1 {
			t.Fatalf("the rig file has not one %q", edit[0])
		}
		text = bytes.ReplaceAll(text, []byte(edit[0]), []byte(edit[1]))
	}
	path := filepath.Join(t.TempDir(), "rig.yaml")
	if err := os.WriteFile(path, text, 0o600); err != nil {
		t.Fatal(err)
	}
	b, cfg, wrong := config.Load(path)
	if err := watch.Faults(wrong); err != nil {
		t.Fatal(err)
	}
	return b, cfg
}

// shortDay is a test with rest enough before and after it for a check: the engine begins
// to turn at 20 s, idles from 30 s on, and is at rest again before 80 s.
func shortDay() []rehearsal.Segment {
	return []rehearsal.Segment{
		{Name: "off", Seconds: 20},
		{Name: "crank", Seconds: 2.5, Starter: true},
		{Name: "light-off", Seconds: 7, Speed: 0.45, Starter: true, Fuel: true},
		{Name: "idle", Seconds: 8, Speed: 0.45, Fuel: true},
		{Name: "shutdown", Seconds: 43},
	}
}

// checkOf is the action that begins a check, all of it ticked.
func checkOf(cfg *pipeline.Config, phase, warmth string) pipeline.Action {
	q := pipeline.CheckRequest{Phase: phase, Warmth: warmth, Free: 50e9}
	for _, tick := range cfg.Checks.AllTicks() {
		q.Ticks = append(q.Ticks, check.Ticked{ID: tick.ID, By: "R. Aldous"})
	}
	return pipeline.Action{Do: pipeline.DoCheck, Check: q, By: "R. Aldous", RequestID: phase}
}

// playDay plays the short day with faults, rest for so many seconds after it, and a check before
// and after the run.
func playDay(t *testing.T, after float64, faults []string, take func(in watch.Input, host int64)) {
	t.Helper()
	b, cfg := dayRig(t)
	o := rehearsal.Options{Seed: 3, Rate: 10, Start: testBegin, Plan: append(shortDay(), rehearsal.Segment{Name: "off", Seconds: after})}
	for _, text := range faults {
		f, err := rehearsal.ParseFault(text)
		if err != nil {
			t.Fatal(err)
		}
		o.Faults = append(o.Faults, f)
	}
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		t.Fatal(err)
	}
	acts := []doing{{8 * time.Second, checkOf(&cfg, check.Before, check.Cold)}, {85 * time.Second, checkOf(&cfg, check.After, check.Warm)}}
	take(watch.Input{Kind: ingest.KindBoot, Payload: []byte(`{}`)}, testBegin)
	take(watch.Input{Kind: ingest.KindConfig, Payload: b.Marshal()}, testBegin)
	var msgs []rehearsal.Message
	for more := true; more; {
		msgs, more = rig.Next(msgs[:0])
		for _, m := range msgs {
			for len(acts) > 0 && testBegin+int64(acts[0].at) <= m.At+m.Delay {
				payload, err := json.Marshal(acts[0].do)
				if err != nil {
					t.Fatal(err)
				}
				take(watch.Input{Kind: ingest.KindAction, Payload: payload}, testBegin+int64(acts[0].at))
				acts = acts[1:]
			}
			take(watch.Input{Kind: ingest.KindMessage, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
		}
	}
}

// checkedDay plays the short day with faults and a check before and after the run. It gives
// the records, and what was told of checks as JSON.
func checkedDay(t *testing.T, faults ...string) (records []ingest.Record, told []string) {
	t.Helper()
	core := watch.NewCore(pipeline.NewMachine(parseOnce()), &pipeline.Replay{State: &pipeline.State{}, Digest: pipeline.NewDigest()}, "test", "test")
	playDay(t, 17, faults, func(in watch.Input, host int64) {
		told = append(told, checksOf(t, core.Take(in, host))...)
		batch, err := core.Cut()
		if err != nil {
			t.Fatal(err)
		}
		records = append(records, batch.Records...)
	})
	return records, told
}

// checksOf gives what outcomes tell of checks, as JSON.
func checksOf(t *testing.T, outs []pipeline.Outcome) (told []string) {
	t.Helper()
	for i := range outs {
		switch o := &outs[i]; {
		case o.Kind == pipeline.OutcomeChecks:
			text, err := json.Marshal(o.Check)
			if err != nil {
				t.Fatal(err)
			}
			told = append(told, string(text))
		case o.Kind == pipeline.OutcomeAction && o.Action.Err != nil:
			t.Errorf("action: %v", o.Action.Err)
		}
	}
	return told
}

// failed gives the items of a check that did not pass.
func failed(r *check.Result) (ids []string) {
	for i := range r.Items {
		if !r.Items[i].Passed {
			ids = append(ids, r.Items[i].ID)
		}
	}
	return ids
}

// A sound rig passes every item before a run and after it. Of one with faults just those
// items fail that are about them; a zero that moves during the run is found after it. The
// records, stepped again, give the same checks.
func TestChecks(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct {
		name          string
		faults        []string
		before, after string // ids of the items that fail
	}{
		{"sound", nil, "", ""},
		// 15 K against 5 K that are allowed to a cold harness, 40 K to a warm one.
		{
			"zero error, a thermocouple that is off",
			[]string{"pressure-zero-shift@0s:p_exit", "probe-offset@0s:egt_3"},
			"zero.p_exit, temperature.egt_3", "zero.p_exit",
		},
		{"silent, noisy", []string{"barometer-loss@0s:t_fuel", "noisy@0s:p_inlet"}, "signal.p_inlet, signal.t_fuel", "signal.p_inlet, signal.t_fuel"},
		// 160 Pa, beyond the 70 Pa that draughts explain.
		{"a zero that moves during the run", []string{"pressure-zero-shift@35s:dp_bellmouth"}, "", "zero.dp_bellmouth, shift.dp_bellmouth"},
	} {
		records, told := checkedDay(t, tt.faults...)
		if len(told) != 5 {
			t.Errorf("%s: told %d times, want 5: %s", tt.name, len(told), told)
			continue
		}
		var states []string
		var run string
		for i, text := range told {
			var r check.Result
			if err := json.Unmarshal([]byte(text), &r); err != nil {
				t.Fatal(err)
			}
			states = append(states, r.Phase+" "+r.State)
			if i == 2 { // it counts for the run that begins
				run = r.Run
			}
			want := tt.before
			if r.Phase == check.After {
				want = tt.after
				if r.Run != run {
					t.Errorf("%s: the check after is of run %q, that before of %q", tt.name, r.Run, run)
				}
			}
			if r.State != check.Done {
				continue
			}
			if got := strings.Join(failed(&r), ", "); got != want {
				t.Errorf("%s: %s: failed %q, want %q", tt.name, r.Phase, got, want)
			}
			if r.Of != len(r.Items) || r.Passed != r.Of-len(failed(&r)) || !strings.HasSuffix(r.Summary, ". Not a clearance to start.") {
				t.Errorf("%s: %d of %d items: %q", tt.name, r.Passed, r.Of, r.Summary)
			}
		}
		if want := []string{"before running", "before done", "before done", "after running", "after done"}; !slices.Equal(states, want) || run == "" {
			t.Errorf("%s: %q, run %q", tt.name, states, run)
		}
		m, s := pipeline.NewMachine(parseOnce()), &pipeline.State{}
		var again []string
		for i := range records {
			again = append(again, checksOf(t, m.Step(s, &records[i]))...)
		}
		if !slices.Equal(again, told) {
			t.Errorf("%s: stepped again the records give other checks", tt.name)
		}
	}
}

// A reduction subtracts the zeros that the checks of its run have found: that of one of
// them, or what lies between by event time. A check after the end of a run is stored with
// it too. Channels that are no pressure, and all else of the run, stay.
func TestReduceZero(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	_, cfg := dayRig(t)
	store, err := watch.OpenStore(t.Context(), dir, runfile.Options{}, slog.New(slog.DiscardHandler))
	if err != nil {
		t.Fatal(err)
	}
	core, err := store.Restore(t.Context(), pipeline.NewMachine(parseOnce()), watch.Build(), runtime.GOARCH)
	if err != nil {
		t.Fatal(err)
	}
	feed := watch.NewFeed(core, store)
	var run string
	ended := false
	playDay(t, 17, []string{"pressure-zero-shift@35s:p7_2"}, func(in watch.Input, host int64) {
		if err := feed.Take(t.Context(), in, host); err != nil {
			t.Fatal(err)
		}
		run = core.State.Run.ID
		ended = ended || run != "" && !core.State.RunActive
	})
	if err := errors.Join(feed.End(t.Context()), store.Close(t.Context())); err != nil || !ended {
		t.Fatalf("ended %v: %v", ended, err)
	}

	catalog, err := runfile.OpenCatalog(t.Context(), filepath.Join(dir, "catalog.db"), filepath.Join(dir, "runs"))
	if err != nil {
		t.Fatal(err)
	}
	defer catalog.Close()
	runs := watch.StoredRuns{Catalog: catalog}
	checks, values := stretchOf(t, runs, run)
	if len(checks) != 2 || checks[1].Phase != check.After {
		t.Fatalf("%d checks are stored with the run", len(checks))
	}
	zeroOf := func(c *check.Result, channel string) (t, offset float64) {
		for _, it := range c.Zeros() {
			if it.Channel == channel {
				return float64(c.Began+(c.Ended-c.Began)/2) / 1e9, it.Value.V
			}
		}
		return 0, 0
	}
	for _, which := range []string{watch.ZeroAfter, watch.ZeroInterpolated} {
		res, err := runs.Reduce(t.Context(), watch.ReduceOptions{Run: run, Zero: which, By: "R. Aldous"})
		if err != nil {
			t.Fatal(err)
		}
		if res.Same || res.Run.Origin == nil || res.Run.Origin.Zero != which || len(res.Zeros) < 10 {
			t.Errorf("%s: same %v, origin %+v, %d zeros", which, res.Same, res.Run.Origin, len(res.Zeros))
		}
		again, reduced := stretchOf(t, runs, res.Run.ID)
		if len(again) != 2 || again[1].Ended != checks[1].Ended {
			t.Errorf("%s: %d checks in the child, want both of the run", which, len(again))
		}
		for i := range cfg.Compute.Channels {
			id := cfg.Compute.Channels[i].ID
			t0, a := zeroOf(&checks[0], id)
			t1, b := zeroOf(&checks[1], id)
			if len(reduced[id]) == 0 || len(reduced[id]) != len(values[id]) {
				t.Errorf("%s: %s has %d values, %d in the run", which, id, len(reduced[id]), len(values[id]))
			}
			for at, v := range values[id] {
				want := map[string]float64{watch.ZeroAfter: b, watch.ZeroInterpolated: a + (b-a)*(float64(at)/1e9-t0)/max(t1-t0, 1)}[which]
				// A sample is up to its hold time older than its scan: 0.25 s of the slope.
				if got := v - reduced[id][at]; math.Abs(got-want) > 1e-6+0.3*math.Abs(b-a)/max(t1-t0, 1) {
					t.Fatalf("%s: %s at %d loses %g, want %g", which, id, at, got, want)
				}
			}
		}
	}
	if _, err := runs.Reduce(t.Context(), watch.ReduceOptions{Run: run, Zero: "middle"}); err == nil {
		t.Error("a zero of the middle is taken")
	}
	// The zeros are those of the readings as they are calibrated: a child has the same.
	res, err := runs.Reduce(t.Context(), watch.ReduceOptions{Run: run + "-r2", Zero: watch.ZeroAfter})
	if err != nil {
		t.Fatal(err)
	}
	if second, err := runs.Catalog.Get(t.Context(), run+"-r1"); err != nil || res.Run.Digest != second.Digest {
		t.Errorf("a child of a child is another: %v, sha256 %s, want %s", err, res.Run.Digest, second.Digest)
	}
}

// stretchOf gives the checks of a stored run and the values of its channels while the
// engine idles, by time.
func stretchOf(t *testing.T, runs watch.StoredRuns, id string) (checks []check.Result, values map[string]map[int64]float64) {
	t.Helper()
	f, err := runs.Open(t.Context(), id)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	h, err := f.Header(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if checks, err = dashboard.ReadChecks(t.Context(), f, &h); err != nil {
		t.Fatal(err)
	}
	values = map[string]map[int64]float64{}
	from := testBegin + int64(31*time.Second)
	err = pipeline.Rows(t.Context(), f, archive.NewCodec(), pipeline.ChunkChannels, nil, from, from+int64(6*time.Second), func(c *archive.Chunk, first, last int) {
		for i := range c.Columns {
			id, ok := strings.CutPrefix(c.Columns[i].Name, "channel.")
			if !ok || c.Columns[i].Kind != archive.KindFloat {
				continue
			}
			if values[id] == nil {
				values[id] = map[int64]float64{}
			}
			for k := first; k < last; k++ {
				if v := c.Columns[i].Float[k]; !math.IsNaN(v) {
					values[id][c.Times[k]] = v
				}
			}
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	return checks, values
}
