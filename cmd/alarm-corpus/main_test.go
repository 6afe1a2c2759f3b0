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
		{[]string{"--hours", "0"}, 2, "above 0"},
		{[]string{"example.yaml"}, 2, "no arguments"},
		{[]string{"--rig", "none.yaml"}, 1, "no file"},
	} {
		var out, errs bytes.Buffer
		if code := command(t.Context(), tt.args, &out, &errs); code != tt.code || !strings.Contains(errs.String(), tt.want) {
			t.Errorf("%v: exit %d, %q; want %d, %q", tt.args, code, errs.String(), tt.code, tt.want)
		}
	}
}
