package watch

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
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

	// Speaks tells whether it may publish now; nil = always. What it keeps meanwhile is
	// the transitions of the last Overlap: those that another watch, which spoke until
	// just now, may not have told. It is set before Run.
	Speaks func() bool
	// Speaking tells how it stands to the other watch, for the status; nil = there is none.
	// It is set before Run.
	Speaking func() dashboard.Speaking

	mu     sync.Mutex // protects the newest, nil = published
	began  bool       // the alarms were told since it began to speak
	point  []byte
	status []byte
	alarms []byte
	events []event // alarm transitions not yet published, oldest first
}

// event is the frame of an alarm transition.
type event struct {
	body []byte
	at   time.Time // it was shown
}

// Overlap is for how long a watch that is silent keeps what it could have said: the other
// may have stopped before it did. What was said by both is known by alarm and revision.
const Overlap = 10 * time.Second

// errSilent is returned for what is not published because another watch speaks.
var errSilent = errors.New("another watch speaks")

// eventsKept bounds transitions that wait for the broker; the oldest go first,
// the retained list of standing alarms has their outcome.
const eventsKept = 1024

// NewOutbox gives an outbox for the topics of a rig; Run publishes.
func NewOutbox(rig string, pub Publisher, log *slog.Logger) *Outbox {
	return &Outbox{rig: rig, pub: pub, log: log, wake: make(chan struct{}, 1)}
}

// StatusTopic is where the state of the watch is retained.
func StatusTopic(rig string) string { return "rigs/" + rig + "/status" }

// OfflineStatus is what stands there when the watch is gone. Name is that of one of a
// pair: the other says within a second that it is there.
func OfflineStatus(name string) []byte {
	if name == "" {
		return []byte(`{"online":false}`)
	}
	return fmt.Appendf(nil, `{"online":false,"watch":%q}`, name)
}

// Take takes outcomes over. It never waits.
func (o *Outbox) Take(outs []pipeline.Outcome, m *pipeline.Machine, s *pipeline.State) {
	cfg, ok := m.Config()
	if !ok {
		return
	}
	speaks := o.speaks()
	o.mu.Lock()
	o.began = o.began && speaks
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
			if o.Speaking != nil {
				body = dashboard.WithSpeaking(body, o.Speaking())
			}
			o.status = append([]byte(`{"online":true,`), body[1:]...)
		case "alarm":
			changed = true
			if len(o.events) == eventsKept {
				o.events = o.events[1:]
			}
			o.events = append(o.events, event{body, time.Now()})
		}
	}
	// Also at first: what stands retained is of another life of the daemon, or of another
	// watch; and each minute: a broker may have lost it.
	if speaks && (changed || !o.began || o.alarms == nil && o.status != nil && s.Second%60 == 0) {
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
		if !o.speaks() {
			o.rest()
			o.keep(slices.DeleteFunc(events, func(e event) bool { return time.Since(e.at) > Overlap }), nil)
			continue
		}
		sent, err := 0, error(nil)
		for sent < len(events) && err == nil {
			if err = o.send(ctx, "alarm-changes", events[sent].body, 1, false); err == nil {
				sent++
			}
		}
		if alarms != nil && err == nil {
			err = o.send(ctx, "alarms", alarms, 1, true)
		}
		if status != nil && err == nil {
			err = o.send(ctx, "status", status, 1, true)
		}
		if point != nil && err == nil {
			err = o.send(ctx, "operating-point", point, 0, false)
		}
		if err != nil {
			o.keep(events[sent:], alarms)
		}
		if (err != nil) != failing && ctx.Err() == nil && !errors.Is(err, errSilent) {
			failing = err != nil
			o.log.Info("publishing over MQTT", "works", !failing, "err", err)
		}
	}
}

// rest makes it tell all alarms when it speaks again.
func (o *Outbox) rest() {
	o.mu.Lock()
	defer o.mu.Unlock()
	o.began = false
}

// keep takes back what must get through once the broker is there again.
func (o *Outbox) keep(events []event, alarms []byte) {
	o.mu.Lock()
	defer o.mu.Unlock()
	o.events = slices.Concat(events, o.events)
	o.events = o.events[max(0, len(o.events)-eventsKept):]
	if o.alarms == nil {
		o.alarms = alarms
	}
}

// send publishes a body, unless another watch speaks.
func (o *Outbox) send(ctx context.Context, leaf string, body []byte, qos byte, retained bool) error {
	if !o.speaks() {
		return errSilent
	}
	ctx, cancel := context.WithTimeout(ctx, 5*time.Second)
	defer cancel()
	return o.pub.Publish(ctx, "rigs/"+o.rig+"/"+leaf, body, qos, retained)
}

func (o *Outbox) speaks() bool { return o.Speaks == nil || o.Speaks() }
