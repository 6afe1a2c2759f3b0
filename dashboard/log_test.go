package dashboard_test

import (
	"fmt"
	"net/http"
	"testing"
	"time"

	"throatwatch/rules/pipeline"
)

// Entries and swaps are made once, refused with the reason, and shown in frames and
// in the hello that follows.
func TestEntriesAndSwaps(t *testing.T) {
	d := newDesk(t)
	checkStatus(t, "entry without a run", d.call(t, post, "/api/runs/x/entries", `{"name":"oil level","value":4.2,"unit":"l"}`), http.StatusConflict, "not on")
	d.send(play(start, engineTest(), 3*time.Second, nil))
	hello := into[struct {
		Run struct{ ID string }
		Log []pipeline.Entry
	}](t, d.get(t, rigPath+"/hello"))
	if hello.Log == nil || len(hello.Log) != 0 {
		t.Errorf("the log begins with %v", hello.Log)
	}
	entries, swap := "/api/runs/"+hello.Run.ID+"/entries", rigPath+"/swap"
	_, before := d.n()
	for _, tt := range []struct {
		what, path, body string
		status           int
		detail           string
	}{
		{"reading", entries, `{"name":"oil level","value":4.2,"unit":"l","text":"dipstick","by":"M. Oduya","request_id":"e1"}`, http.StatusAccepted, ""},
		{"the same request", entries, `{"name":"oil level","value":4.2,"unit":"l","text":"dipstick","by":"M. Oduya","request_id":"e1"}`, http.StatusAccepted, ""},
		{"remark", entries, `{"name":"fuel lot","value":null,"unit":"","text":"J-17","by":"","request_id":"e2"}`, http.StatusAccepted, ""},
		{"unknown unit", entries, `{"name":"oil level","value":4.2,"unit":"pints","request_id":"e3"}`, http.StatusBadRequest, "pints"},
		{"no name", entries, `{"name":"","value":4.2,"request_id":"e4"}`, http.StatusBadRequest, "name"},
		{"no number", entries, `{"name":"oil level","value":"full"}`, http.StatusBadRequest, "body"},
		{"another run", "/api/runs/x/entries", `{"name":"oil level","value":4.2}`, http.StatusConflict, "not on"},
		{"swap", swap, `{"channel":"egt_1","serial":"TC-0417","valid_from":"2026-03-02T09:00:02.5Z","reason":"open","by":"C. Vega","request_id":"s1"}`, http.StatusAccepted, ""},
		{"swap of no channel", swap, `{"channel":"egt_99","serial":"TC-0417","reason":"open"}`, http.StatusNotFound, "egt_99"},
		{"swap before the run", swap, `{"channel":"egt_1","serial":"TC-0417","valid_from":"2026-03-01T09:00:02Z","reason":"open"}`, http.StatusBadRequest, "run began"},
		{"swap at no time", swap, `{"channel":"egt_1","serial":"TC-0417","valid_from":"noon","reason":"open"}`, http.StatusBadRequest, "noon"},
		{"swap on another rig", "/api/rigs/cell_9/swap", `{"channel":"egt_1","serial":"TC-0417","reason":"open"}`, http.StatusNotFound, "cell_9"},
	} {
		checkStatus(t, tt.what, d.call(t, post, tt.path, tt.body), tt.status, tt.detail)
	}
	frames := behind(d.sent(), before, func(f due) bool { return f.kind == "log" })
	if len(frames) != 3 {
		t.Fatalf("%d entries were told, want 3", len(frames))
	}
	for i, want := range []map[string]any{
		{"what": "entry", "name": "oil level", "value": 4.2, "unit": "l", "text": "dipstick", "by": "M. Oduya"},
		{"what": "entry", "name": "fuel lot", "value": nil, "text": "J-17", "by": "console"},
		{"what": "swap", "channel": "egt_1", "serial": "TC-0417", "valid_from": "2026-03-02T09:00:02.5Z", "reason": "open", "by": "C. Vega", "role": "engineer"},
	} {
		f := checkJSON(t, "LogFrame", frames[i])
		for k, v := range want {
			if got := dig(f, "entry."+k); got != v {
				t.Errorf("entry %d: %s is %v, want %v", i, k, got, v)
			}
		}
	}
	hello = into[struct {
		Run struct{ ID string }
		Log []pipeline.Entry
	}](t, d.get(t, rigPath+"/hello"))
	if len(hello.Log) != 3 || hello.Log[2].Serial != "TC-0417" || hello.Log[0].T == 0 {
		t.Errorf("hello: %+v", hello.Log)
	}
}

// The log of a stored run is what was told while it was recorded.
func TestOperatorLog(t *testing.T) {
	r := recorded()
	got := into[struct{ Entries []pipeline.Entry }](t, r.get(t, "/api/runs/"+r.id+"/log")).Entries
	var words []string
	for _, e := range got {
		words = append(words, fmt.Sprintf("%s %s by %s", e.What, e.Rule, e.By))
	}
	if fmt.Sprint(words) != "[mark  by M. Oduya acknowledge unchoke by console]" {
		t.Errorf("%q", words)
	}
	if got[0].Text != "bleed \"A\" opened, 5 °C \u0007" || int64(got[0].T) < r.began(t) {
		t.Errorf("%+v", got[0])
	}
	checkStatus(t, "no such run", r.get(t, "/api/runs/none/log"), http.StatusNotFound, "none")
}
