package pipeline

import (
	"errors"
	"reflect"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/monitor/check"
)

// begin is an action that begins a check.
func begin(phase, id string) Action {
	return Action{Do: DoCheck, Check: CheckRequest{Phase: phase, Warmth: check.Cold}, By: "R. Aldous", RequestID: id}
}

// A check is refused while the engine is not at rest, says why, and is broken off when the
// engine begins to turn; before a run it counts for the run that begins in time.
func TestCheck(t *testing.T) {
	b := newBed(t)
	if err := b.act(begin(check.Before, "1")); !errors.Is(err, ErrNotAtRest) || !strings.Contains(err.Error(), "speed") {
		t.Errorf("without a speed: %v", err)
	}
	b.play(atRest, 4*second)
	if err := b.act(begin("during", "2")); !errors.Is(err, ErrInvalid) {
		t.Errorf("during: %v", err)
	}
	if err := b.act(begin(check.After, "3")); !errors.Is(err, ErrNoRun) {
		t.Errorf("after no run: %v", err)
	}
	if err := b.act(begin(check.Before, "4")); err != nil {
		t.Fatal(err)
	}
	if err := b.act(begin(check.Before, "5")); !errors.Is(err, ErrChecking) {
		t.Errorf("two at once: %v", err)
	}
	b.play(atRest, 5*second)
	b.play(turning, second)
	b.expect(OutcomeChecks, "before running, before broken_off")
	if err := b.act(begin(check.Before, "6")); !errors.Is(err, ErrNotAtRest) || !strings.Contains(err.Error(), "cranking") {
		t.Errorf("cranking: %v", err)
	}
	if v := b.m.Checks(b.s); v.Before != nil || v.Running != nil {
		t.Errorf("what was broken off stands: %+v", v)
	}
	b.play(atRest, 15*second) // rundown, off, the end of the run
	if b.s.RunActive {
		t.Fatal("the run goes on")
	}
	b.told(OutcomeChecks)
	if err := b.act(begin(check.Before, "7")); err != nil {
		t.Fatal(err)
	}
	b.play(atRest, 11*second)
	b.expect(OutcomeChecks, "before running, before done")
	b.play(turning, second)
	b.expect(OutcomeChecks, "before done")
	if v := b.m.Checks(b.s); v.Before == nil || v.Before.Run != b.s.Run.ID || v.Before.By != "R. Aldous" {
		t.Errorf("the check before does not belong to run %q: %+v", b.s.Run.ID, v.Before)
	}
	// After the end of the run it still belongs to it.
	b.play(atRest, 15*second)
	run := b.s.Run.ID
	if err := b.act(begin(check.After, "8")); err != nil || b.s.RunActive {
		t.Fatal(err)
	}
	b.play(atRest, 11*second)
	if v := b.m.Checks(b.s); v.After == nil || v.After.Run != run || v.Before.Run != run {
		t.Errorf("the check after does not belong to run %q: %+v", run, v.After)
	}
	// What was gathered is gone, and a state that was stored goes on as it was.
	if !reflect.DeepEqual(b.s.Checks.Gather, check.Gather{}) || b.s.Checks.Running.State != "" {
		t.Error("what was gathered stays in the state")
	}
}

// A check for which no scan comes ends, and says that every channel is silent; other limits
// and rules break one off.
func TestCheckEnds(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 4*second)
	if err := b.act(begin(check.Before, "1")); err != nil {
		t.Fatal(err)
	}
	b.wait(12 * second)
	b.expect(OutcomeChecks, "before running, before done")
	v := b.m.Checks(b.s)
	if v.Before == nil || v.Before.Passed > v.Before.Of/2 {
		t.Fatalf("%+v", v.Before)
	}
	// While no session is connected no scan is closed, and host time ends the check.
	session := func(kind ingest.Kind) {
		b.r.Kind, b.r.Topic, b.r.Payload = kind, topic, nil
		b.step()
	}
	session(ingest.KindConnect)
	b.play(atRest, 4*second)
	if err := b.act(begin(check.Before, "2")); err != nil {
		t.Fatal(err)
	}
	session(ingest.KindDisconnect)
	b.wait(14 * second)
	b.expect(OutcomeChecks, "before running")
	b.wait(2 * second)
	b.expect(OutcomeChecks, "before done")
	for _, it := range b.m.Checks(b.s).Before.Items {
		if it.ID == "broker" && it.Passed {
			t.Errorf("without a session: %+v", it)
		}
	}
	session(ingest.KindConnect)
	b.play(atRest, 4*second)
	if err := b.act(begin(check.Before, "3")); err != nil {
		t.Fatal(err)
	}
	b.play(atRest, 2*second)
	b.record(ingest.KindConfig, "rig two")
	b.expect(OutcomeChecks, "before running, before broken_off")
}

// A check goes on over a restart: a state that was decoded in the midst of it ends with
// the same result.
func TestCheckOverRestart(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 4*second)
	if err := b.act(begin(check.Before, "1")); err != nil {
		t.Fatal(err)
	}
	b.play(atRest, 5*second)
	text, err := b.s.Encode(true)
	if err != nil {
		t.Fatal(err)
	}
	from := len(b.records)
	b.play(atRest, 7*second)
	s, err := Decode(text)
	if err != nil {
		t.Fatal(err)
	}
	m := NewMachine(parser(t))
	if err := m.Restore(s); err != nil {
		t.Fatal(err)
	}
	for i := range b.records[from:] {
		m.Step(s, &b.records[from+i])
	}
	if got, want := m.Checks(s).Before, b.m.Checks(b.s).Before; got == nil || !reflect.DeepEqual(got, want) {
		t.Errorf("after a restart %+v, want %+v", got, want)
	}
}
