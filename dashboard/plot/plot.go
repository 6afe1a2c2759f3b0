// Package plot draws figures for reports and comparisons as SVG: lines, points with
// uncertainty, bands, limits and moments on one pair of axes. It is the home of the
// plotting library; how figures look stands in style.go alone.
//
// A figure is a function of its data: the same data give the same bytes. Values that are
// not available, NaN or infinite, interrupt a line or a band and leave out a point.
package plot

import (
	"bytes"
	"errors"
	"fmt"
	"math"
	"time"

	gonum "gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgsvg"
)

// ErrNothing is returned for a figure without one value that can be drawn.
var ErrNothing = errors.New("nothing to draw")

// Tone is a colour by what it means.
type Tone int

// The tones.
const (
	Data    Tone = iota // the one that the figure is about
	Second              // beside it
	Third               // beside both
	Quiet               // what serves for comparison
	Caution             // a lower limit
	Limit               // a limit
)

// Figure is a pair of axes with what is drawn in it, the first layer at the bottom.
type Figure struct {
	Title, X, Y   string  // with units
	Width, Height float64 // mm; 0 = 170 and 75
	// Clock makes the horizontal axis one of time: x is s since 1970 UTC, and its labels
	// are the time of day there.
	Clock *time.Location
	// The ends of the vertical axis; both 0 = by the data.
	Low, High float64
	Layers    []Layer
}

// Layer is what can be drawn: Line, Points, Band, Level, Moment or Span.
type Layer interface {
	add(c *chart) (drawn int, err error)
}

// chart is the library's figure with the names in the legend.
type chart struct {
	*gonum.Plot
	legend []named
}

type named struct {
	text string
	sign gonum.Thumbnailer
}

func (c *chart) name(text string, sign gonum.Thumbnailer) {
	c.legend = append(c.legend, named{text, sign})
}

// Line joins points in their order.
type Line struct {
	Name string // in the legend, "" for none
	X, Y []float64
	Tone Tone
	Dash bool
}

// Points are single values, with bars of ± U where there are any.
type Points struct {
	Name    string
	X, Y, U []float64 // U may be nil
	Tone    Tone
	Hollow  bool
}

// Band is the area between two lines.
type Band struct {
	Name         string
	X, Low, High []float64
	Tone         Tone
}

// Level is a horizontal line over the whole width.
type Level struct {
	Name string
	Y    float64
	Tone Tone
}

// Moment is a vertical line over the whole height, named where it stands.
type Moment struct {
	Name string
	X    float64
	Tone Tone
}

// Span shades the whole height between two values of x.
type Span struct {
	Name     string
	From, To float64
	Tone     Tone
}

// SVG draws the figure. The error is ErrNothing, or that of the drawing.
func (f *Figure) SVG() ([]byte, error) {
	p := &chart{Plot: gonum.New()}
	style(p.Plot, f)
	drawn := 0
	for _, l := range f.Layers {
		n, err := l.add(p)
		if err != nil {
			return nil, fmt.Errorf("plot %q: %w", f.Title, err)
		}
		drawn += n
	}
	if drawn == 0 {
		return nil, fmt.Errorf("plot %q: %w", f.Title, ErrNothing)
	}
	f.scale(p.Plot)
	width, height := f.Width, f.Height
	if width <= 0 || height <= 0 {
		width, height = defaultWidth, defaultHeight
	}
	c := vgsvg.New(vg.Length(width)*vg.Millimeter, vg.Length(height)*vg.Millimeter)
	p.draw(draw.New(c), f.Title)
	var b bytes.Buffer
	if _, err := c.WriteTo(&b); err != nil {
		return nil, fmt.Errorf("plot %q: %w", f.Title, err)
	}
	return finish(b.Bytes()), nil
}

// scale sets the ends of the axes.
func (f *Figure) scale(p *gonum.Plot) {
	if f.Low != 0 || f.High != 0 {
		p.Y.Min, p.Y.Max = f.Low, f.High
	} else {
		p.Y.Min, p.Y.Max = apart(p.Y.Min, p.Y.Max)
	}
	if p.X.Min >= p.X.Max {
		p.X.Min, p.X.Max = apart(p.X.Min, p.X.Max)
	}
}

// apart gives ends with some air around the data, also where all values are one.
func apart(low, high float64) (lower, upper float64) {
	const air = 0.04
	span := high - low
	if !(span > 1e-12*math.Max(math.Abs(low), math.Abs(high))) {
		span = math.Max(math.Abs(high), 1)
	}
	return low - air*span, high + air*span
}

func finite(values ...float64) bool {
	for _, v := range values {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return false
		}
	}
	return true
}

// stretches calls fn with the limits of the stretches of n values that are all usable.
func stretches(n int, usable func(i int) bool, fn func(from, to int)) {
	from := -1
	for i := 0; i <= n; i++ {
		switch ok := i < n && usable(i); {
		case ok && from < 0:
			from = i
		case !ok && from >= 0:
			fn(from, i)
			from = -1
		}
	}
}

func (l Line) add(p *chart) (int, error) {
	drawn := 0
	var failed error
	stretches(min(len(l.X), len(l.Y)), func(i int) bool { return finite(l.X[i], l.Y[i]) }, func(from, to int) {
		xys := make(plotter.XYs, 0, to-from+1)
		for i := from; i < to; i++ {
			xys = append(xys, plotter.XY{X: l.X[i], Y: l.Y[i]})
		}
		line, err := plotter.NewLine(xys)
		if err != nil {
			failed = err
			return
		}
		line.LineStyle = stroke(l.Tone, l.Dash)
		p.Add(line)
		if drawn == 0 && l.Name != "" {
			p.name(l.Name, line)
		}
		drawn += len(xys)
	})
	return drawn, failed
}

// bars are points with their uncertainty, as the library wants them.
type bars struct {
	plotter.XYs
	plotter.YErrors
}

func (l Points) add(p *chart) (int, error) {
	var all plotter.XYs
	var unsure bars
	for i := range min(len(l.X), len(l.Y)) {
		if !finite(l.X[i], l.Y[i]) {
			continue
		}
		xy := plotter.XY{X: l.X[i], Y: l.Y[i]}
		all = append(all, xy)
		if i < len(l.U) && finite(l.U[i]) {
			unsure.XYs = append(unsure.XYs, xy)
			unsure.YErrors = append(unsure.YErrors, struct{ Low, High float64 }{l.U[i], l.U[i]})
		}
	}
	if len(all) == 0 {
		return 0, nil
	}
	if len(unsure.XYs) > 0 {
		b, err := plotter.NewYErrorBars(unsure)
		if err != nil {
			return 0, err
		}
		b.LineStyle, b.CapWidth = stroke(l.Tone, false), capWidth
		p.Add(b)
	}
	s, err := plotter.NewScatter(all)
	if err != nil {
		return 0, err
	}
	s.GlyphStyle = glyph(l.Tone, l.Hollow)
	p.Add(s)
	if l.Name != "" {
		p.name(l.Name, s)
	}
	return len(all), nil
}

func (l Band) add(p *chart) (int, error) {
	drawn := 0
	var failed error
	usable := func(i int) bool { return finite(l.X[i], l.Low[i], l.High[i]) }
	stretches(min(len(l.X), len(l.Low), len(l.High)), usable, func(from, to int) {
		outline := make(plotter.XYs, 0, 2*(to-from))
		for i := from; i < to; i++ {
			outline = append(outline, plotter.XY{X: l.X[i], Y: l.High[i]})
		}
		for i := to - 1; i >= from; i-- {
			outline = append(outline, plotter.XY{X: l.X[i], Y: l.Low[i]})
		}
		area, err := plotter.NewPolygon(outline)
		if err != nil {
			failed = err
			return
		}
		area.Color, area.Width = shade(l.Tone), 0
		p.Add(area)
		if drawn == 0 && l.Name != "" {
			p.name(l.Name, area)
		}
		drawn += to - from
	})
	return drawn, failed
}

func (l Level) add(p *chart) (int, error) {
	if !finite(l.Y) {
		return 0, nil
	}
	at := everywhere{style: stroke(l.Tone, true), at: l.Y, level: true}
	p.Add(at)
	if l.Name != "" {
		p.name(l.Name, at)
	}
	return 0, nil
}

func (l Moment) add(p *chart) (int, error) {
	if finite(l.X) {
		p.Add(everywhere{style: stroke(l.Tone, true), at: l.X, name: l.Name})
	}
	return 0, nil
}

func (l Span) add(p *chart) (int, error) {
	if !finite(l.From, l.To) {
		return 0, nil
	}
	s := span{tone: l.Tone, from: l.From, to: l.To}
	p.Add(s)
	if l.Name != "" {
		p.name(l.Name, s)
	}
	return 0, nil
}

// everywhere is a straight line from edge to edge; name stands beside an upright one.
type everywhere struct {
	style draw.LineStyle
	at    float64
	level bool
	name  string
}

// Plot draws the line; the library calls it.
func (e everywhere) Plot(c draw.Canvas, p *gonum.Plot) {
	x, y := p.Transforms(&c)
	if e.level {
		if e.at >= p.Y.Min && e.at <= p.Y.Max {
			c.StrokeLine2(e.style, c.Min.X, y(e.at), c.Max.X, y(e.at))
		}
		return
	}
	if e.at < p.X.Min || e.at > p.X.Max {
		return
	}
	c.StrokeLine2(e.style, x(e.at), c.Min.Y, x(e.at), c.Max.Y)
	if e.name != "" {
		label(c, vg.Point{X: x(e.at), Y: c.Max.Y}, e.name)
	}
}

// DataRange keeps a level within the figure; an upright line asks for nothing.
func (e everywhere) DataRange() (xmin, xmax, ymin, ymax float64) {
	inf := math.Inf(1)
	if e.level {
		return inf, -inf, e.at, e.at
	}
	return inf, -inf, inf, -inf
}

// Thumbnail draws the sign in the legend.
func (e everywhere) Thumbnail(c *draw.Canvas) {
	y := c.Center().Y
	c.StrokeLine2(e.style, c.Min.X, y, c.Max.X, y)
}

// span is the shading of a Span.
type span struct {
	tone     Tone
	from, to float64
}

// Plot shades; the library calls it.
func (s span) Plot(c draw.Canvas, p *gonum.Plot) {
	x, _ := p.Transforms(&c)
	from, to := x(math.Max(s.from, p.X.Min)), x(math.Min(s.to, p.X.Max))
	if from < to {
		c.FillPolygon(shade(s.tone), []vg.Point{{X: from, Y: c.Min.Y}, {X: to, Y: c.Min.Y}, {X: to, Y: c.Max.Y}, {X: from, Y: c.Max.Y}})
	}
}

// Thumbnail draws the sign in the legend.
func (s span) Thumbnail(c *draw.Canvas) {
	c.FillPolygon(shade(s.tone), []vg.Point{
		{X: c.Min.X, Y: c.Min.Y}, {X: c.Max.X, Y: c.Min.Y}, {X: c.Max.X, Y: c.Max.Y}, {X: c.Min.X, Y: c.Max.Y},
	})
}
