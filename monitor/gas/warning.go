package gas

// Warning is a set of doubts about a result, one bit each.
type Warning uint8

// The doubts.
const (
	// BelowRange: a temperature below 200 K, where the property data end and cp is
	// held constant.
	BelowRange Warning = 1 << iota
	// AboveRange: a temperature above 1800 K, where dissociation is no longer small.
	AboveRange
	// RealGas: pressure so high and temperature so low that air departs from
	// p = ρRT by more than about 0.1 % of C* or p*/p0.
	RealGas
)

// hottest is the upper end, K, of the range in which frozen composition holds.
const hottest = 1800.0

// Warnings gives the doubts about an expansion from the total state t0 K, p0 Pa,
// to the static temperature t K. A gas of constant γ has none: its range is the
// user's to judge.
//
// RealGas follows the equation of state of Lemmon et al. (J. Phys. Chem. Ref.
// Data 29, 2000, 331) for dry air, in which the departure grows in proportion to
// pressure and reaches 0.1 % at 0.26 MPa for 300 K and 0.9 MPa for 900 K.
func (m *Mixture) Warnings(t0, p0, t float64) Warning {
	var w Warning
	if m.perfect {
		return w
	}
	if t < coldest {
		w |= BelowRange
	}
	if t0 > hottest {
		w |= AboveRange
	}
	if p0 > 250e3+1100*max(0, t0-300) {
		w |= RealGas
	}
	return w
}

// Texts gives each doubt as a sentence for the operator.
func (w Warning) Texts() []string {
	var texts []string
	if w&BelowRange != 0 {
		texts = append(texts, "a temperature is below 200 K, where the gas data end: cp is held at its value of 200 K")
	}
	if w&AboveRange != 0 {
		texts = append(texts, "total temperature is above 1800 K: dissociation is not modelled")
	}
	if w&RealGas != 0 {
		texts = append(texts, "high pressure at low temperature: real-gas effects above about 0.1 % are not modelled")
	}
	return texts
}
