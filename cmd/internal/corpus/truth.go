package corpus

import (
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/monitor"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// critical is the critical NPR of the products of C12H23 in dry air: fuel-air
// ratio 0.01, 0.02, 0.03, and T0 of 300 K to 1300 K in steps of 200 K. Source:
// testdata/vectors/thermally_perfect.csv, bisection with 30 digits on the data of
// NASA/TP-2002-211556. Linear in between it is within 0.02 %; humid air adds 0.02 %.
var critical = [3][6]float64{
	{1.891243877, 1.885942112, 1.875454439, 1.863495387, 1.853349266, 1.845481008},
	{1.889048189, 1.882416608, 1.871407020, 1.859308187, 1.849099673, 1.841180242},
	{1.886923931, 1.879047800, 1.867567184, 1.855350081, 1.845092211, 1.837132837},
}

// criticalU is the relative uncertainty of criticalNPR with that of T7 in it.
const criticalU = 5e-4

func criticalNPR(f, t0 float64) float64 {
	x, i := cell(f/0.01-1, len(critical))
	y, j := cell((t0-300)/200, len(critical[0]))
	at := func(i int) float64 { return critical[i][j] + y*(critical[i][j+1]-critical[i][j]) }
	return at(i) + x*(at(i+1)-at(i))
}

// cell gives the cell that x of n points lies in, and where in it.
func cell(x float64, n int) (part float64, i int) {
	i = min(max(int(math.Floor(x)), 0), n-2)
	return x - float64(i), i
}

// allowance counts the time above a limit that a band allows for.
type allowance struct {
	above, below float64 // K: counts above, may end below
	rearm        int64   // ns below after which an excursion is over
	on           bool
	elapsed      int64
	total        int64
	under        int64 // since when below, 0 = it is not
	last         float64
}

// step enters a value; what was before stood until now.
func (a *allowance) step(t, dt int64, v float64, holds bool) {
	if a.on && a.last > a.above {
		a.elapsed += dt
		a.total += dt
	}
	a.last = v
	switch {
	case v > a.above && (holds || a.on):
		a.on, a.under = true, 0
	case v >= a.below:
		a.under = 0
	case a.under == 0:
		a.under = t
	}
	if a.on && a.under != 0 && t-a.under >= a.rearm {
		a.on, a.elapsed, a.under = false, 0, 0
	}
}

// band is a band of the harness, counted by what surely and by what possibly is
// above its limit.
type band struct {
	egt.Band
	sure, maybe allowance
	straight    int64  // ns surely above without a break
	beyond      string // names of its rules
	over        string
}

// limit is a limit of a channel.
type limit struct {
	channel  int
	value    float64
	sign     float64 // 1 above, -1 below
	suppress []monitor.Phase
}

// levels matches what the limits of a rig file become.
var levels = regexp.MustCompile(`^channel\.([a-z0-9_]+)(?: - channel\.[a-z0-9_]+)? ([<>]) ([-+.0-9e]+)$`)

// truth follows what truly happens, and says of each rule what its alarm should do.
type truth struct {
	*signals
	weights  []float64 // of the rake
	harness  group
	rake     group
	egtLo    float64
	egtHi    float64
	speed    [2]float64 // rpm, surely at least and possibly at most
	speedAt  []float64  // of the last second
	speedOK  bool
	margin   [2]float64 // percent, at least and at most
	farther  bool       // the throat may be remembered as not choked
	chokeOK  bool       // the state is surely known
	chokeOff bool       // it surely is not
	armed    [2]bool    // surely, possibly
	base     float64    // K, coolest EGT since the rotor began to turn
	rest     bool       // the rotor is at rest, or turns since then without having come to idle
	fast     [2]bool    // at or above idle, with hysteresis
	fastFor  int64      // ns surely
	burns    [2]bool    // by EGT
	hotFor   int64
	cutoff   float64 // rpm/s, slope of the last second
	message  [2]int64
	bands    []band
	limits   map[string]limit
	skewed   [2]bool
	health   []health
	after    [2]afterglow // surely and possibly since the fuel is off
	spread   [2]float64   // K, of the harness
	cranked  [2]cranking  // surely and possibly
	quiet    int64        // ns for which the rotor has moved little
	learned  int64        // ns of steady running above idle with a sound harness, and no streak
	rules    []rules.Rule
	expect   []expectation
}

// afterglow follows the EGT from when the fuel is off.
type afterglow struct {
	on     bool
	since  int64
	lowest float64
}

// cranking is how long the starter cranks, ns.
type cranking struct{ once, all int64 }

// health is a part of the daemon that does not work for a time.
type health struct {
	part string
	span
}

// judged is how often the rules on the daemon are judged, ns.
const judged = second / 10

func newTruth(cfg *pipeline.Config, begin int64, faults []fault, bad []health) *truth {
	c := &cfg.Compute
	tr := &truth{
		signals: newSignals(cfg, begin, faults), weights: c.Stations.P7Watch.Weights,
		limits: map[string]limit{}, health: bad, rest: true, base: math.Inf(1),
	}
	st := &c.Stations
	u := 0.0
	for _, i := range st.EGT {
		u = math.Hypot(u, tr.u95(i, 0))
	}
	u /= float64(len(st.EGT))
	for _, b := range c.EGT.Bands {
		one := band{Band: b, beyond: "egt_" + b.Name + "_exceeded", over: "egt_" + b.Name + "_over"}
		one.sure = allowance{above: b.Limit + u, below: b.Limit - b.Deadband + u, rearm: b.Rearm - 2*tr.period}
		one.maybe = allowance{above: b.Limit - u, below: b.Limit - b.Deadband - u, rearm: b.Rearm + 2*tr.period}
		tr.bands = append(tr.bands, one)
	}
	tr.rules = ruleList(cfg)
	for i := range tr.rules {
		r := &tr.rules[i]
		delay := r.OnDelay
		if m := levels.FindStringSubmatch(r.When); m != nil {
			k := slices.IndexFunc(c.Channels, func(ch compute.Channel) bool { return ch.ID == m[1] })
			if v, err := strconv.ParseFloat(m[3], 64); err == nil && k >= 0 {
				l := limit{channel: k, value: v, sign: 1, suppress: r.SuppressIn}
				if m[2] == "<" {
					l.sign = -1
				}
				tr.limits[r.Name] = l
			}
		}
		if r.Name == "hung_start" {
			delay += rateSettles
		}
		tr.expect = append(tr.expect, expectation{rule: r.Name, onDelay: delay})
	}
	return tr
}

// ruleList gives the rules of a rig, with the alarms by which they say that they cannot
// be judged.
func ruleList(cfg *pipeline.Config) []rules.Rule {
	list := slices.Clone(cfg.Rules)
	for i := range cfg.Rules {
		if r := &cfg.Rules[i]; r.Unknown.Priority > 0 {
			list = append(list, rules.Rule{
				Name: r.Name + inDoubt, When: r.When, Priority: r.Unknown.Priority, OnDelay: r.Unknown.After, SuppressIn: r.SuppressIn,
			})
		}
	}
	return list
}

// inDoubt ends the name of the alarm that a rule cannot be judged.
const inDoubt = "_unknown"

// rateSettles is how long the rate of speed takes to show what the rotor does, ns:
// three times the memory of its filter, 0.5 s.
const rateSettles = 3 * second / 2

// step enters a pack. skewed tells whether a publisher's clock is surely, and
// possibly, wrong.
func (tr *truth) step(t *rehearsal.Truth, skewed [2]bool) {
	before := tr.t
	tr.signals.step(t)
	dt := int64(0)
	if before != 0 {
		dt = tr.t - before
	}
	tr.skewed = skewed
	for i := range tr.ch {
		tr.message[0], tr.message[1] = max(tr.message[0], tr.ch[i].sure), max(tr.message[1], tr.ch[i].maybe)
	}
	tr.engine(dt)
	tr.throat(t.FuelAir)
	tr.count(dt)
	for i := range tr.expect {
		e := &tr.expect[i]
		e.step(tr.t, tr.period, tr.condition(&tr.rules[i]))
	}
}

// engine finds speed, EGT and flame.
func (tr *truth) engine(dt int64) {
	st, ph := &tr.cfg.Compute.Stations, &tr.cfg.Compute.Phase
	speed := &tr.ch[st.Speed]
	u := 60 * tr.u95(st.Speed, 0)
	tr.speed = [2]float64{60*speed.lo - u, 60*speed.hi + u}
	tr.speedOK, _ = tr.known(st.Speed)
	const rated = 20 // packs of a second, at most
	if tr.speedAt = append(tr.speedAt, 30*(speed.lo+speed.hi)); len(tr.speedAt) > rated {
		tr.speedAt = slices.Delete(tr.speedAt, 0, 1)
	}
	tr.cutoff = (tr.speedAt[len(tr.speedAt)-1] - tr.speedAt[0]) / max(1, float64(len(tr.speedAt)-1)) / (float64(tr.period) / 1e9)

	tr.mean(&tr.harness, st.EGT, nil, st.MinEGT)
	u = 0
	for _, i := range st.EGT {
		u = math.Hypot(u, tr.u95(i, 0))
	}
	u /= float64(len(st.EGT))
	tr.egtLo, tr.egtHi = tr.harness.lo-u+st.EGTTrim, tr.harness.hi+u+st.EGTTrim

	for k, v := range tr.speed {
		switch {
		case v >= ph.Idle-ph.IdleBand:
			tr.fast[k] = true
		case v < ph.Idle-2*ph.IdleBand:
			tr.fast[k] = false
		}
	}
	if tr.fastFor += dt; !tr.fast[0] {
		tr.fastFor = 0
	}
	switch {
	case tr.speed[1] < ph.Turning:
		tr.rest, tr.base = true, math.Inf(1)
	case tr.fast[1]:
		tr.rest = false
	}
	if tr.rest {
		tr.base = min(tr.base, tr.egtHi)
	}
	// A flame shows by EGT above a threshold, and ends 10 K below it.
	const ends = 10
	tr.aftermath(dt)
	if tr.hotFor += dt; tr.egtLo <= ph.LitEGT || tr.speed[0] < ph.Turning || !tr.harness.sure {
		tr.hotFor = 0
	}
	switch {
	case tr.speed[1] < 0.8*ph.Turning, tr.egtLo < ph.LitEGT && tr.harness.maybe:
		tr.burns[0] = false
	case tr.hotFor > 2*second:
		tr.burns[0] = true
	}
	switch {
	case tr.speed[1] < 0.7*ph.Turning, tr.egtHi < ph.LitEGT-ends && tr.egtHi < tr.base:
		tr.burns[1] = false
	case tr.egtHi > ph.LitEGT-ends, tr.egtHi > tr.base+ph.LitRise/2:
		tr.burns[1] = true
	}
}

// aftermath finds what follows a shutdown, how long the starter cranks, and the spread
// of the harness.
func (tr *truth) aftermath(dt int64) {
	st, ph := &tr.cfg.Compute.Stations, &tr.cfg.Compute.Phase
	fuel := &tr.ch[st.FuelFlow]
	u := tr.u95(st.FuelFlow, egt.FuelOn)
	down := !tr.rest || tr.cutoff < -ph.MoveRate || tr.speed[1] < ph.Turning
	off := [2]bool{!tr.fast[1] && down && fuel.hi+u < egt.FuelOn, !tr.fast[0] && fuel.lo-u < egt.FuelOn}
	at := [2]float64{tr.egtHi, tr.egtLo}
	for k := range tr.after {
		a := &tr.after[k]
		switch {
		case !off[k]:
			*a = afterglow{}
			continue
		case !a.on:
			*a = afterglow{true, tr.t, math.Inf(1)}
		}
		if k == 1 || tr.t-a.since > second {
			a.lowest = min(a.lowest, at[k])
		}
	}

	turning := [2]bool{
		tr.rest && tr.speed[0] > ph.Turning && tr.cutoff > -ph.MoveRate/2,
		tr.rest && tr.speed[1] > 0.8*ph.Turning,
	}
	for k, is := range turning {
		if is {
			tr.cranked[k].once += dt
			tr.cranked[k].all += dt
		} else {
			tr.cranked[k].once = 0
		}
	}

	soundLo, soundHi, lo, hi := math.Inf(1), math.Inf(-1), math.Inf(1), math.Inf(-1)
	for _, i := range st.EGT {
		c := &tr.ch[i]
		lo, hi = min(lo, c.lo), max(hi, c.hi)
		if !c.faulty {
			soundLo, soundHi = min(soundLo, c.hi), max(soundHi, c.lo)
		} else if c.reads == c.reads {
			lo, hi = min(lo, c.reads), max(hi, c.reads)
		}
	}
	if tr.quiet += dt; !tr.fast[0] || math.Abs(tr.cutoff) > ph.MoveRate/2 {
		tr.quiet = 0
	}
	if above := tr.speed[0] > ph.Idle+2*ph.IdleBand; above && tr.quiet > 2*ph.SteadyAfter && !slices.ContainsFunc(st.EGT, tr.strikes) {
		tr.learned += dt
	}
	both := math.Sqrt2 * tr.u95(st.EGT[0], 0)
	tr.spread = [2]float64{soundHi - soundLo - both, hi - lo + both}
}

// strikes tells whether a fault or a streak of hot gas is at a channel, or was a little ago.
func (tr *truth) strikes(i int) bool {
	now := tr.t - tr.begin
	return slices.ContainsFunc(tr.faults, func(f fault) bool {
		return f.channel == i && now >= f.from && now < f.to+recovers
	})
}

// throat finds the margin and whether choke is armed.
func (tr *truth) throat(f float64) {
	st, nz := &tr.cfg.Compute.Stations, &tr.cfg.Compute.Nozzle
	tr.mean(&tr.rake, st.P7, tr.weights, st.MinP7)
	lo, hi := tr.absolute(st.ExitPlane)
	uBack := tr.u95(st.ExitPlane, 0)
	exitSure, exitMaybe := tr.known(st.ExitPlane)
	baroSure, baroMaybe := tr.known(st.Barometer)
	if !exitSure { // the barometer stands in
		bLo, bHi := tr.absolute(st.Barometer)
		lo, hi = min(lo, bLo-st.Depression), max(hi, bHi-st.Depression)
		uBack += st.DepressionU
	}
	t7 := 0.0
	for _, i := range st.T7 {
		t7 += (tr.ch[i].lo + tr.ch[i].hi) / 2 / float64(len(st.T7))
	}
	gauge := tr.rake.hi - hi
	u := math.Hypot(tr.u95(st.P7[0], max(gauge, 0))/math.Sqrt(float64(len(st.P7)))/tr.rake.hi, uBack/lo)
	u = math.Hypot(u, tr.u95(st.Barometer, 0)*math.Abs(1/lo-1/tr.rake.hi)) + criticalU
	per := (1 - nz.DuctLoss) / criticalNPR(f, t7)
	tr.margin = [2]float64{100 * (tr.rake.lo*per/hi*(1-u) - 1), 100 * (tr.rake.hi*per/lo*(1+u) - 1)}
	half := nz.Hysteresis / 2
	switch { // by the lower end, with the memory of the state
	case tr.margin[0] > half:
		tr.farther = false
	case tr.margin[0] < -half:
		tr.farther = true
	}
	wallSure, wallMaybe := false, false
	for _, i := range st.WallStatic {
		s, m := tr.known(i)
		wallSure, wallMaybe = wallSure || s, wallMaybe || m
	}
	tr.chokeOK = tr.rake.sure && baroSure
	tr.chokeOff = !baroMaybe || !tr.rake.maybe && !wallMaybe
	if !baroMaybe && !exitMaybe && !wallSure { // nothing to be gauge against
		tr.chokeOff = true
	}

	burns := [2]bool{tr.burns[0], tr.burns[1]}
	for k, v := range tr.speed {
		switch {
		case nz.ArmedAboveRPM <= 0 || v < nz.ArmedAboveRPM-nz.ArmedHysterRPM || !burns[k]:
			tr.armed[k] = false
		case v >= nz.ArmedAboveRPM:
			tr.armed[k] = true
		}
	}
}

// count lets the clocks of the bands run.
func (tr *truth) count(dt int64) {
	for i := range tr.bands {
		b := &tr.bands[i]
		run := b.Kind == egt.KindRun
		// A start is over when idle is first reached.
		b.sure.step(tr.t, dt, tr.harness.lo+tr.cfg.Compute.Stations.EGTTrim, run || tr.rest && tr.speedOK)
		b.maybe.step(tr.t, dt, tr.harness.hi+tr.cfg.Compute.Stations.EGTTrim, run || tr.rest || !tr.fast[0])
		if b.straight += dt; b.sure.last <= b.sure.above || !b.sure.on {
			b.straight = 0
		}
	}
}

// exceeded tells whether the allowance of a band is surely, or possibly, used up.
func (b *band) exceeded(period int64) (may, must bool) {
	if b.Allowance == 0 {
		return b.maybe.on, b.sure.on && b.straight > egt.ConsecutiveScans*period
	}
	over := func(a *allowance, slack int64) bool {
		return a.on && (a.elapsed > b.Allowance+slack || b.PerRun > 0 && a.total > b.PerRun+slack)
	}
	return over(&b.maybe, -2*period), over(&b.sure, period)
}

// condition says what is true for a rule. A rule of which the corpus knows nothing
// must never alarm.
func (tr *truth) condition(r *rules.Rule) condition {
	for i := range tr.bands {
		b := &tr.bands[i]
		switch r.Name {
		case b.beyond:
			return plain(b.exceeded(tr.period))
		case b.over:
			return plain(b.maybe.on, b.sure.on && b.sure.last > b.sure.above && b.straight > tr.period)
		}
	}
	if l, ok := tr.limits[r.Name]; ok {
		if strings.HasSuffix(r.Name, inDoubt) {
			sure, maybe := tr.known(l.channel)
			out := tr.limit(&l)
			out.may, out.must = !sure, !maybe
			return out
		}
		return tr.limit(&l)
	}
	return tr.named(r.Name)
}

// limit judges a limit of a channel.
func (tr *truth) limit(l *limit) condition {
	c := &tr.ch[l.channel]
	u := tr.u95(l.channel, l.value)
	sure, _ := tr.known(l.channel)
	near, far := c.hi, c.lo // towards the limit, and away from it
	if l.sign < 0 {
		near, far = -c.lo, -c.hi
	}
	out := plain(near+u > l.sign*l.value, sure && far-u > l.sign*l.value)
	if len(l.suppress) > 0 { // all that do so are below idle
		out.mayGate = tr.fast[1] || !tr.speedOK
		out.mustGate = tr.fastFor > 4*tr.period && tr.speedOK
	}
	return out
}

// named judges the rules that every rig has.
func (tr *truth) named(name string) condition {
	st, ph := &tr.cfg.Compute.Stations, &tr.cfg.Compute.Phase
	half := tr.cfg.Compute.Nozzle.Hysteresis / 2
	turns := tr.speed[0] > ph.Turning && tr.speedOK
	switch name {
	case "egt_lost":
		return plain(tr.burns[1] && !tr.harness.sure, tr.burns[0] && !tr.harness.maybe && tr.speed[0] > ph.Turning)
	case "unchoke":
		return plain(tr.armed[1] && tr.farther, tr.armed[0] && tr.chokeOK && tr.margin[1] < -half)
	case "choke_unknown":
		return plain(tr.armed[1] && !tr.chokeOK, tr.armed[0] && tr.chokeOff)
	case "flame_out":
		const ends = 10
		clear := ph.Idle + 1.5*ph.IdleBand
		return plain(tr.fast[1] && !tr.burns[0],
			tr.fast[0] && tr.speed[0] > clear && tr.speedOK && tr.harness.sure && tr.egtHi < ph.LitEGT-ends)
	case "hung_start":
		return plain(tr.rest && tr.burns[1] && tr.cutoff < 100,
			tr.rest && turns && tr.burns[0] && !tr.fast[1] && tr.cutoff < 40 && tr.cutoff > -ph.MoveRate/2)
	case "no_light":
		const least = 0.002 // kg/s, from the rule
		fuel := &tr.ch[st.FuelFlow]
		u := tr.u95(st.FuelFlow, least)
		// A single reading below begins the on-delay anew: with 95 % the lowest of the
		// 200 in it is not more than 1.8 times its U95 below (JCGM 100, G.1.3: normal).
		every := math.Hypot(u, 1.5*tr.cfg.Compute.Channels[st.FuelFlow].Uncertainty.Random)
		sure, _ := tr.known(st.FuelFlow)
		return plain(tr.rest && !tr.burns[0] && fuel.hi+u > least,
			tr.rest && turns && !tr.burns[1] && sure && fuel.lo-every > least && tr.cutoff > -ph.MoveRate/2)
	case "egt_spread":
		limit := tr.cfg.Compute.EGT.Limits.Spread
		return plain(tr.spread[1] > limit, tr.harness.sure && tr.spread[0] > limit)
	case "egt_hot_streak":
		return plain(tr.streak())
	case "egt_rise":
		limit := tr.cfg.Compute.EGT.Limits.Rise
		sure, maybe := &tr.after[0], &tr.after[1]
		return plain(maybe.on && tr.egtHi-maybe.lowest > limit, sure.on && tr.harness.sure && tr.speedOK && tr.egtLo-sure.lowest > limit)
	case "starter_once":
		limit := tr.cfg.Compute.EGT.Limits.StarterOnce
		return plain(tr.cranked[1].once > limit-second/2, tr.cranked[0].once > limit+second/10)
	case "starter_hour":
		limit := tr.cfg.Compute.EGT.Limits.StarterHour
		return plain(tr.cranked[1].all > limit-2*second, tr.cranked[0].all > limit+second/10)
	case "egt_probe_lost":
		return plain(tr.harness.doubtful > 0, tr.harness.lost > 0)
	case "rake_probe_lost":
		return plain(tr.rake.doubtful > 0, tr.rake.lost > 0)
	case "source_lost":
		const silent = 2 * second // from the documents
		return plain(tr.message[0] != 0 && tr.t-tr.message[0] > silent-judged, tr.message[1] != 0 && tr.t-tr.message[1] > silent+judged)
	case "clock_skew":
		return plain(tr.skewed[1], tr.skewed[0])
	case "input_path_deaf":
		return tr.part(pipeline.PartInputPath)
	case "not_recording":
		return tr.part(pipeline.PartRecording)
	}
	return condition{}
}

// streak tells whether a probe of the harness possibly, or surely, reads hotter than its
// pattern by more than its limit. Every fault may look like that, a streak must when the
// pattern is known and the filters have followed.
func (tr *truth) streak() (may, must bool) {
	st := &tr.cfg.Compute.Stations
	const (
		known   = 90 * second // three times what learning takes
		follows = 9 * second  // lag of a probe, filter of the departure, and its hold of 3 s
	)
	limit := st.EGTWatch.Departure
	if limit == 0 {
		limit = 40 // K, where none is stated, from the documents
	}
	now := tr.t - tr.begin
	for _, f := range tr.faults {
		if !slices.Contains(st.EGT, f.channel) || now < f.from || now >= f.to+recovers {
			continue
		}
		may = true
		must = must || f.heat > 1.3*limit && now > f.from+follows && now < f.to && tr.learned > known && tr.quiet > follows && tr.harness.sure
	}
	return may, must && tr.harness.doubtful == 0
}

// part judges a part of the daemon.
func (tr *truth) part(name string) condition {
	var out condition
	for _, h := range tr.health {
		if since := tr.t - tr.begin; h.part == name {
			out.may = out.may || h.near(since, tr.period)
			out.must = out.must || since >= h.from && since <= h.to && h.to-h.from > 2*judged
		}
	}
	out.mayGate, out.mustGate = true, true
	return out
}
