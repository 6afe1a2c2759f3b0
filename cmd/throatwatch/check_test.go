package main

import (
	"bytes"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"unicode/utf8"
)

const (
	exampleRig = "../../testdata/rigs/example.yaml"
	minimalRig = "../../testdata/rigs/minimal.yaml"
	badRig     = "../../testdata/config/bad/bands.yaml"
)

func runCheck(t *testing.T, args ...string) (code int, stdout, stderr string) {
	t.Helper()
	var out, errs bytes.Buffer
	code = checkCommand(args, &out, &errs)
	return code, out.String(), errs.String()
}

func TestCheckExitCodes(t *testing.T) {
	for _, tt := range []struct {
		name string
		args []string
		want int
		out  string // somewhere on standard output
		errs string // somewhere on standard error
	}{
		{"good", []string{exampleRig}, 0, "0 faults\n", ""},
		{"smallest", []string{minimalRig}, 0, "3 channels", ""},
		{"bad", []string{badRig}, 1, " faults\n", ""},
		{"bad as JSON", []string{"--json", badRig}, 1, `"faults": [`, ""},
		{"no such file", []string{"none.yaml"}, 1, `there is no file "none.yaml"`, ""},
		{"a folder", []string{"../../testdata"}, 1, "is no file", ""},
		{"no argument", nil, 2, "", "throatwatch check RIG.yaml"},
		{"two arguments", []string{exampleRig, minimalRig}, 2, "", "throatwatch check RIG.yaml"},
		{"unknown flag", []string{"--jason", exampleRig}, 2, "", "unknown flag"},
		{"help", []string{"--help"}, 0, "", "throatwatch check RIG.yaml"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			code, out, errs := runCheck(t, tt.args...)
			if code != tt.want {
				t.Errorf("exit code %d, want %d", code, tt.want)
			}
			if !strings.Contains(out, tt.out) || !strings.Contains(errs, tt.errs) {
				t.Errorf("standard output:\n%s\nstandard error:\n%s", out, errs)
			}
			if strings.Contains(strings.ToLower(out), "ready") {
				t.Error("a check of files calls something ready")
			}
		})
	}
}

// An operator reads it on a terminal of 120 columns, and the last line keeps the
// check from being taken for more than it is.
func TestCheckFitsTheTerminal(t *testing.T) {
	for _, rig := range []string{exampleRig, minimalRig, badRig, "../../testdata/config/bad/rules.yaml"} {
		_, out, _ := runCheck(t, rig)
		lines := strings.Split(strings.TrimSuffix(out, "\n"), "\n")
		for i, line := range lines {
			// The line of a fault is one piece, for tools that jump to it.
			if n := utf8.RuneCountInString(line); n > checkWidth && !strings.Contains(line, ".yaml:") {
				t.Errorf("%s: line %d has %d columns: %s", rig, i+1, n, line)
			}
		}
		if last := lines[len(lines)-1]; last != checkClosing {
			t.Errorf("%s: last line %q", rig, last)
		}
	}
}

func TestCheckTables(t *testing.T) {
	_, out, _ := runCheck(t, exampleRig)
	for _, want := range []string{
		// As written in the example rig file.
		"p7_1             kPa   gauge p_baro         -10 … 250",
		"dp_cell          Pa    differential p_baro",
		"run_max   always      720 °C  5 s        60 s     715 °C            2 s",
		"start     until idle  700 °C  3 s",
		"run_over  always      760 °C  none",
		"p7                   p7_1 p7_2 p7_3 p7_4 (at least 3 of 4)",
		"throat 25000 mm² at 20 °C",
		"limits ML5-LIM-C",
		"WARNING   Rotor speed above 22600 rpm",
		"Follow facility procedure EP-11, rotor over-speed.",
		"bleed flow           0.4 % ± 0.2 % of the air flow",
		// √(1.5² + (1.96 · 0.0075 · 1100/√3)² + 0.8²) K = 9.5 K [JCGM 100 4.3.7], IEC 60584-1
		"t7_1             degC  –                    -40 … 1100    ± 9.5",
		// √((0.05 % of 260)² + (0.05 % of 250)² + 0.15²) kPa = 0.234 kPa
		"± 0.23",
	} {
		if !strings.Contains(out, want) {
			t.Errorf("not shown: %s", want)
		}
	}
	_, out, _ = runCheck(t, minimalRig)
	for _, want := range []string{
		"no uncertainty is stated for p_jet, t_jet, p_room.",
		"Back pressure from barometer",
		"The probability of choked flow stays unknown",
		"No exhaust temperature is watched",
	} {
		if !strings.Contains(strings.Join(strings.Fields(out), " "), want) {
			t.Errorf("smallest rig: not noted: %s", want)
		}
	}
}

// A thermocouple that its class does not cover over the whole range is noted, and its U95
// is not made up; class 1 of type K ends at 1000 °C (IEC 60584-1).
func TestCheckThermocouple(t *testing.T) {
	text, err := os.ReadFile(exampleRig)
	if err != nil {
		t.Fatal(err)
	}
	rig := filepath.Join(t.TempDir(), "rig.yaml")
	if err := os.WriteFile(rig, bytes.Replace(text, []byte("thermocouple: K, class: 2"), []byte("thermocouple: K, class: 1"), 1), 0o600); err != nil {
		t.Fatal(err)
	}
	_, out, _ := runCheck(t, rig)
	for _, want := range []string{
		"t7_4             degC  –                    -40 … 1100    none there",
		"t7_1 has no U95 outside -40 to 1000 °C, for which a thermocouple of type K, class 1 has a",
	} {
		if !strings.Contains(out, want) {
			t.Errorf("not shown: %s", want)
		}
	}
	if _, out, _ := runCheck(t, "--json", rig); !json.Valid([]byte(out)) {
		t.Errorf("no JSON: %s", out)
	}
}

func TestCheckJSON(t *testing.T) {
	_, out, _ := runCheck(t, "--json", exampleRig)
	var report checkReport
	if err := json.Unmarshal([]byte(out), &report); err != nil {
		t.Fatal(err)
	}
	if len(report.Faults) != 0 || len(report.Channels) != 42 || len(report.Bands) != 3 || len(report.Hash) != 64 {
		t.Errorf("%d faults, %d channels, %d bands, hash %q", len(report.Faults), len(report.Channels), len(report.Bands), report.Hash)
	}
	if report.Clearance != checkClosing {
		t.Errorf("clearance %q", report.Clearance)
	}
	for _, c := range report.Channels {
		if c.ID == "p7_1" && (c.Low != -10e3 || c.High != 250e3 || c.Reference != "gauge p_baro" || c.U95 == nil) {
			t.Errorf("p7_1: %+v", c)
		}
	}

	_, out, _ = runCheck(t, "--json", badRig)
	report = checkReport{}
	if err := json.Unmarshal([]byte(out), &report); err != nil {
		t.Fatal(err)
	}
	if len(report.Faults) == 0 || report.Hash != "" {
		t.Errorf("%d faults, hash %q", len(report.Faults), report.Hash)
	}
	for _, f := range report.Faults {
		if f.File == "" || f.Line == 0 || f.Message == "" || f.Hint == "" {
			t.Errorf("incomplete fault: %+v", f)
		}
	}
}

// A fault names the file as a person on the command line sees it.
func TestCheckFaultNamesTheFile(t *testing.T) {
	_, out, _ := runCheck(t, badRig)
	first, _, _ := strings.Cut(out, ":")
	if _, err := os.Stat(first); err != nil {
		t.Errorf("the first fault names %q: %v", first, err)
	}
}
