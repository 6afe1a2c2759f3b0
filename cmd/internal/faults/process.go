package faults

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"sync"
	"syscall"
	"time"
)

const (
	// patience bounds what is waited for on a loaded machine.
	patience = time.Minute
	// look is how often something is looked at that does not tell.
	look = 20 * time.Millisecond
)

// wait waits for a time or for the end of ctx, whose error it gives.
func wait(ctx context.Context, d time.Duration) error {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

// daemon is a watch in a process of its own.
type daemon struct {
	cmd         *exec.Cmd
	said, wrong output
	ended       chan struct{} // closed when the process is gone
	page        string
}

// output gathers what a process writes.
type output struct {
	mu   sync.Mutex // protects text
	text bytes.Buffer
}

// Write keeps what a process says.
func (o *output) Write(p []byte) (int, error) {
	o.mu.Lock()
	defer o.mu.Unlock()
	return o.text.Write(p)
}

func (o *output) String() string {
	o.mu.Lock()
	defer o.mu.Unlock()
	return o.text.String()
}

func startDaemon(ctx context.Context, program, env, args []string) (*daemon, error) {
	d := &daemon{ended: make(chan struct{})}
	all := append(program[1:len(program):len(program)], args...)
	d.cmd = exec.CommandContext(ctx, program[0], all...)
	d.cmd.Env = append(os.Environ(), env...)
	d.cmd.Stdout, d.cmd.Stderr = &d.said, &d.wrong
	if err := d.cmd.Start(); err != nil {
		return nil, err
	}
	go func() { // ends with the process
		defer close(d.ended)
		_ = d.cmd.Wait() // what it says is in the ProcessState
	}()
	return d, nil
}

// kill ends the process as a power cut would, if it still runs.
func (d *daemon) kill() error {
	if err := d.cmd.Process.Kill(); err != nil && !errors.Is(err, os.ErrProcessDone) {
		return err
	}
	<-d.ended
	return d.check()
}

// stop ends the process as a service manager does.
func (d *daemon) stop() error {
	if err := d.cmd.Process.Signal(syscall.SIGTERM); err != nil {
		return d.because(err)
	}
	select {
	case <-d.ended:
	case <-time.After(patience):
		return d.because(errors.New("it does not stop"))
	}
	if code := d.cmd.ProcessState.ExitCode(); code != 0 {
		return d.because(fmt.Errorf("exit code %d after SIGTERM", code))
	}
	return d.check()
}

// check looks for what a daemon may never say, whatever becomes of it.
func (d *daemon) check() error {
	for _, bad := range []string{"panic", "goroutine ", "DATA RACE", "fatal error"} {
		if strings.Contains(d.wrong.String(), bad) {
			return d.because(fmt.Errorf("it says %q", bad))
		}
	}
	return nil
}

func (d *daemon) because(err error) error {
	text := d.wrong.String()
	return fmt.Errorf("the daemon: %w\n%s", err, text[max(0, len(text)-4000):])
}

var pageAddress = regexp.MustCompile(`http://127\.0\.0\.1:\d+`)

// address waits until the daemon serves and gives where, without a slash at the end.
func (d *daemon) address(ctx context.Context) (string, error) {
	ctx, cancel := context.WithTimeout(ctx, patience)
	defer cancel()
	for d.page == "" {
		d.page = pageAddress.FindString(d.said.String())
		select {
		case <-d.ended:
			return "", d.because(errors.New("it has ended"))
		default:
		}
		if err := wait(ctx, look); err != nil {
			return "", d.because(fmt.Errorf("where its page is: %w", err))
		}
	}
	return d.page, nil
}

// hello is how a watch stands.
type hello struct {
	Run    *struct{ ID string }
	Status struct {
		Sessions []struct{ Connected bool }
	}
	Point time.Time // of the newest operating point
}

func (h *hello) connected() bool {
	for _, s := range h.Status.Sessions {
		if !s.Connected {
			return false
		}
	}
	return len(h.Status.Sessions) > 0
}

// until waits until a watch stands as asked.
func (d *daemon) until(ctx context.Context, rig string, ok func(*hello) bool) error {
	ctx, cancel := context.WithTimeout(ctx, patience)
	defer cancel()
	page, err := d.address(ctx)
	if err != nil {
		return err
	}
	for {
		var h hello
		err := get(ctx, page+"/api/rigs/"+rig+"/hello", &h)
		if err == nil {
			var point struct{ T time.Time }
			if get(ctx, page+"/api/rigs/"+rig+"/operating-point", &point) == nil {
				h.Point = point.T // there is none before the first scan
			}
			if ok(&h) {
				return nil
			}
		}
		if waited := wait(ctx, look); waited != nil {
			return d.because(errors.Join(waited, err))
		}
	}
}

func get(ctx context.Context, url string, into any) error {
	body, err := read(ctx, url)
	if err != nil {
		return err
	}
	return json.Unmarshal(body, into)
}

func read(ctx context.Context, url string) ([]byte, error) {
	req, err := http.NewRequestWithContext(ctx, http.MethodGet, url, http.NoBody)
	if err != nil {
		return nil, err
	}
	res, err := http.DefaultClient.Do(req)
	if err != nil {
		return nil, err
	}
	body, err := io.ReadAll(res.Body)
	if err := errors.Join(err, res.Body.Close()); err != nil {
		return nil, err
	}
	if res.StatusCode != http.StatusOK {
		return nil, fmt.Errorf("%s: %s", url, res.Status)
	}
	return body, nil
}

// mosquitto is a site broker that keeps what it holds over a restart.
type mosquitto struct {
	conf, address string
	cmd           *exec.Cmd
}

// startMosquitto starts one with the limits that deploy/mosquitto.conf asks for.
func startMosquitto(ctx context.Context, dir, address string) (*mosquitto, error) {
	dir, err := os.MkdirTemp(dir, "broker-")
	if err != nil {
		return nil, err
	}
	host, port, err := net.SplitHostPort(address)
	if err != nil {
		return nil, err
	}
	text := fmt.Sprintf("listener %s %s\nallow_anonymous true\npersistence true\npersistence_location %s/\nautosave_interval 1800\n"+
		"max_inflight_messages 4096\nmax_queued_messages 200000\nset_tcp_nodelay true\nlog_type none\n", port, host, dir)
	if os.Geteuid() == 0 {
		text += "user root\n" // it would else become a user that cannot read dir
	}
	m := &mosquitto{conf: filepath.Join(dir, "mosquitto.conf"), address: address}
	if err := os.WriteFile(m.conf, []byte(text), 0o600); err != nil {
		return nil, err
	}
	return m, m.start(ctx)
}

func (m *mosquitto) start(ctx context.Context) error {
	program, err := exec.LookPath("mosquitto")
	if err != nil {
		program = "/usr/sbin/mosquitto" // not on everyone's path
	}
	m.cmd = exec.CommandContext(ctx, program, "-c", m.conf)
	if err := m.cmd.Start(); err != nil {
		return err
	}
	ctx, cancel := context.WithTimeout(ctx, patience)
	defer cancel()
	for {
		c, err := (&net.Dialer{}).DialContext(ctx, "tcp", m.address)
		if err == nil {
			return c.Close()
		}
		if waited := wait(ctx, look); waited != nil {
			return fmt.Errorf("mosquitto does not listen: %w", err)
		}
	}
}

// stop ends it in an orderly way: it then writes what it holds.
func (m *mosquitto) stop() error {
	if m.cmd.ProcessState != nil {
		return nil // stopped before
	}
	if err := m.cmd.Process.Signal(syscall.SIGTERM); err != nil {
		return err
	}
	_ = m.cmd.Wait() // ending by a signal counts as an error
	return nil
}

// freeAddress gives a loopback address that nothing listens on.
func freeAddress(ctx context.Context) (string, error) {
	l, err := (&net.ListenConfig{}).Listen(ctx, "tcp", "127.0.0.1:0")
	if err != nil {
		return "", err
	}
	return l.Addr().String(), l.Close()
}

// link passes TCP connections on until it is told otherwise.
type link struct {
	address string
	listen  net.Listener
	all     sync.WaitGroup

	mu     sync.Mutex // protects the fields below
	conns  map[net.Conn]struct{}
	losing bool
}

// newLink starts a link to an address, host:port. Close ends it.
func newLink(ctx context.Context, to string) (*link, error) {
	listen, err := (&net.ListenConfig{}).Listen(ctx, "tcp", "127.0.0.1:0")
	if err != nil {
		return nil, err
	}
	l := &link{address: listen.Addr().String(), listen: listen, conns: map[net.Conn]struct{}{}}
	l.all.Go(func() {
		for {
			in, err := listen.Accept()
			if err != nil {
				return
			}
			out, err := (&net.Dialer{}).DialContext(ctx, "tcp", to)
			if err != nil {
				_ = in.Close() // as a link without a far end does
				continue
			}
			l.mu.Lock()
			l.conns[in], l.conns[out] = struct{}{}, struct{}{}
			l.mu.Unlock()
			l.all.Go(func() { l.pass(out, in) })
			l.all.Go(func() { l.pass(in, out) })
		}
	})
	return l, nil
}

// pass carries one direction of a connection.
func (l *link) pass(to, from net.Conn) {
	defer func() { _, _ = to.Close(), from.Close() }() // cut may have been first
	buf := make([]byte, 32<<10)
	for {
		n, err := from.Read(buf)
		if err != nil {
			return
		}
		l.mu.Lock()
		losing := l.losing
		l.mu.Unlock()
		if losing {
			continue
		}
		if _, err := to.Write(buf[:n]); err != nil {
			return
		}
	}
}

// lose keeps connections open and loses what they carry, or no longer.
func (l *link) lose(losing bool) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.losing = losing
}

// cut ends every connection; new ones are accepted.
func (l *link) cut() {
	l.mu.Lock()
	defer l.mu.Unlock()
	for c := range l.conns {
		_ = c.Close() // that is the fault
	}
	clear(l.conns)
}

func (l *link) close() {
	_ = l.listen.Close() // the far end is gone anyway
	l.cut()
	l.all.Wait()
}
