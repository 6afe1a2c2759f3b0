package compute

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
)

// ledger enters the scan into the ledger of EGT bands and the life of the engine.
func (c *Computer) ledger(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) egt.Changes {
	v := &p.V
	ch := c.cfg.EGT.Step(&s.EGT, p.T, v[monitor.EGTIndicated], p.Lit, p.Phase)
	e := &s.Engine
	c.cfg.EGT.Watch(e, &s.EGT, &ch, &egt.Scan{
		T: p.T, EGT: v[monitor.EGTIndicated], SpeedRate: v[monitor.SpeedRate], Fuel: c.channel(scan, c.cfg.Stations.FuelFlow),
		Lit: p.Lit, LitKnown: p.LitKnown, Choked: s.Choke == monitor.Choked, Phase: p.Phase,
	})
	if c.cfg.Stations.Speed < 0 {
		return ch // without a phase nothing is known of starts and shutdowns
	}
	v[monitor.EGTRise] = e.Rise()
	v[monitor.StarterTime], v[monitor.StarterHour] = float64(e.Crank)/1e9, float64(e.StarterHour())/1e9
	v[monitor.StarterStarts] = float64(e.StarterStarts())
	v[monitor.SinceFuelOff], v[monitor.SinceRest], v[monitor.CoolDownLeft] = e.SinceFuelOff(), e.SinceRest(), e.CoolDownLeft(&c.cfg.EGT.Limits)
	v[monitor.RundownTime] = math.NaN()
	if e.HaveRundown {
		v[monitor.RundownTime] = float64(e.Rundown) / 1e9
	}
	return ch
}
