package runfile_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sync"
	"sync/atomic"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

// model is what a file should hold, in plain slices.
type model struct {
	records     []ingest.Record
	checkpoints []runfile.Checkpoint
	chunks      []runfile.Chunk
	events      []runfile.Event
	seq         uint64
}

func (m *model) commit(b runfile.Batch) {
	m.records = append(m.records, b.Records...)
	if n := len(b.Records); n > 0 {
		m.seq = b.Records[n-1].Seq
	}
	if b.Checkpoint != nil {
		m.checkpoints = append(m.checkpoints, *b.Checkpoint)
	}
	for _, c := range b.Chunks {
		c.Seq = m.seq
		m.chunks = append(m.chunks, c)
	}
	for _, e := range b.Events {
		e.Seq = m.seq
		m.events = append(m.events, e)
	}
}

// after keeps what depends on records after seq, and the checkpoint of seq.
func (m *model) after(seq uint64) {
	m.records = keep(m.records, func(r *ingest.Record) bool { return r.Seq > seq })
	m.checkpoints = keep(m.checkpoints, func(c *runfile.Checkpoint) bool { return c.Seq >= seq })
	m.chunks = keep(m.chunks, func(c *runfile.Chunk) bool { return c.Seq > seq })
	m.events = keep(m.events, func(e *runfile.Event) bool { return e.Seq > seq })
}

// upto keeps what depends on records up to seq.
func (m *model) upto(seq uint64) {
	m.records = keep(m.records, func(r *ingest.Record) bool { return r.Seq <= seq })
	m.checkpoints = keep(m.checkpoints, func(c *runfile.Checkpoint) bool { return c.Seq <= seq })
	m.chunks = keep(m.chunks, func(c *runfile.Chunk) bool { return c.Seq <= seq })
	m.events = keep(m.events, func(e *runfile.Event) bool { return e.Seq <= seq })
	m.seq = seq
}

func keep[T any](list []T, ok func(*T) bool) []T {
	var out []T
	for i := range list {
		if ok(&list[i]) {
			out = append(out, list[i])
		}
	}
	return out
}

// compare reads everything of the file.
func (m *model) compare(t *testing.T, f *runfile.File) {
	t.Helper()
	wantRecords(t, f, 0, 0, m.records)
	var got model
	err := errors.Join(
		f.Checkpoints(t.Context(), 0, m.seq, func(c *runfile.Checkpoint) error {
			got.checkpoints = append(got.checkpoints, *c)
			return nil
		}),
		f.Follow(t.Context(), 0, m.seq,
			func(c *runfile.Chunk) error { got.chunks = append(got.chunks, *c); return nil },
			func(e *runfile.Event) error { got.events = append(got.events, *e); return nil }))
	if err != nil {
		t.Fatal(err)
	}
	same(t, "checkpoints", got.checkpoints, m.checkpoints)
	same(t, "chunks", got.chunks, m.chunks)
	same(t, "events", got.events, m.events)
	if seq, _ := f.Durable(); seq != m.seq {
		t.Fatalf("durable %d, want %d", seq, m.seq)
	}
	verify(t, f)
}

func same[T any](t *testing.T, what string, got, want []T) {
	t.Helper()
	if g, w := fmt.Sprintf("%+v", got), fmt.Sprintf("%+v", want); g != w {
		t.Fatalf("%s: %d, want %d:\n%.300s\n%.300s", what, len(got), len(want), g, w)
	}
}

// random makes the next batch of a random run, with a hole now and then.
func (m *model) random(rng *rand.Rand, n uint64) runfile.Batch {
	var b runfile.Batch
	seq := m.seq
	for range rng.IntN(60) {
		seq++
		r := message(seq, rng.IntN(2000))
		if rng.IntN(200) == 0 && seq > 1 {
			seq += uint64(rng.IntN(10))
			r = ingest.Record{Seq: seq, Host: hostOf(seq), Kind: ingest.KindGap, Payload: []byte("{}")}
		}
		b.Records = append(b.Records, r)
	}
	if rng.IntN(120) == 0 { // one large message: more than a packed blob
		seq++
		b.Records = append(b.Records, message(seq, 1500_000))
	}
	if seq == 0 {
		return b
	}
	for range rng.IntN(3) {
		first := hostOf(seq) - rng.Int64N(second/100)
		b.Chunks = append(b.Chunks, runfile.Chunk{
			Kind: []string{"scan", "point"}[rng.IntN(2)], FirstT: first, LastT: first + rng.Int64N(second/100),
			Rows: rng.IntN(9), Bytes: bytes.Repeat([]byte{byte(n)}, 1+rng.IntN(500)),
		})
	}
	for i := range uint64(rng.IntN(3)) {
		b.Events = append(b.Events, runfile.Event{Epoch: 1, N: 10*n + i, T: hostOf(seq) - rng.Int64N(second/100), Kind: "alarm", JSON: []byte("{}")})
	}
	if rng.IntN(6) == 0 {
		b.Checkpoint = &runfile.Checkpoint{Seq: seq, Host: hostOf(seq), State: bytes.Repeat([]byte{1}, 1+rng.IntN(1000)), Digest: []byte{byte(n)}, Full: rng.IntN(2) == 0}
		if m.checkpoints != nil && m.checkpoints[len(m.checkpoints)-1].Seq == seq {
			b.Checkpoint = nil // the file replaces it, the model would not
		}
	}
	return b
}

func TestAgainstModel(t *testing.T) {
	for seed := range uint64(4) {
		t.Run(fmt.Sprint("seed ", seed), func(t *testing.T) {
			rng := rand.New(rand.NewPCG(seed, 5))
			var m model
			broken := errors.New("disk gone")
			fail := false
			opt := runfile.Options{BeforeCommit: func(context.Context) error {
				if fail {
					return broken
				}
				return nil
			}}
			f := create(t, "run.db", opt)
			defer func() { f.Close() }()
			for n := range uint64(150) {
				switch rng.IntN(25) {
				case 0:
					if err := f.Close(); err != nil {
						t.Fatal(err)
					}
					var err error
					if f, err = runfile.Open(t.Context(), f.Path(), runfile.ReadWrite, opt); err != nil {
						t.Fatal(err)
					}
				case 1:
					if err := f.Fold(t.Context()); err != nil {
						t.Fatal(err)
					}
				case 2:
					fail = true
					if err := f.Commit(t.Context(), m.random(rng, n)); !errors.Is(err, broken) {
						t.Fatal("a failing commit succeeded")
					}
					fail = false
				case 3:
					host := hostOf(m.seq) - rng.Int64N(second/50)
					oldest, err := f.PruneBefore(t.Context(), host)
					if err != nil {
						t.Fatal(err)
					}
					var want uint64
					for _, c := range m.checkpoints {
						if c.Full && c.Host <= host {
							want = c.Seq + 1
						}
					}
					if oldest != want {
						t.Fatalf("pruned to %d, want %d", oldest, want)
					}
					if want != 0 {
						m.after(want - 1)
					}
				case 4:
					m.compare(t, f)
				case 5:
					m.ask(t, f, rng)
				case 6:
					m.copy(t, f, rng)
				default:
					b := m.random(rng, n)
					commit(t, f, b)
					m.commit(b)
				}
			}
			m.compare(t, f)
			f = reopen(t, f, runfile.ReadOnly)
			m.compare(t, f)
		})
	}
}

// ask puts one question of each kind at a random place.
func (m *model) ask(t *testing.T, f *runfile.File, rng *rand.Rand) {
	t.Helper()
	if len(m.records) == 0 {
		return
	}
	a, b := &m.records[rng.IntN(len(m.records))], &m.records[rng.IntN(len(m.records))]
	if a.Seq > b.Seq {
		a, b = b, a
	}
	wantRecords(t, f, a.Seq, b.Seq, keep(m.records, func(r *ingest.Record) bool { return a.Seq <= r.Seq && r.Seq <= b.Seq }))

	host := hostOf(m.records[0].Seq) - 1 + rng.Int64N(hostOf(m.seq)-hostOf(m.records[0].Seq)+3)
	var seq uint64
	for i := range m.records {
		if m.records[i].Host <= host {
			seq = m.records[i].Seq
		}
	}
	if got, err := f.SeqAtHost(t.Context(), host); err != nil || got != seq {
		t.Fatalf("record at host %d: %d, %v, want %d", host, got, err, seq)
	}

	var last, lastFull *runfile.Checkpoint
	for i := range m.checkpoints {
		c := &m.checkpoints[i]
		if c.Seq <= a.Seq {
			last = c
		}
		if c.Full && c.Host <= host {
			lastFull = c
		}
	}
	got, err := f.LastCheckpoint(t.Context(), a.Seq)
	sameCheckpoint(t, got, err, last)
	got, err = f.CheckpointAtHost(t.Context(), host, true)
	sameCheckpoint(t, got, err, lastFull)
	var first *runfile.Checkpoint
	if len(m.checkpoints) > 0 {
		first = &m.checkpoints[0]
	}
	got, err = f.FirstCheckpoint(t.Context())
	sameCheckpoint(t, got, err, first)

	from, to := a.Host, b.Host
	n := 0
	for _, c := range m.chunks {
		if c.Kind == "point" && c.FirstT < to && c.LastT >= from {
			n++
		}
	}
	for _, e := range m.events {
		if from <= e.T && e.T < to {
			n++
		}
	}
	t0 := from - second
	err = errors.Join(
		f.Chunks(t.Context(), "point", from, to, func(c *runfile.Chunk) error {
			n--
			if c.FirstT < t0 {
				return errors.New("chunks out of order")
			}
			t0 = c.FirstT
			return nil
		}),
		f.Events(t.Context(), from, to, func(*runfile.Event) error { n--; return nil }))
	if err != nil || n != 0 {
		t.Fatalf("chunks and events of %d to %d: %d missing, %v", from, to, n, err)
	}
}

func sameCheckpoint(t *testing.T, got runfile.Checkpoint, err error, want *runfile.Checkpoint) {
	t.Helper()
	switch {
	case want == nil:
		if !errors.Is(err, runfile.ErrNoCheckpoint) {
			t.Fatalf("checkpoint %d, %v, want none", got.Seq, err)
		}
	case err != nil:
		t.Fatal(err)
	default:
		same(t, "checkpoint", []runfile.Checkpoint{got}, []runfile.Checkpoint{*want})
	}
}

// copy begins a new file with a part of f, in one or two steps, and goes on with it.
func (m *model) copy(t *testing.T, f *runfile.File, rng *rand.Rand) {
	t.Helper()
	full := keep(m.checkpoints, func(c *runfile.Checkpoint) bool { return c.Full })
	if len(full) == 0 {
		return
	}
	after := full[rng.IntN(len(full))].Seq
	between := keep(m.records, func(r *ingest.Record) bool { return r.Seq > after })
	half := after
	if len(between) > 0 {
		half = between[rng.IntN(len(between))].Seq
	}
	g := create(t, "copy.db", runfile.Options{Seed: &runfile.Seed{From: f, After: after, Upto: half}})
	defer g.Close()
	want := *m
	want.after(after)
	want.upto(half)
	want.compare(t, g)
	if err := g.CopyFrom(t.Context(), f, half, m.seq); err != nil {
		t.Fatal(err)
	}
	want = *m
	want.after(after)
	want.compare(t, g)
	b := want.random(rng, 1_000_000)
	commit(t, g, b)
	want.commit(b)
	want.compare(t, g)
}

func TestCopyRefuses(t *testing.T) {
	src := open(t, sealed(t), runfile.ReadOnly) // checkpoints every ten, none full
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	for _, tc := range []struct {
		name        string
		src         *runfile.File
		after, upto uint64
		want        error
	}{
		{"no checkpoint there", src, 45, 60, runfile.ErrNoCheckpoint},
		{"checkpoint not full", src, 50, 60, runfile.ErrNoCheckpoint},
		{"beyond the end", src, 0, 111, runfile.ErrOrder},
		{"backwards", src, 60, 50, runfile.ErrOrder},
		{"itself", f, 0, 0, runfile.ErrOrder},
	} {
		if err := f.CopyFrom(t.Context(), tc.src, tc.after, tc.upto); !errors.Is(err, tc.want) {
			t.Errorf("%s: %v, want %v", tc.name, err, tc.want)
		}
	}
	if err := f.CopyFrom(t.Context(), src, 0, 33); err != nil {
		t.Fatal(err)
	}
	if err := f.CopyFrom(t.Context(), src, 40, 50); !errors.Is(err, runfile.ErrOrder) {
		t.Errorf("hole: %v", err)
	}
	wantRecords(t, f, 0, 0, messages(1, 33, 3000))

	// A seed that cannot be copied leaves no file.
	path := filepath.Join(t.TempDir(), "new.db")
	if _, err := runfile.Create(t.Context(), path, rig0, runfile.Options{Seed: &runfile.Seed{From: src, After: 50, Upto: 60}}); !errors.Is(err, runfile.ErrNoCheckpoint) {
		t.Errorf("create: %v", err)
	}
	if list, _ := filepath.Glob(path + "*"); len(list) != 0 {
		t.Errorf("left %q", list)
	}
}

func TestCopyOfDamaged(t *testing.T) {
	path := sealed(t)
	exec1(t, raw(t, path), "UPDATE records SET data=x'00' WHERE first_seq=41")
	src := open(t, path, runfile.ReadOnly)
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	if err := f.CopyFrom(t.Context(), src, 0, 110); !errors.Is(err, runfile.ErrCorrupt) {
		t.Errorf("damaged: %v", err)
	}
	exec1(t, raw(t, path), "DELETE FROM records WHERE first_seq=41")
	if err := f.CopyFrom(t.Context(), src, 0, 110); !errors.Is(err, runfile.ErrGap) {
		t.Errorf("hole: %v", err)
	}
	wantRecords(t, f, 0, 0, nil)
}

// What an interrupted Create left, and a log whose file was removed by hand,
// must not get into a new file.
func TestCreateOverRemains(t *testing.T) {
	old := create(t, "run.db", runfile.Options{})
	commit(t, old, runfile.Batch{Records: messages(1, 50, 500)})
	log, err := os.ReadFile(old.Path() + "-wal")
	if err != nil {
		t.Fatal(err)
	}
	old.Close()
	path := filepath.Join(t.TempDir(), "run.db")
	for _, suffix := range []string{"-wal", ".new", ".new-journal", ".new-wal"} {
		if err := os.WriteFile(path+suffix, log, 0o600); err != nil {
			t.Fatal(err)
		}
	}
	f, err := runfile.Create(t.Context(), path, rig0, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	wantRecords(t, f, 0, 0, nil)
	verify(t, f)
	if list, _ := filepath.Glob(path + ".new*"); len(list) != 0 {
		t.Errorf("left %q", list)
	}
}

// Readers see every record once and in order while commits pack blobs under
// them, folding runs and the beginning is pruned away behind.
func TestReadWhileRecording(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	ctx := t.Context()
	const batches, per = 200, 50
	var done atomic.Bool
	var wg sync.WaitGroup
	for range 2 {
		wg.Go(func() {
			for !done.Load() {
				durable, _ := f.Durable()
				last := uint64(0)
				err := f.Records(ctx, 0, 0, func(r *ingest.Record) error {
					if want := message(r.Seq, 200); !bytes.Equal(r.Payload, want.Payload) {
						return fmt.Errorf("record %d differs", r.Seq)
					}
					if last != 0 && r.Seq != last+1 {
						return fmt.Errorf("record %d after %d", r.Seq, last)
					}
					last = r.Seq
					return nil
				})
				if err != nil || last < durable {
					t.Errorf("read to %d of %d: %v", last, durable, err)
					return
				}
			}
		})
	}
	folding, stop := context.WithCancel(ctx)
	wg.Go(func() { f.Run(folding) })
	for n := range uint64(batches) {
		b := runfile.Batch{Records: messages(n*per+1, (n+1)*per, 200)}
		if n%20 == 19 {
			b.Checkpoint = &runfile.Checkpoint{Seq: (n + 1) * per, Host: hostOf((n + 1) * per), Full: true}
		}
		commit(t, f, b)
	}
	done.Store(true)
	stop()
	wg.Wait()
	if pages, err := f.Log(); err != nil {
		t.Errorf("log of %d pages: %v", pages, err)
	}
	wantRecords(t, f, 0, 0, messages(1, batches*per, 200))
	verify(t, f)
}
