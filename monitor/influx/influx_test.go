package influx_test

import (
	"bytes"
	"compress/gzip"
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"math"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"throatwatch/monitor/influx"
	"throatwatch/monitor/influx/influxtest"
)

// list is a source of rows that are all there; a cursor counts them by Seq. It is
// the store of the cursor too, and can be broken.
type list struct {
	rows   []influx.Row
	cursor influx.Cursor
	broken error // given by Follow
	full   error // given by Save
	saves  int
}

func (l *list) Follow(_ context.Context, after influx.Cursor, limit int) ([]influx.Row, influx.Cursor, error) {
	if l.broken != nil {
		return nil, after, l.broken
	}
	from := int(after.Seq)
	to := min(from+limit, len(l.rows))
	if from < to {
		after.T = l.rows[to-1].T
	}
	after.Seq = uint64(to)
	return l.rows[from:to], after, nil
}

func (l *list) Load() (influx.Cursor, error) { return l.cursor, nil }

func (l *list) Save(c influx.Cursor) error {
	if l.full != nil {
		return l.full
	}
	l.saves++
	l.cursor = c
	return nil
}

// t0 is the time of the first row.
var t0 = time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).UnixNano()

// rows gives n rows, 50 ms apart.
func rows(n int) []influx.Row {
	out := make([]influx.Row, n)
	for i := range out {
		out[i] = influx.Row{Measurement: "operating_point", T: t0 + int64(i)*50e6, Fields: []influx.Field{
			influx.Float("npr", 1+float64(i)/100), influx.Text("phase", "steady"),
		}}
	}
	return out
}

// request is what a stand-in server was sent.
type request struct {
	auth, encoding, method, path, org, bucket, precision string

	lines []string
}

// standIn is a server that answers as it is told: lines that answer gives no
// status for get 204.
type standIn struct {
	*httptest.Server
	answer func(w http.ResponseWriter, lines []string) (done bool)

	mu   sync.Mutex // protects requests
	seen []request
}

func newStandIn(t *testing.T) *standIn {
	t.Helper()
	s := &standIn{}
	s.Server = httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		q := r.URL.Query()
		got := request{
			auth: r.Header.Get("Authorization"), encoding: r.Header.Get("Content-Encoding"), method: r.Method, path: r.URL.Path,
			org: q.Get("org"), bucket: q.Get("bucket"), precision: q.Get("precision"),
		}
		body := io.Reader(r.Body)
		if got.encoding == "gzip" {
			z, err := gzip.NewReader(r.Body)
			if err != nil {
				t.Error(err)
				return
			}
			body = z
		}
		text, err := io.ReadAll(body)
		if err != nil {
			t.Error(err)
		}
		got.lines = strings.Split(strings.TrimSuffix(string(text), "\n"), "\n")
		s.mu.Lock()
		s.seen = append(s.seen, got)
		s.mu.Unlock()
		if s.answer == nil || !s.answer(w, got.lines) {
			w.WriteHeader(http.StatusNoContent)
		}
	}))
	t.Cleanup(s.Close)
	return s
}

func (s *standIn) requests() []request {
	s.mu.Lock()
	defer s.mu.Unlock()
	return append([]request(nil), s.seen...)
}

// say answers with a status and a JSON body.
func say(w http.ResponseWriter, status int, body string) bool {
	w.Header().Set("Content-Type", "application/json; charset=utf-8")
	w.WriteHeader(status)
	_, _ = io.WriteString(w, body)
	return true
}

const token = "geheim-q7"

func sink(t *testing.T, url string, l *list, change func(*influx.Config)) *influx.Sink {
	t.Helper()
	cfg := influx.Config{
		Target: influx.Target{URL: url, Org: "test hall", Bucket: "cell 2", Token: token},
		Rig:    "cell_2", Source: l, Cursor: l, Rejected: filepath.Join(t.TempDir(), "rejected.lp"),
	}
	if change != nil {
		change(&cfg)
	}
	s, err := influx.New(cfg)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.Close)
	return s
}

func TestRequestCarriesWhatTheAPIAsksFor(t *testing.T) {
	server := newStandIn(t)
	l := &list{rows: []influx.Row{
		{Measurement: "operating_point", T: 1774747800123456789, Fields: []influx.Field{
			influx.Float("npr", 2), influx.Float("p_choked", math.NaN()), influx.Float("exit_velocity_m_s", math.Inf(1)),
			influx.Float("throat_area_m2", 1e-21), influx.Text("choke_state", `a "b" \ c`), influx.Bool("lit", true),
		}},
		{Measurement: "operating_point", T: 1774747800123456790, Fields: []influx.Field{influx.Float("npr", math.NaN())}},
		{Measurement: "channel", T: 1774747800123456791, Fields: []influx.Field{influx.Float("p7_1", 250000)}},
	}}
	s := sink(t, server.URL+"/sub/", l, func(c *influx.Config) { c.Rig = "cell 2" })
	if wait := s.Step(t.Context()); wait != 0 {
		t.Fatalf("wait %v after rows were written, want 0", wait)
	}
	got := server.requests()
	if len(got) != 1 {
		t.Fatalf("%d requests, want 1", len(got))
	}
	// The parameters of POST /api/v2/write as InfluxDB documents them.
	want := request{
		auth: "Token " + token, encoding: "gzip", method: http.MethodPost, path: "/sub/api/v2/write",
		org: "test hall", bucket: "cell 2", precision: "ns",
	}
	lines := got[0].lines
	if got[0].lines = nil; fmt.Sprint(got[0]) != fmt.Sprint(want) {
		t.Errorf("request %+v, want %+v", got[0], want)
	}
	// Line protocol: a float has no suffix, quotes and backslashes of a string are
	// escaped, spaces of a tag too; NaN and infinity have no form and are left out.
	wantLines := []string{
		`operating_point,rig=cell\ 2 npr=2,throat_area_m2=1e-21,choke_state="a \"b\" \\ c",lit=true 1774747800123456789`,
		`channel,rig=cell\ 2 p7_1=250000 1774747800123456791`,
	}
	if fmt.Sprint(lines) != fmt.Sprint(wantLines) {
		t.Errorf("lines\n%s\nwant\n%s", strings.Join(lines, "\n"), strings.Join(wantLines, "\n"))
	}
	if wait := s.Step(t.Context()); wait != time.Second {
		t.Errorf("wait %v with nothing to write, want 1 s", wait)
	}
	if st := s.Status(); st.State != influx.Working || st.Written != 2 || st.Through != 1774747800123456791 {
		t.Errorf("status %+v, want working, 2 written, through the last row", st)
	}
	if n := len(server.requests()); n != 1 {
		t.Errorf("%d requests, want no further one without rows", n)
	}
}

// TestAnswers gives each answer once, then success. The bodies are those that the
// servers' documentation and sources give.
func TestAnswers(t *testing.T) {
	const proxyPage = "<html><title>400 The plain HTTP request was sent to HTTPS port</title></html>"
	tests := []struct {
		name   string
		status int
		header string // Name: value
		body   string

		wait     time.Duration
		state    influx.State
		expired  uint64
		rejected uint64 // of the one row
		err      string // part of it
	}{
		{name: "2: wrong token", status: 401, body: `{"code":"unauthorized","message":"unauthorized access"}`, wait: 5 * time.Minute, state: influx.Refused, err: "unauthorized access"},
		{name: "2: may not write", status: 403, body: `{"code":"forbidden","message":"insufficient permissions"}`, wait: 5 * time.Minute, state: influx.Refused, err: "insufficient"},
		{name: "2: no bucket", status: 404, body: `{"code":"not found","message":"bucket \"cell 2\" not found"}`, wait: 5 * time.Minute, state: influx.Refused, err: "not found"},
		{name: "one line too large", status: 413, body: `{"code":"request too large","message":"too large"}`, wait: 5 * time.Minute, state: influx.Refused, err: "413"},
		{name: "redirected", status: 301, header: "Location: /elsewhere", wait: 5 * time.Minute, state: influx.Refused, err: "301"},
		{name: "400 of a proxy", status: 400, header: "Content-Type: text/html", body: proxyPage, wait: 5 * time.Minute, state: influx.Refused, err: "plain HTTP"},
		{name: "2: too many", status: 429, header: "Retry-After: 42", body: `{"code":"too many requests","message":"x"}`, wait: 42 * time.Second, state: influx.Waiting, err: "429"},
		{name: "2: too many, no hint", status: 429, wait: time.Second, state: influx.Waiting, err: "429"},
		{name: "asks for a day", status: 503, header: "Retry-After: 86400", wait: 15 * time.Minute, state: influx.Waiting, err: "503"},
		{name: "asks by date", status: 503, header: "Retry-After: Wed, 21 Oct 2026 07:28:00 GMT", wait: time.Second, state: influx.Waiting, err: "503"},
		{name: "1.8: time-out inside", status: 500, body: `{"error":"timeout"}`, wait: time.Second, state: influx.Waiting, err: "500"},
		{name: "gateway", status: 504, wait: time.Second, state: influx.Waiting, err: "504"},
		{name: "2: does not parse", status: 400, body: `{"code":"invalid","message":"unable to parse 'x': missing fields"}`, rejected: 1},
		{name: "2: type conflict", status: 422, body: `{"code":"unprocessable entity","message":"failure writing points to database: partial write: field type conflict: input field \"npr\" on measurement \"operating_point\" is type float, already exists as type integer dropped=1"}`, rejected: 1},
		{name: "1.8: type conflict", status: 400, body: `{"error":"partial write: field type conflict dropped=1"}`, header: "X-Influxdb-Error: partial write: field type conflict dropped=1", rejected: 1},
		{name: "3: type conflict", status: 400, body: `{"error":"partial write of line protocol occurred","data":[{"line_number":1}]}`, rejected: 1},
		{name: "2: too old", status: 422, body: `{"code":"unprocessable entity","message":"failure writing points to database: partial write: points beyond retention policy dropped=1"}`, expired: 1},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			server := newStandIn(t)
			var once sync.Once
			server.answer = func(w http.ResponseWriter, _ []string) (done bool) {
				once.Do(func() {
					if name, value, ok := strings.Cut(tt.header, ": "); ok {
						w.Header().Set(name, value)
					}
					if tt.body != "" && w.Header().Get("Content-Type") == "" {
						w.Header().Set("Content-Type", "application/json")
					}
					w.WriteHeader(tt.status)
					_, _ = io.WriteString(w, tt.body)
					done = true
				})
				return done
			}
			l := &list{rows: rows(1)}
			var told []influx.Status
			var path string
			s := sink(t, server.URL, l, func(c *influx.Config) {
				path = c.Rejected
				c.Changed = func(st influx.Status) { told = append(told, st) }
			})
			if wait := s.Step(t.Context()); wait != tt.wait {
				t.Errorf("wait %v, want %v", wait, tt.wait)
			}
			st := s.Status()
			if st.State != tt.state || st.Rejected != tt.rejected || st.Expired != tt.expired || !strings.Contains(st.Err, tt.err) {
				t.Errorf("status %+v, want %v, rejected %d, expired %d, error with %q", st, tt.state, tt.rejected, tt.expired, tt.err)
			}
			settled := tt.state == influx.Working
			if (l.cursor.Seq == 1) != settled {
				t.Errorf("cursor at %d after this answer", l.cursor.Seq)
			}
			s.Step(t.Context())
			written := 1 - tt.rejected - tt.expired
			if st := s.Status(); st.State != influx.Working || st.Err != "" || st.Written != written || l.cursor.Seq != 1 {
				t.Errorf("after success: status %+v, cursor %d, want working, %d written, cursor 1", st, l.cursor.Seq, written)
			}
			kept, err := os.ReadFile(path)
			if tt.rejected == 0 {
				if !errors.Is(err, os.ErrNotExist) {
					t.Errorf("a file for rejected lines was made: %v", err)
				}
			} else if head, line, _ := strings.Cut(string(kept), "\n"); !strings.HasPrefix(head, "# write: status 4") || !strings.HasPrefix(line, "operating_point,rig=cell_2 npr=1,") {
				t.Errorf("file for rejected lines holds %q", kept)
			}
			changes := 2 // to the failure and back
			switch {
			case tt.rejected > 0:
				changes = 1
			case tt.expired > 0:
				changes = 0
			}
			if len(told) != changes {
				t.Errorf("told %d changes, want %d: %+v", len(told), changes, told)
			}
		})
	}
}

// TestBackOff: the waits double from 1 s to 1 min and begin anew after success.
func TestBackOff(t *testing.T) {
	server := newStandIn(t)
	up := false
	server.answer = func(w http.ResponseWriter, _ []string) bool { return !up && say(w, 503, `{}`) }
	l := &list{rows: rows(2)}
	s := sink(t, server.URL, l, func(c *influx.Config) { c.Lines = 1 })
	for i, seconds := range []int{1, 2, 4, 8, 16, 32, 60, 60, 60} {
		want := time.Duration(seconds) * time.Second
		if wait := s.Step(t.Context()); wait != want {
			t.Errorf("failure %d: wait %v, want %v", i+1, wait, want)
		}
	}
	up = true
	if wait := s.Step(t.Context()); wait != 0 {
		t.Errorf("wait %v after success, want 0", wait)
	}
	up = false
	if wait := s.Step(t.Context()); wait != time.Second {
		t.Errorf("wait %v after a new failure, want 1 s", wait)
	}
	server.Close() // nobody listens any more
	if wait := s.Step(t.Context()); wait != 2*time.Second {
		t.Errorf("wait %v when nobody listens, want 2 s", wait)
	}
	if st := s.Status(); st.State != influx.Waiting || st.Err == "" || st.Written != 1 {
		t.Errorf("status %+v, want waiting with an error and 1 line written", st)
	}
	l.broken = errors.New("disk gone")
	s = sink(t, server.URL, l, nil)
	if wait := s.Step(t.Context()); wait != time.Second || s.Status().Err != "disk gone" {
		t.Errorf("source fails: wait %v, status %+v", wait, s.Status())
	}
}

func TestTimeoutIsAFailure(t *testing.T) {
	server := newStandIn(t)
	release := make(chan struct{})
	server.answer = func(http.ResponseWriter, []string) bool { <-release; return true }
	defer close(release)
	s := sink(t, server.URL, &list{rows: rows(1)}, func(c *influx.Config) { c.Timeout = 50 * time.Millisecond })
	if wait := s.Step(t.Context()); wait != time.Second || s.Status().State != influx.Waiting {
		t.Errorf("wait %v, status %+v, want 1 s, waiting", wait, s.Status())
	}
}

func TestEndOfContextIsNoFailure(t *testing.T) {
	server := newStandIn(t)
	ctx, cancel := context.WithCancel(t.Context())
	server.answer = func(w http.ResponseWriter, _ []string) bool { cancel(); return say(w, 503, `{}`) }
	s := sink(t, server.URL, &list{rows: rows(1)}, nil)
	if wait := s.Step(ctx); wait != 0 || s.Status().State != influx.Working {
		t.Errorf("wait %v, status %+v, want 0, working", wait, s.Status())
	}
}

// TestBadLinesAreFound: of a batch only the lines that the server refuses are
// rejected, as long as they are few; otherwise the number of requests stays bounded.
func TestBadLinesAreFound(t *testing.T) {
	tests := []struct {
		name     string
		bad      func(i int) bool
		exact    bool
		requests int // at most
	}{
		{"one of 2000", func(i int) bool { return i == 1234 }, true, 1 + 2*11},
		{"first and last", func(i int) bool { return i == 0 || i == 1999 }, true, 1 + 4*11},
		{"every one", func(int) bool { return true }, true, 1 + 2*64},
		{"every other", func(i int) bool { return i%2 == 0 }, false, 1 + 2*64},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			all := rows(2000)
			bad := map[string]bool{}
			for i := range all {
				if tt.bad(i) {
					all[i].Fields = append(all[i].Fields, influx.Text("mark", "bad"))
				}
			}
			taken := map[string]bool{}
			server := newStandIn(t)
			server.answer = func(w http.ResponseWriter, lines []string) bool {
				refuse := false
				for _, l := range lines {
					if strings.Contains(l, "mark=") {
						bad[l], refuse = true, true
					} else {
						taken[l] = true // a partial write takes the good ones
					}
				}
				return refuse && say(w, 422, `{"code":"unprocessable entity","message":"partial write: dropped=1"}`)
			}
			var path string
			s := sink(t, server.URL, &list{rows: all}, func(c *influx.Config) { path = c.Rejected })
			if wait := s.Step(t.Context()); wait != 0 {
				t.Fatalf("wait %v, status %+v", wait, s.Status())
			}
			st := s.Status()
			if st.Written+st.Rejected != 2000 || len(taken)+len(bad) != 2000 || tt.exact && int(st.Rejected) != len(bad) || int(st.Rejected) < len(bad) {
				t.Errorf("%d written and %d rejected of 2000; %d are bad", st.Written, st.Rejected, len(bad))
			}
			if n := len(server.requests()); n > tt.requests {
				t.Errorf("%d requests, want at most %d", n, tt.requests)
			}
			kept, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			inFile := 0
			for line := range strings.Lines(string(kept)) {
				if strings.HasPrefix(line, "#") {
					continue
				}
				inFile++
				delete(bad, strings.TrimSuffix(line, "\n"))
			}
			if inFile != int(st.Rejected) || len(bad) != 0 {
				t.Errorf("the file has %d lines of %d rejected and lacks %d bad ones", inFile, st.Rejected, len(bad))
			}
		})
	}
}

// TestLargeRequestsAreHalved: 413 is answered by smaller requests.
func TestLargeRequestsAreHalved(t *testing.T) {
	server := newStandIn(t)
	server.answer = func(w http.ResponseWriter, lines []string) bool {
		return len(lines) > 300 && say(w, 413, `{"code":"request too large","message":"x"}`)
	}
	s := sink(t, server.URL, &list{rows: rows(1000)}, nil)
	if wait := s.Step(t.Context()); wait != 0 || s.Status().Written != 1000 {
		t.Errorf("wait %v, status %+v, want 1000 lines written", wait, s.Status())
	}
}

// TestNothingIsDroppedWhenTheRejectFileIsFull: the sink waits and goes on when the
// file was moved away.
func TestNothingIsDroppedWhenTheRejectFileIsFull(t *testing.T) {
	server := newStandIn(t)
	server.answer = func(w http.ResponseWriter, _ []string) bool {
		return say(w, 400, `{"code":"invalid","message":"unable to parse"}`)
	}
	l := &list{rows: rows(6)}
	var path string
	s := sink(t, server.URL, l, func(c *influx.Config) { c.Lines, c.Room, path = 2, 500, c.Rejected })
	refused := false
	for range 3 {
		refused = s.Step(t.Context()) == 5*time.Minute
	}
	st := s.Status()
	if !refused || st.State != influx.Refused || !strings.Contains(st.Err, "full") || st.Rejected != 4 || l.cursor.Seq != 4 {
		t.Fatalf("status %+v at %d, want refused because the file is full, with 4 lines rejected", st, l.cursor.Seq)
	}
	if info, err := os.Stat(path); err != nil || info.Size() > 500 {
		t.Errorf("file: %v, %v, want at most 500 bytes", info, err)
	}
	if err := os.Rename(path, path+".old"); err != nil {
		t.Fatal(err)
	}
	s.Step(t.Context())
	if st := s.Status(); st.State != influx.Working || st.Rejected != 6 || l.cursor.Seq != 6 {
		t.Errorf("status %+v at %d, want working with 6 lines rejected", st, l.cursor.Seq)
	}
}

// TestCursorThatCannotBeSaved: writing goes on, slower, and nothing is left out.
func TestCursorThatCannotBeSaved(t *testing.T) {
	server := newStandIn(t)
	l := &list{rows: rows(3), full: errors.New("no space left")}
	s := sink(t, server.URL, l, func(c *influx.Config) { c.Lines = 1 })
	for i := range 3 {
		if wait := s.Step(t.Context()); wait != time.Second<<i {
			t.Errorf("step %d: wait %v, want %v", i, wait, time.Second<<i)
		}
	}
	l.full = nil
	s.Step(t.Context())
	if st := s.Status(); st.Written != 3 || st.State != influx.Working {
		t.Errorf("status %+v, want 3 lines written, working", st)
	}
}

// TestCursorIsSavedSparingly: without rows once a minute of host time.
func TestCursorIsSavedSparingly(t *testing.T) {
	l := &idle{}
	s := sink(t, "http://127.0.0.1:1", &l.list, func(c *influx.Config) { c.Source = l })
	for range 301 {
		s.Step(t.Context())
		l.t += 1e9
	}
	if l.saves != 5 {
		t.Errorf("%d saves in 300 s without rows, want 5", l.saves)
	}
}

// idle is a source in which records come without rows.
type idle struct {
	list
	t int64
}

func (l *idle) Follow(_ context.Context, after influx.Cursor, _ int) ([]influx.Row, influx.Cursor, error) {
	after.Seq++
	after.T = l.t
	return nil, after, nil
}

func TestTargetsThatCannotBe(t *testing.T) {
	good := influx.Target{URL: "https://db.hall:8086", Bucket: "b", Token: token}
	tests := []struct {
		name   string
		change func(*influx.Config)
		err    string
	}{
		{"user in the address", func(c *influx.Config) { c.Target.URL = "http://me:" + token + "@db.hall" }, "file"},
		{"does not parse", func(c *influx.Config) { c.Target.URL = "http://me:" + token + "@db.hall:port" }, "http://host:port"},
		{"no scheme", func(c *influx.Config) { c.Target.URL = "db.hall:8086" }, "http://host:port"},
		{"other scheme", func(c *influx.Config) { c.Target.URL = "mqtt://db.hall" }, "http://host:port"},
		{"no host", func(c *influx.Config) { c.Target.URL = "http://" }, "http://host:port"},
		{"query", func(c *influx.Config) { c.Target.URL = "http://db.hall/?org=x" }, "http://host:port"},
		{"no bucket", func(c *influx.Config) { c.Target.Bucket = "" }, "database/retention-policy"},
		{"too many lines", func(c *influx.Config) { c.Lines = 5001 }, "5000"},
		{"negative lines", func(c *influx.Config) { c.Lines = -1 }, "5000"},
	}
	for _, tt := range tests {
		cfg := influx.Config{Target: good, Source: &list{}, Cursor: &list{}}
		tt.change(&cfg)
		if _, err := influx.New(cfg); err == nil || !strings.Contains(err.Error(), tt.err) || strings.Contains(err.Error(), token) {
			t.Errorf("%s: error %v, want one with %q and without the token", tt.name, err, tt.err)
		}
	}
}

// TestTokenStaysOutOfLogs: no way of printing a target or a failure shows it.
func TestTokenStaysOutOfLogs(t *testing.T) {
	server := newStandIn(t)
	server.answer = func(w http.ResponseWriter, _ []string) bool {
		return say(w, 401, `{"code":"unauthorized","message":"unauthorized access"}`)
	}
	s := sink(t, server.URL, &list{rows: rows(1)}, nil)
	s.Step(t.Context())
	var out strings.Builder
	target := influx.Target{URL: server.URL, Org: "o", Bucket: "b", Token: token}
	fmt.Fprintf(&out, "%v %+v %#v %s %+v", target, target, target, target, s.Status())
	slog.New(slog.NewJSONHandler(&out, nil)).Info("x", "target", target)
	slog.New(slog.NewTextHandler(&out, nil)).Info("x", "target", target, "status", s.Status())
	if strings.Contains(out.String(), token) || !strings.Contains(out.String(), server.URL) {
		t.Errorf("log: %s", out.String())
	}
}

// TestRealServer: what the server takes, keeps and refuses by itself.
func TestRealServer(t *testing.T) {
	server := influxtest.Start(t, influxtest.Options{Auth: true})
	server.Query("", "CREATE DATABASE hall")
	server.Query("", `CREATE RETENTION POLICY brief ON hall DURATION 1h REPLICATION 1`)
	credentials := influxtest.User + ":" + influxtest.Password
	count := func(field, from string) string {
		t.Helper()
		got := server.Query("hall", `SELECT count(`+field+`) FROM `+from)
		if len(got) == 0 {
			return "0"
		}
		return fmt.Sprint(got[0].Values[0][1])
	}
	tests := []struct {
		name          string
		bucket, token string
		rows          []influx.Row

		want  influx.Status
		err   string
		field string
		from  string
		count string
	}{
		{
			name: "taken, twice the same", bucket: "hall/autogen", token: credentials, rows: append(rows(4000), rows(4000)...),
			want: influx.Status{Written: 8000, Through: t0 + 3999*50e6}, field: "npr", from: "operating_point", count: "4000",
		},
		{
			name: "wrong password", bucket: "hall/autogen", token: influxtest.User + ":no", rows: rows(1),
			want: influx.Status{State: influx.Refused}, err: "401", field: "npr", from: "operating_point", count: "4000",
		},
		{
			name: "no such database", bucket: "shed/autogen", token: credentials, rows: rows(1),
			want: influx.Status{State: influx.Refused}, err: "404", field: "npr", from: "operating_point", count: "4000",
		},
		{
			name: "another type than before", bucket: "hall/autogen", token: credentials,
			rows: append(rows(3), influx.Row{Measurement: "operating_point", T: t0 - 1, Fields: []influx.Field{influx.Text("npr", "two")}}),
			want: influx.Status{Written: 3, Rejected: 1, Through: t0 - 1}, field: "npr", from: "operating_point", count: "4000",
		},
		{
			name: "older than what is kept", bucket: "hall/brief", token: credentials, rows: rows(5),
			want: influx.Status{Expired: 5, Through: t0 + 4*50e6}, field: "npr", from: "brief.operating_point", count: "0",
		},
		{
			name: "text on two lines, quotes, umlauts", bucket: "hall/autogen", token: credentials,
			rows: []influx.Row{{Measurement: "mark", T: t0, Fields: []influx.Field{influx.Text("text", "first\nsecond, \"x\" \\ µ=1")}}},
			want: influx.Status{Written: 1, Through: t0}, field: "text", from: "mark", count: "1",
		},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			l := &list{rows: tt.rows}
			s := sink(t, server.URL, l, func(c *influx.Config) {
				c.Target = influx.Target{URL: server.URL, Bucket: tt.bucket, Token: tt.token}
			})
			for s.Step(t.Context()) == 0 {
			}
			got := s.Status()
			if !strings.Contains(got.Err, tt.err) || tt.err == "" && got.Err != "" {
				t.Errorf("error %q, want one with %q", got.Err, tt.err)
			}
			got.Err, got.Reason = "", ""
			if got != tt.want {
				t.Errorf("status %+v, want %+v", got, tt.want)
			}
			if n := count(tt.field, tt.from); n != tt.count {
				t.Errorf("the database has %s points in %s, want %s", n, tt.from, tt.count)
			}
		})
	}
	if got := server.Query("hall", "SELECT text FROM mark"); got[0].Values[0][1] != "first\nsecond, \"x\" \\ µ=1" {
		t.Errorf("text came back as %q", got[0].Values[0][1])
	}
}

// BenchmarkStep measures encoding, compressing and handing over a batch of the size
// that ten seconds of a rig with 60 channels make.
func BenchmarkStep(b *testing.B) {
	server := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		_, _ = io.Copy(io.Discard, r.Body)
		w.WriteHeader(http.StatusNoContent)
	}))
	defer server.Close()
	l := &endless{rows: rows(400)}
	for i := range l.rows {
		for k := range 60 {
			l.rows[i].Fields = append(l.rows[i].Fields, influx.Float(fmt.Sprintf("channel_%d", k), float64(i*k)/7))
		}
	}
	s, err := influx.New(influx.Config{Target: influx.Target{URL: server.URL, Bucket: "b"}, Rig: "r", Source: l, Cursor: &list{}, Lines: 400})
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	b.ReportAllocs()
	for b.Loop() {
		if wait := s.Step(b.Context()); wait != 0 {
			b.Fatal(s.Status())
		}
	}
	b.ReportMetric(float64(s.Status().Written)/b.Elapsed().Seconds(), "lines/s")
}

// BenchmarkBatch writes batches of several sizes, packed by gzip as always, into a real
// server, and gives what goes over the wire. It said, on a busy machine of two cores:
// 1041, 893, 1549 and 1866 lines of 60 fields per second in batches of 100, 500, 2000 and
// 5000, of 1600 bytes each, 240 when packed. 2000 keeps what is written again after a
// failure, and what one bad line makes the sink search through, small.
func BenchmarkBatch(b *testing.B) {
	server := influxtest.Start(b, influxtest.Options{})
	server.Query("", "CREATE DATABASE hall")
	for _, n := range []int{100, 500, 2000, 5000} {
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			l := &endless{rows: rows(n)}
			for i := range l.rows {
				for k := range 60 {
					l.rows[i].Fields = append(l.rows[i].Fields, influx.Float(fmt.Sprintf("channel_%d", k), float64(i*k)/7))
				}
			}
			var sent, raw atomic.Int64
			proxy := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
				body, _ := io.ReadAll(r.Body)
				sent.Add(int64(len(body)))
				if raw.Load() == 0 {
					if z, err := gzip.NewReader(bytes.NewReader(body)); err == nil {
						whole, _ := io.ReadAll(z)
						raw.Store(int64(len(whole)))
					}
				}
				req, err := http.NewRequestWithContext(r.Context(), r.Method, server.URL+r.URL.String(), bytes.NewReader(body))
				if err != nil {
					w.WriteHeader(http.StatusBadGateway)
					return
				}
				req.Header = r.Header
				res, err := http.DefaultClient.Do(req)
				if err != nil {
					w.WriteHeader(http.StatusBadGateway)
					return
				}
				_ = res.Body.Close()
				w.WriteHeader(res.StatusCode)
			}))
			defer proxy.Close()
			s, err := influx.New(influx.Config{Target: influx.Target{URL: proxy.URL, Bucket: "hall/autogen"}, Rig: "r", Source: l, Cursor: &list{}, Lines: n})
			if err != nil {
				b.Fatal(err)
			}
			defer s.Close()
			for b.Loop() {
				if wait := s.Step(b.Context()); wait != 0 {
					b.Fatal(s.Status())
				}
			}
			written := float64(s.Status().Written)
			b.ReportMetric(written/b.Elapsed().Seconds(), "lines/s")
			b.ReportMetric(float64(sent.Load())/written, "sentB/line")
			b.ReportMetric(float64(raw.Load())/float64(n), "B/line")
		})
	}
}

// endless gives the same rows again and again, each time later.
type endless struct{ rows []influx.Row }

func (l *endless) Follow(_ context.Context, after influx.Cursor, _ int) ([]influx.Row, influx.Cursor, error) {
	for i := range l.rows {
		l.rows[i].T += 20e9
	}
	after.Seq++
	return l.rows, after, nil
}
