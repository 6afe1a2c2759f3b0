package main

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// pointJSON is the answer of point --json without uncertainties.
type pointJSON struct {
	NPR                 float64  `json:"npr"`
	NPRRake             float64  `json:"npr_rake"`
	CriticalNPR         float64  `json:"critical_npr"`
	ChokeNPR            float64  `json:"choke_npr"`
	ChokeMarginPercent  float64  `json:"choke_margin_percent"`
	ChokeState          string   `json:"choke_state"`
	ChokeMarginal       bool     `json:"choke_marginal"`
	ThroatMach          float64  `json:"throat_mach"`
	ThroatPressure      float64  `json:"throat_pressure_pa"`
	ThroatTemperature   float64  `json:"throat_temperature_k"`
	CriticalPressure    float64  `json:"critical_pressure_pa"`
	CriticalTemperature float64  `json:"critical_temperature_k"`
	MassFlow            *float64 `json:"mass_flow_kg_s"`
	ExitVelocity        float64  `json:"exit_velocity_m_s"`
	GrossThrust         *float64 `json:"gross_thrust_n"`
	GammaTotal          float64  `json:"gamma_total"`
	GasConstant         float64  `json:"gas_constant_j_kg_k"`
	Warnings            []string `json:"warnings"`

	First  float64 `json:"first_critical_npr"` // with --exit-area
	Second float64 `json:"second_critical_npr"`
	Third  float64 `json:"third_critical_npr"`
	Regime string  `json:"regime"`
}

// pointVectors reads a file of testdata/vectors, whose first lines name its source.
func pointVectors(t *testing.T, name string) []map[string]string {
	t.Helper()
	f, err := os.Open(filepath.Join("..", "..", "testdata", "vectors", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(f)
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out []map[string]string
	for _, row := range rows[1:] {
		v := map[string]string{}
		for i, name := range rows[0] {
			v[name] = row[i]
		}
		out = append(out, v)
	}
	if len(out) == 0 {
		t.Fatalf("%s has no rows", name)
	}
	return out
}

func pointNumber(t *testing.T, s string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// runPoint runs the command as a person would, with --json.
func runPoint(t *testing.T, args ...string) pointJSON {
	t.Helper()
	var stdout, stderr bytes.Buffer
	if code := pointCommand(append(args, "--json"), &stdout, &stderr); code != 0 || stderr.Len() > 0 {
		t.Fatalf("%q: exit %d: %s", args, code, &stderr)
	}
	var out pointJSON
	dec := json.NewDecoder(&stdout)
	dec.DisallowUnknownFields()
	if err := dec.Decode(&out); err != nil {
		t.Fatal(err)
	}
	return out
}

func closeTo(t *testing.T, name string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s = %.12g, want %.12g", name, got, want)
	}
}

// The critical state of kerosene products and air: testdata/vectors/thermally_perfect.csv.
func TestPointThermallyPerfect(t *testing.T) {
	for _, v := range pointVectors(t, "thermally_perfect.csv") {
		if v["gas"] == "dry_air_ussa76" { // another composition than ours
			continue
		}
		const rel = 1e-7
		r := runPoint(t, "--total-pressure", "300kPa", "--total-temperature", v["T0_K"]+"K", "--back-pressure=1bar",
			"--fuel-air-ratio", v["f"], "--throat-area", "0.025m2")
		name, t0 := "f "+v["f"]+" T0 "+v["T0_K"], pointNumber(t, v["T0_K"])
		closeTo(t, name+": γ(T0)", r.GammaTotal, pointNumber(t, v["gamma_T0"]), rel)
		closeTo(t, name+": T*/T0", r.CriticalTemperature/t0, pointNumber(t, v["Tstar_T0"]), rel)
		closeTo(t, name+": p*/p0", r.CriticalPressure/300e3, pointNumber(t, v["pstar_p0"]), rel)
		closeTo(t, name+": critical NPR", r.CriticalNPR, pointNumber(t, v["crit_npr"]), rel)
		closeTo(t, name+": C*", *r.MassFlow*math.Sqrt(r.GasConstant*t0)/(0.025*300e3), pointNumber(t, v["c_star"]), rel)
	}
}

// Flow at several pressure ratios: testdata/vectors/thermally_perfect_sub.csv.
func TestPointThermallyPerfectUnchoked(t *testing.T) {
	for _, v := range pointVectors(t, "thermally_perfect_sub.csv") {
		if v["gas"] == "dry_air_ussa76" {
			continue
		}
		const rel = 1e-7
		npr, t0 := pointNumber(t, v["npr"]), pointNumber(t, v["T0_K"])
		r := runPoint(t, "--total-pressure", strconv.FormatFloat(npr*100, 'g', -1, 64)+"kPa", "--total-temperature", v["T0_K"]+"K",
			"--back-pressure", "100 kPa", "--fuel-air-ratio", v["f"], "--throat-area", "250cm2")
		name := "f " + v["f"] + " T0 " + v["T0_K"] + " NPR " + v["npr"]
		if (r.ChokeState == "choked") != (v["choked"] == "1") {
			t.Errorf("%s: %s", name, r.ChokeState)
		}
		closeTo(t, name+": M", r.ThroatMach, pointNumber(t, v["M_exit"]), rel)
		closeTo(t, name+": T", r.ThroatTemperature/t0, pointNumber(t, v["Te_T0"]), rel)
		closeTo(t, name+": p", r.ThroatPressure/(npr*1e5), pointNumber(t, v["pe_p0"]), rel)
		closeTo(t, name+": V", r.ExitVelocity/math.Sqrt(r.GasConstant*t0), pointNumber(t, v["V_RT0"]), rel)
		closeTo(t, name+": W", *r.MassFlow*math.Sqrt(r.GasConstant*t0)/(0.025*npr*1e5), pointNumber(t, v["flow"]), rel)
		closeTo(t, name+": F", *r.GrossThrust/(0.025*1e5), pointNumber(t, v["thrust"]), rel)
	}
}

// NACA Report 1135, Tables I and II, to its printed digits: the back pressure that the
// table gives for a Mach number must give that Mach number and its temperature ratio,
// and the area ratio that it gives, the supersonic exit.
func TestPointNACA1135(t *testing.T) {
	for _, v := range pointVectors(t, "naca1135.csv") {
		mach := pointNumber(t, v["M"])
		digits := func(name string, got float64, printed string) {
			t.Helper()
			_, decimals, _ := strings.Cut(printed, ".")
			if s := strconv.FormatFloat(got, 'f', len(decimals), 64); s != printed {
				t.Errorf("M %g: %s = %s, printed %s", mach, name, s, printed)
			}
		}
		switch {
		case mach == 0:
			continue // no flow
		case mach <= 1:
			r := runPoint(t, "--total-pressure", "1bar", "--total-temperature", "1000K", "--back-pressure", fmt.Sprintf("%.12gbar", pointNumber(t, v["p_pt_exact"])),
				"--gas", "perfect", "--gamma", "1.4", "--throat-area", "1m2")
			closeTo(t, "M", r.ThroatMach, mach, 1e-9)
			digits("p/pt", r.ThroatPressure/1e5, v["p_pt_print"])
			digits("T/Tt", r.ThroatTemperature/1000, v["T_Tt_print"])
			// A/A* = C*/φ, C* = √γ (2/(γ+1))^((γ+1)/2(γ−1)).
			digits("A/A*", math.Sqrt(1.4)/(1.2*1.2*1.2)/(*r.MassFlow*math.Sqrt(r.GasConstant*1000)/1e5), v["A_Astar_print"])
		default:
			r := runPoint(t, "--total-pressure", "1bar", "--total-temperature", "1000K", "--back-pressure", "1Pa",
				"--gas", "perfect", "--gamma", "1.4", "--throat-area", "1m2", "--exit-area", v["A_Astar_exact"]+"m2")
			// v² = 2 cp (Tt − T)
			ratio := 1 - r.ExitVelocity*r.ExitVelocity/(2*3.5*r.GasConstant*1000)
			digits("T/Tt", ratio, v["T_Tt_print"])
			closeTo(t, "M", r.ExitVelocity/math.Sqrt(1.4*r.GasConstant*1000*ratio), mach, 1e-6)
		}
	}
}

// Textbook and own examples in testdata/vectors/worked_examples.csv, which names
// them. They have other gas constants than the mixture's: W goes with 1/√R, V
// with √R.
func TestPointWorkedExamples(t *testing.T) {
	want := map[string]float64{}
	for _, v := range pointVectors(t, "worked_examples.csv") {
		want[v["case"]+" "+v["quantity"]] = pointNumber(t, v["value"])
	}
	for _, tc := range []struct {
		name                  string // case and prefix of its quantities
		args                  string
		r                     float64 // gas constant of the source
		m, temp, vel, w, p, f string  // quantities
	}{
		{
			name: "W3_moran_9.14 pb500_", args: "--total-pressure 1MPa --total-temperature 360K --back-pressure 500kPa --throat-area 0.001m2 --gamma 1.4",
			r: 8314 / 28.97, m: "M", temp: "Te_K", vel: "Ve", w: "mdot", p: "pe_Pa",
		},
		{
			name: "W3_moran_9.14 pb784_", args: "--total-pressure 1MPa --total-temperature 360K --back-pressure 784kPa --throat-area 10cm2 --gamma 1.4",
			r: 8314 / 28.97, m: "M", temp: "Te_K", vel: "Ve", w: "mdot", p: "pe_Pa",
		},
		{
			name: "W4_fox_12.2 ", args: "--total-pressure 1000kPa --total-temperature 333K --back-pressure 591kPa --throat-area 1000mm2 --gamma 1.4",
			r: 287, m: "M", temp: "Te", vel: "Ve", w: "m",
		},
		{
			name: "W9a_unchoked ", args: "--total-pressure 160kPa --total-temperature 850K --back-pressure 1atm --throat-area 0.025m2 --gamma 1.33 --discharge-coefficient 0.97",
			r: 287.05, m: "M_exit", temp: "T_exit_K", vel: "V_exit", w: "mdot_Cd", p: "p_exit_Pa", f: "gross_thrust_ideal_N",
		},
		{
			name: "W9b_choked ", args: "--total-pressure 250kPa --total-temperature 676.85degC --back-pressure 101325Pa --throat-area 0.025m2 --gamma 1.33 --discharge-coefficient 0.97",
			r: 287.05, m: "M_exit", temp: "T_exit_K", vel: "V_exit", w: "mdot_Cd", p: "p_exit_Pa", f: "gross_thrust_ideal_N",
		},
		{
			name: "W10_choked_flow ", args: "--total-pressure 5bar --total-temperature 15degC --back-pressure 101325Pa --throat-area 0.01m2 --gamma 1.4 --discharge-coefficient 98%",
			r: 287.05287, w: "mdot_constant_gamma",
		},
	} {
		r := runPoint(t, append(strings.Fields(tc.args), "--gas", "perfect")...)
		scale := math.Sqrt(r.GasConstant / tc.r)
		for _, c := range []struct {
			quantity string
			got      float64
		}{
			{tc.m, r.ThroatMach},
			{tc.temp, r.ThroatTemperature},
			{tc.vel, r.ExitVelocity / scale},
			{tc.w, *r.MassFlow * scale},
			{tc.p, r.ThroatPressure},
			{tc.f, *r.GrossThrust / 0.97}, // thrust does not depend on R
		} {
			if c.quantity == "" {
				continue
			}
			w, ok := want[tc.name+c.quantity]
			if !ok {
				t.Fatalf("no quantity %q", tc.name+c.quantity)
			}
			closeTo(t, tc.name+c.quantity, c.got, w, 1e-7) // eight digits
		}
	}
}

// The keys are a contract.
func TestPointKeys(t *testing.T) {
	var stdout, stderr bytes.Buffer
	if code := pointCommand(strings.Fields("--total-pressure 36.3psi --total-temperature 620degC --back-pressure 29.92inHg --json"), &stdout, &stderr); code != 0 {
		t.Fatal(stderr.String())
	}
	var got map[string]any
	if err := json.Unmarshal(stdout.Bytes(), &got); err != nil {
		t.Fatal(err)
	}
	const contract = `npr npr_rake critical_npr choke_npr
		choke_margin_percent choke_state choke_marginal throat_mach throat_pressure_pa throat_temperature_k critical_pressure_pa critical_temperature_k mass_flow_kg_s exit_velocity_m_s
		gross_thrust_n gamma_total gas_constant_j_kg_k warnings`
	for key := range strings.FieldsSeq(contract) {
		if _, ok := got[key]; !ok {
			t.Errorf("no key %q", key)
		}
		delete(got, key)
	}
	if len(got) > 0 {
		t.Errorf("keys beyond the contract: %v", got)
	}
	if s := stdout.String(); !strings.Contains(s, `"mass_flow_kg_s": null`) || !strings.Contains(s, `"gross_thrust_n": null`) || !strings.Contains(s, `"warnings": []`) {
		t.Errorf("without an area:\n%s", s)
	}
}

func TestPointDuctLoss(t *testing.T) {
	loss := runPoint(t, strings.Fields("--total-pressure 250kPa --total-temperature 900K --back-pressure 101325Pa --duct-loss 2% --throat-area 0.025m2")...)
	less := runPoint(t, strings.Fields("--total-pressure 245kPa --total-temperature 900K --back-pressure 101325Pa --throat-area 0.025m2")...)
	closeTo(t, "npr", loss.NPR, less.NPR, 1e-15)
	closeTo(t, "W8", *loss.MassFlow, *less.MassFlow, 1e-14)
	closeTo(t, "rake npr", loss.NPRRake, 250e3/101325.0, 1e-15)
	closeTo(t, "rake npr without loss", less.NPRRake, less.NPR, 1e-15)
}

func TestPointStates(t *testing.T) {
	for pressure, want := range map[string]string{"250kPa": "choked", "150kPa": "unchoked", "101.325kPa": "no_flow", "101.426kPa": "no_flow", "90kPa": "no_flow"} {
		r := runPoint(t, "--total-pressure", pressure, "--total-temperature", "900K", "--back-pressure", "101.325kPa", "--throat-area", "0.02m2")
		if r.ChokeState != want || r.ChokeMarginal || (*r.MassFlow == 0) != (want == "no_flow") || (len(r.Warnings) > 0) != (pressure == "90kPa") {
			t.Errorf("%s: %s, W %v, warnings %q", pressure, r.ChokeState, *r.MassFlow, r.Warnings)
		}
	}
}

// The table says what an engineer looks for first, its units, its doubts, and
// what it is not.
func TestPointTable(t *testing.T) {
	for _, tc := range []struct {
		args string
		has  []string
	}{
		{
			"--total-pressure 250kPa --total-temperature 900K --back-pressure 101325Pa --fuel-air-ratio 0.02 --throat-area 0.025m2 --discharge-coefficient 0.97",
			[]string{"choked", "+32.70 %", "+33.134 kPa", "2.46731", "1.85931", "1.00000", "134.459 kPa", "769.85 K", "8.0385 kg/s", "544.76 m/s", "5182.57 N", "nozzle-ideal", "287.025 J/(kg K)"},
		},
		{"--total-pressure 150kPa --total-temperature 900K --back-pressure 101325Pa", []string{"unchoked", "-20.7", "–", "needs --throat-area"}},
		{
			"--total-pressure 6bar --total-temperature 300K --back-pressure 1bar --throat-area 200cm2 --exit-area 500cm2",
			[]string{"convergent-divergent nozzle, over expanded", "Design NPR", "Warning: convergent-divergent", "Warning: high pressure"},
		},
	} {
		var stdout, stderr bytes.Buffer
		if code := pointCommand(strings.Fields(tc.args), &stdout, &stderr); code != 0 {
			t.Fatalf("exit %d: %s", code, &stderr)
		}
		for _, has := range append(tc.has, "Not protection. Follow the facility's procedures.") {
			if !strings.Contains(stdout.String(), has) {
				t.Errorf("%q is not in\n%s", has, &stdout)
			}
		}
	}
}

func TestPointFaultsAllAtOnce(t *testing.T) {
	for _, tc := range []struct {
		args string
		has  []string
	}{
		{"", []string{"--total-pressure is missing", "--total-temperature is missing", "--back-pressure is missing"}},
		{
			"stray --total-pressure 250 --total-temperature 5kPa --back-pressure 14.7psia --fuel-air-ratio 0.08 --humidity-ratio 6.3 --throat-area 1m --discharge-coefficient 97 --gas real",
			[]string{
				`"stray" is no flag`, "--total-pressure", "unit missing", "--total-temperature", "measures pressure", "--back-pressure", `write "psi"`, "--fuel-air-ratio", "stoichiometric",
				"--humidity-ratio", "outside 0 to 0.5", "--throat-area", "measures length", "--discharge-coefficient", `--gas "real"`,
			},
		},
		{"--total-pressure 2bar --total-temperature 900K --back-pressure 1bar --gas perfect --exit-area 1m2", []string{"--gamma is missing", "needs --throat-area"}},
		{"--total-pressure 2bar --total-temperature 900K --back-pressure 1bar --gamma 1.4 --exit-area 1m2 --throat-area 2m2", []string{"give --gas perfect", "below the throat area"}},
		{"--total-presure 2bar", []string{"total-presure"}},
	} {
		var stdout, stderr bytes.Buffer
		if code := pointCommand(strings.Fields(tc.args), &stdout, &stderr); code != 2 || stdout.Len() > 0 {
			t.Errorf("%q: exit %d, prints %q", tc.args, code, &stdout)
		}
		for _, has := range tc.has {
			if !strings.Contains(stderr.String(), has) {
				t.Errorf("%q: %q is not in\n%s", tc.args, has, &stderr)
			}
		}
	}
}

func TestPointHelp(t *testing.T) {
	var stdout, stderr bytes.Buffer
	if code := pointCommand([]string{"--help"}, &stdout, &stderr); code != 0 || stderr.Len() > 0 {
		t.Fatalf("exit %d: %s", code, &stderr)
	}
	flags := strings.Fields("--total-pressure --total-temperature --back-pressure --fuel-air-ratio --humidity-ratio --throat-area --exit-area --discharge-coefficient --thrust-coefficient --duct-loss --thrust-basis --choke-npr --uncertainty --budget --monte-carlo --seed --gas --gamma --json")
	for _, word := range slices.Concat(flags, []string{"absolute"}) {
		if !strings.Contains(stdout.String(), word) {
			t.Errorf("help does not say %q", word)
		}
	}
}

type brokenPipe struct{}

func (brokenPipe) Write([]byte) (int, error) { return 0, errors.New("broken pipe") }

func TestPointTellsWhenItCannotWrite(t *testing.T) {
	for _, args := range []string{"--total-pressure 2bar --total-temperature 900K --back-pressure 1bar", "--total-pressure 2bar --total-temperature 900K --back-pressure 1bar --json", "--help"} {
		var stderr bytes.Buffer
		if code := pointCommand(strings.Fields(args), brokenPipe{}, &stderr); code != 1 || !strings.Contains(stderr.String(), "broken pipe") {
			t.Errorf("%s: exit %d, %s", args, code, &stderr)
		}
	}
}
