package egt_test

import (
	"bytes"
	"encoding/gob"
	"math"
	"math/rand/v2"
	"reflect"
	"testing"
	"time"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
)

const (
	ms   = int64(time.Millisecond)
	s    = int64(time.Second)
	scan = 50 * ms
)

// rig has the bands of an invented small turbojet: 990 K for 5 s, 1030 K not at
// all, and while starting 1070 K for 3 s.
func rig() *egt.Config {
	return &egt.Config{Bands: []egt.Band{
		{Name: "run_1", Kind: egt.KindRun, Limit: 990, Allowance: 5 * s, PerRun: 20 * s, Deadband: 5, Rearm: 2 * s},
		{Name: "run_2", Kind: egt.KindRun, Limit: 1030, Deadband: 5, Rearm: 2 * s},
		{Name: "start", Kind: egt.KindStart, Limit: 1070, Allowance: 3 * s, Deadband: 5, Rearm: 2 * s},
	}}
}

// feed is a ledger with the time of its next scan.
type feed struct {
	c     *egt.Config
	st    egt.State
	t     int64
	phase monitor.Phase
	lit   bool
}

func newFeed() *feed { return &feed{c: rig(), t: 1000 * s, phase: monitor.Steady, lit: true} }

// hold enters scans of one value for d ns.
func (f *feed) hold(v float64, d int64) {
	for end := f.t + d; f.t < end; f.t += scan {
		f.c.Step(&f.st, f.t, v, f.lit, f.phase)
	}
}

var missing = math.NaN()

// A part is a value held for a time, exact to a scan.
type part struct {
	v float64
	d int64
}

func TestExcursions(t *testing.T) {
	// Expectations follow from the definition of an excursion in the design:
	// time above the limit counts, an excursion ends below limit − deadband for
	// the re-arm time, gaps count when the last good value was above. All times
	// are whole scans, so they are exact.
	tests := []struct {
		name                string
		parts               []part
		over, exceeded      bool
		elapsed, assumed    int64
		total               int64
		excursions, exceeds int
		peak, runPeak       float64
	}{
		{name: "at the limit is not above it", parts: []part{{990, 10 * s}}},
		{
			name: "above counts", parts: []part{{900, s}, {995, 3 * s}, {900, scan}},
			over: true, elapsed: 3 * s, total: 3 * s, excursions: 1, peak: 995, runPeak: 995,
		},
		{
			name: "all of the allowance may be used", parts: []part{{995, 5 * s}, {900, scan}},
			over: true, elapsed: 5 * s, total: 5 * s, excursions: 1, peak: 995, runPeak: 995,
		},
		{
			name: "one scan more exceeds", parts: []part{{995, 5*s + scan}, {900, scan}},
			over: true, exceeded: true, elapsed: 5*s + scan, total: 5*s + scan, excursions: 1, exceeds: 1, peak: 995, runPeak: 995,
		},
		{
			name: "a dip into the deadband does not end it", parts: []part{{995, 2 * s}, {986, 60 * s}, {993, 2 * s}, {986, scan}},
			over: true, elapsed: 4 * s, total: 4 * s, excursions: 1, peak: 995, runPeak: 995,
		},
		{
			name: "nor a deep one shorter than the re-arm time", parts: []part{{995, 2 * s}, {900, 2 * s}, {993, 2 * s}, {900, scan}},
			over: true, elapsed: 4 * s, total: 4 * s, excursions: 1, peak: 995, runPeak: 995,
		},
		{
			name: "a deep one for the re-arm time does", parts: []part{{995, 2 * s}, {900, 2*s + scan}},
			total: 2 * s, excursions: 1, runPeak: 995,
		},
		{
			name: "the next one starts from zero, the run adds up", parts: []part{{995, 4 * s}, {900, 3 * s}, {998, 4 * s}, {900, scan}},
			over: true, elapsed: 4 * s, total: 8 * s, excursions: 2, peak: 998, runPeak: 998,
		},
		{
			name:  "a run's allowance is used up by short ones",
			parts: []part{{995, 4500 * ms}, {900, 3 * s}, {995, 4500 * ms}, {900, 3 * s}, {995, 4500 * ms}, {900, 3 * s}, {995, 4500 * ms}, {900, 3 * s}, {995, 2*s + scan}, {900, scan}},
			over:  true, exceeded: true, elapsed: 2*s + scan, total: 20*s + scan, excursions: 5, exceeds: 1, peak: 995, runPeak: 995,
		},
		{
			name: "the clock runs through a gap", parts: []part{{995, s}, {missing, 3 * s}, {995, s}, {900, scan}},
			// From the last good scan to the first good one again: 3 s + one scan.
			over: true, elapsed: 5 * s, assumed: 3*s + scan, total: 5 * s, excursions: 1, peak: 995, runPeak: 995,
		},
		{
			name: "a gap alone can exceed", parts: []part{{995, scan}, {missing, 6 * s}},
			over: true, exceeded: true, elapsed: 6 * s, assumed: 6 * s, total: 6 * s, excursions: 1, exceeds: 1, peak: 995, runPeak: 995,
		},
		{
			name: "a gap after a value below does not count", parts: []part{{995, s}, {980, scan}, {missing, 10 * s}, {980, scan}},
			over: false, total: s, excursions: 1, runPeak: 995,
		},
		{
			name: "a gap in the deadband neither counts nor ends it", parts: []part{{995, s}, {987, scan}, {missing, 10 * s}, {987, scan}},
			over: true, elapsed: s, total: s, excursions: 1, peak: 995, runPeak: 995,
		},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			f := newFeed()
			for _, p := range tt.parts {
				f.hold(p.v, p.d)
			}
			b := f.st.Bands[0]
			if b.Over != tt.over || b.Exceeded != tt.exceeded || b.Elapsed != tt.elapsed || b.Assumed != tt.assumed ||
				b.Total != tt.total || b.Excursions != tt.excursions || b.Exceedances != tt.exceeds ||
				b.Peak != tt.peak || b.RunPeak != tt.runPeak {
				t.Errorf("got %+v\nwant %+v", b, tt)
			}
		})
	}
}

func TestZeroAllowance(t *testing.T) {
	tests := []struct {
		name     string
		values   []float64
		exceeded bool
		elapsed  int64
	}{
		{"two scans are a spike", []float64{1040, 1040, 900, 1040, 1040, 900}, false, 0},
		{"three in a row are not", []float64{1040, 1035, 1040}, true, 2 * scan},
		{"a missing scan neither adds nor resets", []float64{1040, missing, 1040, missing, 1040}, true, 4 * scan},
		{"a spike before a lost probe is not an over-temperature", []float64{1200, 1200, missing, missing, missing}, false, 0},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			f := newFeed()
			for _, v := range tt.values {
				f.hold(v, scan)
			}
			if b := f.st.Bands[1]; b.Exceeded != tt.exceeded || b.Elapsed != tt.elapsed {
				t.Errorf("exceeded %v, elapsed %d; want %v, %d", b.Exceeded, b.Elapsed, tt.exceeded, tt.elapsed)
			}
		})
	}
}

func TestStartBandHoldsUntilIdle(t *testing.T) {
	f := newFeed()
	steps := []struct {
		phase monitor.Phase
		egt   float64
		d     int64
		holds bool
		over  bool
	}{
		{monitor.Off, 290, s, true, false},
		{monitor.Cranking, 290, s, true, false},
		{monitor.PhaseUnknown, 700, s, true, false},
		{monitor.Lighting, 1080, s, true, true},
		{monitor.Idle, 1080, s, true, true},          // an excursion is carried to its end
		{monitor.Idle, 800, 3 * s, false, false},     // … and then the band is gone
		{monitor.Steady, 1080, s, false, false},      // other bands hold here
		{monitor.PhaseUnknown, 900, s, false, false}, // an unknown phase is no new start
		{monitor.Rundown, 500, s, false, false},
		{monitor.Cranking, 400, s, true, false}, // the next start
	}
	for i, st := range steps {
		f.phase = st.phase
		f.hold(st.egt, st.d)
		if b := f.st.Bands[2]; b.Holds != st.holds || b.Over != st.over {
			t.Errorf("step %d (%v, %g K): holds %v over %v, want %v %v", i, st.phase, st.egt, b.Holds, b.Over, st.holds, st.over)
		}
		if !f.st.Bands[0].Holds {
			t.Errorf("step %d: a run band does not hold", i)
		}
	}
}

func TestOffEndsTheAssumedClock(t *testing.T) {
	f := newFeed()
	f.hold(995, s)
	f.phase, f.lit = monitor.Off, false
	f.hold(missing, 60*s)
	if b := f.st.Bands[0]; b.Elapsed > s || b.Exceeded {
		t.Errorf("elapsed %d ns, exceeded %v with the engine off and no data", b.Elapsed, b.Exceeded)
	}
}

func TestLongStepIsAssumed(t *testing.T) {
	f := newFeed()
	f.hold(995, scan)
	f.t += 2 * s // the daemon was away
	f.hold(995, scan)
	if b := f.st.Bands[0]; b.Elapsed != 2*s+scan || b.Assumed != 2*s+scan {
		t.Errorf("elapsed %d, assumed %d, want both %d", b.Elapsed, b.Assumed, 2*s+scan)
	}
}

func TestChangedTellsTransitionsOnly(t *testing.T) {
	f := newFeed()
	var at []int64
	for i := range int64(200) {
		v := 995.0
		if i >= 120 {
			v = 900
		}
		if f.c.Step(&f.st, f.t+i*scan, v, true, monitor.Steady).Moved {
			at = append(at, i)
		}
	}
	// Scan 0 begins (and the bands begin to hold), 101 is the first beyond 5 s,
	// 160 is 2 s after the first below.
	if want := []int64{0, 101, 160}; !reflect.DeepEqual(at, want) {
		t.Errorf("changed at scans %v, want %v", at, want)
	}
}

func TestResetCarriesAnOpenExcursion(t *testing.T) {
	f := newFeed()
	f.hold(995, 2*s)
	f.hold(900, 3*s)
	f.hold(995, s)
	f.st.Reset()
	if b := f.st.Bands[0]; b.Excursions != 1 || b.Total != b.Elapsed || b.Elapsed != s-scan || !b.Over {
		t.Errorf("after reset %+v", b)
	}
	f.hold(900, 3*s)
	f.st.Reset()
	if b := f.st.Bands[0]; b.Excursions != 0 || b.Total != 0 || b.RunPeak != 0 || b.Over {
		t.Errorf("after the second reset %+v", b)
	}
}

func TestFitKeepsAccountsByName(t *testing.T) {
	f := newFeed()
	f.hold(995, 2*s)
	c := rig()
	c.Bands[0], c.Bands[2] = c.Bands[2], c.Bands[0]
	c.Fit(&f.st)
	if b := f.st.Bands[2]; b.Name != "run_1" || b.Elapsed != 2*s-scan {
		t.Errorf("got %+v", b)
	}
}

func TestRemaining(t *testing.T) {
	b := egt.Band{Allowance: 5 * s, PerRun: 20 * s}
	tests := []struct {
		elapsed, total, want int64
	}{{0, 0, 5 * s}, {2 * s, 2 * s, 3 * s}, {s, 19 * s, s}, {6 * s, 6 * s, 0}, {0, 25 * s, 0}}
	for _, tt := range tests {
		st := egt.BandState{Elapsed: tt.elapsed, Total: tt.total}
		if got := st.Remaining(&b); got != tt.want {
			t.Errorf("elapsed %d, total %d: remaining %d, want %d", tt.elapsed, tt.total, got, tt.want)
		}
	}
}

// TestNoise checks on seeded noise that one rise through the limit is one
// excursion, and that the time above agrees with a plain count of scans.
func TestNoise(t *testing.T) {
	f := newFeed()
	r := rand.New(rand.NewPCG(1, 1))
	f.hold(900, s)
	above, last := int64(0), 0.0
	for range 400 { // 20 s around the limit, σ 1 K in a deadband of 5 K
		v := 991 + min(max(r.NormFloat64(), -3), 3)
		if last > 990 {
			above += scan
		}
		f.hold(v, scan)
		last = v
	}
	if b := f.st.Bands[0]; b.Excursions != 1 || b.Elapsed != above {
		t.Errorf("%d excursions, elapsed %d; want 1, %d", b.Excursions, b.Elapsed, above)
	}
}

func TestStateSurvivesEncoding(t *testing.T) {
	f := newFeed()
	f.hold(995, 2*s)
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(f.st); err != nil {
		t.Fatal(err)
	}
	var got egt.State
	if err := gob.NewDecoder(&b).Decode(&got); err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(got, f.st) {
		t.Errorf("got %+v, want %+v", got, f.st)
	}
}

func TestIndicated(t *testing.T) {
	nan := math.NaN()
	tests := []struct {
		name                   string
		values                 []float64
		usable                 []bool
		parallel               bool
		trim                   float64
		mean, spread, hot, cld float64
		used                   int
	}{ // arithmetic by hand
		{"mean, spread, trim", []float64{900, 910, 920}, []bool{true, true, true}, false, -5, 905, 20, 920, 900, 3},
		{"an excluded probe is out of all", []float64{900, 2000, 920}, []bool{true, false, true}, false, 0, 910, 20, 920, 900, 2},
		{"a NaN is not usable", []float64{900, nan}, []bool{true, true}, false, 0, 900, nan, 900, 900, 1},
		{"parallel has no spread", []float64{900}, []bool{true}, true, 3, 903, nan, nan, nan, 1},
		{"none", []float64{900}, []bool{false}, false, 3, nan, nan, nan, nan, 0},
		{"no probes", nil, nil, false, 0, nan, nan, nan, nan, 0},
	}
	same := func(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }
	for _, tt := range tests {
		mean, spread, hot, cold, used := egt.Indicated(tt.values, tt.usable, tt.parallel, tt.trim)
		if !same(mean, tt.mean) || !same(spread, tt.spread) || !same(hot, tt.hot) || !same(cold, tt.cld) || used != tt.used {
			t.Errorf("%s: got %g %g %g %g %d", tt.name, mean, spread, hot, cold, used)
		}
	}
}

func TestStepDoesNotAllocate(t *testing.T) {
	f := newFeed()
	f.hold(900, scan)
	v := 900.0
	if n := testing.AllocsPerRun(1000, func() {
		v = 1900 - v
		f.hold(v, scan)
	}); n != 0 {
		t.Errorf("%g allocations per step, want 0", n)
	}
}

func BenchmarkStep(b *testing.B) {
	f := newFeed()
	values := []float64{900, 995, 1040, missing, 985, 1000, 970, 991}
	b.ReportAllocs()
	i, changes := 0, 0
	for b.Loop() {
		if f.c.Step(&f.st, f.t, values[i&7], true, monitor.Steady).Moved {
			changes++
		}
		f.t += scan
		i++
	}
	if changes == 0 {
		b.Error("nothing changed")
	}
}
