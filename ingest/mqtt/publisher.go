package mqtt

import (
	"context"
	"crypto/rand"
	"crypto/tls"
	"fmt"
	"sync"
	"sync/atomic"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
)

// DefaultPublisherQueue is the queue of a Publisher by default: at 50 messages
// per second, five minutes without a broker.
const DefaultPublisherQueue = 16384

// publisherWindow is how many messages a Publisher sends ahead of their
// acknowledgements; every broker takes that many.
const publisherWindow = 20

// PublisherConfig sets a Publisher up. URL is required.
type PublisherConfig struct {
	URL       string // as in Config
	Username  string
	Password  string
	TLS       *tls.Config   // for mqtts; nil trusts the system's authorities
	KeepAlive time.Duration // 0 = DefaultKeepAlive
	Queue     int           // messages that wait for the broker; 0 = DefaultPublisherQueue
}

// Publisher sends messages at QoS 1 and in order, as the data system of a rig
// does: it stores while the broker is away and sends when it is back. What was
// sent and not acknowledged is sent again, so that a message may come twice and
// none is lost. Use NewPublisher, then Run once.
type Publisher struct {
	session *session
	ready   chan struct{}
	once    sync.Once // closes ready

	// queue holds what waits for the broker. When it is full, Publish waits.
	queue        chan outgoing
	connected    atomic.Bool
	acknowledged atomic.Uint64

	inflight []outgoing // sent and not acknowledged; belongs to the goroutine of Run
}

// outgoing is a message to be sent, or the mark of a Flush.
type outgoing struct {
	topic   string
	payload []byte
	token   paho.Token
	flushed chan struct{} // closed when everything before is acknowledged; nil for a message
}

// PublisherStats is the state of a Publisher now.
type PublisherStats struct {
	Connected    bool
	Queued       int    // not yet sent
	Acknowledged uint64 // messages since start
	LastFailure  string // reason of the last disconnection; empty before the first
}

// NewPublisher checks cfg; it starts nothing. Errors wrap ErrConfig. The session is
// a clean one with a client id of its own: any number may run.
func NewPublisher(cfg PublisherConfig) (*Publisher, error) {
	c := &Client{cfg: Config{URL: cfg.URL, Username: cfg.Username, Password: cfg.Password, TLS: cfg.TLS, KeepAlive: cfg.KeepAlive}}
	if c.cfg.KeepAlive == 0 {
		c.cfg.KeepAlive = DefaultKeepAlive
	}
	if cfg.Queue == 0 {
		cfg.Queue = DefaultPublisherQueue
	}
	if cfg.Queue < 1 {
		return nil, fmt.Errorf("%w: publisher queue of %d messages", ErrConfig, cfg.Queue)
	}
	var err error
	if c.addresses, err = parseURL(&c.cfg); err != nil {
		return nil, err
	}
	return &Publisher{
		session: newSession(c, PublisherSession, "", "tw-pub-"+rand.Text()[:16]),
		ready:   make(chan struct{}),
		queue:   make(chan outgoing, cfg.Queue),
	}, nil
}

// Run connects and sends until ctx ends, and returns ctx's error. What is not
// acknowledged by then is lost: Flush first.
func (p *Publisher) Run(ctx context.Context) error {
	backoff := minBackoff
	for {
		err := p.serve(ctx)
		if p.connected.Swap(false) {
			backoff = minBackoff
		}
		if ctx.Err() != nil {
			return ctx.Err()
		}
		text := err.Error()
		p.session.failure.Store(&text)
		select {
		case <-ctx.Done():
			return ctx.Err()
		case <-time.After(backoff):
		}
		backoff = min(2*backoff, maxBackoff)
	}
}

// serve holds one connection from dial to loss and returns the reason of the loss.
func (p *Publisher) serve(ctx context.Context) error {
	conn := newConnection(p.session.generation.Add(1))
	if _, err := p.session.connect(ctx, conn); err != nil {
		return err
	}
	defer conn.disconnect()
	p.connected.Store(true)
	p.once.Do(func() { close(p.ready) })
	for i := range p.inflight {
		p.send(conn, &p.inflight[i])
	}
	for {
		for len(p.inflight) > 0 && p.inflight[0].flushed != nil {
			close(p.inflight[0].flushed)
			p.inflight = p.inflight[1:]
		}
		next := p.queue
		if len(p.inflight) >= publisherWindow {
			next = nil
		}
		var first <-chan struct{}
		if len(p.inflight) > 0 {
			first = p.inflight[0].token.Done()
		}
		select {
		case m := <-next:
			p.send(conn, &m)
			p.inflight = append(p.inflight, m)
		case <-first:
			if err := p.inflight[0].token.Error(); err != nil {
				return err
			}
			p.acknowledged.Add(1)
			p.inflight = p.inflight[1:]
		case err := <-conn.lost:
			return err
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

func (p *Publisher) send(conn *connection, m *outgoing) {
	if m.flushed == nil {
		m.token = conn.client.Publish(m.topic, 1, false, m.payload)
	}
}

// Publish puts a message into the queue; it waits while the queue is full. The
// payload must not be changed afterwards. The error is ctx's, or wraps ErrConfig
// for a topic that cannot be published to.
func (p *Publisher) Publish(ctx context.Context, topic string, payload []byte) error {
	if err := CheckTopic(topic); err != nil {
		return err
	}
	return p.put(ctx, outgoing{topic: topic, payload: payload})
}

// Flush waits until the broker has acknowledged everything published before.
func (p *Publisher) Flush(ctx context.Context) error {
	flushed := make(chan struct{})
	if err := p.put(ctx, outgoing{flushed: flushed}); err != nil {
		return err
	}
	select {
	case <-flushed:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

func (p *Publisher) put(ctx context.Context, m outgoing) error {
	select {
	case p.queue <- m:
		return nil
	default:
	}
	select {
	case p.queue <- m:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

// Ready is closed when the broker has been reached once.
func (p *Publisher) Ready() <-chan struct{} { return p.ready }

// Stats gives the state now.
func (p *Publisher) Stats() PublisherStats {
	s := PublisherStats{Connected: p.connected.Load(), Queued: len(p.queue), Acknowledged: p.acknowledged.Load()}
	if f := p.session.failure.Load(); f != nil {
		s.LastFailure = *f
	}
	return s
}
