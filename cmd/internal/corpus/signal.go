package corpus

import (
	"math"
	"time"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/rules/pipeline"
)

const second = int64(time.Second)

// signal is what is known of a channel at an instant, without noise and error of
// its sensor. While it is not certain which samples count, it is a range.
type signal struct {
	truly   float64 // SI, as a sound sensor would read now, sent or not
	lo, hi  float64 // of what was sent
	sure    int64   // time of the newest sample that counts, ns UTC
	maybe   int64   // of the newest that may
	reads   float64 // what the sensor says, faults and noise included; NaN if that is refused
	refused int64   // since when the sensor says what is no reading, 0 = it does not
	faulty  bool    // a fault of the sensor acts, or did a little ago
	hidden  bool    // nothing proves the fault (yet)
}

// fault is a fault of a sensor with the time after which it must be known, or gas that
// is hotter at one probe.
type fault struct {
	channel  int
	from, to int64   // ns since the begin
	proven   int64   // ns after from; < 0 = never
	heat     float64 // K, of the gas: no fault
}

const (
	// recovers is how long after a fault a sensor may still be left out, or lag.
	recovers = 20 * second
	// tells is how long it takes to leave out a probe that departs: 3 s, and the
	// filter of the departure.
	tells = 6 * second
)

// provenAfter is the time after which each fault of a sensor must be known. A probe
// that reads hot without proof counts, and so does one that is slow.
func provenAfter(k rehearsal.FaultKind, stuck int64) int64 {
	//exhaustive:ignore
	switch k {
	case rehearsal.ProbeOpen, rehearsal.NotANumber, rehearsal.WrongUnit, rehearsal.BarometerUnit, rehearsal.BarometerLoss, rehearsal.Dropouts:
		return 0
	case rehearsal.ProbeStuck:
		return stuck + 2*second
	case rehearsal.ProbeShort, rehearsal.PressureLeak, rehearsal.PressureZeroShift:
		return tells
	}
	return -1
}

// signals follow the channels of a rig.
type signals struct {
	cfg    *pipeline.Config
	period int64
	begin  int64
	t      int64
	ch     []signal
	faults []fault
}

func newSignals(cfg *pipeline.Config, begin int64, faults []fault) *signals {
	s := &signals{cfg: cfg, period: cfg.Align.Period, begin: begin, faults: faults, ch: make([]signal, len(cfg.Compute.Channels))}
	for i := range s.ch {
		s.ch[i].reads = math.NaN()
	}
	return s
}

// step enters the truth of a pack.
func (s *signals) step(t *rehearsal.Truth) {
	s.t = t.T
	for i := range s.ch {
		c := &s.ch[i]
		c.faulty, c.hidden = false, false
		for k := range s.faults {
			f := &s.faults[k]
			if since := s.t - s.begin - f.from; f.channel == i && f.heat == 0 && since >= -s.period && s.t-s.begin < f.to+recovers {
				c.faulty = true
				c.hidden = c.hidden || f.proven < 0 || since < f.proven || s.t-s.begin >= f.to
			}
		}
		c.truly = t.Indicated[i]
		if !t.Sent[i] {
			continue
		}
		v := c.truly
		if t.Late[i] {
			c.lo, c.hi, c.maybe = min(c.lo, v), max(c.hi, v), s.t
			continue
		}
		c.lo, c.hi, c.sure, c.maybe = v, v, s.t, s.t
		said, q := s.cfg.Compute.Channels[i].Convert(t.Raw[i])
		switch {
		case q == monitor.QualityGood:
			c.reads, c.refused = said, 0
		case c.refused == 0:
			c.reads, c.refused = math.NaN(), s.t
		}
	}
}

// known tells whether channel i has a usable value in the scan of now.
func (s *signals) known(i int) (sure, maybe bool) {
	c := &s.ch[i]
	hold := s.cfg.Align.Channels[i].Hold
	sure = c.sure != 0 && s.t-c.sure <= hold-s.period && c.refused == 0 && (!c.faulty || !c.hidden && c.reads == c.reads)
	maybe = c.maybe != 0 && s.t-c.maybe <= hold+s.period && (c.refused == 0 || s.t-c.refused <= 2*s.period)
	if p := s.port(i); p >= 0 {
		portSure, portMaybe := s.known(p)
		sure, maybe = sure && portSure, maybe && portMaybe
	}
	return sure, maybe
}

func (s *signals) port(i int) int {
	c := &s.cfg.Compute.Channels[i]
	if c.Reference != calib.Gauge {
		return -1
	}
	return c.Port
}

// absolute gives the range of channel i, a gauge pressure with its reference.
func (s *signals) absolute(i int) (lo, hi float64) {
	lo, hi = s.ch[i].lo, s.ch[i].hi
	if p := s.port(i); p >= 0 {
		pLo, pHi := s.absolute(p)
		lo, hi = lo+pLo, hi+pHi
	}
	return lo, hi
}

// u95 is the expanded uncertainty of a reading of channel i, as the rig file states
// it: systematic and random part.
func (s *signals) u95(i int, v float64) float64 {
	ch := &s.cfg.Compute.Channels[i]
	return math.Hypot(ch.Uncertainty.U95(v, ch.Low, ch.High), ch.Uncertainty.Random)
}

// group is the mean of a group of probes.
type group struct {
	lo, hi      float64
	sure, maybe bool // it has a value
	lost        int  // probes that are surely out
	doubtful    int  // probes that may be
}

// mean gives the range of the mean of probes, weights nil = all the same. A faulty
// probe may be in it with what is true, with what it says as long as nothing proves
// the fault, or be left out. g is what was before: without a value it stands.
func (s *signals) mean(g *group, list []int, weights []float64, least int) {
	var trueLo, trueHi, soundLo, soundHi, said, all, sound, saying float64
	surely, possibly := 0, 0
	g.lost, g.doubtful = 0, 0
	for k, i := range list {
		w := 1.0
		if weights != nil {
			w = weights[k]
		}
		c := &s.ch[i]
		lo, hi := c.lo, c.hi
		if c.sure != s.t { // the true mean goes on
			lo, hi = min(lo, c.truly), max(hi, c.truly)
		}
		pLo, pHi := 0.0, 0.0
		if p := s.port(i); p >= 0 {
			pLo, pHi = s.absolute(p)
		}
		all += w
		trueLo, trueHi = trueLo+w*(lo+pLo), trueHi+w*(hi+pHi)
		sure, maybe := s.known(i)
		if !c.faulty {
			sound += w
			soundLo, soundHi = soundLo+w*(lo+pLo), soundHi+w*(hi+pHi)
			saying += w
			said += w * ((lo+hi)/2 + pLo)
		} else if c.hidden && c.reads == c.reads {
			saying += w
			said += w * (c.reads + pLo)
		}
		if sure && !c.faulty {
			surely++
		} else {
			g.doubtful++
		}
		if maybe {
			possibly++
		} else {
			g.lost++
		}
	}
	g.sure, g.maybe = surely >= least, possibly >= least
	if !g.maybe {
		return
	}
	g.lo, g.hi = trueLo/all, trueHi/all
	if sound > 0 {
		g.lo, g.hi = min(g.lo, soundLo/sound), max(g.hi, soundHi/sound)
	}
	if saying > 0 {
		g.lo, g.hi = min(g.lo, said/saying), max(g.hi, said/saying)
	}
}
