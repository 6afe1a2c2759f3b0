package compute

import (
	"math"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/unit"
)

// The straight line between two points, by hand.
func TestZeroAt(t *testing.T) {
	line := Zero{[2]ZeroPoint{{100, 10, 1}, {300, 50, 1}}}
	same := Zero{[2]ZeroPoint{{100, -7, 1}, {100, -7, 1}}}
	for _, tt := range []struct {
		name string
		z    *Zero
		t    int64
		want float64
	}{
		{"none", &Zero{}, 200, 0},
		{"before", &line, 0, 10},
		{"at the first", &line, 100, 10},
		{"a quarter", &line, 150, 20},
		{"half", &line, 200, 30},
		{"at the last", &line, 300, 50},
		{"after", &line, 1e18, 50},
		{"one point, before", &same, 0, -7},
		{"one point, after", &same, 900, -7},
	} {
		if got := tt.z.At(tt.t); math.Abs(got-tt.want) > 1e-12 {
			t.Errorf("%s: %g, want %g", tt.name, got, tt.want)
		}
	}
	if line.Stated() == (&Zero{}).Stated() {
		t.Error("a zero that is none is stated")
	}
}

// A gauge channel loses its offset before the barometer is added, by the event time of the
// sample and not of the scan: 1000 Pa less 10 Pa and half of the way to 50 Pa.
func TestZeroIsSubtracted(t *testing.T) {
	pa, err := unit.Parse("Pa")
	if err != nil {
		t.Fatal(err)
	}
	cfg := Config{Channels: []Channel{
		{ID: "baro", Spec: calib.Spec{Raw: pa, Unit: pa, Port: -1, High: 110e3, Reference: calib.Absolute}},
		{ID: "gauge", Spec: calib.Spec{Raw: pa, Unit: pa, Port: 0, High: 110e3, Reference: calib.Gauge}, Zero: Zero{[2]ZeroPoint{{0, 10, 1}, {2e9, 50, 1}}}},
	}}
	c := Computer{cfg: cfg, order: []int{0, 1}}
	s := State{Channels: make([]ChannelState, 2)}
	scan := monitor.NewScan(2)
	scan.T = 1_500_000_000
	scan.Raw[0], scan.Quality[0] = 100e3, monitor.QualityGood
	scan.Raw[1], scan.Quality[1], scan.Age[1] = 1000, monitor.QualityHeld, 500_000_000
	c.calibrate(&s, scan)
	if want := 100e3 + 1000 - 30; math.Abs(scan.Value[1]-want) > 1e-9 || scan.Value[0] != 100e3 {
		t.Errorf("gauge %g, want %g; barometer %g", scan.Value[1], want, scan.Value[0])
	}
}
