package monitor

// Quality says how far the value of a channel in a scan can be used. The zero
// value is QualityMissing.
type Quality uint8

// The qualities. Only Good and Held may enter a computation.
const (
	QualityMissing     Quality = iota // no sample since the daemon knows this channel
	QualityGood                       // at least one sample in this scan
	QualityHeld                       // no sample in this scan, the last one is younger than the hold time
	QualityStale                      // the last sample is older than the hold time
	QualityOutOfRange                 // outside the range of the channel
	QualityInvalidCode                // a value by which the sender says "no reading"
	QualityRate                       // changed faster than the channel can
	QualityStuck                      // not one bit of change for the stuck time
	QualityNoReference                // its reference port has no usable value
	QualityExcluded                   // left out by proof of failure or by an operator
	NumQualities
)

var qualityNames = [NumQualities]string{
	"missing", "good", "held", "stale", "out_of_range", "invalid_code", "rate", "stuck", "no_reference", "excluded",
}

// Usable tells whether a value of this quality may enter a computation.
func (q Quality) Usable() bool { return q == QualityGood || q == QualityHeld }

// String gives the name used in JSON and on the page.
func (q Quality) String() string { return name(qualityNames[:], q) }

// ChokeState is the state of the throat by best estimate with hysteresis.
type ChokeState uint8

// The choke states.
const (
	ChokeUnknown ChokeState = iota // an input or an uncertainty that is needed is missing
	NoFlow                         // NPR below the resolution floor
	Unchoked
	Choked
	numChokeStates
)

var chokeNames = [numChokeStates]string{"unknown", "no_flow", "unchoked", "choked"}

// String gives the name used in JSON and on the page.
func (s ChokeState) String() string { return name(chokeNames[:], s) }

// Phase is what the engine is doing.
type Phase uint8

// The phases of a run.
const (
	PhaseUnknown Phase = iota
	Off
	Cranking
	Lighting
	Idle
	Accelerating
	Steady
	Decelerating
	Rundown
	Cooling
	NumPhases
)

var phaseNames = [NumPhases]string{
	"unknown", "off", "cranking", "lighting", "idle", "accelerating", "steady", "decelerating", "rundown", "cooling",
}

// String gives the name used in JSON, in rule files and on the page.
func (p Phase) String() string { return name(phaseNames[:], p) }

// ParsePhase gives the phase of a name, and whether there is one.
func ParsePhase(s string) (Phase, bool) { return parse[Phase](phaseNames[:], s) }

// Source says which measurement a station value comes from.
type Source uint8

// The sources of a station value.
const (
	SourceNone           Source = iota
	SourceRake                  // probes at the station itself
	SourceExitPlane             // static pressure measured in the exit plane
	SourceBarometer             // barometer less the entered cell depression
	SourceEGTFactor             // indicated EGT times a stated factor
	SourceOneDimensional        // critical NPR of this gas
	SourceCalibration           // choke NPR from a nozzle calibration
	SourceEntry                 // entered by hand in the rig file
	SourceWallStatic            // static pressure at the wall and the learned ratio to the rake
	SourceHeatBalance           // heat of air and fuel
	NumSources
)

var sourceNames = [NumSources]string{
	"none", "rake", "exit_plane", "barometer", "egt_factor", "one_dimensional", "calibration", "entry", "wall_static", "heat_balance",
}

// String gives the name used in JSON and on the page.
func (s Source) String() string { return name(sourceNames[:], s) }

// MarshalText writes the name.
func (s Source) MarshalText() ([]byte, error) { return []byte(s.String()), nil }

// MarshalText writes the name.
func (q Quality) MarshalText() ([]byte, error) { return []byte(q.String()), nil }

// MarshalText writes the name.
func (s ChokeState) MarshalText() ([]byte, error) { return []byte(s.String()), nil }

// MarshalText writes the name.
func (p Phase) MarshalText() ([]byte, error) { return []byte(p.String()), nil }

func name[T ~uint8](names []string, v T) string {
	if int(v) < len(names) {
		return names[v]
	}
	return "invalid"
}

func parse[T ~uint8](names []string, s string) (T, bool) {
	for i, n := range names {
		if n == s {
			return T(i), true
		}
	}
	return 0, false
}
