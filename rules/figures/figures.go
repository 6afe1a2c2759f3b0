// Package figures measures how the alarms of a run did against published targets:
// how many asked for attention and how fast, how many stood, which chattered, how
// long it took until somebody had seen them.
//
// An annunciation is a raise, the first or another, or the worsening of an
// acknowledged alarm. Notes ask for nobody and are left out of every figure, and so
// is what is shelved, suppressed by design or out of service while it is. Times are
// event times, ns UTC.
//
// The targets are those commonly published of the tables in ANSI/ISA-18.2-2016, IEC
// 62682 and EEMUA 191, for one operator's position over days; from secondary sources
// and from memory. A run of less than an hour says nothing against them.
package figures

import (
	"fmt"
	"maps"
	"slices"
	"time"

	"throatwatch/rules"
	"throatwatch/rules/alarm"
)

const (
	second = int64(time.Second)
	// window is that of the rate, 10 min.
	window = 600 * second
	// shortest is the length of a run that is graded at least.
	shortest = 3600 * second
	// chatter says how often an alarm is raised within chatterIn to be chattering:
	// ISA-18.2, commonly published as three times in a minute.
	chatter, chatterIn = 3, 60 * second
	// staleAfter is how long an alarm stands without a break to be stale, ISA-18.2.
	staleAfter = 24 * 3600 * second
	// fewest is of how many annunciations shares are worth a grade; no source.
	fewest = 20
)

// Figures are the alarm figures of a run.
type Figures struct {
	From         rules.Time       `json:"from"`
	To           rules.Time       `json:"to"`
	Seconds      float64          `json:"seconds"`
	Graded       bool             `json:"graded"`
	WhyNot       *string          `json:"why_not"`
	Raised       int              `json:"raised"`      // annunciations
	Per10Min     *float64         `json:"per_10_min"`  // mean
	Peak10Min    int              `json:"peak_10_min"` // the most in any 10 min
	PeakAt       rules.Time       `json:"peak_at"`     // when that many had come together first
	StandingNow  int              `json:"standing_now"`
	StandingPeak int              `json:"standing_peak"`
	StandingMean *float64         `json:"standing_mean"` // over time
	Stale        int              `json:"stale"`         // alarms that stood for 24 h without a break
	Chattering   []Chatter        `json:"chattering"`
	Shelved      int              `json:"shelved"` // alarms that were shelved at some time
	OutOfService int              `json:"out_of_service"`
	AckMedian    *float64         `json:"acknowledged_after_s_median"`
	ByPriority   map[string]Share `json:"by_priority"`
	Targets      []Target         `json:"targets"`
}

// Chatter is an alarm that was raised three times or more within a minute.
type Chatter struct {
	Rule  string `json:"rule"`
	Times int    `json:"times"` // the most within a minute
}

// Share is what a priority has of the annunciations.
type Share struct {
	Raised int      `json:"raised"`
	Share  *float64 `json:"share"` // 0 to 1; nil when there were none at all
}

// Target is a published target.
type Target struct {
	Figure string  `json:"figure"`
	Target float64 `json:"target"`
	Met    *bool   `json:"met"` // nil when it is not graded
	Source string  `json:"source"`
}

// Tally counts the alarms of a run. Begin with New.
type Tally struct {
	from, now    int64
	alarms       map[string]*one // by rule
	asked        []int64         // times of annunciations
	by           [rules.Warning + 1]int
	acknowledged []int64 // ns it took
	standing     int
	peak         int
	area         float64 // of standing over time, s
	stale        int
}

// one is an alarm of the tally.
type one struct {
	state        alarm.State
	stoodAt      int64   // since when it stands
	askedAt      int64   // when it asked last
	raised       []int64 // times of raises
	shelved, out bool
}

// New gives a tally of a run that begins at from.
func New(from int64) *Tally {
	return &Tally{from: from, now: from, alarms: map[string]*one{}}
}

// Before tells how an alarm was when the run began, or some time before: the last
// that is told of it counts.
func (t *Tally) Before(a *rules.Alarm) {
	if a.Priority == rules.Note {
		return
	}
	o := t.of(a.Rule)
	t.enter(o, alarm.State(a.State), int64(a.Changed))
	if o.state.Asking() {
		o.askedAt = int64(a.Changed)
	}
	t.peak, t.stale = t.standing, 0
}

func (t *Tally) of(rule string) *one {
	o := t.alarms[rule]
	if o == nil {
		o = &one{}
		t.alarms[rule] = o
	}
	return o
}

// enter makes the state of an alarm the one of time at.
func (t *Tally) enter(o *one, state alarm.State, at int64) {
	switch {
	case state.Standing() && !o.state.Standing():
		o.stoodAt = at
		t.standing++
	case !state.Standing() && o.state.Standing():
		t.standing--
		if at-o.stoodAt > staleAfter {
			t.stale++
		}
	}
	o.state = state
	t.peak = max(t.peak, t.standing)
	o.shelved = o.shelved || state == alarm.Shelved
	o.out = o.out || state == alarm.OutOfService
}

// Add takes the next transition of the run, in the order in which they came about.
func (t *Tally) Add(a *rules.Alarm) {
	if a.Priority == rules.Note {
		return
	}
	o, state, at := t.of(a.Rule), alarm.State(a.State), int64(a.Changed)
	t.pass(at)
	was := o.state
	t.enter(o, state, at)
	switch {
	case state == alarm.Unacknowledged && was != alarm.Unacknowledged:
		t.asked = append(t.asked, at)
		t.by[a.Priority]++
		o.askedAt = at
		if was != alarm.Acknowledged { // that one has only worsened
			o.raised = append(o.raised, at)
		}
	case was == alarm.Unacknowledged && state == alarm.Acknowledged,
		was == alarm.ReturnedUnacknowledged && state == alarm.Normal,
		was == alarm.LatchedUnacknowledged && state == alarm.LatchedAcknowledged:
		t.acknowledged = append(t.acknowledged, max(at-o.askedAt, 0))
	}
}

// pass lets time pass with what stands. Time of the engine and time of the daemon
// differ by fractions of a second: it does not go back.
func (t *Tally) pass(at int64) {
	if at > t.now {
		t.area += float64(t.standing) * float64(at-t.now) / 1e9
		t.now = at
	}
}

// At gives the figures of the run up to a time, which ends the tally.
func (t *Tally) At(to int64) Figures {
	t.pass(to)
	f := Figures{
		From: rules.Time(t.from), To: rules.Time(to), Seconds: float64(max(to-t.from, 0)) / 1e9, Graded: to-t.from >= shortest,
		Raised: len(t.asked), StandingNow: t.standing, StandingPeak: t.peak, Stale: t.stale,
		Chattering: []Chatter{}, ByPriority: map[string]Share{},
	}
	if !f.Graded {
		why := fmt.Sprintf("the run is %v long; the targets are for an hour or more", time.Duration(max(to-t.from, 0)).Round(time.Second))
		f.WhyNot = &why
	}
	if f.Seconds > 0 {
		rate, mean := float64(f.Raised)*600/f.Seconds, t.area/f.Seconds
		f.Per10Min, f.StandingMean = &rate, &mean
	}
	var at int64
	f.Peak10Min, at = most(t.asked, window)
	f.PeakAt = rules.Time(at)
	for _, rule := range slices.Sorted(maps.Keys(t.alarms)) {
		o := t.alarms[rule]
		if n, _ := most(o.raised, chatterIn); n >= chatter {
			f.Chattering = append(f.Chattering, Chatter{rule, n})
		}
		if o.shelved {
			f.Shelved++
		}
		if o.out {
			f.OutOfService++
		}
		if o.state.Standing() && to-o.stoodAt > staleAfter {
			f.Stale++
		}
	}
	if n := len(t.acknowledged); n > 0 {
		slices.Sort(t.acknowledged)
		median := float64(t.acknowledged[(n-1)/2]+t.acknowledged[n/2]) / 2e9
		f.AckMedian = &median
	}
	for p := rules.Warning; p > rules.Note; p-- {
		s := Share{Raised: t.by[p]}
		if f.Raised > 0 {
			share := float64(t.by[p]) / float64(f.Raised)
			s.Share = &share
		}
		f.ByPriority[p.String()] = s
	}
	f.grade()
	return f
}

// most gives the most times within a span, and when they had come together first.
func most(times []int64, span int64) (n int, at int64) {
	times = slices.Sorted(slices.Values(times))
	first := 0
	for i, t := range times {
		for t-times[first] >= span {
			first++
		}
		if i-first+1 > n {
			n, at = i-first+1, t
		}
	}
	return n, at
}

// The sources of the targets. The standards are sold, not free: these are the figures
// that secondary sources give of them.
const (
	isa   = "ANSI/ISA-18.2-2016 and IEC 62682, table of performance metrics, as commonly published"
	eemua = "EEMUA 191, as commonly published (from memory)"
)

// grade holds the figures against the published targets.
func (f *Figures) grade() {
	hold := func(figure string, target float64, source string, v *float64, met func(v float64) bool) {
		t := Target{Figure: figure, Target: target, Source: source}
		if f.Graded && v != nil {
			ok := met(*v)
			t.Met = &ok
		}
		f.Targets = append(f.Targets, t)
	}
	number := func(n int) *float64 { v := float64(n); return &v }
	upTo := func(target float64) func(float64) bool { return func(v float64) bool { return v <= target } }
	share := func(p rules.Priority) *float64 {
		if f.Raised < fewest {
			return nil
		}
		return f.ByPriority[p.String()].Share
	}
	hold("per_10_min", 1, isa+": about 1 in 10 min; EEMUA 191 the same", f.Per10Min, upTo(1))
	hold("peak_10_min", 10, isa+": 10 or fewer in any 10 min", number(f.Peak10Min), upTo(10))
	hold("standing_mean", 10, eemua+": fewer than 10 standing", f.StandingMean, func(v float64) bool { return v < 10 })
	hold("chattering", 0, isa+": none", number(len(f.Chattering)), upTo(0))
	hold("stale", 4, isa+": fewer than 5 (from memory)", number(f.Stale), upTo(4))
	hold("share_warning", 0.05, isa+": about 5 % of high priority", share(rules.Warning), upTo(0.05))
	hold("share_caution", 0.15, isa+": about 15 % of medium priority", share(rules.Caution), upTo(0.15))
	hold("share_advisory", 0.8, isa+": about 80 % of low priority", share(rules.Advisory), func(v float64) bool { return v >= 0.8 })
}
