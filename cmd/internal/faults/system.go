package faults

import (
	"context"
	"errors"
	"sync"
	"sync/atomic"
	"time"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/ingest/mqtt"
	"throatwatch/rules/pipeline"
)

// system publishes one rehearsed test after another as the data system of a rig does,
// and notes what it publishes. It outlives the daemon.
type system struct {
	published []rehearsal.Message // to be read when it has ended
	values    int                 // in all that was published
	enough    atomic.Bool         // no further test is begun
	forget    atomic.Bool         // what is published is counted, and not noted
	stopSoon  atomic.Bool         // the test that is on is broken off
	err       error
	ended     chan struct{} // closed when the last test has ended and all of it is acknowledged
	stop      context.CancelFunc
	running   sync.WaitGroup
}

// errEnough breaks a test off.
var errEnough = errors.New("broken off")

// play begins; end or close ends it.
func play(ctx context.Context, cfg pipeline.Config, url string, o *Options, seed uint64) (*system, error) {
	p, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: url})
	if err != nil {
		return nil, err
	}
	ctx, stop := context.WithCancel(ctx)
	s := &system{ended: make(chan struct{}), stop: stop}
	s.running.Go(func() { _ = p.Run(ctx) }) // ends by stop
	s.running.Go(func() {
		defer close(s.ended)
		for n := uint64(0); s.err == nil && (n == 0 || !s.enough.Load()); n++ {
			s.err = s.test(ctx, cfg, p, rehearsal.Options{
				Scenario: rehearsal.Quick, Speed: o.Speed, Rate: o.Rate, Seed: seed + 1000*n, Start: time.Now().UnixNano(),
			})
		}
		if s.err == nil || errors.Is(s.err, errEnough) {
			s.err = p.Flush(ctx)
		}
	})
	return s, nil
}

func (s *system) test(ctx context.Context, cfg pipeline.Config, p *mqtt.Publisher, o rehearsal.Options) error {
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		return err
	}
	until := func(ctx context.Context, due int64) error { return wait(ctx, time.Until(time.Unix(0, due))) }
	return rehearsal.Run(ctx, rig, until, func(ctx context.Context, m rehearsal.Message) error {
		if s.stopSoon.Load() {
			return errEnough
		}
		s.values += valuesIn(m.Payload)
		if !s.forget.Load() {
			s.published = append(s.published, m)
		}
		return p.Publish(ctx, m.Topic, m.Payload)
	})
}

// end lets the test that is on come to its end, and waits until all that was published
// is acknowledged.
func (s *system) end(ctx context.Context) error {
	s.enough.Store(true)
	select {
	case <-s.ended:
		return s.err
	case <-ctx.Done():
		return ctx.Err()
	}
}

// last is the device time of the last sample.
func (s *system) last() time.Time { return time.Unix(0, s.published[len(s.published)-1].At) }

func (s *system) close() {
	s.stop()
	s.running.Wait()
}
