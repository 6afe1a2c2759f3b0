package main

import (
	"context"
	"encoding/json"
	"errors"
	"maps"
	"math"
	"path/filepath"
	"slices"
	"sync"
	"syscall"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/faults"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

const pairSecret = "shared by two watches, 32 bytes."

// told is what is published about a rig.
type told struct {
	topic string
	by    string // the watch that speaks, of a status
	alarm alarm  // of a change
	body  []byte
	at    time.Time
}

// spoken gathers what watches publish.
type spoken struct {
	mu  sync.Mutex // protects all
	all []told
}

// overhear gathers what is published about the rig from now on.
func overhear(t *testing.T, broker string) *spoken {
	t.Helper()
	c, err := mqtt.New(mqtt.Config{URL: broker, Dir: t.TempDir(), Filters: []string{
		"rigs/cell_2/status", "rigs/cell_2/alarms", "rigs/cell_2/alarm-changes", "rigs/cell_2/actions",
	}})
	if err != nil {
		t.Fatal(err)
	}
	s := &spoken{}
	ctx, stop := context.WithCancel(context.Background())
	var running sync.WaitGroup
	running.Go(func() { _ = c.Run(ctx) }) // ends by stop
	running.Go(func() {
		for m := range c.Messages() {
			var f struct {
				Speaking *speaking
				Alarm    alarm
			}
			_ = json.Unmarshal(m.Payload, &f) // a list of alarms is none
			got := told{topic: filepath.Base(m.Topic), alarm: f.Alarm, body: m.Payload, at: time.Now()}
			if f.Speaking != nil {
				got.by = f.Speaking.Watch
			}
			c.Ack(m)
			if m.Flags&ingest.FlagRetained == 0 {
				s.mu.Lock()
				s.all = append(s.all, got)
				s.mu.Unlock()
			}
		}
	})
	t.Cleanup(func() { stop(); running.Wait() })
	<-c.Ready()
	return s
}

func (s *spoken) on(topic string) []told {
	s.mu.Lock()
	defer s.mu.Unlock()
	return slices.DeleteFunc(slices.Clone(s.all), func(g told) bool { return g.topic != topic })
}

// wholeTest is a test published as the data system of a rig does, with what was.
type wholeTest struct {
	published []rehearsal.Message // all acknowledged by the broker at the end
	err       error
	ended     chan struct{}
}

// publishTest publishes the quick test at double speed, at most so much of it: slowly enough
// that watches of a race test store it on a busy machine.
func publishTest(t *testing.T, cfg pipeline.Config, broker string, length time.Duration) *wholeTest {
	t.Helper()
	enough := errors.New("enough")
	p, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: broker})
	if err != nil {
		t.Fatal(err)
	}
	rig, err := rehearsal.New(cfg, rehearsal.Options{Scenario: rehearsal.Quick, Speed: 2, Rate: 25, Seed: 3, Start: time.Now().UnixNano()})
	if err != nil {
		t.Fatal(err)
	}
	d := &wholeTest{ended: make(chan struct{})}
	ctx, stop := context.WithCancel(context.Background())
	var running sync.WaitGroup
	running.Go(func() { _ = p.Run(ctx) }) // ends by stop
	running.Go(func() {
		defer close(d.ended)
		d.err = rehearsal.Run(ctx, rig, waitUntil, func(ctx context.Context, m rehearsal.Message) error {
			if d.published = append(d.published, m); m.At-d.published[0].At > int64(length) {
				return errors.Join(enough, p.Publish(ctx, m.Topic, m.Payload))
			}
			return p.Publish(ctx, m.Topic, m.Payload)
		})
		if errors.Is(d.err, enough) {
			d.err = nil
		}
		d.err = errors.Join(d.err, p.Flush(ctx))
	})
	t.Cleanup(func() { stop(); running.Wait() })
	return d
}

// saysSpeaks tells that a watch says after some time that another, or itself, speaks.
func saysSpeaks(after time.Time, name string) func(*frame) bool {
	return func(f *frame) bool {
		s := f.Speaking
		return f.Kind == "status" && f.at.After(after) && s != nil && s.Name != nil && *s.Name == name
	}
}

// TestPair lets two watches stand over one rig. The one that speaks is stopped for a
// while and later another is killed: the other speaks within 5 s, and one that was
// stopped is silent when it goes on. What is acknowledged at either is at both. Both
// compute and record all that the broker has taken while they live, with the same alarms.
func TestPair(t *testing.T) {
	rig := testRig(t, [2]string{"lateness: 120 ms", "lateness: 500 ms"})
	_, cfg, wrong := config.Load(rig)
	if err := watch.Faults(wrong); err != nil {
		t.Fatal(err)
	}
	broker := mqtttest.Mosquitto(t).URL
	heard := overhear(t, broker)
	secret := secretFile(t, "pair", pairSecret)
	data := map[string]string{"alpha": dataFolder(t), "beta": dataFolder(t)}
	begin := func(name string) *program {
		return start(t, "watch", rig, "--data", data[name], "--listen", "127.0.0.1:0", "--broker", broker, "--pair", name, "--pair-secret-file", secret)
	}
	alpha := begin("alpha")
	atAlpha := follow(t, alpha.page(), "")
	atAlpha.await("alpha speaks, alone", saysSpeaks(time.Time{}, "alpha"))
	beta := begin("beta")
	atBeta := follow(t, beta.page(), "")
	atBeta.await("beta hears that alpha speaks", saysSpeaks(time.Time{}, "alpha"))
	atAlpha.await("alpha hears beta", func(f *frame) bool {
		return f.Speaking != nil && f.Speaking.Other != nil && *f.Speaking.Other == "beta"
	})

	system := publishTest(t, cfg, broker, 26*time.Second)
	run := awaitRun(t, beta.page())
	raised := atBeta.await("an alarm", func(f *frame) bool {
		return f.Kind == "alarm" && f.Alarm.State == "unacknowledged" && f.Alarm.Priority == "caution"
	})
	acknowledge(t, beta.page(), atBeta, raised)
	atAlpha.await("the acknowledgement at alpha", func(f *frame) bool {
		return f.Kind == "alarm" && f.Alarm.ID == raised.Alarm.ID && f.Alarm.State == "acknowledged"
	})

	// Stopped, the one that speaks does not know that it is.
	stopped := time.Now()
	toProcess(t, alpha, syscall.SIGSTOP)
	spoke := atBeta.await("beta speaks in its place", saysSpeaks(stopped, "beta"))
	took := spoke.at.Sub(stopped)
	toProcess(t, alpha, syscall.SIGCONT)
	again := time.Now()
	atAlpha = follow(t, alpha.page(), "") // one that looked before is told that it is behind
	yields := atAlpha.await("alpha yields", saysSpeaks(again, "beta"))
	for _, g := range heard.on("status") {
		if g.by == "alpha" && g.at.After(again) {
			t.Errorf("alpha speaks %v after it went on, beta speaks since %v", g.at.Sub(again), again.Sub(spoke.at))
		}
	}
	t.Logf("stopped: beta speaks after %v, alpha knows %v after it goes on", took, yields.at.Sub(again))

	over := atBeta.await("another alarm", func(f *frame) bool {
		return f.Kind == "alarm" && f.Alarm.Rule == "egt_run_max_over" && f.Alarm.State == "unacknowledged"
	})
	atBeta.await("a while in which it is recorded", func(f *frame) bool { return f.at.Sub(over.at) > time.Second })
	killed := time.Now()
	beta.kill()
	back := atAlpha.await("alpha speaks in the place of beta", saysSpeaks(killed, "alpha"))
	t.Logf("killed: alpha speaks after %v", back.at.Sub(killed))
	if late := back.at.Sub(killed); late > 5*time.Second || took > 5*time.Second {
		t.Errorf("nobody speaks for %v after a stop, for %v after a kill; 5 s are promised", took, late)
	}
	<-system.ended
	if system.err != nil {
		t.Fatalf("the data system: %v", system.err)
	}
	last := time.Unix(0, system.published[len(system.published)-1].At)
	atAlpha.await("the last scan", func(f *frame) bool {
		scan, err := time.Parse(time.RFC3339Nano, f.T)
		return f.Kind == "operating_point" && err == nil && !scan.Before(last)
	})
	alpha.stop()

	// Both files are compared up to where beta was killed.
	path := func(name string) string { return filepath.Join(data[name], "runs", run+".db") }
	atOne, end := raisedIn(t, path("beta"), math.MaxInt64)
	atOther, _ := raisedIn(t, path("alpha"), end)
	if !slices.Equal(atOne, atOther) || len(atOne) < 2 {
		t.Errorf("alarms at beta: %q\nat alpha: %q", atOne, atOther)
	}
	until := map[string]int64{"alpha": math.MaxInt64, "beta": end - int64(time.Second)} // which was recorded
	for name, end := range until {
		c, err := faults.Count(t.Context(), data[name], &cfg, slices.DeleteFunc(slices.Clone(system.published), func(m rehearsal.Message) bool { return m.At > end }))
		if err != nil {
			t.Fatal(err)
		}
		if t.Logf("%s: %+v", name, c); c.Recorded != c.Accepted || c.Gaps+c.Late+c.Skipped > 0 || name == "alpha" && !c.Lossless() {
			t.Errorf("%s has lost something", name)
		}
	}
	alarms, _ := raisedIn(t, path("alpha"), math.MaxInt64)
	changes := map[string]bool{}
	for _, g := range heard.on("alarm-changes") {
		changes[g.alarm.ID] = true
	}
	for _, id := range alarms {
		if !changes[id] {
			t.Errorf("alarm %s was told by neither", id)
		}
	}
}

func toProcess(t *testing.T, p *program, s syscall.Signal) {
	t.Helper()
	if err := p.cmd.Process.Signal(s); err != nil {
		t.Fatal(err)
	}
}

// raisedIn gives the alarms on the engine that were raised in a run up to a scan, sorted,
// and the last scan there is. Those on the watch itself, its broker and its sources, each
// watch has by its own clock.
func raisedIn(t *testing.T, path string, upTo int64) (list []string, last int64) {
	t.Helper()
	f, err := runfile.Open(t.Context(), path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	p, err := pipeline.OpenReplay(t.Context(), f, pipeline.NewMachine(watch.Parse), 0)
	if err != nil {
		t.Fatal(err)
	}
	ids := map[string]bool{}
	if err := p.Run(t.Context(), 0, func(_ *ingest.Record, outs []pipeline.Outcome) error {
		points := map[int64]bool{}
		for i := range outs {
			if o := &outs[i]; o.T > upTo {
				continue
			} else if o.Kind == pipeline.OutcomePoint {
				points[o.T], last = true, o.T
			} else if o.Kind == pipeline.OutcomeAlarm && o.Alarm.Raise && points[o.T] {
				ids[o.Alarm.ID] = true
			}
		}
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return slices.Sorted(maps.Keys(ids)), last
}
