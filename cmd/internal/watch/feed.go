package watch

import (
	"context"
	"encoding/json"
	"fmt"

	"throatwatch/ingest"
	"throatwatch/rules/pipeline"
)

// feedCommit is the host time between the commits of a Feed, ns.
const feedCommit = int64(1e9)

// Feed steps and stores inputs as fast as it gets them, at host times that it is
// given: a rehearsal without waiting. It belongs to one goroutine.
type Feed struct {
	core  *Core
	store *Store
	next  int64 // host time of the next commit
}

// NewFeed gives a feed into a store.
func NewFeed(c *Core, s *Store) *Feed { return &Feed{core: c, store: s} }

// Begin enters the boot and the configuration at host, ns UTC.
func (f *Feed) Begin(ctx context.Context, boot pipeline.Boot, bundle []byte, host int64) error {
	text, err := json.Marshal(boot)
	if err != nil {
		return fmt.Errorf("boot record: %w", err)
	}
	f.next = host + feedCommit
	if err := f.Take(ctx, Input{Kind: ingest.KindBoot, Payload: text}, host); err != nil {
		return err
	}
	return f.Take(ctx, Input{Kind: ingest.KindConfig, Payload: bundle}, host)
}

// Until lets host time pass, with a tick for each tenth of a second without
// another record.
func (f *Feed) Until(ctx context.Context, host int64) error {
	for host-f.core.State.Host > int64(tickEvery) {
		if err := f.Take(ctx, Input{Kind: ingest.KindTick}, f.core.State.Host+int64(tickEvery)); err != nil {
			return err
		}
	}
	return nil
}

// Take steps an input that came at host.
func (f *Feed) Take(ctx context.Context, in Input, host int64) error {
	f.core.Take(in, host)
	if !f.core.Due() && f.core.State.Host < f.next {
		return nil
	}
	f.next = f.core.State.Host + feedCommit
	return f.End(ctx)
}

// End stores what was stepped.
func (f *Feed) End(ctx context.Context) error {
	b, err := f.core.Cut()
	if err != nil || b == nil {
		return err
	}
	if err := f.store.Write(ctx, b); err != nil {
		return err
	}
	f.store.Settle(ctx)
	return nil
}
