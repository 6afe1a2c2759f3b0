package watch_test

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// A run that is on takes notes and is not removed; one that has ended is removed by
// hand or by retention, unless it is kept, and leaves a line.
func TestHousekeeping(t *testing.T) {
	t.Parallel()
	ctx, dir := t.Context(), memory(t)
	endedRun(t, dir)
	store, core := openCore(t, dir, runfile.Options{})
	feed := watch.NewFeed(core, store)
	host := core.State.Host
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 2}, smallBundle(t), host))
	host = feedSmall(t, feed, host, 40)
	must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_start","by":"T. Ester","request_id":"3"}`)}, host))
	host = feedSmall(t, feed, host, 200)
	runs := watch.StoredRuns{Catalog: store.Catalog(), Store: store}
	list, err := runs.List(ctx, runfile.Filter{})
	must(t, err)
	if len(list) != 2 || list[0].State != runfile.StateRunning {
		t.Fatalf("runs %+v", list)
	}
	on, ended := list[0].ID, list[1].ID

	note := func(id string, keep bool) {
		t.Helper()
		run, err := runs.Annotate(ctx, id, func(h *runfile.Header) { h.Keep, h.Notes = keep, "borescope "+id })
		if err != nil || run.Keep != keep || run.Notes != "borescope "+id {
			t.Errorf("note on %s: %+v, %v", id, run, err)
		}
	}
	note(on, false)
	note(ended, true)
	if found, err := runs.List(ctx, runfile.Filter{Text: "BORESCOPE " + ended}); err != nil || len(found) != 1 || found[0].ID != ended {
		t.Errorf("found %+v, %v", found, err)
	}
	if err := runs.Remove(ctx, on, "T. Ester", "test"); !errors.Is(err, dashboard.ErrRunning) {
		t.Errorf("a run that is on is removed: %v", err)
	}
	if err := runs.Remove(ctx, ended, "T. Ester", "test"); !errors.Is(err, runfile.ErrKept) {
		t.Errorf("a kept run is removed: %v", err)
	}
	note(ended, false)
	must(t, watch.RetainOnce(ctx, store, runfile.Retention{Bytes: 1}, 1<<62))
	if left, err := runs.List(ctx, runfile.Filter{}); err != nil || len(left) != 1 || left[0].ID != on {
		t.Errorf("left %+v, %v", left, err)
	}
	if _, err := os.Stat(filepath.Join(dir, "runs", ended+".db")); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("file of the removed run: %v", err)
	}
	text, err := os.ReadFile(filepath.Join(dir, "removed.jsonl"))
	if want := fmt.Sprintf(`"run":%q`, ended); err != nil || strings.Count(string(text), "\n") != 1 || !strings.Contains(string(text), want) || !strings.Contains(string(text), `"why":"retention"`) {
		t.Errorf("removed.jsonl: %s, %v", text, err)
	}

	must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_end","by":"T. Ester","request_id":"4"}`)}, host))
	must(t, feed.End(ctx))
	must(t, store.Close(ctx))
	header, err := runfile.ReadRun(ctx, filepath.Join(dir, "runs", on+".db"))
	if err != nil || header.State != runfile.StateEnded || header.Notes != "borescope "+on {
		t.Errorf("the note did not outlive the run: %+v, %v", header, err)
	}
}
