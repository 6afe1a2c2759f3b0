package config

import (
	"bytes"
	"encoding/json"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"throatwatch/rules"
)

// defaults gives the default rules of the rig as a rule file. As a text in the
// bundle they stay what they were when a later program words them anew.
func (r *rig) defaults() File {
	list := rules.Default(r.equipment())
	rules.NameProcedures(list, func(key string) string { return r.procedures[key] })
	return File{Name: defaultRules, Text: render(list)}
}

// equipment says what the default rules can build on.
func (r *rig) equipment() rules.Equipment {
	s := &r.cfg.Compute.Stations
	return rules.Equipment{
		Bands:     r.cfg.Compute.EGT.Bands,
		Limits:    r.cfg.Compute.EGT.Limits,
		EGT:       len(s.EGT) > 0,
		Rake:      len(s.P7) > 0,
		Speed:     s.Speed >= 0,
		FuelFlow:  s.FuelFlow >= 0,
		Bellmouth: s.Bellmouth >= 0,
		OnFile:    slices.ContainsFunc(r.cfg.OnFile(), func(i int) bool { return r.cfg.Compute.InUse(i) }),
	}
}

// readProcedures reads the facility's procedures, by the situations that default
// rules are about.
func (r *rig) readProcedures(m *fields) {
	n := m.get("procedures")
	f := n.fields()
	r.procedures = make(map[string]string)
	for _, key := range rules.Situations(rules.Default(rules.AllEquipment())) {
		r.procedures[key] = f.get(key).label("")
	}
	f.done()
	r.blank = n
}

// warnUnnamed tells of the situations for which a rule in force refers to a procedure
// that nobody has named.
func (r *rig) warnUnnamed() {
	var keys []string
	for i := range r.cfg.Rules {
		if key, ok := rules.Unnamed(r.cfg.Rules[i].Response); ok && !slices.Contains(keys, key) {
			keys = append(keys, key)
		}
	}
	if len(keys) > 0 {
		r.blank.warn("no procedure is named for "+strings.Join(keys, ", ")+": their alarms show "+rules.Blank, "write procedures: {"+keys[0]+": …}, by the facility's own numbers")
	}
}

// DefaultRules gives the text of the default rules in the bundle, to begin a
// rule file from; "" when the rig does without.
func (b Bundle) DefaultRules() string {
	for _, f := range b.Files {
		if f.Name == defaultRules {
			return f.Text
		}
	}
	return ""
}

// render writes rules as a rule file; readRules gives the same rules back.
func render(list []rules.Rule) string {
	var b strings.Builder
	b.WriteString("# A rule replaces the default rule of the same name.\nrules:\n")
	for i := range list {
		r := &list[i]
		lead := "  - "
		write := func(key, value string) {
			b.WriteString(lead + key + ": " + value + "\n")
			lead = "    "
		}
		text := func(key, value string) {
			if value != "" {
				write(key, quote(value))
			}
		}
		span := func(key string, ns int64) {
			if ns != 0 {
				write(key, strconv.FormatFloat(float64(ns)/1e9, 'f', -1, 64)+" s")
			}
		}
		write("name", r.Name)
		text("when", r.When)
		write("priority", priorities()[r.Priority-1])
		span("on_delay", r.OnDelay)
		span("off_delay", r.OffDelay)
		if r.Deadband != 0 {
			write("deadband", strings.TrimSpace(strconv.FormatFloat(r.Deadband, 'g', -1, 64)+" "+r.DeadbandUnit))
		}
		if r.Latching {
			write("latching", "true")
		}
		if len(r.SuppressIn) > 0 {
			var phases []string
			for _, p := range r.SuppressIn {
				phases = append(phases, p.String())
			}
			write("suppress_in", fmt.Sprintf("[%s]", strings.Join(phases, ", ")))
		}
		text("value", r.Value)
		if r.Downward {
			write("downward", "true")
		}
		if r.WorsenBy != 0 {
			write("worsen_by", strings.TrimSpace(strconv.FormatFloat(r.WorsenBy, 'g', -1, 64)+" "+r.WorsenUnit))
		}
		if d := r.Unknown; d.Priority != 0 {
			write("unknown", fmt.Sprintf("{priority: %s, after: %s s}", d.Priority, strconv.FormatFloat(float64(d.After)/1e9, 'f', -1, 64)))
		}
		text("title", r.Title)
		text("text", r.Text)
		text("caution", r.Caution)
		text("response", r.Response)
		text("group", r.Group)
	}
	return b.String()
}

// quote writes a text as a double-quoted scalar: JSON's strings are YAML's too.
func quote(s string) string {
	var b bytes.Buffer
	encoder := json.NewEncoder(&b)
	encoder.SetEscapeHTML(false)
	if err := encoder.Encode(s); err != nil {
		panic(err) // a string: cannot fail
	}
	return strings.TrimSuffix(b.String(), "\n")
}
