package unit

// Absolute is a pressure above vacuum, Pa. Only absolute pressures enter the
// physics.
type Absolute float64

// Gauge is a pressure above that of a reference port, Pa. Which port that is
// (barometer, cell, another channel) is stated by the channel.
type Gauge float64

// Differential is the pressure of one port less that of another, Pa.
type Differential float64

// Absolute gives g + ref; ref is the absolute pressure at the reference port at
// the same instant.
func (g Gauge) Absolute(ref Absolute) Absolute { return ref + Absolute(g) }

// Absolute gives ref + d; ref is the absolute pressure at the low port at the
// same instant.
func (d Differential) Absolute(ref Absolute) Absolute { return ref + Absolute(d) }

// Gauge gives a − ref.
func (a Absolute) Gauge(ref Absolute) Gauge { return Gauge(a - ref) }

// Minus gives a − low.
func (a Absolute) Minus(low Absolute) Differential { return Differential(a - low) }
