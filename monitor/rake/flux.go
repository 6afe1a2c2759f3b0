package rake

import (
	"math"

	"throatwatch/monitor"
)

const (
	// follow is the time constant with which live weights follow the flow, ns. The noise
	// of a scan is no flow, and a source that comes or goes makes no step.
	follow = 5 * int64(1e9)
	// weigher is the γ with which flow is told between the places of a rake: see MassFlux.
	weigher = 1.33
	// flows is the least dynamic head, as a part of the static pressure, that tells the
	// flow of one place from that of another.
	flows = 0.005
)

// Live holds the weights of a rake as they follow the flow. It is plain data; the zero
// value has seen no flow.
type Live struct {
	Weights []float64 // of each probe; their sum is that of the areas
	T       int64     // event time of the last scan
	Seen    bool
}

// Weigh lets the weights follow the mass flux at the places of the probes, at event time
// t in ns: w = area · MassFlux, of equal sum. pressure and static are absolute, and the
// pressures those that Places gives; temperature is of each place in K, nil if it is
// everywhere the same, which is off by half of what the temperatures differ. It begins
// with the areas, nil = equal ones, and moves with a time constant of 5 s, so that no
// scan makes a step. It reports whether there is a flow to weigh by; if not, the weights
// stay.
func (l *Live) Weigh(t int64, areas, pressure []float64, static float64, temperature []float64) bool {
	if len(l.Weights) != len(pressure) {
		*l = Live{Weights: make([]float64, len(pressure))}
		for i := range l.Weights {
			l.Weights[i] = area(areas, i)
		}
	}
	dt := int64(0)
	if l.Seen {
		dt = max(t-l.T, 0)
	}
	l.T, l.Seen = max(t, l.T), true
	var flux [MaxProbes]float64
	var all, sum float64
	for i, p0 := range pressure {
		t0 := 1.0
		if temperature != nil {
			t0 = temperature[i]
		}
		if !(static > 0 && p0 > (1+flows)*static && t0 > 0) {
			return false
		}
		flux[i] = area(areas, i) * MassFlux(p0, static, t0, weigher, 1)
		all += area(areas, i)
		sum += flux[i]
	}
	by := -math.Expm1(-float64(dt) / float64(follow))
	for i := range l.Weights {
		l.Weights[i] += by * (flux[i]*all/sum - l.Weights[i])
	}
	return true
}

func area(areas []float64, i int) float64 {
	if areas == nil {
		return 1
	}
	return areas[i]
}

// Places fills into with what stands at each place of a group, from the result of the
// same scan: the value of a probe that is read, else mean and pattern, NaN without one.
func (w *Watch) Places(s *State, r *Result, values []float64, quality []monitor.Quality, into []float64) {
	for i := range s.Probes {
		p := &s.Probes[i]
		switch {
		case p.Out == In && quality[i].Usable():
			into[i] = values[i]
		case r.Filled&(1<<i) != 0:
			into[i] = r.Mean + p.Offset
		default:
			into[i] = math.NaN()
		}
	}
}

// Reweigh gives what the mean of a result moves by if its places are weighed otherwise:
// with d what stands at each place, less the mean,
//
//	Σ w d/Σ w − Σ w₀ d/Σ w₀
//
// over the places where something stands, w₀ the weights of the watch. With all probes
// read that makes the mean the plain one by the new weights.
func (w *Watch) Reweigh(r *Result, places, weights []float64) float64 {
	var moved, all, was, allWas float64
	for i, v := range places {
		if math.IsNaN(v) {
			continue
		}
		d := v - r.Mean
		moved, all = moved+weights[i]*d, all+weights[i]
		was, allWas = was+w.weight(i)*d, allWas+w.weight(i)
	}
	if !(all > 0) {
		return 0
	}
	return moved/all - was/allWas
}
