package report

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/check"
)

// checkFacts puts the checks of the data system into words, each with what did not pass.
func (d *data) checkFacts() []fact {
	if len(d.Checks) == 0 {
		return []fact{{"Checks", "None was made before or after this run."}}
	}
	var out []fact
	for i := range d.Checks {
		c := &d.Checks[i]
		var failed, ticked []string
		for k := range c.Items {
			switch it := &c.Items[k]; {
			case !it.Passed:
				failed = append(failed, joined(it.Channel, it.Title)+": "+it.Text)
			case it.Kind == check.KindTick:
				ticked = append(ticked, it.Title+" ("+it.By+")")
			}
		}
		text := fmt.Sprintf("%s, engine %s, by %s. %s", d.clock.long(int64(c.Ended)), c.Warmth, or(c.By), c.Summary)
		if len(failed) > 0 {
			text += " Not passed: " + strings.Join(failed, "; ") + "."
		}
		if len(ticked) > 0 {
			text += " Ticked by hand: " + strings.Join(ticked, "; ") + "."
		}
		if c.Note != "" {
			text += " Remark: " + strings.TrimRight(c.Note, ".") + "."
		}
		out = append(out, fact{strings.ToUpper(c.Phase[:1]) + c.Phase[1:] + " the run", text})
	}
	return out
}

// zeros lists the zeros of the pressures before and after the run with their shift, and what
// was subtracted of them in a reduction.
func (d *data) zeros() table {
	t := table{Head: words("Channel", "Before", "After", "Shift", "Limit of the shift", "Verdict", "Subtracted"), Empty: "No zero was looked at."}
	t.numbers(map[int]string{1: "Pa", 2: "Pa", 3: "Pa", 4: "± Pa"})
	t.keep(0)
	find := func(phase, id string) (it check.Item) {
		for i := range d.Checks {
			for k := range d.Checks[i].Items {
				if d.Checks[i].Phase == phase && d.Checks[i].Items[k].ID == id {
					it = d.Checks[i].Items[k]
				}
			}
		}
		return it
	}
	show := func(r monitor.Reading) string {
		if !r.Known {
			return none
		}
		return decimal(r.V, 1)
	}
	for i := range d.cfg.Compute.Channels {
		ch := &d.cfg.Compute.Channels[i]
		before, after := find(check.Before, check.KindZero+"."+ch.ID), find(check.After, check.KindZero+"."+ch.ID)
		if before.ID == "" && after.ID == "" {
			continue
		}
		shift := find(check.After, check.KindShift+"."+ch.ID)
		var verdict []string
		for _, p := range []struct {
			it   check.Item
			what string
		}{{before, "zero before"}, {after, "zero after"}, {shift, "shift"}} {
			if p.it.ID != "" && !p.it.Passed {
				verdict = append(verdict, p.what)
			}
		}
		said := "within limits"
		if len(verdict) > 0 {
			said = "not passed: " + strings.Join(verdict, ", ")
		}
		subtracted := none
		if ch.Zero.Stated() {
			a, b := &ch.Zero.Points[0], &ch.Zero.Points[1]
			subtracted = fmt.Sprintf("%s ± %s Pa", decimal(a.Offset, 1), decimal(a.U95, 1))
			if *a != *b {
				subtracted += fmt.Sprintf(" at %s to %s ± %s Pa at %s", d.short(a.T), decimal(b.Offset, 1), decimal(b.U95, 1), d.short(b.T))
			}
		}
		t.Rows = append(t.Rows, texts(ch.ID, show(before.Value), show(after.Value), show(shift.Value), show(shift.Limit), said, subtracted))
	}
	return t.aligned()
}

// zeroNote says what became of the zeros in a reduction.
func (d *data) zeroNote() string {
	o := d.Run.Reduction()
	if o == nil || o.Zero == "" {
		return "Nothing was subtracted from the readings of this run: its values have the zeros in them."
	}
	most := 0.0
	for i := range d.cfg.Compute.Channels {
		for _, p := range d.cfg.Compute.Channels[i].Zero.Points {
			most = max(most, math.Abs(p.Offset))
		}
	}
	which := map[string]string{"before": "the check before the run", "after": "the check after the run", "interpolated": "both checks, in a straight line between them by event time"}
	return fmt.Sprintf("The zeros of %s are subtracted from the readings, %s Pa at most. The uncertainties of the channels are left as they are stated.",
		which[o.Zero], decimal(most, 1))
}

// checked tells whether there are zeros to list.
func (d *data) checked() bool {
	return slices.ContainsFunc(d.Checks, func(c check.Result) bool { return len(c.Zeros()) > 0 })
}
