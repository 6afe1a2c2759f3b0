package faults_test

import (
	"bytes"
	"context"
	"errors"
	"log/slog"
	"os"
	"path/filepath"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/faults"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

const rig = "../../../testdata/rigs/example.yaml"

// recorded stores ten seconds of a rehearsed test, but for the messages that keep
// refuses, and gives what was published in them.
func recorded(t *testing.T, dir string, keep func(i int) bool) (cfg pipeline.Config, all []rehearsal.Message) {
	t.Helper()
	must := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	bundle, cfg, found := config.Load(rig)
	must(watch.Faults(found))
	store, err := watch.OpenStore(t.Context(), dir, runfile.Options{}, slog.New(slog.DiscardHandler))
	must(err)
	core, err := store.Restore(t.Context(), pipeline.NewMachine(watch.Parse), "test", "test")
	must(err)
	began := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()
	feed := watch.NewFeed(core, store)
	must(feed.Begin(t.Context(), pipeline.Boot{Epoch: 1, Build: "test", GOARCH: "test"}, bundle.Marshal(), began))
	r, err := rehearsal.New(cfg, rehearsal.Options{Scenario: rehearsal.Quick, Start: began, Rate: 20, Seed: 1})
	must(err)
	ended := errors.New("ten seconds are over")
	err = rehearsal.Run(t.Context(), r, feed.Until, func(ctx context.Context, m rehearsal.Message) error {
		if m.At-began > int64(10*time.Second) {
			return ended
		}
		all = append(all, m)
		if !keep(len(all)) {
			return nil
		}
		return feed.Take(ctx, watch.Input{Kind: ingest.KindMessage, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
	})
	if !errors.Is(err, ended) {
		t.Fatal(err)
	}
	must(feed.Until(t.Context(), began+int64(12*time.Second))) // the last scans
	must(feed.End(t.Context()))
	must(store.Close(t.Context()))
	return cfg, all
}

// TestCount counts what was lost and doubled on purpose: what is due follows from the
// messages that were left out and from how many samples are in each.
func TestCount(t *testing.T) {
	t.Parallel()
	left := map[int]bool{50: true, 51: true, 120: true}
	all := func(int) bool { return true }
	but := func(i int) bool { return !left[i] }
	for _, tt := range []struct {
		name             string
		stored           func(i int) bool
		published        func(i int) bool
		missing, doubled int // of the samples of those left out, times; a message counts as missing, too
	}{
		{"all of it", all, all, 0, 0},
		{"three messages are lost", but, all, 1, 0},
		{"three messages that nobody sent are in the scans", all, but, 0, 1},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			dir := t.TempDir()
			cfg, msgs := recorded(t, dir, tt.stored)
			samples := 0
			for i := range left {
				samples += bytes.Count(msgs[i-1].Payload, []byte(`"v":`))
			}
			var published []rehearsal.Message
			for i, m := range msgs {
				if tt.published(i + 1) {
					published = append(published, m)
				}
			}
			c, err := faults.Count(t.Context(), dir, &cfg, published)
			if err != nil {
				t.Fatal(err)
			}
			missing, doubled := tt.missing*(samples+len(left)), tt.doubled*samples
			if c.Missing != missing || c.Doubled != doubled || c.Scans < 190 || c.Lives != 1 || samples < 90 {
				t.Errorf("%+v; %d are missing and %d doubled", c, missing, doubled)
			}
			if c.Lossless() != (c.Missing+c.Doubled == 0) {
				t.Errorf("lossless is %v of %+v", c.Lossless(), c)
			}
		})
	}
}

// A file that lacks a record is no proof of anything.
func TestCountRefusesDamage(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	cfg, all := recorded(t, dir, func(int) bool { return true })
	files, err := filepath.Glob(filepath.Join(dir, "runs", "*.db"))
	if err != nil || len(files) != 1 {
		t.Fatalf("%q, %v", files, err)
	}
	info, err := os.Stat(files[0])
	if err == nil {
		err = os.Truncate(files[0], info.Size()/2)
	}
	if err != nil {
		t.Fatal(err)
	}
	if c, err := faults.Count(t.Context(), dir, &cfg, all); err == nil {
		t.Errorf("half a file is counted as %+v", c)
	}
}
