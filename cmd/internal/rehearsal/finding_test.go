package rehearsal_test

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// told is a finding as it came about in a rehearsal.
type told struct {
	at      float64 // s of the test
	channel string
	monitor.Finding
}

func (f told) String() string {
	return fmt.Sprintf("%.1f s %s %v proven %v size %.3g", f.at, f.channel, f.Kind, f.Proven, f.Size)
}

// findings steps a rehearsal and gives each change of a finding, the channels that were
// left out of their group at some time, and the rules that raised an alarm.
func findings(tb testing.TB, o rehearsal.Options, faults ...string) (all []told, out, raised map[string]bool) {
	tb.Helper()
	bundle, cfg := example(tb)
	st := newStepper()
	before := make([]monitor.FindingKind, len(cfg.Compute.Channels))
	out = map[string]bool{}
	st.each = func(o *pipeline.Outcome) {
		if o.Kind != pipeline.OutcomeChannels {
			return
		}
		for i, f := range o.Scan.Finding {
			if f.Kind != before[i] {
				before[i] = f.Kind
				all = append(all, told{float64(o.T-epoch) / 1e9, cfg.Compute.Channels[i].ID, f})
			}
			if o.Scan.Quality[i] == monitor.QualityExcluded {
				out[cfg.Compute.Channels[i].ID] = true
			}
		}
	}
	o.Start = epoch
	for _, text := range faults {
		f, err := rehearsal.ParseFault(text)
		if err != nil {
			tb.Fatal(err)
		}
		o.Faults = append(o.Faults, f)
	}
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		tb.Fatal(err)
	}
	seq := uint64(0)
	add := func(host int64, kind ingest.Kind, topic string, payload []byte) {
		seq++
		st.step(ingest.Record{Seq: seq, Host: host, Kind: kind, Topic: topic, Payload: payload})
	}
	add(epoch-second, ingest.KindBoot, "", []byte(`{"epoch":1}`))
	add(epoch-second, ingest.KindConfig, "", bundle)
	var msgs []rehearsal.Message
	for more := true; more; {
		msgs, more = rig.Next(msgs[:0])
		for _, m := range msgs {
			add(m.At+m.Delay, ingest.KindMessage, m.Topic, m.Payload)
		}
	}
	return all, out, st.raised
}

// paces is a test with steady running from 35 s on, a throttle step down at 110 s, a chop
// to idle at 135 s, a slam to power at 150 s, another step down at 180 s and the shutdown at
// 210 s.
func paces() []rehearsal.Segment {
	run := func(seconds, speed float64) rehearsal.Segment {
		return rehearsal.Segment{Name: "run", Seconds: seconds, Speed: speed, Fuel: true}
	}
	return []rehearsal.Segment{
		{Name: "off", Seconds: 12},
		{Name: "crank", Seconds: 3, Starter: true},
		{Name: "start", Seconds: 10, Speed: 0.43, Starter: true, Fuel: true},
		run(10, 0.43), run(75, 0.95), run(25, 0.85), run(15, 0.43), run(30, 0.95), run(20, 0.6), run(10, 0.43),
		{Name: "shutdown", Seconds: 60},
	}
}

// Each fault of a sensor is found by name and in time, of the struck channel alone, and
// the probe is left out if that is due. Times are from the strike or the first throttle
// movement that shows it.
func TestFindings(t *testing.T) {
	for i, tt := range []struct {
		fault  string
		want   []string // findings of the struck channel one after the other
		by     float64  // s of the test: when the last of them stands
		out    bool     // left out of rake or harness by the watch: what has no value is not in it anyway
		alarms []string
	}{
		{"probe-open@90s:egt_3", []string{"open proven"}, 91.1, false, []string{"sensor_failed", "egt_probe_lost"}},
		{"probe-open@90s:t7_2", []string{"open proven"}, 91.1, false, []string{"sensor_failed"}},
		{"probe-open@90s:p7_2", []string{"no_reading proven"}, 91.1, false, []string{"sensor_failed", "rake_probe_lost"}}, // its code is -9999
		{"probe-open@90s:t_bearing_front", []string{"open proven"}, 91.1, false, []string{"sensor_failed"}},
		{"probe-short@90s:egt_3", []string{"short proven"}, 92.5, true, []string{"sensor_failed", "egt_probe_lost"}},
		{"probe-short@1s:egt_3", []string{"short proven"}, 18, true, []string{"sensor_failed"}}, // lit at 16 s
		{"probe-short@90s:t7_2", []string{"short proven"}, 92.5, true, []string{"sensor_failed"}},
		{"probe-stuck@90s:egt_3", []string{"stuck proven"}, 114, true, []string{"sensor_failed"}}, // 20 s of one value; by its mates at the step
		{"probe-stuck@90s:p7_2", []string{"stuck proven"}, 101.1, false, []string{"sensor_failed"}},
		// A slow probe is hot after the step down: gas, until it is seen to come closer.
		{"probe-slow@90s:egt_3", []string{"hot_streak suspected", "slow proven"}, 119, false, []string{"egt_hot_streak", "sensor_failed"}},
		{"probe-slow@90s*0.5:egt_3", []string{"slow proven"}, 117, false, []string{"sensor_failed"}},
		{"probe-slow@1s:egt_3", []string{"slow proven"}, 20, false, []string{"sensor_failed"}},
		{"probe-slow@90s:t7_2", []string{"hot_streak suspected", "slow proven"}, 121, true, []string{"sensor_failed"}},
		{"probe-drift@90s:egt_3", []string{"drift suspected"}, 116, false, []string{"egt_hot_streak"}}, // 2.3 K/s past 40 K
		{"probe-drift@90s:t7_2", []string{"drift suspected"}, 116, true, []string{"sensor_doubtful"}},
		{"hot-streak@90s:egt_3", []string{"hot_streak suspected"}, 96, false, []string{"egt_hot_streak"}},
		{"hot-streak@90s*0.7:egt_3", []string{"hot_streak suspected"}, 96, false, []string{"egt_hot_streak"}},
		{"hot-streak@90s+15s:egt_3", []string{"hot_streak suspected", ""}, 113, false, []string{"egt_hot_streak"}},
		{"pressure-zero-shift@90s:p7_2", []string{"departs suspected", "zero_shift proven"}, 125, true, []string{"sensor_failed"}},
		{"pressure-zero-shift@1s:p7_2", []string{"zero_shift proven"}, 8, false, []string{"sensor_failed"}},
		{"pressure-zero-shift@1s:p_exit", []string{"zero_shift proven"}, 8, false, []string{"sensor_failed"}},
		{"pressure-leak@90s:p7_2", []string{"departs suspected", "leak proven"}, 113, true, []string{"sensor_failed", "sensor_doubtful"}},
		{"pressure-leak@90s*0.5:p7_2", []string{"departs suspected", "leak proven"}, 113, true, []string{"sensor_failed"}},
		{"pressure-leak@1s:p7_2", []string{"departs suspected", "leak proven"}, 138, true, []string{"sensor_failed"}}, // it was learned as its pattern
		{"pressure-blocked@90s:p7_2", []string{"blocked proven"}, 113, true, []string{"sensor_failed"}},
		{"pressure-blocked@1s:p7_2", []string{"blocked proven"}, 21, true, []string{"sensor_failed"}},
		{"barometer-unit@90s:p_baro", []string{"out_of_range proven"}, 91.1, false, []string{"sensor_failed"}},
		{"dropouts@90s:egt_3", nil, 0, false, nil},
		{"barometer-loss@90s:p_baro", nil, 0, false, nil}, // no reading says nothing of the sensor
	} {
		if testing.Short() && i%6 != 0 {
			continue
		}
		t.Run(tt.fault, func(t *testing.T) {
			t.Parallel()
			all, out, raised := findings(t, rehearsal.Options{Seed: 3, Rate: 20, Plan: paces()}, tt.fault)
			f, err := rehearsal.ParseFault(tt.fault)
			if err != nil {
				t.Fatal(err)
			}
			var got []string
			var last float64
			for _, x := range all {
				if x.channel != f.Channel {
					t.Errorf("another channel: %v", x)
					continue
				}
				last = x.at
				word := ""
				if x.Kind != monitor.NoFinding {
					word = x.Kind.String() + map[bool]string{true: " proven", false: " suspected"}[x.Proven]
				}
				got = append(got, word)
			}
			if !slices.Equal(got, tt.want) || last > tt.by || len(got) > 0 && all[0].at < f.At.Seconds() {
				t.Errorf("found %v, want %q by %g s", all, tt.want, tt.by)
			}
			if out[f.Channel] != tt.out || len(out) > 1 {
				t.Errorf("left out are %v", out)
			}
			for _, rule := range tt.alarms {
				if !raised[rule] {
					t.Errorf("no alarm %s; there are %v", rule, raised)
				}
			}
			if len(tt.alarms) == 0 && (raised["sensor_failed"] || raised["sensor_doubtful"] || raised["egt_hot_streak"]) {
				t.Errorf("alarms %v", raised)
			}
		})
	}
}

// Nothing is found of sound sensors: not in an hour of throttle steps of every size, chops
// that unchoke the throat and over-temperatures, nor in the tests that ship, with the
// noise that the rig file states and more.
func TestNoFalseFindings(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 9))
	hour := []rehearsal.Segment{
		{Name: "off", Seconds: 10},
		{Name: "crank", Seconds: 3, Starter: true},
		{Name: "start", Seconds: 10, Speed: 0.43, Starter: true, Fuel: true},
	}
	for left := 3480.0; left > 0; {
		s := rehearsal.Segment{Name: "run", Seconds: 2 + 60*rng.Float64()*rng.Float64(), Speed: 0.43 + 0.57*rng.Float64(), Fuel: true, Ramp: rng.IntN(3) == 0}
		switch rng.IntN(12) {
		case 0, 1:
			s.Bleed = 1
		case 2:
			s.EGT, s.Speed = 1012, 0.95 // K: 20 K above the lowest run limit
		}
		hour = append(hour, s)
		left -= s.Seconds
	}
	hour = append(hour, rehearsal.Segment{Name: "shutdown", Seconds: 90})
	for name, o := range map[string]rehearsal.Options{
		"an hour":        {Seed: 1, Rate: 20, Plan: hour},
		"full":           {Seed: 2, Rate: 20, Scenario: rehearsal.Full},
		"full, noisy":    {Seed: 3, Rate: 20, Scenario: rehearsal.Full, Noise: 3, Error: 2},
		"quick":          {Seed: 4, Rate: 20, Scenario: rehearsal.Quick},
		"paces":          {Seed: 5, Rate: 20, Plan: paces()},
		"paces, at 50/s": {Seed: 6, Rate: 50, Plan: paces()},
	} {
		if testing.Short() && name != "quick" {
			continue
		}
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			all, out, raised := findings(t, o)
			if len(all) > 0 || len(out) > 0 || raised["sensor_failed"] || raised["sensor_doubtful"] || raised["egt_hot_streak"] {
				t.Errorf("found %v, left out %v, alarms %v", all, out, raised)
			}
			if name == "an hour" && (!raised["unchoke"] || !raised["egt_run_max_exceeded"]) {
				t.Errorf("the hour has no unchoke or no over-temperature: alarms %v", raised)
			}
		})
	}
}
