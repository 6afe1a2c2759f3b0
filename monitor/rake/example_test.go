package rake_test

import (
	"fmt"
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/rake"
)

// What a caller does at each scan: values and qualities of the group in, mean and
// findings out.
func ExampleWatch() {
	w := &rake.Watch{
		Probes: 4, Least: 3, Departure: 40, DepartureHold: 3e9, ProofHold: 1e9, Return: 30e9,
		KeepHot: true, Learn: 30e9, Memory: 300e9,
	}
	if err := w.Check(); err != nil {
		fmt.Println(err)
	}
	var state rake.State // part of the checkpoint
	quality := []monitor.Quality{monitor.QualityGood, monitor.QualityGood, monitor.QualityGood, monitor.QualityGood}
	var r rake.Result
	for t := int64(0); t < 60e9; t += 50e6 {
		values := []float64{880, 905, 915, 900}
		if t > 50e9 { // probe 1 breaks
			values[0], quality[0] = math.NaN(), monitor.QualityInvalidCode
		}
		r = w.Step(&state, t, values, quality, true)
	}
	fmt.Printf("mean %.1f K from %d probes, sampling %.1f K\n", r.Mean, r.Used, r.Sampling)
	fmt.Printf("probe 1: %v, place filled %v\n", state.Probes[0].Out, r.Filled&1 != 0)
	// Output:
	// mean 900.0 K from 3 probes, sampling 7.4 K
	// probe 1: proof, place filled true
}
