package compute_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/rake"
	"throatwatch/monitor/uncertainty"
)

// Weights: p7 = Σ w p/Σ w.
func TestWeights(t *testing.T) {
	b := full(t)
	b.Stations.P7Watch.Weights = []float64{1, 2, 3, 4}
	b.Stations.T7Watch.Weights = []float64{4, 0.5, 0.5, 1}
	p := b.rig().set(running()).step()
	compare(t, "weighted", p, 1e-12, map[monitor.Quantity]float64{
		monitor.RakePressure:     99800 + (130e3+2*130.4e3+3*129.8e3+4*130.2e3)/10,
		monitor.TotalTemperature: (4*880 + 0.5*890 + 0.5*885 + 881) / 6.0,
	})
}

// The sampling error is a line of its own: s/√n of the pattern, of the pressures 130, 130.4,
// 129.8, 130.2 kPa and without any other uncertainty. A stated one replaces it, and one
// probe has none.
func TestSampling(t *testing.T) {
	at := func(stated float64, probes int) float64 {
		b := only(full(t), "", calib.Uncertainty{})
		b.Stations.P7Watch.Sampling = stated
		b.Stations.P7, b.Stations.MinP7 = b.Stations.P7[:probes], 1
		p := b.rig().set(running()).steps(2)
		return p.V[monitor.NPRU95] * p.V[monitor.BackPressure] / uncertainty.Coverage
	}
	s := math.Sqrt((100*100 + 300*300 + 300*300 + 100*100) / 3.0)
	for _, tt := range []struct {
		name      string
		got, want float64
	}{{"of four", at(0, 4), s / 2}, {"stated", at(70, 4), 70}, {"one", at(0, 1), 0}, {"one, stated", at(70, 1), 70}} {
		if math.Abs(tt.got-tt.want) > 1e-4*s {
			t.Errorf("%s: %g Pa, want %g", tt.name, tt.got, tt.want)
		}
	}
}

// learned is full after a minute of steady running, patterns known.
func learned(b *builder) *rig {
	r := b.rig().lit(100)
	r.steps(60 * 20)
	return r
}

// A probe that fails by proof leaves no step, is marked excluded once it reads
// plausibly again, and counts again after 6 s without fault, in the harness 3 s.
func TestProofLeavesNoStep(t *testing.T) {
	for _, id := range []string{"p7_2", "t7_2", "egt_4"} {
		r := learned(full(t))
		quantity := map[byte]monitor.Quantity{'p': monitor.RakePressure, 't': monitor.TotalTemperature, 'e': monitor.EGTIndicated}[id[0]]
		before := r.p.V[quantity]
		back := 40 + 20*(1+5) // proof is gone after 1 s
		if id == "egt_4" {
			back = 40 + 20*(1+2)
		}
		for n := range 20 * 40 {
			if n < 40 {
				r.mark(id, monitor.QualityOutOfRange)
			} else {
				r.set(map[string]float64{id: running()[id]})
			}
			p := r.step()
			if d := p.V[quantity]/before - 1; math.Abs(d) > 1e-9 {
				t.Fatalf("%s, scan %d: a step of %g", id, n, d)
			}
			q := r.scan.Quality[r.index(id)]
			if out := q == monitor.QualityExcluded && math.IsNaN(r.scan.Value[r.index(id)]); n >= 40 && n != back && out != (n < back) {
				t.Fatalf("%s, scan %d: %v, %v", id, n, q, r.scan.Value[r.index(id)])
			}
		}
	}
}

// A departure from its own pattern takes a probe of a rake out, held 3 s; the mean then
// stands where it was. A hot EGT probe stays, and raises the indicated EGT by its part;
// a cold one is taken out where a departure is stated.
func TestDeparture(t *testing.T) {
	for _, tt := range []struct {
		id       string
		by       float64
		quantity monitor.Quantity
		out      bool
	}{
		{"p7_3", 3000, monitor.RakePressure, true},
		{"p7_3", -3000, monitor.RakePressure, true},
		{"p7_3", 900, monitor.RakePressure, false},
		{"t7_1", 80, monitor.TotalTemperature, true},
		{"egt_1", 80, monitor.EGTIndicated, false},
		{"egt_1", -80, monitor.EGTIndicated, true},
	} {
		b := full(t)
		b.Stations.P7Watch.Departure, b.Stations.T7Watch.Departure, b.Stations.EGTWatch.Departure = 2000, 40, 40
		r := learned(b)
		before := r.p.V[tt.quantity]
		r.set(map[string]float64{tt.id: running()[tt.id] + tt.by})
		for n := range 20 * 10 {
			p := r.step()
			moved := p.V[tt.quantity] - before
			want := tt.by / 4
			if tt.out && n > 20*6 {
				want = 0
			}
			if tt.out && n > 20*3 && n <= 20*6 {
				continue // within the filter of the departure
			}
			if math.Abs(moved-want) > 0.002*math.Abs(tt.by) {
				t.Fatalf("%s %+g, scan %d: moved by %g, want %g", tt.id, tt.by, n, moved, want)
			}
		}
		if out := r.scan.Quality[r.index(tt.id)] == monitor.QualityExcluded; out != tt.out {
			t.Errorf("%s %+g: excluded %v", tt.id, tt.by, out)
		}
	}
	// Without a stated departure none is judged.
	r := learned(full(t))
	if r.set(map[string]float64{"p7_3": 160e3}).steps(200); r.p.RakeProbesUsed != 4 {
		t.Errorf("%d probes used", r.p.RakeProbesUsed)
	}
}

// A clean rake of eight probes with noise, pattern and a slow swing of power loses no
// probe in an hour.
func TestCleanRakeOfAnHour(t *testing.T) {
	b := full(t)
	st := &b.Stations
	for k := 5; k <= 8; k++ {
		st.P7 = append(st.P7, b.add(fmt.Sprintf("p7_%d", k), "Pa", calib.Gauge, st.Barometer))
	}
	st.MinP7 = 6
	st.P7Watch.Departure = 2000
	r := b.rig().lit(100)
	random := rand.New(rand.NewPCG(11, 11))
	pattern := []float64{500, -300, 200, -650, 100, 450, -200, -100}
	readings := map[string]float64{}
	for n := range 3600 * 20 {
		swing := 1 + 0.1*math.Sin(2*math.Pi*float64(n)/(20*400))
		for k, d := range pattern {
			readings[fmt.Sprintf("p7_%d", k+1)] = (130e3+d)*swing + 150*random.NormFloat64()
		}
		r.set(readings)
		if p := r.step(); p.RakeProbesUsed != 8 || p.PressureBy != monitor.SourceRake {
			t.Fatalf("scan %d: %d probes", n, p.RakeProbesUsed)
		}
	}
}

// Of a gauge rake whose barometer is lost no probe is to blame, and none is excluded.
func TestLostReferenceExcludesNone(t *testing.T) {
	r := learned(full(t))
	r.mark("p_baro", monitor.QualityStale).steps(100)
	r.set(map[string]float64{"p_baro": 99800})
	if p := r.step(); p.RakeProbesUsed != 4 || slices.Contains(r.scan.Quality, monitor.QualityExcluded) {
		t.Errorf("%d probes used, %v", p.RakeProbesUsed, r.scan.Quality)
	}
}

// A probe that was taken for broken and is not comes back on request: at once after a proof
// that is gone, and with its new place after a departure; the mean does not step by it. A
// proof that stands is a refusal with its reason.
func TestReadmit(t *testing.T) {
	b := full(t)
	b.Stations.P7Watch.Departure = 2000
	b.Stations.P7Watch.Return = 1000 * second
	r := learned(b)
	at := r.index("p7_3")
	if err := r.c.Readmit(&r.s, at); !errors.Is(err, rake.ErrNotOut) {
		t.Errorf("not out: %v", err)
	}
	if err := r.c.Readmit(&r.s, r.index("speed")); !errors.Is(err, compute.ErrNoProbe) {
		t.Errorf("no probe: %v", err)
	}
	if err := r.c.Readmit(&compute.State{}, at); !errors.Is(err, rake.ErrNotOut) {
		t.Errorf("before the first scan: %v", err)
	}
	r.mark("p7_3", monitor.QualityOutOfRange).steps(60)
	if err := r.c.Readmit(&r.s, at); !errors.Is(err, rake.ErrProven) || !strings.Contains(err.Error(), "out of range") || r.step().RakeProbesUsed != 3 {
		t.Errorf("proven: %v", err)
	}
	if p := r.set(running()).steps(60); p.RakeProbesUsed != 3 {
		t.Fatalf("%d probes before", p.RakeProbesUsed)
	}
	if err := r.c.Readmit(&r.s, at); err != nil || r.step().RakeProbesUsed != 4 || r.scan.Quality[at] != monitor.QualityGood {
		t.Errorf("back: %v, %d probes", err, r.p.RakeProbesUsed)
	}
	r.set(map[string]float64{"p7_3": 140e3})
	if p := r.steps(20 * 10); p.RakeProbesUsed != 3 || r.s.P7.Probes[2].Out != rake.ByDeparture {
		t.Fatalf("10 kPa off: %d probes", p.RakeProbesUsed)
	}
	before := r.p.V[monitor.RakePressure]
	if err := r.c.Readmit(&r.s, at); err != nil {
		t.Error(err)
	}
	for range 20 * 45 {
		p := r.step()
		// It is in the mean after 30 s; that then moves to the plain one over 300 s.
		if d := p.V[monitor.RakePressure] - before; p.RakeProbesUsed != 4 || math.Abs(d) > 10e3/4*15/300*1.1 {
			t.Fatalf("%d probes, p7 moves by %g Pa", p.RakeProbesUsed, d)
		}
	}
	if o := r.s.P7.Probes[2].Offset; math.Abs(o-10e3) > 1200 {
		t.Errorf("its new place is %g Pa off the mean", o)
	}
}
