package main

import (
	"encoding/json"
	"maps"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// otherRig writes the example rig with one text replaced.
func otherRig(t *testing.T, old, new string) string {
	t.Helper()
	text, err := os.ReadFile(rehearseRig)
	if err != nil {
		t.Fatal(err)
	}
	if strings.Count(string(text), old) != 1 {
		t.Fatalf("%q is %d times in the rig file", old, strings.Count(string(text), old))
	}
	path := filepath.Join(t.TempDir(), "other.yaml")
	if err := os.WriteFile(path, []byte(strings.Replace(string(text), old, new, 1)), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// reduceBy reduces a run and gives the result.
func reduceBy(t *testing.T, dir, id, rig string) (v reducedJSON) {
	t.Helper()
	code, stdout, stderr := invoke(t, "reduce", id, "--data", dir, "--rig", rig, "--json", "--by", "C. Vega", "--note", "corrected")
	if err := json.Unmarshal([]byte(stdout), &v); code != 0 || err != nil {
		t.Fatalf("reduce: exit code %d, %v: %s%s", code, err, stdout, stderr)
	}
	return v
}

// means gives the quantities of a choked stretch of a run.
func means(t *testing.T, dir, id string, more ...string) map[string]float64 {
	t.Helper()
	code, stdout, stderr := invoke(t, append([]string{"points", id, "--data", dir, "--stretch", "105s..115s", "--format", "json"}, more...)...)
	var v struct {
		Points []struct {
			Values []struct {
				Name  string
				Value *float64
			}
		}
	}
	if err := json.Unmarshal([]byte(stdout), &v); code != 0 || err != nil || len(v.Points) != 1 {
		t.Fatalf("points: exit code %d, %v: %s%s", code, err, stdout, stderr)
	}
	out := map[string]float64{}
	for _, q := range v.Points[0].Values {
		out[q.Name] = *q.Value
	}
	return out
}

// Stepped through its own configuration a run gives itself, bit for bit, as a child that
// stands beside it and is verified like it.
func TestReduceWithoutChange(t *testing.T) {
	dir, id := aTest(t)
	before := storedRuns(t, dir)[0]
	for n, want := range []string{id + "-r1", id + "-r2"} {
		v := reduceBy(t, dir, id, rehearseRig)
		if v.Run != want || v.Parent != id || !v.Same || v.Digest != before.Digest || v.Digest == "" || v.ConfigHash != before.ConfigHash {
			t.Fatalf("reduction %d: %+v", n+1, v)
		}
	}
	list := storedRuns(t, dir)
	if len(list) != 3 || list[0].ID != id || list[1].ID != id+"-r1" || list[2].ID != id+"-r2" {
		t.Fatalf("%+v", list)
	}
	if list[0].Digest != before.Digest || list[0].SizeBytes != before.SizeBytes || list[0].Parent != "" {
		t.Errorf("the parent has changed: %+v", list[0])
	}
	if c := list[1]; c.Parent != id || c.ParentDigest != before.Digest || c.ReducedBy != "C. Vega" || c.Notes != "corrected" ||
		c.Started != before.Started || *c.Ended != *before.Ended || c.State != "ended" || c.Alarms != before.Alarms || c.AreaDrift != nil {
		t.Errorf("%+v", c)
	}
	// A child of a child is one too, and a watch goes on behind the records, not the children.
	if v := reduceBy(t, dir, id+"-r1", rehearseRig); v.Run != id+"-r1-r1" || !v.Same {
		t.Errorf("%+v", v)
	}
	if code, stdout, stderr := invoke(t, "verify", "--all", "--data", dir); code != 0 || strings.Count(stdout, "the digest is that recorded live") != 4 {
		t.Errorf("verify: exit code %d: %s%s", code, stdout, stderr)
	}
	if code, _, stderr := invoke(t, "rehearse", rehearseRig, "--into", dir, "--start", "2026-03-03T09:00:00Z", "--quick"); code != 0 {
		t.Errorf("rehearse again: %s", stderr)
	}
	if list := storedRuns(t, dir); len(list) != 5 || list[0].Number != before.Number+1 || list[1].ID != id {
		t.Errorf("after another run: %+v", list)
	}
}

// By W8 = Cd A8 φ p0/√(R T0) another throat area moves the flow by the ratio of the areas;
// NPR stays to the bit. The fuel-air ratio follows the flow, which moves R and φ a little.
func TestReduceByArea(t *testing.T) {
	dir, id := aTest(t)
	rig := otherRig(t, "throat_area: 0.0250 m2", "throat_area: 0.0255 m2")
	v := reduceBy(t, dir, id, rig)
	if v.Same || v.ConfigHash == "" {
		t.Errorf("%+v", v)
	}
	was, is := means(t, dir, id), means(t, dir, v.Run)
	if by := means(t, dir, id, "--rig", rig); !maps.Equal(by, is) {
		t.Errorf("points by the other rig file %v, of the reduction %v", by, is)
	}
	if n := len(storedRuns(t, dir)); n != 2 {
		t.Errorf("%d runs are stored", n)
	}
	for _, name := range []string{"npr", "rake_pressure_pa", "back_pressure_pa", "egt_indicated_k", "air_flow_kg_s", "referred_speed_rpm"} {
		if was[name] != is[name] || was[name] == 0 {
			t.Errorf("%s moved from %v to %v", name, was[name], is[name])
		}
	}
	if got, want := is["mass_flow_kg_s"]/was["mass_flow_kg_s"], 0.0255/0.0250; math.Abs(got/want-1) > 5e-4 {
		t.Errorf("W8 moved by %.6f, the area by %.6f", got, want)
	}
	if moved := is["effective_area_m2"]/was["effective_area_m2"] - 1; math.Abs(moved) > 5e-4 {
		t.Errorf("the effective area, which is measured without the nozzle, moved by %g", moved)
	}
}

// A correction of the rake's calibration by 1 kPa moves p7 by 1 kPa, and
// NPR = 0.994 p7/pb with the duct loss of 0.6 %.
func TestReduceByCalibration(t *testing.T) {
	dir, id := aTest(t)
	rig := otherRig(t, "  - id: p7_1\n", "  - id: p7_1\n    calibration: {polynomial: [1, 1]}\n")
	v := reduceBy(t, dir, id, rig)
	was, is := means(t, dir, id), means(t, dir, v.Run)
	if moved := is["rake_pressure_pa"] - was["rake_pressure_pa"]; math.Abs(moved-1000) > 0.1 {
		t.Errorf("p7 moved by %g Pa", moved)
	}
	if moved, want := is["npr"]-was["npr"], 0.994*1000/was["back_pressure_pa"]; math.Abs(moved-want) > 1e-6 {
		t.Errorf("NPR moved by %.7f, by hand %.7f", moved, want)
	}
}

func TestReduceRefuses(t *testing.T) {
	dir := t.TempDir()
	id := rehearsed(t, dir)
	for _, tt := range []struct {
		args []string
		code int
		want string
	}{
		{[]string{"reduce", id, "--data", dir}, 2, "give one run, and --rig, --swaps or --zero"},
		{[]string{"reduce", id, "--data", dir, "--swaps"}, 1, "no calibration was entered with a swap"},
		{[]string{"reduce", id, "--data", dir, "--zero", "before"}, 1, "no check before the run is stored with it"},
		{[]string{"reduce", id, "--data", dir, "--zero", "middle"}, 1, "give before, after or interpolated"},
		{[]string{"reduce", id, "--data", dir, "--rig", "no-such.yaml"}, 1, "no-such.yaml"},
		{[]string{"reduce", "none", "--data", dir, "--rig", rehearseRig}, 1, "none"},
		{[]string{"reduce", id, "--data", dir, "--rig", otherRig(t, "  id: cell_2\n", "  id: cell_3\n")}, 1, `the configuration of rig "cell_3"`},
		{[]string{"reduce", id, "--data", dir, "--rig", otherRig(t, "  - id: speed\n", "  - id: speed\n    calibration: {scale: 0.001}\n")}, 1, "no run begins"},
	} {
		if code, _, stderr := invoke(t, tt.args...); code != tt.code || !strings.Contains(stderr, tt.want) {
			t.Errorf("%v: exit code %d, %q", tt.args, code, stderr)
		}
	}
	if list := storedRuns(t, dir); len(list) != 1 {
		t.Errorf("%d runs are left", len(list))
	}
	if left, _ := filepath.Glob(filepath.Join(dir, "reduction-*")); len(left) > 0 {
		t.Errorf("%v is left", left)
	}
}
