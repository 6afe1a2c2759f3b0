package dashboard

import (
	"fmt"
	"net/http"
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
	// clientQueue is how many frames may wait for a viewer …
	clientQueue = 256
	// … and for how long, before it is disconnected with closeTooSlow.
	clientAge    = 2 * time.Second
	closeTooSlow = 4008
	writeTimeout = 5 * time.Second
	pingEvery    = 5 * time.Second
	pongWithin   = 15 * time.Second
	maxViewers   = 256
)

// Hub keeps the newest frames and hands new ones to every viewer.
type Hub struct {
	build string

	mu      sync.Mutex // protects the fields below
	ring    []Frame    // the newest frames but channels, oldest first from head
	head    int
	newest  map[string]Frame // of each kind; channels with all channels
	viewers map[*viewer]struct{}
	shut    bool
}

// NewHub gives a hub without viewers.
func NewHub(build string) *Hub {
	return &Hub{build: build, newest: map[string]Frame{}, viewers: map[*viewer]struct{}{}}
}

// viewer is one websocket.
type viewer struct {
	all    bool     // every channel
	ids    []string // channels wanted otherwise
	wanted []int    // their indices in the configuration of hash
	hash   string
	every  int64 // ns between points; 0 = each
	next   int64 // event time of the next point and channels frame to send
	queue  chan queued
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
		o := &outs[i]
		switch o.Kind {
		case pipeline.OutcomeChannels:
			h.channels(o, &cfg, now)
			continue
		case pipeline.OutcomeConfig:
			if o.OK { // what came before cannot be joined on: a viewer must begin with a hello
				h.ring, h.head = nil, 0
				h.dropAll(websocket.CloseServiceRestart, "the configuration changed")
			}
			continue
		case pipeline.OutcomePoint, pipeline.OutcomeAlarm, pipeline.OutcomeLedger, pipeline.OutcomeStatus,
			pipeline.OutcomeMark, pipeline.OutcomeRun, pipeline.OutcomeQuarantine, pipeline.OutcomeAction:
		}
		body, kind, ok := appendFrame(nil, o, &cfg)
		if !ok {
			continue
		}
		f := Frame{Kind: kind, Epoch: o.Epoch, N: o.N, T: o.T, Body: body}
		h.keep(f)
		for v := range h.viewers {
			if kind == "operating_point" && o.T < v.next {
				continue
			}
			v.put(body, now)
		}
	}
}

// channels hands out the channels of a scan: to each viewer those it wants.
func (h *Hub) channels(o *pipeline.Outcome, cfg *pipeline.Config, now time.Time) {
	all := appendChannels(nil, o, cfg, allOf(cfg))
	h.newest["channels"] = Frame{Kind: "channels", Epoch: o.Epoch, N: o.N, T: o.T, Body: all}
	for v := range h.viewers {
		if o.T < v.next {
			continue
		}
		v.next = o.T + v.every // the point of this scan has gone out just before
		switch {
		case v.all:
			v.put(all, now)
		case len(v.ids) > 0:
			if v.hash != cfg.Hash {
				v.hash, v.wanted = cfg.Hash, indices(cfg, v.ids)
			}
			v.put(appendChannels(nil, o, cfg, v.wanted), now)
		}
	}
}

func allOf(cfg *pipeline.Config) []int {
	all := make([]int, len(cfg.Compute.Channels))
	for i := range all {
		all[i] = i
	}
	return all
}

func indices(cfg *pipeline.Config, ids []string) []int {
	var out []int
	for i := range cfg.Compute.Channels {
		if slices.Contains(ids, cfg.Compute.Channels[i].ID) {
			out = append(out, i)
		}
	}
	return out
}

func (h *Hub) keep(f Frame) {
	h.newest[f.Kind] = f
	if len(h.ring) < resumable {
		h.ring = append(h.ring, f)
		return
	}
	h.ring[h.head] = f
	h.head = (h.head + 1) % resumable
}

func (v *viewer) put(body []byte, now time.Time) {
	select {
	case v.queue <- queued{body, now}:
	default:
		v.drop(closeTooSlow, "too slow: more than 256 frames behind")
	}
}

func (h *Hub) last(kind string) (Frame, bool) {
	h.mu.Lock()
	defer h.mu.Unlock()
	f, ok := h.newest[kind]
	return f, ok
}

// Viewers gives the number of connections.
func (h *Hub) Viewers() int {
	h.mu.Lock()
	defer h.mu.Unlock()
	return len(h.viewers)
}

// Shutdown disconnects every viewer and takes no further ones.
func (h *Hub) Shutdown() {
	h.mu.Lock()
	defer h.mu.Unlock()
	h.shut = true
	h.dropAll(websocket.CloseGoingAway, "the watch stops")
}

func (h *Hub) dropAll(code int, reason string) {
	for v := range h.viewers {
		v.drop(code, reason)
	}
}

// after gives the kept frames behind epoch.n, and whether they join on without a
// hole.
func (h *Hub) after(epoch, n uint64) ([]Frame, bool) {
	if len(h.ring) == 0 {
		return nil, false
	}
	oldest := h.ring[h.head%len(h.ring)]
	if oldest.Epoch != epoch || oldest.N > n+1 {
		return nil, false
	}
	var out []Frame
	for i := range h.ring {
		f := h.ring[(h.head+i)%len(h.ring)]
		if f.Epoch != epoch {
			return nil, false
		}
		if f.N > n {
			out = append(out, f)
		}
	}
	return out, true
}

// join enters a viewer, with what it has to be told first. It runs between two
// steps, so that nothing falls between hello and the first frame.
func (h *Hub) join(v *viewer, from string, m *pipeline.Machine, s *pipeline.State) error {
	h.mu.Lock()
	defer h.mu.Unlock()
	if h.shut || len(h.viewers) >= maxViewers {
		return &problem{http.StatusServiceUnavailable, fmt.Sprintf("%d viewers are connected; no more are taken", len(h.viewers))}
	}
	now := time.Now()
	first := [][]byte{}
	if from != "" {
		epoch, n, err := parseFrom(from)
		if err != nil {
			return err
		}
		missed, ok := h.after(epoch, n)
		if ok && epoch == s.Epoch {
			for _, f := range missed {
				first = append(first, f.Body)
			}
			return h.enter(v, first, now)
		}
		reason := "too_old"
		if epoch != s.Epoch {
			reason = "epoch"
		}
		first = append(first, []byte(`{"kind":"reset","reason":"`+reason+`"}`))
	}
	return h.enter(v, append(first, hello(nil, m, s, h.build)), now)
}

func (h *Hub) enter(v *viewer, first [][]byte, now time.Time) error {
	v.queue = make(chan queued, clientQueue+len(first))
	for _, b := range first {
		v.queue <- queued{b, now}
	}
	h.viewers[v] = struct{}{}
	return nil
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
		if err != nil || !(hz > 0 && hz <= 1000) {
			return badRequest("rate %q: give frames per second, above 0 and up to 1000", rate)
		}
		v.every = int64(1e9/hz) - 1e6 // a millisecond of grace, so that a rate equal to the scan rate thins nothing
	}
	if err := sameSite(r); err != nil {
		return err
	}
	r.SetPathValue("rig", q.Get("rig"))
	var refused error
	if err := s.ask(r, func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		refused = s.hub.join(v, q.Get("from"), m, st)
	}); err != nil || refused != nil {
		if refused != nil {
			return refused
		}
		return err
	}
	defer s.hub.leave(v)
	up := websocket.Upgrader{ReadBufferSize: 1 << 10, WriteBufferSize: 8 << 10}
	conn, err := up.Upgrade(w, r, nil)
	if err != nil {
		return nil //nolint:nilerr // the upgrader has answered
	}
	defer conn.Close() //nolint:errcheck // it may be closed already
	go readPongs(conn, v)
	v.write(conn)
	return nil
}

func (h *Hub) leave(v *viewer) {
	h.mu.Lock()
	defer h.mu.Unlock()
	delete(h.viewers, v)
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

// write sends frames until the viewer is dropped. It is the only writer.
func (v *viewer) write(conn *websocket.Conn) {
	ping := time.NewTicker(pingEvery)
	defer ping.Stop()
	for {
		select {
		case <-v.gone:
			text := websocket.FormatCloseMessage(v.code, v.reason)
			_ = conn.WriteControl(websocket.CloseMessage, text, time.Now().Add(time.Second))
			return
		case f := <-v.queue:
			if time.Since(f.at) > clientAge {
				v.drop(closeTooSlow, "too slow: more than 2 s behind")
				continue
			}
			_ = conn.SetWriteDeadline(time.Now().Add(writeTimeout))
			if err := conn.WriteMessage(websocket.TextMessage, f.body); err != nil {
				return
			}
		case <-ping.C:
			if err := conn.WriteControl(websocket.PingMessage, nil, time.Now().Add(time.Second)); err != nil {
				return
			}
		}
	}
}
