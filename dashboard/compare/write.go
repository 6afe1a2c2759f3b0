package compare

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"throatwatch/dashboard/plot"
	"throatwatch/dashboard/points"
	"throatwatch/monitor/archive"
)

func rfc3339(ns int64) string { return time.Unix(0, ns).UTC().Format(time.RFC3339Nano) }

// shown is how many differences the table shows; the others are in the JSON.
const shown = 15

// number writes a number with six digits, – for none.
func number(n points.Number) string {
	v := float64(n)
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "–"
	}
	return strconv.FormatFloat(v, 'g', 6, 64)
}

func maybe(n *points.Number) string {
	if n == nil {
		return "–"
	}
	return number(*n)
}

// WriteTable writes the comparison for people.
func (s *Scans) WriteTable(w io.Writer) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%s (B) against %s (A), time from %s\n", s.B, s.A, s.Zero)
	fmt.Fprintf(&b, "%d scans in both, %d only in A, %d only in B", s.Paired, s.OnlyA, s.OnlyB)
	if s.Same {
		b.WriteString("; the digests are equal")
	}
	fmt.Fprintf(&b, "\n%d quantities are the same in every scan\n", len(s.Equal))
	if len(s.Differences) > 0 {
		b.WriteString("\nB − A, the largest first by RMS over value:\n")
		t := tabwriter.NewWriter(&b, 0, 0, 2, ' ', 0)
		_, _ = fmt.Fprintln(t, "QUANTITY\tMEAN\tRMS\tLARGEST\tAT\tA THERE\tB THERE\tONLY A\tONLY B")
		for i := range s.Differences[:min(len(s.Differences), shown)] {
			d := &s.Differences[i]
			_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s s\t%s\t%s\t%d\t%d\n", strings.TrimSpace(d.Name+" "+bracket(d.Unit)), number(d.Mean), number(d.RMS),
				number(d.Largest), number(d.AtS), number(d.A), number(d.B), d.OnlyA, d.OnlyB)
		}
		if err := t.Flush(); err != nil {
			return err
		}
		if n := len(s.Differences) - shown; n > 0 {
			fmt.Fprintf(&b, "and %d more; --json has all\n", n)
		}
	}
	fmt.Fprintf(&b, "\n%d alarms were raised at the same instant in both\n", s.AlarmsSame)
	if len(s.Alarms) > 0 {
		t := tabwriter.NewWriter(&b, 0, 0, 2, ' ', 0)
		_, _ = fmt.Fprintln(t, "ALARM\tIN B\tRAISED IN A\tIN B\tMOVED")
		for i := range s.Alarms {
			a := &s.Alarms[i]
			_, _ = fmt.Fprintf(t, "%s\t%s\t%s s\t%s s\t%s s\n", a.Rule, a.Change, maybe(a.AtA), maybe(a.AtB), maybe(a.Moved))
		}
		if err := t.Flush(); err != nil {
			return err
		}
	}
	_, err := io.WriteString(w, b.String())
	return err
}

func bracket(unit string) string {
	if unit == "" {
		return ""
	}
	return "[" + unit + "]"
}

// WriteTable writes the comparison for people.
func (p *Parameters) WriteTable(w io.Writer) error {
	var b strings.Builder
	which := "steady scans"
	if !p.Steady {
		which = "all lit scans"
	}
	fmt.Fprintf(&b, "%s against the baseline of %s, %s\n", p.Last, strings.Join(p.Baseline, ", "), which)
	if len(p.Curves) == 0 {
		b.WriteString("The baseline has no such scans with this parameter; --all takes those that are not steady too.\n")
	}
	for i := range p.Curves {
		c := &p.Curves[i]
		fmt.Fprintf(&b, "\n%s over %s\n", strings.TrimSpace(c.Y+" "+bracket(c.UnitY)), strings.TrimSpace(c.X+" "+bracket(c.UnitX)))
		t := tabwriter.NewWriter(&b, 0, 0, 2, ' ', 0)
		_, _ = fmt.Fprintln(t, "AT\tBASELINE\tSCATTER\tSCANS\tLAST RUN\tDEPARTURE\t± U95\t")
		for k := range c.Bins {
			n := &c.Bins[k]
			beyond := ""
			if n.Beyond {
				beyond = "beyond"
			}
			_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%d\t%s\t%s\t%s\t%s\n", number(n.X), number(n.Baseline), number(n.Scatter), n.Scans,
				maybe(n.Value), maybe(n.Departure), maybe(n.U95), beyond)
		}
		if err := t.Flush(); err != nil {
			return err
		}
	}
	b.WriteString("\n")
	t := tabwriter.NewWriter(&b, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "RUN\tEFFECTIVE AREA [m²]\t± U95\tDRIFT [%]\t± U95\tEGT MARGIN [K]")
	for i := range p.Runs {
		r := &p.Runs[i]
		_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s\n", r.Run, number(r.Area), number(r.AreaU95), number(r.Drift), number(r.DriftU95), number(r.EGTMargin))
	}
	if err := t.Flush(); err != nil {
		return err
	}
	b.WriteString("The EGT margin is the lowest run limit less the highest indicated EGT of the steady scans.\n")
	_, err := io.WriteString(w, b.String())
	return err
}

// Figure is a drawing with a name for its file.
type Figure struct {
	Name string
	plot.Figure
}

// Figures gives the traces of both runs.
func (s *Scans) Figures() []Figure {
	var out []Figure
	for i := range s.Traces {
		t := &s.Traces[i]
		out = append(out, Figure{t.Name, plot.Figure{
			Title: t.Title, X: "s from " + s.Zero, Y: t.Unit,
			Layers: []plot.Layer{outline("A "+s.A, &t.A, plot.Quiet), outline("B "+s.B, &t.B, plot.Data)},
		}})
	}
	return out
}

// outline is a line through the lowest and highest value of each bucket.
func outline(name string, s *archive.Series, tone plot.Tone) plot.Line {
	l := plot.Line{Name: name, Tone: tone}
	for i, t := range s.T {
		x := float64(t) / 1e9
		l.X, l.Y = append(l.X, x), append(l.Y, s.Min[i])
		if s.Max[i] != s.Min[i] {
			l.X, l.Y = append(l.X, x), append(l.Y, s.Max[i])
		}
	}
	return l
}

// Figures gives the curves with the scatter of the baseline and the last run.
func (p *Parameters) Figures() []Figure {
	var out []Figure
	for i := range p.Curves {
		c := &p.Curves[i]
		band := plot.Band{Name: "baseline ± 2 s", Tone: plot.Quiet}
		line := plot.Line{Name: "baseline", Tone: plot.Quiet}
		last := plot.Points{Name: p.Last, Tone: plot.Data}
		for k := range c.Bins {
			b := &c.Bins[k]
			x, y, s := float64(b.X), float64(b.Baseline), float64(b.Scatter)
			band.X, band.Low, band.High = append(band.X, x), append(band.Low, y-2*s), append(band.High, y+2*s)
			line.X, line.Y = append(line.X, x), append(line.Y, y)
			if b.Value != nil {
				last.X, last.Y, last.U = append(last.X, x), append(last.Y, float64(*b.Value)), append(last.U, float64(*b.U95))
			}
		}
		out = append(out, Figure{c.Y, plot.Figure{
			Title: c.Y + " over " + c.X, X: strings.TrimSpace(c.X + " " + bracket(c.UnitX)), Y: c.UnitY,
			Layers: []plot.Layer{band, line, last},
		}})
	}
	return out
}
