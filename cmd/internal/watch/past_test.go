package watch_test

import (
	"compress/gzip"
	"errors"
	"io"
	"os"
	"path/filepath"
	"testing"

	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// A run file of format 1, as a build of its time left it, with a life as builds wrote it
// before they counted aborted starts and nozzles: the life is found, a state that lacks it
// takes it over from the header of the run, and the run has no number of a series.
func TestLifeOfAnEarlierFormat(t *testing.T) {
	t.Parallel()
	ctx, dir := t.Context(), memory(t)
	endedRun(t, dir) // of an engine without a serial number; its records come later
	path := filepath.Join(dir, "runs", "earlier.db")
	unpack(t, "../../../ingest/runfile/testdata/format1.db.gz", path)
	f, err := runfile.Open(ctx, path, runfile.ReadWrite, runfile.Options{})
	must(t, err)
	const life = `{"engine_serial":"ML5-0007","starts":41,"hot_starts":2,"hung_starts":1,"no_lights":3,"flame_outs":0,"hours":12.5,"cycles":39,
		"bands":[{"name":"run_max","seconds":6.25,"peak_k":1011.5,"excursions":4,"exceedances":1}]}`
	must(t, f.UpdateHeader(ctx, func(h *runfile.Header) {
		h.ID, h.EngineSerial, h.State, h.Ended = "earlier", "ML5-0007", runfile.StateEnded, h.Started+1e9
	}))
	h, err := f.Header(ctx)
	must(t, err)
	must(t, f.Commit(ctx, runfile.Batch{Events: []runfile.Event{{Epoch: 1, N: 2, T: h.Ended, Kind: "life", JSON: []byte(life)}}}))
	must(t, f.Close())
	must(t, os.Remove(filepath.Join(dir, "catalog.db")))

	store, core := openCore(t, dir, runfile.Options{})
	lived, err := watch.Lives(ctx, dir, watch.StoredRuns{Catalog: store.Catalog(), Store: store})
	must(t, err)
	var found *pipeline.Life
	for i := range lived.Engines {
		if lived.Engines[i].Serial == "ML5-0007" {
			found = &lived.Engines[i]
		}
	}
	if found == nil || found.Starts != 41 || found.Cycles != 39 || found.Hours != 12.5 || found.Aborted != 0 || found.HoursChoked != 0 ||
		len(found.Bands) != 1 || found.Bands[0].Seconds != 6.25 || found.Bands[0].Peak.V != 1011.5 {
		t.Fatalf("%+v", lived)
	}
	if past, err := store.Past(ctx, core.State); err != nil || len(past.Series) != 0 || len(past.Engines) != 1 || past.Engines[0].Serial != "ML5-0007" || past.Engines[0].Starts != 41 {
		t.Errorf("past %+v, %v", past, err)
	}
	must(t, store.Close(ctx))
}

func unpack(t *testing.T, from, to string) {
	t.Helper()
	packed, err := os.Open(from)
	must(t, err)
	defer packed.Close()
	r, err := gzip.NewReader(packed)
	must(t, err)
	b, err := io.ReadAll(r)
	must(t, errors.Join(err, os.WriteFile(to, b, 0o600)))
}
