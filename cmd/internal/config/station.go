package config

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/rake"
	"throatwatch/monitor/uncertainty"
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
	s.WallStatic = r.probes(p7.get("wall_static"), unit.Pressure, total...)
	s.P7Flux = r.readWatch(p7, &s.P7Watch, unit.Pressure, len(s.P7))
	p7.done()

	t7 := f.need("t7", "the gas temperature at the nozzle entry, as {probes: [t7_1]} or {from_egt: {factor: 1.02, uncertainty: 2 %}}")
	r.readHarness(f.get("egt"))
	r.readBackPressure(f.need("back_pressure", "write {exit_plane: CHANNEL} or {barometer: CHANNEL, cell_depression: …, depression_uncertainty: …}"))

	inlet := f.get("inlet").fields()
	s.InletT = r.channel(inlet.get("temperature"), unit.Temperature)
	s.InletP = r.channel(inlet.get("pressure"), unit.Pressure, total...)
	inlet.done()

	humidity, dew := f.get("humidity"), f.get("dew_point")
	s.Humidity = r.channel(humidity, unit.Ratio)
	if dew.is() {
		s.Humidity, s.DewPoint = r.channel(dew, unit.Temperature), true
		if humidity.is() {
			dew.fault("the humidity of the air has two sources", "keep humidity with ambient_temperature, or dew_point")
		}
	}
	s.AmbientT = r.channel(f.get("ambient_temperature"), unit.Temperature)
	s.Speed = r.channel(f.get("speed"), unit.Frequency)
	s.FuelFlow = r.channel(f.get("fuel_flow"), unit.MassFlow)
	s.Bellmouth = r.channel(f.get("bellmouth"), unit.Pressure, calib.Differential)
	s.WaterFlow = r.channel(f.get("water_flow"), unit.MassFlow)
	r.readBleed(f.get("bleed_flow"), f.get("bleed_temperature"))
	s.Thrust = r.channel(f.get("thrust"), unit.Force)
	s.Reheat = r.probes(f.get("reheat"), unit.Ratio)
	if !math.IsNaN(r.elevation) {
		s.StationPressure = stationPressure(seaPressure, r.elevation)
	}
	r.readT7(t7) // it may need the others
	f.done()
}

// readBleed reads what is bled overboard: a channel, or a share of the air flow.
func (r *rig) readBleed(flow, temperature node) {
	s := &r.cfg.Compute.Stations
	s.BleedFlow = -1
	switch {
	case !flow.is():
	case flow.scalar():
		s.BleedFlow = r.channel(flow, unit.MassFlow)
	default:
		f := flow.fields()
		s.BleedShare = f.need("share", "of the air flow, as 1.5 %").share(0, positive, between(0, 0.5, "0 % and 50 %"))
		s.BleedShareU95 = f.need("uncertainty", "of the share at 95 %, in % of the air flow, as 0.3 %").share(0, positive, between(0, 0.2, "0 % and 20 %"))
		f.done()
	}
	if flow.is() && s.Bellmouth < 0 {
		flow.fault("a bleed without an air flow", "it is taken off the flow of the bellmouth: name its channel in stations.bellmouth")
	}
	s.BleedT = r.channel(temperature, unit.Temperature)
	if temperature.is() && !flow.is() {
		temperature.fault("the temperature of a bleed that is not there", "name its flow in stations.bleed_flow")
	}
}

// readWatch reads how the probes of a group are weighed and watched, and whether the
// flow at their places weighs them too.
func (r *rig) readWatch(f *fields, w *rake.Watch, d unit.Dimension, probes int) (flux bool) {
	n := f.get("weights")
	switch {
	case !n.is():
	case n.scalar():
		n.choice("mass_flux", "mass_flux")
		flux = true
	case n.mapping():
		m := n.fields()
		readWeights(m.need("mass_flux", "the areas that the probes stand for, as [0.9, 1.1]"), w, probes)
		m.done()
		flux = true
	default:
		readWeights(n, w, probes)
	}
	if s := &r.cfg.Compute.Stations; flux {
		if len(s.WallStatic) == 0 {
			n.fault("mass-flux weights without a static pressure", "name the wall taps of station 7 in stations.p7.wall_static")
		}
		if probes != len(s.P7) {
			n.fault(fmt.Sprintf("%d probes beside %d of p7", probes, len(s.P7)), "for mass-flux weights each probe stands at the place of one of p7.probes, in their order")
		}
	}
	w.Departure = f.get("departure").quantity(difference(d), 0, positive)
	w.Sampling = f.get("sampling").quantity(difference(d), 0, positive) / uncertainty.Coverage
	return flux
}

func readWeights(n node, w *rake.Watch, probes int) {
	for _, item := range n.items() {
		w.Weights = append(w.Weights, item.number(1, positive))
	}
	if n.is() && len(w.Weights) != probes {
		n.fault(fmt.Sprintf("%d weights for %d probes", len(w.Weights), probes), "one weight per probe, such as the area that it stands for")
	}
}

func (r *rig) readT7(n node) {
	f := n.fields()
	s := &r.cfg.Compute.Stations
	probes, least, factor, recovery, heat := f.get("probes"), f.get("at_least"), f.get("from_egt"), f.get("recovery"), f.get("heat_balance")
	s.T7 = r.probes(probes, unit.Temperature)
	s.MinT7 = atLeast(least, len(s.T7))
	s.T7Flux = r.readWatch(f, &s.T7Watch, unit.Temperature, len(s.T7))
	g := factor.fields()
	s.T7FromEGT = g.need("factor", "t7 in K = factor · indicated EGT in K").number(0, between(0.7, 1.4, "0.7 and 1.4"))
	s.T7FactorU95 = g.need("uncertainty", "at 95 %, as 2 %").share(0, positive, between(0, 0.2, "0 % and 20 %"))
	g.done()
	r.readRecovery(recovery, probes)
	r.readHeatBalance(heat)
	f.done()
	if f.is() && !f.has("probes") && !f.has("from_egt") && !f.has("heat_balance") {
		f.fault("t7 needs a source", "give probes, heat_balance or from_egt; where there are several, the first of them that is good counts")
	}
	if s.T7FromEGT > 0 && len(s.EGT) == 0 {
		factor.fault("t7 comes from the EGT, but stations.egt names no harness", "add egt: {probes: [CHANNEL, …]}")
	}
}

// readRecovery reads how thermocouples in the moving gas read.
func (r *rig) readRecovery(n, probes node) {
	if !n.is() {
		return
	}
	f := n.fields()
	c := &r.cfg.Compute.Recovery
	c.Factor = f.need("factor", "they read T + factor · (T0 − T), as 0.95").number(0, between(0.5, 1, "0.5 and 1"))
	c.Area = f.need("area", "of the passage at the probes, as 0.055 m2").quantity(unit.Area, 0, positive)
	c.U95 = f.need("uncertainty", "of the factor at 95 %, as 0.02").number(0, positive, between(0, 0.5, "0 and 0.5"))
	f.done()
	if !probes.is() {
		f.fault("a recovery without probes", "it belongs to t7.probes; indicated EGT is never corrected for it")
	}
	r.recovery = n
}

// readHeatBalance reads t7 by the heat of air and fuel.
func (r *rig) readHeatBalance(n node) {
	if !n.is() {
		return
	}
	f := n.fields()
	c, s := &r.cfg.Compute.Heat, &r.cfg.Compute.Stations
	c.Efficiency = f.need("efficiency", "of the combustion, as 99.5 %").share(0, positive, between(0.5, 1, "50 % and 100 %"))
	if value := r.cfg.Rig.Fuel.HeatingValue; value.Known && !f.has("heating_value") {
		c.HeatingValue = value.V
	} else {
		c.HeatingValue = f.need("heating_value", "of the fuel, lower, at 25 °C, as 43.1 MJ/kg; or state fuel.lower_heating_value").quantity(unit.SpecificEnergy, 0, positive, between(5e6, 130e6, "5 MJ/kg and 130 MJ/kg"))
	}
	c.U95 = f.need("uncertainty", "of efficiency times heating value at 95 %, with what the balance leaves out, as 1 %").share(0, positive, between(0, 0.2, "0 % and 20 %"))
	f.done()
	if s.FuelFlow < 0 || s.Bellmouth < 0 || s.InletT < 0 {
		f.fault("a heat balance needs air flow, fuel flow and inlet temperature", "name channels in stations.bellmouth, fuel_flow and inlet.temperature")
	}
	if (s.BleedFlow >= 0 || s.BleedShare > 0) && s.BleedT < 0 {
		f.fault("the bleed takes heat along that is not known", "name the temperature of the bleed air in stations.bleed_temperature")
	}
	if len(s.EGT) == 0 {
		f.fault("a heat balance holds with a flame only, and nothing shows one", "name the EGT harness in stations.egt")
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
	s.EGTExponent = f.get("referred_exponent").number(1, between(0, 2, "0 and 2"))
	s.MinEGT = atLeast(f.get("at_least"), len(s.EGT))
	s.EGTWatch.Departure = f.get("departure").quantity(unit.TemperatureDifference, 0, positive)
	f.done()
	if f.is() && f.has("probes") == f.has("parallel") {
		f.fault("the EGT harness needs one source", "give either probes: [CHANNEL, …], or parallel: CHANNEL for probes wired together")
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
	limits := &r.cfg.Compute.EGT.Limits
	spread, rise := f.get("spread"), f.get("rise_after_shutdown")
	limits.Spread = spread.quantity(unit.TemperatureDifference, 0, positive)
	harness := len(r.cfg.Compute.Stations.EGT) > 0
	if harness && r.cfg.Compute.Stations.Speed >= 0 {
		limits.Rise = rise.quantity(unit.TemperatureDifference, 80, positive)
	} else if rise.is() {
		rise.fault("without an EGT harness and rotor speed a shutdown is not seen", "name their channels in stations.egt and stations.speed")
	}
	if spread.is() && (!harness || r.cfg.Compute.Stations.EGTParallel) {
		spread.fault("there are no single probes to have a spread", "list them in stations.egt.probes")
	}
	f.done()
	if len(*bands) > egt.MaxBands {
		list.fault(fmt.Sprintf("%d EGT bands", len(*bands)), fmt.Sprintf("%d at most", egt.MaxBands))
	}
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
