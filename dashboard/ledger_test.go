package dashboard_test

import (
	"net/http"
	"reflect"
	"strings"
	"testing"

	"throatwatch/rules/pipeline"
)

// The record of a run has each excursion once, as it ended, and the life of its engine
// at its end.
func TestExceedances(t *testing.T) {
	r := recorded()
	got := into[struct {
		Exceedances []pipeline.Exceedance
		Events      []struct{ T, Event string }
		Life        *pipeline.Life
	}](t, r.get(t, "/api/runs/"+r.id+"/exceedances"))
	if len(got.Exceedances) == 0 {
		t.Fatal("the recorded run goes above a limit, and nothing is on record")
	}
	seen := map[string]bool{}
	for _, e := range got.Exceedances {
		key := e.Band + e.Kind + string(rune(e.Began))
		if seen[key] || e.Ended != 0 && e.Ended < e.Began || e.Duration <= 0 || e.Peak <= e.Limit || len(e.Above) == 0 {
			t.Errorf("%+v", e)
		}
		seen[key] = true
	}
	if got.Life == nil || got.Life.Serial != "ML5-0042" || got.Life.Starts != 1 {
		t.Errorf("life %+v", got.Life)
	}
	var names []string
	for _, e := range got.Events {
		names = append(names, e.Event)
	}
	if !strings.HasPrefix(strings.Join(names, " "), "start idle") {
		t.Errorf("events %q", names)
	}
	if a := r.get(t, "/api/runs/none/exceedances"); a.status != http.StatusNotFound {
		t.Errorf("of no run: status %d", a.status)
	}
}

// The life of an engine is the same by its serial number and in hello.
func TestLife(t *testing.T) {
	d := recorded()
	bySerial := into[pipeline.Life](t, d.get(t, "/api/engines/ML5-0042/life"))
	hello := into[struct{ Life *pipeline.Life }](t, d.get(t, "/api/rigs/"+rigID+"/hello"))
	if hello.Life == nil || !reflect.DeepEqual(*hello.Life, bySerial) || len(bySerial.Bands) == 0 {
		t.Errorf("by serial %+v, in hello %+v", bySerial, hello.Life)
	}
	if a := d.get(t, "/api/engines/other/life"); a.status != http.StatusNotFound {
		t.Errorf("of no engine: status %d", a.status)
	}
}
