package config

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strings"
	"time"
	"unicode/utf8"

	"throatwatch/cmd/internal/recording"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/unit"
	"throatwatch/rules/pipeline"
)

// columnMap is a map of a recording on its way to a recording.Map.
type columnMap struct {
	m        recording.Map
	channels []compute.Channel
	header   []string
	used     map[string]bool // columns of the recording that the map speaks of
	taken    map[int]bool    // channels that have a column or a constant
	rest     bool            // columns that it does not speak of are left out
}

// LoadMap reads the map of a recording for a rig. Header gives the names of the
// recording's columns once the map has said how it is written; its error becomes a
// fault. Hash is the SHA-256 of the text, in hex. The map is usable when there is
// no fault.
func LoadMap(name string, cfg *pipeline.Config, header func(recording.Form) ([]string, error)) (m recording.Map, hash string, faults []Fault) {
	folder, base := filepath.Split(name)
	text, err := read(name)
	if err != nil {
		return m, "", []Fault{{File: name, Message: err.Error(), Hint: "give the path of a map of columns"}}
	}
	sum := sha256.Sum256([]byte(text))
	m, faults = parseMap(File{base, text}, cfg, header)
	return m, hex.EncodeToString(sum[:]), place(faults, folder)
}

func parseMap(f File, cfg *pipeline.Config, header func(recording.Form) ([]string, error)) (recording.Map, []Fault) {
	top := open(f)
	if !top.is() {
		return recording.Map{}, top.doc.faults
	}
	c := columnMap{channels: cfg.Compute.Channels, used: map[string]bool{}, taken: map[int]bool{}}
	m := top.fields()
	c.readForm(m.get("csv"))
	if len(top.doc.faults) == 0 {
		names, err := header(c.m.Form)
		if err != nil {
			m.fault(err.Error(), "check the recording, and csv: in the map, if it is CSV")
			return recording.Map{}, top.doc.faults
		}
		c.header = names
	}
	c.readTime(m.need("time", "name the column of the time and its format"))
	for _, n := range m.get("missing").list() {
		if c.m.Missing == nil {
			c.m.Missing = map[string]bool{}
		}
		c.m.Missing[n.text()] = true
	}
	if n := m.get("only_where_empty"); n.is() {
		c.m.EmptyWhere = c.column(n)
	}
	columns := m.get("columns")
	if values := m.get("values"); values.is() {
		c.readLong(values, columns)
	} else {
		columns = m.need("columns", "list which column is which channel, or name the columns in values: where a row has one value")
		c.m.Columns = c.readColumns(columns, true)
		if columns.empty() {
			columns.fault("the list of columns is empty", "write - {column: NAME, channel: ID, unit: UNIT}")
		}
	}
	c.readConstants(m.get("constants"))
	c.readSkip(m.get("skip"))
	m.done()
	c.findUnused(columns)
	if len(top.doc.faults) > 0 {
		return recording.Map{}, tidy(top.doc.faults, []File{f})
	}
	return c.m, nil
}

// column reads the name of a column that must be in the recording.
func (c *columnMap) column(n node) string {
	name := n.text()
	if !n.is() {
		return ""
	}
	c.used[name] = true
	switch count(c.header, name) {
	case 0:
		if c.header != nil {
			n.fault(fmt.Sprintf("the recording has no column %q", name), nearest(name, c.header))
		}
	case 1:
	default:
		n.fault(fmt.Sprintf("the recording has column %q more than once", name), "give its columns different names")
	}
	return name
}

func count(list []string, s string) (n int) {
	for _, x := range list {
		if x == s {
			n++
		}
	}
	return n
}

// letter reads a text of one letter.
func (n node) letter() rune {
	text := n.text()
	if !n.is() {
		return 0
	}
	if text == `\t` || text == "tab" {
		return '\t'
	}
	r, size := utf8.DecodeRuneInString(text)
	if size != len(text) || size == 0 {
		n.fault(fmt.Sprintf("%q is not one sign", text), `write "," or ";" or tab`)
		return 0
	}
	return r
}

func (c *columnMap) readForm(n node) {
	f := n.fields()
	form := &c.m.Form
	separator := f.get("separator")
	if form.Separator = separator.letter(); separator.is() && strings.ContainsRune("\"\r\n\ufeff\ufffd", form.Separator) {
		separator.fault("that sign cannot separate cells", `write "," or ";" or tab`)
	}
	form.Decimal = '.'
	if f.get("decimal").choice(".", ".", ",") == "," {
		form.Decimal = ','
	}
	if form.Decimal == ',' && (form.Separator == ',' || form.Separator == 0) {
		f.fault("a comma cannot separate cells and fractions", `write separator: ";" or tab`)
	}
	const most = 10_000
	form.Header = f.get("header_line").integer(1, 1, most)
	form.Data = f.get("data_line").integer(0, form.Header+1, form.Header+most)
	f.done()
}

func (c *columnMap) readTime(n node) {
	f := n.fields()
	t := &c.m.Time
	column := f.need("column", "name the column of the time, or a list as [Date, Time]")
	for _, item := range column.list() {
		t.Columns = append(t.Columns, c.column(item))
	}
	if column.empty() {
		column.fault("no column of the time is named", "name one, or a list as [Date, Time]")
	}
	const hint = "write rfc3339, epoch, elapsed, stamp (a typed time of Parquet), or a pattern as DD.MM.YYYY hh:mm:ss.fff"
	format := f.need("format", hint)
	u, start, zone := f.get("unit"), f.get("start"), f.get("zone")
	f.done()
	wants := func(n node, key string, want bool, hint string) {
		switch {
		case want && !n.is():
			f.fault(fmt.Sprintf("key %q is missing", key), hint)
		case !want && n.is():
			n.fault(fmt.Sprintf("%s does not go with format %s", key, format.text()), "leave it away")
		}
	}
	if !format.is() {
		return
	}
	t.Kind = format.text()
	counts := t.Kind == recording.ClockEpoch || t.Kind == recording.ClockElapsed
	wants(u, "unit", counts, "write s, ms, us or ns")
	wants(start, "start", t.Kind == recording.ClockElapsed, "the time of zero, as 2026-03-02T09:00:00Z")
	if len(t.Columns) > 1 && (counts || t.Kind == recording.ClockStamp) {
		column.fault(fmt.Sprintf("format %s has one column", t.Kind), "name one")
	}
	switch t.Kind {
	case recording.ClockEpoch, recording.ClockElapsed:
		t.Unit = map[string]int64{"s": 1e9, "ms": 1e6, "us": 1e3, "ns": 1}[u.choice("s", "s", "ms", "us", "ns")]
		if start.is() {
			at, err := time.Parse(time.RFC3339Nano, start.text())
			if err != nil || at.Year() < 1970 || at.Year() >= 2262 {
				start.fault(fmt.Sprintf("%q is not a time", start.text()), "write it as 2026-03-02T09:00:00Z")
			} else {
				t.Start = at.UnixNano()
			}
		}
		wants(zone, "zone", false, "")
	case recording.ClockRFC3339, recording.ClockStamp:
		wants(zone, "zone", false, "")
	default:
		var err error
		pattern := t.Kind
		t.Kind = recording.ClockPattern
		if t.Layout, err = recording.Pattern(pattern); err != nil {
			format.fault(fmt.Sprintf("%q is no format of a time: %v", pattern, err), hint)
			return
		}
		wants(zone, "zone", !strings.Contains(pattern, "ZZ"), "write UTC, an offset as +01:00, or a zone as Europe/Zurich")
		if zone.is() {
			t.Zone = zone.zone()
		}
	}
}

// zone reads a time zone.
func (n node) zone() *time.Location {
	text := n.text()
	if at, err := time.Parse("Z07:00", text); err == nil {
		_, offset := at.Zone()
		return time.FixedZone(text, offset)
	}
	zone, err := time.LoadLocation(text)
	if err != nil || text == "" || text == "Local" {
		n.fault(fmt.Sprintf("%q is not a time zone", text), "write UTC, an offset as +01:00, or a zone as Europe/Zurich")
		return time.UTC
	}
	return zone
}

// channel reads the id of a channel; −1 when there is none of that id.
func (c *columnMap) channel(n node) int {
	id := n.text()
	i := slices.IndexFunc(c.channels, func(ch compute.Channel) bool { return ch.ID == id })
	switch {
	case !n.is():
	case i < 0:
		ids := make([]string, len(c.channels))
		for k := range c.channels {
			ids[k] = c.channels[k].ID
		}
		n.fault(fmt.Sprintf("the rig has no channel %q", id), nearest(id, ids))
	case c.taken[i]:
		n.fault(fmt.Sprintf("channel %q is there twice", id), "a channel has one column or one constant")
	default:
		c.taken[i] = true
	}
	return i
}

// readColumns reads the list of columns; in the recording they must be only where
// each has a column of its own. A unit may be left away where the recording has it.
func (c *columnMap) readColumns(n node, wide bool) (out []recording.Column) {
	for _, item := range n.items() {
		f := item.fields()
		name := f.need("column", "the name in the recording")
		col := recording.Column{Name: name.text()}
		if wide {
			c.column(name)
		}
		if slices.ContainsFunc(out, func(o recording.Column) bool { return o.Name == col.Name }) {
			name.fault(fmt.Sprintf("column %q is there twice", col.Name), "a column has one channel")
		}
		col.Channel = c.channel(f.need("channel", "the id in the rig file"))
		u := f.get("unit")
		if wide || c.m.Long.Unit == "" {
			u = f.need("unit", "the unit that the recording has it in; the raw unit, such as mA, if it was not calibrated")
		}
		f.done()
		if col.Channel < 0 {
			continue
		}
		col.Raw = c.channels[col.Channel].Raw
		col.Unit = col.Raw
		if u.is() {
			col.Unit = u.unitOf(col.Raw)
		}
		out = append(out, col)
	}
	return out
}

// unitOf reads a unit of what a raw unit measures.
func (n node) unitOf(raw unit.Unit) unit.Unit {
	u, err := unit.ParseAs(n.text(), raw.Dimension)
	if err != nil {
		n.unitFault(err)
	}
	return u
}

// readLong reads a recording with a row per value. Without a list of columns the
// names are ids of channels.
func (c *columnMap) readLong(n, columns node) {
	f := n.fields()
	c.m.Long = &recording.Long{
		Channel: c.column(f.need("channel", "the column that holds the names")),
		Value:   c.column(f.need("value", "the column that holds the values")),
		Unit:    c.column(f.get("unit")),
		Names:   map[string]recording.Column{},
	}
	f.done()
	if columns.is() {
		for _, col := range c.readColumns(columns, false) {
			c.m.Long.Names[col.Name] = col
		}
		return
	}
	if c.m.Long.Unit == "" && f.is() {
		f.fault("the unit of the values is not said", "name their column in unit:, or list the names with their units in columns:")
	}
	for i := range c.channels {
		c.m.Long.Names[c.channels[i].ID] = recording.Column{Channel: i, Unit: c.channels[i].Raw, Raw: c.channels[i].Raw}
	}
}

func (c *columnMap) readConstants(n node) {
	f := n.fields()
	for _, e := range f.entries {
		f.taken = append(f.taken, e.key)
		i := slices.IndexFunc(c.channels, func(ch compute.Channel) bool { return ch.ID == e.key })
		switch {
		case i < 0:
			ids := make([]string, len(c.channels))
			for k := range c.channels {
				ids[k] = c.channels[k].ID
			}
			e.at.fault(fmt.Sprintf("the rig has no channel %q", e.key), nearest(e.key, ids))
			continue
		case c.taken[i]:
			e.at.fault(fmt.Sprintf("channel %q is there twice", e.key), "a channel has one column or one constant")
			continue
		}
		c.taken[i] = true
		raw := c.channels[i].Raw
		if v := f.at(e).quantity(raw.Dimension, math.NaN()); !math.IsNaN(v) {
			c.m.Constants = append(c.m.Constants, recording.Constant{Channel: i, Raw: round12(raw.FromSI(v))})
		}
	}
	f.done()
}

// readSkip reads which columns are left out.
func (c *columnMap) readSkip(n node) {
	if n.is() && n.scalar() && n.text() == "rest" {
		c.rest = true
		return
	}
	for _, item := range n.list() {
		c.column(item)
	}
}

// findUnused finds columns that the map says nothing of: one that was forgotten
// must not be missed silently.
func (c *columnMap) findUnused(at node) {
	if c.rest {
		return
	}
	var unused []string
	for _, name := range c.header {
		if !c.used[name] {
			unused = append(unused, name)
		}
	}
	if len(unused) > 0 {
		const most = 12
		more := ""
		if len(unused) > most {
			unused, more = unused[:most], " …"
		}
		at.fault(fmt.Sprintf("the map does not say what these columns are: %s%s", strings.Join(unused, ", "), more), "list them in columns: or in skip:, or write skip: rest")
	}
}
