package faults_test

import (
	"encoding/json"
	"slices"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/faults"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// wide is what stepping a rig of many channels comes to.
type wide struct {
	took   []time.Duration          // per scan, in order of size
	raised map[string]time.Duration // rule → host time of the alarm after its event time
	allocs float64                  // per message with its scan
}

// stepWide steps a start and an over-temperature, every pack 20 times a second.
func stepWide(t *testing.T, channels int) *wide {
	t.Helper()
	path, err := faults.Widen(rig, t.TempDir(), channels)
	if err != nil {
		t.Fatal(err)
	}
	bundle, cfg, found := config.Load(path)
	if err := watch.Faults(found); err != nil {
		t.Fatal(err)
	}
	began := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()
	r, err := rehearsal.New(cfg, rehearsal.Options{Seed: 1, Rate: 20, Start: began, Plan: []rehearsal.Segment{
		{Name: "light", Seconds: 6, Speed: 0.45, Starter: true, Fuel: true},
		{Name: "rich", Seconds: 4, Speed: 0.6, Fuel: true, EGT: 1150},
		{Name: "hold", Seconds: 6, Speed: 0.6, Fuel: true, EGT: 1150},
	}})
	if err != nil {
		t.Fatal(err)
	}
	m, s := pipeline.NewMachine(watch.Parse), &pipeline.State{}
	w := &wide{raised: map[string]time.Duration{}}
	take := func(rec ingest.Record) {
		rec.Seq = s.Seq + 1
		scans, at := s.Align.N, time.Now()
		outs := m.Step(s, &rec)
		if s.Align.N > scans && rec.Kind == ingest.KindMessage {
			w.took = append(w.took, time.Since(at)/time.Duration(s.Align.N-scans))
		}
		for i := range outs {
			if o := &outs[i]; o.Kind == pipeline.OutcomeAlarm && alarm.State(o.Alarm.State) == alarm.Unacknowledged {
				w.raised[o.Alarm.Rule] = time.Duration(rec.Host - int64(o.Alarm.Raised))
			}
		}
	}
	boot, err := json.Marshal(pipeline.Boot{Epoch: 1, Build: "test", GOARCH: "test"})
	if err != nil {
		t.Fatal(err)
	}
	take(ingest.Record{Kind: ingest.KindBoot, Host: began, Payload: boot})
	take(ingest.Record{Kind: ingest.KindConfig, Host: began, Payload: bundle.Marshal()})
	take(ingest.Record{Kind: ingest.KindConnect, Host: began, Topic: "rigs/cell_2/senml"})
	var msgs []rehearsal.Message
	for more := true; more; {
		msgs, more = r.Next(msgs)
	}
	const kept = 61 // of an engine that holds still
	for _, msg := range msgs[:len(msgs)-kept] {
		take(ingest.Record{Kind: ingest.KindMessage, Host: msg.At + msg.Delay, Topic: msg.Topic, Payload: msg.Payload})
	}
	slices.Sort(w.took)
	if len(w.took) < 200 || len(cfg.Compute.Channels) < channels {
		t.Fatalf("%d scans of %d channels", len(w.took), len(cfg.Compute.Channels))
	}
	next, scans := len(msgs)-kept, s.Align.N
	w.allocs = testing.AllocsPerRun(kept-1, func() {
		msg := &msgs[next]
		next++
		m.Step(s, &ingest.Record{Seq: s.Seq + 1, Kind: ingest.KindMessage, Host: msg.At + msg.Delay, Topic: msg.Topic, Payload: msg.Payload})
	})
	if got := s.Align.N - scans; got < kept-2 {
		t.Fatalf("%d scans of %d messages", got, kept)
	}
	return w
}

// TestTwoThousandChannels: with fifty times as many channels the same alarms come after
// the same time, to a scan; a scan takes less than its period, 50 ms; and the step of a
// message of all channels with its scan allocates nothing. It is not parallel: it
// measures.
func TestTwoThousandChannels(t *testing.T) {
	few, many := stepWide(t, 40), stepWide(t, 2000)
	median := func(w *wide) time.Duration { return w.took[len(w.took)/2] }
	t.Logf("a scan takes %v, of 40 channels %v; alarms after their event time %v, of 40 channels %v", median(many), median(few), many.raised, few.raised)
	if median(many) > 50*time.Millisecond {
		t.Errorf("a scan takes %v, its period is 50 ms", median(many))
	}
	if len(few.raised) == 0 || len(many.raised) != len(few.raised) {
		t.Errorf("alarms %v, of 40 channels %v", many.raised, few.raised)
	}
	for rule, late := range many.raised {
		if by := late - few.raised[rule]; by > 50*time.Millisecond {
			t.Errorf("%s: raised %v later than of 40 channels", rule, by)
		}
	}
	if many.allocs != 0 {
		t.Errorf("%g allocations in a message and its scan", many.allocs)
	}
}
