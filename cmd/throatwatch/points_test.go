package main

import (
	"encoding/csv"
	"encoding/json"
	"strings"
	"testing"
)

// aTest gives a data folder with one run of a whole test, and the id of the run.
func aTest(t *testing.T) (dir, id string) {
	t.Helper()
	dir = t.TempDir()
	code, _, stderr := invoke(t, "rehearse", rehearseRig, "--into", dir, "--start", "2026-03-02T09:00:00Z", "--seed", "7", "--rate", "10")
	if code != 0 {
		t.Fatalf("rehearse: exit code %d: %s", code, stderr)
	}
	return dir, storedRuns(t, dir)[0].ID
}

func TestPointsCommand(t *testing.T) {
	dir, id := aTest(t)
	code, stdout, stderr := invoke(t, "points", id, "--data", dir)
	for _, want := range []string{"Point 1", "of the run, from 2026-03-02 09:0", "npr", "effective_area_m2 [m²]", "referred_egt_k [K]", "U95 is both together"} {
		if !strings.Contains(stdout, want) {
			t.Errorf("%q is not in\n%s", want, stdout)
		}
	}
	if code != 0 || stderr != "" {
		t.Fatalf("exit code %d, %q", code, stderr)
	}
	code, stdout, _ = invoke(t, "points", id, "--data", dir, "--stretch", "60s..90s", "--stretch", "2026-03-02T09:01:40Z..2026-03-02T09:02:00Z", "--format", "csv")
	rows, err := csv.NewReader(strings.NewReader(stdout)).ReadAll()
	if code != 0 || err != nil || len(rows) != 3 || rows[0][8] != "npr" || rows[2][2] != "2026-03-02T09:01:40Z" || rows[1][4] != "60" {
		t.Errorf("exit code %d, %v: %q", code, err, rows)
	}
	code, stdout, _ = invoke(t, "points", id, "--data", dir, "--format", "json", "--least", "5s")
	var v struct {
		Points []struct {
			Values []struct {
				Name  string
				Value *float64
				U95   *float64
			}
		}
	}
	if err := json.Unmarshal([]byte(stdout), &v); code != 0 || err != nil || len(v.Points) == 0 || v.Points[0].Values[0].Name != "npr" || v.Points[0].Values[0].U95 == nil {
		t.Errorf("exit code %d, %v: %s", code, err, stdout)
	}
	for _, args := range [][]string{{"points"}, {"points", id, "--data", dir, "--at", "noon"}, {"points", id, "--data", dir, "--stretch", "9"}, {"points", id, "--format", "xml"}} {
		if code, _, stderr := invoke(t, args...); code != 2 || stderr == "" {
			t.Errorf("%v: exit code %d, %q", args, code, stderr)
		}
	}
}

// People are told times in the zone of the facility, with the offset; inside, and in JSON,
// all is UTC. The computation does not know the zone.
func TestFacilityTime(t *testing.T) {
	dir := t.TempDir()
	rig := otherRig(t, "time_zone: Etc/UTC", "time_zone: Asia/Kolkata") // UTC + 5:30 all year, IANA tz database
	code, _, stderr := invoke(t, "rehearse", rig, "--into", dir, "--start", "2026-03-02T09:00:00Z", "--quick")
	if code != 0 {
		t.Fatal(stderr)
	}
	run := storedRuns(t, dir)[0]
	if run.TimeZone != "Asia/Kolkata" || !strings.HasPrefix(run.Started, "2026-03-02T09:0") || !strings.HasSuffix(run.Started, "Z") {
		t.Errorf("%+v", run)
	}
	for _, tt := range []struct {
		args []string
		want []string
	}{
		{[]string{"runs"}, []string{"STARTED (FACILITY)", "2026-03-02 14:30:", " +05:30"}},
		{[]string{"points", run.ID, "--stretch", "5s..15s"}, []string{"from 2026-03-02 14:30:", " +05:30"}},
		{[]string{"figures", run.ID}, []string{"2026-03-02 14:30:", " +05:30 Asia/Kolkata"}},
	} {
		_, stdout, stderr := invoke(t, append(tt.args, "--data", dir)...)
		for _, want := range tt.want {
			if !strings.Contains(stdout, want) {
				t.Errorf("%v: %q is not in %s%s", tt.args, want, stdout, stderr)
			}
		}
	}
}
