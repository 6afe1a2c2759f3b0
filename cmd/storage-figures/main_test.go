package main

import (
	"bytes"
	"strings"
	"testing"
	"time"
)

// TestShort measures a short run. What a machine does not change is as promised; how
// fast this one is under the tests says nothing.
func TestShort(t *testing.T) {
	list, err := measure(t.Context(), options{rig: "../../testdata/rigs/example.yaml", channels: 60, rate: 100, length: 2 * time.Minute, dir: t.TempDir()}, func(string) {})
	if err != nil {
		t.Fatal(err)
	}
	promised := 0
	for i := range list {
		f := &list[i]
		if !f.timed && !f.kept() {
			t.Errorf("%s: %.4g %s", f.name, f.value, f.unit)
		}
		if f.least+f.most > 0 {
			promised++
		}
		if !(f.value > 0) {
			t.Errorf("%s is %g", f.name, f.value)
		}
	}
	if promised != 12 {
		t.Errorf("%d promises are measured, 12 are due", promised)
	}
	var b bytes.Buffer
	if err := write(&b, append(list, figure{name: "of a test", value: 3, most: 2}, figure{name: "of another", value: 3, least: 4})); err != nil {
		t.Fatal(err)
	}
	if n := strings.Count(b.String(), "not kept"); n < 2 || !strings.Contains(b.String(), "run file per value received") {
		t.Errorf("%d promises are told as not kept:\n%s", n, b.String())
	}
}

func TestWrongUse(t *testing.T) {
	for _, tt := range []struct {
		args []string
		want string
		code int
	}{
		{[]string{"run"}, "takes no arguments", 2},
		{[]string{"--length", "1m"}, "at least 2m", 2},
		{[]string{"--rig", "/nowhere.yaml"}, "/nowhere.yaml", 1},
	} {
		var stdout, stderr bytes.Buffer
		if code := command(t.Context(), tt.args, &stdout, &stderr); code != tt.code || !strings.Contains(stderr.String(), tt.want) {
			t.Errorf("%q: exit code %d: %s", tt.args, code, stderr.String())
		}
	}
}
