package egt

import "math"

// Indicated gives the indicated EGT of a harness in K: the mean of the probes
// that are usable, plus trim (K) as the limits of the engine ask. Beside it the
// hottest and the coldest probe, their difference, and how many were used.
//
// values and usable have one entry per probe; a NaN is not usable. Without a
// usable probe all are NaN. A harness wired in parallel gives one value, of
// which no probe can be told: spread, hottest and coldest are NaN. A spread
// needs two probes.
func Indicated(values []float64, usable []bool, parallel bool, trim float64) (mean, spread, hottest, coldest float64, used int) {
	spread, hottest, coldest = math.NaN(), math.NaN(), math.NaN()
	sum, lo, hi := 0.0, math.Inf(1), math.Inf(-1)
	for i, v := range values {
		if !usable[i] || math.IsNaN(v) {
			continue
		}
		sum += v
		lo, hi = min(lo, v), max(hi, v)
		used++
	}
	if used == 0 {
		return math.NaN(), spread, hottest, coldest, 0
	}
	mean = sum/float64(used) + trim
	if parallel {
		return mean, spread, hottest, coldest, used
	}
	hottest, coldest = hi, lo
	if used > 1 {
		spread = hi - lo
	}
	return mean, spread, hottest, coldest, used
}
