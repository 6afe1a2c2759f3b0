package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"flag"
	"io"
	"net/http"
	"os"
	"os/exec"
	"os/signal"
	"path/filepath"
	"regexp"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/ingest/broker/brokertest"
)

// asProgram makes the test binary the program itself, so that tests run it in
// processes of its own, which they can kill, and with the race detector in them.
const asProgram = "THROATWATCH_AS_PROGRAM"

// patience bounds what a test waits for on a loaded machine.
const patience = 60 * time.Second

func TestMain(m *testing.M) {
	if brokertest.IsNode() {
		if err := brokertest.RunNode(context.Background()); err != nil {
			panic(err)
		}
		return
	}
	if os.Getenv(asProgram) == "" {
		// Tests that play a rehearsal in real time mostly wait. The flag still counts.
		if err := flag.Set("test.parallel", strconv.Itoa(3*runtime.GOMAXPROCS(0))); err != nil {
			panic(err)
		}
		os.Exit(m.Run())
	}
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	code := run(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// program is a command in a process of its own.
type program struct {
	t              *testing.T
	cmd            *exec.Cmd
	stdout, stderr buffer
	ended          chan struct{} // closed when the process is gone
}

// itself gives the command line and the environment by which this binary is the program.
func itself() (command, env []string) {
	return []string{os.Args[0]}, []string{asProgram + "=1", "GORACE=halt_on_error=1 atexit_sleep_ms=0"}
}

// start starts a command. It is killed at the end of the test if it still runs.
func start(t *testing.T, args ...string) *program {
	t.Helper()
	self, env := itself()
	p := &program{t: t, cmd: exec.CommandContext(context.Background(), self[0], args...), ended: make(chan struct{})}
	p.cmd.Env = append(os.Environ(), env...)
	p.cmd.Stdout, p.cmd.Stderr = &p.stdout, &p.stderr
	if err := p.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	go func() {
		defer close(p.ended)
		_ = p.cmd.Wait() // what it says is in the ProcessState
	}()
	t.Cleanup(func() {
		_ = p.cmd.Process.Kill() // it has ended, or the test has failed
		<-p.ended
		if t.Failed() {
			t.Logf("%s\nstdout:\n%s\nstderr:\n%s", strings.Join(args, " "), tail(p.stdout.String()), tail(p.stderr.String()))
		}
	})
	return p
}

func tail(s string) string { return s[max(0, len(s)-4000):] }

// wait waits for the end of the process and gives its exit code.
func (p *program) wait() int {
	p.t.Helper()
	select {
	case <-p.ended:
	case <-time.After(patience):
		p.t.Fatalf("%v runs on", p.cmd.Args[1:])
	}
	p.check()
	return p.cmd.ProcessState.ExitCode()
}

// check looks for what no command may say, whatever becomes of it.
func (p *program) check() {
	p.t.Helper()
	for _, bad := range []string{"panic", "goroutine ", "DATA RACE", "fatal error"} {
		if strings.Contains(p.stderr.String(), bad) {
			p.t.Errorf("%v says %q", p.cmd.Args[1:], bad)
		}
	}
}

// kill ends the process as a power cut would, and waits until it is gone.
func (p *program) kill() {
	p.t.Helper()
	if err := p.cmd.Process.Kill(); err != nil {
		p.t.Fatal(err)
	}
	<-p.ended
	p.check()
}

// stop ends the process as a service manager does.
func (p *program) stop() {
	p.t.Helper()
	if err := p.cmd.Process.Signal(syscall.SIGTERM); err != nil {
		p.t.Fatal(err)
	}
	if code := p.wait(); code != 0 {
		p.t.Errorf("exit code %d after SIGTERM", code)
	}
}

var pageAddress = regexp.MustCompile(`http://127\.0\.0\.1:\d+`)

// page waits until the daemon serves and gives where, without a slash at the end.
func (p *program) page() string {
	p.t.Helper()
	for deadline := time.Now().Add(patience); time.Now().Before(deadline); time.Sleep(10 * time.Millisecond) {
		if a := pageAddress.FindString(p.stdout.String()); a != "" {
			return a
		}
		select {
		case <-p.ended:
			p.t.Fatalf("the daemon has ended with %d", p.cmd.ProcessState.ExitCode())
		default:
		}
	}
	p.t.Fatal("the daemon does not say where its page is")
	return ""
}

// fetch asks for a document or posts one, and gives status and answer.
func fetch(t *testing.T, method, url string, body any) (int, []byte) {
	t.Helper()
	var send io.Reader = http.NoBody
	if body != nil {
		b, err := json.Marshal(body)
		if err != nil {
			t.Fatal(err)
		}
		send = bytes.NewReader(b)
	}
	ctx, cancel := context.WithTimeout(t.Context(), patience)
	defer cancel()
	req, err := http.NewRequestWithContext(ctx, method, url, send)
	if err != nil {
		t.Fatal(err)
	}
	res, err := http.DefaultClient.Do(req)
	if err != nil {
		t.Fatal(err)
	}
	defer res.Body.Close()
	got, err := io.ReadAll(res.Body)
	if err != nil {
		t.Fatal(err)
	}
	return res.StatusCode, got
}

// frame is what tests look at in the frames of /live.
type frame struct {
	Kind     string   `json:"kind"`
	Epoch    uint64   `json:"epoch"`
	N        uint64   `json:"n"`
	T        string   `json:"t"`
	Choke    string   `json:"choke_state"`
	Margin   *float64 `json:"choke_margin_percent"`
	Event    string   `json:"event"`
	Run      *runSeen `json:"run"`
	Alarm    alarm    `json:"alarm"`
	Alarms   []alarm  `json:"alarms"`
	Host     string   `json:"host_time"`
	Online   *bool    `json:"online"`
	Recorded *bool    `json:"recording"`

	Counters map[string]float64 `json:"counters"`
	Sessions []session          `json:"sessions"`
	Age      float64            `json:"data_age_s"`
	Speaking *speaking          `json:"speaking"`
	Status   *struct {
		Speaking *speaking `json:"speaking"`
	} `json:"status"` // of hello

	body []byte
	at   time.Time // when it came
}

type runSeen struct {
	ID    string  `json:"id"`
	Ended *string `json:"ended"`
}

// speaking is how a watch of a pair stands.
type speaking struct {
	Watch string  `json:"watch"`
	Name  *string `json:"name"`
	Since *string `json:"since"`
	Other *string `json:"other"`
	Why   string  `json:"why"`
}

type session struct {
	Connected bool `json:"connected"`
}

type alarm struct {
	ID       string `json:"id"`
	Rule     string `json:"rule"`
	Title    string `json:"title"`
	Text     string `json:"text"`
	Priority string `json:"priority"`
	State    string `json:"state"`
	Raised   string `json:"raised"`
	Revision uint64 `json:"revision"`
	Caution  string `json:"caution"`
	Response string `json:"response"`
}

// frames gathers what one viewer sees.
type frames struct {
	t *testing.T

	mu   sync.Mutex // protects the fields below
	all  []frame
	err  error         // that ended the connection
	more chan struct{} // closed and replaced when there is more
}

// follow opens /live and gathers until it is closed.
func follow(t *testing.T, page, query string) *frames {
	t.Helper()
	url := "ws" + strings.TrimPrefix(page, "http") + "/live?rig=cell_2" + query
	conn, res, err := websocket.DefaultDialer.DialContext(t.Context(), url, nil)
	if err != nil {
		t.Fatal(err)
	}
	_ = res.Body.Close()
	f := &frames{t: t, more: make(chan struct{})}
	gone := make(chan struct{})
	go func() {
		defer close(gone)
		for {
			_, body, err := conn.ReadMessage()
			f.put(body, err)
			if err != nil {
				return
			}
		}
	}()
	t.Cleanup(func() { _ = conn.Close(); <-gone })
	return f
}

func (f *frames) put(body []byte, err error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	if err == nil {
		got := frame{body: body, at: time.Now()}
		if err := json.Unmarshal(body, &got); err != nil {
			f.t.Errorf("frame %q: %v", body, err)
		}
		f.all = append(f.all, got)
	}
	f.err = err
	close(f.more)
	f.more = make(chan struct{})
}

// seen gives what came until now.
func (f *frames) seen() []frame {
	f.mu.Lock()
	defer f.mu.Unlock()
	return slices.Clone(f.all)
}

// await gives the first frame for which ok holds, waiting for it if need be.
func (f *frames) await(what string, ok func(*frame) bool) frame {
	f.t.Helper()
	timeout := time.After(patience)
	for next := 0; ; {
		f.mu.Lock()
		all, err, more := f.all, f.err, f.more
		f.mu.Unlock()
		for ; next < len(all); next++ {
			if ok(&all[next]) {
				return all[next]
			}
		}
		if err != nil {
			f.t.Fatalf("%s: not among %d frames before the connection ended: %v", what, len(all), err)
		}
		select {
		case <-more:
		case <-timeout:
			f.t.Fatalf("%s: not among %d frames in %v", what, len(all), patience)
		}
	}
}

// closed waits for the end of the connection and gives its code.
func (f *frames) closed() int {
	f.t.Helper()
	for deadline := time.Now().Add(patience); time.Now().Before(deadline); time.Sleep(10 * time.Millisecond) {
		f.mu.Lock()
		err := f.err
		f.mu.Unlock()
		if closing, ok := errors.AsType[*websocket.CloseError](err); ok {
			return closing.Code
		}
		if err != nil {
			f.t.Fatalf("the connection ended without a close frame: %v", err)
		}
	}
	f.t.Fatal("the connection does not end")
	return 0
}

// dataFolder gives a folder for the files of a daemon, in memory where there is
// such a place: on the slow disk of a busy machine the daemon rightly stops
// recording, which is tested elsewhere.
func dataFolder(t *testing.T) string {
	t.Helper()
	const memory = "/dev/shm"
	if info, err := os.Stat(memory); err != nil || !info.IsDir() {
		return t.TempDir()
	}
	dir, err := os.MkdirTemp(memory, "throatwatch-test-") //nolint:usetesting // that is on a disk
	if err != nil {
		return t.TempDir()
	}
	t.Cleanup(func() {
		if err := os.RemoveAll(dir); err != nil {
			t.Error(err)
		}
	})
	return dir
}

// testRig writes the example rig with allowances and times so short that a test
// played at double speed shows an exceeded limit and ends its run by itself. edits
// are further pairs of what stands there and what is to.
func testRig(t *testing.T, edits ...[2]string) string {
	t.Helper()
	text, err := os.ReadFile(rehearseRig)
	if err != nil {
		t.Fatal(err)
	}
	s := string(text)
	for _, r := range append([][2]string{
		{"limit: 720 degC, allowance: 5 s", "limit: 720 degC, allowance: 500 ms"},
		{"cool_egt: 120 degC", "cool_egt: 190 degC"},
		{"off_after: 30 s", "off_after: 500 ms"},
		{"end_after: 120 s", "end_after: 500 ms"},
	}, edits...) {
		if !strings.Contains(s, r[0]) {
			t.Fatalf("%s lacks %q", rehearseRig, r[0])
		}
		s = strings.Replace(s, r[0], r[1], 1)
	}
	path := filepath.Join(t.TempDir(), "rig.yaml")
	if err := os.WriteFile(path, []byte(s), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// invoke runs a command in this process and gives exit code, stdout and stderr.
func invoke(t *testing.T, args ...string) (int, string, string) {
	t.Helper()
	var stdout, stderr bytes.Buffer
	code := run(t.Context(), args, &stdout, &stderr)
	return code, stdout.String(), stderr.String()
}

// storedRuns gives what `runs --json` says.
func storedRuns(t *testing.T, data string) []runLine {
	t.Helper()
	code, stdout, stderr := invoke(t, "runs", "--json", "--data", data)
	if code != 0 {
		t.Fatalf("runs: exit code %d: %s", code, stderr)
	}
	var list []runLine
	if err := json.Unmarshal([]byte(stdout), &list); err != nil {
		t.Fatalf("runs: %v", err)
	}
	return list
}

var sha256Line = regexp.MustCompile(`(?m)^sha256 ([0-9a-f]{64})$`)

// replayed replays the one stored run twice: both replays give the digest that was
// recorded live. It returns the run and the lines of --json.
func replayed(t *testing.T, data string) (runLine, []string) {
	t.Helper()
	list := storedRuns(t, data)
	if len(list) != 1 || list[0].State != "ended" || len(list[0].Digest) != 64 {
		t.Fatalf("one ended run with a digest is due: %+v", list)
	}
	var lines string
	for i, flags := range [][]string{{"--json"}, nil} {
		code, stdout, stderr := invoke(t, append([]string{"replay", list[0].ID, "--data", data}, flags...)...)
		got := sha256Line.FindStringSubmatch(stderr)
		if code != 0 || got == nil || got[1] != list[0].Digest || !strings.Contains(stderr, "the same as recorded live") {
			t.Errorf("replay %d: exit code %d; recorded live was %s:\n%s", i+1, code, list[0].Digest, stderr)
		}
		lines += stdout
	}
	return list[0], strings.Split(strings.TrimSuffix(lines, "\n"), "\n")
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

// metric reads one value from the text of /metrics.
func metric(t *testing.T, text, name string) float64 {
	t.Helper()
	for line := range strings.Lines(text) {
		if value, ok := strings.CutPrefix(strings.TrimSpace(line), name+" "); ok {
			var v float64
			if err := json.Unmarshal([]byte(value), &v); err != nil {
				t.Fatalf("metric %s: %v", name, err)
			}
			return v
		}
	}
	t.Fatalf("no metric %s", name)
	return 0
}
