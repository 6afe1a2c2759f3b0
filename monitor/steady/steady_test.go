package steady

import (
	"bytes"
	"encoding/gob"
	"math"
	"math/rand/v2"
	"reflect"
	"testing"
)

const (
	second = int64(1e9)
	scan   = second / 20
	epoch  = 300 * second
)

// signal makes values with first-order autoregressive noise, correlated by 1/e in
// lag seconds, at 20 per second.
type signal struct {
	r        *rand.Rand
	lag, sd  float64
	x        float64
	started  bool
	constant func(t float64) float64 // of seconds since epoch
}

func (s *signal) at(t int64) float64 {
	a := math.Exp(-float64(scan) / 1e9 / s.lag)
	if !s.started {
		s.x, s.started = s.r.NormFloat64(), true
	} else {
		s.x = a*s.x + math.Sqrt(1-a*a)*s.r.NormFloat64()
	}
	return s.constant(float64(t-epoch)/1e9) + s.sd*s.x
}

func seeded(seed uint64, lag, sd float64, f func(float64) float64) *signal {
	return &signal{r: rand.New(rand.NewPCG(1, seed)), lag: lag, sd: sd, constant: f}
}

func level(v float64) func(float64) float64 { return func(float64) float64 { return v } }

// window fills a fresh window and evaluates it.
func window(w Window, p *Past, s *signal) Stats {
	p.Clear()
	s.started = false
	for t := epoch; t <= epoch+w.Span(); t += scan {
		w.Add(p, t, s.at(t))
	}
	return w.Stats(p)
}

func within(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %v, want %v ± %v", what, got, want, tolerance)
	}
}

// Mean, deviation and slope are those of the textbook, computed here in another way.
func TestMoments(t *testing.T) {
	for _, tc := range []struct {
		name string
		w    Window
		s    *signal
	}{
		{"noise", Seconds(60), seeded(1, 1, 2, level(900))},
		{"small noise on a large value", Seconds(60), seeded(2, 0.1, 1e-3, level(250e3))},
		{"a line", Seconds(30), seeded(3, 1, 0, func(t float64) float64 { return 500 + 0.25*t })},
		{"a parabola in noise", Window{Width: second, Bins: 40}, seeded(4, 1, 1, func(t float64) float64 { return 300 + 0.1*t*t })},
	} {
		t.Run(tc.name, func(t *testing.T) {
			var p Past
			var sum, n float64
			var all []float64
			for at := epoch; at <= epoch+tc.w.Span(); at += scan {
				v := tc.s.at(at)
				tc.w.Add(&p, at, v)
				if at < epoch+tc.w.Span() { // the last one opens a bin
					all = append(all, v)
					sum += v
					n++
				}
			}
			s := tc.w.Stats(&p)
			mean := sum / n
			// A bin has the time of its centre, its samples are half a scan earlier.
			var square, tt, tv float64
			for i, v := range all {
				square += (v - mean) * (v - mean)
				x := float64(i) - (n-1)/2
				tt += x * x
				tv += x * v
			}
			within(t, "mean", s.Mean, mean, 1e-12*mean)
			within(t, "deviation", s.SD, math.Sqrt(square/(n-1)), 1e-6*s.SD)
			// Least squares on bin means are not those on samples: apart by part of the slope's uncertainty.
			within(t, "slope", s.Slope, tv/tt*20, 0.05*s.SlopeU+1e-12)
			within(t, "centre", s.Centre, float64(tc.w.Span())/2e9, 1e-9)
			if s.N != len(all) || s.Bins != tc.w.Bins || s.Coverage != 1 || !s.Full || s.From != epoch || s.To != epoch+tc.w.Span() {
				t.Errorf("window: %+v", s)
			}
		})
	}
}

// The 95 % intervals of mean and slope hold the truth in 95 % of windows, and the
// correlation time is that of the noise. Tolerances: three times the sampling
// error of 600 windows, 0.027, and 0.015 for a lag that is 1/30 of the window.
func TestIntervalsHold(t *testing.T) {
	for _, tc := range []struct {
		span, lag float64
		rel       float64 // of the mean correlation time; short windows lose some
	}{
		{60, 0.25, 0.1}, {60, 1, 0.25}, {60, 2, 0.35}, {300, 1, 0.1}, {300, 2, 0.15},
	} {
		const windows = 600
		w, sig := Seconds(tc.span), seeded(7, tc.lag, 3, level(1000))
		var p Past
		var mean, slope, lag, stated, found float64
		for range windows {
			s := window(w, &p, sig)
			k := Student(0.95, s.Nu)
			if math.Abs(s.Mean-1000) <= k*s.U {
				mean++
			}
			if math.Abs(s.Slope) <= k*s.SlopeU {
				slope++
			}
			lag += s.CorrelationTime / windows
			stated += s.U * s.U / windows
			found += (s.Mean - 1000) * (s.Mean - 1000) / windows
		}
		within(t, "intervals of the mean that hold", mean/windows, 0.95, 0.042)
		within(t, "intervals of the slope that hold", slope/windows, 0.95, 0.042)
		within(t, "correlation time", lag, tc.lag, tc.rel*tc.lag)
		// Three times the sampling error of a variance, √(2/600).
		within(t, "variance of the mean, stated over found", stated/found, 1, 0.17+tc.rel/2)
	}
}

// White noise: every sample counts, and never more than every one.
func TestWhiteNoise(t *testing.T) {
	w, sig := Seconds(60), seeded(9, 1e-3, 1, level(0))
	var p Past
	sum := 0.0
	for range 100 {
		s := window(w, &p, sig)
		if s.NEff > float64(s.N) {
			t.Fatalf("NEff %v of %d", s.NEff, s.N)
		}
		sum += s.NEff / 100
	}
	// τ is not taken below 1, so part of the windows lose some.
	within(t, "mean NEff", sum, 1100, 100)
}

// Noise and its effective sample size do not depend on a trend or a bend.
func TestTrendIsNotNoise(t *testing.T) {
	for name, f := range map[string]func(float64) float64{
		"line":     func(t float64) float64 { return 900 + 3*t },
		"parabola": func(t float64) float64 { return 900 + 3*t - 0.04*t*t },
	} {
		var p Past
		with, without := window(Seconds(60), &p, seeded(11, 1, 1, f)), window(Seconds(60), &p, seeded(11, 1, 1, level(900)))
		// Bins have the scatter of the trend within them: 1.5 K/√12 or less of 1 K noise.
		within(t, name+": NEff", with.NEff/without.NEff, 1, 0.6)
		within(t, name+": uncertainty of the slope", with.SlopeU/without.SlopeU, 1, 1e-6)
	}
}

// Gaps and held values: what is not there neither counts nor misleads.
func TestGapsAndHeldValues(t *testing.T) {
	w := Seconds(60)
	for _, tc := range []struct {
		name     string
		missing  func(i int) bool
		bins     int
		coverage float64
	}{
		{"a gap of 12 s", func(i int) bool { return i >= 400 && i < 640 }, 96, 0.8},
		{"one value a second, held between", func(i int) bool { return i%20 != 0 }, 60, 0.5},
		{"every third scan lost", func(i int) bool { return i%3 == 2 }, 120, 1},
	} {
		t.Run(tc.name, func(t *testing.T) {
			const windows = 400
			sig := seeded(13, 1, 1, level(50))
			var p Past
			var hold, holdSlope float64
			for range windows {
				p.Clear()
				sig.started = false
				for i := range 1201 {
					at := epoch + int64(i)*scan
					v := sig.at(at)
					if tc.missing(i) {
						v = math.NaN()
					}
					w.Add(&p, at, v)
				}
				s := w.Stats(&p)
				if s.Bins != tc.bins || s.Coverage != tc.coverage {
					t.Fatalf("%d bins, coverage %v", s.Bins, s.Coverage)
				}
				k := Student(0.95, s.Nu)
				if math.Abs(s.Mean-50) <= k*s.U {
					hold++
				}
				if math.Abs(s.Slope) <= k*s.SlopeU {
					holdSlope++
				}
			}
			// 95 % ± 3 √(0.95·0.05/400), and a gap costs a little.
			within(t, "intervals of the mean that hold", hold/windows, 0.95, 0.045)
			within(t, "intervals of the slope that hold", holdSlope/windows, 0.95, 0.045)
		})
	}
}

func TestAdd(t *testing.T) {
	w := Window{Width: second, Bins: 8}
	var p Past
	for _, step := range []struct {
		name   string
		t      int64
		v      float64
		closed bool
		n      int // samples in closed bins after it
	}{
		{"first", 1000 * second, 1, false, 0},
		{"same bin", 1000*second + 5, 2, false, 0},
		{"not a number", 1001 * second, math.NaN(), false, 0},
		{"infinite", 1001 * second, math.Inf(1), false, 0},
		{"next bin", 1001 * second, 3, true, 2},
		{"late, into its bin", 1000*second + 7, 4, false, 3},
		{"before the first, still in the window", 999 * second, 5, false, 4},
		{"older than the window", 992 * second, 6, false, 4},
		{"a gap that leaves one", 1009 * second, 7, true, 1},
		{"a gap of a whole window", 2000 * second, 8, true, 0},
	} {
		if closed := w.Add(&p, step.t, step.v); closed != step.closed {
			t.Errorf("%s: closed %v", step.name, closed)
		}
		if s := w.Stats(&p); s.N != step.n || !math.IsNaN(s.Mean) {
			t.Errorf("%s: %d samples, mean %v", step.name, s.N, s.Mean)
		}
	}
	if s := w.Stats(&Past{}); s.N != 0 || !math.IsNaN(s.U) {
		t.Errorf("nothing seen: %+v", s)
	}
	if w := (Window{Bins: 10}); w.Add(&Past{}, 0, 1) {
		t.Error("a window without width")
	}
	// A constant, as a stuck or digital channel gives, has no scatter and no trend.
	for i := range int64(9) {
		w.Add(&p, (3000+i)*second, 4.5)
	}
	if s := w.Stats(&p); s.Mean != 4.5 || s.SD != 0 || s.U != 0 || s.Slope != 0 || s.SlopeU != 0 || s.NEff != 8 || !s.Resolved {
		t.Errorf("constant: %+v", s)
	}
}

func TestStudent(t *testing.T) {
	// JCGM 100 table G.2, to the digits printed there.
	for _, tc := range []struct{ p, nu, want, tolerance float64 }{
		{0.95, 1, 12.71, 0.005},
		{0.95, 2, 4.30, 0.005},
		{0.95, 5, 2.57, 0.005},
		{0.95, 16, 2.12, 0.005},
		{0.95, 50, 2.01, 0.005},
		{0.99, 16, 2.92, 0.005},
		{0.95, math.Inf(1), 1.960, 0.0005},
		{0.9545, math.Inf(1), 2.000, 0.0005},
	} {
		within(t, "t", Student(tc.p, tc.nu), tc.want, tc.tolerance)
	}
	if v := Student(0.95, 0.5); !math.IsNaN(v) {
		t.Errorf("half a degree of freedom: %v", v)
	}
}

// clone stores and loads as a checkpoint does.
func clone[T any](t *testing.T, v *T) *T {
	t.Helper()
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(v); err != nil {
		t.Fatal(err)
	}
	out := new(T)
	if err := gob.NewDecoder(&b).Decode(out); err != nil {
		t.Fatal(err)
	}
	return out
}

// A restart from a checkpoint goes on to the bit.
func TestCheckpoint(t *testing.T) {
	d := detector()
	var a State
	sig := seeded(17, 1, 0.1, level(100))
	var b *State
	for i := range 4000 {
		at := epoch + int64(i)*scan
		v := [1]float64{sig.at(at)}
		ra := d.Step(&a, at, v[:])
		if b != nil {
			if rb := d.Step(b, at, v[:]); ra != rb {
				t.Fatalf("scan %d: %+v, after restart %+v", i, ra, rb)
			}
		}
		if i == 1333 {
			b = clone(t, &a)
		}
	}
	if !reflect.DeepEqual(&a, b) {
		t.Error("states differ")
	}
}

func TestNoAllocation(t *testing.T) {
	d, b := detector(), &Baseline{Memory: 600 * second, Learn: second, Smooth: second, Hold: second}
	var s State
	var l Learned
	sig := seeded(19, 1, 0.1, level(100))
	at, v := epoch, [1]float64{100}
	sum := 0.0
	if n := testing.AllocsPerRun(2000, func() {
		v[0] = sig.at(at)
		r := d.Step(&s, at, v[:])
		sum += Limit{Value: 101}.Forecast(d.Quantities[0].Window, &s.Stats[0], r.Steady).Seconds
		sum += Reduce(&s.Stats[0], Part{U: 1}).U95
		sum += b.Step(&l, at, v[0]-100, 1, r.Steady).By
		at += scan
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func BenchmarkStep(b *testing.B) {
	d := detector()
	var s State
	sig := seeded(19, 1, 0.1, level(100))
	at, v, steady := epoch, [1]float64{}, 0
	b.ReportAllocs()
	for b.Loop() {
		v[0] = sig.at(at)
		if d.Step(&s, at, v[:]).Steady {
			steady++
		}
		at += scan
	}
	if at > epoch+1000*second && steady == 0 {
		b.Fatal("never steady")
	}
}

func BenchmarkStats(b *testing.B) {
	w := Seconds(60)
	var p Past
	sig := seeded(19, 1, 0.1, level(100))
	window(w, &p, sig)
	at, sum := p.Open*w.Width, 0.0
	b.ReportAllocs()
	for b.Loop() {
		at += w.Width
		w.Add(&p, at, sig.at(at))
		sum += w.Stats(&p).U
	}
	if !(sum > 0) {
		b.Fatal(sum)
	}
}
