package report

import (
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/monitor"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
)

// Values carry the digits that their uncertainty leaves, which has two [JCGM 100 7.2.6].
// The rows are worked out by hand.
func TestMeasured(t *testing.T) {
	nan := math.NaN()
	for _, tt := range []struct {
		name     string
		q        monitor.Quantity
		v, u     float64
		value, s string
	}{
		{"two digits", monitor.NPR, 2.23357, 0.00634, "2.2336", "0.0063"},
		{"rounds up to another power", monitor.NPR, 2.23357, 0.0996, "2.23", "0.10"},
		{"kPa", monitor.RakePressure, 225318, 634, "225.32", "0.63"},
		{"kelvin to °C, its uncertainty a difference", monitor.EGTIndicated, 921.05, 4.04, "647.9", "4.0"},
		{"a spread has no offset", monitor.EGTSpread, 24.23, 1.5, "24.2", "1.5"},
		{"digits before the point that are of no use", monitor.Speed, 20904, 1234, "20900", "1200"},
		{"m² to cm²", monitor.EffectiveArea, 0.025431, 0.00019, "254.3", "1.9"},
		{"kg/s to kg/h", monitor.FuelFlow, 0.11275, 0.00067, "405.9", "2.4"},
		{"uncertainty not stated: the digits of its kind", monitor.MassFlow, 7.36912, nan, "7.369", none},
		{"negative", monitor.ChokeMarginPercent, -10.562, 0.41, "−10.56", "0.41"},
		{"not minus nothing", monitor.ChokeMarginPercent, -0.001, 0.41, "0.00", "0.41"},
		{"not available", monitor.NPR, nan, nan, none, none},
	} {
		value, u := scaleOf(tt.q).measured(tt.v, tt.u)
		if value != tt.value || u != tt.s {
			t.Errorf("%s: %s ± %s, want %s ± %s", tt.name, value, u, tt.value, tt.s)
		}
	}
	if got := scaleOf(monitor.EGTIndicated).phrase(921.05, 4.04); got != "647.9 °C ± 4.0 K" {
		t.Errorf("temperature: %s", got)
	}
}

func TestSignificant(t *testing.T) {
	for _, tt := range []struct {
		v      float64
		digits int
		want   string
	}{
		{0, 3, "0"},
		{0.0365, 2, "0.036"},
		{250, 6, "250"},
		{0.4, 3, "0.4"},
		{-45, 4, "−45"},
		{1.5e-5, 3, "1.5 · 10⁻⁵"},
		{-2.5e8, 2, "−2.5 · 10⁸"},
		{123456, 2, "123456"}, // a whole number is not rounded
	} {
		if got := significant(tt.v, tt.digits); got != tt.want {
			t.Errorf("%g to %d: %q, want %q", tt.v, tt.digits, got, tt.want)
		}
	}
}

func TestReading(t *testing.T) {
	for _, tt := range []struct {
		r               rules.Reading
		unit, dimension string
		want            string
	}{
		{rules.Reading{V: 1011.15, Known: true}, "K", "temperature", "738.0 °C"},
		{rules.Reading{V: 42.04, Known: true}, "K", "temperature_difference", "42.0 K"},
		{rules.Reading{V: 46702, Known: true}, "Pa", "pressure", "46.7 kPa"},
		{rules.Reading{V: -10.562, Known: true}, "%", "", "−10.56 %"},
		{rules.Reading{V: 3, Known: true}, "", "", "3"},
		{rules.Reading{}, "Pa", "pressure", none},
	} {
		if got := reading(tt.r, tt.unit, tt.dimension); got != tt.want {
			t.Errorf("%v %s: %q, want %q", tt.r, tt.unit, got, tt.want)
		}
	}
}

func TestDuration(t *testing.T) {
	for s, want := range map[float64]string{0: "0.0 s", 59.94: "59.9 s", 60: "1 min 00 s", 139.2: "2 min 19 s", 3599.6: "1 h 00 min", 30000: "8 h 20 min"} {
		if got := duration(s); got != want {
			t.Errorf("%g s: %q, want %q", s, got, want)
		}
	}
}

// Set to the right, all points stand at the same place: behind each there is as much.
func TestAlign(t *testing.T) {
	cells := []string{"2.2336", "20904", "−0.002", none, "", "7.41"}
	align(cells)
	want := []string{"2.2336", "20904\u2008\u2007\u2007\u2007\u2007", "−0.002\u2007", none, "", "7.41\u2007\u2007"}
	if !slices.Equal(cells, want) {
		t.Errorf("%q, want %q", cells, want)
	}
}

// What stands in a string of the style sheet is nothing but its text.
func TestQuoted(t *testing.T) {
	got := string(quoted("Run \"x\"</style>\\\n9a"))
	if body := strings.Trim(got, `"`); strings.ContainsAny(body, "\"<>/\n") || len(got)-len(body) != 2 {
		t.Errorf("%s", got)
	}
	if want := `"Run \000022 x\000022 \00003c \00002f style\00003e \00005c \00000a 9a"`; got != want {
		t.Errorf("%s, want %s", got, want)
	}
}

// In March Stockholm is an hour ahead of UTC.
func TestClock(t *testing.T) {
	zone := time.FixedZone("", 3600)
	at := time.Date(2026, 3, 2, 9, 0, 3, 0, time.UTC).UnixNano()
	c := clock{zone}
	for got, want := range map[string]string{
		c.long(at):                    "2026-03-02 10:00:03 +01:00 (09:00:03 UTC)",
		clock{time.UTC}.long(at):      "2026-03-02 09:00:03 UTC",
		c.short(at, at):               "10:00:03",
		c.short(at+24*3600e9, at):     "2026-03-03 10:00:03",
		c.short(0, at):                none,
		c.name(at):                    "UTC+01:00",
		clock{time.UTC}.name(at):      "UTC",
		sign(unit.Unit{Name: "m3/h"}): "m³/h",
	} {
		if got != want {
			t.Errorf("%q, want %q", got, want)
		}
	}
}

// Many dots are thinned evenly, and never more than are allowed are kept.
func TestDots(t *testing.T) {
	d := dots{most: 10}
	for i := range 1000 {
		d.add(dot{npr: float64(i)})
		if len(d.kept) > 10 {
			t.Fatalf("%d are kept", len(d.kept))
		}
	}
	for i := 1; i < len(d.kept); i++ {
		if d.kept[i].npr-d.kept[i-1].npr != float64(d.stride) {
			t.Fatalf("uneven: %v", d.kept)
		}
	}
	if d.kept[0].npr != 0 || d.kept[len(d.kept)-1].npr < 800 {
		t.Errorf("from %v to %v of 1000", d.kept[0].npr, d.kept[len(d.kept)-1].npr)
	}
}

// A publisher that is silent takes many channels at once: that is one line.
func TestGrouped(t *testing.T) {
	const s = int64(1e9)
	of := func(id string, from, to int64, q monitor.Quality) namedOut {
		return namedOut{id, out{stretch{from, to}, q}}
	}
	got := grouped([]namedOut{
		of("a", 10*s, 14*s, monitor.QualityStale),
		of("b", 10*s+s/2, 14*s+s, monitor.QualityStale),
		of("c", 10*s+s/2, 14*s, monitor.QualityInvalidCode), // for another reason
		of("a", 11*s, 14*s, monitor.QualityStale),           // the same channel again
		of("d", 10*s, 30*s, monitor.QualityStale),           // comes back later
	})
	if len(got) != 4 || !slices.Equal(got[0].ids, []string{"a", "b"}) || got[0].From != 10*s || got[0].To != 15*s {
		t.Errorf("%+v", got)
	}
}

// A number and its unit are not parted at the end of a line.
func TestKept(t *testing.T) {
	got := kept([]fact{{"Choke", "Choked for 2 min 19 s, W8 7.369 ± 0.047 kg/s at point 1, 95 %."}})[0].Value
	if want := "Choked for 2\u00a0min 19\u00a0s, W8 7.369 ±\u00a00.047\u00a0kg/s at point 1, 95\u00a0%."; got != want {
		t.Errorf("%q, want %q", got, want)
	}
}
