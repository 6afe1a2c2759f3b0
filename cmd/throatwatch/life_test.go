package main

import (
	"bytes"
	"encoding/json"
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
	if code, _, text = run("other"); code != 1 || !strings.Contains(text, `no engine "other"`) {
		t.Errorf("exit code %d: %s", code, text)
	}
	if code, _, _ = run("one", "two"); code != 2 {
		t.Errorf("exit code %d with two serial numbers", code)
	}
}
