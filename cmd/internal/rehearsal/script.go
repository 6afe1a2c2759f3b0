package rehearsal

import (
	"fmt"
	"math"
	"slices"
	"time"

	"throatwatch/monitor/compute"
)

// Day is the weather and the cell of a test. What is 0 is as on any other day.
type Day struct {
	Ambient    float64 // K, 230 to 320
	Barometer  float64 // Pa, 60e3 to 110e3
	Humidity   float64 // relative, 0.02 to 0.98
	Depression float64 // Pa, of the cell at 100 % speed
}

func (d *Day) settle() {
	for _, v := range []struct {
		to    *float64
		usual float64
	}{{&d.Ambient, day}, {&d.Barometer, weather}, {&d.Humidity, humid}} {
		if *v.to == 0 {
			*v.to = v.usual
		}
	}
}

func (d Day) check() error {
	d.settle()
	within := func(v, lo, hi float64) bool { return v >= lo && v <= hi }
	if !within(d.Ambient, 230, 320) || !within(d.Barometer, 60e3, 110e3) || !within(d.Humidity, 0.02, 0.98) || !within(d.Depression, 0, 5000) {
		return fmt.Errorf("rehearsal: day %+v: give 230 to 320 K, 60 to 110 kPa, humidity 0.02 to 0.98, depression 0 to 5 kPa", d)
	}
	return nil
}

// orOne gives f, or 1 where it is not stated.
func orOne(f float64) float64 {
	if f == 0 {
		return 1
	}
	return f
}

// Change is a real change of what a channel measures, such as oil pressure that
// falls: the element of the sensor feels it, no instrument is at fault. It affects
// nothing else of the engine.
type Change struct {
	Channel string
	At      time.Duration // of the test
	For     time.Duration
	Ramp    time.Duration // in which it comes, and goes, within For
	To      float64       // SI, in the reading of the channel
}

type change struct {
	Change
	channel int
}

func fitChanges(c *compute.Config, list []Change) ([]change, error) {
	var out []change
	for _, one := range list {
		i := slices.IndexFunc(c.Channels, func(ch compute.Channel) bool { return ch.ID == one.Channel })
		if i < 0 || one.For <= 0 || 2*one.Ramp > one.For {
			return nil, fmt.Errorf("rehearsal: change of %q: name a channel of the rig, and a time of two ramps at least", one.Channel)
		}
		out = append(out, change{one, i})
	}
	return out, nil
}

// changed gives what acts on the element of channel i, which would be x without
// changes.
func (r *Rig) changed(i int, x float64) float64 {
	for k := range r.changes {
		ch := &r.changes[k]
		since := r.now - ch.At
		if ch.channel != i || since < 0 || since >= ch.For {
			continue
		}
		part := 1.0
		if ch.Ramp > 0 {
			part = min(1, since.Seconds()/ch.Ramp.Seconds(), (ch.For-since).Seconds()/ch.Ramp.Seconds())
		}
		x += part * (ch.To - x)
	}
	return x
}

// Truth is what stands behind the newest pack: what a watcher is judged by.
type Truth struct {
	T         int64     // true device time, ns UTC
	Indicated []float64 // per channel, SI: what a sound instrument of its lag would read without any error
	Raw       []float64 // per channel, as sent
	Sent      []bool    // per channel: the pack brings a number of its unit
	Late      []bool    // per channel: held back on its way
	FuelAir   float64   // fuel-air ratio, dry basis
}

// Truth fills t.
func (r *Rig) Truth(t *Truth) {
	t.T, t.FuelAir = r.Now(), r.plant.far
	t.Indicated, t.Raw, t.Sent, t.Late = t.Indicated[:0], t.Raw[:0], t.Sent[:0], t.Late[:0]
	for i := range r.sensors {
		sent := r.sent[i] && !math.IsNaN(r.readings[i].Value)
		for _, f := range r.faults {
			if f.channel == i && (f.Kind == NotANumber || f.Kind == WrongUnit) && f.at(r.now) {
				sent = false
			}
		}
		t.Indicated = append(t.Indicated, r.sensors[i].sound)
		t.Raw = append(t.Raw, r.readings[i].Value)
		t.Sent = append(t.Sent, sent)
		t.Late = append(t.Late, r.late[i])
	}
}
