package main

import (
	"bytes"
	"strings"
	"testing"
)

func TestUsage(t *testing.T) {
	for _, tt := range []struct {
		args []string
		code int
		want string
	}{
		{[]string{"example.yaml"}, 2, "no arguments"},
		{[]string{"--for", "ever"}, 2, "ever"},
		{[]string{"--rig", "none.yaml"}, 1, "none.yaml"},
		{[]string{"--rig", "../../testdata/rigs/example.yaml", "--program", "/nowhere/throatwatch"}, 1, "/nowhere/throatwatch"},
	} {
		var out, errs bytes.Buffer
		if code := command(t.Context(), tt.args, &out, &errs); code != tt.code || !strings.Contains(errs.String(), tt.want) {
			t.Errorf("%v: exit %d, %q; want %d, %q", tt.args, code, errs.String(), tt.code, tt.want)
		}
	}
}
