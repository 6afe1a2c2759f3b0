package rules

import (
	"fmt"
	"testing"

	"throatwatch/monitor"
)

// hundred gives a hundred rules of the usual shapes and, beside them, the same
// conditions written in Go over the same frame. The plain Go knows nothing of
// unknown inputs, delays or alarm states: it is the floor, not an equal.
func hundred(names []Name) (rules []Rule, plain []func(f *Frame) bool) {
	ix := indexOf(names)
	npr, choke, margin := ix["npr"], ix["choke_npr"], ix["choke_margin_percent"]
	speed, rate, egt := ix["speed_rpm"], ix["speed_rate_rpm_s"], ix["egt_indicated_k"]
	armed, lit, over := ix["choke_armed"], ix["lit"], ix["egt.run_1.over"]
	phase := ix["phase"]
	for i := range 20 {
		x := float64(i)
		rules = append(rules,
			simple(fmt.Sprintf("a%d", i), fmt.Sprintf("choke_armed and choke_margin_percent < %g", -50-x)),
			simple(fmt.Sprintf("b%d", i), fmt.Sprintf("egt_indicated_k > %g or egt.run_1.over", 1200+x)),
			simple(fmt.Sprintf("c%d", i), fmt.Sprintf(`phase == "lighting" and speed_rate_rpm_s < %g`, x)),
			simple(fmt.Sprintf("d%d", i), fmt.Sprintf("abs(npr / choke_npr - 1) > %g", 2+x)),
			simple(fmt.Sprintf("e%d", i), fmt.Sprintf("lit and not (speed_rpm < %g)", 30000+x)),
		)
		plain = append(plain,
			func(f *Frame) bool { return f.Bools[armed] == True && f.Numbers[margin] < -50-x },
			func(f *Frame) bool { return f.Numbers[egt] > 1200+x || f.Bools[over] == True },
			func(f *Frame) bool { return f.Texts[phase] == "lighting" && f.Numbers[rate] < x },
			func(f *Frame) bool {
				return max(f.Numbers[npr]/f.Numbers[choke]-1, 1-f.Numbers[npr]/f.Numbers[choke]) > 2+x
			},
			func(f *Frame) bool { return f.Bools[lit] == True && f.Numbers[speed] >= 30000+x },
		)
	}
	return rules, plain
}

// benchFrames are frames of an ordinary run in which no rule of hundred is true.
func benchFrames(tb testing.TB, names []Name) []*Frame {
	tb.Helper()
	var frames []*Frame
	for i := range 16 {
		x := float64(i)
		frames = append(frames, fill(tb, names, map[string]any{
			"npr": 2.1 + x/100, "choke_npr": 1.86, "choke_margin_percent": 12 + x, "speed_rpm": 20000 + 10*x, "speed_rate_rpm_s": 20 + x,
			"egt_indicated_k": 900 + x, "choke_armed": i%2 == 0, "lit": i%3 != 0, "egt.run_1.over": false,
			"phase": []string{"steady", "accelerating"}[i%2],
		}))
	}
	return frames
}

func BenchmarkHundredRules(b *testing.B) {
	names := testNames()
	rules, plain := hundred(names)
	frames := benchFrames(b, names)
	set, faults := Compile(rules, names)
	if len(faults) > 0 {
		b.Fatal(faults)
	}
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
	b.Run("conditions", func(b *testing.B) {
		sink, i := 0, 0
		b.ReportAllocs()
		for b.Loop() {
			i++
			for k := range set.rules {
				sink += int(set.rules[k].truth(frames[i&15], 0))
			}
		}
		if sink >= 0 {
			b.Fatal("conditions are true")
		}
	})
	b.Run("plain", func(b *testing.B) {
		sink, i := 0, 0
		b.ReportAllocs()
		for b.Loop() {
			i++
			for _, c := range plain {
				if c(frames[i&15]) {
					sink++
				}
			}
		}
		if sink != 0 {
			b.Fatal("conditions are true")
		}
	})
}

// TestHundredRulesAgree checks the compiled conditions against the plain ones.
func TestHundredRulesAgree(t *testing.T) {
	names := testNames()
	rules, plain := hundred(names)
	set, _ := Compile(rules, names)
	frames := benchFrames(t, names)
	frames = append(frames, fill(t, names, map[string]any{ // here most are true
		"npr": 60.0, "choke_npr": 1.86, "choke_margin_percent": -90, "speed_rpm": 40000, "speed_rate_rpm_s": -20,
		"egt_indicated_k": 1300, "choke_armed": true, "lit": true, "egt.run_1.over": true, "phase": "lighting",
	}))
	trues := 0
	for i, f := range frames {
		for k, c := range plain {
			got, want := set.rules[k].truth(f, 0), TriOf(c(f))
			if got != want {
				t.Errorf("frame %d, %s: %v, want %v", i, rules[k].When, got, want)
			}
			if want == True {
				trues++
			}
		}
	}
	if trues < 90 {
		t.Errorf("only %d conditions were ever true", trues)
	}
}

// TestStepAllocations is the budget of the frame path: nothing while nothing
// changes, with alarms standing and rules unknown or pending.
func TestStepAllocations(t *testing.T) {
	names := testNames()
	rules, _ := hundred(names)
	rules = append(rules, simple("stands", "npr > 1"), simple("unknown", "mass_flow_kg_s > 1"))
	pending := simple("pending", "npr > 1")
	pending.OnDelay = 1 << 60
	set, faults := Compile(append(rules, pending), names)
	if len(faults) > 0 {
		t.Fatal(faults)
	}
	frames := benchFrames(t, names)
	var st State
	now := int64(0)
	out := make([]Alarm, 0, 8)
	step := func() {
		now += 50 * ms
		out = set.Step(&st, now, "run-1", monitor.Steady, OfData, frames[now/(50*ms)&15], out[:0])
		out = set.Step(&st, now, "run-1", monitor.PhaseUnknown, OfDaemon, frames[now/(50*ms)&15], out)
	}
	for range 100 {
		step()
	}
	if n := testing.AllocsPerRun(1000, step); n != 0 || len(out) != 0 {
		t.Errorf("%g allocations per step, %d transitions; want none", n, len(out))
	}
	if len(set.Standing(&st, nil)) != 1 || set.Unknown(&st) != 1 {
		t.Errorf("standing %d, unknown %d; want one each", len(set.Standing(&st, nil)), set.Unknown(&st))
	}
}

func BenchmarkCompile(b *testing.B) {
	rules := testDefault()
	names := StandardNames(testChannels()[:1], []string{"run_1", "run_2", "start"})
	b.ReportAllocs()
	for b.Loop() {
		if set, faults := Compile(rules, names); set == nil {
			b.Fatal(faults)
		}
	}
}
