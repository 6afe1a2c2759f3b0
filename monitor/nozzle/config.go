package nozzle

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/interp"
)

// Kind says how the passage goes on behind the throat.
type Kind uint8

// The kinds of nozzle.
const (
	Convergent          Kind = iota // the throat is the exit
	ConvergentDivergent             // ExitArea behind ThroatArea
)

// AreaBasis says at which temperature the areas were measured.
type AreaBasis uint8

// The bases of an area.
const (
	AreaHot  AreaBasis = iota // as they are while running
	AreaCold                  // at ReferenceTemperature; they grow with the metal
)

// ThrustBasis says what the thrust coefficient multiplies.
type ThrustBasis uint8

// The bases of gross thrust:
//
//	NozzleIdeal    CT Cd A8 [φ p0 V9/√(R T0) + (p9 − pb) A9/A8]
//	FullyExpanded  CT W8 V, V of the isentropic expansion of p0 to pb
const (
	NozzleIdeal ThrustBasis = iota
	FullyExpanded
)

// Point is one entry of a coefficient table.
type Point struct {
	NPR   float64 // nozzle pressure ratio at the coefficient station
	Value float64
}

// Config describes a nozzle. The zero value is an ideal convergent nozzle of
// unknown area.
type Config struct {
	Kind                 Kind
	ThroatArea           float64 // A8, m²; 0 = not known: no flow and no thrust
	ExitArea             float64 // A9, m²; ConvergentDivergent only
	AreaBasis            AreaBasis
	ExpansionCoefficient float64     // 1/K, linear, mean from ReferenceTemperature to running
	ReferenceTemperature float64     // K, of a cold area
	Discharge            []Point     // Cd against NPR, rising NPR; none = 1
	Thrust               []Point     // CT against NPR, rising NPR; none = 1
	DuctLoss             float64     // (p7 − p8)/p7
	CoefficientStation   int         // 7 or 8: whose total pressure Discharge and Thrust refer to; 0 = 8
	ChokeNPR             float64     // p8/pb at which this nozzle chokes by calibration; 0 = one-dimensional
	Basis                ThrustBasis // basis of Result.GrossThrust
	ResolutionFloor      float64     // npr − 1 below which there is no flow to be told from none
}

// Validate gives every fault of c at once, nil if there is none.
func (c *Config) Validate() error {
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("nozzle: "+format, args...)) }
	if c.Kind > ConvergentDivergent {
		fault("kind %d: give convergent or convergent-divergent", c.Kind)
	}
	if !(c.ThroatArea >= 0 && c.ThroatArea < math.Inf(1)) {
		fault("throat area %g m²: must be above 0", c.ThroatArea)
	}
	if c.Kind == ConvergentDivergent && !(c.ThroatArea > 0 && c.ExitArea >= c.ThroatArea && c.ExitArea < math.Inf(1)) {
		fault("exit area %g m², throat area %g m²: a convergent-divergent nozzle needs both, the exit not below the throat", c.ExitArea, c.ThroatArea)
	}
	if c.AreaBasis > AreaCold {
		fault("area basis %d: give hot or cold", c.AreaBasis)
	}
	if !(c.ExpansionCoefficient >= 0 && c.ExpansionCoefficient < 1e-3) {
		fault("expansion coefficient %g 1/K: must be from 0 to 1e-3, steel has about 1.2e-5", c.ExpansionCoefficient)
	}
	if c.AreaBasis == AreaCold && !(c.ReferenceTemperature > 0 && c.ReferenceTemperature < math.Inf(1)) {
		fault("reference temperature %g K: a cold area needs the temperature it was measured at", c.ReferenceTemperature)
	}
	if !(c.DuctLoss >= 0 && c.DuctLoss < 1) {
		fault("duct loss %g: must be a fraction of p7, from 0 to below 1", c.DuctLoss)
	}
	if s := c.CoefficientStation; s != 0 && s != 7 && s != 8 {
		fault("coefficient station %d: give 7 or 8", s)
	}
	if c.ChokeNPR != 0 && !(c.ChokeNPR > 1 && c.ChokeNPR < 10) {
		fault("choke npr %g: must be from 1 to 10, or 0 for the one-dimensional one", c.ChokeNPR)
	}
	if c.Basis > FullyExpanded {
		fault("thrust basis %d: give nozzle-ideal or fully-expanded", c.Basis)
	}
	if !(c.ResolutionFloor >= 0 && c.ResolutionFloor < 1) {
		fault("resolution floor %g: must be from 0 to below 1", c.ResolutionFloor)
	}
	for _, t := range []struct {
		name   string
		points []Point
	}{{"discharge coefficient", c.Discharge}, {"thrust coefficient", c.Thrust}} {
		for i, p := range t.points {
			if !(p.NPR >= 1 && p.NPR < math.Inf(1)) {
				fault("%s table, row %d: npr %g must be 1 or above", t.name, i+1, p.NPR)
			}
			if !(p.Value > 0 && p.Value <= 1.5) {
				fault("%s table, row %d: %g must be above 0, at most 1.5", t.name, i+1, p.Value)
			}
			if i > 0 && !(p.NPR > t.points[i-1].NPR) {
				fault("%s table, row %d: npr %g must be above that of the row before, %g", t.name, i+1, p.NPR, t.points[i-1].NPR)
			}
		}
	}
	return errors.Join(faults...)
}

// table is a coefficient against NPR by monotone cubic interpolation (Fritsch
// and Butland, SIAM J. Sci. Stat. Comput. 5, 1984), which makes no bumps between
// the points; with the value of the end beyond either end.
type table struct {
	first, last float64 // NPR
	constant    float64 // value of a table of no or one point
	curve       *interp.FritschButland
}

// newTable needs points that Validate has passed.
func newTable(points []Point) (table, error) {
	switch len(points) {
	case 0:
		return table{constant: 1}, nil
	case 1:
		return table{constant: points[0].Value}, nil
	}
	xs, ys := make([]float64, len(points)), make([]float64, len(points))
	for i, p := range points {
		xs[i], ys[i] = p.NPR, p.Value
	}
	curve := new(interp.FritschButland)
	if err := curve.Fit(xs, ys); err != nil {
		return table{}, fmt.Errorf("nozzle: coefficient table: %w", err)
	}
	return table{first: xs[0], last: xs[len(xs)-1], curve: curve}, nil
}

// at gives the coefficient, and whether npr is inside the table.
func (t *table) at(npr float64) (value float64, inside bool) {
	if t.curve == nil {
		return t.constant, true
	}
	x := min(max(npr, t.first), t.last)
	return t.curve.Predict(x), x == npr
}
