package main

import (
	"context"
	"log/slog"
	"net"
	"net/http"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"throatwatch/ingest/mqtt/mqtttest"
	"throatwatch/rules/pipeline"
)

// fakeManager is the socket of a service manager, with what it has heard.
type fakeManager struct {
	path string

	mu    sync.Mutex // protects heard
	heard []string
}

func newFakeManager(t *testing.T) *fakeManager {
	t.Helper()
	m := &fakeManager{path: filepath.Join(t.TempDir(), "notify")}
	conn, err := net.ListenUnixgram("unixgram", &net.UnixAddr{Name: m.path, Net: "unixgram"})
	if err != nil {
		t.Fatal(err)
	}
	ended := make(chan struct{})
	go func() {
		defer close(ended)
		buf := make([]byte, 4096)
		for {
			n, err := conn.Read(buf)
			if err != nil {
				return
			}
			m.mu.Lock()
			m.heard = append(m.heard, string(buf[:n]))
			m.mu.Unlock()
		}
	}()
	t.Cleanup(func() { _ = conn.Close(); <-ended })
	return m
}

func (m *fakeManager) all() []string {
	m.mu.Lock()
	defer m.mu.Unlock()
	return slices.Clone(m.heard)
}

// await waits until a line has been heard.
func (m *fakeManager) await(t *testing.T, line string) {
	t.Helper()
	for deadline := time.Now().Add(patience); !slices.Contains(m.all(), line); time.Sleep(10 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("the service manager has not heard %q, but %q", line, m.all())
		}
	}
}

// TestServiceManager: a watch on the site's broker is ready when the broker keeps
// messages for it, not before; then it gives signs of life, says what it does and
// that it stops.
func TestServiceManager(t *testing.T) {
	m := newFakeManager(t)
	t.Setenv("NOTIFY_SOCKET", m.path)
	t.Setenv("WATCHDOG_USEC", "400000")
	site := mqtttest.MosquittoSite(t, "../../deploy")
	data := dataFolder(t)
	p := start(t, "watch", rehearseRig, "--data", data, "--listen", "127.0.0.1:0", "--broker", site.URL,
		"--broker-ca", site.CA, "--broker-cert", site.Cert, "--broker-key", site.Key)
	m.await(t, "STATUS=watches cell_2, no run is on; waits for the broker")
	if slices.Contains(m.all(), "READY=1") {
		t.Error("it is ready without a broker")
	}
	site.Start()
	m.await(t, "READY=1")
	m.await(t, "STATUS=watches cell_2, no run is on")
	if status, body := fetch(t, http.MethodGet, p.page()+"/healthz", nil); status != http.StatusOK {
		t.Errorf("ready, yet %d %s", status, body)
	}
	beside := examine(t, 0, "--data", data, "--listen", strings.TrimPrefix(p.page(), "http://"), "--broker", site.URL,
		"--broker-ca", site.CA, "--broker-cert", site.Cert, "--broker-key", site.Key)
	wants(t, beside, "page address", passed, "a watch runs on the data folder")
	p.stop()
	m.await(t, "STOPPING=1")
	if n := strings.Count(strings.Join(m.all(), "\n"), "WATCHDOG=1"); n < 2 {
		t.Errorf("%d signs of life", n)
	}
}

// fakeLoop is a loop that a test stalls.
type fakeLoop struct {
	seq     uint64
	steps   bool
	stalled chan struct{} // closed when it goes on
}

func (l *fakeLoop) Ask(_ context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	<-l.stalled
	if l.steps {
		l.seq++
	}
	fn(pipeline.NewMachine(nil), &pipeline.State{Seq: l.seq})
	return nil
}

// lines is a connection that keeps what is written.
type lines struct {
	net.Conn
	got []string
}

func (l *lines) Write(b []byte) (int, error) { l.got = append(l.got, string(b)); return len(b), nil }

func (*lines) SetWriteDeadline(time.Time) error { return nil }

// Signs of life come from the loop's steps: one that does not answer, or that
// answers and steps nothing, gives none.
func TestStalledLoopGivesNoSignOfLife(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct {
		name           string
		stalled, steps bool
		want           int // signs within 10 s
	}{
		{"steps", false, true, 10},
		{"does not answer", true, true, 0},
		{"answers and does not step", false, false, 0},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			synctest.Test(t, func(t *testing.T) {
				out := &lines{}
				m := &serviceManager{conn: out, every: time.Second, log: slog.New(slog.DiscardHandler)}
				loop := &fakeLoop{steps: tt.steps, stalled: make(chan struct{})}
				if !tt.stalled {
					close(loop.stalled)
				}
				ctx, stop := context.WithCancel(t.Context())
				ended := make(chan struct{})
				go func() { defer close(ended); m.watch(ctx, loop, nil) }()
				time.Sleep(10*time.Second + time.Second/2)
				synctest.Wait()
				got := strings.Count(strings.Join(out.got, "\n"), "WATCHDOG=1")
				if got != tt.want {
					t.Errorf("%d signs of life, want %d", got, tt.want)
				}
				stop()
				if tt.stalled {
					close(loop.stalled)
				}
				<-ended
			})
		})
	}
}
