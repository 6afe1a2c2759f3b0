package dashboard_test

import (
	"net/http"
	"testing"
)

// A run differs from itself in nothing, scan by scan and along its own curve.
func TestCompareWithItself(t *testing.T) {
	r := recorded()
	scans := into[struct {
		By                  string
		Same                bool
		Paired              int
		OnlyA               int `json:"only_a"`
		Differences, Alarms []any
		Equal               []string
		AlarmsSame          int `json:"alarms_same"`
	}](t, r.get(t, "/api/runs/compare?a="+r.id+"&b="+r.id))
	if scans.By != "records" || !scans.Same || scans.Paired < 100 || scans.OnlyA != 0 || len(scans.Differences)+len(scans.Alarms) > 0 || len(scans.Equal) < 20 || scans.AlarmsSame == 0 {
		t.Errorf("%+v", scans)
	}
	marked := into[struct {
		By, Zero string
		Paired   int
	}](t, r.get(t, "/api/runs/compare?a="+r.id+"&b="+r.id+"&by=mark&mark=opened"))
	if marked.By != "mark" || marked.Zero != `the mark "opened"` || marked.Paired < 100 {
		t.Errorf("from a mark: %+v", marked)
	}
	curves := into[struct {
		Baseline []string
		Curves   []struct {
			Bins []struct{ Departure *float64 }
		}
		Runs []any
	}](t, r.get(t, "/api/runs/compare?a="+r.id+"&b="+r.id+"&by=npr&scans=all"))
	if len(curves.Baseline) != 1 || len(curves.Curves) == 0 || len(curves.Runs) != 2 {
		t.Errorf("%+v", curves)
	}
	for _, c := range curves.Curves {
		for _, b := range c.Bins {
			if b.Departure == nil || *b.Departure != 0 {
				t.Errorf("departure %v from itself", b.Departure)
			}
		}
	}
	for _, tt := range []struct {
		query  string
		status int
	}{
		{"?a=" + r.id, http.StatusBadRequest},
		{"?a=" + r.id + "&b=" + r.id + "&by=noon", http.StatusBadRequest},
		{"?a=" + r.id + "&a=" + r.id + "&b=" + r.id, http.StatusBadRequest},
		{"?a=" + r.id + "&b=" + r.id + "&by=mark&mark=nowhere", http.StatusBadRequest},
		{"?a=" + r.id + "&b=none", http.StatusNotFound},
	} {
		checkStatus(t, tt.query, r.get(t, "/api/runs/compare"+tt.query), tt.status, "")
	}
}
