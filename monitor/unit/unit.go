// Package unit converts the units of the trade to SI and keeps the three kinds
// of pressure apart.
//
// Everything below the edge of the program is SI: Pa, K, kg/s, m, m², N, 1/s.
// Parse knows the spellings that rigs, SenML (RFC 8428, IANA registry) and UCUM
// use for a unit; names are case sensitive, because mW is not MW. Whether a
// pressure is absolute, gauge or differential is no property of its unit: it
// belongs to the channel, and in code to the types Absolute, Gauge and
// Differential. A relative quantity (%, kg/kg, %RH) has dimension Ratio.
package unit

import "math"

// Dimension says what a unit measures. Units convert within a dimension only.
type Dimension uint8

// The dimensions, each with the SI unit that values of it are kept in.
const (
	Invalid               Dimension = iota // the zero value measures nothing
	Ratio                                  // 1: ratios, fractions, relative and specific humidity, plain numbers
	Pressure                               // Pa
	Temperature                            // K, absolute
	TemperatureDifference                  // K, no offset between scales
	MassFlow                               // kg/s
	VolumeFlow                             // m³/s
	Frequency                              // 1/s; rotational speed counts revolutions
	Length                                 // m
	Area                                   // m²
	Force                                  // N
	Velocity                               // m/s; vibration velocity too
	Acceleration                           // m/s²
	Density                                // kg/m³
	Voltage                                // V
	Current                                // A
	Time                                   // s
	SpecificEnergy                         // J/kg; heating value
	Angle                                  // rad
	Volume                                 // m³
	Mass                                   // kg
	numDimensions
)

// String names the dimension as messages use it.
func (d Dimension) String() string {
	switch d {
	case Ratio:
		return "ratio"
	case Pressure:
		return "pressure"
	case Temperature:
		return "temperature"
	case TemperatureDifference:
		return "temperature difference"
	case MassFlow:
		return "mass flow"
	case VolumeFlow:
		return "volume flow"
	case Frequency:
		return "frequency or speed of rotation"
	case Length:
		return "length"
	case Area:
		return "area"
	case Force:
		return "force"
	case Velocity:
		return "velocity"
	case Acceleration:
		return "acceleration"
	case Density:
		return "density"
	case Voltage:
		return "voltage"
	case Current:
		return "current"
	case Time:
		return "time"
	case SpecificEnergy:
		return "energy per mass"
	case Angle:
		return "angle"
	case Volume:
		return "volume"
	case Mass:
		return "mass"
	case Invalid, numDimensions:
	}
	return "invalid"
}

// SI gives the unit of scale 1 of the dimension; the zero Unit for an invalid one.
func (d Dimension) SI() Unit {
	for _, row := range table {
		if row.Dimension == d && row.Scale == 1 && row.Offset == 0 {
			return row.Unit
		}
	}
	if d == TemperatureDifference {
		return Unit{Name: "K", Dimension: TemperatureDifference, Scale: 1}
	}
	return Unit{}
}

// Unit is a unit of measure: SI value = value·Scale + Offset.
// The zero value is no unit; its Dimension is Invalid.
type Unit struct {
	Name      string    // the spelling this program prints
	Dimension Dimension // what it measures
	Scale     float64   // SI units per unit
	Offset    float64   // SI value at 0; not 0 for degC and degF only
}

// ToSI gives the SI value of v.
func (u Unit) ToSI(v float64) float64 { return v*u.Scale + u.Offset }

// FromSI gives the value in this unit of the SI value si.
func (u Unit) FromSI(si float64) float64 { return (si - u.Offset) / u.Scale }

// Valid reports whether u measures something.
func (u Unit) Valid() bool { return u.Dimension != Invalid && u.Dimension < numDimensions }

// Difference gives the unit of a difference of two values in u: without offset,
// and for a temperature of dimension TemperatureDifference. 1 degF is a
// difference of 5/9 K, and a temperature of 255.93 K.
func (u Unit) Difference() Unit {
	u.Offset = 0
	if u.Dimension == Temperature {
		u.Dimension = TemperatureDifference
	}
	return u
}

// Definitions that other units are built on; all exact.
const (
	inch     = 0.0254                       // m, international inch, 1959
	pound    = 0.45359237                   // kg, avoirdupois pound, 1959
	gravity  = 9.80665                      // m/s², standard gravity, CGPM 1901
	lbf      = pound * gravity              // N
	psi      = lbf / (inch * inch)          // Pa
	mercury  = 13595.1 * gravity            // Pa per m, conventional mercury (0 °C), ISO 80000-4 annex
	water    = 1000 * gravity               // Pa per m, conventional water (1000 kg/m³)
	gallonUS = 231 * inch * inch * inch     // m³
	btuPerLb = 2326.0                       // J/kg, International Table Btu, exact
	rankine  = 5.0 / 9.0                    // K
	zeroC    = 273.15                       // K
	zeroF    = zeroC - 32*rankine           // K
	foot     = 12 * inch                    // m
	degree   = math.Pi / 180                // rad
	minute   = 60.0                         // s
	hour     = 3600.0                       // s
	knot     = 1852.0 / hour                // m/s
	lbPerFt3 = pound / (foot * foot * foot) // kg/m³
)

// row is a unit with the other spellings that Parse takes for it.
type row struct {
	Unit
	also []string
}

// table lists every unit; it is never written to. Within a dimension the units
// stand in the order that help texts show them in.
var table = []row{
	{Unit{"1", Ratio, 1, 0}, []string{"", "/", "kg/kg", "m/m"}},
	{Unit{"%", Ratio, 0.01, 0}, []string{"%RH", "pct", "percent"}},
	{Unit{"g/kg", Ratio, 1e-3, 0}, nil},
	{Unit{"ppm", Ratio, 1e-6, 0}, []string{"[ppm]", "mg/kg"}},

	{Unit{"Pa", Pressure, 1, 0}, nil},
	{Unit{"hPa", Pressure, 100, 0}, []string{"mbar"}},
	{Unit{"kPa", Pressure, 1e3, 0}, nil},
	{Unit{"MPa", Pressure, 1e6, 0}, nil},
	{Unit{"bar", Pressure, 1e5, 0}, nil},
	{Unit{"psi", Pressure, psi, 0}, []string{"lbf/in2", "lbf/in²", "[psi]"}},
	{Unit{"lbf/ft2", Pressure, psi / 144, 0}, []string{"lbf/ft²", "psf"}},
	{Unit{"inHg", Pressure, mercury * inch, 0}, []string{"[in_i'Hg]"}},
	{Unit{"mmHg", Pressure, mercury * 1e-3, 0}, []string{"mm[Hg]"}},
	{Unit{"inH2O", Pressure, water * inch, 0}, []string{"[in_i'H2O]"}},
	{Unit{"mmH2O", Pressure, water * 1e-3, 0}, []string{"mm[H2O]"}},
	{Unit{"atm", Pressure, 101325, 0}, nil},

	{Unit{"K", Temperature, 1, 0}, []string{"kelvin"}},
	{Unit{"degC", Temperature, 1, zeroC}, []string{"Cel", "°C", "℃"}},
	{Unit{"degF", Temperature, rankine, zeroF}, []string{"°F", "[degF]", "℉"}},
	{Unit{"degR", Temperature, rankine, 0}, []string{"R", "°R", "[degR]"}},

	{Unit{"kg/s", MassFlow, 1, 0}, nil},
	{Unit{"g/s", MassFlow, 1e-3, 0}, nil},
	{Unit{"kg/min", MassFlow, 1 / minute, 0}, nil},
	{Unit{"kg/h", MassFlow, 1 / hour, 0}, nil},
	{Unit{"lb/s", MassFlow, pound, 0}, []string{"lbm/s", "[lb_av]/s", "pps"}},
	{Unit{"lb/min", MassFlow, pound / minute, 0}, []string{"lbm/min"}},
	{Unit{"lb/h", MassFlow, pound / hour, 0}, []string{"lbm/h", "lb/hr", "lbm/hr", "pph"}},

	{Unit{"m3/s", VolumeFlow, 1, 0}, []string{"m³/s"}},
	{Unit{"m3/h", VolumeFlow, 1 / hour, 0}, []string{"m³/h"}},
	{Unit{"l/s", VolumeFlow, 1e-3, 0}, []string{"L/s"}},
	{Unit{"l/min", VolumeFlow, 1e-3 / minute, 0}, []string{"L/min"}},
	{Unit{"l/h", VolumeFlow, 1e-3 / hour, 0}, []string{"L/h"}},
	{Unit{"ml/min", VolumeFlow, 1e-6 / minute, 0}, []string{"mL/min", "cm3/min"}},
	{Unit{"ft3/min", VolumeFlow, foot * foot * foot / minute, 0}, []string{"ft³/min", "cfm"}},
	{Unit{"gal/min", VolumeFlow, gallonUS / minute, 0}, []string{"gpm"}}, // US gallon
	{Unit{"gal/h", VolumeFlow, gallonUS / hour, 0}, []string{"gph"}},     // US gallon

	{Unit{"1/s", Frequency, 1, 0}, []string{"Hz", "rev/s"}},
	{Unit{"rpm", Frequency, 1 / minute, 0}, []string{"1/min", "rev/min", "r/min", "{rev}/min"}},
	{Unit{"kHz", Frequency, 1e3, 0}, nil},

	{Unit{"m", Length, 1, 0}, nil},
	{Unit{"mm", Length, 1e-3, 0}, nil},
	{Unit{"cm", Length, 1e-2, 0}, nil},
	{Unit{"um", Length, 1e-6, 0}, []string{"µm", "μm"}},
	{Unit{"in", Length, inch, 0}, []string{"[in_i]"}},
	{Unit{"mil", Length, 1e-3 * inch, 0}, nil},
	{Unit{"ft", Length, foot, 0}, []string{"[ft_i]"}},

	{Unit{"m2", Area, 1, 0}, []string{"m²"}},
	{Unit{"cm2", Area, 1e-4, 0}, []string{"cm²"}},
	{Unit{"mm2", Area, 1e-6, 0}, []string{"mm²"}},
	{Unit{"in2", Area, inch * inch, 0}, []string{"in²", "[sin_i]"}},
	{Unit{"ft2", Area, foot * foot, 0}, []string{"ft²"}},

	{Unit{"N", Force, 1, 0}, nil},
	{Unit{"kN", Force, 1e3, 0}, nil},
	{Unit{"lbf", Force, lbf, 0}, []string{"[lbf_av]"}},
	{Unit{"kgf", Force, gravity, 0}, nil},

	{Unit{"m/s", Velocity, 1, 0}, nil},
	{Unit{"mm/s", Velocity, 1e-3, 0}, nil},
	{Unit{"in/s", Velocity, inch, 0}, []string{"ips"}},
	{Unit{"ft/s", Velocity, foot, 0}, nil},
	{Unit{"km/h", Velocity, 1e3 / hour, 0}, nil},
	{Unit{"kn", Velocity, knot, 0}, []string{"kt"}},

	{Unit{"m/s2", Acceleration, 1, 0}, []string{"m/s²"}},
	{Unit{"g", Acceleration, gravity, 0}, []string{"gn", "[g]"}},

	{Unit{"kg/m3", Density, 1, 0}, []string{"kg/m³"}},
	{Unit{"kg/l", Density, 1e3, 0}, []string{"kg/L", "g/cm3", "g/ml"}},
	{Unit{"lb/ft3", Density, lbPerFt3, 0}, []string{"lbm/ft3"}},

	{Unit{"V", Voltage, 1, 0}, nil},
	{Unit{"mV", Voltage, 1e-3, 0}, nil},
	{Unit{"A", Current, 1, 0}, nil},
	{Unit{"mA", Current, 1e-3, 0}, nil},

	{Unit{"s", Time, 1, 0}, nil},
	{Unit{"ms", Time, 1e-3, 0}, nil},
	{Unit{"min", Time, minute, 0}, nil},
	{Unit{"h", Time, hour, 0}, nil},

	{Unit{"J/kg", SpecificEnergy, 1, 0}, nil},
	{Unit{"kJ/kg", SpecificEnergy, 1e3, 0}, nil},
	{Unit{"MJ/kg", SpecificEnergy, 1e6, 0}, nil},
	{Unit{"Btu/lb", SpecificEnergy, btuPerLb, 0}, []string{"BTU/lb", "Btu/lbm"}},

	{Unit{"rad", Angle, 1, 0}, nil},
	{Unit{"deg", Angle, degree, 0}, []string{"°"}},

	{Unit{"m3", Volume, 1, 0}, []string{"m³"}},
	{Unit{"l", Volume, 1e-3, 0}, []string{"L"}},
	{Unit{"ml", Volume, 1e-6, 0}, []string{"mL", "cm3", "cm³"}},
	{Unit{"gal", Volume, gallonUS, 0}, nil}, // US gallon
	{Unit{"ft3", Volume, foot * foot * foot, 0}, []string{"ft³"}},

	{Unit{"kg", Mass, 1, 0}, nil},
	{Unit{"lb", Mass, pound, 0}, []string{"lbm", "[lb_av]"}},
}

// byName finds a unit by each of its spellings; it is never written to again.
var byName = index(table)

func index(rows []row) map[string]Unit {
	m := make(map[string]Unit, 4*len(rows))
	for _, r := range rows {
		m[r.Name] = r.Unit
		for _, name := range r.also {
			m[name] = r.Unit
		}
	}
	return m
}
