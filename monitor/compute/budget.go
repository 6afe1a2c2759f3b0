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
	Input        uncertainty.Input
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

// Budget gives the budget of margin, mass flow and thrust for the last scan; ok is
// false if that has none.
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
	return b, true
}

// inputs gives the inputs that have a part in an output. If one of them is not
// stated, it comes first and no share is known.
func (c *Computer) inputs(e *uncertainty.Estimate) []BudgetInput {
	var out []BudgetInput
	for i := range uncertainty.NumInputs {
		u := e.Contribution[i]
		if u == 0 {
			continue
		}
		in := BudgetInput{Input: i, Contribution: u, Share: e.Share(i)}
		var all float64
		for k := range c.parts {
			if c.parts[k].input == i {
				all += c.parts[k].variance
			}
		}
		for k := range c.parts {
			if p := &c.parts[k]; p.input == i && p.variance != 0 {
				in.Parts = append(in.Parts, BudgetPart{Channel: p.channel, What: p.what, Share: in.Share * p.variance / all})
			}
		}
		slices.SortStableFunc(in.Parts, func(a, b BudgetPart) int { return descending(a.Share, b.Share) })
		out = append(out, in)
	}
	slices.SortStableFunc(out, func(a, b BudgetInput) int { return descending(math.Abs(a.Contribution), math.Abs(b.Contribution)) })
	return out
}

// descending orders what is not known first.
func descending(a, b float64) int {
	if math.IsNaN(a) || math.IsNaN(b) {
		return cmp.Compare(a, b)
	}
	return cmp.Compare(b, a)
}
