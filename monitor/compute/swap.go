package compute

import (
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
)

// Swap is a sensor that takes the place of another on a channel. Range, reference and raw
// unit stay those of the channel.
type Swap struct {
	From        int64 // event time of its first sample, ns UTC
	Polynomial  []float64
	Uncertainty calib.Uncertainty
	Record      calib.Record
}

// RecordAt gives what is on file of the sensor that is on the channel at event time t.
func (c *Channel) RecordAt(t int64) *calib.Record {
	for i := range slices.Backward(c.Swaps) {
		if c.Swaps[i].From <= t {
			return &c.Swaps[i].Record
		}
	}
	return &c.Record
}

// swapped is a channel with swaps: its sensors in their order, the first from the beginning.
type swapped struct {
	channel int
	sensors []Swap
}

// swaps lists the channels with swaps, and makes the channels the Computer's own.
func (c *Computer) swaps() {
	for i := range c.cfg.Channels {
		ch := &c.cfg.Channels[i]
		if len(ch.Swaps) == 0 {
			continue
		}
		first := Swap{From: beginning, Polynomial: ch.Polynomial, Uncertainty: ch.Uncertainty, Record: ch.Record}
		c.swapped = append(c.swapped, swapped{i, append([]Swap{first}, ch.Swaps...)})
	}
	if len(c.swapped) > 0 {
		c.cfg.Channels = slices.Clone(c.cfg.Channels)
	}
}

// beginning is before every event.
const beginning = -1 << 63

// fitSensors lets each channel of the scan have the calibration of the sensor that measured
// its sample. A sample is not judged by those of the sensor before, and what was found of
// that one is forgotten. What was learned of the place of a probe stays.
func (c *Computer) fitSensors(s *State, scan *monitor.Scan) {
	for k := range c.swapped {
		sw := &c.swapped[k]
		t := scan.T - max(scan.Age[sw.channel], 0)
		at := len(sw.sensors) - 1
		for sw.sensors[at].From > t {
			at--
		}
		on, ch, cs := &sw.sensors[at], &c.cfg.Channels[sw.channel], &s.Channels[sw.channel]
		ch.Polynomial, ch.Uncertainty, ch.Record = on.Polynomial, on.Uncertainty, on.Record
		if cs.Seen && cs.LastT < on.From {
			cs.Seen = false
			if sw.channel < len(s.Sensors) {
				s.Sensors[sw.channel] = Sensor{}
			}
		}
	}
}

// InUse tells whether a station value needs a channel, itself or as a reference port.
func (c *Config) InUse(channel int) bool {
	st := &c.Stations
	used := slices.Concat(st.P7, st.T7, st.EGT, st.WallStatic, st.Reheat, st.ThroatArea, []int{
		st.Barometer, st.ExitPlane, st.InletT, st.InletP, st.Humidity, st.AmbientT, st.Speed, st.FuelFlow, st.Bellmouth, st.Thrust,
		st.WaterFlow, st.BleedFlow, st.BleedT,
	})
	for len(used) > 0 {
		i := used[0]
		used = used[1:]
		if i < 0 || i >= len(c.Channels) {
			continue
		}
		if i == channel {
			return true
		}
		if ch := &c.Channels[i]; ch.Reference == calib.Gauge {
			used = append(used, ch.Port) // ports do not run in a circle
		}
	}
	return false
}
