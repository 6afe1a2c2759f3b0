package plot

import (
	"bytes"
	"encoding/xml"
	"errors"
	"io"
	"math"
	"slices"
	"strings"
	"testing"
	"time"
)

// example has every layer.
func example() *Figure {
	f := &Figure{Title: "Choke margin & limit <1>", X: "time", Y: "%", Clock: time.UTC}
	begin := float64(time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).Unix())
	var x, y, low, high, u []float64
	for i := range 200 {
		v := 10 * math.Sin(float64(i)/30)
		if i == 100 {
			v = math.NaN()
		}
		x, y, u = append(x, begin+float64(i)), append(y, v), append(u, 2)
		low, high = append(low, v-3), append(high, v+3)
	}
	f.Layers = []Layer{
		Span{"choked", begin + 20, begin + 60, Data},
		Band{"95 %", x, low, high, Data},
		Line{"margin", x, y, Data, false},
		Points{"points", every40(x), every40(y), every40(u), Second, true},
		Level{"limit", 8, Limit},
		Moment{"mark 1", begin + 100, Quiet},
	}
	return f
}

func every40(x []float64) (out []float64) {
	for i := 0; i < len(x); i += 40 {
		out = append(out, x[i])
	}
	return out
}

func TestSVG(t *testing.T) {
	a, err := example().SVG()
	if err != nil {
		t.Fatal(err)
	}
	b, _ := example().SVG()
	if !bytes.Equal(a, b) {
		t.Error("the same data give other bytes")
	}
	if !bytes.HasPrefix(a, []byte("<svg")) {
		t.Errorf("begins with %.40q", a)
	}
	var texts []string
	for d := xml.NewDecoder(bytes.NewReader(a)); ; {
		tok, err := d.Token()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		if c, ok := tok.(xml.CharData); ok {
			texts = append(texts, strings.TrimSpace(string(c)))
		}
	}
	for _, want := range []string{"Choke margin & limit <1>", "%", "margin", "95 %", "limit", "mark 1", "choked", "09:01:00", "10"} {
		if !slices.Contains(texts, want) {
			t.Errorf("%q is not in %q", want, texts)
		}
	}
	if strings.Contains(string(a), "NaN") {
		t.Error("a value that is not available got into the drawing")
	}
}

func TestNothing(t *testing.T) {
	nan := math.NaN()
	for name, f := range map[string]Figure{
		"no layers": {},
		"no values": {Layers: []Layer{Line{X: []float64{1, 2}, Y: []float64{nan, nan}}, Points{X: []float64{nan}, Y: []float64{1}}, Level{Y: 3}}},
	} {
		if _, err := f.SVG(); !errors.Is(err, ErrNothing) {
			t.Errorf("%s: %v", name, err)
		}
	}
	one := Figure{Layers: []Layer{Points{X: []float64{5}, Y: []float64{0}}}}
	if svg, err := one.SVG(); err != nil || strings.Contains(string(svg), "NaN") {
		t.Errorf("a single point: %v", err)
	}
}

// Round numbers by common practice, no source.
func TestTicks(t *testing.T) {
	for _, tt := range []struct {
		low, high   float64
		first, last string
		n           int
	}{
		{0, 10, "0", "10", 6},
		{0.97, 1.03, "0.98", "1.02", 3},
		{-250, 900, "0", "500", 2},
		{20000.4, 20000.6, "20000.40", "20000.60", 5},
	} {
		got := ticks{}.Ticks(tt.low, tt.high)
		if len(got) != tt.n || got[0].Label != tt.first || got[len(got)-1].Label != tt.last {
			t.Errorf("%g to %g: %v", tt.low, tt.high, got)
		}
	}
	zone := time.FixedZone("cell", 3600) // 09:00 UTC is 10:00 there
	begin := float64(time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC).Unix())
	if got := (clock{zone}).Ticks(begin, begin+7200); got[0].Label != "10:00" || got[0].Value != begin {
		t.Errorf("%v", got)
	}
}
