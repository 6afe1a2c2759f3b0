package rules

import (
	"regexp"
	"slices"
	"strings"
)

const (
	// procedureFor begins the response of a default rule; what follows is the
	// situation, and a point.
	procedureFor = "Facility procedure for "
	// Blank stands where the facility has named no procedure.
	Blank = "___"
	// lostInstrumentation is the situation in which a rule cannot be judged.
	lostInstrumentation = "lost instrumentation"
)

var notInKey = regexp.MustCompile(`[^a-z0-9]+`)

// situationKey gives the key of a situation in a rig file: "a hung start" is
// hung_start.
func situationKey(situation string) string {
	words := strings.ToLower(situation)
	for _, article := range []string{"a ", "an "} {
		words = strings.TrimPrefix(words, article)
	}
	return strings.Trim(notInKey.ReplaceAllString(words, "_"), "_")
}

// situation gives what the response of a default rule is about.
func situation(response string) (string, bool) {
	s, ok := strings.CutPrefix(response, procedureFor)
	return strings.TrimSuffix(s, "."), ok
}

// Situations lists the keys of the situations for which default rules refer to a
// procedure of the facility, in the order of the rules.
func Situations(list []Rule) []string {
	var keys []string
	for i := range list {
		if s, ok := situation(list[i].Response); ok && !slices.Contains(keys, situationKey(s)) {
			keys = append(keys, situationKey(s))
		}
	}
	return keys
}

// NameProcedures puts the facility's procedures into the responses of default
// rules. named gives the procedure of a situation's key, "" = none: a blank stays to
// be seen.
func NameProcedures(list []Rule, named func(key string) string) {
	for i := range list {
		s, ok := situation(list[i].Response)
		if !ok {
			continue
		}
		procedure := named(situationKey(s))
		if procedure == "" {
			procedure = Blank
		}
		list[i].Response = "Follow facility procedure " + procedure + " for " + s + "."
	}
}

// Unnamed gives the key of the situation for which a response has a blank.
func Unnamed(response string) (key string, ok bool) {
	s, ok := strings.CutPrefix(response, "Follow facility procedure "+Blank+" for ")
	return situationKey(strings.TrimSuffix(s, ".")), ok
}

// responseFor gives the response that rules have to a situation.
func responseFor(list []Rule, s string) string {
	for i := range list {
		if strings.HasSuffix(list[i].Response, " for "+s+".") {
			return list[i].Response
		}
	}
	return procedureFor + s + "."
}
