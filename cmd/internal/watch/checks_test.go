package watch_test

import (
	"encoding/json"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

// doing is an action at a time of the test.
type doing struct {
	at time.Duration
	do pipeline.Action
}

// shortDay is a test with rest enough before and after it for a check: the engine begins
// to turn at 45 s and is at rest again before 100 s.
func shortDay() []rehearsal.Segment {
	return []rehearsal.Segment{
		{Name: "off", Seconds: 45},
		{Name: "crank", Seconds: 2.5, Starter: true},
		{Name: "light-off", Seconds: 7, Speed: 0.45, Starter: true, Fuel: true},
		{Name: "idle", Seconds: 8, Speed: 0.45, Fuel: true},
		{Name: "shutdown", Seconds: 60},
	}
}

// checkOf is the action that begins a check, all of it ticked.
func checkOf(cfg *pipeline.Config, phase, warmth string) pipeline.Action {
	q := pipeline.CheckRequest{Phase: phase, Warmth: warmth, Free: 50e9}
	for _, tick := range cfg.Checks.AllTicks() {
		q.Ticks = append(q.Ticks, check.Ticked{ID: tick.ID, By: "R. Aldous"})
	}
	return pipeline.Action{Do: pipeline.DoCheck, Check: q, By: "R. Aldous", RequestID: phase}
}

// checkedDay plays the short day with faults and a check before and after the run. It gives
// the records, and what was told of checks as JSON.
func checkedDay(t *testing.T, faults ...string) (records []ingest.Record, told []string) {
	t.Helper()
	b, cfg, wrong := config.Load(exampleRig)
	if err := watch.Faults(wrong); err != nil {
		t.Fatal(err)
	}
	o := rehearsal.Options{Seed: 3, Rate: 20, Start: testBegin, Plan: shortDay()}
	for _, text := range faults {
		f, err := rehearsal.ParseFault(text)
		if err != nil {
			t.Fatal(err)
		}
		o.Faults = append(o.Faults, f)
	}
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		t.Fatal(err)
	}
	acts := []doing{{33 * time.Second, checkOf(&cfg, check.Before, check.Cold)}, {110 * time.Second, checkOf(&cfg, check.After, check.Warm)}}
	core := watch.NewCore(pipeline.NewMachine(parseOnce()), &pipeline.Replay{State: &pipeline.State{}, Digest: pipeline.NewDigest()}, "test", "test")
	take := func(in watch.Input, host int64) {
		outs := core.Take(in, host)
		told = append(told, checksOf(t, outs)...)
		batch, err := core.Cut()
		if err != nil {
			t.Fatal(err)
		}
		records = append(records, batch.Records...)
	}
	take(watch.Input{Kind: ingest.KindBoot, Payload: []byte(`{}`)}, testBegin)
	take(watch.Input{Kind: ingest.KindConfig, Payload: b.Marshal()}, testBegin)
	var msgs []rehearsal.Message
	for more := true; more; {
		msgs, more = rig.Next(msgs[:0])
		for _, m := range msgs {
			for len(acts) > 0 && testBegin+int64(acts[0].at) <= m.At+m.Delay {
				payload, err := json.Marshal(acts[0].do)
				if err != nil {
					t.Fatal(err)
				}
				take(watch.Input{Kind: ingest.KindAction, Payload: payload}, testBegin+int64(acts[0].at))
				acts = acts[1:]
			}
			take(watch.Input{Kind: ingest.KindMessage, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
		}
	}
	return records, told
}

// checksOf gives what outcomes tell of checks, as JSON.
func checksOf(t *testing.T, outs []pipeline.Outcome) (told []string) {
	t.Helper()
	for i := range outs {
		switch o := &outs[i]; {
		case o.Kind == pipeline.OutcomeChecks:
			text, err := json.Marshal(o.Check)
			if err != nil {
				t.Fatal(err)
			}
			told = append(told, string(text))
		case o.Kind == pipeline.OutcomeAction && o.Action.Err != nil:
			t.Errorf("action: %v", o.Action.Err)
		}
	}
	return told
}

// failed gives the items of a check that did not pass.
func failed(r *check.Result) (ids []string) {
	for i := range r.Items {
		if !r.Items[i].Passed {
			ids = append(ids, r.Items[i].ID)
		}
	}
	return ids
}

// A sound rig passes every item before a run and after it. Of one with faults just those
// items fail that are about them; a zero that moves during the run is found after it. The
// records, stepped again, give the same checks.
func TestChecks(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct {
		name          string
		faults        []string
		before, after string // ids of the items that fail
	}{
		{"sound", nil, "", ""},
		// 15 K against 5 K that are allowed to a cold harness, 40 K to a warm one.
		{
			"zero error, a thermocouple that is off",
			[]string{"pressure-zero-shift@0s:p_exit", "probe-offset@0s:egt_3"},
			"zero.p_exit, temperature.egt_3", "zero.p_exit",
		},
		{"silent, noisy", []string{"barometer-loss@0s:t_fuel", "noisy@0s:p_inlet"}, "signal.p_inlet, signal.t_fuel", "signal.p_inlet, signal.t_fuel"},
		// 150 Pa, beyond the 70 Pa that draughts explain.
		{"a zero that moves during the run", []string{"pressure-zero-shift@60s:dp_bellmouth"}, "", "zero.dp_bellmouth, shift.dp_bellmouth"},
	} {
		records, told := checkedDay(t, tt.faults...)
		if len(told) != 5 {
			t.Errorf("%s: told %d times, want 5: %s", tt.name, len(told), told)
			continue
		}
		var states []string
		var run string
		for i, text := range told {
			var r check.Result
			if err := json.Unmarshal([]byte(text), &r); err != nil {
				t.Fatal(err)
			}
			states = append(states, r.Phase+" "+r.State)
			if i == 2 { // it counts for the run that begins
				run = r.Run
			}
			want := tt.before
			if r.Phase == check.After {
				want = tt.after
				if r.Run != run {
					t.Errorf("%s: the check after is of run %q, that before of %q", tt.name, r.Run, run)
				}
			}
			if r.State != check.Done {
				continue
			}
			if got := strings.Join(failed(&r), ", "); got != want {
				t.Errorf("%s: %s: failed %q, want %q", tt.name, r.Phase, got, want)
			}
			if r.Of != len(r.Items) || r.Passed != r.Of-len(failed(&r)) || !strings.HasSuffix(r.Summary, ". Not a clearance to start.") {
				t.Errorf("%s: %d of %d items: %q", tt.name, r.Passed, r.Of, r.Summary)
			}
		}
		if want := []string{"before running", "before done", "before done", "after running", "after done"}; !slices.Equal(states, want) || run == "" {
			t.Errorf("%s: %q, run %q", tt.name, states, run)
		}
		m, s := pipeline.NewMachine(parseOnce()), &pipeline.State{}
		var again []string
		for i := range records {
			again = append(again, checksOf(t, m.Step(s, &records[i]))...)
		}
		if !slices.Equal(again, told) {
			t.Errorf("%s: stepped again the records give other checks", tt.name)
		}
	}
}
