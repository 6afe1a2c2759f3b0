package config

import (
	"errors"
	"fmt"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"

	"throatwatch/monitor/unit"
)

// bound is a condition on a number.
type bound struct {
	holds func(float64) bool
	text  string // completes "must …"
}

var (
	positive    = bound{func(v float64) bool { return v > 0 }, "be greater than 0"}
	notNegative = bound{func(v float64) bool { return v >= 0 }, "not be negative"}
)

// between gives the bound lo ≤ v ≤ hi; text says it in the units of the file.
func between(lo, hi float64, text string) bound {
	return bound{func(v float64) bool { return v >= lo && v <= hi }, "be between " + text}
}

// quantity reads a number with a unit of dimension d and gives it in SI;
// fallback without a value or with a faulty one.
func (n node) quantity(d unit.Dimension, fallback float64, bounds ...bound) float64 {
	v, _, ok := n.measure(d)
	if !ok || !n.keeps(v, bounds) {
		return fallback
	}
	return v
}

// measure reads a number with a unit.
func (n node) measure(d unit.Dimension) (float64, unit.Unit, bool) {
	text := n.text()
	if text == "" {
		if n.is() {
			n.fault("the value is empty", "write a number with its unit")
		}
		return 0, unit.Unit{}, false
	}
	if !n.plain(text) {
		return 0, unit.Unit{}, false
	}
	v, u, err := unit.ParseValueAs(text, d)
	if err != nil {
		n.unitFault(err)
		return 0, unit.Unit{}, false
	}
	return v, u, true
}

// plain refuses spellings of a number that readers of YAML take in different
// ways: 010 is 8 to some, 1_000 is 1000 to some.
func (n node) plain(text string) bool {
	digits := strings.TrimLeft(strings.TrimSpace(text), "+-")
	if len(digits) > 1 && digits[0] == '0' && ('0' <= digits[1] && digits[1] <= '9' || strings.ContainsRune("xXoObB_", rune(digits[1]))) {
		n.fault(fmt.Sprintf("%q is not a plain decimal number", text), "write it without leading zero, as 10 or 0.5")
		return false
	}
	if i := strings.IndexByte(digits, '_'); i > 0 && '0' <= digits[i-1] && digits[i-1] <= '9' {
		n.fault(fmt.Sprintf("%q is not a plain decimal number", text), "write it without _ between the digits")
		return false
	}
	return true
}

// unitFault notes what package unit finds wrong.
func (n node) unitFault(err error) {
	var name *unit.NameError
	var value *unit.ValueError
	switch {
	case errors.As(err, &name):
		message := fmt.Sprintf("unit %q is not known", name.Name)
		switch {
		case name.Got != unit.Invalid:
			message = fmt.Sprintf("unit %q measures %s; wanted is %s", name.Name, name.Got, name.Want)
		case name.Name == "":
			message = "the unit is missing"
		}
		n.fault(message, name.Hint)
	case errors.As(err, &value):
		n.fault(fmt.Sprintf("%q is not a value", value.Text), value.Hint)
	default:
		n.fault(err.Error(), "write a number with its unit")
	}
}

// keeps notes the first bound that v breaks.
func (n node) keeps(v float64, bounds []bound) bool {
	for _, b := range bounds {
		if !b.holds(v) {
			n.fault(fmt.Sprintf("%s must %s", n.text(), b.text), "check the number and its unit")
			return false
		}
	}
	return true
}

// number reads a number without unit.
func (n node) number(fallback float64, bounds ...bound) float64 {
	text := strings.TrimSpace(n.text())
	if !n.is() || !n.plain(text) {
		return fallback
	}
	v, err := strconv.ParseFloat(text, 64)
	if err != nil || math.IsNaN(v) || math.IsInf(v, 0) {
		n.fault(fmt.Sprintf("%q is not a finite number", text), "write a decimal number without unit")
		return fallback
	}
	if !n.keeps(v, bounds) {
		return fallback
	}
	return v
}

// withUnit parts a number and the unit behind it.
var withUnit = regexp.MustCompile(`^([-+0-9.]+(?:[eE][-+]?[0-9]+)?)\s*(.*)$`)

// numberWithUnit reads a number and a unit that may follow it, which nobody has
// looked at yet; 0 without a value or with a faulty one.
func (n node) numberWithUnit(bounds ...bound) (float64, string) {
	text := strings.TrimSpace(n.text())
	m := withUnit.FindStringSubmatch(text)
	if !n.is() || m == nil || m[2] == "" {
		return n.number(0, bounds...), ""
	}
	v, err := strconv.ParseFloat(m[1], 64)
	if err != nil || math.IsInf(v, 0) {
		n.fault(fmt.Sprintf("%q is not a finite number", m[1]), "write a decimal number, and a unit")
		return 0, ""
	}
	if !n.plain(text) || !n.keeps(v, bounds) {
		return 0, ""
	}
	return v, m[2]
}

// integer reads a whole number.
func (n node) integer(fallback, lo, hi int) int {
	if !n.is() {
		return fallback
	}
	v := n.number(math.NaN(), between(float64(lo), float64(hi), fmt.Sprintf("%d and %d", lo, hi)))
	switch {
	case math.IsNaN(v):
		return fallback
	case v != math.Trunc(v):
		n.fault(fmt.Sprintf("%s is not a whole number", n.text()), "write it without decimals")
		return fallback
	}
	return int(v)
}

// share reads a fraction that must be written with a unit, because 0.05 in the
// place of 0.05 % is wrong by a factor of 100 and looks right.
func (n node) share(fallback float64, bounds ...bound) float64 {
	v, u, ok := n.measure(unit.Ratio)
	if ok && u.Name == "1" && v != 0 {
		n.fault(fmt.Sprintf("%s is a share without unit", n.text()), fmt.Sprintf("write %s %% or %g %%, whichever is meant", n.text(), 100*v))
		return fallback
	}
	if !ok || !n.keeps(v, bounds) {
		return fallback
	}
	return v
}

// longest is the longest time that a rig file may name.
const longest = 1e6 // s

// duration reads a time and gives ns.
func (n node) duration(fallback int64, bounds ...bound) int64 {
	bounds = append([]bound{notNegative, between(0, longest, "0 s and 1e6 s")}, bounds...)
	s := n.quantity(unit.Time, math.NaN(), bounds...)
	if math.IsNaN(s) {
		return fallback
	}
	return int64(math.Round(s * 1e9))
}

// per reads a rate of change, "400 kPa/s", and gives SI per second.
func (n node) per(d unit.Dimension, fallback float64, bounds ...bound) float64 {
	text := strings.TrimSpace(n.text())
	if !n.is() || !n.plain(text) {
		return fallback
	}
	short, ok := strings.CutSuffix(text, "/s")
	if !ok {
		n.fault(fmt.Sprintf("%q is not a rate of change", text), "write it per second, as in 400 kPa/s or 500 K/s")
		return fallback
	}
	v, _, err := unit.ParseValueAs(short, difference(d))
	if err != nil {
		n.unitFault(err)
		return fallback
	}
	if !n.keeps(v, bounds) {
		return fallback
	}
	return v
}

// in reads a number of a unit that only one key of the file has, such as 1/K.
func (n node) in(name string, fallback float64, bounds ...bound) float64 {
	text := strings.TrimSpace(n.text())
	if !n.is() || !n.plain(text) {
		return fallback
	}
	number, ok := strings.CutSuffix(text, name)
	v, err := strconv.ParseFloat(strings.TrimSpace(number), 64)
	if !ok || err != nil || math.IsNaN(v) || math.IsInf(v, 0) {
		n.fault(fmt.Sprintf("%q is not a value in %s", text, name), "write a number and "+name)
		return fallback
	}
	if !n.keeps(v, bounds) {
		return fallback
	}
	return v
}

// rpm reads a speed of rotation in 1/min.
func (n node) rpm(fallback float64, bounds ...bound) float64 {
	v := n.quantity(unit.Frequency, math.NaN(), bounds...)
	if math.IsNaN(v) {
		return fallback
	}
	return math.Round(v*60e6) / 1e6
}

// difference gives the dimension of a difference of two values of dimension d.
func difference(d unit.Dimension) unit.Dimension {
	if d == unit.Temperature {
		return unit.TemperatureDifference
	}
	return d
}

// choice reads one of a few words.
func (n node) choice(fallback string, words ...string) string {
	text := n.text()
	if text == "" && !n.is() {
		return fallback
	}
	if !slices.Contains(words, text) {
		n.fault(fmt.Sprintf("%q is not one of %s", text, strings.Join(words, ", ")), nearest(text, words))
		return fallback
	}
	return text
}

// flag reads true or false.
func (n node) flag(fallback bool) bool {
	switch text := n.text(); {
	case !n.is():
		return fallback
	case text == "true":
		return true
	case text == "false":
		return false
	default:
		n.fault(fmt.Sprintf("%q is neither true nor false", text), "write true or false")
		return fallback
	}
}

// name is what an id must look like: it becomes part of topics and expressions.
var name = regexp.MustCompile(`^[a-z][a-z0-9_]{0,63}$`)

// id reads a name; "" when it is not there or faulty.
func (n node) id() string {
	text := n.text()
	if n.is() && !name.MatchString(text) {
		n.fault(fmt.Sprintf("%q is not an id", text), "begin with a small letter, then small letters, digits and _, 64 at most")
		return ""
	}
	return text
}

// zoneName reads the name of a time zone, "" for none.
func (n node) zoneName() string {
	text := n.text()
	if !n.is() {
		return ""
	}
	// Local is that of whatever machine reads the file.
	if _, err := time.LoadLocation(text); err != nil || text == "" || text == "Local" {
		n.fault(fmt.Sprintf("there is no time zone %q", text), "write a name of the IANA database, as Europe/Zurich or Etc/UTC")
		return ""
	}
	return text
}

// topic reads an MQTT topic, with wildcards for a filter.
func (n node) topic(filter bool) string {
	text := n.text()
	if !n.is() {
		return ""
	}
	hint := ""
	switch {
	case text == "":
		hint = "write a topic"
	case strings.ContainsAny(text, " \t\r\n") || strings.ContainsFunc(text, func(r rune) bool { return r < ' ' || r == 0x7f }):
		hint = "leave blanks and control characters out"
	case len(text) > 1024:
		hint = "1024 bytes at most"
	case strings.HasPrefix(text, "$"):
		hint = "topics that begin with $ belong to the broker"
	case !filter && strings.ContainsAny(text, "+#"):
		hint = "a channel has one topic; wildcards belong into inputs"
	case filter && !wildcards(text):
		hint = "+ stands for a whole level, # for the rest and only at the end"
	default:
		return text
	}
	n.fault(fmt.Sprintf("%q is not a topic", text), hint)
	return ""
}

// wildcards tells whether + and # stand where MQTT allows them [MQTT-4.7.1].
func wildcards(filter string) bool {
	levels := strings.Split(filter, "/")
	for i, level := range levels {
		if level == "#" && i == len(levels)-1 || level == "+" {
			continue
		}
		if strings.ContainsAny(level, "+#") {
			return false
		}
	}
	return true
}

// matches tells whether a topic falls under a filter [MQTT-4.7].
func matches(filter, topic string) bool {
	want, have := strings.Split(filter, "/"), strings.Split(topic, "/")
	for i, level := range want {
		if level == "#" {
			return true
		}
		if i >= len(have) || level != "+" && level != have[i] {
			return false
		}
	}
	return len(want) == len(have)
}

// line reads a text of one line for people.
func (n node) label(fallback string) string {
	if !n.is() {
		return fallback
	}
	text := strings.TrimSpace(n.text())
	switch {
	case text == "":
		n.fault("the text is empty", "write a text, or leave the key away")
		return fallback
	case strings.Contains(text, "\n"):
		n.fault("the text has more than one line", "write it in one line")
	case len(text) > 300:
		n.fault("the text is too long", "300 letters at most")
	}
	return text
}
