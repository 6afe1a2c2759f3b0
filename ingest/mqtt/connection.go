package mqtt

import (
	"bufio"
	"context"
	"crypto/tls"
	"errors"
	"net"
	"net/url"
	"sync"
	"sync/atomic"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	"github.com/eclipse/paho.mqtt.golang/packets"
)

const (
	connectTimeout = 5 * time.Second
	writeTimeout   = 5 * time.Second
	pingTimeout    = 5 * time.Second
	readBuffer     = 64 << 10
	// quiesce is how long an orderly DISCONNECT may take.
	quiesce = 250 * time.Millisecond
)

// connection is one life of a session's connection.
type connection struct {
	generation uint64
	client     paho.Client
	socket     atomic.Pointer[socket]
	lost       chan error    // the reason of the loss; holds one
	up         atomic.Bool   // CONNACK received, and subscribed where due
	unacked    atomic.Int64  // deliveries at QoS 1 less acknowledgements
	shedding   atomic.Bool   // a delivery was dropped: so are all that follow
	full       chan struct{} // holds one: the first delivery was dropped
	gone       chan struct{} // closed when the connection is over
}

func newConnection(generation uint64) *connection {
	return &connection{
		generation: generation,
		lost:       make(chan error, 1), full: make(chan struct{}, 1), gone: make(chan struct{}),
	}
}

// connect opens the connection and returns whether the broker had the session.
// paho's own reconnection is not used: it would carry tokens, message ids and
// copies of unacknowledged messages over from the dead connection.
func (s *session) connect(ctx context.Context, conn *connection) (resumed bool, err error) {
	cfg := &s.client.cfg
	ctx, cancel := context.WithTimeout(ctx, connectTimeout)
	defer cancel()
	address := s.client.addresses[s.node]
	s.node = (s.node + 1) % len(s.client.addresses) // whatever becomes of it: a node that is lost may not even refuse
	opts := paho.NewClientOptions().
		AddBroker("tcp://" + address).
		SetClientID(s.id).
		SetUsername(cfg.Username).
		SetPassword(cfg.Password).
		SetProtocolVersion(4). // no second attempt with MQTT 3.1
		SetCleanSession(s.filter == "").
		SetOrderMatters(true).
		SetAutoAckDisabled(true).
		SetAutoReconnect(false).
		SetConnectRetry(false).
		SetConnectTimeout(connectTimeout).
		SetWriteTimeout(writeTimeout).
		SetKeepAlive(cfg.KeepAlive).
		SetPingTimeout(pingTimeout).
		SetStore(noStore{}).
		// The default handler, and no other: queued messages of a persistent
		// session come before any route could be made, and one without a handler
		// would never be acknowledged.
		SetDefaultPublishHandler(func(_ paho.Client, m paho.Message) { s.receive(conn, m) }).
		SetConnectionLostHandler(func(_ paho.Client, err error) { conn.lost <- err }).
		SetCustomOpenConnectionFn(func(*url.URL, paho.ClientOptions) (net.Conn, error) {
			c, err := dial(ctx, address, cfg.TLS)
			if err != nil {
				return nil, err // not a nil *socket in the interface
			}
			conn.socket.Store(c)
			return c, nil
		})
	if s.will != nil {
		opts.SetBinaryWill(s.will.Topic, s.will.Payload, 1, true)
	}
	conn.client = paho.NewClient(opts)
	token := conn.client.Connect().(*paho.ConnectToken)
	// The handshake ends when ctx does, because dial ties the socket to it.
	<-token.Done()
	return token.SessionPresent(), token.Error()
}

// disconnect ends the connection in an orderly way, with the acknowledgements
// that were given; it returns in good time even if the link hangs.
func (conn *connection) disconnect() {
	conn.up.Store(false)
	close(conn.gone)
	if s := conn.socket.Load(); s != nil {
		s.linger.Store(true)
	}
	conn.client.Disconnect(uint(quiesce.Milliseconds()))
}

// wait waits for an operation of the library. One that is begun as the
// connection goes down may never be completed by it.
func (conn *connection) wait(ctx context.Context, token paho.Token) error {
	select {
	case <-token.Done():
		return token.Error()
	case <-conn.gone:
		return ErrNotConnected
	case <-ctx.Done():
		return ctx.Err()
	}
}

// dial opens the socket. Ending ctx before the handshake is over closes it.
func dial(ctx context.Context, address string, cfg *tls.Config) (*socket, error) {
	var d net.Dialer
	c, err := d.DialContext(ctx, "tcp", address)
	if err != nil {
		return nil, err
	}
	if cfg != nil {
		if cfg.ServerName == "" {
			cfg = cfg.Clone()
			cfg.ServerName, _, _ = net.SplitHostPort(address) // it was joined by us
		}
		secure := tls.Client(c, cfg)
		if err := secure.HandshakeContext(ctx); err != nil {
			return nil, errors.Join(err, c.Close())
		}
		c = secure
	}
	return &socket{
		Conn: c, reader: bufio.NewReaderSize(c, readBuffer),
		stop: context.AfterFunc(ctx, func() { _ = c.Close() }), // nobody is left to tell
	}, nil
}

// socket reads ahead, because paho reads a packet in three pieces, and sets a
// deadline on every write, because paho does so for PUBLISH only.
type socket struct {
	net.Conn
	reader *bufio.Reader
	stop   func() bool // unties the socket from the context of the handshake
	linger atomic.Bool // Close is to let the broker read what was written
	half   sync.Once
}

// Read reads buffered bytes.
func (s *socket) Read(p []byte) (int, error) {
	n, err := s.reader.Read(p)
	if err != nil && s.linger.Load() {
		err = errors.Join(err, s.Conn.Close())
	}
	return n, err
}

// Close closes the socket. When it is to linger, it closes its sending half only,
// and Read does the rest when the broker has closed the other: a socket closed
// with bytes unread is reset, and the broker may never see the last
// acknowledgements.
func (s *socket) Close() error {
	c, ok := s.Conn.(interface{ CloseWrite() error })
	if !ok || !s.linger.Load() {
		return s.Conn.Close()
	}
	var err error
	s.half.Do(func() {
		err = errors.Join(c.CloseWrite(), s.SetReadDeadline(time.Now().Add(quiesce)))
	})
	return err
}

// Write writes p within writeTimeout.
func (s *socket) Write(p []byte) (int, error) {
	if err := s.SetWriteDeadline(time.Now().Add(writeTimeout)); err != nil {
		return 0, err
	}
	return s.Conn.Write(p)
}

// SetDeadline is called by paho with the zero time when the handshake is over.
func (s *socket) SetDeadline(t time.Time) error {
	if t.IsZero() {
		s.stop()
	}
	return s.Conn.SetDeadline(t)
}

// noStore keeps nothing: with a new client for every connection, there is
// nothing to resume, and paho would hold a second copy of every message.
type noStore struct{}

// Open does nothing.
func (noStore) Open() {}

// Put does nothing.
func (noStore) Put(string, packets.ControlPacket) {}

// Get finds nothing.
func (noStore) Get(string) packets.ControlPacket { return nil }

// All finds nothing.
func (noStore) All() []string { return nil }

// Del does nothing.
func (noStore) Del(string) {}

// Close does nothing.
func (noStore) Close() {}

// Reset does nothing.
func (noStore) Reset() {}
