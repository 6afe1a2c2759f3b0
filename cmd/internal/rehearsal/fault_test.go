package rehearsal

import (
	"errors"
	"math"
	"slices"
	"testing"
	"time"

	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/rules/pipeline"
)

func TestParseFault(t *testing.T) {
	for _, tt := range []struct {
		text string
		want Fault
		ok   bool
	}{
		{"probe-open@25s", Fault{Kind: ProbeOpen, At: 25 * time.Second}, true},
		{"probe-open@1m5s:egt_3", Fault{Kind: ProbeOpen, At: 65 * time.Second, Channel: "egt_3"}, true},
		{"publisher-silent@0s+10s", Fault{Kind: PublisherSilent, For: 10 * time.Second}, true},
		{"burst@4s+250ms:p7_1", Fault{Kind: Burst, At: 4 * time.Second, For: 250 * time.Millisecond, Channel: "p7_1"}, true},
		{"hot-streak@30s*0.5:egt_2", Fault{Kind: HotStreak, At: 30 * time.Second, Size: 0.5, Channel: "egt_2"}, true},
		{"pressure-leak@1s+2s*2", Fault{Kind: PressureLeak, At: time.Second, For: 2 * time.Second, Size: 2}, true},
		{"hot-streak@30s*0", Fault{}, false},
		{"hot-streak@30s*", Fault{}, false},
		{"hot-streak@30s*NaN", Fault{}, false},
		{"probe-open", Fault{}, false},
		{"probe-open@", Fault{}, false},
		{"probe-open@25", Fault{}, false},
		{"probe-open@-1s", Fault{}, false},
		{"probe-open@1s+0s", Fault{}, false},
		{"probe-open@1s+", Fault{}, false},
		{"invalid@1s", Fault{}, false},
		{"@1s", Fault{}, false},
		{"", Fault{}, false},
	} {
		got, err := ParseFault(tt.text)
		if (err == nil) != tt.ok || got != tt.want || (err != nil && !errors.Is(err, ErrFault)) {
			t.Errorf("%q: %+v, %v; want %+v", tt.text, got, err, tt.want)
		}
	}
}

func FuzzParseFault(f *testing.F) {
	f.Add("probe-open@25s:egt_3")
	f.Add("burst@4s+250ms")
	f.Add("hot-streak@1s+2s*0.5:egt_2")
	f.Add("@+:")
	f.Fuzz(func(t *testing.T, s string) {
		if got, err := ParseFault(s); err == nil && (got.Kind.Text() == "" || got.At < 0 || got.For < 0 || got.Size < 0) {
			t.Errorf("%q is taken as %+v", s, got)
		}
	})
}

// Every kind has a name of its own that ParseFault takes, and a text.
func TestFaultKinds(t *testing.T) {
	seen := map[string]bool{}
	for _, k := range FaultKinds() {
		f, err := ParseFault(k.String() + "@1s")
		if err != nil || f.Kind != k || k.Text() == "" || seen[k.String()] {
			t.Errorf("kind %d: %q, %q, %v", k, k, k.Text(), err)
		}
		seen[k.String()] = true
	}
	if len(seen) != int(numFaults)-1 || FaultKind(99).String() != "invalid" || FaultKind(99).Text() != "" {
		t.Errorf("%d kinds", len(seen))
	}
}

// reading is a sample of one channel as it left the rig.
type reading struct {
	at, time int64
	value    float64
	unit     string
}

// stream is the first 36 s of a rehearsal, decoded: no fault below goes on longer.
type stream struct {
	messages []Message
	faults   decode.Faults
	broken   []int64 // At of messages that are refused
	channels map[string][]reading
}

func decoded(t *testing.T, cfg pipeline.Config, faults ...string) *stream {
	t.Helper()
	s := &stream{channels: map[string][]reading{}}
	r, err := New(cfg, Options{Seed: 5, Scenario: Quick, Rate: 20, Start: epoch, Faults: faulty(t, faults...)})
	if err != nil {
		t.Fatal(err)
	}
	for r.now < 36*time.Second {
		s.messages, _ = r.Next(s.messages)
	}
	d := decode.New(decode.Limits{})
	last := int64(math.MinInt64)
	for _, m := range s.messages {
		if m.At+m.Delay < last || m.Delay < 0 {
			t.Fatalf("message of %d is published at %d, after one at %d", m.At, m.At+m.Delay, last)
		}
		last = m.At + m.Delay
		res := d.Decode(decode.SenMLJSON, m.Topic, m.Payload, last)
		for i, n := range res.Faults {
			s.faults[i] += n
		}
		if res.Refused {
			s.broken = append(s.broken, m.At)
		}
		for _, v := range res.Samples {
			s.channels[string(v.Name)] = append(s.channels[string(v.Name)], reading{m.At, v.Time, v.Value, string(v.Unit)})
		}
	}
	return s
}

// between gives the readings of a channel taken from lo to before hi, s.
func (s *stream) between(channel string, lo, hi float64) []reading {
	var out []reading
	for _, v := range s.channels[channel] {
		if v.at >= epoch+int64(lo*1e9) && v.at < epoch+int64(hi*1e9) {
			out = append(out, v)
		}
	}
	return out
}

func all(rs []reading, ok func(reading) bool) bool {
	return len(rs) > 0 && !slices.ContainsFunc(rs, func(r reading) bool { return !ok(r) })
}

// Every fault does what it says, when it says, to whom it says.
func TestFaults(t *testing.T) {
	cfg := load(t, "example")
	plain := decoded(t, cfg)
	if plain.faults.Total() > 0 {
		t.Fatalf("a rehearsal without faults has %v", plain.faults)
	}
	pack := 20.0 // packs per second
	for _, tt := range []struct {
		fault   string
		channel string // the only one that may differ; "" = any
		check   func(t *testing.T, s *stream)
	}{
		// The burn-out code is the first of the rig file's invalid codes.
		{"probe-open@20s", "egt_1", func(t *testing.T, s *stream) {
			t.Helper()
			if !all(s.between("egt_1", 20, 99), func(r reading) bool { return r.value == 1372 }) {
				t.Error("the probe does not send its burn-out code")
			}
		}},
		{"probe-open@20s:t_bearing_front", "t_bearing_front", func(t *testing.T, s *stream) {
			t.Helper()
			if !all(s.between("t_bearing_front", 20, 99), func(r reading) bool { return r.value > 300 }) {
				t.Error("an open probe without a code does not read above its range")
			}
		}},
		{"probe-stuck@20s+10s:p7_2", "p7_2", func(t *testing.T, s *stream) {
			t.Helper()
			got := s.between("p7_2", 20, 30)
			if !all(got, func(r reading) bool { return r.value == got[0].value }) || all(s.between("p7_2", 30, 40), func(r reading) bool { return r.value == got[0].value }) {
				t.Error("the probe is not stuck for 10 s")
			}
		}},
		{"probe-drift@10s:t7_1", "t7_1", func(t *testing.T, s *stream) {
			t.Helper()
			// 0.2 % of 1140 K per second over 20 s; the ADC's step is 0.05 K.
			got, want := s.between("t7_1", 30, 30.01)[0].value-plain.between("t7_1", 30, 30.01)[0].value, 0.002*1140*20.0
			if math.Abs(got-want) > 0.1 {
				t.Errorf("drift of %g K, want %g K", got, want)
			}
		}},
		{"hot-streak@24s:egt_5", "egt_5", func(t *testing.T, s *stream) {
			t.Helper()
			// The probe feels 80 K more and takes about a second to show it.
			now, soon := s.between("egt_5", 24, 24.01)[0], s.between("egt_5", 30, 30.01)[0]
			if d := now.value - plain.between("egt_5", 24, 24.01)[0].value; d > 10 {
				t.Errorf("the probe jumps by %g K", d)
			}
			if d := soon.value - plain.between("egt_5", 30, 30.01)[0].value; math.Abs(d-80) > 1 {
				t.Errorf("the probe reads %g K more, want 80 K", d)
			}
		}},
		{"pressure-zero-shift@25s", "p7_1", func(t *testing.T, s *stream) {
			t.Helper()
			// 1 % of the range from −10 to 250 kPa; the ADC's step is 0.005 kPa.
			for i, r := range s.between("p7_1", 25, 99) {
				if d := r.value - plain.between("p7_1", 25, 99)[i].value; math.Abs(d-2.6) > 0.006 {
					t.Fatalf("shift of %g kPa, want 2.6 kPa", d)
				}
			}
		}},
		{"probe-short@20s+10s:egt_2", "egt_2", func(t *testing.T, s *stream) {
			t.Helper()
			// The terminals are at 12 °C and 5 K; the module is off by 1.6 K at most.
			if !all(s.between("egt_2", 20, 30), func(r reading) bool { return math.Abs(r.value-17) < 4 }) || !all(s.between("egt_2", 30, 36), func(r reading) bool { return r.value > 300 }) {
				t.Error("the probe does not read its terminals for 10 s")
			}
		}},
		{"probe-offset@20s*2:egt_2", "egt_2", func(t *testing.T, s *stream) {
			t.Helper()
			for i, r := range s.between("egt_2", 20, 99) { // 30 K; the ADC's step is 0.05 K
				if d := r.value - plain.between("egt_2", 20, 99)[i].value; math.Abs(d-30) > 0.06 {
					t.Fatalf("the probe is off by %g K", d)
				}
			}
		}},
		{"noisy@0s+1.5s:p_inlet", "p_inlet", func(t *testing.T, s *stream) {
			t.Helper()
			// At rest: six times the scatter, from the same chance, but for steps of the ADC of 0.5 Pa.
			scatter := func(rs []reading) (sum float64) {
				for i := range rs[1:] {
					sum += math.Abs(rs[i+1].value - rs[i].value)
				}
				return sum
			}
			if k := scatter(s.between("p_inlet", 0, 1.5)) / scatter(plain.between("p_inlet", 0, 1.5)); math.Abs(k-6) > 0.5 {
				t.Errorf("the channel scatters %g times as much", k)
			}
		}},
		{"probe-slow@9s:egt_3", "egt_3", func(t *testing.T, s *stream) {
			t.Helper()
			// Within 2 s of light-off the others have risen by far more.
			slow, fast := s.between("egt_3", 9, 9.01)[0].value, plain.between("egt_3", 9, 9.01)[0].value
			if math.Abs(slow-fast) > 5 {
				t.Errorf("the probe jumps from %g to %g", fast, slow)
			}
			top := 0.0
			for i, r := range s.between("egt_3", 9, 20) {
				top = max(top, math.Abs(r.value-plain.between("egt_3", 9, 20)[i].value))
			}
			if top < 30 {
				t.Errorf("the probe is behind by no more than %g K", top)
			}
		}},
		{"pressure-leak@25s*2:p7_3", "p7_3", func(t *testing.T, s *stream) {
			t.Helper()
			// 70 % of the gauge pressure; the ADC's step is 0.005 kPa, the offset some 0.05 kPa.
			for i, r := range s.between("p7_3", 25, 99) {
				if want := 0.7 * plain.between("p7_3", 25, 99)[i].value; math.Abs(r.value-want) > 0.4 {
					t.Fatalf("%g kPa, want %g kPa", r.value, want)
				}
			}
		}},
		{"pressure-leak@25s:p_baro", "p_baro", func(t *testing.T, s *stream) {
			t.Helper()
			if !slices.Equal(s.channels["p_baro"], plain.channels["p_baro"]) {
				t.Error("a leak changes what is at the pressure of its surroundings")
			}
		}},
		{"pressure-blocked@20s:p7_1", "p7_1", func(t *testing.T, s *stream) {
			t.Helper()
			before := s.between("p7_1", 19.9, 20)[0].value
			var same int
			readings := s.between("p7_1", 20, 30)
			for i, r := range readings {
				if math.Abs(r.value-before) > 0.04*before {
					t.Fatalf("%g kPa, after %g kPa before", r.value, before)
				}
				if i > 0 && r.value == readings[i-1].value {
					same++
				}
			}
			if same > len(readings)/2 {
				t.Error("a blocked line has no noise")
			}
		}},
		{"barometer-unit@25s", "p_baro", func(t *testing.T, s *stream) {
			t.Helper()
			// 1006 hPa is 29.7 inHg.
			if !all(s.between("p_baro", 25, 99), func(r reading) bool { return math.Abs(r.value-29.7) < 0.1 && r.unit == "hPa" }) {
				t.Error("the barometer is not sent in inches of mercury")
			}
		}},
		{"dropouts@20s+10s:t7_2", "t7_2", func(t *testing.T, s *stream) {
			t.Helper()
			// 200 samples: 133 ± 4 × 6.7 come.
			if n := len(s.between("t7_2", 20, 30)); n < 106 || n > 160 || len(s.between("t7_2", 30, 36)) != len(plain.between("t7_2", 30, 36)) {
				t.Errorf("%d samples of 200 come", n)
			}
		}},
		{"barometer-loss@25s", "p_baro", func(t *testing.T, s *stream) {
			t.Helper()
			if len(s.between("p_baro", 0, 25)) == 0 || len(s.between("p_baro", 25, 99)) > 0 {
				t.Error("the barometer is not lost")
			}
		}},
		{"not-a-number@25s+2s:p_exit", "p_exit", func(t *testing.T, s *stream) {
			t.Helper()
			if n := s.faults[ingest.ReasonNotFinite]; n != uint32(2*pack) || s.faults.Total() != n || len(s.between("p_exit", 25, 27)) > 0 {
				t.Errorf("faults %v", s.faults)
			}
		}},
		{"wrong-unit@25s+2s:p_exit", "p_exit", func(t *testing.T, s *stream) {
			t.Helper()
			if !all(s.between("p_exit", 25, 27), func(r reading) bool { return r.unit == "V" }) || !all(s.between("p_exit", 27, 99), func(r reading) bool { return r.unit == "kPa" }) {
				t.Error("the unit is not changed for 2 s")
			}
		}},
		{"publisher-silent@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			if len(s.between("speed", 25, 30)) > 0 || len(s.between("speed", 30, 31)) != int(pack) || len(plain.messages)-len(s.messages) != int(5*pack) {
				t.Error("the publisher is not silent for 5 s")
			}
		}},
		{"clock-skew@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			if !all(s.between("speed", 25, 30), func(r reading) bool { return r.time == r.at+30e9 }) || !all(s.between("speed", 30, 99), func(r reading) bool { return r.time == r.at }) {
				t.Error("the clock is not 30 s ahead for 5 s")
			}
		}},
		{"clock-past@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			if !all(s.between("speed", 25, 33), func(r reading) bool { return r.time == r.at-600e9 }) {
				t.Error("the clock is not 10 min behind")
			}
		}},
		{"duplicate@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			if n := len(s.messages) - len(plain.messages); n != int(3*pack) || len(s.between("speed", 25, 28)) != int(6*pack) {
				t.Errorf("%d copies", n)
			}
			count := map[string]int{}
			for _, m := range s.messages {
				count[string(m.Payload)]++
			}
			for _, n := range count {
				if n > 2 {
					t.Fatal("a message comes more than twice")
				}
			}
		}},
		{"reorder@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			var back int
			for i := range s.messages[1:] {
				if s.messages[i+1].At < s.messages[i].At {
					back++
				}
			}
			if len(s.messages) != len(plain.messages) || back < 10 || back > 20 {
				t.Errorf("%d of %d messages are overtaken, want most of 20", back, len(s.messages))
			}
		}},
		{"burst@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			var late int
			for _, m := range s.messages {
				if m.At >= epoch+25e9 && m.At < epoch+28e9 {
					late++
					if m.At+m.Delay < epoch+28e9 || m.At+m.Delay > epoch+28.1e9 {
						t.Fatalf("a message of %d comes at %d", m.At, m.At+m.Delay)
					}
				}
			}
			if late != int(3*pack) || len(s.messages) != len(plain.messages) {
				t.Errorf("%d messages held back, %d of %d in all", late, len(s.messages), len(plain.messages))
			}
		}},
		{"malformed@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			if len(s.broken) != int(pack) || s.faults[ingest.ReasonSyntax] != uint32(pack) || s.broken[0] < epoch+25e9 || s.broken[19] >= epoch+27e9 {
				t.Errorf("%d broken messages", len(s.broken))
			}
		}},
		{"truncated@25s:speed", "", func(t *testing.T, s *stream) {
			t.Helper()
			if len(s.broken) != int(pack) || len(s.messages) != len(plain.messages) {
				t.Errorf("%d broken messages", len(s.broken))
			}
		}},
		{"huge@25s", "", func(t *testing.T, s *stream) {
			t.Helper()
			if n := s.faults[ingest.ReasonTooLarge]; n != 2 || len(s.messages) != len(plain.messages)+2 || len(s.between("speed", 25, 27)) != int(2*pack) {
				t.Errorf("%d huge messages", n)
			}
		}},
	} {
		t.Run(tt.fault, func(t *testing.T) {
			s := decoded(t, cfg, tt.fault)
			tt.check(t, s)
			if tt.channel == "" {
				return
			}
			for name, want := range plain.channels {
				if name != tt.channel && !slices.Equal(s.channels[name], want) {
					t.Errorf("channel %q is touched too", name)
				}
			}
		})
	}
}

// The end of the test lets go of what a fault holds back.
func TestBurstAtTheEnd(t *testing.T) {
	cfg := load(t, "minimal")
	plain := play(t, cfg, Options{Scenario: Quick, Rate: 10})
	if got := play(t, cfg, Options{Scenario: Quick, Rate: 10, Faults: faulty(t, "burst@60s+1h")}); len(got) != len(plain) {
		t.Errorf("%d messages of %d", len(got), len(plain))
	}
}

// Damage is damage in every format.
func TestDamage(t *testing.T) {
	cfg := invented(t)
	r, err := New(cfg, Options{Scenario: Quick, Start: epoch, Faults: faulty(t, "malformed@0s+1h", "not-a-number@0s+1h:xa", "not-a-number@0s+1h:xb", "not-a-number@0s+1h:xc", "not-a-number@0s+1h:alone")})
	if err != nil {
		t.Fatal(err)
	}
	d := decode.New(decode.Limits{})
	odd, notFinite := map[string]int{}, map[string]uint32{}
	for range 100 {
		msgs, _ := r.Next(nil)
		for _, m := range msgs {
			res := d.Decode(r.groups[slices.IndexFunc(r.groups, func(g group) bool { return g.topic == m.Topic })].format, m.Topic, m.Payload, m.At)
			if len(res.Samples) == 0 && res.Faults[ingest.ReasonSyntax] > 0 {
				odd[m.Topic]++
			}
			notFinite[m.Topic] += res.Faults[ingest.ReasonNotFinite] + res.Faults[ingest.ReasonSyntax]
		}
	}
	for _, g := range r.groups {
		if odd[g.topic] < 40 {
			t.Errorf("%s: %d of 50 damaged messages are refused", g.topic, odd[g.topic])
		}
		if notFinite[g.topic] < 90 {
			t.Errorf("%s: %d of 100 messages have a value that is no number", g.topic, notFinite[g.topic])
		}
	}
}

// A fault that a channel cannot have is refused.
func TestFaultDoesNotFit(t *testing.T) {
	cfg := load(t, "example")
	for _, fault := range []string{"barometer-unit@1s:egt_1", "barometer-unit@1s:p_oil", "probe-short@1s:no_such"} {
		if _, err := New(cfg, Options{Scenario: Quick, Faults: faulty(t, fault)}); !errors.Is(err, ErrFault) {
			t.Errorf("%s: %v", fault, err)
		}
	}
}
