package compute

import (
	"cmp"
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/uncertainty"
)

// Budget says of the last scan how sure its outputs are, and what is to blame.
type Budget struct {
	T       int64 // event time of the scan, ns UTC
	Scan    uint64
	Outputs []BudgetOutput
}

// BudgetOutput is the budget of one output. Unless said otherwise uncertainties are
// standard ones (k = 1), in the unit of the output.
type BudgetOutput struct {
	Quantity   monitor.Quantity
	Value      float64
	U95        float64
	Low, High  float64 // 95 %
	Systematic float64
	Random     float64
	Inputs     []BudgetInput // greatest share first
}

// BudgetInput is what one input contributes. NaN where its uncertainty is not stated.
type BudgetInput struct {
	Name         string
	Contribution float64 // signed: + where the output rises with the input
	Share        float64 // of the variance of the output, 0 to 1
	Parts        []BudgetPart
}

// BudgetPart is what a channel, or What, has of the variance.
type BudgetPart struct {
	Channel int // -1 = none
	What    string
	Share   float64 // of the variance of the output; NaN if not stated
}

// Budget gives the budget of margin, mass flow and thrust for the last scan, and of the
// flow balance where there is one; ok is false if that has none.
func (c *Computer) Budget() (b Budget, ok bool) {
	if c.last == 0 {
		return b, false
	}
	b.T, b.Scan = c.last, c.scan
	for _, o := range [...]struct {
		from uncertainty.Output
		to   monitor.Quantity
	}{
		{uncertainty.MarginPercent, monitor.ChokeMarginPercent},
		{uncertainty.MassFlow, monitor.MassFlow},
		{uncertainty.GrossThrust, monitor.GrossThrust},
	} {
		e := &c.result.Outputs[o.from]
		b.Outputs = append(b.Outputs, BudgetOutput{
			Quantity: o.to, Value: e.Value, U95: e.U95, Low: e.Low, High: e.High, Systematic: e.Systematic, Random: e.Random,
			Inputs: c.inputs(e),
		})
	}
	if c.balanced {
		b.Outputs = append(b.Outputs, c.balanceBudget())
	}
	return b, true
}

// balanceBudget gives the budget of the flow balance: a line for each meter, and one for
// each input of the nozzle's flow, which counts with its sign turned. An error that is in
// both is told with the meter and left out of the input.
func (c *Computer) balanceBudget() BudgetOutput {
	w8 := &c.result.Outputs[uncertainty.MassFlow]
	systematic, _ := c.apart(c.flow.metered, w8.Value, systematicOf)
	random, _ := c.apart(c.flow.metered, w8.Value, randomOf)
	total, _ := c.apart(c.flow.metered, w8.Value, uncertainty.Part.Total)
	variance, value, u95 := square(total), c.flow.metered-w8.Value, uncertainty.Coverage*total
	out := BudgetOutput{
		Quantity: monitor.FlowBalance, Value: value, U95: u95, Low: value - u95, High: value + u95,
		Systematic: systematic, Random: random,
	}
	slopes := c.slopes()
	for k := range c.flow.terms {
		t := &c.flow.terms[k]
		by := (t.flow - t.through(&slopes)) * t.u.Total()
		if by == 0 {
			continue
		}
		at := slices.IndexFunc(out.Inputs, func(in BudgetInput) bool { return in.Name == t.name })
		if at < 0 {
			at = len(out.Inputs)
			out.Inputs = append(out.Inputs, BudgetInput{Name: t.name})
		}
		in, sign := &out.Inputs[at], 1.0
		if t.name == byBleed {
			sign = -1
		}
		in.Contribution = math.Copysign(math.Hypot(in.Contribution, by), sign)
		in.Share += by * by / variance
		in.Parts = append(in.Parts, BudgetPart{Channel: t.channel, What: t.what, Share: by * by / variance})
	}
	rests := c.rests(uncertainty.Part.Total)
	for i := range uncertainty.NumInputs {
		rest := square(slopes[i]) * rests[i]
		if slopes[i] == 0 || rest == 0 {
			continue
		}
		by := -math.Copysign(math.Sqrt(rest), slopes[i])
		out.Inputs = append(out.Inputs, c.line(i, by, rest/variance, func(channel int) bool {
			return slices.ContainsFunc(c.flow.terms, func(t term) bool { return t.channel == channel && channel >= 0 && t.moves[i] != 0 })
		}))
	}
	sortLines(out.Inputs)
	return out
}

// inputs gives the inputs that have a part in an output. If one of them is not
// stated, it comes first and no share is known.
func (c *Computer) inputs(e *uncertainty.Estimate) []BudgetInput {
	var out []BudgetInput
	for i := range uncertainty.NumInputs {
		if u := e.Contribution[i]; u != 0 {
			out = append(out, c.line(i, u, e.Share(i), func(int) bool { return false }))
		}
	}
	sortLines(out)
	return out
}

// line gives an input with its parts but those of the channels told elsewhere.
func (c *Computer) line(i uncertainty.Input, by, share float64, told func(channel int) bool) BudgetInput {
	in := BudgetInput{Name: i.String(), Contribution: by, Share: share}
	all := 0.0
	for k := range c.parts {
		if p := &c.parts[k]; p.input == i && !told(p.channel) {
			all += p.variance
		}
	}
	for k := range c.parts {
		if p := &c.parts[k]; p.input == i && p.variance != 0 && !told(p.channel) {
			in.Parts = append(in.Parts, BudgetPart{Channel: p.channel, What: p.what, Share: share * p.variance / all})
		}
	}
	return in
}

// sortLines puts the greatest first, and their greatest parts.
func sortLines(lines []BudgetInput) {
	for i := range lines {
		slices.SortStableFunc(lines[i].Parts, func(a, b BudgetPart) int { return descending(a.Share, b.Share) })
	}
	slices.SortStableFunc(lines, func(a, b BudgetInput) int { return descending(math.Abs(a.Contribution), math.Abs(b.Contribution)) })
}

// descending orders what is not known first.
func descending(a, b float64) int {
	if math.IsNaN(a) || math.IsNaN(b) {
		return cmp.Compare(a, b)
	}
	return cmp.Compare(b, a)
}
