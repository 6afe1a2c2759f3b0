package config

import (
	"bytes"
	"encoding/json"
	"fmt"
	"strconv"
	"strings"

	"throatwatch/rules"
)

// defaults gives the default rules of the rig as a rule file. As a text in the
// bundle they stay what they were when a later program words them anew.
func (r *rig) defaults() File {
	s := &r.cfg.Compute.Stations
	list := rules.Default(rules.Equipment{
		Bands:     r.cfg.Compute.EGT.Bands,
		Limits:    r.cfg.Compute.EGT.Limits,
		EGT:       len(s.EGT) > 0,
		Rake:      len(s.P7) > 0,
		Speed:     s.Speed >= 0,
		FuelFlow:  s.FuelFlow >= 0,
		Bellmouth: s.Bellmouth >= 0,
	})
	return File{Name: defaultRules, Text: render(list)}
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
