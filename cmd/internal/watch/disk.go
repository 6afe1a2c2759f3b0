package watch

import (
	"fmt"
	"math"
	"time"
)

const (
	diskEvery  = 10 * time.Second // between readings that are remembered
	diskWindow = 60               // readings: the rate is that of the last ten minutes
	diskSettle = time.Minute      // before there is a rate
	diskBack   = 1.2              // so much more than the bound has to be free before all is well again
)

// Disk judges whether the disk of a data folder will soon be full, at its present
// rate, whoever fills it. A bound that is 0 does not count.
type Disk struct {
	Floor float64       // bytes that have to be free
	Ahead time.Duration // for which what is free has to last

	seen []reading // oldest first, at most diskWindow
	low  bool
}

type reading struct {
	at   time.Time
	free float64
}

// See takes what is free, in bytes, at times that do not fall, and tells whether it
// is little, and what there is. What was little is so until a fifth more than the
// bounds is free.
func (d *Disk) See(free float64, at time.Time) (low bool, what string) {
	if n := len(d.seen); n == 0 || at.Sub(d.seen[n-1].at) >= diskEvery {
		if n == diskWindow {
			d.seen = append(d.seen[:0], d.seen[1:]...)
		}
		d.seen = append(d.seen, reading{at, free})
	}
	lasts := math.Inf(1) // s
	first := d.seen[0]
	if span := at.Sub(first.at); span >= diskSettle && free < first.free {
		lasts = free / (first.free - free) * span.Seconds()
	}
	bound := 1.0
	if d.low {
		bound = diskBack
	}
	d.low = free < bound*d.Floor || lasts < bound*d.Ahead.Seconds()
	what = fmt.Sprintf("%.1f GB free", free/1e9)
	if hours := lasts / 3600; hours < 1000 {
		what += fmt.Sprintf(", enough for about %.1f h as it fills now", hours)
	}
	return d.low, what
}
