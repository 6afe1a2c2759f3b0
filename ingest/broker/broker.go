// Package broker runs an MQTT 3.1.1 broker inside the daemon, so that one rig
// needs no other server: nats-server with its MQTT listener and a file store.
//
// It promises that a killed process loses nothing it has acknowledged to a
// publisher, and a power cut at most what came within the last SyncInterval.
// Only the MQTT listener is opened, on loopback unless told otherwise; the
// broker's own protocol has no port, and MQTT clients cannot reach the topics
// by which its store is managed.
//
// The order of a start matters. A message that is acknowledged to its publisher
// before the daemon's session exists is dropped, because nobody has asked for
// it. So the listener accepts connections from Start on, but answers CONNECT
// only to the daemon's own client (Own) until Open is called; everyone else
// waits for at most a few seconds and tries again. Waiting happens inside the
// broker's authentication, so the gate costs nothing once it is open:
//
//	b.Start(ctx) → the daemon's client subscribes → b.Open()
//
// A broker that restarts hands out what was unacknowledged first and in order,
// before new messages. Within one life of the broker, a session that reconnects
// gets its unacknowledged messages only after AckWait, behind newer ones: the
// watermark of the alignment has to allow for that.
package broker

import (
	"context"
	"crypto/rand"
	"crypto/tls"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"strconv"
	"sync"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// Defaults for the zero values of Config.
const (
	DefaultListen        = "127.0.0.1:1883"
	DefaultServerName    = "throatwatch"
	DefaultMaxAckPending = 4096
	DefaultAckWait       = 60 * time.Second
	DefaultSyncInterval  = time.Second
	DefaultMaxStore      = 4 << 30 // bytes
	DefaultMaxPayload    = 1 << 20 // bytes
)

const (
	maxConnections = 1024
	// readyTimeout bounds the recovery of the store; a store at DefaultMaxStore
	// is read in well under a minute.
	readyTimeout = 5 * time.Minute
	// requestTimeout bounds one question to the broker's store.
	requestTimeout = 5 * time.Second
	// maxConsumerWindow is what one session may be granted: a filter ending in
	// "#" makes two consumers whose windows together must stay within 65 535.
	maxConsumerWindow = 32767
)

// ErrConfig is wrapped by every error that New returns.
var ErrConfig = errors.New("broker configuration")

// User is a name and password that a client must give when Config has users.
type User struct {
	Name     string
	Password string // plain, or a bcrypt hash ("$2a$…")
}

// Config sets the broker up. Only StoreDir is required.
type Config struct {
	Listen        string        // host:port; port 0 takes a free one
	AllowRemote   bool          // Listen may be other than loopback
	StoreDir      string        // holds messages, sessions and retained values
	ServerName    string        // keep it: stored sessions belong to it
	MaxAckPending int           // messages a session may hold unacknowledged, ≤ 32 767
	AckWait       time.Duration // after which an unacknowledged message is sent again
	SyncInterval  time.Duration // between fsyncs of the store
	MaxStore      int64         // bytes; beyond it publishers are disconnected unacknowledged
	MaxPayload    int           // bytes; a publisher exceeding it is disconnected
	Users         []User        // none: whoever reaches the listener may connect
	TLS           *tls.Config   // nil: plain TCP
}

// Broker is an embedded broker. Use New, Start, Open, Close, once each.
type Broker struct {
	cfg  Config
	host string
	port int
	log  *slog.Logger
	gate *gate

	mu     sync.Mutex // protects the fields below
	server *server.Server
	conn   *nats.Conn // in process; manages the store
	js     jetstream.JetStream
	addr   string
}

// New checks cfg and fills its defaults in; it starts nothing and touches no
// file. Errors wrap ErrConfig.
func New(cfg Config, log *slog.Logger) (*Broker, error) {
	setDefault(&cfg.Listen, DefaultListen)
	setDefault(&cfg.ServerName, DefaultServerName)
	setDefault(&cfg.MaxAckPending, DefaultMaxAckPending)
	setDefault(&cfg.AckWait, DefaultAckWait)
	setDefault(&cfg.SyncInterval, DefaultSyncInterval)
	setDefault(&cfg.MaxStore, DefaultMaxStore)
	setDefault(&cfg.MaxPayload, DefaultMaxPayload)

	host, portText, err := net.SplitHostPort(cfg.Listen)
	if err != nil {
		return nil, fmt.Errorf("%w: listen %q: %w (give host:port, for example %s)", ErrConfig, cfg.Listen, err, DefaultListen)
	}
	port, err := strconv.ParseUint(portText, 10, 16)
	if err != nil {
		return nil, fmt.Errorf("%w: listen %q: port must be 0 to 65535", ErrConfig, cfg.Listen)
	}
	switch {
	case !cfg.AllowRemote && !loopback(host):
		return nil, fmt.Errorf("%w: listen %q reaches beyond this machine: use %s, or allow remote clients explicitly",
			ErrConfig, cfg.Listen, DefaultListen)
	case cfg.StoreDir == "":
		return nil, fmt.Errorf("%w: no store directory", ErrConfig)
	case cfg.MaxAckPending < 1 || cfg.MaxAckPending > maxConsumerWindow:
		return nil, fmt.Errorf("%w: max ack pending %d is outside 1 to %d: beyond it subscriptions are refused",
			ErrConfig, cfg.MaxAckPending, maxConsumerWindow)
	case cfg.AckWait < time.Second:
		return nil, fmt.Errorf("%w: ack wait %v is below 1 s: every commit would be overtaken by a redelivery", ErrConfig, cfg.AckWait)
	case cfg.SyncInterval < 0 || cfg.MaxStore < 0 || cfg.MaxPayload < 0:
		return nil, fmt.Errorf("%w: sync interval, max store and max payload must not be negative", ErrConfig)
	}
	for i, u := range cfg.Users {
		if u.Name == "" || u.Password == "" {
			return nil, fmt.Errorf("%w: user %d: name and password must not be empty", ErrConfig, i+1)
		}
	}
	return &Broker{
		cfg: cfg, host: host, port: int(port), log: log,
		gate: &gate{
			users:   cfg.Users,
			own:     credentials{"throatwatch-" + rand.Text(), rand.Text()},
			manager: credentials{"manager-" + rand.Text(), rand.Text()},
			ready:   make(chan struct{}),
			open:    make(chan struct{}),
			closed:  make(chan struct{}),
		},
	}, nil
}

func setDefault[T comparable](field *T, value T) {
	var zero T
	if *field == zero {
		*field = value
	}
}

func loopback(host string) bool {
	ip := net.ParseIP(host)
	return host == "localhost" || ip != nil && ip.IsLoopback()
}

// Start recovers the store, opens the listener and returns once the daemon's
// own client may connect. ctx bounds the start only; Close ends the broker.
func (b *Broker) Start(ctx context.Context) error {
	opts := &server.Options{
		ServerName:         b.cfg.ServerName,
		DontListen:         true,
		NoSigs:             true,
		MaxConn:            maxConnections,
		MaxPayload:         int32(b.cfg.MaxPayload),
		JetStream:          true,
		JetStreamMaxStore:  b.cfg.MaxStore,
		JetStreamMaxMemory: 64 << 20, // no stream of ours is kept in memory
		StoreDir:           b.cfg.StoreDir,
		SyncInterval:       b.cfg.SyncInterval,

		CustomClientAuthentication: b.gate,
		MQTT: server.MQTTOpts{
			Host:          b.host,
			Port:          b.port,
			TLSConfig:     b.cfg.TLS,
			TLSTimeout:    5,
			AckWait:       b.cfg.AckWait,
			MaxAckPending: uint16(b.cfg.MaxAckPending),
		},
	}
	if b.port == 0 {
		opts.MQTT.Port = -1
	}
	s, err := server.NewServer(opts)
	if err != nil {
		return fmt.Errorf("broker: %w", err)
	}
	fatal := make(chan string, 1)
	s.SetLoggerV2(&logger{log: b.log, fatal: fatal}, false, false, false)
	b.mu.Lock()
	b.server = s
	b.mu.Unlock()
	go s.Start() // ends by itself; Close stops what it has started

	ready := make(chan bool, 1)
	waiting, enough := context.WithTimeout(ctx, readyTimeout)
	defer enough()
	go func() { // ends when it is ready, or soon after Start
		up := false
		for !up && waiting.Err() == nil {
			up = s.ReadyForConnections(100 * time.Millisecond)
		}
		ready <- up
	}()
	select {
	case <-ctx.Done():
		err = ctx.Err()
	case text := <-fatal:
		err = errors.New(text)
	case ok := <-ready:
		if !ok {
			err = fmt.Errorf("not ready after %v", readyTimeout)
		}
	}
	if err == nil {
		err = b.prepare(ctx, s, net.JoinHostPort(b.host, strconv.Itoa(opts.MQTT.Port)))
	}
	if err != nil {
		return errors.Join(fmt.Errorf("broker: start on %s with store %s: %w", b.cfg.Listen, b.cfg.StoreDir, err), b.Close())
	}
	if b.cfg.AllowRemote && len(b.cfg.Users) == 0 && !loopback(b.host) {
		b.log.Warn("broker lets anyone on the network publish: give it users", "listen", b.addr)
	}
	return nil
}

// prepare connects to the store and forces the redelivery of what the last life
// of the broker left unacknowledged, before the first client comes in.
func (b *Broker) prepare(ctx context.Context, s *server.Server, addr string) error {
	conn, err := nats.Connect("", nats.InProcessServer(s), nats.Name("manager"),
		nats.UserInfo(b.gate.manager.name, b.gate.manager.password))
	if err != nil {
		return fmt.Errorf("connect in process: %w", err)
	}
	js, err := jetstream.New(conn, jetstream.WithDefaultTimeout(requestTimeout))
	if err != nil {
		conn.Close()
		return fmt.Errorf("open the store: %w", err)
	}
	b.mu.Lock()
	b.conn, b.js, b.addr = conn, js, addr
	b.mu.Unlock()
	if err := b.redeliver(ctx, js); err != nil {
		return fmt.Errorf("force redelivery: %w", err)
	}
	close(b.gate.ready)
	return nil
}

// Open lets everyone in. Call it when the daemon's sessions exist.
func (b *Broker) Open() { b.gate.openOnce.Do(func() { close(b.gate.open) }) }

// Addr is the listener's host:port, known after Start.
func (b *Broker) Addr() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.addr
}

// URL is the address as an MQTT client takes it, known after Start.
func (b *Broker) URL() string {
	if b.cfg.TLS != nil {
		return "mqtts://" + b.Addr()
	}
	return "mqtt://" + b.Addr()
}

// Own gives the name and password by which the daemon's client is let in before
// Open. They are made anew by New and are never stored.
func (b *Broker) Own() (user, password string) { return b.gate.own.name, b.gate.own.password }

// Close disconnects everyone, flushes the store and returns when the broker has
// ended. It may be called more than once.
func (b *Broker) Close() error {
	b.gate.closeOnce.Do(func() { close(b.gate.closed) })
	b.mu.Lock()
	s, conn := b.server, b.conn
	b.mu.Unlock()
	if conn != nil {
		conn.Close()
	}
	if s != nil {
		s.Shutdown()
		s.WaitForShutdown()
	}
	return nil
}
