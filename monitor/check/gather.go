package check

import (
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/unit"
)

// bins is how many parts a window is cut into.
const bins = 100

// Gather is what a check remembers of the scans of its window. It is plain data; the zero
// value gathers nothing.
type Gather struct {
	From, To int64 // event time of the first and last scan, ns UTC; 0 = none yet
	Scans    int
	Samples  uint64 // of all channels
	Channels []Seen
}

// Seen is what is remembered of a channel.
type Seen struct {
	Past   steady.Past // of its readings: see reading
	N      int         // readings
	Mean   float64     // of them
	Came   int         // scans into which a sample fell
	Raw    float64     // of the newest
	Moved  bool        // the raw value was not always the same
	Usable int         // scans
	Bad    [monitor.NumQualities]uint16
}

// window gives the window of the statistics for scans of a period, ns.
func window(l *Limits, period int64) steady.Window {
	w := steady.Window{Width: max(l.Window/bins, period, 1)}
	w.Bins = int((l.Window + w.Width - 1) / w.Width)
	return w
}

// Add takes a scan of the channels of c; scans come in order of time. It allocates with
// the first scan only.
func (g *Gather) Add(l *Limits, c *compute.Config, period int64, scan *monitor.Scan) {
	if g.Scans == 0 {
		*g = Gather{From: scan.T, Channels: make([]Seen, len(c.Channels))}
	}
	w := window(l, period)
	g.To = scan.T
	g.Scans++
	at := scan.T - g.From + w.Width // the window begins with the second bin: steady numbers bins from 0
	for i := range g.Channels {
		s, q := &g.Channels[i], scan.Quality[i]
		g.Samples += uint64(scan.Samples[i])
		if works(q) {
			s.Usable++
		} else {
			s.Bad[q]++
		}
		if scan.Samples[i] == 0 { // a held value is no observation
			continue
		}
		raw := scan.Raw[i]
		s.Moved = s.Moved || s.Came > 0 && raw != s.Raw
		s.Raw = raw
		s.Came++
		if v := reading(c, i, scan); works(q) && !math.IsNaN(v) {
			s.N++
			s.Mean += (v - s.Mean) / float64(s.N)
			w.Add(&s.Past, at, v)
		}
	}
}

// Full tells that the window is over.
func (g *Gather) Full(l *Limits) bool { return g.Scans > 0 && g.To-g.From >= l.Window }

// works tells whether a channel itself gives a value: one that is left out, or whose
// reference is missing, does.
func works(q monitor.Quality) bool {
	return q.Usable() || q == monitor.QualityExcluded || q == monitor.QualityNoReference
}

// reading gives what is judged of a channel: its calibrated value without a reference, and
// of an absolute pressure what it differs from the barometer, where there is one.
func reading(c *compute.Config, i int, scan *monitor.Scan) float64 {
	ch := &c.Channels[i]
	v, _ := ch.Convert(scan.Raw[i])
	if against(c, i) {
		baro := c.Stations.Barometer
		if !works(scan.Quality[baro]) {
			return math.NaN()
		}
		b, _ := c.Channels[baro].Convert(scan.Raw[baro])
		v -= b
	}
	return v
}

// against tells whether a channel is an absolute pressure that is held against the
// barometer.
func against(c *compute.Config, i int) bool {
	b := c.Stations.Barometer
	return c.Channels[i].Unit.Dimension == unit.Pressure && c.Channels[i].Reference == calib.Absolute && b >= 0 && b != i
}
