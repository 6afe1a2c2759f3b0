package config

import (
	"math"
	"strings"
	"testing"
	"time"

	"throatwatch/monitor/calib"
)

// The example rig has a sensor in date and one that is waived; days end at the facility.
func TestSensorsOnFile(t *testing.T) {
	_, cfg := load(t, example)
	day := func(s string) int64 {
		at, err := time.Parse(time.DateOnly, s)
		if err != nil {
			t.Fatal(err)
		}
		return at.UnixNano()
	}
	baro, thrust, like := channelOf(t, &cfg, "p_baro"), channelOf(t, &cfg, "thrust"), channelOf(t, &cfg, "t_cell")
	if r := baro.Record; r.Serial != "BR-2207" || r.Certificate != "AB-CAL-1187" || r.Calibrated != "2026-01-12" || r.Due != "2031-01-12" || r.Expires != day("2031-01-13") {
		t.Errorf("%+v", r)
	}
	if got := thrust.Record.State(day("2026-03-02")); got != calib.Waived {
		t.Errorf("thrust is %v", got)
	}
	if like.Record != (calib.Record{}) {
		t.Errorf("like: takes a sensor over: %+v", like.Record)
	}
	for _, tt := range []struct {
		on   string
		want string
	}{
		{"2026-01-20", ""},
		{"2026-01-21", "LC-0093 was due on 2026-01-20, waived by Tomas Eklund"},
		{"2031-01-13", "BR-2207 was due on 2031-01-12"},
		{"2031-01-21", "LC-0093 was due on 2026-01-20;"},
	} {
		var texts []string
		for _, f := range Expired("rig.yaml", &cfg, day(tt.on)) {
			texts = append(texts, f.Message+";")
		}
		if got := strings.Join(texts, " "); !strings.Contains(got, tt.want) || (got == "") != (tt.want == "") {
			t.Errorf("on %s: %q, want %q", tt.on, got, tt.want)
		}
	}
	if onFile := cfg.OnFile(); len(onFile) != 2 || !cfg.Compute.InUse(onFile[0]) {
		t.Errorf("on file are %v", onFile)
	}
	if ruleOf(t, &cfg, "calibration_expired").When != "calibrations_expired > 0" {
		t.Error("nothing tells of an expired calibration")
	}
	_, mi := load(t, minimal)
	for i := range mi.Rules {
		if mi.Rules[i].Name == "calibration_expired" {
			t.Error("a rule on calibrations where none is on file")
		}
	}
}

// A swap that somebody entered is as if the rig file stated it. What it leaves out is as of
// the sensor before.
func TestWithSwaps(t *testing.T) {
	b, _ := load(t, example)
	at := time.Date(2026, 3, 2, 9, 41, 0, 500e6, time.UTC).UnixNano()
	text := "calibration: {scale: 1.5, offset: -2}\nsensor:\n  serial: P-1\n  due: 2027-01-01\n"
	out, faults := WithSwaps(b.Marshal(), []Swapped{
		{Channel: "p7_2", Serial: "P-1", ValidFrom: at, Calibration: text},
		{Channel: "p7_2", Serial: "P-2", ValidFrom: at + 1e9, Calibration: "uncertainty: {fixed: 1 kPa}"},
	})
	if len(faults) > 0 {
		t.Fatal(faults)
	}
	cfg, faults := Parse(out)
	if len(faults) > 0 {
		t.Fatal(faults)
	}
	ch := channelOf(t, &cfg, "p7_2")
	if len(ch.Polynomial) != 0 || len(ch.Swaps) != 2 {
		t.Fatalf("%+v", ch)
	}
	for i, tt := range []struct {
		from   int64
		serial string
		fixed  float64
		due    string
	}{{at, "P-1", 0, "2027-01-01"}, {at + 1e9, "P-2", 1000, ""}} {
		s := ch.Swaps[i]
		if s.From != tt.from || s.Record.Serial != tt.serial || s.Record.Due != tt.due || len(s.Polynomial) != 2 || s.Polynomial[0] != -2 || s.Polynomial[1] != 1.5 ||
			math.Abs(s.Uncertainty.Fixed-tt.fixed) > 1e-9 {
			t.Errorf("%+v", s)
		}
	}
	if got := ch.RecordAt(at-1).Serial + ch.RecordAt(at).Serial + ch.RecordAt(at+2e9).Serial; got != "P-1P-2" {
		t.Errorf("sensors %s", got)
	}
	if _, faults := WithSwaps(out, []Swapped{{Channel: "p7_1", Serial: "P-3", ValidFrom: at, Calibration: "calibration: {scale: 2}"}}); len(faults) != 1 {
		t.Errorf("on top of swaps: %v", faults)
	}
	for _, tt := range []struct{ name, channel, text, want string }{
		{"nothing", "p7_2", "", "the file is empty"},
		{"another key", "p7_2", "range: [0 kPa, 1 kPa]", "is not known here"},
		{"another serial", "p7_2", "sensor: {serial: P-7}", `the serial number is "P-7"`},
		{"another raw unit", "p7_2", "calibration: {raw: mA, scale: 2}", "the raw unit"},
		{"no channel", "p8", "calibration: {scale: 2}", "there is no channel"},
		{"another entry in disguise", "p7_2", "calibration: {scale: 2}\n- channel: p7_1", ""},
		{"no mapping", "p7_2", "just a text", "a group of keys is wanted here"},
	} {
		_, faults := WithSwaps(b.Marshal(), []Swapped{{Channel: tt.channel, Serial: "P-1", ValidFrom: at, Calibration: tt.text}})
		if len(faults) == 0 || !strings.Contains(faults[0].Message, tt.want) {
			t.Errorf("%s: %v, want %q", tt.name, faults, tt.want)
		}
	}
}

// Whatever somebody enters, the other channels stay as they are.
func FuzzWithSwaps(f *testing.F) {
	b, _, faults := Load(minimal)
	if len(faults) > 0 {
		f.Fatal(faults)
	}
	bundle := b.Marshal()
	before, _ := Parse(bundle)
	for _, text := range []string{"calibration: {scale: 2}", "sensor: {serial: A}", "uncertainty: {fixed: 1 kPa}\r\n", "a: &b [*b]", "- x", "\tcalibration:", "calibration: |\n  x\nchannels: []", "---\nsensor: {serial: A}"} {
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text string) {
		out, faults := WithSwaps(bundle, []Swapped{{Channel: "p_jet", Serial: "A", ValidFrom: 1e18, Calibration: text}})
		if len(faults) > 0 {
			return
		}
		cfg, faults := Parse(out)
		if len(faults) > 0 || len(cfg.Compute.Channels) != len(before.Compute.Channels) {
			t.Fatalf("%v, %d channels", faults, len(cfg.Compute.Channels))
		}
		for i := range cfg.Compute.Channels {
			if c := &cfg.Compute.Channels[i]; c.ID != before.Compute.Channels[i].ID || len(c.Swaps) > 0 != (c.ID == "p_jet") {
				t.Fatalf("channel %d: %+v", i, c)
			}
		}
	})
}
