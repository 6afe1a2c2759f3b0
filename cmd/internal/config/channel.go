package config

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/ingest/decode"
	"throatwatch/monitor/align"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/unit"
)

// maxChannels bounds the rig: a scan is a row of them.
const maxChannels = 2000

// channel is a channel with its place in the file.
type channel struct {
	*fields
	id   string
	port node // the reference port as named, without value when there is none
	sea  bool // a barometer reduced to sea level
}

// readChannels reads the channels; the index in the file is the index in the
// configuration.
func (r *rig) readChannels(n node) {
	items := n.items()
	if n.empty() {
		n.fault("the list of channels is empty", "list the measured signals")
	}
	if len(items) > maxChannels {
		n.fault(fmt.Sprintf("%d channels are too many", len(items)), fmt.Sprintf("%d at most; a second rig file can take the rest", maxChannels))
		items = items[:maxChannels]
	}
	for _, item := range items {
		r.readChannel(item)
	}
	r.used = make([]bool, len(r.channels))
	r.resolvePorts()
	r.findDoubles()
}

// index finds a channel by its id, -1 if there is none.
func (r *rig) index(id string) int {
	return slices.IndexFunc(r.channels, func(c *channel) bool { return c.id == id && id != "" })
}

// ids gives the ids of the channels so far.
func (r *rig) ids() []string {
	var out []string
	for _, c := range r.channels {
		if c.id != "" {
			out = append(out, c.id)
		}
	}
	return out
}

func (r *rig) readChannel(n node) {
	f := n.fields()
	f.own = []string{"id", "title", "topic", "name", "like", "sensor"}
	c := &channel{fields: f}
	id := f.need("id", "the name that stations, rules and records use")
	c.id = id.id()
	if c.id != "" && r.index(c.id) >= 0 {
		id.fault(fmt.Sprintf("channel %q is there twice", c.id), "give each channel its own id")
	}
	if like := f.get("like"); like.is() {
		if i := r.index(like.text()); i >= 0 {
			f.base = r.channels[i].fields
		} else {
			like.fault(fmt.Sprintf("there is no channel %q above", like.text()), nearest(like.text(), r.ids()))
			r.add(c, align.Channel{ID: c.id}, compute.Channel{ID: c.id, Spec: calib.Spec{Port: -1}})
			return // what it does not say itself is not known: no faults about that
		}
	}
	in := align.Channel{ID: c.id, Topic: f.get("topic").topic(false)}
	in.Name = r.nameIn(f.get("name"), in.Topic, c.id)
	hold := f.get("hold")
	in.Hold = hold.duration(second, positive)
	if in.Hold < r.cfg.Align.Period {
		hold.fault("the hold time is shorter than a scan", "a channel must last from scan to scan at least")
	}
	out := compute.Channel{ID: c.id, Title: f.get("title").label(c.id), Record: r.readSensor(f.get("sensor"))}
	r.readSpec(c, &out.Spec)
	r.readLimits(c, c.id, out.Title, &out.Spec)
	in.Raw = out.Raw
	f.done()
	r.add(c, in, out)
}

func (r *rig) add(c *channel, in align.Channel, out compute.Channel) {
	r.channels = append(r.channels, c)
	r.cfg.Align.Channels = append(r.cfg.Align.Channels, in)
	r.cfg.Compute.Channels = append(r.cfg.Compute.Channels, out)
}

// nameIn gives the name by which messages call the channel: as written, else the
// last level of a topic of bare values, else the id.
func (r *rig) nameIn(n node, topic, id string) string {
	if n.is() {
		text := n.text()
		if text == "" || strings.ContainsFunc(text, func(r rune) bool { return r <= ' ' || r == 0x7f }) {
			n.fault(fmt.Sprintf("%q is not a name", text), "the name in the message, without blanks")
		}
		return text
	}
	if topic == "" {
		return id
	}
	for _, in := range r.cfg.Align.Inputs {
		if matches(in.Filter, topic) && in.Format == decode.Value {
			return topic[strings.LastIndexByte(topic, '/')+1:]
		}
	}
	return id
}

// findDoubles finds topics that no input brings, and channels that the same
// sample would feed.
func (r *rig) findDoubles() {
	for i, a := range r.cfg.Align.Channels {
		if a.Topic != "" && !slices.ContainsFunc(r.cfg.Align.Inputs, func(in align.Input) bool { return matches(in.Filter, a.Topic) }) {
			r.channels[i].get("topic").fault(fmt.Sprintf("no input brings topic %q", a.Topic), "add it to inputs with its format")
		}
		for _, b := range r.cfg.Align.Channels[:i] {
			if a.ID != b.ID && a.Name == b.Name && a.Name != "" && (a.Topic == b.Topic || a.Topic == "" || b.Topic == "") {
				r.channels[i].fault(fmt.Sprintf("channels %q and %q both take name %q", b.ID, a.ID, a.Name), "give them different names or topics")
				break
			}
		}
	}
}

// readSpec reads unit, reference, calibration, range and what judges a channel.
func (r *rig) readSpec(c *channel, s *calib.Spec) {
	f := c.fields
	s.Port = -1
	u := f.need("unit", "the unit of the calibrated value, such as kPa, degC, rpm")
	if !u.is() {
		return // without a unit nothing below can be read
	}
	var err error
	if s.Unit, err = unit.Parse(u.text()); err != nil {
		u.unitFault(err)
		for _, key := range []string{"reference", "calibration", "range", "uncertainty", "max_rate", "stuck_after", "invalid_codes", "adc_step"} {
			f.get(key)
		}
		return
	}
	d := s.Unit.Dimension
	r.readReference(c, s)
	s.Raw = s.Unit
	readCalibration(f.get("calibration"), s)

	s.Low, s.High = math.Inf(-1), math.Inf(1)
	if n := f.need("range", "what the sensor can read, as [0 kPa, 250 kPa]; outside it is broken"); n.is() {
		ends := n.items()
		if len(ends) == 2 {
			s.Low, s.High = ends[0].quantity(d, math.Inf(-1)), ends[1].quantity(d, math.Inf(1))
			switch {
			case s.Low >= s.High:
				n.fault("the range is reversed or empty", "write [lowest, highest]")
			case s.Reference == calib.Absolute && s.Low < 0, d == unit.Temperature && s.Low < 0:
				ends[0].fault("the range begins below zero", "an absolute pressure or temperature cannot be negative")
			}
		} else if len(ends) > 0 {
			n.fault(fmt.Sprintf("a range has two ends, here are %d", len(ends)), "write [lowest, highest]")
		}
	}
	readUncertainty(f.get("uncertainty"), d, &s.Uncertainty)
	s.MaxRate = f.get("max_rate").per(d, 0, positive)
	s.Stuck = f.get("stuck_after").duration(0, positive)
	for _, code := range f.get("invalid_codes").list() {
		s.Codes = append(s.Codes, code.number(0))
	}
	if n := f.get("adc_step"); n.is() {
		if step := n.quantity(difference(s.Raw.Dimension), 0, positive); step > 0 {
			s.Step = round12(step / s.Raw.Scale)
		}
	}
	if c.sea && !math.IsNaN(r.elevation) {
		toStation(s, r.elevation)
	}
}

// list opens a list that may be a single value.
func (n node) list() []node {
	if n.is() && n.scalar() {
		return []node{n}
	}
	return n.items()
}

// round12 takes the noise of a unit conversion off a number of the file.
func round12(v float64) float64 {
	if v == 0 || math.IsInf(v, 0) || math.IsNaN(v) {
		return v
	}
	scale := math.Pow(10, 12-math.Ceil(math.Log10(math.Abs(v))))
	if math.IsInf(scale, 0) || scale == 0 {
		return v
	}
	return math.Round(v*scale) / scale
}

const referenceHint = "write absolute, {gauge: CHANNEL} or {differential: CHANNEL}"

// readReference reads what a pressure is measured against.
func (r *rig) readReference(c *channel, s *calib.Spec) {
	n := c.get("reference")
	if s.Unit.Dimension != unit.Pressure {
		if n.is() {
			n.fault("only a pressure has a reference", "leave it away, or correct the unit")
		}
		return
	}
	if n = c.need("reference", "say what the pressure is measured against: "+referenceHint); !n.is() {
		return
	}
	if n.scalar() {
		switch n.text() {
		case "absolute":
			s.Reference = calib.Absolute
		case "differential":
			s.Reference = calib.Differential
		case "sea_level":
			s.Reference, c.sea = calib.Absolute, true
			if math.IsNaN(r.elevation) {
				n.fault("a barometer reduced to sea level is not the pressure at the rig", "take the station pressure, or state rig.elevation")
			}
		case "gauge":
			n.fault("gauge against what?", "name the channel at its reference port, as {gauge: p_baro}")
		default:
			n.fault(fmt.Sprintf("%q is not a reference", n.text()), referenceHint)
		}
		return
	}
	f := n.fields()
	gauge, differential := f.get("gauge"), f.get("differential")
	f.done()
	switch {
	case f.has("gauge") && f.has("differential"):
		n.fault("a pressure has one reference", referenceHint)
	case f.has("gauge"):
		s.Reference, c.port = calib.Gauge, gauge
	case f.has("differential"):
		s.Reference, c.port = calib.Differential, differential
	case f.is():
		n.fault("the reference is empty", referenceHint)
	}
}

// resolvePorts finds the reference ports and refuses what leads nowhere.
func (r *rig) resolvePorts() {
	for i, c := range r.channels {
		if !c.port.is() {
			continue
		}
		name := c.port.text()
		port := r.index(name)
		switch {
		case port < 0:
			c.port.fault(fmt.Sprintf("there is no channel %q", name), nearest(name, r.ids()))
			continue
		case port == i:
			c.port.fault("a channel cannot be its own reference", "name the channel at its reference port")
			continue
		case r.spec(port).Unit.Dimension != unit.Pressure && r.spec(port).Unit.Valid():
			c.port.fault(fmt.Sprintf("channel %q is no pressure", name), "name a pressure channel")
			continue
		case r.spec(port).Reference == calib.Differential:
			c.port.fault(fmt.Sprintf("channel %q is a differential pressure and cannot serve as reference", name), "name an absolute or gauge channel, such as the barometer")
			continue
		}
		r.spec(i).Port = port
		r.used[port] = true
	}
	for i, c := range r.channels {
		at := i
		for range r.channels {
			if r.spec(at).Reference != calib.Gauge || r.spec(at).Port < 0 {
				break
			}
			if at = r.spec(at).Port; at == i {
				c.port.fault("the reference ports run in a circle", "one of them must be against an absolute channel")
				break
			}
		}
	}
}

// readCalibration reads how a raw value becomes the value of the channel.
func readCalibration(n node, s *calib.Spec) {
	if !n.is() {
		return
	}
	const hint = "give one of polynomial: [a0, a1, …], scale: with offset:, or points: [[4 mA, 0 kPa], [20 mA, 250 kPa]]"
	f := n.fields()
	defer f.done()
	raw, polynomial, scale, offset, points := f.get("raw"), f.get("polynomial"), f.get("scale"), f.get("offset"), f.get("points")
	if raw.is() {
		var err error
		if s.Raw, err = unit.Parse(raw.text()); err != nil {
			raw.unitFault(err)
			s.Raw = s.Unit
		}
	}
	kinds := 0
	for _, key := range []string{"polynomial", "scale", "points"} {
		if f.has(key) {
			kinds++
		}
	}
	switch {
	case !f.is():
	case kinds != 1 || f.has("offset") && !f.has("scale"):
		f.fault("the calibration is not clear", hint)
	case polynomial.is():
		for _, a := range polynomial.items() {
			s.Polynomial = append(s.Polynomial, a.number(0))
		}
		if len(s.Polynomial) < 2 || len(s.Polynomial) > 12 || !slices.ContainsFunc(s.Polynomial[1:], func(a float64) bool { return a != 0 }) {
			polynomial.fault("the polynomial does not depend on the raw value", "write 2 to 12 coefficients, the constant first")
		}
	case scale.is():
		s.Polynomial = []float64{offset.number(0), scale.number(1, bound{func(v float64) bool { return v != 0 }, "not be 0"})}
	case points.is():
		if f.has("raw") {
			raw.fault("the points say the raw unit already", "leave raw away")
		}
		readPoints(points, s)
	}
}

// readPoints reads a straight line through two points, each raw value with its
// value.
func readPoints(n node, s *calib.Spec) {
	const hint = "write [[4 mA, 0 kPa], [20 mA, 250 kPa]]"
	rows := n.items()
	if len(rows) != 2 {
		n.fault("a straight line has two points", hint)
		return
	}
	var x, y [2]float64
	var raw [2]unit.Unit
	for i, row := range rows {
		pair := row.items()
		if len(pair) != 2 {
			row.fault("a point is a raw value and its value", hint)
			return
		}
		v, u, err := unit.ParseValue(pair[0].text())
		if err != nil {
			pair[0].unitFault(err)
			return
		}
		value := pair[1].quantity(s.Unit.Dimension, math.NaN())
		if math.IsNaN(value) {
			return
		}
		raw[i], x[i], y[i] = u, round12(u.FromSI(v)), round12(s.Unit.FromSI(value))
	}
	switch {
	case raw[0] != raw[1]:
		n.fault("the points have different raw units", "write both in the unit that the sender sends")
	case x[0] == x[1] || y[0] == y[1]:
		n.fault("the points do not make a slope", "take two points that lie apart")
	default:
		slope := (y[1] - y[0]) / (x[1] - x[0])
		s.Raw, s.Polynomial = raw[0], []float64{round12(y[0] - slope*x[0]), slope}
	}
}

// readThermocouple reads the type and tolerance class of a thermocouple.
func readThermocouple(kind, class node, d unit.Dimension, c *calib.Thermocouple) {
	switch {
	case !kind.is() && !class.is():
		return
	case d != unit.Temperature:
		kind.fault("a thermocouple measures a temperature", "leave thermocouple and class away, or correct the unit")
		return
	case !kind.is() || !class.is():
		kind.fault("a thermocouple has a type and a class", "write {thermocouple: K, class: 1}")
		return
	}
	word := kind.choice("", "K", "N", "S", "R", "B", "J", "T", "E")
	if n := class.integer(0, 1, 3); word != "" && n != 0 {
		*c = calib.Thermocouple{Type: word[0], Class: n}
		if !c.Defined() {
			class.fault(fmt.Sprintf("IEC 60584-1 has no class %d of type %s", n, word), "name the class that the wire was bought to")
			*c = calib.Thermocouple{}
		}
	}
}

// readUncertainty reads the 95 % uncertainty of a channel.
func readUncertainty(n node, d unit.Dimension, u *calib.Uncertainty) {
	if !n.is() {
		return
	}
	f := n.fields()
	small := between(0, 0.5, "0 % and 50 %")
	u.FullScale = f.get("full_scale").share(0, small)
	reading := f.get("reading")
	u.Reading = reading.share(0, small)
	if reading.is() && d == unit.Temperature {
		reading.fault("per cent of a temperature depends on where its zero is", "state fixed: in K for the range that matters")
	}
	u.Fixed = f.get("fixed").quantity(difference(d), 0, notNegative)
	u.Random = f.get("random").quantity(difference(d), 0, notNegative)
	readThermocouple(f.get("thermocouple"), f.get("class"), d, &u.Thermocouple)
	f.done()
	u.Stated = f.is()
	if f.is() && !f.has("thermocouple") && u.FullScale == 0 && u.Reading == 0 && u.Fixed == 0 && u.Random == 0 {
		f.fault("the uncertainty is zero", "no sensor is exact: state it, or leave it away as not known")
	}
}
