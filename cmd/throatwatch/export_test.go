package main

import (
	"encoding/json"
	"errors"
	"io"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/parquet-go/parquet-go"

	"throatwatch/monitor/influx/influxtest"
)

// rehearsed plays a short test into a data folder and gives the id of its run.
func rehearsed(t *testing.T, data string, more ...string) string {
	t.Helper()
	args := append([]string{"rehearse", testRig(t), "--into", data, "--quick", "--start", "2026-03-02T09:00:00Z"}, more...)
	if code, _, stderr := invoke(t, args...); code != 0 {
		t.Fatalf("rehearse: exit code %d: %s", code, stderr)
	}
	return storedRuns(t, data)[0].ID
}

// parquetRows reads a file by its rows: columns by name, and the values.
func parquetRows(t *testing.T, path string) (at map[string]int, rows []parquet.Row) {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		t.Fatal(err)
	}
	p, err := parquet.OpenFile(f, info.Size())
	if err != nil {
		t.Fatal(err)
	}
	at = map[string]int{}
	for i, c := range p.Root().Columns() {
		at[c.Name()] = i
	}
	for _, g := range p.RowGroups() {
		r := g.Rows()
		for {
			buf := make([]parquet.Row, 64)
			n, err := r.ReadRows(buf)
			for _, row := range buf[:n] {
				rows = append(rows, row.Clone())
			}
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
		}
		if err := r.Close(); err != nil {
			t.Fatal(err)
		}
	}
	return at, rows
}

// The exported operating points are those of a replay, which computes them from the
// records, to the last bit; and a file of that name is not lost.
func TestExportIsThatOfReplay(t *testing.T) {
	data := dataFolder(t)
	id := rehearsed(t, data)
	out := filepath.Join(t.TempDir(), "points.parquet")
	code, stdout, stderr := invoke(t, "export", id, "--data", data, "--out", out, "--json")
	var said exported
	if err := json.Unmarshal([]byte(stdout), &said); code != 0 || err != nil || !strings.Contains(stderr, `{"part":`) {
		t.Fatalf("exit code %d, %v: %s%s", code, err, stdout, stderr)
	}
	_, lines := replayed(t, data)
	at, rows := parquetRows(t, out)
	began := rows[0][at["t_ns"]].Int64() // the row that starts the run is of it here, not of its digest
	if said.Rows != int64(len(rows)) || len(rows) != len(lines)+1 || said.Bytes == 0 || said.Columns != len(at) {
		t.Fatalf("%d rows, %d operating points replayed; it says %+v", len(rows), len(lines), said)
	}
	for i, text := range lines {
		var point map[string]any
		if err := json.Unmarshal([]byte(text), &point); err != nil {
			t.Fatal(err)
		}
		row := rows[i+1]
		for name, k := range at {
			switch got := row[k]; want := point[name].(type) {
			case float64:
				if got.IsNull() || math.Float64bits(got.Double()) != math.Float64bits(want) {
					t.Fatalf("%s at row %d is %v, want %v", name, i+1, got, want)
				}
			case string:
				if name != "t" && got.String() != want {
					t.Fatalf("%s at row %d is %v, want %v", name, i+1, got, want)
				}
			case nil:
				if name != "t_ns" && !got.IsNull() {
					// A flag or a source that the frame calls by another name.
					if _, there := point[name]; there {
						t.Fatalf("%s at row %d is %v, want nothing", name, i+1, got)
					}
				}
			}
		}
	}
	if got := rows[len(rows)-1][at["t_ns"]].Int64() - began; got < 20e9 {
		t.Errorf("it spans %d ns", got)
	}
	if code, _, stderr := invoke(t, "export", id, "--data", data, "--out", out); code != 1 || !strings.Contains(stderr, "file already exists: give another --out, or --replace") {
		t.Errorf("a file that is there: exit code %d, %s", code, stderr)
	}
	if code, _, stderr := invoke(t, "export", id, "--data", data, "--out", out, "--replace", "--what", "scans", "--every", "1s"); code != 0 {
		t.Errorf("replaced: exit code %d, %s", code, stderr)
	}
	if at, rows := parquetRows(t, out); len(rows) > 70 || at["channel.p_baro.mean"] == 0 {
		t.Errorf("%d rows of a second", len(rows))
	}
	left, err := filepath.Glob(filepath.Join(filepath.Dir(out), "*.part"))
	if err != nil || len(left) > 0 {
		t.Errorf("left behind: %v %v", left, err)
	}
}

// A file that cannot be written to its end is not there afterwards.
func TestExportToNowhere(t *testing.T) {
	data := dataFolder(t)
	id := rehearsed(t, data)
	out := filepath.Join(t.TempDir(), "folder", "a.csv")
	if code, _, stderr := invoke(t, "export", id, "--data", data, "--out", out); code != 1 || !strings.Contains(stderr, "no such file or directory") {
		t.Errorf("exit code %d: %s", code, stderr)
	}
	full := filepath.Join(t.TempDir(), "a.csv")
	if err := os.Symlink("/dev/full", full+".part"); err != nil {
		t.Fatal(err)
	}
	if code, _, stderr := invoke(t, "export", id, "--data", data, "--out", full); code != 1 || !strings.Contains(stderr, "no space left on device") {
		t.Errorf("full disk: exit code %d: %s", code, stderr)
	}
	if _, err := os.Lstat(full); err == nil {
		t.Error("a file that was not written is there")
	}
}

// A real database takes the lines of an export as they are, every row once, under the
// names that its own sink uses.
func TestExportedLinesInDatabase(t *testing.T) {
	server := influxtest.Start(t, influxtest.Options{})
	server.Query("", "CREATE DATABASE hall")
	data := dataFolder(t)
	id := rehearsed(t, data)
	count := func(table, measurement, field string) int64 {
		t.Helper()
		out := filepath.Join(t.TempDir(), "table.lines")
		code, stdout, stderr := invoke(t, "export", id, "--data", data, "--what", table, "--out", out, "--json", "--to", "20")
		var said exported
		if err := json.Unmarshal([]byte(stdout), &said); code != 0 || err != nil {
			t.Fatalf("exit code %d, %v: %s", code, err, stderr)
		}
		text, err := os.ReadFile(out)
		if err != nil {
			t.Fatal(err)
		}
		const most = 5000 // lines in a request
		lines := strings.SplitAfter(string(text), "\n")
		for from := 0; from < len(lines); from += most {
			server.Write("hall", strings.Join(lines[from:min(from+most, len(lines))], ""))
		}
		got := server.Query("hall", `SELECT count("`+field+`") FROM `+measurement+` WHERE rig = 'cell_2'`)
		if len(got) != 1 {
			t.Fatalf("the database has no %s", measurement)
		}
		n, err := got[0].Values[0][1].(json.Number).Int64()
		if err != nil {
			t.Fatal(err)
		}
		if said.Rows != n && table != "events" {
			t.Errorf("%s: %d rows were written, the database has %d", table, said.Rows, n)
		}
		return n
	}
	if n := count("operating-points", "operating_point", "npr"); n < 350 {
		t.Errorf("%d operating points", n)
	}
	count("scans", "channel", "p_baro")
	count("samples", "sample", "value")
	count("events", "run", "event")
	got := server.Query("hall", `SELECT last(npr) FROM operating_point`)
	at, rows := pointsOf(t, data, id), 0
	for _, row := range at {
		if v, err := got[0].Values[0][1].(json.Number).Float64(); err == nil && row[2] == strconv.FormatFloat(v, 'g', -1, 64) {
			rows++
		}
	}
	if rows == 0 {
		t.Errorf("no operating point has the NPR %v of the database", got[0].Values[0][1])
	}
}
