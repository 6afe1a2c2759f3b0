package report

import (
	"errors"
	"fmt"
	"html/template"
	"math"

	"throatwatch/dashboard/plot"
	"throatwatch/monitor"
	"throatwatch/monitor/compute"
)

// mostMoments bounds the marks that are named in a figure.
const mostMoments = 8

// figure is a drawing of the report.
type figure struct {
	SVG     template.HTML
	Caption string
}

// figures draws what there is to be drawn.
func (d *data) figures() ([]figure, error) {
	celsiusScale := scaleOf(monitor.EGTIndicated)
	flow := scaleOf(monitor.MassFlow)
	zone := d.clock.name(d.Run.Started)
	on := func(title, y string, layers ...plot.Layer) plot.Figure {
		return plot.Figure{Title: title, X: "Time, " + zone, Y: y, Clock: d.clock.zone, Width: 170, Height: 62, Layers: layers}
	}
	bands := []plot.Layer{
		d.curve("Hottest probe", lineHottest, celsiusScale, plot.Second),
		d.curve("Coldest probe", lineColdest, celsiusScale, plot.Quiet),
		d.curve("Indicated EGT", lineEGT, celsiusScale, plot.Data),
	}
	for i := range d.cfg.Compute.EGT.Bands {
		b := &d.cfg.Compute.EGT.Bands[i]
		bands = append(bands, plot.Level{Name: "limit " + b.Name, Y: b.Limit - celsius, Tone: plot.Limit})
	}
	plane, err := d.throatPlane()
	if err != nil {
		return nil, err
	}
	caption := "NPR p8/pb and the choke NPR that decides the state. Shaded: choked."
	if len(d.events.marks) > 0 {
		caption += " Upright lines: marks of the operators, numbered as in the time line."
	}
	var out []figure
	for _, f := range []struct {
		plot.Figure
		caption string
	}{
		{
			on("Nozzle pressure ratio", "NPR", append(d.choked(),
				d.curve("NPR", lineNPR, scale{factor: 1}, plot.Data), d.curve("choke NPR", lineChokeNPR, scale{factor: 1}, plot.Quiet))...),
			caption,
		},
		{
			on("Choke margin", "Margin, %",
				d.between("95 % interval", lineMarginLow, lineMarginHigh, scale{factor: 1}, plot.Data), d.curve("margin", lineMargin, scale{factor: 1}, plot.Data),
				plot.Level{Name: "choke", Y: 0, Tone: plot.Caution}),
			"Margin NPR / choke NPR − 1 with its 95 % interval; above zero the throat is choked.",
		},
		{
			on("Exhaust gas temperature", "EGT, °C", bands...),
			"Indicated EGT, the value for which the engine's limits are written, with the limits of this rig.",
		},
		{
			on("Rotor speed", "N, rpm", d.curve("", lineSpeed, scale{factor: 1}, plot.Data)),
			"Rotor speed.",
		},
		{
			on("Mass flow", "W, kg/s",
				d.between("", lineMeteredLow, lineMeteredHigh, flow, plot.Second), d.between("", lineFlowLow, lineFlowHigh, flow, plot.Data),
				d.curve("metered", lineMetered, flow, plot.Second), d.curve("W8, nozzle", lineFlow, flow, plot.Data)),
			"Flow of the nozzle from pressure, temperature and throat area, and the flow metered at inlet and fuel line, each with its 95 % interval. They rest on different measurements.",
		},
		{plane, "Throat plane: flow parameter W√(R T0)/(A p0) against NPR. The line is the nozzle with the mean gas of this run; points are metered flow, solid with 95 % bars where the engine was steady, open elsewhere. Values computed from the nozzle lie on the line by construction and are not drawn."},
	} {
		svg, err := f.SVG()
		if errors.Is(err, plot.ErrNothing) {
			continue
		}
		if err != nil {
			return nil, err
		}
		out = append(out, figure{template.HTML(svg), fmt.Sprintf("Figure %d. %s", len(out)+1, f.caption)}) //nolint:gosec // drawn here; the plot package escapes what it writes
	}
	return out, nil
}

// curve is a line with both extremes of each bucket, so that no spike is lost.
func (d *data) curve(name string, l line, s scale, tone plot.Tone) plot.Line {
	series := d.scans.lines[l].Series()
	out := plot.Line{Name: name, Tone: tone}
	for i, t := range series.T {
		x := float64(t) / 1e9
		out.X, out.Y = append(out.X, x), append(out.Y, s.of(series.Min[i]))
		if series.Max[i] != series.Min[i] {
			out.X, out.Y = append(out.X, x), append(out.Y, s.of(series.Max[i]))
		}
	}
	return out
}

func (d *data) between(name string, low, high line, s scale, tone plot.Tone) plot.Band {
	lower, upper := d.scans.lines[low].Series(), d.scans.lines[high].Series()
	out := plot.Band{Name: name, Tone: tone}
	for i := range min(len(lower.T), len(upper.T)) {
		out.X = append(out.X, float64(lower.T[i])/1e9)
		out.Low, out.High = append(out.Low, s.of(lower.Min[i])), append(out.High, s.of(upper.Max[i]))
	}
	return out
}

// choked shades the time in which the throat was choked, and gives the marks their
// numbers.
func (d *data) choked() (layers []plot.Layer) {
	for _, s := range d.scans.chokedIn {
		layers = append(layers, plot.Span{From: float64(s.From) / 1e9, To: float64(s.To) / 1e9, Tone: plot.Data})
	}
	for i, m := range d.events.marks {
		if i == mostMoments {
			break
		}
		layers = append(layers, plot.Moment{Name: fmt.Sprintf("M%d", i+1), X: float64(m.T) / 1e9, Tone: plot.Quiet})
	}
	return layers
}

// throatPlane draws metered flow against the curve of the nozzle.
func (d *data) throatPlane() (plot.Figure, error) {
	f := plot.Figure{Title: "Throat plane", X: "NPR", Y: "W√(R T0)/(A p0)", Width: 170, Height: 88}
	top := 2.0
	add := func(name string, from *dots, hollow bool, tone plot.Tone) {
		p := plot.Points{Name: name, Tone: tone, Hollow: hollow}
		for _, v := range from.kept {
			p.X, p.Y, p.U = append(p.X, v.npr), append(p.Y, v.flow), append(p.U, v.u)
			top = max(top, v.npr)
		}
		f.Layers = append(f.Layers, p)
	}
	add("metered", &d.scans.all, true, plot.Quiet)
	add("metered, steady", &d.scans.steady, false, plot.Data)
	if len(d.scans.all.kept)+len(d.scans.steady.kept) == 0 || d.scans.gas[0].n == 0 {
		f.Layers = nil
		return f, nil // there is no metered flow, or no gas that the curve is of
	}
	gas := compute.CurveGas{Temperature: d.scans.gas[0].value(), FuelAirRatio: known(d.scans.gas[1].value()), HumidityRatio: known(d.scans.gas[2].value())}
	c, err := compute.ThroatCurve(&d.cfg.Compute, gas, math.Ceil(5*top)/5)
	if err != nil {
		return f, fmt.Errorf("throat plane: %w", err)
	}
	f.Layers = append([]plot.Layer{plot.Line{Name: "nozzle", X: c.NPR, Y: c.FlowParameter, Tone: plot.Third}}, f.Layers...)
	f.Layers = append(f.Layers, plot.Moment{Name: "choke NPR", X: c.ChokeNPR, Tone: plot.Quiet})
	return f, nil
}

// known is v, or 0 where it is not available.
func known(v float64) float64 {
	if math.IsNaN(v) {
		return 0
	}
	return v
}
