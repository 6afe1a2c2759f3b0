package pipeline

import (
	"errors"
	"math"
	"math/rand/v2"
	"path/filepath"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/uncertainty"
)

// stretch stores n scans of a run whose total pressure has noise of 200 Pa that is
// correlated by 1/e in 1 s, and gives the file.
func stretch(t *testing.T, cfg *Config, n int, seed uint64) *runfile.File {
	t.Helper()
	ctx := t.Context()
	f, err := runfile.Create(ctx, filepath.Join(t.TempDir(), "run.db"), runfile.Header{ID: "x-1", Rig: "x"}, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := f.Close(); err != nil {
			t.Error(err)
		}
	})
	comp, err := compute.New(cfg.Compute)
	if err != nil {
		t.Fatal(err)
	}
	var s compute.State
	comp.Reset(&s, nil)
	random := rand.New(rand.NewPCG(seed, 1))
	codec := archive.NewCodec()
	columns := NewColumns(cfg)
	noise, keep := 200*random.NormFloat64(), math.Exp(-float64(period)/float64(second))
	var chunks []runfile.Chunk
	seal := func() {
		more, err := columns.Chunks(codec)
		if err != nil {
			t.Fatal(err)
		}
		chunks, columns = append(chunks, more...), NewColumns(cfg)
	}
	for k := range n {
		noise = keep*noise + 200*math.Sqrt(1-keep*keep)*random.NormFloat64()
		scan := monitor.NewScan(len(cfg.Compute.Channels))
		scan.N, scan.T = uint64(k+1), epoch+int64(k)*period
		for i := range scan.Raw {
			ch := &cfg.Compute.Channels[i]
			scan.Raw[i] = ch.Raw.FromSI(map[string]float64{"p7": 220e3 + noise, "t7": 900, "egt": 920, "p_exit": 100e3, "speed": 20000.0 / 60, "p_oil": 300e3}[ch.ID])
			scan.Quality[i] = monitor.QualityGood
		}
		if k%3 == 0 { // a channel that is there in two scans of three
			i := cfg.Compute.Stations.EGT[0]
			scan.Quality[i] = monitor.QualityStale
		}
		var p monitor.OperatingPoint
		comp.Step(&s, scan, &p)
		columns.Add(&Outcome{Kind: OutcomePoint, T: scan.T, Point: &p, Scan: scan})
		if columns.Rows() == 700 {
			seal()
		}
	}
	seal()
	records := []ingest.Record{{Seq: 1, Host: epoch, Kind: ingest.KindBoot, Payload: []byte("{}")}}
	if err := f.Commit(ctx, runfile.Batch{Records: records, Chunks: chunks}); err != nil {
		t.Fatal(err)
	}
	return f
}

// sure is the rig with uncertainties that can be summed by hand.
func sure(t *testing.T) Config {
	t.Helper()
	cfg := rig(t)
	for i := range cfg.Compute.Channels {
		cfg.Compute.Channels[i].Uncertainty = calib.Uncertainty{Fixed: 1, Random: 5, Stated: true}
	}
	ch := &cfg.Compute.Channels[cfg.Compute.Stations.P7[0]]
	ch.Uncertainty = calib.Uncertainty{Fixed: 150, Random: 400, Stated: true}
	cfg.Compute.Nozzle.AreaU95, cfg.Compute.Nozzle.DischargeU95 = 0.002, 0.003
	return cfg
}

// A stretch of a stored run is reduced to its mean, with Type A by the effective sample
// size, which for noise correlated by 1 s is T/2 s, Type B by the systematic parts alone,
// and both combined.
func TestReduceStretch(t *testing.T) {
	cfg := sure(t)
	const n, first, length = 1600, 300, 1200 // 60 s, over three chunks
	hold, runs := 0, 15
	for seed := range uint64(runs) {
		f := stretch(t, &cfg, n, seed)
		from := epoch + first*period
		tp, err := ReduceStretch(t.Context(), f, archive.NewCodec(), &cfg, from, from+length*period)
		if err != nil {
			t.Fatal(err)
		}
		p7 := &tp.Values[monitor.RakePressure]
		if tp.Scans != length || p7.N != length || tp.From != from {
			t.Fatalf("%d scans, %d values", tp.Scans, p7.N)
		}
		u := 150 / uncertainty.Coverage
		if math.Abs(p7.TypeB.U-u) > 1e-9*u || math.Abs(p7.U-math.Hypot(p7.TypeA.U, u)) > 1e-9 || !(p7.U95 >= 1.95*p7.U) {
			t.Fatalf("p7 %+v, Type B %g wanted", p7, u)
		}
		if math.Abs(p7.Mean-220e3) <= p7.K*1.1*p7.TypeA.U {
			hold++
		}
		if seed > 0 {
			continue
		}
		if !(p7.NEff > 12 && p7.NEff < 90) || !(p7.TypeA.U > 15 && p7.TypeA.U < 80) {
			t.Errorf("p7: effective sample size %g (30 expected), Type A %g Pa (37 expected)", p7.NEff, p7.TypeA.U)
		}
		if t7 := &tp.Values[monitor.TotalTemperature]; t7.Mean != 900 || t7.SD > 1e-9 || math.Abs(t7.TypeB.U-1/uncertainty.Coverage) > 1e-9 {
			t.Errorf("T7 %+v", t7)
		}
		w8 := &tp.Values[monitor.MassFlow]
		byHand := w8.Mean / uncertainty.Coverage * math.Sqrt(0.002*0.002+0.003*0.003+square(150/220e3)+square(0.5/900)+square(1/100e3))
		byHand = math.Hypot(byHand, humid(t)*0.0077942*w8.Mean)
		if math.Abs(w8.TypeB.U-byHand) > 0.01*byHand {
			t.Errorf("W8 ± %g by Type B, %g by hand", w8.TypeB.U, byHand)
		}
		if math.Abs(tp.Mean.V[monitor.MassFlow]/w8.Mean-1) > 1e-6 {
			t.Errorf("W8 %g of the means, mean of W8 %g", tp.Mean.V[monitor.MassFlow], w8.Mean)
		}
		if v := &tp.Values[monitor.ThroatMach]; v.Mean != 1 || !math.IsNaN(v.U95) {
			t.Errorf("Mach %+v", v)
		}
		if v := &tp.Values[monitor.AirFlow]; !math.IsNaN(v.Mean) || v.N != 0 {
			t.Errorf("air flow of a rig without bellmouth %+v", v)
		}
		if v := &tp.Values[monitor.EGTIndicated]; v.N != 2*length/3 || v.Mean != 920 {
			t.Errorf("EGT %+v", v)
		}
	}
	if hold < runs*4/5 {
		t.Errorf("%d of %d intervals hold the truth", hold, runs)
	}
}

// humid gives by which part a choked flow of air at 900 K falls per unit of humidity
// ratio: W ∝ C*/√R.
func humid(t *testing.T) float64 {
	t.Helper()
	const step = 1e-3
	flux := func(war float64) float64 {
		g, err := gas.NewMixture(gas.Kerosene(), 0, war)
		if err != nil {
			t.Fatal(err)
		}
		return g.Critical(900).FluxFunction / math.Sqrt(g.R())
	}
	return 1/step - flux(step)/flux(0)/step
}

func square(x float64) float64 { return x * x }

func TestReduceStretchRefuses(t *testing.T) {
	cfg := sure(t)
	f := stretch(t, &cfg, 100, 1)
	for _, tt := range []struct {
		name     string
		from, to int64
	}{
		{"reversed", epoch + second, epoch},
		{"of seven scans", epoch, epoch + 7*period},
		{"without scans", epoch + 100*second, epoch + 200*second},
		{"with a few at its edge", epoch + 97*period, epoch + 100*second},
	} {
		if _, err := ReduceStretch(t.Context(), f, archive.NewCodec(), &cfg, tt.from, tt.to); !errors.Is(err, ErrTooFew) {
			t.Errorf("a stretch %s: %v", tt.name, err)
		}
	}
}

// Against a reduction of its own: the plain mean of the stored rows, and for noise of an
// AR(1) process with coefficient ρ the standard error s √((1 + ρ)/((1 − ρ) n)), the
// effective sample size of Zięba, Metrol. Meas. Syst. 17 (2010) 3, from memory. The
// effective size is an estimate from 60 s, so its mean over 15 runs is compared.
func TestReduceStretchAgainstPlain(t *testing.T) {
	cfg := sure(t)
	const n, runs = 1200, 15
	rho := math.Exp(-float64(period) / float64(second))
	ratio := 0.0
	for seed := range uint64(runs) {
		f := stretch(t, &cfg, n, 100+seed)
		codec := archive.NewCodec()
		tp, err := ReduceStretch(t.Context(), f, codec, &cfg, epoch, epoch+n*period)
		if err != nil {
			t.Fatal(err)
		}
		var rows []float64
		name := monitor.RakePressure.Info().Name
		if err := Rows(t.Context(), f, codec, ChunkPoints, []string{name}, epoch, epoch+n*period, func(c *archive.Chunk, first, last int) {
			rows = append(rows, c.Columns[0].Float[first:last]...)
		}); err != nil {
			t.Fatal(err)
		}
		mean, deviation := 0.0, 0.0
		for _, v := range rows {
			mean += v / n
		}
		for _, v := range rows {
			deviation += (v - mean) * (v - mean) / (n - 1)
		}
		v := &tp.Values[monitor.RakePressure]
		if len(rows) != n || math.Abs(v.Mean/mean-1) > 1e-12 || math.Abs(v.SD/math.Sqrt(deviation)-1) > 1e-9 {
			t.Fatalf("%d rows: mean %.9g, plain %.9g; deviation %.9g, plain %.9g", len(rows), v.Mean, mean, v.SD, math.Sqrt(deviation))
		}
		ratio += v.TypeA.U / math.Sqrt(deviation*(1+rho)/(1-rho)/n) / runs
	}
	if math.Abs(ratio-1) > 0.15 {
		t.Errorf("Type A is %.3f of that of the AR(1) process", ratio)
	}
}
