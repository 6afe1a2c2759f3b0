package egt

import (
	"math"
	"time"

	"throatwatch/monitor"
)

// ConsecutiveScans is how many scans in a row must be above the limit of a band
// that allows no time at all before that counts: one bad conversion is no
// over-temperature.
const ConsecutiveScans = 3

// seenWithin is the longest step between two good values that counts as seen,
// ns. What lies in a longer one is assumed.
const seenWithin = int64(time.Second)

// State is the ledger. It is plain data and may be encoded and copied as such.
// The zero value is a ledger that has seen nothing.
type State struct {
	Bands    []BandState // as Config.Bands
	IdleSeen bool        // idle was reached since this start began
	T        int64       // event time of the last step, ns UTC
	Last     float64     // last good indicated EGT, K
	HaveLast bool        // false until there is a good value
	Gap      bool        // the last step had no value
}

// BandState is the account of one band. Times are in ns, temperatures in K.
type BandState struct {
	Name       string
	Holds      bool    // the band is in force
	Over       bool    // an excursion is on: above the limit, or not yet re-armed
	Exceeded   bool    // this excursion, or the run, has used up its allowance
	Elapsed    int64   // time above the limit in this excursion, 0 when none is on
	Assumed    int64   // part of Elapsed for which there was no value
	Peak       float64 // highest value of this excursion (or of Scans), 0 when there is none
	Began      int64   // event time at which this excursion began
	BelowSince int64   // event time since when the value is below limit − deadband
	Below      bool    // BelowSince holds
	Scans      int     // scans in a row above the limit, while no excursion is on
	// Of this run.
	Total        int64   // time above the limit
	TotalAssumed int64   // part of Total for which there was no value
	RunPeak      float64 // highest value above the limit, 0 when there was none
	Excursions   int     // how many began
	Exceedances  int     // how many used up the allowance
}

// Remaining gives what is left of the allowances of b, ns: the smaller of that
// of the excursion and, if there is one, that of the run. It is not negative.
func (s *BandState) Remaining(b *Band) int64 {
	left := b.Allowance - s.Elapsed
	if b.PerRun > 0 {
		left = min(left, b.PerRun-s.Total)
	}
	return max(left, 0)
}

// Fit makes s a ledger of the bands of c. A band that s has already, by name,
// keeps its account.
func (c *Config) Fit(s *State) {
	bands := make([]BandState, len(c.Bands))
	for i := range c.Bands {
		bands[i] = BandState{Name: c.Bands[i].Name}
		for j := range s.Bands {
			if s.Bands[j].Name == c.Bands[i].Name {
				bands[i] = s.Bands[j]
			}
		}
	}
	s.Bands = bands
}

// Reset begins the account of a new run. An excursion that is on goes on, since
// the limits of the engine know no runs, and is the first of the new one.
func (s *State) Reset() {
	for i := range s.Bands {
		b := &s.Bands[i]
		b.Total, b.TotalAssumed, b.RunPeak, b.Excursions, b.Exceedances = 0, 0, 0, 0, 0
		if b.Over {
			b.Total, b.TotalAssumed, b.RunPeak, b.Excursions = b.Elapsed, b.Assumed, b.Peak, 1
		}
		if b.Exceeded {
			b.Exceedances = 1
		}
	}
}

// Step enters one scan: the indicated EGT in K (NaN when there is none) at
// event time t in ns. It reports whether a band began or ceased to hold, or an
// excursion began, ended or used up its allowance; the clocks move without that.
//
// A value stands until the next one. Of the time between two scans that part
// counts which the value at its beginning gives: above the limit or not. In a
// gap the last good value stands and the time counts as assumed; it does not
// count when the engine is known to be off. Time between limit and
// limit − deadband belongs to the excursion but is not counted.
//
// A band of kind start holds until the engine reaches idle, and then until an
// excursion that is on has ended. It holds again from the next start.
func (c *Config) Step(s *State, t int64, egt float64, lit bool, phase monitor.Phase) (changed bool) {
	if len(s.Bands) != len(c.Bands) {
		c.Fit(s)
	}
	missing := math.IsNaN(egt)
	var dt int64
	if s.HaveLast {
		dt = max(t-s.T, 0)
	}
	assumed := missing || s.Gap || dt > seenWithin
	if assumed && !lit && phase == monitor.Off {
		dt = 0
	}
	switch phase {
	case monitor.Off, monitor.Cranking, monitor.Lighting:
		s.IdleSeen = false
	case monitor.Idle, monitor.Accelerating, monitor.Steady, monitor.Decelerating:
		s.IdleSeen = true
	case monitor.PhaseUnknown, monitor.Rundown, monitor.Cooling, monitor.NumPhases:
		// A start is neither begun nor ended.
	}
	for i := range c.Bands {
		band, b := &c.Bands[i], &s.Bands[i]
		before := *b
		b.count(band, dt, s.Last, assumed)
		b.Holds = band.Kind == KindRun || !s.IdleSeen || b.Over
		if !missing {
			b.enter(band, t, egt)
		}
		b.judge(band)
		changed = changed || b.Holds != before.Holds || b.Over != before.Over ||
			b.Exceeded != before.Exceeded || b.Excursions != before.Excursions
	}
	s.T, s.Gap = t, missing
	if !missing {
		s.Last, s.HaveLast = egt, true
	}
	return changed
}

// count adds the time since the last step if the value then was above the limit.
func (s *BandState) count(b *Band, dt int64, last float64, assumed bool) {
	if !s.Over || last <= b.Limit {
		return
	}
	s.Elapsed += dt
	s.Total += dt
	if assumed {
		s.Assumed += dt
		s.TotalAssumed += dt
	}
}

// enter begins, carries on or ends an excursion by a good value.
func (s *BandState) enter(b *Band, t int64, egt float64) {
	above := egt > b.Limit
	switch {
	case !s.Over && (!above || !s.Holds):
		s.Scans, s.Peak = 0, 0
		return
	case !s.Over:
		if s.Scans == 0 {
			s.Began, s.Peak = t, 0
		}
		s.Scans++
		s.Peak = max(s.Peak, egt)
		if b.Allowance == 0 && s.Scans < ConsecutiveScans {
			return
		}
		s.Over, s.Below = true, false
		s.Excursions++
		s.Elapsed, s.Assumed = t-s.Began, 0
		if s.Elapsed > seenWithin {
			s.Assumed = s.Elapsed
		}
		s.Total += s.Elapsed
		s.TotalAssumed += s.Assumed
	case egt >= b.Limit-b.Deadband:
		s.Below = false
	case !s.Below:
		s.Below, s.BelowSince = true, t
	}
	if above {
		s.Peak = max(s.Peak, egt)
		s.RunPeak = max(s.RunPeak, s.Peak)
	}
	if s.Below && t-s.BelowSince >= b.Rearm {
		s.Over, s.Below, s.Scans = false, false, 0
		s.Elapsed, s.Assumed, s.Peak = 0, 0, 0
	}
}

// judge compares what is used with what is allowed. An excursion that has used
// up its allowance stays so until it ends.
func (s *BandState) judge(b *Band) {
	switch {
	case !s.Over:
		s.Exceeded = false
	case s.Exceeded:
	case b.Allowance == 0, s.Elapsed > b.Allowance, b.PerRun > 0 && s.Total > b.PerRun:
		s.Exceeded = true
		s.Exceedances++
	}
}
