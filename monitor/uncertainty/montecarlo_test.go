package uncertainty

import (
	"math"
	"math/rand/v2"
	"testing"

	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
)

// TestAgainstMonteCarlo compares with JCGM 101: 10⁶ draws of a fixed seed, half-widths
// within 2 %, ends of the throat state's intervals within 2 % of the half-width, as a
// standards laboratory would ask; the bounds of 10⁶ draws themselves scatter by 0.3 % of it.
// The convergent-divergent nozzle has fewer draws, which scatter by 0.7 %.
func TestAgainstMonteCarlo(t *testing.T) {
	const critical = 1.85852 * 101325
	ordinary := Inputs{
		TotalPressure: {Systematic: 200, Random: 150}, BackPressure: {Systematic: 60}, CommonPressure: {Systematic: 100},
		TotalTemperature: {Systematic: 4, Random: 2}, FuelAirRatio: {Systematic: 0.0005}, HumidityRatio: {Systematic: 0.001},
		ThroatArea: {Systematic: 0.001}, Discharge: {Systematic: 0.002}, Thrust: {Systematic: 0.001}, ChokeNPR: {Systematic: 0.004},
	}
	cold := ordinary // a temperature so well known that pressures decide on every output
	cold[TotalTemperature] = Part{Systematic: 0.2}
	poor := ordinary // a transducer of wide range
	poor[TotalPressure], poor[BackPressure] = Part{Systematic: 2500}, Part{Systematic: 800}
	small := Inputs{TotalPressure: {Systematic: 90}, BackPressure: {Systematic: 50}, CommonPressure: {Systematic: 100}, TotalTemperature: {Systematic: 2}, Discharge: {Systematic: 0.002}}
	table := func(c *nozzle.Config) {
		c.Discharge = []nozzle.Point{{NPR: 1.2, Value: 0.9}, {NPR: 1.6, Value: 0.95}, {NPR: 2.4, Value: 0.97}}
	}
	for _, tc := range []struct {
		name   string
		p      float64 // Pa
		u      *Inputs
		change func(*nozzle.Config)
		within float64 // of the half-width
		draws  int
	}{
		{"choked", 250e3, &ordinary, nil, 0.02, 1_000_000},
		{"unchoked, Cd of NPR", 150e3, &ordinary, table, 0.02, 1_000_000},
		{"at Mach 1", critical, &ordinary, nil, 0.02, 1_000_000},
		{"at Mach 1, cold", critical, &cold, nil, 0.02, 1_000_000},
		{"just below Mach 1", critical * 0.998, &cold, nil, 0.02, 1_000_000},
		{"at Mach 1, poor", critical, &poor, nil, 0.02, 1_000_000},
		{"near no flow", 1.01 * 101325, &small, nil, 0.02, 1_000_000},
		{"at no flow", 1.002 * 101325, &small, nil, 0.02, 1_000_000},
		{"divergent, shock inside", 140e3, &ordinary, divergent, 0.02, 200_000},
		{"divergent, at the first critical ratio", 1.25678 * 101325, &ordinary, divergent, 0.1, 200_000},
	} {
		t.Run(tc.name, func(t *testing.T) {
			t.Parallel()
			p := point(t, tc.p, 900, tc.change)
			p.HumidityRatio = 0.01
			g, err := gas.NewMixture(p.Fuel, p.FuelAirRatio, p.HumidityRatio)
			if err != nil {
				t.Fatal(err)
			}
			p.Gas = &g
			r := evaluate(t, p, tc.u)
			mc, err := MonteCarlo(p, tc.u, tc.draws, rand.New(rand.NewPCG(20240601, 1)))
			if err != nil {
				t.Fatal(err)
			}
			for o, e := range r.Outputs {
				m := mc.Outputs[o]
				half := (m.High - m.Low) / 2
				t.Logf("%-22s low %+.4f high %+.4f u95 %+.4f of the half-width", Output(o), (e.Low-m.Low)/half, (e.High-m.High)/half, e.U95/half-1)
				if math.Abs((e.High-e.Low)/2-half) > tc.within*half || (Output(o) < ThroatMach && math.Abs(e.U95-half) > tc.within*half) {
					t.Errorf("%s: half-width %v, U95 %v, Monte Carlo %v", Output(o), (e.High-e.Low)/2, e.U95, half)
				}
				if math.Abs(e.Low-m.Low) > tc.within*half || math.Abs(e.High-m.High) > tc.within*half {
					t.Errorf("%s: %v to %v, Monte Carlo %v to %v", Output(o), e.Low, e.High, m.Low, m.High)
				}
			}
			if math.Abs(r.PChoked-mc.PChoked) > 0.002 {
				t.Errorf("P(choked) = %v, Monte Carlo %v", r.PChoked, mc.PChoked)
			}
		})
	}
}
