package dashboard_test

import (
	"bytes"
	"fmt"
	"log/slog"
	"maps"
	"net/http"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"golang.org/x/crypto/bcrypt"

	"throatwatch/dashboard"
	"throatwatch/dashboard/access"
)

const secret = "nine grey herons stand"

// logged is a log that may be read while it is written.
type logged struct {
	mu sync.Mutex // protects b
	b  bytes.Buffer
}

func (l *logged) Write(p []byte) (int, error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.Write(p)
}

func (l *logged) String() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.String()
}

// guarded is a desk with users.
type guarded struct {
	*desk
	users *access.Users
	gate  *access.Gate
	token string // of a machine that may read
	audit *logged
}

func newGuarded(t *testing.T) *guarded {
	t.Helper()
	g := &guarded{desk: makeDesk(), users: &access.Users{Cost: bcrypt.MinCost}, audit: &logged{}}
	for name, role := range map[string]access.Role{"Vera Lindqvist": access.Viewer, "Mo Oduya": access.Operator, "Edda Marsh": access.Engineer} {
		if err := g.users.Add(name, role, secret); err != nil {
			t.Fatal(err)
		}
	}
	var err error
	if g.token, err = g.users.AddMachine("collector", access.Viewer); err != nil {
		t.Fatal(err)
	}
	g.gate = access.NewGate(g.users)
	g.cfg = dashboard.Config{Access: g.gate, Audit: slog.New(slog.NewTextHandler(g.audit, nil))}
	g.begin()
	g.serve(g.desk)
	t.Cleanup(g.close)
	return g
}

// person is who signed in: the headers of their browser.
type person struct {
	csrf   string
	cookie *http.Cookie
}

func (p person) headers() http.Header {
	return http.Header{"Cookie": {p.cookie.Name + "=" + p.cookie.Value}, "X-Csrf-Token": {p.csrf}}
}

func (g *guarded) signIn(t *testing.T, name string) person {
	t.Helper()
	a := g.call(t, post, "/api/session", fmt.Sprintf(`{"name":%q,"password":%q}`, name, secret))
	if a.status != http.StatusOK {
		t.Fatalf("signing in: %d %s", a.status, a.body)
	}
	cookies := (&http.Response{Header: a.header}).Cookies()
	if len(cookies) != 1 {
		t.Fatalf("cookies %v", cookies)
	}
	return person{into[struct{ CSRF string }](t, a).CSRF, cookies[0]}
}

// Without a users file the person at the console says who they are, and has the role
// of an operator.
func TestOpenSession(t *testing.T) {
	for _, role := range []access.Role{access.Nobody, access.Operator, access.Engineer} {
		d := makeDesk()
		d.cfg.OpenRole = role
		d.begin()
		d.serve(d)
		t.Cleanup(d.close)
		name := "operator"
		if role == access.Engineer {
			name = "engineer"
		}
		if a := d.get(t, "/api/session"); string(a.body) != fmt.Sprintf(`{"name":%q,"role":%q,"open":true}`, name, name) {
			t.Errorf("%v: %s", role, a.body)
		}
		checkStatus(t, "sign in", d.call(t, post, "/api/session", `{"name":"a","password":"b"}`), http.StatusConflict, "--users")
		checkStatus(t, "sign out", d.call(t, http.MethodDelete, "/api/session", ""), http.StatusConflict, "--users")
		want, detail := http.StatusForbidden, "--open-role engineer"
		if role == access.Engineer {
			want, detail = http.StatusNotFound, "no such alarm"
		}
		body := `{"revision":1,"request_id":"r","reason":"x","by":"M. Oduya"}`
		checkStatus(t, "out of service", d.call(t, post, alarmPath("nothing", "out-of-service"), body), want, detail)
		checkStatus(t, "acknowledge", d.call(t, post, alarmPath("nothing", "acknowledge"), body), http.StatusNotFound, "no such alarm")
	}
}

// The cookie is for this server only and no script sees it; the session says who it
// is, and ends.
func TestSignInAndOut(t *testing.T) {
	g := newGuarded(t)
	checkStatus(t, "before", g.get(t, "/api/session"), http.StatusUnauthorized, "signed in")
	p := g.signIn(t, "edda marsh")
	c := p.cookie
	if !c.HttpOnly || c.SameSite != http.SameSiteStrictMode || c.Secure || c.Domain != "" || c.Path != "/" || c.MaxAge != 0 || len(c.Value) < 43 {
		t.Errorf("cookie %v", c)
	}
	if port := g.http.URL[strings.LastIndex(g.http.URL, ":")+1:]; c.Name != "throatwatch-"+port {
		t.Errorf("the cookie %s is not of the port %s: another watch on this machine would take it", c.Name, port)
	}
	a := g.raw(t, http.MethodGet, "/api/session", "", p.headers())
	if who := checkJSON(t, "SessionOf", a.body); who["name"] != "Edda Marsh" || who["role"] != "engineer" || who["csrf"] != p.csrf || who["open"] != nil {
		t.Errorf("session %s", a.body)
	}
	if a := g.raw(t, http.MethodDelete, "/api/session", "", http.Header{"Cookie": p.headers()["Cookie"]}); a.status != http.StatusForbidden {
		t.Errorf("signing out without X-Csrf-Token: %d", a.status)
	}
	a = g.raw(t, http.MethodDelete, "/api/session", "", p.headers())
	if gone := (&http.Response{Header: a.header}).Cookies(); a.status != http.StatusNoContent || len(gone) != 1 || gone[0].MaxAge >= 0 || gone[0].Value != "" {
		t.Errorf("signing out: %d, %v", a.status, gone)
	}
	checkStatus(t, "after", g.raw(t, http.MethodGet, "/api/session", "", p.headers()), http.StatusUnauthorized, "signed in")
	checkStatus(t, "again", g.raw(t, http.MethodDelete, "/api/session", "", p.headers()), http.StatusUnauthorized, "signed in")

	first := g.signIn(t, "Mo Oduya")
	if a := g.raw(t, post, "/api/session", fmt.Sprintf(`{"name":"Vera Lindqvist","password":%q}`, secret), http.Header{"Cookie": first.headers()["Cookie"]}); a.status != http.StatusOK {
		t.Fatalf("%d %s", a.status, a.body)
	}
	checkStatus(t, "the one before in the same browser", g.raw(t, http.MethodGet, "/api/session", "", first.headers()), http.StatusUnauthorized, "")
}

// Over TLS the cookie travels over TLS only, and is bound to the host by its name.
func TestSecureCookie(t *testing.T) {
	g := newGuarded(t)
	g.close()
	g.cfg.Secure = true
	g.hub = dashboard.NewHub(build)
	g.serve(g.desk)
	if c := g.signIn(t, "Mo Oduya").cookie; !c.Secure || !strings.HasPrefix(c.Name, "__Host-throatwatch-") {
		t.Errorf("cookie %v", c)
	}
}

// TestRoles asks for everything as everybody. What is not in the table for an
// operator is for an engineer.
func TestRoles(t *testing.T) {
	g := newGuarded(t)
	bearer := http.Header{"Authorization": {"Bearer " + g.token}}
	callers := []struct {
		name   string
		role   access.Role
		header http.Header
	}{
		{"nobody", access.Nobody, nil},
		{"a wrong token", access.Nobody, http.Header{"Authorization": {"Bearer throatwatch-AAAA"}}},
		{"a wrong cookie", access.Nobody, http.Header{"Cookie": {g.signIn(t, "Edda Marsh").cookie.Name + "=AAAA"}}},
		{"a machine", access.Viewer, bearer},
		{"a viewer", access.Viewer, g.signIn(t, "Vera Lindqvist").headers()},
		{"an operator", access.Operator, g.signIn(t, "Mo Oduya").headers()},
		{"an engineer", access.Engineer, g.signIn(t, "Edda Marsh").headers()},
	}
	operator := []string{
		"POST /api/alarms/x/acknowledge", "POST /api/alarms/x/shelve", "POST /api/alarms/x/unshelve", "POST /api/alarms/x/reset",
		"POST /api/rigs/cell_2/runs", "POST /api/rigs/cell_2/checks", "POST /api/runs/x/marks", "POST /api/runs/x/entries", "PATCH /api/runs/x",
		"POST /api/rigs/cell_2/card/take", "POST /api/rigs/cell_2/card/skip", "POST /api/rigs/cell_2/card/go-to",
	}
	engineer := []string{
		"POST /api/alarms/x/out-of-service", "POST /api/alarms/x/in-service", "POST /api/alarms/x%2Fy/out-of-service",
		"POST /api/rigs/cell_2/card", "POST /api/rigs/cell_2/card/accept", "POST /api/rigs/cell_2/card/reject",
		"POST /api/rigs/cell_2/swap", "POST /api/rigs/cell_2/readmit", "POST /api/rigs/cell_2/config", "DELETE /api/runs/x",
	}
	free := []string{"GET /", "GET /healthz"}
	asked := slices.Concat(free, operator, engineer)
	for _, p := range dashboard.NewServer(dashboard.Config{}, dashboard.NewHub("")).Patterns() {
		if method, path, _ := strings.Cut(p, " "); method == http.MethodGet && path != "/healthz" && path != "/api/session" {
			asked = append(asked, "GET "+strings.NewReplacer("{rig}", rigID, "{id}", "x").Replace(path))
		}
	}
	for _, request := range asked {
		method, path, _ := strings.Cut(request, " ")
		need := access.Viewer
		switch {
		case slices.Contains(free, request):
			need = access.Nobody
		case slices.Contains(operator, request):
			need = access.Operator
		case slices.Contains(engineer, request):
			need = access.Engineer
		}
		for _, c := range callers {
			a := g.raw(t, method, path, "", c.header)
			switch {
			case c.role >= need && (a.status == http.StatusUnauthorized || a.status == http.StatusForbidden):
				t.Errorf("%s is refused to %s: %d %s", request, c.name, a.status, a.body)
			case c.role < need && c.role == access.Nobody && (a.status != http.StatusUnauthorized || a.header.Get("WWW-Authenticate") == ""):
				t.Errorf("%s as %s: %d, want 401 with a challenge [RFC 9110 15.5.2]", request, c.name, a.status)
			case c.role < need && c.role != access.Nobody && (a.status != http.StatusForbidden || !strings.Contains(string(a.body), need.String())):
				t.Errorf("%s as %s: %d %s, want 403 that names %s", request, c.name, a.status, a.body, need)
			}
		}
	}
	for _, p := range dashboard.NewServer(dashboard.Config{}, dashboard.NewHub("")).Patterns() {
		method, path, _ := strings.Cut(p, " ")
		path = strings.NewReplacer("{rig}", rigID, "{id}", "x", "card/{action}", "card/take", "{action}", "acknowledge").Replace(path)
		if method == http.MethodGet || path == "/api/session" {
			continue
		}
		if a := g.raw(t, method, path, "", bearer); a.status != http.StatusForbidden {
			t.Errorf("a viewer may %s: %d", p, a.status)
		}
		if request := method + " " + path; !slices.Contains(operator, request) && !slices.Contains(engineer, request) {
			t.Errorf("%s changes something: say here who may", p)
		}
	}
}

// What changes something needs the header that a page of another site cannot know.
func TestCSRF(t *testing.T) {
	g := newGuarded(t)
	p := g.signIn(t, "Mo Oduya")
	other := g.signIn(t, "Edda Marsh")
	for _, token := range []string{"", "x", other.csrf, p.cookie.Value} {
		h := p.headers()
		h.Set("X-Csrf-Token", token)
		checkStatus(t, fmt.Sprintf("token %q", token), g.raw(t, post, "/api/runs/x/marks", `{"text":"a"}`, h), http.StatusForbidden, "X-Csrf-Token")
	}
	checkStatus(t, "with it", g.raw(t, post, "/api/runs/x/marks", `{"text":"a"}`, p.headers()), http.StatusConflict, "not on")
	h := p.headers()
	h.Set("Origin", "http://elsewhere.example")
	checkStatus(t, "from another site", g.raw(t, post, "/api/runs/x/marks", `{"text":"a"}`, h), http.StatusForbidden, "another site")
	a := g.raw(t, post, "/api/session", fmt.Sprintf(`{"name":"Mo Oduya","password":%q}`, secret), http.Header{"Origin": {"http://elsewhere.example"}})
	checkStatus(t, "signing in from another site", a, http.StatusForbidden, "another site")
}

// Who did something is who signed in, whatever the body says.
func TestActorIsWhoSignedIn(t *testing.T) {
	g := newGuarded(t)
	g.send(play(start, engineTest(), 14*time.Second, nil))
	a, ok := g.alarm("unchoke")
	if !ok {
		t.Fatal("no alarm")
	}
	p := g.signIn(t, "Mo Oduya")
	body := func(by string) string {
		return fmt.Sprintf(`{"revision":%d,"request_id":"r","by":%q}`, a.Revision, by)
	}
	checkStatus(t, "as somebody else", g.raw(t, post, alarmPath(a.ID, "acknowledge"), body("Edda Marsh"), p.headers()), http.StatusForbidden, "Edda Marsh")
	checkStatus(t, "as he is", g.raw(t, post, alarmPath(a.ID, "acknowledge"), body(""), p.headers()), http.StatusAccepted, "")
	if now, _ := g.alarm("unchoke"); now.AcknowledgedBy != "Mo Oduya" {
		t.Errorf("acknowledged by %q", now.AcknowledgedBy)
	}
}

// A websocket needs somebody who may read, and ends with their session.
func TestLiveNeedsSession(t *testing.T) {
	g := newGuarded(t)
	checkRefused(t, g.desk, "", nil, http.StatusUnauthorized)
	p := g.signIn(t, "Vera Lindqvist")
	h := http.Header{"Cookie": p.headers()["Cookie"]}
	refused := maps.Clone(h)
	refused.Set("Origin", "http://elsewhere.example")
	checkRefused(t, g.desk, "", refused, http.StatusForbidden)
	v, err := g.dial(t.Context(), "", h)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(v.close)
	go v.read()
	machine, err := g.dial(t.Context(), "", http.Header{"Authorization": {"Bearer " + g.token}})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(machine.close)
	go machine.read()
	if a := g.raw(t, http.MethodDelete, "/api/session", "", p.headers()); a.status != http.StatusNoContent {
		t.Fatalf("%d %s", a.status, a.body)
	}
	if _, code, _ := v.ended(t); code != dashboard.CloseSignedOut {
		t.Errorf("closed with %d", code)
	}
	text, err := g.users.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	fewer, err := access.Parse(text)
	if err != nil {
		t.Fatal(err)
	}
	if err := fewer.Remove("collector"); err != nil {
		t.Fatal(err)
	}
	g.gate.Use(fewer)
	if _, code, _ := machine.ended(t); code != dashboard.CloseSignedOut {
		t.Errorf("the machine's is closed with %d", code)
	}
}

// Tries are answered with the time to wait. The log says who came and went and from
// where, and shows no secret: not even a password in the field of the name.
func TestThrottledSignInAndAudit(t *testing.T) {
	g := newGuarded(t)
	p := g.signIn(t, "Mo Oduya")
	const typo = "correct horse in the name field"
	g.call(t, post, "/api/session", fmt.Sprintf(`{"name":%q,"password":"x"}`, typo))
	for range 5 {
		checkStatus(t, "wrong", g.call(t, post, "/api/session", `{"name":"Vera Lindqvist","password":"a wrong password"}`), http.StatusUnauthorized, "wrong")
	}
	a := g.call(t, post, "/api/session", fmt.Sprintf(`{"name":"Vera Lindqvist","password":%q}`, secret))
	if a.status != http.StatusTooManyRequests || a.header.Get("Retry-After") == "" {
		t.Errorf("the sixth try: %d %v", a.status, a.header)
	}
	if a := g.raw(t, http.MethodDelete, "/api/session", "", p.headers()); a.status != http.StatusNoContent {
		t.Fatalf("%d %s", a.status, a.body)
	}
	log := g.audit.String()
	for _, want := range []string{`"signed in" name="Mo Oduya" role=operator from=127.0.0.1`, `"sign-in refused" name="Vera Lindqvist"`, `"sign-in refused" name=unknown`, `"signed out" name="Mo Oduya"`} {
		if !strings.Contains(log, want) {
			t.Errorf("the log lacks %s:\n%s", want, log)
		}
	}
	metrics := string(g.raw(t, http.MethodGet, "/metrics", "", http.Header{"Authorization": {"Bearer " + g.token}}).body)
	for _, hidden := range []string{secret, "a wrong password", typo, p.cookie.Value, p.csrf, g.token, "$2a$"} {
		if strings.Contains(log, hidden) || strings.Contains(metrics, hidden) {
			t.Errorf("the log or /metrics shows %q", hidden)
		}
	}
	if !strings.Contains(metrics, "throatwatch_viewers") {
		t.Errorf("/metrics: %.200s", metrics)
	}
}

// A watch that listens on loopback answers to loopback names only: a page of a site
// whose name is pointed here after it was loaded has this server's origin otherwise.
func TestHostMustBeLocal(t *testing.T) {
	d := makeDesk()
	d.cfg.Local = true
	d.begin()
	d.serve(d)
	t.Cleanup(d.close)
	_, port, _ := strings.Cut(strings.TrimPrefix(d.http.URL, "http://"), ":")
	for host, want := range map[string]int{
		"127.0.0.1:" + port: http.StatusOK, "localhost:" + port: http.StatusOK, "LOCALHOST": http.StatusOK, "[::1]:" + port: http.StatusOK, "127.0.0.53": http.StatusOK,
		"elsewhere.example:" + port: http.StatusMisdirectedRequest, "localhost.elsewhere.example": http.StatusMisdirectedRequest,
		"192.0.2.7:" + port: http.StatusMisdirectedRequest, "127.0.0.1.elsewhere.example": http.StatusMisdirectedRequest,
	} {
		r, err := http.NewRequestWithContext(t.Context(), http.MethodGet, d.http.URL+"/api/session", http.NoBody)
		if err != nil {
			t.Fatal(err)
		}
		r.Host = host
		res, err := d.http.Client().Do(r)
		if err != nil {
			t.Fatal(err)
		}
		if _ = res.Body.Close(); res.StatusCode != want {
			t.Errorf("%s: %d, want %d", host, res.StatusCode, want)
		}
	}
}
