package main

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"throatwatch/rules/pipeline"
)

// Two rehearsed tests of one engine add up in its life.
func TestLifeCommand(t *testing.T) {
	dir := dataFolder(t)
	for _, start := range []string{"2026-03-02T09:00:00Z", "2026-03-02T11:00:00Z"} {
		var stderr bytes.Buffer
		if code := rehearseCommand(t.Context(), []string{rehearseRig, "--into", dir, "--start", start}, &bytes.Buffer{}, &stderr); code != 0 {
			t.Fatalf("exit code %d: %s", code, stderr.String())
		}
	}
	run := func(args ...string) (int, string, string) {
		var stdout, stderr bytes.Buffer
		code := lifeCommand(t.Context(), append(args, "--data", dir), &stdout, &stderr)
		return code, stdout.String(), stderr.String()
	}
	code, text, _ := run("--json")
	var lives []pipeline.Life
	if err := json.Unmarshal([]byte(text), &lives); err != nil || code != 0 {
		t.Fatalf("exit code %d: %v", code, err)
	}
	// The rehearsed test has one start, one shutdown and one over-temperature.
	if len(lives) != 1 || lives[0].Serial != "ML5-0042" || lives[0].Starts != 2 || lives[0].Cycles != 2 || lives[0].HotStarts+lives[0].Hung+lives[0].NoLights+lives[0].FlameOuts != 0 {
		t.Errorf("%+v", lives)
	}
	for _, b := range lives[0].Bands {
		if want := map[string]uint64{"run_max": 2}[b.Name]; b.Exceedances != want {
			t.Errorf("%+v", b)
		}
	}
	if code, text, _ = run("ML5-0042"); code != 0 || !strings.Contains(text, "ML5-0042") || !strings.Contains(text, "run_max") {
		t.Errorf("exit code %d: %s", code, text)
	}
	var nozzles []pipeline.NozzleLife
	if code, text, _ = run("--nozzles", "--json"); code != 0 || json.Unmarshal([]byte(text), &nozzles) != nil ||
		len(nozzles) != 1 || nozzles[0].Serial != "NZ-0311" || nozzles[0].Starts != 2 || nozzles[0].HoursChoked <= 0 || nozzles[0].HoursChoked >= nozzles[0].Hours {
		t.Errorf("exit code %d: %s", code, text)
	}
	code, text, _ = run("--csv")
	rows, err := csv.NewReader(strings.NewReader(text)).ReadAll()
	if code != 0 || err != nil || len(rows) != 2 || rows[0][0] != "engine_serial" || rows[1][0] != "ML5-0042" || rows[1][1] != "2" || len(rows[0]) != 10+3*4 {
		t.Errorf("exit code %d, %v: %q", code, err, rows)
	}
	outlasting(t, dir, nozzles[0])
	if code, _, text = run("other"); code != 1 || !strings.Contains(text, `no engine "other"`) {
		t.Errorf("exit code %d: %s", code, text)
	}
	if code, _, _ = run("one", "two"); code != 2 {
		t.Errorf("exit code %d with two serial numbers", code)
	}
}

// outlasting takes away the runs and the state of a data folder of two tests: lives and run
// numbers go on all the same, by what is left of the runs that were removed.
func outlasting(t *testing.T, dir string, before pipeline.NozzleLife) {
	t.Helper()
	list := storedRuns(t, dir)
	if len(list) != 2 || list[0].Designation != "ML5-0042/7/T-114/002" || list[1].Designation != "ML5-0042/7/T-114/001" ||
		list[0].Test != "T-114" || list[0].NozzleSerial != "NZ-0311" || list[0].EngineBuild != "7" || list[0].FuelBatch != "AB-2026-007" || list[0].Aborted {
		t.Fatalf("%+v", list)
	}
	for _, r := range list {
		if code, _, stderr := invoke(t, "delete", r.ID, "--data", dir, "--number", strconv.FormatUint(r.Number, 10), "--by", "T. Ester", "--reason", "test"); code != 0 {
			t.Fatal(stderr)
		}
	}
	idle, err := filepath.Glob(filepath.Join(dir, "idle-*.db*"))
	if err != nil || len(idle) == 0 {
		t.Fatal(idle, err)
	}
	for _, name := range idle {
		if err := os.Remove(name); err != nil {
			t.Fatal(err)
		}
	}
	if code, _, stderr := invoke(t, "rehearse", rehearseRig, "--into", dir, "--start", "2026-03-03T09:00:00Z", "--quick", "--rate", "10"); code != 0 {
		t.Fatal(stderr)
	}
	if list := storedRuns(t, dir); len(list) != 1 || list[0].Designation != "ML5-0042/7/T-114/003" || list[0].Number != 3 {
		t.Errorf("%+v", list)
	}
	code, text, _ := invoke(t, "life", "NZ-0311", "--nozzles", "--json", "--data", dir)
	var now []pipeline.NozzleLife
	if err := json.Unmarshal([]byte(text), &now); code != 0 || err != nil || len(now) != 1 || now[0].Starts != before.Starts+1 || now[0].HoursChoked <= before.HoursChoked {
		t.Errorf("%s, before %+v", text, before)
	}
}
