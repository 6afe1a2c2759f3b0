package check_test

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/check"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/unit"
)

const (
	second = int64(1e9)
	period = second / 20
)

// The channels of the rig: a barometer, an absolute and two gauge pressures, a differential
// one, an ambient thermometer, four thermocouples of the harness, a speed.
const (
	baro = iota
	absolute
	gauge1
	gauge2
	differential
	ambient
	egt1
	egt2
	egt3
	egt4
	speed
	channels
)

func rig(tb testing.TB) *compute.Config {
	tb.Helper()
	parse := func(name string) unit.Unit {
		u, err := unit.Parse(name)
		if err != nil {
			tb.Fatal(err)
		}
		return u
	}
	c := &compute.Config{Channels: make([]compute.Channel, channels)}
	set := func(i int, id, unitName string, low, high, fixed, random, step float64, r calib.Reference, port int) {
		u := parse(unitName)
		c.Channels[i] = compute.Channel{ID: id, Title: "the " + id, Spec: calib.Spec{
			Raw: u, Unit: u, Low: low, High: high, Reference: r, Port: port, Step: step, Stuck: 10 * second,
			Uncertainty: calib.Uncertainty{Fixed: fixed, Random: random, Stated: true},
		}}
	}
	set(baro, "p_baro", "Pa", 85e3, 110e3, 30, 5, 1, calib.Absolute, -1)
	set(absolute, "p_abs", "Pa", 0, 400e3, 40, 20, 1, calib.Absolute, -1)
	set(gauge1, "p_1", "Pa", -10e3, 250e3, 120, 100, 5, calib.Gauge, baro)
	set(gauge2, "p_2", "Pa", -10e3, 250e3, 120, 100, 5, calib.Gauge, baro)
	set(differential, "dp", "Pa", -1e3, 15e3, 16, 20, 0.5, calib.Differential, -1)
	set(ambient, "t_ambient", "K", 230, 330, 0.5, 0.05, 0, calib.ReferenceNone, -1)
	for k, i := range []int{egt1, egt2, egt3, egt4} {
		set(i, fmt.Sprint("egt_", k+1), "K", 230, 1400, 4, 0.8, 0.05, calib.ReferenceNone, -1)
	}
	set(speed, "speed", "rpm", 0, 500, 1, 0.1, 0, calib.ReferenceNone, -1)
	c.Stations = compute.Stations{
		EGT: []int{egt1, egt2, egt3, egt4}, Barometer: baro, AmbientT: ambient, Speed: speed, ExitPlane: -1, InletT: -1, InletP: -1, Humidity: -1,
		FuelFlow: -1, Bellmouth: -1, Thrust: -1, WaterFlow: -1, BleedFlow: -1, BleedT: -1,
	}
	return c
}

// cell is what the channels read: a value, a scatter, and how it is correlated from scan to
// scan.
type cell struct {
	value   [channels]float64
	sigma   [channels]float64
	rho     float64
	quality [channels]monitor.Quality
	silent  [channels]bool
}

// sound is a rig without an error, that scatters as it is stated to.
func sound(c *compute.Config) cell {
	k := cell{}
	for i := range k.value {
		k.sigma[i] = c.Channels[i].Uncertainty.Random / 1.96
		k.quality[i] = monitor.QualityGood
	}
	k.value = [channels]float64{baro: 100e3, absolute: 100e3, ambient: 290, egt1: 290, egt2: 290, egt3: 290, egt4: 290, speed: 1}
	return k
}

// gather gives the scans of a window.
func (k *cell) gather(c *compute.Config, l *check.Limits, rng *rand.Rand) *check.Gather {
	g := &check.Gather{}
	scan := monitor.NewScan(channels)
	var noise [channels]float64
	for n := int64(0); !g.Full(l); n++ {
		scan.T, scan.N = 1_700_000_000*second+n*period, uint64(n+1)
		for i := range channels {
			fresh := rng.NormFloat64()
			noise[i] = k.rho*noise[i] + math.Sqrt(1-k.rho*k.rho)*fresh
			if n == 0 {
				noise[i] = fresh
			}
			v := k.value[i] + k.sigma[i]*noise[i]
			if step := c.Channels[i].Step; step > 0 {
				v = math.Round(v/step) * step
			}
			scan.Raw[i], scan.Quality[i], scan.Samples[i] = v, k.quality[i], 1
			if k.silent[i] {
				scan.Quality[i], scan.Samples[i] = monitor.QualityMissing, 0
			}
		}
		g.Add(l, c, period, scan)
	}
	return g
}

// good is a daemon that has nothing against it.
func good() check.Around {
	return check.Around{
		Sources: []check.Source{{Topic: "rigs/x/senml", Alive: true, Skew: 5e6}}, Sessions: []check.Session{{Filter: "rigs/x/senml", Connected: true}},
		Recording: true, Free: 100e9, Hash: "abc", Version: "C", Approved: "T. Eklund",
	}
}

// judge gives the result of a check, and the ids of what failed in it.
func judge(
	c *compute.Config, l *check.Limits, q *check.Request, g *check.Gather, around check.Around, earlier *check.Result, swapped ...string,
) (check.Result, []string) {
	r := q.Begin(g.From, around.Hash, around.Version)
	check.Judge(&r, l, q, g, &check.Bench{Compute: c, Period: period, Around: around, Earlier: earlier, Swapped: swapped}, g.To)
	ids := []string{}
	for i := range r.Items {
		if !r.Items[i].Passed {
			ids = append(ids, r.Items[i].ID)
		}
	}
	return r, ids
}

func request(phase, warmth string) *check.Request {
	q := &check.Request{Phase: phase, Warmth: warmth, By: "R. Aldous"}
	for _, tick := range check.DefaultTicks() {
		q.Ticks = append(q.Ticks, check.Ticked{ID: tick.ID, By: "R. Aldous"})
	}
	return q
}

// One thing is wrong at a time, and just the items that are about it fail, with the reason.
// Limits by hand: gauge √(120² + 50²) = 130 Pa; absolute √(40² + 30² + 50²) = 71 Pa;
// differential √(16² + 50²) = 52 Pa; cold thermocouples √(4² + 4²/3 + 3²) = 5.5 K, against the
// ambient √(4² + 0.5² + 3²) = 5.0 K, warm 40.3 K; noise 2 · 100/1.96 = 102 Pa.
func TestVerdicts(t *testing.T) {
	for _, tt := range []struct {
		name   string
		phase  string
		warmth string
		wrong  func(k *cell, a *check.Around, q *check.Request, l *check.Limits)
		want   string // ids that fail
		text   string // within the text of the first of them
	}{
		{"nothing", check.Before, check.Cold, nil, "", ""},
		{"nothing, warm", check.Before, check.Warm, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) {
			k.value[egt1], k.value[egt2], k.value[egt3], k.value[egt4] = 400, 420, 410, 395
		}, "", ""},
		{"gauge zero within its limit", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.value[gauge1] = 110 }, "", ""},
		{"gauge zero", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.value[gauge1] = -155 }, "zero.p_1", "against p_baro"},
		{"gauge under pressure", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, l *check.Limits) {
			k.value[gauge1], l.NotZero = 200e3, []int{gauge1}
		}, "", ""},
		{"absolute against the barometer", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.value[absolute] += 85 }, "zero.p_abs", "p_baro"},
		{"differential", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.value[differential] = 60 }, "zero.dp", "its other port"},
		{"a thermocouple", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.value[egt3] += 7 }, "temperature.egt_3", "from the others"},
		{"a thermocouple, warm", check.Before, check.Warm, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.value[egt3] += 35 }, "", ""},
		{"all of them, cold", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) {
			for i := egt1; i <= egt4; i++ {
				k.value[i] += 6
			}
		}, "temperature.egt_1 temperature.egt_2 temperature.egt_3 temperature.egt_4", "from t_ambient"},
		{"silent", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.silent[speed] = true }, "signal.speed", "silent"},
		{"silent pressure", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.silent[gauge2] = true }, "signal.p_2 zero.p_2", "silent"},
		{"no barometer", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.silent[baro] = true }, "signal.p_baro zero.p_abs", "silent"},
		{"out of range", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) {
			k.quality[speed] = monitor.QualityOutOfRange
		}, "signal.speed", "out of its range in 100 %"},
		{"noisy", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.sigma[gauge2] *= 3 }, "signal.p_2", "noisy"},
		{"stuck", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) { k.sigma[gauge2] = 0 }, "signal.p_2", "stuck"},
		{"left out", check.Before, check.Cold, func(k *cell, _ *check.Around, _ *check.Request, _ *check.Limits) {
			k.quality[egt2] = monitor.QualityExcluded
		}, "", ""},
		{"expired calibration", check.Before, check.Cold, func(_ *cell, _ *check.Around, _ *check.Request, _ *check.Limits) {}, "calibration", "p_1, sensor S-7, was due on 2023-11-01"},
		{"clock", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Sources[0].Skew = -3 * second }, "clock", "3.0 s off"},
		{"publisher", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Sources[0].Alive = false }, "sources", "fallen silent"},
		{"broker", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Sessions[0].Connected = false }, "broker", "not connected"},
		{"deaf", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Deaf = true }, "input_path", "do not come back"},
		{"not recording", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Recording = false }, "recording", "not stored"},
		// 11 channels · 20/s · 8 bytes · 2 h = 12.7 MB, twice that is asked for.
		{"disk", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Free = 20e6 }, "disk", "220 values/s"},
		{"disk for less", check.Before, check.Cold, func(_ *cell, a *check.Around, q *check.Request, _ *check.Limits) {
			a.Free, q.Planned = 20e6, 3600*second
		}, "", ""},
		{"disk not known", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Free = 0 }, "disk", "not known"},
		{"not approved", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Approved = "" }, "configuration", "not approved"},
		{"other files", check.Before, check.Cold, func(_ *cell, a *check.Around, _ *check.Request, _ *check.Limits) { a.Refused = "it is lit" }, "configuration", "refused: it is lit"},
		{"not ticked", check.Before, check.Cold, func(_ *cell, _ *check.Around, q *check.Request, _ *check.Limits) { q.Ticks = q.Ticks[1:] }, "tick.alarm_sound", "not ticked"},
		{"ticked by nobody", check.Before, check.Cold, func(_ *cell, _ *check.Around, q *check.Request, _ *check.Limits) { q.Ticks[3].By = " " }, "tick.fire_system", "not ticked"},
		{"after, without one before", check.After, check.Cold, nil, "shift", "no check before"},
	} {
		c, l := rig(t), check.Defaults()
		k, a, q := sound(c), good(), request(tt.phase, tt.warmth)
		if tt.want == "calibration" {
			c.Channels[gauge1].Record = calib.Record{Serial: "S-7", Due: "2023-11-01", Expires: 1_698_883_200 * second}
			c.Channels[gauge2].Record = calib.Record{Serial: "S-8", Due: "2023-11-01", Expires: 1_698_883_200 * second, Waiver: calib.Waiver{Who: "T. Eklund", Why: "spare at the laboratory"}}
		}
		if tt.wrong != nil {
			tt.wrong(&k, &a, q, &l)
		}
		r, ids := judge(c, &l, q, k.gather(c, &l, rand.New(rand.NewPCG(1, 1))), a, nil)
		if got := strings.Join(ids, " "); got != tt.want {
			t.Errorf("%s: failed %q, want %q", tt.name, got, tt.want)
			continue
		}
		if want := fmt.Sprintf("Data-system checks passed %d of %d. Not a clearance to start.", r.Of-len(ids), r.Of); r.Summary != want || r.Of != len(r.Items) {
			t.Errorf("%s: %q, want %q", tt.name, r.Summary, want)
		}
		if len(ids) > 0 {
			i := slices.IndexFunc(r.Items, func(it check.Item) bool { return it.ID == ids[0] })
			if !strings.Contains(r.Items[i].Text, tt.text) {
				t.Errorf("%s: %q, want %q in it", tt.name, r.Items[i].Text, tt.text)
			}
		}
	}
}

// A shift is judged without the error that both zeros have: √(2 · 50²) = 71 Pa, and the
// drift of 0.05 % of 260 kPa = 130 Pa where it is stated.
func TestShift(t *testing.T) {
	c := rig(t)
	for _, tt := range []struct {
		name         string
		first, moved float64 // Pa
		drift        float64
		want         string
	}{
		{"none", 110, 0, 0, ""},
		{"less than draughts", 0, 60, 0, ""},
		{"more", 0, -90, 0, "shift.p_1"},
		{"more, of a zero that was off", 300, 90, 0, "zero.p_1 shift.p_1"},
		{"as it may drift", 0, -90, 0.0005, ""},
	} {
		l := check.Defaults()
		l.Drift = tt.drift
		rng := rand.New(rand.NewPCG(2, 2))
		k := sound(c)
		k.value[gauge1] = tt.first
		before, _ := judge(c, &l, request(check.Before, check.Cold), k.gather(c, &l, rng), good(), nil)
		k.value[gauge1] += tt.moved
		after, ids := judge(c, &l, request(check.After, check.Cold), k.gather(c, &l, rng), good(), &before)
		if got := strings.Join(ids, " "); got != tt.want {
			t.Errorf("%s: failed %q, want %q", tt.name, got, tt.want)
		}
		i := slices.IndexFunc(after.Items, func(it check.Item) bool { return it.ID == "shift.p_1" })
		if got := after.Items[i].Value.V; math.Abs(got-tt.moved) > 25 { // 2 · 51 Pa/√200 · √2 and a bit
			t.Errorf("%s: shift %.1f Pa, want %.1f", tt.name, got, tt.moved)
		}
	}
}

// Of a channel with another sensor than in the check before no shift is told.
func TestShiftOfAnotherSensor(t *testing.T) {
	c, l := rig(t), check.Defaults()
	rng := rand.New(rand.NewPCG(3, 3))
	k := sound(c)
	before, _ := judge(c, &l, request(check.Before, check.Cold), k.gather(c, &l, rng), good(), nil)
	after, ids := judge(c, &l, request(check.After, check.Cold), k.gather(c, &l, rng), good(), &before, "p_2")
	i := slices.IndexFunc(after.Items, func(it check.Item) bool { return it.ID == "shift.p_2" })
	if strings.Join(ids, " ") != "shift.p_2" || !strings.Contains(after.Items[i].Text, "exchanged") || after.Items[i].Value.Known {
		t.Errorf("failed %q: %+v", ids, after.Items[i])
	}
}

// What a sound rig fails of 200 seeded checks. Its noise is correlated over 0.25 s, and its
// draughts are as large as is stated. Usual is of instruments whose zeros are half as far off
// as U95 allows, which is for gain and linearity too; within of those that were accepted
// because no error was larger than U95, normal of those of which one in twenty is. A limit at
// 95 % fails one in twenty at most by its making, and half of the items have none.
func TestFalseVerdicts(t *testing.T) {
	c := rig(t)
	for _, tt := range []struct {
		name  string
		error func(rng *rand.Rand) float64 // in U95
		most  float64                      // part of the items
	}{
		{"usual", func(rng *rand.Rand) float64 { return rng.NormFloat64() / 1.96 / 2 }, 0.003},
		{"within", func(rng *rand.Rand) float64 { return 2*rng.Float64() - 1 }, 0.02},
		{"normal", func(rng *rand.Rand) float64 { return rng.NormFloat64() / 1.96 }, 0.02},
	} {
		failed, items := 0, 0
		for seed := range uint64(200) {
			rng := rand.New(rand.NewPCG(seed, 7))
			l, k := check.Defaults(), sound(c)
			k.rho = math.Exp(-0.05 / 0.25)
			for i := range k.value {
				u := &c.Channels[i].Uncertainty
				k.value[i] += tt.error(rng) * u.Fixed
				if c.Channels[i].Reference != calib.ReferenceNone && i != baro {
					k.value[i] += rng.NormFloat64() * l.Draught / 1.96
				}
			}
			r, ids := judge(c, &l, request(check.Before, check.Cold), k.gather(c, &l, rng), good(), nil)
			failed, items = failed+len(ids), items+r.Of
		}
		t.Logf("%s: %d of %d items", tt.name, failed, items)
		if float64(failed) > tt.most*float64(items) {
			t.Errorf("%s: %d of %d items of sound rigs fail, want %.1f %% at most", tt.name, failed, items, 100*tt.most)
		}
	}
}

// A request that is not understood says why.
func TestRequest(t *testing.T) {
	l := check.Defaults()
	l.Ticks = []check.Tick{{ID: "drain_valve", Title: "Drain valve seen closed"}}
	for _, tt := range []struct {
		q    check.Request
		want string
	}{
		{check.Request{Phase: "during", Warmth: check.Cold}, "during"},
		{check.Request{Phase: check.Before}, "warmth"},
		{check.Request{Phase: check.Before, Warmth: check.Cold, Planned: -1}, "planned"},
		{check.Request{Phase: check.Before, Warmth: check.Cold, Ticks: []check.Ticked{{ID: "horn"}}}, "horn"},
		{check.Request{Phase: check.Before, Warmth: check.Cold, Ticks: []check.Ticked{{ID: "drain_valve", By: "R. Aldous"}}}, ""},
	} {
		err := tt.q.Check(&l)
		if (err == nil) != (tt.want == "") || err != nil && !strings.Contains(err.Error(), tt.want) {
			t.Errorf("%+v: %v, want %q", tt.q, err, tt.want)
		}
	}
}

// Without one scan every channel is silent, and nothing passes that needs one.
func TestNoScans(t *testing.T) {
	c, l := rig(t), check.Defaults()
	r, ids := judge(c, &l, request(check.Before, check.Cold), &check.Gather{}, good(), nil)
	for _, it := range r.Items {
		if it.Channel != "" && it.Passed {
			t.Errorf("%s passes", it.ID)
		}
	}
	if len(ids) < channels {
		t.Errorf("failed %q", ids)
	}
	if text, err := json.Marshal(&r); err != nil || strings.Contains(string(text), "NaN") {
		t.Errorf("%v %s", err, text)
	}
}

// Once it has begun, gathering allocates nothing.
func TestAddAllocatesNothing(t *testing.T) {
	c, l := rig(t), check.Defaults()
	scan := monitor.NewScan(channels)
	for i := range channels {
		scan.Quality[i], scan.Samples[i] = monitor.QualityGood, 1
	}
	var g check.Gather
	n := int64(0)
	if got := testing.AllocsPerRun(100, func() {
		n++
		scan.T = n * period
		g.Add(&l, c, period, scan)
	}); got > 0 {
		t.Errorf("%g allocations per scan", got)
	}
}
