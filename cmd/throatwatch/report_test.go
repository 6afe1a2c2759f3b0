package main

import (
	"bytes"
	"encoding/json"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
)

func TestReportCommand(t *testing.T) {
	data := dataFolder(t)
	id := rehearsed(t, data)
	out := filepath.Join(t.TempDir(), "report.html")
	code, stdout, stderr := invoke(t, "report", id, "--data", data, "--out", out, "--json")
	var said reported
	if err := json.Unmarshal([]byte(stdout), &said); code != 0 || err != nil || !strings.Contains(stderr, `{"part":`) {
		t.Fatalf("exit code %d, %v: %s%s", code, err, stdout, stderr)
	}
	page, err := os.ReadFile(out)
	if err != nil || int64(len(page)) != said.Bytes || said.File != out {
		t.Errorf("%v: %d bytes, said are %+v", err, len(page), said)
	}
	if !bytes.Contains(page, []byte(storedRuns(t, data)[0].Digest)) || !bytes.HasSuffix(page, []byte("</html>\n")) {
		t.Error("the report is not whole, or has another digest")
	}
	if code, _, stderr := invoke(t, "report", id, "--data", data, "--out", out); code != 1 || !strings.Contains(stderr, "--replace") {
		t.Errorf("a file that is there: exit code %d, %q", code, stderr)
	}
	if code, stdout, stderr := invoke(t, "report", id, "--data", data, "--out", out, "--replace"); code != 0 || !strings.Contains(stdout, out) {
		t.Errorf("replaced: exit code %d, %q", code, stderr)
	}
	if code, _, stderr := invoke(t, "report", "nobody", "--data", data, "--out", out+"x"); code != 1 || !strings.Contains(stderr, "throatwatch runs --data") {
		t.Errorf("no such run: exit code %d, %q", code, stderr)
	}
	left, err := os.ReadDir(filepath.Dir(out))
	if err != nil || len(left) != 1 {
		t.Errorf("%v: %v is left", err, left)
	}
	printed(t, out)

	if code, _, stderr := invoke(t, "reduce", id, "--rig", testRig(t), "--note", "zero of p7_2 <entered> again", "--by", "C. Vega", "--data", data); code != 0 {
		t.Fatalf("reduce: exit code %d: %s", code, stderr)
	}
	if code, _, stderr := invoke(t, "report", id+"-r1", "--data", data, "--out", out, "--replace"); code != 0 {
		t.Fatalf("reduction: exit code %d, %q", code, stderr)
	}
	child, err := os.ReadFile(out)
	if err != nil || !bytes.Contains(child, []byte("run "+id+", its records stepped again through the configuration above, by C. Vega. Change: zero of p7_2 &lt;entered&gt; again.")) {
		t.Errorf("%v: the reduction does not tell what it is", err)
	}
}

// printed prints a report with Chromium: whole pages of A4, with the title of the run.
func printed(t *testing.T, report string) {
	t.Helper()
	pdf := filepath.Join(t.TempDir(), "report.pdf")
	cmd := exec.CommandContext(t.Context(), "chromium", "--headless", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage",
		"--user-data-dir="+t.TempDir(), "--no-pdf-header-footer", "--print-to-pdf="+pdf, "file://"+report)
	if text, err := cmd.CombinedOutput(); err != nil {
		t.Fatalf("chromium: %v: %s", err, text)
	}
	b, err := os.ReadFile(pdf)
	if err != nil {
		t.Fatal(err)
	}
	pages := len(regexp.MustCompile(`/Type /Page\b`).FindAll(b, -1))
	a4 := len(regexp.MustCompile(`/MediaBox \[0 0 59[45]\.?\d* 84[12]\.?\d*\]`).FindAll(b, -1)) // 210 by 297 mm in 1/72 in
	if pages < 6 || pages > 16 || a4 != pages {
		t.Errorf("%d pages, %d of them A4", pages, a4)
	}
	if !bytes.Contains(b, []byte("/Title")) {
		t.Error("the document has no title")
	}
}
