// Package mqtttest gives tests real brokers: the embedded one and Debian's
// mosquitto, each on a free port with its data in a temporary directory, and a
// TCP proxy that cuts or swallows a connection. All end with the test.
package mqtttest

import (
	"context"
	"fmt"
	"log/slog"
	"net"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"throatwatch/ingest/broker"
)

// startTimeout bounds the start of a broker on a loaded machine.
const startTimeout = 30 * time.Second

// Server is a broker that a test can stop and start again on the same address
// with the same data.
type Server struct {
	URL   string
	Addr  string
	start func()
	stop  func()
}

// Start starts the broker again after Stop.
func (s *Server) Start() { s.start() }

// Stop ends the broker in an orderly way and waits for its end.
func (s *Server) Stop() { s.stop() }

// Embedded starts the broker of the daemon, open to everyone. Fields of cfg that
// are set are kept.
func Embedded(tb testing.TB, cfg broker.Config) *Server {
	tb.Helper()
	if cfg.StoreDir == "" {
		cfg.StoreDir = tb.TempDir()
	}
	if cfg.Listen == "" {
		cfg.Listen = FreeAddr(tb)
	}
	var b *broker.Broker
	s := &Server{Addr: cfg.Listen, URL: "mqtt://" + cfg.Listen}
	s.start = func() {
		tb.Helper()
		var err error
		b, err = broker.New(cfg, slog.New(slog.DiscardHandler))
		if err != nil {
			tb.Fatal(err)
		}
		ctx, cancel := context.WithTimeout(context.Background(), startTimeout)
		defer cancel()
		if err := b.Start(ctx); err != nil {
			tb.Fatal(err)
		}
		b.Open()
	}
	s.stop = func() {
		if err := b.Close(); err != nil {
			tb.Error(err)
		}
	}
	s.start()
	tb.Cleanup(s.stop)
	return s
}

// Mosquitto starts Debian's mosquitto with the limits that deploy recommends and
// further lines of configuration; without any, everyone may connect. The test
// fails if the program is not installed: a site broker is part of what has to
// work.
func Mosquitto(tb testing.TB, lines ...string) *Server {
	tb.Helper()
	if len(lines) == 0 {
		lines = []string{"allow_anonymous true"}
	}
	return MosquittoWith(tb, "max_inflight_messages 4096\nmax_queued_messages 200000\npersistence true\n"+
		"autosave_interval 1800\nlog_type none\n"+strings.Join(lines, "\n"))
}

// MosquittoWith starts mosquitto with a configuration that names neither a
// listener nor a place for its data.
func MosquittoWith(tb testing.TB, conf string) *Server {
	tb.Helper()
	dir := tb.TempDir()
	addr := FreeAddr(tb)
	host, port, err := net.SplitHostPort(addr)
	if err != nil {
		tb.Fatal(err)
	}
	head := fmt.Sprintf("listener %s %s\npersistence_location %s/\n", port, host, dir)
	if os.Geteuid() == 0 {
		head += "user root\n" // it would else become a user that cannot read dir
	}
	path := filepath.Join(dir, "mosquitto.conf")
	if err := os.WriteFile(path, []byte(head+conf), 0o600); err != nil {
		tb.Fatal(err)
	}
	s := mosquitto(tb, path, addr)
	s.start()
	tb.Cleanup(s.stop)
	return s
}

// FreeAddr gives a loopback address that nothing listens on.
func FreeAddr(tb testing.TB) string {
	tb.Helper()
	l := listen(tb)
	if err := l.Close(); err != nil {
		tb.Fatal(err)
	}
	return l.Addr().String()
}

func listen(tb testing.TB) net.Listener {
	tb.Helper()
	var config net.ListenConfig
	l, err := config.Listen(tb.Context(), "tcp", "127.0.0.1:0")
	if err != nil {
		tb.Fatal(err)
	}
	return l
}

func dial(addr string) (net.Conn, error) {
	d := net.Dialer{Timeout: startTimeout}
	return d.DialContext(context.Background(), "tcp", addr)
}

func waitListening(tb testing.TB, addr string) {
	tb.Helper()
	for deadline := time.Now().Add(startTimeout); time.Now().Before(deadline); time.Sleep(20 * time.Millisecond) {
		if c, err := dial(addr); err == nil {
			_ = c.Close()
			return
		}
	}
	tb.Fatalf("nothing listens on %s after %v", addr, startTimeout)
}

// Proxy passes TCP connections on to a broker until told otherwise.
type Proxy struct {
	Addr string
	URL  string

	mu        sync.Mutex // protects the fields below
	conns     map[net.Conn]struct{}
	swallowed bool
}

// NewProxy starts a proxy in front of target, host:port.
func NewProxy(tb testing.TB, target string) *Proxy {
	tb.Helper()
	l := listen(tb)
	p := &Proxy{Addr: l.Addr().String(), URL: "mqtt://" + l.Addr().String(), conns: make(map[net.Conn]struct{})}
	var all sync.WaitGroup
	all.Go(func() {
		for {
			in, err := l.Accept()
			if err != nil {
				return
			}
			out, err := dial(target)
			if err != nil {
				_ = in.Close()
				continue
			}
			p.mu.Lock()
			p.conns[in], p.conns[out] = struct{}{}, struct{}{}
			p.mu.Unlock()
			all.Go(func() { p.pipe(out, in) })
			all.Go(func() { p.pipe(in, out) })
		}
	})
	tb.Cleanup(func() {
		_ = l.Close()
		p.Cut()
		all.Wait()
	})
	return p
}

func (p *Proxy) pipe(dst, src net.Conn) {
	defer func() { _, _ = dst.Close(), src.Close() }() // Cut may have been first
	buf := make([]byte, 32<<10)
	for {
		n, err := src.Read(buf)
		if err != nil {
			return
		}
		p.mu.Lock()
		swallowed := p.swallowed
		p.mu.Unlock()
		if swallowed {
			continue
		}
		if _, err := dst.Write(buf[:n]); err != nil {
			return
		}
	}
}

// Cut resets every connection; new ones are accepted.
func (p *Proxy) Cut() {
	p.mu.Lock()
	defer p.mu.Unlock()
	for c := range p.conns {
		_ = c.Close()
	}
	clear(p.conns)
}

// Swallow keeps connections open and loses what they carry.
func (p *Proxy) Swallow() {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.swallowed = true
}

// Pass ends Swallow. Connections that have lost bytes are cut.
func (p *Proxy) Pass() {
	p.mu.Lock()
	p.swallowed = false
	p.mu.Unlock()
	p.Cut()
}
