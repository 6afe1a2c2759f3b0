package uncertainty

import "math"

// normal is Φ, the distribution function of a standard normal quantity.
func normal(z float64) float64 { return math.Erfc(-z/math.Sqrt2) / 2 }

// branch is a quantity that is near normal: its mean, what the thermal inputs do to it,
// and how far it is from the mean at the quantiles of NPR where its map is bent.
type branch struct {
	mean          float64
	atLow, atHigh float64 // at the quantiles of NPR; 0 if straight
	effects       effects
	deviation     float64 // standard
	below, above  float64 // standard deviation as seen on either side of the mean
}

// spread fills in the deviations.
func (b *branch) spread() {
	variance := b.effects.dot(&b.effects)
	b.deviation = math.Sqrt(variance)
	b.below, b.above = b.deviation, b.deviation
	if slope := (b.atHigh - b.atLow) / (2 * Coverage); slope != 0 {
		rest := max(0, variance-slope*slope)
		below, above := min(b.atLow, b.atHigh, 0)/Coverage, max(b.atLow, b.atHigh, 0)/Coverage
		b.below, b.above = math.Sqrt(below*below+rest), math.Sqrt(above*above+rest)
	}
}

// turn changes the sign.
func (b *branch) turn() {
	b.mean, b.below, b.above = -b.mean, b.above, b.below
	for i := range b.effects {
		b.effects[i] = -b.effects[i]
	}
}

// at gives the quantile of z.
func (b *branch) at(z float64) float64 {
	return b.mean + z*b.side(z)
}

// score is the inverse of at; there must be a deviation.
func (b *branch) score(q float64) float64 { return (q - b.mean) / b.side(q-b.mean) }

// side gives the deviation on the side that has the sign of d.
func (b *branch) side(d float64) float64 {
	if d < 0 {
		return b.below
	}
	return b.above
}

// greatest gives the 2.5 % and 97.5 % quantiles of the greater of two correlated
// quantities.
func greatest(x, y *branch) (low, high float64) {
	low, high = max(x.at(-Coverage), y.at(-Coverage)), max(x.at(Coverage), y.at(Coverage))
	covariance := x.effects.dot(&y.effects)
	difference := math.Sqrt(max(0, x.deviation*x.deviation+y.deviation*y.deviation-2*covariance))
	// Far apart, or one of them certain, the greater of the quantiles is it.
	if x.deviation == 0 || y.deviation == 0 || math.Abs(x.mean-y.mean) >= 3.5*difference {
		return low, high
	}
	correlation := min(max(covariance/(x.deviation*y.deviation), -1), 1)
	return quantile(x, y, correlation, 0.025, low), quantile(x, y, correlation, 0.975, high)
}

// quantile gives the place q below which both x and y lie with probability p. It is not
// below guess. ln P is concave over q, so that Newton's method comes from below.
func quantile(x, y *branch, correlation, p, guess float64) float64 {
	q := guess
	tolerance := 1e-3 * min(x.deviation, y.deviation) // what a step leaves is its square
	for range 20 {
		h, k := x.score(q), y.score(q)
		both, dh, dk := bivariate(h, k, correlation)
		slope := dh/x.side(h) + dk/y.side(k)
		step := both / slope * math.Log(p/both)
		if !(math.Abs(step) < math.Inf(1)) {
			break
		}
		q = max(q+step, guess)
		if math.Abs(step) <= tolerance {
			break
		}
	}
	return q
}

// bivariate gives P(X ≤ h, Y ≤ k) of two standard normal quantities of correlation r
// (D. B. Owen, Ann. Math. Statist. 27, 1956, 1075, eq. 2.1), and its derivatives.
func bivariate(h, k, r float64) (p, dh, dk float64) {
	const tiny = 1e-9
	if h == 0 {
		h = tiny
	}
	if k == 0 {
		k = tiny
	}
	root := math.Sqrt(max((1-r)*(1+r), 1e-16))
	a, b := (k-r*h)/root, (h-r*k)/root
	p = (normal(h)+normal(k))/2 - owen(h, a/h) - owen(k, b/k)
	if h*k < 0 {
		p -= 0.5
	}
	return max(p, math.SmallestNonzeroFloat64), density(h) * normal(a), density(k) * normal(b)
}

func density(z float64) float64 { return math.Exp(-z*z/2) / math.Sqrt(2*math.Pi) }

// owen gives T(h, a) = 1/2π ∫ exp(−h²(1 + x²)/2)/(1 + x²) dx from 0 to a, to 1e-6: by
// Gauss's rule of five points for |a| ≤ 1, by its reflection (Owen, eq. 2.3) beyond.
func owen(h, a float64) float64 {
	h = math.Abs(h)
	if a < 0 {
		return -owen(h, -a)
	}
	if a > 1 {
		if math.IsInf(a, 1) {
			return normal(-h) / 2
		}
		p, q := normal(-h), normal(-a*h)
		// ½Φ(h) + ½Φ(ah) − Φ(h)Φ(ah), written with what is left of either to 1.
		return (p+q)/2 - p*q - owen(a*h, 1/a)
	}
	if h > 6 {
		return 0
	}
	node := [...]float64{0, 0.5384693101056831, 0.9061798459386640}
	weight := [...]float64{0.5688888888888889, 0.4786286704993665, 0.2369268850561891}
	f := func(x float64) float64 { return math.Exp(-h*h*(1+x*x)/2) / (1 + x*x) }
	sum := weight[0] * f(a/2)
	for i := 1; i < len(node); i++ {
		sum += weight[i] * (f(a/2*(1-node[i])) + f(a/2*(1+node[i])))
	}
	return sum * a / (4 * math.Pi)
}
