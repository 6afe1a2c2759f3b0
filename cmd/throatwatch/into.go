package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"runtime"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// rehearseInto plays a whole test straight into the run files of a data folder,
// without waiting: host time is when each message is due.
func rehearseInto(ctx context.Context, bundle config.Bundle, cfg pipeline.Config, o rehearsal.Options, dir string, stdout io.Writer, log *slog.Logger) (err error) {
	unlock, err := watch.Lock(dir)
	if err != nil {
		return err
	}
	defer unlock()
	store, err := watch.OpenStore(ctx, dir, runfile.Options{}, log)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, store.Close(ctx)) }()
	core, err := store.Restore(ctx, pipeline.NewMachine(watch.Parse), watch.Build(), runtime.GOARCH)
	if err != nil {
		return err
	}
	if core.State.Host >= o.Start {
		return fmt.Errorf("--into %s: its newest record is of %s: a rehearsal cannot begin before that", dir, time.Unix(0, core.State.Host).UTC().Format(time.RFC3339))
	}
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		return err
	}
	past, err := store.Past(ctx, core.State)
	if err != nil {
		return err
	}
	feed := watch.NewFeed(core, store)
	if err := feed.Begin(ctx, pipeline.Boot{Epoch: core.State.Epoch + 1, Build: watch.Build(), GOARCH: runtime.GOARCH, Past: past}, bundle.Marshal(), o.Start); err != nil {
		return err
	}
	began, messages := time.Now(), 0
	err = rehearsal.Run(ctx, rig,
		func(ctx context.Context, due int64) error { return feed.Until(ctx, due) },
		func(ctx context.Context, m rehearsal.Message) error {
			messages++
			return feed.Take(ctx, watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
		})
	if err := errors.Join(err, feed.End(ctx)); err != nil {
		return err
	}
	took := time.Since(began)
	_, _ = fmt.Fprintf(stdout, "rehearsed %v in %v (%.0f × real time): %d messages, %d scans, run %s in %s\n",
		rig.Length().Round(time.Second), took.Round(time.Millisecond), float64(rig.Length())/float64(took), messages,
		core.State.Align.N, core.State.Run.ID, dir)
	return nil
}
