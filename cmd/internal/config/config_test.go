package config

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"testing"

	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const (
	example = "../../../testdata/rigs/example.yaml"
	minimal = "../../../testdata/rigs/minimal.yaml"
	options = "../../../testdata/config/good/options.yaml"
)

// load gives the configuration of a rig file that must have no fault.
func load(t *testing.T, name string) (Bundle, pipeline.Config) {
	t.Helper()
	b, cfg, faults := Load(name)
	for _, f := range faults {
		t.Error(f)
	}
	if len(faults) > 0 {
		t.FailNow()
	}
	return b, cfg
}

func channelOf(t *testing.T, cfg *pipeline.Config, id string) *compute.Channel {
	t.Helper()
	i := slices.IndexFunc(cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == id })
	if i < 0 {
		t.Fatalf("no channel %q", id)
	}
	return &cfg.Compute.Channels[i]
}

func ruleOf(t *testing.T, cfg *pipeline.Config, name string) *rules.Rule {
	t.Helper()
	i := slices.IndexFunc(cfg.Rules, func(r rules.Rule) bool { return r.Name == name })
	if i < 0 {
		t.Fatalf("no rule %q", name)
	}
	return &cfg.Rules[i]
}

// The numbers of the files arrive in SI.
func TestValues(t *testing.T) {
	_, ex := load(t, example)
	_, op := load(t, options)
	_, mi := load(t, minimal)
	const (
		inch = 0.0254                             // m, exact
		psi  = 0.45359237 * 9.80665 / inch / inch // Pa, exact
		f    = 5.0 / 9                            // K per degree Fahrenheit
		fill = "default of this package"
		conv = "converted by hand from the rig file with the exact factors of NIST SP 811"
		file = "as the rig file says"
	)
	z, pt, tc := &op.Compute.Nozzle, channelOf(t, &op, "pt_a"), channelOf(t, &op, "egt_mean")
	for _, tt := range []struct {
		name      string
		got, want float64
		tolerance float64 // relative
		source    string
	}{
		{"example: period", float64(ex.Align.Period), 50e6, 0, "20 per second"},
		{"example: lateness", float64(ex.Align.Lateness), 120e6, 0, file},
		{"example: throat area", ex.Compute.Nozzle.ThroatArea, 0.025, 0, file},
		{"example: area uncertainty", ex.Compute.Nozzle.AreaU95, 0.002, 1e-15, file},
		{"example: duct loss", ex.Compute.Nozzle.DuctLoss, 0.006, 1e-15, file},
		{"example: reference temperature", ex.Compute.Nozzle.ReferenceTemperature, 293.15, 1e-15, conv},
		{"example: expansion", ex.Compute.Nozzle.ExpansionCoefficient, 15e-6, 1e-15, file},
		{"example: metal lag", float64(ex.Compute.Nozzle.MetalLag), 20e9, 0, file},
		{"example: no flow below", ex.Compute.Nozzle.ResolutionFloor, 0.003, 1e-15, file},
		{"example: hysteresis, percent", ex.Compute.Nozzle.Hysteresis, 0.5, 1e-15, file},
		{"example: armed above", ex.Compute.Nozzle.ArmedAboveRPM, 19500, 0, file},
		{"example: max speed", ex.Compute.Phase.Max, 22000, 0, file},
		{"example: idle", ex.Compute.Phase.Idle, 9500, 0, file},
		{"example: move rate", ex.Compute.Phase.MoveRate, 150, 1e-12, file},
		{"example: lit above", ex.Compute.Phase.LitEGT, 473.15, 1e-15, conv},
		{"example: run limit", ex.Compute.EGT.Bands[1].Limit, 993.15, 1e-15, conv},
		{"example: run allowance", float64(ex.Compute.EGT.Bands[1].Allowance), 5e9, 0, file},
		{"example: oil at 12 mA", convert(t, &ex, "p_oil", 12), 340e3, 1e-15, "45·12 − 200 kPa"},
		{"example: thrust at 5 mV", convert(t, &ex, "thrust", 5), 2000, 1e-15, "8 kN · 5/20"},
		{"example: EGT rate", channelOf(t, &ex, "egt_1").MaxRate, 800, 0, file},
		{"example: rake step", channelOf(t, &ex, "p7_4").Step, 0.005, 1e-12, "inherited, in kPa as it is sent"},
		{"options: period", float64(op.Align.Period), 20e6, 0, "50 per second"},
		{"options: throat area", z.ThroatArea, 38.75 * inch * inch, 1e-12, conv},
		{"options: exit area", z.ExitArea, 48 * inch * inch, 1e-12, conv},
		{"options: choke NPR", z.ChokeNPR, 1.91, 0, file},
		{"options: its uncertainty", z.ChokeNPRU95, 0.003, 1e-15, file},
		{"options: gas constant", op.Compute.GasR, 287.4, 0, file},
		{"options: trim", op.Compute.Stations.EGTTrim, -9 * f, 1e-15, conv},
		{"options: factor", op.Compute.Stations.T7FromEGT, 1.02, 0, file},
		{"options: run limit", op.Compute.EGT.Bands[0].Limit, 720 + 273.15, 1e-12, "1328 °F = 720 °C"},
		{"options: peak per run", float64(op.Compute.EGT.Bands[1].PerRun), 60e9, 0, file},
		{"options: armed above", op.Compute.Nozzle.ArmedAboveRPM, 18000, 0, "300 Hz"},
		{"options: idle band", op.Compute.Phase.IdleBand, 400, 1e-12, fill + ": 5 % of idle"},
		{"options: transmitter at 12 mA", convert(t, &op, "pt_a", 12), 15 * psi, 1e-12, "half way from −1 to 31 psi"},
		{"options: transmitter, top", pt.High, 31 * psi, 1e-12, conv},
		{"options: transmitter, random", pt.Uncertainty.Random, 0.01 * psi, 1e-12, conv},
		{"options: transmitter, rate", pt.MaxRate, 20 * psi, 1e-12, conv},
		{"options: transmitter, step", pt.Step, 2, 1e-12, "in mA as it is sent"},
		{"options: EGT at 700 °C sent", convert(t, &op, "egt_mean", 700), 973.15, 1e-12, "700 °C"},
		{"options: EGT rate", tc.MaxRate, 500, 1e-12, "900 °F/s"},
		{"options: speed at 18000 sent", convert(t, &op, "n1", 18000), 300, 1e-12, "18 000/min = 300 Hz"},
		{"options: barometer, QNH of the standard atmosphere", convert(t, &op, "p_sea", 1013.25), 95460.8, 1e-6, "ISO 2533:1975 table 1, 500 m"},
		{"smallest: throat area", mi.Compute.Nozzle.ThroatArea, 50.3e-4, 1e-15, conv},
		{"smallest: period", float64(mi.Align.Period), 50e6, 0, fill},
		{"smallest: hold", float64(mi.Align.Channels[0].Hold), 1e9, 0, fill},
		{"smallest: end of run", float64(mi.Run.EndAfter), 120e9, 0, fill},
	} {
		if !(math.Abs(tt.got-tt.want) <= tt.tolerance*math.Abs(tt.want)) {
			t.Errorf("%s: %v, want %v (%s)", tt.name, tt.got, tt.want, tt.source)
		}
	}
}

func convert(t *testing.T, cfg *pipeline.Config, id string, raw float64) float64 {
	t.Helper()
	v, q := channelOf(t, cfg, id).Convert(raw)
	if q != monitor.QualityGood {
		t.Errorf("%s: %g is %s", id, raw, q)
	}
	return v
}

// The words of the files arrive as what they mean.
func TestMeanings(t *testing.T) {
	_, ex := load(t, example)
	_, op := load(t, options)
	_, mi := load(t, minimal)
	id := func(cfg *pipeline.Config, i int) string {
		if i < 0 {
			return ""
		}
		return cfg.Compute.Channels[i].ID
	}
	site := ruleOf(t, &op, "unchoke")
	oil := ruleOf(t, &ex, "p_oil_below_warning")
	for _, tt := range []struct {
		name      string
		got, want any
	}{
		{"example: channels", len(ex.Compute.Channels), 42},
		{"example: rig", ex.Rig, pipeline.RigInfo{
			ID: "cell_2", Title: "Alder Bank cell 2", EngineModel: "Merle 5", EngineSerial: "ML5-0042", EngineBuild: "7",
			NozzleSerial: "NZ-0311", LimitsVersion: "ML5-LIM-C", TimeZone: "Etc/UTC",
			NozzleMeasured: "2026-03-02", Test: "T-114", Purpose: "Choke margin of nozzle NZ-0311",
			Fuel: pipeline.Fuel{
				Batch: "AB-2026-007", Density: rules.Reading{V: 803, Known: true},
				HeatingValue: rules.Reading{V: 43.1e6, Known: true}, HydrogenToCarbon: rules.Reading{V: 1.917, Known: true},
			},
		}},
		{"example: series of run numbers", ex.Run.Series, "ML5-0042/7/T-114/{run}"},
		{"example: digits of run numbers", ex.Run.Width, 3},
		{"example: the heat balance takes the heating value of the batch", ex.Compute.Heat.HeatingValue, 43.1e6},
		{"example: a fuel of the gas that is stated stays", ex.Compute.Fuel, gas.Kerosene()},
		{"example: cool-down", [2]int64{ex.Compute.EGT.Limits.CoolFuelOff, ex.Compute.EGT.Limits.CoolRest}, [2]int64{120e9, 60e9}},
		{"example: starts in an hour", ex.Compute.EGT.Limits.StarterRuns, 6},
		{"smallest: no series of run numbers", mi.Run.Series, ""},
		{"example: inputs of the rig's own topics", ex.Align.Inputs[3].Filter, "rigs/cell_2/channels/+"},
		{"example: their format", ex.Align.Inputs[3].Format, decode.Value},
		{"example: rake", len(ex.Compute.Stations.P7), 4},
		{"example: rake needs", ex.Compute.Stations.MinP7, 3},
		{"example: harness needs", ex.Compute.Stations.MinEGT, 6},
		{"example: last EGT probe", id(&ex, ex.Compute.Stations.EGT[7]), "egt_8"},
		{"example: exit plane", id(&ex, ex.Compute.Stations.ExitPlane), "p_exit"},
		{"smallest: no T7 factor", mi.Compute.Stations.T7FromEGT, 0.0},
		{"example: rake is gauge", channelOf(t, &ex, "p7_3").Reference, calib.Gauge},
		{"example: against", id(&ex, channelOf(t, &ex, "p7_3").Port), "p_baro"},
		{"example: cell is differential", channelOf(t, &ex, "dp_cell").Reference, calib.Differential},
		{"example: own title beside like:", channelOf(t, &ex, "p7_3").Title, "Nozzle entry total pressure, probe 3"},
		{"example: codes by like:", channelOf(t, &ex, "egt_5").Codes, []float64{1372, -9999}},
		{"example: name in messages", ex.Align.Channels[0].Name, "p_baro"},
		{"example: cold area", ex.Compute.Nozzle.AreaBasis, nozzle.AreaCold},
		{"example: table", ex.Compute.Nozzle.Discharge[4], nozzle.Point{NPR: 1.8, Value: 0.97}},
		{"example: station of tables", ex.Compute.Nozzle.CoefficientStation, 8},
		{"example: start band", ex.Compute.EGT.Bands[0].Kind, egt.KindStart},
		{"example: a channel that nothing judges", channelOf(t, &ex, "t_fuel").RecordedOnly, true},
		{"example: a channel with a limit", channelOf(t, &ex, "vibration_rear").RecordedOnly, false},
		{"example: the barometer is a reference", channelOf(t, &ex, "p_baro").RecordedOnly, false},
		{"example: a gauge limit is a gauge pressure", oil.When, "channel.p_oil - channel.p_baro < 30000"},
		{"example: suppressed at rest", slices.Contains(oil.SuppressIn, monitor.Off), true},
		{"example: limits of like:", ruleOf(t, &ex, "vibration_rear_above_caution").Title, "Vibration, rear bearing above 18 mm/s"},

		{"example: a procedure of the facility", ruleOf(t, &ex, "egt_run_max_exceeded").Response, "Follow facility procedure EP-10 for over-temperature."},
		{"smallest: one that nobody has named", ruleOf(t, &mi, "not_recording").Response, "Follow facility procedure ___ for lost recording."},
		{"example: who changed the limits", ex.Change, pipeline.Change{
			Engineer: "Mara Lindqvist", Approver: "Tomas Eklund", Date: "2026-02-20", Note: "Limits document ML5-LIM-C",
		}},

		{"options: perfect gas", op.Compute.Gamma, 1.33},
		{"options: fuel", op.Compute.Fuel.Hydrogen, 22.0},
		{"options: kind", op.Compute.Nozzle.Kind, nozzle.ConvergentDivergent},
		{"options: hot area", op.Compute.Nozzle.AreaBasis, nozzle.AreaHot},
		{"options: thrust basis", op.Compute.Nozzle.Basis, nozzle.FullyExpanded},
		{"options: one coefficient", op.Compute.Nozzle.Discharge, []nozzle.Point{{NPR: 1, Value: 0.97}}},
		{"options: wired in parallel", op.Compute.Stations.EGTParallel, true},
		{"options: no rake", len(op.Compute.Stations.T7), 0},
		{"options: barometer is absolute", channelOf(t, &op, "p_sea").Reference, calib.Absolute},
		{"options: name from the topic", op.Align.Channels[0].Name, "qnh"},
		{"options: name as written", op.Align.Channels[2].Name, "PT-2"},
		{"options: raw unit of points", op.Align.Channels[2].Raw.Name, "mA"},
		{"options: hold of its own", op.Align.Channels[2].Hold, int64(300e6)},
		{"options: one code", channelOf(t, &op, "egt_mean").Codes, []float64{-9999}},
		{"options: site rule in place of the default", site.Priority, rules.Warning},
		{"options: over several lines", site.When, "choke_armed\n  and choke_margin_percent < 0"},
		{"options: on-delay", site.OnDelay, int64(250e6)},
		{"options: off-delay", site.OffDelay, int64(1500e6)},
		{"options: deadband", site.Deadband, 0.5},
		{"options: latching", site.Latching, true},
		{"options: suppressed", site.SuppressIn, []monitor.Phase{monitor.Off, monitor.Cranking, monitor.Lighting}},
		{"options: default rules stay", ruleOf(t, &op, "not_recording").Priority, rules.Warning},
		{"options: derived", op.Derived, []rules.Derived{
			{Name: "egt_slope", Kind: rules.DeriveRate, Of: "egt_indicated_k", Over: 2e9, Period: 20e6},
			{Name: "rake_noise", Kind: rules.DeriveStdev, Of: "channel.pt_a", Over: 5e9, Period: 20e6},
			{Name: "margin_mean", Kind: rules.DeriveMean, Of: "choke_margin_percent", Over: 60e9, Period: 20e6},
			{Name: "rake_apart_for", Kind: rules.DeriveSince, Of: "abs(channel.pt_a - channel.pt_b) > 5 kPa\n  and lit", Period: 20e6},
			{Name: "lights", Kind: rules.DeriveCount, Of: "lit", Over: 60e9, Period: 20e6},
		}},
		{"options: deadband with a unit", ruleOf(t, &op, "rake_disagrees").DeadbandUnit, "Pa"},
		{"options: another site rule", ruleOf(t, &op, "rake_disagrees").Title, "rake disagrees"},

		{"smallest: no EGT", len(mi.Compute.Stations.EGT), 0},
		{"smallest: no exit plane", mi.Compute.Stations.ExitPlane, -1},
		{"smallest: no speed", mi.Compute.Stations.Speed, -1},
		{"smallest: uncertainty not stated", channelOf(t, &mi, "p_jet").Uncertainty.Stated, false},
		{"smallest: title", mi.Rig.Title, "bench_1"},
		{"smallest: topic", mi.Align.Channels[0].Topic, "plant/north/bench/PT-101"},
		{"smallest: name", mi.Align.Channels[0].Name, "PT-101"},
	} {
		if !reflect.DeepEqual(tt.got, tt.want) {
			t.Errorf("%s: %v, want %v", tt.name, tt.got, tt.want)
		}
	}
}

// What is odd and yet usable is told with its place.
func TestWarnings(t *testing.T) {
	for name, want := range map[string][]string{
		example: nil,
		minimal: {"minimal.yaml:1:1: change: limits and rules are not approved", "minimal.yaml:1:1: procedures: no procedure is named for "},
		options: {
			"options.yaml:1:1: change: limits", "options.yaml:1:1: procedures: no procedure is named for ",
			"options.yaml:60:12: derive[2].name: nothing reads \"margin_mean\"",
		},
	} {
		b, _ := load(t, name)
		var got []string
		for _, w := range b.Warnings {
			got = append(got, strings.TrimPrefix(filepath.ToSlash(w.String()), filepath.ToSlash(filepath.Dir(name))+"/"))
			if w.Hint == "" || w.Line == 0 {
				t.Errorf("%s: incomplete: %+v", name, w)
			}
		}
		if !slices.EqualFunc(got, want, strings.HasPrefix) {
			t.Errorf("%s: warnings %q", name, got)
		}
	}
}

// A run is replayed from its bundle, on another machine, without the files.
func TestBundleGivesTheSameConfig(t *testing.T) {
	for _, name := range []string{example, minimal, options} {
		b, cfg := load(t, name)
		again, faults := Parse(b.Marshal())
		if len(faults) > 0 {
			t.Fatalf("%s: faults of the bundle: %v", name, faults)
		}
		if !reflect.DeepEqual(cfg, again) {
			t.Errorf("%s: the bundle gives another configuration", name)
		}
		if len(cfg.Hash) != 64 {
			t.Errorf("%s: hash %q is no SHA-256", name, cfg.Hash)
		}
	}
}

// The same files in another folder are the same configuration; another text is
// another one.
func TestHash(t *testing.T) {
	_, cfg := load(t, options)
	folder := t.TempDir()
	for _, name := range []string{"options.yaml", "rules/site.yaml"} {
		text, err := os.ReadFile(filepath.Join(filepath.Dir(options), name))
		if err != nil {
			t.Fatal(err)
		}
		if err := os.MkdirAll(filepath.Dir(filepath.Join(folder, name)), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(folder, name), text, 0o644); err != nil {
			t.Fatal(err)
		}
	}
	moved := filepath.Join(folder, "options.yaml")
	if _, other := load(t, moved); other.Hash != cfg.Hash {
		t.Error("the hash depends on the folder")
	}
	site := filepath.Join(folder, "rules", "site.yaml")
	text, err := os.ReadFile(site)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(site, append(text, "# reviewed\n"...), 0o644); err != nil {
		t.Fatal(err)
	}
	if _, other := load(t, moved); other.Hash == cfg.Hash {
		t.Error("the hash does not depend on the rule file")
	}
}

// A file that was saved on Windows reads the same, and its faults show at the
// same lines.
func TestWindowsLineEnds(t *testing.T) {
	windows := func(b Bundle) Bundle {
		out := Bundle{Format: b.Format}
		for _, f := range b.Files {
			out.Files = append(out.Files, File{f.Name, "\ufeff" + strings.ReplaceAll(f.Text, "\n", "\r\n")})
		}
		return out
	}
	for _, name := range []string{example, options} {
		b, want := load(t, name)
		got, faults := Parse(windows(b).Marshal())
		if len(faults) > 0 {
			t.Fatalf("%s: faults %v", name, faults)
		}
		got.Hash = want.Hash
		if !reflect.DeepEqual(got, want) {
			t.Errorf("%s: another configuration", name)
		}
	}
	for _, name := range []string{"keys.yaml", "literal.yaml", "bands.yaml"} {
		b, _, _ := Load(badFiles + name)
		_, want := Parse(b.Marshal())
		_, got := Parse(windows(b).Marshal())
		if !reflect.DeepEqual(got, want) {
			t.Errorf("%s: faults %v, want %v", name, got, want)
		}
	}
}

func TestParseRefusesWhatIsNoBundle(t *testing.T) {
	b, _ := load(t, minimal)
	old, err := json.Marshal(Bundle{Format: "another", Files: b.Files})
	if err != nil {
		t.Fatal(err)
	}
	for _, text := range []string{"", "{}", "rig: {id: x}", `{"format":"throatwatch config 1","files":[]}`, string(old)} {
		if _, faults := Parse([]byte(text)); len(faults) != 1 || faults[0].Hint == "" {
			t.Errorf("%q: faults %v", text, faults)
		}
	}
}

// The default rules of a rig are the same when they come from their text.
func TestRenderedRules(t *testing.T) {
	list := rules.Default(rules.Equipment{
		Limits: egt.Limits{Spread: 90, Rise: 80, StarterOnce: 30e9, StarterHour: 120e9, Rundown: 8e9},
		Bands:  []egt.Band{{Name: "run_max", Kind: egt.KindRun, Limit: 993.15, Allowance: 5e9}},
		EGT:    true, Rake: true, Speed: true, FuelFlow: true, Bellmouth: true,
	})
	list = append(list, rules.Rule{
		Name: "all_fields", When: "npr > 1.5 and \"a\" == 'b' # \\ {", Priority: rules.Advisory, OnDelay: 1, OffDelay: 1234567891, Deadband: 1e-9,
		Value: "npr - choke_npr", WorsenBy: 0.5, Unknown: rules.Doubt{Priority: rules.Caution, After: 1500e6},
		Latching: true, SuppressIn: []monitor.Phase{monitor.Off, monitor.Cooling}, Title: "Ein »Titel«: 5 °C", Text: "<a> & {npr}",
		Caution: "- none", Response: "* none", Group: "nozzle",
	})
	r := &rig{doc: &document{}}
	r.readRules(File{defaultRules, render(list)})
	for _, f := range r.docs[0].faults {
		t.Error(f)
	}
	if len(r.rules) != len(list) {
		t.Fatalf("%d rules, want %d", len(r.rules), len(list))
	}
	for i := range list {
		if !reflect.DeepEqual(r.rules[i].Rule, list[i]) {
			t.Errorf("rule %q comes back as %+v", list[i].Name, r.rules[i].Rule)
		}
	}
}

// The tangent that the calibration uses stays by the formula, and the formula by
// the standard atmosphere.
func TestStationPressure(t *testing.T) {
	for _, tt := range []struct {
		h, want, tolerance float64 // m, Pa, Pa
		source             string
	}{
		{0, 101325, 1e-6, "by definition"},
		{500, 95460.8, 0.1, "ISO 2533:1975 table 1, geopotential"},
		{1000, 89874.6, 0.1, "ISO 2533:1975 table 1, geopotential"},
		{3000, 70108.5, 0.5, "ISO 2533:1975 table 1, geopotential"},
	} {
		if got := stationPressure(seaPressure, tt.h); math.Abs(got-tt.want) > tt.tolerance {
			t.Errorf("%g m: %.2f Pa, want %.2f (%s)", tt.h, got, tt.want, tt.source)
		}
	}
	for h := -500.0; h <= 1000; h += 100 {
		s := calib.Spec{Low: 0, High: 200e3}
		s.Unit.Scale = 1
		toStation(&s, h)
		for q := 95e3; q <= 105e3; q += 1e3 {
			got, _ := s.Convert(q)
			if want := stationPressure(q, h); math.Abs(got-want) > tangentError {
				t.Errorf("QNH %g Pa at %g m: %.2f Pa, want %.2f", q, h, got, want)
			}
		}
	}
}

// A fault says where the file is as seen from where the command was started.
func TestLoadOfWhatIsNotThere(t *testing.T) {
	for _, name := range []string{"none.yaml", "../../../testdata", ""} {
		_, _, faults := Load(name)
		if len(faults) != 1 || faults[0].File != name || faults[0].Hint == "" {
			t.Errorf("%q: faults %v", name, faults)
		}
	}
}

func FuzzLoad(f *testing.F) {
	for _, name := range []string{example, minimal, options} {
		text, err := os.ReadFile(name)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(string(text), "rules: []")
	}
	f.Add("rig: {id: a", "")
	f.Add("a: &a [*a]\n<<: *a", "rules:\n  - name: x\n    when: >\n      a ..\n")
	f.Add("channels:\n  - {id: a, like: a}\n  - {id: b, like: b, reference: {gauge: b}}", "rules: {a: b}")
	f.Add("? [a]\n: {b}\n", "- - -\n...\n---")
	f.Add("nozzle: {throat_area: 1e308 m2, discharge: {table: [[1], 2, [[3]]]}}", "rules:\n- {when: |\n a}")
	f.Fuzz(func(t *testing.T, rigText, ruleText string) {
		b := Bundle{Format: bundleFormat, Files: []File{{"rig.yaml", rigText}, {"rules.yaml", ruleText}}}
		cfg, faults := Parse(b.Marshal())
		if len(faults) == 0 && cfg.Hash == "" {
			t.Error("neither a configuration nor a fault")
		}
		lines := strings.Count(rigText, "\n") + strings.Count(ruleText, "\n") + 2
		for _, f := range faults {
			if f.Line < 1 || f.Column < 1 || f.Line > lines || f.Message == "" || f.Hint == "" {
				t.Errorf("incomplete fault: %+v", f)
			}
		}
		for i := range cfg.Compute.Channels {
			c := &cfg.Compute.Channels[i]
			for _, v := range append([]float64{c.Low, c.High, c.MaxRate, c.Step, c.Uncertainty.Fixed, c.Uncertainty.Random}, c.Polynomial...) {
				if math.IsNaN(v) || math.IsInf(v, 0) {
					t.Errorf("channel %q holds %g", c.ID, v)
				}
			}
		}
	})
}

// FuzzRules reads rule files for a rig that has no fault, so that expressions and
// derived names are compiled. What is taken must compile again as the step does it.
func FuzzRules(f *testing.F) {
	rig, err := os.ReadFile(options)
	if err != nil {
		f.Fatal(err)
	}
	site, err := os.ReadFile(filepath.Join(filepath.Dir(options), "rules/site.yaml"))
	if err != nil {
		f.Fatal(err)
	}
	f.Add(string(site))
	f.Add("derive:\n- {name: a, rate: channel.pt_a, over: 1e9 s}\n- {name: a, since: a > 5 kPa/s}\nrules: []")
	f.Add("derive: [{name: b, max: \"(npr + 5 %) * 3 - 1 kPa\", over: 2 s}]\nrules:\n- {name: x, when: b > 5 °C/min, priority: note, deadband: 5 K/h}")
	f.Add("rules:\n- name: x\n  when: |\n    npr > 5 in and\n      not (known(phase) ? 3 K : .5e3 mil) < -2 % }\n  priority: note\n  text: '{b:K/s.1} {x:.1}'")
	f.Fuzz(func(t *testing.T, text string) {
		b := Bundle{Format: bundleFormat, Files: []File{{"rig.yaml", string(rig)}, {"rules/site.yaml", text}}}
		cfg, faults := Parse(b.Marshal())
		for _, fault := range faults {
			if fault.Line < 1 || fault.Column < 1 || fault.Message == "" || fault.Hint == "" {
				t.Errorf("incomplete fault: %+v", fault)
			}
		}
		if len(faults) > 0 {
			return
		}
		if set, wrong := rules.Compile(cfg.Rules, pipeline.Names(&cfg), cfg.Derived...); set == nil {
			t.Errorf("taken, and then refused: %+v", wrong)
		}
	})
}
