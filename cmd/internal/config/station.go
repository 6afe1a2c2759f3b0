package config

import (
	"fmt"
	"slices"
	"strings"

	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/unit"
)

// readStations reads which channels make which station value.
func (r *rig) readStations(n node) {
	f := n.fields()
	s := &r.cfg.Compute.Stations
	total := []calib.Reference{calib.Absolute, calib.Gauge}

	p7 := f.need("p7", "the total-pressure probes at the nozzle entry, as {probes: [p7_1, p7_2]}").fields()
	s.P7 = r.probes(p7.need("probes", "list the channels of the rake"), unit.Pressure, total...)
	s.MinP7 = atLeast(p7.get("at_least"), len(s.P7))
	p7.done()

	r.readT7(f.need("t7", "the gas temperature at the nozzle entry, as {probes: [t7_1]} or {from_egt: {factor: 1.02, uncertainty: 2 %}}"))
	r.readHarness(f.get("egt"))
	r.readBackPressure(f.need("back_pressure", "write {exit_plane: CHANNEL} or {barometer: CHANNEL, cell_depression: …, depression_uncertainty: …}"))

	inlet := f.get("inlet").fields()
	s.InletT = r.channel(inlet.get("temperature"), unit.Temperature)
	s.InletP = r.channel(inlet.get("pressure"), unit.Pressure, total...)
	inlet.done()

	s.Humidity = r.channel(f.get("humidity"), unit.Ratio)
	s.AmbientT = r.channel(f.get("ambient_temperature"), unit.Temperature)
	s.Speed = r.channel(f.get("speed"), unit.Frequency)
	s.FuelFlow = r.channel(f.get("fuel_flow"), unit.MassFlow)
	s.Bellmouth = r.channel(f.get("bellmouth"), unit.Pressure, calib.Differential)
	s.Thrust = r.channel(f.get("thrust"), unit.Force)
	f.done()
}

func (r *rig) readT7(n node) {
	f := n.fields()
	s := &r.cfg.Compute.Stations
	probes, least, factor := f.get("probes"), f.get("at_least"), f.get("from_egt")
	s.T7 = r.probes(probes, unit.Temperature)
	s.MinT7 = atLeast(least, len(s.T7))
	g := factor.fields()
	s.T7FromEGT = g.need("factor", "t7 in K = factor · indicated EGT in K").number(0, between(0.7, 1.4, "0.7 and 1.4"))
	s.T7FactorU95 = g.need("uncertainty", "at 95 %, as 2 %").share(0, positive, between(0, 0.2, "0 % and 20 %"))
	g.done()
	f.done()
	if f.is() && f.has("probes") == f.has("from_egt") {
		f.fault("t7 needs one source", "give either probes, or from_egt with factor and uncertainty")
	}
}

// readHarness reads the EGT harness.
func (r *rig) readHarness(n node) {
	f := n.fields()
	s := &r.cfg.Compute.Stations
	probes, parallel := f.get("probes"), f.get("parallel")
	s.EGT = r.probes(probes, unit.Temperature)
	if parallel.is() {
		s.EGTParallel = true
		if i := r.channel(parallel, unit.Temperature); i >= 0 {
			s.EGT = []int{i}
		}
	}
	s.EGTTrim = f.get("trim").quantity(unit.TemperatureDifference, 0, between(-200, 200, "-200 K and 200 K"))
	s.MinEGT = atLeast(f.get("at_least"), len(s.EGT))
	f.done()
	if f.is() && f.has("probes") == f.has("parallel") {
		f.fault("the EGT harness needs one source", "give either probes: [CHANNEL, …], or parallel: CHANNEL for probes wired together")
	}
	if s.T7FromEGT > 0 && !n.is() {
		n.fault("t7 comes from the EGT, but stations.egt names no harness", "add egt: {probes: [CHANNEL, …]}")
	}
}

// readBackPressure reads where the static pressure in the exit plane comes from.
func (r *rig) readBackPressure(n node) {
	f := n.fields()
	s := &r.cfg.Compute.Stations
	s.ExitPlane = r.channel(f.get("exit_plane"), unit.Pressure, calib.Absolute, calib.Gauge)
	s.Barometer = r.channel(f.get("barometer"), unit.Pressure, calib.Absolute)
	depression, uncertainty := f.get("cell_depression"), f.get("depression_uncertainty")
	if f.is() && !f.has("exit_plane") {
		f.need("barometer", "without an exit_plane channel the back pressure comes from the barometer")
		depression = f.need("cell_depression", "barometer less back pressure; 0 Pa on an open stand")
		uncertainty = f.need("depression_uncertainty", "at 95 %, as 100 Pa; it enters the margin")
	}
	s.Depression = depression.quantity(unit.Pressure, 0, between(-20e3, 20e3, "-20 kPa and 20 kPa"))
	s.DepressionU = uncertainty.quantity(unit.Pressure, 0, notNegative, between(0, 20e3, "0 kPa and 20 kPa"))
	if depression.is() && !uncertainty.is() && f.has("exit_plane") {
		depression.fault("the cell depression has no uncertainty", "add depression_uncertainty at 95 %")
	}
	f.done()
}

// atLeast reads how many of n probes must be usable; three of four by default.
func atLeast(at node, n int) int {
	if n == 0 {
		return 0
	}
	return at.integer((3*n+3)/4, 1, n)
}

// probes reads a list of channels of one dimension.
func (r *rig) probes(n node, d unit.Dimension, references ...calib.Reference) []int {
	var out []int
	for _, item := range n.list() {
		i := r.channel(item, d, references...)
		switch {
		case i < 0:
		case slices.Contains(out, i):
			item.fault(fmt.Sprintf("channel %q is there twice", item.text()), "name each probe once")
		default:
			out = append(out, i)
		}
	}
	if n.empty() {
		n.fault("the list of probes is empty", "name at least one channel")
	}
	return out
}

// channel reads the id of a channel of dimension d and of one of the references;
// -1 when there is none.
func (r *rig) channel(n node, d unit.Dimension, references ...calib.Reference) int {
	if !n.is() {
		return -1
	}
	text := n.text()
	i := r.index(text)
	if i < 0 {
		n.fault(fmt.Sprintf("there is no channel %q", text), nearest(text, r.ids()))
		return -1
	}
	r.used[i] = true
	spec := r.spec(i)
	switch {
	case !spec.Unit.Valid(): // a fault already
	case spec.Unit.Dimension != d:
		n.fault(fmt.Sprintf("channel %q measures %s; wanted is %s", text, spec.Unit.Dimension, d), "name another channel, or correct its unit")
	case len(references) > 0 && spec.Reference != calib.ReferenceNone && !slices.Contains(references, spec.Reference):
		n.fault(fmt.Sprintf("channel %q is %s; wanted is %s", text, referenceWord(spec.Reference), orWords(references)), "name another channel, or correct its reference")
	}
	return i
}

func referenceWord(r calib.Reference) string {
	return [...]string{"no pressure", "an absolute pressure", "a gauge pressure", "a differential pressure"}[r]
}

func orWords(rs []calib.Reference) string {
	var words []string
	for _, r := range rs {
		words = append(words, referenceWord(r))
	}
	return strings.Join(words, " or ")
}

// readEGT reads the bands of the exhaust temperature.
func (r *rig) readEGT(n node) {
	f := n.fields()
	list := f.get("bands")
	var places []node
	bands := &r.cfg.Compute.EGT.Bands
	for _, item := range list.items() {
		b := readBand(item)
		for i, other := range *bands {
			if other.Name == b.Name && b.Name != "" {
				item.fault(fmt.Sprintf("band %q is there twice", b.Name), "give each band its own name")
			}
			if overlap(other, b, places[i], item) {
				break
			}
		}
		if b.Kind == egt.KindStart && r.cfg.Compute.Stations.Speed < 0 {
			item.fault("a start band needs the rotor speed to know when idle is reached", "name a channel in stations.speed")
		}
		*bands = append(*bands, b)
		places = append(places, item)
	}
	f.done()
	harness := len(r.cfg.Compute.Stations.EGT) > 0
	switch {
	case len(*bands) > 0 && !harness:
		list.fault("EGT bands without an EGT harness", "name its channels in stations.egt")
	case len(*bands) == 0 && harness:
		f.fault("the EGT harness has no limit", "copy the bands of the engine's limits document into egt.bands")
	}
	if harness && r.cfg.Rig.LimitsVersion == "" {
		f.fault("the bands have no source", "state the limits document and its issue in engine.limits_version")
	}
}

func readBand(n node) egt.Band {
	f := n.fields()
	b := egt.Band{
		Name:      f.need("name", "the name that alarms and the ledger show").id(),
		Limit:     f.need("limit", "the indicated EGT, as 720 degC").quantity(unit.Temperature, 0, between(273.15, 1800, "0 degC and 1526.85 degC")),
		Allowance: f.need("allowance", "how long the limit may be exceeded, 0 s for not at all").duration(0),
		PerRun:    f.get("per_run").duration(0, positive),
		Deadband:  f.get("deadband").quantity(unit.TemperatureDifference, 5, between(0, 100, "0 K and 100 K")),
		Rearm:     f.get("rearm").duration(2 * second),
		Kind:      egt.KindRun,
	}
	if f.need("kind", "start holds until idle is first reached, run always").choice("run", "run", "start") == "start" {
		b.Kind = egt.KindStart
	}
	if b.PerRun > 0 && b.PerRun < b.Allowance {
		f.get("per_run").fault("a run is allowed less than one excursion", "per_run is the sum over a run: not below allowance")
	}
	f.done()
	return b
}

// overlap notes a band that can never act, because another one is exceeded
// before it whenever it would be.
func overlap(a, b egt.Band, atA, atB node) bool {
	low, high, at := a, b, atB
	if b.Limit < a.Limit {
		low, high, at = b, a, atA
	}
	covers := low.Kind == high.Kind || low.Kind == egt.KindRun
	switch {
	case low.Limit == 0: // a fault already
		return false
	case a.Limit == b.Limit && a.Kind == b.Kind:
		atB.fault(fmt.Sprintf("bands %q and %q have the same limit", a.Name, b.Name), "keep one, or correct the limit")
	case covers && low.Allowance <= high.Allowance && high.PerRun == 0:
		at.fault(
			fmt.Sprintf("band %q can never act: band %q has a lower limit and no longer allowance", high.Name, low.Name),
			"a higher limit has a shorter allowance; run bands hold during a start too",
		)
	default:
		return false
	}
	return true
}
