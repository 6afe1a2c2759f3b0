package runfile_test

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"sync"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

func size(tb testing.TB, path string) int64 {
	tb.Helper()
	info, err := os.Stat(path)
	if err != nil {
		tb.Fatal(err)
	}
	return info.Size()
}

func TestDiskFull(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	commit(t, f, runfile.Batch{Records: messages(1, 10, 1000)})
	if err := runfile.LimitPages(t.Context(), f, 40); err != nil {
		t.Fatal(err)
	}
	seq := uint64(10)
	var err error
	for err == nil && seq < 2000 {
		if err = f.Commit(t.Context(), runfile.Batch{Records: messages(seq+1, seq+10, 1000)}); err == nil {
			seq += 10
		}
	}
	if !errors.Is(err, runfile.ErrFull) {
		t.Fatalf("commit to a full disk: %v", err)
	}
	if got, _ := f.Durable(); got != seq {
		t.Errorf("durable %d, want %d", got, seq)
	}
	wantRecords(t, f, 0, 0, messages(1, seq, 1000))
	// Once there is room again, recording goes on where the owner has got to.
	if err := runfile.LimitPages(t.Context(), f, 4000); err != nil {
		t.Fatal(err)
	}
	gap := ingest.Record{Seq: seq + 100, Host: hostOf(seq + 100), Kind: ingest.KindGap}
	commit(t, f, runfile.Batch{Records: []ingest.Record{gap}, Checkpoint: &runfile.Checkpoint{Seq: gap.Seq, Host: gap.Host}})
	wantRecords(t, f, 0, 0, append(messages(1, seq, 1000), gap))
	verify(t, f)
}

// Commits that never pause leave no moment at which all of the log is folded;
// it must be made to begin again. Without that it is twice as long as all that
// was committed.
func TestLogIsBounded(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	ctx, stop := context.WithCancel(t.Context())
	var wg sync.WaitGroup
	wg.Go(func() { f.Run(ctx) })
	const mib = 120 // each is written twice: as committed, and packed
	r := message(1, 1<<20)
	for n := range uint64(mib) {
		r.Seq, r.Host = n+1, hostOf(n+1)
		commit(t, f, runfile.Batch{Records: []ingest.Record{r}})
	}
	stop()
	wg.Wait()
	if got := size(t, f.Path()+"-wal"); got > mib<<20 {
		t.Errorf("log of %d MiB after %d MiB of records", got>>20, mib)
	}
	if _, err := f.Log(); err != nil {
		t.Error(err)
	}
	verify(t, f)
}

// A reader that stays holds the log up, but no commit; once it has gone, the
// log begins again.
func TestLogAfterSlowReader(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	seq := uint64(0)
	record := func(mib int) {
		for range mib {
			seq++
			commit(t, f, runfile.Batch{Records: messages(seq, seq, 1<<20)})
		}
	}
	pages := func() int {
		if err := f.Fold(t.Context()); err != nil {
			t.Fatal(err)
		}
		n, err := f.Log()
		if err != nil {
			t.Fatal(err)
		}
		return n
	}
	record(2)
	end, err := runfile.ReadTransaction(t.Context(), f)
	if err != nil {
		t.Fatal(err)
	}
	record(70)
	if n := pages(); n < 4096 {
		t.Errorf("log of %d pages: too short to show anything", n)
	}
	if err := end(); err != nil {
		t.Fatal(err)
	}
	pages()
	record(1)
	if n := pages(); n > 1024 {
		t.Errorf("log of %d pages after the reader had gone", n)
	}
	verify(t, f)
}

func TestPruneKeepsTheFileSmall(t *testing.T) {
	f := create(t, "idle.db", runfile.Options{})
	ctx, stop := context.WithCancel(t.Context())
	var wg sync.WaitGroup
	wg.Go(func() { f.Run(ctx) })
	var largest, early int64
	for n := range uint64(30) { // 30 MB, of which 5 MB are kept
		from, to := n*1000+1, (n+1)*1000
		commit(t, f, runfile.Batch{
			Records:    messages(from, to, 1000),
			Checkpoint: &runfile.Checkpoint{Seq: to, Host: hostOf(to), Full: true},
			Chunks:     []runfile.Chunk{{Kind: "point", Bytes: make([]byte, 1000)}},
			Events:     []runfile.Event{{Epoch: 1, N: n}},
		})
		if to > 5000 {
			if oldest, err := f.PruneBefore(t.Context(), hostOf(to-5000)); err != nil || oldest != to-5000+1 {
				t.Fatalf("pruned to %d, %v, want %d", oldest, err, to-5000+1)
			}
		}
		if got := size(t, f.Path()); n == 10 {
			early = got
		} else if n > 10 {
			largest = max(largest, got)
		}
	}
	stop()
	wg.Wait()
	if largest > early*3/2 {
		t.Errorf("file grew from %d to %d bytes", early, largest)
	}
	// A long run of records goes, and the disk gets its room back.
	if _, err := f.PruneBefore(t.Context(), hostOf(30000)); err != nil {
		t.Fatal(err)
	}
	wantRecords(t, f, 0, 0, nil)
	if seq, host := f.Durable(); seq != 30000 || host != hostOf(30000) {
		t.Errorf("durable %d at %d after pruning all", seq, host)
	}
	verify(t, f)
	f = reopen(t, f, runfile.ReadWrite)
	if got := size(t, f.Path()); got > 1<<20 {
		t.Errorf("empty file of %d bytes", got)
	}
	if seq, host := f.Durable(); seq != 30000 || host != hostOf(30000) {
		t.Errorf("durable %d at %d after reopening", seq, host)
	}
	commit(t, f, runfile.Batch{Records: messages(30001, 30010, 10)})
	wantRecords(t, f, 30001, 0, messages(30001, 30010, 10))
}

// Notes and the recorder's own changes of the header do not undo each other.
func TestHeaderFromManySides(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	commit(t, f, runfile.Batch{Records: messages(1, 1, 1)})
	var wg sync.WaitGroup
	for i := range 4 {
		wg.Go(func() {
			for n := range 10 {
				err := f.UpdateHeader(t.Context(), func(h *runfile.Header) { h.Tags = append(h.Tags, fmt.Sprint(i, n)) })
				if err != nil {
					t.Error(err)
				}
			}
		})
	}
	for n := range uint64(20) {
		commit(t, f, runfile.Batch{Records: messages(n+2, n+2, 1), Header: func(h *runfile.Header) { h.Alarms++ }})
	}
	wg.Wait()
	if h, err := f.Header(t.Context()); err != nil || len(h.Tags) != 40 || h.Alarms != 20 {
		t.Errorf("%d tags, %d alarms, %v", len(h.Tags), h.Alarms, err)
	}
}

func TestCallbackEndsReading(t *testing.T) {
	f := open(t, sealed(t), runfile.ReadOnly)
	enough := errors.New("enough")
	n := 0
	for _, err := range []error{
		f.Records(t.Context(), 0, 0, func(*ingest.Record) error { n++; return enough }),
		f.Chunks(t.Context(), "point", 0, 1<<62, func(*runfile.Chunk) error { n++; return enough }),
		f.Events(t.Context(), 0, 1<<62, func(*runfile.Event) error { n++; return enough }),
		f.Checkpoints(t.Context(), 0, 100, func(*runfile.Checkpoint) error { n++; return enough }),
	} {
		if err != enough { //nolint:errorlint // it must come back as it is
			t.Errorf("%v, want the callback's own error", err)
		}
	}
	if n != 4 {
		t.Errorf("%d calls, want 4", n)
	}
}

// A reader that is still there when the recorder closes loses nothing, and the
// file can be taken up again beside it.
func TestReaderOutlivesWriter(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	commit(t, f, runfile.Batch{Records: messages(1, 100, 100)})
	r := open(t, f.Path(), runfile.ReadOnly)
	wantRecords(t, r, 0, 0, messages(1, 100, 100))
	f = reopen(t, f, runfile.ReadWrite)
	wantRecords(t, r, 0, 0, messages(1, 100, 100))
	commit(t, f, runfile.Batch{Records: messages(101, 110, 100)})
	wantRecords(t, r, 0, 0, messages(1, 110, 100))
}

// BenchmarkCommit stores 1000 records of 1 kB per operation; "raw" is one bare
// insert of a blob of that size into a table of the same settings.
func BenchmarkCommit(b *testing.B) {
	const n, bytes = 1000, 1000
	var variants [8][]ingest.Record
	for v := range variants {
		variants[v] = messages(uint64(v)*n+1, uint64(v+1)*n, bytes)
	}
	batch := func(i uint64) []ingest.Record {
		list := variants[i%uint64(len(variants))]
		for k := range list {
			list[k].Seq = i*n + uint64(k) + 1
			list[k].Host = hostOf(list[k].Seq)
		}
		return list
	}
	b.Run("runfile", func(b *testing.B) {
		f := create(b, "run.db", runfile.Options{})
		ctx, stop := context.WithCancel(b.Context())
		var wg sync.WaitGroup
		wg.Go(func() { f.Run(ctx) })
		b.ReportAllocs()
		b.SetBytes(n * bytes)
		i := uint64(0)
		for b.Loop() {
			if err := f.Commit(b.Context(), runfile.Batch{Records: batch(i)}); err != nil {
				b.Fatal(err)
			}
			i++
		}
		b.ReportMetric(float64(i)*n/b.Elapsed().Seconds(), "records/s")
		stop()
		wg.Wait()
		if err := f.Close(); err != nil {
			b.Fatal(err)
		}
	})
	b.Run("20ms-group", func(b *testing.B) { // 20 records of 1 kB: a group commit at 1000 messages/s
		f := create(b, "run.db", runfile.Options{})
		defer f.Close()
		ctx, stop := context.WithCancel(b.Context())
		var wg sync.WaitGroup
		wg.Go(func() { f.Run(ctx) })
		b.ReportAllocs()
		i := uint64(0)
		for b.Loop() {
			list := variants[i%8][:20]
			for k := range list {
				list[k].Seq = i*20 + uint64(k) + 1
				list[k].Host = hostOf(list[k].Seq)
			}
			if err := f.Commit(b.Context(), runfile.Batch{Records: list}); err != nil {
				b.Fatal(err)
			}
			i++
		}
		stop()
		wg.Wait()
	})
	b.Run("raw", func(b *testing.B) {
		name := url.URL{
			Scheme: "file", OmitHost: true, Path: filepath.Join(b.TempDir(), "raw.db"),
			RawQuery: "_pragma=page_size(16384)&_pragma=journal_mode(WAL)&_pragma=synchronous(FULL)",
		}
		db, err := sql.Open("sqlite", name.String())
		if err != nil {
			b.Fatal(err)
		}
		defer db.Close()
		db.SetMaxOpenConns(1)
		if _, err := db.ExecContext(b.Context(), "CREATE TABLE t (id INTEGER PRIMARY KEY, data BLOB)"); err != nil {
			b.Fatal(err)
		}
		var data [8][]byte
		for v := range data {
			data[v] = ingest.AppendRecords(nil, variants[v])
		}
		b.ReportAllocs()
		b.SetBytes(n * bytes)
		i := 0
		for b.Loop() {
			if _, err := db.ExecContext(b.Context(), "INSERT INTO t (data) VALUES (?)", data[i%8]); err != nil {
				b.Fatal(err)
			}
			i++
		}
		b.ReportMetric(float64(i)*n/b.Elapsed().Seconds(), "records/s")
	})
}

// BenchmarkRecords reads packed records of 1 kB.
func BenchmarkRecords(b *testing.B) {
	f := create(b, "run.db", runfile.Options{})
	defer f.Close()
	const n = 20_000
	for seq := uint64(1); seq < n; seq += 1000 {
		commit(b, f, runfile.Batch{Records: messages(seq, seq+999, 1000)})
	}
	b.ReportAllocs()
	b.SetBytes(n * 1000)
	sum := 0
	from := uint64(0)
	for b.Loop() {
		from = from%5 + 1
		if err := f.Records(b.Context(), from, 0, func(r *ingest.Record) error { sum += len(r.Payload); return nil }); err != nil {
			b.Fatal(err)
		}
	}
	if sum == 0 {
		b.Fatal("nothing read")
	}
}
