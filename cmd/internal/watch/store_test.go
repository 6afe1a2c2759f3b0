package watch_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io/fs"
	"log/slog"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// obstruct makes the files of runs that begin in the first seconds of a bubble
// impossible, until clear is called.
func obstruct(t *testing.T, dir string) (clear func()) {
	t.Helper()
	var in []string
	for s := range 10 {
		path := filepath.Join(dir, "runs", fmt.Sprintf("bench_1-20000101T00000%dZ.db.new", s))
		if err := os.MkdirAll(filepath.Join(path, "in the way"), 0o750); err != nil {
			t.Fatal(err)
		}
		in = append(in, path)
	}
	return func() {
		for _, path := range in {
			if err := os.RemoveAll(path); err != nil {
				t.Error(err)
			}
		}
	}
}

// A run whose file cannot be made is recorded into the idle file, and gets its
// file as soon as there can be one: while it is on, at its end, or at a restart.
func TestRunFileThatCannotBeMade(t *testing.T) {
	const chunk = int64(2e9)
	for _, tt := range []struct {
		name string
		then func(d *desk, clear func()) *desk // from where the run is on without a file
		runs int
	}{
		{"soon", func(d *desk, clear func()) *desk {
			clear()
			d.feed(5 * time.Second)
			if f, idle := d.store.Current(); idle {
				d.t.Errorf("two chunks later it is still %s", f.Path())
			}
			d.must(d.act(pipeline.DoRunEnd))
			return d
		}, 1},
		{"at its end", func(d *desk, clear func()) *desk {
			clear()
			d.must(d.act(pipeline.DoRunEnd))
			return d
		}, 1},
		{"at a restart", func(d *desk, clear func()) *desk {
			d.close()
			clear()
			again := openDesk(d.t, d.dir, runfile.Options{}, nil)
			again.sent, again.asked = d.sent, d.asked
			again.feed(time.Second)
			again.must(again.act(pipeline.DoRunEnd))
			return again
		}, 1},
		{"never", func(d *desk, clear func()) *desk {
			d.feed(5 * time.Second)
			d.must(d.act(pipeline.DoRunEnd))
			d.feed(time.Second)
			clear()
			return d
		}, 0},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			dir := memory(t)
			synctest.Test(t, func(t *testing.T) {
				clear := obstruct(t, dir)
				d := openDesk(t, dir, runfile.Options{}, func(c *watch.Config) { c.Core.ChunkFor = chunk })
				d.feed(2 * time.Second)
				d.must(d.act(pipeline.DoRunStart))
				d.feed(3 * time.Second)
				if f, idle := d.store.Current(); !idle {
					t.Fatalf("%s could be made", f.Path())
				}
				d = tt.then(d, clear)
				d.feed(time.Second)
				sent := d.sent
				d.close()
				s := readAll(t, dir)
				if len(s.runs) != tt.runs || s.messages != int(sent) || len(s.gaps) > 0 || s.records[0].Seq != 1 {
					t.Errorf("%d files of runs, %d are due; %d of %d messages from record %d on", len(s.runs), tt.runs, s.messages, sent, s.records[0].Seq)
				}
				for _, h := range s.runs {
					if h.State != runfile.StateEnded {
						t.Errorf("run %s is %s", h.ID, h.State)
					}
				}
			})
		})
	}
}

// Where no idle file can be begun at the end of a run, recording goes on in the
// file of the run, over a restart and into the next run, until there can be one.
func TestIdleFileThatCannotBeBegun(t *testing.T) {
	for _, tt := range []struct {
		name string
		then func(d *desk) *desk
		runs int
	}{
		{"until it can", func(d *desk) *desk {
			time.Sleep(6 * time.Minute)
			synctest.Wait()
			if f, idle := d.store.Current(); !idle {
				d.t.Errorf("six minutes later it is still %s", f.Path())
			}
			return d
		}, 1},
		{"over a restart", func(d *desk) *desk {
			d.close()
			again := openDesk(d.t, d.dir, runfile.Options{}, nil)
			again.sent, again.asked = d.sent, d.asked
			return again
		}, 1},
		{"into the next run", func(d *desk) *desk {
			d.must(d.act(pipeline.DoRunStart))
			d.feed(2 * time.Second)
			d.must(d.act(pipeline.DoRunEnd))
			return d
		}, 2},
		{"over a restart within the next run", func(d *desk) *desk {
			d.must(d.act(pipeline.DoRunStart))
			d.close()
			again := openDesk(d.t, d.dir, runfile.Options{}, nil)
			again.sent, again.asked = d.sent, d.asked
			again.feed(2 * time.Second)
			again.must(again.act(pipeline.DoRunEnd))
			return again
		}, 2},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			dir := memory(t)
			synctest.Test(t, func(t *testing.T) {
				var commits atomic.Int64 // until one fails; 0 = none will
				opt := runfile.Options{BeforeCommit: func(context.Context) error {
					if commits.Load() > 0 && commits.Add(-1) == 0 {
						return runfile.ErrFull
					}
					return nil
				}}
				d := openDesk(t, dir, opt, nil)
				d.feed(2 * time.Second)
				d.must(d.act(pipeline.DoRunStart))
				d.feed(2 * time.Second)
				time.Sleep(90 * time.Millisecond) // nothing waits to be stored
				synctest.Wait()
				commits.Store(2) // that of the end, and that of the new idle file
				d.must(d.act(pipeline.DoRunEnd))
				d.feed(time.Second)
				if f, idle := d.store.Current(); idle || commits.Load() != 0 {
					t.Fatalf("%s could be begun", f.Path())
				}
				d = tt.then(d)
				d.feed(time.Second)
				sent := d.sent
				d.close()
				s := readAll(t, dir)
				if len(s.runs) != tt.runs || s.messages != int(sent) || len(s.gaps) > 0 || s.records[0].Seq != 1 {
					t.Errorf("%d files of runs, %d are due; %d of %d messages from record %d on, gaps %q", len(s.runs), tt.runs, s.messages, sent, s.records[0].Seq, s.gaps)
				}
				for _, h := range s.runs {
					if h.State != runfile.StateEnded || h.Ended-h.Started > int64(3*time.Second) {
						t.Errorf("run %+v", h)
					}
				}
			})
		})
	}
}

// image copies a data folder as a crash would leave it at this moment. Nobody may
// be writing to its files.
func image(t *testing.T, dir string) string {
	t.Helper()
	to := memory(t)
	if err := os.CopyFS(to, os.DirFS(dir)); err != nil {
		t.Fatal(err)
	}
	return to
}

// The daemon dies while the file of a run is being made: in the middle of its copy,
// when it has its name, when the writing moves to it, and when the idle file should
// have gone. The run goes on each time.
func TestRestartWhileARunFileIsMade(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	bundle := smallBundle(t)
	ctx := t.Context()
	var inCommit func() // called before a commit that a test waits for
	opt := runfile.Options{BeforeCommit: func(context.Context) error {
		if fn := inCommit; fn != nil {
			fn()
		}
		return nil
	}}
	store, core := openCore(t, dir, opt)
	feed := watch.NewFeed(core, store)
	host := testBegin
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 1}, bundle, host))
	host = feedSmall(t, feed, host, 40)
	commit := func() {
		t.Helper()
		b, err := core.Cut()
		must(t, err)
		must(t, store.Write(ctx, b))
	}
	commit()
	images := map[string]string{}
	during := make(chan struct{})
	goOn := make(chan struct{})
	inCommit = func() { // of the record that begins the run: the next commit is that of the copy
		inCommit = func() {
			inCommit = nil
			close(during)
			<-goOn
		}
	}
	core.Take(watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_start","by":"T. Ester","request_id":"1"}`)}, host)
	run := core.State.Run.ID
	commit()
	<-during
	images["in the middle of its copy"] = image(t, dir)
	close(goOn)
	store.WaitMade()
	images["when it has its name"] = image(t, dir)
	core.Take(watch.Input{Kind: ingest.KindTick}, host+1)
	inCommit = func() { inCommit = nil; images["when the writing moves"] = image(t, dir) }
	commit()
	both := image(t, dir)
	idles, err := filepath.Glob(filepath.Join(images["when the writing moves"], "idle-*"))
	must(t, err)
	for _, path := range idles {
		b, err := os.ReadFile(path)
		must(t, err)
		must(t, os.WriteFile(filepath.Join(both, filepath.Base(path)), b, 0o600))
	}
	images["when the idle file should have gone"] = both
	if f, idle := store.Current(); idle || len(images) != 4 {
		t.Fatalf("%d images, and %s is written to", len(images), f.Path())
	}
	must(t, store.Close(ctx))

	for name, dir := range images {
		t.Run(name, func(t *testing.T) {
			store, core := openCore(t, dir, runfile.Options{})
			if !core.State.RunActive || core.State.Run.ID != run {
				t.Fatalf("run %+v, %s was on", core.State.Run, run)
			}
			feed := watch.NewFeed(core, store)
			must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 2}, bundle, host+1e9))
			end := feedSmall(t, feed, host+1e9, 40)
			must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_end","by":"T. Ester","request_id":"2"}`)}, end))
			must(t, feed.End(ctx))
			must(t, store.Close(ctx))
			s := readAll(t, dir)
			if len(s.runs) != 1 || s.runs[0].State != runfile.StateEnded || s.runs[0].ID != run || s.idles != 1 || s.messages != 240 || s.records[0].Seq != 1 {
				t.Errorf("runs %+v, %d idle files, %d messages from record %d on", s.runs, s.idles, s.messages, s.records[0].Seq)
			}
		})
	}
}

// The header of a run counts the alarms that were raised while its file was being
// made, and those that a restart in the middle of it found.
func TestAlarmsWhileARunFileIsMade(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	ctx := t.Context()
	during, goOn := make(chan struct{}), make(chan struct{})
	var inCommit func()
	opt := runfile.Options{BeforeCommit: func(context.Context) error {
		if fn := inCommit; fn != nil {
			fn()
		}
		return nil
	}}
	store, core := openCore(t, dir, opt)
	feed := watch.NewFeed(core, store)
	host := testBegin
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 1}, smallBundle(t), host))
	deaf := func(deaf bool) { // raises the warning on the input path, or lets it return
		core.Take(watch.Input{Kind: ingest.KindHealth, Payload: fmt.Appendf(nil, `{"part":"input_path","ok":%t}`, !deaf)}, host)
		for range 20 {
			host += 1e8
			core.Take(watch.Input{Kind: ingest.KindTick}, host)
		}
	}
	commit := func() {
		t.Helper()
		b, err := core.Cut()
		must(t, err)
		must(t, store.Write(ctx, b))
	}
	host = feedSmall(t, feed, host, 40)
	deaf(true) // before the run: not one of its alarms
	deaf(false)
	commit()
	inCommit = func() { // of the record that begins the run: the next commit is that of the copy
		inCommit = func() {
			inCommit = nil
			close(during)
			<-goOn
		}
	}
	core.Take(watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_start","by":"T. Ester","request_id":"1"}`)}, host)
	id := core.State.Run.ID
	commit()
	<-during
	deaf(true)
	deaf(false)
	commit()
	crashed := image(t, dir)
	close(goOn)
	store.WaitMade()
	raised := func(dir string, want int) {
		t.Helper()
		run, err := runfile.ReadRun(ctx, filepath.Join(dir, "runs", id+".db"))
		must(t, err)
		if run.Alarms != want {
			t.Errorf("the header counts %d alarms, %d were raised", run.Alarms, want)
		}
	}
	core.Take(watch.Input{Kind: ingest.KindTick}, host)
	commit()
	if _, idle := store.Current(); idle {
		t.Fatal("the run is not written to its file")
	}
	raised(dir, 2) // the input path, and the probe that nothing comes from
	deaf(true)
	commit()
	raised(dir, 3)
	must(t, store.Close(ctx))

	again, core := openCore(t, crashed, runfile.Options{})
	if core.State.Run.Alarms != 2 {
		t.Errorf("after a restart the run has %d alarms", core.State.Run.Alarms)
	}
	must(t, again.Close(ctx))
	raised(crashed, 2)
}

func must(t *testing.T, err error) {
	t.Helper()
	if err != nil {
		t.Fatal(err)
	}
}

func smallBundle(t *testing.T) []byte {
	t.Helper()
	b, _, faults := config.Load(smallRig)
	must(t, watch.Faults(faults))
	return b.Marshal()
}

func openCore(t *testing.T, dir string, opt runfile.Options) (*watch.Store, *watch.Core) {
	t.Helper()
	store, err := watch.OpenStore(t.Context(), dir, opt, slog.New(slog.DiscardHandler))
	must(t, err)
	core, err := store.Restore(t.Context(), pipeline.NewMachine(watch.Parse), "test", "test")
	must(t, err)
	return store, core
}

// feedSmall feeds readings of the small rig, 20 times a second of host time, and
// gives the host time after them.
func feedSmall(t *testing.T, feed *watch.Feed, host int64, instants int) int64 {
	t.Helper()
	for range instants {
		host += 5e7
		for _, r := range []string{"PT-101", "TT-102", "PT-001"} {
			value := map[string]string{"PT-101": `1.5,"u":"bar"`, "TT-102": `600,"u":"degC"`, "PT-001": `1000,"u":"mbar"`}[r]
			must(t, feed.Take(t.Context(), watch.Input{
				Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: "plant/north/bench/" + r,
				Payload: fmt.Appendf(nil, `{"t":%d.%09d,"v":%s}`, host/1e9, host%1e9, value),
			}, host))
		}
	}
	return host
}

// The idle file loses what is old. From its new beginning a replay comes to the
// very state of the watch, also over a restart.
func TestIdleFileIsPruned(t *testing.T) {
	t.Parallel()
	ctx, dir := t.Context(), memory(t)
	bundle := smallBundle(t)
	store, core := openCore(t, dir, runfile.Options{})
	feed := watch.NewFeed(core, store)
	host := testBegin
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 1}, bundle, host))
	for range 36 {
		host = feedSmall(t, feed, host, 10) + int64(15*time.Minute)
	}
	must(t, feed.End(ctx))
	want := encoded(t, core.State)
	must(t, store.Close(ctx)) // and with it the pruning
	store, core = openCore(t, dir, runfile.Options{})
	f, _ := store.Current()
	var first ingest.Record
	enough := errors.New("enough")
	if err := f.Records(ctx, 0, 0, func(r *ingest.Record) error { first = *r; return enough }); !errors.Is(err, enough) {
		t.Fatal(err)
	}
	if age := time.Duration(core.State.Host - first.Host); first.Seq < 500 || age < 3*time.Hour || age > 4*time.Hour {
		t.Errorf("the idle file begins with record %d, %v old: a little over 3 h is due", first.Seq, age)
	}
	p, err := pipeline.OpenReplay(ctx, f, pipeline.NewMachine(watch.Parse), 0)
	must(t, err)
	must(t, p.Run(ctx, 0, func(*ingest.Record, []pipeline.Outcome) error { return nil }))
	if !bytes.Equal(encoded(t, p.State), want) {
		t.Error("a replay of what is left comes to another state")
	}
	if !bytes.Equal(encoded(t, core.State), want) {
		t.Error("a restart comes to another state")
	}
	must(t, store.Close(ctx))
}

func encoded(t *testing.T, s *pipeline.State) []byte {
	t.Helper()
	b, err := s.Encode(true)
	must(t, err)
	return b
}

// What is wrong with a data folder is said in one line, with what to do; what can
// be left alone is left alone.
func TestDataFolderFaults(t *testing.T) {
	t.Parallel()
	full := runfile.Options{BeforeCommit: func(context.Context) error { return runfile.ErrFull }}
	for _, tt := range []struct {
		name string
		make func(t *testing.T, dir string)
		opt  runfile.Options
		is   error  // nil: any
		want string // in the error; "" = it opens
	}{
		{"a file in its place", func(t *testing.T, dir string) {
			t.Helper()
			must(t, os.RemoveAll(dir))
			must(t, os.WriteFile(dir, nil, 0o600))
		}, runfile.Options{}, nil, "data folder: mkdir"},
		{"a file in the place of the runs", func(t *testing.T, dir string) {
			t.Helper()
			must(t, os.WriteFile(filepath.Join(dir, "runs"), nil, 0o600))
		}, runfile.Options{}, nil, "data folder: mkdir"},
		{"no catalogue can be made", func(t *testing.T, dir string) {
			t.Helper()
			must(t, os.MkdirAll(filepath.Join(dir, "catalog.db"), 0o750))
		}, runfile.Options{}, nil, "catalog.db"},
		{"full behind a run", func(t *testing.T, dir string) {
			t.Helper()
			endedRun(t, dir)
			removeIdle(t, dir)
		}, full, runfile.ErrFull, "disk full: free space or move the data folder"},
		{"a run file that is none", func(t *testing.T, dir string) {
			t.Helper()
			must(t, os.MkdirAll(filepath.Join(dir, "runs"), 0o750))
			must(t, os.WriteFile(filepath.Join(dir, "runs", "notes.db"), []byte("not a database"), 0o600))
		}, runfile.Options{}, nil, ""},
		{"without its idle file", func(t *testing.T, dir string) {
			t.Helper()
			endedRun(t, dir)
			removeIdle(t, dir)
		}, runfile.Options{}, nil, ""},
	} {
		t.Run(tt.name, func(t *testing.T) {
			dir := memory(t)
			tt.make(t, dir)
			store, err := watch.OpenStore(t.Context(), dir, tt.opt, slog.New(slog.DiscardHandler))
			if tt.want == "" {
				must(t, err)
				_, err := store.Restore(t.Context(), pipeline.NewMachine(watch.Parse), "test", "test")
				must(t, errors.Join(err, store.Close(t.Context())))
				return
			}
			if err == nil || !strings.Contains(err.Error(), tt.want) || strings.Contains(err.Error(), "\n") || tt.is != nil && !errors.Is(err, tt.is) {
				t.Errorf("%v, want %q", err, tt.want)
			}
		})
	}
	t.Run("two at once", func(t *testing.T) {
		dir := filepath.Join(memory(t), "new")
		unlock, err := watch.Lock(dir)
		must(t, err)
		if _, err := watch.Lock(dir); !errors.Is(err, watch.ErrLocked) || !strings.Contains(err.Error(), "--data") {
			t.Errorf("a second lock gives: %v", err)
		}
		unlock()
		unlock, err = watch.Lock(dir)
		must(t, err)
		unlock()
	})
}

// A damaged file does not keep the watch from its work: it is put aside whole, and
// the run goes on from what can be read, or begins anew.
func TestDamagedFileIsPutAside(t *testing.T) {
	t.Parallel()
	ctx := t.Context()
	bundle := smallBundle(t)
	for _, tt := range []struct {
		name   string
		run    bool // a run is on
		chunk  int64
		damage func(b []byte) []byte
		goesOn bool // from a checkpoint
	}{
		{"cut in a run", true, 5e9, func(b []byte) []byte { return b[:len(b)*3/4] }, true},
		{"cut to its first page", true, 20e9, func(b []byte) []byte { return b[:20_000] }, false},
		{"a record in a run", true, 20e9, func(b []byte) []byte {
			i := bytes.LastIndex(b, []byte("plant/north/bench/")) // not packed: after the last checkpoint
			b[i] ^= 1
			return b
		}, true},
		{"a record between runs", false, 20e9, func(b []byte) []byte {
			i := bytes.LastIndex(b, []byte("plant/north/bench/"))
			b[i] ^= 1
			return b
		}, true},
	} {
		t.Run(tt.name, func(t *testing.T) {
			dir := memory(t)
			store, core := openCore(t, dir, runfile.Options{})
			feed := watch.NewFeed(core, store)
			must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 1}, bundle, testBegin))
			host := feedSmall(t, feed, testBegin, 40)
			if tt.run {
				must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_start","by":"T. Ester","request_id":"1"}`)}, host))
			}
			core.ChunkFor = tt.chunk
			host = feedSmall(t, feed, host, 1000)
			must(t, feed.End(ctx))
			run, last := core.State.Run.ID, core.State.Seq
			f, _ := store.Current()
			path := f.Path()
			must(t, store.Close(ctx))
			b, err := os.ReadFile(path)
			must(t, err)
			b = tt.damage(b)
			must(t, os.WriteFile(path, b, 0o600))

			store, core = openCore(t, dir, runfile.Options{})
			f, err = runfile.Open(ctx, path+".damaged", runfile.ReadOnly, runfile.Options{})
			must(t, err)
			if err := f.Verify(ctx); !errors.Is(err, runfile.ErrCorrupt) {
				t.Errorf("what was put aside is not the damaged file: %v", err)
			}
			must(t, f.Close())
			if seq := core.State.Seq; tt.goesOn != (seq > 1000) || seq > last {
				t.Errorf("it goes on from record %d of %d", seq, last)
			}
			if on := core.State.RunActive; on != (tt.run && tt.goesOn) || on && core.State.Run.ID != run {
				t.Errorf("run %+v is on: %v", core.State.Run, on)
			}
			feed = watch.NewFeed(core, store)
			must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 2}, bundle, host+1e9))
			host = feedSmall(t, feed, host+1e9, 40)
			if core.State.RunActive {
				must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_end","by":"T. Ester","request_id":"2"}`)}, host))
			}
			must(t, feed.End(ctx))
			must(t, store.Close(ctx))
			must(t, os.Remove(path+".damaged"))
			if s := readAll(t, dir); s.idles != 1 || len(s.runs) > 1 || s.messages < 120 {
				t.Errorf("then there are %d messages in %d runs and %d idle files", s.messages, len(s.runs), s.idles)
			}
		})
	}
}

// endedRun leaves a data folder with one run in it.
func endedRun(t *testing.T, dir string) {
	t.Helper()
	ctx := t.Context()
	store, core := openCore(t, dir, runfile.Options{})
	feed := watch.NewFeed(core, store)
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 1}, smallBundle(t), testBegin))
	host := feedSmall(t, feed, testBegin, 40)
	for _, do := range []string{pipeline.DoRunStart, pipeline.DoRunEnd} {
		must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: fmt.Appendf(nil, `{"do":%q,"by":"T. Ester","request_id":%q}`, do, do)}, host))
		host = feedSmall(t, feed, host, 40)
	}
	must(t, feed.End(ctx))
	must(t, store.Close(ctx))
}

func removeIdle(t *testing.T, dir string) {
	t.Helper()
	paths, err := filepath.Glob(filepath.Join(dir, "idle-*"))
	must(t, err)
	for _, path := range paths {
		must(t, os.Remove(path))
	}
}

// The list of runs is right while a run is on, and tells of a run that is gone.
func TestStoredRuns(t *testing.T) {
	t.Parallel()
	ctx, dir := t.Context(), memory(t)
	endedRun(t, dir)
	store, core := openCore(t, dir, runfile.Options{})
	feed := watch.NewFeed(core, store)
	host := core.State.Host
	must(t, feed.Begin(ctx, pipeline.Boot{Epoch: 2}, smallBundle(t), host))
	host = feedSmall(t, feed, host, 40)
	must(t, feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_start","by":"T. Ester","request_id":"3"}`)}, host))
	feedSmall(t, feed, host, 200)
	runs := watch.StoredRuns{Catalog: store.Catalog()}
	list, err := runs.List(ctx, runfile.Filter{})
	must(t, err)
	states := map[string]string{}
	for _, r := range list {
		states[r.ID] = r.State
		f, err := runs.Open(ctx, r.ID)
		must(t, err)
		if h, err := f.Header(ctx); err != nil || h.ID != r.ID || r.Size == 0 {
			t.Errorf("run %s: %+v, %v", r.ID, h, err)
		}
		if _, err := f.LastCheckpoint(ctx, math.MaxInt64); err != nil {
			t.Error(err)
		}
		must(t, f.Close())
	}
	if len(list) != 2 || states[core.State.Run.ID] != runfile.StateRunning {
		t.Errorf("runs %v, %s is on", states, core.State.Run.ID)
	}
	for _, r := range list {
		if r.State == runfile.StateEnded {
			must(t, os.Remove(filepath.Join(dir, "runs", r.ID+".db")))
			if _, err := runs.Open(ctx, r.ID); !errors.Is(err, fs.ErrNotExist) {
				t.Errorf("a run that is gone: %v", err)
			}
		}
	}
	if _, err := runs.Open(ctx, "../catalog"); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("a path in the place of a run: %v", err)
	}
	must(t, store.Close(ctx))
	if !slices.ContainsFunc(list, func(r runfile.Run) bool { return r.Operator == "T. Ester" }) {
		t.Error("nobody has started a run")
	}
}
