package report

import (
	"cmp"
	"fmt"
	"html/template"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"unicode"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/figures"
	"throatwatch/rules/pipeline"
)

const (
	mostTimeline = 400
	mostOutRows  = 200 // before those alike are put together
	mostDetails  = 20  // points whose quantities are all listed
)

// view is the report in words, as the template sets it.
type view struct {
	Title                string
	Running, Foot        template.CSS // strings of the page margins
	Interim              string       // not "" for a run that has no end yet
	Head                 []fact
	Summary              []fact
	Engine, Nozzle       []fact
	Limits, Channels     table
	Sensors              table
	Faults, Out          table
	Checks               []fact
	Zeros                table
	ZeroNote             string // "" without zeros
	Gaps                 table
	Timeline             table
	Figures              []figure
	PointsHow            string
	CardHead             string // "" without a test card
	Card, Taken          table
	Points               table
	Details              []table
	Left                 []string
	Exceedances, Life    table
	NozzleLife           table
	Alarms, AlarmFigures table
	AlarmNote            string
	Targets              string
	Log                  table
	Changes              table
	Digest               []fact
	Run, Zone            string
}

// fact is a named line.
type fact struct{ Name, Value string }

// table is a table of the report. Cells of columns with Number are set with their
// decimal points below each other.
type table struct {
	Caption string
	Head    []heading
	Rows    [][]cell
	More    string // what is left out; "" for nothing
	Empty   string // said where there are no rows
}

type heading struct {
	Text, Unit string
	Number     bool
	Kept       bool // its cells are not broken into lines
	Words      bool // its words are not broken
}

type cell struct{ Text, Sub, Class string }

// quoted makes a string of a style sheet: what is no letter, digit or space is escaped
// [CSS Syntax 4.3.7], so that nothing ends the string or the sheet.
func quoted(s string) template.CSS {
	var b strings.Builder
	b.WriteByte('"')
	for _, r := range s {
		if r == ' ' || unicode.IsLetter(r) || unicode.IsDigit(r) {
			b.WriteRune(r)
		} else {
			fmt.Fprintf(&b, "\\%06x ", r) // the space belongs to the escape
		}
	}
	b.WriteByte('"')
	return template.CSS(b.String()) //nolint:gosec // escaped above
}

func texts(of ...string) []cell {
	row := make([]cell, len(of))
	for i, t := range of {
		row[i].Text = t
	}
	return row
}

// aligned sets the numbers of each column below each other.
func (t table) aligned() table {
	for c, h := range t.Head {
		if !h.Number {
			continue
		}
		column := make([]string, len(t.Rows))
		for r := range t.Rows {
			column[r] = t.Rows[r][c].Text
		}
		align(column)
		for r := range t.Rows {
			t.Rows[r][c].Text = column[r]
		}
	}
	return t
}

// words are headings of texts.
func words(names ...string) []heading {
	out := make([]heading, len(names))
	for i, n := range names {
		out[i].Text = n
	}
	return out
}

func number(text, unit string) heading { return heading{Text: text, Unit: unit, Number: true} }

// keep makes columns that are not broken into lines.
func (t *table) keep(columns ...int) {
	for _, c := range columns {
		t.Head[c].Kept = true
	}
}

// numbers makes columns of numbers, by their units.
func (t *table) numbers(units map[int]string) {
	for c, u := range units {
		t.Head[c].Unit, t.Head[c].Number = u, true
	}
}

// or gives the first that is not empty, "not stated" if none is.
func or(texts ...string) string { return cmp.Or(cmp.Or(texts...), "not stated") }

func joined(parts ...string) string {
	return strings.Join(slices.DeleteFunc(parts, func(s string) bool { return s == "" }), ", ")
}

func prefixed(prefix, s string) string {
	if s == "" {
		return ""
	}
	return prefix + s
}

// counted is "1 alarm", "3 alarms", "no alarms".
func counted(n int, noun string) string {
	switch n {
	case 0:
		return "no " + noun + "s"
	case 1:
		return "1 " + noun
	}
	return strconv.Itoa(n) + " " + noun + "s"
}

func (d *data) short(ns int64) string { return d.clock.short(ns, d.Run.Started) }

func (d *data) view() (*view, error) {
	figures, err := d.figures()
	if err != nil {
		return nil, err
	}
	h, rig := &d.Run, &d.cfg.Rig
	name := h.ID
	switch {
	case h.Designation != "":
		name = h.Designation
	case h.Number > 0:
		name = fmt.Sprintf("%d", h.Number)
	}
	v := &view{
		Title:   "Run " + name + " · " + or(rig.Title, rig.ID),
		Running: quoted(joined("Run "+h.ID, prefixed("engine ", rig.EngineSerial), prefixed("limits ", rig.LimitsVersion))),
		Foot:    quoted("Record of a monitor that is no protection and gives no clearance. Written " + d.clock.long(d.At) + " by build " + or(d.Build) + "."),
		Run:     h.ID, Zone: d.clock.name(h.Started), Figures: figures,
		PointsHow: d.points.How, Left: d.points.Left,
	}
	switch h.State {
	case runfile.StateRunning:
		v.Interim = "Interim report: the run has not ended. It reaches to " + d.clock.long(d.scans.last) + "; what came after is not in it."
	case runfile.StateInterrupted:
		v.Interim = "The recording of this run was interrupted. The report reaches to " + d.clock.long(d.scans.last) + "; what came after is in no column and in no figure of it."
	}
	v.Head, v.Summary = d.head(), kept(d.summary())
	v.Engine, v.Nozzle = d.sources(), d.nozzle()
	v.Limits, v.Channels, v.Sensors = d.limits(), d.channels(), d.sensors()
	v.Faults, v.Out, v.Gaps = d.faults(), d.outs(), d.gaps()
	v.Checks = kept(d.checkFacts())
	if d.checked() {
		v.Zeros, v.ZeroNote = d.zeros(), d.zeroNote()
	}
	v.Timeline = d.timeline()
	v.Points, v.Details = d.overview(), d.details()
	v.CardHead, v.Card, v.Taken = d.cardHead(), d.cardPoints(), d.cardTaken()
	v.Exceedances, v.Life, v.NozzleLife = d.exceedances(), d.life(), d.lifeOfNozzle()
	v.Alarms = d.alarms()
	figs, sources := alarmFigures(&d.Figures, d.short)
	v.AlarmFigures, v.Targets = figs, strings.Join(sources, "; ")
	if d.Figures.WhyNot != nil {
		v.AlarmNote = "Not graded: " + *d.Figures.WhyNot + "."
	}
	v.Log, v.Changes, v.Digest = d.log(), d.changes(), d.digest()
	return v, nil
}

func (d *data) head() []fact {
	h, rig, in := &d.Run, &d.cfg.Rig, &d.state.InForce
	approved := "NOT APPROVED"
	if by := cmp.Or(in.ApprovedBy, d.cfg.Change.Approver); by != "" {
		approved = "approved by " + by
	}
	end := "not ended"
	if h.Ended != 0 {
		end = d.clock.long(h.Ended) + ", after " + duration(float64(h.Ended-h.Started)/1e9)
	}
	if h.Aborted {
		end += "; its start was given up before idle"
	}
	run := h.ID
	if h.Title != rig.Title {
		run = joined(run, h.Title)
	}
	facts := []fact{
		{"Run", run},
		{"Number", or(h.Designation)},
		{"Test", or(joined(h.Test, h.Purpose))},
		{"Rig", joined(rig.ID, rig.Title)},
		{"Engine", or(joined(rig.EngineModel, prefixed("serial ", rig.EngineSerial), prefixed("build ", rig.EngineBuild)))},
		{"Nozzle", or(joined(d.cfg.Compute.Nozzle.Kind.String(), prefixed("serial ", rig.NozzleSerial), prefixed("throat area measured on ", rig.NozzleMeasured)))},
		{"Fuel", or(fuel(&rig.Fuel))},
		{"Begin", d.clock.long(h.Started)},
		{"End", end},
		{"Started by", or(h.Operator)},
		{"Limits", or(rig.LimitsVersion)},
		{"Configuration", "changed by " + or(in.By, d.cfg.Change.Engineer) + ", " + approved},
		{"Configuration hash", d.cfg.Hash},
		{"Recorded by", "throatwatch " + or(joined(h.Build, h.GOARCH))},
	}
	switch o := h.Origin; {
	case o == nil:
	case o.Kind == runfile.OriginReduction:
		facts = append(facts, fact{"Reduced from", fmt.Sprintf("run %s, its records stepped again through the configuration above, by %s. Change: %s. Digest of that run then: %s",
			o.Parent, or(o.By), or(strings.TrimRight(h.Notes, ".")), or(o.ParentDigest))})
	case o.Kind == runfile.OriginImport:
		facts = append(facts, fact{"Made from", fmt.Sprintf("%s, a recording of another data system: %d rows, %d of its cells could not be used; SHA-256 %s", o.File, o.Rows, o.Bad, o.SHA256)})
	}
	if h.Notes != "" && h.Reduction() == nil {
		facts = append(facts, fact{"Notes", h.Notes})
	}
	if len(h.Tags) > 0 {
		facts = append(facts, fact{"Tags", strings.Join(h.Tags, ", ")})
	}
	return facts
}

// unitBehind is a number and what stands behind it.
var unitBehind = regexp.MustCompile(`(\d) ([\pL%°])`)

// kept keeps numbers and their units on one line.
func kept(facts []fact) []fact {
	for i := range facts {
		facts[i].Value = strings.ReplaceAll(unitBehind.ReplaceAllString(facts[i].Value, "$1\u00a0$2"), "± ", "±\u00a0")
	}
	return facts
}

// seconds is the time of so many rows.
func (d *data) seconds(rows int) float64 { return float64(rows) / d.scanRate() }

func (d *data) summary() []fact {
	s := d.scans
	choke := "The throat was not choked in this run."
	if s.inChoke > 0 {
		choke = fmt.Sprintf("Throat choked for %s", duration(d.seconds(s.inChoke)))
		if s.lit > 0 {
			choke += fmt.Sprintf(" of %s with a flame", duration(d.seconds(s.lit)))
		}
		choke += fmt.Sprintf(", marginal for %s.", duration(d.seconds(s.marginal)))
	}
	if !math.IsInf(s.worst.v, 0) {
		choke += fmt.Sprintf(" Least margin while choke was expected: %s at %s.", interval(s.worst), d.short(s.worst.t))
	}
	if s.armedOpen > 0 {
		choke += fmt.Sprintf(" Not choked while it was expected: %s.", duration(d.seconds(s.armedOpen)))
	}
	points := "No steady point was found."
	if n := len(d.points.Points); n > 0 {
		points = counted(n, "steady point") + "."
		best, at := math.Inf(-1), 0
		for i := range d.points.Points {
			if v, ok := d.points.Points[i].Get(monitor.NPR); ok && float64(v.Value) > best {
				best, at = float64(v.Value), i
			}
		}
		if !math.IsInf(best, 0) {
			p := &d.points.Points[at]
			npr, _ := p.Get(monitor.NPR)
			points += fmt.Sprintf(" Highest NPR %s at point %d", scaleOf(monitor.NPR).phrase(float64(npr.Value), float64(npr.U95)), p.Number)
			if flow, ok := p.Get(monitor.MassFlow); ok {
				points += ", W8 " + scaleOf(monitor.MassFlow).phrase(float64(flow.Value), float64(flow.U95))
			}
			points += "."
		}
	}
	return []fact{
		{"Choke", choke},
		{"Points", points},
		{"EGT", d.egtSummary()},
		{"Alarms", d.alarmSummary()},
		{"Doubts", d.doubts()},
	}
}

// interval prints a margin with its bounds.
func interval(w lowest) string {
	if math.IsNaN(w.low) || math.IsNaN(w.high) {
		return decimal(w.v, 1) + " % (uncertainty not stated)"
	}
	n, _ := places((w.high - w.low) / 2)
	return fmt.Sprintf("%s %% (95 %%: %s to %s)", decimal(w.v, n), decimal(w.low, n), decimal(w.high, n))
}

func (d *data) egtSummary() string {
	beyond, peak := 0, math.Inf(-1)
	for i := range d.Exceedances {
		e := &d.Exceedances[i]
		peak = math.Max(peak, e.Peak)
		if e.Exceeded {
			beyond++
		}
	}
	if len(d.Exceedances) == 0 {
		return "No EGT limit was exceeded for any time."
	}
	text := fmt.Sprintf("%s above a limit, of which %d beyond the allowance; highest %s °C.", counted(len(d.Exceedances), "excursion"), beyond, decimal(peak-celsius, 1))
	return capital(text)
}

func (d *data) alarmSummary() string {
	h := d.events
	unseen, first := 0, ""
	for i := range h.alarms {
		a := &h.alarms[i]
		if alarm.State(a.State).Asking() && a.Priority != rules.Note {
			unseen++
		}
		if first == "" && a.firstOut {
			first = " First: " + a.Title + " at " + d.short(int64(a.Raised)) + "."
		}
	}
	advisories := "1 advisory"
	if n := h.by[rules.Advisory]; n != 1 {
		advisories = counted(n, "advisorie")
	}
	text := fmt.Sprintf("%s, %s, %s, %s; %d never acknowledged.%s",
		counted(h.by[rules.Warning], "warning"), counted(h.by[rules.Caution], "caution"), advisories, counted(h.by[rules.Note], "note"), unseen, first)
	return capital(text)
}

// doubts says what a reader should know before relying on the rest.
func (d *data) doubts() string {
	var list []string
	doubt := func(condition bool, format string, args ...any) {
		if condition {
			list = append(list, fmt.Sprintf(format, args...))
		}
	}
	doubt(d.Run.State != runfile.StateEnded, "the record has no regular end")
	doubt(d.state.InForce.ApprovedBy == "" && d.cfg.Change.Approver == "", "limits and rules are not approved")
	lost := 0
	for i := range d.scans.channels {
		if d.scans.channels[i].usable() < 1 {
			lost++
		}
	}
	doubt(lost > 0, "%s not usable all the time", counted(lost, "channel"))
	missing := 0.0
	for _, g := range d.scans.gaps {
		missing += g.seconds()
	}
	doubt(missing > 0, "%s of scans missing", duration(missing))
	unstated := 0
	for i := range d.cfg.Compute.Channels {
		if c := &d.cfg.Compute.Channels[i]; !c.Uncertainty.Stated && !c.RecordedOnly {
			unstated++
		}
	}
	doubt(unstated > 0, "no uncertainty stated for %s", counted(unstated, "channel"))
	doubt(d.cfg.Compute.Stations.ExitPlane < 0, "back pressure from barometer")
	doubt(d.cfg.Compute.Nozzle.AreaU95 == 0, "throat area without uncertainty")
	doubtful := 0
	for i := range d.points.Points {
		if len(d.points.Points[i].Doubts) > 0 {
			doubtful++
		}
	}
	doubt(doubtful > 0, "%s doubtful, see there", counted(doubtful, "point"))
	doubt(d.Run.Digest == "", "no digest is stored yet")
	if len(list) == 0 {
		return "None on record."
	}
	text := strings.Join(list, "; ") + "."
	return capital(text)
}

func (d *data) timeline() table {
	type entry struct {
		t          int64
		rank       int // what goes first when there are too many
		kind, text string
	}
	var list []entry
	add := func(t int64, rank int, kind, text string) { list = append(list, entry{t, rank, kind, text}) }
	add(d.Run.Started, 0, "Run", "Begin")
	if d.Run.Ended != 0 {
		add(d.Run.Ended, 0, "Run", "End")
	}
	for i := range d.Engine {
		e := &d.Engine[i]
		text := strings.ReplaceAll(e.Event, "_", " ")
		if e.EGT.Known {
			text += ", EGT " + decimal(e.EGT.V-celsius, 0) + " °C"
		}
		if e.Speed.Known {
			text += ", N " + decimal(e.Speed.V, 0) + " rpm"
		}
		if e.Rundown.Known {
			text += ", rundown " + duration(e.Rundown.V)
		}
		add(e.T, 0, "Engine", capital(text))
	}
	for i, m := range d.events.marks {
		add(m.T, 0, fmt.Sprintf("Mark M%d", i+1), joined(m.Text, prefixed("by ", m.By)))
	}
	for i := range d.events.alarms {
		a := &d.events.alarms[i]
		if a.Priority >= rules.Caution {
			add(int64(a.Raised), 0, capital(a.Priority.String()), a.Title)
		}
	}
	for _, c := range d.events.changes {
		add(c.t, 0, "Configuration", configText(&c))
	}
	for _, t := range d.scans.choke {
		add(t.t, 1, "Throat", t.text)
	}
	for _, t := range d.scans.phases {
		add(t.t, 2, "Engine", t.text)
	}
	left := d.scans.dropped
	for rank := 2; rank >= 0 && len(list) > mostTimeline; rank-- {
		over := len(list) - mostTimeline
		list = slices.DeleteFunc(list, func(e entry) bool {
			drop := e.rank == rank && over > 0
			if drop {
				over--
				left++
			}
			return drop
		})
	}
	slices.SortStableFunc(list, func(a, b entry) int { return cmp.Compare(a.t, b.t) })
	t := table{Head: words("Time", "Run time", "What", "Details")}
	t.numbers(map[int]string{1: "s"})
	t.keep(0, 2)
	for _, e := range list {
		t.Rows = append(t.Rows, texts(d.short(e.t), decimal(float64(e.t-d.Run.Started)/1e9, 1), e.kind, e.text))
	}
	if left > 0 {
		t.More = fmt.Sprintf("%d further changes of phase or choke state are not listed.", left)
	}
	return t.aligned()
}

func capital(s string) string {
	if s == "" {
		return ""
	}
	return strings.ToUpper(s[:1]) + s[1:]
}

func configText(c *change) string {
	if !c.ok {
		return "Refused: " + c.text
	}
	return joined("In force: "+c.config.Hash[:min(12, len(c.config.Hash))], prefixed("by ", c.config.By), prefixed("approved by ", c.config.ApprovedBy), c.config.Reason)
}

func (d *data) exceedances() table {
	t := table{
		Head:  words("Band", "Began", "Ended", "Limit", "Peak", "Above limit", "Allowance", "Without a value", "Outcome"),
		Empty: "No EGT limit was exceeded.",
	}
	t.numbers(map[int]string{3: "°C", 4: "°C", 5: "s", 6: "s", 7: "s"})
	t.keep(1, 2)
	for i := range d.Exceedances {
		e := &d.Exceedances[i]
		verdict, ended := "not used up", "at the end still on"
		if e.Exceeded {
			verdict = "EXCEEDED"
		}
		if e.Ended != 0 {
			ended = d.short(int64(e.Ended))
		}
		t.Rows = append(t.Rows, texts(e.Band, d.short(int64(e.Began)), ended, decimal(e.Limit-celsius, 1), decimal(e.Peak-celsius, 1),
			decimal(e.Duration, 2), decimal(e.Allowance, 1), decimal(e.Assumed, 2), verdict))
	}
	return t.aligned()
}

func (d *data) life() table {
	t := table{Head: words("Since it is watched", ""), Empty: "The life of the engine is not on record."}
	t.Head[1].Number = true
	if d.Life == nil {
		return t
	}
	t.Head[0].Text = "Engine " + or(d.Life.Serial) + ", since it is watched"
	t.Rows = counts(&d.Life.Counts)
	return t.aligned()
}

func (d *data) lifeOfNozzle() table {
	t := table{Head: words("Since it is watched", ""), Empty: "The life of the nozzle is not on record."}
	t.Head[1].Number = true
	if d.NozzleLife == nil {
		return t
	}
	t.Head[0].Text = "Nozzle " + or(d.NozzleLife.Serial) + ", on whichever engine, since it is watched"
	t.Rows = counts(&d.NozzleLife.Counts)
	return t.aligned()
}

// counts gives the rows of a life.
func counts(c *pipeline.Counts) [][]cell {
	whole := func(n uint64) string { return strconv.FormatUint(n, 10) }
	rows := [][]cell{
		texts("Starts", whole(c.Starts)), texts("Aborted starts", whole(c.Aborted)), texts("Hot starts", whole(c.HotStarts)), texts("Hung starts", whole(c.Hung)),
		texts("No-lights", whole(c.NoLights)), texts("Flame-outs", whole(c.FlameOuts)), texts("Cycles", whole(c.Cycles)),
		texts("Hours with a flame", decimal(c.Hours, 3)), texts("Hours with the throat choked", decimal(c.HoursChoked, 3)),
	}
	for _, b := range c.Bands {
		name := fmt.Sprintf("Time above %s, s (%s, %d beyond the allowance)", b.Name, counted(int(b.Excursions), "excursion"), b.Exceedances)
		if b.Peak.Known {
			name += fmt.Sprintf(", peak %s °C", decimal(b.Peak.V-celsius, 1))
		}
		rows = append(rows, texts(name, decimal(b.Seconds, 1)))
	}
	return rows
}

// fuel says what is stated of the batch of fuel.
func fuel(f *pipeline.Fuel) string {
	value := func(before string, v rules.Reading, scale float64, unit string) string {
		if !v.Known {
			return ""
		}
		return before + significant(v.V/scale, 5) + unit
	}
	return joined(prefixed("batch ", f.Batch), value("density ", f.Density, 1, " kg/m³"),
		value("lower heating value ", f.HeatingValue, 1e6, " MJ/kg"), value("H/C ", f.HydrogenToCarbon, 1, ""))
}

// shape is a sign of a priority that needs no colour.
func shape(p rules.Priority) string {
	switch p {
	case rules.Warning:
		return "▲ warning"
	case rules.Caution:
		return "◆ caution"
	case rules.Advisory:
		return "● advisory"
	case rules.Note:
	}
	return "note"
}

func (d *data) alarms() table {
	t := table{Head: words("Raised", "Priority", "Alarm", "Worst", "Cleared", "Acknowledged", "At the end"), Empty: "No alarm was raised."}
	t.keep(0, 1, 3, 4)
	t.Head[5].Words, t.Head[6].Words = true, true
	for i := range d.events.alarms {
		a := &d.events.alarms[i]
		text := cell{Text: a.Title}
		if a.firstOut {
			text.Text = "FIRST OUT " + a.Title
		}
		if a.Text != a.Title {
			text.Sub = a.Text
		}
		ack := "never"
		switch {
		case a.AcknowledgedBy != "":
			ack = a.AcknowledgedBy + " " + d.short(int64(a.AcknowledgedAt))
		case a.Priority == rules.Note:
			ack = none
		}
		row := texts(d.short(int64(a.Raised)), shape(a.Priority), "", reading(a.Peak, a.Unit, a.Dimension), d.short(a.cleared), ack,
			strings.ReplaceAll(a.State.String(), "_", " "))
		row[2] = text
		row[6].Sub = joined(prefixed("by ", a.AsideBy), a.Reason)
		if a.Priority == rules.Note {
			row[6].Text = "noted"
		}
		t.Rows = append(t.Rows, row)
	}
	if d.events.dropped > 0 {
		t.More = fmt.Sprintf("%d further alarms are not listed.", d.events.dropped)
	}
	return t
}

// alarmFigures lists the figures with their targets, and where the targets come from.
func alarmFigures(f *figures.Figures, short func(int64) string) (t table, sources []string) {
	t = table{Head: words("Figure", "This run", "Target", "")}
	targets := map[string]figures.Target{}
	for _, g := range f.Targets {
		targets[g.Figure] = g
		if !slices.Contains(sources, g.Source) {
			sources = append(sources, g.Source)
		}
	}
	value := func(v *float64, decimals int, unit string) string {
		if v == nil {
			return none
		}
		return decimal(*v, decimals) + unit
	}
	row := func(name, text, key, bound string) {
		target, met := "", ""
		if g, ok := targets[key]; ok {
			target = bound + " " + strconv.FormatFloat(g.Target, 'g', -1, 64)
			switch {
			case g.Met == nil:
				met = "not graded"
			case *g.Met:
				met = "met"
			default:
				met = "not met"
			}
		}
		t.Rows = append(t.Rows, texts(name, text, target, met))
	}
	peak := strconv.Itoa(f.Peak10Min)
	if f.PeakAt != 0 {
		peak += " at " + short(int64(f.PeakAt))
	}
	row("Raised", strconv.Itoa(f.Raised), "", "")
	row("Raised per 10 min, mean", value(f.Per10Min, 2, ""), "per_10_min", "≤")
	row("Raised within 10 min, most", peak, "peak_10_min", "≤")
	row("Standing, most", strconv.Itoa(f.StandingPeak), "", "")
	row("Standing, mean", value(f.StandingMean, 2, ""), "standing_mean", "<")
	row("Standing at the end", strconv.Itoa(f.StandingNow), "", "")
	row("Standing for a day", strconv.Itoa(f.Stale), "stale", "≤")
	row("Chattering", strconv.Itoa(len(f.Chattering)), "chattering", "≤")
	row("Shelved", strconv.Itoa(f.Shelved), "", "")
	row("Out of service", strconv.Itoa(f.OutOfService), "", "")
	row("Acknowledged after, median", value(f.AckMedian, 1, " s"), "", "")
	return t, sources
}

func (d *data) log() table {
	t := table{Head: words("Time", "What", "Of", "Entered", "Reason", "By"), Empty: "Nobody entered anything."}
	t.keep(0, 1)
	for i := range d.Log {
		e := &d.Log[i]
		entered := []string{e.Text}
		if e.Value.Known {
			entered = append([]string{strings.TrimSpace(strconv.FormatFloat(e.Value.V, 'g', -1, 64) + " " + e.Unit)}, entered...)
		}
		if e.Serial != "" {
			entered = append(entered, "sensor "+e.Serial+" from "+d.short(int64(e.ValidFrom)))
		}
		t.Rows = append(t.Rows, texts(d.short(int64(e.T)), strings.ReplaceAll(e.What, "_", " "), e.Rule+e.Channel+e.Name, joined(entered...), e.Reason, e.By+" ("+e.Role+")"))
	}
	return t
}

func (d *data) changes() table {
	t := table{Head: words("Time", "Configuration"), Empty: "The configuration in force at the begin stayed in force."}
	t.keep(0)
	for i := range d.events.changes {
		c := &d.events.changes[i]
		t.Rows = append(t.Rows, texts(d.short(c.t), configText(c)))
	}
	return t
}

func (d *data) digest() []fact {
	seq, host := d.File.Durable()
	return []fact{
		{"SHA-256 of the run", cmp.Or(d.Run.Digest, "none is stored: the run has not ended")},
		{"Last record", fmt.Sprintf("%d, received %s", seq, d.clock.long(host))},
		{"Scans", fmt.Sprintf("%d at %s per second, first %s, last %s", d.scans.rows, significant(d.scanRate(), 4), d.short(d.scans.first), d.short(d.scans.last))},
		{"To verify", "throatwatch verify " + d.Run.ID + " reads every stored byte, steps every record through the computation again and compares the digest."},
	}
}
