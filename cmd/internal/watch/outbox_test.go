package watch_test

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// siteBroker takes what an outbox publishes, or refuses it.
type siteBroker struct {
	mu    sync.Mutex // protects the fields below
	away  bool
	after int                 // messages that get through yet before it goes away; 0 = no end
	got   map[string][]string // topic → bodies
	flags map[string]string   // topic → QoS and retain flag of the newest
}

func (b *siteBroker) Publish(_ context.Context, topic string, payload []byte, qos byte, retained bool) error {
	b.mu.Lock()
	defer b.mu.Unlock()
	if b.away {
		return errors.New("not connected")
	}
	b.got[topic] = append(b.got[topic], string(payload))
	b.flags[topic] = fmt.Sprint(qos, retained)
	if b.after > 0 {
		b.after--
		b.away = b.after == 0
	}
	return nil
}

func (b *siteBroker) set(away bool, after int) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.away, b.after = away, after
}

func (b *siteBroker) on(topic string) []string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return slices.Clone(b.got["rigs/bench_1/"+topic])
}

// An outbox tells the standing alarms at first, every change of an alarm in order
// also over a time without a broker, and of points and status the newest only.
func TestOutbox(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		store, core := openCore(t, dir, runfile.Options{})
		feed := watch.NewFeed(core, store)
		must(t, feed.Begin(t.Context(), pipeline.Boot{Epoch: 1}, smallBundle(t), testBegin))
		b := &siteBroker{got: map[string][]string{}, flags: map[string]string{}}
		o := watch.NewOutbox("bench_1", b, slog.New(slog.DiscardHandler))
		ctx, stop := context.WithCancel(t.Context())
		ended := make(chan struct{})
		go func() { o.Run(ctx); close(ended) }()
		changes := 0
		take := func(outs ...pipeline.Outcome) {
			o.Take(outs, core.Machine, core.State)
			synctest.Wait()
		}
		change := func() pipeline.Outcome {
			changes++
			return pipeline.Outcome{Kind: pipeline.OutcomeAlarm, N: uint64(changes), Alarm: &rules.Alarm{ID: "x", State: rules.AlarmState(alarm.Unacknowledged)}}
		}
		status := func() pipeline.Outcome {
			return pipeline.Outcome{Kind: pipeline.OutcomeStatus, T: time.Now().UnixNano(), Status: &pipeline.Status{}}
		}

		take(status())
		if got := b.on("alarms"); !slices.Equal(got, []string{"[]"}) {
			t.Errorf("at first the alarms that stand are told as %q", got)
		}
		if got := b.on("status"); len(got) != 1 || !strings.HasPrefix(got[0], `{"online":true,"kind":"status"`) {
			t.Errorf("the status is %q", got)
		}
		take(change(), change())
		b.set(false, 2) // it goes away in the middle of five
		take(change(), change(), change(), change(), change())
		for range 3 {
			take(change(), status())
		}
		b.set(false, 0)
		take(status())
		got := b.on("alarm-changes")
		for i, body := range got {
			var f struct{ N int }
			if err := json.Unmarshal([]byte(body), &f); err != nil || f.N != i+1 {
				t.Errorf("change %d is told as %s", i+1, body)
			}
		}
		if len(got) != changes {
			t.Errorf("%d changes of alarms are told, there were %d", len(got), changes)
		}
		if n := len(b.on("status")); n != 2 {
			t.Errorf("%d times the status is told: old ones are of no use", n)
		}
		if n := len(b.on("alarms")); n != 3 {
			t.Errorf("%d times the standing alarms are told: at first, with the first changes, and after the broker was away", n)
		}

		b.set(true, 0)
		for range 1500 {
			take(change())
		}
		b.set(false, 0)
		take(change())
		if got := b.on("alarm-changes"); len(got) != 10+1024 || !strings.Contains(got[len(got)-1], fmt.Sprintf(`"n":%d,`, changes)) {
			t.Errorf("%d changes are told after 1501 without a broker: the newest 1024 are due", len(got)-10)
		}
		for topic, want := range map[string]string{"alarm-changes": "1 false", "alarms": "1 true", "status": "1 true"} {
			if got := b.flags["rigs/bench_1/"+topic]; got != want {
				t.Errorf("%s goes out with QoS and retain flag %s, want %s", topic, got, want)
			}
		}
		stop()
		<-ended
		must(t, store.Close(context.WithoutCancel(ctx)))
	})
}

// One of two watches is silent while the other speaks. When it begins to speak it tells
// all alarms that stand, and the changes of the last seconds: the other may have fallen
// silent before it told them.
func TestOutboxSilent(t *testing.T) {
	t.Parallel()
	dir := memory(t)
	synctest.Test(t, func(t *testing.T) {
		store, core := openCore(t, dir, runfile.Options{})
		feed := watch.NewFeed(core, store)
		must(t, feed.Begin(t.Context(), pipeline.Boot{Epoch: 1}, smallBundle(t), testBegin))
		b := &siteBroker{got: map[string][]string{}, flags: map[string]string{}}
		o := watch.NewOutbox("bench_1", b, slog.New(slog.DiscardHandler))
		var speaks atomic.Bool
		other := "alpha"
		o.Speaks = speaks.Load
		o.Speaking = func() dashboard.Speaking { return dashboard.Speaking{Watch: "beta", Other: &other} }
		ctx, stop := context.WithCancel(t.Context())
		ended := make(chan struct{})
		go func() { o.Run(ctx); close(ended) }()
		take := func(outs ...pipeline.Outcome) {
			o.Take(outs, core.Machine, core.State)
			synctest.Wait()
		}
		change := func(n uint64) pipeline.Outcome {
			return pipeline.Outcome{Kind: pipeline.OutcomeAlarm, N: n, Alarm: &rules.Alarm{ID: "x", State: rules.AlarmState(alarm.Unacknowledged)}}
		}
		status := pipeline.Outcome{Kind: pipeline.OutcomeStatus, T: 1, Status: &pipeline.Status{}}

		take(change(1), status)
		time.Sleep(watch.Overlap + time.Second)
		take(change(2), status)
		if len(b.got) != 0 {
			t.Errorf("silent, it tells %v", b.got)
		}
		time.Sleep(4 * time.Second) // the other has fallen silent in this time
		speaks.Store(true)
		take(status)
		if got := b.on("alarm-changes"); len(got) != 1 || !strings.Contains(got[0], `"n":2,`) {
			t.Errorf("it begins with the changes %q", got)
		}
		if got := b.on("alarms"); !slices.Equal(got, []string{"[]"}) {
			t.Errorf("it begins with the alarms %q", got)
		}
		if got := b.on("status"); len(got) != 1 || !strings.Contains(got[0], `"speaking":{"watch":"beta","name":null,"since":null,"other":"alpha","why":""}}`) {
			t.Errorf("it begins with the status %q", got)
		}
		speaks.Store(false)
		take(change(3), status)
		if n := len(b.on("alarm-changes")) + len(b.on("status")); n != 2 {
			t.Errorf("silent again, it tells %v", b.got)
		}
		speaks.Store(true)
		take(status)
		if n := len(b.on("alarms")); n != 2 {
			t.Errorf("the alarms are told %d times, each time that it begins to speak", n)
		}
		stop()
		<-ended
		must(t, store.Close(context.WithoutCancel(ctx)))
	})
}
