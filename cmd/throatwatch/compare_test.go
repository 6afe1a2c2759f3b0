package main

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

type scansCompared struct {
	By          string
	Same        bool
	Paired      int
	OnlyA       int `json:"only_a"`
	OnlyB       int `json:"only_b"`
	Zero        string
	Differences []struct {
		Name            string
		Mean, RMS, A, B *float64
	}
	Equal  []string
	Alarms []struct {
		Change, Rule string
		AtA          *float64 `json:"a_s"`
		AtB          *float64 `json:"b_s"`
		Moved        *float64 `json:"moved_s"`
	}
	AlarmsSame int `json:"alarms_same"`
}

func compared(t *testing.T, dir string, args ...string) (v scansCompared) {
	t.Helper()
	code, stdout, stderr := invoke(t, append([]string{"compare", "--data", dir, "--json"}, args...)...)
	if err := json.Unmarshal([]byte(stdout), &v); code != 0 || err != nil {
		t.Fatalf("exit code %d, %v: %s%s", code, err, stdout, stderr)
	}
	return v
}

// A channel that reads hotter lets the EGT alarm come earlier: the run and its reduction
// differ by 10 K wherever there is an EGT, and the alarm has moved; limits that are never
// reached let it vanish, and seen from the other side appear.
func TestComparePlantedShift(t *testing.T) {
	dir, id := aTest(t)
	hot := reduceBy(t, dir, id, otherRig(t, "  - id: egt_1\n", "  - id: egt_1\n    calibration: {polynomial: [10, 1]}\n")).Run
	v := compared(t, dir, id, hot)
	moved := 0
	for _, a := range v.Alarms {
		if strings.HasPrefix(a.Rule, "egt") && a.Change == "moves" {
			moved++
			if !(*a.Moved < 0 && *a.Moved > -30) || math.Abs(*a.AtB-*a.AtA-*a.Moved) > 1e-6 {
				t.Errorf("%+v: a hotter reading is earlier", a)
			}
		}
	}
	if v.By != "records" || v.Same || v.OnlyA+v.OnlyB > 0 || v.Paired < 9000 || moved == 0 {
		t.Errorf("by %s, %d pairs, alarms %+v", v.By, v.Paired, v.Alarms)
	}
	found := false
	for _, d := range v.Differences {
		if d.Name == "egt_indicated_k" {
			found = true
			if math.Abs(*d.Mean-10) > 0.5 || math.Abs(*d.B-*d.A-10) > 2 {
				t.Errorf("EGT differs by %g K in the mean, %g and %g where most", *d.Mean, *d.A, *d.B)
			}
		}
	}
	if !found {
		t.Error("EGT does not differ")
	}
	calm := reduceBy(t, dir, id, otherRig(t, "limit: 720 degC, allowance: 5 s", "limit: 990 degC, allowance: 5 s")).Run
	one, other := compared(t, dir, id, calm), compared(t, dir, calm, id)
	if len(one.Alarms) == 0 || len(one.Alarms) != len(other.Alarms) {
		t.Fatalf("%+v and %+v", one.Alarms, other.Alarms)
	}
	for i, a := range one.Alarms {
		if b := other.Alarms[i]; a.Change != "vanishes" || b.Change != "appears" || *a.AtA != *b.AtB || a.AtB != nil {
			t.Errorf("%+v and %+v", a, b)
		}
	}
}

// Two runs of the same test with other noise: by time from light-off they lie over each
// other; along their own curve the second is within the scatter of the first, and a
// reduction by a larger area is not.
func TestCompareRuns(t *testing.T) {
	dir, id := aTest(t)
	code, _, stderr := invoke(t, "rehearse", rehearseRig, "--into", dir, "--start", "2026-03-03T09:00:00Z", "--seed", "8", "--rate", "10")
	if code != 0 {
		t.Fatal(stderr)
	}
	second := storedRuns(t, dir)[0].ID
	v := compared(t, dir, id, second)
	if v.By != "time" || v.Zero != "light-off" || v.Paired < 8000 || len(v.Differences) < 20 {
		t.Errorf("by %s from %s: %d pairs, %d differences", v.By, v.Zero, v.Paired, len(v.Differences))
	}
	larger := reduceBy(t, dir, second, otherRig(t, "throat_area: 0.0250 m2", "throat_area: 0.0275 m2")).Run
	plots := filepath.Join(t.TempDir(), "plots")
	for _, tt := range []struct {
		last   string
		beyond bool
	}{{second, false}, {larger, true}} {
		code, stdout, stderr := invoke(t, "compare", id, tt.last, "--data", dir, "--by", "npr", "--json", "--plots", plots)
		var c struct {
			Curves []struct {
				Y    string
				Bins []struct {
					Value, Departure *float64
					Beyond           bool
				}
			}
			Runs []struct {
				Drift  *float64 `json:"area_drift_percent"`
				Margin *float64 `json:"egt_margin_k"`
			}
		}
		if err := json.Unmarshal([]byte(stdout), &c); code != 0 || err != nil || len(c.Curves) == 0 || len(c.Runs) != 2 {
			t.Fatalf("exit code %d, %v: %s%s", code, err, stdout, stderr)
		}
		bins, beyond := 0, 0
		for _, curve := range c.Curves {
			for _, b := range curve.Bins {
				if curve.Y == "mass_flow_kg_s" && b.Value != nil {
					bins++
					if b.Beyond {
						beyond++
					}
				}
			}
		}
		if bins == 0 || (beyond*2 > bins) != tt.beyond {
			t.Errorf("%s: %d of %d bins beyond", tt.last, beyond, bins)
		}
		if c.Runs[1].Drift == nil || math.Abs(*c.Runs[1].Drift) > 1 || c.Runs[1].Margin == nil {
			t.Errorf("%+v", c.Runs)
		}
	}
	if svg, err := os.ReadFile(filepath.Join(plots, "mass_flow_kg_s.svg")); err != nil || !strings.HasPrefix(string(svg), "<svg") {
		t.Errorf("%.20q, %v", svg, err)
	}
	if code, stdout, _ := invoke(t, "compare", id, second, "--data", dir, "--by", "referred_speed", "--all"); code != 0 || !strings.Contains(stdout, "EGT MARGIN [K]") {
		t.Errorf("exit code %d: %s", code, stdout)
	}
	for _, args := range [][]string{{id}, {id, second, "--by", "noon"}, {id, second, larger}, {id, second, "--by", "mark", "--mark", "nowhere"}} {
		if code, _, stderr := invoke(t, append([]string{"compare", "--data", dir}, args...)...); code != 2 || stderr == "" {
			t.Errorf("%v: exit code %d, %q", args, code, stderr)
		}
	}
}
