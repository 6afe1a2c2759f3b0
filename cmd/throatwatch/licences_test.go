package main

import (
	"os"
	"os/exec"
	"slices"
	"strings"
	"testing"
)

// TestLicences compares the list of licences with the modules compiled in.
func TestLicences(t *testing.T) {
	text, err := os.ReadFile("../../deploy/licences.md")
	if err != nil {
		t.Fatal(err)
	}
	var listed []string
	for line := range strings.Lines(string(text)) {
		cells := strings.Split(line, "|")
		if len(cells) != 5 || strings.TrimSpace(cells[1]) == "module" || strings.Contains(cells[1], "---") {
			continue
		}
		if strings.TrimSpace(cells[2]) == "" {
			t.Errorf("%s has no licence in the list", cells[1])
		}
		listed = append(listed, strings.TrimSpace(cells[1]))
	}
	out, err := exec.CommandContext(t.Context(), "go", "list", "-deps", "-f", "{{with .Module}}{{if not .Main}}{{.Path}}{{end}}{{end}}", ".").Output()
	if err != nil {
		t.Fatal(err)
	}
	used := slices.Compact(slices.Sorted(slices.Values(strings.Fields(string(out)))))
	used = append(used, "uplot (npm)")
	for _, m := range used {
		if !slices.Contains(listed, m) {
			t.Errorf("%s is compiled in and not in deploy/licences.md", m)
		}
	}
	for _, m := range listed {
		if !slices.Contains(used, m) {
			t.Errorf("%s is in deploy/licences.md and not compiled in", m)
		}
	}
}
