package report

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"throatwatch/monitor"
	"throatwatch/rules/card"
)

// cardHead says which test card was in force, "" for none.
func (d *data) cardHead() string {
	c := d.card.Card
	if c == nil {
		return ""
	}
	return fmt.Sprintf("Card %s, by %s, loaded by %s at %s, SHA-256 %.12s.", joined(c.Label(), c.Title, prefixed("for engine ", c.For)), or(c.By), or(c.LoadedBy), d.clock.long(int64(c.Loaded)), c.Hash)
}

// cardPoints lists the points of the card with what became of them.
func (d *data) cardPoints() table {
	t := table{Head: words("Point", "Targets", "Soak, average", "Choke", "Status", "Taken as"), Empty: "No test card was in force."}
	c := d.card.Card
	if c == nil {
		return t
	}
	for i := range c.Points {
		pt, p := &c.Points[i], &c.Progress[i]
		var targets, numbers []string
		for k := range pt.Targets {
			targets = append(targets, or(pt.Targets[k].Title, pt.Targets[k].Quantity)+" "+pt.Targets[k].Text)
		}
		for _, n := range p.Numbers {
			numbers = append(numbers, strconv.FormatUint(n, 10))
		}
		how := "by hand"
		if pt.Auto {
			how = "automatically"
		}
		status := joined(p.Status, prefixed("by ", p.By)) + prefixed(": ", p.Reason)
		row := texts(fmt.Sprintf("%d %s", i+1, pt.Name), strings.Join(targets, "; "), fmt.Sprintf("%g s, %g s", pt.Soak, pt.Average), pt.Choke, status, strings.Join(numbers, ", "))
		row[2].Sub = how
		t.Rows = append(t.Rows, row)
	}
	t.keep(3)
	t.Head[4].Words = true
	return t
}

// cardTaken lists every point that was taken by a card, rejected ones too.
func (d *data) cardTaken() table {
	t := table{Head: []heading{number("No.", ""), {Text: "Point"}, {Text: "From"}, number("For", "s"), {Text: "Status"}}}
	for _, o := range overviewOf() {
		if o.q == monitor.IndependentFlow { // it does not fit beside the words
			continue
		}
		s := scaleOf(o.q)
		t.Head = append(t.Head, number(o.name, s.sign), number("± U95", s.spanSign()))
	}
	for i := range d.card.Taken {
		k := &d.card.Taken[i]
		row := texts(strconv.FormatUint(k.Number, 10), k.Name, d.short(int64(k.From)), decimal(float64(k.To-k.From)/1e9, 1), k.Status)
		row[1].Sub = joined(k.Card, prefixed("taken by ", k.By))
		if k.Auto {
			row[1].Sub = joined(k.Card, "taken by the card")
		}
		row[4].Sub = prefixed("by ", k.JudgedBy) + prefixed(": ", k.Reason)
		for _, o := range overviewOf() {
			if o.q == monitor.IndependentFlow {
				continue
			}
			value, u := takenValue(k, o.q)
			row = append(row, cell{Text: value}, cell{Text: u})
		}
		t.Rows = append(t.Rows, row)
		for _, doubt := range k.Doubts {
			t.More += fmt.Sprintf("Point %d is doubtful: %s. ", k.Number, doubt)
		}
	}
	t.keep(2)
	t.Head[4].Words = true
	return t.aligned()
}

// orNaN gives a reading, NaN where it is not known.
func orNaN(r monitor.Reading) float64 {
	if !r.Known {
		return math.NaN()
	}
	return r.V
}

// takenValue gives a quantity of a point that was taken, with its uncertainty.
func takenValue(k *card.Taken, q monitor.Quantity) (value, u string) {
	for i := range k.Values {
		if v := &k.Values[i]; v.Name == q.Info().Name && v.Value.Known {
			return scaleOf(q).measured(v.Value.V, orNaN(v.U95))
		}
	}
	return none, none
}
