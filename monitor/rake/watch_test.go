package rake

import (
	"bytes"
	"encoding/gob"
	"errors"
	"flag"
	"math"
	"math/rand/v2"
	"reflect"
	"strings"
	"testing"

	"throatwatch/monitor"
)

const (
	second = int64(1e9)
	scan   = second / 20
	epoch  = 100 * second
)

// pattern is an invented profile, K off the mean; it adds to nothing.
var pattern = [8]float64{12, -7, 4, -15, 9, 2, -11, 6}

func harness() *Watch {
	return &Watch{
		Probes: 8, Least: 4, Departure: 20, DepartureHold: 3 * second, ProofHold: second, Return: 30 * second,
		Learn: 30 * second, Memory: 300 * second,
	}
}

// rig makes scans of eight probes with noise correlated over 1 s.
type rig struct {
	w       *Watch
	s       State
	r       *rand.Rand
	t       int64
	level   float64
	sd      float64
	x       [8]float64
	value   [8]float64
	quality [8]monitor.Quality
	learn   bool
}

func newRig(seed uint64, w *Watch, sd float64) *rig {
	return &rig{w: w, r: rand.New(rand.NewPCG(1, seed)), t: epoch, level: 900, sd: sd, learn: true}
}

// step makes one scan, lets change spoil it, and watches.
func (g *rig) step(change func(v []float64, q []monitor.Quality)) Result {
	a := math.Exp(-0.05)
	for i := range g.x {
		g.x[i] = a*g.x[i] + math.Sqrt(1-a*a)*g.r.NormFloat64()
		g.value[i], g.quality[i] = g.level+pattern[i]+g.sd*g.x[i], monitor.QualityGood
	}
	if change != nil {
		change(g.value[:], g.quality[:])
	}
	r := g.w.Step(&g.s, g.t, g.value[:], g.quality[:], g.learn)
	g.t += scan
	return r
}

// run makes seconds of scans. It gives the last result, when a probe was first out
// or hot, and the largest step of the mean from scan to scan.
func (g *rig) run(seconds float64, change func(v []float64, q []monitor.Quality)) (r Result, out, hot, jump float64) {
	out, hot = math.NaN(), math.NaN()
	last := math.NaN()
	for i := range int(seconds * 20) {
		r = g.step(change)
		if math.IsNaN(out) && r.Out != 0 {
			out = float64(i) / 20
		}
		if math.IsNaN(hot) && r.Hot != 0 {
			hot = float64(i) / 20
		}
		if d := math.Abs(r.Mean - last); d > jump {
			jump = d
		}
		last = r.Mean
	}
	return r, out, hot, jump
}

func bad(probe int, kind monitor.Quality) func([]float64, []monitor.Quality) {
	return func(v []float64, q []monitor.Quality) { v[probe], q[probe] = math.NaN(), kind }
}

func off(probe int, by float64) func([]float64, []monitor.Quality) {
	return func(v []float64, _ []monitor.Quality) { v[probe] += by }
}

func TestFaults(t *testing.T) {
	for _, tc := range []struct {
		name     string
		hot      bool // a harness that keeps what reads hot
		change   func([]float64, []monitor.Quality)
		out      float64 // s until excluded, NaN never
		hotAfter float64 // s until named as hot
		bias     float64 // of the mean at the end, K
		why      Exclusion
	}{
		{"open", false, bad(2, monitor.QualityInvalidCode), 1, math.NaN(), 0, ByProof},
		{"out of range", true, bad(0, monitor.QualityOutOfRange), 1, math.NaN(), 0, ByProof},
		{"stuck", true, bad(0, monitor.QualityStuck), 1, math.NaN(), 0, ByProof},
		{"impossible rate", false, bad(7, monitor.QualityRate), 1, math.NaN(), 0, ByProof},
		{"lost by the network", false, bad(3, monitor.QualityStale), math.NaN(), math.NaN(), 0, In},
		{"left out by an operator", false, bad(3, monitor.QualityExcluded), math.NaN(), math.NaN(), 0, In},
		// The filter takes 1.1 s to pass 20 K of 30 K, 0.4 s of 60 K; then 3 s.
		{"reads low by 30 K", true, off(4, -30), 4.1, math.NaN(), 0, ByDeparture},
		{"reads high by 60 K in a rake", false, off(4, 60), 3.4, math.NaN(), 0, ByDeparture},
		// A hot streak stays in the mean of the harness: 60/8 K.
		{"reads high by 60 K in the harness", true, off(4, 60), math.NaN(), 3.4, 7.5, In},
		{"reads high by 15 K", false, off(4, 15), math.NaN(), math.NaN(), 15.0 / 8, In},
		{"all read 50 K more", true, func(v []float64, _ []monitor.Quality) {
			for i := range v {
				v[i] += 50
			}
		}, math.NaN(), math.NaN(), 50, In},
		// Four of eight against four: it cannot be told who is right.
		{"half of them read low", false, func(v []float64, _ []monitor.Quality) {
			for i := range 4 {
				v[i] -= 60
			}
		}, math.NaN(), math.NaN(), -30, In},
	} {
		t.Run(tc.name, func(t *testing.T) {
			w := harness()
			w.KeepHot = tc.hot
			g := newRig(1, w, 1)
			if r, _, _, _ := g.run(120, nil); r.Out != 0 || !r.Known || r.Used != 8 || r.Filled != 0 {
				t.Fatalf("clean: %+v", r)
			}
			r, out, hot, _ := g.run(10, tc.change)
			within(t, "excluded after", out, tc.out, 0.3)
			within(t, "hot after", hot, tc.hotAfter, 0.3)
			// Mean of eight with noise of 1 K, three deviations, and of the pattern learned.
			within(t, "mean", r.Mean, 900+tc.bias, 1.3)
			var why Exclusion
			for i := range g.s.Probes {
				why = max(why, g.s.Probes[i].Out)
			}
			if why != tc.why {
				t.Errorf("excluded by %v, want %v", why, tc.why)
			}
		})
	}
}

// Shorter than its hold, a fault excludes nothing; a loose contact is one fault.
func TestHold(t *testing.T) {
	g := newRig(2, harness(), 1)
	g.run(120, nil)
	for range 5 {
		if _, out, _, _ := g.run(0.9, bad(1, monitor.QualityOutOfRange)); !math.IsNaN(out) {
			t.Error("excluded after less than 1 s of proof")
		}
		g.run(2, nil)
		if _, out, _, _ := g.run(2.5, off(1, 100)); !math.IsNaN(out) {
			t.Error("excluded after less than 3 s of departure")
		}
		g.run(20, nil)
	}
	n := 0
	_, out, _, _ := g.run(3, func(v []float64, q []monitor.Quality) {
		if n++; n%4 == 0 {
			bad(1, monitor.QualityInvalidCode)(v, q)
		}
	})
	within(t, "a loose contact is out after", out, 1.2, 0.25)
}

// A probe that drops out, stays away and comes back moves the mean by nothing but
// its noise; without the pattern it would step by 15/7 K.
func TestNoStep(t *testing.T) {
	for _, weights := range [][]float64{nil, {1, 2, 3, 4, 4, 3, 2, 1}} {
		w := harness()
		w.Weights = weights
		g := newRig(3, w, 0.05)
		r, _, _, _ := g.run(120, nil)
		want := 900 + Mean(pattern[:], weights)
		within(t, "plain mean", r.Mean, want, 0.1)
		r, _, _, jump := g.run(60, bad(3, monitor.QualityInvalidCode))
		within(t, "mean without it", r.Mean, want, 0.1)
		within(t, "largest step going", jump, 0, 0.05)
		if r.Used != 7 || r.Filled != 1<<3 || r.Out != 1<<3 {
			t.Errorf("without it: %+v", r)
		}
		r, _, _, jump = g.run(60, nil)
		within(t, "mean with it again", r.Mean, want, 0.1)
		within(t, "largest step coming back", jump, 0, 0.05)
		if r.Used != 8 || r.Filled != 0 || r.Out != 0 {
			t.Errorf("with it again: %+v", r)
		}
		// Now the power goes up while two are away.
		both := func(v []float64, q []monitor.Quality) {
			bad(0, monitor.QualityStale)(v, q)
			bad(5, monitor.QualityInvalidCode)(v, q)
		}
		g.run(5, both)
		g.level = 950
		r, _, _, _ = g.run(5, both)
		within(t, "mean at another level", r.Mean, want+50, 0.1)
	}
}

// While all are read, the mean is the plain mean to the last digits: the limits of
// an EGT harness are written for that.
func TestPlainMean(t *testing.T) {
	g := newRig(4, harness(), 3)
	for i := range 20_000 {
		g.learn = i%7000 < 4000
		r := g.step(nil)
		within(t, "mean", r.Mean, Mean(g.value[:], nil), 1e-9)
	}
}

// A probe that comes later learns its place first; the mean then goes over to the
// plain mean slowly.
func TestLatecomer(t *testing.T) {
	g := newRig(5, harness(), 0.05)
	r, _, _, _ := g.run(60, bad(3, monitor.QualityMissing))
	seven := 900 + 15.0/7
	within(t, "mean of seven", r.Mean, seven, 0.1)
	r, _, _, jump := g.run(35, nil)
	within(t, "largest step", jump, 0, 0.05)
	if !(math.Abs(r.Mean-seven) < 0.2) {
		t.Errorf("mean %v shortly after, %v before", r.Mean, seven)
	}
	r, _, _, jump = g.run(1500, nil)
	within(t, "largest step later", jump, 0, 0.05)
	within(t, "mean of eight in the end", r.Mean, 900, 0.1)
}

func TestReturn(t *testing.T) {
	w := harness()
	w.Return = 0
	g := newRig(6, w, 1)
	g.run(120, nil)
	g.run(5, bad(1, monitor.QualityOutOfRange))
	if r, _, _, _ := g.run(100, nil); r.Out != 2 {
		t.Errorf("back by itself: %+v", r)
	}
	if err := g.s.Readmit(1); err != nil {
		t.Error(err)
	}
	if r, _, _, _ := g.run(10, nil); r.Out != 0 || r.Used != 8 {
		t.Errorf("readmitted: %+v", r)
	}
	if err := g.s.Readmit(1); !errors.Is(err, ErrNotOut) {
		t.Errorf("not out: %v", err)
	}
	// With the proof still there, and for as long as a loose contact may be one.
	g.run(3, bad(1, monitor.QualityInvalidCode))
	g.run(0.5, nil)
	if err := g.s.Readmit(1); !errors.Is(err, ErrProven) || !strings.Contains(err.Error(), "invalid code") {
		t.Errorf("proven: %v", err)
	}
	g.run(1, nil)
	if err := g.s.Readmit(1); err != nil {
		t.Error(err)
	}
	// It reads low at a place of its own: the mean stays until its pattern is learned anew.
	g.run(10, nil)
	before, _, _, _ := g.run(6, off(1, -60))
	if before.Out != 2 {
		t.Fatalf("60 K low: %+v", before)
	}
	if err := g.s.Readmit(1); err != nil {
		t.Error(err)
	}
	r, out, _, jump := g.run(60, off(1, -60))
	within(t, "excluded again", out, math.NaN(), 0)
	within(t, "largest step", jump, 0, 1.5) // the noise of eight probes
	if r.Used != 8 || r.Out != 0 {
		t.Errorf("after a minute: %+v", r)
	}
	within(t, "new place", g.s.Probes[1].Offset, pattern[1]-60, 3)
	within(t, "mean", r.Mean, before.Mean, 12) // it drifts to the plain mean over Memory
	if r, _, _, _ = g.run(10, off(1, -120)); r.Out != 2 {
		t.Errorf("60 K lower still: %+v", r)
	}
	// With Return: only after 30 s without fault.
	w = harness()
	g = newRig(6, w, 1)
	g.run(120, nil)
	g.run(6, off(1, -60))
	if r, _, _, _ := g.run(60, off(1, -60)); r.Out != 2 {
		t.Errorf("back while it departs: %+v", r)
	}
	if r, _, _, _ := g.run(29, nil); r.Out != 2 {
		t.Errorf("back early: %+v", r)
	}
	if r, _, _, _ := g.run(8, nil); r.Out != 0 {
		t.Errorf("not back: %+v", r)
	}
}

// Never fewer than Least by departure; a proven failure is a failure.
func TestLeast(t *testing.T) {
	w := harness()
	w.Least = 7
	g := newRig(7, w, 1)
	g.run(120, nil)
	two := func(v []float64, _ []monitor.Quality) { v[0] -= 60; v[1] -= 80 }
	if r, _, _, _ := g.run(20, two); r.Used != 7 || math.IsNaN(r.Mean) {
		t.Errorf("two low: %+v", r)
	}
	if r, _, _, _ := g.run(20, bad(5, monitor.QualityOutOfRange)); r.Used != 6 || !math.IsNaN(r.Mean) {
		t.Errorf("a third proven: %+v", r)
	}
	// Two probes: no vote.
	g2 := &Watch{Probes: 2, Least: 1, Departure: 5, DepartureHold: second, ProofHold: second, Learn: second, Memory: 100 * second}
	var s State
	for i := range int64(400) {
		v := []float64{10, 12}
		if i > 100 {
			v[1] = 40
		}
		if r := g2.Step(&s, epoch+i*scan, v, []monitor.Quality{monitor.QualityGood, monitor.QualityHeld}, true); r.Out != 0 {
			t.Fatalf("scan %d: %+v", i, r)
		}
	}
}

func TestPatternIsLearnedInSteadyPhasesOnly(t *testing.T) {
	g := newRig(8, harness(), 1)
	g.learn = false
	if r, _, _, _ := g.run(120, nil); r.Known || g.s.Probes[0].Offset != 0 || math.IsNaN(r.Mean) {
		t.Errorf("learned outside a steady phase: %+v", r)
	}
	g.learn = true
	g.run(200, nil)
	for i, p := range g.s.Probes {
		// 200 s of noise of 1 K at 1 s lag are 100 values: four deviations.
		within(t, "offset", p.Offset, pattern[i], 0.4)
	}
	// What departs by more than half the limit is not learned, nor is anything else.
	before := g.s.Probes
	g.run(2, off(2, 14)) // until the filter shows it
	at := append([]Probe(nil), before...)
	g.run(300, off(2, 14))
	for i, p := range g.s.Probes {
		within(t, "offset", p.Offset, at[i].Offset, 0.2)
	}
	g.s.Relearn()
	if r, _, _, _ := g.run(1, nil); r.Known {
		t.Errorf("after Relearn: %+v", r)
	}
}

// What a probe reads that is wrong for a while is not learned as its pattern: it would be
// left out, and the mean be off, once it is right again. What goes on is a pattern.
func TestFaultWhileLearning(t *testing.T) {
	for _, tt := range []struct {
		name        string
		from, until float64 // s
		off         float64 // K
		mean        float64 // K at the end; the eight are 900 on the mean
		departs     bool    // a departure excludes
	}{
		{"cold for a while", 10, 25, -200, 900, true},
		{"hot for a while", 3, 12, 30, 900, true},
		{"from then on", 10, 300, -80, 900 - 80.0/8, true},
		{"cold in a harness where nothing is left out", 10, 25, -200, 900, false},
	} {
		w := harness()
		if !tt.departs {
			w.Departure, w.Agree = 0, 20
		}
		g := newRig(1, w, 0.5)
		for k := range 200 * 20 {
			at := float64(k) / 20
			r := g.step(func(v []float64, _ []monitor.Quality) {
				if at >= tt.from && at < tt.until {
					v[2] += tt.off
				}
			})
			if r.Out != 0 {
				t.Errorf("%s: probes %b are out at %g s", tt.name, r.Out, at)
				break
			}
			if at > 150 && math.Abs(r.Mean-tt.mean) > 2 {
				t.Errorf("%s: mean %g at %g s, want %g", tt.name, r.Mean, at, tt.mean)
				break
			}
		}
	}
}

// A probe that fails for good while patterns are half learned leaves nothing of it in
// the mean of the others, nor in their patterns: one that shorts right after light-off
// took 22 K off an indicated EGT. The mean is the plain one of the seven that are left.
func TestFailedWhileLearning(t *testing.T) {
	for _, from := range []float64{0, 0.5, 5} {
		w := harness()
		w.Departure, w.Agree = 0, 40
		g := newRig(2, w, 0.5)
		for k := range 20 * 20 {
			at := float64(k) / 20
			r := g.step(func(v []float64, q []monitor.Quality) {
				if at >= from {
					v[2] = 300
				}
				if at >= from+2 {
					q[2] = monitor.QualityInvalidCode
				}
			})
			if want := 900 - pattern[2]/7; at > from+2 && math.Abs(r.Mean-want) > 2 {
				t.Errorf("failed at %g s: mean %g at %g s, want %g", from, r.Mean, at, want)
				break
			}
		}
	}
}

func TestSampling(t *testing.T) {
	g := newRig(9, harness(), 0)
	g.run(1, nil)
	// By hand: squares 144+49+16+225+81+4+121+36 = 676; /7, /8.
	want := math.Sqrt(676.0 / 7 / 8)
	r, _, _, _ := g.run(1, nil)
	within(t, "of the scan", r.Sampling, want, 1e-9)
	r, _, _, _ = g.run(60, nil)
	within(t, "of the pattern", r.Sampling, want, 1e-9)
	r, _, _, _ = g.run(10, bad(3, monitor.QualityOutOfRange))
	within(t, "with one filled", r.Sampling, want, 0.01)
	w := harness()
	w.Weights = []float64{3, 3, 3, 3, 3, 3, 3, 3}
	g = newRig(9, w, 0)
	r, _, _, _ = g.run(60, nil)
	within(t, "equal weights", r.Sampling, want, 1e-9)
	w.Sampling = 2.5
	r, _, _, _ = g.run(1, nil)
	within(t, "declared", r.Sampling, 2.5, 0)
	one := &Watch{Probes: 1, Least: 1}
	r = one.Step(&State{}, epoch, []float64{5}, []monitor.Quality{monitor.QualityGood}, true)
	within(t, "one probe", r.Sampling, math.NaN(), 0)
	within(t, "mean of one probe", r.Mean, 5, 0)
	r = one.Step(&State{}, epoch, []float64{math.NaN()}, []monitor.Quality{monitor.QualityMissing}, true)
	within(t, "mean of none", r.Mean, math.NaN(), 0)
}

var hours = flag.Int("hours", 3, "hours of a clean rake of 8 probes")

// A clean rake loses no probe, though its limit is only four deviations of its
// noise. With -args -hours 500, half a minute, none is lost in 4000 probe-hours.
func TestCleanRake(t *testing.T) {
	w := harness()
	w.Departure = 4
	g := newRig(10, w, 1)
	for h := range *hours {
		for i := range 3600 * 20 {
			// Power moves, and some of the time is not steady.
			g.learn = i%12_000 < 9000
			g.level = 900 + 50*math.Sin(float64(i)/2000)
			if r := g.step(nil); r.Changed != 0 || r.Hot != 0 || r.Used != 8 {
				t.Fatalf("hour %d, scan %d: %+v", h, i, r)
			}
		}
	}
}

func TestCheckpoint(t *testing.T) {
	g := newRig(11, harness(), 1)
	g.run(100, nil)
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(&g.s); err != nil {
		t.Fatal(err)
	}
	var s State
	if err := gob.NewDecoder(&b).Decode(&s); err != nil {
		t.Fatal(err)
	}
	for range 400 {
		r := g.step(off(2, -50))
		if other := g.w.Step(&s, g.t-scan, g.value[:], g.quality[:], g.learn); other != r {
			t.Fatalf("%+v, after restart %+v", r, other)
		}
	}
	if !reflect.DeepEqual(s, g.s) {
		t.Error("states differ")
	}
}

func TestCheck(t *testing.T) {
	if err := harness().Check(); err != nil {
		t.Error(err)
	}
	for name, change := range map[string]func(*Watch){
		"no probe":        func(w *Watch) { w.Probes = 0 },
		"too many":        func(w *Watch) { w.Probes = 65 },
		"weights":         func(w *Watch) { w.Weights = []float64{1} },
		"negative weight": func(w *Watch) { w.Weights = []float64{1, 1, 1, -1, 1, 1, 1, 1} },
		"short memory":    func(w *Watch) { w.Memory = second },
		"departure":       func(w *Watch) { w.Departure = math.NaN() },
	} {
		w := harness()
		change(w)
		if w.Check() == nil {
			t.Errorf("%s: accepted", name)
		}
	}
}

func TestCodes(t *testing.T) {
	for e, want := range map[Exclusion]string{In: "in", ByProof: "proof", ByDeparture: "departure", 9: "invalid"} {
		if text, err := e.MarshalText(); err != nil || string(text) != want {
			t.Errorf("%d: %q %v", e, text, err)
		}
	}
}

func TestNoAllocation(t *testing.T) {
	g := newRig(12, harness(), 1)
	g.step(nil)
	if n := testing.AllocsPerRun(2000, func() { g.step(nil) }); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func BenchmarkStep(b *testing.B) {
	g := newRig(13, harness(), 1)
	g.run(60, nil)
	sum := 0.0
	b.ReportAllocs()
	for b.Loop() {
		g.value[g.t/scan%8] += 0.001
		sum += g.w.Step(&g.s, g.t, g.value[:], g.quality[:], true).Mean
		g.t += scan
	}
	if !(sum > 0) {
		b.Fatal(sum)
	}
}
