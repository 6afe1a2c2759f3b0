package phase_test

import (
	"bytes"
	"encoding/gob"
	"fmt"
	"math"
	"math/rand/v2"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/monitor"
	"throatwatch/monitor/phase"
)

const (
	s    = int64(time.Second)
	scan = 50 * int64(time.Millisecond)
)

var missing = math.NaN()

// rig is an invented small turbojet: 22 000 rpm, idle 9500 rpm.
func rig() *phase.Config {
	return &phase.Config{
		Turning: 300, Idle: 9500, IdleBand: 300, Max: 22000,
		LitEGT: 520, LitRise: 60, MoveRate: 60, SteadyAfter: 5 * s, CoolEGT: 370, OffAfter: 3 * s,
	}
}

// A leg goes in a straight line from where the last one ended to speed n and
// EGT in d seconds.
type leg struct {
	d, n, egt float64
}

// fly runs the legs and lists the phases in order, each with the lit flag.
func fly(c *phase.Config, from leg, legs []leg, noise float64) (string, *phase.State) {
	r := rand.New(rand.NewPCG(1, 1))
	st, t := &phase.State{}, 1000*s
	var seen []string
	at := from
	for _, l := range legs {
		steps := int(math.Round(l.d * 20))
		for i := 1; i <= steps; i++ {
			x := float64(i) / float64(steps)
			n, egt := at.n+(l.n-at.n)*x, at.egt+(l.egt-at.egt)*x
			if n > 0 {
				n += noise * r.NormFloat64()
			}
			egt += noise / 10 * r.NormFloat64()
			name := c.Step(st, t, n, egt).String()
			if st.Lit {
				name += "*"
			}
			if len(seen) == 0 || seen[len(seen)-1] != name {
				seen = append(seen, name)
			}
			t += scan
		}
		at = l
		if math.IsNaN(at.n) {
			at.n = 0
		}
	}
	return strings.Join(seen, " "), st
}

var start = []leg{
	{3, 0, 290}, {6, 2500, 290}, {4, 2800, 290}, // crank
	{1, 3000, 700}, {12, 9400, 800}, {4, 9500, 720}, {15, 9500, 700}, // light off, idle
}

func TestPhases(t *testing.T) {
	// Expectations are the definitions of the phases in Config and Step; * = lit.
	tests := []struct {
		name string
		legs []leg
		want string
	}{
		{"at rest and cool", []leg{{10, 0, 290}}, "off"},
		{"a start", start, "off cranking lighting* idle*"},
		{
			"to power and back",
			append(slices.Clip(start), leg{8, 20000, 950}, leg{20, 20000, 930}, leg{6, 9500, 700}, leg{10, 9500, 700}),
			"off cranking lighting* idle* accelerating* steady* decelerating* idle*",
		},
		{
			"two steady points",
			append(slices.Clip(start), leg{4, 15000, 800}, leg{10, 15000, 790}, leg{3, 18000, 880}, leg{10, 18000, 870}),
			"off cranking lighting* idle* accelerating* steady* accelerating* steady*",
		},
		{
			"shutdown, rundown, cooling, off",
			append(slices.Clip(start), leg{20, 1000, 480}, leg{10, 0, 450}, leg{60, 0, 360}, leg{10, 0, 330}),
			"off cranking lighting* idle* rundown* rundown cooling off",
		},
		{
			"a dry crank",
			[]leg{{3, 0, 290}, {5, 2500, 290}, {10, 2500, 290}, {15, 0, 290}, {5, 0, 290}},
			"off cranking rundown cooling off",
		},
		{
			// 560 K is above LitEGT: the flame is the rise from the lowest EGT, not the heat that is left.
			"a start with a hot tail pipe",
			[]leg{{3, 0, 560}, {6, 2500, 540}, {4, 2800, 530}, {1, 3000, 700}, {12, 9400, 800}, {20, 9500, 700}},
			"cooling cranking lighting* idle*",
		},
		{
			"heat that soaks back is no flame",
			append(slices.Clip(start), leg{20, 1000, 480}, leg{5, 400, 560}, leg{5, 0, 600}, leg{5, 0, 600}),
			"off cranking lighting* idle* rundown* rundown cooling",
		},
		{
			"a relight in rundown",
			append(slices.Clip(start), leg{10, 4000, 480}, leg{10, 4000, 460}, leg{3, 5000, 700}, leg{10, 9500, 750}, leg{5, 9500, 700}),
			// The rotor picks up speed before the EGT has risen by LitRise.
			"off cranking lighting* idle* rundown* rundown cranking lighting* idle*",
		},
		{
			"a flame-out above idle",
			append(slices.Clip(start), leg{8, 20000, 950}, leg{10, 20000, 930}, leg{2, 14000, 480}, leg{5, 4000, 470}),
			"off cranking lighting* idle* accelerating* steady* decelerating* decelerating rundown",
		},
		{
			"speed lost at power",
			append(slices.Clip(start), leg{8, 20000, 950}, leg{10, 20000, 930}, leg{0, 20000, 930}, leg{3, missing, 930}),
			"off cranking lighting* idle* accelerating* steady* unknown*",
		},
		{
			"EGT lost while running: the last finding of the flame stands",
			append(slices.Clip(start), leg{5, 9500, missing}),
			"off cranking lighting* idle*",
		},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			if got, _ := fly(rig(), leg{0, tt.legs[0].n, tt.legs[0].egt}, tt.legs, 0); got != tt.want {
				t.Errorf("got  %s\nwant %s", got, tt.want)
			}
			// Noise of 10 rpm and 1 K, as good pickups show, adds no phase.
			if got, _ := fly(rig(), leg{0, tt.legs[0].n, tt.legs[0].egt}, tt.legs, 10); got != tt.want {
				t.Errorf("with noise: got  %s\nwant %s", got, tt.want)
			}
		})
	}
}

func TestStartOfWatchInTheMiddle(t *testing.T) {
	tests := []struct {
		name string
		n    float64
		egt  float64
		rate float64
		want string
	}{
		{"at idle", 9500, 700, 0, "idle*"},
		{"steady at power", 18000, 870, 0, "unknown* steady*"},
		{"accelerating", 12000, 800, 500, "unknown* accelerating*"},
		{"running down", 8000, 480, -400, "unknown rundown"},
		{"cooling", 0, 500, 0, "cooling"},
		{"no EGT at rest", 0, missing, 0, "unknown"},
	}
	for _, tt := range tests {
		got, _ := fly(rig(), leg{0, tt.n, tt.egt}, []leg{{10, tt.n + 10*tt.rate, tt.egt}}, 0)
		if got != tt.want {
			t.Errorf("%s: got %q, want %q", tt.name, got, tt.want)
		}
	}
}

func TestReturnOfSpeed(t *testing.T) {
	c, st := rig(), &phase.State{}
	at := int64(0)
	step := func(n float64, d int64) (p monitor.Phase) {
		for end := at + d; at < end; at += scan {
			p = c.Step(st, at, n, 870)
		}
		return p
	}
	step(18000, 10*s)
	if p := step(missing, scan); p != monitor.PhaseUnknown || !math.IsNaN(st.Rate()) {
		t.Errorf("without speed: %v, rate %g", p, st.Rate())
	}
	if p := step(18000, s); p != monitor.PhaseUnknown {
		t.Errorf("1 s after: %v, want unknown until the rate is known again", p)
	}
	if p := step(18000, s); p != monitor.Steady {
		t.Errorf("2 s after: %v, want steady", p)
	}
}

func TestRate(t *testing.T) {
	// On a ramp the filter of first degree has no lasting error (its order); the
	// bound on noise is the variance of a fading-memory filter of first degree,
	// σ_rate = σ √(2 (1−θ)³/(1+θ)³)/Δt [Morrison, Introduction to Sequential
	// Smoothing and Prediction, 1969, ch. 13].
	c, r := rig(), rand.New(rand.NewPCG(2, 3))
	for _, noise := range []float64{0, 10} {
		st := &phase.State{}
		sum, sq, n := 0.0, 0.0, 0.0
		for i := range 20000 {
			at := int64(i) * scan
			c.Step(st, at, 1000+0.5*float64(at)/1e9+noise*r.NormFloat64(), 300)
			if i > 400 {
				d := st.Rate() - 0.5
				sum, sq, n = sum+d, sq+d*d, n+1
			}
		}
		theta := math.Exp(-0.1)
		bound := noise * math.Sqrt(2*(1-theta)/(1+theta)*((1-theta)/(1+theta))*((1-theta)/(1+theta))) / 0.05
		if mean, sd := sum/n, math.Sqrt(sq/n); math.Abs(mean) > 1e-6+bound/10 || math.Abs(sd-bound) > 1e-6+0.1*bound {
			t.Errorf("noise %g rpm: rate error %g ± %g, want 0 ± %g rpm/s", noise, mean, sd, bound)
		}
	}
}

// TestNoFlutter holds each quantity on a threshold in noise: phases may not
// follow the noise.
func TestNoFlutter(t *testing.T) {
	tests := []struct {
		name  string
		legs  []leg
		flips int // of the phase, over 100 s
	}{
		{"speed at the edge of idle", append(slices.Clip(start), leg{5, 9800, 700}, leg{100, 9800, 700}), 2},
		{"EGT at the light-off threshold", []leg{{3, 0, 290}, {6, 2500, 290}, {4, 2800, 350}, {100, 2800, 350}}, 1},
		{"EGT at the cool threshold, at rest", []leg{{100, 0, 370}}, 3},
	}
	for _, tt := range tests {
		seen, _ := fly(rig(), leg{0, tt.legs[0].n, tt.legs[0].egt}, tt.legs, 20)
		before, _ := fly(rig(), leg{0, tt.legs[0].n, tt.legs[0].egt}, tt.legs[:len(tt.legs)-1], 20)
		if n := len(strings.Fields(seen)) - len(strings.Fields(before)); n > tt.flips {
			t.Errorf("%s: %d changes, want at most %d: %s", tt.name, n, tt.flips, seen)
		}
	}
}

func TestStateSurvivesEncoding(t *testing.T) {
	_, st := fly(rig(), leg{0, 0, 290}, start, 10)
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(st); err != nil {
		t.Fatal(err)
	}
	var got phase.State
	if err := gob.NewDecoder(&b).Decode(&got); err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(&got, st) {
		t.Errorf("got %+v, want %+v", got, *st)
	}
}

func TestStepDoesNotAllocate(t *testing.T) {
	c, st, at := rig(), &phase.State{}, int64(0)
	if n := testing.AllocsPerRun(1000, func() {
		at += scan
		c.Step(st, at, float64(at%7000), 600)
	}); n != 0 {
		t.Errorf("%g allocations per step, want 0", n)
	}
}

func BenchmarkStep(b *testing.B) {
	c, st := rig(), &phase.State{}
	speeds := []float64{9500, 9510, 9490, 12000, 12100, 12080, 18000, 17990}
	b.ReportAllocs()
	at, sink := int64(0), 0
	for b.Loop() {
		sink += int(c.Step(st, at, speeds[at/scan&7], 700))
		at += scan
	}
	if sink == 0 {
		b.Error("no phase")
	}
}

func ExampleConfig_Step() {
	c := &phase.Config{Turning: 300, Idle: 9500, IdleBand: 300, LitEGT: 520, MoveRate: 60, CoolEGT: 370}
	var st phase.State
	fmt.Println(c.Step(&st, 0, 0, 290), c.Step(&st, 50e6, 9450, 700), st.Lit)
	// Output: off idle true
}
