// Package mqtt is the client by which messages come in and results go out, over
// MQTT 3.1.1.
//
// Each topic filter has a session of its own: filters in one session would
// share its window, and one could delay another. Sessions are persistent and
// deliver at QoS 1; a message is acknowledged by hand, with Ack, when it is
// durable. Until then the broker keeps it, and a session that comes back gets it
// again. So a message may come twice and none is lost. A further connection
// publishes; it carries the last will.
//
// The caller reads Messages until it is closed, and calls Ack once for every
// Message, in the order in which they came [MQTT-4.6.0-2]. To stop: stop
// reading, acknowledge what is durable, then end the context of Run.
//
// A connection that looks alive can be deaf. Each session therefore publishes a
// probe each second and must see it come back, on the same connection, within
// two seconds. Probes never reach Messages.
//
// A connection is never reused: every attempt is a new client of the library
// with a new Generation, and no state of the dead one is carried over but the
// persistent session at the broker.
package mqtt

import (
	"context"
	"crypto/tls"
	"errors"
	"fmt"
	"net"
	"net/url"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"throatwatch/ingest"
)

// Defaults for the zero values of Config.
const (
	DefaultKeepAlive = 10 * time.Second
	DefaultWindow    = 4096
)

// PublisherSession is the Session of an Event that is about the publishing
// connection.
const PublisherSession = -1

const (
	messagesBuffer = 1024
	eventsBuffer   = 1024
)

var (
	// ErrConfig is wrapped by every error about the configuration.
	ErrConfig = errors.New("mqtt configuration")
	// ErrNotConnected is returned by Publish while the publishing connection is
	// down. The message is not kept.
	ErrNotConnected = errors.New("not connected to the broker")
	// ErrRefused is carried by EventRefused.
	ErrRefused = errors.New("subscription refused by the broker")
	// ErrDeaf is carried by EventDeaf, and by EventDisconnected when a deaf
	// connection was given up.
	ErrDeaf = errors.New("input path deaf: a probe message did not come back")
	// ErrOverflow is carried by EventDisconnected when a session gave its
	// connection up because its queue was full.
	ErrOverflow = errors.New("input queue full")
)

// Will is what the broker publishes, retained, when the daemon disappears. The
// client publishes it itself when Run ends in an orderly way.
type Will struct {
	Topic   string
	Payload []byte
}

// Config sets a Client up. URL, Dir and Filters are required.
type Config struct {
	// URL is mqtt://host:port, or mqtts://host:port for TLS; several, separated by
	// commas, are the nodes of one cluster: each connection is made to the next.
	URL      string
	Dir      string   // data directory; keeps the client id
	Filters  []string // one session each; they must not overlap
	Username string
	Password string
	TLS      *tls.Config // for mqtts; nil trusts the system's authorities
	// KeepAlive is the time without traffic after which the link is tested, in
	// whole seconds. A deaf connection is given up after it.
	KeepAlive time.Duration
	// Window is the number of unacknowledged messages that the broker allows a
	// session. The session's queue holds twice as many: once the window, and
	// once again what a reconnect redelivers.
	Window int
	Will   *Will
}

// Message is one delivery. Its Topic and Payload are the receiver's to keep.
type Message struct {
	Topic   string
	Payload []byte
	Flags   ingest.Flags
	Session int // index into Config.Filters
	// Generation numbers the connections of a session, from 1. A message of an
	// older generation than the session's newest cannot be acknowledged any
	// more: its redelivered copy will be.
	Generation uint64

	from *session
	conn *connection
	src  paho.Message
}

// EventKind tells what an Event reports.
type EventKind uint8

// The kinds of event.
const (
	// EventConnected: the session is up and its subscription is granted.
	EventConnected EventKind = iota + 1
	// EventDisconnected: the session is down; it is tried again by itself.
	EventDisconnected
	// EventRefused: the broker refused the subscription. The session has ended
	// and is not tried again: nothing will come through its filter.
	EventRefused
	// EventTakenOver: the broker closed the connection again and again, as it
	// does when another client uses the session's client id.
	EventTakenOver
	// EventDeaf: the connection is up but a probe has not come back.
	EventDeaf
	// EventHearing: probes come back again.
	EventHearing
)

var eventNames = [...]string{"invalid", "connected", "disconnected", "subscription refused", "session taken over", "input path deaf", "input path hearing"}

// String names the kind.
func (k EventKind) String() string {
	if int(k) < len(eventNames) {
		return eventNames[k]
	}
	return eventNames[0]
}

// Event is a change in the state of a session.
type Event struct {
	Kind       EventKind
	Session    int    // index into Config.Filters, or PublisherSession
	Filter     string // empty for the publishing connection
	Generation uint64
	// Resumed is set on EventConnected when the broker still had the session:
	// if not, and this is not the first start, messages may have been missed.
	Resumed bool
	Err     error // the reason; nil on EventConnected and EventHearing
}

// String gives the event as a line for the log.
func (e Event) String() string {
	name := e.Filter
	if e.Session == PublisherSession {
		name = "publisher"
	}
	if e.Err != nil {
		return fmt.Sprintf("mqtt: %s: %s: %v", name, e.Kind, e.Err)
	}
	return fmt.Sprintf("mqtt: %s: %s", name, e.Kind)
}

// SessionStats is the state of one session now.
type SessionStats struct {
	Filter      string
	Connected   bool // and the subscription granted
	Refused     bool
	Deaf        bool
	Generation  uint64
	Window      int           // unacknowledged messages that the broker allows
	Unacked     int           // deliveries of this connection not yet acknowledged
	Queued      int           // deliveries not yet read from Messages
	Received    uint64        // deliveries since start, copies included
	Dropped     uint64        // deliveries that found the queue full
	ProbeDelay  time.Duration // of the last probe that came back; 0 before the first
	LastFailure string        // reason of the last disconnection; empty before the first
}

// Client holds the sessions. Use New, then Run once.
type Client struct {
	cfg       Config
	addresses []string // host:port
	start     time.Time
	identity  *identity
	sessions  []*session // one for each filter
	out       *session   // publishes

	messages chan Message
	// events: when full, further events are dropped; Stats tells the state.
	events chan Event

	probing sync.WaitGroup // probes being sent; each ends with its connection
	pending atomic.Int64   // sessions that have not been up yet
	ready   chan struct{}
}

// New checks cfg and reads or creates the client id in cfg.Dir; it starts
// nothing. Errors about cfg wrap ErrConfig.
func New(cfg Config) (*Client, error) {
	if cfg.KeepAlive == 0 {
		cfg.KeepAlive = DefaultKeepAlive
	}
	if cfg.Window == 0 {
		cfg.Window = DefaultWindow
	}
	addresses, err := parseURL(&cfg)
	if err != nil {
		return nil, err
	}
	switch {
	case cfg.KeepAlive < time.Second || cfg.KeepAlive%time.Second != 0:
		return nil, fmt.Errorf("%w: keep alive %v must be whole seconds, at least 1 s", ErrConfig, cfg.KeepAlive)
	case cfg.Window < 1 || cfg.Window > 65535:
		return nil, fmt.Errorf("%w: window %d is outside 1 to 65535", ErrConfig, cfg.Window)
	case cfg.Dir == "":
		return nil, fmt.Errorf("%w: no data directory for the client id", ErrConfig)
	}
	if err := CheckFilters(cfg.Filters); err != nil {
		return nil, err
	}
	if cfg.Will != nil {
		if err := CheckTopic(cfg.Will.Topic); err != nil {
			return nil, err
		}
	}
	id, err := openIdentity(cfg.Dir)
	if err != nil {
		return nil, err
	}
	slots, err := id.assign(cfg.Filters)
	if err != nil {
		return nil, err
	}
	c := &Client{
		cfg: cfg, addresses: addresses, start: time.Now(), identity: id,
		messages: make(chan Message, messagesBuffer),
		events:   make(chan Event, eventsBuffer),
		ready:    make(chan struct{}),
	}
	for i, filter := range cfg.Filters {
		s := newSession(c, i, filter, id.sessionID(slots[i]))
		s.probeTopic = fmt.Sprintf("%s%s/%d", probePrefix, id.public(), slots[i])
		c.sessions = append(c.sessions, s)
	}
	c.out = newSession(c, PublisherSession, "", id.Client+"-out")
	c.out.will = cfg.Will
	c.pending.Store(int64(len(c.sessions)) + 1)
	return c, nil
}

// mostNodes bounds the list of Config.URL.
const mostNodes = 16

// parseURL gives the host:port of each node in cfg.URL and completes cfg.TLS.
func parseURL(cfg *Config) ([]string, error) {
	list := strings.Split(cfg.URL, ",")
	if len(list) > mostNodes {
		return nil, fmt.Errorf("%w: broker URL: %d are given, more than %d", ErrConfig, len(list), mostNodes)
	}
	addresses := make([]string, len(list))
	for i, text := range list {
		address, secure, err := parseNode(strings.TrimSpace(text))
		switch {
		case err != nil:
			return nil, fmt.Errorf("%w: broker URL: %w (give mqtt://host:port or mqtts://host:port, several separated by commas)", ErrConfig, err)
		case !secure && cfg.TLS != nil:
			return nil, fmt.Errorf("%w: broker URL: TLS is configured but the URL does not ask for it (give mqtts://host:port for every node)", ErrConfig)
		case secure && cfg.TLS == nil:
			if i > 0 {
				return nil, fmt.Errorf("%w: broker URL: one node is asked for TLS and another is not", ErrConfig)
			}
			cfg.TLS = &tls.Config{MinVersion: tls.VersionTLS12}
		}
		addresses[i] = address
	}
	return addresses, nil
}

// parseNode gives the host:port of a URL, and whether it asks for TLS.
func parseNode(text string) (address string, secure bool, err error) {
	u, err := url.Parse(text)
	if err != nil {
		return "", false, errors.New("does not parse") // the text may hold a password
	}
	port := ""
	switch u.Scheme {
	case "mqtt", "tcp":
		port = "1883"
	case "mqtts", "ssl", "tls":
		port, secure = "8883", true
	default:
		return "", false, fmt.Errorf("unknown scheme %q", u.Scheme)
	}
	switch {
	case u.Hostname() == "":
		return "", false, errors.New("no host")
	case u.User != nil:
		return "", false, errors.New("give user name and password apart from the URL, which is logged")
	case u.Port() != "":
		port = u.Port()
	}
	return net.JoinHostPort(u.Hostname(), port), secure, nil
}

// Run connects and keeps every session up until ctx ends. It then publishes the
// will, disconnects and closes Messages and Events. It always returns ctx's
// error: trouble with the broker is reported by Events and ended by the broker's
// return.
func (c *Client) Run(ctx context.Context) error {
	var all sync.WaitGroup
	for _, s := range slices.Concat(c.sessions, []*session{c.out}) {
		all.Go(func() { s.run(ctx) })
		all.Go(func() { s.forward(ctx) })
	}
	all.Go(func() { c.retire(ctx) })
	all.Wait()
	c.probing.Wait()
	close(c.messages)
	close(c.events)
	return ctx.Err()
}

// Messages gives the deliveries of all sessions, in the order of arrival within
// each. It is closed when Run has ended. A reader that falls behind fills the
// session's queue; a full queue drops the delivery, counts it and gives the
// connection up until there is room, so that the broker sends it again.
func (c *Client) Messages() <-chan Message { return c.messages }

// Events gives the changes of state. It is closed when Run has ended.
func (c *Client) Events() <-chan Event { return c.events }

// Ready is closed when every session has been up once: from then on the broker
// keeps messages for this client, and publishers may be let in.
func (c *Client) Ready() <-chan struct{} { return c.ready }

// Ack acknowledges m, of this or another client, to the broker and reports whether it did: false when the
// connection that delivered m is gone, and the broker will deliver m again. Call
// it once for every Message, also for one whose copy was recorded before, in the
// order of arrival. It may wait for the connection's writer, at most
// writeTimeout.
func (*Client) Ack(m Message) bool {
	if m.conn == nil || m.from.current.Load() != m.conn {
		return false
	}
	if m.Flags&ingest.FlagQoS1 != 0 {
		m.src.Ack()
		m.conn.unacked.Add(-1)
	}
	return true
}

// Publish sends payload. At QoS 1 it returns when the broker has acknowledged
// it, at QoS 0 when it is written. It returns ErrNotConnected, at once and
// without keeping the message, while the connection is down: publish the whole
// state again after EventConnected of the PublisherSession. A nil error is no
// proof that anyone received it; a broker drops what its access list denies. A
// link that takes no more bytes may hold Publish up for writeTimeout.
func (c *Client) Publish(ctx context.Context, topic string, payload []byte, qos byte, retained bool) error {
	if err := CheckTopic(topic); err != nil {
		return err
	}
	if qos > 1 {
		return fmt.Errorf("mqtt: publish %q: QoS %d is not 0 or 1", topic, qos)
	}
	conn := c.out.current.Load()
	if conn == nil || !conn.up.Load() {
		return fmt.Errorf("mqtt: publish %q: %w", topic, ErrNotConnected)
	}
	if err := conn.wait(ctx, conn.client.Publish(topic, qos, retained, payload)); err != nil {
		return fmt.Errorf("mqtt: publish %q: %w", topic, err)
	}
	return nil
}

// Stats gives the state of every session, in the order of Config.Filters.
func (c *Client) Stats() []SessionStats {
	out := make([]SessionStats, len(c.sessions))
	for i, s := range c.sessions {
		out[i] = s.stats()
	}
	return out
}

// emit reports an event; only goroutines of Run may call it.
func (c *Client) emit(e Event) {
	select {
	case c.events <- e:
	default:
	}
}

// cameUp counts the sessions that have been up once.
func (c *Client) cameUp() {
	if c.pending.Add(-1) == 0 {
		close(c.ready)
	}
}
