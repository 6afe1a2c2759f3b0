package influx

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"sync"
	"time"

	influxdb2 "github.com/influxdata/influxdb-client-go/v2"
	"github.com/influxdata/influxdb-client-go/v2/api"
)

const (
	defaultLines   = 2000             // lines in a request; see BenchmarkBatch
	mostLines      = 5000             // … at most
	defaultTimeout = 30 * time.Second // of a request
	pollEvery      = time.Second      // while there is nothing to write
	firstWait      = time.Second      // after the first failure; doubled with each further one
	longestWait    = time.Minute      // … up to this
	refusedWait    = 5 * time.Minute  // while a person has to do something
	mostRetryAfter = 15 * time.Minute // of what the server asks for
	saveEvery      = int64(60e9)      // ns of host time without rows after which the cursor is saved
)

// Config sets a sink up.
type Config struct {
	Target   Target
	Rig      string // the tag of every point
	Source   Source
	Cursor   CursorStore
	Rejected string        // path of the file for lines that the database refuses
	Room     int64         // bytes that the file may take; 0 = 64 MiB
	Lines    int           // lines in a request, 1 … 5000; 0 = 2000
	Timeout  time.Duration // of a request; 0 = 30 s

	// Changed, if set, is called by Step when the state changes and when lines were
	// rejected.
	Changed func(Status)
}

// State is what a sink is doing.
type State uint8

// The states. The zero value is Working.
const (
	Working State = iota // writes, or has nothing to write
	Waiting              // the database or the records cannot be reached; it is tried again soon
	Refused              // the database refuses everything: somebody has to change something
)

// String gives the name of the state.
func (s State) String() string { return [...]string{"working", "waiting", "refused"}[s] }

// Status tells how a sink stands. The counts are those since it was made.
type Status struct {
	State    State
	Written  uint64 // lines that the database has taken
	Rejected uint64 // lines that it refused, kept in the file for them
	Expired  uint64 // lines older than what it keeps, which it dropped
	Through  int64  // what was recorded up to here is in the database: host or event time, ns UTC; 0 = not known
	Err      string // why the state is not Working
	Reason   string // why lines were rejected last
}

// Sink writes what a source gives to a database. Step belongs to one goroutine;
// Status may be called from any.
type Sink struct {
	cfg    Config
	http   *http.Client
	api    api.WriteAPIBlocking
	reject rejects

	loaded   bool
	cursor   Cursor // of what the database has
	saved    int64  // Cursor.T when it was last saved
	lines    []string
	next     Cursor // behind lines
	held     bool   // lines and next wait to be written
	failures int    // in a row

	mu     sync.Mutex // protects status
	status Status
}

// New makes a sink. It reaches for nothing; Step does.
func New(cfg Config) (*Sink, error) {
	if err := cfg.Target.check(); err != nil {
		return nil, fmt.Errorf("influx: %w", err)
	}
	if cfg.Lines == 0 {
		cfg.Lines = defaultLines
	}
	if cfg.Lines < 1 || cfg.Lines > mostLines {
		return nil, fmt.Errorf("influx: %d lines in a request: give 1 to %d", cfg.Lines, mostLines)
	}
	if cfg.Timeout == 0 {
		cfg.Timeout = defaultTimeout
	}
	if cfg.Room == 0 {
		cfg.Room = defaultRoom
	}
	client := &http.Client{
		Timeout: cfg.Timeout,
		// A redirected POST becomes a GET that succeeds and writes nothing.
		CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse },
		Transport: &http.Transport{
			Proxy: http.ProxyFromEnvironment, MaxIdleConns: 1, IdleConnTimeout: 90 * time.Second, ForceAttemptHTTP2: true,
		},
	}
	options := influxdb2.DefaultOptions().SetHTTPClient(client).SetUseGZip(true).
		SetPrecision(time.Nanosecond).SetApplicationName("throatwatch")
	t := cfg.Target
	return &Sink{
		cfg: cfg, http: client, reject: rejects{path: cfg.Rejected, room: cfg.Room},
		api: influxdb2.NewClientWithOptions(t.URL, t.Token, options).WriteAPIBlocking(t.Org, t.Bucket),
	}, nil
}

// Close lets go of connections.
func (s *Sink) Close() { s.http.CloseIdleConnections() }

// Status tells how the sink stands.
func (s *Sink) Status() Status {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.status
}

// Step writes the next rows and gives how long to wait before the next call. After
// a failure it doubles the wait from 1 s to 1 min; when only a person can help it
// is 5 min; the server may ask for up to 15 min. A failure because ctx has ended
// changes nothing.
func (s *Sink) Step(ctx context.Context) time.Duration {
	if err := s.fill(ctx); err != nil {
		return s.failed(ctx, err)
	}
	done, err := s.deliver(ctx)
	if err == nil && len(done.rejected) > 0 {
		err = s.reject.add(done.rejected)
	}
	if err != nil {
		return s.failed(ctx, err)
	}
	some := len(s.lines) > 0
	s.cursor, s.held, s.lines = s.next, false, s.lines[:0]
	s.tell(func(st *Status) {
		st.Written += uint64(done.written)
		st.Expired += uint64(done.expired)
		st.Through = s.cursor.T
		if n := len(done.rejected); n > 0 {
			st.Rejected += uint64(n)
			st.Reason = done.rejected[n-1].reason
		}
	})
	if some || s.cursor.T-s.saved >= saveEvery {
		if err := s.cfg.Cursor.Save(s.cursor); err != nil {
			return s.failed(ctx, err) // what is written stays so; after a restart it is written again
		}
		s.saved = s.cursor.T
	}
	s.failures = 0
	s.tell(func(st *Status) { st.State, st.Err = Working, "" })
	if some {
		return 0
	}
	return pollEvery
}

// fill gets the next lines, unless some wait to be written.
func (s *Sink) fill(ctx context.Context) error {
	if !s.loaded {
		c, err := s.cfg.Cursor.Load()
		if err != nil {
			return err
		}
		s.cursor, s.saved, s.loaded = c, c.T, true
		s.tell(func(st *Status) { st.Through = c.T })
	}
	if s.held {
		return nil
	}
	rows, next, err := s.cfg.Source.Follow(ctx, s.cursor, s.cfg.Lines)
	if err != nil {
		return err
	}
	s.lines = s.lines[:0]
	for i := range rows {
		if line := rows[i].line(s.cfg.Rig); line != "" {
			s.lines = append(s.lines, line)
		}
	}
	s.next, s.held = next, true
	return nil
}

// failed notes a failure and gives the wait after it.
func (s *Sink) failed(ctx context.Context, err error) time.Duration {
	if ctx.Err() != nil {
		return 0
	}
	s.failures++
	state, wait := Waiting, longestWait
	if n := s.failures - 1; n < 6 {
		wait = min(firstWait<<n, longestWait)
	}
	var answer *answerError
	switch {
	case errors.Is(err, ErrRoom), errors.As(err, &answer) && answer.verdict != later:
		state, wait = Refused, refusedWait
	case answer != nil:
		wait = max(wait, answer.after)
	}
	s.tell(func(st *Status) { st.State, st.Err = state, err.Error() })
	return wait
}

// tell changes the status, and reports it when its state changed or lines were
// rejected.
func (s *Sink) tell(change func(*Status)) {
	s.mu.Lock()
	before := s.status
	change(&s.status)
	after := s.status
	s.mu.Unlock()
	if s.cfg.Changed != nil && (after.State != before.State || after.Rejected != before.Rejected) {
		s.cfg.Changed(after)
	}
}
