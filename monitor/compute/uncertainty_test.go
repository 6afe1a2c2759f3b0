package compute_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/uncertainty"
)

// state gives every channel of full an uncertainty of its kind.
func state(b *builder) *builder {
	for i := range b.Channels {
		u := &b.Channels[i].Uncertainty
		*u = calib.Uncertainty{Stated: true}
		switch id := b.Channels[i].ID; {
		case id == "p_baro":
			u.Fixed, u.Random = 100, 20
		case id == "p_exit":
			u.Fixed, u.Random = 35, 10
		case id[:2] == "p7":
			u.Fixed, u.Random = 130, 300
		case id[:2] == "t7":
			u.Fixed, u.Random = 5, 2
		case id == "fuel_flow":
			u.Reading = 0.01
		case id == "humidity":
			u.Fixed = 0.05
		default:
			u.Fixed, u.Random = 1, 0.5
		}
	}
	return b
}

// The U95 of the margin, the flow and the thrust against a Monte Carlo run
// through Step itself [JCGM 101]: every reading is moved by errors drawn from
// what the rig file states, systematic ones shared by the probes of a group and by
// all that refers to the barometer. 1.96 s of 4000 draws has a standard deviation of
// 1.1 %; first order may leave 2 %.
func TestMonteCarlo(t *testing.T) {
	const draws = 4000
	for _, tt := range []struct {
		name  string
		gauge float64
		exit  bool
		fuel  float64
	}{
		{"choked, exit plane", 130e3, true, 0.14},
		{"choked, barometer less depression", 130e3, false, 0.14},
		{"unchoked, exit plane", 45e3, true, 0.08},
		{"unchoked, barometer less depression", 45e3, false, 0.08},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := state(full(t))
			if !tt.exit {
				b.Stations.ExitPlane = -1
			}
			// The area, discharge and model are constants of the rig: left out of the
			// draws, and of the statement by making them as small as can be.
			n := &b.Nozzle
			n.AreaU95, n.DischargeU95, n.ThrustU95, n.ChokeNPRU95 = 1e-12, 1e-12, 1e-12, 1e-12
			base := running()
			for k := range 4 {
				base[fmt.Sprintf("p7_%d", k+1)] = tt.gauge
			}
			base["fuel_flow"] = tt.fuel
			r := b.rig().set(base)
			p := r.steps(4)
			stated := [3]float64{p.V[monitor.ChokeMarginPercentU95], p.V[monitor.MassFlowU95], p.V[monitor.GrossThrustU95]}
			low, high := p.V[monitor.ChokeMarginPercentLow95], p.V[monitor.ChokeMarginPercentHigh95]
			quantities := [3]monitor.Quantity{monitor.ChokeMarginPercent, monitor.MassFlow, monitor.GrossThrust}

			rng := rand.New(rand.NewPCG(1, 1))
			one := func(u95 float64) float64 { return u95 / uncertainty.Coverage * rng.NormFloat64() }
			var sum, squares [3]float64
			var margins []float64
			for range draws {
				moved := map[string]float64{}
				baro, rake, temperature := one(100)+one(20), one(130), one(5)
				moved["p_baro"] = base["p_baro"] + baro
				for k := range 4 {
					id := fmt.Sprintf("_%d", k+1)
					moved["p7"+id] = base["p7"+id] + rake + one(300)
					moved["t7"+id] = base["t7"+id] + temperature + one(2)
				}
				if tt.exit {
					moved["p_exit"] = base["p_exit"] + one(35) + one(10)
				}
				moved["fuel_flow"] = base["fuel_flow"] + one(0.01*tt.fuel)
				moved["humidity"] = min(max(base["humidity"]+one(0.05), 0), 1)
				if !tt.exit {
					// The depression is an entry, which no reading can move. Its error e moves pb
					// alone: the same as a barometer off by −e with gauges off by +e.
					e := one(200)
					moved["p_baro"] -= e
					for k := range 4 {
						moved[fmt.Sprintf("p7_%d", k+1)] += e
					}
				}
				r.set(moved)
				p := r.step()
				margins = append(margins, p.V[monitor.ChokeMarginPercent])
				for i, q := range quantities {
					d := p.V[q]
					sum[i] += d
					squares[i] += d * d
				}
			}
			// The bounds are quantiles; one of 4000 draws has a standard deviation of 0.02 U95.
			slices.Sort(margins)
			for _, c := range []struct{ stated, drawn float64 }{
				{low, margins[draws/40]}, {high, margins[draws-draws/40]},
			} {
				if math.Abs(c.stated-c.drawn) > 0.07*stated[0] {
					t.Errorf("bound of the margin %.5g, the Monte Carlo gives %.5g", c.stated, c.drawn)
				}
			}
			for i, q := range quantities {
				mean := sum[i] / draws
				u95 := uncertainty.Coverage * math.Sqrt(squares[i]/draws-mean*mean)
				if !near(stated[i], u95, 0.05) {
					t.Errorf("%s: U95 %.5g, the Monte Carlo gives %.5g", q.Info().Name, stated[i], u95)
				}
			}
		})
	}
}

// only states one uncertainty, and the others as none.
func only(b *builder, id string, u calib.Uncertainty) *builder {
	for i := range b.Channels {
		b.Channels[i].Uncertainty = calib.Uncertainty{Stated: true}
		if b.Channels[i].ID == id {
			u.Stated = true
			b.Channels[i].Uncertainty = u
		}
	}
	n := &b.Nozzle
	n.AreaU95, n.DischargeU95, n.ThrustU95, n.ChokeNPRU95 = 1e-12, 1e-12, 1e-12, 0
	b.Stations.DepressionU = 1e-9
	n.DuctLoss = 0
	return b
}

// The barometer is one error of rake and back pressure, not two. By hand, with
// NPR = (g + B)/(x + B): dNPR/dB = (1 − NPR)/pb; a rake that is absolute leaves
// −NPR/pb.
func TestSharedBarometer(t *testing.T) {
	absolute := func(b *builder) {
		for _, i := range b.Stations.P7 {
			b.Channels[i].Reference, b.Channels[i].Port = calib.Absolute, -1
		}
	}
	const B, gauge, exit = 99800.0, 130e3, -250.0
	npr, pb := (gauge+B)/(B+exit), B+exit
	for _, tt := range []struct {
		name   string
		change func(*builder)
		rake   float64
		u, npr float64 // stated, and that of NPR
	}{
		{"rake and exit plane against it", func(*builder) {}, gauge, 100, (npr - 1) / pb * 100},
		{"rake and barometer less depression", func(b *builder) { b.Stations.ExitPlane = -1 }, gauge, 100, (npr - 1) / pb * 100},
		{"an absolute rake", absolute, gauge + B, 100, npr / pb * 100},
		{"an absolute rake and the barometer less depression", func(b *builder) { absolute(b); b.Stations.ExitPlane = -1 }, gauge + B, 100, npr / pb * 100},
		{"an absolute exit plane", func(b *builder) {
			b.Channels[b.Stations.ExitPlane].Reference, b.Channels[b.Stations.ExitPlane].Port = calib.Absolute, -1
		}, gauge, 100, 1 / pb * 100},
		{"a rake against the exit plane, over which the barometer comes in too", func(b *builder) {
			for _, i := range b.Stations.P7 {
				b.Channels[i].Port = b.Stations.ExitPlane
			}
		}, gauge - exit, 100, (npr - 1) / pb * 100},
		{"systematic and random parts together", func(b *builder) { b.Channels[0].Uncertainty.Random = 75 }, gauge, 100, (npr - 1) / pb * 125},
	} {
		b := only(full(t), "p_baro", calib.Uncertainty{Fixed: tt.u})
		tt.change(b)
		r := b.rig().set(running())
		for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
			r.set(map[string]float64{id: tt.rake})
		}
		if b.Channels[b.Stations.P7[0]].Reference == calib.Gauge && b.Stations.ExitPlane >= 0 && b.Channels[b.Stations.ExitPlane].Reference == calib.Absolute {
			r.set(map[string]float64{"p_exit": pb})
		}
		p := r.steps(2)
		if !near(p.V[monitor.NPR], npr, 1e-12) || !near(p.V[monitor.NPRU95], tt.npr, 1e-5) {
			t.Errorf("%s: NPR %.9g ± %.6g, want %.9g ± %.6g", tt.name, p.V[monitor.NPR], p.V[monitor.NPRU95], npr, tt.npr)
		}
		if want := 100 / p.V[monitor.ChokeNPR] * tt.npr; !near(p.V[monitor.ChokeMarginPercentU95], want, 1e-4) {
			t.Errorf("%s: margin ± %.6g %%, want %.6g", tt.name, p.V[monitor.ChokeMarginPercentU95], want)
		}
	}
	// A port between rake and barometer that the back pressure does not refer to is
	// an error of the rake alone.
	b := only(full(t), "p_inlet", calib.Uncertainty{Fixed: 80})
	for _, i := range b.Stations.P7 {
		b.Channels[i].Port = b.Stations.InletP
	}
	p := b.rig().set(running()).steps(2)
	if want := 80 / p.V[monitor.BackPressure]; !near(p.V[monitor.NPRU95], want, 1e-6) {
		t.Errorf("NPR ± %g by the port of the rake, want %g", p.V[monitor.NPRU95], want)
	}
}

// Four probes of one kind: what they share stays, what differs is halved.
func TestMeanOfProbes(t *testing.T) {
	for _, tt := range []struct {
		name string
		u    calib.Uncertainty
		used int
		want float64 // U95 of the mean, Pa
	}{
		{"systematic", calib.Uncertainty{Fixed: 130}, 4, 130},
		{"random", calib.Uncertainty{Random: 300}, 4, 150},
		{"random, three left", calib.Uncertainty{Random: 300}, 3, 300 / math.Sqrt(3)},
		{"both", calib.Uncertainty{Fixed: 80, Random: 120}, 4, 100},
	} {
		b := only(full(t), "", calib.Uncertainty{})
		tt.u.Stated = true
		for _, i := range b.Stations.P7 {
			b.Channels[i].Uncertainty = tt.u
		}
		r := b.rig().set(running())
		if tt.used == 3 {
			r.mark("p7_4", monitor.QualityStale)
		}
		p := r.steps(2)
		if want := tt.want / p.V[monitor.BackPressure]; !near(p.V[monitor.NPRU95], want, 1e-6) {
			t.Errorf("%s: NPR ± %g, want %g", tt.name, p.V[monitor.NPRU95], want)
		}
	}
	// Full scale and reading are those of the channel, the reading without its
	// reference: 0.05 % of 260 kPa and 0.05 % of 130 kPa gauge.
	b := only(full(t), "", calib.Uncertainty{})
	for _, i := range b.Stations.P7 {
		b.Channels[i].Low, b.Channels[i].High = -10e3, 250e3
		b.Channels[i].Uncertainty = calib.Uncertainty{FullScale: 5e-4, Reading: 5e-4, Stated: true}
	}
	r := b.rig().set(running()).set(map[string]float64{"p7_1": 130e3, "p7_2": 130e3, "p7_3": 130e3, "p7_4": 130e3})
	p := r.steps(2)
	if want := math.Hypot(130, 65) / p.V[monitor.BackPressure]; !near(p.V[monitor.NPRU95], want, 1e-6) {
		t.Errorf("NPR ± %g, want %g", p.V[monitor.NPRU95], want)
	}
}

// Where an uncertainty that is needed was not stated there is none, never a small
// one; the values themselves stay.
func TestNotStated(t *testing.T) {
	u95 := []monitor.Quantity{
		monitor.NPRU95, monitor.ChokeMarginPercentU95, monitor.ChokeMarginPercentLow95, monitor.ChokeMarginPercentHigh95,
		monitor.MassFlowU95, monitor.GrossThrustU95, monitor.PChoked, monitor.IndependentFlowU95,
	}
	p := full(t).rig().set(running()).steps(3)
	for _, q := range u95 {
		if _, ok := p.Get(q); !ok {
			t.Errorf("with everything stated there is no %s", q.Info().Name)
		}
	}
	all := func(ids ...string) func(*builder) {
		return func(b *builder) {
			for i := range b.Channels {
				if slices.Contains(ids, b.Channels[i].ID) {
					b.Channels[i].Uncertainty.Stated = false
				}
			}
		}
	}
	margin := []monitor.Quantity{monitor.ChokeMarginPercentU95, monitor.ChokeMarginPercentLow95, monitor.ChokeMarginPercentHigh95, monitor.PChoked, monitor.MassFlowU95, monitor.GrossThrustU95}
	for _, tt := range []struct {
		name   string
		change func(*builder)
		lost   []monitor.Quantity
	}{
		{"barometer", all("p_baro"), append([]monitor.Quantity{monitor.NPRU95, monitor.IndependentFlowU95}, margin...)},
		{"one rake probe", all("p7_2"), append([]monitor.Quantity{monitor.NPRU95}, margin...)},
		{"exit plane", all("p_exit"), append([]monitor.Quantity{monitor.NPRU95}, margin...)},
		{"one rake temperature", all("t7_3"), margin},
		{"fuel flow", all("fuel_flow"), append([]monitor.Quantity{monitor.IndependentFlowU95}, margin...)},
		{"humidity", all("humidity"), margin},
		{"EGT, which the nozzle knows nothing of", all("egt_1", "egt_2", "egt_3", "egt_4"), nil},
		{"inlet temperature", all("t_inlet"), []monitor.Quantity{monitor.IndependentFlowU95}},
		{"bellmouth drop", all("dp_bellmouth"), []monitor.Quantity{monitor.IndependentFlowU95}},
		{"bellmouth", func(b *builder) { b.Bellmouth.U95 = 0 }, []monitor.Quantity{monitor.IndependentFlowU95}},
		{"area", func(b *builder) { b.Nozzle.AreaU95 = 0 }, []monitor.Quantity{monitor.MassFlowU95, monitor.GrossThrustU95}},
		{"discharge", func(b *builder) { b.Nozzle.DischargeU95 = 0 }, []monitor.Quantity{monitor.MassFlowU95, monitor.GrossThrustU95}},
		{"thrust", func(b *builder) { b.Nozzle.ThrustU95 = 0 }, []monitor.Quantity{monitor.GrossThrustU95}},
		{"nozzle model", func(b *builder) { b.Nozzle.ChokeNPRU95 = 0 }, []monitor.Quantity{monitor.PChoked}},
		{"factor from EGT", func(b *builder) {
			b.Stations.T7, b.Stations.T7FromEGT = nil, 0.98
		}, margin},
	} {
		b := full(t)
		tt.change(b)
		p := b.rig().set(running()).steps(3)
		for _, q := range u95 {
			if _, ok := p.Get(q); ok == slices.Contains(tt.lost, q) {
				t.Errorf("%s not stated: %s is %g", tt.name, q.Info().Name, p.V[q])
			}
		}
		if math.IsNaN(p.V[monitor.ChokeMarginPercent]) || math.IsNaN(p.V[monitor.MassFlow]) || p.Choke != monitor.Choked {
			t.Errorf("%s not stated: margin %g %%, %v", tt.name, p.V[monitor.ChokeMarginPercent], p.Choke)
		}
		if p.ChokeMarginal && math.IsNaN(p.V[monitor.PChoked]) {
			t.Errorf("%s not stated: marginal without a probability", tt.name)
		}
	}
}

// P(choked) and the flag follow the margin: marginal while 0.025 < P < 0.975,
// which is within 1.96 standard uncertainties of margin zero.
func TestMarginal(t *testing.T) {
	b := full(t)
	r := b.rig().set(running())
	marginal := 0
	for gauge := 70e3; gauge < 110e3; gauge += 100 {
		p := r.set(map[string]float64{"p7_1": gauge, "p7_2": gauge, "p7_3": gauge, "p7_4": gauge}).step()
		z := p.V[monitor.ChokeMarginPercent] / (p.V[monitor.ChokeMarginPercentU95] / uncertainty.Coverage)
		if want := math.Erfc(-z/math.Sqrt2) / 2; math.Abs(p.V[monitor.PChoked]-want) > 1e-9 {
			t.Fatalf("at margin %g %%: P %g, want %g", p.V[monitor.ChokeMarginPercent], p.V[monitor.PChoked], want)
		}
		if p.ChokeMarginal != (math.Abs(z) < 1.959964) {
			t.Fatalf("at %g standard uncertainties marginal is %v", z, p.ChokeMarginal)
		}
		if p.ChokeMarginal {
			marginal++
		}
		if low, high := p.V[monitor.ChokeMarginPercentLow95], p.V[monitor.ChokeMarginPercentHigh95]; !near(high-low, 2*p.V[monitor.ChokeMarginPercentU95], 1e-3) {
			t.Fatalf("interval %g to %g", low, high)
		}
	}
	if marginal == 0 {
		t.Error("never marginal on the way through choke")
	}
}

// Air and fuel flow by hand: W2 ∝ √Δp p0/√T nearly, so the parts are those of
// coefficient, half Δp, half p0, half T, and the fuel meter's.
func TestIndependentU95(t *testing.T) {
	b := only(full(t), "", calib.Uncertainty{})
	set := func(id string, u calib.Uncertainty) {
		u.Stated = true
		i := slices.IndexFunc(b.Channels, func(c compute.Channel) bool { return c.ID == id })
		b.Channels[i].Uncertainty = u
	}
	b.Bellmouth.U95 = 0.004
	run := func() (u, w2 float64) {
		p := b.rig().set(running()).set(map[string]float64{"dp_bellmouth": 1000}).steps(2)
		return p.V[monitor.IndependentFlowU95], p.V[monitor.AirFlow]
	}
	u, w2 := run()
	if !near(u, 0.004*w2, 1e-9) {
		t.Errorf("coefficient alone: ± %g kg/s, want %g", u, 0.004*w2)
	}
	b.Bellmouth.U95 = 1e-9
	set("dp_bellmouth", calib.Uncertainty{Fixed: 20})
	if u, w2 = run(); !near(u, w2*0.5*20/1000, 0.02) { // W ∝ √Δp, less 1 % by compressibility
		t.Errorf("20 of 1000 Pa: ± %g kg/s, want %g", u, w2*0.01)
	}
	set("dp_bellmouth", calib.Uncertainty{})
	set("t_inlet", calib.Uncertainty{Fixed: 2.9})
	if u, w2 = run(); !near(u, w2*0.5*2.9/290, 1e-6) {
		t.Errorf("2.9 of 290 K: ± %g kg/s, want %g", u, w2*0.005)
	}
	set("t_inlet", calib.Uncertainty{})
	set("p_inlet", calib.Uncertainty{Fixed: 300})
	set("p_baro", calib.Uncertainty{Fixed: 400})
	if u, w2 = run(); !near(u, w2*0.5*500/99500, 0.015) { // 300 and 400 Pa make 500; at a given Δp compressibility adds 1 %
		t.Errorf("inlet and barometer: ± %g kg/s, want %g", u, w2*0.5*500/99500)
	}
	b.Channels[b.Stations.InletP].Reference = calib.Absolute // the barometer has no part in it
	r := b.rig().set(running()).set(map[string]float64{"dp_bellmouth": 1000, "p_inlet": 99500})
	if p := r.steps(2); !near(p.V[monitor.IndependentFlowU95], p.V[monitor.AirFlow]*0.5*300/99500, 0.015) {
		t.Errorf("absolute inlet pressure: ± %g kg/s, want %g", p.V[monitor.IndependentFlowU95], p.V[monitor.AirFlow]*0.5*300/99500)
	}
	b.Channels[b.Stations.InletP].Reference = calib.Gauge
	set("p_inlet", calib.Uncertainty{})
	set("p_baro", calib.Uncertainty{})
	set("fuel_flow", calib.Uncertainty{Reading: 0.01})
	if u, _ = run(); !near(u, 0.0014, 1e-6) {
		t.Errorf("fuel alone: ± %g kg/s, want 0.0014", u)
	}
}

// example is a rig of the size of the example rig file: 44 channels, 3 bands,
// cold area with lag, tables.
func example(tb testing.TB) *builder {
	tb.Helper()
	b := full(tb)
	st := &b.Stations
	for k := 5; k <= 8; k++ {
		st.EGT = append(st.EGT, b.add(fmt.Sprintf("egt_%d", k), "K", calib.ReferenceNone, -1))
	}
	for len(b.Channels) < 44 {
		b.add(fmt.Sprintf("other_%d", len(b.Channels)), "Pa", calib.Gauge, st.Barometer)
	}
	b.EGT.Bands = append(b.EGT.Bands,
		egt.Band{Name: "start", Kind: egt.KindStart, Limit: 970, Allowance: 3 * second, Deadband: 5, Rearm: 2 * second},
		egt.Band{Name: "run_over", Kind: egt.KindRun, Limit: 1030, Deadband: 5, Rearm: 2 * second})
	for i := range b.Channels {
		b.Channels[i].MaxRate, b.Channels[i].Stuck, b.Channels[i].Codes = 1e9, 10*second, []float64{-9999}
		u := calib.Uncertainty{Reading: 5e-4, Fixed: 1, Random: 0.5, Stated: true}
		switch b.Channels[i].ID {
		case "fuel_flow":
			u.Fixed, u.Random = 1e-3, 2e-4
		case "humidity":
			u.Fixed, u.Random = 0.02, 0
		}
		b.Channels[i].Uncertainty = u
	}
	n := &b.Nozzle
	n.AreaBasis, n.ReferenceTemperature, n.ExpansionCoefficient, n.MetalLag = 1, 293.15, 15e-6, 20*second
	return b
}

// scans gives scans of a run of example that differ in every reading.
func (r *rig) scans(n int) []*monitor.Scan {
	base := running()
	rng := rand.New(rand.NewPCG(1, 1))
	var out []*monitor.Scan
	for range n {
		s := monitor.NewScan(len(r.cfg.Channels))
		for i := range s.Raw {
			v, ok := base[r.cfg.Channels[i].ID]
			if !ok {
				v = 915
			}
			s.Raw[i], s.Quality[i], s.Samples[i] = v*(1+1e-3*rng.NormFloat64()), monitor.QualityGood, 1
		}
		out = append(out, s)
	}
	return out
}

// copyScan gives Step a scan of its own, as alignment does.
func (r *rig) take(s *monitor.Scan) {
	r.n++
	copy(r.scan.Raw, s.Raw)
	copy(r.scan.Quality, s.Quality)
	r.scan.N, r.scan.T = uint64(r.n), epoch+r.n*period
	r.c.Step(&r.s, r.scan, &r.p)
}

// A scan allocates nothing: not in a run, not with a channel lost, not at rest.
func TestAllocations(t *testing.T) {
	r := example(t).rig()
	scans := r.scans(16)
	for k := range 200 {
		r.take(scans[k%16])
	}
	if r.p.Choke != monitor.Choked || math.IsNaN(r.p.V[monitor.PChoked]) || math.IsNaN(r.p.V[monitor.IndependentFlowU95]) || !r.p.Lit {
		t.Fatalf("the rig does not run: %v, cause %+v", r.p.Choke, r.p.Cause)
	}
	k := 0
	step := func() { r.take(scans[k%16]); k++ }
	if n := testing.AllocsPerRun(200, step); n != 0 {
		t.Errorf("%g allocations per scan", n)
	}
	for _, id := range []string{"p_exit", "egt_2", "fuel_flow", "humidity", "t7_2", "p_baro", "speed"} {
		for _, s := range scans {
			s.Quality[r.index(id)] = monitor.QualityStale
		}
		if n := testing.AllocsPerRun(50, step); n != 0 {
			t.Errorf("%g allocations per scan without %s", n, id)
		}
	}
	if r.p.Choke != monitor.ChokeUnknown {
		t.Errorf("without a barometer %v", r.p.Choke)
	}
}

func BenchmarkStep(b *testing.B) {
	r := example(b).rig()
	scans := r.scans(64)
	b.ReportAllocs()
	i := 0
	sink := 0.0
	for b.Loop() {
		r.take(scans[i&63])
		sink += r.p.V[monitor.ChokeMarginPercentU95]
		i++
	}
	if math.IsNaN(sink) {
		b.Fatal("no margin")
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(i)/float64(period)*100, "%-of-a-scan")
}
