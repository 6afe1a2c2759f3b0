package steady_test

import (
	"fmt"
	"math/rand/v2"

	"throatwatch/monitor/steady"
)

// What a caller does at each scan: enter the values, NaN for what was held or is
// missing, and look at the finding. Forecast and test point read the windows.
func Example() {
	d := &steady.Detector{
		Quantities: []steady.Criterion{
			{Window: steady.Seconds(60), Relative: 0.0025 / 60},     // pressure: 0.25 %/min
			{Window: steady.Seconds(60), Slope: 6.0 / 60, Noise: 1}, // EGT: 6 K/min
		},
		Dwell: 10e9,
	}
	var state steady.State // part of the checkpoint
	r := rand.New(rand.NewPCG(1, 2))
	const scan = int64(50e6)
	values := make([]float64, len(d.Quantities))
	for t := int64(0); t <= 90e9; t += scan {
		values[0] = 250e3 + 200*r.NormFloat64()
		values[1] = 950 + 3.5*float64(t)/60e9 + r.NormFloat64()
		d.Step(&state, t, values)
	}
	fmt.Println("steady:", state.Result.Steady, state.Result.Why)

	limit := steady.Limit{Value: 958}
	ahead := limit.Forecast(d.Quantities[1].Window, &state.Stats[1], state.Result.Steady)
	fmt.Printf("%v: limit in %.0f s (%.0f to %.0f)\n", ahead.Why, ahead.Seconds, ahead.Low95, ahead.High95)

	point := state.Take(1, []steady.Part{{U: 144}, {U: 1.4}})
	p := point.Values[0]
	fmt.Printf("p7 = %.2f kPa ± %.2f kPa (k = %.2f)\n", p.Mean/1e3, p.U95/1e3, p.K)
	// Output:
	// steady: true steady
	// given: limit in 48 s (43 to 55)
	// p7 = 250.01 kPa ± 0.28 kPa (k = 1.96)
}

// The baseline of the flow balance, and what the run leaves behind.
func ExampleBaseline() {
	b := &steady.Baseline{Memory: 600e9, Learn: 60e9, Smooth: 5e9, Hold: 3e9}
	var state steady.Learned // part of the checkpoint
	var d steady.Departure
	for t := int64(0); t < 200e9; t += 50e6 {
		residual := 0.011 // of the flow
		if t > 150e9 {
			residual = 0.025 // air is lost after the bellmouth
		}
		d = b.Step(&state, t, residual, 0.006, true)
	}
	fmt.Printf("baseline %.3f, departs by %.3f, flagged %v\n", d.Baseline, d.By, d.Flagged)
	// Output: baseline 0.011, departs by 0.014, flagged true
}
