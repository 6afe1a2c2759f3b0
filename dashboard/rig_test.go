package dashboard_test

import (
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"math"
	"strings"
	"time"

	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/align"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/phase"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const (
	second = int64(time.Second)
	ms     = int64(time.Millisecond)
	rigID  = "cell_2"
	topic  = "rigs/cell_2/senml"
	zeroC  = 273.15
	scans  = 20 // per second
)

// errBundle is what parse says of a text that is no configuration.
var errBundle = errors.New(`rig.yaml:1: "broken": not a rig`)

// parse reads a configuration record of these tests: the title of the rig.
func parse(bundle []byte) (pipeline.Config, error) {
	if strings.Contains(string(bundle), "broken") {
		return pipeline.Config{}, errBundle
	}
	sum := sha256.Sum256(bundle)
	return rig(string(bundle), hex.EncodeToString(sum[:])), nil
}

// rig is an invented test cell: one sensor of each kind, several where a mean is
// taken.
func rig(title, hash string) pipeline.Config {
	b := &rigBuilder{}
	gauge := func(id string, low, high float64) int {
		return b.add(id, "kPa", calib.Gauge, low, high, 0.05)
	}
	baro := b.add("p_baro", "hPa", calib.Absolute, 85e3, 110e3, 30)
	st := compute.Stations{
		Barometer: baro, ExitPlane: gauge("p_exit", -7e3, 7e3),
		P7:     []int{gauge("p7_1", -10e3, 250e3), gauge("p7_2", -10e3, 250e3), gauge("p7_3", -10e3, 250e3)},
		T7:     []int{b.add("t7_1", "degC", calib.ReferenceNone, 233, 1373, 5), b.add("t7_2", "degC", calib.ReferenceNone, 233, 1373, 5)},
		MinP7:  2,
		MinT7:  1,
		MinEGT: 2, Depression: 250, DepressionU: 200,
		InletT: b.add("t_inlet", "degC", calib.ReferenceNone, 233, 333, 0.5), InletP: gauge("p_inlet", -10e3, 5e3),
		Humidity: b.add("humidity", "%", calib.ReferenceNone, 0, 1, 0.02), AmbientT: -1,
		Speed: b.add("speed", "rpm", calib.ReferenceNone, 0, 25e3/60, 0.2), FuelFlow: b.add("fuel_flow", "kg/h", calib.ReferenceNone, 0, 0.25, 1e-3),
		Bellmouth: b.add("dp_bellmouth", "kPa", calib.Differential, -1e3, 15e3, 20), Thrust: -1,
	}
	for _, id := range []string{"egt_1", "egt_2", "egt_3", "egt_4"} {
		st.EGT = append(st.EGT, b.add(id, "degC", calib.ReferenceNone, 233, 1373, 4))
	}
	b.add("vibration", "mm/s", calib.ReferenceNone, 0, 0.05, 0)

	cfg := pipeline.Config{
		Rig: pipeline.RigInfo{
			ID: rigID, Title: title, EngineModel: "Merle 5", EngineSerial: "ML5-0042", EngineBuild: "7", NozzleSerial: "NZ-0311", LimitsVersion: "ML5-LIM-C",
		},
		Align: align.Config{
			Period: second / scans, Lateness: 120 * ms, MaxFuture: 2 * second, MaxPast: 5 * second, Backlog: 65 * second,
			Inputs: []align.Input{{Filter: topic, Format: decode.SenMLJSON}}, Channels: b.align,
		},
		Compute: compute.Config{
			Channels: b.channels, Stations: st, Fuel: gas.Kerosene(),
			Nozzle: compute.Nozzle{
				Config: nozzle.Config{
					ThroatArea: 0.025, AreaBasis: nozzle.AreaCold, ExpansionCoefficient: 15e-6, ReferenceTemperature: 293.15,
					Discharge: []nozzle.Point{{NPR: 1.05, Value: 0.94}, {NPR: 1.4, Value: 0.96}, {NPR: 1.8, Value: 0.972}, {NPR: 3, Value: 0.972}},
					Thrust:    []nozzle.Point{{NPR: 1.05, Value: 0.975}, {NPR: 3, Value: 0.985}},
					DuctLoss:  0.006, ResolutionFloor: 0.003,
				},
				MetalLag: 20 * second, AreaU95: 0.002, DischargeU95: 0.003, ThrustU95: 0.005, ChokeNPRU95: 0.004,
				Hysteresis: 0.5, ArmedAboveRPM: 19500, ArmedHysterRPM: 500,
			},
			Bellmouth: compute.Bellmouth{Area: 0.06, Coefficient: 0.985, U95: 0.004},
			EGT: egt.Config{Bands: []egt.Band{
				{Name: "start", Kind: egt.KindStart, Limit: 700 + zeroC, Allowance: 3 * second, Deadband: 5, Rearm: 2 * second},
				{Name: "run_max", Kind: egt.KindRun, Limit: 720 + zeroC, Allowance: second, PerRun: 60 * second, Deadband: 5, Rearm: 2 * second},
				{Name: "run_over", Kind: egt.KindRun, Limit: 760 + zeroC, Deadband: 5, Rearm: 2 * second},
			}},
			Phase: phase.Config{
				Turning: 300, Idle: 9500, IdleBand: 500, Max: 22000, LitEGT: 200 + zeroC, LitRise: 60, MoveRate: 150,
				SteadyAfter: 2 * second, CoolEGT: 120 + zeroC, OffAfter: 30 * second,
			},
		},
		Run:  pipeline.RunConfig{EndAfter: 120 * second},
		Hash: hash,
	}
	if title == "perfect gas" {
		cfg.Compute.Gamma, cfg.Compute.GasR = 1.4, 287.05
	}
	cfg.Rules = append(rules.Default(rules.Equipment{Bands: cfg.Compute.EGT.Bands, EGT: true, Rake: true, Speed: true, FuelFlow: true, Bellmouth: true}), rules.Rule{
		Name: "vibration_above_caution", When: "channel.vibration > 0.018", Priority: rules.Caution, OnDelay: 100 * ms, OffDelay: second, Deadband: 0.001,
		Title: "Vibration above 18 mm/s", Text: "Vibration is above 18 mm/s.", Caution: `Watch "both" bearings & their temperatures.`, Response: "Follow facility procedure EP-14.",
	})
	return cfg
}

type rigBuilder struct {
	channels []compute.Channel
	align    []align.Channel
}

// add appends a channel and gives its index. Range and uncertainty are SI; a gauge
// channel measures against the first channel.
func (b *rigBuilder) add(id, unitName string, ref calib.Reference, low, high, u95 float64) int {
	u, err := unit.Parse(unitName)
	must(err)
	spec := calib.Spec{Raw: u, Unit: u, Reference: ref, Port: -1, Low: low, High: high, Uncertainty: calib.Uncertainty{Fixed: u95, Stated: u95 > 0}}
	if ref == calib.Gauge {
		spec.Port, spec.Uncertainty = 0, calib.Uncertainty{FullScale: 5e-4, Random: 100, Stated: true}
	}
	b.channels = append(b.channels, compute.Channel{ID: id, Title: "Channel “" + id + "”", Spec: spec})
	b.align = append(b.align, align.Channel{ID: id, Name: id, Raw: u, Hold: 400 * ms})
	return len(b.channels) - 1
}

// knot is what the engine of the tests does at a time of the test, s; between knots
// it goes in straight lines.
type knot struct {
	t, speed, npr, egt, vibration float64 // s, rpm, p7/pb, K, mm/s
}

// engineTest is a test of half a minute: start, acceleration through choking, an unchoke
// while choke is armed, an over-temperature, vibration, and back to idle.
func engineTest() []knot {
	return []knot{
		{0, 0, 1.0005, 290, 1},
		{1, 0, 1.0005, 290, 1},
		{2.5, 3000, 1.01, 310, 2},
		{4, 7000, 1.06, 850, 2},
		{5, 9500, 1.15, 800, 2},
		{7, 9500, 1.15, 780, 2},
		{10, 20900, 2.2, 950, 3},
		{13, 20900, 2.2, 950, 3},
		{13.5, 20500, 1.6, 900, 3},
		{15, 20500, 1.6, 900, 3},
		{15.5, 20900, 2.2, 960, 3},
		{17, 20900, 2.25, 1005, 3},
		{19.5, 20900, 2.25, 1005, 3},
		{20, 20900, 2.2, 950, 22},
		{21, 20900, 2.2, 950, 3},
		{24, 9500, 1.15, 780, 2},
		{26, 9500, 1.15, 780, 2},
	}
}

// at gives the engine at a time of the test.
func at(test []knot, t float64) knot {
	for i := 1; i < len(test); i++ {
		a, b := test[i-1], test[i]
		if t > b.t {
			continue
		}
		x := (t - a.t) / (b.t - a.t)
		mix := func(a, b float64) float64 { return a + (b-a)*x }
		return knot{t, mix(a.speed, b.speed), mix(a.npr, b.npr), mix(a.egt, b.egt), mix(a.vibration, b.vibration)}
	}
	return test[len(test)-1]
}

// message is a payload with the times it belongs to, ns UTC.
type message struct {
	at, due int64
	payload []byte
}

// play gives the messages of a test that begins at, 50 per second. They come 3 ms
// after their readings; lost, if not nil, leaves readings out.
func play(begin int64, test []knot, length time.Duration, lost func(id string, t float64) bool) (msgs []message) {
	for i := int64(0); i*20*ms < int64(length); i++ {
		t := begin + i*20*ms
		s := float64(i) * 0.02
		k := at(test, s)
		wobble := func(phase float64) float64 { return math.Sin(7*s + phase) } // no reading stands still
		const baro, pb = 100600.0, 100350.0
		flow := 0.0
		if k.npr > 1.003 {
			flow = 0.97 * 0.0245 * min(k.npr/1.86, 1) * k.npr * pb * 0.683 / math.Sqrt(287*k.egt*0.97)
		}
		var readings []decode.Reading
		add := func(id, unitName string, v float64) {
			if lost == nil || !lost(id, s) {
				readings = append(readings, decode.Reading{Name: id, Unit: unitName, Value: v})
			}
		}
		if i%5 == 0 {
			add("p_baro", "hPa", baro/100)
			add("humidity", "%RH", 55+wobble(1))
			add("t_inlet", "Cel", 11.5+0.1*wobble(2))
		}
		add("p_exit", "kPa", (pb-baro)/1000+0.004*wobble(3))
		for n, id := range []string{"p7_1", "p7_2", "p7_3"} {
			add(id, "kPa", (k.npr*pb-baro)/1000+0.03*wobble(float64(n)))
		}
		for n, id := range []string{"t7_1", "t7_2"} {
			add(id, "Cel", 0.97*k.egt-zeroC+2*wobble(float64(n)))
		}
		for n, id := range []string{"egt_1", "egt_2", "egt_3", "egt_4"} {
			add(id, "Cel", k.egt-zeroC+2*wobble(float64(2*n)))
		}
		add("p_inlet", "kPa", -0.03+0.005*wobble(4))
		add("speed", "rpm", k.speed+math.Abs(wobble(5)))
		add("fuel_flow", "kg/h", 3600*0.014*flow)
		add("dp_bellmouth", "kPa", flow*flow/(2*1.23*0.06*0.06)/1000)
		add("vibration", "mm/s", k.vibration+0.1*wobble(6))
		msgs = append(msgs, message{at: t, due: t + 3*ms, payload: decode.AppendSenMLJSON(nil, "", t, readings)})
	}
	return msgs
}

// allQuantities gives the key of every quantity.
func allQuantities() (names []string) {
	for q := range monitor.NumQuantities {
		names = append(names, q.Info().Name)
	}
	return names
}
