package main

import (
	"bytes"
	"encoding/json"
	"math"
	"strings"
	"testing"
)

const rigPoint = "--total-pressure 250kPa --total-temperature 900K --back-pressure 101.325kPa --fuel-air-ratio 0.02 --throat-area 0.025m2 --discharge-coefficient 0.97 "

// runDoubt runs the command with --json and gives all its keys.
func runDoubt(t *testing.T, args string) map[string]any {
	t.Helper()
	var stdout, stderr bytes.Buffer
	if code := pointCommand(strings.Fields(args+" --json"), &stdout, &stderr); code != 0 || stderr.Len() > 0 {
		t.Fatalf("%s: exit %d: %s", args, code, &stderr)
	}
	var out map[string]any
	if err := json.Unmarshal(stdout.Bytes(), &out); err != nil {
		t.Fatal(err)
	}
	return out
}

func keyed(t *testing.T, m map[string]any, key string) float64 {
	t.Helper()
	v, ok := m[key].(float64)
	if !ok {
		t.Fatalf("%s is %v", key, m[key])
	}
	return v
}

// Both bases, the margin, and the effect of composition and temperature on the critical
// ratio: own 30-digit computation, kerosene products of f 0.02 at 900 K.
func TestPointCheckValues(t *testing.T) {
	at := func(args string) float64 { return runPoint(t, strings.Fields(args)...).CriticalNPR }
	base := runPoint(t, strings.Fields(rigPoint)...)
	full := runPoint(t, strings.Fields(rigPoint+"--thrust-basis fully-expanded")...)
	const rest = "--total-pressure 250kPa --back-pressure 101.325kPa "
	for _, c := range []struct {
		what           string
		got, want, abs float64
	}{
		{"critical NPR", base.CriticalNPR, 1.859308187, 1e-8},
		{"margin %", base.ChokeMarginPercent, 32.7003, 5e-5},
		{"thrust, nozzle-ideal", *base.GrossThrust, 5182.573, 5e-4},
		{"thrust, fully-expanded", *full.GrossThrust, 5193.230, 5e-4},
		{"critical NPR at f 0, %", 100 * (at(rest+"--total-temperature 900K")/base.CriticalNPR - 1), 0.46, 0.005},
		{"critical NPR at WAR 0.02, %", 100 * (at(rest+"--total-temperature 900K --fuel-air-ratio 0.02 --humidity-ratio 0.02")/base.CriticalNPR - 1), -0.084, 0.0005},
		{"critical NPR at +50 K, %", 100 * (at(rest+"--total-temperature 950K --fuel-air-ratio 0.02")/base.CriticalNPR - 1), -0.15, 0.005},
	} {
		if !(math.Abs(c.got-c.want) <= c.abs) {
			t.Errorf("%s = %.9g, want %.9g", c.what, c.got, c.want)
		}
	}
	// Convergent-divergent, A9/A8 of 1.05, 1.2 and 1.5.
	for area, want := range map[string][3]float64{"262.5cm2": {1.46857, 1.53726, 2.55549}, "0.03m2": {1.25690, 1.47736, 3.73318}, "0.0375m2": {1.13127, 1.60339, 5.99763}} {
		r := runPoint(t, strings.Fields(rigPoint+"--exit-area "+area)...)
		for i, got := range []float64{r.First, r.Second, r.Third} {
			if math.Abs(got-want[i]) > 6e-6 {
				t.Errorf("exit area %s: critical ratio %d = %.7g, want %.6g", area, i+1, got, want[i])
			}
		}
		if r.Regime != "over_expanded" || r.ChokeState != "choked" || r.First != r.CriticalNPR {
			t.Errorf("exit area %s: %s, %s", area, r.Regime, r.ChokeState)
		}
	}
}

// Gauge 95 kPa and barometer 100 kPa, 0.1 kPa each: u(NPR) 0.0013793 because the barometer
// is in both pressures; GUM eq. (13) by hand.
func TestPointSharedBarometer(t *testing.T) {
	out := runDoubt(t, "--total-pressure 195kPa --back-pressure 100kPa --total-temperature 900K --uncertainty total-pressure=0.1kPa --uncertainty barometer=100Pa")
	closeTo(t, "U95 of NPR", keyed(t, out, "npr_u95"), 1.959964*0.0013793, 2e-5)
	if out["p_choked"] != nil || out["choke_marginal"] != false || out["mass_flow_kg_s_u95"] != nil {
		t.Errorf("not known: %v, %v, %v", out["p_choked"], out["choke_marginal"], out["mass_flow_kg_s_u95"])
	}
}

// The budget of choked flow, 30-digit computation: u 0.01892611 kg/s.
func TestPointBudget(t *testing.T) {
	const stated = "--uncertainty total-pressure=144.3376Pa --uncertainty total-temperature=1.447648K --uncertainty fuel-air-ratio=0.0004 " +
		"--uncertainty throat-area=0.05% --uncertainty discharge-coefficient=0.002 --uncertainty choke-npr=0.4% --budget"
	out := runDoubt(t, rigPoint+stated)
	closeTo(t, "U95 of W8", keyed(t, out, "mass_flow_kg_s_u95"), 1.959964*0.01892611, 1e-5)
	closeTo(t, "lower bound of W8", keyed(t, out, "mass_flow_kg_s_low95"), 8.03854960-1.959964*0.01892611, 3e-7)
	closeTo(t, "P(choked)", keyed(t, out, "p_choked"), 1, 1e-6)
	budget, ok := out["budget"].(map[string]any)
	if !ok {
		t.Fatal(out["budget"])
	}
	flow, ok := budget["mass_flow_kg_s"].([]any)
	if !ok || len(flow) != 5 {
		t.Fatal(budget)
	}
	want := map[string]float64{"discharge-coefficient": 0.0020619, "throat-area": 0.0005, "total-pressure": 0.00057735, "total-temperature": 0.00083906, "fuel-air-ratio": 0.000068436}
	var shares float64
	for _, line := range flow {
		l, ok := line.(map[string]any)
		if !ok {
			t.Fatal(line)
		}
		name, ok := l["input"].(string)
		if !ok {
			t.Fatal(l)
		}
		closeTo(t, name, keyed(t, l, "contribution")/8.03854960, want[name], 1e-4)
		shares += keyed(t, l, "share")
	}
	closeTo(t, "sum of shares", shares, 1, 1e-9)

	var stdout, stderr bytes.Buffer
	if code := pointCommand(strings.Fields(rigPoint+stated), &stdout, &stderr); code != 0 {
		t.Fatal(&stderr)
	}
	for _, has := range []string{"± U95", "0.0370945", "Budget: Mass flow W8", "76.7 %", "P(choked) 1.0000", "Taken as exact, because no uncertainty is stated: back-pressure, humidity-ratio, thrust-coefficient.", "Not protection."} {
		if !strings.Contains(stdout.String(), has) {
			t.Errorf("%q is not in\n%s", has, &stdout)
		}
	}
}

// Duct loss is a part of the total pressure with a line of its own.
func TestPointDuctLossUncertainty(t *testing.T) {
	out := runDoubt(t, "--total-pressure 200kPa --back-pressure 100kPa --total-temperature 900K --duct-loss 2% --uncertainty total-pressure=0.3% --uncertainty duct-loss=0.00392 --budget")
	closeTo(t, "U95 of NPR", keyed(t, out, "npr_u95"), 1.959964*1.96*0.005, 1e-6) // 0.3 % and 0.00392/0.98 = 0.4 %
	budget, ok := out["budget"].(map[string]any)
	if !ok {
		t.Fatal(out)
	}
	text, err := json.Marshal(budget["npr"])
	if err != nil {
		t.Fatal(err)
	}
	if s := string(text); !strings.Contains(s, `"share":0.36`) || !strings.Contains(s, `"share":0.64`) {
		t.Error(s)
	}
}

// JCGM 101 beside the GUM, across Mach 1, and the same for the same seed.
func TestPointMonteCarlo(t *testing.T) {
	const near = "--total-pressure 188.4kPa --total-temperature 900K --back-pressure 101.325kPa --fuel-air-ratio 0.02 --throat-area 0.025m2 " +
		"--uncertainty total-pressure=0.2kPa --uncertainty total-temperature=3K --uncertainty choke-npr=0.3% --monte-carlo 200000 --seed 7"
	out := runDoubt(t, near)
	mc, ok := out["monte_carlo"].(map[string]any)
	if !ok {
		t.Fatal(out)
	}
	outputs, ok := mc["outputs"].(map[string]any)
	if !ok || len(outputs) != 9 || keyed(t, mc, "draws") != 200000 || keyed(t, mc, "seed") != 7 {
		t.Fatal(mc)
	}
	for name, v := range outputs {
		s, ok := v.(map[string]any)
		if !ok {
			t.Fatal(v)
		}
		low, high := keyed(t, s, "low95"), keyed(t, s, "high95")
		half := (high - low) / 2
		if math.Abs(keyed(t, out, name+"_low95")-low) > 0.03*half || math.Abs(keyed(t, out, name+"_high95")-high) > 0.03*half {
			t.Errorf("%s: %v to %v, Monte Carlo %v to %v", name, out[name+"_low95"], out[name+"_high95"], low, high)
		}
	}
	if math.Abs(keyed(t, out, "p_choked")-keyed(t, mc, "p_choked")) > 0.005 || out["choke_marginal"] != true {
		t.Errorf("P(choked) %v, Monte Carlo %v, marginal %v", out["p_choked"], mc["p_choked"], out["choke_marginal"])
	}
	again, err := json.Marshal(runDoubt(t, near))
	if err != nil {
		t.Fatal(err)
	}
	if first, err := json.Marshal(out); err != nil || !bytes.Equal(first, again) {
		t.Errorf("the same seed gives another answer: %v", err)
	}
	var stdout, stderr bytes.Buffer
	if code := pointCommand(strings.Fields(near), &stdout, &stderr); code != 0 {
		t.Fatal(&stderr)
	}
	for _, has := range []string{"MC from", "Marginal:", "by Monte Carlo 0.", "200000 draws of seed 7"} {
		if !strings.Contains(stdout.String(), has) {
			t.Errorf("%q is not in\n%s", has, &stdout)
		}
	}
}

func TestPointCalibratedChoke(t *testing.T) {
	out := runDoubt(t, rigPoint+"--choke-npr 2.4 --uncertainty total-pressure=1%")
	if keyed(t, out, "choke_npr") != 2.4 || out["choke_marginal"] != false {
		t.Error(out)
	}
	closeTo(t, "margin", keyed(t, out, "choke_margin_percent"), 100*(250/101.325/2.4-1), 1e-12)
	closeTo(t, "critical NPR", keyed(t, out, "critical_npr"), 1.859308187, 1e-8)
	// Φ(margin/u): 2.804 %, 1.028 %.
	closeTo(t, "P(choked)", keyed(t, out, "p_choked"), 0.99682, 1e-4)
}

func TestPointDoubtFaults(t *testing.T) {
	const base = "--total-pressure 2bar --total-temperature 900K --back-pressure 1bar "
	for args, has := range map[string]string{
		"--uncertainty pressure=1kPa":                                       "a name of total-pressure, back-pressure",
		"--uncertainty total-pressure":                                      "--uncertainty total-pressure",
		"--uncertainty total-pressure=2K":                                   "measures temperature",
		"--uncertainty total-pressure=-1kPa":                                "0 or above",
		"--uncertainty barometer=1%":                                        "of which pressure",
		"--uncertainty throat-area=1%":                                      "there is no --throat-area",
		"--uncertainty total-pressure=1kPa --uncertainty total-pressure=1%": "given twice",
		"--budget":             "at least one --uncertainty",
		"--monte-carlo 100000": "at least one --uncertainty",
		"--seed 3":             "is for --monte-carlo",
		"--uncertainty total-pressure=1kPa --monte-carlo 10": "10000 to 5000000",
		"--uncertainty exit-area=1%":                         "a name of",
		"--thrust-basis ideal":                               "nozzle-ideal or fully-expanded",
		"--choke-npr 0.9":                                    "outside 1.01 to 10",
		"--uncertainty total-pressure=1kPa --uncertainty total-temperature=1kPa --x=1": "unknown flag",
	} {
		var stdout, stderr bytes.Buffer
		if code := pointCommand(strings.Fields(base+args), &stdout, &stderr); code != 2 || !strings.Contains(stderr.String(), has) {
			t.Errorf("%s: exit %d, %q is not in %s", args, code, has, &stderr)
		}
	}
}
