package dashboard

import (
	"bytes"
	"cmp"
	"fmt"
	"net/http"
	"net/url"
	"slices"
	"strconv"
	"strings"
	"sync"
	"time"

	"github.com/gorilla/websocket"

	"throatwatch/rules/pipeline"
)

const (
	// resumable is how many frames a connection may have missed and still go on
	// without a new hello.
	resumable = 10_000
	// clientQueue is how many frames may wait for a viewer, and clientAge for how
	// long, before it is disconnected with closeTooSlow.
	clientQueue  = 256
	clientAge    = 2 * time.Second
	closeTooSlow = 4008
	// closeSignedOut is for a viewer whose session is over.
	closeSignedOut = 4001
	writeTimeout   = 5 * time.Second
	closeTimeout   = time.Second
	pingEvery      = 5 * time.Second
	pongWithin     = 15 * time.Second
	maxViewers     = 256
)

// Hub keeps the newest frames and hands new ones to every viewer.
type Hub struct {
	// Speaking tells how this watch stands to the other of a pair; nil = there is none. It
	// is set before the first frame, and must not wait.
	Speaking func() Speaking

	build string

	mu      sync.Mutex // protects the fields below
	ring    []frame    // the newest frames but channels, oldest first from head
	head    int
	newest  map[string][]byte // of each kind; channels with all channels
	viewers map[*viewer]struct{}
	shut    bool
	scratch []byte // a frame is made here, and kept at its size
	all     []int  // the indices of all channels

	connections sync.WaitGroup // of viewers; nothing is added once shut
}

// NewHub gives a hub without viewers.
func NewHub(build string) *Hub {
	return &Hub{build: build, newest: map[string][]byte{}, viewers: map[*viewer]struct{}{}}
}

// frame is a frame that was sent, with what is needed to send it again. Bodies
// are shared by all who send them and never change.
type frame struct {
	point bool
	epoch uint64
	n     uint64
	t     int64
	body  []byte
}

// viewer is one websocket.
type viewer struct {
	still  func() bool // tells that it may go on
	all    bool        // every channel
	ids    []string    // channels wanted otherwise
	wanted []int       // their indices in the configuration of hash
	hash   string
	every  int64 // ns between points; 0 = each
	next   int64 // event time of the next point and channels frame to send
	resume bool  // behind the frame epoch.n
	epoch  uint64
	n      uint64
	queue  chan queued   // full: the viewer is dropped
	gone   chan struct{} // closed when it is to be disconnected, with code and reason
	once   sync.Once
	code   int
	reason string
}

type queued struct {
	body []byte
	at   time.Time
}

// drop disconnects the viewer; only the first reason counts.
func (v *viewer) drop(code int, reason string) {
	v.once.Do(func() {
		v.code, v.reason = code, reason
		close(v.gone)
	})
}

func (v *viewer) put(body []byte, now time.Time) {
	select {
	case v.queue <- queued{body, now}:
	default:
		v.drop(closeTooSlow, "too slow: more than 256 frames behind")
	}
}

// Publish makes frames of outcomes and hands them out. It never waits for a
// viewer. It must be called from where the machine steps.
func (h *Hub) Publish(outs []pipeline.Outcome, m *pipeline.Machine, _ *pipeline.State) {
	cfg, ok := m.Config()
	if !ok {
		return
	}
	now := time.Now()
	h.mu.Lock()
	defer h.mu.Unlock()
	for i := range outs {
		switch o := &outs[i]; o.Kind {
		case pipeline.OutcomeChannels:
			h.channels(o, &cfg, now)
		case pipeline.OutcomeConfig:
			h.frame(o, &cfg, now)
			if o.Event == pipeline.ConfigChanged { // what came before cannot be joined on: a viewer must begin with a hello
				h.ring, h.head = nil, 0
				clear(h.newest)
				h.dropAll(websocket.CloseServiceRestart, "the configuration changed")
			}
		case pipeline.OutcomePoint, pipeline.OutcomeAlarm, pipeline.OutcomeLedger, pipeline.OutcomeStatus,
			pipeline.OutcomeMark, pipeline.OutcomeRun, pipeline.OutcomeQuarantine, pipeline.OutcomeAction, pipeline.OutcomeReduction,
			pipeline.OutcomeExceedance, pipeline.OutcomeEngine, pipeline.OutcomeLife, pipeline.OutcomeLog, pipeline.OutcomeChecks,
			pipeline.OutcomeCard, pipeline.OutcomeCardPoint:
			h.frame(o, &cfg, now)
		}
	}
}

// frame hands out the frame of an outcome, if it has one.
func (h *Hub) frame(o *pipeline.Outcome, cfg *pipeline.Config, now time.Time) {
	var kind string
	var ok bool
	if h.scratch, kind, ok = appendFrame(h.scratch[:0], o, cfg); !ok {
		return
	}
	if o.Kind == pipeline.OutcomeStatus {
		h.scratch = h.speaks(h.scratch)
	}
	f := frame{point: o.Kind == pipeline.OutcomePoint, epoch: o.Epoch, n: o.N, t: o.T, body: bytes.Clone(h.scratch)}
	h.newest[kind] = f.body
	if len(h.ring) < resumable {
		h.ring = append(h.ring, f)
	} else {
		h.ring[h.head] = f
		h.head = (h.head + 1) % resumable
	}
	for v := range h.viewers {
		if !f.point || f.t >= v.next {
			v.put(f.body, now)
		}
	}
}

// channels hands out the channels of a scan: to each viewer those it wants. The
// point of the scan has gone out just before, so that both are thinned alike.
func (h *Hub) channels(o *pipeline.Outcome, cfg *pipeline.Config, now time.Time) {
	if len(h.all) != len(cfg.Compute.Channels) {
		h.all = indices(cfg, nil)
	}
	h.scratch = appendChannels(h.scratch[:0], o, cfg, h.all)
	body := bytes.Clone(h.scratch)
	h.newest["channels"] = body
	for v := range h.viewers {
		if o.T < v.next {
			continue
		}
		v.next = o.T + v.every
		switch {
		case v.all:
			v.put(body, now)
		case len(v.ids) > 0:
			if v.hash != cfg.Hash {
				v.hash, v.wanted = cfg.Hash, indices(cfg, v.ids)
			}
			h.scratch = appendChannels(h.scratch[:0], o, cfg, v.wanted)
			v.put(bytes.Clone(h.scratch), now)
		}
	}
}

// indices gives where the channels of some ids are, of all for no ids. An id that
// no channel has is left out.
func indices(cfg *pipeline.Config, ids []string) []int {
	var out []int
	for i := range cfg.Compute.Channels {
		if ids == nil || slices.Contains(ids, cfg.Compute.Channels[i].ID) {
			out = append(out, i)
		}
	}
	return out
}

// last gives the newest frame of a kind, nil when there is none.
func (h *Hub) last(kind string) []byte {
	h.mu.Lock()
	defer h.mu.Unlock()
	return h.newest[kind]
}

// Viewers gives the number of connections.
func (h *Hub) Viewers() int {
	h.mu.Lock()
	defer h.mu.Unlock()
	return len(h.viewers)
}

// Shutdown disconnects every viewer, takes no further ones, and gives those there
// are a moment to be told.
func (h *Hub) Shutdown() {
	h.mu.Lock()
	h.shut = true
	h.dropAll(websocket.CloseGoingAway, "the watch stops")
	h.mu.Unlock()
	ended := make(chan struct{})
	go func() { // ends with the last connection
		h.connections.Wait()
		close(ended)
	}()
	select {
	case <-ended:
	case <-time.After(closeTimeout):
	}
}

func (h *Hub) dropAll(code int, reason string) {
	for v := range h.viewers {
		v.drop(code, reason)
	}
}

// after gives the kept frames behind epoch.n, and whether they join on without a
// hole.
func (h *Hub) after(epoch, n uint64) ([]frame, bool) {
	kept := slices.Concat(h.ring[h.head:], h.ring[:h.head])
	if len(kept) == 0 || kept[0].epoch != epoch || kept[0].n > n+1 {
		return nil, false
	}
	i, _ := slices.BinarySearchFunc(kept, n+1, func(f frame, n uint64) int { return cmp.Compare(f.n, n) })
	return kept[i:], kept[len(kept)-1].epoch == epoch
}

// join enters a viewer, with what it has to be told first. It runs between two
// steps, so that nothing falls between hello and the first frame.
func (h *Hub) join(v *viewer, m *pipeline.Machine, s *pipeline.State) error {
	h.mu.Lock()
	defer h.mu.Unlock()
	switch {
	case h.shut:
		return &problem{http.StatusServiceUnavailable, "the watch stops"}
	case len(h.viewers) >= maxViewers:
		return &problem{http.StatusServiceUnavailable, fmt.Sprintf("%d viewers are connected: no more are taken", maxViewers)}
	}
	first := h.opening(v, m, s)
	v.queue = make(chan queued, clientQueue+len(first))
	now := time.Now()
	for _, b := range first {
		v.put(b, now)
	}
	h.viewers[v] = struct{}{}
	h.connections.Add(1)
	return nil
}

// opening gives what a viewer is told first: what it missed if that is known, else
// a hello.
func (h *Hub) opening(v *viewer, m *pipeline.Machine, s *pipeline.State) [][]byte {
	hello := h.hello(m, s)
	if !v.resume {
		return [][]byte{hello}
	}
	if v.epoch != s.Epoch || v.n > s.N { // a crash may have taken what it saw
		return [][]byte{[]byte(`{"kind":"reset","reason":"epoch"}`), hello}
	}
	missed, ok := h.after(v.epoch, v.n)
	if !ok {
		return [][]byte{[]byte(`{"kind":"reset","reason":"too_old"}`), hello}
	}
	var first [][]byte
	for _, f := range missed {
		switch {
		case !f.point:
		case f.t < v.next:
			continue
		default:
			v.next = f.t + v.every
		}
		first = append(first, f.body)
	}
	return first
}

func (h *Hub) leave(v *viewer) {
	h.mu.Lock()
	defer h.mu.Unlock()
	delete(h.viewers, v)
	h.connections.Done()
}

// newViewer reads what a viewer asks for.
func newViewer(q url.Values) (*viewer, error) {
	v := &viewer{gone: make(chan struct{})}
	switch list := q.Get("channels"); list {
	case "":
	case "*":
		v.all = true
	default:
		v.ids = strings.Split(list, ",")
	}
	if rate := q.Get("rate"); rate != "" {
		hz, err := strconv.ParseFloat(rate, 64)
		if err != nil || !(hz >= 0.001 && hz <= 1000) {
			return nil, badRequest("rate %q: give frames per second, from 0.001 to 1000", rate)
		}
		v.every = int64(1e9/hz) - 1e6 // a millisecond of grace, so that a rate equal to the scan rate thins nothing
	}
	if from := q.Get("from"); from != "" {
		var err error
		if v.epoch, v.n, err = parseFrom(from); err != nil {
			return nil, err
		}
		v.resume = true
	}
	return v, nil
}

// parseFrom reads "epoch.n".
func parseFrom(from string) (epoch, n uint64, err error) {
	a, b, ok := strings.Cut(from, ".")
	epoch, errA := strconv.ParseUint(a, 10, 64)
	n, errB := strconv.ParseUint(b, 10, 64)
	if !ok || errA != nil || errB != nil {
		return 0, 0, badRequest("from %q: give epoch.n of the last frame seen, as in 3.1201", from)
	}
	return epoch, n, nil
}

func (s *Server) live(w http.ResponseWriter, r *http.Request) error {
	q := r.URL.Query()
	v, err := newViewer(q)
	if err != nil {
		return err
	}
	v.still = callerOf(r).still
	if !websocket.IsWebSocketUpgrade(r) {
		w.Header().Set("Upgrade", "websocket")
		return &problem{http.StatusUpgradeRequired, "this is a websocket: connect to it as one"}
	}
	if err := sameSite(r); err != nil {
		return err
	}
	var refused error
	if err := s.ask(r.Context(), q.Get("rig"), func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		refused = s.hub.join(v, m, st)
	}); err != nil {
		return err
	}
	if refused != nil {
		return refused
	}
	defer s.hub.leave(v)
	up := websocket.Upgrader{
		ReadBufferSize: 1 << 10, WriteBufferSize: 8 << 10,
		Error: func(w http.ResponseWriter, r *http.Request, status int, reason error) {
			s.fail(w, r, &problem{status, reason.Error()})
		},
	}
	conn, err := up.Upgrade(w, r, nil)
	if err != nil {
		return nil //nolint:nilerr // the upgrader has answered
	}
	defer conn.Close() //nolint:errcheck // it may be closed already
	read := make(chan struct{})
	go func() { // ends with the connection
		defer close(read)
		readPongs(conn, v)
	}()
	if v.write(conn) {
		select { // the other side answers a close with a close [RFC 6455 5.5.1]
		case <-read:
		case <-time.After(closeTimeout):
		}
	}
	return nil
}

// readPongs reads until the connection ends: a viewer sends nothing but pongs.
func readPongs(conn *websocket.Conn, v *viewer) {
	conn.SetReadLimit(1 << 10)
	renew := func(string) error { return conn.SetReadDeadline(time.Now().Add(pongWithin)) }
	conn.SetPongHandler(renew)
	_ = renew("")
	for {
		if _, _, err := conn.ReadMessage(); err != nil {
			v.drop(websocket.CloseNormalClosure, "")
			return
		}
	}
}

// rest sends what is in the queue.
func (v *viewer) rest(conn *websocket.Conn) {
	for {
		select {
		case f := <-v.queue:
			_ = conn.SetWriteDeadline(time.Now().Add(closeTimeout))
			if conn.WriteMessage(websocket.TextMessage, f.body) != nil {
				return
			}
		default:
			return
		}
	}
}

// write sends frames until the viewer is dropped, and tells whether it was told
// so. It is the only writer.
func (v *viewer) write(conn *websocket.Conn) bool {
	ping := time.NewTicker(pingEvery)
	defer ping.Stop()
	for {
		select {
		case <-v.gone:
			if v.code == websocket.CloseServiceRestart {
				v.rest(conn)
			}
			message := websocket.FormatCloseMessage(v.code, v.reason)
			return conn.WriteControl(websocket.CloseMessage, message, time.Now().Add(closeTimeout)) == nil
		case f := <-v.queue:
			if time.Since(f.at) > clientAge {
				v.drop(closeTooSlow, "too slow: more than 2 s behind")
				continue
			}
			_ = conn.SetWriteDeadline(time.Now().Add(writeTimeout))
			if err := conn.WriteMessage(websocket.TextMessage, f.body); err != nil {
				return false
			}
		case <-ping.C:
			if !v.still() {
				v.drop(closeSignedOut, "signed out")
				continue
			}
			if err := conn.WriteControl(websocket.PingMessage, nil, time.Now().Add(closeTimeout)); err != nil {
				return false
			}
		}
	}
}
