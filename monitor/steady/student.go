package steady

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Student gives t_p(ν): the half-width, in standard uncertainties, of the interval
// that holds the part p (0 < p < 1) of Student's distribution with ν degrees of
// freedom. ν need not be whole here; for ν ≥ 1e6 it is the normal distribution's.
// NaN for ν < 1. It is table G.2 of JCGM 100.
func Student(p, nu float64) float64 {
	switch q := (1 + p) / 2; {
	case !(nu >= 1):
		return math.NaN()
	case nu >= 1e6:
		return distuv.UnitNormal.Quantile(q)
	default:
		return distuv.StudentsT{Sigma: 1, Nu: nu}.Quantile(q)
	}
}
