package main

import (
	"encoding/json"
	"net/http"
	"net/http/httptest"
	"strings"
	"sync/atomic"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

// checkedRig answers as a watch does: a check that is asked for is under way when it is
// looked at first, and is done then.
type checkedRig struct {
	t      *testing.T
	asked  atomic.Pointer[map[string]any]
	looked atomic.Int32
	done   check.Result // of a check before
	breaks bool
}

func (c *checkedRig) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	w.Header().Set("Content-Type", "application/json")
	var v any
	switch r.Method + " " + r.URL.Path {
	case "GET /api/rigs":
		v = []pipeline.RigInfo{{ID: "cell_2"}}
	case "GET /api/rigs/cell_2/checks":
		view := pipeline.ChecksView{Window: 1, Ticks: check.DefaultTicks()}
		if c.asked.Load() != nil {
			switch {
			case c.looked.Add(1) == 1:
				view.Running = &check.Result{Phase: check.Before, State: check.Running}
			case !c.breaks:
				view.Before = &c.done
			}
		}
		v = view
	case "POST /api/rigs/cell_2/checks":
		body := map[string]any{}
		if err := json.NewDecoder(r.Body).Decode(&body); err != nil {
			c.t.Error(err)
		}
		c.asked.Store(&body)
		w.WriteHeader(http.StatusAccepted)
		v = map[string]int{"epoch": 1, "n": 5}
	default:
		c.t.Errorf("asked for %s %s", r.Method, r.URL.Path)
	}
	if err := json.NewEncoder(w).Encode(v); err != nil {
		c.t.Error(err)
	}
}

// The command asks for a check, waits for what comes of it, and ends with the sentence that
// no one can take for a clearance; 1 where an item did not pass.
func TestChecksCommand(t *testing.T) {
	t.Parallel()
	passed := check.Item{ID: "zero.p7_1", Kind: check.KindZero, Title: "Probe 1", Passed: true, Text: "reads 1 Pa"}
	failed := check.Item{ID: "signal.egt_3", Kind: check.KindSignal, Title: "EGT 3", Text: "silent: no sample in 10 s"}
	result := func(items ...check.Item) check.Result {
		r := check.Result{Phase: check.Before, State: check.Done, Began: 1, Ended: monitor.Time(11e9), Warmth: check.Cold, By: "R. Aldous", Items: items, Of: len(items)}
		r.Summary = "Data-system checks passed 1 of 2. Not a clearance to start."
		for _, it := range items {
			if it.Passed {
				r.Passed++
			}
		}
		return r
	}
	for _, tt := range []struct {
		name string
		rig  *checkedRig
		args []string
		code int
		want string // within what is printed
		end  string // of stdout
	}{
		{
			"one fails", &checkedRig{done: result(passed, failed)},
			[]string{"before", "--cold", "--tick", "all=R. Aldous", "--planned", "45m", "--by", "R. Aldous"},
			1,
			"not passed: signal.egt_3: silent: no sample in 10 s\n", "Not a clearance to start.\n",
		},
		{"all pass", &checkedRig{done: result(passed)}, []string{"before", "--cold", "--tick", "fire_system", "--by", "R. Aldous"}, 0, "zero.p7_1", "Not a clearance to start.\n"},
		{"as JSON", &checkedRig{done: result(passed)}, []string{"before", "--warm", "--json"}, 0, `"summary": "Data-system checks`, "]\n"},
		{"broken off", &checkedRig{breaks: true}, []string{"before", "--cold"}, 1, "broken off", ""},
		{"none yet", &checkedRig{}, nil, 0, "alarm_sound", "no check was made\n"},
		{"cold or warm?", &checkedRig{}, []string{"before"}, 2, "--cold", ""},
		{"both", &checkedRig{}, []string{"after", "--cold", "--warm"}, 2, "--warm", ""},
		{"two runs", &checkedRig{}, []string{"a", "b"}, 2, "one run", ""},
		{"ticked by nobody", &checkedRig{}, []string{"before", "--cold", "--tick", "fire_system"}, 1, "by whom", ""},
		{"no such run", &checkedRig{}, []string{"none", "--data", "/nonexistent"}, 1, "holds no runs", ""},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			tt.rig.t = t
			server := httptest.NewServer(tt.rig)
			defer server.Close()
			code, stdout, stderr := invoke(t, append([]string{"checks", "--url", server.URL}, tt.args...)...)
			if code != tt.code || !strings.Contains(stdout+stderr, tt.want) || !strings.HasSuffix(stdout, tt.end) {
				t.Errorf("exit code %d, want %d with %q, ending in %q:\n%s%s", code, tt.code, tt.want, tt.end, stdout, stderr)
			}
			if asked := tt.rig.asked.Load(); tt.name == "one fails" && asked != nil {
				ticks, _ := (*asked)["ticks"].(map[string]any)
				if (*asked)["phase"] != "before" || (*asked)["warmth"] != "cold" || (*asked)["planned_s"] != 2700.0 || len(ticks) != len(check.DefaultTicks()) {
					t.Errorf("asked for %v", *asked)
				}
			}
		})
	}
}
