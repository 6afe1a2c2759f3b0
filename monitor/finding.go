package monitor

// FindingKind is what is wrong with a sensor. The zero value is nothing.
type FindingKind uint8

// The kinds of finding.
const (
	NoFinding      FindingKind = iota
	FindingOpen                // thermocouple open: burn-out code, or beyond full scale
	FindingShort               // thermocouple reads its cold junction while its mates are hot
	FindingStuck               // not one bit of change, or no response at all
	FindingSlow                // follows as its mates do behind a lag
	FindingBlocked             // pressure line blocked: hardly follows its mates
	FindingDrift               // departure from its own pattern that has grown slowly
	FindingHot                 // reads hot against its own pattern; a hot streak in the gas, unless proven otherwise
	FindingCold                // reads cold against its own pattern
	FindingZero                // reads too much or too little by the same amount at every pressure
	FindingLeak                // reads the same part of the gauge pressure of its mates
	FindingDeparts             // departs from its own pattern, and it cannot be told yet how
	FindingCode                // its sender says that there is no reading
	FindingRange               // outside its range
	FindingRate                // changes faster than it can
	numFindings
)

var findingNames = [numFindings]string{
	"", "open", "short", "stuck", "slow", "blocked", "drift", "hot_streak", "cold_streak", "zero_shift", "leak", "departs", "no_reading", "out_of_range", "rate",
}

// String gives the code used in JSON, "" for nothing.
func (k FindingKind) String() string { return name(findingNames[:], k) }

// Dead tells whether a sensor of this finding does not respond at all, or hardly.
func (k FindingKind) Dead() bool { return k == FindingStuck || k == FindingBlocked }

// FindingKinds gives the codes of all kinds of finding.
func FindingKinds() []string { return append([]string(nil), findingNames[1:]...) }

// Finding is what was found of a sensor.
type Finding struct {
	Kind   FindingKind
	Proven bool    // else suspected: what it reads may be real
	Since  int64   // event time, ns UTC
	Size   float64 // by how much: K, Pa, s of lag, or the part of the pressure that is missing; 0 where there is no number
}
