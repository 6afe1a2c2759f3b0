package gas

import "math"

// Universal is the molar gas constant, J/(mol K), exact since the SI of 2019
// (CODATA 2018).
const Universal = 8.31446261815324

// join is the temperature, K, at which the two coefficient sets of the data meet.
const join = 1000.0

// coldest is the lower end, K, of the data.
const coldest = 200.0

// numSpecies counts the species of a mixture, in the order of the constants.
const (
	n2 = iota
	o2
	argon
	co2
	h2o
	numSpecies
)

// poly holds nine coefficients a1…a7, b1, b2 of NASA/TP-2002-211556:
//
//	cp/R  = a1/T² + a2/T + a3 + a4 T + a5 T² + a6 T³ + a7 T⁴
//	h/R   = −a1/T + a2 ln T + a3 T + a4 T²/2 + a5 T³/3 + a6 T⁴/4 + a7 T⁵/5 + b1   (K)
//	s°/R  = −a1/T²/2 − a2/T + a3 ln T + a4 T + a5 T²/2 + a6 T³/3 + a7 T⁴/4 + b2
type poly [9]float64

func (p *poly) cp(t float64) float64 {
	x := 1 / t
	return p[2] + x*(p[1]+x*p[0]) + t*(p[3]+t*(p[4]+t*(p[5]+t*p[6])))
}

// cpSlope is d(cp/R)/dT, 1/K.
func (p *poly) cpSlope(t float64) float64 {
	x := 1 / t
	return -x*x*(p[1]+2*x*p[0]) + p[3] + t*(2*p[4]+t*(3*p[5]+t*4*p[6]))
}

func (p *poly) h(t, lnT float64) float64 {
	const third, fifth = 1.0 / 3, 1.0 / 5 // a product costs less than a quotient
	return p[7] - p[0]/t + p[1]*lnT + t*(p[2]+t*(p[3]/2+t*(p[4]*third+t*(p[5]/4+t*p[6]*fifth))))
}

func (p *poly) s(t, lnT float64) float64 {
	const third = 1.0 / 3
	x := 1 / t
	return p[8] - x*(p[1]+x*p[0]/2) + p[2]*lnT + t*(p[3]+t*(p[4]/2+t*(p[5]*third+t*p[6]/4)))
}

// species is one gas of a mixture.
type species struct {
	molarMass float64 // kg/mol
	low, high poly    // 200–1000 K, 1000–6000 K
}

// data is copied from McBride, Zehe and Gordon, NASA/TP-2002-211556 (2002), gas
// phase, standard pressure 1 bar. It is never written to.
var data = [numSpecies]species{
	n2: {
		28.0134e-3,
		poly{2.210371497e+04, -3.818461820e+02, 6.082738360e+00, -8.530914410e-03, 1.384646189e-05, -9.625793620e-09, 2.519705809e-12, 7.108460860e+02, -1.076003744e+01},
		poly{5.877124060e+05, -2.239249073e+03, 6.066949220e+00, -6.139685500e-04, 1.491806679e-07, -1.923105485e-11, 1.061954386e-15, 1.283210415e+04, -1.586640027e+01},
	},
	o2: {
		31.9988e-3,
		poly{-3.425563420e+04, 4.847000970e+02, 1.119010961e+00, 4.293889240e-03, -6.836300520e-07, -2.023372700e-09, 1.039040018e-12, -3.391454870e+03, 1.849699470e+01},
		poly{-1.037939022e+06, 2.344830282e+03, 1.819732036e+00, 1.267847582e-03, -2.188067988e-07, 2.053719572e-11, -8.193467050e-16, -1.689010929e+04, 1.738716506e+01},
	},
	argon: {
		39.948e-3,
		poly{0, 0, 2.5, 0, 0, 0, 0, -7.453750000e+02, 4.379674910e+00},
		poly{2.010538475e+01, -5.992661070e-02, 2.500069401e+00, -3.992141160e-08, 1.205272140e-11, -1.819015576e-15, 1.078576636e-19, -7.449939610e+02, 4.379180110e+00},
	},
	co2: {
		44.0095e-3,
		poly{4.943650540e+04, -6.264116010e+02, 5.301725240e+00, 2.503813816e-03, -2.127308728e-07, -7.689988780e-10, 2.849677801e-13, -4.528198460e+04, -7.048279440e+00},
		poly{1.176962419e+05, -1.788791477e+03, 8.291523190e+00, -9.223156780e-05, 4.863676880e-09, -1.891053312e-12, 6.330036590e-16, -3.908350590e+04, -2.652669281e+01},
	},
	h2o: {
		18.01528e-3,
		poly{-3.947960830e+04, 5.755731020e+02, 9.317826530e-01, 7.222712860e-03, -7.342557370e-06, 4.955043490e-09, -1.336933246e-12, -3.303974310e+04, 1.724205775e+01},
		poly{1.034972096e+06, -2.412698562e+03, 4.646110780e+00, 2.291998307e-03, -6.836830480e-07, 9.426468930e-11, -4.822380530e-15, -1.384286509e+04, -7.978148510e+00},
	},
}

// dryAir gives the mole fractions of dry air after Gordon, NASA TP-1906 (1982),
// the composition of NASA's pseudo-species Air; they sum to 1 exactly.
var dryAir = [numSpecies]float64{n2: 0.78084, o2: 0.209476, argon: 0.009365, co2: 0.000319}

// ranges are the three temperature ranges a mixture is evaluated in: below
// 200 K, up to 1000 K, above.
const (
	cold = iota
	low
	high
	numRanges
)

// joined holds the ranges of each species so that h and s° are continuous and
// rise with T everywhere, as the solvers for T need: the high range is
// shifted by its jump at 1000 K (below 5e-8 of h/RT or s/R), and below 200 K, where
// the fits end, cp keeps its value of 200 K.
var joined = join3(data)

// joinedAir is joined for dry air.
var joinedAir = func() (air [numRanges]poly) {
	for i := range joined {
		for r := range air {
			for k := range air[r] {
				air[r][k] += dryAir[i] * joined[i][r][k]
			}
		}
	}
	return air
}()

func join3(data [numSpecies]species) (out [numSpecies][numRanges]poly) {
	lnJoin, lnColdest := math.Log(join), math.Log(coldest)
	for i, d := range data {
		up := d.high
		up[7] += d.low.h(join, lnJoin) - d.high.h(join, lnJoin)
		up[8] += d.low.s(join, lnJoin) - d.high.s(join, lnJoin)
		cp := d.low.cp(coldest)
		down := poly{2: cp}
		down[7] = d.low.h(coldest, lnColdest) - cp*coldest
		down[8] = d.low.s(coldest, lnColdest) - cp*lnColdest
		out[i] = [numRanges]poly{cold: down, low: d.low, high: up}
	}
	return out
}
