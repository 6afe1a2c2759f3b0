package dashboard_test

import (
	"fmt"
	"html"
	"log/slog"
	"math"
	"net/http"
	"net/http/httptest"
	"regexp"
	"strconv"
	"strings"
	"testing"
	"time"

	"throatwatch/dashboard"
	"throatwatch/ingest"
)

// report gets the report of a run.
func (r *recording) report(t *testing.T) string {
	t.Helper()
	a := r.get(t, "/api/runs/"+r.id+"/report")
	if a.status != http.StatusOK || a.header.Get("Content-Type") != "text/html; charset=utf-8" {
		t.Fatalf("status %d, %v: %.300s", a.status, a.header, a.body)
	}
	return string(a.body)
}

var (
	tags   = regexp.MustCompile(`<[^>]*>`)
	spaces = regexp.MustCompile(`[\s\x{2007}\x{2008}]+`)
)

// part gives a section of a report.
func part(t *testing.T, page, id string) string {
	t.Helper()
	_, rest, ok := strings.Cut(page, `<section id="`+id+`"`)
	if !ok {
		t.Fatalf("there is no section %q", id)
	}
	body, _, _ := strings.Cut(rest, "</section>")
	return "<section" + body
}

// section gives the text of a section, without marks.
func section(t *testing.T, page, id string) string {
	t.Helper()
	return strings.TrimSpace(spaces.ReplaceAllString(html.UnescapeString(tags.ReplaceAllString(part(t, page, id), " ")), " "))
}

// What the report says is what the interface says of the same run.
func TestReportIsThatOfInterface(t *testing.T) {
	r := recorded()
	page := r.report(t)
	has := func(id string, wants ...string) {
		t.Helper()
		text := section(t, page, id)
		for _, want := range wants {
			if !strings.Contains(text, want) {
				t.Errorf("%s has no %q: %s", id, want, text)
			}
		}
	}
	run := into[struct{ Digest, Config string }](t, r.get(t, "/api/runs/"+r.id))
	config := into[struct {
		Hash string `json:"config_hash"`
	}](t, r.get(t, "/api/rigs/"+rigID+"/hello"))
	if !strings.Contains(page, config.Hash) {
		t.Errorf("the configuration hash %s is not in it", config.Hash)
	}
	if !strings.Contains(page, "clearance to start") {
		t.Error("there is no safety note")
	}
	has("digest", run.Digest, "throatwatch verify "+r.id)
	has("rig", "p7_1", "gauge p_baro", "EGT band")
	has("method", "NASA/TP-2002-211556", "It cannot say")
	has("signatures", "Test engineer", "Reviewer", "Signature", "Date")
	has("gaps", "No scan is missing")
	has("instrumentation", "egt_3")
	has("summary", "Throat choked for", "Alarms")

	// Quality: the share of scans in which the lost probe could be used.
	usable, all := 0, 0
	for _, f := range r.sent() {
		if f.kind == "channels" && f.t >= r.began(t) {
			frame := into[struct {
				Channels map[string]struct{ Quality string }
			}](t, answer{body: f.body})
			all++
			if q := frame.Channels["egt_3"].Quality; q == "good" || q == "held" {
				usable++
			}
		}
	}
	has("instrumentation", fmt.Sprintf("egt_3 %.2f", 100*float64(usable)/float64(all)))

	var alarms int
	for _, line := range lines(r.get(t, "/api/runs/"+r.id+"/messages?kinds=alarm").body) {
		a := into[struct {
			Alarm struct {
				Title, Text string
				Raised      *string
				By          string `json:"acknowledged_by"`
			}
		}](t, answer{body: line}).Alarm
		if a.Raised == nil {
			continue
		}
		alarms++
		has("alarms", a.Title, a.Text, a.By)
	}
	if alarms == 0 {
		t.Error("there was no alarm to be found")
	}
	for _, e := range into[struct {
		Entries []struct{ What, Text, By string }
	}](t, r.get(t, "/api/runs/"+r.id+"/log")).Entries {
		has("log", strings.ReplaceAll(e.What, "_", " "), e.By)
	}
	has("timeline", `bleed "A" opened, 5 °C`, "Throat choked", "Mark M1")
	figures := into[struct {
		Raised int
		Mean   float64 `json:"standing_mean"`
	}](t, r.get(t, "/api/runs/"+r.id+"/alarm-figures"))
	has("alarms", fmt.Sprintf("Raised %d", figures.Raised), fmt.Sprintf("Standing, mean %.2f", figures.Mean))
	record := into[struct {
		Exceedances []struct {
			Band     string
			Duration float64 `json:"duration_s"`
			Peak     float64 `json:"peak_k"`
		}
		Life struct{ Starts int }
	}](t, r.get(t, "/api/runs/"+r.id+"/exceedances"))
	for _, e := range record.Exceedances {
		has("exceedances", e.Band, fmt.Sprintf("%.1f", e.Peak-zeroC), fmt.Sprintf("%.2f", e.Duration))
	}
	has("exceedances", fmt.Sprintf("Starts %d", record.Life.Starts))

	points := into[struct {
		Points []struct {
			Number int
			Values []struct {
				Name  string
				Value *float64
				U95   *float64
			}
		}
	}](t, r.get(t, "/api/runs/"+r.id+"/points")).Points
	for _, p := range points {
		for _, v := range p.Values {
			if v.Name == "npr" && v.Value != nil && v.U95 != nil {
				digits := 1 - int(math.Floor(math.Log10(*v.U95)))
				has("points", strconv.FormatFloat(*v.Value, 'f', digits, 64)+" "+strconv.FormatFloat(*v.U95, 'f', digits, 64))
			}
		}
		has("points", fmt.Sprintf("Point %d", p.Number))
	}
	if len(points) == 0 {
		has("points", "No steady point was found.")
	}
	if n := strings.Count(part(t, page, "figures"), "<svg"); n < 5 {
		t.Errorf("%d figures", n)
	}
}

// The report needs nothing beside it and runs nothing.
func TestReportIsSelfContained(t *testing.T) {
	r := recorded()
	a := r.get(t, "/api/runs/"+r.id+"/report")
	policy := a.header.Get("Content-Security-Policy")
	if !strings.Contains(policy, "default-src 'none'") || strings.Contains(policy, "script-src") || !strings.Contains(policy, "sandbox") {
		t.Errorf("policy %q", policy)
	}
	page := string(a.body)
	for _, no := range []string{"<script", "<link", "<img", "<iframe", "@import", "url(", "javascript:", "ZgotmplZ", "NOVERB", "%!", "NaN", " src=", "+Inf"} {
		if strings.Contains(page, no) {
			t.Errorf("%q is in it", no)
		}
	}
	for _, link := range regexp.MustCompile(`https?://[^"' <]*`).FindAllString(page, -1) {
		if !strings.HasPrefix(link, "http://www.w3.org/") { // names of SVG, not places
			t.Errorf("it points to %s", link)
		}
	}
}

// What people wrote is text in the report, wherever it stands; before the first chunk
// there is none, and while the run is on it says that it is an interim one.
func TestReportOfRunThatIsOn(t *testing.T) {
	r := &recording{desk: makeDesk()}
	r.record(t.TempDir())
	r.take(ingest.KindBoot, `{"epoch":3}`, start)
	const hostile = `</style><script>alert("1")</script>`
	r.take(ingest.KindConfig, hostile, start)
	r.serve(r.desk)
	t.Cleanup(r.close)
	msgs := play(start+second, engineTest(), 14*time.Second, nil)
	r.send(msgs[:300])
	r.id = r.state.Run.ID
	checkStatus(t, "before the first chunk", r.get(t, "/api/runs/"+r.id+"/report"), http.StatusConflict, "nothing is stored")
	a := r.call(t, http.MethodPost, "/api/runs/"+r.id+"/marks", `{"text":"<b onclick=x>&amp;","by":"</td><script>","request_id":"m1"}`)
	if a.status != http.StatusAccepted {
		t.Fatalf("mark: %d %s", a.status, a.body)
	}
	r.send(msgs[300:])
	page := r.report(t)
	if !strings.Contains(page, "Interim report") || !strings.Contains(page, "no digest") {
		t.Error("it does not say that the run is on")
	}
	if strings.Contains(page, "<script") || strings.Contains(page, "<b onclick") || strings.Count(page, "</style>") != 1 {
		t.Error("what people wrote is taken for marks")
	}
	if !strings.Contains(section(t, page, "timeline"), "<b onclick=x>&amp;, by </td><script>") {
		t.Errorf("the mark is not as it was written: %s", section(t, page, "timeline"))
	}
}

func TestReportAnswers(t *testing.T) {
	r := recorded()
	checkStatus(t, "no such run", r.get(t, "/api/runs/nobody/report"), http.StatusNotFound, "no run")
	server := dashboard.NewServer(dashboard.Config{Desk: r, Runs: folder(r.dir), Parse: parse, Log: slog.New(slog.DiscardHandler)}, r.hub)
	release := server.HoldExport()
	defer release()
	w := httptest.NewRecorder()
	path := "/api/runs/" + r.id + "/report"
	server.ServeHTTP(w, httptest.NewRequestWithContext(t.Context(), http.MethodGet, path, nil))
	a := answer{w.Code, w.Header(), w.Body.Bytes()}
	checkDescribed(t, http.MethodGet, path, "", a)
	checkStatus(t, "a second one", a, http.StatusServiceUnavailable, "another export or report")
}
