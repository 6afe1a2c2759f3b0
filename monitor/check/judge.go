package check

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/uncertainty"
	"throatwatch/monitor/unit"
)

const (
	// leastSame is the number of samples that have to be the same before a channel counts as
	// stuck which scatters by an ADC step or more. Of normal scatter of one step at most 0.38
	// of the samples have the same code, so that twenty of them do so once in 10⁸.
	leastSame = 20
	// storedPerValue is what a run file takes for a value that is received, bytes: the most
	// that is promised.
	storedPerValue = 8
	// room is how many times what a run takes has to be free: for what else fills the disk.
	room = 2
)

// Bench is what a check is judged by besides its scans.
type Bench struct {
	Compute *compute.Config
	Period  int64 // ns, of scans
	Around  Around
	// Earlier is the check before the run, for the shift of the zeros; nil = there was none.
	Earlier *Result
	// Swapped names the channels that have had another sensor since then.
	Swapped []string
}

// Around is what the daemon knows of itself at the end of the window.
type Around struct {
	Sources   []Source
	Sessions  []Session
	Deaf      bool // the input path
	Recording bool
	Free      float64 // bytes on the disk; 0 = not known
	Hash      string  // of the configuration in force
	Version   string  // of the limits document
	Approved  string  // by whom
	Refused   string  // why other files were refused since then, "" = they were not
}

// Source is a publisher.
type Source struct {
	Topic  string
	Alive  bool
	Skew   int64 // host time less its own clock, ns
	Skewed bool  // its clock is not believed
}

// Session is one with the broker.
type Session struct {
	Filter    string
	Connected bool
}

// Judge finishes r, which has begun, at the event time t by what was gathered.
func Judge(r *Result, l *Limits, q *Request, g *Gather, b *Bench, t int64) {
	j := judge{l: l, c: b.Compute, g: g, w: window(l, b.Period)}
	if len(g.Channels) != len(j.c.Channels) { // not one scan came
		g = &Gather{Channels: make([]Seen, len(j.c.Channels))}
		j.g = g
	}
	for i := range j.c.Channels {
		j.signal(i)
	}
	for i := range j.c.Channels {
		j.zero(i)
	}
	if q.Phase == After {
		j.shifts(b.Earlier, b.Swapped)
	}
	j.temperatures(q.Warmth == Cold)
	j.calibrations(t)
	j.around(q, b)
	if q.Phase == Before {
		j.ticks(q)
	}
	r.Items = j.items
	r.finish(t)
}

type judge struct {
	l     *Limits
	c     *compute.Config
	g     *Gather
	w     steady.Window
	items []Item
}

// add adds an item; about is a channel or another name, "" for none.
func (j *judge) add(kind, about, title string, passed bool, format string, args ...any) *Item {
	id := kind
	if about != "" {
		id += "." + about
	}
	j.items = append(j.items, Item{ID: id, Kind: kind, Title: title, Passed: passed, Text: fmt.Sprintf(format, args...)})
	return &j.items[len(j.items)-1]
}

// of adds an item about a channel.
func (j *judge) of(kind string, i int, passed bool, format string, args ...any) *Item {
	ch := &j.c.Channels[i]
	it := j.add(kind, ch.ID, ch.Title, passed, format, args...)
	it.Channel = ch.ID
	return it
}

// amounts gives an item its value with the limit and the uncertainty of it.
func (it *Item) amounts(u unit.Unit, value, limit, u95 float64) {
	it.Value, it.Limit, it.U95 = monitor.ReadingOf(value), monitor.ReadingOf(limit), monitor.ReadingOf(u95)
	it.Unit = u.Difference().Dimension.SI().Name
}

// show writes a difference, SI, in the unit of channel i to three digits.
func (j *judge) show(i int, si float64) string {
	u := j.c.Channels[i].Unit.Difference()
	if u.Dimension == unit.TemperatureDifference && u.Scale == 1 {
		u.Name = "K"
	}
	v := u.FromSI(si)
	if math.Abs(v) >= 100 {
		return strconv.FormatFloat(v, 'f', 0, 64) + " " + u.Name
	}
	return strconv.FormatFloat(v, 'g', 3, 64) + " " + u.Name
}

// quality says in words what a quality tells of a channel.
func quality(q monitor.Quality) string {
	switch q {
	case monitor.QualityMissing:
		return "nothing comes from it"
	case monitor.QualityStale:
		return "its last sample is too old"
	case monitor.QualityOutOfRange:
		return "out of its range"
	case monitor.QualityInvalidCode:
		return "its module says that there is no reading"
	case monitor.QualityRate:
		return "it changes faster than it can"
	case monitor.QualityStuck:
		return "stuck"
	case monitor.QualityGood, monitor.QualityHeld, monitor.QualityNoReference, monitor.QualityExcluded, monitor.NumQualities:
	}
	return q.String()
}

// signal judges whether a channel is there: silent, bad, stuck, noisy.
func (j *judge) signal(i int) {
	ch, s := &j.c.Channels[i], &j.g.Channels[i]
	u := &ch.Uncertainty
	st := j.w.Stats(&s.Past)
	step := j.step(i)
	sigma := u.Random / uncertainty.Coverage
	limit := j.l.Noise * math.Hypot(sigma, step/math.Sqrt(12))
	if against(j.c, i) { // it scatters with the barometer
		limit = math.Hypot(limit, j.l.Noise*j.c.Channels[j.c.Stations.Barometer].Uncertainty.Random/uncertainty.Coverage)
	}
	share := float64(s.Usable) / float64(max(j.g.Scans, 1))
	switch {
	case s.Came == 0:
		j.of(KindSignal, i, false, "silent: no sample in %s", span(j.l.Window))
	case share < j.l.Usable:
		worst := slices.Index(s.Bad[:], slices.Max(s.Bad[:]))
		j.of(KindSignal, i, false, "%s in %.0f %% of the scans", quality(monitor.Quality(worst)), 100*(1-share))
	case ch.Stuck > 0 && !s.Moved && s.Came >= leastSame && step > 0 && sigma >= step:
		j.of(KindSignal, i, false, "stuck: not one bit of change in %d samples; it is stated to scatter by %s", s.Came, j.show(i, sigma))
	case sigma > 0 && st.Noise > limit:
		j.of(KindSignal, i, false, "noisy: it scatters by %s, limit %s", j.show(i, st.Noise), j.show(i, limit)).
			amounts(ch.Unit, st.Noise, limit, math.NaN())
	case sigma > 0 && st.Noise == st.Noise:
		j.of(KindSignal, i, true, "%d samples, scatter %s, limit %s", s.Came, j.show(i, st.Noise), j.show(i, limit)).
			amounts(ch.Unit, st.Noise, limit, math.NaN())
	default:
		j.of(KindSignal, i, true, "%d samples", s.Came)
	}
}

// step gives what one ADC step is of the value of a channel, SI; 0 = not known.
func (j *judge) step(i int) float64 {
	ch := &j.c.Channels[i]
	if ch.Step == 0 {
		return 0
	}
	raw := j.g.Channels[i].Raw
	a, _ := ch.Convert(raw)
	b, _ := ch.Convert(raw + ch.Step)
	return math.Abs(b - a)
}

// mean gives the mean reading of a channel and its 95 % uncertainty by scatter and
// resolution: Type A by the effective sample size [JCGM 100 4.2.3], and an ADC step that is
// spread evenly [JCGM 100 4.3.7]. Where too few samples came for their correlation, one of
// them counts. NaN without a sample.
func (j *judge) mean(i int) (mean, u95 float64) {
	s, st := &j.g.Channels[i], j.w.Stats(&j.g.Channels[i].Past)
	if s.N == 0 {
		return math.NaN(), math.NaN()
	}
	mean, u95 = s.Mean, j.c.Channels[i].Uncertainty.Random
	if !math.IsNaN(st.U) {
		mean, u95 = st.Mean, steady.Expand(0.95, st.Nu)*st.U
	}
	return mean, math.Hypot(u95, uncertainty.Coverage*j.step(i)/math.Sqrt(12))
}

// zero judges what a pressure reads at rest: a gauge or differential one against its port,
// an absolute one against the barometer. The limit is
//
//	U² = U²(channel) + U²(barometer, of an absolute one) + U²(draught) + U²(mean)
//
// A gauge sensor is open to its port: the barometer's own error is no part of its reading.
func (j *judge) zero(i int) {
	ch := &j.c.Channels[i]
	if ch.Reference == calib.ReferenceNone || slices.Contains(j.l.NotZero, i) || ch.Reference == calib.Absolute && !against(j.c, i) {
		return
	}
	z, random := j.mean(i)
	if math.IsNaN(z) {
		j.of(KindZero, i, false, "there is no reading to judge")
		return
	}
	port := "its other port"
	switch {
	case ch.Reference == calib.Absolute:
		port = j.c.Channels[j.c.Stations.Barometer].ID
	case ch.Port >= 0:
		port = j.c.Channels[ch.Port].ID
	}
	u := math.Hypot(random, j.l.Draught)
	limit := math.Hypot(u, ch.Uncertainty.U95(z, ch.Low, ch.High))
	if ch.Reference == calib.Absolute {
		baro := &j.c.Channels[j.c.Stations.Barometer]
		limit = math.Hypot(limit, baro.Uncertainty.U95(j.g.Channels[j.c.Stations.Barometer].Mean, baro.Low, baro.High))
	}
	j.of(KindZero, i, math.Abs(z) <= limit, "reads %s against %s, limit ±%s", j.show(i, z), port, j.show(i, limit)).amounts(ch.Unit, z, limit, u)
}

// shifts judges by how much each zero has moved since the check before the run. The
// systematic error of the sensor is in both and cancels; what does not is the random part of
// each mean, resolution and draught, which stand in the uncertainties of the zeros, and the
// drift that is stated:
//
//	U² = U²(zero before) + U²(zero after) + U²(drift)
func (j *judge) shifts(before *Result, swapped []string) {
	if before == nil {
		j.add(KindShift, "", "Shift of the zeros", false, "there was no check before this run to compare with")
		return
	}
	earlier := before.Zeros()
	for _, now := range (&Result{Items: j.items}).Zeros() {
		i := slices.IndexFunc(j.c.Channels, func(c compute.Channel) bool { return c.ID == now.Channel })
		k := slices.IndexFunc(earlier, func(it Item) bool { return it.Channel == now.Channel })
		ch := &j.c.Channels[i]
		if k < 0 {
			j.of(KindShift, i, false, "there was no zero of it in the check before")
			continue
		}
		if slices.Contains(swapped, now.Channel) {
			j.of(KindShift, i, false, "its sensor was exchanged since the check before: how the zero of either has moved is not known")
			continue
		}
		shift := now.Value.V - earlier[k].Value.V
		limit := math.Hypot(math.Hypot(now.U95.V, earlier[k].U95.V), j.l.Drift*(ch.High-ch.Low))
		j.of(KindShift, i, math.Abs(shift) <= limit, "moved by %s since the check before, limit ±%s", j.show(i, shift), j.show(i, limit)).
			amounts(ch.Unit, shift, limit, limit)
	}
}

// temperatures judges the thermocouples of the harness and of the rake: each against the
// median of the others, and cold against the surroundings too. The limit is
//
//	U² = U²(probe) + U²(what it is held against) + U²(place)
//
// place is what the temperatures may truly differ, cold or warm.
func (j *judge) temperatures(cold bool) {
	st := &j.c.Stations
	ambient := st.AmbientT
	if ambient < 0 {
		ambient = st.InletT
	}
	for _, group := range [][]int{st.EGT, st.T7} {
		for _, i := range group {
			j.temperature(i, group, ambient, cold)
		}
	}
}

func (j *judge) temperature(i int, group []int, ambient int, cold bool) {
	ch := &j.c.Channels[i]
	v, random := j.mean(i)
	if math.IsNaN(v) {
		j.of(KindTemperature, i, false, "there is no reading to judge")
		return
	}
	place := j.l.Warm
	if cold {
		place = j.l.Cold
	}
	u := math.Hypot(random, finite(ch.Uncertainty.U95(v, ch.Low, ch.High)))
	var others []float64
	for _, k := range group {
		if w, _ := j.mean(k); k != i && !math.IsNaN(w) {
			others = append(others, w)
		}
	}
	type comparison struct {
		with      string
		off, most float64
	}
	var list []comparison
	if len(others) > 0 {
		list = append(list, comparison{"the others", v - median(others), math.Hypot(math.Hypot(u, u/math.Sqrt(float64(len(others)))), place)})
	}
	if cold && ambient >= 0 && ambient != i {
		if w, uw := j.mean(ambient); !math.IsNaN(w) {
			a := &j.c.Channels[ambient]
			uw = math.Hypot(uw, finite(a.Uncertainty.U95(w, a.Low, a.High)))
			list = append(list, comparison{a.ID, v - w, math.Hypot(math.Hypot(u, uw), place)})
		}
	}
	if len(list) == 0 {
		return
	}
	passed, texts := true, make([]string, len(list))
	shown := list[0]
	for k, c := range list {
		texts[k] = fmt.Sprintf("%s from %s, limit ±%s", j.show(i, c.off), c.with, j.show(i, c.most))
		if math.Abs(c.off) > c.most && passed {
			passed, shown = false, c
		}
	}
	j.of(KindTemperature, i, passed, "%s", strings.Join(texts, "; ")).amounts(ch.Unit, shown.off, shown.most, random)
}

func median(v []float64) float64 {
	slices.Sort(v)
	return (v[(len(v)-1)/2] + v[len(v)/2]) / 2
}

// finite takes what is not stated, as of a thermocouple beyond its class, for nothing.
func finite(v float64) float64 {
	if math.IsNaN(v) {
		return 0
	}
	return v
}
