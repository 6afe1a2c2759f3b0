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
	SuppressIn   []monitor.Phase // suppressed by design; an unknown phase suppresses nothing
	Title        string
	Text         string // what happened, with {name:unit.digits} places
	Caution      string // what it means and what to watch
	Response     string // which facility procedure applies
	Group        string // rules of one cause: the others are listed under the first
}
