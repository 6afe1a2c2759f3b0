package rehearsal

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/unit"
)

// shows gives what a sensor stands in: SI, a pressure absolute or, where the
// sensor measures a difference by nature, as that difference.
type shows func(*plant) float64

// sensor turns a true value into the readings of a channel: it lags, is off by its
// systematic error, noisy by its random one, and has an ADC.
type sensor struct {
	spec     *calib.Spec
	shows    shows
	absolute bool    // shows is an absolute pressure, whatever the sensor measures against
	port     shows   // what is taken off it; nil when shows is what the sensor measures
	tau      float64 // s
	x        float64 // SI, lagged
	sound    float64 // SI, lagged as without a fault
	offset   float64 // SI, systematic error, the same for the whole run
	sigma    float64 // SI, standard deviation of the noise
	inverse  inverse
	perUnit  float64 // ADC codes per raw unit, when that is a whole number
	step     float64 // raw units per ADC code
	lo, hi   float64 // ADC codes at the ends of the range
	unitName string
	every    int // packs from one reading to the next
}

// newSensors makes the sensors of a rig: those that a station names show what the
// station is, the others something that fits their dimension and range.
func newSensors(c *compute.Config, rate float64, hold []int64, p *plant, rng *rand.Rand) ([]sensor, error) {
	sensors := make([]sensor, len(c.Channels))
	station(c, sensors, rng)
	for i := range sensors {
		s, ch := &sensors[i], &c.Channels[i]
		s.spec = &ch.Spec
		if s.shows == nil {
			s.generic(rng)
		}
	}
	for i := range sensors {
		s, ch := &sensors[i], &c.Channels[i]
		if s.absolute && ch.Reference != calib.Absolute {
			s.port = barometer
			if ch.Port >= 0 && (sensors[ch.Port].absolute || c.Channels[ch.Port].Reference == calib.Absolute) {
				s.port = sensors[ch.Port].shows
			}
		}
		if err := s.convert(ch.ID); err != nil {
			return nil, err
		}
		s.x = s.input(p, 0)
		s.sound = s.x
		u := &ch.Uncertainty
		// A good instrument lies well inside the uncertainty that is stated for it.
		u95 := u.U95(ch.Low+0.3*(ch.High-ch.Low), ch.Low, ch.High)
		if math.IsNaN(u95) { // a thermocouple beyond its class
			u95 = 0
		}
		s.offset = 0.2 * clamp(rng.NormFloat64(), -2, 2) * u95 / 2
		s.sigma = u.Random / 2
		if s.sigma == 0 {
			s.sigma = 1e-4 * (ch.High - ch.Low)
		}
		// What may be held for seconds is read less often.
		s.every = 1
		if hold[i] >= 2e9 {
			s.every = max(1, int(rate/5))
		}
	}
	return sensors, nil
}

// station gives the channels of stations what they show.
func station(c *compute.Config, sensors []sensor, rng *rand.Rand) {
	st := &c.Stations
	set := func(i int, tau float64, f shows) {
		if i >= 0 && i < len(sensors) {
			sensors[i].shows, sensors[i].tau = f, tau
		}
	}
	// Later entries win where a rig uses one channel twice; the physics behind is
	// the same then.
	set(st.AmbientT, 0, func(p *plant) float64 { return p.ambient })
	set(st.InletT, 0.5, func(p *plant) float64 { return p.inletT })
	set(st.Humidity, 0, func(p *plant) float64 { return p.humidity })
	if st.DewPoint {
		set(st.Humidity, 1, func(p *plant) float64 { return dewPoint(p.humidity, p.ambient) })
	}
	set(st.Speed, 0, func(p *plant) float64 { return p.n * p.max / 60 })
	set(st.FuelFlow, 0.15, func(p *plant) float64 { return p.fuelFlow })
	set(st.WaterFlow, 0, func(*plant) float64 { return 0 })
	set(st.BleedFlow, 0.15, func(p *plant) float64 { return p.bleed * p.airFlow })
	set(st.Thrust, 0.08, func(p *plant) float64 { return p.thrust })
	set(st.Barometer, 0, barometer)
	set(st.InletP, pneumatic, func(p *plant) float64 { return p.inletP })
	set(st.ExitPlane, pneumatic, func(p *plant) float64 { return p.back })
	set(st.Bellmouth, pneumatic, func(p *plant) float64 { return p.bellmouth })
	for _, i := range st.WallStatic {
		set(i, pneumatic, func(p *plant) float64 { return p.p7Static })
	}
	for _, i := range st.Reheat {
		set(i, 0, func(*plant) float64 { return 0 })
	}
	for _, i := range st.ThroatArea {
		set(i, 0, func(p *plant) float64 { return p.throat })
	}
	for k, v := range pattern(st.P7Watch.Weights, len(st.P7), rng) {
		set(st.P7[k], pneumatic, func(p *plant) float64 { return p.p7 + 0.004*v*(p.p7-p.back) })
	}
	recovery := 1.0
	if r := c.Recovery.Factor; r > 0 {
		recovery = r
	}
	for k, v := range pattern(st.T7Watch.Weights, len(st.T7), rng) {
		set(st.T7[k], 1.2+0.3*rng.Float64(), func(p *plant) float64 {
			return p.t7Static + recovery*(p.t7-p.t7Static) + 8*v*spread(p)
		})
	}
	for k, v := range pattern(nil, len(st.EGT), rng) {
		set(st.EGT[k], 0.8+0.3*rng.Float64(), func(p *plant) float64 {
			return p.egt - st.EGTTrim + 14*v*spread(p)
		})
	}
	for _, i := range slices.Concat([]int{st.Barometer, st.InletP, st.ExitPlane}, st.P7, st.WallStatic) {
		if i >= 0 && i < len(sensors) {
			sensors[i].absolute = true
		}
	}
}

// dewPoint gives the temperature, K, at which air of relative humidity rh and
// temperature t would be saturated.
func dewPoint(rh, t float64) float64 {
	want, err := gas.SaturationPressure(t)
	if err != nil {
		return t
	}
	lo, hi := t-60, t
	for range 40 {
		middle := (lo + hi) / 2
		if p, err := gas.SaturationPressure(middle); err == nil && p > rh*want {
			hi = middle
		} else {
			lo = middle
		}
	}
	return hi
}

// pneumatic is the time constant, s, of a pressure line.
const pneumatic = 0.03

func barometer(p *plant) float64 { return p.barometer }

// spread grows with power: a burner is more even at idle.
func spread(p *plant) float64 { return mark(p.lit) * (0.35 + 0.65*min(p.power, 1)) }

// pattern gives the circumferential pattern of n probes: a tilt, a second harmonic
// and something of each probe's own, without weighted mean, about ±1.
func pattern(weights []float64, n int, rng *rand.Rand) []float64 {
	v := make([]float64, n)
	a, b := 2*math.Pi*rng.Float64(), 2*math.Pi*rng.Float64()
	var mean, all float64
	for i := range v {
		x := 2 * math.Pi * float64(i) / float64(n)
		v[i] = 0.6*math.Cos(x+a) + 0.3*math.Cos(2*x+b) + 0.25*rng.NormFloat64()
		w := 1.0
		if weights != nil {
			w = weights[i]
		}
		mean += w * v[i]
		all += w
	}
	for i := range v {
		v[i] -= mean / all
	}
	return v
}

// generic gives a channel without a station something to show by its dimension
// and range: nothing at rest, about half the range at full power.
func (s *sensor) generic(rng *rand.Rand) {
	lo, hi := s.spec.Low, s.spec.High
	span := hi - lo
	shape := 0.7 + 1.3*rng.Float64()
	share := 0.4 + 0.2*rng.Float64()
	power := func(p *plant) float64 { return min(p.power, 1) }
	speed := func(p *plant) float64 { return math.Pow(p.n, shape) }
	rest := clamp(0, lo, hi)
	switch s.spec.Unit.Dimension {
	case unit.Pressure:
		s.tau = 0.1
		s.absolute = s.spec.Reference == calib.Gauge
		cell := lo < 0 && hi < -2*lo // a range about zero: of the cell, against outside
		switch s.spec.Reference {
		case calib.Absolute:
			s.shows = func(p *plant) float64 { return clamp(p.back+max(0, share*(hi-1.3*weather))*speed(p), lo, hi) }
		case calib.Gauge:
			s.shows = func(p *plant) float64 { return p.barometer + rest + share*(hi-rest)*speed(p) }
			if cell {
				s.shows = func(p *plant) float64 { return p.barometer + clamp(-p.cell, 0.9*lo, 0.9*hi) }
			}
		case calib.Differential, calib.ReferenceNone: // a loss goes with the square of the flow
			s.shows = func(p *plant) float64 { return rest + share*(hi-rest)*min(1, square(p.gasFlow/p.gasTop)) }
			if cell {
				s.shows = func(p *plant) float64 { return clamp(-p.cell, 0.9*lo, 0.9*hi) }
			}
		}
	case unit.Temperature:
		s.tau = 20
		rise := share * 0.85 * (hi - day)
		if hi < 340 { // of the surroundings
			rise = 1.5
		}
		s.shows = func(p *plant) float64 { return clamp(p.ambient+rise*power(p), lo+0.02*span, hi-0.02*span) }
	case unit.Velocity, unit.Acceleration, unit.Length:
		// Vibration: unbalance, and a critical speed that is passed through.
		critical := 0.55 + 0.2*rng.Float64()
		s.shows = func(p *plant) float64 {
			return rest + 0.25*(hi-rest)*(0.6*p.n*p.n+0.5*p.n*math.Exp(-square((p.n-critical)/0.04)))
		}
	case unit.Frequency:
		top := share * hi
		s.shows = func(p *plant) float64 {
			if full := p.max / 60; hi > full {
				return p.n * full
			}
			return top * p.n
		}
	case unit.MassFlow:
		s.tau = 0.15
		s.shows = func(p *plant) float64 {
			if hi > p.gasTop {
				return p.gasFlow
			}
			return min(p.fuelFlow, 0.9*hi)
		}
	case unit.Force:
		s.shows = func(p *plant) float64 { return rest + share*(hi-rest)*p.thrust/p.thrustTop }
	case unit.Ratio, unit.Voltage, unit.Current, unit.Density, unit.SpecificEnergy, unit.Area, unit.Angle, unit.Time, unit.Volume, unit.Mass:
		// Supplies, positions, properties: steady.
		s.shows = func(p *plant) float64 { return lo + span*(share+0.005*math.Sin(p.t/30+shape)) }
	case unit.VolumeFlow, unit.TemperatureDifference:
		s.tau = 1
		s.shows = func(p *plant) float64 { return rest + share*(hi-rest)*speed(p) }
	case unit.Invalid:
		s.shows = func(*plant) float64 { return lo + span/2 }
	}
}

// convert prepares the way from SI to ADC codes.
func (s *sensor) convert(id string) error {
	sp := s.spec
	if !(sp.High > sp.Low) {
		return fmt.Errorf("rehearsal: channel %q has no range: give it one", id)
	}
	s.unitName = senmlUnit(s.sentIn())
	var err error
	if s.inverse, err = newInverse(sp); err != nil {
		return fmt.Errorf("rehearsal: channel %q: %w", id, err)
	}
	lo, hi := s.inverse.raw(sp.Low), s.inverse.raw(sp.High)
	if lo > hi {
		lo, hi = hi, lo
	}
	s.step = sp.Step
	if !(s.step > 0) {
		s.step = math.Pow(10, math.Floor(math.Log10((hi-lo)/(1<<15)))) // 15 to 18 bits, in decimal steps
	}
	if n := math.Round(1 / s.step); n >= 1 && math.Abs(1/s.step-n) < 1e-9*n {
		s.perUnit = n
	}
	// The ends of the range must survive the calibration and its rounding.
	s.lo, s.hi = math.Ceil(lo/s.step), math.Floor(hi/s.step)
	if !s.good(s.lo) {
		s.lo++
	}
	if !s.good(s.hi) {
		s.hi--
	}
	if s.lo > s.hi {
		return fmt.Errorf("rehearsal: channel %q: one ADC step of %g is more than its range", id, s.step)
	}
	return nil
}

// sentIn gives the unit in which raw values are sent.
func (s *sensor) sentIn() unit.Unit {
	if s.spec.Raw.Valid() {
		return s.spec.Raw
	}
	return s.spec.Unit
}

func (s *sensor) good(code float64) bool {
	_, q := s.spec.Convert(s.reading(code))
	return q == monitor.QualityGood
}

// reading gives the raw value of an ADC code. Dividing by a whole number gives the
// decimal number nearest to it, which multiplying with 0.001 does not.
func (s *sensor) reading(code float64) float64 {
	if s.perUnit > 0 {
		return code / s.perUnit
	}
	return code * s.step
}

// input gives what acts on the sensing element now; extra is heat that only this
// probe feels.
func (s *sensor) input(p *plant, extra float64) float64 {
	x := s.shows(p) + extra
	if s.port != nil {
		x -= s.port(p)
	}
	return x
}

// follow lets the sensing element follow its input x for dt seconds with the time
// constant tau, s.
func (s *sensor) follow(x, dt, tau float64) {
	s.sound = lagged(s.sound, x, dt, s.tau)
	s.x = lagged(s.x, x, dt, tau)
}

func lagged(was, x, dt, tau float64) float64 {
	if tau > 0 {
		return lag(was, x, dt, tau)
	}
	return x
}

// read gives the raw value of a reading: the element's value with errors, noise
// and shift, in whole ADC steps within the range.
func (s *sensor) read(noise, shift float64) float64 {
	code := math.Round(s.inverse.raw(s.x+s.offset+noise*s.sigma+shift) / s.step)
	code = clamp(code, s.lo, s.hi)
	raw := s.reading(code)
	if slices.Contains(s.spec.Codes, raw) { // a good reading is never sent as "no reading"
		if code++; code > s.hi {
			code -= 2
		}
		raw = s.reading(code)
	}
	return raw
}

// senmlUnit gives the name that the SenML registry [RFC 8428 12.1] has for a unit,
// where it differs from the trade's.
func senmlUnit(u unit.Unit) string {
	switch u.Name {
	case "degC":
		return "Cel"
	case "rpm":
		return "1/min"
	}
	return u.Name
}

// inverse turns SI values into raw ones: the calibration backwards.
type inverse struct {
	spec   *calib.Spec
	lo, hi float64 // raw values at Low and High of a calibration that is no line
}

// newInverse finds the branch of the calibration that the range lies on.
func newInverse(s *calib.Spec) (inverse, error) {
	inv := inverse{spec: s}
	if len(s.Polynomial) == 1 || (len(s.Polynomial) == 2 && s.Polynomial[1] == 0) {
		return inv, fmt.Errorf("calibration is constant: every raw value gives %g %s", s.Polynomial[0], s.Unit.Name)
	}
	if len(s.Polynomial) <= 2 {
		return inv, nil
	}
	var ok [2]bool
	inv.lo, ok[0] = nearest(s, s.Low)
	inv.hi, ok[1] = nearest(s, s.High)
	if !ok[0] || !ok[1] {
		return inv, fmt.Errorf("calibration does not reach its range, %g to %g %s", s.Unit.FromSI(s.Low), s.Unit.FromSI(s.High), s.Unit.Name)
	}
	return inv, nil
}

// nearest gives the root of calibration = si that is nearest to a raw value of 0.
func nearest(s *calib.Spec, si float64) (float64, bool) {
	f := func(raw float64) float64 { return calibrated(s, raw) - si }
	a := [2]float64{}
	for size := 1e-6; size < 1e9; size *= 1.2 {
		for k, sign := range [2]float64{1, -1} {
			b := sign * size
			if fa, fb := f(a[k]), f(b); fa == 0 || (fa < 0) != (fb < 0) {
				return bisect(f, a[k], b), true
			}
			a[k] = b
		}
	}
	return 0, false
}

// raw gives the raw value that calibrates to si. Beyond the range a curved
// calibration gives the end of it.
func (v *inverse) raw(si float64) float64 {
	s := v.spec
	switch len(s.Polynomial) {
	case 0:
		return s.Unit.FromSI(si)
	case 2:
		return (s.Unit.FromSI(si) - s.Polynomial[0]) / s.Polynomial[1]
	}
	si = clamp(si, s.Low, s.High)
	return bisect(func(raw float64) float64 { return calibrated(s, raw) - si }, v.lo, v.hi)
}

// bisect gives the root of f between a and b; without a change of sign, the end
// that is nearer to one.
func bisect(f func(float64) float64, a, b float64) float64 {
	fa, fb := f(a), f(b)
	if (fa < 0) == (fb < 0) {
		if math.Abs(fa) < math.Abs(fb) {
			return a
		}
		return b
	}
	for range 80 {
		m := (a + b) / 2
		if (f(m) < 0) == (fa < 0) {
			a = m
		} else {
			b = m
		}
	}
	return (a + b) / 2
}

// calibrated gives the SI value of a raw one by a polynomial. Spec.Convert will not
// do: it gives 0 for raw values that stand for "no reading".
func calibrated(s *calib.Spec, raw float64) float64 {
	var v float64
	for _, c := range slices.Backward(s.Polynomial) {
		v = v*raw + c
	}
	return s.Unit.ToSI(v)
}
