package main

import (
	"context"
	"encoding/json"
	"net/http"
	"os"
	"strings"
	"sync"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
	"throatwatch/rules/pipeline"
)

// configSeen gives what a watch says of the configuration in force.
func configSeen(t *testing.T, page string) pipeline.InForce {
	t.Helper()
	code, body := fetch(t, http.MethodGet, page+"/api/rigs/cell_2/hello", nil)
	var hello struct{ Config pipeline.InForce }
	if err := json.Unmarshal(body, &hello); code != http.StatusOK || err != nil {
		t.Fatalf("hello: %d, %v: %s", code, err, body)
	}
	return hello.Config
}

// TestReloadOfAWatch changes the rig file of a watch: with the engine off, with
// faults, while it runs, over a restart in the middle of a run, and after it. What is
// in force is said everywhere, and the run replays over all of it.
func TestReloadOfAWatch(t *testing.T) {
	t.Parallel()
	rig, data := testRig(t, [2]string{"lateness: 120 ms", "lateness: 500 ms"}), dataFolder(t)
	good, err := os.ReadFile(rig)
	if err != nil {
		t.Fatal(err)
	}
	edit := func(old, now string) {
		t.Helper()
		text := strings.Replace(string(good), old, now, 1)
		if text == string(good) && old != now {
			t.Fatalf("the rig file lacks %q", old)
		}
		if err := os.WriteFile(rig, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	_, cfg, faults := config.Load(rig)
	if err := watch.Faults(faults); err != nil {
		t.Fatal(err)
	}
	addr := mqtttest.FreeAddr(t)
	args := []string{"watch", rig, "--data", data, "--listen", "127.0.0.1:0", "--broker-listen", addr}
	p := start(t, args...)
	page := p.page()
	reload := func(wantCode int, says string, more ...string) {
		t.Helper()
		code, stdout, stderr := invoke(t, append([]string{"reload", "--url", page}, more...)...)
		if code != wantCode || !strings.Contains(stdout+stderr, says) {
			t.Errorf("reload %v: exit code %d, want %d with %q:\n%s%s", more, code, wantCode, says, stdout, stderr)
		}
	}
	live := follow(t, page, "")
	live.await("the sessions are up", allConnected)
	first := configSeen(t, page)
	if first.Hash != cfg.Hash || first.By != cfg.Change.Engineer || first.ApprovedBy != cfg.Change.Approver || first.Refused != (pipeline.Refusal{}) {
		t.Errorf("in force at the start: %+v", first)
	}

	edit("limit: 760 degC", "limit: 760 degK")
	reload(1, "rig.yaml:", "--by", "Edda Marsh")
	if in := configSeen(t, page); in.Hash != first.Hash || in.Refused.By != "Edda Marsh" || !strings.Contains(in.Refused.Why, "rig.yaml:") {
		t.Errorf("after a file with a fault: %+v", in)
	}
	edit("id: cell_2", "id: cell_3")
	reload(1, "start it with these files")
	edit("limit: 760 degC", "limit: 750 degC")
	reload(1, "another person", "--by", "Edda Marsh", "--approved-by", "edda marsh")
	reload(0, "approved by Vera Lindqvist", "--by", "Edda Marsh", "--approved-by", "Vera Lindqvist", "--reason", "issue C")
	second := configSeen(t, page)
	if second.Hash == first.Hash || second.By != "Edda Marsh" || second.Reason != "issue C" || second.Refused != (pipeline.Refusal{}) {
		t.Errorf("after the change: %+v", second)
	}
	live.await("the change", func(f *frame) bool { return f.Kind == "config" && strings.Contains(string(f.body), second.Hash) })
	if code := live.closed(); code != 1012 {
		t.Errorf("viewers are sent away with %d", code)
	}

	system := play(t, cfg, "mqtt://"+addr, 3)
	run := awaitRun(t, page)
	edit("limit: 760 degC", "limit: 740 degC")
	reload(1, "only with the engine off")
	p.kill()
	p = start(t, args...)
	page = p.page()
	if in := configSeen(t, page); in.Hash != second.Hash || in.By != "Edda Marsh" || !strings.Contains(in.Refused.Why, "engine off") {
		t.Errorf("after a restart in the middle of a run: %+v", in)
	}
	if _, body := fetch(t, http.MethodGet, page+"/healthz", nil); !strings.Contains(string(body), `"config_refused":true`) {
		t.Errorf("healthz: %s", body)
	}
	if said := p.stderr.String(); !strings.Contains(said, "What was in force stays") {
		t.Errorf("the restart says %q", said)
	}
	live = follow(t, page, "")
	<-system.ended
	if system.err != nil {
		t.Fatalf("the data system: %v", system.err)
	}
	live.await("end of the run", isRun("ended"))
	reload(0, "in force: ")
	if in := configSeen(t, page); in.Hash == second.Hash || in.By != cfg.Change.Engineer {
		t.Errorf("after the run: %+v", in)
	}
	p.stop()
	stored, _ := replayed(t, data)
	if stored.ID != run {
		t.Errorf("run %s is stored, %s was on", stored.ID, run)
	}
}

// dataSystem publishes a whole test as the data system of a rig does, and
// waits until the broker has it all. It outlives the daemon.
type dataSystem struct {
	err   error
	ended chan struct{}
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
			return p.Publish(ctx, m.Topic, m.Payload)
		})
		if d.err == nil {
			d.err = p.Flush(ctx)
		}
	}()
	t.Cleanup(func() { stop(); <-d.ended; running.Wait() })
	return d
}
