package dashboard_test

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"maps"
	"net"
	"net/http"
	"net/http/httptest"
	"net/url"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/dashboard"
	"throatwatch/dashboard/access"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const build = "test build"

// start is the host time at which a desk begins.
var start = time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()

func must(err error) {
	if err != nil {
		panic(err)
	}
}

// due is a frame that a viewer with all channels must get.
type due struct {
	kind string
	n    uint64
	t    int64
	body []byte
}

// desk is a watch that is stepped by hand, with its server. With a folder it
// records into a run file there as the daemon does.
type desk struct {
	cfg dashboard.Config // what serve is to add to

	hub    *dashboard.Hub
	http   *httptest.Server
	dir    string
	narrow bool // connections have small buffers: a viewer that does not read is noticed after few frames

	mu      sync.Mutex // protects the fields below; held while a record is stepped
	machine *pipeline.Machine
	state   *pipeline.State
	due     []due
	lag     func(n uint64) // called after each record

	file    *runfile.File
	digest  *pipeline.Digest
	codec   *archive.Codec
	columns *pipeline.Columns
	batch   runfile.Batch
	commit  int64 // host time of the next commit
	seal    int64 // host time of the next checkpoint
}

// newDesk gives a desk with a configuration in force. It records nothing.
func newDesk(t *testing.T) *desk {
	t.Helper()
	d := newBareDesk(t)
	d.begin()
	return d
}

// newBareDesk gives a desk that no record was stepped on.
func newBareDesk(t *testing.T) *desk {
	t.Helper()
	d := makeDesk()
	d.serve(d)
	t.Cleanup(d.close)
	return d
}

func makeDesk() *desk {
	return &desk{
		cfg: dashboard.Config{OpenRole: access.Engineer},
		hub: dashboard.NewHub(build), machine: pipeline.NewMachine(parse), state: &pipeline.State{},
	}
}

// record makes a desk put what it steps into a run file. The file is sealed each
// sealEvery of host time.
func (d *desk) record(dir string) {
	var err error
	d.dir = dir
	d.file, err = runfile.Create(context.Background(), filepath.Join(dir, "run.db"), runfile.Header{ID: "idle", State: runfile.StateIdle}, runfile.Options{})
	must(err)
	d.digest, d.codec, d.commit, d.seal = pipeline.NewDigest(), archive.NewCodec(), start+second, start+sealEvery
}

const sealEvery = 10 * second

// begin enters boot and configuration.
func (d *desk) begin() {
	d.take(ingest.KindBoot, `{"epoch":3}`, start)
	d.take(ingest.KindConfig, "Alder Bank cell 2", start)
}

// serve begins a server; asked is the desk that it asks.
func (d *desk) serve(asked dashboard.Desk) {
	cfg := d.cfg
	cfg.Desk, cfg.Runs, cfg.Parse, cfg.Build = asked, folder(d.dir), parse, build
	cfg.Log, cfg.Follows = slog.New(slog.DiscardHandler), []string{"database"}
	cfg.Extra = func() []dashboard.Metric {
		return []dashboard.Metric{
			{Name: "session_unacknowledged", Help: "An extra gauge.", Labels: map[string]string{"filter": "rigs/cell_2/\xff"}, Value: 4},
			{Name: "session_received_total", Help: "An extra counter.", Total: true, Value: 5},
		}
	}
	server := dashboard.NewServer(cfg, d.hub)
	d.http = httptest.NewUnstartedServer(server)
	if d.narrow {
		d.http.Listener = narrow{d.http.Listener}
	}
	d.http.Start()
}

func (d *desk) close() {
	d.hub.Shutdown()
	d.http.Close()
	if d.file != nil {
		must(d.file.Close())
	}
}

// newNarrowDesk is newDesk with small buffers.
func newNarrowDesk(t *testing.T) *desk {
	t.Helper()
	d := makeDesk()
	d.narrow = true
	d.begin()
	d.serve(d)
	t.Cleanup(d.close)
	return d
}

// narrow gives connections whose send buffer is small.
type narrow struct{ net.Listener }

func (l narrow) Accept() (net.Conn, error) {
	c, err := l.Listener.Accept()
	if tcp, ok := c.(*net.TCPConn); ok {
		err = tcp.SetWriteBuffer(4 << 10)
	}
	return c, err
}

// folder is a folder of run files.
type folder string

func (f folder) paths() []string {
	paths, err := filepath.Glob(filepath.Join(string(f), "*.db"))
	must(err)
	return paths
}

// List gives the runs of the folder.
func (f folder) List(ctx context.Context, filter runfile.Filter) (runs []runfile.Run, err error) {
	for _, path := range f.paths() {
		r, err := runfile.ReadRun(ctx, path)
		if err != nil {
			return nil, err
		}
		if r.State != runfile.StateIdle && strings.Contains(r.Notes, filter.Text) {
			runs = append(runs, r)
		}
	}
	return runs, nil
}

// Open opens a run.
func (f folder) Open(ctx context.Context, id string) (*runfile.File, error) {
	for _, path := range f.paths() {
		if r, err := runfile.ReadRun(ctx, path); err == nil && r.ID == id {
			return runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
		}
	}
	return nil, os.ErrNotExist
}

// Annotate changes the header of a run.
func (f folder) Annotate(ctx context.Context, id string, edit func(*runfile.Header)) (runfile.Run, error) {
	path := filepath.Join(string(f), id+".db")
	if _, err := os.Stat(path); err != nil {
		return runfile.Run{}, runfile.ErrUnknownRun
	}
	file, err := runfile.Open(ctx, path, runfile.ReadWrite, runfile.Options{})
	if err == nil {
		err = errors.Join(file.UpdateHeader(ctx, edit), file.Close())
	}
	if err != nil {
		return runfile.Run{}, err
	}
	return runfile.ReadRun(ctx, path)
}

// Remove deletes a run.
func (f folder) Remove(ctx context.Context, id, _, _ string) error {
	path := filepath.Join(string(f), id+".db")
	if r, err := runfile.ReadRun(ctx, path); err != nil || r.Keep {
		return errors.Join(err, runfile.ErrKept)
	}
	return runfile.Remove(path)
}

// Ask runs fn between two steps.
func (d *desk) Ask(_ context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	d.mu.Lock()
	defer d.mu.Unlock()
	fn(d.machine, d.state)
	return nil
}

// Act does what an operator asks for.
func (d *desk) Act(_ context.Context, a pipeline.Action) (r pipeline.Reply, err error) {
	text, err := json.Marshal(a)
	if err != nil {
		return r, err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	for _, o := range d.step(ingest.KindAction, string(text), d.state.Host) {
		r.Epoch, r.N = o.Epoch, o.N
		if o.Kind == pipeline.OutcomeAction {
			r.Err = o.Action.Err
		}
	}
	return r, nil
}

// take steps a record at host and shows what comes of it.
func (d *desk) take(kind ingest.Kind, payload string, host int64) {
	d.mu.Lock()
	d.step(kind, payload, host)
	lag, n := d.lag, d.state.N
	d.mu.Unlock()
	if lag != nil {
		lag(n)
	}
}

func (d *desk) step(kind ingest.Kind, payload string, host int64) []pipeline.Outcome {
	r := ingest.Record{Seq: d.state.Seq + 1, Host: host, Kind: kind, Payload: []byte(payload)}
	if kind == ingest.KindMessage {
		r.Topic, r.Flags = topic, ingest.FlagQoS1
	}
	outs := d.machine.Step(d.state, &r)
	d.hub.Publish(outs, d.machine, d.state)
	cfg, ok := d.machine.Config()
	for i := range outs {
		if body, sent := dashboard.EncodeStored(&outs[i], &cfg); ok && sent {
			d.due = append(d.due, due{kind: headOf(body).Kind, n: outs[i].N, t: outs[i].T, body: body})
		}
	}
	if d.file != nil {
		d.store(&r, outs)
	}
	return outs
}

// store keeps a record and what is stored of its outcomes.
func (d *desk) store(r *ingest.Record, outs []pipeline.Outcome) {
	cfg, _ := d.machine.Config()
	event := func(o *pipeline.Outcome, kind string, v any) {
		text, err := json.Marshal(v)
		must(err)
		d.batch.Events = append(d.batch.Events, runfile.Event{Epoch: o.Epoch, N: o.N, T: o.T, Kind: kind, JSON: text})
	}
	d.batch.Records = append(d.batch.Records, *r)
	var run *pipeline.Outcome
	for i := range outs {
		o := &outs[i]
		d.digest.Add(o)
		//exhaustive:ignore
		switch o.Kind {
		case pipeline.OutcomeExceedance:
			event(o, "exceedance", o.Exceedance)
		case pipeline.OutcomeEngine:
			event(o, "engine", o.Engine)
		case pipeline.OutcomeLife:
			event(o, "life", o.Life)
		case pipeline.OutcomePoint:
			if d.columns == nil {
				d.columns = pipeline.NewColumns(&cfg)
			}
			d.columns.Add(o)
		case pipeline.OutcomeAlarm:
			event(o, "alarm", o.Alarm)
		case pipeline.OutcomeMark:
			event(o, "mark", o.Mark)
		case pipeline.OutcomeLog:
			event(o, "log", o.Entry)
		case pipeline.OutcomeChecks:
			event(o, "checks", o.Check)
		case pipeline.OutcomeQuarantine:
			event(o, "quarantine", o.Text)
		case pipeline.OutcomeRun:
			event(o, "run", o.Run)
			run = o
		}
	}
	if run == nil && r.Host < d.commit {
		return
	}
	d.commit = r.Host + second
	if run != nil {
		d.batch.Header = func(h *runfile.Header) {
			*h = runfile.Header{
				ID: run.Run.ID, Rig: run.Run.Rig, Engine: cfg.Rig.EngineModel, EngineSerial: cfg.Rig.EngineSerial, Title: cfg.Rig.Title,
				Operator: run.Run.By, Build: build, ConfigHash: cfg.Hash, Started: run.Run.Started, Ended: run.Run.Ended,
				State: runfile.StateRunning, Tags: []string{"nozzle"}, Notes: "first run",
			}
			if run.Event == "ended" {
				h.State, h.Digest = runfile.StateEnded, d.digest.String()
			}
		}
	}
	if r.Host >= d.seal || run != nil && run.Event == "ended" {
		d.seal = r.Host + sealEvery
		d.checkpoint(r)
	}
	must(d.file.Commit(context.Background(), d.batch))
	d.batch = runfile.Batch{}
}

// checkpoint closes the chunks and keeps the state.
func (d *desk) checkpoint(r *ingest.Record) {
	var err error
	if d.columns != nil {
		d.batch.Chunks, err = d.columns.Chunks(d.codec)
		must(err)
		d.columns = nil
	}
	c := &runfile.Checkpoint{Seq: r.Seq, Host: r.Host, Full: true}
	c.State, err = d.state.Encode(true)
	must(err)
	c.Digest, err = d.digest.MarshalBinary()
	must(err)
	d.batch.Checkpoint = c
}

// host gives the host time of the newest record.
func (d *desk) host() int64 {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.state.Host
}

// n gives epoch and number of the newest outcome.
func (d *desk) n() (epoch, n uint64) {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.state.Epoch, d.state.N
}

// config gives the configuration in force.
func (d *desk) config() (ok bool, cfg pipeline.Config) {
	d.mu.Lock()
	defer d.mu.Unlock()
	cfg, ok = d.machine.Config()
	return ok, cfg
}

// rest lets host time pass without data; each second has a status.
func (d *desk) rest(seconds int) {
	for range seconds {
		d.take(ingest.KindTick, "", d.host()+second)
	}
}

// send steps messages.
func (d *desk) send(msgs []message) {
	for _, m := range msgs {
		d.take(ingest.KindMessage, string(m.payload), m.due)
	}
}

// sent gives the frames that are due so far.
func (d *desk) sent() []due {
	d.mu.Lock()
	defer d.mu.Unlock()
	return slices.Clone(d.due)
}

// alarm gives the standing alarm of a rule.
func (d *desk) alarm(rule string) (a rules.Alarm, ok bool) {
	d.mu.Lock()
	defer d.mu.Unlock()
	for _, a := range d.machine.Alarms(d.state) {
		if a.Rule == rule {
			return a, true
		}
	}
	return a, false
}

// answer is what a request was answered with.
type answer struct {
	status int
	header http.Header
	body   []byte
}

// into gives the answer as T.
func into[T any](t *testing.T, a answer) (v T) {
	t.Helper()
	if err := json.Unmarshal(a.body, &v); err != nil {
		t.Fatalf("%v: %s", err, a.body)
	}
	return v
}

// call makes a request and checks that openapi.json describes it with its answer.
func (d *desk) call(t *testing.T, method, path, body string) answer {
	t.Helper()
	a := d.raw(t, method, path, body, nil)
	checkDescribed(t, method, path, body, a)
	return a
}

func (d *desk) get(t *testing.T, path string) answer {
	t.Helper()
	return d.call(t, http.MethodGet, path, "")
}

// raw makes a request.
func (d *desk) raw(t *testing.T, method, path, body string, header http.Header) answer {
	t.Helper()
	r, err := http.NewRequestWithContext(t.Context(), method, d.http.URL+path, strings.NewReader(body))
	if err != nil {
		t.Fatal(err)
	}
	maps.Copy(r.Header, header)
	res, err := d.http.Client().Do(r)
	if err != nil {
		t.Fatal(err)
	}
	defer res.Body.Close()
	text, err := io.ReadAll(res.Body)
	if err != nil {
		t.Fatal(err)
	}
	return answer{res.StatusCode, res.Header, text}
}

// viewer is a websocket that keeps what it gets.
type viewer struct {
	conn *websocket.Conn
	from uint64 // the frame that it goes on behind, 0 = none

	mu     sync.Mutex // protects the fields below
	frames [][]byte
	err    error
	more   chan struct{} // closed when there is more, and made anew
}

// view connects a viewer.
func (d *desk) view(t *testing.T, query string) *viewer {
	t.Helper()
	v, err := d.dial(t.Context(), query, nil)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(v.close)
	go v.read()
	return v
}

// dial connects a viewer that does not read.
func (d *desk) dial(ctx context.Context, query string, header http.Header) (*viewer, error) {
	dialer := websocket.Dialer{NetDialContext: func(ctx context.Context, network, addr string) (net.Conn, error) {
		c, err := (&net.Dialer{}).DialContext(ctx, network, addr)
		if err == nil && d.narrow {
			err = c.(*net.TCPConn).SetReadBuffer(16 << 10)
		}
		return c, err
	}}
	conn, res, err := dialer.DialContext(ctx, "ws"+strings.TrimPrefix(d.http.URL, "http")+"/live"+query, header)
	if err != nil {
		return nil, err
	}
	_ = res.Body.Close()
	return &viewer{conn: conn, more: make(chan struct{})}, nil
}

func (v *viewer) close() { _ = v.conn.Close() }

// read gathers frames until the connection ends.
func (v *viewer) read() {
	for {
		_, body, err := v.conn.ReadMessage()
		v.mu.Lock()
		if err != nil {
			v.err = err
		} else {
			v.frames = append(v.frames, body)
		}
		close(v.more)
		v.more = make(chan struct{})
		v.mu.Unlock()
		if err != nil {
			return
		}
	}
}

// until waits until enough is true of the frames or the connection has ended.
func (v *viewer) until(enough func(frames [][]byte) bool) (frames [][]byte, err error) {
	late := time.After(30 * time.Second)
	for {
		v.mu.Lock()
		frames, err, more := slices.Clip(v.frames), v.err, v.more
		v.mu.Unlock()
		if err != nil || enough(frames) {
			return frames, err
		}
		select {
		case <-more:
		case <-late:
			panic(fmt.Sprintf("after %d frames the viewer waits for more than comes", len(frames)))
		}
	}
}

// upto waits for the frame n, or one behind it, and gives all there are.
func (v *viewer) upto(t *testing.T, n uint64) [][]byte {
	t.Helper()
	frames, err := v.until(func(f [][]byte) bool { return len(f) > 0 && numberOf(f[len(f)-1]) >= n })
	if err != nil {
		t.Fatalf("the connection ended after %d frames: %v", len(frames), err)
	}
	return frames
}

// ended waits for the end and gives the close code.
func (v *viewer) ended(t *testing.T) (frames [][]byte, code int, reason string) {
	t.Helper()
	frames, err := v.until(func([][]byte) bool { return false })
	var closed *websocket.CloseError
	if !asClose(err, &closed) {
		t.Fatalf("the connection ended without a close: %v", err)
	}
	return frames, closed.Code, closed.Text
}

// head is what every frame but a reset has.
type head struct {
	Kind  string  `json:"kind"`
	Epoch uint64  `json:"epoch"`
	N     uint64  `json:"n"`
	T     *string `json:"t"`
}

func headOf(body []byte) (h head) {
	must(json.Unmarshal(body, &h))
	return h
}

// numberOf gives n of a frame. It is looked for instead of decoded, as pacing asks
// for it often.
func numberOf(body []byte) (n uint64) {
	_, rest, _ := bytes.Cut(body, []byte(`"n":`))
	for _, c := range rest {
		if c < '0' || c > '9' {
			break
		}
		n = 10*n + uint64(c-'0')
	}
	return n
}

// keepsUp waits while the viewer is more than half its queue behind n.
func (v *viewer) keepsUp(n uint64) {
	_, _ = v.until(func(f [][]byte) bool {
		last := v.from
		if len(f) > 0 {
			last = numberOf(f[len(f)-1])
		}
		return last != 0 && last+dashboard.ClientQueue/2 >= n
	})
}

// paced makes the desk wait for viewers that are far behind.
func (d *desk) paced(viewers ...*viewer) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.lag = func(n uint64) {
		for _, v := range viewers {
			v.keepsUp(n)
		}
	}
}

func asClose(err error, target **websocket.CloseError) bool {
	c, ok := err.(*websocket.CloseError) //nolint:errorlint // the library gives it bare
	*target = c
	return ok
}

// recording is a whole test with all that was sent while it was recorded.
type recording struct {
	*desk
	id    string // of the run
	hello []byte
	live  [][]byte // every frame behind it that a viewer with all channels got
	acted map[string]answer
	epoch uint64 // as the run ended
	last  uint64
}

// recorded is made once: what reads it does not change it. It has an alarm that was
// acknowledged, a mark, a probe that was lost, a broken message and a repeated one.
var recorded = sync.OnceValue(func() *recording {
	dir, err := os.MkdirTemp("", "dashboard")
	must(err)
	r := &recording{desk: makeDesk(), acted: map[string]answer{}}
	discard = func() {
		r.close()
		must(os.RemoveAll(dir))
	}
	r.record(dir)
	r.begin()
	r.serve(r.desk)
	v, err := r.dial(context.Background(), "?rig="+rigID+"&channels=*", nil)
	must(err)
	go v.read()
	r.paced(v)
	post := func(what, path, body string) {
		res, err := http.Post(r.http.URL+path, "application/json", strings.NewReader(body))
		must(err)
		defer res.Body.Close()
		text, err := io.ReadAll(res.Body)
		must(err)
		r.acted[what] = answer{res.StatusCode, res.Header, text}
	}
	msgs := play(start+second, engineTest(), 26*time.Second, func(id string, t float64) bool { return id == "egt_3" && t > 18 })
	for i, m := range msgs {
		r.send(msgs[i : i+1])
		switch i {
		case 300:
			r.send([]message{m}) // a copy
			r.take(ingest.KindMessage, `[{"n":"egt_1","v":`, m.due)
		case 400:
			r.mu.Lock()
			r.id = r.state.Run.ID
			r.mu.Unlock()
			post("mark", "/api/runs/"+r.id+"/marks", `{"text":"bleed \"A\" opened, 5 °C \u0007","by":"M. Oduya","request_id":"m1"}`)
		}
		if a, ok := r.alarm("unchoke"); ok && r.acted["acknowledge"].status == 0 {
			post("acknowledge", "/api/alarms/"+url.PathEscape(a.ID)+"/acknowledge", fmt.Sprintf(`{"revision":%d,"reason":"","request_id":"a1"}`, a.Revision))
		}
	}
	post("end", "/api/rigs/"+rigID+"/runs", `{"action":"end","request_id":"e1"}`)
	r.epoch, r.last = r.n()
	frames, err := v.until(func(f [][]byte) bool { return len(f) > 1 && bytes.Contains(f[len(f)-1], []byte(`"event":"ended"`)) })
	must(err)
	r.hello, r.live = frames[0], frames[1:]
	r.paced()
	v.close()
	return r
})

// discard ends the recording, once there is one.
var discard = func() {}

func TestMain(m *testing.M) {
	code := m.Run()
	discard()
	if code == 0 {
		code = leaked()
	}
	os.Exit(code)
}

// leaked tells whether goroutines of the package are left.
func leaked() int {
	buf := make([]byte, 1<<20)
	for range 100 {
		buf = buf[:runtime.Stack(buf[:cap(buf)], true)]
		if !bytes.Contains(buf, []byte("throatwatch/dashboard.")) {
			return 0
		}
		time.Sleep(50 * time.Millisecond)
	}
	fmt.Printf("goroutines are left:\n%s\n", buf)
	return 1
}
