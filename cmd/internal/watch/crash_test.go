package watch_test

import (
	"bytes"
	"context"
	"log/slog"
	"maps"
	"math"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"testing"
	"time"

	"github.com/cespare/xxhash/v2"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/align"
	"throatwatch/rules/pipeline"
)

const exampleRig = "../../../testdata/rigs/example.yaml"

// tailAtMost bounds what a restart steps again in TestCrashes, in records: those of
// a chunk and some, at 50 messages per second.
const tailAtMost = 300

// testBegin is the device time at which rehearsals in tests begin.
var testBegin = time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()

// rehearsed gives the messages of a quick rehearsal with the bundle of its rig.
func rehearsed(tb testing.TB, o rehearsal.Options) (bundle []byte, cfg pipeline.Config, msgs []rehearsal.Message) {
	tb.Helper()
	b, cfg, faults := config.Load(exampleRig)
	if err := watch.Faults(faults); err != nil {
		tb.Fatal(err)
	}
	o.Start, o.Scenario = testBegin, rehearsal.Quick
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		tb.Fatal(err)
	}
	for more := true; more; {
		msgs, more = rig.Next(msgs)
	}
	return b.Marshal(), cfg, msgs
}

// parseOnce is watch.Parse for a test that restarts the daemon hundreds of times
// on one configuration: a configuration is a function of its bundle alone.
func parseOnce() func([]byte) (pipeline.Config, error) {
	var of []byte
	var cfg pipeline.Config
	return func(bundle []byte) (pipeline.Config, error) {
		if of != nil && bytes.Equal(bundle, of) {
			return cfg, nil
		}
		c, err := watch.Parse(bundle)
		if err == nil {
			of, cfg = bytes.Clone(bundle), c
		}
		return c, err
	}
}

// life is a daemon that can be killed between any two calls of core and store,
// and the broker that outlives it.
type life struct {
	t      *testing.T
	dir    string
	bundle []byte
	parse  func([]byte) (pipeline.Config, error)
	store  *watch.Store
	core   *watch.Core
	host   int64
	epoch  uint64
	chunk  int64 // host time that chunks span, ns

	delivered []rehearsal.Message // taken in this life, not yet acknowledged
	lost      []rehearsal.Message // unacknowledged at the crash: to be delivered again
	pending   map[uint64]uint64   // record → hash of its outcomes, not yet committed
	recorded  map[uint64]uint64   // record → hash of its outcomes, committed
	durable   []byte              // state after the last commit
	runs      map[string]string   // run → digest when it ended
}

func (l *life) begin() {
	l.t.Helper()
	ctx := l.t.Context()
	var err error
	if l.store, err = watch.OpenStore(ctx, l.dir, runfile.Options{}, slog.New(slog.DiscardHandler)); err != nil {
		l.t.Fatal(err)
	}
	if l.core, err = l.store.Restore(ctx, pipeline.NewMachine(l.parse), "test", "test"); err != nil {
		l.t.Fatal(err)
	}
	l.core.ChunkFor = l.chunk
	if got := l.state(); l.durable != nil && !bytes.Equal(got, l.durable) {
		l.t.Fatalf("record %d: the restored state is not the one that was committed", l.core.State.Seq)
	}
	f, _ := l.store.Current()
	c, err := f.LastCheckpoint(ctx, math.MaxInt64)
	if seq, _ := f.Durable(); err == nil && seq-c.Seq > tailAtMost {
		l.t.Errorf("the restart at record %d stepped %d records again", seq, seq-c.Seq)
	}
	l.epoch++
	l.pending = map[uint64]uint64{}
	l.take(watch.Input{Kind: ingest.KindBoot, Payload: []byte(`{}`)})
	l.take(watch.Input{Kind: ingest.KindConfig, Payload: l.bundle})
	l.take(watch.Input{Kind: ingest.KindConnect, Topic: "rigs/cell_2/senml"})
	l.lost, l.delivered = l.delivered, nil
}

func (l *life) state() []byte {
	l.t.Helper()
	b, err := l.core.State.Encode(true)
	if err != nil {
		l.t.Fatal(err)
	}
	return b
}

func (l *life) take(in watch.Input) {
	l.t.Helper()
	outs := l.core.Take(in, l.host)
	l.pending[l.core.State.Seq] = hashOf(outs, l.core.Machine)
	for i := range outs {
		if outs[i].Kind == pipeline.OutcomeRun && outs[i].Event == "ended" {
			l.runs[outs[i].Run.ID] = l.core.Digest.String()
		}
	}
	if l.core.Due() {
		l.commit()
	}
}

// hashOf gives a hash over every frame that outcomes make.
func hashOf(outs []pipeline.Outcome, m *pipeline.Machine) uint64 {
	var d xxhash.Digest
	d.Reset()
	cfg, _ := m.Config()
	for i := range outs {
		body, _, _ := dashboard.EncodeFrame(&outs[i], &cfg)
		_, _ = d.Write(body)
	}
	return d.Sum64()
}

// commit stores what was taken; then the broker may forget it.
func (l *life) commit() {
	l.t.Helper()
	b, err := l.core.Cut()
	if err != nil {
		l.t.Fatal(err)
	}
	if b == nil {
		return
	}
	if err := l.store.Write(l.t.Context(), b); err != nil {
		l.t.Fatal(err)
	}
	l.durable = l.state()
	maps.Copy(l.recorded, l.pending)
	clear(l.pending)
	l.delivered = l.delivered[:0]
}

// crash forgets all that is not on the disk.
func (l *life) crash() {
	l.t.Helper()
	if err := l.store.Close(l.t.Context()); err != nil {
		l.t.Fatal(err)
	}
	l.core = nil
}

func (l *life) deliver(m rehearsal.Message, dup bool) {
	in := watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}
	if dup {
		in.Flags |= ingest.FlagDuplicate
	}
	l.delivered = append(l.delivered, m)
	l.take(in)
}

// TestCrashes kills the daemon at hundreds of random moments of a whole test,
// while messages come late, out of order and doubled. What was recorded is what a
// replay computes, every restored state is the committed one, and every sample
// is in the scans exactly once.
func TestCrashes(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(1, 7))
	bundle, cfg, msgs := rehearsed(t, rehearsal.Options{Seed: 1})
	l := &life{
		t: t, dir: t.TempDir(), bundle: bundle, parse: parseOnce(), host: msgs[0].At, chunk: 3e9,
		recorded: map[uint64]uint64{}, runs: map[string]string{},
	}
	l.begin()
	crashes, doubled, next := 0, 0, 0
	for i := range msgs {
		// Now and then a message is overtaken by its successor, within what a scan waits.
		if i+1 < len(msgs) && rng.IntN(20) == 0 && msgs[i].Topic == msgs[i+1].Topic {
			msgs[i], msgs[i+1] = msgs[i+1], msgs[i]
		}
		m := msgs[i]
		l.host = max(l.host, m.At+m.Delay)
		l.deliver(m, false)
		if rng.IntN(15) == 0 { // the publisher's own resend carries no DUP
			l.deliver(m, false)
			doubled++
		}
		if rng.IntN(3) == 0 {
			l.commit()
		}
		if i < next {
			continue
		}
		crashes++
		if next = i + 1 + rng.IntN(16); crashes%25 == 0 { // now and then chunks are closed between
			next += 200
		}
		l.crash()
		l.host += rng.Int64N(2e8)
		if crashes%30 == 0 {
			l.host += rng.Int64N(8e9)
		}
		l.begin()
		for _, again := range l.lost { // first what was not acknowledged, with and without DUP
			l.deliver(again, rng.IntN(2) == 0)
		}
		l.lost = nil
	}
	l.host += 5e9
	l.take(watch.Input{Kind: ingest.KindAction, Payload: []byte(`{"do":"run_end","by":"T. Ester","request_id":"1"}`)})
	l.commit()
	state := l.core.State
	t.Logf("%d messages, %d crashes, %d doubled, %d records", len(msgs), crashes, doubled, state.Seq)
	if crashes < 200 || doubled < 200 {
		t.Errorf("only %d crashes and %d doubled messages: the test tests nothing", crashes, doubled)
	}
	if late := state.Align.Counters[ingest.ReasonLate]; late > 0 {
		t.Errorf("%d samples came too late for their scan: a restart must wait for the backlog", late)
	}
	if dups := state.Align.Counters[ingest.ReasonDuplicate]; dups < uint64(doubled) {
		t.Errorf("%d copies recognised, %d messages were doubled", dups, doubled)
	}
	l.crash()
	checkScans(t, l, &cfg, msgs)
}

// checkScans replays the run file: the outcomes are those recorded live, and the
// scans of the run hold each sample of its time once.
func checkScans(t *testing.T, l *life, cfg *pipeline.Config, msgs []rehearsal.Message) {
	t.Helper()
	ctx := context.Background()
	files, err := filepath.Glob(filepath.Join(l.dir, "runs", "*.db"))
	if err != nil || len(files) != 1 {
		t.Fatalf("run files %v, %v: one was expected", files, err)
	}
	f, err := runfile.Open(ctx, files[0], runfile.ReadOnly, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	header, err := f.Header(ctx)
	if err != nil {
		t.Fatal(err)
	}
	m := pipeline.NewMachine(l.parse)
	p, err := pipeline.OpenReplay(ctx, f, m, 0)
	if err != nil {
		t.Fatal(err)
	}
	channel := slices.IndexFunc(cfg.Align.Channels, func(c align.Channel) bool { return c.ID == "egt_1" })
	var samples, firstScan, lastScan uint64
	var from, to int64
	err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
		if want, ok := l.recorded[r.Seq]; !ok {
			t.Errorf("record %d is stored, but was not committed", r.Seq)
		} else if got := hashOf(outs, m); got != want {
			t.Fatalf("record %d: the replay gives other outcomes than were recorded", r.Seq)
		}
		for i := range outs {
			if o := &outs[i]; o.Kind == pipeline.OutcomePoint {
				if firstScan == 0 {
					firstScan, from = o.Scan.N, o.T-cfg.Align.Period
				}
				if lastScan != 0 && o.Scan.N != lastScan+1 {
					t.Errorf("scan %d follows scan %d", o.Scan.N, lastScan)
				}
				lastScan, to = o.Scan.N, o.T
				samples += uint64(o.Scan.Samples[channel])
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	want := uint64(0)
	for _, msg := range msgs {
		if msg.At > from && msg.At <= to {
			want++
		}
	}
	if samples != want || want < 1000 {
		t.Errorf("the scans hold %d samples of egt_1, %d were published in their time", samples, want)
	}
	if p.Digest.String() != header.Digest || header.Digest != l.runs[header.ID] || header.Digest == "" {
		t.Errorf("digests: replay %s, stored %s, live %s", p.Digest, header.Digest, l.runs[header.ID])
	}
	if header.State != runfile.StateEnded {
		t.Errorf("the run is %s, not ended", header.State)
	}
}
