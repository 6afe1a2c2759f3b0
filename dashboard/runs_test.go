package dashboard_test

import (
	"bytes"
	"compress/gzip"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"math"
	"math/rand/v2"
	"net/http"
	"net/http/httptest"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// began gives the start of the recorded run, ns UTC.
func (r *recording) began(t *testing.T) int64 {
	t.Helper()
	line := into[struct{ Started string }](t, r.get(t, "/api/runs/"+r.id))
	at, err := time.Parse(time.RFC3339Nano, line.Started)
	if err != nil {
		t.Fatal(err)
	}
	return at.UnixNano()
}

// What was done while the run was recorded was answered with where it came about.
func TestRecordedActions(t *testing.T) {
	r := recorded()
	for what, kind := range map[string]string{"mark": "log", "acknowledge": "log", "end": "run"} {
		a := r.acted[what]
		place := into[struct{ Epoch, N uint64 }](t, a)
		i := slices.IndexFunc(r.sent(), func(f due) bool { return f.n == place.N-1 }) // the action is an outcome after what it brought about
		if a.status != http.StatusAccepted || place.Epoch != 3 || i < 0 || r.sent()[i].kind != kind {
			t.Errorf("%s: status %d: %s", what, a.status, a.body)
		}
	}
}

func TestRuns(t *testing.T) {
	r := recorded()
	list := into[[]map[string]any](t, r.get(t, "/api/runs"))
	if len(list) != 1 {
		t.Fatalf("%d runs", len(list))
	}
	run := list[0]
	for path, want := range map[string]any{
		"id": r.id, "rig": rigID, "engine": "Merle 5 ML5-0042", "title": "Alder Bank cell 2", "by": "engine", "state": "ended",
		"started": "2026-03-02T09:00:02.2Z", "ended": "2026-03-02T09:00:26.95Z", "duration_s": 24.75,
		"keep": false, "notes": "first run", "tags.0": "nozzle", "build": build,
	} {
		if got := dig(run, path); got != want {
			t.Errorf("%s is %v, want %v", path, got, want)
		}
	}
	if run["size_bytes"].(float64) < 1e5 || len(run["digest"].(string)) != 64 {
		t.Errorf("%v bytes, digest %v", run["size_bytes"], run["digest"])
	}
	one := into[map[string]any](t, r.get(t, "/api/runs/"+r.id))
	if fmt.Sprint(one) != fmt.Sprint(run) {
		t.Errorf("alone it is\n%v\nin the list\n%v", one, run)
	}
	for _, tail := range []string{"", "/messages", "/series?names=npr"} {
		checkStatus(t, tail, r.get(t, "/api/runs/nothing"+tail), http.StatusNotFound, "nothing")
	}
	for _, id := range []string{"..%2Frun", "run.db", "idle", "%00", r.id + "x"} {
		checkStatus(t, id, r.get(t, "/api/runs/"+id), http.StatusNotFound, "no run")
	}
}

// odd gives a list and fails to open.
type odd struct{ list, open error }

func (o odd) List(context.Context, runfile.Filter) ([]runfile.Run, error) {
	a, b := runfile.Run{}, runfile.Run{}
	a.ID, a.Started, a.State = "old", start, runfile.StateInterrupted
	b.ID, b.Started, b.State = "new", start+second, runfile.StateRunning
	return []runfile.Run{a, b}, o.list
}

func (o odd) Open(context.Context, string) (*runfile.File, error) { return nil, o.open }

func (odd) Annotate(context.Context, string, func(*runfile.Header)) (runfile.Run, error) {
	return runfile.Run{}, runfile.ErrUnknownRun
}

func (odd) Remove(context.Context, string, string, string) error { return dashboard.ErrRunning }

// A run that is on or was cut off is listed as such, the newest first; a file that is
// gone or cannot be read is told.
func TestRunsOdd(t *testing.T) {
	get := func(runs dashboard.Runs, path string) answer {
		d := makeDesk()
		s := dashboard.NewServer(dashboard.Config{Desk: d, Runs: runs, Parse: parse, Log: slog.New(slog.DiscardHandler)}, d.hub)
		w := httptest.NewRecorder()
		s.ServeHTTP(w, httptest.NewRequestWithContext(t.Context(), http.MethodGet, path, nil))
		a := answer{w.Code, w.Header(), w.Body.Bytes()}
		checkDescribed(t, http.MethodGet, path, "", a)
		return a
	}
	list := into[[]map[string]any](t, get(odd{}, "/api/runs"))
	if list[0]["id"] != "new" || list[0]["state"] != "active" || list[0]["ended"] != nil || list[0]["duration_s"] != nil || list[1]["state"] != "interrupted" {
		t.Errorf("%v", list)
	}
	checkStatus(t, "no list", get(odd{list: errors.New("disk gone")}, "/api/runs"), http.StatusInternalServerError, "disk gone")
	checkStatus(t, "no list", get(odd{list: errors.New("disk gone")}, "/api/runs/old"), http.StatusInternalServerError, "disk gone")
	checkStatus(t, "no file", get(odd{open: os.ErrNotExist}, "/api/runs/old"), http.StatusNotFound, "is gone")
	checkStatus(t, "no run file", get(odd{open: runfile.ErrNotRunFile}, "/api/runs/old/messages"), http.StatusNotFound, "is gone")
	checkStatus(t, "another version", get(odd{open: runfile.ErrVersion}, "/api/runs/old/series?names=npr"), http.StatusInternalServerError, "another version")
}

// stretch gets the stored frames of a stretch, without and with the hello.
func (r *recording) stretch(t *testing.T, query string) (hello []byte, frames [][]byte) {
	t.Helper()
	a := r.get(t, "/api/runs/"+r.id+"/messages"+query)
	if a.status != http.StatusOK {
		t.Fatalf("%s: status %d: %s", query, a.status, a.body)
	}
	all := lines(a.body)
	if len(all) == 0 {
		return nil, nil
	}
	return all[0], all[1:]
}

// fromPoint gives the frames that are due from the first operating point at or after a
// time on to the one at or after another.
func fromPoint(all []due, from, to int64) (bodies [][]byte) {
	began := false
	for _, f := range all {
		if f.kind == "operating_point" {
			if f.t >= to {
				break
			}
			began = began || f.t >= from
		}
		if began {
			bodies = append(bodies, f.body)
		}
	}
	return bodies
}

// checkHello checks that a hello stands right before the frames.
func checkHello(t *testing.T, hello []byte, frames [][]byte) map[string]any {
	t.Helper()
	f := checkJSON(t, "HelloFrame", hello)
	h, first := headOf(hello), headOf(frames[0])
	if h.N != first.N-1 || h.Epoch != first.Epoch || first.Kind != "operating_point" {
		t.Fatalf("the hello is %d.%d, the first frame %s %d.%d", h.Epoch, h.N, first.Kind, first.Epoch, first.N)
	}
	return f
}

// The stored frames of the whole run are the very frames that went to the viewer.
func TestMessagesAreThoseOfLive(t *testing.T) {
	r := recorded()
	hello, frames := r.stretch(t, "?channels=*")
	f := checkHello(t, hello, frames)
	for path, want := range map[string]any{"run.id": r.id, "rig.title": "Alder Bank cell 2", "t": "2026-03-02T09:00:02.15Z", "build": build} {
		if got := dig(f, path); got != want {
			t.Errorf("%s is %v, want %v", path, got, want)
		}
	}
	i := slices.IndexFunc(r.live, func(f []byte) bool { return bytes.Equal(f, frames[0]) })
	if i < 0 || len(r.live)-i < 1000 {
		t.Fatalf("the first frame is %d of %d that were sent: %.200s", i, len(r.live), frames[0])
	}
	checkSame(t, "stored", frames, r.live[i:])
}

// Stretches that follow each other join without loss or overlap, wherever they meet.
func TestMessagesJoin(t *testing.T) {
	r := recorded()
	_, whole := r.stretch(t, "?from=-1&to=1e6")
	began := r.began(t)
	pick := rand.New(rand.NewPCG(7, 7))
	for range 3 {
		cuts := []float64{-1, 100}
		for range 3 {
			at := 25 * pick.Float64()
			if pick.IntN(2) == 0 {
				at = math.Round(20*at) / 20 // the time of a scan
			}
			cuts = append(cuts, at)
		}
		slices.Sort(cuts)
		var joined [][]byte
		for i := 1; i < len(cuts); i++ {
			from, to := fmt.Sprint(cuts[i-1]), fmt.Sprint(cuts[i])
			if pick.IntN(2) == 0 { // a time says the same as seconds
				from = time.Unix(0, began+int64(math.Round(cuts[i-1]*1e9))).UTC().Format(time.RFC3339Nano)
			}
			hello, frames := r.stretch(t, "?from="+from+"&to="+to)
			if len(frames) > 0 {
				checkHello(t, hello, frames)
			}
			want := fromPoint(r.sent(), began+int64(math.Round(cuts[i-1]*1e9)), began+int64(math.Round(cuts[i]*1e9)))
			checkSame(t, from+" to "+to, frames, want)
			joined = append(joined, frames...)
		}
		checkSame(t, fmt.Sprint(cuts), joined, whole)
	}
}

// A hello within a run tells what stood then.
func TestMessagesHello(t *testing.T) {
	r := recorded()
	hello, frames := r.stretch(t, "?from=14.6&to=15")
	f := checkHello(t, hello, frames)
	if dig(f, "alarms.#") != 1 || dig(f, "alarms.0.rule") != "unchoke" || dig(f, "alarms.0.state") != "acknowledged" || dig(f, "ledgers.1.exceeded") != false {
		t.Errorf("%.2000s", hello)
	}
	if a := r.get(t, "/api/runs/"+r.id+"/messages?from=1000"); a.status != http.StatusOK || len(a.body) != 0 {
		t.Errorf("behind the end: status %d: %.200s", a.status, a.body)
	}
}

// The stored events are the frames of their kind.
func TestMessagesKinds(t *testing.T) {
	r := recorded()
	began := r.began(t)
	get := func(query string) [][]byte {
		return lines(r.get(t, "/api/runs/"+r.id+"/messages"+query).body)
	}
	kind := func(kinds ...string) [][]byte {
		return behind(r.sent(), 0, func(f due) bool { return slices.Contains(kinds, f.kind) })
	}
	checkSame(t, "alarms and marks", get("?kinds=alarm,mark"), kind("alarm", "mark"))
	checkSame(t, "marks", get("?kinds=mark"), kind("mark"))
	checkSame(t, "log", get("?kinds=log"), kind("log"))
	checkSame(t, "a stretch", get("?kinds=alarm&from=14&to=16"), behind(r.sent(), 0, func(f due) bool {
		return f.kind == "alarm" && f.t >= began+14*second && f.t < began+16*second
	}))
	for _, kinds := range []string{"status", "alarm,", "alarm,run", "*"} {
		checkStatus(t, kinds, r.get(t, "/api/runs/"+r.id+"/messages?kinds="+kinds), http.StatusBadRequest, "alarm, mark")
	}
	if len(kind("alarm")) < 8 || len(kind("mark")) != 1 || len(kind("log")) != 2 {
		t.Error("the run has too few events to compare")
	}
}

// What is packed is the same.
func TestMessagesPacked(t *testing.T) {
	r := recorded()
	path := "/api/runs/" + r.id + "/messages?from=3&to=5"
	plain := r.raw(t, http.MethodGet, path, "", http.Header{"Accept-Encoding": {"identity"}})
	packed := r.raw(t, http.MethodGet, path, "", http.Header{"Accept-Encoding": {"br, gzip"}})
	if plain.header.Get("Content-Encoding") != "" || packed.header.Get("Content-Encoding") != "gzip" || len(packed.body) > len(plain.body)/2 {
		t.Fatalf("%q %d bytes, %q %d bytes", plain.header.Get("Content-Encoding"), len(plain.body), packed.header.Get("Content-Encoding"), len(packed.body))
	}
	z, err := gzip.NewReader(bytes.NewReader(packed.body))
	if err != nil {
		t.Fatal(err)
	}
	if text, err := io.ReadAll(z); err != nil || !bytes.Equal(text, plain.body) {
		t.Errorf("%v: %d bytes, %d packed", err, len(plain.body), len(text))
	}
}

// One record may close many scans. A stretch that begins with any of them has its
// hello right before it, and loses nothing.
func TestMessagesOfManyScansAtOnce(t *testing.T) {
	r := &recording{desk: makeDesk()}
	r.record(t.TempDir())
	r.begin()
	r.serve(r.desk)
	t.Cleanup(r.close)
	r.send(play(start+second, engineTest(), 6*time.Second, nil))
	r.rest(3) // each tick closes the scans of a second
	r.id = r.state.Run.ID
	began := r.state.Run.Started
	checkStatus(t, "end", r.call(t, post, rigPath+"/runs", `{"action":"end"}`), http.StatusAccepted, "")
	all, points := r.sent(), 0
	for _, f := range all {
		if f.kind != "operating_point" || f.t < began+4*second {
			continue
		}
		if points++; points%5 != 1 {
			continue
		}
		hello, frames := r.stretch(t, fmt.Sprintf("?from=%v", float64(f.t-began)/1e9))
		checkHello(t, hello, frames)
		checkSame(t, fmt.Sprint(f.t), frames, fromPoint(all, f.t, math.MaxInt64))
	}
}

// A run that is on is replayed as far as it is stored; its series come with the first
// chunk.
func TestRunThatIsOn(t *testing.T) {
	r := &recording{desk: makeDesk()}
	r.record(t.TempDir())
	r.begin()
	r.serve(r.desk)
	t.Cleanup(r.close)
	msgs := play(start+second, engineTest(), 14*time.Second, nil)
	r.send(msgs[:400])
	r.id = r.state.Run.ID
	line := into[map[string]any](t, r.get(t, "/api/runs/"+r.id))
	if line["state"] != "active" || line["ended"] != nil || line["duration_s"] != nil || line["digest"] != "" {
		t.Errorf("%v", line)
	}
	hello, frames := r.stretch(t, "")
	checkHello(t, hello, frames)
	want := fromPoint(r.sent(), r.state.Run.Started, math.MaxInt64)
	if len(frames) < len(want)-60 { // a second may not be stored yet
		t.Errorf("%d frames of %d", len(frames), len(want))
	}
	checkSame(t, "so far", frames, want[:len(frames)])
	series := "/api/runs/" + r.id + "/series?names=npr"
	checkStatus(t, "no series yet", r.get(t, series), http.StatusConflict, "no stored series yet")
	r.send(msgs[400:])
	a := into[struct {
		Through string
		Series  map[string]struct{ T []float64 }
	}](t, r.get(t, series))
	times := a.Series["npr"].T
	if len(times) < 100 || times[0] != 0 {
		t.Fatalf("%d rows from %v", len(times), times[:min(1, len(times))])
	}
	// through tells where the socket goes on: behind it are the points that the series lacks.
	var epoch, n uint64
	if _, err := fmt.Sscanf(a.Through, "%d.%d", &epoch, &n); err != nil {
		t.Fatal(err)
	}
	next := behind(r.sent(), n, func(f due) bool { return f.kind == "operating_point" })
	at, err := time.Parse(time.RFC3339Nano, *headOf(next[0]).T)
	if want := r.state.Run.Started + int64(math.Round(times[len(times)-1]*1e9)) + second/scans; err != nil || at.UnixNano() != want {
		t.Errorf("the series ends at %v s, the socket goes on at %v", times[len(times)-1], at)
	}
}

// A stretch that cannot be completed ends with a line that says so.
func TestMessagesOfDamage(t *testing.T) {
	dir := t.TempDir()
	f, err := runfile.Create(t.Context(), filepath.Join(dir, "r.db"), runfile.Header{ID: "r", Started: start, State: runfile.StateEnded}, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	records := []ingest.Record{
		{Seq: 1, Host: start, Kind: ingest.KindConfig, Payload: []byte("rig")},
		{Seq: 9, Host: start + second, Kind: ingest.KindGap, Payload: []byte("{}")}, // without the checkpoint that belongs to it
	}
	if err := errors.Join(f.Commit(t.Context(), runfile.Batch{Records: records}), f.Close()); err != nil {
		t.Fatal(err)
	}
	d := makeDesk()
	d.dir = dir
	d.serve(d)
	t.Cleanup(d.close)
	all := lines(d.get(t, "/api/runs/r/messages").body)
	if len(all) != 1 {
		t.Fatalf("%d lines", len(all))
	}
	if e := checkJSON(t, "ErrorFrame", all[0]); !strings.Contains(e["detail"].(string), "gap before record 9") {
		t.Errorf("%s", all[0])
	}
}

// column is a name of a series answer.
type column struct {
	Unit  string
	T     []float64
	Min   []*float64
	Max   []*float64
	Last  []*float64
	N     []int
	State []string
	Cause *string
}

// series asks for names in a stretch.
func (r *recording) series(t *testing.T, names, query string) map[string]column {
	t.Helper()
	a := r.get(t, "/api/runs/"+r.id+"/series?names="+names+query)
	if a.status != http.StatusOK {
		t.Fatalf("%s%s: status %d: %s", names, query, a.status, a.body)
	}
	v := into[struct {
		Through string
		Series  map[string]column
	}](t, a)
	if want := fmt.Sprintf("%d.%d", r.epoch, r.last); v.Through != want {
		t.Errorf("through %s, want %s: the outcome that ended the run", v.Through, want)
	}
	return v.Series
}

// row is a value of the frames that were sent: nil for null.
type row struct {
	t     float64 // seconds of the run
	value *float64
	state string
}

// decoded is the frames that were sent, as JSON has them.
var decoded = sync.OnceValue(func() (all []any) {
	for _, f := range recorded().sent() {
		var v any
		must(json.Unmarshal(f.body, &v))
		all = append(all, v)
	}
	return all
})

// rows takes a name out of the frames that were sent in [from, to).
func (r *recording) rows(t *testing.T, name string, from, to float64) (rows []row) {
	t.Helper()
	began := r.began(t)
	group, id, _ := strings.Cut(name, ".")
	kind, key := "operating_point", name
	switch group {
	case "channel":
		kind, key = "channels", "channels."+id+".value"
	case "quality":
		kind, key = "channels", "channels."+id+".quality"
	}
	for i, f := range r.sent() {
		s := float64(f.t-began) / 1e9
		if f.kind != kind || s < from || s >= to {
			continue
		}
		one := row{t: s}
		switch x := dig(decoded()[i], key).(type) {
		case float64:
			one.value = &x
		case string:
			one.state = x
		}
		rows = append(rows, one)
	}
	return rows
}

func same(a, b *float64) bool {
	if a == nil || b == nil {
		return a == b
	}
	return math.Float64bits(*a) == math.Float64bits(*b)
}

// With fewer rows than points every row of the frames is there, to the last bit, with
// null for null.
func TestSeriesRows(t *testing.T) {
	r := recorded()
	names := append(allQuantities(), "channel.p7_1", "channel.egt_3", "channel.p_baro", "channel.vibration")
	for some := range slices.Chunk(names, dashboard.MaxNames) {
		got := r.series(t, strings.Join(some, ","), "&from=0&to=1000&points=5000")
		if len(got) != len(some) {
			t.Errorf("%d names of %d", len(got), len(some))
		}
		for _, name := range some {
			want, c := r.rows(t, name, 0, 1000), got[name]
			if len(c.T) != len(want) || len(c.Min) != len(want) || len(c.Max) != len(want) || len(c.Last) != len(want) || len(c.N) != len(want) || c.State != nil {
				t.Fatalf("%s: %d rows, want %d", name, len(c.T), len(want))
			}
			values := 0
			for i, w := range want {
				n := 0
				if w.value != nil {
					n = 1
				}
				values += n
				if c.T[i] != w.t || !same(c.Min[i], w.value) || !same(c.Max[i], w.value) || !same(c.Last[i], w.value) || c.N[i] != n {
					t.Fatalf("%s: row %d at %v is %v, want %v at %v", name, i, c.T[i], c.Last[i], w.value, w.t)
				}
			}
			if (values == 0) != (c.Cause != nil) {
				t.Errorf("%s: %d values, cause %v", name, values, c.Cause)
			}
		}
	}
	got := r.series(t, "npr,measured_thrust_n,channel.p7_1,channel.speed", "")
	for name, unit := range map[string]string{"npr": "", "measured_thrust_n": "N", "channel.p7_1": "Pa", "channel.speed": "1/s"} {
		if got[name].Unit != unit {
			t.Errorf("%s has the unit %q, want %q", name, got[name].Unit, unit)
		}
	}
	if c := got["measured_thrust_n"].Cause; c == nil || !strings.Contains(*c, "not available") { // the rig has no load cell
		t.Errorf("cause %v", c)
	}
}

// With more rows than points, each bucket has the least, largest and last value of the
// frames in it and their number.
func TestSeriesBuckets(t *testing.T) {
	r := recorded()
	for _, tt := range []struct {
		from, to float64
		points   int
	}{{0, 20, 20}, {2, 12, 50}, {13, 14, 3}, {0, 24, 1}} {
		names := []string{"npr", "choke_margin_percent", "egt_indicated_k", "independent_flow_kg_s", "channel.egt_3", "channel.vibration"}
		got := r.series(t, strings.Join(names, ","), fmt.Sprintf("&from=%v&to=%v&points=%d", tt.from, tt.to, tt.points))
		width := math.Ceil((tt.to-tt.from)*1e9/float64(tt.points)) / 1e9
		for _, name := range names {
			c := got[name]
			type bucket struct {
				t              float64
				low, high, end *float64
				n              int
			}
			var want []bucket
			for _, w := range r.rows(t, name, tt.from, tt.to) {
				at := tt.from + math.Floor((w.t-tt.from)/width+1e-9)*width
				if len(want) == 0 || math.Abs(want[len(want)-1].t-at) > 1e-6 {
					want = append(want, bucket{t: at})
				}
				b := &want[len(want)-1]
				if w.value == nil {
					continue
				}
				if b.n == 0 || *w.value < *b.low {
					b.low = w.value
				}
				if b.n == 0 || *w.value > *b.high {
					b.high = w.value
				}
				b.end = w.value
				b.n++
			}
			if len(c.T) != len(want) || len(want) > tt.points {
				t.Fatalf("%s %+v: %d buckets, want %d", name, tt, len(c.T), len(want))
			}
			for i, w := range want {
				if math.Abs(c.T[i]-w.t) > 1e-6 || !same(c.Min[i], w.low) || !same(c.Max[i], w.high) || !same(c.Last[i], w.end) || c.N[i] != w.n {
					t.Fatalf("%s %+v: bucket %d at %v has %d values, want %d at %v", name, tt, i, c.T[i], c.N[i], w.n, w.t)
				}
			}
		}
	}
}

// States come as their transitions.
func TestSeriesStates(t *testing.T) {
	r := recorded()
	names := []string{"choke_state", "phase", "back_pressure_from", "total_pressure_from", "total_temperature_from", "quality.egt_3", "quality.p_baro"}
	for _, stretch := range [][2]float64{{0, 1000}, {10, 20}} {
		got := r.series(t, strings.Join(names, ","), fmt.Sprintf("&from=%v&to=%v&points=1", stretch[0], stretch[1]))
		for _, name := range names {
			c := got[name]
			var times []float64
			var states []string
			for _, w := range r.rows(t, name, stretch[0], stretch[1]) {
				if len(states) == 0 || states[len(states)-1] != w.state {
					times, states = append(times, w.t), append(states, w.state)
				}
			}
			if !slices.Equal(c.T, times) || !slices.Equal(c.State, states) || c.Min != nil || c.N != nil || c.Cause != nil || c.Unit != "" {
				t.Errorf("%s: %v %v, want %v %v", name, c.T, c.State, times, states)
			}
		}
		if len(got["choke_state"].State) < 3 {
			t.Errorf("the throat does not change: %v", got["choke_state"].State)
		}
	}
}

// A stretch without rows says why there is nothing.
func TestSeriesEmpty(t *testing.T) {
	r := recorded()
	for _, query := range []string{"&from=1000", "&from=-1000&to=-900"} {
		for name, c := range r.series(t, "npr,phase,channel.egt_1", query) {
			if c.T == nil || len(c.T) != 0 || c.Cause == nil || !strings.Contains(*c.Cause, "no rows") {
				t.Errorf("%s%s: %+v", name, query, c)
			}
		}
	}
}

func TestSeriesRefused(t *testing.T) {
	r := recorded()
	many := strings.Repeat("npr,", dashboard.MaxNames) + "npr"
	for query, detail := range map[string]string{
		"":                                     "1 to 64 names",
		"?names=":                              "1 to 64 names",
		"?names=" + many:                       "1 to 64 names",
		"?names=nothing":                       "nothing",
		"?names=npr,":                          "give a quantity",
		"?names=channel.nothing":               "channel.nothing",
		"?names=value.egt_1":                   "value.egt_1",
		"?names=npr&points=0":                  "1 to 5000",
		"?names=npr&points=5001":               "1 to 5000",
		"?names=npr&points=many":               "many",
		"?names=npr&from=x":                    "from",
		"?names=npr&to=NaN":                    "NaN",
		"?names=npr&from=5&to=5":               "before",
		"?names=npr&from=5&to=4":               "before",
		"?names=npr&to=9999-01-01T00:00:00Z":   "9999",
		"?names=npr&from=1600-01-01T00:00:00Z": "1600",
		"?names=npr&from=1e300":                "1e300",
	} {
		checkStatus(t, query, r.get(t, "/api/runs/"+r.id+"/series"+query), http.StatusBadRequest, detail)
	}
	checkStatus(t, "messages", r.get(t, "/api/runs/"+r.id+"/messages?from=1&to=0"), http.StatusBadRequest, "before")
	if got := r.series(t, "npr,npr,npr", "&points=7"); len(got) != 1 || len(got["npr"].T) > 7 {
		t.Errorf("a name thrice: %d columns, %d rows", len(got), len(got["npr"].T))
	}
}

// The seconds that an answer gives for a scan are taken back as the time of that scan.
func TestStretchTakesSecondsBack(t *testing.T) {
	for k := range int64(100_000) {
		at := k * second / scans
		sec := strconv.FormatFloat(float64(at)/1e9, 'g', -1, 64)
		if from, _, err := dashboard.Stretch(url.Values{"from": {sec}}, start); err != nil || from != start+at {
			t.Fatalf("%s s is %d ns, want %d: %v", sec, from-start, at, err)
		}
	}
}

// Whatever a stretch is asked as, it is refused or runs forwards, and what the answer
// calls a time is taken back as the same time.
func FuzzStretch(f *testing.F) {
	for _, s := range [][2]string{{"", ""}, {"0", "5"}, {"-300.5", "1e3"}, {"2026-03-02T09:00:00Z", "2026-03-02T10:00:00+01:00"}, {"NaN", "Inf"}, {"9999-12-31T23:59:59Z", ""}, {"0001-01-01T00:00:00Z", "x"}, {"1e8", "0x1p3"}} {
		f.Add(s[0], s[1])
	}
	f.Fuzz(func(t *testing.T, a, b string) {
		from, to, err := dashboard.Stretch(url.Values{"from": {a}, "to": {b}}, start)
		if err != nil {
			if from != 0 || to != 0 || err.Error() == "" {
				t.Fatalf("%d to %d with %v", from, to, err)
			}
			return
		}
		if from >= to {
			t.Fatalf("%q to %q is %d to %d", a, b, from, to)
		}
		if sec := float64(from-start) / 1e9; math.Abs(sec) < 9e6 { // a float64 holds the ns of 104 days
			again, _, err := dashboard.Stretch(url.Values{"from": {strconv.FormatFloat(sec, 'g', -1, 64)}}, start)
			if err != nil || again != from {
				t.Fatalf("%q is %d, as seconds %v again %d, %v", a, from, sec, again, err)
			}
		}
		if a == "" && from != start || b == "" && to != math.MaxInt64 {
			t.Fatalf("the default is %d to %d", from, to)
		}
	})
}

func FuzzParseFrom(f *testing.F) {
	for _, s := range []string{"3.1201", "", ".", "3", "3.", "+3.1", "3.1.1", "18446744073709551615.0", "18446744073709551616.0", "0x3.1", " 3.1"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		epoch, n, err := dashboard.ParseFrom(s)
		if err != nil {
			if epoch != 0 || n != 0 {
				t.Fatalf("%q: %d.%d with %v", s, epoch, n, err)
			}
			return
		}
		a, b, _ := strings.Cut(s, ".")
		if fmt.Sprint(epoch) != strings.TrimLeft(a, "0")+zero(a) || fmt.Sprint(n) != strings.TrimLeft(b, "0")+zero(b) {
			t.Fatalf("%q is %d.%d", s, epoch, n)
		}
	})
}

// zero is "0" for digits that are all zero.
func zero(digits string) string {
	if strings.Trim(digits, "0") == "" {
		return "0"
	}
	return ""
}

// A name has a column, as stored, or is refused.
func FuzzNewPlot(f *testing.F) {
	for _, s := range []string{"npr", "phase", "channel.egt_1", "quality.p_baro", "channel.", "channel", ".", "flags", "quality.egt_1.x", ""} {
		f.Add(s)
	}
	cfg := rig("", "")
	columns := map[string]bool{}
	for _, name := range append(allQuantities(), "choke_state", "phase", "back_pressure_from", "total_pressure_from", "total_temperature_from") {
		columns[name] = true
	}
	for i := range cfg.Compute.Channels {
		columns["channel."+cfg.Compute.Channels[i].ID], columns["quality."+cfg.Compute.Channels[i].ID] = true, true
	}
	for name := range columns {
		f.Add(name)
	}
	f.Fuzz(func(t *testing.T, name string) {
		kind, unit, state, err := dashboard.NewPlot(name, &cfg)
		if (err == nil) != columns[name] {
			t.Fatalf("%q: %v", name, err)
		}
		if err != nil {
			return
		}
		_, quantity := monitor.ParseQuantity(name)
		channel := strings.HasPrefix(name, "channel.")
		want := pipeline.ChunkPoints
		if strings.Contains(name, ".") {
			want = pipeline.ChunkChannels
		}
		if kind != want || state == (quantity || channel) || state && unit != "" || channel && unit == "" {
			t.Fatalf("%q: in %s, unit %q, state %v", name, kind, unit, state)
		}
	})
}

// The other queries: nothing makes them panic, and what they take is within bounds.
func FuzzQueries(f *testing.F) {
	for _, s := range []string{"names=npr&points=5", "names=,&points=", "channels=*&rate=5&from=3.4", "rate=1e-3", "rate=-0", "points=99999999999999999999", "%", "names=a;b"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		q, err := url.ParseQuery(s)
		if err != nil {
			return
		}
		names, points, err := dashboard.SeriesQuery(q)
		if err == nil && (len(names) == 0 || len(names) > dashboard.MaxNames || points < 1 || points > dashboard.MaxPoints || !slices.IsSorted(names)) {
			t.Fatalf("%q: %d names, %d points", s, len(names), points)
		}
		if every, err := dashboard.NewViewer(q); err == nil && (every < 0 || every > 1000*second) {
			t.Fatalf("%q: %d ns between points", s, every)
		}
	})
}
