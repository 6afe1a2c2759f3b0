package config

import (
	"fmt"
	"math"
	"regexp"
	"strings"
	"time"

	"throatwatch/monitor/unit"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// fuelAgrees is by how much the hydrogen-to-carbon ratio of a certificate may differ from
// that of the gas, relative: certificates state it to a per cent (common practice, no source).
const fuelAgrees = 0.01

// readFuel reads the batch of fuel that is burnt.
func (r *rig) readFuel(n node) {
	f := n.fields()
	r.fuel = f
	b := &r.cfg.Rig.Fuel
	value := func(v float64) rules.Reading { return rules.Reading{V: v, Known: v > 0} }
	b.Batch = f.get("batch").label("")
	b.Density = value(f.get("density").quantity(unit.Density, 0, positive, between(50, 1200, "50 kg/m3 and 1200 kg/m3")))
	b.HeatingValue = value(f.get("lower_heating_value").quantity(unit.SpecificEnergy, 0, positive, between(5e6, 130e6, "5 MJ/kg and 130 MJ/kg")))
	b.HydrogenToCarbon = value(f.get("hydrogen_to_carbon").number(0, between(0.1, 4, "0.1 and 4 atoms of H for one of C")))
	f.done()
}

// fitFuel makes the fuel of the gas that of the batch, or finds that they contradict each
// other; stated tells that gas.fuel is.
func (r *rig) fitFuel(stated bool) {
	gas, batch := &r.cfg.Compute.Fuel, r.cfg.Rig.Fuel.HydrogenToCarbon
	if !batch.Known {
		return
	}
	if !stated {
		gas.Hydrogen = round12(gas.Carbon * batch.V)
		return
	}
	if own := gas.Hydrogen / gas.Carbon; !(math.Abs(own/batch.V-1) <= fuelAgrees) {
		r.fuel.get("hydrogen_to_carbon").fault(fmt.Sprintf("gas.fuel has %.4g atoms of H for one of C", own), "correct one of them, or leave gas.fuel away: it is made of the batch then")
	}
}

// runPlace finds what a run number may hold beside plain text.
var runPlace = regexp.MustCompile(`\{([^{}]*)\}`)

// readRun reads when a run ends, of what it is a run, and how runs are numbered.
func (r *rig) readRun(n node) {
	f := n.fields()
	run, info := &r.cfg.Run, &r.cfg.Rig
	run.EndAfter = f.get("end_after").duration(120*second, positive)
	info.Test = f.get("test").label("")
	info.Purpose = f.get("purpose").label("")
	if number := f.get("number"); number.is() {
		r.readRunNumber(number)
	}
	f.done()
}

// readRunNumber reads the scheme of run numbers.
func (r *rig) readRunNumber(n node) {
	const hint = `write it as "{engine}/{build}/{test}/{run:3}"; {nozzle} and {rig} can stand in it too`
	text, info, places := n.label(""), &r.cfg.Rig, 0
	r.cfg.Run.Width = 1
	series := runPlace.ReplaceAllStringFunc(text, func(place string) string {
		name, width, wide := strings.Cut(strings.Trim(place, "{}"), ":")
		of, key := "", ""
		switch name {
		case "run":
			places++
			if wide {
				if len(width) != 1 || width[0] < '1' || width[0] > '6' {
					n.fault(fmt.Sprintf("%s: a run number has 1 to 6 digits at least", place), hint)
				} else {
					r.cfg.Run.Width = int(width[0] - '0')
				}
			}
			return pipeline.RunPlace
		case "rig":
			of, key = info.ID, "rig.id"
		case "engine":
			of, key = info.EngineSerial, "engine.serial"
		case "build":
			of, key = info.EngineBuild, "engine.build"
		case "nozzle":
			of, key = info.NozzleSerial, "nozzle.serial"
		case "test":
			of, key = info.Test, "run.test"
		}
		switch {
		case key == "" || wide:
			n.fault(place+" stands for nothing", hint)
		case of == "":
			n.fault(place+" has nothing to stand for", "state "+key)
		case strings.ContainsAny(of, "{}"):
			n.fault(fmt.Sprintf("%s is %q", place, of), "leave braces out of "+key)
		}
		return of
	})
	switch {
	case places != 1:
		n.fault("a run number holds {run} once", hint)
	case strings.ContainsAny(strings.Replace(series, pipeline.RunPlace, "", 1), "{}"):
		n.fault("a brace stands alone", hint)
	}
	r.cfg.Run.Series = series
}

// date reads a day as YYYY-MM-DD; "" without a value or with a faulty one.
func (n node) date() string {
	text := n.label("")
	if _, err := time.Parse(time.DateOnly, text); text != "" && err != nil {
		n.fault(fmt.Sprintf("%q is no date", text), "write it as 2026-03-31")
		return ""
	}
	return text
}

// readCoolDown reads how long an engine is left to cool before the next start.
func (r *rig) readCoolDown(n node) {
	f := n.fields()
	l := &r.cfg.Compute.EGT.Limits
	l.CoolFuelOff = f.get("at_least").duration(0, positive)
	l.CoolRest = f.get("before_restart").duration(0, positive)
	f.done()
	if n.is() && r.cfg.Compute.Stations.Speed < 0 {
		f.fault("shutdowns are told by the rotor speed", "name a channel in stations.speed")
	}
}
