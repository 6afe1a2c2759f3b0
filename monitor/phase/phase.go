// Package phase tells what the engine is doing from rotor speed, its rate and
// the indicated EGT.
package phase

// Config holds the engine's thresholds. Speeds in rpm, temperatures in K, rates
// in rpm/s, times in ns.
type Config struct {
	Turning     float64 // above it the rotor turns
	Idle        float64 // lowest governed speed; idle is within IdleBand of it
	IdleBand    float64
	Max         float64 // 100 % speed
	LitEGT      float64 // indicated EGT above it means a flame
	LitRise     float64 // … or a rise by this much above the EGT at start of cranking
	MoveRate    float64 // |dN/dt| above it is accelerating or decelerating
	SteadyAfter int64   // |dN/dt| below MoveRate for this long is steady
	CoolEGT     float64 // below it, at rest, the engine is off
	OffAfter    int64   // at rest and cool for this long
}
