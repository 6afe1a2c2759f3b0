package dashboard_test

import (
	"encoding/json"
	"net/http"
	"testing"
	"time"

	"throatwatch/rules"
	"throatwatch/rules/figures"
)

// The figures of a run are those of the alarms that were told while it was on.
func TestAlarmFigures(t *testing.T) {
	r := recorded()
	checkStatus(t, "without a run on", r.get(t, "/api/alarms/figures"), http.StatusNotFound, "no run is on")
	checkStatus(t, "no such run", r.get(t, "/api/runs/none/alarm-figures"), http.StatusNotFound, "none")
	got := into[figures.Figures](t, r.get(t, "/api/runs/"+r.id+"/alarm-figures"))
	began := r.began(t)
	state := map[string]string{} // by rule
	asked, shares, standing := 0, map[string]int{}, 0
	for _, f := range r.sent() {
		if f.kind != "alarm" {
			continue
		}
		var v struct{ Alarm rules.Alarm }
		must(json.Unmarshal(f.body, &v))
		a := v.Alarm
		if is := a.State.String(); is == "unacknowledged" && state[a.Rule] != is && a.Priority > rules.Note && int64(a.Changed) >= began {
			asked++
			shares[a.Priority.String()]++
		}
		state[a.Rule] = a.State.String()
		if a.Priority == rules.Note {
			delete(state, a.Rule)
		}
	}
	for _, s := range state {
		if s != "normal" {
			standing++
		}
	}
	if got.Raised != asked || asked < 4 || got.StandingNow != standing || got.StandingPeak < standing || got.Graded || int64(got.From) != began {
		t.Errorf("%+v, want %d raised, %d standing", got, asked, standing)
	}
	for p, n := range shares {
		if got.ByPriority[p].Raised != n {
			t.Errorf("%s: %+v, want %d", p, got.ByPriority[p], n)
		}
	}
	// The unchoke was acknowledged in the scan in which it was raised.
	if got.AckMedian == nil || *got.AckMedian > 0.2 {
		t.Errorf("acknowledged after %v s", got.AckMedian)
	}
}

// While a run is on its figures go up to what is recorded.
func TestAlarmFiguresOfNow(t *testing.T) {
	d := makeDesk()
	d.record(t.TempDir())
	d.begin()
	d.serve(d)
	t.Cleanup(d.close)
	d.send(play(start, engineTest(), 18*time.Second, nil))
	d.rest(2)
	a := d.get(t, "/api/alarms/figures")
	checkStatus(t, "on", a, http.StatusOK, "")
	got := into[figures.Figures](t, a)
	if got.Raised == 0 || got.Seconds < 14 || got.StandingNow == 0 || got.WhyNot == nil {
		t.Errorf("%s", a.body)
	}
}
