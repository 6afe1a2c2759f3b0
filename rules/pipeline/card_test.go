package pipeline

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/card"
)

// fivePoints is a card for the small rig: two points below choking, three above, the
// fourth taken by itself.
func fivePoints() card.Card {
	r := func(v float64) rules.Reading { return rules.Reading{V: v, Known: true} }
	at := func(rpm float64) card.Target {
		return card.Target{Quantity: "speed_rpm", Unit: "rpm", Text: fmt.Sprintf("%g rpm ± 50 rpm", rpm), Value: r(rpm), Tolerance: r(50), Low: r(rpm - 50), High: r(rpm + 50)}
	}
	margin := card.Target{Quantity: "choke_margin_percent", Unit: "%", Text: "above 5 %", Low: r(5)}
	oil := []card.Need{{Name: "p_oil", Channels: []string{"p_oil"}, Least: 1}}
	pt := func(name string, rpm float64, choke string, more ...card.Target) card.Point {
		return card.Point{Name: name, Targets: append([]card.Target{at(rpm)}, more...), Soak: 2, Average: 3, Needs: oil, Choke: choke}
	}
	c := card.Card{Title: "Choking", Number: "TC-1", Revision: "A", By: "Mara Lindqvist", For: "ML5-0042", Points: []card.Point{
		pt("one", 12000, card.Disarmed), pt("two", 14000, card.Disarmed), pt("three", 18000, card.Armed, margin),
		pt("four", 20000, "", margin), pt("five", 21000, card.Armed, margin),
	}}
	c.Points[3].Auto = true
	return c
}

// The engine at the points of the card.
var (
	pointOne   = engine{150e3, 850, 880, 101e3, 12000, 400}
	pointTwo   = engine{170e3, 850, 880, 101e3, 14000, 400}
	pointThree = engine{215e3, 860, 890, 101e3, 18000, 400}
	pointFour  = engine{225e3, 870, 900, 101e3, 20000, 400}
	pointFive  = engine{235e3, 880, 910, 101e3, 21000, 400}
)

func engineer(a Action) Action { a.By, a.Role = "Mara Lindqvist", "engineer"; return a }
func operator(a Action) Action { a.By, a.Role = "Ida Holm", "operator"; return a }

func loadCard(b *bed, c card.Card) {
	b.tb.Helper()
	if err := b.act(engineer(Action{Do: DoCardLoad, Card: &c, CardText: "text", CardHash: "hash"})); err != nil {
		b.tb.Fatal(err)
	}
}

// started is a bed with an engine at idle and a card.
func started(tb testing.TB) *bed {
	tb.Helper()
	b := newBed(tb)
	b.play(atRest, 3*second)
	loadCard(b, fivePoints())
	b.play(turning, 3*second)
	b.play(idling, 8*second)
	return b
}

func progress(b *bed) string {
	var w []string
	for i, p := range b.s.Card.Progress {
		text := p.Status
		if i == b.s.Card.At {
			text += "*"
		}
		w = append(w, text)
	}
	return strings.Join(w, " ")
}

// take takes the current point by hand.
func take(b *bed, e engine) {
	b.tb.Helper()
	b.play(e, 8*second)
	if err := b.act(operator(Action{Do: "take"})); err != nil {
		b.tb.Fatal(err)
	}
	b.play(e, 4*second)
}

// cardDay takes five points: one is rejected and retaken, one is taken by itself. The
// same is done again by a replay, and number and card survive a restart.
func cardDay(tb testing.TB) *bed {
	tb.Helper()
	b := started(tb)
	take(b, pointOne)
	if err := b.act(engineer(Action{Do: "reject", Number: 1, Reason: "valve moved"})); err != nil {
		tb.Fatal(err)
	}
	take(b, pointOne)
	for _, n := range []uint64{2} {
		if err := b.act(engineer(Action{Do: "accept", Number: n})); err != nil {
			tb.Fatal(err)
		}
	}
	take(b, pointTwo)
	take(b, pointThree)
	b.play(pointFour, 15*second)
	take(b, pointFive)
	return b
}

func TestCardDay(t *testing.T) {
	b := cardDay(t)
	if got := progress(b); got != "accepted taken taken taken taken" {
		t.Errorf("points %q", got)
	}
	b.expect(OutcomeCardPoint, "1 taken, 1 rejected, 2 taken, 2 accepted, 3 taken, 4 taken, 5 taken, 6 taken")
	want := []struct {
		rpm  float64
		auto bool
	}{{12000, false}, {12000, false}, {14000, false}, {18000, false}, {20000, true}, {21000, false}}
	for i, k := range b.s.Card.Taken {
		if k.Number != uint64(i+1) || k.Auto != want[i].auto || k.Run != b.s.Run.ID || k.Card != "TC-1 A" || k.Scans != 60 || int64(k.To-k.From) != 3*second {
			t.Errorf("taken %+v", k)
		}
		for _, v := range k.Values {
			if v.Name == "speed_rpm" && math.Abs(v.Value.V-want[i].rpm) > 1e-6 {
				t.Errorf("point %d: speed %+v, want %g", k.Number, v, want[i].rpm)
			}
		}
		if n := len(k.Values); n < 8 {
			t.Errorf("point %d has %d values", k.Number, n)
		}
	}
	if got := b.told(OutcomeLog); got != "card_load by Mara Lindqvist, take by Ida Holm, reject by Mara Lindqvist, take by Ida Holm, accept by Mara Lindqvist, take by Ida Holm, take by Ida Holm, take by Ida Holm" {
		t.Errorf("log %q", got)
	}

	// A replay does the same, from the beginning and from a checkpoint in the middle of an
	// average.
	digest := func(s *State, from int) (string, *State) {
		m, d := NewMachine(parser(t)), NewDigest()
		if err := m.Restore(s); err != nil {
			t.Fatal(err)
		}
		for i := from; i < len(b.records); i++ {
			outs := m.Step(s, &b.records[i])
			for k := range outs {
				d.Add(&outs[k])
			}
			if from == 0 && s.Card.Average.On && s.Gathering.Scans == 30 {
				state, err := s.Encode(true)
				if err != nil {
					t.Fatal(err)
				}
				digestOfRest, err := d.MarshalBinary()
				if err != nil {
					t.Fatal(err)
				}
				half, err := Decode(state)
				if err != nil {
					t.Fatal(err)
				}
				rest := NewDigest()
				if err := rest.UnmarshalBinary(digestOfRest); err != nil {
					t.Fatal(err)
				}
				other := NewMachine(parser(t))
				if err := other.Restore(half); err != nil {
					t.Fatal(err)
				}
				for j := i + 1; j < min(i+200, len(b.records)); j++ {
					other.Step(half, &b.records[j])
				}
				if n := len(half.Card.Taken); n == 0 || half.Card.Taken[n-1].Scans != 60 {
					t.Errorf("from a checkpoint in an average: %+v", half.Card.Taken)
				}
			}
		}
		return d.String(), s
	}
	one, s := digest(&State{}, 0)
	two, _ := digest(&State{}, 0)
	a, err := json.Marshal(s.Card.Shown(true))
	if err != nil {
		t.Fatal(err)
	}
	c, err := json.Marshal(b.s.Card.Shown(true))
	if err != nil || one != two || string(a) != string(c) {
		t.Errorf("%v: another card by replay:\n%s\n%s", err, a, c)
	}

	// Numbers go on behind a restart.
	state, err := b.s.Encode(true)
	if err != nil {
		t.Fatal(err)
	}
	if b.s, err = Decode(state); err != nil {
		t.Fatal(err)
	}
	b.m = NewMachine(parser(t))
	if err := b.m.Restore(b.s); err != nil {
		t.Fatal(err)
	}
	b.record(ingest.KindBoot, `{"epoch":2}`)
	b.record(ingest.KindConfig, "rig one")
	if err := b.act(operator(Action{Do: "go-to-point", Point: 5})); err != nil {
		t.Fatal(err)
	}
	take(b, pointFive)
	if k := b.s.Card.Taken[6]; k.Number != 7 || k.Point != 4 {
		t.Errorf("after a restart: %+v", k)
	}
}

// What is refused changes nothing and is no entry of the log.
func TestCardRefused(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 3*second)
	for _, a := range []Action{{Do: "take"}, {Do: "skip", Reason: "x"}, {Do: "accept", Number: 1}, {Do: "go-to-point", Point: 1}} {
		if err := b.act(engineer(a)); !errors.Is(err, card.ErrNone) {
			t.Errorf("%s without a card: %v", a.Do, err)
		}
	}
	c, other, odd, short := fivePoints(), fivePoints(), fivePoints(), fivePoints()
	other.For = "ML5-0099"
	odd.Points[1].Targets[0].Quantity = "nrp"
	short.Points[1].Average = 0.1
	for _, tt := range []struct {
		name string
		do   Action
		want error
	}{
		{"a load by an operator", operator(Action{Do: DoCardLoad, Card: &c}), rules.ErrRefused},
		{"a load of nothing", engineer(Action{Do: DoCardLoad}), ErrInvalid},
		{"a card for another engine", engineer(Action{Do: DoCardLoad, Card: &other}), ErrCard},
		{"an unknown quantity", engineer(Action{Do: DoCardLoad, Card: &odd}), card.ErrUnknown},
		{"a short average", engineer(Action{Do: DoCardLoad, Card: &short}), ErrCard},
	} {
		if err := b.act(tt.do); !errors.Is(err, tt.want) {
			t.Errorf("%s: %v", tt.name, err)
		}
	}
	loadCard(b, c)
	for _, tt := range []struct {
		name string
		do   Action
		want error
	}{
		{"a take without a run", operator(Action{Do: "take"}), ErrNoRun},
		{"an accept by an operator", operator(Action{Do: "accept", Number: 1}), rules.ErrRefused},
		{"an accept of nothing", engineer(Action{Do: "accept", Number: 1}), card.ErrNoNumber},
		{"a skip without a reason", operator(Action{Do: "skip"}), card.ErrReason},
		{"point 9", operator(Action{Do: "go-to-point", Point: 9}), card.ErrNoPoint},
	} {
		if err := b.act(tt.do); !errors.Is(err, tt.want) {
			t.Errorf("%s: %v", tt.name, err)
		}
	}
	b.expect(OutcomeLog, "card_load by Mara Lindqvist")
}

// A run that ends breaks off what is averaged.
func TestCardBroken(t *testing.T) {
	b := started(t)
	b.play(pointOne, 8*second)
	if err := b.act(operator(Action{Do: "take"})); err != nil {
		t.Fatal(err)
	}
	b.play(pointOne, second)
	if err := b.act(operator(Action{Do: DoRunEnd})); err != nil {
		t.Fatal(err)
	}
	if b.s.Card.Average.On || len(b.s.Card.Taken) != 0 || len(b.s.Gathering.Pasts) != 0 {
		t.Errorf("after the end of the run: %+v", b.s.Card)
	}
}

// A configuration that the card does not fit puts it out of use, and says why; it is of
// use again when it fits.
func TestCardUnfit(t *testing.T) {
	b := &bed{tb: t, m: NewMachine(func(bundle []byte) (Config, error) {
		cfg := rig(t)
		cfg.Hash = string(bundle)
		if cfg.Hash == "another engine" {
			cfg.Rig.EngineSerial = "ML5-0099"
		}
		return cfg, nil
	}), s: &State{}, r: ingest.Record{Host: epoch - second}}
	b.record(ingest.KindBoot, `{"epoch":1}`)
	b.record(ingest.KindConfig, "one")
	b.play(atRest, 3*second)
	loadCard(b, fivePoints())
	for _, tt := range []struct {
		bundle string
		unfit  bool
	}{{"another engine", true}, {"one", false}} {
		b.record(ingest.KindConfig, tt.bundle)
		b.play(atRest, second)
		if unfit := strings.Contains(b.s.Card.Unfit, "ML5-0099"); unfit != tt.unfit || unfit == (b.m.plan(b.s) != nil) {
			t.Errorf("on %s: unfit %q", tt.bundle, b.s.Card.Unfit)
		}
		if err := b.act(operator(Action{Do: "skip", Reason: "test"})); (err != nil) != tt.unfit {
			t.Errorf("a skip on %s: %v", tt.bundle, err)
		}
	}
}

// The unchoke alarm rises only while choke is armed, by the speed rule or by the card, and
// says which.
func TestCardArms(t *testing.T) {
	unchoke := rules.Rule{
		Name: "unchoke", When: `choke_armed and choke_state != "choked"`, Priority: rules.Caution, OnDelay: 300 * ms, OffDelay: second,
		Title: "Throat unchoked", Text: "Not choked, expected by the {choke_armed_by}", Caution: "watch it", Response: "the facility's procedure",
	}
	b := &bed{tb: t, m: NewMachine(func([]byte) (Config, error) {
		cfg := rig(t)
		cfg.Rules = append(cfg.Rules, unchoke)
		return cfg, nil
	}), s: &State{}, r: ingest.Record{Host: epoch - second}}
	b.record(ingest.KindBoot, `{"epoch":1}`)
	b.record(ingest.KindConfig, "rig one")
	b.play(atRest, 3*second)
	loadCard(b, fivePoints())
	b.play(turning, 3*second)
	b.play(idling, 8*second)
	low := func(rpm float64) engine { return engine{150e3, 860, 890, 101e3, rpm, 400} }
	for _, tt := range []struct {
		name  string
		point int
		e     engine
		by    monitor.ArmedBy
		armed bool
		text  string // of the alarm; "" = none
	}{
		{"below choking, at a speed above the rule's, disarmed by the card", 1, low(20500), monitor.ByCard, false, ""},
		{"no word of the card, below the rule's speed", 4, low(15000), monitor.ByNobody, false, ""},
		{"no word of the card, above the rule's speed", 4, low(20500), monitor.BySpeed, true, "Not choked, expected by the speed rule"},
		{"armed by the card, not there yet", 3, low(15000), monitor.ByNobody, false, ""},
		{"armed by the card, there", 3, low(18000), monitor.ByCard, true, "Not choked, expected by the test card"},
		{"choked there", 3, pointThree, monitor.ByCard, true, ""},
		{"lost again", 3, low(17000), monitor.ByCard, true, "Not choked, expected by the test card"},
		{"back at idle", 3, idling, monitor.ByNobody, false, ""},
	} {
		if b.s.Card.At != tt.point-1 {
			if err := b.act(operator(Action{Do: "go-to-point", Point: tt.point})); err != nil {
				t.Fatal(err)
			}
		}
		b.play(tt.e, 8*second)
		p := b.point()
		if p.ChokeArmed != tt.armed || p.ArmedBy != tt.by {
			t.Errorf("%s: armed %v by %q", tt.name, p.ChokeArmed, p.ArmedBy)
		}
		text := ""
		if a, ok := b.alarm("unchoke"); ok && a.State != rules.AlarmState(alarm.ReturnedUnacknowledged) {
			text = a.Text
		}
		if text != tt.text {
			t.Errorf("%s: alarm %q, want %q", tt.name, text, tt.text)
		}
	}
}

// With a card in force the scan path allocates nothing.
func TestCardAllocates(t *testing.T) {
	b, next := warmed(t)
	b.s.Card.Load(fivePoints(), "text", "hash", "Mara Lindqvist", b.s.Host)
	if err := b.s.Card.GoTo(4); err != nil {
		t.Fatal(err)
	}
	got := math.Inf(1)
	for range 100 {
		next()
	}
	for tries := 0; tries < 3 && got > 0; tries++ {
		got = min(got, testing.AllocsPerRun(200, next))
	}
	if got != 0 || b.s.Card.Now.T == 0 {
		t.Errorf("%g allocations per message", got)
	}
}
