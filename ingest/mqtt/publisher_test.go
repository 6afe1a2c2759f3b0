package mqtt_test

import (
	"context"
	"errors"
	"fmt"
	"testing"
	"time"

	"throatwatch/ingest/broker"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

func TestPublisherConfig(t *testing.T) {
	for _, cfg := range []mqtt.PublisherConfig{
		{}, {URL: "http://localhost"}, {URL: "mqtt://"}, {URL: "mqtt://localhost", Queue: -1},
	} {
		if _, err := mqtt.NewPublisher(cfg); !errors.Is(err, mqtt.ErrConfig) {
			t.Errorf("%+v: error %v", cfg, err)
		}
	}
}

// Everything published arrives in order, over a cut link, a restarted broker, and
// published before there was a connection.
func TestPublisher(t *testing.T) {
	for name, start := range map[string]func() *mqtttest.Server{
		"embedded":  func() *mqtttest.Server { return mqtttest.Embedded(t, broker.Config{}) },
		"mosquitto": func() *mqtttest.Server { return mqtttest.Mosquitto(t) },
	} {
		t.Run(name, func(t *testing.T) {
			server := start()
			ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
			defer cancel()
			client, err := mqtt.New(mqtt.Config{URL: server.URL, Dir: t.TempDir(), Filters: []string{"rigs/a/#"}})
			if err != nil {
				t.Fatal(err)
			}
			proxy := mqtttest.NewProxy(t, server.Addr)
			p, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: "mqtt://" + proxy.Addr})
			if err != nil {
				t.Fatal(err)
			}
			ended := make(chan struct{}, 2)
			running, stop := context.WithCancel(ctx)
			go func() { _ = client.Run(running); ended <- struct{}{} }()
			<-client.Ready()

			// Messages of before the first connection wait.
			const all = 3000
			publish := func(from, to int) {
				t.Helper()
				for i := from; i < to; i++ {
					if err := p.Publish(ctx, "rigs/a/senml", fmt.Append(nil, i)); err != nil {
						t.Fatal(err)
					}
				}
			}
			publish(0, 100)
			if s := p.Stats(); s.Connected || s.Queued != 100 {
				t.Errorf("before Run: %+v", s)
			}
			go func() { _ = p.Run(running); ended <- struct{}{} }()
			<-p.Ready()
			for i := 100; i < all; i += 290 {
				publish(i, i+290)
				proxy.Cut()
			}
			if err := p.Flush(ctx); err != nil {
				t.Fatal(err)
			}
			if s := p.Stats(); s.Queued != 0 || s.Acknowledged != all || s.LastFailure == "" {
				t.Errorf("after Flush: %+v", s)
			}

			// A message sent again may come twice; it never comes before one that was
			// published earlier and has not come at all.
			next := 0
			for next < all {
				select {
				case m := <-client.Messages():
					client.Ack(m)
					var i int
					if _, err := fmt.Sscan(string(m.Payload), &i); err != nil || i > next {
						t.Fatalf("%q comes while %d is due", m.Payload, next)
					}
					if i == next {
						next++
					}
				case <-ctx.Done():
					t.Fatalf("%d of %d messages have come", next, all)
				}
			}
			stop()
			<-ended
			<-ended
		})
	}
}

// A full queue holds the caller, and a bad topic is refused.
func TestPublisherQueue(t *testing.T) {
	p, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: "mqtt://127.0.0.1:1", Queue: 2})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), 50*time.Millisecond)
	defer cancel()
	for i := range 3 {
		if err := p.Publish(ctx, "a", nil); (err != nil) != (i == 2) {
			t.Errorf("message %d: %v", i, err)
		}
	}
	if err := p.Publish(t.Context(), "a b", nil); !errors.Is(err, mqtt.ErrConfig) {
		t.Errorf("topic with a space: %v", err)
	}
}
