package rehearsal

import (
	"math"
	"testing"
	"time"
)

// playScript plays a plan on the example rig and gives the truth of each pack.
func playScript(t *testing.T, o Options) (channel func(id string) int, truths []Truth) {
	t.Helper()
	cfg := load(t, "example")
	r, err := New(cfg, o)
	if err != nil {
		t.Fatal(err)
	}
	var msgs []Message
	for {
		var more bool
		if msgs, more = r.Next(msgs[:0]); !more {
			break
		}
		var one Truth
		r.Truth(&one)
		truths = append(truths, one)
	}
	return func(id string) int {
		for i := range cfg.Compute.Channels {
			if cfg.Compute.Channels[i].ID == id {
				return i
			}
		}
		t.Fatalf("no channel %q", id)
		return -1
	}, truths
}

// running is a start and then a run at 95 % with more behind it.
func running(more ...Segment) []Segment {
	return append([]Segment{
		{Name: "off", Seconds: 1},
		{Name: "crank", Seconds: 2.5, Starter: true},
		{Name: "light-off", Seconds: 8, Speed: 0.43, Starter: true, Fuel: true},
		{Name: "run", Seconds: 20, Speed: 0.95, Fuel: true},
	}, more...)
}

// Expectations are what the options say; tolerances are noise, lag and weather.
func TestScript(t *testing.T) {
	t.Run("the EGT comes up to what a segment asks", func(t *testing.T) {
		channel, truths := playScript(t, Options{Seed: 1, Rate: 20, Plan: running(Segment{Name: "rich", Seconds: 15, Speed: 0.95, Fuel: true, EGT: 1010})})
		egt := 0.0
		for k := range 8 {
			egt += truths[len(truths)-1].Indicated[channel("egt_1")+k] / 8
		}
		if math.Abs(egt-1010) > 2 {
			t.Errorf("mean of the harness %g K, want 1010", egt)
		}
	})
	t.Run("a quenched engine cools below the lit threshold while it turns fast", func(t *testing.T) {
		channel, truths := playScript(t, Options{Seed: 1, Rate: 20, Plan: running(Segment{Name: "out", Seconds: 5, Speed: 0.95, Fuel: true, Quench: true})})
		last := truths[len(truths)-1].Indicated
		if egt, rpm := last[channel("egt_1")], 60*last[channel("speed")]; egt > 473 || rpm < 9000 {
			t.Errorf("EGT %g K at %g rpm, want below 473 above 9000", egt, rpm)
		}
	})
	t.Run("day", func(t *testing.T) {
		channel, truths := playScript(t, Options{Seed: 1, Rate: 20, Plan: running(), Day: Day{Ambient: 303, Barometer: 97000, Humidity: 0.9, Depression: 900}})
		if first := truths[0].Indicated[channel("egt_1")]; math.Abs(first-303) > 1 {
			t.Errorf("the harness begins at %g K, want that of the day", first)
		}
		last := truths[len(truths)-1].Indicated
		for _, want := range []struct {
			id         string
			value, tol float64
		}{{"t_ambient", 303, 0.5}, {"p_baro", 97000, 25}, {"humidity", 0.9, 0.02}, {"dp_cell", -900, 150}} {
			if got := last[channel(want.id)]; math.Abs(got-want.value) > want.tol {
				t.Errorf("%s %g, want %g", want.id, got, want.value)
			}
		}
	})
	t.Run("a change is truth, a fault is not", func(t *testing.T) {
		channel, truths := playScript(t, Options{
			Seed: 1, Rate: 20, Plan: running(),
			Changes: []Change{{Channel: "p_oil", At: 20 * time.Second, For: 5 * time.Second, Ramp: time.Second, To: 25e3}},
			Faults:  []Fault{{Kind: PressureZeroShift, Channel: "p_fuel", At: 20 * time.Second}, {Kind: NotANumber, Channel: "egt_3", At: 22 * time.Second, For: time.Second}, {Kind: PublisherSilent, At: 26 * time.Second, For: time.Second}},
		})
		oil, fuel := channel("p_oil"), channel("p_fuel")
		middle, before := &truths[20*22+9], &truths[20*19]
		if got := middle.Indicated[oil]; math.Abs(got-25e3) > 10 {
			t.Errorf("changed oil pressure %g Pa, want 25000", got)
		}
		if moved := middle.Indicated[fuel] - before.Indicated[fuel]; math.Abs(moved) > 3000 || middle.Raw[fuel]-before.Raw[fuel] < 7 {
			t.Errorf("shift of 10 kPa: truth moves by %g Pa, reading by %g kPa", moved, middle.Raw[fuel]-before.Raw[fuel])
		}
		if egt := channel("egt_3"); middle.Sent[egt] || !middle.Sent[egt-1] || truths[20*26+5].Sent[oil] {
			t.Error("what was not sent as a number counts as sent, or the other way round")
		}
	})
	t.Run("what cannot be played is refused", func(t *testing.T) {
		cfg := load(t, "example")
		for _, o := range []Options{
			{Day: Day{Ambient: 100}},
			{Changes: []Change{{Channel: "p_oli", For: time.Second}}},
			{Changes: []Change{{Channel: "p_oil", For: time.Second, Ramp: time.Second}}},
		} {
			if _, err := New(cfg, o); err == nil {
				t.Errorf("%+v is taken", o)
			}
		}
	})
}
