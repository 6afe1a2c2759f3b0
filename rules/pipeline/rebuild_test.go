package pipeline

import (
	"bytes"
	"encoding/binary"
	"path/filepath"
	"slices"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

// TestRebuildWindow: the window of a checkpoint that is not full is what pushing every
// message gives, however many there are, however far the full checkpoint is, and
// whether or not the checkpoints between hold their part; and no more is read than can
// be in it.
func TestRebuildWindow(t *testing.T) {
	every := func(uint64) bool { return true }
	for _, tt := range []struct {
		name    string
		records uint64
		message func(seq uint64) bool
		full    uint64   // record of the full checkpoint
		others  []uint64 // of others, before the last
		without []uint64 // those of them that do not hold their part, as in a file of an earlier build
		lost    uint64   // one that was encoded and not stored
		stored  bool     // all comes from the checkpoints
	}{
		{"few", 1000, every, 100, nil, nil, 0, true},
		{"more than a window", windowSize + 100_000, func(seq uint64) bool { return seq%50 != 0 }, 10_000, nil, nil, 0, true},
		{"few of many are messages", 2*windowSize + 100_000, func(seq uint64) bool { return seq%3 == 0 }, 5, nil, nil, 0, true},
		{"parts", 2000, every, 100, []uint64{300, 301, 900}, nil, 0, true},
		{"parts without a full one", 1000, every, 0, []uint64{300, 600}, nil, 0, true},
		{"more parts than a window", windowSize + 150_000, every, 5, []uint64{50_000, 120_000, 200_000}, nil, 0, true},
		{"without parts", 2000, every, 100, []uint64{300, 301, 900}, []uint64{300, 301, 900, 2000}, 0, false},
		{"one without", 2000, every, 100, []uint64{300, 900}, []uint64{900}, 0, false},
		{"last without, more than a window", 2*windowSize + 100_000, func(seq uint64) bool { return seq%3 == 0 }, 0, nil, []uint64{2*windowSize + 100_000}, 0, false},
		{"a checkpoint that was not stored", 2000, every, 100, []uint64{300, 900}, nil, 500, false},
	} {
		t.Run(tt.name, func(t *testing.T) {
			ctx := t.Context()
			f, err := runfile.Create(ctx, filepath.Join(t.TempDir(), "run.db"), runfile.Header{ID: "r"}, runfile.Options{})
			if err != nil {
				t.Fatal(err)
			}
			defer f.Close()
			want := &State{}
			var batch runfile.Batch
			checkpoint := func(full bool) *runfile.Checkpoint {
				state, err := want.Encode(full)
				if err != nil {
					t.Fatal(err)
				}
				if slices.Contains(tt.without, want.Seq) {
					state = state[:8+binary.LittleEndian.Uint64(state)]
				}
				batch.Checkpoint = &runfile.Checkpoint{Seq: want.Seq, Host: int64(want.Seq), State: state, Full: full}
				if err := f.Commit(ctx, batch); err != nil {
					t.Fatal(err)
				}
				c := batch.Checkpoint
				batch = runfile.Batch{Records: batch.Records[:0]}
				return c
			}
			for seq := uint64(1); seq <= tt.records; seq++ {
				r := ingest.Record{Seq: seq, Host: int64(seq), Kind: ingest.KindTick}
				want.Seq = seq
				if tt.message(seq) {
					r.Kind, r.Topic, r.Payload = ingest.KindMessage, "t", binary.LittleEndian.AppendUint32(nil, uint32(seq))
					if tt.stored {
						r.Payload = append(r.Payload, 'x') // what the records say is another hash
						want.window.push(messageHash(&r))
						r.Payload = r.Payload[:4]
					} else {
						want.window.Push(&r)
					}
				}
				batch.Records = append(batch.Records, r)
				switch {
				case seq == tt.full:
					checkpoint(true)
				case slices.Contains(tt.others, seq):
					checkpoint(false)
				case seq == tt.lost:
					if _, err := want.Encode(false); err != nil {
						t.Fatal(err)
					}
				}
			}
			c := checkpoint(false)
			got := &State{}
			if err := rebuildWindow(ctx, f, got, c); err != nil {
				t.Fatal(err)
			}
			if !bytes.Equal(got.window.append(nil, 0), want.window.append(nil, 0)) {
				t.Errorf("%d messages are known, want %d, or others", len(got.window.last), len(want.window.last))
			}
			if got.window.kept != got.window.n || got.window.since != c.Seq {
				t.Errorf("%d hashes of %d are held by the checkpoint of record %d", got.window.kept, got.window.n, got.window.since)
			}
			hashes, err := messageHashes(ctx, f, 0, tt.records, windowSize)
			if err != nil || len(hashes) > windowSize*9/8 {
				t.Errorf("%d messages were read for a window of %d: %v", len(hashes), windowSize, err)
			}
		})
	}
}
