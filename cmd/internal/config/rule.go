package config

import (
	"fmt"
	"regexp"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/rules"
)

// rule is a rule with the places of its fields.
type rule struct {
	rules.Rule
	node
	at map[string]node // by key
}

// readRuleNames reads which rule files the rig uses.
func (r *rig) readRuleNames(m *fields) {
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
	for _, one := range here {
		if i := slices.IndexFunc(r.rules, func(other rule) bool { return other.Name == one.Name }); i >= 0 {
			r.rules[i] = one
		} else {
			r.rules = append(r.rules, one)
		}
	}
}

// priorities are the words for the priorities, in the order of rules.Priority.
func priorities() []string { return []string{"note", "advisory", "caution", "warning"} }

func readRule(n node) rule {
	f := n.fields()
	at := make(map[string]node)
	get := func(key string) node { at[key] = f.get(key); return at[key] }
	need := func(key, hint string) node { at[key] = f.need(key, hint); return at[key] }

	var out rules.Rule
	out.Name = need("name", "the name that records and acknowledgements use").id()
	out.When = strings.TrimRight(need("when", "the condition, such as egt_spread_k > 60").text(), " \n")
	out.Priority = rules.Priority(1 + slices.Index(priorities(), need("priority", "one of "+strings.Join(priorities(), ", ")).choice("note", priorities()...)))
	out.OnDelay = get("on_delay").duration(0)
	out.OffDelay = get("off_delay").duration(0)
	out.Deadband = get("deadband").number(0, notNegative)
	out.Latching = get("latching").flag(false)
	for _, item := range get("suppress_in").list() {
		phase, ok := monitor.ParsePhase(item.text())
		if !ok || phase == monitor.PhaseUnknown {
			item.fault(fmt.Sprintf("%q is no phase in which an alarm can be suppressed", item.text()), nearest(item.text(), phases()))
			continue
		}
		out.SuppressIn = append(out.SuppressIn, phase)
	}
	out.Title = get("title").prose(strings.ReplaceAll(out.Name, "_", " "))
	out.Text = get("text").prose(out.Title)
	if out.Priority == rules.Note {
		out.Caution = get("caution").prose("")
	} else {
		out.Caution = need("caution", "tell the operator what it means and what to watch").prose("")
	}
	if out.Priority >= rules.Caution {
		out.Response = need("response", "name the facility procedure that applies").prose("")
	} else {
		out.Response = get("response").prose("")
	}
	out.Group = get("group").id()
	f.done()
	return rule{Rule: out, node: n, at: at}
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

// channelName finds the channels in an expression.
var channelName = regexp.MustCompile(`\b(?:channel|quality|usable)\.([a-z][a-z0-9_]*)`)

// markRecordedOnly finds the channels that no station, reference and rule uses.
func (r *rig) markRecordedOnly() {
	for _, one := range r.rules {
		for _, match := range channelName.FindAllStringSubmatch(one.When, -1) {
			if i := r.index(match[1]); i >= 0 {
				r.used[i] = true
			}
		}
	}
	for i := range r.cfg.Compute.Channels {
		r.cfg.Compute.Channels[i].RecordedOnly = !r.used[i]
	}
}
