package runfile_test

import (
	"bufio"
	"context"
	"database/sql"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
)

// recorderEnv makes the test binary the process that is killed.
const recorderEnv = "RUNFILE_TEST_RECORD_INTO"

func TestMain(m *testing.M) {
	if path := os.Getenv(recorderEnv); path != "" {
		if err := recordForEver(path); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
	}
	os.Exit(m.Run())
}

// recordForEver goes on with the file at path, folding beside it, and prints
// the number of the last record each time that Commit has returned.
func recordForEver(path string) error {
	ctx := context.Background()
	f, err := runfile.Open(ctx, path, runfile.ReadWrite, runfile.Options{})
	if err != nil {
		return err
	}
	go f.Run(ctx)
	seq, _ := f.Durable()
	for round := seq; ; round++ {
		b := nextBatch(seq, round)
		if err := f.Commit(ctx, b); err != nil {
			return err
		}
		seq = b.Records[len(b.Records)-1].Seq
		fmt.Println(seq)
		if round%50 == 0 {
			if _, err := f.PruneBefore(ctx, hostOf(seq)-second/20); err != nil {
				return err
			}
		}
	}
}

// nextBatch makes what the recorder commits after record seq: always some
// records, now and then a checkpoint with a chunk and an event.
func nextBatch(seq, round uint64) runfile.Batch {
	b := runfile.Batch{Records: messages(seq+1, seq+1+round%40, 400)}
	last := b.Records[len(b.Records)-1]
	if round%7 == 0 {
		b.Checkpoint = &runfile.Checkpoint{Seq: last.Seq, Host: last.Host, State: []byte(strconv.FormatUint(last.Seq, 10)), Full: true}
		b.Chunks = []runfile.Chunk{{Kind: "point", FirstT: last.Host, LastT: last.Host, Bytes: make([]byte, 3000)}}
		b.Events = []runfile.Event{{Epoch: 1, N: last.Seq, T: last.Host, JSON: []byte("{}")}}
	}
	return b
}

// wantWhole checks what every reopened file must be: sound, records as they
// were made, without a hole, at least up to acked, and checkpoint, chunk and
// event all there or all missing.
func wantWhole(t *testing.T, f *runfile.File, acked uint64) {
	t.Helper()
	verify(t, f)
	end, host := f.Durable()
	if end < acked {
		t.Fatalf("file ends at record %d, %d was durable", end, acked)
	}
	if end != 0 && host != hostOf(end) {
		t.Fatalf("file ends at host time %d, want %d", host, hostOf(end))
	}
	last := uint64(0)
	err := f.Records(t.Context(), 0, 0, func(r *ingest.Record) error {
		want := message(r.Seq, 400)
		if r.Host != want.Host || r.Topic != want.Topic || string(r.Payload) != string(want.Payload) {
			return fmt.Errorf("record %d differs", r.Seq)
		}
		if last != 0 && r.Seq != last+1 {
			return fmt.Errorf("record %d after %d", r.Seq, last)
		}
		last = r.Seq
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if last != end {
		t.Fatalf("records end at %d, durable is %d", last, end)
	}
	var marks [3][]uint64 // seq of checkpoints, chunks, events
	err = errors.Join(
		f.Checkpoints(t.Context(), 0, end, func(c *runfile.Checkpoint) error {
			marks[0] = append(marks[0], c.Seq)
			if string(c.State) != strconv.FormatUint(c.Seq, 10) {
				return fmt.Errorf("state of %d is %q", c.Seq, c.State)
			}
			return nil
		}),
		f.Follow(t.Context(), 0, end,
			func(c *runfile.Chunk) error { marks[1] = append(marks[1], c.Seq); return nil },
			func(e *runfile.Event) error { marks[2] = append(marks[2], e.Seq); return nil }))
	if err != nil {
		t.Fatal(err)
	}
	// A killed pruning may have dropped old checkpoints before their chunks, and
	// keeps the last checkpoint without what came with it.
	for i, m := range marks {
		if !slices.IsSorted(m) {
			t.Fatalf("list %d not in order: %d", i, m)
		}
		for _, seq := range marks[0][min(1, len(marks[0])):] {
			if !slices.Contains(m, seq) {
				t.Fatalf("checkpoint %d has nothing in list %d", seq, i)
			}
		}
	}
}

func TestKilledWhileRecording(t *testing.T) {
	kills := 32
	if testing.Short() {
		kills = 8
	}
	f := create(t, "run.db", runfile.Options{})
	path := f.Path()
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(2, 2))
	grown := 0
	for kill := range kills {
		acked := recordAndKill(t, path, rng.IntN(60), time.Duration(rng.IntN(5000))*time.Microsecond)
		f, err := runfile.Open(t.Context(), path, runfile.ReadWrite, runfile.Options{})
		if err != nil {
			t.Fatalf("kill %d: %v", kill, err)
		}
		wantWhole(t, f, acked)
		if acked > 0 {
			grown++
		}
		if kill%2 == 0 { // every other time the next process finds log and all
			if err := f.Close(); err != nil {
				t.Fatal(err)
			}
		} else {
			defer f.Close()
		}
	}
	if grown < kills/2 {
		t.Errorf("only %d of %d recorders got as far as a commit", grown, kills)
	}
}

// recordAndKill lets a process record into path, kills it a while after it has
// printed some lines, and gives the last number it has printed.
func recordAndKill(t *testing.T, path string, lines int, while time.Duration) (acked uint64) {
	t.Helper()
	cmd := exec.CommandContext(t.Context(), os.Args[0])
	cmd.Env = append(os.Environ(), recorderEnv+"="+path)
	var said strings.Builder
	cmd.Stderr = &said
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	in := bufio.NewReader(out)
	for n := 0; ; n++ {
		if n == lines+1 {
			time.AfterFunc(while, func() { _ = cmd.Process.Kill() })
		}
		line, err := in.ReadString('\n')
		if err != nil {
			if !errors.Is(err, io.EOF) {
				t.Fatal(err)
			}
			break // a torn line was not acknowledged
		}
		if acked, err = strconv.ParseUint(strings.TrimSpace(line), 10, 64); err != nil {
			t.Fatal(err)
		}
	}
	_ = cmd.Wait()
	if said.Len() > 0 {
		t.Fatalf("recorder: %s", said.String())
	}
	return acked
}

// A power cut leaves any beginning of what was written to the log since the
// last sync, and a sync comes before a commit returns. So for every cut of the
// log the file must be whole, up to the commits it then holds.
func TestLogCutAnywhere(t *testing.T) {
	f := create(t, "run.db", runfile.Options{})
	defer f.Close()
	rng := rand.New(rand.NewPCG(3, 3))
	type point struct {
		log int64
		seq uint64
	}
	points := []point{{}}
	seq := uint64(0)
	for round := range uint64(60) {
		b := nextBatch(seq, round)
		commit(t, f, b)
		seq = b.Records[len(b.Records)-1].Seq
		info, err := os.Stat(f.Path() + "-wal")
		if err != nil {
			t.Fatal(err)
		}
		points = append(points, point{info.Size(), seq})
	}
	db, err := os.ReadFile(f.Path())
	if err != nil {
		t.Fatal(err)
	}
	log, err := os.ReadFile(f.Path() + "-wal")
	if err != nil {
		t.Fatal(err)
	}
	for range 40 {
		cut := rng.Int64N(int64(len(log)) + 1)
		path := filepath.Join(t.TempDir(), "cut.db")
		torn := log[:cut:cut]
		if rng.IntN(2) == 0 { // and a sector of something else behind it
			torn = append(torn, make([]byte, 512)...)
		}
		if err := errors.Join(os.WriteFile(path, db, 0o600), os.WriteFile(path+"-wal", torn, 0o600)); err != nil {
			t.Fatal(err)
		}
		var acked uint64
		for _, p := range points {
			if p.log <= cut {
				acked = p.seq
			}
		}
		mode := runfile.Mode(rng.IntN(2)) // a reader repairs as a writer does
		g, err := runfile.Open(t.Context(), path, mode, runfile.Options{})
		if err != nil {
			t.Fatalf("cut at %d: %v", cut, err)
		}
		wantWhole(t, g, acked)
		if end, _ := g.Durable(); end != acked {
			t.Fatalf("cut at %d: file ends at record %d, want %d", cut, end, acked)
		}
		if err := g.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

// raw opens a closed run file behind the package's back.
func raw(t *testing.T, path string) *sql.DB {
	t.Helper()
	db, err := sql.Open("sqlite", (&url.URL{Scheme: "file", OmitHost: true, Path: path}).String())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { db.Close() })
	return db
}

func exec1(t *testing.T, db *sql.DB, query string) {
	t.Helper()
	res, err := db.ExecContext(t.Context(), query)
	if err != nil {
		t.Fatal(err)
	}
	if n, err := res.RowsAffected(); err != nil || n != 1 {
		t.Fatalf("%s: %d rows, %v", query, n, err)
	}
}

// sealed makes a closed file of 100 records in blobs of ten, packed, then ten
// more in two small ones.
func sealed(t *testing.T) string {
	t.Helper()
	f := create(t, "run.db", runfile.Options{})
	for seq := uint64(1); seq <= 100; seq += 10 {
		end := seq + 9
		commit(t, f, runfile.Batch{
			Records:    messages(seq, end, 3000),
			Checkpoint: &runfile.Checkpoint{Seq: end, Host: hostOf(end), State: []byte("state")},
			Chunks:     []runfile.Chunk{{Kind: "point", FirstT: hostOf(seq), LastT: hostOf(end), Bytes: []byte("columns")}},
			Events:     []runfile.Event{{Epoch: 1, N: seq, T: hostOf(seq), JSON: []byte("{}")}},
		})
	}
	commit(t, f, runfile.Batch{Records: messages(101, 105, 3000)})
	commit(t, f, runfile.Batch{Records: messages(106, 110, 3000)})
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	return f.Path()
}

func TestDamagedRow(t *testing.T) {
	const flip = " data = CAST(substr(data, 1, 20) || x'ff' || substr(data, 22) AS BLOB)"
	for _, tc := range []struct {
		name, damage string
		table        string
		row          uint64
		clean        uint64 // records before the damage
	}{
		{"packed blob", "UPDATE records SET" + flip + " WHERE first_seq=41", "records", 41, 40},
		{"small blob", "UPDATE records SET" + flip + " WHERE first_seq=106", "records", 106, 105},
		{"number", "UPDATE records SET last_seq=51 WHERE first_seq=41", "records", 41, 40},
		{"host time", "UPDATE records SET first_host=first_host+1 WHERE first_seq=41", "records", 41, 40},
		{"size, which is not believed", "UPDATE records SET bytes=1<<50 WHERE first_seq=41", "records", 41, 40},
		{"codec", "UPDATE records SET codec=0 WHERE first_seq=41", "records", 41, 40},
		{"type", "UPDATE records SET codec='x' WHERE first_seq=41", "records", 0, 40},
		{"state", "UPDATE checkpoints SET state=x'00' WHERE seq=50", "checkpoints", 50, 110},
		{"digest", "UPDATE checkpoints SET digest=x'00' WHERE seq=50", "checkpoints", 50, 110},
		{"chunk", "UPDATE chunks SET first_t=first_t-1 WHERE id=3", "chunks", 3, 110},
		{"event", "UPDATE events SET json='[]' WHERE id=4", "events", 4, 110},
	} {
		t.Run(tc.name, func(t *testing.T) {
			path := sealed(t)
			exec1(t, raw(t, path), tc.damage)
			f := open(t, path, runfile.ReadOnly)
			err := f.Verify(t.Context())
			var where *runfile.CorruptError
			if !errors.Is(err, runfile.ErrCorrupt) || !errors.As(err, &where) || where.Table != tc.table || where.Row != tc.row {
				t.Errorf("verify: %v, want damage of %s row %d", err, tc.table, tc.row)
			}
			got, err := stored(t, f, 0, 0)
			if tc.clean < 110 != errors.Is(err, runfile.ErrCorrupt) {
				t.Errorf("records: %v", err)
			}
			sameRecords(t, got, messages(1, tc.clean, 3000))
			if tc.table == "records" && tc.clean < 100 {
				// What lies behind the damage can still be asked for.
				wantRecords(t, f, 51, 0, messages(51, 110, 3000))
			}
			if tc.table == "checkpoints" {
				_, err := f.LastCheckpoint(t.Context(), 55)
				if !errors.As(err, &where) {
					t.Fatalf("damaged checkpoint: %v", err)
				}
				if c, err := f.LastCheckpoint(t.Context(), where.Row-1); err != nil || c.Seq != 40 {
					t.Errorf("checkpoint before the damaged one: %d, %v", c.Seq, err)
				}
			}
		})
	}
}

func TestRecordMissing(t *testing.T) {
	path := sealed(t)
	exec1(t, raw(t, path), "DELETE FROM records WHERE first_seq=61")
	f := open(t, path, runfile.ReadOnly)
	for _, from := range []uint64{0, 1, 61} {
		got, err := stored(t, f, from, 0)
		var gap *runfile.GapError
		if !errors.Is(err, runfile.ErrGap) || !errors.As(err, &gap) || gap.Missing != 61 || gap.Next != 71 {
			t.Errorf("from %d: %v, want record 61 missing before 71", from, err)
		}
		sameRecords(t, got, messages(max(from, 1), 60, 3000))
	}
	wantRecords(t, f, 71, 0, messages(71, 110, 3000))
}

// Damage of a small blob must not stop the recording, nor be packed away.
func TestDamagedSmallBlobIsKept(t *testing.T) {
	path := sealed(t)
	exec1(t, raw(t, path), "UPDATE records SET data=x'00' WHERE first_seq=106")
	f := open(t, path, runfile.ReadWrite)
	for seq := uint64(111); seq <= 130; seq += 10 {
		commit(t, f, runfile.Batch{Records: messages(seq, seq+9, 3000), Checkpoint: &runfile.Checkpoint{Seq: seq + 9, Host: hostOf(seq + 9)}})
	}
	got, err := stored(t, f, 0, 0)
	var where *runfile.CorruptError
	if !errors.As(err, &where) || where.Row != 106 {
		t.Errorf("%v, want damage of row 106", err)
	}
	sameRecords(t, got, messages(1, 105, 3000))
	wantRecords(t, f, 111, 0, messages(111, 130, 3000))
}

// wantPrefix checks that a damaged copy of the file of sealed gives a beginning
// of its records and nothing else, and says so if it is not all.
func wantPrefix(t *testing.T, path string) {
	t.Helper()
	f, err := runfile.Open(t.Context(), path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		return // the header is gone
	}
	defer f.Close()
	got, err := stored(t, f, 1, 0)
	if len(got) > 110 {
		t.Fatalf("%d records of 110", len(got))
	}
	sameRecords(t, got, messages(1, uint64(len(got)), 3000))
	end, _ := f.Durable()
	if len(got) < 110 && err == nil && end == 110 {
		t.Errorf("%d records of 110 and no error", len(got))
	}
	_ = f.Verify(t.Context())
}

func TestTruncatedFile(t *testing.T) {
	content, err := os.ReadFile(sealed(t))
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "cut.db")
	read := 0
	for cut := len(content) - 1; cut > 1<<14; cut -= 5000 {
		if err := os.WriteFile(path, content[:cut], 0o600); err != nil {
			t.Fatal(err)
		}
		wantPrefix(t, path)
		// Less than a page may be missing after a crash, too: then the log has it.
		if pages := len(content) >> 14; cut <= (pages-1)<<14 {
			if _, err := runfile.Open(t.Context(), path, runfile.ReadWrite, runfile.Options{}); !errors.Is(err, runfile.ErrCorrupt) {
				t.Fatalf("cut at %d: opened for writing: %v", cut, err)
			}
		}
		f, err := runfile.Open(t.Context(), path, runfile.ReadOnly, runfile.Options{})
		if err != nil {
			continue
		}
		got, err := stored(t, f, 1, 0)
		if err != nil && !errors.Is(err, runfile.ErrCorrupt) && !errors.Is(err, runfile.ErrGap) {
			t.Errorf("cut at %d: %v", cut, err)
		}
		if len(got) > 0 {
			read++
		}
		f.Close()
	}
	if read < 5 {
		t.Errorf("records were read from %d cut files only", read)
	}
}

// Whatever is done to the bytes of a file, reading neither panics nor gives a
// record that was not stored.
func FuzzDamagedFile(f *testing.F) {
	for _, seed := range []struct {
		at, cut uint32
		with    byte
	}{{0, 0, 1}, {18, 0, 2}, {100, 0, 0x0a}, {16384 * 3, 0, 0xff}, {16384*4 + 9, 70000, 0x80}, {200000, 0, 1}} {
		f.Add(seed.at, seed.with, seed.cut)
	}
	var content []byte
	f.Fuzz(func(t *testing.T, at uint32, with byte, cut uint32) {
		if content == nil {
			var err error
			if content, err = os.ReadFile(sealed(t)); err != nil {
				t.Fatal(err)
			}
		}
		damaged := append([]byte(nil), content[:len(content)-int(cut)%(len(content)/2)]...)
		damaged[int(at)%len(damaged)] ^= with
		path := filepath.Join(t.TempDir(), "bad.db")
		if err := os.WriteFile(path, damaged, 0o600); err != nil {
			t.Fatal(err)
		}
		wantPrefix(t, path)
	})
}
