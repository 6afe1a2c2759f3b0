package dashboard_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"maps"
	"math/rand/v2"
	"net/http"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// behind gives the bodies of the frames that are due after n and pass.
func behind(all []due, n uint64, pass func(due) bool) (bodies [][]byte) {
	for _, f := range all {
		if f.n > n && (pass == nil || pass(f)) {
			bodies = append(bodies, f.body)
		}
	}
	return bodies
}

func noChannels(f due) bool { return f.kind != "channels" }

// checkSame compares frames with those that are due.
func checkSame(t *testing.T, what string, got, want [][]byte) {
	t.Helper()
	for i := range min(len(got), len(want)) {
		if !bytes.Equal(got[i], want[i]) {
			t.Fatalf("%s: frame %d is\n%.300s\nwant\n%.300s", what, i, got[i], want[i])
		}
	}
	if len(got) != len(want) {
		t.Fatalf("%s: %d frames, want %d", what, len(got), len(want))
	}
}

// dig follows keys and indices into a decoded frame; "#" is a length.
func dig(v any, path string) any {
	for key := range strings.SplitSeq(path, ".") {
		switch at := v.(type) {
		case map[string]any:
			v = at[key]
		case []any:
			if key == "#" {
				return len(at)
			}
			i, err := strconv.Atoi(key)
			must(err)
			v = at[i]
		default:
			return nil
		}
	}
	return v
}

// The first frame is a hello with all that a display needs.
func TestLiveHello(t *testing.T) {
	d := newDesk(t)
	d.send(play(start, engineTest(), 20*time.Second, nil))
	_, n := d.n()
	v := d.view(t, "?rig="+rigID)
	frames := v.upto(t, n)
	f := checkJSON(t, "HelloFrame", frames[0])
	for path, want := range map[string]any{
		"n": float64(n), "epoch": 3.0, "api": 1.0, "build": build, "scan_rate": 20.0, // the period of the rig is 50 ms
		"host_time": "2026-03-02T09:00:19.983Z", // of the last message: 20 ms before 20 s, and 3 ms on its way
		"t":         "2026-03-02T09:00:19.95Z",  // the last whole scan before it
		"run.id":    "cell_2-20260302T090001Z", "run.ended": nil,
		"rig.id": rigID, "rig.title": "Alder Bank cell 2", "rig.limits_version": "ML5-LIM-C",
		"channels.#": 18, "channels.1.id": "p_exit", "channels.1.unit": "kPa", "channels.1.reference": "gauge", "channels.1.low": -7000.0,
		"quantities.#": len(allQuantities()), "quantities.0.name": "npr",
		"bands.#": 3, "bands.0.kind": "start", "bands.1.allowance_s": 1.0,
		"ledgers.#": 3, "ledgers.1.exceeded": true, "ledgers.1.limit_k": 993.15,
		"alarms.0.rule": "egt_run_max_exceeded", "choke_armed_above_rpm": 19500.0,
		"status.run_active": true, "status.counters.messages": 1000.0, "status.n": float64(n), // 50 per second
	} {
		if got := dig(f, path); got != want {
			t.Errorf("%s is %v, want %v", path, got, want)
		}
	}
	var stations []string
	for _, c := range f["channels"].([]any) {
		if s := c.(map[string]any)["station"].(string); !slices.Contains(stations, s) {
			stations = append(stations, s)
		}
	}
	if want := []string{"barometer", "exit_plane", "p7", "t7", "inlet_temperature", "inlet_pressure", "humidity", "speed", "fuel_flow", "bellmouth", "egt", ""}; !slices.Equal(stations, want) {
		t.Errorf("stations %q", stations)
	}

	a := d.get(t, "/api/rigs/"+rigID+"/hello")
	if !bytes.Equal(a.body, frames[0]) {
		t.Errorf("over HTTP the hello is another:\n%s\n%s", a.body, frames[0])
	}
}

// Before the first scan and run a hello has null for what is not known.
func TestLiveHelloAtRest(t *testing.T) {
	d := newDesk(t)
	v := d.view(t, "")
	frames, _ := v.until(func(f [][]byte) bool { return len(f) > 0 })
	f := checkJSON(t, "HelloFrame", frames[0])
	if f["t"] != nil || f["run"] != nil || len(f["alarms"].([]any)) != 0 {
		t.Errorf("%s", frames[0])
	}
}

// A whole test goes to a viewer without a frame lost or changed.
func TestLiveIsComplete(t *testing.T) {
	r := recorded()
	checkSame(t, "whole test", r.live, behind(r.sent(), headOf(r.hello).N, nil)[:len(r.live)])
	if n := len(behind(r.sent(), headOf(r.live[len(r.live)-1]).N, nil)); n != 0 {
		t.Errorf("%d frames are missing at the end", n)
	}
}

// Viewers come and go at any time while frames are made, and each gets every frame
// that is due to it from its hello, or where it left, on.
func TestLiveManyViewers(t *testing.T) {
	d := newDesk(t)
	const viewers = 24
	var running sync.WaitGroup
	ctx, stop := context.WithCancel(t.Context())
	failed := make(chan error, viewers)
	var checked atomic.Int64
	var mu sync.Mutex
	open := map[*viewer]bool{}
	d.mu.Lock()
	d.lag = func(n uint64) { // what is made waits for the slowest
		mu.Lock()
		list := slices.Collect(maps.Keys(open))
		mu.Unlock()
		for _, v := range list {
			v.keepsUp(n)
		}
	}
	d.mu.Unlock()
	for i := range viewers {
		running.Go(func() {
			pick := rand.New(rand.NewPCG(1, uint64(i)))
			all, seen := i%2 == 0, uint64(0)
			for ctx.Err() == nil {
				query, pass := "?channels=*", func(due) bool { return true }
				if !all { // these go on where they were: what was missed has no channels frames
					query, pass = "", noChannels
					if seen > 0 {
						query = fmt.Sprintf("?from=3.%d", seen)
					}
				}
				v, err := d.dial(ctx, query, nil)
				if err != nil {
					if ctx.Err() == nil {
						failed <- err
					}
					return
				}
				v.from = seen
				mu.Lock()
				open[v] = true
				mu.Unlock()
				go v.read()
				enough := 20 + pick.IntN(200)
				frames, _ := v.until(func(f [][]byte) bool { return len(f) >= enough || ctx.Err() != nil })
				v.close()
				mu.Lock()
				delete(open, v)
				mu.Unlock()
				if len(frames) > 0 && (all || seen == 0) {
					if headOf(frames[0]).Kind != "hello" {
						failed <- fmt.Errorf("the first frame is %.200s", frames[0])
						return
					}
					seen, frames = headOf(frames[0]).N, frames[1:]
				}
				want := behind(d.sent(), seen, pass)
				if len(want) < len(frames) || !slices.EqualFunc(frames, want[:len(frames)], bytes.Equal) {
					failed <- fmt.Errorf("viewer %d: of %d frames behind %d some are missing or others", i, len(frames), seen)
					return
				}
				checked.Add(int64(len(frames)))
				if len(frames) > 0 {
					seen = headOf(frames[len(frames)-1]).N
				}
			}
		})
	}
	msgs := play(start, engineTest(), 26*time.Second, nil)
	for i := range msgs {
		if i%200 == 0 {
			time.Sleep(time.Millisecond) // viewers come in between
		}
		d.send(msgs[i : i+1])
	}
	d.paced()
	stop()
	d.rest(1) // wakes those that wait for a frame
	running.Wait()
	close(failed)
	for err := range failed {
		t.Error(err)
	}
	if n := checked.Load(); n < 10_000 {
		t.Errorf("%d frames were compared: too few to mean anything", n)
	}
}

// A viewer goes on where it was within the last 10 000 frames; behind that, in
// another epoch and from a future that a crash took away it begins anew.
func TestLiveResume(t *testing.T) {
	d := newDesk(t)
	d.rest(dashboard.Resumable + 5) // a frame each
	for _, tt := range []struct {
		name   string
		epoch  uint64
		back   uint64 // frames before the newest; wraps for those to come
		reason string // of a reset
	}{
		{"nothing missed", 3, 0, ""},
		{"one missed", 3, 1, ""},
		{"some missed", 3, 50, ""},
		{"as many as are kept", 3, dashboard.Resumable, ""},
		{"one more than are kept", 3, dashboard.Resumable + 1, "too_old"},
		{"epoch before", 2, 0, "epoch"},
		{"epoch to come", 4, 0, "epoch"},
		{"more than there is", 3, ^uint64(0), "epoch"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			_, n := d.n()
			v := d.view(t, fmt.Sprintf("?from=%d.%d", tt.epoch, n-tt.back))
			d.rest(1)
			if tt.reason != "" {
				frames := v.upto(t, n+1)
				if f := checkJSON(t, "ResetFrame", frames[0]); f["reason"] != tt.reason {
					t.Errorf("reason %v, want %v", f["reason"], tt.reason)
				}
				checkJSON(t, "HelloFrame", frames[1])
				checkSame(t, "after the hello", frames[2:], behind(d.sent(), n, nil))
				return
			}
			want := behind(d.sent(), n-tt.back, nil)
			want = want[:min(len(want), 200)] // the rest is alike
			frames, err := v.until(func(f [][]byte) bool { return len(f) >= len(want) })
			if err != nil {
				t.Fatal(err)
			}
			checkSame(t, "after what was seen", frames[:len(want)], want)
		})
	}
}

// What was missed is thinned as what comes is.
func TestLiveResumeThinned(t *testing.T) {
	d := newDesk(t)
	d.send(play(start, engineTest(), 10*time.Second, nil))
	epoch, n := d.n()
	d.send(play(d.host(), engineTest(), 5*time.Second, nil)) // within the queue
	_, now := d.n()
	v := d.view(t, fmt.Sprintf("?rate=2&from=%d.%d", epoch, n))
	checkThinned(t, v.upto(t, now), d.sent(), n, 2, false)
}

// checkThinned checks that points, and channels with them, come at most so often and
// that nothing else is left out.
func checkThinned(t *testing.T, frames [][]byte, all []due, n uint64, rate float64, channels bool) {
	t.Helper()
	var points, with []string
	var rest [][]byte
	for _, f := range frames {
		switch h := headOf(f); h.Kind {
		case "operating_point":
			points = append(points, *h.T)
		case "channels":
			with = append(with, *h.T)
		default:
			rest = append(rest, f)
		}
	}
	checkSame(t, "other than points", rest, behind(all, n, func(f due) bool { return f.kind != "operating_point" && f.kind != "channels" }))
	if channels && !slices.Equal(points, with) || !channels && with != nil {
		t.Errorf("points at %q, channels at %q", points, with)
	}
	due := len(behind(all, n, func(f due) bool { return f.kind == "operating_point" }))
	if want := float64(due) / scans * rate; float64(len(points)) < want-1 || float64(len(points)) > want+1 {
		t.Errorf("%d points of %d at %g per second", len(points), due, rate)
	}
	for i := 1; i < len(points); i++ {
		a, errA := time.Parse(time.RFC3339Nano, points[i-1])
		b, errB := time.Parse(time.RFC3339Nano, points[i])
		if errA != nil || errB != nil || b.Sub(a) < time.Duration(1e9/rate) {
			t.Fatalf("points at %s and %s at %g per second", points[i-1], points[i], rate)
		}
	}
}

// rate thins points and channels alike and leaves out no alarm.
func TestLiveRate(t *testing.T) {
	d := newDesk(t)
	_, n := d.n()
	slow, full := d.view(t, "?rate=5&channels=egt_1"), d.view(t, "?rate=20&channels=*")
	slow.upto(t, n)
	full.upto(t, n)
	d.paced(slow, full)
	d.send(play(start, engineTest(), 26*time.Second, nil))
	d.paced()
	d.rest(2)
	_, now := d.n()
	checkThinned(t, slow.upto(t, now)[1:], d.sent(), n, 5, true)
	all := full.upto(t, now)[1:]
	checkSame(t, "rate of the scans", all, behind(d.sent(), n, nil)[:len(all)])
	alarms := 0
	for _, f := range slow.frames {
		if headOf(f).Kind == "alarm" {
			alarms++
		}
	}
	if alarms < 5 {
		t.Errorf("%d alarms: the test has none to thin", alarms)
	}
}

// Channels frames have the channels that were asked for.
func TestLiveChannels(t *testing.T) {
	d := newDesk(t)
	_, cfg := d.config()
	var ids []string
	for i := range cfg.Compute.Channels {
		ids = append(ids, cfg.Compute.Channels[i].ID)
	}
	for query, want := range map[string][]string{
		"":                        nil,
		"?channels=":              nil,
		"?channels=*":             ids,
		"?channels=egt_1":         {"egt_1"},
		"?channels=speed,p7_1":    {"p7_1", "speed"}, // in the order of the rig file
		"?channels=none,egt_1,,x": {"egt_1"},
		"?channels=none":          {},
	} {
		v := d.view(t, query)
		_, before := d.n()
		v.upto(t, before)
		d.send(play(d.host()+second, engineTest(), 500*time.Millisecond, nil))
		_, n := d.n()
		found := 0
		for _, f := range v.upto(t, n-1) {
			if headOf(f).Kind != "channels" {
				continue
			}
			found++
			got := checkJSON(t, "ChannelsFrame", f)["channels"].(map[string]any)
			if len(got) != len(want) {
				t.Fatalf("%s: %s", query, f)
			}
			for _, id := range want {
				if got[id] == nil {
					t.Fatalf("%s: %s is missing in %s", query, id, f)
				}
			}
		}
		if (found > 0) != (want != nil) {
			t.Errorf("%s: %d channels frames", query, found)
		}
		v.close()
	}
}

// A viewer that does not read is closed with 4008. Nobody waits for it: neither the
// watch nor another viewer.
func TestLiveSlowViewer(t *testing.T) {
	d := newNarrowDesk(t)
	slow, err := d.dial(t.Context(), "", nil)
	if err != nil {
		t.Fatal(err)
	}
	defer slow.close()
	quick := d.view(t, "")
	_, n := d.n()
	quick.upto(t, n)
	d.paced(quick)
	began := time.Now()
	d.rest(2 * dashboard.ClientQueue)
	if took := time.Since(began); took > 4*time.Second { // a write to the slow one waits for 5 s
		t.Errorf("the watch took %v for %d frames", took, 2*dashboard.ClientQueue)
	}
	_, now := d.n()
	checkSame(t, "the quick one", quick.upto(t, now)[1:], behind(d.sent(), n, nil))
	go slow.read()
	frames, code, reason := slow.ended(t)
	if code != 4008 || !strings.Contains(reason, "too slow") {
		t.Errorf("closed with %d %q", code, reason)
	}
	if len(frames) < 2 || len(frames) > 2*dashboard.ClientQueue {
		t.Errorf("%d frames came before the close", len(frames))
	}
	checkSame(t, "the slow one", frames[1:], behind(d.sent(), n, nil)[:len(frames)-1])
}

// A viewer whose frames wait for more than 2 s is closed with 4008, however few they
// are.
func TestLiveLateViewer(t *testing.T) {
	t.Parallel()
	d := newNarrowDesk(t)
	late, err := d.dial(t.Context(), "", nil)
	if err != nil {
		t.Fatal(err)
	}
	defer late.close()
	d.rest(dashboard.ClientQueue / 2)
	time.Sleep(2100 * time.Millisecond)
	go late.read()
	if _, code, reason := late.ended(t); code != 4008 || !strings.Contains(reason, "2 s") {
		t.Errorf("closed with %d %q", code, reason)
	}
}

// The end of the watch is told with 1001, and nobody is let in after it.
func TestLiveShutdown(t *testing.T) {
	d := newDesk(t)
	var all []*viewer
	for range 5 {
		v := d.view(t, "")
		_, n := d.n()
		v.upto(t, n)
		all = append(all, v)
	}
	if d.hub.Viewers() != 5 {
		t.Errorf("%d viewers of 5", d.hub.Viewers())
	}
	began := time.Now()
	d.hub.Shutdown()
	if took := time.Since(began); took > 900*time.Millisecond {
		t.Errorf("the end took %v: it waits for viewers that are gone", took)
	}
	if d.hub.Viewers() != 0 {
		t.Errorf("%d viewers are left", d.hub.Viewers())
	}
	for _, v := range all {
		if _, code, _ := v.ended(t); code != websocket.CloseGoingAway {
			t.Errorf("closed with %d", code)
		}
	}
	d.rest(2)
	checkRefused(t, d, "", nil, http.StatusServiceUnavailable)
	d.hub.Shutdown() // once more does no harm
}

// The end does not wait for a viewer that does not read.
func TestLiveShutdownSlowViewer(t *testing.T) {
	t.Parallel()
	d := newNarrowDesk(t)
	slow, err := d.dial(t.Context(), "", nil)
	if err != nil {
		t.Fatal(err)
	}
	d.rest(dashboard.ClientQueue)
	began := time.Now()
	d.hub.Shutdown()
	if took := time.Since(began); took > 3*time.Second {
		t.Errorf("the end took %v", took)
	}
	slow.close()
}

// Another configuration closes with 1012, and what was before it cannot be joined on;
// one that is refused changes nothing.
func TestLiveConfigChange(t *testing.T) {
	d := newDesk(t)
	d.send(play(start, engineTest(), time.Second, nil))
	v := d.view(t, "?channels=egt_1")
	epoch, n := d.n()
	v.upto(t, n)
	d.take(ingest.KindConfig, "broken", d.host())
	d.rest(1)
	_, n = d.n()
	v.upto(t, n)
	if a := d.get(t, "/api/rigs/"+rigID+"/operating-point"); a.status != http.StatusOK {
		t.Errorf("status %d after a configuration that was refused", a.status)
	}

	_, n = d.n()
	d.take(ingest.KindConfig, "Alder Bank cell 2, new rake", d.host())
	last, code, _ := v.ended(t)
	if code != websocket.CloseServiceRestart || len(last) == 0 {
		t.Fatalf("closed with %d after %d frames", code, len(last))
	}
	if f := checkJSON(t, "ConfigFrame", last[len(last)-1]); f["config"].(map[string]any)["refused"] != nil {
		t.Errorf("%s", last[len(last)-1])
	}
	if a := d.get(t, "/api/rigs/"+rigID+"/operating-point"); a.status != http.StatusServiceUnavailable {
		t.Errorf("status %d: the point is that of the configuration before", a.status)
	}
	d.rest(1)
	v = d.view(t, fmt.Sprintf("?from=%d.%d", epoch, n))
	_, now := d.n()
	frames := v.upto(t, now)
	if f := checkJSON(t, "ResetFrame", frames[0]); f["reason"] != "too_old" {
		t.Errorf("reason %v", f["reason"])
	}
	if f := checkJSON(t, "HelloFrame", frames[1]); f["rig"].(map[string]any)["title"] != "Alder Bank cell 2, new rake" {
		t.Errorf("%s", frames[1])
	}
	// A hello of the new configuration is joined on.
	again := d.view(t, fmt.Sprintf("?from=%d.%d", epoch, now))
	d.rest(1)
	_, n = d.n()
	checkSame(t, "after the hello", again.upto(t, n), behind(d.sent(), now, noChannels))
}

// checkRefused checks that a connection is refused with a problem.
func checkRefused(t *testing.T, d *desk, query string, header http.Header, status int) {
	t.Helper()
	conn, res, err := websocket.DefaultDialer.DialContext(t.Context(), "ws"+strings.TrimPrefix(d.http.URL, "http")+"/live"+query, header)
	if conn != nil {
		_ = conn.Close()
	}
	if !errors.Is(err, websocket.ErrBadHandshake) {
		t.Fatalf("%s %v: connected, or %v", query, header, err)
	}
	defer res.Body.Close()
	if res.StatusCode != status || res.Header.Get("Content-Type") != "application/problem+json" {
		t.Errorf("%s %v: status %d, %s, want a problem of %d", query, header, res.StatusCode, res.Header.Get("Content-Type"), status)
	}
}

func TestLiveRefused(t *testing.T) {
	d := newDesk(t)
	header := func(key, value string) http.Header { return http.Header{key: {value}} }
	for _, tt := range []struct {
		query  string
		header http.Header
		status int
	}{
		{"?rig=cell_9", nil, http.StatusNotFound},
		{"?rate=0", nil, http.StatusBadRequest},
		{"?rate=-1", nil, http.StatusBadRequest},
		{"?rate=NaN", nil, http.StatusBadRequest},
		{"?rate=1e9", nil, http.StatusBadRequest},
		{"?rate=1e-300", nil, http.StatusBadRequest},
		{"?rate=fast", nil, http.StatusBadRequest},
		{"?from=3", nil, http.StatusBadRequest},
		{"?from=3.x", nil, http.StatusBadRequest},
		{"?from=-1.2", nil, http.StatusBadRequest},
		{"", header("Origin", "http://elsewhere.example"), http.StatusForbidden},
		{"", header("Origin", "null"), http.StatusForbidden},
		{"", header("Origin", "http://elsewhere.example//"+strings.TrimPrefix(d.http.URL, "http://")), http.StatusForbidden},
		{"", header("Sec-Fetch-Site", "cross-site"), http.StatusForbidden},
		{"", header("Sec-Fetch-Site", "same-site"), http.StatusForbidden},
	} {
		checkRefused(t, d, tt.query, tt.header, tt.status)
	}
	for _, h := range []http.Header{header("Origin", d.http.URL), header("Sec-Fetch-Site", "same-origin"), nil} {
		v, err := d.dial(t.Context(), "", h)
		if err != nil {
			t.Fatalf("%v: %v", h, err)
		}
		v.close()
	}
	if a := d.get(t, "/live?rig="+rigID); a.status != http.StatusUpgradeRequired || a.header.Get("Upgrade") != "websocket" {
		t.Errorf("without an upgrade: status %d, %v", a.status, a.header)
	}
	if a := d.raw(t, http.MethodGet, "/live", "", http.Header{"Connection": {"Upgrade"}, "Upgrade": {"websocket"}, "Sec-Websocket-Version": {"12"}}); a.status != http.StatusBadRequest {
		t.Errorf("an older protocol: status %d, %s", a.status, a.body)
	}
	d.settles(t, 0)
}

// settles waits until so many viewers are connected.
func (d *desk) settles(t *testing.T, viewers int) {
	t.Helper()
	for range 1000 {
		if d.hub.Viewers() == viewers {
			return
		}
		time.Sleep(5 * time.Millisecond)
	}
	t.Errorf("%d viewers are connected, want %d", d.hub.Viewers(), viewers)
}

// There is a bound to the number of viewers, and a place that becomes free is given
// again.
func TestLiveFull(t *testing.T) {
	d := newDesk(t)
	var all []*viewer
	for range dashboard.MaxViewers {
		v, err := d.dial(t.Context(), "", nil)
		if err != nil {
			t.Fatal(err)
		}
		defer v.close()
		all = append(all, v)
	}
	checkRefused(t, d, "", nil, http.StatusServiceUnavailable)
	all[7].close()
	d.settles(t, dashboard.MaxViewers-1)
	d.view(t, "")
}

// A frame goes out to viewers as one allocation: its body.
func TestPublishAllocations(t *testing.T) {
	m := pipeline.NewMachine(parse)
	s := &pipeline.State{}
	hub := dashboard.NewHub(build)
	m.Step(s, &ingest.Record{Seq: 1, Kind: ingest.KindConfig, Payload: []byte("rig")})
	outs := outcomes()[:2] // a point and its channels
	outs[0].Point.Cause = monitor.Cause{}
	hub.Publish(outs, m, s)
	got := testing.AllocsPerRun(2000, func() {
		outs[0].N += 2
		outs[1].N += 2
		hub.Publish(outs, m, s)
	})
	if got > 2 {
		t.Errorf("%v allocations for 2 frames", got)
	}
}
