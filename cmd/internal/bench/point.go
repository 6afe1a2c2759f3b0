package bench

import (
	"context"
	"errors"
	"fmt"
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
)

// errNumber says that what is measured did not compute.
var errNumber = errors.New("it did not compute")

// points measures a scan's whole computation: calibration, probes and their patterns,
// closure with the fuel flow, nozzle, U95, balance, EGT ledger, phase and forecasts.
func points(ctx context.Context, o *Options) ([]Figure, error) {
	_, bundle, cfg, err := wideRig(o.Rig, o.Dir, wanted)
	if err != nil {
		return nil, err
	}
	scans, err := running(ctx, &cfg, bundle)
	if err != nil {
		return nil, err
	}
	var out []Figure
	for _, kind := range []struct {
		name  string
		kind  nozzle.Kind
		exit  float64 // A9/A8
		limit float64 // ns
	}{{"convergent", nozzle.Convergent, 0, 10e3}, {"con-di", nozzle.ConvergentDivergent, 1.15, 25e3}} {
		c := cfg.Compute
		c.Nozzle.Kind, c.Nozzle.ExitArea = kind.kind, kind.exit*c.Nozzle.ThroatArea
		full, p, allocs, err := stepper(c, scans)
		if err != nil {
			return nil, err
		}
		bare, err := station(&c, p)
		if err != nil {
			return nil, err
		}
		list, err := alternate(o.pairs(),
			func() (float64, error) { return perOp(o.span(), full), nil },
			func() (float64, error) { return perOp(o.span(), bare), nil })
		if err != nil {
			return nil, err
		}
		out = append(out, compared(
			fmt.Sprintf("operating point of %d channels, %s, closure and U95, beside gas, closure and nozzle without U95, CPU ns", wanted, kind.name), list,
			fmt.Sprintf("≤ %g µs, ≤ 10 ×", kind.limit/1e3), func(f *Figure) bool { return f.Ours <= kind.limit && *f.Ratio <= 10 }))
		list, err = alternate(o.pairs(),
			func() (float64, error) { return perOp(o.span(), full), nil },
			func() (float64, error) { return perOp(o.span(), closedForm(&c, p)), nil })
		if err != nil {
			return nil, err
		}
		out = append(out,
			compared("the same beside the closed form of constant γ, CPU ns", list, "reported", nil),
			alone("allocations of it", allocs, "0", func(f *Figure) bool { return f.Ours == 0 }))
	}
	return out, nil
}

// stepper gives the step of the computation over running scans, the point it leads to
// and the allocations of a step.
func stepper(cfg compute.Config, scans []*monitor.Scan) (step func(), p *monitor.OperatingPoint, allocs float64, err error) {
	c, err := compute.New(cfg)
	if err != nil {
		return nil, nil, 0, err
	}
	var s compute.State
	c.Reset(&s, nil)
	p = &monitor.OperatingPoint{}
	scan, n := copyScan(scans[0]), 0
	period := scans[1].T - scans[0].T
	step = func() {
		from := scans[n%len(scans)]
		n++
		copy(scan.Raw, from.Raw)
		copy(scan.Quality, from.Quality)
		scan.N, scan.T = uint64(n), start+int64(n)*period
		c.Step(&s, scan, p)
	}
	for range 2000 {
		step()
	}
	if v, ok := p.Get(monitor.ChokeMarginPercentU95); !ok || !(v > 0) || p.Choke == monitor.ChokeUnknown {
		return nil, nil, 0, fmt.Errorf("operating point: %w: %v, cause %+v", errNumber, p.Choke, p.Cause)
	}
	return step, p, allocations(1000, step), nil
}

// station gives the floor of an operating point: gas of the closed f, nozzle, and the
// closure f = Wf (1 + WAR)/(W8 − Wf), from station values that are known.
func station(c *compute.Config, p *monitor.OperatingPoint) (func(), error) {
	n, err := nozzle.New(c.Nozzle.Config)
	if err != nil {
		return nil, err
	}
	in := nozzle.Inputs{
		TotalPressure: unit.Absolute(p.V[monitor.RakePressure]), BackPressure: unit.Absolute(p.V[monitor.BackPressure]),
		TotalTemperature: p.V[monitor.TotalTemperature], MetalTemperature: p.V[monitor.TotalTemperature],
	}
	war, wf := p.V[monitor.HumidityRatio], p.V[monitor.FuelFlow]
	if !(in.TotalPressure > 0 && wf > 0) {
		return nil, fmt.Errorf("station values: %w", errNumber)
	}
	f, sink := p.V[monitor.FuelAirRatio], 0.0
	return func() {
		for range 2 { // as often as it is closed at steady speed: from the last scan's f
			g, err := gas.NewMixture(c.Fuel, f, war)
			if err != nil {
				panic(err)
			}
			r, err := n.Evaluate(&g, in)
			if err != nil {
				panic(err)
			}
			f = wf * (1 + war) / (r.MassFlow - wf)
			sink += r.GrossThrust
		}
	}, nil
}

// closedForm gives choke margin, flow and thrust of a convergent nozzle by the closed
// forms of constant γ (NACA Report 1135, equations 43 to 46 and 80).
func closedForm(c *compute.Config, p *monitor.OperatingPoint) func() {
	p0, pb, t0 := p.V[monitor.RakePressure], p.V[monitor.BackPressure], p.V[monitor.TotalTemperature]
	gamma, r, area, sink := 1.33, 287.3, c.Nozzle.ThroatArea, 0.0
	return func() {
		p0 += 1e-6 // an argument that changes: a constant would be folded
		critical := math.Pow((gamma+1)/2, gamma/(gamma-1))
		npr := p0 / pb
		m := 1.0
		if npr < critical {
			m = math.Sqrt(2 / (gamma - 1) * (math.Pow(npr, (gamma-1)/gamma) - 1))
		}
		x := 1 + (gamma-1)/2*m*m
		w := area * p0 / math.Sqrt(r*t0) * math.Sqrt(gamma) * m * math.Pow(x, -(gamma+1)/(2*(gamma-1)))
		ps := p0 * math.Pow(x, -gamma/(gamma-1))
		v := m * math.Sqrt(gamma*r*t0/x)
		sink += npr/critical + w*v + (ps-pb)*area
	}
}

// critical measures a new gas and its sonic state, beside the sonic state of a gas
// that is there already, found by bisection.
func critical(_ context.Context, o *Options) ([]Figure, error) {
	fuel := gas.Kerosene()
	ready := make([]gas.Mixture, 64)
	f := func(i int) float64 { return 0.01 + 2e-4*float64(i%64) }
	t0 := func(i int) float64 { return 600 + float64(i%512) }
	for i := range ready {
		m, err := gas.NewMixture(fuel, f(i), 0.006)
		if err != nil {
			return nil, err
		}
		ready[i] = m
	}
	worst := 0.0
	for i := range 512 {
		c := ready[i%64].Critical(t0(i))
		tc, pr := bisect(&ready[i%64], t0(i))
		worst = max(worst, math.Abs(c.Temperature/tc-1), math.Abs(c.PressureRatio/pr-1))
	}
	sink, i := 0.0, 0
	list, err := alternate(o.pairs(),
		func() (float64, error) {
			return perOp(o.span(), func() {
				m, err := gas.NewMixture(fuel, f(i), 0.006)
				if err != nil {
					panic(err)
				}
				sink += m.Critical(t0(i)).FluxFunction
				i++
			}), nil
		},
		func() (float64, error) {
			return perOp(o.span(), func() {
				t, pr := bisect(&ready[i%64], t0(i))
				sink += t * pr
				i++
			}), nil
		})
	if err != nil {
		return nil, err
	}
	if !(sink > 0) {
		return nil, errNumber
	}
	return []Figure{
		compared("critical state with the gas of a new f, beside bisection with the gas at hand, CPU ns", list, "≤ 300 ns", func(f *Figure) bool { return f.Ours <= 300 }),
		alone("largest relative difference of T* and p*/p0 to the bisection", worst, "≤ 1e-9", func(f *Figure) bool { return f.Ours <= 1e-9 }),
	}, nil
}

// bisect solves h(T0) − h(T) = γ(T) R T/2 to the last bits of a float64.
func bisect(m *gas.Mixture, t0 float64) (t, pressureRatio float64) {
	h0, r := m.H(t0), m.R()
	low, high := t0/2, t0
	for range 52 {
		t = (low + high) / 2
		if h0-m.H(t) > m.Gamma(t)*r*t/2 {
			low = t
		} else {
			high = t
		}
	}
	return t, math.Exp((m.S0(t) - m.S0(t0)) / r)
}
