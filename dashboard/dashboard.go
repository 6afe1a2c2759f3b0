// Package dashboard serves people and programs that look at the watch: the page,
// the HTTP interface and the websocket of live frames.
//
// Frames are made once, from outcomes, and are the same live, on resumption and
// from a stored run. Viewers never hold up the watch: each has a bounded queue,
// and one that falls behind is disconnected.
package dashboard

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"net/http"
	"strings"
	"time"

	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// Desk is the live watch as the server needs it.
type Desk interface {
	// Ask runs fn between two steps.
	Ask(ctx context.Context, fn func(*pipeline.Machine, *pipeline.State)) error
	// Act does what an operator asks for.
	Act(ctx context.Context, a pipeline.Action) (pipeline.Reply, error)
}

// Runs gives the stored runs.
type Runs interface {
	List(ctx context.Context) ([]runfile.Run, error)
	// Open opens a run for reading; runfile.ErrNotRunFile or fs.ErrNotExist when
	// there is none. The caller closes it.
	Open(ctx context.Context, id string) (*runfile.File, error)
}

// Config sets a server up.
type Config struct {
	Desk  Desk
	Runs  Runs
	Parse func(bundle []byte) (pipeline.Config, error) // for stored runs
	Build string
	Log   *slog.Logger
	Extra func() []Metric // further metrics, of parts that the server does not know
}

// Server answers HTTP. It is an http.Handler.
type Server struct {
	cfg Config
	hub *Hub
	mux *http.ServeMux
}

// NewServer gives a server; hub is fed by whoever runs the watch.
func NewServer(cfg Config, hub *Hub) *Server {
	s := &Server{cfg: cfg, hub: hub, mux: http.NewServeMux()}
	route := func(pattern string, h func(http.ResponseWriter, *http.Request) error) {
		s.mux.HandleFunc(pattern, func(w http.ResponseWriter, r *http.Request) {
			if err := h(w, r); err != nil {
				s.fail(w, r, err)
			}
		})
	}
	route("GET /api/rigs", s.rigs)
	route("GET /api/rigs/{rig}/hello", s.hello)
	route("GET /api/rigs/{rig}/operating-point", s.operatingPoint)
	route("GET /api/rigs/{rig}/channels", s.channels)
	route("GET /api/rigs/{rig}/throat-curve", s.throatCurve)
	route("POST /api/rigs/{rig}/runs", s.startOrEndRun)
	route("GET /api/alarms", s.alarms)
	route("POST /api/alarms/{id}/{action}", s.alarmAction)
	route("GET /api/runs", s.runs)
	route("GET /api/runs/{id}", s.run)
	route("GET /api/runs/{id}/messages", s.messages)
	route("GET /api/runs/{id}/series", s.series)
	route("POST /api/runs/{id}/marks", s.mark)
	route("GET /healthz", s.healthz)
	route("GET /metrics", s.metrics)
	route("GET /openapi.json", s.openAPI)
	route("GET /live", s.live)
	s.mux.Handle("GET /", page())
	return s
}

// contentPolicy lets the page load from this server only.
const contentPolicy = "default-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:; connect-src 'self'; frame-ancestors 'none'; base-uri 'none'"

// ServeHTTP answers a request.
func (s *Server) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	h := w.Header()
	h.Set("Content-Security-Policy", contentPolicy)
	h.Set("X-Content-Type-Options", "nosniff")
	h.Set("Referrer-Policy", "no-referrer")
	s.mux.ServeHTTP(w, r)
}

// problem is an error with the status it is told by [RFC 9457].
type problem struct {
	status int
	detail string
}

func (p *problem) Error() string { return p.detail }

func badRequest(format string, args ...any) error {
	return &problem{http.StatusBadRequest, fmt.Sprintf(format, args...)}
}

func notFound(format string, args ...any) error {
	return &problem{http.StatusNotFound, fmt.Sprintf(format, args...)}
}

// fail answers with an error as application/problem+json.
func (s *Server) fail(w http.ResponseWriter, r *http.Request, err error) {
	var p *problem
	if !errors.As(err, &p) {
		if r.Context().Err() != nil {
			return // the client is gone
		}
		s.cfg.Log.Error("request", "path", r.URL.Path, "err", err)
		p = &problem{http.StatusInternalServerError, err.Error()}
	}
	b, err := json.Marshal(map[string]any{
		"type": "about:blank", "title": http.StatusText(p.status), "status": p.status, "detail": p.detail, "instance": r.URL.Path,
	})
	if err != nil {
		b = []byte("{}")
	}
	w.Header().Set("Content-Type", "application/problem+json")
	w.WriteHeader(p.status)
	_, _ = w.Write(b)
}

func reply(w http.ResponseWriter, status int, v any) error {
	b, err := json.Marshal(v)
	if err != nil {
		return fmt.Errorf("answer: %w", err)
	}
	return replyJSON(w, status, b)
}

func replyJSON(w http.ResponseWriter, status int, b []byte) error {
	w.Header().Set("Content-Type", "application/json")
	w.Header().Set("Cache-Control", "no-store")
	w.WriteHeader(status)
	_, _ = w.Write(b) // whoever asked is gone, or not
	return nil
}

// body reads a JSON body of at most 64 KiB.
func body(w http.ResponseWriter, r *http.Request, v any) error {
	dec := json.NewDecoder(http.MaxBytesReader(w, r.Body, 64<<10))
	dec.DisallowUnknownFields()
	if err := dec.Decode(v); err != nil {
		return badRequest("body: %v", err)
	}
	return nil
}

// sameSite refuses a request that a page of another site makes a browser send.
func sameSite(r *http.Request) error {
	if site := r.Header.Get("Sec-Fetch-Site"); site != "" && site != "same-origin" && site != "none" {
		return &problem{http.StatusForbidden, "the request comes from another site"}
	}
	if origin := r.Header.Get("Origin"); origin != "" && !strings.HasSuffix(origin, "//"+r.Host) {
		return &problem{http.StatusForbidden, "the request comes from another site: " + origin}
	}
	return nil
}

// ask runs fn between two steps, after checking the rig of the path if there is
// one in it.
func (s *Server) ask(r *http.Request, fn func(cfg *pipeline.Config, m *pipeline.Machine, st *pipeline.State)) error {
	rig := r.PathValue("rig")
	var wrong error
	err := s.cfg.Desk.Ask(r.Context(), func(m *pipeline.Machine, st *pipeline.State) {
		cfg, ok := m.Config()
		if !ok || rig != "" && cfg.Rig.ID != rig {
			wrong = notFound("no rig %q is watched here; GET /api/rigs lists them", rig)
			return
		}
		fn(&cfg, m, st)
	})
	return errors.Join(err, wrong)
}

func (s *Server) rigs(w http.ResponseWriter, r *http.Request) error {
	list := []pipeline.RigInfo{}
	if err := s.ask(r, func(cfg *pipeline.Config, _ *pipeline.Machine, _ *pipeline.State) {
		list = append(list, cfg.Rig)
	}); err != nil {
		return err
	}
	return reply(w, http.StatusOK, list)
}

func (s *Server) hello(w http.ResponseWriter, r *http.Request) error {
	var b []byte
	if err := s.ask(r, func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		b = hello(nil, m, st, s.cfg.Build)
	}); err != nil {
		return err
	}
	return replyJSON(w, http.StatusOK, b)
}

// last answers with the newest frame of a kind.
func (s *Server) last(w http.ResponseWriter, r *http.Request, kind string) error {
	if err := s.ask(r, func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {}); err != nil {
		return err
	}
	f, ok := s.hub.last(kind)
	if !ok {
		return &problem{http.StatusServiceUnavailable, "no scan yet: no channel has sent anything since the watch began"}
	}
	return replyJSON(w, http.StatusOK, f.Body)
}

func (s *Server) operatingPoint(w http.ResponseWriter, r *http.Request) error {
	return s.last(w, r, "operating_point")
}

func (s *Server) channels(w http.ResponseWriter, r *http.Request) error {
	return s.last(w, r, "channels")
}

func (s *Server) alarms(w http.ResponseWriter, r *http.Request) error {
	list := []rules.Alarm{}
	if err := s.ask(r, func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		list = append(list, m.Alarms(st)...)
	}); err != nil {
		return err
	}
	return reply(w, http.StatusOK, list)
}

// actionBody is the body of every action.
type actionBody struct {
	Revision  uint64  `json:"revision"`
	Reason    string  `json:"reason"`
	RequestID string  `json:"request_id"`
	By        string  `json:"by"`
	Text      string  `json:"text"`
	Action    string  `json:"action"`
	Seconds   float64 `json:"seconds"`
}

// alarmActions maps the last part of the path to what the rules call it.
var alarmActions = map[string]string{
	"acknowledge": rules.DoAcknowledge, "shelve": rules.DoShelve, "unshelve": rules.DoUnshelve,
	"reset": rules.DoReset, "out-of-service": rules.DoOutOfService, "in-service": rules.DoInService,
}

func (s *Server) alarmAction(w http.ResponseWriter, r *http.Request) error {
	do, ok := alarmActions[r.PathValue("action")]
	if !ok {
		return notFound("no action %q on an alarm: acknowledge, shelve, unshelve, reset, out-of-service, in-service", r.PathValue("action"))
	}
	return s.act(w, r, pipeline.Action{Do: do, Alarm: r.PathValue("id")})
}

func (s *Server) startOrEndRun(w http.ResponseWriter, r *http.Request) error {
	if err := s.ask(r, func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {}); err != nil {
		return err
	}
	return s.act(w, r, pipeline.Action{})
}

func (s *Server) mark(w http.ResponseWriter, r *http.Request) error {
	id, active := r.PathValue("id"), ""
	if err := s.ask(r, func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		if st.RunActive {
			active = st.Run.ID
		}
	}); err != nil {
		return err
	}
	if id != active {
		return &problem{http.StatusConflict, fmt.Sprintf("run %q is not on: marks can be set on the run that is", id)}
	}
	return s.act(w, r, pipeline.Action{Do: pipeline.DoMark})
}

// act completes an action from the body, does it, and says what became of it.
func (s *Server) act(w http.ResponseWriter, r *http.Request, a pipeline.Action) error {
	if err := sameSite(r); err != nil {
		return err
	}
	var in actionBody
	if err := body(w, r, &in); err != nil {
		return err
	}
	switch {
	case a.Do != "":
	case in.Action == "start":
		a.Do = pipeline.DoRunStart
	case in.Action == "end":
		a.Do = pipeline.DoRunEnd
	default:
		return badRequest(`action %q: give "start" or "end"`, in.Action)
	}
	if a.Do == pipeline.DoMark && strings.TrimSpace(in.Text) == "" {
		return badRequest("a mark needs a text")
	}
	if in.RequestID == "" {
		return badRequest("request_id is missing: give each request an id of its own, so that a repeated one is done once")
	}
	if in.By == "" {
		in.By = "console"
	}
	a.Revision, a.Reason, a.Text, a.By, a.RequestID, a.Seconds = in.Revision, in.Reason, in.Text, in.By, in.RequestID, in.Seconds
	a.Role = "operator"
	res, err := s.cfg.Desk.Act(r.Context(), a)
	if err != nil {
		return err
	}
	switch {
	case res.Err == nil:
	case errors.Is(res.Err, rules.ErrNotFound):
		return notFound("%v", res.Err)
	default:
		return &problem{http.StatusConflict, res.Err.Error()}
	}
	return reply(w, http.StatusAccepted, map[string]uint64{"epoch": res.Epoch, "n": res.N})
}

func (s *Server) healthz(w http.ResponseWriter, r *http.Request) error {
	ctx, cancel := context.WithTimeout(r.Context(), 2*time.Second)
	defer cancel()
	var st pipeline.Status
	if err := s.ask(r.WithContext(ctx), func(_ *pipeline.Config, m *pipeline.Machine, state *pipeline.State) {
		st = m.Status(state)
	}); err != nil {
		return &problem{http.StatusServiceUnavailable, "the watch does not step: " + err.Error()}
	}
	status := http.StatusOK
	if st.Health.NotRecordingSince != 0 || st.Health.InputPathDeaf {
		status = http.StatusServiceUnavailable
	}
	return reply(w, status, map[string]bool{
		"stepping": true, "recording": st.Health.NotRecordingSince == 0, "input_path": !st.Health.InputPathDeaf,
	})
}
