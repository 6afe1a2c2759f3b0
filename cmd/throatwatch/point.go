package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"strings"

	"github.com/spf13/pflag"

	"throatwatch/monitor"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

// pointUsage heads the help text of point.
const pointUsage = `throatwatch point computes one operating point of a nozzle from numbers given by hand.

  throatwatch point --total-pressure 250kPa --total-temperature 900K --back-pressure 101.325kPa \
      --fuel-air-ratio 0.02 --throat-area 0.025m2 --discharge-coefficient 0.97

Values carry their unit. Pressures are absolute. --exit-area makes the nozzle convergent-divergent.
--uncertainty NAME=VALUE states a standard uncertainty (k = 1), once for each input: NAME is that of the
flag it belongs to, or barometer for an error that total and back pressure share; choke-npr stands for
the nozzle model. VALUE is as in 1.2kPa, 1.5K, 0.0005, or 0.25% of the value. What is not named is exact.

`

// pointValue is a number that point takes, in SI within its bounds.
type pointValue struct {
	flag      string
	dimension unit.Dimension
	standard  string // value without the flag; "" for none
	required  bool
	low, high float64 // SI, inclusive
	usage     string

	text string
	si   float64 // NaN if there is none
}

// read turns the text of the flag into si.
func (v *pointValue) read() error {
	v.si = math.NaN()
	if v.text == "" {
		if v.required {
			return fmt.Errorf("--%s is missing: %s", v.flag, v.usage)
		}
		return nil
	}
	si, u, err := unit.ParseValueAs(v.text, v.dimension)
	switch {
	case err != nil:
		return fmt.Errorf("--%s: %w", v.flag, err)
	case !(si >= v.low && si <= v.high):
		return fmt.Errorf("--%s: %s is outside %.6g to %.6g %s", v.flag, v.text, u.FromSI(v.low), u.FromSI(v.high), u.Name)
	}
	v.si = si
	return nil
}

// pointRequest is a point command as read from its flags.
type pointRequest struct {
	totalPressure, totalTemperature, backPressure pointValue
	fuelAirRatio, humidityRatio                   pointValue
	throatArea, exitArea                          pointValue
	discharge, thrust, ductLoss                   pointValue
	chokeNPR, gamma                               pointValue
	gas, thrustBasis                              string
	json                                          bool
	doubt                                         pointDoubt
}

const (
	thermallyPerfect = "thermally-perfect"
	constantGamma    = "perfect"
)

// values gives every value in the order that help and faults show them in.
func (r *pointRequest) values() []*pointValue {
	return []*pointValue{
		&r.totalPressure, &r.totalTemperature, &r.backPressure, &r.fuelAirRatio, &r.humidityRatio,
		&r.throatArea, &r.exitArea, &r.discharge, &r.thrust, &r.ductLoss, &r.chokeNPR, &r.gamma,
	}
}

// readPoint reads the flags; the error joins every fault, and is pflag.ErrHelp if
// help was asked for.
func readPoint(args []string) (*pointRequest, *pflag.FlagSet, error) {
	r := &pointRequest{
		totalPressure:    pointValue{flag: "total-pressure", dimension: unit.Pressure, required: true, low: 1, high: 1e9, usage: "nozzle total pressure p8, absolute, as in 250kPa; p7 with --duct-loss"},
		totalTemperature: pointValue{flag: "total-temperature", dimension: unit.Temperature, required: true, low: 50, high: 6000, usage: "nozzle total temperature, mass-averaged, as in 620degC"},
		backPressure:     pointValue{flag: "back-pressure", dimension: unit.Pressure, required: true, low: 1, high: 1e9, usage: "static pressure around the exit plane, absolute, as in 101.3kPa"},
		fuelAirRatio:     pointValue{flag: "fuel-air-ratio", dimension: unit.Ratio, standard: "0", low: 0, high: 1, usage: "kg fuel per kg dry air, fuel C12H23"},
		humidityRatio:    pointValue{flag: "humidity-ratio", dimension: unit.Ratio, standard: "0", low: 0, high: 0.5, usage: "kg water vapour per kg dry air"},
		throatArea:       pointValue{flag: "throat-area", dimension: unit.Area, low: 1e-9, high: 1e3, usage: "throat area A8 while running, as in 0.05m2; without it no flow and no thrust"},
		exitArea:         pointValue{flag: "exit-area", dimension: unit.Area, low: 1e-9, high: 1e3, usage: "exit area A9 of a convergent-divergent nozzle"},
		discharge:        pointValue{flag: "discharge-coefficient", dimension: unit.Ratio, standard: "1", low: 0.01, high: 1.5, usage: "Cd, of p8"},
		thrust:           pointValue{flag: "thrust-coefficient", dimension: unit.Ratio, standard: "1", low: 0.01, high: 1.5, usage: "CT, of the --thrust-basis"},
		ductLoss:         pointValue{flag: "duct-loss", dimension: unit.Ratio, standard: "0", low: 0, high: 0.99, usage: "(p7 - p8)/p7, a fraction or in %"},
		chokeNPR:         pointValue{flag: "choke-npr", dimension: unit.Ratio, low: 1.01, high: 10, usage: "p8/pb at which this nozzle chokes by calibration; without it the one-dimensional value"},
		gamma:            pointValue{flag: "gamma", dimension: unit.Ratio, low: 1.0001, high: 2, usage: "ratio of specific heats, with --gas perfect"},
	}
	flags := pflag.NewFlagSet("point", pflag.ContinueOnError)
	flags.SortFlags = false
	flags.Usage = func() {} // errors are told without the whole help
	for _, v := range r.values() {
		flags.StringVar(&v.text, v.flag, v.standard, v.usage)
	}
	flags.StringVar(&r.gas, "gas", thermallyPerfect, "thermally-perfect or perfect; perfect takes a constant --gamma, and R of the mixture")
	flags.StringVar(&r.thrustBasis, "thrust-basis", nozzle.NozzleIdeal.String(), "what CT multiplies: nozzle-ideal or fully-expanded")
	r.doubt.flags(flags)
	flags.BoolVar(&r.json, "json", false, "print JSON")
	if err := flags.Parse(args); err != nil {
		return nil, flags, err
	}
	var faults []error
	for _, arg := range flags.Args() {
		faults = append(faults, fmt.Errorf("%q is no flag: name every value, as in --total-pressure %s", arg, arg))
	}
	for _, v := range r.values() {
		if err := v.read(); err != nil {
			faults = append(faults, err)
		}
	}
	switch r.gas {
	case constantGamma:
		if r.gamma.text == "" {
			faults = append(faults, errors.New("--gamma is missing: --gas perfect needs the ratio of specific heats, as in --gamma 1.33"))
		}
	case thermallyPerfect:
		if r.gamma.text != "" {
			faults = append(faults, errors.New("--gamma: a thermally perfect gas has its own; give --gas perfect with it"))
		}
	default:
		faults = append(faults, fmt.Errorf("--gas %q: give %s or %s", r.gas, thermallyPerfect, constantGamma))
	}
	if most := gas.StoichiometricRatio(gas.Kerosene()); r.fuelAirRatio.si > most {
		faults = append(faults, fmt.Errorf("--fuel-air-ratio: %s is above stoichiometric, %.5f: only complete lean combustion is modelled", r.fuelAirRatio.text, most))
	}
	switch {
	case r.exitArea.text != "" && r.throatArea.text == "":
		faults = append(faults, errors.New("--exit-area: a convergent-divergent nozzle needs --throat-area as well"))
	case r.exitArea.si < r.throatArea.si:
		faults = append(faults, fmt.Errorf("--exit-area: %s is below the throat area %s", r.exitArea.text, r.throatArea.text))
	}
	if r.thrustBasis != nozzle.NozzleIdeal.String() && r.thrustBasis != nozzle.FullyExpanded.String() {
		faults = append(faults, fmt.Errorf("--thrust-basis %q: give %s or %s", r.thrustBasis, nozzle.NozzleIdeal, nozzle.FullyExpanded))
	}
	faults = append(faults, r.readDoubt(flags)...)
	return r, flags, errors.Join(faults...)
}

// pointAnswer is what point computes.
type pointAnswer struct {
	config nozzle.Config
	result nozzle.Result
	inputs uncertainty.Inputs
	doubt  *uncertainty.Result     // nil if no uncertainty is stated
	check  *uncertainty.Simulation // nil unless asked for
}

// compute evaluates the nozzle of the request.
func (r *pointRequest) compute() (*pointAnswer, error) {
	fuel := gas.Kerosene()
	g, err := gas.NewMixture(fuel, r.fuelAirRatio.si, r.humidityRatio.si)
	if err != nil {
		return nil, err
	}
	if r.gas == constantGamma {
		fuel = gas.Fuel{}
		if g, err = gas.Perfect(r.gamma.si, g.R()); err != nil {
			return nil, err
		}
	}
	a := &pointAnswer{config: nozzle.Config{
		Discharge: []nozzle.Point{{NPR: 1, Value: r.discharge.si}},
		Thrust:    []nozzle.Point{{NPR: 1, Value: r.thrust.si}},
		DuctLoss:  r.ductLoss.si,
		// As rigs have it unless they say otherwise: a stopped engine with a zero error of
		// 0.3 % has no flow.
		ResolutionFloor: 0.003,
	}}
	c := &a.config
	if r.throatArea.text != "" {
		c.ThroatArea = r.throatArea.si
	}
	if r.exitArea.text != "" {
		c.Kind, c.ExitArea = nozzle.ConvergentDivergent, r.exitArea.si
	}
	if r.chokeNPR.text != "" {
		c.ChokeNPR = r.chokeNPR.si
	}
	if r.thrustBasis == nozzle.FullyExpanded.String() {
		c.Basis = nozzle.FullyExpanded
	}
	n, err := nozzle.New(*c)
	if err != nil {
		return nil, err
	}
	p := uncertainty.Point{
		Nozzle: n, Gas: &g, Fuel: fuel, FuelAirRatio: r.fuelAirRatio.si, HumidityRatio: r.humidityRatio.si,
		Inputs: nozzle.Inputs{
			TotalPressure:    unit.Absolute(r.totalPressure.si),
			BackPressure:     unit.Absolute(r.backPressure.si),
			TotalTemperature: r.totalTemperature.si,
		},
	}
	if a.result, err = n.Evaluate(&g, p.Inputs); err != nil {
		return nil, err
	}
	return a, r.propagate(a, &p)
}

// known gives nil, which is null in JSON, for what is not known.
func known(v float64) *float64 {
	if math.IsNaN(v) {
		return nil
	}
	return &v
}

func chokeState(r *nozzle.Result) monitor.ChokeState {
	switch {
	case r.Regime == nozzle.NoFlow:
		return monitor.NoFlow
	case r.Choked:
		return monitor.Choked
	}
	return monitor.Unchoked
}

// answerJSON gives the answer by the keys that operating points have everywhere.
func (r *pointRequest) answerJSON(a *pointAnswer) map[string]any {
	v := &a.result
	out := map[string]any{
		"npr": v.NPR, "npr_rake": v.NPRRake, "critical_npr": v.CriticalNPR, "choke_npr": v.ChokeNPR,
		"choke_margin_percent": v.MarginPercent, "choke_state": chokeState(v).String(), "choke_marginal": false,
		"throat_mach": v.Throat.Mach, "throat_pressure_pa": v.Throat.Pressure, "throat_temperature_k": v.Throat.Temperature,
		"critical_pressure_pa": v.CriticalPressure, "critical_temperature_k": v.CriticalTemperature,
		"mass_flow_kg_s": known(v.MassFlow), "exit_velocity_m_s": v.Exit.Velocity, "gross_thrust_n": known(v.GrossThrust),
		"gamma_total": v.GammaTotal, "gas_constant_j_kg_k": v.GasConstant,
		"warnings": append([]string{}, v.WarningTexts()...),
	}
	if a.config.Kind == nozzle.ConvergentDivergent {
		out["first_critical_npr"], out["second_critical_npr"], out["third_critical_npr"] = v.CriticalNPR, v.ShockAtExitNPR, v.DesignNPR
		out["regime"] = v.Regime.String()
	}
	r.doubtJSON(out, a)
	return out
}

// table writes the answer for a person: the state and the margin first.
func (r *pointRequest) table(w io.Writer, a *pointAnswer) error {
	var text strings.Builder
	resultTable(&text, &a.result, &a.config)
	if a.doubt != nil {
		r.doubtTable(&text, a)
	} else {
		text.WriteString("No uncertainty is given, so none is shown: near zero margin the state is open.\n")
	}
	text.WriteString("Not protection. Follow the facility's procedures.\n")
	_, err := io.WriteString(w, text.String())
	return err
}

func resultTable(text *strings.Builder, r *nozzle.Result, c *nozzle.Config) {
	line := func(name, value, remark string) {
		text.WriteString(strings.TrimRight(fmt.Sprintf("%-23s %-13s %s", name, value, remark), " ") + "\n")
	}
	number := func(format string, v float64, unitName string) string {
		if math.IsNaN(v) {
			return "–"
		}
		return strings.TrimRight(fmt.Sprintf(format, v)+" "+unitName, " ")
	}
	kelvin := func(t float64) (string, string) {
		return number("%.2f", t, "K"), fmt.Sprintf("%.2f °C", t-273.15)
	}
	absent := ""
	if math.IsNaN(r.ThroatArea) {
		absent = "needs --throat-area"
	}
	line("Choke state", strings.ReplaceAll(chokeState(r).String(), "_", " "), c.Kind.String()+" nozzle, "+strings.ReplaceAll(r.Regime.String(), "_", " "))
	line("Choke margin", number("%+.2f", r.MarginPercent, "%"), fmt.Sprintf("%+.3f kPa of back pressure", r.MarginPa/1e3))
	line("NPR (p8/pb)", number("%.5f", r.NPR, ""), "")
	line("Rake NPR (p7/pb)", number("%.5f", r.NPRRake, ""), "")
	if r.ChokeCalibrated {
		line("Choke NPR", number("%.5f", r.ChokeNPR, ""), "of the calibration")
	}
	line("Critical NPR", number("%.5f", r.CriticalNPR, ""), "one-dimensional, this gas at this temperature")
	if c.Kind == nozzle.ConvergentDivergent {
		line("Shock-at-exit NPR", number("%.5f", r.ShockAtExitNPR, ""), "")
		line("Design NPR", number("%.5f", r.DesignNPR, ""), "")
	}
	line("Throat Mach number", number("%.5f", r.Throat.Mach, ""), "")
	line("Throat pressure", number("%.3f", r.Throat.Pressure/1e3, "kPa"), "")
	value, celsius := kelvin(r.Throat.Temperature)
	line("Throat temperature", value, celsius)
	line("Critical pressure", number("%.3f", r.CriticalPressure/1e3, "kPa"), "")
	value, celsius = kelvin(r.CriticalTemperature)
	line("Critical temperature", value, celsius)
	line("Mass flow W8", number("%.5g", r.MassFlow, "kg/s"), absent)
	line("Exit velocity", number("%.2f", r.Exit.Velocity, "m/s"), "")
	if absent == "" {
		absent = "basis " + c.Basis.String()
	}
	line("Gross thrust", number("%.6g", r.GrossThrust, "N"), absent)
	line("γ at total temperature", number("%.5f", r.GammaTotal, ""), "")
	line("Gas constant", number("%.3f", r.GasConstant, "J/(kg K)"), "")
	for _, warning := range r.WarningTexts() {
		text.WriteString("Warning: " + warning + "\n")
	}
}

// pointCommand is throatwatch point: one operating point from numbers given by
// hand. It returns the exit code: 0, 2 for a fault in the flags, 1 if the answer
// cannot be written.
func pointCommand(args []string, stdout, stderr io.Writer) int {
	tell := func(err error) {
		for text := range strings.SplitSeq(err.Error(), "\n") {
			_, _ = fmt.Fprintln(stderr, "throatwatch point:", text) // there is nowhere left to tell a fault
		}
	}
	r, flags, err := readPoint(args)
	switch {
	case errors.Is(err, pflag.ErrHelp):
		if _, err := fmt.Fprint(stdout, pointUsage, flags.FlagUsages()); err != nil {
			tell(err)
			return 1
		}
		return 0
	case err != nil:
		tell(err)
		_, _ = fmt.Fprintln(stderr, "throatwatch point --help lists the flags.")
		return 2
	}
	answer, err := r.compute()
	if err != nil {
		tell(err)
		return 2
	}
	if r.json {
		enc := json.NewEncoder(stdout)
		enc.SetEscapeHTML(false)
		enc.SetIndent("", "  ")
		err = enc.Encode(r.answerJSON(answer))
	} else {
		err = r.table(stdout, answer)
	}
	if err != nil {
		tell(fmt.Errorf("writing the answer: %w", err))
		return 1
	}
	return 0
}
