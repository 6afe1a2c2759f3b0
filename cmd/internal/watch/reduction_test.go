package watch_test

import (
	"encoding/json"
	"math"
	"testing"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/rules/pipeline"
)

// A run that ends leaves the effective throat area of its steady choked scans behind, as
// an event before its end.
func TestReduction(t *testing.T) {
	t.Parallel()
	b, cfg, faults := config.Load(exampleRig)
	if err := watch.Faults(faults); err != nil {
		t.Fatal(err)
	}
	rig, err := rehearsal.New(cfg, rehearsal.Options{Seed: 2, Scenario: rehearsal.Full, Rate: 10, Start: testBegin})
	if err != nil {
		t.Fatal(err)
	}
	core := watch.NewCore(pipeline.NewMachine(parseOnce()), &pipeline.Replay{State: &pipeline.State{}, Digest: pipeline.NewDigest()}, "test", "test")
	core.Take(watch.Input{Kind: ingest.KindBoot, Payload: []byte(`{}`)}, testBegin)
	core.Take(watch.Input{Kind: ingest.KindConfig, Payload: b.Marshal()}, testBegin)
	var kinds []string
	var areas []float64
	var msgs []rehearsal.Message
	steady := 0
	for more := true; more; {
		msgs, more = rig.Next(msgs[:0])
		for _, m := range msgs {
			for _, o := range core.Take(watch.Input{Kind: ingest.KindMessage, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay) {
				if o.Kind == pipeline.OutcomePoint && o.Point.Steady {
					steady++
				}
			}
		}
		batch, err := core.Cut()
		if err != nil {
			t.Fatal(err)
		}
		if batch == nil {
			continue
		}
		for _, e := range batch.Events {
			if e.Kind != "run" && e.Kind != "reduction" {
				continue
			}
			kinds = append(kinds, e.Kind)
			if e.Kind == "run" {
				continue
			}
			var v struct {
				Run        string
				Area       float64 `json:"effective_area_m2"`
				Random     *float64
				Systematic *float64
				Steady     float64 `json:"steady_s"`
			}
			if err := json.Unmarshal(e.JSON, &v); err != nil {
				t.Fatal(err)
			}
			if v.Run == "" || v.Steady < 3 || v.Systematic == nil || !(*v.Systematic > 1e-3 && *v.Systematic < 1e-2) {
				t.Errorf("%s", e.JSON)
			}
			areas = append(areas, v.Area)
		}
	}
	if len(areas) != 1 || len(kinds) != 3 || kinds[1] != "reduction" || steady == 0 {
		t.Fatalf("events %v, areas %v, %d steady scans", kinds, areas, steady)
	}
	// The plant has the area of the rig file, grown by the metal: 0.025 m² (1 + 15e-6 600)².
	if want := 0.02545; math.Abs(areas[0]/want-1) > 0.005 {
		t.Errorf("effective area %.6f m², want %.5f", areas[0], want)
	}
}
