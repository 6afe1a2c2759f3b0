// Package egt keeps the ledger of exhaust-gas-temperature allowances: for each
// band how long the indicated EGT has been above its limit in this excursion
// and in this run, against what the band allows.
//
// Bands act on the indicated EGT only: the harness value as the engine's limits
// are written for it. The clock of an excursion is event time; it runs through
// gaps in the data while the last good value was above the limit, and what was
// not seen is kept apart as assumed.
//
// Beside it goes the life of each engine: starts and how they went, cycles, hours
// lit, time above each band; and of each nozzle.
package egt

// Kind says when a band holds.
type Kind uint8

// The kinds of band.
const (
	KindRun   Kind = iota + 1 // always
	KindStart                 // until idle is first reached
)

// String gives the kind as a rig file writes it.
func (k Kind) String() string {
	switch k {
	case KindRun:
		return "run"
	case KindStart:
		return "start"
	}
	return "invalid"
}

// Band is a limit with the time for which it may be exceeded.
type Band struct {
	Name      string // [a-z][a-z0-9_]*
	Kind      Kind
	Limit     float64 // K
	Allowance int64   // ns above Limit allowed per excursion; 0 = none at all
	PerRun    int64   // ns above Limit allowed per run; 0 = not limited
	Deadband  float64 // K: an excursion ends only below Limit − Deadband …
	Rearm     int64   // … for this long, ns
}

// Config holds the bands of an engine, MaxBands at most, and whose life is counted.
type Config struct {
	Bands  []Band
	Serial string // of the engine; the pipeline sets it
	Nozzle string // serial number of the nozzle, "" = not stated; likewise
	Limits Limits
}

// Limits are what the default rules hold an engine against beside the bands. Zero is
// none.
type Limits struct {
	Spread      float64 // K, hottest less coldest probe
	Rise        float64 // K above the lowest indicated EGT since the fuel is off
	StarterOnce int64   // ns of cranking in one go
	StarterHour int64   // ns of cranking in an hour
	StarterRuns int     // how often the starter may be engaged in an hour
	Rundown     int64   // ns, shortest rundown
	CoolFuelOff int64   // ns from the fuel being off to the next start
	CoolRest    int64   // ns from the rotor at rest to the next start
}
