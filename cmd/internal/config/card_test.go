package config

import (
	"encoding/json"
	"fmt"
	"os"
	"slices"
	"strings"
	"testing"

	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

const exampleCard = "../../../testdata/cards/example.yaml"

// The example says what it says, in the units of operating points.
func TestLoadCard(t *testing.T) {
	_, cfg := load(t, example)
	c, text, faults := LoadCard(exampleCard, &cfg)
	if len(faults) > 0 {
		t.Fatal(faults)
	}
	if c.Label() != "TC-042 A" || c.For != "ML5-0042" || len(c.Points) != 5 || len(text) == 0 || len(CardHash(text)) != 64 {
		t.Errorf("%+v", c)
	}
	var got []string
	for _, p := range c.Points {
		for _, x := range p.Targets {
			got = append(got, fmt.Sprintf("%s %.6g %.6g %.6g %.6g %s", x.Quantity, x.Value.V, x.Tolerance.V, x.Low.V, x.High.V, x.Unit))
		}
	}
	want := []string{ // 100 % is phase.max, 22000 rpm; 710 °C is 983.15 K; 200 kPa is absolute, as an operating point has it
		"referred_speed_rpm 16632 110 16522 16742 rpm", "choke_margin_percent 0 0 0 -10 %",
		"referred_speed_rpm 17952 110 17842 18062 rpm", "choke_margin_percent 0 0 -8 -2 %",
		"referred_speed_rpm 19954 110 19844 20064 rpm", "choke_margin_percent 0 0 5 0 %",
		"referred_speed_rpm 21032 110 20922 21142 rpm", "npr 2.23 0.0669 2.1631 2.2969 ", "egt_indicated_k 0 0 0 983.15 K",
		"referred_speed_rpm 22110 110 22000 22220 rpm", "channel.p_oil 0 0 200000 0 Pa",
	}
	if !slices.Equal(got, want) {
		t.Errorf("targets\n%s\nwant\n%s", strings.Join(got, "\n"), strings.Join(want, "\n"))
	}
	p := c.Points
	if p[0].Choke != card.Disarmed || p[2].Choke != card.Armed || p[4].Choke != "" || !p[3].Auto || p[2].Auto || p[4].Soak != 5 || p[0].Soak != 10 || p[0].Average != 10 {
		t.Errorf("points %+v", p)
	}
	if n := p[0].Needs; len(n) != 6 || n[0].Name != "p7" || len(n[0].Channels) != 4 || n[0].Least != 3 || n[3].Channels[0] != "speed" || n[3].Least != 1 {
		t.Errorf("what must be good: %+v", n)
	}
}

// Every fault has its place and what to do.
func TestCardFaults(t *testing.T) {
	_, cfg := load(t, example)
	const head = "card: {number: T, by: M}\nall: {average: 10 s}\npoints:\n"
	for _, tt := range []struct {
		name, text string
		want       []string // line:column: message
	}{
		{"nothing", "", []string{"1:1: the file is empty"}},
		{"no points", "card: {number: T, by: M}\n", []string{`1:1: key "points" is missing`}},
		{"an empty list", "card: {number: T, by: M}\npoints: []\n", []string{"2:9: the card has no points"}},
		{"another engine", "card: {number: T, by: M, for: ML5-0099}\nall: {average: 10 s}\npoints: [{name: a, targets: {npr: above 2}}]\n", []string{"1:31: the card is for engine ML5-0099, the rig has ML5-0042"}},
		{"no average", "card: {number: T, by: M}\npoints: [{name: a, targets: {npr: above 2}}]\n", []string{`2:10: key "average" is missing`}},
		{"unknown quantity", head + "  - {name: a, targets: {nrp: above 2, channel.x: below 3 K}}\n", []string{`4:25: there is no quantity "nrp"`, `4:39: there is no quantity "channel.x"`}},
		{"a rate", head + "  - {name: a, targets: {speed_rate_rpm_s: above 2}}\n", []string{`4:25: "speed_rate_rpm_s" cannot be a target`}},
		{"bad tolerances", head + "  - name: a\n    targets:\n      speed_rpm: 92 % ± 0 %\n      egt_indicated_k: 600 degC ± 1 %\n      npr: 2 ± x\n      choke_margin_percent: 5 ± 1\n      back_pressure_pa: 100 kPa ± -1 kPa\n", []string{
			`6:18: "92 % ± 0 %": the tolerance is not greater than 0`, `7:24: "600 degC ± 1 %": a temperature has no tolerance in %`,
			`8:12: "x" is not a value`, `9:29: "5" has no unit`, `10:25: "100 kPa ± -1 kPa": the tolerance is not greater than 0`,
		}},
		{"units", head + "  - {name: a, targets: {mass_flow_kg_s: above 3 kPa, npr: about 2, total_temperature_k: between 900 K and 800 K}}\n", []string{
			`4:41: unit "kPa" measures pressure; wanted is mass flow`, `4:59: "about 2" is no target`, `4:89: "between 900 K and 800 K": the first is not below the second`,
		}},
		{"what must be good", head + "  - {name: a, good: [p8, fuelflow], targets: {npr: above 2}}\n", []string{
			`4:22: the rig has neither a channel nor probes of a station "p8"`, `4:26: the rig has neither a channel nor probes of a station "fuelflow"`,
		}},
		{"words", head + "  - {name: a, take: maybe, expect_choke: yes, soak: 10, targets: {npr: above 2}, colour: red}\n  - {name: a, targets: {npr: above 2}}\n", []string{
			`4:21: "maybe" is not one of by hand, automatic`, `4:42: "yes" is not one of armed, disarmed`, "4:53: the unit is missing", `4:82: key "colour" is not known here`, `5:5: point "a" is there twice`,
		}},
	} {
		_, faults := ParseCard("c.yaml", tt.text, &cfg)
		var got []string
		for _, f := range faults {
			got = append(got, fmt.Sprintf("%d:%d: %s", f.Line, f.Column, f.Message))
			if f.Hint == "" {
				t.Errorf("%s: %v has no hint", tt.name, f)
			}
		}
		ok := len(got) == len(tt.want)
		for i := range got {
			ok = ok && strings.HasPrefix(got[i], tt.want[i])
		}
		if !ok {
			t.Errorf("%s:\n%s\nwant\n%s", tt.name, strings.Join(got, "\n"), strings.Join(tt.want, "\n"))
		}
	}
}

func FuzzCard(f *testing.F) {
	text, err := os.ReadFile(exampleCard)
	if err != nil {
		f.Fatal(err)
	}
	f.Add(string(text))
	f.Add("card: {number: T, by: M}\npoints: [{name: a, average: 3 s, targets: {npr: 2 ± 1 %}}]\n")
	f.Add("card: {number: T, by: M}\npoints: [{name: a, average: 3 s, targets: {npr: \"> 2\", speed_rpm: 1e400 ± 1 %}}]\n")
	_, cfg, faults := Load(example)
	if len(faults) > 0 {
		f.Fatal(faults)
	}
	f.Fuzz(func(t *testing.T, text string) {
		c, faults := ParseCard("c.yaml", text, &cfg)
		if len(faults) > 0 {
			for _, x := range faults {
				if x.Line < 1 || x.Column < 1 || x.Message == "" || x.Hint == "" {
					t.Errorf("fault %+v", x)
				}
			}
			return
		}
		if err := cfg.FitsCard(&c); err != nil {
			t.Errorf("a card without faults: %v", err)
		}
		if _, err := json.Marshal(pipeline.Action{Card: &c}); err != nil {
			t.Errorf("a card that no record can carry: %v", err)
		}
	})
}
