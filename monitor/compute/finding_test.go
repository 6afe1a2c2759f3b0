package compute_test

import (
	"math"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
)

// atRest is what full reads of a stopped, cool engine.
func atRest() map[string]float64 {
	at := running()
	for _, id := range []string{"p_exit", "p7_1", "p7_2", "p7_3", "p7_4", "p_inlet", "dp_bellmouth", "speed", "fuel_flow", "thrust"} {
		at[id] = 0
	}
	for _, id := range []string{"t7_1", "t7_2", "t7_3", "t7_4", "egt_1", "egt_2", "egt_3", "egt_4"} {
		at[id] = 290
	}
	return at
}

// What a reading proves of its sensor, after one second and for as long as it does. The
// code of burn-out detection is a temperature beyond the range, that of a module fault is
// none. (Common practice, no source.)
func TestFailures(t *testing.T) {
	b := full(t)
	for i := range b.Channels {
		ch := &b.Channels[i]
		ch.Codes = []float64{1645, -9999}
		if ch.Unit.Dimension.String() == "temperature" {
			ch.Low, ch.High = 230, 1400
		}
	}
	for _, tt := range []struct {
		name, channel string
		change        func(r *rig)
		want          monitor.FindingKind
	}{
		{"burn-out code", "egt_2", func(r *rig) { r.set(map[string]float64{"egt_2": 1645}) }, monitor.FindingOpen},
		{"upscale without a code", "t7_1", func(r *rig) { r.set(map[string]float64{"t7_1": 1500}) }, monitor.FindingOpen},
		{"downscale", "t7_1", func(r *rig) { r.set(map[string]float64{"t7_1": 3}) }, monitor.FindingOpen},
		{"module fault", "egt_2", func(r *rig) { r.set(map[string]float64{"egt_2": -9999}) }, monitor.FindingCode},
		{"code of a pressure", "p7_1", func(r *rig) { r.set(map[string]float64{"p7_1": -9999}) }, monitor.FindingCode},
		{"beyond its range", "p_inlet", func(r *rig) { r.set(map[string]float64{"p_inlet": 2e9}) }, monitor.FindingRange},
		{"stuck", "p_baro", func(r *rig) { r.mark("p_baro", monitor.QualityStuck) }, monitor.FindingStuck},
		{"too fast", "speed", func(r *rig) { r.mark("speed", monitor.QualityRate) }, monitor.FindingRate},
		{"stale says nothing of it", "speed", func(r *rig) { r.mark("speed", monitor.QualityStale) }, monitor.NoFinding},
		{"its port is lost", "p7_1", func(r *rig) { r.mark("p_baro", monitor.QualityMissing) }, monitor.NoFinding},
	} {
		t.Run(tt.name, func(t *testing.T) {
			r := b.rig()
			r.set(running()).steps(20 * 5)
			at := r.index(tt.channel)
			tt.change(r)
			r.steps(20)
			if f := r.scan.Finding[at]; f.Kind != monitor.NoFinding {
				t.Errorf("found %v within a second", f.Kind)
			}
			since := r.scan.T
			r.step()
			f := r.scan.Finding[at]
			if f.Kind != tt.want || f.Proven != (tt.want != monitor.NoFinding) || f.Proven && since-f.Since > second {
				t.Errorf("found %+v, want %v", f, tt.want)
			}
			for i := range r.scan.Finding {
				if i != at && r.scan.Finding[i].Kind != monitor.NoFinding {
					t.Errorf("%s: %v", b.Channels[i].ID, r.scan.Finding[i].Kind)
				}
			}
			r.set(running())
			r.mark(tt.channel, monitor.QualityGood).mark("p_baro", monitor.QualityGood)
			if r.steps(22); r.scan.Finding[at].Kind != monitor.NoFinding {
				t.Errorf("found %v once it is right again", r.scan.Finding[at].Kind)
			}
		})
	}
}

// A pressure that does not read zero at rest is off; a cell whose fans draw is not. 95 %
// uncertainties here are 1.1 Pa, to which 50 Pa of draught come.
func TestZeroAtRest(t *testing.T) {
	for _, tt := range []struct {
		name string
		off  map[string]float64
		want map[string]float64 // Pa
	}{
		{"all right", nil, nil},
		{"one probe", map[string]float64{"p7_2": 200}, map[string]float64{"p7_2": 200}},
		{"within draught and uncertainty", map[string]float64{"p7_2": 50}, nil},
		{"two of seven", map[string]float64{"p7_2": -200, "p_exit": 150}, map[string]float64{"p7_2": -200, "p_exit": 150}},
		{"fans draw 300 Pa", map[string]float64{"p7_1": -300, "p7_2": -300, "p7_3": -300, "p7_4": -300, "p_exit": -300, "p_inlet": -300}, nil},
		{"fans, and one is off", map[string]float64{"p7_1": -300, "p7_2": -300, "p7_3": -300, "p7_4": -100, "p_exit": -300, "p_inlet": -300}, map[string]float64{"p7_4": 200}},
		{"bellmouth", map[string]float64{"dp_bellmouth": 80}, map[string]float64{"dp_bellmouth": 80}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := full(t)
			r := b.rig()
			r.set(atRest()).set(tt.off)
			r.steps(20 * 10)
			if r.p.Phase != monitor.Off {
				t.Fatalf("phase %v", r.p.Phase)
			}
			for i := range b.Channels {
				f, want := r.scan.Finding[i], tt.want[b.Channels[i].ID]
				if want == 0 && f.Kind != monitor.NoFinding || want != 0 && (f.Kind != monitor.FindingZero || !f.Proven || math.Abs(f.Size-want) > 1) {
					t.Errorf("%s: %+v, want %g Pa", b.Channels[i].ID, f, want)
				}
			}
			// It is told while the engine runs too, until a rest shows another zero.
			r.set(running()).steps(20 * 5)
			for id := range tt.want {
				if f := r.scan.Finding[r.index(id)]; f.Kind != monitor.FindingZero {
					t.Errorf("%s: %v while it runs", id, f.Kind)
				}
			}
			r.set(atRest()).steps(20 * 20)
			for i := range b.Channels {
				if f := r.scan.Finding[i]; f.Kind != monitor.NoFinding {
					t.Errorf("%s: %+v with the zero set right", b.Channels[i].ID, f)
				}
			}
		})
	}
}

// An absolute pressure is held against the barometer, with the uncertainties of both.
func TestZeroOfAbsolute(t *testing.T) {
	for off, want := range map[float64]monitor.FindingKind{200: monitor.FindingZero, 130: monitor.NoFinding} {
		b := full(t)
		ch := &b.Channels[b.Stations.P7[0]]
		ch.Reference, ch.Port = calib.Absolute, -1
		b.Channels[b.Stations.Barometer].Uncertainty.Fixed = 100
		r := b.rig()
		at := atRest()
		r.set(at).set(map[string]float64{"p7_1": at["p_baro"] + off})
		r.steps(20 * 10)
		if f := r.scan.Finding[r.index("p7_1")]; f.Kind != want {
			t.Errorf("%g Pa off: %v, want %v", off, f.Kind, want)
		}
	}
}
