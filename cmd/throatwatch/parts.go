package main

import (
	"context"
	"fmt"
	"math"
	"sync"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard/webhook"
	"throatwatch/monitor/influx"
	"throatwatch/rules/pipeline"
)

const (
	// partsEvery is how often the disk and the parts that take alarms and values to
	// others are looked at, and partsAgain how often a failure is told again with its figure.
	partsEvery = time.Second
	partsAgain = 30 * time.Second
	// lagAtMost is how far the site's database may be behind while it takes what it
	// gets, s: chunks close every 10 s.
	lagAtMost = 120
)

// part is how a part stands.
type part struct {
	ok     bool
	why    string
	behind float64 // as in pipeline.HealthChange
}

// diskWatch looks at the disk of the data folder.
type diskWatch struct {
	mu   sync.Mutex // protects part
	part part
}

func (d *diskWatch) standing() part {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.part
}

// run looks each second until ctx ends. Nobody waits for its end: a disk that hangs
// does not answer.
func (d *diskWatch) run(ctx context.Context, dir string, disk watch.Disk) {
	tick := time.NewTicker(partsEvery)
	defer tick.Stop()
	for {
		free, err := watch.FreeSpace(dir)
		now := part{}
		if err != nil {
			now.why = err.Error()
		} else {
			var low bool
			low, now.why = disk.See(free, time.Now())
			now.ok, now.behind = !low, max(free/1e9, 1e-3) // 0 says that it is not known
		}
		d.mu.Lock()
		d.part = now
		d.mu.Unlock()
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
	}
}

// standing gives how the parts stand that there are.
func (w *watcher) standing() map[string]part {
	out := map[string]part{pipeline.PartDisk: w.disk.standing()}
	if w.site != nil {
		out[pipeline.PartDatabase] = databasePart(w.site.sink.Status(), time.Now())
	}
	if w.hook != nil {
		st := w.hook.sender.Status()
		out[pipeline.PartWebhook] = part{ok: st.State == webhook.Working, why: st.Why, behind: float64(st.Waiting)}
	}
	return out
}

// databasePart judges a sink.
func databasePart(st influx.Status, now time.Time) part {
	p := part{ok: st.State == influx.Working, why: st.Err}
	if st.Through == 0 {
		return p
	}
	p.behind = math.Round(now.Sub(time.Unix(0, st.Through)).Seconds())
	if p.ok && p.behind > lagAtMost {
		p.ok, p.why = false, fmt.Sprintf("it takes what is recorded too slowly, or catches up: %.0f s behind", p.behind)
	}
	return p
}

// watchParts tells the loop what becomes of the parts, by records, so that rules can
// judge it: when one fails or works again, and now and then while it fails.
func (w *watcher) watchParts(ctx context.Context) {
	tick := time.NewTicker(partsEvery)
	defer tick.Stop()
	failing := map[string]time.Time{} // when that was told last
	for {
		standing := w.standing()
		for _, name := range []string{pipeline.PartWebhook, pipeline.PartDatabase, pipeline.PartDisk} {
			p, there := standing[name]
			told, fails := failing[name]
			if !there || p.ok && !fails || !p.ok && fails && time.Since(told) < partsAgain {
				continue
			}
			if w.loop.Health(ctx, pipeline.HealthChange{Part: name, OK: p.ok, Why: p.why, Behind: p.behind}) != nil {
				return
			}
			if p.ok {
				delete(failing, name)
			} else {
				failing[name] = time.Now()
			}
			switch { // the database tells itself
			case p.ok != fails:
			case name == pipeline.PartWebhook:
				w.log.Warn("webhook", "receiver", w.hook.sender.Where(), "works", p.ok, "waiting", p.behind, "why", p.why)
			case name == pipeline.PartDisk:
				w.log.Warn("disk of the data folder", "folder", w.opt.data, "soon_full", !p.ok, "what", p.why)
			}
		}
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
	}
}
