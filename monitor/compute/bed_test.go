package compute_test

import (
	"math"
	"slices"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/internal/vectors"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/phase"
	"throatwatch/monitor/unit"
)

const (
	second = int64(1e9)
	period = second / 20
	// epoch is 2025-12-01 09:00 UTC.
	epoch = int64(1764579600e9)
	pamb  = 101325.0
	area  = 0.025
)

// worked gives the recomputed answers of a worked example.
func worked(tb testing.TB, example string) map[string]float64 {
	tb.Helper()
	out := map[string]float64{}
	for _, v := range vectors.Read(tb, "worked_examples.csv") {
		if v["case"] == example {
			out[v["quantity"]] = v.Num(tb, "value")
		}
	}
	if len(out) == 0 {
		tb.Fatalf("no worked example %s", example)
	}
	return out
}

// builder makes a configuration; every channel is in SI, so that a raw reading
// is the value before its reference.
type builder struct {
	tb testing.TB
	compute.Config
}

func newBuilder(tb testing.TB) *builder {
	tb.Helper()
	b := &builder{tb: tb}
	b.Stations = compute.Stations{
		Barometer: -1, ExitPlane: -1, InletT: -1, InletP: -1, Humidity: -1, AmbientT: -1,
		Speed: -1, FuelFlow: -1, Bellmouth: -1, Thrust: -1, WaterFlow: -1, BleedFlow: -1, BleedT: -1,
	}
	b.Fuel = gas.Kerosene()
	b.Nozzle.Config = nozzle.Config{ThroatArea: area, ResolutionFloor: 0.003}
	b.Phase = phase.Config{
		Turning: 300, Idle: 9500, IdleBand: 500, Max: 22000, LitEGT: 200, LitRise: 60, MoveRate: 150,
		SteadyAfter: 3 * second, CoolEGT: 390, OffAfter: 30 * second,
	}
	return b
}

// add makes a channel without limits that matter.
func (b *builder) add(id, unitName string, reference calib.Reference, port int) int {
	b.tb.Helper()
	u, err := unit.Parse(unitName)
	if err != nil {
		b.tb.Fatal(err)
	}
	b.Channels = append(b.Channels, compute.Channel{ID: id, Spec: calib.Spec{
		Raw: u, Unit: u, Reference: reference, Port: port, Low: -1e9, High: 1e9,
	}})
	return len(b.Channels) - 1
}

// simple is a rig of one absolute pressure, one temperature and one absolute
// back pressure.
func simple(tb testing.TB) *builder {
	tb.Helper()
	b := newBuilder(tb)
	b.Stations.P7 = []int{b.add("p7", "Pa", calib.Absolute, -1)}
	b.Stations.T7 = []int{b.add("t7", "K", calib.ReferenceNone, -1)}
	b.Stations.ExitPlane = b.add("p_exit", "Pa", calib.Absolute, -1)
	return b
}

// full is a rig with every station, gauge pressures against the barometer.
func full(tb testing.TB) *builder {
	tb.Helper()
	b := newBuilder(tb)
	st := &b.Stations
	st.Barometer = b.add("p_baro", "Pa", calib.Absolute, -1)
	st.ExitPlane = b.add("p_exit", "Pa", calib.Gauge, st.Barometer)
	for _, id := range []string{"p7_1", "p7_2", "p7_3", "p7_4"} {
		st.P7 = append(st.P7, b.add(id, "Pa", calib.Gauge, st.Barometer))
	}
	for _, id := range []string{"t7_1", "t7_2", "t7_3", "t7_4"} {
		st.T7 = append(st.T7, b.add(id, "K", calib.ReferenceNone, -1))
	}
	for _, id := range []string{"egt_1", "egt_2", "egt_3", "egt_4"} {
		st.EGT = append(st.EGT, b.add(id, "K", calib.ReferenceNone, -1))
	}
	st.MinP7, st.MinT7, st.MinEGT, st.EGTExponent = 3, 3, 3, 1
	st.P7Watch.Sampling, st.T7Watch.Sampling = 1e-9, 1e-9 // the profile is known from a survey
	st.InletT = b.add("t_inlet", "K", calib.ReferenceNone, -1)
	st.InletP = b.add("p_inlet", "Pa", calib.Gauge, st.Barometer)
	st.Humidity = b.add("humidity", "1", calib.ReferenceNone, -1)
	st.AmbientT = b.add("t_ambient", "K", calib.ReferenceNone, -1)
	st.Speed = b.add("speed", "rpm", calib.ReferenceNone, -1)
	st.FuelFlow = b.add("fuel_flow", "kg/s", calib.ReferenceNone, -1)
	st.Bellmouth = b.add("dp_bellmouth", "Pa", calib.Differential, -1)
	st.Thrust = b.add("thrust", "N", calib.ReferenceNone, -1)
	st.Depression, st.DepressionU = 250, 200
	b.Bellmouth = compute.Bellmouth{Area: 0.06, Coefficient: 0.985, U95: 0.004}
	b.EGT.Bands = []egt.Band{{Name: "run_max", Kind: egt.KindRun, Limit: 990, Allowance: 5 * second, Deadband: 5, Rearm: 2 * second}}
	n := &b.Nozzle
	n.DuctLoss = 0.006
	n.Discharge = []nozzle.Point{{NPR: 1.05, Value: 0.94}, {NPR: 1.4, Value: 0.96}, {NPR: 2, Value: 0.972}, {NPR: 3, Value: 0.973}}
	n.AreaU95, n.DischargeU95, n.ThrustU95, n.ChokeNPRU95 = 0.002, 0.003, 0.005, 0.004
	n.Hysteresis, n.ArmedAboveRPM, n.ArmedHysterRPM = 0.5, 19500, 500
	for i := range b.Channels {
		b.Channels[i].Uncertainty = calib.Uncertainty{Fixed: 1, Random: 0.5, Stated: true}
	}
	return b
}

// running is what full reads at a choked point: raw values by channel.
func running() map[string]float64 {
	return map[string]float64{
		"p_baro": 99800, "p_exit": -250, "p7_1": 130e3, "p7_2": 130.4e3, "p7_3": 129.8e3, "p7_4": 130.2e3,
		"t7_1": 880, "t7_2": 890, "t7_3": 885, "t7_4": 881, "egt_1": 920, "egt_2": 915, "egt_3": 918, "egt_4": 911,
		"t_inlet": 290, "p_inlet": -300, "humidity": 0.55, "t_ambient": 289, "speed": 20500, "fuel_flow": 0.14,
		"dp_bellmouth": 10.2e3, "thrust": 3900,
	}
}

// rig steps a configuration by raw readings.
type rig struct {
	tb   testing.TB
	cfg  compute.Config
	c    *compute.Computer
	s    compute.State
	scan *monitor.Scan
	p    monitor.OperatingPoint
	n    int64
	raw  []float64
	q    []monitor.Quality
	age  []int64
}

func (b *builder) rig() *rig {
	b.tb.Helper()
	c, err := compute.New(b.Config)
	if err != nil {
		b.tb.Fatal(err)
	}
	n := len(b.Channels)
	r := &rig{
		tb: b.tb, cfg: b.Config, c: c, scan: monitor.NewScan(n), raw: make([]float64, n), q: make([]monitor.Quality, n),
		age: make([]int64, n),
	}
	c.Reset(&r.s, nil)
	for i := range r.q {
		r.q[i] = monitor.QualityMissing
	}
	return r
}

func (r *rig) index(id string) int {
	r.tb.Helper()
	i := slices.IndexFunc(r.cfg.Channels, func(c compute.Channel) bool { return c.ID == id })
	if i < 0 {
		r.tb.Fatalf("no channel %q", id)
	}
	return i
}

// set gives channels a reading that is there in every scan.
func (r *rig) set(readings map[string]float64) *rig {
	r.tb.Helper()
	for id, v := range readings {
		i := r.index(id)
		r.raw[i], r.q[i], r.age[i] = r.cfg.Channels[i].Raw.FromSI(v), monitor.QualityGood, 0
		if r.cfg.Channels[i].Raw.Name == "rpm" {
			r.raw[i] = v
		}
	}
	return r
}

// mark gives a channel a quality as alignment does.
func (r *rig) mark(id string, q monitor.Quality) *rig {
	r.tb.Helper()
	r.q[r.index(id)] = q
	return r
}

// step computes the next scan.
func (r *rig) step() *monitor.OperatingPoint {
	r.n++
	r.scan.N, r.scan.T = uint64(r.n), epoch+r.n*period
	copy(r.scan.Raw, r.raw)
	copy(r.scan.Quality, r.q)
	copy(r.scan.Age, r.age)
	for i, q := range r.q {
		if q == monitor.QualityMissing {
			r.scan.Raw[i], r.scan.Age[i] = math.NaN(), -1
		}
	}
	r.c.Step(&r.s, r.scan, &r.p)
	return &r.p
}

func (r *rig) steps(n int) *monitor.OperatingPoint {
	for range n {
		r.step()
	}
	return &r.p
}

func near(got, want, rel float64) bool { return math.Abs(got-want) <= rel*math.Abs(want) }

// compare checks quantities of a point.
func compare(tb testing.TB, name string, p *monitor.OperatingPoint, rel float64, want map[monitor.Quantity]float64) {
	tb.Helper()
	for q := range monitor.NumQuantities { // in order
		w, ok := want[q]
		if ok && !near(p.V[q], w, rel) {
			tb.Errorf("%s: %s = %.12g, want %.12g", name, q.Info().Name, p.V[q], w)
		}
	}
}
