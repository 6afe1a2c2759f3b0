package faults

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/rules/pipeline"
)

// SoakOptions say how a watch is soaked. Program, Rig, Dir and Data are those of Options.
type SoakOptions struct {
	Program        []string
	Env            []string
	Rig, Dir, Data string
	Channels       int           // at least; further ones are only recorded
	Values         float64       // per second
	For, Every     time.Duration // in all, and between readings
	Seed           uint64
}

// Reading is how a watch stands after a while of soaking.
type Reading struct {
	Elapsed   float64 `json:"elapsed_s"`
	Resident  float64 `json:"resident_bytes"` // NaN where the system does not tell
	Files     float64 `json:"open_files"`
	Rate      float64 `json:"values_per_second"` // that fell into scans since the reading before
	Scans     float64 `json:"scans"`
	Skipped   float64 `json:"scans_skipped"`
	Late      float64 `json:"late"` // samples after their scan, since the beginning
	Recording bool    `json:"recording"`
	Alarms    int     `json:"alarms"`  // raised since the beginning
	Latency   float64 `json:"latency"` // s, the longest from the event time at which an alarm was raised to its arrival at a viewer
}

// Soaked is what came of a soak.
type Soaked struct {
	Channels int       `json:"channels"`
	Sent     int       `json:"sent"` // values, acknowledged by the broker
	Used     float64   `json:"used"` // that fell into a scan
	Late     float64   `json:"late"` // that were counted as late
	Lost     float64   `json:"lost"` // neither
	Readings []Reading `json:"readings"`
}

// Widen writes a rig file with as many channels as are wanted at least, the further ones
// like its compressor pressure, into dir.
func Widen(name, dir string, channels int) (path string, err error) {
	text, err := os.ReadFile(name)
	if err != nil {
		return "", err
	}
	_, cfg, found := config.Load(name)
	if err := watch.Faults(found); err != nil {
		return "", err
	}
	b := bytes.NewBuffer(text)
	for i := len(cfg.Compute.Channels); i < channels; i++ {
		_, _ = fmt.Fprintf(b, "  - {id: further_%d, like: p_compressor, title: Further %d}\n", i, i)
	}
	path = filepath.Join(dir, fmt.Sprintf("rig-%d.yaml", channels))
	return path, os.WriteFile(path, b.Bytes(), 0o600)
}

// Soak lets a watch run for long at a high rate, by the embedded broker and with one
// viewer, and calls each with the readings as they come.
func Soak(ctx context.Context, o SoakOptions, each func(*Reading)) (s *Soaked, err error) {
	rig, err := Widen(o.Rig, o.Dir, o.Channels)
	if err != nil {
		return nil, err
	}
	_, cfg, found := config.Load(rig)
	if err := watch.Faults(found); err != nil {
		return nil, err
	}
	s = &Soaked{Channels: len(cfg.Compute.Channels)}
	address, err := freeAddress(ctx)
	if err != nil {
		return nil, err
	}
	d, err := startDaemon(ctx, o.Program, o.Env, []string{
		"watch", rig, "--data", filepath.Join(o.Data, "soak"), "--listen", "127.0.0.1:0", "--broker-listen", address,
	})
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, d.kill()) }()
	if err := d.until(ctx, cfg.Rig.ID, (*hello).connected); err != nil {
		return nil, err
	}
	v, err := newViewer(ctx, d.page, cfg.Rig.ID)
	if err != nil {
		return nil, err
	}
	defer v.close()
	packs, err := packsFor(cfg, &o)
	if err != nil {
		return nil, err
	}
	system, err := play(ctx, cfg, "mqtt://"+address, &Options{Rate: packs}, o.Seed)
	if err != nil {
		return nil, err
	}
	defer system.close()
	system.forget.Store(true)
	began, last := time.Now(), Reading{}
	samples := 0.0
	for time.Since(began) < o.For {
		if err := wait(ctx, min(o.Every, o.For-time.Since(began))); err != nil {
			return nil, err
		}
		m, err := readMetrics(ctx, d.page)
		if err != nil {
			return nil, d.because(err)
		}
		r := Reading{
			Elapsed: time.Since(began).Seconds(), Resident: m["process_resident_memory_bytes"], Files: m["process_open_fds"],
			Scans: m["scans_total"], Skipped: m["scans_skipped_total"], Late: m[`not_used_total{reason="late"}`], Recording: m["recording"] == 1,
		}
		r.Rate = (m["samples_total"] - samples) / (r.Elapsed - last.Elapsed)
		r.Alarms, r.Latency = v.seen()
		samples, last = m["samples_total"], r
		s.Readings = append(s.Readings, r)
		each(&r)
	}
	system.stopSoon.Store(true)
	if err := system.end(ctx); err != nil {
		return nil, err
	}
	s.Sent = system.values
	for deadline := time.Now().Add(patience); ; { // what the broker holds is still to come
		m, err := readMetrics(ctx, d.page)
		if err != nil {
			return nil, d.because(err)
		}
		s.Used, s.Late = m["samples_total"], m[`not_used_total{reason="late"}`]
		if s.Lost = max(0, float64(s.Sent)-s.Used-s.Late); s.Lost == 0 || time.Now().After(deadline) {
			break
		}
		if err := wait(ctx, 10*look); err != nil {
			return nil, err
		}
	}
	return s, d.stop()
}

// packsFor gives the packs per second by which a rehearsal has the values that are asked
// for, as far as it can: not every channel is in every pack.
func packsFor(cfg pipeline.Config, o *SoakOptions) (float64, error) {
	const least, most, tried = 1, 1000, 2 * time.Second
	packs := min(max(o.Values/float64(len(cfg.Compute.Channels)), least), most)
	rig, err := rehearsal.New(cfg, rehearsal.Options{Scenario: rehearsal.Quick, Rate: packs, Seed: o.Seed})
	if err != nil {
		return 0, err
	}
	values := 0
	var msgs []rehearsal.Message
	for more := true; more && rig.Now() < int64(tried); {
		msgs, more = rig.Next(msgs[:0])
		for _, m := range msgs {
			values += valuesIn(m.Payload)
		}
	}
	return min(max(packs*o.Values*tried.Seconds()/float64(max(values, 1)), least), most), nil
}

// valuesIn counts the values of a SenML pack.
func valuesIn(payload []byte) int { return bytes.Count(payload, []byte(`"v":`)) }

// readMetrics gives all metrics of a watch, by name and labels, without their prefix.
func readMetrics(ctx context.Context, page string) (map[string]float64, error) {
	text, err := read(ctx, page+"/metrics")
	if err != nil {
		return nil, err
	}
	all := map[string]float64{}
	for line := range strings.Lines(string(text)) {
		name, value, ok := strings.Cut(strings.TrimSpace(strings.TrimPrefix(line, "throatwatch_")), " ")
		if v, err := strconv.ParseFloat(value, 64); ok && err == nil {
			all[name] = v
		}
	}
	return all, nil
}

// viewer follows the alarms of a watch.
type viewer struct {
	conn    *websocket.Conn
	all     sync.WaitGroup
	alarms  atomic.Int64
	longest atomic.Int64 // ns
}

func newViewer(ctx context.Context, page, rig string) (*viewer, error) {
	conn, answer, err := websocket.DefaultDialer.DialContext(ctx, "ws"+strings.TrimPrefix(page, "http")+"/live?rig="+rig, nil)
	if err != nil {
		return nil, err
	}
	v := &viewer{conn: conn}
	v.all.Go(func() { // ends with the connection
		known := map[string]bool{}
		for {
			_, body, err := conn.ReadMessage()
			if err != nil {
				return
			}
			var f struct {
				Kind  string
				T     time.Time
				Alarm struct{ ID, State string }
			}
			if json.Unmarshal(body, &f) == nil && f.Kind == "alarm" && f.Alarm.State == "unacknowledged" && !known[f.Alarm.ID] {
				known[f.Alarm.ID] = true // it may be raised again, and worsen
				v.alarms.Add(1)
				v.longest.Store(max(v.longest.Load(), int64(time.Since(f.T))))
			}
		}
	})
	return v, answer.Body.Close()
}

// seen gives how many alarms were raised, and the longest time, s, that one took.
func (v *viewer) seen() (alarms int, longest float64) {
	return int(v.alarms.Load()), time.Duration(v.longest.Load()).Seconds()
}

func (v *viewer) close() {
	_ = v.conn.Close() // the daemon is about to end
	v.all.Wait()
}

// SoakHead is the head of the table of readings.
const SoakHead = "elapsed s  resident MB  open files  values/s     scans  skipped      late  recording  alarms  longest s"

// WriteReading writes a reading as a line of it.
func WriteReading(w io.Writer, r *Reading) error {
	_, err := fmt.Fprintf(w, "%9.0f  %11.1f  %10.0f  %8.0f  %8.0f  %7.0f  %8.0f  %9v  %6d  %9.3f\n",
		r.Elapsed, r.Resident/1e6, r.Files, r.Rate, r.Scans, r.Skipped, r.Late, r.Recording, r.Alarms, r.Latency)
	return err
}
