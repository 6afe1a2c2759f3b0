// Package influxtest gives tests a real InfluxDB 1.8 server on a free loopback
// port, with its data in a temporary directory. It ends with the test.
package influxtest

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// Program is the environment variable that names the server's program. Without it
// the one that deploy/test installs is used: .build/bin/influxd of the repository.
const Program = "THROATWATCH_INFLUXD"

// Options of a server.
type Options struct {
	Auth bool // users are asked for: User with Password may do everything
}

// The user of a server with Options.Auth.
const (
	User     = "facility"
	Password = "cell-2"
)

// Server is a server that a test can stop and start again on the same port with
// the same data.
type Server struct {
	URL string

	tb      testing.TB
	program string
	dir     string
	addr    string
	auth    bool
	cmd     *exec.Cmd
}

// Start starts a server. The test fails if the program is not there: the site's
// database is part of what has to work.
func Start(tb testing.TB, o Options) *Server {
	tb.Helper()
	s := &Server{tb: tb, program: program(tb), dir: tb.TempDir(), addr: "127.0.0.1:0", auth: o.Auth}
	s.Start()
	tb.Cleanup(s.Stop)
	if o.Auth {
		s.Query("", "CREATE USER "+User+" WITH PASSWORD '"+Password+"' WITH ALL PRIVILEGES")
	}
	return s
}

func program(tb testing.TB) string {
	tb.Helper()
	const how = "deploy/test installs it into .build/bin; by hand:\n" +
		"  GOBIN=$PWD/.build/bin CGO_ENABLED=0 go install github.com/influxdata/influxdb/cmd/influxd@v1.8.10"
	if path := os.Getenv(Program); path != "" {
		if _, err := os.Stat(path); err != nil {
			tb.Fatalf("%s: %v\n%s", Program, err, how)
		}
		return path
	}
	dir, err := os.Getwd()
	if err != nil {
		tb.Fatal(err)
	}
	for {
		if _, err := os.Stat(filepath.Join(dir, "go.mod")); err == nil {
			break
		}
		if filepath.Dir(dir) == dir {
			tb.Fatal("no go.mod above the test")
		}
		dir = filepath.Dir(dir)
	}
	path := filepath.Join(dir, ".build", "bin", "influxd")
	if _, err := os.Stat(path); err != nil {
		tb.Fatalf("this test needs an InfluxDB 1.8.10 server: %v\n%s", err, how)
	}
	return path
}

// Start starts the server again after Stop and waits until it listens.
func (s *Server) Start() {
	s.tb.Helper()
	conf := filepath.Join(s.dir, "influxdb.conf")
	text := fmt.Sprintf(`
reporting-disabled = true
bind-address = "127.0.0.1:0"
[meta]
dir = %q
[data]
dir = %q
wal-dir = %q
[monitor]
store-enabled = false
[http]
bind-address = %q
auth-enabled = %v
flux-enabled = true
log-enabled = false
`, filepath.Join(s.dir, "meta"), filepath.Join(s.dir, "data"), filepath.Join(s.dir, "wal"), s.addr, s.auth)
	if err := os.WriteFile(conf, []byte(text), 0o600); err != nil {
		s.tb.Fatal(err)
	}
	cmd := exec.CommandContext(context.Background(), s.program, "-config", conf) //nolint:gosec // of the test's own choosing
	stderr, err := cmd.StderrPipe()
	if err != nil {
		s.tb.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		s.tb.Fatal(err)
	}
	s.cmd = cmd
	var said bytes.Buffer
	lines := bufio.NewScanner(stderr)
	for lines.Scan() {
		line := lines.Text()
		fmt.Fprintln(&said, line)
		if _, addr, ok := strings.Cut(line, "addr="); ok && strings.Contains(line, `"Listening on HTTP"`) {
			s.addr, _, _ = strings.Cut(addr, " ")
			s.URL = "http://" + s.addr
			go func() { _, _ = io.Copy(io.Discard, stderr) }() // ends with the server
			return
		}
	}
	_ = cmd.Wait()
	s.tb.Fatalf("the server ended before it listened:\n%s", said.String())
}

// Stop ends the server in an orderly way and waits for its end.
func (s *Server) Stop() {
	if s.cmd == nil {
		return // stopped before
	}
	if err := s.cmd.Process.Signal(syscall.SIGTERM); err != nil {
		s.tb.Error(err)
	}
	_ = s.cmd.Wait()
	s.cmd = nil
}

// Result is one series of an answer. Numbers are json.Number, times those of the
// first column in ns.
type Result struct {
	Name    string
	Columns []string
	Values  [][]any
}

// Query asks in InfluxQL, by GET or POST as the statement needs.
func (s *Server) Query(database, statement string) []Result {
	s.tb.Helper()
	form := url.Values{"db": {database}, "q": {statement}, "epoch": {"ns"}}
	body := s.post("/query", "application/x-www-form-urlencoded", form.Encode(), http.StatusOK)
	var answer struct {
		Error   string
		Results []struct {
			Error  string
			Series []Result
		}
	}
	d := json.NewDecoder(bytes.NewReader(body))
	d.UseNumber()
	if err := d.Decode(&answer); err != nil {
		s.tb.Fatalf("%s: %v in %s", statement, err, body)
	}
	var out []Result
	for _, r := range answer.Results {
		if r.Error != "" {
			s.tb.Fatalf("%s: %s", statement, r.Error)
		}
		out = append(out, r.Series...)
	}
	if answer.Error != "" {
		s.tb.Fatalf("%s: %s", statement, answer.Error)
	}
	return out
}

// Write writes line protocol with times in ns, past what is tested.
func (s *Server) Write(database, lines string) {
	s.tb.Helper()
	s.post("/write?db="+url.QueryEscape(database), "text/plain", lines, http.StatusNoContent)
}

func (s *Server) post(path, kind, body string, want int) []byte {
	s.tb.Helper()
	req, err := http.NewRequestWithContext(context.Background(), http.MethodPost, s.URL+path, strings.NewReader(body))
	if err != nil {
		s.tb.Fatal(err)
	}
	req.Header.Set("Content-Type", kind)
	if s.auth {
		req.SetBasicAuth(User, Password)
	}
	res, err := http.DefaultClient.Do(req)
	if err != nil {
		s.tb.Fatal(err)
	}
	defer res.Body.Close() //nolint:errcheck // it is only read
	answer, err := io.ReadAll(res.Body)
	if err != nil {
		s.tb.Fatal(err)
	}
	if res.StatusCode != want {
		s.tb.Fatalf("%s: status %d: %s", path, res.StatusCode, answer)
	}
	return answer
}
