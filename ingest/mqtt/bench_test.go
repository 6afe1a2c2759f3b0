package mqtt_test

import (
	"context"
	"fmt"
	"sync"
	"testing"

	paho "github.com/eclipse/paho.mqtt.golang"

	"throatwatch/ingest/broker"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

// load publishes 1 kB messages at QoS 1 with at most 1000 unacknowledged until
// the benchmark ends.
func load(b *testing.B, url string) {
	b.Helper()
	payloads := make([][]byte, 64)
	for i := range payloads {
		payloads[i] = fmt.Appendf(nil, "%1024d", i)
	}
	p := publisher(b, url)
	ctx, cancel := context.WithCancel(b.Context())
	var all sync.WaitGroup
	tokens := make(chan paho.Token, 1000)
	all.Go(func() {
		defer close(tokens)
		for i := 0; ctx.Err() == nil; i++ {
			tokens <- p.Publish("rigs/r1/senml", 1, false, payloads[i%len(payloads)])
		}
	})
	all.Go(func() {
		for token := range tokens {
			token.Wait()
		}
	})
	b.Cleanup(func() { cancel(); all.Wait() })
}

// BenchmarkReceive compares the client, reading and acknowledging by hand, with
// a bare subscriber of the library on the same broker.
func BenchmarkReceive(b *testing.B) {
	var sink int
	rate := func(b *testing.B) {
		b.Helper()
		b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "msg/s")
	}
	b.Run("client", func(b *testing.B) {
		s := mqtttest.Embedded(b, broker.Config{})
		c, err := mqtt.New(mqtt.Config{URL: s.URL, Dir: b.TempDir(), Filters: []string{"rigs/r1/senml"}})
		if err != nil {
			b.Fatal(err)
		}
		var all sync.WaitGroup
		ctx, cancel := context.WithCancel(b.Context())
		all.Go(func() { _ = c.Run(ctx) })
		b.Cleanup(func() { cancel(); all.Wait() })
		<-c.Ready()
		load(b, s.URL)
		b.ReportAllocs()
		for b.Loop() {
			m := <-c.Messages()
			sink += len(m.Payload)
			c.Ack(m)
		}
		rate(b)
	})
	b.Run("bare", func(b *testing.B) {
		s := mqtttest.Embedded(b, broker.Config{})
		got := make(chan paho.Message, 2*mqtt.DefaultWindow)
		c := paho.NewClient(paho.NewClientOptions().AddBroker(s.URL).SetClientID("bare").SetCleanSession(false).
			SetAutoAckDisabled(true).SetDefaultPublishHandler(func(_ paho.Client, m paho.Message) { got <- m }))
		wait(b, c.Connect())
		b.Cleanup(func() { c.Disconnect(100) })
		wait(b, c.Subscribe("rigs/r1/senml", 1, nil))
		load(b, s.URL)
		b.ReportAllocs()
		for b.Loop() {
			m := <-got
			sink += len(m.Payload())
			m.Ack()
		}
		rate(b)
	})
	if sink == 0 {
		b.Fatal("nothing received")
	}
}
