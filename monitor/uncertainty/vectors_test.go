package uncertainty

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"throatwatch/monitor/internal/vectors"
)

// TestDifferences compares the relations that this package rests on with worked examples;
// with -v it prints the table of largest differences.
func TestDifferences(t *testing.T) {
	got := worked(t)
	vectors.Run(t, []vectors.Source{
		vectors.From("GUM H.1, H.2, NIST TN 1900 E13, exact", "sums of squares, shared errors for correlations", "digits of the recomputation", func(t *testing.T, c *vectors.Comparison) {
			t.Helper()
			for _, v := range vectors.Read(t, "gum.csv") {
				key := v["case"] + " " + v["quantity"]
				if v["exact"] == "" || strings.HasPrefix(key, "JCGM 101") { // random draws have no digits
					continue
				}
				c.Relative(t, key, lookup(t, got, key), v.Num(t, "exact"), 1e-6)
			}
		}),
		vectors.From("GUM, JCGM 101, NPL, NIST as published", "means, u, correlations, half-widths", "one unit of the last printed digit, and 10⁶ draws", func(t *testing.T, c *vectors.Comparison) {
			t.Helper()
			for _, v := range vectors.Read(t, "gum.csv") {
				key, tolerance := v["case"]+" "+v["quantity"], v.Num(t, "digit")
				if strings.HasSuffix(v["quantity"], "half-width") {
					tolerance = 0.02 // the ends of 10⁶ draws scatter by 0.3 %
				}
				c.Within(t, key, lookup(t, got, key), v.Num(t, "published"), tolerance)
			}
		}),
	})
}

func lookup(t *testing.T, got map[string]float64, key string) float64 {
	t.Helper()
	v, ok := got[key]
	if !ok {
		t.Fatalf("%s is compared with nothing", key)
	}
	return v
}

// worked computes the examples with effects and sample: what an input does to a
// quantity, squared and added up [JCGM 100 eq. 10]; covariance of two quantities as the sum
// of the products [JCGM 100 F.1.2.3]; and random draws.
func worked(t *testing.T) map[string]float64 {
	t.Helper()
	out := map[string]float64{}
	u := func(e effects) float64 { return math.Sqrt(e.dot(&e)) }

	// H.1, end gauge: l = ls + d − ls (δα θ + αs δθ); the two last effects are of second order.
	const ls, alpha = 50_000_623.0, 11.5e-6
	first := effects{25, math.Sqrt(5.8*5.8 + 3.9*3.9 + 6.7*6.7), ls * 0.1 * 1e-6 / math.Sqrt(3), ls * alpha * 0.05 / math.Sqrt(3)}
	second := first
	second[4] = ls * 1e-6 / math.Sqrt(3) * math.Hypot(0.2, 0.35)
	second[5] = ls * 2e-6 / math.Sqrt(3) * 0.05 / math.Sqrt(3)
	out["H.1 l nm"], out["H.1 u_c nm"], out["H.1 u_c with second order nm"] = ls+215, u(first), u(second)

	// H.2, resistance and reactance. The means are correlated: each is made of independent
	// effects, shared where the correlation says so (Cholesky).
	data := [3][]float64{
		{5.007, 4.994, 5.005, 4.990, 4.999},
		{19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3},
		{1.0456, 1.0438, 1.0468, 1.0428, 1.0433},
	}
	var mean [3]float64
	var covariance [3][3]float64
	for i, x := range data {
		for _, v := range x {
			mean[i] += v / 5
		}
	}
	for i := range 3 {
		for j := range 3 {
			for k := range 5 {
				covariance[i][j] += (data[i][k] - mean[i]) * (data[j][k] - mean[j]) / (5 * 4) // of the means
			}
		}
	}
	var input [3]effects
	for i := range 3 {
		for j := range i + 1 {
			rest := covariance[i][j] - input[i].dot(&input[j])
			if i == j {
				input[i][j] = math.Sqrt(rest)
			} else {
				input[i][j] = rest / input[j][j]
			}
		}
	}
	v, i, phi := mean[0], mean[1], mean[2]
	combine := func(c ...float64) (e effects) {
		for k := range e {
			for n := range c {
				e[k] += c[n] * input[n][k]
			}
		}
		return e
	}
	correlation := func(a, b effects) float64 { return a.dot(&b) / (u(a) * u(b)) }
	sin, cos := math.Sincos(phi)
	r := combine(cos/i, -v/(i*i)*cos, -v/i*sin)
	x := combine(sin/i, -v/(i*i)*sin, v/i*cos)
	z := combine(1/i, -v/(i*i), 0)
	for name, value := range map[string]float64{
		"V": v, "I": i, "phi": phi, "u(V)": u(input[0]), "u(I)": u(input[1]), "u(phi)": u(input[2]),
		"r(V,I)": correlation(input[0], input[1]), "r(V,phi)": correlation(input[0], input[2]), "r(I,phi)": correlation(input[1], input[2]),
		"R": v / i * cos, "X": v / i * sin, "Z": v / i, "u(R)": u(r), "u(X)": u(x), "u(Z)": u(z),
		"r(R,X)": correlation(r, x), "r(R,Z)": correlation(r, z), "r(X,Z)": correlation(x, z),
	} {
		out["H.2 "+name] = value
	}

	// JCGM 101 9.2: sum of four quantities of u 1; and y = ln x, x rectangular on [0.1, 1.1].
	const draws = 1_000_000
	rnd := rand.New(rand.NewPCG(3, 3))
	normals, rectangles, logs := make([]float64, draws), make([]float64, draws), make([]float64, draws)
	for k := range draws {
		for range 4 {
			normals[k] += rnd.NormFloat64()
			rectangles[k] += (2*rnd.Float64() - 1) * math.Sqrt(3)
		}
		logs[k] = math.Log(0.1 + rnd.Float64())
	}
	for name, s := range map[string]Sample{"normal": sample(normals), "rectangular": sample(rectangles)} {
		out["JCGM 101 9.2 "+name+" u"], out["JCGM 101 9.2 "+name+" half-width"] = s.Deviation, (s.High-s.Low)/2
	}
	s := sample(logs)
	out["ln x mean"], out["ln x u"] = s.Mean, s.Deviation
	out["ln x first order"], out["ln x first-order u"] = math.Log(0.6), u(effects{1 / math.Sqrt(12) / 0.6})

	// E13: (L1 − L0)/(L0 (T1 − T0)).
	const l0, l1, span = 1.4999, 1.5021, 373.10 - 288.15
	y := (l1 - l0) / (l0 * span)
	out["E13 expansion"], out["E13 u"] = y, u(effects{l1 / (l0 * l0 * span) * 0.0001, 0.0002 / (l0 * span), y / span * 0.02, y / span * 0.05})
	return out
}
