package broker_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	"golang.org/x/crypto/bcrypt"

	"throatwatch/ingest/broker"
)

const patience = 30 * time.Second

func newBroker(tb testing.TB, cfg broker.Config) *broker.Broker {
	tb.Helper()
	return newLogged(tb, cfg, slog.New(slog.DiscardHandler))
}

func newLogged(tb testing.TB, cfg broker.Config, log *slog.Logger) *broker.Broker {
	tb.Helper()
	if cfg.Listen == "" {
		cfg.Listen = "127.0.0.1:0"
	}
	if cfg.StoreDir == "" {
		cfg.StoreDir = tb.TempDir()
	}
	b, err := broker.New(cfg, log)
	if err != nil {
		tb.Fatal(err)
	}
	if err := b.Start(tb.Context()); err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(func() {
		if err := b.Close(); err != nil {
			tb.Error(err)
		}
	})
	return b
}

func options(b *broker.Broker, id string) *paho.ClientOptions {
	return paho.NewClientOptions().AddBroker(b.URL()).SetClientID(id).SetProtocolVersion(4).
		SetCleanSession(false).SetAutoReconnect(false).SetAutoAckDisabled(true).SetConnectTimeout(patience)
}

func wait(tb testing.TB, token paho.Token) {
	tb.Helper()
	if !token.WaitTimeout(patience) {
		tb.Fatal("no answer from the broker")
	}
	if err := token.Error(); err != nil {
		tb.Fatal(err)
	}
}

func connect(tb testing.TB, opts *paho.ClientOptions) paho.Client {
	tb.Helper()
	c := paho.NewClient(opts)
	wait(tb, c.Connect())
	tb.Cleanup(func() { c.Disconnect(100) })
	return c
}

// subscriber connects with a persistent session and hands its deliveries on
// without acknowledging them.
func subscriber(tb testing.TB, opts *paho.ClientOptions, filter string) (paho.Client, <-chan paho.Message) {
	tb.Helper()
	got := make(chan paho.Message, 100000)
	opts.SetDefaultPublishHandler(func(_ paho.Client, m paho.Message) { got <- m })
	c := connect(tb, opts)
	token := c.Subscribe(filter, 1, nil).(*paho.SubscribeToken)
	wait(tb, token)
	if code := token.Result()[filter]; code != 1 {
		tb.Fatalf("subscription to %q: code 0x%02x", filter, code)
	}
	return c, got
}

func publish(tb testing.TB, c paho.Client, topic string, from, to int) {
	tb.Helper()
	var tokens []paho.Token
	for i := from; i < to; i++ {
		tokens = append(tokens, c.Publish(topic, 1, false, fmt.Sprint(i)))
	}
	for _, token := range tokens {
		wait(tb, token)
	}
}

func next(tb testing.TB, got <-chan paho.Message) string {
	tb.Helper()
	select {
	case m := <-got:
		return string(m.Payload())
	case <-time.After(patience):
		tb.Fatal("no message")
		return ""
	}
}

func TestOthersWaitUntilOpen(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{})
	other := paho.NewClient(options(b, "rig"))
	token := other.Connect()
	name, password := b.Own()
	_, got := subscriber(t, options(b, "tw").SetUsername(name).SetPassword(password), "rigs/#")
	select {
	case <-token.Done():
		t.Fatalf("a publisher was let in before Open: %v", token.Error())
	default:
	}
	b.Open()
	b.Open() // harmless
	wait(t, token)
	defer other.Disconnect(100)
	publish(t, other, "rigs/r1/senml", 0, 1)
	if p := next(t, got); p != "0" {
		t.Errorf("got %q, want 0", p)
	}
}

func TestWaitingForOpenIsBounded(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{})
	token := paho.NewClient(options(b, "rig")).Connect()
	start := time.Now()
	if !token.WaitTimeout(patience) || token.Error() == nil {
		t.Fatalf("connect = %v after %v, want a refusal", token.Error(), time.Since(start))
	}
	// Closing the broker frees those who wait at once.
	waiting := paho.NewClient(options(b, "rig2")).Connect()
	time.Sleep(100 * time.Millisecond)
	start = time.Now()
	if err := b.Close(); err != nil {
		t.Fatal(err)
	}
	if !waiting.WaitTimeout(patience) || waiting.Error() == nil || time.Since(start) > 2*time.Second {
		t.Errorf("after Close: %v in %v, want a prompt refusal", waiting.Error(), time.Since(start))
	}
}

func TestUsers(t *testing.T) {
	t.Parallel()
	hash, err := bcrypt.GenerateFromPassword([]byte("hashed"), bcrypt.MinCost)
	if err != nil {
		t.Fatal(err)
	}
	b := newBroker(t, broker.Config{Users: []broker.User{{Name: "rig", Password: "plain"}, {Name: "page", Password: string(hash)}}})
	b.Open()
	own, ownPassword := b.Own()
	tests := []struct {
		name, user, password string
		want                 bool
	}{
		{"plain password", "rig", "plain", true},
		{"hashed password", "page", "hashed", true},
		{"the daemon", own, ownPassword, true},
		{"wrong password", "rig", "plai", false},
		{"empty password", "rig", "", false},
		{"the hash is no password", "page", string(hash), false},
		{"another's password", "page", "plain", false},
		{"unknown user", "guest", "plain", false},
		{"nobody", "", "", false},
		{"the daemon's name", own, "plain", false},
	}
	for i, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			c := paho.NewClient(options(b, fmt.Sprint("client", i)).SetUsername(tt.user).SetPassword(tt.password))
			token := c.Connect()
			if !token.WaitTimeout(patience) {
				t.Fatal("no answer")
			}
			defer c.Disconnect(100)
			if got := token.Error() == nil; got != tt.want {
				t.Errorf("let in = %t (%v), want %t", got, token.Error(), tt.want)
			}
		})
	}
}

func TestClientsCannotReachTheStore(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{})
	b.Open()
	away, _ := subscriber(t, options(b, "away"), "rigs/#")
	away.Disconnect(100)
	c := connect(t, options(b, "intruder"))
	publish(t, c, "rigs/r1/senml", 0, 10)
	for _, topic := range []string{
		"$JS/API/STREAM/PURGE/$MQTT_msgs", "$JS/API/STREAM/DELETE/$MQTT_msgs", "$MQTT/sess/x", "$MQTT/msgs/rigs/r1/senml", "$SYS/x",
	} {
		wait(t, c.Publish(topic, 0, false, "{}"))
	}
	for _, filter := range []string{"$JS/#", "$MQTT/sess/#", "$MQTT/msgs/#", "$SYS/#"} {
		token := c.Subscribe(filter, 0, nil).(*paho.SubscribeToken)
		wait(t, token)
		if code := token.Result()[filter]; code != 0x80 {
			t.Errorf("subscription to %s granted with code 0x%02x", filter, code)
		}
	}
	publish(t, c, "rigs/r1/senml", 10, 11) // a round trip after the attempts
	status, err := b.Status(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if status.Messages != 11 {
		t.Errorf("the store holds %d messages, want 11", status.Messages)
	}
}

func TestRestartHandsOutTheBacklogFirst(t *testing.T) {
	t.Parallel()
	cfg := broker.Config{StoreDir: t.TempDir(), AckWait: time.Minute}
	b := newBroker(t, cfg)
	b.Open()
	_, got := subscriber(t, options(b, "daemon"), "rigs/+/senml")
	publish(t, connect(t, options(b, "rig")), "rigs/r1/senml", 0, 1000)
	for i := range 1000 {
		m := <-got
		if i < 300 {
			m.Ack()
		}
	}
	time.Sleep(300 * time.Millisecond) // the acknowledgements are on their way
	if err := b.Close(); err != nil {
		t.Fatal(err)
	}

	cfg.MaxAckPending = 2000 // also reaches sessions that exist already
	b = newBroker(t, cfg)
	b.Open()
	publish(t, connect(t, options(b, "rig")), "rigs/r1/senml", 1000, 1010) // newer ones wait already
	start := time.Now()
	_, got = subscriber(t, options(b, "daemon"), "rigs/+/senml")
	for want := 300; want < 1010; want++ {
		if p := next(t, got); p != fmt.Sprint(want) {
			t.Fatalf("got %s, want %d", p, want)
		}
	}
	if took := time.Since(start); took > 10*time.Second {
		t.Errorf("the backlog took %v; AckWait is a minute", took)
	}
	// AckWait is back: nothing comes again.
	select {
	case m := <-got:
		t.Errorf("redelivered: %q", m.Payload())
	case <-time.After(time.Second):
	}
}

func TestStatusNamesWhoFillsTheStore(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{})
	b.Open()
	status, err := b.Status(t.Context())
	if err != nil || status.Messages != 0 || status.Limit != broker.DefaultMaxStore {
		t.Fatalf("empty store: %+v, %v", status, err)
	}
	secret := "tw-0123456789abcdef0123456789abcdef-0"
	_, got := subscriber(t, options(b, secret), "rigs/r1/#")
	away, _ := subscriber(t, options(b, "old-laptop"), "rigs/#")
	away.Disconnect(100)
	publish(t, connect(t, options(b, "rig")), "rigs/r1/senml", 0, 50)
	for range 50 {
		m := <-got
		m.Ack()
	}
	for deadline := time.Now().Add(patience); ; time.Sleep(20 * time.Millisecond) {
		if status, err = b.Status(t.Context()); err != nil {
			t.Fatal(err)
		}
		if len(status.Sessions) == 2 && status.Sessions[1].Held == 0 {
			break
		}
		if time.Now().After(deadline) {
			t.Fatalf("status = %+v, want the daemon's session empty", status)
		}
	}
	worst := status.Sessions[0]
	if worst.ID != "old-laptop" || worst.Held != 50 || worst.Connected || !slices.Equal(worst.Filters, []string{"rigs/#"}) {
		t.Errorf("worst = %+v, want the old laptop with 50 messages of rigs/#", worst)
	}
	if own := status.Sessions[1]; !strings.HasPrefix(own.ID, "tw-0123…") || strings.Contains(own.ID, "4567") || !own.Connected || own.Address == "" {
		t.Errorf("own = %+v, want it connected and its id cut", own)
	}
	if status.Messages != 50 || status.Bytes == 0 || status.Connections != 2 {
		t.Errorf("status = %+v, want 50 messages and 2 connections", status)
	}
}

func TestStatusShowsFiltersAsGiven(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{})
	b.Open()
	filters := []string{"+/senml", "/first/empty", "a//b", "last/empty/", "rigs/r1/#", "v1.0/P3.1"}
	for i, filter := range filters {
		subscriber(t, options(b, fmt.Sprint("client", i)), filter)
	}
	status, err := b.Status(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, s := range status.Sessions {
		got = append(got, s.Filters...)
	}
	slices.Sort(got)
	if !slices.Equal(got, filters) {
		t.Errorf("filters = %q, want %q", got, filters)
	}
}

func TestFullStoreStopsAcknowledgements(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{MaxStore: 1 << 20})
	b.Open()
	away, _ := subscriber(t, options(b, "away"), "rigs/#")
	away.Disconnect(100)
	c := connect(t, options(b, "rig"))
	payload := bytes.Repeat([]byte("x"), 64<<10)
	refused := false
	for range 32 { // 2 MiB
		token := c.Publish("rigs/r1/senml", 1, false, payload)
		if !token.WaitTimeout(time.Second) || token.Error() != nil {
			refused = true
			break
		}
	}
	if !refused {
		t.Error("2 MiB were acknowledged into a store of 1 MiB")
	}
	status, err := b.Status(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	// The broker stops after the message that crosses the limit.
	if status.Bytes < uint64(status.Limit)/2 || status.Bytes > uint64(status.Limit)+2*uint64(len(payload)) {
		t.Errorf("status = %+v, want the store full", status)
	}
	if worst := status.Sessions; len(worst) != 1 || worst[0].ID != "away" || worst[0].Held != status.Messages {
		t.Errorf("sessions = %+v, want the one that is away to hold everything", worst)
	}
}

// lockedBuffer lets the broker's goroutines log while the test reads.
type lockedBuffer struct {
	mu  sync.Mutex
	buf bytes.Buffer
}

func (b *lockedBuffer) Write(p []byte) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.buf.Write(p)
}

func (b *lockedBuffer) String() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.buf.String()
}

func TestLogKeepsTheSecret(t *testing.T) {
	t.Parallel()
	var log lockedBuffer
	b := newLogged(t, broker.Config{}, slog.New(slog.NewTextHandler(&log, &slog.HandlerOptions{Level: slog.LevelDebug})))
	b.Open()
	secret := "tw-0123456789abcdef0123456789abcdef-0"
	connect(t, options(b, secret))
	connect(t, options(b, secret)) // takes the first one's place, which is logged
	for deadline := time.Now().Add(patience); !strings.Contains(log.String(), "same client ID"); time.Sleep(20 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("no warning: %s", log.String())
		}
	}
	if text := log.String(); strings.Contains(text, secret) || !strings.Contains(text, "tw-0123…") {
		t.Errorf("log = %s, want the id cut", text)
	}
	if name, password := b.Own(); strings.Contains(log.String(), password) {
		t.Errorf("log shows the password of %s", name)
	}
}

func TestConfigFaults(t *testing.T) {
	tests := []struct {
		name string
		cfg  broker.Config
		want string // part of the error
	}{
		{"no port", broker.Config{Listen: "127.0.0.1"}, "host:port"},
		{"port out of range", broker.Config{Listen: "127.0.0.1:65536"}, "port"},
		{"every interface", broker.Config{Listen: ":1883"}, "beyond this machine"},
		{"every interface, spelled out", broker.Config{Listen: "0.0.0.0:1883"}, "beyond this machine"},
		{"a name", broker.Config{Listen: "rig-host:1883"}, "beyond this machine"},
		{"IPv6 wildcard", broker.Config{Listen: "[::]:1883"}, "beyond this machine"},
		{"no store", broker.Config{}, "store directory"},
		{"window", broker.Config{StoreDir: "x", MaxAckPending: 32768}, "32768"},
		{"ack wait", broker.Config{StoreDir: "x", AckWait: time.Millisecond}, "ack wait"},
		{"negative limit", broker.Config{StoreDir: "x", MaxStore: -1}, "negative"},
		{"user without password", broker.Config{StoreDir: "x", Users: []broker.User{{Name: "rig"}}}, "user 1"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			if _, err := broker.New(tt.cfg, slog.New(slog.DiscardHandler)); !errors.Is(err, broker.ErrConfig) || !strings.Contains(err.Error(), tt.want) {
				t.Errorf("New = %v, want ErrConfig with %q", err, tt.want)
			}
		})
	}
	for _, listen := range []string{"127.0.0.1:0", "localhost:0", "[::1]:0", ""} {
		if _, err := broker.New(broker.Config{Listen: listen, StoreDir: "x"}, slog.New(slog.DiscardHandler)); err != nil {
			t.Errorf("listen %q: %v", listen, err)
		}
	}
	if _, err := broker.New(broker.Config{Listen: ":0", AllowRemote: true, StoreDir: "x"}, slog.New(slog.DiscardHandler)); err != nil {
		t.Errorf("remote clients allowed: %v", err)
	}
}

func TestPortInUse(t *testing.T) {
	t.Parallel()
	var config net.ListenConfig
	l, err := config.Listen(t.Context(), "tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	b, err := broker.New(broker.Config{Listen: l.Addr().String(), StoreDir: t.TempDir()}, slog.New(slog.DiscardHandler))
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), patience)
	defer cancel()
	start := time.Now()
	if err := b.Start(ctx); err == nil || !strings.Contains(err.Error(), "in use") || !strings.Contains(err.Error(), l.Addr().String()) {
		t.Errorf("Start = %v, want the address named as in use", err)
	}
	if took := time.Since(start); took > 10*time.Second {
		t.Errorf("it took %v to say so", took)
	}
}

func TestNoOtherPortIsOpen(t *testing.T) {
	t.Parallel()
	b := newBroker(t, broker.Config{})
	if _, err := b.Status(t.Context()); err != nil {
		t.Fatal(err)
	}
	// The default port of the broker's own protocol.
	d := net.Dialer{Timeout: time.Second}
	if c, err := d.DialContext(t.Context(), "tcp", "127.0.0.1:4222"); err == nil {
		c.Close()
		t.Error("something listens on port 4222")
	}
}
