package plot

import (
	"bytes"
	"image/color"
	"math"
	"regexp"
	"strconv"
	"time"

	gonum "gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
)

const (
	defaultWidth, defaultHeight = 170, 75 // mm: across an A4 page, four on it
	small                       = 7.5     // pt, labels
	normal                      = 8.5     // pt, titles
	hair                        = vg.Length(0.4)
	capWidth                    = vg.Length(4)
)

var (
	ink  = color.NRGBA{0x17, 0x19, 0x1c, 0xff}
	soft = color.NRGBA{0x4b, 0x51, 0x57, 0xff}
	edge = color.NRGBA{0x70, 0x76, 0x7c, 0xff}
	grid = color.NRGBA{0xe3, 0xe6, 0xe8, 0xff}
)

// tones are dark enough for print, and told apart by lightness too.
var tones = [...]color.NRGBA{
	Data:    {0x1f, 0x5f, 0xa8, 0xff},
	Second:  {0x9a, 0x5b, 0x12, 0xff},
	Third:   {0x3f, 0x7d, 0x58, 0xff},
	Quiet:   {0x66, 0x6c, 0x72, 0xff},
	Caution: {0x85, 0x53, 0x00, 0xff},
	Limit:   {0xb3, 0x16, 0x1d, 0xff},
}

func style(p *gonum.Plot, f *Figure) {
	p.BackgroundColor = nil
	p.X.Label.Text, p.Y.Label.Text = f.X, f.Y
	for _, axis := range []*gonum.Axis{&p.X, &p.Y} {
		upright := axis.Label.TextStyle.Rotation
		align := axis.Label.TextStyle.YAlign
		axis.Label.TextStyle = write(small, soft)
		axis.Label.TextStyle.Rotation, axis.Label.TextStyle.XAlign, axis.Label.TextStyle.YAlign = upright, draw.XCenter, align
		x, y := axis.Tick.Label.XAlign, axis.Tick.Label.YAlign
		axis.Tick.Label = write(small, soft)
		axis.Tick.Label.XAlign, axis.Tick.Label.YAlign = x, y
		axis.LineStyle = draw.LineStyle{Color: edge, Width: hair}
		axis.Tick.LineStyle = axis.LineStyle
		axis.Tick.Length = vg.Points(3)
		axis.Padding, axis.Label.Padding = 0, vg.Points(3)
		axis.Tick.Marker = ticks{}
	}
	if f.Clock != nil {
		p.X.Tick.Marker = clock{f.Clock}
	}
	g := plotter.NewGrid()
	g.Horizontal = draw.LineStyle{Color: grid, Width: hair}
	g.Vertical = g.Horizontal
	p.Add(g)
}

// draw draws the figure with a line above it: the title to the left, the legend to the
// right, and below it what has no room.
func (c *chart) draw(canvas draw.Canvas, title string) {
	const line, thumb, gap = vg.Length(normal * 1.5), vg.Length(14), vg.Length(4)
	heading, words := write(normal, ink), write(small, ink)
	heading.YAlign, words.YAlign = draw.YCenter, draw.YCenter
	width := func(n named) vg.Length { return thumb + gap + words.Width(n.text) + 3*gap }
	left := canvas.Min.X + gap
	y := canvas.Max.Y - line/2
	if title != "" {
		canvas.FillText(heading, vg.Point{X: left, Y: y}, title)
		left += heading.Width(title) + 4*gap
	}
	for rest := c.legend; len(rest) > 0; {
		n, total := 0, vg.Length(0)
		for n < len(rest) && (n == 0 || left+total+width(rest[n]) <= canvas.Max.X) {
			total += width(rest[n])
			n++
		}
		x := canvas.Max.X - total
		for _, e := range rest[:n] {
			sign := canvas
			sign.Rectangle = vg.Rectangle{Min: vg.Point{X: x, Y: y - small/2}, Max: vg.Point{X: x + thumb, Y: y + small/2}}
			e.sign.Thumbnail(&sign)
			canvas.FillText(words, vg.Point{X: x + thumb + gap, Y: y}, e.text)
			x += width(e)
		}
		if rest = rest[n:]; len(rest) > 0 {
			y -= line
			left = canvas.Min.X
		}
	}
	canvas.Max.Y = y - line/2 - vg.Length(gap)
	if title == "" && len(c.legend) == 0 {
		canvas.Max.Y = y + line/2 - vg.Length(gap)
	}
	c.Draw(draw.Crop(canvas, gap, -2*gap, gap/2, 0))
}

func write(size float64, c color.Color) text.Style {
	f := font.Font{Typeface: "Liberation", Variant: "Sans", Size: vg.Points(size)}
	return text.Style{Color: c, Font: f, Handler: gonum.DefaultTextHandler}
}

func stroke(t Tone, dash bool) draw.LineStyle {
	s := draw.LineStyle{Color: tones[t], Width: vg.Points(0.9)}
	if dash {
		s.Dashes = []vg.Length{vg.Points(4), vg.Points(2)}
	}
	return s
}

func shade(t Tone) color.Color {
	c := tones[t]
	c.A = 0x2e
	return c
}

func glyph(t Tone, hollow bool) draw.GlyphStyle {
	s := draw.GlyphStyle{Color: tones[t], Radius: vg.Points(1.6), Shape: draw.CircleGlyph{}}
	if hollow {
		s.Shape, s.Radius = draw.RingGlyph{}, vg.Points(2)
	}
	return s
}

// label writes the name of a moment beside the top of its line.
func label(c draw.Canvas, at vg.Point, name string) {
	s := write(small, soft)
	s.XAlign, s.YAlign = draw.XLeft, draw.YTop
	c.FillText(s, vg.Point{X: at.X + vg.Points(2), Y: at.Y - vg.Points(1)}, name)
}

// ticks are five or so round numbers.
type ticks struct{}

// Ticks gives the marks of an axis.
func (ticks) Ticks(low, high float64) []gonum.Tick {
	step := roundStep((high - low) / 5)
	digits := max(0, int(-math.Floor(math.Log10(step)+1e-9)))
	return every(step, low, high, func(v float64) string { return strconv.FormatFloat(v, 'f', digits, 64) })
}

// roundStep gives the next of 1, 2, 5 times a power of ten.
func roundStep(x float64) float64 {
	power := math.Pow(10, math.Floor(math.Log10(x)))
	for _, m := range []float64{1, 2, 5} {
		if m*power >= x*(1-1e-9) {
			return m * power
		}
	}
	return 10 * power
}

func every(step, low, high float64, name func(float64) string) []gonum.Tick {
	var out []gonum.Tick
	for k := math.Ceil(low/step - 1e-9); k*step <= high+1e-9*step; k++ {
		v := k * step
		if v == 0 {
			v = 0 // not −0
		}
		out = append(out, gonum.Tick{Value: v, Label: name(v)})
	}
	return out
}

// clock marks times of day.
type clock struct{ zone *time.Location }

// steps of time, s.
var steps = []float64{1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10800, 21600, 43200, 86400}

// Ticks gives the marks of a time axis.
func (c clock) Ticks(low, high float64) []gonum.Tick {
	step := steps[len(steps)-1]
	for _, s := range steps {
		if s >= (high-low)/7 {
			step = s
			break
		}
	}
	_, offset := time.Unix(int64(low), 0).In(c.zone).Zone()
	format := "15:04"
	if step < 60 {
		format = "15:04:05"
	}
	shift := float64(offset)
	out := every(step, low+shift, high+shift, func(v float64) string { return time.Unix(int64(v-shift), 0).In(c.zone).Format(format) })
	for i := range out {
		out[i].Value -= shift
	}
	return out
}

var fontFamily = regexp.MustCompile(`font-family:[^;"]*`)

// finish takes what stands before the element, so that the figure can be put into a
// page, and names letters that every machine has.
func finish(svg []byte) []byte {
	if i := bytes.Index(svg, []byte("<svg")); i > 0 {
		svg = svg[i:]
	}
	return fontFamily.ReplaceAll(svg, []byte("font-family:Liberation Sans,Arial,Helvetica,sans-serif"))
}
