package corpus

import (
	"slices"

	"throatwatch/rules"
	"throatwatch/rules/alarm"
)

const (
	// apart is how far episodes lie apart at least, ns: an alarm with the usual
	// off-delay goes on over a shorter pause.
	apart = 2 * second
	// chatterIn is the time, ns, within which an alarm that is raised three times
	// chatters (IEC 62682, common figure, from memory).
	chatterIn = 60 * second
)

// span is a stretch of event time, both ends in it, ns UTC.
type span struct{ from, to int64 }

func (s span) near(t, slack int64) bool { return t >= s.from-slack && t <= s.to+slack }

// expectation is what truth asks of the alarm of one rule in one run.
type expectation struct {
	rule      string
	onDelay   int64
	maySince  int64
	mustSince int64
	free      []span // in which the alarm may be raised
	due       []due
}

// due is an event that must alarm.
type due struct {
	at   int64 // from when on the alarm is due
	free int   // its episode
}

// condition is what the truth of one instant says of a rule: whether its condition
// may hold and whether it must; and whether an alarm may, and must, follow from it.
type condition struct {
	may, must         bool
	mayGate, mustGate bool
}

// plain is a condition that nothing suppresses.
func plain(may, must bool) condition { return condition{may, must, true, true} }

// step enters an instant. What holds for a scan less than the on-delay may alarm
// already, what holds for a scan more must: a scan sees an instant of its interval.
func (e *expectation) step(t, period int64, c condition) {
	hold := func(since *int64, is bool) {
		switch {
		case !is:
			*since = 0
		case *since == 0:
			*since = t
		}
	}
	hold(&e.maySince, c.may || c.must)
	hold(&e.mustSince, c.must)
	must := e.mustSince != 0 && t-e.mustSince > e.onDelay && c.mustGate
	if may := e.maySince != 0 && t-e.maySince >= e.onDelay-2*period && c.mayGate; !may && !must {
		return
	}
	if n := len(e.free); n > 0 && t-e.free[n-1].to <= apart {
		e.free[n-1].to = t
	} else {
		e.free = append(e.free, span{t, t})
	}
	if n := len(e.free) - 1; must && (len(e.due) == 0 || e.due[len(e.due)-1].free != n) {
		e.due = append(e.due, due{t - period, n})
	}
}

// behaviour is what an alarm did in one run.
type behaviour struct {
	raises []raise
}

type raise struct {
	t, host int64 // event and host time
	end     int64 // event time at which its condition was gone, 0 = never
}

func (b *behaviour) raise(t, host int64) { b.raises = append(b.raises, raise{t: t, host: host}) }

func (b *behaviour) end(t int64) {
	if n := len(b.raises); n > 0 && b.raises[n-1].end == 0 {
		b.raises[n-1].end = t
	}
}

// alarm enters a change of an alarm.
func (b *behaviour) alarm(a *rules.Alarm, t, host int64) {
	if a.Raise {
		b.end(t)
		b.raise(t, host)
	} else if s := alarm.State(a.State); s != alarm.Unacknowledged && s != alarm.Acknowledged {
		b.end(t)
	}
}

// terms are what a run grants every alarm.
type terms struct {
	period  int64
	slack   int64  // around an episode, ns
	allowed int64  // from due to raise, ns of host time
	outages []span // of the daemon, until it has caught up
}

// deadline gives the host time by which an alarm that is due at t must be raised.
func (t *terms) deadline(at int64) int64 {
	end := at + t.allowed
	for _, o := range t.outages {
		if end >= o.from && at <= o.to {
			end = max(end, o.to+t.allowed)
		}
	}
	return end
}

// Mishap is an alarm that was missed or false.
type Mishap struct {
	Rule string
	What string // missed, late, false or chattering
	At   int64  // ns since the begin of the run
}

// judge holds behaviour against expectation.
func (e *expectation) judge(b *behaviour, t *terms) (c Count, bad []Mishap) {
	for _, d := range e.due {
		c.Expected++
		deadline := t.deadline(d.at)
		on, late := false, false
		for _, r := range b.raises {
			switch {
			case r.end != 0 && r.end < d.at || !e.free[d.free].near(r.t, t.slack) && r.t > d.at:
			case r.host <= deadline:
				on = true
				if deadline == d.at+t.allowed { // else it is the daemon's absence that counts
					c.Delay = max(c.Delay, (r.host-d.at+t.period-1)/t.period)
				}
			default:
				late = true
			}
			if on {
				break
			}
		}
		switch {
		case on:
			c.Detected++
		case late:
			c.Missed++
			bad = append(bad, Mishap{e.rule, "late", d.at})
		default:
			c.Missed++
			bad = append(bad, Mishap{e.rule, "missed", d.at})
		}
	}
	last := span{}
	for i, r := range b.raises {
		k := slices.IndexFunc(e.free, func(s span) bool { return s.near(r.t, t.slack) })
		if k < 0 {
			c.False++
			bad = append(bad, Mishap{e.rule, "false", r.t})
			continue
		}
		if s := e.free[k]; i >= 2 && s != last && s.near(b.raises[i-2].t, t.slack) && r.t-b.raises[i-2].t <= chatterIn {
			c.Chattering++
			bad = append(bad, Mishap{e.rule, "chattering", r.t})
			last = s
		}
	}
	return c, bad
}

// Count is how often an alarm was due, and what became of it.
type Count struct {
	Expected, Detected, Missed, False, Chattering int
	Delay                                         int64 // longest, scans of host time from due to raise
}

func (c *Count) add(o Count) {
	c.Expected += o.Expected
	c.Detected += o.Detected
	c.Missed += o.Missed
	c.False += o.False
	c.Chattering += o.Chattering
	c.Delay = max(c.Delay, o.Delay)
}
