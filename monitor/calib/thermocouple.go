package calib

import (
	"math"

	"throatwatch/monitor/uncertainty"
)

// Thermocouple is a pair of wires bought to a tolerance class of IEC 60584-1. The zero
// value is none.
type Thermocouple struct {
	Type  byte // K, N, S, R, B, J, T or E
	Class int  // 1, 2 or 3
}

// celsius is 0 °C in K.
const celsius = 273.15

// tolerances is a row of the table of tolerances: within From to To in °C, each side of
// it the greater of Fixed, °C, and Share · |t|.
type tolerances struct {
	from, to, fixed, share float64
}

// row gives the tolerances of IEC 60584-1:2013, table 12 (until then IEC 60584-2), with
// reference junctions at 0 °C. The number of the table is from memory. Type R and S of
// class 1 have a form of their own.
func (c Thermocouple) row() (r tolerances, ok bool) {
	switch c.Class {
	case 1:
		switch c.Type {
		case 'T':
			return tolerances{-40, 350, 0.5, 0.004}, true
		case 'E':
			return tolerances{-40, 800, 1.5, 0.004}, true
		case 'J':
			return tolerances{-40, 750, 1.5, 0.004}, true
		case 'K', 'N':
			return tolerances{-40, 1000, 1.5, 0.004}, true
		case 'R', 'S':
			return tolerances{0, 1600, 1, 0}, true
		}
	case 2:
		switch c.Type {
		case 'T':
			return tolerances{-40, 350, 1, 0.0075}, true
		case 'E':
			return tolerances{-40, 900, 2.5, 0.0075}, true
		case 'J':
			return tolerances{-40, 750, 2.5, 0.0075}, true
		case 'K', 'N':
			return tolerances{-40, 1200, 2.5, 0.0075}, true
		case 'R', 'S':
			return tolerances{0, 1600, 1.5, 0.0025}, true
		case 'B':
			return tolerances{600, 1700, 0, 0.0025}, true
		}
	case 3:
		switch c.Type {
		case 'T':
			return tolerances{-200, 40, 1, 0.015}, true
		case 'E', 'K', 'N':
			return tolerances{-200, 40, 2.5, 0.015}, true
		case 'B':
			return tolerances{600, 1700, 4, 0.005}, true
		}
	}
	return r, false
}

// Defined tells whether the standard has this class of this type.
func (c Thermocouple) Defined() bool {
	_, ok := c.row()
	return ok
}

// Range gives the temperatures, K, for which the class has a tolerance.
func (c Thermocouple) Range() (from, to float64) {
	r, _ := c.row()
	return r.from + celsius, r.to + celsius
}

// Tolerance gives the tolerance ± K of a wire as delivered, at t K. NaN outside of the
// temperatures for which the class has one.
func (c Thermocouple) Tolerance(t float64) float64 {
	r, ok := c.row()
	if !ok || !(t >= r.from+celsius && t <= r.to+celsius) {
		return math.NaN()
	}
	t -= celsius
	if c.Class == 1 && (c.Type == 'R' || c.Type == 'S') {
		return max(1, 1+0.003*(t-1100))
	}
	return max(r.fixed, r.share*math.Abs(t))
}

// U95 gives the 95 % uncertainty, K, that the tolerance stands for at t K: nothing is
// known of a wire but that it keeps its tolerance a, so that the errors are spread evenly
// over ±a, with the standard uncertainty a/√3 [JCGM 100 4.3.7]. Drift in use, the
// reference junction and the instrument are apart.
func (c Thermocouple) U95(t float64) float64 {
	return uncertainty.Coverage * c.Tolerance(t) / math.Sqrt(3)
}
