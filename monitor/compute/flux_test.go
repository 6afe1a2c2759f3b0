package compute_test

import (
	"maps"
	"math"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/rake"
)

// fluxed is full with mass-flux weights and a wall tap that reads 0.94 of the mean of p7.
func fluxed(tb testing.TB) *rig {
	tb.Helper()
	b := full(tb)
	b.Stations.WallStatic = []int{b.add("p7_wall", "Pa", calib.Gauge, b.Stations.Barometer)}
	b.Channels[b.Stations.WallStatic[0]].Uncertainty = calib.Uncertainty{Fixed: 1, Random: 0.5, Stated: true}
	b.Stations.P7Flux, b.Stations.T7Flux = true, true
	b.Stations.T7Watch.Weights = []float64{1, 2, 2, 1}
	r := b.rig().set(profile())
	for range 1200 { // twelve times 5 s
		r.step()
	}
	return r
}

// profile is running with a boundary layer at probes 1 and 4, which are cooler.
func profile() map[string]float64 {
	out := running()
	maps.Copy(out, map[string]float64{
		"p7_1": 124e3, "p7_2": 132e3, "p7_3": 131e3, "p7_4": 125e3, "t7_1": 840, "t7_2": 900, "t7_3": 905, "t7_4": 850, "p7_wall": 115e3,
	})
	return out
}

// T7 = Σ a ρV T/Σ a ρV, p7 = Σ ρV p/Σ ρV with the mass flux at each place after NACA
// Report 1135 (rake.MassFlux, which has its own test): against weights computed here from
// the incompressible √(Δp/T), which is 1 % off in the ratio of these and moves the mean by
// 0.1 K.
func TestMassFluxWeights(t *testing.T) {
	r := fluxed(t)
	p := &r.p
	baro, read := 99800.0, profile()
	var flow, mean, all, pressure, weights float64
	for k, id := range []string{"_1", "_2", "_3", "_4"} {
		head := read["p7"+id] - read["p7_wall"]
		w := []float64{1, 2, 2, 1}[k] * math.Sqrt(head/read["t7"+id])
		mean, all = mean+w*read["t7"+id], all+w
		flow = rake.MassFlux(baro+read["p7"+id], baro+read["p7_wall"], 1, 1.33, 1)
		pressure, weights = pressure+flow*(baro+read["p7"+id]), weights+flow
	}
	if got := p.V[monitor.TotalTemperature]; math.Abs(got-mean/all) > 0.15 {
		t.Errorf("T7 %.3f K, want %.3f", got, mean/all)
	}
	if plain := (840 + 2*900 + 2*905 + 850) / 6.0; math.Abs(mean/all-plain) < 2 {
		t.Errorf("the weights make %.2f K of %.2f: nothing to test", mean/all, plain)
	}
	compare(t, "p7", p, 5e-8, map[monitor.Quantity]float64{monitor.RakePressure: pressure / weights})
	if p.Warnings&monitor.WarnWeightsHeld != 0 {
		t.Error("weights held with everything there")
	}
}

// Whatever the weights are formed from may go and come, and the power may move meanwhile: the
// weights are held and named, and nothing steps. A wall that stays away has the weights of
// before.
func TestMassFluxFallsBackWithoutAStep(t *testing.T) {
	for _, lost := range [][]string{{"p7_wall"}, {"t7_2"}, {"p7_3"}, {"p7_wall", "t7_4"}} {
		r := fluxed(t)
		last := r.p
		for n := range 60 * 20 {
			if n == 20 {
				for _, id := range lost {
					r.mark(id, monitor.QualityOutOfRange)
				}
			}
			if n == 40*20 {
				r.set(profile())
			}
			p := r.step()
			for _, q := range []monitor.Quantity{monitor.TotalTemperature, monitor.RakePressure} {
				if d := p.V[q]/last.V[q] - 1; math.Abs(d) > 1e-5 {
					t.Fatalf("%v lost, scan %d: %s steps by %g", lost, n, q.Info().Name, d)
				}
			}
			// The place of a probe that is lost is filled by its pattern, so that the weights go on.
			if held := p.Warnings&monitor.WarnWeightsHeld != 0; held != (lost[0] == "p7_wall" && n >= 20 && n < 40*20) {
				t.Fatalf("%v lost, scan %d: held %v", lost, n, held)
			}
			last = *p
		}
	}
	// From the first scan without a wall the areas weigh.
	b := full(t)
	b.Stations.WallStatic = []int{b.add("p7_wall", "Pa", calib.Gauge, b.Stations.Barometer)}
	b.Stations.T7Flux, b.Stations.T7Watch.Weights = true, []float64{1, 2, 2, 1}
	r := b.rig().set(profile()).mark("p7_wall", monitor.QualityStale)
	compare(t, "areas", r.steps(100), 1e-12, map[monitor.Quantity]float64{monitor.TotalTemperature: (840 + 2*900 + 2*905 + 850) / 6.0})
	if r.p.Warnings&monitor.WarnWeightsHeld == 0 {
		t.Error("areas weigh unnamed")
	}
	// At rest there is no flow to weigh by, and nothing amiss.
	for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4", "p7_wall"} {
		r.set(map[string]float64{id: -250})
	}
	if r.step(); r.p.Warnings&monitor.WarnWeightsHeld != 0 {
		t.Error("held at rest")
	}
}

// The random errors of the probes come in with the live weights.
func TestMassFluxUncertainty(t *testing.T) {
	at := func(flux bool) float64 {
		b := only(full(t), "", calib.Uncertainty{})
		b.Stations.WallStatic = []int{b.add("p7_wall", "Pa", calib.Gauge, b.Stations.Barometer)}
		b.Stations.P7Flux = flux
		b.Stations.P7Watch.Sampling, b.Stations.T7Watch.Sampling = 1e-12, 1e-12
		for _, i := range b.Stations.P7 {
			b.Channels[i].Uncertainty = calib.Uncertainty{Random: 300, Stated: true}
		}
		p := b.rig().set(profile()).steps(1200)
		return p.V[monitor.NPRU95] * p.V[monitor.BackPressure] / 300
	}
	read := profile()
	var w, square float64
	for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
		flow := rake.MassFlux(99800+read[id], 99800+read["p7_wall"], 1, 1.33, 1)
		w, square = w+flow, square+flow*flow
	}
	if got, want := at(true), math.Sqrt(square)/w; !near(got, want, 1e-4) || !near(at(false), 0.5, 1e-4) {
		t.Errorf("%g of a probe's, want %g; without weights %g", got, want, at(false))
	}
}

// Weights that cannot be formed are refused.
func TestMassFluxNeedsAWall(t *testing.T) {
	b := full(t)
	b.Stations.T7Flux = true
	if _, err := compute.New(b.Config); err == nil {
		t.Error("without a wall static pressure")
	}
	b.Stations.WallStatic = []int{b.add("p7_wall", "Pa", calib.Gauge, b.Stations.Barometer)}
	b.Stations.T7 = b.Stations.T7[:3]
	if _, err := compute.New(b.Config); err == nil {
		t.Error("three probes of t7 beside four of p7")
	}
}
