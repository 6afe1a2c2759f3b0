package report

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/nozzle"
)

// sources says which channels make the station values.
func (d *data) sources() []fact {
	c := &d.cfg.Compute
	s := &c.Stations
	ids := func(channels ...int) string {
		var out []string
		for _, i := range channels {
			if i >= 0 {
				out = append(out, c.Channels[i].ID)
			}
		}
		return strings.Join(out, ", ")
	}
	back := ids(s.ExitPlane)
	if s.ExitPlane < 0 {
		back = fmt.Sprintf("%s less the entered cell depression of %s Pa ± %s Pa", ids(s.Barometer), significant(s.Depression, 4), significant(s.DepressionU, 2))
	}
	facts := []fact{
		{"p7, total pressure", or(ids(s.P7...))},
		{"T7, total temperature", or(ids(s.T7...))},
		{"Back pressure", back},
		{"Indicated EGT", joined(or(ids(s.EGT...)), fmt.Sprintf("trim %s K", significant(s.EGTTrim, 3)))},
	}
	for _, one := range []struct {
		name    string
		channel int
	}{
		{"Air flow", s.Bellmouth},
		{"Fuel flow", s.FuelFlow},
		{"Water flow", s.WaterFlow},
		{"Bleed flow", s.BleedFlow},
		{"Speed", s.Speed},
		{"Thrust", s.Thrust},
	} {
		if one.channel >= 0 {
			facts = append(facts, fact{one.name, ids(one.channel)})
		}
	}
	return facts
}

// nozzle says with which nozzle was computed.
func (d *data) nozzle() []fact {
	z := &d.cfg.Compute.Nozzle
	relative := func(u float64) string {
		if u == 0 {
			return "uncertainty not stated"
		}
		return "± " + significant(100*u, 2) + " %"
	}
	area := significant(z.ThroatArea*1e4, 6) + " cm², hot, " + relative(z.AreaU95)
	if z.AreaBasis == nozzle.AreaCold {
		area = fmt.Sprintf("%s cm² at %s °C, grows by %s per K, %s", significant(z.ThroatArea*1e4, 6), significant(z.ReferenceTemperature-celsius, 4),
			significant(z.ExpansionCoefficient, 3), relative(z.AreaU95))
	}
	choke := "one-dimensional critical NPR of the gas, model " + relative(z.ChokeNPRU95)
	if z.ChokeNPR > 0 {
		choke = "calibrated, " + significant(z.ChokeNPR, 5) + ", " + relative(z.ChokeNPRU95)
	}
	return []fact{
		{"Throat area", area},
		{"Discharge coefficient", coefficient(z.Discharge) + ", " + relative(z.DischargeU95)},
		{"Thrust coefficient", coefficient(z.Thrust) + ", " + relative(z.ThrustU95) + ", basis " + z.Basis.String()},
		{"Choke NPR", choke},
	}
}

func coefficient(points []nozzle.Point) string {
	if len(points) == 0 {
		return "1 (ideal)"
	}
	low, high := points[0].Value, points[0].Value
	for _, p := range points {
		low, high = min(low, p.Value), max(high, p.Value)
	}
	if low == high {
		return significant(low, 5)
	}
	return fmt.Sprintf("%s to %s, by a table of %d", significant(low, 5), significant(high, 5), len(points))
}

func (d *data) limits() table {
	t := table{Head: words("EGT band", "Holds", "Limit", "Allowance", "Per run", "Over until below", "For"), Empty: "The rig has no EGT bands: no exhaust temperature was watched."}
	t.numbers(map[int]string{2: "°C", 3: "s", 4: "s", 5: "°C", 6: "s"})
	for i := range d.cfg.Compute.EGT.Bands {
		b := &d.cfg.Compute.EGT.Bands[i]
		holds, run := "always", none
		if b.Kind == egt.KindStart {
			holds = "until idle"
		}
		if b.PerRun > 0 {
			run = decimal(float64(b.PerRun)/1e9, 1)
		}
		t.Rows = append(t.Rows, texts(b.Name, holds, decimal(b.Limit-celsius, 1), decimal(float64(b.Allowance)/1e9, 1), run,
			decimal(b.Limit-b.Deadband-celsius, 1), decimal(float64(b.Rearm)/1e9, 1)))
	}
	return t.aligned()
}

// channels lists the calibration of the day.
func (d *data) channels() table {
	t := table{Head: words("Channel", "Unit", "Against", "Range", "Calibration", "Uncertainty, 95 %", "U95 at full range")}
	t.Head[6].Number = true
	t.keep(0, 1, 3)
	for i := range d.cfg.Compute.Channels {
		c := &d.cfg.Compute.Channels[i]
		row := texts(c.ID, sign(c.Unit), d.against(&c.Spec), significant(c.Unit.FromSI(c.Low), 5)+" to "+significant(c.Unit.FromSI(c.High), 5),
			calibration(&c.Spec), uncertainty(&c.Spec), none)
		row[0].Sub = c.Title
		if c.RecordedOnly {
			row[0].Sub = joined(c.Title, "recorded only")
		}
		if u := endU95(&c.Spec); c.Uncertainty.Stated && !math.IsNaN(u) {
			row[6].Text = significant(u/c.Unit.Scale, 2)
		}
		t.Rows = append(t.Rows, row)
	}
	return t.aligned()
}

// sensors lists what is on file of the sensors, as of the beginning of the run or of their
// first sample in it.
func (d *data) sensors() table {
	t := table{
		Head:  words("Channel", "Sensor", "Certificate", "Calibrated", "Due", "Calibration and uncertainty, 95 %", "State in the run"),
		Empty: "No sensor is on file: state sensor: with its certificate and due date in the rig file.",
	}
	t.keep(3, 4)
	missing := 0
	for i := range d.cfg.Compute.Channels {
		c := &d.cfg.Compute.Channels[i]
		if c.Record.Serial == "" && len(c.Swaps) == 0 {
			missing++
			continue
		}
		t.Rows = append(t.Rows, d.sensor(c.ID, &c.Spec, &c.Record, 0))
		for k := range c.Swaps {
			spec := c.Spec
			spec.Polynomial, spec.Uncertainty = c.Swaps[k].Polynomial, c.Swaps[k].Uncertainty
			t.Rows = append(t.Rows, d.sensor(c.ID, &spec, &c.Swaps[k].Record, c.Swaps[k].From))
		}
	}
	if len(t.Rows) > 0 && missing > 0 {
		t.More = fmt.Sprintf("Of the other %d channels no sensor is on file.", missing)
	}
	return t.aligned()
}

// sensor is a row of sensors: the sensor of a channel from event time from on.
func (d *data) sensor(id string, spec *calib.Spec, r *calib.Record, from int64) []cell {
	at := max(from, d.Run.Started)
	state := "no due date on file"
	switch r.State(at) {
	case calib.NotOnFile:
	case calib.InDate:
		state = "in date"
		if r.State(d.to) != calib.InDate {
			state = "expired in the run"
		}
	case calib.Waived:
		state = "EXPIRED, waived by " + r.Waiver.Who + prefixed(" until ", r.Waiver.Until) + ": " + r.Waiver.Why
	case calib.Expired:
		state = "EXPIRED"
	}
	dash := func(s string) string { return cmp.Or(s, none) }
	row := texts(id, dash(r.Serial), dash(r.Certificate), dash(r.Calibrated), dash(r.Due), calibration(spec), state)
	row[5].Sub = uncertainty(spec)
	if from != 0 {
		row[0].Sub = "since " + d.short(from)
	}
	return row
}

func (d *data) against(c *calib.Spec) string {
	port := ""
	if c.Port >= 0 {
		port = " " + d.cfg.Compute.Channels[c.Port].ID
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
	return none
}

// calibration writes the polynomial of a channel out.
func calibration(c *calib.Spec) string {
	if len(c.Polynomial) == 0 {
		if c.Raw.Name == c.Unit.Name || c.Raw.Name == "" {
			return "as sent"
		}
		return "as sent, in " + sign(c.Raw)
	}
	var b strings.Builder
	for i, a := range c.Polynomial {
		if a == 0 && len(c.Polynomial) > 1 {
			continue
		}
		term := significant(math.Abs(a), 6)
		switch {
		case a < 0 && b.Len() == 0:
			b.WriteString("−")
		case a < 0:
			b.WriteString(" − ")
		case b.Len() > 0:
			b.WriteString(" + ")
		}
		b.WriteString(term)
		switch {
		case i == 1:
			b.WriteString(" x")
		case i > 1:
			b.WriteString(" x" + superscript(i))
		}
	}
	return b.String() + prefixed(", x in ", sign(c.Raw))
}

// uncertainty writes out what is stated of a channel.
func uncertainty(c *calib.Spec) string {
	u := &c.Uncertainty
	if !u.Stated {
		return "not stated"
	}
	var parts []string
	add := func(before string, v float64, after string) {
		if v != 0 {
			parts = append(parts, before+significant(v, 3)+" "+after)
		}
	}
	unit := sign(c.Unit)
	if unit == "°C" {
		unit = "K" // a difference
	}
	add("", 100*u.FullScale, "% of range")
	add("", 100*u.Reading, "% of reading")
	add("", u.Fixed/c.Unit.Scale, unit)
	if u.Thermocouple != (calib.Thermocouple{}) {
		parts = append(parts, fmt.Sprintf("type %c, class %d", u.Thermocouple.Type, u.Thermocouple.Class))
	}
	add("random ", u.Random/c.Unit.Scale, unit)
	return strings.Join(parts, "; ")
}

// endU95 gives the 95 % uncertainty of one reading at the end of the range that is larger
// in amount, SI; NaN where its thermocouple has no tolerance there.
func endU95(c *calib.Spec) float64 {
	return math.Hypot(c.Uncertainty.U95(math.Max(math.Abs(c.Low), math.Abs(c.High)), c.Low, c.High), c.Uncertainty.Random)
}

// faults says of each channel that was not usable all the time how much of it was.
func (d *data) faults() table {
	t := table{
		Head:  words("Channel", "Usable", "Missing", "Stale", "Out of range", "No reading", "Rate", "Stuck", "No reference", "Left out", "Found at the end"),
		Empty: fmt.Sprintf("All %d channels were usable in every scan.", len(d.scans.channels)),
	}
	qualities := []monitor.Quality{
		monitor.QualityMissing, monitor.QualityStale, monitor.QualityOutOfRange, monitor.QualityInvalidCode,
		monitor.QualityRate, monitor.QualityStuck, monitor.QualityNoReference, monitor.QualityExcluded,
	}
	for i := 1; i <= len(qualities)+1; i++ {
		t.Head[i].Unit, t.Head[i].Number = "%", true
	}
	good := 0
	for i := range d.scans.channels {
		c := &d.scans.channels[i]
		finding := d.finding(c.id)
		if c.usable() == 1 && finding == "" {
			good++
			continue
		}
		row := []cell{{Text: c.id}, {Text: share(c.usable())}}
		for _, q := range qualities {
			text := ""
			if c.by[q] > 0 {
				text = share(float64(c.by[q]) / float64(c.scans))
			}
			row = append(row, cell{Text: text})
		}
		t.Rows = append(t.Rows, append(row, cell{Text: finding}))
	}
	if len(t.Rows) > 0 {
		t.More = fmt.Sprintf("The other %d channels were usable in every scan.", good)
	}
	return t.aligned()
}

// share prints a part in percent, and never 100 or 0 for what is not.
func share(part float64) string {
	p := 100 * part
	if p != 100 && p != 0 {
		p = math.Min(math.Max(p, 0.01), 99.99)
	}
	return decimal(p, 2)
}

// finding says what was found of the sensor of a channel when the record ends.
func (d *data) finding(id string) string {
	for i := range d.cfg.Compute.Channels {
		if d.cfg.Compute.Channels[i].ID != id || i >= len(d.state.Compute.Sensors) {
			continue
		}
		f := d.state.Compute.Sensors[i].Found
		if f.Kind == monitor.NoFinding {
			return ""
		}
		how := "suspected"
		if f.Proven {
			how = "proven"
		}
		return strings.ReplaceAll(f.Kind.String(), "_", " ") + ", " + how + " since " + d.short(f.Since)
	}
	return ""
}

// together is how far apart channels may go out and come back to be told as one, ns: what
// takes several at once, a silent publisher say, does so by the hold time of each.
const together = 1500e6

// outGroup is a stretch in which channels could not be used, all for the same reason.
type outGroup struct {
	out
	ids []string
}

// grouped puts stretches together that began, ended and were alike.
func grouped(list []namedOut) (groups []outGroup) {
	for _, o := range list {
		i := slices.IndexFunc(groups, func(g outGroup) bool {
			return g.quality == o.quality && !slices.Contains(g.ids, o.id) && o.From-g.From <= together && max(o.To-g.To, g.To-o.To) <= together
		})
		if i < 0 {
			groups = append(groups, outGroup{o.out, []string{o.id}})
			continue
		}
		groups[i].ids = append(groups[i].ids, o.id)
		groups[i].To = max(groups[i].To, o.To)
	}
	return groups
}

func (d *data) outs() table {
	list, more := d.scans.longest(mostOutRows)
	t := table{Head: words("Channels", "From", "To", "For", "Quality"), Empty: "No channel was out for any time."}
	t.numbers(map[int]string{3: "s"})
	t.keep(1, 2, 4)
	for _, o := range grouped(list) {
		t.Rows = append(t.Rows, texts(strings.Join(o.ids, ", "), d.short(o.From), d.short(o.To), decimal(o.seconds(), 2), strings.ReplaceAll(o.quality.String(), "_", " ")))
	}
	if more > 0 {
		t.More = fmt.Sprintf("%d shorter stretches of single channels are not listed.", more)
	}
	return t.aligned()
}

func (d *data) gaps() table {
	t := table{Head: words("From", "To", "Missing"), Empty: "No scan is missing between the first and the last."}
	t.numbers(map[int]string{2: "s"})
	for _, g := range d.scans.gaps {
		t.Rows = append(t.Rows, texts(d.short(g.From), d.short(g.To), decimal(g.seconds(), 2)))
	}
	if d.scans.moreGaps > 0 {
		t.More = fmt.Sprintf("%d further gaps are not listed.", d.scans.moreGaps)
	}
	return t.aligned()
}
