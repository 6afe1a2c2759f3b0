package config

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/unit"
	"throatwatch/rules"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// LoadCard reads the file of a test card for a rig. It gives its text too; the card is
// usable when there is no fault.
func LoadCard(name string, cfg *pipeline.Config) (c card.Card, text string, faults []Fault) {
	folder, base := filepath.Split(name)
	text, err := read(name)
	if err != nil {
		return c, "", []Fault{{File: name, Message: err.Error(), Hint: "give the path of a test card"}}
	}
	c, faults = ParseCard(base, text, cfg)
	return c, text, place(faults, folder)
}

// CardHash gives the hex SHA-256 of the text of a card.
func CardHash(text string) string {
	sum := sha256.Sum256([]byte(text))
	return hex.EncodeToString(sum[:])
}

// ParseCard reads the text of a test card; name is that of its file, for faults.
func ParseCard(name, text string, cfg *pipeline.Config) (card.Card, []Fault) {
	f := File{name, text}
	top := open(f)
	if !top.is() {
		return card.Card{}, top.doc.faults
	}
	if len(text) > card.MostText {
		top.fault("the card is too long", fmt.Sprintf("%d KiB at most", card.MostText>>10))
		return card.Card{}, top.doc.faults
	}
	r := cardReader{cfg: cfg, names: pipeline.Names(cfg)}
	c := r.read(top.fields())
	if len(top.doc.faults) == 0 {
		if err := cfg.FitsCard(&c); err != nil {
			top.fault(err.Error(), "correct the card, or load it on the rig that it is for")
		}
	}
	if len(top.doc.faults) > 0 {
		return card.Card{}, tidy(top.doc.faults, []File{f})
	}
	return c, nil
}

// cardReader reads a test card for a rig.
type cardReader struct {
	cfg   *pipeline.Config
	names []rules.Name // what a target may be of, among others
	all   *fields      // what stands for every point that says nothing else
}

func (r *cardReader) read(m *fields) (c card.Card) {
	h := m.need("card", "begin with card: {title: …, number: …, revision: …, by: …, for: SERIAL}").fields()
	c.Title = h.get("title").label("")
	c.Number = h.need("number", "the number by which people call the card").label("")
	c.Revision = h.get("revision").label("")
	c.By = h.need("by", "the engineer who made it").label("")
	engine := h.get("for")
	if c.For = engine.label(""); c.For != "" && c.For != r.cfg.Rig.EngineSerial {
		engine.fault(fmt.Sprintf("the card is for engine %s, the rig has %s", c.For, r.cfg.Rig.EngineSerial), "load it on the rig with that engine, or correct the serial number")
	}
	h.done()
	r.all = m.get("all").fields()
	points := m.need("points", "list the points in their order, - {name: …, targets: {…}}")
	items := points.items()
	switch {
	case points.empty():
		points.fault("the card has no points", "list them in their order, - {name: …, targets: {…}}")
	case len(items) > card.MostPoints:
		points.fault(fmt.Sprintf("the card has %d points", len(items)), fmt.Sprintf("%d at most", card.MostPoints))
		items = nil
	}
	for _, n := range items {
		pt := r.point(n.fields())
		if pt.Name != "" && slices.ContainsFunc(c.Points, func(o card.Point) bool { return o.Name == pt.Name }) {
			n.fault(fmt.Sprintf("point %q is there twice", pt.Name), "give each a name of its own")
		}
		c.Points = append(c.Points, pt)
	}
	for _, key := range pointDefaults {
		r.all.get(key)
	}
	r.all.done()
	m.done()
	return c
}

// pointDefaults are the keys that all: may hold for every point.
var pointDefaults = []string{"soak", "average", "take", "good"}

// key takes a key of a point, or what stands for all.
func (r *cardReader) key(f *fields, key string) node {
	if n := f.get(key); f.has(key) {
		return n
	}
	return r.all.get(key)
}

func (r *cardReader) point(f *fields) (pt card.Point) {
	pt.Name = f.need("name", "a few words by which people call the point").label("")
	const longest = 3600
	pt.Soak = r.key(f, "soak").quantity(unit.Time, 0, between(0, longest, "0 s and 3600 s"))
	average := r.key(f, "average")
	pt.Average = average.quantity(unit.Time, 0, between(2, longest, "2 s and 3600 s"))
	if f.is() && !average.is() {
		f.fault(`key "average" is missing`, "the time over which the point is averaged, as 20 s; or once for all points in all:")
	}
	pt.Auto = r.key(f, "take").choice("by hand", "by hand", "automatic") == "automatic"
	pt.Needs = []card.Need{}
	for _, n := range r.key(f, "good").items() {
		pt.Needs = append(pt.Needs, r.need(n))
	}
	if pt.Choke = f.get("expect_choke").choice("", card.Armed, card.Disarmed); pt.Choke != card.Armed && pt.Choke != card.Disarmed {
		pt.Choke = ""
	}
	const hint = `write one or more, as referred_speed_rpm: 92 % ± 0.3 %, or choke_margin_percent: above 5 %`
	targets := f.need("targets", hint)
	t := targets.fields()
	for _, e := range t.entries {
		t.taken = append(t.taken, e.key)
		if one, ok := r.target(e, t.at(e)); ok {
			pt.Targets = append(pt.Targets, one)
		}
	}
	if targets.is() && len(t.entries) == 0 || len(t.entries) > card.MostTargets {
		targets.fault(fmt.Sprintf("the point has %d targets, 1 to %d can be", len(t.entries), card.MostTargets), hint)
	}
	f.done()
	return pt
}

// need reads the name of a channel, or of a station with probes, that must be good.
func (r *cardReader) need(n node) card.Need {
	id := n.text()
	channels := r.cfg.Compute.Channels
	if slices.ContainsFunc(channels, func(c compute.Channel) bool { return c.ID == id }) {
		return card.Need{Name: id, Channels: []string{id}, Least: 1}
	}
	st := &r.cfg.Compute.Stations
	groups := map[string]struct {
		probes []int
		least  int
	}{"p7": {st.P7, st.MinP7}, "t7": {st.T7, st.MinT7}, "egt": {st.EGT, st.MinEGT}}
	g, ok := groups[id]
	if !ok || len(g.probes) == 0 {
		names := []string{"p7", "t7", "egt"}
		for i := range channels {
			names = append(names, channels[i].ID)
		}
		n.fault(fmt.Sprintf("the rig has neither a channel nor probes of a station %q", id), nearest(id, names))
		return card.Need{}
	}
	need := card.Need{Name: id, Least: max(1, g.least)}
	for _, i := range g.probes {
		need.Channels = append(need.Channels, channels[i].ID)
	}
	return need
}

// target reads where a quantity has to be: A ± B, above A, below A, or between A and B.
func (r *cardReader) target(e entry, n node) (t card.Target, ok bool) {
	name, ok := r.nameOf(e)
	text := strings.Join(strings.Fields(n.text()), " ")
	if !ok || !n.is() || text == "" {
		return t, false
	}
	t.Quantity, t.Unit, t.Text, t.Title = e.key, name.Unit, text, r.title(e.key)
	s := scale{name: name, full: r.cfg.Compute.Phase.Max}
	value := func(text string) rules.Reading {
		v, fine := s.value(n, strings.TrimSpace(text))
		ok = ok && fine
		return rules.Reading{V: v, Known: fine}
	}
	for _, sign := range []struct{ from, to string }{{"+/-", "±"}, {"+-", "±"}, {">", "above "}, {"<", "below "}} {
		text = strings.Replace(text, sign.from, sign.to, 1)
	}
	a, b, both := strings.Cut(text, "±")
	switch {
	case both:
		t.Value = value(a)
		if !ok {
			break
		}
		var tolerance float64
		if tolerance, ok = s.tolerance(n, strings.TrimSpace(b), t.Value.V); ok {
			t.Tolerance = rules.Reading{V: tolerance, Known: true}
			t.Low = rules.Reading{V: t.Value.V - tolerance, Known: true}
			t.High = rules.Reading{V: t.Value.V + tolerance, Known: true}
		}
	case strings.HasPrefix(text, "above "):
		t.Low = value(text[len("above "):])
	case strings.HasPrefix(text, "below "):
		t.High = value(text[len("below "):])
	case strings.HasPrefix(text, "between ") && strings.Contains(text, " and "):
		a, b, _ = strings.Cut(text[len("between "):], " and ")
		t.Low, t.High = value(a), value(b)
		if ok && !(t.Low.V < t.High.V) {
			n.fault(fmt.Sprintf("%q: the first is not below the second", n.text()), "write the lower one first")
			ok = false
		}
	default:
		n.fault(fmt.Sprintf("%q is no target", n.text()), "write 92 % ± 0.3 %, above 5 %, below 650 degC, or between 2.0 and 2.2")
		ok = false
	}
	return t, ok
}

// nameOf finds what a target is of.
func (r *cardReader) nameOf(e entry) (rules.Name, bool) {
	of := func(n rules.Name) bool {
		_, quantity := monitor.ParseQuantity(n.Name)
		return n.Type == rules.Number && (quantity || strings.HasPrefix(n.Name, "channel."))
	}
	i := slices.IndexFunc(r.names, func(n rules.Name) bool { return n.Name == e.key && of(n) })
	if i < 0 {
		var names []string
		for _, n := range r.names {
			if of(n) {
				names = append(names, n.Name)
			}
		}
		e.at.fault(fmt.Sprintf("there is no quantity %q", e.key), nearest(e.key, names))
		return rules.Name{}, false
	}
	n := r.names[i]
	if n.Dimension == unit.Invalid || n.Rate {
		e.at.fault(fmt.Sprintf("%q cannot be a target", e.key), "name a quantity with a plain unit; that it does not move is asked for by steady: in the rig file")
		return n, false
	}
	return n, true
}

func (r *cardReader) title(key string) string {
	if q, ok := monitor.ParseQuantity(key); ok {
		return q.Info().Title
	}
	for i := range r.cfg.Compute.Channels {
		if c := &r.cfg.Compute.Channels[i]; "channel."+c.ID == key {
			return c.Title
		}
	}
	return ""
}

// scale gives numbers in the unit that a quantity has in an operating point.
type scale struct {
	name rules.Name
	full float64 // rpm, 100 % speed
}

// speed tells whether the quantity may be given in % of full speed.
func (s *scale) speed() bool { return s.name.Unit == "rpm" }

// own gives the unit of the quantity, as that of a difference if diff.
func (s *scale) own(diff bool) unit.Unit {
	u := s.name.Dimension.SI()
	if named, err := unit.Parse(s.name.Unit); err == nil && s.name.Unit != "" {
		u = named
	}
	if diff {
		return u.Difference()
	}
	return u
}

// percent reads text as a number of percent.
func percent(text string) (float64, bool) {
	v, u, err := unit.ParseValue(text)
	return 100 * v, err == nil && u.Name == "%"
}

// value reads a number with its unit.
func (s *scale) value(n node, text string) (float64, bool) {
	if v, ok := percent(text); ok && s.speed() {
		return v / 100 * s.full, true
	}
	return s.in(n, text, false)
}

func (s *scale) in(n node, text string, diff bool) (float64, bool) {
	u := s.own(diff)
	v, written, err := unit.ParseValueAs(text, u.Dimension)
	switch {
	case err != nil:
		n.unitFault(err)
		return 0, false
	case s.name.Unit == "%" && written.Name != "%":
		n.fault(fmt.Sprintf("%q has no unit", text), "write it in %")
		return 0, false
	}
	return round12(u.FromSI(v)), true
}

// tolerance reads what may be on either side of a value: in the unit of the quantity, in
// % of full speed for a speed, else in % of the value.
func (s *scale) tolerance(n node, text string, value float64) (float64, bool) {
	v, ok := percent(text)
	switch {
	case !ok, s.name.Unit == "%":
		v, ok = s.in(n, text, true)
	case s.speed():
		v = v / 100 * s.full
	case s.name.Dimension == unit.Temperature:
		n.fault(fmt.Sprintf("%q: a temperature has no tolerance in %%", n.text()), "write it in K")
		return 0, false
	default:
		v = v / 100 * math.Abs(value)
	}
	if ok && math.Abs(value)+v > math.MaxFloat64 {
		n.fault(fmt.Sprintf("%q is too large", n.text()), "check the number and its unit")
		return 0, false
	}
	if ok && !(v > 0) {
		n.fault(fmt.Sprintf("%q: the tolerance is not greater than 0", n.text()), "write what may be on either side, as 92 % ± 0.3 %")
		return 0, false
	}
	return v, ok
}
