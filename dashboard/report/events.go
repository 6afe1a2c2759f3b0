package report

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/pipeline"
)

// mostAlarms bounds the alarms that are listed.
const mostAlarms = 500

// raised is an alarm of the run as it ended up.
type raised struct {
	rules.Alarm
	firstOut bool  // it was at some time
	cleared  int64 // when its condition was gone last; 0 = it is there
}

// change is a configuration that came into force or was refused.
type change struct {
	t      int64
	ok     bool
	text   string
	config pipeline.InForce
}

// happenings are the events of a run.
type happenings struct {
	alarms  []raised // by their raise
	dropped int      // alarms beyond mostAlarms
	by      [rules.Warning + 1]int
	marks   []monitor.Mark
	changes []change
}

// readEvents reads the alarms, marks and configurations of a run from its begin on.
func readEvents(ctx context.Context, f *runfile.File, from int64) (*happenings, error) {
	h := &happenings{}
	err := f.Events(ctx, from, math.MaxInt64, func(e *runfile.Event) error {
		var err error
		switch e.Kind {
		case "alarm":
			var a rules.Alarm
			if err = json.Unmarshal(e.JSON, &a); err == nil {
				h.alarm(&a)
			}
		case "mark":
			m := monitor.Mark{}
			err = json.Unmarshal(e.JSON, &m)
			m.T = e.T
			h.marks = append(h.marks, m)
		case "config":
			var c struct {
				OK     bool              `json:"ok"`
				Text   string            `json:"text"`
				Config *pipeline.InForce `json:"config"`
			}
			err = json.Unmarshal(e.JSON, &c)
			one := change{t: e.T, ok: c.OK, text: c.Text}
			if c.Config != nil {
				one.config = *c.Config
			}
			h.changes = append(h.changes, one)
		}
		if err != nil {
			return fmt.Errorf("%s %d.%d: %w", e.Kind, e.Epoch, e.N, err)
		}
		return nil
	})
	slices.SortStableFunc(h.alarms, func(a, b raised) int { return int(min(max(a.Raised-b.Raised, -1), 1)) })
	return h, err
}

// alarm takes a change of an alarm in.
func (h *happenings) alarm(a *rules.Alarm) {
	if a.Raised == 0 {
		return // put aside without having been raised
	}
	i := slices.IndexFunc(h.alarms, func(r raised) bool { return r.ID == a.ID })
	if i < 0 {
		if len(h.alarms) == mostAlarms {
			h.dropped++
			return
		}
		i = len(h.alarms)
		h.alarms = append(h.alarms, raised{})
		h.by[a.Priority]++
	}
	r := &h.alarms[i]
	if a.Revision < r.Revision {
		return // events lie by event time, which is host time for alarms on the daemon
	}
	r.Alarm, r.firstOut = *a, r.firstOut || a.FirstOut
	switch alarm.State(a.State) {
	case alarm.Unacknowledged, alarm.Acknowledged:
		r.cleared = 0
	case alarm.Normal, alarm.ReturnedUnacknowledged, alarm.LatchedUnacknowledged, alarm.LatchedAcknowledged:
		if r.cleared == 0 {
			r.cleared = int64(a.Changed)
		}
	case alarm.Shelved, alarm.SuppressedByDesign, alarm.OutOfService, alarm.NumStates:
	}
}
