package pipeline

import (
	"math"
	"testing"
	"time"

	"throatwatch/monitor"
)

var (
	lightUp = engine{101400, 700, 700, 101300, 5000, 200}
	hot     = engine{230e3, 960, 1000, 101e3, 21000, 400}
	coast   = engine{101400, 400, 450, 101300, 4000, 150}
)

// The record of an excursion: once it has used up its allowance, and once it ends.
func TestExceedanceOutcomes(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 3*second)
	b.play(turning, second)
	b.play(lightUp, 2*second)
	b.play(idling, 2*second)
	b.play(running, 5*second)
	b.expect(OutcomeEngine, "start, idle")
	b.play(hot, 600*ms)
	b.play(running, 4*second)
	b.expect(OutcomeExceedance, "run_max ended")
	b.play(hot, 2*second)
	b.expect(OutcomeExceedance, "run_max on exceeded")
	b.play(running, 4*second)
	last := b.all[len(b.all)-1]
	for _, o := range b.all {
		if o.Kind == OutcomeExceedance {
			last = o
		}
	}
	b.expect(OutcomeExceedance, "run_max ended exceeded")
	e := last.Exceedance
	// 2 s of hot packs, exact to the two scans in which readings of both mix.
	if math.Abs(e.Duration-2) > 0.11 || e.Peak != 1000 || e.Limit != 990 || e.Allowance != 1 || e.Kind != "run" || e.Assumed != 0 ||
		len(e.Above) != 1 || e.Above[0].Seconds != e.Duration || int64(e.Ended-e.Began) < int64(e.Duration*1e9) {
		t.Errorf("record %+v", e)
	}
	// A run that ends with an excursion on has it on record; it goes on.
	b.play(hot, 500*ms)
	if err := b.act(Action{Do: DoRunEnd}); err != nil {
		t.Fatal(err)
	}
	b.expect(OutcomeExceedance, "run_max on")
	b.expect(OutcomeLife, "ML5-0042: 1 starts, 0 cycles")
	b.play(running, 4*second)
	b.expect(OutcomeExceedance, "run_max ended")
}

// Watching goes on after the end of a run: limits, ledger, life and rules.
func TestWatchingGoesOnAfterTheRun(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 3*second)
	b.play(turning, second)
	b.play(lightUp, 2*second)
	b.play(idling, 2*second)
	b.play(running, 5*second)
	if err := b.act(Action{Do: DoRunEnd}); err != nil {
		t.Fatal(err)
	}
	b.told(OutcomeAlarm)
	b.told(OutcomeLife)
	b.play(hot, 3*second)
	if a, ok := b.alarm("exceeded"); !ok || b.s.RunActive || a.ID[:2] != "-/" {
		t.Errorf("alarm %+v, %v with no run on", a, ok)
	}
	b.expect(OutcomeExceedance, "run_max on exceeded")
	b.play(idling, 3*second)
	b.play(coast, 4*second)
	b.play(engine{101330, 600, 700, 101325, 0, 0}, 3*second) // hot, at rest
	if got := b.point(); got.Phase != monitor.Cooling || got.V[monitor.EGTRise] < 200 {
		t.Errorf("%v, rise %g K", got.Phase, got.V[monitor.EGTRise])
	}
	b.told(OutcomeExceedance)
	b.play(engine{101330, 900, 1000, 101325, 0, 0}, 3*second) // a fire
	b.expect(OutcomeExceedance, "run_max on exceeded")
	b.told(OutcomeEngine)
	if l, ok := b.s.Life("ML5-0042"); !ok || l.Starts != 1 || l.Cycles != 1 || l.Bands[0].Exceedances != 2 || l.Bands[0].Seconds < 5.5 {
		t.Errorf("life %+v", l)
	}
	if _, ok := b.s.Life("ML5-0043"); ok {
		t.Error("an engine that was never here has a life")
	}
	if b.s.RunActive {
		t.Error("a run is on")
	}
}

// Life and ledger go on over a restart: a state that was stored is stepped the same.
func TestLifeSurvivesRestart(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 3*second)
	b.play(turning, second)
	b.play(lightUp, 2*second)
	b.play(idling, 2*second)
	b.play(hot, 600*ms)
	stored, err := b.s.Encode(true)
	if err != nil {
		t.Fatal(err)
	}
	if b.s, err = Decode(stored); err != nil {
		t.Fatal(err)
	}
	if err := b.m.Restore(b.s); err != nil {
		t.Fatal(err)
	}
	b.play(hot, 700*ms)
	b.expect(OutcomeExceedance, "run_max on exceeded")
	b.play(idling, second)
	b.play(coast, 3*second)
	b.play(atRest, 3*second)
	if l, _ := b.s.Life("ML5-0042"); l.Starts != 1 || l.Cycles != 1 || l.Bands[0].Exceedances != 1 || l.Hours < 6.0/3600 {
		t.Errorf("life %+v", l)
	}
	if d := time.Duration(b.point().V[monitor.RundownTime] * 1e9); d < 2*time.Second || d > 4*time.Second {
		t.Errorf("rundown of %v", d)
	}
}
