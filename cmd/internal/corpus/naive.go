package corpus

import (
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// naiveNPR is the critical pressure ratio of cold air that many a sheet still uses:
// 1.893 at γ = 1.4 [NACA 1135, table II].
const naiveNPR = 1.89

// naive is what a simple alarm program would do with the same readings.
type naive struct {
	rules []naiveRule
}

// naiveRule compares a reading with a number, with a delay and nothing else.
type naiveRule struct {
	behaviour
	of    int // the rule of the corpus that it stands against
	text  string
	delay int64
	is    func(*pipeline.Config, *monitor.Scan) bool
	since int64
	gone  int64
	on    bool
}

// newNaive makes the naive rules of a rig: NPR of the rake over the barometer below
// 1.89 above the speed at which choke is armed, and for each band any probe of the
// harness above the limit for longer than its allowance.
func newNaive(cfg *pipeline.Config) *naive {
	n := &naive{}
	add := func(name, text string, delay int64, is func(*pipeline.Config, *monitor.Scan) bool) {
		i := slices.IndexFunc(cfg.Rules, func(r rules.Rule) bool { return r.Name == name })
		if i >= 0 {
			n.rules = append(n.rules, naiveRule{of: i, text: text, delay: delay, is: is})
		}
	}
	add("unchoke", "NPR over the barometer below 1.89", second*3/10, func(c *pipeline.Config, s *monitor.Scan) bool {
		st := &c.Compute.Stations
		p7 := 0.0
		for _, i := range st.P7 {
			p7 += said(c, s, i) / float64(len(st.P7))
		}
		baro := said(c, s, st.Barometer)
		return 60*said(c, s, st.Speed) >= c.Compute.Nozzle.ArmedAboveRPM && p7/baro < naiveNPR
	})
	for i := range cfg.Compute.EGT.Bands {
		b := &cfg.Compute.EGT.Bands[i]
		add("egt_"+b.Name+"_exceeded", "any EGT probe above the limit", b.Allowance, func(c *pipeline.Config, s *monitor.Scan) bool {
			if b.Kind == egt.KindStart && 60*said(c, s, c.Compute.Stations.Speed) >= c.Compute.Phase.Idle-c.Compute.Phase.IdleBand {
				return false
			}
			return slices.ContainsFunc(c.Compute.Stations.EGT, func(k int) bool { return said(c, s, k) > b.Limit })
		})
	}
	return n
}

// said gives what channel i says in SI, whatever speaks against it; a gauge pressure
// with what its reference says.
func said(c *pipeline.Config, s *monitor.Scan, i int) float64 {
	ch := &c.Compute.Channels[i]
	v, _ := ch.Convert(s.Raw[i])
	if slices.Contains(ch.Codes, s.Raw[i]) {
		v = ch.Unit.ToSI(s.Raw[i])
	}
	if ch.Reference == calib.Gauge {
		v += said(c, s, ch.Port)
	}
	return v
}

func (n *naive) step(c *pipeline.Config, s *monitor.Scan, host int64) {
	for i := range n.rules {
		r := &n.rules[i]
		switch is := r.is(c, s); {
		case is && r.since == 0:
			r.since, r.gone = s.T, 0
		case !is && r.gone == 0:
			r.since, r.gone = 0, s.T
		}
		switch {
		case !r.on && r.since != 0 && s.T-r.since >= r.delay:
			r.on = true
			r.raise(s.T, host)
		case r.on && r.gone != 0 && s.T-r.gone >= second:
			r.on = false
			r.end(s.T)
		}
	}
}
