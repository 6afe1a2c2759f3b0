package main

import (
	"context"
	"encoding/json"
	"net/http"
	"net/url"
	"os"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"throatwatch/ingest"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

// latencyAtMost bounds the time from the event time at which an alarm is raised to
// its arrival at a viewer. The design asks for one scan, 50 ms, and what a scan
// waits for its samples; the rest is for a loaded machine with the race detector.
const latencyAtMost = time.Second

// raised waits for an alarm and checks what every alarm must say, and how fast.
func raised(t *testing.T, f *frames, rule, priority string) frame {
	t.Helper()
	got := f.await("alarm "+rule, func(f *frame) bool { return f.Kind == "alarm" && f.Alarm.Rule == rule })
	a := &got.Alarm
	if a.State != "unacknowledged" || a.Priority != priority || a.Title == "" || a.Text == "" || a.Caution == "" || a.Response == "" {
		t.Errorf("alarm %s is raised as %+v", rule, a)
	}
	if !strings.Contains(a.Text, "This display is not protection.") {
		t.Errorf("alarm %s does not say that this is not protection: %q", rule, a.Text)
	}
	at, err := time.Parse(time.RFC3339Nano, a.Raised)
	if err != nil {
		t.Fatal(err)
	}
	late := got.at.Sub(at)
	t.Logf("alarm %s came %v after its event time", rule, late.Round(time.Millisecond))
	if late > latencyAtMost {
		t.Errorf("alarm %s came %v late", rule, late)
	}
	return got
}

func isPoint(state string) func(*frame) bool {
	return func(f *frame) bool { return f.Kind == "operating_point" && f.Choke == state && f.Margin != nil }
}

func isRun(event string) func(*frame) bool {
	return func(f *frame) bool { return f.Kind == "run" && f.Event == event }
}

// acknowledge acknowledges an alarm over HTTP and waits for the frame that says so.
func acknowledge(t *testing.T, page string, f *frames, raised frame) {
	t.Helper()
	at := page + "/api/alarms/" + url.PathEscape(raised.Alarm.ID) + "/acknowledge"
	ask := map[string]any{"revision": raised.Alarm.Revision, "by": "T. Ester", "request_id": "ack-" + raised.Alarm.Rule}
	code, body := fetch(t, http.MethodPost, at, ask)
	var reply struct{ Epoch, N uint64 }
	if err := json.Unmarshal(body, &reply); code != http.StatusAccepted || err != nil {
		t.Fatalf("acknowledge: %d: %s", code, body)
	}
	got := f.await("acknowledgement", func(f *frame) bool {
		return f.Kind == "alarm" && f.Alarm.ID == raised.Alarm.ID && f.Alarm.Revision > raised.Alarm.Revision
	})
	if got.Alarm.State != "acknowledged" || got.Epoch != reply.Epoch || got.N > reply.N {
		t.Errorf("the acknowledgement is answered with %+v and shown as %s", reply, got.body)
	}
	ask["request_id"] = "ack-again-" + raised.Alarm.Rule
	if code, body := fetch(t, http.MethodPost, at, ask); code != http.StatusConflict {
		t.Errorf("the acknowledgement of a revision that is gone gives %d: %s", code, body)
	}
}

// TestWatchRehearsal is the five-minute tour: one process plays a test to itself
// over its own broker, is watched over the websocket, and its run replays.
func TestWatchRehearsal(t *testing.T) {
	t.Parallel()
	data := dataFolder(t)
	p := start(t, "watch", testRig(t), "--data", data, "--listen", "127.0.0.1:0", "--broker-listen", "127.0.0.1:0",
		"--rehearse", "--quick", "--speed", "2", "--for", "42s")
	page := p.page()
	wantCode, want := http.StatusOK, "<html"
	if _, err := os.Stat("../../dashboard/web/dist/index.html"); err != nil { // nobody has built it here
		wantCode, want = http.StatusNotFound, "run deploy/build"
	}
	if code, body := fetch(t, http.MethodGet, page+"/", nil); code != wantCode || !strings.Contains(string(body), want) {
		t.Errorf("the page: %d, %.200s", code, body)
	}
	if code, body := fetch(t, http.MethodGet, page+"/healthz", nil); code != http.StatusOK {
		t.Errorf("healthz: %d, %s", code, body)
	}
	live := follow(t, page, "")
	hello := live.await("hello", func(*frame) bool { return true })
	if hello.Kind != "hello" || hello.Epoch != 1 || hello.Run != nil {
		t.Errorf("the first frame is %.300s", hello.body)
	}
	started := live.await("start of the run", isRun("started"))
	live.await("unchoked point", isPoint("unchoked"))
	live.await("choked point", isPoint("choked"))
	unchoke := raised(t, live, "unchoke", "caution")
	acknowledge(t, page, live, unchoke)
	over := raised(t, live, "egt_run_max_exceeded", "warning")
	acknowledge(t, page, live, over)
	ended := live.await("end of the run", isRun("ended"))
	if code := p.wait(); code != 0 {
		t.Errorf("exit code %d", code)
	}
	if code := live.closed(); code != 1001 {
		t.Errorf("viewers are sent away with %d, going away is 1001", code)
	}

	stored, lines := replayed(t, data)
	if stored.ID != started.Run.ID || stored.Alarms < 3 || stored.DurationS == nil || *stored.DurationS < 20 {
		t.Errorf("stored is %+v", stored)
	}
	samePoints(t, live.seen(), lines, started.N, ended.N)
}

// samePoints compares the points that a viewer saw between two outcomes with the
// lines of a replay, byte for byte.
func samePoints(t *testing.T, seen []frame, lines []string, from, to uint64) {
	t.Helper()
	shown := map[uint64]string{}
	for _, f := range seen {
		if f.Kind == "operating_point" && f.N > from && f.N < to {
			shown[f.N] = string(f.body)
		}
	}
	differ := 0
	for _, line := range lines {
		var f frame
		if err := json.Unmarshal([]byte(line), &f); err != nil {
			t.Fatalf("replay --json: %v: %.100s", err, line)
		}
		if shown[f.N] != line {
			if differ++; differ == 1 {
				t.Errorf("point %d was shown as\n%s\nand is replayed as\n%s", f.N, shown[f.N], line)
			}
		}
	}
	if differ > 0 || len(lines) != len(shown) || len(lines) < 400 {
		t.Errorf("%d points were shown, %d are replayed, %d of them differ", len(shown), len(lines), differ)
	}
	t.Logf("%d points", len(lines))
}

// reader receives what is published on the topics of a rig.
type reader struct {
	t *testing.T

	mu   sync.Mutex // protects msgs
	msgs map[string][]mqtt.Message
}

// read subscribes to topics, and goes on until the end of the test.
func read(t *testing.T, broker string, topics ...string) *reader {
	t.Helper()
	c, err := mqtt.New(mqtt.Config{URL: broker, Dir: t.TempDir(), Filters: topics})
	if err != nil {
		t.Fatal(err)
	}
	r := &reader{t: t, msgs: map[string][]mqtt.Message{}}
	ctx, stop := context.WithCancel(context.Background())
	var all sync.WaitGroup
	all.Go(func() { _ = c.Run(ctx) }) // ends by stop
	all.Go(func() {
		for m := range c.Messages() {
			r.mu.Lock()
			r.msgs[m.Topic] = append(r.msgs[m.Topic], m)
			r.mu.Unlock()
			c.Ack(m)
		}
	})
	t.Cleanup(func() { stop(); all.Wait() })
	return r
}

// await gives the first message on a topic, from index from on, for which ok holds,
// and its index.
func (r *reader) await(topic string, from int, what string, ok func(mqtt.Message) bool) (mqtt.Message, int) {
	r.t.Helper()
	for deadline := time.Now().Add(patience); time.Now().Before(deadline); time.Sleep(10 * time.Millisecond) {
		r.mu.Lock()
		msgs := r.msgs[topic]
		r.mu.Unlock()
		for i := from; i < len(msgs); i++ {
			if ok(msgs[i]) {
				return msgs[i], i
			}
		}
	}
	r.t.Fatalf("%s: nothing on %s says so", what, topic)
	return mqtt.Message{}, 0
}

// says tells whether a status message says that the watch is online, or not.
func says(online bool) func(mqtt.Message) bool {
	return func(m mqtt.Message) bool {
		var f frame
		return json.Unmarshal(m.Payload, &f) == nil && f.Online != nil && *f.Online == online
	}
}

// TestWatchOverSiteBroker: daemon, rehearsal and subscriber are processes of their
// own at Debian's mosquitto. The daemon is killed once.
func TestWatchOverSiteBroker(t *testing.T) {
	t.Parallel()
	const points, alarms, status = "rigs/cell_2/operating-point", "rigs/cell_2/alarms", "rigs/cell_2/status"
	site := mqtttest.Mosquitto(t)
	data, rig := dataFolder(t), testRig(t)
	watchIt := []string{"watch", rig, "--data", data, "--listen", "127.0.0.1:0", "--broker", site.URL}
	p := start(t, watchIt...)
	page := p.page()
	r := read(t, site.URL, points, alarms, status)
	_, seen := r.await(status, 0, "the watch is online", says(true))
	live := follow(t, page, "")
	live.await("the sessions are up", allConnected)
	play := start(t, "rehearse", rig, "--broker", site.URL, "--quick", "--speed", "2", "--seed", "5")

	started := live.await("start of the run", isRun("started"))
	live.await("choked point", isPoint("choked"))
	unchoke := raised(t, live, "unchoke", "caution")
	m, _ := r.await(points, 0, "a choked point", func(m mqtt.Message) bool {
		var f frame
		return json.Unmarshal(m.Payload, &f) == nil && isPoint("choked")(&f)
	})
	if m.Flags != 0 {
		t.Errorf("points are published with flags %b: QoS 0 and not retained is due", m.Flags)
	}
	standing := func(want alarm) func(mqtt.Message) bool {
		return func(m mqtt.Message) bool {
			var list []alarm
			return json.Unmarshal(m.Payload, &list) == nil && slices.ContainsFunc(list, func(a alarm) bool { return a.ID == want.ID && a.Caution == want.Caution })
		}
	}
	r.await(alarms, 0, "the unchoke stands", standing(unchoke.Alarm))
	late := read(t, site.URL, alarms, status) // who comes later is told what stands
	for topic, ok := range map[string]func(mqtt.Message) bool{alarms: standing(unchoke.Alarm), status: says(true)} {
		if m, i := late.await(topic, 0, "the retained state", ok); i != 0 || m.Flags&ingest.FlagRetained == 0 {
			t.Errorf("%s is not retained: it came as message %d with flags %b", topic, i, m.Flags)
		}
	}

	p.kill()
	_, seen = r.await(status, seen, "the last will", says(false))
	p = start(t, watchIt...)
	page = p.page()
	_, seen = r.await(status, seen, "the watch is back", says(true))
	live = follow(t, page, "")
	hello := live.await("hello", func(*frame) bool { return true })
	if hello.Run == nil || hello.Run.ID != started.Run.ID || hello.Epoch != 2 {
		t.Errorf("after the restart: %.300s", hello.body)
	}
	if !slices.ContainsFunc(hello.Alarms, func(a alarm) bool { return a.ID == unchoke.Alarm.ID }) {
		t.Errorf("the alarm %s is forgotten: %v", unchoke.Alarm.ID, hello.Alarms)
	}
	raised(t, live, "egt_run_max_exceeded", "warning")
	live.await("end of the run", isRun("ended"))
	if code := play.wait(); code != 0 {
		t.Errorf("the rehearsal gives %d", code)
	}
	p.stop()
	r.await(status, seen, "an orderly end", says(false))
	replayed(t, data)
}
