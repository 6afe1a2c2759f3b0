package watch_test

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"testing/synctest"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// smallRig has three channels and no engine, so that runs begin and end by hand.
const smallRig = "../../../testdata/rigs/minimal.yaml"

// memory gives a folder in memory where there is such a place: with the time of a
// bubble standing still, only a test says how long a commit takes.
func memory(t *testing.T) string {
	t.Helper()
	dir, err := os.MkdirTemp("/dev/shm", "throatwatch-test-") //nolint:usetesting // that is on a disk
	if err != nil {
		return t.TempDir()
	}
	t.Cleanup(func() {
		if err := os.RemoveAll(dir); err != nil {
			t.Error(err)
		}
	})
	return dir
}

// desk is a live watch of the small rig with what it has shown and acknowledged.
type desk struct {
	t     *testing.T
	dir   string
	store *watch.Store
	core  *watch.Core
	loop  *watch.Loop
	halt  context.CancelFunc
	ended chan error
	began int64 // host time of the last record before it
	sent  uint64
	asked int

	mu     sync.Mutex // protects what the loop's goroutines fill in
	acked  []uint64
	points int
	alarms []string // "rule state", as they changed
	status pipeline.Status
}

// Ack takes an acknowledgement; the generation numbers the messages of a test.
func (d *desk) Ack(m mqtt.Message) bool {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.acked = append(d.acked, m.Generation)
	return true
}

func (d *desk) show(outs []pipeline.Outcome, _ *pipeline.Machine, _ *pipeline.State) {
	d.mu.Lock()
	defer d.mu.Unlock()
	for i := range outs {
		o := &outs[i]
		if o.Kind == pipeline.OutcomePoint {
			d.points++
		}
		if o.Kind == pipeline.OutcomeAlarm {
			d.alarms = append(d.alarms, o.Alarm.Rule+" "+alarm.State(o.Alarm.State).String())
		}
		if o.Kind == pipeline.OutcomeStatus {
			d.status = *o.Status
			d.status.Sources, d.status.Sessions = nil, nil
		}
	}
}

// looked is what a viewer has seen.
type looked struct {
	acked  []uint64
	points int
	alarms []string
	status pipeline.Status
}

func (d *desk) look() looked {
	d.mu.Lock()
	defer d.mu.Unlock()
	return looked{slices.Clone(d.acked), d.points, slices.Clone(d.alarms), d.status}
}

// openDesk starts a watch on a data folder; edit may change the loop's configuration.
func openDesk(t *testing.T, dir string, opt runfile.Options, edit func(*watch.Config)) *desk {
	t.Helper()
	return openDeskBy(t, dir, opt, edit, nil)
}

// openDeskBy is openDesk with a wall clock of the test's.
func openDeskBy(t *testing.T, dir string, opt runfile.Options, edit func(*watch.Config), wall func() time.Time) *desk {
	t.Helper()
	b, _, faults := config.Load(smallRig)
	if err := watch.Faults(faults); err != nil {
		t.Fatal(err)
	}
	d := &desk{t: t, dir: dir, ended: make(chan error, 1)}
	var err error
	if d.store, err = watch.OpenStore(t.Context(), dir, opt, slog.New(slog.DiscardHandler)); err != nil {
		t.Fatal(err)
	}
	if d.core, err = d.store.Restore(t.Context(), pipeline.NewMachine(watch.Parse), "test", "test"); err != nil {
		t.Fatal(err)
	}
	d.began = d.core.State.Host
	cfg := watch.Config{Core: d.core, Store: d.store, Ack: d, Shown: d.show, Log: slog.New(slog.DiscardHandler)}
	if edit != nil {
		edit(&cfg)
	}
	d.loop = watch.NewLoop(cfg)
	if wall != nil {
		d.loop.SetWall(wall)
	}
	ctx, halt := context.WithCancel(t.Context())
	d.halt = halt
	boot := pipeline.Boot{Epoch: d.core.State.Epoch + 1, Build: "test", GOARCH: "test"}
	go func() { d.ended <- d.loop.Run(ctx, boot, b.Marshal()) }()
	return d
}

// close ends the watch in an orderly way.
func (d *desk) close() {
	d.t.Helper()
	d.halt()
	if err := <-d.ended; err != nil {
		d.t.Errorf("the loop ended with: %v", err)
	}
	d.shut()
}

func (d *desk) shut() {
	d.t.Helper()
	if err := d.store.Close(context.WithoutCancel(d.t.Context())); err != nil {
		d.t.Error(err)
	}
}

// feed sends readings for a time: 20 times a second, three messages each.
func (d *desk) feed(length time.Duration) {
	d.t.Helper()
	for end := time.Now().Add(length); time.Now().Before(end); time.Sleep(50 * time.Millisecond) {
		d.send(time.Now())
	}
	synctest.Wait()
}

// send sends the readings of one instant.
func (d *desk) send(now time.Time) {
	d.t.Helper()
	for _, r := range []struct {
		topic, unit string
		value       float64
	}{{"PT-101", "bar", 1.5}, {"TT-102", "degC", 600}, {"PT-001", "mbar", 1000}} {
		d.sent++
		text := fmt.Appendf(nil, `{"t":%d.%06d,"v":%g,"u":%q}`, now.Unix(), now.Nanosecond()/1000, r.value+float64(d.sent%7)/100, r.unit)
		m := mqtt.Message{Topic: "plant/north/bench/" + r.topic, Payload: text, Flags: ingest.FlagQoS1, Generation: d.sent}
		if err := d.loop.PutMessage(d.t.Context(), m); err != nil {
			d.t.Fatal(err)
		}
	}
}

// act does what an operator asks for.
func (d *desk) act(do string) error {
	d.t.Helper()
	d.asked++
	r, err := d.loop.Act(d.t.Context(), pipeline.Action{Do: do, By: "T. Ester", Role: "operator", Text: "note", RequestID: fmt.Sprint(d.asked)})
	return errors.Join(err, r.Err)
}

func (d *desk) must(err error) {
	d.t.Helper()
	if err != nil {
		d.t.Fatal(err)
	}
}

// stored is what a data folder holds, of all its files.
type stored struct {
	records  []ingest.Record // in order, each once
	messages int
	kinds    map[ingest.Kind]int
	gaps     []string // payloads
	runs     []runfile.Header
	idles    int
}

// readAll reads a data folder after the watch has closed it. Every file is whole,
// and a replay of each run gives the digest that was recorded live.
func readAll(t *testing.T, dir string) *stored {
	t.Helper()
	ctx := t.Context()
	runs, errA := filepath.Glob(filepath.Join(dir, "runs", "*"))
	idles, errB := filepath.Glob(filepath.Join(dir, "idle-*"))
	if err := errors.Join(errA, errB); err != nil {
		t.Fatal(err)
	}
	s := &stored{kinds: map[ingest.Kind]int{}, idles: len(idles)}
	bySeq := map[uint64]ingest.Record{}
	for _, path := range slices.Concat(runs, idles) {
		f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
		if err != nil {
			t.Errorf("%s: %v", path, err)
			continue
		}
		h, err := f.Header(ctx)
		if err := errors.Join(err, f.Verify(ctx)); err != nil {
			t.Errorf("%s: %v", path, err)
		}
		p, err := pipeline.OpenReplay(ctx, f, pipeline.NewMachine(watch.Parse), 0)
		digest := ""
		if err == nil {
			err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
				for i := range outs {
					if o := &outs[i]; o.Kind == pipeline.OutcomeRun && o.Event == "ended" && o.Run.ID == h.ID {
						digest = p.Digest.String()
					}
				}
				bySeq[r.Seq] = ingest.Record{Seq: r.Seq, Host: r.Host, Kind: r.Kind, Topic: r.Topic, Payload: slices.Clone(r.Payload)}
				return nil
			})
		}
		if err != nil {
			t.Errorf("%s: replay: %v", path, err)
		}
		if digest == "" { // its end was not stored
			digest = p.Digest.String()
		}
		if h.State == runfile.StateEnded && h.Digest != digest {
			t.Errorf("%s: digest %s was recorded, the replay gives %s", path, h.Digest, digest)
		}
		if h.State != runfile.StateIdle {
			s.runs = append(s.runs, h)
		}
		if err := f.Close(); err != nil {
			t.Error(err)
		}
	}
	for _, r := range bySeq {
		s.records = append(s.records, r)
	}
	slices.SortFunc(s.records, func(a, b ingest.Record) int { return int(a.Seq) - int(b.Seq) })
	seen := map[string]uint64{}
	for i, r := range s.records {
		s.kinds[r.Kind]++
		switch {
		case r.Kind == ingest.KindGap:
			s.gaps = append(s.gaps, string(r.Payload))
		case r.Seq != uint64(i+1) && i > 0 && s.records[i-1].Seq+1 != r.Seq:
			t.Errorf("record %d follows record %d without a gap record", r.Seq, s.records[i-1].Seq)
		}
		if r.Kind == ingest.KindMessage {
			s.messages++
			if before, ok := seen[string(r.Payload)+r.Topic]; ok {
				t.Errorf("record %d is record %d again", r.Seq, before)
			}
			seen[string(r.Payload)+r.Topic] = r.Seq
		}
	}
	return s
}

// inOrder checks that messages 1 to n were acknowledged once each and in order.
func inOrder(t *testing.T, acked []uint64, n uint64) {
	t.Helper()
	if uint64(len(acked)) != n {
		t.Errorf("%d messages were acknowledged, %d were sent", len(acked), n)
	}
	for i, g := range acked {
		if g != uint64(i+1) {
			t.Fatalf("acknowledgement %d is that of message %d", i+1, g)
		}
	}
}

// A run begins and ends by hand: the records go to the idle file, to the file of
// the run, and to a new idle file, without a hole.
func TestRunSwitchesFiles(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		d := openDesk(t, dir, runfile.Options{}, nil)
		if err := d.act(pipeline.DoRunStart); !errors.Is(err, pipeline.ErrNoData) {
			t.Errorf("a run before the first scan: %v", err)
		}
		for range 2 {
			d.feed(2 * time.Second)
			if _, idle := d.store.Current(); !idle {
				t.Error("no run is on, and the idle file is not written to")
			}
			d.must(d.act(pipeline.DoRunStart))
			if err := d.act(pipeline.DoRunStart); !errors.Is(err, pipeline.ErrRunActive) {
				t.Errorf("a second run at once: %v", err)
			}
			d.feed(3 * time.Second)
			if f, idle := d.store.Current(); idle {
				t.Errorf("a run is on, and %s is written to", f.Path())
			}
			d.must(d.act(pipeline.DoMark))
			d.must(d.act(pipeline.DoRunEnd))
			if err := d.act(pipeline.DoRunEnd); !errors.Is(err, pipeline.ErrNoRun) {
				t.Errorf("the end of a run that has ended: %v", err)
			}
		}
		d.feed(time.Second)
		d.close()
		seen := d.look()
		inOrder(t, seen.acked, d.sent)
		s := readAll(t, dir)
		if len(s.runs) != 2 || s.idles != 1 || s.messages != int(d.sent) || len(s.gaps) != 0 {
			t.Errorf("%d runs, %d idle files, %d of %d messages, gaps %q", len(s.runs), s.idles, s.messages, d.sent, s.gaps)
		}
		for _, h := range s.runs {
			if h.State != runfile.StateEnded || h.Ended-h.Started < int64(2*time.Second) || !strings.HasPrefix(h.ID, "bench_1-2000") {
				t.Errorf("run %+v", h)
			}
		}
	})
}

// TestDisk stalls and fails commits while a run is on, begins or ends. The watch
// goes on: points, status and the alarm are shown, and messages are acknowledged.
// Then there is a gap record, and what follows is recorded again.
func TestDisk(t *testing.T) {
	stall := func(ctx context.Context, left time.Duration) error { // a disk that hangs
		select {
		case <-time.After(left):
			return nil
		case <-ctx.Done():
			return ctx.Err()
		}
	}
	fail := func(context.Context, time.Duration) error { return runfile.ErrFull }
	readOnly := func(context.Context, time.Duration) error { return fmt.Errorf("commit: %w", syscall.EROFS) } // a disk that the system has had doubts about
	for _, tt := range []struct {
		name   string
		with   func(context.Context, time.Duration) error // while there is trouble, for so long yet
		before string                                     // what an operator does just before the trouble
		during []string                                   // what an operator does meanwhile
		runs   int                                        // files of runs, in the end
	}{
		{"stalled", stall, pipeline.DoRunStart, nil, 1},
		{"failing", fail, pipeline.DoRunStart, nil, 1},
		{"read only", readOnly, pipeline.DoRunStart, nil, 1},
		{"stalled, a run begins", stall, "", []string{pipeline.DoRunStart}, 1},
		{"failing, a run begins", fail, "", []string{pipeline.DoRunStart}, 1},
		{"stalled, the run ends", stall, pipeline.DoRunStart, []string{pipeline.DoRunEnd}, 1},
		{"failing, the run ends", fail, pipeline.DoRunStart, []string{pipeline.DoRunEnd}, 1},
		{"failing, a run begins and ends", fail, "", []string{pipeline.DoRunStart, pipeline.DoRunEnd}, 0},
		{"failing, one run ends and another begins", fail, pipeline.DoRunStart, []string{pipeline.DoRunEnd, pipeline.DoRunStart}, 2},
		{"stalled, one run ends and another begins and ends", stall, pipeline.DoRunStart, []string{pipeline.DoRunEnd, pipeline.DoRunStart, pipeline.DoRunEnd}, 1},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			dir := memory(t)
			synctest.Test(t, func(t *testing.T) {
				const trouble = 3 * time.Second
				var until atomic.Int64 // ns; trouble till then
				opt := runfile.Options{BeforeCommit: func(ctx context.Context) error {
					if left := time.Duration(until.Load() - time.Now().UnixNano()); left > 0 {
						return tt.with(ctx, left)
					}
					return nil
				}}
				d := openDesk(t, dir, opt, nil)
				d.feed(2 * time.Second)
				if tt.before != "" {
					d.must(d.act(tt.before))
					d.feed(2 * time.Second)
				}
				before := d.look()
				until.Store(time.Now().Add(trouble).UnixNano())
				d.feed(2200 * time.Millisecond)
				for _, do := range tt.during {
					d.must(d.act(do))
					d.feed(200 * time.Millisecond)
				}
				amid := d.look()
				if n := amid.points - before.points; n < 40 {
					t.Errorf("%d points were shown in 2 s without a disk, 20 per second are due", n)
				}
				if amid.status.Health.NotRecordingSince == 0 {
					t.Error("the status does not say that nothing is recorded")
				}
				if !slices.Contains(amid.alarms, "not_recording unacknowledged") {
					t.Errorf("alarms: %q: not_recording is missing", amid.alarms)
				}
				if n := len(amid.acked) - len(before.acked); n < 50 {
					t.Errorf("%d messages were acknowledged in 2 s without a disk: the broker would fill up", n)
				}
				d.feed(4 * time.Second)
				d.must(d.act(pipeline.DoMark))
				after := d.look()
				if after.status.Health.NotRecordingSince != 0 || !slices.Contains(after.alarms, "not_recording returned_unacknowledged") {
					t.Errorf("after the trouble: %+v, alarms %q", after.status.Health, after.alarms)
				}
				d.close()
				d.checkGap(tt.runs)
			})
		})
	}
}

// checkGap reads the data folder of a watch that could not record for a while.
func (d *desk) checkGap(runs int) { d.t.Helper(); d.checkHole(runs, 60) }

// checkHole is checkGap for a hole of at least so many records.
func (d *desk) checkHole(runs int, least uint64) {
	d.t.Helper()
	s := readAll(d.t, d.dir)
	inOrder(d.t, d.look().acked, d.sent)
	if len(s.gaps) != 1 || len(s.runs) != runs || s.kinds[ingest.KindHealth] == 0 {
		d.t.Fatalf("gaps %q, %d runs (%d are due), records by kind %v", s.gaps, len(s.runs), runs, s.kinds)
	}
	var gap struct{ Missing uint64 }
	d.must(json.Unmarshal([]byte(s.gaps[0]), &gap))
	first, last := s.records[0].Seq, s.records[len(s.records)-1].Seq
	if hole := last - first + 1 - uint64(len(s.records)); hole != gap.Missing || hole < least || first != 1 {
		d.t.Errorf("records %d to %d: %d are missing, the gap record says %d", first, last, hole, gap.Missing)
	}
	for _, h := range s.runs {
		if on := d.core.State.RunActive && h.ID == d.core.State.Run.ID; (h.State == runfile.StateRunning) != on {
			d.t.Errorf("run %s is %s", h.ID, h.State)
		}
	}
}

// With half of the broker's window unacknowledged the watch does not wait for a slow
// disk any longer.
func TestWindowBeforeDisk(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		var slow atomic.Bool
		opt := runfile.Options{BeforeCommit: func(context.Context) error {
			if slow.Load() {
				time.Sleep(700 * time.Millisecond)
			}
			return nil
		}}
		d := openDesk(t, dir, opt, func(c *watch.Config) { c.Window = 60 })
		d.feed(time.Second)
		slow.Store(true)
		d.feed(600 * time.Millisecond) // 36 messages: the commit is not old yet
		if got := d.look(); !slices.Contains(got.alarms, "not_recording unacknowledged") || uint64(len(got.acked)) != d.sent {
			t.Errorf("%d of %d messages are acknowledged, alarms %q", len(got.acked), d.sent, got.alarms)
		}
		slow.Store(false)
		d.feed(2 * time.Second)
		d.close()
		d.checkHole(0, 6)
	})
}

// What the loop took before its end is stored and acknowledged, and nothing else
// is; the rest stays with the broker.
func TestShutdownStoresWhatWasTaken(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		for life := range 5 {
			d := openDesk(t, dir, runfile.Options{}, nil)
			for range 100 + 50*life {
				d.send(time.Now()) // no time passes: it cannot have stored them yet
				time.Sleep(time.Microsecond)
			}
			d.close()
			acked := d.look().acked
			inOrder(t, acked, uint64(len(acked)))
			var got []ingest.Record
			for _, r := range readAll(t, dir).records {
				if r.Kind == ingest.KindBoot {
					got = nil // of this life only
				}
				if r.Kind == ingest.KindMessage {
					got = append(got, r)
				}
			}
			if len(got) != len(acked) || len(acked) == 0 {
				t.Errorf("life %d: %d messages are acknowledged, %d are stored", life, len(acked), len(got))
			}
		}
	})
}

// The end does not wait for a disk for ever, and nothing that is not stored is
// acknowledged in its name.
func TestShutdownWithoutDisk(t *testing.T) {
	for _, tt := range []struct {
		name  string
		hangs bool
	}{{"failing", false}, {"hanging", true}} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			dir := memory(t)
			synctest.Test(t, func(t *testing.T) {
				var bad atomic.Bool
				release := make(chan struct{})
				opt := runfile.Options{BeforeCommit: func(context.Context) error {
					switch {
					case !bad.Load():
					case tt.hangs:
						<-release
					default:
						return runfile.ErrFull
					}
					return nil
				}}
				d := openDesk(t, dir, opt, nil)
				d.feed(time.Second)
				bad.Store(true)
				before := len(d.look().acked)
				d.send(time.Now())
				began := time.Now()
				d.halt()
				err := <-d.ended
				if err == nil || errors.Is(err, watch.ErrHangs) != tt.hangs || time.Since(began) > 7*time.Second {
					t.Errorf("after %v the loop ended with: %v", time.Since(began), err)
				}
				if n := len(d.look().acked); tt.hangs && n != before {
					t.Errorf("%d messages were acknowledged that are not stored", n-before)
				}
				for name, err := range map[string]error{
					"Put": d.loop.Put(t.Context(), watch.Input{Kind: ingest.KindTick}),
					"Ask": d.loop.Ask(t.Context(), func(*pipeline.Machine, *pipeline.State) { t.Error("asked after the end") }),
					"Act": d.act(pipeline.DoMark),
				} {
					if !errors.Is(err, watch.ErrStopped) {
						t.Errorf("%s after the end: %v", name, err)
					}
				}
				close(release)
				bad.Store(false)
				d.shut()
				again := openDesk(t, dir, runfile.Options{}, nil)
				again.feed(time.Second)
				again.close()
			})
		})
	}
}

// Whoever asks while the loop ends gets an answer, and an action that is answered
// is recorded.
func TestAsksWhileItEnds(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		d := openDesk(t, dir, runfile.Options{}, nil)
		d.feed(time.Second)
		if err := d.loop.Ask(t.Context(), func(m *pipeline.Machine, s *pipeline.State) {
			if cfg, ok := m.Config(); !ok || cfg.Rig.ID != "bench_1" || s.Epoch != 1 {
				t.Errorf("asked in epoch %d of %q", s.Epoch, cfg.Rig.ID)
			}
		}); err != nil {
			t.Error(err)
		}
		var all sync.WaitGroup
		var done, refused atomic.Int64
		for i := range 200 {
			all.Go(func() {
				a := pipeline.Action{Do: pipeline.DoMark, Text: "note", By: "T. Ester", RequestID: fmt.Sprint("ending ", i)}
				switch r, err := d.loop.Act(t.Context(), a); {
				case errors.Is(err, watch.ErrStopped):
					refused.Add(1)
				case err != nil || r.Err != nil || r.N == 0 || r.Epoch != 1:
					t.Errorf("reply %+v, %v", r, err)
				default:
					done.Add(1)
				}
			})
			if i == 100 {
				all.Go(d.halt)
			}
		}
		all.Wait()
		d.close()
		s := readAll(t, dir)
		if got := int64(s.kinds[ingest.KindAction]); got != done.Load() || done.Load()+refused.Load() != 200 {
			t.Errorf("%d actions were done, %d refused, %d are recorded", done.Load(), refused.Load(), got)
		}
		canceled, cancel := context.WithCancel(t.Context())
		cancel()
		if err := d.loop.Put(canceled, watch.Input{}); !errors.Is(err, watch.ErrStopped) {
			t.Errorf("Put after the end: %v", err)
		}
	})
}

// A tick comes each tenth of a second in which nothing else does.
func TestTicks(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		d := openDesk(t, dir, runfile.Options{}, nil)
		time.Sleep(2 * time.Second)
		synctest.Wait()
		for range 80 {
			d.send(time.Now())
			time.Sleep(25 * time.Millisecond)
		}
		time.Sleep(time.Second)
		d.close()
		var ticks [3]int // before, while and after messages came
		phase := 0
		var last ingest.Record
		for _, r := range readAll(t, dir).records {
			if r.Kind == ingest.KindMessage {
				phase = 1
			}
			if gap := time.Duration(r.Host - last.Host); last.Seq > 0 && gap > 150*time.Millisecond {
				t.Errorf("record %d comes %v after the one before", r.Seq, gap)
			}
			if r.Kind == ingest.KindTick {
				if phase == 1 && last.Kind == ingest.KindTick {
					phase = 2
				}
				ticks[phase]++
			}
			last = r
		}
		if ticks[0] < 19 || ticks[0] > 20 || ticks[1] > 1 || ticks[2] < 8 || ticks[2] > 10 {
			t.Errorf("%v ticks before, while and after messages came: 20, 0 and 10 are due", ticks)
		}
	})
}

// A step of the wall clock is a record; host time goes on.
func TestClockStep(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		var by atomic.Int64
		d := openDeskBy(t, dir, runfile.Options{}, nil, func() time.Time { return time.Now().Add(time.Duration(by.Load())) })
		for _, step := range []time.Duration{400 * time.Millisecond, 90 * time.Minute, 90*time.Minute + 400*time.Millisecond, -time.Second} {
			by.Store(int64(step))
			d.feed(time.Second)
		}
		health := d.look().status.Health
		d.close()
		var steps []string
		var last int64
		for _, r := range readAll(t, dir).records {
			if r.Kind == ingest.KindClock {
				steps = append(steps, string(r.Payload))
			}
			if last != 0 && (r.Host < last || r.Host-last > int64(time.Second)) {
				t.Errorf("host time goes from %d to %d", last, r.Host)
			}
			last = r.Host
		}
		want := []string{`{"by_ns":5400000000000}`, `{"by_ns":-5401000000000}`}
		if !slices.Equal(steps, want) || health.ClockStepped != -int64(time.Second) {
			t.Errorf("steps %q (%v in sum), want %q: less than half a second is none", steps, time.Duration(health.ClockStepped), want)
		}
	})
}

// A wall clock that was put back while the watch was off does not stop host time:
// it goes on from the last record, and the difference is a step of the clock.
func TestClockBehindRecords(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		time.Sleep(time.Hour)
		d := openDesk(t, dir, runfile.Options{}, nil)
		d.feed(time.Second)
		d.close()
	})
	synctest.Test(t, func(t *testing.T) { // a bubble begins at the same time as the one before
		d := openDesk(t, dir, runfile.Options{}, nil)
		d.feed(10 * time.Second)
		got := d.look()
		if d.close(); d.core.State.Host-d.began < int64(10*time.Second) {
			t.Errorf("host time went on by %v in 10 s", time.Duration(d.core.State.Host-d.began))
		}
		if got.points < 100 {
			t.Errorf("%d points in 10 s with device clocks an hour behind ours", got.points)
		}
		if by := time.Duration(got.status.Health.ClockStepped).Round(time.Second); by != -time.Hour-time.Second {
			t.Errorf("the clock stepped by %v", by)
		}
	})
}

// A connection that takes no acknowledgements does not hold the watch up, with a
// disk or without one; what was not acknowledged then is later, in order.
func TestAcknowledgementsThatHang(t *testing.T) {
	for _, disk := range []string{"with a disk", "without"} {
		t.Run(disk, func(t *testing.T) {
			t.Parallel()
			dir := memory(t)
			synctest.Test(t, func(t *testing.T) {
				var bad atomic.Bool
				opt := runfile.Options{BeforeCommit: func(context.Context) error {
					if bad.Load() {
						return runfile.ErrFull
					}
					return nil
				}}
				link := &hangingLink{gate: make(chan struct{}, 1)}
				d := openDesk(t, dir, opt, func(c *watch.Config) { link.to = c.Ack; c.Ack = link })
				d.feed(time.Second)
				bad.Store(disk == "without")
				link.hold(true)
				before := d.look()
				for end := time.Now().Add(10 * time.Second); time.Now().Before(end); time.Sleep(5 * time.Millisecond) {
					d.send(time.Now())
				}
				amid := d.look()
				link.hold(false)
				bad.Store(false)
				if n := amid.points - before.points; n < 190 || len(amid.acked) > len(before.acked)+1 {
					t.Errorf("%d points in 10 s, 20 per second are due; %d messages were acknowledged over a link that hangs", n, len(amid.acked)-len(before.acked))
				}
				d.feed(2 * time.Second)
				d.close()
				inOrder(t, d.look().acked, d.sent)
			})
		})
	}
}

// hangingLink acknowledges while nobody holds it.
type hangingLink struct {
	to   watch.Acknowledger
	gate chan struct{} // holds a token while it hangs
}

func (h *hangingLink) hold(hang bool) {
	if hang {
		h.gate <- struct{}{}
	} else {
		<-h.gate
	}
}

func (h *hangingLink) Ack(m mqtt.Message) bool {
	h.gate <- struct{}{}
	defer func() { <-h.gate }()
	return h.to.Ack(m)
}
