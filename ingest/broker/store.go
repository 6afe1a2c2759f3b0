package broker

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"maps"
	"slices"
	"strings"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go/jetstream"
)

// Where the broker keeps MQTT messages and sessions. The names are part of its
// stored format; the restart and status tests fail if a new version moves them.
const (
	messageStream  = "$MQTT_msgs"
	sessionStream  = "$MQTT_sess"
	sessionSubject = "$MQTT.sess."
)

const (
	// expireWait is the AckWait that makes everything unacknowledged due.
	expireWait = time.Millisecond
	// expireTime is how long it stays: the broker looks at its timers 100 ms
	// after such a change.
	expireTime = 150 * time.Millisecond
)

// redeliver makes every message due that a session of the last life holds
// unacknowledged. The broker would otherwise wait for the rest of AckWait and
// send newer messages first. It must run while no client is connected: a
// connected one would get its backlog again each millisecond. Consumers are
// brought to the configured window and AckWait in passing, which also repairs a
// process that was killed in between.
func (b *Broker) redeliver(ctx context.Context, js jetstream.JetStream) error {
	consumers, err := listConsumers(ctx, js)
	if err != nil {
		return err
	}
	update := func(info *jetstream.ConsumerInfo, wait time.Duration) error {
		cfg := info.Config
		cfg.AckWait, cfg.MaxAckPending = wait, b.cfg.MaxAckPending
		if _, err := js.UpdatePushConsumer(ctx, messageStream, cfg); err != nil {
			return fmt.Errorf("consumer %s: %w", info.Name, err)
		}
		return nil
	}
	expired := 0
	for _, info := range consumers {
		if info.NumAckPending == 0 {
			continue
		}
		if err := update(info, expireWait); err != nil {
			return err
		}
		expired += info.NumAckPending
	}
	if expired > 0 {
		b.log.Info("broker hands out unacknowledged messages again", "messages", expired)
		select {
		case <-time.After(expireTime):
		case <-ctx.Done():
			return ctx.Err()
		}
	}
	for _, info := range consumers {
		if info.NumAckPending == 0 && info.Config.AckWait == b.cfg.AckWait && info.Config.MaxAckPending == b.cfg.MaxAckPending {
			continue
		}
		if err := update(info, b.cfg.AckWait); err != nil {
			return err
		}
	}
	return nil
}

// listConsumers gives the consumers of the message stream; none when no MQTT
// client has ever connected.
func listConsumers(ctx context.Context, js jetstream.JetStream) ([]*jetstream.ConsumerInfo, error) {
	stream, err := js.Stream(ctx, messageStream)
	if errors.Is(err, jetstream.ErrStreamNotFound) {
		return nil, nil
	}
	if err != nil {
		return nil, fmt.Errorf("stream %s: %w", messageStream, err)
	}
	var all []*jetstream.ConsumerInfo
	list := stream.ListConsumers(ctx)
	for info := range list.Info() {
		all = append(all, info)
	}
	if err := list.Err(); err != nil {
		return nil, fmt.Errorf("consumers of %s: %w", messageStream, err)
	}
	return all, nil
}

// Status is what the broker's store holds.
type Status struct {
	Bytes       uint64 // of messages that some session has not acknowledged
	Messages    uint64
	Limit       int64 // bytes; beyond it publishers are disconnected unacknowledged
	Connections int   // MQTT clients connected now
	// Sessions are the persistent sessions that hold the most, most first, at
	// most maxReported. A session that is away and holds much is the cause of a
	// growing store: name it in the alarm.
	Sessions []Session
}

// Session is a persistent MQTT session.
type Session struct {
	ID        string // client id; the daemon's own are shortened, they are secrets
	Filters   []string
	Held      uint64 // messages waiting or sent and not acknowledged
	Unacked   int    // of these, sent and not acknowledged
	Connected bool
	Address   string // of the client, when connected
}

const maxReported = 8

// Status asks the store what it holds. It returns an error when the broker is
// not running or its store has failed (a full or broken disk switches it off):
// publishers are then not acknowledged.
func (b *Broker) Status(ctx context.Context) (Status, error) {
	b.mu.Lock()
	s, js := b.server, b.js
	b.mu.Unlock()
	if js == nil {
		return Status{}, errors.New("broker: not started")
	}
	status := Status{Limit: b.cfg.MaxStore}
	clients, err := connected(s)
	if err != nil {
		return Status{}, fmt.Errorf("broker: connections: %w", err)
	}
	status.Connections = len(clients)

	stream, err := js.Stream(ctx, messageStream)
	if errors.Is(err, jetstream.ErrStreamNotFound) {
		return status, nil
	}
	if err != nil {
		return Status{}, fmt.Errorf("broker: store: %w", err)
	}
	state := stream.CachedInfo().State
	status.Bytes, status.Messages = state.Bytes, state.Msgs
	consumers, err := listConsumers(ctx, js)
	if err != nil {
		return Status{}, fmt.Errorf("broker: %w", err)
	}
	status.Sessions, err = heldBySession(ctx, js, consumers, clients)
	if err != nil {
		return Status{}, fmt.Errorf("broker: %w", err)
	}
	return status, nil
}

// connected maps the client ids of connected MQTT clients to their addresses.
func connected(s *server.Server) (map[string]string, error) {
	list, err := s.Connz(&server.ConnzOptions{Limit: maxConnections})
	if err != nil {
		return nil, err
	}
	clients := make(map[string]string)
	for _, c := range list.Conns {
		if c.MQTTClient != "" {
			clients[c.MQTTClient] = fmt.Sprintf("%s:%d", c.IP, c.Port)
		}
	}
	return clients, nil
}

// heldBySession sums consumers by session: a consumer is named after the hash
// of its session's client id, and the session's record is stored under it.
func heldBySession(ctx context.Context, js jetstream.JetStream, consumers []*jetstream.ConsumerInfo, clients map[string]string) ([]Session, error) {
	byHash := make(map[string]*Session)
	for _, info := range consumers {
		hash, _, _ := strings.Cut(info.Name, "_")
		sess := byHash[hash]
		if sess == nil {
			sess = &Session{}
			byHash[hash] = sess
		}
		sess.Held += info.NumPending + uint64(info.NumAckPending)
		sess.Unacked += info.NumAckPending
	}
	hashes := slices.SortedFunc(maps.Keys(byHash), func(a, b string) int {
		return cmp.Or(cmp.Compare(byHash[b].Held, byHash[a].Held), cmp.Compare(a, b))
	})
	if len(hashes) == 0 {
		return nil, nil
	}
	records, err := js.Stream(ctx, sessionStream)
	if err != nil {
		return nil, fmt.Errorf("stream %s: %w", sessionStream, err)
	}
	var out []Session
	for _, hash := range hashes[:min(len(hashes), maxReported)] {
		sess := byHash[hash]
		sess.ID = "unknown session " + hash
		msg, err := records.GetLastMsgForSubject(ctx, sessionSubject+hash)
		switch {
		case errors.Is(err, jetstream.ErrMsgNotFound): // ended meanwhile
		case err != nil:
			return nil, fmt.Errorf("session %s: %w", hash, err)
		default:
			var record struct {
				ID   string          `json:"id"`
				Subs map[string]byte `json:"subs"`
			}
			if err := json.Unmarshal(msg.Data, &record); err != nil {
				return nil, fmt.Errorf("session %s: %w", hash, err)
			}
			sess.ID = shortID(record.ID)
			for subject := range record.Subs {
				sess.Filters = append(sess.Filters, topicFilter(subject))
			}
			slices.Sort(sess.Filters)
			sess.Address, sess.Connected = clients[record.ID]
		}
		out = append(out, *sess)
	}
	return out, nil
}

// topicFilter gives the MQTT form of a filter as the broker stores it, where
// "." separates levels, "//" stands for "." and "/" for an empty level.
func topicFilter(subject string) string {
	if strings.HasSuffix(subject, "./") { // an empty last level
		subject = subject[:len(subject)-1]
	}
	return strings.NewReplacer("//", ".", "/.", "/", ".", "/", "*", "+", ">", "#").Replace(subject)
}

// LogValue keeps log lines short.
func (s Session) LogValue() slog.Value {
	return slog.GroupValue(slog.String("id", s.ID), slog.Uint64("held", s.Held), slog.Bool("connected", s.Connected))
}
