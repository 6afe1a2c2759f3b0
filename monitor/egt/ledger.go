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

// MaxBands is the largest number of bands.
const MaxBands = 16

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
	Holds      bool            // the band is in force
	Over       bool            // an excursion is on: above the limit, or not yet re-armed
	Exceeded   bool            // this excursion, or the run, has used up its allowance
	Elapsed    int64           // time above the limit in this excursion, 0 when none is on
	Assumed    int64           // part of Elapsed for which there was no value
	Peak       float64         // highest value of this excursion (or of Scans), 0 when there is none
	Began      int64           // event time at which this excursion began
	BelowSince int64           // event time since when the value is below limit − deadband
	Below      bool            // BelowSince holds
	Scans      int             // scans in a row above the limit, while no excursion is on
	Above      [MaxBands]int64 // time above the limit of each band of the configuration, in this excursion
	Added      int64           // to Elapsed by the last step
	Closed     Excursion       // that ended last
	// Of this run.
	Total        int64   // time above the limit
	TotalAssumed int64   // part of Total for which there was no value
	RunPeak      float64 // highest value above the limit, 0 when there was none
	Excursions   int     // how many began
	Exceedances  int     // how many used up the allowance
}

// Excursion is the record of one excursion above the limit of a band. Times of
// day are event times in ns UTC, other times in ns.
type Excursion struct {
	Began    int64
	Ended    int64   // when the value fell below limit − deadband to stay there for the re-arm time; 0 = it is on
	Time     int64   // above the limit
	Assumed  int64   // part of Time for which there was no value
	Peak     float64 // K
	Exceeded bool
	Above    [MaxBands]int64 // time above the limit of each band of the configuration
}

// Excursion gives the record of the excursion that is on.
func (s *BandState) Excursion() Excursion {
	return Excursion{Began: s.Began, Time: s.Elapsed, Assumed: s.Assumed, Peak: s.Peak, Exceeded: s.Exceeded, Above: s.Above}
}

// Changes is what a step brought about. In a set, bit i stands for band i.
type Changes struct {
	Moved    bool   // a band began or ceased to hold, or one of the following
	Began    uint32 // an excursion began
	Exceeded uint32 // … used up its allowance
	Ended    uint32 // … ended: see Closed
	Engine   Events // what happened to the engine
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
				bands[i].Above = c.reorder(s.Bands, &s.Bands[j].Above)
				bands[i].Closed.Above = c.reorder(s.Bands, &s.Bands[j].Closed.Above)
			}
		}
	}
	s.Bands = bands
}

// reorder gives times by band of another configuration in the order of c.
func (c *Config) reorder(from []BandState, above *[MaxBands]int64) (out [MaxBands]int64) {
	for i := range c.Bands {
		for j := range from {
			if from[j].Name == c.Bands[i].Name {
				out[i] = above[j]
			}
		}
	}
	return out
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
// event time t in ns. It reports what changed; the clocks move without that.
//
// A value stands until the next one. Of the time between two scans that part
// counts which the value at its beginning gives: above the limit or not. In a
// gap the last good value stands and the time counts as assumed; it does not
// count when the engine is known to be off. Time between limit and
// limit − deadband belongs to the excursion but is not counted.
//
// A band of kind start holds until the engine reaches idle, and then until an
// excursion that is on has ended. It holds again from the next start.
func (c *Config) Step(s *State, t int64, egt float64, lit bool, phase monitor.Phase) (ch Changes) {
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
		held, over, exceeded := b.Holds, b.Over, b.Exceeded
		b.Added = 0
		b.count(band, dt, s.Last, assumed)
		if b.Over || b.Scans > 0 {
			for k := range c.Bands {
				if s.Last > c.Bands[k].Limit {
					b.Above[k] += dt
				}
			}
		}
		b.Holds = band.Kind == KindRun || !s.IdleSeen || b.Over
		if !missing {
			b.enter(band, t, egt)
		}
		b.judge(band)
		bit := uint32(1) << i
		switch {
		case b.Over && !over:
			ch.Began |= bit
		case over && !b.Over:
			ch.Ended |= bit
		}
		if b.Exceeded && !exceeded {
			ch.Exceeded |= bit
		}
		ch.Moved = ch.Moved || b.Holds != held || b.Over != over || b.Exceeded != exceeded
	}
	s.T, s.Gap = t, missing
	if !missing {
		s.Last, s.HaveLast = egt, true
	}
	return ch
}

// count adds the time since the last step if the value then was above the limit.
func (s *BandState) count(b *Band, dt int64, last float64, assumed bool) {
	if !s.Over || last <= b.Limit {
		return
	}
	s.Elapsed += dt
	s.Added = dt
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
			s.Began, s.Peak, s.Above = t, 0, [MaxBands]int64{}
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
		s.Added = s.Elapsed
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
		s.Closed = s.Excursion()
		s.Closed.Ended = s.BelowSince
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
