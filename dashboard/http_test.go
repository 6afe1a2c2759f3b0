package dashboard_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math"
	"net/http"
	"net/url"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/prometheus/common/expfmt"
	"github.com/prometheus/common/model"

	"throatwatch/dashboard"
	"throatwatch/dashboard/access"
	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const (
	rigPath = "/api/rigs/" + rigID
	post    = http.MethodPost
)

// checkStatus checks a status, and what a problem says.
func checkStatus(t *testing.T, what string, a answer, status int, detail string) {
	t.Helper()
	if a.status != status || !strings.Contains(string(a.body), detail) {
		t.Errorf("%s: status %d, want %d with %q: %.300s", what, a.status, status, detail, a.body)
	}
}

func TestRigs(t *testing.T) {
	d := newDesk(t)
	list := into[[]struct {
		pipeline.RigInfo

		Follows []string `json:"follows"`
	}](t, d.get(t, "/api/rigs"))
	if want := rig("Alder Bank cell 2", "").Rig; len(list) != 1 || list[0].RigInfo != want || !slices.Equal(list[0].Follows, []string{"database"}) {
		t.Errorf("%+v", list)
	}
}

// The newest point and channels are the very frames of /live; before the first scan
// there are none.
func TestNewest(t *testing.T) {
	d := newDesk(t)
	for _, path := range []string{rigPath + "/operating-point", rigPath + "/channels"} {
		checkStatus(t, path, d.get(t, path), http.StatusServiceUnavailable, "no scan yet")
		checkStatus(t, path, d.get(t, strings.Replace(path, rigID, "cell_9", 1)), http.StatusNotFound, "cell_9")
	}
	d.send(play(start, engineTest(), 5*time.Second, nil))
	for path, kind := range map[string]string{rigPath + "/operating-point": "operating_point", rigPath + "/channels": "channels"} {
		all := behind(d.sent(), 0, func(f due) bool { return f.kind == kind })
		a := d.get(t, path)
		if a.status != http.StatusOK || !bytes.Equal(a.body, all[len(all)-1]) || a.header.Get("Cache-Control") != "no-store" {
			t.Errorf("%s: status %d: %.200s", path, a.status, a.body)
		}
	}
}

// Before a configuration is in force nothing is answered that rests on one.
func TestNoConfiguration(t *testing.T) {
	d := newBareDesk(t)
	for _, path := range []string{"/api/rigs", rigPath + "/hello", rigPath + "/operating-point", rigPath + "/throat-curve", "/api/alarms", "/healthz", "/metrics"} {
		checkStatus(t, path, d.get(t, path), http.StatusServiceUnavailable, "no configuration")
	}
	checkRefused(t, d, "", nil, http.StatusServiceUnavailable)
}

// stuck is a watch that does not step.
type stuck struct{}

func (stuck) Ask(ctx context.Context, _ func(*pipeline.Machine, *pipeline.State)) error {
	<-ctx.Done()
	return ctx.Err()
}

func (stuck) Act(context.Context, pipeline.Action) (pipeline.Reply, error) {
	return pipeline.Reply{}, errors.New("the watch has stopped")
}

// half is a watch that answers and does not act.
type half struct{ *desk }

func (half) Act(ctx context.Context, a pipeline.Action) (pipeline.Reply, error) {
	return stuck{}.Act(ctx, a)
}

func TestWatchDoesNotAnswer(t *testing.T) {
	t.Parallel()
	d := makeDesk()
	d.serve(stuck{})
	t.Cleanup(d.close)
	began := time.Now()
	checkStatus(t, "healthz", d.get(t, "/healthz"), http.StatusServiceUnavailable, "does not answer")
	if took := time.Since(began); took > 4*time.Second {
		t.Errorf("healthz took %v", took)
	}

	e := makeDesk()
	e.begin()
	e.serve(half{e})
	t.Cleanup(e.close)
	checkStatus(t, "act", e.call(t, post, rigPath+"/runs", `{"action":"end"}`), http.StatusServiceUnavailable, "has stopped")
}

func TestHealth(t *testing.T) {
	d := newDesk(t)
	for _, tt := range []struct {
		health string // record
		status int
		body   string
	}{
		{"", http.StatusOK, `{"stepping":true,"recording":true,"input_path":true,"config_refused":false,"reasons":[]}`},
		{`{"part":"input_path","ok":false}`, http.StatusServiceUnavailable, `{"stepping":true,"recording":true,"input_path":false,"config_refused":false,"reasons":["the sessions at the broker do not hear what is published"]}`},
		{`{"part":"recording","ok":false}`, http.StatusServiceUnavailable, `{"stepping":true,"recording":false,"input_path":false,"config_refused":false,"reasons":["records are not stored","the sessions at the broker do not hear what is published"]}`},
		{`{"part":"input_path","ok":true}`, http.StatusServiceUnavailable, `{"stepping":true,"recording":false,"input_path":true,"config_refused":false,"reasons":["records are not stored"]}`},
		{`{"part":"recording","ok":true}`, http.StatusOK, `{"stepping":true,"recording":true,"input_path":true,"config_refused":false,"reasons":[]}`},
	} {
		if tt.health != "" {
			d.take(ingest.KindHealth, tt.health, d.host())
		}
		if a := d.get(t, "/healthz"); a.status != tt.status || string(a.body) != tt.body {
			t.Errorf("after %s: %d %s", tt.health, a.status, a.body)
		}
	}
}

func TestAlarms(t *testing.T) {
	d := newDesk(t)
	if a := d.get(t, "/api/alarms"); string(a.body) != "[]" {
		t.Errorf("without an alarm: %s", a.body)
	}
	d.send(play(start, engineTest(), 18*time.Second, nil))
	list := into[[]rules.Alarm](t, d.get(t, "/api/alarms"))
	want, _ := d.alarm("unchoke")
	if i := slices.IndexFunc(list, func(a rules.Alarm) bool { return a.Rule == "unchoke" }); i < 0 || list[i] != want || len(list) < 2 {
		t.Errorf("%+v", list)
	}
}

// alarmPath is where an action on an alarm goes.
func alarmPath(id, action string) string { return "/api/alarms/" + url.PathEscape(id) + "/" + action }

// An alarm is acknowledged once, by its revision; a request that comes again is done
// once.
func TestAcknowledge(t *testing.T) {
	d := newDesk(t)
	d.send(play(start, engineTest(), 14*time.Second, nil))
	a, ok := d.alarm("unchoke")
	if !ok || a.State.String() != "unacknowledged" || !strings.Contains(a.ID, "/") {
		t.Fatalf("alarm %+v", a)
	}
	path := alarmPath(a.ID, "acknowledge")
	body := func(revision uint64, request string) string {
		return fmt.Sprintf(`{"revision":%d,"reason":"seen","request_id":%q,"by":"M. Oduya"}`, revision, request)
	}
	checkStatus(t, "another revision", d.call(t, post, path, body(a.Revision+1, "r0")), http.StatusConflict, "has changed")
	checkStatus(t, "an earlier occurrence", d.call(t, post, alarmPath("r/unchoke/1", "acknowledge"), body(a.Revision, "r0")), http.StatusConflict, "has changed")
	checkStatus(t, "no such alarm", d.call(t, post, alarmPath("r/nothing/1", "acknowledge"), body(1, "r0")), http.StatusNotFound, "no such alarm")
	checkStatus(t, "no request id", d.call(t, post, path, `{"revision":1}`), http.StatusBadRequest, "request_id")
	checkStatus(t, "no such action", d.call(t, post, alarmPath(a.ID, "silence"), body(1, "r0")), http.StatusNotFound, "silence")
	if now, _ := d.alarm("unchoke"); now != a {
		t.Errorf("what was refused has changed the alarm: %+v", now)
	}

	_, before := d.n()
	v := d.view(t, fmt.Sprintf("?from=3.%d", before))
	first := d.call(t, post, path, body(a.Revision, "r1"))
	checkStatus(t, "acknowledge", first, http.StatusAccepted, `"epoch":3`)
	place := into[struct{ N uint64 }](t, first)
	if _, n := d.n(); place.N <= before || place.N > n {
		t.Errorf("n is %d, the outcomes are %d to %d", place.N, before+1, n)
	}
	f := v.upto(t, before+1)[0]
	if got := checkJSON(t, "AlarmFrame", f); dig(got, "alarm.state") != "acknowledged" || dig(got, "alarm.acknowledged_by") != "M. Oduya" || dig(got, "alarm.revision") != float64(a.Revision+1) {
		t.Errorf("%s", f)
	}
	done, _ := d.alarm("unchoke")
	checkStatus(t, "the same request", d.call(t, post, path, body(a.Revision, "r1")), http.StatusAccepted, "")
	checkStatus(t, "a request of its own", d.call(t, post, path, body(a.Revision, "r2")), http.StatusConflict, "has changed")
	checkStatus(t, "nothing to acknowledge", d.call(t, post, path, body(a.Revision+1, "r3")), http.StatusConflict, "acknowledged")
	if now, _ := d.alarm("unchoke"); now != done {
		t.Errorf("a repeated request has changed the alarm: %+v", now)
	}
}

// The other actions follow the rules: times, reasons and roles.
func TestAlarmActions(t *testing.T) {
	d := newDesk(t)
	d.send(play(start, engineTest(), 18800*time.Millisecond, nil))
	for i, tt := range []struct {
		rule, action, body string
		status             int
		detail             string
	}{
		{"unchoke", "shelve", `"reason":"known","seconds":60`, http.StatusAccepted, ""},
		{"unchoke", "unshelve", `"reason":""`, http.StatusAccepted, ""},
		{"egt_run_max_over", "shelve", `"seconds":60`, http.StatusConflict, "reason"},
		{"egt_run_max_over", "shelve", `"reason":"x"`, http.StatusConflict, "time"},
		{"egt_run_max_over", "shelve", `"reason":"x","seconds":3601`, http.StatusConflict, "1h0m0s"},
		{"egt_run_max_exceeded", "shelve", `"reason":"x","seconds":60`, http.StatusConflict, "warning"},
		{"egt_run_max_exceeded", "reset", `"reason":""`, http.StatusConflict, "no reset"},
		{"egt_run_max_over", "out-of-service", `"reason":" "`, http.StatusConflict, "reason"},
		{"egt_run_max_over", "out-of-service", `"reason":"x"`, http.StatusConflict, "engine off"},
		{"egt_run_max_over", "in-service", `"reason":"x"`, http.StatusConflict, "no in_service"},
	} {
		a, ok := d.alarm(tt.rule)
		if !ok {
			t.Fatalf("no alarm of %s", tt.rule)
		}
		body := fmt.Sprintf(`{"revision":%d,"request_id":"r%d",%s}`, a.Revision, i, tt.body)
		checkStatus(t, tt.action+" "+tt.rule, d.call(t, post, alarmPath(a.ID, tt.action), body), tt.status, tt.detail)
	}
	if n := len(behind(d.sent(), 0, func(f due) bool { return bytes.Contains(f.body, []byte(`"state":"shelved"`)) })); n != 1 {
		t.Errorf("%d frames of a shelved alarm", n)
	}
}

func TestRunActions(t *testing.T) {
	d := newDesk(t)
	path := rigPath + "/runs"
	checkStatus(t, "start without data", d.call(t, post, path, `{"action":"start"}`), http.StatusConflict, "no scan yet")
	d.send(play(start, engineTest(), 500*time.Millisecond, nil))
	checkStatus(t, "end without a run", d.call(t, post, path, `{"action":"end"}`), http.StatusConflict, "no run is on")
	checkStatus(t, "no action", d.call(t, post, path, `{}`), http.StatusBadRequest, "start")
	checkStatus(t, "another action", d.call(t, post, path, `{"action":"pause"}`), http.StatusBadRequest, "pause")
	checkStatus(t, "another rig", d.call(t, post, "/api/rigs/cell_9/runs", `{"action":"start"}`), http.StatusNotFound, "cell_9")
	checkStatus(t, "mark without a run", d.call(t, post, "/api/runs/x/marks", `{"text":"a"}`), http.StatusConflict, "not on")

	_, before := d.n()
	checkStatus(t, "start", d.call(t, post, path, `{"action":"start","by":"M. Oduya","request_id":"s1"}`), http.StatusAccepted, "")
	checkStatus(t, "start again", d.call(t, post, path, `{"action":"start"}`), http.StatusConflict, "on already")
	checkStatus(t, "the same request", d.call(t, post, path, `{"action":"start","by":"M. Oduya","request_id":"s1"}`), http.StatusAccepted, "")
	run := checkJSON(t, "RunFrame", behind(d.sent(), before, nil)[0])
	if dig(run, "event") != "started" || dig(run, "run.by") != "M. Oduya" || dig(run, "run.ended") != nil {
		t.Errorf("%v", run)
	}

	marks := "/api/runs/" + dig(run, "run.id").(string) + "/marks"
	_, before = d.n()
	checkStatus(t, "mark", d.call(t, post, marks, `{"text":"tunnel \"B\" open","by":""}`), http.StatusAccepted, "")
	mark := checkJSON(t, "MarkFrame", behind(d.sent(), before, nil)[0])
	if dig(mark, "mark.text") != `tunnel "B" open` || dig(mark, "mark.by") != "console" {
		t.Errorf("%v", mark)
	}
	checkStatus(t, "empty mark", d.call(t, post, marks, `{"text":" \n"}`), http.StatusBadRequest, "text")
	checkStatus(t, "another run", d.call(t, post, "/api/runs/x/marks", `{"text":"a"}`), http.StatusConflict, "not on")

	_, before = d.n()
	checkStatus(t, "end", d.call(t, post, path, `{"action":"end"}`), http.StatusAccepted, "")
	if ended := checkJSON(t, "RunFrame", behind(d.sent(), before, nil)[0]); dig(ended, "event") != "ended" || dig(ended, "run.ended") == nil {
		t.Errorf("%v", ended)
	}
}

// A body has to be what is asked for, no more.
func TestBodies(t *testing.T) {
	d := newDesk(t)
	_, before := d.n()
	for _, path := range []string{rigPath + "/runs", "/api/runs/x/marks", "/api/alarms/unchoke/acknowledge"} {
		for _, tt := range []struct {
			name, body string
			status     int
			detail     string
		}{
			{"nothing", "", http.StatusBadRequest, "a JSON object is needed"},
			{"no JSON", "action=start", http.StatusBadRequest, "body"},
			{"cut", `{"by":"x`, http.StatusBadRequest, "body"},
			{"array", `[]`, http.StatusBadRequest, "body"},
			{"wrong type", `{"by":7}`, http.StatusBadRequest, "by"},
			{"unknown field", `{"by":"x","role":"engineer"}`, http.StatusBadRequest, "role"},
			{"more behind it", `{"by":"x"} {}`, http.StatusBadRequest, "follows"},
			{"too large", `{"by":"` + strings.Repeat("x", dashboard.LargestBody) + `"}`, http.StatusRequestEntityTooLarge, "65536"},
		} {
			checkStatus(t, path+" "+tt.name, d.call(t, post, path, tt.body), tt.status, tt.detail)
		}
		for _, h := range []http.Header{
			{"Origin": {"http://elsewhere.example"}},
			{"Sec-Fetch-Site": {"cross-site"}},
		} {
			checkStatus(t, fmt.Sprint(path, h), d.raw(t, post, path, `{"by":"x"}`, h), http.StatusForbidden, "another site")
		}
	}
	if _, n := d.n(); n != before {
		t.Error("something was done")
	}
}

// Another method, another path: problems too, with what would be allowed.
func TestNotServed(t *testing.T) {
	d := recorded()
	for _, tt := range []struct{ method, path, allow string }{
		{post, "/api/rigs", "GET"},
		{http.MethodPut, "/api/runs/x", "DELETE, GET, PATCH"},
		{http.MethodGet, "/api/runs/x/marks", "POST"},
		{http.MethodGet, "/api/rigs/cell_2/runs", "POST"},
		{http.MethodPut, "/api/alarms/a%2Fb/acknowledge", "POST"},
		{post, "/live", "GET"},
		{post, "/metrics", "GET"},
		{post, "/openapi.json", "GET"},
		{post, "/", "GET"},
		{post, "/assets/x.js", "GET"},
	} {
		a := d.raw(t, tt.method, tt.path, "", nil)
		if a.status != http.StatusMethodNotAllowed || a.header.Get("Allow") != tt.allow || a.header.Get("Content-Type") != "application/problem+json" {
			t.Errorf("%s %s: status %d, allow %q: %s", tt.method, tt.path, a.status, a.header.Get("Allow"), a.body)
		}
		checkJSON(t, "Problem", a.body)
	}
	for _, path := range []string{"/api/", "/api/nothing", "/api/runs/x/y", "/api/rigs/cell_2/operating-points"} {
		a := d.raw(t, http.MethodGet, path, "", nil)
		if a.status != http.StatusNotFound || dig(checkJSON(t, "Problem", a.body), "instance") != path {
			t.Errorf("%s: status %d: %s", path, a.status, a.body)
		}
	}
	if a := d.raw(t, http.MethodHead, "/api/rigs", "", nil); a.status != http.StatusOK || len(a.body) > 0 {
		t.Errorf("HEAD: status %d, %d bytes", a.status, len(a.body))
	}
}

// The page comes from this server and lets nothing else in.
func TestPage(t *testing.T) {
	a := recorded().raw(t, http.MethodGet, "/", "", nil)
	if _, err := os.Stat("web/dist/index.html"); err == nil {
		checkStatus(t, "page", a, http.StatusOK, "<html")
	} else {
		checkStatus(t, "page that was not built", a, http.StatusNotFound, "deploy/build")
	}
	for key, want := range map[string]string{
		"Content-Security-Policy": "default-src 'none'; script-src 'self'; style-src 'self';", "X-Content-Type-Options": "nosniff", "Referrer-Policy": "no-referrer",
		"X-Frame-Options": "DENY", "Cross-Origin-Opener-Policy": "same-origin", "Cross-Origin-Resource-Policy": "same-origin",
	} {
		if !strings.Contains(a.header.Get(key), want) {
			t.Errorf("%s: %q", key, a.header.Get(key))
		}
	}
	if policy := a.header.Get("Content-Security-Policy"); strings.Contains(policy, "unsafe") || strings.Contains(policy, "*") {
		t.Errorf("the policy lets in what stands in a document, or everything: %s", policy)
	}
}

// The curve of the throat plane rises to the critical NPR and is flat behind it, with
// the discharge coefficient in it.
func TestThroatCurve(t *testing.T) {
	type answer struct {
		NPR, FlowParameter    []float64
		CriticalNPR, ChokeNPR float64
	}
	get := func(t *testing.T, d *desk, query string) (c answer) {
		t.Helper()
		v := into[struct {
			NPR         []float64 `json:"npr"`
			Flow        []float64 `json:"flow_parameter"`
			CriticalNPR float64   `json:"critical_npr"`
			ChokeNPR    float64   `json:"choke_npr"`
		}](t, d.get(t, rigPath+"/throat-curve"+query))
		return answer{v.NPR, v.Flow, v.CriticalNPR, v.ChokeNPR}
	}
	near := func(t *testing.T, what string, got, want, tolerance float64) {
		t.Helper()
		if !(math.Abs(got/want-1) <= tolerance) {
			t.Errorf("%s is %.10g, want %.10g within %g", what, got, want, tolerance)
		}
	}
	const cd = 0.972 // of the rig's table from NPR 1.8 on
	shape := func(t *testing.T, c answer) (top float64) {
		t.Helper()
		last := len(c.NPR) - 1
		if last < 100 || len(c.FlowParameter) != last+1 || c.NPR[0] != 1 || c.NPR[last] != 4 || c.FlowParameter[0] != 0 {
			t.Fatalf("%d points from %v to %v, %d values from %v", len(c.NPR), c.NPR[0], c.NPR[last], len(c.FlowParameter), c.FlowParameter[0])
		}
		top = c.FlowParameter[last]
		for i := 1; i <= last; i++ {
			switch {
			case c.NPR[i] >= max(c.CriticalNPR, 1.8):
				near(t, fmt.Sprintf("at NPR %.3f the flow parameter", c.NPR[i]), c.FlowParameter[i], top, 1e-12)
			case c.NPR[i] > 1.003 && !(c.FlowParameter[i] > c.FlowParameter[i-1]):
				t.Errorf("it does not rise at NPR %.3f: %v after %v", c.NPR[i], c.FlowParameter[i], c.FlowParameter[i-1])
			}
		}
		return top
	}

	t.Run("perfect gas", func(t *testing.T) {
		d := makeDesk()
		d.take(ingest.KindConfig, "perfect gas", start)
		d.serve(d)
		t.Cleanup(d.close)
		c := get(t, d, "?total_temperature=1500&fuel_air_ratio=9") // a perfect gas asks for no composition
		// NACA 1135 eq. 44 and W√(RT0)/(A p0) at M = 1: √γ (2/(γ+1))^((γ+1)/(2(γ−1))).
		near(t, "critical NPR", c.CriticalNPR, math.Pow(1.2, 3.5), 1e-9)
		near(t, "flow parameter", shape(t, c), cd*math.Sqrt(1.4)/(1.2*1.2*1.2), 1e-9)
	})
	t.Run("air", func(t *testing.T) {
		c := get(t, recorded().desk, "")
		// Air at 288.15 K is within 0.1 % of γ = 1.4.
		near(t, "critical NPR", c.CriticalNPR, math.Pow(1.2, 3.5), 1e-3)
		near(t, "flow parameter", shape(t, c), cd*math.Sqrt(1.4)/(1.2*1.2*1.2), 1e-3)
	})
	t.Run("as computed", func(t *testing.T) {
		d := newDesk(t)
		d.send(play(start, engineTest(), 12*time.Second, nil))
		p := into[map[string]any](t, d.get(t, rigPath+"/operating-point"))
		c := get(t, d, fmt.Sprintf("?total_temperature=%v&fuel_air_ratio=%v&humidity_ratio=%v", p["total_temperature_k"], p["fuel_air_ratio"], p["humidity_ratio"]))
		if p["choke_state"] != "choked" {
			t.Fatalf("the point is %v", p["choke_state"])
		}
		near(t, "critical NPR", c.CriticalNPR, p["critical_npr"].(float64), 1e-12)
		near(t, "choke NPR", c.ChokeNPR, p["choke_npr"].(float64), 1e-12)
		near(t, "flow parameter", shape(t, c), p["flow_parameter"].(float64), 1e-12)
	})
	for query, detail := range map[string]string{
		"?total_temperature=hot": "hot", "?total_temperature=NaN": "NaN", "?total_temperature=1e999": "1e999", "?total_temperature=-5": "temperature",
		"?fuel_air_ratio=1": "fuel-air", "?fuel_air_ratio=-0.1": "fuel-air", "?humidity_ratio=Inf": "Inf", "?humidity_ratio=3": "humidity",
	} {
		checkStatus(t, query, recorded().get(t, rigPath+"/throat-curve"+query), http.StatusBadRequest, detail)
	}
	checkStatus(t, "another rig", recorded().get(t, "/api/rigs/cell_9/throat-curve"), http.StatusNotFound, "cell_9")
}

// The metrics are Prometheus text, and tell what the status tells.
func TestMetrics(t *testing.T) {
	d := newDesk(t)
	d.send(play(start, engineTest(), 5*time.Second, nil))
	d.take(ingest.KindMessage, "{", d.host())
	d.rest(3)
	d.view(t, "")
	a := d.get(t, "/metrics")
	parser := expfmt.NewTextParser(model.LegacyValidation)
	families, err := parser.TextToMetricFamilies(bytes.NewReader(a.body))
	if err != nil {
		t.Fatalf("%v\n%s", err, a.body)
	}
	for name := range families {
		if !strings.HasPrefix(name, "throatwatch_") {
			t.Errorf("the name %s", name)
		}
		if (families[name].GetType().String() == "COUNTER") != strings.HasSuffix(name, "_total") || families[name].GetHelp() == "" {
			t.Errorf("%s is a %s, help %q", name, families[name].GetType(), families[name].GetHelp())
		}
	}
	value := func(name, label, of string) (v float64) {
		for _, m := range families["throatwatch_"+name].GetMetric() {
			if of == "" || len(m.GetLabel()) == 1 && m.GetLabel()[0].GetName() == label && m.GetLabel()[0].GetValue() == of {
				return m.GetCounter().GetValue() + m.GetGauge().GetValue()
			}
		}
		return math.NaN()
	}
	if v := value("build_info", "", ""); v != 1 {
		t.Errorf("build_info is %g", v)
	}
	if v := value("process_resident_memory_bytes", "", ""); !(v > 1<<20) {
		t.Errorf("the process takes %g B", v)
	}
	d.mu.Lock()
	st := d.machine.Status(d.state)
	d.mu.Unlock()
	for _, tt := range []struct {
		name, label, of string
		want            float64
	}{
		{"messages_total", "", "", 251},
		{"samples_total", "", "", float64(st.Samples)},
		{"scans_total", "", "", float64(st.Scans)},
		{"scans_skipped_total", "", "", float64(st.Skipped)},
		{"not_used_total", "reason", "syntax", 1},
		{"source_age_seconds", "topic", topic, 3},
		{"source_skew_seconds", "topic", topic, 0.003},
		{"data_age_seconds", "", "", 3.003},
		{"recording", "", "", 1},
		{"input_path", "", "", 1},
		{"run_active", "", "", 1},
		{"catching_up", "", "", 0},
		{"rules_unknown", "", "", float64(st.Unknown)},
		{"viewers", "", "", 1},
		{"session_unacknowledged", "filter", "rigs/cell_2/\ufffd", 4},
		{"session_received_total", "", "", 5},
	} {
		if got := value(tt.name, tt.label, tt.of); !(math.Abs(got-tt.want) < 1e-9) {
			t.Errorf("%s{%s} is %v, want %v", tt.name, tt.of, got, tt.want)
		}
	}
	if n := len(families["throatwatch_not_used_total"].GetMetric()); n != int(ingest.NumReasons)-1 {
		t.Errorf("%d reasons of %d", n, ingest.NumReasons-1)
	}

	e := newDesk(t)
	e.rest(1)
	if a := e.get(t, "/metrics"); !bytes.Contains(a.body, []byte("throatwatch_data_age_seconds NaN")) {
		t.Errorf("without data:\n%s", a.body)
	}
}

// A probe that reads beyond its range for a second is excluded; while that is so nobody
// takes it back, afterwards an engineer does, and the time line shows it.
func TestReadmit(t *testing.T) {
	d := newDesk(t)
	broken := func(id string, _ float64) bool { return id == "p7_2" }
	var msgs []message
	for _, m := range play(start, engineTest(), 4*time.Second, broken) {
		beyond := m
		beyond.payload = decode.AppendSenMLJSON(nil, "", m.at, []decode.Reading{{Name: "p7_2", Unit: "kPa", Value: 400 + float64(m.at%7)}})
		msgs = append(msgs, m, beyond)
	}
	d.send(msgs)
	path := rigPath + "/readmit"
	body := `{"channel":"p7_2","reason":"line purged","by":"M. Oduya","request_id":"b1"}`
	checkStatus(t, "without a reason", d.call(t, post, path, `{"channel":"p7_2"}`), http.StatusConflict, "needs a reason")
	checkStatus(t, "no channel", d.call(t, post, path, `{"channel":"p7_9","reason":"a"}`), http.StatusNotFound, "no such channel")
	checkStatus(t, "no probe", d.call(t, post, path, `{"channel":"speed","reason":"a"}`), http.StatusConflict, "no probe")
	checkStatus(t, "not out", d.call(t, post, path, `{"channel":"p7_1","reason":"a"}`), http.StatusConflict, "not excluded")
	checkStatus(t, "another rig", d.call(t, post, "/api/rigs/cell_9/readmit", body), http.StatusNotFound, "cell_9")
	checkStatus(t, "proven", d.call(t, post, path, body), http.StatusConflict, "proven: out of range")
	used := func() any {
		return into[map[string]any](t, d.get(t, rigPath+"/operating-point"))["rake_probes_used"]
	}
	d.send(play(start+4*second, engineTest(), 2*time.Second, nil))
	if n := used(); n != 2.0 {
		t.Fatalf("%v probes before", n)
	}
	_, before := d.n()
	checkStatus(t, "taken back", d.call(t, post, path, body), http.StatusAccepted, "")
	checkStatus(t, "the same request", d.call(t, post, path, body), http.StatusAccepted, "")
	if entry := checkJSON(t, "LogFrame", behind(d.sent(), before, nil)[0]); dig(entry, "entry.what") != "readmit" || dig(entry, "entry.channel") != "p7_2" || dig(entry, "entry.reason") != "line purged" || dig(entry, "entry.by") != "M. Oduya" {
		t.Errorf("%v", entry)
	}
	d.send(play(start+6*second, engineTest(), time.Second, nil))
	if n := used(); n != 3.0 {
		t.Errorf("%v probes after", n)
	}
}

// The files are taken in by whoever the request names; what is wrong with them comes
// back whole, and an engine that is not off is a conflict.
func TestReload(t *testing.T) {
	d := makeDesk()
	d.cfg.OpenRole = access.Operator
	var got pipeline.Action
	d.cfg.Reload = func(ctx context.Context, a pipeline.Action) (pipeline.Reply, []dashboard.Fault, error) {
		got = a
		switch a.Reason {
		case "faults":
			return pipeline.Reply{}, []dashboard.Fault{{At: "rig.yaml:3:7", Message: "no such key", Hint: "leave it away"}, {At: "rules.yaml"}}, nil
		case "gone":
			return pipeline.Reply{}, nil, errors.New("stopped")
		case "running":
			return pipeline.Reply{Err: fmt.Errorf("%w: it is lit", pipeline.ErrNotOff)}, nil, nil
		}
		a.Do = pipeline.DoConfig
		res, err := d.Act(ctx, a)
		if res.Err == nil {
			d.take(ingest.KindConfig, "Alder Bank cell 2, new rake", d.host())
		}
		return res, nil, err
	}
	d.begin()
	d.serve(d)
	t.Cleanup(d.close)
	d.rest(1)
	path := rigPath + "/config"
	checkStatus(t, "another rig", d.call(t, post, "/api/rigs/cell_9/config", `{}`), http.StatusNotFound, "cell_9")
	checkStatus(t, "unknown field", d.call(t, post, path, `{"who":"x"}`), http.StatusBadRequest, "who")
	checkStatus(t, "one person", d.call(t, post, path, `{"by":"E. Marsh","approved_by":"e. marsh","request_id":"1"}`), http.StatusBadRequest, "another person")
	checkStatus(t, "running", d.call(t, post, path, `{"reason":"running"}`), http.StatusConflict, "it is lit")
	checkStatus(t, "stopped", d.call(t, post, path, `{"reason":"gone"}`), http.StatusServiceUnavailable, "stopped")
	a := d.call(t, post, path, `{"reason":"faults"}`)
	checkStatus(t, "faults", a, http.StatusUnprocessableEntity, "faults")
	faults := into[struct{ Faults []dashboard.Fault }](t, a).Faults
	if len(faults) != 2 || faults[0] != (dashboard.Fault{At: "rig.yaml:3:7", Message: "no such key", Hint: "leave it away"}) {
		t.Errorf("faults %+v", faults)
	}
	checkStatus(t, "taken", d.call(t, post, path, `{"by":"E. Marsh","approved_by":"M. Oduya","reason":"issue C","request_id":"2"}`), http.StatusAccepted, "")
	if got.By != "E. Marsh" || got.Role != "operator" {
		t.Errorf("action %+v", got)
	}
	hello := checkJSON(t, "HelloFrame", d.get(t, rigPath+"/hello").body)
	if dig(hello, "config.by") != "E. Marsh" || dig(hello, "config.approved_by") != "M. Oduya" || dig(hello, "config.reason") != "issue C" || dig(hello, "rig.title") != "Alder Bank cell 2, new rake" {
		t.Errorf("hello %v", hello["config"])
	}
	checkStatus(t, "who the files name", d.call(t, post, path, `{"request_id":"3"}`), http.StatusAccepted, "")
	if got.By != "" {
		t.Errorf("by %q, want nobody named", got.By)
	}

	e := newDesk(t)
	checkStatus(t, "without files", e.call(t, post, path, `{}`), http.StatusNotFound, "no rig file")
}

// Where the watch has users, the files are for an engineer.
func TestReloadNeedsAnEngineer(t *testing.T) {
	g := newGuarded(t)
	for name, status := range map[string]int{"Vera Lindqvist": http.StatusForbidden, "Mo Oduya": http.StatusForbidden, "Edda Marsh": http.StatusNotFound} {
		p := g.signIn(t, name)
		if a := g.raw(t, post, rigPath+"/config", `{"request_id":"1"}`, p.headers()); a.status != status {
			t.Errorf("%s: %d %s", name, a.status, a.body)
		}
	}
}
