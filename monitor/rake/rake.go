// Package rake makes one value of a group of probes, a pressure or temperature
// rake or an EGT harness, and watches the probes for it.
//
// Each probe stands at its own place in the profile, so that it differs from the
// mean of the group by a pattern of its own. Watch learns the pattern; when a
// probe drops out, the mean goes on as if it were still there, and nothing steps.
//
// A probe is excluded live only by proof of failure (out of range, open, shorted,
// stuck, impossible rate) or by a departure from its own learned pattern that is
// beyond a stated limit, each held for a stated time. In an EGT harness a probe that
// reads hot without proof is never excluded: a real hot streak is not voted away.
// Statistical outlier tests throw out a healthy probe in 15 to 40 % of scans; the one
// here, Thompson, is a flag for the report after the test.
//
// The package is pure; time is event time in ns.
package rake

import (
	"math"

	"throatwatch/monitor/steady"
)

// MaxProbes is the largest number of probes of a group.
const MaxProbes = 64

// Mean gives Σ w v/Σ w over the values that are not NaN. Weights are areas for an area
// average, area times MassFlux for a mass average; nil counts all the same. NaN when
// there is nothing to average.
func Mean(values, weights []float64) float64 {
	var sum, all float64
	for i, v := range values {
		if math.IsNaN(v) {
			continue
		}
		w := 1.0
		if weights != nil {
			w = weights[i]
		}
		sum += w * v
		all += w
	}
	if !(all > 0) {
		return math.NaN()
	}
	return sum / all
}

// MassFlux gives the mass flow per area in kg/(m² s) that a total-pressure probe
// sees, with p0 and wall static ps in Pa absolute, total temperature t0 in K, and γ
// and gas constant in J/(kg K) of a perfect gas:
//
//	M² = 2/(γ−1) [(p0/ps)^((γ−1)/γ) − 1]
//	ρV = p0 √(γ/(R t0)) M (1 + (γ−1)/2 M²)^(−(γ+1)/(2(γ−1)))
//
// 0 where p0 does not exceed ps. As a weight only its ratio between probes counts, so
// a γ that is 0.05 off changes a mean less than the probes can tell. (NACA Report 1135.)
func MassFlux(p0, ps, t0, gamma, r float64) float64 {
	if p0 <= ps {
		return 0
	}
	g := gamma - 1
	m2 := 2 / g * (math.Pow(p0/ps, g/gamma) - 1)
	return p0 * math.Sqrt(gamma*m2/(r*t0)) * math.Pow(1+g/2*m2, -(gamma+1)/(2*g))
}

// Thompson gives the probe that the modified Thompson τ test of ASME PTC 19.1
// names as an outlier at 5 %, or −1. It is the one farthest from the mean, if by more
// than τ s, with t of n − 2 degrees of freedom:
//
//	τ = t (n − 1)/(√n √(n − 2 + t²))
//
// For reports after a test only: of healthy probes it names one in many scans. NaN
// values are left out; fewer than three give −1. (τ from memory.)
func Thompson(values []float64) int {
	var n, mean float64
	for _, v := range values {
		if !math.IsNaN(v) {
			n++
			mean += v
		}
	}
	mean /= n
	if n < 3 {
		return -1
	}
	worst, size, square := -1, 0.0, 0.0
	for i, v := range values {
		if math.IsNaN(v) {
			continue
		}
		d := math.Abs(v - mean)
		square += d * d
		if d > size {
			worst, size = i, d
		}
	}
	if size > thompson(n)*math.Sqrt(square/(n-1)) {
		return worst
	}
	return -1
}

func thompson(n float64) float64 {
	t := steady.Student(0.95, n-2)
	return t * (n - 1) / math.Sqrt(n*(n-2+t*t))
}
