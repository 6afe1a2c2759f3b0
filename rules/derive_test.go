package rules

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/unit"
)

// TestWindows compares every derivation with its textbook formula over the plain
// list of values, through gaps and a long run on a large offset: rounding must
// not add up.
func TestWindows(t *testing.T) {
	const n = 37
	var list []Derived
	for kind := DeriveRate; kind <= DeriveStdev; kind++ {
		list = append(list, Derived{Name: kind.String() + "_of", Kind: kind, Of: "back_pressure_pa", Over: n * scan, Period: scan})
	}
	set, faults := Compile(nil, testNames(), list...)
	if set == nil {
		t.Fatal(faults)
	}
	f := NewFrame(set.Names())
	ix := indexOf(set.Names())
	var st State
	r := rand.New(rand.NewPCG(4, 1))
	var window []float64
	x := 101325.0
	for i := range int64(20_000) {
		x += r.NormFloat64() * 20
		if r.IntN(700) == 0 {
			x = math.NaN()
		}
		f.Numbers[ix["back_pressure_pa"]] = x
		set.Step(&st, epoch+i*scan, "", monitor.Steady, OfData, &f, nil)
		if window = append(window, x); x != x {
			window, x = nil, 101325
		}
		if len(window) > n+1 {
			window = window[1:]
		}
		want := textbook(window, n, float64(scan)/1e9)
		for k, d := range list {
			got := f.Numbers[ix[d.Name]]
			if (got == got) != (want[k] == want[k]) || math.Abs(got-want[k]) > 1e-9*max(1, math.Abs(want[k])) {
				t.Fatalf("scan %d, %s: %.15g, want %.15g", i, d.Name, got, want[k])
			}
		}
	}
}

// textbook gives rate, mean, max, min and standard deviation of the last n values
// (of n + 1 for the rate), NaN where there are too few.
func textbook(window []float64, n int, dt float64) [5]float64 {
	nan := math.NaN()
	out := [5]float64{nan, nan, nan, nan, nan}
	if len(window) == n+1 {
		var meanT, meanX, sxy, sxx float64
		for i, x := range window {
			meanT += float64(i) * dt / float64(n+1)
			meanX += x / float64(n+1)
		}
		for i, x := range window {
			sxy += (float64(i)*dt - meanT) * (x - meanX)
			sxx += (float64(i)*dt - meanT) * (float64(i)*dt - meanT)
		}
		out[0] = sxy / sxx
	}
	if len(window) < n {
		return out
	}
	last := window[len(window)-n:]
	mean, square := 0.0, 0.0
	for _, x := range last {
		mean += x / float64(n)
	}
	for _, x := range last {
		square += (x - mean) * (x - mean)
	}
	out[1], out[2], out[3], out[4] = mean, slices.Max(last), slices.Min(last), math.Sqrt(square/float64(n-1))
	return out
}

// What is derived measures what it should.
func TestDerivedUnits(t *testing.T) {
	tests := []struct {
		kind      Derivation
		of        string
		unit      string
		dimension unit.Dimension
		rate      bool
	}{
		{DeriveRate, "egt_indicated_k", "K/s", unit.TemperatureDifference, true},
		{DeriveRate, "egt_spread_k", "K/s", unit.TemperatureDifference, true},
		{DeriveRate, "channel.p_oil", "Pa/s", unit.Pressure, true},
		{DeriveRate, "speed_rpm", "rpm/s", unit.Frequency, true},
		{DeriveRate, "choke_margin_percent", "%/s", unit.Ratio, true},
		{DeriveRate, "npr", "1/s", unit.Ratio, true},
		{DeriveRate, "mass_flow_kg_s", "kg/s/s", unit.MassFlow, true},
		{DeriveRate, "exit_velocity_m_s", "m/s²", unit.Acceleration, false},
		{DeriveRate, "data_age_s", "", unit.Ratio, false},
		{DeriveRate, "speed_rate_rpm_s", "rpm/s/s", unit.Invalid, false},
		{DeriveRate, "gas_constant_j_kg_k", "", unit.Invalid, false},
		{DeriveMean, "egt_indicated_k", "K", unit.Temperature, false},
		{DeriveMax, "channel.vibration", "m/s", unit.Velocity, false},
		{DeriveMin, "speed_rate_rpm_s", "rpm/s", unit.Frequency, true},
		{DeriveStdev, "egt_indicated_k", "K", unit.TemperatureDifference, false},
		{DeriveStdev, "total_pressure_pa / back_pressure_pa", "", unit.Ratio, false},
		{DeriveSince, "lit", "s", unit.Time, false},
		{DeriveCount, "npr > 2", "", unit.Ratio, false},
	}
	for _, tt := range tests {
		d := Derived{Name: "x", Kind: tt.kind, Of: tt.of, Over: second, Period: scan}
		if tt.kind == DeriveSince {
			d.Over = 0
		}
		set, faults := Compile(nil, testNames(), d)
		if set == nil {
			t.Errorf("%v of %s: %+v", tt.kind, tt.of, faults)
			continue
		}
		n := set.Names()[len(set.Names())-1]
		if n.Unit != tt.unit || n.Dimension != tt.dimension || n.Rate != tt.rate {
			t.Errorf("%v of %s: %q, %v, rate %v", tt.kind, tt.of, n.Unit, n.Dimension, n.Rate)
		}
	}
	d := Derived{Name: "slope", Kind: DeriveRate, Of: "egt_indicated_k", Over: second, Period: scan}
	for when, ok := range map[string]bool{"slope > 5 K/s": true, "slope > 300 degC/min": true, "slope > 5 K": false, "slope > 5 kPa/s": false, "slope > 5": true} {
		r := simple("r", when)
		r.Text = "{slope:K/min.0}"
		if set, faults := Compile([]Rule{r}, testNames(), d); (set != nil) != ok {
			t.Errorf("%s: %+v", when, faults)
		}
	}
}

func TestRefusedDerived(t *testing.T) {
	good := Derived{Name: "x", Kind: DeriveMean, Of: "npr", Over: second, Period: scan}
	tests := []struct {
		name    string
		change  func(d *Derived)
		field   string
		message string
	}{
		{"a quantity's name", func(d *Derived) { d.Name = "npr_rake" }, "name", "taken"},
		{"no identifier", func(d *Derived) { d.Name = "x.y" }, "name", "not an identifier"},
		{"a word", func(d *Derived) { d.Name = "known" }, "name", "word of the language"},
		{"another word", func(d *Derived) { d.Name = "and" }, "name", "word of the language"},
		{"short window", func(d *Derived) { d.Over = scan }, "over", "shorter than two scans"},
		{"short rate", func(d *Derived) { d.Kind, d.Over = DeriveRate, scan }, "over", "shorter than two scans"},
		{"long window", func(d *Derived) { d.Over = 601 * second }, "over", "too long"},
		{"since with a window", func(d *Derived) { d.Kind, d.Of = DeriveSince, "lit" }, "over", "no window"},
		{"mean of a condition", func(d *Derived) { d.Of = "npr > 2" }, "mean", "takes a number"},
		{"count of a number", func(d *Derived) { d.Kind = DeriveCount }, "count", "takes true or false"},
		{"unknown name", func(d *Derived) { d.Of = "2 + nrp" }, "mean", `unknown name "nrp"`},
		{"itself", func(d *Derived) { d.Of = "x" }, "mean", "unknown name"},
		{"nothing to look at", func(d *Derived) { d.Of = "5 kPa" }, "mean", "never changes"},
		{"wrong unit", func(d *Derived) { d.Of = "npr - 5 kPa" }, "mean", "5 kPa is a pressure"},
	}
	for _, tt := range tests {
		d := good
		tt.change(&d)
		_, faults := Compile(nil, testNames(), d)
		if len(faults) != 1 || faults[0].Field != tt.field || !faults[0].Derived || !strings.Contains(faults[0].Message, tt.message) || faults[0].Hint == "" {
			t.Errorf("%s: %+v", tt.name, faults)
		}
	}
	if _, faults := Compile(nil, testNames(), good, good); len(faults) != 1 || faults[0].Rule != 1 {
		t.Errorf("twice: %+v", faults)
	}
	var many []Derived
	for i := range 9 {
		d := good
		d.Name, d.Over = fmt.Sprintf("x%d", i), 600*second
		many = append(many, d)
	}
	if _, faults := Compile(nil, testNames(), many...); len(faults) != 1 || !strings.Contains(faults[0].Message, "together") {
		t.Errorf("many: %+v", faults)
	}
}

// A change of the rules keeps what is derived in the same way, by name.
func TestDerivedThroughAChange(t *testing.T) {
	mean := Derived{Name: "a", Kind: DeriveMean, Of: "npr", Over: 4 * scan, Period: scan}
	other := Derived{Name: "b", Kind: DeriveMax, Of: "npr", Over: 4 * scan, Period: scan}
	changed := other
	changed.Over = 5 * scan
	one, _ := Compile(nil, testNames(), mean, other)
	two, _ := Compile([]Rule{simple("r", "b > 3 or a > 3")}, testNames(), changed, mean)
	var st State
	t0 := epoch
	step := func(set *Set) Frame {
		f := NewFrame(set.Names())
		f.Numbers[indexOf(set.Names())["npr"]] = 2
		set.Step(&st, t0, "", monitor.Steady, OfData, &f, nil)
		t0 += scan
		return f
	}
	for range 5 {
		step(one)
	}
	two.Fit(&st)
	f := step(two)
	ix := indexOf(two.Names())
	if a, b := f.Numbers[ix["a"]], f.Numbers[ix["b"]]; a != 2 || b == b {
		t.Errorf("a %g, b %g; want 2 and unknown", a, b)
	}
	if got := two.Unused(); got != nil {
		t.Errorf("unused %v", got)
	}
	if got := one.Unused(); !slices.Equal(got, []int{0, 1}) {
		t.Errorf("unused %v", got)
	}
}

// benchDerived gives 20 derived names and 20 rules on them, of windows of 2 s.
func benchDerived() (list []Derived, rules []Rule) {
	of := []string{"egt_indicated_k", "npr", "speed_rpm", "choke_margin_percent"}
	limits := map[Derivation]string{
		DeriveRate: "> 1e9", DeriveMean: "> 1e9", DeriveMax: "> 1e9", DeriveMin: "< -1e9", DeriveStdev: "> 1e9",
	}
	for kind := DeriveRate; kind <= DeriveStdev; kind++ {
		for i, name := range of {
			d := Derived{Name: fmt.Sprintf("%s_%d", kind, i), Kind: kind, Of: name, Over: 2 * second, Period: 50 * ms}
			list = append(list, d)
			rules = append(rules, simple("r_"+d.Name, d.Name+" "+limits[kind]))
		}
	}
	return list, rules
}

// BenchmarkHundredRulesDerived steps a hundred rules of which twenty look at
// derived names; plain does the same windows in Go, without knowing of unknown
// inputs and gaps.
func BenchmarkHundredRulesDerived(b *testing.B) {
	names := testNames()
	rules, plain := hundred(names)
	list, more := benchDerived()
	set, faults := Compile(append(rules[:80:80], more...), names, list...)
	if set == nil {
		b.Fatal(faults)
	}
	frames := benchFrames(b, set.Names())
	b.Run("step", func(b *testing.B) {
		var st State
		out := make([]Alarm, 0, 8)
		t := int64(0)
		b.ReportAllocs()
		for b.Loop() {
			t += 50 * ms
			out = set.Step(&st, t, "run-1", monitor.Steady, OfData, frames[t/(50*ms)&15], out)
		}
		if len(out) != 0 {
			b.Fatalf("%d transitions", len(out))
		}
	})
	b.Run("plain", func(b *testing.B) {
		ix := indexOf(names)
		slots := []int{ix["egt_indicated_k"], ix["npr"], ix["speed_rpm"], ix["choke_margin_percent"]}
		windows := make([]plainWindow, len(slots))
		sink, i := 0, 0
		b.ReportAllocs()
		for b.Loop() {
			i++
			f := frames[i&15]
			for _, c := range plain[:80] {
				if c(f) {
					sink++
				}
			}
			for k, slot := range slots {
				if windows[k].add(f.Numbers[slot]) {
					sink++
				}
			}
		}
		if sink != 0 {
			b.Fatal("conditions are true")
		}
	})
}

// plainWindow is what a programmer would write by hand for the five derivations of
// one value.
type plainWindow struct {
	ring      [40]float64
	at        int
	sum, sum2 float64
}

func (w *plainWindow) add(x float64) bool {
	old := w.ring[w.at]
	w.ring[w.at] = x
	w.at = (w.at + 1) % len(w.ring)
	w.sum += x - old
	w.sum2 += x*x - old*old
	high, low := w.ring[0], w.ring[0]
	slope := 0.0
	for i, v := range w.ring {
		high, low = max(high, v), min(low, v)
		slope += (float64((i-w.at+len(w.ring))%len(w.ring)) - 19.5) * v
	}
	n := float64(len(w.ring))
	return w.sum/n > 1e9 || math.Sqrt((w.sum2-w.sum*w.sum/n)/(n-1)) > 1e9 || high > 1e9 || low < -1e9 || slope > 1e12
}

func TestDerivedAllocations(t *testing.T) {
	list, rules := benchDerived()
	set, faults := Compile(rules, testNames(), list...)
	if set == nil {
		t.Fatal(faults)
	}
	frames := benchFrames(t, set.Names())
	var st State
	now := int64(0)
	out := make([]Alarm, 0, 8)
	step := func() {
		now += 50 * ms
		out = set.Step(&st, now, "run-1", monitor.Steady, OfData, frames[now/(50*ms)&15], out[:0])
	}
	for range 100 {
		step()
	}
	if n := testing.AllocsPerRun(1000, step); n != 0 || len(out) != 0 {
		t.Errorf("%g allocations per step, %d transitions; want none", n, len(out))
	}
}
