package dashboard_test

import (
	"math"
	"net/http"
	"testing"
)

type pointsAnswer struct {
	Run    string
	Points []struct {
		Name   string
		FromS  float64 `json:"from_s"`
		ToS    float64 `json:"to_s"`
		Scans  int
		Values []struct {
			Name  string
			Value *float64
		}
		Doubts []string
	}
}

// A given stretch is reduced to the means of the frames that were sent live.
func TestPoints(t *testing.T) {
	r := recorded()
	const from, to = 5.0, 15.0
	a := into[pointsAnswer](t, r.get(t, "/api/runs/"+r.id+"/points?stretch=5s..15s"))
	if len(a.Points) != 1 || a.Points[0].FromS != from || a.Points[0].ToS != to {
		t.Fatalf("%+v", a)
	}
	p := &a.Points[0]
	compared := 0
	for _, v := range p.Values {
		sum, n := 0.0, 0
		for _, row := range r.rows(t, v.Name, from, to) {
			if row.value != nil {
				sum += *row.value
				n++
			}
		}
		if n == 0 || v.Value == nil || math.Abs(*v.Value-sum/float64(n)) > 1e-9*math.Abs(sum/float64(n)) {
			t.Errorf("%s %v, mean of %d frames %v", v.Name, v.Value, n, sum/float64(n))
		}
		compared++
	}
	if compared < 5 || len(p.Doubts) == 0 { // the engine accelerates there
		t.Errorf("%d quantities, doubts %q", compared, p.Doubts)
	}
	if marks := into[pointsAnswer](t, r.get(t, "/api/runs/"+r.id+"/points?at=marks&after=5s")); len(marks.Points) == 0 || marks.Points[0].Name == "" {
		t.Errorf("%+v", marks)
	}
	into[pointsAnswer](t, r.get(t, "/api/runs/"+r.id+"/points"))
	for _, query := range []string{"stretch=5s", "stretch=9..3", "at=noon", "least=-1s", "from=x", "after=long"} {
		checkStatus(t, query, r.get(t, "/api/runs/"+r.id+"/points?"+query), http.StatusBadRequest, "")
	}
	checkStatus(t, "no such run", r.get(t, "/api/runs/none/points"), http.StatusNotFound, "none")
}
