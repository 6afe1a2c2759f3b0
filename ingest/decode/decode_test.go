package decode

import (
	"encoding/hex"
	"fmt"
	"math"
	"strings"
	"testing"

	"throatwatch/ingest"
)

// host is the instant of arrival in all tests: 2026-03-29 01:30:00.123456789 UTC.
const host = int64(1774747800_123456789)

// show prints samples so that every bit that matters can be compared as text.
func show(samples []ingest.Sample) string {
	var b strings.Builder
	for _, s := range samples {
		at := fmt.Sprint(s.Time)
		if s.Time == ingest.NoTime {
			at = "-"
		}
		fmt.Fprintf(&b, "%s|%s|%s|%v\n", s.Name, s.Unit, at, s.Value)
	}
	return strings.TrimSuffix(b.String(), "\n")
}

func reasons(f *Faults) string {
	var out []string
	for r, n := range f {
		if n > 0 {
			out = append(out, fmt.Sprintf("%s %d", ingest.Reason(r), n))
		}
	}
	return strings.Join(out, ", ")
}

func unhex(s string) string {
	b, err := hex.DecodeString(strings.Join(strings.Fields(s), ""))
	if err != nil {
		panic(err)
	}
	return string(b)
}

// The packs that RFC 8428 itself shows.
const (
	rfcSingle = `[ {"n":"urn:dev:ow:10e2073a01080063","u":"Cel","v":23.1} ]`
	rfcSeries = `[
     {"bn":"urn:dev:ow:10e2073a0108006:","bt":1.276020076001e+09,
      "bu":"A","bver":5,
      "n":"voltage","u":"V","v":120.1},
     {"n":"current","t":-5,"v":1.2},
     {"n":"current","t":-4,"v":1.3},
     {"n":"current","t":-3,"v":1.4},
     {"n":"current","t":-2,"v":1.5},
     {"n":"current","t":-1,"v":1.6},
     {"n":"current","v":1.7}
   ]`
	rfcMoving = `[
     {"bn":"urn:dev:ow:10e2073a01080063","bt":1.320067464e+09,
      "bu":"%RH","v":20},
     {"u":"lon","v":24.30621},
     {"u":"lat","v":60.07965},
     {"t":60,"v":20.3},
     {"u":"lon","t":60,"v":24.30622},
     {"u":"lat","t":60,"v":60.07965},
     {"t":120,"v":20.7},
     {"u":"%EL","t":150,"v":98},
     {"t":180,"v":21.2}
   ]`
	rfcTypes = `[
     {"bn":"urn:dev:ow:10e2073a01080063:","n":"temp","u":"Cel","v":23.1},
     {"n":"label","vs":"Machine Room"},
     {"n":"open","vb":false},
     {"n":"nfc-reader","vd":"aGkgCg"}
   ]`
	rfcCollection = `[
     {"bn":"2001:db8::2/","bt":1.320078429e+09,
      "n":"temperature","u":"Cel","v":25.2},
     {"n":"humidity","u":"%RH","v":30},
     {"bn":"2001:db8::1/","n":"temperature","u":"Cel","v":12.3},
     {"n":"humidity","u":"%RH","v":67}
   ]`
	rfcCBOR = `
     87 a7 21 78 1b 75 72 6e 3a 64 65 76 3a 6f 77 3a
     31 30 65 32 30 37 33 61 30 31 30 38 30 30 36 3a
     22 fb 41 d3 03 a1 5b 00 10 62 23 61 41 20 05 00
     67 76 6f 6c 74 61 67 65 01 61 56 02 fb 40 5e 06
     66 66 66 66 66 a3 00 67 63 75 72 72 65 6e 74 06
     24 02 fb 3f f3 33 33 33 33 33 33 a3 00 67 63 75
     72 72 65 6e 74 06 23 02 fb 3f f4 cc cc cc cc cc
     cd a3 00 67 63 75 72 72 65 6e 74 06 22 02 fb 3f
     f6 66 66 66 66 66 66 a3 00 67 63 75 72 72 65 6e
     74 06 21 02 f9 3e 00 a3 00 67 63 75 72 72 65 6e
     74 06 20 02 fb 3f f9 99 99 99 99 99 9a a3 00 67
     63 75 72 72 65 6e 74 06 00 02 fb 3f fb 33 33 33
     33 33 33`
	rfcSeriesResolved = `urn:dev:ow:10e2073a0108006:voltage|V|1276020076001000000|120.1
urn:dev:ow:10e2073a0108006:current|A|1276020071001000000|1.2
urn:dev:ow:10e2073a0108006:current|A|1276020072001000000|1.3
urn:dev:ow:10e2073a0108006:current|A|1276020073001000000|1.4
urn:dev:ow:10e2073a0108006:current|A|1276020074001000000|1.5
urn:dev:ow:10e2073a0108006:current|A|1276020075001000000|1.6
urn:dev:ow:10e2073a0108006:current|A|1276020076001000000|1.7`
)

type row struct {
	name    string
	format  Format
	topic   string
	payload string
	samples string // name|unit|time|value per line
	faults  string // reason and count
	refused bool
	device  bool // DeviceTime
	source  string
}

var rows = []row{
	// SenML JSON: the RFC's own packs, resolved.
	{"rfc single", SenMLJSON, "", rfcSingle, "urn:dev:ow:10e2073a01080063|Cel|-|23.1", "", false, false, "RFC 8428 5.1.1; no time"},
	{"rfc series", SenMLJSON, "", rfcSeries, rfcSeriesResolved, "", false, true, "RFC 8428 5.1.2, base fields applied after 4.6"},
	{"rfc moving", SenMLJSON, "", rfcMoving, `urn:dev:ow:10e2073a01080063|%RH|1320067464000000000|20
urn:dev:ow:10e2073a01080063|lon|1320067464000000000|24.30621
urn:dev:ow:10e2073a01080063|lat|1320067464000000000|60.07965
urn:dev:ow:10e2073a01080063|%RH|1320067524000000000|20.3
urn:dev:ow:10e2073a01080063|lon|1320067524000000000|24.30622
urn:dev:ow:10e2073a01080063|lat|1320067524000000000|60.07965
urn:dev:ow:10e2073a01080063|%RH|1320067584000000000|20.7
urn:dev:ow:10e2073a01080063|%EL|1320067614000000000|98
urn:dev:ow:10e2073a01080063|%RH|1320067644000000000|21.2`, "", false, true, "RFC 8428 5.1.3 and its resolved form 5.1.4"},
	{"rfc types", SenMLJSON, "", rfcTypes, "urn:dev:ow:10e2073a01080063:temp|Cel|-|23.1", "not_a_number 3", false, false, "RFC 8428 5.1.5"},
	{"rfc collection", SenMLJSON, "", rfcCollection, `2001:db8::2/temperature|Cel|1320078429000000000|25.2
2001:db8::2/humidity|%RH|1320078429000000000|30
2001:db8::1/temperature|Cel|1320078429000000000|12.3
2001:db8::1/humidity|%RH|1320078429000000000|67`, "", false, true, "RFC 8428 5.1.6"},

	// SenML JSON: resolution.
	{"base value", SenMLJSON, "", `[{"bv":100,"n":"p","v":1.5},{"n":"q","v":-0.5}]`, "p||-|101.5\nq||-|99.5", "", false, false, "RFC 8428 4.1: base value is added"},
	{"base after name", SenMLJSON, "", `[{"n":"p","v":1,"bn":"r:"}]`, "r:p||-|1", "", false, false, "members of an object have no order, RFC 8259 4"},
	{"base only", SenMLJSON, "", `[{"bn":"r:","bt":1774747800},{"n":"p","v":1}]`, "r:p||1774747800000000000|1", "", false, true, "RFC 8428 4.1"},
	{"relative", SenMLJSON, "", `[{"n":"p","t":-1.5,"v":1}]`, "p||1774747798623456789|1", "", false, false, "RFC 8428 4.5.3: host − 1.5 s"},
	{"relative limit", SenMLJSON, "", `[{"n":"p","t":268435456,"v":1},{"n":"p","t":268435455,"v":1}]`, "p||268435456000000000|1\np||2043183255123456789|1", "", false, false, "RFC 8428 4.5.3: 2^28 s is the first absolute time"},
	{"microseconds", SenMLJSON, "", `[{"bt":1774747800,"n":"p","t":0.123456,"v":1},{"n":"p","t":0.123457,"v":1}]`, "p||1774747800123456000|1\np||1774747800123457000|1", "", false, true, "rounding to 1 µs; the float64 step is 0.24 µs"},
	{"milliseconds as seconds", SenMLJSON, "", `[{"n":"p","t":1774747800123,"v":1}]`, "p||9223372036854775000|1", "", false, true, "clamped, so that the value is not lost"},
	{"own unit empty", SenMLJSON, "", `[{"bu":"Pa","n":"p","u":"","v":1}]`, "p||-|1", "", false, false, "bu applies only without u, RFC 8428 4.1"},
	{"sum", SenMLJSON, "", `[{"bs":1,"n":"e","s":5},{"n":"p","s":7,"v":2}]`, "p||-|2", "", false, false, "sums are ignored, no fault"},
	{"unknown label", SenMLJSON, "", `[{"n":"p","v":1,"x":[{"deep":[null]}],"ut":10}]`, "p||-|1", "", false, false, "RFC 8428 4.4: unknown labels are ignored"},
	{"escapes", SenMLJSON, "", `[{"\u006e":"p\u0031","u":"\u00b0C\/\ud83d\ude00","v":1}]`, "p1|°C/😀|-|1", "", false, false, "RFC 8259 7"},
	{"empty pack", SenMLJSON, "", ` [ ] `, "", "", false, false, "nothing wrong, nothing there"},
	{"exact", SenMLJSON, "", `[{"n":"p","v":2.2250738585072011e-308},{"n":"p","v":123.456e-7},{"n":"p","v":9007199254740993}]`, "p||-|2.225073858507201e-308\np||-|1.23456e-05\np||-|9.007199254740992e+15", "", false, false, "nearest float64, ties to even; IEEE 754"},

	// SenML JSON: faults.
	{"must understand", SenMLJSON, "", `[{"n":"p","v":1},{"n":"q","v":1,"scale_":1000}]`, "", "must_understand 1", true, false, "RFC 8428 4.4"},
	{"version", SenMLJSON, "", `[{"bver":11,"n":"p","v":1}]`, "", "must_understand 1", true, false, "RFC 8428 4.4: refuse unknown versions"},
	{"overflow", SenMLJSON, "", `[{"n":"p","v":1e999},{"n":"q","v":2}]`, "q||-|2", "not_finite 1", false, false, "beyond float64"},
	{"sum overflow", SenMLJSON, "", `[{"bv":1e308,"n":"p","v":1e308},{"n":"q","v":2}]`, "q||-|1e+308", "not_finite 1", false, false, "base value + value beyond float64"},
	{"NaN token", SenMLJSON, "", `[{"n":"p","v":NaN},{"n":"q","v":-Infinity},{"n":"r","v":3}]`, "r||-|3", "not_finite 2", false, false, "not JSON, but a dead probe must not blind the others"},
	{"null value", SenMLJSON, "", `[{"n":"p","v":null},{"n":"q","v":"7"},{"n":"r","v":[1]}]`, "", "not_a_number 3", false, false, "a value is a number, RFC 8428 4.2"},
	{"bad name", SenMLJSON, "", `[{"n":"_p","v":1},{"n":"p q","v":1},{"n":"","v":1},{"v":1},{"n":"ok","v":1}]`, "ok||-|1", "syntax 4", false, false, "RFC 8428 4.5.1"},
	{"long name", SenMLJSON, "", `[{"n":"` + strings.Repeat("p", MaxName+1) + `","v":1},{"n":"` + strings.Repeat("p", MaxName) + `","v":1}]`, strings.Repeat("p", MaxName) + "||-|1", "syntax 1", false, false, "MaxName"},
	{"no value", SenMLJSON, "", `[{"n":"p"},{"n":"q","v":1}]`, "q||-|1", "syntax 1", false, false, "RFC 8428 4.2: one value per record"},
	{"bad time", SenMLJSON, "", `[{"n":"p","t":"now","v":1},{"n":"q","v":1}]`, "q||-|1", "syntax 1", false, false, "t is a number, RFC 8428 table 1"},
	{"bad base time", SenMLJSON, "", `[{"bt":"now","n":"p","v":1},{"n":"q","v":1}]`, "", "syntax 1", true, false, "what follows would have a wrong time"},
	{"truncated", SenMLJSON, "", `[{"n":"p","v":1},{"n":"q","v"`, "", "syntax 1", true, false, "RFC 8259"},
	{"tail", SenMLJSON, "", `[{"n":"p","v":1}]x`, "", "syntax 1", true, false, "RFC 8259"},
	{"trailing comma", SenMLJSON, "", `[{"n":"p","v":1},]`, "", "syntax 1", true, false, "RFC 8259"},
	{"object", SenMLJSON, "", `{"n":"p","v":1}`, "", "syntax 1", true, false, "a pack is an array, RFC 8428 4"},
	{"empty", SenMLJSON, "", ``, "", "syntax 1", true, false, "RFC 8259"},
	{"deep", SenMLJSON, "", `[{"n":"p","x":` + strings.Repeat("[", 200000) + strings.Repeat("]", 60000), "", "syntax 1", true, false, "maxDepth"},
	{"too long", SenMLJSON, "", `[` + strings.Repeat(" ", 256<<10), "", "too_large 1", true, false, "Limits.Payload"},
	{"too many", SenMLJSON, "", `[` + strings.Repeat(`{"n":"p","v":1},`, 4096) + `{"n":"p","v":1}]`, "", "too_large 1", true, false, "Limits.Records"},

	// SenML CBOR.
	{"rfc cbor", SenMLCBOR, "", unhex(rfcCBOR), rfcSeriesResolved, "", false, true, "RFC 8428 6: the pack of 5.1.2, with a half-precision 1.5"},
	{"cbor numbers", SenMLCBOR, "", unhex("86 a2 00 6170 02 1903e8  a2 00 6170 02 3903e7  a2 00 6170 02 3bffffffffffffffff  a2 00 6170 02 fa3fc00000  a2 00 6170 02 c4 82 21 196ab3  a2 00 6170 02 f90001"), "p||-|1000\np||-|-1000\np||-|-1.8446744073709552e+19\np||-|1.5\np||-|273.15\np||-|5.960464477539063e-08", "", false, false, "RFC 8949 appendix A and 3.4.4"},
	{"cbor not finite", SenMLCBOR, "", unhex("84 a2 00 6170 02 f97e00  a2 00 6170 02 f9fc00  a2 00 6170 02 fb7ff0000000000000 a2 00 6171 02 01"), "q||-|1", "not_finite 3", false, false, "RFC 8949 appendix A: NaN, −Inf, +Inf"},
	{"cbor base not finite", SenMLCBOR, "", unhex("82 a3 22 f97e00 00 6170 02 01  a2 00 6171 02 01"), "", "not_finite 1", true, false, "what follows would have no time"},
	{"cbor indefinite", SenMLCBOR, "", unhex("9f bf 00 6170 02 01 ff ff"), "p||-|1", "", false, false, "RFC 8428 6 allows it for streaming"},
	{"cbor kinds", SenMLCBOR, "", unhex("84 a2 00 6170 03 6161  a2 00 6170 04 f5  a2 00 6170 08 4101  a2 00 6170 02 6131"), "", "not_a_number 4", false, false, "vs, vb, vd, and text for v"},
	{"cbor must understand", SenMLCBOR, "", unhex("81 a3 00 6170 02 01 62785f 01"), "", "must_understand 1", true, false, `label "x_"`},
	{"cbor unknown label", SenMLCBOR, "", unhex("81 a5 00 6170 02 01 6178 a1 01 80 18ff c1 00 29 5f 4101 ff"), "p||-|1", "", false, false, "RFC 8428 4.4"},
	{"cbor name in pieces", SenMLCBOR, "", unhex("82 a2 00 7f 6170 ff 02 01 a2 00 6171 02 01"), "q||-|1", "syntax 1", false, false, "RFC 8428 6: definite length text"},
	{"cbor truncated", SenMLCBOR, "", unhex("81 a2 00 6170 02 fb 4059"), "", "syntax 1", true, false, "RFC 8949"},
	{"cbor tail", SenMLCBOR, "", unhex("81 a2 00 6170 02 01 00"), "", "syntax 1", true, false, "one item only"},
	{"cbor huge array", SenMLCBOR, "", unhex("9b 00ffffffffffffff 00"), "", "too_large 1", true, false, "Limits.Records"},
	{"cbor not a pack", SenMLCBOR, "", unhex("a1 00 6170"), "", "syntax 1", true, false, "a pack is an array"},
	{"cbor not records", SenMLCBOR, "", unhex("82 01 02"), "", "syntax 1", true, false, "a record is a map"},

	// Line protocol.
	{"line value", Lines, "", "p3,probe=1 value=101325.5 1774747800123456789", "p3||1774747800123456789|101325.5", "", false, true, "InfluxDB line protocol, ns"},
	{"line fields", Lines, "", "rig,cell=2 p3=1.5,n1=-2i,count=3u 1774747800000000000\n# comment\nfuel value=0.25 1774747800000000001\r\n", "rig.p3||1774747800000000000|1.5\nrig.n1||1774747800000000000|-2\nrig.count||1774747800000000000|3\nfuel||1774747800000000001|0.25", "", false, true, "float, integer and unsigned fields"},
	{"line without time", Lines, "", "p3 value=1\nq value=2 1774747800000000000", "p3||-|1\nq||1774747800000000000|2", "", false, false, "time is optional"},
	{"line kinds", Lines, "", `rig a=true,b="x, y=1",c=1`, "rig.c||-|1", "not_a_number 2", false, false, "boolean and string fields"},
	{"line error", Lines, "", "p3 value=1\nbroken\np4 value=2,x=1z\np5 value=3", "p3||-|1\np5||-|3", "syntax 2", false, false, "the wrong lines only"},
	{"line overflow", Lines, "", "p3 value=1e999,x=1", "p3.x||-|1", "not_finite 1", false, false, "beyond float64"},
	{"line nan", Lines, "", "p3 value=NaN\np4 value=1", "p4||-|1", "syntax 1", false, false, "the protocol has no NaN"},
	{"line escapes", Lines, "", `p\ 3 va\=lue=1`, "p 3.va=lue||-|1", "", false, false, "escapes of the protocol"},
	{"line time range", Lines, "", "p3 value=1 99999999999999999999", "", "syntax 1", true, false, "time beyond int64"},
	{"line garbage", Lines, "", `[{"n":"p","v":1}]`, "", "syntax 1", true, false, "another format on this topic"},
	{"line too many", Lines, "", strings.Repeat("p value=1\n", 4097), "", "too_large 1", true, false, "Limits.Records"},

	{"line too many fields", Lines, "", "p " + strings.Repeat("a=1,", 4097) + "a=1", "", "too_large 1", true, false, "Limits.Records"},
	{"line long name", Lines, "", strings.Repeat("m", MaxName) + " value=1\np value=1", "p||-|1", "syntax 1", false, false, "MaxName"},

	// Bare value.
	{"value", Value, "rigs/a/channels/p3", " 12.5\r\n", "p3||-|12.5", "", false, false, "bare number"},
	{"value integer", Value, "p3", "-7", "p3||-|-7", "", false, false, "bare number, topic of one level"},
	{"value object", Value, "r/p3", `{"t":"2026-03-29T03:30:00.123456789+02:00","v":12.5,"u":"kPa"}`, "p3|kPa|1774747800123456789|12.5", "", false, true, "RFC 3339"},
	{"value seconds", Value, "r/p3", `{"v":12.5,"t":1774747800.25}`, "p3||1774747800250000000|12.5", "", false, true, "epoch seconds"},
	{"value early clock", Value, "r/p3", `{"v":12.5,"t":120}`, "p3||120000000000|12.5", "", false, true, "1970: never relative in this format"},
	{"value no time", Value, "r/p3", `{"v":1,"note":{"by":["a"]}}`, "p3||-|1", "", false, false, "unknown members are ignored"},
	{"value far year", Value, "r/p3", `{"v":1,"t":"9999-01-01T00:00:00Z"}`, "p3||9223372036854775000|1", "", false, true, "clamped"},
	{"value nan", Value, "r/p3", "nan", "", "not_finite 1", false, false, "NaN as printed by C"},
	{"value inf", Value, "r/p3", "-Inf", "", "not_finite 1", false, false, "infinity as printed by C"},
	{"value overflow", Value, "r/p3", `{"v":1e400}`, "", "not_finite 1", false, false, "beyond float64"},
	{"value text", Value, "r/p3", `"12.5"`, "", "not_a_number 1", false, false, "a string is no number"},
	{"value bool", Value, "r/p3", "true", "", "not_a_number 1", false, false, "a boolean is no number"},
	{"value null", Value, "r/p3", `{"v":null}`, "", "not_a_number 1", false, false, "null is no number"},
	{"value comma", Value, "r/p3", "12,5", "", "syntax 1", true, false, "decimal comma"},
	{"value hex", Value, "r/p3", "0x1p3", "", "syntax 1", true, false, "decimal only"},
	{"value empty", Value, "r/p3", "", "", "syntax 1", true, false, "nothing there"},
	{"value no v", Value, "r/p3", `{"t":1774747800}`, "", "syntax 1", true, false, "v is due"},
	{"value bad time", Value, "r/p3", `{"v":1,"t":"yesterday"}`, "", "syntax 1", true, false, "RFC 3339"},
	{"value bool time", Value, "r/p3", `{"v":1,"t":true}`, "", "syntax 1", true, false, "text or number"},
	{"value cut", Value, "r/p3", `{"v":1`, "", "syntax 1", true, false, "RFC 8259"},
	{"value no name", Value, "r/p3/", "1", "", "syntax 1", true, false, "empty last level"},
	{"no format", FormatInvalid, "", "1", "", "syntax 1", true, false, "zero Format is invalid"},
}

func TestDecode(t *testing.T) {
	d := New(Limits{}) // one for all rows: nothing of a message may reach the next
	for _, c := range rows {
		t.Run(c.name, func(t *testing.T) {
			r := d.Decode(c.format, c.topic, []byte(c.payload), host)
			if got := show(r.Samples); got != c.samples {
				t.Errorf("samples (%s):\n%s\nwant:\n%s", c.source, got, c.samples)
			}
			if got := reasons(&r.Faults); got != c.faults {
				t.Errorf("faults %q, want %q (%s)", got, c.faults, c.source)
			}
			if r.Refused != c.refused || r.DeviceTime != c.device {
				t.Errorf("refused %v, device time %v; want %v, %v (%s)", r.Refused, r.DeviceTime, c.refused, c.device, c.source)
			}
			if (r.Fault != nil) != (r.Faults.Total() > 0) {
				t.Errorf("fault %v with %d faults", r.Fault, r.Faults.Total())
			}
		})
	}
}

func TestFaultSaysWhere(t *testing.T) {
	for _, c := range []struct {
		format  Format
		payload string
		want    string
	}{
		{SenMLJSON, `[{"n":"p","v":1},{"n" "q"}]`, `decode: syntax, record 2, byte 22: ":" is due after a label`},
		{SenMLJSON, `[{"n":"p","v":1},{"n":"_q","v":1}]`, `decode: syntax, record 2, byte 17: name is not made of letters, digits and "-:./_" after a letter or digit`},
		{SenMLJSON, `[{"n":"p","v":1e999}]`, `decode: not_finite, record 1, byte 14: a field has the wrong type or is not finite`},
		{SenMLJSON, `[{"n":"p","v":1`, `decode: syntax, record 1, byte 15: "," or a closing bracket is due`},
		{SenMLCBOR, "\x81\xa1", `decode: syntax: payload is not well-formed or over a limit: unexpected EOF`},
		{Lines, "a value=1\nb value=x", `decode: syntax, record 2: line is not line protocol: at line 2:9: field value has unrecognized type`},
		{Value, "12,5", `decode: syntax, byte 2: not a number; write the fraction with a point`},
	} {
		r := New(Limits{}).Decode(c.format, "r/p", []byte(c.payload), host)
		if r.Fault == nil || r.Fault.Error() != c.want {
			t.Errorf("%s %q:\n%v\nwant\n%s", c.format, c.payload, r.Fault, c.want)
		}
	}
}

func TestTruncatedPacksGiveNothing(t *testing.T) {
	d := New(Limits{})
	for _, c := range []struct {
		format  Format
		payload string
	}{{SenMLJSON, rfcSeries}, {SenMLCBOR, unhex(rfcCBOR)}} {
		for n := range len(c.payload) {
			r := d.Decode(c.format, "", []byte(c.payload[:n]), host)
			if !r.Refused || len(r.Samples) > 0 || r.Faults[ingest.ReasonSyntax] != 1 {
				t.Fatalf("%s cut to %d bytes: %d samples, %s", c.format, n, len(r.Samples), reasons(&r.Faults))
			}
		}
	}
}

func TestFormatNames(t *testing.T) {
	for f := SenMLJSON; f < numFormats; f++ {
		if got, err := ParseFormat(f.String()); got != f || err != nil {
			t.Errorf("ParseFormat(%q) = %v, %v", f, got, err)
		}
	}
	if _, err := ParseFormat("invalid"); err == nil {
		t.Error("the zero format has a name that parses")
	}
}

func TestRelativeTimeDoesNotWrap(t *testing.T) {
	d := New(Limits{})
	for _, c := range []struct {
		host int64
		t    string
		want int64
	}{
		{math.MinInt64 + 5, "-1", -math.MaxInt64 / 1000 * 1000},
		{math.MaxInt64 - 5, "-1", math.MaxInt64 - 1_000_000_005},
		{host, "-1e300", host - math.MaxInt64/1000*1000},
	} {
		r := d.Decode(SenMLJSON, "", []byte(`[{"n":"p","t":`+c.t+`,"v":1}]`), c.host)
		if len(r.Samples) != 1 || r.Samples[0].Time != c.want {
			t.Errorf("host %d, t %s: %s, want %d", c.host, c.t, show(r.Samples), c.want)
		}
	}
}
