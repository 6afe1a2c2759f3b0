package config

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// rule is a rule with the places of its fields.
type rule struct {
	rules.Rule
	node
	at map[string]node // by key
}

// derived is a derived name with the places of its fields.
type derived struct {
	rules.Derived
	node
	at map[string]node // by key
}

// readDerive reads a list of derived names, of a rig or rule file.
func (r *rig) readDerive(n node) {
	for _, item := range n.items() {
		f := item.placed()
		one := derived{node: item, at: f.at}
		one.Name = f.need("name", "rules and texts read it by this name").id()
		one.Period = r.cfg.Align.Period
		for _, word := range rules.Derivations() {
			of := f.get(word)
			switch {
			case !of.is():
			case one.Kind != 0:
				of.fault(fmt.Sprintf("%s beside %s", word, one.Kind), "a derived name is made in one way")
			default:
				one.Kind, _ = rules.ParseDerivation(word)
				one.Of = strings.TrimRight(of.text(), " \n")
			}
		}
		if one.Kind == 0 {
			f.fault("it does not say how it is made", "write one of "+strings.Join(rules.Derivations(), ", ")+" with an expression")
		}
		over := f.get("over")
		if one.Kind != rules.DeriveSince && one.Kind != 0 && !over.is() {
			f.fault(`key "over" is missing`, "the length of the window, as in over: 2 s")
		}
		one.Over = over.duration(0, positive)
		f.done()
		if one.Name != "" && one.Kind != 0 && (one.Over > 0 || one.Kind == rules.DeriveSince) {
			r.derived = append(r.derived, one)
		}
	}
}

// readRuleNames reads which rules the rig uses: the default ones, and rule files.
func (r *rig) readRuleNames(m *fields) {
	r.defaultRules = m.get("default_rules").choice("keep", "keep", "none") == "keep"
	for _, n := range m.get("rules").list() {
		file := n.text()
		switch {
		case !n.is():
		case !local(file):
			n.fault(fmt.Sprintf("%q is no file name that holds on any machine", file), "name it relative to the folder of the rig file, with /")
		case slices.ContainsFunc(r.ruleFiles, func(other node) bool { return other.text() == file }):
			n.fault(fmt.Sprintf("file %q is there twice", file), "name each file once")
		default:
			r.ruleFiles = append(r.ruleFiles, n)
		}
	}
}

// readRules reads a rule file. A rule replaces one of the same name of a file
// before, so that a site can word a default rule its own way.
func (r *rig) readRules(file File) {
	top := open(file)
	r.docs = append(r.docs, top.doc)
	if !top.is() {
		return
	}
	m := top.fields()
	r.readDerive(m.get("derive"))
	list := m.need("rules", "write rules: and a list")
	var here []rule
	for _, item := range list.items() {
		one := readRule(item)
		if slices.ContainsFunc(here, func(other rule) bool { return other.Name == one.Name && one.Name != "" }) {
			one.at["name"].fault(fmt.Sprintf("rule %q is there twice", one.Name), "give each rule its own name")
		}
		here = append(here, one)
	}
	m.done()
	r.take(here)
}

// take adds rules; one of a name that is there already replaces it.
func (r *rig) take(more []rule) {
	for _, one := range more {
		if i := slices.IndexFunc(r.rules, func(other rule) bool { return other.Name == one.Name && one.Name != "" }); i >= 0 {
			r.rules[i] = one
		} else {
			r.rules = append(r.rules, one)
		}
	}
}

// priorities are the words for the priorities, in the order of rules.Priority.
func priorities() []string { return []string{"note", "advisory", "caution", "warning"} }

func readRule(n node) rule {
	f := n.placed()
	var out rules.Rule
	out.Name = f.need("name", "the name that records and acknowledgements use").id()
	out.When = strings.TrimRight(f.need("when", "the condition, such as egt_spread_k > 60").text(), " \n")
	out.Priority = f.priority()
	out.OnDelay = f.get("on_delay").duration(0)
	out.OffDelay = f.get("off_delay").duration(0)
	out.Deadband, out.DeadbandUnit = f.get("deadband").numberWithUnit(notNegative)
	out.Latching = f.get("latching").flag(false)
	out.SuppressIn = readPhases(f.get("suppress_in"))
	out.Value = oneLine(f.get("value").text())
	out.Downward = f.get("downward").flag(false)
	out.WorsenBy, out.WorsenUnit = f.get("worsen_by").numberWithUnit(notNegative)
	out.Unknown = readDoubt(f.get("unknown"))
	out.Title = f.get("title").prose(strings.ReplaceAll(out.Name, "_", " "))
	out.Text = f.get("text").prose(out.Title)
	out.Caution, out.Response = readAdvice(f, out.Priority)
	out.Group = f.get("group").id()
	f.done()
	return rule{Rule: out, node: n, at: f.at}
}

// readLimits reads the limit bands of a channel and makes a rule of each. The
// limit is in the reading of the channel: of a gauge channel it is a gauge
// pressure, whereas rules see absolute ones.
func (r *rig) readLimits(c *channel, id, title string, s *calib.Spec) {
	var own []limit
	for _, item := range c.get("limits").items() {
		f := item.placed()
		key, sign := "above", ">"
		if f.has("below") {
			key, sign = "below", "<"
		}
		if f.has("above") == f.has("below") {
			f.fault("a limit has one side", "write above: or below: with a value")
			f.taken = append(f.taken, "above", "below")
		}
		d := s.Unit.Dimension
		at := f.get(key)
		level := at.quantity(d, math.NaN(), bound{func(v float64) bool { return v > s.Low && v < s.High }, "lie inside the range of the channel"})
		level = round12(level)
		out := rules.Rule{
			Name:       f.get("name").id(),
			When:       fmt.Sprintf("channel.%s %s %s", id, sign, strconv.FormatFloat(level, 'g', -1, 64)),
			Priority:   f.priority(),
			OnDelay:    f.get("for").duration(0),
			OffDelay:   f.get("off_delay").duration(second),
			Deadband:   f.get("deadband").quantity(difference(d), 0, notNegative),
			Latching:   f.get("latching").flag(false),
			SuppressIn: readPhases(f.get("suppress_in")),
			WorsenBy:   f.get("worsen_by").quantity(difference(d), 0, notNegative),
			Unknown:    readDoubt(f.get("unknown")),
			Title:      fmt.Sprintf("%s %s %s", title, key, at.text()),
		}
		if out.Name == "" {
			out.Name = strings.Join([]string{id, key, priorities()[out.Priority-1]}, "_")
		}
		if s.Reference == calib.Gauge && c.port.is() {
			out.When = fmt.Sprintf("channel.%s - channel.%s %s %s", id, c.port.text(), sign, strconv.FormatFloat(level, 'g', -1, 64))
			out.Value = fmt.Sprintf("channel.%s - channel.%s", id, c.port.text())
		}
		out.Text = out.Title
		if out.OnDelay > 0 {
			out.Text += " for " + strings.TrimSpace(f.get("for").text())
		}
		out.Text += ". Follow the facility's procedure. This display is not protection."
		out.Caution, out.Response = readAdvice(f, out.Priority)
		f.done()
		if math.IsNaN(level) {
			continue // a fault already
		}
		f.at["when"] = at
		if slices.ContainsFunc(r.limits, func(other rule) bool { return other.Name == out.Name }) {
			item.fault(fmt.Sprintf("rule %q is there twice", out.Name), "give each limit its own name:, or leave names away when a like: repeats them")
		}
		r.limits = append(r.limits, rule{Rule: out, node: item, at: f.at})
		this := limit{level, key == "above", out.Priority, out.SuppressIn, at}
		for i := range own {
			if own[i].contradicts(&this) {
				break
			}
		}
		own = append(own, this)
	}
}

// limit is a limit of a channel among the others of that channel.
type limit struct {
	level    float64
	above    bool
	priority rules.Priority
	suppress []monitor.Phase
	node
}

// contradicts notes that two limits of a channel cannot both be meant, where there
// is a phase in which both act.
func (a *limit) contradicts(b *limit) bool {
	together := false
	for p := monitor.Off; p < monitor.NumPhases; p++ {
		together = together || !slices.Contains(a.suppress, p) && !slices.Contains(b.suppress, p)
	}
	if !together {
		return false
	}
	beyond, before := b, a // which of two on the same side lies further out
	if (b.level < a.level) == b.above {
		beyond, before = a, b
	}
	switch {
	case a.above == b.above && a.level == b.level:
		b.fault(fmt.Sprintf("limit %s is there twice", b.text()), "keep one, or suppress each in the phases of the other")
	case a.above == b.above && beyond.priority < before.priority:
		b.fault(
			fmt.Sprintf("limit %s has priority %s, and %s beyond it only %s", before.text(), before.priority, beyond.text(), beyond.priority),
			"further out the priority is the same or higher",
		)
	case a.above != b.above && (a.level <= b.level) == a.above:
		b.fault(fmt.Sprintf("every value is beyond one of the limits %s and %s", a.text(), b.text()), "above: lies higher than below:")
	default:
		return false
	}
	return true
}

// readDoubt reads how a rule that cannot be judged raises an alarm of its own.
func readDoubt(n node) rules.Doubt {
	if !n.is() {
		return rules.Doubt{}
	}
	f := n.placed()
	out := rules.Doubt{Priority: f.priority(), After: f.get("after").duration(3 * second)}
	f.done()
	return out
}

// readAdvice reads what goes with an alarm. Every alarm has a caution, and one
// that needs a response names the procedure.
func readAdvice(f *placed, p rules.Priority) (caution, response string) {
	var c, a node
	if p > rules.Note {
		c = f.need("caution", "tell the operator what it means and what to watch")
	} else {
		c = f.get("caution")
	}
	if p >= rules.Caution {
		a = f.need("response", "name the facility procedure that applies")
	} else {
		a = f.get("response")
	}
	return c.prose(""), a.prose("")
}

// placed is a mapping that remembers where its keys are.
type placed struct {
	*fields
	at map[string]node
}

func (n node) placed() *placed { return &placed{fields: n.fields(), at: make(map[string]node)} }

func (p *placed) get(key string) node {
	p.at[key] = p.fields.get(key)
	return p.at[key]
}

func (p *placed) need(key, hint string) node {
	p.at[key] = p.fields.need(key, hint)
	return p.at[key]
}

func (p *placed) priority() rules.Priority {
	word := p.need("priority", "one of "+strings.Join(priorities(), ", ")).choice("note", priorities()...)
	return rules.Priority(1 + slices.Index(priorities(), word))
}

func readPhases(n node) []monitor.Phase {
	var out []monitor.Phase
	for _, item := range n.list() {
		phase, ok := monitor.ParsePhase(item.text())
		if !ok || phase == monitor.PhaseUnknown {
			item.fault(fmt.Sprintf("%q is no phase in which an alarm can be suppressed", item.text()), nearest(item.text(), phases()))
			continue
		}
		out = append(out, phase)
	}
	return out
}

func phases() []string {
	var out []string
	for p := monitor.Off; p < monitor.NumPhases; p++ {
		out = append(out, p.String())
	}
	return out
}

// prose reads a text that an operator sees in an alarm.
func (n node) prose(fallback string) string {
	text := oneLine(n.text())
	switch {
	case !n.is():
		return fallback
	case text == "":
		n.fault("the text is empty", "write what the operator needs to know")
	case len(text) > 500:
		n.fault("the text is too long to be read in an alarm", "500 letters at most")
	}
	return text
}

// compileRules compiles all rules and notes their faults where they are
// written. It marks the channels that a rule judges.
func (r *rig) compileRules() {
	for i := range r.rules {
		one := &r.rules[i]
		r.cfg.Rules = append(r.cfg.Rules, one.Rule)
		for _, key := range []string{"title", "text", "caution", "response"} {
			one.at[key].checkText()
		}
	}
	for i := range r.derived {
		r.cfg.Derived = append(r.cfg.Derived, r.derived[i].Derived)
	}
	set, faults := rules.Compile(r.cfg.Rules, pipeline.Names(&r.cfg), r.cfg.Derived...)
	for _, f := range faults {
		r.placeFault(&f)
	}
	if set == nil {
		return
	}
	for i := range set.Len() {
		r.use(set.Reads(i))
	}
	for i := range r.derived {
		r.use(set.DerivedReads(i))
	}
	r.warnUnnamed()
	for _, i := range set.Unused() {
		r.derived[i].at["name"].warn(fmt.Sprintf("nothing reads %q", r.derived[i].Name), "name it in a rule, or leave it away")
	}
}

// placeFault notes a fault of a rule or a derived name where it is written.
func (r *rig) placeFault(f *rules.Fault) {
	var place, whole node
	var ok, written bool // written: the field is what the file says, letter by letter
	if f.Derived {
		one := &r.derived[f.Rule]
		place, ok = one.at[f.Field]
		whole, written = one.node, true
	} else {
		one := &r.rules[f.Rule]
		place, ok = one.at[f.Field]
		whole, written = one.node, f.Field != "when" || one.When == strings.TrimRight(place.text(), " \n")
		if f.Field == "name" && one.Name == "" {
			return // a fault already
		}
	}
	switch {
	case !ok:
		place = whole
	case !place.is(): // a fault already
		return
	}
	line, col := place.line, place.col
	if written {
		line, col = place.inside(f.Offset)
	}
	place.faultAt(line, col, f.Message, f.Hint)
}

// use marks the channels among names as used.
func (r *rig) use(names []string) {
	for _, name := range names {
		if _, id, ok := strings.Cut(name, "."); ok {
			if ch := r.index(id); ch >= 0 {
				r.used[ch] = true
			}
		}
	}
}

// checkText refuses a text that orders an action or promises safety.
func (n node) checkText() {
	var bad *rules.TextError
	if !n.is() || !errors.As(rules.CheckText(n.text()), &bad) {
		return
	}
	line, col := n.inside(max(0, strings.Index(n.text(), bad.Words)))
	n.faultAt(line, col, fmt.Sprintf("%q %s", bad.Words, bad.Why), bad.Hint)
}

// markRecordedOnly marks the channels that no station, reference and rule uses.
func (r *rig) markRecordedOnly() {
	for i := range r.cfg.Compute.Channels {
		r.cfg.Compute.Channels[i].RecordedOnly = !r.used[i]
	}
}
