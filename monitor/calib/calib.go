// Package calib turns a raw reading of a channel into its value in SI units and
// judges what the reading alone can show: invalid codes and range.
//
// A gauge or differential channel gives a pressure against a reference port; it
// becomes absolute only with the reference of the same instant, which is why
// Convert does not add it.
package calib

import (
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/unit"
)

// Reference says against what a pressure channel measures.
type Reference uint8

// The references. A channel that is no pressure has ReferenceNone.
const (
	ReferenceNone Reference = iota
	Absolute
	Gauge        // against Port, to be made absolute
	Differential // against Port, stays a difference
)

// Uncertainty is the measurement uncertainty of a channel at 95 %, stated as
// test cells do: U² = (full scale)² + (reading)² + fixed². Systematic is what
// every sample shares, Random what differs from sample to sample.
type Uncertainty struct {
	FullScale float64 // fraction of High − Low
	Reading   float64 // fraction of the reading
	Fixed     float64 // SI
	Random    float64 // SI
	Stated    bool

	Thermocouple Thermocouple // its tolerance comes in as well; the zero value is none
}

// Spec is the calibration of one channel.
type Spec struct {
	Raw          unit.Unit // unit of a sample whose sender names none, and of Polynomial's argument
	Unit         unit.Unit // unit of Polynomial's value
	Polynomial   []float64 // value = Σ Polynomial[i]·rawⁱ; empty = the raw value itself
	Reference    Reference
	Port         int       // channel whose absolute pressure is the reference; -1 for none
	Low, High    float64   // range in SI, before a reference is added
	Codes        []float64 // raw values by which the sender says "no reading"
	MaxRate      float64   // SI per second, 0 = not judged
	Stuck        int64     // ns without one bit of change after which it is stuck, 0 = not judged
	Step         float64   // raw value of one ADC step, 0 = not known
	Uncertainty  Uncertainty
	RecordedOnly bool // no limit, no rule and no station uses it
}

// Convert gives the SI value of a raw reading, without its reference, and its
// quality: good, out of range or invalid code.
func (s *Spec) Convert(raw float64) (float64, monitor.Quality) {
	if slices.Contains(s.Codes, raw) {
		return 0, monitor.QualityInvalidCode
	}
	v := raw
	if n := len(s.Polynomial); n > 0 {
		v = s.Polynomial[n-1]
		for i := n - 2; i >= 0; i-- {
			v = v*raw + s.Polynomial[i]
		}
	}
	v = s.Unit.ToSI(v)
	if !(v >= s.Low && v <= s.High) {
		return v, monitor.QualityOutOfRange
	}
	return v, monitor.QualityGood
}

// U95 gives the systematic 95 % uncertainty of a value in SI; NaN where a thermocouple
// has no tolerance.
func (u *Uncertainty) U95(value, low, high float64) float64 {
	full := u.FullScale * (high - low)
	reading := u.Reading * value
	sum := full*full + reading*reading + u.Fixed*u.Fixed
	if u.Thermocouple != (Thermocouple{}) {
		wire := u.Thermocouple.U95(value)
		sum += wire * wire
	}
	return math.Sqrt(sum)
}
