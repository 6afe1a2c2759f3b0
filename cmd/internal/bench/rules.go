package bench

import (
	"context"
	"errors"
	"fmt"
	"runtime"

	"throatwatch/monitor"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// hundredRules measures a hundred rules of the usual shapes over the frames of an
// ordinary run, beside the same conditions in Go. Plain Go knows nothing of unknown
// inputs, delays or alarm states: it is the floor, not an equal.
func hundredRules(_ context.Context, o *Options) ([]Figure, error) {
	_, _, cfg, err := wideRig(o.Rig, o.Dir, wanted)
	if err != nil {
		return nil, err
	}
	names := pipeline.Names(&cfg)
	at := map[string]int{}
	for i := range names {
		at[names[i].Name] = i
	}
	band := "egt." + cfg.Compute.EGT.Bands[0].Name + ".over"
	npr, choke, margin, speed, rising := at["npr"], at["choke_npr"], at["choke_margin_percent"], at["speed_rpm"], at["speed_rate_rpm_s"]
	egt, armed, lit, over, phase := at["egt_indicated_k"], at["choke_armed"], at["lit"], at[band], at["phase"]
	var list []rules.Rule
	var plain []func(f *rules.Frame) bool
	for i := range 20 {
		x := float64(i)
		for k, when := range []string{
			fmt.Sprintf("choke_armed and choke_margin_percent < %g", -50-x),
			fmt.Sprintf("egt_indicated_k > %g or %s", 1200+x, band),
			fmt.Sprintf(`phase == "lighting" and speed_rate_rpm_s < %g`, x),
			fmt.Sprintf("abs(npr / choke_npr - 1) > %g", 2+x),
			fmt.Sprintf("lit and not (speed_rpm < %g)", 30000+x),
		} {
			name := fmt.Sprintf("rule_%d_%d", i, k)
			list = append(list, rules.Rule{Name: name, When: when, Priority: rules.Caution, Title: name, Text: name})
		}
		plain = append(plain,
			func(f *rules.Frame) bool { return f.Bools[armed] == rules.True && f.Numbers[margin] < -50-x },
			func(f *rules.Frame) bool { return f.Numbers[egt] > 1200+x || f.Bools[over] == rules.True },
			func(f *rules.Frame) bool { return f.Texts[phase] == "lighting" && f.Numbers[rising] < x },
			func(f *rules.Frame) bool {
				r := f.Numbers[npr] / f.Numbers[choke]
				return max(r-1, 1-r) > 2+x
			},
			func(f *rules.Frame) bool { return f.Bools[lit] == rules.True && f.Numbers[speed] >= 30000+x },
		)
	}
	set, faults := rules.Compile(list, names)
	if len(faults) > 0 {
		return nil, fmt.Errorf("rules: %v", faults)
	}
	var frames [16]rules.Frame
	for i := range frames {
		x, f := float64(i), rules.NewFrame(names)
		f.Numbers[npr], f.Numbers[choke], f.Numbers[margin] = 2.1+x/100, 1.86, 12+x
		f.Numbers[speed], f.Numbers[rising], f.Numbers[egt] = 20000+10*x, 20+x, 900+x
		f.Bools[armed], f.Bools[lit], f.Bools[over] = rules.TriOf(i%2 == 0), rules.TriOf(i%3 != 0), rules.False
		f.Texts[phase] = []string{"steady", "accelerating"}[i%2]
		frames[i] = f
	}
	var st rules.State
	alarms, n, trues := make([]rules.Alarm, 0, 8), 0, 0
	step := func() {
		n++
		alarms = set.Step(&st, start+int64(n)*second/20, "run", monitor.Steady, rules.OfData, &frames[n&15], alarms)
	}
	byHand := func() {
		n++
		for _, c := range plain {
			if c(&frames[n&15]) {
				trues++
			}
		}
	}
	pairs, err := alternate(o.pairs(),
		func() (float64, error) { return perOp(o.span(), step), nil },
		func() (float64, error) { return perOp(o.span(), byHand), nil })
	if err != nil {
		return nil, err
	}
	if len(alarms) != 0 || trues != 0 {
		return nil, errors.New("conditions were true that must not be")
	}
	return []Figure{
		compared("100 rules per scan, beside the bare conditions in Go, CPU ns", pairs, "< 10 µs", func(f *Figure) bool { return f.Ours < 10e3 }),
		alone("allocations of it", allocations(1000, step), "0", func(f *Figure) bool { return f.Ours == 0 }),
	}, nil
}

// allocations gives those of one op, on average and rounded down.
func allocations(n int, op func()) float64 {
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	op()
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	for range n {
		op()
	}
	runtime.ReadMemStats(&after)
	return float64((after.Mallocs - before.Mallocs) / uint64(n))
}
