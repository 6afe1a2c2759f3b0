package egt_test

import (
	"bytes"
	"encoding/gob"
	"fmt"
	"math"
	"reflect"
	"slices"
	"testing"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
)

// stretch is what an engine shows for a time.
type stretch struct {
	phase monitor.Phase
	d     int64
	egt   float64
	lit   bool
	fuel  float64 // kg/s
	rate  float64 // rpm/s
}

// watched is an engine that is watched scan by scan.
type watched struct {
	c    *egt.Config
	led  egt.State
	e    egt.Engine
	t    int64
	seen []string

	choked bool
}

func newWatched() *watched {
	w := &watched{c: rig(), t: 1_000_000 * s}
	w.c.Serial = "ML5-0042"
	w.c.Fit(&w.led)
	return w
}

func (w *watched) play(parts ...stretch) {
	for _, p := range parts {
		for end := w.t + p.d; w.t < end; w.t += scan {
			ch := w.c.Step(&w.led, w.t, p.egt, p.lit, p.phase)
			w.c.Watch(&w.e, &w.led, &ch, &egt.Scan{T: w.t, EGT: p.egt, SpeedRate: p.rate, Fuel: p.fuel, Lit: p.lit, LitKnown: true, Choked: w.choked, Phase: p.phase})
			for name := range ch.Engine.Each {
				w.seen = append(w.seen, name)
			}
			if ch.Engine != 0 && !ch.Moved {
				panic("an event is no change")
			}
		}
	}
}

func (w *watched) life() egt.Life { return w.e.Lives[0] }

// What happens between rest and rest, of an engine that idles at 780 K.
var (
	rest     = stretch{monitor.Off, 40 * s, 300, false, 0, 0}
	crank    = stretch{monitor.Cranking, 5 * s, 300, false, 0, 300}
	fuelled  = stretch{monitor.Cranking, 2 * s, 300, false, 0.01, 300}
	lighting = stretch{monitor.Lighting, 8 * s, 900, true, 0.02, 600}
	idle     = stretch{monitor.Idle, 10 * s, 780, true, 0.03, 0}
	steady   = stretch{monitor.Steady, 20 * s, 900, true, 0.08, 0}
	rundown  = stretch{monitor.Rundown, 13 * s, 500, false, 0, -400}
	cooling  = stretch{monitor.Cooling, 60 * s, 450, false, 0, 0}
)

func with(p stretch, change func(*stretch)) stretch {
	change(&p)
	return p
}

// Expectations follow from the counting rules that the doc comment of Life states;
// there is no published rule that all engine makers count by.
func TestLifeCounts(t *testing.T) {
	hung := with(lighting, func(p *stretch) { p.rate = 20; p.d = 6 * s })
	lost := with(steady, func(p *stretch) { p.lit = false; p.egt = 600; p.d = s })
	for _, tt := range []struct {
		name  string
		parts []stretch
		want  egt.Life // counts only
		seen  []string
	}{
		{"start to rest", []stretch{rest, crank, fuelled, lighting, idle, steady, idle, rundown, cooling}, egt.Life{Starts: 1, Cycles: 1}, []string{"start", "idle", "rest", "cycle"}},
		{"cranked without fuel", []stretch{rest, crank, rundown, cooling}, egt.Life{}, nil},
		{"no light", []stretch{rest, crank, with(fuelled, func(p *stretch) { p.d = 11 * s }), rundown, cooling}, egt.Life{NoLights: 1, Aborted: 1}, []string{"no_light", "aborted_start"}},
		{"fuel for 10 s less a scan", []stretch{rest, crank, with(fuelled, func(p *stretch) { p.d = 10 * s }), rundown, cooling}, egt.Life{}, nil},
		{"no light twice in two cranks", []stretch{
			rest, with(fuelled, func(p *stretch) { p.d = 30 * s }), rundown, cooling, with(fuelled, func(p *stretch) { p.d = 30 * s }), rundown, cooling,
		}, egt.Life{NoLights: 2, Aborted: 2}, []string{"no_light", "aborted_start", "no_light", "aborted_start"}},
		{"hung once, however long", []stretch{rest, crank, hung, hung, hung, rundown, cooling}, egt.Life{Starts: 1, HungStarts: 1, Aborted: 1}, []string{"start", "hung_start", "aborted_start"}},
		{"slow for less than 5 s", []stretch{rest, crank, with(hung, func(p *stretch) { p.d = 5 * s }), lighting, idle}, egt.Life{Starts: 1}, []string{"start", "idle"}},
		{"hung, and up after all", []stretch{rest, crank, hung, lighting, idle, rundown, cooling}, egt.Life{Starts: 1, HungStarts: 1, Cycles: 1}, []string{"start", "hung_start", "idle", "rest", "cycle"}},
		{"hot start", []stretch{rest, crank, with(lighting, func(p *stretch) { p.egt = 1080; p.d = 4 * s }), lighting, idle}, egt.Life{Starts: 1, HotStarts: 1}, []string{"start", "hot_start", "idle"}},
		{"hot for the 3 s that are allowed", []stretch{rest, crank, with(lighting, func(p *stretch) { p.egt = 1080; p.d = 3 * s }), lighting, idle}, egt.Life{Starts: 1}, []string{"start", "idle"}},
		{"flame lost and lit again in one crank", []stretch{rest, crank, lighting, crank, lighting, idle}, egt.Life{Starts: 1}, []string{"start", "idle"}},
		{"start on the way down", []stretch{rest, crank, lighting, idle, rundown, lighting, idle}, egt.Life{Starts: 2, Cycles: 1}, []string{"start", "idle", "cycle", "start", "idle"}},
		{"a dip below idle with the flame on", []stretch{
			rest, crank, lighting, idle, with(rundown, func(p *stretch) { p.lit = true; p.fuel = 0.03; p.d = s }), lighting, idle,
		}, egt.Life{Starts: 1}, []string{"start", "idle"}},
		{"flame-out counts once", []stretch{rest, crank, lighting, idle, steady, lost, lost, rundown, cooling}, egt.Life{Starts: 1, FlameOuts: 1, Cycles: 1}, []string{"start", "idle", "flame_out", "rest", "cycle"}},
		{"flame-out, lit again, flame-out", []stretch{rest, crank, lighting, idle, steady, lost, steady, lost}, egt.Life{Starts: 1, FlameOuts: 2}, []string{"start", "idle", "flame_out", "flame_out"}},
		{"out for less than 0.2 s", []stretch{rest, crank, lighting, idle, steady, with(lost, func(p *stretch) { p.d = 4 * scan }), steady}, egt.Life{Starts: 1}, []string{"start", "idle"}},
		{"the watch comes up while it runs", []stretch{steady, idle, rundown, cooling}, egt.Life{Cycles: 1}, []string{"rest", "cycle"}},
		{"lit, and given up before idle", []stretch{rest, crank, lighting, rundown, cooling, rest}, egt.Life{Starts: 1, Aborted: 1}, []string{"start", "aborted_start"}},
		{"given up, then a start", []stretch{rest, crank, lighting, rundown, cooling, crank, lighting, idle, rundown, cooling}, egt.Life{Starts: 2, Aborted: 1, Cycles: 1}, []string{"start", "aborted_start", "start", "idle", "rest", "cycle"}},
		{"speed is lost during the start", []stretch{rest, crank, with(lighting, func(p *stretch) { p.phase = monitor.PhaseUnknown }), idle}, egt.Life{Starts: 1}, []string{"start", "idle"}},
		{"speed is lost at power", []stretch{rest, crank, lighting, idle, with(steady, func(p *stretch) { p.phase = monitor.PhaseUnknown }), steady, rundown, cooling}, egt.Life{Starts: 1, Cycles: 1}, []string{"start", "idle", "rest", "cycle"}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			w := newWatched()
			w.play(tt.parts...)
			got := w.life()
			got.Serial, got.Lit, got.Bands, got.T = "", 0, nil, 0
			if !reflect.DeepEqual(got, tt.want) || !slices.Equal(w.seen, tt.seen) {
				t.Errorf("%+v %v\nwant %+v %v", got, w.seen, tt.want, tt.seen)
			}
		})
	}
}

// Hours are from the first scan with a flame to the last; a gap in the data counts if
// there is a flame on both sides.
func TestLifeHours(t *testing.T) {
	w := newWatched()
	w.play(rest, crank, lighting, idle)
	w.t += 30 * s
	w.play(idle, rundown, cooling)
	if got, want := w.life().Lit, 8*s+10*s+30*s+10*s-scan; got != want {
		t.Errorf("lit for %d ns, want %d", got, want)
	}
}

func TestLifeBands(t *testing.T) {
	w := newWatched()
	above := with(steady, func(p *stretch) { p.egt = 1000; p.d = 4 * s })
	far := with(steady, func(p *stretch) { p.egt = 1040; p.d = 2 * s })
	w.play(rest, crank, lighting, idle, above, steady, above, far, steady)
	w.led.Reset() // another run
	w.play(above, steady)
	want := []egt.BandLife{
		{Name: "run_1", Time: 14 * s, Peak: 1040, Excursions: 3, Exceedances: 1}, // 4 s, 6 s of 5 s, 4 s
		{Name: "run_2", Time: 2 * s, Peak: 1040, Excursions: 1, Exceedances: 1},
		{Name: "start"},
	}
	if got := w.life().Bands; !reflect.DeepEqual(got, want) {
		t.Errorf("got %+v\nwant %+v", got, want)
	}
}

// Each engine has its own life; of more than can be kept the one that was watched
// least lately goes.
func TestLivesAreKept(t *testing.T) {
	w := newWatched()
	for i := range egt.MaxEngines {
		w.c.Serial = fmt.Sprint("E", i)
		w.play(rest, crank, lighting, idle)
	}
	w.c.Serial = "E0"
	w.play(rest, crank, lighting, idle, rundown, cooling)
	if l := w.e.Lives[0]; l.Serial != "E0" || l.Starts != 2 || l.Cycles != 1 {
		t.Errorf("%+v", l)
	}
	w.c.Serial = "new"
	w.play(idle)
	serials := []string{}
	for i := range w.e.Lives {
		serials = append(serials, w.e.Lives[i].Serial)
	}
	if len(serials) != egt.MaxEngines || slices.Contains(serials, "E1") || !slices.Contains(serials, "E0") || !slices.Contains(serials, "new") {
		t.Errorf("kept are %v", serials)
	}
	if l := w.e.Lives[1]; l.Serial != "new" || l.Cycles != 0 || l.Starts != 0 {
		t.Errorf("the new engine has %+v of the old one", l)
	}
}

// A nozzle that goes from one engine to another takes its life along. Hours choked are
// those that were seen: of a gap in the data a second counts.
func TestNozzleLife(t *testing.T) {
	w := newWatched()
	w.c.Nozzle = "NZ-1"
	w.play(rest, crank, lighting, idle)
	w.choked = true
	w.play(steady)
	w.t += 60 * s
	w.play(with(steady, func(p *stretch) { p.d = scan }))
	w.choked = false
	w.play(idle, rundown, cooling)
	w.c.Serial = "ML5-0043"
	w.play(rest, crank, lighting, rundown, cooling)
	w.c.Nozzle = "NZ-2"
	w.play(rest, crank, lighting, idle)
	type counts struct {
		serial                  string
		starts, aborted, cycles uint64
		choked                  int64
	}
	of := func(lives []egt.Life) (out []counts) {
		for _, l := range lives {
			out = append(out, counts{l.Serial, l.Starts, l.Aborted, l.Cycles, l.Choked})
		}
		return out
	}
	choked := 20*s + s
	if got, want := of(w.e.Nozzles), []counts{{"NZ-1", 2, 1, 1, choked}, {"NZ-2", 1, 0, 0, 0}}; !slices.Equal(got, want) {
		t.Errorf("nozzles %+v, want %+v", got, want)
	}
	if got, want := of(w.e.Lives), []counts{{"ML5-0042", 1, 0, 1, choked}, {"ML5-0043", 2, 1, 0, 0}}; !slices.Equal(got, want) {
		t.Errorf("engines %+v, want %+v", got, want)
	}
	// With the same bands and no other engine the two accounts are one.
	if a, b := w.e.Lives[1].Bands, w.e.Nozzles[1].Bands; len(a) != len(b) {
		t.Errorf("bands %+v and %+v", a, b)
	}
}

// Times by hand, exact to a scan: common practice, no source.
func TestCoolDown(t *testing.T) {
	w := newWatched()
	l := egt.Limits{CoolFuelOff: 100 * s, CoolRest: 60 * s}
	short := with(rundown, func(p *stretch) { p.d = scan })
	for _, tt := range []struct {
		name              string
		parts             []stretch
		fuelOff, at, left float64 // s
	}{
		{"nothing was seen", []stretch{rest}, math.NaN(), math.NaN(), math.NaN()},
		{"cranked without a flame", []stretch{crank, rundown, cooling}, math.NaN(), math.NaN(), math.NaN()},
		{"it runs", []stretch{crank, lighting, idle}, math.NaN(), math.NaN(), math.NaN()},
		{"fuel on below idle", []stretch{with(short, func(p *stretch) { p.fuel = 0.03 })}, math.NaN(), math.NaN(), math.NaN()},
		{"fuel off", []stretch{short}, 0, math.NaN(), 100},
		{"runs down", []stretch{with(rundown, func(p *stretch) { p.d = 50 * s })}, 50, math.NaN(), 60},
		{"at rest", []stretch{with(cooling, func(p *stretch) { p.d = 10*s + scan })}, 60.05, 10, 50},
		{"cranked to cool it", []stretch{crank, rundown}, 78.05, 28, 32},
		{"a start before time", []stretch{fuelled, lighting}, 88.05, 38, 22},
		{"given up", []stretch{short}, 0, math.NaN(), 100},
		{"it has cooled", []stretch{with(cooling, func(p *stretch) { p.d = 200 * s })}, 200, 199.95, 0},
		{"idle", []stretch{crank, lighting, idle}, math.NaN(), math.NaN(), math.NaN()},
	} {
		w.play(tt.parts...)
		for _, v := range []struct {
			name      string
			got, want float64
		}{{"fuel off", w.e.SinceFuelOff(), tt.fuelOff}, {"rest", w.e.SinceRest(), tt.at}, {"left", w.e.CoolDownLeft(&l), tt.left}} {
			if v.got != v.want && !(math.IsNaN(v.got) && math.IsNaN(v.want)) {
				t.Errorf("%s: %s %g s, want %g s", tt.name, v.name, v.got, v.want)
			}
		}
	}
	if got := w.e.CoolDownLeft(&egt.Limits{}); !math.IsNaN(got) {
		t.Errorf("%g s are left of no cool-down", got)
	}
}

// The starter is engaged once for each crank, whatever is lit in it.
func TestStarterStarts(t *testing.T) {
	w := newWatched()
	dip := with(rundown, func(p *stretch) { p.lit = true; p.fuel = 0.03; p.d = s })
	w.play(rest, crank, lighting, crank, lighting, idle, dip, lighting, idle, rundown, crank, rundown, cooling, fuelled, cooling)
	if got := w.e.StarterStarts(); got != 3 {
		t.Errorf("%d engagements, want 3", got)
	}
	w.play(with(rest, func(p *stretch) { p.d = 61 * 60 * s }))
	if got := w.e.StarterStarts(); got != 0 {
		t.Errorf("%d engagements in an hour of rest", got)
	}
}

func TestStarterDuty(t *testing.T) {
	w := newWatched()
	w.play(rest, crank, lighting)
	if w.e.Crank != 13*s || w.e.StarterHour() != 13*s {
		t.Errorf("cranked %d now and %d in an hour, want 13 s", w.e.Crank, w.e.StarterHour())
	}
	w.play(idle, rundown, rest)
	if w.e.Crank != 0 {
		t.Errorf("cranked %d at rest", w.e.Crank)
	}
	w.play(crank)
	if w.e.Crank != 5*s || w.e.StarterHour() != 18*s {
		t.Errorf("cranked %d now and %d in an hour, want 5 s and 18 s", w.e.Crank, w.e.StarterHour())
	}
	w.play(with(rest, func(p *stretch) { p.d = 61 * 60 * s }))
	if w.e.StarterHour() != 0 {
		t.Errorf("cranked %d in an hour of rest", w.e.StarterHour())
	}
	w.play(crank)
	w.t += 3 * 3600 * s // the daemon was away
	w.play(with(crank, func(p *stretch) { p.d = 2 * scan }))
	if got := w.e.StarterHour(); got > 2*s {
		t.Errorf("cranked %d: what lies hours back counts", got)
	}
}

func TestRundown(t *testing.T) {
	w := newWatched()
	w.play(rest, crank, lighting, idle)
	if w.e.HaveRundown {
		t.Error("a rundown before there was one")
	}
	w.play(rundown, cooling)
	if !w.e.HaveRundown || w.e.Rundown != 13*s {
		t.Errorf("rundown of %d, want 13 s", w.e.Rundown)
	}
	// One with the speed lost in it or before it is no time, nor is one from cranking.
	lost := with(rundown, func(p *stretch) { p.phase = monitor.PhaseUnknown })
	for _, parts := range [][]stretch{
		{crank, lighting, idle, rundown, lost, cooling},
		{crank, lighting, idle, rundown, lost, rundown, cooling},
		{crank, lighting, idle, lost, rundown, cooling},
		{crank, with(rundown, func(p *stretch) { p.d = s }), cooling},
	} {
		w.play(parts...)
		if w.e.Rundown != 13*s {
			t.Fatalf("rundown of %d, want the one before", w.e.Rundown)
		}
	}
}

// Source of the situations: common practice, no source; the numbers are by hand.
func TestRiseAfterShutdown(t *testing.T) {
	hot := func(p stretch, k float64) stretch { return with(p, func(p *stretch) { p.egt = k; p.d = s }) }
	for _, tt := range []struct {
		name  string
		parts []stretch
		want  float64
	}{
		{"none while it runs", []stretch{rest, crank, lighting, idle, hot(steady, 950)}, 0},
		{"none while it falls", []stretch{steady, hot(rundown, 700), hot(rundown, 600), hot(cooling, 500)}, 0},
		{"heat soaks back at rest", []stretch{steady, hot(rundown, 500), hot(cooling, 450), hot(cooling, 480)}, 30},
		{"fire in the rundown", []stretch{steady, hot(rundown, 600), hot(rundown, 740)}, 140},
		{"fire at rest, when the engine was off already", []stretch{steady, rundown, cooling, hot(rest, 320), hot(cooling, 480)}, 160},
		{"cranked without fuel to cool it", []stretch{steady, hot(rundown, 500), hot(cooling, 620), hot(crank, 640)}, 140},
		{"a start", []stretch{rest, hot(fuelled, 400)}, 0},
		{"rotor falls below idle with the fuel on", []stretch{steady, hot(with(rundown, func(p *stretch) { p.fuel = 0.03 }), 700), hot(with(rundown, func(p *stretch) { p.fuel = 0.03 }), 900)}, 0},
		{"speed is lost", []stretch{steady, hot(rundown, 500), hot(with(cooling, func(p *stretch) { p.phase = monitor.PhaseUnknown }), 620)}, 120},
		{"EGT is lost", []stretch{steady, hot(rundown, 500), hot(cooling, math.NaN())}, math.NaN()},
		{"EGT was lost for a while", []stretch{steady, hot(rundown, 500), hot(cooling, math.NaN()), hot(cooling, 520)}, 20},
	} {
		t.Run(tt.name, func(t *testing.T) {
			w := newWatched()
			w.play(tt.parts...)
			if got := w.e.Rise(); got != tt.want && !(math.IsNaN(got) && math.IsNaN(tt.want)) {
				t.Errorf("rise of %g K, want %g K", got, tt.want)
			}
		})
	}
}

func TestEngineSurvivesEncoding(t *testing.T) {
	w := newWatched()
	w.play(rest, crank, lighting, idle, steady, rundown)
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(w.e); err != nil {
		t.Fatal(err)
	}
	var got egt.Engine
	if err := gob.NewDecoder(&b).Decode(&got); err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(got, w.e) {
		t.Errorf("got %+v\nwant %+v", got, w.e)
	}
}

// A checkpoint of a build that counted neither aborted starts nor nozzles is read on.
func TestEngineOfAnEarlierBuild(t *testing.T) {
	type life struct {
		Serial string
		Starts uint64
		Lit    int64
		Bands  []egt.BandLife
	}
	type engine struct {
		Lives  []life
		Serial string
		Crank  int64
	}
	var b bytes.Buffer
	if err := gob.NewEncoder(&b).Encode(engine{[]life{{"ML5-0042", 7, 9 * s, []egt.BandLife{{Name: "run_1", Time: s}}}}, "ML5-0042", s}); err != nil {
		t.Fatal(err)
	}
	w := newWatched()
	w.c.Nozzle = "NZ-1"
	if err := gob.NewDecoder(&b).Decode(&w.e); err != nil {
		t.Fatal(err)
	}
	w.play(rest, crank, lighting, rundown, cooling)
	if l := w.life(); l.Starts != 8 || l.Aborted != 1 || l.Lit < 9*s || l.Bands[0].Time != s {
		t.Errorf("%+v", l)
	}
	if n := w.e.Nozzles; len(n) != 1 || n[0].Starts != 1 {
		t.Errorf("%+v", n)
	}
}

func TestWatchDoesNotAllocate(t *testing.T) {
	w := newWatched()
	w.play(rest, crank)
	i := 0
	phases := []monitor.Phase{monitor.Lighting, monitor.Idle, monitor.Steady, monitor.Rundown, monitor.Cooling}
	if n := testing.AllocsPerRun(1000, func() {
		ch := w.c.Step(&w.led, w.t, 700+float64(i%7)*100, i%7 > 2, phases[i%5])
		w.c.Watch(&w.e, &w.led, &ch, &egt.Scan{T: w.t, EGT: 900, Lit: i%7 > 2, LitKnown: true, Phase: phases[i%5]})
		w.t += scan
		i++
	}); n != 0 {
		t.Errorf("%g allocations per scan, want 0", n)
	}
}

// A record says what the account said, and the time above every band within it.
// Expectations by hand, exact to a scan.
func TestExcursionRecord(t *testing.T) {
	f := newFeed()
	var closed []egt.Excursion
	var exceeded []egt.Excursion
	hold := func(v float64, d int64) {
		for end := f.t + d; f.t < end; f.t += scan {
			ch := f.c.Step(&f.st, f.t, v, true, monitor.Steady)
			if ch.Ended&1 != 0 {
				closed = append(closed, f.st.Bands[0].Closed)
			}
			if ch.Exceeded&1 != 0 {
				exceeded = append(exceeded, f.st.Bands[0].Excursion())
			}
		}
	}
	hold(900, s)
	began := f.t
	hold(1000, 3*s)
	hold(1040, s)
	hold(missing, s)
	hold(1000, s+scan)
	below := f.t
	hold(980, 3*s)
	if len(closed) != 1 || len(exceeded) != 1 {
		t.Fatalf("%d records closed and %d exceeded, want one each", len(closed), len(exceeded))
	}
	want := egt.Excursion{Began: began, Ended: below, Time: 6*s + scan, Assumed: s + scan, Peak: 1040, Exceeded: true}
	// The last good value before the gap was above both; it stands until the next one.
	want.Above[0], want.Above[1] = 6*s+scan, 2*s
	if closed[0] != want {
		t.Errorf("got  %+v\nwant %+v", closed[0], want)
	}
	if e := exceeded[0]; e.Began != began || e.Ended != 0 || e.Time != 5*s+scan || !e.Exceeded {
		t.Errorf("at the exceedance %+v", e)
	}
	if b := f.st.Bands[0]; b.Closed != want || b.Elapsed != 0 {
		t.Errorf("%+v", b)
	}
}

// Above one's own limit is the time that counts, whatever happens.
func TestAboveOwnLimit(t *testing.T) {
	f := newFeed()
	values := []float64{900, 995, 1040, missing, 985, 1000, 970, 1075, 1100, missing, missing, 600}
	x := uint32(1)
	for range 5000 {
		x = x*1664525 + 1013904223
		f.hold(values[x>>8%uint32(len(values))], int64(1+x>>28)*scan)
		for i := range f.st.Bands {
			if b := f.st.Bands[i]; b.Over && b.Above[i] != b.Elapsed {
				t.Fatalf("band %s: %d above its limit, %d elapsed", b.Name, b.Above[i], b.Elapsed)
			}
		}
	}
}
