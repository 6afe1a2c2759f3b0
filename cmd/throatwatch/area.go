package main

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/steady"
)

// areaOf gives the effective throat area that a run left behind when it ended, nil
// when it had no steady choked phase.
func areaOf(ctx context.Context, runs watch.StoredRuns, r *runfile.Run) (area *steady.RunArea, err error) {
	if r.Ended == 0 {
		return nil, nil //nolint:nilnil // a run that is on has none yet
	}
	f, err := runs.Open(ctx, r.ID)
	if err != nil {
		return nil, err
	}
	defer f.Close() //nolint:errcheck // it is only read
	err = f.Events(ctx, r.Started, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "reduction" {
			return nil
		}
		var v watch.Reduction
		if err := json.Unmarshal(e.JSON, &v); err != nil {
			return fmt.Errorf("run %s: reduction: %w", r.ID, err)
		}
		area = v.RunArea()
		return nil
	})
	return area, err
}

// drifts fills in the effective areas of the lines, newest first, and their
// change since the run before of the same engine on the same rig. A reduction is
// compared with no other run: it is one of them again.
func drifts(ctx context.Context, runs watch.StoredRuns, all []runfile.Run, list []runLine) error {
	type engine struct{ rig, model, serial string }
	before := map[engine]*steady.RunArea{}
	for i := range slices.Backward(all) {
		area, err := areaOf(ctx, runs, &all[i])
		if err != nil {
			return err
		}
		if area == nil {
			continue
		}
		key, line := engine{all[i].Rig, all[i].Engine, all[i].EngineSerial}, &list[i]
		line.EffectiveArea, line.EffectiveAreaU95 = known(area.Area), known(2*area.Area*math.Hypot(area.Random, area.Systematic))
		if all[i].Reduction() != nil {
			continue
		}
		if last := before[key]; last != nil {
			change, u95 := last.Drift(area)
			line.AreaDrift, line.AreaDriftU95 = known(100*change), known(100*u95)
		}
		before[key] = area
	}
	return nil
}

// measure writes a number with its 95 % uncertainty in a unit.
func measure(v, u95 *float64, scale float64, format, unit string) string {
	switch {
	case v == nil:
		return "–"
	case u95 == nil:
		return fmt.Sprintf(format+" %s", scale*(*v), unit)
	}
	return fmt.Sprintf(format+" ± %.2f %s", scale*(*v), scale*(*u95), unit)
}
