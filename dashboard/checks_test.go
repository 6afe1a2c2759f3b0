package dashboard_test

import (
	"net/http"
	"testing"
	"time"

	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

// A check is asked for, told when it begins and when it is done, and stands under its rig;
// what is not understood, and a check of an engine that turns, is refused with the reason.
func TestChecks(t *testing.T) {
	d := makeDesk()
	d.record(t.TempDir())
	d.begin()
	d.serve(d)
	t.Cleanup(d.close)
	path := rigPath + "/checks"
	atRest := []knot{{0, 0, 1.0005, 290, 1}, {60, 0, 1.0005, 290, 1}}
	d.send(play(start, atRest, 40*time.Second, nil))
	for _, tt := range []struct {
		what, path, body string
		status           int
		detail           string
	}{
		{"no phase", path, `{"warmth":"cold"}`, http.StatusBadRequest, "phase"},
		{"no warmth", path, `{"phase":"before"}`, http.StatusBadRequest, "warmth"},
		{"a tick that there is not", path, `{"phase":"before","warmth":"cold","ticks":{"horn":"M. Oduya"}}`, http.StatusBadRequest, "horn"},
		{"a run of a year", path, `{"phase":"before","warmth":"cold","planned_s":31557600}`, http.StatusBadRequest, "planned_s"},
		{"another rig", "/api/rigs/cell_9/checks", `{"phase":"before","warmth":"cold"}`, http.StatusNotFound, "cell_9"},
		{"after no run", path, `{"phase":"after","warmth":"warm"}`, http.StatusConflict, "no run"},
		{"before", path, `{"phase":"before","warmth":"cold","ticks":{"alarm_sound":"M. Oduya"},"by":"M. Oduya","request_id":"c1"}`, http.StatusAccepted, ""},
		{"the same request", path, `{"phase":"before","warmth":"cold","by":"M. Oduya","request_id":"c1"}`, http.StatusAccepted, ""},
		{"another meanwhile", path, `{"phase":"before","warmth":"cold","request_id":"c2"}`, http.StatusConflict, "under way"},
	} {
		checkStatus(t, tt.what, d.call(t, post, tt.path, tt.body), tt.status, tt.detail)
	}
	v := into[pipeline.ChecksView](t, d.get(t, path))
	if v.Running == nil || v.Before != nil || v.Window != 10 || len(v.Ticks) != len(check.DefaultTicks()) {
		t.Errorf("while it gathers: %+v", v)
	}
	d.send(play(start+int64(40*time.Second), atRest, 12*time.Second, nil))
	v = into[pipeline.ChecksView](t, d.get(t, path))
	if v.Running != nil || v.Before == nil || v.Before.State != check.Done || v.Before.By != "M. Oduya" || v.Before.Of == 0 {
		t.Fatalf("when it is done: %+v", v)
	}
	var told []string
	for _, f := range d.sent() {
		if f.kind == "checks" {
			told = append(told, dig(checkJSON(t, "ChecksFrame", f.body), "checks.state").(string))
		}
	}
	if len(told) != 2 || told[0] != check.Running || told[1] != check.Done {
		t.Errorf("frames tell %q", told)
	}
	// The run that begins has it with it.
	d.send(play(start+int64(52*time.Second), engineTest(), 3*time.Second, nil))
	d.rest(2)
	hello := into[struct {
		Run    struct{ ID string }
		Checks pipeline.ChecksView
	}](t, d.get(t, rigPath+"/hello"))
	if hello.Run.ID == "" || hello.Checks.Before == nil || hello.Checks.Before.Run != hello.Run.ID {
		t.Errorf("hello: run %q, checks %+v", hello.Run.ID, hello.Checks.Before)
	}
	checkStatus(t, "an engine that turns", d.call(t, post, path, `{"phase":"before","warmth":"warm"}`), http.StatusConflict, "at rest")
	list := into[[]check.Result](t, d.get(t, "/api/runs/"+hello.Run.ID+"/checks"))
	if len(list) != 1 || list[0].Ended != v.Before.Ended || list[0].Run != hello.Run.ID || len(list[0].Items) != v.Before.Of {
		t.Errorf("stored with the run: %+v", list)
	}
}
