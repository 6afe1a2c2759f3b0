package runfile_test

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

const second = int64(1e9)

// rig0 is an invented header.
var rig0 = runfile.Header{ID: "r1", Rig: "cell-9", Engine: "Falkor J1", EngineSerial: "0042", State: runfile.StateRunning, Started: 17 * second}

func create(tb testing.TB, name string, opt runfile.Options) *runfile.File {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), name)
	f, err := runfile.Create(tb.Context(), path, rig0, opt)
	if err != nil {
		tb.Fatal(err)
	}
	return f
}

func reopen(tb testing.TB, f *runfile.File, mode runfile.Mode) *runfile.File {
	tb.Helper()
	if err := f.Close(); err != nil {
		tb.Fatal(err)
	}
	return open(tb, f.Path(), mode)
}

func open(tb testing.TB, path string, mode runfile.Mode) *runfile.File {
	tb.Helper()
	f, err := runfile.Open(tb.Context(), path, mode, runfile.Options{})
	if err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(func() {
		if err := f.Close(); err != nil {
			tb.Error(err)
		}
	})
	return f
}

// message makes a record whose content follows from its number, so that any
// copy can be checked by itself.
func message(seq uint64, size int) ingest.Record {
	payload := make([]byte, 0, size+8)
	for x := seq; len(payload) < size; x = x*6364136223846793005 + 1442695040888963407 {
		payload = binary.LittleEndian.AppendUint64(payload, x>>16)
	}
	payload = payload[:size]
	return ingest.Record{
		Seq: seq, Host: hostOf(seq), Kind: ingest.KindMessage, Flags: ingest.FlagQoS1,
		Topic: fmt.Sprintf("rigs/cell-9/senml/%d", seq%3), Payload: payload,
	}
}

// hostOf is the host time of record seq: ten a millisecond, in pairs of equals.
func hostOf(seq uint64) int64 { return 17*second + int64(seq/2)*200_000 }

func messages(from, to uint64, size int) []ingest.Record {
	var list []ingest.Record
	for seq := from; seq <= to; seq++ {
		list = append(list, message(seq, size))
	}
	return list
}

func commit(tb testing.TB, f *runfile.File, b runfile.Batch) {
	tb.Helper()
	if err := f.Commit(tb.Context(), b); err != nil {
		tb.Fatal(err)
	}
}

// stored reads records and copies them.
func stored(tb testing.TB, f *runfile.File, from, to uint64) ([]ingest.Record, error) {
	tb.Helper()
	var list []ingest.Record
	err := f.Records(tb.Context(), from, to, func(r *ingest.Record) error {
		c := *r
		c.Payload = bytes.Clone(r.Payload)
		list = append(list, c)
		return nil
	})
	return list, err
}

func wantRecords(tb testing.TB, f *runfile.File, from, to uint64, want []ingest.Record) {
	tb.Helper()
	got, err := stored(tb, f, from, to)
	if err != nil {
		tb.Fatal(err)
	}
	sameRecords(tb, got, want)
}

func sameRecords(tb testing.TB, got, want []ingest.Record) {
	tb.Helper()
	if len(got) != len(want) {
		tb.Fatalf("%d records, want %d", len(got), len(want))
	}
	for i := range want {
		g, w := &got[i], &want[i]
		if g.Seq != w.Seq || g.Host != w.Host || g.Kind != w.Kind || g.Flags != w.Flags || g.Topic != w.Topic || !bytes.Equal(g.Payload, w.Payload) {
			tb.Fatalf("record %d: %+v, want %+v", i, *g, *w)
		}
	}
}

func verify(tb testing.TB, f *runfile.File) {
	tb.Helper()
	if err := f.Verify(tb.Context()); err != nil {
		tb.Fatal(err)
	}
}

func TestCommitAndReadBack(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	ctx := t.Context()
	commit(t, f, runfile.Batch{Records: messages(1, 10, 50)})
	gap := ingest.Record{Seq: 21, Host: hostOf(21), Kind: ingest.KindGap, Payload: []byte(`{"lost":10}`)}
	commit(t, f, runfile.Batch{
		Records:    append(messages(11, 11, 5), gap, message(22, 0)),
		Chunks:     []runfile.Chunk{{Kind: "point", FirstT: 10, LastT: 19, Rows: 2, Bytes: []byte("columns")}},
		Events:     []runfile.Event{{Epoch: 1, N: 1, T: 12, Kind: "alarm", JSON: []byte(`{"a":1}`)}},
		Checkpoint: &runfile.Checkpoint{Seq: 22, Host: hostOf(22), State: []byte("state"), Digest: []byte{1, 2}, Full: true},
		Header:     func(h *runfile.Header) { h.Alarms = 1 },
		Meta:       map[string][]byte{"cursor": []byte("1.1"), "header": []byte("mine")},
	})
	want := slices.Concat(messages(1, 11, 50), []ingest.Record{gap, message(22, 0)})
	want[10] = message(11, 5)
	for _, mode := range []runfile.Mode{runfile.ReadWrite, runfile.ReadOnly} {
		f = reopen(t, f, mode)
		wantRecords(t, f, 0, 0, want)
		wantRecords(t, f, 11, 21, want[10:12])
		wantRecords(t, f, 23, 0, nil)
		if seq, host := f.Durable(); seq != 22 || host != hostOf(22) {
			t.Errorf("durable %d at %d, want 22 at %d", seq, host, hostOf(22))
		}
		c, err := f.LastCheckpoint(ctx, 1<<63)
		if err != nil || c.Seq != 22 || c.Host != hostOf(22) || string(c.State) != "state" || !bytes.Equal(c.Digest, []byte{1, 2}) || !c.Full {
			t.Errorf("checkpoint %+v, %v", c, err)
		}
		if _, err := f.LastCheckpoint(ctx, 21); !errors.Is(err, runfile.ErrNoCheckpoint) {
			t.Errorf("checkpoint before the first: %v, want ErrNoCheckpoint", err)
		}
		chunks := 0
		if err := f.Chunks(ctx, "point", 19, 20, func(c *runfile.Chunk) error {
			chunks++
			if c.Seq != 22 || c.Rows != 2 || string(c.Bytes) != "columns" {
				t.Errorf("chunk %+v", c)
			}
			return nil
		}); err != nil || chunks != 1 {
			t.Errorf("%d chunks, %v", chunks, err)
		}
		if err := f.Chunks(ctx, "point", 0, 10, func(*runfile.Chunk) error { return errors.New("end is exclusive") }); err != nil {
			t.Error(err)
		}
		if err := f.Chunks(ctx, "point", 20, 30, func(*runfile.Chunk) error { return errors.New("chunk ended before") }); err != nil {
			t.Error(err)
		}
		events := 0
		if err := f.Events(ctx, 12, 13, func(e *runfile.Event) error {
			events++
			if e.Epoch != 1 || e.N != 1 || e.Seq != 22 || string(e.JSON) != `{"a":1}` {
				t.Errorf("event %+v", e)
			}
			return nil
		}); err != nil || events != 1 {
			t.Errorf("%d events, %v", events, err)
		}
		h, err := f.Header(ctx)
		if err != nil || h.Alarms != 1 || h.Engine != rig0.Engine {
			t.Errorf("header %+v, %v", h, err)
		}
		if v, err := f.Meta(ctx, "cursor"); err != nil || string(v) != "1.1" {
			t.Errorf("cursor %q, %v", v, err)
		}
		if v, err := f.Meta(ctx, "none"); err != nil || v != nil {
			t.Errorf("absent value %q, %v", v, err)
		}
		verify(t, f)
	}
	if err := f.Commit(ctx, runfile.Batch{}); !errors.Is(err, runfile.ErrReadOnly) {
		t.Errorf("commit to a read-only file: %v", err)
	}
}

func TestClosedFileStandsAlone(t *testing.T) {
	f := create(t, "a # run?%20.db", runfile.Options{}) // a name that is no clean URI
	commit(t, f, runfile.Batch{Records: messages(1, 100, 100)})
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	var page, vacuum int // as the ceilings were measured with; 2 is incremental
	if err := raw(t, f.Path()).QueryRowContext(t.Context(), "SELECT page_size, auto_vacuum FROM pragma_page_size, pragma_auto_vacuum").Scan(&page, &vacuum); err != nil || page != 16384 || vacuum != 2 {
		t.Errorf("page size %d, auto vacuum %d, %v", page, vacuum, err)
	}
	list, err := filepath.Glob(filepath.Join(filepath.Dir(f.Path()), "*"))
	if err != nil || len(list) != 1 || list[0] != f.Path() {
		t.Fatalf("files %q, %v", list, err)
	}
	// Reading it leaves nothing behind either.
	g, err := runfile.Open(t.Context(), f.Path(), runfile.ReadOnly, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	wantRecords(t, g, 0, 0, messages(1, 100, 100))
	if err := g.Close(); err != nil {
		t.Fatal(err)
	}
	if list, _ := filepath.Glob(filepath.Join(filepath.Dir(f.Path()), "*")); len(list) != 1 {
		t.Fatalf("files after reading %q", list)
	}
}

func TestOpenRefuses(t *testing.T) {
	dir := t.TempDir()
	write := func(name, content string) string {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, []byte(content), 0o600); err != nil {
			t.Fatal(err)
		}
		return path
	}
	for _, tc := range []struct {
		name, path string
		want       error
	}{
		{"missing", filepath.Join(dir, "none.db"), fs.ErrNotExist},
		{"empty: SQLite takes it for a new database", write("empty.db", ""), runfile.ErrNotRunFile},
		{"no database", write("text.db", string(bytes.Repeat([]byte("no database "), 5000))), runfile.ErrCorrupt},
	} {
		for _, mode := range []runfile.Mode{runfile.ReadOnly, runfile.ReadWrite} {
			if _, err := runfile.Open(t.Context(), tc.path, mode, runfile.Options{}); !errors.Is(err, tc.want) {
				t.Errorf("%s: %v, want %v", tc.name, err, tc.want)
			}
		}
	}
	if list, _ := filepath.Glob(filepath.Join(dir, "*")); len(list) != 2 {
		t.Errorf("refusing left files: %q", list)
	}
	f := create(t, "run.db", runfile.Options{})
	if _, err := runfile.Create(t.Context(), f.Path(), rig0, runfile.Options{}); !errors.Is(err, fs.ErrExist) {
		t.Errorf("create over a run: %v, want fs.ErrExist", err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
}

func TestCommitOrder(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	for _, b := range []runfile.Batch{{Events: []runfile.Event{{Epoch: 1}}}, {Chunks: []runfile.Chunk{{Kind: "k"}}}} {
		if err := f.Commit(t.Context(), b); !errors.Is(err, runfile.ErrOrder) {
			t.Errorf("outcome of no record: %v", err)
		}
	}
	commit(t, f, runfile.Batch{Records: messages(5, 9, 10)})
	early := message(10, 1)
	early.Host = hostOf(9) - 1
	unset := message(10, 1)
	unset.Kind = ingest.KindInvalid
	gap := message(9, 1)
	gap.Kind = ingest.KindGap
	for _, tc := range []struct {
		name string
		b    runfile.Batch
	}{
		{"again", runfile.Batch{Records: messages(9, 10, 1)}},
		{"hole", runfile.Batch{Records: messages(11, 12, 1)}},
		{"hole inside", runfile.Batch{Records: append(messages(10, 10, 1), message(12, 1))}},
		{"gap record that goes back", runfile.Batch{Records: []ingest.Record{gap}}},
		{"host time falls", runfile.Batch{Records: []ingest.Record{early}}},
		{"kind not set", runfile.Batch{Records: []ingest.Record{unset}}},
		{"checkpoint ahead", runfile.Batch{Checkpoint: &runfile.Checkpoint{Seq: 10}}},
		{"checkpoint behind", runfile.Batch{Records: messages(10, 11, 1), Checkpoint: &runfile.Checkpoint{Seq: 10}}},
	} {
		if err := f.Commit(t.Context(), tc.b); !errors.Is(err, runfile.ErrOrder) {
			t.Errorf("%s: %v, want ErrOrder", tc.name, err)
		}
	}
	commit(t, f, runfile.Batch{Records: messages(10, 10, 10)})
	wantRecords(t, f, 0, 0, messages(5, 10, 10))
	verify(t, f)
}

func TestFailedCommitLeavesNothing(t *testing.T) {
	var fail error
	var stall bool
	opt := runfile.Options{BeforeCommit: func(ctx context.Context) error {
		if stall {
			<-ctx.Done()
			return ctx.Err()
		}
		return fail
	}}
	f := create(t, "run.db", opt)
	defer f.Close()
	commit(t, f, runfile.Batch{Records: messages(1, 3, 10)})
	full := runfile.Batch{
		Records: messages(4, 6, 10), Checkpoint: &runfile.Checkpoint{Seq: 6, Host: hostOf(6)},
		Events: []runfile.Event{{Epoch: 1, N: 1}}, Chunks: []runfile.Chunk{{Kind: "k"}},
		Header: func(h *runfile.Header) { h.Notes = "lost" },
	}
	fail = errors.New("disk gone")
	if err := f.Commit(t.Context(), full); !errors.Is(err, fail) {
		t.Errorf("failing commit: %v", err)
	}
	fail, stall = nil, true
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan error)
	go func() { done <- f.Commit(ctx, full) }()
	// Readers go on while a commit stalls.
	wantRecords(t, f, 0, 0, messages(1, 3, 10))
	cancel()
	if err := <-done; !errors.Is(err, context.Canceled) {
		t.Errorf("stalled commit: %v", err)
	}
	stall = false
	if seq, _ := f.Durable(); seq != 3 {
		t.Errorf("durable %d after failures, want 3", seq)
	}
	// Stepping went on meanwhile: the next commit begins with a gap record.
	gap := ingest.Record{Seq: 9, Host: hostOf(9), Kind: ingest.KindGap}
	commit(t, f, runfile.Batch{Records: []ingest.Record{gap}, Checkpoint: &runfile.Checkpoint{Seq: 9, Host: hostOf(9)}, Events: full.Events})
	wantRecords(t, f, 0, 0, append(messages(1, 3, 10), gap))
	if h, err := f.Header(t.Context()); err != nil || h.Notes != "" {
		t.Errorf("header %+v, %v", h, err)
	}
	n := 0
	if err := f.Events(t.Context(), 0, 1, func(*runfile.Event) error { n++; return nil }); err != nil || n != 1 {
		t.Errorf("%d events, %v", n, err)
	}
	verify(t, f)
}

// Few records lie as they came, many are packed at once, after the few before them; and
// it is the same file afterwards, also when it is opened again between.
func TestManyRecordsArePackedAtOnce(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	var all []ingest.Record
	for i, step := range []struct {
		n, size int
		codecs  []int
	}{
		{10, 100, []int{0}},
		{10, 100, []int{0, 0}},
		{300, 1000, []int{1, 1}}, // over 256 KiB
		{300, 1000, []int{1, 1, 1}},
		{5, 100, []int{1, 1, 1, 0}},
		{2500, 1000, []int{1, 1, 1, 1, 1, 1, 1}}, // of 1 MiB each at most
		{5, 100, []int{1, 1, 1, 1, 1, 1, 1, 0}},
	} {
		next := uint64(len(all)) + 1
		records := messages(next, next+uint64(step.n)-1, step.size)
		commit(t, f, runfile.Batch{Records: records})
		all = append(all, records...)
		got, err := runfile.Codecs(t.Context(), f)
		if err != nil || !slices.Equal(got, step.codecs) {
			t.Errorf("commit %d: blobs of codecs %v, want %v: %v", i+1, got, step.codecs, err)
		}
		if i == 4 {
			f = reopen(t, f, runfile.ReadWrite)
		}
	}
	wantRecords(t, f, 0, 0, all)
	verify(t, f)
}
