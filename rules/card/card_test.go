package card

import (
	"bytes"
	"encoding/gob"
	"encoding/json"
	"errors"
	"math"
	"reflect"
	"strings"
	"testing"

	"throatwatch/monitor"
	"throatwatch/rules"
)

const second = int64(1e9)

// The expectations here follow from the doc comments of the package; there is no published
// source for how a test card is kept.

func at(v, tolerance float64) Target {
	r := func(v float64) rules.Reading { return rules.Reading{V: v, Known: true} }
	return Target{
		Quantity: "referred_speed_rpm", Title: "Referred speed N/√θ", Unit: "rpm", Text: "92 % ± 0.3 %",
		Value: r(v), Tolerance: r(tolerance), Low: r(v - tolerance), High: r(v + tolerance),
	}
}

func above(quantity string, v float64) Target {
	return Target{Quantity: quantity, Text: "above", Low: rules.Reading{V: v, Known: true}}
}

// threePoints is a card of an unchoked, a choked and an automatic point.
func threePoints() Card {
	fuel := []Need{{Name: "fuel", Channels: []string{"fuel"}, Least: 1}}
	return Card{Title: "Choking", Number: "TC-1", Revision: "A", By: "Mara Lindqvist", Points: []Point{
		{Name: "low", Targets: []Target{at(15000, 50)}, Soak: 2, Average: 3, Needs: fuel, Choke: Disarmed},
		{Name: "choked", Targets: []Target{at(20000, 50), above("choke_margin_percent", 5)}, Soak: 2, Average: 3, Needs: fuel, Choke: Armed},
		{Name: "top", Targets: []Target{at(21000, 50)}, Soak: 1, Average: 2, Auto: true},
	}}
}

// bed plays scans of 20/s.
type bed struct {
	t    *testing.T
	s    State
	plan *Plan
	in   Input
	at   int64
}

func newBed(t *testing.T, c Card) *bed {
	t.Helper()
	b := &bed{t: t, at: 1000 * second}
	b.s.Load(c, "text", "hash", "Mara Lindqvist", b.at)
	var err error
	if b.plan, err = NewPlan(&b.s.Card, []string{"speed", "fuel"}); err != nil {
		t.Fatal(err)
	}
	b.in = Input{Scan: monitor.NewScan(2), Point: &monitor.OperatingPoint{}, Unsteady: monitor.NumQuantities, Run: true}
	b.in.Scan.Quality[1] = monitor.QualityGood
	b.in.Point.Reset()
	b.set(15000, -10, true)
	return b
}

// set says how the engine runs from here on.
func (b *bed) set(speed, margin float64, steady bool) {
	p := b.in.Point
	p.V[monitor.ReferredSpeed], p.V[monitor.ChokeMarginPercent] = speed, margin
	p.Choke = monitor.Unchoked
	if margin > 0 {
		p.Choke = monitor.Choked
	}
	p.Phase, p.Lit, p.LitKnown, p.Steady, p.NotSteady = monitor.Steady, true, true, steady, monitor.NoReason
	if !steady {
		p.NotSteady = monitor.ReasonTrend
	}
}

// play steps scans for a time and gives what they brought about.
func (b *bed) play(d int64) (all Change) {
	for end := b.at + d; b.at < end; {
		b.at += second / 20
		b.in.Scan.T = b.at
		c := b.plan.Step(&b.s, &b.in)
		if c&Complete != 0 {
			b.s.Complete("x-1", 60, 1, []Value{{Name: "npr"}}, nil)
		}
		all |= c
	}
	return all
}

// status gives the progress of all points, and which is next.
func (b *bed) status() string {
	var w []string
	for i, p := range b.s.Progress {
		text := p.Status
		if i == b.s.At {
			text += "*"
		}
		w = append(w, text)
	}
	return strings.Join(w, " ")
}

func (b *bed) expect(want string) {
	b.t.Helper()
	if got := b.status(); got != want {
		b.t.Errorf("points %q, want %q", got, want)
	}
}

// must is what is done without an error.
func (b *bed) must(err error) {
	b.t.Helper()
	if err != nil {
		b.t.Fatal(err)
	}
}

func TestStabilised(t *testing.T) {
	for _, tt := range []struct {
		name    string
		do      func(*bed)
		why     string
		words   string // of the hindrance, its beginning
		of      string // quantity or channel
		soak    float64
		off     float64 // of the first target
		offTols float64
	}{
		{"before the first scan", func(*bed) {}, NoData, "no scan", "", 0, 0, 0},
		{"at the target, in the soak", func(b *bed) { b.play(second) }, Soaking, "1.1 s of the soak", "", 1.05, 0, 0},
		{"stabilised", func(b *bed) { b.play(3 * second) }, Stabilised, "", "", 0, 0, 0},
		{
			"off the target", func(b *bed) { b.set(15100, -10, true); b.play(3 * second) }, OffTarget,
			"Referred speed N/√θ is not at 92 % ± 0.3 %: 15100 rpm, off by 100", "referred_speed_rpm", 2, 100, 2,
		},
		{"on the edge", func(b *bed) { b.set(15050, -10, true); b.play(3 * second) }, Stabilised, "", "", 0, 50, 1},
		{
			"no value", func(b *bed) { b.set(math.NaN(), -10, true); b.play(3 * second) }, OffTarget,
			"Referred speed N/√θ is not at 92 % ± 0.3 %: not known", "referred_speed_rpm", 2, 0, 0,
		},
		{"a channel bad", func(b *bed) { b.in.Scan.Quality[1] = monitor.QualityStale; b.play(3 * second) }, BadChannel, "fuel is not good", "fuel", 2, 0, 0},
		{"a scan off the target is forgiven", func(b *bed) {
			b.play(3 * second)
			b.set(15100, -10, true)
			b.play(second / 20)
		}, Stabilised, "", "", 0, 100, 2},
		{"off for longer than a second", func(b *bed) {
			b.play(3 * second)
			b.set(15100, -10, true)
			b.play(2 * second)
		}, OffTarget, "Referred speed", "referred_speed_rpm", 2, 100, 2},
		{"the soak begins anew", func(b *bed) {
			b.play(3 * second)
			b.set(15100, -10, true)
			b.play(2 * second)
			b.set(15000, -10, true)
			b.play(second)
		}, Soaking, "1.1 s", "", 1.05, 0, 0},
		{"not steady", func(b *bed) {
			b.set(15000, -10, false)
			b.in.Unsteady, b.in.Slope = monitor.RakePressure, 12
			b.play(3 * second)
		}, Unsteady, "the engine is not steady: trend of rake_pressure_pa", "rake_pressure_pa", 0, 0, 0},
		{"steadiness is not asked for", func(b *bed) {
			b.set(15000, -10, false)
			b.in.Point.NotSteady = monitor.ReasonNotConfigured
			b.play(3 * second)
		}, Stabilised, "", "", 0, 0, 0},
	} {
		b := newBed(t, threePoints())
		tt.do(b)
		n := &b.s.Now
		if n.Why != tt.why || n.Stabilised != (tt.why == Stabilised) || n.Quantity+n.Channel != tt.of || math.Abs(n.SoakLeft-tt.soak) > 1e-9 {
			t.Errorf("%s: %+v", tt.name, n)
		}
		if got := b.s.Hindrance(); !strings.HasPrefix(got, tt.words) || (got == "") != (tt.words == "") {
			t.Errorf("%s: hindrance %q, want %q", tt.name, got, tt.words)
		}
		if x := n.Targets[0]; x.Off.V != tt.off || x.OffTol.V != tt.offTols {
			t.Errorf("%s: target %+v", tt.name, x)
		}
	}
}

// Every transition of a card, and every refusal.
func TestTransitions(t *testing.T) {
	b := newBed(t, threePoints())
	b.expect("open* open open")
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	for name, err := range map[string]error{"take": b.s.Take(b.at, "Ida Holm", ""), "skip": b.s.Skip("Ida Holm", "no"), "go to": b.s.GoTo(1)} {
		if !errors.Is(err, ErrAveraging) {
			t.Errorf("%s while a point is averaged: %v", name, err)
		}
	}
	b.play(4 * second)
	b.expect("taken open* open")
	first := b.s.Taken[0]
	if first.Number != 1 || first.To-first.From != rules.Time(3*second) || len(first.Doubts) != 0 || first.By != "Ida Holm" || first.Card != "TC-1 A" {
		t.Errorf("taken %+v", first)
	}

	// A reject opens it again, and it is next; a retake has another number.
	if _, err := b.s.Judge(1, false, "Mara Lindqvist", "", 5); !errors.Is(err, ErrReason) {
		t.Errorf("a reject without a reason: %v", err)
	}
	if _, err := b.s.Judge(7, true, "Mara Lindqvist", "", 5); !errors.Is(err, ErrNoNumber) {
		t.Errorf("a number that was not given: %v", err)
	}
	if _, err := b.s.Judge(1, false, "Mara Lindqvist", "valve moved", 5); err != nil {
		t.Fatal(err)
	}
	b.expect("open* open open")
	if _, err := b.s.Judge(1, false, "Mara Lindqvist", "again", 6); !errors.Is(err, ErrJudged) {
		t.Errorf("a second reject: %v", err)
	}
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	b.play(4 * second)
	if _, err := b.s.Judge(2, true, "Mara Lindqvist", "", 7); err != nil {
		t.Fatal(err)
	}
	b.expect("accepted open* open")
	if got := b.s.Progress[0].Numbers; !reflect.DeepEqual(got, []uint64{1, 2}) || b.s.Taken[0].Reason != "valve moved" || b.s.Taken[0].JudgedBy != "Mara Lindqvist" {
		t.Errorf("numbers %v, taken %+v", got, b.s.Taken[0])
	}

	// The third is taken by itself, in any order.
	if err := b.s.GoTo(3); !errors.Is(err, ErrNoPoint) {
		t.Errorf("point 4 of 3: %v", err)
	}
	b.must(b.s.GoTo(2))
	b.set(21000, 10, true)
	if got := b.play(4 * second); got != Began|Complete {
		t.Errorf("an automatic point brought about %b", got)
	}
	b.expect("accepted open* taken")
	if k := b.s.Taken[2]; !k.Auto || k.By != "" || k.Number != 3 {
		t.Errorf("taken by itself: %+v", k)
	}

	// A skip needs a reason; a skipped point can be gone back to.
	if err := b.s.Skip("Ida Holm", ""); !errors.Is(err, ErrReason) {
		t.Errorf("a skip without a reason: %v", err)
	}
	b.must(b.s.Skip("Ida Holm", "no time left"))
	if b.expect("accepted skipped taken"); b.s.At != -1 || b.s.Progress[1].Reason != "no time left" {
		t.Errorf("next %d, %+v", b.s.At, b.s.Progress[1])
	}
	for name, err := range map[string]error{"take": b.s.Take(b.at, "Ida Holm", ""), "skip": b.s.Skip("Ida Holm", "no")} {
		if !errors.Is(err, ErrDone) {
			t.Errorf("%s on a card that is through: %v", name, err)
		}
	}
	b.must(b.s.GoTo(1))
	b.expect("accepted open* taken")

	// Of two that were taken of a point the accepted one stands.
	b.must(b.s.GoTo(0))
	b.set(15000, -10, true)
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	b.play(4 * second)
	if _, err := b.s.Judge(4, false, "Mara Lindqvist", "drift", 9); err != nil {
		t.Fatal(err)
	}
	b.expect("accepted open* taken")

	var none State
	for name, err := range map[string]error{"take": none.Take(0, "", ""), "skip": none.Skip("", "x"), "go to": none.GoTo(0)} {
		if !errors.Is(err, ErrNone) {
			t.Errorf("%s without a card: %v", name, err)
		}
	}
}

// A point that nobody waits for is broken off and begun again; one that a person takes
// goes on, with a doubt.
func TestLostWhileAveraging(t *testing.T) {
	b := newBed(t, threePoints())
	b.must(b.s.GoTo(2))
	b.set(21000, 10, true)
	b.play(2 * second)
	b.set(21000, 10, false)
	if got := b.play(second); got != Broke || b.s.Average.On || len(b.s.Taken) != 0 || b.s.Last != 0 {
		t.Errorf("brought about %b: %+v", got, b.s)
	}
	b.set(21000, 10, true)
	if got := b.play(3 * second); got != Began|Complete || b.s.Last != 1 {
		t.Errorf("then %b, number %d", got, b.s.Last)
	}

	b.must(b.s.GoTo(0))
	b.set(15000, -10, false)
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", "as the customer asks"))
	b.set(15500, -10, true)
	b.play(4 * second)
	k := b.s.Taken[1]
	if len(k.Doubts) != 1 || k.Doubts[0] != "taken though not stabilised: the engine is not steady: trend (as the customer asks)" {
		t.Errorf("doubts %q", k.Doubts)
	}
	b.must(b.s.GoTo(0))
	b.set(15000, -10, true)
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	b.set(15500, -10, true)
	b.play(4 * second)
	if k := b.s.Taken[2]; len(k.Doubts) != 1 || !strings.HasPrefix(k.Doubts[0], "stabilised no longer while it was averaged: ") {
		t.Errorf("doubts %q", k.Doubts)
	}
}

// Without a run nothing is taken by itself.
func TestNoRun(t *testing.T) {
	b := newBed(t, threePoints())
	b.must(b.s.GoTo(2))
	b.set(21000, 10, true)
	b.in.Run = false
	if got := b.play(5 * second); got != 0 || !b.s.Now.Stabilised {
		t.Errorf("brought about %b", got)
	}
}

// What a card says of the throat: nothing before the point is reached, nothing at idle.
func TestArming(t *testing.T) {
	b := newBed(t, threePoints())
	b.play(second)
	if got := b.s.Choke(); got != Disarmed {
		t.Errorf("at a point below choking %q", got)
	}
	b.must(b.s.Skip("Ida Holm", "test"))
	for _, tt := range []struct {
		name          string
		speed, margin float64
		phase         monitor.Phase
		lit           bool
		want          string
	}{
		{"on the way", 17000, -8, monitor.Accelerating, true, ""},
		{"at its speed and unchoked", 20000, -1, monitor.Steady, true, Armed},
		{"speed lost, unchoked", 18000, -5, monitor.Decelerating, true, Armed},
		{"back to idle", 9500, -50, monitor.Idle, true, ""},
		{"choked before its speed", 19000, 1, monitor.Accelerating, true, Armed},
		{"flame-out", 19000, -50, monitor.Decelerating, false, ""},
	} {
		b.set(tt.speed, tt.margin, true)
		b.in.Point.Phase, b.in.Point.Lit = tt.phase, tt.lit
		b.play(second / 10)
		if got := b.s.Choke(); got != tt.want || b.s.Now.Armed != (tt.want == Armed) {
			t.Errorf("%s: %q, want %q", tt.name, got, tt.want)
		}
	}
	b.must(b.s.GoTo(2))
	b.set(21000, 10, true)
	b.play(second / 10)
	if got := b.s.Choke(); got != "" {
		t.Errorf("a point that says nothing: %q", got)
	}
}

// Another revision keeps what was done for the points that are the same.
func TestSupersede(t *testing.T) {
	b := newBed(t, threePoints())
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	b.play(4 * second)
	b.must(b.s.Take(b.at, "Ida Holm", "test"))
	next := threePoints()
	next.Revision = "B"
	next.Points[1].Soak = 9
	b.s.Load(next, "text", "hash", "Mara Lindqvist", b.at)
	if b.expect("taken open* open"); b.s.Average.On || b.s.Last != 1 || b.s.Taken[0].Card != "TC-1 A" || b.s.Loads != 2 {
		t.Errorf("%+v", b.s)
	}
	next.Number = "TC-2"
	b.s.Load(next, "text", "hash", "Mara Lindqvist", b.at)
	b.expect("open* open open")
	if _, err := b.s.Judge(1, true, "Mara Lindqvist", "", 5); err != nil || b.s.Taken[0].Status != Accepted {
		t.Errorf("a point of another card: %v", err)
	}
	b.expect("open* open open")
}

// The state holds a bounded number of points, and numbers go on.
func TestNumbersGoOn(t *testing.T) {
	b := newBed(t, threePoints())
	for range takenKept + 5 {
		b.must(b.s.GoTo(0))
		b.must(b.s.Take(b.at, "Ida Holm", "again"))
		b.play(4 * second)
	}
	if n := len(b.s.Taken); n != takenKept || b.s.Taken[n-1].Number != takenKept+5 {
		t.Errorf("%d points, the last %d", n, b.s.Taken[n-1].Number)
	}
}

func TestRefusedCards(t *testing.T) {
	for _, tt := range []struct {
		name string
		do   func(*Card)
		want error
	}{
		{"no points", func(c *Card) { c.Points = nil }, ErrCard},
		{"unknown quantity", func(c *Card) { c.Points[0].Targets[0].Quantity = "nrp" }, ErrUnknown},
		{"unknown channel", func(c *Card) { c.Points[0].Targets[0].Quantity = "channel.x" }, ErrUnknown},
		{"unknown need", func(c *Card) { c.Points[0].Needs[0].Channels[0] = "x" }, ErrUnknown},
		{"no targets", func(c *Card) { c.Points[0].Targets = nil }, ErrCard},
		{"no bounds", func(c *Card) { c.Points[0].Targets[0] = Target{Quantity: "npr"} }, ErrCard},
		{"no tolerance", func(c *Card) { c.Points[0].Targets[0].Tolerance = rules.Reading{} }, ErrCard},
		{"bounds that exclude", func(c *Card) { c.Points[0].Targets[0].Low.V = 1e6 }, ErrCard},
		{"no averaging", func(c *Card) { c.Points[0].Average = 0 }, ErrCard},
		{"averaging without an end", func(c *Card) { c.Points[0].Average = math.Inf(1) }, ErrCard},
		{"a soak of no time", func(c *Card) { c.Points[0].Soak = math.NaN() }, ErrCard},
		{"an odd expectation", func(c *Card) { c.Points[0].Choke = "yes" }, ErrCard},
	} {
		c := threePoints()
		tt.do(&c)
		if _, err := NewPlan(&c, []string{"speed", "fuel"}); !errors.Is(err, tt.want) {
			t.Errorf("%s: %v, want %v", tt.name, err, tt.want)
		}
	}
}

func TestStateSurvivesEncoding(t *testing.T) {
	b := newBed(t, threePoints())
	b.play(3 * second)
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	b.play(second)
	var buf bytes.Buffer
	if err := gob.NewEncoder(&buf).Encode(&b.s); err != nil {
		t.Fatal(err)
	}
	other := &bed{t: t, plan: b.plan, in: b.in, at: b.at}
	if err := gob.NewDecoder(&buf).Decode(&other.s); err != nil {
		t.Fatal(err)
	}
	b.play(3 * second)
	other.play(3 * second)
	one, err := json.Marshal(b.s.Shown(true))
	if err != nil {
		t.Fatal(err)
	}
	two, err := json.Marshal(other.s.Shown(true))
	if err != nil || !bytes.Contains(two, []byte(`"number":1,"point":0,"name":"low"`)) {
		t.Fatalf("%v: %s", err, two)
	}
	if !bytes.Equal(one, two) {
		t.Errorf("\n%s\n%s", one, two)
	}
}

func TestStepDoesNotAllocate(t *testing.T) {
	b := newBed(t, threePoints())
	b.must(b.s.GoTo(1))
	b.set(20000, 10, false)
	if n := testing.AllocsPerRun(1000, func() { b.play(second / 20) }); n != 0 {
		t.Errorf("%g allocations per scan", n)
	}
	b.must(b.s.Take(b.at, "Ida Holm", ""))
	b.s.Average.To += 1000 * second
	b.s.Average.Doubts = []string{"one"}
	if n := testing.AllocsPerRun(1000, func() { b.play(second / 20) }); n != 0 {
		t.Errorf("%g allocations per scan while a point is averaged", n)
	}
}
