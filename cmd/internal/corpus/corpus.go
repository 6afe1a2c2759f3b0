// Package corpus measures how often alarms are missed, false or chattering: it plays
// seeded rehearsals through the step in process, as fast as the machine goes, and
// judges every alarm by the truth behind the readings.
//
// Truth comes from the noiseless indicated signals of the rehearsal (what sound
// instruments of the same lag would read), from the limits of the rig file and from
// the documented meaning of each rule, and not from the code under test: clocks of
// allowances, choke margin, phases and the mean of a harness are worked out here
// again, in a simpler way. An event that exceeds its limit by more than U95 for
// longer than the on-delay must alarm; what stays below by more than U95 must not; in
// between an alarm is free to come or not. U95 is that of the rig file for the
// sensors; what the nozzle model may be off by is left out, since the rehearsed
// nozzle is exact: that asks more, not less.
//
// An alarm must be there within the lateness of scans and two scans after it is due.
// One that comes later counts as missed. While a fault of a probe is not proven yet
// the mean may be with it, without it, or as it truly is.
//
// Beside the rules of the rig run naive ones on the same readings: a fixed critical
// NPR of 1.89 over the barometer, and any single EGT probe against the limit.
package corpus

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"sync"

	"throatwatch/cmd/internal/config"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// Options say how much is played.
type Options struct {
	Seed    uint64
	Hours   float64 // of calm running; 0 = 300
	Events  float64 // times the usual number of runs with events, which gives at least 300 events per warning; 0 = 1
	Workers int     // 0 = 1
	kinds   int     // only the first kinds of runs with events; 0 = all
}

// Corpus is a rig with its rules, ready to be measured.
type Corpus struct {
	cfg    pipeline.Config
	bundle []byte
	parse  func([]byte) (pipeline.Config, error)
}

// Open reads a rig file.
func Open(rig string) (*Corpus, error) {
	b, cfg, faults := config.Load(rig)
	if len(faults) > 0 {
		return nil, fmt.Errorf("corpus: %s", faults[0])
	}
	c := &Corpus{cfg: cfg, bundle: b.Marshal(), parse: func(bundle []byte) (pipeline.Config, error) {
		cfg, faults := config.Parse(bundle)
		if len(faults) > 0 {
			return cfg, errors.New(faults[0].String())
		}
		return cfg, nil
	}}
	st := &cfg.Compute.Stations
	if len(st.EGT) == 0 || len(st.P7) == 0 || st.ExitPlane < 0 || st.Barometer < 0 || st.Speed < 0 || st.FuelFlow < 0 || len(cfg.Compute.EGT.Bands) == 0 {
		return nil, fmt.Errorf("corpus: %s: a rig with EGT bands, rake, exit plane, barometer, speed and fuel flow is needed", rig)
	}
	return c, nil
}

// channel gives the index of a channel, -1 when there is none.
func (c *Corpus) channel(id string) int {
	return slices.IndexFunc(c.cfg.Compute.Channels, func(ch compute.Channel) bool { return ch.ID == id })
}

// Run plays the corpus. progress, if there is one, is told after each run how many of
// how many are played; it must bear to be called from several goroutines in turn.
// What is measured depends on rig file, options and build alone, not on Workers.
func (c *Corpus) Run(ctx context.Context, o Options, progress func(done, of int)) (*Report, error) {
	if o.Hours == 0 {
		o.Hours = 300
	}
	if o.Events == 0 {
		o.Events = 1
	}
	type job struct{ kind, n int }
	var jobs []job
	for k := range kinds {
		if o.kinds > 0 && k >= o.kinds {
			break
		}
		for n := range max(1, int(float64(kinds[k].runs)*o.Events)) {
			jobs = append(jobs, job{k, n})
		}
	}
	for n := range int(o.Hours*1.14*3600/calmFor) + 1 { // a part of each hour is no calm
		jobs = append(jobs, job{-1, n})
	}

	var (
		mu      sync.Mutex // protects next, done, failed and results
		next    int
		done    int
		failed  error
		results = make([]*result, len(jobs))
		wg      sync.WaitGroup
	)
	for range max(1, o.Workers) {
		wg.Go(func() { // ends with the jobs, with ctx, or with the first error
			for {
				mu.Lock()
				i := next
				next++
				stop := i >= len(jobs) || failed != nil || ctx.Err() != nil
				mu.Unlock()
				if stop {
					return
				}
				r := newRun(&c.cfg, o.Seed, jobs[i].kind, jobs[i].n)
				res, err := c.play(r)
				mu.Lock()
				if err != nil {
					failed = errors.Join(failed, fmt.Errorf("corpus: %s run %d: %w", r.kind, jobs[i].n, err))
				}
				results[i] = res
				done++
				if progress != nil {
					progress(done, len(jobs))
				}
				mu.Unlock()
			}
		})
	}
	wg.Wait()
	if err := errors.Join(failed, ctx.Err()); err != nil {
		return nil, err
	}

	report := c.newReport(o)
	for i, res := range results {
		kind := "calm"
		if jobs[i].kind >= 0 {
			kind = kinds[jobs[i].kind].name
		}
		report.add(kind, jobs[i].n, res)
	}
	return report, nil
}

// newReport gives a report with a row for each rule that is judged.
func (c *Corpus) newReport(o Options) *Report {
	r := &Report{Seed: o.Seed}
	for _, one := range ruleList(&c.cfg) {
		r.Rows = append(r.Rows, Row{Rule: one.Name, priority: one.Priority})
	}
	for _, n := range newNaive(&c.cfg).rules {
		r.Naive = append(r.Naive, Row{Rule: c.cfg.Rules[n.of].Name, Naive: true, Text: n.text, priority: rules.Warning})
	}
	return r
}

// Short is the part that is played with every change of the code.
func Short(workers int) Options { return Options{Seed: 1, Hours: 0.4, Events: 0.01, Workers: workers} }
