package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/config"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/nozzle"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const (
	// checkClosing ends every check: it looked at files, at nothing else.
	checkClosing = "Checked the files only. Not a clearance to start."
	// checkWidth is the width of a terminal that tables are made for.
	checkWidth = 120
)

// checkCommand reads a rig file with its rule files and prints every fault, or
// what the files say as tables. It gives 0 without faults, 1 with, 2 when called
// wrongly.
func checkCommand(args []string, stdout, stderr io.Writer) int {
	flags := pflag.NewFlagSet("check", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	flags.Usage = func() {
		say(stderr, "throatwatch check RIG.yaml [--card CARD.yaml] [--json | --default-rules]\n\nPrints every fault of a rig file and its rule files at once, or what they say.\n"+checkClosing+"\n\n"+flags.FlagUsages())
	}
	asJSON := flags.Bool("json", false, "print one JSON object, values in SI")
	on := flags.String("on", time.Now().Format(time.DateOnly), "the day on which calibrations must be in date")
	cards := flags.StringArray("card", nil, "a test card to be checked for this rig too; may be given more than once")
	asRules := flags.Bool("default-rules", false, "print the default rules of the rig, to begin a rule file from")
	if err := flags.Parse(args); err != nil {
		if errors.Is(err, pflag.ErrHelp) {
			return 0
		}
		say(stderr, fmt.Sprintf("check: %v\n", err))
		return 2
	}
	if flags.NArg() != 1 {
		flags.Usage()
		return 2
	}
	bundle, cfg, faults := config.Load(flags.Arg(0))
	day, err := time.ParseInLocation(time.DateOnly, *on, cfg.Rig.Zone())
	if err != nil {
		say(stderr, fmt.Sprintf("check: --on %q: write it as 2026-03-31\n", *on))
		return 2
	}
	bundle.Warnings = append(bundle.Warnings, config.Expired(flags.Arg(0), &cfg, day.UnixNano())...)
	if len(faults) == 0 { // a card is of a rig
		for _, name := range *cards {
			_, _, more := config.LoadCard(name, &cfg)
			faults = append(faults, more...)
		}
	}
	var out strings.Builder
	switch {
	case *asRules && len(faults) == 0:
		out.WriteString(bundle.DefaultRules())
	case *asJSON:
		encoder := json.NewEncoder(&out)
		encoder.SetEscapeHTML(false)
		encoder.SetIndent("", "  ")
		if err := encoder.Encode(newCheckReport(bundle, &cfg, faults)); err != nil {
			say(stderr, fmt.Sprintf("check: %v\n", err))
			return 1
		}
	case len(faults) > 0:
		printFaults(&out, faults)
	default:
		printRig(&out, bundle, &cfg)
	}
	if _, err := io.WriteString(stdout, out.String()); err != nil {
		say(stderr, fmt.Sprintf("check: %v\n", err))
		return 1
	}
	if len(faults) > 0 {
		return 1
	}
	return 0
}

// say writes a message; when even that fails there is nobody to tell.
func say(w io.Writer, text string) { _, _ = io.WriteString(w, text) }

// checkReport is what --json prints; values in SI, times in seconds.
type checkReport struct {
	Faults    []config.Fault    `json:"faults"`
	Warnings  []config.Fault    `json:"warnings"` // odd and yet usable
	Files     []string          `json:"files"`
	Hash      string            `json:"hash,omitempty"`
	Rig       *pipeline.RigInfo `json:"rig,omitempty"`
	ScanRate  float64           `json:"scan_rate,omitempty"`
	Channels  []checkChannel    `json:"channels,omitempty"`
	Bands     []checkBand       `json:"egt_bands,omitempty"`
	Derived   []checkDerived    `json:"derived,omitempty"`
	Rules     []checkRule       `json:"rules,omitempty"`
	Notes     []string          `json:"notes,omitempty"` // what will not be known for want of an entry
	Clearance string            `json:"clearance"`
}

type checkChannel struct {
	ID           string   `json:"id"`
	Title        string   `json:"title"`
	Unit         string   `json:"unit"`    // of the rig file
	SI           string   `json:"si_unit"` // of low, high and u95
	Reference    string   `json:"reference"`
	Low          float64  `json:"low"`
	High         float64  `json:"high"`
	U95          *float64 `json:"u95"` // at the end of the range; null when not stated
	Hold         float64  `json:"hold_s"`
	Topic        string   `json:"topic"` // "" = any input
	Name         string   `json:"name"`
	RecordedOnly bool     `json:"recorded_only"`

	Sensor      string `json:"sensor"` // serial number, "" = not on file
	Certificate string `json:"certificate"`
	Calibrated  string `json:"calibrated"`
	Due         string `json:"due"`
	Waiver      string `json:"waiver"` // who answers for it, and why
}

type checkBand struct {
	Name      string  `json:"name"`
	Holds     string  `json:"holds"`
	Limit     float64 `json:"limit_k"`
	Allowance float64 `json:"allowance_s"`
	PerRun    float64 `json:"per_run_s"` // 0 = not limited
	Deadband  float64 `json:"deadband_k"`
	Rearm     float64 `json:"rearm_s"`
}

type checkDerived struct {
	Name string  `json:"name"`
	Kind string  `json:"kind"`
	Of   string  `json:"of"`
	Over float64 `json:"over_s"` // 0 = no window
}

type checkRule struct {
	Name     string  `json:"name"`
	Title    string  `json:"title"`
	Priority string  `json:"priority"`
	When     string  `json:"when"`
	OnDelay  float64 `json:"on_delay_s"`
	Latching bool    `json:"latching"`
	Caution  string  `json:"caution"`
	Response string  `json:"response"`
}

func newCheckReport(bundle config.Bundle, cfg *pipeline.Config, faults []config.Fault) checkReport {
	out := checkReport{Faults: faults, Warnings: append([]config.Fault{}, bundle.Warnings...), Clearance: checkClosing, Files: []string{}}
	for _, f := range bundle.Files {
		out.Files = append(out.Files, f.Name)
	}
	if len(faults) > 0 {
		return out
	}
	out.Faults = []config.Fault{}
	out.Hash, out.Rig, out.ScanRate = cfg.Hash, &cfg.Rig, 1e9/float64(cfg.Align.Period)
	for i := range cfg.Compute.Channels {
		c, in := &cfg.Compute.Channels[i], &cfg.Align.Channels[i]
		one := checkChannel{
			ID: c.ID, Title: c.Title, Unit: c.Unit.Name, SI: c.Unit.Dimension.SI().Name, Reference: against(cfg, i),
			Low: c.Low, High: c.High, Hold: seconds(in.Hold), Topic: in.Topic, Name: in.Name, RecordedOnly: c.RecordedOnly,
			Sensor: c.Record.Serial, Certificate: c.Record.Certificate, Calibrated: c.Record.Calibrated, Due: c.Record.Due, Waiver: waived(&c.Record),
		}
		if u := endU95(&c.Spec); c.Uncertainty.Stated && !math.IsNaN(u) {
			one.U95 = &u
		}
		out.Channels = append(out.Channels, one)
	}
	for i := range cfg.Compute.EGT.Bands {
		b := &cfg.Compute.EGT.Bands[i]
		out.Bands = append(out.Bands, checkBand{b.Name, holds(b), b.Limit, seconds(b.Allowance), seconds(b.PerRun), b.Deadband, seconds(b.Rearm)})
	}
	for i := range cfg.Derived {
		d := &cfg.Derived[i]
		out.Derived = append(out.Derived, checkDerived{d.Name, d.Kind.String(), d.Of, seconds(d.Over)})
	}
	for i := range cfg.Rules {
		r := &cfg.Rules[i]
		out.Rules = append(out.Rules, checkRule{r.Name, r.Title, priorityName(r.Priority), r.When, seconds(r.OnDelay), r.Latching, r.Caution, r.Response})
	}
	out.Notes = checkNotes(cfg)
	return out
}

func seconds(ns int64) float64 { return float64(ns) / 1e9 }

func holds(b *egt.Band) string {
	if b.Kind == egt.KindStart {
		return "until idle"
	}
	return "always"
}

// printFaults prints every fault, then how many there are.
func printFaults(w *strings.Builder, faults []config.Fault) {
	listFaults(w, faults)
	noun := "faults"
	if len(faults) == 1 {
		noun = "fault"
	}
	fmt.Fprintf(w, "%d %s\n%s\n", len(faults), noun, checkClosing)
}

// listFaults prints each fault with its hint below.
func listFaults(w *strings.Builder, faults []config.Fault) {
	for _, f := range faults {
		hint := f.Hint
		f.Hint = ""
		fmt.Fprintln(w, f)
		if hint != "" {
			fmt.Fprintln(w, wrap("      hint: ", hint))
		}
	}
}

// wrap breaks a text into lines of the terminal, all but the first indented like
// it.
func wrap(first, text string) string {
	width := checkWidth - len([]rune(first))
	indent := strings.Repeat(" ", len([]rune(first)))
	var out strings.Builder
	out.WriteString(first)
	column := 0
	for word := range strings.FieldsSeq(text) {
		n := len([]rune(word))
		switch {
		case column == 0:
		case column+1+n > width:
			out.WriteString("\n" + indent)
			column = 0
		default:
			out.WriteByte(' ')
			column++
		}
		out.WriteString(word)
		column += n
	}
	return out.String()
}

func printRig(w *strings.Builder, bundle config.Bundle, cfg *pipeline.Config) {
	info := &cfg.Rig
	fmt.Fprintf(w, "Rig     %s\n", phrase(info.ID, info.Title))
	fmt.Fprintf(w, "Engine  %s\n", phrase(info.EngineModel, named("serial ", info.EngineSerial), named("build ", info.EngineBuild), named("limits ", info.LimitsVersion)))
	printNozzle(w, cfg)
	fmt.Fprintf(w, "Fuel    %s\n", fuel(&info.Fuel))
	runs := "not numbered"
	if cfg.Run.Series != "" {
		runs = "numbered " + strings.Replace(cfg.Run.Series, pipeline.RunPlace, strings.Repeat("0", cfg.Run.Width-1)+"1", 1) + " and on"
	}
	fmt.Fprintf(w, "Runs    %s\n", phrase(runs, named("test ", info.Test), info.Purpose))
	fmt.Fprintf(w, "Scans   %g per second; a sample is waited for %s; a run ends after %s off\n",
		1e9/float64(cfg.Align.Period), span(cfg.Align.Lateness), span(cfg.Run.EndAfter))
	for i, in := range cfg.Align.Inputs {
		head := "        "
		if i == 0 {
			head = "Inputs  "
		}
		fmt.Fprintf(w, "%s%s (%s)\n", head, in.Filter, in.Format)
	}
	printChannels(w, cfg)
	printSensors(w, cfg)
	printStations(w, cfg)
	printBands(w, cfg)
	printDerived(w, cfg)
	printRules(w, cfg)
	if len(bundle.Warnings) > 0 {
		fmt.Fprintf(w, "\nWarnings\n")
		listFaults(w, bundle.Warnings)
	}
	if notes := checkNotes(cfg); len(notes) > 0 {
		fmt.Fprintf(w, "\nNotes\n")
		for _, n := range notes {
			fmt.Fprintln(w, wrap("  - ", n))
		}
	}
	fmt.Fprint(w, "\nFiles  ")
	for _, f := range bundle.Files {
		fmt.Fprintf(w, " %s", f.Name)
	}
	fmt.Fprintf(w, "\nHash    %s\n0 faults\n%s\n", cfg.Hash, checkClosing)
}

// checkNotes says what will not be known during a run for want of an entry. None
// of it is a fault.
func checkNotes(cfg *pipeline.Config) []string {
	var notes []string
	note := func(condition bool, text string) {
		if condition {
			notes = append(notes, text)
		}
	}
	z, s := &cfg.Compute.Nozzle, &cfg.Compute.Stations
	var unstated []string
	for _, i := range slices.Concat(s.P7, s.T7, []int{s.ExitPlane, s.Barometer}) {
		if i >= 0 && !cfg.Compute.Channels[i].Uncertainty.Stated {
			unstated = append(unstated, cfg.Compute.Channels[i].ID)
		}
	}
	note(len(unstated) > 0, "The choke margin has no honest U95: no uncertainty is stated for "+strings.Join(unstated, ", ")+".")
	for i := range cfg.Compute.Channels {
		c := &cfg.Compute.Channels[i]
		wire := c.Uncertainty.Thermocouple
		if low, high := wire.Range(); wire.Defined() && (c.Low < low || c.High > high) {
			note(true, fmt.Sprintf("%s has no U95 outside %s to %s °C, for which a thermocouple of type %c, class %d has a tolerance.", c.ID, number(low-273.15), number(high-273.15), wire.Type, wire.Class))
		}
	}
	note(z.ChokeNPRU95 == 0, "The probability of choked flow stays unknown: state nozzle.model_uncertainty, or nozzle.choke_npr from a calibration.")
	note(len(z.Discharge) == 0, "Flow and thrust are those of an ideal nozzle: no discharge coefficient is stated.")
	note(z.AreaU95 == 0, "U95 of flow and thrust leaves the throat area out: state nozzle.area_uncertainty.")
	note(s.ExitPlane < 0, "Back pressure from barometer: no exit-plane pressure is measured.")
	note(s.FuelFlow < 0, "The gas is taken for air: no fuel flow is measured.")
	note(s.Humidity < 0, "The air is taken for dry: no humidity is measured.")
	note(len(s.T7) == 0, "The nozzle gas temperature is indicated EGT times a factor, not a rake.")
	note(len(cfg.Compute.EGT.Bands) == 0, "No exhaust temperature is watched: the rig has no EGT bands.")
	note(s.Bellmouth >= 0 && s.FuelFlow >= 0 && s.BleedFlow < 0 && s.BleedShare == 0, "All air of the bellmouth is taken to pass the nozzle: no bleed is stated.")
	note(s.Bellmouth < 0, "There is no independent flow: no bellmouth is measured.")
	note(z.ArmedAboveRPM == 0, "Loss of choke raises no alarm: choke.armed_above is not stated.")
	return notes
}

// phrase joins what is there.
func phrase(parts ...string) string {
	var out []string
	for _, p := range parts {
		if p != "" {
			out = append(out, p)
		}
	}
	if len(out) == 0 {
		return "not stated"
	}
	return strings.Join(out, ", ")
}

// fuel sums up what is stated of the batch.
func fuel(f *pipeline.Fuel) string {
	value := func(v rules.Reading, before string, scale float64, after string) string {
		if !v.Known {
			return ""
		}
		return before + number(v.V/scale) + after
	}
	return phrase(named("batch ", f.Batch), value(f.Density, "", 1, " kg/m³"), value(f.HeatingValue, "lower heating value ", 1e6, " MJ/kg"), value(f.HydrogenToCarbon, "H/C ", 1, ""))
}

func named(name, value string) string {
	if value == "" {
		return ""
	}
	return name + value
}

func printNozzle(w *strings.Builder, cfg *pipeline.Config) {
	z := &cfg.Compute.Nozzle
	area := fmt.Sprintf("throat %s mm² hot", number(z.ThroatArea*1e6))
	if z.AreaBasis == nozzle.AreaCold {
		area = fmt.Sprintf("throat %s mm² at %s °C, grows %s/K", number(z.ThroatArea*1e6), number(z.ReferenceTemperature-273.15), number(z.ExpansionCoefficient))
	}
	fmt.Fprintf(w, "Nozzle  %s\n", phrase(z.Kind.String(), named("serial ", cfg.Rig.NozzleSerial), named("measured ", cfg.Rig.NozzleMeasured), area+", "+stated(z.AreaU95)))
	fmt.Fprintf(w, "        Cd %s, CT %s (%s)\n        NPR of tables at station %d, duct loss %s %% of p7\n",
		coefficient(z.Discharge, z.DischargeU95), coefficient(z.Thrust, z.ThrustU95), z.Basis, z.CoefficientStation, number(100*z.DuctLoss))
	choke := "one-dimensional critical NPR"
	if z.ChokeNPR > 0 {
		choke = "calibrated, " + number(z.ChokeNPR)
	}
	armed := "never by speed"
	if z.ArmedAboveRPM > 0 {
		armed = fmt.Sprintf("above %s rpm, %s rpm hysteresis", number(z.ArmedAboveRPM), number(z.ArmedHysterRPM))
	}
	fmt.Fprintf(w, "        choke NPR %s, %s; no flow below NPR %s\n", choke, stated(z.ChokeNPRU95), number(1+z.ResolutionFloor))
	fmt.Fprintf(w, "        choke expected %s; state holds within %s %% of margin\n", armed, number(z.Hysteresis))
}

// coefficient sums a table of coefficients up.
func coefficient(points []nozzle.Point, u95 float64) string {
	switch len(points) {
	case 0:
		return "1 (ideal)"
	case 1:
		return number(points[0].Value) + " " + stated(u95)
	}
	low, high := points[0].Value, points[0].Value
	for _, p := range points {
		low, high = min(low, p.Value), max(high, p.Value)
	}
	return fmt.Sprintf("%s to %s %s", number(low), number(high), stated(u95))
}

// stated prints a relative uncertainty, or that there is none.
func stated(u95 float64) string {
	if u95 == 0 {
		return "U95 not stated"
	}
	return "± " + number(100*u95) + " %"
}

func printChannels(w *strings.Builder, cfg *pipeline.Config) {
	t := newTable(w, fmt.Sprintf("%d channels (U95 at the end of the range)", len(cfg.Compute.Channels)),
		"channel", "unit", "against", "range", "U95", "hold", "topic", "")
	for i := range cfg.Compute.Channels {
		c, in := &cfg.Compute.Channels[i], &cfg.Align.Channels[i]
		topic := in.Topic
		if topic == "" {
			topic = "any input"
		}
		if in.Name != c.ID {
			topic += " as " + in.Name
		}
		note := ""
		if c.RecordedOnly {
			note = "recorded only"
		}
		t.row(c.ID, c.Unit.Name, against(cfg, i), fmt.Sprintf("%s … %s", number(c.Unit.FromSI(c.Low)), number(c.Unit.FromSI(c.High))),
			channelU95(&c.Spec), span(in.Hold), topic, note)
	}
	t.flush()
}

// waived says who answers for an expired sensor and why, "" = nobody.
func waived(r *calib.Record) string {
	if r.Waiver.Who == "" {
		return ""
	}
	return r.Waiver.Who + ": " + r.Waiver.Why + named(", until ", r.Waiver.Until)
}

// printSensors prints what is on file of the sensors.
func printSensors(w *strings.Builder, cfg *pipeline.Config) {
	var t textTable
	row := func(id string, r *calib.Record, from int64) {
		if r.Serial == "" {
			return
		}
		if t.Writer == nil {
			t = newTable(w, "Sensors on file", "channel", "since", "sensor", "certificate", "calibrated", "due", "waiver")
		}
		since := "–"
		if from != 0 {
			since = stamp(rules.Time(from), cfg.Rig.Zone())
		}
		t.row(id, since, r.Serial, phrase(r.Certificate), phrase(r.Calibrated), phrase(r.Due), r.Waiver.Who+named(", until ", r.Waiver.Until))
	}
	for i := range cfg.Compute.Channels {
		c := &cfg.Compute.Channels[i]
		row(c.ID, &c.Record, 0)
		for k := range c.Swaps {
			row(c.ID, &c.Swaps[k].Record, c.Swaps[k].From)
		}
	}
	if t.Writer != nil {
		t.flush()
	}
}

func against(cfg *pipeline.Config, i int) string {
	c := &cfg.Compute.Channels[i]
	port := ""
	if c.Port >= 0 {
		port = " " + cfg.Compute.Channels[c.Port].ID
	}
	switch c.Reference {
	case calib.Absolute:
		return "absolute"
	case calib.Gauge:
		return "gauge" + port
	case calib.Differential:
		return "differential" + port
	case calib.ReferenceNone:
	}
	return "–"
}

// channelU95 prints the 95 % uncertainty of a channel.
func channelU95(c *calib.Spec) string {
	if !c.Uncertainty.Stated {
		return "not stated"
	}
	u := endU95(c)
	if math.IsNaN(u) {
		return "none there"
	}
	return "± " + strconv.FormatFloat(u/c.Unit.Scale, 'g', 2, 64)
}

// endU95 gives the 95 % uncertainty of a single reading at the end of the range
// that is larger in amount, SI; NaN where its thermocouple has no tolerance there.
func endU95(c *calib.Spec) float64 {
	u := c.Uncertainty.U95(max(math.Abs(c.Low), math.Abs(c.High)), c.Low, c.High)
	return math.Hypot(u, c.Uncertainty.Random)
}

func printStations(w *strings.Builder, cfg *pipeline.Config) {
	s := &cfg.Compute.Stations
	t := newTable(w, "Stations", "station", "from")
	ids := func(channels []int) string {
		var out []string
		for _, i := range channels {
			out = append(out, cfg.Compute.Channels[i].ID)
		}
		return strings.Join(out, " ")
	}
	rake := func(channels []int, least int) string {
		return fmt.Sprintf("%s (at least %d of %d)", ids(channels), least, len(channels))
	}
	t.row("p7", rake(s.P7, s.MinP7))
	if len(s.T7) > 0 {
		t.row("t7", rake(s.T7, s.MinT7))
	} else {
		t.row("t7", fmt.Sprintf("%s · indicated EGT %s", number(s.T7FromEGT), stated(s.T7FactorU95)))
	}
	if len(s.EGT) > 0 {
		kind := ""
		if s.EGTParallel {
			kind = ", wired in parallel: no spread"
		}
		t.row("indicated EGT", fmt.Sprintf("%s%s, trim %s K", rake(s.EGT, s.MinEGT), kind, number(s.EGTTrim)))
	}
	if s.ExitPlane >= 0 {
		t.row("back pressure", ids([]int{s.ExitPlane}))
	} else {
		t.row("back pressure", fmt.Sprintf("%s less %s Pa ± %s Pa", ids([]int{s.Barometer}), number(s.Depression), number(s.DepressionU)))
	}
	for _, one := range []struct {
		name    string
		channel int
	}{
		{"barometer", s.Barometer},
		{"inlet temperature", s.InletT},
		{"inlet pressure", s.InletP},
		{"humidity", s.Humidity},
		{"ambient temperature", s.AmbientT},
		{"speed", s.Speed},
		{"fuel flow", s.FuelFlow},
		{"bellmouth", s.Bellmouth},
		{"thrust", s.Thrust},
		{"water flow", s.WaterFlow},
		{"bleed flow", s.BleedFlow},
		{"bleed temperature", s.BleedT},
	} {
		if one.channel >= 0 {
			t.row(one.name, ids([]int{one.channel}))
		}
	}
	if s.BleedShare > 0 {
		t.row("bleed flow", fmt.Sprintf("%s %% ± %s %% of the air flow", number(100*s.BleedShare), number(100*s.BleedShareU95)))
	}
	t.flush()
}

func printBands(w *strings.Builder, cfg *pipeline.Config) {
	bands := cfg.Compute.EGT.Bands
	if len(bands) == 0 {
		return
	}
	t := newTable(w, "EGT bands, from "+cfg.Rig.LimitsVersion, "band", "holds", "limit", "allowance", "per run", "over until below", "for")
	for i := range bands {
		b := &bands[i]
		run := "–"
		if b.PerRun > 0 {
			run = span(b.PerRun)
		}
		allowance := span(b.Allowance)
		if b.Allowance == 0 {
			allowance = "none"
		}
		t.row(b.Name, holds(b), number(b.Limit-273.15)+" °C", allowance, run, number(b.Limit-b.Deadband-273.15)+" °C", span(b.Rearm))
	}
	t.flush()
}

// printDerived prints what rules read beside the standard names.
func printDerived(w *strings.Builder, cfg *pipeline.Config) {
	if len(cfg.Derived) == 0 {
		return
	}
	t := newTable(w, "Derived names", "name", "is", "over", "of")
	for i := range cfg.Derived {
		d := &cfg.Derived[i]
		over := "–"
		if d.Over > 0 {
			over = span(d.Over)
		}
		t.row(d.Name, d.Kind.String(), over, strings.Join(strings.Fields(d.Of), " "))
	}
	t.flush()
}

// printRules prints the rules, the most urgent first.
func printRules(w *strings.Builder, cfg *pipeline.Config) {
	fmt.Fprintf(w, "\n%d rules\n", len(cfg.Rules))
	for p := rules.Warning; p >= rules.Note; p-- {
		for i := range cfg.Rules {
			r := &cfg.Rules[i]
			if r.Priority != p {
				continue
			}
			times := "at once"
			if r.OnDelay > 0 {
				times = "after " + span(r.OnDelay)
			}
			if r.Latching {
				times += ", latching"
			}
			fmt.Fprintf(w, "  %-8s  %s (%s, %s)\n", strings.ToUpper(priorityName(p)), r.Title, r.Name, times)
			fmt.Fprintln(w, wrap("            when     ", r.When))
			if r.Caution != "" {
				fmt.Fprintln(w, wrap("            caution  ", r.Caution))
			}
			if r.Response != "" {
				fmt.Fprintln(w, wrap("            respond  ", r.Response))
			}
		}
	}
}

// priorityName gives the word that rule files use.
func priorityName(p rules.Priority) string {
	return [...]string{"", "note", "advisory", "caution", "warning"}[p]
}

// textTable prints rows in columns under a title.
type textTable struct {
	*tabwriter.Writer
}

func newTable(w *strings.Builder, title string, heads ...string) textTable {
	fmt.Fprintf(w, "\n%s\n", title)
	t := textTable{tabwriter.NewWriter(w, 0, 8, 2, ' ', 0)}
	t.row(heads...)
	return t
}

func (t textTable) row(cells ...string) {
	say(t, strings.TrimRight("  "+strings.Join(cells, "\t"), "\t ")+"\n")
}

// flush cannot fail: a builder takes everything.
func (t textTable) flush() { _ = t.Flush() }

// number prints a value as a person would write it.
func number(v float64) string {
	return strconv.FormatFloat(math.Round(v*1e9)/1e9, 'g', 7, 64)
}

// span prints a time in ns.
func span(ns int64) string {
	if ns != 0 && ns < 1e9 {
		return number(float64(ns)/1e6) + " ms"
	}
	return number(float64(ns)/1e9) + " s"
}
