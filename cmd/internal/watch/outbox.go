package watch

import (
	"context"
	"encoding/json"
	"log/slog"
	"slices"
	"sync"
	"time"

	"throatwatch/dashboard"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// Publisher sends a message to the broker.
type Publisher interface {
	Publish(ctx context.Context, topic string, payload []byte, qos byte, retained bool) error
}

// Outbox publishes what was shown over MQTT: operating points, the standing
// alarms and the status. It keeps the newest of each only, so a slow broker
// costs points and never an alarm's state.
type Outbox struct {
	rig  string
	pub  Publisher
	log  *slog.Logger
	wake chan struct{} // one slot: full means something new is there already

	mu     sync.Mutex // protects the newest, nil = published
	began  bool       // the alarms were told once
	point  []byte
	status []byte
	alarms []byte
	events [][]byte // alarm transitions not yet published, oldest first
}

// eventsKept bounds transitions that wait for the broker; the oldest go first,
// the retained list of standing alarms has their outcome.
const eventsKept = 1024

// NewOutbox gives an outbox for the topics of a rig; Run publishes.
func NewOutbox(rig string, pub Publisher, log *slog.Logger) *Outbox {
	return &Outbox{rig: rig, pub: pub, log: log, wake: make(chan struct{}, 1)}
}

// StatusTopic is where the state of the watch is retained.
func StatusTopic(rig string) string { return "rigs/" + rig + "/status" }

// OfflineStatus is what stands there when the watch is gone.
func OfflineStatus() []byte { return []byte(`{"online":false}`) }

// Take takes outcomes over. It never waits.
func (o *Outbox) Take(outs []pipeline.Outcome, m *pipeline.Machine, s *pipeline.State) {
	cfg, ok := m.Config()
	if !ok {
		return
	}
	o.mu.Lock()
	changed := false
	for i := range outs {
		body, kind, ok := dashboard.EncodeFrame(&outs[i], &cfg)
		if !ok {
			continue
		}
		switch kind {
		case "operating_point":
			o.point = body
		case "status":
			o.status = append([]byte(`{"online":true,`), body[1:]...)
		case "alarm":
			changed = true
			if len(o.events) == eventsKept {
				o.events = o.events[1:]
			}
			o.events = append(o.events, body)
		}
	}
	// Also at first: what stands retained is of another life of the daemon; and each
	// minute: a broker may have lost it.
	if changed || !o.began || o.alarms == nil && o.status != nil && s.Second%60 == 0 {
		o.began = true
		alarms := m.Alarms(s)
		if alarms == nil {
			alarms = []rules.Alarm{}
		}
		if b, err := json.Marshal(alarms); err == nil {
			o.alarms = b
		}
	}
	o.mu.Unlock()
	select {
	case o.wake <- struct{}{}:
	default:
	}
}

// Run publishes until ctx ends.
func (o *Outbox) Run(ctx context.Context) {
	failing := false
	for {
		select {
		case <-ctx.Done():
			return
		case <-o.wake:
		}
		o.mu.Lock()
		point, status, alarms, events := o.point, o.status, o.alarms, o.events
		o.point, o.status, o.alarms, o.events = nil, nil, nil, nil
		o.mu.Unlock()
		sent, err := o.send(ctx, "alarm-changes", events, 1, false)
		if alarms != nil && err == nil {
			_, err = o.send(ctx, "alarms", [][]byte{alarms}, 1, true)
		}
		if status != nil && err == nil {
			_, err = o.send(ctx, "status", [][]byte{status}, 1, true)
		}
		if point != nil && err == nil {
			_, err = o.send(ctx, "operating-point", [][]byte{point}, 0, false)
		}
		if err != nil {
			o.keep(events[sent:], alarms)
		}
		if (err != nil) != failing && ctx.Err() == nil {
			failing = err != nil
			o.log.Info("publishing over MQTT", "works", !failing, "err", err)
		}
	}
}

// keep takes back what must get through once the broker is there again.
func (o *Outbox) keep(events [][]byte, alarms []byte) {
	o.mu.Lock()
	defer o.mu.Unlock()
	o.events = slices.Concat(events, o.events)
	o.events = o.events[max(0, len(o.events)-eventsKept):]
	if o.alarms == nil {
		o.alarms = alarms
	}
}

// send publishes in order and tells how many got through.
func (o *Outbox) send(ctx context.Context, leaf string, bodies [][]byte, qos byte, retained bool) (sent int, err error) {
	ctx, cancel := context.WithTimeout(ctx, 5*time.Second)
	defer cancel()
	for sent < len(bodies) {
		if err := o.pub.Publish(ctx, "rigs/"+o.rig+"/"+leaf, bodies[sent], qos, retained); err != nil {
			return sent, err
		}
		sent++
	}
	return sent, nil
}
