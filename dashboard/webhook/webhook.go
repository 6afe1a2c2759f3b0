// Package webhook sends alarm transitions to a receiver of the site over HTTP.
//
// What it promises:
//
//   - Transitions go out once they are recorded, in their order, by a cursor that
//     moves, and is stored, when the receiver has taken one. An outage or a restart
//     loses none; what was under way when the watch was killed comes once more, with
//     the same Idempotency-Key. Those that are shown while nothing is recorded will
//     never be recorded: they go out at once and say so.
//   - At most Config.Queue transitions wait. When they are more the oldest is let go:
//     it is counted, and the next body says how many were.
//   - Each request is signed: X-Signature-256 is "sha256=" and the HMAC-SHA256 in hex,
//     by the shared secret, of X-Timestamp (s since 1970 UTC), a dot and the body.
//   - A receiver that is away, slow or hangs costs nobody anything: one goroutine waits
//     for it, at most Config.Timeout at a time, and tries again after 1 s, doubling to
//     1 min or as the receiver asks by Retry-After up to 5 min.
//   - What the receiver refuses (a redirection, or 4xx but 408, 425 and 429) is set
//     aside in a file, so that it does not hold up the next.
//
// The body is JSON: {"rig", "epoch", "n", "t", "recorded", "let_go", "alarm"}, where
// alarm is that of the frames of /live.
package webhook

import (
	"bytes"
	"cmp"
	"context"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"os"
	"slices"
	"strconv"
	"strings"
	"sync"
	"time"
)

const (
	defaultQueue   = 1024
	defaultTimeout = 10 * time.Second
	firstWait      = time.Second
	longestWait    = time.Minute
	mostRetryAfter = 5 * time.Minute
	// settleEvery is how often the records are looked at while what is shown is not
	// recorded yet: a commit takes some 20 ms.
	settleEvery = 25 * time.Millisecond
	// rereadEvery is how often they are looked at where reading them failed, and
	// idleEvery where nothing was shown: the cursor moves on with what is removed.
	rereadEvery = time.Second
	idleEvery   = time.Minute
	// heldEvery is how often it is looked whether another watch sends for this one still.
	heldEvery   = 250 * time.Millisecond
	readAtATime = 256
	// setAsideRoom bounds the file of what the receiver refuses, bytes. What finds no
	// room is counted only.
	setAsideRoom = 4 << 20
	// ShortestSecret is the least length of the shared secret, bytes.
	ShortestSecret = 16
)

// Cursor says how far the recorded transitions went out. It is that of the source.
type Cursor struct {
	Seq uint64 `json:"seq"` // everything recorded up to this record
	Row int    `json:"row"` // and so many alarm transitions after it
}

// Transition is a change of an alarm.
type Transition struct {
	Epoch, N uint64
	T        time.Time // event time
	ID       string    // of the alarm
	Revision uint64
	Alarm    json.RawMessage // as in the frames of /live
	Behind   Cursor          // behind it, where it comes from the records
}

// Source gives recorded transitions: at most limit of them behind a cursor and the
// cursor behind those; none when there is nothing more. Newest is the cursor behind
// everything there is.
type Source interface {
	Follow(ctx context.Context, after Cursor, limit int) ([]Transition, Cursor, error)
	Newest() Cursor
}

// CursorStore keeps the cursor over a restart; ok is false when none was saved.
type CursorStore interface {
	Load() (c Cursor, ok bool, err error)
	Save(c Cursor) error
}

// Config sets a sender up.
type Config struct {
	URL      string // http:// or https://
	Secret   []byte
	Rig      string
	Source   Source
	Cursor   CursorStore
	SetAside string // path of the file for what the receiver refuses
	Queue    int    // transitions that wait at most; 0 = 1024
	// Held tells, where another watch sends for this one, that nothing is to be sent now,
	// and for how long transitions are kept meanwhile; nil = it never is. It must not wait.
	Held    func() (keep time.Duration, held bool)
	Timeout time.Duration // of a request; 0 = 10 s
}

// State is how it goes.
type State uint8

// The states. The zero value is Working.
const (
	Working State = iota // sends, or has nothing to send
	Waiting              // the receiver or the records cannot be reached; it is tried again
	Refused              // the receiver refused the last one: somebody has to change something
)

// String gives the name of the state.
func (s State) String() string { return [...]string{"working", "waiting", "refused"}[s] }

// Status tells how a sender stands. The counts are those since it was made.
type Status struct {
	State     State
	Waiting   int    // transitions that wait
	Delivered uint64 // taken by the receiver
	Failed    uint64 // tries that were not
	Refused   uint64 // set aside
	LetGo     uint64 // dropped from the full queue
	Why       string // why the state is not Working

	Oldest time.Time // when the oldest that waits came into the queue; zero = none waits
}

// waiting is a transition in the queue.
type waiting struct {
	Transition
	recorded bool
	since    time.Time
}

// key is what a receiver knows a transition by.
type key struct {
	id       string
	revision uint64
}

// shown is a transition that was shown and is not known to be recorded.
type shown struct {
	Transition
	loose bool // nothing was recorded when or after it was shown
}

// Sender sends. Run belongs to one goroutine; the other methods may be called from
// any and never wait.
type Sender struct {
	cfg  Config
	http *http.Client
	wake chan struct{} // one slot: full means that there is something to look at already

	queue    []waiting
	cursor   Cursor // of what went out
	saved    Cursor // of what was stored
	read     Cursor // of what was read
	loose    []key  // sent without being recorded, newest last; not more than a queue
	letGo    uint64 // since the last that was sent
	dropped  uint64 // since tell
	failures int    // in a row

	sending          State  // by the last try
	sent             string // why it is not Working
	reading, storing string // what is wrong with the records, with the cursor

	mu     sync.Mutex // protects the fields below
	shown  []shown    // full: the oldest goes; while recording it is among the records
	status Status
}

// New makes a sender. Without a stored cursor it begins with what comes from now on.
func New(cfg Config) (*Sender, error) {
	if err := checkURL(cfg.URL); err != nil {
		return nil, fmt.Errorf("webhook: %w", err)
	}
	if len(cfg.Secret) < ShortestSecret {
		return nil, fmt.Errorf("webhook: the shared secret has %d bytes: at least %d are needed", len(cfg.Secret), ShortestSecret)
	}
	if cfg.Queue == 0 {
		cfg.Queue = defaultQueue
	}
	if cfg.Timeout == 0 {
		cfg.Timeout = defaultTimeout
	}
	c, ok, err := cfg.Cursor.Load()
	if err == nil && !ok {
		c = cfg.Source.Newest()
		err = cfg.Cursor.Save(c)
	}
	if err != nil {
		return nil, fmt.Errorf("webhook: %w", err)
	}
	return &Sender{
		cfg: cfg, wake: make(chan struct{}, 1), cursor: c, saved: c, read: c,
		http: &http.Client{
			Timeout: cfg.Timeout,
			// A redirected POST becomes a GET that succeeds and tells nobody.
			CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse },
			Transport:     &http.Transport{Proxy: http.ProxyFromEnvironment, MaxIdleConns: 1, IdleConnTimeout: 90 * time.Second, ForceAttemptHTTP2: true},
		},
	}, nil
}

// checkURL refuses what cannot be a receiver. It does not show the address, which may
// hold a secret.
func checkURL(address string) error {
	u, err := url.Parse(address)
	switch {
	case err != nil || u.Scheme != "http" && u.Scheme != "https" || u.Host == "" || u.Fragment != "":
		return errors.New("the address is not understood: give http://host:port/path or https://host/path")
	case u.User != nil:
		return errors.New("the address has a user in it, which would get into logs: the signature tells the receiver who sends")
	}
	return nil
}

// Where names the receiver without path and query, which may hold a secret.
func (s *Sender) Where() string {
	u, err := url.Parse(s.cfg.URL)
	if err != nil {
		return "" // New has parsed it
	}
	return u.Scheme + "://" + u.Host
}

// Show tells of transitions that were shown just now, and whether records are stored.
func (s *Sender) Show(transitions []Transition, recording bool) {
	s.mu.Lock()
	for i := range transitions {
		if len(s.shown) == s.cfg.Queue {
			if s.shown[0].loose {
				s.status.LetGo++
			}
			s.shown = s.shown[1:]
		}
		s.shown = append(s.shown, shown{Transition: transitions[i]})
	}
	if !recording {
		for i := range s.shown {
			s.shown[i].loose = true
		}
	}
	some := len(s.shown) > 0
	s.mu.Unlock()
	if some {
		select {
		case s.wake <- struct{}{}:
		default:
		}
	}
}

// Status tells how it goes.
func (s *Sender) Status() Status {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.status
}

// Run sends until ctx ends.
func (s *Sender) Run(ctx context.Context) {
	defer s.http.CloseIdleConnections()
	timer := time.NewTimer(0)
	defer timer.Stop()
	var due time.Time // of the next try
	for ctx.Err() == nil {
		wait := s.fill(ctx)
		if len(s.queue) > 0 {
			if now := time.Now(); s.held(now) {
				due = now.Add(heldEvery)
			} else if !now.Before(due) {
				due = time.Now().Add(s.deliver(ctx, now))
			}
			if len(s.queue) > 0 {
				wait = min(wait, max(time.Until(due), 0))
			}
		} else if s.cursor = s.read; wait == idleEvery {
			s.save()
		}
		s.tell(func(*Status) {})
		timer.Reset(wait)
		select {
		case <-ctx.Done():
		case <-s.wake:
		case <-timer.C:
		}
	}
}

// held tells that another watch sends for this one. What that has delivered by now is
// let go.
func (s *Sender) held(now time.Time) bool {
	if s.cfg.Held == nil {
		return false
	}
	keep, held := s.cfg.Held()
	if !held {
		return false
	}
	for len(s.queue) > 0 && now.Sub(s.queue[0].since) > keep {
		s.leave()
	}
	s.failures, s.sending, s.sent = 0, Working, ""
	s.save()
	return true
}

// leave takes the first of the queue off it.
func (s *Sender) leave() {
	if s.queue[0].recorded {
		s.cursor = s.queue[0].Behind
	}
	s.queue = s.queue[1:]
	if len(s.queue) == 0 {
		s.cursor = s.read
	}
}

// fill reads what was recorded into the queue, and takes what never will be. It gives
// how long to wait for more.
func (s *Sender) fill(ctx context.Context) time.Duration {
	for {
		got, next, err := s.cfg.Source.Follow(ctx, s.read, readAtATime)
		if err != nil {
			if ctx.Err() == nil {
				s.reading = "the records cannot be read: " + err.Error()
			}
			s.takeLoose()
			return rereadEvery
		}
		s.read, s.reading = next, ""
		for i := range got {
			if !s.wasLoose(&got[i]) {
				s.enqueue(waiting{got[i], true, time.Now()})
			}
		}
		s.forget(got)
		if len(got) == 0 {
			break
		}
	}
	if s.takeLoose() {
		return settleEvery
	}
	return idleEvery
}

// forget drops from what was shown all that is recorded.
func (s *Sender) forget(got []Transition) {
	if len(got) == 0 {
		return
	}
	last := got[len(got)-1].N
	s.mu.Lock()
	defer s.mu.Unlock()
	kept := s.shown[:0]
	for _, one := range s.shown {
		if one.N > last {
			kept = append(kept, one)
		}
	}
	s.shown = kept
}

// takeLoose queues what was shown and will not be recorded, and tells whether
// something else is still to be recorded.
func (s *Sender) takeLoose() (more bool) {
	s.mu.Lock()
	defer s.mu.Unlock()
	kept := s.shown[:0]
	for _, one := range s.shown {
		if !one.loose {
			kept = append(kept, one)
			continue
		}
		if len(s.loose) == s.cfg.Queue {
			s.loose = s.loose[1:]
		}
		s.loose = append(s.loose, key{one.ID, one.Revision})
		s.enqueue(waiting{one.Transition, false, time.Now()})
	}
	s.shown = kept
	return len(kept) > 0
}

// wasLoose tells that a recorded transition went out before it was recorded: a batch
// that was on its way to the disk when recording stopped may be stored after all.
func (s *Sender) wasLoose(t *Transition) bool {
	return slices.Contains(s.loose, key{t.ID, t.Revision})
}

func (s *Sender) enqueue(w waiting) {
	if len(s.queue) == s.cfg.Queue {
		if s.queue[0].recorded {
			s.cursor = s.queue[0].Behind
		}
		s.queue = s.queue[1:]
		s.letGo++
		s.dropped++
	}
	s.queue = append(s.queue, w)
}

// deliver sends the first of the queue and gives the wait before the next try.
func (s *Sender) deliver(ctx context.Context, now time.Time) time.Duration {
	first := s.queue[0]
	body, err := s.body(&first)
	if err != nil {
		panic("webhook: body: " + err.Error()) // an alarm that was encoded before
	}
	v := s.post(ctx, &first, body, now)
	if ctx.Err() != nil {
		return 0 // it stays in the queue, which ends; the cursor does not
	}
	if v.outcome == again {
		s.failures++
		wait := longestWait
		if n := s.failures - 1; n < 6 {
			wait = min(firstWait<<n, longestWait)
		}
		s.sending, s.sent = Waiting, v.why
		s.tell(func(st *Status) { st.Failed++ })
		return max(wait, v.after)
	}
	wait := time.Duration(0)
	s.failures = 0
	if v.outcome == taken {
		s.letGo = 0
		s.sending, s.sent = Working, ""
		s.tell(func(st *Status) { st.Delivered++ })
	} else {
		wait = firstWait
		s.sending, s.sent = Refused, v.why
		if err := s.setAside(body); err != nil {
			s.sent += "; and it is not kept: " + err.Error()
		}
		s.tell(func(st *Status) { st.Refused, st.Failed = st.Refused+1, st.Failed+1 })
	}
	s.leave()
	s.save()
	return wait
}

// save stores the cursor. Where that fails what went out comes again after a restart,
// with its key.
func (s *Sender) save() {
	if s.cursor == s.saved {
		return
	}
	s.storing = ""
	if err := s.cfg.Cursor.Save(s.cursor); err != nil {
		s.storing = err.Error()
		return
	}
	s.saved = s.cursor
}

func (s *Sender) body(w *waiting) ([]byte, error) {
	return json.Marshal(struct {
		Rig      string          `json:"rig"`
		Epoch    uint64          `json:"epoch"`
		N        uint64          `json:"n"`
		T        string          `json:"t"`
		Recorded bool            `json:"recorded"`
		LetGo    uint64          `json:"let_go"`
		Alarm    json.RawMessage `json:"alarm"`
	}{s.cfg.Rig, w.Epoch, w.N, w.T.UTC().Format(time.RFC3339Nano), w.recorded, s.letGo, w.Alarm})
}

// Sign gives the value of X-Signature-256 for a timestamp and a body.
func Sign(secret []byte, timestamp string, body []byte) string {
	h := hmac.New(sha256.New, secret)
	h.Write([]byte(timestamp)) // a hash takes everything
	h.Write([]byte{'.'})
	h.Write(body)
	return "sha256=" + hex.EncodeToString(h.Sum(nil))
}

// outcome is what became of a try.
type outcome uint8

const (
	taken   outcome = iota
	again           // no answer, too busy, broken: the same will do
	refused         // the same again will not
)

type verdict struct {
	outcome outcome
	after   time.Duration // what the receiver asks to wait
	why     string
}

// post makes one try.
func (s *Sender) post(ctx context.Context, w *waiting, body []byte, now time.Time) verdict {
	r, err := http.NewRequestWithContext(ctx, http.MethodPost, s.cfg.URL, bytes.NewReader(body))
	if err != nil {
		return verdict{outcome: again, why: plain(err)}
	}
	timestamp := strconv.FormatInt(now.Unix(), 10)
	r.Header.Set("Content-Type", "application/json")
	r.Header.Set("User-Agent", "throatwatch")
	r.Header.Set("Idempotency-Key", w.ID+"/"+strconv.FormatUint(w.Revision, 10))
	r.Header.Set("X-Timestamp", timestamp)
	r.Header.Set("X-Signature-256", Sign(s.cfg.Secret, timestamp, body))
	res, err := s.http.Do(r)
	if err != nil {
		return verdict{outcome: again, why: plain(err)}
	}
	defer res.Body.Close() //nolint:errcheck // nothing of it is needed
	_, _ = io.CopyN(io.Discard, res.Body, 64<<10)
	v := verdict{why: strings.ToValidUTF8("the receiver answers "+res.Status[:min(len(res.Status), 100)], "?")}
	switch c := res.StatusCode; {
	case c >= 200 && c < 300:
		v = verdict{}
	case c == http.StatusRequestTimeout, c == http.StatusTooEarly, c == http.StatusTooManyRequests, c >= 500:
		v.outcome = again
		if s, err := strconv.Atoi(res.Header.Get("Retry-After")); err == nil && s > 0 {
			v.after = min(time.Duration(min(s, 3600))*time.Second, mostRetryAfter)
		}
	default:
		v.outcome = refused
	}
	return v
}

// plain gives an error without the address, which may hold a secret.
func plain(err error) string {
	if e, ok := errors.AsType[*url.Error](err); ok {
		if e.Timeout() {
			return "the receiver does not answer in time"
		}
		err = e.Err
	}
	return err.Error()
}

// setAside keeps a body that the receiver refuses, a line each.
func (s *Sender) setAside(body []byte) (err error) {
	f, err := os.OpenFile(s.cfg.SetAside, os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o640)
	if err != nil {
		return fmt.Errorf("set aside: %w", err)
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	info, err := f.Stat()
	if err != nil {
		return fmt.Errorf("set aside: %w", err)
	}
	if info.Size()+int64(len(body)) >= setAsideRoom {
		return fmt.Errorf("%s is full: move it away", s.cfg.SetAside)
	}
	if _, err := f.Write(append(body, '\n')); err != nil {
		return fmt.Errorf("set aside: %w", err)
	}
	return nil
}

// tell changes the status. It is called by Run only.
func (s *Sender) tell(change func(*Status)) {
	s.mu.Lock()
	defer s.mu.Unlock()
	change(&s.status)
	st := &s.status
	st.Waiting, st.Oldest = len(s.queue), time.Time{}
	if st.Waiting > 0 {
		st.Oldest = s.queue[0].since
	}
	st.LetGo += s.dropped
	s.dropped = 0
	st.State, st.Why = s.sending, s.sent
	if more := cmp.Or(s.reading, s.storing); st.State == Working && more != "" {
		st.State, st.Why = Waiting, more
	}
}
