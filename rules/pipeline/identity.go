package pipeline

import (
	"fmt"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
)

// RunPlace stands in RunConfig.Series for the number of a run in it.
const RunPlace = "{run}"

// seriesKept bounds the series of run numbers that the state holds. Beyond it the one
// that was used least lately goes, and no number up to its last is given again.
const seriesKept = 256

// Series is how far the numbers of a series of runs are used up. They count from 1 and
// are never given twice.
type Series struct {
	Of   string `json:"of"` // as RunConfig.Series
	Last uint64 `json:"last"`
}

// Numbering holds the series of run numbers, the one used least lately first. It is plain data.
type Numbering struct {
	Series []Series
	Floor  uint64 // every number up to it is used up in each series that is not in Series
}

// next gives the next number of a series and uses it up.
func (n *Numbering) next(of string) uint64 {
	last := n.Last(of)
	n.used(Series{of, last + 1})
	return last + 1
}

// Last gives the last number of a series that is used up.
func (n *Numbering) Last(of string) uint64 {
	for i := range n.Series {
		if n.Series[i].Of == of {
			return n.Series[i].Last
		}
	}
	return n.Floor
}

// used notes that the numbers of a series are used up to s.Last at least.
func (n *Numbering) used(s Series) {
	if i := slices.IndexFunc(n.Series, func(o Series) bool { return o.Of == s.Of }); i >= 0 {
		s.Last = max(s.Last, n.Series[i].Last)
		n.Series = slices.Delete(n.Series, i, i+1)
	} else if len(n.Series) == seriesKept {
		n.Floor = max(n.Floor, n.Series[0].Last)
		n.Series = slices.Delete(n.Series, 0, 1)
	}
	n.Series = append(n.Series, s)
}

// Past is what the stored runs of a data folder know and a state may lack that was lost
// or begins anew. A boot record brings it.
type Past struct {
	Runs    uint64       `json:"runs,omitempty"`   // number of the last run
	Series  []Series     `json:"series,omitempty"` // of run numbers
	Engines []Life       `json:"engines,omitempty"`
	Nozzles []NozzleLife `json:"nozzles,omitempty"`
}

// Lacks gives what of p the state does not know.
func (s *State) Lacks(p Past) (out Past) {
	if p.Runs > s.Runs {
		out.Runs = p.Runs
	}
	for _, one := range p.Series {
		if one.Last > s.Numbers.Last(one.Of) {
			out.Series = append(out.Series, one)
		}
	}
	e := &s.Compute.Engine
	for i := range p.Engines {
		if !egt.Watched(e.Lives, p.Engines[i].Serial) && len(e.Lives)+len(out.Engines) < egt.MaxEngines {
			out.Engines = append(out.Engines, p.Engines[i])
		}
	}
	for i := range p.Nozzles {
		if !egt.Watched(e.Nozzles, p.Nozzles[i].Serial) && len(e.Nozzles)+len(out.Nozzles) < egt.MaxEngines {
			out.Nozzles = append(out.Nozzles, p.Nozzles[i])
		}
	}
	return out
}

// remember takes in what stored runs know.
func (s *State) remember(p Past) {
	p = s.Lacks(p)
	s.Runs = max(s.Runs, p.Runs)
	for _, one := range p.Series {
		s.Numbers.used(one)
	}
	e := &s.Compute.Engine
	for i := range p.Engines {
		e.Lives = append(e.Lives, p.Engines[i].counted(p.Engines[i].Serial))
	}
	for i := range p.Nozzles {
		e.Nozzles = append(e.Nozzles, p.Nozzles[i].counted(p.Nozzles[i].Serial))
	}
}

// identify gives a run that begins its identity: a number in the series of the rig file,
// and of what it is a run.
func (s *State) identify(cfg *Config, r *monitor.Run) {
	rig := &cfg.Rig
	r.Test, r.Purpose = rig.Test, rig.Purpose
	r.EngineBuild, r.NozzleSerial, r.FuelBatch = rig.EngineBuild, rig.NozzleSerial, rig.Fuel.Batch
	if cfg.Run.Series == "" || s.Imported {
		return
	}
	r.Series = cfg.Run.Series
	r.InSeries = s.Numbers.next(r.Series)
	r.Designation = strings.Replace(r.Series, RunPlace, fmt.Sprintf("%0*d", max(cfg.Run.Width, 1), r.InSeries), 1)
}

// Trial is what a run has seen of its start.
type Trial struct {
	Tried bool // a light-off, or fuel without one
	Idle  bool // idle was reached
}

// see follows the start of the run that is on.
func (t *Trial) see(ev egt.Events) {
	t.Tried = t.Tried || ev&(egt.EventStart|egt.EventNoLight) != 0
	t.Idle = t.Idle || ev&egt.EventIdle != 0
}

// aborted tells whether the start was given up before idle.
func (t *Trial) aborted() bool { return t.Tried && !t.Idle }
