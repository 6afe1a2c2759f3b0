package rules

import (
	"bytes"
	"encoding/gob"
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"reflect"
	"strings"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/unit"
	"throatwatch/rules/alarm"
)

func simple(name, when string) Rule {
	return Rule{Name: name, When: when, Priority: Caution, Title: name, Text: name + " {npr:.2}"}
}

func TestStandardNames(t *testing.T) {
	names := StandardNames(testChannels()[:1], []string{"run_1"})
	if want := int(monitor.NumQuantities) + 39 + 4 + 4; len(names) != want {
		t.Errorf("%d names, want %d", len(names), want)
	}
	ix := indexOf(names)
	if len(ix) != len(names) {
		t.Error("a name is there twice")
	}
	for _, want := range []Name{
		{Name: "channel.p_oil", Type: Number, Unit: "Pa", Dimension: unit.Pressure, High: 900e3},
		{Name: "usable.p_oil", Type: Bool},
		{Name: "egt.run_1.exceeded", Type: Bool},
		{Name: "health.recording", Type: Bool, Daemon: true},
		{Name: "run_active", Type: Bool, Daemon: true},
	} {
		if slot, ok := ix[want.Name]; !ok || !reflect.DeepEqual(names[slot], want) {
			t.Errorf("%s: %+v", want.Name, names[slot])
		}
	}
	again := StandardNames(testChannels()[:1], []string{"run_1"})
	if !reflect.DeepEqual(names, again) {
		t.Error("the order is not fixed")
	}
}

func TestCompileGivesEveryFault(t *testing.T) {
	rules := []Rule{
		{Name: "Good", When: "npr > 1", Priority: Note},
		{Name: "a", When: "nrp > 1", Priority: Note, Text: "{npr:furlong.1}"},
		{Name: "a", When: "lit", Priority: 9, OnDelay: -1, OffDelay: -1, Deadband: 2, SuppressIn: []monitor.Phase{monitor.PhaseUnknown}},
		{Name: "b", When: "npr > 1", Priority: Warning, Deadband: -1},
		{Name: "c", When: "lit", Priority: Caution, WorsenBy: 1, Unknown: Doubt{Priority: Warning, After: -1}},
		{Name: "d", When: "npr > 1", Priority: Caution, WorsenBy: -1, Value: "phase", Unknown: Doubt{Priority: 9}},
		{Name: "e", When: "npr > 1", Priority: Caution, Value: "nrp", Unknown: Doubt{Priority: Advisory}},
		{Name: "e_unknown", When: "npr > 1", Priority: Caution, Unknown: Doubt{After: second}},
	}
	_, faults := Compile(rules, testNames())
	var got []string
	for _, f := range faults {
		got = append(got, rules[f.Rule].Name+" "+f.Field)
		if f.Message == "" || f.Hint == "" {
			t.Errorf("%+v says too little", f)
		}
	}
	want := []string{
		"Good name", "a when", "a text", "a name", "a priority", "a on_delay", "a off_delay", "a deadband", "a suppress_in", "b deadband",
		"c unknown", "c worsen_by", "d unknown", "d value", "d worsen_by", "e unknown", "e value", "e_unknown unknown",
	}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("got %q\nwant %q", got, want)
	}
}

func TestSetTellsWhatItReads(t *testing.T) {
	set, _ := Compile([]Rule{simple("a", "choke_armed and npr < choke_npr and npr > 1")}, testNames())
	if got := set.Reads(0); !reflect.DeepEqual(got, []string{"choke_armed", "npr", "choke_npr", "npr"}) || set.Len() != 1 || set.Rule(0).Name != "a" {
		t.Errorf("reads %q", got)
	}
}

func TestDomains(t *testing.T) {
	for when, want := range map[string]Domain{
		"not health.recording":               OfDaemon,
		"sources_lost > 0 and run_active":    OfDaemon,
		"data_age_s > 3 or clock_skew_s > 1": OfDaemon,
		"not health.recording and lit":       OfData,
		"npr > 1":                            OfData,
		"true":                               OfData,
		"usable.p_oil and not health.clock":  OfData,
	} {
		set, faults := Compile([]Rule{simple("a", when)}, testNames())
		if len(faults) > 0 || set.rules[0].domain != want {
			t.Errorf("%s: domain %v, faults %v", when, set.rules[0].domain, faults)
		}
	}
}

func TestTemplates(t *testing.T) {
	names := testNames()
	f := fill(t, names, map[string]any{
		"egt_indicated_k": 993.15, "egt_spread_k": 12.5, "choke_margin_percent": -2.346, "speed_rpm": 19500, "speed_rate_rpm_s": 12.34,
		"mass_flow_kg_s": 7.25, "back_pressure_pa": 98700, "npr": 1.8644, "egt.run_1.elapsed_s": 3.24, "channel.p_oil": 350e3,
		"choke_armed": true, "egt.run_1.over": false, "choke_state": "no_flow", "phase": "unknown", "choke_margin_pa": -0.04, "egt_probes_lost": 2,
		"gas_constant_j_kg_k": 287.4,
	})
	tests := []struct{ src, want string }{ // conversions: 0 degC = 273.15 K, 1 lb = 0.45359237 kg, 1 psi = 6894.757 Pa, 1 degF = 5/9 K
		{"plain", "plain"},
		{"", ""},
		{"T {egt_indicated_k:degC.0}.", "T 720 °C."},
		{"{egt_indicated_k:.0}|{egt_indicated_k:K.2}|{egt_indicated_k:degF.0}", "993 K|993.15 K|1328 °F"},
		{"{egt_spread_k:degC.1} {egt_spread_k:degF.1}", "12.5 °C 22.5 °F"}, // a difference has no offset
		{"{choke_margin_percent:%.1} {choke_margin_percent:1.3}", "-2.3 % -0.023"},
		{"{speed_rpm:.0} {speed_rpm:1/s.0} {speed_rate_rpm_s:.1}", "19500 rpm 325 1/s 12.3 rpm/s"},
		{"{mass_flow_kg_s:lb/s.3} {back_pressure_pa:kPa.2} {back_pressure_pa:psi.3}", "15.984 lb/s 98.70 kPa 14.315 psi"},
		{"{npr:.2} {npr}", "1.86 1.8644"},
		{"{egt.run_1.elapsed_s:s.1} {egt.run_1.elapsed_s:ms.0}", "3.2 s 3240 ms"},
		{"{channel.p_oil:kPa.0} {channel.p_oil}", "350 kPa 350000 Pa"},
		{"{speed_rate_rpm_s:rpm/min.0} {speed_rate_rpm_s:.1}", "740 rpm/min 12.3 rpm/s"},
		{"{choke_armed} {egt.run_1.over} {lit} {choke_state} {phase}", "yes no unknown no flow unknown"},
		{"{flow_balance_kg_s:.1}", "(unknown)"},
		{"{choke_margin_pa:.1}|{choke_margin_pa:.2}", "0.0 Pa|-0.04 Pa"}, // no minus before a zero
		{"{egt_probes_lost:.0} lost", "2 lost"},
		{"{gas_constant_j_kg_k:.1}", "287.4 J/(kg K)"},
	}
	for _, tt := range tests {
		tpl, fault := parseTemplate(tt.src, names, indexOf(names))
		if fault != nil {
			t.Errorf("%s: %+v", tt.src, *fault)
			continue
		}
		if got := string(tpl.append(nil, f)); got != tt.want {
			t.Errorf("%s: got %q, want %q", tt.src, got, tt.want)
		}
	}
}

func TestRefusedTemplates(t *testing.T) {
	names := testNames()
	tests := []struct {
		src     string
		offset  int
		message string
	}{
		{"a {npr", 2, "brace"},
		{"a npr}", 5, "brace"},
		{"{npr {npr}", 0, "brace"},
		{"x {nrp:.1}", 3, "unknown name"},
		{"{}", 1, "unknown name"},
		{"{npr:}", 5, "without a number of digits"},
		{"{npr:kPa}", 5, "without a number of digits"},
		{"{npr:.12}", 5, "without a number of digits"},
		{"{npr:kPa.1}", 5, "pressure"},
		{"{egt_indicated_k:kPa.1}", 17, "pressure"},
		{"{channel.p_oil:furlong.1}", 15, "unknown unit"},
		{"{gas_constant_j_kg_k:kJ.1}", 21, "does not convert"},
		{"{speed_rate_rpm_s:K/s.1}", 18, "unknown unit"},
		{"{lit:.1}", 5, "has no unit"},
	}
	for _, tt := range tests {
		_, fault := parseTemplate(tt.src, names, indexOf(names))
		if fault == nil || fault.offset != tt.offset || !strings.Contains(fault.message, tt.message) || fault.hint == "" {
			t.Errorf("%s: %+v", tt.src, fault)
		}
	}
}

func FuzzTemplate(f *testing.F) {
	names := testNames()
	ix := indexOf(names)
	for _, s := range []string{"{npr:.1}", "{egt_indicated_k:degC.0} {", "}{", "{phase}{lit}", "{channel.p_oil:kPa.3}", "{:.}", "{npr:é.1}"} {
		f.Add(s, -0.01)
	}
	f.Fuzz(func(t *testing.T, src string, v float64) {
		tpl, fault := parseTemplate(src, names, ix)
		if fault != nil {
			if fault.offset < 0 || fault.offset > len(src) {
				t.Fatalf("%q: %+v", src, *fault)
			}
			return
		}
		frame := NewFrame(names)
		for i := range frame.Numbers {
			frame.Numbers[i] = v
		}
		tpl.append(nil, &frame)
	})
}

func TestCheckText(t *testing.T) {
	tests := []struct {
		text string
		bad  string // the words that are refused, "" = none
	}{
		{"Indicated EGT above 720 °C for 3 s (limit 5 s). Follow the facility's procedure. This display is not protection.", ""},
		{"EGT rise after shutdown. Facility procedure for over-temperature.", ""},
		{"Facility safety procedures come first.", ""},
		{"Watch fuel flow, rotor speed and indicated EGT.", ""},
		{"Fuel flow of 5 kg/h for 10 s of cranking without a flame.", ""},
		{"Unburnt fuel may gather in the exhaust and light late.", ""},
		{"Back pressure from the barometer.", ""},
		{"Throttle position channel lost.", ""},
		{"Reduce throttle at once.", "Reduce throttle"},
		{"Then retard the power lever", "retard the power"},
		{"please SHUT DOWN", "SHUT DOWN"},
		{"throttle back to idle", "throttle back"},
		{"cut the fuel", "cut the fuel"},
		{"Close the main fuel valve.", "Close the main fuel"},
		{"Stop the engine.", "Stop the engine"},
		{"Abort.", "Abort"},
		{"The engine is safe.", "safe"},
		{"All OK", "OK"},
		{"Ready to start", "Ready"},
		{"Cleared for take", "Cleared for"},
		{"No danger", "No danger"},
	}
	for _, tt := range tests {
		err := CheckText(tt.text)
		var te *TextError
		switch {
		case tt.bad == "" && err != nil:
			t.Errorf("%q: %v", tt.text, err)
		case tt.bad == "":
		case !errors.As(err, &te) || te.Words != tt.bad || te.Offset != strings.Index(tt.text, tt.bad):
			t.Errorf("%q: got %v, want %q refused", tt.text, err, tt.bad)
		}
	}
}

func TestDefaultRules(t *testing.T) {
	all := testDefault()
	newStand(t, all) // compiles
	warnings := map[string]bool{}
	for _, r := range all {
		for field, text := range map[string]string{"title": r.Title, "text": r.Text, "caution": r.Caution, "response": r.Response} {
			if text == "" {
				t.Errorf("%s has no %s", r.Name, field)
			}
			if err := CheckText(text); err != nil {
				t.Errorf("%s: %s: %v", r.Name, field, err)
			}
		}
		if r.Priority == Warning {
			warnings[r.Name] = true
		}
		if r.Priority >= Caution && !strings.Contains(strings.ToLower(r.Text), "procedure") {
			t.Errorf("%s names no procedure: %s", r.Name, r.Text)
		}
		if !strings.Contains(strings.ToLower(r.Response), "procedure") {
			t.Errorf("%s: response %q", r.Name, r.Response)
		}
	}
	// The warnings of the design's default set and a fire after a shutdown, no other.
	want := map[string]bool{
		"egt_run_1_exceeded": true, "egt_run_2_exceeded": true, "egt_start_exceeded": true,
		"egt_lost": true, "not_recording": true, "input_path_deaf": true, "egt_rise": true,
	}
	if !reflect.DeepEqual(warnings, want) {
		t.Errorf("warnings %v, want %v", warnings, want)
	}
	// Without equipment nothing is ruled on that is not there.
	for _, r := range Default(Equipment{}) {
		for _, word := range []string{"egt", "rake", "fuel", "flow_balance"} {
			if strings.Contains(r.When, word) {
				t.Errorf("bare rig: %s reads %s", r.Name, r.When)
			}
		}
	}
	newStand(t, Default(Equipment{Bands: []egt.Band{}}))
}

func TestIDsAndGroups(t *testing.T) {
	a, b := simple("a", "npr > 1"), simple("b", "npr > 2")
	a.Group, b.Group = "g", "g"
	s := newStand(t, []Rule{a, b})
	s.put("npr", "1.5")
	s.to(0, true)
	s.put("npr", "2.5")
	s.to(second, true)
	if len(s.seen) != 2 {
		t.Fatalf("%d transitions", len(s.seen))
	}
	first, then := s.seen[0], s.seen[1]
	if first.ID != "run-1/a/1800000000000000000" || !first.FirstOut {
		t.Errorf("first: %+v", first)
	}
	if then.ID != "run-1/b/1800000000050000000" || then.FirstOut {
		t.Errorf("then: %+v", then)
	}
	// Returned and not acknowledged, it is raised again as the same alarm;
	// acknowledged and normal, as another one.
	s.put("npr", "0")
	s.to(2*second, true)
	s.put("npr", "1.5")
	s.to(3*second, true)
	last := s.seen[len(s.seen)-1]
	if last.ID != first.ID || last.State != AlarmState(alarm.Unacknowledged) || last.Raised != first.Raised {
		t.Errorf("again: %+v", last)
	}
	if _, err := s.set.Act(&s.st, epoch+s.next, Action{Do: DoAcknowledge, Alarm: last.ID, Revision: last.Revision, By: "Mara"}); err != nil {
		t.Fatal(err)
	}
	s.put("npr", "0")
	s.to(4*second, true)
	s.run = ""
	s.put("npr", "1.5")
	s.to(5*second, true)
	if last = s.last("a"); !strings.HasPrefix(last.ID, "-/a/") || last.AcknowledgedBy != "" {
		t.Errorf("anew: %+v", last)
	}
}

// One lost publisher is one alarm; what it takes along is listed under it, and a
// warning stands for itself.
func TestFirstOutOfDefaults(t *testing.T) {
	s := newStand(t, testDefault())
	for _, v := range []string{
		"lit=true", "choke_armed=true", "choke_state=choked", "egt_indicated_k=900", "egt_probes_lost=0", "rake_probes_lost=0",
		"sources_lost=0", "health.input_path=true", "phase=steady",
	} {
		name, value, _ := strings.Cut(v, "=")
		s.put(name, value)
	}
	s.put("egt.run_1.over", "true")
	s.to(second, true)
	s.put("egt.run_1.exceeded", "true")
	s.to(second+scan, true)
	if len(s.seen) != 3 || !s.seen[0].FirstOut || !s.seen[1].FirstOut || s.seen[1].Rule != "egt_run_1_exceeded" || s.seen[1].Under != "" {
		t.Errorf("a warning is listed under a caution: %+v", s.seen)
	}
	if now := s.last("egt_run_1_over"); now.Under != Ref(s.seen[1].ID) || now.Revision != 2 {
		t.Errorf("the caution of the same cause: %+v", now)
	}
	s.put("egt.run_1.over", "false")
	s.put("egt.run_1.exceeded", "false")
	s.to(2*second, true)
	s.seen = nil
	for _, v := range []string{"choke_state=?", "egt_indicated_k=?", "egt_probes_lost=8", "rake_probes_lost=4", "sources_lost=1"} {
		name, value, _ := strings.Cut(v, "=")
		s.put(name, value)
	}
	s.to(7*second, true)
	got := map[string]bool{}
	for _, a := range s.seen {
		got[a.Rule] = a.FirstOut
		head := Ref("")
		if !a.FirstOut {
			head = Ref(s.last("source_lost").ID)
		}
		if a.Under != head {
			t.Errorf("%s is listed under %q", a.Rule, a.Under)
		}
	}
	want := map[string]bool{"source_lost": true, "egt_lost": true, "choke_unknown": false, "egt_probe_lost": false, "rake_probe_lost": false}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("got %v, want %v", got, want)
	}
}

func TestValueAndPeak(t *testing.T) {
	r := simple("low", "npr < 2")
	r.Deadband = 0.1
	s := newStand(t, []Rule{r})
	for _, v := range []string{"1.9", "1.2", "?", "1.5", "2.5"} {
		s.put("npr", v)
		s.to(s.next, true)
	}
	raised, returned := s.seen[0], s.seen[1]
	if raised.Value != reading(1.9) || raised.Text != "low 1.90" {
		t.Errorf("raised: %+v", raised)
	}
	if returned.Peak != reading(1.2) || returned.Text != "low 1.90" {
		t.Errorf("returned: %+v", returned)
	}
}

// A value that the condition compares with nothing gets worse upward, or downward
// where the rule says so.
func TestDownward(t *testing.T) {
	for _, tt := range []struct {
		name, when string
		downward   bool
		want       float64
	}{
		{"nothing tells", `choke_state == "unchoked"`, false, 7},
		{"the rule tells", `choke_state == "unchoked"`, true, -9},
		{"another value is compared", "npr > 1", true, -9},
		{"the comparison tells", "choke_margin_percent < 20", false, -9},
		{"the comparison tells, whatever the rule says", "choke_margin_percent > -20", true, 7},
	} {
		r := simple("r", tt.when)
		r.Value, r.Downward = "choke_margin_percent", tt.downward
		s := newStand(t, []Rule{r})
		s.put("npr", "2")
		s.put("choke_state", "unchoked")
		for _, v := range []string{"3", "-9", "7"} {
			s.put("choke_margin_percent", v)
			s.to(s.next, true)
		}
		if got := s.st.Instances[0].Peak; got != reading(tt.want) {
			t.Errorf("%s: peak %+v, want %g", tt.name, got, tt.want)
		}
	}
}

func TestActErrors(t *testing.T) {
	s := newStand(t, []Rule{simple("a", "npr > 1")})
	s.put("npr", "2")
	s.to(0, true)
	id, rev := s.seen[0].ID, s.seen[0].Revision
	tests := []struct {
		name string
		a    Action
		want error
	}{
		{"no such rule", Action{Do: DoAcknowledge, Alarm: "run-1/b/5", Revision: rev}, ErrNotFound},
		{"no id at all", Action{Do: DoAcknowledge, Alarm: ""}, ErrNotFound},
		{"an earlier occurrence", Action{Do: DoAcknowledge, Alarm: "run-1/a/5", Revision: rev}, ErrMovedOn},
		{"another revision", Action{Do: DoAcknowledge, Alarm: id, Revision: rev - 1}, ErrMovedOn},
		{"reset of what does not latch", Action{Do: DoReset, Alarm: id, Revision: rev}, ErrRefused},
		{"no action", Action{Do: "silence", Alarm: id, Revision: rev}, ErrRefused},
	}
	for _, tt := range tests {
		before := s.st.Instances[0]
		if _, err := s.set.Act(&s.st, epoch, tt.a); !errors.Is(err, tt.want) || s.st.Instances[0] != before {
			t.Errorf("%s: %v", tt.name, err)
		}
	}
	got, err := s.set.Act(&s.st, epoch+7, Action{Do: DoAcknowledge, Alarm: id, Revision: rev, By: "Mara"})
	if err != nil || got.State != AlarmState(alarm.Acknowledged) || got.AcknowledgedBy != "Mara" || int64(got.AcknowledgedAt) != epoch+7 || got.Revision != rev+1 {
		t.Errorf("acknowledged: %+v, %v", got, err)
	}
	if _, err := s.set.Act(&s.st, epoch+8, Action{Do: DoAcknowledge, Alarm: id, Revision: rev, By: "Lena"}); !errors.Is(err, ErrMovedOn) {
		t.Errorf("the second of two: %v", err)
	}
}

func TestReload(t *testing.T) {
	s := newStand(t, []Rule{simple("gone", "npr > 1"), simple("kept", "npr > 1"), simple("quiet", "npr > 9")})
	s.put("npr", "2")
	s.to(0, true)
	kept := *s.instance("kept")
	set, faults := Compile([]Rule{simple("new", "npr > 1"), simple("kept", "npr > 1.5")}, s.names)
	if faults != nil {
		t.Fatal(faults)
	}
	set.Fit(&s.st)
	s.set, s.seen = set, nil
	if *s.instance("kept") != kept {
		t.Errorf("kept: %+v, was %+v", *s.instance("kept"), kept)
	}
	s.to(s.next, true)
	if len(s.seen) != 2 || s.seen[0].Rule != "gone" || s.seen[0].State != AlarmState(alarm.Normal) || s.seen[1].Rule != "new" {
		t.Fatalf("told: %+v", s.seen)
	}
	s.to(s.next, true)
	if len(s.seen) != 2 {
		t.Errorf("told twice: %+v", s.seen)
	}
}

// What an operator did outlives a restart: shelving ends when it was to end.
func TestStateSurvivesRestart(t *testing.T) {
	latching := simple("latching", "npr > 1")
	latching.Latching = true
	s := newStand(t, []Rule{simple("shelved", "npr > 1"), simple("acknowledged", "npr > 1"), latching, simple("repaired", "npr > 1"), simple("unseen", "npr > 1")})
	s.put("npr", "2")
	s.to(second, true)
	act := func(a Action) {
		t.Helper()
		a.Revision, a.By = s.instance(a.Alarm).Revision, "Mara"
		if _, err := s.set.Act(&s.st, epoch+s.next, a); err != nil {
			t.Fatal(err)
		}
	}
	act(Action{Do: DoShelve, Alarm: "shelved", Reason: "loose cable", For: 10 * second})
	act(Action{Do: DoAcknowledge, Alarm: "acknowledged"})
	act(Action{Do: DoAcknowledge, Alarm: "latching"})
	act(Action{Do: DoOutOfService, Alarm: "repaired", Reason: "cable", Role: "engineer", Phase: monitor.Off})
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(&s.st); err != nil {
		t.Fatal(err)
	}
	before := s.st
	s.st = State{}
	if err := gob.NewDecoder(&b).Decode(&s.st); err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(s.st, before) {
		t.Fatalf("restored %+v\nwas %+v", s.st, before)
	}
	s.seen = nil
	want := func(states ...alarm.State) {
		t.Helper()
		for i, state := range states {
			if in := &s.st.Instances[i]; in.State != state {
				t.Errorf("%s is %v, want %v", in.Rule, in.State, state)
			}
		}
	}
	s.to(11*second, true) // shelved just behind the scan at 1 s
	want(alarm.Shelved, alarm.Acknowledged, alarm.Acknowledged, alarm.OutOfService, alarm.Unacknowledged)
	if len(s.seen) != 0 {
		t.Errorf("told anew: %+v", s.seen)
	}
	s.to(11*second+scan, true)
	want(alarm.Unacknowledged)
	s.put("npr", "0")
	s.to(12*second, true)
	want(alarm.ReturnedUnacknowledged, alarm.Normal, alarm.LatchedAcknowledged, alarm.OutOfService, alarm.ReturnedUnacknowledged)
}

func TestUnknownRulesAndStanding(t *testing.T) {
	s := newStand(t, []Rule{simple("a", "npr > 1"), simple("b", "speed_rpm > 1"), simple("c", "lit")})
	s.put("npr", "2")
	s.to(3*second, true)
	if n := s.set.Unknown(&s.st); n != 2 || !reflect.DeepEqual(s.set.UnknownRules(&s.st), []string{"b", "c"}) {
		t.Errorf("%d unknown: %q", n, s.set.UnknownRules(&s.st))
	}
	if st := s.set.Standing(&s.st, nil); len(st) != 1 || st[0].Rule != "a" {
		t.Errorf("standing: %+v", st)
	}
	if _, err := s.set.Act(&s.st, epoch, Action{Do: "out-of-service", Alarm: "b", Role: "engineer", Reason: "no pickup", Phase: monitor.Off}); err != nil {
		t.Fatal(err)
	}
	if n := s.set.Unknown(&s.st); n != 1 {
		t.Errorf("%d unknown with one out of service", n)
	}
}

// TestRandomLife drives the default rules with random inputs, actions and
// restarts from the encoded state: the states agree, alarms are never told
// without a change, and nothing panics. The seed makes it repeatable.
func TestRandomLife(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	s := newStand(t, testDefault())
	var twin State
	last := map[string]uint64{}
	for range 20000 {
		for range 3 {
			slot := r.IntN(len(s.names))
			switch n := &s.names[slot]; n.Type {
			case Number:
				s.f.Numbers[slot] = []float64{math.NaN(), 0, -5, 0.01, 1000, 5}[r.IntN(6)]
			case Bool:
				s.f.Bools[slot] = Tri(r.IntN(3) - 1)
			case Text:
				s.f.Texts[slot] = append([]string{""}, n.Values...)[r.IntN(len(n.Values)+1)]
			}
		}
		s.phase = monitor.Phase(r.IntN(int(monitor.NumPhases)))
		s.seen = s.seen[:0]
		s.to(s.next, true)
		other := s.set.Step(&twin, epoch+s.next-scan, s.run, s.phase, OfData, &s.f, nil)
		other = s.set.Step(&twin, epoch+s.next-scan, s.run, monitor.PhaseUnknown, OfDaemon, &s.f, other)
		if len(other) != len(s.seen) {
			t.Fatalf("%d transitions, the restarted one %d", len(s.seen), len(other))
		}
		for _, a := range s.seen {
			if a.Revision != last[a.Rule]+1 || a.ID == "" || a.Text == "" {
				t.Fatalf("after revision %d: %+v", last[a.Rule], a)
			}
			last[a.Rule] = a.Revision
		}
		if r.IntN(4) == 0 {
			a := Action{
				Do: []string{DoAcknowledge, DoReset, DoShelve, DoUnshelve, DoOutOfService, DoInService}[r.IntN(6)], Role: "engineer",
				Alarm: s.st.Instances[r.IntN(len(s.st.Instances))].Rule, Reason: "test", For: second * int64(1+r.IntN(9)), Phase: s.phase,
			}
			a.Revision = s.instance(a.Alarm).Revision
			x, err := s.set.Act(&s.st, epoch+s.next, a)
			y, err2 := s.set.Act(&twin, epoch+s.next, a)
			if x != y || (err == nil) != (err2 == nil) {
				t.Fatalf("%+v: %v, %v", a, err, err2)
			}
			if err == nil {
				last[a.Alarm] = x.Revision
			}
		}
		if r.IntN(100) == 0 {
			var b bytes.Buffer
			if err := gob.NewEncoder(&b).Encode(&s.st); err != nil {
				t.Fatal(err)
			}
			twin = State{}
			if err := gob.NewDecoder(&b).Decode(&twin); err != nil {
				t.Fatal(err)
			}
		}
		if !reflect.DeepEqual(s.st, twin) {
			t.Fatal("the states differ")
		}
	}
	if len(last) < len(s.st.Instances)*3/4 {
		t.Errorf("only %d of %d rules ever changed", len(last), len(s.st.Instances))
	}
}

func TestAlarmJSON(t *testing.T) {
	// Keys and forms are those of the frame contract.
	a := Alarm{
		ID: "r/unchoke/5", Rule: "unchoke", Title: "T", Text: "X", Priority: Caution, State: AlarmState(alarm.Shelved),
		Raised: 1_800_000_000_000_000_001, Changed: 1_800_000_000_500_000_000, Revision: 3, Caution: "C", Response: "R",
		Value: reading(-2.5), Unit: "%", Dimension: "ratio", Under: "r/choke_unknown/4", AcknowledgedBy: "Mara", AsideBy: "Mara", Reason: "noise", Until: 1_800_000_600_000_000_000,
		Past: true, FirstOut: true, Group: "nozzle", Unknown: true,
	}
	b, err := json.Marshal(a)
	if err != nil {
		t.Fatal(err)
	}
	want := `{"id":"r/unchoke/5","rule":"unchoke","title":"T","text":"X","priority":"caution","state":"shelved",` +
		`"raised":"2027-01-15T08:00:00.000000001Z","changed":"2027-01-15T08:00:00.5Z","revision":3,"caution":"C","response":"R",` +
		`"value":-2.5,"peak":null,"unit":"%","dimension":"ratio","acknowledged_by":"Mara","acknowledged_at":null,"aside_by":"Mara","reason":"noise",` +
		`"until":"2027-01-15T08:10:00Z","past":true,"first_out":true,"group":"nozzle","under":"r/choke_unknown/4","unknown":true}`
	if string(b) != want {
		t.Errorf("got\n%s\nwant\n%s", b, want)
	}
	var back Alarm
	if err := json.Unmarshal(b, &back); err != nil || back != a {
		t.Errorf("back: %+v, %v", back, err)
	}
	if err := json.Unmarshal([]byte(`{"under":null}`), &back); err != nil || back.Under != "" {
		t.Errorf("under none: %q, %v", back.Under, err)
	}
	for _, bad := range []string{`{"state":"x"}`, `{"priority":"x"}`, `{"raised":"x"}`, `{"value":"x"}`, `{"under":5}`} {
		if json.Unmarshal([]byte(bad), &back) == nil {
			t.Errorf("%s: taken", bad)
		}
	}
}
