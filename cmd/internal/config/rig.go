package config

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/ingest/decode"
	"throatwatch/monitor/align"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/unit"
	"throatwatch/rules/pipeline"
)

// second in ns.
const second = int64(1e9)

// rig is a rig file on its way to a configuration.
type rig struct {
	cfg          pipeline.Config
	doc          *document
	docs         []*document
	channels     []*channel
	elevation    float64 // m; NaN when not given
	recovery     node    // stations.t7.recovery
	fuel         *fields
	used         []bool // by channel: a station, a reference or a rule needs it
	defaultRules bool
	ruleFiles    []node
	limits       []rule // of the channels
	rules        []rule
	derived      []derived
	procedures   map[string]string // of the facility, by situation
	blank        node              // procedures:, where those that are missing are told
}

// readRig reads a rig file, all but its rules.
func readRig(f File) *rig {
	top := open(f)
	r := &rig{doc: top.doc, docs: []*document{top.doc}, blank: top}
	if !top.is() {
		return r
	}
	m := top.fields()
	r.readIdentity(m)
	r.readScan(m)
	r.readInputs(m.get("inputs"))
	r.readChannels(m.need("channels", "list the measured signals"))
	r.readSwaps(m.get("swaps"))
	r.readFuel(m.get("fuel"))
	r.readStations(m.need("stations", "say which channels make p7, t7 and the back pressure"))
	r.readGas(m.get("gas"))
	r.readNozzle(m.need("nozzle", "state at least throat_area"))
	r.readBellmouth(m.get("bellmouth"))
	r.readPhase(m.get("phase"))
	r.readChoke(m.get("choke"))
	r.readSteady(m.get("steady"))
	r.readEGT(m.get("egt"))
	r.readStarter(m.get("starter"))
	r.readCoolDown(m.get("cooldown"))
	r.readChecks(m.get("checks"))
	r.readRun(m.get("run"))
	r.readChange(m)
	r.readProcedures(m)
	r.readDerive(m.get("derive"))
	r.readRuleNames(m)
	m.done()
	return r
}

// faults gives what was found in all files.
func (r *rig) faults() []Fault {
	var out []Fault
	for _, d := range r.docs {
		out = append(out, d.faults...)
	}
	return out
}

func (r *rig) readIdentity(m *fields) {
	f := m.need("rig", "write rig: {id: NAME}").fields()
	info := &r.cfg.Rig
	info.ID = f.need("id", "the id becomes part of the topics rigs/ID/…").id()
	info.Title = f.get("title").label(info.ID)
	info.TimeZone = f.get("time_zone").zoneName()
	r.elevation = f.get("elevation").quantity(unit.Length, math.NaN(), between(-500, 6000, "-500 m and 6000 m"))
	f.done()

	f = m.get("engine").fields()
	info.EngineModel = f.get("model").label("")
	info.EngineSerial = f.get("serial").label("")
	info.EngineBuild = f.get("build").label("")
	info.LimitsVersion = f.get("limits_version").label("")
	f.done()
}

// readChange reads who changed limits and rules last, and who approved it.
func (r *rig) readChange(m *fields) {
	n := m.get("change")
	c := &r.cfg.Change
	f := n.fields()
	if n.is() {
		c.Engineer = f.need("engineer", "name who made the change").label("")
	}
	approver := f.get("approver")
	c.Approver = approver.label("")
	c.Date = f.get("date").date()
	c.Note = f.get("note").label("")
	f.done()
	switch {
	case c.Approver == "":
		n.warn("limits and rules are not approved: every page and report says so", "write change: {engineer: …, approver: …, date: …, note: …}")
	case strings.EqualFold(c.Engineer, c.Approver):
		approver.fault("engineer and approver are the same person", "a change is approved by another person than who made it")
	}
}

func (r *rig) readScan(m *fields) {
	f := m.get("scan").fields()
	a := &r.cfg.Align
	a.Period = f.get("rate").scanPeriod(second / 20)
	a.Lateness = f.get("lateness").duration(120e6, positive, between(0, 10, "1 ms and 10 s"))
	a.MaxFuture = f.get("clock_ahead").duration(2*second, positive)
	a.Backlog = f.get("broker_redelivery").duration(65 * second)
	a.MaxPast = f.get("clock_behind").duration(5*second, positive)
	f.done()
}

// scanPeriod reads a rate in scans per second and gives the time between scans.
// Scans lie on whole fractions of a second, so that each second has the same.
func (n node) scanPeriod(fallback int64) int64 {
	text := strings.TrimSpace(n.text())
	if !n.is() || !n.plain(text) {
		return fallback
	}
	if number, ok := strings.CutSuffix(text, "/s"); ok {
		text = strings.TrimSuffix(strings.TrimSpace(number), " 1") + " Hz"
	}
	rate, _, err := unit.ParseValueAs(text, unit.Frequency)
	if err != nil {
		n.unitFault(err)
		return fallback
	}
	if whole := int64(rate); rate != float64(whole) || whole < 1 || whole > 100 || second%whole != 0 {
		n.fault(fmt.Sprintf("%s is not a scan rate", n.text()), "use 1, 2, 4, 5, 8, 10, 16, 20, 25, 32, 40, 50, 64, 80 or 100 per second")
		return fallback
	}
	return second / int64(rate)
}

// formatWords are the words for the formats of an input.
func formatWords() []string {
	return []string{
		decode.SenMLJSON.String(), decode.SenMLCBOR.String(), decode.Lines.String(), decode.Value.String(),
	}
}

// format reads the format of an input.
func (n node) format() decode.Format {
	words := formatWords()
	word := n.choice(words[0], words...)
	return decode.SenMLJSON + decode.Format(slices.Index(words, word))
}

func (r *rig) readInputs(n node) {
	if !n.is() {
		base := "rigs/" + r.cfg.Rig.ID + "/"
		r.cfg.Align.Inputs = []align.Input{
			{Filter: base + "senml", Format: decode.SenMLJSON},
			{Filter: base + "senml-cbor", Format: decode.SenMLCBOR},
			{Filter: base + "lines", Format: decode.Lines},
			{Filter: base + "channels/+", Format: decode.Value},
		}
		return
	}
	for _, item := range n.items() {
		f := item.fields()
		topic := f.need("topic", "name a topic or a filter with + or #")
		in := align.Input{
			Filter: topic.topic(true),
			Format: f.need("format", "say how messages there are written: "+strings.Join(formatWords(), ", ")).format(),
		}
		f.done()
		if slices.ContainsFunc(r.cfg.Align.Inputs, func(other align.Input) bool { return other.Filter == in.Filter }) && in.Filter != "" {
			topic.fault(fmt.Sprintf("topic %q is there twice", in.Filter), "one topic has one format")
		}
		r.cfg.Align.Inputs = append(r.cfg.Align.Inputs, in)
	}
	if n.empty() {
		n.fault("the list of inputs is empty", "name at least one topic, or leave inputs away for rigs/ID/…")
	}
}

func (r *rig) readGas(n node) {
	f := n.fields()
	model := f.get("model").choice("thermally-perfect", "thermally-perfect", "perfect")
	gamma, gasConstant := f.get("gamma"), f.get("gas_constant")
	switch {
	case model == "perfect":
		gamma = f.need("gamma", "a perfect gas has one ratio of specific heats, such as 1.33")
		gasConstant = f.need("gas_constant", "write it as 287.05 J/(kg K)")
		r.cfg.Compute.Gamma = gamma.number(0, between(1.05, 1.7, "1.05 and 1.7"))
		r.cfg.Compute.GasR = gasConstant.in("J/(kg K)", 0, between(100, 1000, "100 and 1000 J/(kg K)"))
	case gamma.is() || gasConstant.is():
		f.fault("gamma and gas_constant belong to a perfect gas", "write model: perfect, or leave them away")
	}
	fuel := gas.Kerosene()
	if n := f.get("fuel"); n.is() {
		g := n.fields()
		fuel.Carbon = g.need("carbon", "the n of CnHm").number(12, between(0, 100, "0 and 100"))
		fuel.Hydrogen = g.need("hydrogen", "the m of CnHm").number(23, between(0, 200, "0 and 200"))
		if fuel.Carbon == 0 && fuel.Hydrogen == 0 {
			g.fault("a fuel of nothing", "kerosene is {carbon: 12, hydrogen: 23}")
		}
		g.done()
	}
	r.cfg.Compute.Fuel = fuel
	r.fitFuel(f.get("fuel").is())
	f.done()
}

// readSteady reads what is asked of a steady engine.
func (r *rig) readSteady(n node) {
	f := n.fields()
	q := &r.cfg.Compute.Steady
	window := f.get("window").duration(60*second, between(8, 600, "8 s and 600 s"))
	// Bins shorter than the noise is correlated cost time and say nothing.
	width := max(window/120, second/2)
	q.Window = steady.Window{Width: width, Bins: int(window / width)}
	q.Dwell = f.get("dwell").duration(10 * second)
	const minute = 60
	q.Pressure = f.get("pressure_slope").in("%/min", 0.25, positive) / 100 / minute
	q.Temperature = f.get("temperature_slope").in("K/min", 6, positive) / minute
	q.Speed = f.get("speed_slope").in("%/min", 0.25, positive) / 100 / minute
	f.done()
}

// readStarter reads for how long the starter may crank.
func (r *rig) readStarter(n node) {
	f := n.fields()
	l := &r.cfg.Compute.EGT.Limits
	l.StarterOnce = f.get("at_once").duration(0, positive)
	l.StarterHour = f.get("per_hour").duration(0, positive)
	l.StarterRuns = f.get("starts_per_hour").integer(0, 1, 60)
	f.done()
	if n.is() && r.cfg.Compute.Stations.Speed < 0 {
		f.fault("cranking is told by the rotor speed", "name a channel in stations.speed")
	}
}

func (r *rig) readBellmouth(n node) {
	station := r.cfg.Compute.Stations.Bellmouth
	if !n.is() {
		if station >= 0 {
			r.channels[station].fault("stations.bellmouth names this channel, but the rig has no bellmouth", "add bellmouth: {area: …, coefficient: …, uncertainty: …}")
		}
		return
	}
	f := n.fields()
	b := &r.cfg.Compute.Bellmouth
	b.Area = f.need("area", "the throat area of the bellmouth, as 0.06 m2").quantity(unit.Area, 0, positive)
	b.Coefficient = f.get("coefficient").number(1, between(0.8, 1.1, "0.8 and 1.1"))
	b.U95 = f.need("uncertainty", "of area times coefficient at 95 %, as 0.4 %").share(0, notNegative, between(0, 0.2, "0 % and 20 %"))
	f.done()
	if station < 0 {
		f.fault("a bellmouth without a channel", "name its differential pressure in stations.bellmouth")
	}
}

// spec gives the calibration of a channel.
func (r *rig) spec(i int) *calib.Spec { return &r.cfg.Compute.Channels[i].Spec }
