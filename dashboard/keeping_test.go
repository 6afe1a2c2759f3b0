package dashboard_test

import (
	"fmt"
	"log/slog"
	"net/http"
	"net/http/httptest"
	"path/filepath"
	"strings"
	"testing"

	"throatwatch/dashboard"
	"throatwatch/dashboard/access"
	"throatwatch/ingest/runfile"
)

// Notes of a run are changed and found; a run is deleted only with its number and a
// reason, by an engineer, and not while it is kept.
func TestKeeping(t *testing.T) {
	dir := t.TempDir()
	f, err := runfile.Create(t.Context(), filepath.Join(dir, "r7.db"), runfile.Header{ID: "r7", Number: 7, Rig: rigID, Started: start, Ended: start + second, State: runfile.StateEnded}, runfile.Options{})
	if err == nil {
		err = f.Close()
	}
	if err != nil {
		t.Fatal(err)
	}
	role := access.Operator
	call := func(method, path, body string) answer {
		d := makeDesk()
		s := dashboard.NewServer(dashboard.Config{Desk: d, Runs: folder(dir), Parse: parse, Log: slog.New(slog.DiscardHandler), OpenRole: role}, d.hub)
		w := httptest.NewRecorder()
		r := httptest.NewRequestWithContext(t.Context(), method, path, strings.NewReader(body))
		s.ServeHTTP(w, r)
		a := answer{w.Code, w.Header(), w.Body.Bytes()}
		checkDescribed(t, method, path, body, a)
		return a
	}
	run := into[map[string]any](t, call(http.MethodPatch, "/api/runs/r7", `{"keep":true,"notes":"blade scan due","tags":["night"," endurance","night"]}`))
	if run["keep"] != true || run["notes"] != "blade scan due" || fmt.Sprint(run["tags"]) != "[endurance night]" {
		t.Errorf("after the note: %v", run)
	}
	if run = into[map[string]any](t, call(http.MethodPatch, "/api/runs/r7", `{"tags":[]}`)); run["keep"] != true || fmt.Sprint(run["tags"]) != "[]" {
		t.Errorf("what is not there must stay: %v", run)
	}
	for find, want := range map[string]int{"blade": 1, "vane": 0} {
		if got := len(into[[]any](t, call(http.MethodGet, "/api/runs?find="+find, ""))); got != want {
			t.Errorf("find %s: %d runs", find, got)
		}
	}
	for _, tc := range []struct {
		role               access.Role
		method, path, body string
		status             int
		says               string
	}{
		{access.Viewer, "PATCH", "/api/runs/r7", `{"keep":false}`, http.StatusForbidden, "operator"},
		{access.Operator, "PATCH", "/api/runs/nothing", `{"keep":false}`, http.StatusNotFound, "unknown run"},
		{access.Operator, "PATCH", "/api/runs/r7", `{"tags":[" "]}`, http.StatusBadRequest, "1 to 64 bytes"},
		{access.Operator, "PATCH", "/api/runs/r7", `{"tags":["` + strings.Repeat("a", 65) + `"]}`, http.StatusBadRequest, "1 to 64 bytes"},
		{access.Operator, "PATCH", "/api/runs/r7", `{"notes":"` + strings.Repeat("a", 20000) + `"}`, http.StatusBadRequest, "notes"},
		{access.Operator, "PATCH", "/api/runs/r7", `{"digest":"0"}`, http.StatusBadRequest, "digest"},
		{access.Operator, "GET", "/api/runs?find=" + strings.Repeat("a", 201), "", http.StatusBadRequest, "200"},
		{access.Operator, "DELETE", "/api/runs/r7?number=7&reason=test", "", http.StatusForbidden, "engineer"},
		{access.Engineer, "DELETE", "/api/runs/r7?number=6&reason=test", "", http.StatusBadRequest, "number of the run, 7"},
		{access.Engineer, "DELETE", "/api/runs/r7?number=7&reason=%20", "", http.StatusBadRequest, "why"},
		{access.Engineer, "DELETE", "/api/runs/r8?number=7&reason=test", "", http.StatusNotFound, "r8"},
		{access.Engineer, "DELETE", "/api/runs/r7?number=7&reason=test", "", http.StatusConflict, "marked keep"},
		{access.Operator, "PATCH", "/api/runs/r7", `{"keep":false}`, http.StatusOK, `"keep":false`},
		{access.Engineer, "DELETE", "/api/runs/r7?number=7&reason=test", "", http.StatusNoContent, ""},
		{access.Engineer, "DELETE", "/api/runs/r7?number=7&reason=test", "", http.StatusNotFound, "r7"},
	} {
		role = tc.role
		checkStatus(t, tc.method+" "+tc.path, call(tc.method, tc.path, tc.body), tc.status, tc.says)
	}
}
