package dashboard

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"net"
	"net/http"
	"slices"
	"strconv"
	"strings"
	"time"

	"throatwatch/dashboard/access"
)

// csrfHeader carries what a page of another site cannot know.
const csrfHeader = "X-Csrf-Token"

// free lists what is answered to everybody: the page, which must be there to sign
// in, and whether the watch works.
var free = []string{"/", "GET /healthz", "GET /api/session", "POST /api/session", "DELETE /api/session"}

// forOperator lists what changes something and an operator may. Everything else that
// changes something is for an engineer.
var forOperator = []string{
	"POST /api/alarms/{id}/{action}", "POST /api/rigs/{rig}/runs", "POST /api/runs/{id}/marks", "POST /api/runs/{id}/entries", "PATCH /api/runs/{id}",
	"POST /api/rigs/{rig}/checks",
	"POST /api/rigs/{rig}/card/{action}",
}

// caller is who makes a request.
type caller struct {
	access.Who
	open    bool            // nobody is asked who they are
	session *access.Session // of a person
	still   func() bool     // tells that they may go on; it counts as use of the session
}

// callerKey is the key of the caller in the context of a request.
type callerKey struct{}

// callerOf gives who makes a request.
func callerOf(r *http.Request) *caller {
	c, ok := r.Context().Value(callerKey{}).(*caller)
	if !ok {
		panic("dashboard: a request that was not admitted")
	}
	return c
}

// admit finds out who makes a request and refuses what they may not.
func (s *Server) admit(r *http.Request) (*http.Request, error) {
	if s.cfg.Local && !local(r.Host) {
		return r, &problem{
			http.StatusMisdirectedRequest,
			fmt.Sprintf("host %q is not this machine's own: use 127.0.0.1 or localhost, or start the watch with --users or --allow-remote", r.Host),
		}
	}
	c := s.identify(r)
	r = r.WithContext(context.WithValue(r.Context(), callerKey{}, c))
	_, pattern := s.mux.Handler(r)
	need := needed(pattern, r)
	changes := r.Method != http.MethodGet && r.Method != http.MethodHead
	switch {
	case changes && c.session != nil && pattern != "POST /api/session" && !access.SameText(r.Header.Get(csrfHeader), c.session.CSRF):
		return r, &problem{http.StatusForbidden, csrfHeader + " is missing or wrong: GET /api/session gives it"}
	case c.Role >= need, c.open && pattern == "POST /api/rigs/{rig}/config": // the files are on this machine: who can change them may
		return r, nil
	case c.Role == access.Nobody:
		return r, &problem{http.StatusUnauthorized, "sign in first: POST /api/session, or send a machine's token as Authorization: Bearer"}
	case c.open:
		return r, &problem{http.StatusForbidden, fmt.Sprintf("this is for the role %s: start the watch with --users, or with --open-role %s", need, need)}
	}
	return r, &problem{http.StatusForbidden, fmt.Sprintf("this is for the role %s; %s has the role %s", need, c.Name, c.Role)}
}

// needed gives the least role for a request.
func needed(pattern string, r *http.Request) access.Role {
	_, action, _ := strings.Cut(r.URL.Path, "/api/alarms/")
	switch {
	case slices.Contains(free, pattern):
		return access.Nobody
	case r.Method == http.MethodGet || r.Method == http.MethodHead || !strings.Contains(pattern, " "): // the last is told what is served
		return access.Viewer
	case !slices.Contains(forOperator, pattern), strings.HasSuffix(action, "/out-of-service"), strings.HasSuffix(action, "/in-service"),
		strings.HasSuffix(r.URL.Path, "/card/accept"), strings.HasSuffix(r.URL.Path, "/card/reject"):
		return access.Engineer
	}
	return access.Operator
}

// identify finds who makes a request: by a machine's token, by the cookie of a
// session, or nobody.
func (s *Server) identify(r *http.Request) *caller {
	gate := s.cfg.Access
	if gate == nil {
		return &caller{Who: access.Who{Name: "console", Role: cmp.Or(s.cfg.OpenRole, access.Operator)}, open: true, still: func() bool { return true }}
	}
	if token, ok := strings.CutPrefix(r.Header.Get("Authorization"), "Bearer "); ok {
		who, ok := gate.Machine(token)
		if !ok {
			return &caller{}
		}
		return &caller{Who: who, still: func() bool {
			now, ok := gate.Machine(token)
			return ok && now == who
		}}
	}
	cookie, err := r.Cookie(s.cookieName(r))
	if err != nil {
		return &caller{}
	}
	session, ok := gate.Session(cookie.Value, time.Now())
	if !ok {
		return &caller{}
	}
	return &caller{Who: session.Who, session: &session, still: func() bool {
		_, ok := gate.Session(session.ID, time.Now())
		return ok
	}}
}

// actor gives who does something, as the record of it says. by is what the body
// says: it counts where nobody is asked who they are.
func (s *Server) actor(r *http.Request, by string) (access.Who, error) {
	c := callerOf(r)
	switch {
	case c.open:
		return access.Who{Name: cmp.Or(by, c.Name), Role: c.Role}, nil
	case by != "" && !strings.EqualFold(by, c.Name):
		return access.Who{}, &problem{http.StatusForbidden, fmt.Sprintf("by %q: the request comes from %q; leave by out", by, c.Name)}
	}
	return c.Who, nil
}

// local tells that a Host header names this machine by an address or name that no
// other site can have: a page of another site whose name was pointed here after it
// was loaded would be of one origin with this server otherwise.
func local(host string) bool {
	if name, _, err := net.SplitHostPort(host); err == nil {
		host = name
	}
	host = strings.Trim(host, "[]")
	ip := net.ParseIP(host)
	return strings.EqualFold(host, "localhost") || ip != nil && ip.IsLoopback()
}

// cookieName names the cookie by the port that was connected to: cookies do not know
// ports, and a machine may run a watch for each of its rigs.
func (s *Server) cookieName(r *http.Request) string {
	name := "throatwatch"
	if a, ok := r.Context().Value(http.LocalAddrContextKey).(*net.TCPAddr); ok {
		name += "-" + strconv.Itoa(a.Port)
	}
	if s.cfg.Secure {
		name = "__Host-" + name
	}
	return name
}

// cookie makes the cookie of a session; without an id it ends it.
func (s *Server) cookie(r *http.Request, id string) *http.Cookie {
	c := &http.Cookie{
		Name: s.cookieName(r), Value: id, Path: "/", HttpOnly: true, Secure: s.cfg.Secure, SameSite: http.SameSiteStrictMode,
	}
	if id == "" {
		c.MaxAge = -1
	}
	return c
}

// signInBody is the body that opens a session.
type signInBody struct {
	Name     string `json:"name"`
	Password string `json:"password"`
}

// sessionJSON says who makes the requests.
type sessionJSON struct {
	Name    string      `json:"name"`
	Role    access.Role `json:"role"`
	CSRF    string      `json:"csrf,omitempty"`    // for X-Csrf-Token
	Expires string      `json:"expires,omitempty"` // when it ends in any case
	Open    bool        `json:"open,omitempty"`    // nobody is asked who they are
}

func view(session *access.Session) sessionJSON {
	return sessionJSON{Name: session.Who.Name, Role: session.Who.Role, CSRF: session.CSRF, Expires: rfc3339(session.Ends.UnixNano())}
}

// session answers who the caller is.
func (s *Server) session(w http.ResponseWriter, r *http.Request) error {
	switch c := callerOf(r); {
	case c.session != nil:
		return reply(w, http.StatusOK, view(c.session))
	case c.open:
		return reply(w, http.StatusOK, sessionJSON{Name: c.Role.String(), Role: c.Role, Open: true})
	case c.Role > access.Nobody:
		return reply(w, http.StatusOK, sessionJSON{Name: c.Name, Role: c.Role})
	}
	return &problem{http.StatusUnauthorized, "nobody is signed in: POST /api/session with name and password"}
}

// errOpen is the problem of signing in where nobody has to.
func errOpen() error {
	return &problem{http.StatusConflict, "this watch was started without --users: nobody signs in"}
}

// signIn opens a session.
func (s *Server) signIn(w http.ResponseWriter, r *http.Request) error {
	var in signInBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	gate := s.cfg.Access
	if gate == nil {
		return errOpen()
	}
	from, _, err := net.SplitHostPort(r.RemoteAddr)
	if err != nil {
		from = r.RemoteAddr
	}
	session, err := gate.SignIn(r.Context(), in.Name, in.Password, from, time.Now())
	if err != nil {
		name := "unknown"
		if gate.Known(in.Name) {
			name = in.Name
		}
		s.audit("sign-in refused", "name", name, "from", from, "why", err)
		return s.refuse(w, err)
	}
	if c := callerOf(r); c.session != nil { // another one in the same browser
		gate.SignOut(c.session.ID)
	}
	s.audit("signed in", "name", session.Who.Name, "role", session.Who.Role.String(), "from", from)
	http.SetCookie(w, s.cookie(r, session.ID))
	return reply(w, http.StatusOK, view(&session))
}

// refuse makes the problem of a sign-in that was not taken.
func (s *Server) refuse(w http.ResponseWriter, err error) error {
	var throttled *access.ThrottledError
	switch {
	case errors.As(err, &throttled):
		w.Header().Set("Retry-After", strconv.Itoa(int(throttled.Wait/time.Second)+1))
		return &problem{http.StatusTooManyRequests, err.Error()}
	case errors.Is(err, access.ErrCredentials):
		return &problem{http.StatusUnauthorized, err.Error()}
	case errors.Is(err, access.ErrBusy):
		return &problem{http.StatusServiceUnavailable, err.Error()}
	}
	return err
}

// signOut ends the session of the caller.
func (s *Server) signOut(w http.ResponseWriter, r *http.Request) error {
	if err := sameSite(r); err != nil {
		return err
	}
	c := callerOf(r)
	switch {
	case c.open:
		return errOpen()
	case c.session == nil:
		return &problem{http.StatusUnauthorized, "nobody is signed in"}
	}
	s.cfg.Access.SignOut(c.session.ID)
	s.audit("signed out", "name", c.Name)
	http.SetCookie(w, s.cookie(r, ""))
	w.WriteHeader(http.StatusNoContent)
	return nil
}

// audit writes down who came and went.
func (s *Server) audit(what string, args ...any) {
	if s.cfg.Audit != nil {
		s.cfg.Audit.Info(what, args...)
	}
}
