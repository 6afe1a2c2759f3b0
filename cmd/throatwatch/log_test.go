package main

import (
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/figures"
	"throatwatch/rules/pipeline"
)

// logged makes a run of an hour with three entries and an alarm that chatters.
func logged(t *testing.T) (dir string) {
	t.Helper()
	dir = t.TempDir()
	if err := os.Mkdir(filepath.Join(dir, "runs"), 0o750); err != nil {
		t.Fatal(err)
	}
	const start, second = int64(1772442000e9), int64(1e9) // 2026-03-02 09:00 UTC
	f, err := runfile.Create(t.Context(), filepath.Join(dir, "runs", "run_1.db"), runfile.Header{
		ID: "run_1", Rig: "cell_9", Started: start, Ended: start + 3600*second, State: runfile.StateEnded,
	}, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	b := runfile.Batch{Records: []ingest.Record{{Seq: 1, Host: start, Kind: ingest.KindTick}}}
	add := func(at int64, kind, text string) {
		at = start + at*second
		stamp := fmt.Sprintf("2026-03-02T09:%02d:%02dZ", (at-start)/second/60, (at-start)/second%60)
		b.Events = append(b.Events, runfile.Event{Epoch: 1, N: uint64(len(b.Events) + 1), T: at, Kind: kind, JSON: json.RawMessage(strings.ReplaceAll(text, "NOW", stamp))})
	}
	add(5, "log", `{"t":"NOW","what":"entry","name":"oil level","value":4.2,"unit":"l","text":"dip\nstick","by":"M. Oduya","role":"operator"}`)
	for i := range int64(4) {
		for k, state := range []string{"unacknowledged", "returned_unacknowledged"} {
			add(600+10*i+int64(k), "alarm", `{"rule":"oil_low","priority":"caution","changed":"NOW","state":"`+state+`"}`)
		}
	}
	add(660, "log", `{"t":"NOW","what":"out_of_service","rule":"oil_low","reason":"loose cable","by":"C. Vega","role":"engineer"}`)
	add(700, "log", `{"t":"NOW","what":"swap","channel":"egt_1","serial":"TC-0417","valid_from":"2026-03-02T09:11:00Z","reason":"open","by":"C. Vega","role":"engineer"}`)
	add(-60, "log", `{"t":"2026-03-02T08:59:00Z","what":"mark","text":"before the run","by":"x","role":"operator"}`)
	if err := f.Commit(t.Context(), b); err != nil {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	return dir
}

func TestLogCommand(t *testing.T) {
	dir := logged(t)
	code, stdout, stderr := invoke(t, "log", "run_1", "--data", dir)
	want := `TIME (UTC)           WHAT            OF         ENTERED                                   REASON       BY
2026-03-02 09:00:05  entry           oil level  4.2 l, dip stick                                       M. Oduya (operator)
2026-03-02 09:11:00  out of service  oil_low                                              loose cable  C. Vega (engineer)
2026-03-02 09:11:40  swap            egt_1      sensor TC-0417 from 2026-03-02 09:11:00   open         C. Vega (engineer)
`
	// Columns are as wide as what is in them.
	squeeze := func(s string) string {
		var out []string
		for line := range strings.Lines(s) {
			out = append(out, strings.Join(strings.Fields(line), " "))
		}
		return strings.Join(out, "\n")
	}
	if code != 0 || stderr != "" || squeeze(stdout) != squeeze(want) {
		t.Errorf("exit code %d, %q\n%s", code, stderr, stdout)
	}
	code, stdout, _ = invoke(t, "log", "run_1", "--data", dir, "--json")
	var entries []pipeline.Entry
	if err := json.Unmarshal([]byte(stdout), &entries); code != 0 || err != nil || len(entries) != 3 || entries[2].Serial != "TC-0417" || entries[0].Value.V != 4.2 {
		t.Errorf("exit code %d, %v: %s", code, err, stdout)
	}
	if code, _, stderr := invoke(t, "log", "run_2", "--data", dir); code != 1 || !strings.Contains(stderr, "throatwatch runs --data") {
		t.Errorf("no such run: exit code %d, %q", code, stderr)
	}
}

func TestFiguresCommand(t *testing.T) {
	dir := logged(t)
	code, stdout, stderr := invoke(t, "figures", "run_1", "--data", dir)
	for _, want := range []string{"2026-03-02 09:00:00 to 2026-03-02 10:00:00 UTC, 1h0m0s", "oil_low, raised 4 times in a minute", "ANSI/ISA-18.2", "not met", "4 at 2026-03-02 09:10:30"} {
		if !strings.Contains(stdout, want) {
			t.Errorf("%q is not in\n%s", want, stdout)
		}
	}
	if code != 0 || stderr != "" || strings.Contains(stdout, "Not graded") {
		t.Errorf("exit code %d, %q\n%s", code, stderr, stdout)
	}
	code, stdout, _ = invoke(t, "figures", "run_1", "--data", dir, "--json")
	var f figures.Figures
	if err := json.Unmarshal([]byte(stdout), &f); code != 0 || err != nil || f.Raised != 4 || !f.Graded || len(f.Chattering) != 1 || *f.Per10Min != 4.0/6 {
		t.Errorf("exit code %d, %v: %s", code, err, stdout)
	}
}
