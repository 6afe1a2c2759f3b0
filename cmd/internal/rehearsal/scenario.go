package rehearsal

import (
	"fmt"
	"time"
)

// Scenario is a test that the rig is taken through.
type Scenario uint8

// The scenarios. The zero value is Full.
const (
	Full  Scenario = iota // a whole test: six minutes, and rest until the run ends by itself
	Quick                 // the same events within a minute
)

// String gives the name of the scenario.
func (s Scenario) String() string {
	if s == Quick {
		return "quick"
	}
	return "full"
}

// segment is a part of a test in which the console's settings do not change.
type segment struct {
	name    string
	seconds float64
	speed   float64 // demanded rotor speed, fraction of 100 %
	starter bool
	fuel    bool
	ramp    bool // the demand moves in a straight line from the last one
	bleed   bool // the surge bleed is open
	hot     bool // over-fuelled: EGT is held above the lowest run limit
}

// plan gives the segments of a scenario for an engine's running line. Speeds are
// set where something happens on that engine: just above and below choking,
// where choke is armed, near the top. off is how many seconds of rest end a run.
func plan(s Scenario, l *line, off float64) ([]segment, error) {
	const top, most = 0.95, 1.0
	armed := min(l.armed+0.01, top)
	over := l.allowance + 3 // the thermocouples need about 2 s of it to get there
	run := func(name string, seconds, speed float64) segment {
		return segment{name: name, seconds: seconds, speed: speed, fuel: true}
	}
	chop := func(seconds float64) segment {
		// On a chop the temperature falls at once and the bleed opens, both of which
		// take pressure from the throat, while the rotor's inertia holds the speed.
		return segment{name: "throttle chop", seconds: seconds, speed: armed, fuel: true, bleed: true}
	}
	rich := segment{name: "rich acceleration", seconds: over, speed: top, fuel: true, ramp: true, hot: true}
	crank := segment{name: "crank", seconds: 2.5, starter: true}
	start := segment{name: "light-off", seconds: 7, speed: l.idle, starter: true, fuel: true}
	switch s {
	case Quick:
		return []segment{
			{name: "off", seconds: 2},
			crank,
			start,
			run("idle", 3.5, l.idle),
			run("acceleration", 7.5, top),
			run("steady", 6, top),
			chop(4),
			run("recovery", 3, armed),
			rich,
			run("settling", 2.5, top),
			run("deceleration", 7, l.idle),
			{name: "shutdown", seconds: 17},
		}, nil
	case Full:
		return []segment{
			{name: "off", seconds: 3},
			crank,
			start,
			run("idle", 25, l.idle),
			run("point below choking", 20, max(l.idle, l.choke-0.09)),
			run("point near choking", 20, min(l.choke+0.01, top)),
			run("point", 40, top),
			run("point", 20, most),
			run("deceleration", 10, min(armed+0.04, most)),
			chop(5),
			run("recovery", 10, armed),
			rich,
			run("point", 20, top),
			run("deceleration", 25, l.idle),
			run("acceleration", 15, top),
			run("cool-down", 35, l.idle),
			{name: "shutdown", seconds: 20},
			{name: "ventilation", seconds: 20, starter: true},
			{name: "off", seconds: 20 + off},
		}, nil
	}
	return nil, fmt.Errorf("rehearsal: scenario %d is unknown; use full or quick", s)
}

// total gives the length of a plan.
func total(segments []segment) time.Duration {
	var sum float64
	for i := range segments {
		sum += segments[i].seconds
	}
	return seconds(sum)
}

func seconds(s float64) time.Duration { return time.Duration(s * float64(time.Second)) }
