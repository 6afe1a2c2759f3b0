package config

import (
	"fmt"

	"throatwatch/monitor/calib"
	"throatwatch/monitor/check"
	"throatwatch/monitor/unit"
)

// readChecks reads what is asked of the data system with the engine at rest.
func (r *rig) readChecks(n node) {
	f := n.fields()
	l, d := &r.cfg.Checks, check.Defaults()
	l.Window = f.get("window").duration(d.Window, between(5, 120, "5 s and 120 s"))
	l.Noise = f.get("noise").number(d.Noise, between(1, 10, "1 and 10"))
	l.Draught = f.get("draught").quantity(unit.Pressure, d.Draught, positive)
	l.Drift = f.get("zero_drift").share(0, between(0, 0.05, "0 % and 5 %"))
	l.Cold = f.get("cold").quantity(unit.TemperatureDifference, d.Cold, positive)
	l.Warm = f.get("warm").quantity(unit.TemperatureDifference, d.Warm, positive)
	l.Skew = f.get("clock").duration(d.Skew, positive)
	l.Planned = f.get("planned").duration(d.Planned, positive)
	l.Valid = f.get("valid_for").duration(d.Valid, positive)
	l.Usable = d.Usable
	for _, item := range f.get("under_pressure").list() {
		i := r.index(item.text())
		switch {
		case i < 0:
			item.fault(fmt.Sprintf("there is no channel %q", item.text()), nearest(item.text(), r.ids()))
		case r.spec(i).Reference == calib.ReferenceNone:
			item.fault(fmt.Sprintf("channel %q is no pressure: it has no zero to leave out", item.text()), "name pressures that stay with the engine at rest, such as a supply")
		default:
			l.NotZero = append(l.NotZero, i)
		}
	}
	for _, item := range f.get("ticks").items() {
		t := item.fields()
		tick := check.Tick{ID: t.need("id", "the name by which commands tick it").id(), Title: t.need("title", "say what was done, as: Drain valve seen closed").label("")}
		t.done()
		for _, other := range l.AllTicks() {
			if other.ID == tick.ID && tick.ID != "" {
				item.fault(fmt.Sprintf("tick %q is there already", tick.ID), "give each its own id")
			}
		}
		l.Ticks = append(l.Ticks, tick)
	}
	f.done()
}
