package bench

import (
	"bufio"
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
	"strconv"
	"strings"
	"syscall"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/ingest/decode"
	"throatwatch/rules/pipeline"
)

const (
	// steadyRate is the rate at which there must be no backlog, messages/s.
	steadyRate = 10_000
	// patience bounds one side of a pair.
	patience = 2 * time.Minute
	// clockTick is the unit of processor time in /proc, s (proc(5): USER_HZ is 100).
	clockTick = 0.01
)

// taken is one side of a pair.
type taken struct {
	perSecond float64       // from the first message published to the last taken
	cpu       float64       // µs per message, of the side that takes
	behind    time.Duration // from the last message acknowledged to the publisher to the last taken
	doubted   float64       // part of the values that was not used, or used with a doubt
	let       float64       // part of the messages that was stepped and let go unrecorded
}

// intake measures how fast messages are taken in with all stages on, beside a bare
// subscriber, by mosquitto and by the embedded broker.
func intake(ctx context.Context, o *Options) ([]Figure, error) {
	rig, bundle, cfg, err := wideRig(o.Rig, o.Dir, wanted)
	if err != nil {
		return nil, err
	}
	scans, err := running(ctx, &cfg, bundle)
	if err != nil {
		return nil, err
	}
	var readings []decode.Reading
	for i := range cfg.Compute.Channels {
		c := &cfg.Compute.Channels[i]
		readings = append(readings, decode.Reading{Name: c.ID, Unit: c.Raw.Name, Value: scans[0].Raw[i]})
	}
	text, err := json.Marshal(readings)
	if err != nil {
		return nil, err
	}
	b := bed{o: o, rig: rig, cfg: &cfg, readings: filepath.Join(o.Dir, "readings.json"), topic: "rigs/" + cfg.Rig.ID + "/senml"}
	if err := os.WriteFile(b.readings, text, 0o600); err != nil {
		return nil, err
	}
	full, paced := 40_000, 40_000
	if o.Quick {
		full, paced = 2_000, 2_000
	}
	var out []Figure
	for _, by := range []struct {
		name     string
		embedded bool
		least    float64
	}{{"mosquitto", false, 0.8}, {"the embedded broker", true, 0.85}} {
		fast, err := b.compare(ctx, by.embedded, full, 0)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", by.name, err)
		}
		even, err := b.compare(ctx, by.embedded, paced, steadyRate)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", by.name, err)
		}
		let, doubted := func(t taken) float64 { return t.let }, func(t taken) float64 { return t.doubted }
		unrecorded := median(of(fast, let), ours)
		none := func(f *Figure) bool { return f.Ours == 0 }
		at := fmt.Sprintf("at %d/s by %s, ", steadyRate, by.name)
		out = append(out,
			compared("taken in by "+by.name+", all stages, 1 kB QoS 1, beside a bare subscriber, messages/s",
				of(fast, func(t taken) float64 { return t.perSecond }), fmt.Sprintf("≥ %g, all recorded", by.least), func(f *Figure) bool { return *f.Ratio >= by.least && unrecorded == 0 }),
			alone("of these let go unrecorded, as the disk did not keep up", unrecorded, "0", none),
			alone("of their values late or in doubt", median(of(fast, doubted), ours), "reported", nil),
			compared(at+"beside the bare subscriber, CPU µs per message",
				of(even, func(t taken) float64 { return t.cpu }), "≤ 1.6 ×", func(f *Figure) bool { return *f.Ratio <= 1.6 }),
			alone(at+"last taken after the last was acknowledged to its publisher, s",
				median(of(even, func(t taken) float64 { return t.behind.Seconds() }), ours), "≤ 0.5", func(f *Figure) bool { return f.Ours <= 0.5 }),
			alone(at+"rate kept, messages/s", median(of(even, func(t taken) float64 { return t.perSecond }), ours), "≥ 9900", func(f *Figure) bool { return f.Ours >= 0.99*steadyRate }),
			alone(at+"let go unrecorded", median(of(even, let), ours), "0", none))
	}
	return out, nil
}

// bed is what an intake is measured with.
type bed struct {
	o                    *Options
	rig, readings, topic string
	cfg                  *pipeline.Config
	n                    int
}

// compare measures pairs of the daemon and a bare subscriber.
func (b *bed) compare(ctx context.Context, embedded bool, count, perSecond int) (all [][2]taken, err error) {
	var last [2]taken
	side := func(i int, take func(context.Context, string, int, int) (taken, error)) func() (float64, error) {
		return func() (_ float64, err error) {
			ctx, cancel := context.WithTimeout(ctx, patience)
			defer cancel()
			url, stop := "", func() {}
			if !embedded {
				if url, stop, err = b.mosquitto(ctx); err != nil {
					return 0, err
				}
			}
			defer stop()
			last[i], err = take(ctx, url, count, perSecond)
			return last[i].perSecond, err
		}
	}
	for k := range b.o.pairs() {
		one, other := side(0, b.daemon), side(1, b.bare)
		if k%2 == 1 {
			one, other = other, one
		}
		if _, err := alternate(1, one, other); err != nil {
			return nil, err
		}
		all = append(all, last)
	}
	return all, nil
}

// of gives pairs of one value of both sides.
func of(all [][2]taken, value func(taken) float64) (list []pair) {
	for _, p := range all {
		list = append(list, pair{value(p[0]), value(p[1])})
	}
	return list
}

// mosquitto starts a broker with the limits of deploy/mosquitto.conf.
func (b *bed) mosquitto(ctx context.Context) (url string, stop func(), err error) {
	program, err := exec.LookPath("mosquitto")
	if err != nil {
		program = "/usr/sbin/mosquitto" // not on everyone's path
	}
	addr, err := freePort(ctx)
	if err != nil {
		return "", nil, err
	}
	host, port, err := net.SplitHostPort(addr)
	if err != nil {
		return "", nil, err
	}
	conf := filepath.Join(b.o.Dir, "mosquitto.conf")
	text := fmt.Sprintf("listener %s %s\nallow_anonymous true\nmax_inflight_messages %d\nmax_queued_messages 200000\nset_tcp_nodelay true\nlog_type none\n", port, host, window)
	if err := os.WriteFile(conf, []byte(text), 0o600); err != nil {
		return "", nil, err
	}
	cmd := exec.CommandContext(ctx, program, "-c", conf)
	if err := cmd.Start(); err != nil {
		return "", nil, err
	}
	stop = func() { end(cmd) }
	for ctx.Err() == nil {
		c, err := (&net.Dialer{}).DialContext(ctx, "tcp", addr)
		if err == nil {
			return "mqtt://" + addr, stop, c.Close()
		}
		time.Sleep(20 * time.Millisecond)
	}
	stop()
	return "", nil, ctx.Err()
}

// end ends a process in an orderly way.
func end(cmd *exec.Cmd) {
	_ = cmd.Process.Signal(syscall.SIGTERM)
	_ = cmd.Wait() // ending by a signal counts as an error
}

// part starts a part of this program and gives the lines that it says.
func (b *bed) part(ctx context.Context, args ...string) (*exec.Cmd, *bufio.Scanner, error) {
	self, err := os.Executable()
	if err != nil {
		return nil, nil, err
	}
	cmd := exec.CommandContext(ctx, self, append([]string{"part"}, args...)...)
	cmd.Stderr = os.Stderr
	out, err := cmd.StdoutPipe()
	if err != nil {
		return nil, nil, err
	}
	return cmd, bufio.NewScanner(out), cmd.Start()
}

// heard waits for a word and gives what stands behind it.
func heard(s *bufio.Scanner, word string) (string, error) {
	if !s.Scan() || !strings.HasPrefix(s.Text(), word) {
		return "", fmt.Errorf("a part says %q instead of %q", s.Text(), word)
	}
	return strings.TrimSpace(strings.TrimPrefix(s.Text(), word)), nil
}

// drive publishes and waits until wait returns; pid is the process that takes.
func (b *bed) drive(ctx context.Context, url string, count, perSecond, pid int, wait func() error) (t taken, err error) {
	publisher, says, err := b.part(ctx, "publish", url, b.topic, strconv.Itoa(count), strconv.Itoa(perSecond), b.readings)
	if err != nil {
		return t, err
	}
	defer end(publisher)
	if _, err := heard(says, "first"); err != nil {
		return t, err
	}
	began := time.Now()
	before, err := usedBy(pid)
	if err != nil {
		return t, err
	}
	sent := make(chan time.Time, 1)
	go func() {
		if _, err := heard(says, "sent"); err == nil {
			sent <- time.Now()
		}
		close(sent)
	}()
	if err := wait(); err != nil {
		return t, err
	}
	end := time.Now()
	after, err := usedBy(pid)
	if err != nil {
		return t, err
	}
	at, ok := <-sent
	if !ok {
		return t, fmt.Errorf("not all of %d messages were published", count)
	}
	return taken{
		perSecond: float64(count) / end.Sub(began).Seconds(), cpu: (after - before) * 1e6 / float64(count),
		behind: max(0, end.Sub(at)),
	}, nil
}

// bare is a subscriber of the library with nothing behind it.
func (b *bed) bare(ctx context.Context, url string, count, perSecond int) (t taken, err error) {
	cmd, says, err := b.part(ctx, "subscribe", url, b.topic, strconv.Itoa(count))
	if err != nil {
		return t, err
	}
	defer end(cmd)
	if url, err = heard(says, "at"); err != nil {
		return t, err
	}
	return b.drive(ctx, url, count, perSecond, cmd.Process.Pid, func() error {
		_, err := heard(says, "took")
		return err
	})
}

// watching is a daemon with one viewer.
type watching struct {
	cmd             *exec.Cmd
	errs            *bytes.Buffer
	page, url, data string
	viewer          *websocket.Conn
	messages        float64 // that it took before
}

// start starts a watch, with the embedded broker where no url is given.
func (b *bed) start(ctx context.Context, url string) (w *watching, err error) {
	b.n++
	w = &watching{url: url, data: filepath.Join(b.o.Dir, fmt.Sprintf("watch-%d", b.n)), errs: &bytes.Buffer{}}
	if w.page, err = freePort(ctx); err != nil {
		return nil, err
	}
	args := []string{"watch", b.rig, "--data", w.data, "--listen", w.page}
	if url == "" {
		listen, err := freePort(ctx)
		if err != nil {
			return nil, err
		}
		args, w.url = append(args, "--broker-listen", listen), "mqtt://"+listen
	} else {
		args = append(args, "--broker", url)
	}
	w.cmd = exec.CommandContext(ctx, b.o.Program, args...)
	w.cmd.Stderr = w.errs
	if err := w.cmd.Start(); err != nil {
		return nil, err
	}
	if w.messages, err = untilUp(ctx, w.page); err != nil {
		return nil, w.end(err)
	}
	viewer, answer, err := websocket.DefaultDialer.DialContext(ctx, "ws://"+w.page+"/live?rig="+b.cfg.Rig.ID, nil)
	if err != nil {
		return nil, w.end(err)
	}
	w.viewer = viewer
	_ = answer.Body.Close()
	return w, nil
}

// end ends the daemon; an error gets what it said.
func (w *watching) end(err error) error {
	if w.viewer != nil {
		_ = w.viewer.Close()
	}
	end(w.cmd)
	if err != nil {
		err = fmt.Errorf("%w\n%s", err, w.errs.String())
	}
	return errors.Join(err, os.RemoveAll(w.data))
}

// daemon is a whole watch with one viewer.
func (b *bed) daemon(ctx context.Context, url string, count, perSecond int) (t taken, err error) {
	w, err := b.start(ctx, url)
	if err != nil {
		return t, err
	}
	defer func() { err = w.end(err) }()
	go func() {
		for {
			if _, _, err := w.viewer.ReadMessage(); err != nil {
				return
			}
		}
	}()
	t, err = b.drive(ctx, w.url, count, perSecond, w.cmd.Process.Pid, func() error {
		for {
			n, err := metric(ctx, w.page, "throatwatch_messages_total")
			if err != nil || n >= w.messages+float64(count) {
				return err
			}
			time.Sleep(20 * time.Millisecond)
		}
	})
	if err != nil {
		return t, err
	}
	doubted, err := metric(ctx, w.page, "throatwatch_not_used_total")
	t.doubted = doubted / (perPack * float64(count))
	end(w.cmd) // what it said is whole then
	for line := range strings.Lines(w.errs.String()) {
		if _, n, ok := strings.Cut(line, "records_not_stored="); ok {
			lost, err := strconv.ParseFloat(strings.TrimSpace(n), 64)
			if err != nil {
				return t, err
			}
			t.let += lost / float64(count)
		}
	}
	return t, err
}

// untilUp waits until the page answers and the sessions at the broker exist.
func untilUp(ctx context.Context, page string) (messages float64, err error) {
	for ctx.Err() == nil {
		if _, err := metric(ctx, page, "throatwatch_messages_total"); err == nil {
			time.Sleep(2 * time.Second) // the sessions
			return metric(ctx, page, "throatwatch_messages_total")
		}
		time.Sleep(50 * time.Millisecond)
	}
	return 0, fmt.Errorf("the watch does not answer: %w", ctx.Err())
}

// metric reads one of the daemon's metrics, the sum over its labels.
func metric(ctx context.Context, page, name string) (float64, error) {
	req, err := http.NewRequestWithContext(ctx, http.MethodGet, "http://"+page+"/metrics", http.NoBody)
	if err != nil {
		return 0, err
	}
	res, err := http.DefaultClient.Do(req)
	if err != nil {
		return 0, err
	}
	text, err := io.ReadAll(res.Body)
	_ = res.Body.Close()
	if err != nil {
		return 0, err
	}
	sum, found := 0.0, false
	for line := range strings.Lines(string(text)) {
		if fields := strings.Fields(line); len(fields) == 2 && (fields[0] == name || strings.HasPrefix(fields[0], name+"{")) {
			v, err := strconv.ParseFloat(fields[1], 64)
			if err != nil {
				return 0, err
			}
			sum, found = sum+v, true
		}
	}
	if !found {
		return 0, fmt.Errorf("no metric %s", name)
	}
	return sum, nil
}

// usedBy gives the processor time of a process, s.
func usedBy(pid int) (float64, error) {
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", pid))
	if err != nil {
		return 0, err
	}
	_, rest, _ := strings.Cut(string(text), ") ") // behind the name, which may hold anything
	fields := strings.Fields(rest)
	if len(fields) < 13 {
		return 0, fmt.Errorf("/proc/%d/stat has %d fields", pid, len(fields))
	}
	user, err := strconv.ParseFloat(fields[11], 64)
	if err != nil {
		return 0, err
	}
	system, err := strconv.ParseFloat(fields[12], 64)
	return (user + system) * clockTick, err
}
