package watch_test

import (
	"fmt"
	"math"
	"slices"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// A run in which a sensor was exchanged and the disk failed for a while: reduced by the
// calibration that was entered with the swap, only what comes from its time on changes, and
// behind the gap as well. Reduced by its own files it is itself.
func TestReduceBySwap(t *testing.T) {
	t.Parallel()
	ctx, dir := t.Context(), memory(t)
	store, core := openCore(t, dir, runfile.Options{})
	feed := watch.NewFeed(core, store)
	host := testBegin
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 1}, smallBundle(t), host))
	act := func(action string) {
		t.Helper()
		must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(action)}, host))
	}
	host = feedSmall(t, feed, host, 40)
	act(`{"do":"run_start","by":"T. Ester","request_id":"1"}`)
	id := core.State.Run.ID
	host = feedSmall(t, feed, host, 60)
	valid := host + 5e7
	host = feedSmall(t, feed, host, 60)
	swap := `{"do":"swap","channel":"p_jet","serial":"PT-2","valid_from":%q,"calibration":%q,"reason":"open","by":"M. Oduya","role":"engineer","request_id":%q}`
	at := time.Unix(0, valid).UTC().Format(time.RFC3339Nano)
	act(fmt.Sprintf(swap, at, "calibration: {scale: 9}", "2")) // entered wrongly, and superseded
	act(fmt.Sprintf(swap, at, "calibration: {polynomial: [0.01, 1]}\nuncertainty: {fixed: 1 kPa}", "3"))
	must(t, feed.End(ctx))
	host = feedSmall(t, feed, host, 5) // this was not stored
	missing := core.Drop()
	_, err := core.Gap(uint64(missing), host)
	must(t, err)
	must(t, feed.End(ctx))
	host = feedSmall(t, feed, host, 60)
	act(`{"do":"run_end","by":"T. Ester","request_id":"4"}`)
	must(t, feed.End(ctx))

	runs := watch.StoredRuns{Catalog: store.Catalog(), Store: store}
	swaps, bundle, err := runs.Swaps(ctx, id)
	must(t, err)
	if want := []config.Swapped{{Channel: "p_jet", Serial: "PT-2", ValidFrom: valid, Calibration: "calibration: {polynomial: [0.01, 1]}\nuncertainty: {fixed: 1 kPa}"}}; !slices.Equal(swaps, want) {
		t.Fatalf("swaps %+v", swaps)
	}
	own, faults := config.Parse(bundle)
	must(t, watch.Faults(faults))
	same, err := runs.Reduce(ctx, watch.ReduceOptions{Run: id, Bundle: bundle, Config: own})
	must(t, err)
	if !same.Same {
		t.Error("by its own files a run with a gap is another")
	}
	other, faults := config.WithSwaps(bundle, swaps)
	must(t, watch.Faults(faults))
	cfg, faults := config.Parse(other)
	must(t, watch.Faults(faults))
	res, err := runs.Reduce(ctx, watch.ReduceOptions{Run: id, Bundle: other, Config: cfg})
	must(t, err)
	if res.Same || len(res.Swaps) != 2 {
		t.Errorf("%+v", res)
	}

	was, is := pointsOf(t, runs, id), pointsOf(t, runs, res.Run.ID)
	if len(was) != 180 || len(is) != len(was) {
		t.Fatalf("%d and %d scans", len(was), len(is))
	}
	after := 0
	for i := range was {
		a, b := &was[i], &is[i]
		switch {
		case a.t != b.t:
			t.Fatalf("scan %d is of %d and %d", i, a.t, b.t)
		case a.t < valid && !slices.EqualFunc(a.v[:], b.v[:], func(x, y float64) bool { return math.Float64bits(x) == math.Float64bits(y) }):
			t.Fatalf("%.2f s before the swap something has changed: %v, %v", float64(valid-a.t)/1e9, a.v, b.v)
		case a.t < valid:
			continue
		}
		after++
		if d := b.v[monitor.RakePressure] - a.v[monitor.RakePressure]; math.Abs(d-1000) > 1e-6 { // 0.01 bar
			t.Fatalf("%.2f s after the swap p7 is %g Pa off, want 1000 Pa", float64(a.t-valid)/1e9, d)
		}
	}
	if after < 100 {
		t.Errorf("%d scans after the swap", after)
	}
	must(t, store.Close(ctx))
}

// scanned is an operating point of a run.
type scanned struct {
	t int64
	v [monitor.NumQuantities]float64
}

// pointsOf steps the records of a stored run again.
func pointsOf(t *testing.T, runs watch.StoredRuns, id string) (out []scanned) {
	t.Helper()
	f, err := runs.Open(t.Context(), id)
	must(t, err)
	defer f.Close()
	h, err := f.Header(t.Context())
	must(t, err)
	p, err := pipeline.OpenReplay(t.Context(), f, pipeline.NewMachine(watch.Parse), 0)
	must(t, err)
	must(t, p.Run(t.Context(), 0, func(_ *ingest.Record, outs []pipeline.Outcome) error {
		for i := range outs {
			if o := &outs[i]; o.Kind == pipeline.OutcomePoint && o.T >= h.Started && o.T < h.Ended {
				out = append(out, scanned{o.T, o.Point.V})
			}
		}
		return nil
	}))
	return out
}
