package main

import (
	"context"
	"fmt"
	"net/http"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

// TestFlood: while a test is on, eight publishers send as fast as the broker takes it
// what nobody asked for, many times as much as the rig does. Points and alarms go on in
// time, memory stays bounded, and every message of the flood is counted by reason.
func TestFlood(t *testing.T) {
	const (
		publishers = 8
		memory     = 600e6 // bytes; the race detector takes several times what is used
		pause      = 2 * time.Second
	)
	site := mqtttest.Mosquitto(t)
	p := start(t, "watch", testRig(t), "--data", dataFolder(t), "--listen", "127.0.0.1:0", "--broker", site.URL, "--rehearse", "--quick", "--speed", "2")
	page := p.page()
	live := follow(t, page, "")
	live.await("a choked throat, some seconds before it unchokes", isPoint("choked"))
	before := time.Now()

	ctx, stop := context.WithCancel(t.Context())
	var flood sync.WaitGroup
	var sent atomic.Int64
	for range publishers {
		pub, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: site.URL, Queue: 100})
		if err != nil {
			t.Fatal(err)
		}
		flood.Go(func() { _ = pub.Run(ctx) }) // ends by stop
		flood.Go(func() {
			for n := 0; ctx.Err() == nil; n++ {
				text := fmt.Appendf(nil, "flood a=%d,b=%d,c=%d %d\n", n, n+1, n+2, time.Now().UnixNano())
				if pub.Publish(ctx, "rigs/cell_2/lines", text) == nil {
					sent.Add(1)
				}
			}
		})
	}
	raised(t, live, "unchoke", "caution")
	code, body := fetch(t, http.MethodGet, page+"/metrics", nil)
	stop()
	flood.Wait()
	if code != http.StatusOK {
		t.Fatalf("/metrics: %d", code)
	}
	last, longest, points := before, time.Duration(0), 0
	for _, f := range live.seen() {
		if f.Kind == "operating_point" && f.at.After(before) {
			longest, last = max(longest, f.at.Sub(last)), f.at
			points++
		}
	}
	resident := metric(t, string(body), "throatwatch_process_resident_memory_bytes")
	unknown := metric(t, string(body), `throatwatch_not_used_total{reason="unknown_channel"}`)
	taken := metric(t, string(body), "throatwatch_messages_total")
	t.Logf("%d messages sent, %.0f taken, %.0f values of no channel; %d points, the longest pause between two %v; %.0f MB", sent.Load(), taken, unknown, points, longest, resident/1e6)
	if flood := unknown / 3; flood < 10*(taken-flood) { // of these messages has each three values
		t.Errorf("%.0f messages of the flood and %.0f of the rig were taken: it was no flood", flood, taken-flood)
	}
	if longest > pause {
		t.Errorf("there was no point for %v", longest)
	}
	if resident > memory {
		t.Errorf("%.0f MB", resident/1e6)
	}
	p.stop()
}
