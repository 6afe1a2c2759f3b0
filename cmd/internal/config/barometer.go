package config

import (
	"math"

	"throatwatch/monitor/calib"
)

// Standard atmosphere, ISO 2533:1975: exact by definition but for the exponent.
const (
	seaPressure    = 101325.0 // Pa
	seaTemperature = 288.15   // K
	lapse          = 0.0065   // K/m
	exponent       = 287.05287 * lapse / 9.80665
)

// stationPressure gives the pressure in Pa at elevation h in m from one reduced
// to sea level in Pa by the standard atmosphere (the altimeter setting QNH of
// ICAO Doc 9837, appendix):
//
//	p^n = q^n − p0^n · L h/T0,  n = R L/g
//
// A value reduced with the actual temperature of the air is another one; it
// cannot be undone without that temperature. Valid for −500 m to 6000 m.
func stationPressure(q, h float64) float64 {
	return math.Pow(math.Pow(q, exponent)-math.Pow(seaPressure, exponent)*lapse*h/seaTemperature, 1/exponent)
}

// tangentError bounds the error of toStation in Pa from 950 to 1050 hPa and from
// −500 to 1000 m.
const tangentError = 3.5

// toStation makes the calibration of a barometer reduced to sea level give the
// station pressure. It is the tangent of stationPressure at the standard
// pressure, within tangentError.
func toStation(s *calib.Spec, elevation float64) {
	at := stationPressure(seaPressure, elevation)
	slope := math.Pow(at/seaPressure, 1-exponent)
	shift := at - slope*seaPressure
	polynomial := s.Polynomial
	if len(polynomial) == 0 {
		polynomial = []float64{0, 1}
	}
	s.Polynomial = make([]float64, len(polynomial))
	for i, a := range polynomial {
		s.Polynomial[i] = slope * a
	}
	s.Polynomial[0] += shift / s.Unit.Scale
	s.Low, s.High = shift+slope*s.Low, shift+slope*s.High
}
