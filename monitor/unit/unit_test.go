package unit

import (
	"errors"
	"math"
	"strings"
	"testing"
)

func near(got, want, rel float64) bool {
	return got == want || math.Abs(got-want) <= rel*math.Abs(want)
}

func TestParseValue(t *testing.T) {
	const exact = 1e-15
	for _, tc := range []struct {
		text   string
		want   float64
		dim    Dimension
		rel    float64
		source string
	}{
		{"250kPa", 250e3, Pressure, exact, "definition"},
		{"36.3psi", 250279.69, Pressure, 1e-7, "NIST SP 811 B.8: psi = 6894.757 Pa"},
		{"1 psi", 6894.757293168361, Pressure, exact, "0.45359237·9.80665/0.0254²"},
		{"1inHg", 3386.389, Pressure, 2e-7, "NIST SP 811 B.8, conventional"},
		{"1mmHg", 133.3224, Pressure, 3e-7, "NIST SP 811 B.8, conventional"},
		{"1inH2O", 249.0889, Pressure, 1e-7, "NIST SP 811 B.8, conventional"},
		{"1013.25hPa", 101325, Pressure, exact, "CGPM 1954"},
		{"1013.25 mbar", 101325, Pressure, exact, "CGPM 1954"},
		{"1.01325bar", 101325, Pressure, exact, "CGPM 1954"},
		{"1atm", 101325, Pressure, exact, "CGPM 1954"},
		{"620degC", 893.15, Temperature, exact, "t/°C = T/K − 273.15"},
		{"-40 Cel", 233.15, Temperature, exact, "RFC 8428 unit Cel"},
		{"-40degF", 233.15, Temperature, exact, "−40 °F = −40 °C"},
		{"59°F", 288.15, Temperature, exact, "15 °C"},
		{"518.67R", 288.15, Temperature, exact, "ISO 2533 sea level"},
		{"900K", 900, Temperature, exact, "definition"},
		{"1lb/s", 0.45359237, MassFlow, exact, "international pound"},
		{"1 lb", 0.45359237, Mass, exact, "international pound"},
		{"4.2 l", 4.2e-3, Volume, exact, "NIST SP 811 table 6: 1 L = 1e-3 m³"},
		{"1 gal", 3.785411784e-3, Volume, exact, "231 in³"},
		{"1 ft3", 0.028316846592, Volume, exact, "0.3048³"},
		{"3600 kg/h", 1, MassFlow, exact, "definition"},
		{"1lb/h", 1.259979e-4, MassFlow, 2e-7, "NIST SP 811 B.8"},
		{"60rpm", 1, Frequency, exact, "revolutions per second"},
		{"60 1/min", 1, Frequency, exact, "IANA SenML unit 1/min"},
		{"50Hz", 50, Frequency, exact, "definition"},
		{"0.05m2", 0.05, Area, exact, "definition"},
		{"500 cm²", 0.05, Area, exact, "definition"},
		{"1in2", 6.4516e-4, Area, exact, "NIST SP 811 B.8, exact"},
		{"1lbf", 4.4482216152605, Force, exact, "NIST SP 811 B.8, exact"},
		{"50%", 0.5, Ratio, exact, "definition"},
		{"60 %RH", 0.6, Ratio, exact, "definition"},
		{"6.3g/kg", 6.3e-3, Ratio, exact, "definition"},
		{"0.02", 0.02, Ratio, exact, "a number alone"},
		{"1ips", 0.0254, Velocity, exact, "definition"},
		{"1g", 9.80665, Acceleration, exact, "CGPM 1901"},
		{"1l/min", 1.0 / 60000, VolumeFlow, exact, "definition"},
		{"1gal/min", 6.309020e-5, VolumeFlow, 1e-7, "NIST SP 811 B.8"},
		{"43.0319MJ/kg", 43.0319e6, SpecificEnergy, exact, "definition"},
		{"1Btu/lb", 2326, SpecificEnergy, exact, "NIST SP 811 B.8, exact"},
		{"180deg", math.Pi, Angle, exact, "definition"},
		{"4mA", 0.004, Current, exact, "definition"},
		{"1e5Pa", 1e5, Pressure, exact, "exponent"},
		{"+.5e-1 m", 0.05, Length, exact, "exponent"},
	} {
		got, u, err := ParseValue(tc.text)
		if err != nil {
			t.Errorf("%s: %v", tc.text, err)
			continue
		}
		if u.Dimension != tc.dim || !near(got, tc.want, tc.rel) {
			t.Errorf("%s = %.17g (%s), want %.17g (%s) after %s", tc.text, got, u.Dimension, tc.want, tc.dim, tc.source)
		}
	}
}

func TestErrorsSayWhatToDo(t *testing.T) {
	for _, tc := range []struct {
		text string
		want Dimension
		has  []string
	}{
		{"14.7psia", Pressure, []string{`unit "psia"`, `write "psi"`, "absolute"}},
		{"2barg", Pressure, []string{`write "bar"`, "gauge"}},
		{"2kPa(d)", Pressure, []string{`write "kPa"`, "differential"}},
		{"250kpa", Pressure, []string{`unknown unit "kpa"`, "kPa, MPa"}},
		{"250", Pressure, []string{"unit missing", "kPa"}},
		{"250kPa", Temperature, []string{"measures pressure, wanted is temperature", "degC"}},
		{"36,3psi", Pressure, []string{"point"}},
		{"kPa", Pressure, []string{"begin with a number"}},
		{"NaN", Ratio, []string{"begin with a number"}},
		{"Inf Pa", Pressure, []string{"begin with a number"}},
		{"1e999Pa", Pressure, []string{"too large"}},
		{"", Pressure, []string{"begin with a number"}},
	} {
		_, _, err := ParseValueAs(tc.text, tc.want)
		if err == nil {
			t.Errorf("%q: no error", tc.text)
			continue
		}
		for _, has := range tc.has {
			if !strings.Contains(err.Error(), has) {
				t.Errorf("%q: %q does not say %q", tc.text, err, has)
			}
		}
	}
	var name *NameError
	if _, err := Parse("kpa"); !errors.As(err, &name) || !strings.Contains(err.Error(), "kPa") {
		t.Errorf("unit kpa: %v does not offer kPa", err)
	}
	if _, err := Parse("furlong per fortnight"); err == nil || !strings.Contains(err.Error(), "usual unit") {
		t.Errorf("far name: %v", err)
	}
}

// A difference has no offset: 9 °F and 5 °C are both 5 K.
func TestTemperatureDifference(t *testing.T) {
	for name, v := range map[string]float64{"degF": 9, "degC": 5, "K": 5, "R": 9, "Cel": 5} {
		u, err := ParseAs(name, TemperatureDifference)
		if err != nil || u.Dimension != TemperatureDifference || !near(u.ToSI(v), 5, 1e-15) {
			t.Errorf("%v %s = %v K (%s), want a difference of 5 K: %v", v, name, u.ToSI(v), u.Dimension, err)
		}
	}
	if u := TemperatureDifference.SI(); u.Name != "K" || u.Dimension != TemperatureDifference {
		t.Errorf("SI unit of a difference is %+v", u)
	}
}

// Every spelling converts there and back, stands once in the table, and every
// dimension has a name and an SI unit.
func TestTable(t *testing.T) {
	seen := map[string]bool{}
	for _, r := range table {
		for _, name := range append([]string{r.Name}, r.also...) {
			if seen[name] {
				t.Errorf("%q stands twice", name)
			}
			seen[name] = true
			u, err := Parse(name)
			if err != nil || u != r.Unit || !u.Valid() {
				t.Errorf("%q parses to %+v, %v", name, u, err)
			}
			for _, v := range []float64{-40, 0.1, 1, 1e6} {
				if back := u.FromSI(u.ToSI(v)); math.Abs(back-v) > 1e-12*(math.Abs(v)+math.Abs(u.Offset/u.Scale)) {
					t.Errorf("%v %s comes back as %v", v, name, back)
				}
			}
		}
	}
	for d := Ratio; d < numDimensions; d++ {
		if d.String() == "invalid" || d.SI().Scale != 1 || d.SI().Dimension != d {
			t.Errorf("dimension %d: %s, SI %+v", d, d, d.SI())
		}
	}
	if (Unit{}).Valid() || Invalid.SI().Valid() {
		t.Error("the zero unit passes for valid")
	}
}

func TestPressureKinds(t *testing.T) {
	const barometer, cell = Absolute(100e3), Absolute(99e3)
	p := Gauge(150e3).Absolute(barometer)
	if p != 250e3 || p.Gauge(barometer) != 150e3 {
		t.Errorf("150 kPa gauge on a barometer of 100 kPa is %v absolute", p)
	}
	if d := barometer.Minus(cell); d != 1e3 || d.Absolute(cell) != barometer {
		t.Errorf("differential %v", d)
	}
}

func TestLookupAllocatesNothing(t *testing.T) {
	name := []byte("degC")
	if n := testing.AllocsPerRun(100, func() {
		if u, ok := Lookup(name); !ok || u.Offset != 273.15 {
			t.Error("degC not found")
		}
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func FuzzParseValue(f *testing.F) {
	for _, s := range []string{"250kPa", "620 degC", "1e", "1e5Pa", "-.5%", "1e999", "+", "0x1p4 m", "1..2", "5 (", ")", "36,3psi", "\x00"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		v, u, err := ParseValue(s)
		if err != nil {
			if err.Error() == "" {
				t.Error("error without text")
			}
			return
		}
		if !u.Valid() || math.IsNaN(v) {
			t.Errorf("%q gives %v %+v", s, v, u)
		}
	})
}
