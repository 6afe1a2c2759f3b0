package report

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode/utf8"

	"throatwatch/monitor"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
)

// none stands where there is no number.
const none = "–"

// celsius is 0 °C in K.
const celsius = 273.15

// scale is how a kind of quantity is printed: printed = SI · factor + offset.
type scale struct {
	sign           string
	factor, offset float64
	decimals       int // where no uncertainty says how many are of use
}

// scaleOf gives the unit in which a quantity is printed.
func scaleOf(q monitor.Quantity) scale {
	is := func(of ...monitor.Quantity) bool { return slices.Contains(of, q) }
	switch {
	case is(monitor.EGTSpread, monitor.EGTRise, monitor.ReferredEGT): // differences, and a ratio to θ
		return scale{"K", 1, 0, 1}
	case is(monitor.FuelFlow, monitor.WaterFlow):
		return scale{"kg/h", 3600, 0, 1}
	case is(monitor.FuelAirRatio, monitor.HumidityRatio, monitor.WaterAirRatio):
		return scale{"", 1, 0, 5}
	}
	switch u := q.Info().Unit; u {
	case "Pa":
		return scale{"kPa", 1e-3, 0, 2}
	case "K":
		return scale{"°C", 1, -celsius, 1}
	case "m²":
		return scale{"cm²", 1e4, 0, 2}
	case "N":
		return scale{"N", 1, 0, 0}
	case "rpm", "rpm/s":
		return scale{u, 1, 0, 0}
	case "":
		return scale{"", 1, 0, 4}
	case "kg/s":
		return scale{u, 1, 0, 3}
	default:
		return scale{u, 1, 0, 1}
	}
}

func (s scale) of(si float64) float64   { return si*s.factor + s.offset }
func (s scale) span(si float64) float64 { return si * s.factor }

// signOf is the sign of a difference on this scale: those of temperature are K.
func (s scale) spanSign() string {
	if s.sign == "°C" {
		return "K"
	}
	return s.sign
}

// places gives the decimals of a value with the uncertainty u: those that leave u two
// digits [JCGM 100 7.2.6]. Negative: so many digits before the point are of no use.
func places(u float64) (int, bool) {
	if !(u > 0) || math.IsInf(u, 0) {
		return 0, false
	}
	d := 1 - int(math.Floor(math.Log10(u)))
	if shift := math.Pow10(d); math.Round(u*shift) >= 100 { // 0.0996 rounds to 0.10
		d--
	}
	return min(d, 9), true
}

// decimal prints v rounded to so many decimals, with a true minus sign.
func decimal(v float64, decimals int) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return none
	}
	if decimals < 0 {
		shift := math.Pow10(-decimals)
		v, decimals = math.Round(v/shift)*shift, 0
	}
	text := strconv.FormatFloat(v, 'f', decimals, 64)
	if digits, negative := strings.CutPrefix(text, "-"); negative {
		if strings.Trim(digits, "0.") == "" {
			return digits
		}
		return "−" + digits
	}
	return text
}

// measured prints a value in SI and its 95 % uncertainty on a scale, both with the digits
// that the uncertainty leaves; u is "not stated" where it is NaN.
func (s scale) measured(v, u95 float64) (value, u string) {
	if d, ok := places(s.span(u95)); ok {
		return decimal(s.of(v), d), decimal(s.span(u95), d)
	}
	return decimal(s.of(v), s.decimals), none
}

// phrase is measured as one text with its unit.
func (s scale) phrase(v, u95 float64) string {
	value, u := s.measured(v, u95)
	sign := ""
	if s.sign != "" {
		sign = " " + s.sign
	}
	if u == none {
		return value + sign
	}
	if s.sign == "°C" { // the uncertainty is a difference
		return value + " °C ± " + u + " K"
	}
	return value + " ± " + u + sign
}

// significant prints v with so many digits, without an exponent where people write none.
func significant(v float64, digits int) string {
	if v == 0 {
		return "0"
	}
	if a := math.Abs(v); a >= 1e-4 && a < 1e7 {
		return shorten(decimal(v, max(0, digits-1-int(math.Floor(math.Log10(a))))))
	}
	mantissa, exponent, _ := strings.Cut(strconv.FormatFloat(v, 'e', digits-1, 64), "e")
	n, err := strconv.Atoi(exponent)
	if err != nil {
		return strings.ReplaceAll(mantissa, "-", "−") // infinite, or no number
	}
	return strings.ReplaceAll(shorten(mantissa), "-", "−") + " · 10" + superscript(n)
}

// superscript writes an exponent.
func superscript(n int) string {
	digits := []rune("⁰¹²³⁴⁵⁶⁷⁸⁹")
	var out []rune
	for _, c := range strconv.Itoa(n) {
		if c == '-' {
			out = append(out, '⁻')
		} else {
			out = append(out, digits[c-'0'])
		}
	}
	return string(out)
}

// sign gives a unit as people write it.
func sign(u unit.Unit) string {
	return strings.NewReplacer("deg", "°", "m2", "m²", "m3", "m³", "H2O", "H₂O", "um", "µm").Replace(u.Name)
}

// shorten takes zeros off the end of a fraction.
func shorten(s string) string {
	if strings.Contains(s, ".") {
		s = strings.TrimRight(strings.TrimRight(s, "0"), ".")
	}
	return s
}

// reading prints a reading of a rule in the unit that people use for what it is in SI.
func reading(r rules.Reading, name, dimension string) string {
	if !r.Known {
		return none
	}
	u, err := unit.Parse(name)
	switch {
	case name == "" || err != nil:
		return strings.TrimSpace(significant(r.V, 4) + " " + name)
	case dimension == strings.ReplaceAll(unit.TemperatureDifference.String(), " ", "_"):
		return decimal(r.V, 1) + " K"
	case u.Dimension == unit.Temperature:
		return decimal(u.ToSI(r.V)-celsius, 1) + " °C"
	case u.Dimension == unit.Pressure:
		return significant(u.ToSI(r.V)/1e3, 4) + " kPa"
	}
	return significant(r.V, 4) + " " + name
}

// duration prints seconds as people say them.
func duration(s float64) string {
	switch {
	case math.IsNaN(s):
		return none
	case s < 60:
		return decimal(s, 1) + " s"
	case s < 3600:
		whole := int(math.Round(s))
		if whole < 3600 {
			return fmt.Sprintf("%d min %02d s", whole/60, whole%60)
		}
	}
	minutes := int(math.Round(s / 60))
	return fmt.Sprintf("%d h %02d min", minutes/60, minutes%60)
}

// align pads what is behind the decimal point of numbers, so that set to the right they
// stand with their points below each other: U+2007 is as wide as a digit, U+2008 as a
// point.
func align(cells []string) {
	most := 0
	for _, c := range cells {
		most = max(most, fraction(c))
	}
	for i, c := range cells {
		if c == "" || c == none {
			continue
		}
		n := fraction(c)
		if n == 0 && most > 0 {
			c += "\u2008"
			n = 1
		}
		cells[i] = c + strings.Repeat("\u2007", max(0, most-n))
	}
}

// fraction counts the characters from the decimal point on.
func fraction(s string) int {
	i := strings.IndexByte(s, '.')
	if i < 0 {
		return 0
	}
	return utf8.RuneCountInString(s[i:])
}

// clock prints times of the facility.
type clock struct{ zone *time.Location }

func (c clock) at(ns int64) time.Time { return time.Unix(0, ns).In(c.zone) }

// short is the time of day; with the date where the run is not of that day.
func (c clock) short(ns, started int64) string {
	if ns == 0 {
		return none
	}
	t, s := c.at(ns), c.at(started)
	if t.YearDay() != s.YearDay() || t.Year() != s.Year() {
		return t.Format("2006-01-02 15:04:05")
	}
	return t.Format("15:04:05")
}

// long is date, time and offset, and the same in UTC where that is another.
func (c clock) long(ns int64) string {
	if ns == 0 {
		return none
	}
	utc := time.Unix(0, ns).UTC()
	t := c.at(ns)
	if _, offset := t.Zone(); offset == 0 {
		return utc.Format("2006-01-02 15:04:05 UTC")
	}
	return t.Format("2006-01-02 15:04:05 -07:00") + " (" + utc.Format("15:04:05 UTC") + ")"
}

// name is how the zone of a time is called.
func (c clock) name(ns int64) string {
	t := c.at(ns)
	if _, offset := t.Zone(); offset == 0 {
		return "UTC"
	}
	return t.Format("UTC-07:00")
}
