package main

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"

	"github.com/spf13/pflag"

	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

// pointDoubt is what point is told about uncertainties.
type pointDoubt struct {
	texts  []string // NAME=VALUE
	budget bool
	draws  int
	seed   uint64

	parts []pointPart
}

// pointPart is the standard uncertainty of one input.
type pointPart struct {
	name     string
	kind     pointKind
	value    float64 // SI, or a fraction
	fraction bool
}

// pointKind says what --uncertainty may name, and what it stands for.
type pointKind struct {
	input      uncertainty.Input
	dimension  unit.Dimension // of the uncertainty
	difference string         // unit that it is shown in
	scale      float64        // of that unit, over SI
	of         func(*pointRequest) float64
}

// pointKinds gives the names in the order that messages and budgets show them in.
func pointKinds() ([]string, map[string]pointKind) {
	names := []string{
		"total-pressure", "back-pressure", "barometer", "duct-loss", "total-temperature", "fuel-air-ratio", "humidity-ratio",
		"throat-area", "discharge-coefficient", "thrust-coefficient", "choke-npr",
	}
	return names, map[string]pointKind{
		"total-pressure":        {uncertainty.TotalPressure, unit.Pressure, "kPa", 1e-3, func(r *pointRequest) float64 { return r.totalPressure.si }},
		"back-pressure":         {uncertainty.BackPressure, unit.Pressure, "kPa", 1e-3, func(r *pointRequest) float64 { return r.backPressure.si }},
		"barometer":             {uncertainty.CommonPressure, unit.Pressure, "kPa", 1e-3, nil},
		"duct-loss":             {uncertainty.TotalPressure, unit.Ratio, "", 1, func(r *pointRequest) float64 { return r.ductLoss.si }},
		"total-temperature":     {uncertainty.TotalTemperature, unit.TemperatureDifference, "K", 1, func(r *pointRequest) float64 { return r.totalTemperature.si }},
		"fuel-air-ratio":        {uncertainty.FuelAirRatio, unit.Ratio, "", 1, func(r *pointRequest) float64 { return r.fuelAirRatio.si }},
		"humidity-ratio":        {uncertainty.HumidityRatio, unit.Ratio, "", 1, func(r *pointRequest) float64 { return r.humidityRatio.si }},
		"throat-area":           {uncertainty.ThroatArea, unit.Area, "m²", 1, func(r *pointRequest) float64 { return r.throatArea.si }},
		"discharge-coefficient": {uncertainty.Discharge, unit.Ratio, "", 1, func(r *pointRequest) float64 { return r.discharge.si }},
		"thrust-coefficient":    {uncertainty.Thrust, unit.Ratio, "", 1, func(r *pointRequest) float64 { return r.thrust.si }},
		"choke-npr":             {uncertainty.ChokeNPR, unit.Ratio, "", 1, nil}, // its value is a result
	}
}

func (d *pointDoubt) flags(flags *pflag.FlagSet) {
	flags.StringArrayVar(&d.texts, "uncertainty", nil, "`NAME=VALUE`, standard uncertainty of an input, as in total-pressure=1.2kPa or throat-area=0.25%; repeatable")
	flags.BoolVar(&d.budget, "budget", false, "show what each input contributes to each uncertainty")
	flags.IntVar(&d.draws, "monte-carlo", 0, "check the intervals by `N` random draws (JCGM 101), 200000 or more for 95 %")
	flags.Uint64Var(&d.seed, "seed", 1, "seed of --monte-carlo")
}

// readDoubt reads the uncertainties; it gives every fault.
func (r *pointRequest) readDoubt(flags *pflag.FlagSet) (faults []error) {
	d := &r.doubt
	names, kinds := pointKinds()
	seen := map[string]bool{}
	for _, text := range d.texts {
		name, value, _ := strings.Cut(text, "=")
		name = strings.TrimSpace(name)
		kind, ok := kinds[name]
		switch {
		case !ok:
			faults = append(faults, fmt.Errorf("--uncertainty %q: give NAME=VALUE with a name of %s", text, strings.Join(names, ", ")))
			continue
		case seen[name]:
			faults = append(faults, fmt.Errorf("--uncertainty %q: %s is given twice: combine its parts into one, root of the sum of squares", text, name))
			continue
		}
		seen[name] = true
		part := pointPart{name: name, kind: kind}
		si, u, err := unit.ParseValue(value)
		if part.fraction = err == nil && u.Name == "%"; !part.fraction {
			si, _, err = unit.ParseValueAs(value, kind.dimension)
		}
		part.value = si
		switch {
		case err != nil:
			faults = append(faults, fmt.Errorf("--uncertainty %s: %w", name, err))
		case !(si >= 0):
			faults = append(faults, fmt.Errorf("--uncertainty %s: %s must be 0 or above", name, value))
		case part.fraction && kind.of == nil && kind.dimension == unit.Pressure:
			faults = append(faults, fmt.Errorf("--uncertainty %s: %s of which pressure? give it as in 20Pa", name, value))
		case name == "throat-area" && r.throatArea.text == "":
			faults = append(faults, errors.New("--uncertainty throat-area: there is no --throat-area"))
		}
		d.parts = append(d.parts, part)
	}
	if len(d.texts) == 0 && d.budget {
		faults = append(faults, errors.New("--budget: state at least one --uncertainty"))
	}
	switch given := flags.Changed("monte-carlo"); {
	case !given && flags.Changed("seed"):
		faults = append(faults, errors.New("--seed: is for --monte-carlo"))
	case given && len(d.texts) == 0:
		faults = append(faults, errors.New("--monte-carlo: state at least one --uncertainty"))
	case given && (d.draws < uncertainty.FewestDraws || d.draws > uncertainty.MostDraws):
		faults = append(faults, fmt.Errorf("--monte-carlo %d: must be %d to %d draws", d.draws, uncertainty.FewestDraws, uncertainty.MostDraws))
	}
	return faults
}

// size gives the uncertainty of a part in the unit that package uncertainty wants for its
// input.
func (p *pointPart) size(r *pointRequest, a *pointAnswer) float64 {
	v := p.value
	switch {
	case p.name == "duct-loss": // p8 = p7 (1 − loss)
		if p.fraction {
			v *= r.ductLoss.si
		}
		return v / (1 - r.ductLoss.si) * r.totalPressure.si
	case p.name == "choke-npr":
		if p.fraction {
			return v
		}
		return v / a.result.ChokeNPR
	case p.kind.input >= uncertainty.ThroatArea: // relative there
		if p.fraction {
			return v
		}
		return v / p.kind.of(r)
	case p.fraction:
		return v * p.kind.of(r)
	}
	return v
}

// propagate carries the uncertainties through the point, if there are any.
func (r *pointRequest) propagate(a *pointAnswer, p *uncertainty.Point) error {
	if len(r.doubt.parts) == 0 {
		return nil
	}
	for i := range r.doubt.parts {
		part := &r.doubt.parts[i]
		to := &a.inputs[part.kind.input].Systematic
		*to = math.Hypot(*to, part.size(r, a))
	}
	doubt, err := uncertainty.Evaluate(p, &a.inputs)
	if err != nil {
		return err
	}
	a.doubt = &doubt
	if r.doubt.draws > 0 {
		check, err := uncertainty.MonteCarlo(p, &a.inputs, r.doubt.draws, rand.New(rand.NewPCG(r.doubt.seed, 0)))
		if err != nil {
			return err
		}
		a.check = &check
	}
	return nil
}

// marginal tells whether the choke state is open by the uncertainty.
func (a *pointAnswer) marginal() bool { return a.doubt.PChoked > 0.025 && a.doubt.PChoked < 0.975 }

// doubtJSON adds the uncertainties, budget and check.
func (r *pointRequest) doubtJSON(out map[string]any, a *pointAnswer) {
	if a.doubt == nil {
		return
	}
	out["p_choked"], out["choke_marginal"] = known(a.doubt.PChoked), a.marginal()
	for o := range uncertainty.NumOutputs {
		e := &a.doubt.Outputs[o]
		out[o.String()+"_low95"], out[o.String()+"_high95"] = known(e.Low), known(e.High)
		if o < uncertainty.ThroatMach {
			out[o.String()+"_u95"] = known(e.U95)
		}
	}
	if r.doubt.budget {
		budget := map[string]any{}
		for o := range uncertainty.NumOutputs {
			lines := []map[string]any{}
			for _, l := range r.budget(a, o) {
				lines = append(lines, map[string]any{"input": l.name, "uncertainty": l.size, "unit": l.unit, "contribution": known(l.contribution), "share": known(l.share)})
			}
			budget[o.String()] = lines
		}
		out["budget"] = budget
	}
	if a.check != nil {
		outputs := map[string]any{}
		for o, s := range a.check.Outputs {
			outputs[uncertainty.Output(o).String()] = map[string]any{
				"mean": known(s.Mean), "standard_uncertainty": known(s.Deviation), "low95": known(s.Low), "high95": known(s.High),
			}
		}
		out["monte_carlo"] = map[string]any{"draws": r.doubt.draws, "seed": r.doubt.seed, "p_choked": known(a.check.PChoked), "outputs": outputs}
	}
}

// budgetLine is what one input contributes to the uncertainty of one output.
type budgetLine struct {
	name         string
	size         float64 // standard uncertainty of the input
	unit         string  // of size; "%" of the value
	contribution float64 // standard uncertainty of the output
	share        float64 // of the variance
}

// budget lists what is not zero. Inputs that package uncertainty takes as one, total
// pressure and duct loss, are parted by their variances.
func (r *pointRequest) budget(a *pointAnswer, o uncertainty.Output) (lines []budgetLine) {
	e := &a.doubt.Outputs[o]
	for i := range r.doubt.parts {
		p := &r.doubt.parts[i]
		input := p.kind.input
		if e.Contribution[input] == 0 {
			continue
		}
		part := p.size(r, a) / a.inputs[input].Systematic
		l := budgetLine{
			name: p.name, size: p.value * p.kind.scale, unit: p.kind.difference,
			contribution: math.Abs(e.Contribution[input]) * part, share: e.Share(input) * part * part,
		}
		if p.fraction {
			l.size, l.unit = 100*p.value, "%"
		}
		lines = append(lines, l)
	}
	return lines
}

// outputTitles gives name, unit, and scale of the unit over SI, for people.
func outputTitles() [uncertainty.NumOutputs]struct {
	name, unit string
	scale      float64
} {
	return [uncertainty.NumOutputs]struct {
		name, unit string
		scale      float64
	}{
		{"NPR (p8/pb)", "", 1},
		{"Choke NPR", "", 1},
		{"Choke margin", "%", 1},
		{"Mass flow W8", "kg/s", 1},
		{"Gross thrust", "N", 1},
		{"Throat Mach number", "", 1},
		{"Throat pressure", "kPa", 1e-3},
		{"Throat temperature", "K", 1},
		{"Exit velocity", "m/s", 1},
	}
}

// doubtTable writes the uncertainties for a person.
func (r *pointRequest) doubtTable(text *strings.Builder, a *pointAnswer) {
	number := func(v, scale float64) string {
		if math.IsNaN(v) {
			return "–"
		}
		return fmt.Sprintf("%.6g", v*scale)
	}
	row := func(cells ...string) {
		var line strings.Builder
		fmt.Fprintf(&line, "%-25s", cells[0])
		for _, c := range cells[1:] {
			fmt.Fprintf(&line, " %11s", c)
		}
		text.WriteString(strings.TrimRight(line.String(), " ") + "\n")
	}
	head := []string{"95 % uncertainty", "value", "± U95", "from", "to"}
	if a.check != nil {
		head = append(head, "MC from", "MC to")
	}
	text.WriteString("\n")
	row(head...)
	titles := outputTitles()
	for o, title := range titles {
		e := &a.doubt.Outputs[o]
		cells := []string{strings.TrimRight(title.name+" "+title.unit, " "), number(e.Value, title.scale), number(e.U95, title.scale), number(e.Low, title.scale), number(e.High, title.scale)}
		if a.check != nil {
			s := &a.check.Outputs[o]
			cells = append(cells, number(s.Low, title.scale), number(s.High, title.scale))
		}
		row(cells...)
	}
	switch p := a.doubt.PChoked; {
	case math.IsNaN(p):
		text.WriteString("P(choked) is not known: state the nozzle model with --uncertainty choke-npr=VALUE, or --choke-npr.\n")
	case a.check != nil:
		fmt.Fprintf(text, "P(choked) %.4f, by Monte Carlo %.4f\n", p, a.check.PChoked)
	default:
		fmt.Fprintf(text, "P(choked) %.4f\n", p)
	}
	if a.marginal() {
		text.WriteString("Marginal: choked and unchoked are both within the uncertainty.\n")
	}
	if a.check != nil {
		fmt.Fprintf(text, "MC: %d draws of seed %d after JCGM 101.\n", r.doubt.draws, r.doubt.seed)
	}
	if r.doubt.budget {
		for o, title := range titles {
			lines := r.budget(a, uncertainty.Output(o))
			if len(lines) == 0 {
				continue
			}
			text.WriteString("\n")
			row("Budget: "+title.name, "u", "", strings.TrimLeft("u of "+title.unit, " "), "share")
			for _, l := range lines {
				row("  "+l.name, fmt.Sprintf("%.4g", l.size), l.unit, number(l.contribution, title.scale), fmt.Sprintf("%.1f %%", 100*l.share))
			}
		}
		text.WriteString("\n")
	}
	settled := map[string]bool{"barometer": true, "choke-npr": true, "throat-area": r.throatArea.text == "", "duct-loss": r.ductLoss.si == 0}
	for _, p := range r.doubt.parts {
		settled[p.name] = true
	}
	names, _ := pointKinds()
	var exact []string
	for _, name := range names {
		if !settled[name] {
			exact = append(exact, name)
		}
	}
	if len(exact) > 0 {
		text.WriteString("Taken as exact, because no uncertainty is stated: " + strings.Join(exact, ", ") + ".\n")
	}
}
