package mqtt

import (
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"
	"sync/atomic"
	"syscall"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"throatwatch/ingest"
)

const (
	minBackoff = 100 * time.Millisecond
	maxBackoff = 5 * time.Second
	// stableAfter is the life of a connection after which its loss is a new
	// fault rather than the last one going on.
	stableAfter = 30 * time.Second
	// takenOverAfter closures by the broker within takenOverWithin make
	// EventTakenOver.
	takenOverAfter  = 3
	takenOverWithin = 30 * time.Second

	probeInterval = time.Second
	probeTimeout  = 2 * time.Second
	checkInterval = 250 * time.Millisecond
	maxProbes     = 32

	subscribeTimeout = 10 * time.Second
	farewellTimeout  = time.Second
	// maxQueuedBytes bounds the payloads in the queue of one session.
	maxQueuedBytes = 256 << 20
)

// session is one client id at the broker: a filter's, or the publisher's.
type session struct {
	client     *Client
	index      int
	filter     string // empty: no subscription, and a clean session
	id         string
	will       *Will
	probeTopic string // empty: no probes

	// queue holds deliveries until the reader takes them, so that paho's
	// goroutine never waits: while it does, pings go unanswered. When it is full
	// by number or by bytes, the delivery is dropped.
	queue       chan Message
	queuedBytes atomic.Int64

	current    atomic.Pointer[connection] // nil while down
	generation atomic.Uint64
	received   atomic.Uint64
	dropped    atomic.Uint64
	echoed     atomic.Uint64 // number of the newest probe that came back
	delay      atomic.Int64  // of that probe, ns
	deaf       atomic.Bool
	refused    atomic.Bool
	failure    atomic.Pointer[string]

	// The fields below belong to the goroutine of run.
	node      int    // index into Client.addresses of the next connection
	lastProbe uint64 // number
	down      bool   // reported as down
	hasBeen   bool   // up once
	closures  []time.Time
}

func newSession(c *Client, index int, filter, id string) *session {
	s := &session{client: c, index: index, filter: filter, id: id}
	if filter != "" {
		s.queue = make(chan Message, 2*c.cfg.Window)
	}
	return s
}

// run keeps the session up until ctx ends or the broker refuses it.
func (s *session) run(ctx context.Context) {
	backoff := minBackoff
	for {
		started := time.Now()
		err := s.serve(ctx)
		if ctx.Err() != nil {
			return
		}
		if errors.Is(err, ErrRefused) {
			s.refused.Store(true)
			s.report(EventRefused, err)
			return
		}
		text := err.Error()
		s.failure.Store(&text)
		if !s.down {
			s.down = true
			s.report(EventDisconnected, err)
		}
		if time.Since(started) > stableAfter {
			backoff = minBackoff
		}
		select {
		case <-ctx.Done():
			return
		case <-time.After(backoff):
		}
		backoff = min(2*backoff, maxBackoff)
		if !s.awaitRoom(ctx) {
			return
		}
	}
}

func (s *session) report(kind EventKind, err error) {
	s.client.emit(Event{Kind: kind, Session: s.index, Filter: s.filter, Generation: s.generation.Load(), Err: err})
}

// awaitRoom waits until the queue can take a whole window.
func (s *session) awaitRoom(ctx context.Context) bool {
	for len(s.queue) > s.client.cfg.Window || s.queuedBytes.Load() > maxQueuedBytes/2 {
		select {
		case <-ctx.Done():
			return false
		case <-time.After(checkInterval):
		}
	}
	return true
}

// serve holds one connection from dial to loss. It returns the reason of the
// loss, which wraps ErrRefused if there is no point in trying again.
func (s *session) serve(ctx context.Context) error {
	conn := newConnection(s.generation.Add(1))
	// Queued messages come with the CONNACK: they must find their connection.
	s.current.Store(conn)
	defer s.current.Store(nil)
	resumed, err := s.connect(ctx, conn)
	if err != nil {
		return err
	}
	defer conn.disconnect()
	if s.filter != "" {
		if err := s.subscribe(ctx, conn); err != nil {
			return err
		}
	}
	conn.up.Store(true)
	s.down = false
	s.client.emit(Event{Kind: EventConnected, Session: s.index, Filter: s.filter, Generation: conn.generation, Resumed: resumed})
	if !s.hasBeen {
		s.hasBeen = true
		s.client.cameUp()
	}
	err = s.watch(ctx, conn)
	if ctx.Err() != nil && s.will != nil {
		// An orderly DISCONNECT makes the broker forget the will.
		conn.client.Publish(s.will.Topic, 1, true, s.will.Payload).WaitTimeout(farewellTimeout)
	}
	return err
}

// subscribe asks for the filter and the probe topic. It is done on every
// connection: the broker may have lost the session.
func (s *session) subscribe(ctx context.Context, conn *connection) error {
	ctx, cancel := context.WithTimeout(ctx, subscribeTimeout)
	defer cancel()
	// The probe comes back at QoS 0: at QoS 1 it would share the session's
	// window with the data and could delay a message by the broker's AckWait.
	token := conn.client.SubscribeMultiple(map[string]byte{s.filter: 1, s.probeTopic: 0}, nil).(*paho.SubscribeToken)
	if err := conn.wait(ctx, token); err != nil {
		return fmt.Errorf("subscribe %q: %w", s.filter, err)
	}
	granted := token.Result()
	if code, ok := granted[s.filter]; !ok || code != 1 {
		return fmt.Errorf("topic filter %q: %w: QoS 1 asked, code 0x%02x returned: check the broker's access list and limits", s.filter, ErrRefused, code)
	}
	if code := granted[s.probeTopic]; code > 1 {
		return fmt.Errorf("probe topic %q: %w: code 0x%02x: allow this client to publish and subscribe below %q", s.probeTopic, ErrRefused, code, probePrefix)
	}
	return nil
}

// probe is a probe message on its way.
type probe struct {
	number uint64
	at     time.Time
	acked  atomic.Bool // by the broker
}

// send publishes the next probe without waiting: on a link that takes no more
// bytes the library waits for writeTimeout.
func (s *session) send(ctx context.Context, conn *connection, now time.Time) *probe {
	s.lastProbe++
	p := &probe{number: s.lastProbe, at: now}
	text := fmt.Sprintf("%d %d", p.number, now.Sub(s.client.start))
	s.client.probing.Go(func() {
		if conn.wait(ctx, conn.client.Publish(s.probeTopic, 1, false, text)) == nil {
			p.acked.Store(true)
		}
	})
	return p
}

// watch probes the connection until it is lost, given up or ctx ends.
func (s *session) watch(ctx context.Context, conn *connection) error {
	defer s.deaf.Store(false)
	var probes []*probe // unanswered, oldest first, at most maxProbes
	var last time.Time  // of sending
	ticker := time.NewTicker(checkInterval)
	defer ticker.Stop()
	for {
		now := time.Now()
		if s.probeTopic != "" && now.Sub(last) >= probeInterval && len(probes) < maxProbes {
			last = now
			probes = append(probes, s.send(ctx, conn, now))
		}
		probes = unanswered(probes, s.echoed.Load())
		late := len(probes) > 0 && now.Sub(probes[0].at) > probeTimeout
		switch {
		case late && s.deaf.CompareAndSwap(false, true):
			s.report(EventDeaf, ErrDeaf)
		case late && now.Sub(probes[0].at) > probeTimeout+s.client.cfg.KeepAlive:
			return fmt.Errorf("connection given up: %w", ErrDeaf)
		case !late && s.deaf.CompareAndSwap(true, false):
			s.report(EventHearing, nil)
		}
		select {
		case <-ctx.Done():
			return ctx.Err()
		case err := <-conn.lost:
			s.noteClosure(err, time.Now())
			return fmt.Errorf("connection lost: %w", err)
		case <-conn.full:
			return fmt.Errorf("%w: %d deliveries wait to be read: connection given up until there is room", ErrOverflow, len(s.queue))
		case <-ticker.C:
		}
	}
}

// unanswered drops the probes up to the newest that came back and is
// acknowledged. One that is lost matters only if none after it comes back: at
// QoS 0 a broker may drop it.
func unanswered(probes []*probe, echoed uint64) []*probe {
	for i, p := range slices.Backward(probes) {
		if p.number <= echoed && p.acked.Load() {
			return probes[i+1:]
		}
	}
	return probes
}

// noteClosure looks for the pattern of two clients with one id: MQTT 3.1.1 gives
// no reason when the broker closes the connection of the older one.
func (s *session) noteClosure(err error, now time.Time) {
	if !errors.Is(err, io.EOF) && !errors.Is(err, syscall.ECONNRESET) {
		return
	}
	s.closures = append(s.closures, now)
	if len(s.closures) < takenOverAfter {
		return
	}
	first := s.closures[len(s.closures)-takenOverAfter]
	s.closures = s.closures[len(s.closures)-takenOverAfter+1:]
	if now.Sub(first) <= takenOverWithin {
		s.closures = nil
		s.report(EventTakenOver, fmt.Errorf("the broker closed the connection %d times within %v: does another instance run on a copy of the data directory?",
			takenOverAfter, now.Sub(first).Round(time.Second)))
	}
}

// receive takes a delivery from paho. It must not wait.
func (s *session) receive(conn *connection, m paho.Message) {
	if m.Topic() == s.probeTopic {
		s.answer(m.Payload())
		if m.Qos() > 0 {
			m.Ack()
		}
		return
	}
	s.received.Add(1)
	if s.queue == nil || conn.shedding.Load() {
		s.dropped.Add(1)
		return
	}
	msg := Message{
		Topic: m.Topic(), Payload: m.Payload(),
		Session: s.index, Generation: conn.generation, from: s, conn: conn, src: m,
	}
	if m.Duplicate() {
		msg.Flags |= ingest.FlagDuplicate
	}
	if m.Retained() {
		msg.Flags |= ingest.FlagRetained
	}
	if m.Qos() > 0 {
		msg.Flags |= ingest.FlagQoS1
		conn.unacked.Add(1)
	}
	size := int64(len(msg.Payload))
	if s.queuedBytes.Add(size) <= maxQueuedBytes {
		select {
		case s.queue <- msg:
			return
		default:
		}
	}
	s.queuedBytes.Add(-size)
	s.dropped.Add(1)
	if m.Qos() == 0 {
		return // nobody will send it again
	}
	// What follows must not be delivered before the dropped one is.
	conn.shedding.Store(true)
	select {
	case conn.full <- struct{}{}:
	default:
	}
}

// answer notes a probe that came back.
func (s *session) answer(payload []byte) {
	number, sent, _ := strings.Cut(string(payload), " ")
	n, err := strconv.ParseUint(number, 10, 64)
	if err != nil {
		return
	}
	at, err := strconv.ParseInt(sent, 10, 64)
	if err != nil {
		return
	}
	s.delay.Store(int64(time.Since(s.client.start)) - at)
	s.echoed.Store(n)
}

// forward moves deliveries from the session's queue to the client's readers.
func (s *session) forward(ctx context.Context) {
	for {
		select {
		case <-ctx.Done():
			return
		case m := <-s.queue:
			select {
			case <-ctx.Done():
				return
			case s.client.messages <- m:
				s.queuedBytes.Add(-int64(len(m.Payload)))
			}
		}
	}
}

func (s *session) stats() SessionStats {
	st := SessionStats{
		Filter: s.filter, Refused: s.refused.Load(), Deaf: s.deaf.Load(), Generation: s.generation.Load(),
		Window: s.client.cfg.Window, Queued: len(s.queue), Received: s.received.Load(), Dropped: s.dropped.Load(),
		ProbeDelay: time.Duration(s.delay.Load()),
	}
	if conn := s.current.Load(); conn != nil {
		st.Connected, st.Unacked = conn.up.Load(), int(conn.unacked.Load())
	}
	if text := s.failure.Load(); text != nil {
		st.LastFailure = *text
	}
	return st
}

// retire ends the sessions of filters that are no longer configured, by a clean
// connection with their id [MQTT-3.1.2-6]. It goes on until the broker has done
// it: a forgotten session fills the broker's store.
func (c *Client) retire(ctx context.Context) {
	for _, slot := range c.identity.unwanted(c.cfg.Filters) {
		s := newSession(c, PublisherSession, "", c.identity.sessionID(slot))
		for !s.erase(ctx) {
			select {
			case <-ctx.Done():
				return
			case <-time.After(maxBackoff):
			}
		}
		if c.identity.free(slot) != nil {
			return // the next start does it again
		}
	}
}

func (s *session) erase(ctx context.Context) bool {
	conn := newConnection(0)
	if _, err := s.connect(ctx, conn); err != nil {
		return false
	}
	conn.disconnect()
	return true
}

// Forget ends the client's sessions at the broker, with all that it holds for them.
// Call it after Run has ended.
func (c *Client) Forget(ctx context.Context) error {
	for _, s := range c.sessions {
		conn := newConnection(0)
		if _, err := newSession(c, PublisherSession, "", s.id).connect(ctx, conn); err != nil {
			return fmt.Errorf("mqtt: session %q is not ended at the broker: %w", s.filter, err)
		}
		conn.disconnect()
	}
	return nil
}
