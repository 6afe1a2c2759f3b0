package main

import (
	"fmt"
	"log/slog"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// A run that began while nothing could be recorded has the points after the gap,
// and its digest is that of what is stored.
func TestReplayBehindAGap(t *testing.T) {
	ctx, dir := t.Context(), dataFolder(t)
	bundle, _, faults := config.Load("../../testdata/rigs/minimal.yaml")
	store, err := watch.OpenStore(ctx, dir, runfile.Options{}, slog.New(slog.DiscardHandler))
	must := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	must(err)
	must(watch.Faults(faults))
	core, err := store.Restore(ctx, pipeline.NewMachine(watch.Parse), watch.Build(), "test")
	must(err)
	host := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()
	feed := func(instants int) {
		for range instants {
			host += int64(50 * time.Millisecond)
			for _, r := range [][2]string{{"PT-101", `1.5,"u":"bar"`}, {"TT-102", `600,"u":"degC"`}, {"PT-001", `1000,"u":"mbar"`}} {
				core.Take(watch.Input{
					Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: "plant/north/bench/" + r[0],
					Payload: fmt.Appendf(nil, `{"t":%d.%09d,"v":%s}`, host/1e9, host%1e9, r[1]),
				}, host)
			}
		}
	}
	act := func(do string) {
		core.Take(watch.Input{Kind: ingest.KindAction, Payload: fmt.Appendf(nil, `{"do":%q,"by":"T. Ester","request_id":%q}`, do, do)}, host)
	}
	commit := func() {
		b, err := core.Cut()
		must(err)
		must(store.Write(ctx, b))
		store.Settle(ctx)
	}
	core.Take(watch.Input{Kind: ingest.KindBoot, Payload: []byte(`{"epoch":1}`)}, host)
	core.Take(watch.Input{Kind: ingest.KindConfig, Payload: bundle.Marshal()}, host)
	feed(60)
	commit()
	act(pipeline.DoRunStart)
	feed(60)
	missing := core.Drop()
	_, err = core.Gap(uint64(missing), host)
	must(err)
	commit()
	feed(100)
	commit()
	act(pipeline.DoRunEnd)
	commit()
	must(store.Close(ctx))

	stored, lines := replayed(t, dir)
	if len(lines) < 95 || len(lines) > 101 || !strings.Contains(lines[0], `"kind":"operating_point"`) {
		t.Errorf("run %s has %d points: 100 are due", stored.ID, len(lines))
	}
}
