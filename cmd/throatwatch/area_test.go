package main

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

// The drift of the effective area between two runs is what their reductions say:
// the systematic part, which both share, cancels [JCGM 100 F.1.2.3].
func TestRunsShowDrift(t *testing.T) {
	dir := t.TempDir()
	if _, err := listRuns(t.Context(), dir, runfile.Filter{}); err == nil {
		t.Error("a folder without runs is listed")
	}
	if err := os.Mkdir(filepath.Join(dir, "runs"), 0o750); err != nil {
		t.Fatal(err)
	}
	for i, run := range []struct{ id, reduction string }{
		{"first", `{"run":"first","effective_area_m2":0.0250,"random":0.0003,"systematic":0.002,"steady_s":60}`},
		{"second", `{"run":"second","effective_area_m2":0.0251,"random":0.0004,"systematic":0.002,"steady_s":60}`},
		{"third", `{"run":"third","effective_area_m2":0.0252,"random":null,"systematic":0.002,"steady_s":5}`},
		{"no steady phase", ""},
	} {
		start := int64(i+1) * 1e12
		f, err := runfile.Create(t.Context(), filepath.Join(dir, "runs", run.id+".db"), runfile.Header{
			ID: run.id, Rig: "cell_9", Engine: "Merle 5", EngineSerial: "A", Started: start, Ended: start + 1e11, State: runfile.StateEnded,
		}, runfile.Options{})
		if err != nil {
			t.Fatal(err)
		}
		b := runfile.Batch{Records: []ingest.Record{{Seq: 1, Host: start, Kind: ingest.KindTick}}}
		if run.reduction != "" {
			b.Events = []runfile.Event{{Epoch: 1, N: 1, T: start + 9e10, Kind: "reduction", JSON: json.RawMessage(run.reduction)}}
		}
		if err := f.Commit(t.Context(), b); err != nil {
			t.Fatal(err)
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
	}
	list, err := listRuns(t.Context(), dir, runfile.Filter{})
	if err != nil || len(list) != 4 {
		t.Fatalf("%d runs, %v", len(list), err)
	}
	near := func(what string, got *float64, want float64) {
		t.Helper()
		if got == nil || math.Abs(*got-want) > 1e-9 {
			t.Errorf("%s: %v, want %g", what, got, want)
		}
	}
	none, third, second, first := list[0], list[1], list[2], list[3]
	near("area of the first", first.EffectiveArea, 0.0250)
	near("its U95", first.EffectiveAreaU95, 2*0.0250*math.Hypot(0.0003, 0.002))
	near("drift", second.AreaDrift, 0.4)
	near("its U95", second.AreaDriftU95, 100*2*0.0005) // 3-4-5 of 1e-4
	near("drift of a short phase", third.AreaDrift, 100*(0.0252/0.0251-1))
	if first.AreaDrift != nil || third.AreaDriftU95 != nil || none.EffectiveArea != nil {
		t.Errorf("known without a reason: %v %v %v", first.AreaDrift, third.AreaDriftU95, none.EffectiveArea)
	}
}
