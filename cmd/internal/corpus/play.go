package corpus

import (
	"encoding/json"
	"fmt"
	"runtime"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/ingest"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const (
	// tick is the host time after which a tick is recorded where nothing else is, ns.
	tick = second / 10
	// catchesUp is the host time that a daemon needs after a restart until it is live
	// again, ns: what the broker kept comes at once, but the last of it is waited for.
	catchesUp = 3 * second
	// redelivery is the host time between messages that the broker kept, ns.
	redelivery = second / 5000
)

// restart is a daemon that dies and comes back. In between the broker keeps what
// is published.
type restart struct {
	at, down int64 // ns since the begin, and how long
}

// daemon is the step with what feeds it.
type daemon struct {
	parse  func([]byte) (pipeline.Config, error)
	bundle []byte
	m      *pipeline.Machine
	s      *pipeline.State
	boots  int
	filter []string
	kept   []ingest.Record // by the broker, while the daemon is down
	until  int64           // host time until which it is down, 0 = it is up
	each   func(o *pipeline.Outcome, host int64)
}

func (d *daemon) take(r *ingest.Record) {
	r.Seq = d.s.Seq + 1
	r.Host = max(r.Host, d.s.Host)
	outs := d.m.Step(d.s, r)
	for i := range outs {
		d.each(&outs[i], r.Host)
	}
}

// boot begins a life of the daemon: boot, configuration, sessions.
func (d *daemon) boot(host int64) error {
	d.boots++
	text, err := json.Marshal(pipeline.Boot{Epoch: uint64(d.boots), Build: "corpus", GOARCH: runtime.GOARCH})
	if err != nil {
		return fmt.Errorf("corpus: boot record: %w", err)
	}
	d.take(&ingest.Record{Kind: ingest.KindBoot, Host: host, Payload: text})
	d.take(&ingest.Record{Kind: ingest.KindConfig, Host: host, Payload: d.bundle})
	for _, f := range d.filter {
		d.take(&ingest.Record{Kind: ingest.KindConnect, Host: host, Topic: f})
	}
	return nil
}

// die ends a life; of it remains what a full checkpoint holds.
func (d *daemon) die(until int64) error {
	b, err := d.s.Encode(true)
	if err != nil {
		return err
	}
	if d.s, err = pipeline.Decode(b); err != nil {
		return err
	}
	d.m, d.until = pipeline.NewMachine(d.parse), until
	return d.m.Restore(d.s)
}

// pass lets host time come to host: a restart that is due, and ticks.
func (d *daemon) pass(host int64) error {
	if d.until != 0 && host >= d.until {
		at := d.until
		d.until = 0
		if err := d.boot(at); err != nil {
			return err
		}
		for i := range d.kept {
			at += redelivery
			d.kept[i].Host = at
			d.take(&d.kept[i])
		}
		d.kept = d.kept[:0]
	}
	for d.until == 0 && host-d.s.Host > tick {
		d.take(&ingest.Record{Kind: ingest.KindTick, Host: d.s.Host + tick})
	}
	return nil
}

// message brings a message that is published at host.
func (d *daemon) message(m *rehearsal.Message, host int64) error {
	if err := d.pass(host); err != nil {
		return err
	}
	r := ingest.Record{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Host: host, Topic: m.Topic, Payload: m.Payload}
	if d.until != 0 {
		d.kept = append(d.kept, r)
		return nil
	}
	d.take(&r)
	return nil
}

// result is what a run says of each rule, in the order of the configuration, and of
// each naive rule.
type result struct {
	rules   []Count
	naive   []Count
	mishaps []Mishap
	hours   float64 // without a reason for a warning or caution
	scans   uint64
}

// play plays a run through rehearsal and step, and judges every alarm.
func (c *Corpus) play(r *run) (*result, error) {
	cfg := &c.cfg
	rig, err := rehearsal.New(*cfg, rehearsal.Options{
		Seed: r.seed, Rate: float64(second) / float64(cfg.Align.Period), Start: begin,
		Plan: r.plan, Day: r.day, Noise: r.noise, Error: r.error, Faults: r.faults, Changes: r.changes,
	})
	if err != nil {
		return nil, err
	}
	tr := newTruth(cfg, begin, c.sensorFaults(r.faults), r.health)
	index := make(map[string]int, len(tr.rules))
	for i := range tr.rules {
		index[tr.rules[i].Name] = i
	}
	did := make([]behaviour, len(tr.rules))
	simple := newNaive(cfg)
	d := &daemon{parse: c.parse, bundle: c.bundle, m: pipeline.NewMachine(c.parse), s: &pipeline.State{}}
	for _, in := range cfg.Align.Inputs {
		d.filter = append(d.filter, in.Filter)
	}
	d.each = func(o *pipeline.Outcome, host int64) {
		//exhaustive:ignore
		switch o.Kind {
		case pipeline.OutcomeAlarm:
			i, ok := index[o.Alarm.Rule]
			if !ok {
				panic("corpus: alarm of a rule that is not listed: " + o.Alarm.Rule)
			}
			did[i].alarm(o.Alarm, o.T, host)
		case pipeline.OutcomePoint:
			simple.step(cfg, o.Scan, host)
		}
	}
	if err := d.boot(begin - second); err != nil {
		return nil, err
	}

	var (
		out    result
		msgs   []rehearsal.Message
		now    rehearsal.Truth
		health = healthRecords(r.health)
		calm   int64
	)
	restarts := r.restarts
	for more := true; more; {
		if msgs, more = rig.Next(msgs[:0]); more {
			rig.Truth(&now)
			if r.astray(now.T - begin) {
				for i := range now.Late {
					now.Late[i] = true
				}
			}
			tr.step(&now, r.skewed(now.T-begin))
			if tr.calm() {
				calm += cfg.Align.Period
			}
		}
		for ; len(health) > 0 && begin+health[0].at <= now.T; health = health[1:] {
			if err := d.pass(begin + health[0].at); err != nil {
				return nil, err
			}
			d.take(&ingest.Record{Kind: ingest.KindHealth, Host: begin + health[0].at, Payload: health[0].payload})
		}
		if len(restarts) > 0 && begin+restarts[0].at <= now.T {
			if err := d.die(begin + restarts[0].at + restarts[0].down); err != nil {
				return nil, err
			}
			restarts = restarts[1:]
		}
		for i := range msgs {
			if err := d.message(&msgs[i], msgs[i].At+msgs[i].Delay); err != nil {
				return nil, err
			}
		}
		if err := d.pass(now.T); err != nil {
			return nil, err
		}
	}

	t := terms{period: cfg.Align.Period, slack: 3*cfg.Align.Period + cfg.Align.Lateness, allowed: cfg.Align.Lateness + 2*cfg.Align.Period}
	for _, one := range r.restarts {
		t.outages = append(t.outages, span{begin + one.at, begin + one.at + one.down + catchesUp})
	}
	for i := range tr.expect {
		n, bad := tr.expect[i].judge(&did[i], &t)
		out.rules = append(out.rules, n)
		if tr.rules[i].Priority > rules.Advisory || n.Expected > 0 {
			out.mishaps = append(out.mishaps, bad...)
		}
	}
	for i := range simple.rules {
		n, _ := tr.expect[simple.rules[i].of].judge(&simple.rules[i].behaviour, &t)
		out.naive = append(out.naive, n)
	}
	for i := range out.mishaps {
		out.mishaps[i].At -= begin
	}
	if r.calm {
		out.hours = float64(calm) / 3600e9
	}
	out.scans = d.s.Align.N
	return &out, nil
}

// calm tells whether nothing that truly is gives a reason for a warning or caution.
func (tr *truth) calm() bool {
	for i := range tr.expect {
		if e := &tr.expect[i]; tr.rules[i].Priority > rules.Advisory && len(e.free) > 0 && e.free[len(e.free)-1].to == tr.t {
			return false
		}
	}
	return true
}

// sensorFaults are the faults that strike one sensor, and streaks of hot gas.
func (c *Corpus) sensorFaults(list []rehearsal.Fault) []fault {
	var out []fault
	for _, f := range list {
		i := c.channel(f.Channel)
		if i < 0 {
			continue
		}
		one := fault{channel: i, from: int64(f.At), to: int64(f.At + f.For), proven: provenAfter(f.Kind, c.cfg.Compute.Channels[i].Stuck)}
		if f.Kind == rehearsal.HotStreak {
			one.heat = rehearsal.StreakHeat
			if f.Size > 0 {
				one.heat *= f.Size
			}
		}
		out = append(out, one)
	}
	return out
}

type healthRecord struct {
	at      int64
	payload []byte
}

// healthRecords are the records of a list of health that does not overlap.
func healthRecords(list []health) []healthRecord {
	var out []healthRecord
	for _, h := range list {
		for _, ok := range [...]bool{false, true} {
			text, err := json.Marshal(pipeline.HealthChange{Part: h.part, OK: ok})
			if err != nil {
				panic(err) // strings only: cannot fail
			}
			at := h.from
			if ok {
				at = h.to
			}
			out = append(out, healthRecord{at, text})
		}
	}
	return out
}
