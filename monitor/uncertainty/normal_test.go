package uncertainty

import (
	"math"
	"testing"
)

// Sheppard's P(X ≤ 0, Y ≤ 0) = ¼ + asin(r)/2π, independence, comonotony, and the
// integral over the conditional distribution by Simpson's rule.
func TestBivariate(t *testing.T) {
	integral := func(h, k, r float64) float64 {
		const n, from = 4000, -9.0
		f := func(z float64) float64 { return density(z) * normal((k-r*z)/math.Sqrt(1-r*r)) }
		width, sum := (h-from)/n, 0.0
		for i := range n {
			a := from + float64(i)*width
			sum += width / 6 * (f(a) + 4*f(a+width/2) + f(a+width))
		}
		return sum
	}
	for _, r := range []float64{-0.95, -0.5, 0, 0.3, 0.8, 0.99, 0.9999} {
		if p, _, _ := bivariate(0, 0, r); math.Abs(p-(0.25+math.Asin(r)/(2*math.Pi))) > 2e-6 {
			t.Errorf("r %g: P at the centre %v", r, p)
		}
		for _, h := range []float64{-3, -1.96, -0.4, 0, 0.7, 2.2} {
			for _, k := range []float64{-2.5, -1.2, 0, 1.96, 3} {
				p, dh, dk := bivariate(h, k, r)
				if want := integral(h, k, r); math.Abs(p-want) > 1e-5 {
					t.Errorf("h %g k %g r %g: %v, integral %v", h, k, r, p, want)
				}
				if r == 0 && math.Abs(p-normal(h)*normal(k)) > 1e-7 {
					t.Errorf("h %g k %g: %v, want the product", h, k, p)
				}
				const d = 1e-4
				if want := (integral(h+d, k, r) - integral(h-d, k, r)) / (2 * d); math.Abs(dh-want) > 1e-5 {
					t.Errorf("h %g k %g r %g: d/dh %v, difference %v", h, k, r, dh, want)
				}
				if want := (integral(h, k+d, r) - integral(h, k-d, r)) / (2 * d); math.Abs(dk-want) > 1e-5 {
					t.Errorf("h %g k %g r %g: d/dk %v, difference %v", h, k, r, dk, want)
				}
			}
		}
	}
	if p, _, _ := bivariate(0.5, 0.8, 1); math.Abs(p-normal(0.5)) > 1e-6 {
		t.Errorf("of one quantity twice: %v, want %v", p, normal(0.5))
	}
}

// The greater of two independent standard normal quantities has Φ², of two that are one
// and the same, Φ.
func TestGreatest(t *testing.T) {
	one := branch{effects: effects{0: 1}}
	other := branch{effects: effects{1: 1}}
	one.spread()
	other.spread()
	low, high := greatest(&one, &other)
	if p, q := normal(low)*normal(low), normal(high)*normal(high); math.Abs(p-0.025) > 1e-4 || math.Abs(q-0.975) > 1e-4 {
		t.Errorf("independent: probabilities %v and %v", p, q)
	}
	low, high = greatest(&one, &one)
	if math.Abs(low+Coverage) > 1e-3 || math.Abs(high-Coverage) > 1e-3 {
		t.Errorf("the same: %v and %v", low, high)
	}
}
