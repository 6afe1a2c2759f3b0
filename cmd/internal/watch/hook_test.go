package watch_test

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"log/slog"
	"math"
	"net"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/dashboard/webhook"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/influx"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

var hookSecret = []byte("shared by hand, 24 bytes")

// hooked is a real receiver that keeps what it takes: id and revision.
type hooked struct {
	http *httptest.Server

	mu     sync.Mutex // protects the fields below
	status int        // 0 = taken
	got    []string
}

func newHooked(t *testing.T) *hooked {
	t.Helper()
	h := &hooked{}
	h.http = httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		text, err := io.ReadAll(r.Body)
		if err != nil || r.Header.Get("X-Signature-256") != webhook.Sign(hookSecret, r.Header.Get("X-Timestamp"), text) {
			t.Errorf("%v, signature %q", err, r.Header.Get("X-Signature-256"))
		}
		h.mu.Lock()
		defer h.mu.Unlock()
		if h.status != 0 {
			w.WriteHeader(h.status)
			return
		}
		h.got = append(h.got, r.Header.Get("Idempotency-Key"))
	}))
	t.Cleanup(h.http.Close)
	return h
}

func (h *hooked) answers(status int) {
	h.mu.Lock()
	defer h.mu.Unlock()
	h.status = status
}

func (h *hooked) keys() []string {
	h.mu.Lock()
	defer h.mu.Unlock()
	return slices.Clone(h.got)
}

// sending is one life of a webhook on a data folder.
type sending struct {
	transitions *watch.Transitions
	sender      *webhook.Sender
	stop        func()
}

func startHook(t *testing.T, store *watch.Store, dir, url string) *sending {
	t.Helper()
	s := &sending{transitions: watch.NewTransitions(store, rules.Advisory, slog.New(slog.DiscardHandler))}
	var err error
	s.sender, err = webhook.New(webhook.Config{
		URL: url, Secret: hookSecret, Rig: "cell_2", Source: s.transitions,
		Cursor: watch.HookCursor{Path: filepath.Join(dir, "webhook-cursor.json"), URL: url}, SetAside: filepath.Join(dir, "refused.ndjson"),
	})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.WithoutCancel(t.Context()))
	ended := make(chan struct{})
	go func() { // ends by stop
		defer close(ended)
		s.sender.Run(ctx)
	}()
	s.stop = sync.OnceFunc(func() {
		cancel()
		<-ended
		if err := s.transitions.Close(); err != nil {
			t.Error(err)
		}
	})
	t.Cleanup(s.stop)
	return s
}

// transitions gives what the files hold of alarms, as keys, by the reading method
// that the webhook does not use.
func (r *recorder) transitions() (keys []string) {
	r.t.Helper()
	paths, err := filepath.Glob(filepath.Join(r.dir, "runs", "*.db"))
	r.must(err)
	if live, _ := r.store.Current(); !slices.Contains(paths, live.Path()) {
		paths = append(paths, live.Path())
	}
	type change struct {
		n   uint64
		key string
	}
	var all []change
	for _, path := range paths {
		f, err := runfile.Open(r.t.Context(), path, runfile.ReadOnly, runfile.Options{})
		r.must(err)
		r.must(f.Events(r.t.Context(), math.MinInt64, math.MaxInt64, func(e *runfile.Event) error {
			var a rules.Alarm
			if e.Kind != "alarm" {
				return nil
			}
			if err := json.Unmarshal(e.JSON, &a); err != nil {
				return err
			}
			if a.Priority != rules.Note {
				all = append(all, change{e.N, fmt.Sprintf("%s/%d", a.ID, a.Revision)})
			}
			return nil
		}))
		r.must(f.Close())
	}
	slices.SortFunc(all, func(a, b change) int { return int(a.n) - int(b.n) })
	for _, c := range slices.Compact(all) { // a run's file has the minutes before it too
		keys = append(keys, c.key)
	}
	return keys
}

// TestWebhookFollowsTheRecords plays a whole test while the receiver fails for a while
// and the daemon is restarted, over the idle file and that of the run. The receiver
// has every transition once, in order.
func TestWebhookFollowsTheRecords(t *testing.T) {
	t.Parallel()
	r, to := newRecorder(t), newHooked(t)
	hook := startHook(t, r.store, r.dir, to.http.URL)
	msgs := r.quick(r.core.State.Host + 1e9)
	const parts = 25
	for i := range parts {
		switch i {
		case 8:
			to.answers(http.StatusServiceUnavailable)
		case 14:
			to.answers(0)
		case 11, 18: // the daemon starts again
			hook.stop()
			r.close()
			r.open(r.core.State.Host + 1e9)
			hook = startHook(t, r.store, r.dir, to.http.URL)
		}
		r.play(msgs[i*len(msgs)/parts : (i+1)*len(msgs)/parts])
		hook.transitions.Show(hook.sender, []pipeline.Outcome{{Kind: pipeline.OutcomeAlarm, Alarm: &rules.Alarm{Priority: rules.Warning}}}, r.core.State) // something to look for
	}
	r.act(pipeline.DoRunEnd, "")
	want := r.transitions()
	for deadline := time.Now().Add(30 * time.Second); len(to.keys()) < len(want) && time.Now().Before(deadline); time.Sleep(20 * time.Millisecond) {
		hook.transitions.Show(hook.sender, nil, r.core.State)
	}
	hook.stop()
	got := slices.Compact(to.keys()) // one that was under way when the daemon ended comes twice
	if len(want) < 10 || !slices.Equal(got, want) {
		t.Errorf("the receiver has %d:\n%s\nrecorded are %d:\n%s", len(got), strings.Join(got, "\n"), len(want), strings.Join(want, "\n"))
	}
}

// However many are asked for at a time, the transitions are the same, and so from
// every cursor on.
func TestTransitionsAreTheSameHoweverTheyAreCut(t *testing.T) {
	t.Parallel()
	r := newRecorder(t)
	r.play(r.quick(r.core.State.Host + 1e9))
	r.act(pipeline.DoRunEnd, "")
	read := func(after webhook.Cursor, limit int) (out []webhook.Transition) {
		source := watch.NewTransitions(r.store, rules.Note, slog.New(slog.DiscardHandler))
		defer func() { r.must(source.Close()) }()
		for {
			got, next, err := source.Follow(t.Context(), after, limit)
			r.must(err)
			if len(got) == 0 {
				return out
			}
			if behind := got[len(got)-1].Behind; len(got) == limit && behind != next {
				t.Fatalf("the cursor behind is %+v and %+v", behind, next)
			}
			out, after = append(out, got...), next
		}
	}
	first := webhook.Cursor{Seq: 1}
	all := read(first, 10_000)
	if len(all) < 8 {
		t.Fatalf("%d transitions", len(all))
	}
	same := func(a, b []webhook.Transition) bool {
		return slices.EqualFunc(a, b, func(a, b webhook.Transition) bool { return a.N == b.N && string(a.Alarm) == string(b.Alarm) })
	}
	for _, limit := range []int{1, 2, 3, 7} {
		if got := read(first, limit); !same(got, all) {
			t.Errorf("%d at a time: %d of %d", limit, len(got), len(all))
		}
	}
	for i := range all {
		if got := read(all[i].Behind, 5); !same(got, all[i+1:]) {
			t.Errorf("behind transition %d: %d of %d", i, len(got), len(all)-i-1)
		}
	}
}

func TestHookCursor(t *testing.T) {
	t.Parallel()
	path := filepath.Join(t.TempDir(), "cursor.json")
	f := watch.HookCursor{Path: path, URL: "https://hook.example/hidden"}
	if _, ok, err := f.Load(); ok || err != nil {
		t.Errorf("none: %v, %v", ok, err)
	}
	want := webhook.Cursor{Seq: 7, Row: 2}
	if err := f.Save(want); err != nil {
		t.Fatal(err)
	}
	if c, ok, err := f.Load(); c != want || !ok || err != nil {
		t.Errorf("%+v, %v, %v", c, ok, err)
	}
	if text, err := os.ReadFile(path); err != nil || strings.Contains(string(text), "hidden") {
		t.Errorf("%v: the file shows the address: %s", err, text)
	}
	f.URL = "https://other.example"
	if _, ok, err := f.Load(); ok || err != nil {
		t.Errorf("of another receiver: %v, %v", ok, err)
	}
	if err := os.WriteFile(path, []byte("{"), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, _, err := f.Load(); err == nil || !strings.Contains(err.Error(), "remove it") {
		t.Errorf("damaged: %v", err)
	}
	f.Path = filepath.Join(path, "below a file")
	if err := f.Save(want); err == nil {
		t.Error("saved below a file")
	}
}

// stuckBroker never takes a message.
type stuckBroker struct{}

func (stuckBroker) Publish(ctx context.Context, _ string, _ []byte, _ byte, _ bool) error {
	<-ctx.Done()
	return ctx.Err()
}

// alarmWithin bounds the time from the cause of an alarm to its arrival at a viewer:
// rules on the daemon are judged each 100 ms; the rest is for a loaded machine with
// the race detector.
const alarmWithin = 600 * time.Millisecond

// TestNothingAboutAnAlarmWaits: the disk hangs, a hundred viewers do not read, the broker
// does not take what is published, the webhook's receiver and the database hang, all
// at once. A viewer who reads has every alarm in time. Nothing is left of the alarm
// that nothing is recorded but what is told: it goes to the receiver when that works.
func TestNothingAboutAnAlarmWaits(t *testing.T) {
	t.Parallel()
	var stuck atomic.Bool
	opt := runfile.Options{BeforeCommit: func(ctx context.Context) error {
		for stuck.Load() && ctx.Err() == nil {
			time.Sleep(20 * time.Millisecond)
		}
		return nil
	}}
	release := make(chan struct{}) // closed when receiver and database work
	hanging := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		select {
		case <-release:
		case <-r.Context().Done():
		}
		w.WriteHeader(http.StatusNoContent)
	}))
	defer hanging.Close()
	var told sync.Map // idempotency keys
	receiver := httptest.NewServer(http.HandlerFunc(func(_ http.ResponseWriter, r *http.Request) {
		_, _ = io.Copy(io.Discard, r.Body)
		select {
		case <-release:
			told.Store(r.Header.Get("Idempotency-Key"), true)
		case <-r.Context().Done():
		}
	}))
	defer receiver.Close()

	hub := dashboard.NewHub("test")
	outbox := watch.NewOutbox("bench_1", stuckBroker{}, slog.New(slog.DiscardHandler))
	var hook atomic.Pointer[sending]
	dir := t.TempDir()
	d := openDesk(t, dir, opt, func(c *watch.Config) {
		c.Shown = func(outs []pipeline.Outcome, m *pipeline.Machine, s *pipeline.State) {
			hub.Publish(outs, m, s)
			outbox.Take(outs, m, s)
			if h := hook.Load(); h != nil {
				h.transitions.Show(h.sender, outs, s)
			}
		}
	})
	h := startHook(t, d.store, dir, receiver.URL)
	hook.Store(h)
	outcomes := watch.NewOutcomes(d.store, slog.New(slog.DiscardHandler))
	sink, err := influx.New(influx.Config{
		Target: influx.Target{URL: hanging.URL, Bucket: "hall"}, Rig: "bench_1", Source: outcomes,
		Cursor: watch.CursorFile{Path: filepath.Join(dir, "influx.json")}, Rejected: filepath.Join(dir, "rejected.lp"),
	})
	if err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(t.Context())
	defer stop()
	var parts sync.WaitGroup
	parts.Go(func() { outbox.Run(ctx) })
	parts.Go(func() { watch.RunSink(ctx, sink) })
	page := httptest.NewUnstartedServer(dashboard.NewServer(dashboard.Config{
		Desk: d.loop, Runs: watch.StoredRuns{Catalog: d.store.Catalog()}, Parse: watch.Parse, Build: "test", Log: slog.New(slog.DiscardHandler),
	}, hub))
	page.Config.ConnContext = func(ctx context.Context, c net.Conn) context.Context {
		if err := c.(*net.TCPConn).SetWriteBuffer(16 << 10); err != nil { // a viewer that does not read is noticed soon
			t.Error(err)
		}
		return ctx
	}
	page.Start()
	defer page.Close()
	dial := func(buffer int) *websocket.Conn {
		dialer := websocket.Dialer{NetDialContext: func(ctx context.Context, network, addr string) (net.Conn, error) {
			c, err := (&net.Dialer{}).DialContext(ctx, network, addr)
			if err == nil {
				err = c.(*net.TCPConn).SetReadBuffer(buffer)
			}
			return c, err
		}}
		conn, res, err := dialer.DialContext(t.Context(), "ws"+strings.TrimPrefix(page.URL, "http")+"/live?channels=*", nil)
		if err != nil {
			t.Fatal(err)
		}
		_ = res.Body.Close()
		return conn
	}
	d.send(time.Now())
	for range 100 {
		defer dial(4 << 10).Close()
	}
	good := dial(1 << 20)
	defer good.Close()
	raised := make(chan time.Time, 16)
	var recording, lost atomic.Bool
	recording.Store(true)
	go func() { // ends with the connection
		for {
			_, text, err := good.ReadMessage()
			if err != nil {
				return
			}
			var f struct {
				Kind  string
				Alarm rules.Alarm
			}
			if json.Unmarshal(text, &f) != nil || f.Kind != "alarm" || f.Alarm.State.String() != "unacknowledged" {
				continue
			}
			switch f.Alarm.Rule {
			case "input_path_deaf":
				raised <- time.Now()
			case "not_recording":
				lost.Store(true)
			}
		}
	}()
	go func() { // readings, as they come; ends with ctx
		for tick := time.NewTicker(50 * time.Millisecond); ctx.Err() == nil; <-tick.C {
			now := time.Now()
			text := fmt.Appendf(nil, `{"t":%d.%06d,"v":1.5,"u":"bar"}`, now.Unix(), now.Nanosecond()/1000)
			if d.loop.PutMessage(ctx, mqtt.Message{Topic: "plant/north/bench/PT-101", Payload: text}) != nil {
				return
			}
		}
	}()
	stuck.Store(true)
	worst := time.Duration(0)
	for range 5 {
		began := time.Now()
		d.must(d.loop.Health(t.Context(), pipeline.HealthChange{Part: pipeline.PartInputPath, Why: "test"}))
		select {
		case at := <-raised:
			worst = max(worst, at.Sub(began))
		case <-time.After(10 * time.Second):
			t.Fatal("the alarm does not come")
		}
		d.must(d.loop.Health(t.Context(), pipeline.HealthChange{Part: pipeline.PartInputPath, OK: true}))
		time.Sleep(1300 * time.Millisecond) // the off-delay of the rule
	}
	if worst > alarmWithin {
		t.Errorf("an alarm took %v, %v is due", worst, alarmWithin)
	}
	if n := hub.Viewers(); n != 1 {
		t.Errorf("%d viewers are connected: those who do not read hold nothing up because they are sent away", n)
	}
	t.Logf("worst %v", worst)
	if !lost.Load() {
		t.Error("nobody is told that nothing is recorded")
	}
	close(release)
	deadline := time.Now().Add(30 * time.Second)
	for n := 0; n < 2; time.Sleep(20 * time.Millisecond) {
		n = 0
		told.Range(func(k, _ any) bool {
			for _, rule := range []string{"/not_recording/", "/input_path_deaf/"} {
				if strings.Contains(k.(string), rule) && strings.HasSuffix(k.(string), "/1") {
					n++
				}
			}
			return true
		})
		if time.Now().After(deadline) {
			t.Fatalf("the receiver was told of %d alarms while nothing was recorded, 2 are due: %+v", n, h.sender.Status())
		}
	}
	stuck.Store(false)
	h.stop()
	stop()
	parts.Wait()
	hub.Shutdown()
	if err := outcomes.Close(); err != nil {
		t.Error(err)
	}
	d.close()
}
