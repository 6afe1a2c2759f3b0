package config

import (
	"fmt"
	"math"

	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
)

// roomy is the least ratio of the passage at the probes to the throat: at 1.1 the gas
// there has Mach 0.69, and probes do not read its total temperature by a recovery factor.
const roomy = 1.1

// readNozzle reads the nozzle with the uncertainties of its geometry.
func (r *rig) readNozzle(n node) {
	f := n.fields()
	z := &r.cfg.Compute.Nozzle
	r.cfg.Rig.NozzleSerial = f.get("serial").label("")
	r.cfg.Rig.NozzleMeasured = f.get("measured_on").date()
	area := f.need("throat_area", "as 0.0250 m2, or {channel: CHANNEL} for a position that is measured")
	if area.is() && !area.scalar() {
		g := area.fields()
		r.cfg.Compute.Stations.ThroatArea = r.probes(g.need("channel", "the area by position; several are averaged"), unit.Area)
		g.done()
	} else {
		z.ThroatArea = area.quantity(unit.Area, 0, positive, between(1e-6, 10, "1 mm2 and 10 m2"))
	}
	exit := f.get("exit_area")
	if f.get("kind").choice("convergent", "convergent", "convergent-divergent") == "convergent-divergent" {
		z.Kind = nozzle.ConvergentDivergent
		exit = f.need("exit_area", "a convergent-divergent nozzle has one")
		z.ExitArea = exit.quantity(unit.Area, 0, positive)
		if area.is() && !area.scalar() {
			area.fault("the area ratio of a convergent-divergent nozzle is not followed", "state its throat area")
		}
		if z.ExitArea > 0 && z.ExitArea < z.ThroatArea {
			exit.fault("the exit is smaller than the throat", "correct the areas, or write kind: convergent")
		}
	} else if exit.is() {
		exit.fault("a convergent nozzle ends at its throat", "leave exit_area away, or write kind: convergent-divergent")
	}
	r.readThermal(f)
	z.AreaU95 = f.get("area_uncertainty").share(0, notNegative, between(0, 0.2, "0 % and 20 %"))
	z.DuctLoss = f.get("duct_loss").share(0, between(0, 0.2, "0 % and 20 %"))

	station := f.get("coefficient_station")
	z.Discharge, z.DischargeU95 = readCoefficient(f.get("discharge").fields())
	thrust := f.get("thrust").fields()
	if thrust.get("basis").choice("nozzle-ideal", "nozzle-ideal", "fully-expanded") == "fully-expanded" {
		z.Basis = nozzle.FullyExpanded
	}
	z.Thrust, z.ThrustU95 = readCoefficient(thrust)
	if len(z.Discharge) > 1 || len(z.Thrust) > 1 {
		station = f.need("coefficient_station", "7 if the NPR of the tables is that of the rake, 8 if duct loss is taken off")
	}
	z.CoefficientStation = station.integer(8, 7, 8)

	model, choke := f.get("model_uncertainty"), f.get("choke_npr")
	z.ChokeNPRU95 = model.share(0, positive, between(0, 0.2, "0 % and 20 %"))
	if choke.is() {
		g := choke.fields()
		z.ChokeNPR = g.need("value", "p8 / back pressure at which this nozzle chokes by calibration").number(0, between(1.2, 4, "1.2 and 4"))
		z.ChokeNPRU95 = g.need("uncertainty", "of the calibration at 95 %, as 0.3 %").share(0, positive, between(0, 0.2, "0 % and 20 %"))
		g.done()
		if model.is() {
			model.fault("model_uncertainty is that of the one-dimensional critical NPR, which choke_npr replaces", "leave it away")
		}
	}
	z.ResolutionFloor = f.get("no_flow_below").number(1.003, between(1, 1.2, "1 and 1.2")) - 1
	z.ResolutionFloor = round12(z.ResolutionFloor)
	f.done()
	if a := r.cfg.Compute.Recovery.Area; a > 0 && a < roomy*z.ThroatArea {
		r.recovery.fault("the area at the probes is hardly larger than the throat", "state that of the passage at station 7")
	}
}

// readThermal reads how the throat area follows the temperature of the metal.
func (r *rig) readThermal(f *fields) {
	z := &r.cfg.Compute.Nozzle
	reference, expansion, lag := f.get("reference_temperature"), f.get("thermal_expansion"), f.get("metal_lag")
	z.AreaBasis = nozzle.AreaHot
	if f.get("area_basis").choice("hot", "hot", "cold") == "cold" {
		z.AreaBasis = nozzle.AreaCold
		reference = f.need("reference_temperature", "the temperature at which the area was measured, as 20 degC")
		expansion = f.need("thermal_expansion", "linear, of the nozzle's metal, as 15e-6 1/K")
	} else if reference.is() || expansion.is() || lag.is() {
		f.fault("reference_temperature, thermal_expansion and metal_lag belong to a cold area", "write area_basis: cold, or leave them away")
	}
	z.ReferenceTemperature = reference.quantity(unit.Temperature, 0, between(200, 1500, "-73 degC and 1227 degC"))
	z.ExpansionCoefficient = expansion.in("1/K", 0, between(0, 1e-4, "0 and 1e-4 1/K"))
	z.MetalLag = lag.duration(20 * second)
	if z.AreaBasis == nozzle.AreaHot {
		z.MetalLag = 0
	}
}

// readCoefficient reads a coefficient: one value, or a table against NPR.
func readCoefficient(f *fields) (points []nozzle.Point, u95 float64) {
	value, table := f.get("coefficient"), f.get("table")
	u95 = f.get("uncertainty").share(0, notNegative, between(0, 0.2, "0 % and 20 %"))
	plausible := between(0.5, 1.1, "0.5 and 1.1")
	switch {
	case f.has("coefficient") && f.has("table"):
		table.fault("one of coefficient and table is enough", "keep the table, or the single value")
	case value.is():
		points = []nozzle.Point{{NPR: 1, Value: value.number(1, plausible)}}
	case table.is():
		last := math.Inf(-1)
		for _, row := range table.items() {
			pair := row.items()
			if len(pair) != 2 {
				row.fault("a row is [NPR, coefficient]", "write two numbers")
				continue
			}
			p := nozzle.Point{NPR: pair[0].number(math.NaN(), between(1, 50, "1 and 50")), Value: pair[1].number(1, plausible)}
			if math.IsNaN(p.NPR) {
				continue
			}
			if p.NPR <= last {
				pair[0].fault(fmt.Sprintf("NPR %s does not rise", pair[0].text()), "order the rows by rising NPR, each once")
			}
			last = p.NPR
			points = append(points, p)
		}
	}
	f.done()
	return points, u95
}

// readPhase reads the thresholds by which phases are told apart.
func (r *rig) readPhase(n node) {
	p := &r.cfg.Compute.Phase
	speed := r.cfg.Compute.Stations.Speed >= 0
	if !n.is() {
		if speed {
			n.fault("the phases are not described", "add phase: {max: 100 % speed, idle: idle speed}")
		}
		return
	}
	f := n.fields()
	if !speed {
		f.fault("phases need the rotor speed", "name a channel in stations.speed")
	}
	p.Max = f.need("max", "100 % speed, as 22000 rpm").rpm(0, positive)
	p.Idle = f.need("idle", "lowest governed speed, as 9500 rpm").rpm(0, positive)
	p.IdleBand = f.get("idle_band").rpm(0.05*p.Idle, positive)
	p.Turning = f.get("turning").rpm(0.02*p.Max, positive)
	p.LitEGT = f.get("lit_egt").quantity(unit.Temperature, 473.15)
	p.LitRise = f.get("lit_rise").quantity(unit.TemperatureDifference, 60, positive)
	p.MoveRate = round12(60 * f.get("move_rate").per(unit.Frequency, p.Max/6000, positive))
	p.SteadyAfter = f.get("steady_after").duration(3*second, positive)
	cool := f.get("cool_egt")
	p.CoolEGT = cool.quantity(unit.Temperature, 393.15)
	p.OffAfter = f.get("off_after").duration(30*second, positive)
	r.cfg.Compute.EGT.Limits.Rundown = f.get("rundown_at_least").duration(0, positive)
	f.done()
	if p.Max > 0 && p.Idle > 0 && !(p.Turning < p.Idle-p.IdleBand && p.Idle+p.IdleBand < p.Max) {
		f.fault("the speeds are not in order", "turning < idle − idle_band and idle + idle_band < max")
	}
	if p.CoolEGT >= p.LitEGT {
		f.fault("a lit engine would be called cool", "cool_egt must be below lit_egt")
	}
}

// readChoke reads when the throat is expected choked and how the state holds.
func (r *rig) readChoke(n node) {
	f := n.fields()
	z := &r.cfg.Compute.Nozzle
	armed := f.get("armed_above")
	z.ArmedAboveRPM = armed.rpm(0, positive)
	z.ArmedHysterRPM = f.get("armed_hysteresis").rpm(0.02*z.ArmedAboveRPM, notNegative)
	z.Hysteresis = round12(100 * f.get("hysteresis").share(0.005, notNegative, between(0, 0.1, "0 % and 10 %")))
	f.done()
	switch {
	case armed.is() && r.cfg.Compute.Stations.Speed < 0:
		armed.fault("arming by speed needs the rotor speed", "name a channel in stations.speed")
	case z.ArmedAboveRPM > 0 && r.cfg.Compute.Phase.Max > 0 && z.ArmedAboveRPM > r.cfg.Compute.Phase.Max:
		armed.fault("the choke would never be armed", "armed_above must be below phase.max")
	}
}
