package rules

import (
	"strings"
	"testing"

	"throatwatch/monitor"
)

// A number with a unit stands for the same as the number in the unit of the
// quantity. Factors are those of NIST SP 811 (2008) B.8, by hand.
func TestUnits(t *testing.T) {
	names := testNames()
	f := fill(t, names, map[string]any{
		"npr": 1.8, "choke_margin_percent": -10, "speed_rpm": 20000, "speed_rate_rpm_s": 100, "egt_indicated_k": 973.15,
		"egt_hottest_k": 1000, "egt_coldest_k": 940, "egt_spread_k": 60, "back_pressure_pa": 100e3, "total_pressure_pa": 180e3,
		"mass_flow_kg_s": 2, "flow_balance_kg_s": 0.05, "channel.p_oil": 250e3, "channel.vibration": 12e-3, "data_age_s": 90,
		"choke_armed": true, "phase": "idle", "p_choked": 0.3,
	})
	tests := []struct {
		src  string
		want Tri
	}{
		{"egt_indicated_k >= 700 degC", True},
		{"egt_indicated_k > 700 degC", False},
		{"egt_indicated_k >= 700degC and egt_indicated_k <= 1292 degF", True},
		{"700 °C <= egt_indicated_k", True},
		{"egt_indicated_k > -20 degC", True},
		{"egt_indicated_k == 973.15 K", True},
		{"egt_indicated_k == 973.15", True}, // a plain number is in the unit of the quantity
		{"channel.p_oil == 250 kPa", True},
		{"channel.p_oil == 2.5 bar and channel.p_oil == 2.5e2 kPa", True},
		{"channel.p_oil > 36.2 psi and channel.p_oil < 36.3 psi", True},
		{"channel.vibration == 12 mm/s", True},
		{"speed_rpm == 20000 rpm and speed_rpm > 333 Hz", True},
		{"speed_rate_rpm_s == 100 rpm/s and speed_rate_rpm_s == 6000 rpm/min", True},
		{"choke_margin_percent == -10 %", True},
		{"npr == 180 %", True},
		{"p_choked < 50 %", True},
		{"mass_flow_kg_s == 120 kg/min", True},
		{"data_age_s > 1 min", True},
		{"data_age_s > 1 h", False},

		// A difference of temperatures is none on a scale with an offset.
		{"egt_spread_k == 60 K", True},
		{"egt_spread_k == 60 degC", True},
		{"egt_spread_k == 108 degF", True},
		{"egt_hottest_k - egt_coldest_k == 60 K", True},
		{"egt_indicated_k - 10 K == 690 degC", True},
		{"egt_indicated_k + 10 K == 710 degC", True},
		{"10 K + egt_indicated_k == 710 degC", True},
		{"egt_indicated_k + egt_spread_k == 760 degC", True},
		{"egt_spread_k + egt_indicated_k == 760 degC", True},
		{"egt_indicated_k - 650 degC == 50 K", True}, // so far above 650 °C
		{"750 degC - egt_indicated_k == 50 K", True},
		{"700 degC - egt_spread_k == 640 degC", True},
		{"700 degC + egt_spread_k == 760 degC", True},

		{"abs(flow_balance_kg_s) > 0.02 * mass_flow_kg_s", True},
		{"total_pressure_pa - back_pressure_pa == 80 kPa", True},
		{"total_pressure_pa / back_pressure_pa == 180 %", True},
		{"channel.p_oil / 100 kPa == 2.5", True},
		{"channel.p_oil > 1 bar + 50 kPa", True},
		{"channel.p_oil == 500 kPa / 2", True},
		{"channel.p_oil == 2 * 125 kPa", True},
		{"npr * back_pressure_pa == 180 kPa", True},
		{"max(channel.p_oil, 300 kPa) == 3 bar", True},
		{"min(300 kPa, channel.p_oil) == 2.5 bar", True},
		{"abs(channel.p_oil - 300 kPa) == 50 kPa", True},
		{"-channel.p_oil < -2 bar", True},
		{"(choke_armed ? channel.p_oil : 3 bar) == 2.5 bar", True},
		{"channel.p_oil / 1000 == 250", True},
	}
	for _, tt := range tests {
		c, fault := compileExpression(tt.src, names, indexOf(names))
		if fault != nil {
			t.Errorf("%s: %+v", tt.src, *fault)
			continue
		}
		if got := c.truth(f, 0); got != tt.want {
			t.Errorf("%s: %v, want %v", tt.src, got, tt.want)
		}
	}
}

func TestRefusedUnits(t *testing.T) {
	names := testNames()
	tests := []struct {
		src     string
		column  int
		message string
		hint    string
	}{
		{"channel.p_oil < 700 degC", 17, "700 degC is a temperature, compared is a pressure", "such as Pa"},
		{"700 degC > channel.p_oil", 1, "700 degC is a temperature", "Pa"},
		{"lit and\n egt_indicated_k > 5 kPa", 28, "5 kPa is a pressure, compared is a temperature", "K"},
		{"egt_spread_k > 5 kPa", 16, "compared is a temperature difference", "difference"},
		{"npr > 5 kPa", 7, "compared is a ratio", "ratio"},
		{"egt_indicated_k > 700 degc", 23, `unknown unit "degc"`, "degC"},
		{"egt_indicated_k > 5 °X and lit", 21, "unknown unit", ""},
		{"speed_rate_rpm_s > 5 rpm", 20, "compared is a rate of frequency", "rpm/s"},
		{"speed_rpm > 5 rpm/s", 13, "is a rate of", "rpm"},
		{"channel.p_oil / 1000 < 30 kPa", 24, "meets a plain number", "takes the unit away"},
		{"egt_indicated_k - 273.15 > 700 degC", 28, "meets a plain number", "takes the unit away"},
		{"(egt_hottest_k + egt_coldest_k) / 2 > 700 degC", 39, "meets a plain number", ""},
		{"5 > 3 kPa", 5, "meets a plain number", ""},
		{"egt_indicated_k + 20 degC > 900", 1, "sum of two temperatures", "in K"},
		{"egt_spread_k - egt_indicated_k > 3", 16, "are not the same", ""},
		{"700 degC - 20 K > egt_indicated_k", 1, "two written temperatures", "result"},
		{"channel.p_oil > egt_indicated_k", 17, "are not the same", "like with like"},
		{"channel.p_oil + egt_indicated_k > 3", 17, "are not the same", ""},
		{"choke_margin_percent > npr", 24, "one side is in %, the other in plain numbers", "unit"},
		{"mass_flow_kg_s * 5 s > 3", 1, "product with a number that has a unit", ""},
		{"2 * 700 degC > egt_indicated_k", 1, "product", ""},
		{"max(channel.p_oil, 5 K) > 3", 20, "5 K is a temperature", ""},
		{"max(channel.p_oil, egt_indicated_k) > 3", 20, "are not the same", ""},
		{"(lit ? channel.p_oil : npr) > 3", 24, "are not the same", ""},

		{"channel.p_oil > 901 kPa", 17, "channel.p_oil never comes to 901000 Pa", "between 0 and 900000 Pa"},
		{"channel.p_oil < -1", 17, "never comes to -1 Pa", ""},
		{"lit or 1 MPa < channel.p_oil", 8, "never comes to", ""},
		{"channel.p_oil + 1 bar < 50 kPa", 25, "never comes to 50000", ""},
		{"npr > 3 and npr < 2", 13, "never be true together", "or"},
		{"npr > 2 and lit and 2 > npr", 21, "never be true together", "or"},
		{`phase == "idle" and (lit and phase == "steady")`, 22, "of phase", "or"},
	}
	for _, tt := range tests {
		_, fault := compileExpression(tt.src, names, indexOf(names))
		switch {
		case fault == nil:
			t.Errorf("%s: taken", tt.src)
		case !strings.Contains(fault.message, tt.message), !strings.Contains(fault.hint, tt.hint), runeColumn(tt.src, fault.offset) != tt.column:
			t.Errorf("%s: at %d %q, hint %q", tt.src, runeColumn(tt.src, fault.offset), fault.message, fault.hint)
		}
	}
}

func runeColumn(src string, offset int) int { return len([]rune(src[:offset])) + 1 }

// What can be true must not be refused.
func TestPossible(t *testing.T) {
	names := testNames()
	for _, src := range []string{
		"npr > 2 and npr < 3", "npr >= 2 and npr <= 2", "npr > 3 or npr < 2", "not (npr > 3) and npr < 2", "npr > 2 and choke_npr < 2",
		`phase == "idle" or phase == "steady"`, `phase != "idle" and phase == "steady"`, "channel.p_oil > 900 kPa", `phase == "off" and "off" == phase`,
		`choke_state != "choked" and npr > 5 and lit`, `choke_armed and "5 kPax" != "y"`,
	} {
		if _, fault := compileExpression(src, names, indexOf(names)); fault != nil {
			t.Errorf("%s: %+v", src, *fault)
		}
	}
}

func TestDeadbandUnit(t *testing.T) {
	tests := []struct {
		when     string
		deadband float64
		unit     string
		want     float64 // in the unit of the quantity
		message  string
	}{
		{"channel.p_oil < 30 kPa", 5, "kPa", 5000, ""},
		{"channel.p_oil < 30 kPa", 5, "", 5, ""},
		{"egt_indicated_k > 700 degC", 9, "degF", 5, ""}, // a difference: 9 °F = 5 K
		{"egt_spread_k > 60", 5, "K", 5, ""},
		{"choke_margin_percent < 0", 0.5, "%", 0.5, ""},
		{"speed_rate_rpm_s < 50", 1200, "rpm/min", 20, ""},
		{"channel.p_oil < 30 kPa", 5, "K", 0, "deadband 5 K, compared is a pressure"},
		{"channel.p_oil < 30 kPa and npr > 2", 5, "kPa", 0, "not every comparison"},
		{"channel.p_oil / 2 < 30", 5, "kPa", 0, "not every comparison"},
		{"lit", 5, "kPa", 0, "without a comparison"},
	}
	for _, tt := range tests {
		r := simple("x", tt.when)
		r.Deadband, r.DeadbandUnit = tt.deadband, tt.unit
		set, faults := Compile([]Rule{r}, testNames())
		switch {
		case tt.message != "" && (len(faults) != 1 || faults[0].Field != "deadband" || !strings.Contains(faults[0].Message, tt.message)):
			t.Errorf("%s ± %g %s: %+v", tt.when, tt.deadband, tt.unit, faults)
		case tt.message == "" && (set == nil || set.rules[0].deadband != tt.want):
			t.Errorf("%s ± %g %s: %+v", tt.when, tt.deadband, tt.unit, faults)
		}
	}
}

func TestSuppressedWhereItCouldBeTrue(t *testing.T) {
	r := simple("x", `phase == "idle" and npr > 2`)
	for _, tt := range []struct {
		phases []monitor.Phase
		faults int
	}{{[]monitor.Phase{monitor.Off}, 0}, {[]monitor.Phase{monitor.Off, monitor.Idle}, 1}} {
		r.SuppressIn = tt.phases
		if _, faults := Compile([]Rule{r}, testNames()); len(faults) != tt.faults {
			t.Errorf("suppressed in %v: %+v", tt.phases, faults)
		}
	}
}
