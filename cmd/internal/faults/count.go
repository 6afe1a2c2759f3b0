package faults

import (
	"context"
	"errors"
	"fmt"
	"path/filepath"
	"slices"

	"github.com/cespare/xxhash/v2"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/align"
	"throatwatch/rules/pipeline"
)

// account is what the files of a data folder hold.
type account struct {
	Counts
	period   int64
	last     uint64         // record that was counted last
	recorded map[uint64]int // hash of a message → records
	samples  []int          // in the scans, by channel
	from, to int64          // event time that the scans cover
	scan     uint64         // the last one
}

// Count steps all files of a data folder again and holds their scans against the
// messages that were published. Samples from before the first scan are due to none.
// A file that is damaged, that lacks a record without naming the gap, or whose digest
// is not the recorded one, is an error.
func Count(ctx context.Context, data string, cfg *pipeline.Config, published []rehearsal.Message) (*Counts, error) {
	runs, errA := filepath.Glob(filepath.Join(data, "runs", "*.db"))
	idle, errB := filepath.Glob(filepath.Join(data, "idle-*.db"))
	if err := errors.Join(errA, errB); err != nil {
		return nil, err
	}
	a := &account{period: cfg.Align.Period, recorded: map[uint64]int{}, samples: make([]int, len(cfg.Align.Channels))}
	type part struct {
		path  string
		first uint64
	}
	var parts []part
	for _, path := range slices.Concat(runs, idle) {
		first, err := firstRecord(ctx, path)
		if err != nil {
			return nil, err
		}
		parts = append(parts, part{path, first})
	}
	slices.SortFunc(parts, func(a, b part) int { return int(int64(a.first) - int64(b.first)) })
	for _, p := range parts {
		if err := a.file(ctx, p.path); err != nil {
			return nil, fmt.Errorf("%s: %w", p.path, err)
		}
	}
	return &a.Counts, a.settle(cfg, published)
}

func firstRecord(ctx context.Context, path string) (seq uint64, err error) {
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return 0, err
	}
	found := errors.New("found")
	err = f.Records(ctx, 0, 0, func(r *ingest.Record) error {
		seq = r.Seq
		return found
	})
	if errors.Is(err, found) {
		err = nil
	}
	return seq, errors.Join(err, f.Close())
}

// file counts what one file has beyond those before it: a run begins with a copy of
// the last minutes of the idle file.
func (a *account) file(ctx context.Context, path string) (err error) {
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	if err := f.Verify(ctx); err != nil {
		return err
	}
	header, err := f.Header(ctx)
	if err != nil {
		return err
	}
	p, err := pipeline.OpenReplay(ctx, f, pipeline.NewMachine(watch.Parse), 0)
	if err != nil {
		return err
	}
	digest := ""
	err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
		for i := range outs {
			if o := &outs[i]; o.Kind == pipeline.OutcomeRun && o.Event == "ended" && o.Run.ID == header.ID {
				digest = p.Digest.String()
			}
		}
		if r.Seq <= a.last {
			return nil
		}
		if a.last != 0 && r.Seq != a.last+1 && r.Kind != ingest.KindGap {
			return fmt.Errorf("record %d follows record %d of the file before", r.Seq, a.last)
		}
		a.last = r.Seq
		a.take(r, outs)
		return nil
	})
	if err != nil {
		return err
	}
	if header.State == runfile.StateEnded && header.Digest != digest {
		return fmt.Errorf("its digest is %s, %s was recorded", digest, header.Digest)
	}
	a.Late = int(p.State.Align.Counters[ingest.ReasonLate])
	return nil
}

func (a *account) take(r *ingest.Record, outs []pipeline.Outcome) {
	if r.Kind == ingest.KindMessage {
		a.recorded[xxhash.Sum64(r.Payload)]++
	}
	if r.Kind == ingest.KindBoot {
		a.Lives++
	}
	if r.Kind == ingest.KindGap {
		a.Gaps++
	}
	for i := range outs {
		o := &outs[i]
		if o.Kind != pipeline.OutcomePoint {
			continue
		}
		if a.Scans++; a.Scans == 1 {
			a.from = o.T - a.period
		} else if o.Scan.N != a.scan+1 || o.T != a.to+a.period {
			a.Skipped += max(1, int((o.T-a.to)/a.period)-1)
		}
		a.scan, a.to = o.Scan.N, o.T
		for ch, n := range o.Scan.Samples {
			a.samples[ch] += int(n)
		}
	}
}

// settle holds what was counted against what was published.
func (a *account) settle(cfg *pipeline.Config, published []rehearsal.Message) error {
	due := make([]int, len(a.samples))
	reader := align.New(cfg.Align)
	a.Accepted = len(published)
	for i := range published {
		m := &published[i]
		if n := a.recorded[xxhash.Sum64(m.Payload)]; n == 0 {
			a.Missing++
		} else {
			a.Recorded++
			a.Again += n - 1
		}
		without := false
		reader.Read(&ingest.Record{Topic: m.Topic, Payload: m.Payload, Host: m.At}, false,
			func(sm *ingest.Sample, ch int, _ float64, why ingest.Reason) {
				without = without || sm.Time == ingest.NoTime || why != ingest.ReasonNone
				if ch >= 0 && sm.Time > a.from && sm.Time <= a.to {
					due[ch]++
				}
			})
		if without {
			return fmt.Errorf("a message on %s has no device time, or cannot be used: it proves nothing", m.Topic)
		}
	}
	for ch, n := range due {
		a.Samples += n
		a.InScans += a.samples[ch]
		a.Missing += max(0, n-a.samples[ch])
		a.Doubled += max(0, a.samples[ch]-n)
	}
	a.Missing -= min(a.Missing, a.Late)
	return nil
}
