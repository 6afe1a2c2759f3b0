package dashboard_test

import (
	"bytes"
	"encoding/csv"
	"log/slog"
	"math"
	"net/http"
	"net/http/httptest"
	"strconv"
	"strings"
	"testing"
	"time"

	"throatwatch/dashboard"
)

// table gets an export in CSV: the header, and the rows by name without unit.
func (r *recording) table(t *testing.T, query string) (header []string, rows []map[string]string) {
	t.Helper()
	a := r.get(t, "/api/runs/"+r.id+"/export?format=csv&"+query)
	if a.status != http.StatusOK {
		t.Fatalf("%s: status %d: %s", query, a.status, a.body)
	}
	all, err := csv.NewReader(bytes.NewReader(a.body)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	for _, cells := range all[1:] {
		row := map[string]string{}
		for i, c := range cells {
			name, _, _ := strings.Cut(all[0][i], " [")
			row[name] = c
		}
		rows = append(rows, row)
	}
	return all[0], rows
}

// What is exported is what the frames said, to the last bit, with the units that the
// interface gives.
func TestExportIsThatOfLive(t *testing.T) {
	r := recorded()
	for _, tt := range []struct {
		what   string
		from   float64
		to     float64
		header []string
	}{
		{"operating-points", 0, 24.75, []string{"npr", "mass_flow_kg_s [kg/s]", "independent_flow_kg_s [kg/s]", "egt_indicated_k [K]", "choke_state", "phase", "steady"}},
		{"scans", 2, 9.5, []string{"channel.p7_1 [Pa]", "channel.egt_3 [K]", "channel.speed [1/s]", "quality.egt_3"}},
		{"scans", -1, 1, []string{"channel.p7_1 [Pa]", "quality.p7_1"}},
	} {
		var names []string
		for _, h := range tt.header {
			name, _, _ := strings.Cut(h, " [")
			names = append(names, name)
		}
		text := func(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }
		header, rows := r.table(t, "what="+tt.what+"&columns="+strings.Join(names, ",")+"&from="+text(tt.from)+"&to="+text(tt.to))
		if got, want := strings.Join(header, ","), "t [UTC],t_ns [ns],"+strings.Join(tt.header, ","); got != want {
			t.Errorf("%s: header %q, want %q", tt.what, got, want)
		}
		for _, name := range names {
			want := r.rows(t, name, tt.from, tt.to)
			if len(want) != len(rows) || len(want) < 20 {
				t.Fatalf("%s: %d rows, want %d", tt.what, len(rows), len(want))
			}
			for i, w := range want {
				at, err := time.Parse(time.RFC3339Nano, rows[i]["t"])
				if ns := strconv.FormatInt(at.UnixNano(), 10); err != nil || rows[i]["t_ns"] != ns || math.Abs(float64(at.UnixNano()-r.began(t))/1e9-w.t) > 1e-6 {
					t.Fatalf("%s: row %d is at %q, %q, want %v", name, i, rows[i]["t"], rows[i]["t_ns"], w.t)
				}
				cell := rows[i][name]
				switch {
				case name == "steady":
					if cell != "true" && cell != "false" {
						t.Fatalf("row %d of %s is %q", i, name, cell)
					}
				case w.value != nil:
					if v, err := strconv.ParseFloat(cell, 64); err != nil || math.Float64bits(v) != math.Float64bits(*w.value) {
						t.Fatalf("row %d of %s is %q, want %v", i, name, cell, *w.value)
					}
				case cell != w.state: // a state, or "" for null
					t.Fatalf("row %d of %s is %q, want %q", i, name, cell, w.state)
				}
			}
		}
	}
}

// Samples are what was sent: a copy and a lost probe are noted.
func TestExportSamples(t *testing.T) {
	r := recorded()
	_, rows := r.table(t, "what=samples&from=-100")
	notes, channels := map[string]int{}, map[string]int{}
	for _, row := range rows {
		notes[row["note"]]++
		channels[row["channel"]]++
		if row["clock"] != "sender" || row["topic"] == "" || row["record"] == "" {
			t.Fatalf("%v", row)
		}
	}
	state := r.state
	if want := int(state.Align.Samples); notes[""] < want { // late ones are noted by the computation alone
		t.Errorf("%d samples without a note, %d were used", notes[""], want)
	}
	if notes["duplicate"] == 0 || channels["egt_3"] == 0 {
		t.Errorf("notes %v, channels %v", notes, channels)
	}
	for _, row := range rows {
		if row["channel"] == "p7_1" {
			v, err1 := strconv.ParseFloat(row["value"], 64)
			si, err2 := strconv.ParseFloat(row["si"], 64)
			if err1 != nil || err2 != nil || row["unit"] != "kPa" || math.Abs(si-1000*v) > 1e-6 {
				t.Fatalf("%v", row)
			}
		}
	}
}

// Events are those of the frames, with their whole text.
func TestExportEvents(t *testing.T) {
	r := recorded()
	_, rows := r.table(t, "what=events")
	kinds := map[string]int{}
	for _, row := range rows {
		kinds[row["kind"]]++
		if !strings.Contains(row["json"], "{") && row["kind"] != "quarantine" {
			t.Errorf("%v", row)
		}
	}
	alarms := 0
	for _, f := range r.sent() {
		if f.kind == "alarm" && f.t >= r.began(t) {
			alarms++
		}
	}
	if kinds["alarm"] != alarms || kinds["run"] != 2 || kinds["mark"] == 0 {
		t.Errorf("%v, %d alarms were sent", kinds, alarms)
	}
}

// Of a run that is on every row up to the last durable record is there, those behind
// the last closed chunk too.
func TestExportOfRunThatIsOn(t *testing.T) {
	r := &recording{desk: makeDesk()}
	r.record(t.TempDir())
	r.begin()
	r.serve(r.desk)
	t.Cleanup(r.close)
	msgs := play(start+second, engineTest(), 14*time.Second, nil)
	for _, part := range [][]message{msgs[:400], msgs[400:]} { // before the first chunk, and behind it
		r.send(part)
		r.id = r.state.Run.ID
		_, rows := r.table(t, "what=operating-points&columns=npr&from=-100")
		var want []any
		for _, f := range r.sent() {
			if f.kind == "operating_point" {
				want = append(want, into[map[string]any](t, answer{body: f.body})["npr"])
			}
		}
		if len(rows) < len(want)-20 || len(rows) < 50 { // a second may not be stored yet
			t.Fatalf("%d rows of %d", len(rows), len(want))
		}
		for i, row := range rows {
			got := any(nil)
			if v, err := strconv.ParseFloat(row["npr"], 64); err == nil {
				got = v
			}
			if got != want[i] {
				t.Fatalf("row %d is %q, want %v", i, row["npr"], want[i])
			}
		}
	}
}

// The attachment has a name and a type, one export goes at a time, and what cannot be
// asked for is told.
func TestExportAnswers(t *testing.T) {
	r := recorded()
	base := "/api/runs/" + r.id + "/export"
	for format, media := range map[string]string{"parquet": "application/vnd.apache.parquet", "csv": "text/csv; charset=utf-8; header=present", "lines": "text/plain; charset=utf-8"} {
		a := r.get(t, base+"?what=scans&every=1s&statistics=last&format="+format)
		want := `attachment; filename="` + r.id + "-scans." + format + `"`
		if a.status != http.StatusOK || a.header.Get("Content-Type") != media || a.header.Get("Content-Disposition") != want || len(a.body) == 0 {
			t.Errorf("%s: status %d, %v", format, a.status, a.header)
		}
	}
	for query, says := range map[string]string{
		"":                                   "what",
		"?what=scans":                        "format",
		"?what=all&format=csv":               "what",
		"?what=scans&format=xls":             "parquet, csv, lines",
		"?what=scans&format=csv&columns=npr": "channel.p7_1",
		"?what=operating-points&format=csv&columns=npr,npr":  "twice",
		"?what=events&format=csv&every=1s":                   "not resampled",
		"?what=scans&format=csv&every=soon":                  "1ms or more",
		"?what=scans&format=csv&every=-1s":                   "1ms or more",
		"?what=scans&format=csv&from=5&to=4":                 "before",
		"?what=scans&format=csv&every=1s&statistics=median":  "mean, min, max, last",
		"?what=scans&format=csv&from=yesterday":              "seconds of the run",
		"?what=scans&format=csv&every=1s&statistics=max,max": "each once",
	} {
		checkStatus(t, query, r.get(t, base+query), http.StatusBadRequest, says)
	}
	server := dashboard.NewServer(dashboard.Config{Desk: r, Runs: folder(r.dir), Parse: parse, Log: slog.New(slog.DiscardHandler)}, r.hub)
	ask := func() answer {
		w := httptest.NewRecorder()
		path := base + "?what=scans&format=csv&to=1"
		server.ServeHTTP(w, httptest.NewRequestWithContext(t.Context(), http.MethodGet, path, nil))
		a := answer{w.Code, w.Header(), w.Body.Bytes()}
		checkDescribed(t, http.MethodGet, path, "", a)
		return a
	}
	release := server.HoldExport()
	busy := ask()
	release()
	checkStatus(t, "a second one", busy, http.StatusServiceUnavailable, "another export")
	if busy.header.Get("Retry-After") != "10" {
		t.Errorf("it says %v", busy.header)
	}
	if a := ask(); a.status != http.StatusOK {
		t.Errorf("afterwards: status %d", a.status)
	}
}
