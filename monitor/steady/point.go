package steady

import "math"

// many is the number of degrees of freedom above which they do not matter.
const many = 1e6

// Part is one component of a combined standard uncertainty: its contribution c·u
// in the unit of the result, and its degrees of freedom. Nu 0 means infinite: the
// contribution is taken as exactly known, as most Type B ones are.
type Part struct {
	U, Nu float64
}

// Combine gives the combined standard uncertainty of independent parts and its
// effective degrees of freedom after Welch and Satterthwaite,
//
//	u² = Σ u_i²   ν = u⁴/Σ (u_i⁴/ν_i)
//
// +Inf if all are exactly known. NaN in a part makes NaN of both; see
// [JCGM 100 eq. 10, G.2b].
func Combine(parts ...Part) (u, nu float64) {
	var square, fourth float64
	for _, p := range parts {
		square += p.U * p.U
		if p.Nu != 0 {
			fourth += p.U * p.U * p.U * p.U / p.Nu
		}
	}
	if math.IsNaN(square) || math.IsNaN(fourth) {
		return math.NaN(), math.NaN()
	}
	return math.Sqrt(square), square * square / zeroToTiny(fourth)
}

// zeroToTiny lets a division give +Inf for 0/0.
func zeroToTiny(x float64) float64 {
	if x == 0 {
		return math.SmallestNonzeroFloat64
	}
	return x
}

// Expand gives the coverage factor of the part p for an uncertainty with ν degrees
// of freedom, which are cut to the next lower whole number [JCGM 100 G.4.1 note 1].
// Below one degree of freedom it is that of one.
func Expand(p, nu float64) float64 {
	if math.IsNaN(nu) {
		return math.NaN()
	}
	return Student(p, max(math.Floor(min(nu, many)), 1))
}

// Readings gives the mean of independent repeated readings, its Type A standard
// uncertainty s/√n and the degrees of freedom n − 1 [JCGM 100 4.2.3]. With fewer than
// two readings the uncertainty is NaN.
func Readings(x []float64) (mean, u, nu float64) {
	n := float64(len(x))
	if n == 0 {
		return math.NaN(), math.NaN(), 0
	}
	base := x[0]
	for _, v := range x {
		mean += (v - base) / n
	}
	var square float64
	for _, v := range x {
		square += (v - base - mean) * (v - base - mean)
	}
	if n < 2 {
		return x[0], math.NaN(), 0
	}
	return base + mean, math.Sqrt(square / (n - 1) / n), n - 1
}

// Value is one quantity of a test point, with what its uncertainty is made of.
type Value struct {
	Mean  float64
	SD    float64 // of the samples
	N     int     // samples
	NEff  float64 // effective sample size
	Slope float64 // per second, what is left of a trend
	TypeA Part    // random, of the mean: SD/√NEff with its ν
	TypeB Part    // systematic, as the caller states it
	U     float64 // combined standard uncertainty
	Nu    float64 // its effective degrees of freedom, at most 1e6
	K     float64 // coverage factor for 95 %
	U95   float64
}

// Reduce makes a test-point value of a window and the systematic standard
// uncertainty of the quantity. NaN for a systematic part that is not stated makes
// NaN of U95, never a small number. A window that did not resolve its noise has a
// Type A part with few degrees of freedom, and so a large U95.
func Reduce(s *Stats, systematic Part) Value {
	v := Value{
		Mean: s.Mean, SD: s.SD, N: s.N, NEff: s.NEff, Slope: s.Slope,
		TypeA: Part{U: s.U, Nu: s.Nu}, TypeB: systematic,
	}
	v.U, v.Nu = Combine(v.TypeA, v.TypeB)
	v.Nu = min(v.Nu, many)
	v.K = Expand(0.95, v.Nu)
	v.U95 = v.K * v.U
	return v
}

// TestPoint is a numbered steady condition as taken: one Value per quantity, in
// the order in which the windows were given.
type TestPoint struct {
	Number   int
	From, To int64 // event time that the windows cover, ns
	Found    Result
	Values   []Value
}

// Take reduces the windows of a detector at this instant. The systematic parts
// come in the order of its quantities.
func (s *State) Take(number int, systematic []Part) TestPoint {
	tp := TestPoint{Number: number, Found: s.Result, Values: make([]Value, len(s.Stats))}
	for i := range s.Stats {
		st := &s.Stats[i]
		if i == 0 || st.From < tp.From {
			tp.From = st.From
		}
		tp.To = max(tp.To, st.To)
		tp.Values[i] = Reduce(st, systematic[i])
	}
	return tp
}
