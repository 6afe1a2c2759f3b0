package pipeline

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

// Replay steps the records of a run file again.
type Replay struct {
	Machine *Machine
	State   *State
	Digest  *Digest
	file    *runfile.File
	other   []byte // configuration instead of the recorded ones; nil = none
}

// errFirst ends the reading at the first record.
var errFirst = errors.New("first record seen")

// OpenReplay prepares a replay from the newest checkpoint at or before the
// record seq; 0 is the beginning of the file. Without such a checkpoint it
// begins with the state before the first record ever.
func OpenReplay(ctx context.Context, f *runfile.File, m *Machine, seq uint64) (*Replay, error) {
	if seq == 0 {
		err := f.Records(ctx, 0, 0, func(r *ingest.Record) error {
			seq = r.Seq - 1
			return errFirst
		})
		if err != nil && !errors.Is(err, errFirst) {
			return nil, fmt.Errorf("replay: %w", err)
		}
	}
	p := &Replay{Machine: m, State: &State{}, Digest: NewDigest(), file: f}
	c, err := f.LastCheckpoint(ctx, seq)
	if errors.Is(err, runfile.ErrNoCheckpoint) {
		return p, nil
	}
	if err != nil {
		return nil, fmt.Errorf("replay: %w", err)
	}
	if err := p.load(ctx, &c); err != nil {
		return nil, fmt.Errorf("replay: checkpoint of record %d: %w", c.Seq, err)
	}
	return p, nil
}

// load makes the state that of a checkpoint, with the window of recognised
// copies rebuilt from the records before it.
func (p *Replay) load(ctx context.Context, c *runfile.Checkpoint) error {
	state, err := Decode(c.State)
	if err != nil {
		return err
	}
	if !c.Full {
		if err := rebuildWindow(ctx, p.file, state, c); err != nil {
			return err
		}
	}
	if len(c.Digest) > 0 {
		if err := p.Digest.UnmarshalBinary(c.Digest); err != nil {
			return err
		}
	}
	p.State = state
	if err := p.Machine.Restore(state); err != nil {
		return err
	}
	return p.reconfigure()
}

// Reconfigure puts another configuration in the place of all that were recorded: of that
// in force where the replay begins, at once, and of those of the records to come. What
// was learned by the recorded one is kept as at any change of configuration.
func (p *Replay) Reconfigure(bundle []byte) error {
	p.other = bundle
	if err := p.reconfigure(); err != nil {
		return fmt.Errorf("replay: %w", err)
	}
	return nil
}

func (p *Replay) reconfigure() error {
	if p.other == nil || len(p.State.Bundle) == 0 { // the first record of a configuration brings it
		return nil
	}
	return p.Machine.replace(p.State, p.other)
}

// rebuildWindow gathers the hashes of the messages before c, as far back as a window
// reaches, from the checkpoints, the newest first.
func rebuildWindow(ctx context.Context, f *runfile.File, state *State, c *runfile.Checkpoint) error {
	var parts [][]uint64
	n := 0
	for at := *c; n < windowSize; {
		_, stored, err := cutState(at.State)
		if err != nil {
			return err
		}
		if at.Full {
			parts = append(parts, wholeWindow(stored))
			break
		}
		before, err := f.LastCheckpoint(ctx, at.Seq-1)
		first := errors.Is(err, runfile.ErrNoCheckpoint)
		if err != nil && !first {
			return err
		}
		since, hashes, ok := windowPart(stored)
		if !ok || since < before.Seq {
			since, hashes = at.Seq, nil
		}
		parts = append(parts, hashes)
		n += len(hashes)
		if since > before.Seq && n < windowSize {
			if hashes, err = messageHashes(ctx, f, before.Seq, since, windowSize-n); err != nil {
				return err
			}
			parts = append(parts, hashes)
			n += len(hashes)
		}
		if first {
			break
		}
		at = before
	}
	slices.Reverse(parts)
	state.window.load(slices.Concat(parts...))
	state.window.keep(c.Seq)
	return nil
}

// messageHashes gives the hashes of the messages after the record after, 0 = where the
// file begins, up to the record upto; of more than want the newest, want at least.
func messageHashes(ctx context.Context, f *runfile.File, after, upto uint64, want int) (hashes []uint64, err error) {
	first := after
	if after > 0 {
		first++
	}
	// Not every record is a message: where they are too few, twice as many are read.
	for span := uint64(want + windowSize/16); ; span *= 2 {
		from := first
		if upto > span {
			from = max(first, upto-span+1)
		}
		hashes = hashes[:0]
		err := f.Records(ctx, from, upto, func(r *ingest.Record) error {
			if r.Kind == ingest.KindMessage {
				hashes = append(hashes, messageHash(r))
			}
			return nil
		})
		if err != nil || len(hashes) >= want || from == first {
			return hashes, err
		}
	}
}

// Run steps the records up to the record upto, 0 for all there are, and calls fn
// after each. Behind a gap it goes on from the checkpoint that was stored with
// it. An error of fn ends the replay and is returned as it is; damage and holes
// are errors of the run file, after all records before them.
func (p *Replay) Run(ctx context.Context, upto uint64, fn func(r *ingest.Record, outs []Outcome) error) error {
	if upto == 0 {
		upto = math.MaxInt64
	}
	return p.file.Records(ctx, p.State.Seq+1, upto, func(r *ingest.Record) error {
		if r.Kind == ingest.KindGap {
			c, err := p.file.LastCheckpoint(ctx, r.Seq)
			if err != nil {
				return fmt.Errorf("replay: gap before record %d: %w", r.Seq, err)
			}
			if c.Seq != r.Seq {
				return fmt.Errorf("replay: gap before record %d has no checkpoint: %w", r.Seq, runfile.ErrNoCheckpoint)
			}
			if err := p.load(ctx, &c); err != nil {
				return fmt.Errorf("replay: gap before record %d: %w", r.Seq, err)
			}
			return fn(r, nil)
		}
		if r.Kind == ingest.KindConfig && p.other != nil {
			r.Payload = p.other
		}
		outs := p.Machine.Step(p.State, r)
		for i := range outs {
			p.Digest.Add(&outs[i])
		}
		return fn(r, outs)
	})
}
