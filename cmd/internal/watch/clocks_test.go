package watch_test

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// stepped is what a whole test without waiting came to.
type stepped struct {
	raised map[string]int64 // rule → host time at which it was first raised, ns
	points int
	last   int64 // event time of the last scan
	state  *pipeline.State
}

// step plays a quick test with a limit that is exceeded soon, and further faults.
func step(t *testing.T, faults ...rehearsal.Fault) *stepped {
	t.Helper()
	text, err := os.ReadFile(exampleRig)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "rig.yaml")
	edited := strings.Replace(string(text), "limit: 720 degC, allowance: 5 s", "limit: 720 degC, allowance: 500 ms", 1)
	if err := os.WriteFile(path, []byte(edited), 0o600); err != nil {
		t.Fatal(err)
	}
	bundle, cfg, found := config.Load(path)
	if err := watch.Faults(found); err != nil {
		t.Fatal(err)
	}
	rig, err := rehearsal.New(cfg, rehearsal.Options{Seed: 3, Scenario: rehearsal.Quick, Start: testBegin, Faults: faults})
	if err != nil {
		t.Fatal(err)
	}
	s := &stepped{raised: map[string]int64{}, state: &pipeline.State{}}
	m := pipeline.NewMachine(watch.Parse)
	take := func(r ingest.Record) {
		r.Seq = s.state.Seq + 1
		outs := m.Step(s.state, &r)
		for i := range outs {
			o := &outs[i]
			if o.Kind == pipeline.OutcomePoint {
				s.points, s.last = s.points+1, o.T
			}
			if o.Kind != pipeline.OutcomeAlarm || alarm.State(o.Alarm.State) != alarm.Unacknowledged {
				continue
			}
			if _, ok := s.raised[o.Alarm.Rule]; !ok {
				s.raised[o.Alarm.Rule] = r.Host
			}
		}
	}
	boot, err := json.Marshal(pipeline.Boot{Epoch: 1, Build: "test", GOARCH: "test"})
	if err != nil {
		t.Fatal(err)
	}
	take(ingest.Record{Kind: ingest.KindBoot, Host: testBegin, Payload: boot})
	take(ingest.Record{Kind: ingest.KindConfig, Host: testBegin, Payload: bundle.Marshal()})
	take(ingest.Record{Kind: ingest.KindConnect, Host: testBegin, Topic: "rigs/cell_2/senml"})
	var msgs []rehearsal.Message
	for more := true; more; {
		msgs, more = rig.Next(msgs[:0])
		for _, msg := range msgs {
			due := msg.At + msg.Delay
			for s.state.Host+int64(100*time.Millisecond) < due {
				take(ingest.Record{Kind: ingest.KindTick, Host: s.state.Host + int64(100*time.Millisecond)})
			}
			take(ingest.Record{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Host: max(due, s.state.Host), Topic: msg.Topic, Payload: msg.Payload})
		}
	}
	return s
}

// TestWrongClockBlindsNoLimit: the clock of the data system is wrong, jumps, or its
// messages come doubled, out of order or in bursts while the throat unchokes (28.5 to
// 32.5 s of the test) and while the EGT is over its limit (35.5 to 39 s). Both alarms
// come within a second of when they come with a good clock, scans go on to the end,
// no alarm comes but those that tell of the fault itself, and the fault is counted.
func TestWrongClockBlindsNoLimit(t *testing.T) {
	t.Parallel()
	good := step(t)
	at := func(kind rehearsal.FaultKind, from, lasting time.Duration) rehearsal.Fault {
		return rehearsal.Fault{Kind: kind, At: from, For: lasting}
	}
	const from, lasting = 27 * time.Second, 14 * time.Second
	for _, tt := range []struct {
		name    string
		faults  []rehearsal.Fault
		reason  ingest.Reason // by which it is counted
		allowed []string      // rules that tell of the fault
	}{
		{"30 s ahead", []rehearsal.Fault{at(rehearsal.ClockSkew, from, lasting)}, ingest.ReasonFuture, []string{"clock_skew"}},
		{"10 min behind", []rehearsal.Fault{at(rehearsal.ClockPast, from, lasting)}, ingest.ReasonPast, []string{"clock_skew"}},
		{"jumping to and fro", []rehearsal.Fault{
			at(rehearsal.ClockSkew, from, 2*time.Second), at(rehearsal.ClockPast, from+3*time.Second, 2*time.Second),
			at(rehearsal.ClockSkew, from+8*time.Second, 2*time.Second), at(rehearsal.ClockPast, from+11*time.Second, 2*time.Second),
		}, ingest.ReasonFuture, []string{"clock_skew"}},
		{"doubled", []rehearsal.Fault{at(rehearsal.Duplicate, from, lasting)}, ingest.ReasonDuplicate, nil},
		{"out of order", []rehearsal.Fault{at(rehearsal.Reorder, from, lasting)}, ingest.ReasonNone, nil},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			s := step(t, tt.faults...)
			for _, rule := range []string{"unchoke", "egt_run_max_exceeded"} {
				want, ok := good.raised[rule]
				got, raised := s.raised[rule]
				if late := time.Duration(got - want); !ok || !raised || late > time.Second || late < -time.Second {
					t.Errorf("%s: raised %v, %v after it is with a good clock", rule, raised, late)
				}
			}
			for rule, host := range s.raised {
				_, due := good.raised[rule]
				for _, allowed := range tt.allowed {
					due = due || rule == allowed
				}
				if !due {
					t.Errorf("a false alarm after %v: %s", time.Duration(host-testBegin), rule)
				}
			}
			if s.points < good.points-20 || s.last != good.last {
				t.Errorf("%d scans to %v, %d to %v with a good clock", s.points, time.Unix(0, s.last).UTC(), good.points, time.Unix(0, good.last).UTC())
			}
			if tt.reason != ingest.ReasonNone && s.state.Align.Counters[tt.reason] == 0 {
				t.Errorf("nothing is counted as %v: %v", tt.reason, s.state.Align.Counters)
			}
		})
	}
}
