// Package rules judges operating points: rules are typed expressions over the
// trade's quantity names, each with an alarm that follows the state table of
// ISA-18.2.
//
// An expression has three values: true, false and unknown. A rule that reads a
// bad or stale input is unknown, never silently false.
package rules

import "throatwatch/monitor"

// Priority is the urgency of an alarm after 14 CFR 25.1322.
type Priority uint8

// The priorities, most urgent last. A note is for the record: it never sounds.
const (
	Note     Priority = iota + 1
	Advisory          // awareness
	Caution           // immediate awareness, later response
	Warning           // immediate awareness and response
)

// Rule is one rule as its author wrote it, with the times in ns.
type Rule struct {
	Name         string // [a-z][a-z0-9_]*
	When         string // expression
	Priority     Priority
	OnDelay      int64
	OffDelay     int64
	Deadband     float64 // a comparison that raised returns only this far beyond, in DeadbandUnit
	DeadbandUnit string  // "" = the unit of the quantity that is compared
	Latching     bool
	Value        string          // expression of the number that is the alarm's value; "" = what is compared first, else the first number of the text
	Downward     bool            // the value gets worse as it falls; a comparison of it with a limit tells by itself
	WorsenBy     float64         // an acknowledged alarm asks again when its value has gone this far beyond what was annunciated, in WorsenUnit; 0 = never
	WorsenUnit   string          // "" = the unit of the value
	Unknown      Doubt           // the alarm that tells that this rule cannot be judged
	SuppressIn   []monitor.Phase // suppressed by design; an unknown phase suppresses nothing
	Title        string
	Text         string // what happened, with {name:unit.digits} places
	Caution      string // what it means and what to watch
	Response     string // which facility procedure applies
	Group        string // rules of one cause: the others are listed under the first
}

// Doubt says how a rule that cannot be judged raises an alarm of its own. The zero
// value raises none: that the rule is unknown is shown all the same.
type Doubt struct {
	Priority Priority
	After    int64 // ns for which the rule has to be unknown
}
