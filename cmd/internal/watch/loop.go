package watch

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"time"

	"throatwatch/ingest"
	"throatwatch/ingest/mqtt"
	"throatwatch/rules/pipeline"
)

const (
	commitEvery = 20 * time.Millisecond
	tickEvery   = 100 * time.Millisecond
	retryEvery  = 500 * time.Millisecond
	// stalledAfter is the age of the oldest record not yet stored at which the
	// loop stops waiting for the disk, ns.
	stalledAfter = int64(time.Second)
	// pausedAfter is the host time without a record after which the loop was not run: there
	// is a tick each 100 ms, ns.
	pausedAfter = int64(500 * time.Millisecond)
	// drainFor is the time that the disk gets when the loop ends.
	drainFor = 5 * time.Second
	// clockStep is the least step of the wall clock that is recorded, ns.
	clockStep = int64(500 * time.Millisecond)
	// inputsBuffer bounds what waits for a step. When it is full senders wait: the
	// broker keeps what they hold.
	inputsBuffer = 4096
	// acksBuffer bounds batches whose messages wait to be acknowledged. When it is
	// full they gather in the loop, which does not wait: the broker's window bounds
	// them.
	acksBuffer = 64
)

// tooSlow is why recording stopped where the disk gave no error.
const tooSlow = "the disk does not keep up"

var (
	// ErrStopped is returned to whoever asks the loop after its end.
	ErrStopped = errors.New("the watch has stopped")
	// ErrHangs is returned by Run when the disk has not answered at all: the store is
	// in its hands and cannot be closed.
	ErrHangs = errors.New("the disk does not answer")
)

// Acknowledger lets the broker forget a message that is durable.
type Acknowledger interface{ Ack(mqtt.Message) bool }

// Config sets a loop up.
type Config struct {
	Core   *Core
	Store  *Store
	Ack    Acknowledger // nil when no message needs one
	Window int          // messages that the broker lets be unacknowledged; 0 = not limited
	Shown  func(outs []pipeline.Outcome, m *pipeline.Machine, s *pipeline.State)
	Log    *slog.Logger
}

// Loop is the live watch. Its Run owns core and store; the other methods may be
// called from any goroutine while it runs.
type Loop struct {
	cfg    Config
	inputs chan item
	asks   chan func(*pipeline.Machine, *pipeline.State)
	done   chan struct{}
	clock  clock

	acks    chan []mqtt.Message
	jobs    chan *job
	results chan error     // one slot: the writer never waits for the loop
	queue   []*job         // cut and not yet stored; the first may be with the writer
	busy    bool           // the writer has the first of queue
	pending []mqtt.Message // of the batch that gathers
	acking  []mqtt.Message // to be acknowledged, in order, before what is in no batch yet
	lost    uint64         // records stepped and not stored since recording stopped
	stalled bool
	awake   int64 // host time at which it began, or went on after the process was stopped
	waking  bool  // it goes on just now
}

type item struct {
	in    Input
	msg   mqtt.Message
	reply chan<- pipeline.Reply
	id    string
	then  []byte // a configuration that follows if the action is done; it gives the reply then
}

// job is a batch on its way to the disk with the messages it holds.
type job struct {
	batch *Batch
	acks  []mqtt.Message
}

// clock gives host time: it goes on from the last record's, or from the wall clock
// where that is later, at the pace of the monotonic clock. So it neither falls nor
// stands still, also where the wall clock was put back before a restart; the
// difference is a step of the wall clock then.
type clock struct {
	boot time.Time
	base int64 // host time at boot
	last int64 // difference of wall clock and host time when last compared
	wall func() time.Time
}

func newClock(last int64) clock {
	boot := time.Now()
	return clock{boot: boot, base: max(boot.UnixNano(), last), wall: time.Now}
}

func (c *clock) host() int64 { return c.base + int64(time.Since(c.boot)) }

// step gives by how much the wall clock was stepped since the last call, 0 for
// less than clockStep.
func (c *clock) step() int64 {
	diff := c.wall().UnixNano() - c.host()
	by := diff - c.last
	if by > -clockStep && by < clockStep {
		return 0
	}
	c.last = diff
	return by
}

// NewLoop gives a loop; Run starts it.
func NewLoop(cfg Config) *Loop {
	return &Loop{
		cfg: cfg, clock: newClock(cfg.Core.State.Host),
		inputs:  make(chan item, inputsBuffer),
		asks:    make(chan func(*pipeline.Machine, *pipeline.State)),
		done:    make(chan struct{}),
		acks:    make(chan []mqtt.Message, acksBuffer),
		jobs:    make(chan *job),
		results: make(chan error, 1),
	}
}

// Put gives the loop an input. It waits while the loop is behind.
func (l *Loop) Put(ctx context.Context, in Input) error { return l.put(ctx, item{in: in}) }

// PutMessage gives the loop a message; it is acknowledged when it is durable.
func (l *Loop) PutMessage(ctx context.Context, m mqtt.Message) error {
	return l.put(ctx, item{
		in:  Input{Kind: ingest.KindMessage, Flags: m.Flags, Topic: m.Topic, Payload: m.Payload},
		msg: m,
	})
}

func (l *Loop) put(ctx context.Context, it item) error {
	select {
	case <-l.done: // also where there is room still
		return ErrStopped
	default:
	}
	select {
	case l.inputs <- it:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	case <-l.done:
		return ErrStopped
	}
}

// Act does what an operator asks for and waits for what becomes of it.
func (l *Loop) Act(ctx context.Context, a pipeline.Action) (pipeline.Reply, error) {
	return l.act(ctx, a, item{})
}

// ActFor is Act for an action that came in a message, which is acknowledged when the
// action is durable.
func (l *Loop) ActFor(ctx context.Context, a pipeline.Action, m mqtt.Message) (pipeline.Reply, error) {
	return l.act(ctx, a, item{msg: m})
}

// Configure takes a configuration into force, if that can be, as a says who brings
// it.
func (l *Loop) Configure(ctx context.Context, a pipeline.Action, bundle []byte) (pipeline.Reply, error) {
	a.Do = pipeline.DoConfig
	return l.act(ctx, a, item{then: bundle})
}

func (l *Loop) act(ctx context.Context, a pipeline.Action, it item) (pipeline.Reply, error) {
	text, err := json.Marshal(a)
	if err != nil {
		return pipeline.Reply{}, fmt.Errorf("action: %w", err)
	}
	reply := make(chan pipeline.Reply, 1)
	it.in, it.reply, it.id = Input{Kind: ingest.KindAction, Payload: text}, reply, a.RequestID
	if err := l.put(ctx, it); err != nil {
		return pipeline.Reply{}, err
	}
	select {
	case r := <-reply:
		return r, nil
	case <-ctx.Done():
		return pipeline.Reply{}, ctx.Err()
	case <-l.done:
	}
	select {
	case r := <-reply: // the last that the loop did
		return r, nil
	default:
		return pipeline.Reply{}, ErrStopped
	}
}

// Ask runs fn between two records; fn must copy what it keeps.
func (l *Loop) Ask(ctx context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	ready := make(chan struct{})
	ask := func(m *pipeline.Machine, s *pipeline.State) {
		fn(m, s)
		close(ready)
	}
	select {
	case l.asks <- ask:
		<-ready
		return nil
	case <-ctx.Done():
		return ctx.Err()
	case <-l.done:
		return ErrStopped
	}
}

// Run steps inputs until ctx ends, then stores what was stepped and returns. The
// first records are the boot and the configuration.
func (l *Loop) Run(ctx context.Context, boot pipeline.Boot, bundle []byte) error {
	defer close(l.done)
	text, err := json.Marshal(boot)
	if err != nil {
		return fmt.Errorf("boot record: %w", err)
	}
	stopWriter := l.startWriter(ctx)
	stopAcks := l.startAcks()
	l.take(item{in: Input{Kind: ingest.KindBoot, Payload: text}})
	l.take(item{in: Input{Kind: ingest.KindConfig, Payload: bundle}})
	l.awake = l.clock.host()

	tick := time.NewTicker(tickEvery)
	defer tick.Stop()
	flush := time.NewTicker(commitEvery)
	defer flush.Stop()
	for ctx.Err() == nil {
		select {
		case it := <-l.inputs:
			l.take(it)
		case fn := <-l.asks:
			fn(l.cfg.Core.Machine, l.cfg.Core.State)
		case <-tick.C:
			l.tick()
		case <-flush.C:
			l.flush()
		case err := <-l.results:
			l.stored(err)
		case <-ctx.Done():
		}
	}
	return l.drain(stopWriter, stopAcks)
}

// drain stores what is left, and what that brings about. The disk gets drainFor.
func (l *Loop) drain(stopWriter func() bool, stopAcks func()) error {
	defer stopAcks()
	deadline := time.After(drainFor)
	for l.cut(); len(l.queue) > 0; l.cut() {
		l.submit()
		select {
		case err := <-l.results:
			l.stored(err)
		case <-deadline:
			err := fmt.Errorf("%d batches of records were not stored within %v", len(l.queue), drainFor)
			if !stopWriter() {
				return fmt.Errorf("%w: %w", err, ErrHangs)
			}
			return err
		}
	}
	stopWriter()
	return nil
}

// take makes a record of an item and steps it.
func (l *Loop) take(it item) {
	core := l.cfg.Core
	host := l.clock.host()
	if l.awake != 0 && !l.waking && host-core.State.Host > pausedAfter {
		l.wake(host)
	}
	outs := core.Take(it.in, host)
	l.show(outs)
	reply := replyOf(outs, it.id)
	follows := it.then != nil && reply.Err == nil
	if it.reply != nil && !follows {
		it.reply <- reply
	}
	if it.msg.Generation != 0 || it.in.Kind == ingest.KindMessage { // else no message brought it
		l.pending = append(l.pending, it.msg)
	}
	switch {
	case l.stalled:
		l.discard()
	case core.Due():
		l.cut()
		l.submit()
	case l.behind():
		l.stall(tooSlow)
	}
	if follows {
		l.take(item{in: Input{Kind: ingest.KindConfig, Payload: it.then}, reply: it.reply})
	}
}

// wake goes on after the process was stopped for a while, as a virtual machine is that
// moves: neither is the disk slow, nor is what comes now late. It comes as if the sessions
// had been away.
func (l *Loop) wake(host int64) {
	l.waking, l.awake = true, host // what it takes now is no further pause
	defer func() { l.waking = false }()
	sessions := l.cfg.Core.State.Align.Sessions
	l.cfg.Log.Warn("the process was stopped for a while and goes on", "s", float64(host-l.cfg.Core.State.Host)/1e9)
	for i := range sessions {
		if sessions[i].Connected {
			l.take(item{in: Input{Kind: ingest.KindConnect, Topic: sessions[i].Filter}})
		}
	}
}

func replyOf(outs []pipeline.Outcome, id string) pipeline.Reply {
	var r pipeline.Reply
	for i := range outs {
		r.Epoch, r.N = outs[i].Epoch, outs[i].N
		if outs[i].Kind == pipeline.OutcomeAction && outs[i].Action.RequestID == id {
			r.Err = outs[i].Action.Err
			return r
		}
		if outs[i].Kind == pipeline.OutcomeConfig && id == "" {
			r.Err = outs[i].Err
			return r
		}
	}
	return r
}

func (l *Loop) show(outs []pipeline.Outcome) {
	if l.cfg.Shown != nil && len(outs) > 0 {
		l.cfg.Shown(outs, l.cfg.Core.Machine, l.cfg.Core.State)
	}
}

// tick adds a record when none came for a while, and watches the wall clock.
func (l *Loop) tick() {
	if by := l.clock.step(); by != 0 {
		text, err := json.Marshal(pipeline.ClockStep{By: by})
		if err == nil {
			l.take(item{in: Input{Kind: ingest.KindClock, Payload: text}})
		}
	}
	if l.clock.host()-l.cfg.Core.State.Host >= int64(tickEvery)/2 {
		l.take(item{in: Input{Kind: ingest.KindTick}})
	}
}

// flush cuts a batch when the writer is free for it: a slow disk gets larger ones.
func (l *Loop) flush() {
	l.acknowledge(nil) // what was not taken before
	if l.stalled {
		return
	}
	if len(l.queue) == 0 {
		l.cut()
	}
	l.submit()
	if l.behind() {
		l.stall(tooSlow)
	}
}

// cut moves the gathered batch into the queue.
func (l *Loop) cut() {
	b, err := l.cfg.Core.Cut()
	if err != nil {
		l.cfg.Log.Error("a batch of records could not be made", "err", err)
		return
	}
	if b == nil {
		return
	}
	l.queue = append(l.queue, &job{batch: b, acks: l.pending})
	l.pending = nil
}

// submit gives the writer the first of the queue if it is free.
func (l *Loop) submit() {
	if l.busy || len(l.queue) == 0 {
		return
	}
	l.busy = true
	l.jobs <- l.queue[0] // the writer waits for it: it was free
}

// stored notes what became of the first of the queue.
func (l *Loop) stored(err error) {
	l.busy = false
	if err != nil {
		if !l.stalled {
			l.stall(err.Error())
		}
		return // the writer has waited already; the next flush or tick tries again
	}
	l.acknowledge(l.queue[0].acks)
	l.queue[0] = nil
	l.queue = l.queue[1:]
	if len(l.queue) == 0 && l.stalled {
		l.resume()
	}
	l.submit()
}

// acknowledge hands messages to the goroutine that acknowledges, if it takes them now.
func (l *Loop) acknowledge(msgs []mqtt.Message) {
	l.acking = append(l.acking, msgs...)
	if len(l.acking) == 0 {
		return
	}
	select {
	case l.acks <- l.acking:
		l.acking = nil
	default:
	}
}

// behind tells that the disk does not keep up: the oldest record not stored is
// too old, or half of what the broker allows is unacknowledged.
func (l *Loop) behind() bool {
	if len(l.queue) == 0 {
		return false
	}
	unacked := len(l.pending)
	for _, j := range l.queue {
		unacked += len(j.acks)
	}
	return l.cfg.Core.State.Host-max(l.queue[0].batch.First, l.awake) > stalledAfter || l.cfg.Window > 0 && unacked > l.cfg.Window/2
}

// stall goes on without the disk: watching comes before storing. Messages are
// acknowledged unrecorded, those that wait for the disk first.
func (l *Loop) stall(why string) {
	l.stalled = true
	l.cfg.Log.Error("not recording; the watch goes on", "why", why)
	for _, j := range l.queue {
		l.acknowledge(j.acks)
		j.acks = nil
	}
	l.health(pipeline.PartRecording, false, why)
}

// discard forgets what was stepped since the last cut.
func (l *Loop) discard() {
	l.lost += uint64(l.cfg.Core.Drop())
	l.acknowledge(l.pending)
	l.pending = nil
	if len(l.queue) > 0 {
		l.submit()
	} else if !l.busy {
		l.resume()
	}
}

// resume records again, after a gap.
func (l *Loop) resume() {
	l.stalled = false
	outs, err := l.cfg.Core.Gap(l.lost, l.clock.host())
	l.show(outs)
	if err != nil {
		l.cfg.Log.Error("not recording", "err", err)
		return
	}
	l.cfg.Log.Warn("recording again", "records_not_stored", l.lost)
	l.lost = 0
	l.cut()
	l.submit()
	l.health(pipeline.PartRecording, true, "")
}

// health records that a part of the daemon failed or works again.
func (l *Loop) health(part string, ok bool, why string) {
	text, err := json.Marshal(pipeline.HealthChange{Part: part, OK: ok, Why: why})
	if err != nil {
		return
	}
	l.take(item{in: Input{Kind: ingest.KindHealth, Payload: text}})
}

// Health gives the loop the news that a part failed or works again.
func (l *Loop) Health(ctx context.Context, h pipeline.HealthChange) error {
	text, err := json.Marshal(h)
	if err != nil {
		return fmt.Errorf("health: %w", err)
	}
	return l.Put(ctx, Input{Kind: ingest.KindHealth, Payload: text})
}

// startWriter starts the one goroutine that uses the store. It answers every
// job with a result; a failed one after a pause. stop tells whether it has ended.
func (l *Loop) startWriter(ctx context.Context) (stop func() bool) {
	ended := make(chan struct{})
	ctx = context.WithoutCancel(ctx)
	go func() {
		defer close(ended)
		for j := range l.jobs {
			err := l.cfg.Store.Write(ctx, j.batch)
			if err != nil {
				time.Sleep(retryEvery)
			}
			l.results <- err
		}
	}()
	return func() bool {
		close(l.jobs)
		select {
		case <-ended:
			return true
		case <-time.After(time.Second): // it hangs in the disk; the process ends with it
			return false
		}
	}
}

// startAcks starts the goroutine that acknowledges, in order. It may wait for
// the connection, which the loop must not.
func (l *Loop) startAcks() (stop func()) {
	ended := make(chan struct{})
	go func() {
		defer close(ended)
		for batch := range l.acks {
			if l.cfg.Ack == nil {
				continue
			}
			for _, m := range batch {
				l.cfg.Ack.Ack(m)
			}
		}
	}()
	return func() {
		if len(l.acking) > 0 {
			l.acks <- l.acking
		}
		close(l.acks)
		<-ended
	}
}
