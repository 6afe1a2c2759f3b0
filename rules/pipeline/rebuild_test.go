package pipeline

import (
	"bytes"
	"encoding/binary"
	"path/filepath"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

// TestRebuildWindow: the window of a checkpoint that leaves it out is what pushing every
// message gives, however many there are and however far the full checkpoint is, and no
// more is read than can be in it.
func TestRebuildWindow(t *testing.T) {
	for _, tt := range []struct {
		name    string
		records uint64
		message func(seq uint64) bool
		full    uint64 // record of the full checkpoint
	}{
		{"few", 1000, func(uint64) bool { return true }, 100},
		{"more than a window", windowSize + 100_000, func(seq uint64) bool { return seq%50 != 0 }, 10_000},
		{"few of many are messages", 2*windowSize + 100_000, func(seq uint64) bool { return seq%3 == 0 }, 5},
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
			checkpoint := func(seq uint64, full bool) *runfile.Checkpoint {
				state, err := want.Encode(full)
				if err != nil {
					t.Fatal(err)
				}
				batch.Checkpoint = &runfile.Checkpoint{Seq: seq, Host: int64(seq), State: state, Full: full}
				if err := f.Commit(ctx, batch); err != nil {
					t.Fatal(err)
				}
				c := batch.Checkpoint
				batch = runfile.Batch{Records: batch.Records[:0]}
				return c
			}
			for seq := uint64(1); seq <= tt.records; seq++ {
				r := ingest.Record{Seq: seq, Host: int64(seq), Kind: ingest.KindTick}
				if tt.message(seq) {
					r.Kind, r.Topic, r.Payload = ingest.KindMessage, "t", binary.LittleEndian.AppendUint32(nil, uint32(seq))
					want.window.Push(&r)
				}
				batch.Records = append(batch.Records, r)
				if seq == tt.full {
					checkpoint(seq, true)
				}
			}
			c := checkpoint(tt.records, false)
			got := &State{}
			if err := rebuildWindow(ctx, f, got, c); err != nil {
				t.Fatal(err)
			}
			if !bytes.Equal(got.window.append(nil), want.window.append(nil)) {
				t.Errorf("%d messages are known, want %d, or others", len(got.window.last), len(want.window.last))
			}
			if tt.full > 1000 && got.window.n > windowSize*9/8 {
				t.Errorf("%d messages were read for a window of %d", got.window.n, windowSize)
			}
		})
	}
}
