package bench

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"os"
	"path/filepath"
	"slices"
	"sort"
	"strings"
	"sync"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"
	"github.com/gorilla/websocket"

	"throatwatch/ingest/decode"
)

const (
	latencyRate = 1000                   // messages/s
	turnEvery   = 300 * time.Millisecond // the channel that is watched goes beyond its limit, or comes back
	// limited ends the rig file: a channel with a limit without delay.
	limited = `  - id: limited
    title: Limited
    unit: degC
    range: [-40 degC, 100 degC]
    uncertainty: {fixed: 1 K}
    hold: 2 s
    limits:
      - above: 60 degC
        for: 0 s
        off_delay: 0 s
        deadband: 1 K
        priority: caution
        caution: Part of a measurement.
        response: Follow facility procedure EP-31, lost instrumentation.
`
)

// latency measures the time from the message that completes a scan to the alarm at a
// viewer, beside messages through a bare relay, with a commit stalled for 1 s.
func latency(ctx context.Context, o *Options) ([]Figure, error) {
	rig, bundle, cfg, err := wideRig(o.Rig, o.Dir, wanted-1)
	if err != nil {
		return nil, err
	}
	scans, err := running(ctx, &cfg, bundle)
	if err != nil {
		return nil, err
	}
	l := latencies{bed: bed{o: o, rig: rig, cfg: &cfg, topic: "rigs/" + cfg.Rig.ID + "/senml"}, span: 12 * time.Second}
	if o.Quick {
		l.span = 3 * time.Second
	}
	for i := range cfg.Compute.Channels {
		c := &cfg.Compute.Channels[i]
		l.readings = append(l.readings, decode.Reading{Name: c.ID, Unit: c.Raw.Name, Value: scans[0].Raw[i]})
	}
	l.readings = append(l.readings, decode.Reading{Name: "limited", Unit: "Cel"})
	text, err := os.ReadFile(rig)
	if err != nil {
		return nil, err
	}
	if err := os.WriteFile(rig, append(text, limited...), 0o600); err != nil {
		return nil, err
	}
	var far [2][]float64 // 99th percentiles
	side := func(i int, measure func(context.Context, string) ([]float64, error)) func() (float64, error) {
		return func() (float64, error) {
			ctx, cancel := context.WithTimeout(ctx, patience)
			defer cancel()
			url, stop, err := l.mosquitto(ctx)
			if err != nil {
				return 0, err
			}
			defer stop()
			ms, err := measure(ctx, url)
			if err != nil {
				return 0, err
			}
			slices.Sort(ms)
			far[i] = append(far[i], ms[len(ms)*99/100])
			return ms[len(ms)/2], nil
		}
	}
	half, err := alternate(o.pairs(), side(0, l.alarm), side(1, l.relayed))
	if err != nil {
		return nil, err
	}
	p99 := make([]pair, len(half))
	for i := range p99 {
		p99[i] = pair{far[0][i], far[1][i]}
	}
	return []Figure{
		compared("message that completes a scan to alarm at a viewer, 1000 messages/s, a commit stalled 1 s, beside a bare relay, p50, ms", half,
			"≤ 1.5 ×", func(f *Figure) bool { return *f.Ratio <= 1.5 }),
		compared("the same, p99, ms", p99, "≤ 5 ms", func(f *Figure) bool { return f.Ours <= 5 }),
	}, nil
}

// latencies is what alarms are measured with.
type latencies struct {
	bed
	readings []decode.Reading
	span     time.Duration
}

// play publishes for the span and gives when each message, by its device time, was sent.
func (l *latencies) play(ctx context.Context, url string) (stamps []int64, err error) {
	client, err := connect(url, "bench-publisher", nil)
	if err != nil {
		return nil, err
	}
	defer client.Disconnect(100)
	var sent paho.Token
	began := time.Now()
	for i := 0; ctx.Err() == nil; i++ {
		due := time.Duration(i) * time.Second / latencyRate
		if due > l.span {
			sent.Wait()
			return stamps, sent.Error()
		}
		time.Sleep(time.Until(began.Add(due)))
		last := &l.readings[len(l.readings)-1]
		last.Value = 20
		if due/turnEvery%2 == 1 {
			last.Value = 80
		}
		now := time.Now().UnixNano() / 1000 * 1000 // as a pack has it
		stamps = append(stamps, now)
		sent = client.Publish(l.topic, 1, false, decode.AppendSenMLJSON(make([]byte, 0, 4096), "", now, l.readings))
	}
	return nil, ctx.Err()
}

// alarm measures the daemon.
func (l *latencies) alarm(ctx context.Context, url string) (ms []float64, err error) {
	w, err := l.start(ctx, url)
	if err != nil {
		return nil, err
	}
	defer func() { err = w.end(err) }()
	type seen struct{ t, at int64 }
	var alarms []seen
	var all sync.WaitGroup
	all.Go(func() {
		for {
			_, body, err := w.viewer.ReadMessage()
			at := time.Now().UnixNano()
			if err != nil {
				return
			}
			var f struct {
				Kind  string
				T     time.Time
				Alarm struct{ Rule string }
			}
			if json.Unmarshal(body, &f) == nil && f.Kind == "alarm" && strings.Contains(f.Alarm.Rule, "limited") {
				alarms = append(alarms, seen{f.T.UnixNano(), at})
			}
		}
	})
	stalled := make(chan error, 1)
	go func() {
		time.Sleep(l.span / 2)
		stalled <- stall(ctx, w.data)
	}()
	stamps, err := l.play(ctx, w.url)
	if err := errors.Join(err, <-stalled); err != nil {
		return nil, err
	}
	time.Sleep(2 * time.Second)
	_ = w.viewer.Close()
	all.Wait()
	for _, a := range alarms {
		i := sort.Search(len(stamps), func(i int) bool { return stamps[i] >= a.t })
		if i < len(stamps) {
			ms = append(ms, float64(a.at-stamps[i])/1e6)
		}
	}
	if want := int(l.span/turnEvery) / 2; len(ms) < want {
		return nil, fmt.Errorf("%d alarms came, want %d at least", len(ms), want)
	}
	return ms, nil
}

// stall holds the write lock of the file that is recorded into for 1 s, as a slow disk
// would.
func stall(ctx context.Context, data string) (err error) {
	files, err := filepath.Glob(filepath.Join(data, "runs", "*.db"))
	if err != nil {
		return err
	}
	idle, err := filepath.Glob(filepath.Join(data, "idle-*.db"))
	if err != nil {
		return err
	}
	for _, f := range append(files, idle...) {
		db, err := sql.Open("sqlite", "file:"+f+"?_txlock=immediate&_pragma=busy_timeout(5000)")
		if err != nil {
			return err
		}
		defer db.Close() //nolint:errcheck // nothing is written
		tx, err := db.BeginTx(ctx, nil)
		if err != nil {
			return fmt.Errorf("%s: %w", f, err)
		}
		defer tx.Rollback() //nolint:errcheck // nothing is written
	}
	time.Sleep(time.Second)
	return nil
}

// relayed measures a bare relay: every message.
func (l *latencies) relayed(ctx context.Context, url string) (ms []float64, err error) {
	cmd, says, err := l.part(ctx, "relay", url, l.topic)
	if err != nil {
		return nil, err
	}
	defer end(cmd)
	at, err := heard(says, "at")
	if err != nil {
		return nil, err
	}
	viewer, answer, err := websocket.DefaultDialer.DialContext(ctx, "ws://"+at+"/", nil)
	if err != nil {
		return nil, err
	}
	_ = answer.Body.Close()
	var got []int64
	var all sync.WaitGroup
	all.Go(func() {
		for {
			if _, _, err := viewer.ReadMessage(); err != nil {
				return
			}
			got = append(got, time.Now().UnixNano())
		}
	})
	stamps, err := l.play(ctx, url)
	time.Sleep(2 * time.Second)
	_ = viewer.Close()
	all.Wait()
	if err != nil {
		return nil, err
	}
	if len(got) != len(stamps) {
		return nil, fmt.Errorf("%d of %d messages came through the relay", len(got), len(stamps))
	}
	for i := range got {
		ms = append(ms, float64(got[i]-stamps[i])/1e6)
	}
	return ms, nil
}

// relay passes every message on to one viewer. It says "at ADDRESS" when it is ready.
func relay(ctx context.Context, url, topic string, stdout io.Writer) error {
	addr, err := freePort(ctx)
	if err != nil {
		return err
	}
	queue := make(chan []byte, window) // full: the subscriber waits
	up := websocket.Upgrader{}
	server := &http.Server{Addr: addr, ReadHeaderTimeout: time.Second, Handler: http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		c, err := up.Upgrade(w, r, nil)
		if err != nil {
			return
		}
		for body := range queue {
			if c.WriteMessage(websocket.TextMessage, body) != nil {
				return
			}
		}
	})}
	failed := make(chan error, 1)
	go func() { failed <- server.ListenAndServe() }()
	client, err := connect(url, "bench-relay", func(_ paho.Client, m paho.Message) {
		queue <- m.Payload()
		m.Ack()
	})
	if err != nil {
		return err
	}
	defer client.Disconnect(100)
	if t := client.Subscribe(topic, 1, nil); t.Wait() && t.Error() != nil {
		return t.Error()
	}
	time.Sleep(200 * time.Millisecond) // the server listens
	_, _ = fmt.Fprintln(stdout, "at", addr)
	select {
	case err := <-failed:
		return err
	case <-ctx.Done():
		return server.Close()
	}
}
