package pipeline

import (
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
	"throatwatch/rules"
)

// Exceedance is the record of an excursion above the limit of a band, as it is stored
// and shown: one when it uses up its allowance, and one when it ends or the run does.
// The later one of a band and begin says all that the earlier one does.
type Exceedance struct {
	Band      string       `json:"band"`
	Kind      string       `json:"kind"`
	Limit     float64      `json:"limit_k"`
	Allowance float64      `json:"allowance_s"`
	Began     rules.Time   `json:"began"`
	Ended     rules.Time   `json:"ended"`      // null while it is on
	Duration  float64      `json:"duration_s"` // time above the limit
	Assumed   float64      `json:"assumed_s"`  // part of it for which there was no value
	Peak      float64      `json:"peak_k"`
	Exceeded  bool         `json:"exceeded"` // the allowance was used up
	Above     []AboveLimit `json:"above"`    // of every band
}

// AboveLimit is the time above the limit of a band within an excursion.
type AboveLimit struct {
	Band    string  `json:"band"`
	Seconds float64 `json:"seconds"`
}

func exceedance(bands []egt.Band, i int, e *egt.Excursion) *Exceedance {
	b := &bands[i]
	out := &Exceedance{
		Band: b.Name, Kind: b.Kind.String(), Limit: b.Limit, Allowance: float64(b.Allowance) / 1e9,
		Began: rules.Time(e.Began), Ended: rules.Time(e.Ended), Duration: float64(e.Time) / 1e9, Assumed: float64(e.Assumed) / 1e9,
		Peak: e.Peak, Exceeded: e.Exceeded,
	}
	for k := range bands {
		out.Above = append(out.Above, AboveLimit{bands[k].Name, float64(e.Above[k]) / 1e9})
	}
	return out
}

// EngineEvent is something that happened to the engine: one of the names that
// egt.Events gives.
type EngineEvent struct {
	Event   string        `json:"event"`
	EGT     rules.Reading `json:"egt_k"`
	Speed   rules.Reading `json:"speed_rpm"`
	Rundown rules.Reading `json:"rundown_s"` // of the event rest
}

// Life is what an engine has been through, as it is stored and shown. What counts as
// what says egt.Life.
type Life struct {
	Serial string `json:"engine_serial"`
	Counts
}

// NozzleLife is what a nozzle has been through, on whichever engine.
type NozzleLife struct {
	Serial string `json:"nozzle_serial"`
	Counts
}

// Counts are what a life counts.
type Counts struct {
	Starts      uint64     `json:"starts"`
	HotStarts   uint64     `json:"hot_starts"`
	Hung        uint64     `json:"hung_starts"`
	NoLights    uint64     `json:"no_lights"`
	Aborted     uint64     `json:"aborted_starts"`
	FlameOuts   uint64     `json:"flame_outs"`
	Hours       float64    `json:"hours"`        // with a flame
	HoursChoked float64    `json:"hours_choked"` // with the throat choked
	Cycles      uint64     `json:"cycles"`
	Bands       []BandLife `json:"bands"`
}

// BandLife is the part of a life above one band.
type BandLife struct {
	Name        string        `json:"name"`
	Seconds     float64       `json:"seconds"`
	Peak        rules.Reading `json:"peak_k"` // null when there was none
	Excursions  uint64        `json:"excursions"`
	Exceedances uint64        `json:"exceedances"`
}

// ViewLife gives the life of an engine as it is shown.
func ViewLife(l *egt.Life) Life { return Life{l.Serial, viewCounts(l)} }

// ViewNozzle gives the life of a nozzle as it is shown.
func ViewNozzle(l *egt.Life) NozzleLife { return NozzleLife{l.Serial, viewCounts(l)} }

func viewCounts(l *egt.Life) Counts {
	out := Counts{
		Starts: l.Starts, HotStarts: l.HotStarts, Hung: l.HungStarts, NoLights: l.NoLights, Aborted: l.Aborted,
		FlameOuts: l.FlameOuts, Hours: float64(l.Lit) / hour, HoursChoked: float64(l.Choked) / hour, Cycles: l.Cycles, Bands: []BandLife{},
	}
	for _, b := range l.Bands {
		out.Bands = append(out.Bands, BandLife{
			Name: b.Name, Seconds: float64(b.Time) / 1e9, Peak: rules.Reading{V: b.Peak, Known: b.Peak > 0},
			Excursions: b.Excursions, Exceedances: b.Exceedances,
		})
	}
	return out
}

// hour in ns.
const hour = 3.6e12

// counted is the inverse of viewCounts.
func (c *Counts) counted(serial string) egt.Life {
	out := egt.Life{
		Serial: serial, Starts: c.Starts, HotStarts: c.HotStarts, HungStarts: c.Hung, NoLights: c.NoLights, Aborted: c.Aborted,
		FlameOuts: c.FlameOuts, Lit: int64(math.Round(c.Hours * hour)), Choked: int64(math.Round(c.HoursChoked * hour)), Cycles: c.Cycles,
	}
	for _, b := range c.Bands {
		out.Bands = append(out.Bands, egt.BandLife{
			Name: b.Name, Time: int64(math.Round(b.Seconds * 1e9)), Peak: b.Peak.V, Excursions: b.Excursions, Exceedances: b.Exceedances,
		})
	}
	return out
}

// Life gives the life of the engine with a serial number as of the last record; ok is
// false for one that was not watched.
func (s *State) Life(serial string) (l Life, ok bool) {
	lives := s.Compute.Engine.Lives
	i := slices.IndexFunc(lives, func(l egt.Life) bool { return l.Serial == serial })
	if i < 0 {
		return l, false
	}
	return ViewLife(&lives[i]), true
}

// NozzleLife gives the life of the nozzle with a serial number as of the last record; ok
// is false for one that was not watched.
func (s *State) NozzleLife(serial string) (l NozzleLife, ok bool) {
	lives := s.Compute.Engine.Nozzles
	i := slices.IndexFunc(lives, func(l egt.Life) bool { return l.Serial == serial })
	if i < 0 {
		return l, false
	}
	return ViewNozzle(&lives[i]), true
}

// account emits what changed in the ledger.
func (m *Machine) account(s *State, ch *egt.Changes, p *monitor.OperatingPoint) {
	if !ch.Moved {
		return
	}
	bands := m.prog.cfg.Compute.EGT.Bands
	for i := range bands {
		bit, b := uint32(1)<<i, &s.Compute.EGT.Bands[i]
		if ch.Exceeded&bit != 0 {
			now := b.Excursion()
			m.emit(s, Outcome{Kind: OutcomeExceedance, T: p.T, Exceedance: exceedance(bands, i, &now)})
		}
		if ch.Ended&bit != 0 {
			m.emit(s, Outcome{Kind: OutcomeExceedance, T: p.T, Exceedance: exceedance(bands, i, &b.Closed)})
		}
	}
	if s.RunActive {
		s.Trial.see(ch.Engine)
	}
	for name := range ch.Engine.Each {
		m.emit(s, Outcome{Kind: OutcomeEngine, T: p.T, Engine: &EngineEvent{
			Event: name, EGT: reading(p.V[monitor.EGTIndicated]), Speed: reading(p.V[monitor.Speed]),
			Rundown: rules.Reading{V: float64(s.Compute.Engine.Rundown) / 1e9, Known: name == "rest"},
		}})
	}
}

func reading(v float64) rules.Reading {
	if v != v {
		return rules.Reading{}
	}
	return rules.Reading{V: v, Known: true}
}

// settle emits what the ledger says of a run that ends: the excursions that are on,
// and the life of the engine.
func (m *Machine) settle(s *State, t int64) {
	c := &m.prog.cfg.Compute.EGT
	for i := range c.Bands {
		if b := &s.Compute.EGT.Bands[i]; b.Over {
			now := b.Excursion()
			m.emit(s, Outcome{Kind: OutcomeExceedance, T: t, Exceedance: exceedance(c.Bands, i, &now)})
		}
	}
	if life, ok := s.Life(c.Serial); ok {
		m.emit(s, Outcome{Kind: OutcomeLife, T: t, Life: &life})
	}
}
