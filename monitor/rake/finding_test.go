package rake

import (
	"bytes"
	"encoding/gob"
	"math"
	"reflect"
	"testing"

	"throatwatch/monitor"
)

// sensed is a group of probes that is watched and judged, scan by scan.
type sensed struct {
	w Watch
	c Sense
	s State
	f Suspects
	t int64
	// of each scan
	values  []float64
	quality []monitor.Quality
	out     uint64
}

const tick = int64(50e6)

func newSensed(n int, pressure bool, limit float64) *sensed {
	g := &sensed{
		w: Watch{Probes: n, Least: 1, ProofHold: 1e9, DepartureHold: 3e9, Return: 2e9, Learn: 30e9, Memory: 300e9, KeepHot: true},
		c: Sense{Pressure: pressure, Limit: limit}, t: 1e15,
		values: make([]float64, n), quality: make([]monitor.Quality, n),
	}
	return g
}

// run lets the group be at a level for some seconds; change makes of it what probe 0 reads.
func (g *sensed) run(seconds, level, base float64, change func(level float64) float64) {
	for range int(seconds * 20) {
		for i := range g.values {
			g.values[i], g.quality[i] = level+float64(i%3-1), monitor.QualityGood
		}
		if change != nil {
			g.values[0] = change(level)
		}
		r := g.w.Step(&g.s, g.t, g.values, g.quality, !g.c.Departs(&g.f, &g.s))
		g.out = r.Out
		g.c.Step(&g.f, &g.w, &g.s, g.t, g.values, g.quality, base)
		g.t += tick
	}
}

func (g *sensed) found(t *testing.T, kind monitor.FindingKind, proven bool) monitor.Finding {
	t.Helper()
	f := g.f.Probes[0].Found
	if f.Kind != kind || f.Proven != proven {
		t.Errorf("found %v, proven %v; want %v, %v", f.Kind, f.Proven, kind, proven)
	}
	for i := range g.f.Probes[1:] {
		if other := g.f.Probes[i+1].Found; other.Kind != monitor.NoFinding {
			t.Errorf("probe %d: %v", i+1, other.Kind)
		}
	}
	return f
}

// behind reads the level behind a lag of tau seconds.
func behind(from, tau float64) func(float64) float64 {
	return func(level float64) float64 {
		from += (level - from) * -math.Expm1(-0.05/tau)
		return from
	}
}

// A probe is slow until its mates move and it goes with them. Lags by construction.
func TestSlowAndBack(t *testing.T) {
	g := newSensed(6, false, 40)
	g.run(40, 900, 290, nil)
	g.run(20, 800, 290, behind(900, 12))
	if f := g.found(t, monitor.FindingSlow, true); f.Size != 12 || g.out != 0 {
		t.Errorf("a lag of %g s is told, 12 s it is; left out %b", f.Size, g.out)
	}
	g.run(60, 800, 290, nil)
	g.found(t, monitor.FindingSlow, true) // at rest nothing speaks for it
	for level := 800.0; level < 960; level += 20 {
		g.run(1, level, 290, nil)
	}
	g.found(t, monitor.NoFinding, false)
}

// A probe that does not respond is left out, and comes back once it responds.
func TestStuckIsLeftOut(t *testing.T) {
	g := newSensed(6, false, 40)
	g.run(40, 900, 290, nil)
	g.run(5, 800, 290, func(float64) float64 { return 899 })
	g.found(t, monitor.FindingStuck, true)
	if g.out != 1 {
		t.Errorf("left out %b", g.out)
	}
	g.run(60, 800, 290, func(float64) float64 { return 899 })
	for level := 800.0; level < 960; level += 20 {
		g.run(1, level, 290, nil)
	}
	g.run(5, 900, 290, nil)
	g.found(t, monitor.NoFinding, false)
	if g.out != 0 {
		t.Errorf("left out %b", g.out)
	}
}

// Gas that gets hotter at one probe while its mates cool down leaves the reading about
// where it was, as a dead or a slow probe would: it is told as what may be gas, and counts.
func TestHotGasIsNotVotedAway(t *testing.T) {
	for _, heat := range []float64{45, 60, 80, 100, 130} {
		for _, cools := range []float64{45, 60, 80, 100} {
			g := newSensed(6, false, 40)
			noise := 0.4
			streak := func(heat float64) func(float64) float64 {
				hot := behind(0, 1)
				return func(level float64) float64 {
					noise = -noise
					return level + hot(heat) + noise
				}
			}
			g.run(40, 900, 290, streak(0))
			hot := streak(heat)
			level := behind(900, 0.8)
			for range 20 * 15 {
				g.run(0.05, level(900-cools), 290, hot)
			}
			if f := g.f.Probes[0].Found; f.Kind != monitor.FindingHot || g.out != 0 {
				t.Errorf("%g K hotter while the mates cool by %g K: found %v, left out %b", heat, cools, f.Kind, g.out)
			}
		}
	}
}

// A reading that did not change, and does so again in step with its mates, is that of a
// probe: nobody needs to wait for a throttle movement.
func TestStuckThatMovesAgain(t *testing.T) {
	g := newSensed(6, false, 40)
	g.run(40, 900, 290, nil)
	g.run(5, 800, 290, func(float64) float64 { return 899 })
	g.found(t, monitor.FindingStuck, true)
	noise := 0.4
	alive := func(level float64) float64 {
		noise = -noise
		return level - 1 + noise
	}
	g.run(3, 800, 290, alive)
	g.found(t, monitor.FindingStuck, true)
	g.run(8, 800, 290, alive)
	if g.found(t, monitor.NoFinding, false); g.out != 0 {
		t.Errorf("left out %b", g.out)
	}
}

// A short is told with and without a measured temperature of the terminals; one that is
// out of reach of it is none. It ends when the probe is seen to be warm.
func TestShort(t *testing.T) {
	for _, tt := range []struct {
		name       string
		reads      float64
		base       float64
		level      float64
		want       monitor.FindingKind
		afterwards monitor.FindingKind
	}{
		{"at the terminals", 295, 290, 900, monitor.FindingShort, monitor.NoFinding},
		{"terminals not measured", 270, math.NaN(), 900, monitor.FindingShort, monitor.NoFinding},
		{"hotter than terminals", 350, 290, 900, monitor.FindingCold, monitor.NoFinding},
		{"mates are hardly warm", 295, 290, 420, monitor.NoFinding, monitor.NoFinding},
	} {
		t.Run(tt.name, func(t *testing.T) {
			g := newSensed(6, false, 40)
			g.run(40, tt.level, tt.base, nil)
			before := g.t
			g.run(4.5, tt.level, tt.base, func(float64) float64 { return tt.reads })
			f := g.found(t, tt.want, tt.want == monitor.FindingShort)
			if tt.want == monitor.FindingShort && (math.Abs(f.Size-(tt.reads-tt.level)) > 1 || f.Since < before || g.out != 1) {
				t.Errorf("%+v, left out %b", f, g.out)
			}
			g.run(10, tt.level, tt.base, nil)
			g.found(t, tt.afterwards, false)
		})
	}
}

// Shift and leak differ by what they do at another pressure only.
func TestShiftAndLeak(t *testing.T) {
	const base = 100e3
	for _, tt := range []struct {
		name   string
		change func(float64) float64
		kind   monitor.FindingKind
		size   float64
	}{
		{"shift up", func(p float64) float64 { return p + 5e3 }, monitor.FindingZero, 5e3},
		{"shift down", func(p float64) float64 { return p - 5e3 }, monitor.FindingZero, -5e3},
		{"leak", func(p float64) float64 { return base + 0.9*(p-base) }, monitor.FindingLeak, 0.1},
	} {
		t.Run(tt.name, func(t *testing.T) {
			g := newSensed(4, true, 2000)
			g.run(40, 230e3, base, nil)
			g.run(5, 230e3, base, tt.change)
			g.found(t, monitor.FindingDeparts, false)
			g.run(10, 130e3, base, tt.change)
			if f := g.found(t, tt.kind, true); math.Abs(f.Size/tt.size-1) > 0.05 {
				t.Errorf("size %g, want %g", f.Size, tt.size)
			}
			// A leak is not seen without pressure; it does not go away for that.
			g.run(30, 100.5e3, base, tt.change)
			g.found(t, tt.kind, true)
			g.run(10, 230e3, base, nil)
			g.found(t, monitor.NoFinding, false)
		})
	}
}

// Gas that changes all together, one probe of two, a missing port and a gap in the data
// tell nothing.
func TestNothingToTell(t *testing.T) {
	g := newSensed(6, false, 40)
	g.run(40, 900, 290, nil)
	for _, level := range []float64{700, 1000, 500, 1010, 880} {
		g.run(3, level, 290, nil)
	}
	g.t += 100e9
	g.run(10, 400, 290, nil)
	g.found(t, monitor.NoFinding, false)

	g = newSensed(2, false, 40)
	g.run(40, 900, 290, nil)
	g.run(10, 900, 290, func(float64) float64 { return 1000 })
	g.found(t, monitor.NoFinding, false)

	g = newSensed(4, true, 2000)
	g.run(40, 230e3, math.NaN(), nil)
	g.run(10, 230e3, math.NaN(), func(p float64) float64 { return p + 5e3 })
	g.run(10, 130e3, math.NaN(), func(p float64) float64 { return p + 5e3 })
	g.found(t, monitor.FindingDeparts, false)
}

func TestSuspectsSurviveEncoding(t *testing.T) {
	g := newSensed(4, true, 2000)
	g.run(40, 230e3, 100e3, nil)
	g.run(5, 230e3, 100e3, func(p float64) float64 { return p + 5e3 })
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(g.f); err != nil {
		t.Fatal(err)
	}
	var got Suspects
	if err := gob.NewDecoder(&b).Decode(&got); err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(got, g.f) {
		t.Errorf("got %+v\nwant %+v", got, g.f)
	}
}

func TestSenseDoesNotAllocate(t *testing.T) {
	g := newSensed(8, false, 40)
	g.run(1, 900, 290, nil)
	if n := testing.AllocsPerRun(200, func() { g.run(0.05, 905, 290, nil) }); n != 0 {
		t.Errorf("%g allocations per scan, want 0", n)
	}
}

func BenchmarkSense(b *testing.B) {
	g := newSensed(8, false, 40)
	g.run(40, 900, 290, nil)
	levels := []float64{900, 930, 870, 950, 905, 890, 880, 910}
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		for k := range g.values {
			g.values[k] = levels[(i+k)&7]
		}
		g.c.Step(&g.f, &g.w, &g.s, g.t, g.values, g.quality, 290)
		g.t += tick
		i++
	}
}
