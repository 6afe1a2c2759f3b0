package main

import (
	"context"
	"math/rand/v2"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"github.com/cespare/xxhash/v2"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// kills is how often a daemon is killed in the middle of its run.
const kills = 6

// dataSystem publishes a whole test as the data system of a rig does, and notes
// what it published. It outlives the daemon.
type dataSystem struct {
	published []rehearsal.Message // all acknowledged by the broker at the end
	err       error
	ended     chan struct{}
}

// play publishes the quick test at double speed, 100 messages per second.
func play(t *testing.T, cfg pipeline.Config, broker string, seed uint64) *dataSystem {
	t.Helper()
	p, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: broker})
	if err != nil {
		t.Fatal(err)
	}
	d := &dataSystem{ended: make(chan struct{})}
	ctx, stop := context.WithCancel(context.Background())
	var running sync.WaitGroup
	running.Go(func() { _ = p.Run(ctx) }) // ends by stop
	go func() {
		defer close(d.ended)
		rig, err := rehearsal.New(cfg, rehearsal.Options{Scenario: rehearsal.Quick, Speed: 2, Rate: 100, Seed: seed, Start: time.Now().UnixNano()})
		if err != nil {
			d.err = err
			return
		}
		d.err = rehearsal.Run(ctx, rig, waitUntil, func(ctx context.Context, m rehearsal.Message) error {
			d.published = append(d.published, m)
			return p.Publish(ctx, m.Topic, m.Payload)
		})
		if d.err == nil {
			d.err = p.Flush(ctx)
		}
	}()
	t.Cleanup(func() { stop(); <-d.ended; running.Wait() })
	return d
}

// TestKilledDaemon kills the daemon again and again in the middle of a run while
// its data system publishes on: with a site broker that outlives it, and with the
// embedded one that dies with it, so that the data system has to reconnect and to
// send again. After each restart the run goes on. In the end everything that a
// broker has acknowledged is recorded, and is in the scans once.
func TestKilledDaemon(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct {
		name string
		seed uint64
		site bool
	}{
		{"site broker", 1, true},
		{"embedded broker", 2, false},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			// On a busy machine this process may publish late, which is no loss of the daemon's.
			rig, data := testRig(t, [2]string{"lateness: 120 ms", "lateness: 500 ms"}), dataFolder(t)
			_, cfg, faults := config.Load(rig)
			if err := watch.Faults(faults); err != nil {
				t.Fatal(err)
			}
			var broker string
			args := []string{"watch", rig, "--data", data, "--listen", "127.0.0.1:0"}
			if tt.site {
				broker = mqtttest.Mosquitto(t).URL
				args = append(args, "--broker", broker)
			} else {
				addr := mqtttest.FreeAddr(t)
				broker = "mqtt://" + addr
				args = append(args, "--broker-listen", addr)
			}
			p := start(t, args...)
			page := p.page()
			follow(t, page, "").await("the sessions are up", allConnected)
			system := play(t, cfg, broker, tt.seed)
			run := awaitRun(t, page)

			random := rand.New(rand.NewPCG(tt.seed, 1))
			for i := range kills {
				time.Sleep(time.Duration(100+random.IntN(3000)) * time.Millisecond)
				p.kill()
				if i%2 == 1 { // nobody restarts it at once
					time.Sleep(time.Duration(random.IntN(1500)) * time.Millisecond)
				}
				p = start(t, args...)
				page = p.page()
				on, epoch := watchedRun(t, page)
				if on == nil || on.ID != run || epoch != uint64(i)+2 {
					t.Fatalf("after restart %d the run is %+v in epoch %d, it was %s", i+1, on, epoch, run)
				}
			}
			live := follow(t, page, "")
			<-system.ended
			if system.err != nil {
				t.Fatalf("the data system: %v", system.err)
			}
			live.await("end of the run", isRun("ended"))
			p.stop()
			stored, _ := replayed(t, data)
			if stored.ID != run {
				t.Errorf("run %s is stored, %s was on", stored.ID, run)
			}
			checkRecords(t, filepath.Join(data, "runs", run+".db"), &cfg, system.published)
		})
	}
}

func allConnected(f *frame) bool {
	for _, s := range f.Sessions {
		if !s.Connected {
			return false
		}
	}
	return f.Kind == "status" && len(f.Sessions) > 0
}

// awaitRun waits until a run is on, and gives its id.
func awaitRun(t *testing.T, page string) string {
	t.Helper()
	f := follow(t, page, "").await("start of a run", func(f *frame) bool {
		return f.Run != nil && (f.Kind == "hello" || isRun("started")(f))
	})
	return f.Run.ID
}

// checkRecords steps a run file again. Every message published before its end must
// be recorded, and in the scans each channel must have as many samples as were
// published in their time.
func checkRecords(t *testing.T, path string, cfg *pipeline.Config, published []rehearsal.Message) {
	t.Helper()
	ctx := t.Context()
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	if err := f.Verify(ctx); err != nil {
		t.Errorf("the run file: %v", err)
	}
	m := pipeline.NewMachine(watch.Parse)
	p, err := pipeline.OpenReplay(ctx, f, m, 0)
	if err != nil {
		t.Fatal(err)
	}
	recorded := map[uint64]int{} // hash of payload → records
	samples := make([]int, len(cfg.Align.Channels))
	var records, boots, scans int
	var from, to int64 // event time that the scans cover
	var last uint64    // scan
	err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
		records++
		if r.Kind == ingest.KindMessage {
			recorded[xxhash.Sum64(r.Payload)]++
		}
		if r.Kind == ingest.KindBoot {
			boots++
		}
		if r.Kind == ingest.KindGap {
			t.Errorf("record %d: records before it were not stored: %s", r.Seq, r.Payload)
		}
		for i := range outs {
			o := &outs[i]
			if o.Kind != pipeline.OutcomePoint {
				continue
			}
			if scans++; scans == 1 {
				from = o.T - cfg.Align.Period
			} else if o.Scan.N != last+1 || o.T != to+cfg.Align.Period {
				t.Errorf("scan %d at %d follows scan %d at %d", o.Scan.N, o.T, last, to)
			}
			last, to = o.Scan.N, o.T
			for ch, n := range o.Scan.Samples {
				samples[ch] += int(n)
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}

	missing, doubled := 0, 0
	due := make([]int, len(samples))
	channel := map[string]int{}
	for i, c := range cfg.Align.Channels {
		channel[c.Name] = i
	}
	d := decode.New(decode.Limits{})
	for _, msg := range published {
		if msg.At > to {
			continue // after the end of the run: it lies in the idle file
		}
		switch n := recorded[xxhash.Sum64(msg.Payload)]; {
		case n == 0:
			missing++
		case n > 1:
			doubled += n - 1
		}
		if msg.At <= from {
			continue
		}
		for _, s := range d.Decode(decode.SenMLJSON, msg.Topic, msg.Payload, msg.At).Samples {
			due[channel[string(s.Name)]]++
		}
	}
	for i, n := range due {
		if samples[i] != n || n == 0 {
			t.Errorf("channel %s: %d samples in the scans, %d published in their time", cfg.Align.Channels[i].ID, samples[i], n)
		}
	}
	if missing > 0 || boots <= kills/2 || scans < 400 {
		t.Errorf("%d messages are missing; %d boots, %d scans", missing, boots, scans)
	}
	counters := &p.State.Align.Counters
	t.Logf("%d messages published and acknowledged, %d records in %d lives, %d messages came again, %d copies recognised, %d late, %d scans, %d missing",
		len(published), records, boots, doubled, counters[ingest.ReasonDuplicate], counters[ingest.ReasonLate], scans, missing)
}
