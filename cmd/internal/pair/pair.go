// Package pair lets two watches stand over one rig, both computing and recording, of
// which one speaks: it publishes, calls the webhook and sounds, and the other does when
// it falls silent. What an operator does at one of them is done at both.
//
// They meet at the site's broker, on two topics:
//
//	rigs/<rig>/speaking   each says each second that it is there; that of the one that
//	                      speaks is retained and is its lease
//	rigs/<rig>/actions    what an operator did, QoS 1: a watch that is away for less
//	                      than a minute gets it when it is back
//
// Messages are signed by a secret that the watches share, with their topic and time, so
// that a data system can neither acknowledge an alarm nor silence a watch.
//
// Nothing of the lease enters the computation: both step what comes in as if alone. An
// action of the other watch becomes an action record like one of this one. The other's
// alarm is found here by its id, or by its rule where the alarm here was raised a little
// apart: rules on the watch itself are judged by each by its own clock.
package pair

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"log/slog"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/mqtt"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const (
	tickEvery  = 200 * time.Millisecond
	lookEvery  = 100 * time.Millisecond
	retryEvery = 250 * time.Millisecond
	sendWithin = 5 * time.Second
	// waiting bounds actions that wait for the broker. When it is full a further one is
	// not told the other watch, and the log says so.
	waiting = 256
	// exactFor is how long an action waits for the very alarm of the other watch to be
	// raised here, and likeFor for one like it.
	exactFor, likeFor = time.Second, 2 * time.Second
	// apart is how far from each other the two may have raised what is one alarm, ns.
	apart = int64(10 * time.Second)
)

// Loop is the live watch as the pair needs it.
type Loop interface {
	Act(ctx context.Context, a pipeline.Action) (pipeline.Reply, error)
	ActFor(ctx context.Context, a pipeline.Action, m mqtt.Message) (pipeline.Reply, error)
	Ask(ctx context.Context, fn func(*pipeline.Machine, *pipeline.State)) error
}

// Config sets a Pair up.
type Config struct {
	Name   string // of this watch: letters, digits, - and _, at most 40
	Secret []byte // shared by the watches, at least ShortestSecret bytes
	Rig    string
	Inputs []string             // topic filters of the rig, which must not take the topics of the pair in
	Broker mqtt.Config          // how to reach the broker; Dir is the data folder
	Behind func() time.Duration // age of what the webhook has not delivered; nil without one
	Log    *slog.Logger
}

// Pair is one of the watches. Use New, then Run once. Act and Ask make it a desk.
type Pair struct {
	cfg               Config
	speaking, actions string // topics
	client            *mqtt.Client
	lease             *lease
	loop              Loop
	wake              chan struct{}     // one slot: the lease is to be looked at
	out               chan told         // see waiting
	in                chan mqtt.Message // actions of the other watch, likewise
	foreign           atomic.Uint64     // messages that no watch of the pair has signed
}

var nameForm = regexp.MustCompile(`^[A-Za-z0-9_-]{1,40}$`)

// New checks cfg; it starts nothing.
func New(cfg Config) (*Pair, error) {
	switch {
	case !nameForm.MatchString(cfg.Name):
		return nil, fmt.Errorf("pair: name %q: give 1 to 40 letters, digits, - and _", cfg.Name)
	case len(cfg.Secret) < ShortestSecret:
		return nil, fmt.Errorf("pair: the shared secret has %d bytes: at least %d are needed", len(cfg.Secret), ShortestSecret)
	}
	p := &Pair{
		cfg: cfg, speaking: "rigs/" + cfg.Rig + "/speaking", actions: "rigs/" + cfg.Rig + "/actions",
		lease: newLease(cfg.Name, rand.Text()), wake: make(chan struct{}, 1), out: make(chan told, waiting), in: make(chan mqtt.Message, waiting),
	}
	own := []string{p.speaking, p.actions}
	if err := mqtt.CheckFilters(append(own, cfg.Inputs...)); err != nil {
		return nil, fmt.Errorf("pair: inputs of the rig and topics of the pair: %w", err)
	}
	farewell, err := sign(cfg.Secret, p.speaking, p.lease.farewell(time.Now().UnixNano()))
	if err != nil {
		return nil, err
	}
	b := cfg.Broker
	b.Dir = filepath.Join(b.Dir, "pair")
	if err := os.MkdirAll(b.Dir, 0o750); err != nil {
		return nil, fmt.Errorf("pair: %w", err)
	}
	b.Filters, b.Will = own, &mqtt.Will{Topic: p.speaking, Payload: farewell}
	if p.client, err = mqtt.New(b); err != nil {
		return nil, fmt.Errorf("pair: %w", err)
	}
	return p, nil
}

// Join names the loop to act on. It must be called before Run and Act.
func (p *Pair) Join(l Loop) { p.loop = l }

// Speaks tells whether this watch may speak now. It never waits.
func (p *Pair) Speaks() bool { return p.lease.Speaks(time.Now()) }

// Held tells a webhook that it is to be silent, and for how long it is to keep what it
// has: what the one that speaks may not have delivered if it falls silent now.
func (p *Pair) Held() (keep time.Duration, held bool) {
	return p.lease.Behind() + watch.Overlap, !p.Speaks()
}

// Name gives the name of this watch.
func (p *Pair) Name() string { return p.cfg.Name }

// Standing gives how this watch stands to the other.
func (p *Pair) Standing() Standing { return p.lease.Standing(time.Now()) }

// Foreign gives the number of messages that no watch of the pair has signed, or that are
// too old.
func (p *Pair) Foreign() uint64 { return p.foreign.Load() }

// Run keeps the lease and carries actions until ctx ends; then it gives the lease up.
func (p *Pair) Run(ctx context.Context) {
	var all sync.WaitGroup
	all.Go(func() { _ = p.client.Run(ctx) }) // it ends with ctx
	all.Go(func() { p.listen() })
	all.Go(func() { p.report() })
	all.Go(func() { p.beat(ctx) })
	all.Go(func() { p.send(ctx) })
	all.Go(func() { p.follow(ctx) })
	all.Wait()
}

// report logs what becomes of the sessions until the client ends.
func (p *Pair) report() {
	for e := range p.client.Events() {
		if e.Err != nil {
			p.cfg.Log.Warn("pair: " + e.String())
		} else {
			p.cfg.Log.Info("pair: " + e.String())
		}
	}
}

// beat says each second that this watch is there, and takes over when that is due.
func (p *Pair) beat(ctx context.Context) {
	tick := time.NewTicker(tickEvery)
	defer tick.Stop()
	var was Standing
	for {
		behind := time.Duration(0)
		if p.cfg.Behind != nil {
			behind = p.cfg.Behind()
		}
		now := time.Now()
		if b, due := p.lease.tick(now, now.UnixNano(), behind); due {
			p.say(ctx, &b)
		}
		is := p.lease.Standing(now)
		if is != was {
			p.tell(&is)
			was = is
		}
		select {
		case <-ctx.Done():
			return
		case <-p.wake:
		case <-tick.C:
		}
	}
}

// say publishes a beat. One that does not get through does not come back, which is
// what the lease goes by.
func (p *Pair) say(ctx context.Context, b *beat) {
	text, err := sign(p.cfg.Secret, p.speaking, b)
	if err != nil {
		panic("pair: beat: " + err.Error()) // strings and numbers encode
	}
	ctx, cancel := context.WithTimeout(ctx, beatEvery)
	defer cancel()
	_ = p.client.Publish(ctx, p.speaking, text, 0, b.Speaks)
}

// tell logs a change of how this watch stands.
func (p *Pair) tell(s *Standing) {
	switch {
	case s.Speaks:
		p.cfg.Log.Warn("pair: this watch speaks", "watch", p.cfg.Name, "other", s.Other)
	case s.Name != "":
		p.cfg.Log.Warn("pair: this watch is silent, another speaks", "watch", p.cfg.Name, "speaks", s.Name)
	default:
		p.cfg.Log.Warn("pair: this watch is silent and hears none that speaks", "watch", p.cfg.Name, "other", s.Other, "why", s.Why)
	}
}

// listen takes in what watches say, until the client ends.
func (p *Pair) listen() {
	for m := range p.client.Messages() {
		switch {
		case m.Topic == p.speaking:
			p.hear(&m)
		case m.Flags&ingest.FlagRetained != 0: // a thing that was done is not done for ever
			p.client.Ack(m)
		default:
			select {
			case p.in <- m:
			default:
				p.refuse(&m, errors.New("too many actions at once"))
			}
		}
	}
}

// refuse forgets a message that is not used.
func (p *Pair) refuse(m *mqtt.Message, why error) {
	p.client.Ack(*m)
	if p.foreign.Add(1) == 1 {
		p.cfg.Log.Warn("pair: a message is not used; further ones are counted in /metrics", "topic", m.Topic, "err", why)
	}
}

// hear takes a beat in.
func (p *Pair) hear(m *mqtt.Message) {
	if len(m.Payload) == 0 { // somebody has cleared the retained one
		p.client.Ack(*m)
		return
	}
	var b beat
	now, retained := time.Now(), m.Flags&ingest.FlagRetained != 0
	err := open(p.cfg.Secret, p.speaking, m.Payload, &b)
	if err == nil && !retained && !b.Gone && !isFresh(b.Renewed, now) {
		err = stale(b.Name, b.Renewed)
	}
	if err != nil {
		p.refuse(m, err)
		return
	}
	p.client.Ack(*m)
	p.lease.hear(&b, retained, now)
	select {
	case p.wake <- struct{}{}:
	default:
	}
}

func stale(name string, sent int64) error {
	return fmt.Errorf("watch %q sent it at %s: it is too old, or the clocks of the two machines differ: set them",
		name, time.Unix(0, sent).UTC().Format(time.RFC3339))
}

// follow does what an operator did at the other watch, in order, until ctx ends. A
// message is acknowledged when what it says is durable here: what is not, the broker
// keeps.
func (p *Pair) follow(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			return
		case m := <-p.in:
			t, err := p.read(&m)
			switch {
			case err != nil:
				p.refuse(&m, err)
			case t.Life == p.lease.life: // our own
				p.client.Ack(m)
			default:
				p.do(ctx, &t, m)
			}
		}
	}
}

// read gives what a message says was done.
func (p *Pair) read(m *mqtt.Message) (t told, err error) {
	err = open(p.cfg.Secret, p.actions, m.Payload, &t)
	switch {
	case err != nil:
	case t.Action.RequestID == "" || t.Action.Do == pipeline.DoConfig || t.Action.Do == pipeline.DoConfigRefused:
		err = fmt.Errorf("watches do not tell each other of %q", t.Action.Do)
	case !isFresh(t.Sent, time.Now()):
		err = stale(t.Name, t.Sent)
	}
	return t, err
}

// do does at this watch what was done at the other. Its alarm may be about to be raised
// here.
func (p *Pair) do(ctx context.Context, t *told, m mqtt.Message) {
	a := t.Action
	for began, found := time.Now(), a.Alarm == ""; !found; {
		waited := time.Since(began)
		if err := p.loop.Ask(ctx, func(_ *pipeline.Machine, s *pipeline.State) {
			found = localize(&a, &s.Rules, waited > exactFor)
		}); err != nil {
			return
		}
		if found || waited > likeFor {
			break
		}
		select {
		case <-ctx.Done():
			return
		case <-time.After(lookEvery):
		}
	}
	r, err := p.loop.ActFor(ctx, a, m)
	if err == nil && r.Err != nil {
		p.cfg.Log.Warn("pair: what was done at the other watch is not done here", "watch", t.Name, "do", a.Do, "by", a.By, "why", r.Err)
	}
}

// localize makes the alarm of an action that of this watch, with the revision that it
// has here: the same, or, where alike is set, one by the same rule that was raised about
// when the other was. ok is false where there is none.
func localize(a *pipeline.Action, s *rules.State, alike bool) (ok bool) {
	rule, raised := a.Alarm, int64(0)
	if parts := strings.Split(a.Alarm, "/"); len(parts) >= 3 {
		rule = parts[len(parts)-2]
		raised, _ = strconv.ParseInt(parts[len(parts)-1], 10, 64) // else none was raised about then
	}
	for i := range s.Instances {
		in := &s.Instances[i]
		if in.Rule != rule {
			continue
		}
		switch near := in.Raised-raised < apart && raised-in.Raised < apart; {
		case a.Alarm == rule, a.Alarm == in.ID:
		case alike && near:
			a.Alarm = in.ID
		default:
			return false
		}
		a.Revision = in.Revision
		return true
	}
	return false
}

// Ask runs fn between two steps.
func (p *Pair) Ask(ctx context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	return p.loop.Ask(ctx, fn)
}

// Act does what an operator asks for at this watch and, if it is done, tells the other.
// It does not wait for the other.
func (p *Pair) Act(ctx context.Context, a pipeline.Action) (pipeline.Reply, error) {
	if a.RequestID == "" {
		a.RequestID = rand.Text() // the other must know it when it comes twice
	}
	r, err := p.loop.Act(ctx, a)
	if err != nil || r.Err != nil {
		return r, err
	}
	select {
	case p.out <- told{Name: p.cfg.Name, Life: p.lease.life, Sent: time.Now().UnixNano(), Action: a}:
	default:
		p.cfg.Log.Error("pair: the other watch is not told what was done: too much waits for the broker", "do", a.Do, "by", a.By)
	}
	return r, nil
}

// send tells the other watch what was done here, in order.
func (p *Pair) send(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			return
		case t := <-p.out:
			if err := p.deliver(ctx, &t); err != nil && ctx.Err() == nil {
				p.cfg.Log.Error("pair: the other watch is not told what was done", "do", t.Action.Do, "by", t.Action.By, "err", err)
			}
		}
	}
}

// deliver tries until the broker has taken the action, or it is too old to be taken.
func (p *Pair) deliver(ctx context.Context, t *told) error {
	text, err := sign(p.cfg.Secret, p.actions, t)
	if err == nil && len(text) > mostMessage {
		err = fmt.Errorf("%d bytes, more than %d", len(text), mostMessage)
	}
	for err == nil {
		sending, cancel := context.WithTimeout(ctx, sendWithin)
		failed := p.client.Publish(sending, p.actions, text, 1, false)
		cancel()
		if failed == nil {
			return nil
		}
		if !isFresh(t.Sent, time.Now()) {
			return failed
		}
		select {
		case <-ctx.Done():
			return ctx.Err()
		case <-time.After(retryEvery):
		}
	}
	return err
}
