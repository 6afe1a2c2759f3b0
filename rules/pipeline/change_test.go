package pipeline

import (
	"bytes"
	"encoding/json"
	"errors"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules"
)

// Limits and rules change only while the engine is known to be off; what was in
// force stays otherwise, and why is said.
func TestChangeNeedsTheEngineOff(t *testing.T) {
	cooling := atRest
	cooling.egt = 450
	for _, tt := range []struct {
		name string
		do   func(b *bed)
		why  string // "" = the change is taken
	}{
		{"nothing seen yet", func(*bed) {}, ""},
		{"off", func(b *bed) { b.play(atRest, 4*second) }, ""},
		{"turning", func(b *bed) { b.play(turning, 4*second) }, "cranking"},
		{"running", func(b *bed) { b.play(running, 4*second) }, "lit"},
		{"run down and hot", func(b *bed) { b.play(running, 4*second); b.play(cooling, 4*second) }, "cooling"},
		{"off, the run still on", func(b *bed) { b.play(running, 4*second); b.play(atRest, 4*second) }, ""},
		{"off, then without data", func(b *bed) { b.play(atRest, 4*second); b.wait(5 * second) }, ""},
		{"running, then without data", func(b *bed) { b.play(running, 4*second); b.wait(5 * second) }, "lit"},
		{"turning, then without data", func(b *bed) { b.play(turning, 4*second); b.wait(5 * second) }, "a run is on"},
		{"turning, without data, run ended by hand", func(b *bed) {
			b.play(turning, 4*second)
			b.wait(5 * second)
			_ = b.act(Action{Do: DoRunEnd, RequestID: "end"})
		}, "was cranking when it was known last"},
		{"the same, ten minutes later", func(b *bed) {
			b.play(turning, 4*second)
			_ = b.act(Action{Do: DoRunEnd, RequestID: "end"})
			b.wait(605 * second)
		}, ""},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := newBed(t)
			tt.do(b)
			b.told(OutcomeConfig)
			b.record(ingest.KindConfig, "rig two")
			in, told := b.s.InForce, b.told(OutcomeConfig)
			cfg, _ := b.m.Config()
			if tt.why == "" {
				if told != "two" || cfg.Hash != "two" || in.Hash != "two" || in.Refused != (Refusal{}) || int64(in.Since) != b.r.Host {
					t.Errorf("told %q, in force %+v", told, in)
				}
				return
			}
			if cfg.Hash != "one" || in.Hash != "one" || !strings.Contains(in.Refused.Why, tt.why) || told != in.Refused.Why || string(b.s.Bundle) != "rig one" {
				t.Errorf("told %q, in force %+v", told, in)
			}
			// What was in force goes on.
			b.play(atRest, 100*ms)
			b.point()
			b.record(ingest.KindConfig, "rig one")
			if b.s.InForce.Refused != (Refusal{}) {
				t.Error("the files are those in force again, and a refusal is still shown")
			}
		})
	}
}

// A restart in the middle of a run does not let other files in; the state of before
// and that of after it say the same.
func TestRestartWithOtherFiles(t *testing.T) {
	b := newBed(t)
	b.play(running, 6*second)
	state, err := b.s.Encode(true)
	if err != nil {
		t.Fatal(err)
	}
	s, err := Decode(state)
	if err != nil {
		t.Fatal(err)
	}
	m := NewMachine(parser(t))
	if err := m.Restore(s); err != nil {
		t.Fatal(err)
	}
	b.m, b.s, b.all = m, s, nil
	b.r.Host += 3600 * second // it was down for long: that says nothing of the engine
	b.record(ingest.KindBoot, `{"epoch":2}`)
	b.record(ingest.KindConfig, "rig two")
	if cfg, _ := m.Config(); cfg.Hash != "one" || s.InForce.Hash != "one" || !strings.Contains(s.InForce.Refused.Why, "lit") || s.InForce.Refused.By != "" {
		t.Errorf("in force %q, %+v", cfg.Hash, s.InForce)
	}
	b.play(running, 6*second)
	if p := b.point(); p.Phase != monitor.Steady || !s.RunActive {
		t.Errorf("phase %v, run %v", p.Phase, s.RunActive)
	}
}

// Who changed, who approved and why goes with the change: from the request, else
// from the rig file.
func TestChangeNamesPeople(t *testing.T) {
	b := newBed(t)
	named := NewMachine(func(bundle []byte) (Config, error) {
		cfg, err := parser(t)(bundle)
		cfg.Change = Change{Engineer: "Edda Marsh", Approver: "Vera Lindqvist", Note: "issue C"}
		return cfg, err
	})
	if err := named.Restore(b.s); err != nil {
		t.Fatal(err)
	}
	b.m = named
	b.play(atRest, 4*second)
	for i, tt := range []struct {
		a       Action
		bundle  string
		want    InForce
		refused error
	}{
		{a: Action{}, bundle: "rig two", want: InForce{Hash: "two", By: "Edda Marsh", ApprovedBy: "Vera Lindqvist", Reason: "issue C"}},
		{a: Action{By: "Mo Oduya", Reason: "back"}, bundle: "rig one", want: InForce{Hash: "one", By: "Mo Oduya", ApprovedBy: "Vera Lindqvist", Reason: "back"}},
		{a: Action{By: "Mo Oduya", ApprovedBy: "Edda Marsh"}, bundle: "rig two", want: InForce{Hash: "two", By: "Mo Oduya", ApprovedBy: "Edda Marsh", Reason: "issue C"}},
		// Nobody approves what they did themselves.
		{a: Action{By: "vera lindqvist"}, bundle: "rig one", want: InForce{Hash: "one", By: "vera lindqvist", Reason: "issue C"}},
		{a: Action{By: "Mo Oduya", ApprovedBy: " mo oduya"}, refused: ErrSamePerson},
	} {
		tt.a.Do, tt.a.RequestID = DoConfig, string(rune('a'+i))
		if err := b.act(tt.a); !errors.Is(err, tt.refused) {
			t.Errorf("%d: %v", i, err)
		}
		if tt.refused != nil {
			continue
		}
		b.record(ingest.KindConfig, tt.bundle)
		tt.want.Since = rules.Time(b.r.Host)
		if b.s.InForce != tt.want {
			t.Errorf("%d: %+v", i, b.s.InForce)
		}
		outs := b.outs
		if len(outs) == 0 || outs[0].Event != ConfigChanged || !outs[0].OK || *outs[0].Config != tt.want {
			t.Errorf("%d: outcomes %+v", i, outs)
		}
	}
	// A boot between the two forgets who proposed.
	if err := b.act(Action{Do: DoConfig, By: "Mo Oduya", RequestID: "z"}); err != nil {
		t.Fatal(err)
	}
	b.record(ingest.KindBoot, `{"epoch":2}`)
	b.record(ingest.KindConfig, "rig two")
	if b.s.InForce.By != "Edda Marsh" {
		t.Errorf("by %q", b.s.InForce.By)
	}
}

// Files that have faults are refused before they are tried: that is noted.
func TestRefusedFilesAreNoted(t *testing.T) {
	b := newBed(t)
	b.play(atRest, second)
	b.told(OutcomeConfig)
	if err := b.act(Action{Do: DoConfigRefused, By: "Mo Oduya", Text: "3 faults", RequestID: "r"}); err != nil {
		t.Fatal(err)
	}
	b.expect(OutcomeConfig, "3 faults")
	text, err := json.Marshal(b.s.InForce)
	if err != nil {
		t.Fatal(err)
	}
	if in := b.s.InForce; in.Hash != "one" || in.Refused.By != "Mo Oduya" || !strings.Contains(string(text), `"why":"3 faults"`) {
		t.Errorf("%s", text)
	}
	text, err = json.Marshal(InForce{})
	if err != nil || !strings.Contains(string(text), `"refused":null`) {
		t.Errorf("%s, %v", text, err)
	}
}

// A change in the middle of a run, with the engine off and the run still on, steps to
// the same bits again, also from a checkpoint right before it; what is derived in the
// same way goes on over it.
func TestChangeIsSteppedAgain(t *testing.T) {
	withDerived := func(bundle []byte) (Config, error) {
		cfg, err := parser(t)(bundle)
		cfg.Derived = []rules.Derived{
			{Name: "oil_mean", Kind: rules.DeriveMean, Of: "channel.p_oil", Over: 3 * second, Period: period},
			{Name: "oil_low_for", Kind: rules.DeriveSince, Of: "channel.p_oil < 30 kPa", Period: period},
		}
		if err == nil && cfg.Hash == "two" {
			cfg.Derived = cfg.Derived[1:]
		}
		for i := range cfg.Rules {
			if cfg.Rules[i].Name == "oil_low" {
				cfg.Rules[i].When, cfg.Rules[i].Text = "oil_low_for > 4 s", "low for {oil_low_for:s.2}"
			}
		}
		return cfg, err
	}
	run := func(restart bool) (digest string, state []byte) {
		b := newBed(t)
		b.m, b.s = NewMachine(withDerived), &State{}
		b.r = ingest.Record{Host: epoch - second}
		digester := NewDigest()
		step := func(kind ingest.Kind, payload []byte) {
			b.r.Kind, b.r.Topic, b.r.Payload = kind, "", payload
			if kind == ingest.KindMessage {
				b.r.Topic = topic
			}
			for _, o := range b.step() {
				digester.Add(&o)
			}
		}
		play := func(e engine, d int64) {
			for end := b.r.Host + d; b.r.Host < end; {
				at := (b.r.Host/period + 1) * period
				b.r.Host = at + 3*ms
				step(ingest.KindMessage, e.pack(at))
			}
		}
		step(ingest.KindBoot, []byte(`{"epoch":1}`))
		step(ingest.KindConfig, []byte("rig one"))
		play(running, 8*second)
		play(atRest, 3500*ms) // the oil is low all the time, and for 4 s only after the change
		if !b.s.RunActive || b.s.Compute.Phase.Phase != monitor.Off {
			t.Fatalf("run %v, phase %v", b.s.RunActive, b.s.Compute.Phase.Phase)
		}
		if _, early := b.alarm("oil_low"); early {
			t.Error("the oil alarm came before the change")
		}
		if restart {
			state, err := b.s.Encode(true)
			if err != nil {
				t.Fatal(err)
			}
			if b.s, err = Decode(state); err != nil {
				t.Fatal(err)
			}
			b.m = NewMachine(withDerived)
			if err := b.m.Restore(b.s); err != nil {
				t.Fatal(err)
			}
		}
		step(ingest.KindConfig, []byte("rig two"))
		play(atRest, second)
		if b.s.InForce.Hash != "two" {
			t.Fatalf("in force %+v", b.s.InForce)
		}
		a, ok := b.alarm("oil_low")
		if !ok || !strings.HasPrefix(a.Text, "low for 4.") {
			t.Errorf("alarm %v: %q", ok, a.Text)
		}
		state, err := b.s.Encode(true)
		if err != nil {
			t.Fatal(err)
		}
		return digester.String(), state
	}
	digest, state := run(false)
	for _, restart := range []bool{false, true} {
		if d, s := run(restart); d != digest || !bytes.Equal(s, state) {
			t.Errorf("restart %v: digest %s, want %s; the state is the same: %v", restart, d, digest, bytes.Equal(s, state))
		}
	}
}
