package rehearsal

import (
	"fmt"
	"time"
)

// Scenario is a test that the rig is taken through.
type Scenario uint8

// The scenarios. The zero value is Full.
const (
	Full   Scenario = iota // a whole test: six minutes, and rest until the run ends by itself
	Quick                  // the same events within a minute
	Points                 // five steady points, two of them below choking, without any event
)

// String gives the name of the scenario.
func (s Scenario) String() string {
	switch s {
	case Quick:
		return "quick"
	case Points:
		return "points"
	case Full:
	}
	return "full"
}

// Segment is a part of a test in which the console's settings do not change. Speeds are
// fractions of 100 %.
type Segment struct {
	Name    string
	Seconds float64
	Speed   float64 // demanded rotor speed
	Starter bool
	Fuel    bool
	Ramp    bool    // the demand moves in a straight line from the last one
	Quench  bool    // the flame goes out though fuel is on, or does not light
	Bleed   float64 // how far the surge bleed is open; 1 takes the throat to 8 % below choking
	EGT     float64 // K; over-fuelled so that the indicated EGT comes up to this; 0 = not
}

// plan gives the segments of a scenario for an engine's running line. Speeds are
// set where something happens on that engine: just above and below choking,
// where choke is armed, near the top. off is how many seconds of rest end a run.
func plan(s Scenario, l *line, off float64) ([]Segment, error) {
	const top, most = 0.95, 1.0
	armed := min(l.armed+0.01, top)
	over := l.allowance + 3 // the thermocouples need about 2 s of it to get there
	run := func(name string, seconds, speed float64) Segment {
		return Segment{Name: name, Seconds: seconds, Speed: speed, Fuel: true}
	}
	chop := func(seconds float64) Segment {
		// On a chop the temperature falls at once and the bleed opens, both of which
		// take pressure from the throat, while the rotor's inertia holds the speed.
		return Segment{Name: "throttle chop", Seconds: seconds, Speed: armed, Fuel: true, Bleed: 1}
	}
	rich := Segment{Name: "rich acceleration", Seconds: over, Speed: top, Fuel: true, Ramp: true, EGT: l.egtOver}
	crank := Segment{Name: "crank", Seconds: 2.5, Starter: true}
	start := Segment{Name: "light-off", Seconds: 7, Speed: l.idle, Starter: true, Fuel: true}
	switch s {
	case Quick:
		return []Segment{
			{Name: "off", Seconds: 2},
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
			{Name: "shutdown", Seconds: 17},
		}, nil
	case Points: // each long enough for a window of 20 s, a soak and averaging
		const long = 50
		return []Segment{
			{Name: "off", Seconds: 3},
			crank,
			start,
			run("idle", 10, l.idle),
			run("point below choking", long, max(l.idle, l.choke-0.09)),
			run("point below choking", long, max(l.idle, l.choke-0.03)),
			run("point", long, armed+0.005),
			run("point", long, top),
			run("point", long, most),
			run("deceleration", 15, l.idle),
			{Name: "shutdown", Seconds: 20},
			{Name: "off", Seconds: 20 + off},
		}, nil
	case Full:
		return []Segment{
			{Name: "off", Seconds: 3},
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
			{Name: "shutdown", Seconds: 20},
			{Name: "ventilation", Seconds: 20, Starter: true},
			{Name: "off", Seconds: 20 + off},
		}, nil
	}
	return nil, fmt.Errorf("rehearsal: scenario %d is unknown; use full, quick or points", s)
}

// total gives the length of a plan.
func total(segments []Segment) time.Duration {
	var sum float64
	for i := range segments {
		sum += segments[i].Seconds
	}
	return seconds(sum)
}

func seconds(s float64) time.Duration { return time.Duration(s * float64(time.Second)) }
