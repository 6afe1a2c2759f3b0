package main

import (
	"context"
	"encoding/json"
	"errors"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"testing"

	"throatwatch/cmd/internal/config"
	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/rules/pipeline"
)

// budgetRig is a rig whose every input the flags of point can state: dry air, no fuel, one
// absolute probe of each.
const budgetRig = `
rig: {id: bench}
nozzle:
  throat_area: 250 cm2
  area_uncertainty: 0.2 %
  area_basis: hot
  duct_loss: 0 %
  no_flow_below: 1.003
  discharge: {coefficient: 0.97, uncertainty: 0.3 %}
  thrust: {coefficient: 0.985, uncertainty: 0.5 %}
  model_uncertainty: 0.4 %
stations:
  p7: {probes: [p7]}
  t7: {probes: [t7]}
  back_pressure: {exit_plane: p_exit}
channels:
  - {id: p7, unit: kPa, reference: absolute, range: [0 kPa, 400 kPa], uncertainty: {fixed: 500 Pa}}
  - {id: t7, unit: K, range: [200 K, 1500 K], uncertainty: {fixed: 6 K}}
  - {id: p_exit, unit: kPa, reference: absolute, range: [80 kPa, 120 kPa], uncertainty: {fixed: 80 Pa}}
`

// stepped is a desk of one machine.
type stepped struct {
	m *pipeline.Machine
	s *pipeline.State
}

func (d stepped) Ask(_ context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	fn(d.m, d.s)
	return nil
}

func (d stepped) Act(context.Context, pipeline.Action) (pipeline.Reply, error) {
	return pipeline.Reply{}, errors.New("nothing is acted on")
}

// One operating point has one budget, whoever is asked: what the watch answers over HTTP for
// margin, W8 and thrust is what `point --budget` says for the same numbers. Both sides are
// this program: 1e-9 is rounding of units; that the values are right is TestPointBudget.
func TestBudgetOfPointAndWatchAgree(t *testing.T) {
	name := filepath.Join(t.TempDir(), "rig.yaml")
	if err := os.WriteFile(name, []byte(budgetRig), 0o600); err != nil {
		t.Fatal(err)
	}
	bundle, cfg, faults := config.Load(name)
	if len(faults) > 0 {
		t.Fatal(faults)
	}
	m := pipeline.NewMachine(func([]byte) (pipeline.Config, error) { return cfg, nil })
	d := stepped{m, &pipeline.State{}}
	r := ingest.Record{Host: 1764579600e9}
	record := func(kind ingest.Kind, topic string, payload []byte) {
		r.Seq++
		r.Kind, r.Topic, r.Payload = kind, topic, payload
		d.m.Step(d.s, &r)
	}
	record(ingest.KindBoot, "", []byte(`{"epoch":1}`))
	record(ingest.KindConfig, "", bundle.Marshal())
	for range 20 {
		r.Host += 50e6
		record(ingest.KindMessage, "rigs/bench/senml", decode.AppendSenMLJSON(nil, "", r.Host, []decode.Reading{
			{Name: "p7", Unit: "Pa", Value: 250e3}, {Name: "t7", Unit: "K", Value: 900}, {Name: "p_exit", Unit: "Pa", Value: 101325},
		}))
	}
	answer := httptest.NewRecorder()
	request := httptest.NewRequestWithContext(t.Context(), http.MethodGet, "/api/rigs/bench/budget", http.NoBody)
	dashboard.NewServer(dashboard.Config{Desk: d, Build: "b"}, dashboard.NewHub("b")).ServeHTTP(answer, request)
	var watch struct {
		Outputs []struct {
			Quantity   string
			Value, U95 float64
			Inputs     []struct {
				Input               string
				Contribution, Share float64
			}
		}
	}
	if err := json.Unmarshal(answer.Body.Bytes(), &watch); err != nil || len(watch.Outputs) != 3 {
		t.Fatalf("%d %s: %v", answer.Code, answer.Body, err)
	}

	// Standard uncertainties: those of the rig are at 95 %. The humidity that is not measured
	// is 0.027/√12 there.
	point := runDoubt(t, "--total-pressure 250kPa --total-temperature 900K --back-pressure 101.325kPa --throat-area 250cm2 --discharge-coefficient 0.97 --thrust-coefficient 0.985 "+
		"--uncertainty total-pressure=255.10673Pa --uncertainty total-temperature=3.0612807K --uncertainty back-pressure=40.817076Pa --uncertainty humidity-ratio=0.0077942 "+
		"--uncertainty throat-area=0.1020426914% --uncertainty discharge-coefficient=0.153064037% --uncertainty thrust-coefficient=0.255106728% --uncertainty choke-npr=0.204085383% --budget")
	names := map[string]string{
		"total pressure": "total-pressure", "back pressure": "back-pressure", "total temperature": "total-temperature", "humidity ratio": "humidity-ratio",
		"throat area": "throat-area", "discharge coefficient": "discharge-coefficient", "thrust coefficient": "thrust-coefficient", "choke npr": "choke-npr",
	}
	budget, ok := point["budget"].(map[string]any)
	if !ok {
		t.Fatal(point)
	}
	for _, o := range watch.Outputs {
		closeTo(t, o.Quantity, o.Value, keyed(t, point, o.Quantity), 1e-9)
		closeTo(t, o.Quantity+" ± U95", o.U95, keyed(t, point, o.Quantity+"_u95"), 1e-7)
		lines, ok := budget[o.Quantity].([]any)
		if !ok || len(lines) != len(o.Inputs) || len(lines) < 5 {
			t.Fatalf("%s: %d lines, %v", o.Quantity, len(o.Inputs), budget[o.Quantity])
		}
		for _, in := range o.Inputs {
			found := false
			for _, line := range lines {
				l, ok := line.(map[string]any)
				if !ok || l["input"] != names[in.Input] {
					continue
				}
				found = true
				closeTo(t, o.Quantity+" by "+in.Input, max(in.Contribution, -in.Contribution), keyed(t, l, "contribution"), 1e-7)
				closeTo(t, o.Quantity+", share of "+in.Input, in.Share, keyed(t, l, "share"), 1e-7)
			}
			if !found {
				t.Errorf("%s: point knows no %s", o.Quantity, in.Input)
			}
		}
	}
}
