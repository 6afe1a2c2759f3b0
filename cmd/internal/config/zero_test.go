package config

import (
	"math"
	"strings"
	"testing"

	"throatwatch/monitor"
)

// The zeros of a bundle become those of the channels and part of the hash; without them a
// bundle is as it was. Zeros that cannot be are faults.
func TestZeros(t *testing.T) {
	b, cfg := load(t, example)
	at := func(s int64, offset float64) ZeroPoint {
		return ZeroPoint{T: monitor.Time(1e18 + 1e9*s), Offset: offset, U95: 5}
	}
	b.Zeros = []Zero{{"p7_1", []ZeroPoint{at(0, 100), at(10, 300)}}, {"dp_bellmouth", []ZeroPoint{at(0, -7)}}}
	got, faults := Parse(b.Marshal())
	if len(faults) > 0 {
		t.Fatal(faults)
	}
	if got.Hash == cfg.Hash {
		t.Error("the hash does not depend on the zeros")
	}
	for i := range got.Compute.Channels {
		ch := &got.Compute.Channels[i]
		want := 0.0
		switch ch.ID {
		case "p7_1":
			want = 200
		case "dp_bellmouth":
			want = -7
		}
		if v := ch.Zero.At(1e18 + 5e9); math.Abs(v-want) > 1e-9 || ch.Zero.Stated() != (want != 0) {
			t.Errorf("%s: zero %g, want %g", ch.ID, v, want)
		}
	}
	for _, tt := range []struct {
		zero Zero
		want string
	}{
		{Zero{"p7_9", []ZeroPoint{at(0, 1)}}, `no channel "p7_9"`},
		{Zero{"egt_1", []ZeroPoint{at(0, 1)}}, "is no pressure"},
		{Zero{"p7_1", nil}, "in order of time"},
		{Zero{"p7_1", []ZeroPoint{at(5, 1), at(0, 1)}}, "in order of time"},
		{Zero{"p7_1", []ZeroPoint{at(0, 1), at(1, 1), at(2, 1)}}, "in order of time"},
		{Zero{"p7_1", []ZeroPoint{{Offset: 3}}}, "at a time"},
	} {
		b.Zeros = []Zero{tt.zero}
		if _, faults := Parse(b.Marshal()); len(faults) != 1 || !strings.Contains(faults[0].Message, tt.want) {
			t.Errorf("%+v: faults %v, want %q", tt.zero, faults, tt.want)
		}
	}
}
