package config

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"
	_ "time/tzdata"

	"throatwatch/cmd/internal/recording"
)

const exampleMap = "../../../testdata/recordings/example-map.yaml"

// exampleHeader has the columns of the example, one that it skips among them.
var exampleHeader = []string{"Date", "Time", "P7 rake 1", "P7 rake 2", "EGT 1", "EGT 2", "N", "Remark", "Operator", "Fuel lot"}

func headerOf(names ...string) func(recording.Form) ([]string, error) {
	return func(recording.Form) ([]string, error) { return names, nil }
}

// The example says what it says.
func TestLoadMap(t *testing.T) {
	_, cfg := load(t, example)
	var asked recording.Form
	m, hash, faults := LoadMap(exampleMap, &cfg, func(f recording.Form) ([]string, error) {
		asked = f
		return exampleHeader, nil
	})
	if len(faults) > 0 || len(hash) != 64 {
		t.Fatalf("%v %q", faults, hash)
	}
	if want := (recording.Form{Separator: ';', Decimal: ',', Header: 2, Data: 4}); asked != want || m.Form != want {
		t.Errorf("form %+v, %+v, want %+v", asked, m.Form, want)
	}
	if c := &m.Time; c.Kind != recording.ClockPattern || c.Layout != "02.01.2006 15:04:05" || c.Zone.String() != "Europe/Zurich" || !slices.Equal(c.Columns, []string{"Date", "Time"}) {
		t.Errorf("time %+v", c)
	}
	var got []string
	for _, c := range m.Columns {
		got = append(got, fmt.Sprintf("%s=%s %s>%s", c.Name, cfg.Compute.Channels[c.Channel].ID, c.Unit.Name, c.Raw.Name))
	}
	want := []string{"P7 rake 1=p7_1 psi>kPa", "P7 rake 2=p7_2 psi>kPa", "EGT 1=egt_1 degF>degC", "EGT 2=egt_2 degF>degC", "N=speed rpm>rpm"}
	if !slices.Equal(got, want) {
		t.Errorf("columns %q, want %q", got, want)
	}
	// The raw unit of the barometer is hPa in the rig file, so its value comes through as written.
	if len(m.Constants) != 1 || cfg.Compute.Channels[m.Constants[0].Channel].ID != "p_baro" || m.Constants[0].Raw != 1005.8 {
		t.Errorf("constants %+v", m.Constants)
	}
	if !m.Missing["-9999"] || !m.Missing["n/a"] || m.EmptyWhere != "Remark" {
		t.Errorf("missing %v, only where %q is empty", m.Missing, m.EmptyWhere)
	}
}

// Every fault has its place and what to do.
func TestMapFaults(t *testing.T) {
	_, cfg := load(t, example)
	const head = "time: {column: t, format: epoch, unit: s}\n"
	header := []string{"t", "a", "b", "note", "twin", "twin"}
	for _, tt := range []struct {
		name, text string
		want       []string // line:column: message
	}{
		{"nothing", "", []string{"1:1: the file is empty"}},
		{"no columns", head + "skip: rest\n", []string{`1:1: key "columns" is missing`}},
		{"no time", "columns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{`1:1: key "time" is missing`}},
		{"forgotten columns", head + "columns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: [twin]\n", []string{
			"3:3: the map does not say what these columns are: b, note", `4:8: the recording has column "twin" more than once`,
		}},
		{"unknown names", head + "columns:\n  - {column: A, channel: p71, unit: kPa}\n  - {column: b, channel: egt_1, unit: kPa}\nskip: rest\ncolour: red\n", []string{
			`3:14: the recording has no column "A"`, `3:26: the rig has no channel "p71"`, `4:39: unit "kPa" measures pressure; wanted is temperature`, `6:1: key "colour" is not known here`,
		}},
		{"twice", head + "columns:\n  - {column: a, channel: p7_1, unit: kPa}\n  - {column: a, channel: p7_1, unit: kPa}\nconstants: {p7_1: 3 kPa, baro: 3 kPa, p_baro: 3 K, p7_2: 5}\nskip: rest\n", []string{
			`4:14: column "a" is there twice`, `4:26: channel "p7_1" is there twice`, `5:13: channel "p7_1" is there twice`, `5:26: the rig has no channel "baro"`,
			`5:47: unit "K" measures temperature; wanted is pressure`, "5:58: unit is missing",
		}},
		{"no unit", head + "columns:\n  - {column: a, channel: p7_1}\nskip: rest\n", []string{`3:5: key "unit" is missing`}},
		{"no time format", "time: {column: t, format: soon}\ncolumns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{`1:27: "soon" is no format of a time`}},
		{"time without what it needs", "time: {column: [t, a], format: elapsed, zone: UTC}\ncolumns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{
			`1:7: key "unit" is missing`, `1:7: key "start" is missing`, "1:16: format elapsed has one column", "1:47: zone does not go with format elapsed",
		}},
		{"time with what it does not need", "time: {column: t, format: rfc3339, unit: s, start: 2026}\ncolumns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{
			"1:42: unit does not go with format rfc3339", "1:52: start does not go with format rfc3339",
		}},
		{"zones", "time: {column: t, format: YYYY-MM-DD hh:mm:ss, zone: Mars/Olympus}\ncolumns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{`1:54: "Mars/Olympus" is not a time zone`}},
		{"no zone", "time: {column: t, format: YYYY-MM-DD hh:mm:ss}\ncolumns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{`1:7: key "zone" is missing`}},
		{"start", "time: {column: t, format: elapsed, unit: s, start: noon}\ncolumns:\n  - {column: a, channel: p7_1, unit: kPa}\nskip: rest\n", []string{`1:52: "noon" is not a time`}},
		{"comma and comma", "csv: {decimal: \",\"}\n" + head + "columns: []\nskip: rest\n", []string{"1:6: a comma cannot separate cells and fractions", "3:10: the list of columns is empty"}},
		{"csv", "csv: {separator: ab, decimal: x, header_line: 0, data_line: 1}\n" + head + "columns: []\n", []string{
			`1:18: "ab" is not one sign`, `1:31: "x" is not one of ., ,`, "1:47: 0 must be between 1 and 10000", "1:61: 1 must be between", "3:10: the list of columns is empty",
		}},
		{"values without unit", head + "values: {channel: a, value: b}\nskip: rest\n", []string{"2:9: the unit of the values is not said"}},
		{"values of nothing", head + "values: {channel: a}\nskip: rest\n", []string{`2:9: key "value" is missing`, "2:9: the unit of the values is not said"}},
		{"no YAML", "time: [\n", []string{"1:7: "}},
	} {
		_, faults := parseMap(File{"m.yaml", tt.text}, &cfg, headerOf(header...))
		var got []string
		for _, f := range faults {
			got = append(got, strings.TrimPrefix(f.String(), "m.yaml:"))
			if f.Hint == "" {
				t.Errorf("%s: %s has no hint", tt.name, f)
			}
		}
		ok := len(got) == len(tt.want)
		for i := 0; ok && i < len(got); i++ {
			place, message, _ := strings.Cut(tt.want[i], " ")
			ok = strings.HasPrefix(got[i], place) && strings.Contains(got[i], message)
		}
		if !ok {
			t.Errorf("%s:\n%s\nwant\n%s", tt.name, strings.Join(got, "\n"), strings.Join(tt.want, "\n"))
		}
	}
	none := func(recording.Form) ([]string, error) { return nil, errors.New("the disk is gone") }
	if _, faults := parseMap(File{"m.yaml", head}, &cfg, none); len(faults) != 1 || !strings.Contains(faults[0].Message, "the disk is gone") {
		t.Errorf("a recording that cannot be read: %v", faults)
	}
	if _, _, faults := LoadMap("nowhere.yaml", &cfg, none); len(faults) != 1 || !strings.Contains(faults[0].String(), `no file "nowhere.yaml"`) {
		t.Errorf("no map: %v", faults)
	}
}

// A row per value: the names are ids, or those that are listed.
func TestMapOfValues(t *testing.T) {
	_, cfg := load(t, example)
	read := func(text string) recording.Map {
		m, faults := parseMap(File{"m.yaml", text}, &cfg, headerOf("t", "name", "v", "u"))
		if len(faults) > 0 {
			t.Fatal(faults)
		}
		return m
	}
	const head = "time: {column: t, format: YYYY-MM-DD hh:mm:ss, zone: \"+05:30\"}\n"
	m := read(head + "values: {channel: name, value: v, unit: u}\n")
	if c := m.Long.Names["p7_1"]; len(m.Long.Names) != len(cfg.Compute.Channels) || c.Unit.Name != "kPa" || m.Long.Unit != "u" {
		t.Errorf("%+v", m.Long)
	}
	if at := time.Date(2026, 3, 2, 14, 30, 0, 0, m.Time.Zone); at.UTC().Hour() != 9 {
		t.Errorf("09:00 UTC is %v", at)
	}
	m = read(head + "values: {channel: name, value: v}\ncolumns:\n  - {column: PT-7, channel: p7_1, unit: psi}\nskip: u\n")
	if c := m.Long.Names["PT-7"]; len(m.Long.Names) != 1 || c.Unit.Name != "psi" || cfg.Compute.Channels[c.Channel].ID != "p7_1" || len(m.Columns) != 0 {
		t.Errorf("%+v", m.Long)
	}
}

// Whatever a map holds, it is read without a panic, and with a fault or a use.
func FuzzMap(f *testing.F) {
	_, cfg, faults := Load(example)
	if len(faults) > 0 {
		f.Fatal(faults)
	}
	text, err := read(exampleMap)
	if err != nil {
		f.Fatal(err)
	}
	f.Add(text)
	f.Add("time: {column: t, format: epoch, unit: ns}\nvalues: {channel: a, value: b, unit: c}\nskip: rest\n")
	f.Add("csv: {separator: tab}\ntime: {column: [], format: ZZ}\nconstants: {p_baro: 1 bar}\n")
	f.Fuzz(func(t *testing.T, text string) {
		m, faults := parseMap(File{"m.yaml", text}, &cfg, headerOf(exampleHeader...))
		if len(faults) == 0 && (len(m.Time.Columns) == 0 || len(m.Columns) == 0 && m.Long == nil) {
			t.Fatalf("no fault, and nothing to read: %+v", m)
		}
	})
}
