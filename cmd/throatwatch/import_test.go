package main

import (
	"context"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"log/slog"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/runfile"
)

// exportMap takes samples as export writes them.
const exportMap = `time: {column: %s, format: epoch, unit: ns}
values: {channel: channel, value: value, unit: unit}
only_where_empty: note
skip: rest
`

func writeFile(t *testing.T, name, text string) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// importRun imports and gives what --json says.
func importRun(t *testing.T, recording, columns, rig, data string) imported {
	t.Helper()
	code, stdout, stderr := invoke(t, "import", recording, "--map", columns, "--rig", rig, "--data", data, "--json")
	var res imported
	if err := json.Unmarshal([]byte(stdout), &res); code != 0 || err != nil {
		t.Fatalf("exit code %d, %v: %s%s", code, err, stdout, stderr)
	}
	return res
}

// pointsOf exports the operating points of a run and gives its rows by time.
func pointsOf(t *testing.T, data, id string) map[string][]string {
	t.Helper()
	out := filepath.Join(t.TempDir(), "points.csv")
	if code, _, stderr := invoke(t, "export", id, "--data", data, "--out", out); code != 0 {
		t.Fatal(stderr)
	}
	rows := map[string][]string{}
	for _, row := range csvRows(t, out)[1:] {
		rows[row[1]] = row
	}
	return rows
}

func csvRows(t *testing.T, path string) [][]string {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	return rows
}

// samplesOf exports the samples of a run, from before it began.
func samplesOf(t *testing.T, data, id, format string) string {
	t.Helper()
	out := filepath.Join(t.TempDir(), "samples."+format)
	if code, _, stderr := invoke(t, "export", id, "--data", data, "--what", "samples", "--from", "-100", "--out", out); code != 0 {
		t.Fatal(stderr)
	}
	return out
}

// Samples that are exported and imported again give the same operating points to the
// last bit, as Parquet and as CSV: the numbers of both come back as they were.
func TestImportRoundTrip(t *testing.T) {
	data := dataFolder(t)
	rig := testRig(t)
	id := rehearsed(t, data)
	want := pointsOf(t, data, id)
	for format, column := range map[string]string{"parquet": "t_ns", "csv": `"t_ns [ns]"`} {
		recording := samplesOf(t, data, id, format)
		other := dataFolder(t)
		res := importRun(t, recording, writeFile(t, "map.yaml", fmt.Sprintf(exportMap, column)), rig, other)
		if res.Bad() != 0 || res.Late != 0 || res.Rows < 100_000 || res.Values != res.Rows {
			t.Errorf("%s: %+v", format, res.Counts)
		}
		got := pointsOf(t, other, res.Run)
		same := 0
		for at, w := range want {
			if g, ok := got[at]; ok {
				if same++; !slices.Equal(g, w) {
					t.Fatalf("%s: the point at %s is\n%v\nwant\n%v", format, at, g, w)
				}
			}
		}
		// The last scans of the first run closed when nothing more came.
		if same < len(want)-3 {
			t.Errorf("%s: %d points of %d are there", format, same, len(want))
		}
		runs := storedRuns(t, other)
		if len(runs) != 1 || runs[0].ID != res.Run || runs[0].State != "ended" || runs[0].Digest != res.Digest {
			t.Errorf("%s: %+v", format, runs)
		}
		replayed(t, other)
		f, err := runfile.Open(t.Context(), res.File, runfile.ReadOnly, runfile.Options{})
		if err != nil {
			t.Fatal(err)
		}
		h, err := f.Header(t.Context())
		if err != nil || h.Origin == nil || *h.Origin != res.Origin || h.Origin.File != "samples."+format || len(h.Origin.SHA256) != 64 || !strings.Contains(h.Notes, h.Origin.SHA256) {
			t.Errorf("%s: header %+v: %v", format, h, err)
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
		// A second time it is there already, and nothing is left behind.
		if code, _, stderr := invoke(t, "import", recording, "--map", writeFile(t, "map.yaml", fmt.Sprintf(exportMap, column)), "--rig", rig, "--data", other); code != 1 || !strings.Contains(stderr, "is there already") {
			t.Errorf("%s: a second time: exit code %d: %s", format, code, stderr)
		}
		left, err := filepath.Glob(filepath.Join(other, "import-*"))
		if err != nil || len(left) > 0 {
			t.Errorf("left behind: %v", left)
		}
	}
}

// An imported run beside recorded ones does not make a watch go on from it.
func TestImportBesideRecordedRuns(t *testing.T) {
	data := dataFolder(t)
	rig := testRig(t)
	id := rehearsed(t, data)
	recording := samplesOf(t, data, id, "parquet")
	before := newest(t, data)
	// A day later, and with more records than the folder has: they must not count.
	res := importRun(t, recording, writeFile(t, "map.yaml", "time: {column: t, format: stamp}\nvalues: {channel: channel, value: value, unit: unit}\nonly_where_empty: note\nskip: rest\n"), rig, data)
	if runs := storedRuns(t, data); len(runs) != 2 || res.Run == id {
		t.Errorf("%+v", runs)
	}
	if after := newest(t, data); after != before {
		t.Errorf("the newest record was %d, with the import %d", before, after)
	}
	if code, stdout, _ := invoke(t, "verify", "--all", "--data", data); code != 0 {
		t.Errorf("verify: %s", stdout)
	}
}

// newest gives the record that a watch would go on after.
func newest(t *testing.T, data string) uint64 {
	t.Helper()
	s, err := watch.OpenStore(t.Context(), data, runfile.Options{}, slog.New(slog.DiscardHandler))
	if err != nil {
		t.Fatal(err)
	}
	f, _ := s.Current()
	seq, _ := f.Durable()
	if err := s.Close(context.Background()); err != nil {
		t.Fatal(err)
	}
	return seq
}

// A table of channels as a spreadsheet writes it, in other units and local time, gives
// the values that stand in it; bad cells are named, the run goes on.
func TestImportWideTable(t *testing.T) {
	const rig = "../../testdata/rigs/minimal.yaml"
	at := time.Date(2026, 7, 2, 8, 0, 0, 0, time.UTC)
	var b strings.Builder
	b.WriteString("Datum;Zeit;PT-101 (bar);TT-102 (degF)\n")
	for i := range 600 {
		local := at.Add(time.Duration(i) * 50 * time.Millisecond).Add(2 * time.Hour) // summer time in Zurich
		cells := []string{"1,5", "1112"}                                             // 1112 °F = 600 °C, exact by definition
		switch i {
		case 100:
			cells[0] = "1.5" // the separator of thousands, or a slip
		case 101:
			cells[1] = ""
		}
		fmt.Fprintf(&b, "%s;%s\n", local.Format("02.01.2006;15:04:05,000"), strings.Join(cells, ";"))
	}
	columns := writeFile(t, "map.yaml", `csv: {separator: ";", decimal: ","}
time: {column: [Datum, Zeit], format: "DD.MM.YYYY hh:mm:ss,fff", zone: Europe/Zurich}
columns:
  - {column: PT-101 (bar), channel: p_jet, unit: bar}
  - {column: TT-102 (degF), channel: t_jet, unit: degF}
constants: {p_room: 1000 hPa}
`)
	data := dataFolder(t)
	res := importRun(t, writeFile(t, "a.csv", b.String()), columns, rig, data)
	if want := `row 102, column "PT-101 (bar)": "1.5" is no number`; res.Rows != 600 || res.BadCells != 1 || res.Bad() != 1 || len(res.Faults) != 1 || res.Faults[0] != want {
		t.Errorf("%+v", res.Counts)
	}
	if !strings.HasPrefix(res.Run, "bench_1-20260702T07595") && !strings.HasPrefix(res.Run, "bench_1-20260702T08000") {
		t.Errorf("10:00 in Zurich in summer is 08:00 UTC; the run is %s", res.Run)
	}
	out := filepath.Join(t.TempDir(), "scans.csv")
	if code, _, stderr := invoke(t, "export", res.Run, "--data", data, "--what", "scans", "--out", out); code != 0 {
		t.Fatal(stderr)
	}
	rows := csvRows(t, out)
	if len(rows) < 590 {
		t.Fatalf("%d scans", len(rows))
	}
	for name, want := range map[string]float64{"channel.t_jet [K]": 873.15, "channel.p_room [Pa]": 100_000, "channel.p_jet [Pa]": 250_000} { // 1.5 bar against the room
		i := slices.Index(rows[0], name)
		if i < 0 {
			t.Fatalf("no column %q in %q", name, rows[0])
		}
		if got, err := strconv.ParseFloat(rows[300][i], 64); err != nil || math.Abs(got-want) > 1e-9*want {
			t.Errorf("%s is %v, want %v", name, got, want)
		}
	}
}

// What cannot be imported is told, with the place in the map, and leaves nothing.
func TestImportRefuses(t *testing.T) {
	const rig = "../../testdata/rigs/minimal.yaml"
	data := dataFolder(t)
	good := writeFile(t, "good.yaml", "time: {column: t, format: epoch, unit: s}\ncolumns:\n  - {column: p, channel: p_jet, unit: bar}\n")
	for _, tt := range []struct {
		name, recording, columns string
		says                     []string
	}{
		{"a fault of the map", "t,p\n1,2\n", writeFile(t, "bad.yaml", "time: {column: t, format: epoch, unit: s}\ncolumns:\n  - {column: q, channel: p8, unit: bar}\n"), []string{
			`bad.yaml:3:14: columns[0].column: the recording has no column "q"`, `bad.yaml:3:26: columns[0].channel: the rig has no channel "p8"`,
		}},
		{"no value at all", "t,p\n1,\n2,x\n", good, []string{"no value that can be used, in 2 rows", `row 3, column "p": "x" is no number`}},
		{"no rows", "t,p\n", good, []string{"no value that can be used, in 0 rows"}},
	} {
		code, stdout, stderr := invoke(t, "import", writeFile(t, "a.csv", tt.recording), "--map", tt.columns, "--rig", rig, "--data", data)
		if code != 1 || stdout != "" {
			t.Errorf("%s: exit code %d: %s", tt.name, code, stdout)
		}
		for _, says := range tt.says {
			if !strings.Contains(stderr, says) {
				t.Errorf("%s: it says %s, want %s", tt.name, stderr, says)
			}
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	var out strings.Builder
	if code := importCommand(ctx, []string{writeFile(t, "a.csv", "t,p\n1,2\n2,2\n"), "--map", good, "--rig", rig, "--data", data}, &out, &out); code != 1 {
		t.Errorf("called off: exit code %d", code)
	}
	entries, err := os.ReadDir(data)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		if e.Name() != "runs" {
			t.Errorf("%s is left behind", e.Name())
		}
	}
}
