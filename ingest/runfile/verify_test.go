package runfile_test

import (
	"context"
	"errors"
	"io/fs"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"

	"throatwatch/ingest/runfile"
)

// Every fault is named with its row, and what lies behind it is still read.
func TestCheckNamesEveryFault(t *testing.T) {
	path := sealed(t)
	db := raw(t, path)
	for _, damage := range []string{
		"UPDATE records SET data=CAST(substr(data, 1, 20) || x'ff' || substr(data, 22) AS BLOB) WHERE first_seq=21",
		"DELETE FROM records WHERE first_seq=41",
		"UPDATE records SET sum=sum+1 WHERE first_seq=61",
		"UPDATE checkpoints SET state=x'00' WHERE seq=20",
		"UPDATE checkpoints SET state=x'00' WHERE seq=50",
		"UPDATE chunks SET first_t=first_t-1 WHERE id=3",
		"UPDATE chunks SET first_t=first_t-1 WHERE id=7",
		"UPDATE events SET json='[]' WHERE id=4",
		"UPDATE meta SET value='{' WHERE key='header'",
	} {
		exec1(t, db, damage)
	}
	f := open(t, path, runfile.ReadOnly)
	var said []string
	var whole []int64
	n, err := f.Check(t.Context(), func(err error) {
		var where *runfile.CorruptError
		var gap *runfile.GapError
		switch {
		case errors.As(err, &gap):
			said = append(said, gap.Error())
		case errors.As(err, &where):
			said = append(said, where.Table+" "+strings.Join(strings.Fields(where.Error())[1:3], " "))
		default:
			said = append(said, err.Error())
		}
		if !strings.Contains(err.Error(), path) {
			t.Errorf("%v does not name the file", err)
		}
	}, func(c *runfile.Chunk) error {
		whole = append(whole, c.FirstT)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	want := []string{
		"meta damaged: header:", "records row 21:", "record 41 missing: next stored is 51", "records row 61:",
		"checkpoints row 20:", "checkpoints row 50:", "chunks row 3:", "chunks row 7:", "events row 4:",
	}
	if !slices.Equal(said, want) {
		t.Errorf("faults %q\nwant   %q", said, want)
	}
	if want := (runfile.Counts{Records: 80, Checkpoints: 8, Chunks: 8, Events: 9}); n != want || len(whole) != 8 {
		t.Errorf("counts %+v, want %+v; %d chunks given", n, want, len(whole))
	}
	stop := errors.New("stop")
	if _, err := f.Check(t.Context(), func(error) {}, func(*runfile.Chunk) error { return stop }); !errors.Is(err, stop) {
		t.Errorf("the error of the chunk's owner became %v", err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := f.Check(ctx, func(err error) { t.Errorf("called off, it says %v", err) }, nil); !errors.Is(err, context.Canceled) {
		t.Errorf("called off: %v", err)
	}
}

// A run that is on is copied while it is recorded, by a reader of its own: the copy
// has everything up to one record and nothing behind it.
func TestSnapshotWhileRecording(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	if err := f.UpdateHeader(t.Context(), func(h *runfile.Header) { h.State = runfile.StateRunning }); err != nil {
		t.Fatal(err)
	}
	write := func(from uint64) {
		for seq := from; seq < from+200; seq += 10 {
			b := runfile.Batch{Records: messages(seq, seq+9, 20_000), Events: []runfile.Event{{Epoch: 1, N: seq, T: hostOf(seq), JSON: []byte("{}")}}}
			if seq%50 == 41 {
				b.Checkpoint = &runfile.Checkpoint{Seq: seq + 9, Host: hostOf(seq + 9), State: []byte("state")}
				b.Chunks = []runfile.Chunk{{Kind: "point", FirstT: hostOf(seq), LastT: hostOf(seq + 9), Bytes: []byte("columns")}}
			}
			commit(t, f, b)
		}
	}
	write(1)
	src := open(t, f.Path(), runfile.ReadOnly)
	var writing sync.WaitGroup
	writing.Go(func() { write(201) })
	path := filepath.Join(t.TempDir(), "copy.db")
	seq, host, err := runfile.Snapshot(t.Context(), src, path)
	writing.Wait()
	if err != nil || seq != 200 || host != hostOf(200) {
		t.Fatalf("up to record %d at %d: %v", seq, host, err)
	}
	c := open(t, path, runfile.ReadOnly)
	verify(t, c)
	wantRecords(t, c, 0, 0, messages(1, 200, 20_000))
	n, err := c.Check(t.Context(), func(err error) { t.Error(err) }, nil)
	if want := (runfile.Counts{Records: 200, Checkpoints: 4, Chunks: 4, Events: 20}); err != nil || n != want {
		t.Errorf("the copy has %+v, want %+v: %v", n, want, err)
	}
	if h, err := c.Header(t.Context()); err != nil || h.State != runfile.StateInterrupted {
		t.Errorf("its state is %q: %v", h.State, err)
	}
	if _, _, err := runfile.Snapshot(t.Context(), src, path); !errors.Is(err, fs.ErrExist) {
		t.Errorf("over a file: %v", err)
	}
}
