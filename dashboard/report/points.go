package report

import (
	"fmt"
	"math"

	"throatwatch/dashboard/points"
	"throatwatch/monitor"
)

// overviewOf are the quantities of which every point is listed.
func overviewOf() []struct {
	q    monitor.Quantity
	name string
} {
	return []struct {
		q    monitor.Quantity
		name string
	}{
		{monitor.NPR, "NPR"},
		{monitor.ChokeMarginPercent, "Margin"},
		{monitor.MassFlow, "W8"},
		{monitor.IndependentFlow, "Metered"},
		{monitor.EGTIndicated, "EGT"},
		{monitor.GrossThrust, "Thrust"},
	}
}

// overview lists the points with the quantities that an engineer looks at first.
func (d *data) overview() table {
	t := table{Head: []heading{number("No.", ""), {Text: "From"}, number("For", "s")}, Empty: "No steady point was found."}
	for _, o := range overviewOf() {
		s := scaleOf(o.q)
		t.Head = append(t.Head, number(o.name, s.sign), number("± U95", s.spanSign()))
	}
	for i := range d.points.Points {
		p := &d.points.Points[i]
		row := texts(fmt.Sprint(p.Number), d.short(p.From), decimal(float64(p.To-p.From)/1e9, 1))
		if len(p.Doubts) > 0 {
			row[0].Class = "doubt"
			row[1].Text += " *"
		}
		for _, o := range overviewOf() {
			value, u := none, none
			if v, ok := p.Get(o.q); ok {
				value, u = scaleOf(o.q).measured(float64(v.Value), float64(v.U95))
			}
			row = append(row, cell{Text: value}, cell{Text: u})
		}
		t.Rows = append(t.Rows, row)
	}
	for i := range d.points.Points {
		if len(d.points.Points[i].Doubts) > 0 {
			t.More = "* doubtful: the reason stands with the point below."
		}
	}
	return t.aligned()
}

// details lists every quantity of a point with what its uncertainty is made of.
func (d *data) details() (list []table) {
	for i := range d.points.Points {
		if i == mostDetails {
			list[i-1].More = fmt.Sprintf("%d further points are listed above only; throatwatch points %s gives them whole.", len(d.points.Points)-mostDetails, d.Run.ID)
			break
		}
		list = append(list, d.detail(&d.points.Points[i]))
	}
	return list
}

func (d *data) detail(p *points.Point) table {
	t := table{
		Caption: fmt.Sprintf("Point %d, %s to %s, %d scans, steady in %s %% of them", p.Number, d.short(p.From), d.short(p.To), p.Scans, significant(100*p.Steady, 4)),
		Head: []heading{
			{Text: "Quantity"},
			number("Value", ""), number("± U95", ""),
			{Text: "Unit"},
			number("Type A", "standard"), number("Type B", "standard"), number("k", ""), number("Effective", "samples"),
		},
	}
	for i := range p.Values {
		v := &p.Values[i]
		s := scaleOf(v.Quantity)
		value, u := s.measured(float64(v.Value), float64(v.U95))
		decimals := s.decimals
		if n, ok := places(s.span(float64(v.U95))); ok {
			decimals = n + 1 // a digit more, so that they combine as printed
		}
		part := func(n points.Number) string {
			if math.IsNaN(float64(n)) {
				return none
			}
			return decimal(s.span(float64(n)), decimals)
		}
		unit := s.sign
		if s.sign == "°C" {
			unit = "°C, ± K"
		}
		k := none
		if u != none {
			k = decimal(float64(v.K), 2)
		}
		t.Rows = append(t.Rows, texts(v.Quantity.Info().Title, value, u, unit, part(v.TypeA), part(v.TypeB), k, decimal(float64(v.NEff), 0)))
	}
	for _, doubt := range p.Doubts {
		t.More += "Doubtful: " + doubt + ". "
	}
	return t.aligned()
}
