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
	"slices"
	"strings"
	"time"

	"throatwatch/dashboard/access"
	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/card"
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
	List(ctx context.Context, filter runfile.Filter) ([]runfile.Run, error)
	// Open opens a run for reading; runfile.ErrNotRunFile or fs.ErrNotExist when
	// there is none. The caller closes it.
	Open(ctx context.Context, id string) (*runfile.File, error)
	// Annotate changes keep, tags and notes of a run; runfile.ErrUnknownRun.
	Annotate(ctx context.Context, id string, edit func(*runfile.Header)) (runfile.Run, error)
	// Remove deletes a run: runfile.ErrUnknownRun, runfile.ErrKept, ErrRunning.
	Remove(ctx context.Context, id, by, why string) error
}

// ErrRunning is returned for what cannot be done to a run that is being recorded.
var ErrRunning = errors.New("the run is being recorded: wait for its end")

// Config sets a server up.
type Config struct {
	Desk  Desk
	Runs  Runs
	Parse func(bundle []byte) (pipeline.Config, error) // for stored runs
	Build string
	Log   *slog.Logger
	// Follows names what is set up to follow the record: "database", "webhook".
	Follows []string
	// Reload takes the rig and rule files as they are now into force, for who a says.
	// It gives what is wrong with them; nil = the files cannot be read here.
	Reload func(ctx context.Context, a pipeline.Action) (pipeline.Reply, []Fault, error)
	// ParseCard reads the text of a test card for a rig. It gives its hash, and what is
	// wrong with it; nil = none can be loaded here.
	ParseCard func(text string, cfg *pipeline.Config) (c card.Card, hash string, faults []Fault)
	// CheckSwap gives what is wrong with the calibration of a new sensor, as text of a rig
	// file, where bundle is in force; nil = nobody looks at it.
	CheckSwap func(bundle []byte, channel, serial, calibration string) []Fault
	Extra     func() []Metric // further metrics, of parts that the server does not know
	Free      func() float64  // bytes on the disk of the data folder, 0 = not known; nil = the same

	Access   *access.Gate // who may come in; nil: nobody is asked who they are
	OpenRole access.Role  // of everybody where Access is nil; the zero value is Operator
	Secure   bool         // served over TLS: cookies are for TLS only
	Local    bool         // requests must name this machine by a loopback address
	Audit    *slog.Logger // who signs in and out
}

// Server answers HTTP. It is an http.Handler.
type Server struct {
	cfg Config
	hub *Hub
	mux *http.ServeMux

	exporting chan struct{} // a slot per export or report under way
}

// handler answers a request, or gives the error to answer it with.
type handler func(http.ResponseWriter, *http.Request) error

// NewServer gives a server; hub is fed by whoever runs the watch.
func NewServer(cfg Config, hub *Hub) *Server {
	s := &Server{cfg: cfg, hub: hub, mux: http.NewServeMux(), exporting: make(chan struct{}, exports)}
	methods := map[string][]string{} // by path
	for pattern, h := range s.routes() {
		s.handle(pattern, h)
		method, path, _ := strings.Cut(pattern, " ")
		methods[path] = append(methods[path], method)
	}
	delete(methods, "/api/runs/compare") // other methods are those of a run of that name
	for path, allowed := range methods {
		s.handle(path, notAllowed(allowed))
	}
	s.handle("/api/", func(http.ResponseWriter, *http.Request) error {
		return notFound("nothing is served here; GET /openapi.json tells what is")
	})
	s.handle("/", s.page())
	return s
}

// routes gives what is answered beside the page, by pattern of the mux.
func (s *Server) routes() map[string]handler {
	return map[string]handler{
		"GET /api/rigs":                       s.rigs,
		"GET /api/rigs/{rig}/hello":           s.hello,
		"GET /api/rigs/{rig}/operating-point": s.newest("operating_point"),
		"GET /api/rigs/{rig}/channels":        s.newest("channels"),
		"GET /api/rigs/{rig}/throat-curve":    s.throatCurve,
		"GET /api/rigs/{rig}/budget":          s.budget,
		"GET /api/rigs/{rig}/card":            s.card,
		"POST /api/rigs/{rig}/card":           s.loadCard,
		"POST /api/rigs/{rig}/card/{action}":  s.cardAction,
		"GET /api/rigs/{rig}/handover":        s.handover,
		"GET /api/runs/{id}/card":             s.runCard,
		"POST /api/rigs/{rig}/runs":           s.startOrEndRun,
		"POST /api/rigs/{rig}/readmit":        s.readmit,
		"GET /api/alarms/figures":             s.alarmFigures,
		"GET /api/runs/{id}/alarm-figures":    s.runFigures,
		"POST /api/rigs/{rig}/config":         s.reload,
		"GET /api/alarms":                     s.alarms,
		"POST /api/alarms/{id}/{action}":      s.alarmAction,
		"GET /api/runs":                       s.runs,
		"GET /api/runs/{id}":                  s.run,
		"PATCH /api/runs/{id}":                s.annotate,
		"DELETE /api/runs/{id}":               s.remove,
		"GET /api/runs/{id}/messages":         s.messages,
		"GET /api/runs/{id}/series":           s.series,
		"GET /api/runs/{id}/export":           s.export,
		"GET /api/runs/{id}/points":           s.testPoints,
		"GET /api/runs/compare":               s.compare,
		"GET /api/runs/{id}/report":           s.report,
		"POST /api/runs/{id}/marks":           s.mark,
		"POST /api/runs/{id}/entries":         s.entry,
		"GET /api/runs/{id}/log":              s.operatorLog,
		"POST /api/rigs/{rig}/swap":           s.swap,
		"GET /api/rigs/{rig}/checks":          s.checks,
		"POST /api/rigs/{rig}/checks":         s.check,
		"GET /api/runs/{id}/checks":           s.runChecks,
		"GET /api/session":                    s.session,
		"POST /api/session":                   s.signIn,
		"DELETE /api/session":                 s.signOut,
		"GET /api/runs/{id}/exceedances":      s.exceedances,
		"GET /api/engines/{serial}/life":      s.life,
		"GET /api/nozzles/{serial}/life":      s.nozzleLife,
		"GET /healthz":                        s.healthz,
		"GET /metrics":                        s.metrics,
		"GET /openapi.json":                   s.openAPI,
		"GET /live":                           s.live,
	}
}

func (s *Server) handle(pattern string, h handler) {
	s.mux.HandleFunc(pattern, func(w http.ResponseWriter, r *http.Request) {
		if err := h(w, r); err != nil {
			s.fail(w, r, err)
		}
	})
}

// notAllowed refuses every other method of a path.
func notAllowed(allowed []string) handler {
	list := strings.Join(slices.Sorted(slices.Values(allowed)), ", ")
	return func(w http.ResponseWriter, r *http.Request) error {
		w.Header().Set("Allow", list)
		return &problem{http.StatusMethodNotAllowed, fmt.Sprintf("%s is not served here: use %s", r.Method, list)}
	}
}

// headers go with every answer: the page loads from this server only, runs no
// script or style that stands in a document, is shown in no frame, and says nothing
// to other sites.
var headers = map[string]string{
	"Content-Security-Policy": "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data:; font-src 'self'; connect-src 'self'; " +
		"form-action 'self'; frame-ancestors 'none'; base-uri 'none'",
	"X-Content-Type-Options":       "nosniff",
	"X-Frame-Options":              "DENY",
	"Referrer-Policy":              "no-referrer",
	"Cross-Origin-Opener-Policy":   "same-origin",
	"Cross-Origin-Resource-Policy": "same-origin",
	"Permissions-Policy":           "camera=(), microphone=(), geolocation=()",
}

// ServeHTTP answers a request.
func (s *Server) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	for name, value := range headers {
		w.Header().Set(name, value)
	}
	r, err := s.admit(r)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	s.mux.ServeHTTP(w, r)
}

// problem is an error with the status it is told by [RFC 9457].
type problem struct {
	status int
	detail string
}

// Fault is one thing that is wrong with a rig or rule file.
type Fault struct {
	At      string `json:"at"` // file:line:column
	Message string `json:"message"`
	Hint    string `json:"hint"` // what to do
}

// faulty is the problem of files that cannot come into force.
type faulty struct {
	problem
	faults []Fault
}

func (p *problem) Error() string { return p.detail }

func badRequest(format string, args ...any) error {
	return &problem{http.StatusBadRequest, fmt.Sprintf(format, args...)}
}

func notFound(format string, args ...any) error {
	return &problem{http.StatusNotFound, fmt.Sprintf(format, args...)}
}

// silent is the problem of a desk that does not answer.
func silent(err error) error {
	return &problem{http.StatusServiceUnavailable, "the watch does not answer: " + err.Error()}
}

// problemJSON is what a problem looks like [RFC 9457 3.1].
type problemJSON struct {
	Type     string `json:"type"`
	Title    string `json:"title"`
	Status   int    `json:"status"`
	Detail   string `json:"detail"`
	Instance string `json:"instance"`

	Faults []Fault `json:"faults,omitempty"` // of rig and rule files
}

// fail answers with an error as application/problem+json.
func (s *Server) fail(w http.ResponseWriter, r *http.Request, err error) {
	var p *problem
	var faults []Fault
	if f, ok := errors.AsType[*faulty](err); ok {
		p, faults = &f.problem, f.faults
	} else if !errors.As(err, &p) {
		if r.Context().Err() != nil {
			return // the client is gone
		}
		s.cfg.Log.Error("request", "path", r.URL.Path, "err", err)
		p = &problem{http.StatusInternalServerError, err.Error()}
	}
	b, err := json.Marshal(problemJSON{"about:blank", http.StatusText(p.status), p.status, p.detail, r.URL.EscapedPath(), faults})
	if err != nil {
		panic("dashboard: problem: " + err.Error()) // strings and a number encode
	}
	if p.status == http.StatusUnauthorized { // [RFC 9110 15.5.2]
		w.Header().Set("WWW-Authenticate", `Bearer realm="throatwatch"`)
	}
	w.Header().Set("Content-Type", "application/problem+json")
	w.WriteHeader(p.status)
	_, _ = w.Write(b) // whoever asked is gone, or not
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

// ask runs fn between two steps; rig, unless it is "", must be the rig that is
// watched.
func (s *Server) ask(ctx context.Context, rig string, fn func(cfg *pipeline.Config, m *pipeline.Machine, st *pipeline.State)) error {
	var wrong error
	err := s.cfg.Desk.Ask(ctx, func(m *pipeline.Machine, st *pipeline.State) {
		cfg, ok := m.Config()
		switch {
		case !ok:
			wrong = &problem{http.StatusServiceUnavailable, "no configuration is in force yet"}
		case rig != "" && cfg.Rig.ID != rig:
			wrong = notFound("no rig %q is watched here; GET /api/rigs lists them", rig)
		default:
			fn(&cfg, m, st)
		}
	})
	if err != nil {
		return silent(err)
	}
	return wrong
}

// rigJSON is a rig as it is watched here.
type rigJSON struct {
	pipeline.RigInfo

	Follows []string `json:"follows"`
}

func (s *Server) rigs(w http.ResponseWriter, r *http.Request) error {
	list := []rigJSON{}
	if err := s.ask(r.Context(), "", func(cfg *pipeline.Config, _ *pipeline.Machine, _ *pipeline.State) {
		list = append(list, rigJSON{cfg.Rig, append([]string{}, s.cfg.Follows...)})
	}); err != nil {
		return err
	}
	return reply(w, http.StatusOK, list)
}

func (s *Server) hello(w http.ResponseWriter, r *http.Request) error {
	var b []byte
	if err := s.ask(r.Context(), r.PathValue("rig"), func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		b = s.hub.hello(m, st)
	}); err != nil {
		return err
	}
	return replyJSON(w, http.StatusOK, b)
}

// newest answers with the newest frame of a kind.
func (s *Server) newest(kind string) handler {
	return func(w http.ResponseWriter, r *http.Request) error {
		var body []byte
		if err := s.ask(r.Context(), r.PathValue("rig"), func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {
			body = s.hub.last(kind)
		}); err != nil {
			return err
		}
		if body == nil {
			return &problem{http.StatusServiceUnavailable, "no scan yet: no channel has sent anything since the watch began"}
		}
		return replyJSON(w, http.StatusOK, body)
	}
}

func (s *Server) alarms(w http.ResponseWriter, r *http.Request) error {
	list := []rules.Alarm{}
	if err := s.ask(r.Context(), "", func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		list = append(list, m.Alarms(st)...)
	}); err != nil {
		return err
	}
	return reply(w, http.StatusOK, list)
}

// healthJSON says which parts of the watch work.
type healthJSON struct {
	Stepping  bool `json:"stepping"`
	Recording bool `json:"recording"`
	InputPath bool `json:"input_path"`
	Refused   bool `json:"config_refused"` // the files are others than what is in force

	Reasons []string `json:"reasons"` // why one of them is not as it should be
}

func (s *Server) healthz(w http.ResponseWriter, r *http.Request) error {
	ctx, cancel := context.WithTimeout(r.Context(), 2*time.Second)
	defer cancel()
	out := healthJSON{Stepping: true, Reasons: []string{}}
	if err := s.ask(ctx, "", func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		out.Recording, out.InputPath = st.Health.NotRecordingSince == 0, !st.Health.InputPathDeaf
		out.Refused = st.InForce.Refused.T != 0
	}); err != nil {
		return err
	}
	status := http.StatusOK
	if !out.Recording {
		out.Reasons = append(out.Reasons, "records are not stored")
	}
	if !out.InputPath {
		out.Reasons = append(out.Reasons, "the sessions at the broker do not hear what is published")
	}
	if len(out.Reasons) > 0 {
		status = http.StatusServiceUnavailable
	}
	if out.Refused {
		out.Reasons = append(out.Reasons, "the rig and rule files were refused: what was in force before stays")
	}
	return reply(w, status, out)
}
